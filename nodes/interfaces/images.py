"""Interfaces around `images`."""

from __future__ import annotations

from hashlib import blake2b
from pathlib import Path
from typing import Any

import numpy as np
from nipype.interfaces.base import File

from ..errors import InputError
from ..groupmaps import Missing
from ..images import check_same_grid, read_map, write_map
from ..rules import each
from .base import InputSpec, SequesterInterface, TraitedSpec, traits


class _SubjectMapsInput(InputSpec):
    in_files = traits.List(traits.Any, mandatory=True, desc="per row: a map, or a list to average")
    volumes = traits.List(traits.Any, desc="parallel to in_files: volume numbers, -1 for none")
    labels = traits.List(traits.Str, mandatory=True, desc="per row: the subject")
    missing = traits.Instance(Missing, desc="what counts as no data")


class _SubjectMapsOutput(TraitedSpec):
    out_files = traits.List(File(exists=True), desc="per row: one uncompressed 3-D map")


class SubjectMaps(SequesterInterface):
    """One uncompressed 3-D map per subject: reads, checks, and averages runs with equal weights.

    A voxel missing (zero, NaN or infinite) in one of a subject's runs is missing in the
    average. Every later node then reads these files without decompressing again.

    Examples
    --------
    >>> from sequester.nodes.interfaces import SubjectMaps
    >>> SubjectMaps(in_files=[["a_run-1.nii.gz", "a_run-2.nii.gz"]], labels=["a"]).inputs.labels
    ['a']
    """

    input_spec = _SubjectMapsInput
    output_spec = _SubjectMapsOutput
    touch_rules = {"out_files": each("in_files")}
    volumes = {"in_files": "volumes"}

    def _work(self, cwd: Path) -> dict[str, Any]:
        files, volumes = self.inputs.in_files, self._value("volumes")
        if len(files) != len(self.inputs.labels):
            raise InputError(
                "labels and maps do not pair up",
                got=f"{len(self.inputs.labels)} labels, {len(files)} rows of maps",
            )
        missing = self._value("missing") or Missing()
        first = None
        seen: dict[bytes, str] = {}
        out = []
        for row, (item, label) in enumerate(zip(files, self.inputs.labels, strict=True)):
            runs = item if isinstance(item, list | tuple) else [item]
            numbers = volumes[row] if volumes is not None else [-1] * len(runs)
            numbers = numbers if isinstance(numbers, list | tuple) else [numbers]
            total, geometry = None, None
            for path, number in zip(runs, numbers, strict=True):
                data, geometry = read_map(path, None if number < 0 else int(number))
                first = first or (str(path), geometry)
                check_same_grid(first, [(str(path), geometry)])
                data = _checked(data, str(path), missing, seen)
                total = data if total is None else total + data
            if total is None or geometry is None:
                raise InputError("subject without a map", where=label)
            if len(runs) > 1:
                total = total / total.dtype.type(len(runs))
            out.append(str(write_map(cwd / f"row{row:05d}_{_plain(label)}.nii", total, geometry)))
        return {"out_files": out}


def _checked(data: Any, path: str, missing: Missing, seen: dict[bytes, str]) -> Any:
    """The map with NaN where data is missing; refuses maps without data, or given twice."""
    present = missing.present(data)
    if not present.any():
        raise InputError(
            "effect map without data",
            where=path,
            got="only zeros, NaN and infinities",
            remedy="make the map again, or leave it out with an exclude_reason",
        )
    digest = blake2b(np.ascontiguousarray(data).tobytes(), digest_size=16).digest()
    if digest in seen:
        raise InputError(
            "the same map under two names",
            where=path,
            got=f"identical to {seen[digest]}",
            remedy="one of the two rows of the study table names the wrong file",
        )
    seen[digest] = path
    return np.where(present, data, data.dtype.type(np.nan))


def _plain(label: str) -> str:
    return "".join(c if c.isalnum() else "-" for c in label)
