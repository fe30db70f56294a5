"""Group maps by a linear model against SciPy and statsmodels, fold by fold, in float64."""

from __future__ import annotations

import warnings

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats
from sequester.nodes import design as module
from sequester.nodes.design import (
    Design,
    adjusted_mean,
    design_map,
    design_maps,
    regression,
    two_sample,
)
from sequester.nodes.errors import InputError
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.groupmaps import Missing, group_map, leave_out_maps
from sequester.nodes.masks import strongest

N, V = 17, 40
RNG = np.random.default_rng(11)
LABELS = [f"{i:02}" for i in range(N)]
GROUPS = ["hill" if i % 2 else "pond" for i in range(N)]
THREE = ["hill", "pond", "fen"] * 5 + ["hill", "fen"]
SCORES = RNG.normal(3, 2, N).tolist()
AGES = RNG.uniform(20, 70, N).round().tolist()
YEARS = RNG.integers(1950, 2010, N).tolist()
SCHEMES = {
    "leave-one-out": LeaveOneOut().folds(LABELS),
    "two rows a label": LeaveOneOut().folds([f"{5 * i % 9}" for i in range(N)]),
    "4 folds": KFold(4, seed=2).folds(LABELS),
}
DESIGNS = {
    "two groups": two_sample(GROUPS, "hill", "pond"),
    "two of three groups": two_sample(THREE, "fen", "hill"),
    "two groups, age": two_sample(GROUPS, "pond", "hill", {"age": AGES}),
    "score": regression(SCORES),
    "score, age and year": regression(SCORES, {"age": AGES, "year": YEARS}),
    "mean at the mean age": adjusted_mean({"age": AGES, "year": YEARS}),
}


def stack(seed: int = 0, dtype: type = np.float64) -> np.ndarray:
    rng = np.random.default_rng(seed)
    mean, sd = rng.normal(0, 2, V), np.exp(rng.normal(0, 1, V))
    return (mean + sd * rng.standard_normal((N, V))).astype(dtype)


def holed(seed: int = 1, dtype: type = np.float64) -> np.ndarray:
    """A stack with zeros, NaN and infinities; some features have no row, or one group only."""
    rng = np.random.default_rng(seed)
    effects = stack(seed, dtype)
    share = rng.uniform(0, 0.4, V)
    for value in (0.0, np.nan, np.inf, -np.inf):
        effects[rng.uniform(size=effects.shape) < share / 4] = value
    effects[:, ::20] = np.nan
    effects[np.array(GROUPS) == "hill", 1::20] = 0
    return effects


def by_statsmodels(
    effects: np.ndarray, design: Design, rows: list[int], missing: Missing, kind: str
) -> np.ndarray:
    """One side's map, feature by feature; covariates centred on the rows of the side."""
    X = design.matrix()[rows]
    for j, (name, _) in enumerate(design.columns):
        if name in design.centred:
            X[:, j] -= X[:, j].mean()
    made = np.full(effects.shape[1], np.nan)
    for v, y in enumerate(effects[rows].T):
        here = missing.present(y)
        full = np.linalg.matrix_rank(X[here]) == X.shape[1] if here.any() else False
        if not full or here.sum() < max(missing.least(len(rows)), X.shape[1] + (kind == "t")):
            continue
        test = sm.OLS(y[here], X[here]).fit().t_test(np.array(design.contrast))
        made[v] = float(np.squeeze(test.tvalue if kind == "t" else test.effect))
    return made


@pytest.mark.parametrize("name", DESIGNS)
@pytest.mark.parametrize("scheme", SCHEMES)
@pytest.mark.parametrize("make", [stack, holed])
def test_all_folds_in_one_pass_equal_statsmodels_fold_by_fold(name, scheme, make):
    effects, design, missing = make(), DESIGNS[name], Missing(min_fraction=0.6)
    for kind in ("t", "mean"):
        maps = design_maps(effects, SCHEMES[scheme], design, missing, kind)
        if make is holed:
            assert 0 < np.isnan(maps).sum() < maps.size / 2
        for fold, made in zip(SCHEMES[scheme], maps, strict=True):
            expected = by_statsmodels(effects, design, list(fold.selection), missing, kind)
            np.testing.assert_allclose(made, expected, rtol=1e-10, atol=1e-10)


@pytest.mark.parametrize("name", DESIGNS)
@pytest.mark.parametrize("make", [stack, holed])
def test_the_map_of_all_rows_equals_statsmodels(name, make):
    effects, design, missing = make(), DESIGNS[name], Missing(min_fraction=0.6)
    expected = by_statsmodels(effects, design, list(range(N)), missing, "t")
    np.testing.assert_allclose(
        design_map(effects, design, missing), expected, rtol=1e-10, atol=1e-10
    )


@pytest.mark.parametrize("make", [stack, holed])
def test_two_groups_equal_scipy(make):
    effects, missing = make(), Missing(min_fraction=0.6)
    x = np.where(missing.present(effects), effects, np.nan)
    hill = np.array(GROUPS) == "hill"
    for fold, made in zip(
        SCHEMES["4 folds"],
        design_maps(effects, SCHEMES["4 folds"], DESIGNS["two groups"], missing),
        strict=True,
    ):
        rows = np.isin(np.arange(N), fold.selection)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # features without a row
            t = stats.ttest_ind(x[rows & hill], x[rows & ~hill], nan_policy="omit").statistic
        t = np.where(np.isfinite(x[rows]).sum(axis=0) < missing.least(rows.sum()), np.nan, t)
        np.testing.assert_allclose(made, np.asarray(t), rtol=1e-10, atol=1e-10)


def test_two_groups_of_a_published_example():
    # Sleep gained under two drugs (Student 1908); pooled t(18) = -1.8608 in the manual of R.
    sleep = [0.7, -1.6, -0.2, -1.2, -0.1, 3.4, 3.7, 0.8, 0.0, 2.0]
    sleep += [1.9, 0.8, 1.1, 0.1, -0.1, 4.4, 5.5, 1.6, 4.6, 3.4]
    drugs = ["1"] * 10 + ["2"] * 10
    made = design_map(np.array(sleep)[:, None], two_sample(drugs, "1", "2"), Missing(zeros=False))
    assert made.round(4).tolist() == [-1.8608]


@pytest.mark.parametrize("scheme", SCHEMES)
def test_a_column_of_ones_is_the_one_sample_t(scheme):
    ones = Design((("mean", (1.0,) * N),), (1.0,))
    effects = holed()
    maps = design_maps(effects, SCHEMES[scheme], ones)
    np.testing.assert_allclose(maps, leave_out_maps(effects, SCHEMES[scheme]), rtol=1e-11)
    np.testing.assert_allclose(design_map(effects, ones), group_map(effects), rtol=1e-11)


@given(
    scheme=st.sampled_from(sorted(SCHEMES)),
    name=st.sampled_from(sorted(DESIGNS)),
    fold=st.integers(0, 3),
    make=st.sampled_from([stack, holed]),
    dtype=st.sampled_from([np.float32, np.float64]),
    kind=st.sampled_from(["t", "mean"]),
    put=st.sampled_from([np.nan, np.inf, 0.0, 1e30, -3e38, "another map"]),
    row=st.sampled_from([0.0, 1.0, -1e3, "another row"]),
    seed=st.integers(0, 2**32 - 1),
)
@settings(max_examples=150, deadline=None)
def test_neither_map_nor_design_of_the_held_out_enters_their_fold(
    scheme, name, fold, make, dtype, kind, put, row, seed
):
    folds, design, effects = SCHEMES[scheme], DESIGNS[name], make(dtype=dtype)
    before = design_maps(effects, folds, design, kind=kind)[fold].tobytes()
    rng = np.random.default_rng(seed)
    held = list(folds[fold].held_out)
    where = rng.uniform(size=V) < 0.7
    other = stack(seed, dtype)[held]
    effects[held] = np.where(where, other if put == "another map" else put, effects[held])
    X = design.matrix()
    free = [j for j, (c, _) in enumerate(design.columns) if c in (*design.centred, "score")]
    for j in free:
        X[held, j] = rng.normal(0, 9, len(held)) if row == "another row" else row
    names = [c for c, _ in design.columns]
    columns = tuple((c, tuple(X[:, j])) for j, c in enumerate(names))
    changed = Design(columns, design.contrast, design.centred)
    after = design_maps(effects, folds, changed, kind=kind)
    assert after[fold].tobytes() == before


def test_a_group_label_of_the_held_out_does_not_enter_their_fold():
    effects, folds = stack(), SCHEMES["leave-one-out"]
    before = design_maps(effects, folds, DESIGNS["two groups"])
    swapped = [*GROUPS[:5], "hill" if GROUPS[5] == "pond" else "pond", *GROUPS[6:]]
    after = design_maps(effects, folds, two_sample(swapped, "hill", "pond"))
    assert after[5].tobytes() == before[5].tobytes()
    assert (after[:5] != before[:5]).any(axis=1).all()


def test_covariates_are_centred_on_the_rows_that_choose():
    # A map that is exactly the covariate: its mean at the mean covariate is the rows' own mean.
    ages = np.array(AGES)
    effects = np.tile(ages[:, None], (1, 2))
    folds = SCHEMES["leave-one-out"]
    maps = design_maps(effects, folds, adjusted_mean({"age": AGES}), kind="mean")
    expected = [ages[list(fold.selection)].mean() for fold in folds]
    np.testing.assert_allclose(maps[:, 0], expected, rtol=1e-12)


@pytest.mark.parametrize("numbers", [1, N * 60, N * 10_000])
@pytest.mark.parametrize("make", [stack, holed])
def test_the_size_of_a_block_changes_no_bit(monkeypatch, numbers, make):
    effects, design = make(dtype=np.float32), DESIGNS["score, age and year"]
    maps = design_maps(effects, SCHEMES["4 folds"], design)
    whole = design_map(effects, design)
    assert maps.dtype == np.float32
    monkeypatch.setattr(module, "_NUMBERS", numbers)
    assert design_maps(effects, SCHEMES["4 folds"], design).tobytes() == maps.tobytes()
    assert design_map(effects, design).tobytes() == whole.tobytes()


def test_a_feature_that_lacks_a_group_or_too_many_rows_is_nan():
    effects = stack()[:, :4]
    effects[np.array(GROUPS) == "hill", 0] = np.nan
    effects[:4, 1] = 0
    effects[:3, 2] = np.inf
    made = design_map(effects, DESIGNS["two groups"])
    assert np.isnan(made).tolist() == [True, True, False, False]  # 0.8 of 17 is 14 rows
    # However little the plan asks for, a t needs a row more than the model has columns.
    effects[:, 3] = np.nan
    effects[:4, 3] = [1.0, 2.0, 4.0, 3.0]
    few = Missing(min_fraction=0.01)
    assert not np.isnan(design_map(effects, DESIGNS["two groups, age"], few)[3])
    effects[3, 3] = np.nan
    assert np.isnan(design_map(effects, DESIGNS["two groups, age"], few)[3])
    assert not np.isnan(design_map(effects, DESIGNS["two groups, age"], few, "mean")[3])


def test_equal_values_within_groups_give_an_infinite_t_and_equal_values_none():
    hill = np.array(GROUPS) == "hill"
    effects = np.stack([np.where(hill, 0.3, 0.1), np.where(hill, 0.1, 0.3), np.full(N, 0.1)], 1)
    assert design_map(effects, DESIGNS["two groups"]).tolist() == [np.inf, -np.inf, 0.0]
    maps = design_maps(effects, SCHEMES["leave-one-out"], DESIGNS["two groups"])
    assert (maps == [np.inf, -np.inf, 0.0]).all()


def test_a_square_too_large_for_float64_stays_in_its_own_row():
    effects = stack()
    before = design_maps(effects, SCHEMES["leave-one-out"], DESIGNS["score"])
    effects[3] = -1e300
    after = design_maps(effects, SCHEMES["leave-one-out"], DESIGNS["score"])
    assert (after[3] == before[3]).all()
    assert (np.delete(after, 3, axis=0) == 0).all()


# -- refusals ----------------------------------------------------------------------------------


def test_a_side_that_does_not_determine_the_model_is_named():
    effects, folds = stack()[:6], LeaveOneOut().folds(list("uvwxyz"))
    lonely = two_sample(["fen", *["pond"] * 5], "pond", "fen")
    with pytest.raises(InputError, match=r"not of full rank \(fold u\): .*got column 'fen'"):
        design_maps(effects, folds, lonely)
    assert design_map(effects, lonely).shape == (V,)
    double = regression([1, 2, 3, 5, 8, 9], {"twice": [2, 4, 6, 10, 16, 18]})
    with pytest.raises(InputError, match=r"full rank \(all rows\).*column 'twice', which does"):
        design_map(effects, double)
    same = regression([4, 1, 1, 1, 1, 1])
    with pytest.raises(InputError, match=r"full rank \(fold u\).*column 'score'"):
        design_maps(effects, folds, same)
    wide = regression([1, 2, 3, 5, 8, 9], {k: RNG.normal(size=6) for k in "abc"})
    with pytest.raises(
        InputError, match=r"too few rows .*\(fold u\): expected more than 5 .*got 5"
    ):
        design_maps(effects, folds, wide)
    with pytest.raises(InputError, match=r"do not pair up: expected 6 rows, one per map, got 17"):
        design_maps(effects, folds, DESIGNS["score"])
    far = regression((1e6 + np.arange(6)).tolist())
    with pytest.raises(InputError, match="subtract a constant from a column"):
        design_maps(effects, folds, far)


def test_faults_of_a_design_are_named():
    with pytest.raises(InputError, match=r"\(column score, row 1\): got nan; leave the row out"):
        regression([1.0, np.nan])
    with pytest.raises(InputError, match=r"differ in length: got .*'age': 1"):
        adjusted_mean({"age": [1.0], "dose": [1.0, 2.0]})
    with pytest.raises(InputError, match="columns with names of their own"):
        regression([1.0, 2.0], {"score": [1.0, 2.0]})
    with pytest.raises(InputError, match="one weight per column, and one that is not zero"):
        Design((("a", (1.0, 2.0)),), (0.0,))
    with pytest.raises(InputError, match=r"got \[.a.\]; add an intercept"):
        Design((("a", (1.0, 2.0)), ("b", (0.0, 1.0))), (1.0, 0.0), ("b",))
    with pytest.raises(InputError, match=r"two groups .* expected two of fen, pond, got fen, hill"):
        two_sample(["fen", "pond"], "fen", "hill")
    with pytest.raises(InputError, match="does not compare two groups"):
        regression([1.0, 2.0]).compared()
    with pytest.raises(InputError, match="the plain mean needs no design"):
        adjusted_mean({})


def test_what_the_engine_hashes_tells_designs_apart():
    # The engine hashes the repr; one digit of one row must show in it.
    a, b = ((0.1, 0.2, 0.3), (0.1, 0.2, np.nextafter(0.3, 1)))
    assert repr(regression(a)) != repr(regression(b))
    assert repr(regression(np.array(a))) == repr(regression(a))


# -- honesty -----------------------------------------------------------------------------------


def test_held_out_differences_are_unbiased_and_circular_ones_are_not():
    # A difference of 0.5 in the first 40 of 200 features, noise 1, on a common map of spread 2.
    rng = np.random.default_rng(5)
    n, v, k, n_studies = 16, 200, 10, 300
    groups = ["hill", "pond"] * (n // 2)
    hill = np.array(groups) == "hill"
    labels = [f"{i:02}" for i in range(n)]
    folds = KFold(4, strata=tuple(zip(labels, groups, strict=True))).folds(labels)
    design = two_sample(groups, "hill", "pond")
    truth = np.where(np.arange(v) < 40, 0.5, 0.0)
    common = rng.normal(0, 2, v)
    held, circular = [], []
    for _ in range(n_studies):
        effects = common + np.outer(hill, truth) + rng.standard_normal((n, v))
        values, true_values = np.zeros(n), np.zeros(n)
        for fold, t in zip(folds, design_maps(effects, folds, design), strict=True):
            mask = strongest(t, k)
            for row in fold.held_out:
                values[row] = effects[row, mask].mean()
                true_values[row] = (common + hill[row] * truth)[mask].mean()
        error = values - true_values
        held.append(error[hill].mean() - error[~hill].mean())
        mask = strongest(design_map(effects, design), k)
        read = effects[:, mask].mean(axis=1)
        circular.append(read[hill].mean() - read[~hill].mean() - truth[mask].mean())
    error = np.std(held) / np.sqrt(n_studies)
    assert abs(np.mean(held)) < 4 * error < 0.1
    assert np.mean(circular) > 0.4
