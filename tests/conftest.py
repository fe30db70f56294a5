"""Fixtures and settings shared by the test modules."""

from __future__ import annotations

import json
import os
import sys
from pathlib import Path
from typing import Any

import hypothesis
import pytest

# Modules that several test modules share, such as worlds.py, lie beside them.
sys.path.append(str(Path(__file__).parent))
os.environ["NO_ET"] = "1"  # the engine would ask the network for its latest version
os.environ.pop("COLUMNS", None)  # tests in parallel are told of a terminal that is not there

from engines_under_test import cluster, ipython, mortal, slurm  # noqa: F401 - fixtures for every module
from planting import paths_of
from running import silence
from sequester.workflows.study import Study

# The same examples on every machine, and no time limit on a busy one.
hypothesis.settings.register_profile("sequester", deadline=None, derandomize=True)
hypothesis.settings.load_profile("sequester")


@pytest.fixture
def quiet_engine(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """The engine in a folder of its own, without its log."""
    monkeypatch.chdir(tmp_path)
    silence(monkeypatch)


@pytest.fixture
def maps(study: Study) -> list[str]:
    """The files of the module's own ``study``."""
    return paths_of(study)


@pytest.fixture(scope="session")
def checks() -> dict[str, Any]:
    """Inputs and values of published and recomputed examples (tests/data/checks.json)."""
    path = Path(__file__).with_name("data") / "checks.json"
    made: dict[str, Any] = json.loads(path.read_text(encoding="utf-8"))
    return made


@pytest.fixture(scope="session")
def garden(tmp_path_factory: pytest.TempPathFactory) -> Any:
    """A study of 8 subjects and 2 runs that ran, with its page; not to be changed."""
    from gardens import FLIPS, plant
    from sequester.workflows.report.page import write_report
    from sequester.workflows.run import run_study
    from sequester.workflows.settings import read_settings

    study = plant(tmp_path_factory.mktemp("garden"), 8, 2, flips=FLIPS)
    result = run_study(read_settings(study), record=False)
    write_report(result.output)
    return result
