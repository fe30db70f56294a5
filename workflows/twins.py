"""One file under two names: where what is said of a file cannot be taken at its word.

A map that stands in two rows under two units would be held out under one name and chosen on
under the other; so would a region from outside that is a map of the study. Names that differ in
case only are one file on some machines and two on others.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterable, Iterator
from typing import Any

from ..nodes.errors import InputError
from .digests import digest
from .study import Row, Study

_PART = 1 << 16


def check_twins(study: Study) -> None:
    """Compare the files of the table, and those of the origins with them: names and bytes.

    Rows that are left out of the study are not compared: a second copy may be the reason. Files
    of differing size are not read; of the others a part is, and all of it where the parts agree.

    Raises
    ------
    InputError
        For the first pair.
    """
    rows = [row for row in study.rows if not row.exclude_reason]
    maps = {study.full(row.path) for row in rows}
    outside = {study.full(name): one.source for one in study.origins for name in one.files}
    _check_case(study, [*maps, *outside])
    first: dict[tuple[str, int | None], Row] = {}
    of: dict[str, Row] = {}
    name = _names([*maps, *outside])
    for row in rows:
        path = study.full(row.path)
        of[name.get(path, path)] = row
        other = first.setdefault((name.get(path, path), row.volume), row)
        if other.unit != row.unit:
            raise InputError(
                "identical files under two names",
                where=path,
                got=f"the same bytes as {other.name}; one is {row.unit}, the other {other.unit}",
                remedy="one of the two rows of the study table names the wrong file",
            )
    for path, source in outside.items():
        if path not in maps and name.get(path) in of:
            raise InputError(
                "a declared origin is one of the study's own maps",
                where=f"{path}, origin {source!r}",
                got=f"the same bytes as {of[name[path]].name}",
                remedy="give the file its row in the study table, or the region another file",
            )


def _check_case(study: Study, paths: Iterable[str]) -> None:
    folded: dict[str, str] = {}
    for path in sorted(paths):
        other = folded.setdefault(path.casefold(), path)
        if other != path:
            raise InputError(
                "two file names that differ in case only",
                where=str(study.root),
                expected="names that are two on any file system",
                got=f"{study.relative(other)} and {study.relative(path)}",
                remedy="rename one",
            )


def _names(paths: list[str]) -> dict[str, str]:
    """For each file that is there, the first of the paths that hold its bytes."""
    names: dict[str, str] = {}
    there = [path for path in dict.fromkeys(paths) if os.path.isfile(path)]
    for alike in _alike(there, os.path.getsize):
        for likely in _alike(alike, _part):
            for same in _alike(likely, digest if len(likely) > 1 else str):
                names |= dict.fromkeys(same, same[0])
    return names


def _alike(paths: list[str], key: Callable[[str], Any]) -> Iterator[list[str]]:
    groups: dict[Any, list[str]] = {}
    for path in paths:
        groups.setdefault(key(path) if len(paths) > 1 else 0, []).append(path)
    yield from groups.values()


def _part(path: str) -> bytes:
    """Some bytes from the middle, where maps differ."""
    with open(path, "rb") as stream:
        stream.seek(max(0, os.path.getsize(path) - _PART) // 2)
        return stream.read(_PART)
