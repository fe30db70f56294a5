"""Honest region-of-interest statistics for nipype: choose on some data, test on other data.

The handful of names a user starts with is loaded on first use, so that importing
`sequester` stays cheap.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_STARTERS = {
    "Guard": "sequester.workflows.guard",
    "Study": "sequester.workflows.study",
    "leave_one_subject_out": "sequester.workflows.plans",
    "given_region": "sequester.workflows.plans",
    "exploratory": "sequester.workflows.plans",
    "Procedure": "sequester.nodes.procedure",
}

__all__ = ["__version__", *_STARTERS]


def __getattr__(name: str) -> Any:
    if name in _STARTERS:
        return getattr(import_module(_STARTERS[name]), name)
    raise AttributeError(f"module 'sequester' has no attribute {name!r}")
