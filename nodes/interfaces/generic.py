"""Touch rules for the engine's own plumbing: Identity, Merge, Select, Split, Rename.

Each is precise where the structure is known before the run, and otherwise falls back to the
union of its inputs.
"""

from __future__ import annotations

from functools import partial
from typing import Any

from nipype.interfaces.utility import IdentityInterface, Merge, Rename, Select, Split

from ..rules import Branch, Inputs, Leaf, Rule, Tree, everything, only
from ..touch import Touch
from .base import isdefined


def _listed(name: str, inputs: Inputs) -> Tree:
    """An input of Merge, files or not: a value without a file keeps its place in the list."""
    if name in inputs.trees:
        return inputs.trees[name]
    value = inputs.settings[name]
    if isinstance(value, list):
        return Branch([Leaf(Touch()) for _ in value])
    return Leaf(Touch())


def _merged(inputs: Inputs) -> Tree:
    settings = inputs.settings
    names = sorted(
        (n for n in {*settings, *inputs.trees} if n[:2] == "in" and n[2:].isdecimal()),
        key=lambda name: int(name[2:]),
    )
    trees = [_listed(name, inputs) for name in names]
    # A tuple is one element to the engine, whatever is inside.
    whole = [isinstance(settings.get(name), tuple) for name in names]
    if settings.get("ravel_inputs") is True:
        return everything(inputs)
    flatten = settings.get("no_flatten") is not True
    opaque = any(isinstance(tree, Leaf) and not tree.single for tree in trees)
    if settings.get("axis", "vstack") == "hstack":
        if opaque or any(whole):
            return everything(inputs)
        rows = [tree.children if isinstance(tree, Branch) else [tree] for tree in trees]
        if len({len(row) for row in rows}) != 1:
            return everything(inputs)
        return Branch([Branch(list(column)) for column in zip(*rows, strict=True)])
    if opaque and flatten:
        return everything(inputs)
    items: list[Tree] = []
    for tree, one in zip(trees, whole, strict=True):
        if isinstance(tree, Branch) and flatten and not one:
            items += tree.children
        else:
            items.append(tree)
    return Branch(items)


def _selected(inputs: Inputs) -> Tree:
    tree, index = inputs.trees.get("inlist"), inputs.settings.get("index")
    if not isinstance(tree, Branch) or not isinstance(index, list):
        return everything(inputs)
    if not all(isinstance(i, int) and -len(tree.children) <= i < len(tree.children) for i in index):
        return everything(inputs)
    chosen = [tree.children[i] for i in index]
    return chosen[0] if len(chosen) == 1 else Branch(chosen)


def _split(part: int, inputs: Inputs) -> Tree:
    tree, sizes = inputs.trees.get("inlist"), inputs.settings.get("splits")
    if not isinstance(tree, Branch) or not isinstance(sizes, list):
        return everything(inputs)
    start = sum(sizes[:part])
    items = tree.children[start : start + sizes[part]]
    squeeze = inputs.settings.get("squeeze") is True
    return items[0] if squeeze and len(items) == 1 else Branch(list(items))


def generic_rule(interface: Any, output: str) -> Rule | None:
    """The rule for an output of one of the engine's own interfaces; None for any other."""
    # The class itself: a subclass may do anything.
    kind = type(interface)
    if kind is IdentityInterface:
        return Rule(
            frozenset(interface.inputs.get()),
            lambda inputs: inputs.trees.get(output, Leaf(Touch())),
        )
    if kind is Merge:
        return Rule(None, _merged)
    if kind is Select:
        return Rule(frozenset({"inlist"}), _selected)
    if kind is Split:
        return Rule(frozenset({"inlist"}), partial(_split, int(output[3:]) - 1))
    return only("in_file", ignored=interface.inputs.get()) if kind is Rename else None


def settings_of(inputs: Any) -> dict[str, Any]:
    """The defined values of an input spec, by field."""
    return {name: value for name, value in inputs.get().items() if isdefined(value)}
