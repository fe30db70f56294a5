"""Interfaces around `groupmaps`."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from nipype.interfaces.base import File

from ..folds import LeaveOneOut, Scheme
from ..groupmaps import Floats, Missing, group_map, leave_out_maps
from ..images import stack, write_map
from ..procedure import held_out_rows
from ..rules import all_but_held_out, only
from ..space import Grid
from .base import InputSpec, SequesterInterface, TraitedSpec, traits


class _MapsInput(InputSpec):
    in_files = traits.List(File(exists=True), mandatory=True, desc="effect maps on one grid")
    kind = traits.Enum("t", "mean", usedefault=True, desc="which group map")
    missing = traits.Instance(Missing, desc="what counts as no data")


class _GroupMapOutput(TraitedSpec):
    out_file = File(exists=True, desc="the group map; NaN where too few maps have data")
    count_file = File(exists=True, desc="number of maps with data at each voxel")


class GroupMap(SequesterInterface):
    """The one-sample t map (or mean map) of all given effect maps."""

    input_spec = _MapsInput
    output_spec = _GroupMapOutput
    touch_rules = {"out_file": only("in_files"), "count_file": only("in_files")}

    def _work(self, cwd: Path) -> dict[str, Any]:
        missing = self._value("missing") or Missing()
        effects, grid, geometry = stack(self.inputs.in_files)
        values = group_map(effects, missing, self.inputs.kind)
        count = missing.present(effects).sum(axis=0).astype(np.float32)
        return {
            "out_file": str(write_map(cwd / "group.nii.gz", _filled(grid, values), geometry)),
            "count_file": str(write_map(cwd / "count.nii.gz", grid.filled(count), geometry)),
        }


def _filled(grid: Grid, values: Floats) -> Floats:
    """A map's volume, in float32: one float64 row must not show in the others' maps."""
    volume: Floats = grid.filled(values.astype(np.float32))
    return volume


class _LeaveOutInput(_MapsInput):
    labels = traits.List(traits.Str, mandatory=True, desc="per map: the subject")
    scheme = traits.Instance(Scheme, desc="fold scheme; default leave-one-out")


class _LeaveOutOutput(TraitedSpec):
    out_files = traits.List(File(exists=True), desc="per fold: the selection side's group map")


def _folds_held_out(settings: Any) -> list[tuple[int, ...]]:
    return held_out_rows(settings.get("scheme") or LeaveOneOut(), settings["labels"])


class LeaveOutMaps(SequesterInterface):
    """Every fold's group map, in one pass: map k never sees the rows that fold k holds out."""

    input_spec = _LeaveOutInput
    output_spec = _LeaveOutOutput
    touch_rules = {"out_files": all_but_held_out("in_files", _folds_held_out, ("labels", "scheme"))}

    def _work(self, cwd: Path) -> dict[str, Any]:
        effects, grid, geometry = stack(self.inputs.in_files)
        folds = (self._value("scheme") or LeaveOneOut()).folds(self.inputs.labels)
        maps = leave_out_maps(effects, folds, self._value("missing"), self.inputs.kind)
        return {
            "out_files": [
                str(write_map(cwd / f"fold{k:05d}.nii.gz", _filled(grid, values), geometry))
                for k, values in enumerate(maps)
            ]
        }
