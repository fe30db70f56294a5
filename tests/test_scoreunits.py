"""Scores as data units: whose score chose, told by columns, models, designs and typed lists."""

from __future__ import annotations

import contextlib
import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import pytest
from gallery_parts import (
    AGE,
    BANK,
    MOOD,
    SUBS,
    Garden,
    average,
    by_fold,
    correlating,
    empty,
    extract,
    flip_test,
    foreign,
    going_with,
    own_test,
    read_and_test,
    response_of,
    strongest,
    with_age,
    with_bank,
)
from nipype import Function, Node
from sequester.nodes.design import adjusted_mean, regression, two_sample
from sequester.nodes.errors import InputError
from sequester.nodes.folds import KFold
from sequester.nodes.interfaces import (
    ChooseMask,
    Extract,
    GroupMap,
    HeldOutSummary,
    KeepSubjects,
    LeaveOutMaps,
)
from sequester.nodes.masks import Strongest
from sequester.nodes.models import Score
from sequester.nodes.procedure import Procedure
from sequester.nodes.rules import Inputs, Leaf, Loss, Rule, joined, lost_precision, stamped
from sequester.nodes.scoreunits import Cell, kept_by_scores
from sequester.nodes.subjects import Keep
from sequester.nodes.touch import Touch, Unit
from sequester.workflows.findings import Finding
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.scorelists import touches_of_list
from sequester.workflows.study import Origin, Row, Study

pytestmark = pytest.mark.usefixtures("quiet_engine")


@pytest.fixture
def garden(tmp_path: Path) -> Garden:
    return Garden(tmp_path / "garden")


def propagated(graph: Any, garden: Garden) -> GuardPlugin:
    """The guard after judging, refused or not."""
    guard = GuardPlugin(garden.study, dry=True)
    with contextlib.suppress(GuardRefused):
        graph.run(plugin=guard)
    return guard


def of_statistic(graph: Any, garden: Garden) -> Finding:
    (finding,) = [f for f in propagated(graph, garden).findings if f.kind == "statistic"]
    return finding


def scores(garden: Garden, bits: int) -> list[str]:
    table = garden.study.table
    return [str(unit) for unit in table.units_of(bits & table.scores)]


def touched(node: Node, output: str, garden: Garden) -> list[Touch]:
    """What each element of an output touches, of a node alone."""
    graph = empty()
    graph.add_nodes([node])
    tree = propagated(graph, garden).ancestry.outputs[f"w.{node.name}", output]
    return [child.touch for child in getattr(tree, "children", [tree])]


def ages(*subs: str) -> list[str]:
    return [f"sub-{sub}_age" for sub in subs]


# -- the table ---------------------------------------------------------------------------------


def test_every_filled_cell_of_a_further_column_is_a_unit(garden: Garden):
    table = garden.study.table
    assert scores(garden, table.scores) == [
        f"sub-{sub}_{column}" for sub in SUBS for column in ("age", "mood", "bank")
    ]
    assert garden.study.scores["age", "01"].says(31)
    assert garden.study.scores["bank", "02"].says("right")


def test_a_blank_cell_is_no_unit(tmp_path: Path):
    rows = [
        Row(f"{s}.nii", None, Unit(sub=s, suffix="bold"), extra=(("age", a),))
        for s, a in (("1", "9"), ("2", ""))
    ]
    assert [str(u) for u in Study(tmp_path, rows).table.units] == [
        "sub-1_bold",
        "sub-2_bold",
        "sub-1_age",
    ]


def test_kin_share_their_scores(tmp_path: Path):
    rows = [
        Row(f"{s}.nii", None, Unit(sub=s), exchange="kin", extra=(("age", a),))
        for s, a in (("1", "9"), ("2", "7"))
    ]
    study = Study(tmp_path, rows)
    assert study.scores["age", "kin"].texts == {"9", "7"}
    assert study.table.people_of(study.scores["age", "1"].units) == {"kin"}


def test_a_column_named_as_what_was_acquired_is_refused(tmp_path: Path):
    rows = [Row("a.nii", None, Unit(sub="1", suffix="bold"), extra=(("bold", "9"),))]
    with pytest.raises(InputError, match=r"a column is named as what was acquired \(column bold\)"):
        Study(tmp_path, rows)


def test_the_study_table_as_a_file_touches_all_scores(garden: Garden):
    touch = garden.study.touch_of(str(garden.root / "table.tsv"))
    assert touch == Touch(values=garden.study.table.scores)
    assert garden.study.is_declared(str(garden.root / "table.tsv"))


# -- who chose by whose score ------------------------------------------------------------------


def test_a_folds_mask_touches_the_scores_of_those_who_choose(garden: Garden):
    found = touched(by_fold(garden.of("lanterns1"), with_age()), "row_masks", garden)
    for sub, touch in zip(SUBS, found, strict=True):
        assert scores(garden, touch.values) == ages(*(other for other in SUBS if other != sub))


def test_covariates_choose_like_scores(garden: Garden):
    of = tuple(zip(SUBS, map(float, AGE), strict=True))
    mood = tuple(zip(SUBS, MOOD, strict=True))
    plan = Procedure(Strongest(6), KFold(3), model=Score(of, (("mood", mood),), "age"))
    touch = touched(by_fold(garden.of("lanterns1"), plan), "mask_files", garden)[0]
    assert len(scores(garden, touch.values)) == 8  # two scores of each of four


def test_groups_choose_by_their_column(garden: Garden):
    plan = with_bank(scheme=KFold(3))
    touch = touched(by_fold(garden.of("lanterns1"), plan), "mask_files", garden)[0]
    assert {name.split("_")[1] for name in scores(garden, touch.values)} == {"bank"}


@pytest.mark.parametrize(
    ("design", "columns"),
    [
        (regression(AGE, {"mood": MOOD}, "age"), {"age", "mood"}),
        (two_sample(BANK, "left", "right"), {"bank"}),
        (adjusted_mean({"age": AGE}), {"age"}),
    ],
    ids=["score", "groups", "covariate"],
)
def test_a_design_touches_the_columns_that_it_holds(design: Any, columns: set[str], garden: Garden):
    maps = garden.of("lanterns1")
    whole = GroupMap(in_files=maps, labels=list(SUBS), design=design)
    (touch,) = touched(Node(whole, "group"), "out_file", garden)
    assert {unit.split("_")[1] for unit in scores(garden, touch.values)} == columns
    assert len(scores(garden, touch.values)) == 6 * len(columns)
    folds = LeaveOutMaps(in_files=maps, labels=list(SUBS), design=design)
    for sub, fold in zip(SUBS, touched(Node(folds, "maps"), "out_files", garden), strict=True):
        assert f"sub-{sub}" not in {name.split("_")[0] for name in scores(garden, fold.values)}
        assert not fold.unknown


def test_a_design_of_nobody_in_particular_is_unknown(garden: Garden):
    whole = GroupMap(in_files=garden.of("lanterns1"), design=regression(AGE, name="age"))
    (touch,) = touched(Node(whole, "group"), "out_file", garden)
    assert touch.unknown == {"the scores given to w.group, of whom is not known"}


@pytest.mark.parametrize(
    ("values", "name", "everybody"),
    [
        (AGE, "age", False),
        ([a - 40 for a in AGE], "age", True),  # everybody's age is in the mean of all
        ([a / 7 - 5 for a in AGE], "age", True),
    ],
)
def test_centred_scores_hold_everybodys(
    values: Sequence[float], name: str, everybody: bool, garden: Garden
):
    of = tuple(zip(SUBS, map(float, values), strict=True))
    plan = Procedure(Strongest(6), model=Score(of, name=name))
    found = touched(by_fold(garden.of("lanterns1"), plan), "row_masks", garden)
    assert [len(scores(garden, touch.values)) for touch in found] == [6 if everybody else 5] * 6
    assert not found[0].unknown


@pytest.mark.parametrize(
    ("values", "name"),
    [(AGE, "height"), ((31, 45, 52, 28, 60, 99), "age"), (MOOD, "age")],
    ids=["no such column", "another value", "another column"],
)
def test_scores_that_no_column_holds_are_an_unknown_choice(
    values: Sequence[float], name: str, garden: Garden
):
    of = tuple(zip(SUBS, map(float, values), strict=True))
    plan, maps = Procedure(Strongest(6), model=Score(of, name=name)), garden.of("lanterns1")
    read, test = extract(maps), flip_test(maps, plan)
    found = propagated(
        read_and_test(empty(), by_fold(maps, plan), "row_masks", read, test), garden
    ).findings
    assert [f.verdict for f in found] == ["unproven"] * 7
    assert f"the scores {name!r} given to w.choose" in found[0].reason
    assert "column of the study table" in found[0].cure


def test_scores_from_a_declared_origin_are_known(garden: Garden):
    garden.declare(Origin("the registry of 1910"))
    of = tuple(zip(SUBS, (3.0, 1.0, 4.0, 1.5, 9.0, 2.0), strict=True))
    plan = Procedure(Strongest(6), model=Score(of, name="the registry of 1910"))
    found = touched(by_fold(garden.of("lanterns1"), plan), "row_masks", garden)
    assert {touch.unknown for touch in found} == {frozenset()}
    assert found[0].origins == {"the registry of 1910"}


# -- lists typed into foreign nodes ------------------------------------------------------------


@pytest.mark.parametrize(
    ("values", "people", "expected"),
    [
        (AGE, SUBS, 6),
        (AGE, None, 6),
        (AGE[1:5], None, 4),  # in the table's order, some left out
        ([str(a) for a in AGE], None, 6),
        (AGE[::-1], SUBS[::-1], 6),
        (AGE[::-1], None, 6),
        (BANK, SUBS, 6),
        (BANK, None, 6),
        ([6.0, 5.0, 4.0, 3.0], None, None),
        ([1, 0, 1], None, None),
        (BANK[:4], None, None),  # any list of two words would do
    ],
)
def test_a_list_is_recognised_by_its_values(
    values: Sequence[Any], people: Sequence[str] | None, expected: int | None, garden: Garden
):
    touch = touches_of_list(garden.study, list(values), people)
    assert (None if touch is None else len(scores(garden, touch.values))) == expected


def chooser(garden: Garden, **inputs: Any) -> set[str]:
    node = foreign(going_with, in_files=garden.of("T1w"), **inputs)
    (touch,) = touched(node, "out", garden)
    return set(touch.unknown)


def test_numbers_one_for_each_of_several_people_are_an_unknown_choice(garden: Garden):
    numbers = [0.3, 0.1, 0.9, 0.4, 0.2, 0.6]
    what = "the scores 'scores' given to w.going_with"
    assert chooser(garden, scores=numbers) == {what}
    assert chooser(garden, scores=["a", "b", "a", "b", "b", "a"]) == {what}


@pytest.mark.parametrize(
    "words",
    [
        [6.0] * 6,  # one for all
        list(SUBS),  # who is who
        ["a", "b", "c", "d", "e", "f"],  # names of something
        [0.3, 0.1, 0.9],  # not one for each
        [[1, 2], [3, 4], [5, 6]],
    ],
    ids=["alike", "people", "names", "another length", "nested"],
)
def test_other_lists_are_parameters(words: list[Any], garden: Garden):
    assert chooser(garden, scores=words) == set()


def test_numbers_for_the_echoes_of_one_person_are_parameters(garden: Garden):
    echoes = [garden.of(scan)[0] for scan in ("lanterns1", "paths", "rest")]
    node = foreign(going_with, in_files=echoes, scores=[12, 28, 44])
    assert touched(node, "out", garden)[0].unknown == frozenset()


def test_numbers_over_which_a_node_iterates_choose_nobody(garden: Garden):
    node = foreign(strongest, over=["in_file", "k"], in_file=garden.of("T1w"), k=[5, 6, 7, 8, 9, 4])
    assert {touch.unknown for touch in touched(node, "out", garden)} == {frozenset()}


# -- the statistic -----------------------------------------------------------------------------


def region_by(garden: Garden, subs: Sequence[str], values: Sequence[Any]) -> tuple[Any, Node]:
    graph, region = empty(), foreign(strongest)
    chosen = foreign(going_with, in_files=garden.of("T1w", subs), scores=list(values))
    graph.connect(chosen, "out", region, "in_file")
    return graph, region


def test_a_score_that_chose_and_is_tested_is_named_with_both_ways(garden: Garden):
    graph, region = region_by(garden, SUBS, AGE)
    read = extract(garden.of("lanterns1"))
    finding = of_statistic(read_and_test(graph, region, "out", read, correlating(AGE)), garden)
    assert finding.verdict == "leak"
    assert scores(garden, finding.shared) == ages(*SUBS)
    assert finding.mask_path[0] == "w.going_with.scores[0]"
    assert finding.data_path == ("w.correlate.scores[0]",)
    assert "FlipTest with a Score or Groups model" in finding.cure


def test_one_score_in_common_is_enough(garden: Garden):
    # Gardener 03 chose and is tested, their maps are not the same.
    graph, region = region_by(garden, SUBS[:3], AGE[:3])
    read = extract(garden.of("lanterns1", SUBS[2:]), labels=list(SUBS[2:]))
    finding = of_statistic(read_and_test(graph, region, "out", read, correlating(AGE[2:])), garden)
    assert scores(garden, finding.shared) == ages("03")


def test_the_scores_of_other_people_and_other_scores_are_apart(garden: Garden):
    for subs, values in ((SUBS[:3], AGE), (SUBS, MOOD)):
        graph, region = region_by(garden, subs, values[: len(subs)])
        read = extract(garden.of("lanterns1", SUBS[3:]), labels=list(SUBS[3:]))
        test = correlating(AGE[3:])
        finding = of_statistic(read_and_test(graph, region, "out", read, test), garden)
        assert (finding.verdict, finding.level) == ("apart", "subject")


def test_a_statistic_of_values_alone_does_not_mind_scores_that_chose(garden: Garden):
    graph, region = region_by(garden, SUBS, AGE)
    read = extract(garden.of("lanterns1"))
    assert (
        of_statistic(read_and_test(graph, region, "out", read, own_test()), garden).verdict
        == "apart"
    )


def test_scores_of_others_are_cross_fitted(garden: Garden):
    for test, verdict in (
        (correlating(AGE), "leak"),
        (correlating(MOOD), "apart"),
        (flip_test(garden.of("T1w"), with_age()), "apart"),
    ):
        region = by_fold(garden.of("T1w"), with_age())
        graph = read_and_test(empty(), region, "row_masks", extract(garden.of("lanterns1")), test)
        finding = of_statistic(graph, garden)
        assert finding.verdict == verdict
        if verdict == "leak":
            assert "chosen by age of the other subjects" in finding.reason


def test_scores_that_arrive_from_the_table_itself_are_those_of_all_columns(garden: Garden):
    graph, region = region_by(garden, SUBS, AGE)
    body = Function(["table"], ["out"], "def ages(table):\n    return [1.0] * 6")
    column = Node(body, "column")
    column.inputs.table = str(garden.root / "table.tsv")
    test = correlating(None)
    graph.connect(column, "out", test, "scores")
    read = extract(garden.of("lanterns1"))
    finding = of_statistic(read_and_test(graph, region, "out", read, test), garden)
    assert "chosen by age of the very subjects" in finding.reason


def test_scores_of_a_statistic_that_no_column_holds_are_unproven(garden: Garden):
    region = foreign(strongest, in_file=garden.outside("atlas"))
    read = extract(garden.of("lanterns1"))
    test = correlating([0.3, 0.1, 0.9, 0.4, 0.2, 0.6])
    finding = of_statistic(read_and_test(empty(), region, "out", read, test), garden)
    assert finding.verdict == "unproven"
    assert "the scores 'scores' given to w.correlate" in finding.reason


def test_a_score_computed_from_the_tested_measurement_counts_like_it(garden: Garden):
    # The region is chosen on first runs, the score is a mean of the first runs, second runs are
    # tested: the first runs are on both sides.
    graph, maps = empty(), garden.of("lanterns1")
    group, region = foreign(average, in_files=maps), foreign(strongest)
    graph.connect(group, "out", region, "in_file")
    score, test = foreign(response_of, over=["in_file"], in_file=maps), correlating(None)
    graph.connect(score, "out", test, "scores")
    read = extract(garden.of("lanterns2"), these_subjects=True)
    finding = of_statistic(read_and_test(graph, region, "out", read, test), garden)
    assert finding.reason.startswith("its region was chosen by bold of the very subjects")


def test_a_difference_of_groups_that_chose_is_refused_without_a_test_too(garden: Garden):
    graph, region = region_by(garden, SUBS, BANK)
    summary = HeldOutSummary(
        names=("a", "b", "c"),
        labels=list(SUBS),
        n_folds=1,
        rule="any",
        groups=list(BANK),
        compared=("left", "right"),
    )
    read = extract(garden.of("lanterns1"))
    finding = of_statistic(
        read_and_test(graph, region, "out", read, Node(summary, "summary")), garden
    )
    assert "chosen by bank of the very subjects" in finding.reason


# -- who takes part ----------------------------------------------------------------------------


def kept(garden: Garden, **inputs: Any) -> Node:
    given = {"labels": list(SUBS), "keep": Keep(at_least=35.0), **inputs}
    return Node(KeepSubjects(in_files=garden.of("lanterns1"), **given), "keep")


def test_those_who_stay_carry_the_scores_of_all(garden: Garden):
    node = kept(garden, measures=[float(a) for a in AGE], measure_name="age")
    found = touched(node, "out_files", garden)
    stay = [sub for sub, age in zip(SUBS, AGE, strict=True) if age >= 35]
    table = garden.study.table
    assert [str(u) for t in found for u in table.units_of(t.values)] == [
        f"sub-{sub}_task-lanterns_run-1_bold" for sub in stay
    ]
    assert {tuple(scores(garden, touch.selected)) for touch in found} == {tuple(ages(*SUBS))}


def test_measures_that_no_column_holds_are_an_unknown_choice(garden: Garden):
    node = kept(garden, measures=[36.0, 1.0, 2.0, 3.0, 4.0, 5.0], measure_name="steps")
    assert touched(node, "out_files", garden)[0].unknown == {"the scores 'steps' given to w.keep"}


def test_measures_of_a_declared_origin_select_by_it(garden: Garden):
    garden.declare(Origin("step counters"))
    node = kept(garden, measures=[36.0] * 6, measure_name="step counters")
    (touch, *_) = touched(node, "out_files", garden)
    assert (touch.origins, touch.selected) == ({"step counters"}, 0)


def test_the_node_keeps_and_says_who_was_left_out(garden: Garden, tmp_path: Path):
    made = KeepSubjects(
        in_files=garden.of("lanterns1"),
        labels=list(SUBS),
        measures=[float(a) for a in AGE],
        measure_name="age",
        keep=Keep(35, 55),
    ).run(cwd=str(tmp_path))
    assert made.outputs.out_labels == ["02", "03", "06"]
    assert made.outputs.out_files == garden.of("lanterns1", ["02", "03", "06"])
    record = json.loads(Path(made.outputs.record_file).read_text())
    assert record["kept"] == "at least 35 and at most 55"
    assert record["left_out"] == [
        {"label": sub, "age": age} for sub, age in (("01", 31.0), ("04", 28.0), ("05", 60.0))
    ]


@pytest.mark.parametrize(
    ("inputs", "said"),
    [
        ({"measures": [1.0] * 6}, r"no subject stays: expected measure at least 35, got 1 to 1"),
        ({"measures": [99.0] * 5}, r"maps, labels and measures do not pair up: got 6, 6, 5"),
        ({"measures": [99.0] * 5 + [float("nan")]}, r"measures that are no number \(rows 5\)"),
    ],
)
def test_what_cannot_be_kept_is_said(
    inputs: dict[str, Any], said: str, garden: Garden, tmp_path: Path
):
    node = kept(garden, **inputs)
    with pytest.raises(InputError, match=said):
        node.interface._work(tmp_path)


def test_limits_that_nobody_can_keep():
    with pytest.raises(InputError, match="limits that nobody can keep: got 2 to 1"):
        Keep(2, 1)


def test_a_mask_chosen_among_the_kept_is_judged_by_what_kept_them(garden: Garden):
    graph = empty()
    group, region = Node(GroupMap(), "group"), Node(ChooseMask(rule=Strongest(6)), "choose")
    node = kept(garden, measures=[float(a) for a in AGE], measure_name="age")
    read = Node(Extract(labels=list(SUBS)), "extract")
    read.inputs.in_files = garden.of("autumn")
    graph.connect([(node, group, [("out_files", "in_files")])])
    graph.connect([(group, region, [("out_file", "in_file")])])
    graph.connect(region, "mask_file", read, "mask_files")
    test = correlating(AGE)
    graph.connect(read, "values", test, "values")
    assert "kept or left out by age" in of_statistic(graph, garden).reason


def test_what_kept_somebody_leaves_word_of_where_precision_was_lost():
    loss = Loss("nobody knows which", "give a list")
    rule = Rule(None, lambda inputs: joined([Leaf(Touch(1))], single=False, lost=loss))
    cells = {("skill", "01"): Cell(frozenset({"5"}), 0b100)}
    given = Inputs({}, {"kept_by": ["skill"]}, "w.maps", scores=cells)
    made = kept_by_scores(rule, "kept_by", "quality")(given)
    assert (made.touch, made.single) == (Touch(0b001, selected=0b100), False)
    told = lost_precision(stamped(made, "w.maps.out_files"))
    assert told == [("w.maps", "nobody knows which", "give a list")]
