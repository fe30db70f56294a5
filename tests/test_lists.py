"""Lists that turn out otherwise, while running, than the graph promised: who is who is lost."""

from __future__ import annotations

from pathlib import Path

import pytest
from gallery_parts import (
    SUBS,
    Garden,
    by_fold,
    empty,
    extract,
    flip_test,
    foreign,
    read_and_test,
)
from nipype import MapNode, Merge, Node, Workflow
from nipype.interfaces.base import (
    BaseInterfaceInputSpec,
    File,
    SimpleInterface,
    TraitedSpec,
    traits,
)
from sequester import contract
from sequester.nodes.interfaces import ChooseMask, Extract
from sequester.nodes.masks import Strongest
from sequester.nodes.procedure import Procedure
from sequester.nodes.rules import each
from sequester.workflows.guard import GuardPlugin, GuardRefused

PLAIN = Procedure(Strongest(6))


@pytest.fixture
def garden(tmp_path: Path, quiet_engine: None) -> Garden:
    return Garden(tmp_path / "garden")


class _MaybeIn(BaseInterfaceInputSpec):
    in_file = File(exists=True)
    there = traits.Bool(True, usedefault=True)


class _MaybeOut(TraitedSpec):
    out_file = File()


class Maybe(SimpleInterface):
    """Hands a file on, or leaves its output undefined: the engine's Merge then skips the place."""

    input_spec = _MaybeIn
    output_spec = _MaybeOut

    def _run_interface(self, runtime):
        if self.inputs.there:
            self._results["out_file"] = self.inputs.in_file
        return runtime


def merged(graph: Workflow, name: str, files: list[str], gone: int | None) -> Node:
    """A list of files, one of which does not come."""
    together = Node(Merge(len(files)), name)
    for i, path in enumerate(files):
        one = Node(Maybe(in_file=path, there=i != gone), f"{name}{i}")
        graph.connect(one, "out_file", together, f"in{i + 1}")
    return together


def own_runs(garden: Garden, gone: tuple[int, int] | None) -> Workflow:
    """Everybody's own region from run 1, read in run 2; perhaps with a gap in either list."""
    graph = empty()
    lists = [garden.of(scan) for scan in ("lanterns1", "lanterns2")]
    if gone:
        lists = [[*files, files[0]] for files in lists]
    masks, maps = (
        merged(graph, name, files, gone[i] if gone else None)
        for i, (name, files) in enumerate(zip(("masks", "maps"), lists, strict=True))
    )
    own = MapNode(ChooseMask(rule=Strongest(6)), iterfield=["in_file"], name="own")
    read = Node(Extract(labels=list(SUBS)), "extract")
    graph.connect([(masks, own, [("out", "in_file")]), (maps, read, [("out", "in_files")])])
    graph.connect(own, "mask_file", read, "mask_files")
    return graph


def test_two_gaps_that_move_everybody_by_one(garden: Garden):
    own_runs(garden, None).run(plugin=GuardPlugin(garden.study))  # without gaps all is well
    graph = own_runs(garden, (0, 6))
    graph.base_dir = "again"
    with pytest.raises(GuardRefused, match=r"other runs of several\ssubjects") as refused:
        graph.run(plugin=GuardPlugin(garden.study))
    assert refused.value.started


def turned(xs):
    """The last first."""
    return xs[-1:] + xs[:-1]


def test_a_contract_that_promises_another_order(garden: Garden):
    """Nobody's held-out map is where the contract says; all of them are in the list."""
    graph, maps = empty(), garden.of("lanterns1")
    node = foreign(turned, xs=maps)
    contract(node, rules={"out": each("xs")})
    read, test = extract(), flip_test(maps, PLAIN)
    graph.connect(node, "out", read, "in_files")
    graph = read_and_test(graph, by_fold(maps, PLAIN), "row_masks", read, test)
    with pytest.raises(GuardRefused, match="chosen on") as refused:
        graph.run(plugin=GuardPlugin(garden.study))
    assert refused.value.started
