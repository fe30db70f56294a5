"""Interfaces around `regions`: regions given beforehand, made of labels and of masks."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from nipype.interfaces.base import File

from ..errors import InputError
from ..images import (
    Bools,
    Geometry,
    check_same_grid,
    geometry_of,
    open_image,
    read_label_table,
    read_labels,
    read_mask,
    table_beside,
    write_map,
)
from ..regions import COMBINATIONS, MIRRORINGS, combined, eroded, labelled, mirrored, numbers_of
from ..regrid import nearest_label
from ..rules import only
from ..space import Grid
from .base import InputSpec, SequesterInterface, TraitedSpec, traits


class _MaskOutput(TraitedSpec):
    mask_file = File(exists=True, desc="the region, 0 and 1")


def _saved(cwd: Path, mask: Bools, geometry: Geometry, **fault: str) -> dict[str, Any]:
    """The mask as the node's output; an empty one is the fault described."""
    if not mask.any():
        raise InputError(**fault)
    return {"mask_file": str(write_map(cwd / "mask.nii.gz", mask, geometry))}


def _grid(geometry: Geometry) -> Grid:
    return Grid(geometry.shape, geometry.affine)


def _numbers_in(settings: Mapping[str, Any]) -> tuple[int, ...] | None:
    """The numbers of the labels that the settings of a `LabelMask` name, where they all are there.

    A MapNode's settings are lists: with a table for each image, a name means what each of them
    says.
    """
    labels, image, table = (settings.get(name) for name in ("labels", "in_file", "table_file"))
    if not isinstance(labels, list) or not all(isinstance(one, int | str) for one in labels):
        return None
    if all(isinstance(one, int) for one in labels):
        return numbers_of(labels, ())
    if not isinstance(image, str | Path) or not isinstance(table, str | Path | None):
        return None
    return _numbers(labels, str(image), table)


class _LabelMaskInput(InputSpec):
    in_file = File(exists=True, mandatory=True, desc="label image (dseg), with a declared origin")
    labels = traits.List(
        traits.Either(traits.Int, traits.Str), minlen=1, mandatory=True, desc="numbers or names"
    )
    table_file = File(
        exists=True,
        desc="label table (TSV with index and name); default: of the same name beside in_file",
    )
    reference = File(exists=True, mandatory=True, desc="image that gives the grid")
    regrid = traits.Bool(
        False, usedefault=True, desc="bring labels on another grid to that of the reference"
    )


class LabelMask(SequesterInterface):
    """The voxels of some labels of a label image, by name or number, on the data's grid.

    Regridding takes the label at each voxel's centre. A table that is given must be declared
    like the image; one that lies beside the image is taken for a part of it.

    Examples
    --------
    >>> from sequester.nodes.interfaces import LabelMask
    >>> LabelMask(labels=["Arbor", 12]).inputs.labels
    ['Arbor', 12]
    """

    input_spec = _LabelMaskInput
    output_spec = _MaskOutput
    touch_rules = {"mask_file": only("in_file", "table_file", geometry=("reference",))}
    labels_read = {"in_file": _numbers_in}
    # The engine does not hash the table beside the image: a changed one must be noticed.
    _always_run = True

    def _work(self, cwd: Path) -> dict[str, Any]:
        name, reference = self.inputs.in_file, self.inputs.reference
        volume, geometry = read_labels(name)
        mask = labelled(volume, self.numbers(), name)
        target = geometry_of(open_image(reference))
        if self.inputs.regrid:
            brought = nearest_label(mask.astype(np.uint8), _grid(geometry), _grid(target))
            mask = brought.reshape(target.shape) != 0
        else:
            check_same_grid((reference, target), [(name, geometry)])
        return _saved(
            cwd,
            mask,
            target,
            what="no voxel's centre is in the labels",
            where=name,
            expected=f"labels that meet the grid of {reference}: {target}",
            got=f"labels {self.inputs.labels} on {geometry}",
            remedy="check that both are in the same space (mm)",
        )

    def numbers(self) -> tuple[int, ...]:
        """The numbers of its labels."""
        return _numbers(self.inputs.labels, self.inputs.in_file, self._value("table_file"))


def _numbers(labels: list[int | str], image: str, table: str | Path | None) -> tuple[int, ...]:
    names = [label for label in labels if isinstance(label, str)]
    if not names:
        return numbers_of(labels, ())
    table = table or table_beside(image)
    if table is None:
        raise InputError(
            "label names without a label table",
            where=image,
            expected="table_file, or a .tsv of the same name beside the image",
            got=", ".join(names),
            remedy="give the table (columns index and name), or numbers instead of names",
        )
    return numbers_of(labels, read_label_table(table), str(table))


def _kept(settings: Mapping[str, Any]) -> tuple[int, ...] | None:
    """The labels that the settings of a `RegridLabels` keep; None for all."""
    labels = settings.get("labels")
    whole = isinstance(labels, list) and all(isinstance(one, int) for one in labels)
    return tuple(labels) if labels and whole else None


class _RegridLabelsInput(InputSpec):
    in_file = File(exists=True, mandatory=True, desc="label image (dseg), with a declared origin")
    labels = traits.List(traits.Int, desc="numbers of those to keep; default: all")
    reference = File(exists=True, mandatory=True, desc="image that gives the grid")


class _RegridLabelsOutput(TraitedSpec):
    label_file = File(exists=True, desc="the labels on the reference's grid")


class RegridLabels(SequesterInterface):
    """A label image on another grid: the label at each voxel's centre, 0 outside the image.

    With `labels`, the others are 0 too: what is known of them is nothing that reaches the output.
    """

    input_spec = _RegridLabelsInput
    output_spec = _RegridLabelsOutput
    touch_rules = {"label_file": only("in_file", geometry=("reference",))}
    labels_read = {"in_file": _kept}

    def _work(self, cwd: Path) -> dict[str, Any]:
        volume, geometry = read_labels(self.inputs.in_file)
        target = geometry_of(open_image(self.inputs.reference))
        labels = self._value("labels")
        kept = np.where(np.isin(volume, labels), volume, 0) if labels else volume
        brought = nearest_label(kept, _grid(geometry), _grid(target))
        if not brought.any():
            raise InputError(
                "no label on the reference's grid",
                where=self.inputs.in_file,
                expected=f"labels that meet the grid of {self.inputs.reference}: {target}",
                got=f"labels {labels} on {geometry}" if labels else str(geometry),
                remedy="check that both are in the same space (mm)",
            )
        path = write_map(cwd / "dseg.nii.gz", brought.reshape(target.shape), target)
        return {"label_file": str(path)}


class _CombineMasksInput(InputSpec):
    in_files = traits.List(File(exists=True), minlen=1, mandatory=True, desc="masks on one grid")
    how = traits.Enum(
        *COMBINATIONS, mandatory=True, desc="in any; in all; in the first and no other"
    )


class CombineMasks(SequesterInterface):
    """The union, the intersection or the difference (the first without the others) of masks."""

    input_spec = _CombineMasksInput
    output_spec = _MaskOutput
    touch_rules = {"mask_file": only("in_files")}

    def _work(self, cwd: Path) -> dict[str, Any]:
        first, *others = self.inputs.in_files
        mask, geometry = read_mask(first)
        masks = [mask, *(read_mask(path, (first, geometry))[0] for path in others)]
        return _saved(
            cwd,
            combined(masks, self.inputs.how),
            geometry,
            what=f"the {self.inputs.how} of the masks is empty",
            where=", ".join(self.inputs.in_files),
            got=f"masks of {', '.join(str(int(m.sum())) for m in masks)} voxels",
            remedy="check the masks and their order, or combine them in another way",
        )


class _ErodeMaskInput(InputSpec):
    in_file = File(exists=True, mandatory=True, desc="mask")
    mm = traits.Float(mandatory=True, desc="voxels this near (mm) to one outside the mask go")


class ErodeMask(SequesterInterface):
    """A mask without the voxels within a distance (mm) of a voxel outside it."""

    input_spec = _ErodeMaskInput
    output_spec = _MaskOutput
    touch_rules = {"mask_file": only("in_file")}

    def _work(self, cwd: Path) -> dict[str, Any]:
        mask, geometry = read_mask(self.inputs.in_file)
        return _saved(
            cwd,
            eroded(mask, _grid(geometry), self.inputs.mm),
            geometry,
            what="nothing is left of the mask after erosion",
            where=self.inputs.in_file,
            got=f"{int(mask.sum())} voxels eroded by {self.inputs.mm:g} mm on {geometry}",
            remedy="erode by less",
        )


class _MirrorMaskInput(InputSpec):
    in_file = File(exists=True, mandatory=True, desc="mask, in a space with its midline at x = 0")
    how = traits.Enum(
        *MIRRORINGS, mandatory=True, desc="the mirror image alone, or the mask and its mirror image"
    )


class MirrorMask(SequesterInterface):
    """The left/right mirror image of a mask about x = 0 mm, alone or together with the mask."""

    input_spec = _MirrorMaskInput
    output_spec = _MaskOutput
    touch_rules = {"mask_file": only("in_file")}

    def _work(self, cwd: Path) -> dict[str, Any]:
        mask, geometry = read_mask(self.inputs.in_file)
        return _saved(
            cwd,
            mirrored(mask, _grid(geometry), self.inputs.how),
            geometry,
            what="the mirror image lies outside the grid",
            where=self.inputs.in_file,
            expected="a grid with both sides of x = 0 mm",
            got=str(geometry),
            remedy="bring the mask to a grid that holds both sides",
        )
