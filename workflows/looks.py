"""What a run adds to the ledger: the masks that it made, and its looks at the data.

A look is what was read where and asked how: the masks' voxels, the maps' digests, the contrast,
the statistic and every setting that p depends on. Two looks with all of it the same are one: a
repetition or a restart is recorded and does not count. All folds and all labels of one region of
the study file, and its declared variants, are one look; more subjects or maps preprocessed in
another way make another. A comparison of regions is a look of its own, at all that they read.

The count of a result is that of the different looks that read some of its voxels in some of its
units, itself and those of its own run included, as of the run in which it was first made: so a
repetition gives the same bytes. Looks in ledgers that lie beside the study's own are counted too.

Looks are counted and written under the ledger's lock, before the results are: of two runs at the
same time, the second counts the first. A run that dies while it writes its results has looked,
though nobody saw it; the same look again does not count.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any

from ..nodes.images import read_map
from ..nodes.likeness import VoxelSet, packed, shared_mm3, united, unpacked, voxel_set
from ..nodes.touch import UnitTable
from .collect import RoiOutput
from .comparisons import Comparison
from .digests import digest, digest_text
from .judge import Finding
from .ledger import ARTEFACT, LOOK, UNITS, WAIVER, Chain, Entry, Shelf
from .origins import (
    LEFT_OUT,
    Recorded,
    Selected,
    given_regions,
    left_out,
    set_record,
    tested_units,
    units_body,
)
from .plans import A_PRIORI
from .rois import Roi
from .settings import Settings
from .study import Study


@dataclass(frozen=True)
class Seen:
    """What one region of the study file read.

    Parameters
    ----------
    output : RoiOutput
    names : tuple of str
        Of its masks that are not empty.
    sets : tuple of VoxelSet
        Their voxels.
    """

    output: RoiOutput
    names: tuple[str, ...]
    sets: tuple[VoxelSet, ...]


def seen(outputs: Sequence[RoiOutput]) -> list[Seen]:
    """The voxels that every region read; its variants are no looks of their own."""
    return [_seen(output) for output in outputs if not output.roi.variant_of]


def _seen(output: RoiOutput) -> Seen:
    found = {}
    for mask in output.masks:
        data, geometry = read_map(mask.path)
        if data.any():
            found[mask.name] = voxel_set(data, geometry.affine)
    return Seen(output, tuple(found), tuple(found.values()))


# -- masks ----------------------------------------------------------------------------------------


def artefacts(
    settings: Settings, read: Sequence[Seen], findings: Sequence[Finding], chain: Chain
) -> list[dict[str, Any]]:
    """The entries of the masks that were chosen on data, which the ledger does not have yet."""
    made = [
        _artefact(settings, one, findings)
        for one in read
        if one.output.roi.plan != A_PRIORI and one.sets
    ]
    return new_artefacts(made, settings.study, chain)


def new_artefacts(
    made: Sequence[dict[str, Any]], study: Study, chain: Chain
) -> list[dict[str, Any]]:
    """Those entries that a ledger does not have yet, behind the numbers of the units."""
    known = {entry.body["id"] for kind in (UNITS, ARTEFACT) for entry in chain.of_kind(kind)}
    return [body for body in (units_body(study), *made) if body["id"] not in known]


def _artefact(settings: Settings, one: Seen, findings: Sequence[Finding]) -> dict[str, Any]:
    """One entry for all masks of a region, its folds among them."""
    roi = one.output.roi
    place = f"{settings.name}.{roi.name}"
    chosen_on = _chosen_on(one.output, [f for f in findings if f.node == f"{place}.extract"])
    masks = {mask.name: mask for mask in one.output.masks}
    head = {
        "roi": roi.name,
        "plan": roi.plan,
        "node": f"{place}.choose",
        "parameters": _parameters(roi, settings),
    }
    made = [
        MadeMask(name, masks[name].path, voxels, chosen_on[name], masks[name].peak)
        for name, voxels in zip(one.names, one.sets, strict=True)
    ]
    return artefact(head, made, settings.study)


@dataclass(frozen=True)
class MadeMask:
    """A mask that data have chosen.

    Parameters
    ----------
    name : str
    path : Path
    voxels : VoxelSet
    chosen_on : int
        The set of units it was chosen on.
    peak : tuple of float
        Of the map that chose it, x, y, z in mm first; () without one.
    """

    name: str
    path: Path
    voxels: VoxelSet
    chosen_on: int
    peak: tuple[float, ...] = ()


def artefact(head: Mapping[str, Any], masks: Sequence[MadeMask], study: Study) -> dict[str, Any]:
    """The entry of masks that one node made.

    Parameters
    ----------
    head : mapping
        What made them: its ``node`` and its ``parameters``, at least.
    masks : sequence of MadeMask
    study : Study
    """
    table, everything = study.table, 0
    for mask in masks:
        everything |= mask.chosen_on
    body = {
        **head,
        "of": units_body(study)["id"],
        "chosen_on": set_record(everything, table),
        "masks": [
            {
                "name": mask.name,
                "sha256": digest(mask.path),
                "voxels": mask.voxels.digest,
                **_part(mask.chosen_on, everything, table),
                "centre": list(mask.voxels.centre),
                "peaks": [list(mask.peak[:3])] if mask.peak else [],
            }
            for mask in masks
        ],
        "sets": packed([mask.voxels for mask in masks]),
    }
    return {"kind": ARTEFACT, "id": digest_text(json.dumps(body)), **body}


def _part(bits: int, everything: int, table: UnitTable) -> dict[str, list[int]]:
    """Some of a region's units, as those that are left out (of a fold) or the only ones."""
    left, only = (list(table.numbers(part)) for part in (everything & ~bits, bits))
    return {"without": left} if len(left) <= len(only) else {"only": only}


def _chosen_on(output: RoiOutput, met: Sequence[Finding]) -> dict[str, int]:
    """Per mask, the set of units it was chosen on, as the guard found."""
    found = {mask.name: 0 for mask in output.masks}
    paired = len(met) == len(output.values)
    for i, finding in enumerate(met):
        for name in [output.values[i].mask] if paired else found:
            found[name] |= finding.mask_units
    return found


def _parameters(roi: Roi, settings: Settings) -> dict[str, Any]:
    """What p depends on beside masks and maps, in words; and all of it, in a digest."""
    stated = (roi.procedure, settings.maps, roi.interval, roi.each_label, roi.these_subjects)
    varied = [other.setting for other in settings.rois if other.variant_of == roi.name]
    return {
        "rule": roi.rule,
        "search": roi.region.describe(),
        "value": roi.summary,
        "flips": roi.n_flips,
        "seed": settings.seed,
        "sha256": digest_text(repr((*stated, roi.certificate, roi.reliability, varied))),
    }


# -- looks ----------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Look:
    """A look: its entry without its count, the set of units and the voxels that were read.

    Of a comparison, and in a workflow that is no study file's, there is no `roi`.
    """

    body: dict[str, Any]
    tested: int
    where: list[VoxelSet]
    roi: Roi | None = None

    @property
    def key(self) -> str:
        """What makes it one with others."""
        return str(self.body["key"])


def looks(settings: Settings, read: Sequence[Seen], chain: Shelf) -> list[dict[str, Any]]:
    """The entries of a run's looks: of each region, then of each comparison of regions.

    Those that are new are there in full, with their count.

    Parameters
    ----------
    settings : Settings
    read : sequence of Seen
    chain : Shelf
        Without the declarations of this run, which come before its looks.
    """
    taken = [_look(settings, one) for one in read]
    taken += [_comparison(settings, one, taken) for one in settings.comparisons]
    recorded = Recorded(chain, settings.study)
    return counted(taken, recorded, partial(_notes, settings, recorded))


def counted(
    taken: Sequence[Look],
    recorded: Recorded,
    notes: Callable[[Look, Mapping[str, Entry]], Iterable[str]],
) -> list[dict[str, Any]]:
    """The entries of looks: those that are new in full, with their count.

    Parameters
    ----------
    taken : sequence of Look
    recorded : Recorded
        The ledger without the declarations of this run.
    notes : callable
        From a look and the earlier ones: what a reader must know of their order.
    """
    own, first = first_looks(recorded.chain.own), first_looks(recorded.chain)
    others: dict[str, tuple[int, list[VoxelSet]]] = {
        key: (recorded.bits(entry.body["of"], entry.body["tested"]), unpacked(entry.body["where"]))
        for key, entry in first.items()
    }
    for one in taken:
        others.setdefault(one.key, (one.tested, one.where))
    made = []
    for one in taken:
        if one.key in own:
            made.append({"kind": LOOK, "key": one.key, "again": True})
            continue
        count = [
            other
            for other, there in others.items()
            if other == one.key or (there[0] & one.tested and _meet(one.where, there[1]))
        ]
        named = [recorded.chain.name_of(first[key]) for key in count if key in first]
        elsewhere = {name: named.count(name) for name in recorded.chain.beside}
        here = sum(key not in first for key in count)
        body = {**one.body, "looks": len(count), "of_run": here, "notes": list(notes(one, first))}
        made.append({**body, "beside": elsewhere} if elsewhere else body)
    return made


def first_looks(chain: Chain | Shelf) -> dict[str, Entry]:
    """Every different look, as it was first recorded."""
    found: dict[str, Entry] = {}
    for entry in chain.of_kind(LOOK):
        if "looks" in entry.body:
            found.setdefault(entry.body["key"], entry)
    return found


def _look(settings: Settings, one: Seen) -> Look:
    roi, table = one.output.roi, settings.study.table
    tested, where = tested_units(roi, table), united(one.sets)
    rows = [*roi.tested.rows, *(roi.choosing.rows if roi.choosing is not None else ())]
    files = {(settings.root / row.path, row.volume) for row in rows}
    if settings.maps.by_variance:
        files |= {(settings.root / row.variance, row.volume) for row in rows if row.variance}
    what = {
        "roi": roi.name,
        "plan": roi.plan,
        "statistic": roi.test,
        "contrast": sorted({row.contrast for row in roi.tested.rows}),
        "tested": set_record(tested, table),
        "of": units_body(settings.study)["id"],
        "masks": digest_text(" ".join(sorted({voxels.digest for voxels in one.sets}))),
        "maps": digest_text("\n".join(sorted(f"{digest(path)} {n}" for path, n in files))),
        "region": digest_text(" ".join(sorted(c.key for c, _ in given_regions(settings, roi)))),
        "parameters": _parameters(roi, settings),
    }
    return Look(look_body(what, where), tested, where, roi)


def look_body(what: Mapping[str, Any], where: Sequence[VoxelSet]) -> dict[str, Any]:
    """The entry of a look without its count; its key is made of all that makes it another."""
    # Not what the region or the node is called, nor how the rows of the table are numbered.
    named = ("roi", "node", "tested", "of")
    counts = {name: value for name, value in what.items() if name not in named}
    key = digest_text(json.dumps(counts, sort_keys=True))
    return {"kind": LOOK, "key": key, **what, "where": packed(where)}


def _comparison(settings: Settings, one: Comparison, taken: Sequence[Look]) -> Look:
    """The look of a comparison: at all that its regions read, as they read it."""
    table = settings.study.table
    of = {look.roi.name: look for look in taken if look.roi is not None}
    parts = [of[name] for name in one.rois]
    tested = 0
    for part in parts:
        tested |= part.tested
    where = united([voxels for part in parts for voxels in part.where])
    counts = (one.kind, one.smallest, one.factors, [part.key for part in parts])
    body = {
        "kind": LOOK,
        "key": digest_text(repr(counts)),
        "comparison": one.name,
        "rois": list(one.rois),
        "statistic": one.kind,
        "contrast": sorted({name for part in parts for name in part.body["contrast"]}),
        "tested": set_record(tested, table),
        "of": units_body(settings.study)["id"],
        "where": packed(where),
    }
    return Look(body, tested, where)


def _meet(some: Sequence[VoxelSet], others: Sequence[VoxelSet]) -> bool:
    return any(shared_mm3(one, other) > 0 for one in some for other in others)


def earlier_looks(look: Look, recorded: Recorded, first: Mapping[str, Entry]) -> list[Entry]:
    """Those that read some of the same data."""
    return [
        entry
        for entry in first.values()
        if recorded.bits(entry.body["of"], entry.body["tested"]) & look.tested
    ]


def declared_late(
    regions: Iterable[Selected], earlier: Sequence[Entry], recorded: Recorded
) -> Iterator[str]:
    """That regions were declared after looks at the data, if any was."""
    late = 0
    for chosen in regions:
        late = max(late, sum(not recorded.declared_before(chosen, one) for one in earlier))
    if late:
        yield f"The region was declared after {_times(late)} at these data."


def _notes(
    settings: Settings, recorded: Recorded, look: Look, first: Mapping[str, Entry]
) -> Iterator[str]:
    """What a reader must know of the order of declarations and looks: said of each region."""
    roi = look.roi
    if roi is None:
        return
    earlier = earlier_looks(look, recorded, first)
    regions = [chosen for chosen, _ in given_regions(settings, roi)]
    yield from declared_late(regions, earlier, recorded)
    yield from _left_out_late(settings, earlier, recorded)
    for entry in recorded.chain.of_kind(WAIVER):
        if any(recorded.explains(entry, chosen) for chosen in regions):
            yield f'Why it is like a recorded mask was stated as: "{entry.body["says"]}".'
    moved = [
        one
        for one in earlier
        if one.body.get("roi") == roi.name and one.body["region"] != look.body["region"]
    ]
    if moved:
        was = moved[-1].body["parameters"]["search"]
        yield f"{roi.name} was another region ({was}) in {_times(len(moved))} before."


def _left_out_late(
    settings: Settings, earlier: Sequence[Entry], recorded: Recorded
) -> Iterator[str]:
    """That the list of those left out was made, or changed, after looks at the data."""
    listed = left_out(settings)
    known = recorded.chain.of_kind(WAIVER)
    stated = [one for one in known if one.body["field"] == LEFT_OUT and one.body["says"] == listed]
    late = sum(not any(recorded.chain.precedes(one, look) for one in stated) for look in earlier)
    if listed and late:
        yield f"Who is left out was stated after {_times(late)} at these data."


def _times(n: int) -> str:
    return f"{n} look{'s' * (n > 1)}"


def tell(
    results: Sequence[Sequence[dict[str, Any]]],
    bodies: Sequence[Mapping[str, Any]],
    chain: Chain,
) -> None:
    """Put the counts, as of the first time, into the records and sentences of each look."""
    first = first_looks(chain)
    for records, body in zip(results, bodies, strict=True):
        known = first[body["key"]].body if "looks" not in body else body
        said = list(known["notes"])
        beside = known.get("beside", {})
        if known["looks"] > 1:
            here = known.get("of_run")  # not in the entries of versions before it was counted
            there = [f"{n} of them in {name}" for name, n in beside.items() if n]
            if here == known["looks"]:
                there.insert(0, "all of one run")
            elif here is not None and here > 1:
                there.insert(0, f"{here} of them of one run")
            more = f" ({', '.join(there)})" if there else ""
            said.insert(0, f"Looks at these voxels in these data so far: {known['looks']}{more}.")
        for record in records:
            record["looks"], record["beside"] = known["looks"], beside
            record["looks_of_run"] = known.get("of_run")
            record["history"] = " ".join(known["notes"]) or None
            record["sentence"] = " ".join([record["sentence"], *said])


def run_entries(
    settings: Settings,
    read: Sequence[Seen],
    compared: Sequence[dict[str, Any]],
    findings: Sequence[Finding],
    chain: Shelf,
) -> list[dict[str, Any]]:
    """The entries of a run whose nodes have ended; the counts of its looks go into its results.

    Parameters
    ----------
    settings : Settings
    read : sequence of Seen
    compared : sequence of dict
        The records of the study's comparisons, in their order.
    findings : sequence of Finding
    chain : Shelf
        What is in the ledger: nobody may write to it before these entries are written.
    """
    made = looks(settings, read, chain)
    tell([*(one.output.records for one in read), *([one] for one in compared)], made, chain.own)
    return [*artefacts(settings, read, findings, chain.own), *made]
