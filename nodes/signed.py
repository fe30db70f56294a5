"""The folds' one-sample maps under signs of the rows, and how few features need looking at.

Definitions
-----------
At a feature, over the n rows of a fold's selection side, with S the sum and Q the sum of squares:

    u = S / W,   W = sqrt(n Q) for a t, n for a mean.

The mean is u itself, and t = u sqrt((n - 1) / (1 - u^2)) rises with u. No sign changes W.

A flip is three steps, each with fewer features than the one before:

1. Which features may reach a value u in any fold? One float32 product gives the sums over all
   rows, and one comparison with u rise - base decides. Leaving out a fold changes a sum by r at
   the most, so a fold reaches u only where the sum reaches f(u), the least over folds of u W - r.
   As a minimum of straight lines, f lies above its chord from u = 0 to u = 1; that is the bound.
   If there is room, the rows of the fold with the largest r are shrunk for this product, so that r
   is halfway to that of the next (`FoldStack.all_sums`).
   With few folds each has a product of its own: their bounds are then tight, however many rows a
   fold holds out.
2. At these, u of every fold in float32, whose rounding is known: most are above the threshold (or
   the k-th value), or below it, beyond doubt.
3. For the rest float64 decides, from the folds' own sums, formed as `groupmaps.without_each`
   forms them, without the held-out rows.

A rule that ranks has no threshold beforehand. It guesses one that the k-th value of every fold
reaches; a flip in which it does not is looked at again with a lower one. So the guess changes no
result, and what other flips found can be used for it.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .foldstack import FoldStack, gathered
from .groupmaps import bound_on_sum, fold_sums, t_from_sums
from .leading import leading, led_in_any, some_of, strongest_within
from .products import blocks_alone, times

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# Relative rounding of a few float32 operations, generously; and of a float64 sum over rows.
_SINGLE, _DOUBLE = 1e-5, 1e-9
# How much larger than the rounding of a sum what `FoldStack.most_off` allows for it is.
_GENEROUS = 8
# Of a few float64 operations on values up to 1.
_EXACT = 1e-12
# So many folds at the most have a screen of their own each: with more, one for all is as tight.
_FEW_FOLDS = 12
# So many numbers that flips need again are kept at the most; of more, each flip makes its own.
_KEPT = 2**24
# What float32 can tell lies between these.
_LEAST_WIDTH, _MOST_WIDTH = 1e-30, 1e30
# Features looked at for a first guess of a k-th value.
_SAMPLE = 20_000
# A guess is below what all but this share of the last flips reached, and lower by as much at the
# most each time that it was too high.
_MISSED, _LAST, _LOWER, _TRIES = 0.02, 64, 0.85, 12
# A guess must spare something.
_WORTH = 4


@dataclass(frozen=True)
class _Screen:
    """What no signs change, of one kind of map.

    Parameters
    ----------
    rise, base : (n_features,) float32
        Of the bound on the sum over all rows; the base is NaN where float32 may overflow, which
        keeps a feature in, and the rise infinite where no fold has a value.
    widths : (n_folds, n_features) float32, or None
        With few folds: W of each, infinite where it has no value; the base is then rounding only.
    told : (n_features,) bool, or None
        Where float32 can tell all folds' u. None when there is no room for the scale.
    scale : (n_features, n_folds) float32, or None
        1 / W of a t; NaN where only float64 can tell. A mean's is the same everywhere.
    off : float
        What u in float32 can be off by, where it is told.
    """

    rise: Floats
    base: Floats
    widths: Floats | None
    told: Bools | None
    scale: Floats | None
    off: float


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
        self._sizes = np.array([len(fold.selection) for fold in stack.folds], dtype=float)
        self._chooses = np.ones((stack.n_rows, len(stack.folds)), np.float32)
        for k, fold in enumerate(stack.folds):
            self._chooses[list(fold.held_out), k] = 0
        self._few = len(stack.folds) <= _FEW_FOLDS
        self._screens: dict[str, _Screen] = {}
        self._criticals: Floats | None = None
        self._thresholds: tuple[Floats, Floats] | None = None
        self._reached: dict[tuple[str, int], list[float]] = {}

    def counts(self, kind: str) -> Ints:
        """(n_folds,) features with a value in each fold's map; no signs change it."""
        found = np.zeros(len(self.stack.folds), dtype=np.intp)
        for block in self.stack.batches():
            enough = self._rows(block) >= self.stack.least(kind)
            found += np.count_nonzero(enough, axis=1)
        return found

    def _rows(self, block: Ints | slice) -> Floats:
        """(n_folds, n_features) how many rows have data."""
        n = self.stack.rows(block)
        return np.broadcast_to(n, (len(n), len(self.stack.numbers(block))))

    # -- exact ------------------------------------------------------------------------------

    def _bound_of(self, features: Ints | slice) -> Floats:
        """(n_folds, n_features) what each fold's sum must exceed; no signs change it."""
        assert self._critical is not None
        n = self.stack.rows(features)
        with np.errstate(over="ignore", invalid="ignore"):
            Q = self.stack.squares(features)
            # The quantile is slow, and mostly no row lacks data.
            complete = np.array_equal(n, self._sizes[:, None])
            critical = self._critical_values() if complete else self._critical(n)
            bound = bound_on_sum(critical, n, Q)
        # A feature of zeros alone never passes; nor one where too few rows have data.
        bound[(Q == 0) | np.isnan(bound) | (n < self.stack.least())] = np.inf
        return bound

    def _is_above(self, signs: Floats, features: Ints) -> Bools:
        """(n_some_features, n_folds) whether t exceeds the critical value."""
        above = np.empty((len(features), len(self._sizes)), bool)
        for start in range(0, len(features), self.stack.piece):
            some = features[start : start + self.stack.piece]
            np.less(
                self._bound_of(some).T,
                self.stack.sums(signs, some).T,
                out=above[start : start + len(some)],
            )
        return above

    def maps(self, signs: Floats, features: Ints, kind: str) -> Floats:
        """(n_folds, n_some_features) the folds' maps; NaN where too few rows have data."""
        stack = self.stack
        maps = np.empty((len(stack.folds), len(features)))
        for at in stack.batches(features):
            some = features[at]
            n, S = stack.rows(some), stack.sums(signs, some)
            if kind == "mean":
                with np.errstate(invalid="ignore", divide="ignore"):
                    values: Floats = S / n
            else:
                values = t_from_sums(n, S, stack.squares(some))
            lost = n < stack.least(kind)
            if lost.any():
                values = np.where(lost, np.nan, values)
            maps[:, at] = values
        return maps

    def _may_pass_in(self, signs: Floats, block: Ints | slice) -> Ints:
        """Where in a block a feature may be above the threshold, by the sums of all rows.

        For one exchange. S_-k <= S - min s_k and Q_-k >= Q - max q_k, with s_k and q_k the folds'
        own sums.
        """
        assert self._critical is not None
        stack = self.stack
        x, present, n = stack.columns(block), stack.there(block), self._sizes[:, None]
        with np.errstate(over="ignore", invalid="ignore"):
            least = bound_on_sum(self._critical(n), n, np.ones_like(n)).min()
            parts = fold_sums(np.multiply(x, signs[:, None], order="C"), stack.folds)
            highest = parts.sum(axis=0) - parts.min(axis=0)
            del parts  # its memory serves the squares: new memory takes longer than they do
            squares = fold_sums(x, stack.folds, square=True)
            Q = squares.sum(axis=0)
            highest += _DOUBLE * np.sqrt(len(x) * Q)
            lowest = np.sqrt(np.maximum(Q * (1 - _DOUBLE) - squares.max(axis=0), 0))
            # Negated, so that what is not a number stays in.
            may = ~(highest <= least * lowest)
        if present is not None:
            # With fewer rows the bound is another.
            may |= ~present.all(axis=0)
        return np.flatnonzero(may)

    # -- in float32 -------------------------------------------------------------------------

    def _screen(self, kind: str) -> _Screen:
        """What no signs change, built when the first flip asks for it."""
        if kind in self._screens:
            return self._screens[kind]
        stack, n_folds = self.stack, len(self.stack.folds)
        slack = np.empty(stack.n_features)
        for block in stack.pieces():
            _, slack[block], _ = stack.most_off(block)
        # Of a sum in float32, and of u with what its product with the scale adds.
        rounding = slack / _GENEROUS
        off = (stack.n_rows + 6) * float(np.finfo(np.float32).eps)
        if kind == "mean":
            # Rounding of a mean is a share of the rows' size; of nearly all features' at the most.
            finite = rounding[np.isfinite(rounding)]
            off = 2 * float(np.quantile(finite, 0.999)) / self._sizes.min() if len(finite) else 0.0
        room = stack.n_features * n_folds <= _KEPT
        rise, base = np.empty((2, stack.n_features), np.float32)
        widths = np.empty((n_folds, stack.n_features), np.float32) if self._few else None
        told = np.empty(stack.n_features, bool) if room else None
        scale = None
        if room and kind == "t":
            scale = np.empty((stack.n_features, n_folds), np.float32)
        for block in stack.pieces():
            reach, _, known = stack.most_off(block)
            W, complete = self._widths(block, kind)
            with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
                nothing = W == 0
                if told is not None:
                    tell = (W > _LEAST_WIDTH) & (W < _MOST_WIDTH)
                    tell &= rounding[block] <= 0.75 * off * W
                    tell = known & complete & (nothing | tell)
                    told[block] = tell.all(axis=0)
                    if scale is not None:
                        scale[block] = np.where(tell, np.where(nothing, 0, 1 / W), np.nan).T
                known &= (np.isinf(W) | (W < _MOST_WIDTH)).all(axis=0)
                W[nothing] = np.inf
                most = reach.max(axis=0)
                if widths is not None:
                    widths[:, block] = W * (1 - _SINGLE)
                    most[:] = 0
                chord = W.min(axis=0) if kind == "mean" else (W - reach).min(axis=0) + most
                rise[block] = chord * (1 - _SINGLE)
                base[block] = np.where(known, most * (1 + _SINGLE) + slack[block], np.nan)
        self._screens[kind] = _Screen(rise, base, widths, told, scale, off)
        return self._screens[kind]

    def _widths(self, block: slice, kind: str) -> tuple[Floats, Bools]:
        """(n_folds, n_features) W, infinite where too few rows have data; and whether all have."""
        n = self._rows(block)
        with np.errstate(over="ignore", invalid="ignore"):
            W = np.sqrt(n * self.stack.squares(block)) if kind == "t" else n.astype(float)
        # Squares that overflow are no lack of data.
        W[np.isinf(W)] = np.finfo(float).max
        lost = n < self.stack.least(kind)
        W[lost] = np.inf
        return W, ~lost & (n == self._sizes[:, None])

    def _marked(
        self, signs: Floats, levels: Floats, kind: str
    ) -> Iterator[tuple[slice, list[Bools]]]:
        """Blocks of features, with (n_signs, n_features) for each level: may some fold reach it?

        `levels` are (n_levels, n_folds) values of u.
        """
        screen = self._screen(kind)
        if screen.widths is None:
            with np.errstate(over="ignore", invalid="ignore"):
                bounds = [np.float32(u.min()) * screen.rise - screen.base for u in levels]
            for block, sums in self.stack.all_sums(signs):
                # Negated, so that what is not a number stays in.
                yield block, [~(sums <= lowest[block]) for lowest in bounds]
            return
        with np.errstate(over="ignore"):
            single = levels.astype(np.float32)
        for block, of_folds in self.stack.side_sums(signs):
            marks = [np.zeros((len(signs), len(screen.base[block])), bool) for _ in levels]
            for k, sums in enumerate(of_folds):
                for u, may in zip(single[:, k], marks, strict=True):
                    with np.errstate(over="ignore", invalid="ignore"):
                        lowest = u * screen.widths[k, block] - screen.base[block]
                        np.logical_or(may, ~(sums <= lowest), out=may)
            yield block, marks

    def _may_reach(self, signs: Floats, u: Floats, kind: str) -> list[Ints]:
        """For each row of signs, the features where some fold's u may be at least (n_folds,) u."""
        marked = ((block, may) for block, (may,) in self._marked(signs, u[None], kind))
        return gathered(marked, len(signs), self.stack.n_features)

    def _nearly(self, signs: Floats, features: Ints, screen: _Screen) -> Floats:
        """(n_some_features, n_folds) float32: u; NaN where only float64 can tell."""
        assert screen.scale is not None
        with np.errstate(over="ignore", invalid="ignore"):
            x = self.stack.columns(features).T.astype(np.float32, copy=False)
            u = times(x, self._chooses * signs[:, None].astype(np.float32))
            u *= np.take(screen.scale, features, axis=0)
        return u

    def _mean_nearly(self, signs: Floats, features: Ints, out: Floats) -> None:
        """(n_folds, n_some_features) float32: the folds' means, where float32 can tell."""
        weights = (self._chooses * (signs[:, None] / self._sizes)).T.astype(np.float32)
        with np.errstate(over="ignore", invalid="ignore"):
            x = self.stack.columns(features).astype(np.float32, copy=False)
            for block in blocks_alone(len(features), weights.size):
                np.matmul(weights, x[:, block], out=out[:, block])

    # -- thresholds -------------------------------------------------------------------------

    def _critical_values(self) -> Floats:
        """(n_folds, 1) what t must exceed where no row lacks data."""
        if self._criticals is None:
            assert self._critical is not None
            self._criticals = self._critical(self._sizes[:, None])
        return self._criticals

    def _critical_u(self) -> tuple[Floats, Floats]:
        """(n_folds,) u at the critical value where no row lacks data; and the least anywhere."""
        if self._thresholds is None:
            assert self._critical is not None
            n = self._sizes[:, None]
            if self.stack.presence is not None:
                fewer = np.arange((n - self.stack.least()).max() + 1)
                n = np.maximum(n - fewer, self.stack.least())
            with np.errstate(invalid="ignore", over="ignore"):
                c = self._critical(n)
                u = np.where(np.isinf(c), np.inf, c / np.sqrt(n - 1 + np.square(c)))
            self._thresholds = u[:, 0], u.min(axis=1)
        return self._thresholds

    def may_pass(self, signs: Floats) -> list[Ints]:
        """For each row of signs, the features that may be above the threshold in some fold."""
        return self._may_reach(signs, self._critical_u()[1], "t")

    def above(self, signs: Floats, features: Ints | slice) -> Bools:
        """(n_some_features, n_folds) whether t exceeds the critical value."""
        if isinstance(features, slice) or not self.stack.turned:
            numbers, may = self.stack.numbers(features), self._may_pass_in(signs, features)
            out = np.zeros((len(numbers), len(self.stack.folds)), bool)
            if len(may):
                out[may] = self._is_above(signs, numbers[may])
            return out
        screen = self._screen("t")
        if screen.scale is None:
            return self._is_above(signs, features)
        critical, above = self._critical_u()[0], np.empty((len(features), len(self._sizes)), bool)
        if (critical == critical[0]).all():
            critical = critical[:1]  # NumPy is slow along a short axis
        low, high = ((critical + off).astype(np.float32) for off in (-screen.off, screen.off))
        unsettled = [np.empty(0, np.intp)]
        for start in range(0, len(features), self.stack.piece):
            u = self._nearly(signs, features[start : start + self.stack.piece], screen)
            # Negated, so that what is not a number stays in.
            part = ~(u < low)
            above[start : start + self.stack.piece] = part
            part &= ~(u > high)
            if part.any():
                unsettled.append(start + np.flatnonzero(some_of(part)))
        some = np.concatenate(unsettled)
        above[some] = self._is_above(signs, features[some])
        return above

    def may_reach(self, signs: Floats, heights: Floats) -> list[Ints]:
        """For each row of signs, the features where some fold's t may be at least a height.

        Parameters
        ----------
        signs : (n_signs, n_rows) float
        heights : (n_folds,) float
            Above zero.
        """
        return self._may_reach(signs, self._as_u(heights), "t")

    def how_many(self, signs: Floats, heights: Floats) -> Floats:
        """(n_signs, n_levels) what the number of features with t at least so high is not above.

        Of any fold.

        Parameters
        ----------
        signs : (n_signs, n_rows) float
        heights : (n_levels, n_folds) float
            Above zero.
        """
        found = np.zeros((len(signs), len(heights)))
        for block, marks in self._marked(signs, self._as_u(heights), "t"):
            ones = np.ones(len(self.stack.numbers(block)), np.float32)
            for level, may in enumerate(marks):
                found[:, level] += may.astype(np.float32) @ ones
        return found

    def _as_u(self, heights: Floats) -> Floats:
        """t as u; where rows lack data, u is above that."""
        u: Floats = heights / np.sqrt(self._sizes - 1 + np.square(heights))
        return u

    def comparable(self, signs: Floats, features: Ints, heights: Floats) -> tuple[Floats, Floats]:
        """Numbers of which a feature's is above a height's wherever its t is at least that.

        And hardly elsewhere.

        Parameters
        ----------
        signs : (n_rows,) float
        features : (n_some_features,) int
        heights : (n_levels, n_folds) float
            Above zero.

        Returns
        -------
        of_features : (n_folds, n_some_features)
            -inf where there is no value.
        of_heights : (n_levels, n_folds)
        """
        u, off = self._values(signs, features, "t")
        # Twice, for the rounding of the heights.
        return u, (self._as_u(heights) - 2 * off).astype(u.dtype)

    # -- ranks ------------------------------------------------------------------------------

    def leaders(self, signs: Floats, k: Sequence[int], kind: str) -> list[tuple[Ints, Bools]]:
        """For each row of signs, the features in the first k (of each fold) of any fold."""
        many = max(k)
        reached = self._reached.setdefault((kind, many), [])
        found: dict[int, tuple[Ints, Bools]] = {}
        left = list(range(len(signs)))
        guess = self._guess(signs[0], many, kind)
        for _ in range(_TRIES):
            if not left or not guess > 0:
                break
            may = self._may_reach(signs[left], np.full(len(k), guess), kind)
            least = np.inf
            for i, features in zip(left, may, strict=True):
                value = -np.inf
                if len(features) >= many:
                    led, value = self._led(signs[i], features, k, kind)
                    if value >= guess:
                        found[i] = led
                        reached.append(value)
                least = min(least, value)
            left = [i for i in left if i not in found]
            # What some features reach, more do as well.
            guess = max(least, _LOWER * guess)
        everything: Ints = np.arange(self.stack.n_features)
        for i in left:
            found[i] = leading(self.maps(signs[i], everything, kind), everything, k)
        return [found[i] for i in range(len(signs))]

    def _guess(self, signs: Floats, k: int, kind: str) -> float:
        """What the k-th value of every fold is likely to reach; 0 where that would spare nothing.

        By what the last flips reached, or for the first by a sample of the features.
        """
        n_features = self.stack.n_features
        if _WORTH * k > n_features:
            return 0.0
        reached = self._reached[kind, k]
        if not reached:
            some: Ints = np.arange(0, n_features, max(1, n_features // _SAMPLE))
            values, _ = self._values(signs, some, kind)
            place = max(1, k * len(some) // n_features)
            return _LOWER * float(np.partition(values, -place, axis=1)[:, -place].min())
        del reached[:-_LAST]
        return float(np.quantile(reached, _MISSED))

    def _led(
        self, signs: Floats, features: Ints, k: Sequence[int], kind: str
    ) -> tuple[tuple[Ints, Bools], float]:
        """Those in the first k of any fold among some features, and what all of these reach."""
        values, off = self._values(signs, features, kind)
        chosen, limit = strongest_within(
            values, k, off, lambda some: self.maps(signs, features[some], kind)
        )
        return led_in_any(features, chosen), float(limit.min()) - off

    def _values(self, signs: Floats, features: Ints, kind: str) -> tuple[Floats, float]:
        """(n_folds, n_some_features) the folds' u, -inf where there is no value; and what by.

        Where rows lack data it is what t would be as u if none did, so that the order is t's.
        """
        screen = self._screen(kind)
        if screen.told is None:
            return self._exact_values(signs, features, kind), _EXACT
        values = np.empty((len(self._sizes), len(features)), np.float32)
        for start in range(0, len(features), self.stack.piece):
            at = slice(start, start + self.stack.piece)
            if kind == "mean":
                self._mean_nearly(signs, features[at], out=values[:, at])
            else:
                values[:, at] = self._nearly(signs, features[at], screen).T
        untold = np.flatnonzero(~screen.told.take(features))
        if len(untold):
            if kind == "mean":
                # Which may be of any size, so that float32 may round them by more than is said.
                values = values.astype(np.float64)
            values[:, untold] = self._exact_values(signs, features[untold], kind)
        return values, screen.off

    def _exact_values(self, signs: Floats, features: Ints, kind: str) -> Floats:
        """The same in float64."""
        values = self.maps(signs, features, kind)
        if kind == "t":
            with np.errstate(invalid="ignore", over="ignore"):
                u = values / np.sqrt(self._sizes[:, None] - 1 + np.square(values))
            values = np.where(np.isinf(values), np.sign(values), u)
        values[np.isnan(values)] = -np.inf
        return values
