"""Thresholds that control an error on every fold's selection side, the same for data and flips.

By what an exchange of the data does to them:

- Bonferroni's threshold stays: it depends on the number of features alone.
- Those by sign flips stay: all flips of a selection side are all flips of any flip of it. They
  are made once, for all folds in one pass over flips of all people, through the maps that choose.
  Exact when the patterns are enumerated; else up to the flips drawn, which another flip of the
  data would have drawn others of.
- Benjamini & Hochberg's and the random field's are made anew from each exchange's own maps (t,
  or the smoothness of the residuals). None of them is below the uncorrected threshold of the
  same level, which the maps screen with; then they decide among the features left.

Nothing of the rows a fold holds out enters its threshold.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from functools import lru_cache

import numpy as np
import numpy.typing as npt
from scipy import special

from .choosing import FoldMaps, Narrowing, passed
from .controlled import (
    BENJAMINI_HOCHBERG,
    BONFERRONI,
    BY_P,
    MAX_CLUSTER,
    MAX_T,
    Controlled,
    critical_t,
    step_up,
)
from .errors import InputError
from .familywise import FlipPlan
from .foldsmooth import FoldSmoothness
from .foldstack import FoldStack
from .leading import in_any
from .masks import Cluster, MaskRule, Neighbourhood, Threshold, components
from .randomfield import (
    ClusterSizes,
    Lattice,
    corrected_p,
    height_threshold,
    lattice,
    least_corrected_p,
    resels,
)
from .signed import SignedMaps
from .space import Grid, Space

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]
Critical = Callable[[Floats], Floats] | None

_AT_ONCE = 32
# Values of t nearer than this are a tie by rounding.
_TIE = 1e-9
# Sizes kept.
_SIZES = 1024
# In place of an infinite t; no height is near it.
_HIGHEST = 1e6
# Levels at which it is counted what may be above them, each half of the one before; and at how
# many of these at all features.
_RUNGS, _COUNTED = 16, 7
# A floor is lower by as much than what thresholds may be, and each time that it was too high.
_LOWER, _TRIES = 0.9, 6


def controls_of(rule: MaskRule) -> tuple[Controlled | None, Controlled | None]:
    """What a rule controls by height, and by the size of clusters."""
    height = rule.control if isinstance(rule, Threshold | Cluster) else None
    return height, rule.extent if isinstance(rule, Cluster) else None


def check_with_model(rule: MaskRule) -> None:
    """Refuse controls that rest on signs, where groups or a score are what is exchanged.

    Raises
    ------
    InputError
    """
    for control in controls_of(rule):
        if control is not None and control.control not in BY_P:
            raise InputError(
                f"{control.control} does not go with groups or a score",
                expected="maps of one sample, whose signs can be flipped",
                remedy=f"control = {BONFERRONI!r} or {BENJAMINI_HOCHBERG!r}",
            )


def controlled_maps(
    rule: MaskRule,
    made: Callable[[Critical], FoldMaps],
    labels: Sequence[str],
    space: Space,
    n_parameters: int = 1,
) -> tuple[FoldMaps, Narrowing | None]:
    """The folds' maps with the rule's threshold, and what is decided on each exchange's maps.

    Parameters
    ----------
    rule : MaskRule
    made : callable
        The folds' maps, given the value that t must exceed for numbers of rows (folds first).
    labels : sequence of str
        Of the rows; those that share one flip as one.
    space : Space
        A `Grid` for random fields.
    n_parameters : int
        Of the model of a map.

    Raises
    ------
    InputError
        When there are too few people for a level by flips, or rows for a random field.
    """
    if not isinstance(rule, Threshold | Cluster):
        return made(None), None
    height, extent = controls_of(rule)
    if height is None:
        maps = made(rule.critical)
        if extent is None:
            return maps, None
        assert isinstance(rule, Cluster)
        if extent.control == MAX_CLUSTER:
            sizes = _largest_clusters(maps, rule, extent, labels, space)
            return maps, _FlippedExtent(maps, sizes)
        return maps, _FieldExtent(rule, extent, maps, _voxels(space))
    level = height.level
    if height.control == MAX_T:
        heights = _largest_t(made(None), height, labels)
        return made(lambda n: np.where(n >= 2, heights[:, None], np.inf)), None
    n_tests = made(None).counts("t")
    if height.control == BONFERRONI:
        single = level / np.maximum(n_tests, 1)
        return made(lambda n: critical_t(single, n)), None
    maps = made(Threshold(p=level).critical)
    if height.control == BENJAMINI_HOCHBERG:
        if isinstance(maps, SignedMaps):
            return maps, _ScreenedStepUp(maps, n_tests, level)
        return maps, _StepUp(maps, n_tests, level, n_parameters)
    assert isinstance(maps, SignedMaps)  # `check_with_model` has seen to it
    return maps, _FieldHeight(maps, n_tests, level, _voxels(space))


# -- by flips ---------------------------------------------------------------------------------


def _over_flips(
    stack: FoldStack,
    control: Controlled,
    labels: Sequence[str],
    extremes: Callable[[Floats], list[Floats]],
) -> Floats:
    """What each fold's extreme must exceed: (n_folds,).

    `extremes` gives for each row of signs the (n_folds,) extremes of the folds' maps.
    """
    plan = FlipPlan(tuple(labels), control.n_flips, control.seed)
    found = np.empty((plan.total, len(stack.folds)))
    for flips, signs in plan.signs(_AT_ONCE):
        found[flips] = extremes(signs.astype(np.float64))
    critical = np.empty(len(stack.folds))
    for k, fold in enumerate(stack.folds):
        own = plan
        some = found[:, k]
        if plan.exact:
            # The signs of who is held out change nothing: each pattern occurs as often as they
            # have patterns.
            own = FlipPlan(tuple(labels[row] for row in fold.selection), plan.n_flips, plan.seed)
            some = np.sort(some)[:: plan.total // own.total]
        critical[k] = own.critical(some, control.level)
    return critical


def _largest_t(maps: FoldMaps, control: Controlled, labels: Sequence[str]) -> Floats:
    """The t that each fold's features must exceed (Nichols & Holmes 2002, HBM 15:1-25)."""

    def extremes(signs: Floats) -> list[Floats]:
        found: list[Floats] = []
        one = [1] * len(maps.stack.folds)
        for row, (some, members) in zip(signs, maps.leaders(signs, one, "t"), strict=True):
            t = np.where(members.T, maps.maps(row, some, "t"), -np.inf)
            found.append(t.max(axis=1, initial=-np.inf))
        return found

    heights = _over_flips(maps.stack, control, labels, extremes)
    # Decided by sums, which need a height above zero.
    finite = np.isfinite(heights)
    heights[finite] = np.maximum(heights[finite] * (1 + _TIE), heights[finite] + _TIE)
    return np.maximum(heights, _TIE)


def _largest_clusters(
    maps: FoldMaps, rule: Cluster, control: Controlled, labels: Sequence[str], space: Space
) -> Floats:
    """The size that each fold's clusters must have at least."""
    hood = Neighbourhood(space, rule.connectivity)

    def extremes(signs: Floats) -> list[Floats]:
        found: list[Floats] = []
        for some, members in passed(maps, signs):
            largest = np.zeros(members.shape[1])
            if len(members):
                _, of_map, cluster = components(members, hood.pairs(some))
                np.maximum.at(largest, of_map, np.bincount(cluster)[cluster])
            found.append(largest)
        return found

    return _over_flips(maps.stack, control, labels, extremes) + 1


class _FlippedExtent:
    """Clusters of at least a size by flips, which no exchange changes."""

    def __init__(self, maps: FoldMaps, sizes: Floats) -> None:
        self._maps, self._sizes = maps, sizes

    def each(self, weights: Floats) -> Iterator[tuple[Ints, Bools]]:
        """See `Narrowing`."""
        return passed(self._maps, weights)

    def passing(self, weights: Floats, features: Ints, above: Bools) -> Bools:
        """See `Narrowing`."""
        return above

    def least_sizes(self, weights: Floats, largest: Ints) -> Floats:
        """See `Narrowing`."""
        return self._sizes


# -- from each exchange's own maps ------------------------------------------------------------


class _StepUp:
    """Benjamini & Hochberg's threshold."""

    def __init__(self, maps: FoldMaps, n_tests: Ints, level: float, n_parameters: int) -> None:
        self._maps, self._n_tests, self._level = maps, n_tests, level
        self._off = n_parameters - 1

    def each(self, weights: Floats) -> Iterator[tuple[Ints, Bools]]:
        """See `Narrowing`."""
        for row, (features, above) in zip(weights, passed(self._maps, weights), strict=True):
            yield in_any(features, self.passing(row, features, above))

    def passing(self, weights: Floats, features: Ints, above: Bools) -> Bools:
        """See `Narrowing`."""
        t = np.where(above.T, self._maps.maps(weights, features, "t"), -np.inf)
        return self._above(t, features, self._n_tests)

    def _above(self, t: Floats, features: Ints, most: Ints) -> Bools:
        """(n_some_features, n_folds) what passes, when no fold finds more than so many."""
        rows = self._maps.stack.rows(features) - self._off
        p = step_up(t, rows, self._n_tests, self._level, most)
        return np.ascontiguousarray((t > critical_t(p, rows)).T)

    def least_sizes(self, weights: Floats, largest: Ints) -> Floats:
        """See `Narrowing`."""
        return np.zeros(len(largest))


class _ScreenedStepUp(_StepUp):
    """The same for signed maps, without looking at all that the uncorrected level lets through.

    With k features found of m the threshold is p = q k / m, and k of them are below it: so k is
    not above the number below any p that is not below this one. From p = q on, where k could be
    m, every such number bounds the next p. What may be below in any fold is counted first, and
    then, at the few features left, what may be in each.
    """

    def __init__(self, maps: SignedMaps, n_tests: Ints, level: float) -> None:
        super().__init__(maps, n_tests, level, 1)
        self._signed = maps
        self._ladder = level * 0.5 ** np.arange(_RUNGS)
        rows = np.array([[len(fold.selection)] for fold in maps.stack.folds], dtype=float)
        critical = [critical_t(np.full(len(rows), p), rows)[:, 0] for p in self._ladder]
        # (n_rungs, n_folds), a little lower than the rungs.
        self._heights = np.array(critical) * (1 - _TIE)

    def each(self, weights: Floats) -> Iterator[tuple[Ints, Bools]]:
        """See `Narrowing`."""
        counts = self._signed.how_many(weights, self._heights[:_COUNTED])
        fewest = np.full(1, max(1, int(self._n_tests.min())))
        rungs = [int(self._rungs(most[:, None], fewest)[0]) for most in counts]
        may: dict[int, Ints] = {}
        for rung in sorted(set(rungs) - {_RUNGS}):
            some = [i for i, one in enumerate(rungs) if one == rung]
            found = self._signed.may_reach(weights[some], self._heights[rung])
            may.update(zip(some, found, strict=True))
        nothing: Ints = np.empty(0, np.intp)
        for i, row in enumerate(weights):
            yield self._found(row, may.get(i, nothing), rungs[i])

    def _found(self, weights: Floats, features: Ints, rung: int) -> tuple[Ints, Bools]:
        """What passes, of features with all that are above a rung in some fold."""
        if len(features):
            u, limits = self._signed.comparable(weights, features, self._heights)
            counts = np.zeros((_RUNGS, len(u)))
            for step in range(rung, _RUNGS):
                counts[step] = np.count_nonzero(u > limits[step, :, None], axis=1)
                if not counts[step].any():
                    break
            rungs = self._rungs(counts, np.maximum(self._n_tests, 1), rung)
            # Past all rungs nothing is found.
            limit = np.append(limits, np.full_like(limits[:1], np.inf), axis=0)
            limit = limit[rungs, np.arange(len(rungs))]
            features = features[(u > limit[:, None]).any(axis=0)]
        if not len(features):
            return features, np.zeros((0, len(self._n_tests)), bool)
        t = self._signed.maps(weights, features, "t")
        t[np.isnan(t)] = -np.inf
        p = np.append(self._ladder, 0)[rungs]
        most = np.minimum(self._n_tests, p * self._n_tests / self._level * (1 + _TIE))
        return in_any(features, self._above(t, features, most.astype(np.intp)))

    def _rungs(self, counts: Floats, n_tests: Ints, rung: int = 0) -> Ints:
        """(n_folds,) the last rung that the threshold is not above; past all if nothing is found.

        Parameters
        ----------
        counts : (n_rungs, n_folds) float
            What the number below the first rungs is not above.
        n_tests : (n_folds,) int
        rung : int
            That is known.
        """
        found = np.full(len(n_tests), rung)
        while True:
            most = counts[np.minimum(found, len(counts) - 1), np.arange(len(found))]
            p = self._level * most / n_tests * (1 + _TIE)
            further = (self._ladder[:, None] >= p).sum(axis=0) - 1
            further = np.where(most == 0, _RUNGS, np.maximum(found, further))
            if (further == found).all():
                return found
            found = further


def _voxels(space: Space) -> Grid:
    if not isinstance(space, Grid):
        raise InputError(
            "a random field needs a grid of voxels",
            got=type(space).__name__,
            remedy="control the error by flips",
        )
    return space


class _FieldHeight:
    """The random field's threshold on t (Worsley et al. 1996, HBM 4:58-73)."""

    def __init__(self, maps: SignedMaps, n_tests: Ints, level: float, space: Grid) -> None:
        self._maps, self._n_tests, self._level = maps, n_tests, level
        self._floor = 0.0
        stack = maps.stack
        self._smoothness = FoldSmoothness(stack, space)
        self._df = self._smoothness.rows - 1
        if stack.presence is None:
            self._cells = [lattice(space)] * len(stack.folds)
        else:
            tested = stack.rows(slice(None)) >= stack.least()
            self._cells = [lattice(space.restricted(features)) for features in tested]
        self._alike: dict[tuple[Lattice, int], list[int]] = {}
        for k, of_fold in enumerate(zip(self._cells, self._df.tolist(), strict=True)):
            self._alike.setdefault(of_fold, []).append(k)

    def each(self, weights: Floats) -> Iterator[tuple[Ints, Bools]]:
        """See `Narrowing`.

        Features are looked at above a floor that no threshold is likely to be below. Where one is,
        the exchange is looked at again with a lower floor, and at last without.
        """
        self._maps.stack.turn()
        found: dict[int, tuple[Ints, Bools]] = {}
        left = list(range(len(weights)))
        floor = self._floor or _LOWER * self._least_height(weights[0])
        for _ in range(_TRIES):
            if not left or not floor < np.inf:
                break
            heights = np.full(len(self._df), floor)
            may = self._maps.may_reach(weights[left], heights)
            for i, features in zip(left, may, strict=True):
                t = self._maps.maps(weights[i], features, "t")
                above = self._above(weights[i], features, t, floor)
                if above is not None:
                    found[i] = in_any(features, above)
            left = [i for i in left if i not in found]
            self._floor, floor = floor, _LOWER * floor
        rest = passed(self._maps, weights[left]) if left else []
        for i, (features, above) in zip(left, rest, strict=True):
            found[i] = in_any(features, self.passing(weights[i], features, above))
        return (found[i] for i in range(len(weights)))

    def passing(self, weights: Floats, features: Ints, above: Bools) -> Bools:
        """See `Narrowing`."""
        if not len(features):
            return above
        t = np.where(above.T, self._maps.maps(weights, features, "t"), -np.inf)
        passing = self._above(weights, features, t, 0.0)
        assert passing is not None
        return passing

    def _above(self, weights: Floats, features: Ints, t: Floats, floor: float) -> Bools | None:
        """(n_some_features, n_folds) what passes, of all features whose t is above the floor.

        None when the floor is not below every fold's threshold.
        """
        t = np.where(np.isnan(t), -np.inf, t)
        peaks = np.clip(t.max(axis=1, initial=floor), floor, _HIGHEST)
        p = np.zeros(len(peaks))
        likely = self._may_be_likely(weights, peaks)
        if floor and (likely & ~(t > floor).any(axis=1)).any():
            return None
        rows = self._maps.stack.rows(features)
        # Bonferroni's height is the most that a height can be. Where none of what is below it can
        # be likely, it serves as well, and the smoothness is not needed.
        highest = self._level / np.maximum(self._n_tests, 1)
        below = np.where(t > critical_t(highest * (1 - _TIE), rows), floor, t)
        below = np.clip(below.max(axis=1, initial=floor), floor, _HIGHEST)
        unsure = self._may_be_likely(weights, below)
        p[likely & ~unsure] = highest[likely & ~unsure]
        some = np.flatnonzero(likely & unsure & (t > floor).any(axis=1))
        fwhm = self._smoothness.fwhm(weights, some) if len(some) else np.empty((0, 3))
        for k, widths in zip(some.tolist(), fwhm, strict=True):
            df, n = int(self._df[k]), int(self._n_tests[k])
            region = resels(self._cells[k], widths)
            # A peak that is too likely is below the height, which takes longer to find.
            if corrected_p(peaks[k], region, df, n) <= self._level * (1 + _TIE):
                height = height_threshold(region, df, self._level, n)
                if height <= floor:
                    return None
                p[k] = special.stdtr(df, -height)
        if not p.any():
            return np.zeros(t.T.shape, bool)
        # As a p, for features where some rows lack data.
        return np.ascontiguousarray((t > critical_t(p, rows)).T)

    def _least_height(self, weights: Floats) -> float:
        """What the threshold is not below in any fold, under one exchange."""
        widths = self._smoothness.most(weights)
        return min(
            height_threshold(resels(cells, widths[k]), df, self._level, int(self._n_tests[k]))
            for (cells, df), folds in self._alike.items()
            for k in folds
        )

    def _may_be_likely(self, weights: Floats, peaks: Floats) -> Bools:
        """(n_folds,) whether a peak may reach the level: with the least resels there can be."""
        if not self._maps.stack.turned:
            return np.ones(len(peaks), bool)
        p = np.zeros(len(peaks))
        widths = self._smoothness.most(weights)
        for (cells, df), folds in self._alike.items():
            n_tests = self._n_tests[folds]
            p[folds] = least_corrected_p(peaks[folds], cells, widths[folds], df, n_tests)
        # Negated, so that what is not a number stays in.
        return ~(p > self._level * (1 + _TIE))

    def least_sizes(self, weights: Floats, largest: Ints) -> Floats:
        """See `Narrowing`."""
        return np.zeros(len(largest))


class _FieldExtent:
    """Clusters of at least the random field's size (see `randomfield`)."""

    def __init__(self, rule: Cluster, control: Controlled, maps: FoldMaps, space: Grid) -> None:
        stack = maps.stack
        self._maps, self._level = maps, control.level
        self._smoothness = FoldSmoothness(stack, space)
        n_tests = np.zeros(len(stack.folds), dtype=np.intp)
        for block in stack.batches():
            tested = stack.rows(block) >= stack.least()
            shape = len(tested), len(stack.numbers(block))
            n_tests += np.count_nonzero(np.broadcast_to(tested, shape), axis=1)
        self._n_tests = n_tests
        if not any(len(one) for one, _ in self._smoothness.pairs):
            raise InputError("no clusters in a region without neighbouring voxels")
        self._df = self._smoothness.rows - 1
        self._different = np.unique(self._df).tolist()
        self._t = np.broadcast_to(rule.critical(self._df + 1), self._df.shape)
        self._kept = lru_cache(_SIZES)(self._critical)

    def each(self, weights: Floats) -> Iterator[tuple[Ints, Bools]]:
        """See `Narrowing`."""
        return passed(self._maps, weights)

    def passing(self, weights: Floats, features: Ints, above: Bools) -> Bools:
        """See `Narrowing`."""
        return above

    def least_sizes(self, weights: Floats, largest: Ints) -> Floats:
        """See `Narrowing`."""
        sizes = np.full(len(self._n_tests), np.inf)
        some = np.flatnonzero(self._may_be_large(weights, largest))
        if len(some):
            for k, fwhm in zip(some.tolist(), self._smoothness.fwhm(weights, some), strict=True):
                if self._n_tests[k] and _has_sizes(fwhm):
                    sizes[k] = self._critical(k, (fwhm[0], fwhm[1], fwhm[2]))
        return sizes

    def _critical(self, k: int, widths: tuple[float, float, float]) -> float:
        """The size of a fold's clusters."""
        n, t, df = int(self._n_tests[k]), float(self._t[k]), float(self._df[k])
        return ClusterSizes(n, widths, t, df).critical_size(self._level)

    def _may_be_large(self, weights: Floats, largest: Ints) -> Bools:
        """(n_folds,) whether the largest cluster of a fold may be kept, by what the FWHM can be."""
        may = largest > 0
        if not self._maps.stack.turned or not may.any():
            return may
        low, high = self._smoothness.least(weights), self._smoothness.most(weights)
        for df in self._different:
            some = np.flatnonzero(may & (self._df == df))
            if not len(some):
                continue
            # The fold with the least to search. Sizes rise with the FWHM, and then fall: they are
            # least at an end of what it can be.
            k = int(some[self._n_tests[some].argmin()])
            ends = (
                _rounded(low[some].min(axis=0), np.floor),
                _rounded(high[some].max(axis=0), np.ceil),
            )
            if all(_has_sizes(fwhm) and np.nanprod(fwhm) > 0 for fwhm in ends):
                may[some] = largest[some] >= min(self._kept(k, fwhm) for fwhm in ends)
        return may


def _rounded(fwhm: Floats, to: Callable[[Floats], Floats]) -> tuple[float, float, float]:
    """Widths up or down to a hundredth of themselves, so that few differ from flip to flip."""
    with np.errstate(divide="ignore"):
        x, y, z = np.exp(to(np.log(fwhm) * 100) / 100).tolist()
    return x, y, z


def _has_sizes(fwhm: npt.ArrayLike) -> bool:
    """Whether clusters have a size: not where neighbours never vary, or never differ."""
    return bool(np.isfinite(fwhm).any() and not np.isinf(fwhm).any())
