"""Regions given beforehand: labels by name or number, and masks made of masks.

A mask here is a whole volume, (x, y, z) bool on a grid. Distances and mirror images are taken
in mm through the affine, so voxel size, orientation and handedness need no special case.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from difflib import get_close_matches
from functools import reduce

import numpy as np
import numpy.typing as npt
from scipy import ndimage

from .errors import InputError
from .regrid import covered_fraction
from .space import Grid

Bools = npt.NDArray[np.bool_]
Ints = npt.NDArray[np.integer]

COMBINATIONS = ("union", "intersection", "difference")
MIRRORINGS = ("other", "both")

_SLACK_MM = 1e-6  # an affine's rounding must not decide about voxels at exactly a distance
_MANY = 5


def numbers_of(
    labels: Iterable[int | str], table: Sequence[tuple[int, str]], where: str = ""
) -> tuple[int, ...]:
    """The label numbers that names and numbers stand for.

    A name is looked for as it is, then without regard to case.

    Parameters
    ----------
    labels : iterable of int or str
    table : sequence of (number, name)
        The rows of a label table; numbers need not be in it.
    where : str
        The table, for messages.

    Returns
    -------
    tuple of int
        Ascending, each once.

    Raises
    ------
    InputError
        When the table has no such name, or more than one label of that name.

    Examples
    --------
    >>> numbers_of(["Brook", 7, "arbor"], [(1, "Arbor"), (2, "Brook")])
    (1, 2, 7)
    """
    return tuple(
        sorted({x if isinstance(x, int) else _number_named(x, table, where) for x in labels})
    )


def _number_named(name: str, table: Sequence[tuple[int, str]], where: str) -> int:
    found = {number for number, other in table if other == name}
    if not found:
        found = {number for number, other in table if other.casefold() == name.casefold()}
    if len(found) == 1:
        return found.pop()
    if found:
        raise InputError(
            "label name that stands for several labels",
            where=where,
            got=f"{name!r}: {', '.join(map(str, sorted(found)))}",
            remedy="give their numbers",
        )
    of_plain = {other.casefold(): other for _, other in table}
    # A low cutoff: a name from memory may be far from the table's, and a list costs nothing.
    near = [of_plain[p] for p in get_close_matches(name.casefold(), of_plain, _MANY, cutoff=0.5)]
    raise InputError(
        "no label of this name",
        where=where,
        expected=f"a name like {', '.join(near)}" if near else f"one of {len(of_plain)} names",
        got=repr(name),
        remedy="take the name from the table, or give the label's number",
    )


def labelled(volume: Ints, numbers: Sequence[int], where: str = "") -> Bools:
    """The voxels that carry any of some labels.

    Parameters
    ----------
    volume : (x, y, z) int
    numbers : sequence of int
    where : str
        The image, for messages.

    Returns
    -------
    (x, y, z) bool

    Raises
    ------
    InputError
        When a label is on no voxel: a part of the region must not go missing silently.

    Examples
    --------
    >>> labelled(np.array([[[0, 3, 7, 3]]]), [3]).tolist()
    [[[False, True, False, True]]]
    """
    present = np.unique(volume)
    absent = [number for number in numbers if number not in present]
    if absent:
        have = [str(number) for number in present if number != 0]
        listed = ", ".join(have[:_MANY])
        if len(have) > _MANY:
            listed += f" and {len(have) - _MANY} more"
        raise InputError(
            "label on no voxel",
            where=where,
            expected=f"labels of the image: {listed or 'it has none'}",
            got=", ".join(map(str, absent)),
            remedy="check the numbers, and that the table belongs to the image",
        )
    return np.isin(volume, numbers)


def combined(masks: Sequence[Bools], how: str) -> Bools:
    """Several masks as one.

    Parameters
    ----------
    masks : sequence of (x, y, z) bool
    how : {"union", "intersection", "difference"}
        Voxels in any mask; in all of them; in the first and in no other.

    Returns
    -------
    (x, y, z) bool

    Examples
    --------
    >>> a, b = np.array([True, True, False]), np.array([False, True, True])
    >>> [combined([a, b], how).tolist() for how in ("intersection", "difference")]
    [[False, True, False], [True, False, False]]
    """
    if how not in COMBINATIONS:
        raise InputError("unknown combination", expected=", ".join(COMBINATIONS), got=how)
    if how == "intersection":
        return reduce(np.logical_and, masks)
    if how == "union":
        return reduce(np.logical_or, masks)
    return reduce(lambda left, other: left & ~other, masks)


def eroded(mask: Bools, grid: Grid, mm: float) -> Bools:
    """The voxels of a mask farther than a distance from every voxel outside it.

    Distances are between centres; what lies outside the grid is outside the mask. This is
    binary erosion (Serra 1982) by a ball in mm, on any affine, sheared ones too.

    Parameters
    ----------
    mask : (x, y, z) bool
    grid : Grid
    mm : float, mm

    Returns
    -------
    (x, y, z) bool

    Raises
    ------
    InputError
        When mm is not above 0.

    Examples
    --------
    >>> grid = Grid((1, 1, 9), np.diag([9.0, 9.0, 2.0, 1.0]))
    >>> mask = np.arange(9).reshape(1, 1, 9) > 2
    >>> eroded(mask, grid, 4.0).sum(), eroded(mask, grid, 9.0).sum()
    (np.int64(2), np.int64(0))
    """
    if not mm > 0:
        raise InputError("erosion out of range", expected="> 0 mm", got=f"{mm} mm")
    out = np.zeros_like(mask)
    if not mask.any():
        return out
    axes = grid.affine[:3, :3]
    box = ndimage.find_objects(mask.astype(np.uint8))[0]
    inner = mask[box]
    # Along an axis no voxel of n has more than (n + 1) / 2 steps to the outside: past that
    # nothing is left, and the ball below stays no larger than the mask.
    furthest = (np.array(inner.shape) + 1) / 2 * np.linalg.norm(axes, axis=0)
    if mm >= furthest.min():
        return out
    # How many steps along each index the ball spans: the rows of the inverse say how far an
    # index moves per mm.
    reach = np.ceil(mm * np.linalg.norm(np.linalg.inv(axes), axis=1)).astype(int)
    steps = np.indices(2 * reach + 1) - reach[:, None, None, None]
    ball = np.linalg.norm(np.tensordot(axes, steps, axes=1), axis=0) <= mm + _SLACK_MM
    out[box] = ndimage.binary_erosion(inner, ball)
    return out


def mirrored(mask: Bools, grid: Grid, how: str) -> Bools:
    """A mask's mirror image about the plane x = 0 mm (left for right), on the same grid.

    The plane is the midline in a standard space; in a scanner's own space it is not, and the
    images must be brought to a space in which it is first.

    Parameters
    ----------
    mask : (x, y, z) bool
        Not empty.
    grid : Grid
        World coordinates with x to the right, as in NIfTI.
    how : {"other", "both"}
        The voxels of which the mirror image covers half or more; or those and the mask.

    Returns
    -------
    (x, y, z) bool
        What falls outside the grid is lost. Exact when x = 0 runs through the centres or along
        the borders of voxels; else `covered_fraction` decides, and its points are few.

    Examples
    --------
    >>> affine = np.diag([2.0, 2.0, 2.0, 1.0])
    >>> affine[0, 3] = -3.0  # centres at -3, -1, 1 and 3 mm
    >>> mask = np.array([True, False, False, False]).reshape(4, 1, 1)
    >>> mirrored(mask, Grid((4, 1, 1), affine), "other").ravel().tolist()
    [False, False, False, True]
    """
    if how not in MIRRORINGS:
        raise InputError("unknown mirroring", expected=", ".join(MIRRORINGS), got=how)
    turned = Grid(grid.shape, np.diag([-1.0, 1, 1, 1]) @ grid.affine)
    image: Bools = grid.filled(covered_fraction(mask, turned, grid) >= 0.5)
    return mask | image if how == "both" else image
