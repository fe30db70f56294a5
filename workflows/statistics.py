"""Every statistic judged: does what it is fed with fit what it is valid for?"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from typing import Any, NamedTuple

from ..nodes.foldnull import plain_t_false_positives
from ..nodes.rules import Branch, Inputs, Leaf, Statistic, Tree, joined, lost_precision, path_to
from ..nodes.scoreunits import UNNAMED, scores_by_row
from ..nodes.touch import Extraction, Touch, UnitTable, cross_fitted, union
from .ancestry import Ancestry, node_name
from .findings import (
    APART,
    LEAK,
    UNPROVEN,
    Finding,
    measured_in,
    on_the_same,
    several,
    these_subjects,
    undeclared,
)
from .scorelists import lists_in, touches_of_list
from .study import Study


@dataclass(frozen=True)
class _Fed:
    """What a statistic is fed with.

    Parameters
    ----------
    table : UnitTable
    statistic : Statistic
    tree : Leaf or Branch
        Its values.
    search : Leaf or Branch
        The region inside which it chooses again.
    scores : Leaf
        All that they are compared with.
    marks : list of Extraction
        Of the values, with what chose restricted to the tested measurement; none that a
        certificate covers.
    by_score : list of Extraction
        The same where they meet the scores: the scores that chose, and those of whom is read.
    averaged, these_only : bool
        Whether each person's values are averaged first; whether the claim is about them only.
    """

    table: UnitTable
    statistic: Statistic
    tree: Tree
    search: Tree
    scores: Leaf
    marks: list[Extraction]
    by_score: list[Extraction]
    averaged: bool
    these_only: bool


class _Fault(NamedTuple):
    """Why values and a statistic do not go together, what to do, and the scores on both sides.

    `certain` when what was lost on the way of the values could not change it, or was told before.
    """

    reason: str
    cure: str
    shared: int = 0
    certain: bool = False


def judge_statistic(ancestry: Ancestry, node: object, statistic: Statistic) -> Finding:
    """The verdict on one statistic of a graph."""
    name, table = node_name(node), ancestry.study.table
    given = ancestry.inputs[name]
    # Values typed in have no tree: an empty touch, which is not let pass.
    tree = given.trees.get(statistic.values) or Leaf(Touch())
    listed = _rows(tree) if statistic.in_file else tree
    search = given.trees.get(statistic.search) or Leaf(Touch())
    every = [
        replace(mark, mask=(mark.mask | search.touch.choosers) & measured_in(table, mark.data))
        for mark in tree.touch.extractions
    ]
    mask_units = data_units = 0
    for mark in every:
        mask_units |= mark.mask
        data_units |= mark.data
    labels = given.settings.get(statistic.labels)
    scores = _scores(ancestry.study, given, statistic)
    fed = _Fed(
        table,
        statistic,
        listed,
        search,
        scores,
        # A certificate leaves a meeting that it does not cover as it is: a turn is a turn.
        [
            replace(mark, certified=False)
            for mark in every
            if not (mark.certified and on_the_same(table, mark.mask, mark.data))
        ],
        _by_score(table, tree.touch.extractions, scores.touch),
        labels is not None and _by_person(table, labels, listed, data_units),
        these_subjects(statistic, given.settings),
    )
    verdict, fault = LEAK, next(filter(None, (check(fed) for check in _FAULTS)), None)
    unknown = tree.touch.unknown | scores.touch.unknown | search.touch.unknown
    if fault is None and unknown:
        verdict = UNPROVEN
        fault = _Fault(*undeclared(unknown, ancestry.study.doubts))
    elif fault is None and not every:
        verdict = UNPROVEN
        fault = _Fault(
            "nothing says in which region its values were read",
            "read them with Extract, or name the inputs of the node that reads them "
            "(contract(..., extraction=Meeting(...))), so that region and data are judged",
        )
    elif fault is None:
        verdict, fault = APART, _Fault("", "")
    first = fault.shared & -fault.shared
    return Finding(
        "statistic",
        name,
        None,
        verdict,
        _weakest(fed.marks, table) if verdict == APART else "",
        verdict == APART,
        mask_units,
        data_units,
        shared=fault.shared,
        mask_path=tuple(path_to(tree, first)) if first else (),
        data_path=tuple(path_to(scores, first)) if first else (),
        reason=fault.reason,
        cure=fault.cure,
        lost=tuple(lost_precision(tree)) if verdict == LEAK and not fault.certain else (),
    )


# -- what may be wrong -------------------------------------------------------------------------

_FLIP = "use the whole-procedure sign flip (FlipTest), which chooses every fold's region again"
_AVERAGE = (
    "average the values of each person first, or give it an input that says whose each value is "
    "(labels)"
)
_BY_SCORE = (
    "use the whole-procedure exchange (FlipTest with a Score or Groups model), which gives every "
    "fold a region chosen without its own scores and chooses again in each exchange; or choose the "
    "region by something else"
)
_BY_OTHERS = (
    "take everybody, or keep them by something else; leave people out by a list with an "
    "exclude_reason; in STUDY.toml, a column that says only how good the data are is named in "
    "[data] quality"
)


def _biased(fed: _Fed) -> _Fault | None:
    """Values read exploratively."""
    if not fed.tree.touch.biased:
        return None
    return _Fault(
        "the values are marked biased, and no statistic accepts them",
        "report the exploratory value alone, or choose the region without the tested data",
        certain=True,
    )


def _searched(fed: _Fed) -> _Fault | None:
    """A test that chooses again, but only inside a region that its own data chose."""
    chose, own = fed.table.overlapping(fed.search.touch.choosers), 0
    for mark in fed.marks:
        own |= chose & mark.data
    if not own:
        return None
    return _Fault(
        "it chooses again, but only inside a search region that was made from the tested data",
        "give it the search region of the node that chooses, made without those data",
        own,
        certain=True,
    )


def _circular(fed: _Fed) -> _Fault | None:
    """Values read in a region chosen on the very data."""
    if not any(fed.table.overlapping(mark.mask) & mark.data for mark in fed.marks):
        return None
    return _Fault(
        "its values were read in a region chosen on those very data",
        "see the extraction that leaks",
        certain=True,
    )


def _score_twice(fed: _Fed) -> _Fault | None:
    """A score that chose a subject's region, and that the subject's value is compared with."""
    own = 0
    for mark in fed.by_score:
        own |= mark.mask & mark.data
    if not own:
        return None
    if not own & ~fed.tree.touch.selected:
        return _Fault(
            f"subjects were kept or left out by {_columns(fed.table, own)}, in the data or where "
            "the region was chosen, and it compares values with that",
            _BY_OTHERS,
            own,
        )
    return _Fault(
        f"its region was chosen by {_columns(fed.table, own)} of the very subjects whose "
        "values it compares with that, whether or not their maps were held out",
        _BY_SCORE,
        own,
    )


def _pooled(fed: _Fed) -> _Fault | None:
    """Several values of one person, taken for values of several people."""
    crowd = None if fed.averaged or fed.these_only else _crowd(fed.table, fed.tree)
    if crowd is None:
        return None
    n_values, n_people = crowd
    return _Fault(
        f"its {n_values} values are of {n_people} {'people' if n_people > 1 else 'person'}: "
        "several of one person count as if each were somebody, and it is too sure of itself",
        f"{_AVERAGE}; or declare that it speaks of these subjects only",
        certain=True,
    )


def _turns(fed: _Fed) -> _Fault | None:
    """Values whose masks and data took turns, in a statistic that is not made for that."""
    if fed.statistic.cross_fitted:
        return None
    if cross_fitted(fed.marks, fed.table, averaged=fed.averaged):
        n = len(fed.marks)
        rate = (
            f" (about {plain_t_false_positives(n, n, 0.01):.0%} of the time at a nominal 5 %, "
            f"for n = {n} and a threshold of p < .01)"
            if n > 3
            else ""
        )
        between = fed.averaged or cross_fitted(fed.marks, fed.table, averaged=True)
        return _Fault(
            f"the {n} values are cross-fitted: each mask was chosen on the other values' data, "
            "so they are correlated and this statistic rejects a true null far more often than "
            f"it says{rate}",
            (fed.statistic.cure or (_BY_SCORE if fed.statistic.scores else _FLIP))
            if between
            else _AVERAGE,
        )
    if cross_fitted(fed.by_score, fed.table):
        chose = 0
        for mark in fed.by_score:
            chose |= mark.mask
        return _Fault(
            f"the regions were chosen by {_columns(fed.table, chose)} of the other subjects, so "
            "that values and scores are tied across subjects and this statistic rejects a true "
            "null more often than it says",
            _BY_SCORE,
            chose,
        )
    return None


def _same_people(fed: _Fed) -> _Fault | None:
    """A claim about a population, from regions chosen on other data of the tested subjects."""
    if fed.these_only or not any(several(fed.table, m.mask, m.data) for m in fed.marks):
        return None
    return _Fault(
        "its region was chosen on other runs of the tested subjects, which does not protect "
        "a claim about those they were drawn from",
        'declare that it speaks of these subjects only (claim = "these-subjects", '
        "these_subjects=True), or choose the region on other subjects",
    )


_FAULTS = (_biased, _searched, _circular, _score_twice, _turns, _pooled, _same_people)


# -- scores ------------------------------------------------------------------------------------


def _scores(study: Study, given: Inputs, statistic: Statistic) -> Leaf:
    """All that the values of a statistic are compared with: scores, covariates, group labels."""
    parts: list[Tree] = []
    for field in statistic.scores:
        value = given.settings.get(field)
        if field in given.trees:
            parts.append(given.trees[field])
        elif hasattr(value, "score_columns"):
            touches = scores_by_row(given, field, statistic.labels)
            parts += [Leaf(touch, place=f"{given.where}.{field}") for touch in touches]
        else:
            unknown = Touch(unknown=frozenset({f"{UNNAMED} {field!r} given to {given.where}"}))
            for values in lists_in(value, least=2):
                touch = touches_of_list(study, values, given.settings.get(statistic.labels))
                parts.append(Leaf(touch or unknown, place=f"{given.where}.{field}"))
    return joined(parts)


def _by_score(table: UnitTable, marks: Iterable[Extraction], scores: Touch) -> list[Extraction]:
    """The marks of values where they meet scores.

    Scores count against scores of the same column; a score that was itself computed from the
    tested measurement counts like that measurement.
    """
    if not scores.values:
        return []
    column = table.column(unit.suffix for unit in table.units_of(scores.values & table.scores))
    made = []
    for mark in marks:
        of_scores = column | scores.values & measured_in(table, mark.data)
        own = table.company(mark.data & ~table.scores) & of_scores
        chose = table.overlapping(mark.mask) & of_scores
        made.append(replace(mark, mask=chose, data=own, certified=False))
    return made


def _columns(table: UnitTable, scores: int) -> str:
    """The columns of a set of scores, in words."""
    return " and ".join(sorted({unit.suffix for unit in table.units_of(scores)}))


def _rows(tree: Tree) -> Tree:
    """The list of values that was written into one file."""
    while isinstance(tree, Leaf) and len(tree.parents) == 1:
        tree = tree.parents[0]
    return tree


def _by_person(table: UnitTable, labels: Any, tree: Tree, data_units: int) -> bool:
    """Whether labels average each person's values, and nobody else's with them."""
    if len(set(labels)) != len(table.people_of(data_units)):
        return False
    rows = tree.children if isinstance(tree, Branch) else ()
    if len(rows) != len(labels):
        return True  # in one file, or one list for each region: whose each is cannot be seen
    whose = [_people_read(table, row) for row in rows]
    pairs = {(label, one) for label, one in zip(labels, whose, strict=True) if len(one) == 1}
    return len(pairs) <= len(set(labels))


def _people_read(table: UnitTable, value: Tree) -> frozenset[str]:
    """Whose data a value was read from."""
    read = union(Touch(mark.data & ~table.scores) for mark in value.touch.extractions)
    return table.people_of(read.values)


# -- values and people ---------------------------------------------------------------------------


def _crowd(table: UnitTable, tree: Tree) -> tuple[int, int] | None:
    """How many values of how many people a list holds, when somebody has more than one."""
    if isinstance(tree, Leaf):
        return None
    if not all(isinstance(child, Leaf) for child in tree.children):
        return next(filter(None, (_crowd(table, child) for child in tree.children)), None)
    whose = []
    for child in tree.children:
        people = _people_read(table, child)
        if len(people) != 1:
            return None  # a value of several people, or of nobody: who counts cannot be told
        whose.append(people)
    n_people = len(set(whose))
    return (len(whose), n_people) if 0 < n_people < len(whose) else None


def _weakest(marks: list[Extraction], table: UnitTable) -> str:
    within = any(mark.mask & table.company(mark.data) for mark in marks)
    return "run" if within else "subject"
