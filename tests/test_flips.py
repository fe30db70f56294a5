"""Signs of flips: what they depend on, what they do not, and that the stream stays the same."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from sequester.nodes.flips import all_orders, all_signs, all_splits, random_orders, random_signs

PEOPLE = [f"{i:02}" for i in range(12)]


@given(st.integers(0, 2**40), st.text(max_size=5), st.integers(0, 300), st.integers(0, 200))
def test_any_stretch_of_flips_is_the_same_stretch_of_the_whole(seed, label, start, length):
    whole = random_signs(seed, [label], 0, 500)
    part = random_signs(seed, [label], start, start + length)
    assert part.shape == (length, 1)
    assert (part == whole[start : start + length]).all()


@given(st.permutations(PEOPLE))
def test_a_label_has_its_signs_in_any_company_and_order(order):
    signs = random_signs(5, PEOPLE, 0, 130)
    assert (random_signs(5, order, 0, 130) == signs[:, [PEOPLE.index(p) for p in order]]).all()


def test_seed_and_label_both_matter():
    signs = random_signs(1, PEOPLE, 0, 256)
    assert len({column.tobytes() for column in signs.T}) == len(PEOPLE)
    assert len({random_signs(seed, ["a"], 0, 256).tobytes() for seed in range(50)}) == 50
    # Labels are strings, and no seed runs into the label.
    assert (random_signs(1, ["01"], 0, 64) != random_signs(1, ["1"], 0, 64)).any()
    assert (random_signs(1, ["23"], 0, 64) != random_signs(12, ["3"], 0, 64)).any()


def test_signs_are_balanced_and_independent_of_one_another():
    n = 40_000
    signs = random_signs(3, PEOPLE, 0, n).astype(float)
    assert set(np.unique(signs)) == {-1.0, 1.0}
    # A mean of n signs, and of n products of two signs, has standard deviation 1 / sqrt(n).
    limit = 5 / np.sqrt(n)
    assert np.abs(signs.mean(axis=0)).max() < limit
    between = signs.T @ signs / n
    assert np.abs(between[~np.eye(len(PEOPLE), dtype=bool)]).max() < limit
    assert np.abs((signs[1:] * signs[:-1]).mean(axis=0)).max() < limit


@pytest.mark.parametrize(
    ("label", "start", "expected"),
    [
        ("moth", 0, "+-++--++--+-+--+---+--+-"),
        ("ember", 0, "--+--+-++++---+-+++---++"),
        ("moth", 1000, "++---+--"),
    ],
)
def test_the_stream_is_the_one_it_has_always_been(label, start, expected):
    # Frozen from this code: another stream gives every published p-value another last digit.
    signs = random_signs(20, [label], start, start + len(expected))[:, 0]
    assert "".join("+" if sign > 0 else "-" for sign in signs) == expected


@given(st.integers(1, 8))
def test_the_enumeration_holds_every_pattern_once_and_begins_with_nobody_flipped(n):
    signs = all_signs(n, 0, 2**n)
    patterns = {tuple(row) for row in signs.tolist()}
    assert patterns == set(itertools.product([1, -1], repeat=n))
    assert len(signs) == 2**n
    assert (signs[0] == 1).all()
    assert (all_signs(n, 1, 2**n) == signs[1:]).all()


@given(st.integers(0, 2**40), st.integers(0, 300), st.integers(0, 200))
def test_any_stretch_of_orders_is_the_same_stretch_of_the_whole(seed, start, length):
    whole = random_orders(seed, PEOPLE, 0, 500)
    assert (
        random_orders(seed, PEOPLE, start, start + length) == whole[start : start + length]
    ).all()
    assert (np.sort(whole, axis=1) == np.arange(12)).all()


def test_every_order_is_as_likely_and_seeds_differ():
    orders = random_orders(3, PEOPLE[:4], 0, 24_000)
    _, counts = np.unique(orders, axis=0, return_counts=True)
    assert len(counts) == 24
    assert stats.chisquare(counts).pvalue > 1e-4
    # One exchange tells nothing of the next: the pairs of places are even too.
    pairs = np.histogram2d(orders[:-1, 0], orders[1:, 1], bins=4)[0]
    assert stats.chisquare(pairs.ravel()).pvalue > 1e-4
    assert len({random_orders(seed, PEOPLE, 0, 20).tobytes() for seed in range(50)}) == 50


def test_the_orders_are_those_they_have_always_been():
    # Frozen from this code, as the signs above.
    orders = random_orders(20, ["ember", "fern", "moth", "reed"], 1000, 1003)
    assert orders.tolist() == [[1, 0, 3, 2], [2, 0, 1, 3], [1, 0, 3, 2]]


@given(st.integers(1, 6))
def test_all_orders_are_there_once(n):
    orders = all_orders(n)
    assert {tuple(row) for row in orders.tolist()} == set(itertools.permutations(range(n)))
    assert orders[0].tolist() == list(range(n))


@given(st.lists(st.booleans(), min_size=1, max_size=8))
def test_all_splits_name_every_group_once(first):
    first = np.array(first)
    orders = all_splits(first)
    assert (np.sort(orders, axis=1) == np.arange(len(first))).all()
    groups = {tuple(row) for row in first[orders].tolist()}
    assert groups == set(itertools.permutations(first.tolist()))
    assert len(groups) == len(orders)
