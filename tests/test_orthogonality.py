"""Orthogonal contrasts: the conditions against worked numbers and against simulation."""

import numpy as np
import pytest
from scipy.linalg import toeplitz
from sequester.nodes.errors import InputError
from sequester.nodes.orthogonality import (
    Certificate,
    Condition,
    autoregressive,
    correlation,
    error_covariance,
    mean_and_weights,
    within_and_between,
)

SUM, DIFFERENCE = np.array([1.0, 1.0]), np.array([1.0, -1.0])


def design(order: str) -> np.ndarray:
    return np.array([[letter == "A", letter == "B"] for letter in order], float)


@pytest.mark.parametrize(
    ("order", "covariance", "r"), [("A" * 6 + "B" * 6, 0, 0), ("A" * 6 + "B" * 3, -1 / 6, -1 / 3)]
)
def test_unequal_counts_correlate_sum_and_difference(order, covariance, r):
    """Kriegeskorte et al. 2009, Nat Neurosci 12:535-540; numbers recomputed independently."""
    cov = error_covariance(design(order))
    assert SUM @ cov @ DIFFERENCE == pytest.approx(covariance, abs=1e-12)
    assert correlation(cov, SUM, DIFFERENCE) == pytest.approx(r, abs=1e-12)


def test_coloured_noise_is_what_the_white_check_misses():
    """Design AABBBA: white 0; AR(.5) GLS -6/47, OLS sandwich -.1458333 (recomputed by hand)."""
    X, V = design("AABBBA"), autoregressive(6, 0.5)
    assert SUM @ error_covariance(X) @ DIFFERENCE == pytest.approx(0, abs=1e-12)
    assert SUM @ error_covariance(X, V) @ DIFFERENCE == pytest.approx(-6 / 47, abs=1e-7)
    sandwich = error_covariance(X, V, ordinary=True)
    assert SUM @ sandwich @ DIFFERENCE == pytest.approx(-0.1458333, abs=1e-7)
    assert not within_and_between([X], SUM, DIFFERENCE, np.eye(2), 0.5)[0].holds
    assert within_and_between([X], SUM, DIFFERENCE, np.eye(2))[0].holds


def test_contrasts_against_a_shared_baseline_correlate_one_half():
    """Two rows each of A, B and baseline: A - base against B - base (recomputed by hand)."""
    X = np.repeat(np.eye(3), 2, axis=0)
    assert correlation(error_covariance(X), [1, 0, -1], [0, 1, -1]) == pytest.approx(0.5)


def test_noise_covariance_is_that_of_scipy():
    assert np.allclose(autoregressive(7, 0.3), toeplitz(0.3 ** np.arange(7)))


def test_covariances_are_what_least_squares_does():
    """Simulated estimates: GLS and OLS under AR noise, 4 Monte Carlo errors."""
    rng, n = np.random.default_rng(2), 40_000
    X, V = design("AABBBA"), autoregressive(6, 0.5)
    noise = rng.standard_normal((n, 6)) @ np.linalg.cholesky(V).T
    white = np.linalg.inv(np.linalg.cholesky(V))
    for ordinary, fit in ((True, np.linalg.pinv(X)), (False, np.linalg.pinv(white @ X) @ white)):
        estimates = noise @ fit.T
        products = (estimates @ SUM) * (estimates @ DIFFERENCE)
        expected = SUM @ error_covariance(X, V, ordinary=ordinary) @ DIFFERENCE
        assert abs(products.mean() - expected) < 4 * products.std() / np.sqrt(n)


def test_between_subjects_is_a_condition_of_its_own():
    """Equal counts, so the run is fine; conditions that vary differently between people."""
    X = design("A" * 6 + "B" * 6)
    run, subject = within_and_between([X], SUM, DIFFERENCE, np.diag([1.0, 4.0]))
    assert run.holds
    assert subject.correlation == pytest.approx(-0.6)
    assert all(one.holds for one in within_and_between([X], SUM, DIFFERENCE, np.eye(2)))


def test_bias_that_the_condition_predicts_is_there():
    """Chosen by a + b, tested by a - b, group level: biased with unequal variances only."""
    rng, n_sets, n, v = np.random.default_rng(3), 400, 16, 300
    for spread, biased in (((1.0, 1.0), False), ((1.0, 2.0), True)):
        found = []
        for _ in range(n_sets):
            a, b = (sd * rng.standard_normal((n, v)) for sd in spread)
            total = a + b
            t = total.mean(axis=0) / total.std(axis=0, ddof=1)
            found.append((a - b).mean(axis=0)[np.argsort(-t)[:6]].mean())
        z = np.mean(found) / (np.std(found, ddof=1) / np.sqrt(n_sets))
        assert (z < -10) if biased else (abs(z) < 4)


def test_pooled_mean_and_group_difference():
    """Var 1 and 4, half and half: cov = (1 - 4) / N over sqrt(2.5 / N * 10 / N) = -.6."""
    weights = np.repeat([1 / 5, -1 / 5], 5)
    assert mean_and_weights(weights, np.ones(10)).holds
    assert mean_and_weights(weights, np.repeat([1, 4], 5)).correlation == pytest.approx(-0.6)
    slope = np.arange(10) - 4.5
    assert mean_and_weights(slope, np.ones(10)).holds
    assert not mean_and_weights(slope, np.arange(1, 11)).holds
    with pytest.raises(InputError, match="do not add up to zero"):
        mean_and_weights(np.ones(4), np.ones(4))


def test_a_design_of_lower_rank_is_refused():
    with pytest.raises(InputError, match=r"follow from each other.*rank 2"):
        error_covariance(np.column_stack([design("AABB"), np.ones(4)]))
    with pytest.raises(InputError, match="rho out of range"):
        autoregressive(4, 1.0)


def test_a_certificate_without_conditions_does_not_hold():
    assert not Certificate("a", "b", (), ()).holds
    assert Certificate("a", "b", (Condition("run", 0), Condition("subject", 1e-9)), ()).holds
    assert not Certificate("a", "b", (Condition("run", 1e-9),), ()).holds  # nothing of the people
    assert not Certificate("a", "b", (Condition("run", 1e-3), Condition("subject", 0)), ()).holds


def test_a_contrast_without_weight_or_variance_shows_nothing():
    """An empty certificate: 0 for lack of anything is not the 0 of two orthogonal contrasts."""
    X, zeros = design("AABB"), np.zeros((2, 2))
    for a, b, between, told in (
        ((0, 0), DIFFERENCE, np.eye(2), "without weights"),
        (SUM, (0, 0), np.eye(2), "without weights"),
        (SUM, DIFFERENCE, zeros, "without variance"),
        (SUM, DIFFERENCE, np.ones((2, 2)), "without variance"),  # nobody differs in A - B
    ):
        with pytest.raises(InputError, match=told):
            within_and_between([X], a, b, between)
    with pytest.raises(InputError, match="no design"):
        within_and_between([], SUM, DIFFERENCE, np.eye(2))
    with pytest.raises(InputError, match="variances out of range"):
        mean_and_weights([1, -1], [1, -2])


@pytest.mark.parametrize("unit", [1e-200, 1e-12, 1, 1e12, 1e200])
def test_a_correlation_has_no_unit(unit):
    between = np.diag([1.0, 4.0])
    assert correlation(between * unit, SUM, DIFFERENCE) == pytest.approx(-0.6)
    assert correlation(between, SUM * unit, DIFFERENCE / unit) == pytest.approx(-0.6)
    own = np.diag([1.0, unit])  # a regressor in another unit than the other
    assert correlation(own, [1, 1 / np.sqrt(unit)], [0, 1]) == pytest.approx(np.sqrt(0.5))
