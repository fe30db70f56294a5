"""NIfTI files to arrays and back: the one place that knows about files.

Every fault of a file ends as one `InputError` that names the file and the mismatch. Written
files are deterministic (no time stamp, fixed compression) and appear whole or not at all.
"""

from __future__ import annotations

import gzip
import os
import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import numpy.typing as npt
from nibabel.filebasedimages import ImageFileError
from nibabel.spatialimages import HeaderDataError

from .errors import InputError
from .regrid import covered_fraction
from .space import Grid

Floats = npt.NDArray[np.floating]
Bools = npt.NDArray[np.bool_]

# Affines that differ by less than this (mm, and mm per voxel) are the same grid: headers store
# float32, and programs round-trip them through quaternions.
_SAME_MM = 1e-3
_PACK_LEVEL = 4


@dataclass(frozen=True)
class Geometry:
    """Shape and affine (row by row) of a volume, comparable and printable."""

    shape: tuple[int, int, int]
    rows: tuple[tuple[float, ...], ...]

    @property
    def affine(self) -> npt.NDArray[np.float64]:
        """(4, 4) voxel indices to mm."""
        return np.array(self.rows)

    def same_as(self, other: Geometry) -> bool:
        """Whether the two are one grid, up to rounding of the affine."""
        return self.shape == other.shape and bool(
            np.allclose(self.affine, other.affine, atol=_SAME_MM, rtol=0)
        )

    def __str__(self) -> str:
        size = np.sqrt((self.affine[:3, :3] ** 2).sum(axis=0))
        mm = " x ".join(f"{s:.4g}" for s in size)
        at = ", ".join(f"{o:.4g}" for o in self.affine[:3, 3])
        return f"{' x '.join(map(str, self.shape))} voxels of {mm} mm, first at ({at}) mm"


def open_image(path: str | Path) -> Any:
    """A nibabel image whose data has not been read.

    Raises
    ------
    InputError
        When there is no such file, or it is no NIfTI image.
    """
    path = Path(path)
    if not path.exists():
        if path.is_symlink():
            raise InputError(
                "file not fetched",
                where=str(path),
                got=f"a link to {os.readlink(path)}, which is not there",
                remedy="fetch the file's content, or leave the row out with an exclude_reason",
            )
        raise InputError("no such file", where=str(path), remedy="check the path in the table")
    try:
        image = nib.load(path)
    except (ImageFileError, HeaderDataError, EOFError, zlib.error, OSError, ValueError) as error:
        raise _unreadable(path, error) from error
    if not isinstance(image, nib.Nifti1Image | nib.Nifti1Pair | nib.Nifti2Image):
        raise InputError(
            "not a NIfTI image",
            where=str(path),
            got=type(image).__name__,
            remedy="convert the map to NIfTI (.nii or .nii.gz)",
        )
    return image


def geometry_of(image: Any) -> Geometry:
    """The grid of an image's volumes."""
    x, y, z = (*(int(n) for n in image.shape), 1, 1, 1)[:3]
    rows = tuple(tuple(float(v) for v in row) for row in np.asarray(image.affine))
    return Geometry((x, y, z), rows)


def n_volumes(path: str | Path, image: Any) -> int:
    """The number of volumes of a 3-D or 4-D image.

    Raises
    ------
    InputError
        For an image of more dimensions.
    """
    shape = image.shape
    while len(shape) > 3 and shape[-1] == 1:
        shape = shape[:-1]
    if len(shape) > 4:
        raise InputError(
            "too many dimensions",
            where=str(path),
            expected="3-D, or 4-D with a volume number",
            got=f"{len(shape)}-D {tuple(shape)}",
            remedy="split the file into 3-D or 4-D images",
        )
    return int(shape[3]) if len(shape) == 4 else 1


def read_map(path: str | Path, volume: int | None = None) -> tuple[Floats, Geometry]:
    """One volume as an array.

    Parameters
    ----------
    path : path of a NIfTI file
    volume : int, optional
        Which volume of a 4-D file, from 0.

    Returns
    -------
    data : (x, y, z) float32 (float64 when stored so)
    geometry : Geometry

    Raises
    ------
    InputError
        For files that are absent, damaged, of more than four dimensions, or 4-D when no
        volume is named.
    """
    image = open_image(path)
    total, geometry = n_volumes(path, image), geometry_of(image)
    if volume is None and total > 1:
        raise InputError(
            "4-D file without a volume number",
            where=str(path),
            got=f"{total} volumes",
            remedy="fill the table's volume column (counting from 0)",
        )
    if volume is not None and not 0 <= volume < total:
        raise InputError(
            "no such volume", where=str(path), expected=f"0 to {total - 1}", got=str(volume)
        )
    stored_as = image.get_data_dtype()
    if stored_as.kind not in "fiu":
        raise InputError(
            "not a map of real numbers",
            where=str(path),
            expected="integers or floating point",
            got="complex numbers" if stored_as.kind == "c" else f"values of {stored_as}",
        )
    dtype = np.float64 if stored_as == np.float64 else np.float32
    try:
        stored = image.dataobj
        # One volume is sliced from the file, not from the whole file's data.
        data = np.asarray(stored if total == 1 else stored[:, :, :, volume])
        data = data.reshape(geometry.shape)
    except (EOFError, zlib.error, OSError, ValueError) as error:
        raise _unreadable(Path(path), error) from error
    return data.astype(dtype, copy=False), geometry


def _unreadable(path: Path, error: Exception) -> InputError:
    kind = "unreadable image"
    if isinstance(error, EOFError | zlib.error) or "Expected" in str(error):
        kind = "damaged or truncated file"
    reason = " ".join(str(error).split()) or type(error).__name__
    return InputError(
        kind,
        where=str(path),
        expected="a NIfTI-1 or NIfTI-2 image",
        got=reason,
        remedy="copy or make the file again",
    )


def check_same_grid(
    reference: tuple[str, Geometry], others: Sequence[tuple[str, Geometry]]
) -> None:
    """Raise an `InputError` naming both grids when an image is not on the reference's grid."""
    name, grid = reference
    for other_name, other in others:
        if not grid.same_as(other):
            raise InputError(
                "grids differ",
                where=other_name,
                expected=f"the grid of {name}: {grid}",
                got=str(other),
                remedy="resample it to that grid, or leave it out of the study table",
            )


def read_mask(
    path: str | Path, like: tuple[str, Geometry] | None = None, *, regrid: bool = False
) -> tuple[Bools, Geometry]:
    """A mask file as booleans: every voxel that is finite and not zero.

    Parameters
    ----------
    path : path of a NIfTI file
    like : (name, Geometry), optional
        The grid that the mask must be on.
    regrid : bool
        Bring a mask on another grid to that of `like`: voxels covered by half or more.

    Raises
    ------
    InputError
        When it is empty (also after regridding), or not on the grid of `like`.
    """
    data, geometry = read_map(path)
    mask: Bools = np.isfinite(data) & (data != 0)
    if not mask.any():
        raise InputError("empty mask", where=str(path), remedy="give a mask with some voxels")
    if like is None or geometry.same_as(like[1]):
        return mask, geometry
    if not regrid:
        check_same_grid(like, [(str(path), geometry)])
    target = Grid(like[1].shape, like[1].affine)
    brought: Bools = covered_fraction(mask, Grid(geometry.shape, geometry.affine), target) >= 0.5
    if not brought.any():
        raise InputError(
            "no voxel is covered by half of the mask",
            where=str(path),
            expected=f"a mask that meets the grid of {like[0]}: {like[1]}",
            got=str(geometry),
            remedy="check that both are in the same space (mm)",
        )
    return brought.reshape(like[1].shape), like[1]


def stack(
    paths: Sequence[str | Path], inside: Bools | None = None
) -> tuple[Floats, Grid, Geometry]:
    """Effect maps as (n_maps, n_features), over the voxels of a mask.

    Parameters
    ----------
    paths : sequence of paths
        3-D images on one grid.
    inside : (x, y, z) bool, optional
        The search region; the default is the whole grid.

    Returns
    -------
    effects : (n_maps, n_features) float32 or float64
    grid : Grid
        Of the features.
    geometry : Geometry
        Of the files.
    """
    effects: Floats | None = None
    first: tuple[str, Geometry] | None = None
    for i, path in enumerate(paths):
        data, geometry = read_map(path)
        if first is None:
            first = (str(path), geometry)
            if inside is not None and inside.shape != geometry.shape:
                raise ValueError(f"mask of shape {inside.shape} for maps of {geometry.shape}")
        check_same_grid(first, [(str(path), geometry)])
        row = data.ravel() if inside is None else data[inside]
        if effects is None:
            # Filled in place: a large study is held once, not once more while it is stacked.
            effects = np.zeros((len(paths), row.size), row.dtype)
        elif row.dtype.itemsize > effects.dtype.itemsize:
            effects = effects.astype(row.dtype)
        effects[i] = row
    if first is None or effects is None:
        raise InputError("no effect map", remedy="check the study table and the rows it leaves out")
    return effects, Grid(first[1].shape, first[1].affine, inside), first[1]


def write_map(path: str | Path, data: npt.NDArray[Any], geometry: Geometry) -> Path:
    """Write one volume, whole or not at all, to the same bytes every time.

    Parameters
    ----------
    path : path ending in .nii or .nii.gz
    data : (x, y, z) array; bool is stored as uint8
    geometry : Geometry

    Returns
    -------
    Path
        Absolute.
    """
    path = Path(path).absolute()
    stored = data.astype(np.uint8) if data.dtype == bool else data
    image = nib.Nifti1Image(stored, geometry.affine)
    image.header.set_xyzt_units("mm")
    # Write unscaled: nibabel would otherwise leave slope and intercept to the data's range.
    image.header.set_slope_inter(1, 0)
    blob = image.to_bytes()
    if path.name.endswith(".gz"):
        blob = gzip.compress(blob, compresslevel=_PACK_LEVEL, mtime=0)
    write_bytes(path, blob)
    return path


def write_bytes(path: Path, blob: bytes) -> None:
    """Write a file under another name, then give it its own: never half a file."""
    part = path.with_name(f".{path.name}.part")
    try:
        part.write_bytes(blob)
        part.replace(path)
    except OSError:
        part.unlink(missing_ok=True)
        raise
