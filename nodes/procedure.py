"""Folds, group map, mask rule and summary as one pure object, and its flips.

`Procedure` is the plan; `Procedure.prepare` makes it ready on one stack of effects, and the
`Prepared` object then chooses every fold's mask and reads the held-out values under any signs
of the subjects. The graph's nodes use it with all signs +1; the test uses it with flipped
signs: one code path, so that the statistic of the data equals the graph's own.

How a flip is fast. The sums of squares of a fold do not change when signs are flipped, so the
bound that the fold's sum must exceed is computed once. A flip is one float32 matrix product
for the sums over all rows, one comparison of each feature with a bound that is low enough for
every fold and every rounding, and float64 work on the few features left: there the folds' own
sums are formed as `groupmaps.without_each` forms them, without the held-out rows, and decide.
A rule that ranks features has no such bound beforehand. The folds' exact maps at some features
that look strong give one for this flip: what does not reach the k-th value of these is not
among the k strongest.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from .errors import EmptyFoldError, InputError
from .flips import Signs, all_signs, random_signs
from .foldnull import mean_dice
from .folds import LeaveOneOut, Scheme
from .groupmaps import (
    Missing,
    bound_on_sum,
    filled,
    fold_sums,
    leave_out_maps,
    rows_with_data,
    t_from_sums,
    without_each,
)
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
from .roi import block_values, count_at_least, exchange_p, studentised
from .space import Space

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

ON_EMPTY = ("empty", "strongest", "stop")
TAILS = ("positive", "negative")
# Summaries of a row that change their sign with it, and that need nothing but the row.
READ_BY = ("mean", "median", "component")
_BLOCK = 8192
_FLIPS_AT_ONCE = 32
# Small enough for a BLAS to stay on one thread and in its cache: the product is soon done, and
# waiting for other threads is what would take long.
_SCREEN_BLOCK = 1024
# Relative rounding of a few float32 operations, generously.
_SINGLE = 1e-5


@dataclass(frozen=True)
class Outcome:
    """What a procedure gives under one choice of signs.

    Parameters
    ----------
    values : tuple of float, one per row (in the rows' given order)
        The row's summary in the mask of the fold that held it out; 0 when that mask is empty.
    coverage : tuple of float, one per row
        Share of the mask in which the row has data.
    t : float
        Studentised mean over subjects, positive in the direction of selection.
    estimate : float
        Mean over subjects, in the units of the effect and with its sign.
    sizes : tuple of int, one per fold
        Features in each mask.
    empty, replaced : tuple of str
        Names of the folds in which the rule found nothing: left empty, or replaced by the
        strongest features as the plan says.
    dice : float
        Mean Dice over pairs of fold masks.
    """

    values: tuple[float, ...]
    coverage: tuple[float, ...]
    t: float
    estimate: float
    sizes: tuple[int, ...]
    empty: tuple[str, ...]
    replaced: tuple[str, ...]
    dice: float


@dataclass(frozen=True)
class FlipTest:
    """A whole-procedure sign-flip test.

    Parameters
    ----------
    t, p : float
        The observed statistic; its one-sided p in the direction of selection.
    exact : bool
        Whether all 2^N flips were enumerated.
    n_flips, n_at_least : int
        Flips made, and flips whose statistic reaches the observed one.
    abs_t_quantile : float
        95 % quantile of |t| over the flips.
    noise_dice : float
        Mean over flips of the mean pairwise Dice of the fold masks: what noise alone gives.
    noise_empty : float
        Mean number of empty folds over flips.
    """

    t: float
    p: float
    exact: bool
    n_flips: int
    n_at_least: int
    abs_t_quantile: float
    noise_dice: float
    noise_empty: float


@dataclass(frozen=True)
class Procedure:
    """How regions are chosen and read: the whole of it, so that it can be repeated in a flip.

    Parameters
    ----------
    rule : Threshold, Cluster, Strongest or PeakSphere
        How a region is read off a group map.
    scheme : Scheme
        Who is held out in each fold.
    tail : {"positive", "negative"}
        The direction of selection, and of the one-sided test.
    on_empty : {"empty", "strongest", "stop"}
        When a fold finds nothing: its values count as 0; the `k` features with the highest t
        stand in; or the run ends with an error. In flips, "stop" counts as "empty".
    k : int
        For ``on_empty = "strongest"``.
    missing : Missing
        What counts as no data.
    summary : {"mean", "median", "component"}
        How a row is read in its mask; the component is that of all rows of one label.

    Examples
    --------
    >>> from sequester.nodes.space import Grid
    >>> effects = np.array([[.2, .2, .6], [-.1, 2.2, -.7], [.7, .2, -.9], [1.9, .8, -.2],
    ...                     [-.3, .2, 2.1]])
    >>> procedure = Procedure(Strongest(k=1, map_kind="mean"))
    >>> ready = procedure.prepare(effects, list("abcde"), Grid((3, 1, 1), np.eye(4)))
    >>> ready.outcome().values
    (0.2, -0.1, 0.2, 0.8, 0.2)
    >>> ready.flip_test(n_flips=999).p       # 2^5 = 32 flips: enumerated
    0.125
    """

    rule: MaskRule
    scheme: Scheme = field(default_factory=LeaveOneOut)
    tail: str = "positive"
    on_empty: str = "empty"
    k: int = 0
    missing: Missing = field(default_factory=Missing)
    summary: str = "mean"

    def __post_init__(self) -> None:
        for name, allowed in (("tail", TAILS), ("on_empty", ON_EMPTY), ("summary", READ_BY)):
            if getattr(self, name) not in allowed:
                raise InputError(
                    f"unknown {name}",
                    expected=f"one of {', '.join(allowed)}",
                    got=repr(getattr(self, name)),
                )
        if (self.on_empty == "strongest") != (self.k > 0):
            raise InputError(
                'on_empty = "strongest" and k go together',
                got=f"on_empty {self.on_empty!r}, k {self.k}",
            )

    def describe(self) -> str:
        """How a region is chosen, in words."""
        return self.rule.describe(self.tail)

    def prepare(
        self,
        effects: Floats,
        labels: Sequence[str],
        space: Space,
        names: Sequence[str] | None = None,
        tested: Floats | None = None,
        *,
        copy: bool = True,
    ) -> Prepared:
        """Make the procedure ready on one stack.

        Parameters
        ----------
        effects : (n_rows, n_features) float32 or float64
            One effect map a row, over the search region.
        labels : sequence of str
            Who each row belongs to; rows that share a label are held out and flipped together.
        space : Space
            Of the features.
        names : sequence of str, optional
            Tells rows of one label apart, so that their order cannot matter.
        tested : (n_rows, n_features) float, optional
            The maps that are read and tested, when they are not those that choose (another
            contrast of the same rows, held out and flipped together with it).
        copy : bool
            Without a copy the stack must not change afterwards; it saves the memory of one.
        """
        return Prepared(self, effects, labels, space, names, tested, copy=copy)


@dataclass(frozen=True)
class _Stack:
    """What every flip reads; arrays of one stack.

    Parameters
    ----------
    rows : (n_rows, n_features) float32
    by_feature : (n_features, n_rows)
        The stack, turned.
    """

    rows: Floats
    by_feature: Floats


@dataclass(frozen=True)
class _Bounds:
    """What makes flips of a threshold fast.

    Parameters
    ----------
    each : (n_features, n_folds) float64
        What each fold's sum must exceed.
    lowest : (n_features,) float32
        What the sum over all rows must exceed for any fold to pass; NaN where unknown.
    """

    each: Floats
    lowest: Floats


@dataclass(frozen=True)
class _Ranks:
    """What makes flips of a rank fast: no fold can give a feature more than sum x scale + reach.

    Here the sum is that over all rows, in float32, and what a fold gives is S / sqrt(n Q), which
    is t / sqrt(n - 1 + t^2), or the mean, according to the map.

    Parameters
    ----------
    scale, reach : (n_features,) float32
        Reach is NaN where unknown; both are 0 where no fold's map can be above 0.
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


class Prepared:
    """A procedure made ready on one stack of effects; see `Procedure.prepare`.

    Attributes
    ----------
    folds : list of Fold
        Over the rows in their given order.
    people : list of str
        The distinct labels, sorted.
    """

    def __init__(
        self,
        procedure: Procedure,
        effects: Floats,
        labels: Sequence[str],
        space: Space,
        names: Sequence[str] | None = None,
        tested: Floats | None = None,
        *,
        copy: bool = True,
    ) -> None:
        if effects.shape != (len(labels), space.n_features):
            raise ValueError(
                f"effects have shape {effects.shape}, the labels and the space "
                f"{(len(labels), space.n_features)}"
            )
        self.procedure, self.space = procedure, space
        self.folds = procedure.scheme.folds(labels)
        self.people = sorted(set(labels))
        self._labels = list(labels)
        # Rows are sorted before any arithmetic, so that their order cannot change a bit.
        order = sorted(
            range(len(labels)), key=lambda i: (labels[i], names[i] if names is not None else "")
        )
        self._order = np.array(order)
        self._person = np.array([self.people.index(labels[i]) for i in order])
        self._folds = procedure.scheme.folds([labels[i] for i in order])
        self._fold_of_row = np.empty(len(order), dtype=np.intp)
        for k, fold in enumerate(self._folds):
            self._fold_of_row[list(fold.held_out)] = k
        self._sign = -1.0 if procedure.tail == "negative" else 1.0
        x, self._present = filled(_sorted(effects, self._order, copy), procedure.missing)
        self._x = -x if self._sign < 0 else x
        self._read_x, self._read_present = self._x, self._present
        if tested is not None:
            if tested.shape != effects.shape:
                raise ValueError(f"tested maps of {tested.shape} for effects of {effects.shape}")
            read, self._read_present = filled(_sorted(tested, self._order, copy), procedure.missing)
            self._read_x = -read if self._sign < 0 else read
        self._blocks = [[row] for row in range(len(order))]
        if procedure.summary == "component":
            people = range(len(self.people))
            self._blocks = [np.flatnonzero(self._person == i).tolist() for i in people]
        rule = procedure.rule
        self._hood: Neighbourhood | None = None
        self._distance: Floats | None = None
        self._spheres: Spheres | None = None
        if isinstance(rule, Cluster):
            self._hood = Neighbourhood(space, rule.connectivity)
            self._distance = distances(space, rule.near)
        elif isinstance(rule, PeakSphere):
            self._spheres = Spheres(space, rule.radius)
        self._k = self._ranked_first()
        self._stack: _Stack | None = None
        self._bounds: _Bounds | None = None
        self._ranks: dict[str, _Ranks] = {}

    def _ranked_first(self) -> list[int]:
        """How many features the rule takes from the top of each fold's map; no signs change it."""
        rule, n_folds = self.procedure.rule, len(self._folds)
        if isinstance(rule, PeakSphere):
            return [1] * n_folds
        if not isinstance(rule, Strongest):
            return [0] * n_folds
        if rule.k:
            return [rule.k] * n_folds
        usable = np.zeros(n_folds, dtype=np.intp)
        for block in self._pieces():
            enough, _ = self._usable(block, rule.map_kind)
            usable += np.count_nonzero(enough, axis=1)
        return [rule.number(n) for n in usable.tolist()]

    def _pieces(self) -> list[slice]:
        """The features in blocks."""
        n_features = self._x.shape[1]
        return [
            slice(start, min(start + _BLOCK, n_features)) for start in range(0, n_features, _BLOCK)
        ]

    def _usable(self, block: slice, kind: str) -> tuple[Bools, Floats]:
        """(n_folds, n_features) whether enough rows have data, and how many have."""
        n = rows_with_data(None if self._present is None else self._present[:, block], self._folds)
        missing = self.procedure.missing
        least = np.array([[missing.least(len(fold.selection), kind)] for fold in self._folds])
        n = np.broadcast_to(n, (len(n), block.stop - block.start))
        return n >= least, n

    def _bound_of(self, features: Ints | slice) -> Floats:
        """(n_folds, n_features) what each fold's sum must exceed; no signs change it."""
        rule = self.procedure.rule
        assert isinstance(rule, Threshold | Cluster)
        present = None if self._present is None else self._present[:, features]
        n = rows_with_data(present, self._folds)
        with np.errstate(over="ignore", invalid="ignore"):
            Q = without_each(fold_sums(self._x[:, features], self._folds, square=True))
            bound = bound_on_sum(rule.critical(n), n, Q)
        # A feature of zeros alone never passes; nor one where too few rows have data.
        missing = self.procedure.missing
        least = np.array([[missing.least(len(fold.selection))] for fold in self._folds])
        bound[(Q == 0) | np.isnan(bound) | (n < least)] = np.inf
        return bound

    def _turned(self) -> _Stack:
        """What every flip reads, built when the first flip asks for it."""
        if self._stack is None:
            with np.errstate(over="ignore"):
                rows = self._x.astype(np.float32, copy=False)
            self._stack = _Stack(rows, np.ascontiguousarray(self._x.T))
        return self._stack

    def _most_off(self, block: slice) -> tuple[Floats, Floats, Bools]:
        """How far fold sums and the float32 sum over all rows can be apart.

        Returns
        -------
        reach : (n_folds, n_features)
            The most that leaving out a fold can change the sum.
        slack : (n_features,)
            Rounding and underflow of a float32 sum, generously.
        known : (n_features,) bool
            False where float32 may overflow, and no bound holds.
        """
        single = np.finfo(np.float32)
        size = np.abs(self._x[:, block].astype(np.float64))
        with np.errstate(over="ignore", invalid="ignore"):
            reach = fold_sums(size, self._folds)
            total = size.sum(axis=0)
            slack = 4 * (len(size) + 2) * (single.eps * total + single.tiny)
            return reach, slack, total < single.max / 2

    def _thresholds(self) -> _Bounds:
        """What makes flips of a threshold fast, built when the first flip asks for it."""
        if self._bounds is None:
            each = np.empty((self._x.shape[1], len(self._folds)))
            lowest = np.empty(len(each), np.float32)
            for block in self._pieces():
                bound = self._bound_of(block)
                reach, slack, known = self._most_off(block)
                with np.errstate(over="ignore", invalid="ignore"):
                    # NaN keeps a feature in.
                    lowest[block] = np.where(known, (bound - reach).min(axis=0) - slack, np.nan)
                each[block] = bound.T
            self._bounds = _Bounds(each, lowest)
        return self._bounds

    def _ranking(self, kind: str) -> _Ranks:
        """What makes flips of a rank fast, built when the first flip asks for it."""
        if kind not in self._ranks:
            scale, reach = np.empty((2, self._x.shape[1]), np.float32)
            for block in self._pieces():
                enough, n = self._usable(block, kind)
                off, slack, known = self._most_off(block)
                with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
                    width = n
                    if kind == "t":
                        x = self._x[:, block]
                        width = np.sqrt(n * without_each(fold_sums(x, self._folds, square=True)))
                    by = 1 / np.where(enough, width, np.inf).min(axis=0)
                    far = (off.max(axis=0) + slack) * by * (1 + _SINGLE)
                    known &= np.isfinite(by.astype(np.float32)) & np.isfinite(far)
                    far[~known] = np.nan
                nothing = ~enough.any(axis=0) | (off == 0).all(axis=0)
                scale[block] = np.where(known & ~nothing, by, 0)
                reach[block] = np.where(nothing, 0, far)
            most = max(len(fold.selection) for fold in self._folds) - 1
            self._ranks[kind] = _Ranks(scale, reach, most if kind == "t" else np.inf)
        return self._ranks[kind]

    # -- choosing ---------------------------------------------------------------------------

    def _row_signs(self, signs: Signs | None) -> Floats:
        """(n_rows,) signs of the sorted rows, from (n_people,) signs."""
        if signs is None:
            return np.ones(len(self._person))
        rows: Floats = signs[self._person].astype(np.float64)
        return rows

    def _candidates(self, signs: Floats) -> list[Ints]:
        """For each row of signs, the features that may be in some fold's mask (or its peak)."""
        rule = self.procedure.rule
        if isinstance(rule, Strongest | PeakSphere):
            return self._may_lead(signs, max(self._k), rule.map_kind)
        lowest = self._thresholds().lowest
        flips, features = [], []
        for block, sums in self._all_sums(signs):
            # Negated, so that what is not a number stays in.
            may = ~(sums <= lowest[block])
            flip, feature = np.divmod(np.flatnonzero(may), may.shape[1])
            flips.append(flip)
            features.append(feature + block.start)
        of_flip = np.concatenate(flips)
        # Blocks come in order, so a stable sort by flip leaves the features ascending.
        order = np.argsort(of_flip, kind="stable")
        ends = np.cumsum(np.bincount(of_flip, minlength=len(signs)))
        return np.split(np.concatenate(features)[order], ends[:-1])

    def _all_sums(self, signs: Floats) -> Iterator[tuple[slice, Floats]]:
        """Blocks of features with their (n_flips, n_features) float32 sums over all rows."""
        rows, single = self._turned().rows, signs.astype(np.float32)
        for start in range(0, self._x.shape[1], _SCREEN_BLOCK):
            block = slice(start, start + _SCREEN_BLOCK)
            with np.errstate(over="ignore", invalid="ignore"):
                yield block, single @ rows[:, block]

    def _may_lead(self, signs: Floats, k: int, kind: str) -> list[Ints]:
        """For each row of signs, the features that may be among the k strongest of some fold."""
        n_features = self._x.shape[1]
        everything: Ints = np.arange(n_features)
        looked_at = 2 * k + 50
        if 2 * looked_at > n_features:
            return [everything] * len(signs)
        ranks, scores = self._ranking(kind), np.empty((len(signs), n_features), np.float32)
        with np.errstate(over="ignore", invalid="ignore"):
            for block, sums in self._all_sums(signs):
                np.multiply(sums, ranks.scale[block], out=scores[:, block])
        found: list[Ints] = []
        for row, score in zip(signs, scores, strict=True):
            strong = np.sort(np.argpartition(score, -looked_at)[-looked_at:])
            maps = self._maps_at(strong, row, kind)
            maps[np.isnan(maps)] = -np.inf
            value = float(np.partition(maps, -k, axis=1)[:, -k].min())
            if 0 < value < np.inf:
                # Negated, so that what is not a number stays in.
                found.append(np.flatnonzero(~(score + ranks.reach < ranks.least(value))))
            else:
                found.append(everything)
        return found

    def _passing(self, signs: Floats) -> Ints:
        """The features above the bound in some fold, by a pass over all of them."""
        if isinstance(self.procedure.rule, Strongest | PeakSphere):
            return np.arange(self._x.shape[1])
        found = []
        for block in self._pieces():
            S = self._sums_of(self._x[:, block], signs)
            found.append(block.start + np.flatnonzero((self._bound_of(block) < S).any(axis=0)))
        return np.concatenate(found)

    def _sums_of(self, x: Floats, signs: Floats) -> Floats:
        """(n_folds, n_features) sums over each fold's selection side, under signs."""
        with np.errstate(over="ignore", invalid="ignore"):
            signed = np.multiply(x, signs[:, None], order="C")
            return without_each(fold_sums(signed, self._folds))

    def _members(self, signs: Floats, candidates: Ints) -> tuple[Ints, Bools]:
        """The features in any fold's mask, ascending, and (n_features_found, n_folds) bool."""
        rule = self.procedure.rule
        if isinstance(rule, Strongest | PeakSphere):
            found, members = self._strongest(signs, candidates, self._k, rule.map_kind)
            return (found, members) if self._spheres is None else self._around(found, members)
        if self._bounds is None:
            bounds = self._bound_of(candidates).T
        else:
            bounds = np.take(self._bounds.each, candidates, axis=0)
        S = self._sums_of(self._columns(candidates), signs)
        above = bounds < S.T
        some = above.any(axis=1)
        found, members = candidates[some], np.ascontiguousarray(above[some])
        if isinstance(rule, Cluster):
            assert self._hood is not None
            t = self._t_of(S[:, some], found) if rule.pick == "peak" else None
            members = keep_clusters(members, found, rule, self._hood, t, self._distance)
            some = members.any(axis=1)
            found, members = found[some], members[some]
        return found, members

    def _t_of(self, S: Floats, features: Ints) -> Floats:
        """(n_features, n_folds) t values, from the folds' sums."""
        present = None if self._present is None else self._present[:, features]
        n = rows_with_data(present, self._folds)
        with np.errstate(over="ignore", invalid="ignore"):
            Q = without_each(fold_sums(self._x[:, features], self._folds, square=True))
        return t_from_sums(n, S, Q).T

    def _maps_at(self, features: Ints, signs: Floats, kind: str) -> Floats:
        """(n_folds, n_some_features) the folds' maps; NaN where too few rows have data."""
        maps = np.empty((len(self._folds), len(features)))
        for start in range(0, len(features), _BLOCK):
            some = features[start : start + _BLOCK]
            x = self._columns(some) * signs[:, None]
            if self._present is not None:
                x[~self._present[:, some]] = np.nan
            missing = self.procedure.missing
            maps[:, start : start + _BLOCK] = leave_out_maps(x, self._folds, missing, kind)
        return maps

    def _strongest(
        self, signs: Floats, candidates: Ints, k: Sequence[int], kind: str
    ) -> tuple[Ints, Bools]:
        """The strongest of the candidates in each fold's map, so many as `k` says for the fold."""
        maps = self._maps_at(candidates, signs, kind)
        chosen = np.zeros((len(candidates), len(self._folds)), bool)
        for fold, many in enumerate(k):
            if many:
                chosen[:, fold] = strongest(maps[fold], many)
        some = chosen.any(axis=1)
        return candidates[some], chosen[some]

    def _around(self, peaks: Ints, members: Bools) -> tuple[Ints, Bools]:
        """The spheres around each fold's peak."""
        assert self._spheres is not None
        spheres = [self._spheres.around(peak) for peak in peaks.tolist()]
        found = np.unique(np.concatenate([np.empty(0, np.intp), *spheres]))
        inside = np.zeros((len(found), len(self._folds)), bool)
        for peak, fold in np.argwhere(members):
            inside[np.searchsorted(found, spheres[peak]), fold] = True
        return found, inside

    def _chosen(self, signs: Floats, candidates: Ints) -> tuple[Ints, Bools, list[int], list[int]]:
        """Features, members, and the folds left empty and replaced."""
        found, members = self._members(signs, candidates)
        nothing = np.flatnonzero(~members.any(axis=0)).tolist()
        if not nothing or self.procedure.on_empty != "strongest":
            return found, members, nothing, []
        k = self.procedure.k
        stand_ins: Ints = np.arange(self._x.shape[1])
        if self._stack is not None:
            (stand_ins,) = self._may_lead(signs[None], k, "t")
        wanted = [k if fold in nothing else 0 for fold in range(len(self._folds))]
        more, extra = self._strongest(signs, stand_ins, wanted, "t")
        both = np.union1d(found, more)
        merged = np.zeros((len(both), len(self._folds)), bool)
        merged[np.searchsorted(both, found)] |= members
        merged[np.searchsorted(both, more)] |= extra
        empty = np.flatnonzero(~merged.any(axis=0)).tolist()
        return both, merged, empty, [fold for fold in nothing if fold not in empty]

    def _read(self, signs: Floats, found: Ints, members: Bools) -> tuple[Floats, Floats]:
        """Each sorted row's summary in its own fold's mask, and the coverage."""
        values, coverage = np.zeros(len(signs)), np.zeros(len(signs))
        of_fold = np.ascontiguousarray(members.T)
        few = self._columns(found) if self._read_x is self._x else self._read_x[:, found]
        for rows in self._blocks:
            inside = of_fold[self._fold_of_row[rows[0]]]
            present = None
            if self._read_present is not None:
                present = self._read_present[np.ix_(rows, found[inside])]
            values[rows], coverage[rows] = block_values(
                few[np.ix_(rows, inside)], present, self.procedure.summary
            )
        return values * signs, coverage

    def _columns(self, features: Ints) -> Floats:
        """(n_rows, n_some_features) of the stack."""
        if self._stack is None:
            return self._x[:, features]
        # Gathered by feature: whole cache lines.
        return np.take(self._stack.by_feature, features, axis=0).T

    def _per_person(self, values: Floats) -> Floats:
        """Mean over the rows of each person, in the order of `people`."""
        if len(self.people) == len(values):
            return values
        means: Floats = np.bincount(self._person, weights=values) / np.bincount(self._person)
        return means

    # -- results ----------------------------------------------------------------------------

    def masks(self) -> list[Bools]:
        """The mask of every fold, each (n_features,) bool.

        Raises
        ------
        EmptyFoldError
            When a fold finds nothing and the plan says to stop.
        """
        signs = self._row_signs(None)
        found, members, empty, _ = self._chosen(signs, self._passing(signs))
        if empty and self.procedure.on_empty == "stop":
            raise EmptyFoldError(
                f"{len(empty)} of {len(self.folds)} folds found no region",
                where=f"folds without {', '.join(self._folds[k].name for k in empty[:5])}",
                remedy='relax the rule beforehand, or state on_empty = "empty" or "strongest"',
            )
        masks = []
        for fold in range(len(self.folds)):
            mask = np.zeros(self.space.n_features, bool)
            mask[found[members[:, fold]]] = True
            masks.append(mask)
        return masks

    def per_person(self, values: Sequence[float]) -> Floats:
        """Row values (rows in their given order) averaged over each person's rows."""
        return self._per_person(np.asarray(values, dtype=float)[self._order])

    def outcome(self, signs: Signs | None = None) -> Outcome:
        """The whole procedure under signs (one per person, as in `people`; default all +1)."""
        rows = self._row_signs(signs)
        found, members, empty, replaced = self._chosen(rows, self._passing(rows))
        values, coverage = self._read(rows, found, members)
        people = self._per_person(values)
        back = np.argsort(self._order)
        return Outcome(
            values=tuple((self._sign * values[back]).tolist()),
            coverage=tuple(coverage[back].tolist()),
            t=studentised(people),
            estimate=float(self._sign * people.mean()),
            sizes=tuple(members.sum(axis=0).tolist()),
            empty=tuple(self._folds[k].name for k in empty),
            replaced=tuple(self._folds[k].name for k in replaced),
            dice=mean_dice(members),
        )

    def flips(
        self, signs: Signs, progress: Callable[[int], None] | None = None
    ) -> tuple[Floats, Floats, Ints]:
        """The statistic, the fold masks' mean Dice, and the empty folds under each row of signs.

        Parameters
        ----------
        signs : (n_flips, n_people) int8
        progress : callable, optional
            Told how many flips are done.
        """
        n = len(signs)
        t, overlap, n_empty = np.empty(n), np.empty(n), np.empty(n, dtype=np.intp)
        for start in range(0, n, _FLIPS_AT_ONCE):
            rows = signs[start : start + _FLIPS_AT_ONCE][:, self._person].astype(np.float64)
            for i, (row, may) in enumerate(zip(rows, self._candidates(rows), strict=True), start):
                found, members, empty, _ = self._chosen(row, may)
                t[i] = studentised(self._per_person(self._read(row, found, members)[0]))
                overlap[i], n_empty[i] = mean_dice(members), len(empty)
            if progress:
                progress(min(start + _FLIPS_AT_ONCE, n))
        return t, overlap, n_empty

    def flip_test(
        self, n_flips: int = 4999, seed: int = 0, progress: Callable[[int, int], None] | None = None
    ) -> FlipTest:
        """Flip each subject's data as a whole, choose and read again, compare the statistic.

        Null hypothesis: the subjects' maps are independent and jointly symmetric about zero
        over the search region. Enumerated when there are no more than `n_flips` + 1 patterns.

        Parameters
        ----------
        n_flips : int
            Random flips, when there are too many patterns to enumerate.
        seed : int
            Keys the flips, with each label and the flip's number.
        progress : callable, optional
            Told (done, total).
        """
        if n_flips < 1:
            raise InputError("too few flips", expected="at least 1", got=str(n_flips))
        n_people = len(self.people)
        exact = n_people < 40 and 2**n_people <= n_flips + 1
        total = 2**n_people if exact else n_flips
        signs = (
            all_signs(n_people, 0, total) if exact else random_signs(seed, self.people, 0, total)
        )
        t, overlap, n_empty = self.flips(
            signs, None if progress is None else lambda done: progress(done, total)
        )
        observed = self.outcome().t
        usable = overlap[~np.isnan(overlap)]
        return FlipTest(
            t=observed,
            p=exchange_p(observed, t, exact=exact),
            exact=exact,
            n_flips=total,
            n_at_least=count_at_least(observed, t),
            # "higher" takes one of the values, and so needs no arithmetic with infinities.
            abs_t_quantile=float(np.quantile(np.abs(t), 0.95, method="higher")),
            noise_dice=float(usable.mean()) if len(usable) else float("nan"),
            noise_empty=float(n_empty.mean()),
        )

    def without_each_person(self) -> Floats:
        """The estimate of the whole procedure without each person, for the jackknife."""
        if len(self.people) < 4:
            raise InputError(
                "too few subjects for the jackknife",
                expected="at least 4",
                got=str(len(self.people)),
                remedy='use interval = "flips"',
            )
        names = [str(i) for i in range(len(self._labels))]
        effects = self._given(self._x, self._present)
        tested = None
        if self._read_x is not self._x:
            tested = self._given(self._read_x, self._read_present)
        estimates = np.empty(len(self.people))
        for i, person in enumerate(self.people):
            rows = [row for row, label in enumerate(self._labels) if label != person]
            part = self.procedure.prepare(
                effects[rows],
                [self._labels[r] for r in rows],
                self.space,
                [names[r] for r in rows],
                None if tested is None else tested[rows],
            )
            estimates[i] = part.outcome().estimate
        return estimates

    def _given(self, x: Floats, present: Bools | None) -> Floats:
        """A stack as it was given: rows in their order, signs as they were, NaN where missing."""
        back = np.argsort(self._order)
        stack: Floats = self._sign * x[back]
        if present is not None:
            stack[~present[back]] = np.nan
        return stack


def _sorted(stack: Floats, order: Ints, copy: bool) -> Floats:
    """The rows in another order; the stack itself, if wished and if it is in it already."""
    return stack if not copy and (order == np.arange(len(order))).all() else stack[order]


def held_out_rows(scheme: Scheme, labels: Sequence[str]) -> list[tuple[int, ...]]:
    """The rows each fold holds out: the touch rule of every node that leaves some out."""
    return [fold.held_out for fold in scheme.folds(labels)]
