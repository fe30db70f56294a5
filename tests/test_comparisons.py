"""Comparisons against scipy, statsmodels, published numbers, enumeration and simulation."""

from dataclasses import asdict
from itertools import product

import numpy as np
import pandas as pd
import pytest
from scipy import stats
from sequester.nodes.comparisons import (
    Interaction,
    difference,
    equivalence,
    group_interaction,
    interaction,
    repeated_measures,
)
from sequester.nodes.errors import InputError
from sequester.nodes.flips import all_signs, random_orders, random_signs
from sequester.nodes.masks import Strongest, Threshold
from sequester.nodes.procedure import Procedure
from sequester.nodes.roi import holm
from sequester.nodes.space import Grid
from statsmodels.stats.anova import AnovaRM
from statsmodels.stats.weightstats import ttost_paired

# Student (1908), Biometrika 6:1-25: hours of sleep gained with either drug.
SLEEP = np.array(
    [
        [1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4],
        [0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0],
    ]
).T
NAMES = ["Arbor", "Brook", "Cinder", "Dell", "Elm"]
POND = np.arange(20) % 3 == 0


def values(n: int, m: int, seed: int = 0) -> np.ndarray:
    """(n, m) with a part that belongs to the person, and spreads that differ."""
    rng = np.random.default_rng(seed)
    return rng.normal(size=(n, 1)) + rng.normal(size=(n, m)) * np.linspace(0.5, 2, m) + 0.3


def turned(x: np.ndarray, signs: np.ndarray) -> np.ndarray:
    """Values of fixed regions under flips: the people's signs and nothing else."""
    return signs[:, :, None] * x


# -- against the ordinary tests -------------------------------------------------------------


def test_two_conditions_are_students_paired_test_on_his_sleep_data():
    made = difference(SLEEP, ["left", "right"])
    assert made.statistic == pytest.approx(4.0621277, rel=1e-6)
    assert made.p == pytest.approx(0.0028328902, rel=1e-6)
    assert made.df == 9
    assert made.d == pytest.approx(1.2845576, rel=1e-6)
    assert [made.interval.low, made.interval.high] == pytest.approx(
        [0.7001142, 2.4598858], rel=1e-6
    )
    assert made.interval.kind == "exact"


def test_two_groups_are_welchs_test_on_the_sleep_data():
    """Taken for twenty people in two groups, as in the check values: Welch's df and p."""
    pooled = np.column_stack([SLEEP.T.ravel(), np.zeros(20)])
    first = np.arange(20) < 10
    made = group_interaction(pooled, ["amber", "teal"], first, ["pond", "hill"]).interaction
    assert made.statistic == pytest.approx(1.8608135, rel=1e-6)
    assert made.df == pytest.approx(17.7764735, rel=1e-6)
    assert made.p == pytest.approx(0.0793941, rel=1e-5)
    assert made.d == pytest.approx(0.8321811, rel=1e-6)
    reference = stats.ttest_ind(*SLEEP.T, equal_var=False).confidence_interval()
    assert [made.interval.low, made.interval.high] == pytest.approx(list(reference))


@pytest.mark.parametrize("sided", ["two-sided", "greater", "less"])
def test_sides_are_scipys(sided):
    x = values(12, 2)
    reference = stats.ttest_rel(x[:, 0], x[:, 1], alternative=sided)
    assert difference(x, NAMES[:2], sided=sided).p == pytest.approx(reference.pvalue)


def test_interaction_and_simple_effects_within_people():
    x = values(15, 4)
    made = interaction(x, (("Arbor", "Brook"), ("amber", "teal")))
    a1b1, a1b2, a2b1, a2b2 = x.T
    reference = stats.ttest_1samp((a1b1 - a1b2) - (a2b1 - a2b2), 0)
    assert made.interaction.statistic == pytest.approx(reference.statistic)
    assert made.interaction.what == "amber minus teal in Arbor minus the same in Brook"
    pairs = {
        "amber minus teal in Arbor": (a1b1, a1b2),
        "amber minus teal in Brook": (a2b1, a2b2),
        "Arbor minus Brook in amber": (a1b1, a2b1),
        "Arbor minus Brook in teal": (a1b2, a2b2),
    }
    expected = [stats.ttest_rel(*pair).pvalue for pair in pairs.values()]
    assert [effect.what for effect in made.simple] == list(pairs)
    assert [effect.p for effect in made.simple] == pytest.approx(expected)
    assert [effect.estimate for effect in made.simple] == pytest.approx(
        [np.mean(one - other) for one, other in pairs.values()]
    )
    assert made.simple_p == pytest.approx(holm(expected))
    # Of a 2 x 2 analysis of variance, its F is the square of this t.
    long = pd.DataFrame(
        [{"who": i, "a": j // 2, "b": j % 2, "y": x[i, j]} for i, j in product(range(15), range(4))]
    )
    table = AnovaRM(long, "y", "who", ["a", "b"]).fit().anova_table
    assert made.interaction.statistic**2 == pytest.approx(table.loc["a:b", "F Value"])


def test_interaction_of_groups_and_its_simple_effects():
    x = values(20, 2)
    made = group_interaction(x, ["amber", "teal"], POND, ["pond", "hill"])
    gap = x[:, 0] - x[:, 1]
    expected = {
        "amber minus teal in pond": stats.ttest_1samp(gap[POND], 0),
        "amber minus teal in hill": stats.ttest_1samp(gap[~POND], 0),
        "pond minus hill in amber": stats.ttest_ind(x[POND, 0], x[~POND, 0], equal_var=False),
        "pond minus hill in teal": stats.ttest_ind(x[POND, 1], x[~POND, 1], equal_var=False),
    }
    assert [effect.what for effect in made.simple] == list(expected)
    for effect, reference in zip(made.simple, expected.values(), strict=True):
        assert (effect.statistic, effect.p) == pytest.approx(
            (reference.statistic, reference.pvalue)
        )
    whole = stats.ttest_ind(gap[POND], gap[~POND], equal_var=False)
    assert made.interaction.p == pytest.approx(whole.pvalue)
    assert "n = 20 (7 and 13)" in made.interaction.sentence


@pytest.mark.parametrize("m", [3, 5])
def test_repeated_measures_is_that_of_statsmodels(m):
    x = values(14, m)
    made = repeated_measures(x, NAMES[:m])
    long = pd.DataFrame(
        [{"who": i, "where": j, "y": x[i, j]} for i, j in product(range(14), range(m))]
    )
    table = AnovaRM(long, "y", "who", ["where"]).fit().anova_table.iloc[0]
    assert made.statistic == pytest.approx(table["F Value"])
    assert made.df == (table["Num DF"], table["Den DF"])
    assert stats.f.sf(made.statistic, *made.df) == pytest.approx(table["Pr > F"])
    assert made.estimate == pytest.approx(
        made.statistic * made.df[0] / (made.statistic * made.df[0] + made.df[1])
    )
    # Box 1954 in the elements of the covariance: m^2 (mean variance - mean of all)^2 / ...
    S = np.cov(x.T)
    top = m**2 * (np.diag(S).mean() - S.mean()) ** 2
    rows = S.mean(axis=1)
    bottom = (m - 1) * (np.square(S).sum() - 2 * m * np.square(rows).sum() + m**2 * S.mean() ** 2)
    assert made.epsilon == pytest.approx(top / bottom)
    df1, df2 = (df * made.epsilon for df in made.df)
    assert made.p == pytest.approx(stats.f.sf(made.statistic, df1, df2))


def test_epsilon_by_hand():
    """Four people whose conditions have the covariance diag(1, 1, 4) x 4/3, means 0.

    Centred in both directions diag(1, 1, 4) becomes [[2, -1, -1], [-1, 2, -1], [-1, -1, 2]] / 3
    with 3 more in the third's direction: trace 4, trace of the square 10; 16 / (2 x 10) = .8.
    """
    x = np.array([[1.0, 1.0, 2.0], [1.0, -1.0, -2.0], [-1.0, 1.0, -2.0], [-1.0, -1.0, 2.0]])
    assert np.allclose(np.cov(x.T) * 3 / 4, np.diag([1, 1, 4]))
    assert repeated_measures(x, NAMES[:3]).epsilon == pytest.approx(0.8)


def test_two_conditions_have_an_f_that_is_the_square_of_t():
    paired, made = difference(SLEEP, ["left", "right"]), repeated_measures(SLEEP, ["left", "right"])
    assert made.statistic == pytest.approx(paired.statistic**2)
    assert (made.p, made.epsilon) == pytest.approx((paired.p, 1))
    signs = all_signs(10, 0, 1024)
    under = turned(SLEEP, signs)
    assert (
        repeated_measures(SLEEP, ["left", "right"], under, exact=True).p
        == difference(SLEEP, ["left", "right"], under, exact=True).p
    )


def test_greenhouse_and_geisser_keep_the_level_where_f_does_not():
    """Unequal variances of the differences: the plain F rejects too often."""
    rng = np.random.default_rng(5)
    sets, corrected, plain = 1500, 0, 0
    for _ in range(sets):
        made = repeated_measures(rng.normal(size=(15, 5)) * [1, 1, 1, 1, 8], NAMES)
        corrected += made.p <= 0.05
        plain += stats.f.sf(made.statistic, *made.df) <= 0.05
    error = np.sqrt(0.05 * 0.95 / sets)
    assert corrected / sets < 0.05 + 4 * error
    assert plain / sets > 0.05 + 6 * error


def test_equivalence_is_statsmodels_two_one_sided_tests():
    x = values(25, 2, seed=3)
    for smallest in (0.2, 0.9, 2.0):
        made = equivalence(x, NAMES[:2], smallest)
        p, *_ = ttost_paired(x[:, 0], x[:, 1], -smallest, smallest)
        assert made.p == pytest.approx(p)
        inside = -smallest < made.interval.low and made.interval.high < smallest
        assert made.equivalent is inside
    interval = stats.ttest_rel(*x.T).confidence_interval(0.9)
    assert [made.interval.low, made.interval.high] == pytest.approx(list(interval))
    # One condition is its difference from nothing.
    alone = np.column_stack([x[:, 0] - x[:, 1], np.zeros(25)])
    assert equivalence(alone, NAMES[:2], 0.9).p == equivalence(alone[:, :1], NAMES[:1], 0.9).p


def test_what_equivalence_says():
    far = equivalence(SLEEP, ["left", "right"], 0.5)
    assert (far.equivalent, far.statistic < 0, far.p > 0.5) == (False, True, True)
    assert "not shown to be smaller than 0.5 (nor to be larger)" in far.sentence
    under = turned(SLEEP, all_signs(10, 0, 1024))
    assert equivalence(SLEEP, ["left", "right"], 0.5, under, exact=True).p > 0.5
    near = equivalence(SLEEP, ["left", "right"], 3.0)
    assert near.equivalent
    assert "exact 90 % interval" in near.sentence
    assert "smaller than 3 either way" in near.sentence


# -- by exchanges ---------------------------------------------------------------------------


@pytest.mark.parametrize(("sided", "p"), [("greater", 2 / 1024), ("two-sided", 4 / 1024)])
def test_flips_of_the_sleep_data_are_those_enumerated(sided, p):
    """The sign-flip p of the mean, enumerated; that of t is the same."""
    under = turned(SLEEP, all_signs(10, 0, 1024))
    made = difference(SLEEP, ["left", "right"], under, exact=True, sided=sided)
    assert made.p == p
    assert "all 1024 exchanges" in made.p_kind
    assert (made.df, made.interval.kind) == (None, "approximate")


def test_random_flips_count_the_observed_data():
    under = turned(SLEEP, random_signs(1, list("abcdefghij"), 0, 199))
    gaps = under[..., 0] - under[..., 1]
    others = stats.ttest_1samp(gaps, 0, axis=1).statistic
    made = difference(SLEEP, ["left", "right"], under)
    assert made.p == (1 + np.sum(np.abs(others) >= made.statistic)) / 200
    assert difference(SLEEP, ["left", "right"], -under[:, ::-1], sided="less").p > 0.9


@pytest.mark.parametrize("exact", [True, False])
@pytest.mark.parametrize("shift", np.linspace(0, 1.2, 7))
def test_an_interval_by_flips_excludes_zero_when_p_says_so(exact, shift):
    x = values(8, 2, seed=4) + np.array([shift, 0])
    under = turned(x, all_signs(8, 0, 256))
    for level in (0.8, 0.9, 0.95):
        made = difference(x, NAMES[:2], under, exact=exact, level=level)
        excluded = made.interval.low > 0 or made.interval.high < 0
        assert excluded == (made.p <= 1 - level + 1e-12)
    for smallest in (0.3, 1.0, 2.0, 4.0):
        same = equivalence(x, NAMES[:2], smallest, under, exact=exact, alpha=0.1)
        inside = -smallest < same.interval.low and same.interval.high < smallest
        assert same.equivalent is inside


def test_every_comparison_by_flips_against_a_loop_over_scipy():
    x = values(20, 4, seed=6)
    signs = random_signs(2, [str(i) for i in range(20)], 0, 99)
    under = turned(x, signs)

    def p_of(statistic):
        others = np.array([statistic(flip) for flip in under])
        return (1 + np.sum(np.abs(others) >= abs(statistic(x)) - 1e-9)) / 100

    gap = np.array([1, -1, -1, 1])
    made = interaction(x, (("Arbor", "Brook"), ("amber", "teal")), under)
    assert made.interaction.p == p_of(lambda v: stats.ttest_1samp(v @ gap, 0).statistic)
    assert made.simple[3].p == p_of(lambda v: stats.ttest_rel(v[:, 1], v[:, 3]).statistic)

    def welch(v):
        d = v[:, 0] - v[:, 1]
        return stats.ttest_ind(d[POND], d[~POND], equal_var=False).statistic

    groups = group_interaction(x[:, :2], NAMES[:2], POND, ["pond", "hill"], under[..., :2])
    assert groups.interaction.p == p_of(welch)
    assert groups.simple[0].p == p_of(lambda v: stats.ttest_rel(v[POND, 0], v[POND, 1]).statistic)

    def ratio(v):
        long = v - v.mean(axis=1, keepdims=True)
        within = np.square(long - long.mean(axis=0)).sum()
        return np.square(long.mean(axis=0)).sum() / within

    assert repeated_measures(x, NAMES[:4], under).p == p_of(ratio)


def test_exchanged_groups_have_their_own_null():
    x = values(20, 2, seed=7)
    orders = random_orders(3, [f"{i:02}" for i in range(20)], 0, 99)
    under = np.broadcast_to(x, (99, 20, 2))
    made = group_interaction(x, NAMES[:2], POND, ["pond", "hill"], under, POND[orders])
    gap = x[:, 0] - x[:, 1]
    others = [
        stats.ttest_ind(gap[POND[o]], gap[~POND[o]], equal_var=False).statistic for o in orders
    ]
    observed = abs(made.interaction.statistic)
    assert made.interaction.p == (1 + np.sum(np.abs(others) >= observed)) / 100
    assert "do not depend on the group" in made.interaction.null
    # Exchanging groups says nothing about conditions within one of them.
    assert [effect.what for effect in made.simple] == [
        "pond minus hill in Arbor",
        "pond minus hill in Brook",
    ]


def test_each_result_names_its_null():
    x = values(9, 2)
    under = turned(x, all_signs(9, 0, 512))
    assert difference(x, NAMES[:2]).null == "the population mean of Arbor minus Brook is zero"
    flipped = difference(x, NAMES[:2], under, exact=True)
    assert "no effect in any of the conditions compared" in flipped.sentence
    assert "approximate" in flipped.assumption
    assert "not which" in repeated_measures(x, NAMES[:2], under).sentence


# -- what must not matter, and what must be defined -----------------------------------------


def everything(x, under, first):
    """Every comparison of four conditions, as plain records."""
    made = [
        difference(x[:, :2], NAMES[:2], None if under is None else under[..., :2]),
        interaction(x, (("Arbor", "Brook"), ("amber", "teal")), under),
        group_interaction(
            x[:, 1:3],
            NAMES[:2],
            first,
            ["pond", "hill"],
            None if under is None else under[..., 1:3],
        ),
        repeated_measures(x, NAMES[:4], under),
        equivalence(x[:, :1], NAMES[:1], 1.0, None if under is None else under[..., :1]),
    ]
    flat = []
    for record in made:
        parts = (
            [record.interaction, *record.simple] if isinstance(record, Interaction) else [record]
        )
        flat += [asdict(part) for part in parts]
    return flat


@pytest.mark.parametrize("by_flips", [True, False])
def test_the_order_of_people_does_not_matter(by_flips):
    x = values(20, 4, seed=8)
    x[[2, 11], [0, 3]] = np.nan
    under = turned(x, random_signs(4, [str(i) for i in range(20)], 0, 199)) if by_flips else None
    order = np.random.default_rng(9).permutation(20)
    there = everything(x, under, POND)
    again = everything(x[order], None if under is None else under[:, order], POND[order])
    for one, other in zip(there, again, strict=True):
        assert one["statistic"] == pytest.approx(other["statistic"], rel=1e-11)
        assert one["estimate"] == pytest.approx(other["estimate"], rel=1e-11)
        assert one["p"] == (other["p"] if by_flips else pytest.approx(other["p"], rel=1e-10))
        assert one["sentence"] == other["sentence"]


def test_people_without_a_value_are_left_out_of_what_lacks_it():
    x = values(20, 4, seed=8)
    x[3, 2] = np.nan
    under = turned(x, random_signs(4, [str(i) for i in range(20)], 0, 99))
    there = np.delete(x, 3, axis=0)
    made = repeated_measures(x, NAMES[:4], under)
    assert (made.n, made.n_left_out) == (19, 1)
    assert made.statistic == repeated_measures(there, NAMES[:4]).statistic
    assert made.p == repeated_measures(there, NAMES[:4], np.delete(under, 3, axis=1)).p
    assert "n = 19, 1 without all values left out" in made.sentence
    # The first two conditions are complete.
    assert difference(x[:, :2], NAMES[:2], under[..., :2]).n == 20


@pytest.mark.parametrize("n", [2, 3])
def test_few_people(n):
    x = values(n, 4, seed=10)
    under = turned(x, all_signs(n, 0, 2**n))
    made = difference(x[:, :2], NAMES[:2], under[..., :2], exact=True)
    # Both of a flip and its opposite have this |t|, so p cannot be small, nor an interval short.
    assert made.p >= 2 / 2**n
    assert (made.interval.low, made.interval.high) == (-np.inf, np.inf)
    assert difference(x[:, :2], NAMES[:2]).p == pytest.approx(
        stats.ttest_rel(x[:, 0], x[:, 1]).pvalue
    )
    whole = repeated_measures(x, NAMES[:4])
    assert whole.df == (3, 3 * (n - 1))
    assert 1 / 3 <= whole.epsilon + 1e-12 <= min(1, (n - 1) / 3) + 1e-9
    assert not equivalence(x[:, :1], NAMES[:1], 50.0, under[..., :1], exact=True).equivalent


@pytest.mark.parametrize("by_flips", [True, False])
@pytest.mark.parametrize("gap", [0.0, 0.1, -0.1])
def test_conditions_that_go_perfectly_together(by_flips, gap):
    """Equal but for a constant, and for the rounding that 0.1 brings."""
    base = values(6, 1, seed=11) * 1000
    x = np.hstack([base + gap, base])
    under = turned(x, all_signs(6, 0, 64)) if by_flips else None
    made = difference(x, NAMES[:2], under, exact=by_flips)
    assert made.statistic == (np.copysign(np.inf, gap) if gap else 0)
    assert made.p == (1 if not gap else 2 / 64 if by_flips else 0)
    assert made.d is None
    whole = repeated_measures(x, NAMES[:2], under, exact=by_flips)
    assert (whole.statistic, whole.p) == (np.inf if gap else 0, made.p)
    same = equivalence(x, NAMES[:2], 1.0, under, exact=by_flips)
    assert same.equivalent
    groups = group_interaction(x, NAMES[:2], np.arange(6) < 3, ["pond", "hill"], under)
    assert (groups.interaction.statistic, groups.interaction.p) == (0, 1)


def test_values_that_are_all_zero_show_nothing():
    """As when no fold finds a region, in the data and under every exchange."""
    x, under = np.zeros((8, 4)), np.zeros((50, 8, 4))
    for record in everything(x, under, np.arange(8) < 4)[:-1]:
        assert (record["statistic"], record["p"]) == (0, 1)
    assert repeated_measures(x, NAMES[:4]).epsilon == pytest.approx(1 / 3)


X = values(6, 2)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: difference(X[:1], NAMES[:2]), "too few people to compare"),
        (lambda: difference(X, NAMES[:3]), "another number of conditions"),
        (lambda: difference(X, ["Arbor", "Arbor"]), "conditions of one name"),
        (lambda: difference(X[:, 0], NAMES[:2]), r"the observed values do not fit"),
        (lambda: difference(X * np.inf, NAMES[:2]), "values that are not finite"),
        (lambda: difference(X, NAMES[:2], sided="both"), "unknown side"),
        (lambda: difference(X, NAMES[:2], level=95), "not a coverage"),
        (lambda: difference(X, NAMES[:2], X), "values under exchanges do"),
        (lambda: difference(X, NAMES[:2], np.zeros((0, 6, 2))), "values under exchanges do"),
        (lambda: difference(X, NAMES[:2], [X * np.nan]), "not finite .under exchanges"),
        (lambda: difference(X, NAMES[:2], exact=True), "exact without exchanges"),
        (lambda: difference(X, NAMES[:2], [-X], exact=True), "without the one that changes"),
        (lambda: repeated_measures(X[:, :1], NAMES[:1]), "expected 2 or more"),
        (lambda: equivalence(X, NAMES[:2], 0.0), "not an effect of interest"),
        (lambda: equivalence(X, NAMES[:2], 1.0, alpha=0.5), "not a level"),
        (
            lambda: group_interaction(X, NAMES[:2], np.arange(6) < 1, ["pond", "hill"]),
            "too few people in a group .pond",
        ),
        (
            lambda: group_interaction(X, NAMES[:2], [True], ["pond", "hill"]),
            "who is in the first group does not fit",
        ),
        (
            lambda: group_interaction(
                X, NAMES[:2], np.arange(6) < 3, ["pond", "hill"], [X], [np.arange(6) < 2]
            ),
            "groups that an exchange does not keep",
        ),
    ],
)
def test_what_is_refused(call, message):
    with pytest.raises(InputError, match=message):
        call()


# -- with the whole procedure ---------------------------------------------------------------


def test_a_difference_of_cross_fitted_regions_keeps_its_level_and_the_paired_t_does_not():
    """Two regions, each chosen without the subject in its own search region, nothing in either."""
    rng = np.random.default_rng(12)
    n, sets, people = 14, 300, [f"{i:02}" for i in range(14)]
    grid = Grid((30, 1, 1), np.eye(4))
    procedure = Procedure(Threshold(p=0.01), on_empty="strongest", k=2)
    rejected = one_sided = plain = 0
    for number in range(sets):
        signs = random_signs(number, people, 0, 19)
        ready = [procedure.prepare(rng.normal(size=(n, 30)), people, grid) for _ in range(2)]
        observed = np.stack([r.per_person(r.outcome().values) for r in ready], axis=-1)
        under = np.stack([r.values_under(signs) for r in ready], axis=-1)
        rejected += difference(observed, NAMES[:2], under).p <= 0.05
        one_sided += difference(observed, NAMES[:2], under, sided="greater").p <= 0.05
        plain += difference(observed, NAMES[:2]).p <= 0.05
    error = np.sqrt(0.05 * 0.95 / sets)
    assert abs(rejected / sets - 0.05) < 4 * error
    assert abs(one_sided / sets - 0.05) < 4 * error
    assert plain / sets > 0.15


def left_out_values(x: np.ndarray, signs: np.ndarray, p: float, k: int = 0) -> np.ndarray:
    """(n_flips, n): under each flip, everybody's mean where the others' t has a p below p.

    Where none has: in the k features with the highest t.
    """
    n, others = len(x), len(x) - 1
    t = stats.t.isf(p, others - 1)
    S, Q = signs @ x, np.square(x).sum(axis=0)
    values = np.zeros(signs.shape)
    for i in range(n):
        share = (S - signs[:, [i]] * x[i]) / np.sqrt(others * (Q - x[i] ** 2))
        mask = share > t / np.sqrt(others - 1 + t * t)
        if k:
            kth = np.partition(share, -k, axis=1)[:, [-k]]
            mask |= ~mask.any(axis=1, keepdims=True) & (share >= kth)
        values[:, i] = signs[:, i] * (mask @ x[i]) / np.maximum(mask.sum(axis=1), 1)
    return values


def test_equal_small_effects_differ_as_seldom_as_stated_where_the_strongest_stand_in():
    """Folds find more in the data than under flips, where a value of 0 makes t small."""
    rng = np.random.default_rng(14)
    sets, people = 250, [f"{i:02}" for i in range(16)]
    rejected = with_empty = 0
    for number in range(sets):
        signs = np.concatenate([np.ones((1, 16)), random_signs(number, people, 0, 99)])
        maps = [rng.normal(size=(16, 40)) + 0.3 for _ in range(2)]
        values = np.stack([left_out_values(x, signs, 0.001, 3) for x in maps], -1)
        rejected += difference(values[0], NAMES[:2], values[1:]).p <= 0.05
        values = np.stack([left_out_values(x, signs, 0.001) for x in maps], -1)
        gaps = values[..., 0] - values[..., 1]
        t = np.abs(gaps.mean(axis=1)) / np.maximum(gaps.std(axis=1), 1e-12)
        with_empty += np.mean(t >= t[0]) <= 0.05
        with pytest.raises(InputError, match=r"regions that folds often do not find .* got \d+%"):
            difference(values[0], NAMES[:2], values[1:])
    error = np.sqrt(0.05 * 0.95 / sets)
    assert rejected / sets < 0.05 + 4 * error
    assert with_empty / sets > 0.05 + 10 * error


def test_a_real_difference_between_cross_fitted_regions_is_found():
    rng = np.random.default_rng(13)
    people, grid = [f"{i:02}" for i in range(20)], Grid((30, 1, 1), np.eye(4))
    signs = random_signs(0, people, 0, 199)
    ready = [
        Procedure(Strongest(3)).prepare(rng.normal(size=(20, 30)) + effect, people, grid)
        for effect in (1.5, 0.0)
    ]
    observed = np.stack([r.per_person(r.outcome().values) for r in ready], axis=-1)
    under = np.stack([r.values_under(signs) for r in ready], axis=-1)
    made = difference(observed, NAMES[:2], under)
    assert made.p == 1 / 200
    assert made.estimate == pytest.approx(1.5, abs=0.4)
    assert repeated_measures(observed, NAMES[:2], under).p == 1 / 200
