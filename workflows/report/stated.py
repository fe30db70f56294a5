"""What STUDY.toml states of one region, in words: its maps, how it was chosen and tested.

Nothing here looks at what came out, so that words change when the procedure does, and only then.
Functions that give sentences do not name the region: regions of which they give the same were
treated alike.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from typing import Any

from .folder import Row, RunFolder
from .words import listed

FOLDED = ("leave-one-subject-out", "k-fold", "split-half", "given-folds")
OF_RUNS = ("leave-one-run-out", "split-half-runs")
_DEALT = ("k-fold", "split-half")
_ENTITIES = ("contrast", "ses", "task", "acq", "run")  # which `tested` and `chosen_on` tell
_WORDS = {"ses": "session", "acq": "acquisition", "sub": "subject"}
_MOST = 30  # values of a column
_HOW = {
    "leave-one-subject-out": "on the group map of the others, leaving out one subject at a time",
    "k-fold": "on the group map of the others, holding out one fold of subjects at a time",
    "split-half": "on the group map of one half of the subjects, for the other half, both ways",
    "given-folds": "on the group map of the others, holding out one fold of subjects at a time, "
    "with folds as in column {fold_column} of the study table",
    "leave-one-run-out": "in each subject on all runs but one, for that run, each run in turn",
    "split-half-runs": "in each subject on one half of the runs ({halves}), for the other half, "
    "both ways",
    "orthogonal-contrast": "as one region for all, on the group map of another contrast of the "
    "same data",
    "exploratory": "on the group map of the very data it was read in",
}
_LOCALIZER = {
    "own": "for each subject alone, on the subject's own localizer map",
    "group": "as one region for all, on the group map of other data",
}
_HALVES = {"odd-even": "odd and even positions", "first-second": "the first and the last"}
_VALUES = {
    "mean": "the mean of the map over the voxels of the region",
    "median": "the median of the map over the voxels of the region",
    "weighted": "the mean of the map, weighted by the values of the region's file",
    "component": "the score on the first principal component (not centred) of the subject's maps "
    "in the region; of a single map, its root mean square with the sign of its mean",
}
_INTERVALS = {
    "flips": "approximate: the standard error times the 95 % quantile of |t| over the exchanges "
    "in which some fold found a region, or Student's, whichever is larger",
    "folds": "approximate: the standard error times Student's t and sqrt(1 + k / (k - 1)), for k "
    "folds (Nadeau & Bengio 2003)",
    "jackknife": "conservative: the delete-one jackknife of the whole procedure",
}


def tested_maps(run: RunFolder, row: Row) -> str:
    """The tested maps in a phrase: of what, what was subtracted, and what they are in percent of.

    Parameters
    ----------
    run : RunFolder
    row : Row
        Of roi_tests.
    """
    minus, baseline, null = _taken_away(run, row)
    told = _of(str(row["tested"]), _wanted(run, row))
    if minus:
        told += f", minus {_columns(minus)}"
    if baseline:
        told += f", in percent of {_columns(baseline)}"
    return told + (f", minus {null:g}" if null else "")


def chosen_maps(run: RunFolder, row: Row) -> str:
    """The maps that chose, where they are others than are tested; else ""."""
    if not row["chosen_on"]:
        return ""
    asked = region(run, row).get("choose_on", {})
    return _of(str(row["chosen_on"]), {**_wanted(run, row), **asked})


def region(run: RunFolder, row: Row) -> dict[str, Any]:
    """The ``[[roi]]`` of a row."""
    return run.region(str(row["roi"]))


def data(run: RunFolder) -> dict[str, Any]:
    """The ``[data]`` of the study file."""
    found: dict[str, Any] = run.study.get("data", {})
    return found


def runs_averaged(run: RunFolder, row: Row) -> str:
    """How runs became one map per subject; "" where none were averaged."""
    if row["plan"] in OF_RUNS or not _several(run, row, "tested", "subtracted", "baseline"):
        return ""
    how = "averaged with equal weights"
    if data(run).get("run_weights") == "variance":
        how = "averaged with weights of 1 / variance at each voxel"
        if data(run).get("baseline"):
            how += " (those of the baseline with equal weights)"
    return f"runs were {how}"


def maps_made(run: RunFolder, row: Row) -> Iterator[str]:
    """Sentences: the tested maps and what was done to them, in its order."""
    minus, baseline, null = _taken_away(run, row)
    of = _of(str(row["tested"]), _wanted(run, row))
    each = "run" if row["plan"] in OF_RUNS else "subject"
    steps = [runs_averaged(run, row)]
    if minus:
        steps.append(f"the map of {_columns(minus)}, made in the same way, was subtracted")
    if baseline:
        steps.append(f"the rest was put in percent of the map of {_columns(baseline)}")
    if null:
        steps.append(f"{null:g}, which stands for no effect, was subtracted")
    told = "; ".join(filter(None, steps))
    yield f"The tested maps, one per {each}, are of {of}{f': {told}' if told else ''}."
    quality = [c for c in data(run).get("quality", []) if c in _wanted(run, row)]
    if quality:
        yield f"Selection by {listed(quality)} is by the quality of the data."
    if data(run).get("grids") == "own":
        yield "Each subject's maps are on a grid of their own."
    subs, people = _people(run, row)
    if people < subs:
        together = "were held out and exchanged together, and " if row["plan"] in FOLDED else ""
        yield (
            f"{subs} subjects count as {people}: those who belong together {together}had "
            "their values averaged before the test."
        )


def chosen(run: RunFolder, row: Row, *, within: str) -> Iterator[str]:
    """Sentences: how the region was chosen, the first without its subject and verb.

    Parameters
    ----------
    run : RunFolder
    row : Row
    within : str
        The search region in words.
    """
    mine, plan = region(run, row), str(row["plan"])
    if plan == "a-priori":
        yield f"fixed beforehand: {within}."
        return
    yield f"chosen {_how(run, row)}: {_rule(row)}, within {within}."
    if chose := chosen_maps(run, row):
        steps = []
        if _several(run, row, "chosen on"):
            steps.append("runs were averaged with equal weights")
            if data(run).get("run_weights") == "variance":
                steps = ["runs were averaged with weights of 1 / variance where all have variances"]
        if _taken_away(run, row) != ({}, {}, 0.0):
            steps.append("nothing was subtracted from them, and they are not in percent")
        how = f": {'; '.join(steps)}" if steps else ""
        yield f"The maps that choose are of {chose}{how}."
    else:
        yield "The maps that choose are the tested maps."
    if "p" in mine.get("rule", {}):
        yield "The p of the rule is one-sided and not corrected for the number of voxels."
    if plan != "localizer" or mine.get("mask_of") == "group":
        share = float(data(run).get("min_fraction", 0.8))
        least = f"{100 * share:g} % or more" if not mine.keys() & {"compare", "score"} else "all"
        could = "be the one" if mine["rule"]["kind"] == "peak-sphere" else "be chosen"
        yield f"A voxel could {could} where {least} of the maps that choose have data."
    if mine.get("rule", {}).get("kind") in ("threshold", "cluster"):
        yield _on_empty(mine, plan)
    varied = mine.get("sensitivity", {})
    if varied:
        told = [f"{key} {_values(values)}" for key, values in varied.items()]
        yield f"As variants, declared with it, the same was done with {listed(told)}."


def place(run: RunFolder, row: Row) -> str:
    """The region, or where it was searched for, with its sources."""
    mine = region(run, row)
    given = mine.get("region", mine.get("search"))
    if given is None:
        return "the whole map"
    notes = []
    if sources := list(dict.fromkeys(_all(given, "origin"))):
        notes.append(f"source: {listed(sources, _MOST)}")
    if any("{sub}" in str(one) for key in ("mask", "atlas") for one in _all(given, key)):
        notes.append("a file for each subject")
    if derived := [unit for units in _all(given, "derived_from") for unit in units]:
        told = listed(
            [_columns(unit).replace("subject {sub}", "the same subject") for unit in derived], _MOST
        )
        notes.append(f"made from data of {told}")
    if any(_all(given, "regrid")):
        labels = any(_all(given, "atlas"))
        how = "labels at the voxels' centres" if labels else "voxels covered by half or more"
        notes.append(f"brought to the grid of the maps, {how}")
    return str(row["search"]) + (f" ({'; '.join(notes)})" if notes else "")


def value(run: RunFolder, row: Row) -> Iterator[str]:
    """Sentences: how a map is read in its region."""
    least = float(data(run).get("min_coverage", 0))
    said = _VALUES[str(row["value"])]
    if row["plan"] in OF_RUNS:
        yield f"The value of a run is {said} that was chosen without it; runs were then averaged."
    else:
        yield f"The value of a subject is {said}."
    share = f"data in {100 * least:g} % of it or more" if least else "some data in it"
    if row["parcel"] is not None:
        yield f"A subject counted in a label with {share}."
    else:
        yield f"Every map had to have {share.replace('it', 'its region')}."


def tested(run: RunFolder, row: Row, n: str) -> Iterator[str]:
    """Sentences: how the values were tested, and of whom the test speaks.

    Parameters
    ----------
    run : RunFolder
    row : Row
    n : str
        How many subjects, in words.
    """
    mine, plan = region(run, row), str(row["plan"])
    given = listed(mine.get("covariates", []), _MOST)
    beside = f", given {given} (Freedman & Lane 1983)" if given else ""
    if "score" in mine:
        yield f"Held-out values of {n} were correlated with {mine['score']}{beside}."
        if "reliability" in mine:
            of = mine["reliability"]
            yield (
                "The largest correlation that the stated reliabilities allow "
                f"({of.get('values')} of the values, {of.get('score')} of the score) is given "
                "with it (Spearman 1904)."
            )
    elif "compare" in mine:
        groups = mine["compare"]
        yield (
            f"Held-out values of {groups.get('first')} and {groups.get('second')} (column "
            f"{groups.get('column')}; {n}) were compared by the difference of their means, the "
            f"first minus the second{beside}."
        )
    else:
        yield f"The estimate is the mean over {n}."
    yield from _folded_test(mine, row) if plan in FOLDED else _plain_test(mine, row)


def _folded_test(mine: Mapping[str, Any], row: Row) -> Iterator[str]:
    exact = " all " in str(row["p_kind"])
    many = "exchange" if mine.keys() & {"score", "compare"} else "flip"
    null = "the subjects' maps are independent and jointly symmetric about zero"
    if "compare" in mine:
        null = "the maps of the two groups have one joint distribution"
    if "score" in mine:
        null = "the score is independent of the maps"
    if "covariates" in mine:
        null += f", given linear effects of {listed(mine['covariates'], _MOST)},"
    method = "" if exact else " (Phipson & Smyth 2010)"
    yield (
        f"p is by {row['p_kind']}, one-sided ({row['sided']}): in each {many} every fold chose "
        "its region again, and the studentised statistic was compared with that of the data"
        f"{method}. The null hypothesis is that {null} over the search region: a small p says "
        "that there is an effect somewhere in it, not at any one voxel."
    )
    few = str(row["plan"]) != "leave-one-subject-out" and many == "flip"
    kind = mine.get("interval", "folds" if few else "flips")
    ruled = mine.get("rule", {}).get("kind") in ("threshold", "cluster")
    none = ruled and mine.get("on_empty", "empty") == "empty"
    unless = "; none is given when a fold finds nothing" if none else ""
    yield f"The 95 % interval is {_INTERVALS[kind]}{unless}."


def _plain_test(mine: Mapping[str, Any], row: Row) -> Iterator[str]:
    yield (
        "p is by Student's t over subjects, two-sided, and the 95 % interval is Student's; both "
        "take values to be near-normal."
    )
    if row["null"]:
        yield f"The null hypothesis is that {row['null']}."
    if stated := mine.get("certificate"):
        yield _certificate(stated)
    if row["claim"] == "these subjects":
        reason = str(mine.get("claim_reason", "")).strip().rstrip(".")
        because = f", because: {reason}" if reason else ""
        yield f"The test speaks of these subjects only, as was declared{because}."
    if row["claim"] == "single subjects":
        yield (
            "It speaks of a population mean only if the effects that choose and those that are "
            "tested are uncorrelated across subjects."
        )


def _certificate(stated: Mapping[str, Any]) -> str:
    weights = [", ".join(f"{k} {v:g}" for k, v in stated[key].items())
               for key in ("chosen", "tested")]  # fmt: skip
    rho = f", rho = {stated['rho']:g}" if stated.get("noise") == "ar1" else ""
    return (
        f"The contrast that chose ({weights[0]}) and the tested one ({weights[1]}) were shown to "
        f"be uncorrelated within and between subjects, from the design {stated['design']}, "
        f"{stated['noise']} noise{rho}, {stated.get('fit', 'ordinary')} least squares, and the "
        f"covariance {stated['between']} of the regressors' effects between subjects "
        f"({stated['source']})."
    )


def _how(run: RunFolder, row: Row) -> str:
    mine, plan = region(run, row), str(row["plan"])
    if plan == "localizer":
        return _LOCALIZER[mine.get("mask_of", "own")]
    halves = _HALVES[mine.get("halves", "odd-even")]
    how = _HOW[plan].format(fold_column=mine.get("fold_column"), halves=halves)
    told = [f"{row['n_folds']} folds"] if plan in FOLDED else []
    if plan in _DEALT:
        told.append(f"dealt at random by the seed {run.manifest['seed']}")
    if "stratify" in mine:
        told.append(f"spread evenly by {mine['stratify']}")
    return f"{how} ({', '.join(told)})" if told else how


def _rule(row: Row) -> str:
    """The rule without who chose, which is said before it."""
    rule = str(row["rule"])
    return rule if row["plan"] in (*FOLDED, "exploratory") else rule.partition(": ")[2]


def _on_empty(mine: Mapping[str, Any], plan: str) -> str:
    kind = mine.get("on_empty", "empty")
    if kind == "strongest":
        stand = f"the {mine.get('k')} strongest voxels stand in"
    elif kind == "stop":
        stand = "the run ends"
    elif plan in (*FOLDED, *OF_RUNS) or (plan == "localizer" and mine.get("mask_of") != "group"):
        stand = "the value counts as 0"
    else:
        stand = "nothing is read"
    return f"Where the rule finds nothing, {stand}."


def _wanted(run: RunFolder, row: Row) -> dict[str, Any]:
    return {**data(run).get("select", {}), **region(run, row).get("select", {})}


def _taken_away(run: RunFolder, row: Row) -> tuple[dict[str, Any], dict[str, Any], float]:
    """What `minus` and `baseline` name, and the value of no effect."""
    of = data(run)
    minus = region(run, row).get("minus", of.get("minus", {}))
    return minus, of.get("baseline", {}), float(of.get("null_value", 0))


def _people(run: RunFolder, row: Row) -> tuple[int, int]:
    """How many subjects a region was read in, and as how many they count."""
    subs = {str(one["sub"]) for one in run.values if one["roi"] == row["roi"]}
    if row["parcel"] is None:
        return len(subs), int(row["n_subjects"] or 0)
    # A label may be lacked by some, so that it does not tell how many there are.
    units = zip(run.record["units"], run.record["people"], strict=True)
    of = {unit.removeprefix("sub-").partition("_")[0]: person for unit, person in units}
    return len(subs), len({of.get(sub, sub) for sub in subs})


def _several(run: RunFolder, row: Row, *sides: str) -> bool:
    """Whether somebody has several maps on one of the sides of a region."""
    return any(_counts(run, row, "n_maps", s) > _counts(run, row, "n_subjects", s) for s in sides)


def _counts(run: RunFolder, row: Row, name: str, side: str = "tested") -> int:
    mine = [c for c in run.cells if c["roi"] == row["roi"] and c["side"] == side]
    return sum(int(cell[name] or 0) for cell in mine)


def _of(told: str, wanted: Mapping[str, Any]) -> str:
    """What a table says of some maps, and the columns that it leaves out."""
    more = {
        column: values
        for column, values in wanted.items()
        if column not in _ENTITIES or f"{_WORDS.get(column, column)} " not in told
    }
    if told == "all of the table":
        return _columns(more) if more else "all rows of the study table"
    return f"{told}, {_columns(more)}" if more else told


def _columns(wanted: Mapping[str, Any]) -> str:
    return ", ".join(f"{_WORDS.get(c, c)} {_values(values)}" for c, values in wanted.items())


def _values(values: Any) -> str:
    """A value, or one of several.

    Examples
    --------
    >>> _values("after"), _values([4, 10]), _values(["a", "b", "c"])
    ('after', '4 or 10', 'a, b or c')
    """
    each: Sequence[Any] = values if isinstance(values, list) else [values]
    *most, last = [str(one) for one in each[:_MOST]] or [""]
    more = f" and {len(each) - _MOST} more" if len(each) > _MOST else ""
    return (f"{', '.join(most)} or {last}" if most else last) + more


def _all(given: Any, key: str) -> Iterator[Any]:
    """What stands under a key of a region of STUDY.toml, and of its parts."""
    if isinstance(given, dict):
        if key in given:
            yield given[key]
        for name, part in given.items():
            if name != key:
                yield from _all(part, key)
    elif isinstance(given, list):
        for one in given:
            yield from _all(one, key)
