"""The rules by which the elements of an output inherit the touches of the inputs.

A tree says what is known of a value's elements: a `Leaf` is one element (or, when the number
of elements cannot be known before the run, all of them at once), a `Branch` is a list. A rule
is a pure function from the trees of the inputs to the tree of one output. It stands on the
interface class, beside its ports, in the class attribute ``touch_rules``, or is attached from
outside by a contract; an output without a rule gets `everything`: every element touches the
union of all inputs, in the role ``values``.

A leaf remembers the trees it was made from, so that the path by which a unit came in can be
told afterwards, and where precision was lost on the way (`lost_precision`).

Lists are shared, never copied: "all items but those of fold k" is a view of the one list, and
its touch comes from the unions before and after it. N folds of N items then take N steps.
"""

from __future__ import annotations

import re
from collections import deque
from collections.abc import Callable, Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, fields, replace
from itertools import accumulate, repeat
from operator import or_
from typing import Any, ClassVar, TypeVar, overload

from .touch import Extraction, Touch, union

T = TypeVar("T")
NOTHING = Touch()
# More names than this (of origins, say) are not told apart by fold, but counted for every fold.
_NAMES = 64


@dataclass(frozen=True)
class Loss:
    """Why elements could not be told apart, and what would tell them apart.

    Parameters
    ----------
    reason, cure : str
    node : str
        Where; "" for the node at whose output the leaf stands.
    """

    reason: str
    cure: str
    node: str = ""


@dataclass(eq=False, slots=True)
class Leaf:
    """One element, or all elements of a list whose length is not known.

    Parameters
    ----------
    touch : Touch
        What it derives from.
    parents : sequence of Leaf or Branch
        What it was made from.
    place : str
        Where it stands in the graph ("node.field[3]"), or the file it is.
    single : bool
        Whether it is known to be one element.
    lost : Loss or None
        Why it stands for more than it need.
    """

    touch: Touch
    parents: Sequence[Tree] = ()
    place: str = ""
    single: bool = True
    lost: Loss | None = None


class Branch:
    """A list of known length; taken whole, it touches what its items touch.

    Parameters
    ----------
    children : sequence of Leaf or Branch
    touch : Touch, optional
        The union of the children's, when it is known already.

    Examples
    --------
    >>> pair = Branch([Leaf(Touch(values=1)), Leaf(Touch(values=2))])
    >>> pair.touch.values, len(pair.children)
    (3, 2)
    """

    __slots__ = ("_children", "_place", "_touch")

    # What it shares with a leaf, so that a path can lead through either.
    place: ClassVar[str] = ""
    single: ClassVar[bool] = False
    lost: ClassVar[Loss | None] = None

    def __init__(self, children: Sequence[Tree] = (), touch: Touch | None = None) -> None:
        self._children: Sequence[Tree] = children
        self._touch = touch
        self._place = ""

    @property
    def children(self) -> Sequence[Tree]:
        """The items, in order."""
        if self._place:  # stamped only when looked at: most lists are only ever taken whole
            self._children = [
                stamped(child, f"{self._place}[{i}]") for i, child in enumerate(self._children)
            ]
            self._place = ""
        return self._children

    @property
    def parents(self) -> Sequence[Tree]:
        """The items: a path leads through one of them."""
        return self.children

    @property
    def touch(self) -> Touch:
        """What the items touch together."""
        if self._touch is None:
            self._touch = _together(self._children)
        return self._touch

    def at(self, place: str) -> Branch:
        """The same list, standing at a place of the graph."""
        made = Branch(self.children, self._touch)
        made._place = place
        return made


Tree = Leaf | Branch


class AllBut(Sequence[T]):
    """A view of a list without the items at some places.

    Examples
    --------
    >>> list(AllBut("abcd", [2, 0])), AllBut("abcd", [0])[1]
    (['b', 'd'], 'c')
    """

    __slots__ = ("_items", "_out")

    def __init__(self, items: Sequence[T], out: Iterable[int]) -> None:
        self._items = items
        self._out = sorted({i for i in out if 0 <= i < len(items)})

    def __len__(self) -> int:
        return len(self._items) - len(self._out)

    @overload
    def __getitem__(self, place: int) -> T: ...
    @overload
    def __getitem__(self, place: slice) -> Sequence[T]: ...
    def __getitem__(self, place: int | slice) -> T | Sequence[T]:
        if isinstance(place, slice):
            return list(self)[place]
        at = range(len(self))[place]
        for gone in self._out:
            if gone <= at:
                at += 1
        return self._items[at]

    def __iter__(self) -> Iterator[T]:
        start = 0
        for gone in self._out:
            yield from self._items[start:gone]
            start = gone + 1
        yield from self._items[start:]


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
    scores : mapping of (column, label) to Cell
        What the study table says of whom (see `scoreunits`).
    """

    trees: Mapping[str, Tree]
    settings: Mapping[str, Any]
    where: str
    arriving: frozenset[str] = frozenset()
    declared: Mapping[str, Touch] = field(default_factory=dict)
    scores: Mapping[tuple[str, str], Any] = field(default_factory=dict)


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


def _together(parts: Iterable[Tree]) -> Touch:
    """The union of touches; that of a single part is the very same object."""
    found = {id(part.touch): part.touch for part in parts}
    if len(found) == 1:
        return next(iter(found.values()))
    return union(found.values()) if found else NOTHING


def joined(parts: Iterable[Tree], *, single: bool = True, lost: Loss | None = None) -> Leaf:
    """The element computed from all of these."""
    parents = tuple(parts)
    return Leaf(_together(parents), parents, single=single, lost=lost)


def as_one(tree: Tree) -> Leaf:
    """A tree taken whole, as one element."""
    return tree if isinstance(tree, Leaf) else joined([tree])


def element(tree: Tree, i: int) -> Tree:
    """Item i of a list; of a leaf, the leaf itself, whatever i is."""
    if isinstance(tree, Leaf):
        return tree
    if i < len(tree.children):
        return tree.children[i]
    return joined([tree])  # a list shorter than promised: every item, to be safe


def count(trees: Iterable[Tree]) -> int | None:
    """The number of items the branches among these agree on; None when no length is known."""
    lengths = {len(tree.children) for tree in trees if isinstance(tree, Branch)}
    return lengths.pop() if len(lengths) == 1 else None


def stamped(tree: Tree, place: str) -> Tree:
    """The same tree, standing at a place of the graph."""
    if isinstance(tree, Branch):
        return tree.at(place)
    parents = (tree,) if tree.place else tree.parents
    return Leaf(tree.touch, parents, place, tree.single, tree.lost)


def complements(items: Sequence[Tree], held_out: Sequence[Collection[int]]) -> list[Branch]:
    """For each fold, the list of the items that it does not hold out.

    Parameters
    ----------
    items : sequence of Leaf or Branch
    held_out : sequence of collections of int
        Per fold, places in `items`; those beyond its end are in no list.

    Examples
    --------
    >>> items = [Leaf(Touch(values=1 << i)) for i in range(3)]
    >>> [branch.touch.values for branch in complements(items, [(0,), (1,), (2,)])]
    [6, 5, 3]
    """
    views = [AllBut(items, out) for out in held_out]
    rows = [row for out in held_out for row in out if row < len(items)]
    if len(rows) != len(set(rows)):
        return [Branch(view) for view in views]
    # Every item is in one fold at most: what is in the folds before and after this one.
    everywhere = _together(items)
    never = _together(AllBut(items, rows))
    blocks = [_together([items[row] for row in out if row < len(items)]) for out in held_out]
    columns: list[Iterable[Any]] = []
    for part in fields(Touch):
        whole = getattr(everywhere, part.name)
        if not whole or (isinstance(whole, frozenset) and len(whole) > _NAMES):
            columns.append(repeat(whole, len(blocks)))
        else:
            own = [getattr(block, part.name) for block in blocks]
            columns.append(_without_each(own, getattr(never, part.name)))
    touches = [Touch(*row) for row in zip(*columns, strict=True)]
    return [Branch(view, touch) for view, touch in zip(views, touches, strict=True)]


def _without_each(parts: list[Any], rest: Any) -> list[Any]:
    """The rest joined with all parts but the first, but the second, and so on."""
    before = accumulate(parts, or_, initial=rest)
    after = list(accumulate(reversed(parts), or_, initial=rest))
    return [one | other for one, other in zip(before, reversed(after[:-1]), strict=False)]


def _with(tree: Tree, extra: list[Tree]) -> Tree:
    if isinstance(tree, Leaf):
        return joined([tree, *extra], single=tree.single, lost=tree.lost)
    return Branch([_with(child, extra) for child in tree.children])


def path_to(leaf: Tree, unit_bit: int) -> list[str]:
    """The places by which a unit came into a leaf, the file first."""
    places: list[str] = []
    here: Tree | None = leaf
    while here is not None:
        if here.place and (not places or places[-1] != here.place):
            places.append(here.place)
        here = next((p for p in here.parents if p.touch.choosers & unit_bit), None)
    return places[::-1]


def lost_precision(leaf: Tree, units: int | None = None) -> list[tuple[str, str, str]]:
    """Where elements could not be told apart on the way to this one, the nearest first.

    Parameters
    ----------
    leaf : Leaf or Branch
    units : int, optional
        Only on the ways of these units.

    Returns
    -------
    list of (node, reason, cure)

    Examples
    --------
    >>> files = Branch([Leaf(Touch(values=1), place="a"), Leaf(Touch(values=2), place="b")])
    >>> loss = Loss("its index is not known before the run", "set it as a literal")
    >>> lost_precision(Leaf(files.touch, (files,), "w.pick.out", lost=loss))
    [('w.pick', 'its index is not known before the run', 'set it as a literal')]
    """
    found: dict[tuple[str, str, str], None] = {}
    seen: dict[int, Tree] = {}
    waiting: deque[tuple[Tree, str]] = deque([(leaf, leaf.place)])
    while waiting:
        here, place = waiting.popleft()
        if id(here) in seen or not (units is None or here.touch.values & units):
            continue
        seen[id(here)] = here
        place = here.place or place
        if here.lost is not None:
            node = here.lost.node or re.sub(r"\.[^.]*$", "", place)
            found[re.sub(r"\[.*$", "", node), here.lost.reason, here.lost.cure] = None
        waiting.extend((parent, place) for parent in here.parents)
    return list(found)


def _all(inputs: Inputs, names: Iterable[str], geometry: Iterable[str] = ()) -> list[Tree]:
    """Inputs taken whole; some by their geometry only."""
    parts = [inputs.trees[name] for name in names if name in inputs.trees]
    return parts + [grid_of(inputs.trees[name]) for name in geometry if name in inputs.trees]


def grid_of(tree: Tree) -> Leaf:
    """An input of which only the grid can reach the output."""
    return Leaf(tree.touch.as_geometry(), (tree,), single=tree.single)


def _everything(inputs: Inputs) -> Tree:
    return joined(inputs.trees.values(), single=False)


everything = Rule(None, _everything)
"""Every element touches all inputs: the rule for what we do not know."""


_NO_LENGTH = Loss(
    "the lengths of its lists are not known before the run, or differ",
    "give it literal lists, or lists that MapNodes, JoinNodes or nodes with a contract make",
)


def fold_loss(inputs: Inputs, known_by: Iterable[str]) -> Loss:
    """Why folds cannot be told apart: settings arrive over an edge, or the list is opaque."""
    late = [name for name in known_by if name in inputs.arriving]
    if not late:
        return _NO_LENGTH
    words = " and ".join(late)
    return Loss(
        f"{words} arrive over an edge, so its folds are not known", f"set {words} literally"
    )


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
        common = [*_all(inputs, shared, geometry), *single]
        n = count(trees)
        if n is None:
            return joined([*trees, *common], single=False, lost=_NO_LENGTH if trees else None)
        return Branch([joined([*(element(tree, i) for tree in trees), *common]) for i in range(n)])

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
        tree = inputs.trees.get(data, Leaf(NOTHING, single=False))
        if isinstance(tree, Leaf) or any(name in inputs.arriving for name in known_by):
            return joined([tree, *common], single=False, lost=fold_loss(inputs, known_by))
        folds = complements(tree.children, held_out(inputs.settings))
        return Branch([joined([fold, *common]) for fold in folds])

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
        tree = inputs.trees.get(data, Leaf(NOTHING, single=False))
        if isinstance(tree, Leaf) or any(name in inputs.arriving for name in known_by):
            parts = [tree, *common, *_all(inputs, one_or_each)]
            return joined(parts, single=False, lost=fold_loss(inputs, known_by))
        made: list[Tree] = []
        for k, chosen in enumerate(rows(inputs.settings)):
            parts = [element(tree, i) for i in chosen]
            for name in one_or_each:
                if name in inputs.trees:
                    own = inputs.trees[name]
                    one = isinstance(own, Branch) and len(own.children) == 1
                    parts.append(own if one else element(own, k))
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
    these_only : str or bool
        The setting that, when true, declares that the claim is about the tested subjects only,
        not about those they were drawn from; or True, to declare it here.
    certificate : str
        The setting with an orthogonality certificate (see `orthogonality`): mask and data may
        share units when it holds.
    aside : tuple of str
        Inputs that cannot change where the data are read: whose they are, say. What any other
        input derives from has chosen, like what chose the mask.
    """

    mask: str
    data: str
    biased: str = ""
    these_only: str | bool = ""
    certificate: str = ""
    aside: tuple[str, ...] = ()

    def pairs(self, inputs: Inputs) -> list[tuple[Leaf, Leaf]]:
        """Every mask element with the data element it is judged on."""
        # Nothing known of a side is an empty touch, which the judge will not let pass.
        mask = inputs.trees.get(self.mask) or Leaf(NOTHING, place=f"{inputs.where}.{self.mask}")
        data = inputs.trees.get(self.data) or Leaf(NOTHING, place=f"{inputs.where}.{self.data}")
        if isinstance(mask, Branch) and len(mask.children) == 1:
            mask = mask.children[0]  # one mask in a list is one mask for all data
        n = count([mask, data]) if isinstance(data, Branch) or isinstance(mask, Branch) else 1
        also = [
            tree
            for name, tree in sorted(inputs.trees.items())
            if name not in (self.mask, self.data, *self.aside)
            and (tree.touch.choosers or tree.touch.unknown)
        ]
        if n is None:  # lengths disagree: everything against everything
            met = [(as_one(mask), as_one(data))]
        else:
            met = [(as_one(element(mask, i)), as_one(element(data, i))) for i in range(n)]
        return [(joined([one, *also]), other) for one, other in met] if also else met

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
            frozenset({self.mask, self.data}), lambda inputs: joined([self._values(inputs)])
        )

    def marks(self, inputs: Inputs) -> list[Leaf]:
        """Per meeting, what comes of it: mask and data, with the mark of their meeting."""
        biased = bool(self.biased and inputs.settings.get(self.biased))
        certified = getattr(inputs.settings.get(self.certificate), "holds", False) is True
        made = []
        for i, (mask, read) in enumerate(self.pairs(inputs)):
            where = f"{inputs.where}[{i}]"
            # What decided that a map is read at all has chosen like what chose the mask.
            chosen = mask.touch.choosers | read.touch.selected
            mark = Extraction(where, chosen, read.touch.values, certified)
            touch = _together([mask, read]).marked(mark, biased=biased)
            made.append(Leaf(touch, (mask, read)))
        return made

    def _values(self, inputs: Inputs) -> Tree:
        data, made = inputs.trees.get(self.data), self.marks(inputs)
        if len(made) == 1 and not isinstance(data, Branch):
            return replace(made[0], single=data is not None and data.single)
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
    these_only : str or bool
        The setting that, when true, declares that it speaks of the tested subjects only; or
        True, to declare it here.
    labels : str
        The setting that says who each value belongs to, when values of one person are averaged
        before anything else; then a person's own values may have taken turns.
    scores : tuple of str
        The fields with scores, covariates or group labels that the values are compared with.
    cure : str
        What to use instead when it is not.
    search : str
        The field with a region inside which the test chooses again; it has chosen too.
    in_file : bool
        Whether the values come in one file, with a row for each label.
    """

    values: str
    labels: str = ""
    cross_fitted: bool = False
    cure: str = ""
    these_only: str | bool = ""
    scores: tuple[str, ...] = ()
    search: str = ""
    in_file: bool = False
