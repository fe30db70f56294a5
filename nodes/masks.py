"""Rules that turn a group map into a region: by height, by rank, by the peak; and given shapes.

A rule that starts from a threshold gives the critical value of t for a number of rows
(`critical`), and then keeps some of the features above it (`keep`). Rules see only the
features above the threshold, as members of a list of candidates, so that the same code serves
one map, all folds of a scheme, and every flip of a test. The other rules rank the features
(`Strongest`) or start from the first of them (`PeakSphere`).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
import numpy.typing as npt
from scipy import stats
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components
from scipy.spatial import KDTree

from .controlled import EXTENT_CONTROLS, HEIGHT_CONTROLS, Controlled, critical_of_map
from .errors import InputError
from .space import Space

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

PICKS = ("largest", "peak", "nearest", "all")
MAP_KINDS = ("t", "mean")
# Whose map a rule reads: a group's; one subject's other runs'; one subject's localizer's.
GROUP, RUNS, LOCALIZER = CHOSEN_ON = ("group", "other runs", "localizer")
# A nanometre of slack: an affine's rounding must not decide about voxels on a sphere's surface.
_SURFACE_MM = 1e-6
# Of so many members of maps it is worth seeing first which clusters may be picked.
_MANY = 2**14


class MaskRule(Protocol):
    """How a region is read off a group map."""

    @property
    def map_kind(self) -> str:
        """Which group map it reads: "t" or "mean"."""

    def describe(self, tail: str = "positive", chosen_on: str = GROUP) -> str:
        """The rule in words, for sentences about the result in a direction.

        `chosen_on` says what the map is of that it reads: one of `CHOSEN_ON`.
        """


@dataclass(frozen=True)
class _Forming:
    """A one-sided threshold on t: a height, the p-value that it stands for, or what it controls.

    Parameters
    ----------
    height : float, optional
        Threshold on t itself.
    p : float, optional
        One-sided p of t with n - 1 degrees of freedom, n the rows with data at the feature.
    control : Controlled, optional
        What it controls over the search region; by keyword.
    """

    height: float | None = None
    p: float | None = None
    control: Controlled | None = field(default=None, kw_only=True)

    def __post_init__(self) -> None:
        if sum(given is not None for given in (self.height, self.p, self.control)) != 1:
            raise InputError(
                "a threshold needs exactly one of height, p and control",
                got=f"height {self.height}, p {self.p}, control {self.control}",
            )
        if self.control is not None:
            _check_control("a threshold", self.control, HEIGHT_CONTROLS)
        if self.height is not None and not self.height > 0:
            raise InputError("height out of range", expected="height > 0", got=str(self.height))
        if self.p is not None and not 0 < self.p < 0.5:
            raise InputError("p out of range", expected="0 < p < 0.5", got=str(self.p))

    @property
    def map_kind(self) -> str:
        return "t"

    def critical(self, n: npt.ArrayLike) -> Floats:
        """The value t must exceed, for each number of rows with data (infinite below 2).

        Not of a threshold by what it controls: that depends on the maps.
        """
        rows = np.asarray(n, dtype=float)
        if self.height is not None:
            return np.where(rows >= 2, self.height, np.inf)
        # Few distinct counts occur; the quantile is slow and exact equality is wanted.
        counts, back = np.unique(rows, return_inverse=True)
        heights = np.full(len(counts), np.inf)
        enough = counts >= 2
        heights[enough] = stats.t.isf(self.p, counts[enough] - 1)
        out: Floats = heights[back].reshape(rows.shape)
        return out

    def _threshold(self, tail: str, chosen_on: str) -> str:
        below = tail == "negative"
        read = "t" if chosen_on == GROUP else _read("t", chosen_on)
        read = f"a {read}" if chosen_on == LOCALIZER else read
        if self.control is not None:
            return self.control.height(tail, read)
        if self.height is not None:
            return f"{read} < -{self.height:g}" if below else f"{read} > {self.height:g}"
        of = "" if chosen_on == GROUP else f" of {read}"
        return f"p{of} < {self.p:g}" + (" for effects below zero" if below else "")


@dataclass(frozen=True)
class Threshold(_Forming):
    """Every feature above the threshold.

    Examples
    --------
    >>> Threshold(p=0.01).critical(20).round(4).item()
    2.5395
    >>> print(Threshold(control=Controlled("bonferroni", 0.05)).describe())
    all voxels with t above Bonferroni's threshold, chance of any false voxel at most 0.05
    """

    def describe(self, tail: str = "positive", chosen_on: str = GROUP) -> str:
        """The rule in words."""
        return f"all voxels with {self._threshold(tail, chosen_on)}"


@dataclass(frozen=True)
class Cluster(_Forming):
    """One cluster (or all of them) of the features above a cluster-forming threshold.

    Parameters
    ----------
    height, p, control
        The forming threshold; exactly one.
    connectivity : {18, 6, 26}
        Which voxels touch: by a face, an edge or a corner.
    min_size : int
        The least number of features of a cluster.
    pick : {"largest", "peak", "nearest", "all"}
        The cluster with most features; with the highest t; with the feature nearest to a
        coordinate; or every cluster of sufficient size. Ties go to the lowest feature number.
    near : (3,) float, mm
        The coordinate for "nearest".
    extent : Controlled, optional
        What the size of a cluster controls over the search region, given a forming height or p;
        `min_size` holds besides.
    """

    connectivity: int = 18
    min_size: int = 1
    pick: str = "largest"
    near: tuple[float, float, float] | None = None
    extent: Controlled | None = None

    def __post_init__(self) -> None:
        super().__post_init__()
        if self.pick not in PICKS:
            raise InputError("unknown pick", expected=f"one of {', '.join(PICKS)}", got=self.pick)
        if self.connectivity not in (6, 18, 26):
            raise InputError(
                "connectivity out of range", expected="6, 18 or 26", got=str(self.connectivity)
            )
        if self.min_size < 1:
            raise InputError("min_size out of range", expected=">= 1", got=str(self.min_size))
        if (self.pick == "nearest") != (self.near is not None):
            raise InputError(
                'pick = "nearest" and near = [x, y, z] go together',
                got=f"pick {self.pick!r}, near {self.near}",
            )
        if self.extent is not None:
            _check_control("the size of clusters", self.extent, EXTENT_CONTROLS)
            if self.control is not None:
                raise InputError(
                    "control of height and of size at once",
                    expected="a forming height or p where the size is controlled",
                    got=f"{self.control.control} and {self.extent.control}",
                )

    def describe(self, tail: str = "positive", chosen_on: str = GROUP) -> str:
        """The rule in words."""
        extreme = "lowest trough" if tail == "negative" else "highest peak"
        which = {
            "largest": "the largest cluster",
            "peak": f"the cluster with the {extreme}",
            "nearest": f"the cluster nearest to {_point(self.near)} mm",
            "all": "every cluster",
        }[self.pick]
        sizes = f"at least {self.min_size} voxel{'s' * (self.min_size > 1)}"
        if self.extent is not None:
            sizes += f", {self.extent.extent()}"
        return (
            f"{which} of voxels with {self._threshold(tail, chosen_on)} "
            f"(connectivity {self.connectivity}, {sizes})"
        )


@dataclass(frozen=True)
class Strongest:
    """The features with the highest value of the map; ties go to the lowest number.

    Parameters
    ----------
    k : int
        How many; or else
    map_kind : {"t", "mean"}
        Which group map ranks them.
    fraction : float
        Which share of the features that have a value in the map, rounded up.

    Examples
    --------
    >>> Strongest(fraction=0.05).number(1990)
    100
    """

    k: int = 0
    map_kind: str = "t"
    fraction: float = 0.0

    def __post_init__(self) -> None:
        if (self.k == 0) == (self.fraction == 0):
            raise InputError(
                "the strongest voxels need exactly one of k and fraction",
                got=f"k {self.k}, fraction {self.fraction}",
            )
        if self.k < 0:
            raise InputError("k out of range", expected=">= 1", got=str(self.k))
        if self.fraction and not 0 < self.fraction < 1:
            raise InputError(
                "fraction out of range", expected="0 < fraction < 1", got=str(self.fraction)
            )
        _check_kind(self.map_kind)

    def number(self, usable: int) -> int:
        """How many features it keeps of a map in which so many have a value."""
        # 7 % of 100 features are 7, though 0.07 x 100 is a little more in binary.
        return self.k or max(1, int(np.ceil(self.fraction * usable - 1e-9)))

    def describe(self, tail: str = "positive", chosen_on: str = GROUP) -> str:
        """The rule in words.

        Examples
        --------
        >>> Strongest(5).describe(), Strongest(5, "mean").describe(chosen_on="other runs")
        ... # doctest: +NORMALIZE_WHITESPACE
        ('the 5 voxels with the highest group t',
         "the 5 voxels with the highest mean over the subject's other runs")
        """
        many = f"{self.k} voxels" if self.k else f"{100 * self.fraction:g} % of the voxels"
        many = "voxel" if self.k == 1 else many
        return f"the {many} with the {_extreme(tail)} {_read(self.map_kind, chosen_on)}"


@dataclass(frozen=True)
class PeakSphere:
    """The features around the highest value of the map, by the distance of their centres.

    A feature without data on the selection side cannot be the peak; it may lie in the sphere.

    Parameters
    ----------
    radius : float, mm
    map_kind : {"t", "mean"}
        Which group map has the peak; a tie goes to the lowest feature number.
    """

    radius: float
    map_kind: str = "t"

    def __post_init__(self) -> None:
        if not 0 < self.radius < np.inf:
            raise InputError("radius out of range", expected="> 0 mm", got=str(self.radius))
        _check_kind(self.map_kind)

    def describe(self, tail: str = "positive", chosen_on: str = GROUP) -> str:
        """The rule in words."""
        return (
            f"the voxels within {self.radius:g} mm of the one with the {_extreme(tail)} "
            f"{_read(self.map_kind, chosen_on)}"
        )


def _check_control(of: str, control: Controlled, known: tuple[str, ...]) -> None:
    if control.control not in known:
        raise InputError(
            f"{control.control} does not control {of}", expected=f"one of {', '.join(known)}"
        )


def _check_kind(kind: str) -> None:
    if kind not in MAP_KINDS:
        raise InputError("unknown map", expected=" or ".join(MAP_KINDS), got=str(kind))


def _read(kind: str, chosen_on: str) -> str:
    """What a rule reads, in words: t or a mean, but of a localizer map whatever it holds."""
    if chosen_on == GROUP:
        return f"group {kind}"
    if chosen_on == RUNS:
        return f"{kind} over the subject's other runs"
    return "value of the subject's own localizer map"


def _point(mm: tuple[float, float, float] | None) -> str:
    return "" if mm is None else f"({', '.join(f'{x:g}' for x in mm)})"


def _extreme(tail: str) -> str:
    return "lowest" if tail == "negative" else "highest"


class Spheres:
    """The features within a radius of any feature, found again and again.

    Parameters
    ----------
    space : Space
    radius : float, mm
    """

    def __init__(self, space: Space, radius: float) -> None:
        self._mm, self._radius = space.coordinates(), radius
        self._tree = KDTree(self._mm)

    def around(self, feature: int) -> Ints:
        """Their numbers, ascending; the feature is among them."""
        near = self._tree.query_ball_point(
            self._mm[feature], self._radius + _SURFACE_MM, return_sorted=True
        )
        return np.asarray(near, dtype=np.intp)


class Neighbourhood:
    """Who neighbours whom, made ready for finding clusters among few features again and again.

    Parameters
    ----------
    space : Space
        The space of the map.
    connectivity : int
        6, 18 or 26 on a grid.
    """

    def __init__(self, space: Space, connectivity: int) -> None:
        table = space.neighbours(connectivity)
        # Offset j is the opposite of offset -1-j: half of the columns holds every pair once.
        self._table = np.ascontiguousarray(table[:, : table.shape[1] // 2])
        self._position = np.full(space.n_features + 1, -1, dtype=np.int32)

    def pairs(self, features: Ints) -> tuple[Ints, Ints]:
        """The neighbouring pairs among some features, as positions in the list given."""
        self._position[features] = np.arange(len(features), dtype=np.int32)
        # Feature number -1 ("no neighbour") reads the last slot, which stays -1.
        other = self._position[self._table[features]]
        self._position[features] = -1
        pair = np.flatnonzero(other >= 0)
        return pair // other.shape[1], other.ravel()[pair]


def components(members: Bools, pairs: tuple[Ints, Ints]) -> tuple[Ints, Ints, Ints]:
    """The clusters of each map's members.

    Parameters
    ----------
    members : (n_candidates, n_maps) bool
        Which candidates are above the threshold in each map.
    pairs : two (n_pairs,) int
        Neighbouring candidates.

    Returns
    -------
    candidate, map, cluster : (n_members,) int
        For every member: which candidate, in which map, and a cluster number that is unique
        over all maps.
    """
    n_maps = members.shape[1]
    flat = np.flatnonzero(members)
    number = np.full(members.size, -1, dtype=np.int32)
    number[flat] = np.arange(len(flat), dtype=np.int32)
    one, other = pairs
    edge, of_map = np.divmod(np.flatnonzero(members[one] & members[other]), n_maps)
    a = number[one[edge] * n_maps + of_map]
    b = number[other[edge] * n_maps + of_map]
    graph = coo_array((np.ones(len(a), np.int8), (a, b)), shape=(len(flat), len(flat)))
    _, cluster = connected_components(graph.tocsr(), directed=False)
    candidate, of_map = np.divmod(flat, n_maps)
    return candidate, of_map, cluster


def keep_clusters(
    members: Bools,
    features: Ints,
    rule: Cluster,
    hood: Neighbourhood,
    t: Floats | None,
    distance: Floats | None,
    least: Callable[[Ints], Floats] | None = None,
) -> Bools:
    """Members that the cluster rule keeps.

    Parameters
    ----------
    members : (n_candidates, n_maps) bool
        The candidates above the forming threshold in each map.
    features : (n_candidates,) int
        Their feature numbers, ascending.
    rule : Cluster
    hood : Neighbourhood
        At the rule's connectivity.
    t : (n_candidates, n_maps) float
        Needed for ``pick = "peak"``.
    distance : (n_features,) float
        From the rule's coordinate, in mm; needed for ``pick = "nearest"``.
    least : callable, optional
        The sizes that a cluster of each map must have, besides the rule's `min_size`, given the
        size of the largest in each; (n_maps,) both.

    Returns
    -------
    (n_candidates, n_maps) bool
    """
    if not members.any():
        return members
    merit: Floats | None = None
    if rule.pick == "peak":
        if t is None:
            raise ValueError('pick = "peak" needs the t values')
        merit = t
    elif rule.pick == "nearest":
        if distance is None:
            raise ValueError('pick = "nearest" needs the distances')
        merit = np.broadcast_to(-distance[features, None], members.shape)
    pairs = hood.pairs(features)
    if rule.pick == "all" or least is not None or np.count_nonzero(members) < _MANY:
        return _kept(members, pairs, rule, merit, least)
    some = _contenders(members, pairs, rule, merit)
    few = np.flatnonzero(some.any(axis=1))
    out = np.zeros_like(members)
    merit = None if merit is None else merit[few]
    out[few] = _kept(some[few], hood.pairs(features[few]), rule, merit)
    return out


def _contenders(
    members: Bools, pairs: tuple[Ints, Ints], rule: Cluster, merit: Floats | None
) -> Bools:
    """Members without most of those whose cluster is not the one that its map's rule picks.

    The clusters of a map lie within clusters of all maps' members together, which are found at
    once; what a map has in one of these is a bound on the sizes and merits of its clusters there.
    Every cluster is kept as a whole or not at all.
    """
    n = len(members)
    _, _, joint = components(np.ones((n, 1), bool), pairs)
    order = np.argsort(joint, kind="stable")
    starts = np.searchsorted(joint[order], np.arange(joint.max() + 1))
    size = np.add.reduceat(members[order].astype(np.float32), starts, axis=0)
    most = size
    if merit is not None:
        most = np.maximum.reduceat(np.where(members, merit, -np.inf)[order], starts, axis=0)
    most = np.where(size >= rule.min_size, most, -np.inf)
    # What the likeliest has is reached at least: where there may be more is looked at as well.
    likeliest = most == most.max(axis=0)
    likeliest &= np.cumsum(likeliest, axis=0) == 1
    some = members & likeliest[joint]
    few = np.flatnonzero(some.any(axis=1))
    position = np.full(n, -1)
    position[few] = np.arange(len(few))
    one, other = (position[end] for end in pairs)
    inside = (one >= 0) & (other >= 0)
    found = some[few]
    kept = _kept(found, (one[inside], other[inside]), rule, None if merit is None else merit[few])
    if merit is None:
        reached = kept.sum(axis=0)
    else:
        reached = np.where(kept, merit[few], -np.inf).max(axis=0, initial=-np.inf)
    worth = (most >= reached) & (most > -np.inf)
    contending: Bools = members & worth[joint]
    return contending


def _kept(
    members: Bools,
    pairs: tuple[Ints, Ints],
    rule: Cluster,
    merit: Floats | None,
    least: Callable[[Ints], Floats] | None = None,
) -> Bools:
    """`keep_clusters`, given the neighbours and what decides: None for the size.

    Parameters
    ----------
    merit : (n_candidates, n_maps) float
        A cluster's is that of its best member.
    """
    if not members.any():
        return members
    candidate, of_map, cluster = components(members, pairs)
    size = np.bincount(cluster)
    n_clusters = len(size)
    owner = np.empty(n_clusters, dtype=np.intp)
    owner[cluster] = of_map
    big = size >= rule.min_size
    if least is not None:
        largest = np.zeros(members.shape[1], dtype=np.intp)
        np.maximum.at(largest, owner, size)
        big &= size >= least(largest)[owner]
    if rule.pick == "all":
        kept = big
    else:
        best = size.astype(float)
        if merit is not None:
            best = np.full(n_clusters, -np.inf)
            np.maximum.at(best, cluster, merit[candidate, of_map])
        first = np.full(n_clusters, len(members))
        np.minimum.at(first, cluster, candidate)
        # Per map: the best merit, then the lowest feature number.
        order = np.lexsort((first, -best, ~big, owner))
        heads = order[np.unique(owner[order], return_index=True)[1]]
        kept = np.zeros(n_clusters, bool)
        kept[heads[big[heads]]] = True
    out = np.zeros_like(members)
    chosen = kept[cluster]
    out[candidate[chosen], of_map[chosen]] = True
    return out


def check_k(k: int, n_features: int) -> None:
    """Refuse to call more features the strongest than are searched.

    Raises
    ------
    InputError
    """
    if k > n_features:
        raise InputError(
            "k is larger than the search region",
            expected=f"at most its {n_features} voxels",
            got=str(k),
            remedy="state a smaller k, or a larger search region",
        )


def strongest(values: Floats, k: int) -> Bools:
    """The k highest of one map, as (n_features,) bool; NaN never, ties to the lowest number.

    Examples
    --------
    >>> strongest(np.array([1.0, np.nan, 3.0, 3.0, 2.0]), 2).tolist()
    [False, False, True, True, False]
    """
    usable = np.flatnonzero(~np.isnan(values))
    out = np.zeros(len(values), bool)
    if len(usable) <= k:
        out[usable] = True
        return out
    limit = np.partition(values[usable], len(usable) - k)[len(usable) - k]
    out[values > limit] = True
    out[np.flatnonzero(values == limit)[: k - np.count_nonzero(out)]] = True
    return out


def highest(values: Floats, inside: Bools) -> int | None:
    """The feature with the highest value in a mask, the first of equals; None without any value.

    Parameters
    ----------
    values : (n_features,) float
        NaN where undefined.
    inside : (n_features,) bool

    Examples
    --------
    >>> values = np.array([4.0, np.nan, 2.0, 3.0, 3.0])
    >>> highest(values, values < 4), highest(values, np.isnan(values))
    (3, None)
    """
    usable = np.flatnonzero(inside & ~np.isnan(values))
    return int(usable[values[usable].argmax()]) if len(usable) else None


def choose(values: Floats, rule: MaskRule, space: Space, n: npt.ArrayLike | None = None) -> Bools:
    """The region of one group map.

    Parameters
    ----------
    values : (n_features,) float
        t map (or mean map, for rules with ``map_kind = "mean"``); NaN where undefined.
    rule : Threshold, Cluster, Strongest or PeakSphere
    space : Space
    n : int or (n_features,) int
        Rows with data, when the threshold is given as p or by what it controls.

    Returns
    -------
    (n_features,) bool

    Examples
    --------
    >>> from sequester.nodes.space import Grid
    >>> grid = Grid((5, 1, 1), np.eye(4))
    >>> t = np.array([4.0, 4.0, 0.0, 9.0, 0.0])
    >>> choose(t, Cluster(height=3.0), grid).tolist()
    [True, True, False, False, False]
    >>> choose(t, Cluster(height=3.0, pick="peak"), grid).tolist()
    [False, False, False, True, False]
    """
    if isinstance(rule, Strongest):
        check_k(rule.k, len(values))
        return strongest(values, rule.number(int(np.count_nonzero(~np.isnan(values)))))
    if isinstance(rule, PeakSphere):
        around = np.zeros(len(values), bool)
        for peak in np.flatnonzero(strongest(values, 1)).tolist():
            around[Spheres(space, rule.radius).around(peak)] = True
        return around
    if not isinstance(rule, _Forming):
        raise TypeError(f"no mask rule: {rule!r}")
    if n is None and rule.height is None:
        raise InputError(
            "a threshold given as p or by what it controls needs the number of rows",
            remedy="give n",
        )
    if isinstance(rule, Cluster) and rule.extent is not None:
        raise InputError(
            "the size of clusters cannot be controlled on one group map",
            expected="the subjects' maps that it was made of, as plans that fold over subjects "
            "have them",
            got=f"extent by {rule.extent.control}",
            remedy="such a plan, or min_size",
        )
    if rule.control is not None:
        rows = np.broadcast_to(np.asarray(n, dtype=float), values.shape)
        critical = critical_of_map(rule.control, values, rows)
    else:
        critical = rule.critical(2 if n is None else n)
    with np.errstate(invalid="ignore"):
        over: Bools = values > critical
    if not isinstance(rule, Cluster):
        return over
    features = np.flatnonzero(over)
    kept = keep_clusters(
        over[features, None],
        features,
        rule,
        Neighbourhood(space, rule.connectivity),
        values[features, None],
        distances(space, rule.near),
    )
    out = np.zeros_like(over)
    out[features] = kept[:, 0]
    return out


def distances(space: Space, point: tuple[float, float, float] | None) -> Floats | None:
    """(n_features,) distances in mm from a point; None when there is no point."""
    if point is None:
        return None
    apart: Floats = np.linalg.norm(space.coordinates() - np.asarray(point), axis=1)
    return apart


def sphere(space: Space, centre: tuple[float, float, float], radius: float) -> Bools:
    """The features whose centres lie within a distance of a point.

    Parameters
    ----------
    space : Space
    centre : (3,) float, mm
    radius : float, mm

    Examples
    --------
    >>> from sequester.nodes.space import Grid
    >>> int(sphere(Grid((5, 5, 5), np.eye(4)), (2, 2, 2), 1.0).sum())
    7
    """
    if not radius > 0:
        raise InputError("radius out of range", expected="> 0 mm", got=str(radius))
    apart = np.linalg.norm(space.coordinates() - np.asarray(centre), axis=1)
    inside: Bools = apart <= radius + _SURFACE_MM
    if not inside.any():
        raise InputError(
            "sphere holds no feature",
            got=f"centre {tuple(centre)} mm, radius {radius} mm",
            remedy="check the coordinate and its unit (mm, in the space of the data)",
        )
    return inside
