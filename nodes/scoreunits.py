"""Scores as data units: what the table says of a subject, and who chose by it.

A score, a group label or a covariate is what a column of the study table says of a subject; it
is a unit, like a run (`touch.UnitTable.scores`). A list of them that is typed into a node
touches those units when its values are the column's. A list that no column holds may have been
computed from anything, from the maps that are tested too: it is an unknown choice, unless an
origin of its name is declared.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

from .rules import Branch, Inputs, Leaf, Rule, joined, leaves
from .touch import Touch, union

UNNAMED = "the scores"  # how an unknown choice by scores begins
Named = Sequence[tuple[str, Sequence[tuple[str, object]]]]


@dataclass(frozen=True)
class Cell:
    """What a column says of one subject.

    Parameters
    ----------
    texts : frozenset of str
        As they stand in the table: more than one when the rows of the subject differ.
    units : int
        The set of the subject's units of that column.

    Examples
    --------
    >>> cell = Cell(frozenset({"31.50"}), 0b100)
    >>> cell.says(31.5), cell.says("31.50"), cell.says(32)
    (True, True, False)
    """

    texts: frozenset[str]
    units: int

    def says(self, value: object) -> bool:
        """Whether this is one of its values, as text or as a number."""
        return str(value) in self.texts or any(_number(text) == value for text in self.texts)


Cells = Mapping[tuple[str, str], Cell]
"""From column and label to what the table says there."""


def _number(text: str) -> float | None:
    try:
        return float(text)
    except ValueError:
        return None


def touches_of(named: Named, labels: Iterable[str], inputs: Inputs) -> dict[str, Touch]:
    """What the scores of each label touch.

    Parameters
    ----------
    named : sequence of (column, ((label, value), ...))
        As a model gives them (`models.Score.columns`).
    labels : iterable of str
        Those that take part; what is said of others does not matter.
    inputs : Inputs
        Of the node that they were given to.

    Returns
    -------
    dict
        From label to touch: the unit of the column when all its values are those of the table,
        all its units when they are those but for a shift and a scale, the origin of that name
        when one is declared, and else an unknown choice.

    Examples
    --------
    >>> cells = {("age", x): Cell(frozenset({str(n)}), 1 << n) for n, x in enumerate("abc")}
    >>> node = Inputs({}, {}, "w.choose", scores=cells)
    >>> found = touches_of([("age", [("b", 1), ("c", 2)])], "bc", node)
    >>> {who: touch.values for who, touch in found.items()}
    {'b': 2, 'c': 4}
    >>> touches_of([("mood", [("a", 7)])], "a", node)["a"].unknown
    frozenset({"the scores 'mood' given to w.choose"})
    """
    parts: dict[str, list[Touch]] = {label: [] for label in labels}
    for column, of in named:
        given = [(label, value) for label, value in of if label in parts]
        for (label, _), touch in zip(given, score_of(column, given, inputs), strict=True):
            parts[label].append(touch)
    return {label: union(touches) for label, touches in parts.items()}


def score_of(column: str, given: Sequence[tuple[str, object]], inputs: Inputs) -> list[Touch]:
    """What each value of one list of scores touches (see `touches_of`).

    Parameters
    ----------
    column : str
        What the list is called.
    given : sequence of (label, value)
    inputs : Inputs
        Of the node that it was given to.
    """
    known = _units(column, given, inputs.scores)
    if known is not None:
        return [Touch(values=units) for units in known]
    unknown = Touch(unknown=frozenset({f"{UNNAMED} {column!r} given to {inputs.where}"}))
    return [inputs.declared.get(column) or unknown] * len(given)


def _units(column: str, given: Sequence[tuple[str, object]], cells: Cells) -> list[int] | None:
    """The unit of each value, when all are what a column says; of an indicator too."""
    there = [cells.get((column, label)) for label, _ in given]
    if all(cell and cell.says(v) for cell, (_, v) in zip(there, given, strict=True)):
        return [cell.units for cell in there if cell]
    if all(there) and (whole := _shifted([cell for cell in there if cell], given)):
        return [whole] * len(given)
    # A design has a column for each group: one for whom the table's column says its name.
    for other in dict.fromkeys(name for name, _ in cells):
        there = [cells.get((other, label)) for label, _ in given]
        if all(cell and cell.says(column) == v for cell, (_, v) in zip(there, given, strict=True)):
            return [cell.units for cell in there if cell]
    return None


def _shifted(cells: Sequence[Cell], given: Sequence[tuple[str, object]]) -> int:
    """All units of these cells, when the values are theirs but for a shift and a scale.

    Centred or standardised, everybody's score is in each value.
    """
    numbers = [_number(min(cell.texts)) for cell in cells]
    pairs = [
        (x, float(y))
        for x, (_, y) in zip(numbers, given, strict=True)
        if x is not None and isinstance(y, int | float)
    ]
    low, high = min(pairs, default=(0.0, 0.0)), max(pairs, default=(0.0, 0.0))
    if len(pairs) < len(given) or len({x for x, _ in pairs}) < 3:
        return 0
    slope = (high[1] - low[1]) / (high[0] - low[0])
    off = max(abs(low[1] + slope * (x - low[0]) - y) for x, y in pairs)
    whole = 0
    for cell in cells:
        whole |= cell.units
    return whole if slope and off <= 1e-6 * abs(high[1] - low[1]) else 0


def also_scores(rule: Rule, field: str, named_by: str, labels_by: str = "labels") -> Rule:
    """The same rule, when every row also brings its scores.

    Parameters
    ----------
    rule : Rule
        Of an output that is chosen on the rows of a list.
    field : str
        That list: item i is row i.
    named_by : str
        The setting with the scores: it has a method ``score_columns(labels)``.
    labels_by : str
        The setting with each row's label.
    """

    def derive(inputs: Inputs) -> Leaf | Branch:
        told = scores_by_row(inputs, named_by, labels_by)
        tree = inputs.trees.get(field)
        if tree is None or not any(told):
            return rule.derive(inputs)
        places = [Leaf(touch, place=f"{inputs.where}.{named_by}") for touch in told]
        if isinstance(tree, Branch) and len(tree.children) == len(told):
            rows: Leaf | Branch = Branch(
                [
                    joined([*leaves(child), own])
                    for child, own in zip(tree.children, places, strict=True)
                ]
            )
        else:
            rows = joined([*leaves(tree), *places], single=False)
        return rule.derive(replace(inputs, trees={**inputs.trees, field: rows}))

    return Rule(rule.names, derive)


def kept_by_scores(rule: Rule, scores: str, quality: str) -> Rule:
    """The same rule, when who is there at all was decided by columns of the study table.

    Every element is then selected by all that the columns say: who stands where takes all of it.

    Parameters
    ----------
    rule : Rule
    scores : str
        The setting with the names of columns that chose.
    quality : str
        The setting with those that say how good the data are: geometry.
    """

    def derive(inputs: Inputs) -> Leaf | Branch:
        tree = rule.derive(inputs)
        touch = Touch(geometry=_whole(inputs, quality), selected=_whole(inputs, scores))
        if not (touch.geometry or touch.selected):
            return tree
        return _with_each(tree, Leaf(touch, place=f"{inputs.where}.{scores}"))

    return Rule(rule.names, derive)


def dealt_by_scores(rule: Rule, scheme: str) -> Rule:
    """The same rule, when a column of the study table decided who is in which fold: geometry.

    Dealing people to folds, evenly by group or as listed, uses nothing that was measured in them,
    and a fold's mask is chosen without those it holds out in any case.

    Parameters
    ----------
    rule : Rule
    scheme : str
        The setting with a fold scheme, or with a procedure that has one.
    """

    def derive(inputs: Inputs) -> Leaf | Branch:
        tree, setting = rule.derive(inputs), inputs.settings.get(scheme)
        dealt = getattr(getattr(setting, "scheme", setting), "dealt_by", ())
        found = _saying(inputs.scores, [(label, text) for label, text in dealt if text])
        by = Leaf(Touch(geometry=found), place=f"{inputs.where}.{scheme}")
        return _with_each(tree, by) if found else tree

    return Rule(rule.names, derive)


def _saying(cells: Cells, said: Sequence[tuple[str, str]]) -> int:
    """The units of the columns that say the very same of these labels."""
    found = 0
    for column in dict.fromkeys(name for name, _ in cells):
        there = [(cells.get((column, label)), text) for label, text in said]
        if said and all(cell is not None and text in cell.texts for cell, text in there):
            for cell, _ in there:
                found |= cell.units if cell is not None else 0
    return found


def _with_each(tree: Leaf | Branch, more: Leaf) -> Leaf | Branch:
    """A tree whose every element derives from something more."""
    if isinstance(tree, Leaf):
        return joined([tree, more], single=tree.single)
    return Branch([_with_each(child, more) for child in tree.children])


def _whole(inputs: Inputs, setting: str) -> int:
    """All units of the columns that a setting names."""
    columns, found = inputs.settings.get(setting) or (), 0
    for (column, _), cell in inputs.scores.items() if columns else ():
        found |= cell.units if column in columns else 0
    return found


def scores_by_row(inputs: Inputs, named_by: str, labels_by: str = "labels") -> list[Touch]:
    """What the scores of each row touch; one touch for all when the labels are not known.

    Empty when the setting brings no scores.
    """
    setting = inputs.settings.get(named_by)
    if setting is None or not hasattr(setting, "score_columns"):
        return []
    labels = inputs.settings.get(labels_by)
    if labels is None or labels_by in inputs.arriving:
        unknown = frozenset({f"{UNNAMED} given to {inputs.where}, of whom is not known"})
        return [Touch(unknown=unknown)] if setting.score_columns([]) else []
    named = setting.score_columns(list(labels))
    of_label = touches_of(named, labels, inputs)
    return [of_label[label] for label in labels] if named else []
