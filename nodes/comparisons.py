"""Comparing regions, conditions and groups on held-out values.

That one region is significant and another is not does not mean that they differ: the difference
itself is tested here (Nieuwenhuis et al. 2011, Nat Neurosci 14:1105-1107).

Two sources of p, for two kinds of values
-----------------------------------------
Regions fixed without the values (a-priori, or chosen on other subjects): the ordinary test.
Cross-fitted values (the folds took turns): they are correlated across folds, so the statistic
is compared with that under exchanges of the whole procedure, and the caller gives the values
under each of them (`Prepared.values_under`, every condition under the same exchanges).

The null of such exchanges is that of the exchange, in words in every result: flipped signs mean
that NO condition has an effect, and then the test of a difference is exact. Where the conditions
have equal effects other than zero it is approximate, although every statistic is studentised.
Simulated at the 5 % level (two regions of 40 independent features with equal effects in all of
them, 16 subjects, 2,000 data sets a number; in sd):

    equal effects                                      0     .15    .3     .6
    strongest 3, five folds                          .055   .047  .032   .023   (400 to 600 sets)
    t at p < .01, leaving one out, the 3 strongest
    standing in where nothing passes                 .049   .063  .062   .018
    the same, t at p < .001                          .052   .049  .039   .042
    the same, 20 subjects, 100 features              .040   .049  .069
    WRONG: t at p < .01, folds left empty            .048   .137  .084   .024
    WRONG: t at p < .001, folds left empty           .048   .207  .493   .306

A rule that finds nothing in many folds under flips, but something in the data, makes two equal
effects differ too often: under flips values of 0 hold t back. Comparing flips that find as much
as the data does not mend it (.172 at .3 where p < .01: what they find is steadier). So values
under exchanges of which more than 5 % are those of folds without a region are refused.

Values are (n_people, n_conditions); a condition is a region, a contrast, or one in the other.
Values under exchanges are (n_flips, n_people, n_conditions), people in the same order.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt
from scipy import stats

from .errors import InputError
from .results import estimate_texts, p_text
from .roi import Interval, exchange_p, holm

Floats = npt.NDArray[np.floating]
Bools = npt.NDArray[np.bool_]

SIDES = ("two-sided", "greater", "less")
SIGN_NULL = (
    "no effect in any of the conditions compared: the subjects' maps are independent and jointly "
    "symmetric about zero over the search regions"
)
GROUP_NULL = (
    "the maps do not depend on the group: the subjects' maps are independent and could change "
    "groups, in all of the conditions compared"
)
FLIP_ASSUMPTION = (
    "exact under this null; where the conditions have equal effects other than zero, approximate "
    "(2 to 7 % significant at a nominal 5 % in simulations)"
)
GROUP_ASSUMPTION = (
    "exact under this null; where the groups differ in their spread or in another condition, "
    "approximate"
)
FIXED_ASSUMPTION = (
    "the regions were fixed without these values, the subjects are independent, and {} near-normal"
)
# Below this share of the values, a difference or a deviation is rounding.
_EQUAL = 1e-13
# Of the values under exchanges, so many may be those of folds without a region.
_MOST_EMPTY = 0.05


@dataclass(frozen=True)
class Difference:
    """A difference, or a difference of differences, and its test.

    Parameters
    ----------
    what : str
        Which minus which.
    n, n_left_out : int
        People compared, and those without a value in each condition.
    estimate : float
        In the units of the effect.
    interval : Interval
    statistic : float
        Student's t, between groups Welch's.
    df : float or None
        None when p is by exchanges.
    p : float
    sided : {"two-sided", "greater", "less"}
    p_kind : str
    d : float or None
        The estimate over the standard deviation of the differences, between groups over the
        pooled one; None where there is no deviation.
    null, assumption, sentence : str
    """

    what: str
    n: int
    n_left_out: int
    estimate: float
    interval: Interval
    statistic: float
    df: float | None
    p: float
    sided: str
    p_kind: str
    d: float | None
    null: str
    assumption: str
    sentence: str


@dataclass(frozen=True)
class Interaction:
    """A difference of differences, and the simple effects that it is made of.

    Parameters
    ----------
    interaction : Difference
    simple : tuple of Difference
        Two-sided, each at one level of the other factor.
    simple_p : tuple of float
        Their p-values, adjusted over all of them (Holm 1979).
    """

    interaction: Difference
    simple: tuple[Difference, ...]
    simple_p: tuple[float, ...]


@dataclass(frozen=True)
class Anova:
    """A repeated-measures analysis of variance, one factor within people.

    Parameters
    ----------
    n, n_left_out : int
        People compared, and those without a value in each condition.
    means : tuple of float, one per condition
    estimate : float
        Partial eta squared: the factor's share of the variance within people. Never negative,
        so above 0 on average even where the factor does nothing.
    statistic : float
        F.
    df : (float, float)
        Uncorrected: m - 1 and (n - 1)(m - 1).
    epsilon : float
        Greenhouse & Geisser's: 1 when all differences of two conditions have one variance, at
        the least 1 / (m - 1).
    p : float
        By F with both df times epsilon, or by exchanges.
    p_kind, null, assumption, sentence : str
    """

    n: int
    n_left_out: int
    means: tuple[float, ...]
    estimate: float
    statistic: float
    df: tuple[float, float]
    epsilon: float
    p: float
    p_kind: str
    null: str
    assumption: str
    sentence: str


@dataclass(frozen=True)
class Equivalence:
    """Whether an effect or a difference is smaller than what would be of interest.

    Parameters
    ----------
    what : str
    n, n_left_out : int
    estimate : float
        In the units of the effect.
    smallest : float
        The smallest effect of interest, either way.
    interval : Interval
        Of level 1 - 2 alpha.
    equivalent : bool
        Whether p is at most alpha; then the interval lies within -smallest..smallest.
    statistic : float
        t of the distance to the nearer of the two, positive inside.
    df : float or None
    p : float
        The larger of the two one-sided p-values.
    p_kind, null, assumption, sentence : str
    """

    what: str
    n: int
    n_left_out: int
    estimate: float
    smallest: float
    interval: Interval
    equivalent: bool
    statistic: float
    df: float | None
    p: float
    p_kind: str
    null: str
    assumption: str
    sentence: str


def difference(
    observed: npt.ArrayLike,
    names: Sequence[str],
    flipped: npt.ArrayLike | None = None,
    *,
    exact: bool = False,
    sided: str = "two-sided",
    level: float = 0.95,
) -> Difference:
    """The difference of two regions or conditions, within people.

    This, and not that one of the two is significant and the other is not, shows that they
    differ. The statistic is the studentised mean of the people's differences.

    Parameters
    ----------
    observed : (n_people, 2) float
        NaN where missing: the person is left out.
    names : (str, str)
        The first minus the second is estimated.
    flipped : (n_flips, n_people, 2) float, optional
        The same values under flips of the whole procedure; without it the regions must have
        been fixed without these values, and the test is the paired t.
    exact : bool
        Whether the flips are all there are, the one that changes nothing among them. Either way
        p = (1 + b) / (1 + m), of m flips other than that one b reach the observed statistic
        (Phipson & Smyth 2010).
    sided : {"two-sided", "greater", "less"}
    level : float
        Coverage of the interval. By flips: the estimate +- SE x the value that |t| must exceed
        to be significant, so that it excludes 0 when the two-sided p is at most 1 - level.

    Raises
    ------
    InputError
        With fewer than two people, shapes that do not fit, values that are not finite.

    Examples
    --------
    >>> made = difference([[3.0, 1.0], [2.0, 1.5], [4.0, 2.0], [3.0, 2.5]], ["Arbor", "Brook"])
    >>> made.what, made.estimate, round(made.p, 4)
    ('Arbor minus Brook', 1.25, 0.0632)
    """
    _needs(names, 2, 2)
    data = _Data.of(observed, names, flipped, exact)
    weights = np.array([1.0, -1.0])
    return data.tested(f"{names[0]} minus {names[1]}", weights, sided, level)


def interaction(
    observed: npt.ArrayLike,
    factors: tuple[Sequence[str], Sequence[str]],
    flipped: npt.ArrayLike | None = None,
    *,
    exact: bool = False,
    sided: str = "two-sided",
    level: float = 0.95,
) -> Interaction:
    """Whether a difference depends on another factor: 2 x 2, both within people.

    Parameters
    ----------
    observed : (n_people, 4) float
        The conditions in the order a1 b1, a1 b2, a2 b1, a2 b2; NaN where missing.
    factors : ((a1, a2), (b1, b2))
        The names of the levels, such as two regions and two contrasts. Estimated is
        (a1 b1 - a1 b2) - (a2 b1 - a2 b2).
    flipped : (n_flips, n_people, 4) float, optional
    exact, sided, level
        As for `difference`; the simple effects are two-sided.

    Raises
    ------
    InputError
        As `difference`.

    Examples
    --------
    >>> values = [[3.0, 1.0, 1.0, 1.5], [2.0, 1.0, 2.0, 1.0], [4.0, 1.0, 1.0, 1.0]]
    >>> made = interaction(values, (("Arbor", "Brook"), ("amber", "teal")))
    >>> round(made.interaction.estimate, 6), [effect.what for effect in made.simple][:2]
    (1.833333, ['amber minus teal in Arbor', 'amber minus teal in Brook'])
    """
    (a1, a2), (b1, b2) = factors
    names = [f"{a} {b}" for a in (a1, a2) for b in (b1, b2)]
    data = _Data.of(observed, names, flipped, exact)
    simple = (
        (f"{b1} minus {b2} in {a1}", (1.0, -1.0, 0.0, 0.0)),
        (f"{b1} minus {b2} in {a2}", (0.0, 0.0, 1.0, -1.0)),
        (f"{a1} minus {a2} in {b1}", (1.0, 0.0, -1.0, 0.0)),
        (f"{a1} minus {a2} in {b2}", (0.0, 1.0, 0.0, -1.0)),
    )
    whole = f"{b1} minus {b2} in {a1} minus the same in {a2}"
    return _with_simple(
        data.tested(whole, np.array([1.0, -1.0, -1.0, 1.0]), sided, level),
        tuple(data.tested(what, np.array(w), "two-sided", level) for what, w in simple),
    )


def group_interaction(
    observed: npt.ArrayLike,
    names: Sequence[str],
    first: npt.ArrayLike,
    groups: Sequence[str],
    flipped: npt.ArrayLike | None = None,
    first_under: npt.ArrayLike | None = None,
    *,
    exact: bool = False,
    sided: str = "two-sided",
    level: float = 0.95,
) -> Interaction:
    """Whether the difference of two conditions differs between two groups of people.

    The statistic is Welch's t of the people's differences; simple effects are the difference of
    the conditions in each group and that of the groups in each condition.

    Parameters
    ----------
    observed : (n_people, 2) float
        NaN where missing.
    names : (str, str)
        Of the conditions.
    first : (n_people,) bool
        Who is in the first group.
    groups : (str, str)
        Estimated is (first condition - second) in the first group, minus that in the second.
    flipped : (n_flips, n_people, 2) float, optional
    first_under : (n_flips, n_people) bool, optional
        Who counts as the first group under each exchange, where that is what was exchanged (the
        indicator in the order of each exchange); without it signs were flipped.
    exact, sided, level
        As for `difference`; the simple effects are two-sided. When groups are exchanged, there
        is no test of the conditions within a group, and these simple effects are left out.

    Raises
    ------
    InputError
        As `difference`, and when a group has fewer than two people.

    Examples
    --------
    >>> values = [[3.0, 1.0], [2.0, 1.0], [4.0, 1.0], [1.0, 1.5], [2.0, 1.0], [1.0, 1.0]]
    >>> pond = [True, True, True, False, False, False]
    >>> made = group_interaction(values, ["amber", "teal"], pond, ["pond", "hill"])
    >>> round(made.interaction.estimate, 6), len(made.simple)
    (1.833333, 4)
    """
    _needs(names, 2, 2)
    data = _Data.of(observed, names, flipped, exact, first, first_under)
    assert data.first is not None
    (c1, c2), (g1, g2) = names, groups
    for group, members in ((g1, data.first), (g2, ~data.first)):
        if members.sum() < 2:
            raise InputError(
                "too few people in a group",
                where=group,
                expected="at least 2 with a value in each condition",
                got=str(int(members.sum())),
            )
    both = np.array([1.0, -1.0])
    simple = []
    if first_under is None:
        for group, members in ((g1, data.first), (g2, ~data.first)):
            inside = data.within(members)
            simple.append(inside.tested(f"{c1} minus {c2} in {group}", both, "two-sided", level))
    for name, weights in ((c1, [1.0, 0.0]), (c2, [0.0, 1.0])):
        what = f"{g1} minus {g2} in {name}"
        simple.append(data.tested(what, np.array(weights), "two-sided", level))
    whole = f"{c1} minus {c2} in {g1} minus the same in {g2}"
    return _with_simple(data.tested(whole, both, sided, level), tuple(simple))


def repeated_measures(
    observed: npt.ArrayLike,
    names: Sequence[str],
    flipped: npt.ArrayLike | None = None,
    *,
    exact: bool = False,
) -> Anova:
    """Whether any of several regions or conditions differ, within people.

    Parameters
    ----------
    observed : (n_people, n_conditions) float
        NaN where missing: the person is left out.
    names : sequence of str, at least two
    flipped : (n_flips, n_people, n_conditions) float, optional
    exact
        As for `difference`.

    Raises
    ------
    InputError
        As `difference`.

    References
    ----------
    Greenhouse & Geisser (1959), Psychometrika 24:95-112, for epsilon.

    Examples
    --------
    >>> values = [[3.0, 1.0, 2.0], [2.0, 1.5, 2.0], [4.0, 2.0, 2.5], [3.0, 2.5, 2.0]]
    >>> made = repeated_measures(values, ["Arbor", "Brook", "Cinder"])
    >>> round(made.statistic, 3), made.df, round(made.epsilon, 3), round(made.p, 3)
    (6.405, (2.0, 6.0), 0.826, 0.045)
    """
    _needs(names, 2, None)
    data = _Data.of(observed, names, flipped, exact)
    n, m = data.values.shape
    share, F = _variance_ratio(data.values)
    df = (float(m - 1), float((n - 1) * (m - 1)))
    epsilon = _epsilon(data.values)
    if data.under is None:
        p = float(stats.f.sf(F, epsilon * df[0], epsilon * df[1]))
        shown = f"F({epsilon * df[0]:.2f}, {epsilon * df[1]:.2f}) = {F:.2f}"
        p_kind = f"F, df corrected by Greenhouse-Geisser epsilon {epsilon:.2f}"
        null = "all conditions have one population mean"
        assumption = FIXED_ASSUMPTION.format("the values within a subject are jointly")
    else:
        p = exchange_p(float(F), _variance_ratio(data.under)[1], exact=False)
        shown, p_kind = f"F = {F:.2f}", data.exchanged()
        null, assumption = SIGN_NULL, FLIP_ASSUMPTION
    listed = ", ".join(
        f"{name} {mean:.3g}" for name, mean in zip(names, data.values.mean(axis=0), strict=True)
    )
    return Anova(
        n=n,
        n_left_out=data.left_out,
        means=tuple(data.values.mean(axis=0).tolist()),
        estimate=float(share),
        statistic=float(F),
        df=df,
        epsilon=epsilon,
        p=p,
        p_kind=p_kind,
        null=null,
        assumption=assumption,
        sentence=(
            f"Means: {listed}; {shown}, {p_text(p)} ({p_kind}), {data.counted()}. Null: {null}; "
            "a rejection says that some of the conditions differ, not which."
        ),
    )


def equivalence(
    observed: npt.ArrayLike,
    names: Sequence[str],
    smallest: float,
    flipped: npt.ArrayLike | None = None,
    *,
    exact: bool = False,
    alpha: float = 0.05,
) -> Equivalence:
    """Whether an effect, or a difference of two, is smaller than the smallest of interest.

    Two one-sided tests at alpha (Schuirmann 1987, J Pharmacokinet Biopharm 15:657-680), which
    is whether the 1 - 2 alpha interval lies within -smallest..smallest. By flips, t about the
    true mean is taken to vary as |t| does under flips, which is approximate. That an effect is
    not significant does not show that it is small; that equivalence is not shown does not show
    that the effect is large.

    Parameters
    ----------
    observed : (n_people, 1 or 2) float
        NaN where missing: the person is left out.
    names : one or two str
        Of one: its mean against zero; of two: the first minus the second.
    smallest : float
        In the units of the effect, above 0; to be stated before the values are seen.
    flipped : (n_flips, n_people, 1 or 2) float, optional
    exact
        As for `difference`.
    alpha : float

    Raises
    ------
    InputError
        As `difference`, and when `smallest` is not above 0.

    Examples
    --------
    >>> made = equivalence([[0.1], [-0.2], [0.0], [0.2], [-0.1]], ["Arbor"], 0.5)
    >>> made.equivalent, round(made.p, 4)
    (True, 0.0011)
    """
    if not 0 < smallest < np.inf:
        raise InputError("not an effect of interest", expected="above 0", got=f"{smallest:g}")
    if not 0 < alpha < 0.5:
        raise InputError("not a level", expected="between 0 and 0.5", got=f"{alpha:g}")
    _needs(names, 1, 2)
    data = _Data.of(observed, names, flipped, exact)
    weights = np.array([1.0, -1.0])[: len(names)]
    mean, error, df = data.spread(weights)
    t = float(_ratio(np.asarray(smallest - abs(mean)), error))
    if data.under is None:
        p = float(stats.t.sf(t, df))
        p_kind, shown = "two one-sided t-tests", f"t({df:g}) = {t:.2f}"
        assumption = FIXED_ASSUMPTION.format("the values are")
    else:
        half = exchange_p(abs(t), np.abs(data.t_under(weights)), exact=False) / 2
        p = half if t >= 0 else 1 - half
        p_kind, shown = f"two one-sided tests by {data.exchanged()}", f"t = {t:.2f}"
        assumption = "t about the true mean varies as under the null of no effect (approximate)"
    made = data.interval(weights, 1 - 2 * alpha)
    null = f"the true mean is {smallest:g} or more away from 0"
    what = " minus ".join(names)
    told = estimate_texts(float(mean), made.low, made.high)
    verdict = (
        f"smaller than {smallest:g} either way"
        if p <= alpha
        else f"not shown to be smaller than {smallest:g} (nor to be larger)"
    )
    return Equivalence(
        what=what,
        n=len(data.values),
        n_left_out=data.left_out,
        estimate=float(mean),
        smallest=smallest,
        interval=made,
        equivalent=p <= alpha,
        statistic=t,
        df=float(df) if data.under is None else None,
        p=p,
        p_kind=p_kind,
        null=null,
        assumption=assumption,
        sentence=(
            f"{what}: {told[0]} ({made.kind} {100 * (1 - 2 * alpha):g} % interval "
            f"{told[1]} to {told[2]}), {verdict}; {shown}, {p_text(p)} ({p_kind}), "
            f"{data.counted()}. Null: {null}."
        ),
    )


# -- what all of them share -----------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class _Data:
    """Values of the people who have all of them, as observed and under exchanges.

    Parameters
    ----------
    values : (n_people, n_conditions) float
    under : (n_flips, n_people, n_conditions) float, or None
        Without the exchange that changes nothing, when all there are were made.
    first : (n_people,) bool, or None
    first_under : (n_flips, n_people) bool, or None
    left_out : int
    exact : bool
    """

    values: Floats
    under: Floats | None
    first: Bools | None
    first_under: Bools | None
    left_out: int
    exact: bool

    @classmethod
    def of(
        cls,
        observed: npt.ArrayLike,
        names: Sequence[str],
        flipped: npt.ArrayLike | None,
        exact: bool,
        first: npt.ArrayLike | None = None,
        first_under: npt.ArrayLike | None = None,
    ) -> _Data:
        """Checked, without the people who lack a value.

        Raises
        ------
        InputError
        """
        if len(set(names)) < len(names):
            raise InputError("conditions of one name", got=", ".join(names))
        values = np.asarray(observed, dtype=float)
        n = len(values) if values.ndim else 0
        _fit("the observed values", values, (n, len(names)))
        under = None if flipped is None else np.asarray(flipped, dtype=float)
        n_flips = 0 if under is None else max(1, len(under))
        if under is not None:
            _fit("the values under exchanges", under, (n_flips, n, len(names)))
        members = None if first is None else np.asarray(first, dtype=bool)
        if members is not None:
            _fit("who is in the first group", members, (n,))
        others = None if first_under is None else np.asarray(first_under, dtype=bool)
        kept = ~np.isnan(values).any(axis=1)
        if members is not None and others is not None:
            _fit("who is in the first group under exchanges", others, (n_flips, n))
            if not kept.all() or (others.sum(axis=1) != members.sum()).any():
                raise InputError(
                    "groups that an exchange does not keep",
                    expected="every person's values, and as many in each group as observed",
                    got=f"{int((~kept).sum())} people without a value",
                    remedy="leave people without a value out of the procedure itself",
                )
        made = cls(values, under, members, others, int((~kept).sum()), exact).only(kept)
        if len(made.values) < 2:
            raise InputError(
                "too few people to compare",
                expected="at least 2 with a value in each condition",
                got=str(len(made.values)),
            )
        for part in (made.values, made.under):
            if part is not None and not np.isfinite(part).all():
                raise InputError(
                    "values that are not finite",
                    where="the observed values" if part is made.values else "under exchanges",
                    got=f"{int((~np.isfinite(part)).sum())} of {part.size}",
                )
        if made.under is not None:
            _check_found(made.under)
        return made._without_identity() if exact else made

    def _without_identity(self) -> _Data:
        """All exchanges but the one that changes nothing: that is the observed data."""
        if self.under is None:
            raise InputError("exact without exchanges", remedy="give the values under all of them")
        near = 1e-9 * np.abs(self.values).max()
        same = (np.abs(self.under - self.values) <= near).all(axis=(1, 2))
        if self.first_under is not None:
            same &= (self.first_under == self.first).all(axis=1)
        if not same.any():
            raise InputError(
                "all exchanges, without the one that changes nothing",
                remedy="give the values under every exchange, or exact=False for random ones",
            )
        others = np.arange(len(same)) != same.argmax()
        first_under = None if self.first_under is None else self.first_under[others]
        return replace(self, under=self.under[others], first_under=first_under)

    def only(self, people: Bools) -> _Data:
        """Some of the people."""
        return _Data(
            self.values[people],
            None if self.under is None else self.under[:, people],
            None if self.first is None else self.first[people],
            None if self.first_under is None else self.first_under[:, people],
            self.left_out,
            self.exact,
        )

    def within(self, people: Bools) -> _Data:
        """Some of the people, compared with nobody else."""
        return replace(self.only(people), first=None, first_under=None)

    def tested(self, what: str, weights: Floats, sided: str, level: float) -> Difference:
        """The weighted sum of the conditions, its mean or its difference of groups tested."""
        if sided not in SIDES:
            raise InputError("unknown side", expected=f"one of {', '.join(SIDES)}", got=repr(sided))
        if not 0 < level < 1:
            raise InputError("not a coverage", expected="between 0 and 1", got=f"{level:g}")
        mean, error, df = self.spread(weights)
        t = _ratio(mean, error)
        turn = {"two-sided": np.abs, "greater": np.positive, "less": np.negative}[sided]
        between = "within each group the differences are" if self.groups else "the differences are"
        if self.under is None:
            p = float(stats.t.sf(turn(t), df)) * (2 if sided == "two-sided" else 1)
            p_kind = "Welch's t" if self.groups else "paired t"
            shown = f"t({df:.4g}) = {t:.2f}"
            null = f"the population mean of {what} is zero"
            assumption = FIXED_ASSUMPTION.format(between)
        else:
            p = exchange_p(float(turn(t)), turn(self.t_under(weights)), exact=False)
            p_kind, shown = self.exchanged(), f"t = {t:.2f}"
            null, assumption = (
                (SIGN_NULL, FLIP_ASSUMPTION)
                if self.first_under is None
                else (GROUP_NULL, GROUP_ASSUMPTION)
            )
        made = self.interval(weights, level)
        told = estimate_texts(float(mean), made.low, made.high)
        return Difference(
            what=what,
            n=len(self.values),
            n_left_out=self.left_out,
            estimate=float(mean),
            interval=made,
            statistic=float(t),
            df=float(df) if self.under is None else None,
            p=p,
            sided=sided,
            p_kind=p_kind,
            d=_standardised(self.values, weights, self.first),
            null=null,
            assumption=assumption,
            sentence=(
                f"{what}: {told[0]} ({made.kind} {100 * level:g} % interval {told[1]} to "
                f"{told[2]}), {shown}, {p_text(p)} ({p_kind}, {sided}), {self.counted()}. "
                f"Null: {null}."
            ),
        )

    @property
    def groups(self) -> bool:
        """Whether people of two groups are compared."""
        return self.first is not None

    def spread(self, weights: Floats) -> tuple[Floats, Floats, Floats]:
        """Mean (or difference of groups), standard error and df of the observed values."""
        return _mean_and_error(self.values, weights, self.first)

    def t_under(self, weights: Floats) -> Floats:
        """(n_flips,) the statistic under each exchange."""
        assert self.under is not None
        first = self.first if self.first_under is None else self.first_under
        return _ratio(*_mean_and_error(self.under, weights, first)[:2])

    def interval(self, weights: Floats, level: float) -> Interval:
        """The estimate +- SE x what |t| must exceed for a two-sided p of at most 1 - level."""
        mean, error, df = (float(part) for part in self.spread(weights))
        if self.under is None:
            critical = float(stats.t.ppf((1 + level) / 2, df))
            kind = "approximate" if self.groups else "exact"
            whose = "Welch's" if self.groups else "Student's"
            method = f"{whose} t interval (near-normal values)"
        else:
            critical = _critical(np.abs(self.t_under(weights)), 1 - level)
            kind = "approximate"
            method = (
                f"standard error x the {100 * level:g} % quantile of |t| over {self.exchanged()}"
            )
        half = critical * error if error or np.isfinite(critical) else np.inf
        return Interval(mean - half, mean + half, kind, method)

    def exchanged(self) -> str:
        """How p was made, of values under exchanges."""
        assert self.under is not None
        what = "sign flip" if self.first_under is None else "exchange of groups"
        n = len(self.under)
        count = f"all {n + 1}" if self.exact else f"{n} random"
        return f"whole-procedure {what}, {count} exchanges"

    def counted(self) -> str:
        """How many people, and how many are left out."""
        n = f"n = {len(self.values)}"
        if self.first is not None:
            n += f" ({int(self.first.sum())} and {int((~self.first).sum())})"
        return f"{n}, {self.left_out} without all values left out" if self.left_out else n


def _check_found(under: Floats) -> None:
    """Refuse exchanges under which many folds found nothing; their values are exactly 0."""
    nothing = under == 0
    # A value that is 0 under every exchange is one of a region that was fixed.
    share = float((nothing & ~nothing.all(axis=0)).mean())
    if share > _MOST_EMPTY:
        raise InputError(
            "regions that folds often do not find cannot be compared",
            where="the values under exchanges",
            expected=f"values of 0 (a fold without a region) for {_MOST_EMPTY:.0%} at the most",
            got=f"{share:.0%}",
            remedy='choose by a rule that always finds something: on_empty = "strongest" with a k, '
            "or the strongest voxels, or a sphere around the peak",
        )


def _needs(names: Sequence[str], least: int, most: int | None) -> None:
    if len(names) < least or (most is not None and len(names) > most):
        wanted = (
            f"{least} or more" if most is None else " or ".join(sorted({str(least), str(most)}))
        )
        raise InputError(
            "another number of conditions", expected=wanted, got=", ".join(names) or "none"
        )


def _fit(what: str, array: npt.NDArray[np.generic], shape: tuple[int, ...]) -> None:
    if array.shape != shape:
        raise InputError(
            f"{what} do not fit" if what.endswith("s") else f"{what} does not fit",
            expected=f"shape {shape}",
            got=f"shape {array.shape}",
        )


def _with_simple(whole: Difference, simple: tuple[Difference, ...]) -> Interaction:
    return Interaction(whole, simple, tuple(holm([effect.p for effect in simple])))


def _mean_and_error(
    values: Floats, weights: Floats, first: Bools | None = None
) -> tuple[Floats, Floats, Floats]:
    """Mean over people of the weighted sum of conditions, its standard error and its df.

    Parameters
    ----------
    values : (..., n_people, n_conditions) float
    weights : (n_conditions,) float
    first : (..., n_people) bool, optional
        Then the mean of these people minus that of the others, and Welch's error and df.

    Returns
    -------
    mean, error, df : (...,) float; what is rounding is exactly 0
    """
    weighted = values * weights
    sums = weighted.sum(axis=-1)
    size = _EQUAL * np.abs(weighted).max(axis=(-1, -2), initial=0.0)
    # Who is on either side, and with which sign their mean enters.
    sides = [(1, np.ones(sums.shape[-1], bool))] if first is None else [(1, first), (-1, ~first)]
    mean, total, below = (np.zeros(sums.shape[:-1]) for _ in range(3))
    for sign, inside in sides:
        n = inside.sum(axis=-1)
        own = np.where(inside, sums, 0.0).sum(axis=-1) / n
        rest = np.where(inside, sums - own[..., None], 0.0)
        deviation = np.sqrt(np.square(rest).sum(axis=-1) / (n - 1))
        square = np.square(np.where(deviation <= size, 0.0, deviation)) / n
        mean, total = mean + sign * own, total + square
        below = below + np.square(square) / (n - 1)
    df = np.full(sums.shape[:-1], float(sums.shape[-1] - len(sides)))
    if first is not None:
        np.divide(np.square(total), below, out=df, where=below > 0)
    return np.where(np.abs(mean) <= size, 0.0, mean), np.sqrt(total), df


def _ratio(mean: Floats, error: Floats) -> Floats:
    """Mean over error; 0 where the mean is 0, infinite where the error alone is."""
    far = np.where(mean == 0, 0.0, np.copysign(np.inf, mean))
    return np.where(error > 0, mean / np.where(error > 0, error, 1), far)


def _standardised(values: Floats, weights: Floats, first: Bools | None) -> float | None:
    """The mean over the deviation of the people, between groups over the pooled deviation."""
    groups = [np.ones(len(values), bool)] if first is None else [first, ~first]
    parts = [_mean_and_error(values[inside], weights) for inside in groups]
    counts = [int(inside.sum()) for inside in groups]
    squares = sum(
        (n - 1) * n * float(error) ** 2 for (_, error, _), n in zip(parts, counts, strict=True)
    )
    if not squares:
        return None
    mean = float(_mean_and_error(values, weights, first)[0])
    return mean / float(np.sqrt(squares / (len(values) - len(groups))))


def _critical(others: Floats, alpha: float) -> float:
    """What a statistic must exceed for (1 + b) / (1 + m) <= alpha; infinite if nothing can."""
    allowed = int(np.floor(alpha * (1 + len(others)) + 1e-9)) - 1
    return float(np.sort(others)[::-1][allowed]) if 0 <= allowed < len(others) else np.inf


def _variance_ratio(values: Floats) -> tuple[Floats, Floats]:
    """Partial eta squared and F of the conditions, (...,), of (..., n_people, n_conditions)."""
    n, m = values.shape[-2:]
    means = values.mean(axis=-2, keepdims=True)
    effect = means - means.mean(axis=-1, keepdims=True)
    rest = values - values.mean(axis=-1, keepdims=True) - effect
    flat = n * m * np.square(_EQUAL * np.abs(values).max(axis=(-1, -2)))
    between, within = (
        np.where(squares <= flat, 0.0, squares)
        for squares in (
            n * np.square(effect).sum(axis=(-1, -2)),
            np.square(rest).sum(axis=(-1, -2)),
        )
    )
    total = between + within
    share = between / np.where(total > 0, total, 1)
    return share, _ratio(between / (m - 1), within / ((n - 1) * (m - 1)))


def _epsilon(values: Floats) -> float:
    """Greenhouse & Geisser's epsilon, from the covariance centred in both directions.

    tr(C)^2 / ((m - 1) tr(C C)); its least value, 1 / (m - 1), when the residuals are all zero.
    """
    m = values.shape[1]
    rest = values - values.mean(axis=0)
    rest = rest - rest.mean(axis=1, keepdims=True)
    size = float(np.abs(rest).max())
    if size <= _EQUAL * float(np.abs(values).max()):
        return float(1 / (m - 1))
    rest /= size
    centred = np.einsum("ni,nj->ij", rest, rest)
    return float(np.trace(centred) ** 2 / ((m - 1) * np.square(centred).sum()))
