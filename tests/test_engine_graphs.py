"""Every workflow that the engine's own tests build is propagated, and loses no source."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

HERE = Path(__file__).parent


@pytest.fixture(scope="module")
def judged(tmp_path_factory: pytest.TempPathFactory) -> list[dict[str, Any]]:
    """What was found in each graph that nipype's tests of its engine and plugins expand."""
    folder = tmp_path_factory.mktemp("engine")
    command = [sys.executable, "-m", "pytest", "-q", "-p", "no:cacheprovider", "-p", "judging"]
    command += ["--pyargs", "nipype.pipeline.engine.tests", "nipype.pipeline.plugins.tests"]
    environ = {**os.environ, "JUDGED": "judged.json", "PYTHONPATH": str(HERE)}
    environ["TMPDIR"] = str(folder)
    done = subprocess.run(
        command, cwd=folder, env=environ, capture_output=True, text=True, timeout=300, check=False
    )
    assert (folder / "judged.json").is_file(), done.stdout + done.stderr
    found: list[dict[str, Any]] = json.loads((folder / "judged.json").read_text())
    return found


def test_no_graph_raises_and_no_output_forgets_a_source(judged: list[dict[str, Any]]):
    assert [(graph["test"], graph["faults"]) for graph in judged if graph["faults"]] == []


def test_the_graphs_are_there(judged: list[dict[str, Any]]):
    """A plugin that finds nothing to judge would pass the other test, too."""
    print(len(judged), "graphs,", sum(graph["outputs"] for graph in judged), "outputs")
    assert len(judged) >= 80
    assert sum(graph["tagged"] for graph in judged) >= 500
    tests = {graph["test"].split("::")[-1].split("[")[0].split(" ")[0] for graph in judged}
    assert {"test_3mods", "test_join_expansion", "test_nested_workflow_join"} <= tests
