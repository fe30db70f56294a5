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
from typing import overload

import numpy as np
import numpy.typing as npt

from .adjusted import Residuals
from .choosing import Choosing, Chosen, FoldMaps, Narrowing
from .errors import EmptyFoldError, InputError
from .exchange import FlipTest, tested_by
from .foldcontrol import check_with_model, controlled_maps
from .foldnull import mean_dice
from .folds import Fold, LeaveOneOut, Scheme
from .foldstack import FoldStack
from .groupmaps import Missing
from .masks import GROUP, Cluster, MaskRule, Threshold, highest
from .models import Labelled, Model, compared
from .pages import Pages, Source
from .presence import Presence
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
# Numbers read together: these and what is made of them should fit a cache.
_READ_AT_ONCE = 2**17


@dataclass(frozen=True)
class Outcome:
    """What a procedure gives under one exchange.

    Parameters
    ----------
    values : tuple of float, one per row (in the rows' given order)
        The row's summary in the mask of the fold that held it out; 0 when that mask is empty,
        and when the row has no data in it, as may be in a flip: where data is missing no flip
        changes, so the statistic stays one function of the maps and the test holds its level.
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
        When a fold finds nothing: its values count as 0; the `k` features that lead the map the
        rule reads stand in; or the run ends with an error. In flips, "stop" counts as "empty".
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

    @property
    def may_find_nothing(self) -> bool:
        """Whether a fold may be left without a region, in the data or under exchanges."""
        return isinstance(self.rule, Threshold | Cluster) and self.on_empty != "strongest"

    def check_other_maps(self) -> None:
        """Refuse a test on other maps than those that choose, where folds may stay empty.

        Where the maps that choose hold an effect, folds find a region in the data and none under
        exchanges. There the statistic is 0, so that a true null on the tested maps is rejected
        far too often: .17 to .51 at .05 (20 subjects, 100 features, 200 to 300 data sets).
        With a rule that always finds something it is .035 to .065.

        Raises
        ------
        InputError
        """
        if self.may_find_nothing:
            raise InputError(
                "a region that is chosen on other maps than are tested, by a rule that may find "
                "nothing",
                expected="a rule that always finds something: where the maps that choose hold an "
                "effect, exchanges of them leave folds empty, and a true null is rejected too "
                "often (17 to 51 % at a nominal 5 %)",
                got=f'{self.describe()}, on_empty = "{self.on_empty}"',
                remedy='state on_empty = "strongest" with a k, or the rule strongest or '
                "peak-sphere",
            )

    def check_sides(self, folds: Sequence[Fold]) -> None:
        """Refuse folds whose selection side has one map only, where the rule reads t.

        Raises
        ------
        InputError
        """
        few = [fold.name for fold in folds if len(fold.selection) < 2]
        if few and self.rule.map_kind == "t":
            raise InputError(
                "the rule reads t, and there is no t of one map",
                where=f"without {', '.join(few[:5])}",
                expected="at least 2 maps on the side that chooses",
                got="1",
                remedy='use the rule strongest or peak-sphere with map = "mean", or more maps',
            )

    def describe(self, chosen_on: str = GROUP) -> str:
        """How a region is chosen, in words; `chosen_on` as in `MaskRule.describe`."""
        chosen_by = "" if self.model is None else f", of {self.model.describe()}"
        return f"{self.rule.describe(self.tail, chosen_on)}{chosen_by}"

    def prepare(
        self,
        effects: Floats | Source,
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
        effects : (n_rows, n_features) float32 or float64, or a Source of that shape
            One effect map a row, over the search region. A source is read a page at a time;
            what needs the whole stack, flips above all, holds it.
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


class Masks(Sequence[Bools]):
    """The mask of every fold, (n_features,) bool, made when it is asked for.

    All masks of many folds would take more memory than what they hold.

    Parameters
    ----------
    chosen : Chosen
    n_features : int

    Attributes
    ----------
    replaced : list of int
        Folds in which the rule found nothing and the strongest features stand in.
    """

    def __init__(self, chosen: Chosen, n_features: int) -> None:
        self._features, self._n_features = chosen.features, n_features
        self._of_fold = np.ascontiguousarray(chosen.members.T)
        self.replaced = chosen.replaced

    def __len__(self) -> int:
        return len(self._of_fold)

    @overload
    def __getitem__(self, fold: int) -> Bools: ...
    @overload
    def __getitem__(self, fold: slice) -> list[Bools]: ...
    def __getitem__(self, fold: int | slice) -> Bools | list[Bools]:
        if isinstance(fold, slice):
            return [self[k] for k in range(len(self))[fold]]
        mask = np.zeros(self._n_features, bool)
        mask[self._features[self._of_fold[fold]]] = True
        return mask


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
    labels : list of str
        Who each row belongs to.
    """

    def __init__(
        self,
        procedure: Procedure,
        effects: Floats | Source,
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
        self.labels = list(labels)
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
        sign = self._sign = -1.0 if procedure.tail == "negative" else 1.0

        def taken(x: Floats) -> tuple[Floats, Presence | None]:
            x, presence = _taken(x, procedure.missing)
            if sign < 0:
                np.negative(x, out=x)
            return x, presence

        def ready(stack: Floats | Source) -> FoldStack:
            if not isinstance(stack, np.ndarray):
                pages = Pages(stack.in_order(self._order), taken)
                return FoldStack(pages, None, folds, procedure.missing)
            x, presence = taken(_sorted(stack, self._order, copy))
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
        procedure.check_sides(folds)
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
        by_mean = self.procedure.summary == "mean"
        values, coverage = self._means(chosen) if by_mean else self._summaries(chosen)
        return values * weights if self._compared.signed else values, coverage

    def _summaries(self, chosen: Chosen) -> tuple[Floats, Floats]:
        """Another summary of each sorted row in its own fold's mask, and the coverage."""
        values, coverage = np.zeros((2, len(self._fold_of_row)))
        few = self._read_stack.columns(chosen.features)
        there = self._read_stack.there(chosen.features)
        for rows in self._blocks:
            inside = chosen.members[:, self._fold_of_row[rows[0]]]
            present = None
            if there is not None:
                present = np.stack([there[row][inside] for row in rows])
            values[rows], coverage[rows] = block_values(
                np.stack([few[row][inside] for row in rows]), present, self.procedure.summary
            )
        return values, coverage

    def _means(self, chosen: Chosen) -> tuple[Floats, Floats]:
        """The mean of each sorted row in its own fold's mask, and the coverage."""
        stack, n_rows = self._read_stack, len(self._fold_of_row)
        one_each = np.array_equal(self._fold_of_row, np.arange(chosen.members.shape[1]))
        size = max(1, _READ_AT_ONCE // n_rows)
        means = RowMeans(n_rows)
        for start in range(0, len(chosen.features), size):
            some = chosen.features[start : start + size]
            inside = chosen.members[start : start + size]
            if not one_each:
                inside = inside[:, self._fold_of_row]
            means.add(stack.columns(some), inside, stack.there(some))
        return means.made()

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
                chosen = other._choosing.one(weights)
                yield chosen, other._read(weights, chosen)[0]
            return
        for start in range(0, len(exchanges), _AT_ONCE):
            some = exchanges[start : start + _AT_ONCE]
            rows = np.array([self._weights(exchange) for exchange in some])
            for weights, chosen in zip(rows, self._choosing.each(rows), strict=True):
                yield chosen, self._per_person(self._read(weights, chosen)[0])

    # -- results ----------------------------------------------------------------------------

    def masks(self) -> Masks:
        """The mask of every fold, each (n_features,) bool.

        Raises
        ------
        EmptyFoldError
            When a fold finds nothing and the plan says to stop.
        """
        weights = self._weights(self._compared.observed())
        chosen = self._choosing.one(weights)
        if chosen.empty and self.procedure.on_empty == "stop":
            names = [self._stack.folds[k].name for k in chosen.empty[:5]]
            raise EmptyFoldError(
                f"{len(chosen.empty)} of {len(self.folds)} folds found no region",
                where=f"folds without {', '.join(names)}",
                remedy='relax the rule beforehand, or state on_empty = "empty" or "strongest"',
            )
        return Masks(chosen, self.space.n_features)

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
        for at in self._stack.batches(chosen):
            block = chosen[at]
            maps = self._choosing.maps_at(weights, block, kind)
            for k, mask in enumerate(masks):
                there = highest(maps[k], mask[block])
                if there is None:
                    continue
                one, best = (int(block[there]), float(maps[k, there])), found[k]
                # The first of equals, in whatever order the blocks come.
                if best is None or (one[1], -one[0]) > (best[1], -best[0]):
                    found[k] = one
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
        chosen = part._choosing.one(weights)
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

        Raises
        ------
        InputError
            As `Procedure.check_other_maps`, where other maps are tested than choose.
        """
        if n_flips < 1:
            raise InputError("too few flips", expected="at least 1", got=str(n_flips))
        if self._read_stack is not self._stack:
            self.procedure.check_other_maps()
        exchanges, exact = self.exchanges(n_flips, seed)
        total = len(exchanges)
        made = self.flips(
            exchanges, None if progress is None else lambda done: progress(done, total)
        )
        key = hashlib.sha256(f"{exchanges.dtype.str}{chr(0).join(self.people)}".encode())
        key.update(exchanges.tobytes())
        # As a flip: the stack is ready for them, and so this is sooner than `outcome`.
        observed = float(self.flips(self._compared.observed()[None])[0][0])
        return tested_by(observed, *made, key.hexdigest(), exact=exact)

    def without_each_person(self) -> Floats:
        """The estimate of the whole procedure without each person, for the jackknife."""
        names = [str(i) for i in range(len(self.labels))]
        effects = self._given(self._stack)
        tested = None if self._read_stack is self._stack else self._given(self._read_stack)
        estimates = np.empty(len(self.people))
        for i, person in enumerate(self.people):
            rows = [row for row, label in enumerate(self.labels) if label != person]
            part = self.procedure.prepare(
                effects[rows],
                [self.labels[r] for r in rows],
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


class RowMeans:
    """`roi.region_mean` of each row in a region of its own, to the last bit, piece by piece.

    Parameters
    ----------
    n_rows : int
        Two at the least: of one alone NumPy adds in another order.

    Examples
    --------
    >>> means = RowMeans(2)
    >>> maps = np.array([[1.0, 3.0, 8.0], [2.0, 0.0, 4.0]])
    >>> means.add(maps, np.array([[True, False], [True, False], [False, False]]), None)
    >>> means.made()[0].tolist()
    [2.0, 0.0]
    """

    def __init__(self, n_rows: int) -> None:
        self._sums, self._n, self._size = np.zeros((3, n_rows))

    def add(self, maps: Floats, inside: Bools, present: Bools | None) -> None:
        """More features, after those that were added before.

        Parameters
        ----------
        maps : (n_rows, n_features) float
        inside : (n_features, n_rows) bool
            The region of each row.
        present : (n_rows, n_features) bool, or None for everywhere
        """
        size = _how_many(inside)
        if present is not None:
            inside = inside & present.T
        # Feature by feature from the sums so far: what lies outside a region adds a zero.
        parts = np.empty((len(inside) + 1, len(maps)))
        parts[0] = self._sums
        np.multiply(maps.T, inside, out=parts[1:])
        self._sums = np.add.reduce(parts, axis=0)
        self._size += size
        self._n += size if present is None else _how_many(inside)

    def made(self) -> tuple[Floats, Floats]:
        """(n_rows,) float64 means, and the share of each region in which the row has data."""
        return self._sums / np.maximum(self._n, 1), self._n / np.maximum(self._size, 1)


def _how_many(inside: Bools) -> Floats:
    """(n_rows,) features in each row's region, by a product, which is quicker than a sum."""
    counts: Floats = np.ones(len(inside), np.float32) @ inside.astype(np.float32)
    return counts


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
