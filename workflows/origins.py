"""Regions from outside, as the ledger knows them: declared when, and like what that a run made.

A region is recognised by what it selects (see `likeness`), not by its file. It is compared with
the masks that runs of this study recorded before it was declared:

- the same voxels: it derives from what that mask was chosen on, and the guard judges it so;
- alike (`DICE`, `CONTAINED`, or a centre within one FWHM of a recorded centre or peak), and that
  mask was chosen on data that are tested here: unproven, until somebody explains it. The FWHM is
  that of the tested maps' residuals, unless the study file states one;
- the same or alike, and that mask was chosen on maps that are not in this table, of subjects with
  the same labels, in a ledger beside: unproven too. They may be other people, or these data made
  anew.

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
from .digests import digest, digest_text, fingerprint
from .findings import undeclared
from .ledger import (
    ARTEFACT,
    DECLARATION,
    UNITS,
    WAIVER,
    Chain,
    Entry,
    Ledger,
    Shelf,
    shelf_of,
)
from .regions import Ball, Combined, Eroded, Given, Labels, MaskFile, Mirrored, Region
from .rois import Roi
from .selection import Selection
from .settings import Settings
from .study import Doubt, Origin, Row, Study

DICE, CONTAINED = 0.8, 0.9
FWHM_MM = 8.0  # where nothing says how smooth the maps are
_FROM = 40  # maps that are read to see it
_FEWEST = 4
EXPLAINED, LEFT_OUT = "explained", "left_out"


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
    voxels : tuple of str
        Digests of the voxels that are read: of one region, or of each label that is one.
    parts : tuple of str
        Of labels that are read together, the digests of each.
    origins : tuple of Origin
        Of each mask, sphere or atlas that it is made of, what its source speaks of.
    """

    what: str
    sources: tuple[str, ...]
    files: tuple[str, ...]
    selects: str
    labels: tuple[int, ...] = ()
    derived_from: tuple[Unit, ...] = ()
    call: str = ""
    voxels: tuple[str, ...] = ()
    parts: tuple[str, ...] = ()
    origins: tuple[Origin, ...] = ()

    @property
    def key(self) -> str:
        """What it selects: of an atlas, which labels too."""
        return " ".join((self.selects, *map(str, self.labels)))


Named = tuple[str, Geometry]
Found = tuple[Selected, list[VoxelSet]]


# -- what a region selects ------------------------------------------------------------------------


def given_regions(settings: Settings, roi: Roi) -> Iterator[Found]:
    """The given regions of a ROI with their voxels: masks, spheres, labels, what is made of them.

    Where each subject has a file of their own, one for each subject.
    """
    known: dict[tuple[str, ...], Found] = {}
    for sub, rows in roi.tested.subjects if roi.region.of_each else roi.tested.subjects[:1]:
        path = settings.root / rows[0].path
        like = (str(path), geometry_of(open_image(path)))
        made_of: dict[Origin, None] = {}
        for leaf in roi.region.leaves():
            key = (leaf.describe(), *(name.replace("{sub}", sub) for name in leaf.files))
            if key not in known:
                known[key] = _of_leaf(leaf, settings.root, sub, like)
                yield known[key]
            made_of.update(dict.fromkeys(known[key][0].origins))
        if list(roi.region.parts()):
            made = voxel_set(_mask(roi.region, settings.root, sub, like), like[1].affine)
            sources = tuple(dict.fromkeys(origin.source for origin in made_of))
            head = (roi.region.describe(), sources, (), made.digest)
            yield Selected(*head, voxels=(made.digest,), origins=tuple(made_of)), [made]


def _of_leaf(leaf: Given, root: Path, sub: str, like: Named) -> Found:
    files = tuple(name.replace("{sub}", sub) for name in leaf.files)
    derived = tuple(replace(u, sub=sub) if u.sub == "{sub}" else u for u in leaf.derived_from)
    head = (leaf.describe().replace("SUB", sub) if files else leaf.describe(), (leaf.origin,))
    origin = Origin(leaf.origin, files[:1])
    if isinstance(leaf, Labels):
        table = read_label_table(root / files[1]) if len(files) > 1 else ()
        numbers = numbers_of(leaf.labels, table, str(root / files[-1]))
        each = labels_in(root / files[0])
        read = _together(root / files[0], numbers) if numbers else [*each.values()]
        voxels = tuple(one.digest for one in read)
        single = [each[number] for number in numbers]
        parts = tuple(one.digest for one in single)
        named = " ".join(f"--label {number}" for number in numbers) or "--all-labels"
        call = f"{shlex.quote(files[0])} {named}"
        selects = _atlas_digest(each)
        sets = [*read, *(single if len(single) > 1 else ())]
        of = (replace(origin, labels=numbers),)
        return Selected(*head, files, selects, numbers, derived, call, voxels, parts, of), sets
    if isinstance(leaf, Ball):
        centre = " ".join(f"{x:g}" for x in leaf.centre)
        call = f"--centre {centre} --radius {leaf.radius:g}"
        made = voxel_set(_mask(leaf, root, sub, like), like[1].affine)
        selects, here = sphere_digest(leaf.centre, leaf.radius), (made.digest,)
        of = (replace(origin, sphere=(*leaf.centre, leaf.radius)),)
        return Selected(*head, files, selects, (), derived, call, here, origins=of), [made]
    made = mask_set(root / files[0])
    call, here = shlex.quote(files[0]), (made.digest,)
    return Selected(*head, files, made.digest, (), derived, call, here, origins=(origin,)), [made]


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
    each = labels_in(path)
    return _atlas_digest(each), _together(path, numbers) if numbers else [*each.values()]


def _atlas_digest(each: Mapping[int, VoxelSet]) -> str:
    return digest_text("".join(f"{number} {voxels.digest}\n" for number, voxels in each.items()))


def _together(path: Path, numbers: Sequence[int]) -> list[VoxelSet]:
    """The voxels of some labels together."""
    volume, geometry = read_labels(path)
    return [voxel_set(labelled(volume, numbers, str(path)), geometry.affine)]


def labels_in(path: Path) -> dict[int, VoxelSet]:
    """The voxels of each label of a label image, by number, ascending."""
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
    return each


def by_label(chosen: Selected, path: Path) -> Iterator[Found]:
    """A family of labels, each a region of its own.

    Parameters
    ----------
    chosen : Selected
        Some labels of an atlas, or all.
    path : Path
        The atlas.
    """
    selects, _ = atlas_sets(path, ())
    for number, voxels in labels_in(path).items():
        if not chosen.labels or number in chosen.labels:
            what, call = f"label {number} of {chosen.files[0]}", shlex.quote(chosen.files[0])
            one = replace(chosen, what=what, selects=selects, labels=(number,))
            of = tuple(replace(origin, labels=(number,)) for origin in chosen.origins)
            one = replace(one, voxels=(voxels.digest,), parts=(), origins=of)
            yield replace(one, call=f"{call} --label {number}"), [voxels]


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


def units_body(study: Study) -> dict[str, Any]:
    """The entry that numbers a study's units and says which maps they are in.

    Others refer to it by its ``id``.
    """
    listed, maps = [unit_record(unit) for unit in study.table.units], _maps_of(study)
    text = "\n".join(" ".join(f"{k}={v}" for k, v in one.items()) for one in listed)
    text += "".join(f"\n{' '.join(of_unit)}" for of_unit in maps)
    return {"kind": UNITS, "id": digest_text(text)[:16], "units": listed, "maps": maps}


def _maps_of(study: Study) -> list[list[str]]:
    """Per unit that was acquired, the fingerprints of its maps that are there."""
    found: dict[Unit, set[str]] = {row.unit: set() for row in study.rows}
    for row in study.rows:
        path = Path(study.full(row.path))
        path = path.with_suffix(".img") if path.suffix == ".hdr" else path
        if path.is_file():
            volume = "" if row.volume is None else f" {row.volume}"
            found[row.unit].add(f"{fingerprint(path)[:12]}{volume}")
    return [sorted(marks) for marks in found.values()]


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
    namesakes : int
        Where it was chosen on maps that are not in the table: the set of units in it that have
        the same labels.
    points : tuple of (x, y, z)
        Its centre, and the peak of what chose it: mm.
    number : int
        Its place in `Recorded.sets`.
    """

    name: str
    entry: Entry
    chosen_on: int
    namesakes: int
    points: tuple[tuple[float, ...], ...]
    number: int


def _union(bits: Sequence[int], numbers: Iterable[int]) -> int:
    found = 0
    for number in numbers:
        found |= bits[number]
    return found


def _any_of(by_map: Mapping[str, int], marks: Iterable[str]) -> int:
    found = 0
    for mark in marks:
        found |= by_map.get(mark, 0)
    return found


def _voxels_of(entry: Entry) -> set[str]:
    """The digests of the voxels that a declaration speaks of, whatever file they stand in."""
    return {*entry.body["selects"], *entry.body.get("voxels", ())}


def _within(chosen: Selected, labels: Sequence[int]) -> bool:
    """Whether what is said of some labels, or of all when none is named, holds for a region."""
    return not labels or (bool(chosen.labels) and set(chosen.labels) <= set(labels))


class Recorded:
    """What a ledger and those beside it hold, in terms of a study's table as it is now.

    Recorded data are the study's when a map is the same, or no label contradicts. Labels are those
    of one table, though: in a ledger beside the study's own they count only when some map is in
    both tables, or when one of them says nothing of its maps. Else they are of other data, as far
    as can be known.

    Parameters
    ----------
    chain : Shelf
        Its ledger, and those beside it.
    study : Study
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

    def __init__(self, chain: Shelf, study: Study, options: str = "") -> None:
        self.chain, self.table, self.options = chain, study.table, options
        self._bits: dict[str, list[int]] = {}
        self._by_label: set[str] = set()  # units of which only the labels could be compared
        self._others: dict[str, list[int]] = {}  # units of other data: those with their labels
        self._match(study)
        self.made: list[Made] = []
        self.sets: list[VoxelSet] = []
        self.fwhm: dict[Selection, float] = {}
        for entry in chain.of_kind(ARTEFACT):
            of = entry.body["of"]
            everything = self._rows(of, entry.body["chosen_on"])
            for record in entry.body["masks"]:
                points = (tuple(record["centre"]), *map(tuple, record["peaks"]))
                rows = record.get("only", everything - set(record.get("without", ())))
                bits = _union(self._bits[of], rows)
                alike = _union(self._others[of], rows) if of in self._others else 0
                self.made.append(Made(record["name"], entry, bits, alike, points, len(self.made)))
            self.sets += unpacked(entry.body["sets"])
        self._low = np.array([one.mm.min(axis=0) for one in self.sets]).reshape(-1, 3)
        self._high = np.array([one.mm.max(axis=0) for one in self.sets]).reshape(-1, 3)
        self._mm3 = np.array([one.mm3 for one in self.sets])

    def _match(self, study: Study) -> None:
        """Find the recorded units among those of the study."""
        table, listed = study.table, self.chain.of_kind(UNITS)
        there, by_map = set(table.units), dict[str, int]()
        if any("maps" in entry.body for entry in listed):
            for unit, marks in zip(table.units, _maps_of(study), strict=False):
                for mark in marks:
                    by_map[mark] = by_map.get(mark, 0) | table.overlapping(table.bits([unit]))
        for entry in listed:
            of, maps = entry.body["id"], entry.body.get("maps", [])
            if of in self._bits:
                continue  # the study's own entries come first: what they number too is no other's
            units = [Unit(**record) for record in entry.body["units"]]
            bits = [
                table.overlapping(table.bits([unit])) if unit in there else table.matching(unit)
                for unit in units
            ]
            same = [_any_of(by_map, marks) for marks in maps] + [0] * (len(units) - len(maps))
            if self.chain.name_of(entry) and not any(same):
                if by_map and any(maps):
                    self._others[of], bits = bits, same
                else:
                    self._by_label.add(of)
            self._bits[of] = [a | b for a, b in zip(bits, same, strict=True)]

    def of_others(self, entry: Entry) -> bool:
        """Whether an entry is of a ledger that has looked at other data only."""
        name = self.chain.name_of(entry)
        listed = [one for one in self.chain.of_kind(UNITS) if self.chain.name_of(one) == name]
        return bool(name and listed) and all(one.body["id"] in self._others for one in listed)

    def told(self, entry: Entry) -> str:
        """The ledger of an entry, if not the study's own, and how its data were recognised."""
        name = self.chain.name_of(entry)
        if not name:
            return ""
        alone = entry.body.get("of") in self._by_label
        return f"{name}{' (by the labels of its subjects alone)' if alone else ''}"

    def bits(self, of: str, record: Mapping[str, Sequence[int]]) -> int:
        """The units of the table that overlap a recorded set."""
        return _union(self._bits[of], self._rows(of, record))

    def _rows(self, of: str, record: Mapping[str, Sequence[int]]) -> set[int]:
        if "units" in record:
            return set(record["units"])
        return set(range(len(self._bits[of]))) - set(record["all_but"])

    def declarations(self, chosen: Selected) -> Iterator[Entry]:
        """The entries that declare what a region selects, be it saved anew."""
        for entry in self.chain.of_kind(DECLARATION):
            there = _voxels_of(entry)
            of_voxels = (set(one) <= there for one in (chosen.voxels, chosen.parts) if one)
            here = chosen.selects in entry.body["selects"]
            if (here and _within(chosen, entry.body["labels"])) or any(of_voxels):
                yield entry

    def declared_before(self, chosen: Selected, entry: Entry) -> bool:
        """Whether a region was declared when an entry was written."""
        return any(self.chain.precedes(one, entry) for one in self.declarations(chosen))

    def before(self, chosen: Selected) -> list[Made]:
        """The masks that were not recorded after a region was declared."""
        return [one for one in self.made if not self.declared_before(chosen, one.entry)]

    def explained(self, chosen: Selected, one: Made) -> bool:
        """Whether somebody has said why a region is like a mask."""
        return any(
            self.explains(entry, chosen)
            and _within(chosen, entry.body.get("labels", ()))
            and self.chain.may_know(one.entry, entry)
            for entry in self.chain.of_kind(WAIVER)
        )

    def explains(self, entry: Entry, chosen: Selected) -> bool:
        """Whether an entry says why a region, or a label of it, is like a mask."""
        if entry.body["field"] != EXPLAINED or entry.body["selects"] != chosen.selects:
            return False
        labels = set(entry.body.get("labels", ()))
        return not (labels and chosen.labels) or bool(labels & set(chosen.labels))

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


def recognised(settings: Settings, chain: Shelf) -> Settings:
    """A study whose origins say what its ledger knows of them.

    Parameters
    ----------
    settings : Settings
    chain : Shelf
        Of the study's ledger, and of those beside it.

    Returns
    -------
    Settings
        The same, where the ledger knows nothing that the study file does not say.
    """
    if not chain.entries:
        return settings
    table = settings.study.table
    recorded = Recorded(chain, settings.study)
    more: list[Origin] = []
    for roi in settings.rois:
        if not roi.variant_of:
            fwhm, tested = partial(_fwhm, settings, (roi,), recorded), tested_units(roi, table)
            for chosen, sets in given_regions(settings, roi):
                alone = [(chosen, sets)]
                if roi.each_label:
                    alone = [*by_label(chosen, settings.root / chosen.files[0])]
                for one, voxels in alone:
                    more += known_of(one, voxels, tested, recorded, fwhm)
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
        Its voxels; of an atlas, those of each label. Of labels that are read together, all of
        them and each.
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
        labels = entry.body["labels"]
        some = not labels or not chosen.labels or set(labels) & set(chosen.labels)
        here = some and chosen.selects in entry.body["selects"]
        if recorded.of_others(entry):
            continue
        if units and (here or _voxels_of(entry) & {*chosen.voxels, *chosen.parts}):
            if more := tuple(unit for unit in units if unit not in chosen.derived_from):
                yield from _added(chosen, f"declared with source {entry.body['sources'][0]}", more)
            stated |= table.bits(u for p in units for u in table.units_of(table.matching(p)))
    before = recorded.before(chosen)
    equal = recorded.equal(sets, before)
    bits = 0
    for one in equal:
        bits |= one.chosen_on
    if equal:
        first = next((one for one in equal if one.chosen_on), equal[0])
        where = recorded.told(first.entry)
        in_part = len(chosen.parts) > 1 and not recorded.equal(sets[:1], [first])
        what = f"{'one has ' * in_part}the same voxels as {first.name}, which a run recorded"
        what += f" in {where}" if where else ""
        what += "" if bits else ", chosen on data that are not in this table"
        yield from _added(chosen, what, tuple(table.units_of(bits)))
    # What it derives from is known when it is a mask of these data; not so of any others.
    of_these = [] if bits else [one for one in before if one.chosen_on & tested & ~stated]
    compared = equal if bits else [*equal, *before]  # the very same are told of first
    of_others = [one for one in compared if one.namesakes & tested & ~stated]
    for listed in (of_these, of_others):
        doubtful = [one for one in listed if not recorded.explained(chosen, one)]
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
    """That a region is like a mask which was, or may have been, chosen on what is tested."""
    stated = next(recorded.declarations(chosen), None)
    if stated is None:
        when = "and no entry declares this region"
    elif recorded.chain.precedes(one.entry, stated):
        when = f"before this region was declared in {_entry(stated, recorded)}"
    else:
        when = f"on another branch than the region's declaration in {_entry(stated, recorded)}"
    data = "chosen on the data it would be tested on"
    cure = "if it is like that mask for another reason, say which"
    if one.namesakes:
        data = "found on maps that are not in this table, of subjects with the same labels"
        cure = "if these are other people or new data, say so"
    return Doubt(
        f"{chosen.what} (like {one.name}{' of other maps' if one.namesakes else ''})",
        f"{chosen.what} is like a mask that was {data}: {how} "
        f"{one.name}, which a run recorded in {_entry(one.entry, recorded)}"
        f"{'' if recorded.chain.name_of(one.entry) else ' of the ledger'}, {when}",
        f"if it was made from these data, say so with derived_from; {cure}"
        f"{'' if chosen.call else ', of the region saved as one MASK'}",
        f"sequester declare {chosen.call or 'MASK'} --source TEXT --explained TEXT"
        + recorded.options,
    )


def _entry(entry: Entry, recorded: Recorded) -> str:
    """An entry, and the ledger that it is in when that is not the study's own."""
    name = recorded.told(entry)
    return f"entry {entry.number}{f' of {name}' if name else ''}"


def _added(
    chosen: Selected, what: str, units: tuple[Unit, ...], doubts: tuple[Doubt, ...] = ()
) -> Iterator[Origin]:
    """More of a region's origin: of its file, labels or sphere alone, not of all with its source.

    Of what is made of several parts: of each of them.
    """
    of = f"label {', '.join(map(str, chosen.labels))}: " if chosen.labels else ""
    if doubts or not chosen.files:
        of = f"{chosen.what} is "
    apart = (Origin(source, chosen.files[:1], labels=chosen.labels) for source in chosen.sources)
    for origin in chosen.origins or apart:
        said = f"{origin.source} ({of}{what})" if origin.files else origin.source
        yield replace(origin, source=said, derived_from=units, doubts=doubts)


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
                for name in ("files", "selects", "voxels", "derived_from"):
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
        "voxels": list(dict.fromkeys((*chosen.voxels, *chosen.parts))),
        "labels": list(chosen.labels),
        "derived_from": [unit_record(unit) for unit in chosen.derived_from],
    }


def explanation(chosen: Selected, text: str) -> dict[str, Any]:
    """The entry that explains why a region is like a recorded mask."""
    of_some = {"labels": list(chosen.labels)} if chosen.labels else {}
    body = {"kind": WAIVER, "field": EXPLAINED, "selects": chosen.selects}
    return {**body, **of_some, "says": text}


def of_origin(origin: Origin, root: Path) -> dict[str, Any]:
    """The entry of an origin: files of any kind, or none; of images also what they select."""
    selected = [_selected_by(root / name) for name in origin.files]
    selects = [digest for listed, _ in selected for digest in listed]
    voxels = [digest for _, listed in selected for digest in listed]
    return {
        "kind": DECLARATION,
        "what": origin.files[0] if len(origin.files) == 1 else f"{len(origin.files)} files",
        "sources": [origin.source],
        "rois": [],
        "files": [{"path": name, "sha256": digest(root / name)} for name in origin.files],
        "selects": list(dict.fromkeys(selects)),
        "voxels": list(dict.fromkeys(voxels)),
        "labels": [],
        "derived_from": [unit_record(unit) for unit in origin.derived_from],
    }


def is_volume(path: Path) -> bool:
    """Whether a file is an image of one volume."""
    image = path.name.endswith((".nii", ".nii.gz", ".hdr", ".img"))
    return image and n_volumes(path, open_image(path)) == 1


def _selected_by(path: Path) -> tuple[list[str], list[str]]:
    """What an image selects as a mask, and as labels when it can be those; and each label."""
    if not is_volume(path):
        return [], []
    data, geometry = read_map(path)
    inside = data[np.isfinite(data) & (data != 0)]
    if not inside.size:
        return [], []
    whole = voxel_set(data, geometry.affine).digest
    if not np.array_equal(inside, np.rint(inside)) or np.abs(inside).max() >= 2**31:
        return [whole], []
    each = labels_in(path)
    return [whole, _atlas_digest(each)], [one.digest for one in each.values()]


def left_out(settings: Settings) -> str:
    """Who is left out and why, as the study table states it; "" for nobody."""
    rows = {f"sub-{row.unit.sub}: {row.exclude_reason}" for row in settings.left_out}
    return "; ".join(sorted(rows))


def _waivers(settings: Settings) -> Iterator[dict[str, Any]]:
    if listed := left_out(settings):
        yield {"kind": WAIVER, "field": LEFT_OUT, "says": listed}
    kept_by = {column for one in settings.selections for column in one.kept_by}
    for column in sorted(kept_by.intersection(settings.quality)):
        says = f"{column} says how good the data are, and nothing that is tested"
        yield {"kind": WAIVER, "field": "quality", "says": says}
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
    recorded = Recorded(shelf_of(path, ledger.sound()), study)
    more = known_of(chosen, sets, tested, recorded, partial(fwhm, recorded))
    return made, [
        "; ".join(undeclared(doubts, doubts)) if doubts else origin.source
        for origin in more
        for doubts in [{doubt.name: doubt for doubt in origin.doubts}]
    ]
