"""What an exchange test of a whole procedure gives, and several of them tested together."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from .errors import InputError
from .roi import count_at_least, exchange_p


@dataclass(frozen=True)
class FlipTest:
    """A whole-procedure exchange test: flipped signs, or exchanged scores.

    Parameters
    ----------
    t, p : float
        The observed statistic; its one-sided p in the direction of selection.
    exact : bool
        Whether all exchanges were enumerated.
    n_flips, n_at_least : int
        Exchanges made, and those whose statistic reaches the observed one.
    abs_t_quantile : float
        95 % quantile of |t| over the exchanges in which a fold found a region; 0 if none did.
    noise_dice : float
        Mean over exchanges of the mean pairwise Dice of the fold masks: what noise alone gives.
    noise_empty : float
        Mean number of empty folds over exchanges.
    statistics : tuple of float
        The statistic under each exchange, in their order.
    exchanged : str
        What was exchanged: digest of the exchanges and of whom they concern. Tests with the
        same digest saw the same exchanges.
    """

    t: float
    p: float
    exact: bool
    n_flips: int
    n_at_least: int
    abs_t_quantile: float
    noise_dice: float
    noise_empty: float
    statistics: tuple[float, ...]
    exchanged: str


def max_statistic(tests: Sequence[FlipTest]) -> list[float]:
    """Family-wise p of several regions or contrasts, tested under the same exchanges.

    Single-step: a test's statistic is compared with the largest of all tests under each
    exchange (Westfall & Young 1993, Resampling-Based Multiple Testing). The family-wise error
    is controlled in the weak sense, and in the strong sense where the tests' nulls do not bear
    on one another (disjoint search regions).

    Parameters
    ----------
    tests : sequence of FlipTest
        Made with the same seed, number and people.

    Returns
    -------
    list of float, one per test; not below its own p

    Raises
    ------
    InputError
        When there is none, or the exchanges differ.

    Examples
    --------
    >>> def made(t, others):
    ...     return FlipTest(t, 0.5, False, 3, 1, 2.0, 0.1, 0.0, others, "digest")
    >>> max_statistic([made(2.5, (0.0, 1.0, 3.0)), made(1.5, (2.0, 0.5, 0.0))])
    [0.5, 0.75]
    """
    if not tests:
        raise InputError("no tests to combine")
    if len({(test.exchanged, test.n_flips, test.exact) for test in tests}) > 1:
        raise InputError(
            "tests of different exchanges cannot be combined",
            expected="the same people, model, seed and number of exchanges",
            got=", ".join(f"{test.n_flips} ({test.exchanged[:8]})" for test in tests),
            remedy="test every region with one seed, on the same subjects",
        )
    largest = np.max([test.statistics for test in tests], axis=0)
    return [exchange_p(test.t, largest, exact=test.exact) for test in tests]


def tested_by(
    observed: float,
    t: np.ndarray,
    overlap: np.ndarray,
    n_empty: np.ndarray,
    exchanged: str,
    *,
    exact: bool,
) -> FlipTest:
    """The record of a test from the statistic, mean Dice and empty folds under each exchange."""
    usable = overlap[~np.isnan(overlap)]
    # An exchange in which nothing is found has t = 0: it says nothing of how far t varies.
    found = np.abs(t[t != 0])
    return FlipTest(
        t=observed,
        p=exchange_p(observed, t, exact=exact),
        exact=exact,
        n_flips=len(t),
        n_at_least=count_at_least(observed, t),
        # "higher" takes one of the values, and so needs no arithmetic with infinities.
        abs_t_quantile=float(np.quantile(found, 0.95, method="higher")) if len(found) else 0.0,
        noise_dice=float(usable.mean()) if len(usable) else float("nan"),
        noise_empty=float(n_empty.mean()),
        statistics=tuple(t.tolist()),
        exchanged=exchanged,
    )
