"""Contracts from outside: what an interface that is not ours does with its inputs.

Our own interfaces carry their contract on the class. For any other, one line attaches it::

    contract(Smooth, geometry=("reference",))
    contract(node, rules={"out": each("in_files")})
    contract(MeanInMask, extraction=Meeting(mask="mask_file", data="in_file"))
    contract(TTest, statistic=Statistic(values="values"))

What guards is inherited, what is trusted is not: a subclass is still an extraction or a
statistic, but its rules and its geometry must be stated anew, because it may do anything.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, fields, replace
from functools import cache
from typing import Any, TypeVar

from nipype.interfaces.base import DynamicTraitedSpec
from nipype.interfaces.utility import Function
from nipype.pipeline.engine import Node

from ..errors import InputError
from ..rules import (
    Branch,
    Inputs,
    Leaf,
    Loss,
    Meeting,
    Rule,
    Statistic,
    Tree,
    everything,
    grid_of,
    joined,
)
from ..touch import Touch
from .base import SequesterInterface
from .generic import generic_rule, outputs_of

Target = TypeVar("Target")
_NOTE = "_sequester_contract"  # the attribute of an interface object that holds its own contract


@dataclass(frozen=True)
class Contract:
    """What is stated of an interface.

    Parameters
    ----------
    rules : mapping of str to Rule
        How outputs inherit touches; an output not named touches everything.
    geometry : frozenset of str
        Inputs that can reach outputs by their grid only.
    meeting, statistic : Meeting, Statistic or None
    marks : bool
        Whether outputs have to be given the mark of the meeting: the rules of our own
        interfaces give it themselves.
    """

    rules: Mapping[str, Rule] = field(default_factory=dict)
    geometry: frozenset[str] = frozenset()
    meeting: Meeting | None = None
    statistic: Statistic | None = None
    marks: bool = False

    def and_then(self, other: Contract) -> Contract:
        """This contract with what another states besides, or anew."""
        return Contract(
            {**self.rules, **other.rules},
            self.geometry | other.geometry,
            other.meeting or self.meeting,
            other.statistic or self.statistic,
            self.marks or other.marks,
        )

    def describe(self) -> str:
        """The contract in words, for a record: what the user has taken responsibility for.

        Examples
        --------
        >>> Contract(geometry=frozenset({"reference"})).describe()
        'geometry only: reference'
        """
        parts = [f"rules for {', '.join(sorted(self.rules))}"] if self.rules else []
        parts += [f"geometry only: {', '.join(sorted(self.geometry))}"] if self.geometry else []
        if self.meeting is not None:
            parts.append(f"extraction of {self.meeting.data} in {self.meeting.mask}")
        if self.statistic is not None:
            parts.append(f"statistic of {self.statistic.values}")
        return "; ".join(parts)


_NONE = Contract()
_of_class: dict[type, Contract] = {}
_known: dict[type, Contract] = {}  # what holds for each class, inheritance included


class _Note:
    """A contract on one interface object: its copies share it, a pickled one loses it.

    Rules are functions, which no worker could unpickle; the guard decides in the driver.
    """

    def __init__(self, contract: Contract | None = None) -> None:
        self.contract = contract

    def __deepcopy__(self, memo: Any) -> _Note:
        return self

    def __reduce__(self) -> tuple[type[_Note], tuple[()]]:
        return _Note, ()


def contract(
    target: Target,
    *,
    rules: Mapping[str, Rule] | None = None,
    geometry: Iterable[str] = (),
    extraction: Meeting | None = None,
    statistic: Statistic | None = None,
) -> Target:
    """State what an interface class, or one node, does with its inputs.

    A contract of a class holds wherever the class is used: MapNodes, JoinNodes, iterables,
    clones, nested workflows. That of a node goes with the node and its copies, not into a file
    that the workflow is saved to. A second contract adds to the first, and replaces what it
    states anew.

    Parameters
    ----------
    target : interface class or node
    rules : mapping of output name to Rule
        What each element of an output derives from (`each`, `only`, `everything` ...).
    geometry : iterable of str
        Inputs whose values cannot reach any output, only their grid: a reference image, say.
    extraction : Meeting
        The inputs with the mask and with the data that is read in it. Every output carries the
        mark of the meeting.
    statistic : Statistic
        The inputs with values, scores and labels, and what the statistic is valid for.

    Returns
    -------
    The target.

    Raises
    ------
    InputError
        For a field the target does not have, for our own interfaces, and for `Function` itself.

    Examples
    --------
    >>> from nipype import Function, Node
    >>> from sequester.nodes.rules import each
    >>> node = Node(Function(["maps", "grid"], ["out"]), name="smooth")
    >>> contract(node, rules={"out": each("maps")}, geometry=["grid"]).name
    'smooth'
    """
    geometry = frozenset([geometry] if isinstance(geometry, str) else geometry)
    stated = Contract(dict(rules or {}), geometry, extraction, statistic, extraction is not None)
    if isinstance(target, Node):
        interface = target.interface
        kind, where = type(interface), f"node {target.name}"
        _check(stated, kind, where, interface.inputs, interface._outputs())
    elif isinstance(target, type) and hasattr(target, "input_spec"):
        kind, where = target, f"interface {target.__name__}"
        if kind is Function:
            raise InputError(
                "a contract for every Function",
                where=where,
                got="the class Function, whose nodes do different things",
                remedy="give the contract to one node: contract(node, ...)",
            )
        _check(stated, kind, where, *(spec and spec() for spec in _specs(kind)))
    else:
        raise InputError(
            "a contract for neither an interface class nor a node",
            expected="a class such as Smooth, or a node",
            got=repr(target),
            remedy="contract(Smooth, ...) or contract(node, ...)",
        )
    if isinstance(target, Node):
        note = vars(interface).get(_NOTE)
        earlier = note.contract if note and note.contract else _NONE
        setattr(interface, _NOTE, _Note(earlier.and_then(stated)))
    else:
        _of_class[kind] = _of_class.get(kind, _NONE).and_then(stated)
        _known.clear()
    return target


def contract_of(interface: Any) -> Contract:
    """What holds for an interface object: its class, contracts of the class, and its own.

    Raises
    ------
    InputError
        When the object had a contract of its own and lost it in a file.
    """
    kind = type(interface)
    found = _known.get(kind)
    if found is None:
        found = _known[kind] = _class_contract(kind)
    note = vars(interface).get(_NOTE)
    if note is None:
        return found
    if note.contract is None:
        raise InputError(
            "the contract of a node is lost",
            where=f"a node with interface {kind.__name__}",
            got="a workflow read from a file: rules are functions and are not saved",
            remedy="attach it again with contract(node, ...), or to the class",
        )
    return found.and_then(note.contract)


def told_of(interface: Any) -> bool:
    """Whether a contract was attached, if only an empty one: that there is nothing to state."""
    attached = any(base in _of_class for base in type(interface).__mro__)
    return attached or _NOTE in vars(interface)


def as_stated(interface: Any, inputs: Inputs) -> Inputs:
    """The inputs of an interface; of those that a contract calls geometry, the grid alone."""
    geometry = contract_of(interface).geometry
    grids = {f: grid_of(inputs.trees[f]) for f in geometry if f in inputs.trees}
    return replace(inputs, trees={**inputs.trees, **grids}) if grids else inputs


def ruled(interface: Any, inputs: Inputs) -> dict[str, Tree]:
    """The tree of each output, by the rule of the interface, of its contract, or of the engine."""
    stated, inputs = contract_of(interface), as_stated(interface, inputs)
    by_rule: dict[Rule, Tree] = {}  # outputs often share one
    made = {}
    for output, kind in outputs_of(interface).items():
        rule = stated.rules.get(output) or generic_rule(interface, output) or everything
        if rule not in by_rule:
            by_rule[rule] = rule(inputs)
        made[output] = _finished(interface, output, kind, rule, by_rule[rule], inputs, stated)
    return made


def _finished(
    interface: Any, output: str, kind: str, rule: Rule, tree: Tree, inputs: Inputs, stated: Contract
) -> Tree:
    """What a rule gave, with what the type of the output tells and the marks of a meeting."""
    if isinstance(tree, Leaf) and rule is everything:
        lost = None
        if len(inputs.trees) > 1 or any(isinstance(t, Branch) for t in inputs.trees.values()):
            lost = _unknown_rule(type(interface).__name__, output)
        tree = replace(tree, single=kind == "single", lost=lost)
    if kind == "collapses" and isinstance(tree, Branch) and len(tree.children) == 1:
        tree = tree.children[0]  # the engine hands on such a list of one as its item
    if stated.marks and stated.meeting is not None:
        tree = _marked(tree, stated.meeting.marks(inputs))
    return tree


@cache
def _unknown_rule(kind: str, output: str) -> Loss:
    target = "NODE" if kind == "Function" else kind
    return Loss(
        f"what {kind} does is not known, so its output is taken to derive from all its inputs",
        f"if it really keeps the items apart, say so: contract({target}, "
        f"rules={{{output!r}: each(INPUT)}}, geometry=[INPUTS OF WHICH ONLY THE GRID COUNTS])",
    )


def _marked(tree: Tree, marks: list[Leaf]) -> Tree:
    """A foreign extraction's output with the marks of its meetings: item by item if they pair."""
    if isinstance(tree, Branch):
        pairs = len(tree.children) == len(marks)
        return Branch(
            [_marked(c, [marks[i]] if pairs else marks) for i, c in enumerate(tree.children)]
        )
    extractions = frozenset(mark for leaf in marks for mark in leaf.touch.extractions)
    biased = any(leaf.touch.biased for leaf in marks)
    mark = Leaf(Touch(extractions=extractions, biased=biased))
    return joined([tree, mark], single=tree.single, lost=tree.lost)


def _class_contract(kind: type) -> Contract:
    own = "touch_rules" in vars(kind)
    meeting = getattr(kind, "meeting", None)
    found = Contract(
        vars(kind).get("touch_rules", {}),
        meeting=meeting,
        statistic=getattr(kind, "statistic", None),
        marks=meeting is not None and not own,
    )
    for base in reversed(kind.__mro__):
        stated = _of_class.get(base, _NONE)
        inherited = Contract({}, frozenset(), stated.meeting, stated.statistic, stated.marks)
        found = found.and_then(stated if base is kind else inherited)
    return found


def _specs(kind: Any) -> tuple[Any, Any]:
    return kind.input_spec, kind.output_spec


def _check(stated: Contract, kind: type, where: str, inputs: Any, outputs: Any) -> None:
    """Whether all fields that a contract names are there."""
    if issubclass(kind, SequesterInterface):
        raise InputError(
            "a contract for an interface of sequester",
            where=where,
            got=kind.__name__,
            remedy="leave it out: these carry their contract on the class",
        )
    named = set(stated.geometry)
    for rule in stated.rules.values():
        named |= rule.names or set()
    for one in (stated.meeting, stated.statistic):
        for part in fields(one) if one is not None else ():
            value = getattr(one, part.name)
            if part.name != "cure" and not isinstance(value, bool):
                named |= {value} if isinstance(value, str) else set(value)
    # A field of an interface with fields of its own making may come later, with an edge.
    _there(named - {""}, inputs, where, "input")
    _there(set(stated.rules), outputs, where, "output")


def _there(named: set[str], spec: Any, where: str, what: str) -> None:
    known = set() if spec is None else set(spec.copyable_trait_names())
    missing = sorted(named - known)
    if missing and not (isinstance(spec, DynamicTraitedSpec) and not known):
        raise InputError(
            f"a contract names an {what} that is not there",
            where=where,
            expected=", ".join(sorted(known)) or f"no {what}s",
            got=", ".join(missing),
            remedy="correct the name",
        )
