"""Interfaces around `parcels`: a whole parcellation is one extraction and one family of tests."""

from __future__ import annotations

import io
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
from nipype.interfaces.base import File, InputMultiObject

from ..errors import InputError, Refused
from ..fixed import family_results
from ..groupmaps import Missing
from ..images import check_same_grid, read_label_table, read_map, write_bytes
from ..parcels import Parcellation, aligned
from ..rules import Meeting, Statistic, only
from .base import InputSpec, SequesterInterface, TraitedSpec, traits, write_json

_MEETING = Meeting(mask="label_files", data="in_files", aside=("labels",))
_OF_LABELS = only("label_files", ignored=("in_files",), single=False)


class _ExtractInput(InputSpec):
    label_files = InputMultiObject(
        File(exists=True), mandatory=True, desc="one label image for all maps, or one per map"
    )
    in_files = traits.List(File(exists=True), mandatory=True, desc="maps to read")
    labels = traits.List(traits.Str, mandatory=True, desc="per map: the subject")
    parcels = traits.List(traits.Int, desc="label numbers; default all in the label images")
    missing = traits.Instance(Missing, desc="what counts as no data")
    min_coverage = traits.Float(
        0.0, usedefault=True, desc="a parcel with a smaller share of data has no value"
    )
    clearance = traits.Str(nohash=True, desc="handed out by the guard, by nobody else")


class _ExtractOutput(TraitedSpec):
    values_file = File(exists=True, desc=".npy, (maps, parcels) float64: means, NaN for none")
    coverage_file = File(exists=True, desc=".npy, (maps, parcels) float64: share with data")
    parcels = traits.List(traits.Int, desc="the label number of each column")
    sizes = traits.List(traits.List(traits.Int), desc="per label image: voxels in each parcel")


def _parcels_in(settings: Mapping[str, Any]) -> tuple[int, ...] | None:
    """The labels that the settings of `ExtractParcels` name, where they do."""
    parcels = settings.get("parcels")
    whole = isinstance(parcels, list) and all(isinstance(one, int) for one in parcels)
    return tuple(parcels) if parcels and whole else None


class ExtractParcels(SequesterInterface):
    """The mean of each map in every parcel of a label image, in one reading of the map.

    Runs only under the guard, as `Extract` does. For arrays, without a workflow, use
    `sequester.nodes.parcels.Parcellation`.

    Examples
    --------
    >>> from sequester.nodes.interfaces import ExtractParcels
    >>> ExtractParcels(labels=["a", "b"], parcels=[3, 7]).inputs.parcels
    [3, 7]
    """

    input_spec = _ExtractInput
    output_spec = _ExtractOutput
    _always_run = True
    meeting = _MEETING
    labels_read = {"label_files": _parcels_in}
    touch_rules = {
        "values_file": _MEETING.whole,
        "coverage_file": _MEETING.whole,
        "parcels": _OF_LABELS,
        "sizes": _OF_LABELS,
    }

    def _work(self, cwd: Path) -> dict[str, Any]:
        if not self._value("clearance"):
            raise Refused(
                "this extraction has no clearance: run the workflow under the guard, "
                "workflow.run(plugin=GuardPlugin(study))"
            )
        images, maps, labels = self.inputs.label_files, self.inputs.in_files, self.inputs.labels
        if len(images) not in (1, len(maps)) or len(labels) != len(maps):
            raise InputError(
                "label images, maps and labels do not pair up",
                expected="a label for each map, and one label image or one for each map",
                got=f"{len(images)} label images, {len(maps)} maps, {len(labels)} labels",
            )
        missing = self._value("missing") or Missing()
        held, rows = [], []  # per label image: numbers and sizes; per map: means and coverage
        for i, path in enumerate(maps):
            if i < len(images):
                image, grid = read_map(images[i])
                atlas = Parcellation(image, images[i])
                held.append((atlas.numbers, atlas.sizes))
            data, geometry = read_map(path)
            check_same_grid((images[min(i, len(images) - 1)], grid), [(path, geometry)])
            rows.append(atlas.means(data, missing))
        numbers = _columns(self._value("parcels"), [own for own, _ in held])
        values, coverage = (np.empty((len(maps), len(numbers))) for _ in range(2))
        for i, (means, shares) in enumerate(rows):
            own = held[min(i, len(held) - 1)][0]
            coverage[i] = aligned(shares, own, numbers, 0.0)
            values[i] = aligned(means, own, numbers, np.nan)
        values[coverage < self.inputs.min_coverage] = np.nan
        return {
            "values_file": _write_table(cwd / "values.npy", values),
            "coverage_file": _write_table(cwd / "coverage.npy", coverage),
            "parcels": numbers.tolist(),
            "sizes": [aligned(sizes, own, numbers, 0).tolist() for own, sizes in held],
        }


def _columns(chosen: list[int] | None, own: list[Any]) -> Any:
    """The label numbers to read: those chosen, which must be there, or all."""
    there = np.unique(np.concatenate(own))
    if chosen is None:
        return there
    absent = sorted(set(chosen) - set(there.tolist()))
    if absent or not chosen or len(set(chosen)) < len(chosen):
        raise InputError(
            "parcels that cannot be read",
            where="parcels",
            expected="label numbers of the image, each once",
            got=f"{', '.join(map(str, absent[:5]))} not in it" if absent else str(chosen[:5]),
            remedy=f"choose among the {len(there)} numbers from {there[0]} to {there[-1]}",
        )
    return np.array(chosen)


class _FamilyInput(InputSpec):
    values_file = File(exists=True, mandatory=True, desc="of ExtractParcels")
    coverage_file = File(exists=True, mandatory=True, desc="of ExtractParcels")
    labels = traits.List(traits.Str, mandatory=True, desc="per map: who it belongs to")
    parcels = traits.List(traits.Int, mandatory=True, desc="of ExtractParcels")
    sizes = traits.List(traits.List(traits.Int), mandatory=True, desc="of ExtractParcels")
    parcel_names = traits.List(
        traits.Str, xor=["table_file"], desc="per parcel; default its label number"
    )
    table_file = File(
        exists=True, xor=["parcel_names"], desc="label table (TSV with index and name) of names"
    )
    names = traits.Tuple(
        traits.Str, traits.Str, traits.Str, mandatory=True, desc="roi, plan, search region"
    )
    min_coverage = traits.Float(
        0.0, usedefault=True, desc="a map with a smaller share of a parcel does not count there"
    )
    own_labels = traits.Bool(
        False, usedefault=True, desc="the label images were made from each subject's other data"
    )


class _FamilyOutput(TraitedSpec):
    record_file = File(exists=True, desc="a result per parcel, as JSON")


class FamilyTest(SequesterInterface):
    """Student's t-test in every parcel of a parcellation fixed without the tested data.

    The values of each label are averaged first. The p-values of all parcels tested are adjusted
    together (Holm 1979); a parcel that cannot be tested says why, and does not count.
    """

    input_spec = _FamilyInput
    output_spec = _FamilyOutput
    touch_rules = {
        "record_file": only("values_file", "coverage_file", "parcels", "sizes", "table_file")
    }
    statistic = Statistic(
        values="values_file",
        labels="labels",
        in_file=True,
        cure="read a label image that was made without any of the tested data (a published one, "
        "or one from other people); or choose one region at a time and use the whole-procedure "
        "sign flip (FlipTest)",
    )

    def _work(self, cwd: Path) -> dict[str, Any]:
        roi, plan, search = self.inputs.names
        numbers, table = self.inputs.parcels, self._value("table_file")
        named = dict(read_label_table(table)) if table else {}
        tests = family_results(
            _read_table(self.inputs.values_file),
            _read_table(self.inputs.coverage_file),
            self.inputs.labels,
            self.inputs.names,
            numbers,
            self._value("parcel_names") or [named.get(n, str(n)) for n in numbers],
            self.inputs.sizes,
            self.inputs.min_coverage,
            own_labels=self.inputs.own_labels,
        )
        record = {"roi": roi, "plan": plan, "search": search, "tests": tests}
        return {"record_file": write_json(cwd / "family.json", record)}


def _write_table(path: Path, table: npt.NDArray[np.float64]) -> str:
    blob = io.BytesIO()
    np.save(blob, table)
    write_bytes(path, blob.getvalue())
    return str(path)


def _read_table(path: str) -> npt.NDArray[np.float64]:
    try:
        table = np.load(path, allow_pickle=False)
    except (ValueError, EOFError) as error:
        raise InputError(
            "not a table of values", where=path, got=str(error), remedy="connect ExtractParcels"
        ) from error
    return np.asarray(table, dtype=np.float64)
