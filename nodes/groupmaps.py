"""Effect stacks to group maps, for one selection side or for all folds in one pass.

Definitions
-----------
x_jv is the effect of row j at feature v, zero where it is missing. For fold k, over the rows
that it does not hold out: n the number of rows with data, S the sum, Q the sum of squares, and

    t = S sqrt((n - 1) / (n Q - S^2))            (Student 1908, written in sums)

The sums of all folds come from running sums over the folds from the front and from the back:
S_-k = front_(k-1) + back_(k+1). The held-out rows never enter the arithmetic of their own
fold, so its map has the same bits whatever they hold.

"t exceeds c" is decided as S > c sqrt(n Q / (n - 1 + c^2)), for c > 0. The right side does not
change when signs of rows are flipped. Written in float64 sums, neither side cancels unless t^2
is near 1e16 / n, so sums serve as well as running means and deviations would, in fewer
operations, and a flip of the data goes through the very same arithmetic as the data.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .errors import InputError
from .folds import Fold

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# Features a block: large enough to hide the cost of a call, small enough for a cache.
_BLOCK = 8192
# n Q - S^2 below this share of n Q is rounding: the rows are all equal, and t is infinite.
_FLAT = 64 * np.finfo(float).eps


@dataclass(frozen=True)
class Missing:
    """What counts as no data, and how much of it a feature may lack.

    Parameters
    ----------
    zeros : bool
        Whether an exact zero is missing (outside the field of view). NaN and infinities
        always are.
    min_fraction : float
        The least share of a selection side's rows that must have data at a feature.
    """

    zeros: bool = True
    min_fraction: float = 0.8

    def __post_init__(self) -> None:
        if not 0 < self.min_fraction <= 1:
            raise InputError(
                "min_fraction out of range",
                expected="0 < min_fraction <= 1",
                got=str(self.min_fraction),
            )

    def present(self, effects: Floats) -> Bools:
        """Where there is data: the shape of `effects`, bool."""
        present: Bools = np.isfinite(effects)
        if self.zeros:
            present &= effects != 0
        return present

    def least(self, n_rows: int, kind: str = "t") -> int:
        """The number of rows that must have data for a feature to count.

        Two at the least for a t; one row has a mean.
        """
        return max(1 if kind == "mean" else 2, int(np.ceil(self.min_fraction * n_rows - 1e-9)))


def filled(effects: Floats, missing: Missing) -> tuple[Floats, Bools | None]:
    """The stack with zeros where data is missing, and where it is present (None: everywhere)."""
    present = missing.present(effects)
    if present.all():
        return effects, None
    return np.where(present, effects, effects.dtype.type(0)), present


def fold_sums(stack: Floats | Bools, folds: Sequence[Fold], *, square: bool = False) -> Floats:
    """Sums over each fold's held-out rows.

    Parameters
    ----------
    stack : (n_rows, n_features) float
        Zero where data is missing.
    folds : sequence of Fold
    square : bool
        Sum squares instead.

    Returns
    -------
    (n_folds, n_features) float64
    """
    with np.errstate(over="ignore"):  # an infinite square keeps its feature out of every mask
        x = np.square(stack, dtype=np.float64) if square else stack.astype(np.float64, copy=False)
    if len(folds) == len(x) and [f.held_out for f in folds] == [(k,) for k in range(len(x))]:
        return x
    out = np.zeros((len(folds), x.shape[1]))
    for k, fold in enumerate(folds):
        for row in fold.held_out:
            out[k] += x[row]
    return out


def without_each(parts: Floats) -> Floats:
    """For every k, the sum of all items but item k, from running sums of both ends.

    Parameters
    ----------
    parts : (n_folds, n_features) float64

    Returns
    -------
    (n_folds, n_features) float64; row k is a function of the other rows only.

    Examples
    --------
    >>> without_each(np.array([[1.0], [2.0], [np.inf]])).ravel().tolist()
    [inf, inf, 3.0]
    """
    out = np.empty_like(parts)
    out[-1] = 0
    for k in range(len(parts) - 2, -1, -1):
        np.add(out[k + 1], parts[k + 1], out=out[k])
    front = np.zeros_like(parts[0])
    for k in range(1, len(parts)):
        front += parts[k - 1]
        out[k] += front
    return out


def rows_with_data(present: Bools | None, folds: Sequence[Fold]) -> Floats:
    """How many rows of each fold's selection side have data at each feature.

    Parameters
    ----------
    present : (n_rows, n_features) bool, or None for everywhere
    folds : sequence of Fold

    Returns
    -------
    (n_folds, n_features) float64, or (n_folds, 1) when nothing is missing
    """
    if present is None:
        return np.array([[len(fold.selection)] for fold in folds], dtype=float)
    return without_each(fold_sums(present, folds))


def t_from_sums(n: Floats | float, S: Floats, Q: Floats) -> Floats:
    """Student's t of a mean against zero, from sums.

    Parameters
    ----------
    n : float or array
        Values with data; S, Q : array, their sum and sum of squares.

    Returns
    -------
    array; infinite where all values are equal and not zero, 0 where all are zero.

    Examples
    --------
    >>> x = np.array([1.0, 2.0, 4.0])
    >>> float(round(t_from_sums(3, x.sum(keepdims=True), (x * x).sum(keepdims=True))[0], 6))
    2.645751
    """
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        nQ = n * Q
        spread = nQ - S * S
        spread[spread <= _FLAT * nQ] = 0
        t: Floats = S * np.sqrt((n - 1) / spread)
    if not np.isfinite(t).all():
        t[(S == 0) | np.isnan(t)] = 0
    return t


def bound_on_sum(critical: Floats | float, n: Floats | float, Q: Floats) -> Floats:
    """The sum that must be exceeded for t to exceed a critical value above zero."""
    with np.errstate(over="ignore", invalid="ignore"):
        bound: Floats = critical * np.sqrt(n * Q / (n - 1 + np.square(critical)))
    return bound


def leave_out_maps(
    effects: Floats, folds: Sequence[Fold], missing: Missing | None = None, kind: str = "t"
) -> Floats:
    """The group map of every fold's selection side, in one pass over the stack.

    Parameters
    ----------
    effects : (n_rows, n_features) float
        Effect maps; rows sorted by label.
    folds : sequence of Fold
        Their held-out rows partition the rows.
    missing : Missing, optional
    kind : {"t", "mean"}

    Returns
    -------
    (n_folds, n_features), in the dtype of `effects`; NaN where too few rows have data.

    Examples
    --------
    >>> from sequester.nodes.folds import LeaveOneOut
    >>> effects = np.array([[1.0], [2.0], [3.0], [9.0]])
    >>> maps = leave_out_maps(effects, LeaveOneOut().folds(list("abcd")))
    >>> np.round(maps.ravel(), 4).tolist()
    [2.135, 1.8028, 1.5894, 3.4641]
    """
    missing = missing or Missing()
    check_stack(effects, folds)
    out = np.empty((len(folds), effects.shape[1]), dtype=effects.dtype)
    least = np.array([[missing.least(len(fold.selection), kind)] for fold in folds])
    for start in range(0, effects.shape[1], _BLOCK):
        block = slice(start, start + _BLOCK)
        x, present = filled(effects[:, block], missing)
        S = without_each(fold_sums(x, folds))
        n = rows_with_data(present, folds)
        if kind == "mean":
            with np.errstate(invalid="ignore", divide="ignore"):
                values: Floats = S / n
        else:
            values = t_from_sums(n, S, without_each(fold_sums(x, folds, square=True)))
        out[:, block] = np.where(n < least, np.nan, values)
    return out


def group_map(effects: Floats, missing: Missing | None = None, kind: str = "t") -> Floats:
    """The group map of all rows: (n_features,), NaN where too few rows have data.

    Examples
    --------
    >>> group_map(np.array([[1.0, 0.0], [2.0, 5.0], [3.0, 0.0]])).round(4).tolist()
    [3.4641, nan]
    """
    if effects.dtype.kind != "f":
        raise ValueError(f"effects are float, not {effects.dtype}")
    missing = missing or Missing()
    out = np.empty(effects.shape[1], effects.dtype)
    least = missing.least(len(effects), kind)
    for start in range(0, effects.shape[1], _BLOCK):
        x, present = filled(effects[:, start : start + _BLOCK].astype(np.float64), missing)
        n: Floats = np.asarray(
            float(len(effects)) if present is None else present.sum(axis=0, dtype=float)
        )
        S = x.sum(axis=0)
        if kind == "mean":
            with np.errstate(invalid="ignore", divide="ignore"):
                values = S / n
        else:
            with np.errstate(over="ignore"):
                values = t_from_sums(n, S, np.square(x).sum(axis=0))
        out[start : start + _BLOCK] = np.where(n < least, np.nan, values)
    return out


def check_stack(effects: Floats, folds: Sequence[Fold]) -> None:
    """Raise a `ValueError` when the folds do not partition the rows of a float stack."""
    if effects.ndim != 2 or effects.dtype.kind != "f":
        raise ValueError(
            f"effects are (n_rows, n_features) float, not {effects.shape} {effects.dtype}"
        )
    held = sorted(row for fold in folds for row in fold.held_out)
    if held != list(range(len(effects))):
        raise ValueError(f"the folds do not partition the {len(effects)} rows of the stack")
