"""How often each plan rejects when nothing is there, by simulation, and what its estimates miss.

    python tests/bench/calibration.py [--quick] [--processes 2] [--folder FOLDER] [--json FILE]

Each cell of the table is a way of choosing a region, a number of subjects, a kind of noise and a
rule; beside them stand methods that are wrong, and must be seen to be. A finished cell is a file
in the folder, so that a run that was stopped goes on where it was. Every data set is keyed by its
cell and number: neither order nor processes change a digit.

Effects are in standard deviations between subjects, added in a block of the search region. An
estimate's error is taken against the mean true effect over the masks that were used.
"""

from __future__ import annotations

import argparse
import hashlib
import json
import multiprocessing
import os
import platform
import tempfile
from collections.abc import Callable, Iterable, Iterator
from dataclasses import asdict, dataclass
from functools import cache
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
from scipy import stats
from sequester.nodes.flips import random_signs
from sequester.nodes.folds import KFold, LeaveOneOut, Scheme
from sequester.nodes.groupmaps import group_map, without_each
from sequester.nodes.heldout import student
from sequester.nodes.masks import (
    Cluster,
    MaskRule,
    Neighbourhood,
    Strongest,
    Threshold,
    choose,
    components,
)
from sequester.nodes.procedure import Prepared, Procedure
from sequester.nodes.roi import (
    Interval,
    block_values,
    count_at_least,
    flip_interval,
    fold_interval,
    jackknife_interval,
    one_sample_t,
    per_person,
    studentised,
)
from sequester.nodes.space import Grid

SEED = 2024
ALPHA, P, FWHM, STRONGEST, N_FLIPS, N_RUNS = 0.05, 0.01, 3.0, 20, 199, 5
EFFECTS = (0.0, 0.5, 0.8)
SUBJECTS = (12, 20, 40)
LEAST_COVERAGE, MANY_ERRORS, FEW = 0.93, 4, 1000
SHAPES = {"independent": (10, 10, 8), "smooth": (12, 12, 12)}
# Of the two wrong methods that hang on clusters: their known figures are of smooth noise.
CLUSTERS, CLUSTERS_FWHM = (20, 20, 20), 2.5
BLOCKS = {"independent": np.s_[2:6, 3:7, 2:6], "smooth": np.s_[3:8, 3:8, 3:8]}
RULES: dict[str, MaskRule] = {
    "threshold": Threshold(p=P),
    "cluster": Cluster(p=P, connectivity=18, pick="largest"),
    "strongest": Strongest(STRONGEST),
}
# A subject's own localizer map is taken to be in standard normal units.
HEIGHT = float(stats.norm.isf(P))
OWN_RULES: dict[str, MaskRule] = {
    "threshold": Threshold(height=HEIGHT),
    "cluster": Cluster(height=HEIGHT, connectivity=18, pick="largest"),
    "strongest": Strongest(STRONGEST),
}
SCHEMES: dict[str, Scheme] = {
    "split-half, both directions": KFold(2),
    "5-fold": KFold(5),
    "leave-one-subject-out": LeaveOneOut(),
}
# How the subjects' maps are distributed; all but the skewed ones meet the flips' assumption.
ERRORS = {
    "normal": "normal",
    "unequal": "normal, subjects' sd from 0.5 to 2",
    "skewed up": "centred exponential",
    "skewed down": "centred exponential, turned round",
}
INTERVAL_KINDS = {
    "t": "exact",
    "flips": "approximate",
    "folds": "approximate",
    "jackknife": "conservative",
}

Found = Iterator[tuple[tuple[str, ...], float]]


@dataclass(frozen=True)
class Cell:
    """One line of the table: a plan (or a wrong method) under one set of circumstances."""

    plan: str
    n: int
    noise: str = "independent"
    rule: str = ""
    errors: str = "normal"
    wrong: bool = False

    @property
    def name(self) -> str:
        """Tells cells apart, and keys their data sets."""
        return ", ".join(str(v) for v in (self.plan, self.n, self.noise, self.rule, self.errors))


@dataclass(frozen=True)
class Detail:
    """Which of a cell's data sets are looked at more closely than for the rate: every so many.

    Parameters
    ----------
    effects : int
        Also with effects added; 0 for none.
    flips, jackknife : int
        Also with the interval made of all flips, or of the procedure without each subject, at
        these effects; 0 for none.
    """

    effects: int = 0
    flips: int = 0
    jackknife: int = 0

    def effects_in(self, number: int) -> tuple[float, ...]:
        """The effects at which a data set is looked at."""
        return EFFECTS if _each(self.effects, number) else EFFECTS[:1]


def _each(so_many: int, number: int) -> bool:
    return bool(so_many) and number % so_many == 0


# -- worlds ---------------------------------------------------------------------------------


class _Grid(Grid):
    """A grid that looks up its neighbours once."""

    @cache  # noqa: B019 - two grids live as long as the process
    def neighbours(self, connectivity: int = 18) -> np.ndarray:
        return super().neighbours(connectivity)


@cache
def grid_of(noise: str) -> _Grid:
    """The search region of a kind of noise."""
    return _Grid(SHAPES[noise], np.eye(4))


@cache
def truth_of(noise: str) -> np.ndarray:
    """(n_features,) 1 where an effect is added."""
    truth = np.zeros(SHAPES[noise], np.float32)
    truth[BLOCKS[noise]] = 1
    return truth.ravel()


@cache
def _root(size: int, fwhm: float = FWHM) -> np.ndarray:
    """The square root of the correlations along an axis of white noise smoothed to the FWHM."""
    width = fwhm / np.sqrt(8 * np.log(2))
    apart = np.subtract.outer(np.arange(size), np.arange(size))
    values, vectors = np.linalg.eigh(np.exp(-np.square(apart) / (4 * width**2)))
    return (vectors * np.sqrt(np.maximum(values, 0)) @ vectors.T).astype(np.float32)


def rng_of(cell: Cell, number: int) -> np.random.Generator:
    """The generator of one data set."""
    key = hashlib.sha256(f"{SEED}\0{cell.name}\0{number}".encode()).digest()
    return np.random.default_rng(int.from_bytes(key[:16], "little"))


def _smoothed(x: np.ndarray, fwhm: float = FWHM) -> np.ndarray:
    """White noise (rows, x, y, z) smoothed along every axis; its variance stays."""
    for axis in (1, 2, 3):
        x = np.moveaxis(np.moveaxis(x, axis, -1) @ _root(x.shape[axis], fwhm), -1, axis)
    return x


def noise_of(cell: Cell, rng: np.random.Generator, rows: int) -> np.ndarray:
    """(rows, n_features) float32 maps with mean 0; sd 1 unless the cell says otherwise."""
    shape = (rows, *SHAPES[cell.noise])
    if cell.errors.startswith("skewed"):
        x = rng.standard_exponential(shape, np.float32) - np.float32(1)
        x = -x if cell.errors == "skewed down" else x
    else:
        x = rng.standard_normal(shape, np.float32)
    if cell.noise == "smooth":
        x = _smoothed(x)
    x = x.reshape(rows, -1)
    if cell.errors == "unequal":
        x = x * np.geomspace(0.5, 2, rows, dtype=np.float32)[:, None]
    return np.ascontiguousarray(x)


@cache
def labels_of(n: int) -> list[str]:
    """The subjects' names."""
    return [f"{i:02}" for i in range(n)]


# -- plans ----------------------------------------------------------------------------------


def _covered(interval: Interval, target: float, name: str, d: float) -> Found:
    """Whether an interval holds its target, up to rounding."""
    slack = 1e-9
    yield ("covered", name, str(d)), interval.low - slack <= target <= interval.high + slack


def _by_t(values: np.ndarray, target: float, d: float) -> Found:
    """Student's t of one value a subject."""
    test = one_sample_t(values)
    if d == 0:
        yield ("rejected",), test.p <= ALPHA
    yield ("error", str(d)), test.mean - target
    yield from _covered(test.interval, target, "t", d)


def a_priori(cell: Cell, number: int, detail: Detail) -> Found:
    """The block itself, known beforehand."""
    x, truth = noise_of(cell, rng_of(cell, number), cell.n), truth_of(cell.noise)
    for d in detail.effects_in(number):
        values, _ = block_values((x + np.float32(d) * truth)[:, truth > 0])
        yield from _by_t(values, d, d)


def localizer(cell: Cell, number: int, detail: Detail) -> Found:
    """Each subject's own mask from a map with other noise, and the same effect."""
    x, truth = noise_of(cell, rng_of(cell, number), 2 * cell.n), truth_of(cell.noise)
    for d in detail.effects_in(number):
        maps = x + np.float32(d) * truth
        values, targets = np.zeros(cell.n), np.zeros(cell.n)
        for i in range(cell.n):
            mask = choose(maps[cell.n + i], OWN_RULES[cell.rule], grid_of(cell.noise))
            values[i] = _mean(maps[i], mask)
            targets[i] = d * _mean(truth, mask)
        yield from _by_t(values, float(targets.mean()), d)


def leave_one_run_out(cell: Cell, number: int, detail: Detail) -> Found:
    """Each subject's own masks from t over their other runs; runs averaged, then t."""
    x, truth = noise_of(cell, rng_of(cell, number), N_RUNS * cell.n), truth_of(cell.noise)
    procedure = Procedure(RULES[cell.rule], scheme=LeaveOneOut(2))
    runs = labels_of(N_RUNS)
    # A run's noise is such that the mean over a subject's runs has an sd of 1.
    x *= np.float32(np.sqrt(N_RUNS))
    for d in detail.effects_in(number):
        values, targets = np.zeros(len(x)), np.zeros(len(x))
        for start in range(0, len(x), N_RUNS):
            own = x[start : start + N_RUNS] + np.float32(d) * truth
            masks = procedure.prepare(own, runs, grid_of(cell.noise)).masks()
            for run, mask in enumerate(masks):
                values[start + run] = _mean(own[run], mask)
                targets[start + run] = d * _mean(truth, mask)
        people = [label for label in labels_of(cell.n) for _ in runs]
        yield from _by_t(np.array(per_person(values.tolist(), people)), float(targets.mean()), d)


def one_split(cell: Cell, number: int, detail: Detail) -> Found:
    """Half of the people choose one mask, the others are tested in it."""
    x, truth = noise_of(cell, rng_of(cell, number), cell.n), truth_of(cell.noise)
    half = cell.n // 2
    for d in detail.effects_in(number):
        maps = x + np.float32(d) * truth
        mask = choose(group_map(maps[:half]), RULES[cell.rule], grid_of(cell.noise), half)
        values, _ = block_values(maps[half:, mask])
        yield from _by_t(values, d * _mean(truth, mask), d)


def cross_fitted(cell: Cell, number: int, detail: Detail) -> Found:
    """Everybody is held out once; the test flips the whole procedure."""
    x, truth = noise_of(cell, rng_of(cell, number), cell.n), truth_of(cell.noise)
    procedure = Procedure(RULES[cell.rule], scheme=SCHEMES[cell.plan])
    for d in detail.effects_in(number):
        ready = procedure.prepare(
            x + np.float32(d) * truth, labels_of(cell.n), grid_of(cell.noise), copy=False
        )
        outcome = ready.outcome()
        people = ready.per_person(outcome.values)
        target = d * _target(ready, truth)
        yield ("error", str(d)), outcome.estimate - target
        n_folds = len(ready.folds)
        # With an empty fold a result has no interval: what is covered is of those that are given.
        yield ("given", str(d)), not outcome.empty
        if outcome.empty:
            if d == 0:
                yield ("rejected",), rejects(ready, outcome.t, number)
            continue
        if 2 * n_folds <= cell.n:
            yield from _covered(fold_interval(people, n_folds), target, "folds", d)
        if _each(detail.flips, number):
            test = ready.flip_test(N_FLIPS, number)
            if d == 0:
                rejected = test.p <= ALPHA
                assert rejected == rejects(ready, outcome.t, number), "a decision came too early"
                yield ("rejected",), rejected
            quantile = max(test.abs_t_quantile, student(cell.n - 1))
            yield from _covered(flip_interval(people, quantile), target, "flips", d)
        elif d == 0:
            yield ("rejected",), rejects(ready, outcome.t, number)
        if _each(detail.jackknife, number):
            jackknife = jackknife_interval(outcome.estimate, ready.without_each_person())
            yield from _covered(jackknife, target, "jackknife", d)


def rejects(ready: Prepared, t: float, seed: int, at_once: int = 16) -> bool:
    """Whether `flip_test` would give p <= .05, told as soon as enough flips have reached t."""
    enough = int(np.floor(ALPHA * (N_FLIPS + 1)))
    signs, reached = random_signs(seed, ready.people, 0, N_FLIPS), 0
    for start in range(0, N_FLIPS, at_once):
        reached += count_at_least(t, ready.flips(signs[start : start + at_once])[0])
        if reached >= enough:
            return False
    return True


def _target(ready: Prepared, truth: np.ndarray) -> float:
    """The mean true effect over the fold masks, a fold counting as often as it holds out."""
    total = sum(
        len(fold.held_out) * _mean(truth, mask)
        for fold, mask in zip(ready.folds, ready.masks(), strict=True)
    )
    return total / len(ready.people)


def _mean(values: np.ndarray, mask: np.ndarray) -> float:
    """The mean in a mask, 0 in an empty one."""
    return float(values[mask].mean(dtype=np.float64)) if mask.any() else 0.0


# -- wrong methods --------------------------------------------------------------------------


def _found(values: np.ndarray) -> Found:
    """The bias of values, and whether a plain two-sided t rejects."""
    test = one_sample_t(values)
    yield ("rejected",), test.p <= ALPHA
    yield ("error", "0.0"), test.mean


def _left_out(x: np.ndarray) -> np.ndarray:
    """(n, n_features) bool: the mask of every fold, from the others' t."""
    n = len(x) - 1
    S, Q = without_each(x), without_each(np.square(x))
    with np.errstate(invalid="ignore"):
        return S * np.sqrt((n - 1) / (n * Q - S * S)) > stats.t.isf(P, n - 1)


def _read(x: np.ndarray, masks: np.ndarray) -> np.ndarray:
    """Each row's mean in its own mask."""
    return (x * masks).sum(axis=1) / np.maximum(masks.sum(axis=1), 1)


def wrong(cell: Cell, number: int, detail: Detail) -> Found:
    """A wrong method on one data set without an effect (of what is tested)."""
    rng = rng_of(cell, number)
    x = noise_of(cell, rng, cell.n).astype(np.float64)
    yield from WRONG[cell.plan].run(x, rng, number)


def _circular(x: np.ndarray, rng: np.random.Generator, number: int) -> Found:
    # By the known sd, as the formula of the known figure is; so in `_centred`.
    mask = x.sum(axis=0) > HEIGHT * np.sqrt(len(x))
    if mask.any():
        yield from _found(x[:, mask].mean(axis=1))


def _plain_t(x: np.ndarray, rng: np.random.Generator, number: int) -> Found:
    yield from _found(_read(x, _left_out(x)))


def _fixed_masks(x: np.ndarray, rng: np.random.Generator, number: int) -> Found:
    values = _read(x, _left_out(x))
    signs = random_signs(number, labels_of(len(x)), 0, N_FLIPS)
    others = np.array([studentised(values * row) for row in signs])
    b = count_at_least(abs(studentised(values)), np.abs(others))
    yield ("rejected",), (1 + b) / (1 + N_FLIPS) <= ALPHA


def _centred(x: np.ndarray, rng: np.random.Generator, number: int) -> Found:
    masks = without_each(x) > HEIGHT * np.sqrt(len(x) - 1)
    yield from _found(_read(x - x.mean(axis=0), masks))


def _joint_flips(correlation: float) -> Callable[..., Found]:
    def run(x: np.ndarray, rng: np.random.Generator, number: int) -> Found:
        a = x + truth_of("independent")
        b = correlation * x + np.sqrt(1 - correlation**2) * rng.standard_normal(x.shape)
        n, Q = len(x), np.square(a).sum(axis=0)
        c = float(stats.t.isf(P, n - 1))
        bound = c * np.sqrt(n * Q / (n - 1 + c * c))

        def t(signs: np.ndarray) -> float:
            mask = signs @ a > bound
            return studentised(signs * b[:, mask].mean(axis=1)) if mask.any() else 0.0

        flips = random_signs(number, labels_of(n), 0, N_FLIPS).astype(float)
        reached = count_at_least(t(np.ones(n)), np.array([t(row) for row in flips]))
        yield ("rejected",), (1 + reached) / (1 + N_FLIPS) <= ALPHA

    return run


@cache
def _clustered() -> _Grid:
    return _Grid(CLUSTERS, np.eye(4))


def _with_clusters(rng: np.random.Generator, rows: int) -> tuple[np.ndarray, np.ndarray]:
    """Smooth noise (rows, n_features), and the largest cluster of its group map."""
    x = _smoothed(rng.standard_normal((rows, *CLUSTERS), np.float32), CLUSTERS_FWHM)
    x = x.reshape(rows, -1).astype(np.float64)
    return x, choose(group_map(x), RULES["cluster"], _clustered(), rows)


def _clusters_of(mask: np.ndarray) -> list[np.ndarray]:
    """The clusters of a mask, the largest first."""
    features = np.flatnonzero(mask)
    pairs = Neighbourhood(_clustered(), 18).pairs(features)
    candidate, _, number = components(np.ones((len(features), 1), bool), pairs)
    parts = [features[candidate[number == k]] for k in range(number.max(initial=-1) + 1)]
    return sorted(parts, key=len, reverse=True)


def _matched(x: np.ndarray, rng: np.random.Generator, number: int) -> Found:
    x, everyone = _with_clusters(rng, len(x))
    values = np.zeros(len(x))
    for i, mask in enumerate(_left_out(x)):
        part = max(_clusters_of(mask), key=lambda one: everyone[one].sum(), default=[])
        if len(part) and everyone[part].any():
            values[i] = x[i, part].mean()
    yield from _found(values)


def _cut(x: np.ndarray, rng: np.random.Generator, number: int) -> Found:
    x, everyone = _with_clusters(rng, len(x))
    yield from _found(_read(x, _left_out(x) & everyone))


def _score(x: np.ndarray, rng: np.random.Generator, number: int) -> Found:
    score, n = rng.standard_normal(len(x)), len(x)
    values, k = np.zeros(n), round(0.02 * x.shape[1])
    for i in range(n):
        others = np.arange(n) != i
        centred = x[others] - x[others].mean(axis=0)
        r = (score[others] - score[others].mean()) @ centred / np.sqrt((centred**2).sum(axis=0))
        values[i] = x[i, np.argpartition(r, -k)[-k:]].mean()
    test = stats.pearsonr(values, score)
    yield ("rejected",), test.pvalue <= ALPHA
    yield ("error", "0.0"), float(test.statistic)


def _same_people(r: float) -> Callable[..., Found]:
    def run(x: np.ndarray, rng: np.random.Generator, number: int) -> Found:
        # 2,000 features, so that some twenty are chosen, as for the known figures.
        one, noise = rng.standard_normal((2, len(x), 2000))
        mask = one.sum(axis=0) > HEIGHT * np.sqrt(len(x))
        yield from _found((r * one + np.sqrt(1 - r * r) * noise)[:, mask].mean(axis=1))

    return run


@dataclass(frozen=True)
class Wrong:
    """A wrong method, and what it is known for.

    Parameters
    ----------
    run : callable
        Takes noise (n, n_features), a generator and the data set's number.
    rate, bias : float or None
        Rejections at .05 and bias in sd for 20 subjects, independent features, p < .01: by
        formula, or simulated before with some hundred data sets.
    """

    run: Callable[[np.ndarray, np.random.Generator, int], Found]
    rate: float | None
    bias: float | None = None


WRONG = {
    "circular: chosen and read on the same data": Wrong(_circular, 1.0, 0.596),
    "leave-one-subject-out, flips with the masks kept": Wrong(_fixed_masks, 0.38),
    "leave-one-subject-out, plain t": Wrong(_plain_t, 0.37),
    "maps centred on a mean that holds the held-out subject": Wrong(_centred, None, -0.581),
    "same data, A chooses and is real, B tested by joint flips, r = -.5": Wrong(
        _joint_flips(-0.5), 0.62
    ),
    "same data, A chooses and is real, B tested by joint flips, r = -.2": Wrong(
        _joint_flips(-0.2), 0.20
    ),
    "each fold's cluster matched to the largest of all data, plain t": Wrong(
        _matched, 0.725, 0.377
    ),
    "each fold's mask cut to the largest cluster of all data, plain t": Wrong(_cut, 0.99, 0.499),
    "leave-one-subject-out correlation with a score, ordinary test": Wrong(_score, 0.237, 0.02),
    "group mask from other runs of the same people, r = .05": Wrong(_same_people(0.05), 0.087),
    "group mask from other runs of the same people, r = .1": Wrong(_same_people(0.1), 0.205),
    "group mask from other runs of the same people, r = .2": Wrong(_same_people(0.2), 0.619),
}
PLANS: dict[str, Callable[[Cell, int, Detail], Found]] = {
    "a-priori": a_priori,
    "localizer, own masks": localizer,
    "leave-one-run-out, own masks": leave_one_run_out,
    "one split across subjects": one_split,
    **dict.fromkeys(SCHEMES, cross_fitted),
}


# -- running --------------------------------------------------------------------------------

CHUNK = 250
DEAR = {"leave-one-run-out, own masks", *SCHEMES}


def cells() -> list[Cell]:
    """Every line of the table."""
    made = [Cell(name, 20, wrong=True) for name in WRONG]
    for plan in PLANS:
        rules = ("given",) if plan == "a-priori" else tuple(RULES)
        made += [Cell(plan, n, noise, rule) for n in SUBJECTS for noise in SHAPES for rule in rules]
    made += [
        Cell(plan, 20, "independent", rule, errors)
        for errors in ERRORS
        for plan in SCHEMES
        for rule in RULES
        if errors != "normal"
    ]
    return made


def detail_of(cell: Cell) -> Detail:
    """What is affordable, where a data set takes some hundred repetitions of the procedure."""
    if cell.wrong or cell.errors != "normal":
        return Detail()
    if cell.plan in SCHEMES:
        return Detail(effects=4, flips=40, jackknife={12: 4, 20: 8, 40: 20}[cell.n])
    return Detail(effects=4 if cell.plan == "leave-one-run-out, own masks" else 1)


def simulate(cell: Cell, numbers: range) -> dict[str, list[float]]:
    """What was found in some of a cell's data sets, by kind and in their order."""
    detail, run = detail_of(cell), wrong if cell.wrong else PLANS[cell.plan]
    found: dict[str, list[float]] = {}
    for number in numbers:
        for key, value in run(cell, number, detail):
            found.setdefault(" ".join(key), []).append(float(value))
    return found


@dataclass(frozen=True)
class Job:
    """Some data sets of a cell, and the file that keeps what was found in them.

    The file knows its cell, numbers and settings, but not the code: a folder belongs to one
    version of it.
    """

    cell: Cell
    numbers: range
    folder: Path

    @property
    def path(self) -> Path:
        """The file."""
        told = f"{SEED} {N_FLIPS} {self.cell.name} {detail_of(self.cell)} {self.numbers}"
        return self.folder / f"{hashlib.sha256(told.encode()).hexdigest()[:16]}.json"

    def run(self) -> None:
        """Simulate, and write the file in one step."""
        text = json.dumps(simulate(self.cell, self.numbers))
        part = self.path.with_suffix(f".{os.getpid()}")
        part.write_text(text)
        part.replace(self.path)


def jobs(folder: Path, data_sets: int) -> list[Job]:
    """All of them: what is cheap, then the first data sets of every other cell, then the next."""
    every = [
        Job(cell, range(start, min(start + CHUNK, data_sets)), folder)
        for start in range(0, data_sets, CHUNK)
        for cell in cells()
    ]
    return sorted(every, key=lambda job: job.cell.plan in DEAR)


def share(values: list[float]) -> list[float]:
    """A mean, its Monte Carlo error, and of how many."""
    x = np.array(values)
    error = x.std(ddof=1) / np.sqrt(len(x)) if len(x) > 1 else np.nan
    return [round(float(x.mean()), 5), round(float(error), 5), len(x)]


def summaries(done: list[Job]) -> list[dict[str, Any]]:
    """Per cell: the rate, the bias by effect, the coverage by interval and effect."""
    found: dict[Cell, dict[str, list[float]]] = {}
    for job in done:
        of_cell = found.setdefault(job.cell, {})
        for key, values in json.loads(job.path.read_text()).items():
            of_cell.setdefault(key, []).extend(values)
    made = []
    for cell in (cell for cell in cells() if cell in found):
        line: dict[str, Any] = asdict(cell) | {"rate": None, "bias": {}, "given": {}}
        line["coverage"] = {}
        for key, values in found[cell].items():
            match key.split():
                case ["rejected"]:
                    line["rate"] = share(values)
                case ["error", d]:
                    line["bias"][d] = share(values)
                case ["given", d]:
                    line["given"][d] = share(values)
                case ["covered", kind, d]:
                    line["coverage"].setdefault(kind, {})[d] = share(values)
        made.append(line)
    return made


# -- the table ------------------------------------------------------------------------------


def rate_verdict(line: dict[str, Any]) -> str:
    """What a rate at .05 says: whether it is farther from .05 than four Monte Carlo errors."""
    rate, _, n = line["rate"]
    if rate > ALPHA + MANY_ERRORS * np.sqrt(ALPHA * (1 - ALPHA) / n):
        return "liberal" if line["errors"].startswith("skewed") else "FAIL"
    # Of few data sets .05 minus four errors is below 0; the binomial tail still tells.
    seldom = stats.binom.cdf(round(rate * n), n, ALPHA) < stats.norm.sf(MANY_ERRORS)
    return "conservative" if seldom else "calibrated"


def faults(line: dict[str, Any]) -> list[str]:
    """What is off in a plan's line, in words; none for a plan that keeps what it promises."""
    found = [] if rate_verdict(line) in ("calibrated", "conservative") else ["rate"]
    for d, (mean, error, _) in line["bias"].items():
        if abs(mean) > MANY_ERRORS * error:
            found.append(f"bias at d = {d}")
    for kind, of_effect in line["coverage"].items():
        for d, (value, _, n) in of_effect.items():
            # Few data sets cannot tell .95 from .93.
            error = np.sqrt(LEAST_COVERAGE * (1 - LEAST_COVERAGE) / n) if n < FEW else 0.0
            if INTERVAL_KINDS[kind] != "approximate" and value < LEAST_COVERAGE - 2 * error:
                found.append(f"{kind} coverage at d = {d}")
    return found


def known_verdict(line: dict[str, Any]) -> str:
    """Whether a wrong method fails, and as it is known to."""
    rate, bias = line["rate"], line["bias"].get("0.0")
    known = WRONG[line["plan"]]
    limit = MANY_ERRORS * float(np.sqrt(ALPHA * (1 - ALPHA) / rate[2]))
    fails = rate[0] > ALPHA + limit
    # The known figures were simulated too, with some 500 data sets.
    near = known.rate is None or abs(rate[0] - known.rate) <= MANY_ERRORS * np.sqrt(
        max(known.rate * (1 - known.rate), 0.01) * (1 / 500 + 1 / rate[2])
    )
    if known.bias is not None:
        near &= abs(bias[0] - known.bias) <= MANY_ERRORS * bias[1] * np.sqrt(1 + rate[2] / 500)
    return ("fails" if fails else "DOES NOT FAIL") + ("" if near else ", by another figure")


def pooled(lines: list[dict[str, Any]]) -> dict[str, Any]:
    """Rate, bias and coverage over the data sets of several cells."""
    made: dict[str, Any] = {"rate": _together([line["rate"] for line in lines]), "coverage": {}}
    for kind in INTERVAL_KINDS:
        for d in map(str, EFFECTS):
            parts = [line["coverage"].get(kind, {}).get(d) for line in lines]
            if any(parts):
                of_effect = made["coverage"].setdefault(kind, {})
                of_effect[d] = _together([part for part in parts if part])
    return made


def _together(shares: list[list[float]]) -> list[float]:
    """The share in all data sets, its Monte Carlo error, and of how many."""
    n = sum(part[2] for part in shares)
    whole = sum(part[0] * part[2] for part in shares) / n
    return [whole, float(np.sqrt(whole * (1 - whole) / n)), n]


def _number(value: float | None, digits: int = 3) -> str:
    if value is None:
        return ""
    return ("-" if value < 0 else "") + f"{abs(value):.{digits}f}".removeprefix("0")


def _with_error(part: list[float] | None) -> str:
    return "" if part is None else f"{_number(part[0])} ± {_number(part[1])}"


def _by_effect(of_effect: dict[str, list[float]]) -> str:
    return " / ".join(_number(of_effect[d][0]) for d in map(str, EFFECTS) if d in of_effect)


def _rows(head: list[str], lines: list[list[str]]) -> str:
    rows = [head, ["---"] * len(head), *lines]
    return "\n".join(f"| {' | '.join(row)} |" for row in rows)


def _intervals(line: dict[str, Any], kinds: Iterable[str]) -> list[str]:
    return [_by_effect(line["coverage"].get(kind, {})) for kind in kinds]


def _heads(kinds: Iterable[str]) -> list[str]:
    return [f"{kind} ({INTERVAL_KINDS[kind]})" for kind in kinds]


def _given(lines: list[dict[str, Any]]) -> str:
    """What the coverage says of data sets in which a fold found nothing."""
    if any(line.get("given") for line in lines):
        return (
            "A result with an empty fold has no interval: the coverage is of those that are given."
        )
    return (
        "A result with an empty fold has no interval any more. When these data sets were made it "
        "still had one, which is counted here; with an effect hardly any has an empty fold, and "
        "without one up to an eighth of the data sets of a cell."
    )


def _plan_row(line: dict[str, Any], kinds: Iterable[str]) -> list[str]:
    off = [
        f"{mean / error:+.1f}" if error else "0"
        for mean, error, _ in (line["bias"][d] for d in map(str, EFFECTS) if d in line["bias"])
    ]
    return [
        line["plan"],
        str(line["n"]),
        line["noise"] if line["errors"] == "normal" else ERRORS[line["errors"]],
        line["rule"],
        str(line["rate"][2]),
        _with_error(line["rate"]),
        "; ".join([rate_verdict(line), *(fault for fault in faults(line) if fault != "rate")]),
        " / ".join(off),
        *_intervals(line, kinds),
    ]


def _wrong_row(line: dict[str, Any]) -> list[str]:
    known = WRONG[line["plan"]]
    return [
        line["plan"],
        str(line["rate"][2]),
        _with_error(line["rate"]),
        _number(known.rate),
        _with_error(line["bias"].get("0.0")),
        _number(known.bias),
        known_verdict(line),
    ]


def table(results: dict[str, Any]) -> str:
    """The results as Markdown: in short, each plan, the flips under other errors, what is wrong."""
    lines = results["cells"]
    right = [line for line in lines if not line["wrong"] and line["errors"] == "normal"]
    other = [line for line in lines if line["errors"] != "normal"]
    kept = sum(not faults(line) for line in right)
    versions = ", ".join(f"{name} {number}" for name, number in results["versions"].items())
    # The interval by flips has too few data sets in a cell to be read there.
    many = [kind for kind in INTERVAL_KINDS if kind != "flips"]
    head = ["plan", "N", "noise", "rule", "data sets", "rate at .05", "verdict", "bias / error"]
    short = []
    for plan in PLANS:
        if cells_of := [line for line in right if line["plan"] == plan]:
            made = pooled(cells_of)
            short.append(
                [
                    plan,
                    str(len(cells_of)),
                    _with_error(made["rate"]),
                    *_intervals(made, INTERVAL_KINDS),
                ]
            )
    return "\n\n".join(
        [
            f"Seed {results['seed']}, {results['flips']} flips; {versions}. Planned were "
            f"{results['planned']:,} data sets a cell; each line says how many were made.",
            "Rate: how often a plan's own test (Student's t, two-sided; or whole-procedure sign "
            "flips, one-sided) gives p <= .05 when nothing is there, with its Monte Carlo error; "
            "calibrated: within 4 of these of .05; conservative: further below. Bias: the mean "
            "error of the estimate over its Monte Carlo error, without an effect and with one of "
            ".5 and .8 standard deviations between subjects in a block of the search region; 4 is "
            "the limit. Then the coverage of the 95 % intervals at these three effects, against "
            "the mean true effect over the masks that were used. Exact and conservative intervals "
            f"must reach {_number(LEAST_COVERAGE, 2)} (within 2 Monte Carlo errors where there are "
            f"fewer than {FEW:,} data sets: the jackknife has one data set in 4, 8 or 20, the "
            "interval by flips one in 40, and only all cells together). " + _given(right),
            f"{kept} of {len(right)} cells keep all of it. All cells of a plan together:",
            _rows(["plan", "cells", "rate at .05", *_heads(INTERVAL_KINDS)], short),
            "Each cell:",
            _rows([*head, *_heads(many)], [_plan_row(line, many) for line in right]),
            "Other errors. Unequal variances leave the maps symmetric, and the flips' assumption "
            "holds. Skewed maps break it, and nothing is promised: a long tail in the direction "
            "of selection holds t back, so that it rejects less often; a long tail on the other "
            "side drives it, and it rejects more often.",
            _rows([*head, *_heads(["folds"])], [_plan_row(line, ["folds"]) for line in other]),
            "Methods that are wrong, 20 subjects, independent features, p < .01: they must fail. "
            "Known: by formula or an earlier simulation. The two that hang on clusters have smooth "
            f"noise: FWHM {CLUSTERS_FWHM:g} voxels in {' x '.join(map(str, CLUSTERS))}, "
            "connectivity 18. The bias of the correlation is the mean r.",
            _rows(
                ["method", "data sets", "rate at .05", "known", "bias, sd", "known", "verdict"],
                [_wrong_row(line) for line in lines if line["wrong"]],
            ),
        ]
    )


def main() -> None:
    """Simulate what is not yet done, write the summaries, print the table."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="100 data sets a cell")
    parser.add_argument("--collect", action="store_true", help="only sum up what is done")
    parser.add_argument("--data-sets", type=int, default=2000, metavar="N")
    parser.add_argument("--processes", type=int, default=2, metavar="N")
    parser.add_argument("--folder", type=Path, help="of finished parts; default: a new one")
    parser.add_argument("--json", type=Path, default=Path("calibration.json"), metavar="FILE")
    options = parser.parse_args()
    folder = options.folder or Path(tempfile.mkdtemp(prefix="calibration-"))
    folder.mkdir(parents=True, exist_ok=True)
    every = jobs(folder, 100 if options.quick else options.data_sets)
    missing = [] if options.collect else [job for job in every if not job.path.exists()]
    print(f"{len(missing)} of {len(every)} parts to do, kept in {folder}", flush=True)
    with multiprocessing.Pool(options.processes) as pool:
        for done, _ in enumerate(pool.imap_unordered(Job.run, missing), 1):
            if done % 20 == 0:
                print(f"{done} of {len(missing)}", flush=True)
    results = {
        "seed": SEED,
        "flips": N_FLIPS,
        "planned": 100 if options.quick else options.data_sets,
        "versions": {
            "python": platform.python_version(),
            **{name: version(name) for name in ("sequester", "numpy", "scipy")},
        },
        "cells": summaries([job for job in every if job.path.exists()]),
    }
    lines = ",\n".join(json.dumps(line) for line in results["cells"])
    head = json.dumps({k: v for k, v in results.items() if k != "cells"})
    options.json.write_text(f'{head[:-1]}, "cells": [\n{lines}\n]}}\n')
    print(table(results))


if __name__ == "__main__":
    main()
