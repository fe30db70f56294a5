"""Touch rules for the engine's own plumbing: Identity, Merge, Select, Split, Rename.

Each is precise where the structure is known before the run, and otherwise falls back to the
union of its inputs.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from nipype.interfaces.utility import IdentityInterface, Merge, Rename, Select, Split

from ..rules import Branch, Inputs, Rule, Tree, everything, leaves, only
from .base import isdefined


def _merged(inputs: Inputs) -> Tree:
    settings = inputs.settings
    names = sorted(
        (name for name in inputs.trees if name[:2] == "in" and name[2:].isdigit()),
        key=lambda name: int(name[2:]),
    )
    trees = [inputs.trees[name] for name in names]
    opaque = any(not leaf.single for tree in trees for leaf in leaves(tree))
    if opaque or settings.get("ravel_inputs") is True:
        return everything(inputs)
    if settings.get("axis", "vstack") == "hstack":
        rows = [tree.children if isinstance(tree, Branch) else [tree] for tree in trees]
        if len({len(row) for row in rows}) != 1:
            return everything(inputs)
        return Branch([Branch(list(column)) for column in zip(*rows, strict=True)])
    items: list[Tree] = []
    for tree in trees:
        if isinstance(tree, Branch) and settings.get("no_flatten") is not True:
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


def _split(part: int) -> Rule:
    def rule(inputs: Inputs) -> Tree:
        tree, sizes = inputs.trees.get("inlist"), inputs.settings.get("splits")
        if not isinstance(tree, Branch) or not isinstance(sizes, list):
            return everything(inputs)
        start = sum(sizes[:part])
        items = tree.children[start : start + sizes[part]]
        squeeze = inputs.settings.get("squeeze") is True
        return items[0] if squeeze and len(items) == 1 else Branch(list(items))

    return rule


def _passed(name: str) -> Rule:
    def rule(inputs: Inputs) -> Tree:
        return inputs.trees.get(name, Branch([]))

    return rule


def generic_rule(interface: Any, output: str) -> Rule | None:
    """The rule for an output of one of the engine's own interfaces; None for any other."""
    kinds: list[tuple[type, Callable[[], Rule]]] = [
        (IdentityInterface, lambda: _passed(output)),
        (Merge, lambda: _merged),
        (Select, lambda: _selected),
        (Split, lambda: _split(int(output[3:]) - 1)),
        (Rename, lambda: only("in_file")),
    ]
    for kind, rule in kinds:
        # The class itself: a subclass may do anything.
        if type(interface) is kind:
            return rule()
    return None


def settings_of(inputs: Any) -> dict[str, Any]:
    """The defined values of an input spec, by field."""
    return {name: value for name, value in inputs.get().items() if isdefined(value)}
