"""Data sets in which nothing is there, through a study's own plan.

A data set has the study's rows: who they belong to, which features each of them lacks, and
noise of its smoothness with a standard deviation of 1 at every feature. A plan is given such
arrays and says what it estimates and which p it gives, as a run of the study does.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from .groupmaps import group_map
from .masks import choose, strongest
from .parcels import family_t, label_means, person_means
from .procedure import Procedure
from .roi import block_values, one_sample_t, per_person
from .simulated import Noise
from .space import Grid

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# The part of their variance that rows of one exchange label have in common.
SHARED = 0.5


@dataclass(frozen=True)
class Found:
    """What a plan finds in one data set.

    Parameters
    ----------
    estimate : float
        With its sign, in standard deviations of one row's noise.
    p : float or None
        None without a test. Of a family of regions: the smallest adjusted one.
    empty : float
        Share of the masks in which the rule found nothing.
    """

    estimate: float
    p: float | None
    empty: float = 0.0


@dataclass(frozen=True)
class Rows:
    """The maps of one stack.

    Parameters
    ----------
    subs : tuple of str, one per row
        Whose map it is.
    people : tuple of str, one per row
        Who it counts as: rows of one label are exchanged together.
    present : (n_rows, n_features) bool
        Where the row has data.
    """

    subs: tuple[str, ...]
    people: tuple[str, ...]
    present: Bools


class OneGrid(Grid):
    """A grid that looks up its neighbours and coordinates once, for data set upon data set."""

    def __init__(self, grid: Grid) -> None:
        inside = np.zeros(int(np.prod(grid.shape)), bool)
        inside[grid.voxels] = True
        super().__init__(grid.shape, grid.affine, inside)
        self._tables: dict[int, Ints] = {}
        self._mm: Floats | None = None

    def neighbours(self, connectivity: int = 18) -> Ints:
        """As `Grid.neighbours`."""
        if connectivity not in self._tables:
            self._tables[connectivity] = super().neighbours(connectivity)
        return self._tables[connectivity]

    def coordinates(self) -> Floats:
        """As `Grid.coordinates`."""
        if self._mm is None:
            self._mm = super().coordinates()
        return self._mm


class NullMaps:
    """Draws the maps of a study in which there is no effect.

    Parameters
    ----------
    noise : Noise
    tested : Rows
    choosing : Rows, optional
        The maps that choose, when they are not those that are tested.
    shared : float
        Part of the variance that rows of one person have in common, if there are several.
    persistent : float
        Part of the variance that all maps of one subject have in common.

    Examples
    --------
    >>> rows = Rows(("1", "2", "3"), ("1", "2", "2"), np.array([[True], [True], [False]]))
    >>> maps = NullMaps(Noise(Grid((1, 1, 1), np.eye(4)), (0, 0, 0)), rows)
    >>> tested, choosing = maps.draw(np.random.default_rng(1))
    >>> np.isnan(tested).ravel().tolist(), choosing
    ([False, False, True], None)
    """

    def __init__(
        self,
        noise: Noise,
        tested: Rows,
        choosing: Rows | None = None,
        shared: float = SHARED,
        persistent: float = 0.0,
    ) -> None:
        self._noise, self.tested, self.choosing = noise, tested, choosing
        self._shared, self._persistent = shared, persistent
        stacks = [tested] if choosing is None else [tested, choosing]
        self._subs = sorted({sub for rows in stacks for sub in rows.subs})

    def draw(self, rng: np.random.Generator) -> tuple[Floats, Floats | None]:
        """(n_rows, n_features) float32 of the tested maps, and of those that choose; NaN is none.

        Parameters
        ----------
        rng : Generator
        """
        lasting = self._noise.draw(rng, len(self._subs)) if self._persistent else None
        tested = self._stack(rng, self.tested, lasting)
        choosing = self.choosing
        return tested, None if choosing is None else self._stack(rng, choosing, lasting)

    def _stack(self, rng: np.random.Generator, rows: Rows, lasting: Floats | None) -> Floats:
        x = self._noise.draw(rng, len(rows.people))
        several = sorted({who for who in rows.people if rows.people.count(who) > 1})
        if self._shared and several:
            parts = dict(zip(several, self._noise.draw(rng, len(several)), strict=True))
            for i, who in enumerate(rows.people):
                if who in parts:
                    x[i] = _mixed(x[i], parts[who], self._shared)
        if lasting is not None:
            own = lasting[[self._subs.index(sub) for sub in rows.subs]]
            x = _mixed(x, own, self._persistent)
        x[~rows.present] = np.nan
        return x


def _mixed(own: Floats, common: Floats, share: float) -> Floats:
    """Noise of variance 1, of which a share is common."""
    made: Floats = np.float32(np.sqrt(1 - share)) * own + np.float32(np.sqrt(share)) * common
    return made


@dataclass(frozen=True)
class Searched:
    """Where a region is looked for, or lies: one place for all rows, or one for each.

    Parameters
    ----------
    grid : Grid
        All features that any row needs.
    inside : (1 or n_rows, n_features) float
        Not 0 inside; the weights, when the summary is weighted.
    """

    grid: Grid
    inside: Floats

    def of_rows(self, n_rows: int) -> list[tuple[Ints, Grid]]:
        """Per row: the features of its place, and the grid of these."""
        made: list[tuple[Ints, Grid]] = [
            (np.flatnonzero(place), OneGrid(self.grid.restricted(place)))
            for place in self.inside != 0
        ]
        return made * n_rows if len(made) == 1 else made


# -- plans ------------------------------------------------------------------------------------


class CrossFitted:
    """Folds over subjects and the whole-procedure exchange test.

    Parameters
    ----------
    maps : NullMaps
    procedure : Procedure
    grid : Grid
        The search region.
    n_flips : int
    plain_t : bool
        The ordinary t-test of the held-out values instead, which is not right for them.
    """

    def __init__(
        self,
        maps: NullMaps,
        procedure: Procedure,
        grid: Grid,
        n_flips: int,
        *,
        plain_t: bool = False,
    ) -> None:
        self._maps, self._procedure, self._grid = maps, _going_on(procedure), OneGrid(grid)
        self._n_flips, self._plain_t = n_flips, plain_t

    def __call__(self, rng: np.random.Generator) -> Found:
        """What the plan finds in the next data set."""
        tested, choosing = self._maps.draw(rng)
        seed = int(rng.integers(2**62))
        rows = self._maps.tested
        ready = self._procedure.prepare(
            tested if choosing is None else choosing,
            rows.people,
            self._grid,
            rows.subs,
            None if choosing is None else tested,
            copy=False,
        )
        outcome = ready.outcome()
        empty = len(outcome.empty) / len(ready.folds)
        if self._plain_t:
            p = one_sample_t(ready.per_person(outcome.values)).p
        else:
            p = ready.flip_test(self._n_flips, seed).p
        return Found(outcome.estimate, p, empty)


class OwnRuns:
    """Each subject's own masks, from their other runs; runs averaged; t across subjects.

    Parameters
    ----------
    maps : NullMaps
        A row a run.
    procedure : Procedure
        Its scheme folds over runs.
    searched : Searched
    runs : sequence of str, one per row
    """

    def __init__(
        self, maps: NullMaps, procedure: Procedure, searched: Searched, runs: Sequence[str]
    ) -> None:
        self._maps, self._procedure, self._runs = maps, _going_on(procedure), runs
        self._places = searched.of_rows(len(runs))
        self._rows: dict[str, list[int]] = {}
        for row, who in enumerate(maps.tested.people):
            self._rows.setdefault(who, []).append(row)

    def __call__(self, rng: np.random.Generator) -> Found:
        """What the plan finds in the next data set."""
        maps, _ = self._maps.draw(rng)
        inside: list[Ints] = [np.empty(0, np.intp)] * len(maps)
        for rows in self._rows.values():
            # The runs of a subject have one place, the subject's.
            features, grid = self._places[rows[0]]
            runs = [self._runs[row] for row in rows]
            ready = self._procedure.prepare(maps[rows][:, features], runs, grid)
            for fold, mask in zip(ready.folds, ready.masks(), strict=True):
                for held in fold.held_out:
                    inside[rows[held]] = features[mask]
        return _by_t(maps, inside, self._maps.tested.people, self._procedure)


class Localizer:
    """A mask from other maps, each row's own or one for all; t across subjects.

    Parameters
    ----------
    maps : NullMaps
        With maps that choose.
    procedure : Procedure
    searched : Searched
    group_mask : bool
        One mask for all, from the group map of the maps that choose.
    spread : float
        The standard deviation of the maps that choose, in the units of a rule's height.
    """

    def __init__(
        self,
        maps: NullMaps,
        procedure: Procedure,
        searched: Searched,
        *,
        group_mask: bool = False,
        spread: float = 1.0,
    ) -> None:
        self._maps, self._procedure, self._group = maps, procedure, group_mask
        self._spread = np.float32(spread)
        self._places = searched.of_rows(len(maps.tested.people))

    def __call__(self, rng: np.random.Generator) -> Found:
        """What the plan finds in the next data set."""
        tested, choosing = self._maps.draw(rng)
        assert choosing is not None, "a localizer has maps that choose"
        procedure = self._procedure
        if self._group:
            features, grid = self._places[0]
            mask = group_mask(choosing[:, features], procedure, grid)
            inside = [features[mask]]
        else:
            sign = _sign(procedure)
            inside = []
            for row, (features, grid) in zip(choosing, self._places, strict=True):
                values = sign * self._spread * row[features]
                mask = _stood_in(choose(values, procedure.rule, grid), values, procedure)
                inside.append(features[mask])
        return _by_t(tested, inside, self._maps.tested.people, procedure)


class Fixed:
    """A region fixed beforehand; t across subjects.

    Parameters
    ----------
    maps : NullMaps
    searched : Searched
        The region.
    summary : str
    """

    def __init__(self, maps: NullMaps, searched: Searched, summary: str) -> None:
        self._maps, self._summary = maps, summary
        self._inside = [np.flatnonzero(place) for place in searched.inside]
        self._weights = [place[at] for place, at in zip(searched.inside, self._inside, strict=True)]

    def __call__(self, rng: np.random.Generator) -> Found:
        """What the plan finds in the next data set."""
        maps, _ = self._maps.draw(rng)
        people = self._maps.tested.people
        values = read(maps, self._inside, people, self._summary, self._weights)
        test = one_sample_t(per_person(values, people))
        return Found(test.mean, test.p)


class Family:
    """The labels of an atlas: one family of t-tests, adjusted by Holm.

    Parameters
    ----------
    maps : NullMaps
    labels : (1 or n_rows, n_features) int
        The label of each feature, 0 for none.
    numbers : sequence of int
        The labels that are read; none for all.
    min_coverage : float
        A map that has data in less than this part of a label does not count there.
    """

    def __init__(
        self, maps: NullMaps, labels: Ints, numbers: Sequence[int], min_coverage: float
    ) -> None:
        self._maps, self._least = maps, min_coverage
        wanted = np.array(sorted(numbers)) if numbers else np.unique(labels[labels != 0])
        self._n = len(wanted)
        parcel = np.where(np.isin(labels, wanted), np.searchsorted(wanted, labels), -1)
        self._parcel = np.broadcast_to(parcel, (len(maps.tested.people), parcel.shape[1]))

    def __call__(self, rng: np.random.Generator) -> Found:
        """The mean estimate over the labels, and whether any of them would be rejected."""
        maps, _ = self._maps.draw(rng)
        values = np.empty((len(maps), self._n))
        for i, (row, parcel) in enumerate(zip(maps, self._parcel, strict=True)):
            (at,) = np.nonzero(parcel >= 0)
            sizes = np.bincount(parcel[at], minlength=self._n)
            means, coverage = label_means(row[at], parcel[at], sizes, ~np.isnan(row[at]))
            values[i] = np.where((coverage > 0) & (coverage >= self._least), means, np.nan)
        family = family_t(person_means(values, self._maps.tested.people))
        tested = [one for one in family if one.p_holm is not None]
        if not tested:
            return Found(0.0, 1.0)
        return Found(
            float(np.mean([one.mean for one in tested])),
            min(one.p_holm for one in tested if one.p_holm is not None),
        )


class Circular:
    """Chosen and read on the same data: a value, the mean over people, and no test.

    Where the rule finds nothing the value counts as 0.

    Parameters
    ----------
    maps : NullMaps
    procedure : Procedure
    grid : Grid
        The search region.
    """

    def __init__(self, maps: NullMaps, procedure: Procedure, grid: Grid) -> None:
        self._maps, self._procedure, self._grid = maps, procedure, OneGrid(grid)

    def __call__(self, rng: np.random.Generator) -> Found:
        """What the plan finds in the next data set."""
        maps, _ = self._maps.draw(rng)
        inside = np.flatnonzero(group_mask(maps, self._procedure, self._grid))
        people = self._maps.tested.people
        values = read(maps, [inside], people, self._procedure.summary)
        return Found(float(np.mean(per_person(values, people))), None, float(len(inside) == 0))


# -- what they share --------------------------------------------------------------------------


def group_mask(effects: Floats, procedure: Procedure, grid: Grid) -> Bools:
    """The region that a rule reads off the group map of all effects.

    Parameters
    ----------
    effects : (n_rows, n_features) float
        NaN where data is missing.
    procedure : Procedure
    grid : Grid

    Returns
    -------
    (n_features,) bool
    """
    missing, rule = procedure.missing, procedure.rule
    values = _sign(procedure) * group_map(effects, missing, rule.map_kind)
    n = missing.present(effects).sum(axis=0)
    return _stood_in(choose(values, rule, grid, n), values, procedure)


def read(
    maps: Floats,
    inside: Sequence[Ints],
    people: Sequence[str],
    summary: str,
    weights: Sequence[Floats] | None = None,
) -> list[float]:
    """Each row's value in its own mask, as an extraction reads it.

    Parameters
    ----------
    maps : (n_rows, n_features) float
        NaN where data is missing.
    inside : sequence of (n_in_mask,) int
        The features of each row's mask, or of the one for all.
    people : sequence of str, one per row
        A component is that of all rows of one person in the one mask.
    summary : str
    weights : sequence of (n_in_mask,) float, optional
        Of the masks; for "weighted".

    Returns
    -------
    list of float, one per row
    """
    together = summary == "component" and len(inside) == 1
    blocks: dict[object, list[int]] = {}
    for row, who in enumerate(people):
        blocks.setdefault(who if together else row, []).append(row)
    values = [0.0] * len(maps)
    for rows in blocks.values():
        mask = 0 if len(inside) == 1 else rows[0]
        block = maps[rows][:, inside[mask]]
        weighing = weights[mask] if weights is not None and summary == "weighted" else None
        made, _ = block_values(block, ~np.isnan(block), summary, weighing)
        for row, value in zip(rows, made.tolist(), strict=True):
            values[row] = value
    return values


def _by_t(
    maps: Floats, inside: Sequence[Ints], people: Sequence[str], procedure: Procedure
) -> Found:
    """Student's t of the subjects' values."""
    test = one_sample_t(per_person(read(maps, inside, people, procedure.summary), people))
    return Found(test.mean, test.p, float(np.mean([len(one) == 0 for one in inside])))


def _stood_in(mask: Bools, values: Floats, procedure: Procedure) -> Bools:
    """The mask, or the strongest features where the plan wants them for an empty one."""
    return mask if mask.any() or not procedure.k else strongest(values, procedure.k)


def _going_on(procedure: Procedure) -> Procedure:
    """A plan that stops at an empty fold: here the fold counts as empty, as in a flip."""
    stops = procedure.on_empty == "stop"
    return replace(procedure, on_empty="empty") if stops else procedure


def _sign(procedure: Procedure) -> np.float32:
    return np.float32(-1 if procedure.tail == "negative" else 1)
