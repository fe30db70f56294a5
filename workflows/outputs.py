"""The output folder of a run: masks, tables, touches, manifest; see docs/outputs.md.

Everything is written into a folder beside the target and takes its name at the end, so that
a run that fails or is killed leaves no half-written results and loses none of the earlier ones.
"""

from __future__ import annotations

import json
import math
import os
import platform
import shutil
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from importlib.metadata import version
from pathlib import Path
from typing import Any

from filelock import FileLock, Timeout

from ..nodes.errors import InputError
from ..nodes.folds import LeaveOneOut
from ..nodes.images import write_bytes
from ..nodes.interfaces.base import write_json
from .ancestry import node_name
from .digests import digest
from .judge import Finding
from .settings import CROSS_FITTED, EXPLORATORY, OWN_MASKS, Roi, Settings
from .study import Study

MANIFEST = "manifest.json"
_DEPENDENCIES = ("nipype", "nibabel", "numpy", "scipy", "networkx")

VALUE_COLUMNS = {
    "roi": "Region of interest, as named in STUDY.toml.",
    "plan": "How the region was chosen.",
    "sub": "Subject label.",
    "run": "Run, when each run has a mask of its own; n/a when runs were averaged.",
    "value": "Mean effect of the subject in its mask, in the units of the effect maps; 0 when the "
    "mask is empty.",
    "mask": "Mask the value was read in.",
    "mask_voxels": "Voxels in that mask.",
    "mask_mm3": "Volume of that mask in mm3.",
    "coverage": "Share of the mask in which the subject has data.",
    "biased": "true when the mask was chosen on this subject's data (exploratory).",
}
TEST_COLUMNS = {
    "roi": "Region of interest, as named in STUDY.toml.",
    "plan": "How the region was chosen.",
    "rule": "The mask rule in words.",
    "search": "The search region that the null hypothesis covers.",
    "n_subjects": "Independent subjects tested: rows that share an exchange value are one.",
    "estimate": "Mean of the values, in the units of the effect maps.",
    "target": "What the estimate estimates.",
    "biased": "true for exploratory values: no interval, no p, no error bar.",
    "interval_low": "Lower end of the 95 % interval.",
    "interval_high": "Upper end of the 95 % interval.",
    "interval_kind": "exact, approximate or conservative.",
    "interval_method": "How the interval was made.",
    "t": "Studentised mean, positive in the direction of selection.",
    "p": "p-value; p_kind and sided say how it was made.",
    "p_error": "Monte Carlo standard error of p; n/a when exact.",
    "p_holm": "Holm-adjusted over the tested regions; n/a when their search regions overlap.",
    "p_kind": "The test.",
    "sided": "greater, less or two-sided.",
    "null": "The null hypothesis.",
    "dz": "Mean of the values over their standard deviation.",
    "n_flips": "Sign flips made.",
    "n_folds": "Folds.",
    "n_empty": "Folds in which the rule found nothing and the value counts as 0.",
    "n_replaced": "Folds in which the rule found nothing and the strongest features stood in.",
    "dice": "Mean Dice overlap of pairs of fold masks.",
    "noise_dice": "The same under sign flips: what noise alone gives.",
    "coverage": "Least coverage over subjects; empty masks do not count.",
    "level": "What independence of mask and data is shown about: subject or run.",
    "verdict": "The guard's verdict: apart, or leak (allowed for exploratory values alone).",
    "sentence": "The result in a sentence.",
}
TOUCH_COLUMNS = {
    "mask": "Where the mask comes from in the graph.",
    "extraction": "The node (and element) that reads data inside it.",
    "role": "values or geometry: how the mask derives from the units.",
    "encoding": "units: the list names the units touched; all_but: it names the units NOT touched.",
    "touched": "Units, separated by spaces.",
    "tested": "Units read inside the mask, separated by spaces.",
    "origin": "Declared source of a mask from outside.",
    "verdict": "apart, leak (exploratory values only) or unproven.",
    "level": "subject or run.",
}


@dataclass(frozen=True)
class RoiOutput:
    """What one region's plan produced.

    Parameters
    ----------
    roi : Roi
    record : dict
        The result, as `RoiResult.as_dict`.
    values, coverage : sequence of float, one per row
    sizes : sequence of int, one per row
        Voxels in each row's mask.
    masks : sequence of (name, Path)
        Mask files, by what they are called in the folder.
    mask_of_row : sequence of str
        Per row, the name of its mask.
    rows : sequence of (subject, run)
        What a row is; the run is "" when runs were averaged.
    overlap : Path or None
    """

    roi: Roi
    record: dict[str, Any]
    values: Sequence[float]
    coverage: Sequence[float]
    sizes: Sequence[int]
    masks: Sequence[tuple[str, Path]]
    mask_of_row: Sequence[str]
    rows: Sequence[tuple[str, str]]
    overlap: Path | None


@contextmanager
def claimed(target: Path) -> Iterator[Path]:
    """A staging folder that becomes `target` when the block ends well.

    Raises
    ------
    InputError
        When the target is a file, a folder of something else, or in use by another run.
    """
    if target.exists() and not target.is_dir():
        raise InputError(
            "output is a file",
            where=str(target),
            expected="a folder, or nothing yet",
            remedy="name another output folder",
        )
    if target.is_dir() and any(target.iterdir()) and not (target / MANIFEST).is_file():
        raise InputError(
            "output folder holds something else",
            where=str(target),
            expected=f"nothing, or an earlier run ({MANIFEST})",
            remedy="name another output folder; nothing was changed",
        )
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        lock = FileLock(target.parent / f".{target.name}.lock")
        lock.acquire(timeout=0)
    except Timeout:
        raise InputError(
            "output folder in use",
            where=str(target),
            got="another run is writing to it",
            remedy="wait for it, or name another output folder",
        ) from None
    except OSError as error:
        raise InputError(
            "output folder cannot be made",
            where=str(target),
            got=str(error),
            remedy="check the path and its permissions",
        ) from error
    # The lock is held, so whatever lies here was left by a run that was killed.
    stage, old = (target.parent / f".{target.name}.{word}" for word in ("new", "old"))
    try:
        if old.exists() and not target.exists():
            old.rename(target)  # killed between the two renames below
        for leftover in (stage, old):
            shutil.rmtree(leftover, ignore_errors=True)
        stage.mkdir()
        yield stage
        _take_place(stage, target, old)
    except OSError as error:
        raise InputError(
            "output cannot be written",
            where=str(target),
            got=os.strerror(error.errno or 0),
            remedy="make room, or name another output folder; earlier results are untouched",
        ) from error
    finally:
        for leftover in (stage, old):
            shutil.rmtree(leftover, ignore_errors=True)
        lock.release()
        Path(lock.lock_file).unlink(missing_ok=True)


def _take_place(stage: Path, target: Path, old: Path) -> None:
    """Give the new results their name; the earlier ones come back if that fails."""
    if target.exists():
        target.rename(old)
    try:
        stage.rename(target)
    except BaseException:
        if old.exists():
            old.rename(target)
        raise


def write_all(
    stage: Path, settings: Settings, outputs: Sequence[RoiOutput], findings: Sequence[Finding]
) -> list[dict[str, Any]]:
    """Write the whole output folder; returns the rows of roi_tests.tsv.

    Parameters
    ----------
    stage : Path
        An empty folder.
    settings : Settings
    outputs : sequence of RoiOutput
    findings : sequence of Finding
        The guard's verdicts.
    """
    masks = stage / "masks"
    masks.mkdir()
    uri = "bids:study:{}".format
    for output in outputs:
        files = list(output.masks)
        search = [output.roi.region.mask] if output.roi.region.mask else []
        for (name, source), selection in zip(files, _sources(settings, output), strict=True):
            shutil.copyfile(source, masks / name)
            # A 4-D file is one source, however many of its volumes are used.
            sources = dict.fromkeys([*selection, *search])
            _sidecar(masks / name, {"Type": "ROI", "Sources": [uri(p) for p in sources]})
        if output.overlap is not None:
            name = f"label-{output.roi.name}_desc-foldoverlap_probseg.nii.gz"
            shutil.copyfile(output.overlap, masks / name)
            _sidecar(
                masks / name,
                {
                    "Description": "Share of the folds whose mask holds the voxel.",
                    "Sources": [f"bids::masks/{mask}" for mask, _ in output.masks],
                },
            )
    _table(stage / "roi_values.tsv", VALUE_COLUMNS, _value_rows(outputs))
    tests = _test_rows(settings, outputs, findings)
    _table(stage / "roi_tests.tsv", TEST_COLUMNS, tests)
    _table(stage / "touches.tsv", TOUCH_COLUMNS, _touch_rows(settings.study, findings))
    write_json(
        stage / "dataset_description.json",
        {
            "Name": f"{settings.name}: region-of-interest statistics",
            "BIDSVersion": "1.9.0",
            "DatasetType": "derivative",
            "GeneratedBy": [{"Name": "sequester", "Version": version("sequester")}],
            "DatasetLinks": {"study": os.path.relpath(settings.root, settings.output)},
        },
    )
    _manifest(stage, settings)
    return tests


def _sources(settings: Settings, output: RoiOutput) -> Iterator[list[str]]:
    """For each mask, the study's files whose values it derives from."""
    chosen_on = output.roi.choosing or settings.rows
    every = [row for _, runs in chosen_on for row in runs]
    tested = [runs for _, runs in settings.rows]
    if output.roi.plan in OWN_MASKS:
        scheme = output.roi.procedure.scheme if output.roi.procedure else LeaveOneOut(2)
        for runs in tested:
            of_run: dict[int, list[str]] = {}
            for fold in scheme.folds([row.unit.run for row in runs]):
                for held in fold.held_out:
                    of_run[held] = [runs[i].path for i in fold.selection]
            yield from (of_run[i] for i in range(len(runs)))
        return
    for name, _ in output.masks:
        if output.roi.plan in CROSS_FITTED:
            people = {
                runs[0].person
                for runs, mask in zip(tested, output.mask_of_row, strict=True)
                if mask == name
            }
            yield [row.path for row in every if row.person not in people]
        elif output.roi.plan == EXPLORATORY:
            yield [row.path for row in every]
        else:
            yield []


def _sidecar(path: Path, content: dict[str, Any]) -> None:
    write_json(path.with_name(path.name.removesuffix(".nii.gz") + ".json"), content)


def _value_rows(outputs: Sequence[RoiOutput]) -> Iterator[dict[str, Any]]:
    for output in outputs:
        for i, (label, run) in enumerate(output.rows):
            yield {
                "roi": output.roi.name,
                "plan": output.roi.plan,
                "sub": label,
                "run": run,
                "value": output.values[i],
                "mask": output.mask_of_row[i],
                "mask_voxels": output.sizes[i],
                "mask_mm3": output.sizes[i] * output.record["voxel_mm3"],
                "coverage": output.coverage[i],
                "biased": output.record["biased"],
            }


def _test_rows(
    settings: Settings, outputs: Sequence[RoiOutput], findings: Sequence[Finding]
) -> list[dict[str, Any]]:
    rows = []
    for output in outputs:
        record, interval = output.record, output.record["interval"] or {}
        met = [f for f in findings if f.node == f"{settings.name}.{output.roi.name}.extract"]
        worst = [f for f in met if f.verdict != "apart"] or met
        levels = {f.level for f in met}
        row = {name: record.get(name) for name in TEST_COLUMNS}
        row |= {
            "interval_low": interval.get("low"),
            "interval_high": interval.get("high"),
            "interval_kind": interval.get("kind"),
            "interval_method": interval.get("method"),
            "n_replaced": None if record["n_folds"] is None else len(record["replaced"]),
            "level": "run" if "run" in levels else "subject" if "subject" in levels else None,
            "verdict": worst[0].verdict if worst else None,
        }
        rows.append(row)
    return rows


def _touch_rows(study: Study, findings: Sequence[Finding]) -> Iterator[dict[str, Any]]:
    table = study.table
    for finding in findings:
        if finding.kind != "extraction":
            continue
        where = finding.node if finding.item is None else f"{finding.node}[{finding.item}]"
        for role, bits in (("values", finding.mask_units), ("geometry", finding.geometry_units)):
            if not bits and role == "geometry":
                continue
            inside, outside = table.units_of(bits), table.units_of(table.everything & ~bits)
            complement = len(outside) < len(inside)
            yield {
                "mask": finding.mask_place,
                "extraction": where,
                "role": role,
                "encoding": "all_but" if complement else "units",
                "touched": " ".join(map(str, outside if complement else inside)),
                "tested": " ".join(map(str, table.units_of(finding.data_units))),
                "origin": "; ".join(finding.origins),
                "verdict": finding.verdict,
                "level": finding.level,
            }


def _table(path: Path, columns: dict[str, str], rows: Any) -> None:
    lines = ["\t".join(columns)]
    lines += ["\t".join(_cell(row[name]) for name in columns) for row in rows]
    write_bytes(path, ("\n".join(lines) + "\n").encode())
    dictionary = {name: {"Description": text} for name, text in columns.items()}
    write_json(path.with_suffix(".json"), dictionary)


def _cell(value: Any) -> str:
    """A value as BIDS tables hold it: shortest exact number, n/a for nothing."""
    if value is None or value == "" or (isinstance(value, float) and math.isnan(value)):
        return "n/a"
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, float):
        return repr(value)
    return " ".join(str(value).split())


def _manifest(stage: Path, settings: Settings) -> None:
    """What went in and what came out, with digests: enough to repeat the run and compare."""
    study = settings.study
    outside = [f for origin in study.origins for f in origin.files]
    inputs = [row.path for row in settings.used] + outside
    files = sorted(p for p in stage.rglob("*") if p.is_file())
    write_json(
        stage / MANIFEST,
        {
            "study": settings.name,
            "settings_sha256": settings.digest,
            "table_sha256": digest(settings.table_path),
            "seed": settings.seed,
            "versions": {
                "sequester": version("sequester"),
                "python": platform.python_version(),
                **{name: version(name) for name in _DEPENDENCIES},
            },
            "inputs": {path: digest(settings.root / path) for path in sorted(set(inputs))},
            "left_out": {row.name: row.exclude_reason for row in settings.left_out},
            "origins": [
                {
                    "source": o.source,
                    "files": list(o.files),
                    "derived_from": [str(u) for u in o.derived_from],
                }
                for o in study.origins
            ],
            "outputs": {str(p.relative_to(stage)): digest(p) for p in files},
        },
    )


def find_nodes(graph: Any) -> dict[str, Any]:
    """The nodes of a finished graph, by name."""
    return {node_name(node): node for node in graph.nodes()}


def read_record(path: str | Path) -> dict[str, Any]:
    """A result that a test node wrote."""
    record: dict[str, Any] = json.loads(Path(path).read_text())
    return record
