"""The rules by which the elements of an output inherit the touches of the inputs.

A tree says what is known of a value's elements: a `Leaf` is one element (or, when the number
of elements cannot be known before the run, all of them at once), a `Branch` is a list. A rule
is a pure function from the trees of the inputs to the tree of one output. It stands on the
interface class, beside its ports, in the class attribute ``touch_rules``; an output without a
rule gets `everything`: every element touches the union of all inputs, in the role ``values``.

A leaf remembers the leaves it was made from, so that the path by which a unit came in can be
told afterwards.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from .touch import Extraction, Touch, union


@dataclass(eq=False)
class Leaf:
    """One element, or all elements of a list whose length is not known.

    Parameters
    ----------
    touch : Touch
        What it derives from.
    parents : tuple of Leaf
        The leaves it was made from.
    place : str
        Where it stands in the graph ("node.field[3]"), or the file it is.
    single : bool
        Whether it is known to be one element.
    """

    touch: Touch
    parents: tuple[Leaf, ...] = ()
    place: str = ""
    single: bool = True


@dataclass(eq=False)
class Branch:
    """A list of known length."""

    children: list[Tree] = field(default_factory=list)


Tree = Leaf | Branch


@dataclass(frozen=True)
class Inputs:
    """What a rule sees of a node.

    Parameters
    ----------
    trees : mapping of str to Tree
        The inputs that carry data, by field.
    settings : mapping of str to object
        All literal input values, by field.
    where : str
        The node's name in the graph.
    arriving : frozenset of str
        The fields that an edge fills: their values are not known before the run.
    declared : mapping of str to Touch
        What each origin declared in the study touches, by its source.
    """

    trees: Mapping[str, Tree]
    settings: Mapping[str, Any]
    where: str
    arriving: frozenset[str] = frozenset()
    declared: Mapping[str, Touch] = field(default_factory=dict)


@dataclass(frozen=True)
class Rule:
    """How one output inherits touches.

    An input that carries data and that the rule does not name (a parameter computed from data,
    say) is added to every element: what sets a parameter chooses too.

    Parameters
    ----------
    names : frozenset of str or None
        The inputs that `derive` accounts for; None for all of them.
    derive : callable
        From the inputs to the output's tree.
    """

    names: frozenset[str] | None
    derive: Callable[[Inputs], Tree]

    def __call__(self, inputs: Inputs) -> Tree:
        """The tree of the output."""
        tree = self.derive(inputs)
        if self.names is None:
            return tree
        extra = _all(inputs, sorted(inputs.trees.keys() - self.names))
        return _with(tree, extra) if extra else tree


def leaves(tree: Tree) -> Iterator[Leaf]:
    """All leaves of a tree, in order."""
    if isinstance(tree, Leaf):
        yield tree
    else:
        for child in tree.children:
            yield from leaves(child)


def joined(parts: Iterable[Leaf], *, single: bool = True) -> Leaf:
    """The element computed from all of these."""
    parents = tuple(parts)
    return Leaf(union(leaf.touch for leaf in parents), parents, single=single)


def element(tree: Tree, i: int) -> Tree:
    """Item i of a list; of a leaf, the leaf itself, whatever i is."""
    if isinstance(tree, Leaf):
        return tree
    if i < len(tree.children):
        return tree.children[i]
    return joined(leaves(tree))  # a list shorter than promised: every item, to be safe


def count(trees: Iterable[Tree]) -> int | None:
    """The number of items the branches among these agree on; None when no length is known."""
    lengths = {len(tree.children) for tree in trees if isinstance(tree, Branch)}
    return lengths.pop() if len(lengths) == 1 else None


def stamped(tree: Tree, place: str) -> Tree:
    """The same tree, standing at a place of the graph."""
    if isinstance(tree, Branch):
        return Branch([stamped(child, f"{place}[{i}]") for i, child in enumerate(tree.children)])
    parents = (tree,) if tree.place else tree.parents
    return Leaf(tree.touch, parents, place, tree.single)


def _with(tree: Tree, extra: list[Leaf]) -> Tree:
    if isinstance(tree, Leaf):
        made = joined([tree, *extra], single=tree.single)
        return made
    return Branch([_with(child, extra) for child in tree.children])


def path_to(leaf: Leaf, unit_bit: int) -> list[str]:
    """The places by which a unit came into a leaf, the file first."""
    places: list[str] = []
    here: Leaf | None = leaf
    while here is not None:
        if here.place and (not places or places[-1] != here.place):
            places.append(here.place)
        here = next((p for p in here.parents if p.touch.values & unit_bit), None)
    return places[::-1]


def _all(inputs: Inputs, names: Iterable[str], geometry: Iterable[str] = ()) -> list[Leaf]:
    parts = [leaf for name in names if name in inputs.trees for leaf in leaves(inputs.trees[name])]
    for name in geometry:
        if name in inputs.trees:
            parts += [
                Leaf(leaf.touch.as_geometry(), (leaf,)) for leaf in leaves(inputs.trees[name])
            ]
    return parts


def _everything(inputs: Inputs) -> Tree:
    return joined(_all(inputs, inputs.trees), single=False)


everything = Rule(None, _everything)
"""Every element touches all inputs: the rule for what we do not know."""


def only(
    *fields: str,
    geometry: Sequence[str] = (),
    ignored: Sequence[str] = (),
    single: bool = True,
) -> Rule:
    """An element (or a list) that touches these inputs whole; the ignored ones cannot reach it."""
    return Rule(
        frozenset({*fields, *geometry, *ignored}),
        lambda inputs: joined(_all(inputs, fields, geometry), single=single),
    )


def each(
    *fields: str,
    shared: Sequence[str] = (),
    geometry: Sequence[str] = (),
    one_or_each: Sequence[str] = (),
) -> Rule:
    """Element i touches item i of each field, and the shared inputs whole.

    A field of `one_or_each` with a single item is shared, and else like the others.
    """

    def derive(inputs: Inputs) -> Tree:
        listed = [inputs.trees[name] for name in one_or_each if name in inputs.trees]
        single = [t for t in listed if isinstance(t, Branch) and len(t.children) == 1]
        trees = [inputs.trees[name] for name in fields if name in inputs.trees]
        trees += [tree for tree in listed if tree not in single]
        common = [
            *_all(inputs, shared, geometry),
            *(leaf for tree in single for leaf in leaves(tree)),
        ]
        n = count(trees)
        if n is None:
            return joined([*_all(inputs, [*fields, *one_or_each]), *common], single=False)
        return Branch(
            [
                joined([*(leaf for tree in trees for leaf in leaves(element(tree, i))), *common])
                for i in range(n)
            ]
        )

    return Rule(frozenset({*fields, *shared, *geometry, *one_or_each}), derive)


def all_but_held_out(
    data: str,
    held_out: Callable[[Mapping[str, Any]], list[tuple[int, ...]]],
    known_by: Sequence[str] = (),
    shared: Sequence[str] = (),
    geometry: Sequence[str] = (),
) -> Rule:
    """Element k touches every item of `data` but those that fold k holds out.

    Parameters
    ----------
    data : str
        The field with one item per row.
    held_out : callable
        From the node's settings to the row numbers held out by each fold.
    known_by : sequence of str
        The settings that `held_out` reads; when one arrives over an edge, no fold can be told.
    shared, geometry : sequence of str
        Inputs that every fold touches whole, by values or by geometry only.
    """

    def derive(inputs: Inputs) -> Tree:
        common = _all(inputs, shared, geometry)
        tree = inputs.trees.get(data, Leaf(Touch(), single=False))
        if isinstance(tree, Leaf) or any(name in inputs.arriving for name in known_by):
            return joined([*leaves(tree), *common], single=False)
        rows = range(len(tree.children))
        return Branch(
            [
                joined(
                    [
                        *(x for i in rows if i not in out for x in leaves(tree.children[i])),
                        *common,
                    ]
                )
                for out in map(frozenset, held_out(inputs.settings))
            ]
        )

    return Rule(frozenset({data, *shared, *geometry}), derive)


def chosen_on(
    data: str,
    rows: Callable[[Mapping[str, Any]], list[tuple[int, ...]]],
    known_by: Sequence[str] = (),
    shared: Sequence[str] = (),
    one_or_each: Sequence[str] = (),
) -> Rule:
    """Element k touches the items of `data` that `rows` names for it, and no other.

    Parameters
    ----------
    data : str
        The field with one item per row.
    rows : callable
        From the node's settings to the row numbers that each element is chosen on.
    known_by : sequence of str
        The settings that `rows` reads; when one arrives over an edge, no element can be told.
    shared : sequence of str
        Inputs that every element touches whole.
    one_or_each : sequence of str
        Inputs with one item for all elements, or one for each.
    """

    def derive(inputs: Inputs) -> Tree:
        common = _all(inputs, shared)
        tree = inputs.trees.get(data, Leaf(Touch(), single=False))
        if isinstance(tree, Leaf) or any(name in inputs.arriving for name in known_by):
            return joined([*leaves(tree), *common, *_all(inputs, one_or_each)], single=False)
        made: list[Tree] = []
        for k, chosen in enumerate(rows(inputs.settings)):
            parts = [x for i in chosen for x in leaves(element(tree, i))]
            for name in one_or_each:
                if name in inputs.trees:
                    own = inputs.trees[name]
                    one = isinstance(own, Branch) and len(own.children) == 1
                    parts += leaves(own if one else element(own, k))
            made.append(joined([*parts, *common]))
        return Branch(made)

    return Rule(frozenset({data, *shared, *one_or_each}), derive)


@dataclass(frozen=True)
class Meeting:
    """The two inputs of an extraction: what was chosen, and the data it is judged on.

    Parameters
    ----------
    mask, data : str
        Field names. Item i of a list of masks meets item i of the data; one mask meets all.
    biased : str
        The setting that, when true, marks the values as biased (exploration).
    these_only : str
        The setting that, when true, declares that the claim is about the tested subjects only,
        not about those they were drawn from.
    certificate : str
        The setting with an orthogonality certificate (see `orthogonality`): mask and data may
        share units when it holds.
    """

    mask: str
    data: str
    biased: str = ""
    these_only: str = ""
    certificate: str = ""

    def pairs(self, inputs: Inputs) -> list[tuple[Leaf, Leaf]]:
        """Every mask element with the data element it is judged on."""
        # Nothing known of a side is an empty touch, which the judge will not let pass.
        mask = inputs.trees.get(self.mask) or Leaf(Touch(), place=f"{inputs.where}.{self.mask}")
        data = inputs.trees.get(self.data) or Leaf(Touch(), place=f"{inputs.where}.{self.data}")
        if isinstance(mask, Branch) and len(mask.children) == 1:
            mask = mask.children[0]  # one mask in a list is one mask for all data
        n = count([mask, data]) if isinstance(data, Branch) or isinstance(mask, Branch) else 1
        if n is None:  # lengths disagree: everything against everything
            return [(joined(leaves(mask)), joined(leaves(data)))]
        return [
            (joined(leaves(element(mask, i))), joined(leaves(element(data, i)))) for i in range(n)
        ]

    def lengths(self, inputs: Inputs) -> tuple[int, int] | None:
        """How many masks and data there are, when they cannot be paired."""
        mask, data = inputs.trees.get(self.mask), inputs.trees.get(self.data)
        if not isinstance(mask, Branch) or not isinstance(data, Branch):
            return None
        n_masks, n_data = len(mask.children), len(data.children)
        return None if n_masks in (1, n_data) else (n_masks, n_data)

    @property
    def rule(self) -> Rule:
        """Value i touches mask i and data i, and carries the mark of their meeting."""
        return Rule(frozenset({self.mask, self.data}), self._values)

    @property
    def whole(self) -> Rule:
        """All values in one file: it touches every mask and map, and carries every mark."""
        return Rule(
            frozenset({self.mask, self.data}), lambda inputs: joined(leaves(self._values(inputs)))
        )

    def _values(self, inputs: Inputs) -> Tree:
        biased = bool(self.biased and inputs.settings.get(self.biased))
        certified = getattr(inputs.settings.get(self.certificate), "holds", False) is True
        data = inputs.trees.get(self.data)
        made: list[Tree] = []
        for i, (mask, read) in enumerate(self.pairs(inputs)):
            value = joined([mask, read])
            where = f"{inputs.where}[{i}]"
            mark = Extraction(where, mask.touch.values, read.touch.values, certified)
            value.touch = value.touch.marked(mark, biased=biased)
            made.append(value)
        if len(made) == 1 and isinstance(made[0], Leaf) and not isinstance(data, Branch):
            made[0].single = data is not None and data.single
            return made[0]
        return Branch(made)


@dataclass(frozen=True)
class Statistic:
    """The inputs of a statistic, and what it is valid for.

    Parameters
    ----------
    values : str
        The field with the extracted values.
    cross_fitted : bool
        Whether it stays calibrated when the masks and the data take turns.
    these_only : str
        The setting that, when true, declares that it speaks of the tested subjects only.
    labels : str
        The setting that says who each value belongs to, when values of one person are averaged
        before anything else; then a person's own values may have taken turns.
    cure : str
        What to use instead when it is not.
    """

    values: str
    labels: str = ""
    cross_fitted: bool = False
    cure: str = ""
    these_only: str = ""
