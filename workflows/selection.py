"""Which rows of the study table make one map per subject.

A selection names rows by the values of their columns. Per subject, the maps of its rows (runs)
are averaged; those of `minus` are averaged and subtracted (paired differences); the difference
is given in percent of the average of `baseline`.

Columns of BIDS entities, files and people say which maps are meant. Any other column says
something of the subjects: whoever is selected by it was chosen by it, and the selection says so.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from typing import Any

from ..nodes.errors import InputError
from ..nodes.touch import ENTITIES
from .keys import Reader
from .study import NAMING, Row, Study

_MANY = 8
# Per subject, sorted by label: the rows whose maps are averaged.
Subjects = tuple[tuple[str, tuple[Row, ...]], ...]


@dataclass(frozen=True)
class Selection:
    """One map per subject, in the order of the labels.

    Parameters
    ----------
    subjects : tuple of (label, tuple of Row)
    minus, baseline : tuple of (label, tuple of Row)
        Of the same labels; empty when nothing is subtracted, or nothing divided by.
    left_out : tuple of Row
        Selected, but with an exclude_reason.
    kept_by : tuple of str
        The columns of scores by which rows were kept.
    """

    subjects: Subjects
    minus: Subjects = ()
    baseline: Subjects = ()
    left_out: tuple[Row, ...] = ()
    kept_by: tuple[str, ...] = ()

    @property
    def rows(self) -> Iterator[Row]:
        """All rows that are read, subject by subject."""
        for subjects in (self.subjects, self.minus, self.baseline):
            for _, rows in subjects:
                yield from rows

    @property
    def people(self) -> list[str]:
        """Per subject: who it counts as."""
        return [rows[0].person for _, rows in self.subjects]

    def rows_of(self, number: int) -> tuple[Row, ...]:
        """All rows behind the map of subject `number`."""
        listed = (s for s in (self.subjects, self.minus, self.baseline) if s)
        return tuple(row for subjects in listed for row in subjects[number][1])

    @property
    def variance_rows(self) -> Iterator[Row]:
        """The rows whose runs are combined with weights."""
        for subjects in (self.subjects, self.minus):
            for _, rows in subjects:
                yield from rows

    def by_run(self) -> Selection:
        """A map per run instead: only plain maps have runs of their own."""
        each = tuple((label, (row,)) for label, rows in self.subjects for row in rows)
        return Selection(each, kept_by=self.kept_by)


def select(
    read: Reader,
    study: Study,
    wanted: dict[str, Any],
    minus: dict[str, Any] | None = None,
    baseline: dict[str, Any] | None = None,
    key: str = "select",
) -> Selection:
    """The maps that some tables of the study file ask for.

    Parameters
    ----------
    read : Reader
    study : Study
    wanted : dict
        Column to value, or list of values.
    minus, baseline : dict, optional
        The columns in which the maps to subtract, or to divide by, differ from `wanted`.
    key : str
        What `wanted` is the value of, for messages.

    Raises
    ------
    InputError
        For unknown columns, nothing selected, or maps that cannot be averaged.
    """
    subjects, left_out = _subjects(read, study, wanted, key)
    asked_for = {*wanted, *(minus or {}), *(baseline or {})}
    others: list[Subjects] = []
    for other, asked in (("minus", minus), ("baseline", baseline)):
        if asked is None:
            others.append(())
            continue
        found, more = _subjects(read, study, {**wanted, **asked}, other)
        _same_subjects(read, other, subjects, found)
        left_out += more
        others.append(found)
    made = Selection(
        subjects,
        others[0],
        others[1],
        tuple(dict.fromkeys(left_out)),
        tuple(sorted(asked_for.difference(NAMING))),
    )
    if made.minus and set(made.subjects) & set(made.minus):
        raise InputError(
            "minus selects the very maps it is subtracted from",
            where=read.where("minus"),
            remedy="name the column in which they differ",
        )
    if made.baseline == made.subjects and not made.minus:
        raise InputError(
            "baseline selects the very maps that are given in percent of it",
            where=read.where("baseline"),
            remedy="name the column in which they differ",
        )
    return made


def _same_subjects(read: Reader, key: str, subjects: Subjects, found: Subjects) -> None:
    here, there = {label for label, _ in subjects}, {label for label, _ in found}
    if here != there:
        raise InputError(
            f"{key} selects other subjects than [data] select",
            where=read.where(key),
            got="sub-" + ", sub-".join(sorted(here ^ there)) + " in one of them only",
            remedy="give every subject a map of both; or narrow this region to those who have "
            "both: select = { sub = [...] } in its [[roi]]",
        )


def chosen_elsewhere(
    read: Reader, study: Study, wanted: dict[str, Any], tested: Selection, *, same: bool = True
) -> Selection | None:
    """The maps a region is chosen on; None when they are those that are tested.

    Parameters
    ----------
    read : Reader
    study : Study
    wanted : dict
        Column to value.
    tested : Selection
    same : bool
        Whether it must be the same subjects.
    """
    chosen = select(read, study, wanted, key="choose_on")
    if same:
        _same_subjects(read, "choose_on", tested.subjects, chosen.subjects)
    return None if chosen.subjects == tested.subjects and not tested.minus else chosen


def _subjects(
    read: Reader, study: Study, select: dict[str, Any], key: str
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
        values = value if isinstance(value, list) else [value]
        if not values or not all(isinstance(v, str | int | float) for v in values):
            raise InputError(
                f"{key} asks for no value of {column}",
                where=read.where(key),
                expected=f'{column} = "value", or {column} = ["one", "another"]',
                got=repr(value),
            )
        wanted[column] = {str(v) for v in values}
    rows = [r for r in study.rows if all(r.column(c) in v for c, v in wanted.items())]
    left_out = tuple(row for row in rows if row.exclude_reason)
    kept = [row for row in rows if not row.exclude_reason]
    if not kept:
        asked = [f"{column} {' or '.join(sorted(values))}" for column, values in wanted.items()]
        raise InputError(
            "no subject left",
            where=read.where(key),
            expected=_there(study, wanted),
            got=f"{len(study.rows)} rows in the table, {len(rows)} of them with "
            f"{' and '.join(asked) or 'anything'}, {len(left_out)} of those excluded",
            remedy="check the values asked for and the exclude_reason column",
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
        _only_runs_differ(read, label, runs, key)
    _distinct_names(read, of_sub, key)
    ordered = tuple(
        (label, tuple(sorted(of_sub[label], key=lambda row: row.unit))) for label in sorted(of_sub)
    )
    return ordered, left_out


def _there(study: Study, wanted: dict[str, set[str]]) -> str:
    """The values that the first column in which nothing was found does have."""
    for column, values in wanted.items():
        there = sorted({row.column(column) for row in study.rows})
        if there and not values & set(there):
            more = f" and {len(there) - _MANY} more" if len(there) > _MANY else ""
            return f"in column {column}: {', '.join(map(repr, there[:_MANY]))}{more}"
    return ""


def _distinct_names(read: Reader, labels: Iterable[str], key: str) -> None:
    """Refuse labels that would name one file."""
    of_plain: dict[str, str] = {}
    for label in labels:
        plain = "".join(c for c in label if c.isalnum())
        other = of_plain.setdefault(plain, label)
        if other != label:
            raise InputError(
                "subject labels that differ only in punctuation",
                where=read.where(key),
                expected="letters and digits, as in BIDS",
                got=f"{other!r} and {label!r}",
                remedy="rename them in the study table",
            )


def _only_runs_differ(read: Reader, label: str, runs: list[Row], key: str) -> None:
    for row in runs:
        for entity in (*ENTITIES, "suffix"):
            if entity != "run" and row.column(entity) != runs[0].column(entity):
                raise InputError(
                    f"maps of sub-{label} differ in {entity}",
                    where=read.where(key),
                    got=f"{runs[0].column(entity)!r} and {row.column(entity)!r}",
                    remedy=f"only runs are averaged: select one {entity}",
                )
    numbers = [row.unit.run for row in runs]
    again = [row for row in runs if numbers.count(row.unit.run) > 1]
    if again:
        unsaid = all(row.volume is not None and not row.contrast for row in again)
        raise InputError(
            f"sub-{label} has several maps of one run",
            where=read.where(key),
            got=", ".join(f"{row.name} (line {row.line} of the table)" for row in again),
            remedy="fill the contrast column of the table (or run): it says what each volume holds"
            if unsaid
            else "select one, or fill the run column",
        )
