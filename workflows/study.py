"""Which file is which data unit: the study table, and origins of files from outside.

The table is a TSV with a row per effect map: ``path`` and ``volume`` (of a 4-D file, from 0),
the BIDS entities of the unit, the ``suffix`` of what was acquired, ``contrast``,
``exclude_reason``, ``exchange`` (rows that share it count as one subject), ``variance`` (the path
of the map's variance map), ``space``, and any covariates.
"""

from __future__ import annotations

import csv
import os
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

from ..nodes.errors import InputError
from ..nodes.scoreunits import Cell
from ..nodes.touch import ENTITIES, Touch, Unit, UnitTable, of_sphere, union
from .digests import digest

COLUMNS = (
    "path",
    "volume",
    "sub",
    "ses",
    "task",
    "acq",
    "dir",
    "rec",
    "run",
    "suffix",
    "contrast",
    "exclude_reason",
    "exchange",
)
BLANK = ("", "n/a")
# Columns that are there when a row needs them, beside COLUMNS and the entities.
_MORE = ("variance", "space")
_TEXTS = ("contrast", "exclude_reason", "exchange", *_MORE)
# Columns that name a map or whose it is; any other says something of a subject: a score.
NAMING = (*COLUMNS, *ENTITIES, *_MORE)


Labels = tuple[int, ...] | None
"""Those of a label image that are meant; None when that is not known: any of them."""

# What tells the cells of a design apart; `group` is a column of the table if there is one.
CELLS = ("contrast", "ses", "task", "acq", "group")


@dataclass(frozen=True)
class Row:
    """One effect map of the study.

    Parameters
    ----------
    path : str
        Relative to the study's root.
    volume : int or None
        Which volume of a 4-D file.
    unit : Unit
    contrast, exclude_reason, exchange : str
    variance : str
        The map's variance map, relative to the root; at the same volume of a 4-D file.
    space : str
        The named space the map is in, as stated or by the ``space`` entity of its name.
    extra : tuple of (column, value)
        Covariates, as text.
    line : int
        In the table.
    """

    path: str
    volume: int | None
    unit: Unit
    contrast: str = ""
    exclude_reason: str = ""
    exchange: str = ""
    variance: str = ""
    space: str = ""
    extra: tuple[tuple[str, str], ...] = ()
    line: int = 0

    def column(self, name: str) -> str:
        """The value in a column, as text."""
        if name in ENTITIES or name == "suffix":
            return str(getattr(self.unit, name))
        if name in ("path", *_TEXTS):
            return str(getattr(self, name))
        return dict(self.extra).get(name, "")

    @property
    def cell(self) -> list[str]:
        """Its contrast, session, task, acquisition and group."""
        return [
            dict(self.extra).get(name, "") if name == "group" else self.column(name)
            for name in CELLS
        ]

    @property
    def person(self) -> str:
        """Who the row counts as."""
        return self.exchange or self.unit.sub

    @property
    def name(self) -> str:
        """The row in messages and file lists."""
        return self.path if self.volume is None else f"{self.path} volume {self.volume}"


@dataclass(frozen=True)
class Doubt:
    """Why it is not known what a region derives from, although its source is declared.

    Parameters
    ----------
    name : str
        What stands among the unknown, short.
    reason, cure : str
    command : str
        What to call for this region; "" when the cure says it all.
    """

    name: str
    reason: str
    cure: str
    command: str = ""


@dataclass(frozen=True)
class Origin:
    """A declared source of files (or coordinates) from outside the study.

    Parameters
    ----------
    source : str
        Where it comes from, in a sentence with a reference.
    files : tuple of str
        Paths relative to the study's root; empty for a coordinate.
    derived_from : tuple of Unit
        The study's own units it was made from, if any (blank entities match all).
    doubts : tuple of Doubt
        What must be explained first: what it touches is unknown until then.
    labels : tuple of int
        Of a label image, those that it speaks of; none: all of them.
    sphere : tuple of float
        Of a coordinate, the centre and radius (mm) that it speaks of; none: all with its source.
    """

    source: str
    files: tuple[str, ...] = ()
    derived_from: tuple[Unit, ...] = ()
    doubts: tuple[Doubt, ...] = ()
    labels: tuple[int, ...] = ()
    sphere: tuple[float, ...] = ()

    @property
    def key(self) -> str:
        """By which it is known: its source, and the sphere when it speaks of one."""
        return (
            of_sphere(self.source, self.sphere[:3], self.sphere[3]) if self.sphere else self.source
        )


@dataclass
class Study:
    """The table and the origins: what is known of every file.

    Parameters
    ----------
    root : Path
        Recorded paths are relative to it.
    rows : sequence of Row
    origins : sequence of Origin
    columns : sequence of str
        Those of the table.
    tables : sequence of str
        Files that hold what the columns say of the subjects: the study table itself.
    read_as : dict of str to str
        Their digests when they were read.

    Attributes
    ----------
    table : UnitTable
        Of the rows' units, and of the scores: what further columns say of each subject.
    declared : dict of str to Touch
        What each origin touches, by its key.
    scores : dict of (column, label) to Cell
        What a column says of whom, by ``sub`` and by who counts as one.
    doubts : dict of str to Doubt
        By their names.

    Examples
    --------
    >>> rows = [Row("a.nii.gz", None, Unit(sub="01", suffix="bold"))]
    >>> study = Study(Path("."), rows)
    >>> study.table.describe(study.touch_of("a.nii.gz").values)
    'sub-01_bold'
    """

    root: Path
    rows: Sequence[Row]
    origins: Sequence[Origin] = ()
    columns: Sequence[str] = COLUMNS
    tables: Sequence[str] = ()
    read_as: Mapping[str, str] = field(default_factory=dict)
    table: UnitTable = field(init=False)
    declared: dict[str, Touch] = field(init=False)
    scores: dict[tuple[str, str], Cell] = field(init=False)
    doubts: dict[str, Doubt] = field(init=False)

    def __post_init__(self) -> None:
        people: dict[Unit, str] = {}
        of_sub: dict[str, tuple[str, int]] = {}
        for row in self.rows:
            people[row.unit] = row.person
            person, line = of_sub.setdefault(row.unit.sub, (row.person, row.line))
            if person != row.person:
                raise InputError(
                    f"sub-{row.unit.sub} has two exchange values",
                    got=f"{person!r} (line {line}) and {row.person!r} (line {row.line})",
                    remedy="give all rows of a subject the same value",
                )
        self._no_name_of_another()
        acquired = dict(people)
        cells = [
            (row, column, text, Unit(sub=row.unit.sub, suffix=column))
            for row in self.rows
            for column, text in row.extra
            if text
        ]
        for row, column, _, unit in cells:
            if unit in acquired:
                raise InputError(
                    "a column is named as what was acquired",
                    where=f"column {column}",
                    got=f"suffix {column} of {row.name}",
                    remedy="rename the column: it is about subjects, not about a measurement",
                )
            people[unit] = row.person
        self.table = UnitTable(acquired, people, (unit for *_, unit in cells))
        self.scores = {}
        for row, column, text, unit in cells:
            for label in {row.unit.sub, row.person}:
                there = self.scores.get((column, label), Cell(frozenset(), 0))
                bits = there.units | self.table.bits([unit])
                self.scores[column, label] = Cell(there.texts | {text}, bits)
        self.declared = {
            origin.key: union(
                self.of_origin(other) for other in self.origins if other.key == origin.key
            )
            for origin in self.origins
        }
        self.doubts = {doubt.name: doubt for origin in self.origins for doubt in origin.doubts}
        self._by_path: dict[str, list[Row]] = {}
        for row in self.rows:
            for path in (row.path, *([row.variance] if row.variance else [])):
                for key in self._keys(path):
                    self._by_path.setdefault(key, []).append(row)
        self._origins_of: dict[str, list[Origin]] = {}
        for origin in self.origins:
            for name in origin.files:
                for key in self._keys(name):
                    self._origins_of.setdefault(key, []).append(origin)
        if not self.read_as:
            self.read_as = {path: digest(path) for path in self.tables if os.path.isfile(path)}
        self._tables = {key for path in self.tables for key in self._keys(path)}
        self._sizes: dict[int, list[str]] | None = None
        self._contents: dict[int, dict[str, list[str]]] = {}

    def _no_name_of_another(self) -> None:
        """Refuse an exchange value that is the label of a subject without that value."""
        others = {row.unit.sub: row for row in self.rows if row.exchange != row.unit.sub}
        for row in self.rows:
            other = others.get(row.exchange)
            if row.exchange and other is not None:
                raise InputError(
                    f"the exchange value {row.exchange!r} is the label of another subject",
                    got=f"on sub-{row.unit.sub} (line {row.line}), and sub-{row.exchange} has "
                    f"{other.exchange or 'none'} (line {other.line})",
                    remedy="if they belong together, give all of them this value; if not, take a "
                    "value that is no subject's label",
                )

    def of_origin(self, origin: Origin) -> Touch:
        """What comes from an origin touches."""
        bits = 0
        for pattern in origin.derived_from:
            bits |= self.table.matching(pattern)
        doubts = frozenset(doubt.name for doubt in origin.doubts)
        return Touch(bits, origins=frozenset({origin.source}), unknown=doubts)

    def _keys(self, path: str) -> set[str]:
        full = os.path.abspath(self.root / path)
        return {full, os.path.realpath(full)}

    def full(self, path: str | Path) -> str:
        """A path, absolute; links are not followed."""
        return os.path.abspath(self.root / path)

    def relative(self, path: str | Path) -> str:
        """A path relative to the root, or as it is when elsewhere."""
        full = os.path.abspath(self.root / path)
        root = os.path.abspath(self.root)
        return os.path.relpath(full, root) if full.startswith(root + os.sep) else full

    def _touch_of_key(self, key: str, volume: int | None, labels: Labels = None) -> Touch | None:
        if key in self._by_path:
            bits, unknown = 0, []
            for row in self._by_path[key]:
                # Without a volume number, a 4-D file touches all its units.
                if volume is None or row.volume is None or row.volume == volume:
                    bits |= self.table.bits([row.unit])
                    if row.exclude_reason:
                        unknown.append(f"{row.name} (left out of the study: {row.exclude_reason})")
            return Touch(values=bits, unknown=frozenset(unknown))
        if key in self._origins_of:
            # Whoever declares a file says what it derives from; all of it counts.
            return union(
                self.declared[origin.key]
                for origin in self._origins_of[key]
                if labels is None or not origin.labels or set(origin.labels) & set(labels)
            )
        if key in self._tables:
            return Touch(values=self.table.scores)
        return None

    def touch_of(self, path: str, volume: int | None = None, labels: Labels = None) -> Touch | None:
        """What a file touches: its unit, its origin, unknown; None when it is no file.

        Parameters
        ----------
        path : str
            Absolute, or relative to the root.
        volume : int, optional
        labels : tuple of int, optional
            Of a label image, those that are read, where that is known.
        """
        for key in self._keys(path):
            touch = self._touch_of_key(key, volume, labels)
            if touch is not None:
                return touch
        # A text too long for a file name is no file; os.path says so without an error. A word
        # that happens to name a folder (a subject's label, say) is a word.
        full = self.root / path
        if os.path.isfile(full) or (os.path.isabs(path) and os.path.isdir(full)):
            return Touch(unknown=frozenset({self.relative(path)}))
        return None

    def rows_of(self, path: str | Path, volume: str | int | None = None) -> list[Row]:
        """The rows that name a file, or a volume of it."""
        named = (self._by_path.get(key, []) for key in sorted(self._keys(str(path))))
        wanted = None if volume is None else int(volume)
        found = dict.fromkeys(row for rows in named for row in rows)
        return [row for row in found if wanted is None or row.volume in (None, wanted)]

    def units_of(self, path: str | Path) -> list[Unit]:
        """The units of the rows that name a file."""
        found = {row.unit for key in self._keys(str(path)) for row in self._by_path.get(key, [])}
        return sorted(found)

    def is_declared(self, path: str) -> bool:
        """Whether the table or an origin names this path."""
        known = (self._by_path, self._origins_of, self._tables)
        return any(key in names for key in self._keys(path) for names in known)

    def paths(self) -> list[str]:
        """The absolute paths of all declared files, and what their links lead to."""
        return [*self._by_path, *self._origins_of, *self._tables]

    def holds(self, folder: str) -> bool:
        """Whether declared files lie in a folder, or the folder in the study's own."""
        here = {os.path.abspath(folder), os.path.realpath(folder)}
        roots = {os.path.abspath(self.root), os.path.realpath(self.root)}
        if any(path == root or path.startswith(root + os.sep) for path in here for root in roots):
            return True
        return any(os.path.dirname(path) in here for path in self.paths())

    def is_origin(self, path: str) -> bool:
        """Whether an origin names this path."""
        return bool(self.origins_of(path))

    def origins_of(self, path: str) -> list[Origin]:
        """The origins that name this path, or what it links to."""
        named = (self._origins_of.get(key, []) for key in sorted(self._keys(path)))
        return list(dict.fromkeys(origin for listed in named for origin in listed))

    def recognise(self, path: str) -> Touch | None:
        """Like `touch_of` for a declared file, also by its content under another name."""
        for key in self._keys(path):
            touch = self._touch_of_key(key, None)
            if touch is not None:
                return touch
        if not os.path.isfile(path):
            return None
        if self._sizes is None:
            self._sizes = {}
            for key in [*self._by_path, *self._origins_of, *self._tables]:
                if os.path.isfile(key):
                    self._sizes.setdefault(os.path.getsize(key), []).append(key)
        # Only a file of the same size can have the same bytes, so only those are read.
        size = os.path.getsize(path)
        if size not in self._contents:
            known: dict[str, list[str]] = {}
            for key in self._sizes.get(size, []):
                known.setdefault(digest(key), []).append(key)
            self._contents[size] = known
        if not self._contents[size]:
            return None
        touches = [self._touch_of_key(k, None) for k in self._contents[size].get(digest(path), [])]
        return union(touch for touch in touches if touch is not None) if touches else None

    def label_of(self, path: str | Path, volume: int | None = None) -> str:
        """Who a map of the table counts as: its ``exchange`` value, or its ``sub``.

        Raises
        ------
        InputError
            When the table has no such map.
        """
        for key in self._keys(str(path)):
            for row in self._by_path.get(key, []):
                if volume is None or row.volume == volume:
                    return row.person
        raise InputError("no such map in the study table", where=str(path))


def read_cells(path: Path, what: str) -> list[list[str]]:
    """The lines of a TSV, as BIDS has it: no quoting, a quotation mark is a character.

    Raises
    ------
    InputError
        When it cannot be read; says `what` it is.
    """
    try:
        with path.open(newline="", encoding="utf-8-sig") as stream:
            return list(csv.reader(stream, delimiter="\t", quoting=csv.QUOTE_NONE))
    except OSError as error:
        raise InputError(
            f"unreadable {what}",
            where=str(path),
            got=error.strerror or str(error),
            remedy="check its permissions",
        ) from error
    except (UnicodeDecodeError, csv.Error) as error:
        raise InputError(
            f"unreadable {what}",
            where=str(path),
            expected="a TSV in UTF-8",
            got=str(error),
            remedy="save it as tab-separated text in UTF-8",
        ) from error


def read_table(path: str | Path, root: Path | None = None, origins: Sequence[Origin] = ()) -> Study:
    """Read a study table.

    Parameters
    ----------
    path : path of a TSV file
    root : Path, optional
        The study's root, to which the paths of its rows are relative; default: the table's folder.
        In the table itself paths are relative to the table.
    origins : sequence of Origin, optional
        Declared sources of files and coordinates from outside the study.

    Raises
    ------
    InputError
        When columns or cells are wrong; names the line.
    """
    path = Path(path)
    if not path.is_file():
        raise InputError(
            "no such study table", where=str(path), remedy="make one: sequester table FOLDER"
        )
    lines = read_cells(path, "study table")
    if not lines:
        raise InputError(
            "empty study table", where=str(path), remedy="make one: sequester table FOLDER"
        )
    header = lines[0]
    for needed in ("path", "sub"):
        if needed not in header:
            raise InputError(
                f"study table without a {needed} column",
                where=str(path),
                expected="tab-separated columns " + " ".join(COLUMNS),
                got=" ".join(header),
                remedy="name the columns so in the first line, a tab between any two",
            )
    repeated = {name for name in header if header.count(name) > 1}
    if repeated:
        raise InputError(
            "column named twice",
            where=str(path),
            got=", ".join(sorted(repeated)),
            remedy="rename or remove one of the two",
        )
    rows = [
        _row(dict(zip(header, cells, strict=True)), f"{path}, line {number}", number)
        if len(cells) == len(header)
        else _ragged(path, number, len(header), len(cells))
        for number, cells in enumerate(lines[1:], 2)
        if cells
    ]
    seen: dict[tuple[str, int | None], int] = {}
    for row in rows:
        for name in filter(None, (row.path, row.variance)):
            before = seen.setdefault((name, row.volume), row.line)
            if row.path == row.variance:
                raise InputError(
                    "a map is named as its own variance map",
                    where=f"{path}, line {row.line}",
                    got=name,
                    remedy="correct the variance column, or leave it blank (n/a)",
                )
            if before != row.line:
                raise InputError(
                    "the same map on two rows",
                    where=f"{path}, lines {before} and {row.line}",
                    got=name if row.volume is None else f"{name} volume {row.volume}",
                    remedy="each map of a subject needs a file (or volume) of its own",
                )
    if root is not None:
        folder = os.path.relpath(path.parent, root)
        rows = [_from(folder, row) for row in rows] if folder != os.curdir else rows
    try:
        tables = (str(path.absolute()),)
        return Study(root or path.parent, rows, tuple(origins), header, tables)
    except InputError as error:
        raise error.at(str(path)) from error


def _from(folder: str, row: Row) -> Row:
    """A row whose paths are relative to a folder, with paths as from where that is relative to."""
    named = (
        os.path.normpath(os.path.join(folder, p)) if p else "" for p in (row.path, row.variance)
    )
    path, variance = named
    return replace(row, path=path, variance=variance)


def _ragged(path: Path, number: int, expected: int, got: int) -> Row:
    raise InputError(
        "row of another length",
        where=f"{path}, line {number}",
        expected=f"{expected} tab-separated cells",
        got=str(got),
        remedy="write n/a into blank cells, and no tab at the end",
    )


def _row(cells: dict[str, str], where: str, line: int) -> Row:
    value = {name: "" if cell.strip() in BLANK else cell.strip() for name, cell in cells.items()}
    for name, cell in value.items():
        if "\0" in cell:
            raise InputError(
                f"{name} with a NUL character",
                where=where,
                got=repr(cell),
                remedy="take the character out",
            )
    if not value["path"] or not value["sub"]:
        raise InputError(
            "row without a path or a sub",
            where=where,
            got=f"path {value['path'] or 'n/a'}, sub {value['sub'] or 'n/a'}",
            remedy="fill both cells, or remove the row",
        )
    volume = value.get("volume", "")
    if volume and not volume.isdecimal():
        raise InputError(
            "volume is no number",
            where=where,
            expected="0, 1, ...",
            got=volume,
            remedy="volumes of a 4-D file count from 0; write n/a for a 3-D file",
        )
    known = {*COLUMNS, *ENTITIES, *_MORE}
    return Row(
        path=value["path"],
        volume=int(volume) if volume else None,
        unit=Unit(**{e: value.get(e, "") for e in ENTITIES}, suffix=value.get("suffix", "")),
        **{name: value.get(name, "") for name in _TEXTS if name != "space"},
        space=value.get("space", "") or space_in_name(value["path"]),
        extra=tuple((name, cell) for name, cell in value.items() if name not in known),
        line=line,
    )


def space_in_name(path: str) -> str:
    """The BIDS ``space`` entity of a file name; "" when it has none.

    Examples
    --------
    >>> space_in_name("sub-01/sub-01_space-garden_stat-effect_statmap.nii.gz"), space_in_name("a")
    ('garden', '')
    """
    match = re.search(r"(?:^|_)space-([A-Za-z0-9]+)(?:_|\.|$)", Path(path).name)
    return match[1] if match else ""


def table_text(rows: Iterable[Row]) -> str:
    """A study table as TSV, blank cells as n/a, sorted by path and volume.

    The columns ``ce`` (contrast agent, after ``acq``), ``variance`` and ``space`` are added when
    a row has one, and covariates at the end.
    """
    listed = sorted(rows, key=lambda r: (r.path, -1 if r.volume is None else r.volume))
    columns = list(COLUMNS)
    if any(row.unit.ce for row in listed):
        columns.insert(columns.index("dir"), "ce")
    columns += [name for name in _MORE if any(row.column(name) for row in listed)]
    columns += dict.fromkeys(name for row in listed for name, _ in row.extra)
    lines = ["\t".join(columns)]
    for row in listed:
        volume = "" if row.volume is None else str(row.volume)
        cells = [volume if name == "volume" else row.column(name) for name in columns]
        lines.append("\t".join(cell or "n/a" for cell in cells))
    return "\n".join(lines) + "\n"
