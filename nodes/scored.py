"""The folds' maps of a correlation with a score, under exchange of the scores, and a screen.

Definitions
-----------
x are the effects at a feature and w the scores, over the n rows of a fold's selection side:

    S_xy = sum w x - (sum w)(sum x) / n,   r = S_xy / sqrt(S_xx S_ww),
    t = r sqrt((n - 2) / (1 - r^2)),       slope = S_xy / S_ww

With the indicator of a group as the score this is the pooled two-sample t, and the slope is the
difference of the groups' means. S_xx does not change when scores are exchanged, and "t exceeds
c" is S_xy > rho sqrt(S_xx S_ww) with rho = c / sqrt(n - 2 + c^2). sum w x comes from running
sums of both ends; neither the map nor the score of anybody held out enters their fold.

The screen. Let a and b be the rows' effects and scores, centred over ALL rows and of unit
length, r = a'b, and for a fold a_F, b_F its held-out parts and m their number. Then

    r_k = (r - a_F'b_F - (sum a_F)(sum b_F) / n) / (c s),
    c^2 = 1 - |a_F|^2 - (sum a_F)^2 / n,    s^2 likewise from b,

so r must be above rho c s - |a_F||b_F| (1 + m / n) for any fold to pass, which has no exchange
in it when the largest scores stand for b_F. First that, for all features at once in float32;
then r_k in float32 at what is left; float64 decides at what is left of that. With few folds,
which hold out many rows each, that bound lets too much through: there r_k c is formed for all
features at once, as the product of a with the fold's own centred scores over their length.

A feature counts in a fold when every row of the selection side has data there.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from .foldstack import BLOCK, FoldStack, blocked_products, by_exchange
from .leading import leading, least_leader

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# A sum of squares below this share of the whole is rounding: the values are all equal.
_FLAT = 64 * np.finfo(float).eps
# In place of c where no fold has a value: out of reach, and still a number when times 0.
_NEVER = 1e9
# With so many folds at most, each is screened by a product of its own.
_FEW_FOLDS = 8


@dataclass(frozen=True)
class _Screen:
    """What every exchange reads.

    Parameters
    ----------
    rows : (n_rows, n_features) float32
        a; zero where unknown.
    by_feature : (n_features, n_rows) float32
        The same, turned.
    rest : (n_features, n_folds) float32
        c; NaN where unknown, huge where no fold has a value.
    by_fold : (n_folds, n_features) float32, or None
        The same, turned; for few folds.
    least_rest, most_held : (n_features,) float32
        The least c of any fold, and the largest |a_F| (1 + m / n); NaN where unknown.
    length : (n_features,) float32
        By which x was divided.
    """

    rows: Floats
    by_feature: Floats
    rest: Floats
    by_fold: Floats | None
    least_rest: Floats
    most_held: Floats
    length: Floats


class ScoredMaps:
    """Maps of the correlation with a score, of every fold; see `choosing.FoldMaps`.

    Parameters
    ----------
    stack : FoldStack
    critical : callable, optional
        The value t must exceed, for numbers of rows of a one-sample t (here: one fewer).
    scores : (n_rows,) float64
        As observed; an exchange gives the same numbers in another order.
    """

    def __init__(
        self, stack: FoldStack, critical: Callable[[Floats], Floats] | None, scores: Floats
    ) -> None:
        self.stack, self._critical, self._scores = stack, critical, scores
        self._sides = [list(fold.selection) for fold in stack.folds]
        self._n = np.array([[len(side)] for side in self._sides], dtype=float)
        self._held = np.zeros((len(scores), len(stack.folds)), np.float32)
        for k, fold in enumerate(stack.folds):
            self._held[list(fold.held_out), k] = 1
        self._chooses = self._held.T == 0
        self._one_each = np.array_equal(self._held, np.eye(len(scores)))
        self._built: _Screen | None = None
        # Rounding of a float32 product of two vectors of unit length, generously.
        self._slack = 8 * (len(scores) + 2) * float(np.finfo(np.float32).eps)

    # -- the maps ---------------------------------------------------------------------------

    def counts(self, kind: str) -> Ints:
        """(n_folds,) features with a value in each fold's map: the same for both kinds."""
        found = np.zeros(len(self.stack.folds), dtype=np.intp)
        for block in self.stack.batches():
            whole, n_features = self._whole(block), len(self.stack.numbers(block))
            found += np.count_nonzero(np.broadcast_to(whole, (len(whole), n_features)), axis=1)
        return found

    def above(self, weights: Floats, features: Ints | slice) -> Bools:
        """(n_some_features, n_folds) whether t exceeds the critical value."""
        Sxy, Sxx, Sww = self._products(weights, features)
        with np.errstate(invalid="ignore", over="ignore"):
            # A feature that does not vary never passes.
            above = (Sxx > 0) & (Sww > 0) & (Sxy > self._rho * np.sqrt(Sxx * Sww))
        return np.ascontiguousarray((above & self._whole(features)).T)

    def maps(self, weights: Floats, features: Ints, kind: str) -> Floats:
        """(n_folds, n_some_features) t or slope; NaN where there is no value."""
        maps = np.empty((len(self._sides), len(features)))
        for at in self.stack.batches(features):
            some = features[at]
            Sxy, Sxx, Sww = self._products(weights, some)
            with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
                if kind == "mean":
                    values: Floats = Sxy / Sww
                else:
                    left = Sxx * Sww - np.square(Sxy)
                    left[left <= _FLAT * Sxx * Sww] = 0
                    values = Sxy * np.sqrt((self._n - 2) / left)
                    values[Sxx == 0] = 0
            lost = (Sww == 0) | ~self._whole(some)
            maps[:, at] = np.where(lost, np.nan, values)
        return maps

    def _whole(self, features: Ints | slice) -> Bools:
        """(n_folds, n_some_features or 1) whether every row of the selection side has data."""
        whole: Bools = self.stack.rows(features) == self._n
        return whole

    @cached_property
    def _rho(self) -> Floats:
        """(n_folds, 1) the correlation that is the threshold."""
        assert self._critical is not None
        critical = self._critical(self._n - 1)
        rho: Floats = critical / np.sqrt(self._n - 2 + np.square(critical))
        return rho

    def _products(self, weights: Floats, features: Ints | slice) -> tuple[Floats, Floats, Floats]:
        """S_xy and S_xx, (n_folds, n_some_features), and S_ww, (n_folds, 1)."""
        chosen = np.where(self._chooses, weights, 0.0)
        W = chosen.sum(axis=1, keepdims=True)
        Sww = np.square(np.where(self._chooses, weights - W / self._n, 0.0)).sum(axis=1)[:, None]
        highest = np.where(self._chooses, weights, -np.inf).max(axis=1)
        Sww[highest == np.where(self._chooses, weights, np.inf).min(axis=1)] = 0
        with np.errstate(invalid="ignore", over="ignore"):
            S = self.stack.sums(np.ones(len(weights)), features)
            Q = self.stack.squares(features)
            Sxx = Q - S * S / self._n
            Sxx[Sxx <= _FLAT * Q] = 0
            Sxy = self.stack.sums(weights, features) - W * S / self._n
        return Sxy, Sxx, Sww

    # -- the screen -------------------------------------------------------------------------

    def may_pass(self, weights: Floats) -> list[Ints]:
        """For each row of weights, the features that may be above the threshold in some fold."""
        screen, scores, rho = self._screen(), _unit(weights), self._rho
        if screen.by_fold is not None:
            limit = (rho * screen.by_fold - self._slack).astype(np.float32)
            return [self._reaching(score, limit) for score in scores]
        single = rho[:, 0].astype(np.float32)
        lowest = self._lowest(screen, rho.min() * screen.least_rest * self._least_left())
        found = by_exchange(
            blocked_products(scores.astype(np.float32), screen.rows), lowest, len(weights)
        )
        return [
            self._left(
                features, score, lambda some, s: np.take(screen.rest, some, 0) * (single * s)
            )
            for features, score in zip(found, scores, strict=True)
        ]

    def leaders(self, weights: Floats, k: Sequence[int], kind: str) -> Iterator[tuple[Ints, Bools]]:
        """For each row of weights, the features in the first k (of each fold) of any fold."""
        for row, some in zip(weights, self._may_lead(weights, max(k), kind), strict=True):
            yield leading(self.maps(row, some, kind), some, k)

    def _may_lead(self, weights: Floats, k: int, kind: str) -> list[Ints]:
        """For each row of weights, the features that may be among the k strongest of some fold."""
        n_features = self.stack.n_features
        everything: Ints = np.arange(n_features)
        looked_at = 2 * k + 50
        if 2 * looked_at > n_features:
            return [everything] * len(weights)
        screen, scores = self._screen(), _unit(weights)
        products = np.empty((len(weights), n_features), np.float32)
        for block, product in blocked_products(scores.astype(np.float32), screen.rows):
            products[:, block] = product
        with np.errstate(divide="ignore", invalid="ignore"):
            # What a correlation of 1 with the score would be, in the units of the map.
            gain = 1 / screen.least_rest if kind == "t" else screen.length
            merits = np.nan_to_num(products * gain, nan=-np.inf, posinf=-np.inf)
        found: list[Ints] = []
        for row, score, product, merit in zip(weights, scores, products, merits, strict=True):
            strong = np.sort(np.argpartition(merit, -looked_at)[-looked_at:])
            value = least_leader(self.maps(row, strong, kind), k)
            if not 0 < value < np.inf:
                found.append(everything)
            elif kind == "t":
                r = value / float(np.sqrt(self._n.max() - 2 + value * value))
                found.append(self._correlating(score, product, r))
            else:
                found.append(self._rising(score, product, value * np.sqrt(_spread(row))))
        return found

    def _correlating(self, score: Floats, product: Floats, r: float) -> Ints:
        """Features where some fold's correlation may reach r."""
        screen = self._screen()
        if screen.by_fold is not None:
            return self._reaching(score, np.float32(r) * screen.by_fold - np.float32(self._slack))
        lowest = self._lowest(screen, r * screen.least_rest * self._least_left())
        some = np.flatnonzero(~(product <= lowest))
        return self._left(
            some, score, lambda few, s: np.take(screen.rest, few, 0) * (np.float32(r) * s)
        )

    def _rising(self, score: Floats, product: Floats, slope: float) -> Ints:
        """Features where some fold's slope may reach one, given per score of unit length."""
        screen = self._screen()
        with np.errstate(divide="ignore", invalid="ignore"):
            # r_k c s is slope s^2, over the length of x.
            each = (slope / screen.length).astype(np.float32)
            if screen.by_fold is not None:
                _, left = self._held_scores(score)
                return self._reaching(score, each * left[:, None] - np.float32(self._slack))
            lowest = self._lowest(screen, each * self._least_left() ** 2)
        some = np.flatnonzero(~(product <= lowest))
        return self._left(some, score, lambda few, s: each[few, None] * np.square(s))

    def _screen(self) -> _Screen:
        """What every exchange reads, built when the first asks for it."""
        if self._built is None:
            stack, n = self.stack, self._n[:, 0]
            stack.turn()
            rows = np.empty((stack.n_rows, stack.n_features), np.float32)
            rest = np.empty((stack.n_features, len(n)), np.float32)
            held = np.empty(stack.n_features, np.float32)
            length = np.empty(stack.n_features, np.float32)
            share = 1 + (stack.n_rows - n) / n
            for block in stack.pieces():
                x = stack.x[:, block].astype(np.float64)
                with np.errstate(all="ignore"):  # what is not finite is marked unknown
                    x -= x.mean(axis=0)
                    norm = np.sqrt(np.square(x).sum(axis=0))
                    a = x / np.where(norm > 0, norm, 1)
                    squares = np.square(a).T @ self._held
                    c = np.sqrt(np.maximum(1 - squares - np.square(a.T @ self._held) / n, 0))
                    a_held = (np.sqrt(squares) * share).max(axis=1)
                whole = np.broadcast_to(self._whole(block), (len(n), len(norm)))
                unknown = ~whole.all(axis=0) | ~(norm < np.finfo(np.float32).max / 4)
                unknown |= norm < 4 * np.finfo(np.float32).tiny
                a[:, unknown], c[unknown], a_held[unknown] = 0, np.nan, np.nan
                # Without a value in any fold, and without variance over all rows.
                never = ~whole.any(axis=0) | (whole.all(axis=0) & (x == 0).all(axis=0))
                c[never], a_held[never] = _NEVER, 0
                rows[:, block], rest[block], held[block], length[block] = a, c, a_held, norm
            length[np.isnan(rest).any(axis=1)] = np.nan
            by_fold = np.ascontiguousarray(rest.T) if len(n) <= _FEW_FOLDS else None
            by_feature = np.ascontiguousarray(rows.T)
            self._built = _Screen(rows, by_feature, rest, by_fold, rest.min(axis=1), held, length)
        return self._built

    def _most_held(self) -> float:
        """The largest |b_F| of any fold under any exchange."""
        most = max(len(fold.held_out) for fold in self.stack.folds)
        squares = np.sort(np.square(_unit(self._scores[None])[0]))
        return float(np.sqrt(squares[-most:].sum()))

    def _least_left(self) -> float:
        """The least s of any fold under any exchange."""
        share = float((1 + (self.stack.n_rows - self._n) / self._n).max())
        return float(np.sqrt(max(0.0, 1 - self._most_held() ** 2 * share)))

    def _lowest(self, screen: _Screen, base: Floats) -> Floats:
        """What r must be above for any fold to reach `base`, which is r_k c s at the least."""
        lowest: Floats = base - screen.most_held * self._most_held() - self._slack
        return lowest.astype(np.float32)

    def _held_scores(self, score: Floats) -> tuple[Floats, Floats]:
        """(n_folds,) float32: sum b_F and s of each fold."""
        b = score @ self._held
        left = 1 - np.square(score) @ self._held - np.square(b) / self._n[:, 0]
        return b.astype(np.float32), np.sqrt(np.maximum(left, 0)).astype(np.float32)

    def _left(
        self, features: Ints, score: Floats, needed: Callable[[Ints, Floats], Floats]
    ) -> Ints:
        """Those of the features for which some fold's r_k c s may reach what is needed.

        `needed` gives that, (n_some_features, n_folds), from the features and s.
        """
        screen, single = self._screen(), score.astype(np.float32)
        kept: list[Ints] = [np.empty(0, np.intp)]
        b, left = self._held_scores(score)
        b /= self._n[:, 0].astype(np.float32)
        for start in range(0, len(features), BLOCK):
            some = features[start : start + BLOCK]
            a = np.take(screen.by_feature, some, axis=0)
            r = (a @ single)[:, None]
            if self._one_each:
                off = a * (single + b)
            else:
                off = (a * single) @ self._held + (a @ self._held) * b
            with np.errstate(invalid="ignore"):
                off += needed(some, left)
                # Negated, so that what is not a number stays in.
                hits = np.flatnonzero(~(off >= r + np.float32(self._slack)))
            kept.append(some[np.unique(hits // len(b))])
        return np.concatenate(kept)

    def _reaching(self, score: Floats, limit: Floats) -> Ints:
        """Features for which some fold's r_k c may be above the limit, (n_folds, n_features)."""
        own = np.zeros((len(self._sides), len(score)))
        for k, side in enumerate(self._sides):
            if spread := _spread(score[side]):
                own[k, side] = (score[side] - score[side].mean()) / np.sqrt(spread)
        found = [
            block.start + np.flatnonzero((~(products <= limit[:, block])).any(axis=0))
            for block, products in blocked_products(own.astype(np.float32), self._screen().rows)
        ]
        return np.concatenate(found)


def _spread(values: Floats) -> float:
    """Sum of squares about the mean; exactly 0 when all values are equal."""
    if (values == values[0]).all():
        return 0.0
    return float(np.square(values - values.mean()).sum())


def _unit(weights: Floats) -> Floats:
    """The rows of weights, centred and of unit length."""
    lengths = np.sqrt([_spread(row) for row in weights])
    unit: Floats = (weights - weights.mean(axis=1, keepdims=True)) / lengths[:, None]
    return unit
