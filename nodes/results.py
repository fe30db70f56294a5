"""What may be said of one region, for the way it was chosen.

One record per region: estimate and what it estimates, interval and its kind, p and its null,
effect size, folds and stability. A value read on the data that chose its region carries none
of interval, p and error bar.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from .errors import InputError
from .procedure import FlipTest, Outcome, Prepared
from .roi import Interval, TTest, flip_interval, fold_interval, jackknife_interval, one_sample_t

INTERVALS = ("flips", "jackknife", "folds")

FLIP_NULL = (
    "the subjects' maps are independent and jointly symmetric about zero over the search region"
)


@dataclass(frozen=True)
class RoiResult:
    """The record of one region.

    Parameters
    ----------
    roi, plan, rule, search : str
        Its name, the plan, the mask rule and the search region in words.
    n_subjects : int
    estimate : float
        In the units of the effect maps; `target` says what it estimates.
    biased : bool
        Whether the region was chosen on the tested data: then interval, t, p and dz are None.
    interval : Interval or None
    t, p, dz : float or None
    p_kind : str
        How p was made; `null` names the hypothesis and `sided` the direction.
    n_folds, n_empty : int or None
    empty, replaced : tuple of str
        Folds in which the rule found nothing: left at 0, or replaced as planned.
    dice, noise_dice : float or None
        Mean Dice over pairs of fold masks, and what it is under flips (noise alone).
    mask_sizes : tuple of int
        Features in each mask.
    coverage : float or None
        Least share of a mask in which its subject has data; empty masks do not count.
    sentence : str
        For the text of a paper.
    """

    roi: str
    plan: str
    rule: str
    search: str
    n_subjects: int
    estimate: float
    target: str
    biased: bool
    interval: Interval | None = None
    t: float | None = None
    p: float | None = None
    p_kind: str = ""
    sided: str = ""
    null: str = ""
    dz: float | None = None
    n_flips: int | None = None
    p_error: float | None = None
    n_folds: int | None = None
    n_empty: int | None = None
    empty: tuple[str, ...] = ()
    replaced: tuple[str, ...] = ()
    dice: float | None = None
    noise_dice: float | None = None
    mask_sizes: tuple[int, ...] = ()
    coverage: float | None = None
    sentence: str = ""

    def as_dict(self) -> dict[str, object]:
        """Plain types, for JSON."""
        return asdict(self)


def p_text(p: float) -> str:
    """A p-value as a paper prints it.

    Examples
    --------
    >>> p_text(0.0312), p_text(0.00004)
    ('p = .031', 'p < .001')
    """
    return "p < .001" if p < 0.001 else f"p = {p:.3f}".replace("0.", ".", 1)


def estimate_texts(estimate: float, low: float, high: float) -> tuple[str, str, str]:
    """An estimate and its interval, rounded as the interval's half width (two digits) deserves.

    Examples
    --------
    >>> estimate_texts(1.23607, 0.78208, 1.69006)
    ('1.24', '0.78', '1.69')
    """
    half = (high - low) / 2
    digits = max(0, 1 - int(np.floor(np.log10(half)))) if np.isfinite(half) and half > 0 else 3
    return f"{estimate:.{digits}f}", f"{low:.{digits}f}", f"{high:.{digits}f}"


def cross_fitted_result(
    ready: Prepared,
    names: tuple[str, str, str],
    n_flips: int,
    seed: int,
    interval: str = "flips",
    progress: Callable[[int, int], None] | None = None,
) -> tuple[RoiResult, Outcome, FlipTest]:
    """Everything the cross-fitted plans may say: estimate, interval, whole-procedure p.

    Parameters
    ----------
    ready : Prepared
        The procedure on the study's effects.
    names : (roi, plan, search region)
    n_flips, seed : int
    interval : {"flips", "jackknife", "folds"}
    progress : callable, optional
    """
    if interval not in INTERVALS:
        raise InputError(
            "unknown interval", expected=f"one of {', '.join(INTERVALS)}", got=repr(interval)
        )
    outcome = ready.outcome()
    test = ready.flip_test(n_flips, seed, progress)
    people = ready.per_person(outcome.values)
    if interval == "flips":
        made = flip_interval(people, test.abs_t_quantile)
    elif interval == "folds":
        made = fold_interval(people, len(ready.folds))
    else:
        made = jackknife_interval(outcome.estimate, ready.without_each_person())
    roi, plan, search = names
    procedure = ready.procedure
    kind = (
        f"whole-procedure sign flip, all {test.n_flips} flips"
        if test.exact
        else f"whole-procedure sign flip, {test.n_flips} random flips"
    )
    sided = "greater" if procedure.tail == "positive" else "less"
    sign = 1 if procedure.tail == "positive" else -1
    where = f"in the search region '{search}'"
    folds = len(ready.folds)
    notes = [
        f" In {len(names)} of {folds} folds the rule found nothing; there {what}."
        for names, what in (
            (outcome.replaced, "the strongest features stood in"),
            (outcome.empty, "the value counts as 0"),
        )
        if names
    ]
    mean, low, high = estimate_texts(outcome.estimate, made.low, made.high)
    sentence = (
        f"{roi}: {procedure.describe()} {where}, chosen in {folds} folds "
        f"({plan}); held-out mean {mean} "
        f"({made.kind} 95 % interval {low} to {high}), {p_text(test.p)} "
        f"({kind}, one-sided: {sided}). Null: {FLIP_NULL} '{search}'; a rejection says that there "
        f"is a replicable effect somewhere {where}, not at any one voxel.{''.join(notes)}"
    )
    result = RoiResult(
        roi=roi,
        plan=plan,
        rule=procedure.describe(),
        search=search,
        n_subjects=len(ready.people),
        estimate=outcome.estimate,
        target="mean true effect over the fold masks actually used",
        biased=False,
        interval=made,
        t=test.t,
        p=test.p,
        p_kind=kind,
        sided=sided,
        null=FLIP_NULL,
        dz=sign * test.t / float(np.sqrt(len(people))) if np.isfinite(test.t) and test.t else None,
        n_flips=test.n_flips,
        p_error=None if test.exact else float(np.sqrt(test.p * (1 - test.p) / test.n_flips)),
        n_folds=folds,
        n_empty=len(outcome.empty),
        empty=outcome.empty,
        replaced=outcome.replaced,
        dice=_known(outcome.dice),
        noise_dice=_known(test.noise_dice),
        mask_sizes=outcome.sizes,
        coverage=_least(outcome.coverage),
        sentence=sentence,
    )
    return result, outcome, test


def fixed_region_result(
    values: Sequence[float], names: tuple[str, str, str], size: int, coverage: Sequence[float]
) -> RoiResult:
    """A region fixed without the tested data: the t-test and its interval are right.

    Examples
    --------
    >>> made = fixed_region_result([1.0, 2.0, 3.0], ("a", "given", "a"), 8, [1, 1, 1])
    >>> made.p_kind, round(made.p, 4)
    ("Student's t, two-sided", 0.0742)
    """
    test = one_sample_t(np.asarray(values))
    roi, _, search = names
    interval = test.interval
    mean, low, high = estimate_texts(test.mean, interval.low, interval.high)
    return _of_t(
        test,
        names,
        len(values),
        rule="the region as given",
        target="population mean in this region",
        p_kind="Student's t, two-sided",
        null="the population mean in the region is zero",
        mask_sizes=(size,),
        coverage=_least(coverage),
        sentence=(
            f"{roi}: mean {mean} in the a-priori region '{search}' (95 % interval "
            f"{low} to {high}), t({test.df}) = {test.t:.2f}, "
            f"{p_text(test.p)}, two-sided. Null: the population mean in this region is zero "
            "(near-normal values)."
        ),
    )


def own_mask_result(
    values: Sequence[float],
    names: tuple[str, str, str],
    sizes: Sequence[int],
    coverage: Sequence[float],
) -> RoiResult:
    """A mask of each subject's own, chosen on their other runs: t across subjects, run level.

    Parameters
    ----------
    values : sequence of float, one per subject
        Averaged over the subject's runs.
    names : (roi, plan, search region)
    sizes, coverage : sequence, one per run

    Examples
    --------
    >>> made = own_mask_result([1.0, 2.0, 3.0], ("a", "leave-one-run-out", "b"), [8, 8], [1, 1])
    >>> made.null
    'no subject has a replicable effect in the search region'
    """
    test = one_sample_t(np.asarray(values))
    roi, plan, search = names
    interval = test.interval
    mean, low, high = estimate_texts(test.mean, interval.low, interval.high)
    empty = sum(size == 0 for size in sizes)
    note = f" {empty} of {len(sizes)} masks are empty; their value counts as 0." if empty else ""
    return _of_t(
        test,
        names,
        len(values),
        rule="each subject's own mask, from their other runs",
        target="mean over these subjects of the effect in their own masks",
        p_kind="Student's t across subjects, two-sided",
        null="no subject has a replicable effect in the search region",
        n_folds=len(sizes),
        n_empty=empty,
        mask_sizes=tuple(sizes),
        coverage=_least(coverage),
        sentence=(
            f"{roi}: mean {mean} in each subject's own mask in the search region '{search}', "
            f"chosen on their other runs ({plan}; 95 % interval {low} to {high}), "
            f"t({test.df}) = {test.t:.2f}, {p_text(test.p)}, two-sided. Null: no subject has a "
            "replicable effect there (run level: what protects is that run noise is independent). "
            "It speaks of a population mean only if the effects that choose and those that are "
            f"tested are uncorrelated across subjects.{note}"
        ),
    )


def _of_t(test: TTest, names: tuple[str, str, str], n: int, **more: Any) -> RoiResult:
    """What every record of a two-sided t-test holds."""
    roi, plan, search = names
    return RoiResult(
        roi=roi,
        plan=plan,
        search=search,
        n_subjects=n,
        estimate=test.mean,
        biased=False,
        interval=test.interval,
        t=test.t,
        p=test.p,
        sided="two-sided",
        dz=test.dz,
        **more,
    )


def exploratory_result(
    values: Sequence[float],
    names: tuple[str, str, str],
    rule: str,
    size: int,
    coverage: Sequence[float],
    *,
    replaced: bool = False,
) -> RoiResult:
    """A region chosen on the very data it is read from: the value, marked biased, and no more.

    Parameters
    ----------
    values : sequence of float
    names : (roi, plan, search region)
    rule : str
        The mask rule in words.
    size : int
        Features in the mask.
    coverage : sequence of float
    replaced : bool
        Whether the rule found nothing and the strongest features stood in.
    """
    roi, plan, search = names
    estimate = float(np.mean(values)) if size else float("nan")
    said = (
        f"mean {estimate:.3g}, BIASED: the region was chosen"
        if size
        else ("look found no region; a value would be BIASED, chosen")
    )
    return RoiResult(
        roi=roi,
        plan=plan,
        rule=rule,
        search=search,
        n_subjects=len(values),
        estimate=estimate,
        target="none: chosen and read on the same data, so inflated by selection",
        biased=True,
        mask_sizes=(size,),
        coverage=_least(coverage),
        sentence=(
            f"{roi}: exploratory {said} on the data it is read from; "
            "no interval, no p-value and no error bar can be given."
            + (" The rule found nothing; the strongest features stood in." if replaced else "")
        ),
    )


def _least(coverage: Sequence[float]) -> float | None:
    """The least coverage of a mask that holds something of its subject."""
    return min((share for share in coverage if share > 0), default=None)


def _known(value: float) -> float | None:
    return None if np.isnan(value) else value
