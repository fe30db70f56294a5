"""The whole procedure against a naive float64 loop over folds, SciPy's t-test and ndimage.

Under the data's own signs and under flips; with missing data, several rows a person, k folds,
both tails, every rule and every summary. Then what must not matter (held-out data, order,
blocks), the five-subject example by enumeration, and the level of the test when nothing is
there.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import ndimage, stats
from sequester.nodes import foldstack, groupmaps
from sequester.nodes import procedure as procedure_module
from sequester.nodes.errors import EmptyFoldError, InputError
from sequester.nodes.flips import all_signs, random_signs
from sequester.nodes.foldnull import dice, plain_t_false_positives
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.groupmaps import Missing
from sequester.nodes.masks import Cluster, PeakSphere, Strongest, Threshold
from sequester.nodes.procedure import Prepared, Procedure
from sequester.nodes.space import Grid

# -- the naive loop -------------------------------------------------------------------------


@dataclass
class Naive:
    masks: list[np.ndarray]
    values: np.ndarray  # one per row, in the rows' order
    people: np.ndarray  # one per label, sorted
    empty: list[int]
    replaced: list[int]

    @property
    def t(self) -> float:
        """Studentised mean over people; 0 when every value is 0."""
        return float(stats.ttest_1samp(self.people, 0).statistic) if self.people.any() else 0.0


def _naive_mask(rule, t, mean, n, grid) -> np.ndarray:
    if isinstance(rule, Strongest | PeakSphere):
        ranked = t if rule.map_kind == "t" else mean
        order = [i for i in np.argsort(-ranked, kind="stable") if not np.isnan(ranked[i])]
        if isinstance(rule, Strongest):
            k = rule.k or max(1, int(np.ceil(rule.fraction * len(order) - 1e-9)))
            return np.isin(np.arange(len(t)), order[:k])
        if not order:
            return np.zeros(len(t), bool)
        mm = grid.coordinates()
        return np.sqrt(np.square(mm - mm[order[0]]).sum(axis=1)) < rule.radius + 1e-6
    with np.errstate(invalid="ignore"):
        limit = rule.height if rule.p is None else stats.t.isf(rule.p, np.maximum(n, 2) - 1)
        above = t > limit
    if not isinstance(rule, Cluster):
        return above
    rank = {6: 1, 18: 2, 26: 3}[rule.connectivity]
    labels, n_clusters = ndimage.label(
        grid.filled(above), ndimage.generate_binary_structure(3, rank)
    )
    of_feature = labels.ravel()[grid.voxels]
    clusters = [np.flatnonzero(of_feature == c + 1) for c in range(n_clusters)]
    clusters = sorted((c for c in clusters if len(c) >= rule.min_size), key=min)
    if not clusters:
        return np.zeros(len(t), bool)
    if rule.pick == "all":
        kept = np.concatenate(clusters)
    elif rule.pick == "largest":
        kept = max(clusters, key=len)
    elif rule.pick == "peak":
        kept = max(clusters, key=lambda c: t[c].max())
    else:
        apart = np.linalg.norm(grid.coordinates() - rule.near, axis=1)
        kept = min(clusters, key=lambda c: apart[c].min())
    return np.isin(np.arange(len(t)), kept)


def naive(procedure: Procedure, effects, labels, grid, signs=None) -> Naive:
    """Everything from its definition, a fold and a row at a time."""
    people = sorted(set(labels))
    sign = dict(zip(people, np.ones(len(people)) if signs is None else signs, strict=True))
    x = effects.astype(np.float64)
    x[~np.isfinite(x)] = np.nan
    if procedure.missing.zeros:
        x[x == 0] = np.nan
    x *= np.array([sign[label] for label in labels])[:, None]
    direction = -1 if procedure.tail == "negative" else 1
    made = Naive([], np.zeros(len(x)), np.zeros(0), [], [])
    for k, fold in enumerate(procedure.scheme.folds(labels)):
        rows = direction * x[list(fold.selection)]
        n = np.isfinite(rows).sum(axis=0)
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # features without data
            if np.isnan(rows).any():  # masked: what nan_policy="omit" gives, but quickly
                masked = stats.mstats.ttest_1samp(np.ma.masked_invalid(rows), 0, axis=0)
                t = np.ma.filled(masked.statistic, np.nan)
            else:
                t = np.array(stats.ttest_1samp(rows, 0, axis=0).statistic)
            mean = np.nanmean(rows, axis=0)
        few = n < max(2, np.ceil(procedure.missing.min_fraction * len(rows) - 1e-9))
        t[few], mean[few] = np.nan, np.nan
        mask = _naive_mask(procedure.rule, t, mean, n, grid)
        if not mask.any() and procedure.on_empty == "strongest":
            mask = _naive_mask(Strongest(procedure.k), t, mean, n, grid)
            if mask.any():
                made.replaced.append(k)
        if not mask.any():
            made.empty.append(k)
        made.masks.append(mask)
        for row in fold.held_out:
            inside = x[row, mask]
            inside = inside[~np.isnan(inside)]
            if len(inside) and procedure.summary != "component":
                made.values[row] = {"mean": np.mean, "median": np.median}[procedure.summary](inside)
        if procedure.summary == "component":
            for label in {labels[row] for row in fold.held_out}:
                block = [row for row in fold.held_out if labels[row] == label]
                made.values[block] = _naive_component(x[np.ix_(block, np.flatnonzero(mask))])
    owner = np.array(labels)
    made.people = np.array([direction * made.values[owner == p].mean() for p in people])
    return made


def _naive_component(maps: np.ndarray) -> np.ndarray:
    """The block's scores by a singular value decomposition."""
    kept = maps[:, ~np.isnan(maps).any(axis=0)]
    if not kept.size:
        return np.zeros(len(maps))
    u, s, v = np.linalg.svd(kept, full_matrices=False)
    return u[:, 0] * s[0] * np.sign(v[0].sum()) / np.sqrt(kept.shape[1])


# -- studies --------------------------------------------------------------------------------

SHAPE = (6, 7, 5)


@dataclass
class Study:
    effects: np.ndarray
    labels: list[str]
    names: list[str]
    grid: Grid
    scheme: LeaveOneOut | KFold
    missing: Missing

    def prepare(self, rule, **more) -> Prepared:
        plan = Procedure(rule, scheme=self.scheme, missing=self.missing, **more)
        return plan.prepare(self.effects, self.labels, self.grid, self.names)

    def naive(self, ready: Prepared, signs=None) -> Naive:
        return naive(ready.procedure, self.effects, self.labels, self.grid, signs)


def smooth_effects(n: int, grid: Grid, seed: int) -> np.ndarray:
    """float32 maps: smooth noise, and two blobs of either sign."""
    rng = np.random.default_rng(seed)
    truth = np.zeros(SHAPE)
    truth[:3, 1:4, 1:4] = 0.6
    truth[3:, 3:, 1:4] = -0.6
    maps = [truth + 1.6 * ndimage.gaussian_filter(rng.normal(size=SHAPE), 0.7) for _ in range(n)]
    return np.stack([m.ravel()[grid.voxels] for m in maps]).astype(np.float32)


def study(kind: str, seed: int = 0) -> Study:
    rng = np.random.default_rng(seed)
    grid = Grid(SHAPE, np.diag([2.0, 2.5, 3.0, 1.0]), rng.uniform(size=SHAPE) < 0.9)
    labels = [f"{i:02}" for i in range(10)]
    if "rows" in kind:  # several rows for some people, in no order
        labels = [str(label) for label in rng.permutation(labels + labels[:4] + labels[:1])]
    effects = smooth_effects(len(labels), grid, seed)
    names = [f"map{i}" for i in range(len(labels))]
    missing = Missing(min_fraction=0.7)
    if "holes" in kind:
        for value in (0.0, np.nan, np.inf):
            effects[rng.uniform(size=effects.shape) < rng.uniform(0, 0.12, grid.n_features)] = value
        effects[:, rng.uniform(size=grid.n_features) < 0.05] = np.nan
    if "zeros kept" in kind:
        missing = Missing(zeros=False, min_fraction=0.7)
    scheme = KFold(4, seed=5) if "folds" in kind else LeaveOneOut()
    return Study(effects, labels, names, grid, scheme, missing)


KINDS = ["plain", "rows", "holes", "4 folds", "rows, holes, zeros kept, 4 folds"]
NEAR = (3.0, 8.0, 6.5)
RULES = {
    "height": Threshold(height=2.0),
    "p": Threshold(p=0.05),
    "strongest": Strongest(7),
    "strongest mean": Strongest(7, "mean"),
    "fraction": Strongest(fraction=0.04),
    "fraction mean": Strongest(fraction=0.04, map_kind="mean"),
    "peak sphere": PeakSphere(3.6),
    "peak sphere mean": PeakSphere(3.6, "mean"),
    **{
        f"{pick} {connectivity}": Cluster(
            p=0.1,
            connectivity=connectivity,
            min_size=2,
            pick=pick,
            near=NEAR if pick == "nearest" else None,
        )
        for pick in ("largest", "peak", "nearest", "all")
        for connectivity in (6, 18, 26)
    },
}


def assert_equal(ready: Prepared, expected: Naive, signs=None) -> None:
    """Values, statistic, sizes, empty folds and overlap are those of the naive loop."""
    outcome = ready.outcome(signs)
    np.testing.assert_allclose(outcome.values, expected.values, rtol=1e-6, atol=1e-7)
    assert outcome.sizes == tuple(int(mask.sum()) for mask in expected.masks)
    assert outcome.t == pytest.approx(expected.t, rel=1e-6, abs=1e-9)
    direction = -1 if ready.procedure.tail == "negative" else 1
    assert direction * outcome.estimate == pytest.approx(expected.people.mean(), rel=1e-6, abs=1e-7)
    names = [fold.name for fold in ready.folds]
    assert outcome.empty == tuple(names[k] for k in expected.empty)
    assert outcome.replaced == tuple(names[k] for k in expected.replaced)
    n = len(expected.masks)
    pairs = [dice(expected.masks[i], expected.masks[j]) for i in range(n) for j in range(i)]
    known = [d for d in pairs if not np.isnan(d)]
    assert outcome.dice == pytest.approx(np.mean(known) if known else np.nan, nan_ok=True, rel=1e-6)


@pytest.mark.parametrize("tail", ["positive", "negative"])
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("rule", RULES)
def test_masks_and_values_equal_a_naive_loop_under_every_sign(rule, kind, tail):
    given_study = study(kind)
    ready = given_study.prepare(RULES[rule], tail=tail)
    signs = random_signs(11, ready.people, 0, 2)
    t, overlap, n_empty = ready.flips(signs)
    expected = given_study.naive(ready)
    assert sum(mask.any() for mask in expected.masks) > len(expected.masks) / 2
    for one, other in zip(ready.masks(), expected.masks, strict=True):
        assert one.dtype == bool
        assert (one == other).all()
    assert_equal(ready, expected)
    for i, flip in enumerate(signs):
        expected = given_study.naive(ready, flip)
        assert_equal(ready, expected, flip)
        assert t[i] == pytest.approx(expected.t, rel=1e-6, abs=1e-9)
        assert n_empty[i] == len(expected.empty)
        np.testing.assert_equal(overlap[i], ready.outcome(flip).dice)
        # The same from data that were flipped beforehand, with the masks to compare.
        of_row = dict(zip(ready.people, flip, strict=True))
        turned = given_study.effects * np.float32([[of_row[p]] for p in given_study.labels])
        again = ready.procedure.prepare(
            turned, given_study.labels, given_study.grid, given_study.names
        )
        for one, other in zip(again.masks(), expected.masks, strict=True):
            assert (one == other).all()


@pytest.mark.parametrize("tail", ["positive", "negative"])
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("rule", ["height", "fraction", "peak sphere", "largest 18"])
@pytest.mark.parametrize("summary", ["median", "component"])
def test_other_summaries_equal_a_naive_loop_under_every_sign(summary, rule, kind, tail):
    given_study = study(kind)
    ready = given_study.prepare(RULES[rule], tail=tail, summary=summary)
    signs = random_signs(12, ready.people, 0, 4)
    t, _, _ = ready.flips(signs)
    assert_equal(ready, given_study.naive(ready))
    for i, flip in enumerate(signs):
        expected = given_study.naive(ready, flip)
        assert_equal(ready, expected, flip)
        assert t[i] == pytest.approx(expected.t, rel=1e-6, abs=1e-9)


@given(
    rule=st.sampled_from(sorted(RULES)),
    kind=st.sampled_from(KINDS),
    summary=st.sampled_from(["mean", "median", "component"]),
    tail=st.sampled_from(["positive", "negative"]),
    seed=st.integers(0, 2**32 - 1),
)
@settings(max_examples=60)
def test_values_change_sign_with_everything_and_with_nothing_less(rule, kind, summary, tail, seed):
    other = {"positive": "negative", "negative": "positive"}[tail]
    made = study(kind)
    ready = made.prepare(RULES[rule], tail=tail, summary=summary)
    made.effects = -made.effects
    turned = made.prepare(RULES[rule], tail=other, summary=summary)
    flip = random_signs(seed, ready.people, 0, 1)[0]
    for signs in (None, flip):
        one, opposite = ready.outcome(signs), turned.outcome(signs)
        assert opposite.values == tuple(-value for value in one.values)
        assert (opposite.t, opposite.coverage, opposite.sizes) == (one.t, one.coverage, one.sizes)
    # Flipped signs of the data and flipped data are the same, bit for bit.
    of_row = dict(zip(ready.people, flip, strict=True))
    made.effects = -made.effects * np.float32([[of_row[p]] for p in made.labels])
    again = made.prepare(RULES[rule], tail=tail, summary=summary)
    assert again.outcome() == ready.outcome(flip)


@given(
    rule=st.sampled_from(
        [Strongest(9), Strongest(fraction=0.02), Strongest(9, "mean"), PeakSphere(2.0)]
    ),
    kind=st.sampled_from(["noise", "heavy", "holes", "one-sided", "ties", "zeros", "huge", "tiny"]),
    dtype=st.sampled_from([np.float32, np.float64]),
    scheme=st.sampled_from([LeaveOneOut(), KFold(3, seed=1)]),
    seed=st.integers(0, 2**32 - 1),
)
@settings(max_examples=150)
def test_what_makes_flips_of_a_rank_fast_changes_no_bit(rule, kind, dtype, scheme, seed):
    rng = np.random.default_rng(seed)
    grid = Grid((10, 10, 10), np.eye(4))
    effects = rng.standard_normal((9, 1000))
    effects[:, rng.integers(1000, size=40)] += 2
    missing = Missing(zeros=kind != "zeros", min_fraction=0.6)
    if kind == "heavy":
        effects = effects**5 * 10.0 ** rng.uniform(-4, 4, 1000)
    elif kind in ("holes", "zeros"):
        effects[rng.uniform(size=effects.shape) < 0.2] = 0
        effects[:, :100] = 0
    elif kind == "one-sided":  # every map's signs agree: flips leave few folds above 0
        effects = -np.abs(effects)
    elif kind == "ties":
        effects = np.round(effects)
        effects[:, ::7] = effects[:, :1]
        effects[:, 1::7] = 3
    elif kind in ("huge", "tiny"):
        effects *= {"huge": 3e37, "tiny": 1e-40}[kind]
    plan = Procedure(rule, scheme=scheme, missing=missing)
    labels = [f"{i}" for i in range(9)]
    with np.errstate(over="ignore"):
        effects = effects.astype(dtype)
    plain, fast = (plan.prepare(effects, labels, grid) for _ in range(2))
    signs = np.vstack([np.ones((1, 9), np.int8), random_signs(seed, plain.people, 0, 3)])
    t, overlap, n_empty = fast.flips(signs)
    for i, flip in enumerate(signs):
        outcome = plain.outcome(flip)  # by the folds' whole maps
        assert t[i] == outcome.t
        np.testing.assert_equal(overlap[i], outcome.dice)
        assert n_empty[i] == len(outcome.empty)
        assert fast.outcome(flip) == outcome


def test_t_of_the_data_is_t_of_the_flip_that_flips_nobody():
    for rule in RULES.values():
        for kind in KINDS:
            ready = study(kind).prepare(rule)
            t, overlap, _ = ready.flips(np.ones((1, len(ready.people)), np.int8))
            outcome = ready.outcome()
            assert (t[0], overlap[0]) == (outcome.t, outcome.dice)


# -- folds that find nothing ----------------------------------------------------------------


@pytest.fixture
def sparse() -> tuple[Study, Threshold]:
    """A study and a height that some of its folds reach and others do not."""
    made = study("plain", seed=3)
    peaks = [m[~np.isnan(m)].max() for m in groupmaps.leave_out_maps(made.effects, _folds(made))]
    return made, Threshold(height=float(np.median(peaks)))


def _folds(made: Study):
    return made.scheme.folds(made.labels)


def test_an_empty_fold_counts_as_zero_or_is_replaced_as_planned(sparse):
    made, rule = sparse
    for plan in ({"on_empty": "empty"}, {"on_empty": "strongest", "k": 4}):
        ready = made.prepare(rule, **plan)
        expected = made.naive(ready)
        assert 0 < len(expected.empty + expected.replaced) < len(ready.folds)
        assert bool(expected.replaced) == ("k" in plan)
        for one, other in zip(ready.masks(), expected.masks, strict=True):
            assert (one == other).all()
        assert_equal(ready, expected)
        signs = random_signs(2, ready.people, 0, 4)
        t, _, n_empty = made.prepare(rule, **plan).flips(signs)
        for i, flip in enumerate(signs):
            expected = made.naive(ready, flip)
            assert_equal(ready, expected, flip)
            assert t[i] == pytest.approx(expected.t, rel=1e-6, abs=1e-9)
            assert n_empty[i] == len(expected.empty)


def test_a_plan_to_stop_names_the_folds_that_found_nothing(sparse):
    made, rule = sparse
    ready = made.prepare(rule, on_empty="stop")
    empty = made.prepare(rule).outcome().empty
    with pytest.raises(EmptyFoldError) as caught:
        ready.masks()
    assert f"{len(empty)} of 10 folds found no region" in str(caught.value)
    assert f"folds without {', '.join(empty[:5])}" in str(caught.value)
    assert 'state on_empty = "empty" or "strongest"' in str(caught.value)
    # In flips it counts as empty, so that the statistic is the same in every flip.
    signs = random_signs(2, ready.people, 0, 9)
    for one, other in zip(ready.flips(signs), made.prepare(rule).flips(signs), strict=True):
        np.testing.assert_array_equal(one, other)


def test_when_every_fold_is_empty_t_is_zero_and_p_is_one():
    for rule in (Threshold(height=1e3), Cluster(height=1e3)):
        ready = study("plain").prepare(rule)
        outcome, test = ready.outcome(), ready.flip_test(49, 1)
        assert (outcome.t, outcome.estimate, test.p) == (0, 0, 1)
        assert set(outcome.values) == set(outcome.coverage) == {0.0}
        assert len(outcome.empty) == test.noise_empty == 10
        assert np.isnan(outcome.dice)
        assert np.isnan(test.noise_dice)


def test_nothing_stands_in_where_there_is_no_data_at_all():
    made = study("plain")
    made.effects[:] = np.nan
    ready = made.prepare(Threshold(p=0.01), on_empty="strongest", k=3)
    assert len(ready.outcome().empty) == 10
    assert ready.outcome().replaced == ()
    for rule in (Strongest(3), Strongest(fraction=0.1), PeakSphere(5.0)):
        ready = made.prepare(rule, summary="component")
        assert ready.outcome().sizes == (0,) * 10
        assert ready.flip_test(9).noise_empty == 10


# -- what must not matter -------------------------------------------------------------------

ALTERED = st.sampled_from([np.nan, np.inf, -np.inf, 0.0, 1e30, -1e30, 3.4e38, "another map"])


@given(
    rule=st.sampled_from(sorted(RULES)),
    kind=st.sampled_from(KINDS),
    tail=st.sampled_from(["positive", "negative"]),
    dtype=st.sampled_from([np.float32, np.float64]),
    fold=st.integers(0, 3),
    put=ALTERED,
    share=st.sampled_from([0.3, 1.0]),
    seed=st.integers(0, 2**32 - 1),
)
@settings(max_examples=120)
def test_a_folds_mask_is_the_same_whatever_its_held_out_data_are(
    rule, kind, tail, dtype, fold, put, share, seed
):
    made = study(kind)
    made.effects = made.effects.astype(dtype)
    ready = made.prepare(RULES[rule], tail=tail)
    before = ready.masks()[fold]
    rng = np.random.default_rng(seed)
    held = list(ready.folds[fold].held_out)
    where = rng.uniform(size=made.grid.n_features) < share
    other = smooth_effects(len(held), made.grid, seed) if put == "another map" else put
    made.effects[held] = np.where(where, other, made.effects[held])
    after = made.prepare(RULES[rule], tail=tail)
    assert after.masks()[fold].tobytes() == before.tobytes()
    flip = random_signs(seed, ready.people, 0, 1)[0]
    assert after.outcome(flip).sizes[fold] == ready.outcome(flip).sizes[fold]


@pytest.mark.parametrize(
    ("kind", "dtype", "extreme"),
    [
        # More than float32 holds, alone or summed over the rows of a fold.
        ("plain", np.float64, 1e39),
        ("plain", np.float64, -1e39),
        ("plain", np.float64, -1e160),
        ("rows", np.float32, np.finfo(np.float32).max),
        ("rows", np.float32, np.finfo(np.float32).min),
        ("4 folds", np.float32, np.finfo(np.float32).min),
    ],
)
@pytest.mark.parametrize("rule", ["p", "largest 18"])
def test_held_out_data_at_the_edge_of_the_number_format(kind, dtype, extreme, rule):
    made = study(kind)
    made.effects = made.effects.astype(dtype)
    ready = made.prepare(RULES[rule])
    fold = max(range(len(ready.folds)), key=lambda k: len(ready.folds[k].held_out))
    before = ready.masks()[fold]
    assert before.any()
    made.effects[list(ready.folds[fold].held_out)] = extreme
    assert (made.prepare(RULES[rule]).masks()[fold] == before).all()


@pytest.mark.parametrize("scale", [1e-60, 1e-40, 1e-15, 1e12, 1e60])
def test_the_unit_of_the_effects_does_not_matter(scale):
    made = study("plain")
    for rule in ("p", "peak 18", "strongest", "peak sphere"):
        made.effects = study("plain").effects.astype(np.float64)
        before = made.prepare(RULES[rule]).masks()
        made.effects = made.effects * scale
        for one, other in zip(made.prepare(RULES[rule]).masks(), before, strict=True):
            assert (one == other).all()


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize(
    ("rule", "summary"),
    [
        ("p", "mean"),
        ("peak 18", "median"),
        ("strongest", "mean"),
        ("fraction", "component"),
        ("peak sphere", "component"),
    ],
)
def test_the_order_of_the_rows_changes_no_bit(kind, rule, summary):
    made = study(kind)
    straight = made.prepare(RULES[rule], summary=summary)
    order = np.random.default_rng(6).permutation(len(made.labels))
    shuffled = Study(
        made.effects[order],
        [made.labels[i] for i in order],
        [made.names[i] for i in order],
        made.grid,
        made.scheme,
        made.missing,
    ).prepare(RULES[rule], summary=summary)
    for one, other in zip(straight.masks(), shuffled.masks(), strict=True):
        assert (one == other).all()
    one, other = straight.outcome(), shuffled.outcome()
    assert other.values == tuple(one.values[i] for i in order)
    assert other.coverage == tuple(one.coverage[i] for i in order)
    assert (other.t, other.estimate, other.sizes, other.dice) == (
        one.t,
        one.estimate,
        one.sizes,
        one.dice,
    )
    assert shuffled.flip_test(99, 4) == straight.flip_test(99, 4)
    assert (shuffled.per_person(other.values) == straight.per_person(one.values)).all()


@pytest.mark.parametrize("kind", ["plain", "rows, holes, zeros kept, 4 folds"])
@pytest.mark.parametrize("rule", ["p", "peak 18", "strongest", "fraction", "peak sphere"])
def test_neither_blocks_nor_batches_change_a_bit(monkeypatch, kind, rule):
    made = study(kind)
    ready = made.prepare(RULES[rule])
    signs = random_signs(9, ready.people, 0, 45)
    expected = ready.flips(signs)
    for at_once in (1, 7, 1000):
        monkeypatch.setattr(procedure_module, "_AT_ONCE", at_once)
        for one, other in zip(ready.flips(signs), expected, strict=True):
            assert one.tobytes() == other.tobytes()
    for block in (1, 13):
        monkeypatch.setattr(foldstack, "BLOCK", block)
        monkeypatch.setattr(foldstack, "_SMALL_BLOCK", 1)
        monkeypatch.setattr(groupmaps, "_BLOCK", block)
        for one, other in zip(made.prepare(RULES[rule]).flips(signs), expected, strict=True):
            assert one.tobytes() == other.tobytes()


# -- the flip test --------------------------------------------------------------------------


def test_five_subjects_by_enumeration(checks):
    # The five-subject example of check-values [enumerated by independent Python].
    case = checks["loso_tiny"]
    effects = np.array(case["X"])
    ready = Procedure(Strongest(1, "mean")).prepare(
        effects, list("abcde"), Grid((3, 1, 1), np.eye(4))
    )
    assert [int(np.flatnonzero(mask)[0]) for mask in ready.masks()] == case["sel"]
    outcome = ready.outcome()
    assert list(outcome.values) == pytest.approx(case["y"], rel=1e-12)
    assert outcome.estimate == pytest.approx(case["mean"], rel=1e-12)
    assert outcome.t == pytest.approx(case["t"], rel=1e-12)

    test = ready.flip_test(n_flips=31)
    assert (test.exact, test.n_flips, test.n_at_least) == (True, 32, 4)
    assert test.p == case["p1_t"] == 4 / 32

    signs = all_signs(5, 0, 32)
    t, _, _ = ready.flips(signs)
    assert (np.abs(t) >= outcome.t - 1e-9).mean() == case["p2_t"] == 10 / 32
    means = np.array([ready.outcome(flip).estimate for flip in signs])
    assert means.sum() == pytest.approx(case["sum_of_mean_over_flips"], abs=1e-12)
    assert (means >= case["mean"] - 1e-9).mean() == case["p1_mean"]
    assert (np.abs(means) >= case["mean"] - 1e-9).mean() == case["p2_mean"]

    # Flipping the five values while the masks stay is another number, and a wrong one.
    fixed = (signs @ np.array(outcome.values)) / 5
    wrong = (fixed >= case["mean"] - 1e-9).mean()
    assert wrong == case["fixed_mask_p1_WRONG"] == 2 / 32
    assert wrong < test.p
    assert wrong < (means >= case["mean"] - 1e-9).mean()


def test_all_patterns_are_enumerated_when_they_are_no_more_than_the_flips_and_one():
    made = study("plain")
    made.effects, made.labels, made.names = made.effects[:6], made.labels[:6], made.names[:6]
    ready = made.prepare(Threshold(p=0.1))
    exact, drawn = ready.flip_test(63, 1), ready.flip_test(62, 1)
    assert (exact.exact, exact.n_flips) == (True, 64)
    assert (drawn.exact, drawn.n_flips) == (False, 62)
    t = np.array([made.naive(ready, flip).t for flip in all_signs(6, 0, 64)])
    assert exact.p == (t >= t[0] - 1e-9).mean()
    for rule in ("fraction", "peak sphere", "peak sphere mean"):
        for summary in ("mean", "median", "component"):
            other = made.prepare(RULES[rule], summary=summary)
            t = np.array([made.naive(other, flip).t for flip in all_signs(6, 0, 64)])
            assert other.flip_test(63).p == (t >= t[0] - 1e-9).mean()
    assert drawn.p == (1 + drawn.n_at_least) / 63
    assert ready.flip_test(63, 2) == exact
    assert exact.p >= 1 / 64


def test_the_test_is_made_of_its_flips():
    ready = study("plain").prepare(Threshold(p=0.05))
    signs = random_signs(8, ready.people, 0, 150)
    t, overlap, n_empty = ready.flips(signs)
    told: list[tuple[int, int]] = []
    test = ready.flip_test(150, 8, lambda done, total: told.append((done, total)))
    assert test.t == ready.outcome().t
    assert test.n_at_least == (t >= test.t - 1e-9 * max(1, abs(test.t))).sum()
    assert test.p == (1 + test.n_at_least) / 151
    found = np.abs(t[t != 0])
    assert test.abs_t_quantile == pytest.approx(np.quantile(found, 0.95, method="higher"))
    assert test.noise_dice == pytest.approx(np.nanmean(overlap))
    assert test.noise_empty == n_empty.mean()
    assert [done for done, _ in told] == sorted({done for done, _ in told})
    assert told[-1] == (150, 150)
    assert {total for _, total in told} == {150}


def test_rows_of_one_person_flip_together():
    made = study("rows")
    ready = made.prepare(Threshold(p=0.05))
    assert len(ready.people) == 10 < len(made.labels)
    assert ready.flip_test(1023).n_flips == 1024
    person = ready.people[0]
    rows = [i for i, label in enumerate(made.labels) if label == person]
    assert len(rows) == 3
    values = ready.outcome().values
    assert ready.per_person(values)[0] == pytest.approx(np.mean([values[i] for i in rows]))


@pytest.mark.parametrize("kind", ["plain", "rows", "holes", "4 folds"])
@pytest.mark.parametrize("tail", ["positive", "negative"])
def test_the_jackknife_repeats_the_procedure_without_each_person(kind, tail):
    made = study(kind)
    ready = made.prepare(Threshold(p=0.1), tail=tail)
    expected = []
    for person in ready.people:
        kept = [i for i, label in enumerate(made.labels) if label != person]
        part = naive(ready.procedure, made.effects[kept], [made.labels[i] for i in kept], made.grid)
        expected.append(part.people.mean() * (-1 if tail == "negative" else 1))
    np.testing.assert_allclose(ready.without_each_person(), expected, rtol=1e-6, atol=1e-7)


# -- noise ----------------------------------------------------------------------------------


def test_with_nothing_there_the_test_keeps_its_level_and_the_mean_is_unbiased():
    n, v, n_studies, n_flips = 20, 300, 250, 99
    labels, grid = [f"{i:02}" for i in range(n)], Grid((v, 1, 1), np.eye(4))
    rng = np.random.default_rng(17)
    p, plain, means = [], [], []
    for seed in range(n_studies):
        effects = rng.standard_normal((n, v)).astype(np.float32)
        ready = Procedure(Threshold(p=0.01)).prepare(effects, labels, grid)
        p.append(ready.flip_test(n_flips, seed).p)
        values = np.array(ready.outcome().values)
        means.append(values.mean())
        plain.append(stats.ttest_1samp(values, 0).pvalue if values.any() else 1.0)
    limit = 4 * np.sqrt(0.05 * 0.95 / n_studies)
    assert abs(np.mean(np.array(p) <= 0.05) - 0.05) < limit
    # Uniform throughout, not at .05 alone (a p-value's variance is 1/12).
    assert abs(np.mean(p) - 0.5) < 4 / np.sqrt(12 * n_studies) + 1 / (n_flips + 1)
    assert abs(np.mean(means)) < 4 * np.std(means) / np.sqrt(n_studies)
    # The usual test on the very same values does not.
    rate = plain_t_false_positives(n, n, 0.01)
    found = np.mean(np.array(plain) <= 0.05)
    assert abs(found - rate) < 4 * np.sqrt(rate * (1 - rate) / n_studies)
    assert found > 0.05 + limit


def test_with_an_effect_there_p_is_at_its_minimum_in_its_own_direction_only():
    made = study("plain")
    made.effects += np.float32(2)
    for kind in (Threshold(p=0.01), Cluster(p=0.01), Strongest(9)):
        assert made.prepare(kind).flip_test(199, 1).p == 1 / 200
        assert made.prepare(kind, tail="negative").flip_test(199, 1).p > 0.2


# -- faults ---------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("settings_", "message"),
    [
        ({"tail": "both"}, "unknown tail: expected one of positive, negative, got 'both'"),
        ({"on_empty": "skip"}, "unknown on_empty: expected one of empty, strongest, stop, got"),
        ({"on_empty": "strongest"}, 'on_empty = "strongest" and k go together: got on_empty'),
        ({"k": 3}, "go together: got on_empty 'empty', k 3"),
        ({"summary": "weighted"}, "unknown summary: expected one of mean, median, component, got"),
    ],
)
def test_a_plan_that_makes_no_sense_is_refused(settings_, message):
    with pytest.raises(InputError) as caught:
        Procedure(Threshold(p=0.01), **settings_)
    assert message in str(caught.value)


def test_too_few_flips_too_few_subjects_and_stacks_of_another_shape_are_refused():
    made = study("plain")
    with pytest.raises(InputError, match="too few flips: expected at least 1, got 0"):
        made.prepare(Threshold(p=0.01)).flip_test(0)
    plan = Procedure(Threshold(p=0.01))
    with pytest.raises(InputError, match="too few subjects for leave-one-subject-out"):
        plan.prepare(made.effects[:4], ["a", "a", "b", "b"], made.grid)
    with pytest.raises(ValueError, match="effects have shape"):
        plan.prepare(made.effects[:, 1:], made.labels, made.grid)
    with pytest.raises(ValueError, match="effects have shape"):
        plan.prepare(made.effects[1:], made.labels, made.grid)


def test_without_a_copy_the_result_is_the_same():
    effects = np.random.default_rng(3).standard_normal((8, 40))
    effects[2, :5] = np.nan
    before = effects.copy()
    procedure = Procedure(Threshold(p=0.1), tail="negative")
    space, labels = Grid((40, 1, 1), np.eye(4)), list("abcdefgh")
    with_copy = procedure.prepare(effects, labels, space)
    np.testing.assert_array_equal(effects, before)
    for tested in (None, effects):
        taken = before.copy() if tested is None else effects
        without = procedure.prepare(taken, labels, space, tested=tested, copy=False)
        assert without.outcome() == with_copy.outcome()
        assert without.flip_test(63) == with_copy.flip_test(63)
