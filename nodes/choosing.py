"""How a rule chooses every fold's features from the folds' maps under one exchange.

Two kinds of rule: what exceeds a threshold (all of it, or clusters of it), and what leads a
ranking (so many, or the sphere around the first). Either asks the maps first which features
may matter, and then decides there with the folds' exact maps. The maps' model (one-sample under
signs, a score under exchange ...) is behind `FoldMaps`; an exchange is one weight per row.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from copy import copy
from dataclasses import dataclass
from functools import lru_cache, partial
from typing import Protocol

import numpy as np
import numpy.typing as npt

from .errors import InputError
from .foldstack import FoldStack
from .masks import (
    Cluster,
    MaskRule,
    Neighbourhood,
    PeakSphere,
    Spheres,
    Strongest,
    Threshold,
    distances,
    keep_clusters,
    strongest,
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

    def may_lead(self, weights: Floats, k: int, kind: str) -> list[Ints]:
        """For each row of weights, features with all that are in the first k of a fold."""


class Narrowing(Protocol):
    """What a control decides on the maps of each exchange (see `foldcontrol`)."""

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
    """A rule on the folds' maps."""

    def candidates(self, weights: Floats) -> list[Ints]:
        """For each row of weights, the features that may be in some fold's mask (or its peak)."""

    def everywhere(self, weights: Floats) -> Ints:
        """The same for one row of weights, without making the stack ready for many."""

    def members(self, weights: Floats, candidates: Ints) -> tuple[Ints, Bools]:
        """The features in any fold's mask, ascending, and (n_features_found, n_folds) bool."""

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

    def candidates(self, weights: Floats) -> list[Ints]:
        """See `Chooser`."""
        return self._maps.may_pass(weights)

    def everywhere(self, weights: Floats) -> Ints:
        """See `Chooser`."""
        return np.concatenate(
            [
                block.start + np.flatnonzero(self._maps.above(weights, block).any(axis=1))
                for block in self._maps.stack.pieces()
            ]
        )

    def members(self, weights: Floats, candidates: Ints) -> tuple[Ints, Bools]:
        """See `Chooser`."""
        above = self._maps.above(weights, candidates)
        some = above.any(axis=1)
        found, members = candidates[some], np.ascontiguousarray(above[some])
        least = None
        if self._narrowing is not None:
            members = self._narrowing.passing(weights, found, members)
            found, members = _in_any(found, members)
            least = partial(self._narrowing.least_sizes, weights)
        if isinstance(self._rule, Cluster):
            assert self._hood is not None
            t = self._maps.maps(weights, found, "t").T if self._rule.pick == "peak" else None
            members = keep_clusters(
                members, found, self._rule, self._hood, t, self._distance, least
            )
            found, members = _in_any(found, members)
        return found, members

    def on(self, maps: FoldMaps, narrowing: Narrowing | None) -> Chooser:
        """See `Chooser`."""
        other = copy(self)
        other._maps, other._narrowing = maps, narrowing
        return other


def _in_any(features: Ints, members: Bools) -> tuple[Ints, Bools]:
    """The features that are in any fold's mask."""
    some = members.any(axis=1)
    return features[some], members[some]


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

    def candidates(self, weights: Floats) -> list[Ints]:
        """See `Chooser`."""
        return self._maps.may_lead(weights, max(self._k), self._kind)

    def everywhere(self, weights: Floats) -> Ints:
        """See `Chooser`."""
        return np.arange(self._maps.stack.n_features)

    def members(self, weights: Floats, candidates: Ints) -> tuple[Ints, Bools]:
        """See `Chooser`."""
        found, members = leading(self._maps, weights, candidates, self._k, self._kind)
        return (found, members) if self._around is None else self._spheres(found, members)

    def on(self, maps: FoldMaps, narrowing: Narrowing | None) -> Chooser:
        """See `Chooser`."""
        other = copy(self)
        other._maps = maps
        return other

    def _spheres(self, peaks: Ints, members: Bools) -> tuple[Ints, Bools]:
        """The spheres around each fold's peak."""
        assert self._around is not None
        spheres = [self._around(peak) for peak in peaks.tolist()]
        found = np.unique(np.concatenate([np.empty(0, np.intp), *spheres]))
        inside = np.zeros((len(found), members.shape[1]), bool)
        for sphere, of_fold in zip(spheres, members, strict=True):
            # A fold has one peak, and so one sphere.
            inside[np.searchsorted(found, sphere)] |= of_fold
        return found, inside


def leading(
    maps: FoldMaps, weights: Floats, candidates: Ints, k: Sequence[int], kind: str
) -> tuple[Ints, Bools]:
    """The strongest of the candidates in each fold's map, so many as `k` says for the fold."""
    chosen = strongest_of_each(maps.maps(weights, candidates, kind), k)
    some = np.flatnonzero(chosen.any(axis=0))
    return candidates[some], np.ascontiguousarray(chosen[:, some].T)


def strongest_of_each(values: Floats, k: Sequence[int]) -> Bools:
    """`masks.strongest` of each map: (n_maps, n_features) bool.

    Parameters
    ----------
    values : (n_maps, n_features) float
    k : sequence of int
        How many of each map.

    Examples
    --------
    >>> strongest_of_each(np.array([[3.0, 1.0, 2.0], [1.0, 1.0, np.nan]]), [2, 1]).tolist()
    [[True, False, True], [True, False, False]]
    """
    chosen = np.zeros(values.shape, bool)
    many = max(k)
    alike = min(k) == many and 0 < many < values.shape[1]
    if alike:
        # All at once, where as many are at least the k-th value as are wanted.
        ranked = np.where(np.isnan(values), -np.inf, values)
        limit = np.partition(ranked, -many, axis=1)[:, -many, None]
        np.greater_equal(ranked, limit, out=chosen)
    for one, few in enumerate(k):
        if few and not (alike and limit[one] > -np.inf and chosen[one].sum() == few):
            chosen[one] = strongest(values[one], few)
    return chosen


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
        self._chooser: Chooser
        if isinstance(rule, Threshold | Cluster):
            self._chooser = ByThreshold(rule, maps, space, narrowing)
        elif isinstance(rule, Strongest | PeakSphere):
            self._chooser = ByRank(rule, maps, space)
        else:
            raise InputError("no rule that folds can choose by", got=repr(rule))

    def on(self, maps: FoldMaps, narrowing: Narrowing | None) -> Choosing:
        """The same on the maps of another stack, with the same people and features."""
        other = copy(self)
        other._maps, other._chooser = maps, self._chooser.on(maps, narrowing)
        return other

    def candidates(self, weights: Floats) -> list[Ints]:
        """See `Chooser`."""
        return self._chooser.candidates(weights)

    def everywhere(self, weights: Floats) -> Ints:
        """See `Chooser`."""
        return self._chooser.everywhere(weights)

    def maps_at(self, weights: Floats, features: Ints, kind: str) -> Floats:
        """(n_folds, n_some_features) the folds' maps; see `FoldMaps`."""
        return self._maps.maps(weights, features, kind)

    def chosen(self, weights: Floats, candidates: Ints) -> Chosen:
        """Every fold's features, from candidates that hold all of them."""
        found, members = self._chooser.members(weights, candidates)
        nothing = np.flatnonzero(~members.any(axis=0)).tolist()
        if not nothing or not self._stand_ins:
            return Chosen(found, members, nothing, [])
        among: Ints = np.arange(self._maps.stack.n_features)
        if self._maps.stack.turned:
            (among,) = self._maps.may_lead(weights[None], self._stand_ins, "t")
        wanted = [self._stand_ins if k in nothing else 0 for k in range(members.shape[1])]
        more, extra = leading(self._maps, weights, among, wanted, "t")
        both = np.union1d(found, more)
        merged = np.zeros((len(both), members.shape[1]), bool)
        merged[np.searchsorted(both, found)] |= members
        merged[np.searchsorted(both, more)] |= extra
        empty = np.flatnonzero(~merged.any(axis=0)).tolist()
        return Chosen(both, merged, empty, [k for k in nothing if k not in empty])
