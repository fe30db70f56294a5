"""Folds, group map, mask rule and summary as one pure object, and its exchange test.

`Procedure` is the plan; `Procedure.prepare` makes it ready on one stack of effects, and the
`Prepared` object then chooses every fold's mask and reads the held-out values under any
exchange: signs of the subjects, or scores that change hands (`models`). The graph's nodes use
it with the exchange that changes nothing; the test uses it with all others: one code path, so
that the statistic of the data equals the graph's own.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterator, Sequence
from copy import copy as copied
from dataclasses import dataclass, field
from functools import partial

import numpy as np
import numpy.typing as npt

from .adjusted import Residuals
from .choosing import Choosing, Chosen, FoldMaps, Narrowing
from .errors import EmptyFoldError, InputError
from .exchange import FlipTest, tested_by
from .foldcontrol import check_with_model, controlled_maps
from .foldnull import mean_dice
from .folds import LeaveOneOut, Scheme
from .foldstack import BLOCK, FoldStack, Presence
from .groupmaps import Missing
from .masks import MaskRule, highest
from .models import Labelled, Model, compared
from .roi import Interval, block_values
from .space import Space

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

ON_EMPTY = ("empty", "strongest", "stop")
TAILS = ("positive", "negative")
# Summaries of a row that change their sign with it, and that need nothing but the row.
READ_BY = ("mean", "median", "component")
_AT_ONCE = 32
# Numbers read together.
_READ_AT_ONCE = 2**22


@dataclass(frozen=True)
class Outcome:
    """What a procedure gives under one exchange.

    Parameters
    ----------
    values : tuple of float, one per row (in the rows' given order)
        The row's summary in the mask of the fold that held it out; 0 when that mask is empty.
    coverage : tuple of float, one per row
        Share of the mask in which the row has data.
    t : float
        The model's statistic over subjects, positive in the direction of selection.
    estimate : float
        The model's estimate with its sign: the mean over subjects in the units of the effect,
        the difference of two groups, or the correlation with a score.
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
    model : Groups or Score, optional
        What is compared; the default is one sample against zero. With a model each label has
        one map, and a feature counts in a fold where all of its selection side has data.

    Examples
    --------
    >>> from sequester.nodes.masks import Strongest
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
    model: Model | None = None

    def score_columns(self, labels: Sequence[str]) -> list[tuple[str, Sequence[Labelled]]]:
        """What the model was told of whom (see `scoreunits`); nothing without a model."""
        return [] if self.model is None else self.model.score_columns(labels)

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
        if self.model is not None:
            check_with_model(self.rule)

    def describe(self) -> str:
        """How a region is chosen, in words."""
        chosen_by = "" if self.model is None else f", of {self.model.describe()}"
        return f"{self.rule.describe(self.tail)}{chosen_by}"

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
            contrast of the same rows, held out and exchanged together with it).
        copy : bool
            Without a copy the stack is taken over, and may be changed; it saves the memory of
            one.
        """
        return Prepared(self, effects, labels, space, names, tested, copy=copy)


class Prepared:
    """A procedure made ready on one stack of effects; see `Procedure.prepare`.

    An exchange is one number per person of `people`: a sign, or with a model the position of
    the person whose score this one gets (with covariates: whose residuals).

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
        folds = procedure.scheme.folds([labels[i] for i in order])
        self._fold_of_row = np.empty(len(order), dtype=np.intp)
        for k, fold in enumerate(folds):
            self._fold_of_row[list(fold.held_out)] = k
        self._sign = -1.0 if procedure.tail == "negative" else 1.0

        def ready(stack: Floats) -> FoldStack:
            x, presence = _taken(_sorted(stack, self._order, copy), procedure.missing)
            if self._sign < 0:
                np.negative(x, out=x)
            return FoldStack(x, presence, folds, procedure.missing)

        if tested is not None and tested.shape != effects.shape:
            raise ValueError(f"tested maps of {tested.shape} for effects of {effects.shape}")
        self._stack = ready(effects)
        # The same array is made ready once: without a copy it has been changed.
        self._read_stack = self._stack if tested is None or tested is effects else ready(tested)
        self._blocks = [[row] for row in range(len(order))]
        if procedure.summary == "component":
            people = range(len(self.people))
            self._blocks = [np.flatnonzero(self._person == i).tolist() for i in people]
        self._compared = compared(procedure.model, [labels[i] for i in order], folds)
        maps, narrowing = self._maps_of(self._stack)
        self._choosing = Choosing(procedure.rule, maps, space, procedure.k, narrowing)
        self._residuals: list[Residuals] | None = None

    # -- one exchange -----------------------------------------------------------------------

    def _weights(self, exchange: Ints) -> Floats:
        """(n_rows,) of the sorted rows."""
        weights: Floats = self._compared.weights(exchange)[self._person]
        return weights

    def _read(self, weights: Floats, chosen: Chosen) -> tuple[Floats, Floats]:
        """Each sorted row's summary in its own fold's mask, and the coverage."""
        values, coverage = np.zeros(len(weights)), np.zeros(len(weights))
        of_fold = np.ascontiguousarray(chosen.members.T)
        if self.procedure.summary == "mean":
            size = max(1, _READ_AT_ONCE // max(1, len(chosen.features)))
            for start in range(0, len(weights), size):
                part = slice(start, min(start + size, len(weights)))
                values[part], coverage[part] = row_means(
                    self._read_stack.columns(chosen.features, part),
                    of_fold[self._fold_of_row[part]],
                    self._read_stack.there(chosen.features, part),
                )
            return values * weights if self._compared.signed else values, coverage
        few = self._read_stack.columns(chosen.features)
        there = self._read_stack.there(chosen.features)
        for rows in self._blocks:
            inside = of_fold[self._fold_of_row[rows[0]]]
            present = None
            if there is not None:
                present = np.stack([there[row][inside] for row in rows])
            values[rows], coverage[rows] = block_values(
                np.stack([few[row][inside] for row in rows]), present, self.procedure.summary
            )
        return values * weights if self._compared.signed else values, coverage

    def _per_person(self, values: Floats) -> Floats:
        """Mean over the rows of each person, in the order of `people`."""
        if len(self.people) == len(values):
            return values
        means: Floats = np.bincount(self._person, weights=values) / np.bincount(self._person)
        return means

    def _refitted(self, exchange: Ints) -> Prepared:
        """The procedure on data whose residuals, given the covariates, have changed hands."""
        nuisance = self._compared.refitted
        assert nuisance is not None
        stacks = [self._stack]
        if self._read_stack is not self._stack:
            stacks.append(self._read_stack)
        if self._residuals is None:
            self._residuals = [Residuals(s.x, s.there(slice(None)), nuisance) for s in stacks]
        made = []
        for rest, stack in zip(self._residuals, stacks, strict=True):
            x, present = rest.exchanged(exchange)
            presence = None if present is None else Presence.of(present)
            made.append(FoldStack(x, presence, stack.folds, stack.missing))
        other = copied(self)
        other._stack, other._read_stack = made[0], made[-1]
        other._choosing = self._choosing.on(*self._maps_of(made[0]))
        return other

    def _maps_of(self, stack: FoldStack) -> tuple[FoldMaps, Narrowing | None]:
        """The folds' maps of a stack with the rule's threshold, and what its control decides."""
        compared = self._compared
        nuisance = 1 if compared.refitted is None else compared.refitted.shape[1]
        return controlled_maps(
            self.procedure.rule,
            partial(compared.maps, stack),
            [self.people[i] for i in self._person],
            self.space,
            n_parameters=1 if compared.signed else 1 + nuisance,
        )

    def _each(self, exchanges: Ints) -> Iterator[tuple[Chosen, Floats]]:
        """What is chosen under each exchange, and the (n_people,) values in their orientation."""
        if self._compared.refitted is not None:
            for exchange in exchanges:
                other = self._refitted(exchange)
                weights = other._weights(exchange)
                chosen = other._choosing.chosen(weights, other._choosing.everywhere(weights))
                yield chosen, other._read(weights, chosen)[0]
            return
        for start in range(0, len(exchanges), _AT_ONCE):
            some = exchanges[start : start + _AT_ONCE]
            rows = np.array([self._weights(exchange) for exchange in some])
            for weights, may in zip(rows, self._choosing.candidates(rows), strict=True):
                chosen = self._choosing.chosen(weights, may)
                yield chosen, self._per_person(self._read(weights, chosen)[0])

    # -- results ----------------------------------------------------------------------------

    def masks(self) -> list[npt.NDArray[np.bool_]]:
        """The mask of every fold, each (n_features,) bool.

        Raises
        ------
        EmptyFoldError
            When a fold finds nothing and the plan says to stop.
        """
        weights = self._weights(self._compared.observed())
        chosen = self._choosing.chosen(weights, self._choosing.everywhere(weights))
        if chosen.empty and self.procedure.on_empty == "stop":
            names = [self._stack.folds[k].name for k in chosen.empty[:5]]
            raise EmptyFoldError(
                f"{len(chosen.empty)} of {len(self.folds)} folds found no region",
                where=f"folds without {', '.join(names)}",
                remedy='relax the rule beforehand, or state on_empty = "empty" or "strongest"',
            )
        masks = []
        for fold in range(len(self.folds)):
            mask = np.zeros(self.space.n_features, bool)
            mask[chosen.features[chosen.members[:, fold]]] = True
            masks.append(mask)
        return masks

    def peaks(self, masks: Sequence[Bools]) -> list[tuple[int, float] | None]:
        """The highest feature of every fold's own map in its mask, and the value there.

        The map is that of the side that chooses (t, or the mean where the rule reads means),
        highest in the direction of selection; the first of equal features. None where a mask is
        empty, or its map has no value in it.

        Parameters
        ----------
        masks : sequence of (n_features,) bool
            As of `masks`.
        """
        weights, kind = self._weights(self._compared.observed()), self.procedure.rule.map_kind
        some = np.zeros(self.space.n_features, bool)
        for mask in masks:
            some |= mask
        found: list[tuple[int, float] | None] = [None] * len(masks)
        chosen = np.flatnonzero(some)
        # A block at a time, so that no fold's whole map is ever held.
        for start in range(0, len(chosen), BLOCK):
            block = chosen[start : start + BLOCK]
            maps = self._choosing.maps_at(weights, block, kind)
            for k, mask in enumerate(masks):
                best, there = found[k], highest(maps[k], mask[block])
                if there is not None and (best is None or maps[k, there] > best[1]):
                    found[k] = int(block[there]), float(maps[k, there])
        return [None if one is None else (one[0], self._sign * one[1]) for one in found]

    def per_person(self, values: Sequence[float]) -> Floats:
        """Row values (rows in their given order) averaged over each person's rows."""
        return self._per_person(np.asarray(values, dtype=float)[self._order])

    def outcome(self, exchange: Ints | None = None) -> Outcome:
        """The whole procedure under an exchange (default: the one that changes nothing)."""
        compared = self._compared
        part = self
        if exchange is None:
            exchange = compared.observed()
        elif compared.refitted is not None:
            part = self._refitted(exchange)
        weights = self._weights(exchange)
        chosen = part._choosing.chosen(weights, part._choosing.everywhere(weights))
        values, coverage = part._read(weights, chosen)
        people, back = self._per_person(values), np.argsort(self._order)
        names = [fold.name for fold in self._stack.folds]
        return Outcome(
            values=tuple((self._sign * values[back]).tolist()),
            coverage=tuple(coverage[back].tolist()),
            t=compared.statistic(people, exchange),
            estimate=float(self._sign * compared.estimate(people, exchange)),
            sizes=tuple(chosen.members.sum(axis=0).tolist()),
            empty=tuple(names[k] for k in chosen.empty),
            replaced=tuple(names[k] for k in chosen.replaced),
            dice=mean_dice(chosen.members),
        )

    def exchanges(self, n: int, seed: int) -> tuple[Ints, bool]:
        """The exchanges of the test, (n_exchanges, n_people), and whether these are all.

        Parameters
        ----------
        n : int
            Random ones, when more than n + 1 are possible; else all, the one that changes
            nothing among them.
        seed : int
        """
        return self._compared.exchanges(n, seed)

    def exchange_interval(self, people: Floats, quantile: float) -> Interval:
        """Of the estimate, from (n_people,) values and the 95 % quantile of |t| of the test."""
        return self._compared.interval(people, quantile)

    def without_each_value(self, people: Floats) -> Floats:
        """The estimate from the (n_people,) values without each of them; the masks stay."""
        estimates = np.empty(len(people))
        for i in range(len(people)):
            rest = [person for person in self.people if person != self.people[i]]
            others = compared(self.procedure.model, rest, [])
            estimates[i] = others.estimate(np.delete(people, i), others.observed())
        return estimates

    def values_under(self, exchanges: Ints) -> Floats:
        """(n_exchanges, n_people): the held-out values under each exchange, signs as the effect's.

        For comparing regions or conditions that are exchanged together.

        Parameters
        ----------
        exchanges : (n_exchanges, n_people) int
        """
        values = np.empty((len(exchanges), len(self.people)))
        for i, (_, people) in enumerate(self._each(exchanges)):
            values[i] = self._sign * people
        return values

    def flips(
        self, exchanges: Ints, progress: Callable[[int], None] | None = None
    ) -> tuple[Floats, Floats, Ints]:
        """The statistic, the fold masks' mean Dice, and the empty folds under each exchange.

        Parameters
        ----------
        exchanges : (n_exchanges, n_people) int
        progress : callable, optional
            Told how many are done.
        """
        n = len(exchanges)
        t, overlap, n_empty = np.empty(n), np.empty(n), np.empty(n, dtype=np.intp)
        for i, (chosen, people) in enumerate(self._each(exchanges)):
            t[i] = self._compared.statistic(people, exchanges[i])
            overlap[i], n_empty[i] = mean_dice(chosen.members), len(chosen.empty)
            if progress and (i + 1 == n or (i + 1) % _AT_ONCE == 0):
                progress(i + 1)
        return t, overlap, n_empty

    def flip_test(
        self, n_flips: int = 4999, seed: int = 0, progress: Callable[[int, int], None] | None = None
    ) -> FlipTest:
        """Exchange the subjects' data as wholes, choose and read again, compare the statistic.

        Null hypothesis: the subjects' maps are independent and jointly symmetric about zero
        over the search region; with a model, that the maps can change hands (`heldout` has the
        words). Enumerated when there are no more than `n_flips` + 1 exchanges.

        Parameters
        ----------
        n_flips : int
            Random exchanges, when there are too many to enumerate.
        seed : int
            Keys the exchanges, with each label and the exchange's number.
        progress : callable, optional
            Told (done, total).
        """
        if n_flips < 1:
            raise InputError("too few flips", expected="at least 1", got=str(n_flips))
        exchanges, exact = self.exchanges(n_flips, seed)
        total = len(exchanges)
        made = self.flips(
            exchanges, None if progress is None else lambda done: progress(done, total)
        )
        key = hashlib.sha256(f"{exchanges.dtype.str}{chr(0).join(self.people)}".encode())
        key.update(exchanges.tobytes())
        return tested_by(self.outcome().t, *made, key.hexdigest(), exact=exact)

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
        effects = self._given(self._stack)
        tested = None if self._read_stack is self._stack else self._given(self._read_stack)
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

    def _given(self, stack: FoldStack) -> Floats:
        """A stack as it was given: rows in their order, signs as they were, NaN where missing."""
        back = np.argsort(self._order)
        x: Floats = self._sign * stack.x[back]
        there = stack.there(slice(None))
        if there is not None:
            x[~there[back]] = np.nan
        return x


def row_means(maps: Floats, inside: Bools, present: Bools | None = None) -> tuple[Floats, Floats]:
    """`roi.region_mean` of each row in a region of its own, to the last bit.

    Parameters
    ----------
    maps : (n_rows, n_features) float
    inside : (n_rows, n_features) bool
        The region of each row.
    present : (n_rows, n_features) bool, optional

    Returns
    -------
    means, coverage : (n_rows,) float64

    Examples
    --------
    >>> maps = np.array([[1.0, 3.0, 8.0], [2.0, 0.0, 4.0]])
    >>> row_means(maps, np.array([[True, True, False], [False, False, False]]))[0].tolist()
    [2.0, 0.0]
    """
    size = inside.sum(axis=1)
    if present is not None:
        inside = inside & present
    # A zero before each row: its sum starts from it, as that of an array does, and none is empty.
    padded = np.zeros((len(maps), maps.shape[1] + 1))
    padded[:, 1:] = maps
    which = np.ones(padded.shape, bool)
    which[:, 1:] = inside
    many = which.sum(axis=1)
    sums = np.add.reduceat(padded[which], np.cumsum(many) - many)
    return sums / np.maximum(many - 1, 1), (many - 1) / np.maximum(size, 1)


def _taken(stack: Floats, missing: Missing) -> tuple[Floats, Presence | None]:
    """As `groupmaps.filled`, in place, row by row: a large study has no room for another."""
    presence = None
    for row, effects in enumerate(stack):
        has_data = missing.present(effects)
        if not has_data.all():
            if presence is None:
                presence = Presence(*stack.shape)
            presence.put(row, has_data)
            effects[~has_data] = 0
    return stack, presence


def _sorted(stack: Floats, order: Ints, copy: bool) -> Floats:
    """The rows in another order; the stack itself, if wished and if it is in it already."""
    return stack if not copy and (order == np.arange(len(order))).all() else stack[order]


def held_out_rows(scheme: Scheme, labels: Sequence[str]) -> list[tuple[int, ...]]:
    """The rows each fold holds out: the touch rule of every node that leaves some out."""
    return [held for _, held in scheme.held_out(labels)]
