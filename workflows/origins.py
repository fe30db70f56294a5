"""Regions from outside, as the ledger knows them: declared when, and like what that a run made.

A region is recognised by what it selects (see `likeness`), not by its file. It is compared with
the masks that runs of this study recorded before it was declared:

- the same voxels: it derives from what that mask was chosen on, and the guard judges it so;
- alike (`DICE`, `CONTAINED`, or a centre within one FWHM of a recorded centre or peak), and that
  mask was chosen on data that are tested here: unproven, until somebody explains it. The FWHM is
  that of the tested maps' residuals, unless the study file states one.

Masks that were recorded after the declaration do not count: a region that was stated first and
then found again has succeeded.
"""

from __future__ import annotations

import shlex
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, fields, replace
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np

from ..nodes.errors import InputError
from ..nodes.groupmaps import Missing
from ..nodes.images import (
    Geometry,
    check_same_grid,
    geometry_of,
    n_volumes,
    open_image,
    read_label_table,
    read_labels,
    read_map,
    read_mask,
    table_beside,
)
from ..nodes.likeness import VoxelSet, contained, dice, distance, same, unpacked, voxel_set
from ..nodes.masks import sphere
from ..nodes.regions import combined, eroded, labelled, mirrored, numbers_of
from ..nodes.regrid import nearest_label
from ..nodes.smoothness import fwhm_of_stack
from ..nodes.space import Grid
from ..nodes.touch import ENTITIES, Unit, UnitTable
from .digests import digest, digest_text
from .ledger import ARTEFACT, DECLARATION, UNITS, WAIVER, Chain, Entry, Ledger
from .regions import Ball, Combined, Eroded, Given, Labels, MaskFile, Mirrored, Region
from .rois import Roi
from .selection import Selection
from .settings import Settings
from .study import Doubt, Origin, Row, Study

DICE, CONTAINED = 0.8, 0.9
FWHM_MM = 8.0  # where nothing says how smooth the maps are
_FROM = 40  # maps that are read to see it
_FEWEST = 4
EXPLAINED = "explained"


@dataclass(frozen=True)
class Selected:
    """A region that is given: what it selects, and where that is said to come from.

    Parameters
    ----------
    what : str
        In words.
    sources : tuple of str
        The origins of its parts.
    files : tuple of str
        Relative to the study; none for a sphere, and for what is made of several parts.
    selects : str
        A digest of the voxels it selects, whatever file holds them.
    labels : tuple of int
        Those of an atlas; none for all of them.
    derived_from : tuple of Unit
    call : str
        What follows ``sequester declare`` to name it; "" for what is made of several parts.
    """

    what: str
    sources: tuple[str, ...]
    files: tuple[str, ...]
    selects: str
    labels: tuple[int, ...] = ()
    derived_from: tuple[Unit, ...] = ()
    call: str = ""


Named = tuple[str, Geometry]
Found = tuple[Selected, list[VoxelSet]]


# -- what a region selects ------------------------------------------------------------------------


def given_regions(settings: Settings, roi: Roi) -> Iterator[Found]:
    """The given regions of a ROI with their voxels: masks, spheres, labels, what is made of them.

    Where each subject has a file of their own, one for each subject.
    """
    seen: set[tuple[str, ...]] = set()
    for sub, rows in roi.tested.subjects if roi.region.of_each else roi.tested.subjects[:1]:
        path = settings.root / rows[0].path
        like = (str(path), geometry_of(open_image(path)))
        for leaf in roi.region.leaves():
            key = tuple(name.replace("{sub}", sub) for name in leaf.files) or (leaf.describe(),)
            if key not in seen:
                seen.add(key)
                yield _of_leaf(leaf, settings.root, sub, like)
        if list(roi.region.parts()):
            made = voxel_set(_mask(roi.region, settings.root, sub, like), like[1].affine)
            sources = tuple(dict.fromkeys(leaf.origin for leaf in roi.region.leaves()))
            yield Selected(roi.region.describe(), sources, (), made.digest), [made]


def _of_leaf(leaf: Given, root: Path, sub: str, like: Named) -> Found:
    files = tuple(name.replace("{sub}", sub) for name in leaf.files)
    derived = tuple(replace(u, sub=sub) if u.sub == "{sub}" else u for u in leaf.derived_from)
    head = (leaf.describe().replace("SUB", sub) if files else leaf.describe(), (leaf.origin,))
    if isinstance(leaf, Labels):
        table = read_label_table(root / files[1]) if len(files) > 1 else ()
        numbers = numbers_of(leaf.labels, table, str(root / files[-1]))
        selects, sets = atlas_sets(root / files[0], numbers)
        named = " ".join(f"--label {number}" for number in numbers) or "--all-labels"
        call = f"{shlex.quote(files[0])} {named}"
        return Selected(*head, files, selects, numbers, derived, call), sets
    if isinstance(leaf, Ball):
        centre = " ".join(f"{x:g}" for x in leaf.centre)
        call = f"--centre {centre} --radius {leaf.radius:g}"
        made = voxel_set(_mask(leaf, root, sub, like), like[1].affine)
        selects = sphere_digest(leaf.centre, leaf.radius)
        return Selected(*head, files, selects, (), derived, call), [made]
    made = mask_set(root / files[0])
    return Selected(*head, files, made.digest, (), derived, shlex.quote(files[0])), [made]


def mask_set(path: Path) -> VoxelSet:
    """The voxels of a mask file."""
    data, geometry = read_map(path)
    try:
        return voxel_set(data, geometry.affine)
    except InputError as error:
        raise error.at(str(path)) from error


def atlas_sets(path: Path, numbers: Sequence[int]) -> tuple[str, list[VoxelSet]]:
    """The digest of a label image, and the voxels of some labels together, or of each alone.

    Parameters
    ----------
    path : Path
    numbers : sequence of int
        Together; none: each label of the image.
    """
    volume, geometry = read_labels(path)
    each = {}
    for number in np.unique(volume[volume != 0]):
        at = np.nonzero(volume == number)
        box = tuple(slice(int(axis.min()), int(axis.max()) + 1) for axis in at)
        shift = np.eye(4)
        shift[:3, 3] = [part.start for part in box]
        each[int(number)] = voxel_set(volume[box] == number, geometry.affine @ shift)
    if not each:
        raise InputError("label image without labels", where=str(path), got="0 at every voxel")
    text = "".join(f"{number} {each[number].digest}\n" for number in sorted(each))
    if numbers:
        mask = labelled(volume, numbers, str(path))
        return digest_text(text), [voxel_set(mask, geometry.affine)]
    return digest_text(text), [each[number] for number in sorted(each)]


def sphere_digest(centre: Iterable[float], radius: float) -> str:
    """What stands for a sphere, on whatever grid: its centre and radius in mm."""
    return digest_text("sphere " + " ".join(f"{x:.6g}" for x in (*centre, radius)))


def _mask(region: Region, root: Path, sub: str, like: Named) -> Any:
    """A region's mask on a grid, as the nodes of the workflow make it."""
    target = Grid(like[1].shape, like[1].affine)
    if isinstance(region, Combined):
        return combined([_mask(part, root, sub, like) for part in region.of], region.how)
    if isinstance(region, Eroded):
        return eroded(_mask(region.of, root, sub, like), target, region.mm)
    if isinstance(region, Mirrored):
        return mirrored(_mask(region.of, root, sub, like), target, region.how)
    if isinstance(region, Ball):
        return target.filled(sphere(target, region.centre, region.radius))
    assert isinstance(region, MaskFile | Labels), "the other kinds are above"
    paths = [root / name.replace("{sub}", sub) for name in region.files]
    if isinstance(region, MaskFile):
        return read_mask(paths[0], like, regrid=region.regrid)[0]
    table = read_label_table(paths[1]) if len(paths) > 1 else ()
    volume, geometry = read_labels(paths[0])
    mask = labelled(volume, numbers_of(region.labels, table, str(paths[-1])), str(paths[0]))
    if not region.regrid or geometry.same_as(like[1]):
        return mask
    source = Grid(geometry.shape, geometry.affine)
    return nearest_label(mask.astype(np.uint8), source, target).reshape(like[1].shape) != 0


# -- units in a ledger ----------------------------------------------------------------------------


def unit_record(unit: Unit) -> dict[str, str]:
    """A unit as plain types: the entities that are not blank."""
    return {f.name: value for f in fields(unit) if (value := getattr(unit, f.name))}


def units_body(table: UnitTable) -> dict[str, Any]:
    """The entry that numbers a study's units; others refer to it by its ``id``."""
    listed = [unit_record(unit) for unit in table.units]
    text = "\n".join(" ".join(f"{k}={v}" for k, v in one.items()) for one in listed)
    return {"kind": UNITS, "id": digest_text(text)[:16], "units": listed}


def set_record(bits: int, table: UnitTable) -> dict[str, list[int]]:
    """A set of units as row numbers, of those inside or of those not, whichever are fewer."""
    inside, outside = list(table.numbers(bits)), list(table.numbers(table.everything & ~bits))
    return {"units": inside} if len(inside) <= len(outside) else {"all_but": outside}


@dataclass(frozen=True)
class Made:
    """A mask that a run made and recorded.

    Parameters
    ----------
    name : str
        Its file's name among the results.
    entry : Entry
    chosen_on : int
        The set of units it was chosen on, in the study's table as it is now.
    points : tuple of (x, y, z)
        Its centre, and the peak of what chose it: mm.
    number : int
        Its place in `Recorded.sets`.
    """

    name: str
    entry: Entry
    chosen_on: int
    points: tuple[tuple[float, ...], ...]
    number: int


class Recorded:
    """What a ledger holds, in terms of a study's table as it is now.

    Parameters
    ----------
    chain : Chain
    table : UnitTable
    options : str
        What ``sequester declare`` needs besides, when the ledger is no study file's.

    Attributes
    ----------
    made : list of Made
    sets : list of VoxelSet
        The voxels of each.
    fwhm : dict of Selection to float
        How smooth maps were found to be, in mm, so far.
    """

    def __init__(self, chain: Chain, table: UnitTable, options: str = "") -> None:
        self.chain, self.table, self.options = chain, table, options
        there = set(table.units)
        self._bits: dict[str, list[int]] = {}
        for entry in chain.of_kind(UNITS):
            units = [Unit(**record) for record in entry.body["units"]]
            self._bits[entry.body["id"]] = [
                table.overlapping(table.bits([unit])) if unit in there else table.matching(unit)
                for unit in units
            ]
        self.made: list[Made] = []
        self.sets: list[VoxelSet] = []
        self.fwhm: dict[Selection, float] = {}
        for entry in chain.of_kind(ARTEFACT):
            of = entry.body["of"]
            everything = self._rows(of, entry.body["chosen_on"])
            for record in entry.body["masks"]:
                points = (tuple(record["centre"]), *map(tuple, record["peaks"]))
                rows = record.get("only", everything - set(record.get("without", ())))
                bits = self._union(of, rows)
                self.made.append(Made(record["name"], entry, bits, points, len(self.made)))
            self.sets += unpacked(entry.body["sets"])
        self._low = np.array([one.mm.min(axis=0) for one in self.sets]).reshape(-1, 3)
        self._high = np.array([one.mm.max(axis=0) for one in self.sets]).reshape(-1, 3)
        self._mm3 = np.array([one.mm3 for one in self.sets])

    def bits(self, of: str, record: Mapping[str, Sequence[int]]) -> int:
        """The units of the table that overlap a recorded set."""
        return self._union(of, self._rows(of, record))

    def _rows(self, of: str, record: Mapping[str, Sequence[int]]) -> set[int]:
        if "units" in record:
            return set(record["units"])
        return set(range(len(self._bits[of]))) - set(record["all_but"])

    def _union(self, of: str, numbers: Iterable[int]) -> int:
        found = 0
        for number in numbers:
            found |= self._bits[of][number]
        return found

    def declared(self, chosen: Selected) -> Entry | None:
        """The first entry that declares what a region selects."""
        for entry in self.chain.of_kind(DECLARATION):
            labels = entry.body["labels"]
            within = not labels or (chosen.labels and set(chosen.labels) <= set(labels))
            if chosen.selects in entry.body["selects"] and within:
                return entry
        return None

    def before(self, chosen: Selected) -> list[Made]:
        """The masks that were not recorded after a region was declared."""
        stated = self.declared(chosen)
        return [
            one for one in self.made if stated is None or not self.chain.precedes(stated, one.entry)
        ]

    def explained(self, chosen: Selected, one: Made) -> bool:
        """Whether somebody has said why a region is like a mask."""
        return any(
            entry.body["field"] == EXPLAINED
            and entry.body["selects"] == chosen.selects
            and self.chain.precedes(one.entry, entry)
            for entry in self.chain.of_kind(WAIVER)
        )

    def equal(self, sets: Sequence[VoxelSet], made: Sequence[Made]) -> list[Made]:
        """Those masks that hold the very voxels of one of some sets."""
        return [one for one in made if any(same(mine, self.sets[one.number]) for mine in sets)]

    def alike(
        self, sets: Sequence[VoxelSet], made: Sequence[Made], fwhm: float
    ) -> tuple[Made, str] | None:
        """The first mask that one of some sets is like, and in what."""
        if not made:
            return None
        numbers = [one.number for one in made]
        low, high, mm3 = self._low[numbers], self._high[numbers], self._mm3[numbers]
        for mine in sets:
            here, there = mine.mm.min(axis=0), mine.mm.max(axis=0)
            meet = ((low <= there) & (high >= here)).all(axis=1)
            # Neither share can be reached when the mask is too small, whatever they have in common.
            for i in np.flatnonzero(meet & (mm3 >= mine.mm3 * DICE / (2 - DICE))).tolist():
                other = self.sets[numbers[i]]
                if (value := dice(mine, other)) >= DICE:
                    return made[i], f"its overlap (Dice) is {value:.2f} with"
                if (value := contained(mine, other)) >= CONTAINED:
                    return made[i], f"{value:.0%} of it is inside"
            for one in made:
                nearest = min(distance(mine.centre, point) for point in one.points)
                if nearest <= fwhm:
                    near = f"(the maps' FWHM is {fwhm:.1f} mm)"
                    return one, f"its centre is {nearest:.1f} mm {near} from that of"
        return None


# -- what follows for a study ---------------------------------------------------------------------


def recognised(settings: Settings, chain: Chain) -> Settings:
    """A study whose origins say what its ledger knows of them.

    Parameters
    ----------
    settings : Settings
    chain : Chain
        Of the study's ledger.

    Returns
    -------
    Settings
        The same, where the ledger knows nothing that the study file does not say.
    """
    if not chain.entries:
        return settings
    table = settings.study.table
    recorded = Recorded(chain, table)
    more: list[Origin] = []
    for roi in settings.rois:
        if not roi.variant_of:
            fwhm, tested = partial(_fwhm, settings, (roi,), recorded), tested_units(roi, table)
            for chosen, sets in given_regions(settings, roi):
                more += known_of(chosen, sets, tested, recorded, fwhm)
    if not more:
        return settings
    origins = tuple(dict.fromkeys((*settings.study.origins, *more)))
    return replace(settings, study=replace(settings.study, origins=origins))


def tested_units(roi: Roi, table: UnitTable) -> int:
    """The set of units that a ROI is tested on."""
    return table.bits(row.unit for row in roi.tested.rows)


def known_of(
    chosen: Selected,
    sets: Sequence[VoxelSet],
    tested: int,
    recorded: Recorded,
    fwhm: Callable[[], float],
) -> Iterator[Origin]:
    """What a ledger adds to the origins of one region.

    Parameters
    ----------
    chosen : Selected
    sets : sequence of VoxelSet
        Its voxels; of an atlas, those of each label.
    tested : int
        The set of units that it is tested on.
    recorded : Recorded
    fwhm : callable
        How smooth the maps are, in mm; asked only when there is a mask to compare with.
    """
    table, stated = recorded.table, 0
    for unit in chosen.derived_from:
        stated |= table.matching(unit)
    for entry in recorded.chain.of_kind(DECLARATION):
        units = tuple(Unit(**record) for record in entry.body["derived_from"])
        if units and chosen.selects in entry.body["selects"]:
            yield from _added(chosen, f"declared with source {entry.body['sources'][0]}", units)
            stated |= table.bits(u for p in units for u in table.units_of(table.matching(p)))
    before = recorded.before(chosen)
    equal = recorded.equal(sets, before)
    bits = 0
    for one in equal:
        bits |= one.chosen_on
    if bits:
        what = f"the same voxels as {equal[0].name}, which a run recorded"
        yield from _added(chosen, what, tuple(table.units_of(bits)))
        return
    doubtful = [
        one
        for one in before
        if one.chosen_on & tested & ~stated and not recorded.explained(chosen, one)
    ]
    found = recorded.alike(sets, doubtful, fwhm()) if doubtful else None
    if found is not None:
        what = f"like {found[0].name}, which a run recorded"
        yield from _added(chosen, what, (), (_doubt(chosen, *found, recorded),))


def _fwhm(settings: Settings, rois: Sequence[Roi], recorded: Recorded) -> float:
    """How smooth the maps of some ROIs are, in mm: a voxel at least."""
    if settings.fwhm is not None:
        return settings.fwhm
    if settings.maps.own_grids:
        return FWHM_MM
    for roi in rois:
        if roi.tested not in recorded.fwhm:
            measured = _measured_fwhm(settings.root, roi.tested, settings.maps.missing)
            recorded.fwhm[roi.tested] = measured
    return max(recorded.fwhm[roi.tested] for roi in rois)


def _measured_fwhm(root: Path, tested: Selection, missing: Missing) -> float:
    """From the residuals of one map for each of some subjects."""
    rows = [listed[0] for _, listed in tested.subjects[:_FROM]]
    if len(rows) < _FEWEST:
        return FWHM_MM
    read = [read_map(root / row.path, row.volume) for row in rows]
    first, *others = ((row.name, made) for row, (_, made) in zip(rows, read, strict=True))
    check_same_grid(first, others)
    grid = Grid(read[0][1].shape, read[0][1].affine)
    effects = np.stack([data.ravel() for data, _ in read])
    sides = np.linalg.norm(grid.affine[:3, :3], axis=0)
    width = float(np.nanmean(sides * fwhm_of_stack(effects, grid, missing)))
    return max(width, float(sides.max())) if np.isfinite(width) else FWHM_MM


def _doubt(chosen: Selected, one: Made, how: str, recorded: Recorded) -> Doubt:
    """That a region is like a mask which was chosen on the data it would be tested on."""
    stated = recorded.declared(chosen)
    if stated is None:
        when = "and no entry declares this region"
    elif recorded.chain.precedes(one.entry, stated):
        when = f"before this region was declared in entry {stated.number}"
    else:
        when = f"on another branch than the region's declaration in entry {stated.number}"
    return Doubt(
        f"{chosen.what} (like {one.name})",
        f"{chosen.what} is like a mask that was chosen on the data it would be tested on: {how} "
        f"{one.name}, which a run recorded in entry {one.entry.number} of the ledger, {when}",
        "if it was made from these data, say so with derived_from; if it is like that mask for "
        f"another reason, say which{'' if chosen.call else ', of the region saved as one MASK'}: "
        f"sequester declare {chosen.call or 'MASK'} --source TEXT --explained TEXT"
        + recorded.options,
    )


def _added(
    chosen: Selected, what: str, units: tuple[Unit, ...], doubts: tuple[Doubt, ...] = ()
) -> Iterator[Origin]:
    """More of a region's origin: of its file alone, or of its source where it has none."""
    for source in chosen.sources:
        said = f"{source} ({what})" if chosen.files else source
        yield Origin(said, chosen.files[:1], units, doubts)


# -- what a study declares ------------------------------------------------------------------------


def declarations(settings: Settings, chain: Chain) -> list[dict[str, Any]]:
    """The entries of what a study file declares and waives that its ledger does not have yet."""
    made: dict[tuple[str, tuple[str, ...], tuple[int, ...]], dict[str, Any]] = {}
    for roi in settings.rois:
        for chosen, _ in given_regions(settings, roi) if not roi.variant_of else ():
            key = (chosen.what, chosen.sources, chosen.labels)
            body = made.setdefault(key, declaration(chosen, (), settings.root))
            if roi.name not in body["rois"]:
                body["rois"].append(roi.name)
            if chosen.selects not in body["selects"]:
                more = declaration(chosen, (), settings.root)
                for name in ("files", "selects", "derived_from"):
                    body[name] += more[name]
    of_regions = {record["path"] for body in made.values() for record in body["files"]}
    listed = [*made.values()]
    for origin in settings.study.origins:
        if origin.files and not of_regions.issuperset(origin.files):
            listed.append(of_origin(origin, settings.root))
    return [*new_declarations(listed, chain), *new_waivers(_waivers(settings), chain)]


def new_declarations(listed: Iterable[dict[str, Any]], chain: Chain) -> list[dict[str, Any]]:
    """Those declarations that a ledger does not have yet, each once."""
    known = {_what_counts(entry.body) for entry in chain.of_kind(DECLARATION)}
    new = {_what_counts(body): body for body in listed if _what_counts(body) not in known}
    return [*new.values()]


def new_waivers(listed: Iterable[dict[str, Any]], chain: Chain) -> list[dict[str, Any]]:
    """Those waivers that a ledger does not have yet, each once."""
    made: list[dict[str, Any]] = []
    waived = [dict(entry.body) for entry in chain.of_kind(WAIVER)]
    for body in listed:
        if _without_kind(body) not in waived and body not in made:
            made.append(body)
    return made


def declaration(chosen: Selected, rois: Sequence[str], root: Path) -> dict[str, Any]:
    """The entry that declares one region."""
    return {
        "kind": DECLARATION,
        "what": chosen.what,
        "sources": list(chosen.sources),
        "rois": list(rois),
        "files": [{"path": name, "sha256": digest(root / name)} for name in chosen.files],
        "selects": [chosen.selects],
        "labels": list(chosen.labels),
        "derived_from": [unit_record(unit) for unit in chosen.derived_from],
    }


def explanation(chosen: Selected, text: str) -> dict[str, Any]:
    """The entry that explains why a region is like a recorded mask."""
    return {"kind": WAIVER, "field": EXPLAINED, "selects": chosen.selects, "says": text}


def of_origin(origin: Origin, root: Path) -> dict[str, Any]:
    """The entry of an origin: files of any kind, or none; of images also what they select."""
    selects = [one for name in origin.files for one in _selected_by(root / name)]
    return {
        "kind": DECLARATION,
        "what": origin.files[0] if len(origin.files) == 1 else f"{len(origin.files)} files",
        "sources": [origin.source],
        "rois": [],
        "files": [{"path": name, "sha256": digest(root / name)} for name in origin.files],
        "selects": list(dict.fromkeys(selects)),
        "labels": [],
        "derived_from": [unit_record(unit) for unit in origin.derived_from],
    }


def is_volume(path: Path) -> bool:
    """Whether a file is an image of one volume."""
    image = path.name.endswith((".nii", ".nii.gz", ".hdr", ".img"))
    return image and n_volumes(path, open_image(path)) == 1


def _selected_by(path: Path) -> Iterator[str]:
    """What an image selects as a mask, and as labels when it can be those."""
    if not is_volume(path):
        return
    data, geometry = read_map(path)
    inside = data[np.isfinite(data) & (data != 0)]
    if inside.size:
        yield voxel_set(data, geometry.affine).digest
        if np.array_equal(inside, np.rint(inside)) and np.abs(inside).max() < 2**31:
            yield atlas_sets(path, ())[0]


def _waivers(settings: Settings) -> Iterator[dict[str, Any]]:
    for roi in settings.rois:
        if roi.these_subjects:
            says = "the claim is about these subjects only"
            reason = {"reason": roi.claim_reason} if roi.claim_reason else {}
            yield {"kind": WAIVER, "field": "claim", "roi": roi.name, "says": says, **reason}
        if roi.certificate is not None:
            says = roi.certificate.describe()
            yield {"kind": WAIVER, "field": "certificate", "roi": roi.name, "says": says}


def _without_kind(body: Mapping[str, Any]) -> dict[str, Any]:
    return {name: value for name, value in body.items() if name != "kind"}


def _what_counts(body: Mapping[str, Any]) -> str:
    """Two declarations are one when they say the same of the same voxels (or files)."""
    files = () if body["selects"] else [record["sha256"] for record in body["files"]]
    names = ("sources", "selects", "labels", "derived_from")
    return repr([body[name] for name in names] + list(files))


# -- by hand --------------------------------------------------------------------------------------


def unit_of(text: str, study: Study) -> Unit:
    """The study's data that ``"sub=01,task=lanterns"`` names.

    Raises
    ------
    InputError
        When it names none.
    """
    pairs = [part.partition("=")[::2] for part in text.split(",")]
    unknown = [name for name, _ in pairs if name.strip() not in (*ENTITIES, "suffix")]
    if unknown:
        raise InputError(
            "derived-from with an unknown entity",
            expected=", ".join((*ENTITIES, "suffix")) + ": sub=01,task=lanterns",
            got=repr(text),
        )
    unit = Unit(**{name.strip(): value.strip() for name, value in pairs})
    if not study.table.matching(unit):
        raise InputError(
            "derived-from names no data of the study",
            expected=f"such as {study.table.units[0]}",
            got=repr(text),
            remedy="write the labels as in the study table: 01 is not 1",
        )
    return unit


def given_by_hand(
    study: Study,
    path: Path | None,
    source: str,
    derived: tuple[Unit, ...],
    labels: Sequence[str],
    all_labels: bool,
    centre: tuple[float, float, float] | None,
    radius: float | None,
) -> Given | None:
    """The region that the options of ``declare`` give; None when they give none.

    Raises
    ------
    InputError
        When they do not go together.
    """
    if path is None and centre is None and not (radius or labels or all_labels):
        return None
    if (path is None) == (centre is None) or (centre is None) != (radius is None):
        raise InputError(
            "declare needs one region",
            expected="MASK, or --centre X Y Z with --radius R",
            got="both" if path is not None else "neither" if centre is None else "no radius",
        )
    if not source:
        raise InputError(
            "a region without a source",
            expected='--source "where it comes from, with a reference"',
        )
    if path is None:
        if labels or all_labels:
            raise InputError("labels do not go with a sphere", expected="an atlas before --label")
        assert centre is not None and radius is not None, "checked above"
        return Ball(source, derived, "", centre, radius)
    name = study.relative(path.absolute())
    if not labels and not all_labels:
        return MaskFile(source, derived, "", name)
    table = table_beside(path)
    names = study.relative(table.absolute()) if table is not None else ""
    numbers = tuple(int(text) if text.lstrip("-").isdecimal() else text for text in labels)
    return Labels(source, derived, "", name, numbers, names)


def declare(
    settings: Settings,
    region: Given | None,
    explained: str = "",
) -> tuple[list[Entry], list[str]]:
    """Declare one region, or all that a study file states, in the study's ledger.

    Parameters
    ----------
    settings : Settings
    region : Given or None
        None: what the study file states.
    explained : str
        Why the region is like a mask that a run recorded.

    Returns
    -------
    entries : list of Entry
        The new ones.
    notes : list of str
        What the ledger knows of the region.
    """
    if region is None:
        ledger = Ledger(settings.ledger)
        ledger.check_writable()
        return ledger.extend(partial(declarations, settings)), []
    study, tested = settings.study, 0
    for roi in settings.rois:
        tested |= tested_units(roi, study.table)

    def fwhm(recorded: Recorded) -> float:
        return _fwhm(settings, settings.rois, recorded)

    return _declare(settings.ledger, study, settings.used[0], region, explained, tested, fwhm)


def declare_in(
    ledger: Path, study: Study, region: Given, explained: str = ""
) -> tuple[list[Entry], list[str]]:
    """Declare one region in the ledger of a workflow that is no study file's.

    Parameters
    ----------
    ledger : Path
    study : Study
    region, explained : as in `declare`
    """
    everything = study.table.everything
    return _declare(ledger, study, study.rows[0], region, explained, everything, lambda _: FWHM_MM)


def _declare(
    path: Path,
    study: Study,
    like: Row,
    region: Given,
    explained: str,
    tested: int,
    fwhm: Callable[[Recorded], float],
) -> tuple[list[Entry], list[str]]:
    ledger = Ledger(path)
    ledger.check_writable()
    grid = study.root / like.path
    chosen, sets = _of_leaf(region, study.root, "", (str(grid), geometry_of(open_image(grid))))
    said = [declaration(chosen, (), study.root)]
    said += [explanation(chosen, explained)] if explained else []

    def new(chain: Chain) -> list[dict[str, Any]]:
        return [*new_declarations(said[:1], chain), *said[1:]]

    made = ledger.extend(new)
    recorded = Recorded(ledger.sound(), study.table)
    more = known_of(chosen, sets, tested, recorded, partial(fwhm, recorded))
    return made, [
        f"{origin.doubts[0].reason}; {origin.doubts[0].cure}" if origin.doubts else origin.source
        for origin in more
    ]
