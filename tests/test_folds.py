"""Fold schemes: the partition, people who stay together, and scikit-learn's splitters."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from sequester.nodes.errors import InputError
from sequester.nodes.folds import Given, Halves, KFold, LeaveOneOut, Scheme
from sequester.nodes.procedure import held_out_rows
from sklearn import model_selection

# Few distinct labels over many rows, so that people with several rows are common.
LABELS = st.lists(
    st.sampled_from([f"p{i}" for i in range(9)]) | st.text(max_size=3), min_size=3, max_size=24
)
STRATA = tuple((f"p{i}", "xyz"[i % 3]) for i in range(9))
SCHEMES = (
    st.just(LeaveOneOut())
    | st.builds(KFold, st.integers(2, 6), st.integers(0, 99), st.sampled_from([(), STRATA]))
    | st.builds(Halves, st.sampled_from(["odd-even", "first-second"]))
)


def needed(scheme: Scheme) -> int:
    return scheme.k if isinstance(scheme, KFold) else 2 if isinstance(scheme, Halves) else 3


@given(SCHEMES, LABELS)
def test_folds_partition_the_rows_and_the_selection_is_the_rest(scheme, labels):
    if len(set(labels)) < needed(scheme):
        with pytest.raises(InputError, match="too few subjects"):
            scheme.folds(labels)
        return
    folds = scheme.folds(labels)
    every = list(range(len(labels)))
    assert sorted(row for fold in folds for row in fold.held_out) == every
    for fold in folds:
        assert fold.held_out
        assert fold.selection
        assert not set(fold.held_out) & set(fold.selection)
        assert sorted(fold.held_out + fold.selection) == every
        assert list(fold.held_out) == sorted(fold.held_out)
        assert list(fold.selection) == sorted(fold.selection)
    names = [fold.name for fold in folds]
    assert len(set(names)) == len(names)
    assert held_out_rows(scheme, labels) == [fold.held_out for fold in folds]


@given(SCHEMES, LABELS)
def test_rows_that_share_a_label_are_held_out_together(scheme, labels):
    if len(set(labels)) < needed(scheme):
        return
    for fold in scheme.folds(labels):
        out = {labels[row] for row in fold.held_out}
        kept = {labels[row] for row in fold.selection}
        assert not out & kept


@given(SCHEMES, LABELS, st.randoms(use_true_random=False))
def test_the_order_of_the_rows_changes_nothing(scheme, labels, random):
    if len(set(labels)) < needed(scheme):
        return
    order = list(range(len(labels)))
    random.shuffle(order)
    straight = scheme.folds(labels)
    shuffled = scheme.folds([labels[row] for row in order])
    assert [fold.name for fold in shuffled] == [fold.name for fold in straight]
    for one, other in zip(straight, shuffled, strict=True):
        assert sorted(order[row] for row in other.held_out) == list(one.held_out)


def test_leave_one_out_equals_scikit_learn_on_sorted_labels():
    labels = [f"{i:02}" for i in range(11)]
    ours = [(list(f.selection), list(f.held_out)) for f in LeaveOneOut().folds(labels)]
    theirs = model_selection.LeaveOneOut().split(np.zeros((11, 1)))
    assert ours == [(train.tolist(), test.tolist()) for train, test in theirs]


def test_leave_one_out_of_people_with_several_rows_equals_scikit_learn():
    labels = list("cabbacdadb")
    ours = [(list(f.selection), list(f.held_out)) for f in LeaveOneOut().folds(labels)]
    theirs = model_selection.LeaveOneGroupOut().split(np.zeros((10, 1)), groups=labels)
    assert ours == [(train.tolist(), test.tolist()) for train, test in theirs]


@pytest.mark.parametrize(("n", "k"), [(4, 2), (10, 3), (11, 4), (20, 5), (23, 7), (6, 6)])
def test_k_folds_are_as_large_as_scikit_learn_makes_them(n, k):
    labels = [f"{i:02}" for i in range(n)]
    ours = [len(f.held_out) for f in KFold(k, seed=3).folds(labels)]
    theirs = model_selection.KFold(k).split(np.zeros((n, 1)))
    assert ours == [len(test) for _, test in theirs]


def test_k_folds_are_dealt_by_seed_and_label_alone():
    labels = [f"{i:02}" for i in range(12)]

    def dealt(seed: int) -> list[set[str]]:
        return [{labels[r] for r in f.held_out} for f in KFold(3, seed).folds(labels)]

    assert dealt(1) == dealt(1)
    assert dealt(1) != dealt(2)
    # Frozen, so that a change of the dealing is noticed: it would change results.
    assert dealt(0) == [
        {"00", "05", "07", "09"},
        {"02", "06", "10", "11"},
        {"01", "03", "04", "08"},
    ]


@given(st.dictionaries(st.text(max_size=4), st.sampled_from("uvw"), min_size=2), st.data())
def test_strata_are_spread_evenly(stratum, data):
    labels = sorted(stratum)
    scheme = KFold(data.draw(st.integers(2, len(labels))), 3, tuple(stratum.items()))
    for name in set(stratum.values()):
        counts = [
            sum(stratum[labels[row]] == name for row in fold.held_out)
            for fold in scheme.folds(labels)
        ]
        assert max(counts) - min(counts) <= 1


def test_strata_are_as_many_in_each_fold_as_scikit_learn_makes_them():
    labels, strata = [f"{i:02}" for i in range(23)], ["ab"[i % 5 == 0] for i in range(23)]
    scheme = KFold(4, 1, tuple(zip(labels, strata, strict=True)))
    theirs = model_selection.StratifiedKFold(4).split(np.zeros((23, 1)), strata)

    def counts(held_out) -> tuple[int, int]:
        held = [strata[row] for row in held_out]
        return held.count("a"), held.count("b")

    ours = [counts(fold.held_out) for fold in scheme.folds(labels)]
    assert sorted(b for _, b in ours) == sorted(counts(test)[1] for _, test in theirs)
    assert {a for a, _ in ours} == {4, 5}


def test_given_folds_equal_scikit_learns():
    fold_of = [2, 0, 0, 1, 2, 1, 0]
    labels = list("abcdefg")
    scheme = Given(tuple((label, str(f)) for label, f in zip(labels, fold_of, strict=True)))
    ours = [(list(f.selection), list(f.held_out)) for f in scheme.folds(labels)]
    theirs = model_selection.PredefinedSplit(fold_of).split()
    assert ours == [(train.tolist(), test.tolist()) for train, test in theirs]
    # Who is not in the rows (left out of the study) is not missed.
    assert [f.held_out for f in scheme.folds(list("dab"))] == [(2,), (0,), (1,)]


@pytest.mark.parametrize(
    ("fold_of", "message"),
    [
        ((("a", "1"), ("b", "2")), "folds do not name every subject once: got no fold for c, d;"),
        (
            (("a", "1"), ("b", "2"), ("c", ""), ("d", "1")),
            "folds do not name every subject once: got no fold for c;",
        ),
        (
            (("a", "1"), ("b", "2"), ("c", "1"), ("d", "1"), ("a", "2")),
            "folds do not name every subject once: got a subject in two folds;",
        ),
        (tuple((label, "1") for label in "abcd"), "a single fold: expected two or more, got '1'"),
    ],
)
def test_given_folds_that_are_no_folds_are_refused(fold_of, message):
    with pytest.raises(InputError) as caught:
        Given(fold_of).folds(list("dcba"))
    assert message in str(caught.value)


@pytest.mark.parametrize(
    ("how", "held"),
    [
        ("odd-even", [["1", "3", "10"], ["2", "4"]]),
        ("first-second", [["1", "2", "3"], ["4", "10"]]),
    ],
)
def test_halves_go_by_the_number_of_the_run(how, held):
    labels = ["10", "2", "1", "4", "3"]
    folds = Halves(how).folds(labels)
    assert [sorted((labels[r] for r in f.held_out), key=int) for f in folds] == held
    with pytest.raises(InputError, match="too few subjects for two halves"):
        Halves(how).folds(["1", "1"])


def test_an_unknown_way_to_halve_is_refused():
    with pytest.raises(InputError, match="expected odd-even or first-second, got 'thirds'"):
        Halves("thirds")


def test_one_subject_in_each_fold_when_k_equals_n():
    held = {fold.held_out for fold in KFold(4, seed=9).folds(list("dbca"))}
    assert held == {(0,), (1,), (2,), (3,)}


def test_too_few_subjects_are_named_with_the_remedy():
    with pytest.raises(InputError) as caught:
        LeaveOneOut().folds(["b", "a", "b"])
    assert str(caught.value) == (
        "too few subjects for leave-one-subject-out: expected at least 3, got 2 (a, b); "
        "check the study table and the rows it leaves out"
    )
    assert caught.value.exit_code == 2
    with pytest.raises(InputError, match=r"too few subjects for 5 folds.*at least 5, got 0 \(none"):
        KFold(5).folds([])
    with pytest.raises(InputError, match="too few folds: expected k >= 2, got 1"):
        KFold(1).folds(list("abc"))
