"""STUDY.toml: what to analyse and how, stated beforehand.

Every key is checked; an unknown one is an error that names its line and the known ones.
"""

from __future__ import annotations

import math
import re
import tomllib
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ..nodes.errors import InputError
from ..nodes.folds import Given, Halves, KFold, LeaveOneOut, Scheme
from ..nodes.groupmaps import Missing
from ..nodes.masks import Cluster, MaskRule, Strongest, Threshold
from ..nodes.procedure import ON_EMPTY, TAILS, Procedure
from ..nodes.results import INTERVALS
from ..nodes.touch import ENTITIES, Unit
from .digests import digest_text
from .study import Origin, Row, Study, read_table

LEAVE_ONE_OUT, A_PRIORI, EXPLORATORY = "leave-one-subject-out", "a-priori", "exploratory"
K_FOLD, SPLIT_HALF, GIVEN_FOLDS = "k-fold", "split-half", "given-folds"
# The plans in which subjects take turns at choosing and being tested.
CROSS_FITTED = (LEAVE_ONE_OUT, K_FOLD, SPLIT_HALF, GIVEN_FOLDS)
LEAVE_RUN_OUT, SPLIT_RUNS = "leave-one-run-out", "split-half-runs"
# The plans in which each subject has masks of their own, from their other runs.
OWN_MASKS = (LEAVE_RUN_OUT, SPLIT_RUNS)
PLANS = (*CROSS_FITTED, *OWN_MASKS, A_PRIORI, EXPLORATORY)
# The tests that may be asked for, the default first. The plain t of cross-fitted or circular
# values can be asked for, and is refused by the guard with the reason.
TESTS = {
    **dict.fromkeys(CROSS_FITTED, ("whole-procedure", "t")),
    **dict.fromkeys((*OWN_MASKS, A_PRIORI), ("t",)),
    EXPLORATORY: ("none", "t"),
}

_KEYS = {
    "": {"study", "data", "roi", "origin"},
    "study": {"name", "table", "output", "seed"},
    "data": {"select", "zeros_are_missing", "min_fraction"},
    "origin": {"source", "files", "derived_from"},
    "roi": {"name", "plan", "test"},
    "rule": {"kind", "height", "p", "connectivity", "min_size", "pick", "near", "k", "map"},
    "region": {"mask", "regrid", "centre", "radius", "origin", "derived_from"},
}


_CHOOSING = {"search", "rule", "tail", "on_empty", "k"}
_FOLDED = _CHOOSING | {"flips", "interval", "choose_on"}
# The keys of each plan, beside those of every [[roi]].
_PLAN_KEYS = {
    LEAVE_ONE_OUT: _FOLDED,
    K_FOLD: _FOLDED | {"folds", "stratify"},
    SPLIT_HALF: _FOLDED | {"stratify"},
    GIVEN_FOLDS: _FOLDED | {"fold_column"},
    LEAVE_RUN_OUT: _CHOOSING,
    SPLIT_RUNS: _CHOOSING | {"halves"},
    A_PRIORI: {"region"},
    EXPLORATORY: _CHOOSING,
}

# Per subject, sorted by label: the rows whose maps are averaged.
Subjects = tuple[tuple[str, tuple[Row, ...]], ...]


@dataclass(frozen=True)
class Region:
    """A region given from outside: a mask file, or a sphere in mm; or the whole map.

    Parameters
    ----------
    origin : str
        Where it comes from.
    mask : str
        Path relative to the study; "" for a sphere or the whole map.
    centre : (3,) float or None, mm
    radius : float, mm
    regrid : bool
        Bring a mask on another grid to that of the maps.
    """

    origin: str = ""
    mask: str = ""
    centre: tuple[float, float, float] | None = None
    radius: float = 0.0
    regrid: bool = False

    def describe(self) -> str:
        """In words, for sentences about the result."""
        if self.mask:
            return Path(self.mask).name.removesuffix(".gz").removesuffix(".nii")
        if self.centre is not None:
            at = ", ".join(f"{x:g}" for x in self.centre)
            return f"sphere of {self.radius:g} mm at ({at}) mm"
        return "whole map"


@dataclass(frozen=True)
class Roi:
    """One region of interest and how it is chosen and tested.

    `choosing` holds the rows it is chosen on, when they are not those that are tested.
    """

    name: str
    plan: str
    region: Region
    procedure: Procedure | None
    n_flips: int
    interval: str
    test: str
    choosing: Subjects | None = None

    @property
    def names(self) -> tuple[str, str, str]:
        """(roi, plan, search region), as results carry them."""
        return self.name, self.plan, self.region.describe()


@dataclass(frozen=True)
class Settings:
    """A whole STUDY.toml.

    Parameters
    ----------
    name : str
    root, output : Path
        The study's folder, and where results go.
    seed : int
    missing : Missing
    study : Study
    rows : tuple of (label, tuple of Row)
        Per subject, sorted: the maps to average.
    left_out : tuple of Row
        With an exclude_reason.
    rois : tuple of Roi
    digest : str
        SHA-256 of the file.
    table_path : Path
    """

    name: str
    root: Path
    output: Path
    seed: int
    missing: Missing
    study: Study
    rows: Subjects
    left_out: tuple[Row, ...]
    rois: tuple[Roi, ...]
    digest: str
    table_path: Path

    @property
    def used(self) -> tuple[Row, ...]:
        """Every row that is read, tested ones first, each once."""
        sets = [self.rows, *(roi.choosing for roi in self.rois if roi.choosing is not None)]
        return tuple(dict.fromkeys(row for rows in sets for _, runs in rows for row in runs))


class _Reader:
    """Reads keys of a TOML table, with errors that name the file and the line."""

    def __init__(self, path: Path, text: str, start: int = 0) -> None:
        self.path, self.text, self.start = path, text, start

    def within(self, section: str, number: int) -> _Reader:
        """The same file, looking for lines from the header of table `number` of an array on."""
        headers = [
            i
            for i, line in enumerate(self.text.splitlines())
            if re.match(rf"\s*\[\[\s*{section}\s*\]\]", line)
        ]
        return _Reader(self.path, self.text, headers[number] if number < len(headers) else 0)

    def where(self, key: str) -> str:
        """The file, and the first line on which a key stands."""
        pattern = re.compile(rf'(^|[\s{{,\["]){re.escape(key)}["\]]*\s*[=\]]')
        for number, line in enumerate(self.text.splitlines()[self.start :], self.start + 1):
            if pattern.search(line):
                return f"{self.path}, line {number}"
        return str(self.path)

    def tables(self, table: dict[str, Any], key: str, default: Any) -> list[dict[str, Any]]:
        """A list of tables, such as ``[[roi]]``."""
        listed = self.get(table, key, list, default)
        for item in listed:
            if not isinstance(item, dict):
                raise InputError(
                    f"{key} is no list of tables", where=self.where(key), got=repr(item)
                )
        return list(listed)

    def known(self, table: dict[str, Any], section: str) -> None:
        """Refuse keys that do not exist."""
        for key in table:
            if key not in _KEYS[section]:
                raise InputError(
                    f"unknown key {key!r}" + (f" in {section}" if section else ""),
                    where=self.where(key),
                    expected="one of " + ", ".join(sorted(_KEYS[section])),
                )

    def get(
        self, table: dict[str, Any], key: str, kind: type | tuple[type, ...], default: Any
    ) -> Any:
        """A value of a type, or the default; `...` as default makes it mandatory."""
        if key not in table:
            if default is ...:
                raise InputError(f"missing key {key!r}", where=str(self.path))
            return default
        value = table[key]
        if not isinstance(value, kind) or (isinstance(value, bool) and kind is not bool):
            names = (
                kind.__name__ if isinstance(kind, type) else " or ".join(k.__name__ for k in kind)
            )
            raise InputError(
                f"{key} has the wrong type",
                where=self.where(key),
                expected=names,
                got=f"{type(value).__name__} {value!r}",
            )
        return value

    def one_of(self, table: dict[str, Any], key: str, allowed: Iterable[str], default: Any) -> str:
        """A word out of a list."""
        value = self.get(table, key, str, default)
        if value not in allowed:
            raise InputError(
                f"unknown {key}",
                where=self.where(key),
                expected="one of " + ", ".join(allowed),
                got=repr(value),
            )
        return str(value)


def read_settings(path: str | Path) -> Settings:
    """Read and check a STUDY.toml and the study table it names.

    Raises
    ------
    InputError
        For anything wrong in either; names file and line.
    """
    path = Path(path)
    if not path.is_file():
        raise InputError("no such study file", where=str(path), remedy="give a STUDY.toml")
    try:
        text = path.read_text(encoding="utf-8")
        toml = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(
            "malformed TOML", where=str(path), got=str(error), remedy="correct that line"
        ) from error
    read = _Reader(path, text)
    read.known(toml, "")
    head, data = read.get(toml, "study", dict, ...), read.get(toml, "data", dict, {})
    read.known(head, "study")
    read.known(data, "data")
    root = path.parent.absolute()
    missing = Missing(
        read.get(data, "zeros_are_missing", bool, True),
        float(read.get(data, "min_fraction", (int, float), 0.8)),
    )
    tables = read.tables(toml, "roi", ...)
    plain = read_table(root / read.get(head, "table", str, ...), root)
    select, seed = read.get(data, "select", dict, {}), read.get(head, "seed", int, 0)
    rows, left_out = _selected(read, plain, select)
    rois = tuple(
        _roi(read.within("roi", i), table, missing, seed, rows, plain, select)
        for i, table in enumerate(tables)
    )
    _distinct(read, [roi.name for roi in rois])
    origins = tuple(_origins(read, toml, rois, root))
    study = Study(root, plain.rows, origins, plain.columns)
    return Settings(
        name=_label(read, read.get(head, "name", str, ...), "name"),
        root=root,
        output=root / read.get(head, "output", str, "results"),
        seed=seed,
        missing=missing,
        study=study,
        rows=rows,
        left_out=left_out,
        rois=rois,
        digest=digest_text(text),
        table_path=root / head["table"],
    )


def _label(read: _Reader, value: str, key: str) -> str:
    """BIDS labels, which names become part of, are letters and digits."""
    if not re.fullmatch(r"[A-Za-z0-9]+", value):
        raise InputError(
            f"{key} is no label",
            where=read.where(key),
            expected="letters and digits only",
            got=repr(value),
        )
    return value


def _distinct(read: _Reader, names: list[str]) -> None:
    if not names:
        raise InputError("no [[roi]]", where=str(read.path), remedy="state at least one")
    folded = [name.lower() for name in names]  # one file name each, on any file system
    for name in names:
        if folded.count(name.lower()) > 1:
            raise InputError("two [[roi]] of one name", where=str(read.path), got=repr(name))


def _point(read: _Reader, table: dict[str, Any], key: str) -> tuple[float, float, float] | None:
    value = read.get(table, key, list, None)
    if value is None:
        return None
    numbers = [x for x in value if isinstance(x, int | float) and not isinstance(x, bool)]
    if len(value) != 3 or len(numbers) != 3 or not all(map(math.isfinite, numbers)):
        raise InputError(
            f"{key} is no coordinate",
            where=read.where(key),
            expected="[x, y, z] in mm",
            got=str(value),
        )
    return float(value[0]), float(value[1]), float(value[2])


def _region(read: _Reader, table: dict[str, Any], key: str) -> Region:
    read.known(table, "region")
    mask, centre = read.get(table, "mask", str, ""), _point(read, table, "centre")
    if bool(mask) == (centre is not None):
        raise InputError(
            f"{key} needs either a mask or a centre and radius",
            where=read.where(key),
            got=str(table),
        )
    origin = read.get(table, "origin", str, "")
    if not origin.strip():
        raise InputError(
            f"{key} without an origin",
            where=read.where(key),
            remedy='state where it comes from, with a source: origin = "..."',
        )
    radius = float(read.get(table, "radius", (int, float), 0 if mask else ...))
    if not mask and not 0 < radius < math.inf:
        raise InputError(
            "radius out of range", where=read.where("radius"), expected="> 0 mm", got=f"{radius:g}"
        )
    regrid = read.get(table, "regrid", bool, False)
    return Region(origin.strip(), mask, centre, radius, regrid)


def _rule(read: _Reader, table: dict[str, Any]) -> MaskRule:
    read.known(table, "rule")
    kind = read.one_of(table, "kind", ("threshold", "cluster", "strongest"), ...)
    allowed = {
        "threshold": {"height", "p"},
        "strongest": {"k", "map"},
        "cluster": {"height", "p", "connectivity", "min_size", "pick", "near"},
    }[kind]
    for key in table:
        if key not in {*allowed, "kind"}:
            raise InputError(
                f"key {key!r} does not go with rule kind {kind!r}",
                where=read.where(key),
                expected="one of " + ", ".join(sorted(allowed)),
            )
    if kind == "strongest":
        kind = read.one_of(table, "map", ("t", "mean"), "t")
        return Strongest(read.get(table, "k", int, ...), kind)
    height = read.get(table, "height", (int, float), None)
    p = read.get(table, "p", (int, float), None)
    if kind == "threshold":
        return Threshold(height, p)
    return Cluster(
        height,
        p,
        read.get(table, "connectivity", int, 18),
        read.get(table, "min_size", int, 1),
        read.get(table, "pick", str, "largest"),
        _point(read, table, "near"),
    )


def _roi(
    read: _Reader,
    table: dict[str, Any],
    missing: Missing,
    seed: int,
    rows: Subjects,
    study: Study,
    select: dict[str, Any],
) -> Roi:
    for key in table:
        if key not in _KEYS["roi"].union(*_PLAN_KEYS.values()):
            known = _KEYS["roi"].union(*_PLAN_KEYS.values())
            raise InputError(
                f"unknown key {key!r} in roi",
                where=read.where(key),
                expected="one of " + ", ".join(sorted(known)),
            )
    name = _label(read, read.get(table, "name", str, ...), "name")
    plan = read.one_of(table, "plan", PLANS, ...)
    for key in table:
        if key not in _KEYS["roi"] | _PLAN_KEYS[plan]:
            raise InputError(f"key {key!r} does not go with plan {plan!r}", where=read.where(key))
    given = plan == A_PRIORI
    key = "region" if given else "search"
    place = read.get(table, key, dict, ... if given else None)
    region = Region() if place is None else _region(read, place, key)
    procedure = None
    if not given:
        try:
            procedure = Procedure(
                rule=_rule(read, read.get(table, "rule", dict, ...)),
                scheme=_scheme(read, table, plan, seed, rows, study),
                tail=read.one_of(table, "tail", TAILS, "positive"),
                on_empty=read.one_of(table, "on_empty", ON_EMPTY, "empty"),
                k=read.get(table, "k", int, 0),
                missing=missing,
            )
        except InputError as error:
            # The numerics know no file; here is where it was asked for.
            fields = dict(error.fields)
            fields["where"] = fields["where"] or f"{read.where('rule')}, roi {name}"
            raise InputError(fields.pop("what"), **fields) from error
    if plan in OWN_MASKS:
        _enough_runs(read, plan, rows)
    test = read.one_of(table, "test", TESTS[plan], TESTS[plan][0])
    of_folds = plan in (K_FOLD, SPLIT_HALF, GIVEN_FOLDS)
    intervals = INTERVALS if of_folds else tuple(i for i in INTERVALS if i != "folds")
    return Roi(
        name,
        plan,
        region,
        procedure,
        read.get(table, "flips", int, 4999),
        read.one_of(table, "interval", intervals, "folds" if of_folds else "flips"),
        test,
        _choosing(read, table, rows, study, select),
    )


def _enough_runs(read: _Reader, plan: str, rows: Subjects) -> None:
    few = [label for label, runs in rows if len(runs) < 2]
    if few:
        raise InputError(
            f"too few runs for {plan}",
            where=str(read.path),
            expected="at least 2 runs (the run column) of every subject",
            got="one for sub-" + ", sub-".join(few),
            remedy="leave these subjects out with an exclude_reason, or choose another plan",
        )


def _choosing(
    read: _Reader, table: dict[str, Any], rows: Subjects, study: Study, select: dict[str, Any]
) -> Subjects | None:
    """The rows a region is chosen on, when they differ from those that are tested."""
    own = read.get(table, "choose_on", dict, None)
    if own is None:
        return None
    chosen, _ = _selected(read, study, {**select, **own})
    here, there = {label for label, _ in rows}, {label for label, _ in chosen}
    if here != there:
        raise InputError(
            "choose_on selects other subjects than [data] select",
            where=read.where("choose_on"),
            got="sub-" + ", sub-".join(sorted(here ^ there)) + " in one of them only",
            remedy="give every subject a map of both, or an exclude_reason on both",
        )
    return None if chosen == rows else chosen


def _scheme(
    read: _Reader, table: dict[str, Any], plan: str, seed: int, rows: Subjects, study: Study
) -> Scheme:
    """The folds of a plan, over the people of the study."""
    if plan in (K_FOLD, SPLIT_HALF):
        k = 2 if plan == SPLIT_HALF else read.get(table, "folds", int, 5)
        if k < 2:
            raise InputError(
                "too few folds", where=read.where("folds"), expected=">= 2", got=str(k)
            )
        return KFold(k, seed, _per_person(read, table, "stratify", rows, study))
    if plan == GIVEN_FOLDS:
        read.get(table, "fold_column", str, ...)
        return Given(_per_person(read, table, "fold_column", rows, study))
    if plan == SPLIT_RUNS:
        return Halves(read.get(table, "halves", str, "odd-even"))
    return LeaveOneOut(2 if plan == LEAVE_RUN_OUT else 3)


def _per_person(
    read: _Reader, table: dict[str, Any], key: str, rows: Subjects, study: Study
) -> tuple[tuple[str, str], ...]:
    """Each person's value in the column that a key names; nothing when the key is absent."""
    column = read.get(table, key, str, "")
    if not column:
        return ()
    if column not in study.columns:
        raise InputError(
            f"unknown column {column!r}",
            where=read.where(key),
            expected="a column of the study table: " + ", ".join(study.columns),
        )
    found: dict[str, str] = {}
    for _, runs in rows:
        for row in runs:
            value = row.column(column)
            if found.setdefault(row.person, value) != value:
                raise InputError(
                    f"{row.person} has two values of {column}",
                    where=str(read.path),
                    got=f"{found[row.person]!r} and {value!r}",
                    remedy="give all rows that count as one subject the same value",
                )
    return tuple(sorted(found.items()))


def _origins(
    read: _Reader, toml: dict[str, Any], rois: tuple[Roi, ...], root: Path
) -> Iterable[Origin]:
    for i, (roi, table) in enumerate(zip(rois, toml["roi"], strict=True)):
        place = table.get("region", table.get("search", {}))
        if roi.region.origin:
            files = (roi.region.mask,) if roi.region.mask else ()
            yield Origin(roi.region.origin, files, _units(read.within("roi", i), place))
    for table in read.tables(toml, "origin", []):
        read.known(table, "origin")
        listed: list[str] = []
        for pattern in read.get(table, "files", list, ...):
            if not str(pattern) or Path(str(pattern)).is_absolute():
                raise InputError(
                    "pattern of files out of range",
                    where=read.where("files"),
                    expected="a pattern relative to the study file",
                    got=repr(pattern),
                )
            matched = sorted(str(p.relative_to(root)) for p in root.glob(str(pattern)))
            if not matched:
                raise InputError(
                    "origin names no file", where=read.where("files"), got=repr(pattern)
                )
            listed += matched
        yield Origin(read.get(table, "source", str, ...), tuple(listed), _units(read, table))


def _units(read: _Reader, table: dict[str, Any]) -> tuple[Unit, ...]:
    units = []
    for pattern in read.tables(table, "derived_from", []):
        for key in pattern:
            if key not in (*ENTITIES, "suffix"):
                raise InputError(
                    f"unknown entity {key!r}",
                    where=read.where(key),
                    expected="one of " + ", ".join((*ENTITIES, "suffix")),
                )
        units.append(Unit(**{key: str(value) for key, value in pattern.items()}))
    return tuple(units)


def _selected(
    read: _Reader, study: Study, select: dict[str, Any]
) -> tuple[Subjects, tuple[Row, ...]]:
    """The rows to analyse, per subject, and those left out with a reason."""
    wanted: dict[str, set[str]] = {}
    for column, value in select.items():
        if column not in study.columns:
            raise InputError(
                f"unknown column {column!r}",
                where=read.where(column),
                expected="a column of the study table: " + ", ".join(study.columns),
            )
        wanted[column] = {str(v) for v in (value if isinstance(value, list) else [value])}
    rows = [r for r in study.rows if all(r.column(c) in v for c, v in wanted.items())]
    left_out = tuple(row for row in rows if row.exclude_reason)
    kept = [row for row in rows if not row.exclude_reason]
    if not kept:
        raise InputError(
            "no subject left",
            where=str(read.path),
            got=f"{len(study.rows)} rows in the table, {len(left_out)} of the selected excluded",
            remedy="check [data] select and the exclude_reason column",
        )
    contrasts = sorted({row.contrast for row in kept})
    if len(contrasts) > 1:
        raise InputError(
            "several contrasts selected",
            where=read.where("data"),
            got=", ".join(contrasts),
            remedy='name one: [data] select = { contrast = "..." }',
        )
    of_sub: dict[str, list[Row]] = {}
    for row in kept:
        of_sub.setdefault(row.unit.sub, []).append(row)
    for label, runs in of_sub.items():
        for row in runs:
            for entity in (*ENTITIES, "suffix"):
                if entity != "run" and row.column(entity) != runs[0].column(entity):
                    raise InputError(
                        f"maps of sub-{label} differ in {entity}",
                        where=str(read.path),
                        got=f"{runs[0].column(entity)!r} and {row.column(entity)!r}",
                        remedy=f"only runs are averaged: select one {entity}",
                    )
        numbers = [row.unit.run for row in runs]
        if len(set(numbers)) != len(numbers):
            raise InputError(
                f"sub-{label} has several maps of one run",
                where=str(read.path),
                got=", ".join(row.name for row in runs),
                remedy="select one, or fill the run column",
            )
    ordered = tuple(
        (label, tuple(sorted(of_sub[label], key=lambda row: row.unit))) for label in sorted(of_sub)
    )
    return ordered, left_out
