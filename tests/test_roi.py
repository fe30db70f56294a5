"""Values in a region, tests and intervals against published numbers; what results may say."""

from __future__ import annotations

import dataclasses
import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from sequester.nodes.errors import InputError
from sequester.nodes.masks import Strongest, Threshold
from sequester.nodes.procedure import Prepared, Procedure
from sequester.nodes.results import (
    cross_fitted_result,
    exploratory_result,
    fixed_region_result,
    p_text,
)
from sequester.nodes.roi import (
    count_at_least,
    exchange_p,
    flip_interval,
    fold_interval,
    holm,
    jackknife_interval,
    one_sample_t,
    per_person,
    region_mean,
    sign_flip_t,
    small_sample_factor,
    studentised,
)
from sequester.nodes.space import Grid
from statsmodels.stats.multitest import multipletests
from statsmodels.stats.weightstats import DescrStatsW

SAMPLES = st.lists(st.floats(-100, 100), min_size=2, max_size=30).filter(lambda x: np.std(x) > 1e-3)


# -- Student's t ----------------------------------------------------------------------------


def test_students_sleep_data(checks):
    # Student 1908, Biometrika 6:1-25 [recomputed with R 4.2 and SciPy].
    sleep = checks["sleep"]
    made = one_sample_t(np.subtract(sleep["g2"], sleep["g1"]))
    paired = sleep["paired"]
    assert made.df == paired["df"]
    assert made.mean == pytest.approx(paired["mean"], rel=1e-12)
    assert made.t == pytest.approx(paired["t"], rel=1e-12)
    assert made.p == pytest.approx(paired["p"], rel=1e-12)
    assert [made.interval.low, made.interval.high] == pytest.approx(paired["ci"], rel=1e-12)
    assert made.interval.kind == "exact"
    assert made.dz == pytest.approx(sleep["dz"], rel=1e-12)
    assert made.g == pytest.approx(sleep["gz"], rel=1e-12)
    one = one_sample_t(sleep["g1"])
    assert [one.t, one.p] == pytest.approx(
        [sleep["one_sample_g1"]["t"], sleep["one_sample_g1"]["p"]], rel=1e-12
    )
    assert [one.interval.low, one.interval.high] == pytest.approx(
        sleep["one_sample_g1"]["ci"], rel=1e-12
    )


def test_the_small_sample_factor(checks):
    # J(m) of Hedges 1981 (J Educ Stat 6:107-128, from memory) [R 4.2, independent Python].
    for df, expected in checks["sleep"]["J"].items():
        assert small_sample_factor(int(df)) == pytest.approx(expected, rel=1e-12)
    # Finite where the Gamma function itself overflows, and close to 1 - 3 / (4 m - 1).
    assert small_sample_factor(1000) == pytest.approx(1 - 3 / 3999, rel=1e-6)


@given(SAMPLES, st.sampled_from([0.8, 0.95, 0.99]))
def test_the_t_test_equals_scipy_and_statsmodels(values, level):
    made = one_sample_t(values, level)
    theirs = stats.ttest_1samp(values, 0)
    interval = theirs.confidence_interval(level)
    assert [made.t, made.p] == pytest.approx([theirs.statistic, theirs.pvalue], rel=1e-9, abs=1e-12)
    assert made.df == theirs.df
    assert studentised(np.array(values)) == made.t
    ours = [made.interval.low, made.interval.high]
    assert ours == pytest.approx([interval.low, interval.high], rel=1e-9, abs=1e-9)
    weighted = DescrStatsW(values)
    assert ours == pytest.approx(weighted.tconfint_mean(1 - level), rel=1e-9, abs=1e-9)
    assert made.t == pytest.approx(weighted.ttest_mean(0)[0], rel=1e-9, abs=1e-12)


def test_values_without_spread():
    # 0.1 three times has a mean that rounds to something else; t is infinite all the same.
    assert studentised(np.full(3, 0.1)) == np.inf
    assert studentised(np.full(7, -0.1)) == -np.inf
    assert studentised(np.zeros(5)) == 0
    assert one_sample_t(np.zeros(5)).dz == 0
    constant = one_sample_t([0.1, 0.1, 0.1])
    assert (constant.t, constant.dz, constant.p) == (np.inf, np.inf, 0)


@pytest.mark.parametrize("values", [[1.0], [], [1.0, np.nan], [[1.0, 2.0]]])
def test_a_t_test_of_too_little_is_refused(values):
    with pytest.raises(InputError, match="a t-test needs at least two finite values: got"):
        one_sample_t(values)


# -- sign flips of given values --------------------------------------------------------------


def test_darwins_maize(checks):
    # Fisher 1935, Design of Experiments [enumerated, exact].
    case = checks["darwin"]
    assert sign_flip_t(case["x"]) * case["n"] == case["n_ge"] == 863
    assert sign_flip_t(case["x"], sided=2) == case["p2"] == pytest.approx(0.0526733, rel=1e-5)
    made = one_sample_t(case["x"])
    assert [made.t, made.p] == pytest.approx([case["t"], case["p"]], rel=1e-12)


def test_sign_flips_of_the_sleep_data(checks):
    difference = np.subtract(checks["sleep"]["g2"], checks["sleep"]["g1"])
    assert sign_flip_t(difference) == checks["sleep"]["signflip_mean"]["p1"] == 2 / 1024
    assert sign_flip_t(difference, sided=2) == checks["sleep"]["signflip_mean"]["p2"] == 4 / 1024


@given(st.lists(st.integers(-4, 4), min_size=2, max_size=8))
def test_sign_flips_count_every_pattern_and_ties_as_reached(values):
    sums = [np.dot(s, values) for s in itertools.product([1, -1], repeat=len(values))]
    expected = sum(s >= sum(values) for s in sums) / len(sums)
    assert sign_flip_t(np.array(values) / 10) == expected
    two = sum(abs(s) >= abs(sum(values)) for s in sums) / len(sums)
    assert sign_flip_t(np.array(values) / 10, sided=2) == two


def test_too_many_values_to_enumerate():
    with pytest.raises(InputError, match="too many values to enumerate: expected at most 20, got"):
        sign_flip_t(np.ones(21))


def test_random_exchanges_count_the_data_itself():
    # (1 + b) / (1 + m): Phipson & Smyth 2010, Stat Appl Genet Mol Biol 9:39 (from memory).
    others = np.array([0.0, 1.0, 2.0, 3.0])
    assert exchange_p(2.0, others, exact=False) == 3 / 5
    assert exchange_p(9.0, others, exact=False) == 1 / 5
    assert exchange_p(2.0, others, exact=True) == 2 / 4
    # A tie by rounding is a tie, in either direction and at any size.
    assert count_at_least(0.1 + 0.2, np.array([0.3])) == 1
    assert count_at_least(3e8, np.array([3e8 * (1 - 1e-12), 3e8 * (1 - 1e-6)])) == 1
    assert count_at_least(np.inf, np.array([np.inf, 1e300])) == 1
    assert count_at_least(-np.inf, np.array([-np.inf, 0.0])) == 2


# -- several regions -------------------------------------------------------------------------


def test_fifteen_p_values(checks):
    # The list of Benjamini & Hochberg 1995, JRSS-B 57:289-300 [R 4.2, statsmodels].
    case = checks["bh1995"]
    adjusted = holm(case["p"])
    assert adjusted == pytest.approx(case["holm"], rel=1e-12)
    assert sum(p <= 0.05 for p in adjusted) == case["n_reject_holm"] == 3


@given(st.lists(st.floats(0, 1), min_size=1, max_size=20))
@settings(max_examples=30)  # statsmodels takes its time
def test_holm_equals_statsmodels(p):
    assert holm(p) == pytest.approx(multipletests(p, method="holm")[1], rel=1e-12, abs=1e-15)


# -- intervals -------------------------------------------------------------------------------


@given(SAMPLES)
def test_the_jackknife_of_a_mean_is_the_t_interval(values):
    x = np.array(values)
    without = np.array([np.delete(x, i).mean() for i in range(len(x))])
    made, expected = jackknife_interval(x.mean(), without), one_sample_t(x).interval
    assert [made.low, made.high] == pytest.approx([expected.low, expected.high], rel=1e-7, abs=1e-7)
    assert made.kind == "conservative"
    assert "conservative and may include 0 when p < .05" in made.method


@given(SAMPLES, st.floats(0.5, 20))
def test_the_flip_interval_is_so_many_standard_errors_wide(values, quantile):
    x = np.array(values)
    made = flip_interval(x, quantile)
    error = stats.sem(x)
    assert [made.low, made.high] == pytest.approx(
        [x.mean() - quantile * error, x.mean() + quantile * error], rel=1e-9, abs=1e-9
    )
    assert made.kind == "approximate"


@given(SAMPLES, st.integers(2, 10))
def test_the_interval_of_a_k_fold_mean_is_wider_by_the_share_of_common_subjects(values, k):
    # Nadeau & Bengio 2003, Mach Learn 52:239-281 (from memory).
    x = np.array(values)
    half = stats.t.ppf(0.975, len(x) - 1) * stats.sem(x) * np.sqrt(1 + k / (k - 1))
    made = fold_interval(x, k)
    assert [made.low, made.high] == pytest.approx(
        [x.mean() - half, x.mean() + half], rel=1e-9, abs=1e-9
    )
    assert made.kind == "approximate"


# -- values in a region ----------------------------------------------------------------------


@given(st.lists(st.tuples(st.floats(-9, 9, width=32), st.booleans()), max_size=20))
def test_a_region_is_read_where_there_is_data(cells):
    values = np.array([value for value, _ in cells], dtype=np.float32)
    present = np.array([there for _, there in cells], dtype=bool)
    mean, coverage = region_mean(values, present)
    if not present.any():
        assert (mean, coverage) == (0, 0)
    else:
        assert mean == pytest.approx(values[present].astype(float).mean(), rel=1e-12, abs=1e-12)
        assert coverage == present.mean()
    assert region_mean(values, np.ones_like(present)) == region_mean(values)


def test_rows_of_a_person_are_averaged():
    assert per_person([1.0, 2.0, 4.0, 0.0], ["b", "a", "b", "c"]) == [2.0, 2.5, 0.0]


# -- what may be said ------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("p", "text"),
    [
        (0.0312, "p = .031"),
        (0.5, "p = .500"),
        (1.0, "p = 1.000"),
        (0.001, "p = .001"),
        (0.00099, "p < .001"),
        (1e-9, "p < .001"),
        (0.10049, "p = .100"),
    ],
)
def test_p_as_a_paper_prints_it(p, text):
    assert p_text(p) == text


NAMES = ("hollow", "leave-one-subject-out", "left bank")


def ready(procedure: Procedure, n: int = 12, v: int = 60) -> Prepared:
    effects = np.random.default_rng(8).standard_normal((n, v))
    effects[:, : v // 6] += 1.2
    effects[:, v // 6 : v // 3] -= 1.2
    space = Grid((v, 1, 1), np.eye(4))
    return procedure.prepare(effects, [f"{i:02}" for i in range(n)], space)


@pytest.mark.parametrize("tail", ["positive", "negative"])
@pytest.mark.parametrize("interval", ["flips", "jackknife"])
def test_a_cross_fitted_result_says_what_it_is(tail, interval):
    made_ready = ready(Procedure(Threshold(p=0.01), tail=tail))
    made, outcome, test = cross_fitted_result(made_ready, NAMES, 199, 3, interval)
    values = np.array(outcome.values)
    sign = 1 if tail == "positive" else -1
    assert made.estimate == pytest.approx(values.mean(), rel=1e-12)
    assert sign * made.estimate > 0.5
    assert made.t == test.t == pytest.approx(sign * stats.ttest_1samp(values, 0).statistic)
    assert made.dz == pytest.approx(values.mean() / values.std(ddof=1))
    assert made.sided == ("greater" if sign > 0 else "less")
    assert (made.biased, made.n_subjects, made.n_folds) == (False, 12, 12)
    assert made.p == test.p
    assert made.p_error == pytest.approx(np.sqrt(made.p * (1 - made.p) / 199))
    assert made.interval.low < made.estimate < made.interval.high
    assert made.interval.kind == {"flips": "approximate", "jackknife": "conservative"}[interval]
    assert made.noise_dice < made.dice <= 1
    # The sentence names the search region, the kind of interval and of p, and the null.
    assert "search region 'left bank'" in made.sentence
    assert f"{made.interval.kind} 95 % interval" in made.sentence
    assert p_text(made.p) in made.sentence
    assert "whole-procedure sign flip, 199 random flips, one-sided" in made.sentence
    assert "jointly symmetric about zero over the search region 'left bank'" in made.sentence
    assert "not at any one voxel" in made.sentence


def test_the_rule_in_a_result_tells_the_direction_of_selection():
    rules = []
    for tail in ("positive", "negative"):
        made, _, _ = cross_fitted_result(
            ready(Procedure(Threshold(height=3.0), tail=tail)), NAMES, 19, 3
        )
        rules.append(made.rule)
        assert made.rule in made.sentence
    # Features chosen in the negative tail do not have t > 3.
    assert rules[0] == "all features with t > 3"
    assert "t > 3" not in rules[1]


def test_an_enumerated_test_has_no_monte_carlo_error(checks):
    effects = np.array(checks["loso_tiny"]["X"])
    prepared = Procedure(Strongest(1, "mean")).prepare(
        effects, list("abcde"), Grid((3, 1, 1), np.eye(4))
    )
    made, _, test = cross_fitted_result(prepared, NAMES, 4999, 0)
    assert test.exact
    assert made.p_error is None
    assert made.n_flips == 32
    assert "whole-procedure sign flip, all 32 flips, one-sided" in made.sentence


def test_empty_folds_are_in_the_sentence():
    made, outcome, _ = cross_fitted_result(ready(Procedure(Threshold(height=60.0))), NAMES, 19, 0)
    assert made.n_empty == 12
    assert made.empty == outcome.empty == tuple(f"{i:02}" for i in range(12))
    assert (made.estimate, made.t, made.p, made.dz, made.dice) == (0, 0, 1, None, None)
    assert "In 12 of 12 folds the rule found nothing; there the value counts as 0." in made.sentence


def test_an_unknown_interval_is_refused():
    with pytest.raises(
        InputError, match="unknown interval: expected one of flips, jackknife, folds, got 't'"
    ):
        cross_fitted_result(ready(Procedure(Threshold(p=0.01))), NAMES, 19, 0, "t")


def test_a_fixed_region_has_students_t(checks):
    difference = np.subtract(checks["sleep"]["g2"], checks["sleep"]["g1"])
    made = fixed_region_result(difference, ("hollow", "a-priori", "ring"), 31, [1.0] * 9 + [0.5])
    paired = checks["sleep"]["paired"]
    assert [made.estimate, made.t, made.p] == pytest.approx(
        [paired["mean"], paired["t"], paired["p"]], rel=1e-12
    )
    assert (made.interval.kind, made.sided, made.mask_sizes) == ("exact", "two-sided", (31,))
    assert made.coverage == 0.5
    assert "in the a-priori region 'ring'" in made.sentence
    assert "t(9) = 4.06, p = .003, two-sided" in made.sentence


@pytest.mark.parametrize("size", [40, 0])
def test_a_region_chosen_on_the_same_data_has_a_value_and_nothing_else(size):
    made = exploratory_result(
        [1.0, 2.0, 3.0], ("hollow", "exploratory", "left bank"), "r", size, [1, 1, 1]
    )
    assert made.biased is True
    absent = ("interval", "t", "p", "p_error", "dz", "n_flips", "dice", "noise_dice", "n_folds")
    assert {name: getattr(made, name) for name in absent} == dict.fromkeys(absent)
    assert (made.p_kind, made.sided, made.null) == ("", "", "")
    assert "BIASED" in made.sentence
    assert "no interval, no p-value and no error bar can be given" in made.sentence
    assert ("mean 2," in made.sentence) == (size > 0)
    assert "inflated by selection" in made.target
    assert made.as_dict() == dataclasses.asdict(made)
    assert made.estimate == 2 if size else np.isnan(made.estimate)
