"""Group maps against scipy.stats.ttest_1samp, fold by fold, in float64."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from sequester.nodes import groupmaps
from sequester.nodes.errors import InputError
from sequester.nodes.folds import Fold, KFold, LeaveOneOut
from sequester.nodes.groupmaps import (
    Missing,
    bound_on_sum,
    group_map,
    leave_out_maps,
    t_from_sums,
    without_each,
)

N, V = 14, 157
LABELS = [f"{i:02}" for i in range(N)]
PAIRED = sorted(LABELS[: N // 2] * 2)
SCHEMES = {
    "leave-one-out": LeaveOneOut().folds(LABELS),
    "two rows a label": LeaveOneOut().folds(PAIRED),
    "5 folds": KFold(5, seed=2).folds(LABELS),
    "2 folds": KFold(2, seed=2).folds(LABELS),
}
RTOL = {np.float32: 1e-5, np.float64: 1e-11}


def stack(dtype: type, seed: int = 0, n: int = N, v: int = V) -> np.ndarray:
    """Effects whose mean and spread differ from feature to feature."""
    rng = np.random.default_rng(seed)
    mean, sd = rng.normal(0, 1, v), np.exp(rng.normal(0, 1, v))
    return (mean + sd * rng.standard_normal((n, v))).astype(dtype)


def holed(dtype: type, seed: int = 1) -> np.ndarray:
    """A stack with zeros, NaN and infinities; some features are left with no row at all."""
    rng = np.random.default_rng(seed)
    effects = stack(dtype, seed)
    share = rng.uniform(0, 0.35, V)
    for value in (0.0, np.nan, np.inf, -np.inf):
        effects[rng.uniform(size=effects.shape) < share / 4] = value
    effects[:, ::20] = np.nan
    return effects


def scipy_map(rows: np.ndarray, missing: Missing, kind: str = "t") -> np.ndarray:
    """One selection side's map by SciPy, in float64."""
    x = rows.astype(np.float64)
    gone = ~np.isfinite(x)
    if missing.zeros:
        gone |= x == 0
    x[gone] = np.nan
    n = (~gone).sum(axis=0)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")  # features with no row
        if kind == "mean":
            made = np.nanmean(x, axis=0)
        else:
            made = np.asarray(stats.ttest_1samp(x, 0, axis=0, nan_policy="omit").statistic)
    made[n < max(2, np.ceil(missing.min_fraction * len(x) - 1e-9))] = np.nan
    return made


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@pytest.mark.parametrize("scheme", SCHEMES)
@pytest.mark.parametrize("kind", ["t", "mean"])
def test_all_folds_in_one_pass_equal_scipy_fold_by_fold(dtype, scheme, kind):
    effects, folds = stack(dtype), SCHEMES[scheme]
    maps = leave_out_maps(effects, folds, kind=kind)
    assert maps.dtype == dtype
    for fold, made in zip(folds, maps, strict=True):
        expected = scipy_map(effects[list(fold.selection)], Missing(), kind)
        np.testing.assert_allclose(made, expected, rtol=RTOL[dtype], atol=1e-6 * RTOL[dtype])


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@pytest.mark.parametrize("kind", ["t", "mean"])
def test_the_map_of_all_rows_equals_scipy(dtype, kind):
    effects = stack(dtype)
    made = group_map(effects, kind=kind)
    assert made.dtype == dtype
    np.testing.assert_allclose(made, scipy_map(effects, Missing(), kind), rtol=RTOL[dtype])


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@pytest.mark.parametrize("scheme", SCHEMES)
@pytest.mark.parametrize("missing", [Missing(), Missing(zeros=False), Missing(min_fraction=0.5)])
def test_missing_data_is_omitted_as_scipy_omits_nan(dtype, scheme, missing):
    effects, folds = holed(dtype), SCHEMES[scheme]
    maps = leave_out_maps(effects, folds, missing)
    assert 0 < np.isnan(maps).sum() < maps.size / 2
    for fold, made in zip(folds, maps, strict=True):
        rows = effects[list(fold.selection)]
        expected = scipy_map(rows, missing)
        np.testing.assert_allclose(made, expected, rtol=RTOL[dtype], atol=1e-6 * RTOL[dtype])
        np.testing.assert_allclose(
            group_map(rows, missing), expected, rtol=RTOL[dtype], atol=1e-6 * RTOL[dtype]
        )


@pytest.mark.parametrize(
    ("min_fraction", "n_rows", "least"),
    [(0.8, 20, 16), (0.8, 19, 16), (0.55, 100, 55), (1.0, 25, 25), (0.01, 25, 2), (0.5, 2, 2)],
)
def test_how_many_rows_must_have_data(min_fraction, n_rows, least):
    missing = Missing(min_fraction=min_fraction)
    assert missing.least(n_rows) == least
    rng = np.random.default_rng(3)
    effects = rng.standard_normal((n_rows, 2))
    effects[: n_rows - least, 0] = np.nan
    effects[: n_rows - least + 1, 1] = np.nan
    assert np.isnan(group_map(effects, missing)).tolist() == [False, True]


@pytest.mark.parametrize("block", [1, 7, V, 10_000])
@pytest.mark.parametrize("make", [stack, holed])
def test_the_size_of_a_block_changes_no_bit(monkeypatch, block, make):
    effects, folds = make(np.float32), SCHEMES["5 folds"]
    maps, whole = leave_out_maps(effects, folds), group_map(effects)
    monkeypatch.setattr(groupmaps, "_BLOCK", block)
    assert leave_out_maps(effects, folds).tobytes() == maps.tobytes()
    assert group_map(effects).tobytes() == whole.tobytes()


@given(
    scheme=st.sampled_from(sorted(SCHEMES)),
    fold=st.integers(0, 1),
    dtype=st.sampled_from([np.float32, np.float64]),
    kind=st.sampled_from(["t", "mean"]),
    holes=st.booleans(),
    put=st.sampled_from([np.nan, np.inf, -np.inf, 0.0, 1e30, -1e30, 3.4e38, "another map"]),
    seed=st.integers(0, 2**32 - 1),
)
@settings(max_examples=150)
def test_a_folds_map_has_the_same_bits_whatever_its_held_out_rows_hold(
    scheme, fold, dtype, kind, holes, put, seed
):
    folds = SCHEMES[scheme]
    effects = holed(dtype) if holes else stack(dtype)
    before = leave_out_maps(effects, folds, kind=kind)[fold].tobytes()
    held = list(folds[fold].held_out)
    where = np.random.default_rng(seed).uniform(size=V) < 0.7
    other = stack(dtype, seed)[held]
    effects[held] = np.where(where, other if put == "another map" else put, effects[held])
    after = leave_out_maps(effects, folds, kind=kind)
    assert after[fold].tobytes() == before


@pytest.mark.parametrize("extreme", [1e200, -1e300])
def test_a_square_too_large_for_float64_stays_in_its_own_row(extreme):
    effects = stack(np.float64)
    before = leave_out_maps(effects, SCHEMES["leave-one-out"])
    effects[3] = extreme
    with np.errstate(over="ignore"):
        after = leave_out_maps(effects, SCHEMES["leave-one-out"])
    assert (after[3] == before[3]).all()


def test_equal_values_give_an_infinite_t_and_zeros_give_none():
    effects = np.tile(np.array([0.1, -1e-3, 7.3e5, 0.0]), (9, 1))
    missing = Missing(zeros=False)
    assert group_map(effects, missing).tolist() == [np.inf, -np.inf, np.inf, 0.0]
    maps = leave_out_maps(effects, LeaveOneOut().folds(LABELS[:9]), missing)
    assert (maps == [np.inf, -np.inf, np.inf, 0.0]).all()
    # By default an exact zero is no data.
    assert np.isnan(group_map(effects)[3])


@pytest.mark.parametrize("ratio", [1e2, 1e3, 1e4, 1e5])
def test_a_mean_far_above_the_spread_loses_no_accuracy_that_matters(ratio):
    effects = ratio + np.random.default_rng(4).standard_normal((N, V))
    expected = scipy_map(effects, Missing())
    # Sums cancel by about ratio^2 in their sixteen digits.
    np.testing.assert_allclose(group_map(effects), expected, rtol=1e-14 * ratio**2)
    folds = SCHEMES["leave-one-out"]
    for fold, made in zip(folds, leave_out_maps(effects, folds), strict=True):
        expected = scipy_map(effects[list(fold.selection)], Missing())
        np.testing.assert_allclose(made, expected, rtol=1e-14 * ratio**2)


@given(st.integers(2, 40), st.floats(0.05, 30), st.integers(0, 2**32 - 1))
@settings(max_examples=100)
def test_the_bound_on_the_sum_decides_as_the_threshold_on_t_does(n, critical, seed):
    x = np.random.default_rng(seed).normal(0.5, 1, (n, 200))
    S, Q = x.sum(axis=0), np.square(x).sum(axis=0)
    t = t_from_sums(n, S, Q)
    clear = np.abs(t - critical) > 1e-9 * critical
    assert ((bound_on_sum(critical, n, Q) < S) == (t > critical))[clear].all()


@given(st.integers(2, 12), st.integers(0, 2**32 - 1))
def test_all_items_but_each(n, seed):
    parts = np.random.default_rng(seed).standard_normal((n, 3))
    expected = [np.delete(parts, k, axis=0).sum(axis=0) for k in range(n)]
    np.testing.assert_allclose(without_each(parts), expected, rtol=0, atol=1e-12)


def test_two_features_by_hand(checks):
    # t of check-values' four-subject example [recomputed with SciPy].
    case = checks["maxT"]
    made = group_map(np.array(case["X"], dtype=float))
    np.testing.assert_allclose(made, case["t"], rtol=1e-12)


def test_a_selection_of_one_row_has_no_t_and_is_its_own_mean():
    effects, folds = stack(np.float64, n=2), KFold(2).folds(["a", "b"])
    assert np.isnan(group_map(effects[:1])).all()
    np.testing.assert_array_equal(group_map(effects[:1], kind="mean"), effects[0])
    assert np.isnan(leave_out_maps(effects, folds)).all()
    means = leave_out_maps(effects, folds, kind="mean")
    np.testing.assert_array_equal(means, [effects[fold.selection[0]] for fold in folds])


def test_faults_are_named():
    with pytest.raises(InputError, match=r"min_fraction out of range: .*0 < .* <= 1, got 1.5"):
        Missing(min_fraction=1.5)
    with pytest.raises(InputError, match=r"min_fraction out of range: .*got 0"):
        Missing(min_fraction=0)
    with pytest.raises(ValueError, match=r"effects are \(n_rows, n_features\) float, not \(3,\)"):
        leave_out_maps(np.ones(3), LeaveOneOut().folds(list("abc")))
    with pytest.raises(ValueError, match="folds do not partition the 3 rows"):
        leave_out_maps(np.ones((3, 2)), LeaveOneOut().folds(list("abcd")))
    with pytest.raises(ValueError, match=r"float, not .* int64"):
        leave_out_maps(np.ones((3, 2), np.int64), LeaveOneOut().folds(list("abc")))
    with pytest.raises(ValueError, match="effects are float, not int64"):
        group_map(np.ones((3, 2), np.int64))
    twice = [Fold("1", (0, 1), (2,)), Fold("2", (1, 2), (0,))]
    with pytest.raises(ValueError, match="folds do not partition the 3 rows"):
        leave_out_maps(np.ones((3, 2)), twice)
