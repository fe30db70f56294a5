"""What the engine's own plumbing does: Identity, Merge, Select, Split, Rename, and file grabbers.

Each rule is precise where the structure is known before the run, and otherwise falls back to the
union of its inputs, and says why. Here too: how the engine hands a value to an input, and what it
makes of an output, where that changes the structure of a list.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import cache, partial
from typing import Any

from nipype.interfaces.base import (
    BaseInterface,
    DynamicTraitedSpec,
    InputMultiObject,
    OutputMultiObject,
)
from nipype.interfaces.base.traits_extension import BasePath
from nipype.interfaces.io import (
    BIDSDataGrabber,
    DataFinder,
    DataGrabber,
    FreeSurferSource,
    IOBase,
    JSONFileGrabber,
    S3DataGrabber,
    SelectFiles,
    SSHDataGrabber,
    XNATSource,
)
from nipype.interfaces.utility import Function, IdentityInterface, Merge, Rename, Select, Split

from ..rules import NOTHING, Branch, Inputs, Leaf, Loss, Rule, Tree, joined, only
from .base import isdefined, traits

_SINGLE = (traits.BaseStr, traits.BaseFloat, traits.BaseInt, traits.BaseBool, BasePath)

RESOLVED = (SelectFiles, DataGrabber)
"""Grabbers whose files are looked up before the run, when all they need is known."""

SOURCES = (
    *(SelectFiles, DataGrabber, DataFinder, FreeSurferSource, BIDSDataGrabber),
    *(S3DataGrabber, SSHDataGrabber, XNATSource, JSONFileGrabber),
)
"""Interfaces that find files by themselves, subclasses included."""


# -- rules -----------------------------------------------------------------------------------


def _plain(inputs: Inputs, name: str) -> Tree:
    """An input, files or not: a value without a file keeps its place in the list."""
    return inputs.trees.get(name) or _without_files(inputs.settings.get(name))


def _without_files(value: Any) -> Tree:
    if isinstance(value, list):
        return Branch([_without_files(item) for item in value])
    return Leaf(NOTHING, single=not isinstance(value, tuple))


def _union(inputs: Inputs, reason: str, cure: str) -> Leaf:
    return joined(inputs.trees.values(), single=False, lost=Loss(reason, cure))


def _of_unknown_length(inputs: Inputs) -> Leaf:
    return _union(
        inputs,
        "the length of its list is not known before the run",
        "let a MapNode or a JoinNode make the list, or state the rule of the node that does",
    )


def _merged(inputs: Inputs) -> Tree:
    settings = inputs.settings
    names = sorted(
        (n for n in {*settings, *inputs.trees} if n[:2] == "in" and n[2:].isdecimal()),
        key=lambda name: int(name[2:]),
    )
    # A tuple is one element to the engine, whatever is inside.
    tuples = [isinstance(settings.get(name), tuple) for name in names]
    trees = [_plain(inputs, name) for name in names]
    flatten = settings.get("no_flatten") is not True
    if late := sorted({"axis", "no_flatten", "ravel_inputs"} & inputs.arriving):
        return _union(inputs, f"{' and '.join(late)} arrive over an edge", "set them literally")
    opaque = [
        name
        for name, tree, whole in zip(names, trees, tuples, strict=True)
        if isinstance(tree, Leaf) and not tree.single and not whole
    ]
    unknown = partial(
        _union,
        inputs,
        f"how many items {' and '.join(opaque)} will hold is not known before the run",
        "type the output that makes it (File, or a list made by a MapNode), state its rule by a "
        "contract, or merge with no_flatten=True",
    )
    if settings.get("axis", "vstack") == "hstack":
        if opaque:
            return unknown()
        rows = [tree.children if isinstance(tree, Branch) else [tree] for tree in trees]
        if any(tuples) or len({len(row) for row in rows}) != 1:
            return _union(
                inputs, "its inputs are tuples or differ in length", "give it lists of one length"
            )
        return Branch([Branch(list(column)) for column in zip(*rows, strict=True)])
    if opaque and flatten:
        return unknown()
    ravel = settings.get("ravel_inputs") is True
    items: list[Tree] = []
    for tree, whole in zip(trees, tuples, strict=True):
        if not (isinstance(tree, Branch) and flatten) or whole:
            items.append(tree)
            continue
        parts = _ravelled(tree) if ravel else tree.children
        if parts is None:
            return _union(
                inputs, "the depth of its lists is not known before the run", "leave ravel_inputs"
            )
        items += parts
    return Branch(items)


def _ravelled(tree: Tree) -> list[Tree] | None:
    """The elements at any depth; None when one of them may be a list."""
    if isinstance(tree, Leaf):
        return [tree] if tree.single else None
    made: list[Tree] = []
    for child in tree.children:
        parts = _ravelled(child)
        if parts is None:
            return None
        made += parts
    return made


def _selected(inputs: Inputs) -> Tree:
    tree, index = _plain(inputs, "inlist"), inputs.settings.get("index")
    if not isinstance(index, list):
        return _union(inputs, "its index arrives over an edge", "set the index literally")
    if not isinstance(tree, Branch):
        return _of_unknown_length(inputs)
    n = len(tree.children)
    if not all(isinstance(i, int) and -n <= i < n for i in index):
        return _union(inputs, f"its index {index} goes beyond {n} items", "correct the index")
    # A list of one is handed on as its item.
    return Branch([tree.children[i] for i in index])


def _split(part: int, inputs: Inputs) -> Tree:
    tree, sizes = _plain(inputs, "inlist"), inputs.settings.get("splits")
    if not isinstance(sizes, list) or "squeeze" in inputs.arriving:
        return _union(inputs, "its splits arrive over an edge", "set them literally")
    if not isinstance(tree, Branch):
        return _of_unknown_length(inputs)
    start = sum(sizes[:part])
    items = list(tree.children[start : start + sizes[part]])
    return items[0] if inputs.settings.get("squeeze") is True and len(items) == 1 else Branch(items)


@cache
def _same(field: str) -> Rule:
    # Each field of an Identity is by itself: what the others hold cannot reach it.
    return Rule(None, lambda inputs: _plain(inputs, field))


_MERGED = Rule(None, _merged)
_SELECTED = Rule(frozenset({"inlist"}), _selected)


@cache
def _part(part: int) -> Rule:
    return Rule(frozenset({"inlist"}), partial(_split, part))


@cache
def _renamed(fields: frozenset[str]) -> Rule:
    return only("in_file", ignored=tuple(fields))


def generic_rule(interface: Any, output: str) -> Rule | None:
    """The rule for an output of one of the engine's own interfaces; None for any other."""
    # The class itself: a subclass may do anything.
    kind = type(interface)
    if kind is IdentityInterface:
        return _same(output)
    if kind is Merge:
        return _MERGED
    if kind is Select:
        return _SELECTED
    if kind is Split:
        return _part(int(output[3:]) - 1)
    return _renamed(frozenset(interface.inputs.get())) if kind is Rename else None


def arranging(interface: Any) -> tuple[str, ...]:
    """The inputs of the engine's own plumbing that say where items go, and hold no data."""
    return {Select: ("index",), Split: ("splits",)}.get(type(interface), ())


# -- inputs and outputs ------------------------------------------------------------------------


def settings_of(inputs: Any) -> dict[str, Any]:
    """The defined values of an input spec, by field."""
    return {name: value for name, value in inputs.get().items() if isdefined(value)}


def outputs_of(interface: Any) -> Mapping[str, str]:
    """The outputs of an interface, and what their types tell.

    Returns
    -------
    mapping of str to {"single", "collapses", ""}
        One element; a list, of which the engine hands on a single item as it is; or anything.
    """
    kind = type(interface)
    if kind is Function:
        return dict.fromkeys(interface._output_names, "")
    if kind is IdentityInterface:
        return dict.fromkeys(interface._fields, "")
    fixed = kind._outputs is BaseInterface._outputs or (
        kind._outputs is IOBase._outputs and kind._add_output_traits is IOBase._add_output_traits
    )
    if fixed and "output_spec" not in vars(interface):
        return _fixed_outputs(kind.output_spec)
    return _types(interface._outputs())


@cache
def _fixed_outputs(spec: Any) -> Mapping[str, str]:
    return _types(spec()) if spec else {}


def _types(outputs: Any) -> Mapping[str, str]:
    if outputs is None:
        return {}
    found = {}
    for name in outputs.copyable_trait_names():
        kind = outputs.trait(name).trait_type
        collapses = "collapses" if isinstance(kind, OutputMultiObject) else ""
        found[name] = "single" if isinstance(kind, _SINGLE) else collapses
    return found


def receiver(inputs: Any, field: str) -> Callable[[Tree], Tree]:
    """How an input takes a tree: some make a list of what is none."""
    kind = _input_kind(inputs, field)
    if not isinstance(kind, InputMultiObject):
        return _as_it_is
    return partial(as_list, item=kind.inner_traits()[0].trait_type)


def map_receiver(inputs: Any, field: str) -> Callable[[Tree], Tree]:
    """How a field that a MapNode iterates over takes a tree: as a list of what the field takes."""
    return partial(as_list, item=_input_kind(inputs, field))


def _as_it_is(tree: Tree) -> Tree:
    return tree


def as_list(tree: Tree, item: Any = None) -> Tree:
    """A list of items: what is no list becomes one, and so does a list where an item is a list.

    Parameters
    ----------
    tree : Leaf or Branch
    item : trait type, optional
        What an item is.
    """
    if isinstance(tree, Leaf):
        return Branch([tree]) if tree.single else tree
    if isinstance(item, traits.List) and not isinstance(item, InputMultiObject) and tree.children:
        first = tree.children[0]
        if isinstance(first, Leaf):
            if first.single:
                return Branch([tree])
            return joined([tree], single=False)  # its items may be lists, and may be none
    return tree


def _input_kind(inputs: Any, field: str) -> Any:
    if isinstance(inputs, DynamicTraitedSpec):
        return _kind(inputs, field)
    spec: Any = type(inputs)
    return _fixed_input_kinds(spec).get(field)


@cache
def _fixed_input_kinds(spec: Any) -> dict[str, Any]:
    blank = spec()
    return {name: _kind(blank, name) for name in blank.copyable_trait_names()}


def _kind(inputs: Any, field: str) -> Any:
    trait = inputs.trait(field)
    return None if trait is None else trait.trait_type
