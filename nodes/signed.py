"""The folds' one-sample maps under signs of the rows, and a screen for those that matter.

How a flip is fast. The sums of squares of a fold do not change when signs are flipped, so the
bound that the fold's sum must exceed is computed once. A flip is one float32 matrix product
for the sums over all rows, one comparison of each feature with a bound that is low enough for
every fold and every rounding, and float64 work on the few features left: there the folds' own
sums are formed as `groupmaps.without_each` forms them, without the held-out rows, and decide.
With few folds each has a product of its own: their bounds are then tight, however many rows a
fold holds out.
A rule that ranks features has no such bound beforehand. The folds' exact maps at some features
that look strong give one for this flip: what does not reach the k-th value of these is not
among the k strongest.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .foldstack import FoldStack, by_exchange
from .groupmaps import bound_on_sum, fold_sums, t_from_sums

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# Relative rounding of a few float32 operations, generously.
_SINGLE = 1e-5
# So many folds at the most have a screen of their own each: with more, one for all is as tight.
_FEW_FOLDS = 12
# So many numbers that flips need again are kept at the most; of more, each flip makes its own.
_KEPT = 2**24
# The same of a float64 sum over rows.
_DOUBLE = 1e-9


@dataclass(frozen=True)
class _Bounds:
    """What makes flips of a threshold fast.

    Parameters
    ----------
    each : (n_features, n_folds) float64, or None
        What each fold's sum must exceed; of many features and folds there is no room for it.
    lowest : (n_features,) float32
        What the sum over all rows must exceed for any fold to pass; NaN where unknown.
    by_fold : (n_folds, n_features) float32, or None
        With few folds: what each fold's own float32 sum must exceed; NaN where unknown.
    """

    each: Floats | None
    lowest: Floats
    by_fold: Floats | None


@dataclass(frozen=True)
class _Ranks:
    """What makes flips of a rank fast: no fold can give a feature more than sum x scale + reach.

    Here the sum is that over all rows, in float32, or with few folds the fold's own; and what a
    fold gives is S / sqrt(n Q), which is t / sqrt(n - 1 + t^2), or the mean, according to the map.

    Parameters
    ----------
    scale : (1, n_features) float32, or (n_folds, n_features) with few folds
    reach : (n_features,) float32
        NaN where unknown; with the scale it is 0 where no fold's map can be above 0.
    most : float
        The most degrees of freedom of any fold; infinite for the mean.
    """

    scale: Floats
    reach: Floats
    most: float

    def least(self, value: float) -> float:
        """The least of sum x scale + reach with which a map can reach a value above 0."""
        reached = value if np.isinf(self.most) else value / np.sqrt(self.most + value * value)
        return float(reached * (1 - _SINGLE))


class SignedMaps:
    """One-sample maps of every fold, under signs; see `choosing.FoldMaps`.

    Parameters
    ----------
    stack : FoldStack
    critical : callable, optional
        The value t must exceed, for numbers of rows with data; for rules with a threshold.
    """

    def __init__(self, stack: FoldStack, critical: Callable[[Floats], Floats] | None) -> None:
        self.stack = stack
        self._critical = critical
        self._bounds: _Bounds | None = None
        self._ranks: dict[str, _Ranks] = {}
        self._kept_squares: Floats | None = None

    def counts(self, kind: str) -> Ints:
        """(n_folds,) features with a value in each fold's map; no signs change it."""
        found = np.zeros(len(self.stack.folds), dtype=np.intp)
        for block in self.stack.pieces():
            found += np.count_nonzero(self._usable(block, kind)[0], axis=1)
        return found

    def _usable(self, block: slice, kind: str) -> tuple[Bools, Floats]:
        """(n_folds, n_features) whether enough rows have data, and how many have."""
        n = self.stack.rows(block)
        n = np.broadcast_to(n, (len(n), block.stop - block.start))
        return n >= self.stack.least(kind), n

    def _bound_of(self, features: Ints | slice) -> Floats:
        """(n_folds, n_features) what each fold's sum must exceed; no signs change it."""
        assert self._critical is not None
        n = self.stack.rows(features)
        with np.errstate(over="ignore", invalid="ignore"):
            Q = self.stack.squares(features)
            bound = bound_on_sum(self._critical(n), n, Q)
        # A feature of zeros alone never passes; nor one where too few rows have data.
        bound[(Q == 0) | np.isnan(bound) | (n < self.stack.least())] = np.inf
        return bound

    def _thresholds(self) -> _Bounds:
        """What makes flips of a threshold fast, built when the first flip asks for it."""
        if self._bounds is None:
            shape = self.stack.n_features, len(self.stack.folds)
            each = np.empty(shape) if shape[0] * shape[1] <= _KEPT else None
            lowest = np.empty(shape[0], np.float32)
            few = shape[1] <= _FEW_FOLDS
            by_fold = np.empty(shape[::-1], np.float32) if few else None
            for block in self.stack.pieces():
                bound = self._bound_of(block)
                reach, slack, known = self.stack.most_off(block)
                with np.errstate(over="ignore", invalid="ignore"):
                    # NaN keeps a feature in.
                    lowest[block] = np.where(known, (bound - reach).min(axis=0) - slack, np.nan)
                    if by_fold is not None:
                        by_fold[:, block] = np.where(known, bound - slack, np.nan)
                if each is not None:
                    each[block] = bound.T
            self._bounds = _Bounds(each, lowest, by_fold)
        return self._bounds

    def _ranking(self, kind: str) -> _Ranks:
        """What makes flips of a rank fast, built when the first flip asks for it."""
        if kind not in self._ranks:
            few = len(self.stack.folds) <= _FEW_FOLDS
            reach = np.empty(self.stack.n_features, np.float32)
            scale = np.empty((len(self.stack.folds) if few else 1, len(reach)), np.float32)
            for block in self.stack.pieces():
                enough, n = self._usable(block, kind)
                off, slack, known = self.stack.most_off(block)
                with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
                    width = np.sqrt(n * self.stack.squares(block)) if kind == "t" else n
                    each = 1 / np.where(enough, width, np.inf)
                    by = each.max(axis=0)
                    off_side = 0 if few else off.max(axis=0)
                    far = (off_side + slack) * by * (1 + _SINGLE)
                    known &= np.isfinite(by.astype(np.float32)) & np.isfinite(far)
                    far[~known] = np.nan
                nothing = ~enough.any(axis=0) | (off == 0).all(axis=0)
                scale[:, block] = np.where(known & ~nothing, each if few else by, 0)
                reach[block] = np.where(nothing, 0, far)
            most = max(len(fold.selection) for fold in self.stack.folds) - 1
            self._ranks[kind] = _Ranks(scale, reach, most if kind == "t" else np.inf)
        return self._ranks[kind]

    def may_pass(self, signs: Floats) -> list[Ints]:
        """For each row of signs, the features that may be above the threshold in some fold."""
        bounds = self._thresholds()
        if bounds.by_fold is not None:
            return self.stack.may_reach(signs, bounds.by_fold)
        lowest = bounds.lowest
        return by_exchange(self.stack.all_sums(signs), lowest, len(signs))

    def may_lead(self, signs: Floats, k: int, kind: str) -> list[Ints]:
        """For each row of signs, the features that may be among the k strongest of some fold."""
        n_features = self.stack.n_features
        everything: Ints = np.arange(n_features)
        looked_at = 2 * k + 50
        if 2 * looked_at > n_features:
            return [everything] * len(signs)
        ranks, scores = self._ranking(kind), np.empty((len(signs), n_features), np.float32)
        with np.errstate(over="ignore", invalid="ignore"):
            if len(ranks.scale) == 1:
                for block, sums in self.stack.all_sums(signs):
                    np.multiply(sums, ranks.scale[0, block], out=scores[:, block])
            else:
                for block, of_folds in self.stack.side_sums(signs):
                    by = ranks.scale[:, block]
                    products = [s * scale for s, scale in zip(of_folds, by, strict=True)]
                    np.max(products, axis=0, out=scores[:, block])
        found: list[Ints] = []
        for row, score in zip(signs, scores, strict=True):
            strong = np.sort(np.argpartition(score, -looked_at)[-looked_at:])
            value = least_leader(self.maps(row, strong, kind), k)
            if 0 < value < np.inf:
                # Negated, so that what is not a number stays in.
                found.append(np.flatnonzero(~(score + ranks.reach < ranks.least(value))))
            else:
                found.append(everything)
        return found

    def _may_pass_in(self, signs: Floats, block: slice) -> Ints:
        """The features of a block that may be above the threshold, by the sums of all rows.

        S_-k <= S - min s_k and Q_-k >= Q - max q_k, with s_k and q_k the folds' own sums.
        """
        assert self._critical is not None
        stack, features = self.stack, np.arange(block.start, block.stop)
        if stack.there(block) is not None:
            return features
        x, n = stack.x[:, block], stack.rows(block)
        with np.errstate(over="ignore", invalid="ignore"):
            least = bound_on_sum(self._critical(n), n, np.ones_like(n)).min()
            parts = fold_sums(np.multiply(x, signs[:, None], order="C"), stack.folds)
            squares = fold_sums(x, stack.folds, square=True)
            Q = squares.sum(axis=0)
            highest = parts.sum(axis=0) - parts.min(axis=0) + _DOUBLE * np.sqrt(len(x) * Q)
            lowest = np.sqrt(np.maximum(Q * (1 - _DOUBLE) - squares.max(axis=0), 0))
            # Negated, so that what is not a number stays in.
            may: Ints = features[~(highest <= least * lowest)]
            return may

    def above(self, signs: Floats, features: Ints | slice) -> Bools:
        """(n_some_features, n_folds) whether t exceeds the critical value."""
        if isinstance(features, slice):
            may = self._may_pass_in(signs, features)
            out = np.zeros((features.stop - features.start, len(self.stack.folds)), bool)
            out[may - features.start] = self._bound_of(may).T < self.stack.sums(signs, may).T
            return out
        above = np.empty((len(features), len(self.stack.folds)), bool)
        for start in range(0, len(features), self.stack.piece):
            some = features[start : start + self.stack.piece]
            if self._bounds is None or self._bounds.each is None:
                bounds = self._bound_of(some).T
            else:
                bounds = np.take(self._bounds.each, some, axis=0)
            np.less(bounds, self.stack.sums(signs, some).T, out=above[start : start + len(some)])
        return above

    def maps(self, signs: Floats, features: Ints, kind: str) -> Floats:
        """(n_folds, n_some_features) the folds' maps; NaN where too few rows have data."""
        stack = self.stack
        maps = np.empty((len(stack.folds), len(features)))
        for start in range(0, len(features), stack.piece):
            some = features[start : start + stack.piece]
            n, S = stack.rows(some), stack.sums(signs, some)
            if kind == "mean":
                with np.errstate(invalid="ignore", divide="ignore"):
                    values: Floats = S / n
            else:
                values = t_from_sums(n, S, self._squares(some))
            lost = n < stack.least(kind)
            if lost.any():
                values = np.where(lost, np.nan, values)
            maps[:, start : start + stack.piece] = values
        return maps

    def _squares(self, features: Ints) -> Floats:
        """(n_folds, n_some_features) sums of squares, which no signs change."""
        stack = self.stack
        if not stack.turned or stack.n_features * len(stack.folds) > _KEPT:
            return stack.squares(features)
        if self._kept_squares is None:
            self._kept_squares = np.empty((len(stack.folds), stack.n_features))
            for block in stack.pieces():
                self._kept_squares[:, block] = stack.squares(block)
        return np.take(self._kept_squares, features, axis=1)


def least_leader(maps: Floats, k: int) -> float:
    """The least over folds of the k-th highest value of some features; NaN counts as lowest.

    Examples
    --------
    >>> least_leader(np.array([[1.0, 5.0, 3.0], [4.0, np.nan, 2.0]]), 2)
    2.0
    """
    maps[np.isnan(maps)] = -np.inf
    return float(np.partition(maps, -k, axis=1)[:, -k].min())
