"""What may be said of held-out values: estimate, interval and the test that matches, or why none.

The cross-fitted plans have the whole-procedure exchange test. Where the procedure cannot be
repeated (group maps made by other software) there is an estimate and no p.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import stats

from .errors import InputError
from .exchange import FlipTest
from .models import Groups, Model, compared
from .procedure import Outcome, Prepared, Procedure
from .results import RoiResult, corrected, estimate_texts, known, least, p_text
from .roi import Interval, fold_interval, jackknife_interval, per_person, small_sample_factor

Floats = npt.NDArray[np.floating]

INTERVALS = ("flips", "jackknife", "folds")
_JACKKNIFE = 4  # the fewest people

FLIP_NULL = (
    "the subjects' maps are independent and jointly symmetric about zero over the search region"
)


def cross_fitted_result(
    ready: Prepared,
    names: tuple[str, str, str],
    n_flips: int,
    seed: int,
    interval: str = "flips",
    progress: Callable[[int, int], None] | None = None,
) -> tuple[RoiResult, Outcome, FlipTest]:
    """Everything the cross-fitted plans may say: estimate, interval, whole-procedure p.

    Parameters
    ----------
    ready : Prepared
        The procedure on the study's effects.
    names : (roi, plan, search region)
    n_flips, seed : int
    interval : {"flips", "jackknife", "folds"}
        "flips" takes the quantile of |t| over the exchanges in which a fold found a region, and
        at least that of Student's t; "folds" is for one sample only. There is none, and no
        standardised effect, where folds found nothing and count as 0: with them the estimate is
        not the size of an effect (such intervals held the mean effect over the masks that were
        found in .2 to .9 of data sets instead of .95). p holds all the same.
    progress : callable, optional

    Raises
    ------
    InputError
        When somebody has no data in their fold's mask; as `check_jackknife`; as
        `Procedure.check_other_maps`.
    """
    if interval not in INTERVALS:
        raise InputError(
            "unknown interval", expected=f"one of {', '.join(INTERVALS)}", got=repr(interval)
        )
    procedure = ready.procedure
    if interval == "folds" and procedure.model is not None:
        raise InputError(
            "no interval by folds for groups and scores",
            expected='interval = "flips" or "jackknife"',
            got=repr(interval),
        )
    if interval == "jackknife":
        check_jackknife(procedure, ready.labels)
    outcome = ready.outcome()
    sizes = _check_data(ready, outcome)
    test = ready.flip_test(n_flips, seed, progress)
    people = ready.per_person(outcome.values)
    made: Interval | None
    if outcome.empty:
        made = None
    elif interval == "flips":
        # Never narrower than the ordinary interval: where exchanges find little, few are left.
        least_t = student(len(people) - 1 - (procedure.model is not None))
        made = ready.exchange_interval(people, max(test.abs_t_quantile, least_t))
    elif interval == "folds":
        made = fold_interval(people, len(ready.folds))
    else:
        made = jackknife_interval(outcome.estimate, ready.without_each_person())
    roi, plan, search = names
    words = _words(procedure.model, ready.people)
    kind = (
        f"whole-procedure {words.exchange}, all {test.n_flips} {words.many}"
        if test.exact
        else f"whole-procedure {words.exchange}, {test.n_flips} random {words.many}"
    )
    sided = "greater" if procedure.tail == "positive" else "less"
    where = f"in the search region '{search}'"
    folds = len(ready.folds)
    notes = [
        f" In {len(names)} of {folds} folds the rule found nothing; there {what}."
        for names, what in (
            (outcome.replaced, "the strongest voxels stood in"),
            (
                outcome.empty,
                "the value counts as 0, so the estimate is not the size of an effect and has no "
                'interval (for both, state on_empty = "strongest" beforehand)',
            ),
        )
        if names
    ]
    if made is None:
        n = len(outcome.empty)
        found = "no fold" if n == folds else f"only {folds - n} of {folds} folds"
        told = f"{outcome.estimate:.3g} ({found} found a region: no interval), "
    else:
        value, low, high = estimate_texts(outcome.estimate, made.low, made.high)
        told = f"{value} ({made.kind} 95 % interval {low} to {high}), "
    sentence = (
        f"{roi}: {procedure.describe()} {where}, chosen in {folds} folds "
        f"({plan}); {words.estimate} {told}{p_text(test.p)} "
        f"({kind}, one-sided: {sided}). Null: {words.null} '{search}'; a rejection says that there "
        f"is {words.found} somewhere {where}, not at any one voxel.{''.join(notes)}"
    )
    dz, g = (None, None) if outcome.empty else _effect_sizes(ready, people, outcome)
    influence = ready.without_each_value(people) - outcome.estimate
    result = RoiResult(
        roi=roi,
        plan=plan,
        rule=procedure.describe(),
        search=search,
        n_subjects=len(ready.people),
        estimate=outcome.estimate,
        target=f"{words.target}, 0 in those that found nothing: not the size of an effect"
        if outcome.empty
        else words.target,
        biased=False,
        interval=made,
        t=test.t,
        p=test.p,
        p_kind=kind,
        sided=sided,
        null=words.null,
        dz=dz,
        n_flips=test.n_flips,
        p_error=None if test.exact else float(np.sqrt(test.p * (1 - test.p) / test.n_flips)),
        n_folds=folds,
        n_empty=len(outcome.empty),
        empty=outcome.empty,
        replaced=outcome.replaced,
        dice=known(outcome.dice),
        noise_dice=known(test.noise_dice),
        mask_sizes=outcome.sizes,
        coverage=least(outcome.coverage, sizes),
        g=g,
        influence=tuple(zip(ready.people, influence.tolist(), strict=True)),
        most_influential=ready.people[int(np.argmax(np.abs(influence)))],
        n_cells=words.n_cells,
        sentence=sentence,
    )
    return result, outcome, test


def check_jackknife(procedure: Procedure, labels: Sequence[str]) -> None:
    """Refuse a jackknife whose folds, or model, cannot do without one of the people.

    Parameters
    ----------
    procedure : Procedure
    labels : sequence of str
        Who each row belongs to.

    Raises
    ------
    InputError
    """
    people = sorted(set(labels))
    if len(people) < _JACKKNIFE:
        raise InputError(
            "too few subjects for the jackknife",
            expected=f"at least {_JACKKNIFE}",
            got=f"{len(people)} ({', '.join(people)})",
            remedy='use interval = "flips"',
        )
    for person in people:
        rest = sorted(label for label in labels if label != person)
        try:
            folds = procedure.scheme.folds(rest)
            compared(procedure.model, rest, folds)
            procedure.check_sides(folds)
        except InputError as error:
            said = error.fields
            raise InputError(
                f"the jackknife cannot do without {person}: {said['what']}",
                where=said["where"],
                expected=said["expected"],
                got=said["got"],
                remedy='use interval = "flips"',
            ) from error


def _check_data(ready: Prepared, outcome: Outcome) -> list[int]:
    """The size of each row's mask; refuses rows that have no data in theirs."""
    sizes = [0] * len(ready.labels)
    for fold, size in zip(ready.folds, outcome.sizes, strict=True):
        for row in fold.held_out:
            sizes[row] = size
    none = [
        label
        for label, size, share in zip(ready.labels, sizes, outcome.coverage, strict=True)
        if size and not share
    ]
    if none:
        raise InputError(
            "no data in the mask of their fold",
            where=", ".join(none[:5]),
            expected="some data in every mask that is not empty",
            got=f"none in {len(none)} of {len(sizes)}",
            remedy="leave these maps out, or search where all have data",
        )
    return sizes


def student(df: int, level: float = 0.95) -> float:
    """The two-sided quantile of Student's t."""
    return float(stats.t.ppf((1 + level) / 2, df))


@dataclass(frozen=True)
class _Words:
    """How a model is spoken of."""

    exchange: str
    many: str
    estimate: str
    target: str
    null: str
    found: str
    n_cells: tuple[tuple[str, int], ...] = ()


def _words(model: Model | None, people: Sequence[str]) -> _Words:
    """What is exchanged, estimated and rejected, for one sample, two groups or a score."""
    over = "over the fold masks actually used"
    if model is None:
        return _Words(
            "sign flip",
            "flips",
            "held-out mean",
            f"mean true effect {over}",
            FLIP_NULL,
            "a replicable effect",
        )
    null, exchanged, adjusted = "", "", ""
    if model.covariates:
        given = ", ".join(name for name, _ in model.covariates)
        null = (
            f"given {given} (linear effects, whose residuals are exchangeable: Freedman & Lane "
            "1983), "
        )
        exchanged, adjusted = f" of residuals given {given}", f", adjusted for {given}"
    if isinstance(model, Groups):
        cells = tuple(zip((model.first, model.second), model.counts(people), strict=True))
        first, second = (f"{group} (n = {n})" for group, n in cells)
        return _Words(
            f"exchange{exchanged or ' of group labels'}",
            "exchanges",
            f"held-out mean of {first} minus that of {second}{adjusted}",
            f"{model.first} minus {model.second}: difference of the groups' mean true effects "
            f"{over}{adjusted}",
            f"{null}the maps are exchangeable over the subjects with respect to the group: those "
            f"of {model.first} and {model.second} have one joint distribution over the search "
            "region",
            f"a difference between {model.first} and {model.second} (of their means, if their "
            "maps differ in nothing else)",
            cells,
        )
    return _Words(
        f"exchange{exchanged or ' of scores'}",
        "exchanges",
        f"correlation of held-out values with {model.name}{adjusted}, r =",
        f"correlation of {model.name} with the true effect {over}{adjusted}",
        f"{null}the maps are exchangeable over the subjects with respect to {model.name}: the "
        "score is independent of the maps over the search region",
        f"an effect that goes with {model.name}",
    )


def _effect_sizes(
    ready: Prepared, people: Floats, outcome: Outcome
) -> tuple[float | None, float | None]:
    """dz and g of one sample, g of two groups, none of a correlation, which is one itself."""
    model = ready.procedure.model
    if model is None:
        if not (np.isfinite(outcome.t) and outcome.t):
            return None, None
        sign = 1 if ready.procedure.tail == "positive" else -1
        dz = sign * outcome.t / float(np.sqrt(len(people)))
        return dz, corrected(dz, len(people) - 1)
    if not isinstance(model, Groups):
        return None, None
    group = dict(model.of)
    first = np.array([group[person] == model.first for person in ready.people])
    df = len(people) - 2
    pooled = sum(
        float(np.square(part - part.mean()).sum()) for part in (people[first], people[~first])
    )
    if not pooled:
        return None, None
    return None, outcome.estimate / float(np.sqrt(pooled / df)) * small_sample_factor(df)


def held_out_result(
    values: Sequence[float],
    labels: Sequence[str],
    names: tuple[str, str, str],
    n_folds: int,
    sizes: Sequence[int],
    coverage: Sequence[float],
    rule: str,
) -> RoiResult:
    """Held-out values whose group maps came from outside: their mean, and no test of it.

    Parameters
    ----------
    values : sequence of float, one per row
        Each read in a mask chosen without it.
    labels : sequence of str, one per row
        A label's rows are averaged first.
    names : (roi, plan, search region)
    n_folds : int
        With at most half as many folds as subjects the mean has an approximate interval
        (Nadeau & Bengio 2003), otherwise none; and none where a mask is empty.
    sizes, coverage : sequence, one per row
    rule : str
        The mask rule in words.

    Examples
    --------
    >>> names = ("Arbor", "2 folds", "brain")
    >>> made = held_out_result([1.0, 2.0, 4.0, 5.0], list("abcd"), names, 2, [9] * 4, [1] * 4, "x")
    >>> made.estimate, made.p, made.interval.kind
    (3.0, None, 'approximate')
    """
    people = np.asarray(per_person(values, labels))
    mean = float(people.mean())
    many = 2 * n_folds > len(people)
    made = None if many or not all(sizes) else fold_interval(people, n_folds)
    if made is None:
        told = f"{mean:.3g}{'; no interval, for which the folds are too many' if many else ''}"
    else:
        text, low, high = estimate_texts(mean, made.low, made.high)
        told = f"{text} ({made.kind} 95 % interval {low} to {high})"
    return _untested(
        names,
        n_folds,
        sizes,
        coverage,
        rule,
        f"held-out mean of {len(people)} subjects {told}",
        "the group maps were made outside the procedure (by other software, or a model of their "
        "own), so it cannot be repeated under flips; and held-out values are correlated across "
        "folds, so no test is made of them",
        n_subjects=len(people),
        estimate=mean,
        target="mean true effect over the fold masks actually used",
        interval=made,
    )


def held_out_difference(
    values: Sequence[float],
    labels: Sequence[str],
    groups: Sequence[str],
    compared: tuple[str, str],
    names: tuple[str, str, str],
    n_folds: int,
    sizes: Sequence[int],
    coverage: Sequence[float],
    rule: str,
) -> RoiResult:
    """Held-out values of two groups: the difference of their means, and no test of it.

    Parameters
    ----------
    values : sequence of float, one per row
        Each read in a mask chosen without it.
    labels, groups : sequence of str, one per row
        The subject, and the group that all rows of the subject belong to.
    compared : (first, second)
        The difference is the first group's mean minus the second's; other groups do not count.
    names : (roi, plan, search region)
    n_folds : int
    sizes, coverage : sequence, one per row
    rule : str
        The mask rule in words.

    Raises
    ------
    InputError
        When a subject is in two groups, or nobody is in one of those compared.

    Examples
    --------
    >>> names, groups = ("Arbor", "2 folds", "brain"), ["hill", "hill", "pond", "pond"]
    >>> made = held_out_difference(
    ...     [1.0, 2.0, 4.0, 5.0], list("abcd"), groups, ("pond", "hill"), names, 2, [9], [1], "x"
    ... )
    >>> made.estimate, made.p, made.interval
    (3.0, None, None)
    """
    of_label: dict[str, str] = {}
    for label, group in zip(labels, groups, strict=True):
        if of_label.setdefault(label, group) != group:
            raise InputError(
                "a subject in two groups", where=label, got=f"{of_label[label]} and {group}"
            )
    people = dict(zip(sorted(of_label), per_person(values, labels), strict=True))
    means, counts = [], []
    for group in compared:
        own = [people[label] for label in people if of_label[label] == group]
        if not own:
            raise InputError(
                "a group without subjects",
                where=group,
                expected=f"one of {', '.join(sorted(set(groups)))}",
            )
        means.append(float(np.mean(own)))
        counts.append(len(own))
    difference = means[0] - means[1]
    first, second = (f"{group} (n = {n})" for group, n in zip(compared, counts, strict=True))
    return _untested(
        names,
        n_folds,
        sizes,
        coverage,
        rule,
        f"held-out mean of {first} minus that of {second} {difference:.3g}",
        "held-out values are correlated across folds; the test that matches exchanges the group "
        "labels of the whole procedure, and is not made here",
        n_subjects=sum(counts),
        estimate=difference,
        target=f"{compared[0]} minus {compared[1]}: difference of the groups' mean true effects "
        "over the fold masks actually used",
    )


def _untested(
    names: tuple[str, str, str],
    n_folds: int,
    sizes: Sequence[int],
    coverage: Sequence[float],
    rule: str,
    told: str,
    why: str,
    target: str,
    **more: Any,
) -> RoiResult:
    """What every record of held-out values without a test holds."""
    roi, plan, search = names
    empty = sum(size == 0 for size in sizes)
    note = (
        f" {empty} of {len(sizes)} masks are empty; there the value counts as 0, so the estimate "
        "is not the size of an effect and has no interval."
        if empty
        else ""
    )
    return RoiResult(
        roi=roi,
        plan=plan,
        rule=rule,
        search=search,
        target=f"{target}, 0 in the empty ones: not the size of an effect" if empty else target,
        biased=False,
        n_folds=n_folds,
        mask_sizes=tuple(sizes),
        coverage=least(coverage, sizes),
        sentence=(
            f"{roi}: {rule} in the search region '{search}', chosen in {n_folds} folds ({plan}); "
            f"{told}. No p-value: {why}.{note}"
        ),
        **more,
    )
