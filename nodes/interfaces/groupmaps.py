"""Interfaces around `groupmaps` and `design`."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from nipype.interfaces.base import File

from ..design import Design, design_map, design_maps
from ..errors import InputError
from ..folds import LeaveOneOut, Scheme
from ..groupmaps import Floats, Missing, group_map, leave_out_maps
from ..images import stack, write_map
from ..procedure import held_out_rows
from ..rules import all_but_held_out, only
from ..scoreunits import also_scores, dealt_by_scores
from ..space import Grid
from .base import InputSpec, SequesterInterface, TraitedSpec, traits

_COUNT = "number of maps with data at each voxel, less one for each column of a design but one"


class _MapsInput(InputSpec):
    in_files = traits.List(File(exists=True), mandatory=True, desc="effect maps on one grid")
    kind = traits.Enum("t", "mean", usedefault=True, desc="which group map")
    missing = traits.Instance(Missing, desc="what counts as no data")
    design = traits.Instance(Design, desc="a linear model, one row per map; default their mean")


class _GroupMapInput(_MapsInput):
    labels = traits.List(
        traits.Str, desc="per map: the subject; with a design, whose scores its columns hold"
    )


class _GroupMapOutput(TraitedSpec):
    out_file = File(exists=True, desc="the group map; NaN where too few maps have data")
    count_file = File(exists=True, desc=_COUNT)


_WHOLE = also_scores(only("in_files", "design", ignored=("labels",)), "in_files", "design")


class GroupMap(SequesterInterface):
    """The one-sample t map (or mean map) of all given effect maps, or that of a design.

    With a design: the t (or, as the mean, the value) of its contrast. The count is one more
    than the degrees of freedom of t, which is what `ChooseMask` turns a p into a height by.
    """

    input_spec = _GroupMapInput
    output_spec = _GroupMapOutput
    touch_rules = {"out_file": _WHOLE, "count_file": _WHOLE}

    def _work(self, cwd: Path) -> dict[str, Any]:
        missing, design = self._value("missing") or Missing(), self._value("design")
        effects, grid, geometry = stack(self.inputs.in_files)
        if design is None:
            values = group_map(effects, missing, self.inputs.kind)
        else:
            values = design_map(effects, design, missing, self.inputs.kind)
        count = missing.present(effects).sum(axis=0) - _spent(design)
        return {
            "out_file": str(write_map(cwd / "group.nii.gz", _filled(grid, values), geometry)),
            "count_file": str(write_map(cwd / "count.nii.gz", _filled(grid, count), geometry)),
        }


def _spent(design: Design | None) -> int:
    """The degrees of freedom that a design takes beyond the one of a mean."""
    return 0 if design is None else design.n_columns - 1


def _filled(grid: Grid, values: Floats) -> Floats:
    """A map's volume, in float32: one float64 row must not show in the others' maps."""
    volume: Floats = grid.filled(values.astype(np.float32))
    return volume


class _LeaveOutInput(_MapsInput):
    labels = traits.List(traits.Str, mandatory=True, desc="per map: the subject")
    scheme = traits.Instance(Scheme, desc="fold scheme; default leave-one-out")


class _LeaveOutOutput(TraitedSpec):
    out_files = traits.List(File(exists=True), desc="per fold: the selection side's group map")
    count_files = traits.List(File(exists=True), desc=f"per fold: {_COUNT}")


def _folds_held_out(settings: Any) -> list[tuple[int, ...]]:
    return held_out_rows(settings.get("scheme") or LeaveOneOut(), settings["labels"])


_MAPS = all_but_held_out("in_files", _folds_held_out, ("labels", "scheme"), ("design",))
_RULE = dealt_by_scores(also_scores(_MAPS, "in_files", "design"), "scheme")


class LeaveOutMaps(SequesterInterface):
    """Every fold's group map, in one pass: map k never sees the rows that fold k holds out.

    Nor, with a design, what the design says of those rows.
    """

    input_spec = _LeaveOutInput
    output_spec = _LeaveOutOutput
    touch_rules = {"out_files": _RULE, "count_files": _RULE}

    def _work(self, cwd: Path) -> dict[str, Any]:
        missing, design = self._value("missing") or Missing(), self._value("design")
        labels, files = self.inputs.labels, self.inputs.in_files
        rows = {"in_files": len(files), "labels": len(labels)}
        if design is not None:
            rows["design"] = design.n_rows
        if len(set(rows.values())) > 1:
            raise InputError("maps, labels and design differ in rows", got=str(rows))
        # Sorted, so that no rounding depends on the order of the rows.
        order = sorted(range(len(labels)), key=lambda row: (labels[row], files[row]))
        effects, grid, geometry = stack([files[row] for row in order])
        folds = (self._value("scheme") or LeaveOneOut()).folds([labels[row] for row in order])
        if design is None:
            maps = leave_out_maps(effects, folds, missing, self.inputs.kind)
        else:
            maps = design_maps(effects, folds, design.taken(order), missing, self.inputs.kind)
        present = missing.present(effects)
        everybody = present.sum(axis=0) - _spent(design)
        made: dict[str, Any] = {"out_files": [], "count_files": []}
        for k, (fold, values) in enumerate(zip(folds, maps, strict=True)):
            count = everybody - present[list(fold.held_out)].sum(axis=0)
            for output, name, data in (
                ("out_files", "fold", values),
                ("count_files", "count", count),
            ):
                path = write_map(cwd / f"{name}{k:05d}.nii.gz", _filled(grid, data), geometry)
                made[output].append(str(path))
        return made
