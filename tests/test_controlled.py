"""Thresholds that control an error, inside the fold: against a plain loop, and what they hold.

The loop makes every fold's threshold from the selection side alone, under every flip of the
data: t by SciPy, clusters by ndimage, all patterns of signs by itertools, the false discovery
rate by `scipy.stats.false_discovery_control`. Then what must not matter, the family-wise error of
masks on noise, and the level of the whole-procedure test with each control.
"""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy import ndimage, stats
from sequester.nodes import foldcontrol, foldstack, products
from sequester.nodes.controlled import Controlled, critical_of_map, step_up
from sequester.nodes.errors import InputError
from sequester.nodes.familywise import (
    CONTROLS,
    benjamini_hochberg_t,
    max_cluster_by_flips,
    max_t_by_flips,
)
from sequester.nodes.flips import all_signs, random_signs
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.foldsmooth import FoldSmoothness
from sequester.nodes.groupmaps import Missing, group_map
from sequester.nodes.masks import Cluster, Strongest, Threshold, choose
from sequester.nodes.models import Groups, Score
from sequester.nodes.procedure import Procedure
from sequester.nodes.randomfield import (
    ClusterSizes,
    height_threshold,
    lattice,
    resels,
)
from sequester.nodes.smoothness import fwhm_of_stack
from sequester.nodes.space import Grid

GRID = Grid((6, 5, 4), np.eye(4))
LEVEL = 0.2
RULES = {
    "bonferroni": Threshold(control=Controlled("bonferroni", LEVEL)),
    "benjamini-hochberg": Threshold(control=Controlled("benjamini-hochberg", LEVEL)),
    "max-t": Threshold(control=Controlled("max-t", LEVEL)),
    "random-field": Threshold(control=Controlled("random-field", LEVEL)),
    "max-cluster": Cluster(p=0.05, pick="all", extent=Controlled("max-cluster", LEVEL)),
    "field-extent": Cluster(p=0.05, pick="all", extent=Controlled("random-field", LEVEL)),
}
each_control = pytest.mark.parametrize("control", RULES)


def smooth(rng, n, grid=GRID, sigma=0.8, noise="normal"):
    """Maps of smooth noise of unit variance, on a torus so that no edge differs."""
    white = getattr(rng, noise)(size=(n, *grid.shape))
    made = ndimage.gaussian_filter(white, (0, *[sigma] * 3), mode="wrap").reshape(n, -1)
    return made / made.std()


def effects_of(rng, n, missing=False, grid=GRID):
    """Noise with an effect in a corner; in the last rows some features lack data."""
    x = smooth(rng, n, grid)
    x[:, grid.coordinates().max(axis=1) < 2] += 1.2
    if missing:
        x[-1, ::9] = np.nan
        x[1, 12:16] = 0.0
    return x


# -- the plain loop -------------------------------------------------------------------------


def t_map(x):
    """t where at least 80 % of the rows have data, and the numbers of rows with data."""
    x = np.where(x == 0, np.nan, x)
    n = (~np.isnan(x)).sum(axis=0)
    t = np.full(x.shape[1], np.nan)
    for column in np.flatnonzero((n < len(x)) & (n >= np.ceil(0.8 * len(x)))):
        t[column] = stats.ttest_1samp(x[~np.isnan(x[:, column]), column], 0).statistic
    t[n == len(x)] = stats.ttest_1samp(x[:, n == len(x)], 0).statistic
    return t, n


def clusters_of(above, grid):
    labels, many = ndimage.label(grid.filled(above), ndimage.generate_binary_structure(3, 2))
    of_feature = labels.ravel()[grid.voxels]
    return [np.flatnonzero(of_feature == c + 1) for c in range(many)]


def exceeds(t, critical):
    with np.errstate(invalid="ignore"):
        return t > critical + 1e-9


def patterns(x):
    """The side's maps under every pattern of signs."""
    for signs in itertools.product((1, -1), repeat=len(x)):
        yield np.array(signs)[:, None] * x


def fewest_beyond(extremes, level):
    """The least value that no more than this share of all patterns exceeds or equals."""
    most = int(np.floor(level * len(extremes) + 1e-9))
    return sorted(extremes)[-most - 1]


def loop_mask(control, x, grid, level=LEVEL):
    """One selection side's mask, from its maps alone."""
    t, n = t_map(x)
    tested = ~np.isnan(t)
    df = n - 1
    if control == "bonferroni":
        return exceeds(t, stats.t.isf(level / tested.sum(), df))
    if control == "benjamini-hochberg":
        found = np.zeros(len(t), bool)
        p = stats.t.sf(t[tested], df[tested])
        found[tested] = stats.false_discovery_control(p) <= level
        return found
    if control == "max-t":
        return exceeds(
            t, fewest_beyond([np.nanmax(t_map(flipped)[0]) for flipped in patterns(x)], level)
        )
    given = np.where(x == 0, np.nan, x)
    fwhm = fwhm_of_stack(given, grid)
    if control == "random-field":
        region = resels(lattice(grid.restricted(tested)), fwhm)
        height = height_threshold(region, len(x) - 1, level, int(tested.sum()))
        return exceeds(t, stats.t.isf(stats.t.sf(height, len(x) - 1), df))
    forming = stats.t.isf(0.05, df)
    if control == "max-cluster":
        largest = [
            max((len(c) for c in clusters_of(exceeds(t_map(f)[0], forming), grid)), default=0)
            for f in patterns(x)
        ]
        least = fewest_beyond(largest, level) + 1
    else:
        t_all, df_all = float(stats.t.isf(0.05, len(x) - 1)), len(x) - 1
        least = ClusterSizes(int(tested.sum()), tuple(fwhm), t_all, df_all).critical_size(level)
    kept = [c for c in clusters_of(exceeds(t, forming), grid) if len(c) >= least]
    return np.isin(np.arange(len(t)), np.concatenate([[], *kept]))


@each_control
@pytest.mark.parametrize("missing", [False, True])
def test_every_fold_under_every_flip_is_that_of_a_plain_loop(control, missing):
    grid = Grid((4, 4, 2), np.eye(4)) if control.startswith("max") else GRID
    x = effects_of(np.random.default_rng(5), 6, missing, grid)
    ready = Procedure(RULES[control]).prepare(x, list("abcdef"), grid)
    found = 0
    flips = all_signs(6, 0, 64)[:: 1 if not control.startswith("max") and not missing else 9]
    made = list(ready._each(flips))
    for signs, (chosen, _) in zip(flips, made, strict=True):
        flipped = signs[:, None] * x
        for fold in range(6):
            mask = np.zeros(grid.n_features, bool)
            mask[chosen.features[chosen.members[:, fold]]] = True
            wanted = loop_mask(control, np.delete(flipped, fold, axis=0), grid)
            assert np.array_equal(mask, wanted)
            found += mask.any()
    assert 0 < found < 6 * len(flips), "some folds find something, and some do not"
    assert np.array_equal(ready.masks()[2], loop_mask(control, np.delete(x, 2, axis=0), grid))


@pytest.mark.parametrize("name", ["max-t", "max-cluster"])
def test_on_random_flips_a_side_has_the_threshold_that_it_would_have_by_itself(name):
    rng = np.random.default_rng(8)
    x, people = effects_of(rng, 15), [f"{i:02}" for i in range(15)]
    x[:, GRID.coordinates().max(axis=1) < 3] += 2.0
    control = Controlled(name, 0.1, 199, 4)
    rule = Threshold(control=control) if name == "max-t" else Cluster(2.0, extent=control)
    masks = Procedure(rule, KFold(3, 1)).prepare(x, people, GRID).masks()
    for fold, mask in zip(KFold(3, 1).folds(people), masks, strict=True):
        side = list(fold.selection)
        labels, t = [people[row] for row in side], group_map(x[side])
        if name == "max-t":
            wanted = t > max_t_by_flips(x[side], labels, 199, 4, 0.1)
        else:
            least = max_cluster_by_flips(x[side], labels, GRID, 2.0, 18, 199, 4, 0.1)
            wanted = choose(t, Cluster(2.0, min_size=least), GRID)
        assert wanted.any()
        assert np.array_equal(mask, wanted)


@pytest.mark.parametrize("control", ["random-field", "field-extent"])
def test_the_smoothness_is_that_of_the_flip_and_not_of_the_data(control):
    """A wide effect is in the residuals of a flip, and makes them smoother than the data's."""
    rng = np.random.default_rng(14)
    grid = Grid((10, 9, 8), np.eye(4))
    x = smooth(rng, 24, grid, 1.7) + 0.2 * grid.coordinates()[:, 0]
    people = [f"{i:02}" for i in range(24)]
    ready = Procedure(RULES[control], KFold(4, 1)).prepare(x, people, grid)
    seen, easier = set(), 0
    flips = 1 - 2 * (rng.uniform(size=(12, 24)) < 0.2).astype(np.int8)
    for signs, (chosen, _) in zip(flips, ready._each(flips), strict=True):
        for k, fold in enumerate(KFold(4, 1).folds(people)):
            mask = np.zeros(grid.n_features, bool)
            mask[chosen.features[chosen.members[:, k]]] = True
            side = (signs[:, None] * x)[list(fold.selection)]
            assert np.array_equal(mask, loop_mask(control, side, grid))
            seen.add(int(mask.sum()))
            easier += int(mask.sum() > loop_mask("bonferroni", side, grid).sum())
    assert len(seen) > 5
    assert easier > 5, "where maps are smooth, the random field finds more than Bonferroni"


@pytest.mark.parametrize("zeros", [True, False])
def test_smoothness_and_region_are_those_that_a_side_has_by_itself(zeros):
    rng = np.random.default_rng(13)
    x, missing = effects_of(rng, 10), Missing(zeros=zeros, min_fraction=0.7)
    x[2, 10:50] = np.nan
    x[7, 40:80] = 0.0
    x[4:7, 90:100] = np.nan  # too many for a side that has all three
    procedure = Procedure(RULES["random-field"], KFold(5, 3), missing=missing)
    ready = procedure.prepare(x, list("abcdefghij"), GRID)
    signs = random_signs(1, list("abcdefghij"), 0, 1)[0].astype(float)
    fwhm = FoldSmoothness(ready._stack, GRID).fwhm(signs, np.arange(len(ready.folds)))
    cells = ready._choosing._chooser._narrowing._cells
    for k, fold in enumerate(ready.folds):
        side = signs[list(fold.selection), None] * x[list(fold.selection)]
        assert np.allclose(fwhm[k], fwhm_of_stack(side, GRID, missing), rtol=1e-10)
        tested = missing.present(side).sum(axis=0) >= missing.least(len(side))
        assert cells[k] == lattice(GRID.restricted(tested))
    assert len(set(cells)) > 1


def test_step_up_is_benjamini_and_hochbergs():
    rng = np.random.default_rng(2)
    for shift in (0.0, 1.0, 3.0):
        t = rng.standard_t(9, 400) + shift * (rng.uniform(size=400) < 0.2)
        p = step_up(t[None], np.full((1, 1), 10.0), np.array([400]), 0.1)
        found = t > stats.t.isf(p, 9) if p > 0 else np.zeros(400, bool)
        adjusted = stats.false_discovery_control(stats.t.sf(t, 9))
        assert np.array_equal(found, adjusted <= 0.1)
        assert np.array_equal(found, t > benjamini_hochberg_t(t, 9, 0.1))


# -- groups and scores ----------------------------------------------------------------------


@pytest.mark.parametrize("name", ["bonferroni", "benjamini-hochberg"])
@pytest.mark.parametrize("kind", ["score", "groups", "covariate"])
def test_with_groups_and_scores_p_is_that_of_their_own_t(name, kind):
    rng = np.random.default_rng(3)
    n, people = 14, [f"{i:02}" for i in range(14)]
    score, x = rng.normal(size=n), smooth(rng, 14)
    if kind == "groups":
        score = np.repeat([1.0, 0.0], 7)
    x[:, :25] += 2 * score[:, None]
    age = tuple(zip(people, rng.normal(size=n).tolist(), strict=True))
    covariates = (("age", age),) if kind == "covariate" else ()
    if kind == "groups":
        groups = ["pond" if s else "hill" for s in score]
        model = Groups(tuple(zip(people, groups, strict=True)), "pond", "hill")
    else:
        model = Score(tuple(zip(people, score.tolist(), strict=True)), covariates)
    rule = Threshold(control=Controlled(name, 0.1))
    ready = Procedure(rule, KFold(7, 1), model=model).prepare(x, people, GRID)
    masks = ready.masks()
    for fold, mask in zip(ready.folds, masks, strict=True):
        side = list(fold.selection)
        columns = [np.ones(len(side))]
        if covariates:
            columns.append(np.array([dict(age)[people[row]] for row in side]))
        design = np.column_stack([*columns, score[side]])
        beta, rest = np.linalg.lstsq(design, x[side], rcond=None)[:2]
        df = len(side) - design.shape[1]
        error = np.sqrt(rest / df * np.linalg.inv(design.T @ design)[-1, -1])
        p = stats.t.sf(beta[-1] / error, df)
        wanted = stats.false_discovery_control(p) <= 0.1 if name[1] == "e" else p < 0.1 / len(p)
        assert wanted.any()
        assert np.array_equal(mask, wanted)
    # The same code under exchange: that which changes nothing gives the masks of the data.
    (chosen, _), *_ = ready._each(np.arange(n)[None])
    assert np.array_equal(chosen.features, np.flatnonzero(np.any(masks, axis=0)))


def test_controls_by_signs_are_refused_where_scores_are_exchanged():
    model = Score((("a", 1.0), ("b", 2.0)))
    for control in ("max-t", "random-field", "max-cluster", "field-extent"):
        with pytest.raises(InputError, match="does not go with groups or a score"):
            Procedure(RULES[control], model=model)


# -- what must not matter -------------------------------------------------------------------


@each_control
def test_a_folds_mask_is_the_same_whatever_its_held_out_data_are(control):
    rng = np.random.default_rng(11)
    x, people = effects_of(rng, 9, missing=True), list("abcdefghi")
    procedure = Procedure(RULES[control])
    before = procedure.prepare(x, people, GRID).masks()
    assert any(mask.any() for mask in before)
    for row in (0, 1, 8):
        changed = x.copy()
        changed[row] = rng.normal(size=x.shape[1]) * 1e6
        changed[row, rng.uniform(size=x.shape[1]) < 0.3] = np.nan
        after = procedure.prepare(changed, people, GRID).masks()
        assert np.array_equal(before[row], after[row])


@pytest.mark.parametrize("control", ["random-field", "field-extent", "benjamini-hochberg"])
def test_a_folds_own_numbers_have_the_same_bits_whatever_its_held_out_data_are(control):
    rng = np.random.default_rng(12)
    x = effects_of(rng, 9)
    bits = []
    for extra in (0.0, 1e5):
        x[4] += extra * rng.normal(size=x.shape[1])
        ready = Procedure(RULES[control]).prepare(x, list("abcdefghi"), GRID)
        bits.append(FoldSmoothness(ready._stack, GRID).fwhm(np.ones(9), np.arange(9)))
    assert np.array_equal(bits[0][4], bits[1][4])
    assert not np.array_equal(bits[0][3], bits[1][3])


@each_control
def test_neither_order_nor_blocks_nor_batches_change_a_bit(control, monkeypatch):
    rng = np.random.default_rng(4)
    x, people = effects_of(rng, 10, missing=True), [f"{i:02}" for i in range(10)]
    procedure = Procedure(RULES[control], KFold(5, 2))
    first = procedure.prepare(x, people, GRID)
    test = first.flip_test(60, 3)
    order = rng.permutation(10)
    again = procedure.prepare(x[order], [people[i] for i in order], GRID)
    assert again.flip_test(60, 3) == test
    monkeypatch.setattr(foldstack, "BLOCK", 17)
    monkeypatch.setattr(foldstack, "_SMALL_BLOCK", 11)
    monkeypatch.setattr(foldstack, "_BLOCK_NUMBERS", 20)
    monkeypatch.setattr(products, "_LEAST", 19)
    monkeypatch.setattr(products, "_MOST", 19)
    monkeypatch.setattr(foldcontrol, "_AT_ONCE", 7)
    assert procedure.prepare(x, people, GRID).flip_test(60, 3) == test


@each_control
def test_what_is_found_below_zero_is_what_is_found_above_it_in_the_negative(control):
    x = effects_of(np.random.default_rng(6), 8)
    above = Procedure(RULES[control]).prepare(x, list("abcdefgh"), GRID).masks()
    below = Procedure(RULES[control], tail="negative").prepare(-x, list("abcdefgh"), GRID).masks()
    assert np.array_equal(above, below)
    assert np.any(above)


def test_constant_maps_and_maps_without_data_have_an_answer():
    constant = np.ones((8, GRID.n_features))
    nothing = np.full((8, GRID.n_features), np.nan)
    for control, rule in RULES.items():
        ready = Procedure(rule).prepare(nothing, list("abcdefgh"), GRID)
        assert not np.any(ready.masks()), control
        masks = Procedure(rule).prepare(constant, list("abcdefgh"), GRID).masks()
        # t is infinite everywhere, and in no other pattern of signs; but noise without variance
        # says nothing of the size of its clusters.
        assert np.all(masks) == (control != "field-extent"), control


# -- what they hold -------------------------------------------------------------------------

NOISE = Grid((8, 8, 8), np.eye(4))
HELD = {
    "bonferroni": Threshold(control=Controlled("bonferroni", 0.1)),
    "benjamini-hochberg": Threshold(control=Controlled("benjamini-hochberg", 0.1)),
    "max-t": Threshold(control=Controlled("max-t", 0.1, 99)),
    "random-field": Threshold(control=Controlled("random-field", 0.1)),
    "max-cluster": Cluster(p=0.02, extent=Controlled("max-cluster", 0.1, 99)),
    "field-extent": Cluster(p=0.001, extent=Controlled("random-field", 0.1)),
}
SETS = 150
TWENTY_FOUR = [f"{i:02}" for i in range(24)]


@pytest.mark.parametrize("control", HELD)
def test_on_noise_a_side_finds_something_as_seldom_as_stated(control):
    """Among true nulls alone the false discovery rate, too, is the chance of any find."""
    rng = np.random.default_rng(21)
    procedure = Procedure(HELD[control], KFold(2, 1))
    found = np.zeros(2)
    for _ in range(SETS):
        ready = procedure.prepare(smooth(rng, 24, NOISE, 1.2), TWENTY_FOUR, NOISE)
        found += [mask.any() for mask in ready.masks()]
    # The two sides share nobody.
    rate, error = found.sum() / (2 * SETS), 4 * np.sqrt(0.1 * 0.9 / (2 * SETS))
    assert rate < 0.1 + error
    if control.startswith("max"):
        assert rate > 0.1 - error, "exact: neither more nor less"


@pytest.mark.parametrize("on_empty", ["empty", "strongest"])
def test_on_noise_the_test_of_the_whole_procedure_keeps_its_level(on_empty):
    """Pooled over the controls; an empty mask makes p discrete, and can only lower the rate."""
    rng = np.random.default_rng(22)
    small, p = Grid((6, 6, 6), np.eye(4)), []
    for i in range(120 if on_empty == "empty" else 240):
        rule = list(HELD.values())[i % len(HELD)]
        procedure = Procedure(
            rule, KFold(2, 1), on_empty=on_empty, k=5 if on_empty == "strongest" else 0
        )
        x = smooth(rng, 24, small, 1.2)
        p.append(procedure.prepare(x, TWENTY_FOUR, small).flip_test(49, i).p)
    rate, error = np.mean(np.array(p) <= 0.1), 4 * np.sqrt(0.1 * 0.9 / len(p))
    assert rate < 0.1 + error
    assert on_empty == "empty" or rate > 0.1 - error


def test_an_uncorrected_threshold_does_find_something_on_noise():
    rng = np.random.default_rng(21)
    procedure = Procedure(Threshold(p=0.1), KFold(2, 1))
    ready = procedure.prepare(smooth(rng, 24, NOISE, 1.2), TWENTY_FOUR, NOISE)
    assert all(mask.any() for mask in ready.masks())


# -- one map, words, refusals ---------------------------------------------------------------


@pytest.mark.parametrize("missing", [False, True])
def test_one_map_gives_bonferroni_and_benjamini_hochberg_by_itself(missing):
    x = effects_of(np.random.default_rng(7), 10, missing)
    t = group_map(x, Missing())
    n = Missing().present(x).sum(axis=0)
    for control in ("bonferroni", "benjamini-hochberg"):
        mask = choose(t, RULES[control], GRID, n)
        assert mask.any()
        assert np.array_equal(mask, loop_mask(control, x, GRID))
        whole = Cluster(control=RULES[control].control, pick="all")
        assert np.array_equal(choose(t, whole, GRID, n), mask)


@pytest.mark.parametrize("control", ["max-t", "random-field", "max-cluster", "field-extent"])
def test_one_map_is_refused_where_the_maps_behind_it_are_needed(control):
    with pytest.raises(InputError, match=r"on one group map|off one group map"):
        choose(np.zeros(GRID.n_features), RULES[control], GRID, 10)
    with pytest.raises(InputError, match="controls needs the number of rows"):
        choose(np.zeros(GRID.n_features), RULES["bonferroni"], GRID)


def test_an_empty_map_has_no_threshold_to_exceed():
    nothing = np.full(3, np.nan)
    for control in ("bonferroni", "benjamini-hochberg"):
        assert not (nothing > critical_of_map(Controlled(control), nothing, np.full(3, 9.0))).any()


@pytest.mark.parametrize(
    ("rule", "tail", "words"),
    [
        (
            Threshold(control=Controlled("max-t", 0.01, 499)),
            "negative",
            "all voxels with t below minus the largest-t (up to 499 sign flips) threshold, "
            "chance of any false voxel at most 0.01",
        ),
        (
            Cluster(p=0.001, min_size=5, extent=Controlled("random-field")),
            "positive",
            "the largest cluster of voxels with p < 0.001 (connectivity 18, at least 5 "
            "voxels, of a size by random-field theory, chance of any false cluster at most 0.05)",
        ),
        (
            Cluster(pick="all", control=Controlled("benjamini-hochberg", 0.1)),
            "positive",
            "every cluster of voxels with t above Benjamini and Hochberg's threshold, expected "
            "share of false voxels at most 0.1 (connectivity 18, at least 1 voxel)",
        ),
    ],
)
def test_words(rule, tail, words):
    assert rule.describe(tail) == words
    assert Procedure(rule, tail=tail).describe() == words


def test_words_are_those_of_what_a_threshold_controls():
    for name in ("bonferroni", "benjamini-hochberg", "max-t", "random-field"):
        assert Controlled(name).error.startswith(CONTROLS[name].error.split(" among")[0])


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (lambda: Controlled("loudest"), "unknown control: expected one of bonferroni, benjamini"),
        (lambda: Controlled("max-t", 0.5), "level out of range"),
        (lambda: Controlled("max-t", n_flips=0), "too few flips"),
        (lambda: Threshold(2.0, control=Controlled("max-t")), "exactly one of height, p and con"),
        (lambda: Threshold(control=Controlled("max-cluster")), "does not control a threshold"),
        (lambda: Cluster(2.0, extent=Controlled("max-t")), "does not control the size of clusters"),
        (
            lambda: Cluster(control=Controlled("max-t"), extent=Controlled("max-cluster")),
            "control of height and of size at once",
        ),
    ],
)
def test_controls_that_make_no_sense_are_refused(make, message):
    with pytest.raises(InputError, match=message):
        make()


def test_too_few_people_for_a_level_or_a_field_are_refused():
    x = smooth(np.random.default_rng(1), 5)
    with pytest.raises(InputError, match="too few flips for this alpha"):
        Procedure(Threshold(control=Controlled("max-t", 0.05))).prepare(x, list("abcde"), GRID)
    for control in ("random-field", "field-extent"):
        with pytest.raises(InputError, match="too few maps for a random field"):
            Procedure(RULES[control]).prepare(x, list("abcde"), GRID)


def test_flips_of_a_threshold_are_those_of_the_people_who_choose():
    """Rows of one label flip as one; the stand-ins for an empty mask do not change the rule."""
    rng = np.random.default_rng(9)
    x, labels = effects_of(rng, 16), [f"{i // 2:02}" for i in range(16)]
    rule = Threshold(control=Controlled("max-t", 0.1))
    masks = Procedure(rule, LeaveOneOut()).prepare(x, labels, GRID).masks()
    side = [row for row in range(16) if labels[row] != "00"]
    critical = max_t_by_flips(x[side], [labels[row] for row in side], 999, 0, 0.1)
    assert np.array_equal(masks[0], group_map(x[side]) > critical)
    assert masks[0].any()
    strict = Threshold(control=Controlled("max-t", 0.02))
    stood_in = Procedure(strict, on_empty="strongest", k=3).prepare(0.1 * x - 1, labels, GRID)
    strongest = Procedure(Strongest(k=3)).prepare(0.1 * x - 1, labels, GRID)
    assert np.array_equal(stood_in.masks(), strongest.masks())


def test_signs_drawn_for_thresholds_are_keyed_by_label():
    """Without one person the other people's flips are the same."""
    whole = random_signs(3, ["a", "b", "c"], 0, 50)
    assert np.array_equal(whole[:, 1:], random_signs(3, ["b", "c"], 0, 50))
