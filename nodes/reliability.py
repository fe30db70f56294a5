"""How repeatable values are, and how high a correlation of two measures can therefore be.

Definitions
-----------
Values x_ij of n people, measured k times each (runs, sessions, halves), and the mean squares of
their analysis of variance: BMS between people, WMS within people, JMS between measurements and
EMS the rest (Shrout & Fleiss 1979, Psychol Bull 86:420-428):

    ICC(1,1) = (BMS - WMS) / (BMS + (k - 1) WMS)
    ICC(2,1) = (BMS - EMS) / (BMS + (k - 1) EMS + k (JMS - EMS) / n)
    ICC(3,1) = (BMS - EMS) / (BMS + (k - 1) EMS)

They are the reliability of one measurement. That of the mean of several is higher, by Spearman
(1910) and Brown (1910): k r / (1 + (k - 1) r).

A correlation of two measures is that of what they measure, times sqrt(rel_x rel_y) (Spearman
1904, Am J Psychol 15:72-101): the ceiling, which only chance, selection or a shared error lifts
a correlation above.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats

from .errors import InputError
from .roi import Interval

Floats = npt.NDArray[np.floating]

# What measurements are taken for, by the kind of coefficient.
KINDS = {
    "1,1": "measurements that differ from person to person",
    "2,1": "absolute agreement, measurements a sample of those that could have been made",
    "3,1": "consistency, over these very measurements",
}
# A sum of squares below this share of the whole is rounding.
_FLAT = 1e-26


@dataclass(frozen=True)
class Reliability:
    """How much of the variance of a value is the people's own.

    Parameters
    ----------
    value : float
        At most 1; below 0 when people differ less than their measurements do.
    interval : Interval
    n_people, n_left_out : int
        Those with a value in every measurement, and the others.
    n_measurements : int
    kind : str
        Which coefficient.
    sentence : str
    """

    value: float
    interval: Interval
    n_people: int
    n_left_out: int
    n_measurements: int
    kind: str
    sentence: str


def spearman_brown(reliability: float, k: float) -> float:
    """The reliability of a measurement k times as long (Spearman 1910; Brown 1910).

    Parameters
    ----------
    reliability : float
        At most 1.
    k : float
        Above 0; 2 from a half to the whole, below 1 for a shorter measurement.

    Returns
    -------
    float; minus infinity where a reliability is so far below 0 that the formula has no value.

    Raises
    ------
    InputError
        When either is out of range.

    Examples
    --------
    >>> round(spearman_brown(0.6, 2), 7), round(spearman_brown(0.7, 0.5), 7)
    (0.75, 0.5384615)
    """
    if not reliability <= 1:
        raise InputError("not a reliability", expected="at most 1", got=f"{reliability:g}")
    if not 0 < k < np.inf:
        raise InputError("not a length", expected="k above 0", got=f"{k:g}")
    divisor = 1 + (k - 1) * reliability
    return k * reliability / divisor if divisor > 0 else -np.inf


def split_half(values: npt.ArrayLike, k: float = 2, level: float = 0.95) -> Reliability:
    """The correlation of two halves, stepped up to the whole by Spearman and Brown's formula.

    The halves should be separate acquisitions: halves of one run share its noise, which passes
    for reliability.

    Parameters
    ----------
    values : (n_people, 2) float
        Each person's value in either half; NaN where missing (the person is left out).
    k : float
        How many halves the measurement has whose reliability is wanted.
    level : float
        Coverage of the interval (Fisher's of the correlation, stepped up; approximate).

    Raises
    ------
    InputError
        With fewer than two people, or other than two halves.

    Examples
    --------
    >>> made = split_half([[1.0, 2.0], [2.0, 1.0], [3.0, 4.0], [4.0, 3.0]])
    >>> round(made.value, 6)                      # the halves correlate .6
    0.75
    """
    x, left_out = _complete(values, level)
    if x.shape[1] != 2:
        raise InputError(
            "split-half reliability is that of two halves",
            got=f"{x.shape[1]} columns",
            remedy="average the measurements of each half, or use icc",
        )
    n = len(x)
    rest = x - x.mean(axis=0)
    squares = np.square(rest).sum(axis=0)
    # A half that is the same for everybody tells nobody apart.
    squares[squares <= _FLAT * np.square(x).sum(axis=0)] = 0
    r = 0.0
    if squares.all():
        r = float(np.clip((rest[:, 0] * rest[:, 1]).sum() / np.sqrt(squares.prod()), -1, 1))
    low, high = -1.0, 1.0
    if n > 3 and abs(r) < 1:
        half = float(stats.norm.ppf((1 + level) / 2)) / np.sqrt(n - 3)
        low, high = (float(np.tanh(np.arctanh(r) + turn * half)) for turn in (-1, 1))
    return _told(
        spearman_brown(r, k),
        Interval(
            spearman_brown(low, k),
            spearman_brown(high, k),
            "approximate",
            "Fisher's interval of the correlation of the halves, stepped up",
        ),
        (n, left_out, 2),
        f"split-half, Spearman-Brown with k = {k:g}",
    )


def icc(values: npt.ArrayLike, kind: str = "2,1", level: float = 0.95) -> Reliability:
    """An intraclass correlation: the reliability of one measurement (Shrout & Fleiss 1979).

    Parameters
    ----------
    values : (n_people, n_measurements) float
        NaN where missing (the person is left out).
    kind : {"1,1", "2,1", "3,1"}
        "2,1" counts a shift of all values from one measurement to the next as error, "3,1"
        does not; "1,1" is for measurements that have nothing in common between people.
    level : float
        Coverage of the interval: exact for near-normal values, for "2,1" approximate.

    Raises
    ------
    InputError
        With fewer than two people or measurements.

    Examples
    --------
    >>> ratings = [[9, 2, 5, 8], [6, 1, 3, 2], [8, 4, 6, 8], [7, 1, 2, 6], [10, 5, 6, 9],
    ...            [6, 2, 4, 7]]
    >>> [round(icc(ratings, kind).value, 2) for kind in ("1,1", "2,1", "3,1")]
    [0.17, 0.29, 0.71]
    """
    if kind not in KINDS:
        raise InputError("unknown kind", expected=f"one of {'; '.join(KINDS)}", got=repr(kind))
    x, left_out = _complete(values, level)
    n, k = x.shape
    grand, people, times = x.mean(), x.mean(axis=1), x.mean(axis=0)
    sums = [
        k * float(np.square(people - grand).sum()),
        n * float(np.square(times - grand).sum()),
        float(np.square(x - people[:, None] - times + grand).sum()),
    ]
    between, shift, rest = (s if s > _FLAT * float(np.square(x).sum()) else 0.0 for s in sums)
    bms, jms, ems = between / (n - 1), shift / (k - 1), rest / ((n - 1) * (k - 1))
    wms = (shift + rest) / (n * (k - 1))
    error, extra, df = {
        "1,1": (wms, 0.0, n * (k - 1)),
        "2,1": (ems, k * (jms - ems) / n, (n - 1) * (k - 1)),
        "3,1": (ems, 0.0, (n - 1) * (k - 1)),
    }[kind]
    divisor = bms + (k - 1) * error + extra
    # Where nothing varies nobody is told apart.
    value = (bms - error) / divisor if divisor > 0 else 0.0
    tail = (1 - level) / 2
    if not divisor:
        low, high = -1 / (k - 1), 1.0
    elif kind == "2,1":
        low, high = _agreement_limits((bms, jms, ems), (n, k), value, tail)
    else:
        low, high = (
            (bms - f * error) / (bms + (k - 1) * f * error)
            for f in (stats.f.isf(tail, n - 1, df), 1 / stats.f.isf(tail, df, n - 1))
        )
    return _told(
        value,
        Interval(
            float(low),
            float(high),
            "approximate" if kind == "2,1" else "exact",
            "F interval of Shrout & Fleiss 1979 (near-normal values)",
        ),
        (n, left_out, k),
        f"ICC({kind}), {KINDS[kind]}",
    )


def _agreement_limits(
    squares: tuple[float, float, float], shape: tuple[int, int], value: float, tail: float
) -> tuple[float, float]:
    """Limits of ICC(2,1), whose error has Satterthwaite's degrees of freedom."""
    (bms, jms, ems), (n, k) = squares, shape
    # k r Fj and n (1 + (k - 1) r) - k r, both times ems, for which Fj = jms / ems may be 0 / 0.
    a, b = k * value * jms, (n * (1 + (k - 1) * value) - k * value) * ems
    bottom = a**2 / (k - 1) + b**2 / ((n - 1) * (k - 1))
    df = (a + b) ** 2 / bottom if bottom else float((n - 1) * (k - 1))
    error, of_people = k * jms + (k * n - k - n) * ems, n * bms
    upper, lower = stats.f.isf(tail, n - 1, df), stats.f.isf(tail, df, n - 1)
    return (
        n * (bms - upper * ems) / (upper * error + of_people),
        n * (lower * bms - ems) / (error + lower * of_people),
    )


def ceiling(reliability_x: float, reliability_y: float) -> float:
    """How high the correlation of two measures can be on average: sqrt(rel_x rel_y).

    Parameters
    ----------
    reliability_x, reliability_y : float
        At most 1, of the very values that are correlated. Below 0 counts as 0.

    Raises
    ------
    InputError
        When one is above 1 or not a number.

    References
    ----------
    Spearman (1904), Am J Psychol 15:72-101.

    Examples
    --------
    >>> round(ceiling(0.8, 0.7), 7), ceiling(0.8, -0.1)
    (0.7483315, 0.0)
    """
    for given in (reliability_x, reliability_y):
        if not given <= 1:
            raise InputError("not a reliability", expected="at most 1", got=f"{given:g}")
    return float(np.sqrt(max(0.0, reliability_x)) * np.sqrt(max(0.0, reliability_y)))


def ceiling_sentence(r: float, ceiling: float) -> str:
    """What the ceiling says about a correlation, beside which it stands.

    Parameters
    ----------
    r : float
        The correlation, -1 to 1.
    ceiling : float
        From `ceiling`, 0 to 1.

    Examples
    --------
    >>> ceiling_sentence(0.3, 0.75)
    'r = 0.30; the reliabilities of the two measures allow up to 0.75.'
    """
    allowed = f"r = {r:.2f}; the reliabilities of the two measures allow up to {ceiling:.2f}."
    if ceiling <= 0:
        return (
            f"r = {r:.2f}, but a reliability is not above 0, so the ceiling is 0: such values do "
            "not tell people apart, and nothing can be said to correlate with them."
        )
    if abs(r) > ceiling:
        return (
            f"{allowed} A correlation beyond that is larger than the measures can carry: it is "
            "due to chance, to selection, or to an error that both measures share, unless the "
            "reliabilities are underestimated."
        )
    return allowed


def _complete(values: npt.ArrayLike, level: float) -> tuple[Floats, int]:
    """The people with all measurements, and how many are left out."""
    x = np.asarray(values, dtype=float)
    if x.ndim != 2 or x.shape[1] < 2:
        raise InputError(
            "reliability needs repeated measurements",
            expected="(people, at least 2 measurements)",
            got=f"shape {x.shape}",
        )
    if not 0 < level < 1:
        raise InputError("not a coverage", expected="between 0 and 1", got=f"{level:g}")
    if np.isinf(x).any():
        raise InputError("infinite values", got=f"{int(np.isinf(x).sum())} of {x.size}")
    kept = x[~np.isnan(x).any(axis=1)]
    if len(kept) < 2:
        raise InputError(
            "too few people for a reliability",
            expected="at least 2 with a value in every measurement",
            got=str(len(kept)),
        )
    return kept, len(x) - len(kept)


def _told(value: float, interval: Interval, counts: tuple[int, int, int], kind: str) -> Reliability:
    """The record, with its sentence."""
    n, left_out, k = counts
    more = f" ({left_out} without all measurements left out)" if left_out else ""
    below = " It is not above 0: these values do not tell people apart." if value <= 0 else ""
    return Reliability(
        value,
        interval,
        n,
        left_out,
        k,
        kind,
        f"Reliability {value:.2f} ({interval.kind} interval {interval.low:.2f} to "
        f"{interval.high:.2f}; {kind}), {n} people with {k} measurements each{more}.{below}",
    )
