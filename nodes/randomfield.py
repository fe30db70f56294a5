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

Both take the noise for a good lattice sample of a stationary smooth field: FWHM of about three
voxels at least (below, heights are too strict), the same everywhere (else clusters are too
easily large where it is smooth), and a high forming threshold for clusters.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

from .errors import InputError
from .space import Grid

Floats = npt.NDArray[np.floating]

_4LN2 = 4 * np.log(2)
# Expected Euler characteristics that never fall below alpha: no height is high enough.
_HIGHEST = 1e6


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
    edges, faces, cubes = np.array(cells.edges), np.array(cells.faces), cells.cubes
    # Along an axis lie the two kinds of faces that are not across it.
    lines = edges - (faces.sum() - faces) + cubes
    across = np.stack([r[..., 1] * r[..., 2], r[..., 0] * r[..., 2], r[..., 0] * r[..., 1]], -1)
    made: Floats = np.stack(
        [
            np.broadcast_to(cells.points - edges.sum() + faces.sum() - cubes, rough.shape),
            np.where(rough, np.inf, (r * lines).sum(axis=-1)),
            np.where(rough, np.inf, (across * (faces - cubes)).sum(axis=-1)),
            np.where(rough, np.inf, r.prod(axis=-1) * cubes),
        ],
        axis=-1,
    )
    return made


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
    made: Floats = np.stack(
        [
            tail,
            _4LN2**0.5 / two_pi * fall,
            _4LN2 / two_pi**1.5 * scale * h * fall,
            _4LN2**1.5 / two_pi**2 * (square - 1) * fall,
        ],
        axis=-1,
    )
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
    # Below its last turning point the expectation may cross alpha more than once: the last counts.
    steps = np.linspace(low, high, 257)
    above = np.flatnonzero(expected(steps) > alpha)
    if not len(above):
        return min(low, ceiling)
    low, high = float(steps[above[-1]]), float(steps[above[-1] + 1])
    while low < (middle := (low + high) / 2) < high:
        low, high = (middle, high) if expected(middle) > alpha else (low, middle)
    return min(high, ceiling)


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


def z_equivalent(t: float, df: float) -> float:
    """The z that is as improbable as a t.

    Examples
    --------
    >>> round(z_equivalent(3.579400, 19), 5)
    3.09023
    """
    return float(-special.ndtri(special.stdtr(df, -t)))


@dataclass(frozen=True)
class ClusterSizes:
    """The sizes of clusters that noise alone has above a height; sizes in features.

    A t map takes the z that is as improbable as its height (`z_equivalent`): the sizes are those
    of a Gaussian field, near for some twenty degrees of freedom and more.

    Parameters
    ----------
    n_features : int
        Of the search region.
    fwhm : (3,) float, voxels
        NaN along an axis without neighbours: the field has a dimension less.
    height : float
        The forming threshold, a z above 0.

    References
    ----------
    Friston et al. 1994, Human Brain Mapping 1:210-220.

    Examples
    --------
    >>> sizes = ClusterSizes(50_000, (3.0, 3.0, 3.0), 3.0902323)
    >>> round(sizes.expected_clusters, 4), round(sizes.expected_size, 4), round(sizes.beta, 4)
    (17.4543, 2.8646, 0.5994)
    >>> round(sizes.corrected_p(50), 7), sizes.critical_size(0.05)
    (0.0051027, 31.0)
    """

    n_features: int
    fwhm: tuple[float, float, float]
    height: float

    def __post_init__(self) -> None:
        if not self.height > 0:
            raise InputError(
                "a forming threshold too low", expected="a z above 0", got=f"{self.height:g}"
            )
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
        D, u = self.dimensions, self.height
        W = float(np.nanprod(self.fwhm)) / _4LN2 ** (D / 2)
        if W == 0:
            return np.inf
        density = (2 * np.pi) ** (-(D + 1) / 2) * u ** (D - 1) * np.exp(-u * u / 2)
        return float(self.n_features * density / W)

    @property
    def expected_size(self) -> float:
        """E[n], features in a cluster."""
        return float(self.n_features * special.ndtr(-self.height)) / self.expected_clusters

    @property
    def beta(self) -> float:
        """Of P(n >= k) = exp(-beta k^(2/D))."""
        D = self.dimensions
        with np.errstate(divide="ignore"):
            return float(np.divide(special.gamma(D / 2 + 1), self.expected_size) ** (2 / D))

    def p(self, size: float) -> float:
        """P(n >= size) of one cluster."""
        return float(np.exp(-self.beta * size ** (2 / self.dimensions)))

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
        exact = (max(0.0, -np.log(share)) / self.beta) ** (self.dimensions / 2)
        # A whole number that rounding has lifted by a hair is that number.
        return max(1.0, float(np.ceil(exact - 1e-9)))


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
