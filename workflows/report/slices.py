"""Where a region lies: three slices through it, with how many masks chose each voxel.

Slices are cut along the axes of the mm space, whatever the orientation of the voxels: left is
left, and letters at the edges say so.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
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
from ..pictures import OWN_SHOWN
from .drawing import INK, MUTED, Drawn
from .effects import cut
from .folder import Row, RunFolder, number
from .words import minus

Floats = npt.NDArray[np.floating]

_COUNTS = mpl.colormaps["plasma"](np.linspace(0.18, 0.97, 256))
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
    """Slices through one region; None where its masks are empty."""
    roi, n_folds = str(row["roi"]), row["n_folds"]
    counted = _chosen(run, roi, int(float(n_folds)) if n_folds is not None else 1)
    if counted is None:
        return _own(run, roi)
    if not counted[0].data.any():
        return None
    chosen, many = counted
    search = _optional(run.path / "masks" / f"label-{roi}_desc-search_mask.nii.gz")
    centre = densest(chosen)
    most = float(chosen.data.max())
    shown = _Shown(chosen, background, ListedColormap(_COUNTS), 0, most)
    figure, image = _three(shown, centre, _box(background or search or chosen), search)
    word = "weight" if row["value"] == "weighted" else f"masks hold the voxel, of {many}"
    _legend(figure, image, most, search is not None, word, many)
    said = f"{roi}: slices at {_told(centre)} mm through the voxel that most of the masks hold."
    return Drawn(f"{roi}_where", figure, said)


def labels_where(run: RunFolder, rows: Sequence[Row], background: Volume | None) -> Drawn | None:
    """Slices through the labels of one region, each in the colour of its estimate.

    None where subjects have label images of their own.
    """
    roi = str(rows[0]["roi"])
    image = _optional(run.path / "masks" / f"label-{roi}_dseg.nii.gz")
    estimates = {int(str(row["parcel"])): number(row, "estimate") for row in rows}
    known = {label: x for label, x in estimates.items() if x is not None and np.isfinite(x)}
    if image is None or not known:
        return None
    labels = np.rint(image.data).astype(np.int64)
    values = np.full(labels.shape, np.nan, np.float32)
    for label, x in known.items():
        values[labels == label] = x
    strongest = max(known, key=lambda label: abs(known[label]))
    if not (labels == strongest).any():
        return None
    centre = densest(Volume((labels == strongest).astype(float), image.geometry))
    most = max(map(abs, known.values())) or 1.0
    shown = _Shown(
        Volume(values, image.geometry), background, mpl.colormaps["coolwarm"], -most, most
    )
    figure, drawn = _three(shown, centre, _box(background or image))
    _bar(figure, drawn, [-most, 0, most])
    figure.text(0.345, 0.137, f"estimate ({rows[0]['scale']})", va="center", color=INK)
    name = next(str(r["parcel_name"] or r["parcel"]) for r in rows if r["parcel"] == str(strongest))
    said = (
        f"Labels of {roi} in the colour of their estimates: slices at {_told(centre)} mm through "
        f"the label whose estimate is largest, {name}."
    )
    return Drawn(f"{roi}_where", figure, said)


def _own(run: RunFolder, roi: str) -> Drawn | None:
    """A slice for each of a few subjects, whose masks have grids of their own."""
    names = [str(row["mask"]) for row in run.masks if row["roi"] == roi]
    masks = {name.split("_")[0]: name for name in reversed(names) if name.startswith("sub-")}
    found = []
    for sub in sorted(masks)[:OWN_SHOWN]:
        chosen = Volume(*read_map(run.path / "masks" / masks[sub]))
        if chosen.data.any():
            found.append((sub, chosen))
    if not found:
        return None
    figure = Figure(figsize=(6.9, 1.95))
    figure.subplots_adjust(0.005, 0.13, 0.995, 0.83, wspace=0.05)
    drawn = figure.subplots(1, OWN_SHOWN, squeeze=False)[0]
    for axes, (sub, chosen) in zip(drawn, found, strict=False):
        background = _optional(run.path / f"{sub}_background.nii.gz")
        centre, box = densest(chosen), _box(background or chosen)
        shown = _Shown(chosen, background, ListedColormap(_COUNTS[-1:]), 0, 1)
        _slice(axes, shown, 2, centre, box, max(chosen.step, float((box[1] - box[0]).max()) / 160))
        axes.set_title(f"{cut(sub, 16)}\nz = {_mm(centre[2])} mm", pad=3)
    for axes in drawn[len(found) :]:
        axes.set_axis_off()
    of = "" if len(found) == len(masks) else f"; {len(found)} of {len(masks)} subjects"
    figure.text(
        0.005, 0.05, f"filled: the region, on each subject's own grid{of}", va="center", color=INK
    )
    told = ", ".join(f"{sub} at z = {_mm(densest(chosen)[2])} mm" for sub, chosen in found)
    return Drawn(f"{roi}_where", figure, f"{roi} on grids of the subjects' own: {told}.")


@dataclass(frozen=True)
class _Shown:
    """What is drawn over a background: a volume and its colours."""

    volume: Volume
    background: Volume | None
    colours: Any
    low: float
    high: float


def _three(
    shown: _Shown, centre: Floats, box: tuple[Floats, Floats], search: Volume | None = None
) -> tuple[Figure, Any]:
    """One slice along each axis, side by side on one scale."""
    low, high = box
    figure = Figure(figsize=(6.9, 2.95))
    widths = [high[a] - low[a] for a, _ in _PLANES]
    most = max(high[b] - low[b] for _, b in _PLANES)
    drawn = figure.subplots(1, 3, width_ratios=widths)
    figure.subplots_adjust(0.005, 0.19, 0.995, 0.91, wspace=0.03)
    steps = [one.step for one in (shown.volume, shown.background) if one is not None]
    step = max(min(steps), max(*widths, most) / 320)
    image = None
    for fixed, axes in enumerate(drawn):
        image = _slice(axes, shown, fixed, centre, box, step, search)
        axes.set_title(f"{_AXES[fixed]} = {_mm(centre[fixed])} mm", pad=3)
    return figure, image


def _slice(
    axes: Any,
    shown: _Shown,
    fixed: int,
    centre: Floats,
    box: tuple[Floats, Floats],
    step: float,
    search: Volume | None = None,
) -> Any:
    a, b = _PLANES[fixed]
    mm, extent = _plane(centre, fixed, a, b, *box, step)
    axes.set_facecolor(_DARK)
    drawn: Any = {"origin": "lower", "extent": extent, "interpolation": "nearest"}
    if shown.background is not None:
        grey = np.ma.masked_less(shown.background.at(mm, 1), 0.5)
        axes.imshow(grey, cmap="gray", vmin=-40, vmax=330, **drawn)
    values = np.ma.masked_invalid(shown.volume.at(mm, 0))
    values = np.ma.masked_inside(values, -1e-9, 1e-9)
    image = axes.imshow(values, cmap=shown.colours, vmin=shown.low, vmax=shown.high, **drawn)
    if search is not None and (inside := search.at(mm, 0)).any():
        axes.contour(inside, [0.5], origin="lower", extent=extent, colors="#ffffff",
                     linewidths=1.0, linestyles="dashed")  # fmt: skip
    _letters(axes, a, b, extent)
    return image


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


def _letters(axes: Any, a: int, b: int, extent: tuple[float, float, float, float]) -> None:
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
    step = max(1, math.ceil(most / 6)) if whole else most / 4
    ticks = [
        tick for tick in np.arange(1 if whole else 0, most, step) if most - tick >= 0.75 * step
    ]
    _bar(figure, image, [*ticks, most])
    figure.text(0.345, 0.137, word, va="center", color=INK)


def _bar(figure: Figure, image: Any, ticks: Sequence[float]) -> None:
    below = figure.add_axes((0.04, 0.12, 0.29, 0.035))
    bar = figure.colorbar(image, cax=below, orientation="horizontal")
    bar.set_ticks(list(ticks), labels=[minus(f"{tick:.3g}") for tick in ticks])
    bar.outline.set_edgecolor(MUTED)
    below.tick_params(length=2, pad=2)


def _told(centre: Floats) -> str:
    return ", ".join(f"{name} = {_mm(mm)}" for name, mm in zip(_AXES, centre, strict=True))


def _mm(value: float) -> str:
    return minus(f"{value:z.1f}".removesuffix(".0"))
