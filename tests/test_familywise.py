"""Thresholds for whole maps: published numbers, brute force, and error rates on noise."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import ndimage, stats
from sequester.nodes import familywise
from sequester.nodes.errors import InputError
from sequester.nodes.familywise import (
    CONTROLS,
    FlipPlan,
    benjamini_hochberg,
    benjamini_hochberg_t,
    bonferroni,
    max_cluster_by_flips,
    max_cluster_extremes,
    max_t_by_flips,
    max_t_extremes,
)
from sequester.nodes.flips import random_signs
from sequester.nodes.groupmaps import group_map
from sequester.nodes.randomfield import (
    ClusterSizes,
    height_threshold,
    lattice,
    resels,
)
from sequester.nodes.smoothness import fwhm_of_stack
from sequester.nodes.space import Grid
from statsmodels.stats.multitest import multipletests

PEOPLE = [f"{i:02}" for i in range(12)]


def largest_cluster(above, connectivity):
    """With an image-processing library's labels."""
    shape = ndimage.generate_binary_structure(3, {6: 1, 18: 2, 26: 3}[connectivity])
    labels, n = ndimage.label(above, shape)
    return max(np.bincount(labels.ravel())[1:], default=0) if n else 0


@pytest.fixture
def stack():
    """Twelve rows, some data missing, over a mask with holes; and the grid."""
    rng = np.random.default_rng(8)
    inside = rng.random((8, 9, 7)) > 0.15
    noise = ndimage.gaussian_filter(rng.normal(size=(12, 8, 9, 7)), (0, 1, 1, 1))
    effects = noise[:, inside]
    effects[0, 5:9] = np.nan
    effects[2, 7:40] = 0
    effects[:5, 50] = 0
    effects[:, 60] = 0
    return effects, Grid((8, 9, 7), np.eye(4), inside)


def test_the_fifteen_p_values(checks):
    """Benjamini & Hochberg 1995, JRSS-B 57:289-300: 4 found, Bonferroni 3."""
    p = np.array(checks["bh1995"]["p"])
    critical = benjamini_hochberg(p, 0.05)
    assert critical == pytest.approx(0.05 * 4 / 15)
    assert (p <= critical).sum() == checks["bh1995"]["n_reject_bh"] == 4
    assert (p <= bonferroni(0.05, len(p))).sum() == checks["bh1995"]["n_reject_bonf"] == 3


@given(st.lists(st.floats(0, 1), min_size=1, max_size=40), st.floats(0.001, 0.49))
def test_found_is_what_the_reference_finds(values, q):
    p = np.array(values)
    expected = multipletests(p, q, method="fdr_bh")[0]
    assert ((p <= benjamini_hochberg(p, q)) & (p > 0)).tolist() == (expected & (p > 0)).tolist()
    with_gaps = np.concatenate([[np.nan], p, [np.nan]])
    assert benjamini_hochberg(with_gaps, q) == benjamini_hochberg(p, q)


def test_the_critical_t_finds_what_p_values_find():
    rng = np.random.default_rng(3)
    for df in (19.0, rng.choice([11.0, 15.0, 19.0], size=400)):
        t = stats.t.rvs(df, size=400, random_state=rng) + 3 * (np.arange(400) < 40)
        t[7], t[9] = np.inf, np.nan
        p = stats.t.sf(t, df)
        found = multipletests(np.delete(p, 9), 0.1, method="fdr_bh")[0]
        assert np.delete(t > benjamini_hochberg_t(t, df, 0.1), 9).tolist() == found.tolist()
        assert 20 < found.sum() < 60
    assert benjamini_hochberg_t(np.zeros(5), 19) == np.inf
    assert benjamini_hochberg(np.array([0.5, np.nan])) == 0


def test_four_rows_of_two_features(checks):
    """Enumerated: t 3.8729833, 1.4142136; family-wise p 4/16 and 8/16, one-sided 2/16 and 4/16."""
    X = np.array(checks["maxT"]["X"], dtype=float)
    t = group_map(X)
    assert t == pytest.approx(checks["maxT"]["t"])
    plan = FlipPlan(tuple("abcd"))
    assert plan.exact
    assert plan.total == 16
    both, one = max_t_extremes(X, plan, two_sided=True), max_t_extremes(X, plan)
    assert [plan.p(v, both) for v in t] == checks["maxT"]["fwe_p2"]
    assert [plan.p(v, one) for v in t] == checks["maxT"]["fwe_p1"]
    # Only what has p <= alpha exceeds the critical value, to the last flip that decides.
    for alpha, found in ((0.125, [True, False]), (0.124, [False, False]), (0.25, [True, True])):
        assert (t > max_t_by_flips(X, list("abcd"), alpha=alpha)).tolist() == found


@pytest.mark.parametrize("two_sided", [False, True])
@pytest.mark.parametrize("dtype", [np.float64, np.float32])
def test_largest_t_against_a_loop(stack, two_sided, dtype):
    effects, _ = stack
    effects = effects.astype(dtype)
    labels = [*PEOPLE[:10], PEOPLE[9], PEOPLE[11]]  # two rows flip as one
    plan = FlipPlan(tuple(labels), n_flips=10, seed=6)
    assert not plan.exact
    made = max_t_extremes(effects, plan, two_sided=two_sided)
    signs = random_signs(6, sorted(set(labels)), 0, 10)
    for flip in range(10):
        flipped = [effects[i] * signs[flip, plan.people.index(labels[i])] for i in range(12)]
        x = np.array(flipped, dtype=float)
        x[x == 0] = np.nan
        enough = np.isfinite(x).sum(axis=0) >= 10
        t = stats.ttest_1samp(x[:, enough], 0, nan_policy="omit").statistic
        expected = np.abs(t).max() if two_sided else t.max()
        assert made[flip] == pytest.approx(float(expected), rel=1e-12)


@pytest.mark.parametrize("connectivity", [6, 18, 26])
def test_largest_cluster_against_a_loop(stack, connectivity):
    effects, grid = stack
    plan = FlipPlan(tuple(PEOPLE), n_flips=40, seed=2)
    made = max_cluster_extremes(effects, plan, grid, 1.4, connectivity)
    for flip, signs in enumerate(random_signs(2, PEOPLE, 0, 40)):
        above = grid.filled(group_map(signs[:, None] * effects) > 1.4)
        assert made[flip] == largest_cluster(above, connectivity)
    assert len(set(made.tolist())) > 5
    least = max_cluster_by_flips(effects, PEOPLE, grid, 1.4, connectivity, 40, 2, alpha=0.2)
    assert plan.p(least, made) <= 0.2 < plan.p(least - 1, made)


def test_nothing_depends_on_blocks_and_the_company_of_rows(stack, monkeypatch):
    effects, grid = stack
    plan = FlipPlan(tuple(PEOPLE), n_flips=70)
    t = max_t_extremes(effects, plan)
    sizes = max_cluster_extremes(effects, plan, grid, 1.6)
    monkeypatch.setattr(familywise, "_BLOCK", 17)
    monkeypatch.setattr(familywise, "_FLIPS_AT_ONCE", 9)
    monkeypatch.setattr(familywise, "_MAPS_AT_ONCE", 31)
    assert max_t_extremes(effects, plan).tobytes() == t.tobytes()
    assert (max_cluster_extremes(effects, plan, grid, 1.6) == sizes).all()
    again = max_t_extremes(effects, FlipPlan(tuple(PEOPLE), n_flips=30))
    assert (again == t[:30]).all()


def test_all_flips_of_a_flip_are_all_flips(stack):
    effects, grid = stack
    x, labels = effects[:7], PEOPLE[:7]
    flipped = x * np.array([1, -1, -1, 1, -1, 1, 1])[:, None]
    assert max_t_by_flips(flipped, labels) == pytest.approx(max_t_by_flips(x, labels), rel=1e-12)
    sizes = [max_cluster_by_flips(some, labels, grid, 2.0) for some in (x, flipped)]
    assert sizes[0] == sizes[1]


def test_units_and_extreme_values_do_no_harm(stack):
    effects, _ = stack
    plan = FlipPlan(tuple(PEOPLE), n_flips=30)
    expected = max_t_extremes(effects, plan)
    assert max_t_extremes(effects * 1e-60, plan) == pytest.approx(expected, rel=1e-9)
    wild = effects.copy()
    wild[3, 20] = 1e200  # its square is no number: the feature is left out
    rest = np.delete(effects, 20, axis=1)
    assert max_t_extremes(wild, plan) == pytest.approx(max_t_extremes(rest, plan), rel=1e-12)
    equal = np.column_stack([effects[:, 0], np.ones(12)])
    assert max_t_extremes(equal, FlipPlan(tuple(["a"] * 12)))[0] == np.inf


@given(
    st.lists(st.integers(0, 12), min_size=1, max_size=60),
    st.sampled_from([0.05, 0.1, 1 / 3]),
    st.booleans(),
)
def test_exceeding_the_critical_value_is_a_p_of_at_most_alpha(values, alpha, exact):
    n = 5 if exact else 6
    plan = FlipPlan(tuple("abcdef"[:n]), n_flips=40)
    extremes = np.resize(np.array(values, dtype=float), plan.total)
    critical = plan.critical(extremes, alpha)
    for value in range(-1, 14):
        assert (value > critical) == (plan.p(value, extremes) <= alpha + 1e-12)


def test_what_is_refused(stack):
    effects, grid = stack
    with pytest.raises(InputError, match=r"got 20, so that .* 0\.05; raise n_flips"):
        max_t_by_flips(effects, PEOPLE, n_flips=19, alpha=0.04)
    with pytest.raises(InputError, match=r"got 16, .* 0\.0625; 4 labels have no more"):
        max_t_by_flips(effects[:4], PEOPLE[:4])
    with pytest.raises(InputError, match="too few flips: expected at least 1, got 0"):
        max_t_by_flips(effects, PEOPLE, n_flips=0)
    with pytest.raises(InputError, match="height out of range: expected height > 0, got 0"):
        max_cluster_by_flips(effects, PEOPLE, grid, 0.0)
    with pytest.raises(InputError, match="alpha out of range"):
        bonferroni(0.0, 4)
    with pytest.raises(ValueError, match="for 11 labels"):
        max_t_by_flips(effects, PEOPLE[:11])


def test_every_control_says_what_it_rests_on():
    for control in CONTROLS.values():
        assert control.error in control.describe(0.05)
        assert "at most 0.05, provided " + control.assumes in control.describe(0.05)
    assert "share of false voxels" in CONTROLS["benjamini-hochberg"].describe(0.1)


def test_false_discoveries_among_real_ones():
    """Independent features, a quarter of them real: the rate is q times the share of the others."""
    rng = np.random.default_rng(12)
    n_sets, q = 400, 0.2
    share = np.empty(n_sets)
    for i in range(n_sets):
        x = rng.normal(size=(16, 200)) + (np.arange(200) < 50)
        t = group_map(x)
        found = t > benjamini_hochberg_t(t, 15, q)
        share[i] = found[50:].sum() / max(1, found.sum())
        assert found[:50].sum() > 20
    assert share.mean() == pytest.approx(0.75 * q, abs=4 * share.std() / np.sqrt(n_sets))


def test_error_rates_on_smooth_noise():
    """Chance of any false finding in 500 data sets of 16 rows: .05, or less where bounds are."""
    rng = np.random.default_rng(11)
    shape, n, n_sets, alpha = (12, 12, 8), 16, 500, 0.05
    grid = Grid(shape, np.eye(4))
    people = [f"{i:02}" for i in range(n)]
    df, cells = n - 1, lattice(grid)
    forming = float(stats.t.isf(0.005, df))
    false = dict.fromkeys(("plain", "max-t", "max-cluster", *CONTROLS), 0)
    for i in range(n_sets):
        noise = rng.normal(size=(n, *(side + 6 for side in shape)))
        smooth = ndimage.gaussian_filter(noise, (0, *[3 / 8**0.5 / np.log(2) ** 0.5] * 3))
        x = smooth[:, 3:-3, 3:-3, 3:-3].reshape(n, -1)
        t = group_map(x)
        fwhm = fwhm_of_stack(x, grid)
        largest = largest_cluster(grid.filled(t > forming), 18)
        sizes = ClusterSizes(grid.n_features, tuple(fwhm), forming, df)
        limits = {
            "plain": stats.t.isf(alpha, df),
            "bonferroni": stats.t.isf(bonferroni(alpha, t.size), df),
            "benjamini-hochberg": benjamini_hochberg_t(t, df, alpha),
            "random-field": height_threshold(resels(cells, fwhm), df, alpha),
            "max-t": max_t_by_flips(x, people, 99, i, alpha),
        }
        for name, limit in limits.items():
            false[name] += int(t.max() > limit)
        false["cluster-extent"] += int(largest >= sizes.critical_size(alpha))
        smallest = max_cluster_by_flips(x, people, grid, forming, 18, 99, i, alpha)
        false["max-cluster"] += int(largest >= smallest)
    rate = {name: count / n_sets for name, count in false.items()}
    error = 4 * np.sqrt(alpha * (1 - alpha) / n_sets)
    assert rate["max-t"] == pytest.approx(alpha, abs=error), rate
    assert max(rate[name] for name in CONTROLS) <= alpha + error, rate
    assert rate["max-cluster"] >= alpha - error, rate
    assert rate["bonferroni"] < rate["max-t"], rate
    assert rate["plain"] > 0.9, rate
