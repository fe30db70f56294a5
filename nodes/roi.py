"""Values inside a region; estimates, intervals and tests of such values.

Which of these may be used for which way of choosing a region is not decided here but by the
guard: a plain t-test is right for an a-priori region and wrong for leave-one-subject-out values.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special, stats

from .errors import InputError

Floats = npt.NDArray[np.floating]
Bools = npt.NDArray[np.bool_]

SUMMARIES = ("mean", "median", "weighted", "component")


def region_mean(values: Floats, present: Bools | None = None) -> tuple[float, float]:
    """The mean inside a region of one row, over the features that have data.

    Parameters
    ----------
    values : (n_features_in_region,) float
    present : (n_features_in_region,) bool, optional
        Where there is data; the default is everywhere.

    Returns
    -------
    mean, coverage : float
        Mean 0 and coverage 0 when the region is empty or holds no data.

    Examples
    --------
    >>> region_mean(np.array([1.0, 3.0, 8.0]), np.array([True, True, False]))
    (2.0, 0.6666666666666666)
    """
    return region_value(values, present)


def region_value(
    values: Floats,
    present: Bools | None = None,
    summary: str = "mean",
    weights: Floats | None = None,
) -> tuple[float, float]:
    """One value for a map inside a region, over the features that have data.

    Parameters
    ----------
    values : (n_features_in_region,) float
    present : (n_features_in_region,) bool, optional
        Where there is data; the default is everywhere.
    summary : {"mean", "median", "weighted", "component"}
        "component" of a single map is its root mean square with the sign of its mean.
    weights : (n_features_in_region,) float
        For "weighted": not negative; those of the features with data are scaled to a sum of 1.

    Returns
    -------
    value, coverage : float
        Coverage is the share of the features (for "weighted": of the weight) that has data.
        Value 0 and coverage 0 when there is nothing to read.

    Examples
    --------
    >>> x, there = np.array([1.0, 3.0, 8.0, 2.0]), np.array([True, True, True, False])
    >>> region_value(x, there, "median")
    (3.0, 0.75)
    >>> region_value(x, there, "weighted", np.array([1.0, 1.0, 0.0, 2.0]))
    (2.0, 0.5)
    """
    there = slice(None) if present is None else present
    # In float64 before any sum, so that a map has the same value in whichever type it is held.
    x = values[there].astype(np.float64, copy=False)
    if summary == "weighted":
        if weights is None:
            raise ValueError('summary = "weighted" needs the weights')
        held = weights[there].astype(np.float64, copy=False)
        weight = float(held.sum())
        if not weight:
            return 0.0, 0.0
        return float((held * x).sum()) / weight, weight / float(weights.sum(dtype=np.float64))
    if not len(x):
        return 0.0, 0.0
    coverage = len(x) / len(values)
    if summary == "mean":
        # One after the other, so that zeros between the features cannot change a bit: so a flip
        # may read many regions at once (`procedure.row_means`).
        return float(np.add.accumulate(x)[-1]) / len(x), coverage
    if summary == "median":
        return float(np.median(x)), coverage
    if summary == "component":
        return float(first_component(x[None])[0]), coverage
    raise ValueError(f"summary is one of {', '.join(SUMMARIES)}, not {summary!r}")


def first_component(maps: Floats, present: Bools | None = None) -> Floats:
    """Scores of one person's maps on their first principal component inside a region.

    The component is not centred (a response that all maps share is what it is after); scores
    are divided by sqrt(n_features), so that a constant map of height h scores h. Its sign is
    that by which its weights over features sum to 0 or more (if to 0: the first weight that is
    not 0 is positive). So the scores change sign with the maps, and follow the maps' order, to
    the last bit.

    Parameters
    ----------
    maps : (n_maps, n_features) float
    present : (n_maps, n_features) bool, optional
        Where there is data; features that lack it in any of the maps are left out.

    Returns
    -------
    (n_maps,) float64; zeros when no feature is left.

    Examples
    --------
    >>> first_component(np.array([[2.0, 2.0, 2.0], [-1.0, -1.0, -1.0]])).round(12).tolist()
    [2.0, -1.0]
    """
    x = maps.astype(np.float64, copy=False)
    if present is not None:
        x = x[:, present.all(axis=0)]
    size = float(np.abs(x).max(initial=0.0))
    if not size:
        return np.zeros(len(x))
    # Scaled, so that no square overflows; every map turned to begin positively and the maps in
    # an order of their own, so that neither signs nor order reach the arithmetic.
    first = np.take_along_axis(x, (x != 0).argmax(axis=1)[:, None], axis=1)
    turn = np.sign(first[:, 0])
    turned = x / size * turn[:, None]
    order = sorted(range(len(x)), key=lambda i: turned[i].tobytes())
    turned = turned[order]
    # From the products of maps with maps, few numbers however large the region; einsum, because
    # a BLAS may round otherwise on another number of threads.
    _, vectors = np.linalg.eigh(np.einsum("if,jf->ij", turned, turned))
    weights = np.einsum("i,if->f", vectors[:, -1], turned)
    # Read back from the maps, so that two that are the same score the same.
    scores = np.einsum("if,f->i", turned, weights)
    scores /= np.sqrt(np.square(weights).sum() * x.shape[1])
    lead = weights.sum() or weights[weights != 0][0]
    out = np.empty(len(x))
    out[order] = np.sign(lead) * size * scores
    return out * turn


def block_values(
    maps: Floats,
    present: Bools | None = None,
    summary: str = "mean",
    weights: Floats | None = None,
) -> tuple[Floats, Floats]:
    """The values of one person's maps inside one region, and their coverage.

    Parameters
    ----------
    maps : (n_maps, n_features_in_region) float
    present : (n_maps, n_features_in_region) bool, optional
    summary, weights
        As for `region_value`; "component" is that of all the maps together, over the features
        with data in each of them.

    Returns
    -------
    values, coverage : (n_maps,) float64
    """
    if summary == "component" and maps.shape[1]:
        share = 1.0 if present is None else float(present.all(axis=0).mean())
        return first_component(maps, present), np.full(len(maps), share)
    made = [
        region_value(row, None if present is None else present[i], summary, weights)
        for i, row in enumerate(maps)
    ]
    values, coverage = np.array(made).reshape(-1, 2).T
    return values, coverage


def per_person(values: Sequence[float], labels: Sequence[str]) -> list[float]:
    """Values averaged over the rows of each label, by sorted label.

    Examples
    --------
    >>> per_person([1.0, 2.0, 4.0], ["b", "a", "b"])
    [2.0, 2.5]
    """
    of_label: dict[str, list[float]] = {}
    for value, label in zip(values, labels, strict=True):
        of_label.setdefault(label, []).append(value)
    return [float(np.mean(of_label[label])) for label in sorted(of_label)]


def studentised(values: Floats) -> float:
    """Student's t of the mean against zero: mean / (sd / sqrt(n)); 0 when all values are 0.

    Examples
    --------
    >>> round(studentised(np.array([0.2, -0.1, 0.2, 0.8, 0.2])), 7)
    1.7690759
    """
    mean, deviation = float(values.mean()), float(values.std(ddof=1))
    # Equal values have a deviation of rounding size only.
    if deviation <= 1e-13 * abs(mean):
        return 0.0 if mean == 0 else float(np.copysign(np.inf, mean))
    return mean / (deviation / float(np.sqrt(len(values))))


def without_spread(values: Floats) -> bool:
    """Whether several values are equal, or differ by rounding only: there is no t of them.

    Examples
    --------
    >>> without_spread(np.array([0.1 + 0.2, 0.3])), without_spread(np.array([1.0, 2.0]))
    (True, False)
    """
    return len(values) > 1 and bool(np.ptp(values) <= 1e-13 * abs(float(values.mean())))


@dataclass(frozen=True)
class Interval:
    """A 95 % (or other) interval and what kind of statement it is.

    Parameters
    ----------
    low, high : float
        In the units of the effect.
    kind : {"exact", "approximate", "conservative"}
    method : str
        How it was made, in a sentence.
    """

    low: float
    high: float
    kind: str
    method: str


@dataclass(frozen=True)
class TTest:
    """A one-sample t-test: estimate, t, df, two-sided p, interval, effect sizes."""

    mean: float
    t: float
    df: int
    p: float
    interval: Interval
    dz: float
    g: float


def small_sample_factor(df: int) -> float:
    """J(df) = Gamma(df/2) / (sqrt(df/2) Gamma((df-1)/2)), by which d becomes g (Hedges 1981).

    Examples
    --------
    >>> round(small_sample_factor(9), 9)
    0.913874892
    """
    return float(np.exp(special.gammaln(df / 2) - special.gammaln((df - 1) / 2)) / np.sqrt(df / 2))


def one_sample_t(values: npt.ArrayLike, level: float = 0.95) -> TTest:
    """Student's one-sample t-test against zero, with the interval of the mean, dz and g.

    Valid when the region was chosen without these values (a-priori, or on other subjects).

    Parameters
    ----------
    values : (n_subjects,) float
    level : float
        Coverage of the interval.

    Raises
    ------
    InputError
        With fewer than two values, or a value that is not finite.

    Examples
    --------
    >>> test = one_sample_t([1.2, 2.4, 1.3, 1.3, 0.0, 1.0, 1.8, 0.8, 4.6, 1.4])
    >>> round(test.t, 7), round(test.p, 10), round(test.dz, 7)
    (4.0621277, 0.0028328902, 1.2845576)
    """
    x = np.asarray(values, dtype=float)
    if x.ndim != 1 or len(x) < 2 or not np.isfinite(x).all():
        raise InputError("a t-test needs at least two finite values", got=f"{x.tolist()}")
    df, mean, deviation = len(x) - 1, float(x.mean()), float(x.std(ddof=1))
    t = studentised(x)
    half = float(stats.t.ppf((1 + level) / 2, df)) * deviation / float(np.sqrt(len(x)))
    dz = t / float(np.sqrt(len(x)))
    return TTest(
        mean,
        t,
        df,
        float(2 * stats.t.sf(abs(t), df)),
        Interval(mean - half, mean + half, "exact", "Student's t interval (near-normal values)"),
        dz,
        dz * small_sample_factor(df),
    )


def exchange_p(observed: float, others: Floats, *, exact: bool) -> float:
    """The share of exchanged statistics at or above the observed one.

    Parameters
    ----------
    observed : float
    others : (n,) float
        The statistic under every exchange (exact: the identity among them), or under random
        ones, for (1 + b) / (1 + m) (Phipson & Smyth 2010).
    exact : bool

    Examples
    --------
    >>> exchange_p(2.0, np.array([0.0, 2.0, 3.0]), exact=False)
    0.75
    """
    at_least = count_at_least(observed, others)
    return at_least / len(others) if exact else (1 + at_least) / (1 + len(others))


def count_at_least(observed: float, others: Floats) -> int:
    """How many of the others reach the observed statistic, a tie by rounding included."""
    floor = observed if np.isinf(observed) else observed - 1e-9 * max(1.0, abs(observed))
    return int(np.count_nonzero(others >= floor))


def sign_flip_t(values: npt.ArrayLike, sided: int = 1) -> float:
    """Exact sign-flip p of the mean (equally: of t), all 2^n flips enumerated, n at most 20.

    Examples
    --------
    >>> sign_flip_t([1.2, 2.4, 1.3, 1.3, 0.0, 1.0, 1.8, 0.8, 4.6, 1.4]) * 1024
    2.0
    """
    x = np.asarray(values, dtype=float)
    if len(x) > 20:
        raise InputError("too many values to enumerate", expected="at most 20", got=str(len(x)))
    sums = np.zeros(1)
    for value in x:  # doubling: every subset's sum, in 2^n additions
        sums = np.concatenate([sums + value, sums - value])
    if sided == 2:
        return exchange_p(abs(float(x.sum())), np.abs(sums), exact=True)
    return exchange_p(float(x.sum()), sums, exact=True)


def flip_interval(values: Floats, abs_t_quantile: float, level: float = 0.95) -> Interval:
    """Mean +- SE x the quantile of |t| over whole-procedure flips: approximate.

    Parameters
    ----------
    values : (n_subjects,) float
        Held-out values.
    abs_t_quantile : float
        The `level` quantile of |t| under flips of the whole procedure.
    """
    mean = float(values.mean())
    error = float(values.std(ddof=1)) / float(np.sqrt(len(values)))
    # Values that do not vary say nothing where |t| has no bound.
    half = error * abs_t_quantile if error or np.isfinite(abs_t_quantile) else np.inf
    return Interval(
        mean - half,
        mean + half,
        "approximate",
        f"standard error x the {level:.0%} quantile of |t| over whole-procedure sign flips that "
        "find a region (at least Student's); two-sided, so it may include 0 when the one-sided "
        "p < .05",
    )


def fold_interval(values: Floats, n_folds: int, level: float = 0.95) -> Interval:
    """The interval of a k-fold mean: SE x sqrt(1 + k / (k - 1)), n - 1 df: approximate.

    The factor allows for the training sets that folds share (Nadeau & Bengio 2003).

    Parameters
    ----------
    values : (n_subjects,) float
        Held-out values.
    n_folds : int

    Examples
    --------
    >>> x = np.array([1.0, 2.0, 4.0])
    >>> made, plain = fold_interval(x, 2), one_sample_t(x).interval
    >>> round((made.high - made.low) / (plain.high - plain.low), 6), made.kind
    (1.732051, 'approximate')
    """
    n, mean = len(values), float(values.mean())
    error = (
        float(values.std(ddof=1)) / float(np.sqrt(n)) * float(np.sqrt(1 + n_folds / (n_folds - 1)))
    )
    half = float(stats.t.ppf((1 + level) / 2, n - 1)) * error
    return Interval(
        mean - half,
        mean + half,
        "approximate",
        f"standard error x sqrt(1 + k / (k - 1)) for k = {n_folds} folds (Nadeau & Bengio 2003)",
    )


def jackknife_interval(estimate: float, without: Floats, level: float = 0.95) -> Interval:
    """The delete-one jackknife of a whole procedure: conservative.

    Parameters
    ----------
    estimate : float
        From all subjects.
    without : (n_subjects,) float
        The estimate of the whole procedure without each subject.

    Examples
    --------
    >>> x = np.array([1.0, 2.0, 4.0])   # of a mean, the jackknife gives the t interval
    >>> made = jackknife_interval(x.mean(), np.array([3.0, 2.5, 1.5]))
    >>> t = one_sample_t(x).interval
    >>> bool(np.isclose(made.low, t.low)), made.kind
    (True, 'conservative')
    """
    n = len(without)
    error = float(np.sqrt((n - 1) / n * np.square(without - without.mean()).sum()))
    half = float(stats.t.ppf((1 + level) / 2, n - 1)) * error
    return Interval(
        estimate - half,
        estimate + half,
        "conservative",
        "delete-one jackknife of the whole procedure; "
        "the interval is conservative and may include 0 when p < .05",
    )


def holm(p: Sequence[float]) -> list[float]:
    """Holm's step-down adjusted p-values (Holm 1979).

    Examples
    --------
    >>> [round(x, 3) for x in holm([0.01, 0.04, 0.03])]
    [0.03, 0.06, 0.06]
    """
    order = sorted(range(len(p)), key=lambda i: p[i])
    out, running = [0.0] * len(p), 0.0
    for rank, i in enumerate(order):
        running = max(running, min(1.0, (len(p) - rank) * p[i]))
        out[i] = running
    return out
