"""Interfaces around `roi`: the extraction, which needs clearance, and the t-test."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from nipype.interfaces.base import File, InputMultiObject

from ..errors import InputError, Refused
from ..groupmaps import Missing
from ..images import check_same_grid, read_map
from ..results import fixed_region_result, own_mask_result
from ..roi import per_person, region_mean
from ..rules import Meeting, Statistic, only
from .base import InputSpec, SequesterInterface, TraitedSpec, traits, write_json

_MEETING = Meeting(mask="mask_files", data="in_files", biased="exploratory")


class _ExtractInput(InputSpec):
    mask_files = InputMultiObject(
        File(exists=True), mandatory=True, desc="one mask for all maps, or one per map"
    )
    in_files = traits.List(File(exists=True), mandatory=True, desc="maps to read")
    labels = traits.List(traits.Str, mandatory=True, desc="per map: the subject")
    missing = traits.Instance(Missing, desc="what counts as no data")
    exploratory = traits.Bool(
        False, usedefault=True, desc="read on the data that chose the mask; values marked biased"
    )
    clearance = traits.Str(nohash=True, desc="handed out by the guard, by nobody else")


class _ExtractOutput(TraitedSpec):
    values = traits.List(traits.Float, desc="per map: the mean in its mask (0 if it is empty)")
    coverage = traits.List(traits.Float, desc="per map: share of the mask with data")
    sizes = traits.List(traits.Int, desc="per map: voxels in its mask")


class Extract(SequesterInterface):
    """The mean of each map inside its mask: the meeting of what was chosen with what is tested.

    Runs only under the guard (``workflow.run(plugin=GuardPlugin(study))``), on a warm cache
    too. For a quick look without a workflow, use `sequester.nodes.roi.region_mean`.
    """

    input_spec = _ExtractInput
    output_spec = _ExtractOutput
    _always_run = True
    meeting = _MEETING
    touch_rules = {
        "values": _MEETING.rule,
        "coverage": _MEETING.rule,
        "sizes": only("mask_files", ignored=("in_files",), single=False),
    }

    def _work(self, cwd: Path) -> dict[str, Any]:
        if not self._value("clearance"):
            raise Refused(
                "this extraction has no clearance: run the workflow under the guard, "
                "workflow.run(plugin=GuardPlugin(study))"
            )
        masks, maps = self.inputs.mask_files, self.inputs.in_files
        if len(masks) not in (1, len(maps)):
            raise InputError("masks and maps do not pair up", got=f"{len(masks)}, {len(maps)}")
        missing = self._value("missing") or Missing()
        values, coverage, sizes = [], [], []
        mask, geometry = read_map(masks[0])
        for i, path in enumerate(maps):
            if i and len(masks) > 1:
                mask, geometry = read_map(masks[i])
            data, grid = read_map(path)
            check_same_grid((masks[min(i, len(masks) - 1)], geometry), [(path, grid)])
            inside = data[np.isfinite(mask) & (mask != 0)]
            mean, share = region_mean(inside, missing.present(inside))
            values.append(mean)
            coverage.append(share)
            sizes.append(len(inside))
        return {"values": values, "coverage": coverage, "sizes": sizes}


class _FixedInput(InputSpec):
    values = traits.List(traits.Float, mandatory=True, desc="one value per subject")
    labels = traits.List(traits.Str, desc="per value: who it belongs to; default one each")
    coverage = traits.List(traits.Float, mandatory=True, desc="per value: share of the mask")
    sizes = traits.List(traits.Int, mandatory=True, desc="per value: voxels in the mask")
    names = traits.Tuple(
        traits.Str, traits.Str, traits.Str, mandatory=True, desc="roi, plan, search region"
    )
    own_masks = traits.Bool(False, usedefault=True, desc="each subject has masks of their own")


class _RecordOutput(TraitedSpec):
    record_file = File(exists=True, desc="the result, as JSON")


class FixedRegionTest(SequesterInterface):
    """Student's t-test and interval for a region fixed without the tested data."""

    input_spec = _FixedInput
    output_spec = _RecordOutput
    touch_rules = {"record_file": only("values", "coverage", "sizes")}
    statistic = Statistic(
        values="values",
        labels="labels",
        cure="use the whole-procedure sign flip, which chooses every fold's region again in each "
        'flip (FlipTest; in STUDY.toml the default: leave test = "t" out)',
    )

    def _work(self, cwd: Path) -> dict[str, Any]:
        values = self.inputs.values
        labels = self._value("labels") or list(map(str, range(len(values))))
        people, names = per_person(values, labels), self.inputs.names
        sizes, coverage = self.inputs.sizes, self.inputs.coverage
        if self.inputs.own_masks:
            result = own_mask_result(people, names, sizes, coverage)
        else:
            result = fixed_region_result(people, names, sizes[0], coverage)
        return {"record_file": write_json(cwd / "result.json", result.as_dict())}
