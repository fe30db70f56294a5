"""The rules by which outputs inherit touches, on trees alone.

The rules of the engine's own plumbing are held against the plumbing itself: lists of tokens go
through the real interface, and each token found in an element of the output must be in the
touch that the rule gave that element.
"""

from __future__ import annotations

from functools import partial
from typing import Any

import carrying
import pytest
from hypothesis import given
from hypothesis import strategies as st
from nipype.interfaces.utility import Function, IdentityInterface, Merge, Rename, Select, Split
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.interfaces.contracts import ruled
from sequester.nodes.interfaces.generic import generic_rule, settings_of
from sequester.nodes.procedure import held_out_rows
from sequester.nodes.rules import (
    Branch,
    Inputs,
    Leaf,
    Meeting,
    Tree,
    all_but_held_out,
    chosen_on,
    count,
    each,
    element,
    everything,
    joined,
    leaves,
    only,
    path_to,
    stamped,
)
from sequester.nodes.touch import Touch, union


def unit(number: int) -> Leaf:
    return Leaf(Touch(values=1 << number), place=f"file {number}")


def units(*numbers: int) -> Branch:
    return Branch([unit(n) for n in numbers])


def values(tree: Tree) -> Any:
    """The value bits of every element, nested as the tree is."""
    if isinstance(tree, Leaf):
        return tree.touch.values
    return [values(child) for child in tree.children]


def inputs(settings: dict[str, Any] | None = None, **trees: Tree) -> Inputs:
    return Inputs(trees, settings or {}, "node")


class TestTrees:
    def test_leaves_come_in_order_from_any_depth(self):
        tree = Branch([unit(2), Branch([unit(0), Branch([unit(1)])])])
        assert [leaf.place for leaf in leaves(tree)] == ["file 2", "file 0", "file 1"]

    def test_every_element_of_a_leaf_is_the_leaf(self):
        whole = unit(3)
        assert element(whole, 0) is whole
        assert element(whole, 99) is whole

    def test_an_element_beyond_the_end_is_all_elements(self):
        assert values(element(units(0, 1), 5)) == 0b11

    def test_a_count_is_known_only_when_all_lists_agree(self):
        assert count([units(0, 1), unit(2), units(3, 4)]) == 2
        assert count([units(0, 1), units(3)]) is None
        assert count([unit(0)]) is None

    def test_stamps_name_each_element_and_keep_the_way_back(self):
        tree = stamped(units(0, 1), "node.out")
        assert [leaf.place for leaf in leaves(tree)] == ["node.out[0]", "node.out[1]"]
        assert path_to(element(tree, 1), 0b10) == ["file 1", "node.out[1]"]

    def test_a_path_follows_the_unit_asked_for(self):
        group = stamped(joined([unit(0), unit(1)]), "group.map")
        mask = stamped(joined([group, unit(2)]), "choose.mask")
        assert path_to(mask, 0b010) == ["file 1", "group.map", "choose.mask"]
        assert path_to(mask, 0b100) == ["file 2", "choose.mask"]


class TestOwnRules:
    def test_everything_is_the_union_and_promises_no_single_element(self):
        tree = everything(inputs(a=unit(0), b=Branch([unit(1), units(2)])))
        assert values(tree) == 0b111
        assert not tree.single

    def test_everything_keeps_what_nobody_declared(self):
        stranger = Leaf(Touch(unknown=frozenset({"x.nii"})))
        assert everything(inputs(a=stranger, b=unit(0))).touch.unknown == {"x.nii"}

    def test_only_touches_its_fields_whole_and_a_grid_as_geometry(self):
        tree = only("a", geometry=("g",))(inputs(a=units(0, 1), g=unit(3)))
        assert tree.touch == Touch(values=0b11, geometry=0b1000)

    def test_each_pairs_elements_and_shares_the_rest(self):
        rule = each("a", "b", shared=("s",), geometry=("g",))
        tree = rule(inputs(a=units(0, 1), b=units(2, 3), s=unit(4), g=unit(5)))
        assert values(tree) == [0b10101, 0b11010]
        assert [leaf.touch.geometry for leaf in leaves(tree)] == [0b100000] * 2

    def test_each_keeps_what_is_nested_in_an_element(self):
        tree = each("a")(inputs(a=Branch([units(0, 1), units(2, 3)])))
        assert values(tree) == [0b0011, 0b1100]

    @pytest.mark.parametrize(
        "trees",
        [
            {"a": units(0, 1), "b": units(2, 3, 4)},  # lengths disagree
            {"a": Leaf(Touch(values=0b111), single=False), "b": Leaf(Touch(values=0b11000))},
        ],
    )
    def test_each_falls_back_to_the_union_when_it_cannot_pair(self, trees: dict[str, Tree]):
        tree = each("a", "b")(inputs(**trees))
        assert values(tree) == 0b11111
        assert not tree.single

    @pytest.mark.parametrize("scheme", [LeaveOneOut(), KFold(k=2, seed=3), KFold(k=3)])
    def test_all_but_held_out_is_the_complement_of_the_folds(self, scheme: Any):
        labels = ["c", "a", "b", "a", "d"]  # not sorted, and one label twice
        rule = all_but_held_out(
            "x", lambda s: held_out_rows(s["scheme"], s["labels"]), shared=("search",)
        )
        tree = rule(
            inputs({"scheme": scheme, "labels": labels}, x=units(*range(5)), search=unit(7))
        )
        expected = [
            sum(1 << row for row in fold.selection) | 1 << 7 for fold in scheme.folds(labels)
        ]
        assert values(tree) == expected

    def test_all_but_held_out_of_an_opaque_list_is_all_of_it(self):
        tree = all_but_held_out("x", lambda _: [(0,), (1,)])(
            inputs(x=Leaf(Touch(values=0b11), single=False))
        )
        assert values(tree) == 0b11
        assert not tree.single

    @pytest.mark.parametrize("rule", [all_but_held_out, chosen_on])
    def test_folds_that_a_connection_decides_are_not_told_apart_by_a_stale_setting(self, rule: Any):
        made = rule("x", lambda s: s["rows"], known_by=("rows",))
        given = {"x": units(0, 1, 2)}, {"rows": [(0,), (1,), (2,)]}, "node"
        told = made(Inputs(*given))
        assert values(told) == ([6, 5, 3] if rule is all_but_held_out else [1, 2, 4])
        late = made(Inputs(*given, arriving=frozenset({"rows"})))
        assert isinstance(late, Leaf) and not late.single
        assert late.touch.values == 0b111
        assert late.lost is not None and late.lost.reason.startswith("rows arrive over an edge")

    def test_what_is_chosen_on_some_rows_touches_one_search_region_or_its_own(self):
        rule = chosen_on("x", lambda _: [(1,), (0, 2)], shared=("s",), one_or_each=("m",))
        assert values(rule(inputs(x=units(0, 1, 2), s=unit(5)))) == [0b100010, 0b100101]
        assert values(rule(inputs(x=units(0, 1, 2), m=units(3)))) == [0b1010, 0b1101]
        assert values(rule(inputs(x=units(0, 1, 2), m=units(3, 4)))) == [0b1010, 0b10101]

    def test_a_row_too_many_is_held_out_of_no_fold(self):
        tree = all_but_held_out("x", lambda _: [(0,), (1,)])(inputs(x=units(0, 1, 2)))
        assert values(tree) == [0b110, 0b101]


class TestMeeting:
    meeting = Meeting(mask="m", data="d", biased="look")

    def pairs(self, **trees: Tree) -> list[tuple[int, int]]:
        return [
            (mask.touch.values, data.touch.values)
            for mask, data in self.meeting.pairs(inputs(**trees))
        ]

    def test_masks_and_data_pair_up_element_by_element(self):
        assert self.pairs(m=units(0, 1), d=units(2, 3)) == [(1, 4), (2, 8)]

    def test_one_mask_meets_every_map(self):
        assert self.pairs(m=unit(0), d=units(2, 3)) == [(1, 4), (1, 8)]

    def test_a_list_of_one_mask_meets_every_map(self):
        assert self.pairs(m=units(0), d=units(2, 3)) == [(1, 4), (1, 8)]

    def test_an_opaque_list_of_masks_meets_every_map_whole(self):
        masks = Leaf(Touch(values=0b11), single=False)
        assert self.pairs(m=masks, d=units(2, 3)) == [(3, 4), (3, 8)]

    def test_lengths_that_disagree_meet_all_against_all(self):
        assert self.pairs(m=units(0, 1), d=units(2, 3, 4)) == [(0b11, 0b11100)]

    def test_a_side_of_which_nothing_is_known_is_an_empty_touch(self):
        assert self.pairs(d=units(2)) == [(0, 4)]

    def test_each_value_carries_the_mark_of_its_own_meeting(self):
        tree = self.meeting.rule(inputs(m=units(0, 1), d=units(2, 3)))
        marks = [next(iter(leaf.touch.extractions)) for leaf in leaves(tree)]
        assert [(mark.mask, mark.data) for mark in marks] == [(1, 4), (2, 8)]
        assert values(tree) == [0b0101, 0b1010]
        assert not any(leaf.touch.biased for leaf in leaves(tree))

    def test_an_exploratory_reading_is_marked_biased(self):
        tree = self.meeting.rule(inputs({"look": True}, m=unit(0), d=units(2, 3)))
        assert [leaf.touch.biased for leaf in leaves(tree)] == [True, True]

    def test_values_of_an_opaque_list_are_not_one_value(self):
        maps = Leaf(Touch(values=0b1100), single=False)
        assert not self.meeting.rule(inputs(m=unit(0), d=maps)).single


# -- the engine's own plumbing, against itself -------------------------------------------------

PLAIN = "a word"  # a value that is no file


def tokens(value: Any) -> set[int]:
    """The units inside a real value."""
    if isinstance(value, list | tuple):
        return {n for v in value for n in tokens(v)}
    return {int(value[5:])} if str(value).startswith("file ") else set()


def tree_of(value: Any) -> Tree:
    """The tree the graph would show for a real value."""
    if isinstance(value, list | tuple):
        return Branch([tree_of(v) for v in value])
    return Leaf(Touch(values=sum(1 << n for n in tokens(value))), place=str(value))


understated = partial(carrying.understated, inside=tokens)


def predicted(interface: Any, output: str, opaque: tuple[str, ...] = (), **more: Any) -> Tree:
    """What the rule says of an output, given the interface's inputs; some known only as a whole."""
    settings = settings_of(interface.inputs)
    trees: dict[str, Tree] = {}
    for name, value in settings.items():
        if tokens(value):
            tree = tree_of(value)
            trees[name] = joined(leaves(tree), single=False) if name in opaque else tree
    assert generic_rule(interface, output) is not None
    return ruled(interface, Inputs(trees, settings, "node"))[output]


files = st.integers(0, 7).map(lambda n: f"file {n}")
lists = st.lists(files, min_size=1, max_size=3)
nested = st.lists(st.one_of(files, lists), min_size=1, max_size=3)


class TestPlumbing:
    @given(st.lists(st.one_of(files, lists, nested), min_size=1, max_size=3), st.data())
    def test_merge_never_understates(self, items: list[Any], data: st.DataObject):
        merge = Merge(len(items))
        merge.inputs.no_flatten = data.draw(st.booleans())
        merge.inputs.ravel_inputs = data.draw(st.booleans())
        for i, item in enumerate(items, 1):
            setattr(merge.inputs, f"in{i}", item)
        opaque = data.draw(st.lists(st.sampled_from([f"in{i + 1}" for i in range(len(items))])))
        tree = predicted(merge, "out", tuple(opaque))
        assert understated(tree, merge.run().outputs.out) == []

    @given(
        st.integers(1, 3).flatmap(
            lambda n: st.lists(st.lists(files, min_size=n, max_size=n), min_size=1, max_size=3)
        )
    )
    def test_merge_side_by_side_never_understates(self, columns: list[list[str]]):
        merge = Merge(len(columns), axis="hstack")
        for i, column in enumerate(columns, 1):
            setattr(merge.inputs, f"in{i}", column)
        assert understated(predicted(merge, "out"), merge.run().outputs.out) == []

    def test_merge_is_exact_where_the_lengths_are_known(self):
        merge = Merge(3)
        merge.inputs.in1, merge.inputs.in2 = ["file 0", "file 1"], "file 2"
        merge.inputs.in3 = [["file 3", "file 4"]]
        assert values(predicted(merge, "out")) == [1, 2, 4, [8, 16]]
        merge.inputs.no_flatten = True
        assert values(predicted(merge, "out")) == [[1, 2], 4, [[8, 16]]]

    def test_merge_side_by_side_is_exact(self):
        merge = Merge(2, axis="hstack")
        merge.inputs.in1, merge.inputs.in2 = ["file 0", "file 1"], ["file 2", "file 3"]
        assert values(predicted(merge, "out")) == [[1, 4], [2, 8]]

    def test_merge_of_unknown_lengths_is_the_union(self):
        merge = Merge(2)
        merge.inputs.in1, merge.inputs.in2 = ["file 0", "file 1"], "file 2"
        tree = predicted(merge, "out", opaque=("in1",))
        assert values(tree) == 0b111
        assert not tree.single

    def test_merge_without_flattening_is_exact_for_unknown_lengths_too(self):
        merge = Merge(2, no_flatten=True)
        merge.inputs.in1, merge.inputs.in2 = ["file 0", "file 1"], "file 2"
        assert values(predicted(merge, "out", opaque=("in1",))) == [0b11, 0b100]

    def test_merge_of_a_known_list_of_unknown_elements_is_exact(self):
        merge = Merge(2)
        rows = Branch([Leaf(Touch(values=1), single=False), Leaf(Touch(values=2), single=False)])
        rule = generic_rule(merge, "out")
        assert values(rule(inputs(settings_of(merge.inputs), in1=rows, in2=unit(2)))) == [1, 2, 4]

    @pytest.mark.parametrize("axis", ["vstack", "hstack"])
    def test_merge_counts_the_inputs_that_hold_no_file(self, axis: str):
        merge = Merge(2, axis=axis)
        merge.inputs.in1, merge.inputs.in2 = [PLAIN], ["file 0"]
        assert understated(predicted(merge, "out"), merge.run().outputs.out) == []

    def test_merge_takes_a_tuple_for_one_element(self):
        merge = Merge(2)
        merge.inputs.in1, merge.inputs.in2 = ("file 0", "file 1"), "file 2"
        assert understated(predicted(merge, "out"), merge.run().outputs.out) == []

    @given(nested, st.data())
    def test_select_never_understates(self, items: list[Any], data: st.DataObject):
        places = st.integers(-len(items), len(items) - 1)
        select = Select(inlist=items)
        select.inputs.index = data.draw(st.lists(places, min_size=1, max_size=4))
        assert understated(predicted(select, "out"), select.run().outputs.out) == []

    def test_select_is_exact_and_its_list_of_one_is_the_item(self):
        select = Select(inlist=["file 0", "file 1", "file 2"], index=[2, 0])
        assert values(predicted(select, "out")) == [4, 1]
        select.inputs.index = [-1]
        assert values(predicted(select, "out")) == 4

    def test_select_without_a_known_index_is_the_union(self):
        select = Select(inlist=["file 0", "file 1", "file 2"])
        assert values(predicted(select, "out")) == 0b111

    def test_select_beyond_the_end_is_the_union(self):
        select = Select(inlist=["file 0", "file 1"], index=[5])
        assert values(predicted(select, "out")) == 0b11

    @given(st.lists(st.integers(1, 3), min_size=1, max_size=3), st.booleans(), st.data())
    def test_split_never_understates(self, sizes: list[int], squeeze: bool, data: st.DataObject):
        items = data.draw(st.lists(files, min_size=sum(sizes), max_size=sum(sizes)))
        split = Split(inlist=items, splits=sizes, squeeze=squeeze)
        made = split.run().outputs
        for part in range(1, len(sizes) + 1):
            name = f"out{part}"
            assert understated(predicted(split, name), getattr(made, name), name) == []

    def test_split_is_exact(self):
        split = Split(inlist=["file 0", "file 1", "file 2"], splits=[2, 1], squeeze=True)
        assert values(predicted(split, "out1")) == [1, 2]
        assert values(predicted(split, "out2")) == 4

    def test_identity_passes_each_field_by_itself(self):
        identity = IdentityInterface(["a", "b"])
        identity.inputs.a, identity.inputs.b = ["file 0", "file 1"], "file 2"
        assert values(predicted(identity, "a")) == [1, 2]
        assert values(predicted(identity, "b")) == 4

    def test_rename_touches_the_file_it_renames(self):
        rename = Rename(format_string="new")
        tree = generic_rule(rename, "out_file")(inputs(in_file=unit(3)))
        assert values(tree) == 0b1000

    def test_a_subclass_may_do_anything_so_it_has_no_rule(self):
        class Shuffle(Select):
            pass

        assert generic_rule(Shuffle(), "out") is None
        assert generic_rule(Function(["x"], ["out"]), "out") is None

    def test_no_rule_loses_an_origin_or_an_unknown_file(self):
        foreign = Leaf(Touch(origins=frozenset({"an atlas"}), unknown=frozenset({"x.nii"})))
        for interface, name, field in (
            (Merge(1), "out", "in1"),
            (Select(index=[0]), "out", "inlist"),
            (Split(splits=[1]), "out1", "inlist"),
            (IdentityInterface(["a"]), "a", "a"),
        ):
            rule = generic_rule(interface, name)
            tree = rule(inputs(settings_of(interface.inputs), **{field: Branch([foreign])}))
            assert union(leaf.touch for leaf in leaves(tree)) == foreign.touch, interface
