"""Interfaces around `procedure`: all folds' masks in one node, and the test that matches."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from nipype.interfaces.base import File, InputMultiObject

from .. import progress
from ..errors import InputError, SequesterError
from ..heldout import INTERVALS, cross_fitted_result
from ..images import (
    Bools,
    Floats,
    Geometry,
    check_same_grid,
    geometry_of,
    open_image,
    read_mask,
    stack,
    write_map,
)
from ..pages import Source
from ..procedure import Prepared, Procedure, held_out_rows
from ..rules import Rule, Statistic, all_but_held_out, chosen_on
from ..scoreunits import also_scores, dealt_by_scores
from ..space import Grid
from ..storedmaps import opened
from .base import InputSpec, SequesterInterface, TraitedSpec, one_or_each, traits, write_json
from .masks import PEAK, peak_of

Reading = Callable[[list[str], Bools | None], tuple[Floats | Source, Grid, Geometry]]


class _ProcedureInput(InputSpec):
    in_files = traits.List(File(exists=True), mandatory=True, desc="per row: an effect map")
    labels = traits.List(traits.Str, mandatory=True, desc="per row: who is held out as one")
    row_names = traits.List(traits.Str, desc="per row: tells rows of one label apart")
    search_file = File(exists=True, desc="search region; default the whole grid")
    procedure = traits.Instance(Procedure, mandatory=True, desc="folds, map, rule, summary")


def _prepared(inputs: Any, reading: Reading = stack) -> tuple[Prepared, Grid, Geometry]:
    """The procedure on the files of a node."""
    inside = _inside(inputs.search_file or None, inputs.in_files[0])
    effects, grid, geometry = reading(inputs.in_files, inside)
    names = inputs.row_names or inputs.in_files
    tested = None
    if getattr(inputs, "tested_files", None):
        check_same_grid(
            (inputs.in_files[0], geometry),
            [(path, geometry_of(open_image(path))) for path in inputs.tested_files],
        )
        tested, _, _ = stack(inputs.tested_files, inside)
    # The stack was read for this alone: no copy, which a large study has no room for.
    ready = inputs.procedure.prepare(effects, inputs.labels, grid, names, tested, copy=False)
    return ready, grid, geometry


def _inside(search_file: str | None, reference: str) -> Bools | None:
    """The search region on the grid of a map; None for the whole of it."""
    if not search_file:
        return None
    return read_mask(search_file, (reference, geometry_of(open_image(reference))))[0]


def _per_fold(settings: Any) -> list[tuple[int, ...]]:
    return held_out_rows(settings["procedure"].scheme, settings["labels"])


def _per_row(settings: Any) -> list[tuple[int, ...]]:
    of_row = {row: held for held in _per_fold(settings) for row in held}
    return [of_row[row] for row in sorted(of_row)]


def _rule(held_out: Callable[[Any], list[tuple[int, ...]]]) -> Rule:
    """A fold's mask touches the maps, and the scores of a model, of all rows but those held out."""
    maps = all_but_held_out("in_files", held_out, ("labels", "procedure"), ("search_file",))
    return dealt_by_scores(also_scores(maps, "in_files", "procedure"), "procedure")


class _ChooseOutput(TraitedSpec):
    mask_files = traits.List(File(exists=True), desc="per fold: the mask chosen without it")
    row_masks = traits.List(File(exists=True), desc="per row: the mask of the fold it is out of")
    fold_names = traits.List(traits.Str, desc="per fold: its name")
    peaks = traits.List(traits.List(traits.Float), desc=f"per fold, of the map that chose: {PEAK}")
    overlap_file = File(exists=True, desc="per voxel: share of the folds that chose it")


class ChooseByFold(SequesterInterface):
    """Every fold's mask, chosen without the rows that the fold holds out."""

    input_spec = _ProcedureInput
    output_spec = _ChooseOutput
    touch_rules = {
        "mask_files": _rule(_per_fold),
        "peaks": _rule(_per_fold),
        "row_masks": _rule(_per_row),
    }

    def _work(self, cwd: Path) -> dict[str, Any]:
        # The maps are gone through once or twice: they can stay in their files.
        ready, grid, geometry = _prepared(self.inputs, opened)
        masks = ready.masks()
        files = [
            str(write_map(cwd / f"fold{k:05d}.nii.gz", grid.filled(mask), geometry))
            for k, mask in enumerate(masks)
        ]
        of_row = {row: files[k] for k, fold in enumerate(ready.folds) for row in fold.held_out}
        share = np.zeros(grid.n_features, np.float32)
        for mask in masks:
            share += mask
        share /= len(masks)
        return {
            "mask_files": files,
            "row_masks": [of_row[row] for row in sorted(of_row)],
            "fold_names": [fold.name for fold in ready.folds],
            "peaks": _peaks(ready, masks, grid),
            "overlap_file": str(write_map(cwd / "overlap.nii.gz", grid.filled(share), geometry)),
        }


def _peaks(ready: Prepared, masks: Sequence[Bools], grid: Grid) -> list[list[float]]:
    """The `PEAK` of every fold."""
    found = ready.peaks(masks)
    return [[] if one is None else peak_of(grid, *one) for one in found]


class _WithinInput(InputSpec):
    in_files = traits.List(File(exists=True), mandatory=True, desc="per row: an effect map")
    labels = traits.List(traits.Str, mandatory=True, desc="per row: the subject")
    search_files = InputMultiObject(
        File(exists=True), desc="one search region for all, or one per row; default the whole map"
    )
    procedure = traits.Instance(Procedure, mandatory=True, desc="folds over runs, map, rule")
    runs = traits.List(traits.Str, mandatory=True, desc="per row: the run, distinct in a subject")


def _own_rows(settings: Any) -> list[tuple[int, ...]]:
    """Per row: the rows of the same subject that its mask is chosen on."""
    scheme, labels, runs = settings["procedure"].scheme, settings["labels"], settings["runs"]
    chosen: dict[int, tuple[int, ...]] = {}
    for rows in _rows_of(labels).values():
        for fold in scheme.folds([runs[row] for row in rows]):
            for held in fold.held_out:
                chosen[rows[held]] = tuple(rows[i] for i in fold.selection)
    return [chosen[row] for row in range(len(labels))]


def _rows_of(labels: list[str]) -> dict[str, list[int]]:
    of_label: dict[str, list[int]] = {}
    for row, label in enumerate(labels):
        of_label.setdefault(label, []).append(row)
    return of_label


_own = chosen_on(
    "in_files", _own_rows, ("labels", "runs", "procedure"), one_or_each=("search_files",)
)


class _WithinOutput(TraitedSpec):
    row_masks = traits.List(File(exists=True), desc="per row: the subject's mask without that run")
    peaks = traits.List(traits.List(traits.Float), desc=f"per row, of the map that chose: {PEAK}")
    replaced = traits.List(traits.Bool, desc="per row: the strongest features stand in")


class ChooseWithin(SequesterInterface):
    """Each subject's own masks: for every run, chosen on the subject's other runs alone."""

    input_spec = _WithinInput
    output_spec = _WithinOutput
    touch_rules = {"row_masks": _own, "peaks": _own, "replaced": _own}

    def _work(self, cwd: Path) -> dict[str, Any]:
        labels, maps = self.inputs.labels, self.inputs.in_files
        searches = one_or_each("search_files", self._value("search_files"), len(maps))
        files: dict[int, str] = {}
        peaks: dict[int, list[float]] = {}
        replaced: dict[int, bool] = {}
        for rows in _rows_of(labels).values():
            # A subject's rows share one search region unless each has its own.
            for search in dict.fromkeys(searches[row] for row in rows):
                ready, grid, geometry = self._subject([maps[row] for row in rows], search, rows)
                masks = ready.masks()
                of_fold = _peaks(ready, masks, grid)
                for k, (fold, mask, peak) in enumerate(
                    zip(ready.folds, masks, of_fold, strict=True)
                ):
                    for row in (rows[held] for held in fold.held_out):
                        if searches[row] == search:
                            path = cwd / f"row{row:05d}.nii.gz"
                            files[row] = str(write_map(path, grid.filled(mask), geometry))
                            peaks[row], replaced[row] = peak, k in masks.replaced
        numbers = range(len(labels))
        return {
            "row_masks": [files[row] for row in numbers],
            "peaks": [peaks[row] for row in numbers],
            "replaced": [replaced[row] for row in numbers],
        }

    def _subject(
        self, paths: list[str], search: str | None, rows: list[int]
    ) -> tuple[Prepared, Grid, Geometry]:
        """The procedure on one subject's runs."""
        effects, grid, geometry = stack(paths, _inside(search, paths[0]))
        runs = [self.inputs.runs[row] for row in rows]
        try:
            return self.inputs.procedure.prepare(effects, runs, grid), grid, geometry
        except InputError as error:
            raise error.within(self.inputs.labels[rows[0]]) from error


class _FlipInput(_ProcedureInput):
    tested_files = traits.List(
        File(exists=True), desc="per row: the map that is tested, if not the one that chooses"
    )
    values = traits.List(traits.Float, mandatory=True, desc="per row: the extracted value")
    n_flips = traits.Int(4999, usedefault=True, desc="random flips, if not enumerated")
    seed = traits.Int(0, usedefault=True, desc="keys the flips")
    interval = traits.Enum(*INTERVALS, usedefault=True, desc="how the interval is made")
    names = traits.Tuple(
        traits.Str, traits.Str, traits.Str, mandatory=True, desc="roi, plan, search region"
    )
    keep_values = traits.Bool(
        False, usedefault=True, desc="keep everybody's values under each flip, for comparisons"
    )


class _FlipOutput(TraitedSpec):
    record_file = File(exists=True, desc="the result, as JSON")
    flips_file = File(exists=True, desc="float64 .npy: the statistic as observed, then each flip's")
    values_file = File(desc="float64 .npy, (1 + flips, people), if kept: as observed, then flipped")


class FlipTest(SequesterInterface):
    """The whole-procedure exchange test, with estimate, interval and stability.

    Signs are flipped, or with a model the scores exchanged. Valid for cross-fitted values: each
    exchange chooses every fold's region again.
    """

    input_spec = _FlipInput
    output_spec = _FlipOutput
    statistic = Statistic(
        values="values",
        cross_fitted=True,
        scores=("procedure",),
        labels="labels",
        search="search_file",
    )

    def _work(self, cwd: Path) -> dict[str, Any]:
        ready, _, _ = _prepared(self.inputs)
        roi = self.inputs.names[0]
        result, outcome, test = cross_fitted_result(
            ready,
            self.inputs.names,
            self.inputs.n_flips,
            self.inputs.seed,
            self.inputs.interval,
            lambda done, total: progress.tell(f"flips {roi}", done, total),
        )
        if list(outcome.values) != list(self.inputs.values):
            raise SequesterError(
                f"{roi}: the extracted values are not those of the procedure that is tested; "
                "the masks, the maps and the test must come from one procedure"
            )
        flips = cwd / "flips.npy"
        np.save(flips, np.array([test.t, *test.statistics]))
        made = {
            "record_file": write_json(cwd / "result.json", result.as_dict()),
            "flips_file": str(flips),
        }
        if self.inputs.keep_values:
            exchanges, _ = ready.exchanges(self.inputs.n_flips, self.inputs.seed)
            observed = ready.per_person(outcome.values)[None]
            kept = cwd / "values.npy"
            np.save(kept, np.concatenate([observed, ready.values_under(exchanges)]))
            made["values_file"] = str(kept)
        return made
