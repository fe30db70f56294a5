"""Exchange of scores and group labels, against loops over folds, people and orders with SciPy.

Masks, held-out values and statistics under the data's own scores and under others; by every
rule; then what must not matter, enumeration, covariates, degenerate inputs, and the level of
the test where the ordinary test of the very same values fails.
"""

from __future__ import annotations

import itertools
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given, settings
from hypothesis import strategies as st
from planting import a_grid
from scipy import ndimage, stats
from sequester.nodes import foldstack, scored
from sequester.nodes import procedure as procedure_module
from sequester.nodes.errors import InputError
from sequester.nodes.exchange import max_statistic
from sequester.nodes.flips import random_orders, random_signs
from sequester.nodes.folds import Given, KFold, LeaveOneOut
from sequester.nodes.heldout import cross_fitted_result
from sequester.nodes.images import write_map
from sequester.nodes.masks import Cluster, PeakSphere, Strongest, Threshold
from sequester.nodes.models import Groups, Score
from sequester.nodes.procedure import Prepared, Procedure
from sequester.nodes.space import Grid
from sequester.nodes.touch import Unit
from sequester.workflows.guard import GuardPlugin
from sequester.workflows.plans import cross_fitted
from sequester.workflows.study import Row, Study

SHAPE = (8, 8, 8)
GRID = Grid(SHAPE, np.diag([2.0, 2.5, 3.0, 1.0]))
PEOPLE = [f"{i:02}" for i in range(12)]
RULES = {
    "height": Threshold(height=1.8),
    "p": Threshold(p=0.05),
    "largest": Cluster(p=0.05, min_size=2),
    "peak": Cluster(p=0.05, pick="peak"),
    "strongest": Strongest(6),
    "strongest mean": Strongest(6, "mean"),
    "fraction": Strongest(fraction=0.02),
    "sphere": PeakSphere(4.0),
}
SCHEMES = {"each": LeaveOneOut(), "4 folds": KFold(4, seed=2)}


def scores(kind: str, n: int = 12) -> np.ndarray:
    """The number of each of PEOPLE."""
    if kind == "groups":
        return (np.arange(n) % 5 < 2).astype(float)
    drawn = np.random.default_rng(5).gamma(2.0, size=n).round(1)
    drawn[3] = drawn[4]  # a tie
    return drawn


def model(kind: str, numbers: np.ndarray | None = None, covariates=()) -> Groups | Score:
    numbers = scores(kind) if numbers is None else numbers
    people = [f"{i:02}" for i in range(len(numbers))]
    given = tuple((name, tuple(zip(people, map(float, v), strict=True))) for name, v in covariates)
    if kind == "groups":
        words = ["pond" if number else "hill" for number in numbers]
        return Groups(tuple(zip(people, words, strict=True)), "pond", "hill", given)
    return Score(tuple(zip(people, map(float, numbers), strict=True)), given)


def maps(kind: str, holes: bool = False, dtype=np.float32) -> np.ndarray:
    rng = np.random.default_rng(7)
    x = 1.5 * np.array([ndimage.gaussian_filter(rng.normal(size=SHAPE), 0.6) for _ in PEOPLE])
    x[:, 2:5, 2:5, 2:5] += 0.5 * stats.zscore(scores(kind))[:, None, None, None]
    x = x.reshape(len(PEOPLE), -1)
    x[:, 40] = 3.0  # no variance
    if holes:
        x[4, rng.uniform(size=x.shape[1]) < 0.1] = 0
        x[rng.uniform(size=x.shape) < 0.01] = np.nan
    return x.astype(dtype)


def prepare(kind, rule, *, scheme="each", holes=False, x=None, tail="positive", **more) -> Prepared:
    x = maps(kind, holes) if x is None else x
    plan = Procedure(rule, SCHEMES.get(scheme, scheme), tail, model=model(kind), **more)
    return plan.prepare(x, PEOPLE, GRID)


def statistic(kind: str, values: np.ndarray, numbers: np.ndarray) -> float:
    if kind == "groups":
        first, second = values[numbers == 1], values[numbers == 0]
        return float(stats.ttest_ind(first, second, equal_var=False).statistic)
    if not np.ptp(values):
        return 0.0
    r = stats.pearsonr(numbers, values).statistic
    return float(r * np.sqrt((len(values) - 2) / (1 - r * r)))


def naive(kind, ready: Prepared, x: np.ndarray, order: np.ndarray | None = None):
    """Masks, values and statistic, a fold, a feature and a row at a time."""
    plan, numbers = ready.procedure, scores(kind)
    numbers = numbers if order is None else numbers[order]
    sign = -1 if plan.tail == "negative" else 1
    x = sign * x.astype(float)
    x[~np.isfinite(x) | (x == 0)] = np.nan
    masks, values = [], np.zeros(len(x))
    for fold in plan.scheme.folds(PEOPLE):
        side = list(fold.selection)
        rows, w = x[side], numbers[side]
        t, slope = np.full((2, x.shape[1]), np.nan)
        varies = ~np.isnan(rows).any(axis=0) & (np.ptp(rows, axis=0) > 0)
        y = rows[:, varies]
        if kind == "groups":
            t[varies] = stats.ttest_ind(y[w == 1], y[w == 0]).statistic
            slope[varies] = y[w == 1].mean(axis=0) - y[w == 0].mean(axis=0)
        else:
            r = stats.pearsonr(np.broadcast_to(w[:, None], y.shape), y, axis=0).statistic
            t[varies] = r * np.sqrt((len(side) - 2) / (1 - r * r))
            slope[varies] = r * y.std(axis=0) / w.std()
        t[np.ptp(rows, axis=0) == 0] = slope[np.ptp(rows, axis=0) == 0] = 0
        masks.append(_naive_mask(plan.rule, t, slope, len(side) - 2))
        for row in fold.held_out:
            inside = x[row, masks[-1]]
            inside = inside[~np.isnan(inside)]
            values[row] = inside.mean() if len(inside) else 0
    return masks, sign * values, statistic(kind, values, numbers)


def _naive_mask(rule, t, slope, df):
    ranked = slope if rule.map_kind == "mean" else t
    order = [v for v in np.argsort(-ranked, kind="stable") if not np.isnan(ranked[v])]
    if isinstance(rule, Strongest):
        k = rule.k or int(np.ceil(rule.fraction * len(order) - 1e-9))
        return np.isin(np.arange(len(t)), order[:k])
    if isinstance(rule, PeakSphere):
        mm = GRID.coordinates()
        return np.linalg.norm(mm - mm[order[0]], axis=1) < rule.radius + 1e-6
    with np.errstate(invalid="ignore"):
        above = t > (rule.height if rule.p is None else stats.t.isf(rule.p, df))
    if not isinstance(rule, Cluster) or not above.any():
        return above
    parts, n = ndimage.label(above.reshape(SHAPE), ndimage.generate_binary_structure(3, 2))
    found = [np.flatnonzero(parts.ravel() == i + 1) for i in range(n)]
    found = [c for c in found if len(c) >= rule.min_size]
    if not found:
        return np.zeros(len(t), bool)
    best = max(found, key=len if rule.pick == "largest" else lambda c: t[c].max())
    return np.isin(np.arange(len(t)), best)


@pytest.mark.parametrize("holes", [False, True])
@pytest.mark.parametrize(("scheme", "tail"), [("each", "positive"), ("4 folds", "negative")])
@pytest.mark.parametrize("rule", RULES)
@pytest.mark.parametrize("kind", ["groups", "score"])
def test_masks_and_values_equal_a_naive_loop_under_every_order(kind, rule, scheme, tail, holes):
    x = maps(kind, holes) * np.float32(-1 if tail == "negative" else 1)
    ready = prepare(kind, RULES[rule], scheme=scheme, x=x, tail=tail)
    masks, values, t = naive(kind, ready, x)
    assert sum(mask.any() for mask in masks) > len(masks) / 2
    for one, other in zip(ready.masks(), masks, strict=True):
        assert (one == other).all()
    np.testing.assert_allclose(ready.outcome().values, values, rtol=1e-6, atol=1e-7)
    assert ready.outcome().t == pytest.approx(t, rel=1e-6)
    orders = random_orders(3, PEOPLE, 0, 2)
    screened, overlap, n_empty = ready.flips(orders)
    for i, order in enumerate(orders):
        masks, values, t = naive(kind, ready, x, order)
        outcome = ready.outcome(order)
        assert outcome.sizes == tuple(mask.sum() for mask in masks)
        np.testing.assert_allclose(outcome.values, values, rtol=1e-6, atol=1e-7)
        assert screened[i] == pytest.approx(t, rel=1e-6, abs=1e-9)
        assert (screened[i], n_empty[i]) == (outcome.t, len(outcome.empty))
        np.testing.assert_equal(overlap[i], outcome.dice)


@given(
    rule=st.sampled_from(
        [
            Threshold(p=0.02),
            Threshold(height=0.2),
            Threshold(height=7),
            Strongest(5),
            Strongest(fraction=0.02),
            Strongest(5, "mean"),
            PeakSphere(2.0),
        ]
    ),
    kind=st.sampled_from(["noise", "heavy", "holes", "ties", "offset", "huge", "tiny", "outlier"]),
    dtype=st.sampled_from([np.float32, np.float64]),
    scheme=st.sampled_from([LeaveOneOut(), KFold(3, seed=1)]),
    numbers=st.sampled_from(["normal", "years", "groups", "one apart", "tiny"]),
    few=st.sampled_from([0, 8]),
    seed=st.integers(0, 2**32 - 1),
)
@settings(max_examples=150)
def test_the_screen_changes_no_bit(rule, kind, dtype, scheme, numbers, few, seed):
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(scored, "_FEW_FOLDS", few)
        _screened_equals_whole(rule, kind, dtype, scheme, numbers, seed)


def _screened_equals_whole(rule, kind, dtype, scheme, numbers, seed):
    rng = np.random.default_rng(seed)
    x = rng.standard_normal((9, 512))
    if kind == "heavy":
        x = x**5 * 10.0 ** rng.uniform(-4, 4, 512)
    elif kind == "holes":
        x[rng.uniform(size=x.shape) < 0.05] = 0
        x[:, :50] = 0
    elif kind == "ties":
        x = np.round(x) + 0.5
        x[:, ::7] = x[:, :1]
        x[:, 1::7] = 3
    elif kind == "offset":
        x += 1e4
    elif kind == "outlier":
        x[rng.integers(9)] *= 1e6
    elif kind in ("huge", "tiny"):
        x *= {"huge": 3e37, "tiny": 1e-40}[kind]
    w = {
        "normal": rng.normal(size=9),
        "years": rng.integers(1940, 2010, 9).astype(float),
        "groups": rng.permutation(np.arange(9) < 4).astype(float),
        "one apart": np.append(rng.normal(size=8), 1e3),
        "tiny": rng.normal(size=9) * 1e-30,
    }[numbers]
    labels = [str(i) for i in range(9)]
    score = Score(tuple(zip(labels, w.tolist(), strict=True)))
    plan = Procedure(rule, scheme, on_empty="strongest", k=3, model=score)
    with np.errstate(over="ignore"):
        x = x.astype(dtype)
    try:
        plain, fast = (plan.prepare(x, labels, GRID) for _ in range(2))
    except InputError:  # a fold with one group only
        return
    orders = np.vstack([np.arange(9)[None], random_orders(seed, labels, 0, 3)])
    t, overlap, n_empty = fast.flips(orders)
    for i, order in enumerate(orders):
        outcome = plain.outcome(order)  # without the screen
        assert t[i] == outcome.t
        np.testing.assert_equal(overlap[i], outcome.dice)
        assert n_empty[i] == len(outcome.empty)


# -- what must not matter -------------------------------------------------------------------


@given(
    kind=st.sampled_from(["groups", "score"]),
    rule=st.sampled_from(["p", "peak", "strongest", "strongest mean", "sphere"]),
    scheme=st.sampled_from(["each", "4 folds"]),
    covariate=st.booleans(),
    put=st.sampled_from([np.nan, 0.0, 1e30, -1e30, 3.4e38, "another map"]),
    share=st.sampled_from([0.3, 1.0]),
    fold=st.integers(0, 3),
    seed=st.integers(0, 2**32 - 1),
)
@settings(max_examples=100)
def test_neither_map_nor_score_of_the_held_out_enters_their_fold(
    kind, rule, scheme, covariate, put, share, fold, seed
):
    rng, numbers, x = np.random.default_rng(seed), scores(kind), maps(kind)
    age = np.random.default_rng(3).normal(size=12)
    plan = Procedure(RULES[rule], SCHEMES[scheme])

    def made(numbers, age):
        more = [("age", age)] if covariate else []
        return replace(plan, model=model(kind, numbers, more)).prepare(x, PEOPLE, GRID)

    before = made(numbers, age)
    held = list(before.folds[fold].held_out)
    mask = before.masks()[fold]
    other = rng.normal(size=(len(held), x.shape[1])) if put == "another map" else put
    where = rng.uniform(size=x.shape[1]) < share
    x = x.copy()
    x[held] = np.where(where, other, x[held])
    numbers, age = numbers.copy(), age.copy()
    age[held] = rng.normal(size=len(held))
    numbers[held] = 1 - numbers[held] if kind == "groups" else rng.choice([1e3, 0.0], len(held))
    after = made(numbers, age).masks()
    assert after[fold].tobytes() == mask.tobytes()
    if put == "another map" and share == 1:  # the others do notice
        masks = zip(before.masks(), after, strict=True)
        assert any((one != other).any() for one, other in masks)


@pytest.mark.parametrize("kind", ["groups", "score"])
@pytest.mark.parametrize("rule", ["p", "peak", "strongest", "sphere"])
def test_neither_order_nor_blocks_nor_batches_change_a_bit(monkeypatch, kind, rule):
    x, orders = maps(kind, holes=True), random_orders(1, PEOPLE, 0, 40)
    ready = prepare(kind, RULES[rule], x=x)
    expected = ready.flips(orders)
    shuffle = np.random.default_rng(6).permutation(12)
    people = [PEOPLE[i] for i in shuffle]
    other = replace(ready.procedure, model=replace(model(kind), of=model(kind).of[::-1]))
    shuffled = other.prepare(x[shuffle], people, GRID)
    assert shuffled.outcome().values == tuple(ready.outcome().values[i] for i in shuffle)
    assert shuffled.flip_test(99, 4) == ready.flip_test(99, 4)
    for one, other in zip(shuffled.flips(orders), expected, strict=True):
        assert one.tobytes() == other.tobytes()
    monkeypatch.setattr(procedure_module, "_AT_ONCE", 7)
    for module in (foldstack, scored):
        monkeypatch.setattr(module, "BLOCK", 13)
    for one, other in zip(prepare(kind, RULES[rule], x=x).flips(orders), expected, strict=True):
        assert one.tobytes() == other.tobytes()


# -- the test -------------------------------------------------------------------------------


@pytest.mark.parametrize(("kind", "n", "many"), [("groups", 7, 35), ("score", 5, 120)])
def test_a_few_subjects_by_enumeration(kind, n, many):
    numbers = np.array([1.0, 0, 0, 1, 0, 1, 0]) if kind == "groups" else scores(kind, n)
    people, x = PEOPLE[:n], np.random.default_rng(2).normal(size=(n, 30))
    grid = Grid((30, 1, 1), np.eye(4))
    ready = Procedure(Strongest(3), model=model(kind, numbers)).prepare(x, people, grid)
    t = []
    for order in (
        set(itertools.permutations(numbers.tolist()))
        if kind == "groups"
        else (itertools.permutations(numbers.tolist()))
    ):
        w, values = np.array(order), np.zeros(n)
        for i in range(n):
            rest = np.arange(n) != i
            r = np.corrcoef(w[rest], x[rest], rowvar=False)[0, 1:]
            values[i] = x[i, np.argsort(r)[-3:]].mean()
        t.append(statistic(kind, values, w))
    assert len(t) == many
    test = ready.flip_test(many - 1)
    assert (test.exact, test.n_flips) == (True, many)
    np.testing.assert_allclose(sorted(test.statistics), sorted(t), rtol=1e-9)
    assert test.p == np.mean(np.array(t) >= test.t - 1e-9)
    drawn = ready.flip_test(many - 2)
    assert (drawn.exact, drawn.p) == (False, (1 + drawn.n_at_least) / (many - 1))


def test_the_statistics_of_held_out_values_are_welchs_t_and_that_of_pearsons_r():
    rng = np.random.default_rng(1)
    for kind in ("groups", "score"):
        numbers = scores(kind)
        made = model(kind).comparison(PEOPLE)
        for _ in range(20):
            values, order = rng.normal(size=12), rng.permutation(12)
            t = statistic(kind, values, numbers[order])
            assert made.statistic(values, order) == pytest.approx(t, rel=1e-10)


def test_with_covariates_they_are_those_of_a_linear_model():
    rng = np.random.default_rng(1)
    age, size = rng.normal(40, 9, 12), rng.normal(size=12)
    for kind in ("groups", "score"):
        numbers, values = scores(kind), rng.normal(size=12)
        made = model(kind, covariates=[("age", age), ("size", size)]).comparison(PEOPLE)
        fit = sm.OLS(values, np.column_stack([numbers, np.ones(12), age, size])).fit()
        if kind == "groups":
            robust = fit.get_robustcov_results("HC2")
            assert made.estimate(values, made.observed()) == pytest.approx(fit.params[0], rel=1e-9)
            assert made.statistic(values, made.observed()) == pytest.approx(robust.tvalues[0])
        else:
            assert made.statistic(values, made.observed()) == pytest.approx(fit.tvalues[0])
            r = fit.tvalues[0] / np.sqrt(fit.tvalues[0] ** 2 + fit.df_resid)
            assert made.estimate(values, made.observed()) == pytest.approx(r)


@pytest.mark.parametrize("kind", ["groups", "score"])
@pytest.mark.parametrize("holes", [False, True])
def test_with_covariates_residuals_of_whole_maps_change_hands(kind, holes):
    rng, numbers = np.random.default_rng(4), scores(kind)
    age = rng.normal(40, 9, 12) + 3 * numbers
    x = maps(kind, dtype=np.float64)[:, 50:110] + 0.05 * age[:, None]
    if holes:
        x[2, :20] = np.nan
    grid = Grid((60, 1, 1), np.eye(4))
    plan = Procedure(Strongest(4), model=model(kind, covariates=[("age", age)]))
    ready = plan.prepare(x, PEOPLE, grid)
    assert ready.outcome() == ready.outcome(np.arange(12))
    orders = random_orders(5, PEOPLE, 0, 4)
    t, _, _ = ready.flips(orders)
    values = ready.values_under(orders)
    for i, order in enumerate(orders):
        changed = np.empty_like(x)
        for v in range(60):
            there = ~np.isnan(x[:, v])
            nuisance = np.column_stack([np.ones(12), age])
            fit = sm.OLS(x[there, v], nuisance[there]).fit()
            fitted = fit.predict(nuisance)
            changed[:, v] = fitted + (x[:, v] - fitted)[order]
        expected = np.zeros(12)
        for fold in range(12):
            rest = np.arange(12) != fold
            full = np.column_stack([numbers, np.ones(12), age])[rest]
            map_ = [
                -np.inf
                if np.isnan(changed[rest, v]).any() or not np.ptp(changed[rest, v])
                else sm.OLS(changed[rest, v], full).fit().tvalues[0]
                for v in range(60)
            ]
            expected[fold] = np.nanmean(changed[fold, np.argsort(map_)[-4:]])
        np.testing.assert_allclose(values[i], expected, rtol=1e-8)
        fit = sm.OLS(expected, np.column_stack([numbers, np.ones(12), age])).fit()
        if kind == "groups":
            fit = fit.get_robustcov_results("HC2")
        assert t[i] == pytest.approx(fit.tvalues[0], rel=1e-6)


def test_several_regions_under_the_same_exchanges_have_a_family_wise_p():
    x = np.random.default_rng(2).normal(size=(12, 400))
    x[:, :40] += 1.2 * stats.zscore(scores("score"))[:, None]
    parts = [slice(0, 100), slice(100, 250), slice(250, 400)]
    for plan in (Procedure(Strongest(5)), Procedure(Strongest(5), model=model("score"))):
        tests = [
            plan.prepare(
                x[:, part], PEOPLE, Grid((part.stop - part.start, 1, 1), np.eye(4))
            ).flip_test(199, 3)
            for part in parts
        ]
        largest = np.array([test.statistics for test in tests]).max(axis=0)
        together = max_statistic(tests)
        for test, p in zip(tests, together, strict=True):
            assert p == (1 + np.sum(largest >= test.t)) / 200
            assert p >= test.p
        other = plan.prepare(x[:, :100], PEOPLE, Grid((100, 1, 1), np.eye(4))).flip_test(199, 4)
        with pytest.raises(InputError, match="tests of different exchanges cannot be combined"):
            max_statistic([tests[0], other])
    assert max_statistic(tests)[0] < 0.05 < min(max_statistic(tests)[1:])
    with pytest.raises(InputError, match="no tests to combine"):
        max_statistic([])


@pytest.mark.parametrize("kind", ["groups", "score", "signs"])
def test_values_under_exchanges_are_those_of_the_outcomes(kind):
    plan = Procedure(Threshold(p=0.05), tail="negative")
    if kind != "signs":
        plan = replace(plan, model=model(kind))
    ready = plan.prepare(-maps("score"), PEOPLE, GRID)
    draw = random_signs if kind == "signs" else random_orders
    exchanges = draw(1, PEOPLE, 0, 40)
    values = ready.values_under(exchanges)
    assert np.unique(values).size > 100
    for row, exchange in zip(values, exchanges, strict=True):
        assert tuple(row) == ready.outcome(exchange).values


@pytest.mark.parametrize("covariates", [(), [("age", np.arange(12) % 5)]])
def test_other_maps_that_are_tested_are_exchanged_with_those_that_choose(covariates):
    plan = Procedure(Threshold(p=0.05), model=model("groups", covariates=covariates))
    x, orders = maps("groups", holes=True), random_orders(1, PEOPLE, 0, 6)
    plain = plan.prepare(x, PEOPLE, GRID)
    other = plan.prepare(x, PEOPLE, GRID, tested=2 * x)
    assert other.outcome().values == tuple(2 * value for value in plain.outcome().values)
    assert (other.values_under(orders) == 2 * plain.values_under(orders)).all()


# -- what is said ---------------------------------------------------------------------------

NAMES = ("hollow", "leave-one-subject-out", "left bank")


def test_the_result_of_two_groups():
    ready = prepare("groups", Threshold(p=0.05))
    made, outcome, test = cross_fitted_result(ready, NAMES, 199, 3)
    values, first = np.array(outcome.values), scores("groups") == 1
    one, two = values[first], values[~first]
    assert made.estimate == pytest.approx(one.mean() - two.mean())
    assert made.n_cells == (("pond", 6), ("hill", 6))
    pooled = np.sqrt((one.var(ddof=1) * 5 + two.var(ddof=1) * 5) / 10)
    # Hedges' factor, 1 - 3 / (4 df - 1) to three digits.
    assert made.g == pytest.approx(made.estimate / pooled * (1 - 3 / 39), rel=1e-3)
    assert made.dz is None
    error = np.sqrt(one.var(ddof=1) / 6 + two.var(ddof=1) / 6)
    quantile = max(test.abs_t_quantile, stats.t.ppf(0.975, 10))
    assert made.interval.high - made.interval.low == pytest.approx(2 * error * quantile)
    assert made.interval.kind == "approximate"
    without = one[1:].mean() - two.mean()
    label = PEOPLE[int(np.flatnonzero(first)[0])]
    assert dict(made.influence)[label] == pytest.approx(without - made.estimate)
    assert made.most_influential == max(made.influence, key=lambda pair: abs(pair[1]))[0]
    for words in (
        "voxels with p < 0.05, of pond minus hill in the search region 'left bank'",
        "held-out mean of pond (n = 6) minus that of hill (n = 6)",
        "whole-procedure exchange of group labels, 199 random exchanges, one-sided: greater",
        "exchangeable over the subjects with respect to the group",
        "over the search region 'left bank'",
    ):
        assert words in made.sentence


def test_the_result_of_a_score():
    ready = prepare("score", Threshold(p=0.05))
    made, outcome, test = cross_fitted_result(ready, NAMES, 199, 3)
    r = stats.pearsonr(outcome.values, scores("score")).statistic
    assert made.estimate == pytest.approx(r)
    quantile = max(test.abs_t_quantile, stats.t.ppf(0.975, 10))
    far = np.arctanh(quantile / np.sqrt(10 + quantile**2))
    assert np.arctanh(made.interval.low) == pytest.approx(np.arctanh(r) - far)
    assert (made.g, made.dz, made.n_cells) == (None, None, ())
    assert len(made.influence) == 12
    assert "correlation of held-out values with score, r = " in made.sentence
    assert "exchangeable over the subjects with respect to score" in made.sentence
    jackknife, _, _ = cross_fitted_result(ready, NAMES, 19, 3, "jackknife")
    assert jackknife.interval.kind == "conservative"
    with pytest.raises(InputError, match="no interval by folds for groups and scores"):
        cross_fitted_result(ready, NAMES, 19, 3, "folds")


def test_covariates_are_named_in_the_result():
    x, age = maps("score")[:, :50], tuple(zip(PEOPLE, map(float, range(12)), strict=True))
    plan = Procedure(Strongest(5), model=replace(model("score"), covariates=(("age", age),)))
    ready = plan.prepare(x, PEOPLE, Grid((50, 1, 1), np.eye(4)))
    made, _, _ = cross_fitted_result(ready, NAMES, 19, 3)
    assert "exchange of residuals given age" in made.p_kind
    assert "Freedman & Lane 1983" in made.null
    assert made.target.endswith("adjusted for age")


def test_one_sample_results_have_g_and_influence():
    ready = Procedure(Strongest(5)).prepare(maps("score"), PEOPLE, GRID)
    made, outcome, _ = cross_fitted_result(ready, NAMES, 99, 3)
    values = np.array(outcome.values)
    assert made.g == pytest.approx(made.dz * (1 - 3 / 43), rel=1e-3)
    expected = (values.sum() - values) / 11 - values.mean()
    np.testing.assert_allclose([change for _, change in made.influence], expected, atol=1e-12)
    assert made.most_influential == PEOPLE[int(np.abs(expected).argmax())]


@pytest.mark.parametrize("kind", ["groups", "score"])
def test_a_plan_of_two_groups_or_a_score_runs_under_the_guard(kind, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    x, geometry = maps(kind), a_grid(SHAPE, GRID.affine)
    rows, made = [], model(kind)
    for (label, told), row in zip(made.of, x, strict=True):
        write_map(tmp_path / f"{label}.nii", row.reshape(SHAPE), geometry)
        column = ((made.name, str(told)),)
        rows.append(Row(f"{label}.nii", None, Unit(sub=label, suffix="bold"), extra=column))
    rule = Procedure(Cluster(p=0.05), KFold(4, seed=2), model=made)
    plan = cross_fitted("hollow", rule, PEOPLE, n_flips=49, seed=6, plan="k-fold")
    plan.base_dir = "work"
    plan.config["execution"] = {"crashdump_dir": ".", "create_report": "false"}
    plan.inputs.inputnode.effects = [str(tmp_path / row.path) for row in rows]
    done = plan.run(plugin=GuardPlugin(Study(tmp_path, rows)))
    (test,) = (node for node in done.nodes() if node.name == "test")
    record = json.loads(Path(test.result.outputs.record_file).read_text())
    expected = rule.prepare(x, PEOPLE, GRID).flip_test(49, 6)
    assert (record["p"], record["t"]) == (expected.p, expected.t)
    flips = np.load(test.result.outputs.flips_file)
    assert flips.dtype == np.float64
    assert flips.tolist() == [expected.t, *expected.statistics]


# -- degenerate inputs ----------------------------------------------------------------------


def _pairs(values, people=PEOPLE):
    return tuple(zip(people, values, strict=False))


def _plan(made, scheme=None):
    return Procedure(Strongest(2), scheme or LeaveOneOut(), model=made)


@pytest.mark.parametrize(
    ("made", "people", "message"),
    [
        (Score(_pairs([2.0] * 6)), PEOPLE[:6], "a score without variance (score): got 2 for"),
        (Score(_pairs([2.0] * 5 + [1.0])), PEOPLE[:6], "the score does not vary (fold 05)"),
        (Score(_pairs([1.0, 2, 3])), PEOPLE[:6], "subjects without a score (03, 04, 05)"),
        (Score(_pairs([1.0, 2, 3])), PEOPLE[:3], "too few subjects for a t of two parameters"),
        (Score(_pairs([1.0, 2, 3, 4])), ["00", "00", "01", "02", "03"], "several maps of one sub"),
        (Groups(_pairs("aaaaa"), "a", "b"), PEOPLE[:5], "a group without subjects (b)"),
        (Groups(_pairs("aaaab"), "a", "b"), PEOPLE[:5], "without both groups (fold 04)"),
        (Groups(_pairs("aabbc"), "a", "b"), PEOPLE[:5], "subjects of neither group (04)"),
        (Groups(_pairs("aab"), "a", "b"), PEOPLE[:3], "too few subjects for a t of two parameters"),
        (
            Score(_pairs([1.0, 2, 5, 3]), (("age", _pairs([4.0] * 4)),)),
            PEOPLE[:4],
            "covariates that follow from one another",
        ),
    ],
)
def test_what_cannot_be_compared_is_refused_by_name(made, people, message):
    x = np.random.default_rng(0).normal(size=(len(people), 20))
    with pytest.raises(InputError) as caught:
        _plan(made).prepare(x, people, Grid((20, 1, 1), np.eye(4)))
    assert message in str(caught.value)


@pytest.mark.parametrize(
    ("build", "message"),
    [
        (lambda: Score((("a", 1.0), ("a", 2.0))), "a subject with more than one score"),
        (lambda: Score((("a", np.nan), ("b", 2.0))), "not a finite number"),
        (lambda: Groups((), "a", "a"), "two groups of one name"),
    ],
)
def test_models_that_make_no_sense_are_refused(build, message):
    with pytest.raises(InputError, match=message):
        build()


@pytest.mark.parametrize("kind", ["groups", "score"])
def test_when_every_fold_is_empty_the_statistic_is_zero_and_p_is_one(kind):
    ready = prepare(kind, Threshold(height=1e3))
    outcome, test = ready.outcome(), ready.flip_test(19)
    assert (outcome.t, outcome.estimate, test.p, len(outcome.empty)) == (0, 0, 1, 12)
    made, _, _ = cross_fitted_result(ready, NAMES, 19, 0)
    assert (made.estimate, made.g) == (0, None)


def test_an_exchange_that_leaves_a_side_with_one_group_finds_nothing_there():
    fold_of = tuple(zip(PEOPLE[:6], "xyxyzz", strict=True))
    made = Groups(_pairs("aabbbb"), "a", "b")
    x = np.random.default_rng(0).normal(size=(6, 200))
    ready = _plan(made, Given(fold_of)).prepare(x, PEOPLE[:6], Grid((200, 1, 1), np.eye(4)))
    outcome = ready.outcome(np.array([0, 2, 1, 3, 4, 5]))  # both of group a are in fold x
    assert outcome.empty == ("x",)
    assert ready.flips(np.array([[0, 2, 1, 3, 4, 5]]))[0][0] == outcome.t


# -- noise ----------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", ["groups", "score"])
def test_with_nothing_there_the_exchange_keeps_its_level_and_the_ordinary_test_does_not(kind):
    n, n_studies = 20, 300
    people = [f"{i:02}" for i in range(n)]
    rules = [Threshold(p=0.01), Cluster(p=0.02), Strongest(5)]
    grid = Grid((16, 16, 1), np.eye(4))
    rng = np.random.default_rng(23)
    p, plain = [], []
    for study in range(n_studies):
        x = rng.normal(size=(n, 16, 16))
        if study % 2:
            x = ndimage.gaussian_filter(x, (0, 1.3, 1.3), mode="wrap")
        numbers = rng.permutation(n) % 2 * 1.0 if kind == "groups" else rng.normal(size=n)
        plan = Procedure(rules[study % 3], model=model(kind, numbers))
        ready = plan.prepare(x.reshape(n, -1).astype(np.float32), people, grid)
        p.append(ready.flip_test(19, study).p)
        values = np.array(ready.outcome().values)
        if not values.any():
            plain.append(1.0)
        elif kind == "groups":
            plain.append(stats.ttest_ind(values[numbers == 1], values[numbers == 0]).pvalue)
        else:
            plain.append(stats.pearsonr(values, numbers).pvalue)
    limit = 4 * np.sqrt(0.05 * 0.95 / n_studies)
    assert abs(np.mean(np.array(p) <= 0.05) - 0.05) < limit
    assert abs(np.mean(p) - 0.5) < 4 / np.sqrt(12 * n_studies) + 1 / 20
    assert np.mean(np.array(plain) <= 0.05) > 0.15
