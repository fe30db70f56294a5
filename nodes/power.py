"""How often a test finds an effect, how many subjects that takes, and what finding it does to it.

An estimate that is looked at only when it is significant is too large: type M is by how much on
average (mean size of a significant estimate over the true effect), type S how often a
significant estimate has the wrong sign (Gelman & Carlin 2014). They stand beside every power.

Effects are standardised: d is a mean (or a difference of means) over the standard deviation of
the values, for paired values over that of the differences; r a correlation; f the standard
deviation of a factor's cell means over that within a cell (Cohen 1988).
"""

from __future__ import annotations

from abc import ABC, abstractmethod
from dataclasses import dataclass
from typing import Protocol

import numpy as np
import numpy.typing as npt
from scipy import optimize, special, stats

from .errors import InputError

Floats = npt.NDArray[np.floating]

_NODES, _WEIGHTS = special.roots_legendre(300)
# What lies beyond is below the rounding of a power.
_TAIL, _FAR = 1e-17, 9.0
_MOST_N = 1e7


@dataclass(frozen=True)
class Power:
    """What a test does at one true effect and one number of subjects.

    Parameters
    ----------
    power : float
        The chance of a significant result.
    type_m : float
        Mean size of a significant estimate over the true effect; infinite when that is 0.
    type_s : float or None
        Share of significant estimates with the wrong sign; None for a test without a sign.
    smallest : float
        The smallest estimate that is significant.
    """

    power: float
    type_m: float
    type_s: float | None
    smallest: float


class PowerTest(Protocol):
    """A test whose power is known.

    Attributes
    ----------
    least_n, most_effect : float
        From how many subjects on, and up to which effect, it exists.
    """

    @property
    def least_n(self) -> float:
        """The fewest subjects it can be made with."""

    @property
    def most_effect(self) -> float:
        """What an effect must stay below."""

    def at(self, effect: float, n: float) -> Power:
        """Power and errors at a true effect of 0 or more, and a number of subjects."""


@dataclass(frozen=True)
class _Significance:
    """The level of a test, and whether it looks at both directions.

    Parameters
    ----------
    alpha : float
    sides : {2, 1}
        With 1, the direction of the effect.
    """

    alpha: float = 0.05
    sides: int = 2

    def __post_init__(self) -> None:
        _in_range("alpha", self.alpha, 0, 0.5)
        if self.sides not in (1, 2):
            raise InputError("sides out of range", expected="1 or 2", got=str(self.sides))

    @property
    def tail(self) -> float:
        """The level in the direction of the effect."""
        return self.alpha / self.sides


@dataclass(frozen=True)
class _Means(_Significance, ABC):
    """Student's t of a mean or a difference: its noncentrality is d times sqrt(information)."""

    @property
    def least_n(self) -> float:
        """Two, or two in each group."""
        return 2

    @property
    def most_effect(self) -> float:
        """Any."""
        return np.inf

    @abstractmethod
    def _information(self, n: float) -> tuple[float, float]:
        """(noncentrality squared for d = 1, degrees of freedom)."""

    def at(self, effect: float, n: float) -> Power:
        """Power and errors of the t-test.

        Parameters
        ----------
        effect : float
            d, 0 or more.
        n : float
        """
        _check(self, effect, n)
        information, df = self._information(n)
        scale = float(np.sqrt(information))
        critical = float(stats.t.isf(self.tail, df))
        # Given the standard deviation, in units of the true one, t is normal.
        away = effect * scale
        low, high = np.sqrt([stats.chi2.ppf(_TAIL, df), stats.chi2.isf(_TAIL, df)]) / np.sqrt(df)
        # With a larger one t is not significant.
        high = max(low, min(high, (away + _FAR) / critical))
        s, weight = _between(float(low), float(high))
        weight = weight * 2 * s * df * stats.chi2.pdf(s * s * df, df)
        above, size = _beyond(critical * s - away, away)
        below, size_below = _beyond(critical * s + away, -away)
        if self.sides == 1:
            below, size_below = np.zeros_like(below), np.zeros_like(below)
        right, wrong = float(weight @ above), float(weight @ below)
        # With one degree of freedom the mean size of t does not exist.
        mean_size = float(weight @ ((size + size_below) / s)) if df > 1 else np.inf
        return _made(right, wrong, mean_size, away, critical / scale)


@dataclass(frozen=True)
class OneSample(_Means):
    """The t-test of one mean, or of paired differences (then d is that of the differences).

    Examples
    --------
    >>> made = OneSample().at(0.5, 20)
    >>> round(made.power, 7), round(made.type_m, 6), round(made.smallest, 4)
    (0.5645044, 1.385216, 0.468)
    """

    def _information(self, n: float) -> tuple[float, float]:
        return n, n - 1


@dataclass(frozen=True)
class TwoSample(_Means):
    """Student's t-test of two groups of equal size; n is that of each.

    Examples
    --------
    >>> round(n_for(TwoSample(), 0.5, 0.8), 5)
    63.76561
    """

    def _information(self, n: float) -> tuple[float, float]:
        return n / 2, 2 * n - 2


@dataclass(frozen=True)
class Correlation(_Significance):
    """The t-test of a correlation of two normal variables, by the exact distribution of r.

    Examples
    --------
    >>> round(Correlation().at(0.5, 29).power, 5), round(Correlation().at(0.3, 84).power, 5)
    (0.81394, 0.80034)

    References
    ----------
    Hotelling (1953), New light on the correlation coefficient. J R Stat Soc B 15:193-232.
    """

    @property
    def least_n(self) -> float:
        """Three: one degree of freedom."""
        return 3

    @property
    def most_effect(self) -> float:
        """One."""
        return 1.0

    def at(self, effect: float, n: float) -> Power:
        """Power and errors of the test of r.

        Parameters
        ----------
        effect : float
            The true correlation, 0 to below 1.
        n : float
        """
        _check(self, effect, n)
        smallest = smallest_r(n, self.alpha, self.sides)
        # On the scale of atanh r the density falls off as cosh(distance)^-(n - 1).
        centre, reach = float(np.arctanh(effect)), float(np.arccosh(np.exp(40 / (n - 1))))
        cut = float(np.arctanh(smallest))
        right, size = self._mass(effect, n, max(cut, centre - reach), max(cut, centre + reach))
        wrong = wrong_size = 0.0
        if self.sides == 2:
            wrong, wrong_size = self._mass(effect, n, min(-cut, centre - reach), -cut)
        return _made(right, wrong, size + wrong_size, effect, smallest)

    def _mass(self, rho: float, n: float, low: float, high: float) -> tuple[float, float]:
        """The chance of atanh r in an interval, and the mean of |r| over it."""
        z, weight = _between(low, high)
        r = np.tanh(z)
        log_flat = 2 * (np.log(2) - np.abs(z) - np.log1p(np.exp(-2 * np.abs(z))))  # 1 - r^2
        log_density = (
            np.log(n - 2)
            + special.gammaln(n - 1)
            - special.gammaln(n - 0.5)
            - np.log(2 * np.pi) / 2
            + (n - 1) / 2 * np.log1p(-rho * rho)
            + (n - 2) / 2 * log_flat
            - (n - 1.5) * np.log1p(-rho * r)
            + np.log(special.hyp2f1(0.5, 0.5, n - 0.5, (1 + rho * r) / 2))
        )
        mass = weight * np.exp(log_density)
        return float(mass.sum()), float(mass @ np.abs(r))


@dataclass(frozen=True)
class Repeated:
    """The F-test of one within-subject factor.

    With epsilon below 1 (no sphericity) the power is approximate: then it depends on the
    pattern of the cell means too, of which f knows nothing.

    Parameters
    ----------
    levels : int
        Of the factor.
    rho : float
        Correlation of the values of two levels over subjects.
    epsilon : float
        Departure from sphericity: 1 for none, 1 / (levels - 1) at the worst.
    alpha : float

    Examples
    --------
    >>> round(Repeated(levels=4).at(0.25, 20).power, 7)
    0.7288426

    References
    ----------
    Cohen (1988), Statistical Power Analysis for the Behavioral Sciences, chapter 8; lambda =
    f^2 N m epsilon / (1 - rho), df (m - 1) epsilon and (N - 1) (m - 1) epsilon.
    """

    levels: int
    rho: float = 0.5
    epsilon: float = 1.0
    alpha: float = 0.05

    def __post_init__(self) -> None:
        _in_range("alpha", self.alpha, 0, 0.5)
        if self.levels < 2:
            raise InputError("too few levels", expected="2 or more", got=str(self.levels))
        least = -1 / (self.levels - 1)
        if not least < self.rho < 1:
            raise InputError(
                "rho out of range", expected=f"above {least:.3g}, below 1", got=f"{self.rho:g}"
            )
        if not -least <= self.epsilon <= 1:
            raise InputError(
                "epsilon out of range", expected=f"{-least:.3g} to 1", got=f"{self.epsilon:g}"
            )

    @property
    def least_n(self) -> float:
        """Two."""
        return 2

    @property
    def most_effect(self) -> float:
        """Any."""
        return np.inf

    @property
    def approximate(self) -> bool:
        """Whether the power is an approximation."""
        return self.epsilon < 1

    def at(self, effect: float, n: float) -> Power:
        """Power of the F-test, and type M of f; an F has no sign, and so no type S.

        Parameters
        ----------
        effect : float
            f, 0 or more.
        n : float
            Subjects.
        """
        _check(self, effect, n)
        df = (self.levels - 1) * self.epsilon
        df_error = (n - 1) * df
        # lambda for f = 1
        information = n * self.levels * self.epsilon / (1 - self.rho)
        critical = float(stats.f.isf(self.alpha, df, df_error))
        away = effect * effect * information
        # A noncentral F is a mixture of central ones by a Poisson number.
        spread = 12 * np.sqrt(away / 2) + 60
        j = np.arange(max(0.0, np.floor(away / 2 - spread)), away / 2 + spread)
        weight = stats.poisson.pmf(j, away / 2)
        a, b = df / 2 + j, df_error / 2
        cut = df * critical / (df * critical + df_error)
        power = float(weight @ stats.beta.sf(cut, a, b))
        size = np.inf
        if df_error > 1:
            # Mean of sqrt(df F) where F is significant, again by a beta distribution.
            moment = np.exp(special.betaln(a + 0.5, b - 0.5) - special.betaln(a, b))
            tail = stats.beta.sf(cut, a + 0.5, b - 0.5)
            size = float(np.sqrt(df_error) * (weight @ (moment * tail)))
        made = _made(power, 0.0, size, float(np.sqrt(away)), 0.0)
        return Power(made.power, made.type_m, None, float(np.sqrt(df * critical / information)))


def estimate_errors(effect: float, error: float, alpha: float = 0.05) -> Power:
    """Power, type M and type S of a normal estimate with a known standard error, two-sided.

    Parameters
    ----------
    effect, error : float
        The true effect and the standard error, in one unit; `smallest` is in that unit too.
    alpha : float

    References
    ----------
    Gelman & Carlin (2014), Beyond power calculations. Perspect Psychol Sci 9:641-651.

    Examples
    --------
    >>> made = estimate_errors(1.0, 3.28)
    >>> round(made.power, 7), round(made.type_s, 6), round(made.type_m, 4)
    (0.0607147, 0.193712, 7.7492)
    """
    _in_range("alpha", alpha, 0, 0.5)
    if not (error > 0 and effect >= 0):
        raise InputError(
            "effect or error out of range",
            expected="effect >= 0, error > 0",
            got=f"{effect:g}, {error:g}",
        )
    z, away = float(stats.norm.isf(alpha / 2)), effect / error
    right, size = _beyond(np.array(z - away), away)
    wrong, size_wrong = _beyond(np.array(z + away), -away)
    return _made(float(right), float(wrong), float(size + size_wrong), away, z * error)


def n_for(test: PowerTest, effect: float, power: float) -> float:
    """How many subjects (or subjects per group) give a power; not rounded up.

    Raises
    ------
    InputError
        When more than ten million would be needed, or effect or power are out of range.

    Examples
    --------
    >>> int(np.ceil(n_for(OneSample(), 0.5, 0.8)))
    34
    """
    if not 0 < effect < test.most_effect:
        raise InputError(
            "effect out of range",
            expected="above 0" + (f", below {test.most_effect:g}" if test.most_effect < 9 else ""),
            got=f"{effect:g}",
        )
    _in_range("power", power, 0, 1)
    low = test.least_n
    if test.at(effect, low).power >= power:
        return low
    high = 2 * low
    while test.at(effect, high).power < power:
        low, high = high, 2 * high
        if high > _MOST_N:
            raise InputError(
                "no such number of subjects",
                expected=f"at most {_MOST_N:g}",
                got=f"power {power:g} at an effect of {effect:g}",
                remedy="plan on a larger effect, or a lower power",
            )
    return float(optimize.brentq(lambda n: test.at(effect, n).power - power, low, high, xtol=1e-9))


def effect_for(test: PowerTest, n: float, power: float) -> float:
    """The effect that a number of subjects finds with a power.

    Examples
    --------
    >>> round(effect_for(OneSample(), 10, 0.8), 5)
    0.996
    """
    nothing = test.at(0, n).power
    if not nothing < power < 1:
        raise InputError(
            "power out of range", expected=f"above {nothing:.3g}, below 1", got=f"{power:g}"
        )
    high = min(1.0, test.most_effect * (1 - 1e-9))
    while test.at(high, n).power < power:
        if 2 * high > min(test.most_effect, 1e6):
            raise InputError(
                "no such effect",
                expected=f"one below {min(test.most_effect, 1e6):g}",
                got=f"power {power:g} with n = {n:g}",
                remedy="plan with more subjects, or a lower power",
            )
        high *= 2
    return float(optimize.brentq(lambda e: test.at(e, n).power - power, 0, high, xtol=1e-12))


def smallest_r(n: float, alpha: float = 0.05, sides: int = 2) -> float:
    """The smallest significant correlation.

    Examples
    --------
    >>> round(smallest_r(20, 0.001), 7)
    0.6787811
    """
    t = float(stats.t.isf(alpha / sides, n - 2))
    return t / float(np.sqrt(n - 2 + t * t))


def dz_interval(dz: float, n: int, level: float = 0.95) -> tuple[float, float]:
    """The interval of a standardised mean, by the noncentral t distribution.

    Parameters
    ----------
    dz : float
        Mean over standard deviation of n independent normal values.
    n : int
    level : float

    Examples
    --------
    >>> low, high = dz_interval(1.28455756259105, 10)
    >>> round(low, 7), round(high, 7)
    (0.4146278, 2.1180165)
    """
    if dz < 0:  # the far tails of the distribution are known for positive t only
        low, high = dz_interval(-dz, n, level)
        return -high, -low
    root = float(np.sqrt(n))
    t = dz * root

    def end(share: float) -> float:
        def off(away: float) -> float:
            return float(stats.nct.cdf(t, n - 1, away)) - share

        reach = 1.0
        while off(t - reach) < 0 or off(t + reach) > 0:
            reach *= 2
        return float(optimize.brentq(off, t - reach, t + reach, xtol=1e-12)) / root

    return end((1 + level) / 2), end((1 - level) / 2)


def selected_mean(p: float) -> float:
    """h(u) = phi(u) / p: the mean of a standard normal above the threshold with tail p.

    Examples
    --------
    >>> [round(selected_mean(p), 7) for p in (0.05, 0.01, 0.001)]
    [2.0627128, 2.6652142, 3.3670901]
    """
    _in_range("p", p, 0, 0.5)
    return float(stats.norm.pdf(stats.norm.isf(p)) / p)


def circular_inflation(p: float, n: float) -> float:
    """What noise alone reads in a region chosen and read on the same data.

    Features above a forming threshold p (one-sided) of n subjects average h(u) / sqrt(n), in
    standard deviations between subjects, where there is no effect at all.

    References
    ----------
    Kriegeskorte et al. (2009), Nat Neurosci 12:535-540, show it; the value is the mean of a
    truncated normal.

    Examples
    --------
    >>> round(circular_inflation(0.01, 20), 3)
    0.596
    """
    if not n >= 2:
        raise InputError("too few subjects", expected="2 or more", got=f"{n:g}")
    return selected_mean(p) / float(np.sqrt(n))


def _made(right: float, wrong: float, size: float, away: float, smallest: float) -> Power:
    """A record, from the chances of both directions and the mean size over them."""
    power = right + wrong
    return Power(
        power=power,
        type_m=size / (away * power) if away > 0 and power > 0 else np.inf,
        type_s=wrong / power if power > 0 else 0.0,
        smallest=smallest,
    )


def _beyond(cut: Floats, shift: float) -> tuple[Floats, Floats]:
    """The chance that a standard normal Z exceeds a cut, and the mean of Z + shift over it."""
    above: Floats = special.ndtr(-cut)
    return above, shift * above + np.exp(-cut * cut / 2) / np.sqrt(2 * np.pi)


def _between(low: float, high: float) -> tuple[Floats, Floats]:
    """Points and weights of an integral."""
    half = (high - low) / 2
    return low + half * (_NODES + 1), half * _WEIGHTS


def _in_range(name: str, value: float, low: float, high: float) -> None:
    if not low < value < high:
        raise InputError(
            f"{name} out of range", expected=f"above {low:g}, below {high:g}", got=f"{value:g}"
        )


def _check(test: PowerTest, effect: float, n: float) -> None:
    if not 0 <= effect < test.most_effect:
        below = f", below {test.most_effect:g}" if np.isfinite(test.most_effect) else ""
        raise InputError("effect out of range", expected=f"0 or more{below}", got=f"{effect:g}")
    if not test.least_n <= n < np.inf:
        raise InputError("too few subjects", expected=f"{test.least_n:g} or more", got=f"{n:g}")
