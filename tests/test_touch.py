"""The algebra of touches: units that overlap, sets of units, unions, cross-fitting."""

from __future__ import annotations

from itertools import product

import pytest
from hypothesis import given
from hypothesis import strategies as st
from sequester.nodes.touch import (
    ENTITIES,
    Extraction,
    Touch,
    Unit,
    UnitTable,
    cross_fitted,
    union,
)

# Two labels and a blank for each entity: small enough that units meet, overlap and contradict.
PARTS = (*ENTITIES, "suffix")
few_units = st.builds(
    Unit,
    sub=st.sampled_from(["", "01", "1"]),
    ses=st.sampled_from(["", "a"]),
    run=st.sampled_from(["", "1", "2"]),
    suffix=st.sampled_from(["", "bold", "T1w"]),
)
any_units = st.builds(Unit, **{part: st.sampled_from(["", "1", "2"]) for part in PARTS})
tables = st.lists(few_units, min_size=1, max_size=8).map(UnitTable)
sets = st.integers(0, 2**6 - 1)
words = st.frozensets(st.sampled_from("abc"))
extractions = st.builds(Extraction, where=st.sampled_from("xy"), mask=sets, data=sets)
touches = st.builds(
    Touch,
    values=sets,
    geometry=sets,
    origins=words,
    unknown=words,
    extractions=st.frozensets(extractions, max_size=3),
    biased=st.booleans(),
    selected=sets,
)


def contained(small: Touch, large: Touch) -> bool:
    """Whether nothing that the small touch says is lost in the large one."""
    return (
        small.values & ~large.values == 0
        and small.geometry & ~large.geometry == 0
        and small.selected & ~large.selected == 0
        and small.origins <= large.origins
        and small.unknown <= large.unknown
        and small.extractions <= large.extractions
        and small.biased <= large.biased
    )


class TestUnits:
    @given(any_units, any_units)
    def test_overlap_is_symmetric_and_means_that_no_entity_contradicts(self, a: Unit, b: Unit):
        both_given = [(getattr(a, p), getattr(b, p)) for p in PARTS]
        expected = not any(x and y and x != y for x, y in both_given)
        assert a.overlaps(b) is expected
        assert b.overlaps(a) is expected

    @given(any_units)
    def test_a_unit_overlaps_itself_and_the_all_blank_unit(self, unit: Unit):
        assert unit.overlaps(unit)
        assert unit.overlaps(Unit())
        assert Unit().overlaps(unit)

    @pytest.mark.parametrize("part", PARTS)
    def test_every_entity_can_contradict_and_a_blank_matches(self, part: str):
        one, other, blank = Unit(**{part: "1"}), Unit(**{part: "2"}), Unit()
        assert not one.overlaps(other)
        assert one.overlaps(blank)

    def test_overlap_is_not_transitive(self):
        # Runs 1 and 2 both overlap the subject-level map, and not each other.
        first, second, whole = Unit(sub="01", run="1"), Unit(sub="01", run="2"), Unit(sub="01")
        assert first.overlaps(whole)
        assert second.overlaps(whole)
        assert not first.overlaps(second)

    def test_labels_are_strings(self):
        assert not Unit(sub="01").overlaps(Unit(sub="1"))

    def test_names_follow_bids_order(self):
        unit = Unit(run="2", task="lanterns", sub="01", ses="b", suffix="bold")
        assert str(unit) == "sub-01_ses-b_task-lanterns_run-2_bold"
        assert str(Unit()) == "(any data)"


class TestTable:
    @given(tables, st.data())
    def test_overlapping_finds_exactly_the_units_that_overlap_one_of_the_set(
        self, table: UnitTable, data: st.DataObject
    ):
        bits = data.draw(st.integers(0, table.everything))
        expected = [u for u in table.units if any(u.overlaps(v) for v in table.units_of(bits))]
        assert table.units_of(table.overlapping(bits)) == expected

    @given(tables, few_units)
    def test_matching_finds_exactly_the_units_that_overlap_a_pattern(
        self, table: UnitTable, pattern: Unit
    ):
        expected = [u for u in table.units if u.overlaps(pattern)]
        assert table.units_of(table.matching(pattern)) == expected

    @given(tables, st.data())
    def test_sets_and_units_are_two_ways_to_say_the_same(
        self, table: UnitTable, data: st.DataObject
    ):
        bits = data.draw(st.integers(0, table.everything))
        assert table.bits(table.units_of(bits)) == bits
        assert list(table.numbers(bits)) == [i for i in range(len(table.units)) if bits >> i & 1]

    def test_repeats_are_merged_and_order_is_kept(self):
        a, b = Unit(sub="b"), Unit(sub="a")
        table = UnitTable([a, b, a])
        assert table.units == (a, b)
        assert table.everything == 0b11

    def test_only_units_of_the_measured_suffix_count(self):
        bold, anatomy, undecided = (
            Unit(sub="01", suffix="bold"),
            Unit(sub="01", suffix="T1w"),
            Unit(sub="01"),
        )
        table = UnitTable([bold, anatomy, undecided])
        # A unit whose suffix is open may be of the measured kind: it stays in.
        assert table.units_of(table.measured(frozenset({"bold"}))) == [bold, undecided]
        assert table.units_of(table.measured(frozenset({"beh"}))) == [undecided]

    def test_people_are_the_subjects_unless_the_study_says_who_belongs_together(self):
        units = [Unit(sub="01"), Unit(sub="02"), Unit(sub="03")]
        assert UnitTable(units).people_of(0b111) == {"01", "02", "03"}
        sisters = UnitTable(units, {units[0]: "family", units[1]: "family"})
        assert sisters.people_of(0b011) == {"family"}
        assert sisters.people_of(0b111) == {"family", "03"}


class TestScores:
    bold = (Unit(sub="01", suffix="bold"), Unit(sub="02"), Unit(sub="02", run="1", suffix="bold"))
    ages = (Unit(sub="01", suffix="age"), Unit(sub="02", suffix="age"))
    mood = Unit(sub="01", suffix="mood")
    table = UnitTable(bold, dict.fromkeys((bold[0], ages[0], mood), "kin"), (*ages, mood))

    def test_scores_are_units_of_the_table_and_stand_last(self):
        assert self.table.units == (*self.bold, *self.ages, self.mood)
        assert self.table.scores == 0b111000
        assert UnitTable(self.bold).scores == 0

    def test_a_score_overlaps_itself_alone(self):
        # A map whose suffix is left open is still a map.
        assert self.table.overlapping(0b010000) == 0b010000
        assert self.table.overlapping(0b000010) == 0b000110

    def test_what_is_measured_is_no_score(self):
        assert self.table.measured(frozenset({""})) == 0b000111
        assert self.table.measured(frozenset({"bold"})) == 0b000111
        assert self.table.measured(frozenset({"age"})) == 0b000010  # of no stated suffix

    def test_a_pattern_matches_scores_by_the_name_of_their_column_only(self):
        assert self.table.matching(Unit(sub="01")) == 0b000001
        assert self.table.matching(Unit(suffix="age")) == 0b011010

    def test_a_column_is_all_that_it_says_of_anybody(self):
        assert self.table.column(["age"]) == 0b011000
        assert self.table.column(["bold", "mood"]) == 0b100000

    def test_company_is_all_that_belongs_to_the_same_people(self):
        assert self.table.company(0b100000) == 0b101001
        assert self.table.company(0b010000) == 0b010110
        assert self.table.company(0) == 0

    def test_scores_and_maps_are_described_apart(self):
        assert self.table.describe(0b001001) == "sub-01_bold, sub-01_age"
        many = UnitTable(
            [Unit(sub=f"{i}", suffix="bold") for i in range(6)],
            scores=[Unit(sub=f"{i}", suffix="age") for i in range(6)],
        )
        assert many.describe(0b011111_111111) == "all 6 units, all but sub-5_age (5 units)"

    @given(touches)
    def test_what_chose_is_what_is_inside_and_what_selected(self, touch: Touch):
        assert touch.choosers == touch.values | touch.selected


class TestDescribe:
    table = UnitTable(Unit(sub=f"{i:02d}", suffix="bold") for i in range(1, 21))

    def test_few_units_are_listed(self):
        assert self.table.describe(0b101) == "sub-01_bold, sub-03_bold"
        assert self.table.describe(0) == "no unit"

    def test_all_but_a_few_are_named_by_the_few(self):
        bits = self.table.everything & ~(1 << 6)
        assert self.table.describe(bits) == "all but sub-07_bold (19 units)"
        assert self.table.describe(self.table.everything) == "all 20 units"

    def test_a_long_list_says_how_many_more(self):
        said = self.table.describe(0b111111)
        assert said == "sub-01_bold, sub-02_bold, sub-03_bold, sub-04_bold and 2 more"
        bits = self.table.everything & ~0b111111
        assert self.table.describe(bits) == (
            "all but sub-01_bold, sub-02_bold, sub-03_bold, sub-04_bold and 2 more (14 units)"
        )

    def test_a_small_table_is_listed_not_complemented(self):
        small = UnitTable(Unit(sub=s) for s in "abc")
        assert small.describe(0b011) == "sub-a, sub-b"


class TestUnion:
    @given(touches, touches, touches)
    def test_associative(self, a: Touch, b: Touch, c: Touch):
        assert (a | b) | c == a | (b | c) == union([a, b, c])

    @given(touches, touches)
    def test_commutative(self, a: Touch, b: Touch):
        assert a | b == b | a

    @given(touches)
    def test_idempotent_with_the_empty_touch_as_zero(self, a: Touch):
        assert a | a == a
        assert a | Touch() == a
        assert union([]) == Touch()

    @given(st.lists(touches, max_size=5))
    def test_loses_nothing_and_invents_nothing(self, parts: list[Touch]):
        whole = union(parts)
        assert all(contained(part, whole) for part in parts)
        for bit in range(6):
            for role in ("values", "geometry", "selected"):
                there = bool(getattr(whole, role) >> bit & 1)
                assert there is any(bool(getattr(p, role) >> bit & 1) for p in parts)
        for what in ("origins", "unknown", "extractions"):
            assert getattr(whole, what) == frozenset().union(*(getattr(p, what) for p in parts))
        assert whole.biased is any(p.biased for p in parts)

    @given(touches)
    def test_geometry_keeps_every_unit_and_leaves_none_in_the_role_values(self, touch: Touch):
        role = touch.as_geometry()
        assert role.values == 0
        assert role.geometry == touch.values | touch.geometry

    @given(touches, extractions, st.booleans())
    def test_a_mark_is_added_and_bias_never_washed_off(
        self, touch: Touch, mark: Extraction, biased: bool
    ):
        marked = touch.marked(mark, biased=biased)
        assert contained(touch, marked)
        assert marked.extractions == touch.extractions | {mark}
        assert marked.biased is (touch.biased or biased)


class TestCrossFitted:
    table = UnitTable([*(Unit(sub=s, run=r) for s, r in product("abc", "12")), Unit(sub="a")])

    def mark(self, mask: list[Unit], data: list[Unit]) -> Extraction:
        return Extraction(str(data), self.table.bits(mask), self.table.bits(data))

    @given(st.lists(extractions, max_size=4, unique=True))
    def test_is_when_one_mask_touches_the_data_of_another_value(self, marks: list[Extraction]):
        def meet(mask: int, data: int) -> bool:
            pairs = product(self.table.units_of(mask), self.table.units_of(data))
            return any(one.overlaps(other) for one, other in pairs)

        expected = any(
            meet(a.mask, b.data) for i, a in enumerate(marks) for j, b in enumerate(marks) if i != j
        )
        assert cross_fitted(marks, self.table) is expected

    @given(st.lists(extractions, max_size=4, unique=True))
    def test_turns_within_a_person_do_not_count_when_their_values_are_averaged(
        self, marks: list[Extraction]
    ):
        people = [self.table.people_of(mark.data) for mark in marks]
        expected = any(
            self.table.overlapping(a.mask) & b.data and people[i] != people[j]
            for i, a in enumerate(marks)
            for j, b in enumerate(marks)
        )
        assert cross_fitted(marks, self.table, averaged=True) is expected

    def test_any_of_a_persons_averaged_values_counts(self):
        first, second = (self.mark([], [Unit(sub="b", run=run)]) for run in "12")
        for run in "12":
            other = self.mark([Unit(sub="b", run=run)], [Unit(sub="c", run="1")])
            assert cross_fitted([first, second, other], self.table, averaged=True)

    def test_leave_one_out_values_are(self):
        data = {s: [Unit(sub=s, run="1"), Unit(sub=s, run="2")] for s in "abc"}
        others = {s: [u for t in "abc" if t != s for u in data[t]] for s in "abc"}
        marks = [self.mark(others[s], data[s]) for s in "abc"]
        assert cross_fitted(marks, self.table)
        assert not cross_fitted(marks[:1], self.table)

    def test_masks_from_own_other_runs_are_not(self):
        marks = [self.mark([Unit(sub=s, run="1")], [Unit(sub=s, run="2")]) for s in "abc"]
        assert not cross_fitted(marks, self.table)

    def test_one_direction_is_enough(self):
        marks = [
            self.mark([Unit(sub="b", run="1")], [Unit(sub="c", run="1")]),
            self.mark([], [Unit(sub="b", run="1")]),
        ]
        assert cross_fitted(marks, self.table)
        assert cross_fitted(marks[::-1], self.table)

    def test_a_wildcard_overlap_counts(self):
        # The mask was chosen on a subject-level map, the other value read from one of its runs.
        marks = [
            self.mark([Unit(sub="a")], [Unit(sub="b", run="1")]),
            self.mark([], [Unit(sub="a", run="2")]),
        ]
        assert cross_fitted(marks, self.table)

    def test_a_mask_on_its_own_data_is_a_leak_and_not_cross_fitting(self):
        own = [Unit(sub="a", run="1")]
        assert not cross_fitted([self.mark(own, own)], self.table)
