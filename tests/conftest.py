"""Fixtures and settings shared by the test modules."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import Any

import hypothesis
import pytest

# Modules that several test modules share, such as worlds.py, lie beside them.
sys.path.append(str(Path(__file__).parent))

# The same examples on every machine, and no time limit on a busy one.
hypothesis.settings.register_profile("sequester", deadline=None, derandomize=True)
hypothesis.settings.load_profile("sequester")


@pytest.fixture(scope="session")
def checks() -> dict[str, Any]:
    """Inputs and values of published and recomputed examples (tests/data/checks.json)."""
    path = Path(__file__).with_name("data") / "checks.json"
    made: dict[str, Any] = json.loads(path.read_text(encoding="utf-8"))
    return made
