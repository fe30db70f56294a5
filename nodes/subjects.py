"""One map per subject: runs combined, another state taken away, percent of a baseline.

NaN marks a voxel without data. A voxel that is missing in any of the maps that make up a
subject's map is missing in it: what a subject lacks is not made up from the other runs.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import reduce

import numpy as np
import numpy.typing as npt

from .errors import InputError

Floats = npt.NDArray[np.floating]


@dataclass(frozen=True)
class Keep:
    """Who stays, by one number of each: a motion summary, a score, a response.

    Parameters
    ----------
    at_least, at_most : float
        The limits; both belong to those who stay.

    Raises
    ------
    InputError
        When no number could lie between them.

    Examples
    --------
    >>> Keep(at_most=0.5).rows([0.2, 0.9, 0.5])
    [0, 2]
    >>> Keep(at_most=0.5).describe()
    'at most 0.5'
    """

    at_least: float = -np.inf
    at_most: float = np.inf

    def __post_init__(self) -> None:
        if not self.at_least <= self.at_most:
            raise InputError(
                "limits that nobody can keep", got=f"{self.at_least:g} to {self.at_most:g}"
            )

    def rows(self, measures: Sequence[float]) -> list[int]:
        """The row numbers of those who stay, ascending.

        Raises
        ------
        InputError
            When a measure is no number: nobody can say whether its row should stay.
        """
        lost = [str(row) for row, measure in enumerate(measures) if np.isnan(measure)]
        if lost:
            raise InputError(
                "measures that are no number",
                where=f"rows {', '.join(lost[:5])}",
                expected="a number for every row",
                remedy="leave these out with an exclude_reason in the study table",
            )
        return [row for row, m in enumerate(measures) if self.at_least <= m <= self.at_most]

    def describe(self) -> str:
        """The limits in words."""
        parts = [f"at least {self.at_least:g}"] * bool(np.isfinite(self.at_least))
        parts += [f"at most {self.at_most:g}"] * bool(np.isfinite(self.at_most))
        return " and ".join(parts) or "anything"


def combine_runs(maps: Sequence[Floats], variances: Sequence[Floats] | None = None) -> Floats:
    """The average of one subject's runs: with equal weights, or by inverse variance.

    Parameters
    ----------
    maps : sequence of arrays of one shape, float32 or float64
        One effect map a run, NaN where data is missing.
    variances : sequence of arrays of that shape, optional
        The squared standard error of each effect. Then the average is the fixed-effect
        estimate sum(e / v) / sum(1 / v). A voxel whose variance is not above zero and finite
        is missing.

    Returns
    -------
    array of that shape, float32 unless a map is float64; NaN where any run is missing.

    Raises
    ------
    ValueError
        Without a map, or when maps and variances do not pair up.

    References
    ----------
    Hedges & Olkin (1985), Statistical Methods for Meta-Analysis, chapter 6 (fixed effects).

    Examples
    --------
    >>> runs = [np.array([1.0, 2.0]), np.array([4.0, np.nan])]
    >>> combine_runs(runs).tolist()
    [2.5, nan]
    >>> combine_runs(runs, [np.array([1.0, 1.0]), np.array([2.0, 1.0])]).tolist()
    [2.0, nan]
    """
    if not maps:
        raise ValueError("no map to combine")
    if variances is None:
        if len(maps) == 1:
            return maps[0]
        return _as(np.result_type(*maps), reduce(np.add, map(_double, maps)) / len(maps))
    if len(variances) != len(maps):
        raise ValueError(f"{len(variances)} variance maps for {len(maps)} effect maps")
    known = [np.where((v > 0) & np.isfinite(v), _double(v), np.nan) for v in variances]
    # Weights relative to the best run's cannot overflow, and equal variances give equal
    # weights to the last bit.
    best = np.minimum.reduce(known)
    weights = [best / v for v in known]
    top = sum(w * _double(e) for w, e in zip(weights, maps, strict=True))
    return _as(np.result_type(*maps), top / sum(weights))


def percent_of(effect: Floats, baseline: Floats) -> Floats:
    """Percent signal change: 100 x effect / baseline.

    Parameters
    ----------
    effect, baseline : arrays of one shape, in one unit
        NaN where data is missing.

    Returns
    -------
    array, percent, in the dtype of `effect`; NaN where the baseline is not above zero.

    Examples
    --------
    >>> percent_of(np.array([1.0, 1.0, 1.0]), np.array([50.0, 0.0, np.nan])).tolist()
    [2.0, nan, nan]
    """
    known = np.where((baseline > 0) & np.isfinite(baseline), _double(baseline), np.nan)
    with np.errstate(over="ignore"):
        return _as(effect.dtype, 100 * _double(effect) / known)


def subject_map(
    effect: Floats,
    minus: Floats | None = None,
    baseline: Floats | None = None,
    null_value: float = 0.0,
) -> Floats:
    """The effect less another state of the same subject, in percent of a baseline, less the
    value expected under the null hypothesis; in this order, each step only when asked for.

    Parameters
    ----------
    effect, minus : arrays of one shape, in one unit
        Such as follow-up and first visit.
    baseline : array of that shape, in that unit
        See `percent_of`.
    null_value : float, in the unit of what is left
        Such as 0.5 for the accuracy of a choice between two.

    Returns
    -------
    array, NaN where anything is missing. A difference that is exactly 0 stays 0: it was
    measured.

    Examples
    --------
    >>> after, before = np.array([3.0, 2.0, 1.0]), np.array([2.0, 2.0, np.nan])
    >>> subject_map(after, before, baseline=np.array([50.0, 50.0, 50.0])).tolist()
    [2.0, 0.0, nan]
    >>> subject_map(np.array([0.75, 0.5]), null_value=0.5).tolist()
    [0.25, 0.0]
    """
    if minus is not None:
        dtype = np.result_type(effect, minus)
        effect = _as(dtype, _double(effect) - _double(minus))
    if baseline is not None:
        effect = percent_of(effect, baseline)
    if null_value:
        effect = _as(effect.dtype, _double(effect) - null_value)
    return effect


def _double(data: Floats) -> npt.NDArray[np.float64]:
    return data.astype(np.float64, copy=False)


def _as(dtype: np.dtype[np.floating], data: Floats) -> Floats:
    """In another precision; NaN where the number does not fit."""
    with np.errstate(over="ignore"):
        out: Floats = np.asarray(data).astype(dtype, copy=False)
    return np.where(np.isfinite(out), out, dtype.type(np.nan))
