"""NIfTI files to arrays and back: the one place that knows about files.

Every fault of a file ends as one `InputError` that names the file and the mismatch. Written
files are deterministic (no time stamp, fixed compression) and appear whole or not at all.
"""

from __future__ import annotations

import csv
import gzip
import os
import re
import zlib
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
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
# What to do about a region on another grid than the maps.
TO_GRID = "resample it to that grid, or have it done: regrid = true"
# Masks are long runs of one value: the quickest level already packs them to a hundredth.
_PACK_LEVEL = 1
# A file is unpacked in pieces of so many bytes; zlib's word for a file with a gzip header.
_PIECE, _GZIP = 2**16, zlib.MAX_WBITS | 16


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
        When there is no such file, it is no NIfTI image, or its header describes no grid.
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
        raise InputError(
            "no such file",
            where=str(path),
            remedy="check the path in the study table or the study file",
        )
    if path.is_dir():
        raise InputError("not a file", where=str(path), got="a folder", remedy="name a file in it")
    try:
        # Not mapped into memory: for whole volumes, page by page takes longer than reading.
        image = nib.load(path, mmap=False)
    except (ImageFileError, HeaderDataError, EOFError, zlib.error, OSError, ValueError) as error:
        raise unreadable(path, error) from error
    if not isinstance(image, nib.Nifti1Image | nib.Nifti1Pair | nib.Nifti2Image):
        raise InputError(
            "not a NIfTI image",
            where=str(path),
            got=type(image).__name__,
            remedy="convert the map to NIfTI (.nii or .nii.gz)",
        )
    axes = np.asarray(image.affine)[:3, :3]
    if min(image.shape) < 1 or not np.isfinite(image.affine).all() or not np.linalg.det(axes):
        size = " x ".join(f"{mm:.4g}" for mm in np.sqrt((axes**2).sum(axis=0)))
        raise InputError(
            "header without a grid",
            where=str(path),
            expected="voxels along every axis, and an affine of finite numbers with an inverse",
            got=f"{' x '.join(map(str, image.shape))} voxels of {size} mm",
            remedy="copy or make the file again, with its sform or qform",
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
            remedy="fill the table's volume column (counting from 0), or give a 3-D file",
        )
    if volume is not None and not 0 <= volume < total:
        raise InputError(
            "no such volume", where=str(path), expected=f"0 to {total - 1}", got=str(volume)
        )
    check_real(path, image)
    try:
        # One volume is sliced from the file, not from the whole file's data.
        data = _whole(image.dataobj) if total == 1 else np.asarray(image.dataobj[:, :, :, volume])
        data = data.reshape(geometry.shape)
    except (EOFError, zlib.error, OSError, ValueError, MemoryError) as error:
        raise unreadable(Path(path), error) from error
    return data.astype(_read_as(image), copy=False), geometry


def _whole(stored: Any) -> npt.NDArray[Any]:
    """All of an image's data."""
    path = Path(stored.file_like)
    if path.suffix != ".gz" or (stored.slope, stored.inter) != (1, 0):
        return np.asarray(stored)
    file = _unpacked(path, stored.offset + int(np.prod(stored.shape)) * stored.dtype.itemsize)
    data: npt.NDArray[Any] = file[stored.offset :].view(stored.dtype)
    return data.reshape(stored.shape, order="F")


def _unpacked(path: Path, size: int) -> npt.NDArray[np.uint8]:
    """The first bytes of what a file packs.

    Piece by piece into the memory that is handed out: two large pieces of new memory for each
    map would take as long as the unpacking.
    """
    made, done = np.empty(size, np.uint8), 0
    unpacker = zlib.decompressobj(_GZIP)
    with path.open("rb", buffering=0) as stream:
        packed = stream.read(_PIECE)
        # To the end, which compares the checksum.
        while packed and not (done == size and unpacker.eof):
            if unpacker.eof:  # a file may hold one packed part after another
                unpacker = zlib.decompressobj(_GZIP)
            piece = np.frombuffer(unpacker.decompress(packed, _PIECE), np.uint8)[: size - done]
            made[done : done + len(piece)] = piece
            done += len(piece)
            packed = unpacker.unused_data if unpacker.eof else unpacker.unconsumed_tail
            packed = packed or stream.read(_PIECE)
    if done < size or not unpacker.eof:
        raise EOFError(f"Expected {size} bytes and the end of the file, got {done} bytes")
    return made


def check_real(path: str | Path, image: Any) -> None:
    """Raise an `InputError` when an image's values are no real numbers; reads the header alone."""
    stored_as = image.get_data_dtype()
    if stored_as.kind not in "fiu":
        raise InputError(
            "not a map of real numbers",
            where=str(path),
            expected="integers or floating point",
            got="complex numbers" if stored_as.kind == "c" else f"values of {stored_as}",
            remedy="give an image with one real number per voxel",
        )


def _read_as(image: Any) -> type[np.float32 | np.float64]:
    """The type in which an image's values are read."""
    return np.float64 if image.get_data_dtype() == np.float64 else np.float32


def unreadable(path: Path, error: Exception) -> InputError:
    """What to raise when a file cannot be read as an image."""
    kind = "unreadable image"
    if path.exists() and not os.access(path, os.R_OK):
        return InputError(
            kind,
            where=str(path),
            got="no permission to read it",
            remedy="change its permissions, or have its owner change them",
        )
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
    reference: tuple[str, Geometry],
    others: Sequence[tuple[str, Geometry]],
    remedy: str = "resample it to that grid, or leave it out of the study table",
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
                remedy=remedy,
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
        check_same_grid(like, [(str(path), geometry)], TO_GRID)
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


def read_labels(path: str | Path) -> tuple[npt.NDArray[np.integer], Geometry]:
    """A label image as integers of the type they are stored in.

    Whole numbers stored as floating point or in 64 bits become int32.

    Parameters
    ----------
    path : path of a 3-D NIfTI file

    Returns
    -------
    labels : (x, y, z) int
    geometry : Geometry

    Raises
    ------
    InputError
        When a voxel holds something else than a whole number of 32 bits.
    """
    image = open_image(path)
    total, geometry = n_volumes(path, image), geometry_of(image)
    if total > 1:
        raise InputError(
            "4-D label image",
            where=str(path),
            expected="one volume with a number per label",
            got=f"{total} volumes",
            remedy="split the file into 3-D images",
        )
    try:
        data = np.asarray(image.dataobj).reshape(geometry.shape)
    except (EOFError, zlib.error, OSError, ValueError) as error:
        raise unreadable(Path(path), error) from error
    if data.dtype.kind in "iu" and data.dtype.itemsize <= 4:
        return data, geometry
    whole = np.zeros(data.shape, bool)
    if data.dtype.kind in "iuf":
        # Also false for NaN, infinities and what 32 bits do not hold.
        held = np.iinfo(np.int32)
        whole = (data >= held.min) & (data <= held.max) & (data == np.rint(data))
    if not whole.all():
        raise InputError(
            "label image with something else than labels",
            where=str(path),
            expected="whole numbers of 32 bits at all voxels",
            got=f"{data[~whole][0]} and the like ({data.dtype}) at {(~whole).sum()} voxels",
            remedy="give the image of labels (dseg), not of probabilities or values",
        )
    return data.astype(np.int32), geometry


def read_label_table(path: str | Path) -> list[tuple[int, str]]:
    """The numbers and names of a label table (BIDS ``dseg.tsv``); rows without a name are left out.

    Parameters
    ----------
    path : path of a TSV file with the columns index and name

    Returns
    -------
    list of (number, name)

    Raises
    ------
    InputError
        When columns or cells are wrong; names the line.
    """
    try:
        with Path(path).open(newline="", encoding="utf-8-sig") as stream:
            # BIDS tables know no quoting: a quotation mark is a character.
            lines = list(csv.reader(stream, delimiter="\t", quoting=csv.QUOTE_NONE))
    except OSError as error:
        raise InputError(
            "unreadable label table",
            where=str(path),
            got=error.strerror or str(error),
            remedy="check the path",
        ) from error
    except (UnicodeDecodeError, csv.Error) as error:
        raise InputError(
            "unreadable label table",
            where=str(path),
            expected="a TSV in UTF-8",
            got=str(error),
            remedy="save it as tab-separated text in UTF-8",
        ) from error
    header = [cell.strip() for cell in lines[0]] if lines else []
    if not {"index", "name"} <= set(header):
        raise InputError(
            "label table without index and name",
            where=str(path),
            expected="tab-separated columns index and name, and any others",
            got=" ".join(header) or "an empty file",
            remedy="name the two columns so in the first line",
        )
    table: list[tuple[int, str]] = []
    lines_of: dict[int, int] = {}
    for number, cells in enumerate(lines[1:], 2):
        if not any(cell.strip() for cell in cells):
            continue
        where = f"{path}, line {number}"
        if len(cells) != len(header):
            raise InputError(
                "row of another length",
                where=where,
                expected=f"{len(header)} tab-separated cells",
                got=str(len(cells)),
                remedy="write n/a into blank cells, and no tab at the end",
            )
        row = dict(zip(header, (cell.strip() for cell in cells), strict=True))
        if not row["index"].removeprefix("-").isdecimal():
            raise InputError(
                "index is no whole number",
                where=where,
                expected="0, 1, ...",
                got=row["index"] or "a blank cell",
                remedy="give the number that the label has in the image",
            )
        index = int(row["index"])
        before = lines_of.setdefault(index, number)
        if before != number:
            raise InputError(
                "the same index on two rows",
                where=f"{path}, lines {before} and {number}",
                got=str(index),
                remedy="give each label one row",
            )
        if row["name"] not in ("", "n/a"):
            table.append((index, row["name"]))
    return table


def table_beside(path: str | Path) -> Path | None:
    """The label table beside a label image: of the same name, or of that without space and res.

    A table serves an atlas in every space and at every resolution (BIDS inheritance). None when
    there is none.

    Examples
    --------
    >>> table_beside("no/such/atlas-garden_space-orchard_dseg.nii.gz") is None
    True
    """
    path = Path(path)
    stem = Path(path.name.removesuffix(".gz")).stem
    plain = re.sub(r"(?:^|_)(?:space|res)-[A-Za-z0-9]+", "", stem).removeprefix("_")
    for name in dict.fromkeys((stem, plain)):
        if (table := path.with_name(f"{name}.tsv")).is_file():
            return table
    return None


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
    if not paths:
        raise InputError("no effect map", remedy="check the study table and the rows it leaves out")
    image = open_image(paths[0])
    first = (str(paths[0]), geometry_of(image))
    shape = first[1].shape
    if inside is not None and inside.shape != shape:
        raise ValueError(f"mask of shape {inside.shape} for maps of {shape}")
    # Where the features lie in a file, which holds x fastest.
    number = np.arange(int(np.prod(shape))).reshape(shape, order="F")
    places = number.ravel() if inside is None else number[inside]
    # Filled in place: a large study is held once, not once more while it is stacked.
    effects: Floats = np.zeros((len(paths), len(places)), _read_as(image))
    for i, path in enumerate(paths):
        data, geometry = read_map(path)
        check_same_grid(first, [(str(path), geometry)])
        if data.dtype.itemsize > effects.dtype.itemsize:
            effects = effects.astype(data.dtype)
        effects[i] = data.ravel(order="F")[places]
    return effects, Grid(shape, first[1].affine, inside), first[1]


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
    if data.dtype == bool:
        stored = data.view(np.uint8)
    else:
        stored = data.astype(data.dtype.newbyteorder("="), copy=False)
    # The file holds x fastest: what was read from such a file is not copied on the way.
    volume = np.ascontiguousarray(stored.T)
    header = _header(stored.shape, stored.dtype, geometry)
    if path.name.endswith(".gz"):
        blob = b"".join([header, volume.data])
        write_bytes(path, gzip.compress(blob, compresslevel=_PACK_LEVEL, mtime=0))
    else:
        write_bytes(path, header, volume.data)
    return path


@lru_cache(maxsize=16)
def _header(shape: tuple[int, ...], dtype: np.dtype[Any], geometry: Geometry) -> bytes:
    """What stands before the data in a NIfTI-1 file: the header, and that no extension follows."""
    image = nib.Nifti1Image(np.broadcast_to(np.zeros((), dtype), shape), geometry.affine)
    image.header.set_xyzt_units("mm")
    # Write unscaled: nibabel would otherwise leave slope and intercept to the data's range.
    image.header.set_slope_inter(1, 0)
    image.header.set_data_offset(image.header.single_vox_offset)
    return bytes(image.header.binaryblock) + bytes(4)


def write_bytes(path: Path, blob: bytes, *more: memoryview) -> None:
    """Write a file under another name, then give it its own: never half a file.

    What follows the first part is not copied in memory to be joined to it.
    """
    part = path.with_name(f".{path.name}.part")
    try:
        part.write_bytes(blob)
        for piece in more:
            with part.open("ab") as stream:
                stream.write(piece)
        part.replace(path)
    except OSError:
        part.unlink(missing_ok=True)
        raise
