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

from collections.abc import Callable, Sequence

import numpy as np
import numpy.typing as npt
from scipy import special

from .choosing import FoldMaps, Narrowing
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
from .foldstack import FoldStack
from .groupmaps import without_each
from .masks import Cluster, MaskRule, Neighbourhood, Threshold, components
from .randomfield import (
    ClusterSizes,
    corrected_p,
    height_threshold,
    lattice,
    resels,
    z_equivalent,
)
from .smoothness import axis_pairs, fwhm_from_sums, pair_products
from .space import Grid, Space

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]
Critical = Callable[[Floats], Floats] | None

_AT_ONCE = 32
# Values of t nearer than this are a tie by rounding.
_TIE = 1e-9
# A t field in three dimensions has more than 3 degrees of freedom.
_LEAST_ROWS = 5
# In place of an infinite t; no height is near it.
_HIGHEST = 1e6


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
            return maps, _FlippedExtent(_largest_clusters(maps, rule, extent, labels, space))
        return maps, _FieldExtent(rule, extent, maps.stack, _voxels(space))
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
        return maps, _StepUp(maps, n_tests, level, n_parameters)
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
        for row, some in zip(signs, maps.may_lead(signs, 1, "t"), strict=True):
            t = maps.maps(row, some, "t")
            found.append(np.where(np.isnan(t), -np.inf, t).max(axis=1))
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
        for row, some in zip(signs, maps.may_pass(signs), strict=True):
            above = maps.above(row, some)
            few = above.any(axis=1)
            members = np.ascontiguousarray(above[few])
            largest = np.zeros(members.shape[1])
            if len(members):
                _, of_map, cluster = components(members, hood.pairs(some[few]))
                np.maximum.at(largest, of_map, np.bincount(cluster)[cluster])
            found.append(largest)
        return found

    return _over_flips(maps.stack, control, labels, extremes) + 1


class _FlippedExtent:
    """Clusters of at least a size by flips, which no exchange changes."""

    def __init__(self, sizes: Floats) -> None:
        self._sizes = sizes

    def passing(self, weights: Floats, features: Ints, above: Bools) -> Bools:
        """See `Narrowing`."""
        return above

    def least_sizes(self, weights: Floats) -> Floats:
        """See `Narrowing`."""
        return self._sizes


# -- from each exchange's own maps ------------------------------------------------------------


class _StepUp:
    """Benjamini & Hochberg's threshold."""

    def __init__(self, maps: FoldMaps, n_tests: Ints, level: float, n_parameters: int) -> None:
        self._maps, self._n_tests, self._level = maps, n_tests, level
        self._off = n_parameters - 1

    def passing(self, weights: Floats, features: Ints, above: Bools) -> Bools:
        """See `Narrowing`."""
        t = np.where(above.T, self._maps.maps(weights, features, "t"), -np.inf)
        rows = self._maps.stack.rows(features) - self._off
        p = step_up(t, rows, self._n_tests, self._level)
        return np.ascontiguousarray((t > critical_t(p, rows)).T)

    def least_sizes(self, weights: Floats) -> None:
        """See `Narrowing`."""


def _voxels(space: Space) -> Grid:
    if not isinstance(space, Grid):
        raise InputError(
            "a random field needs a grid of voxels",
            got=type(space).__name__,
            remedy="control the error by flips",
        )
    return space


class _Smoothness:
    """How smooth the noise of each fold's selection side is, under any signs.

    Products of neighbours are kept for all folds: 24 bytes a feature and fold.
    """

    def __init__(self, stack: FoldStack, space: Grid) -> None:
        self.stack, self.rows = stack, [len(fold.selection) for fold in stack.folds]
        if min(self.rows) < _LEAST_ROWS:
            raise InputError(
                "too few maps for a random field",
                expected=f"at least {_LEAST_ROWS} on the side that chooses",
                got=str(min(self.rows)),
                remedy="more subjects, or folds that hold out fewer",
            )
        self._pairs = axis_pairs(space)
        parts = [pair_products(stack.x[list(fold.held_out)], self._pairs) for fold in stack.folds]
        self._products = [without_each(np.stack(along)) for along in zip(*parts, strict=True)]
        self._squares = np.empty((len(self.rows), stack.n_features))
        for block in stack.pieces():
            # Without a square a feature counts for nothing.
            complete = stack.rows(block) == np.array(self.rows)[:, None]
            self._squares[:, block] = np.where(complete, stack.squares(block), 0)

    def fwhm(self, weights: Floats) -> Floats:
        """(n_folds, 3), in voxels."""
        sums = np.empty(self._squares.shape)
        for block in self.stack.pieces():
            sums[:, block] = self.stack.sums(weights, block)
        return np.stack(
            [
                fwhm_from_sums(
                    n,
                    sums[k],
                    self._squares[k],
                    [along[k] for along in self._products],
                    self._pairs,
                )
                for k, n in enumerate(self.rows)
            ]
        )


class _FieldHeight:
    """The random field's threshold on t (Worsley et al. 1996, HBM 4:58-73)."""

    def __init__(self, maps: FoldMaps, n_tests: Ints, level: float, space: Grid) -> None:
        self._maps, self._n_tests, self._level = maps, n_tests.tolist(), level
        stack = maps.stack
        self._smoothness = _Smoothness(stack, space)
        if stack.present is None:
            self._cells = [lattice(space)] * len(stack.folds)
        else:
            tested = stack.rows(slice(None)) >= stack.least()
            self._cells = [lattice(space.restricted(features)) for features in tested]

    def passing(self, weights: Floats, features: Ints, above: Bools) -> Bools:
        """See `Narrowing`."""
        if not len(features):
            return above
        t = np.where(above.T, self._maps.maps(weights, features, "t"), -np.inf)
        peaks = np.minimum(t.max(axis=1), _HIGHEST)
        fwhm = self._smoothness.fwhm(weights)
        p = np.zeros(len(peaks))
        for k in np.flatnonzero(above.any(axis=0)).tolist():
            df, n = self._smoothness.rows[k] - 1, self._n_tests[k]
            region = resels(self._cells[k], fwhm[k])
            # A peak that is too likely is below the height, which takes longer to find.
            if corrected_p(peaks[k], region, df, n) <= self._level * (1 + _TIE):
                p[k] = special.stdtr(df, -height_threshold(region, df, self._level, n))
        # As a p, for features where some rows lack data.
        return np.ascontiguousarray((t > critical_t(p, self._maps.stack.rows(features))).T)

    def least_sizes(self, weights: Floats) -> None:
        """See `Narrowing`."""


class _FieldExtent:
    """Clusters of at least the random field's size (Friston et al. 1994, HBM 1:210-220)."""

    def __init__(self, rule: Cluster, control: Controlled, stack: FoldStack, space: Grid) -> None:
        self._rule, self._level = rule, control.level
        self._smoothness = _Smoothness(stack, space)
        n_tests = np.zeros(len(stack.folds), dtype=np.intp)
        for block in stack.pieces():
            tested = stack.rows(block) >= stack.least()
            shape = len(tested), block.stop - block.start
            n_tests += np.count_nonzero(np.broadcast_to(tested, shape), axis=1)
        self._n_tests = n_tests.tolist()
        if not any(len(one) for one, _ in axis_pairs(space)):
            raise InputError("no clusters in a region without neighbouring voxels")

    def passing(self, weights: Floats, features: Ints, above: Bools) -> Bools:
        """See `Narrowing`."""
        return above

    def least_sizes(self, weights: Floats) -> Floats:
        """See `Narrowing`."""
        sizes = np.full(len(self._n_tests), np.inf)
        for k, fwhm in enumerate(self._smoothness.fwhm(weights)):
            # Neighbours that never vary, or never differ, say nothing of sizes: none is found.
            if self._n_tests[k] and np.isfinite(fwhm).any() and not np.isinf(fwhm).any():
                t = float(self._rule.critical(self._smoothness.rows[k]))
                z = z_equivalent(t, self._smoothness.rows[k] - 1)
                widths = (float(fwhm[0]), float(fwhm[1]), float(fwhm[2]))
                sizes[k] = ClusterSizes(self._n_tests[k], widths, z).critical_size(self._level)
        return sizes
