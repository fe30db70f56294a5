"""What the graph says before a run is never less than what the run really makes.

Hypothesis draws workflows (see `carrying`): sources, foreign nodes, nodes with our rules, and
every construct of the engine. Each is really run, and its files tell what they derive from.
Nothing may be missing from what was said. Where only constructs of known structure are used,
nothing may be too much either. Every file of the study is read in two regions that the workflow
made: each that is inside the region is a leak, and must be caught; each other must be cleared.

``SEQUESTER_GRAPHS=2000`` sets how many are drawn.
"""

from __future__ import annotations

import os
import shutil
import tempfile
from collections import Counter
from pathlib import Path
from random import Random
from typing import Any

import pytest
from carrying import (
    CONSTRUCTS,
    Drawn,
    N,
    WatchPlugin,
    carried_study,
    inside,
    overstated,
    results,
    understated,
)
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from nipype.pipeline.engine.utils import evaluate_connect_function
from planting import paths_of
from running import silence
from sequester.workflows.ancestry import node_name
from sequester.workflows.judge import judge

GRAPHS = int(os.environ.get("SEQUESTER_GRAPHS", "200"))


@pytest.fixture(scope="module")
def seen() -> Counter[str]:
    """What the drawn graphs have been made of."""
    return Counter()


@pytest.fixture(scope="module", autouse=True)
def _quiet() -> Any:
    with pytest.MonkeyPatch.context() as patch:
        silence(patch)
        yield


@settings(
    max_examples=GRAPHS,
    deadline=None,
    database=None,
    derandomize=True,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow],
)
@given(st.randoms(), st.booleans(), st.integers(2, 7))
def test_nothing_is_missing(seen: Counter[str], rng: Random, precise: bool, steps: int):
    folder = Path(tempfile.mkdtemp())
    before = Path.cwd()
    os.chdir(folder)
    try:
        faults = faults_of(seen, folder, rng, precise=precise, steps=steps)
    finally:
        os.chdir(before)
        shutil.rmtree(folder)
    assert faults == []


def faults_of(
    seen: Counter[str], folder: Path, rng: Random, *, precise: bool, steps: int
) -> list[str]:
    """Draw a workflow, run it, and compare what was said with what was made."""
    study = carried_study(folder / "study")
    drawn = Drawn(rng, paths_of(study), precise=precise, steps=steps)
    drawn.workflow.base_dir = str(folder / "work")
    watch = WatchPlugin(study, run=True)
    drawn.workflow.run(plugin=watch)
    seen.update(drawn.used)
    seen["graphs"] += 1
    seen["precise graphs"] += precise
    faults = []
    made = {}
    for name, output, tree, real in results(watch):
        made[name, output] = real
        seen["outputs"] += 1
        faults += understated(tree, real, f"{name}.{output}")
        if precise:
            faults += overstated(tree, real, f"{name}.{output}")
    for node in watch.graph.nodes():
        if node.name not in drawn.probes:
            continue
        [(source, _, edge)] = watch.graph.in_edges(node, data=True)
        output, function, given = connected(edge["connect"][0][0])
        mask = made[node_name(source), output]
        chosen_on = inside(evaluate_connect_function(function, given, mask) if function else mask)
        found = [f for f in judge(watch.ancestry) if f.node == node_name(node)]
        for unit in range(N):  # a list of masks meets every file with each of its items
            here = [f for f in found if f.data_units == 1 << unit]
            leaks = unit in chosen_on
            seen["leaks" if leaks else "clean twins"] += 1
            if not here or (leaks and all(f.allowed for f in here)):
                faults.append(f"{node.name}: the leak of unit {unit} is let pass")
            if precise and not leaks and any(f.verdict != "apart" for f in here):
                faults.append(f"{node.name}: unit {unit} is refused: {here[0].reason}")
    return faults


def connected(output: Any) -> tuple[str, str, Any]:
    """The output of an edge, and the connection function on it with its arguments."""
    return output if isinstance(output, tuple) else (output, "", ())


def test_every_construct_was_drawn(seen: Counter[str]):
    """Runs behind the other: a soundness test that draws nothing would pass, too."""
    print("\n", dict(sorted(seen.items())))
    assert seen["graphs"] >= min(GRAPHS, 200)
    assert {construct for construct in CONSTRUCTS if not seen[construct]} == set()
    assert seen["leaks"] > seen["graphs"]
    assert seen["clean twins"] > seen["graphs"]
