"""Maps that stay in their files and are read there, a few voxels of all of them at a time.

Uncompressed files can be read anywhere. So a large study is summed without ever being held:
memory that is used for the first time costs more than reading it again from the system's cache.
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import nibabel as nib
import numpy as np
import numpy.typing as npt

from .images import Bools, Floats, Geometry, geometry_of, open_image, stack, unreadable
from .space import Grid

Ints = npt.NDArray[np.integer]

# Voxels that are quicker passed over than read.
_FAR = 4096


@dataclass(frozen=True)
class _Layout:
    """Where a file holds its one volume: the first byte, the type, and the grid."""

    offset: int
    dtype: np.dtype[np.floating]
    geometry: Geometry


class StoredMaps:
    """Effect maps as (n_maps, n_features) that stay in their files; see `opened`.

    Parameters
    ----------
    files : sequence of (path, first byte, type)
    places : (n_features,) int
        Where each feature lies in a volume, which holds x fastest.
    """

    def __init__(
        self, files: Sequence[tuple[str, int, np.dtype[np.floating]]], places: Ints
    ) -> None:
        self._files, self.places = list(files), places
        self.shape = len(self._files), len(places)
        self.dtype: np.dtype[np.floating] = np.result_type(*(dtype for *_, dtype in files))

    def in_order(self, rows: Ints) -> StoredMaps:
        """The same maps in another order."""
        return StoredMaps([self._files[row] for row in rows.tolist()], self.places)

    def read(self, features: Ints, out: Floats | None = None) -> Floats:
        """(n_maps, n_some_features) at some features; quick where they lie together.

        Parameters
        ----------
        features : (n_some_features,) int
        out : (n_maps, n_some_features) float, optional
            Filled and given back.

        Raises
        ------
        InputError
            When a file can no longer be read.
        """
        made = np.empty((self.shape[0], len(features)), self.dtype) if out is None else out
        if not len(features):
            return made
        runs, n, where = _runs(self.places[features])
        parts = {dtype: np.empty(n, dtype) for dtype in {dtype for *_, dtype in self._files}}
        for row, (path, offset, dtype) in zip(made, self._files, strict=True):
            part = parts[dtype]
            _fill(part, path, offset, runs)
            row[:] = part[where]
        return made


def _runs(places: Ints) -> tuple[list[tuple[int, int]], int, Ints]:
    """The stretches of a volume that hold some places.

    Returns
    -------
    runs : list of (first, last + 1)
        Ascending, and far from each other.
    n : int
        Places in all of them.
    where : (n_some_places,) int
        Where, in the runs one behind the other, the places are.
    """
    ordered = np.unique(places)
    ends = np.flatnonzero(np.diff(ordered) > _FAR)
    first, last = ordered[np.r_[0, ends + 1]], ordered[np.r_[ends, -1]] + 1
    before = np.cumsum(last - first) - (last - first)
    run = np.searchsorted(first, places, side="right") - 1
    runs = list(zip(first.tolist(), last.tolist(), strict=True))
    return runs, int((last - first).sum()), places - (first - before)[run]


def opened(
    paths: Sequence[str | Path], inside: Bools | None = None
) -> tuple[StoredMaps | Floats, Grid, Geometry]:
    """`images.stack`, but maps that can be read anywhere stay in their files.

    These are uncompressed, in one file each, of floating point in this machine's byte order,
    not scaled, whole, and on one grid to the last bit. If any is not, all are stacked, and what
    is wrong with one is said as `images.stack` says it.

    Parameters
    ----------
    paths : sequence of paths
    inside : (x, y, z) bool, optional
        The search region; the default is the whole grid.

    Returns
    -------
    effects : StoredMaps, or (n_maps, n_features) float
    grid : Grid
        Of the features.
    geometry : Geometry
        Of the files.
    """
    first, files = None, []
    known: dict[bytes, _Layout] = {}
    for path in map(Path, paths):
        layout = _layout(path, known)
        first = first or layout
        if first is None or layout is None or layout.geometry != first.geometry:
            return stack(paths, inside)
        files.append((str(path), layout.offset, layout.dtype))
    if first is None or (inside is not None and inside.shape != first.geometry.shape):
        return stack(paths, inside)
    grid = Grid(first.geometry.shape, first.geometry.affine, inside)
    return StoredMaps(files, grid.places), grid, first.geometry


def _layout(path: Path, known: dict[bytes, _Layout]) -> _Layout | None:
    """How a file can be read anywhere; None when it cannot, for whatever reason.

    `known` has the layouts of headers seen so far: most files of a study have the same.
    """
    # What is wrong with a file that may not be read, the stack will say.
    if path.suffix != ".nii" or not path.is_file() or not os.access(path, os.R_OK):
        return None
    with path.open("rb", buffering=0) as stream:
        size = os.fstat(stream.fileno()).st_size
        for header, layout in known.items():
            if os.pread(stream.fileno(), len(header), 0) == header:
                return layout if _whole(layout, size) else None
        plain = _plain(open_image(path))
        if plain is None or not _whole(plain, size):
            return None
        known[os.pread(stream.fileno(), plain.offset, 0)] = plain
    return plain


def _plain(image: object) -> _Layout | None:
    """The layout of an image of one unscaled volume of floating point; None of any other."""
    if not isinstance(image, nib.Nifti1Image | nib.Nifti2Image):
        return None
    stored = image.dataobj
    dtype = stored.dtype
    one = int(np.prod(image.shape)) == int(np.prod(image.shape[:3]))
    plain = (stored.slope, stored.inter) == (1, 0)
    # In another order of bytes they would be other types.
    if not (one and plain and dtype in (np.float32, np.float64)):
        return None
    return _Layout(int(stored.offset), dtype, geometry_of(image))


def _whole(layout: _Layout, size: int) -> bool:
    """Whether a file of so many bytes holds all of its volume."""
    n = int(np.prod(layout.geometry.shape))
    return size >= layout.offset + n * layout.dtype.itemsize


def _fill(part: Floats, path: str, offset: int, runs: list[tuple[int, int]]) -> None:
    """Read runs of a file's volume into an array, one behind the other."""
    size, bytes_of = part.itemsize, part.view(np.uint8).data
    try:
        file = os.open(path, os.O_RDONLY)
        try:
            done = 0
            for first, last in runs:
                wanted = bytes_of[done : done + (last - first) * size]
                done += os.preadv(file, [wanted], offset + first * size)
        finally:
            os.close(file)
    except OSError as error:
        raise unreadable(Path(path), error) from error
    if done < part.nbytes:
        raise unreadable(Path(path), EOFError(f"Expected {part.nbytes} bytes, got {done} bytes"))
