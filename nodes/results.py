"""What may be said of one region, for the way it was chosen.

One record per region: estimate and what it estimates, interval and its kind, p and its null,
effect size, folds and stability. A value read on the data that chose its region carries none
of interval, p and error bar.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from .errors import InputError
from .roi import Interval, TTest, small_sample_factor

# The name of the one mask for all, where results name masks.
ALL = "all"


@dataclass(frozen=True)
class RoiResult:
    """The record of one region.

    Parameters
    ----------
    roi, plan, rule, search : str
        Its name, the plan, the mask rule and the search region in words.
    n_subjects : int
    estimate : float
        In the units of the effect maps; `target` says what it estimates. NaN where no region was
        found that could be read.
    biased : bool
        Whether the region was chosen on the tested data: then interval, t, p and dz are None.
    interval : Interval or None
    t, p, dz : float or None
    p_kind : str
        How p was made; `null` names the hypothesis and `sided` the direction.
    n_folds, n_empty : int or None
    empty, replaced : tuple of str
        Folds, or subjects with a mask of their own, in which the rule found nothing: left at 0,
        or replaced as planned.
    dice, noise_dice : float or None
        Mean Dice over pairs of fold masks, and what it is under flips (noise alone).
    mask_sizes : tuple of int
        Features in each mask.
    coverage : float or None
        Least share of a mask in which its subject has data; empty masks do not count.
    g : float or None
        dz with Hedges' small-sample factor; of two groups, their difference over the pooled
        standard deviation, with the factor.
    influence : tuple of (label, float)
        Per subject: the estimate without that subject's value, minus the estimate.
    most_influential : str
        The subject whose influence is largest in size.
    n_cells : tuple of (group, int)
        Subjects per group.
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
    g: float | None = None
    influence: tuple[tuple[str, float], ...] = ()
    most_influential: str = ""
    n_cells: tuple[tuple[str, int], ...] = ()
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
    >>> estimate_texts(1.23607, 0.78208, 1.69006), estimate_texts(0.24, -0.001, 0.48)
    (('1.24', '0.78', '1.69'), ('0.24', '0.00', '0.48'))
    """
    half = (high - low) / 2
    digits = max(0, 1 - int(np.floor(np.log10(half)))) if np.isfinite(half) and half > 0 else 3
    return f"{estimate:z.{digits}f}", f"{low:z.{digits}f}", f"{high:z.{digits}f}"


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
        Whether the rule found nothing and the strongest voxels stood in.
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
        coverage=least(coverage, [size]),
        replaced=(ALL,) if replaced else (),
        sentence=(
            f"{roi}: exploratory {said} on the data it is read from; "
            "no interval, no p-value and no error bar can be given."
            + (" The rule found nothing; the strongest voxels stood in." if replaced else "")
        ),
    )


def of_t(test: TTest, names: tuple[str, str, str], n: int, **more: Any) -> RoiResult:
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
        dz=finite(test.dz),
        g=corrected(test.dz, test.df),
        **more,
    )


def distinct(sizes: Sequence[int]) -> tuple[int, ...]:
    """One size when all masks have it, else every mask's."""
    return (sizes[0],) if len(set(sizes)) == 1 else tuple(sizes)


def least(coverage: Sequence[float], sizes: Sequence[int]) -> float | None:
    """The least share of a mask in which its map has data; empty masks do not count.

    Parameters
    ----------
    coverage : sequence of float, one per map
    sizes : sequence of int, one per map or one for all
        Features in the mask.

    Raises
    ------
    InputError
        When a map has no data in a mask that holds something: what was read there is no value.

    Examples
    --------
    >>> least([1.0, 0.5, 0.0], [8, 9, 0]), least([0.0], [0])
    (0.5, None)
    """
    sizes_of = list(sizes) * (len(coverage) if len(sizes) == 1 else 1)
    shares = [share for share, size in zip(coverage, sizes_of, strict=True) if size]
    lacking = sum(share <= 0 for share in shares)
    if lacking:
        raise InputError(
            "values of maps without data in their masks",
            expected="some data in every mask that is not empty",
            got=f"none in {lacking} of {len(coverage)}",
            remedy="leave these maps out",
        )
    return min(shares, default=None)


def finite(value: float) -> float | None:
    """A value, or None for one that is infinite or not there."""
    return value if np.isfinite(value) else None


def corrected(dz: float, df: int) -> float | None:
    """dz with Hedges' factor for small samples; None of one degree of freedom, where that is 0.

    Examples
    --------
    >>> round(corrected(1.2845576, 9), 4), corrected(2.1, 1)
    (1.1739, None)
    """
    return finite(dz * small_sample_factor(df)) if df > 1 else None


def known(value: float) -> float | None:
    """A value, or None for one that is not there."""
    return None if np.isnan(value) else value
