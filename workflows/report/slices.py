"""Where a region lies: three slices through it, with how many masks chose each voxel.

Slices are cut along the axes of the mm space, whatever the orientation of the voxels: left is
left, and letters at the edges say so.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import matplotlib as mpl
import numpy as np
import numpy.typing as npt
from matplotlib.colors import ListedColormap
from matplotlib.figure import Figure
from scipy.ndimage import map_coordinates

from ...nodes.images import Geometry, read_map
from .drawing import INK, MUTED, Drawn
from .folder import Row, RunFolder
from .words import minus

Floats = npt.NDArray[np.floating]

_DARK = "#0d1116"  # behind a slice, in the light and in the dark
# The two axes that each slice shows, and the letters at their ends.
_PLANES = ((1, 2), (0, 2), (0, 1))
_LETTERS = ("LR", "PA", "IS")
_AXES = "xyz"


@dataclass(frozen=True)
class Volume:
    """A volume and where it is.

    Parameters
    ----------
    data : (x, y, z) array
    geometry : Geometry
    """

    data: npt.NDArray[Any]
    geometry: Geometry

    def at(self, mm: Floats, order: int) -> Floats:
        """Values at (..., 3) points in mm, 0 outside; order 0 is the nearest voxel, 1 linear."""
        inverse = np.linalg.inv(self.geometry.affine)
        index = mm @ inverse[:3, :3].T + inverse[:3, 3]
        made: Floats = map_coordinates(
            self.data.astype(np.float32), np.moveaxis(index, -1, 0), order=order, prefilter=False
        )
        return made

    def mm(self, where: npt.NDArray[Any]) -> Floats:
        """(n, 3) mm of the voxels that are not zero."""
        index = np.argwhere(where)
        affine = self.geometry.affine
        made: Floats = index @ affine[:3, :3].T + affine[:3, 3]
        return made

    @property
    def step(self) -> float:
        """The least edge of a voxel, mm."""
        return float(np.sqrt(np.square(self.geometry.affine[:3, :3]).sum(axis=0)).min())


def where(run: RunFolder, row: Row, background: Volume | None) -> Drawn | None:
    """Slices through one region; None where its masks have grids of their own, or are empty."""
    roi, n_folds = str(row["roi"]), row["n_folds"]
    counted = _chosen(run, roi, int(float(n_folds)) if n_folds is not None else 1)
    if counted is None or not counted[0].data.any():
        return None
    chosen, many = counted
    search = _optional(run.path / "masks" / f"label-{roi}_desc-search_mask.nii.gz")
    centre = densest(chosen)
    low, high = _box(background or search or chosen)
    figure = Figure(figsize=(6.9, 2.95))
    widths = [high[a] - low[a] for a, _ in _PLANES]
    most = max(high[b] - low[b] for _, b in _PLANES)
    drawn = figure.subplots(1, 3, width_ratios=widths)
    figure.subplots_adjust(0.005, 0.19, 0.995, 0.91, wspace=0.03)
    colours = mpl.colormaps["plasma"](np.linspace(0.18, 0.97, 256))
    step = min(chosen.step, background.step if background else chosen.step)
    step = max(step, max(*widths, most) / 320)
    for axes, fixed, (a, b) in zip(drawn, range(3), _PLANES, strict=True):
        image = None
        mm, extent = _plane(centre, fixed, a, b, low, high, step)
        axes.set_facecolor(_DARK)
        if background is not None:
            grey = background.at(mm, 1)
            axes.imshow(np.ma.masked_less(grey, 0.5), origin="lower", extent=extent, cmap="gray",
                        vmin=-40, vmax=330, interpolation="nearest")  # fmt: skip
        count = chosen.at(mm, 0)
        image = axes.imshow(np.ma.masked_less(count, 1e-9), origin="lower", extent=extent,
                            cmap=ListedColormap(colours), vmin=0, vmax=float(chosen.data.max()),
                            interpolation="nearest")  # fmt: skip
        if search is not None and (inside := search.at(mm, 0)).any():
            axes.contour(inside, [0.5], origin="lower", extent=extent, colors="#ffffff",
                         linewidths=1.0, linestyles="dashed")  # fmt: skip
        _labels(axes, fixed, a, b, centre[fixed], extent)
    word = "weight" if row["value"] == "weighted" else f"masks hold the voxel, of {many}"
    _legend(figure, image, float(chosen.data.max()), search is not None, word, many)
    told = ", ".join(f"{name} = {_mm(mm)}" for name, mm in zip(_AXES, centre, strict=True))
    said = f"{roi}: slices at {told} mm through the voxel that most of the masks hold."
    return Drawn(f"{roi}_where", figure, said)


def background_of(run: RunFolder) -> Volume | None:
    """What slices are drawn over, as the run left it."""
    return _optional(run.path / "background.nii.gz")


def densest(chosen: Volume) -> Floats:
    """The mm of a voxel that most masks hold: of several, the one nearest their middle.

    Examples
    --------
    >>> geometry = Geometry((3, 1, 1), tuple(map(tuple, np.diag([2.0, 2, 2, 1]).tolist())))
    >>> densest(Volume(np.array([1.0, 3.0, 3.0]).reshape(3, 1, 1), geometry)).tolist()
    [2.0, 0.0, 0.0]
    """
    mm = chosen.mm(chosen.data == chosen.data.max())
    middle = mm.mean(axis=0)
    nearest: Floats = mm[np.square(mm - middle).sum(axis=1).argmin()]
    return nearest


def _chosen(run: RunFolder, roi: str, n_folds: int) -> tuple[Volume, int] | None:
    """How many masks hold each voxel, and how many there are; weights are added up."""
    overlap = run.path / "masks" / f"label-{roi}_desc-foldoverlap_probseg.nii.gz"
    if overlap.is_file():
        data, geometry = read_map(overlap)
        return Volume(np.rint(data * n_folds), geometry), n_folds
    names = [str(row["mask"]) for row in run.masks if row["roi"] == roi]
    total: Volume | None = None
    weighted = any(name.endswith("_probseg.nii.gz") for name in names)
    for name in names:
        data, geometry = read_map(run.path / "masks" / name)
        data = data if weighted else (data != 0).astype(np.float32)
        if total is None:
            total = Volume(data.astype(np.float64), geometry)
        elif not total.geometry.same_as(geometry):
            return None
        else:
            total.data[...] += data
    return None if total is None else (total, len(names))


def _optional(path: Path) -> Volume | None:
    return Volume(*read_map(path)) if path.is_file() else None


def _box(volume: Volume) -> tuple[Floats, Floats]:
    """The corners of what a volume holds, with a margin."""
    mm = volume.mm(volume.data != 0)
    margin = 3 * volume.step
    return mm.min(axis=0) - margin, mm.max(axis=0) + margin


def _plane(
    centre: Floats, fixed: int, a: int, b: int, low: Floats, high: Floats, step: float
) -> tuple[Floats, tuple[float, float, float, float]]:
    """The points of a slice, row by row from below, and its edges in mm."""
    across = np.arange(low[a], high[a] + step / 2, step)
    up = np.arange(low[b], high[b] + step / 2, step)
    mm = np.empty((len(up), len(across), 3))
    mm[..., fixed], mm[..., a], mm[..., b] = centre[fixed], across[None, :], up[:, None]
    half = step / 2
    return mm, (across[0] - half, across[-1] + half, up[0] - half, up[-1] + half)


def _labels(
    axes: Any, fixed: int, a: int, b: int, at: float, extent: tuple[float, float, float, float]
) -> None:
    axes.set_title(f"{_AXES[fixed]} = {_mm(at)} mm", pad=3)
    axes.set_xticks([])
    axes.set_yticks([])
    for spine in axes.spines.values():
        spine.set_visible(False)
    axes.set_xlim(extent[0], extent[1])
    axes.set_ylim(extent[2], extent[3])
    where = ((0.02, 0.5, "left"), (0.98, 0.5, "right"))
    for letter, (x, y, side) in zip(_LETTERS[a], where, strict=True):
        axes.text(x, y, letter, transform=axes.transAxes, ha=side, va="center", color="#ffffff")
    for letter, (y, side) in zip(_LETTERS[b], ((0.02, "bottom"), (0.98, "top")), strict=True):
        axes.text(0.5, y, letter, transform=axes.transAxes, ha="center", va=side, color="#ffffff")


def _legend(figure: Figure, image: Any, most: float, outlined: bool, word: str, many: int) -> None:
    if outlined:
        figure.text(0.995, 0.137, "dashed: the search region", va="center", ha="right", color=INK)
    whole = word != "weight"
    if whole and many == 1:  # one mask: nothing to count
        figure.text(0.005, 0.137, "filled: the region", va="center", color=INK)
        return
    below = figure.add_axes((0.03, 0.12, 0.3, 0.035))
    bar = figure.colorbar(image, cax=below, orientation="horizontal")
    step = max(1, math.ceil(most / 6)) if whole else most / 4
    ticks = [
        tick for tick in np.arange(1 if whole else 0, most, step) if most - tick >= 0.75 * step
    ]
    bar.set_ticks([*ticks, most], labels=[f"{tick:.3g}" for tick in [*ticks, most]])
    bar.outline.set_edgecolor(MUTED)
    below.tick_params(length=2, pad=2)
    figure.text(0.345, 0.137, word, va="center", color=INK)


def _mm(value: float) -> str:
    return minus(f"{value:z.1f}".removesuffix(".0"))
