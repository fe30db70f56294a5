"""Interfaces around `masks`."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from nipype.interfaces.base import File, InputMultiObject

from ..errors import EmptyFoldError, InputError
from ..images import geometry_of, open_image, read_map, read_mask, write_map
from ..masks import (
    Cluster,
    PeakSphere,
    Strongest,
    Threshold,
    check_k,
    choose,
    highest,
    sphere,
    strongest,
)
from ..procedure import ON_EMPTY
from ..rules import Branch, Inputs, Leaf, Rule, Tree, each, joined, leaves, only
from ..space import Grid
from ..touch import Touch, of_sphere, union
from .base import InputSpec, SequesterInterface, TraitedSpec, one_or_each, traits

RULES = (Threshold, Cluster, Strongest, PeakSphere)


class _MaskOutput(TraitedSpec):
    mask_file = File(exists=True, desc="the region, 0 and 1")


PEAK = "x, y, z in mm and value of the map's highest voxel in the mask; none without one"


def peak_of(grid: Grid, there: int | None, value: float) -> list[float]:
    """The `PEAK` at one feature, or none."""
    if there is None:
        return []
    voxel = np.array(np.unravel_index(grid.voxels[there], grid.shape))
    where = grid.affine[:3, :3] @ voxel + grid.affine[:3, 3]
    return [*(float(f"{mm:.6g}") for mm in where + 0.0), value]


class _ChooseOutput(_MaskOutput):
    peak = traits.List(traits.Float, desc=PEAK)
    replaced = traits.Bool(desc="the rule found nothing, and the strongest features stand in")


class _RuleInput(InputSpec):
    rule = traits.Instance(object, mandatory=True, desc="how a region is read off a map")
    negative = traits.Bool(False, usedefault=True, desc="look for low values instead of high")
    on_empty = traits.Enum(*ON_EMPTY, usedefault=True, desc="when the rule finds nothing")
    k = traits.Int(0, usedefault=True, desc='features for on_empty = "strongest"')


def _write_chosen(
    inputs: Any, map_file: str, search_file: str | None, count_file: str | None, target: Path
) -> tuple[list[float], bool]:
    """Write the region a rule reads off one map; its peak, whether the strongest stood in."""
    rule = inputs.rule
    if not isinstance(rule, RULES):
        raise InputError("no mask rule", got=repr(rule))
    values, geometry = read_map(map_file)
    if inputs.negative:
        values = -values
    inside = np.ones(geometry.shape, bool)
    if search_file is not None:
        inside, _ = read_mask(search_file, (map_file, geometry))
    n = None if count_file is None else read_map(count_file)[0][inside]
    grid = Grid(geometry.shape, geometry.affine, inside)
    chosen = choose(values[inside], rule, grid, n)
    replaced = bool(not chosen.any() and inputs.on_empty == "strongest")
    if replaced:
        check_k(inputs.k, int(inside.sum()))
        chosen = strongest(values[inside], inputs.k)
    if not chosen.any() and inputs.on_empty == "stop":
        raise EmptyFoldError(
            "the rule found nothing",
            where=f"{map_file}, search region {search_file or 'whole map'}",
            expected=rule.describe("negative" if inputs.negative else "positive"),
            remedy="relax the rule, or report that nothing was found",
        )
    write_map(target, grid.filled(chosen), geometry)
    there = highest(values[inside], chosen)
    value = 0.0 if there is None else float(values[inside][there])
    return peak_of(grid, there, -value if inputs.negative else value), replaced


class _ChooseInput(_RuleInput):
    in_file = File(exists=True, mandatory=True, desc="group map")
    search_file = File(exists=True, desc="search region; default the whole map")
    count_file = File(
        exists=True, desc="maps with data, when the rule's threshold is a p or a control"
    )


class ChooseMask(SequesterInterface):
    """The region a rule reads off one group map, inside a search region."""

    input_spec = _ChooseInput
    output_spec = _ChooseOutput
    touch_rules = {
        "mask_file": only("in_file", "search_file", "count_file"),
        "peak": only("in_file", "search_file", "count_file", single=False),
        "replaced": only("in_file", "search_file", "count_file"),
    }

    def _work(self, cwd: Path) -> dict[str, Any]:
        mask = cwd / "mask.nii.gz"
        search, count = self._value("search_file"), self._value("count_file")
        peak, replaced = _write_chosen(self.inputs, self.inputs.in_file, search, count, mask)
        return {"mask_file": str(mask), "peak": peak, "replaced": replaced}


class _ChooseEachInput(_RuleInput):
    in_files = traits.List(File(exists=True), mandatory=True, desc="per row: the map that chooses")
    search_files = InputMultiObject(
        File(exists=True), desc="one search region for all, or one per row; default the whole map"
    )


class _ChooseEachOutput(TraitedSpec):
    row_masks = traits.List(File(exists=True), desc="per row: the region chosen on its map")
    peaks = traits.List(traits.List(traits.Float), desc=f"per row: {PEAK}")
    replaced = traits.List(traits.Bool, desc="per row: the strongest features stand in")


class ChooseEach(SequesterInterface):
    """Per row, the region a rule reads off that row's own map: localizers.

    A height is a threshold on the map's own values (t, say, when it is a t map).
    """

    input_spec = _ChooseEachInput
    output_spec = _ChooseEachOutput
    touch_rules = {
        "row_masks": each("in_files", one_or_each=("search_files",)),
        "peaks": each("in_files", one_or_each=("search_files",)),
        "replaced": each("in_files", one_or_each=("search_files",)),
    }

    def _work(self, cwd: Path) -> dict[str, Any]:
        maps = self.inputs.in_files
        searches = one_or_each("search_files", self._value("search_files"), len(maps))
        masks = [cwd / f"row{row:05d}.nii.gz" for row in range(len(maps))]
        made = [
            _write_chosen(self.inputs, path, search, None, mask)
            for path, search, mask in zip(maps, searches, masks, strict=True)
        ]
        return {
            "row_masks": [str(mask) for mask in masks],
            "peaks": [peak for peak, _ in made],
            "replaced": [replaced for _, replaced in made],
        }


def _placed(inputs: Inputs) -> Tree:
    """A sphere touches its declared origin; a coordinate without one was chosen who knows how."""
    parts = [
        Leaf(leaf.touch.as_geometry(), (leaf,))
        for leaf in leaves(inputs.trees.get("reference", Branch()))
    ]
    origin, centre, radius = (inputs.settings.get(n) for n in ("origin", "centre", "radius"))
    if origin:
        named = [origin]
        if isinstance(centre, tuple) and isinstance(
            radius, float
        ):  # what is declared of this sphere, and of no other with its source
            named.append(of_sphere(origin, centre, radius))
        declared = [inputs.declared[name] for name in named if name in inputs.declared]
        stated = union(declared) if declared else Touch(origins=frozenset({origin}))
        parts.append(Leaf(stated, place=f"coordinate of {inputs.where}"))
    elif "centre" not in inputs.arriving:
        typed = frozenset({f"the coordinate given to {inputs.where}"})
        parts.append(Leaf(Touch(unknown=typed), place=f"coordinate of {inputs.where}"))
    return joined(parts)


class _SphereInput(InputSpec):
    reference = File(exists=True, mandatory=True, desc="image that gives the grid")
    centre = traits.Tuple(
        traits.Float, traits.Float, traits.Float, mandatory=True, desc="centre in mm"
    )
    radius = traits.Float(mandatory=True, desc="radius in mm")
    origin = traits.Str(desc="where the coordinate comes from (declared before looking)")


class SphereMask(SequesterInterface):
    """The voxels within a radius (mm) of a coordinate whose origin is declared."""

    input_spec = _SphereInput
    output_spec = _MaskOutput
    touch_rules = {"mask_file": Rule(frozenset({"reference"}), _placed)}

    def _work(self, cwd: Path) -> dict[str, Any]:
        geometry = geometry_of(open_image(self.inputs.reference))
        grid = Grid(geometry.shape, geometry.affine)
        inside = sphere(grid, self.inputs.centre, self.inputs.radius)
        return {"mask_file": str(write_map(cwd / "mask.nii.gz", grid.filled(inside), geometry))}


class _GivenInput(InputSpec):
    in_file = File(exists=True, mandatory=True, desc="mask from outside, with a declared origin")
    reference = File(exists=True, mandatory=True, desc="image that gives the grid")
    regrid = traits.Bool(
        False, usedefault=True, desc="bring a mask on another grid to that of the reference"
    )
    weights = traits.Bool(
        False, usedefault=True, desc="keep the mask's own values, as weights of a weighted mean"
    )


class GivenMask(SequesterInterface):
    """A mask from outside, on the data's grid (or brought to it); 0 and 1 unless its values count.

    Raises
    ------
    InputError
        For an empty mask, one on another grid (unless `regrid`), and weights to be regridded:
        a weight has no nearest value.
    """

    input_spec = _GivenInput
    output_spec = _MaskOutput
    touch_rules = {"mask_file": only("in_file", geometry=("reference",))}

    def _work(self, cwd: Path) -> dict[str, Any]:
        like = (self.inputs.reference, geometry_of(open_image(self.inputs.reference)))
        regrid = self.inputs.regrid and not self.inputs.weights
        mask, geometry = read_mask(self.inputs.in_file, like, regrid=regrid)
        values = read_map(self.inputs.in_file)[0] if self.inputs.weights else mask
        return {"mask_file": str(write_map(cwd / "mask.nii.gz", values, geometry))}
