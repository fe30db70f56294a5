"""Values that go where the guard was told nothing: said by name, and by name only then."""

from __future__ import annotations

import json
import logging
from contextlib import suppress
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner
from gallery import RIGHT, Case
from gallery_parts import (
    Garden,
    empty,
    extract,
    fixed_test,
    foreign,
    mean_of,
    own_test,
    read_and_test,
    reading,
    t_test,
)
from nipype import Function, IdentityInterface, JoinNode, Merge, Node, Select, Workflow
from nipype.interfaces.io import DataSink
from sequester import GuardPlugin, contract
from sequester.nodes.interfaces import GivenMask
from sequester.nodes.interfaces.contracts import told_of
from sequester.nodes.rules import Statistic, only
from sequester.workflows.cli import main
from sequester.workflows.guard import GuardRefused
from sequester.workflows.record import record_of

pytestmark = pytest.mark.usefixtures("quiet_engine")


@pytest.fixture
def garden(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Garden:
    monkeypatch.chdir(tmp_path)
    return Garden(tmp_path / "garden")


def read_in_the_atlas(garden: Garden) -> tuple[Workflow, Node]:
    """Everybody read in a declared atlas, and tested by our t: one judged pair."""
    maps, graph, read = garden.of("lanterns1"), empty(), extract(garden.of("lanterns1"))
    region = Node(GivenMask(in_file=garden.outside("atlas"), reference=maps[0]), "given")
    return read_and_test(graph, region, "mask_file", read, fixed_test("ours")), read


def warned(graph: Workflow, garden: Garden) -> list[str]:
    guard = GuardPlugin(garden.study, dry=True)
    graph.run(plugin=guard)
    assert guard.findings
    return guard.findings.warnings


def test_a_t_test_of_ones_own_beside_one_that_is_judged(garden: Garden):
    graph, read = read_in_the_atlas(garden)
    graph.connect(read, "values", foreign(t_test, "mine"), "values")
    (said,) = warned(graph, garden)
    assert said.startswith("not judged: values from w.extract go into w.mine, of which the guard")


@pytest.mark.parametrize(
    "stated",
    [{}, {"rules": {"out": only("values")}}, {"statistic": Statistic(values="values")}],
    ids=["nothing to state", "a rule", "a statistic"],
)
def test_any_contract_is_an_answer(garden: Garden, stated: dict[str, Any]):
    graph, read = read_in_the_atlas(garden)
    graph.connect(read, "values", contract(foreign(t_test, "mine"), **stated), "values")
    assert warned(graph, garden) == []


def test_so_is_one_of_the_class(garden: Garden):
    class Mine(DataSink):
        """No plumbing: a class of somebody's own, which happens to write files too."""

    node = Node(GivenMask(), "ours")
    assert not told_of(Mine()) and not told_of(node.interface)
    contract(Mine)
    assert told_of(Mine())


def test_plumbing_sinks_and_what_a_statistic_gives_are_not_named(garden: Garden):
    graph, read = read_in_the_atlas(garden)
    merge, pick = Node(Merge(2), "merge"), Node(Select(index=[0]), "pick")
    same, sink = Node(IdentityInterface(["x"]), "same"), Node(DataSink(), "sink")
    plot = foreign(mean_of, "plot")
    graph.connect(
        [
            (read, merge, [("values", "in1"), ("values", "in2")]),
            (merge, pick, [("out", "inlist")]),
            (pick, same, [("out", "x")]),
            (same, sink, [("x", "values")]),
            (graph.get_node("ours"), plot, [("record_file", "values")]),
        ]
    )
    assert warned(graph, garden) == []
    graph.connect(same, "x", foreign(t_test, "mine"), "values")
    (said,) = warned(graph, garden)
    assert "values from w.extract go into w.mine" in said


def test_what_makes_the_values_of_a_judged_statistic_is_not_named(garden: Garden):
    graph, read = read_in_the_atlas(garden)
    mean, test = foreign(mean_of, "mean"), own_test("told")
    graph.connect([(read, mean, [("values", "values")]), (mean, test, [("out", "values")])])
    assert warned(graph, garden) == []
    graph.connect(mean, "out", foreign(t_test, "mine"), "values")
    (said,) = warned(graph, garden)
    assert "go into w.mine" in said


def test_a_wire_to_another_input_of_a_judged_statistic_is_no_answer(garden: Garden):
    graph, read = read_in_the_atlas(garden)
    mine, mean = foreign(t_test, "mine"), foreign(mean_of, "mean")
    final = contract(
        Node(Function(function=corrected, output_names=["out"]), "final"),
        statistic=Statistic(values="values"),
    )
    graph.connect(
        [
            (read, mine, [("values", "values")]),
            (read, mean, [("values", "values")]),
            (mean, final, [("out", "values")]),
            (mine, final, [("out", "alpha")]),
        ]
    )
    (said,) = warned(graph, garden)
    assert "go into w.mine" in said
    # Nor is it when what the statistic gives goes into the values of another one.
    after, last = foreign(mean_of, "after"), own_test("last")
    graph.connect([(final, after, [("out", "values")]), (after, last, [("out", "values")])])
    (said,) = warned(graph, garden)
    assert "go into w.mine" in said


def corrected(values, alpha):
    return values


def test_what_a_join_brings_to_the_values_is_an_answer(garden: Garden):
    graph, atlas = empty(), garden.outside("atlas")
    one = reading("one", mask_file=[atlas] * 6)
    one.iterables = ("in_file", [garden.of("lanterns1"), garden.of("lanterns2")])
    mean = foreign(mean_of, "mean")
    join = JoinNode(
        Function(function=t_test, output_names=["out"]),
        joinsource="one",
        joinfield=["values"],
        name="join",
    )
    contract(join, statistic=Statistic(values="values"))
    graph.connect([(one, mean, [("out", "values")]), (mean, join, [("out", "values")])])
    guard = GuardPlugin(garden.study, dry=True)
    with suppress(GuardRefused):
        graph.run(plugin=guard)
    assert guard.findings.warnings == []


def test_an_output_that_holds_no_values_goes_where_it_likes(garden: Garden):
    graph, read = read_in_the_atlas(garden)
    graph.connect(read, "sizes", foreign(t_test, "mine"), "values")  # of the masks alone
    assert warned(graph, garden) == []


def test_copies_of_a_node_are_one_and_two_extractions_are_two(garden: Garden):
    graph, atlas = empty(), garden.outside("atlas")
    scans = [garden.of("lanterns1"), garden.of("lanterns2")]
    one, two = reading("one", mask_file=[atlas] * 6), reading("two", mask_file=[atlas] * 6)
    one.iterables, two.inputs.in_file = ("in_file", scans), garden.of("paths")
    merge, mean = Node(Merge(2), "merge"), foreign(mean_of, "mean")
    join = JoinNode(
        Function(function=t_test, output_names=["out"]),
        joinsource="one",
        joinfield=["values"],
        name="join",
    )
    graph.connect(
        [
            (one, merge, [("out", "in1")]),
            (two, merge, [("out", "in2")]),
            (merge, mean, [("out", "values")]),
            (mean, join, [("out", "values")]),
        ]
    )
    first, second = warned(graph, garden)
    assert "values from w.one and w.two go into w.mean, of which" in first
    assert "values from w.one and w.two go into w.join, of which" in second


@pytest.mark.parametrize("case", [pytest.param(case, id=case.title) for case in RIGHT])
def test_no_ordinary_pipeline_is_bothered(case: Case, tmp_path: Path, monkeypatch: Any):
    monkeypatch.chdir(tmp_path)
    garden = case.garden(tmp_path / "garden")
    assert warned(case.build(garden), garden) == []


def test_it_is_told_in_the_log_of_a_run(garden: Garden, caplog: pytest.LogCaptureFixture):
    graph, read = read_in_the_atlas(garden)
    graph.connect(read, "values", foreign(t_test, "mine"), "values")
    caplog.set_level(logging.WARNING, "nipype.workflow")
    graph.run(plugin=GuardPlugin(garden.study))
    assert "values from w.extract go into w.mine" in caplog.text


def test_and_by_check_which_still_clears(garden: Garden):
    script = garden.root / "mine.py"
    here = str(Path(__file__).parent)
    script.write_text(
        f"import sys\nsys.path.insert(0, {here!r})\n"
        "from pathlib import Path\nfrom gallery_parts import Garden, foreign, t_test\n"
        "from test_untold import read_in_the_atlas\n\n"
        "def build():\n    garden = Garden(Path(__file__).parent)\n"
        "    graph, read = read_in_the_atlas(garden)\n"
        "    graph.connect(read, 'values', foreign(t_test, 'mine'), 'values')\n    return graph\n"
    )
    origins = garden.root / "origins.toml"
    origins.write_text('[[origin]]\nsource = "an atlas of 1909"\nfiles = ["atlas.nii"]\n')
    table = garden.root / "table.tsv"
    call = ["check", f"{script}:build", "--study", str(table), "--origins", str(origins)]
    done = CliRunner().invoke(main, call)
    assert done.exit_code == 0, done.output
    told = " ".join(done.stdout.split())
    assert "not judged: values from w.extract go into w.mine" in told
    assert "Nothing is refused" in told
    (said,) = json.loads(CliRunner().invoke(main, [*call, "--json"]).stdout)["warnings"]
    assert "w.mine" in said


def test_that_there_is_nothing_to_state_goes_to_the_record(garden: Garden):
    graph, read = read_in_the_atlas(garden)
    graph.connect(read, "values", contract(foreign(t_test, "mine")), "values")
    guard = GuardPlugin(garden.study, dry=True)
    graph.run(plugin=guard)
    (waiver,) = record_of(guard)["waivers"]
    assert waiver["node"] == "w.mine"
    assert waiver["says"] == "neither an extraction nor a statistic"
