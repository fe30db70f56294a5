"""Workflows that tests run: short, quiet, with somebody else's functions in them."""

from __future__ import annotations

import logging
import signal
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest
from nipype import Function, Workflow

LOGGERS = ("nipype.workflow", "nipype.utils", "nipype.interface")


def silence(patch: pytest.MonkeyPatch, *more: str) -> None:
    """The engine without its log."""
    for name in (*LOGGERS, *more):
        patch.setattr(logging.getLogger(name), "level", logging.CRITICAL + 1)


@contextmanager
def two_minutes() -> Iterator[None]:
    """A pool whose worker dies would wait for ever; a test must not."""

    def late(*_: object) -> None:
        raise TimeoutError("still running after two minutes")

    before = signal.signal(signal.SIGALRM, late)
    signal.alarm(120)
    try:
        yield
    finally:
        signal.alarm(0)
        signal.signal(signal.SIGALRM, before)


def workflow(name: str = "w", **execution: str) -> Workflow:
    """A workflow without anything, that works in ``work`` below this folder."""
    made = Workflow(name, base_dir=str(Path("work").absolute()))
    made.config["execution"] = {
        "crashdump_dir": str(Path.cwd()),
        "create_report": "false",
        "poll_sleep_duration": "0.02",
        **execution,
    }
    return made


def called(body: str, **inputs: Any) -> Function:
    """A function of somebody else's, as its text."""
    made = Function(input_names=list(inputs), output_names=["out"])
    made.inputs.function_str = body
    made.inputs.trait_set(**inputs)
    return made


def hidden(path: object) -> str:
    """A path as an expression in which the graph does not see a file's name."""
    return f"{str(path)[::-1]!r}[::-1]"
