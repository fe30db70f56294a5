"""Bringing masks and label volumes to another grid: nearest label, or covered fraction.

Both work in mm through the two affines, so orientation, oblique and left-handed grids need no
special case. A voxel of the target is looked at in points spread evenly through it, as many as
the source's finer voxels ask for.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from .space import Grid

Floats = npt.NDArray[np.floating]
Bools = npt.NDArray[np.bool_]

_MOST_POINTS = 6  # along an axis of a target voxel
_BLOCK = 65536


def nearest_label(
    labels: npt.NDArray[np.integer], source: Grid, target: Grid
) -> npt.NDArray[np.integer]:
    """The label at the centre of each feature of another grid; 0 outside the source.

    Parameters
    ----------
    labels : (x, y, z) int
        On the source's grid.
    source, target : Grid

    Returns
    -------
    (target.n_features,) int

    Examples
    --------
    >>> affine = np.diag([2.0, 2, 2, 1])
    >>> affine[2, 3] = 0.5
    >>> coarse, fine = Grid((1, 1, 2), affine), Grid((1, 1, 4), np.eye(4))
    >>> nearest_label(np.array([[[3, 7]]]), coarse, fine).tolist()
    [3, 3, 7, 7]
    """
    return _looked_up(labels, source, target.coordinates())


def covered_fraction(mask: Bools, source: Grid, target: Grid) -> Floats:
    """How much of each feature of another grid a mask covers.

    Parameters
    ----------
    mask : (x, y, z) bool
        On the source's grid.
    source, target : Grid

    Returns
    -------
    (target.n_features,) float, 0 to 1

    Examples
    --------
    >>> affine = np.diag([2.0, 2, 2, 1])
    >>> affine[:3, 3] = 0.5
    >>> fine, coarse = Grid((2, 2, 4), np.eye(4)), Grid((1, 1, 2), affine)
    >>> mask = np.zeros((2, 2, 4), bool); mask[:, :, :1] = True
    >>> covered_fraction(mask, fine, coarse).tolist()
    [0.5, 0.0]
    """
    ratio = _voxel_mm(target) / _voxel_mm(source)
    points = np.clip(np.ceil(4 * ratio), 4, _MOST_POINTS).astype(int)
    steps = [(np.arange(n) + 0.5) / n - 0.5 for n in points]
    inside = np.stack(np.meshgrid(*steps, indexing="ij"), axis=-1).reshape(-1, 3)
    shifts = inside @ target.affine[:3, :3].T
    centres = target.coordinates()
    # Most of the target is far from the mask: only what is within a voxel's reach is looked at.
    where = source.coordinates()[mask.ravel()[source.voxels]]
    reach = np.abs(source.affine[:3, :3]).sum(axis=1) + np.abs(target.affine[:3, :3]).sum(axis=1)
    inside_box = (centres >= where.min(axis=0) - reach) & (centres <= where.max(axis=0) + reach)
    near = np.flatnonzero(inside_box.all(axis=1))
    fraction = np.zeros(target.n_features)
    for start in range(0, len(near), _BLOCK):
        block = near[start : start + _BLOCK]
        for shift in shifts:
            fraction[block] += _looked_up(mask, source, centres[block] + shift)
    return fraction / len(shifts)


def _looked_up(volume: npt.NDArray[Any], source: Grid, mm: Floats) -> npt.NDArray[Any]:
    inverse = np.linalg.inv(source.affine)
    # A millionth of a voxel of slack: a point on a border must not fall by rounding.
    where = np.rint(mm @ inverse[:3, :3].T + inverse[:3, 3] + 1e-6).astype(int)
    valid = ((where >= 0) & (where < source.shape)).all(axis=1)
    out = np.zeros(len(mm), volume.dtype)
    out[valid] = volume[tuple(where[valid].T)]
    return out


def _voxel_mm(grid: Grid) -> Floats:
    size: Floats = np.sqrt(np.square(grid.affine[:3, :3]).sum(axis=0))
    return size
