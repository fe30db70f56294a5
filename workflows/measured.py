"""What a study's maps give to noise that is made like them: nothing of what they show.

That is where each of them has data, in which region, and how much their residuals vary from
voxel to voxel. Means play no part.
"""

from __future__ import annotations

import contextlib
import os
import tempfile
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from nipype import Workflow

from ..nodes.errors import InputError
from ..nodes.images import (
    geometry_of,
    open_image,
    read_label_table,
    read_labels,
    read_map,
    stack,
)
from ..nodes.masks import Cluster, Threshold
from ..nodes.nullsets import Rows, Searched
from ..nodes.regions import numbers_of
from ..nodes.regrid import nearest_label
from ..nodes.smoothness import fwhm_of_residuals, fwhm_of_stack
from ..nodes.space import Grid
from .build import subject_maps, tested_rows
from .collect import find_nodes
from .guard import GuardPlugin
from .plans import LOCALIZER, OTHER_RUNS
from .regions import Labels, Places, mask_of, region_node
from .rois import Roi
from .run import engine_quiet
from .selection import Selection
from .settings import Settings

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]

_SMOOTHEST = 30  # voxels: noise is made in a box that is wider by several of these


@dataclass(frozen=True)
class Measured:
    """What a region's simulation takes from the study's maps.

    Parameters
    ----------
    searched : Searched
        Search region, or the region itself.
    labels : (1 or n_rows, n_features) int, or None
        Of an atlas whose every label is a region.
    numbers : tuple of int
        The labels that are read; none for all.
    fwhm : tuple of 3 float, voxels
    tested : Rows
    choosing : Rows or None
    runs : tuple of str
        Per tested row: its run.
    spread : float
        Standard deviation between subjects of the maps that choose, where a rule has a height
        in their units.
    """

    searched: Searched
    labels: Ints | None
    numbers: tuple[int, ...]
    fwhm: tuple[float, ...]
    tested: Rows
    choosing: Rows | None
    runs: tuple[str, ...]
    spread: float


@contextlib.contextmanager
def maps_made(
    settings: Settings, rois: Sequence[Roi]
) -> Iterator[tuple[dict[Selection, list[str]], dict[str, list[str]]]]:
    """The maps of some regions and their masks, made as a run makes them; gone with the block.

    Yields
    ------
    files : dict of Selection to list of str
        One map per subject (or run) of what is tested and of what chooses.
    masks : dict of str to list of str
        By the region's name: its mask, or one per row; none for a whole map, and for an atlas
        whose every label is a region.
    """
    with tempfile.TemporaryDirectory() as folder, engine_quiet(), contextlib.chdir(os.getcwd()):
        workflow = Workflow(name=settings.name, base_dir=folder)
        workflow.config["execution"] = {
            "crashdump_dir": folder,
            "create_report": "false",
            "stop_on_first_crash": "true",
            "remove_unnecessary_outputs": "false",
            "poll_sleep_duration": "0.05",
        }
        names: dict[Selection, str] = {}
        places = {}
        for roi in rois:
            for rows in (tested_rows(roi), roi.choosing):
                if rows is not None and rows not in names:
                    names[rows] = f"maps{len(names)}"
                    workflow.add_nodes([subject_maps(settings, rows, names[rows])])
            at = _places(settings, roi)
            place = None if roi.each_label else region_node(roi.region, at, f"{roi.name}Place")
            if place is not None:
                places[roi.name] = place
                workflow.add_nodes([place])
        nodes = find_nodes(workflow.run(plugin=GuardPlugin(settings.study)))

        def output(name: str, field: str) -> Any:
            return getattr(nodes[f"{settings.name}.{name}"].result.outputs, field)

        masks = {}
        for name, place in places.items():
            last, field = mask_of(place)
            *inner, field = field.split(".")
            made = output(".".join([last.name, *inner]), field)
            masks[name] = made if isinstance(made, list) else [made]
        yield {rows: output(name, "out_files") for rows, name in names.items()}, masks


def refuse_own_grids(settings: Settings, roi: Roi, remedy: str) -> None:
    """Raise InputError where there is no one grid on which to see how smooth the maps are."""
    if settings.maps.own_grids:
        raise InputError(
            'grids = "own" cannot be simulated',
            where=f"roi {roi.name}",
            expected="maps on one grid, whose residuals show how smooth they are",
            remedy=remedy,
        )


def by_person(effects: Floats, people: Sequence[str]) -> Floats:
    """(n_people, n_features) maps averaged over the rows of each person, by sorted name."""
    owner = np.array(people)
    names = sorted(set(people))
    return np.stack([effects[owner == name].mean(axis=0, dtype=np.float64) for name in names])


def measure(settings: Settings, rois: Sequence[Roi]) -> list[Measured]:
    """Regions, missing voxels and smoothness, from maps made as a run makes them."""
    found = []
    with maps_made(settings, rois) as (files, masks):
        for roi in rois:
            try:
                found.append(_measured_roi(settings, roi, files, masks.get(roi.name)))
            except InputError as error:
                raise error.within(f"roi {roi.name}") from error
    return found


def _places(settings: Settings, roi: Roi) -> Places:
    """Where a region's mask is wanted: on the grid of all, once or for each row."""
    first = [(label, rows[0]) for label, rows in tested_rows(roi).subjects]
    first = first if roi.region.of_each else first[:1]
    references = tuple(str(settings.root / row.path) for _, row in first)
    return Places(settings.root, references, tuple(label for label, _ in first))


def _measured_roi(
    settings: Settings,
    roi: Roi,
    files: dict[Selection, list[str]],
    masks: list[str] | None,
) -> Measured:
    rows = tested_rows(roi)
    volumes: npt.NDArray[Any] | None = None
    if roi.each_label:
        volumes = _label_volumes(settings, roi)
    elif masks is not None:
        volumes = np.nan_to_num(np.stack([read_map(path)[0] for path in masks]))
    inside = None if volumes is None else (volumes != 0).any(axis=0)
    effects, grid, _ = stack(files[rows], inside)
    chosen = None if roi.choosing is None else stack(files[roi.choosing], inside)[0]
    places = np.ones((1, grid.n_features)) if volumes is None else volumes[:, inside]
    if not roi.each_label:
        # What nobody has can be neither chosen nor read.
        several = effects if chosen is None else np.concatenate([effects, chosen])
        some = np.asarray(np.isfinite(several).any(axis=0))
        grid, effects, places = grid.restricted(some), effects[:, some], places[:, some]
        chosen = None if chosen is None else chosen[:, some]
    if not np.isfinite(effects).any():
        raise InputError(
            "no voxel has data in the region", remedy="search a region that the maps cover"
        )
    own = roi.plan in OTHER_RUNS
    return Measured(
        Searched(grid, places),
        places.astype(np.int64) if roi.each_label else None,
        _numbers(settings, roi),
        _smoothness(effects, rows.people, grid, within=own),
        _as_rows(rows, effects),
        None if roi.choosing is None or chosen is None else _as_rows(roi.choosing, chosen),
        tuple(listed[0].unit.run for _, listed in rows.subjects),
        _spread(roi, chosen),
    )


def _as_rows(selection: Selection, effects: Floats) -> Rows:
    subs = tuple(label for label, _ in selection.subjects)
    return Rows(subs, tuple(selection.people), np.isfinite(effects))


def _label_volumes(settings: Settings, roi: Roi) -> Ints:
    """(1 or n_rows, x, y, z) the labels of an atlas on the grid of the maps."""
    assert isinstance(roi.region, Labels), "checked with the settings"
    at = _places(settings, roi)
    paths = at.path(roi.region.atlas)
    made = []
    for path, reference in zip(
        [paths] if isinstance(paths, str) else paths, at.references, strict=True
    ):
        volume, geometry = read_labels(path)
        if roi.region.regrid:
            target = geometry_of(open_image(reference))
            source = Grid(geometry.shape, geometry.affine)
            volume = nearest_label(volume, source, Grid(target.shape, target.affine))
            volume = volume.reshape(target.shape)
        made.append(volume)
    return np.stack(made)


def _numbers(settings: Settings, roi: Roi) -> tuple[int, ...]:
    """The labels that a family reads; none for all."""
    if not roi.each_label or not isinstance(roi.region, Labels) or not roi.region.labels:
        return ()
    table = str(settings.root / roi.region.names) if roi.region.names else ""
    return numbers_of(roi.region.labels, read_label_table(table) if table else (), table)


def _smoothness(
    effects: Floats, people: Sequence[str], grid: Grid, *, within: bool
) -> tuple[float, ...]:
    """The FWHM of residuals: of runs about their subject's mean, or of subjects about theirs."""
    means = by_person(effects, people)
    if within:
        complete = np.asarray(np.isfinite(effects).all(axis=0))
        owner = np.searchsorted(sorted(set(people)), people)
        rest = np.where(complete, effects - means[owner], 0.0)
        fwhm = fwhm_of_residuals(rest, grid, len(people) - len(means), complete)
    else:
        fwhm = fwhm_of_stack(means, grid)
    if np.isnan(fwhm).all() and grid.n_features > 1:
        raise InputError(
            "how smooth the maps are cannot be seen",
            expected="neighbouring voxels that have data in all maps",
            got="none in the region",
        )
    # Along an axis of a single slice there is nothing to see, and nothing to smooth.
    widths = tuple(float(width) for width in np.nan_to_num(fwhm, posinf=np.inf))
    if max(widths) > _SMOOTHEST:
        raise InputError(
            "maps too smooth to simulate",
            expected=f"a FWHM of up to {_SMOOTHEST} voxels along each axis",
            got=" x ".join(f"{width:.1f}" for width in widths),
            remedy="check that the maps differ from voxel to voxel; or resample them",
        )
    return widths


def _spread(roi: Roi, chosen: Floats | None) -> float:
    """How far localizer maps spread between subjects, in the units of the rule's height."""
    rule = None if roi.procedure is None else roi.procedure.rule
    in_units = isinstance(rule, Threshold | Cluster) and rule.height is not None
    if roi.plan != LOCALIZER or roi.group_mask or chosen is None or not in_units:
        return 1.0
    several = np.isfinite(chosen).sum(axis=0) > 1
    return float(np.sqrt(np.nanvar(chosen[:, several], axis=0, ddof=1).mean(dtype=np.float64)))
