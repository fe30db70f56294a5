"""The shape check of every mask from outside: does it follow the contour of the tested maps?

Every label of a family is a mask of its own. Its p is that of the label alone: an adjustment over
a hundred labels would ask for a p below any that the number of places in a map allows, so it is
said instead how many are flagged, and how many would be by chance. Where each subject has a mask
of their own, or maps on a grid of their own, there is no one boundary in one group map to look at.

Nobody can see in a file how it was made. A mask that was thresholded from the study's own data
shows it by its boundary (`nodes.contour`). A flag is a report beside the result, no refusal.
"""

from __future__ import annotations

import math
import tempfile
from collections.abc import Iterable, Iterator, Sequence
from contextlib import chdir
from pathlib import Path
from typing import Any

import numpy as np
from nipype import Workflow

from ..nodes.contour import FLAG, Boundary, Contour, boundary, contour
from ..nodes.errors import InputError
from ..nodes.groupmaps import Missing, t_from_sums
from ..nodes.images import (
    Bools,
    Floats,
    check_same_grid,
    geometry_of,
    open_image,
    read_labels,
    read_map,
    read_mask,
)
from ..nodes.space import Grid
from .build import subject_maps
from .collect import RoiOutput
from .guard import GuardPlugin
from .ledger import Ledger, shelf_of
from .origins import Recorded, mask_set
from .regions import Whole
from .rois import Roi
from .settings import Settings

_LEAST_PEOPLE = 4  # with three, eight flips
_FLIPS_OF_MANY = 299  # of each label of a family: enough for p = .01
_MOST_VALUES = 20_000_000  # held at once: 160 MB
TOO_SMALL = "The mask's boundary has too few voxels with data for the shape check."


def check_masks(outputs: Sequence[RoiOutput], settings: Settings) -> None:
    """Check every region that came from outside and is one mask, or one label image, for all.

    Its figures go into the records: ``contour``, ``contour_p``, ``contour_step_p``, and a
    sentence when it is flagged, or cannot be checked.
    """
    done: dict[tuple[Path, tuple[Path, ...]], Contour | None] = {}
    for output in outputs:
        if output.roi.variant_of or isinstance(output.roi.region, Whole):
            continue
        people = _people(output.roi, len(output.maps))
        if why := _cannot(output, settings, people):
            for record in output.records:
                record["sentence"] += f" Shape check: not made, because {why}."
            continue
        if output.roi.each_label:
            _check_family(output, people, settings)
            continue
        if len(output.searched) != 1:
            continue
        key = (output.searched[0], output.maps)
        if key not in done:
            done[key] = contour_in_files(*key, people, settings.maps.marked, settings.seed)
        for record in output.records:
            _tell(record, done[key])


def _cannot(output: RoiOutput, settings: Settings, people: Sequence[str]) -> str:
    """Why a region is not checked; "" when it can be."""
    if settings.maps.own_grids:
        return "the maps share no grid, and so have no group map"
    if output.roi.region.of_each:
        return "each subject has a region of their own, and the group map's contour is no one's"
    if len(set(people)) < _LEAST_PEOPLE:
        return f"it needs {_LEAST_PEOPLE} independent subjects"
    return ""


def _check_family(output: RoiOutput, people: Sequence[str], settings: Settings) -> None:
    """Check every label that is a region of its own."""
    (image,) = output.masks
    volume, _ = read_labels(image.path)
    numbers = [record["parcel"] for record in output.records]
    made = contours_in_files(
        (volume == number for number in numbers),
        output.maps,
        people,
        settings.maps.marked,
        settings.seed,
        _FLIPS_OF_MANY,
    )
    flagged = sum(found is not None and found.flagged for found in made)
    could = sum(found is not None for found in made)
    for record, found in zip(output.records, made, strict=True):
        _tell(record, found)
        if found is not None and found.flagged:
            record["sentence"] += (
                f" It is one of {flagged} such among the {could} labels that were checked; by "
                f"chance alone {FLAG * could:.2g} would be."
            )


def _tell(record: dict[str, Any], found: Contour | None) -> None:
    """Put the figures of a check into a record."""
    if found is None:
        return
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
    inside, _ = read_mask(mask, (str(maps[0]), geometry_of(open_image(maps[0]))))
    try:
        (found,) = contours_in_files([inside], maps, people, missing, seed)
    except InputError as error:
        raise error.at(str(mask)) from error
    return found


def contours_in_files(
    masks: Iterable[Bools],
    maps: Sequence[Path],
    people: Sequence[str],
    missing: Missing | None = None,
    seed: int = 0,
    n: int = 499,
) -> list[Contour | None]:
    """The shape check of several masks on the same maps, which need not fit into memory.

    Parameters
    ----------
    masks : iterable of (x, y, z) bool
        On the maps' grid.
    maps, people, missing, seed : as in `contour_in_files`
    n : int
        Flips, and placements at most.
    """
    missing = missing or Missing()
    labels = sorted(set(people))
    if len(labels) < _LEAST_PEOPLE:
        raise InputError(
            "too few people for the shape check",
            expected=f"at least {_LEAST_PEOPLE} who count as independent",
            got=str(len(labels)),
        )
    like = geometry_of(open_image(maps[0]))

    def averaged(label: str) -> Floats:
        mine = [path for path, person in zip(maps, people, strict=True) if person == label]
        read = [read_map(path)[0].astype(float) for path in mine]
        present = np.all([missing.present(data) for data in read], axis=0)
        made: Floats = np.where(present, np.mean(read, axis=0), np.nan).ravel()
        return made

    size = math.prod(like.shape)
    S, Q = np.zeros(size), np.zeros(size)
    for label in labels:  # one map after the other: the study need not fit into memory
        values = averaged(label)
        S += values
        Q += np.square(values)
    t = t_from_sums(float(len(labels)), S, Q)
    used = np.isfinite(S) & np.isfinite(t)
    grid = Grid(like.shape, np.array(like.affine), used)
    edges = [boundary(inside.ravel()[used], grid) for inside in masks]
    made: list[Contour | None] = []
    for some in _batches(edges, len(labels)):
        here = [edge.features for edge in some if edge is not None]
        places = np.unique(np.concatenate(here)) if here else np.empty(0, int)
        effects = np.stack([averaged(label)[grid.voxels[places]] for label in labels])
        for edge in some:
            if edge is None:
                made.append(None)
                continue
            own = effects[:, np.searchsorted(places, edge.features)]
            made.append(contour(t[used], own, edge, grid, labels, seed, n))
    return made


def _batches(edges: Sequence[Boundary | None], n_people: int) -> Iterator[list[Boundary | None]]:
    """The boundaries in their order, in parts whose values fit into memory together."""
    some: list[Boundary | None] = []
    held = 0
    for edge in edges:
        own = 0 if edge is None else len(edge.features) * n_people
        if some and held + own > _MOST_VALUES:
            yield some
            some, held = [], 0
        some.append(edge)
        held += own
    yield some


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


def known_as(mask: Path, settings: Settings) -> str:
    """What the ledgers in the study's folder know of a mask's voxels, in a sentence; "" if nothing.

    Parameters
    ----------
    mask : Path
    settings : Settings

    Raises
    ------
    InputError
        For a ledger that was changed, or an empty mask.
    """
    shelf = shelf_of(settings.ledger, Ledger(settings.ledger).sound())
    recorded = Recorded(shelf, settings.study)
    chosen = [one for one in recorded.made if one.chosen_on]
    equal = recorded.equal([mask_set(mask)], chosen) if chosen else []
    if not equal:
        return ""
    ledger = shelf.name_of(equal[0].entry) or settings.ledger.name
    return (
        f"This mask is one of the study's own: it has the very voxels of {equal[0].name}, which a "
        f"run chose on data of this study and recorded in {ledger}. It derives from these data, "
        "whatever its contour shows."
    )


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
