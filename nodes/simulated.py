"""Made-up data sets of a study, through the study's own plan: power before anyone is scanned.

A data set is Gaussian noise as smooth as the study's, plus a true effect in a compact part of
the search region, drawn anew each time. Noise has a standard deviation of 1 between subjects,
at every feature, and so the effect is in those units. A trial chooses, reads and tests one data
set as the plan does, and keeps the truth of what it has chosen beside the estimate.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy import ndimage, optimize

from .groupmaps import group_map
from .masks import Cluster, Threshold, choose, strongest
from .procedure import Procedure
from .roi import block_values, one_sample_t, region_value
from .space import Grid

Floats = npt.NDArray[np.floating]
Bools = npt.NDArray[np.bool_]

# Kernels reach so many standard deviations; narrowest and widest are beyond any map's smoothness.
_REACH, _NARROWEST, _WIDEST = 4.0, 0.05, 100.0


class Noise:
    """Gaussian noise of variance 1 over the features of a grid.

    Parameters
    ----------
    grid : Grid
    fwhm : (3,) float, features
        Smoothness along each axis, as `smoothness.fwhm_of_stack` gives it: 0 or NaN for
        independent features. Neighbours correlate as that says, wherever they lie.

    Examples
    --------
    >>> noise = Noise(Grid((30, 1, 1), np.eye(4)), (2.0, 0.0, 0.0))
    >>> x = noise.draw(np.random.default_rng(1), 4000)
    >>> x.shape, round(float(np.corrcoef(x[:, 3], x[:, 4])[0, 1]), 1)
    ((4000, 30), 0.7)
    """

    def __init__(self, grid: Grid, fwhm: npt.ArrayLike) -> None:
        self._kernels = [_kernel_for(float(width)) for width in np.asarray(fwhm)]
        where = np.unravel_index(grid.voxels, grid.shape)
        low = [int(at.min()) for at in where]
        # Noise is drawn in a box that wraps around; the margin keeps its ends apart.
        margins = [len(kernel) // 2 for kernel in self._kernels]
        self._box = tuple(
            int(at.max()) - least + 1 + 2 * margin
            for at, least, margin in zip(where, low, margins, strict=True)
        )
        inside = [at - least for at, least in zip(where, low, strict=True)]
        self._features = np.ravel_multi_index(inside, self._box)

    def draw(self, rng: np.random.Generator, n: int) -> Floats:
        """(n, n_features) float32, rows independent."""
        out = np.empty((n, len(self._features)), np.float32)
        for row in out:
            volume = rng.standard_normal(self._box, dtype=np.float32)
            for axis, kernel in enumerate(self._kernels):
                if len(kernel) > 1:
                    volume = ndimage.correlate1d(volume, kernel, axis=axis, mode="wrap")
            row[:] = volume.ravel()[self._features]
        return out


def _kernel(sigma: float) -> Floats:
    """Weights by which white noise becomes smooth noise of the same variance."""
    reach = int(np.ceil(_REACH * sigma))
    weights = np.exp(-np.square(np.arange(-reach, reach + 1) / sigma) / 2)
    made: Floats = weights / np.sqrt(np.square(weights).sum())
    return made


def _kernel_for(fwhm: float) -> Floats:
    """The kernel after which neighbours correlate by exp(-2 ln 2 / FWHM^2).

    A sampled kernel narrower than a voxel falls short of that if it has just this FWHM.
    """
    if not fwhm > 0:
        return np.ones(1)
    wanted = float(np.exp(-2 * np.log(2) / fwhm**2))

    def off(sigma: float) -> float:
        kernel = _kernel(sigma)
        return float(kernel[1:] @ kernel[:-1]) - wanted

    if off(_NARROWEST) >= 0:
        return np.ones(1)
    return _kernel(
        float(optimize.brentq(off, _NARROWEST, _WIDEST)) if off(_WIDEST) > 0 else _WIDEST
    )


@dataclass(frozen=True)
class World:
    """What data sets are made of.

    Parameters
    ----------
    grid : Grid
        The search region.
    noise : Noise
        On that grid.
    effect : float
        The true effect, 0 or more, in the direction of the plan's tail; in standard deviations
        between subjects of one feature.
    share : float
        The part of the search region that has it; the rest has none.
    alike : float
        Correlation over subjects of the maps that choose with those that are tested.
    run_variance : float
        Of one run's noise, as a share of the variance between subjects of their averages.
    """

    grid: Grid
    noise: Noise
    effect: float
    share: float
    alike: float = 0.0
    run_variance: float = 0.0

    def truth(self, rng: np.random.Generator) -> Floats:
        """(n_features,) the effect at the features nearest to one drawn at random, else 0."""
        mm = self.grid.coordinates()
        apart = np.linalg.norm(mm - mm[rng.integers(len(mm))], axis=1)
        out = np.zeros(len(mm))
        many = max(1, round(self.share * len(mm)))
        out[np.argsort(apart, kind="stable")[:many]] = self.effect
        return out

    def pair(self, rng: np.random.Generator, n: int) -> tuple[Floats, Floats]:
        """Noise of the maps that choose and of those that are tested, `n` subjects each."""
        chosen, own = self.noise.draw(rng, n), self.noise.draw(rng, n)
        tested = self.alike * chosen + np.sqrt(max(0.0, 1 - self.alike**2)) * own
        return chosen, tested.astype(np.float32)


@dataclass(frozen=True)
class Trial:
    """One data set, analysed. Values are in the direction of the plan's tail.

    Parameters
    ----------
    significant : bool
        Never for a plan without a test.
    estimate, truth : float
        The estimate, and the mean true effect in the masks it was read in.
    empty : float
        Share of the masks in which the rule found nothing.
    """

    significant: bool
    estimate: float
    truth: float
    empty: float


@dataclass(frozen=True)
class Simulated:
    """What many trials say.

    Parameters
    ----------
    n_sets : int
    power, power_error : float
        Share of significant trials, and its Monte Carlo standard error.
    estimate, truth : float
        Means over trials.
    bias, bias_error : float
        Mean of estimate - truth, and its standard error.
    type_m : float or None
        Mean size of the significant estimates over the mean truth they stand for.
    type_s : float or None
        Share of the significant estimates below zero.
    empty : float
        Mean share of masks in which the rule found nothing.
    """

    n_sets: int
    power: float
    power_error: float
    estimate: float
    truth: float
    bias: float
    bias_error: float
    type_m: float | None
    type_s: float | None
    empty: float


def summarised(trials: Sequence[Trial]) -> Simulated:
    """What many trials say.

    Examples
    --------
    >>> made = summarised([Trial(True, 1.2, 0.8, 0), Trial(False, 0.4, 0.8, 0)])
    >>> made.power, round(made.estimate, 6), round(made.type_m, 6)
    (0.5, 0.8, 1.5)
    """
    n = len(trials)
    estimates = np.array([trial.estimate for trial in trials])
    truths = np.array([trial.truth for trial in trials])
    hit = np.array([trial.significant for trial in trials])
    power, off = float(hit.mean()), estimates - truths
    type_m = type_s = None
    if hit.any():
        type_s = float((estimates[hit] < 0).mean())
        if truths[hit].mean() > 0:
            type_m = float(np.abs(estimates[hit]).mean() / truths[hit].mean())
    return Simulated(
        n,
        power,
        float(np.sqrt(power * (1 - power) / n)),
        float(estimates.mean()),
        float(truths.mean()),
        float(off.mean()),
        float(off.std(ddof=1) / np.sqrt(n)) if n > 1 else float("nan"),
        type_m,
        type_s,
        float(np.mean([trial.empty for trial in trials])),
    )


def cross_fitted_trial(
    procedure: Procedure,
    world: World,
    labels: Sequence[str],
    n_flips: int,
    seed: int,
    alpha: float,
    rng: np.random.Generator,
    *,
    other_maps: bool = False,
) -> Trial:
    """Folds over subjects, and the whole-procedure sign flip.

    Parameters
    ----------
    procedure : Procedure
    world : World
    labels : sequence of str
        One per subject.
    n_flips, seed : int
        Of the flips.
    alpha : float
        The level, one-sided in the direction of the plan's tail.
    rng : Generator
    other_maps : bool
        Whether the region is chosen on other maps than those that are tested.
    """
    procedure, sign = _going_on(procedure), _sign(procedure)
    truth = world.truth(rng)
    if other_maps:
        chosen, tested = (sign * (truth + noise) for noise in world.pair(rng, len(labels)))
    else:
        chosen, tested = sign * (truth + world.noise.draw(rng, len(labels))), None
    ready = procedure.prepare(chosen, labels, world.grid, tested=tested)
    outcome = ready.outcome()
    true_values = np.empty(len(labels))
    for fold, mask in zip(ready.folds, ready.masks(), strict=True):
        true_values[list(fold.held_out)] = region_value(truth[mask], None, procedure.summary)[0]
    return Trial(
        ready.flip_test(n_flips, seed).p <= alpha,
        sign * outcome.estimate,
        float(true_values.mean()),
        len(outcome.empty) / len(ready.folds),
    )


def own_masks_trial(
    procedure: Procedure,
    world: World,
    runs: Sequence[int],
    alpha: float,
    rng: np.random.Generator,
) -> Trial:
    """Each subject's own masks from their other runs; runs averaged; t across subjects.

    The truth is the subjects' own: what persists in a subject is found by their runs.

    Parameters
    ----------
    procedure : Procedure
        Its scheme folds over runs.
    world : World
    runs : sequence of int
        Per subject: how many runs.
    alpha : float
        Two-sided.
    rng : Generator
    """
    procedure, sign = _going_on(procedure), _sign(procedure)
    truth = world.truth(rng)
    # Of a subject's average, part is the subject and part is what the runs leave.
    left = world.run_variance * float(np.mean([1 / many for many in runs]))
    own, per_run = np.sqrt(max(0.0, 1 - left)), np.sqrt(world.run_variance)
    values, truths, empty = [], [], []
    for many in runs:
        subject = truth + own * world.noise.draw(rng, 1)[0]
        maps = sign * (subject + per_run * world.noise.draw(rng, many))
        labels = [str(run + 1) for run in range(many)]
        ready = procedure.prepare(maps, labels, world.grid)
        outcome = ready.outcome()
        values.append(sign * outcome.estimate)
        empty.append(len(outcome.empty) / len(ready.folds))
        for fold, mask in zip(ready.folds, ready.masks(), strict=True):
            value = region_value(subject[mask], None, procedure.summary)[0]
            truths.append(value * len(fold.held_out) / many)
    return _t_trial(np.array(values), sum(truths) / len(runs), float(np.mean(empty)), alpha)


def localizer_trial(
    procedure: Procedure,
    world: World,
    n: int,
    alpha: float,
    rng: np.random.Generator,
    *,
    others: int = 0,
    group_mask: bool = False,
    of_population: bool = False,
    height_unit: float = 1.0,
) -> Trial:
    """A mask from other maps, each subject's own or one for all; t across subjects, two-sided.

    The truth is that of the tested subjects: the effect, and what the maps that choose share
    with those that are tested.

    Parameters
    ----------
    procedure : Procedure
        Its rule reads the maps that choose.
    world : World
    n : int
        Subjects tested.
    alpha : float
    rng : Generator
    others : int
        Of the group mask: it comes from so many other people; 0 for the same.
    group_mask : bool
    of_population : bool
        The truth is that of the population instead.
    height_unit : float
        The standard deviation between subjects of the maps that choose, in their own units, for
        a rule whose height is in these.
    """
    sign, truth = _sign(procedure), world.truth(rng)
    chosen, tested = world.pair(rng, n)
    if group_mask:
        effects = truth + (world.noise.draw(rng, others) if others else chosen)
        masks = [_group_mask(procedure, effects, world.grid)]
    else:
        rule = procedure.rule
        if isinstance(rule, Threshold | Cluster) and rule.height is not None:
            rule = replace(rule, height=rule.height / height_unit)
        masks = [_stood_in(choose(row, rule, world.grid), row, procedure) for row in truth + chosen]
    shared = 0.0 if of_population or others else world.alike
    return _read_trial(procedure, truth + shared * chosen, sign, truth + tested, masks, alpha)


def circular_trial(procedure: Procedure, world: World, n: int, rng: np.random.Generator) -> Trial:
    """Chosen and read on the same data: an estimate and no test.

    Parameters
    ----------
    procedure : Procedure
    world : World
    n : int
    rng : Generator
    """
    sign, truth = _sign(procedure), world.truth(rng)
    effects = truth + world.noise.draw(rng, n)
    masks = [_group_mask(procedure, effects, world.grid)]
    return replace(
        _read_trial(procedure, truth[None], sign, effects, masks, 0.05), significant=False
    )


def _group_mask(procedure: Procedure, effects: Floats, grid: Grid) -> Bools:
    """The region that a rule reads off the group map of effects in the plan's direction."""
    values = group_map(effects, procedure.missing, procedure.rule.map_kind)
    return _stood_in(choose(values, procedure.rule, grid, len(effects)), values, procedure)


def _stood_in(mask: Bools, values: Floats, procedure: Procedure) -> Bools:
    """The mask, or the strongest features where the plan wants them for an empty one."""
    return mask if mask.any() or not procedure.k else strongest(values, procedure.k)


def _read_trial(
    procedure: Procedure,
    truths: Floats,
    sign: float,
    effects: Floats,
    masks: Sequence[Bools],
    alpha: float,
) -> Trial:
    """Values of every row in its mask (or in the one for all), and their t."""
    masks_of = list(masks) * (len(effects) if len(masks) == 1 else 1)
    truths_of = np.broadcast_to(truths, effects.shape)
    summary = procedure.summary
    values = [
        float(block_values(sign * row[None, mask], None, summary)[0][0])
        for row, mask in zip(effects, masks_of, strict=True)
    ]
    true_values = [
        region_value(row[mask], None, summary)[0]
        for row, mask in zip(truths_of, masks_of, strict=True)
    ]
    empty = float(np.mean([not mask.any() for mask in masks]))
    return _t_trial(sign * np.array(values), float(np.mean(true_values)), empty, alpha)


def _t_trial(values: Floats, truth: float, empty: float, alpha: float) -> Trial:
    test = one_sample_t(values)
    return Trial(test.p <= alpha, test.mean, truth, empty)


def _going_on(procedure: Procedure) -> Procedure:
    """A plan that stops at an empty fold: here the fold counts as empty."""
    stops = procedure.on_empty == "stop"
    return replace(procedure, on_empty="empty") if stops else procedure


def _sign(procedure: Procedure) -> float:
    return -1.0 if procedure.tail == "negative" else 1.0
