"""Run a study: settings to workflow, under the guard, to the output folder."""

from __future__ import annotations

import errno
import logging
import os
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ..nodes.errors import InputError
from .build import study_workflow
from .collect import adjust, collect, collect_comparisons, find_nodes
from .guard import GuardPlugin, Listener
from .judge import Finding
from .outputs import claimed, write_all
from .settings import Settings
from .verify import verify


@dataclass(frozen=True)
class RunResult:
    """What a run of a study gives.

    Parameters
    ----------
    output : Path
    tests : list of dict
        The rows of roi_tests.tsv.
    comparisons : list of dict
        The rows of comparisons.tsv.
    findings : list of Finding
        The guard's verdicts.
    overlaps : list of (name, name)
        Tested regions whose search regions share voxels: then no Holm over regions.
    """

    output: Path
    tests: list[dict[str, Any]]
    comparisons: list[dict[str, Any]]
    findings: list[Finding]
    overlaps: list[tuple[str, str]]


@contextmanager
def engine_quiet() -> Iterator[None]:
    """Have the engine's own log and crash reports keep out of the user's messages."""
    loggers = [logging.getLogger(name) for name in ("nipype", "nipype.workflow", "nipype.utils")]
    levels = [logger.level for logger in loggers]
    for logger in loggers:
        logger.setLevel(logging.CRITICAL + 1)
    try:
        yield
    finally:
        for logger, level in zip(loggers, levels, strict=True):
            logger.setLevel(level)


def check_study(settings: Settings) -> list[Finding]:
    """Judge a study without executing anything.

    Raises
    ------
    GuardRefused
        With all findings.
    """
    verify(settings)
    guard = GuardPlugin(settings.study, dry=True)
    with tempfile.TemporaryDirectory() as folder, engine_quiet():
        study_workflow(settings, Path(folder)).run(plugin=guard)
    return guard.findings


def run_study(
    settings: Settings,
    listener: Listener | None = None,
    work: Path | None = None,
    processes: int = 1,
) -> RunResult:
    """Run a study under the guard and write its output folder.

    Parameters
    ----------
    settings : Settings
    listener : callable, optional
        Told how far the nodes are.
    work : Path, optional
        Keep the engine's working folder here, for a faster second run. By default it lies
        beside the output and is removed.
    processes : int
        How many nodes may run at once; the output has the same bytes.

    Raises
    ------
    GuardRefused
        Nothing is written then.
    InputError
    """
    verify(settings)
    if work is not None and work.exists() and not work.is_dir():
        raise InputError("--work is a file", where=str(work), remedy="name a folder")
    guard = GuardPlugin(settings.study, listener, processes=processes)
    with claimed(settings.output) as stage:
        engine = work if work is not None else stage.with_name(f".{settings.output.name}.work")
        if work is None:
            shutil.rmtree(engine, ignore_errors=True)  # left by a run that was killed
        engine.mkdir(parents=True, exist_ok=True)
        try:
            with engine_quiet(), _here():
                graph = _run(study_workflow(settings, engine.absolute()), guard)
            nodes = find_nodes(graph)
            outputs = [collect(roi, settings, nodes) for roi in settings.rois]
            overlaps = adjust(outputs)
            compared = collect_comparisons(settings, nodes)
            tests = write_all(stage, settings, outputs, compared, guard.findings)
        finally:
            if work is None:
                shutil.rmtree(engine, ignore_errors=True)
    return RunResult(settings.output, tests, compared, guard.findings, overlaps)


@contextmanager
def _here() -> Iterator[None]:
    """Come back to the current folder, which the engine changes, whatever happens."""
    folder = os.getcwd()
    try:
        yield
    finally:
        os.chdir(folder)


def _run(workflow: Any, guard: GuardPlugin) -> Any:
    try:
        return workflow.run(plugin=guard)
    except Exception as error:
        # Inside the engine the error is text; the caller tells it as any fault in writing.
        for code in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EROFS):
            if os.strerror(code) in str(error):
                raise OSError(code, os.strerror(code)) from error
        raise
