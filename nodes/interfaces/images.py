"""Interfaces around `images` and `subjects`."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
from nipype.interfaces.base import File

from ..errors import InputError
from ..groupmaps import Missing
from ..images import Floats, Geometry, check_same_grid, read_map, write_map
from ..rules import each
from ..scoreunits import kept_by_scores
from ..subjects import combine_runs, subject_map
from .base import InputSpec, SequesterInterface, TraitedSpec, traits

Source = tuple[str, int | None]
"""A file, and which of its volumes."""

_VOLUMES = {
    "in_files": "volumes",
    "variance_files": "variance_volumes",
    "minus_files": "minus_volumes",
    "minus_variance_files": "minus_variance_volumes",
    "baseline_files": "baseline_volumes",
}
_EFFECTS = ("in_files", "minus_files")


def _per_row(what: str, *, mandatory: bool = False) -> Any:
    return traits.List(
        traits.Any, mandatory=mandatory, desc=f"per row: {what}, a file or a list of files"
    )


def _numbers(of: str) -> Any:
    return traits.List(traits.Any, desc=f"parallel to {of}: volume numbers, -1 for none")


class _SubjectMapsInput(InputSpec):
    in_files = _per_row("effect maps to average", mandatory=True)
    volumes = _numbers("in_files")
    labels = traits.List(traits.Str, mandatory=True, desc="per row: the subject")
    missing = traits.Instance(Missing, desc="what counts as no data in a map as stored")
    variance_files = _per_row("the squared standard errors of in_files, for weights")
    variance_volumes = _numbers("variance_files")
    minus_files = _per_row("effect maps to average and take away")
    minus_volumes = _numbers("minus_files")
    minus_variance_files = _per_row("the squared standard errors of minus_files, for weights")
    minus_variance_volumes = _numbers("minus_variance_files")
    baseline_files = _per_row("maps to average; the effect becomes percent of them")
    baseline_volumes = _numbers("baseline_files")
    null_value = traits.Float(0.0, usedefault=True, desc="taken away last: chance, for accuracies")
    kept_by = traits.List(traits.Str, desc="columns of the study table that decided who is here")
    quality = traits.List(traits.Str, desc="the same, of columns that say how good the data are")


class _SubjectMapsOutput(TraitedSpec):
    out_files = traits.List(File(exists=True), desc="per row: one uncompressed 3-D map")


class SubjectMaps(SequesterInterface):
    """One uncompressed 3-D map per subject: reads, checks, combines.

    A row's runs are averaged, with equal weights or by inverse variance; the average of
    `minus_files` is taken away (paired differences, such as follow-up less first visit); what
    is left becomes percent of `baseline_files`; and `null_value` is taken away. See `subjects`.

    What counts as missing (zero, NaN or infinite) is decided on the maps as they are stored. A
    voxel missing in one of a row's maps is missing in the written map, which holds NaN there
    and nowhere else: a difference that is exactly 0 was measured.

    `kept_by` and `quality` change nothing here: they say by which scores of the study table the
    rows were selected, so that every map carries them.

    The maps of one row must be on one grid; rows may be on grids of their own. Every later
    node then reads these files without decompressing again.

    Examples
    --------
    >>> from sequester.nodes.interfaces import SubjectMaps
    >>> SubjectMaps(in_files=[["a_run-1.nii.gz", "a_run-2.nii.gz"]], labels=["a"]).inputs.labels
    ['a']
    >>> change = SubjectMaps(
    ...     in_files=["a_ses-2.nii.gz"], minus_files=["a_ses-1.nii.gz"], labels=["a"]
    ... )
    """

    input_spec = _SubjectMapsInput
    output_spec = _SubjectMapsOutput
    touch_rules = {"out_files": kept_by_scores(each(*_VOLUMES), "kept_by", "quality")}
    volumes = _VOLUMES

    def _work(self, cwd: Path) -> dict[str, Any]:
        sources = {field: self._sources(field) for field in _VOLUMES}
        missing = self._value("missing") or Missing()
        seen: dict[int, list[tuple[str, Source]]] = {}
        out = []
        for row, label in enumerate(self.inputs.labels):
            reader = _Row(label, missing, seen)
            of = {field: reader.read(field, rows[row]) for field, rows in sources.items() if rows}
            data = subject_map(
                reader.combined(of, "in_files", "variance_files"),
                reader.combined(of, "minus_files", "minus_variance_files"),
                combine_runs(of["baseline_files"]) if "baseline_files" in of else None,
                self.inputs.null_value,
            )
            if not np.isfinite(data).any():
                raise InputError(
                    "no voxel has data in all maps of a subject",
                    where=label,
                    got=", ".join(_name(source) for source in reader.sources),
                    remedy="check that these maps cover one part of the brain",
                )
            path = cwd / f"row{row:05d}_{_plain(label)}.nii"
            out.append(str(write_map(path, data, reader.geometry)))
        return {"out_files": out}

    def _sources(self, field: str) -> list[list[Source]]:
        """Per row, the volumes that a field names; no rows when it is not given."""
        files, numbers = self._value(field), self._value(_VOLUMES[field])
        if files is None:
            return []
        labels = self.inputs.labels
        if len(files) != len(labels):
            raise InputError(
                "labels and maps do not pair up",
                where=field,
                got=f"{len(labels)} labels, {len(files)} rows of maps",
            )
        paths = [_listed(item) for item in files]
        wanted = [[-1] * len(row) for row in paths]
        if numbers is not None:
            wanted = [_listed(item) for item in numbers]
        if [len(row) for row in paths] != [len(row) for row in wanted]:
            raise InputError("maps and volume numbers do not pair up", where=field)
        return [
            [(str(p), None if n < 0 else int(n)) for p, n in zip(*row, strict=True)]
            for row in zip(paths, wanted, strict=True)
        ]


class _Row:
    """Reads the maps of one row.

    Parameters
    ----------
    label : str
    missing : Missing
    seen : dict
        The effect maps of this and earlier rows, with their fields, by the sum of their bits.
    """

    geometry: Geometry  # of the first map

    def __init__(
        self, label: str, missing: Missing, seen: dict[int, list[tuple[str, Source]]]
    ) -> None:
        self.sources: list[Source] = []
        self._label, self._missing, self._seen = label, missing, seen

    def read(self, field: str, sources: Sequence[Source]) -> list[Floats]:
        """A field's maps, NaN where data is missing; variances as they are stored."""
        if not sources:
            raise InputError("subject without a map", where=self._label, got=f"{field} is empty")
        return [self._map(field, source) for source in sources]

    def combined(self, of: dict[str, list[Floats]], maps: str, variances: str) -> Any:
        """The average of a field's maps; None when it is not given."""
        n, n_variances = len(of.get(maps, ())), len(of.get(variances, ()))
        if variances in of and n != n_variances:
            raise InputError(
                "maps and variances do not pair up",
                where=self._label,
                expected=f"one file in {variances} for each in {maps}",
                got=f"{n_variances} for {n}",
            )
        return combine_runs(of[maps], of.get(variances)) if maps in of else None

    def _map(self, field: str, source: Source) -> Floats:
        data, geometry = read_map(*source)
        if not self.sources:
            self.geometry = geometry
        self.sources.append(source)
        check_same_grid((self.sources[0][0], self.geometry), [(source[0], geometry)])
        if field.endswith("variance_files"):
            return data
        absent = ~self._missing.present(data)
        if absent.all():
            raise InputError(
                "effect map without data" if field in _EFFECTS else "baseline map without data",
                where=_name(source),
                got="only zeros, NaN and infinities",
                remedy="make the map again, or leave it out with an exclude_reason",
            )
        largest = 0.0
        if data.dtype == np.float64:
            largest = float(np.abs(data, where=~absent, out=np.zeros_like(data)).max())
        if largest > float(np.finfo(np.float32).max):  # sums of squares would overflow
            raise InputError(
                "values too large for a map",
                where=_name(source),
                expected="what float32 holds",
                got=f"{largest:.3g}",
                remedy="make the map again: a division by almost zero, or a wrong scale",
            )
        if field in _EFFECTS:
            self._check_new(data, field, source)
        if not data.flags.writeable:
            data = data.copy()
        # In place: memory that was just read into is cheaper than new memory.
        np.copyto(data, np.nan, where=absent)
        return data

    def _check_new(self, data: Floats, field: str, source: Source) -> None:
        """Refuse an effect map that was given before; one file may be taken away from several."""
        bits = _bits(data)
        earlier = self._seen.setdefault(_sum(bits), [])
        for other_field, other in earlier:
            again = field == other_field == "minus_files" and other == source
            # Equal sums are rare, and no proof: the maps themselves decide.
            if not again and np.array_equal(_bits(read_map(*other)[0]), bits):
                raise InputError(
                    "the same map under two names",
                    where=_name(source),
                    got=f"identical to {_name(other)}",
                    remedy="one of the two rows of the study table names the wrong file",
                )
        earlier.append((field, source))


def _bits(data: Floats) -> npt.NDArray[np.uint8]:
    """The bytes of a map, x fastest, as they came from the file."""
    return np.ascontiguousarray(data.T).reshape(-1).view(np.uint8)


def _sum(bits: npt.NDArray[np.uint8]) -> int:
    """What equal maps have in common and others hardly ever; a tenth of a checksum's time."""
    return int(np.add.reduce(bits[: len(bits) // 8 * 8].view(np.uint64)))


def _name(source: Source) -> str:
    path, volume = source
    return path if volume is None else f"{path}, volume {volume}"


def _listed(item: Any) -> list[Any]:
    return list(item) if isinstance(item, list | tuple) else [item]


def _plain(label: str) -> str:
    return "".join(c if c.isalnum() else "-" for c in label)
