"""What a mask that a run wrote was chosen on: its sidecar says so, and the run's manifest knows it.

A region found by one run and given to the next as if it came from outside would be circular. The
sidecar beside such a mask lists its sources (BIDS URIs), and ``manifest.json`` holds its digest,
so that a copy without the sidecar is recognised too.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from ..nodes.errors import InputError
from ..nodes.touch import Unit
from .digests import digest
from .study import Study

_STUDY, _OWN = "bids:study:", "bids::"


def recorded_units(path: Path, study: Study, output: Path) -> tuple[Unit, ...]:
    """The study's units whose values a mask derives from, as far as runs have recorded it.

    Parameters
    ----------
    path : Path
        Of the mask.
    study : Study
    output : Path
        The results folder of an earlier run of this study, if there is one.
    """
    found = _of_sidecar(path, study)
    if not found and path.is_file():
        manifest = _read(output / "manifest.json").get("outputs", {})
        names = [name for name, known in manifest.items() if known == digest(path)]
        found = [unit for name in names for unit in _of_sidecar(output / name, study)]
    return tuple(sorted(set(found)))


def _of_sidecar(path: Path, study: Study) -> list[Unit]:
    stem = path.name.removesuffix(".gz").removesuffix(".nii")
    sources = _read(path.with_name(f"{stem}.json")).get("Sources", [])
    dataset = next((p for p in path.parents if (p / "dataset_description.json").is_file()), None)
    if not isinstance(sources, list) or dataset is None:
        return []
    links = _read(dataset / "dataset_description.json").get("DatasetLinks", {})
    units: list[Unit] = []
    for source in map(str, sources):
        if source.startswith(_STUDY) and isinstance(links, dict) and "study" in links:
            units += study.units_of(dataset / links["study"] / source.removeprefix(_STUDY))
        elif source.startswith(_OWN):
            units += _of_sidecar(dataset / source.removeprefix(_OWN), study)
    return units


def _read(path: Path) -> dict[str, Any]:
    """A JSON object; an empty one when there is none: nothing is recorded then."""
    if not path.is_file():
        return {}
    try:
        found = json.loads(path.read_text(encoding="utf-8"))
    except ValueError as error:
        raise InputError(
            "unreadable record of a mask's sources",
            where=str(path),
            expected="JSON",
            got=str(error),
            remedy="correct the file, or move it away from the mask",
        ) from error
    return found if isinstance(found, dict) else {}
