"""The bench's study: smooth noise of whole-brain size, as arrays and as files."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from scipy.ndimage import gaussian_filter
from sequester.nodes.images import Geometry, write_bytes, write_map
from sequester.nodes.space import Grid

N_SUBJECTS, SEED = 26, 20
SHAPE, VOXEL_MM, N_FEATURES, FWHM_MM = (91, 109, 91), 2.0, 228_483, 6.0
LABELS = [f"{i:02d}" for i in range(1, N_SUBJECTS + 1)]

STUDY = """\
[study]
name = "bench"
table = "table.tsv"
seed = 1

[[roi]]
name = "whole"
plan = "leave-one-subject-out"
search = {{ mask = "brain.nii.gz", origin = "the voxels the bench's generator fills" }}
rule = {rule}
flips = {flips}
"""


def geometry() -> Geometry:
    """A 2 mm grid."""
    affine = np.diag([VOXEL_MM] * 3 + [1.0])
    affine[:3, 3] = [-90.0, -126.0, -72.0]
    return Geometry(SHAPE, tuple(tuple(float(x) for x in row) for row in affine))


def brain() -> np.ndarray:
    """The 228,483 voxels nearest to the middle of the grid, by an ellipsoid's distance."""
    axes = [np.linspace(-1, 1, n) for n in SHAPE]
    x, y, z = np.meshgrid(*axes, indexing="ij")
    nearest = np.argsort((x * x + y * y + z * z).ravel(), kind="stable")[:N_FEATURES]
    inside = np.zeros(int(np.prod(SHAPE)), bool)
    inside[nearest] = True
    return inside.reshape(SHAPE)


def grid(inside: np.ndarray) -> Grid:
    """The space of the features."""
    return Grid(SHAPE, geometry().affine, inside)


def effects(inside: np.ndarray) -> np.ndarray:
    """(26, 228483) float32: noise of unit variance and 6 mm FWHM."""
    sigma = FWHM_MM / VOXEL_MM / np.sqrt(8 * np.log(2))
    rows = np.empty((N_SUBJECTS, N_FEATURES), np.float32)
    for i in range(N_SUBJECTS):
        white = np.random.default_rng([SEED, i]).standard_normal(SHAPE, dtype=np.float32)
        rows[i] = gaussian_filter(white, sigma)[inside]
        rows[i] /= rows[i].std()
    return rows


def write_study(folder: Path, x: np.ndarray, inside: np.ndarray) -> list[Path]:
    """Write the maps, the search mask and the table; returns the maps' paths."""
    write_map(folder / "brain.nii.gz", inside, geometry())
    paths, lines = [], ["path\tsub\tsuffix"]
    for label, row in zip(LABELS, x, strict=True):
        volume = np.zeros(SHAPE, np.float32)
        volume[inside] = row
        paths.append(write_map(folder / f"sub-{label}_map.nii.gz", volume, geometry()))
        lines.append(f"{paths[-1].name}\t{label}\tbold")
    write_bytes(folder / "table.tsv", ("\n".join(lines) + "\n").encode())
    return paths
