"""Interfaces around `roi`: the extraction, which needs clearance, and the t-test."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from nipype.interfaces.base import File, InputMultiObject

from ..errors import InputError, Refused
from ..fixed import (
    CHOSEN_ON,
    fixed_region_result,
    group_mask_result,
    own_mask_result,
)
from ..groupmaps import Missing
from ..images import check_same_grid, read_map
from ..orthogonality import Certificate
from ..roi import SUMMARIES, Floats, block_values, per_person
from ..rules import Branch, Inputs, Leaf, Meeting, Rule, Statistic, Tree, joined, leaves, only
from .base import InputSpec, SequesterInterface, TraitedSpec, one_or_each, traits, write_json

_MEETING = Meeting(
    mask="mask_files",
    data="in_files",
    biased="exploratory",
    these_only="these_subjects",
    certificate="certificate",
    aside=("labels",),
)


def _with_block(inputs: Inputs) -> Tree:
    """As the meeting has it; a component also touches the other rows of its label."""
    tree = _MEETING.rule.derive(inputs)
    component = inputs.settings.get("summary") == "component" or "summary" in inputs.arriving
    if isinstance(tree, Leaf) or not component:
        return tree
    labels = inputs.settings.get("labels", [])
    if "labels" in inputs.arriving or len(labels) != len(tree.children):
        labels = [""] * len(tree.children)  # nobody can be told apart
    of_label: dict[str, list[Leaf]] = {}
    for label, child in zip(labels, tree.children, strict=True):
        of_label.setdefault(label, []).extend(leaves(child))
    return Branch([joined(of_label[label]) for label in labels])


_VALUES = Rule(_MEETING.rule.names, _with_block)


class _ExtractInput(InputSpec):
    mask_files = InputMultiObject(
        File(exists=True), mandatory=True, desc="one mask for all maps, or one per map"
    )
    in_files = traits.List(File(exists=True), mandatory=True, desc="maps to read")
    labels = traits.List(traits.Str, mandatory=True, desc="per map: the subject")
    missing = traits.Instance(Missing, desc="what counts as no data")
    summary = traits.Enum(
        *SUMMARIES,
        usedefault=True,
        desc='how a map is read; "weighted" by the mask\'s own values, "component" together with '
        "the other maps of its label in the same mask",
    )
    min_coverage = traits.Float(
        0.0, usedefault=True, desc="least share of a mask in which each map must have data"
    )
    exploratory = traits.Bool(
        False, usedefault=True, desc="read on the data that chose the mask; values marked biased"
    )
    these_subjects = traits.Bool(
        False, usedefault=True, desc="the claim is about the tested subjects only"
    )
    certificate = traits.Instance(
        Certificate, desc="shows that the contrast which chose cannot bias the one that is read"
    )
    clearance = traits.Str(nohash=True, desc="handed out by the guard, by nobody else")


class _ExtractOutput(TraitedSpec):
    values = traits.List(traits.Float, desc="per map: the summary in its mask (0 if it is empty)")
    coverage = traits.List(traits.Float, desc="per map: share of the mask with data")
    sizes = traits.List(traits.Int, desc="per map: voxels in its mask")


class Extract(SequesterInterface):
    """One value of each map inside its mask: the meeting of what was chosen with what is tested.

    Runs only under the guard (``workflow.run(plugin=GuardPlugin(study))``), on a warm cache
    too. For a quick look without a workflow, use `sequester.nodes.roi.region_value`.

    Raises
    ------
    Refused
        Without clearance.
    InputError
        When masks, labels and maps do not pair up; for a negative or missing weight; and when
        maps have no data in their (non-empty) masks, or in less than `min_coverage` of them.
    """

    input_spec = _ExtractInput
    output_spec = _ExtractOutput
    _always_run = True
    meeting = _MEETING
    touch_rules = {
        "values": _VALUES,
        "coverage": _VALUES,
        "sizes": only("mask_files", ignored=("in_files",), single=False),
    }

    def _work(self, cwd: Path) -> dict[str, Any]:
        if not self._value("clearance"):
            raise Refused(
                "this extraction has no clearance: run the workflow under the guard, "
                "workflow.run(plugin=GuardPlugin(study))"
            )
        masks, maps, labels = self.inputs.mask_files, self.inputs.in_files, self.inputs.labels
        if len(masks) not in (1, len(maps)):
            raise InputError("masks and maps do not pair up", got=f"{len(masks)}, {len(maps)}")
        if len(labels) != len(maps):
            raise InputError("labels and maps do not pair up", got=f"{len(labels)}, {len(maps)}")
        mask_of = list(masks) * (len(maps) if len(masks) == 1 else 1)
        missing, summary = self._value("missing") or Missing(), self.inputs.summary
        values, coverage, sizes = [0.0] * len(maps), [0.0] * len(maps), [0] * len(maps)
        last = ""
        for rows in _blocks(labels, mask_of, summary):
            path = mask_of[rows[0]]
            if path != last:
                mask, geometry = read_map(path)
                inside, last = np.isfinite(mask) & (mask != 0), path
                weights = _weights(path, mask)[inside] if summary == "weighted" else None
            read = []
            for row in rows:
                data, grid = read_map(maps[row])
                check_same_grid((path, geometry), [(maps[row], grid)])
                read.append(data[inside])
            block = np.stack(read)
            made, shares = block_values(block, missing.present(block), summary, weights)
            for row, value, share in zip(rows, made.tolist(), shares.tolist(), strict=True):
                values[row], coverage[row], sizes[row] = value, share, block.shape[1]
        _check_coverage(labels, coverage, sizes, self.inputs.min_coverage)
        return {"values": values, "coverage": coverage, "sizes": sizes}


def _blocks(labels: list[str], mask_of: list[str], summary: str) -> list[list[int]]:
    """The rows that are read together: for a component, those of one label in one mask."""
    if summary != "component":
        return [[row] for row in range(len(labels))]
    found: dict[tuple[str, str], list[int]] = {}
    for row, key in enumerate(zip(labels, mask_of, strict=True)):
        found.setdefault(key, []).append(row)
    return list(found.values())


def _weights(path: str, mask: Floats) -> Floats:
    """A mask's own values, if they can be weights."""
    wrong = ~(np.isfinite(mask) & (mask >= 0))
    if wrong.any():
        raise InputError(
            "a mask's values cannot be weights",
            where=path,
            expected="no negative, infinite or missing value",
            got=f"{int(wrong.sum())} such voxels, {float(mask[wrong][0]):g} the first",
            remedy='set them to 0, or use summary = "mean"',
        )
    return mask


def _check_coverage(
    labels: list[str], coverage: list[float], sizes: list[int], least: float
) -> None:
    """Whether every map has data in enough of its mask, and any at all."""
    short = [
        f"{label} {share:.3g}"
        for label, share, size in zip(labels, coverage, sizes, strict=True)
        if size and (share < least or not share)
    ]
    if short:
        more = f" and {len(short) - 5} more" if len(short) > 5 else ""
        raise InputError(
            f"{len(short)} of {len(labels)} maps have {'too little' if least else 'no'} data in "
            "their masks",
            expected=f"coverage of at least {least:g}" if least else "coverage above 0",
            got=", ".join(short[:5]) + more,
            remedy="leave them out with an exclude_reason"
            + (", or lower min_coverage" * (least > 0)),
        )


class _FixedInput(InputSpec):
    values = traits.List(traits.Float, mandatory=True, desc="one value per subject")
    labels = traits.List(traits.Str, desc="per value: who it belongs to; default one each")
    coverage = traits.List(traits.Float, mandatory=True, desc="per value: share of the mask")
    sizes = traits.List(traits.Int, mandatory=True, desc="per value: voxels in the mask")
    names = traits.Tuple(
        traits.Str, traits.Str, traits.Str, mandatory=True, desc="roi, plan, search region"
    )
    replaced = InputMultiObject(
        traits.Bool, desc="per value, or for all: the strongest features stand in for an empty mask"
    )
    chosen_on = traits.Enum(
        *CHOSEN_ON, usedefault=True, desc="what the masks were chosen on; for the result in words"
    )
    these_subjects = traits.Bool(
        False, usedefault=True, desc="the claim is about the tested subjects only"
    )
    certificate = traits.Instance(Certificate, desc="that of the extraction, for the result")


class _RecordOutput(TraitedSpec):
    record_file = File(exists=True, desc="the result, as JSON")


class FixedRegionTest(SequesterInterface):
    """Student's t-test and interval for a region fixed without the tested data."""

    input_spec = _FixedInput
    output_spec = _RecordOutput
    touch_rules = {"record_file": only("values", "coverage", "sizes", "replaced")}
    statistic = Statistic(
        values="values",
        labels="labels",
        these_only="these_subjects",
        cure="use the whole-procedure sign flip, which chooses every fold's region again in each "
        'flip (FlipTest; in STUDY.toml the default: leave test = "t" out)',
    )

    def _work(self, cwd: Path) -> dict[str, Any]:
        values = self.inputs.values
        labels = self._value("labels") or list(map(str, range(len(values))))
        people, names = per_person(values, labels), self.inputs.names
        sizes, coverage = self.inputs.sizes, self.inputs.coverage
        chosen_on, replaced = self.inputs.chosen_on, self._value("replaced") or [False]
        if chosen_on == "nothing":
            result = fixed_region_result(people, names, sizes, coverage)
        elif chosen_on == "group":
            result = group_mask_result(
                people,
                names,
                sizes,
                coverage,
                these_subjects=self.inputs.these_subjects,
                certificate=self._value("certificate"),
                replaced=any(replaced),
            )
        else:
            stood_in = one_or_each("replaced", replaced, len(values))
            sizes_of = one_or_each("sizes", sizes, len(values))
            result = own_mask_result(
                people,
                names,
                sizes,
                coverage,
                chosen_on,
                [label for label, yes in zip(labels, stood_in, strict=True) if yes],
                [label for label, size in zip(labels, sizes_of, strict=True) if not size],
            )
        return {"record_file": write_json(cwd / "result.json", result.as_dict())}
