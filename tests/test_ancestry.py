"""Touches through real workflows, held against what the workflows really make.

The "data" here are text files that hold the numbers of the units inside them, and every
function writes the numbers of all files it has read into its output. So each workflow is run,
and what its outputs really contain is compared with what the graph said beforehand.
"""

from __future__ import annotations

import random
from pathlib import Path
from typing import Any

import pytest
from carrying import (
    CarryEach,
    CarryOne,
    CarrySet,
    WatchPlugin,
    ancestry_of,
    blend,
    carried_study,
    function,
    handed_on,
    results,
    said,
    understated,
)
from nipype import IdentityInterface, JoinNode, MapNode, Merge, Node, Rename, Select
from nipype import Workflow as Engine
from nipype.algorithms.misc import Gunzip
from nipype.interfaces.io import DataGrabber, DataSink, SelectFiles
from nipype.interfaces.utility import Split
from planting import paths_of
from running import workflow
from sequester.nodes.interfaces import ChooseByFold, GroupMap, SubjectMaps
from sequester.nodes.masks import Strongest
from sequester.nodes.procedure import Procedure
from sequester.nodes.rules import joined, leaves, lost_precision, path_to
from sequester.nodes.touch import Touch, Unit
from sequester.workflows.ancestry import files_in
from sequester.workflows.study import Origin, Row, Study

pytestmark = pytest.mark.usefixtures("quiet_engine")


@pytest.fixture
def study(tmp_path: Path) -> Study:
    """Eight subjects; file i holds the number i."""
    return carried_study(tmp_path / "study")


@pytest.fixture
def f(study: Study) -> list[str]:
    return paths_of(study)


# -- functions that keep account of what they read ---------------------------------------------


def listed(a, n=2):  # several files, each made from all files given, at any depth
    from pathlib import Path

    def walk(item):
        return [n for part in item for n in walk(part)] if isinstance(item, list) else [item]

    text = " ".join(Path(path).read_text() for path in walk(a))
    made = [Path(f"part{i}.txt").resolve() for i in range(n)]
    for path in made:
        path.write_text(text)
    return [str(path) for path in made]


def backwards(a):  # a connection function
    return a[::-1]


def blender(name: str, **inputs: Any) -> Node:
    made = Node(function(blend, "a", "b"), name=name)
    made.inputs.trait_set(**inputs)
    return made


def map_blender(name: str, iterfield: list[str], nested: bool = False, **inputs: Any) -> MapNode:
    made = MapNode(function(blend, "a", "b"), iterfield=iterfield, nested=nested, name=name)
    made.inputs.trait_set(**inputs)
    return made


def checked(made: Engine, study: Study) -> dict[str, Any]:
    """Run a workflow; fail where the graph understated; return what it said, by node.output."""
    watch = WatchPlugin(study, run=True)
    made.run(plugin=watch)
    faults = [
        fault
        for name, output, tree, real in results(watch)
        for fault in understated(tree, real, f"{name}.{output}")
    ]
    assert faults == []
    return {
        f"{name}.{output}": said(tree) for (name, output), tree in watch.ancestry.outputs.items()
    }


class TestNodes:
    def test_function_touches_all_its_inputs(self, study: Study, f: list[str]):
        made = workflow()
        made.add_nodes([blender("n", a=[f[0], [f[1], f[2]]], b=f[3])])
        assert checked(made, study) == {"w.n.out": {0, 1, 2, 3}}

    def test_touches_pass_along_edges(self, study: Study, f: list[str]):
        made = workflow()
        first, second = blender("first", a=f[0]), blender("second", b=f[1])
        made.connect(first, "out", second, "a")
        assert checked(made, study)["w.second.out"] == {0, 1}

    def test_a_node_without_data_touches_nothing(self, study: Study):
        made = workflow()
        node = Node(function(blend, "a"), name="n")
        node.inputs.a = []
        made.add_nodes([node])
        assert checked(made, study) == {"w.n.out": set()}

    def test_connection_function_gives_the_union(self, study: Study, f: list[str]):
        made = workflow()
        maps = map_blender("maps", ["a"], a=f[:3])
        pick = Node(Select(index=[0]), name="pick")
        made.connect([(maps, pick, [(("out", backwards), "inlist")])])
        found = checked(made, study)
        assert found["w.maps.out"] == [{0}, {1}, {2}]
        assert found["w.pick.out"] == {0, 1, 2}  # it is 2, and the graph cannot know

    def test_rename_touches_the_file_it_renames(self, study: Study, f: list[str]):
        made = workflow()
        made.add_nodes([Node(Rename(in_file=f[4], format_string="new.txt"), name="rename")])
        assert checked(made, study) == {"w.rename.out_file": {4}}

    def test_files_that_nobody_declared_are_unknown(self, study: Study, f: list[str]):
        stranger = study.root / "stranger.txt"
        stranger.write_text("7")
        made = workflow()
        made.add_nodes([blender("n", a=[f[0], str(stranger)])])
        tree = ancestry_of(made, study).outputs["w.n", "out"]
        assert tree.touch == Touch(values=1, unknown=frozenset({"stranger.txt"}))

    def test_grabbers_are_resolved_when_all_their_inputs_are_known(self, study: Study):
        made = workflow()
        root = str(study.root)
        select = SelectFiles({"one": "f{n}.txt", "all": "f[0-2].txt"}, base_directory=root)
        select.inputs.n = 4
        grab = DataGrabber(base_directory=root, template="f[5-7].txt", sort_filelist=True)
        made.add_nodes([Node(select, name="select"), Node(grab, name="grab")])
        assert checked(made, study) == {
            "w.select.one": {4},
            "w.select.all": [{0}, {1}, {2}],
            "w.grab.outfiles": [{5}, {6}, {7}],
        }

    def test_a_grabber_with_a_connected_input_may_give_anything(self, study: Study, f: list[str]):
        made = workflow()
        select = SelectFiles({"out": "f{n}.txt"}, base_directory=str(study.root))
        which = Node(function(handed_on, "a", "n"), name="which")
        which.inputs.a, select.inputs.n = "3", 1  # the edge outdoes the literal
        made.connect(which, "out", Node(select, name="select"), "n")
        checked(made, study)
        tree = ancestry_of(made, study).outputs["w.select", "out"]
        assert tree.touch.unknown == {str(study.root), "what w.select finds"}

    def test_a_grabber_of_files_nobody_declared_gives_unknown_ones(self, study: Study):
        (study.root / "stranger.txt").write_text("7")
        made = workflow()
        select = SelectFiles({"out": "str*.txt"}, base_directory=str(study.root))
        made.add_nodes([Node(select, name="select")])
        tree = ancestry_of(made, study).outputs["w.select", "out"]
        assert tree.touch == Touch(unknown=frozenset({"stranger.txt"}))

    def test_a_long_text_is_no_file(self, study: Study, f: list[str]):
        made = workflow()
        node = Node(function(blend, "a", "text"), name="n")
        node.inputs.a, node.inputs.text = f[0], "word " * 80
        made.add_nodes([node])
        assert said(ancestry_of(made, study).outputs["w.n", "out"]) == {0}


class TestMapNodes:
    def test_one_literal_iterfield(self, study: Study, f: list[str]):
        made = workflow()
        made.add_nodes([map_blender("n", ["a"], a=f[:3])])
        assert checked(made, study) == {"w.n.out": [{0}, {1}, {2}]}

    def test_what_is_not_iterated_reaches_every_element(self, study: Study, f: list[str]):
        made = workflow()
        made.add_nodes([map_blender("n", ["a"], a=f[:3], b=f[7])])
        assert checked(made, study) == {"w.n.out": [{0, 7}, {1, 7}, {2, 7}]}

    def test_two_iterfields_pair_up(self, study: Study, f: list[str]):
        made = workflow()
        made.add_nodes([map_blender("n", ["a", "b"], a=f[:3], b=f[3:6])])
        assert checked(made, study) == {"w.n.out": [{0, 3}, {1, 4}, {2, 5}]}

    def test_connected_iterfields_pair_up_with_literal_ones(self, study: Study, f: list[str]):
        made = workflow()
        first, second = map_blender("first", ["a"], a=f[:3]), map_blender("second", ["a", "b"])
        second.inputs.b = f[3:6]
        made.connect(first, "out", second, "a")
        assert checked(made, study)["w.second.out"] == [{0, 3}, {1, 4}, {2, 5}]

    def test_an_item_may_be_a_list_of_its_own(self, study: Study, f: list[str]):
        made = workflow()
        made.add_nodes([map_blender("n", ["a"], a=[f[:2], f[2:4]])])
        assert checked(made, study) == {"w.n.out": [{0, 1}, {2, 3}]}

    def test_nested_iteration_keeps_the_nesting(self, study: Study, f: list[str]):
        made = workflow()
        first = map_blender("first", ["a"], nested=True, a=[f[:2], f[2:5]])
        second = map_blender("second", ["a"], nested=True, b=f[7])
        made.connect(first, "out", second, "a")
        found = checked(made, study)
        assert found["w.first.out"] == [[{0}, {1}], [{2}, {3}, {4}]]
        assert found["w.second.out"] == [[{0, 7}, {1, 7}], [{2, 7}, {3, 7}, {4, 7}]]

    def test_a_list_of_unknown_length_is_the_union(self, study: Study, f: list[str]):
        made = workflow()
        first = Node(function(listed, "a", "n"), name="first")
        first.inputs.a, first.inputs.n = f[:2], 3
        second = map_blender("second", ["a"], b=f[5])
        made.connect(first, "out", second, "a")
        assert checked(made, study)["w.second.out"] == {0, 1, 5}

    def test_elements_that_are_lists_themselves_stay_apart(self, study: Study, f: list[str]):
        made = workflow()
        first = MapNode(function(listed, "a", "n"), iterfield=["a"], name="first")
        first.inputs.a, first.inputs.n = f[:2], 2
        second = map_blender("second", ["a"])
        made.connect(first, "out", second, "a")
        assert checked(made, study)["w.second.out"] == [{0}, {1}]


class TestIterables:
    def test_every_copy_has_its_own_value(self, study: Study, f: list[str]):
        made = workflow()
        start = Node(IdentityInterface(["x"]), name="start")
        start.iterables = ("x", f[:3])
        made.connect(start, "x", blender("n", b=f[7]), "a")
        found = checked(made, study)
        assert len(found) == 3
        assert sorted(map(sorted, found.values())) == [[0, 7], [1, 7], [2, 7]]

    def test_several_iterables_multiply(self, study: Study, f: list[str]):
        made = workflow()
        start = Node(IdentityInterface(["x", "y"]), name="start")
        start.iterables = [("x", f[:2]), ("y", f[2:4])]
        made.connect([(start, blender("n"), [("x", "a"), ("y", "b")])])
        found = checked(made, study)
        assert sorted(map(sorted, found.values())) == [[0, 2], [0, 3], [1, 2], [1, 3]]

    def test_synchronised_iterables_go_together(self, study: Study, f: list[str]):
        made = workflow()
        start = Node(IdentityInterface(["x", "y"]), name="start")
        start.iterables, start.synchronize = [("x", f[:2]), ("y", f[2:4])], True
        made.connect([(start, blender("n"), [("x", "a"), ("y", "b")])])
        assert sorted(map(sorted, checked(made, study).values())) == [[0, 2], [1, 3]]

    def test_a_node_may_iterate_itself(self, study: Study, f: list[str]):
        made = workflow()
        first, second = blender("first"), blender("second", b=f[7])
        first.iterables = ("a", f[:2])
        made.connect(first, "out", second, "a")
        found = checked(made, study)
        seconds = [units for name, units in found.items() if "second" in name]
        assert sorted(map(sorted, seconds)) == [[0, 7], [1, 7]]

    def test_values_that_depend_on_another_iterable(self, study: Study, f: list[str]):
        made = workflow()
        start = Node(IdentityInterface(["who"]), name="start")
        start.iterables = ("who", ["p", "q"])
        runs = Node(IdentityInterface(["who", "x"]), name="runs")
        runs.itersource = ("start", "who")
        runs.iterables = [("x", {"p": f[:2], "q": f[2:4]})]
        made.connect([(start, runs, [("who", "who")]), (runs, blender("n"), [("x", "a")])])
        assert sorted(map(sorted, checked(made, study).values())) == [[0], [1], [2], [3]]


class TestJoinNodes:
    def start(self, values: list[str]) -> Node:
        node = Node(IdentityInterface(["x"]), name="start")
        node.iterables = ("x", values)
        return node

    def test_the_list_is_in_the_order_of_the_iterable(self, study: Study, f: list[str]):
        made = workflow()
        start, each = self.start([f[2], f[0], f[1]]), blender("each")
        join = JoinNode(IdentityInterface(["xs"]), joinsource="start", joinfield="xs", name="join")
        pick = Node(Select(index=[0]), name="pick")
        made.connect([(start, each, [("x", "a")]), (each, join, [("out", "xs")])])
        made.connect(join, "xs", pick, "inlist")
        found = checked(made, study)
        assert found["w.join.xs"] == [{2}, {0}, {1}]
        assert found["w.pick.out"] == {2}

    def test_more_than_nine_slots_are_in_order(self, study: Study, f: list[str]):
        # Slot 10 must not be sorted before slot 2.
        made = workflow()
        start, each = Node(IdentityInterface(["x", "y"]), name="start"), blender("each")
        start.iterables, start.synchronize = (
            [("x", [*f, *f[:4]]), ("y", [f[0]] * 8 + [f[1]] * 4)],
            True,
        )
        join = JoinNode(IdentityInterface(["xs"]), joinsource="start", joinfield="xs", name="join")
        made.connect([(start, each, [("x", "a"), ("y", "b")]), (each, join, [("out", "xs")])])
        expected = [{0, i} for i in range(8)] + [{1, i} for i in range(4)]
        assert checked(made, study)["w.join.xs"] == expected

    def test_a_joined_function_touches_all(self, study: Study, f: list[str]):
        made = workflow()
        start, each = self.start(f[:3]), blender("each")
        join = JoinNode(function(blend, "a", "b"), joinsource="start", joinfield="a", name="join")
        join.inputs.b = f[6]
        made.connect([(start, each, [("x", "a")]), (each, join, [("out", "a")])])
        assert checked(made, study)["w.join.out"] == {0, 1, 2, 6}

    def test_what_is_not_joined_reaches_the_join_too(self, study: Study, f: list[str]):
        made = workflow()
        start, each, shared = self.start(f[:2]), blender("each"), blender("shared", a=f[6])
        join = JoinNode(function(blend, "a", "b"), joinsource="start", joinfield="a", name="join")
        made.connect([(start, each, [("x", "a")]), (each, join, [("out", "a")])])
        made.connect(shared, "out", join, "b")
        assert checked(made, study)["w.join.out"] == {0, 1, 6}

    def test_two_join_fields_keep_their_own_lists(self, study: Study, f: list[str]):
        made = workflow()
        start, each, other = self.start(f[:2]), blender("each"), blender("other", b=f[5])
        join = JoinNode(
            IdentityInterface(["xs", "ys"]), joinsource="start", joinfield=["xs", "ys"], name="join"
        )
        made.connect([(start, each, [("x", "a")]), (start, other, [("x", "a")])])
        made.connect([(each, join, [("out", "xs")]), (other, join, [("out", "ys")])])
        found = checked(made, study)
        assert found["w.join.xs"] == [{0}, {1}]
        assert found["w.join.ys"] == [{0, 5}, {1, 5}]

    def test_lists_join_into_a_list_of_lists(self, study: Study, f: list[str]):
        made = workflow()
        start, each = self.start(f[:2]), map_blender("each", ["b"], b=f[4:6])
        join = JoinNode(IdentityInterface(["xs"]), joinsource="start", joinfield="xs", name="join")
        made.connect([(start, each, [("x", "a")]), (each, join, [("out", "xs")])])
        assert checked(made, study)["w.join.xs"] == [[{0, 4}, {0, 5}], [{1, 4}, {1, 5}]]

    def test_one_join_after_another(self, study: Study, f: list[str]):
        made = workflow()
        people, runs = (
            Node(IdentityInterface(["x"]), name="people"),
            Node(IdentityInterface(["y"]), name="runs"),
        )
        people.iterables, runs.iterables = ("x", f[:2]), ("y", f[2:4])
        each, own = (
            blender("each"),
            JoinNode(function(blend, "a"), joinsource="runs", joinfield="a", name="own"),
        )
        everyone = JoinNode(
            IdentityInterface(["xs"]), joinsource="people", joinfield="xs", name="everyone"
        )
        made.connect([(people, each, [("x", "a")]), (runs, each, [("y", "b")])])
        made.connect([(each, own, [("out", "a")]), (own, everyone, [("out", "xs")])])
        assert checked(made, study)["w.everyone.xs"] == [{0, 2, 3}, {1, 2, 3}]

    def test_when_repeats_are_dropped_elements_cannot_be_told_apart(
        self, study: Study, f: list[str]
    ):
        made = workflow()
        start, each = (
            Node(IdentityInterface(["x", "y"]), name="start"),
            Node(function(handed_on, "a", "n"), name="each"),
        )
        start.iterables = [("x", [f[0], f[0], f[1]]), ("y", [1, 2, 3])]
        start.synchronize = True
        join = JoinNode(
            IdentityInterface(["xs"]), joinsource="start", joinfield="xs", unique=True, name="join"
        )
        made.connect([(start, each, [("x", "a"), ("y", "n")]), (each, join, [("out", "xs")])])
        # The list holds two files, of which the second is subject 1's.
        assert checked(made, study)["w.join.xs"] == {0, 1}

    def test_a_join_right_behind_the_iterable_touches_all(self, study: Study, f: list[str]):
        made = workflow()
        join = JoinNode(function(blend, "a"), joinsource="start", joinfield="a", name="all")
        pick = JoinNode(Merge(1), joinsource="start", joinfield="in1", name="merged")
        group = JoinNode(GroupMap(), joinsource="start", joinfield="in_files", name="group")
        start = self.start(f[:3])
        made.connect([(start, join, [("x", "a")]), (start, pick, [("x", "in1")])])
        made.connect(start, "x", group, "in_files")
        trees = ancestry_of(made, study).outputs
        assert said(trees["w.all", "out"]) == {0, 1, 2}
        assert said(trees["w.merged", "out"]) == [{0}, {1}, {2}]
        assert said(trees["w.group", "out_file"]) == {0, 1, 2}


class TestPlumbing:
    """Merge, Select and Split inside workflows; `test_rules` has them by themselves."""

    def test_merge_select_split(self, study: Study, f: list[str]):
        made = workflow()
        merge, flat = Node(Merge(2), name="merge"), Node(Merge(2, no_flatten=True), name="flat")
        for node in (merge, flat):
            node.inputs.in1, node.inputs.in2 = f[:2], f[2:4]
        side = Node(Merge(2, axis="hstack"), name="side")
        side.inputs.in1, side.inputs.in2 = f[:2], f[2:4]
        pick = Node(Select(index=[3, 0]), name="pick")
        split = Node(Split(splits=[1, 3], squeeze=True), name="split")
        made.add_nodes([flat, side])
        made.connect([(merge, pick, [("out", "inlist")]), (merge, split, [("out", "inlist")])])
        assert checked(made, study) == {
            "w.merge.out": [{0}, {1}, {2}, {3}],
            "w.flat.out": [[{0}, {1}], [{2}, {3}]],
            "w.side.out": [[{0}, {2}], [{1}, {3}]],
            "w.pick.out": [{3}, {0}],
            "w.split.out1": {0},
            "w.split.out2": [{1}, {2}, {3}],
        }

    def test_merge_of_functions_is_the_union(self, study: Study, f: list[str]):
        # Each may have returned one file or several.
        made = workflow()
        merge = Node(Merge(2), name="merge")
        pick = Node(Select(index=[2]), name="pick")
        first = Node(function(listed, "a", "n"), name="first")
        first.inputs.a, first.inputs.n = f[0], 3
        made.connect([(first, merge, [("out", "in1")]), (merge, pick, [("out", "inlist")])])
        made.connect(blender("second", a=f[1]), "out", merge, "in2")
        assert checked(made, study)["w.pick.out"] == {0, 1}

    def test_merge_keeps_the_elements_of_map_nodes_apart(self, study: Study, f: list[str]):
        made = workflow()
        merge = Node(Merge(2), name="merge")
        made.connect(map_blender("one", ["a"], a=f[:2]), "out", merge, "in1")
        made.connect(map_blender("other", ["a"], a=f[2:4]), "out", merge, "in2")
        assert checked(made, study)["w.merge.out"] == [{0}, {1}, {2}, {3}]

    def test_an_output_typed_as_a_file_is_one_element(self, study: Study, f: list[str]):
        made = workflow()
        merge = Node(Merge(2), name="merge")
        for i in range(2):
            made.connect(Node(Gunzip(in_file=f[i]), name=f"n{i}"), "out_file", merge, f"in{i + 1}")
        assert said(ancestry_of(made, study).outputs["w.merge", "out"]) == [{0}, {1}]

    def test_an_element_that_is_no_file_keeps_its_place(self, study: Study, f: list[str]):
        made = workflow()
        merge, pick = Node(Merge(2), name="merge"), Node(Select(index=[1]), name="pick")
        merge.inputs.in1, merge.inputs.in2 = "a word", f[:2]
        made.connect(merge, "out", pick, "inlist")
        assert checked(made, study)["w.pick.out"] == {0}

    def test_an_edge_outdoes_a_literal(self, study: Study, f: list[str]):
        made = workflow()
        pick = Node(Select(inlist=f[:2], index=[0]), name="pick")
        made.connect(Node(function(second_place), name="which"), "out", pick, "index")
        assert {0, 1} <= checked(made, study)["w.pick.out"]


def command(a, text):  # reads the file that a text names, as a command line would
    from pathlib import Path

    path = Path("out.txt").resolve()
    path.write_text(Path(text.split()[-1]).read_text())
    return str(path)


class TestTheEnginesWays:
    """What the engine makes of a value on its way into a node, and out of it."""

    def test_a_flat_list_for_a_field_of_lists_is_one_iteration(self, study: Study, f: list[str]):
        made = workflow()
        maps = map_blender("maps", ["a"], a=f[:3])
        lists = MapNode(CarryEach(), iterfield=["files"], name="lists")
        made.connect(maps, "out", lists, "files")
        # Each of the three may be a list, for all the graph knows: then they would be three.
        assert checked(made, study)["w.lists.out_files"] == {0, 1, 2}

    def test_a_flat_list_of_files_is_told_apart(self, study: Study, f: list[str]):
        made = workflow()
        maps = MapNode(CarryOne(), iterfield=["files"], name="maps")
        maps.inputs.files = f[:3]
        lists = MapNode(CarryEach(), iterfield=["files"], name="lists")
        made.connect(maps, "out_file", lists, "files")
        assert checked(made, study)["w.lists.out_files"] == [[{0}, {1}, {2}]]

    def test_nested_fields_pair_up_as_if_they_were_flat(self, study: Study, f: list[str]):
        made = workflow()
        made.add_nodes(
            [map_blender("n", ["a", "b"], nested=True, a=[[f[0]], f[1:3]], b=[f[3:5], [f[5]]])]
        )
        assert checked(made, study)["w.n.out"] == [[{0, 3}], [{1, 4}, {2, 5}]]

    def test_nested_iteration_may_go_deeper_than_the_graph_shows(self, study: Study, f: list[str]):
        made = workflow()
        first = MapNode(function(listed, "a", "n"), iterfield=["a"], nested=True, name="first")
        first.inputs.a, first.inputs.n = [f[:2], [f[2]]], 2
        second = MapNode(CarryOne(), iterfield=["files"], nested=True, name="second")
        pick = Node(Select(index=[0]), name="pick")
        made.connect(
            [(first, second, [("out", "files")]), (second, pick, [("out_file", "inlist")])]
        )
        found = checked(made, study)
        assert found["w.second.out_file"] == [[{0}, {1}], [{2}]]
        assert found["w.pick.out"] == [{0}, {1}]

    def test_a_literal_that_an_iterable_replaces_in_a_map_node(self, study: Study, f: list[str]):
        made, node = workflow(), map_blender("n", ["a"], a=f[:2], b=f[7])
        start = Node(IdentityInterface(["x"]), name="start")
        start.iterables = ("x", [f[4], f[5]])
        made.connect(start, "x", node, "b")
        # The engine leaves both in the node; which one counts is its secret.
        first, second = checked(made, study).values()
        assert first == [{0, 4, 7}, {1, 4, 7}]
        assert second == [{0, 5, 7}, {1, 5, 7}]

    def test_words_keep_their_places_through_a_join(self, study: Study, f: list[str]):
        made = workflow()
        start = Node(IdentityInterface(["x"]), name="start")
        start.iterables = ("x", ["word", "more"])
        words = JoinNode(IdentityInterface(["xs"]), joinsource="start", joinfield="xs", name="join")
        merge, pick = Node(Merge(2), name="merge"), Node(Select(index=[2]), name="pick")
        merge.inputs.in2 = f[:2]
        made.connect([(start, words, [("x", "xs")]), (words, merge, [("xs", "in1")])])
        made.connect(merge, "out", pick, "inlist")
        assert checked(made, study)["w.pick.out"] == {0}

    def test_a_set_has_no_order(self, study: Study, f: list[str]):
        made = workflow()
        start, one = Node(IdentityInterface(["x"]), name="start"), blender("one")
        start.iterables = ("x", f[:3])
        join = JoinNode(CarrySet(), joinsource="start", joinfield="files", name="join")
        made.connect([(start, one, [("x", "a")]), (one, join, [("out", "files")])])
        assert checked(made, study)["w.join.out_files"] == {0, 1, 2}

    def test_files_in_a_dict_and_in_a_tuple(self, study: Study, f: list[str]):
        made = workflow()
        made.add_nodes([blender("n", a={"one": f[0], "two": [f[1]]}, b=(f[2], f[3]))])
        assert checked(made, study)["w.n.out"] == {0, 1, 2, 3}

    def test_declared_files_in_a_text(self, study: Study, f: list[str]):
        made = workflow()
        node = Node(function(command, "a", "text"), name="n")
        node.inputs.a, node.inputs.text = f[0], f"read --file {f[3]}"
        made.add_nodes([node])
        assert checked(made, study)["w.n.out"] == {0, 3}

    def test_what_goes_into_a_sink_is_in_what_comes_out(self, study: Study, f: list[str]):
        made = workflow()
        sink = Node(DataSink(base_directory=str(study.root / "kept")), name="sink")
        sink.inputs.here = f[6]
        made.connect(blender("one", a=f[0]), "out", sink, "there.@now")
        assert checked(made, study)["w.sink.out_file"] == {0, 6}

    def test_what_is_in_the_sink_is_unknown_to_a_grabber(self, study: Study, f: list[str]):
        made, kept = workflow(), study.root / "kept"
        kept.mkdir()
        sink = Node(DataSink(base_directory=str(kept)), name="sink")
        found = Node(SelectFiles({"out": "there/*.txt"}, base_directory=str(kept)), name="found")
        made.connect(blender("one", a=f[0]), "out", sink, "there")
        made.add_nodes([found])
        tree = ancestry_of(made, study).outputs["w.found", "out"]
        assert "what w.found finds" in tree.touch.unknown
        assert lost_precision(tree)[0][1] == "it finds nothing yet, and might when it runs"


def second_place():
    return [1]


class TestRandomGraphs:
    """Lists that are mapped, merged and selected at random; nothing is lost on the way."""

    @pytest.mark.parametrize("seed", range(12))
    def test_never_understated(self, seed: int, study: Study, f: list[str]):
        rng, made = random.Random(seed), workflow()
        ends: list[tuple[Node, str]] = []
        for i in range(2):
            node = map_blender(f"source{i}", ["a"], a=rng.sample(f, 3))
            made.add_nodes([node])
            ends.append((node, "out"))
        for i in range(6):
            kind = rng.choice(["map", "merge", "flat", "select", "some"])
            (one, out), (other, out_too) = rng.choices(ends, k=2)
            name = f"{kind}{i}"
            if kind == "map":
                node = map_blender(name, ["a"], b=rng.choice([[], f[7]]))
            elif kind in ("merge", "flat"):
                node = Node(Merge(2, no_flatten=kind == "flat"), name=name)
                made.connect(other, out_too, node, "in2")
            elif kind == "select":
                node = Node(Select(index=[rng.randrange(2) for _ in range(2)]), name=name)
            else:
                node = Node(function(listed, "a", "n"), name=name)
                node.inputs.n = rng.randint(2, 3)
            field = {"merge": "in1", "flat": "in1", "select": "inlist"}
            made.connect(one, out, node, field.get(kind, "a"))
            ends.append((node, "out"))
        assert len(checked(made, study)) >= 8


class TestNestedWorkflows:
    def test_names_stay_apart_and_touches_pass_the_border(self, study: Study, f: list[str]):
        outer = workflow("outer")
        for i, name in enumerate(("left", "right")):
            inner = Engine(name)
            start, end = (
                Node(IdentityInterface(["x"]), name=n) for n in ("inputnode", "outputnode")
            )
            inner.connect(
                [(start, n := blender("n", b=f[6 + i]), [("x", "a")]), (n, end, [("out", "x")])]
            )
            outer.connect(first := blender(f"first_{name}", a=f[i]), "out", inner, "inputnode.x")
            outer.connect(inner, "outputnode.x", blender(f"last_{name}", b=f[4 + i]), "a")
            assert first.name
        found = checked(outer, study)
        assert found["outer.left.n.out"] == {0, 6}
        assert found["outer.right.n.out"] == {1, 7}
        assert found["outer.last_left.out"] == {0, 4, 6}
        assert found["outer.last_right.out"] == {1, 5, 7}

    def test_iterables_outside_multiply_what_is_inside(self, study: Study, f: list[str]):
        outer, inner = workflow("outer"), Engine("inner")
        inner.connect(Node(IdentityInterface(["x"]), name="inputnode"), "x", blender("n"), "a")
        start = Node(IdentityInterface(["x"]), name="start")
        start.iterables = ("x", f[:2])
        join = JoinNode(IdentityInterface(["xs"]), joinsource="start", joinfield="xs", name="join")
        outer.connect([(start, inner, [("x", "inputnode.x")]), (inner, join, [("n.out", "xs")])])
        found = checked(outer, study)
        assert found["outer.join.xs"] == [{0}, {1}]
        assert len(found) == 3


class TestOwnNodes:
    def test_a_fold_touches_all_but_the_subject_it_holds_out(self, study: Study, f: list[str]):
        made = workflow()
        maps = map_blender("maps", ["a"], a=f[:4])
        choose = Node(
            ChooseByFold(labels=["b", "a", "d", "c"], procedure=Procedure(Strongest(1))),
            name="choose",
        )
        made.connect(maps, "out", choose, "in_files")
        trees = ancestry_of(made, study).outputs
        assert said(trees["w.choose", "mask_files"]) == [{0, 2, 3}, {1, 2, 3}, {0, 1, 2}, {0, 1, 3}]
        assert said(trees["w.choose", "row_masks"]) == [{1, 2, 3}, {0, 2, 3}, {0, 1, 3}, {0, 1, 2}]
        assert said(trees["w.choose", "overlap_file"]) == {0, 1, 2, 3}

    def test_labels_that_are_not_known_beforehand_leave_the_union(self, study: Study, f: list[str]):
        made = workflow()
        choose = Node(
            ChooseByFold(in_files=f[:3], procedure=Procedure(Strongest(1))), name="choose"
        )
        made.connect(Node(function(second_place), name="which"), "out", choose, "labels")
        tree = ancestry_of(made, study).outputs["w.choose", "row_masks"]
        assert said(joined(leaves(tree))) == {0, 1, 2}

    def test_words_that_happen_to_name_a_folder_are_words(self, study: Study, f: list[str]):
        # A folder per subject, named like the labels, is how many studies lie on disk.
        for label in "abc":
            (study.root / label).mkdir()
        made = workflow()
        choose = ChooseByFold(in_files=f[:3], labels=list("abc"), procedure=Procedure(Strongest(1)))
        made.add_nodes([Node(choose, name="choose")])
        tree = ancestry_of(made, study).outputs["w.choose", "row_masks"]
        assert said(tree) == [{1, 2}, {0, 2}, {0, 1}]
        assert not any(leaf.touch.unknown for leaf in leaves(tree))

    def test_volumes_of_one_file_are_units_of_their_own(self, study: Study):
        (study.root / "four.txt").write_text("")
        rows = [Row("four.txt", v, Unit(sub=str(v), suffix="bold")) for v in range(4)]
        volumes = Study(study.root, rows)
        path = str(study.root / "four.txt")
        made = workflow()
        maps = SubjectMaps(
            in_files=[[path, path], [path], path], volumes=[[0, 1], [3], -1], labels=list("abc")
        )
        made.add_nodes([Node(maps, name="n")])
        tree = ancestry_of(made, volumes).outputs["w.n", "out_files"]
        # Without a number, the file touches all its volumes.
        assert said(tree) == [{0, 1}, {3}, {0, 1, 2, 3}]


class TestPaths:
    def test_the_way_of_a_unit_is_told_file_first(self, study: Study, f: list[str]):
        made = workflow()
        first, second = map_blender("first", ["a"], a=f[:2]), blender("second", a=f[2])
        made.connect(first, "out", second, "b")
        tree = ancestry_of(made, study).outputs["w.second", "out"]
        assert path_to(tree, 0b010) == ["f1.txt", "w.first.out[1]", "w.second.out"]
        assert path_to(tree, 0b100) == ["f2.txt", "w.second.out"]


class TestObserved:
    """What a node turns out to be given while running."""

    def test_is_added_to_the_field_and_flows_on(self, study: Study, f: list[str]):
        made = workflow()
        first, second = map_blender("first", ["a"], a=f[:2]), map_blender("second", ["a"])
        made.connect(first, "out", second, "a")
        ancestry = ancestry_of(made, study)
        node = next(n for n in ancestry.nodes if n.name == "first")
        ancestry.observe(node, "a", {"f5.txt": Touch(values=1 << 5)})
        ancestry.propagate()
        # Which element it was is not known: all of them.
        tree = ancestry.outputs["w.second", "out"]
        assert said(tree) == [{0, 5}, {1, 5}]
        assert path_to(tree.children[0], 1 << 5)[0] == "f5.txt (seen while running)"


class TestFiles:
    """What the study says of a file."""

    def test_a_row_touches_its_unit_by_any_way_to_the_file(self, study: Study, tmp_path: Path):
        link = tmp_path / "link.txt"
        link.symlink_to(study.root / "f3.txt")
        for path in ("f3.txt", "./f3.txt", str(study.root / "f3.txt"), str(link)):
            assert study.touch_of(path) == Touch(values=1 << 3), path

    def test_a_link_in_the_table_and_its_target_are_one(self, study: Study, tmp_path: Path):
        target = tmp_path / "annexed"
        target.write_text("0")
        (study.root / "linked.txt").symlink_to(target)
        linked = Study(study.root, [Row("linked.txt", None, Unit(sub="a"))])
        assert linked.touch_of(str(target)) == linked.touch_of("linked.txt") == Touch(values=1)

    def test_declared_and_derived_and_unknown(self, study: Study):
        for name in ("atlas.txt", "own.txt", "other.txt"):
            (study.root / name).write_text(name)
        declared = Study(
            study.root,
            study.rows,
            [
                Origin("an atlas", ("atlas.txt",)),
                Origin("our pilot", ("own.txt",), (Unit(sub="1"), Unit(sub="6", suffix="bold"))),
            ],
        )
        assert declared.touch_of("atlas.txt") == Touch(origins=frozenset({"an atlas"}))
        assert declared.touch_of("own.txt") == Touch(
            values=1 << 1 | 1 << 6, origins=frozenset({"our pilot"})
        )
        assert declared.touch_of("other.txt") == Touch(unknown=frozenset({"other.txt"}))
        assert declared.touch_of("absent.txt") is None

    def test_a_folder_may_hold_anything_and_a_word_is_no_folder(self, study: Study):
        folder = study.root / "folder"
        folder.mkdir()
        assert study.touch_of(str(folder)) == Touch(unknown=frozenset({"folder"}))
        assert study.touch_of("folder") is None

    def test_a_copy_under_another_name_is_recognised_by_content(self, study: Study, tmp_path: Path):
        (tmp_path / "copy.bin").write_text("4")
        (tmp_path / "new.bin").write_text("9")
        assert study.recognise(str(tmp_path / "copy.bin")) == Touch(values=1 << 4)
        assert study.recognise(str(tmp_path / "new.bin")) is None

    def test_a_copy_of_two_declared_files_touches_both(self, study: Study, tmp_path: Path):
        (study.root / "atlas.txt").write_text("4")  # the bytes of f4.txt
        declared = Study(study.root, study.rows, [Origin("an atlas", ("atlas.txt",))])
        (tmp_path / "copy.bin").write_text("4")
        touch = declared.recognise(str(tmp_path / "copy.bin"))
        assert touch is not None
        assert touch.values == 1 << 4

    def test_files_in_nested_values(self, f: list[str]):
        assert files_in([f[0], "no file", 3, (f[1], [None, f[2]])]) == f[:3]
