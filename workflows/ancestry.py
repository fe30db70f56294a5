"""Touches, propagated through the engine's expanded graph.

The graph is the one the engine will run: iterables expanded, identity nodes resolved. In
topological order, every node's input trees are put together from its literal files and from
the output trees of its sources, and the touch rules of its interface give its output trees.

What a graph cannot show, and what is done about it:
- the length of an output whose type does not tell: all its elements share one touch;
- what a connection function returns: the union of what it was given;
- what a file grabber will find when an edge tells it where to look: unknown;
- a file reached by its path and not by an edge: seen while running (`Ancestry.observe`).

Whoever asks why elements were not told apart is answered by `rules.lost_precision`.
"""

from __future__ import annotations

import os
import re
from collections.abc import Iterator, Mapping
from copy import deepcopy
from dataclasses import replace
from pathlib import Path
from typing import Any

import networkx as nx
from nipype.pipeline.engine import JoinNode, MapNode

from ..nodes.interfaces.base import SequesterInterface, traits
from ..nodes.interfaces.contracts import contract_of, ruled
from ..nodes.interfaces.generic import (
    RESOLVED,
    SOURCES,
    arranging,
    as_list,
    map_receiver,
    outputs_of,
    receiver,
    settings_of,
)
from ..nodes.rules import (
    NOTHING,
    Branch,
    Inputs,
    Leaf,
    Loss,
    Meeting,
    Statistic,
    Tree,
    joined,
    stamped,
)
from ..nodes.touch import Touch
from .inlined import given_to_functions
from .literals import named_in, paths_in
from .literals import plain as plain_value
from .scorelists import score_trees
from .study import Labels, Study


def node_name(node: Any) -> str:
    """The name of a node of the expanded graph, unique in it."""
    return ".".join(part for part in (node._hierarchy, node._id) if part)


_LENGTH_UNKNOWN = Loss(
    "it maps over a list whose length is not known before the run",
    "let a MapNode or a JoinNode make that list; or if the node that makes it really keeps the "
    "items apart, say so: contract(NODE, rules={OUTPUT: each(INPUT)})",
)
_UNIQUE = Loss(
    "unique=True drops repeats, and which is not known before the run", "leave unique=True out"
)
_SET = Loss("it joins into a set, which has no order", "join into a list")
_LONGEST = 4096  # of a file name
SEEN = " (seen while running)"  # beside a place that the graph did not show


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
        self._names = {node: node_name(node) for node in self._order}
        self._files: dict[tuple[str, int | None, Labels], Leaf | None] = {}
        self._seen: dict[tuple[str, str], list[Leaf]] = {}
        self.inputs: dict[str, Inputs] = {}
        self.outputs: dict[tuple[str, str], Tree] = {}
        self.propagate()

    @property
    def nodes(self) -> list[Any]:
        """The nodes, sources first."""
        return self._order

    @property
    def graph(self) -> Any:
        """The expanded graph; an edge's ``connect`` lists (output, input)."""
        return self._graph

    def propagate(self) -> None:
        """Compute all trees, sources first."""
        self._files.clear()  # a file may have come to be since
        for node, name in self._names.items():
            inputs = self._inputs_of(node, name)
            self.inputs[name] = inputs
            for output, tree in self._outputs_of(node, inputs).items():
                self.outputs[name, output] = stamped(tree, f"{name}.{output}")

    # -- inputs -----------------------------------------------------------------------------

    def _inputs_of(self, node: Any, name: str) -> Inputs:
        interface = node.interface
        settings = settings_of(interface.inputs)
        hidden: dict[str, Any] = {}
        if node.inputs is not interface.inputs:
            own = settings_of(node.inputs)
            if isinstance(node, MapNode):
                # It runs on its own iterfields, and on what its interface holds of the others;
                # the two can differ, and which of them comes from where nobody can tell.
                hidden = {f: v for f, v in own.items() if f not in node.iterfield}
                own = {f: v for f, v in own.items() if f in node.iterfield}
            settings.update(own)
        edges = self._incoming(node, settings)
        for field in edges:  # what an edge brings replaces a literal
            settings.pop(field, None)
        trees: dict[str, Tree] = {}
        own = vars(type(interface))  # a subclass may read them otherwise
        volumes = own.get("volumes", {})
        labels = {field: read(settings) for field, read in own.get("labels_read", {}).items()}
        for field, value in settings.items():
            code = field == "function_str"
            tree = (
                self._file(value, None, code=True)
                if code
                else self._literal(value, settings.get(volumes.get(field, "")), labels.get(field))
            )
            if tree is not None:
                trees[field] = tree
        for field, value in hidden.items():
            if field not in edges and field != "function_str" and value is not settings.get(field):
                tree = self._literal(value, settings.get(volumes.get(field, "")))
                if tree is not None and field in trees:
                    if tree.touch != trees[field].touch:
                        trees[field] = joined([trees[field], tree], single=False)
                elif tree is not None:
                    trees[field] = tree
        trees.update(edges)
        for field, values in given_to_functions(node).items():
            slot = join_slot(node, field)
            trees.update(self._computed(slot[0] if slot else field, values, trees))
        for field, tree in trees.items():
            maps = isinstance(node, MapNode) and field in node.iterfield
            receive = map_receiver if maps and not node.nested else receiver
            trees[field] = (
                as_list(tree) if maps and node.nested else receive(interface.inputs, field)(tree)
            )
        for (where, field), extra in self._seen.items():
            if where == name:
                trees[field] = _with_extra(trees.get(field), extra)
        study = self.study
        if not isinstance(node.interface, SequesterInterface):  # ours have rules for their scores
            alone = getattr(node, "iterfield", ())
            told = {f: v for f, v in settings.items() if f not in arranging(interface)}
            trees.update(score_trees(study, told, trees, name, alone))
        return Inputs(trees, settings, name, frozenset(edges), study.declared, study.scores)

    def _computed(
        self, field: str, values: list[Any], trees: Mapping[str, Tree]
    ) -> dict[str, Tree]:
        """A literal that functions made before the graph was there, of what they were given."""
        parts = [tree for value in values if (tree := self._literal(value)) is not None]
        if not parts:
            return {}
        lost = Loss(
            "a function stands on a connection from an identity node, and may return anything of "
            "what it is given",
            "let a node do it: Select, Split, or one with a contract",
        )
        own = [trees[field]] if field in trees else []
        return {field: joined([*own, *parts], single=False, lost=lost)}

    def _incoming(self, node: Any, settings: dict[str, Any]) -> dict[str, Tree]:
        """The trees that arrive over edges, the slots of a JoinNode put back into lists."""
        arriving: dict[str, Tree] = {}
        slots: dict[str, dict[int, Tree]] = {}
        joins = isinstance(node, JoinNode)
        if joins:  # right behind its iterable, a JoinNode's slots hold literals
            for field in list(settings):
                slot = join_slot(node, field)
                if slot is not None:
                    tree = self._literal(value := settings.pop(field)) or plain(value)
                    slots.setdefault(slot[0], {})[slot[1]] = tree
        for source, _, data in self._graph.in_edges(node, data=True):
            for output, field in data["connect"]:
                tree = self._source(self._names[source], output)
                slot = join_slot(node, field) if joins else None
                if slot is not None:
                    slots.setdefault(slot[0], {})[slot[1]] = tree
                else:
                    arriving[field] = tree
        for field, items in slots.items():
            # A slot that nothing fills keeps its place in the list.
            n = max(node._next_slot_index, *items)
            listed = Branch([items.get(k, Leaf(NOTHING)) for k in range(1, n + 1)])
            arriving[field] = listed
            if isinstance(node.interface.inputs.trait(field).trait_type, traits.Set):
                arriving[field] = joined([listed], single=False, lost=_SET)
            elif node._unique:
                arriving[field] = joined([listed], single=False, lost=_UNIQUE)
        return arriving

    def _source(self, name: str, output: Any) -> Tree:
        if isinstance(output, tuple):  # a connection function: (output, function, arguments)
            tree = self.outputs.get((name, output[0]))
            if tree is None:
                return Leaf(NOTHING, single=False)
            lost = Loss(
                f"a function stands on a connection from its output {output[0]}, and may return "
                "anything of what it is given",
                "let a node do it: Select, Split, or one with a contract",
                name,
            )
            return joined([tree], single=False, lost=lost)
        return self.outputs.get((name, output)) or Leaf(NOTHING, single=False)

    def _literal(self, value: Any, volume: Any = None, labels: Labels = None) -> Tree | None:
        """The tree of a literal: None when it holds no file."""
        value = plain_value(value)
        if isinstance(value, str | Path):
            number = volume if isinstance(volume, int) and volume >= 0 else None
            key = (str(value), number, labels)
            if key not in self._files:
                self._files[key] = self._file(*key)
            return self._files[key]
        if isinstance(value, list):
            numbers = volume if isinstance(volume, list | tuple) else [volume] * len(value)
            items = [self._literal(v, n, labels) for v, n in zip(value, numbers, strict=False)]
            if all(item is None for item in items):
                return None
            return Branch(
                [plain(v) if item is None else item for v, item in zip(value, items, strict=False)]
            )
        if isinstance(value, tuple | set | frozenset):
            # One element to some interfaces, a list to others.
            made = (self._literal(item, volume, labels) for item in value)
            parts = [tree for tree in made if tree is not None]
            return joined(parts, single=False) if parts else None
        return None

    def _file(
        self, text: str, number: int | None, labels: Labels = None, *, code: bool = False
    ) -> Leaf | None:
        """What a text names: a file, or files that stand in it (a command, a pattern).

        What a program's own text names besides declared files may be a place to write to.
        """
        if not code and len(text) <= _LONGEST and "\n" not in text:
            touch = self.study.touch_of(text, number, labels)
            if touch is not None:
                place = self.study.relative(text)
                return Leaf(touch, place=place if number is None else f"{place} volume {number}")
        named = named_in(text, self.study, strangers=not code)
        parts = [Leaf(touch, place=place) for place, touch in named]
        return joined(parts, single=False) if parts else None

    # -- outputs ----------------------------------------------------------------------------

    def _outputs_of(self, node: Any, inputs: Inputs) -> dict[str, Tree]:
        interface = node.interface
        # The interface itself knows its outputs, dynamic ones (Function, Split ...) included.
        names = list(outputs_of(interface))
        if isinstance(interface, SOURCES):
            return self._grabbed(node, inputs, names)
        if not isinstance(node, MapNode):
            return ruled(interface, inputs)
        given = iterations(node, inputs)
        if isinstance(given, list):
            return _collated(names, _over(node, given))
        return {
            name: joined([tree], single=False, lost=_LENGTH_UNKNOWN)
            for name, tree in ruled(interface, given).items()
        }

    def _grabbed(self, node: Any, inputs: Inputs, names: list[str]) -> dict[str, Tree]:
        """What a node finds on disk: known before the run when nothing arrives over an edge."""
        late = "" if inputs.arriving else "what it finds is not known before the run"
        if type(node.interface) in RESOLVED and not inputs.arriving:
            try:
                found = _found(node.interface, iterations(node, inputs))
            except OSError:
                late = "it finds nothing yet, and might when it runs"
            else:
                return {
                    name: self._literal(value := _picked(found, name)) or plain(value)
                    for name in names
                }
        lost = Loss(
            late
            or f"{' and '.join(sorted(inputs.arriving))} arrive over an edge, so what it "
            "finds is not known before the run",
            "give it all it needs as literals or iterables, and let the files be there before",
        )
        finds = Leaf(Touch(unknown=frozenset({f"what {inputs.where} finds"})), place=inputs.where)
        parts = [*inputs.trees.values(), finds]
        return {name: joined(parts, single=False, lost=lost) for name in names}

    # -- while running ----------------------------------------------------------------------

    def observe(self, node: Any, field: str, found: Mapping[str, Touch]) -> None:
        """Add what a node turned out to be given: the files it reads, and their touches."""
        self._seen.setdefault((node_name(node), field), []).extend(
            Leaf(touch, place=f"{place}{SEEN}") for place, touch in found.items()
        )

    @property
    def seen(self) -> list[Leaf]:
        """The files that were seen while running, besides those that the graph shows."""
        return [leaf for found in self._seen.values() for leaf in found]


Iterations = Inputs | list["Iterations"]


def iterations(node: Any, inputs: Inputs) -> Iterations:
    """What each iteration of a MapNode is given; as one when their number is not known.

    For a nested MapNode a list of lists; for any other node its inputs, as they are.
    """
    if not isinstance(node, MapNode):
        return inputs
    fields = [f for f in node.iterfield if f in inputs.trees or f in inputs.settings]
    nested = bool(node.nested)
    # Per field: the items the engine will iterate over, in its order; None when not known. What
    # may be a list at the bottom of a nested one keeps its place, if nothing is paired with it.
    whole = nested and len(fields) > 1
    trees = {
        f: _items(inputs.trees[f], nested=nested, whole=whole) for f in fields if f in inputs.trees
    }
    values = {f: _values(inputs.settings[f], nested=nested) for f in fields if f in inputs.settings}
    lengths = {
        None if items is None else len(items) for items in [*trees.values(), *values.values()]
    }
    if len(lengths) != 1 or None in lengths:
        union = {f: joined([inputs.trees[f]], single=False) for f in trees}
        return replace(inputs, trees={**inputs.trees, **union})
    shape: Any = inputs.trees.get(fields[0], inputs.settings.get(fields[0]))
    made: list[Inputs] = []
    received = {f: receiver(node.interface.inputs, f) for f in trees}
    for i, where in enumerate(_places(shape, inputs.where, nested=nested)):
        at = {f: received[f](items[i]) for f, items in trees.items() if items is not None}
        of = {f: items[i] for f, items in values.items() if items is not None}
        made.append(
            replace(
                inputs,
                trees={**inputs.trees, **at},
                settings={**inputs.settings, **of},
                where=where,
            )
        )
    return _shaped(iter(made), shape) if nested else list(made)


def _items(tree: Tree, *, nested: bool, whole: bool) -> list[Tree] | None:
    if isinstance(tree, Leaf):
        return [tree] if tree.single else None
    if not nested:
        return list(tree.children)
    made: list[Tree] = []
    for child in tree.children:
        if isinstance(child, Leaf) and not whole:
            made.append(child)
            continue
        items = _items(child, nested=True, whole=whole)
        if items is None:
            return None
        made += items
    return made


def _values(value: Any, *, nested: bool) -> list[Any]:
    if not isinstance(value, list):
        return [value]
    return [v for item in value for v in _values(item, nested=True)] if nested else list(value)


def _listed(shape: Any) -> Any:
    """The items of a tree or of a value; None when it is one element."""
    if isinstance(shape, Branch):
        return shape.children
    return shape if isinstance(shape, list) else None


def _places(shape: Any, where: str, *, nested: bool) -> Iterator[str]:
    """Where each iteration stands."""
    items = _listed(shape)
    for i, item in enumerate([shape] if items is None else items):
        if nested and _listed(item) is not None:
            yield from _places(item, f"{where}[{i}]", nested=True)
        else:
            yield f"{where}[{i}]"


def _shaped(made: Iterator[Inputs], shape: Any) -> list[Iterations]:
    """The iterations of a nested MapNode, nested as its first iterfield is."""
    items = _listed(shape)
    return [
        next(made) if _listed(item) is None else _shaped(made, item)
        for item in ([shape] if items is None else items)
    ]


def _over(node: Any, given: list[Iterations]) -> list[Any]:
    """The outputs of each iteration, nested as the iterations are."""
    return [_over(node, one) if isinstance(one, list) else _iteration(node, one) for one in given]


def _iteration(node: Any, given: Inputs) -> dict[str, Tree]:
    """What one iteration gives, or several, where a nested MapNode may iterate deeper still."""
    made = ruled(node.interface, given)
    items = [given.trees[f] for f in node.iterfield if f in given.trees] if node.nested else []
    if any(isinstance(item, Leaf) and not item.single for item in items):
        return {name: joined([tree], single=False) for name, tree in made.items()}
    return made


def _collated(names: list[str], made: list[Any]) -> dict[str, Tree]:
    """Per output, the list of what the iterations give."""

    def branch(items: list[Any], name: str) -> Branch:
        return Branch([branch(i, name) if isinstance(i, list) else i[name] for i in items])

    return {name: branch(made, name) for name in names}


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


def _found(interface: Any, given: Iterations, *, copy: bool = False) -> Any:
    """The outputs of a grabber for each iteration, nested as they are."""
    if isinstance(given, list):
        return [_found(interface, one, copy=True) for one in given]
    if copy:
        interface = deepcopy(interface)
        for field, value in given.settings.items():
            setattr(interface.inputs, field, value)
    return interface._list_outputs()


def _picked(found: Any, name: str) -> Any:
    return [_picked(one, name) for one in found] if isinstance(found, list) else found.get(name)


def meetings_of(interface: Any) -> tuple[Meeting | None, Statistic | None]:
    """The meeting and the statistic an interface declares, or a contract declares of it."""
    stated = contract_of(interface)
    return stated.meeting, stated.statistic


def plain(value: Any) -> Tree:
    """The tree of a value without a file: its items keep their places."""
    return Branch([plain(item) for item in value]) if isinstance(value, list) else Leaf(NOTHING)


def _with_extra(tree: Tree | None, extra: list[Leaf]) -> Tree:
    if tree is None:
        return joined(extra, single=False)
    if isinstance(tree, Leaf):
        return joined([tree, *extra], single=tree.single, lost=tree.lost)
    return Branch([_with_extra(child, extra) for child in tree.children])


def files_in(value: Any) -> list[str]:
    """The existing files that a nested value names, as its items or inside a text."""
    value = plain_value(value)
    if isinstance(value, list | tuple | set | frozenset):
        return [path for item in value for path in files_in(item)]
    if not isinstance(value, str | Path) or not str(value):
        return []
    text = str(value)
    if len(text) < _LONGEST and "\n" not in text and os.path.isfile(text):
        return [text]
    return [word for word in paths_in(text) if os.path.isfile(word)]
