"""The touch map: which data chose each mask, and which it was tested on.

Rows are data units, a block per subject; columns are masks. Regions whose masks touch the same
data share their columns: a leave-one-out of three regions is one picture, not three. A cell is
one of: chosen on, geometry only, tested on, both (biased where marked so, else a leak), neither.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from ..unitsets import members
from .words import listed

# Sizes of the drawing, in its own units.
_LEFT, _TOP, _GAP = 112.0, 74.0, 26.0
_TALL, _WIDE = 690.0, 540.0  # what cells fill, before they reach their least or largest size
_MOST_ROWS = 700  # above this, runs are put together by subject


@dataclass
class Column:
    """One mask: what it was chosen on, and what was tested in it.

    Parameters
    ----------
    label : str
        The fold; without one, whose mask it is, or "all".
    chosen, geometry, tested : set of int
        Units, by number.
    verdict, level, reason : str
    allowed : bool
    origins : list of str
    places : list of (region, mask's place in the graph, node that reads data in it)
    x, width : float
        Where it is drawn.
    """

    label: str
    chosen: set[int]
    geometry: set[int]
    tested: set[int]
    verdict: str
    level: str
    reason: str
    allowed: bool
    origins: list[str]
    places: list[tuple[str, str, str]] = field(default_factory=list)
    x: float = 0.0
    width: float = 0.0

    @property
    def pattern(self) -> tuple[object, ...]:
        """What it shares with the same fold of another region."""
        sets = (self.chosen, self.geometry, self.tested)
        return (self.label, *map(frozenset, sets), self.verdict, self.level)


@dataclass
class Panel:
    """The columns of regions whose masks touch the same data."""

    regions: list[str]
    columns: list[Column]
    x: float = 0.0
    width: float = 0.0

    @property
    def biased(self) -> bool:
        """Whether masks are read on the data that chose them, and marked so."""
        return any(one.verdict == "leak" and one.allowed for one in self.columns)


@dataclass
class Line:
    """One row: a unit, or all units of a subject put together."""

    units: list[int]
    name: str
    sub: str
    y: float = 0.0


@dataclass
class TouchMap:
    """The map, laid out.

    Parameters
    ----------
    panels : list of Panel
    lines : list of Line
    cell_height, width, height : float
    by_subject : bool
        Whether units of a subject are put together.
    marks : dict
        For every state, the path of the cells in it.
    row_labels : list of (y, text, whole text)
    column_labels : list of (x, text, whole text)
    summary : list of str
        The map in sentences.
    """

    panels: list[Panel]
    lines: list[Line]
    cell_height: float = 0.0
    width: float = 0.0
    height: float = 0.0
    by_subject: bool = False
    marks: dict[str, str] = field(default_factory=dict)
    row_labels: list[tuple[float, str, str]] = field(default_factory=list)
    column_labels: list[tuple[float, str, str]] = field(default_factory=list)
    summary: list[str] = field(default_factory=list)


def touch_map(record: Mapping[str, Any]) -> TouchMap:
    """Lay the map out.

    Parameters
    ----------
    record : mapping
        The content of record.json.
    """
    made = TouchMap(_panels(record), [])
    made.lines, made.by_subject = _lines(record, made.panels)
    _place(made)
    _mark(made)
    made.summary = [_summary(panel, record["variants"]) for panel in made.panels]
    return made


def subject_of(unit: str) -> str:
    """The subject in a unit's name.

    Examples
    --------
    >>> subject_of("sub-01_task-lanterns_run-1_bold"), subject_of("task-lanterns_bold")
    ('01', '')
    """
    found = re.match(r"sub-([^_]*)", unit)
    return found[1] if found else ""


def _panels(record: Mapping[str, Any]) -> list[Panel]:
    suffixes = record["suffixes"]
    of_region: dict[str, dict[object, Column]] = {}
    for meeting in record["meetings"]:
        if meeting["kind"] != "extraction":
            continue
        region = meeting["roi"] or meeting["node"]
        # A fold of several subjects is met once for each of them; so is one mask for all.
        mask = repr((meeting["mask"], meeting["geometry"]))
        key = (meeting["node"], meeting["fold"] or meeting["mask_place"], mask)
        tested = members(meeting["data"], suffixes)
        columns = of_region.setdefault(region, {})
        if key in columns:
            columns[key].tested |= tested
            continue
        columns[key] = Column(
            meeting["fold"] or "",
            members(meeting["mask"], suffixes),
            members(meeting["geometry"], suffixes),
            tested,
            meeting["verdict"],
            meeting["level"],
            meeting["reason"],
            meeting["allowed"],
            meeting["origins"],
            [(region, meeting["mask_place"], meeting["node"])],
        )
    for column in (column for found in of_region.values() for column in found.values()):
        subjects = {subject_of(record["units"][unit]) for unit in column.tested}
        column.label = column.label or (subjects.pop() if len(subjects) == 1 else "all")
    panels: dict[tuple[object, ...], Panel] = {}
    for region, found in of_region.items():
        mine = sorted(found.values(), key=lambda column: _natural(column.label))
        pattern = tuple(column.pattern for column in mine)
        if pattern in panels:
            panels[pattern].regions.append(region)
            for column, other in zip(panels[pattern].columns, mine, strict=True):
                column.places += other.places
        else:
            panels[pattern] = Panel([region], mine)
    return list(panels.values())


def named(regions: Iterable[str], variants: Mapping[str, str]) -> str:
    """Regions in a row; declared variants are counted with the region that they vary.

    Parameters
    ----------
    regions : iterable of str
    variants : mapping of str to str
        By a declared variant: the region that it varies.

    Examples
    --------
    >>> variants = {"BrookVariant1": "Brook", "BrookVariant2": "Brook"}
    >>> named(["Arbor", "Brook", *variants, "Cinder", "CinderVariant1"], variants)
    'Arbor, Brook with 2 variants, Cinder, CinderVariant1'
    >>> named(variants, variants)
    '2 variants of Brook'
    """
    families: dict[str, list[str]] = {}
    for region in dict.fromkeys(regions):
        families.setdefault(variants.get(region, region), []).append(region)
    told = []
    for stated, found in families.items():
        n = len(found) - (stated in found)
        counted = f"{n} variant{'s' * (n > 1)}"
        if stated in found:
            told.append(f"{stated} with {counted}" if n else stated)
        else:
            told.append(f"{counted} of {stated}" if n > 1 else found[0])
    return ", ".join(told)


def _natural(label: str) -> list[tuple[int, str]]:
    """So that 10 comes after 9."""
    parts = re.findall(r"\d+|\D+", label)
    return [(int(part), "") if part.isdigit() else (-1, part) for part in parts]


def _lines(record: Mapping[str, Any], panels: Sequence[Panel]) -> tuple[list[Line], bool]:
    """The units that any mask touches or is tested on, subject by subject."""
    columns = [column for panel in panels for column in panel.columns]
    used: set[int] = set().union(*(c.chosen | c.geometry | c.tested for c in columns))
    names = record["units"]
    of_subject: dict[str, list[int]] = {}
    for i in sorted(used):
        of_subject.setdefault(subject_of(names[i]), []).append(i)
    lines = [Line([i], _after(names[i]), sub) for sub, units in of_subject.items() for i in units]
    if len(lines) <= _MOST_ROWS or len(of_subject) == len(lines):
        return lines, False
    return [Line(units, "", sub) for sub, units in of_subject.items()], True


def _after(unit: str) -> str:
    """A unit's name without its subject."""
    return re.sub(r"^sub-[^_]*_?", "", unit)


def _place(made: TouchMap) -> None:
    n_columns = sum(len(panel.columns) for panel in made.panels)
    n_subjects = len({line.sub for line in made.lines})
    wide = min(22.0, max(2.0, _WIDE / max(n_columns, 1)))
    tall = min(16.0, max(2.0, _TALL / max(len(made.lines), 1)))
    several = len(made.lines) > n_subjects
    made.cell_height = tall
    y, last = _TOP, None
    for line in made.lines:
        if several and last is not None and line.sub != last:
            y += max(1.0, tall * 0.25)
        line.y, last = y, line.sub
        y += tall
    made.height = y + 8
    x = _LEFT
    for panel in made.panels:
        panel.x = x
        # A panel of a few masks is not squeezed by one of hundreds.
        mine = max(wide, min(14.0, 70.0 / len(panel.columns)))
        for column in panel.columns:
            column.x, column.width = x, mine
            x += mine
        panel.width = x - panel.x
        x = max(x, panel.x + 64) + _GAP
    made.width = max(x - _GAP + 30, 420.0)
    _row_labels(made, several=several)
    last_label = -99.0
    for column in (column for panel in made.panels for column in panel.columns):
        at = column.x + column.width / 2
        if at - last_label >= 13:
            made.column_labels.append((at, _cut(column.label, 9), column.label))
            last_label = at


def _row_labels(made: TouchMap, *, several: bool) -> None:
    last_y, last_sub = -99.0, None
    for line in made.lines:
        middle = line.y + made.cell_height / 2
        if line.sub != last_sub and middle - last_y >= 11:
            whole = f"sub-{line.sub}" if line.sub else line.name
            made.row_labels.append((middle, _cut(whole, 16), whole))
            last_y = middle
        last_sub = line.sub


def _cut(text: str, most: int) -> str:
    return text if len(text) <= most else text[: most - 1] + "\N{HORIZONTAL ELLIPSIS}"


def _mark(made: TouchMap) -> None:
    """The cells of each state as one path: what lies below one another is one piece."""
    tall = made.cell_height
    paths: dict[str, list[str]] = {
        name: [] for name in ("chosen", "tested", "biased", "leak", "geometry", "dot", "cross")
    }
    for column in (column for panel in made.panels for column in panel.columns):
        runs: list[tuple[str, float, float]] = []
        wide = column.width
        inset = min(1.0, wide * 0.12)
        for line in made.lines:
            state, geometry = state_of(column, line.units)
            if geometry:
                middle = line.y + tall / 2
                paths["geometry"].append(
                    f"M{column.x + inset:.2f} {middle:.2f}h{wide - 2 * inset:.2f}"
                )
            if not state:
                continue
            if runs and runs[-1][0] == state and abs(runs[-1][2] - line.y) < 0.01:
                runs[-1] = (state, runs[-1][1], line.y + tall)
            else:
                runs.append((state, line.y, line.y + tall))
            if min(wide, tall) >= 5:
                paths["dot" if state == "tested" else "cross"] += _sign(
                    state, column.x + wide / 2, line.y + tall / 2, min(wide, tall)
                )
        for state, top, bottom in runs:
            paths[state].append(
                f"M{column.x + inset:.2f} {top:.2f}h{wide - 2 * inset:.2f}v{bottom - top:.2f}"
                f"h{2 * inset - wide:.2f}z"
            )
    made.marks = {name: "".join(parts) for name, parts in paths.items()}


def _sign(state: str, x: float, y: float, size: float) -> list[str]:
    """What tells a cell without its colour: a dot for tested, a cross for a leak."""
    r = size * 0.2
    if state == "tested":
        return [f"M{x - r:.2f} {y:.2f}a{r:.2f} {r:.2f} 0 1 0 {2 * r:.2f} 0"
                f"a{r:.2f} {r:.2f} 0 1 0 {-2 * r:.2f} 0z"]  # fmt: skip
    if state in ("biased", "leak"):
        return [f"M{x - r:.2f} {y - r:.2f}l{2 * r:.2f} {2 * r:.2f}m0 {-2 * r:.2f}"
                f"l{-2 * r:.2f} {2 * r:.2f}"]  # fmt: skip
    return []


def state_of(column: Column, units: Sequence[int]) -> tuple[str, bool]:
    """The state of a cell, and whether the mask takes the units' geometry without their values.

    Examples
    --------
    >>> one = Column("01", {0}, {1}, {1, 2}, "apart", "subject", "", True, [])
    >>> [state_of(one, [unit]) for unit in range(4)]
    [('chosen', False), ('tested', True), ('tested', False), ('', False)]
    """
    chosen = not column.chosen.isdisjoint(units)
    tested = not column.tested.isdisjoint(units)
    geometry = not chosen and not column.geometry.isdisjoint(units)
    both = chosen and tested and not (column.chosen & column.tested).isdisjoint(units)
    if both and column.verdict != "certified":
        return ("biased" if column.allowed else "leak"), False
    if tested:
        return "tested", geometry
    return ("chosen" if chosen else ""), geometry


def _summary(panel: Panel, variants: Mapping[str, str]) -> str:
    """One panel in a sentence, with the counts that a reader would check."""
    n, names = len(panel.columns), listed(named(panel.regions, variants).split(", "), 8)
    chosen = sorted({len(column.chosen) for column in panel.columns})
    tested = sorted({len(column.tested) for column in panel.columns})
    both = sum(bool(column.chosen & column.tested) for column in panel.columns)
    each = "each mask" if n > 1 else "the mask"
    on = f"{each} was chosen on {_span(chosen)} and read"
    if chosen == [0]:
        on = f"{each} came from outside and was read"
    told = f"{names}: {n} mask{'s' * (n > 1)}; {on} in {_span(tested)}; "
    if both:
        certified = all(c.verdict == "certified" for c in panel.columns if c.chosen & c.tested)
        how = "under a certificate" if certified else "a leak"
        how = "so its values are marked biased" if panel.biased else how
        some = "it was" if n == 1 else "each was" if both == n else f"{both} of them were"
        return told + f"{some} read on data that chose it, {how}."
    return told + "none was read on data that chose it."


def _span(sizes: Sequence[int]) -> str:
    if len(sizes) == 1:
        return f"{sizes[0]} unit{'s' * (sizes[0] != 1)}"
    return f"{sizes[0]} to {sizes[-1]} units"
