"""Inputs with little or nothing in them have an answer that is stated, or are refused in words."""

import numpy as np
import pytest
from scipy import stats
from sequester.nodes.comparisons import difference, interaction, repeated_measures
from sequester.nodes.errors import InputError
from sequester.nodes.exchange import max_statistic
from sequester.nodes.fixed import fixed_region_result
from sequester.nodes.folds import KFold
from sequester.nodes.heldout import cross_fitted_result
from sequester.nodes.masks import Cluster, PeakSphere, Strongest, Threshold
from sequester.nodes.models import Groups, Score
from sequester.nodes.parcels import family_t
from sequester.nodes.procedure import Procedure
from sequester.nodes.roi import holm
from sequester.nodes.space import Grid

GRID = Grid((12, 1, 1), np.eye(4))
NAMES = ("Arbor", "a plan", "the brook")


def noise(n, seed=0):
    return np.random.default_rng(seed).normal(size=(n, GRID.n_features))


def people(n):
    return [f"{i:02}" for i in range(n)]


def result(x, rule=None, n_flips=99, **plan):
    ready = Procedure(rule or Strongest(2), **plan).prepare(x, people(len(x)), GRID)
    return cross_fitted_result(ready, NAMES, n_flips, 0)[0]


def scored(numbers):
    return Score(tuple(zip(people(len(numbers)), map(float, numbers), strict=True)))


# -- two and three subjects -----------------------------------------------------------------


def test_leaving_one_out_of_two_is_refused():
    with pytest.raises(InputError, match=r"too few subjects .*: expected at least 3, got 2"):
        result(noise(2))


def test_two_halves_of_one_subject_each_have_no_t_but_a_mean():
    with pytest.raises(InputError, match=r"there is no t of one map \(without 1of2, 2of2\)"):
        result(noise(2), scheme=KFold(2))
    mean = result(noise(2), Strongest(2, "mean"), scheme=KFold(2))
    assert mean.n_flips == 4
    assert mean.p in (1 / 4, 2 / 4, 3 / 4, 1)
    assert mean.interval.high - mean.interval.low > 10 * abs(mean.estimate)
    assert mean.g is None, "the factor for small samples is 0 with one degree of freedom"


@pytest.mark.parametrize("rule", [Threshold(p=0.2), Strongest(2), PeakSphere(1.5), Cluster(p=0.2)])
def test_three_subjects_have_eight_flips(rule):
    made = result(noise(3), rule)
    assert made.n_flips == 8
    assert made.p >= 1 / 8
    assert made.p_error is None, "exact"


def test_a_model_of_three_subjects_is_refused():
    for model in (scored([1, 2, 3]), Groups(tuple(zip(people(3), "aba", strict=True)), "a", "b")):
        with pytest.raises(InputError, match=r"too few subjects for a t of two parameters"):
            result(noise(3), model=model)


def test_a_fixed_region_of_two_subjects_has_a_t_and_no_corrected_size():
    made = fixed_region_result([1.0, 2.0], NAMES, [8], [1, 1])
    assert made.p == pytest.approx(stats.ttest_1samp([1.0, 2.0], 0).pvalue)
    assert made.g is None
    with pytest.raises(InputError, match="at least two"):
        fixed_region_result([1.0], NAMES, [8], [1])


# -- constant features and values -----------------------------------------------------------


def test_a_feature_that_is_the_same_in_all_leads_and_one_of_zeros_never_does():
    x = noise(6)
    x[:, 3], x[:, 4] = 0.01, 0
    ready = Procedure(Strongest(1)).prepare(x, people(6), GRID)
    assert [np.flatnonzero(mask).tolist() for mask in ready.masks()] == [[3]] * 6, "t is infinite"
    assert not any(mask[4] for mask in Procedure(Strongest(12)).prepare(x, people(6), GRID).masks())


def test_values_that_are_all_equal_have_no_spread_to_speak_of():
    made = result(np.ones((6, 12)))
    assert (made.t, made.p, made.estimate) == (np.inf, 1 / 64, 1)
    assert (made.dz, made.g) == (None, None)
    # Under flips that find a region t is infinite in more than one of twenty: no bound is known.
    open_ended = result(np.ones((6, 12)), Threshold(p=0.05))
    assert (open_ended.interval.low, open_ended.interval.high) == (-np.inf, np.inf)
    for value in (1.0, 0.0):
        fixed = fixed_region_result([value] * 3, NAMES, [8], [1] * 3)
        assert fixed.estimate == value
        assert (fixed.t, fixed.p, fixed.interval, fixed.dz, fixed.g) == (None,) * 5
        assert "no test: all values are equal (n = 3)" in fixed.sentence


# -- nothing found --------------------------------------------------------------------------


@pytest.mark.parametrize("interval", ["flips", "jackknife", "folds"])
def test_when_no_fold_finds_a_region_there_is_no_interval(interval):
    ready = Procedure(Threshold(height=50.0), scheme=KFold(3)).prepare(noise(6), people(6), GRID)
    made = cross_fitted_result(ready, NAMES, 99, 0, interval)[0]
    assert (made.n_empty, made.t, made.p) == (3, 0, 1)
    assert (made.interval, made.dz, made.g, made.dice, made.coverage) == (None,) * 5
    assert "0 (no fold found a region: no interval), p = 1.000" in made.sentence
    assert "In 3 of 3 folds the rule found nothing; there the value counts as 0, so" in (
        made.sentence
    )


# -- ties -----------------------------------------------------------------------------------


def test_of_equal_features_the_first_are_chosen_and_equal_flips_count_as_reached():
    x = np.tile(noise(6)[:, :1], (1, 12))
    ready = Procedure(Strongest(2)).prepare(x, people(6), GRID)
    assert [np.flatnonzero(mask).tolist() for mask in ready.masks()] == [[0, 1]] * 6
    assert ready.peaks(ready.masks())[0][0] == 0
    signs = np.sign(noise(6, 3))
    made = result(signs, Strongest(12))
    # With all features in the mask, whatever is chosen: the flips of six means, enumerated.
    means = signs.mean(axis=1)
    patterns = np.array(np.meshgrid(*[[1, -1]] * 6)).reshape(6, -1).T * means
    t = stats.ttest_1samp(patterns, 0, axis=1).statistic
    assert made.p == np.mean(t >= t[0] - 1e-9)


# -- contrasts that go together -------------------------------------------------------------


def test_a_region_differs_from_itself_by_nothing():
    ready = Procedure(Strongest(2)).prepare(noise(8), people(8), GRID)
    exchanges, exact = ready.exchanges(999, 0)
    own = ready.per_person(ready.outcome().values)
    twice = np.stack([own, own], axis=-1)
    under = np.repeat(ready.values_under(exchanges)[..., None], 2, axis=-1)
    made = difference(twice, ["Arbor", "same"], under, exact=exact)
    assert (made.estimate, made.p, made.d) == (0, 1, None)
    assert repeated_measures(twice, ["Arbor", "same"], under, exact=exact).p == 1
    # The largest of two statistics that are one is that one.
    test = ready.flip_test(999, 0)
    assert max_statistic([test, test]) == [test.p, test.p]


# -- scores and missing values --------------------------------------------------------------


def test_a_score_that_does_not_vary_is_refused_on_any_side_that_chooses():
    with pytest.raises(InputError, match=r"a score without variance .*got 1 for everybody"):
        result(noise(6), model=scored([1] * 6))
    with pytest.raises(InputError, match=r"selection side on which the score does not vary .*05"):
        result(noise(6), model=scored([1, 1, 1, 1, 1, 2]))


def test_values_that_do_not_vary_correlate_with_no_score():
    made = result(np.ones((6, 12)), model=scored(range(6)))
    assert (made.estimate, made.p) == (0, 1)


def test_each_comparison_leaves_out_who_lacks_one_of_its_conditions():
    x = noise(9)[:, :4]
    x[0, 0], x[1, 3] = np.nan, np.nan
    made = interaction(x, (("Arbor", "Brook"), ("amber", "teal")))
    assert (made.interaction.n, made.interaction.n_left_out) == (7, 2)
    assert (difference(x[:, 1:3], ["b", "c"]).n, difference(x[:, :2], ["a", "b"]).n) == (9, 8)
    x[2:, 0] = np.nan
    with pytest.raises(InputError, match=r"too few people to compare.*got 1"):
        difference(x[:, :2], ["a", "b"])


# -- more regions than subjects -------------------------------------------------------------


def test_more_regions_than_subjects():
    values = np.random.default_rng(4).normal(size=(5, 40))
    family = family_t(values)
    p = stats.ttest_1samp(values, 0).pvalue
    assert [one.p_holm for one in family] == pytest.approx(holm(p.tolist()))
    conditions = repeated_measures(values, [f"r{i}" for i in range(40)])
    # Epsilon cannot be more than the rank of what is left of five people allows.
    assert 1 / 39 <= conditions.epsilon <= 4 / 39 + 1e-9
    tests = []
    for i in range(40):
        ready = Procedure(Strongest(2)).prepare(noise(5, i), people(5), GRID)
        tests.append(ready.flip_test(999, 0))
    adjusted = max_statistic(tests)
    assert min(adjusted) >= 1 / 32, "no p below that of all patterns of five subjects"
    assert all(p >= test.p for p, test in zip(adjusted, tests, strict=True))
