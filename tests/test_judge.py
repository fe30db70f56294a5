"""Every meeting judged: the levels of independence, and the statistics that fit or do not.

Nothing runs here: the guard judges the expanded graph and stops. The files are no images.
"""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import pytest
import sequester.nodes.interfaces as interfaces
from nipype import Function, MapNode, Merge, Node, Workflow
from running import workflow
from sequester.nodes.foldnull import plain_t_false_positives
from sequester.nodes.folds import KFold, LeaveOneOut, Scheme
from sequester.nodes.interfaces import (
    ChooseByFold,
    ChooseEach,
    ChooseMask,
    CompareFixed,
    CompareHeldOut,
    Extract,
    FamilyTest,
    FixedRegionTest,
    FlipTest,
    GivenMask,
    GroupMap,
    HeldOutSummary,
    SphereMask,
)
from sequester.nodes.masks import Strongest
from sequester.nodes.procedure import Procedure
from sequester.nodes.touch import Unit
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.judge import Finding
from sequester.workflows.study import Origin, Row, Study

SUBJECTS = ("01", "02", "03", "04")
NAMES = ("roi", "plan", "search")
RUN_ONE = [f"sub-{s}_run-1_bold" for s in SUBJECTS]
RUN_TWO = [f"sub-{s}_run-2_bold" for s in SUBJECTS]


pytestmark = pytest.mark.usefixtures("quiet_engine")


UNITS = [
    *(Unit(sub=s, run=r, suffix="bold") for s in SUBJECTS for r in "12"),
    *(Unit(sub=s, suffix="T1w") for s in SUBJECTS),
    Unit(sub="05", suffix="bold"),
    Unit(sub="05", run="1", suffix="bold"),
    Unit(sub="06"),
    Unit(sub="06", run="1", suffix="bold"),
    Unit(sub="01", suffix="beh"),
]
OUTSIDE = ("stranger", "atlas", "pilot01", "pilot02")


def made(root: Path, exchange: dict[str, str] | None = None) -> Study:
    """A study of four subjects with two runs and an anatomy, and some cases of their own."""
    rows = [
        Row(f"{unit}.nii", None, unit, exchange=(exchange or {}).get(unit.sub, ""))
        for unit in UNITS
    ]
    for name in (*(str(unit) for unit in UNITS), *OUTSIDE):
        (root / f"{name}.nii").write_text(name)
    return Study(
        root,
        rows,
        [
            Origin("an atlas of 1909", ("atlas.nii",)),
            Origin("our pilot", ("pilot01.nii",), (Unit(sub="01", suffix="bold"),)),
            Origin("another pilot", ("pilot02.nii",), (Unit(sub="02", suffix="bold"),)),
            Origin("the peak of our own group map", (), (Unit(suffix="bold"),)),
        ],
    )


@pytest.fixture
def study(tmp_path: Path) -> Study:
    return made(tmp_path)


def derived(a):  # anything made from some files
    return a


def function(name: str, iterfield: str = "", **inputs: Any) -> Node:
    body = Function(input_names=sorted(inputs) or ["a"], output_names=["out"], function=derived)
    node = MapNode(body, iterfield=[iterfield], name=name) if iterfield else Node(body, name=name)
    node.inputs.trait_set(**inputs)
    return node


def judged(graph: Workflow, study: Study) -> list[Finding]:
    """The findings; the guard raises exactly when one of them is not allowed."""
    guard = GuardPlugin(study, dry=True)
    refused: list[Finding] = []
    try:
        graph.run(plugin=guard)
    except GuardRefused as error:
        refused = error.findings
    assert refused == [f for f in guard.findings if not f.allowed]
    return guard.findings


def refusal(graph: Workflow, study: Study) -> str:
    with pytest.raises(GuardRefused) as raised:
        graph.run(plugin=GuardPlugin(study, dry=True))
    return " ".join(str(raised.value).split())  # lines are wrapped


def paths(study: Study, names: Sequence[str]) -> list[str]:
    return [str(study.root / f"{name}.nii") for name in names]


def meeting(
    study: Study, mask: Sequence[str], data: Sequence[str], **extract: Any
) -> list[Finding]:
    """A mask made from some files, read in others; its findings."""
    graph = workflow()
    read = Node(Extract(in_files=paths(study, data), labels=list(data), **extract), name="extract")
    graph.connect(function("choose", a=paths(study, mask)), "out", read, "mask_files")
    return judged(graph, study)


def verdict(finding: Finding) -> tuple[str, str, bool]:
    return finding.verdict, finding.level, finding.allowed


LEAK, OTHER_RUNS = ("leak", "", False), ("leak", "subject", False)
RUN, SUBJECT, UNPROVEN = ("apart", "run", True), ("apart", "subject", True), ("unproven", "", False)

LEVELS = [
    ("the very file", ["sub-01_run-1_bold"], "sub-01_run-1_bold", LEAK),
    ("it and others", ["sub-01_run-1_bold", "sub-02_run-1_bold"], "sub-01_run-1_bold", LEAK),
    ("own other run", ["sub-01_run-1_bold"], "sub-01_run-2_bold", RUN),
    (
        "others' runs and an own other run",
        ["sub-01_run-1_bold", "sub-02_run-1_bold"],
        "sub-01_run-2_bold",
        OTHER_RUNS,
    ),
    ("other people", ["sub-02_run-1_bold", "sub-03_run-1_bold"], "sub-01_run-1_bold", SUBJECT),
    ("a file nobody declared", ["stranger"], "sub-01_run-1_bold", UNPROVEN),
    (
        "other people and a file nobody declared",
        ["sub-02_run-1_bold", "stranger"],
        "sub-01_run-1_bold",
        UNPROVEN,
    ),
    ("no file at all", [], "sub-01_run-1_bold", UNPROVEN),
    ("a declared origin", ["atlas"], "sub-01_run-1_bold", SUBJECT),
    ("an origin derived from the tested", ["pilot01"], "sub-01_run-1_bold", LEAK),
    ("an origin derived from others", ["pilot02"], "sub-01_run-1_bold", SUBJECT),
    ("a leak is a leak, unknown files or not", ["pilot01", "stranger"], "sub-01_run-1_bold", LEAK),
    ("a template of anatomies", [f"sub-{s}_T1w" for s in SUBJECTS], "sub-01_run-1_bold", SUBJECT),
    ("a behavioural score of the tested", ["sub-01_beh"], "sub-01_run-1_bold", SUBJECT),
    (
        "anatomies and the tested run",
        ["sub-02_T1w", "sub-01_run-1_bold"],
        "sub-01_run-1_bold",
        LEAK,
    ),
    ("the anatomy, tested on itself", ["sub-01_T1w"], "sub-01_T1w", LEAK),
    ("a map of all runs, tested on one", ["sub-05_bold"], "sub-05_run-1_bold", LEAK),
    ("one run, tested on a map of all", ["sub-05_run-1_bold"], "sub-05_bold", LEAK),
    ("a unit of no stated suffix", ["sub-06"], "sub-06_run-1_bold", LEAK),
    ("data that is no data of the study", ["sub-01_run-1_bold"], "atlas", UNPROVEN),
    ("data that nobody declared", ["atlas"], "stranger", UNPROVEN),
]


@pytest.mark.parametrize(
    ("mask", "data", "expected"), [c[1:] for c in LEVELS], ids=[c[0] for c in LEVELS]
)
def test_level(mask: list[str], data: str, expected: tuple[str, str, bool], study: Study):
    (finding,) = meeting(study, mask, [data])
    assert verdict(finding) == expected
    assert finding.kind == "extraction"
    assert finding.node == "w.extract"


def test_own_run_with_an_unknown_file_is_unproven(study: Study):
    (finding,) = meeting(study, ["sub-01_run-1_bold", "stranger"], ["sub-01_run-2_bold"])
    assert verdict(finding) == UNPROVEN


def test_data_of_no_stated_suffix_may_be_of_any(study: Study):
    (finding,) = meeting(study, ["sub-06_run-1_bold"], ["sub-06"])
    assert verdict(finding) == LEAK


def test_what_is_shared_is_named(study: Study):
    (finding,) = meeting(study, ["sub-01_run-1_bold", "sub-02_run-1_bold"], ["sub-01_run-1_bold"])
    assert study.table.describe(finding.shared) == "sub-01_run-1_bold"
    (finding,) = meeting(study, ["sub-01_run-1_bold", "sub-02_run-1_bold"], ["sub-01_run-2_bold"])
    # No unit is shared; the mask's units of the tested person are.
    assert study.table.describe(finding.shared) == "sub-01_run-1_bold"


def test_only_units_of_the_measured_kind_are_compared(study: Study):
    (finding,) = meeting(study, ["sub-02_T1w", "sub-02_run-1_bold"], ["sub-01_run-1_bold"])
    assert study.table.describe(finding.mask_units) == "sub-02_run-1_bold"
    assert study.table.describe(finding.data_units) == "sub-01_run-1_bold"


def test_a_leak_names_the_origin_that_is_made_of_the_tested_data_and_no_other(study: Study):
    (finding,) = meeting(study, ["pilot01", "pilot02", "atlas"], ["sub-01_run-1_bold"])
    assert finding.made_of == ("our pilot",)
    assert "as its origin declares" in finding.reason
    assert "\n    origin  our pilot\n" in finding.describe(study.table)
    (finding,) = meeting(study, ["sub-05_bold", "atlas"], ["sub-05_run-1_bold"])
    assert finding.verdict == "leak" and finding.origins == ("an atlas of 1909",)
    assert finding.made_of == ()
    assert "on another map of the very data" in finding.reason


def test_a_declared_origin_is_kept_with_the_finding(study: Study):
    (finding,) = meeting(study, ["atlas"], ["sub-01_run-1_bold"])
    assert finding.origins == ("an atlas of 1909",)


@pytest.mark.parametrize("mask", [["01"], ["01", "02"]])
def test_run_level_is_for_one_subject_alone(mask: list[str], study: Study):
    # One value read from an average of two subjects, in a mask from runs of one, or of both.
    graph = workflow()
    read = Node(Extract(labels=["pair"]), name="extract")
    choosing = paths(study, [f"sub-{s}_run-1_bold" for s in mask])
    graph.connect(function("choose", a=choosing), "out", read, "mask_files")
    graph.connect(function("average", a=paths(study, RUN_TWO[:2])), "out", read, "in_files")
    (finding,) = judged(graph, study)
    assert verdict(finding) == OTHER_RUNS


def test_every_element_is_judged_by_itself(study: Study):
    data = ["sub-01_run-1_bold", "sub-01_run-2_bold", "sub-02_run-1_bold"]
    found = meeting(study, ["sub-01_run-1_bold"], data)
    assert [f.item for f in found] == [0, 1, 2]
    assert [verdict(f) for f in found] == [LEAK, RUN, SUBJECT]


FAMILY = {"01": "family", "02": "family"}


class TestPeople:
    """Rows that share a value of ``exchange`` count as one subject."""

    @pytest.mark.parametrize(
        ("mask", "data", "expected"),
        [
            (["sub-01_run-1_bold"], "sub-02_run-1_bold", RUN),
            (["sub-01_run-1_bold", "sub-02_run-1_bold"], "sub-02_run-2_bold", RUN),
            (["sub-01_run-1_bold", "sub-03_run-1_bold"], "sub-02_run-1_bold", OTHER_RUNS),
            (["sub-03_run-1_bold", "sub-04_run-1_bold"], "sub-02_run-1_bold", SUBJECT),
        ],
        ids=["a relative", "the family", "a relative among others", "others"],
    )
    def test_relatives_are_one(
        self, mask: list[str], data: str, expected: tuple[str, str, bool], tmp_path: Path
    ):
        (finding,) = meeting(made(tmp_path, FAMILY), mask, [data])
        assert verdict(finding) == expected

    def test_folds_that_part_relatives_leak(self, tmp_path: Path):
        study = made(tmp_path, FAMILY)
        for labels, expected in (
            (SUBJECTS, [OTHER_RUNS, OTHER_RUNS, SUBJECT, SUBJECT]),
            (["family", "family", "03", "04"], [SUBJECT] * 4),
        ):
            graph = workflow()
            choose = ChooseByFold(
                in_files=paths(study, RUN_ONE),
                labels=list(labels),
                procedure=Procedure(Strongest(1)),
            )
            read = Extract(in_files=paths(study, RUN_ONE), labels=list(labels))
            graph.connect(
                Node(choose, name="choose"), "row_masks", Node(read, name="read"), "mask_files"
            )
            assert [verdict(f) for f in judged(graph, study)] == expected


class TestMaskNodes:
    def extracted(self, study: Study, region: Node, data: str = "sub-01_run-1_bold") -> Finding:
        graph = workflow()
        read = Node(Extract(in_files=paths(study, [data]), labels=["x"]), name="extract")
        graph.connect(region, "mask_file", read, "mask_files")
        (finding,) = judged(graph, study)
        return finding

    def sphere(self, study: Study, **inputs: Any) -> Node:
        (reference,) = paths(study, ["sub-01_run-1_bold"])
        ball = SphereMask(reference=reference, centre=(0.0, 0.0, 0.0), radius=5.0, **inputs)
        return Node(ball, name="sphere")

    def test_a_coordinate_without_an_origin_is_unproven(self, study: Study):
        finding = self.extracted(study, self.sphere(study))
        assert verdict(finding) == UNPROVEN
        assert "the coordinate given to w.sphere" in finding.reason

    def test_a_coordinate_with_an_origin_is_apart(self, study: Study):
        finding = self.extracted(study, self.sphere(study, origin="a paper of 1911"))
        assert verdict(finding) == SUBJECT
        assert finding.origins == ("a paper of 1911",)

    def test_a_coordinate_derived_from_the_tested_data_is_a_leak(self, study: Study):
        region = self.sphere(study, origin="the peak of our own group map")
        assert verdict(self.extracted(study, region)) == LEAK

    def test_a_coordinate_computed_from_the_tested_data_is_a_leak(self, study: Study):
        graph, region = workflow(), self.sphere(study, origin="a paper of 1911")
        data = paths(study, ["sub-01_run-1_bold"])
        read = Node(Extract(in_files=data, labels=["x"]), name="extract")
        graph.connect(function("peak", a=data), "out", region, "centre")
        graph.connect(region, "mask_file", read, "mask_files")
        assert [verdict(f) for f in judged(graph, study)] == [LEAK]

    def test_a_threshold_computed_from_the_tested_data_is_a_leak(self, study: Study):
        graph = workflow()
        data = paths(study, ["sub-01_run-1_bold"])
        (other,) = paths(study, ["sub-02_run-1_bold"])
        region = Node(ChooseMask(in_file=other), name="choose")
        read = Node(Extract(in_files=data, labels=["x"]), name="extract")
        graph.connect(function("best", a=data), "out", region, "rule")
        graph.connect(region, "mask_file", read, "mask_files")
        assert [verdict(f) for f in judged(graph, study)] == [LEAK]

    def test_a_shared_grid_is_no_leak_and_is_told(self, study: Study):
        mask, reference = paths(study, ["atlas", "sub-01_run-1_bold"])
        region = Node(GivenMask(in_file=mask, reference=reference), name="given")
        finding = self.extracted(study, region)
        assert verdict(finding) == SUBJECT
        assert study.table.describe(finding.geometry_units) == "sub-01_run-1_bold"
        assert finding.mask_units == 0

    def test_a_group_map_of_the_tested_people_leaks_through_the_mask(self, study: Study):
        data = paths(study, ["sub-01_run-1_bold", "sub-02_run-1_bold"])
        graph = workflow()
        group, region = (
            Node(GroupMap(in_files=data), name="group"),
            Node(ChooseMask(rule=Strongest(5)), name="choose"),
        )
        read = Node(Extract(in_files=data, labels=["a", "b"]), name="extract")
        graph.connect([(group, region, [("out_file", "in_file")])])
        graph.connect(region, "mask_file", read, "mask_files")
        assert [verdict(f) for f in judged(graph, study)] == [LEAK, LEAK]

    def test_a_literal_mask_meets_each_map_by_itself(self, study: Study):
        data = paths(study, ["sub-01_run-2_bold", "sub-02_run-1_bold"])
        graph = workflow()
        read = Extract(
            mask_files=paths(study, ["sub-01_run-1_bold"]), in_files=data, labels=["a", "b"]
        )
        graph.add_nodes([Node(read, name="extract")])
        assert [verdict(f) for f in judged(graph, study)] == [RUN, SUBJECT]

    def test_masks_and_maps_pair_up_in_an_iterated_extraction(self, study: Study):
        graph = workflow()
        read = MapNode(
            Extract(labels=["a", "b"]), iterfield=["mask_files", "in_files"], name="read"
        )
        first = paths(study, ["sub-01_run-1_bold", "sub-02_run-1_bold"])
        second = paths(study, ["sub-03_run-1_bold", "sub-04_run-1_bold"])
        read.inputs.in_files = [first, second]
        masks = [[second[0]], [first[1]]]
        graph.connect(function("choose", "a", a=masks), "out", read, "mask_files")
        assert {verdict(f) for f in judged(graph, study)} == {SUBJECT}

    def test_masks_that_are_not_iterated_meet_the_maps_of_every_iteration(self, study: Study):
        graph = workflow()
        read = MapNode(Extract(labels=["a", "b"]), iterfield=["in_files"], name="read")
        first = paths(study, ["sub-01_run-1_bold", "sub-02_run-1_bold"])
        second = paths(study, ["sub-03_run-1_bold", "sub-04_run-1_bold"])
        read.inputs.in_files = [first, second]
        # Mask 0 comes from sub-03, whose map is item 0 of the second iteration.
        masks = [second[0], *paths(study, ["atlas"])]
        graph.connect(function("choose", "a", a=masks), "out", read, "mask_files")
        assert "leak" in {f.verdict for f in judged(graph, study)}


class TestExploratory:
    def test_a_leak_may_run_into_a_value_marked_biased(self, study: Study):
        (finding,) = meeting(study, ["sub-01_run-1_bold"], ["sub-01_run-1_bold"], exploratory=True)
        assert verdict(finding) == ("leak", "", True)

    def test_what_is_unproven_does_not_run_even_so(self, study: Study):
        (finding,) = meeting(study, ["stranger"], ["sub-01_run-1_bold"], exploratory=True)
        assert verdict(finding) == UNPROVEN


# -- statistics --------------------------------------------------------------------------------


def statistics() -> list[type]:
    kinds = [getattr(interfaces, name) for name in interfaces.__all__]
    return [kind for kind in kinds if kind.statistic is not None]


def statistic(kind: type, study: Study, labels: Sequence[str]) -> Node:
    inputs: dict[str, Any] = {"names": NAMES}
    if kind in (CompareFixed, CompareHeldOut):
        inputs["names"] = list(NAMES[:2])
    if kind is FlipTest:
        inputs |= {
            "procedure": Procedure(Strongest(1)),
            "labels": list(labels),
            "in_files": paths(study, RUN_ONE),
        }
    return Node(kind(**inputs), name="test")


def analysis(
    study: Study,
    region: Node | None,
    output: str,
    kind: type = FixedRegionTest,
    data: Sequence[str] = RUN_ONE,
    **extract: Any,
) -> Workflow:
    """Region -> extraction -> statistic."""
    graph = workflow()
    read = Node(
        Extract(in_files=paths(study, data), labels=list(SUBJECTS), **extract), name="extract"
    )
    graph.connect(region, output, read, "mask_files")
    others = ("coverage", "sizes") if kind is FixedRegionTest else ()
    fields = [("values", kind.statistic.values), *((f, f) for f in others)]
    graph.connect([(read, statistic(kind, study, SUBJECTS), fields)])
    return graph


def by_fold(study: Study, scheme: Scheme) -> Node:
    choose = ChooseByFold(
        in_files=paths(study, RUN_ONE),
        labels=list(SUBJECTS),
        procedure=Procedure(Strongest(1), scheme),
    )
    return Node(choose, name="choose")


def of_statistic(graph: Workflow, study: Study) -> Finding:
    (finding,) = [f for f in judged(graph, study) if f.kind == "statistic"]
    return finding


class TestStatistics:
    def test_these_are_the_kinds(self):
        assert set(statistics()) == {
            CompareFixed,
            CompareHeldOut,
            FamilyTest,
            FixedRegionTest,
            FlipTest,
            HeldOutSummary,
        }

    @pytest.mark.parametrize("scheme", [LeaveOneOut(), KFold(2)])
    def test_a_t_test_of_cross_fitted_values_is_refused(self, scheme: Scheme, study: Study):
        finding = of_statistic(analysis(study, by_fold(study, scheme), "row_masks"), study)
        assert verdict(finding) == LEAK
        assert finding.reason.startswith("the 4 values are cross-fitted: each mask was chosen on")
        assert "rejects a true null far more often than it says" in finding.reason
        assert finding.cure.startswith("use the whole-procedure sign flip")

    def test_the_reason_says_how_often_it_would_err(self, study: Study):
        finding = of_statistic(analysis(study, by_fold(study, LeaveOneOut()), "row_masks"), study)
        rate = plain_t_false_positives(4, 4, 0.01)
        assert f"about {rate:.0%} of the time at a nominal 5 %, for n = 4" in finding.reason

    @pytest.mark.parametrize(
        ("labels", "these_subjects", "expected"),
        [
            (None, False, LEAK),
            ([*SUBJECTS, *SUBJECTS], False, SUBJECT),  # averaged by person
            (None, True, SUBJECT),
        ],
    )
    def test_several_values_of_one_person_are_averaged_or_the_claim_is_narrow(
        self,
        labels: list[str] | None,
        these_subjects: bool,
        expected: tuple[str, str, bool],
        study: Study,
    ):
        graph = workflow()
        both = paths(study, [*RUN_ONE, *RUN_TWO])
        read = Extract(
            in_files=both, labels=[*SUBJECTS, *SUBJECTS], mask_files=paths(study, ["atlas"])
        )
        test = FixedRegionTest(names=NAMES, these_subjects=these_subjects)
        if labels:
            test.inputs.labels = labels
        fields = [(f, f) for f in ("values", "coverage", "sizes")]
        graph.connect([(Node(read, name="extract"), Node(test, name="test"), fields)])
        finding = of_statistic(graph, study)
        assert verdict(finding) == expected
        if expected is LEAK:
            assert finding.reason.startswith("its 8 values are of 4 people")
            assert finding.cure.startswith("average the values of each person first")

    @pytest.mark.parametrize("scheme", [LeaveOneOut(), KFold(2)])
    def test_the_whole_procedure_flip_takes_them(self, scheme: Scheme, study: Study):
        graph = analysis(study, by_fold(study, scheme), "row_masks", FlipTest)
        found = judged(graph, study)
        assert [verdict(f) for f in found] == [SUBJECT] * 5
        assert [f.kind for f in found] == ["extraction"] * 4 + ["statistic"]

    @pytest.mark.parametrize("kind", statistics())
    def test_no_statistic_takes_values_marked_biased(self, kind: type, study: Study):
        region = function("choose", a=paths(study, RUN_ONE))
        graph = analysis(study, region, "out", kind, exploratory=True)
        finding = of_statistic(graph, study)
        assert verdict(finding) == LEAK
        assert finding.reason == "the values are marked biased, and no statistic accepts them"
        assert "report the exploratory value alone" in finding.cure

    @pytest.mark.parametrize("kind", statistics())
    def test_bias_is_not_washed_off_on_the_way(self, kind: type, study: Study):
        graph = workflow()
        read = Extract(in_files=paths(study, RUN_ONE), labels=list(SUBJECTS), exploratory=True)
        between = Node(Merge(2), name="between")
        reading = Node(read, name="extract")
        other = Node(
            Extract(
                in_files=paths(study, RUN_TWO),
                labels=list(SUBJECTS),
                mask_files=paths(study, ["atlas"]),
            ),
            name="other",
        )
        graph.connect(function("choose", a=paths(study, RUN_ONE)), "out", reading, "mask_files")
        graph.connect(
            [(reading, between, [("values", "in1")]), (other, between, [("values", "in2")])]
        )
        after = function("after", a=None)
        graph.connect(between, "out", after, "a")
        test = statistic(kind, study, SUBJECTS)
        graph.connect(after, "out", test, kind.statistic.values)
        assert "marked biased" in of_statistic(graph, study).reason

    @pytest.mark.parametrize("kind", statistics())
    def test_circular_values_are_refused_at_the_statistic_too(self, kind: type, study: Study):
        graph = analysis(study, function("choose", a=paths(study, RUN_ONE)), "out", kind)
        found = judged(graph, study)
        assert [verdict(f) for f in found] == [LEAK] * 5
        assert found[-1].reason == "its values were read in a region chosen on those very data"

    def test_a_region_of_declared_origin_is_tested_at_subject_level(self, study: Study):
        graph = analysis(study, function("choose", a=paths(study, ["atlas"])), "out")
        assert verdict(of_statistic(graph, study)) == SUBJECT

    def test_the_level_of_a_test_is_the_weakest_of_its_meetings(self, study: Study):
        # Each subject's own mask from the own first run, but for one from an atlas.
        masks = [*paths(study, RUN_ONE[:3]), *paths(study, ["atlas"])]
        graph = analysis(study, function("choose", "a", a=masks), "out", data=RUN_TWO)
        found = judged(graph, study)
        assert [verdict(f) for f in found] == [RUN, RUN, RUN, SUBJECT, RUN]

    def test_a_template_of_anatomies_leaves_the_subject_level(self, study: Study):
        anatomies = paths(study, [f"sub-{s}_T1w" for s in SUBJECTS])
        graph = analysis(study, function("choose", a=anatomies), "out")
        assert [verdict(f) for f in judged(graph, study)] == [SUBJECT] * 5

    def test_the_mark_survives_other_peoples_nodes(self, study: Study):
        graph = workflow()
        read = Node(Extract(in_files=paths(study, RUN_ONE), labels=list(SUBJECTS)), name="extract")
        graph.connect(by_fold(study, LeaveOneOut()), "row_masks", read, "mask_files")
        after, test = function("after", a=None), statistic(FixedRegionTest, study, SUBJECTS)
        graph.connect([(read, after, [("values", "a")]), (after, test, [("out", "values")])])
        assert "cross-fitted" in of_statistic(graph, study).reason

    def test_values_from_a_file_nobody_declared_are_unproven(self, study: Study):
        graph = workflow()
        test = statistic(FixedRegionTest, study, SUBJECTS)
        graph.connect(function("read", a=paths(study, ["stranger"])), "out", test, "values")
        finding = of_statistic(graph, study)
        assert verdict(finding) == UNPROVEN
        assert "stranger.nii" in finding.reason

    def test_values_read_by_somebody_elses_node_are_not_called_apart(self, study: Study):
        # The circular analysis, with the reading written by hand.
        graph = workflow()
        test = statistic(FixedRegionTest, study, SUBJECTS)
        graph.connect(function("read", a=paths(study, RUN_ONE)), "out", test, "values")
        assert of_statistic(graph, study).verdict == "unproven"

    def test_values_typed_in_are_not_passed_in_silence(self, study: Study):
        graph = workflow()
        typed = FixedRegionTest(names=NAMES, values=[1.0, 2.0, 4.0], coverage=[1.0] * 3, sizes=[5])
        graph.add_nodes([Node(typed, name="test")])
        assert of_statistic(graph, study).verdict == "unproven"

    def test_a_stranger_that_joins_the_values_is_not_overlooked(self, study: Study):
        graph = workflow()
        read = Node(Extract(in_files=paths(study, RUN_ONE), labels=list(SUBJECTS)), name="extract")
        graph.connect(function("choose", a=paths(study, ["atlas"])), "out", read, "mask_files")
        adjust = function("adjust", a=None, b=paths(study, ["stranger"]))
        test = statistic(FixedRegionTest, study, SUBJECTS)
        graph.connect([(read, adjust, [("values", "a")]), (adjust, test, [("out", "values")])])
        assert of_statistic(graph, study).verdict == "unproven"


# -- what a refusal says -----------------------------------------------------------------------


class TestRefusal:
    def circular(self, study: Study) -> Workflow:
        graph = workflow()
        group = Node(GroupMap(in_files=paths(study, RUN_ONE)), name="group")
        region = Node(ChooseMask(rule=Strongest(5)), name="choose")
        copied = function("smooth", "a", a=paths(study, RUN_ONE))
        read = Node(Extract(labels=list(SUBJECTS)), name="extract")
        graph.connect([(group, region, [("out_file", "in_file")])])
        graph.connect([(region, read, [("mask_file", "mask_files")])])
        graph.connect(copied, "out", read, "in_files")
        return graph

    def test_names_meeting_element_units_both_paths_and_cure(self, study: Study):
        said = refusal(self.circular(study), study)
        assert said.startswith("refused before anything ran: 1 cause, 4 findings")
        assert "leak: w.extract, element 0: the mask was chosen on the data it would be" in said
        assert "shared sub-01_run-1_bold" in said
        mask, data = said.index("sub-01_run-1_bold.nii"), said.rindex("sub-01_run-1_bold.nii")
        assert said[mask:].startswith(
            "sub-01_run-1_bold.nii -> w.group.out_file -> w.choose.mask_file data"
        )
        assert said[data:].startswith("sub-01_run-1_bold.nii -> w.smooth.out[0] cure")
        assert "cure choose the region without the tested data" in said

    def test_elements_with_the_same_fault_are_told_once(self, study: Study):
        said = refusal(self.circular(study), study)
        assert said.count("leak: w.extract") == 1
        assert "3 more elements of this node" in said

    def test_all_faults_are_listed(self, study: Study):
        graph = self.circular(study)
        unknown = function("outside", a=paths(study, ["stranger"]))
        read = Node(Extract(in_files=paths(study, RUN_TWO), labels=list(SUBJECTS)), name="second")
        graph.connect(unknown, "out", read, "mask_files")
        said = refusal(graph, study)
        assert "8 findings" in said
        assert "leak: w.extract, element 0" in said
        assert "unproven: w.second, element 0: nobody has declared what stranger.nii" in said
        assert "state where the region comes from: origin in STUDY.toml" in said

    def test_where_precision_was_lost_is_told_with_what_brings_it_back(self, study: Study):
        # Element by element this is clean; but nobody says that the foreign node works so.
        graph = workflow()
        masks = function("choose", a=paths(study, RUN_ONE))
        read = Node(Extract(in_files=paths(study, RUN_TWO), labels=list(SUBJECTS)), name="extract")
        graph.connect(masks, "out", read, "mask_files")
        found = judged(graph, study)
        assert [verdict(f) for f in found] == [OTHER_RUNS] * 4
        assert [bool(f.lost) for f in found] == [True, False, False, False]
        said = refusal(graph, study)
        assert "lost or it only seems so, at w.choose: what Function does is not known" in said
        assert "contract(NODE, rules={'out': each(INPUT)}" in said

    def test_a_leak_that_is_seen_element_by_element_has_lost_nothing(self, study: Study):
        (finding,) = meeting(study, [RUN_ONE[0]], [RUN_ONE[0]])
        assert finding.verdict == "leak"
        graph = workflow()
        read = Node(Extract(in_files=paths(study, RUN_ONE), labels=list(SUBJECTS)), name="extract")
        own = Node(ChooseEach(in_files=paths(study, RUN_ONE), rule=Strongest(1)), name="own")
        graph.connect(own, "row_masks", read, "mask_files")
        assert [(verdict(f), f.lost) for f in judged(graph, study)] == [(LEAK, ())] * 4

    def test_paths_of_a_leak_at_subject_level(self, study: Study):
        graph = workflow()
        region = function("choose", a=paths(study, ["sub-02_run-1_bold", "sub-01_run-1_bold"]))
        read = Node(
            Extract(in_files=paths(study, ["sub-01_run-2_bold"]), labels=["a"]), name="extract"
        )
        graph.connect(region, "out", read, "mask_files")
        (finding,) = judged(graph, study)
        assert finding.mask_path == ("sub-01_run-1_bold.nii", "w.choose.out")
        assert finding.data_path == ("sub-01_run-2_bold.nii",)
        assert "leave the tested subject out of the selection" in finding.cure

    def test_paths_when_the_units_overlap_and_are_not_the_same(self, study: Study):
        (finding,) = meeting(study, ["sub-05_bold"], ["sub-05_run-1_bold"])
        assert finding.mask_path == ("sub-05_bold.nii", "w.choose.out")
        assert finding.data_path == ("sub-05_run-1_bold.nii",)
