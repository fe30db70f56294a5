"""One ``[[roi]]`` of STUDY.toml: a region, how it is chosen, on which maps, how it is tested."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from typing import Any

from ..nodes.controlled import BY_P, Controlled
from ..nodes.errors import InputError
from ..nodes.folds import Given, Halves, KFold, LeaveOneOut, Scheme
from ..nodes.groupmaps import Missing
from ..nodes.heldout import INTERVALS, check_jackknife
from ..nodes.masks import GROUP, RUNS, Cluster, MaskRule, PeakSphere, Strongest, Threshold
from ..nodes.masks import LOCALIZER as OWN_MAPS
from ..nodes.models import Groups, Model, Score
from ..nodes.orthogonality import Certificate
from ..nodes.procedure import ON_EMPTY, TAILS, Procedure
from ..nodes.roi import SUMMARIES
from ..nodes.touch import Unit
from .certificates import read_certificate
from .keys import Reader
from .plans import (
    A_PRIORI,
    CROSS_FITTED,
    EXPLORATORY,
    GIVEN_FOLDS,
    K_FOLD,
    LEAVE_ONE_OUT,
    LEAVE_RUN_OUT,
    LOCALIZER,
    ORTHOGONAL,
    OTHER_RUNS,
    PLANS,
    SPLIT_HALF,
    SPLIT_RUNS,
)
from .regions import Labels, Region, Whole, read_region
from .selection import Selection, chosen_elsewhere, select
from .study import Study

# The plans that need one group map, and so one grid.
_ONE_GRID = (*CROSS_FITTED, ORTHOGONAL, EXPLORATORY)
# The tests that may be asked for, the default first. The plain t of cross-fitted or circular
# values can be asked for, and is refused by the guard with the reason.
TESTS = {
    **dict.fromkeys(CROSS_FITTED, ("whole-procedure", "t")),
    **dict.fromkeys((*OTHER_RUNS, LOCALIZER, ORTHOGONAL, A_PRIORI), ("t",)),
    EXPLORATORY: ("none", "t"),
}
THESE_SUBJECTS = "these-subjects"
_MOST_VARIANTS = 100  # of one region's sensitivity

_ROI_KEYS = {"name", "plan", "test", "value", "select", "minus", "sensitivity"}
_RULES = {
    "threshold": {"height", "p", "control", "level", "flips"},
    "strongest": {"k", "fraction", "map"},
    "cluster": {
        *("height", "p", "control", "extent", "level", "flips"),
        *("connectivity", "min_size", "pick", "near"),
    },
    "peak-sphere": {"radius", "map"},
}

_CHOOSING = {"search", "rule", "tail", "on_empty", "k"}
_FOLDED = _CHOOSING | {"flips", "interval", "choose_on"}
_FOLDED |= {"compare", "score", "covariates", "reliability"}
# The keys of each plan, beside those of every [[roi]].
_PLAN_KEYS = {
    LEAVE_ONE_OUT: _FOLDED,
    K_FOLD: _FOLDED | {"folds", "stratify"},
    SPLIT_HALF: _FOLDED | {"stratify"},
    GIVEN_FOLDS: _FOLDED | {"fold_column"},
    LEAVE_RUN_OUT: _CHOOSING,
    SPLIT_RUNS: _CHOOSING | {"halves"},
    LOCALIZER: _CHOOSING | {"choose_on", "mask_of", "claim", "claim_reason"},
    ORTHOGONAL: _CHOOSING | {"choose_on", "certificate"},
    A_PRIORI: {"region", "each_label"},
    EXPLORATORY: _CHOOSING,
}


@dataclass(frozen=True)
class Roi:
    """One region of interest and how it is chosen and tested.

    Parameters
    ----------
    name, plan : str
    region : Region
        The region itself (a-priori), or where it is searched for.
    procedure : Procedure or None
        How it is chosen; None for an a-priori region.
    tested : Selection
        The maps it is tested on.
    choosing : Selection or None
        The maps it is chosen on, when they are not those that are tested.
    n_flips : int
    interval, test, summary : str
    each_label : bool
        Every label of an atlas is a region of its own: one family.
    group_mask : bool
        A localizer's one mask for all, from a group map.
    these_subjects : bool
        The declared claim is about the tested subjects only.
    claim_reason : str
        Why it is, as stated.
    certificate : Certificate or None
        Of an orthogonal contrast.
    reliability : (float, float) or None
        Of the held-out values and of the score, as stated: for the ceiling of a correlation.
    variant_of : str
        The region whose rule it varies, declared beforehand; "" for a region of its own.
    setting : tuple of (key, value)
        What the variant varies.
    """

    name: str
    plan: str
    region: Region
    procedure: Procedure | None
    tested: Selection
    choosing: Selection | None
    n_flips: int
    interval: str
    test: str
    summary: str = "mean"
    each_label: bool = False
    group_mask: bool = False
    these_subjects: bool = False
    certificate: Certificate | None = None
    reliability: tuple[float, float] | None = None
    variant_of: str = ""
    setting: tuple[tuple[str, Any], ...] = ()
    claim_reason: str = ""

    @property
    def names(self) -> tuple[str, str, str]:
        """(roi, plan, search region), as results carry them."""
        return self.name, self.plan, self.region.describe()

    @property
    def own_region(self) -> bool:
        """Whether the region given for each subject was made from that subject's other data."""
        return any(
            unit.sub == "{sub}" for leaf in self.region.leaves() for unit in leaf.derived_from
        )

    @property
    def rule(self) -> str:
        """How it is chosen, in words; of a region fixed beforehand, what it is."""
        if self.procedure is None:
            return self.region.describe()
        on = RUNS if self.plan in OTHER_RUNS else OWN_MAPS if self.own_masks else GROUP
        return self.procedure.describe(on)

    @property
    def own_masks(self) -> bool:
        """Whether each subject has masks of their own."""
        return self.plan in OTHER_RUNS or (self.plan == LOCALIZER and not self.group_mask)


@dataclass(frozen=True)
class Maps:
    """How the rows of a selection become one map per subject.

    Parameters
    ----------
    missing : Missing
    null_value : float
        Subtracted from the tested maps: what no effect is.
    by_variance : bool
        Runs are weighted by their variance maps, not equally.
    own_grids : bool
        Each subject's maps are on a grid of their own.
    min_coverage : float
        The least share of its mask in which a subject must have data.
    """

    missing: Missing
    null_value: float = 0.0
    by_variance: bool = False
    own_grids: bool = False
    min_coverage: float = 0.0

    @property
    def marked(self) -> Missing:
        """What is missing once there is one map per subject: marked by NaN, and a zero is one."""
        return replace(self.missing, zeros=False)


def with_variants(
    read: Reader, table: dict[str, Any], data: dict[str, Any], maps: Maps, study: Study, seed: int
) -> Iterator[Roi]:
    """A region, and its declared variants: one for every combination of the listed values."""
    own = {key: value for key, value in table.items() if key != "sensitivity"}
    stated = _Roi(read, own, data, maps, study, seed, "sensitivity" in table).made()
    yield stated
    grid = read.get(table, "sensitivity", dict, {})
    rule = own.get("rule", {})
    known = _RULES[rule["kind"]] | {"folds"} if "kind" in rule else set()
    read.known(grid, known, "sensitivity")
    lists = [read.get(grid, key, list, ...) for key in grid]
    n = math.prod(map(len, lists)) if lists else 0
    if n > _MOST_VARIANTS or ("sensitivity" in table and n == 0):
        raise InputError(
            "sensitivity with too many or no combinations",
            where=read.where("sensitivity"),
            expected=f"1 to {_MOST_VARIANTS}",
            got=str(n),
        )
    for i, values in enumerate(itertools.product(*lists) if lists else (), 1):
        setting = tuple(zip(grid, values, strict=True))
        changed = {key: value for key, value in setting if key != "folds"}
        variant = {**own, "rule": {**rule, **changed}}
        variant |= {key: value for key, value in setting if key == "folds"}
        made = _Roi(read, variant, data, maps, study, seed, True).made()
        yield replace(made, name=f"{made.name}Variant{i}", variant_of=made.name, setting=setting)


class _Roi:
    """Reads one ``[[roi]]``.

    Parameters
    ----------
    read : Reader
        Looking from its header on.
    table, data : dict
        The table itself, and ``[data]``.
    maps : Maps
    study : Study
    seed : int
    varied : bool
        Whether variants of it are asked for.
    """

    def __init__(
        self,
        read: Reader,
        table: dict[str, Any],
        data: dict[str, Any],
        maps: Maps,
        study: Study,
        seed: int,
        varied: bool = False,
    ) -> None:
        self.read, self.table, self.maps, self.study, self.seed = read, table, maps, study, seed
        self.data = data
        known = _ROI_KEYS.union(*_PLAN_KEYS.values())
        read.known(table, known, "roi")
        self.name = read.label(table, "name")
        self.plan = read.one_of(table, "plan", PLANS, ...)
        if varied and self.plan in (A_PRIORI, EXPLORATORY):
            raise InputError(
                f"sensitivity does not go with plan {self.plan!r}",
                where=read.where("sensitivity"),
                expected="a plan that chooses and tests",
            )
        for key in table:
            if key not in _ROI_KEYS | _PLAN_KEYS[self.plan]:
                raise InputError(
                    f"key {key!r} does not go with plan {self.plan!r}",
                    where=read.where(key),
                    expected="one of " + ", ".join(sorted(_ROI_KEYS | _PLAN_KEYS[self.plan])),
                )
        mask_of = read.one_of(table, "mask_of", ("own", "group"), "own")
        self.group_mask = mask_of == "group" or self.plan == ORTHOGONAL

    def made(self) -> Roi:
        """The region, checked."""
        read, table, plan = self.read, self.table, self.plan
        summary = self._summary()
        key = "region" if plan == A_PRIORI else "search"
        place = read.get(table, key, dict, ... if plan == A_PRIORI else None)
        weights = summary == "weighted"
        region = Whole() if place is None else read_region(read, place, key, weights=weights)
        self.tested = self._tested()
        choosing = self._choosing()
        self._enough_runs()
        self._enough_subjects()
        self._one_grid(choosing)
        each_label = read.get(table, "each_label", bool, False)
        if each_label and (not isinstance(region, Labels) or summary != "mean"):
            raise InputError(
                "each_label needs a region that is labels of one atlas, and means",
                where=read.where("each_label"),
                expected='region = { atlas = "...", origin = "..." }',
                got=region.describe(),
            )
        if isinstance(region, Labels) and not region.labels and not each_label:
            raise InputError(
                f"{key} names no label of its atlas",
                where=read.where("atlas"),
                remedy="labels = [...]; or, in plan a-priori, each_label = true for all of them",
            )
        _same_space(read, key, region, self.tested)
        for leaf in region.leaves():
            in_table(read, leaf.derived_from, self.study)
        of_folds = plan in (K_FOLD, SPLIT_HALF, GIVEN_FOLDS)
        of_folds = of_folds and not table.keys() & {"compare", "score"}
        intervals = INTERVALS if of_folds else tuple(i for i in INTERVALS if i != "folds")
        procedure = None if plan == A_PRIORI else self._procedure(summary)
        interval = read.one_of(table, "interval", intervals, "folds" if of_folds else "flips")
        if procedure is not None and plan in CROSS_FITTED:
            self._check_folds(procedure, choosing)
            self._check_model(procedure.model)
            if interval == "jackknife":
                self._check_jackknife(procedure)
        if procedure is not None and plan in OTHER_RUNS:
            self._check_runs(procedure)
        if procedure is not None and self.group_mask:
            self._check_group(procedure, choosing)
        return Roi(
            self.name,
            plan,
            region,
            procedure,
            self.tested,
            choosing,
            self._flips(),
            interval,
            read.one_of(table, "test", TESTS[plan], TESTS[plan][0]),
            summary,
            each_label,
            self.group_mask,
            read.one_of(table, "claim", ("population", THESE_SUBJECTS), "population")
            == THESE_SUBJECTS,
            self._certificate(),
            self._reliability(),
            claim_reason=self._claim_reason(),
        )

    def _claim_reason(self) -> str:
        reason = str(self.read.get(self.table, "claim_reason", str, "")).strip()
        if reason and self.table.get("claim") != THESE_SUBJECTS:
            raise InputError(
                "a reason for a claim that is not narrowed",
                where=self.read.where("claim_reason"),
                expected=f'claim = "{THESE_SUBJECTS}" beside it',
                got=f'claim = "{self.table.get("claim", "population")}"',
            )
        return reason

    def _summary(self) -> str:
        summary = self.read.one_of(self.table, "value", SUMMARIES, "mean")
        if summary == "weighted" and self.plan != A_PRIORI:
            raise InputError(
                f'value = "weighted" does not go with plan {self.plan!r}',
                where=self.read.where("value"),
                expected="plan a-priori, whose mask file holds the weights",
            )
        return summary

    def _flips(self) -> int:
        flips: int = self.read.get(self.table, "flips", int, 4999)
        if flips < 1:
            raise InputError(
                "too few flips",
                where=self.read.where("flips"),
                expected="at least 1",
                got=str(flips),
                remedy="leave flips out for the usual number",
            )
        return flips

    def _check_folds(self, procedure: Procedure, choosing: Selection | None) -> None:
        """Have the folds made once: who is lacking is known now."""
        try:
            procedure.check_sides(procedure.scheme.folds(sorted(self.tested.people)))
        except InputError as error:
            raise error.within(f"{self.read.where('plan')}, roi {self.name}") from error
        if choosing is not None:
            try:
                procedure.check_other_maps()
            except InputError as error:
                raise error.at(f"{self.read.where('choose_on')}, roi {self.name}") from error

    def _check_jackknife(self, procedure: Procedure) -> None:
        try:
            check_jackknife(procedure, self.tested.people)
        except InputError as error:
            raise error.within(f"{self.read.where('interval')}, roi {self.name}") from error

    def _check_runs(self, procedure: Procedure) -> None:
        """Refuse a rule that reads t where the runs that choose are a single one."""
        rows = self.tested.by_run()
        runs: dict[str, list[str]] = {}
        for person, (_, listed) in zip(rows.people, rows.subjects, strict=True):
            runs.setdefault(person, []).append(listed[0].unit.run)
        few = []
        for person, mine in runs.items():
            try:
                procedure.check_sides(procedure.scheme.folds(mine))
            except InputError as error:
                few.append((person, error))
        if few:
            first = few[0][1]
            told = ", ".join(person for person, _ in few[:5])
            raise InputError(
                first.fields["what"],
                where=f"{self.read.where('rule')}, roi {self.name}",
                expected=first.fields["expected"],
                got=f"one run in {told}" + (f" and {len(few) - 5} more" if len(few) > 5 else ""),
                remedy='use the rule strongest or peak-sphere with map = "mean"',
            )

    def _check_group(self, procedure: Procedure, choosing: Selection | None) -> None:
        """Refuse a rule that reads t where one person's map is the group's."""
        if choosing is not None and procedure.rule.map_kind == "t" and len(choosing.subjects) < 2:
            raise InputError(
                "the rule reads t, and there is no t of one map",
                where=f"{self.read.where('choose_on')}, roi {self.name}",
                expected="maps of at least 2 subjects that choose",
                got=f"sub-{choosing.subjects[0][0]} alone",
                remedy='choose on more people, or use the rule strongest with map = "mean"',
            )

    def _certificate(self) -> Certificate | None:
        if self.plan != ORTHOGONAL:
            return None
        stated = self.read.get(self.table, "certificate", dict, ...)
        return read_certificate(self.read, stated, self.tested)

    # -- maps -------------------------------------------------------------------------------

    def _wanted(self) -> dict[str, Any]:
        """The columns that select the tested maps."""
        own = self.read.get(self.table, "select", dict, {})
        return {**self.read.get(self.data, "select", dict, {}), **own}

    def _tested(self) -> Selection:
        minus = self.read.get(self.table, "minus", dict, None)
        if minus is None:
            minus = self.read.get(self.data, "minus", dict, None)
        elif not minus:
            minus = None  # of this region, whatever [data] subtracts
        baseline = self.read.get(self.data, "baseline", dict, None)
        made = select(self.read, self.study, self._wanted(), minus, baseline)
        if self.maps.by_variance:
            lacking = [row.name for row in made.variance_rows if not row.variance]
            if lacking:
                raise InputError(
                    'run_weights = "variance" needs a variance map for every map',
                    where=self.read.where("run_weights"),
                    got=f"none for {lacking[0]}" + (" and others" if lacking[1:] else ""),
                    remedy="fill the variance column of the study table",
                )
        return self._asked(made, self._wanted())

    def _asked(self, made: Selection, wanted: dict[str, Any]) -> Selection:
        """A selection of both groups of a comparison is the question itself, and chose nobody."""
        groups = self.table.get("compare")
        if isinstance(groups, dict):
            column = groups.get("column")
            both = {groups.get("first"), groups.get("second")}
            values = wanted.get(str(column))
            if isinstance(values, list) and {str(value) for value in values} == both:
                return replace(made, kept_by=tuple(c for c in made.kept_by if c != column))
        return made

    def _choosing(self) -> Selection | None:
        own = self.read.get(self.table, "choose_on", dict, ... if self.plan == LOCALIZER else None)
        if own is None:
            return None
        wanted = {**self._wanted(), **own}
        made = chosen_elsewhere(
            self.read,
            self.study,
            wanted,
            self.tested,
            same=not self.group_mask or self.plan == ORTHOGONAL,
        )
        if made is None and self.plan in (LOCALIZER, ORTHOGONAL):
            raise InputError(
                "choose_on selects the very maps that are tested",
                where=self.read.where("choose_on"),
                remedy='name another task, run or session: choose_on = { task = "..." }',
            )
        return None if made is None else self._asked(made, wanted)

    def _enough_runs(self) -> None:
        if self.plan not in OTHER_RUNS:
            return
        few = [label for label, runs in self.tested.subjects if len(runs) < 2]
        if few:
            raise InputError(
                f"too few runs for {self.plan}",
                where=f"{self.read.where('plan')}, roi {self.name}",
                expected="at least 2 runs (the run column) of every subject",
                got="one for sub-" + ", sub-".join(few),
                remedy="leave these subjects out with an exclude_reason, or choose another plan",
            )
        if self.tested.minus or self.tested.baseline:
            raise InputError(
                f"minus and baseline do not go with plan {self.plan!r}",
                where=self.read.where("minus" if self.tested.minus else "baseline"),
                remedy="make the difference (or the percentage) per run beforehand",
            )

    def _enough_subjects(self) -> None:
        people = sorted(set(self.tested.people))
        if len(people) < 2:
            raise InputError(
                "too few subjects",
                where=f"{self.read.where('plan')}, roi {self.name}",
                expected="at least 2 (rows of one exchange value count as one)",
                got=f"{len(people)} ({', '.join(people)})",
                remedy="check the study table and the rows it leaves out",
            )

    def _one_grid(self, choosing: Selection | None) -> None:
        if self.maps.own_grids and (self.plan in _ONE_GRID or self.group_mask):
            raise InputError(
                f'grids = "own" does not go with plan {self.plan!r}',
                where=self.read.where("grids"),
                expected="maps on one grid, from which a group map can be made",
                remedy="use maps in a common space, or a plan with own masks (localizer, "
                "leave-one-run-out, split-half-runs) or an a-priori region",
            )

    # -- procedure --------------------------------------------------------------------------

    def _procedure(self, summary: str) -> Procedure:
        read, table = self.read, self.table
        try:
            return Procedure(
                rule=self._rule(read.get(table, "rule", dict, ...)),
                scheme=self._scheme(),
                tail=read.one_of(table, "tail", TAILS, "positive"),
                on_empty=read.one_of(table, "on_empty", ON_EMPTY, "empty"),
                k=read.get(table, "k", int, 0),
                missing=self.maps.marked,
                summary=summary,
                model=self._model(),
            )
        except InputError as error:
            # The numerics know no file; here is where it was asked for.
            raise error.at(f"{read.where('rule')}, roi {self.name}") from error

    def _model(self) -> Model | None:
        """What is compared: two groups, or the values of a score; None for one sample."""
        read, table = self.read, self.table
        groups = read.get(table, "compare", dict, None)
        column = read.get(table, "score", str, "")
        covariates = tuple(
            (name, self._numbers(str(name), "covariates"))
            for name in read.get(table, "covariates", list, [])
        )
        if (groups is not None) + bool(column) > 1 or (covariates and not (groups or column)):
            raise InputError(
                "compare, score and covariates do not go together like this",
                where=read.where("covariates" if covariates else "compare"),
                expected="compare or score, one of them, and covariates with either",
            )
        if "reliability" in table and not column:
            raise InputError(
                "reliability without a score",
                where=read.where("reliability"),
                expected='score = "COLUMN" in the same [[roi]]',
                remedy="the ceiling it gives is that of a correlation",
            )
        if groups is not None:
            read.known(groups, {"column", "first", "second"}, "compare")
            name = read.get(groups, "column", str, ..., of="compare")
            first, second = (
                read.get(groups, key, str, ..., of="compare") for key in ("first", "second")
            )
            of = self._of_people(name, "column")
            there = sorted({group for _, group in of})
            for key, group in (("first", first), ("second", second)):
                if group not in there:
                    raise InputError(
                        "compare names a group of nobody",
                        where=read.where(key),
                        expected=f"what stands in column {name}: {', '.join(map(repr, there))}",
                        got=repr(group),
                        remedy="write it as the table does: capitals count",
                    )
            return Groups(of, first, second, covariates, name)
        return Score(self._numbers(column, "score"), covariates, column) if column else None

    def _check_model(self, model: Model | None) -> None:
        """Refuse groups and scores that the people of the study do not have."""
        if model is None:
            return
        people = self.tested.people
        if len(set(people)) < len(people):
            raise InputError(
                "compare and score need one map per independent subject",
                where=self.read.where("compare" if isinstance(model, Groups) else "score"),
                expected="no exchange value that several subjects share",
                got=f"{len(people)} subjects, {len(set(people))} of them independent",
            )
        try:
            model.comparison(sorted(people))
        except InputError as error:
            key = "compare" if isinstance(model, Groups) else "score"
            raise error.within(self.read.where(key)) from error

    def _numbers(self, column: str, key: str) -> tuple[tuple[str, float], ...]:
        """Each person's number in a column."""
        found = []
        for person, cell in self._of_people(column, key):
            try:
                value = float(cell)
            except ValueError:
                value = math.nan
            if not math.isfinite(value):
                raise InputError(
                    f"{person} has no number in column {column!r}",
                    where=self.read.where(key),
                    expected="a finite number for every subject",
                    got=repr(cell) if cell else "an empty cell",
                    remedy="fill it, or leave the subject out with an exclude_reason",
                )
            found.append((person, value))
        return tuple(found)

    def _reliability(self) -> tuple[float, float] | None:
        """The stated reliabilities of the held-out values and of the score."""
        stated = self.read.get(self.table, "reliability", dict, None)
        if stated is None:
            return None
        self.read.known(stated, {"values", "score"}, "reliability")
        one, other = (self.read.number(stated, key, ...) for key in ("values", "score"))
        if not (-1 <= one <= 1 and -1 <= other <= 1):
            raise InputError(
                "reliability out of range",
                where=self.read.where("reliability"),
                expected="-1 to 1",
                got=f"{one:g} and {other:g}",
            )
        return one, other

    def _rule(self, table: dict[str, Any]) -> MaskRule:
        read = self.read
        read.known(table, {"kind"}.union(*_RULES.values()), "rule")
        kind = read.one_of(table, "kind", _RULES, ..., "rule")
        for key in table:
            if key not in {*_RULES[kind], "kind"}:
                raise InputError(
                    f"key {key!r} does not go with rule kind {kind!r}",
                    where=read.where(key),
                    expected="one of " + ", ".join(sorted(_RULES[kind])),
                )
        which = read.one_of(table, "map", ("t", "mean"), "t")
        if kind == "strongest":
            return Strongest(read.get(table, "k", int, 0), which, read.number(table, "fraction", 0))
        if kind == "peak-sphere":
            return PeakSphere(read.number(table, "radius", ..., "rule"), which)
        height = read.get(table, "height", (int, float), None)
        p = read.get(table, "p", (int, float), None)
        if self.plan == LOCALIZER and not self.group_mask and p is not None:
            raise InputError(
                "p does not go with a localizer's own maps",
                where=read.where("p"),
                expected="height, on the localizer map's own values (t, say, if it is a t map)",
                remedy='or kind = "strongest"',
            )
        control, extent = self._controlled(table, "control"), self._controlled(table, "extent")
        if control is None and extent is None and ("level" in table or "flips" in table):
            raise InputError(
                "level and flips without a control",
                where=read.where("level" if "level" in table else "flips"),
                expected="control or extent, whose they are",
            )
        if kind == "threshold":
            return Threshold(height, p, control=control)
        return Cluster(
            height,
            p,
            read.get(table, "connectivity", int, 18),
            read.get(table, "min_size", int, 1),
            read.get(table, "pick", str, "largest"),
            read.point(table, "near"),
            extent,
            control=control,
        )

    def _controlled(self, table: dict[str, Any], key: str) -> Controlled | None:
        """What a rule's key says is controlled, with the rule's level and flips."""
        read = self.read
        control = read.get(table, key, str, "")
        if not control:
            return None
        if self.plan == LOCALIZER and not self.group_mask:
            raise InputError(
                f"{key} does not go with a localizer's own maps",
                where=read.where(key),
                expected="height, on the localizer map's own values",
            )
        if (self.group_mask or self.plan == EXPLORATORY) and control not in BY_P:
            raise InputError(
                f"{control} does not go with the one group map that {self.plan} chooses on",
                where=read.where(key),
                expected=f"control = {' or '.join(BY_P)}, or a height or p",
            )
        return Controlled(
            control,
            read.number(table, "level", 0.05),
            read.get(table, "flips", int, 999),
            self.seed,
        )

    def _scheme(self) -> Scheme:
        """The folds of a plan, over the people of the study."""
        read, table, plan = self.read, self.table, self.plan
        if plan in (K_FOLD, SPLIT_HALF):
            k = 2 if plan == SPLIT_HALF else read.get(table, "folds", int, 5)
            if k < 2:
                raise InputError(
                    "too few folds", where=read.where("folds"), expected=">= 2", got=str(k)
                )
            return KFold(k, self.seed, self._per_person("stratify"))
        if plan == GIVEN_FOLDS:
            read.get(table, "fold_column", str, ...)
            return Given(self._per_person("fold_column"))
        if plan == SPLIT_RUNS:
            return Halves(read.get(table, "halves", str, "odd-even"))
        return LeaveOneOut(2 if plan == LEAVE_RUN_OUT else 3)

    def _per_person(self, key: str) -> tuple[tuple[str, str], ...]:
        """Each person's value in the column that a key names; nothing when it is absent."""
        column = self.read.get(self.table, key, str, "")
        return self._of_people(column, key) if column else ()

    def _of_people(self, column: str, key: str) -> tuple[tuple[str, str], ...]:
        """Each person's value in a column."""
        if column not in self.study.columns:
            raise InputError(
                f"unknown column {column!r}",
                where=self.read.where(key),
                expected="a column of the study table: " + ", ".join(self.study.columns),
            )
        found: dict[str, str] = {}
        for _, runs in self.tested.subjects:
            for row in runs:
                value = row.column(column)
                if found.setdefault(row.person, value) != value:
                    raise InputError(
                        f"{row.person} has two values of {column}",
                        where=self.read.where(key),
                        got=f"{found[row.person]!r} and {value!r}",
                        remedy="give all rows that count as one subject the same value",
                    )
        return tuple(sorted(found.items()))


def in_table(read: Reader, derived_from: Iterable[Unit], study: Study) -> None:
    """Refuse a subject that the study does not have: what was meant would not be seen."""
    subs = {row.unit.sub for row in study.rows}
    for unit in derived_from:
        if unit.sub not in {"", "{sub}", *subs}:
            raise InputError(
                "derived_from names a subject who is not in the study table",
                where=read.where("derived_from"),
                expected=f"a label such as {', '.join(sorted(subs)[:3])}",
                got=repr(unit.sub),
                remedy="write the label as in the table: 01 is not 1",
            )


def _same_space(read: Reader, key: str, region: Region, tested: Selection) -> None:
    """Refuse a region whose named space is not that of the maps."""
    spaces = sorted({row.space for row in tested.rows if row.space})
    for leaf in region.leaves():
        others = [space for space in spaces if leaf.space and space != leaf.space]
        if others:
            raise InputError(
                f"{key} is in another space than the maps",
                where=read.where(key),
                expected=f"space {others[0]}, that of the maps",
                got=f"space {leaf.space} ({leaf.describe()})",
                remedy="bring it to the maps' space, or correct the space entity (or key, column)",
            )
