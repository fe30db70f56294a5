"""The shape check of every mask from outside: does it follow the contour of the tested maps?

Nobody can see in a file how it was made. A mask that was thresholded from the study's own data
shows it by its boundary (`nodes.contour`). A flag is a report beside the result, no refusal.
"""

from __future__ import annotations

import tempfile
from collections.abc import Sequence
from contextlib import chdir
from pathlib import Path

import numpy as np
from nipype import Workflow

from ..nodes.contour import Contour, boundary, contour
from ..nodes.errors import InputError
from ..nodes.groupmaps import Missing, t_from_sums
from ..nodes.images import Floats, check_same_grid, geometry_of, open_image, read_map, read_mask
from ..nodes.space import Grid
from .build import subject_maps
from .collect import RoiOutput
from .guard import GuardPlugin
from .rois import Roi
from .settings import Settings

_LEAST_PEOPLE = 4  # with three, eight flips
TOO_SMALL = "The mask's boundary has too few voxels with data for the shape check."


def check_masks(outputs: Sequence[RoiOutput], settings: Settings) -> None:
    """Check every region that came from outside and is one mask for all, where maps share a grid.

    Its figures go into the records: ``contour``, ``contour_p``, ``contour_step_p``, and a
    sentence when it is flagged.
    """
    if settings.maps.own_grids:
        return
    done: dict[tuple[Path, tuple[Path, ...]], Contour | None] = {}
    for output in outputs:
        if len(output.searched) != 1 or output.roi.variant_of:
            continue
        key, people = (output.searched[0], output.maps), _people(output.roi, len(output.maps))
        if len(set(people)) < _LEAST_PEOPLE:
            continue
        if key not in done:
            done[key] = contour_in_files(*key, people, settings.maps.marked, settings.seed)
        found = done[key]
        for record in output.records if found is not None else ():
            assert found is not None, "the loop is empty otherwise"
            record["contour"], record["contour_p"] = found.share, found.p
            record["contour_step_p"] = found.p_steps
            if found.flagged:
                record["sentence"] += f" {found.describe()}"


def _people(roi: Roi, n_maps: int) -> list[str]:
    """Who each map counts as."""
    rows = roi.tested if len(roi.tested.subjects) == n_maps else roi.tested.by_run()
    return rows.people


def contour_in_files(
    mask: Path,
    maps: Sequence[Path],
    people: Sequence[str],
    missing: Missing | None = None,
    seed: int = 0,
) -> Contour | None:
    """The shape check of a mask on maps; None where its boundary has too few voxels with data.

    Parameters
    ----------
    mask : Path
    maps : sequence of Path
        On the mask's grid.
    people : sequence of str
        Per map: who it counts as; the maps of one person are averaged.
    missing : Missing, optional
    seed : int
        Of the flips.

    Raises
    ------
    InputError
        When the mask is empty or on another grid; for fewer than four people.
    """
    missing = missing or Missing()
    labels = sorted(set(people))
    if len(labels) < _LEAST_PEOPLE:
        raise InputError(
            "too few people for the shape check",
            where=str(mask),
            expected=f"at least {_LEAST_PEOPLE} who count as independent",
            got=str(len(labels)),
        )
    like = geometry_of(open_image(maps[0]))
    inside, _ = read_mask(mask, (str(maps[0]), like))

    def averaged(label: str) -> Floats:
        mine = [path for path, person in zip(maps, people, strict=True) if person == label]
        read = [read_map(path)[0].astype(float) for path in mine]
        present = np.all([missing.present(data) for data in read], axis=0)
        made: Floats = np.where(present, np.mean(read, axis=0), np.nan).ravel()
        return made

    S, Q = np.zeros(inside.size), np.zeros(inside.size)
    for label in labels:  # one map after the other: the study need not fit into memory
        values = averaged(label)
        S += values
        Q += np.square(values)
    t = t_from_sums(float(len(labels)), S, Q)
    used = np.isfinite(S) & np.isfinite(t)
    grid = Grid(like.shape, np.array(like.affine), used)
    edge = boundary(inside.ravel()[used], grid)
    if edge is None:
        return None
    places = grid.voxels[edge.features]
    effects = np.stack([averaged(label)[places] for label in labels])
    return contour(t[used], effects, edge, grid, labels, seed)


def check_mask(mask: Path, settings: Settings, only: str = "") -> list[tuple[Roi, Contour | None]]:
    """The shape check of a mask file on the tested maps of a study's regions.

    Parameters
    ----------
    mask : Path
    settings : Settings
    only : str
        A region's name; else the first region of each set of maps.

    Raises
    ------
    InputError
        When no region has this name, or each subject's maps have a grid of their own.
    """
    known = [roi for roi in settings.rois if not roi.variant_of]
    if only and only not in [roi.name for roi in known]:
        raise InputError(
            "no such region in the study",
            got=repr(only),
            expected=f"one of {', '.join(roi.name for roi in known)}",
        )
    if settings.maps.own_grids:
        raise InputError(
            'the shape check needs maps on one grid, and grids = "own" says that they are not',
            remedy="check the mask on maps that were brought to one space",
        )
    made: list[tuple[Roi, Contour | None]] = []
    for roi in known:
        if (roi.name == only) if only else roi.tested not in [one.tested for one, _ in made]:
            made.append((roi, _on_maps_of(roi, mask, settings)))
    return made


def _on_maps_of(roi: Roi, mask: Path, settings: Settings) -> Contour | None:
    first = settings.root / roi.tested.subjects[0][1][0].path
    like, given = ((str(path), geometry_of(open_image(path))) for path in (first, mask))
    check_same_grid(like, [given], "resample it to that grid")
    with chdir(Path.cwd()), tempfile.TemporaryDirectory() as folder:  # the engine goes elsewhere
        workflow = Workflow(name="shape", base_dir=folder)
        workflow.config["execution"] = {"crashdump_dir": folder, "create_report": "false",
                                        "remove_unnecessary_outputs": "false"}  # fmt: skip
        null_value = settings.maps.null_value != 0
        workflow.add_nodes([subject_maps(settings, roi.tested, "maps", null_value=null_value)])
        (node,) = workflow.run(plugin=GuardPlugin(settings.study)).nodes()
        maps = [Path(path) for path in node.result.outputs.out_files]
        return contour_in_files(mask, maps, roi.tested.people, settings.maps.marked, settings.seed)
