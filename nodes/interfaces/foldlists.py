"""Interfaces that let any group software stand between the folds and their masks.

`FoldLists` gives each fold its lists of maps, one node per fold makes a group map of each
(a MapNode over the lists), and `MasksByRow` gives every row the mask of the fold that holds it
out, ready for `Extract`. `workflows.around` wires them.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

from nipype.interfaces.base import File

from ..errors import InputError
from ..folds import Fold, LeaveOneOut, Scheme
from ..heldout import held_out_difference, held_out_result
from ..procedure import held_out_rows
from ..rules import (
    NOTHING,
    Branch,
    Inputs,
    Leaf,
    Rule,
    Statistic,
    Tree,
    chosen_on,
    complements,
    element,
    fold_loss,
    joined,
)
from ..scoreunits import dealt_by_scores
from .base import InputSpec, SequesterInterface, TraitedSpec, traits, write_json


class _ListsInput(InputSpec):
    in_files = traits.List(File(exists=True), mandatory=True, desc="per row: a map")
    labels = traits.List(traits.Str, mandatory=True, desc="per row: who is held out as one")
    scheme = traits.Instance(Scheme, desc="fold scheme; default leave-one-out")


class _ListsOutput(TraitedSpec):
    selection_files = traits.List(
        traits.List(File(exists=True)), desc="per fold: the maps that choose"
    )
    held_out_files = traits.List(
        traits.List(File(exists=True)), desc="per fold: the maps it holds out"
    )
    selection_labels = traits.List(traits.List(traits.Str), desc="per fold: whose maps choose")
    held_out_labels = traits.List(traits.List(traits.Str), desc="per fold: who is held out")
    fold_names = traits.List(traits.Str, desc="per fold: its name")
    fold_of_row = traits.List(traits.Int, desc="per row: the fold that holds it out, from 0")


def fold_of_row(folds: Sequence[Fold]) -> list[int]:
    """Per row: the number of the fold that holds it out.

    Examples
    --------
    >>> fold_of_row(LeaveOneOut().folds(["b", "a", "c", "b"]))
    [1, 0, 2, 1]
    """
    of_row = {row: k for k, fold in enumerate(folds) for row in fold.held_out}
    return [of_row[row] for row in sorted(of_row)]


HeldOut = list[tuple[int, ...]]  # per fold, the rows it holds out


def _held_out(settings: Any) -> HeldOut:
    return held_out_rows(settings.get("scheme") or LeaveOneOut(), settings["labels"])


def _by_fold(field: str, made: Callable[[HeldOut, list[Tree]], Sequence[Tree]]) -> Rule:
    """A rule for an output with the structure of the folds, whose items are those of a field."""

    def derive(inputs: Inputs) -> Tree:
        tree = inputs.trees.get(field)
        if isinstance(tree, Leaf) or {"labels", "scheme"} & inputs.arriving:
            parts = [] if tree is None else [tree]
            return joined(parts, single=False, lost=fold_loss(inputs, ("labels", "scheme")))
        n = len(inputs.settings["labels"])
        items = [Leaf(NOTHING) if tree is None else element(tree, row) for row in range(n)]
        return Branch(made(_held_out(inputs.settings), items))

    # What the maps hold cannot reach a list of labels.
    return Rule(frozenset({"in_files", field}), derive)


def _kept(folds: HeldOut, items: list[Tree]) -> Sequence[Tree]:
    return complements(items, folds)


def _away(folds: HeldOut, items: list[Tree]) -> Sequence[Tree]:
    return [Branch([items[row] for row in out]) for out in folds]


class FoldLists(SequesterInterface):
    """A list of maps as one list per fold: those that choose, and those held out.

    Item k of each output is for fold k. A MapNode whose ``iterfield`` takes
    ``selection_files`` runs once per fold, on the maps that choose there and no others.
    """

    input_spec = _ListsInput
    output_spec = _ListsOutput
    touch_rules = {
        "selection_files": dealt_by_scores(_by_fold("in_files", _kept), "scheme"),
        "held_out_files": dealt_by_scores(_by_fold("in_files", _away), "scheme"),
        "selection_labels": _by_fold("labels", _kept),
        "held_out_labels": _by_fold("labels", _away),
        "fold_names": _by_fold("labels", lambda folds, _: [Leaf(NOTHING) for _ in folds]),
        "fold_of_row": _by_fold("labels", lambda _, items: items),
    }

    def _work(self, cwd: Path) -> dict[str, Any]:
        files, labels = self.inputs.in_files, self.inputs.labels
        if len(files) != len(labels):
            raise InputError("maps and labels do not pair up", got=f"{len(files)}, {len(labels)}")
        folds = (self._value("scheme") or LeaveOneOut()).folds(labels)
        return {
            "selection_files": [[files[row] for row in fold.selection] for fold in folds],
            "held_out_files": [[files[row] for row in fold.held_out] for fold in folds],
            "selection_labels": [[labels[row] for row in fold.selection] for fold in folds],
            "held_out_labels": [[labels[row] for row in fold.held_out] for fold in folds],
            "fold_names": [fold.name for fold in folds],
            "fold_of_row": fold_of_row(folds),
        }


class _ByRowInput(InputSpec):
    mask_files = traits.List(File(exists=True), mandatory=True, desc="per fold: its mask")
    fold_of_row = traits.List(
        traits.Int,
        mandatory=True,
        desc="per row: the fold that holds it out, from 0; set it as a literal: over an edge, "
        "which row has which mask is not known before the run",
    )


class _ByRowOutput(TraitedSpec):
    row_masks = traits.List(File(exists=True), desc="per row: the mask of the fold it is out of")


class MasksByRow(SequesterInterface):
    """The mask of every row: that of the fold which holds the row out."""

    input_spec = _ByRowInput
    output_spec = _ByRowOutput
    touch_rules = {
        "row_masks": chosen_on(
            "mask_files", lambda given: [(k,) for k in given["fold_of_row"]], ("fold_of_row",)
        )
    }

    def _work(self, cwd: Path) -> dict[str, Any]:
        masks, of_row = self.inputs.mask_files, self.inputs.fold_of_row
        if set(of_row) != set(range(len(masks))):
            raise InputError(
                "masks and folds do not pair up",
                expected=f"folds 0 to {len(masks) - 1}, each of them",
                got=f"{len(masks)} masks, folds {sorted(set(of_row))}",
            )
        return {"row_masks": [masks[k] for k in of_row]}


class _SummaryInput(InputSpec):
    values = traits.List(traits.Float, mandatory=True, desc="per row: the extracted value")
    labels = traits.List(traits.Str, mandatory=True, desc="per row: the subject")
    coverage = traits.List(traits.Float, mandatory=True, desc="per row: share of its mask")
    sizes = traits.List(traits.Int, mandatory=True, desc="per row: voxels in its mask")
    names = traits.Tuple(
        traits.Str, traits.Str, traits.Str, mandatory=True, desc="roi, plan, search region"
    )
    n_folds = traits.Int(mandatory=True, desc="how many folds took turns")
    rule = traits.Str(mandatory=True, desc="the mask rule in words")
    groups = traits.List(traits.Str, desc="per row: the subject's group", requires=["compared"])
    compared = traits.Tuple(
        traits.Str, traits.Str, desc="the groups whose difference is told", requires=["groups"]
    )


class _SummaryOutput(TraitedSpec):
    record_file = File(exists=True, desc="the result, as JSON")


class HeldOutSummary(SequesterInterface):
    """The mean of held-out values, or the difference of two groups' means; no test is made."""

    input_spec = _SummaryInput
    output_spec = _SummaryOutput
    # No p comes out of it, so that values whose masks took turns are accepted.
    statistic = Statistic(values="values", labels="labels", cross_fitted=True, scores=("groups",))

    def _work(self, cwd: Path) -> dict[str, Any]:
        given = self.inputs
        read = (given.values, given.labels)
        about = (given.names, given.n_folds, given.sizes, given.coverage, given.rule)
        if self._value("groups") is None:
            result = held_out_result(*read, *about)
        else:
            result = held_out_difference(*read, given.groups, given.compared, *about)
        return {"record_file": write_json(cwd / "result.json", result.as_dict())}
