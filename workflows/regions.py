"""Regions given beforehand: masks, spheres, atlas labels, and what is made of them.

A region of STUDY.toml is one of ``mask``, ``centre`` and ``radius``, ``atlas`` and ``labels``,
``union``, ``intersection``, ``difference``; it may be eroded and mirrored. ``{sub}`` in a path
stands for the subject's label: a file for each subject.
"""

from __future__ import annotations

import math
from abc import ABC, abstractmethod
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from nipype import IdentityInterface, MapNode, Merge, Node, Workflow

from ..nodes.errors import InputError
from ..nodes.images import table_beside
from ..nodes.interfaces import (
    CombineMasks,
    ErodeMask,
    GivenMask,
    LabelMask,
    MirrorMask,
    SphereMask,
)
from ..nodes.touch import ENTITIES, Unit
from .keys import Reader
from .study import space_in_name

COMBINED = {"union": "or", "intersection": "and", "difference": "without"}
MIRRORED = {"other": "mirror image of", "both": "both sides of"}
_KINDS = ("mask", "centre", "atlas", *COMBINED)
_KEYS = {
    *_KINDS,
    "radius",
    "labels",
    "names",
    "regrid",
    "space",
    "origin",
    "derived_from",
    "erode",
    "mirror",
}
_GOES_WITH = {
    "mask": {"regrid", "space"},
    "centre": {"radius", "space"},
    "atlas": {"labels", "names", "regrid", "space"},
    **dict.fromkeys(COMBINED, frozenset[str]()),
}


class Region(ABC):
    """A region in words, and as nodes that make its mask."""

    @abstractmethod
    def describe(self) -> str:
        """In words, for sentences about the result."""

    def parts(self) -> Sequence[Region]:
        """The regions it is made of."""
        return ()

    def leaves(self) -> Iterator[Given]:
        """The masks, spheres and labels it is made of."""
        for part in self.parts():
            yield from part.leaves()

    @property
    def of_each(self) -> bool:
        """Whether each subject has files of their own."""
        return any("{sub}" in path for leaf in self.leaves() for path in leaf.files)


@dataclass(frozen=True)
class Whole(Region):
    """The whole map."""

    def describe(self) -> str:
        """In words."""
        return "whole map"


@dataclass(frozen=True)
class Given(Region):
    """A region with an origin.

    Parameters
    ----------
    origin : str
        Where it comes from.
    derived_from : tuple of Unit
        The study's own data it was made from, if any.
    space : str
        The named space it is in; "" when nothing says so.
    """

    origin: str
    derived_from: tuple[Unit, ...]
    space: str

    @property
    def files(self) -> tuple[str, ...]:
        """Paths relative to the study, ``{sub}`` for a subject's label."""
        return ()

    def leaves(self) -> Iterator[Given]:
        """Itself."""
        yield self


@dataclass(frozen=True)
class MaskFile(Given):
    """A mask, on the maps' grid or (`regrid`) brought to it; or weights."""

    path: str
    regrid: bool = False
    weights: bool = False

    @property
    def files(self) -> tuple[str, ...]:
        """Paths relative to the study."""
        return (self.path,)

    def describe(self) -> str:
        """The file's name, without what is only for files."""
        return _stem(self.path)


@dataclass(frozen=True)
class Ball(Given):
    """A sphere; centre and radius in mm."""

    centre: tuple[float, float, float]
    radius: float

    def describe(self) -> str:
        """Radius and centre."""
        at = ", ".join(f"{x:g}" for x in self.centre)
        return f"sphere of {self.radius:g} mm at ({at}) mm"


@dataclass(frozen=True)
class Labels(Given):
    """Labels of an atlas, by name or number; none named for all of them."""

    atlas: str
    labels: tuple[str | int, ...]
    names: str = ""
    regrid: bool = False

    @property
    def files(self) -> tuple[str, ...]:
        """Paths relative to the study."""
        return (self.atlas, self.names) if self.names else (self.atlas,)

    def describe(self) -> str:
        """The labels and the file's name."""
        which = ", ".join(map(str, self.labels)) or "all labels"
        return f"{which} of {_stem(self.atlas)}"


@dataclass(frozen=True)
class Combined(Region):
    """Union, intersection, or the first without the others."""

    how: str
    of: tuple[Region, ...]

    def parts(self) -> Sequence[Region]:
        """What is combined."""
        return self.of

    def describe(self) -> str:
        """The parts, with a word between them."""
        return f" {COMBINED[self.how]} ".join(
            f"({p.describe()})" if isinstance(p, Combined) else p.describe() for p in self.of
        )


@dataclass(frozen=True)
class Eroded(Region):
    """A region without what lies within some mm of its border."""

    of: Region
    mm: float

    def parts(self) -> Sequence[Region]:
        """What is eroded."""
        return (self.of,)

    def describe(self) -> str:
        """The region and the distance."""
        return f"{self.of.describe()}, eroded by {self.mm:g} mm"


@dataclass(frozen=True)
class Mirrored(Region):
    """The left-right mirror image of a region, or both sides."""

    of: Region
    how: str

    def parts(self) -> Sequence[Region]:
        """What is mirrored."""
        return (self.of,)

    def describe(self) -> str:
        """The region and the side."""
        return f"{MIRRORED[self.how]} {self.of.describe()}"


def _stem(path: str) -> str:
    return Path(path).name.removesuffix(".gz").removesuffix(".nii").replace("{sub}", "SUB")


# -- from STUDY.toml ------------------------------------------------------------------------------


def read_region(
    read: Reader, table: dict[str, Any], key: str, outer: str = "", *, weights: bool = False
) -> Region:
    """The region a table of STUDY.toml describes.

    Parameters
    ----------
    read : Reader
    table : dict
    key : str
        What it is the value of, for messages.
    outer : str
        The origin of the region it is a part of.
    weights : bool
        Whether the mask's values are weights.

    Raises
    ------
    InputError
        For anything wrong in it; names file and line.
    """
    read.known(table, _KEYS, key)
    kinds = [kind for kind in _KINDS if kind in table]
    if len(kinds) != 1:
        raise InputError(
            f"{key} needs exactly one of " + ", ".join(_KINDS),
            where=read.where(key),
            got=str(table),
        )
    kind = kinds[0]
    for name in table:
        if name not in {kind, "origin", "derived_from", "erode", "mirror", *_GOES_WITH[kind]}:
            raise InputError(
                f"key {name!r} does not go with {kind}",
                where=read.where(name),
                expected=f"{kind} alone, or with one of "
                + ", ".join(
                    sorted({"origin", "derived_from", "erode", "mirror", *_GOES_WITH[kind]})
                ),
            )
    origin = read.get(table, "origin", str, "").strip() or outer
    region: Region
    if kind in COMBINED:
        listed = read.tables(table, kind, ...)
        if len(listed) < 2:
            raise InputError(
                f"{kind} of {len(listed)}",
                where=read.where(kind),
                expected="two or more regions",
                got=str(len(listed)),
                remedy="add a region, or give the one without " + kind,
            )
        region = Combined(kind, tuple(read_region(read, t, kind, origin) for t in listed))
    else:
        if not origin:
            raise InputError(
                f"{key} without an origin",
                where=read.where(key),
                remedy='state where it comes from, with a source: origin = "..."',
            )
        region = _given(read, table, kind, origin)
    if isinstance(region, Given):
        _each_has_a_file(read, region)
    if weights:
        if not isinstance(region, MaskFile) or region.regrid or "erode" in table:
            raise InputError(
                'value = "weighted" needs a plain mask whose values are the weights',
                where=read.where(key),
                expected="mask = a file on the maps' grid, not regridded, eroded or mirrored",
                got=region.describe(),
            )
        region = MaskFile(
            region.origin, region.derived_from, region.space, region.path, False, True
        )
    if "erode" in table:
        region = Eroded(region, _positive(read, table, "erode"))
    if "mirror" in table:
        region = Mirrored(region, read.one_of(table, "mirror", MIRRORED, ...))
    return region


def _given(read: Reader, table: dict[str, Any], kind: str, origin: str) -> Given:
    derived, space = units(read, table), read.get(table, "space", str, "")
    if kind == "centre":
        centre = read.point(table, "centre")
        assert centre is not None, "the kind is the key that is there"
        return Ball(origin, derived, space, centre, _positive(read, table, "radius", "centre"))
    path = _inside(read, table, kind)
    space = space or space_in_name(path)
    regrid = read.get(table, "regrid", bool, False)
    if kind == "mask":
        return MaskFile(origin, derived, space, path, regrid)
    labels = read.get(table, "labels", list, [])
    for label in labels:
        if not isinstance(label, str | int) or isinstance(label, bool):
            raise InputError(
                "label is neither a name nor a number",
                where=read.where("labels"),
                expected="text in quotes, or a whole number",
                got=repr(label),
            )
    names = _inside(read, table, "names") if "names" in table else _beside(read, path)
    return Labels(origin, derived, space, path, tuple(labels), names, regrid)


def _each_has_a_file(read: Reader, region: Given) -> None:
    """A region derived from each subject's data is a file of each subject's."""
    each = any(unit.sub == "{sub}" for unit in region.derived_from)
    if each and not any("{sub}" in name for name in region.files):
        raise InputError(
            'derived_from with "{sub}" for a region that all subjects share',
            where=read.where("derived_from"),
            expected="{sub} in the path too, or the subjects' labels here",
            got=region.describe(),
            remedy='name whom it was made from: derived_from = [{ sub = "01" }, ...], or leave '
            "sub out for everybody",
        )


def _beside(read: Reader, atlas: str) -> str:
    """The label table beside the atlas, if there is one (see `images.table_beside`)."""
    found = table_beside(read.path.parent / atlas)
    return "" if found is None else str(Path(atlas).with_name(found.name))


def _inside(read: Reader, table: dict[str, Any], key: str) -> str:
    path = read.get(table, key, str, ...)
    if not path:
        raise InputError(f"{key} names no file", where=read.where(key), got="an empty path")
    if "{" in path.replace("{sub}", ""):
        raise InputError(
            f"{key} with an unknown field", where=read.where(key), expected="{sub}", got=path
        )
    return str(path)


def _positive(read: Reader, table: dict[str, Any], key: str, of: str = "") -> float:
    value = float(read.get(table, key, (int, float), ..., of))
    if not 0 < value < math.inf:
        raise InputError(
            f"{key} out of range", where=read.where(key), expected="> 0 mm", got=f"{value:g}"
        )
    return value


def units(read: Reader, table: dict[str, Any]) -> tuple[Unit, ...]:
    """The study's own data that something was derived from (``derived_from``)."""
    found = []
    for pattern in read.tables(table, "derived_from", []):
        read.known(pattern, (*ENTITIES, "suffix"), "derived_from")
        found.append(Unit(**{key: str(value) for key, value in pattern.items()}))
    return tuple(found)


# -- as nodes -------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Places:
    """Where masks are wanted: on the grid of one image, or of one per row.

    Parameters
    ----------
    root : Path
        The study's folder.
    references : tuple of str
        One image for all rows, or one per row.
    subs : tuple of str
        Per reference: the subject's label.
    """

    root: Path
    references: tuple[str, ...]
    subs: tuple[str, ...] = ("",)

    def path(self, name: str) -> str | list[str]:
        """A file of a region: one path, or one per reference."""
        paths = [str(self.root / name.replace("{sub}", sub)) for sub in self.subs]
        return paths[0] if len(self.references) == 1 else paths


def region_node(region: Region, at: Places, name: str = "region") -> Node | Workflow | None:
    """What makes a region's mask (see `mask_of`); None for the whole map.

    With several references it makes a list with one mask each.
    """
    if isinstance(region, Whole):
        return None
    if isinstance(region, Given):
        return _leaf(region, name, at)
    made = Workflow(name=name)
    end = Node(IdentityInterface(["mask_file"]), name="outputnode")
    made.connect(*_added(made, region, "mask", at), end, "mask_file")
    return made


def mask_of(region: Node | Workflow) -> tuple[Node | Workflow, str]:
    """The node (or workflow) that makes a mask, and its output."""
    return region, "outputnode.mask_file" if isinstance(region, Workflow) else "mask_file"


def _added(workflow: Workflow, region: Region, name: str, at: Places) -> tuple[Node, str]:
    """Add a region's nodes to a workflow; the last one and its output."""
    if isinstance(region, Combined):
        merge = Node(Merge(len(region.of)), name=f"{name}Parts")
        if len(at.references) > 1:
            merge.inputs.axis = "hstack"  # per reference, the list of its parts
        for i, part in enumerate(region.of, 1):
            workflow.connect(*_added(workflow, part, f"{name}Part{i}", at), merge, f"in{i}")
        node = _node(CombineMasks(how=region.how), name, ["in_files"], at)
        workflow.connect(merge, "out", node, "in_files")
    elif isinstance(region, Eroded | Mirrored):
        shape = (
            ErodeMask(mm=region.mm) if isinstance(region, Eroded) else MirrorMask(how=region.how)
        )
        node = _node(shape, name, ["in_file"], at)
        workflow.connect(*_added(workflow, region.of, f"{name}Of", at), node, "in_file")
    else:
        node = _leaf(region, name, at)
        workflow.add_nodes([node])
    return node, "mask_file"


def _leaf(region: Region, name: str, at: Places) -> Node:
    one = len(at.references) == 1
    made: Any
    if isinstance(region, Ball):
        made = SphereMask(centre=region.centre, radius=region.radius, origin=region.origin)
        node = _node(made, name, ["reference"], at)
    elif isinstance(region, Labels):
        made = LabelMask(labels=list(region.labels), regrid=region.regrid)
        fields = ["reference", "in_file", *(["table_file"] if region.names else [])]
        node = _node(made, name, fields, at)
        node.inputs.in_file = at.path(region.atlas)
        if region.names:
            node.inputs.table_file = at.path(region.names)
    else:
        assert isinstance(region, MaskFile)
        made = GivenMask(regrid=region.regrid, weights=region.weights)
        node = _node(made, name, ["reference", "in_file"], at)
        node.inputs.in_file = at.path(region.path)
    node.inputs.reference = at.references[0] if one else list(at.references)
    return node


def _node(interface: Any, name: str, iterated: list[str], at: Places) -> Node:
    if len(at.references) == 1:
        node = Node(interface, name=name, mem_gb=0.3, n_procs=1)
    else:
        node = MapNode(interface, iterfield=iterated, name=name, mem_gb=0.3, n_procs=1)
    node.config = {"execution": {"hash_method": "content"}}
    return node
