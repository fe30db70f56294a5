"""The peak of every fold's mask: of the map of those who chose it, and of nobody else."""

import numpy as np
import pytest
from planting import a_grid
from sequester.nodes import foldstack, interfaces
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.groupmaps import Missing, group_map
from sequester.nodes.images import read_map, write_map
from sequester.nodes.masks import Cluster, PeakSphere, Strongest, Threshold
from sequester.nodes.models import Score
from sequester.nodes.procedure import Procedure
from sequester.nodes.space import Grid

AFFINE = np.array([[3.0, 0, 0, -9], [0, 3, 0, -8], [0, 0, 3, -7], [0, 0, 0, 1]])
GRID = Grid((6, 5, 4), AFFINE)
PEOPLE = [f"{i:02}" for i in range(9)]
RULES = [
    Threshold(p=0.05),
    Cluster(p=0.1, connectivity=6),
    Strongest(7),
    Strongest(7, "mean"),
    PeakSphere(4.0),
]


def effects_of(seed=1, holes=False):
    rng = np.random.default_rng(seed)
    x = rng.normal(size=(9, GRID.n_features)) + np.where(rng.random(GRID.n_features) < 0.1, 0.8, 0)
    return np.where(rng.random(x.shape) < 0.15, np.nan, x) if holes else x


@pytest.mark.parametrize("holes", [False, True])
@pytest.mark.parametrize("scheme", [LeaveOneOut(), KFold(3)])
@pytest.mark.parametrize("tail", ["positive", "negative"])
@pytest.mark.parametrize("rule", RULES)
def test_it_is_the_highest_of_a_plain_loop(rule, tail, scheme, holes, monkeypatch):
    monkeypatch.setattr(foldstack, "BLOCK", 3)
    x, missing = effects_of(holes=holes), Missing(min_fraction=0.5)
    ready = Procedure(rule, scheme, tail, missing=missing).prepare(x, PEOPLE, GRID)
    masks, sign = ready.masks(), 1 if tail == "positive" else -1
    assert any(mask.any() for mask in masks)
    for fold, mask, found in zip(ready.folds, masks, ready.peaks(masks), strict=True):
        if not mask.any():
            assert found is None
            continue
        there, value = found
        chose = group_map(x[list(fold.selection)], missing, rule.map_kind)
        assert mask[there]
        assert value == pytest.approx(chose[there], rel=1e-9)
        assert sign * value == pytest.approx(np.nanmax((sign * chose)[mask]), rel=1e-9)


def test_of_a_correlation_it_is_the_highest_t_of_the_score():
    x, score = effects_of(), np.random.default_rng(5).normal(size=9)
    model = Score(tuple(zip(PEOPLE, score.tolist(), strict=True)))
    ready = Procedure(Strongest(7), model=model).prepare(x, PEOPLE, GRID)
    masks = ready.masks()
    for i, (there, t) in enumerate(ready.peaks(masks)):
        others = np.arange(9) != i
        r = np.array([np.corrcoef(column, score[others])[0, 1] for column in x[others].T])
        assert there == np.flatnonzero(masks[i])[r[masks[i]].argmax()]
        assert t == pytest.approx(r[there] * np.sqrt(6 / (1 - r[there] ** 2)))


def test_nothing_of_those_held_out_is_in_it():
    x = effects_of()
    ready = Procedure(Threshold(p=0.05)).prepare(x, PEOPLE, GRID)
    before = ready.peaks(ready.masks())[4]
    other = x.copy()
    other[4] = 1e30
    ready = Procedure(Threshold(p=0.05)).prepare(other, PEOPLE, GRID)
    after = ready.peaks(ready.masks())
    assert after[4] == before
    assert after[3] != before


def test_nodes_give_it_in_mm(tmp_path):
    x = effects_of()
    geometry = a_grid(GRID.shape, AFFINE)
    paths = [
        str(write_map(tmp_path / f"{i}.nii", row.reshape(GRID.shape).astype(np.float32), geometry))
        for i, row in enumerate(x)
    ]
    rule, mm = Strongest(7), GRID.coordinates()
    plan = {"in_files": paths, "labels": PEOPLE, "procedure": Procedure(rule)}
    made = interfaces.ChooseByFold(**plan).run(cwd=str(tmp_path)).outputs
    ready = Procedure(rule).prepare(x.astype(np.float32), PEOPLE, GRID)
    for peak, (there, value) in zip(made.peaks, ready.peaks(ready.masks()), strict=True):
        assert peak == [*mm[there], pytest.approx(value)]
    one = {"in_file": paths[0], "rule": rule, "negative": True}
    chosen = interfaces.ChooseMask(**one).run(cwd=str(tmp_path)).outputs
    lowest = read_map(paths[0])[0].ravel()
    assert chosen.peak == [*mm[lowest.argmin()], pytest.approx(lowest.min())]
    nothing = interfaces.ChooseMask(in_file=paths[0], rule=Threshold(height=99.0))
    assert nothing.run(cwd=str(tmp_path)).outputs.peak == []
