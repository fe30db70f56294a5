"""Interfaces around `masks`."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from nipype.interfaces.base import File

from ..errors import EmptyFoldError, InputError
from ..images import geometry_of, open_image, read_map, read_mask, write_map
from ..masks import Cluster, Strongest, Threshold, choose, sphere, strongest
from ..procedure import ON_EMPTY
from ..rules import Branch, Inputs, Leaf, Rule, Tree, joined, leaves, only
from ..space import Grid
from ..touch import Touch
from .base import InputSpec, SequesterInterface, TraitedSpec, traits


class _MaskOutput(TraitedSpec):
    mask_file = File(exists=True, desc="the region, 0 and 1")


class _ChooseOutput(_MaskOutput):
    replaced = traits.Bool(desc="the rule found nothing, and the strongest features stand in")


class _ChooseInput(InputSpec):
    in_file = File(exists=True, mandatory=True, desc="group map")
    rule = traits.Instance(object, mandatory=True, desc="Threshold, Cluster or Strongest")
    search_file = File(exists=True, desc="search region; default the whole map")
    count_file = File(exists=True, desc="maps with data, when the rule's threshold is a p")
    negative = traits.Bool(False, usedefault=True, desc="look for low values instead of high")
    on_empty = traits.Enum(*ON_EMPTY, usedefault=True, desc="when the rule finds nothing")
    k = traits.Int(0, usedefault=True, desc='features for on_empty = "strongest"')


class ChooseMask(SequesterInterface):
    """The region a rule reads off one group map, inside a search region."""

    input_spec = _ChooseInput
    output_spec = _ChooseOutput
    touch_rules = {
        "mask_file": only("in_file", "search_file", "count_file"),
        "replaced": only("in_file", "search_file", "count_file"),
    }

    def _work(self, cwd: Path) -> dict[str, Any]:
        rule = self.inputs.rule
        if not isinstance(rule, Threshold | Cluster | Strongest):
            raise InputError("no mask rule", got=repr(rule))
        values, geometry = read_map(self.inputs.in_file)
        if self.inputs.negative:
            values = -values
        search, count = self._value("search_file"), self._value("count_file")
        inside = np.ones(geometry.shape, bool)
        if search is not None:
            inside, _ = read_mask(search, (self.inputs.in_file, geometry))
        n = None if count is None else read_map(count)[0][inside]
        grid = Grid(geometry.shape, geometry.affine, inside)
        chosen = choose(values[inside], rule, grid, n)
        replaced = not chosen.any() and self.inputs.on_empty == "strongest"
        if replaced:
            chosen = strongest(values[inside], self.inputs.k)
        if not chosen.any() and self.inputs.on_empty == "stop":
            raise EmptyFoldError(
                "the rule found nothing",
                where=f"search region {search or 'whole map'}",
                expected=rule.describe(),
                remedy="relax the rule, or report that nothing was found",
            )
        path = write_map(cwd / "mask.nii.gz", grid.filled(chosen), geometry)
        return {"mask_file": str(path), "replaced": replaced}


def _placed(inputs: Inputs) -> Tree:
    """A sphere touches its declared origin; a coordinate without one was chosen who knows how."""
    parts = [
        Leaf(leaf.touch.as_geometry(), (leaf,))
        for leaf in leaves(inputs.trees.get("reference", Branch()))
    ]
    origin = inputs.settings.get("origin")
    if origin:
        stated = inputs.declared.get(origin) or Touch(origins=frozenset({origin}))
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


class GivenMask(SequesterInterface):
    """A mask from outside, on the data's grid (or brought to it) and made 0 and 1."""

    input_spec = _GivenInput
    output_spec = _MaskOutput
    touch_rules = {"mask_file": only("in_file", geometry=("reference",))}

    def _work(self, cwd: Path) -> dict[str, Any]:
        like = (self.inputs.reference, geometry_of(open_image(self.inputs.reference)))
        mask, geometry = read_mask(self.inputs.in_file, like, regrid=self.inputs.regrid)
        return {"mask_file": str(write_map(cwd / "mask.nii.gz", mask, geometry))}
