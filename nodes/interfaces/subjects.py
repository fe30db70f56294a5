"""Subjects kept or left out by a measure: a choice like that of voxels, with its ancestry."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

from nipype.interfaces.base import File

from ..errors import InputError
from ..rules import Branch, Inputs, Leaf, Loss, Rule, Tree, element, joined
from ..scoreunits import UNNAMED, score_of
from ..subjects import Keep
from ..touch import Touch, union
from .base import InputSpec, SequesterInterface, TraitedSpec, traits, write_json

_LATE = Loss(
    "who is kept is not known before the run",
    "give measures and labels as literals, or leave subjects out in the study table "
    "(exclude_reason)",
)


class _KeepInput(InputSpec):
    in_files = traits.List(File(exists=True), mandatory=True, desc="per row: a map")
    labels = traits.List(traits.Str, mandatory=True, desc="per row: the subject")
    measures = traits.List(traits.Float, mandatory=True, desc="per row: what is looked at")
    measure_name = traits.Str(
        "measure",
        usedefault=True,
        desc="the column of the study table, or the declared origin, that measures is from",
    )
    keep = traits.Instance(Keep, mandatory=True, desc="which measures stay")


class _KeepOutput(TraitedSpec):
    out_files = traits.List(File(exists=True), desc="per row that stays: its map")
    out_labels = traits.List(traits.Str, desc="per row that stays: the subject")
    record_file = File(exists=True, desc="who was left out and why, as JSON")


def _chosen_by(inputs: Inputs) -> Leaf:
    """What the measures derive from, as what has selected: who stands where takes all of them."""
    place, tree = f"{inputs.where}.measures", inputs.trees.get("measures")
    if tree is None:
        labels = inputs.settings.get("labels", [])
        measures = inputs.settings.get("measures", [])
        name = inputs.settings.get("measure_name", "measure")
        if "labels" in inputs.arriving or len(labels) != len(measures):
            what = frozenset({f"{UNNAMED} {name!r} given to {inputs.where}"})
            tree = Leaf(Touch(unknown=what))
        else:
            touches = score_of(name, list(zip(labels, measures, strict=True)), inputs)
            tree = Leaf(union(touches), place=place)
    touch = tree.touch
    return Leaf(replace(touch, values=0, selected=touch.choosers), (tree,), place)


def _kept(field: str) -> Rule:
    """The rows that stay; all of them as one, when who stays is not known before the run."""

    def derive(inputs: Inputs) -> Tree:
        chosen, tree = _chosen_by(inputs), inputs.trees.get(field) or Leaf(Touch())
        late = inputs.arriving & {"labels", "measures", "keep"}
        if late or (isinstance(tree, Leaf) and field == "in_files"):
            return joined([tree, chosen], single=False, lost=_LATE)
        rows = inputs.settings["keep"].rows(inputs.settings["measures"])
        return Branch([joined([element(tree, row), chosen]) for row in rows])

    return Rule(frozenset({"in_files", "labels", "measures"}), derive)


class KeepSubjects(SequesterInterface):
    """Keep the rows whose measure lies within limits, and say who was left out.

    What decides who takes part has chosen, like what chooses voxels: every map that stays
    carries what the measures derive from. A measure of the tested data is a leak where the maps
    meet a mask; a score is one where values are compared with that score; a motion summary is
    geometry when the node that makes it says so. To leave a fixed list of subjects out, with
    reasons, use the study table (``exclude_reason``).

    Raises
    ------
    InputError
        When rows do not pair up, a measure is no number, or nobody stays.
    """

    input_spec = _KeepInput
    output_spec = _KeepOutput
    touch_rules = {"out_files": _kept("in_files"), "out_labels": _kept("labels")}

    def _work(self, cwd: Path) -> dict[str, Any]:
        files, labels, measures = self.inputs.in_files, self.inputs.labels, self.inputs.measures
        lengths = (len(files), len(labels), len(measures))
        if len(set(lengths)) > 1:
            raise InputError(
                "maps, labels and measures do not pair up", got=", ".join(map(str, lengths))
            )
        keep, name = self.inputs.keep, self.inputs.measure_name
        rows = keep.rows(measures)
        if not rows:
            raise InputError(
                "no subject stays",
                expected=f"{name} {keep.describe()}",
                got=f"{min(measures):g} to {max(measures):g}",
            )
        left = [
            {"label": label, name: measure}
            for row, (label, measure) in enumerate(zip(labels, measures, strict=True))
            if row not in rows
        ]
        record = {"measure": name, "kept": keep.describe(), "n_kept": len(rows), "left_out": left}
        return {
            "out_files": [files[row] for row in rows],
            "out_labels": [labels[row] for row in rows],
            "record_file": write_json(cwd / "kept.json", record),
        }
