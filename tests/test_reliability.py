"""Reliabilities against published worked examples, identities and simulation."""

import numpy as np
import pytest
from scipy import stats
from sequester.nodes.errors import InputError
from sequester.nodes.reliability import (
    KINDS,
    ceiling,
    ceiling_sentence,
    icc,
    spearman_brown,
    split_half,
)

# Shrout & Fleiss (1979), Psychol Bull 86:420-428, table 2: six targets rated by four judges.
RATINGS = np.array(
    [[9, 2, 5, 8], [6, 1, 3, 2], [8, 4, 6, 8], [7, 1, 2, 6], [10, 5, 6, 9], [6, 2, 4, 7]], float
)


@pytest.mark.parametrize(
    ("kind", "single", "mean_of_four", "low", "high"),
    [  # their table 4; the limits are those of their formulas, to two digits
        ("1,1", 0.17, 0.44, -0.13, 0.72),
        ("2,1", 0.29, 0.62, 0.02, 0.76),
        ("3,1", 0.71, 0.91, 0.34, 0.95),
    ],
)
def test_shrout_and_fleiss_worked_example(kind, single, mean_of_four, low, high):
    made = icc(RATINGS, kind)
    assert round(made.value, 2) == single
    assert (round(made.interval.low, 2), round(made.interval.high, 2)) == (low, high)
    # Their coefficients of a mean of k are what Spearman and Brown's formula makes of one.
    assert round(spearman_brown(made.value, 4), 2) == mean_of_four
    assert (made.n_people, made.n_measurements, made.n_left_out) == (6, 4, 0)


def test_icc_from_the_mean_squares_of_the_paper():
    """BMS 11.24, JMS 32.49, EMS 1.02, WMS 6.26 (their table 3), by hand."""
    assert icc(RATINGS, "1,1").value == pytest.approx((11.24 - 6.26) / (11.24 + 3 * 6.26), abs=1e-3)
    assert icc(RATINGS, "3,1").value == pytest.approx((11.24 - 1.02) / (11.24 + 3 * 1.02), abs=1e-3)
    agreement = (11.24 - 1.02) / (11.24 + 3 * 1.02 + 4 * (32.49 - 1.02) / 6)
    assert icc(RATINGS, "2,1").value == pytest.approx(agreement, abs=1e-3)


def test_two_measurements_of_equal_spread_have_their_correlation_as_consistency():
    rng = np.random.default_rng(1)
    x = rng.normal(size=(15, 1)) + rng.normal(size=(15, 2))
    z = stats.zscore(x, axis=0)
    assert icc(z, "3,1").value == pytest.approx(stats.pearsonr(*x.T).statistic)
    # A shift between measurements is no inconsistency, but it is a disagreement.
    shifted = x + np.array([0.0, 5.0])
    assert icc(shifted, "3,1").value == pytest.approx(icc(x, "3,1").value)
    assert icc(shifted, "2,1").value < icc(x, "2,1").value / 3


@pytest.mark.parametrize("kind", KINDS)
def test_icc_finds_the_simulated_reliability_and_its_interval_covers_it(kind):
    rng = np.random.default_rng(2)
    n, k, sets, people, shift = 20, 3, 1500, 2.0, 0.5
    if kind == "3,1":
        shift = 0.0
    truth = people / (people + 1 + shift)
    covered, values = 0, []
    for _ in range(sets):
        at_each = rng.normal(size=(n, k) if kind == "1,1" else (1, k)) * np.sqrt(shift)
        x = rng.normal(size=(n, 1)) * np.sqrt(people) + at_each + rng.normal(size=(n, k))
        made = icc(x, kind)
        values.append(made.value)
        covered += made.interval.low < truth < made.interval.high
    error = np.sqrt(0.95 * 0.05 / sets)
    assert abs(covered / sets - 0.95) < 4 * error + (0.015 if kind == "2,1" else 0)
    assert np.median(values) == pytest.approx(truth, abs=0.03)


def test_split_half_is_the_stepped_up_correlation():
    rng = np.random.default_rng(3)
    x = rng.normal(size=(25, 1)) + rng.normal(size=(25, 2))
    r = stats.pearsonr(*x.T)
    made = split_half(x)
    assert made.value == pytest.approx(2 * r.statistic / (1 + r.statistic))
    fisher = r.confidence_interval(0.95)
    expected = [2 * limit / (1 + limit) for limit in fisher]
    assert [made.interval.low, made.interval.high] == pytest.approx(expected)
    assert split_half(x, k=4).value == pytest.approx(spearman_brown(made.value, 2))
    assert "Spearman-Brown with k = 2" in made.sentence


def test_spearman_brown_check_values():
    """Spearman 1910, Brown 1910: the formula at (.6, 2) and (.7, 1/2)."""
    assert spearman_brown(0.6, 2) == pytest.approx(0.75, rel=1e-6)
    assert spearman_brown(0.7, 0.5) == pytest.approx(0.5384615, rel=1e-6)
    assert spearman_brown(1.0, 7) == 1
    # Below -1 / (k - 1) the formula turns round: no reliability, not a large one.
    assert spearman_brown(-0.9, 4) == -np.inf
    assert spearman_brown(spearman_brown(0.3, 5), 1 / 5) == pytest.approx(0.3)


def test_the_ceiling_is_that_of_spearman():
    """Spearman 1904; sqrt(.8 x .7), which Vul et al. 2009 print as .74."""
    assert ceiling(0.8, 0.7) == pytest.approx(0.7483315, rel=1e-6)
    rng = np.random.default_rng(4)
    true = rng.normal(size=200_000)
    # Two measures of one thing, of reliability .8 and .7.
    x, y = (true + rng.normal(size=len(true)) * np.sqrt(1 / rel - 1) for rel in (0.8, 0.7))
    assert np.corrcoef(x, y)[0, 1] == pytest.approx(ceiling(0.8, 0.7), abs=0.005)


def test_what_is_said_beside_a_correlation():
    assert "larger than the measures can carry" in ceiling_sentence(-0.8, ceiling(0.8, 0.7))
    assert "larger" not in ceiling_sentence(0.74, ceiling(0.8, 0.7))
    for negative in (ceiling(-0.2, 0.9), ceiling(-0.2, -0.9), ceiling(0.9, -np.inf)):
        assert negative == 0
        assert "a reliability is not above 0" in ceiling_sentence(0.2, negative)


@pytest.mark.parametrize("kind", KINDS)
def test_icc_where_something_does_not_vary(kind):
    nothing = icc(np.full((4, 3), 0.1), kind)
    assert nothing.value == 0
    assert "do not tell people apart" in nothing.sentence
    agreed = icc([[0.1, 0.1], [0.3, 0.3], [0.7, 0.7]], kind)
    assert agreed.value == pytest.approx(1)
    crossed = icc([[1.0, 2.0], [2.0, 1.0]], kind)
    assert crossed.value <= 0
    assert np.isfinite([crossed.interval.low, crossed.interval.high]).all()


def test_split_half_of_few_or_equal_values():
    assert split_half([[1.0, 2.0], [1.0, 3.0], [1.0, 4.0]]).value == 0
    # Three times 0.7 has a mean that is not 0.7.
    assert split_half([[0.7, 2.0], [0.7, 3.0], [0.7, 5.0]]).value == 0
    assert split_half([[1.0, 2.0], [2.0, 3.0]]).value == pytest.approx(1)
    opposite = split_half([[1.0, 3.0], [2.0, 2.0], [3.0, 1.0], [4.0, 0.0]])
    assert opposite.value == -np.inf
    assert ceiling(opposite.value, 0.5) == 0


def test_people_without_a_measurement_are_left_out_and_counted():
    lost = np.vstack([RATINGS, [3, np.nan, 2, 1]])
    made = icc(lost)
    assert (made.value, made.n_people, made.n_left_out) == (icc(RATINGS).value, 6, 1)
    assert "1 without all measurements left out" in made.sentence
    shuffled = icc(lost[::-1][:, ::-1])
    assert shuffled.value == pytest.approx(made.value, rel=1e-12)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: icc([1.0, 2.0]), "reliability needs repeated measurements"),
        (lambda: icc([[1.0, 2.0], [np.nan, 1.0]]), "too few people"),
        (lambda: icc([[1.0, np.inf], [2.0, 1.0]]), "infinite values"),
        (lambda: icc(RATINGS, "4,1"), "unknown kind"),
        (lambda: icc(RATINGS, level=1.0), "not a coverage"),
        (lambda: split_half(RATINGS), "two halves"),
        (lambda: ceiling(1.1, 0.5), "not a reliability"),
        (lambda: ceiling(0.5, np.nan), "not a reliability"),
        (lambda: spearman_brown(0.5, 0), "not a length"),
        (lambda: spearman_brown(np.nan, 2), "not a reliability"),
    ],
)
def test_what_is_refused(call, message):
    with pytest.raises(InputError, match=message):
        call()
