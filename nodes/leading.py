"""The strongest features of every fold's map: exactly, or from values that are nearly known.

Ranking all folds takes longer than anything else of an exchange when many features are wanted.
Values in float32 settle nearly all of it: what is well above the k-th value of a map is among its
k strongest, what is well below is not, and the few around it are settled by exact values.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np
import numpy.typing as npt

from .masks import strongest

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# An axis along which NumPy is slow.
_SHORT = 64


def leading(values: Floats, features: Ints, k: Sequence[int]) -> tuple[Ints, Bools]:
    """The strongest of some features in each map.

    Parameters
    ----------
    values : (n_maps, n_some_features) float
        NaN where there is no value.
    features : (n_some_features,) int
        Their numbers, ascending.
    k : sequence of int
        How many of each map.

    Returns
    -------
    features : (n_found,) int
        Those in any map, ascending.
    members : (n_found, n_maps) bool
    """
    return led_in_any(features, strongest_of_each(values, k))


def some_of(members: Bools) -> Bools:
    """`members.any(axis=1)`, sooner: NumPy is slow along a short axis.

    Parameters
    ----------
    members : (n_features, n_maps) bool

    Examples
    --------
    >>> some_of(np.array([[False, True], [False, False]])).tolist()
    [True, False]
    """
    if members.shape[1] > _SHORT:
        return np.asarray(members.any(axis=1))
    counts: Floats = members.astype(np.float32) @ np.ones(members.shape[1], np.float32)
    some: Bools = counts > 0
    return some


def in_any(features: Ints, members: Bools) -> tuple[Ints, Bools]:
    """Features that are in any map's region, and in whose, from (n_features, n_maps) bool."""
    some = np.flatnonzero(some_of(members))
    return features.take(some), members.take(some, axis=0)


def led_in_any(features: Ints, chosen: Bools) -> tuple[Ints, Bools]:
    """The same from (n_maps, n_features) bool."""
    some = np.flatnonzero(chosen.any(axis=0))
    return features[some], np.ascontiguousarray(chosen[:, some].T)


def strongest_of_each(values: Floats, k: Sequence[int]) -> Bools:
    """`masks.strongest` of each map: (n_maps, n_features) bool.

    Parameters
    ----------
    values : (n_maps, n_features) float
    k : sequence of int
        How many of each map.

    Examples
    --------
    >>> strongest_of_each(np.array([[3.0, 1.0, 2.0], [1.0, 1.0, np.nan]]), [2, 1]).tolist()
    [[True, False, True], [True, False, False]]
    """
    chosen = np.zeros(values.shape, bool)
    many = max(k)
    alike = min(k) == many and 0 < many < values.shape[1]
    if alike:
        # All at once, where as many are at least the k-th value as are wanted.
        ranked = np.where(np.isnan(values), -np.inf, values)
        limit = np.partition(ranked, -many, axis=1)[:, -many, None]
        np.greater_equal(ranked, limit, out=chosen)
    for one, few in enumerate(k):
        if few and not (alike and limit[one] > -np.inf and chosen[one].sum() == few):
            chosen[one] = strongest(values[one], few)
    return chosen


def strongest_within(
    values: Floats, k: Sequence[int], off: float, exact: Callable[[Ints], Floats]
) -> tuple[Bools, Floats]:
    """`strongest_of_each` of values that are known only so far.

    Parameters
    ----------
    values : (n_maps, n_features) float
        In the order of the exact ones wherever two are more than twice `off` apart; -inf where
        there is no value.
    k : sequence of int
        How many of each map, at most n_features.
    off : float
        Not negative.
    exact : callable
        The exact values of some features, given their positions, ascending:
        (n_maps, n_some_features), NaN where there is no value.

    Returns
    -------
    chosen : (n_maps, n_features) bool
    limit : (n_maps,) float
        The k-th of the values of each map; infinite where none is wanted.

    Examples
    --------
    >>> exact = np.array([[3.0, 1.04, 1.0, 0.0]])
    >>> strongest_within(np.array([[3.0, 1.0, 1.1, 0.0]]), [2], 0.1, lambda some: exact[:, some])
    (array([[ True,  True, False, False]]), array([1.1]))
    """
    wanted = np.asarray(k)
    # Of none wanted the place is past the end, where infinity stands.
    places = np.minimum(values.shape[1] - wanted, values.shape[1] - 1)
    ranked = np.partition(values, np.unique(places), axis=1)
    limit = np.where(wanted > 0, ranked[np.arange(len(values)), places], np.inf)
    chosen = values >= (limit - 2 * off)[:, None]
    counts = np.array([np.count_nonzero(one) for one in chosen])
    # Where fewer have a value than are wanted, others were counted.
    unsettled = np.flatnonzero((counts != wanted) | np.isneginf(limit))
    if not len(unsettled):
        return chosen, limit
    sure = values[unsettled] > (limit[unsettled] + 2 * off)[:, None]
    doubtful = chosen[unsettled] & ~sure
    some = np.flatnonzero(doubtful.any(axis=0))
    decided = exact(some)[unsettled]
    for i, one in enumerate(unsettled.tolist()):
        among = doubtful[i, some]
        left = int(wanted[one] - np.count_nonzero(sure[i]))
        chosen[one] = sure[i]
        chosen[one, some[among][strongest(decided[i, among], left)]] = True
    return chosen, limit


def least_leader(maps: Floats, k: int) -> float:
    """The least over folds of the k-th highest value of some features; NaN counts as lowest.

    Examples
    --------
    >>> least_leader(np.array([[1.0, 5.0, 3.0], [4.0, np.nan, 2.0]]), 2)
    2.0
    """
    ranked = np.where(np.isnan(maps), -np.inf, maps)
    return float(np.partition(ranked, -k, axis=1)[:, -k].min())
