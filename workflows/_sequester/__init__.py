"""Honest region-of-interest statistics for nipype: choose on some data, test on other data.

The handful of names a user starts with is loaded on first use, so that importing
`sequester` stays cheap.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_STARTERS = {
    "GuardPlugin": "sequester.workflows.guard",
    "GuardRefused": "sequester.workflows.guard",
    "write_record": "sequester.workflows.record",
    "read_table": "sequester.workflows.study",
    "Origin": "sequester.workflows.study",
    "read_settings": "sequester.workflows.settings",
    "run_study": "sequester.workflows.run",
    "leave_one_subject_out": "sequester.workflows.plans",
    "cross_fitted": "sequester.workflows.plans",
    "own_masks": "sequester.workflows.plans",
    "a_priori": "sequester.workflows.plans",
    "exploratory": "sequester.workflows.plans",
    "around_folds": "sequester.workflows.around",
    "compared": "sequester.workflows.around",
    "two_sample": "sequester.nodes.design",
    "Cluster": "sequester.nodes.masks",
    "Threshold": "sequester.nodes.masks",
    "Procedure": "sequester.nodes.procedure",
    "contract": "sequester.nodes.interfaces.contracts",
    "Meeting": "sequester.nodes.rules",
    "Statistic": "sequester.nodes.rules",
    "each": "sequester.nodes.rules",
    "only": "sequester.nodes.rules",
    "everything": "sequester.nodes.rules",
}

__all__ = [  # noqa: PLE0604 - the names are strings, checked by a test
    "__version__",
    *_STARTERS,
]


def __getattr__(name: str) -> Any:
    if name in _STARTERS:
        return getattr(import_module(_STARTERS[name]), name)
    raise AttributeError(f"module 'sequester' has no attribute {name!r}")
