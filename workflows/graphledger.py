"""The ledger around a workflow that somebody made by hand, under `GuardPlugin(..., ledger=...)`.

Before the run, the files of origins that reach a mask are compared with the masks that the ledger
holds; while running, so are the regions that the graph made of what came from outside (spheres,
labels, combinations), just before they are read or searched. What they are found to derive from
is judged like any other touch.

When all has run, what is new is written in one piece: the declared origins and regions, the
waivers and contracts, the masks that data have chosen, and the looks. A look of a workflow is a
statistic with the values that enter it (extractions that no statistic takes are looks by
themselves): the voxels they were read in, the maps, and the actual inputs of the statistic.
"""

from __future__ import annotations

import re
import shlex
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import networkx as nx
import numpy as np
from nipype import MapNode

from ..nodes.images import read_map
from ..nodes.interfaces import LabelMask, SphereMask
from ..nodes.interfaces.base import SequesterInterface
from ..nodes.interfaces.generic import outputs_of, settings_of
from ..nodes.likeness import VoxelSet, united, voxel_set
from ..nodes.rules import NOTHING, Branch, Inputs, Leaf, Meeting, Tree
from ..nodes.touch import Touch
from .ancestry import Ancestry, files_in, join_slot, meetings_of, node_name
from .collect import peaks_of
from .digests import digest, digest_text
from .findings import Finding
from .judge import meetings_at, place_of, source_files
from .ledger import WAIVER, Chain, Entry, Ledger, Shelf, shelf_of
from .literals import plain
from .looks import (
    Look,
    MadeMask,
    artefact,
    counted,
    declared_late,
    earlier_looks,
    first_looks,
    look_body,
    new_artefacts,
)
from .origins import (
    FWHM_MM,
    Found,
    Recorded,
    Selected,
    atlas_sets,
    declaration,
    is_volume,
    known_of,
    labels_in,
    new_declarations,
    new_waivers,
    of_origin,
    set_record,
    sphere_digest,
    units_body,
)
from .record import waivers_at
from .study import Origin, Study

_PEAKS, _CHOSEN = {"peak", "peaks"}, {"mask_file", "mask_files", "row_masks"}
_SEARCHED = {"search_file", "search_files"}  # what our choosing nodes call their search region


@dataclass(frozen=True)
class _Read:
    """One mask, or several where they cannot be told apart, and what was read in it.

    Parameters
    ----------
    node : str
    marks : frozenset of str
        The places that values of it carry, as `Extraction.where`.
    mask : str
        Its file.
    maps : tuple of str
    mask_units, data_units : int
    place : str
        Where the mask comes from.
    contrasts : frozenset of str
    """

    node: str
    marks: frozenset[str]
    mask: str
    maps: tuple[str, ...]
    mask_units: int
    data_units: int
    place: str
    contrasts: frozenset[str]


class GraphLedger:
    """A ledger, as the guard uses it around one workflow.

    Parameters
    ----------
    path : Path
    study : Study
        As stated.
    """

    def __init__(self, path: Path, study: Study) -> None:
        self.ledger, self.study = Ledger(path.absolute()), study
        self._recorded = Recorded(Shelf(Chain()), study)
        self._regions: dict[str, Selected] = {}  # by their files

    def open(self, *, write: bool) -> None:
        """Read it.

        Raises
        ------
        InputError
            When it was changed, or (to `write`) cannot be written.
        """
        if write:
            self.ledger.check_writable()
        table = (
            shlex.quote(self.study.relative(self.study.tables[0])) if self.study.tables else "TABLE"
        )
        options = f" --study {table} --ledger {shlex.quote(self.ledger.path.name)}"
        there = shelf_of(self.ledger.path, self.ledger.sound())
        self._recorded = Recorded(there, self.study, options)
        self._regions = {}

    # -- before -----------------------------------------------------------------------------

    def recognised(self, ancestry: Ancestry) -> Study:
        """The study, with what the ledger knows of the files of origins that reach a mask."""
        if not self._recorded.chain.entries:
            return self.study
        more: list[Origin] = []
        for file, (tested, direct) in self._behind(ancestry).items():
            volume = _volume(self.study.full(file), labels=direct)
            if volume is not None:
                origins = self.study.origins_of(file)
                chosen = Selected(
                    file,
                    tuple(dict.fromkeys(origin.source for origin in origins)),
                    (file,),
                    volume[0].digest,
                    derived_from=tuple(u for origin in origins for u in origin.derived_from),
                    call=shlex.quote(file),
                    voxels=(volume[0].digest,),
                )
                more += known_of(chosen, volume, tested, self._recorded, _smooth)
        return replace(self.study, origins=tuple(dict.fromkeys((*self.study.origins, *more))))

    def _behind(self, ancestry: Ancestry) -> dict[str, tuple[int, bool]]:
        """The files of origins behind masks: the units they are tested on; if one is a mask."""
        found: dict[str, tuple[int, bool]] = {}
        for node in ancestry.nodes:
            meeting, _ = meetings_of(node.interface)
            if meeting is None:
                continue
            _, met = meetings_at(node, meeting, ancestry.inputs[node_name(node)])
            for mask, data, _ in met:
                for file in filter(self.study.is_origin, _outside(mask)):
                    tested, direct = found.get(file, (0, False))
                    direct = direct or place_of(mask) == file
                    found[file] = tested | data.touch.values, direct
        return found

    @staticmethod
    def keep(node: Any) -> None:
        """Have the engine keep the peaks of what a node chooses, also when nobody takes them."""
        if node.needed_outputs and isinstance(node.interface, SequesterInterface):
            made = outputs_of(node.interface).keys()
            if made & _PEAKS:
                node.needed_outputs = [*node.needed_outputs, *made & (_PEAKS | _CHOSEN)]

    # -- while running ----------------------------------------------------------------------

    def look(
        self, ancestry: Ancestry, node: Any, findings: Sequence[Finding]
    ) -> Iterator[tuple[str, str, Touch]]:
        """The regions from outside that a node is given, as they are now.

        Parameters
        ----------
        ancestry : Ancestry
        node : Node
            Just before it runs: its inputs are there.
        findings : sequence of Finding

        Yields
        ------
        field, place, touch
            Of a region that the ledger knows more of. What is in doubt is added to the doubts
            of the ancestry's study.
        """
        meeting, statistic = meetings_of(node.interface)
        named = {meeting.mask if meeting else "", statistic.search if statistic else ""}
        if isinstance(node.interface, SequesterInterface):
            named |= _SEARCHED
        name = node_name(node)
        trees = ancestry.inputs[name].trees
        fields = [field for field in sorted(named & trees.keys()) if trees[field].touch.origins]
        if not fields:
            return
        given = _actual(node)
        after = {name, *map(node_name, nx.descendants(ancestry.graph, node))}
        tested = 0
        for finding in findings:
            tested |= finding.data_units if finding.node in after else 0
        for field in fields:
            for path, part in _parts(given.get(field), trees[field]):
                touch = part.touch
                if not touch.origins or touch.choosers or touch.unknown:
                    continue
                for origin in self._met(ancestry, path, part, tested):
                    ancestry.study.doubts.update({doubt.name: doubt for doubt in origin.doubts})
                    yield field, self.study.relative(path), self.study.of_origin(origin)

    def _met(self, ancestry: Ancestry, path: str, part: Tree, tested: int) -> Iterator[Origin]:
        volume = _volume(path, labels=True)
        if volume is None:
            return
        chosen, single = self._named(_maker(ancestry, part), path, part, volume[0])
        self._regions[path] = chosen
        yield from known_of(chosen, [*volume, *single], tested, self._recorded, _smooth)

    def _named(self, node: Any, path: str, part: Tree, voxels: VoxelSet) -> Found:
        """A region as `sequester declare` would name it, if it can; labels of it, each."""
        sources, here = tuple(sorted(part.touch.origins)), (voxels.digest,)
        interface = None if isinstance(node, MapNode) else getattr(node, "interface", None)
        if isinstance(interface, SphereMask):
            at, radius = interface.inputs.centre, interface.inputs.radius
            centre, selects = " ".join(f"{x:g}" for x in at), sphere_digest(at, radius)
            what, call = f"sphere at {centre}", f"--centre {centre} --radius {radius:g}"
            return Selected(what, sources, (), selects, call=call, voxels=here), []
        if isinstance(interface, LabelMask) and self.study.is_declared(interface.inputs.in_file):
            file, numbers = self.study.relative(interface.inputs.in_file), interface.numbers()
            call = f"{shlex.quote(file)} {' '.join(f'--label {number}' for number in numbers)}"
            atlas = Path(self.study.full(file))
            (selects, _), each = atlas_sets(atlas, numbers), labels_in(atlas)
            single = [each[number] for number in numbers]
            parts = tuple(one.digest for one in single)
            what = f"label {', '.join(map(str, numbers))} of {file}"
            made = Selected(what, sources, (), selects, numbers, (), call, here, parts)
            return made, single if len(single) > 1 else []
        if self.study.is_declared(path):
            file = self.study.relative(path)
            made = Selected(file, sources, (), voxels.digest, call=shlex.quote(file), voxels=here)
            return made, []
        what = f"a region made by {place_of(part)}"
        return Selected(what, sources, (), voxels.digest, voxels=here), []

    # -- after ------------------------------------------------------------------------------

    def write(self, ancestry: Ancestry, findings: Sequence[Finding]) -> list[dict[str, Any]]:
        """Write what a run that has ended adds.

        Returns
        -------
        list of dict
            Its looks as they were first recorded: ``node``, ``statistic``, ``looks`` (how many
            have read some of these voxels in some of these data), ``notes`` and more.
        """
        read = [one for node in ancestry.nodes for one in _read(ancestry, node, findings)]
        sets = {mask: _volume(mask) for mask in dict.fromkeys(one.mask for one in read)}
        known = {mask: volume[0] for mask, volume in sets.items() if volume is not None}
        masks = [*self._artefacts(ancestry, read, known)]
        taken = [*self._looks(ancestry, read, known)]
        origins = [of_origin(self._there(one), self.study.root) for one in self.study.origins]
        stated = [*origins, *self._declared(origins)]
        waivers = [
            {"kind": WAIVER, "node": node.fullname, "field": row["field"], "says": row["says"]}
            for node in ancestry.nodes
            for row in waivers_at(ancestry, node, {})
        ]
        keys = [look.key for look in taken]

        def entries(chain: Chain) -> list[dict[str, Any]]:
            recorded = Recorded(shelf_of(self.ledger.path, chain), self.study)

            def notes(look: Look, first: Mapping[str, Entry]) -> Iterator[str]:
                regions = [r for r in self._regions.values() if r.key in look.body["regions"]]
                yield from declared_late(regions, earlier_looks(look, recorded, first), recorded)

            return [
                *new_declarations(stated, chain),
                *new_waivers(waivers, chain),
                *new_artefacts(masks, self.study, chain),
                *counted(taken, recorded, notes),
            ]

        self.ledger.extend(entries)
        first = first_looks(self.ledger.sound())
        return [dict(first[key].body) for key in keys]

    def _there(self, origin: Origin) -> Origin:
        files = tuple(name for name in origin.files if Path(self.study.full(name)).is_file())
        return replace(origin, files=files)

    def _declared(self, origins: Sequence[Mapping[str, Any]]) -> Iterator[dict[str, Any]]:
        """The regions that the graph made of what came from outside."""
        known = {selects for body in origins for selects in body["selects"]}
        for chosen in self._regions.values():
            if chosen.selects not in known:
                yield declaration(chosen, (), self.study.root)

    def _artefacts(
        self, ancestry: Ancestry, read: Sequence[_Read], sets: Mapping[str, VoxelSet]
    ) -> Iterator[dict[str, Any]]:
        """The entries of masks that data have chosen, one for each node that made some."""
        made: dict[str, dict[str, _Read]] = {}
        for one in read:
            if one.mask_units and one.mask in sets and not self.study.is_origin(one.mask):
                of_node = made.setdefault(_node_of(one.place), {})
                before = of_node.get(one.mask)
                units = one.mask_units | (before.mask_units if before else 0)
                of_node[one.mask] = replace(before or one, mask_units=units)
        nodes = {node_name(node): node for node in ancestry.nodes}
        for name, masks in made.items():
            node = nodes.get(name)
            peaks = _peaks(node)
            head = {"node": name, "parameters": _parameters(ancestry, node)}
            yield artefact(
                head,
                [
                    MadeMask(
                        one.place, Path(one.mask), sets[one.mask], one.mask_units,
                        peaks.get(Path(one.mask), ()),
                    )
                    for one in masks.values()
                ],
                self.study,
            )  # fmt: skip

    def _looks(
        self, ancestry: Ancestry, read: Sequence[_Read], sets: Mapping[str, VoxelSet]
    ) -> Iterator[Look]:
        taken: set[str] = set()
        for node in ancestry.nodes:
            _, statistic = meetings_of(node.interface)
            tree = (
                ancestry.inputs[node_name(node)].trees.get(statistic.values) if statistic else None
            )
            if tree is None:
                continue
            marks = {mark.where for mark in tree.touch.extractions}
            enter = [one for one in read if one.marks & marks]
            taken |= marks
            if enter:
                yield self._look([node], enter, sets, type(node.interface).__name__)
        left: dict[str, list[Any]] = {}  # all that iterables made of a node are one look
        for node in ancestry.nodes:
            if any(one.node == node_name(node) and not one.marks & taken for one in read):
                left.setdefault(node.fullname, []).append(node)
        for nodes in left.values():
            names = {node_name(node) for node in nodes}
            enter = [one for one in read if one.node in names and not one.marks & taken]
            yield self._look(nodes, enter, sets, "")

    def _look(
        self, nodes: Sequence[Any], enter: Sequence[_Read], sets: Mapping[str, VoxelSet], what: str
    ) -> Look:
        table, tested = self.study.table, 0
        for one in enter:
            tested |= one.data_units
        masks = {one.mask for one in enter}
        voxels = {sets[mask].digest: sets[mask] for mask in sorted(masks) if mask in sets}
        where = united([*voxels.values()])
        names = {*voxels, *(digest(mask) for mask in masks if mask not in sets)}
        stated = {
            "node": nodes[0].fullname if not what else node_name(nodes[0]),
            "statistic": what,
            "contrast": sorted({name for one in enter for name in one.contrasts}),
            "tested": set_record(tested, table),
            "of": units_body(self.study)["id"],
            "masks": digest_text(" ".join(sorted(names))),
            "maps": digest_text("\n".join(sorted({digest(m) for one in enter for m in one.maps}))),
            "regions": sorted({r.key for path, r in self._regions.items() if path in masks}),
            "parameters": _said_of(nodes[0], [_settings(node) for node in nodes]),
        }
        return Look(look_body(stated, where), tested, where)


def _outside(mask: Leaf) -> set[str]:
    """Where what has an origin comes into a mask."""
    found, seen = set(), set()
    waiting: list[Tree] = [mask]
    while waiting:
        here = waiting.pop()
        if id(here) not in seen and here.touch.origins:
            seen.add(id(here))
            waiting += here.parents
            if not here.parents:
                found.add(here.place)
    return found


# -- what was read --------------------------------------------------------------------------


def _read(ancestry: Ancestry, node: Any, findings: Sequence[Finding]) -> list[_Read]:
    """What an extraction has read, mask by mask."""
    meeting, _ = meetings_of(node.interface)
    if meeting is None:
        return []
    name = node_name(node)
    met = [f for f in findings if f.node == name and f.kind == "extraction"]
    _, promised = meetings_at(node, meeting, ancestry.inputs[name])
    _, actual = meetings_at(node, meeting, _with_files(node, meeting))
    marks, contrasts = [], []
    for mask_data_one, number in zip(promised, _numbers(promised), strict=True):
        _, data, one = mask_data_one
        marks.append(f"{one.where}[{number}]")
        contrasts.append(_contrasts(ancestry.study, data))
    if len(met) == len(promised) == len(actual):
        return [
            _Read(
                name,
                frozenset({mark}),
                file,
                tuple(_files_of(data)),
                finding.mask_units,
                finding.data_units,
                finding.mask_place,
                of,
            )
            for finding, mark, of, (mask, data, _) in zip(
                met, marks, contrasts, actual, strict=True
            )
            for file in _files_of(mask)
        ]
    # The graph did not show the lists: everything may have been read in every mask.
    mask_units = data_units = 0
    for finding in met:
        mask_units |= finding.mask_units
        data_units |= finding.data_units
    maps = tuple(dict.fromkeys(file for _, data, _ in actual for file in _files_of(data)))
    files = dict.fromkeys(file for mask, _, _ in actual for file in _files_of(mask))
    of_all = frozenset().union(*contrasts)
    return [
        _Read(
            name, frozenset(marks), file, maps, mask_units, data_units,
            f"{_node_of(met[0].mask_place)}.[{i}]", of_all,
        )
        for i, file in enumerate(files)
    ]  # fmt: skip


def _numbers(met: Sequence[tuple[Leaf, Leaf, Inputs]]) -> Iterator[int]:
    """The place of each meeting among those of its iteration."""
    last, number = None, 0
    for _, _, one in met:
        number = number + 1 if one is last else 0
        last = one
        yield number


def _contrasts(study: Study, data: Tree) -> frozenset[str]:
    files = source_files(data)
    return frozenset(
        row.contrast for row in study.rows if row.contrast and {row.path, row.name} & files
    )


def _actual(node: Any) -> dict[str, Any]:
    """The inputs of a node as they are when it runs, the slots of a JoinNode in their lists."""
    given = {**settings_of(node.interface.inputs), **settings_of(node.inputs)}
    slots: dict[str, dict[int, Any]] = {}
    for field in [*given]:
        slot = join_slot(node, field)
        if slot is not None:
            slots.setdefault(slot[0], {})[slot[1]] = given.pop(field)
    given.update({field: [items[i] for i in sorted(items)] for field, items in slots.items()})
    return given


def _with_files(node: Any, meeting: Meeting) -> Inputs:
    """The inputs of an extraction as trees of the files that they are."""
    given = _actual(node)
    trees = {f: _tree(given.pop(f)) for f in (meeting.mask, meeting.data) if f in given}
    return Inputs(trees, given, node_name(node))


def _tree(value: Any) -> Tree:
    if isinstance(value, list | tuple):
        return Branch([_tree(item) for item in value])
    return Leaf(NOTHING, place=str(value))


def _files_of(tree: Tree) -> list[str]:
    """The files of an actual input, whichever way they were paired."""
    if isinstance(tree, Branch) or not tree.place:
        return [file for part in tree.parents for file in _files_of(part)]
    return files_in(tree.place)


def _parts(value: Any, tree: Tree) -> Iterator[tuple[str, Tree]]:
    """Every file of a value, with what the graph knows of it."""
    if isinstance(value, list) and isinstance(tree, Branch) and len(value) == len(tree.children):
        for item, child in zip(value, tree.children, strict=True):
            yield from _parts(item, child)
    else:
        only = tree.children[0] if isinstance(tree, Branch) and len(tree.children) == 1 else tree
        yield from ((path, only) for path in files_in(value))


def _volume(path: str, *, labels: bool = False) -> list[VoxelSet] | None:
    """The voxels of a mask, then those of each label when it has `labels`; None if it has none."""
    if not is_volume(Path(path)):
        return None
    data, geometry = read_map(path)
    inside = data[np.isfinite(data) & (data != 0)]
    if not inside.size:
        return None
    made = [voxel_set(data, geometry.affine)]
    if labels and (inside != inside[0]).any() and np.array_equal(inside, np.rint(inside)):
        made += atlas_sets(Path(path), ())[1]
    return made


def _smooth() -> float:
    return FWHM_MM  # what is tested may not be a map yet when its region is looked at


# -- nodes ----------------------------------------------------------------------------------


def _node_of(place: str) -> str:
    """The node at whose output something stands."""
    return re.sub(r"\.[^.]*$", "", place)


def _maker(ancestry: Ancestry, part: Tree) -> Any:
    """The node that made a region; None for a file."""
    name = _node_of(place_of(part))
    return next((node for node in ancestry.nodes if node_name(node) == name), None)


def _peaks(node: Any) -> dict[Path, tuple[float, ...]]:
    """The peak of each mask that a node of ours has chosen."""
    if not isinstance(getattr(node, "interface", None), SequesterInterface):
        return {}
    made = node.result.outputs
    return peaks_of(made) if any(hasattr(made, name) for name in _PEAKS) else {}


def _parameters(ancestry: Ancestry, node: Any) -> dict[str, str]:
    """What a node was set to, beside the files and values that reached it."""
    if node is None:
        return {}
    inputs = ancestry.inputs[node_name(node)]
    return _said_of(node, {k: v for k, v in inputs.settings.items() if k not in inputs.trees})


def _settings(node: Any) -> dict[str, Any]:
    """The inputs of a node that has run; of an extraction without the files, which are told."""
    meeting, _ = meetings_of(node.interface)
    files = (meeting.mask, meeting.data) if meeting is not None else ()
    return {name: value for name, value in _actual(node).items() if name not in files}


def _said_of(node: Any, given: Any) -> dict[str, str]:
    """An interface, and a digest of inputs of it: files by content, nothing that is not hashed."""
    traits = node.interface.inputs.traits()
    ignored = {"release", *(name for name, trait in traits.items() if trait.nohash)}
    told = repr(_said(given, ignored))
    return {"interface": type(node.interface).__name__, "sha256": digest_text(told)}


def _said(value: Any, ignored: set[str] | None = None) -> Any:
    """A value so that it is the same text wherever and whenever it is the same."""
    if isinstance(value, str | Path):
        return digest(value) if Path(value).is_absolute() and Path(value).is_file() else str(value)
    if isinstance(value, Mapping):
        names = sorted(value, key=str)
        return [(str(n), _said(value[n])) for n in names if ignored is None or n not in ignored]
    value = plain(value)
    if isinstance(value, list | tuple):
        return [_said(item, ignored) for item in value]
    if isinstance(value, set | frozenset):
        return sorted(map(repr, map(_said, value)))
    if isinstance(value, float):
        return f"{value:.10g}"  # another machine may differ in the last digits
    return re.sub(r" at 0x[0-9a-f]+", "", repr(value))
