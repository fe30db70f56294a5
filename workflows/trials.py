"""Power of a study's own plans, by simulation on its own search regions and smoothness.

What the study's maps give here is their number, their smoothness and how its runs and contrasts
go together, all from residuals about the mean. The means play no part.
"""

from __future__ import annotations

import hashlib
import math
from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from ..nodes import progress
from ..nodes.errors import InputError
from ..nodes.folds import Given, KFold
from ..nodes.images import read_mask, stack
from ..nodes.models import Groups
from ..nodes.power import OneSample
from ..nodes.procedure import Procedure
from ..nodes.simulated import (
    Noise,
    Simulated,
    Trial,
    World,
    circular_trial,
    cross_fitted_trial,
    localizer_trial,
    own_masks_trial,
    summarised,
)
from ..nodes.smoothness import fwhm_of_stack
from ..nodes.space import Grid
from .build import tested_rows
from .curves import Curve
from .measured import by_person, maps_made, refuse_own_grids
from .planning import Planned, errors_of, said_errors
from .plans import A_PRIORI, CROSS_FITTED, EXPLORATORY, ORTHOGONAL, OTHER_RUNS
from .rois import Roi
from .settings import Settings
from .verify import verify

Floats = npt.NDArray[np.floating]
Bools = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class _Measured:
    """What a region's simulation takes from the study's maps.

    Parameters
    ----------
    grid : Grid
        The search region where every map has data.
    fwhm : (3,) float, voxels
    people : tuple of str
        The independent subjects.
    runs : tuple of int
        Per subject: how many runs have a mask of their own.
    run_variance, alike, choosing_sd : float
        See `World` and `localizer_trial`.
    others : int
        People that choose the region and are not tested; 0 when the same do both.
    """

    grid: Grid
    fwhm: tuple[float, ...]
    people: tuple[str, ...]
    runs: tuple[int, ...] = ()
    run_variance: float = 0.0
    alike: float = 0.0
    choosing_sd: float = 1.0
    others: int = 0


@dataclass(frozen=True)
class Simulation:
    """What is simulated.

    Parameters
    ----------
    effect : float
        True effect in standard deviations between subjects of one voxel's values (a-priori: of
        the region's values), in the direction of the plan's tail.
    share : float
        The part of the search region that has the effect.
    sets : int
        Data sets per region and number of subjects.
    n_flips : int
        Of the whole-procedure test of each data set.
    alpha : float
    seed : int
    """

    effect: float
    share: float = 0.1
    sets: int = 400
    n_flips: int = 199
    alpha: float = 0.05
    seed: int = 0

    def __post_init__(self) -> None:
        for name, ok, expected, got in (
            ("effect", 0 <= self.effect < math.inf, "0 or more", self.effect),
            ("share", 0 < self.share <= 1, "above 0, at most 1", self.share),
            ("sets", self.sets >= 2, "2 or more", self.sets),
            ("alpha", 0 < self.alpha < 0.5, "above 0, below 0.5", self.alpha),
            ("flips", self.n_flips >= 1, "1 or more", self.n_flips),
        ):
            if not ok:
                raise InputError(f"{name} out of range", expected=expected, got=f"{got:g}")
        if self.alpha * (self.n_flips + 1) < 1 - 1e-9:
            raise InputError(
                "too few flips for this alpha",
                expected=f"at least {math.ceil(1 / self.alpha - 1e-9) - 1}, so that p can be as "
                "small as alpha",
                got=str(self.n_flips),
            )

    def describe(self) -> str:
        """In words, for the notes."""
        return (
            f"Simulated: {self.sets} data sets a row, noise as smooth as the study's, true effect "
            f"{self.effect:g} sd between subjects in {self.share:.0%} of the search region, level "
            f"{self.alpha:g}, {self.n_flips} flips, seed {self.seed}. +- is the Monte Carlo "
            "standard error. Estimates are in the same sd; 'truth' is the mean true effect in the "
            "masks used."
        )


def plan_study(
    settings: Settings, asked: Simulation, ns: Sequence[int] = (), only: str = ""
) -> Planned:
    """Power, bias and errors of each region's own plan, by simulation.

    Parameters
    ----------
    settings : Settings
    asked : Simulation
    ns : sequence of int
        Numbers of subjects; the study's own when empty.
    only : str
        One region; "" for all.

    Raises
    ------
    InputError
        For a region that does not exist, where none can be simulated, or for too few subjects.
    """
    if min(ns, default=3) < 3:
        raise InputError("n out of range", expected="3 or more", got=str(min(ns)))
    stated = [roi for roi in settings.rois if not roi.variant_of]
    rois = [roi for roi in stated if only in ("", roi.name)]
    if not rois:
        raise InputError(
            "no such region", expected=f"one of {', '.join(r.name for r in stated)}", got=repr(only)
        )
    for roi in rois:
        _check_grids(settings, roi)
    left_out = {roi.name: why for roi in rois if (why := _no_mean(roi))}
    if len(left_out) == len(rois):
        raise InputError(
            "no region that can be simulated",
            where=f"roi {', '.join(left_out)}",
            expected="a test of one mean",
            got="; ".join(dict.fromkeys(left_out.values())),
            remedy="simulate another region, or use the formula",
        )
    verify(settings)
    records: list[dict[str, Any]] = []
    notes, curves = [asked.describe()], []
    for roi in rois:
        if roi.name in left_out:
            why = left_out[roi.name]
            records.append({"roi": roi.name, "plan": roi.plan, "refused": why})
            notes.append(f"{roi.name}: not simulated. It is {why}.")
            continue
        of_roi = _by_formula if roi.plan == A_PRIORI else _by_simulation
        made, note = of_roi(settings, roi, asked, list(dict.fromkeys(ns)))
        records += made
        notes.append(f"{roi.name}: {note}")
        if roi.plan != EXPLORATORY:
            made = sorted(made, key=lambda one: int(one["n"]))
            curves.append(
                Curve(
                    roi.name,
                    tuple(float(one["n"]) for one in made),
                    tuple(one["power"] for one in made),
                    tuple(one.get("power_error", 0.0) for one in made),
                )
            )
    return Planned(
        records,
        [list(_HEADER), *(_study_row(one) for one in records if "refused" not in one)],
        notes,
        f"Power at a true effect of {asked.effect:g} sd",
        "subjects",
        "power",
        curves,
    )


_HEADER = (
    "region", "plan", "n", "power", "truth", "estimate", "bias", "type M", "type S", "empty masks",
)  # fmt: skip
_UNTESTED = dict.fromkeys(("power", "power_error", "type_m", "type_s"))


def _check_grids(settings: Settings, roi: Roi) -> None:
    if roi.plan != A_PRIORI:
        refuse_own_grids(
            settings, roi, "use --test one-sample with the effect in the region's own values"
        )


def _no_mean(roi: Roi) -> str:
    """What a region tests instead of one mean, which alone is simulated; "" for a mean."""
    model = roi.procedure.model if roi.procedure else None
    if model is None:
        return ""
    if isinstance(model, Groups):
        what = f"a comparison of {model.first} and {model.second}"
        return f"{what}; by formula: sequester power --test two-sample"
    return f"a correlation with {model.name}; by formula: sequester power --test correlation"


def _by_formula(
    settings: Settings, roi: Roi, asked: Simulation, ns: Sequence[int]
) -> tuple[list[dict[str, Any]], str]:
    """An a-priori region needs no simulation."""
    records = [
        {"roi": roi.name, "plan": roi.plan, "n": n, "how": "formula", "effect": asked.effect}
        | errors_of(OneSample(asked.alpha).at(asked.effect, n))
        for n in ns or [len(set(roi.tested.people))]
    ]
    each = ", per label, before Holm" if roi.each_label else ""
    return records, (
        "by formula (one-sample t, two-sided); the effect is in sd of the region's own "
        f"values{each}."
    )


def _by_simulation(
    settings: Settings, roi: Roi, asked: Simulation, ns: Sequence[int]
) -> tuple[list[dict[str, Any]], str]:
    """Records of a region's plan per number of subjects, and what they rest on."""
    measured = _measure(settings, roi)
    records = []
    for n in ns or [len(measured.people)]:
        made = asdict(_simulated(roi, measured, n, asked))
        records.append(
            {"roi": roi.name, "plan": roi.plan, "n": n, "how": "simulated", "effect": asked.effect}
            | made
            | (_UNTESTED if roi.plan == EXPLORATORY else {})
            | {"fwhm_voxels": list(measured.fwhm), "n_voxels": measured.grid.n_features}
        )
    size = " x ".join(f"{width:.1f}" for width in measured.fwhm)
    voxels = measured.grid.n_features
    return records, f"{voxels} voxels searched, FWHM {size} voxels{_told(roi, measured)}"


def _told(roi: Roi, measured: _Measured) -> str:
    if roi.plan == EXPLORATORY:
        return "; circular: no test and no power, the bias alone."
    if roi.plan in OTHER_RUNS:
        return (
            f"; a run's noise has {measured.run_variance:.2f} times the variance between subjects. "
            "Its null is that no subject has a replicable effect: what persists in a subject is "
            "found too, at a true effect of 0 for the population."
        )
    if roi.choosing is None:
        return "."
    if measured.others:
        return f"; chosen on {measured.others} other people."
    return (
        f"; maps that choose and maps that are tested correlate {measured.alike:.2f} over subjects."
    )


def _study_row(one: dict[str, Any]) -> list[str]:
    def pm(name: str) -> str:
        return f"{one[name]:.3f} +- {one[name + '_error']:.3f}"

    head = [one["roi"], one["plan"], str(one["n"])]
    if one["how"] == "formula":
        return [*head, f"{one['power']:.3f}", *["-"] * 3, *said_errors(one), "-"]
    power = "-" if one["power"] is None else pm("power")
    numbers = [f"{one['truth']:.3f}", f"{one['estimate']:.3f}", pm("bias")]
    return [*head, power, *numbers, *said_errors(one), f"{one['empty']:.0%}"]


def _simulated(roi: Roi, measured: _Measured, n: int, asked: Simulation) -> Simulated:
    """Many data sets of one region's plan; each is keyed by seed, region, n and its number."""
    noise = Noise(measured.grid, measured.fwhm)
    world = World(
        measured.grid, noise, asked.effect, asked.share, measured.alike, measured.run_variance
    )
    trial = _trial(roi, measured, world, n, asked)
    key = int.from_bytes(hashlib.sha256(roi.name.encode()).digest()[:8], "big")
    trials = []
    for number in range(asked.sets):
        trials.append(trial(number, np.random.default_rng([abs(asked.seed), key, n, number])))
        progress.tell(f"{roi.name}, n = {n}: data sets", number + 1, asked.sets)
    return summarised(trials)


def _trial(
    roi: Roi, measured: _Measured, world: World, n: int, asked: Simulation
) -> Callable[[int, np.random.Generator], Trial]:
    """One data set of the region's plan, given its number and its random numbers."""
    procedure, alpha = roi.procedure, asked.alpha
    assert procedure is not None, "every plan but a-priori chooses"
    if roi.plan in CROSS_FITTED:
        labels = [f"{i:05d}" for i in range(n)]
        folded = _folds_for(procedure, labels, measured.people)
        other = roi.choosing is not None
        flips, seed = asked.n_flips, asked.seed
        return lambda number, rng: cross_fitted_trial(
            folded, world, labels, flips, seed + number, alpha, rng, other_maps=other
        )
    if roi.plan in OTHER_RUNS:
        runs = [measured.runs[i % len(measured.runs)] for i in range(n)]
        return lambda _, rng: own_masks_trial(procedure, world, runs, alpha, rng)
    if roi.plan == EXPLORATORY:
        return lambda _, rng: circular_trial(procedure, world, n, rng)
    return lambda _, rng: localizer_trial(
        procedure,
        world,
        n,
        alpha,
        rng,
        others=measured.others,
        group_mask=roi.group_mask,
        of_population=roi.plan == ORTHOGONAL,
        height_unit=measured.choosing_sd,
    )


def _folds_for(procedure: Procedure, labels: list[str], people: Sequence[str]) -> Procedure:
    """The plan's folds over made-up subjects, dealt in turn the strata and folds of the real."""
    scheme = procedure.scheme
    like = {label: people[i % len(people)] for i, label in enumerate(labels)}
    if isinstance(scheme, KFold) and scheme.strata:
        of = dict(scheme.strata)
        strata = tuple((label, of.get(like[label], "")) for label in labels)
        return replace(procedure, scheme=replace(scheme, strata=strata))
    if isinstance(scheme, Given):
        of = dict(scheme.fold_of)
        return replace(procedure, scheme=Given(tuple((x, of[like[x]]) for x in labels)))
    return procedure


# -- what the study's maps say of their noise -------------------------------------------------


def _measure(settings: Settings, roi: Roi) -> _Measured:
    """Grid, smoothness and how maps go together, from residuals."""
    rows = tested_rows(roi)
    with maps_made(settings, [roi]) as (files, masks):
        # Where each subject has a region of their own, the first one's stands for all.
        inside = read_mask(masks[roi.name][0])[0] if roi.name in masks else None
        tested, grid, _ = stack(files[rows], inside)
        chosen = None if roi.choosing is None else stack(files[roi.choosing], inside)[0]
    keep: Bools = np.asarray(np.isfinite(tested).all(axis=0))
    if chosen is not None:
        keep &= np.isfinite(chosen).all(axis=0)
    if not keep.any():
        raise InputError(
            "no voxel has data in all maps",
            where=f"roi {roi.name}",
            remedy="search a region that all subjects cover",
        )
    grid, tested = grid.restricted(keep), tested[:, keep]
    maps = by_person(tested, rows.people)
    # Numbers along an axis of a single slice do not exist, and need not.
    fwhm = tuple(np.nan_to_num(fwhm_of_stack(maps, grid), posinf=np.inf).tolist())
    people = tuple(sorted(set(rows.people)))
    found = _Measured(grid, fwhm, people)
    if roi.plan in OTHER_RUNS:
        return _with_runs(found, tested, rows.people, maps)
    if roi.choosing is None or chosen is None:
        return found
    of = roi.choosing.people
    return _with_choosing(found, maps, by_person(chosen[:, keep], of), sorted(set(of)))


def _with_runs(found: _Measured, runs: Floats, people: Sequence[str], maps: Floats) -> _Measured:
    """How much of what differs between subjects' averages may be the noise of their runs."""
    counts = tuple(list(people).count(name) for name in found.people)
    within = np.zeros(runs.shape[1])
    for name, mean in zip(found.people, maps, strict=True):
        for i, one in enumerate(people):
            if one == name:
                within += np.square(runs[i] - mean)
    variance = float(within.mean()) / (len(people) - len(counts))
    between = float(maps.var(axis=0, ddof=1).mean())
    # No more than all of it.
    most = 1 / float(np.mean([1 / many for many in counts]))
    return replace(found, runs=counts, run_variance=min(variance / between, most))


def _with_choosing(
    found: _Measured, maps: Floats, chosen: Floats, choosers: list[str]
) -> _Measured:
    """How the maps that choose go with those that are tested, over the people who have both."""
    deviation = float(np.sqrt(chosen.var(axis=0, ddof=1).mean()))
    both = [name for name in found.people if name in choosers]
    if not both:
        return replace(found, choosing_sd=deviation, others=len(choosers))
    one = maps[[found.people.index(name) for name in both]]
    two = chosen[[choosers.index(name) for name in both]]
    one, two = one - one.mean(axis=0), two - two.mean(axis=0)
    alike = float((one * two).sum() / np.sqrt(np.square(one).sum() * np.square(two).sum()))
    return replace(found, choosing_sd=deviation, alike=alike)
