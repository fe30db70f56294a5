"""What must not matter to a test: the order of the rows, and how much is done or kept at once.

Every mask rule under every scheme whose folds take turns, on maps that lack some data.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import ndimage
from sequester.nodes import (
    choosing,
    controlled,
    foldcontrol,
    foldsmooth,
    foldstack,
    products,
    signed,
)
from sequester.nodes import procedure as procedure_module
from sequester.nodes.controlled import Controlled
from sequester.nodes.folds import Given, KFold, LeaveOneOut
from sequester.nodes.foldsmooth import FoldSmoothness
from sequester.nodes.leading import strongest_of_each
from sequester.nodes.masks import Cluster, PeakSphere, Strongest, Threshold, strongest
from sequester.nodes.procedure import Procedure, RowMeans
from sequester.nodes.roi import region_mean
from sequester.nodes.space import Grid

GRID = Grid((8, 7, 6), np.diag([3.0, 3.0, 3.0, 1.0]))
PEOPLE = [f"{i:02}" for i in range(14)]


def by(control, level=0.3):
    return Controlled(control, level, n_flips=49)


RULES = {
    "threshold": Threshold(p=0.05),
    "height": Threshold(height=2.0),
    "cluster": Cluster(p=0.05, min_size=3, pick="all"),
    "largest cluster": Cluster(p=0.05),
    "peak's cluster": Cluster(p=0.05, pick="peak"),
    "nearest cluster": Cluster(p=0.05, pick="nearest", near=(9.0, 9.0, 9.0)),
    "strongest": Strongest(k=7),
    "strongest means": Strongest(k=7, map_kind="mean"),
    "fraction": Strongest(fraction=0.1),
    "peak sphere": PeakSphere(radius=5.0),
    "bonferroni": Threshold(control=by("bonferroni")),
    "benjamini-hochberg": Threshold(control=by("benjamini-hochberg")),
    "max-t": Threshold(control=by("max-t")),
    "random field": Threshold(control=by("random-field")),
    "cluster by max-t": Cluster(control=by("max-t"), pick="all"),
    "max-cluster": Cluster(p=0.05, pick="all", extent=by("max-cluster")),
    "field extent": Cluster(p=0.05, pick="all", extent=by("random-field", 0.4)),
}
SCHEMES = {
    "leave one out": LeaveOneOut(),
    "5 folds": KFold(5, 1),
    "split half": KFold(2, 3),
    "given": Given(tuple((who, "abcc"[i % 4]) for i, who in enumerate(PEOPLE))),
}


def effects(seed, missing=True):
    rng = np.random.default_rng(seed)
    white = rng.standard_normal((len(PEOPLE), *GRID.shape))
    x = ndimage.gaussian_filter(white, (0, 0.8, 0.8, 0.8), mode="wrap").reshape(len(PEOPLE), -1)
    x = (x / x.std() + 0.35 * (np.arange(GRID.n_features) < 60)).astype(np.float32)
    if missing:
        x[3, 20:40] = np.nan
        x[8, 200:230] = 0.0
    return x


def in_small_pieces(monkeypatch):
    for module, name, value in (
        (foldstack, "BLOCK", 17),
        (foldstack, "_SMALL_BLOCK", 11),
        (foldstack, "_BLOCK_NUMBERS", 20),
        (products, "_LEAST", 19),
        (products, "_MOST", 19),
        (foldcontrol, "_AT_ONCE", 7),
        (procedure_module, "_AT_ONCE", 5),
        (procedure_module, "_READ_AT_ONCE", 50),
    ):
        monkeypatch.setattr(module, name, value)


def keeping_nothing(monkeypatch):
    for module, name, value in (
        (foldstack, "_COPIED", 0),
        (signed, "_KEPT", 0),
        (foldsmooth, "_KEPT", 0),
        (choosing, "_SPHERES", 0),
        (foldcontrol, "_SIZES", 0),
    ):
        monkeypatch.setattr(module, name, value)


@pytest.mark.parametrize("scheme", SCHEMES)
@pytest.mark.parametrize("rule", RULES)
def test_neither_row_order_nor_pieces_nor_what_is_kept_change_a_result(rule, scheme, monkeypatch):
    x = effects(5)
    made = Procedure(RULES[rule], SCHEMES[scheme])

    def results(order):
        ready = made.prepare(x[order], [PEOPLE[i] for i in order], GRID)
        return ready.outcome(), ready.flip_test(40, 3)

    straight = np.arange(len(PEOPLE))
    outcome, test = results(straight)
    assert len(set(test.statistics)) > 10, "flips that all find nothing compare nothing"
    # Without a screen: nothing has made this one ready for many exchanges.
    plain = made.prepare(x, PEOPLE, GRID)
    exchanges, _ = plain.exchanges(40, 3)
    assert [plain.outcome(signs).t for signs in exchanges[:12]] == list(test.statistics[:12])
    shuffled = np.random.default_rng(2).permutation(len(PEOPLE))
    changes = [
        (shuffled, lambda: None),
        (straight, lambda: in_small_pieces(monkeypatch)),
        (shuffled, lambda: keeping_nothing(monkeypatch)),
    ]
    for order, change in changes:
        change()
        again, other = results(order)
        assert (other.p, other.statistics) == (test.p, test.statistics)
        assert again.estimate == pytest.approx(outcome.estimate, abs=1e-12)
        assert again.values == tuple(outcome.values[i] for i in order)


@pytest.mark.parametrize(
    "rule",
    [RULES["random field"], Cluster(p=0.02, pick="all", extent=by("random-field", 0.2))],
    ids=["height", "extent"],
)
@pytest.mark.parametrize("scheme", ["leave one out", "5 folds"])
def test_bounds_on_smoothness_spare_work_and_change_nothing(rule, scheme, monkeypatch):
    made, looked_at = Procedure(rule, SCHEMES[scheme]), []
    # So smooth that the smoothness decides about heights, and not Bonferroni's alone.
    x = effects(8, missing=False).reshape(len(PEOPLE), *GRID.shape)
    x = ndimage.gaussian_filter(x, (0, 0.5, 0.5, 0.5)).reshape(len(PEOPLE), -1)
    if scheme == "5 folds":
        x[3, 20:40] = np.nan
    exact = FoldSmoothness.fwhm

    def counted(self, weights, folds):
        looked_at.append(len(folds))
        return exact(self, weights, folds)

    monkeypatch.setattr(FoldSmoothness, "fwhm", counted)
    bounded = made.prepare(x, PEOPLE, GRID).flip_test(200, 1)
    few = sum(looked_at)
    monkeypatch.setattr(foldsmooth, "_KEPT", 0)
    looked_at.clear()
    assert made.prepare(x, PEOPLE, GRID).flip_test(200, 1) == bounded
    assert 0 < few < sum(looked_at) / 2


@pytest.mark.parametrize("flat", [False, True])
@pytest.mark.parametrize("scheme", ["leave one out", "split half"])
def test_no_fwhm_is_outside_its_bounds(scheme, flat):
    x, rng = effects(9), np.random.default_rng(1)
    x[:, 150:] += 1.5  # large t, when all signs are equal
    if flat:
        x[:, 100] = 1.0  # and an infinite one
    ready = Procedure(Threshold(p=0.05), SCHEMES[scheme]).prepare(x, PEOPLE, GRID)
    stack = ready._stack
    stack.turn()
    smooth, n_folds = FoldSmoothness(stack, GRID), len(stack.folds)
    widths = []
    for signs in [np.ones(len(PEOPLE)), *rng.choice([-1.0, 1.0], (40, len(PEOPLE)))]:
        exact = smooth.fwhm(signs, np.arange(n_folds))
        low, high = smooth.least(signs), smooth.most(signs)
        assert (low <= exact).all()
        assert (exact <= high).all()
        widths.append(high / np.maximum(low, 1e-9))
    assert flat or np.median(widths) < 3, "bounds so far apart would spare nothing"


def test_the_strongest_of_each_map_are_those_that_it_has_by_itself():
    rng = np.random.default_rng(6)
    for _ in range(200):
        values = rng.integers(0, 6, (4, 12)).astype(float)  # with many ties
        values[rng.uniform(size=values.shape) < 0.3] = np.nan
        values[rng.uniform(size=values.shape) < 0.1] = -np.inf
        k = rng.integers(0, 12, 4) if rng.uniform() < 0.3 else np.full(4, rng.integers(0, 13))
        expected = [
            strongest(one, many) if many else np.zeros(12, bool)
            for one, many in zip(values, k.tolist(), strict=True)
        ]
        assert np.array_equal(strongest_of_each(values, k.tolist()), expected)


def test_a_row_is_read_as_by_itself_to_the_last_bit():
    rng = np.random.default_rng(3)
    for kind in (np.float32, np.float64):
        for n_features, share in ((1, 0.5), (40, 0.3), (3000, 0.6), (20_000, 0.9)):
            maps = rng.standard_normal((9, n_features)).astype(kind)
            inside = rng.uniform(size=maps.shape) < share
            inside[4] = False
            present = rng.uniform(size=maps.shape) < 0.8
            for there in (None, present):
                expected = [
                    region_mean(row[mask], None if there is None else there[i][mask])
                    for i, (row, mask) in enumerate(zip(maps, inside, strict=True))
                ]
                read = RowMeans(9)
                for start in range(0, n_features, 700):
                    some = slice(start, start + 700)
                    read.add(
                        maps[:, some], inside.T[some], None if there is None else there[:, some]
                    )
                means, coverage = read.made()
                assert list(zip(means.tolist(), coverage.tolist(), strict=True)) == expected


def test_critical_t_is_the_same_by_table_and_by_itself():
    p = np.array([0.01, 0.0, 0.2])
    rows = np.array([[12.0], [12.0], [1.0]])
    alone = controlled.critical_t(p, rows)
    assert np.array_equal(alone.repeat(2, axis=1), controlled.critical_t(p, rows.repeat(2, axis=1)))
