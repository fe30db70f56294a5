"""Thresholds for a whole map of tests: what each controls, and what that rests on.

A threshold is read off the maps that choose, and a feature passes when its t exceeds it.
Bonferroni and the false discovery rate need p-values only. The two by sign flips take the
largest t, or the largest cluster, anywhere in the region, under flips of whole rows.

What a flip changes. The sum of squares Q of a feature stays, its sum S changes, and
t = r sqrt((n - 1) / (1 - r^2)) rises with r = S / sqrt(n Q). So a flip is one product of signs
with rows divided by sqrt(n Q), all within -1..1: float32 screens it, and float64 sums decide at
the few features that could be the largest or that could exceed the forming height.

The set of all flips of a stack is the set of all flips of any flip of it. Within a test that
flips whole maps, a threshold by flips therefore stays what it is for the data: only the flips
drawn differ.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import stats

from .errors import InputError
from .flips import Signs, all_signs, random_signs
from .groupmaps import Missing, bound_on_sum, filled, t_from_sums
from .masks import Neighbourhood, components
from .roi import exchange_p
from .space import Space

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]

# Products of so many flips and features are in hand at once, and stay in a cache.
_BLOCK = 1024
_FLIPS_AT_ONCE = 256
# Clusters are found in whole maps: fewer, or the neighbours above the height fill the memory.
_MAPS_AT_ONCE = 16
# As in `roi.count_at_least`: nearer than this is a tie by rounding.
_TIE = 1e-9


@dataclass(frozen=True)
class Control:
    """What a threshold controls, and what that rests on.

    Parameters
    ----------
    error : str
        The error whose rate is held.
    assumes : str
        Under which conditions.
    source : str
        The method's paper.
    """

    error: str
    assumes: str
    source: str

    def describe(self, alpha: float) -> str:
        """In words, for sentences about a result.

        Examples
        --------
        >>> print(CONTROLS["bonferroni"].describe(0.05))
        chance of any false voxel at most 0.05, provided each p-value is right
        """
        return f"{self.error} at most {alpha:g}, provided {self.assumes}"


_SYMMETRY = "the maps are independent and jointly symmetric about zero where nothing is there"
CONTROLS = {
    "bonferroni": Control(
        "chance of any false voxel", "each p-value is right", "Dunn 1961, JASA 56:52-64"
    ),
    "benjamini-hochberg": Control(
        "expected share of false voxels among those found",
        "the p-values are right, and independent or positively dependent",
        "Benjamini & Hochberg 1995, JRSS-B 57:289-300",
    ),
    "max-t": Control("chance of any false voxel", _SYMMETRY, "Nichols & Holmes 2002, HBM 15:1-25"),
    "max-cluster": Control(
        "chance of any false cluster, of which no single feature is sure",
        _SYMMETRY,
        "Nichols & Holmes 2002, HBM 15:1-25",
    ),
    "random-field": Control(
        "chance of any false voxel",
        "the noise is a stationary smooth Gaussian field, FWHM about three voxels or more",
        "Worsley et al. 1996, HBM 4:58-73",
    ),
    "cluster-extent": Control(
        "chance of any false cluster, of which no single feature is sure",
        "the noise is a Gaussian field, equally smooth everywhere, and the forming threshold high",
        "Friston et al. 1994, HBM 1:210-220",
    ),
}


def bonferroni(alpha: float, n_features: int) -> float:
    """The p that a single feature must reach for a family-wise error of alpha.

    Examples
    --------
    >>> bonferroni(0.05, 10)
    0.005
    """
    _check_alpha(alpha)
    if n_features < 1:
        raise InputError("no features to test", got=str(n_features))
    return alpha / n_features


def benjamini_hochberg(p: Floats, q: float = 0.05) -> float:
    """The p that a feature must reach for a false discovery rate of q; 0 when none does.

    Parameters
    ----------
    p : (n_features,) float
        NaN for a feature that is not tested; it does not count.
    q : float

    Returns
    -------
    float
        q k / m for the k features found among m: every p up to it is found, and no other.

    References
    ----------
    Benjamini & Hochberg 1995, JRSS-B 57:289-300.

    Examples
    --------
    >>> benjamini_hochberg(np.array([0.01, 0.02, 0.03, 0.5]), 0.04)
    0.03
    """
    _check_alpha(q)
    return _step_up(p[p <= q], int(np.count_nonzero(~np.isnan(p))), q)


def benjamini_hochberg_t(t: Floats, df: npt.ArrayLike, q: float = 0.05) -> Floats:
    """The t that a feature must exceed for a false discovery rate of q, one-sided.

    Parameters
    ----------
    t : (n_features,) float
        NaN for a feature that is not tested.
    df : float or (n_features,) float
        Degrees of freedom.
    q : float

    Returns
    -------
    The shape of `df`, float64; infinite when no feature is found.

    Examples
    --------
    >>> benjamini_hochberg_t(np.array([4.0, 3.0, 0.1, np.nan]), 19, 0.05).round(4).item()
    1.9455
    """
    _check_alpha(q)
    df = np.asarray(df, dtype=float)
    # p-values are slow, and only those up to q can matter.
    near = np.flatnonzero(t >= stats.t.isf(q, df))
    p = stats.t.sf(t[near], df if df.ndim == 0 else df[near])
    critical = _step_up(p, int(np.count_nonzero(~np.isnan(t))), q)
    made: Floats = np.asarray(stats.t.isf(critical, df)) if critical else np.full(df.shape, np.inf)
    return made


def _step_up(p: Floats, n_tests: int, q: float) -> float:
    """q k / m, from the p-values that are at most q among m."""
    rank = np.arange(1, len(p) + 1)
    found = np.flatnonzero(np.sort(p) <= q * rank / n_tests) if len(p) else rank
    return float(q * (found[-1] + 1) / n_tests) if len(found) else 0.0


@dataclass(frozen=True)
class FlipPlan:
    """Which flips a threshold by flips makes: all of them when they are few.

    Parameters
    ----------
    labels : tuple of str
        Per row; rows that share one flip as one.
    n_flips : int
        Random flips, when there are too many patterns to enumerate.
    seed : int

    Examples
    --------
    >>> FlipPlan(tuple("abcde")).exact, FlipPlan(tuple("abcde")).total
    (True, 32)
    """

    labels: tuple[str, ...]
    n_flips: int = 999
    seed: int = 0

    def __post_init__(self) -> None:
        if self.n_flips < 1:
            raise InputError("too few flips", expected="at least 1", got=str(self.n_flips))

    @property
    def people(self) -> list[str]:
        """The distinct labels, sorted."""
        return sorted(set(self.labels))

    @property
    def exact(self) -> bool:
        """Whether all patterns are enumerated, the data as they are among them."""
        n_people = len(self.people)
        return n_people < 40 and 2**n_people <= self.n_flips + 1

    @property
    def total(self) -> int:
        """How many flips are made."""
        return 2 ** len(self.people) if self.exact else self.n_flips

    def signs(self, at_once: int) -> Iterator[tuple[slice, Signs]]:
        """Some flips at a time: which, and their (n_flips, n_rows) int8 signs."""
        people = self.people
        columns = [people.index(label) for label in self.labels]
        for start in range(0, self.total, at_once):
            stop = min(start + at_once, self.total)
            some = (
                all_signs(len(people), start, stop)
                if self.exact
                else random_signs(self.seed, people, start, stop)
            )
            yield slice(start, stop), some[:, columns]

    def critical(self, extremes: Floats | Ints, alpha: float) -> float:
        """The value that must be exceeded for a family-wise p of at most alpha.

        Parameters
        ----------
        extremes : (total,) float
            The largest statistic anywhere, under each flip.
        alpha : float

        Raises
        ------
        InputError
            When there are too few flips for any p to be that small.

        Examples
        --------
        >>> FlipPlan(tuple("abcde")).critical(np.arange(32.0), 0.07)
        29.0
        """
        _check_alpha(alpha)
        # Random flips join the data as they are: p = (1 + b) / (1 + m) (Phipson & Smyth 2010).
        patterns = self.total + (not self.exact)
        most = int(np.floor(alpha * patterns + 1e-9))
        if most < 1:
            raise InputError(
                "too few flips for this alpha",
                expected=f"at least {int(np.ceil(1 / alpha))} patterns of signs",
                got=f"{patterns}, so that no p is below {1 / patterns:.3g}",
                remedy=f"{len(self.people)} labels have no more; take a larger alpha"
                if self.exact
                else "raise n_flips",
            )
        rank = most + 1 if self.exact else most
        return float(np.partition(extremes, len(extremes) - rank)[len(extremes) - rank])

    def p(self, value: float, extremes: Floats | Ints) -> float:
        """The family-wise p of one feature's (or cluster's) statistic."""
        return exchange_p(value, np.asarray(extremes, dtype=float), exact=self.exact)


def max_t_extremes(
    effects: Floats, plan: FlipPlan, missing: Missing | None = None, *, two_sided: bool = False
) -> Floats:
    """The largest t of any feature under each flip.

    Parameters
    ----------
    effects : (n_rows, n_features) float
        Effect maps; rows sorted by label.
    plan : FlipPlan
        With as many labels as rows.
    missing : Missing, optional
        Features with too few rows with data are left out, as in `groupmaps.group_map`.
    two_sided : bool
        The largest size of t, either sign.

    Returns
    -------
    (plan.total,) float64

    References
    ----------
    Nichols & Holmes 2002, Human Brain Mapping 15:1-25.

    Examples
    --------
    >>> X = np.array([[1.0, 2.0], [2.0, -1.0], [3.0, 1.0], [4.0, 2.0]])
    >>> plan = FlipPlan(tuple("abcd"))
    >>> extremes = max_t_extremes(X, plan, two_sided=True)
    >>> [plan.p(t, extremes) * 16 for t in (3.8729833462, 1.4142135624)]
    [4.0, 8.0]
    """
    extremes = np.full(plan.total, -np.inf)
    every = list(plan.signs(_FLIPS_AT_ONCE))
    for block in _blocks(effects, plan, missing):
        for flips, signs in every:
            best = extremes[flips]
            r = signs.astype(np.float32) @ block.scaled
            if two_sided:
                np.abs(r, out=r)
            # What could be the block's largest, and larger than what earlier blocks had.
            floor = np.maximum(r.max(axis=1), _share(best, block.n)) - block.slack
            flip, feature = np.nonzero(r >= floor[:, None])
            S = _sums(signs[flip], block.x[:, feature])
            t = t_from_sums(block.n, np.abs(S) if two_sided else S, block.squares[feature])
            np.maximum.at(best, flip, t)
    return extremes


def max_t_by_flips(
    effects: Floats,
    labels: Sequence[str],
    n_flips: int = 999,
    seed: int = 0,
    alpha: float = 0.05,
    missing: Missing | None = None,
    *,
    two_sided: bool = False,
) -> float:
    """The t that noise exceeds anywhere with a chance of at most alpha, by sign flips.

    Parameters
    ----------
    effects : (n_rows, n_features) float
        Effect maps; rows sorted by label.
    labels : sequence of str
        Per row; rows that share one flip as one.
    n_flips, seed : int
        Random flips; all patterns of signs when there are no more than `n_flips` + 1.
    alpha : float
    missing : Missing, optional
    two_sided : bool
        Of the size of t, either sign.

    Returns
    -------
    float; a feature passes when its t exceeds it.

    Examples
    --------
    >>> x = np.random.default_rng(0).normal(size=(8, 50))
    >>> round(max_t_by_flips(x, list("abcdefgh")), 3)
    4.86
    """
    plan = FlipPlan(tuple(labels), n_flips, seed)
    critical = plan.critical(max_t_extremes(effects, plan, missing, two_sided=two_sided), alpha)
    return critical + _TIE * max(1.0, abs(critical)) if np.isfinite(critical) else critical


def max_cluster_extremes(
    effects: Floats,
    plan: FlipPlan,
    space: Space,
    height: float,
    connectivity: int = 18,
    missing: Missing | None = None,
) -> Ints:
    """The size of the largest cluster of t above a height under each flip.

    Parameters
    ----------
    effects : (n_rows, n_features) float
        Effect maps; rows sorted by label.
    plan : FlipPlan
        With as many labels as rows.
    space : Space
    height : float
        The forming threshold of t, above 0.
    connectivity : {18, 6, 26}
    missing : Missing, optional

    Returns
    -------
    (plan.total,) int, in features

    Examples
    --------
    >>> from sequester.nodes.space import Grid
    >>> x = np.random.default_rng(1).normal(size=(4, 27))
    >>> grid = Grid((3, 3, 3), np.eye(4))
    >>> max_cluster_extremes(x, FlipPlan(tuple("abcd")), grid, 1.638)[:6].tolist()
    [1, 1, 2, 2, 3, 1]
    """
    if not height > 0:
        raise InputError("height out of range", expected="height > 0", got=f"{height:g}")
    blocks = list(_blocks(effects, plan, missing))
    neighbourhood = Neighbourhood(space, connectivity)
    extremes = np.zeros(plan.total, dtype=np.intp)
    for flips, signs in plan.signs(_MAPS_AT_ONCE):
        single = signs.astype(np.float32)
        above = np.zeros((space.n_features, len(signs)), bool)
        for block in blocks:
            near = single @ block.scaled > _share(np.array(height), block.n) - block.slack
            flip, feature = np.nonzero(near)
            bound = bound_on_sum(height, block.n, block.squares[feature])
            passed = _sums(signs[flip], block.x[:, feature]) > bound
            above[block.features[feature[passed]], flip[passed]] = True
        candidates = np.flatnonzero(above.any(axis=1))
        _, of_map, cluster = components(above[candidates], neighbourhood.pairs(candidates))
        sizes = np.bincount(cluster)
        np.maximum.at(extremes[flips], of_map, sizes[cluster])
    return extremes


def max_cluster_by_flips(
    effects: Floats,
    labels: Sequence[str],
    space: Space,
    height: float,
    connectivity: int = 18,
    n_flips: int = 999,
    seed: int = 0,
    alpha: float = 0.05,
    missing: Missing | None = None,
) -> int:
    """The least size of cluster that noise has anywhere with a chance of at most alpha, by flips.

    Parameters
    ----------
    effects : (n_rows, n_features) float
        Effect maps; rows sorted by label.
    labels : sequence of str
        Per row; rows that share one flip as one.
    space : Space
    height : float
        The forming threshold of t, above 0.
    connectivity : {18, 6, 26}
    n_flips, seed : int
        Random flips; all patterns of signs when there are no more than `n_flips` + 1.
    alpha : float
    missing : Missing, optional

    Returns
    -------
    int, in features; a cluster passes when it has at least so many.
    """
    plan = FlipPlan(tuple(labels), n_flips, seed)
    extremes = max_cluster_extremes(effects, plan, space, height, connectivity, missing)
    return int(plan.critical(extremes, alpha)) + 1


@dataclass(frozen=True, eq=False)
class _Block:
    """Some features with the same number of rows with data, made ready for flips."""

    n: int
    features: Ints
    x: Floats
    squares: Floats
    scaled: Floats

    @property
    def slack(self) -> float:
        """Two roundings of a float32 product, generously: the |scaled| of a column add up to 1."""
        return float(2 * (len(self.x) + 2) * np.finfo(np.float32).eps)


def _blocks(effects: Floats, plan: FlipPlan, missing: Missing | None) -> Iterator[_Block]:
    """The features that count, some at a time."""
    if effects.ndim != 2 or effects.dtype.kind != "f" or len(effects) != len(plan.labels):
        raise ValueError(
            f"effects are (n_rows, n_features) float for {len(plan.labels)} labels, not "
            f"{effects.shape} {effects.dtype}"
        )
    missing = missing or Missing()
    least = missing.least(len(effects))
    for start in range(0, effects.shape[1], _BLOCK):
        given = effects[:, start : start + _BLOCK]
        x, present = filled(given, missing)
        x = x.astype(np.float64, copy=False)
        counts = np.full(x.shape[1], len(x)) if present is None else present.sum(axis=0)
        with np.errstate(over="ignore"):
            squares = np.square(x).sum(axis=0)
        usable = (counts >= least) & (squares > 0) & np.isfinite(squares)
        for n in np.unique(counts[usable]).tolist():
            some = np.flatnonzero(usable & (counts == n))
            scaled = (x[:, some] / np.sqrt(n * squares[some])).astype(np.float32)
            yield _Block(n, start + some, x[:, some], squares[some], scaled)


def _share(t: Floats, n: int) -> Floats:
    """r = S / sqrt(n Q) of a t; it rises with t from -1 to 1."""
    infinite = np.isinf(t)
    finite = np.where(infinite, 0, t)
    share: Floats = np.where(infinite, np.sign(t), finite / np.sqrt(n - 1 + finite * finite))
    return share


def _sums(signs: Signs, x: Floats) -> Floats:
    """The sums over rows of x (n_rows, n) under signs (n, n_rows), in the order of the rows."""
    total = np.zeros(x.shape[1])
    for row, sign in zip(x, signs.T, strict=True):
        total += sign * row
    return total


def _check_alpha(alpha: float) -> None:
    if not 0 < alpha < 0.5:
        raise InputError("alpha out of range", expected="0 < alpha < 0.5", got=f"{alpha:g}")
