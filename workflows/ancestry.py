"""Touches, propagated through the engine's expanded graph.

The graph is the one the engine will run: iterables expanded, identity nodes resolved. In
topological order, every node's input trees are put together from its literal files and from
the output trees of its sources, and the touch rules of its interface give its output trees.

What a graph cannot show, and what is done about it:
- the length of an output whose type does not tell: all its elements share one touch;
- what a connection function returns: the union of what it was given;
- a file reached by its path and not by an edge: seen while running (`Ancestry.observe`).
"""

from __future__ import annotations

import os
import re
from collections.abc import Callable, Iterator, Mapping
from copy import deepcopy
from dataclasses import replace
from functools import partial
from pathlib import Path
from typing import Any

import networkx as nx
from nipype.interfaces.base.traits_extension import BasePath
from nipype.interfaces.io import DataGrabber, SelectFiles
from nipype.pipeline.engine import JoinNode, MapNode

from ..nodes.interfaces.base import traits
from ..nodes.interfaces.generic import generic_rule, settings_of
from ..nodes.rules import (
    Branch,
    Inputs,
    Leaf,
    Meeting,
    Statistic,
    Tree,
    element,
    everything,
    joined,
    leaves,
    stamped,
)
from ..nodes.touch import Touch
from .study import Study

_SINGLE = (traits.BaseStr, traits.BaseFloat, traits.BaseInt, traits.BaseBool, BasePath)


def node_name(node: Any) -> str:
    """The name of a node of the expanded graph, unique in it."""
    return ".".join(part for part in (node._hierarchy, node._id) if part)


_GRABBERS = (SelectFiles, DataGrabber)


class Ancestry:
    """The trees of all inputs and outputs of a graph.

    Parameters
    ----------
    graph : networkx.DiGraph
        The expanded graph, as the engine hands it to a plugin.
    study : Study
    """

    def __init__(self, graph: Any, study: Study) -> None:
        self.study = study
        self._graph = graph
        self._order = list(nx.topological_sort(graph))
        self._seen: dict[tuple[str, str], list[Leaf]] = {}
        self.inputs: dict[str, Inputs] = {}
        self.outputs: dict[tuple[str, str], Tree] = {}
        self.propagate()

    @property
    def nodes(self) -> list[Any]:
        """The nodes, sources first."""
        return self._order

    def propagate(self) -> None:
        """Compute all trees, sources first."""
        for node in self._order:
            name = node_name(node)
            inputs = self._inputs_of(node, name)
            self.inputs[name] = inputs
            for output, tree in self._outputs_of(node, inputs).items():
                self.outputs[name, output] = stamped(tree, f"{name}.{output}")

    # -- inputs -----------------------------------------------------------------------------

    def _inputs_of(self, node: Any, name: str) -> Inputs:
        settings = {**settings_of(node.interface.inputs), **settings_of(node.inputs)}
        edges = self._incoming(node, settings)
        for field in edges:  # what an edge brings replaces a literal
            settings.pop(field, None)
        trees: dict[str, Tree] = {}
        volumes = getattr(type(node.interface), "volumes", {})
        for field, value in settings.items():
            tree = self._literal(value, settings.get(volumes.get(field, "")))
            if tree is not None:
                trees[field] = tree
        trees.update(edges)
        for (where, field), extra in self._seen.items():
            if where == name:
                trees[field] = _with_extra(trees.get(field), extra)
        return Inputs(trees, settings, name, frozenset(edges), self.study.declared)

    def _incoming(self, node: Any, settings: dict[str, Any]) -> dict[str, Tree]:
        """The trees that arrive over edges, the slots of a JoinNode put back into lists."""
        arriving: dict[str, Tree] = {}
        slots: dict[str, dict[int, Tree]] = {}
        # Right behind its iterable, a JoinNode's slots hold literals.
        for field in list(settings):
            slot = join_slot(node, field)
            if slot is not None:
                tree = self._literal(settings.pop(field)) or Leaf(Touch())
                slots.setdefault(slot[0], {})[slot[1]] = tree
        for source, _, data in self._graph.in_edges(node, data=True):
            for output, field in data["connect"]:
                tree = self._source(node_name(source), output)
                slot = join_slot(node, field)
                if slot is not None:
                    slots.setdefault(slot[0], {})[slot[1]] = tree
                else:
                    arriving[field] = tree
        for field, items in slots.items():
            listed = Branch([items[k] for k in sorted(items)])
            # With unique=True the engine drops repeats: which, is not known before the run.
            unique = getattr(node, "_unique", False)
            arriving[field] = joined(leaves(listed), single=False) if unique else listed
        return arriving

    def _source(self, name: str, output: Any) -> Tree:
        if isinstance(output, tuple):  # a connection function: (output, function, arguments)
            tree = self.outputs.get((name, output[0]), Leaf(Touch()))
            return joined(leaves(tree), single=False)
        return self.outputs.get((name, output), Leaf(Touch()))

    def _literal(self, value: Any, volume: Any = None) -> Tree | None:
        """The tree of a literal: None when it holds no file."""
        if isinstance(value, list | tuple):
            numbers = volume if isinstance(volume, list | tuple) else [volume] * len(value)
            items = [self._literal(v, n) for v, n in zip(value, numbers, strict=False)]
            if all(item is None for item in items):
                return None
            return Branch([Leaf(Touch()) if item is None else item for item in items])
        if not isinstance(value, str | Path) or len(str(value)) > 4096 or "\n" in str(value):
            return None
        number = volume if isinstance(volume, int) and volume >= 0 else None
        touch = self.study.touch_of(str(value), number)
        if touch is None:
            return None
        place = self.study.relative(str(value))
        return Leaf(touch, place=place if number is None else f"{place} volume {number}")

    # -- outputs ----------------------------------------------------------------------------

    def _outputs_of(self, node: Any, inputs: Inputs) -> dict[str, Tree]:
        # The interface itself knows its outputs, dynamic ones (Function, Split ...) included.
        found = node.interface._outputs()
        names = list(found.get()) if found is not None else []
        grabbed = self._grabbed(node, inputs)
        if grabbed is not None:
            return grabbed
        if isinstance(node, MapNode):
            return self._mapped(node, inputs, names)
        return {name: _ruled(node.interface, name, inputs) for name in names}

    def _grabbed(self, node: Any, inputs: Inputs) -> dict[str, Tree] | None:
        """What a file grabber will find, when all its inputs are known before the run."""
        if type(node.interface) not in _GRABBERS or self._graph.in_degree(node):
            return None
        given = iterations(node, inputs)
        try:
            found = _found(node.interface, given)
        except OSError:
            return None  # it will fail when it runs, and say so itself
        names = node.interface._outputs().get()
        return {name: self._literal(_picked(found, name)) or Leaf(Touch()) for name in names}

    def _mapped(self, node: Any, inputs: Inputs, names: list[str]) -> dict[str, Tree]:
        """The outputs of a MapNode: a list with one tree per iteration."""
        given = iterations(node, inputs)
        made: dict[str, Tree] = {}
        for name in names:
            if isinstance(given, list):
                made[name] = _over(given, partial(_ruled, node.interface, name))
            else:
                tree = _ruled(node.interface, name, given)
                made[name] = joined(leaves(tree), single=False)
        return made

    # -- while running ----------------------------------------------------------------------

    def observe(self, node: Any, field: str, found: Mapping[str, Touch]) -> None:
        """Add what a node turned out to be given: the files it reads, and their touches."""
        self._seen.setdefault((node_name(node), field), []).extend(
            Leaf(touch, place=f"{place} (seen while running)") for place, touch in found.items()
        )


Iterations = Inputs | list["Iterations"]


def iterations(node: Any, inputs: Inputs) -> Iterations:
    """What each iteration of a MapNode is given; as one when their number is not known.

    For a nested MapNode a list of lists; for any other node its inputs, as they are.
    """
    if not isinstance(node, MapNode):
        return inputs
    iterated = [f for f in node.iterfield if f in inputs.trees or f in inputs.settings]
    return _iterated(inputs, iterated, nested=bool(getattr(node, "nested", False)))


def _iterated(inputs: Inputs, iterated: list[str], *, nested: bool) -> Iterations:
    lengths: set[int] = set()
    known = bool(iterated)
    for field in iterated:
        tree, value = inputs.trees.get(field), inputs.settings.get(field)
        if isinstance(tree, Branch):
            lengths.add(len(tree.children))
        elif isinstance(tree, Leaf):
            known = known and tree.single  # the engine puts a single value into a list
        elif isinstance(value, list | tuple):
            lengths.add(len(value))
    if not known or len(lengths) > 1:
        whole: dict[str, Tree] = {
            field: joined(leaves(tree), single=False)
            for field, tree in inputs.trees.items()
            if field in iterated
        }
        return replace(inputs, trees={**inputs.trees, **whole})
    made: list[Iterations] = []
    for i in range(lengths.pop() if lengths else 1):
        trees, settings = dict(inputs.trees), dict(inputs.settings)
        for field in iterated:
            if field in trees:
                trees[field] = element(trees[field], i)
            value = settings.get(field)
            if isinstance(value, list | tuple) and i < len(value):
                settings[field] = value[i]
        one = replace(inputs, trees=trees, settings=settings, where=f"{inputs.where}[{i}]")
        deeper = nested and any(isinstance(trees.get(field), Branch) for field in iterated)
        made.append(_iterated(one, iterated, nested=True) if deeper else one)
    return made


def _over(given: list[Iterations], derive: Callable[[Inputs], Tree]) -> Tree:
    return Branch([_over(one, derive) if isinstance(one, list) else derive(one) for one in given])


def flat(given: Iterations) -> Iterator[Inputs]:
    """All iterations, in order."""
    if isinstance(given, list):
        for one in given:
            yield from flat(one)
    else:
        yield given


def join_slot(node: Any, field: str) -> tuple[str, int] | None:
    """The field and the place in its list that a slot of a JoinNode stands for."""
    match = re.fullmatch(r"(.+)J(\d+)", field) if isinstance(node, JoinNode) else None
    return (match[1], int(match[2])) if match and match[1] in node.joinfield else None


def _found(interface: Any, given: Iterations) -> Any:
    """The outputs of a grabber for each iteration, nested as they are."""
    if isinstance(given, list):
        return [_found(interface, one) for one in given]
    one = deepcopy(interface)
    for field, value in given.settings.items():
        setattr(one.inputs, field, value)
    return one._list_outputs()


def _picked(found: Any, name: str) -> Any:
    return [_picked(one, name) for one in found] if isinstance(found, list) else found.get(name)


def meetings_of(interface: Any) -> tuple[Meeting | None, Statistic | None]:
    """The meeting and the statistic an interface declares."""
    return getattr(interface, "meeting", None), getattr(interface, "statistic", None)


def _ruled(interface: Any, output: str, inputs: Inputs) -> Tree:
    rules = getattr(type(interface), "touch_rules", {})
    rule = rules.get(output) or generic_rule(interface, output) or everything
    tree = rule(inputs)
    if rule is everything and isinstance(tree, Leaf) and _is_single(interface, output):
        tree.single = True
    return tree


def _is_single(interface: Any, output: str) -> bool:
    trait = interface._outputs().trait(output)
    return trait is not None and isinstance(trait.trait_type, _SINGLE)


def _with_extra(tree: Tree | None, extra: list[Leaf]) -> Tree:
    if tree is None:
        return joined(extra, single=False)
    if isinstance(tree, Leaf):
        return joined([tree, *extra], single=tree.single)
    return Branch([_with_extra(child, extra) for child in tree.children])


def files_in(value: Any) -> list[str]:
    """The strings of a nested value that name existing files."""
    if isinstance(value, list | tuple):
        return [path for item in value for path in files_in(item)]
    if isinstance(value, str | Path) and 0 < len(str(value)) < 4096 and "\n" not in str(value):
        return [str(value)] if os.path.isfile(value) else []
    return []
