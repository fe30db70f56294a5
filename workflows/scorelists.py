"""Lists of scores that are typed into somebody else's node, recognised by what they hold.

Nodes of our own say by their rules whose scores they are given. A foreign node only shows a
list of numbers or words, alone or in a mapping, a table, an array or a text. It is the column of
the study table whose values it holds, in the order of the files beside it or in that of the table.
A list with one number for each of several people's files that is no column was computed from
nobody knows what: an unknown choice.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Collection, Mapping, Sequence
from typing import Any

from ..nodes.rules import Branch, Leaf, Tree, joined
from ..nodes.scoreunits import UNNAMED, Cells
from ..nodes.touch import Touch, union
from .literals import plain
from .study import Study

_LEAST = 3  # shorter lists, and lists of one value, are no scores of a group


def score_trees(
    study: Study,
    settings: Mapping[str, Any],
    trees: Mapping[str, Tree],
    where: str,
    each_alone: Collection[str] = (),
) -> dict[str, Tree]:
    """The trees of the literal lists of a node that hold scores.

    Parameters
    ----------
    study : Study
    settings : mapping of str to object
        The literal inputs of the node.
    trees : mapping of str to Tree
        Its inputs that carry data.
    where : str
        The node.
    each_alone : collection of str
        The fields over which it iterates: item i meets item i of the files alone, so that a
        list of them chooses nobody.
    """
    lists = {
        f: found for f, value in settings.items() if f not in trees and (found := lists_in(value))
    }
    if not lists:
        return {}
    rows = _people_of_rows(study, trees)
    made: dict[str, Tree] = {}
    for field, found in lists.items():
        several: list[Tree] = []
        for value in found:
            touches = _recognised(study, value, rows.get(len(value)))
            if touches is None and len(value) in rows and field not in each_alone:
                touches = _unknown(study, value, f"{UNNAMED} {field!r} given to {where}")
            if touches is not None:
                several.append(
                    Branch(
                        [
                            Leaf(touch, place=f"{where}.{field}[{i}]")
                            for i, touch in enumerate(touches)
                        ]
                    )
                )
        if several:
            alone = several[0] if found[0] is settings[field] else None
            made[field] = alone or joined(several, single=False)
    return made


def touches_of_list(
    study: Study, values: Sequence[Any], people: Sequence[str] | None = None
) -> Touch | None:
    """What a literal list of scores touches as a whole; None when it is no column.

    Parameters
    ----------
    study : Study
    values : sequence of numbers or str
    people : sequence of str, optional
        Per value: whose it is.
    """
    alike = people if people is not None and len(people) == len(values) else None
    touches = _recognised(study, values, alike)
    return None if touches is None else union(touches)


def lists_in(value: Any, least: int = _LEAST) -> list[Sequence[Any]]:
    """The lists of scores that a literal holds: itself, or the rows and columns of a table.

    Parameters
    ----------
    value : object
        A list; or lists in a mapping, a table, an array, or a text of numbers.
    least : int
        How long a list has to be.
    """
    if _is_list(value, least):
        return [value]
    if isinstance(value, str):
        return [found for found in _numbers_in(value) if _is_list(found, least)]
    value = [*value.values()] if isinstance(value, Mapping) else plain(value)
    if _is_list(value, least):
        return [value]
    if not isinstance(value, list | tuple) or not all(isinstance(v, list | tuple) for v in value):
        return []
    columns = [*zip(*value, strict=False)] if len({len(row) for row in value}) == 1 else []
    return [found for found in (*value, *columns) if _is_list(found, least)]


def _numbers_in(text: str) -> list[list[float]]:
    """The numbers of a text that holds nothing else: all of them, and those of each column."""
    words = [
        re.split(r"[\s,;]+", line.strip("[]() ,;")) for line in text.strip("[]() ").splitlines()
    ]
    try:
        rows = [[float(word) for word in line] for line in words]
    except ValueError:
        return []
    columns = [[*column] for column in zip(*rows, strict=False)]
    return [[number for row in rows for number in row], *columns]


def _is_list(value: Any, least: int = _LEAST) -> bool:
    return (
        isinstance(value, list | tuple)
        and len(value) >= least
        and all(isinstance(item, int | float | str) for item in value)
        and len(set(value)) > 1
    )


def _people_of_rows(study: Study, trees: Mapping[str, Tree]) -> dict[int, list[str]]:
    """For lists of files with one person an item, nobody twice: whose they are, by length."""
    found: dict[int, list[str]] = {}
    acquired = study.table.everything & ~study.table.scores
    for tree in trees.values():
        if isinstance(tree, Branch) and len(tree.children) >= _LEAST:
            people = [study.table.people_of(c.touch.values & acquired) for c in tree.children]
            names = [next(iter(who)) for who in people if len(who) == 1]
            if len(set(names)) == len(people):
                found[len(people)] = names
    return found


def _recognised(
    study: Study, values: Sequence[Any], people: Sequence[str] | None
) -> list[Touch] | None:
    """What each item touches, when the list is a column of the table."""
    for column in dict.fromkeys(name for name, _ in study.scores):
        units = _in_column(study, column, values, people)
        if units is not None:
            return [Touch(values=bits) for bits in units]
    return None


def _in_column(
    study: Study, column: str, values: Sequence[Any], people: Sequence[str] | None
) -> list[int] | None:
    cells: Cells = study.scores
    if people is not None:
        there = [cells.get((column, person)) for person in people]
        if all(cell and cell.says(v) for cell, v in zip(there, values, strict=True)):
            return [cell.units for cell in there if cell]
    everybody = dict.fromkeys(row.person for row in study.rows)
    known = [cells[column, person] for person in everybody if (column, person) in cells]
    kept = iter(known)
    # In the table's order, some people perhaps left out.
    units = [next((c.units for c in kept if c.says(value)), 0) for value in values]
    distinct = len(set(values)) >= _LEAST or len(values) == len(known)
    if all(units) and distinct:
        return units
    # In another order: who is who cannot be told.
    texts = Counter(text for cell in known for text in cell.texts)
    whole = 0
    for cell in known:
        whole |= cell.units
    if distinct and all(_take(texts, value) for value in values):
        return [whole] * len(values)
    return None


def _take(texts: Counter[str], value: Any) -> bool:
    """Whether one of the texts is left that says this value; it is used up."""
    for text in [str(value), *texts]:
        if texts[text] > 0 and (text == str(value) or _is_number(text, value)):
            texts[text] -= 1
            return True
    return False


def _is_number(text: str, value: Any) -> bool:
    try:
        return bool(float(text) == value)
    except ValueError:
        return False


def _unknown(study: Study, values: Sequence[Any], what: str) -> list[Touch] | None:
    """Numbers, or words that some people share, one for each person: somebody's scores."""
    words = any(isinstance(value, str) for value in values)
    names = {row.person for row in study.rows} | {row.unit.sub for row in study.rows}
    if words and (len(set(values)) == len(values) or names & {*map(str, values)}):
        return None  # names of people, of files
    return [Touch(unknown=frozenset({what}))] * len(values)
