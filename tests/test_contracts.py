"""Contracts attached from outside: they hold wherever their node goes, and are checked."""

from __future__ import annotations

import pickle
import re
from pathlib import Path
from typing import Any

import pytest
from carrying import (
    CarryOne,
    ForeignEach,
    ancestry_of,
    blend,
    carried_study,
    function,
    said,
)
from nipype import Function, IdentityInterface, JoinNode, MapNode, Merge, Node, Select
from nipype import Workflow as Engine
from nipype.interfaces.io import SelectFiles
from nipype.interfaces.utility import Split
from planting import paths_of
from running import workflow
from sequester import GuardPlugin, Meeting, Statistic, contract, each, everything, only
from sequester.nodes.errors import InputError
from sequester.nodes.interfaces import Extract
from sequester.nodes.interfaces.contracts import contract_of
from sequester.nodes.rules import leaves, lost_precision
from sequester.workflows.ancestry import meetings_of
from sequester.workflows.guard import GuardRefused
from sequester.workflows.judge import judge
from sequester.workflows.study import Study

pytestmark = pytest.mark.usefixtures("quiet_engine")


@pytest.fixture
def study(tmp_path: Path) -> Study:
    return carried_study(tmp_path / "study")


@pytest.fixture
def f(study: Study) -> list[str]:
    return paths_of(study)


class Smooth(ForeignEach):
    """One file for each file given, on the grid of a reference."""


class Rougher(Smooth):
    """A subclass, which may do anything."""


class Reading(CarryOne):
    """A value of some files in a mask."""


class Louder(Reading):
    """A subclass."""


class Test(CarryOne):
    """A statistic of values."""

    __test__ = False


contract(Smooth, rules={"out_files": each("files", shared=("more",))}, geometry=["more"])
contract(Reading, extraction=Meeting(mask="more", data="files"))
contract(Test, statistic=Statistic(values="files", scores=("more",)))


def smooth(f: list[str], kind: Any = Smooth) -> Node:
    node = Node(kind(), name="smooth")
    node.inputs.files, node.inputs.more = f[:2], f[7]
    return node


class TestOfAClass:
    def test_rules_and_geometry_take_the_place_of_the_union(self, study: Study, f: list[str]):
        made = workflow()
        made.add_nodes([smooth(f)])
        tree = ancestry_of(made, study).outputs["w.smooth", "out_files"]
        assert said(tree) == [{0}, {1}]
        assert [leaf.touch.geometry for leaf in leaves(tree)] == [1 << 7] * 2

    def test_trust_is_not_inherited(self, study: Study, f: list[str]):
        made = workflow()
        made.add_nodes([smooth(f, Rougher)])
        assert said(ancestry_of(made, study).outputs["w.smooth", "out_files"]) == {0, 1, 7}

    def test_what_guards_is_inherited(self):
        assert meetings_of(Louder())[0] == Meeting(mask="more", data="files")
        assert meetings_of(CarryOne()) == (None, None)

    def test_it_holds_in_every_construct_of_the_engine(self, study: Study, f: list[str]):
        inner = Engine("inner")
        inner.connect(
            Node(IdentityInterface(["x"]), name="inputnode"),
            "x",
            Node(Smooth(), name="one"),
            "files",
        )
        made = workflow()
        start = Node(IdentityInterface(["x"]), name="start")
        start.iterables = ("x", [f[:2], f[2:4]])
        again = inner.clone("again")
        mapped = MapNode(Smooth(), iterfield=["files"], name="mapped")
        mapped.inputs.files = [f[:2], f[2:5]]
        join = JoinNode(Smooth(), joinsource="start", joinfield="files", name="join")
        made.connect([(start, again, [("x", "inputnode.x")]), (start, join, [("x", "files")])])
        made.add_nodes([mapped])
        found = {name: said(tree) for name, tree in ancestry_of(made, study).outputs.items()}
        assert found["w.mapped", "out_files"] == [[{0}, {1}], [{2}, {3}, {4}]]
        assert found["w.join", "out_files"] == [{0, 1}, {2, 3}]
        cloned = [tree for (name, _), tree in found.items() if "again" in name]
        assert cloned == [[{0}, {1}], [{2}, {3}]]


class TestOfANode:
    def node(self, name: str = "n") -> Node:
        node = Node(function(blend, "a", "b"), name=name)
        return contract(node, rules={"out": only("a", "b")}, geometry="b")

    def test_it_goes_with_the_copies_of_the_node(self, study: Study, f: list[str]):
        made, node = workflow(), self.node()
        node.inputs.b = f[7]
        start = Node(IdentityInterface(["x"]), name="start")
        start.iterables = ("x", f[:2])
        made.connect(start, "x", node, "a")
        both = workflow("both")
        both.add_nodes([made, made.clone("twin")])
        found = [said(tree) for tree in ancestry_of(both, study).outputs.values()]
        assert found == [{0}, {1}, {0}, {1}]

    def test_it_is_of_that_node_alone(self, study: Study, f: list[str]):
        made, other = workflow(), Node(function(blend, "a", "b"), name="other")
        mine = self.node()
        for node in (mine, other):
            node.inputs.a, node.inputs.b = f[0], f[1]
        made.add_nodes([mine, other])
        outputs = ancestry_of(made, study).outputs
        assert (said(outputs["w.n", "out"]), said(outputs["w.other", "out"])) == ({0}, {0, 1})

    def test_workers_get_the_node_and_not_its_rules(self, study: Study, f: list[str]):
        made, node = workflow(), self.node()
        node.inputs.a, node.inputs.b = f[0], f[1]
        behind = MapNode(function(blend, "a"), iterfield=["a"], name="behind")
        contract(behind, rules={"out": only("a")})
        made.connect(node, "out", behind, "a")
        made.run(plugin=GuardPlugin(study, processes=2))
        [made_file] = Path("work/w/behind").rglob("out.txt")
        assert made_file.read_text() == "0 1"

    def test_one_read_from_a_file_says_that_it_is_lost(self):
        again = pickle.loads(pickle.dumps(self.node()))
        with pytest.raises(InputError, match="the contract of a node is lost") as caught:
            contract_of(again.interface)
        assert "attach it again" in str(caught.value)

    def test_a_second_adds_to_the_first_and_to_that_of_the_class(self):
        node = contract(Node(Smooth(), name="n"), rules={"out_files": everything})
        contract(node, statistic=Statistic(values="files"))
        stated = contract_of(node.interface)
        assert stated.rules["out_files"] is everything
        assert stated.describe() == ("rules for out_files; geometry only: more; statistic of files")
        assert contract_of(Smooth()).statistic is None


class TestExtractionsAndStatistics:
    def reading(self, mask: str, data: list[str], kind: Any = Reading) -> Engine:
        made = workflow()
        read = MapNode(kind(), iterfield=["files"], name="read")
        read.inputs.files, read.inputs.more = data, mask
        made.connect(read, "out_file", Node(Test(), name="test"), "files")
        return made

    def test_a_clean_one_runs_without_clearance(self, study: Study, f: list[str]):
        made = self.reading(f[0], f[1:4])
        guard = GuardPlugin(study)
        made.run(plugin=guard)
        assert [finding.verdict for finding in guard.findings] == ["apart"] * 4
        assert Path("work/w/test/one.txt").read_text() == "0 1 2 3"

    @pytest.mark.parametrize("kind", [Reading, Louder])
    def test_a_leak_is_refused_before_anything_ran(self, kind: Any, study: Study, f: list[str]):
        made = self.reading(f[2], f[1:4], kind)
        with pytest.raises(GuardRefused, match="before anything ran") as caught:
            made.run(plugin=GuardPlugin(study))
        found = {(x.node, x.item): x.verdict for x in caught.value.findings}
        assert found == {("w.read", 1): "leak", ("w.test", None): "leak"}
        assert not list(Path("work").rglob("*.txt"))

    def test_values_whose_masks_took_turns_are_no_sample_for_a_plain_test(
        self, study: Study, f: list[str]
    ):
        made = workflow()
        read = MapNode(Reading(), iterfield=["files", "more"], name="read")
        read.inputs.files = f[:3]
        read.inputs.more = [[f[1], f[2]], [f[0], f[2]], [f[0], f[1]]]
        made.connect(read, "out_file", Node(Test(), name="test"), "files")
        found = {x.node: x for x in judge(ancestry_of(made, study))}
        assert found["w.read"].verdict == "apart"
        assert found["w.test"].verdict == "leak"
        assert "cross-fitted" in found["w.test"].reason

    def test_a_rule_cannot_take_the_mark_away(self, study: Study, f: list[str]):
        made = workflow()
        read = Node(Reading(), name="read")
        contract(read, rules={"out_file": only("files", ignored=("more",))})
        read.inputs.files, read.inputs.more = f[0], f[1]
        made.add_nodes([read])
        [mark] = ancestry_of(made, study).outputs["w.read", "out_file"].touch.extractions
        assert (mark.mask, mark.data) == (0b10, 0b01)


class TestRefused:
    @pytest.mark.parametrize(
        ("stated", "word"),
        [
            ({"rules": {"out_file": everything}}, "out_file"),
            ({"rules": {"out_files": only("file")}}, "file"),
            ({"geometry": ["grid"]}, "grid"),
            ({"extraction": Meeting(mask="mask", data="files")}, "mask"),
            ({"statistic": Statistic(values="files", scores=("ages",))}, "ages"),
        ],
    )
    @pytest.mark.parametrize("target", [ForeignEach, Node(ForeignEach(), name="n")])
    def test_a_name_that_is_not_there(self, target: Any, stated: dict[str, Any], word: str):
        with pytest.raises(InputError, match=r"names an (in|out)put that is not there") as caught:
            contract(target, **stated)
        assert caught.value.fields["got"] == word

    def test_a_contract_for_every_function(self):
        with pytest.raises(InputError, match="every Function"):
            contract(Function, geometry=["a"])

    def test_our_own_interfaces_have_theirs(self):
        with pytest.raises(InputError, match="an interface of sequester"):
            contract(Extract, geometry=["mask_files"])

    def test_neither_class_nor_node(self):
        with pytest.raises(InputError, match="neither an interface class nor a node"):
            contract("smooth", geometry=["a"])


# -- where precision was lost ----------------------------------------------------------------------


def _turned(a):
    return a[::-1]


def _first(n):
    return [0]


class TestLostPrecision:
    def told(
        self, made: Engine, study: Study, end: str, output: str = "out"
    ) -> list[tuple[str, str]]:
        tree = ancestry_of(made, study).outputs[end, output]
        return [(node, reason) for node, reason, cure in lost_precision(tree) if cure]

    def files(self, f: list[str]) -> MapNode:
        node = MapNode(CarryOne(), iterfield=["files"], name="files")
        node.inputs.files = f[:3]
        return node

    def test_nothing_is_lost_in_precise_constructs(self, study: Study, f: list[str]):
        made, pick = workflow(), Node(Select(index=[1]), name="pick")
        made.connect(self.files(f), "out_file", pick, "inlist")
        assert self.told(made, study, "w.pick") == []

    def test_a_foreign_node_and_what_it_passed_on(self, study: Study, f: list[str]):
        made = workflow()
        foreign, behind = Node(ForeignEach(), name="foreign"), Node(Select(index=[0]), name="pick")
        foreign.inputs.files = f[:3]
        made.connect(foreign, "out_files", behind, "inlist")
        tree = ancestry_of(made, study).outputs["w.pick", "out"]
        (near, why, _), (far, reason, cure) = lost_precision(tree)
        assert (near, far) == ("w.pick", "w.foreign")
        assert "length of its list" in why
        assert "what ForeignEach does is not known" in reason
        assert "contract(ForeignEach, rules={'out_files': each(INPUT)}" in cure
        contract(foreign, rules={"out_files": each("files")})
        assert self.told(made, study, "w.pick") == []

    def test_a_connection_function(self, study: Study, f: list[str]):
        made = workflow()
        made.connect(
            [
                (
                    self.files(f),
                    Node(Select(index=[0]), name="pick"),
                    [(("out_file", _turned), "inlist")],
                )
            ]
        )
        told = self.told(made, study, "w.pick")
        assert (
            "w.files",
            "a function stands on a connection from its output out_file, and may "
            "return anything of what it is given",
        ) in told

    @pytest.mark.parametrize(
        ("interface", "field", "late", "word"),
        [
            (Select(), "inlist", "index", "its index arrives over an edge"),
            (Split(splits=[1, 2]), "inlist", "splits", "its splits arrive over an edge"),
            (Merge(1), "in1", "no_flatten", "no_flatten arrive over an edge"),
        ],
    )
    def test_a_setting_that_arrives_late(
        self, interface: Any, field: str, late: str, word: str, study: Study, f: list[str]
    ):
        made, node = workflow(), Node(interface, name="node")
        which = Node(function(_first, "n"), name="which")
        made.connect([(self.files(f), node, [("out_file", field)]), (which, node, [("out", late)])])
        output = "out1" if late == "splits" else "out"
        assert ("w.node", word) in self.told(made, study, "w.node", output)

    def test_repeats_dropped_and_a_list_of_unknown_length(self, study: Study, f: list[str]):
        made = workflow()
        start = Node(IdentityInterface(["x"]), name="start")
        start.iterables = ("x", f[:2])
        one = Node(CarryOne(), name="one")
        join = JoinNode(
            IdentityInterface(["xs"]), joinsource="start", joinfield="xs", unique=True, name="join"
        )
        mapped = MapNode(CarryOne(), iterfield=["files"], name="mapped")
        made.connect([(start, one, [("x", "files")]), (one, join, [("out_file", "xs")])])
        made.connect(join, "xs", mapped, "files")
        told = dict(self.told(made, study, "w.mapped", "out_file"))
        assert "unique=True drops repeats" in told["w.join"]
        assert "length is not known" in told["w.mapped"]

    def test_a_grabber_told_late_where_to_look(self, study: Study, f: list[str]):
        made = workflow()
        grab = Node(SelectFiles({"out": str(study.root / "f{n}.txt")}), name="grab")
        made.connect(Node(function(_first, "n"), name="which"), "out", grab, "n")
        tree = ancestry_of(made, study).outputs["w.grab", "out"]
        assert tree.touch.unknown == {"what w.grab finds"}
        assert lost_precision(tree)[0][:2] == (
            "w.grab",
            "n arrive over an edge, so what it finds is not known before the run",
        )

    def test_only_on_the_way_of_the_units_asked_for(self, study: Study, f: list[str]):
        made, merge = workflow(), Node(CarryOne(), name="all")
        foreign = Node(ForeignEach(), name="foreign")
        foreign.inputs.files = f[4:6]
        made.connect([(self.files(f), merge, [("out_file", "files")])])
        made.connect(foreign, "out_files", merge, "more")
        tree = ancestry_of(made, study).outputs["w.all", "out_file"]
        assert [node for node, *_ in lost_precision(tree, 1 << 4)] == ["w.all", "w.foreign"]
        assert [node for node, *_ in lost_precision(tree, 1 << 1)] == ["w.all"]


def test_the_examples_of_the_page_run():
    page = Path(__file__).parent.parent / "docs" / "contracts.md"
    blocks = re.findall(r"```python\n(.*?)```", page.read_text(), re.S)
    given: dict[str, Any] = {"__name__": "page"}
    for block in blocks:
        exec(block, given)
    assert len(blocks) == 4
    assert contract_of(given["Smooth"]()).geometry == {"reference"}
    assert contract_of(given["read"].interface).meeting is not None
    assert contract_of(given["test"].interface).statistic is not None
