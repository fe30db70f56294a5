"""Thresholds of smooth Gaussian and t maps from random field theory: heights and cluster sizes.

Definitions
-----------
The chance that noise exceeds a height h anywhere in a search region is near the expected Euler
characteristic of what exceeds it, for high h:

    P(max > h) ~ sum over d = 0..3 of R_d rho_d(h)        (Worsley et al. 1996, HBM 4:58-73)

R_d are the region's resels in d dimensions, rho_d the field's EC densities. A region's resels
follow from the points, edges, faces and cubes of its voxel lattice, each edge scaled by the FWHM
along its axis.

The size of a cluster above a height u of a Gaussian field in D dimensions has
P(n >= k) = exp(-beta k^(2/D)), and the number of clusters is near Poisson, so that

    P(any of size k) = 1 - exp(-E[m] P(n >= k))           (Friston et al. 1994, HBM 1:210-220)

A t field of few degrees of freedom has more clusters than a Gaussian one above the height that is
as improbable, most of them smaller, and a few larger: near a peak it is Z / R with a curvature
that varies, and the size of a cluster is distributed as

    c B^(D/2) (U^D / (V_0 .. V_D-1))^(1/2)                (Cao 1999, Adv Appl Prob 31:579-595)

with independent B ~ beta(1, (df - D)/2), U ~ chi2(df + 1 - D), V_i ~ chi2(df + 1 - i). In the
limit of many it is the Gaussian's. Simulated, with the smoothness read from the maps: chance of
any cluster at a level of .1 (p < .001, FWHM 2.8 voxels, 512 voxels), the Gaussian's sizes first:

    maps            6             8             12            20
               .206  .073    .153  .085    .130  .094    .108  .086

In a small box with edges (12 voxels each way), whose clusters are cut, it was up to .13 at .1, and
at .05 up to .06.

Both take the noise for a good lattice sample of a stationary smooth field: FWHM of about three
voxels at least (below, heights are too strict), the same everywhere (else clusters are too
easily large where it is smooth), and a high forming threshold for clusters.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import optimize, special

from .errors import InputError
from .space import Grid

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]

_4LN2 = 4 * np.log(2)
# Expected Euler characteristics that never fall below alpha: no height is high enough.
_HIGHEST = 1e6
# Below this the sizes of clusters are rounding.
_LEAST_CHANCE = 1e-13


@dataclass(frozen=True)
class Lattice:
    """What a voxel mask is made of: no smoothness enters, so it serves every flip of the data.

    Parameters
    ----------
    points : int
        Voxels.
    edges : (3,) int
        Pairs of neighbours along each axis.
    faces : (3,) int
        Squares of four voxels, across axis 0, 1, 2.
    cubes : int
        Cubes of eight.
    """

    points: int
    edges: tuple[int, int, int]
    faces: tuple[int, int, int]
    cubes: int


def lattice(grid: Grid) -> Lattice:
    """The points, edges, faces and cubes of the voxels in use.

    Examples
    --------
    >>> lattice(Grid((3, 2, 2), np.eye(4)))
    Lattice(points=12, edges=(8, 6, 6), faces=(3, 4, 4), cubes=2)
    """
    points = grid.filled(np.ones(grid.n_features, bool))

    def count(*axes: int) -> int:
        part = points
        for axis in axes:
            n = part.shape[axis]
            part = part.take(range(1, n), axis) & part.take(range(n - 1), axis)
        return int(part.sum())

    return Lattice(
        count(), (count(0), count(1), count(2)), (count(1, 2), count(0, 2), count(0, 1)),
        count(0, 1, 2),
    )  # fmt: skip


def resels(cells: Lattice, fwhm: Floats) -> Floats:
    """The resels of a voxel mask in 0, 1, 2 and 3 dimensions.

    Parameters
    ----------
    cells : Lattice
    fwhm : (..., 3) float, voxels
        NaN along an axis without neighbours.

    Returns
    -------
    (..., 4) float64; infinite above dimension 0 where a FWHM is 0.

    Examples
    --------
    >>> resels(lattice(Grid((31, 31, 31), np.eye(4))), np.array([3.0, 3.0, 3.0])).tolist()
    [1.0, 30.0, 300.0, 1000.0]
    """
    fwhm = np.asarray(fwhm, dtype=float)
    rough = (fwhm == 0).any(axis=-1)
    r = np.where(np.isnan(fwhm) | (fwhm == 0), 0, 1 / np.where(fwhm == 0, 1, fwhm))
    lines, across, euler = _parts(cells)
    r_across = np.stack([r[..., 1] * r[..., 2], r[..., 0] * r[..., 2], r[..., 0] * r[..., 1]], -1)
    made: Floats = np.stack(
        [
            np.broadcast_to(euler, rough.shape),
            np.where(rough, np.inf, (r * lines).sum(axis=-1)),
            np.where(rough, np.inf, (r_across * across).sum(axis=-1)),
            np.where(rough, np.inf, r.prod(axis=-1) * cells.cubes),
        ],
        axis=-1,
    )
    return made


def _parts(cells: Lattice) -> tuple[Ints, Ints, int]:
    """By what resels along and across each axis count, and the Euler characteristic."""
    edges, faces, cubes = np.array(cells.edges), np.array(cells.faces), cells.cubes
    # Along an axis lie the two kinds of faces that are not across it.
    lines = edges - (faces.sum() - faces) + cubes
    return lines, faces - cubes, int(cells.points - edges.sum() + faces.sum() - cubes)


def ec_densities(height: npt.ArrayLike, df: float | None = None) -> Floats:
    """Expected Euler characteristic per resel of what exceeds a height, in 0..3 dimensions.

    Parameters
    ----------
    height : (...) float
        Of z, or of t.
    df : float, optional
        Degrees of freedom of a t field, above 3; none means a Gaussian field.

    Returns
    -------
    (..., 4) float64

    Raises
    ------
    InputError
        With 3 degrees of freedom or fewer: such a field has no maximum in three dimensions.

    References
    ----------
    Worsley et al. 1996, Human Brain Mapping 4:58-73, table II.

    Examples
    --------
    >>> [f"{x:.6e}" for x in ec_densities(3.0)]
    ['1.349898e-03', '2.943999e-03', '5.866941e-03', '1.039282e-02']
    """
    h = np.asarray(height, dtype=float)
    if df is None:
        tail, fall, scale, square = special.ndtr(-h), np.exp(-h * h / 2), 1.0, h * h
    else:
        _check_df(df)
        tail, fall = special.stdtr(df, -h), (1 + h * h / df) ** (-(df - 1) / 2)
        scale = special.poch(df / 2, 0.5) / np.sqrt(df / 2)
        square = (df - 1) / df * h * h
    two_pi = 2 * np.pi
    made = np.empty((*h.shape, 4))
    made[..., 0] = tail
    made[..., 1] = _4LN2**0.5 / two_pi * fall
    made[..., 2] = _4LN2 / two_pi**1.5 * scale * h * fall
    made[..., 3] = _4LN2**1.5 / two_pi**2 * (square - 1) * fall
    return made


def _turning_point(df: float | None) -> float:
    """The height above which all four densities fall."""
    if df is None:
        return float(np.sqrt(3))
    _check_df(df)
    return float(np.sqrt(3 * df / (df - 3)))


def height_threshold(
    resels: Floats, df: float | None = None, alpha: float = 0.05, n_features: int | None = None
) -> float:
    """The height that noise exceeds anywhere in the region with a chance of at most alpha.

    Parameters
    ----------
    resels : (4,) float
    df : float, optional
        Of a t field; none means a Gaussian field.
    alpha : float
    n_features : int, optional
        Bonferroni's threshold over so many features is given where it is lower: on rough maps
        it is, and both are valid.

    Returns
    -------
    float, never below the threshold of a single feature; infinite when there is none.

    Examples
    --------
    >>> round(height_threshold(np.array([1.0, 30.0, 300.0, 1000.0])), 6)
    4.66714
    """
    _check_alpha(alpha)
    ceiling = np.inf if n_features is None else _quantile(alpha / n_features, df)
    if not np.isfinite(resels).all():
        return ceiling

    def expected(height: npt.ArrayLike) -> Floats:
        ec: Floats = ec_densities(height, df) @ resels
        return ec

    low = _quantile(alpha, df)
    high = max(2 * low, 2 * _turning_point(df))
    while expected(high) > alpha:
        high *= 2
        if high > _HIGHEST:
            return ceiling
    turn = max(low, _turning_point(df))
    if expected(turn) > alpha:
        low = turn
    else:
        # Below its last turning point the expectation may cross alpha more than once: the last
        # counts.
        steps = np.linspace(low, high, 257)
        above = np.flatnonzero(expected(steps) > alpha)
        if not len(above):
            return min(low, ceiling)
        low, high = float(steps[above[-1]]), float(steps[above[-1] + 1])
    exact = optimize.brentq(lambda height: float(expected(height)) - alpha, low, high, xtol=1e-13)
    return min(float(exact), ceiling)


def corrected_p(
    heights: npt.ArrayLike, resels: Floats, df: float | None = None, n_features: int | None = None
) -> Floats:
    """The chance that noise exceeds each height anywhere in the region: family-wise corrected p.

    Parameters
    ----------
    heights : (...) float
        Of peaks.
    resels : (4,) float
    df : float, optional
        Of a t field; none means a Gaussian field.
    n_features : int, optional
        As in `height_threshold`.

    Returns
    -------
    (...) float64; from the p of a single feature to 1.

    Examples
    --------
    >>> corrected_p([4.66714, 1.0], np.array([1.0, 30.0, 300.0, 1000.0])).round(6).tolist()
    [0.05, 1.0]
    """
    h = np.asarray(heights, dtype=float)
    single = special.ndtr(-h) if df is None else special.stdtr(df, -h)
    most = np.ones(h.shape) if n_features is None else np.minimum(1, n_features * single)
    if not np.isfinite(resels).all():
        return most
    at_turn = ec_densities(_turning_point(df), df) @ resels
    ec = ec_densities(h, df) @ resels
    # Low heights have holes, which the Euler characteristic subtracts: a lower height can only
    # be more likely to be exceeded.
    ec = np.where(h < _turning_point(df), np.maximum(ec, at_turn), ec)
    made: Floats = np.clip(ec, single, most)
    return made


def least_corrected_p(
    heights: Floats, cells: Lattice, most_fwhm: Floats, df: float, n_features: Ints
) -> Floats:
    """What `corrected_p` of several maps' peaks is not below, given what no FWHM is above.

    Parameters
    ----------
    heights : (n_maps,) float
        Of t.
    cells : Lattice
    most_fwhm : (n_maps, 3) float, voxels
    df : float
    n_features : (n_maps,) int

    Returns
    -------
    (n_maps,) float64; 0 for a region so full of holes that more resels make peaks less likely.

    Examples
    --------
    >>> cells, df = lattice(Grid((31, 31, 31), np.eye(4))), 25
    >>> peak, n = np.array([6.0]), np.array([29791])
    >>> least = least_corrected_p(peak, cells, np.full((1, 3), 3.3), df, n)
    >>> exact = corrected_p(peak, resels(cells, np.full(3, 3.0)), df, n[0])
    >>> bool(0 < least[0] <= exact[0])
    True
    """
    lines, across, _ = _parts(cells)
    if (lines < 0).any() or (across < 0).any():
        return np.zeros(len(heights))
    # From the last turn on, lower heights are more likely and all densities are above zero.
    h = np.maximum(heights, _turning_point(df))
    ec = (ec_densities(h, df) * resels(cells, most_fwhm)).sum(axis=-1)
    least: Floats = np.minimum(ec, n_features * special.stdtr(df, -h))
    return least


@cache
def _unit_sizes(df: float, dimensions: int) -> tuple[Floats, Floats]:
    """Log sizes over their mean, ascending, and the log chance of a cluster as large, of a t field.

    E[S^z] of a product of powers of beta and chi-square variables is a product of gammas; the
    chance is its Mellin transform turned back along Re z = 1, where the integrand falls
    exponentially and the trapezoidal rule is exact to rounding.
    """
    D = dimensions

    def log_moment(z: npt.ArrayLike) -> Any:
        """Of S / c."""
        z, last = np.asarray(z), (df - D) / 2 + 1
        found = special.gammaln(last) + special.loggamma(1 + z * D / 2)
        found = found - special.loggamma(last + z * D / 2)
        powers = [(df + 1 - D, D / 2), *((df + 1 - i, -0.5) for i in range(D))]
        for chi2, power in powers:
            found = found + z * power * np.log(2) - special.gammaln(chi2 / 2)
            found = found + special.loggamma(chi2 / 2 + z * power)
        return found

    along, step = 1 + 1j * np.linspace(0, 50, 501), 0.1
    log_size = np.linspace(-9, 14, 4097)
    moments = log_moment(along) - along * log_moment(1.0).real - np.log(along)
    weight = np.full(len(along), step / np.pi)
    weight[0] /= 2
    chance = np.array([float((weight * np.exp(moments - along * x).real).sum()) for x in log_size])
    kept = chance > _LEAST_CHANCE
    kept &= np.logical_and.accumulate(kept)
    falling = np.minimum.accumulate(np.minimum(chance[kept], 1))
    return log_size[kept], np.log(falling)


@dataclass(frozen=True)
class ClusterSizes:
    """The sizes of clusters that noise alone has above a height; sizes in features.

    Parameters
    ----------
    n_features : int
        Of the search region.
    fwhm : (3,) float, voxels
        NaN along an axis without neighbours: the field has a dimension less.
    height : float
        The forming threshold above 0, of z or of t.
    df : float, optional
        Degrees of freedom of a t field, above 3; none means a Gaussian field.

    References
    ----------
    Friston et al. 1994, Human Brain Mapping 1:210-220. Cao 1999, Advances in Applied Probability
    31:579-595.

    Examples
    --------
    >>> sizes = ClusterSizes(50_000, (3.0, 3.0, 3.0), 3.0902323)
    >>> round(sizes.expected_clusters, 4), round(sizes.expected_size, 4), round(sizes.beta, 4)
    (17.4543, 2.8646, 0.5994)
    >>> round(sizes.corrected_p(50), 7), sizes.critical_size(0.05)
    (0.0051027, 31.0)
    >>> ClusterSizes(50_000, (3.0, 3.0, 3.0), 4.024701, df=11).critical_size(0.05)
    23.0
    """

    n_features: int
    fwhm: tuple[float, float, float]
    height: float
    df: float | None = None

    def __post_init__(self) -> None:
        if not self.height > 0:
            raise InputError(
                "a forming threshold too low", expected="above 0", got=f"{self.height:g}"
            )
        if self.df is not None:
            _check_df(self.df)
        if not self.dimensions:
            raise InputError(
                "no axis along which features neighbour", got=f"FWHM {self.fwhm} voxels"
            )

    @property
    def dimensions(self) -> int:
        """Axes with a FWHM."""
        return int(np.count_nonzero(~np.isnan(self.fwhm)))

    @property
    def expected_clusters(self) -> float:
        """E[m], of any size; infinite when neighbours do not correlate."""
        D, ec = self.dimensions, ec_densities(self.height, self.df)
        volume = float(np.nanprod(self.fwhm))
        if volume == 0:
            return np.inf
        # Clusters without their holes: in three dimensions these are what the -1 in it counts.
        density = ec[D] + (_4LN2 / (2 * np.pi) * ec[1] if D == 3 else 0)
        return float(self.n_features * density / volume)

    @property
    def expected_size(self) -> float:
        """E[n], features in a cluster."""
        return self.n_features * _tail(self.height, self.df) / self.expected_clusters

    @property
    def beta(self) -> float:
        """Of P(n >= k) = exp(-beta k^(2/D)), in a Gaussian field."""
        D = self.dimensions
        with np.errstate(divide="ignore"):
            return float(np.divide(special.gamma(D / 2 + 1), self.expected_size) ** (2 / D))

    def p(self, size: float) -> float:
        """P(n >= size) of one cluster."""
        if self.df is None:
            return float(np.exp(-self.beta * size ** (2 / self.dimensions)))
        if not self.expected_size:
            return 0.0
        log_size, log_chance = _unit_sizes(self.df, self.dimensions)
        with np.errstate(divide="ignore"):
            at = np.log(size / self.expected_size)
        return float(np.exp(np.interp(at, log_size, log_chance, left=0.0, right=-np.inf)))

    def corrected_p(self, size: float) -> float:
        """The chance of any cluster of this size in the region: family-wise corrected p."""
        if np.isinf(self.expected_clusters):
            return 1.0
        return float(-np.expm1(-self.expected_clusters * self.p(size)))

    def critical_size(self, alpha: float = 0.05) -> float:
        """The least whole size with a corrected p of at most alpha; infinite when none has."""
        _check_alpha(alpha)
        share = -np.log1p(-alpha) / self.expected_clusters
        if share == 0:
            return np.inf
        if self.df is None:
            exact = (max(0.0, -np.log(share)) / self.beta) ** (self.dimensions / 2)
        else:
            log_size, log_chance = _unit_sizes(self.df, self.dimensions)
            # From large sizes to small, for the chance to rise.
            at = np.interp(
                np.log(share), log_chance[::-1], log_size[::-1], left=np.inf, right=-np.inf
            )
            exact = float(np.exp(at)) * self.expected_size
        # A whole number that rounding has lifted by a hair is that number.
        return max(1.0, float(np.ceil(exact - 1e-9)))


def _tail(height: float, df: float | None) -> float:
    return float(special.ndtr(-height) if df is None else special.stdtr(df, -height))


def _quantile(p: float, df: float | None) -> float:
    return float(-special.ndtri(p) if df is None else -special.stdtrit(df, p))


def _check_df(df: float) -> None:
    if not df > 3:
        raise InputError(
            "too few degrees of freedom for a t field in three dimensions",
            expected="above 3",
            got=f"{df:g}",
            remedy="take more rows, or a threshold by flips",
        )


def _check_alpha(alpha: float) -> None:
    if not 0 < alpha < 0.5:
        raise InputError("alpha out of range", expected="0 < alpha < 0.5", got=f"{alpha:g}")
