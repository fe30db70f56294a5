"""What noise alone does across folds, by formula and by simulation; wrong methods shown wrong.

The simulation: 20 subjects, independent features, no effect anywhere, regions of the features
with one-sided p < .01. Tolerance of a simulated rate: four Monte Carlo standard errors.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats
from sequester.nodes.flips import random_signs
from sequester.nodes.foldnull import (
    dice,
    expected_dice,
    mean_dice,
    plain_t_false_positives,
    variance_inflation,
)
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.groupmaps import bound_on_sum, leave_out_maps

N, V, P, N_STUDIES = 20, 600, 0.01, 1500
U = stats.norm.isf(P)
H = stats.norm.pdf(U) / P  # mean of a standard normal above u


def four_errors(rate: float, n: int = N_STUDIES) -> float:
    return 4 * float(np.sqrt(rate * (1 - rate) / n))


# -- formulas -------------------------------------------------------------------------------


def test_variance_inflation_and_the_false_positives_of_a_plain_t(checks):
    # The table of check-values [formula of the project, independent Python].
    for n, m, p, vif, rate in checks["vif"]:
        assert n % m == 0
        assert variance_inflation(n, n // m, p) == pytest.approx(vif, abs=5.1e-5)
        assert plain_t_false_positives(n, n // m, p) == pytest.approx(rate, abs=5.1e-5)


def test_it_grows_with_the_number_of_subjects_and_a_single_split_is_nearly_right():
    rates = [plain_t_false_positives(n, n, 0.01) for n in (12, 20, 40, 80, 160)]
    assert rates == sorted(rates)
    assert plain_t_false_positives(20, 2, 0.01) < 0.06


@pytest.mark.parametrize(("k", "expected"), [(20, 0.6617), (5, 0.3171), (2, 0.01)])
def test_expected_dice_of_two_folds(k, expected):
    # inference.md [formula of the project, checked there against simulation].
    assert expected_dice(20, k, 0.01) == pytest.approx(expected, abs=5.1e-5)


# -- overlap --------------------------------------------------------------------------------


def test_dice_of_two_sets_by_hand():
    one, other = (np.isin(range(6), [1, 2, 3, 4]), np.isin(range(6), [3, 4, 5]))
    assert dice(one, other) == pytest.approx(4 / 7, rel=1e-15)
    jaccard = (one & other).sum() / (one | other).sum()
    assert jaccard == 2 / 5
    assert dice(one, other) == pytest.approx(2 * jaccard / (1 + jaccard), rel=1e-15)
    assert np.isnan(dice(one & ~one, other & ~other))
    assert dice(one, one & ~one) == 0


@given(st.integers(0, 2**32 - 1), st.integers(1, 40), st.integers(2, 7), st.floats(0, 1))
def test_mean_dice_is_the_mean_over_pairs(seed, n_features, n_masks, density):
    members = np.random.default_rng(seed).uniform(size=(n_features, n_masks)) < density
    pairs = [
        dice(members[:, i], members[:, j]) for i in range(n_masks) for j in range(i + 1, n_masks)
    ]
    known = [d for d in pairs if not np.isnan(d)]
    made = mean_dice(members)
    assert np.isnan(made) if not known else made == pytest.approx(np.mean(known), rel=1e-6)
    for i in range(n_masks - 1):
        one, other = members[:, i], members[:, i + 1]
        union = (one | other).sum()
        if union:
            jaccard = (one & other).sum() / union
            assert dice(one, other) == pytest.approx(2 * jaccard / (1 + jaccard), abs=1e-12)


# -- simulation -----------------------------------------------------------------------------


@dataclass(frozen=True)
class Simulated:
    """Per data set: held-out values, Dice of two folds' masks, and what circular choice gives."""

    loso: np.ndarray  # (n_studies, N)
    two_folds: np.ndarray  # (n_studies, N)
    dice: dict[int, float]  # of masks by z, by number of folds
    circular: np.ndarray  # (n_studies, N), read in the mask of all subjects
    centred: float  # mean over masks of values whose map was centred on all subjects
    joined: np.ndarray  # (n_studies, N), fold masks intersected with the mask of all subjects


def _read(x: np.ndarray, mask_of_row: np.ndarray) -> np.ndarray:
    size = mask_of_row.sum(axis=1)
    return np.where(size > 0, (x * mask_of_row).sum(axis=1) / np.maximum(size, 1), 0)


@pytest.fixture(scope="module")
def simulated() -> Simulated:
    rng = np.random.default_rng(20)
    labels = [f"{i:02}" for i in range(N)]
    folds = {k: (LeaveOneOut() if k == N else KFold(k)).folds(labels) for k in (N, 5, 2)}
    values = {k: np.empty((N_STUDIES, N)) for k in folds}
    circular, joined = np.empty((N_STUDIES, N)), np.empty((N_STUDIES, N))
    both, sizes = dict.fromkeys(folds, 0.0), dict.fromkeys(folds, 0.0)
    centred, n_centred = 0.0, 0
    for study in range(N_STUDIES):
        x = rng.standard_normal((N, V))
        # By z, so that the closed forms hold: the sd of the features is known to be 1.
        everyone = x.sum(axis=0) / np.sqrt(N) > U
        circular[study] = x[:, everyone].mean(axis=1) if everyone.any() else np.nan
        others = (x.sum(axis=0) - x) / np.sqrt(N - 1) > U
        centred += (x - x.mean(axis=0))[others].sum()
        n_centred += int(others.sum())
        for k, of_scheme in folds.items():
            maps = leave_out_maps(x, of_scheme)
            df = len(of_scheme[0].selection) - 1
            masks = maps > stats.t.isf(P, df)
            rows = np.empty((N, V), bool)
            for fold, mask in zip(of_scheme, masks, strict=True):
                rows[list(fold.held_out)] = mask
            values[k][study] = _read(x, rows)
            z = leave_out_maps(x, of_scheme, kind="mean")[:2] * np.sqrt(df + 1) > U
            both[k] += z.all(axis=0).sum()
            sizes[k] += z.sum() / 2
            if k == N:
                joined[study] = _read(x, rows & everyone)
    return Simulated(
        loso=values[N],
        two_folds=values[2],
        dice={k: both[k] / sizes[k] for k in folds},
        circular=circular[~np.isnan(circular[:, 0])],
        centred=centred / n_centred,
        joined=joined,
    )


def plain_t_rate(values: np.ndarray) -> float:
    with np.errstate(invalid="ignore"):
        p = stats.ttest_1samp(values, 0, axis=1).pvalue
    return float((p < 0.05).mean())


def test_circular_choice_inflates_and_always_rejects(simulated):
    assert len(simulated.circular) > 0.99 * N_STUDIES
    means = simulated.circular.mean(axis=1)
    error = means.std() / np.sqrt(len(means))
    assert H / np.sqrt(N) == pytest.approx(0.596, abs=5e-4)
    assert abs(means.mean() - H / np.sqrt(N)) < 4 * error
    assert plain_t_rate(simulated.circular) > 0.99


def test_held_out_values_are_unbiased(simulated):
    for values in (simulated.loso, simulated.two_folds):
        means = values.mean(axis=1)
        assert abs(means.mean()) < 4 * means.std() / np.sqrt(N_STUDIES)


def test_a_plain_t_on_leave_one_out_values_rejects_as_often_as_the_formula_says(simulated):
    expected = plain_t_false_positives(N, N, P)
    assert abs(plain_t_rate(simulated.loso) - expected) < four_errors(expected)
    assert plain_t_rate(simulated.loso) > 0.05 + four_errors(0.05)
    # The formula's own ground: the values' mean varies more than they tell.
    told = simulated.loso.var(axis=1, ddof=1).mean() / N
    true = simulated.loso.mean(axis=1).var()
    assert true / told > 3
    # With one split the same test is nearly right.
    expected = plain_t_false_positives(N, 2, P)
    assert abs(plain_t_rate(simulated.two_folds) - expected) < four_errors(expected)


def test_flipping_the_values_while_the_masks_stay_rejects_far_too_often(simulated):
    # inference.md: .38, simulated there.
    signs = random_signs(4, [f"{i:02}" for i in range(N)], 0, 199).astype(float)

    def t(y: np.ndarray) -> np.ndarray:
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.abs(y.mean(axis=-1) / y.std(axis=-1, ddof=1))

    rejected = 0
    for y in simulated.loso:
        b = int((t(signs * y) >= t(y) - 1e-12).sum())
        rejected += (1 + b) / 200 <= 0.05
    assert abs(rejected / N_STUDIES - 0.38) < four_errors(0.38)


def test_centring_on_a_mean_that_includes_the_held_out_subject_turns_the_sign(simulated):
    expected = -(N - 1) / N * H / np.sqrt(N - 1)
    assert expected == pytest.approx(-0.581, abs=5e-4)
    # Some 1,500 x 20 x 6 values, whose standard error is below 1 / sqrt(N_STUDIES * 6).
    assert abs(simulated.centred - expected) < 4 / np.sqrt(N_STUDIES * 6)


def test_joining_each_folds_mask_with_that_of_all_subjects_is_circular_again(simulated):
    means = simulated.joined.mean(axis=1)
    assert means.mean() > 0.2
    assert plain_t_rate(simulated.joined) > 0.5


def test_dice_under_the_null_is_what_the_formula_says(simulated):
    for k, found in simulated.dice.items():
        expected = expected_dice(N, k, P)
        # In each fold about V * P * N_STUDIES features were chosen.
        assert abs(found - expected) < four_errors(expected, int(V * P * N_STUDIES))


def test_the_bound_used_in_flips_passes_the_nominal_share_of_features():
    x = np.random.default_rng(5).standard_normal((N, 400_000))
    over = x.sum(axis=0) > bound_on_sum(stats.t.isf(P, N - 1), N, np.square(x).sum(axis=0))
    assert abs(over.mean() - P) < four_errors(P, 400_000)
