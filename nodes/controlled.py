"""What a threshold controls over a whole map, as a plan states it; and the two read off p-values.

`Controlled` stands in a rule where a height or a size would stand. Bonferroni and Benjamini &
Hochberg need no more than t and degrees of freedom, so one map is enough for them; the others
need the maps that the group map was made of (`foldcontrol`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import special

from .errors import InputError

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]

BONFERRONI, BENJAMINI_HOCHBERG = "bonferroni", "benjamini-hochberg"
MAX_T, MAX_CLUSTER, RANDOM_FIELD = "max-t", "max-cluster", "random-field"
HEIGHT_CONTROLS = (BONFERRONI, BENJAMINI_HOCHBERG, MAX_T, RANDOM_FIELD)
EXTENT_CONTROLS = (MAX_CLUSTER, RANDOM_FIELD)
# Read off one map of t: also those that a model with groups or a score can have.
BY_P = (BONFERRONI, BENJAMINI_HOCHBERG)


@dataclass(frozen=True)
class Controlled:
    """A threshold set by what it controls, over the search region on each side that chooses.

    Parameters
    ----------
    control : str
        Of heights: "bonferroni", "benjamini-hochberg", "max-t" or "random-field"; of cluster
        sizes: "max-cluster" or "random-field". `familywise.CONTROLS` says what each rests on.
    level : float
        Of the error: any false voxel or cluster, or the share of false voxels; one-sided.
    n_flips, seed : int
        Of the two by sign flips: random ones, when all patterns of the people's signs are more
        than `n_flips` + 1.

    Examples
    --------
    >>> Controlled("max-t").error
    'chance of any false voxel at most 0.05'
    """

    control: str
    level: float = 0.05
    n_flips: int = 999
    seed: int = 0

    def __post_init__(self) -> None:
        known = tuple(dict.fromkeys(HEIGHT_CONTROLS + EXTENT_CONTROLS))
        if self.control not in known:
            raise InputError(
                "unknown control", expected=f"one of {', '.join(known)}", got=repr(self.control)
            )
        if not 0 < self.level < 0.5:
            raise InputError("level out of range", expected="0 < level < 0.5", got=str(self.level))
        if self.n_flips < 1:
            raise InputError("too few flips", expected="at least 1", got=str(self.n_flips))

    @property
    def error(self) -> str:
        """What is held at the level, of a threshold on height."""
        held = "chance of any false voxel"
        if self.control == BENJAMINI_HOCHBERG:
            held = "expected share of false voxels"
        return f"{held} at most {self.level:g}"

    def height(self, tail: str, t: str = "t") -> str:
        """A threshold on t, in words; `t` may say what it is over."""
        by = {
            BONFERRONI: "Bonferroni's",
            BENJAMINI_HOCHBERG: "Benjamini and Hochberg's",
            MAX_T: f"the largest-t (up to {self.n_flips} sign flips)",
            RANDOM_FIELD: "the random-field",
        }[self.control]
        side = f"{t} below minus" if tail == "negative" else f"{t} above"
        return f"{side} {by} threshold, {self.error}"

    def extent(self) -> str:
        """A threshold on the size of clusters, in words."""
        by = {
            MAX_CLUSTER: f"the largest clusters of up to {self.n_flips} sign flips",
            RANDOM_FIELD: "random-field theory",
        }[self.control]
        return f"of a size by {by}, chance of any false cluster at most {self.level:g}"


def critical_t(p: Floats, rows: Floats) -> Floats:
    """The t that goes with a one-sided p, of each map.

    Parameters
    ----------
    p : (n_maps,) float
    rows : (n_maps, n_features or 1) float
        One more than the degrees of freedom, whole numbers.

    Returns
    -------
    the shape of `rows`, float64; infinite below two rows, and where p is 0

    Examples
    --------
    >>> critical_t(np.array([0.01, 0.0]), np.array([[20.0, 1.0], [20.0, 20.0]])).round(4).tolist()
    [[2.5395, inf], [inf, inf]]
    """
    if rows.shape[1] == 1:
        some = (p > 0) & (rows[:, 0] >= 2)
        made = np.full(rows.shape, np.inf)
        made[some, 0] = -special.stdtrit(rows[some, 0] - 1, p[some])
        return made
    least = int(rows.min()) if rows.size else 0
    # Few distinct counts occur, and the quantile is slow.
    counts = np.arange(least, int(rows.max()) + 1 if rows.size else 1)
    table = np.full((len(p), len(counts)), np.inf)
    enough = counts >= 2
    table[np.ix_(p > 0, enough)] = -special.stdtrit(counts[enough] - 1.0, p[p > 0, None])
    found: Floats = np.take_along_axis(table, rows.astype(np.intp) - least, axis=1)
    return found


def step_up(t: Floats, rows: Floats, n_tests: Ints, q: float, most: Ints | None = None) -> Floats:
    """The p that each map's features must be below for a false discovery rate of q.

    Parameters
    ----------
    t : (n_maps, n_features) float
        Of all features with p < q (q most / n_tests); of others it does not matter, NaN and -inf
        included.
    rows : (n_maps, n_features or 1) float
        One more than the degrees of freedom.
    n_tests : (n_maps,) int
        Features tested.
    q : float
    most : (n_maps,) int, optional
        What the number found is known not to be above; else the features tested.

    Returns
    -------
    (n_maps,) float64: q k / m for the k found among m; 0 when none is.

    References
    ----------
    Benjamini & Hochberg 1995, JRSS-B 57:289-300.

    Examples
    --------
    >>> t = np.array([[4.0, 3.0, 0.1]])
    >>> step_up(t, np.full((1, 1), 20.0), np.array([3]), 0.05).round(4).tolist()
    [0.0333]
    """
    n_found = n_tests if most is None else most
    while True:
        # The largest k with k features below q k / m: from above, no k is passed over.
        p: Floats = q * n_found / np.maximum(n_tests, 1)
        below = (t > critical_t(p, rows)).sum(axis=1)
        if (below >= n_found).all():
            return p
        n_found = np.minimum(below, n_found)


def critical_of_map(control: Controlled, t: Floats, rows: Floats) -> Floats:
    """The t that features of one group map must exceed.

    Parameters
    ----------
    control : Controlled
    t : (n_features,) float
        NaN for features that are not tested.
    rows : (n_features,) float
        One more than the degrees of freedom.

    Returns
    -------
    (n_features,) float64

    Raises
    ------
    InputError
        For a control that the group map alone cannot give.

    Examples
    --------
    >>> t, rows = np.array([4.0, 3.0, 0.1, np.nan]), np.full(4, 20.0)
    >>> critical_of_map(Controlled("bonferroni"), t, rows)[:3].round(4).tolist()
    [2.2944, 2.2944, 2.2944]
    """
    if control.control not in BY_P:
        raise InputError(
            f"{control.control} cannot be read off one group map",
            expected="the subjects' maps that it was made of, as plans that fold over subjects "
            "have them",
            remedy=f"such a plan, or control = {BONFERRONI!r} or {BENJAMINI_HOCHBERG!r}",
        )
    n_tests = np.array([np.count_nonzero(~np.isnan(t))])
    if control.control == BONFERRONI:
        p = control.level / np.maximum(n_tests, 1)
    else:
        p = step_up(t[None], rows[None], n_tests, control.level)
    critical: Floats = critical_t(p, rows[None])[0]
    return critical
