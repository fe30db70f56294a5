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

import numpy as np

from ..nodes.errors import InputError
from ..nodes.images import check_same_grid, geometry_of, n_volumes, open_image, read_mask
from ..nodes.masks import sphere
from ..nodes.results import exploratory_result
from ..nodes.roi import holm
from ..nodes.space import Grid
from .digests import digest
from .guard import GuardPlugin, Listener
from .judge import Finding
from .outputs import RoiOutput, claimed, find_nodes, read_record, write_all
from .plans import study_workflow
from .settings import A_PRIORI, EXPLORATORY, LEAVE_ONE_OUT, OWN_MASKS, Roi, Settings


@dataclass(frozen=True)
class RunResult:
    """What a run of a study gives.

    Parameters
    ----------
    output : Path
    tests : list of dict
        The rows of roi_tests.tsv.
    findings : list of Finding
        The guard's verdicts.
    """

    output: Path
    tests: list[dict[str, Any]]
    findings: list[Finding]


def verify(settings: Settings) -> None:
    """Check every selected file's header and digest, and every region's grid.

    Raises
    ------
    InputError
        For an absent or unreadable file, differing grids, or identical files under two names.
    """
    first = None
    seen: dict[tuple[str, int | None], str] = {}
    for row in settings.used:
        path = settings.root / row.path
        image = open_image(path)
        total = n_volumes(path, image)
        if row.volume is not None and row.volume >= total:
            raise InputError(
                "no such volume",
                where=str(path),
                expected=f"0 to {total - 1}",
                got=str(row.volume),
            )
        if row.volume is None and total > 1:
            raise InputError(
                "4-D file without a volume number",
                where=str(path),
                got=f"{total} volumes",
                remedy="fill the table's volume column (counting from 0)",
            )
        first = first or (str(path), geometry_of(image))
        check_same_grid(first, [(str(path), geometry_of(image))])
        key = (digest(path), row.volume)
        if seen.setdefault(key, row.name) != row.name:
            raise InputError(
                "identical files under two names",
                where=str(path),
                got=f"the same bytes as {seen[key]}",
                remedy="one of the two rows of the study table names the wrong file",
            )
    assert first is not None, "settings hold at least one row"
    maps = {key[0]: name for key, name in seen.items()}
    for origin in settings.study.origins:
        for name in origin.files:
            path_of_origin = settings.root / name
            if path_of_origin.is_file() and digest(path_of_origin) in maps:
                raise InputError(
                    "a declared origin is one of the study's own maps",
                    where=str(path_of_origin),
                    got=f"the same bytes as {maps[digest(path_of_origin)]}",
                    remedy="give the file its row in the study table, or the region another file",
                )
    for roi in settings.rois:
        if roi.region.mask:
            read_mask(settings.root / roi.region.mask, first, regrid=roi.region.regrid)


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
            outputs = [_collect(roi, settings, find_nodes(graph)) for roi in settings.rois]
            _adjust(outputs, settings)
            tests = write_all(stage, settings, outputs, guard.findings)
        finally:
            if work is None:
                shutil.rmtree(engine, ignore_errors=True)
    return RunResult(settings.output, tests, guard.findings)


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


def _collect(roi: Roi, settings: Settings, nodes: dict[str, Any]) -> RoiOutput:
    """What one region's nodes produced."""
    prefix = f"{settings.name}.{roi.name}"
    extracted = nodes[f"{prefix}.extract"].result.outputs
    values, coverage, sizes = extracted.values, extracted.coverage, extracted.sizes
    rows = [(label, "") for label, _ in settings.rows]
    overlap = None
    if roi.plan in (A_PRIORI, EXPLORATORY):
        step = "region" if roi.plan == A_PRIORI else "choose"
        source = Path(nodes[f"{prefix}.{step}"].result.outputs.mask_file)
        name = f"label-{roi.name}_mask.nii.gz"
        masks, mask_of_row = [(name, source)], [name] * len(rows)
    elif roi.plan in OWN_MASKS:
        rows = [(label, row.unit.run) for label, runs in settings.rows for row in runs]
        mask_of_row = [
            f"sub-{_alnum(sub)}_run-{_alnum(run)}_label-{roi.name}_desc-otherruns_mask.nii.gz"
            for sub, run in rows
        ]
        chosen = nodes[f"{prefix}.choose"].result.outputs
        masks = list(zip(mask_of_row, map(Path, chosen.row_masks), strict=True))
    else:
        chosen = nodes[f"{prefix}.choose"].result.outputs
        word = "without" if roi.plan == LEAVE_ONE_OUT else "fold"
        names = [f"label-{roi.name}_desc-{word}{_alnum(f)}_mask.nii.gz" for f in chosen.fold_names]
        if len(set(names)) != len(names):
            raise InputError(
                "subject labels that differ only in punctuation",
                got=", ".join(chosen.fold_names),
                remedy="BIDS labels are letters and digits; rename them in the table",
            )
        masks = list(zip(names, map(Path, chosen.mask_files), strict=True))
        of_file = {str(path): name for name, path in masks}
        mask_of_row = [of_file[path] for path in chosen.row_masks]
        overlap = Path(chosen.overlap_file)
    test = nodes.get(f"{prefix}.test")
    if test is not None:
        record = read_record(test.result.outputs.record_file)
    else:
        assert roi.procedure is not None, "only the exploratory plan goes without a test"
        rule = roi.procedure.describe()
        replaced = bool(nodes[f"{prefix}.choose"].result.outputs.replaced)
        record = exploratory_result(
            values, roi.names, rule, sizes[0], coverage, replaced=replaced
        ).as_dict()
    image = open_image(masks[0][1])
    record["voxel_mm3"] = float(abs(np.linalg.det(image.affine[:3, :3])))
    return RoiOutput(roi, record, values, coverage, sizes, masks, mask_of_row, rows, overlap)


def _alnum(label: str) -> str:
    return "".join(c for c in label if c.isalnum())


def _adjust(outputs: list[RoiOutput], settings: Settings) -> None:
    """Holm over the tested regions, when their search regions share no voxel."""
    tested = [o for o in outputs if o.record["p"] is not None]
    if not tested:
        return
    searched = [_searched(o, settings) for o in tested]
    # A whole map overlaps everything.
    disjoint = all(
        one is not None and other is not None and not (one & other).any()
        for i, one in enumerate(searched)
        for other in searched[:i]
    )
    adjusted = holm([o.record["p"] for o in tested]) if disjoint else [None] * len(tested)
    for output, p in zip(tested, adjusted, strict=True):
        output.record["p_holm"] = p


def _searched(output: RoiOutput, settings: Settings) -> Any:
    """The voxels a region's null covers; None for the whole map."""
    region = output.roi.region
    if region.mask:
        like = (str(output.masks[0][1]), geometry_of(open_image(output.masks[0][1])))
        return read_mask(settings.root / region.mask, like, regrid=region.regrid)[0]
    if region.centre is None:
        return None
    geometry = geometry_of(open_image(output.masks[0][1]))
    grid = Grid(geometry.shape, geometry.affine)
    return grid.filled(sphere(grid, region.centre, region.radius)).astype(bool)
