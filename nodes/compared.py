"""Models on the people of one stack: what is exchanged, the estimate, the statistic.

One sample under flips of signs (`OneSample`), and scores that change hands: of two groups
(`TwoGroups`) or any numbers (`OneScore`). A comparison also says how the folds' maps are made.

Of held-out values y and scores s (for groups: 1 in the first, 0 in the second), both without
what the intercept and the covariates explain, B being the orthonormal basis of these:

    Groups: b = s'y / s's, studentised by V = sum_i s_i^2 u_i^2 / (1 - h_i) / (s's)^2 with
            u = y - b s and h_i = sum B_i^2 + s_i^2 / s's (HC2; MacKinnon & White 1985), which
            without covariates is the difference of means over Welch's standard error
    Score:  r = s'y / sqrt(s's y'y), t = r sqrt((n - 2 - q) / (1 - r^2)), q covariates
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Callable, Sequence
from math import comb, factorial
from typing import Protocol

import numpy as np
import numpy.typing as npt

from .adjusted import AdjustedMaps
from .choosing import FoldMaps
from .design import Design, regression, two_sample
from .errors import InputError
from .flips import all_orders, all_signs, all_splits, random_orders, random_signs
from .foldstack import FoldStack
from .roi import Interval, flip_interval, studentised
from .scored import ScoredMaps
from .signed import SignedMaps

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Critical = Callable[[Floats], Floats] | None

# Values that differ by less than this share of their size are equal.
_EQUAL = 1e-13


class Comparison(Protocol):
    """A model on the people of one stack.

    Attributes
    ----------
    signed : bool
        Whether an exchange turns the signs of values.
    refitted : (n_people, n_columns) float, or None
        The nuisance whose residuals are exchanged instead of the scores.
    """

    signed: bool
    refitted: Floats | None

    def observed(self) -> Ints:
        """(n_people,) the exchange that changes nothing."""

    def exchanges(self, n: int, seed: int) -> tuple[Ints, bool]:
        """(n_exchanges, n_people), and whether these are all there are."""

    def weights(self, exchange: Ints) -> Floats:
        """(n_people,) float64: by what each person's maps are weighted under an exchange."""

    def statistic(self, values: Floats, exchange: Ints) -> float:
        """The statistic of (n_people,) held-out values, high in the direction of selection."""

    def estimate(self, values: Floats, exchange: Ints) -> float:
        """What is estimated from the held-out values."""

    def interval(self, values: Floats, quantile: float) -> Interval:
        """Of the estimate, from the 95 % quantile of |statistic| over exchanges."""

    def maps(self, stack: FoldStack, critical: Critical) -> FoldMaps:
        """The folds' maps."""


class OneSample:
    """Maps against zero, under flips of their signs; see `Comparison`.

    Parameters
    ----------
    people : sequence of str
        Sorted.
    """

    signed = True
    refitted: Floats | None = None

    def __init__(self, people: Sequence[str]) -> None:
        self._people = people

    def observed(self) -> Ints:
        """See `Comparison`."""
        return np.ones(len(self._people), np.int8)

    def exchanges(self, n: int, seed: int) -> tuple[Ints, bool]:
        """All 2^N flips if they are no more than n + 1, or n random ones."""
        n_people = len(self._people)
        if n_people < 40 and 2**n_people <= n + 1:
            return all_signs(n_people, 0, 2**n_people), True
        return random_signs(seed, self._people, 0, n), False

    def weights(self, exchange: Ints) -> Floats:
        """The signs."""
        return exchange.astype(np.float64)

    def statistic(self, values: Floats, exchange: Ints) -> float:
        """The studentised mean."""
        return studentised(values)

    def estimate(self, values: Floats, exchange: Ints) -> float:
        """The mean."""
        return float(values.mean())

    def interval(self, values: Floats, quantile: float) -> Interval:
        """Mean +- standard error x quantile."""
        return flip_interval(values, quantile)

    def maps(self, stack: FoldStack, critical: Critical) -> FoldMaps:
        """One-sample t or mean."""
        return SignedMaps(stack, critical)


class Exchanged(ABC):
    """Scores of people, with what covariates explain taken out; see `Comparison`."""

    signed = False

    def __init__(self, people: Sequence[str], scores: Floats, covariates: dict[str, Floats]):
        self._people, self._scores, self._covariates = people, scores, covariates
        nuisance = np.column_stack([np.ones(len(people)), *covariates.values()])
        self.refitted = nuisance if covariates else None
        # Scaled, so that a large unit does not make another column look like rounding.
        scale = np.sqrt(np.square(nuisance).sum(axis=0))
        if np.linalg.matrix_rank(nuisance / np.where(scale > 0, scale, 1)) < nuisance.shape[1]:
            raise InputError(
                "covariates that follow from one another",
                got=", ".join(covariates),
                remedy="leave one out; a constant is in the model already",
            )
        self._basis = np.linalg.qr(nuisance)[0]

    def observed(self) -> Ints:
        """See `Comparison`."""
        return np.arange(len(self._people))

    def exchanges(self, n: int, seed: int) -> tuple[Ints, bool]:
        """All orders if they are no more than n + 1, or n random ones."""
        if len(self._people) < 13 and factorial(len(self._people)) <= n + 1:
            return all_orders(len(self._people)), True
        return random_orders(seed, self._people, 0, n), False

    def weights(self, exchange: Ints) -> Floats:
        """The scores; those of everybody themselves where residuals are exchanged."""
        return self._scores[exchange] if self.refitted is None else self._scores

    def _parts(self, values: Floats, exchange: Ints) -> tuple[Floats, Floats]:
        """Values and scores without what the nuisance explains; exact zeros for equal values."""
        scores = self.weights(exchange)
        made = []
        for x in (values, scores):
            rest = x - self._basis @ (self._basis.T @ x)
            if np.abs(rest).max() <= _EQUAL * np.abs(x).max():
                rest = np.zeros(len(x))
            made.append(rest)
        return made[0], made[1]

    def maps(self, stack: FoldStack, critical: Critical) -> FoldMaps:
        """Of the score, or of a design if there are covariates."""
        if self.refitted is None:
            return ScoredMaps(stack, critical, self._scores)
        return AdjustedMaps(stack, critical, self._design())

    def _nuisance(self) -> dict[str, list[float]]:
        return {name: values.tolist() for name, values in self._covariates.items()}

    @abstractmethod
    def _design(self) -> Design:
        """The folds' model with the covariates."""


class TwoGroups(Exchanged):
    """1 for the first group and 0 for the second."""

    def exchanges(self, n: int, seed: int) -> tuple[Ints, bool]:
        """All splits if they are no more than n + 1, or n random orders."""
        if self.refitted is None:
            first = self._scores == 1
            if comb(len(first), int(first.sum())) <= n + 1:
                return all_splits(first), True
            return random_orders(seed, self._people, 0, n), False
        return super().exchanges(n, seed)

    def statistic(self, values: Floats, exchange: Ints) -> float:
        """The difference over its standard error."""
        b, error = self._fit(values, exchange)
        if error <= _EQUAL * abs(b):
            return 0.0 if b == 0 else float(np.copysign(np.inf, b))
        return b / error

    def estimate(self, values: Floats, exchange: Ints) -> float:
        """The difference, first minus second."""
        return self._fit(values, exchange)[0]

    def interval(self, values: Floats, quantile: float) -> Interval:
        """Difference +- standard error x quantile: approximate."""
        b, error = self._fit(values, self.observed())
        half = error * quantile if error or np.isfinite(quantile) else np.inf
        return Interval(
            b - half,
            b + half,
            "approximate",
            "Welch's standard error x the 95 % quantile of |t| over whole-procedure exchanges that "
            "find a region (at least Student's); two-sided, so it may include 0 when the one-sided "
            "p < .05",
        )

    def _fit(self, values: Floats, exchange: Ints) -> tuple[float, float]:
        """The difference and its standard error."""
        y, s = self._parts(values, exchange)
        spread = float(s @ s)
        b = float(s @ y) / spread
        u = y - b * s
        free = 1 - np.square(self._basis).sum(axis=1) - np.square(s) / spread
        # Where a row determines its own fitted value, its residual is 0 and says nothing.
        own = np.divide(np.square(s * u), free, out=np.zeros(len(s)), where=free > 1e-9)
        return b, float(np.sqrt(own.sum())) / spread

    def _design(self) -> Design:
        groups = ["first" if score else "second" for score in self._scores]
        return two_sample(groups, "first", "second", self._nuisance())


class OneScore(Exchanged):
    """A score."""

    def statistic(self, values: Floats, exchange: Ints) -> float:
        """The t of the correlation."""
        r, df = self.estimate(values, exchange), len(values) - 1 - self._basis.shape[1]
        left = 1 - r * r
        if left <= _EQUAL:
            return float(np.copysign(np.inf, r))
        return r * float(np.sqrt(df / left))

    def estimate(self, values: Floats, exchange: Ints) -> float:
        """The correlation; 0 for values that are all equal."""
        y, s = self._parts(values, exchange)
        if not y.any():
            return 0.0
        return float(s @ y) / float(np.sqrt((s @ s) * (y @ y)))

    def interval(self, values: Floats, quantile: float) -> Interval:
        """On the scale of atanh r (Fisher 1921), by the quantile: approximate."""
        df = len(values) - 1 - self._basis.shape[1]
        r, far = self.estimate(values, self.observed()), 1.0
        if np.isfinite(quantile):
            far = quantile / float(np.sqrt(df + quantile * quantile))
        with np.errstate(divide="ignore"):
            middle, half = np.arctanh(r), np.arctanh(far)
        low, high = (middle - half, middle + half) if abs(r) < 1 else (middle, middle)
        return Interval(
            float(np.tanh(low)),
            float(np.tanh(high)),
            "approximate",
            "atanh r +- the 95 % quantile of |atanh r| over whole-procedure exchanges that find "
            "a region (at least Student's); "
            "two-sided, so it may include 0 when the one-sided p < .05",
        )

    def _design(self) -> Design:
        return regression(self._scores.tolist(), self._nuisance())
