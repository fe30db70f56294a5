"""The guard around real runs on small NIfTI maps: before, while running, and without it."""

from __future__ import annotations

import json
import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import pytest
import running
from nipype import Function, IdentityInterface, JoinNode, MapNode, Merge, Node, Workflow
from nipype.pipeline.engine.nodes import NodeExecutionError
from planting import a_grid, plant
from running import called, hidden
from sequester.nodes.errors import EmptyFoldError, InputError, Refused
from sequester.nodes.images import read_map, write_map
from sequester.nodes.interfaces import (
    ChooseByFold,
    ChooseMask,
    Extract,
    FixedRegionTest,
    GivenMask,
    GroupMap,
    SphereMask,
    SubjectMaps,
)
from sequester.nodes.masks import Cluster, Strongest, Threshold
from sequester.nodes.procedure import Procedure
from sequester.nodes.space import Grid
from sequester.nodes.touch import Unit
from sequester.workflows import plans
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.study import Origin, Row, Study

GRID = a_grid((6, 6, 6))
LABELS = [f"{i:02d}" for i in range(1, 9)]
PROCEDURE = Procedure(Threshold(p=0.05))


pytestmark = pytest.mark.usefixtures("quiet_engine")


def effects(seed: int) -> Any:
    return np.random.default_rng(seed).normal(0.8, 1, GRID.shape).astype(np.float32)


@pytest.fixture
def study(tmp_path: Path) -> Study:
    """Eight subjects with an effect map each, and an atlas of declared origin."""
    return plant(
        tmp_path / "study",
        {label: effects(i) for i, label in enumerate(LABELS)},
        GRID,
        {"atlas": np.random.default_rng(99).random(GRID.shape) < 0.2},
        [Origin("an atlas of 1909", ("atlas.nii",))],
    )


@pytest.fixture
def atlas(study: Study) -> str:
    return str(study.root / "atlas.nii")


def workflow(name: str = "w") -> Workflow:
    """One that keeps outputs which nothing is connected to."""
    return running.workflow(name, remove_unnecessary_outputs="false")


def leave_one_out(maps: list[str]) -> Workflow:
    graph = workflow()
    choose = Node(ChooseByFold(in_files=maps, labels=LABELS, procedure=PROCEDURE), name="choose")
    read = Node(Extract(in_files=maps, labels=LABELS), name="extract")
    graph.connect(choose, "row_masks", read, "mask_files")
    return graph


def circular(maps: list[str], **extract: Any) -> Workflow:
    graph = workflow()
    group = Node(GroupMap(in_files=maps), name="group")
    choose = Node(ChooseMask(rule=Strongest(9)), name="choose")
    read = Node(Extract(in_files=maps, labels=LABELS, **extract), name="extract")
    graph.connect([(group, choose, [("out_file", "in_file")])])
    graph.connect([(choose, read, [("mask_file", "mask_files")])])
    return graph


def ran(graph: Workflow, study: Study) -> tuple[GuardPlugin, dict[str, Any]]:
    """The guard, and the nodes that ran, by name."""
    guard = GuardPlugin(study)
    done = graph.run(plugin=guard)
    return guard, {node.name: node for node in done.nodes()}


def results_in(folder: Path) -> list[str]:
    """The nodes that have left a result."""
    return sorted({path.parent.name for path in folder.rglob("result_*.pklz")})


class TestBefore:
    def test_a_refusal_executes_nothing(self, study: Study, maps: list[str], tmp_path: Path):
        graph = circular(maps)
        trace = tmp_path / "trace"
        side = Node(called(f"def act(x):\n    open({str(trace)!r}, 'w')\n", x=1), name="side")
        graph.add_nodes([side])
        guard = GuardPlugin(study)
        with pytest.raises(GuardRefused, match="refused before anything ran: 1 cause, 8 findings"):
            graph.run(plugin=guard)
        assert not trace.exists()
        assert results_in(tmp_path) == []
        assert [path for path in tmp_path.rglob("*.nii*") if path.parent != study.root] == []
        assert [f.verdict for f in guard.findings] == ["leak"] * 8

        # The trap works: without the circular branch the function does run.
        fine = workflow("fine")
        fine.add_nodes([side.clone("alone")])
        fine.run(plugin=GuardPlugin(study))
        assert trace.exists()

    def test_a_dry_run_judges_and_executes_nothing(
        self, study: Study, maps: list[str], tmp_path: Path
    ):
        guard = GuardPlugin(study, dry=True)
        leave_one_out(maps).run(plugin=guard)
        assert [(f.verdict, f.level) for f in guard.findings] == [("apart", "subject")] * 8
        assert results_in(tmp_path) == []
        with pytest.raises(GuardRefused, match="before anything ran"):
            circular(maps).run(plugin=GuardPlugin(study, dry=True))

    def test_the_refusal_carries_its_findings(self, study: Study, maps: list[str]):
        with pytest.raises(GuardRefused) as raised:
            circular(maps).run(plugin=GuardPlugin(study))
        assert [f.item for f in raised.value.findings] == list(range(8))
        assert raised.value.exit_code == 3

    def test_marking_nodes_as_done_is_refused(self, study: Study, maps: list[str], tmp_path: Path):
        with pytest.raises(Refused, match="updatehash marks nodes as done that never ran"):
            leave_one_out(maps).run(plugin=GuardPlugin(study), updatehash=True)
        assert results_in(tmp_path) == []


class TestClearance:
    def test_a_cleared_run_gives_the_values(self, study: Study, maps: list[str]):
        guard, nodes = ran(leave_one_out(maps), study)
        stack = np.stack([read_map(path)[0].ravel() for path in maps])
        ready = PROCEDURE.prepare(stack, LABELS, Grid(GRID.shape, GRID.affine))
        assert tuple(nodes["extract"].result.outputs.values) == ready.outcome().values
        assert {f.verdict for f in guard.findings} == {"apart"}

    def test_without_the_guard_an_extraction_refuses(self, maps: list[str]):
        with pytest.raises(NodeExecutionError, match="this extraction has no clearance"):
            leave_one_out(maps).run(plugin="Linear")

    def test_on_a_warm_cache_too(self, study: Study, maps: list[str], tmp_path: Path):
        def graph() -> Workflow:
            made = leave_one_out(maps)
            made.config["execution"]["hash_method"] = "content"  # as the guard sets it: a hit
            return made

        first = graph()
        ran(first, study)
        assert results_in(tmp_path) == ["choose", "extract"]
        for again in (first, graph()):
            with pytest.raises(NodeExecutionError, match="this extraction has no clearance"):
                again.run(plugin="Linear")

    def test_the_users_workflow_is_left_as_it_was_and_runs_again(
        self, study: Study, maps: list[str]
    ):
        graph = leave_one_out(maps)
        first = ran(graph, study)[1]["extract"].result.outputs.values
        assert not graph.get_node("extract").inputs.clearance
        second = ran(graph, study)[1]["extract"].result.outputs.values
        assert first == second

    def test_a_clearance_does_not_disturb_the_cache(
        self, study: Study, maps: list[str], tmp_path: Path
    ):
        graph = leave_one_out(maps)
        ran(graph, study)
        (mask,) = tmp_path.rglob("fold00000.nii.gz")
        before = mask.stat().st_mtime_ns
        ran(graph, study)
        assert mask.stat().st_mtime_ns == before

    def test_our_nodes_tell_files_of_one_size_and_time_apart(self, study: Study, maps: list[str]):
        for path in maps:
            os.utime(path, ns=(0, 0))
        means = []
        for pair in (maps[:2], maps[2:4]):
            graph = workflow()
            graph.add_nodes([Node(GroupMap(in_files=pair, kind="mean"), name="group")])
            _, nodes = ran(graph, study)
            means.append(read_map(nodes["group"].result.outputs.out_file)[0])
        assert not np.array_equal(*means)

    def test_a_refused_workflow_runs_when_it_is_mended(
        self, study: Study, maps: list[str], atlas: str
    ):
        graph = circular(maps)
        with pytest.raises(GuardRefused):
            graph.run(plugin=GuardPlugin(study))
        graph.get_node("group").inputs.in_files = [atlas]
        graph.get_node("choose").inputs.rule = Strongest(5, "mean")
        graph.get_node("group").inputs.kind = "mean"
        _, nodes = ran(graph, study)
        assert len(nodes["extract"].result.outputs.values) == 8

    def test_an_iterated_extraction_is_cleared_too(self, study: Study, maps: list[str], atlas: str):
        graph = workflow()
        read = MapNode(Extract(labels=LABELS[:2]), iterfield=["in_files"], name="read")
        read.inputs.in_files = [maps[:2], maps[2:4]]
        graph.connect(
            Node(GivenMask(in_file=atlas, reference=atlas), name="g"),
            "mask_file",
            read,
            "mask_files",
        )
        _, nodes = ran(graph, study)
        assert [len(v) for v in nodes["read"].result.outputs.values] == [2, 2]

    def test_an_iterated_extraction_without_the_guard_refuses(self, maps: list[str], atlas: str):
        graph = workflow()
        read = MapNode(Extract(labels=LABELS[:2]), iterfield=["in_files"], name="read")
        read.inputs.in_files, read.inputs.mask_files = [maps[:2], maps[2:4]], [atlas]
        graph.add_nodes([read])
        with pytest.raises(NodeExecutionError, match="this extraction has no clearance"):
            graph.run(plugin="Linear")

    def test_exploration_runs_and_its_finding_is_an_allowed_leak(
        self, study: Study, maps: list[str]
    ):
        guard, nodes = ran(circular(maps, exploratory=True), study)
        assert {(f.verdict, f.allowed) for f in guard.findings} == {("leak", True)}
        assert len(nodes["extract"].result.outputs.values) == 8


class TestWhileRunning:
    """What a node is really given is compared with what the graph promised."""

    def extraction(self, mask: Function | str, data: Function | list[str]) -> Workflow:
        graph = workflow()
        read = Node(Extract(labels=["x"]), name="extract")
        for name, field, side in (("mask", "mask_files", mask), ("data", "in_files", data)):
            if isinstance(side, Function):
                graph.connect(Node(side, name=name), "out", read, field)
            else:
                read.inputs.trait_set(**{field: side})
        return graph

    def refused(self, graph: Workflow, study: Study, tmp_path: Path) -> GuardRefused:
        """It starts, and is refused at the extraction, which does not run."""
        guard = GuardPlugin(study)
        with pytest.raises(GuardRefused, match="refused while running") as raised:
            graph.run(plugin=guard)
        assert "extract" not in results_in(tmp_path)
        assert results_in(tmp_path) != []
        assert set(raised.value.findings) <= set(guard.findings)
        return raised.value

    def test_a_path_written_into_a_mask_function(
        self, study: Study, maps: list[str], tmp_path: Path
    ):
        # It is given subject 2's map, and returns subject 1's.
        hard = called(f"def mask(x):\n    return {hidden(maps[0])}\n", x=maps[1])
        error = self.refused(self.extraction(hard, [maps[0]]), study, tmp_path)
        (finding,) = error.findings
        assert finding.verdict == "leak"
        assert study.table.describe(finding.shared) == "sub-01_bold"
        assert finding.mask_path == ("sub-01.nii (seen while running)",)

    def test_a_path_written_into_a_data_function(
        self, study: Study, maps: list[str], tmp_path: Path
    ):
        hard = called(f"def data(x):\n    return [{hidden(maps[1])}]\n", x=maps[0])
        region = called("def mask(x):\n    return x\n", x=maps[1])
        error = self.refused(self.extraction(region, hard), study, tmp_path)
        assert study.table.describe(error.findings[0].shared) == "sub-02_bold"
        assert error.findings[0].data_path == ("sub-02.nii (seen while running)",)

    @pytest.mark.parametrize("place", ["in the working folder", "elsewhere"])
    def test_a_copy_under_another_name_is_known_by_its_bytes(
        self, place: str, study: Study, maps: list[str], tmp_path: Path
    ):
        target = "'copy.nii'" if place == "in the working folder" else repr(str(tmp_path / "c.nii"))
        body = (
            "def mask(x):\n    import os, shutil\n"
            f"    return os.path.abspath(shutil.copy({hidden(maps[0])}, {target}))\n"
        )
        error = self.refused(self.extraction(called(body, x=maps[1]), [maps[0]]), study, tmp_path)
        assert study.table.describe(error.findings[0].shared) == "sub-01_bold"

    def test_a_path_that_slips_in_among_the_maps_of_a_group(
        self, study: Study, maps: list[str], tmp_path: Path
    ):
        # The refusal comes at the first node that sees the file, before it is used.
        graph = workflow()
        slip = Node(
            called(f"def more(x):\n    return x + [{hidden(maps[0])}]\n", x=maps[1:]), name="slip"
        )
        group, choose = (
            Node(GroupMap(), name="group"),
            Node(ChooseMask(rule=Strongest(9)), name="choose"),
        )
        read = Node(Extract(in_files=[maps[0]], labels=["01"]), name="extract")
        graph.connect([(slip, group, [("out", "in_files")])])
        graph.connect([(group, choose, [("out_file", "in_file")])])
        graph.connect([(choose, read, [("mask_file", "mask_files")])])
        self.refused(graph, study, tmp_path)
        assert results_in(tmp_path) == ["slip"]

    @pytest.mark.parametrize("kind", ["MapNode", "JoinNode"])
    def test_a_path_that_slips_in_among_many(
        self, kind: str, study: Study, maps: list[str], tmp_path: Path
    ):
        # One step for each of subjects 2 and 3, and both return subject 1's map.
        body = f"def hard(x):\n    return {hidden(maps[0])}\n"
        step = Function(input_names=["x"], output_names=["out"])
        step.inputs.function_str = body
        graph = workflow()
        choose = Node(ChooseMask(rule=Strongest(9)), name="choose")
        read = Node(Extract(in_files=[maps[0]], labels=["01"]), name="extract")
        if kind == "MapNode":
            each: Node = MapNode(step, iterfield=["x"], name="each")
            each.inputs.x = maps[1:3]
            group: Node = Node(GroupMap(kind="mean"), name="group")
        else:
            each = Node(step, name="each")
            people = Node(IdentityInterface(["x"]), name="people")
            people.iterables = ("x", maps[1:3])
            graph.connect(people, "x", each, "x")
            group = JoinNode(
                GroupMap(kind="mean"), joinsource="people", joinfield="in_files", name="group"
            )
        graph.connect([(each, group, [("out", "in_files")])])
        graph.connect([(group, choose, [("out_file", "in_file")])])
        graph.connect([(choose, read, [("mask_file", "mask_files")])])
        (finding,) = self.refused(graph, study, tmp_path).findings
        assert (finding.verdict, study.table.describe(finding.shared)) == ("leak", "sub-01_bold")

    def test_a_long_text_is_no_path(self, study: Study):
        graph = workflow()
        say = Node(called("def say(x):\n    return x\n", x="word " * 80), name="say")
        hear = Node(called("def hear(x):\n    return x\n", x=""), name="hear")
        graph.connect(say, "out", hear, "x")
        _, nodes = ran(graph, study)
        assert nodes["hear"].result.outputs.out == "word " * 80

    def test_a_promise_that_is_kept_passes(self, study: Study, maps: list[str]):
        hard = called(f"def mask(x):\n    return {hidden(maps[1])}\n", x=maps[1])
        guard, nodes = ran(self.extraction(hard, [maps[0]]), study)
        assert len(nodes["extract"].result.outputs.values) == 1
        assert [(f.verdict, f.level) for f in guard.findings] == [("apart", "subject")]

    def test_a_cached_function_is_looked_at_too(
        self, study: Study, maps: list[str], tmp_path: Path
    ):
        graph = self.extraction(
            called(f"def mask(x):\n    return {hidden(maps[0])}\n", x=maps[1]), [maps[0]]
        )
        self.refused(graph, study, tmp_path)
        (cached,) = tmp_path.rglob("mask/result_*.pklz")
        made = cached.stat().st_mtime_ns
        (finding,) = self.refused(graph, study, tmp_path).findings
        assert (finding.verdict, cached.stat().st_mtime_ns) == ("leak", made)

    def test_other_branches_finish(self, study: Study, maps: list[str], tmp_path: Path):
        graph = self.extraction(
            called(f"def mask(x):\n    return {hidden(maps[0])}\n", x=maps[1]), [maps[0]]
        )
        trace = tmp_path / "trace"
        body = f"def act(x):\n    open({str(trace)!r}, 'w')\n    return x\n"
        late = Node(called(body, x=1), name="late")
        # Sorted behind the extraction, so that it runs after the refusal.
        graph.connect(
            [(Node(called("def one(x):\n    return x\n", x=2), name="one"), late, [("out", "x")])]
        )
        self.refused(graph, study, tmp_path)
        assert trace.exists()

    def test_a_file_that_nobody_declared_does_not_slip_in(
        self, study: Study, maps: list[str], tmp_path: Path
    ):
        stranger = write_map(tmp_path / "stranger.nii", effects(50) > 1, GRID)
        hard = called(f"def mask(x):\n    return {hidden(stranger)}\n", x=maps[1])
        (finding,) = self.refused(self.extraction(hard, [maps[0]]), study, tmp_path).findings
        assert (finding.verdict, finding.shared) == ("unproven", 0)
        assert "stranger.nii" in str(finding)

    @pytest.mark.parametrize("where", ["of an earlier run", "of another branch"])
    def test_a_product_that_no_edge_brings_does_not_slip_in(
        self, where: str, study: Study, maps: list[str], atlas: str, tmp_path: Path
    ):
        # The mask of a circular look, by its path in the working folder.
        ran(circular(maps, exploratory=True), study)
        (mask,) = tmp_path.rglob("choose/mask.nii.gz")
        hard = called(f"def mask(x):\n    return {hidden(mask)}\n", x=atlas)
        another = where == "of another branch"
        graph = circular(maps, exploratory=True) if another else workflow("second")
        read = Node(Extract(in_files=maps, labels=LABELS), name="read")
        graph.connect(Node(hard, name="hard"), "out", read, "mask_files")
        with pytest.raises(GuardRefused, match="refused while running") as raised:
            graph.run(plugin=GuardPlugin(study))
        assert {(f.node.split(".")[-1], f.verdict) for f in raised.value.findings} == {
            ("read", "unproven")
        }
        assert "read" not in results_in(tmp_path)

    def test_a_second_run_says_what_the_first_said(
        self, study: Study, maps: list[str], tmp_path: Path
    ):
        # A step that puts its product outside of the working folder, cached in the second run.
        body = (
            "def put(x):\n    import nibabel as nib\n"
            f"    image, place = nib.load(x), {str(tmp_path / 'put.nii')!r}\n"
            "    nib.Nifti1Image(image.get_fdata() + 1, image.affine).to_filename(place)\n"
            "    return place\n"
        )
        graph = self.extraction(called(body, x=maps[1]), [maps[0]])
        told = []
        for _ in range(2):
            try:
                ran(graph, study)
                told.append("")
            except GuardRefused as error:
                told.append(str(error))
        assert told[0] == told[1]

    def test_several_refusals_arrive_as_one(self, study: Study, maps: list[str], tmp_path: Path):
        graph = self.extraction(
            called(f"def mask(x):\n    return {hidden(maps[0])}\n", x=maps[1]), [maps[0]]
        )
        again = Node(Extract(in_files=[maps[0]], labels=["x"]), name="again")
        graph.connect(graph.get_node("mask"), "out", again, "mask_files")
        graph.add_nodes([Node(called("def fail(x):\n    return 1 / 0\n", x=1), name="fail")])
        error = self.refused(graph, study, tmp_path)
        assert sorted(f.node for f in error.findings) == ["w.again", "w.extract"]
        assert "again" not in results_in(tmp_path)

    def test_a_refusal_arrives_as_itself_when_the_engine_stops_at_the_first_fault(
        self, study: Study, maps: list[str], tmp_path: Path
    ):
        hard = called(f"def mask(x):\n    return {hidden(maps[0])}\n", x=maps[1])
        graph = self.extraction(hard, [maps[0]])
        graph.config["execution"]["stop_on_first_crash"] = "true"
        assert self.refused(graph, study, tmp_path).findings[0].verdict == "leak"

    def test_the_refusal_says_whether_nodes_had_run(
        self, study: Study, maps: list[str], tmp_path: Path
    ):
        hard = called(f"def mask(x):\n    return {hidden(maps[0])}\n", x=maps[1])
        assert self.refused(self.extraction(hard, [maps[0]]), study, tmp_path).started

    def test_volumes_that_are_not_used_are_not_touched(self, study: Study, tmp_path: Path):
        stack = np.stack([effects(i) for i in range(8)], axis=3)
        nib.Nifti1Image(stack, GRID.affine).to_filename(study.root / "four.nii")
        path = str(study.root / "four.nii")
        rows = [
            Row("four.nii", i, Unit(sub=label, suffix="bold"), exclude_reason="moved" * (i == 7))
            for i, label in enumerate(LABELS)
        ]
        graph = workflow()
        together = SubjectMaps(
            in_files=[[path]] * 7, volumes=[[i] for i in range(7)], labels=LABELS[:7]
        )
        each = Node(together, name="each")
        choose = Node(ChooseByFold(labels=LABELS[:7], procedure=PROCEDURE), name="choose")
        read = Node(Extract(labels=LABELS[:7]), name="extract")
        graph.connect([(each, choose, [("out_files", "in_files")])])
        graph.connect([(each, read, [("out_files", "in_files")])])
        graph.connect([(choose, read, [("row_masks", "mask_files")])])
        used = Study(study.root, rows)
        findings = ran(graph, used)[0].findings
        assert [(f.verdict, f.level) for f in findings] == [("apart", "subject")] * 7
        assert [used.table.describe(f.data_units) for f in findings] == [
            f"sub-{label}_bold" for label in LABELS[:7]
        ]


class TestErrors:
    def test_an_error_of_ours_arrives_as_itself(self, study: Study, maps: list[str], atlas: str):
        graph = workflow()
        read = Node(Extract(in_files=maps, labels=LABELS), name="extract")
        mask = Node(GivenMask(in_file=atlas), name="given")
        coarse = a_grid((6, 6, 6), 4.0)
        mask.inputs.reference = str(write_map(study.root / "coarse.nii", effects(0), coarse))
        graph.connect(mask, "mask_file", read, "mask_files")
        with pytest.raises(InputError, match="grids differ") as raised:
            graph.run(plugin=GuardPlugin(study))
        assert type(raised.value) is InputError
        assert raised.value.exit_code == 2
        assert "of 3 x 3 x 3 mm" in raised.value.fields["got"]
        assert "of 4 x 4 x 4 mm" in raised.value.fields["expected"]

    def test_an_error_of_somebody_else_arrives_as_the_engine_tells_it(self, study: Study):
        graph = workflow()
        graph.add_nodes([Node(called("def fail(x):\n    return 1 / 0\n", x=1), name="fail")])
        with pytest.raises(NodeExecutionError, match="ZeroDivisionError"):
            graph.run(plugin=GuardPlugin(study))

    def test_an_error_in_an_element_of_a_map_node_arrives_as_itself(self, study: Study, atlas: str):
        empty = str(write_map(study.root / "empty.nii", np.zeros(GRID.shape, bool), GRID))
        graph = workflow()
        given = MapNode(GivenMask(reference=atlas), iterfield=["in_file"], name="given")
        given.inputs.in_file = [atlas, empty]
        graph.add_nodes([given])
        with pytest.raises(InputError, match="empty mask"):
            graph.run(plugin=GuardPlugin(study))

    def test_a_stop_on_an_empty_fold_arrives_as_itself(self, study: Study, maps: list[str]):
        graph = workflow()
        stop = Procedure(Threshold(height=99.0), on_empty="stop")
        choose = ChooseByFold(in_files=maps, labels=LABELS, procedure=stop)
        graph.add_nodes([Node(choose, name="choose")])
        with pytest.raises(InputError, match="8 of 8 folds found no region") as raised:
            graph.run(plugin=GuardPlugin(study))
        assert type(raised.value) is EmptyFoldError


class TestListener:
    def test_is_told_of_every_node(self, study: Study, maps: list[str]):
        heard: list[tuple[str, str, int, int]] = []
        guard = GuardPlugin(study, lambda *what: heard.append(what))
        leave_one_out(maps).run(plugin=guard)
        assert heard == [
            ("start", "w.choose", 0, 2),
            ("end", "w.choose", 1, 2),
            ("start", "w.extract", 1, 2),
            ("end", "w.extract", 2, 2),
        ]


# -- the plans ---------------------------------------------------------------------------------

WHO = ["h", "c", "a", "g", "b", "c", "d", "f"]  # out of order, and "c" has two maps
CLUSTER = Procedure(Cluster(p=0.05, min_size=2), on_empty="strongest", k=5)
SHIFT = (  # somebody's own first step: makes another file of a map
    "def shift(x, by=0.125):\n"
    "    import os, nibabel as nib\n"
    "    image = nib.load(x)\n"
    "    made = nib.Nifti1Image(image.get_fdata(dtype='float32') + by, image.affine)\n"
    "    made.to_filename('shifted.nii')\n"
    "    return os.path.abspath('shifted.nii')\n"
)


def shifted() -> Function:
    made = Function(input_names=["x"], output_names=["out"])
    made.inputs.function_str = SHIFT
    return made


def through_map_node(graph: Workflow, plan: Workflow, maps: list[str]) -> None:
    step = MapNode(shifted(), iterfield=["x"], name="shift")
    step.inputs.x = maps
    graph.connect(step, "out", plan, "inputnode.effects")


def through_join_node(graph: Workflow, plan: Workflow, maps: list[str]) -> None:
    people = Node(IdentityInterface(["x"]), name="people")
    people.iterables = ("x", maps)
    step = Node(shifted(), name="shift")
    join = JoinNode(IdentityInterface(["xs"]), joinsource="people", joinfield="xs", name="join")
    graph.connect([(people, step, [("x", "x")]), (step, join, [("out", "xs")])])
    graph.connect(join, "xs", plan, "inputnode.effects")


class TestPlans:
    @pytest.mark.parametrize("upstream", [through_map_node, through_join_node])
    @pytest.mark.parametrize("procedure", [PROCEDURE, CLUSTER], ids=["threshold", "cluster"])
    def test_leave_one_out_in_somebodys_own_workflow(
        self,
        upstream: Callable[[Workflow, Workflow, list[str]], None],
        procedure: Procedure,
        study: Study,
        maps: list[str],
    ):
        graph = workflow("own")
        plan = plans.leave_one_subject_out("arbor", procedure, WHO, n_flips=19)
        upstream(graph, plan, maps)
        guard, nodes = ran(graph, study)
        assert [(f.kind, f.verdict, f.level) for f in guard.findings] == [
            ("extraction", "apart", "subject")
        ] * 8 + [("statistic", "apart", "subject")]

        stack = np.stack([read_map(path)[0].ravel() + np.float32(0.125) for path in maps])
        ready = procedure.prepare(stack, WHO, Grid(GRID.shape, GRID.affine))
        outcome = ready.outcome()
        assert tuple(nodes["extract"].result.outputs.values) == outcome.values
        assert tuple(nodes["extract"].result.outputs.coverage) == outcome.coverage
        for path, mask in zip(
            nodes["choose"].result.outputs.mask_files, ready.masks(), strict=True
        ):
            assert np.array_equal(read_map(path)[0].ravel() != 0, mask)
        assert len(set(outcome.values)) == 8  # each value is its own
        assert len(ready.masks()) == 7

    def test_one_flip_test_of_a_plan_is_that_of_the_procedure(self, study: Study, maps: list[str]):
        graph = workflow("own")
        plan = plans.leave_one_subject_out("arbor", PROCEDURE, LABELS, n_flips=99, seed=5)
        through_map_node(graph, plan, maps)
        _, nodes = ran(graph, study)
        record = json.loads(Path(nodes["test"].result.outputs.record_file).read_text())
        stack = np.stack([read_map(path)[0].ravel() + np.float32(0.125) for path in maps])
        test = PROCEDURE.prepare(stack, LABELS, Grid(GRID.shape, GRID.affine)).flip_test(99, 5)
        assert (record["p"], record["t"]) == (test.p, test.t)

    def test_a_search_region_of_declared_origin_narrows_the_plan(
        self, study: Study, maps: list[str], atlas: str
    ):
        graph = workflow("own")
        search = plans.node(GivenMask(), "search", in_file=atlas, reference=maps[0])
        plan = plans.leave_one_subject_out("arbor", PROCEDURE, LABELS, search, n_flips=19)
        through_map_node(graph, plan, maps)
        guard, nodes = ran(graph, study)
        assert {f.verdict for f in guard.findings} == {"apart"}
        assert guard.findings[0].origins == ("an atlas of 1909",)
        inside = read_map(atlas)[0] != 0
        for path in nodes["choose"].result.outputs.mask_files:
            assert not (read_map(path)[0][~inside] != 0).any()

    def test_a_plain_t_test_in_its_place_is_refused(self, study: Study, maps: list[str]):
        graph = workflow("own")
        plan = plans.leave_one_subject_out("arbor", PROCEDURE, LABELS, test="t")
        through_map_node(graph, plan, maps)
        with pytest.raises(GuardRefused, match="8 values are cross-fitted"):
            graph.run(plugin=GuardPlugin(study))

    def test_a_priori_region_by_sphere(self, study: Study, maps: list[str]):
        graph = workflow("own")
        ball = plans.node(
            SphereMask(),
            "region",
            reference=maps[0],
            centre=(6.0, 6.0, 6.0),
            radius=4.0,
            origin="a paper of 1911",
        )
        plan = plans.a_priori("brook", LABELS, ball, "4 mm around (6, 6, 6)")
        through_map_node(graph, plan, maps)
        guard, nodes = ran(graph, study)
        assert {(f.verdict, f.level) for f in guard.findings} == {("apart", "subject")}
        grid = Grid(GRID.shape, GRID.affine)
        inside = np.linalg.norm(grid.coordinates() - 6.0, axis=1) <= 4.0
        expected = [
            float((read_map(path)[0].ravel() + np.float32(0.125))[inside].mean(dtype=np.float64))
            for path in maps
        ]
        assert nodes["extract"].result.outputs.values == pytest.approx(expected, rel=1e-12)

    def test_an_exploratory_plan_runs_without_a_test_and_is_refused_with_one(
        self, study: Study, maps: list[str]
    ):
        for test in ("none", "t"):
            graph = workflow("own")
            plan = plans.exploratory("cinder", PROCEDURE, LABELS, test=test)
            through_map_node(graph, plan, maps)
            if test == "none":
                guard, nodes = ran(graph, study)
                assert {(f.verdict, f.allowed) for f in guard.findings} == {("leak", True)}
                assert "test" not in nodes
            else:
                with pytest.raises(GuardRefused, match="9 findings"):
                    graph.run(plugin=GuardPlugin(study))

    def test_values_of_an_exploratory_plan_pass_no_statistic_of_ones_own(
        self, study: Study, maps: list[str]
    ):
        graph = workflow("own")
        plan = plans.exploratory("cinder", PROCEDURE, LABELS)
        through_map_node(graph, plan, maps)
        test = Node(FixedRegionTest(names=("a", "b", "c")), name="test")
        test.inputs.sizes, test.inputs.coverage = [9] * 8, [1.0] * 8
        graph.connect(plan, "outputnode.values", test, "values")
        with pytest.raises(GuardRefused, match="no statistic accepts them"):
            graph.run(plugin=GuardPlugin(study))

    def test_nodes_of_a_plan_hash_content_and_state_their_memory(self):
        plan = plans.leave_one_subject_out("arbor", PROCEDURE, LABELS, mem_gb=3.0)
        for name in ("choose", "extract", "test"):
            node = plan.get_node(name)
            assert node.config["execution"]["hash_method"] == "content"
            assert node.mem_gb == (0.5 if name == "extract" else 3.0)

    def test_two_groups_of_subjects_may_be_merged_upstream(self, study: Study, maps: list[str]):
        graph = workflow("own")
        plan = plans.leave_one_subject_out("arbor", PROCEDURE, LABELS, n_flips=19)
        merge = Node(Merge(2), name="merge")
        for i, part in enumerate((maps[:4], maps[4:]), 1):
            step = MapNode(shifted(), iterfield=["x"], name=f"shift{i}")
            step.inputs.x = part
            graph.connect(step, "out", merge, f"in{i}")
        graph.connect(merge, "out", plan, "inputnode.effects")
        findings = ran(graph, study)[0].findings
        assert {(f.kind, f.verdict, f.level) for f in findings} == {
            (kind, "apart", "subject") for kind in ("extraction", "statistic")
        }
        assert [f.data_units for f in findings[:8]] == [1 << i for i in range(8)]

    def test_a_join_that_comes_right_behind_the_iterable(self, study: Study, maps: list[str]):
        graph = workflow("own")
        plan = plans.leave_one_subject_out("arbor", PROCEDURE, LABELS, n_flips=19)
        people = Node(IdentityInterface(["x"]), name="people")
        people.iterables = ("x", maps)
        join = JoinNode(IdentityInterface(["xs"]), joinsource="people", joinfield="xs", name="join")
        graph.connect([(people, join, [("x", "xs")])])
        graph.connect(join, "xs", plan, "inputnode.effects")
        guard, _ = ran(graph, study)
        assert {f.verdict for f in guard.findings} == {"apart"}
