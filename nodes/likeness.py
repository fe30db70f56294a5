"""What a mask selects, whatever file holds it, and how alike two masks are.

Definitions
-----------
voxel set
    The voxels of a mask as places in mm: a lattice (three steps and a first voxel) and whole
    numbers of steps. Axes are turned to the arrangement nearest to right, front, up and the
    lattice starts at the set's own bounding box. So a copy that was saved again, compressed,
    cropped, flipped or permuted, or stored in another type is the same set.
Dice
    2 |A and B| / (|A| + |B|) (Dice 1945, Ecology 26:297-302), by volume.
contained
    |A and B| / |A|: the share of one that lies in the other.

Sets are compared through mm. On one lattice the shared volume is exact; across lattices every
voxel of the finer set is looked at in 64 points.
"""

from __future__ import annotations

import base64
import hashlib
import itertools
import zlib
from collections.abc import Sequence
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from .errors import InputError

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# Headers hold float32, and programs take affines through quaternions: in steps of a lattice.
_SAME_STEP = 0.02
_STEP_MM, _PLACE_MM = 1e-3, 1e-2  # what a digest tells apart


class VoxelSet:
    """A set of voxels in mm, in its canonical arrangement (see `voxel_set`).

    Parameters
    ----------
    steps : (3, 3) float, mm
        Column j is one step along axis j.
    first : (3,) float, mm
        The voxel at (0, 0, 0).
    where : (n, 3) int
        Whole numbers of steps, sorted, the least of each axis being 0.
    """

    def __init__(self, steps: Floats, first: npt.ArrayLike, where: Ints) -> None:
        self.steps = np.asarray(steps, dtype=float)
        self.first = np.asarray(first, dtype=float)
        self.where = np.asarray(where, dtype=np.int32).reshape(-1, 3)

    def __len__(self) -> int:
        return len(self.where)

    @cached_property
    def mm(self) -> Floats:
        """(n, 3) centres of the voxels in mm."""
        return self._mm(self.where)

    def _mm(self, where: npt.NDArray[Any]) -> Floats:
        made: Floats = where @ self.steps.T + self.first
        return made

    @property
    def voxel_mm3(self) -> float:
        """The volume of one voxel."""
        return float(abs(np.linalg.det(self.steps)))

    @property
    def mm3(self) -> float:
        """The volume of the set."""
        return len(self) * self.voxel_mm3

    @property
    def centre(self) -> tuple[float, float, float]:
        """The centre of gravity in mm, to a hundredth."""
        x, y, z = (round(float(v), 2) + 0.0 for v in self.mm.mean(axis=0))
        return x, y, z

    @cached_property
    def digest(self) -> str:
        """SHA-256 of lattice and voxels, mm rounded: the same for every way to store the set."""
        grid = [np.rint(self.steps / _STEP_MM).ravel(), np.rint(self.first / _PLACE_MM)]
        head = np.concatenate(grid).astype("<i8").tobytes()
        return hashlib.sha256(head + self.where.astype("<i4").tobytes()).hexdigest()

    @cached_property
    def _dense(self) -> Bools:
        made = np.zeros(self.where.max(axis=0) + 1, bool)
        made[tuple(self.where.T)] = True
        return made

    def holds(self, mm: Floats) -> Bools:
        """(n,) bool: whether points ((n, 3) float, mm) lie in a voxel of the set."""
        at = np.rint(np.linalg.solve(self.steps, (mm - self.first).T).T).astype(int)
        inside = np.asarray(((at >= 0) & (at < self._dense.shape)).all(axis=1))
        inside[inside] = self._dense[tuple(at[inside].T)]
        return inside

    def same_lattice(self, other: VoxelSet) -> bool:
        """Whether the voxels of both are voxels of one endless grid."""
        reach = max(1, *self.where.max(axis=0), *other.where.max(axis=0))
        turn = np.linalg.solve(self.steps, other.steps)
        apart = np.linalg.solve(self.steps, other.first - self.first)
        return bool(
            np.abs(turn - np.eye(3)).max() * reach < _SAME_STEP
            and np.abs(apart - np.rint(apart)).max() < _SAME_STEP
        )


def voxel_set(mask: npt.NDArray[Any], affine: npt.ArrayLike) -> VoxelSet:
    """The voxels of a mask as a set in mm.

    Parameters
    ----------
    mask : (x, y, z) array
        Every voxel that is finite and not zero is in the set.
    affine : (4, 4) float
        Voxel indices to mm.

    Raises
    ------
    InputError
        When no voxel is inside.

    Examples
    --------
    A mask, and the same one cropped and flipped:

    >>> affine = np.diag([2.0, 2.0, 2.0, 1.0])
    >>> mask = np.zeros((4, 3, 3), bool); mask[2:, 1, 1] = True
    >>> turned = affine @ np.array([[-1, 0, 0, 3], [0, 1, 0, 1], [0, 0, 1, 0], [0, 0, 0, 1]])
    >>> again = voxel_set(7.0 * mask[::-1, 1:], turned)
    >>> voxel_set(mask, affine).digest == again.digest, again.centre
    (True, (5.0, 2.0, 2.0))
    """
    affine = np.asarray(affine, dtype=float)
    where = np.argwhere(np.isfinite(mask) & (mask != 0))
    if not len(where):
        raise InputError("empty mask", remedy="give a mask with some voxels")
    order, signs = _arrangement(affine[:3, :3])
    steps: Floats = affine[:3, :3][:, order] * signs
    turned = where[:, order] * signs
    least = turned.min(axis=0)
    turned = turned - least
    return VoxelSet(steps, affine[:3, 3] + steps @ least, turned[np.lexsort(turned.T[::-1])])


def _arrangement(steps: Floats) -> tuple[list[int], Ints]:
    """The order and the signs of the axes that bring a lattice nearest to right, front, up.

    Of the 48 arrangements that permute and flip axes, a lattice has the same whichever of them
    it came in; ties (turned by 45 degrees) go by the numbers themselves, rounded.
    """
    best: tuple[tuple[float, ...], list[int], Ints] | None = None
    unit = steps / np.linalg.norm(steps, axis=0)
    for order in itertools.permutations(range(3)):
        for flips in itertools.product((1, -1), repeat=3):
            signs = np.array(flips)
            made = unit[:, order] * signs
            key = (round(float(np.trace(made)), 4), *np.round(made, 4).ravel().tolist())
            if best is None or key > best[0]:
                best = key, list(order), signs
    assert best is not None, "there are 48"
    return best[1], best[2]


def shared_mm3(one: VoxelSet, other: VoxelSet) -> float:
    """The volume that two sets share.

    Examples
    --------
    >>> coarse = voxel_set(np.ones((1, 1, 1)), np.diag([2.0, 2, 2, 1]))
    >>> fine = voxel_set(np.ones((2, 1, 1)), np.eye(4))
    >>> round(shared_mm3(coarse, fine), 2)
    1.5
    """
    fine, coarse = sorted((one, other), key=lambda made: made.voxel_mm3)
    reach = np.abs(fine.steps).sum(axis=1) + np.abs(coarse.steps).sum(axis=1)
    low, high = coarse.mm.min(axis=0) - reach, coarse.mm.max(axis=0) + reach
    near = fine.where[((fine.mm >= low) & (fine.mm <= high)).all(axis=1)]
    if fine.same_lattice(coarse):
        return float(coarse.holds(fine._mm(near)).sum()) * fine.voxel_mm3
    points = np.array(list(itertools.product((-3 / 8, -1 / 8, 1 / 8, 3 / 8), repeat=3)))
    held = sum(int(coarse.holds(fine._mm(near + point)).sum()) for point in points)
    return held / len(points) * fine.voxel_mm3


def same(one: VoxelSet, other: VoxelSet) -> bool:
    """Whether two sets hold the same voxels, up to the rounding of headers."""
    if one.digest == other.digest:
        return True
    alike = len(one) == len(other) and one.same_lattice(other)
    return alike and bool(other.holds(one.mm).all())


def dice(one: VoxelSet, other: VoxelSet) -> float:
    """The Dice overlap of two sets, by volume: 0 to 1."""
    return 2 * shared_mm3(one, other) / (one.mm3 + other.mm3)


def contained(one: VoxelSet, other: VoxelSet) -> float:
    """The share of the first set that lies in the second, by volume: 0 to 1."""
    return shared_mm3(one, other) / one.mm3


def distance(here: Sequence[float], there: Sequence[float]) -> float:
    """The distance of two points in mm."""
    return float(np.linalg.norm(np.subtract(here, there)))


def united(sets: Sequence[VoxelSet]) -> list[VoxelSet]:
    """The union of sets: one set for every lattice that they are on.

    Examples
    --------
    >>> a, b = (voxel_set(np.array(m).reshape(1, 1, 3), np.eye(4)) for m in ([1, 1, 0], [0, 1, 1]))
    >>> [len(made) for made in united([a, b])]
    [3]
    """
    made = []
    for members in _lattices(sets):
        group = [sets[i] for i in members]
        first, shifts = _together(group)
        every = np.concatenate([g.where + s for g, s in zip(group, shifts, strict=True)])
        made.append(VoxelSet(group[0].steps, first, np.unique(every, axis=0)))
    return made


def _lattices(sets: Sequence[VoxelSet]) -> list[list[int]]:
    """Which of the sets are on one lattice."""
    groups: list[list[int]] = []
    for i, one in enumerate(sets):
        home = next((group for group in groups if sets[group[0]].same_lattice(one)), None)
        if home is None:
            groups.append([i])
        else:
            home.append(i)
    return groups


def _together(group: Sequence[VoxelSet]) -> tuple[Floats, list[Ints]]:
    """The first voxel of a box around sets of one lattice, and each set's place in it."""
    steps = group[0].steps
    shifts = [np.rint(np.linalg.solve(steps, g.first - group[0].first)).astype(int) for g in group]
    least = np.min(shifts, axis=0)
    return group[0].first + steps @ least, [shift - least for shift in shifts]


# -- compactly, as text ---------------------------------------------------------------------------


def packed(sets: Sequence[VoxelSet]) -> list[dict[str, Any]]:
    """Sets as plain types for JSON, small when they are alike, as fold masks are.

    Per lattice: ``steps``, ``first``, ``shape`` of the box around all, the ``members`` (places in
    the sequence), and ``voxels``: for each the voxels in which it differs from the one before,
    as a count and gaps (unsigned 32-bit, little-endian), compressed (zlib) and in base64.

    Examples
    --------
    >>> one = voxel_set(np.ones((2, 2, 2)), np.eye(4))
    >>> [made.digest == one.digest for made in unpacked(packed([one, one]))]
    [True, True]
    """
    made = []
    for members in _lattices(sets):
        group = [sets[i] for i in members]
        first, shifts = _together(group)
        whole = [g.where + s for g, s in zip(group, shifts, strict=True)]
        shape = np.max([w.max(axis=0) for w in whole], axis=0) + 1
        blob, before = b"", np.zeros(0, np.int64)
        for where in whole:
            flat = np.sort(np.ravel_multi_index(tuple(where.T), tuple(shape)))
            gaps = np.diff(np.setxor1d(flat, before, assume_unique=True), prepend=0)
            blob += np.array([len(gaps), *gaps], "<u4").tobytes()
            before = flat
        made.append(
            {
                "steps": [[round(float(v), 6) for v in row] for row in group[0].steps],
                "first": [round(float(v), 5) for v in first],
                "shape": [int(n) for n in shape],
                "members": members,
                "voxels": base64.b64encode(zlib.compress(blob, 9)).decode(),
            }
        )
    return made


def unpacked(records: Sequence[dict[str, Any]]) -> list[VoxelSet]:
    """The sets that `packed` put away, in their order."""
    found: dict[int, VoxelSet] = {}
    for record in records:
        steps, first = np.array(record["steps"]), np.array(record["first"])
        numbers = np.frombuffer(zlib.decompress(base64.b64decode(record["voxels"])), "<u4")
        before, at = np.zeros(0, np.int64), 0
        for member in record["members"]:
            count = int(numbers[at])
            changed = np.cumsum(numbers[at + 1 : at + 1 + count].astype(np.int64))
            at += 1 + count
            before = np.setxor1d(changed, before, assume_unique=True)
            where = np.stack(np.unravel_index(before, tuple(record["shape"])), axis=1)
            least = where.min(axis=0)
            made = VoxelSet(steps, first + steps @ least, where - least)
            found[member] = made
    return [found[i] for i in range(len(found))]
