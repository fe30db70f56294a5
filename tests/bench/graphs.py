"""What judging costs beside the engine's own expansion of the same graph.

Run ``python tests/bench/graphs.py``. Three graphs:

- wide: 5,000 subjects by iterables through ten nodes each, joined, extracted and tested;
- node: leave-one-out over 5,000 subjects in one all-folds node, extracted and tested;
- map: the same with a MapNode over the folds, for any group software.

Each is judged in a process of its own. Printed are seconds of the processor, the ratio to the
engine's expansion of the same workflow in the same process, and the memory that judging adds.
"""

from __future__ import annotations

import argparse
import gc
import json
import os
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import psutil
from nipype import Function, IdentityInterface, JoinNode, MapNode, Node
from nipype import Workflow as Engine
from nipype.pipeline.engine.utils import generate_expanded_graph
from sequester.nodes.interfaces import ChooseByFold, Extract, FlipTest, FoldLists, MasksByRow
from sequester.nodes.masks import Strongest
from sequester.nodes.procedure import Procedure
from sequester.nodes.touch import Unit
from sequester.workflows.ancestry import Ancestry
from sequester.workflows.judge import judge
from sequester.workflows.study import Row, Study

N = 5000
STEPS = 10


def step(in_file, other=1):  # a node of somebody's pipeline; never run
    return in_file


def study(n: int) -> Study:
    """A table of n subjects; the files need not exist to be judged."""
    rows = [
        Row(f"sub-{i:05d}.nii", None, Unit(sub=f"{i:05d}", run="1", suffix="bold"))
        for i in range(n)
    ]
    return Study(Path("/data"), rows)


def _files(n: int) -> list[str]:
    return [f"/data/sub-{i:05d}.nii" for i in range(n)]


def _tested(made: Engine, choose: Any, masks: str, maps: tuple[Any, str], n: int) -> None:
    """Extraction and test of values in masks of the folds."""
    labels = [f"{i:05d}" for i in range(n)]
    extract = Node(Extract(labels=labels), name="extract")
    test = Node(FlipTest(labels=labels, procedure=Procedure(Strongest(10))), name="test")
    made.connect([(choose, extract, [(masks, "mask_files")])])
    for node in (extract, test):
        made.connect(*maps, node, "in_files")
    made.connect(extract, "values", test, "values")


def wide(n: int) -> Engine:
    """Iterables, ten foreign nodes for each subject, a join, folds, extraction and test."""
    made = Engine("wide")
    start = Node(IdentityInterface(["file"]), name="start")
    start.iterables = ("file", _files(n))
    last, output = start, "file"
    for i in range(STEPS):
        node = Node(Function(["in_file", "other"], ["out"], step), name=f"step{i}")
        node.inputs.other = i
        made.connect(last, output, node, "in_file")
        last, output = node, "out"
    join = JoinNode(
        IdentityInterface(["files"]), joinsource="start", joinfield="files", name="join"
    )
    made.connect(last, output, join, "files")
    _folds(made, (join, "files"), n)
    return made


def _folds(made: Engine, maps: tuple[Any, str], n: int) -> None:
    labels = [f"{i:05d}" for i in range(n)]
    choose = Node(ChooseByFold(labels=labels, procedure=Procedure(Strongest(10))), name="choose")
    made.connect(*maps, choose, "in_files")
    _tested(made, choose, "row_masks", maps, n)


def _maps(n: int) -> MapNode:
    made = MapNode(Function(["in_file"], ["out"], step), iterfield=["in_file"], name="maps")
    made.inputs.in_file = _files(n)
    return made


def node(n: int) -> Engine:
    """All folds in one node."""
    made = Engine("node")
    _folds(made, (_maps(n), "out"), n)
    return made


def mapped(n: int) -> Engine:
    """A MapNode over the folds."""
    made, maps = Engine("map"), _maps(n)
    labels = [f"{i:05d}" for i in range(n)]
    lists = Node(FoldLists(labels=labels), name="lists")
    group = MapNode(Function(["in_files"], ["out"], step), iterfield=["in_files"], name="group")
    rows = Node(MasksByRow(fold_of_row=list(range(n))), name="rows")
    made.connect(maps, "out", lists, "in_files")
    made.connect(lists, "selection_files", group, "in_files")
    made.connect(group, "out", rows, "mask_files")
    _tested(made, rows, "row_masks", (maps, "out"), n)
    return made


GRAPHS: dict[str, Callable[[int], Engine]] = {"wide": wide, "node": node, "map": mapped}


def measure(name: str, n: int) -> dict[str, float]:
    """Expand a graph and judge it: seconds of the processor, and the memory judging adds, in MB."""
    made, table = GRAPHS[name](n), study(n)
    flat = made._create_flat_graph()
    start = time.process_time()
    graph = generate_expanded_graph(flat)
    expanded = time.process_time() - start
    gc.collect()
    process = psutil.Process()
    before = process.memory_info().rss
    start = time.process_time()
    ancestry = Ancestry(graph, table)
    propagated = time.process_time() - start
    findings = judge(ancestry)
    judged = time.process_time() - start
    added = (process.memory_info().rss - before) / 1e6
    wrong = [f.reason for f in findings if not f.allowed]
    assert not wrong, wrong[:3]
    return {
        "nodes": len(graph),
        "findings": len(findings),
        "expand": expanded,
        "propagate": propagated,
        "judge": judged,
        "ratio": judged / expanded,
        "MB": added,
    }


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("names", nargs="*", default=[*GRAPHS])
    parser.add_argument("--n", type=int, default=N)
    parser.add_argument("--one", help="measure this graph and print JSON")
    given = parser.parse_args()
    if given.one:
        print(json.dumps(measure(given.one, given.n)))
        return
    print(f"{'graph':<8}{'nodes':>8}{'expand':>9}{'judge':>9}{'ratio':>8}{'MB':>8}")
    for name in given.names:
        command = [sys.executable, __file__, "--one", name, "--n", str(given.n)]
        environ = {**os.environ, "NO_ET": "1"}
        done = subprocess.run(command, capture_output=True, text=True, check=True, env=environ)
        found = json.loads(done.stdout.splitlines()[-1])
        # A graph of a few nodes expands in no time: there is nothing to compare with.
        ratio = f"{found['ratio']:.2f}" if found["expand"] > 0.1 else "-"
        print(
            f"{name:<8}{found['nodes']:>8}{found['expand']:>8.2f}s{found['judge']:>8.2f}s"
            f"{ratio:>8}{found['MB']:>8.0f}"
        )


if __name__ == "__main__":
    main()
