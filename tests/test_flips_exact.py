"""Flips are quick because float32 and guesses spare work: neither may decide anything.

Every rule, in whole runs, against the plain loop of `tests/bench/naive.py` in float64; data that
are hard on float32 against exact maps; and the parts of the screen by themselves.
"""

from __future__ import annotations

import importlib.util
from pathlib import Path

import numpy as np
import pytest
from scipy import ndimage
from sequester.nodes import signed
from sequester.nodes.controlled import Controlled, step_up
from sequester.nodes.flips import random_signs
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.leading import strongest_of_each, strongest_within
from sequester.nodes.masks import Cluster, PeakSphere, Strongest, Threshold
from sequester.nodes.procedure import Procedure
from sequester.nodes.signed import SignedMaps
from sequester.nodes.space import Grid

PEOPLE = [f"{i:02}" for i in range(13)]
GRID = Grid((18, 16, 12), np.diag([2.0, 2.0, 2.0, 1.0]))


def by(control, level=0.1):
    return Controlled(control, level, n_flips=39)


RULES = {
    "threshold": Threshold(p=0.01),
    "cluster": Cluster(p=0.01, min_size=5),
    "cluster of the peak": Cluster(p=0.01, pick="peak", min_size=3),
    "strongest": Strongest(k=40),
    "strongest means": Strongest(k=40, map_kind="mean"),
    "fraction": Strongest(fraction=0.05),
    "fraction of means": Strongest(fraction=0.05, map_kind="mean"),
    "peak sphere": PeakSphere(radius=5.0),
    "bonferroni": Threshold(control=by("bonferroni")),
    "benjamini-hochberg": Threshold(control=by("benjamini-hochberg", 0.2)),
    "max-t": Threshold(control=by("max-t")),
    "random field": Threshold(control=by("random-field")),
    "cluster extent by flips": Cluster(p=0.01, extent=by("max-cluster")),
    "cluster extent by random field": Cluster(p=0.01, extent=by("random-field")),
}


def naive_loop():
    place = Path(__file__).with_name("bench") / "naive.py"
    spec = importlib.util.spec_from_file_location("naive", place)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module.Loop


def effects(seed=0, strength=0.9):
    rng = np.random.default_rng(seed)
    white = rng.standard_normal((len(PEOPLE), *GRID.shape))
    x = ndimage.gaussian_filter(white, (0, 1.2, 1.2, 1.2)).reshape(len(PEOPLE), -1)
    x /= x.std()
    return (x + strength * (np.arange(GRID.n_features) < 300)).astype(np.float32)


def chosen_under(made, x, signs):
    """Masks (n_signs, n_folds, n_features) and values of many flips at once."""
    ready = made.prepare(x, PEOPLE, GRID)
    masks, values = [], []
    for chosen, people in ready._each(signs):
        mask = np.zeros((len(ready.folds), GRID.n_features), bool)
        mask[:, chosen.features] = chosen.members.T
        masks.append(mask)
        values.append(people)
    return np.array(masks), np.array(values)


@pytest.mark.parametrize("rule", RULES)
def test_flips_choose_and_read_what_the_plain_loop_does(rule):
    x, signs = effects(), random_signs(1, PEOPLE, 0, 40)
    # Two near the data as they are, where rules that control an error find something.
    signs[0], signs[1] = 1, np.where(np.arange(len(PEOPLE)) == 3, -1, 1)
    loop = naive_loop()(RULES[rule], GRID)
    exact = x.astype(np.float64)
    loop.settle(exact, PEOPLE)
    masks, values = chosen_under(Procedure(RULES[rule]), x, signs)
    for i in (0, 1, 5, 20, 39):
        expected, read = loop.one_flip(exact, signs[i])
        assert np.array_equal(masks[i], expected)
        assert values[i] == pytest.approx(read, abs=1e-12)
    assert masks[0].any() or rule == "bonferroni"


def hard(kind):
    """Data that float32 cannot rank: ties, nearly ties, outliers, all sizes of numbers."""
    rng = np.random.default_rng(5)
    x = effects(2, 0.3).astype(np.float64)
    if kind == "ties":
        x = np.round(x * 2) / 2
        x[x == 0] = 0.5
        x[:, 1000:2000] = x[:, :1000]
    elif kind == "nearly ties":
        x = x[:, rng.integers(0, 200, GRID.n_features)] * (1 + 1e-9 * rng.normal(size=x.shape[1]))
        x += 1e-9 * rng.normal(size=x.shape)
    elif kind == "outliers":
        x[4, ::3] *= 1e6
        x[7, ::5] *= -1e4
    else:
        x *= 10.0 ** rng.uniform(-44, 44, x.shape[1])
        x[2, ::7] = np.nan
    return x


@pytest.mark.parametrize("scheme", [LeaveOneOut(), KFold(4)], ids=["leave one out", "4 folds"])
@pytest.mark.parametrize("kind", ["ties", "nearly ties", "outliers", "sizes"])
@pytest.mark.parametrize(
    "rule", ["threshold", "strongest", "strongest means", "fraction", "benjamini-hochberg"]
)
def test_data_that_float32_cannot_rank_are_ranked_exactly(rule, kind, scheme):
    x, made = hard(kind), Procedure(RULES[rule], scheme)
    signs = random_signs(2, PEOPLE, 0, 12)
    masks, values = chosen_under(made, x, signs)
    # One flip at a time goes through exact maps of all features.
    plain = made.prepare(x, PEOPLE, GRID)
    for one, mask, read in zip(signs, masks, values, strict=True):
        outcome = plain.outcome(one)
        assert outcome.sizes == tuple(mask.sum(axis=1).tolist())
        assert outcome.values == tuple(read.tolist())


def test_a_guess_that_is_wrong_changes_nothing(monkeypatch):
    x, signs = effects(3, 0.0), random_signs(3, PEOPLE, 0, 40)
    made = Procedure(RULES["strongest"])
    masks, values = chosen_under(made, x, signs)
    looks = []
    look = SignedMaps._may_reach

    def counted(self, some, *args):
        looks.append(len(some))
        return look(self, some, *args)

    monkeypatch.setattr(SignedMaps, "_may_reach", counted)
    for guess, least in ((0.99, 100), (1e-3, 40)):
        monkeypatch.setattr(SignedMaps, "_guess", lambda *_, guess=guess: guess)
        looks.clear()
        again, read = chosen_under(made, x, signs)
        assert np.array_equal(again, masks)
        assert np.array_equal(read, values)
        assert sum(looks) >= least


@pytest.mark.parametrize("kind", ["t", "mean"])
@pytest.mark.parametrize("scheme", [LeaveOneOut(), KFold(4)], ids=["leave one out", "4 folds"])
def test_no_feature_that_reaches_a_value_is_screened_out(scheme, kind):
    """And few others are let through: a screen that spares nothing would be right, too."""
    x, signs = effects(4), random_signs(4, PEOPLE, 0, 20)
    maps = Procedure(Threshold(p=0.01), scheme).prepare(x, PEOPLE, GRID)._choosing._maps
    everything = np.arange(GRID.n_features)
    # The rows are sorted by label already.
    exact = [maps.maps(row.astype(float), everything, kind) for row in signs]
    n = maps._sizes[:, None]
    for level in (0.2, 0.6):
        found = maps._may_reach(signs.astype(float), np.full(len(n), level), kind)
        for values, may in zip(exact, found, strict=True):
            u = values / np.sqrt(n - 1 + values**2) if kind == "t" else values
            reach = np.flatnonzero((u >= level).any(axis=0))
            assert np.isin(reach, may).all()
            assert len(may) < 4 * len(reach) + 50


def test_float32_is_off_by_no_more_than_is_said():
    x, signs = effects(6), random_signs(6, PEOPLE, 0, 5).astype(float)
    x[1, ::4] *= 300
    maps = Procedure(Threshold(p=0.01)).prepare(x, PEOPLE, GRID)._choosing._maps
    maps.stack.turn()
    everything = np.arange(GRID.n_features)
    for kind in ("t", "mean"):
        screen = maps._screen(kind)
        for row in signs:
            near, off = maps._values(row, everything, kind)
            exact = maps._exact_values(row, everything, kind)
            told = screen.told
            assert told.mean() > 0.5 and off == screen.off
            # Of float32 indeed, and where it cannot tell float64 stands in.
            assert (near != exact)[:, told].any()
            assert (np.abs(near - exact) <= off).all()


def test_the_strongest_by_values_that_are_nearly_known_are_the_strongest():
    rng = np.random.default_rng(8)
    for _ in range(300):
        exact = rng.integers(0, 9, (4, 30)) / 10 + (rng.uniform(size=(4, 30)) < 0.2)
        exact[rng.uniform(size=exact.shape) < 0.1] = np.nan
        off = rng.choice([0.0, 0.01, 0.2])
        near = np.where(np.isnan(exact), -np.inf, exact + off * rng.uniform(-1, 1, exact.shape))
        k = rng.integers(0, 31, 4).tolist()
        chosen, _ = strongest_within(near, k, off, lambda some, exact=exact: exact[:, some])
        assert np.array_equal(chosen, strongest_of_each(exact, k))


def test_a_step_up_from_a_bound_on_what_it_finds_finds_the_same():
    rng, rows = np.random.default_rng(9), np.full((3, 1), 12.0)
    n_tests = np.array([400, 300, 400])
    for strength in (0.0, 2.0, 4.0):
        t = rng.standard_t(11, (3, 400)) + strength * (np.arange(400) < 60)
        whole = step_up(t, rows, n_tests, 0.2)
        found = np.round(whole / 0.2 * n_tests).astype(int)
        for most in (found, found + 7, np.minimum(2 * found + 3, n_tests)):
            assert np.array_equal(step_up(t, rows, n_tests, 0.2, most), whole)


def test_with_no_room_for_widths_float64_does_it_all(monkeypatch):
    x, signs = effects(7), random_signs(7, PEOPLE, 0, 10)
    for rule in ("threshold", "fraction", "benjamini-hochberg"):
        made = Procedure(RULES[rule])
        masks, values = chosen_under(made, x, signs)
        with monkeypatch.context() as patch:
            patch.setattr(signed, "_KEPT", 0)
            again, read = chosen_under(made, x, signs)
        assert np.array_equal(again, masks)
        assert np.array_equal(read, values)
