"""Which data an element derives from: units, and the sets of units it touches.

Definitions
-----------
unit
    The smallest separately acquired datum, named by BIDS entities and the suffix of what was
    acquired. A blank entity is a wildcard: two units overlap when no entity contradicts.
score
    What a column of the study table says of a subject: a unit too, its suffix the column's name.
    Scores count against scores of the same column, never against what was acquired.
touch
    What ONE element (a scalar output, or one item of a list output) derives from: units in a
    role, declared origins, and files nobody has declared (unknown); and the units by which it was
    selected, when it was kept or left out by what was measured.
role
    ``values`` (what was measured) or ``geometry`` (grids, transforms, reference images). Only
    shared values make a result circular.
extraction
    The mark an extracted value carries: the units its mask was chosen on, and the units it was
    read from. Values i and j are cross-fitted when mask i touches data j.

The algebra: the touch of anything computed from elements a and b is ``a | b``; it may
over-state what was used and never under-states it. Sets of units are integers, one bit per
row of the study's unit table, so that "all but sub-07" costs one word per 64 units.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass, fields, replace
from typing import Any

ENTITIES = ("sub", "ses", "task", "acq", "ce", "dir", "rec", "run")


@dataclass(frozen=True, order=True)
class Unit:
    """One separately acquired datum.

    Parameters
    ----------
    sub, ses, task, acq, ce, dir, rec, run : str
        BIDS entity labels; "" leaves the entity open. Labels are strings: "01" is not "1".
    suffix : str
        The suffix of what was acquired ("bold", "T1w", "beh"), never of a derivative.

    Examples
    --------
    >>> whole, run = Unit(sub="01", suffix="bold"), Unit(sub="01", run="2", suffix="bold")
    >>> str(run), run.overlaps(whole), run.overlaps(Unit(sub="1", suffix="bold"))
    ('sub-01_run-2_bold', True, False)
    """

    sub: str = ""
    ses: str = ""
    task: str = ""
    acq: str = ""
    ce: str = ""
    dir: str = ""
    rec: str = ""
    run: str = ""
    suffix: str = ""

    def overlaps(self, other: Unit) -> bool:
        """Whether no entity of the two contradicts."""
        return all(
            not mine or not theirs or mine == theirs
            for mine, theirs in ((getattr(self, f.name), getattr(other, f.name)) for f in _PARTS)
        )

    def __str__(self) -> str:
        parts = [f"{e}-{getattr(self, e)}" for e in ENTITIES if getattr(self, e)]
        return "_".join([*parts, self.suffix] if self.suffix else parts) or "(any data)"


_PARTS = fields(Unit)


class UnitTable:
    """The units of a study, numbered, with who belongs to whom.

    Parameters
    ----------
    units : iterable of Unit
        Repeats are merged; the order given is kept.
    people : mapping of unit to str, optional
        Who counts as one subject for levels and flips (the study table's ``exchange`` column);
        the default is the unit's ``sub``.
    scores : iterable of Unit
        The cells of the table's columns (``sub`` and, as suffix, the column); numbered last.

    Attributes
    ----------
    scores : int
        The set of all scores.

    Examples
    --------
    >>> table = UnitTable([Unit(sub="01", run="1"), Unit(sub="01", run="2"), Unit(sub="02")])
    >>> bits = table.bits([Unit(sub="01", run="2")])
    >>> [str(u) for u in table.units_of(bits)], table.people_of(bits)
    (['sub-01_run-2'], frozenset({'01'}))
    """

    def __init__(
        self,
        units: Iterable[Unit],
        people: dict[Unit, str] | None = None,
        scores: Iterable[Unit] = (),
    ) -> None:
        acquired = dict.fromkeys(units)
        n_acquired = len(acquired)
        self.units: tuple[Unit, ...] = (*acquired, *dict.fromkeys(scores))
        self.scores = self.everything & ~((1 << n_acquired) - 1)
        self._number = {unit: i for i, unit in enumerate(self.units)}
        self._people = [(people or {}).get(u, u.sub) for u in self.units]
        by_sub: dict[str, list[int]] = {}
        for i, unit in enumerate(acquired):
            by_sub.setdefault(unit.sub, []).append(i)
        # Only units of the same subject, or with an open subject, can overlap; a score only itself.
        self._overlap = [
            self._pack(
                j
                for j in (
                    range(n_acquired) if not unit.sub else by_sub[unit.sub] + by_sub.get("", [])
                )
                if unit.overlaps(self.units[j])
            )
            for unit in acquired
        ]
        self._overlap += [1 << i for i in range(n_acquired, len(self.units))]
        # Most units overlap themselves alone: sets of those are done in one step.
        self._wide = self._pack(i for i, o in enumerate(self._overlap) if o != 1 << i)
        self._of_person: dict[str, int] = {}
        for i, person in enumerate(self._people):
            self._of_person[person] = self._of_person.get(person, 0) | 1 << i
        self._measured: dict[frozenset[str], int] = {}

    @staticmethod
    def _pack(numbers: Iterable[int]) -> int:
        packed = 0
        for number in numbers:
            packed |= 1 << number
        return packed

    @property
    def everything(self) -> int:
        """The set of all units."""
        return (1 << len(self.units)) - 1

    def bits(self, units: Iterable[Unit]) -> int:
        """The set holding these units of the table."""
        return self._pack(self._number[unit] for unit in units)

    def matching(self, pattern: Unit) -> int:
        """The set of units that overlap a pattern.

        Blank entities match anything; scores are matched by the name of their column only.
        """
        return self._pack(
            i
            for i, unit in enumerate(self.units)
            if unit.overlaps(pattern) and (pattern.suffix or not self.scores >> i & 1)
        )

    def numbers(self, bits: int) -> Iterator[int]:
        """The row numbers in a set, ascending."""
        while bits:
            low = bits & -bits
            yield low.bit_length() - 1
            bits ^= low

    def units_of(self, bits: int) -> list[Unit]:
        """The units in a set, in table order."""
        return [self.units[i] for i in self.numbers(bits)]

    def people_of(self, bits: int) -> frozenset[str]:
        """Who the units of a set belong to."""
        return frozenset(self._people[i] for i in self.numbers(bits))

    def overlapping(self, bits: int) -> int:
        """Every unit that overlaps a unit of the set."""
        found = bits
        for number in self.numbers(bits & self._wide):
            found |= self._overlap[number]
        return found

    def company(self, bits: int) -> int:
        """Every unit of the people whom the units of a set belong to."""
        found = 0
        for person in self.people_of(bits):
            found |= self._of_person[person]
        return found

    def measured(self, suffixes: frozenset[str]) -> int:
        """The set of units whose suffix is one of these (or open); all, if one of these is open.

        Scores are not among them: what was acquired is compared with what was acquired.
        """
        if suffixes not in self._measured:
            self._measured[suffixes] = self._pack(
                i
                for i, unit in enumerate(self.units[: -self.scores.bit_count() or None])
                if "" in suffixes or not unit.suffix or unit.suffix in suffixes
            )
        return self._measured[suffixes]

    def column(self, names: Iterable[str]) -> int:
        """The set of all scores in these columns."""
        wanted = set(names)
        return self._pack(n for n in self.numbers(self.scores) if self.units[n].suffix in wanted)

    def describe(self, bits: int, most: int = 4) -> str:
        """A set in words: listed when short, as a complement when that is shorter."""
        if bits & self.scores and bits & ~self.scores:
            parts = bits & ~self.scores, bits & self.scores
            return ", ".join(self.describe(part, most) for part in parts)
        like = self.scores if bits & self.scores else self.everything & ~self.scores
        inside, outside = self.units_of(bits), self.units_of(like & ~bits)
        if not inside:
            return "no unit"
        if len(outside) < len(inside) and len(inside) > most:
            if not outside:
                return f"all {len(inside)} units"
            return f"all but {_listed(outside, most)} ({len(inside)} units)"
        return _listed(inside, most)


def of_sphere(source: str, centre: Sequence[float], radius: float) -> str:
    """The name of what an origin says of one sphere (mm) alone.

    Examples
    --------
    >>> of_sphere("table 2", (-36, 12, 21), 6)
    'table 2 (sphere at -36 12 21, 6 mm)'
    """
    return f"{source} (sphere at {' '.join(f'{x:g}' for x in centre)}, {radius:g} mm)"


def _listed(units: Sequence[Unit], most: int) -> str:
    shown = ", ".join(str(unit) for unit in units[:most])
    return shown if len(units) <= most else f"{shown} and {len(units) - most} more"


@dataclass(frozen=True)
class Extraction:
    """The mark of a value read inside a mask.

    Parameters
    ----------
    where : str
        The extraction node (and its element).
    mask, data : int
        The units the mask was chosen on, and the units the value was read from.
    certified : bool
        Whether a certificate shows that what chose cannot bias what was read.
    """

    where: str
    mask: int
    data: int
    certified: bool = False


@dataclass(frozen=True)
class Touch:
    """What one element derives from.

    Parameters
    ----------
    values, geometry : int
        Sets of units, by role.
    origins : frozenset of str
        Declared sources from outside the study.
    unknown : frozenset of str
        Files, or choices, that nobody has declared and whose values may be inside.
    extractions : frozenset of Extraction
        The extractions among its ancestors.
    biased : bool
        Whether a value read exploratively, on the data that chose its mask, is inside.
    selected : int
        The set of units by which it was decided that this element is there: nothing of them need
        be inside, and yet they chose.
    """

    values: int = 0
    geometry: int = 0
    origins: frozenset[str] = frozenset()
    unknown: frozenset[str] = frozenset()
    extractions: frozenset[Extraction] = frozenset()
    biased: bool = False
    selected: int = 0

    @property
    def choosers(self) -> int:
        """The set of units that may have chosen: those inside, and those it was selected by."""
        return self.values | self.selected

    def __or__(self, other: Touch) -> Touch:
        return union((self, other))

    def as_geometry(self) -> Touch:
        """The same ancestry when only its grid, not its values, can reach the output."""
        return Touch(geometry=self.values | self.geometry)

    def marked(self, extraction: Extraction, *, biased: bool) -> Touch:
        """The touch of a value that this extraction produced."""
        return replace(
            self, extractions=self.extractions | {extraction}, biased=self.biased or biased
        )


def union(touches: Iterable[Touch]) -> Touch:
    """The touch of something computed from all of these."""
    values = geometry = selected = 0
    biased = False
    named: list[Touch] = []  # few have more than units: sets are made for those alone
    for touch in touches:
        values |= touch.values
        geometry |= touch.geometry
        selected |= touch.selected
        if touch.origins or touch.unknown or touch.extractions or touch.biased:
            named.append(touch)
            biased = biased or touch.biased
    none: frozenset[Any] = frozenset()
    return Touch(
        values,
        geometry,
        none.union(*(touch.origins for touch in named)),
        none.union(*(touch.unknown for touch in named)),
        none.union(*(touch.extractions for touch in named)),
        biased,
        selected,
    )


def cross_fitted(
    extractions: Iterable[Extraction], table: UnitTable, *, averaged: bool = False
) -> bool:
    """Whether the mask behind one of these values was chosen on the data behind another.

    A certified mask does not count: what chose it cannot bias any of the values.

    Parameters
    ----------
    extractions : iterable of Extraction
    table : UnitTable
    averaged : bool
        Whether each person's values are averaged first: turns within a person do not count.

    Examples
    --------
    >>> table = UnitTable([Unit(sub="a"), Unit(sub="b")])
    >>> turns = [Extraction("x", mask=0b10, data=0b01), Extraction("x", mask=0b01, data=0b10)]
    >>> cross_fitted(turns, table), cross_fitted(turns[:1], table)
    (True, False)
    """
    marks = [mark for mark in extractions if not mark.certified]
    # What is read for one value; when a person's values are averaged, for all of that person's.
    read: dict[object, int] = {}
    keys = [table.people_of(mark.data) if averaged else i for i, mark in enumerate(marks)]
    for key, mark in zip(keys, marks, strict=True):
        read[key] = read.get(key, 0) | mark.data
    once = repeatedly = 0
    for data in read.values():
        repeatedly |= once & data
        once |= data
    return any(
        table.overlapping(mark.mask) & (repeatedly | once & ~read[key])
        for key, mark in zip(keys, marks, strict=True)
    )
