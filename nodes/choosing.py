"""How a rule chooses every fold's features from the folds' maps under one exchange.

Two kinds of rule: what exceeds a threshold (all of it, or clusters of it), and what leads a
ranking (so many, or the sphere around the first). Either asks the maps first which features
may matter, and then decides there with the folds' exact maps. The maps' model (one-sample under
signs, a score under exchange ...) is behind `FoldMaps`; an exchange is one weight per row.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from copy import copy
from dataclasses import dataclass
from functools import lru_cache, partial
from typing import Protocol

import numpy as np
import numpy.typing as npt

from .errors import InputError
from .foldstack import FoldStack
from .leading import in_any, leading
from .masks import (
    Cluster,
    MaskRule,
    Neighbourhood,
    PeakSphere,
    Spheres,
    Strongest,
    Threshold,
    check_k,
    distances,
    keep_clusters,
)
from .space import Space

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# Spheres kept.
_SPHERES = 4096


class FoldMaps(Protocol):
    """The folds' maps under weights of the rows, exact and as a screen."""

    stack: FoldStack

    def counts(self, kind: str) -> Ints:
        """(n_folds,) features with a value in each fold's map; no exchange changes it."""

    def above(self, weights: Floats, features: Ints | slice) -> Bools:
        """(n_some_features, n_folds) whether t exceeds the critical value."""

    def maps(self, weights: Floats, features: Ints, kind: str) -> Floats:
        """(n_folds, n_some_features) the folds' maps; NaN where there is no value."""

    def may_pass(self, weights: Floats) -> list[Ints]:
        """For each row of weights, features with all that are above the threshold in a fold."""

    def leaders(self, weights: Floats, k: Sequence[int], kind: str) -> Iterable[tuple[Ints, Bools]]:
        """For each row of weights, the features in the first k (of each fold) of any fold.

        Ascending, with (n_features_found, n_folds) bool.
        """


class Narrowing(Protocol):
    """What a control decides on the maps of each exchange (see `foldcontrol`)."""

    def each(self, weights: Floats) -> Iterable[tuple[Ints, Bools]]:
        """For each row of weights what passes in any fold; see `passed`."""

    def passing(self, weights: Floats, features: Ints, above: Bools) -> Bools:
        """(n_some_features, n_folds) what passes among features above the maps' threshold.

        `features` are all that are above it in some fold.
        """

    def least_sizes(self, weights: Floats, largest: Ints) -> Floats:
        """(n_folds,) what the size of a cluster must be.

        `largest` are the sizes of the folds' largest clusters: where that is too small, any size
        above it will do.
        """


class Chooser(Protocol):
    """A rule on the folds' maps: features in any fold's mask, ascending, and in whose.

    The latter is (n_features_found, n_folds) bool.
    """

    def each(self, weights: Floats) -> Iterable[tuple[Ints, Bools]]:
        """For each row of weights; makes the stack ready for many."""

    def one(self, weights: Floats) -> tuple[Ints, Bools]:
        """For one row of weights, without making the stack ready for many."""

    def on(self, maps: FoldMaps, narrowing: Narrowing | None) -> Chooser:
        """The same rule on the maps of another stack."""


class ByThreshold:
    """What exceeds a threshold: all features, or clusters of them."""

    def __init__(
        self,
        rule: Threshold | Cluster,
        maps: FoldMaps,
        space: Space,
        narrowing: Narrowing | None = None,
    ) -> None:
        self._rule, self._maps, self._narrowing = rule, maps, narrowing
        self._hood: Neighbourhood | None = None
        self._distance: Floats | None = None
        if isinstance(rule, Cluster):
            self._hood = Neighbourhood(space, rule.connectivity)
            self._distance = distances(space, rule.near)

    def each(self, weights: Floats) -> Iterator[tuple[Ints, Bools]]:
        """See `Chooser`."""
        control = self._narrowing
        found = passed(self._maps, weights) if control is None else control.each(weights)
        for row, (features, members) in zip(weights, found, strict=True):
            yield self._kept(row, features, members)

    def one(self, weights: Floats) -> tuple[Ints, Bools]:
        """See `Chooser`."""
        stack = self._maps.stack
        parts = [
            in_any(stack.numbers(block), self._maps.above(weights, block))
            for block in stack.batches()
        ]
        found = np.concatenate([features for features, _ in parts])
        members = np.concatenate([above for _, above in parts])
        order = np.argsort(found)
        found, members = found[order], members[order]
        if self._narrowing is not None:
            found, members = in_any(found, self._narrowing.passing(weights, found, members))
        return self._kept(weights, found, members)

    def _kept(self, weights: Floats, found: Ints, members: Bools) -> tuple[Ints, Bools]:
        """What the rule keeps, of all features that pass the threshold in any fold."""
        if isinstance(self._rule, Cluster):
            assert self._hood is not None
            least = None
            if self._narrowing is not None:
                least = partial(self._narrowing.least_sizes, weights)
            t = self._maps.maps(weights, found, "t").T if self._rule.pick == "peak" else None
            members = keep_clusters(
                members, found, self._rule, self._hood, t, self._distance, least
            )
            found, members = in_any(found, members)
        return found, members

    def on(self, maps: FoldMaps, narrowing: Narrowing | None) -> Chooser:
        """See `Chooser`."""
        other = copy(self)
        other._maps, other._narrowing = maps, narrowing
        return other


def passed(maps: FoldMaps, weights: Floats) -> Iterator[tuple[Ints, Bools]]:
    """For each row of weights the features above the maps' threshold in any fold.

    Ascending, with (n_features_found, n_folds) bool.
    """
    for row, may in zip(weights, maps.may_pass(weights), strict=True):
        yield in_any(may, maps.above(row, may))


class ByRank:
    """What leads a ranking: so many features, or the sphere around the first."""

    def __init__(self, rule: Strongest | PeakSphere, maps: FoldMaps, space: Space) -> None:
        self._kind, self._maps = rule.map_kind, maps
        self._around: Callable[[int], Ints] | None = None
        n_folds = len(maps.stack.folds)
        if isinstance(rule, PeakSphere):
            # Most folds of an exchange have one peak, and many exchanges have it again.
            self._around = lru_cache(_SPHERES)(Spheres(space, rule.radius).around)
            self._k = [1] * n_folds
        elif rule.k:
            self._k = [rule.k] * n_folds
        else:
            self._k = [rule.number(n) for n in maps.counts(rule.map_kind).tolist()]

    def each(self, weights: Floats) -> Iterator[tuple[Ints, Bools]]:
        """See `Chooser`."""
        for found, members in self._maps.leaders(weights, self._k, self._kind):
            yield self._around_peaks(found, members)

    def one(self, weights: Floats) -> tuple[Ints, Bools]:
        """See `Chooser`."""
        everything: Ints = np.arange(self._maps.stack.n_features)
        maps = self._maps.maps(weights, everything, self._kind)
        return self._around_peaks(*leading(maps, everything, self._k))

    def on(self, maps: FoldMaps, narrowing: Narrowing | None) -> Chooser:
        """See `Chooser`."""
        other = copy(self)
        other._maps = maps
        return other

    def _around_peaks(self, peaks: Ints, members: Bools) -> tuple[Ints, Bools]:
        """The spheres around each fold's peak, if that is the rule."""
        if self._around is None:
            return peaks, members
        spheres = [self._around(peak) for peak in peaks.tolist()]
        found = np.unique(np.concatenate([np.empty(0, np.intp), *spheres]))
        inside = np.zeros((len(found), members.shape[1]), bool)
        for sphere, of_fold in zip(spheres, members, strict=True):
            # A fold has one peak, and so one sphere.
            inside[np.searchsorted(found, sphere)] |= of_fold
        return found, inside


@dataclass(frozen=True)
class Chosen:
    """Every fold's features under one exchange.

    Parameters
    ----------
    features : (n_found,) int
        In any fold's mask, ascending.
    members : (n_found, n_folds) bool
    empty, replaced : list of int
        Folds in which the rule found nothing: left empty, or replaced by the strongest.
    """

    features: Ints
    members: Bools
    empty: list[int]
    replaced: list[int]


class Choosing:
    """A rule, and what stands in where it finds nothing.

    Parameters
    ----------
    rule : Threshold, Cluster, Strongest or PeakSphere
    maps : FoldMaps
    space : Space
    stand_ins : int
        How many of the strongest features stand in for an empty mask; 0: it stays empty.
    narrowing : Narrowing, optional
        What a control decides on each exchange's maps.
    """

    def __init__(
        self,
        rule: MaskRule,
        maps: FoldMaps,
        space: Space,
        stand_ins: int,
        narrowing: Narrowing | None = None,
    ) -> None:
        self._maps, self._stand_ins = maps, stand_ins
        check_k(rule.k if isinstance(rule, Strongest) else stand_ins, maps.stack.n_features)
        self._chooser: Chooser
        if isinstance(rule, Threshold | Cluster):
            self._chooser = ByThreshold(rule, maps, space, narrowing)
        elif isinstance(rule, Strongest | PeakSphere):
            self._chooser = ByRank(rule, maps, space)
        else:
            raise InputError("no rule that folds can choose by", got=repr(rule))
        self._kind = rule.map_kind

    def on(self, maps: FoldMaps, narrowing: Narrowing | None) -> Choosing:
        """The same on the maps of another stack, with the same people and features."""
        other = copy(self)
        other._maps, other._chooser = maps, self._chooser.on(maps, narrowing)
        return other

    def each(self, weights: Floats) -> Iterator[Chosen]:
        """Every fold's features for each row of weights; makes the stack ready for many."""
        for row, (found, members) in zip(weights, self._chooser.each(weights), strict=True):
            yield self._completed(row, found, members)

    def one(self, weights: Floats) -> Chosen:
        """Every fold's features for one row of weights."""
        return self._completed(weights, *self._chooser.one(weights))

    def maps_at(self, weights: Floats, features: Ints, kind: str) -> Floats:
        """(n_folds, n_some_features) the folds' maps; see `FoldMaps`."""
        return self._maps.maps(weights, features, kind)

    def _completed(self, weights: Floats, found: Ints, members: Bools) -> Chosen:
        """With what stands in for empty masks."""
        nothing = np.flatnonzero(~members.any(axis=0)).tolist()
        if not nothing or not self._stand_ins:
            return Chosen(found, members, nothing, [])
        wanted = [self._stand_ins if k in nothing else 0 for k in range(members.shape[1])]
        if self._maps.stack.turned:
            ((more, extra),) = self._maps.leaders(weights[None], wanted, self._kind)
        else:
            everything: Ints = np.arange(self._maps.stack.n_features)
            maps = self._maps.maps(weights, everything, self._kind)
            more, extra = leading(maps, everything, wanted)
        both = np.union1d(found, more)
        merged = np.zeros((len(both), members.shape[1]), bool)
        merged[np.searchsorted(both, found)] |= members
        merged[np.searchsorted(both, more)] |= extra
        empty = np.flatnonzero(~merged.any(axis=0)).tolist()
        return Chosen(both, merged, empty, [k for k in nothing if k not in empty])
