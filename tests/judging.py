"""A pytest plugin for the engine's own tests: every graph that they expand is judged.

``python -m pytest -p judging --pyargs nipype.pipeline.engine.tests`` writes what it found to the
file that ``JUDGED`` names. Workflows run one node after another, whatever plugin a test asks for,
and tests that need a cluster run, too: it is the graphs that count here, not their results.
"""

from __future__ import annotations

import json
import os
import traceback
from collections.abc import Callable
from pathlib import Path
from typing import Any

import nipype.pipeline.engine as engine
import pytest
from nipype import IdentityInterface
from nipype.pipeline.engine import utils, workflows
from sequester.nodes.interfaces.generic import settings_of
from sequester.nodes.touch import Touch, Unit
from sequester.workflows.ancestry import Ancestry, join_slot, node_name
from sequester.workflows.judge import judge
from sequester.workflows.study import Row, Study

judged: list[dict[str, Any]] = []
_expand: Callable[..., Any] = utils.generate_expanded_graph
_run: Callable[..., Any] = workflows.Workflow.run


def pytest_configure(config: pytest.Config) -> None:
    for module in (utils, workflows, engine):
        module.generate_expanded_graph = _expand_and_judge
    workflows.Workflow.run = _run_one_by_one


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    for item in items:
        item.own_markers = [mark for mark in item.own_markers if mark.name != "skipif"]


def pytest_unconfigure(config: pytest.Config) -> None:
    Path(os.environ["JUDGED"]).write_text(json.dumps(judged))


def _run_one_by_one(self: Any, plugin: Any = None, plugin_args: Any = None, **more: Any) -> Any:
    known = {"status_callback": (plugin_args or {}).get("status_callback")}
    return _run(self, plugin="Linear", plugin_args={k: v for k, v in known.items() if v}, **more)


def _expand_and_judge(graph_in: Any) -> Any:
    graph = _expand(graph_in)
    found: dict[str, Any] = {"test": os.environ.get("PYTEST_CURRENT_TEST", ""), "nodes": len(graph)}
    try:
        found |= faults_of(graph)
    except Exception:  # what any graph raises is what this is here to find: a fault of it
        found["faults"] = [traceback.format_exc()]
    judged.append(found)
    return graph


def faults_of(graph: Any) -> dict[str, Any]:
    """Tag every source of a graph, and see which outputs behind it do not say so."""
    sources = [node for node in graph.nodes() if not graph.in_degree(node)]
    study = Study(Path("/"), [Row(f"{i}", None, Unit(sub=f"{i}")) for i in range(len(sources))])
    ancestry = Ancestry(graph, study)
    for i, node in enumerate(sources):
        fields = [*settings_of(node.inputs)] or node.interface.inputs.copyable_trait_names()
        for field in fields:
            ancestry.observe(node, field, {"tag": Touch(values=1 << i)})
    ancestry.propagate()
    judge(ancestry)
    expected = reached(ancestry, sources)
    faults = [
        f"{name}.{output} misses {expected[name, output] & ~tree.touch.values:b}"
        for (name, output), tree in ancestry.outputs.items()
        if expected[name, output] & ~tree.touch.values
    ]
    tagged = sum(1 for (name, output) in ancestry.outputs if expected[name, output])
    return {"outputs": len(ancestry.outputs), "tagged": tagged, "faults": faults}


def reached(ancestry: Ancestry, sources: list[Any]) -> dict[tuple[str, str], int]:
    """Which sources each output depends on, by the edges alone."""
    found: dict[tuple[str, str], int] = {}
    for node in ancestry.nodes:
        name = node_name(node)
        own = 1 << sources.index(node) if node in sources else 0
        into: dict[str, int] = {}
        for source, _, data in ancestry.graph.in_edges(node, data=True):
            for output, field in data["connect"]:
                slot = join_slot(node, field)
                at = slot[0] if slot else field
                sent = output[0] if isinstance(output, tuple) else output
                into[at] = into.get(at, 0) | found.get((node_name(source), sent), 0)
        whole = own
        for bits in into.values():
            whole |= bits
        for output in [o for n, o in ancestry.outputs if n == name]:
            alone = type(node.interface) is IdentityInterface
            found[name, output] = into.get(output, 0) | own if alone else whole
    return found
