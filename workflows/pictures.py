"""What the page draws and no table holds: a background, where was searched, what flips gave.

Written into the run's folder, so that the page can be made again without the data.
"""

from __future__ import annotations

import os
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from ..nodes.images import Geometry, geometry_of, open_image, read_map, read_mask, write_map
from ..nodes.interfaces.base import write_json
from .collect import RoiOutput
from .plans import A_PRIORI
from .settings import Settings

Floats = npt.NDArray[np.floating]

BACKGROUND = "background.nii.gz"
OWN_SHOWN = 6  # subjects with grids of their own that are drawn
FLIP_COLUMNS = {
    "roi": "Region of interest.",
    "low": "Lower end of the bin.",
    "high": "Upper end of the bin; it belongs to the bin in the last one alone.",
    "count": "Exchanges of the whole procedure whose statistic falls into the bin; infinite ones "
    "are in the outermost bins.",
}
_BINS = 48


def write_pictures(stage: Path, settings: Settings, outputs: Sequence[RoiOutput]) -> None:
    """Write the background and the search regions.

    Parameters
    ----------
    stage : Path
        The output folder; its ``masks`` exist.
    settings : Settings
    outputs : sequence of RoiOutput
        The stated regions, without variants.
    """
    _background(stage, settings, outputs)
    for output in outputs:
        if output.roi.plan != A_PRIORI and len(output.searched) == 1:
            path = stage / "masks" / f"label-{output.roi.name}_desc-search_mask.nii.gz"
            write_map(path, *read_mask(output.searched[0]))
            leaves = output.roi.region.leaves()
            sources = [f"bids:study:{file}" for leaf in leaves for file in leaf.files]
            said = "Where the region was searched for."
            _sidecar(path, {"Type": "ROI", "Description": said, "Sources": sources})


def flip_rows(outputs: Sequence[RoiOutput]) -> Iterator[dict[str, Any]]:
    """The histogram of each region's statistic under exchanges: rows of flips.tsv."""
    for output in outputs:
        if output.flips is not None:
            t = np.load(output.flips)[1:]
            finite = t[np.isfinite(t)]
            if len(finite):
                clipped = np.clip(t, finite.min(), finite.max())
                counts, edges = np.histogram(clipped, _BINS)
                for low, high, count in zip(edges, edges[1:], counts, strict=False):
                    ends = {"low": float(low), "high": float(high)}
                    yield {"roi": output.roi.name, **ends, "count": int(count)}


def _background(stage: Path, settings: Settings, outputs: Sequence[RoiOutput]) -> None:
    """A grey picture of what lies where, in brightness steps; see `brightness`.

    Where subjects have grids of their own there is no mean of them: a few have one each.
    """
    for_orientation = " For orientation only: 1 to 255, 0 is no data."
    if settings.background is not None:
        data, geometry = read_map(settings.background)
        given = os.path.relpath(settings.background, settings.root)
        said, sources = f"As given: {given}.", [given]
        pictures = [(BACKGROUND, data, geometry, said, sources)]
    else:
        paths = list(dict.fromkeys(path for output in outputs for path in output.maps))
        geometries = [geometry_of(open_image(path)) for path in paths]
        if all(other.same_as(geometries[0]) for other in geometries):
            rows = {row.path for output in outputs for row in output.roi.tested.rows}
            said = f"Mean of the {len(paths)} maps that regions were read in."
            pictures = [(BACKGROUND, *_mean(paths), said, sorted(rows))]
        else:
            pictures = list(_own(outputs))
    for name, data, geometry, said, sources in pictures:
        write_map(stage / name, brightness(data), geometry)
        of = {"Sources": [f"bids:study:{path}" for path in sources]}
        _sidecar(stage / name, {"Description": said + for_orientation, **of})


def _own(outputs: Sequence[RoiOutput]) -> Iterator[tuple[str, Floats, Geometry, str, list[str]]]:
    """The mean of the maps on the first grid of each of a few subjects."""
    of_sub: dict[str, list[Path]] = {}
    rows: dict[str, set[str]] = {}
    for output in outputs:
        subs = [value.sub for value in output.values]
        if output.roi.each_label:  # a value per label, a map per subject
            subs = list(dict.fromkeys(subs))
        for sub, path in zip(subs, output.maps, strict=True):
            of_sub.setdefault(sub, []).append(path)
        for row in output.roi.tested.rows:
            rows.setdefault(row.unit.sub, set()).add(row.path)
    for sub in sorted(of_sub)[:OWN_SHOWN]:
        first = geometry_of(open_image(of_sub[sub][0]))
        paths = [p for p in dict.fromkeys(of_sub[sub]) if geometry_of(open_image(p)).same_as(first)]
        label = "".join(c for c in sub if c.isalnum())
        said = f"Mean of the maps that regions were read in, of {sub}."
        yield f"sub-{label}_{BACKGROUND}", *_mean(paths), said, sorted(rows.get(sub, ()))


def _mean(paths: Sequence[Path]) -> tuple[Floats, Geometry]:
    """Voxel by voxel over the maps that hold a value there."""
    geometry = geometry_of(open_image(paths[0]))
    total, count = np.zeros(geometry.shape), np.zeros(geometry.shape, np.int32)
    for path in paths:
        values, _ = read_map(path)
        there = np.isfinite(values) & (values != 0)
        total += np.where(there, values, 0)
        count += there
    return np.where(count > 0, total / np.maximum(count, 1), np.nan), geometry


def brightness(data: Floats) -> npt.NDArray[np.uint8]:
    """Values as 1 to 255, the outermost two percent on either side alike; 0 where there is none.

    Examples
    --------
    >>> brightness(np.array([np.nan, 0.0, 1.0, 2.0])).tolist()
    [0, 0, 1, 255]
    """
    there = np.isfinite(data) & (data != 0)
    made = np.zeros(data.shape, np.uint8)
    if there.any():
        low, high = np.percentile(data[there], [2, 98])
        scaled = (data[there] - low) / (high - low) if high > low else np.ones(there.sum())
        made[there] = np.rint(1 + 254 * np.clip(scaled, 0, 1))
    return made


def _sidecar(path: Path, content: dict[str, Any]) -> None:
    write_json(path.with_name(path.name.removesuffix(".nii.gz") + ".json"), content)
