"""What may be said of regions that no fold chose: given beforehand, or chosen on other data."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt

from .errors import InputError
from .orthogonality import Certificate
from .parcels import family_t, person_means
from .results import ALL, RoiResult, distinct, estimate_texts, least, of_t, p_text
from .roi import one_sample_t, without_spread

Floats = npt.NDArray[np.floating]

# What the mask of a test without folds was chosen on: nothing of the study, each subject's own
# other runs, localizer or other data, or a group map.
CHOSEN_ON = ("nothing", "other runs", "localizer", "other data", "group")


def fixed_region_result(
    values: Sequence[float],
    names: tuple[str, str, str],
    sizes: Sequence[int],
    coverage: Sequence[float],
) -> RoiResult:
    """A region fixed without the tested data: the t-test and its interval are right.

    Equal values have no test: nothing is known of how far they would vary.

    Raises
    ------
    InputError
        As `least`, for a map without data in the region.

    Examples
    --------
    >>> made = fixed_region_result([1.0, 2.0, 3.0], ("a", "given", "a"), [8], [1, 1, 1])
    >>> made.p_kind, round(made.p, 4)
    ("Student's t, two-sided", 0.0742)
    """
    said: dict[str, Any] = {
        "rule": "the region as given",
        "target": "population mean in this region",
        "mask_sizes": distinct(sizes),
        "coverage": least(coverage, sizes),
    }
    if why := _why_untested(values, sizes):
        return _untested(values, names, why, **said)
    test = one_sample_t(np.asarray(values))
    roi, _, search = names
    interval = test.interval
    mean, low, high = estimate_texts(test.mean, interval.low, interval.high)
    return of_t(
        test,
        names,
        len(values),
        p_kind="Student's t, two-sided",
        null="the population mean in the region is zero",
        **said,
        sentence=(
            f"{roi}: mean {mean} in the a-priori region '{search}' (95 % interval "
            f"{low} to {high}), t({test.df}) = {test.t:.2f}, "
            f"{p_text(test.p)}, two-sided. Null: the population mean in this region is zero "
            "(near-normal values)."
        ),
    )


def own_mask_result(
    values: Sequence[float],
    names: tuple[str, str, str],
    sizes: Sequence[int],
    coverage: Sequence[float],
    chosen_on: str = "other runs",
    replaced: Sequence[str] = (),
    empty: Sequence[str] = (),
) -> RoiResult:
    """A mask of each subject's own, chosen on other data of theirs: t across subjects, run level.

    Where some masks are empty, their value counts as 0, and there is no standardised effect.
    Where all are, or all values are equal, there is no test.

    Parameters
    ----------
    values : sequence of float, one per subject
        Averaged over the subject's runs.
    names : (roi, plan, search region)
    sizes, coverage : sequence, one per mask
    chosen_on : {"other runs", "localizer", "other data"}
    replaced, empty : sequence of str
        Whose masks hold the strongest features, or nothing, because the rule found nothing; a
        name for each mask.

    Raises
    ------
    InputError
        As `least`, for a map without data in its mask.

    Examples
    --------
    >>> made = own_mask_result([1.0, 2.0, 3.0], ("a", "leave-one-run-out", "b"), [8, 8], [1, 1])
    >>> made.null
    'no subject has a replicable effect in the search region'
    """
    n_empty = sum(size == 0 for size in sizes)
    target = "mean over these subjects of the effect in their own masks"
    said: dict[str, Any] = {
        "rule": f"each subject's own mask, from their {chosen_on}",
        "target": f"{target}, 0 in the empty ones" if n_empty else target,
        "n_folds": len(sizes),
        "n_empty": n_empty,
        "empty": tuple(empty),
        "replaced": tuple(replaced),
        "mask_sizes": tuple(sizes),
        "coverage": least(coverage, sizes),
    }
    notes = ""
    if replaced:
        notes += (
            f" In {len(replaced)} of {len(sizes)} masks the rule found nothing; there the "
            "strongest voxels stood in."
        )
    if why := _why_untested(values, sizes):
        return _untested(values, names, why, notes, **said)
    if n_empty:
        notes += (
            f" {n_empty} of {len(sizes)} masks are empty; their value counts as 0, so the mean is "
            "not the size of an effect."
        )
    test = one_sample_t(np.asarray(values))
    roi, plan, search = names
    interval = test.interval
    mean, low, high = estimate_texts(test.mean, interval.low, interval.high)
    made = of_t(
        test,
        names,
        len(values),
        p_kind="Student's t across subjects, two-sided",
        null="no subject has a replicable effect in the search region",
        **said,
        sentence=(
            f"{roi}: mean {mean} in each subject's own mask in the search region '{search}', "
            f"chosen on their {_worded(chosen_on, plan)}95 % interval {low} to {high}), "
            f"t({test.df}) = {test.t:.2f}, {p_text(test.p)}, two-sided. Null: no subject has a "
            "replicable effect there (run level: what protects is that run noise is independent). "
            "It speaks of a population mean only if the effects that choose and those that are "
            f"tested are uncorrelated across subjects.{notes}"
        ),
    )
    return replace(made, dz=None, g=None) if n_empty else made


def group_mask_result(
    values: Sequence[float],
    names: tuple[str, str, str],
    sizes: Sequence[int],
    coverage: Sequence[float],
    *,
    these_subjects: bool = False,
    certificate: Certificate | None = None,
    replaced: bool = False,
) -> RoiResult:
    """One mask chosen on a group map of other data, read in the tested subjects: Student's t.

    Parameters
    ----------
    values : sequence of float, one per subject
    names : (roi, plan, search region)
    sizes, coverage : sequence
    these_subjects : bool
        Whether the mask was chosen on other data of the tested subjects, so that the claim is
        about them only; otherwise it was chosen on other people.
    certificate : Certificate, optional
        Shows that the contrast which chose, on the same data, cannot bias the tested one.
    replaced : bool
        Whether the rule found nothing and the strongest features stood in.

    Raises
    ------
    InputError
        As `least`, for a map without data in the region.

    Examples
    --------
    >>> names = ("a", "localizer", "b")
    >>> group_mask_result([1.0, 2.0, 3.0], names, [8], [1], these_subjects=True).null
    'none of these subjects has an effect in the region'
    """
    data = "other data" if certificate is None else "another contrast of the same data"
    said: dict[str, Any] = {
        "rule": f"one mask for all, from a group map of {data}",
        "target": "mean of these subjects in this region"
        if these_subjects
        else "population mean in this region",
        "mask_sizes": distinct(sizes),
        "coverage": least(coverage, sizes),
        "replaced": (ALL,) if replaced else (),
    }
    note = " The rule found nothing; the strongest voxels stood in." if replaced else ""
    if why := _why_untested(values, sizes):
        return _untested(values, names, why, note, **said)
    test = one_sample_t(np.asarray(values))
    roi, _, search = names
    interval = test.interval
    mean, low, high = estimate_texts(test.mean, interval.low, interval.high)
    null = (
        "none of these subjects has an effect in the region"
        if these_subjects
        else "the population mean in this region is zero"
    )
    if certificate is not None:
        claim = (
            f"Certified: {certificate.describe()}; taken for granted: "
            f"{', '.join(certificate.assumptions)}."
        )
    elif these_subjects:
        claim = (
            "It speaks of these subjects only: the region was chosen on other data of theirs, so "
            "what persists in each of them is in both, and the mean overstates that of their "
            "population."
        )
    else:
        claim = "The region was chosen on other people (near-normal values)."
    return of_t(
        test,
        names,
        len(values),
        p_kind="Student's t, two-sided",
        null=null,
        **said,
        sentence=(
            f"{roi}: mean {mean} in one region for all, chosen in the search region '{search}' on "
            f"the group map of {data} (95 % interval {low} to {high}), t({test.df}) = "
            f"{test.t:.2f}, {p_text(test.p)}, two-sided. Null: {null}. {claim}{note}"
        ),
    )


def family_results(
    values: Floats,
    coverage: Floats,
    labels: Sequence[str],
    names: tuple[str, str, str],
    parcels: Sequence[int],
    parcel_names: Sequence[str],
    sizes: Sequence[Sequence[int]],
    min_coverage: float = 0.0,
    *,
    own_labels: bool = False,
) -> list[dict[str, object]]:
    """A parcellation fixed without the tested data: one record per parcel, one family of tests.

    Parameters
    ----------
    values, coverage : (n_maps, n_parcels) float
        Means, NaN where a map lacks the parcel; the share of the parcel with data.
    labels : sequence of str, one per map
        A label's maps are averaged first.
    names : (roi, plan, search region)
    parcels, parcel_names : sequence, one per parcel
    sizes : (1 or n_maps, n_parcels) int
        Voxels of each parcel, in the label image for all maps or in each map's own.
    min_coverage : float
        A map that covers less of a parcel than this does not count there.
    own_labels : bool
        Whether each map's label image was made from other data of the same subject.

    Returns
    -------
    list of dict
        A `RoiResult` with ``parcel``, ``parcel_name``, ``p_holm`` (adjusted over all parcels
        tested; None without a test) and ``untested`` (why; "" with a test) before it.

    Raises
    ------
    InputError
        When the tables and lists do not belong together.

    Examples
    --------
    >>> made = family_results(
    ...     np.array([[1.0, 1.0], [2.0, 4.0], [3.0, np.nan]]),
    ...     np.array([[1.0, 0.9], [1.0, 1.0], [1.0, 0.0]]),
    ...     ["a", "b", "c"], ("atlas", "given", "brain"), [3, 7], ["Arbor", "Brook"], [[8, 5]],
    ... )
    >>> [(one["parcel_name"], one["n_subjects"], round(one["p_holm"], 4)) for one in made]
    [('Arbor', 3, 0.1484), ('Brook', 2, 0.344)]
    """
    shape = (len(labels), len(parcels))
    given = {
        "values": values.shape,
        "coverage": coverage.shape,
        "names": (len(labels), len(parcel_names)),
        **{f"sizes of image {i}": (len(labels), len(row)) for i, row in enumerate(sizes, 1)},
    }
    wrong = [name for name, got in given.items() if got != shape]
    if wrong or len(sizes) not in (1, len(labels)):
        raise InputError(
            "values and parcels do not belong together",
            where=wrong[0] if wrong else "sizes",
            expected=f"{shape[0]} maps, {shape[1]} parcels",
            got=f"{given[wrong[0]]}" if wrong else f"{len(sizes)} label images",
            remedy="connect all of them from one extraction",
        )
    roi, plan, search = names
    counted = np.isfinite(values) & (coverage > 0) & (coverage >= min_coverage)
    n_people = len(set(labels))
    family = family_t(person_means(np.where(counted, values, np.nan), labels))
    n_tested = sum(one.test is not None for one in family)
    own = (
        " Each subject's label image was made from other data of theirs: the mean speaks of the "
        "population only if the effects that choose and those that are tested are uncorrelated "
        "across subjects."
        if own_labels
        else ""
    )
    null = (
        "no subject has a replicable effect in the parcel"
        if own_labels
        else "the population mean in this parcel is zero"
    )
    records: list[dict[str, object]] = []
    for j, (one, name) in enumerate(zip(family, parcel_names, strict=True)):
        shared: dict[str, Any] = {
            "rule": "the parcel as given" + (", in each subject's own label image" if own else ""),
            "target": "population mean in this parcel",
            "mask_sizes": distinct([row[j] for row in sizes]),
            "coverage": min(coverage[counted[:, j], j].tolist(), default=None),
        }
        head = f"{roi}, parcel {name}"
        if one.test is None or one.p_holm is None:
            result = RoiResult(
                roi=roi,
                plan=plan,
                search=search,
                n_subjects=one.n,
                estimate=one.mean,
                biased=False,
                sentence=f"{head}: no test, {one.untested} (n = {one.n} of {n_people} subjects).",
                **shared,
            )
        else:
            test, interval = one.test, one.test.interval
            mean, low, high = estimate_texts(test.mean, interval.low, interval.high)
            lacking = (
                f" {n_people - one.n} of {n_people} subjects lack the parcel; this speaks of "
                "those who have it."
                if one.n < n_people
                else ""
            )
            result = of_t(
                test,
                names,
                one.n,
                p_kind="Student's t, two-sided",
                null=null,
                sentence=(
                    f"{head}: mean {mean} (95 % interval {low} to {high}), t({test.df}) = "
                    f"{test.t:.2f}, {p_text(test.p)}, two-sided; Holm-adjusted over the "
                    f"{n_tested} parcels tested: {p_text(one.p_holm)}. Null: {null} "
                    f"(near-normal values).{lacking}{own}"
                ),
                **shared,
            )
        head_of_record = {
            "parcel": int(parcels[j]),
            "parcel_name": name,
            "p_holm": one.p_holm,
            "untested": one.untested,
        }
        records.append(head_of_record | result.as_dict())
    return records


def _why_untested(values: Sequence[float], sizes: Sequence[int]) -> str:
    """Why there is no t-test of values read in masks of these sizes; "" where there is one."""
    if not any(sizes):
        return "no region was found"
    return "all values are equal" if without_spread(np.asarray(values, dtype=float)) else ""


def _untested(
    values: Sequence[float], names: tuple[str, str, str], why: str, note: str = "", **said: Any
) -> RoiResult:
    """What is left without a test: the mean of the values, if a region was read at all."""
    roi, plan, search = names
    found = any(said["mask_sizes"])
    mean = float(np.mean(values)) if found else float("nan")
    told = f"mean {mean:.3g}, no test" if found else "no value and no test"
    return RoiResult(
        roi=roi,
        plan=plan,
        search=search,
        n_subjects=len(values),
        estimate=mean,
        biased=False,
        sentence=f"{roi} in '{search}' ({plan}): {told}: {why} (n = {len(values)}).{note}",
        **said,
    )


def _worded(chosen_on: str, plan: str) -> str:
    return f"{chosen_on} maps (" if chosen_on == plan else f"{chosen_on} ({plan}; "
