"""Values in a region, tests and intervals against published numbers; what results may say."""

from __future__ import annotations

import dataclasses
import itertools
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from planting import a_grid
from scipy import stats
from sequester.nodes.errors import InputError
from sequester.nodes.fixed import fixed_region_result
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.groupmaps import Missing
from sequester.nodes.heldout import cross_fitted_result
from sequester.nodes.images import write_map
from sequester.nodes.interfaces import ChooseByFold, Extract
from sequester.nodes.masks import PeakSphere, Strongest, Threshold
from sequester.nodes.procedure import READ_BY, Prepared, Procedure
from sequester.nodes.results import exploratory_result, p_text
from sequester.nodes.roi import (
    SUMMARIES,
    block_values,
    count_at_least,
    exchange_p,
    first_component,
    flip_interval,
    fold_interval,
    holm,
    jackknife_interval,
    one_sample_t,
    per_person,
    region_mean,
    region_value,
    sign_flip_t,
    small_sample_factor,
    studentised,
)
from sequester.nodes.rules import Branch, Inputs, Leaf
from sequester.nodes.space import Grid
from sequester.nodes.touch import Touch
from sklearn.decomposition import TruncatedSVD
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


SEEDS = st.integers(0, 2**32 - 1)


@given(st.integers(1, 40), SEEDS)
def test_median_and_weighted_mean_are_numpys_over_the_features_with_data(n, seed):
    rng = np.random.default_rng(seed)
    x = rng.standard_normal(n).astype(np.float32)
    there = rng.uniform(size=n) < 0.7
    weights = np.where(rng.uniform(size=n) < 0.3, 0, rng.uniform(size=n))
    full = x.astype(float)[there]
    median, coverage = region_value(x, there, "median")
    value, share = region_value(x, there, "weighted", weights)
    if there.any():
        assert (median, coverage) == (np.median(full), there.mean())
    else:
        assert (median, coverage) == (0, 0)
    if weights[there].any():
        assert value == pytest.approx(np.average(full, weights=weights[there]), rel=1e-9, abs=1e-12)
        assert share == pytest.approx(weights[there].sum() / weights.sum(), rel=1e-9)
    else:
        assert (value, share) == (0, 0)
    # Equal weights are a mean, and only their ratios count.
    mean, _ = region_value(x, there)
    assert region_value(x, there, "weighted", np.full(n, 0.3))[0] == pytest.approx(mean, abs=1e-12)
    again = region_value(x, there, "weighted", 8 * weights)
    assert again == pytest.approx((value, share), rel=1e-12, abs=1e-15)


@given(st.integers(1, 6), st.integers(2, 40), SEEDS)
def test_scores_are_those_of_a_singular_value_decomposition(n_maps, n, seed):
    rng = np.random.default_rng(seed)
    maps = rng.uniform(0.2, 2, (n_maps, 1)) * rng.standard_normal(n) + 0.2 * rng.standard_normal(
        (n_maps, n)
    )
    maps += 0.5
    there = rng.uniform(size=maps.shape) < 0.95
    kept = maps[:, there.all(axis=0)]
    scores = first_component(np.where(there, maps, 99), there)
    if not kept.size:
        assert not scores.any()
        return
    u, s, v = np.linalg.svd(kept, full_matrices=False)
    expected = u[:, 0] * s[0] * np.sign(v[0].sum()) / np.sqrt(kept.shape[1])
    np.testing.assert_allclose(scores, expected, atol=1e-9)
    if min(kept.shape) > 1:
        theirs = TruncatedSVD(1, algorithm="arpack", random_state=0).fit_transform(kept)[:, 0]
        np.testing.assert_allclose(
            np.abs(scores), np.abs(theirs) / np.sqrt(kept.shape[1]), atol=1e-9
        )


@given(st.integers(1, 5), st.integers(1, 30), st.sampled_from([1e-150, 1.0, 1e150]), SEEDS)
def test_scores_follow_signs_and_order_of_the_maps_to_the_last_bit(n_maps, n, unit, seed):
    rng = np.random.default_rng(seed)
    maps = rng.standard_normal((n_maps, n)) * unit
    maps[rng.uniform(size=maps.shape) < 0.2] = 0
    if n_maps > 2:
        maps[1] = -maps[0]  # no order of the two but by their signs
    scores = first_component(maps)
    assert np.isfinite(scores).all()
    order = rng.permutation(n_maps)
    assert (first_component(maps[order]) == scores[order]).all()
    assert (first_component(-maps) == -scores).all()
    for summary in SUMMARIES:
        value, coverage = region_value(maps[0], None, summary, np.ones(n))
        assert region_value(-maps[0], None, summary, np.ones(n)) == (-value, coverage)


def test_scores_of_maps_whose_component_can_be_told_by_hand():
    assert first_component(np.full((1, 7), 0.1)) == pytest.approx([0.1], rel=1e-15)
    assert first_component(np.full((3, 7), -0.1)) == pytest.approx([-0.1] * 3, rel=1e-15)
    # One map: the root mean square, with the sign of the mean.
    for x in ([3.0, 4.0, -1.0], [-3.0, -4.0, 1.0]):
        rms = np.sqrt(26 / 3) * np.sign(sum(x))
        assert first_component(np.array([x])) == pytest.approx([rms], rel=1e-14)
        assert region_value(np.array(x), None, "component") == pytest.approx((rms, 1), rel=1e-14)
    # Weights that sum to 0: the first that is not 0 is positive.
    assert first_component(np.array([[0.0, -2.0, 2.0]])) == pytest.approx([-np.sqrt(8 / 3)])
    # Not centred: maps that differ in height alone have their heights for scores.
    assert first_component(np.outer([1.0, 2.0, -4.0], np.ones(9))) == pytest.approx([1, 2, -4])
    for nothing in (np.zeros((2, 3)), np.zeros((2, 0))):
        assert first_component(nothing).tolist() == [0, 0]
    assert first_component(np.ones((2, 2)), np.array([[True, False], [False, True]])).any() == 0


def test_a_block_is_read_over_what_all_its_maps_have():
    maps = np.array([[1.0, 2.0, 3.0, 4.0], [2.0, 4.0, 9.0, 8.0]])
    there = np.array([[True, True, True, True], [True, True, False, True]])
    values, coverage = block_values(maps, there, "component")
    assert values == pytest.approx(np.array([1, 2]) * np.sqrt(21 / 3))
    assert coverage.tolist() == [0.75, 0.75]
    values, coverage = block_values(maps, there, "median")
    assert (values.tolist(), coverage.tolist()) == ([2.5, 4.0], [1.0, 0.75])
    with pytest.raises(ValueError, match="summary is one of mean, median, weighted, component"):
        block_values(maps, there, "mode")
    with pytest.raises(ValueError, match="needs the weights"):
        region_value(maps[0], None, "weighted")


# -- values from files -----------------------------------------------------------------------

GEOMETRY = a_grid((5, 5, 5), 2.0)


@pytest.fixture
def files(tmp_path: Path) -> list[str]:
    """Nine maps, one of them in float64, each without data somewhere."""
    rng = np.random.default_rng(5)
    made = []
    for i in range(9):
        data = rng.normal(0.5, 1, GEOMETRY.shape)
        data[rng.uniform(size=data.shape) < 0.1] = np.nan
        kind = np.float64 if i == 4 else np.float32
        made.append(str(write_map(tmp_path / f"map{i}.nii", data.astype(kind), GEOMETRY)))
    return made


def run(interface: type, folder: Path, **inputs: Any) -> Any:
    work = folder / f"run{len(list(folder.iterdir()))}"
    work.mkdir()
    return interface(**inputs).run(cwd=str(work)).outputs


def extracted(folder: Path, **inputs: Any) -> Any:
    return run(Extract, folder, clearance="a test's", **inputs)


def mask_file(folder: Path, mask: Any) -> str:
    path = folder / f"mask{len(list(folder.iterdir()))}.nii"
    return str(write_map(path, np.asarray(mask, dtype=np.float32), GEOMETRY))


@pytest.mark.parametrize("summary", READ_BY)
@pytest.mark.parametrize("tail", ["positive", "negative"])
@pytest.mark.parametrize(
    ("rule", "labels", "scheme"),
    [
        (Threshold(p=0.3), list("ihgfedcba"), LeaveOneOut()),
        (Strongest(fraction=0.1), list("abcabdcea"), LeaveOneOut()),
        (PeakSphere(4.0), list("aabbccdde"), KFold(2)),
    ],
)
def test_extracted_values_are_the_procedures_own_to_the_last_bit(
    rule, labels, scheme, summary, tail, files, tmp_path
):
    plan = Procedure(rule, scheme, tail, missing=Missing(min_fraction=0.5), summary=summary)
    chosen = run(ChooseByFold, tmp_path, in_files=files, labels=labels, procedure=plan)
    read = extracted(
        tmp_path,
        in_files=files,
        labels=labels,
        mask_files=chosen.row_masks,
        summary=summary,
        missing=plan.missing,
    )
    prepared = Prepared(
        plan,
        np.stack([_load(path) for path in files]),
        labels,
        Grid(GEOMETRY.shape, GEOMETRY.affine),
        files,
    )
    outcome = prepared.outcome()
    assert len(set(outcome.values)) > 7
    assert tuple(read.values) == outcome.values
    assert tuple(read.coverage) == outcome.coverage


def _load(path: str) -> np.ndarray:
    return np.asarray(nib.load(path).dataobj, dtype=np.float64).ravel()


def test_a_weighted_mean_takes_its_weights_from_the_mask(files, tmp_path):
    weights = np.random.default_rng(1).uniform(size=GEOMETRY.shape)
    weights[:2] = 0
    read = extracted(
        tmp_path,
        in_files=files,
        labels=list("abcdefghi"),
        mask_files=[mask_file(tmp_path, weights)],
        summary="weighted",
    )
    stored = weights.astype(np.float32).ravel().astype(float)
    for path, value, share in zip(files, read.values, read.coverage, strict=True):
        x = _load(path)
        there = np.isfinite(x) & (stored > 0)
        assert value == pytest.approx(np.average(x[there], weights=stored[there]), rel=1e-12)
        assert share == pytest.approx(stored[there].sum() / stored.sum(), rel=1e-12)
    assert read.sizes == [75] * 9


@pytest.mark.parametrize("bad", [np.nan, -0.5, np.inf])
def test_what_cannot_be_a_weight_is_refused(bad, files, tmp_path):
    weights = np.ones(GEOMETRY.shape)
    weights[0, 0, :2] = bad
    inputs = {
        "in_files": files,
        "labels": list("abcdefghi"),
        "mask_files": [mask_file(tmp_path, weights)],
    }
    with pytest.raises(InputError, match=r"cannot be weights .*mask.*: expected no .* got 2 such"):
        extracted(tmp_path, summary="weighted", **inputs)
    extracted(tmp_path, summary="mean", **inputs)


def test_a_component_is_that_of_the_maps_of_one_label_in_one_mask(files, tmp_path):
    first = np.zeros(GEOMETRY.shape)
    first[1:4] = 1
    second = np.ones(GEOMETRY.shape) - first
    one, other = mask_file(tmp_path, first), mask_file(tmp_path, second)
    read = extracted(
        tmp_path,
        in_files=files[:5],
        labels=list("abaab"),
        mask_files=[one, one, one, other, other],
        summary="component",
    )
    for rows, mask in (([0, 2], first), ([1], first), ([3], second), ([4], second)):
        maps = np.stack([_load(files[row]) for row in rows])[:, mask.ravel() > 0]
        kept = maps[:, np.isfinite(maps).all(axis=0)]
        u, s, v = np.linalg.svd(kept, full_matrices=False)
        scores = u[:, 0] * s[0] * np.sign(v[0].sum()) / np.sqrt(kept.shape[1])
        assert [read.values[row] for row in rows] == pytest.approx(scores, rel=1e-9)
        assert [read.coverage[row] for row in rows] == [kept.shape[1] / maps.shape[1]] * len(rows)


def test_maps_with_too_little_data_are_all_named_with_their_coverage(files, tmp_path):
    mask = np.zeros(GEOMETRY.shape)
    mask[2] = 1
    inputs = {
        "in_files": files,
        "labels": list("abcdefghi"),
        "mask_files": [mask_file(tmp_path, mask)],
    }
    shares = extracted(tmp_path, **inputs).coverage
    least = sorted(shares)[6]  # met by three: a share of just that is enough
    short = [f"{x} {s:.3g}" for x, s in zip("abcdefghi", shares, strict=True) if s < least]
    assert len(short) > 5
    with pytest.raises(InputError) as caught:
        extracted(tmp_path, min_coverage=least, **inputs)
    assert str(caught.value) == (
        f"{len(short)} of 9 maps have too little data in their masks: "
        f"expected coverage of at least {least:g}, "
        f"got {', '.join(short[:5])} and {len(short) - 5} more; "
        "leave them out with an exclude_reason, or lower min_coverage"
    )
    # An empty mask has nothing to cover.
    inputs["mask_files"] = [mask_file(tmp_path, 0 * mask)]
    assert extracted(tmp_path, min_coverage=0.9, **inputs).values == [0.0] * 9


def test_labels_and_maps_must_pair_up(files, tmp_path):
    with pytest.raises(InputError, match="labels and maps do not pair up: got 1, 2"):
        extracted(tmp_path, in_files=files[:2], labels=["a"], mask_files=files[:1])


@pytest.mark.parametrize(
    ("settings_", "arriving", "together"),
    [
        ({"summary": "mean", "labels": list("aba")}, (), [{0}, {1}, {2}]),
        ({"summary": "component", "labels": list("aba")}, (), [{0, 2}, {1}, {0, 2}]),
        ({"summary": "mean", "labels": list("aba")}, ("summary",), [{0, 2}, {1}, {0, 2}]),
        ({"summary": "component"}, ("labels",), [{0, 1, 2}] * 3),
        # What arrives takes the place of what was typed.
        ({"summary": "component", "labels": list("abc")}, ("labels",), [{0, 1, 2}] * 3),
        ({"summary": "component", "labels": list("ab")}, (), [{0, 1, 2}] * 3),
    ],
)
def test_a_component_touches_the_other_maps_of_its_label(settings_, arriving, together):
    masks = Branch([Leaf(Touch(values=8 << i)) for i in range(3)])
    data = Branch([Leaf(Touch(values=1 << i)) for i in range(3)])
    inputs = Inputs(
        {"mask_files": masks, "in_files": data}, settings_, "extract", frozenset(arriving)
    )
    for output in ("values", "coverage"):
        tree = Extract.touch_rules[output](inputs)
        assert isinstance(tree, Branch)
        for child, rows in zip(tree.children, together, strict=True):
            assert isinstance(child, Leaf)
            assert child.touch.values == sum(9 << row for row in rows)
            # The marks by which a statistic is judged are those of the meetings.
            marks = {(mark.where, mark.mask, mark.data) for mark in child.touch.extractions}
            assert marks == {(f"extract[{row}]", 8 << row, 1 << row) for row in rows}


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
    assert rules[0] == "all voxels with t > 3"
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
    assert "In 12 of 12 folds the rule found nothing; there the value counts as 0, so" in (
        made.sentence
    )


def test_an_unknown_interval_is_refused():
    with pytest.raises(
        InputError, match="unknown interval: expected one of flips, jackknife, folds, got 't'"
    ):
        cross_fitted_result(ready(Procedure(Threshold(p=0.01))), NAMES, 19, 0, "t")


def test_a_fixed_region_has_students_t(checks):
    difference = np.subtract(checks["sleep"]["g2"], checks["sleep"]["g1"])
    made = fixed_region_result(difference, ("hollow", "a-priori", "ring"), [31], [1.0] * 9 + [0.5])
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


def test_interval_is_not_narrow_where_flips_find_nothing():
    """A strict rule and a real effect: the region is found, and hardly ever under flips.

    Until this was mended the quantile over all flips, most of them empty, covered .35.
    """
    rng, grid = np.random.default_rng(6), Grid((60, 1, 1), np.eye(4))
    truth = np.where(np.arange(60) < 6, 1.2, 0.0)
    labels, covered, empty = [f"{i:02}" for i in range(14)], [], []
    for _ in range(60):
        effects = truth + rng.standard_normal((14, 60))
        ready = Procedure(Threshold(p=0.0005)).prepare(effects, labels, grid)
        made, outcome, test = cross_fitted_result(ready, ("a", "b", "c"), 99, 1)
        target = np.mean([truth[mask].mean() if mask.any() else 0 for mask in ready.masks()])
        if outcome.empty:
            assert made.interval is None
            continue
        people = ready.per_person(outcome.values)
        ordinary = one_sample_t(people).interval
        assert made.interval.high - made.interval.low >= ordinary.high - ordinary.low - 1e-12
        covered.append(made.interval.low <= target <= made.interval.high)
        empty.append(test.noise_empty / 14)
    assert np.mean(empty) > 0.5, "most folds of most flips find nothing"
    assert np.mean(covered) > 0.95 - 4 * np.sqrt(0.95 * 0.05 / 60)
