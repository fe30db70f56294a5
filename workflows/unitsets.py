"""Sets of units as JSON: listed, or by what they lack."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from ..nodes.touch import UnitTable


def encoded(bits: int, table: UnitTable) -> dict[str, list[Any]]:
    """A set of units: listed, or as the complement in all of its suffixes when that is shorter.

    Examples
    --------
    >>> from sequester.nodes.touch import Unit
    >>> table = UnitTable(Unit(sub=sub, suffix=s) for s in ("bold", "skill") for sub in "abcd")
    >>> encoded(0b1101, table), encoded(0b0101, table)
    ({'all_but': [1], 'of': ['bold']}, {'units': [0, 2]})
    """
    inside = list(table.numbers(bits))
    kinds = {table.units[i].suffix for i in inside}
    # "All but sub-07" is of the maps, or of the maps and a score: seldom of all that there is.
    whole = [i for i, unit in enumerate(table.units) if unit.suffix in kinds]
    if 2 * len(inside) <= len(whole):
        return {"units": inside}
    left: dict[str, list[Any]] = {"all_but": sorted(set(whole) - set(inside))}
    return left if len(whole) == len(table.units) else {**left, "of": sorted(kinds)}


def members(encoding: Mapping[str, Sequence[Any]], suffixes: Sequence[str]) -> set[int]:
    """The units of a set as the record holds it.

    Parameters
    ----------
    encoding : mapping
        As `encoded` gives it.
    suffixes : sequence of str
        Of all units (the record's ``suffixes``).

    Examples
    --------
    >>> maps = ["bold", "bold", "bold", "skill"]
    >>> members({"units": [0, 2]}, maps), members({"all_but": [1], "of": ["bold"]}, maps)
    ({0, 2}, {0, 2})
    """
    if "units" in encoding:
        return set(encoding["units"])
    of = encoding.get("of", suffixes)
    return {i for i, suffix in enumerate(suffixes) if suffix in of} - set(encoding["all_but"])
