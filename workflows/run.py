"""Run a study: settings to workflow, under the guard, to the output folder."""

from __future__ import annotations

import errno
import logging
import os
import shutil
import tempfile
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ..nodes.errors import InputError
from .build import study_workflow
from .collect import adjust, collect, collect_comparisons, find_nodes
from .contours import check_masks
from .findings import Findings
from .guard import GuardPlugin, Listener
from .judge import Finding
from .ledger import Chain, Ledger, Shelf, shelf_of
from .looks import run_entries, seen
from .origins import declarations, recognised
from .outputs import write_all
from .record import write_record
from .report.notebook import table, tests_html
from .settings import Settings
from .staging import claimed
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
        Tested regions whose search regions share voxels.
    """

    output: Path
    tests: list[dict[str, Any]]
    comparisons: list[dict[str, Any]]
    findings: list[Finding]
    overlaps: list[tuple[str, str]]

    def table(self, name: str = "roi_tests") -> Any:
        """A table of the output folder: a pandas DataFrame where pandas is installed, else rows."""
        return table(self.output, name)

    def _repr_html_(self) -> str:
        """The results, in a notebook."""
        return tests_html(self.tests)


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


def check_study(settings: Settings) -> Findings:
    """Judge a study without executing anything; its ledger is read and not written.

    Raises
    ------
    GuardRefused
        With all findings.
    """
    verify(settings)
    settings = recognised(settings, shelf_of(settings.ledger, Ledger(settings.ledger).sound()))
    guard = GuardPlugin(settings.study, dry=True)
    with tempfile.TemporaryDirectory() as folder, engine_quiet():
        study_workflow(settings, Path(folder)).run(plugin=guard)
    return guard.findings


def run_study(
    settings: Settings,
    listener: Listener | None = None,
    work: Path | None = None,
    processes: int = 1,
    *,
    engine: str = "",
    plugin_args: Mapping[str, Any] | None = None,
    record: bool = True,
    finish: Callable[[Path], object] | None = None,
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
    engine, plugin_args : str, dict
        What runs the nodes, and what it is given, as in `GuardPlugin`.
    record : bool
        Whether the study's ledger counts: it is read, and the run's declarations, masks and
        looks are written to it. A demonstration does without.
    finish : callable, optional
        Given the whole output folder before it takes its name: the place to make the page.

    Raises
    ------
    GuardRefused
        Nothing is written then.
    InputError
    """
    verify(settings)
    ledger = Ledger(settings.ledger) if record else None
    if ledger is not None:
        ledger.check_writable()
    known = shelf_of(ledger.path, ledger.sound()) if ledger else Shelf(Chain())
    stated, settings = settings, recognised(settings, known)
    if work is not None and work.exists() and not work.is_dir():
        raise InputError("--work is a file", where=str(work), remedy="name a folder")
    guard = GuardPlugin(
        settings.study, listener, engine=engine, plugin_args=plugin_args, processes=processes
    )
    with claimed(settings.output, settings.name, settings.inputs) as stage:
        folder = work if work is not None else stage.with_name(f".{settings.output.name}.work")
        if work is None:
            shutil.rmtree(folder, ignore_errors=True)  # left by a run that was killed
        folder.mkdir(parents=True, exist_ok=True)
        try:
            workflow = study_workflow(settings, folder.absolute())
            if engine == "SLURM":  # each look at the queue is a request to the cluster
                workflow.config["execution"]["poll_sleep_duration"] = "1"
            with engine_quiet(), _here():
                graph = _run(workflow, guard)
            nodes = find_nodes(graph)
            outputs = [collect(roi, settings, nodes) for roi in settings.rois]
            overlaps = adjust(outputs)
            check_masks(outputs, settings)
            compared = collect_comparisons(settings, nodes)
            read = seen(outputs)

            def entries(chain: Chain) -> list[dict[str, Any]]:
                there = shelf_of(ledger.path, chain) if ledger else Shelf(chain)
                made = run_entries(settings, read, compared, guard.findings, there)
                return [*declarations(stated, chain), *made]

            if ledger is None:
                entries(Chain())
            else:
                ledger.extend(entries)
            reasons = {roi.name: roi.claim_reason for roi in settings.rois}
            write_record(stage, guard, reasons, settings.variants)
            tests = write_all(stage, settings, outputs, compared, guard.findings)
            if finish is not None:
                finish(stage)
        finally:
            if work is None:
                shutil.rmtree(folder, ignore_errors=True)
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
    except Exception as error:  # raised again, as what it is where that can be told
        # Inside the engine the error is text; the caller tells it as any fault in writing.
        for code in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EROFS):
            if os.strerror(code) in str(error):
                raise OSError(code, os.strerror(code)) from error
        raise
