"""Where features are: how many, who neighbours whom, and their coordinates in mm.

The numerics take arrays and a space, never an image, so that a surface can stand where a
volume stands. A space offers ``n_features``, ``neighbours(connectivity)``, ``coordinates()``
and ``feature_size`` (mm3 or mm2 per feature).
"""

from __future__ import annotations

from functools import cached_property
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]


class Space(Protocol):
    """What the numerics need to know of where features are."""

    n_features: int
    feature_size: float

    def neighbours(self, connectivity: int) -> Ints:
        """(n_features, connectivity) numbers of the neighbours, -1 where there is none."""

    def coordinates(self) -> Floats:
        """(n_features, 3) positions in mm."""


class Grid:
    """The voxels of a regular grid that are in use.

    Parameters
    ----------
    shape : tuple of 3 int
        Voxels along each axis.
    affine : (4, 4) float
        Voxel indices to mm.
    inside : (shape) bool, optional
        The voxels that are features, in C order; the default is all of them.

    Examples
    --------
    >>> import numpy as np
    >>> grid = Grid((2, 2, 1), np.diag([3.0, 3.0, 3.0, 1.0]))
    >>> grid.n_features, grid.feature_size
    (4, 27.0)
    >>> grid.neighbours(6).max(axis=1).tolist()
    [2, 3, 3, 2]
    >>> grid.coordinates()[3].tolist()
    [3.0, 3.0, 0.0]
    """

    def __init__(
        self, shape: tuple[int, int, int], affine: npt.ArrayLike, inside: Bools | None = None
    ) -> None:
        self.shape: tuple[int, int, int] = (int(shape[0]), int(shape[1]), int(shape[2]))
        self.affine = np.asarray(affine, dtype=float)
        n_voxels = int(np.prod(self.shape))
        inside = np.ones(n_voxels, bool) if inside is None else np.asarray(inside, bool).ravel()
        if inside.size != n_voxels:
            raise ValueError(f"{inside.size} flags for a grid of {n_voxels} voxels {self.shape}")
        self.voxels = np.flatnonzero(inside)
        self.n_features = len(self.voxels)
        self.feature_size = float(abs(np.linalg.det(self.affine[:3, :3])))

    def neighbours(self, connectivity: int = 18) -> Ints:
        """(n_features, connectivity) neighbours that share a face (6), edge (18) or corner (26).

        Offsets come in a fixed order in which offset j is the opposite of offset -1-j, so the
        first half of the columns holds each pair of neighbours once.
        """
        number = np.full(int(np.prod(self.shape)) + 1, -1, dtype=np.int32)
        number[self.voxels] = np.arange(self.n_features, dtype=np.int32)
        where = np.stack(np.unravel_index(self.voxels, self.shape), axis=1)
        table = np.empty((self.n_features, connectivity), dtype=np.int32)
        for column, offset in enumerate(offsets(connectivity)):
            other = where + offset
            valid = ((other >= 0) & (other < self.shape)).all(axis=1)
            flat = np.ravel_multi_index(tuple(np.where(valid[:, None], other, 0).T), self.shape)
            table[:, column] = number[np.where(valid, flat, -1)]
        return table

    def coordinates(self) -> Floats:
        """(n_features, 3) centres of the voxels in mm."""
        where = np.stack(np.unravel_index(self.voxels, self.shape), axis=1)
        mm: Floats = where @ self.affine[:3, :3].T + self.affine[:3, 3]
        return mm

    def restricted(self, features: Bools) -> Grid:
        """The grid that keeps only some of the features ((n_features,) bool)."""
        inside = np.zeros(int(np.prod(self.shape)), bool)
        inside[self.voxels[features]] = True
        return Grid(self.shape, self.affine, inside)

    def filled(self, values: npt.NDArray[Any]) -> npt.NDArray[Any]:
        """A volume holding one value per feature, zero elsewhere."""
        # x fastest, as files hold it, so that writing it needs no turning.
        volume = np.zeros(self.shape, values.dtype, order="F")
        volume.ravel(order="K")[self.places] = values
        return volume

    @cached_property
    def places(self) -> Ints:
        """(n_features,) where the features lie when x is fastest."""
        where = np.unravel_index(self.voxels, self.shape)
        return np.ravel_multi_index(where, self.shape, order="F")


def offsets(connectivity: int) -> npt.NDArray[np.int64]:
    """The steps to the neighbours at connectivity 6, 18 or 26, in lexicographic order."""
    if connectivity not in (6, 18, 26):
        raise ValueError(f"connectivity is 6, 18 or 26, not {connectivity}")
    reach = {6: 1, 18: 2, 26: 3}[connectivity]
    steps = np.stack(np.meshgrid(*[[-1, 0, 1]] * 3, indexing="ij"), axis=-1).reshape(-1, 3)
    distance = np.abs(steps).sum(axis=1)
    near: npt.NDArray[np.int64] = steps[(distance > 0) & (distance <= reach)]
    return near
