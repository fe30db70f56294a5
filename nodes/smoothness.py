"""How smooth the noise of a stack of maps is, from the residuals of neighbouring voxels.

Definitions
-----------
r_jv is the residual of row j at voxel v with nu degrees of freedom, u_jv = r_jv / ||r_v||, and
rho = sum_j u_j(v) u_j(v+1) the correlation of two neighbours along an axis. Over all pairs of
neighbours that are both in the mask,

    lambda = (nu - 2) / (nu - 1)  mean of  sum_j (u_j(v+1) - u_j(v))^2  =  ... mean of 2 - 2 rho
    FWHM   = sqrt(-2 ln 2 / ln(1 - lambda / 2))

The factor is for residuals being divided by an estimated spread (Kiebel et al. 1999, NeuroImage
10:756-766). The FWHM is that of the Gaussian kernel which smoothed white noise must have met to
correlate so over one voxel; it is exact where the usual sqrt(4 ln 2 / lambda) takes the
difference for a derivative and reads 2 voxels as 2.18. With few rows the factor does too much:
simulated, a width of 3 voxels reads 1, 3, 5 and 10 % too wide at nu = 19, 9, 6 and 4.

With S = sum_j x_j, Q = sum_j x_j^2 and C(v) = sum_j x_j(v) x_j(v+1), rho is
(C - S(v) S(v+1) / n) over the root of (Q - S^2 / n) at both. Q and C do not change when signs of
rows are flipped: a flip of the data needs its new S and no more.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from .errors import InputError
from .groupmaps import Missing, filled
from .space import Grid

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]
Pairs = tuple[Ints, Ints]

# A sum of squares below this share of the whole is rounding.
_FLAT = 64 * np.finfo(float).eps


def axis_pairs(grid: Grid, usable: Bools | None = None) -> tuple[Pairs, Pairs, Pairs]:
    """The neighbours along each axis, as two lists of features each.

    Parameters
    ----------
    grid : Grid
    usable : (n_features,) bool, optional
        Pairs with a feature that is not are left out (one that lacks some rows' data).

    Examples
    --------
    >>> [len(here) for here, _ in axis_pairs(Grid((3, 2, 1), np.eye(4)))]
    [4, 3, 0]
    """

    def pairs(before: Ints) -> Pairs:
        keep = before >= 0
        if usable is not None:
            keep &= usable & usable[before]
        here = np.flatnonzero(keep)
        return before[here], here

    # The first three of the six offsets are one step back along each axis.
    back = grid.neighbours(6)
    return pairs(back[:, 0]), pairs(back[:, 1]), pairs(back[:, 2])


def pair_products(stack: Floats, pairs: Sequence[Pairs]) -> tuple[Floats, ...]:
    """The sum over rows of the product of both features of each pair; no flip of a row matters.

    Parameters
    ----------
    stack : (n_rows, n_features) float
        Zero where data is missing.
    pairs : per axis, two (n_pairs,) int

    Returns
    -------
    per axis, (n_pairs,) float64

    Examples
    --------
    >>> x = np.array([[1.0, 2.0], [3.0, -1.0]])
    >>> pair_products(x, axis_pairs(Grid((2, 1, 1), np.eye(4))))[0].tolist()
    [-1.0]
    """
    sums = tuple(np.zeros(len(one)) for one, _ in pairs)
    for row in stack:
        x = row.astype(np.float64, copy=False)
        for total, (one, other) in zip(sums, pairs, strict=True):
            np.add(total, x[one] * x[other], out=total)
    return sums


def fwhm_from_sums(
    n: int,
    S: npt.ArrayLike,
    Q: Floats,
    products: Sequence[Floats],
    pairs: Sequence[Pairs],
    df: int | None = None,
) -> Floats:
    """The FWHM along each axis from sums over rows: in voxels.

    Parameters
    ----------
    n : int
        Rows, all of which have data at the features of every pair.
    S : (..., n_features) float
        Sums; zero for residuals. Leading dimensions are maps: flips, folds.
    Q : (..., n_features) float
        Sums of squares.
    products : per axis, (..., n_pairs) float
        As of `pair_products`.
    pairs : per axis, two (n_pairs,) int
    df : int, optional
        Residual degrees of freedom; n - 1 is the default.

    Returns
    -------
    (..., 3) float64; NaN along an axis that no pair of features lies on (a map of one slice), 0
    where neighbours do not correlate. Features without variance count for nothing.

    Raises
    ------
    InputError
        With fewer than three degrees of freedom.

    Examples
    --------
    >>> x = np.array([[1.0, 2.0], [3.0, 3.5], [2.0, 2.0], [6.0, 7.0]])
    >>> pairs = axis_pairs(Grid((2, 1, 1), np.eye(4)))
    >>> S, Q = x.sum(axis=0), (x * x).sum(axis=0)
    >>> fwhm_from_sums(4, S, Q, pair_products(x, pairs), pairs).round(3).tolist()
    [12.17, nan, nan]
    """
    nu = n - 1 if df is None else df
    if nu < 3:
        raise InputError(
            "too few rows to see how smooth their noise is",
            expected="at least 3 residual degrees of freedom (4 rows for a mean)",
            got=f"{nu}",
        )
    S = np.asarray(S, dtype=float)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        spread = Q - S * S / n
        weight = 1 / np.sqrt(np.where(spread > _FLAT * Q, spread, np.inf))
    weight[~np.isfinite(weight)] = 0
    widths = []
    for (one, other), product in zip(pairs, products, strict=True):
        both = weight[..., one] * weight[..., other]
        S_one, S_other = (S, S) if S.ndim == 0 else (S[..., one], S[..., other])
        with np.errstate(divide="ignore", invalid="ignore"):
            difference = np.where(both > 0, 2 - 2 * (product - S_one * S_other / n) * both, 0)
            # NaN when there is no pair: what an axis without neighbours has to say.
            roughness = (nu - 2) / (nu - 1) * difference.sum(axis=-1) / (both > 0).sum(axis=-1)
        widths.append(fwhm_of_roughness(roughness))
    return np.stack(widths, axis=-1)


def fwhm_of_roughness(roughness: npt.ArrayLike) -> Floats:
    """The FWHM in voxels whose neighbours differ by so much in the mean square (lambda).

    Examples
    --------
    >>> fwhm_of_roughness(2 - 2 * 0.5**0.5).round(6).item()
    2.0
    >>> fwhm_of_roughness([0.0, 2.0, 2.1]).tolist()
    [inf, 0.0, 0.0]
    """
    # Neighbours of smoothed white noise correlate by exp(-2 ln 2 / FWHM^2), never below zero.
    correlation = np.maximum(1 - np.asarray(roughness, dtype=float) / 2, 0)
    with np.errstate(divide="ignore"):
        width: Floats = np.sqrt(-2 * np.log(2) / np.minimum(np.log(correlation), -0.0))
    return width


def fwhm_of_residuals(
    residuals: Floats, grid: Grid, df: int, usable: Bools | None = None
) -> Floats:
    """The FWHM along each axis, from the residuals of any linear model: (3,) float64, voxels.

    Parameters
    ----------
    residuals : (n_rows, n_features) float
    grid : Grid
    df : int
        Residual degrees of freedom: rows less columns of the model.
    usable : (n_features,) bool, optional
        Where all rows have data.
    """
    pairs = axis_pairs(grid, usable)
    squares = np.zeros(residuals.shape[1])
    for row in residuals:
        squares += np.square(row, dtype=np.float64)
    products = pair_products(residuals, pairs)
    return fwhm_from_sums(len(residuals), 0.0, squares, products, pairs, df)


def fwhm_of_stack(effects: Floats, grid: Grid, missing: Missing | None = None) -> Floats:
    """The FWHM along each axis of a stack about its mean: (3,) float64, voxels.

    Parameters
    ----------
    effects : (n_rows, n_features) float
        Effect maps; at least four.
    grid : Grid
    missing : Missing, optional
        Features that lack any row's data are left out.

    Examples
    --------
    >>> from scipy.ndimage import gaussian_filter
    >>> noise = np.random.default_rng(1).normal(size=(24, 24, 24, 24))
    >>> smooth = gaussian_filter(noise, (0, *[3 / 8**0.5 / np.log(2) ** 0.5] * 3), mode="wrap")
    >>> fwhm_of_stack(smooth.reshape(24, -1), Grid((24, 24, 24), np.eye(4))).round(1).tolist()
    [3.0, 3.0, 3.0]
    """
    x, present = filled(effects, missing or Missing())
    complete = None if present is None else np.asarray(present.all(axis=0))
    pairs = axis_pairs(grid, complete)
    S, Q = np.zeros(x.shape[1]), np.zeros(x.shape[1])
    for row in x:
        S += row
        Q += np.square(row, dtype=np.float64)
    return fwhm_from_sums(len(x), S, Q, pair_products(x, pairs), pairs)


def resel_count(n_features: int, fwhm: Floats) -> float:
    """How many cubes of one FWHM each way would have the volume: resolution elements.

    Parameters
    ----------
    n_features : int
    fwhm : (3,) float, voxels
        Axes of NaN do not count.

    Examples
    --------
    >>> resel_count(5400, np.array([3.0, 3.0, 6.0])), resel_count(90, np.array([3.0, 3.0, np.nan]))
    (100.0, 10.0)
    """
    with np.errstate(divide="ignore"):
        return float(n_features / np.nanprod(fwhm))
