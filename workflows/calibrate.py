"""How often a study's own plans reject when nothing is there, and what their estimates are off.

What the study's maps give here is their number, which voxels each of them lacks, and how smooth
their residuals are; their means play no part, so that this is no look at the results. The rest
is noise, keyed by (seed, region, number of the data set): neither the number of processes, nor
their order, nor a stop on the way changes a byte.
"""

from __future__ import annotations

import contextlib
import functools
import hashlib
import math
import multiprocessing
import os
import threading
import time
from collections.abc import Callable, Generator, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from concurrent.futures.process import BrokenProcessPool
from dataclasses import dataclass
from importlib.metadata import version
from multiprocessing import connection
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import stats

from ..nodes import progress
from ..nodes.errors import InputError, SequesterError
from ..nodes.heldout import FLIP_NULL
from ..nodes.nullsets import (
    SHARED,
    Circular,
    CrossFitted,
    Family,
    Fixed,
    Found,
    Localizer,
    NullMaps,
    OwnRuns,
)
from ..nodes.simulated import Noise
from .kept import Kept, kept_folder
from .measured import Measured, measure, refuse_own_grids
from .plans import A_PRIORI, CROSS_FITTED, EXPLORATORY, LOCALIZER, ORTHOGONAL, OTHER_RUNS
from .rois import Roi
from .settings import Settings
from .verify import verify

Draw = Callable[[np.random.Generator], Found]

ALPHA, MOST_FLIPS = 0.05, 199
# A verdict other than "calibrated" needs a rate that .05 gives so rarely; fewer sets tell nothing.
_RARE, _FEWEST = 0.001, 100
_BIASED = 4  # Monte Carlo errors
_PROBES = 2  # data sets from which the time is told


@dataclass(frozen=True)
class Calibration:
    """What is asked for.

    Parameters
    ----------
    sets : int
        Data sets per region.
    n_flips : int or None
        Of each data set's whole-procedure test; None for the study's own number, 199 at most.
    processes : int
    persistent : float
        Above 0, plans that choose on other data of the same subjects are shown a second time:
        so much of the variance is then a subject's own, in all of their maps.
    keep : Path or None
        The folder in which data sets that are done are kept.
    only : str
        One region; "" for all that are not variants of another.
    """

    sets: int = 500
    n_flips: int | None = None
    processes: int = 1
    persistent: float = 0.0
    keep: Path | None = None
    only: str = ""

    def __post_init__(self) -> None:
        for name, ok, expected, got in (
            ("sets", self.sets >= 2, "2 or more", self.sets),
            ("processes", self.processes >= 1, "1 or more", self.processes),
            ("persistent", 0 <= self.persistent < 1, "0 or more, below 1", self.persistent),
            (
                "flips",
                self.n_flips is None or self.n_flips >= 19,
                "19 or more, so that p can be as small as .05",
                self.n_flips,
            ),
        ):
            if not ok:
                raise InputError(f"{name} out of range", expected=expected, got=str(got))


@dataclass(frozen=True)
class Calibrated:
    """The answer.

    Parameters
    ----------
    records : list of dict
        One a row, in plain types.
    table : list of list of str
    notes : list of str
    """

    records: list[dict[str, Any]]
    table: list[list[str]]
    notes: list[str]


def calibrate(settings: Settings, asked: Calibration, say: Callable[[str], None]) -> Calibrated:
    """Noise through each region's own plan, many times.

    Parameters
    ----------
    settings : Settings
    asked : Calibration
    say : callable
        Told how long it may take.

    Raises
    ------
    InputError
        For a region that does not exist or cannot be simulated, and for kept data sets of
        another study.
    """
    rois = _wanted(settings, asked.only)
    verify(settings)
    with kept_folder(asked.keep) as folder:
        say("reading which voxels have data, and how smooth they are")
        measured = measure(settings, rois)
        rows = [
            row
            for roi, one in zip(rois, measured, strict=True)
            for row in _rows_of(settings, roi, one, asked)
        ]
        kept = [Kept(folder, row.name, row.head(settings.seed)) for row in rows]
        _simulate(rows, kept, settings.seed, asked, say)
    records = [
        _summary(row, [one.found[i] for i in range(asked.sets)])
        for row, one in zip(rows, kept, strict=True)
    ]
    return Calibrated(
        records,
        [list(_HEADER), *map(_table_row, records)],
        [_general(settings, asked), *(f"{row.roi}: {row.note}" for row in rows if row.note)],
    )


def _wanted(settings: Settings, only: str) -> list[Roi]:
    rois = [roi for roi in settings.rois if only == roi.name or not (only or roi.variant_of)]
    if not rois:
        raise InputError(
            "no such region",
            expected=f"one of {', '.join(roi.name for roi in settings.rois)}",
            got=repr(only),
        )
    refuse_own_grids(settings, rois[0], "bring the maps to a common grid for this")
    return rois


# -- what is simulated, row by row ------------------------------------------------------------


@dataclass(frozen=True)
class _Row:
    """One row of the table: a region's plan under one null.

    Parameters
    ----------
    name : str
        Keys its data sets and names its file.
    roi, plan : str
    null, told : str
        The null in a few words, and as the result states it.
    sided : str
    expected : float
        The rate that a calibrated test has.
    its_own : bool
        Whether the null is the plan's own.
    plain : dict
        What else its record holds.
    draw : callable
        One data set.
    inputs : str
        Digest of what it is made of.
    note : str
    """

    name: str
    roi: str
    plan: str
    null: str
    told: str
    sided: str
    expected: float
    its_own: bool
    plain: dict[str, Any]
    draw: Draw
    inputs: str
    note: str

    def head(self, seed: int) -> dict[str, Any]:
        """What its data sets are of, but for their number."""
        shown = {key: self.plain[key] for key in ("flips", "persistent")}
        return {"row": self.name, "seed": seed, **shown, "inputs": self.inputs}


def _rows_of(
    settings: Settings, roi: Roi, measured: Measured, asked: Calibration
) -> Iterator[_Row]:
    """The rows of a region: its null, and if asked for what persistent subjects do to it."""
    most = min(roi.n_flips, MOST_FLIPS) if asked.n_flips is None else asked.n_flips
    folded = roi.plan in CROSS_FITTED
    # The maps that choose go with those that are tested, whole subjects being exchanged.
    alike = SHARED if folded and measured.choosing is not None else 0.0
    null, told, sided = _null(roi)
    plain: dict[str, Any] = {
        "test": roi.test,
        "flips": most if folded and roi.test != "t" else None,
        "n_subjects": len(set(measured.tested.people)),
        "n_maps": len(measured.tested.subs),
        "n_voxels": measured.searched.grid.n_features,
        "fwhm_voxels": list(measured.fwhm),
        "missing": float(1 - measured.tested.present.mean()),
    }
    digest = _digest(settings, roi, measured)

    def row(name: str, persistent: float, *, its_own: bool, **words: str) -> _Row:
        return _Row(
            name=name,
            roi=roi.name,
            plan=roi.plan,
            sided=sided,
            expected=_expected(roi, most, plain["n_subjects"]),
            its_own=its_own,
            plain={**plain, "persistent": persistent},
            draw=_draw(settings, roi, measured, most, persistent),
            inputs=digest,
            **words,
        )

    note = f"{_measures(roi, measured)} {_null_note(told)}"
    yield row(roi.name, alike, its_own=True, null=null, told=told, note=note)
    if asked.persistent and _same_people(roi, measured):
        share = asked.persistent
        yield row(
            f"{roi.name}_persistent",
            share,
            its_own=False,
            null=f"not its null: {share:.0%} persists in a subject",
            told="no effect in the population, but effects of each subject's own that persist "
            "over their maps: not the null of this plan, which finds them as it should",
            note="",
        )


def _null_note(told: str) -> str:
    return f"Null: {told}." if told else "Circular: no test and no rate, the bias alone."


def _null(roi: Roi) -> tuple[str, str, str]:
    """A plan's null in a few words, in full, and the sides of its test."""
    place = f" '{roi.region.describe()}'"
    if roi.plan == EXPLORATORY:
        return "none: circular", "", ""
    if roi.plan in CROSS_FITTED:
        sided = "greater" if roi.procedure and roi.procedure.tail == "positive" else "less"
        sided = "two-sided" if roi.test == "t" else sided
        model = None if roi.procedure is None else roi.procedure.model
        if model is not None:
            told = f"the maps are exchangeable over the subjects: nothing shows {model.describe()}"
            return "maps are exchangeable", told, sided
        return "no effect in the search region", FLIP_NULL + place, sided
    if roi.own_masks:
        told = (
            f"no subject has a replicable effect in the search region{place} (noise without a "
            "persistent part)"
        )
        return "no subject has a replicable effect", told, "two-sided"
    if roi.these_subjects:
        told = f"none of these subjects has an effect in the region (chosen in{place})"
        return "none of these subjects has an effect", told, "two-sided"
    if roi.each_label:
        told = f"the population mean is zero in every label ({roi.region.describe()})"
        return "every label's mean is zero", told, "two-sided"
    return "the population mean is zero", "the population mean in the region is zero", "two-sided"


def _measures(roi: Roi, measured: Measured) -> str:
    """What the noise has of the study, in a sentence."""
    rows, people = measured.tested, set(measured.tested.people)
    size = " x ".join(f"{width:.1f}" for width in measured.fwhm)
    lacking = 1 - rows.present.mean()
    parts = [
        f"{len(people)} subjects",
        f"{measured.searched.grid.n_features} voxels",
        f"FWHM {size} voxels",
    ]
    if lacking:
        parts.append(f"{lacking:.1%} of the values missing")
    if roi.plan in OTHER_RUNS:
        parts.append(f"{len(rows.subs)} runs, each with noise of its own")
    elif len(people) < len(rows.people):
        parts.append(
            f"{len(rows.people)} maps, those of one exchange label {SHARED:.0%} alike in variance"
        )
    if roi.plan in CROSS_FITTED and measured.choosing is not None:
        parts.append(f"a subject's choosing and tested map {SHARED:.0%} alike in variance")
    said = f"{', '.join(parts)}."
    if roi.procedure is not None and roi.procedure.on_empty == "stop":
        said += " Where the plan would stop, the mask counts as empty."
    if roi.plan in CROSS_FITTED and roi.test == "t":
        said += " The test asked for, a plain t of cross-fitted values, is refused in a run."
    return said


def _same_people(roi: Roi, measured: Measured) -> bool:
    """Whether what persists in a subject is in the maps that choose and in those tested."""
    if roi.plan in OTHER_RUNS:
        return True
    return (
        roi.plan == LOCALIZER
        and measured.choosing is not None
        and bool(set(measured.choosing.subs) & set(measured.tested.subs))
    )


def _expected(roi: Roi, most: int, n_people: int) -> float:
    """The level that a test with so many flips can have at .05."""
    if roi.plan not in CROSS_FITTED or roi.test == "t":
        return ALPHA
    model = None if roi.procedure is None else roi.procedure.model
    every = 2**n_people if model is None and 2**n_people <= most + 1 else most + 1
    return math.floor(ALPHA * every + 1e-9) / every


def _draw(
    settings: Settings, roi: Roi, measured: Measured, n_flips: int, persistent: float
) -> Draw:
    """One data set of a region's plan, given its random numbers."""
    searched, grid = measured.searched, measured.searched.grid
    maps = NullMaps(
        Noise(grid, measured.fwhm),
        measured.tested,
        measured.choosing,
        0.0 if roi.plan in OTHER_RUNS else SHARED,
        persistent,
    )
    if roi.each_label:
        assert measured.labels is not None, "a family has labels"
        return Family(maps, measured.labels, measured.numbers, settings.maps.min_coverage)
    if roi.plan == A_PRIORI:
        return Fixed(maps, searched, roi.summary)
    assert roi.procedure is not None, "every other plan chooses"
    if roi.plan in OTHER_RUNS:
        return OwnRuns(maps, roi.procedure, searched, measured.runs)
    if roi.plan in (LOCALIZER, ORTHOGONAL):
        return Localizer(
            maps, roi.procedure, searched, group_mask=roi.group_mask, spread=measured.spread
        )
    if roi.plan == EXPLORATORY:
        return Circular(maps, roi.procedure, grid)
    return CrossFitted(maps, roi.procedure, grid, n_flips, plain_t=roi.test == "t")


def _digest(settings: Settings, roi: Roi, measured: Measured) -> str:
    """Of everything that decides what a row's data sets give, but for seed and flips."""
    grid = measured.searched.grid
    key = hashlib.sha256()
    said = (
        version("sequester"), roi.plan, roi.test, roi.summary, roi.each_label, roi.group_mask,
        roi.procedure, settings.maps.min_coverage, measured.numbers, measured.fwhm,
        measured.runs, measured.spread, grid.shape, grid.affine.tolist(),
    )  # fmt: skip
    key.update(repr(said).encode())
    arrays: list[npt.NDArray[Any]] = [grid.voxels, measured.searched.inside]
    for rows in (measured.tested, measured.choosing):
        if rows is not None:
            key.update(repr((rows.subs, rows.people)).encode())
            arrays.append(rows.present)
    if measured.labels is not None:
        arrays.append(measured.labels)
    for array in arrays:
        key.update(repr((array.shape, array.dtype.str)).encode())
        key.update(np.ascontiguousarray(array).tobytes())
    return key.hexdigest()


# -- many data sets ---------------------------------------------------------------------------


def _simulate(
    rows: Sequence[_Row],
    kept: Sequence[Kept],
    seed: int,
    asked: Calibration,
    say: Callable[[str], None],
) -> None:
    """Draw every data set that is not there yet; the first ones tell how long the rest takes."""
    expected = 0.0
    for row, done in zip(rows, kept, strict=True):
        todo, last = done.lacking(asked.sets), 0.0
        for number in todo[:_PROBES]:
            start = time.perf_counter()
            done.add(number, _one(row, seed, number))
            # The last, because the first also prepares what all of them use.
            last = time.perf_counter() - start
        expected += last * len(todo[_PROBES:]) / asked.processes
    n_left = sum(len(done.lacking(asked.sets)) for done in kept)
    if n_left:
        say(f"{n_left} data sets to make: about {_duration(expected)}")
    for row, done in zip(rows, kept, strict=True):
        todo = done.lacking(asked.sets)
        n_before = asked.sets - len(todo)
        # Closed also when interrupted here, so that no process goes on with the rest.
        with contextlib.closing(_each(row, seed, todo, asked.processes)) as made:
            for i, (number, found) in enumerate(made, 1):
                done.add(number, found)
                progress.tell(f"{row.name}: data sets", n_before + i, asked.sets)


def _one(row: _Row, seed: int, number: int) -> Found:
    key = hashlib.sha256(f"{seed}\0{row.name}\0{number}".encode()).digest()
    return row.draw(np.random.default_rng(int.from_bytes(key[:16], "little")))


def _each(
    row: _Row, seed: int, numbers: Sequence[int], processes: int
) -> Generator[tuple[int, Found], None, None]:
    """Data sets by number, in as many processes as there is work for."""
    processes = min(processes, len(numbers))
    if processes < 2:
        for number in numbers:
            yield number, _one(row, seed, number)
        return
    pool = ProcessPoolExecutor(processes, initializer=_begin, initargs=(row, seed))
    try:
        yield from zip(numbers, pool.map(_in_worker, numbers), strict=True)
    except BrokenProcessPool as error:
        raise SequesterError(
            f"{row.roi}: a process ended before its work was done (out of memory?); "
            "try fewer --processes"
        ) from error
    finally:
        pool.shutdown(cancel_futures=True)


_in_this_process: dict[str, Callable[[int], Found]] = {}


def _begin(row: _Row, seed: int) -> None:
    threading.Thread(target=_end_with_parent, daemon=True).start()
    _in_this_process["draw"] = functools.partial(_one, row, seed)


def _end_with_parent() -> None:
    """End this process when the one that started it is killed: nobody else would."""
    parent = multiprocessing.parent_process()
    assert parent is not None, "a worker has a parent"
    connection.wait([parent.sentinel])
    os._exit(1)


def _in_worker(number: int) -> Found:
    return _in_this_process["draw"](number)


def _duration(seconds: float) -> str:
    if seconds < 90:
        return f"{max(1, round(seconds))} s"
    return f"{round(seconds / 60)} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"


# -- what they say ----------------------------------------------------------------------------

_HEADER = ("region", "plan", "null", "sets", "rate at .05", "expected", "bias", "verdict")


def _summary(row: _Row, found: Sequence[Found]) -> dict[str, Any]:
    """A row's record."""
    n = len(found)
    estimates = np.array([one.estimate for one in found])
    bias = float(estimates.mean())
    bias_error = float(estimates.std(ddof=1) / np.sqrt(n))
    ps = [one.p for one in found if one.p is not None]
    hits = sum(p <= ALPHA for p in ps)
    rate = hits / n if ps else None
    return {
        "roi": row.roi,
        "plan": row.plan,
        "null": row.told,
        "its_own_null": row.its_own,
        "sets": n,
        "rate": rate,
        "rate_error": None if rate is None else math.sqrt(rate * (1 - rate) / n),
        "expected": None if rate is None else row.expected,
        "sided": row.sided,
        "bias": bias,
        "bias_error": bias_error,
        "empty": float(np.mean([one.empty for one in found])),
        "verdict": _verdict(row, n, hits if ps else None, abs(bias) > _BIASED * bias_error),
        **row.plain,
        "words": row.null,
    }


def _verdict(row: _Row, n: int, hits: int | None, biased: bool) -> str:
    if hits is None:
        return "circular: biased" if biased else "circular"
    if not row.its_own:
        return "not its null"
    if stats.binom.sf(hits - 1, n, ALPHA) < _RARE:
        said = "too many"
    elif n < _FEWEST:
        said = "too few sets to tell"
    elif stats.binom.cdf(hits, n, ALPHA) < _RARE:
        said = "conservative"
    else:
        said = "calibrated"
    return f"{said}, biased" if biased else said


def _table_row(one: dict[str, Any]) -> list[str]:
    def pm(name: str) -> str:
        return "-" if one[name] is None else f"{one[name]:.3f} +- {one[f'{name}_error']:.3f}"

    expected = "-" if one["expected"] is None else f"{one['expected']:.3f}"
    head = [one["roi"], one["plan"], one["words"], str(one["sets"])]
    return [*head, pm("rate"), expected, pm("bias"), one["verdict"]]


def _general(settings: Settings, asked: Calibration) -> str:
    flips = f"the study's own, {MOST_FLIPS} at most" if asked.n_flips is None else asked.n_flips
    coverage = (
        " min_coverage stops no data set, as it may stop a run."
        if settings.maps.min_coverage
        else ""
    )
    return (
        f"Simulated: Gaussian noise with the study's subjects, search regions, smoothness and "
        f"missing voxels through its own plans; seed {settings.seed}, flips {flips}. No effect of "
        "the study entered, and this is no look at its results. +- is the Monte Carlo standard "
        "error; bias is in standard deviations of one map (where runs have masks: of one run). "
        f"Too many, conservative: rates that .05 gives less than once in {1 / _RARE:.0f}.{coverage}"
    )
