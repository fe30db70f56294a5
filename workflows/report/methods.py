"""The methods paragraphs: what was done, in words, and whose methods these are.

They are made from how the run was set up, never from what came out: they change when the
procedure does, and only then.
"""

from __future__ import annotations

import textwrap
from collections.abc import Iterator
from typing import Any

from .folder import Row, RunFolder, called, is_biased
from .words import listed

_CITED = {
    "Phipson & Smyth 2010": "Phipson B, Smyth GK (2010). Permutation p-values should never be "
    "zero. Statistical Applications in Genetics and Molecular Biology 9(1), article 39.",
    "Nadeau & Bengio 2003": "Nadeau C, Bengio Y (2003). Inference for the generalization error. "
    "Machine Learning 52, 239-281.",
    "Holm 1979": "Holm S (1979). A simple sequentially rejective multiple test procedure. "
    "Scandinavian Journal of Statistics 6, 65-70.",
    "Westfall & Young 1993": "Westfall PH, Young SS (1993). Resampling-Based Multiple Testing. "
    "Wiley.",
    "Freedman & Lane 1983": "Freedman D, Lane D (1983). A nonstochastic interpretation of "
    "reported significance levels. Journal of Business & Economic Statistics 1, 292-298.",
    "Hedges 1981": "Hedges LV (1981). Distribution theory for Glass's estimator of effect size "
    "and related estimators. Journal of Educational Statistics 6, 107-128.",
    "Spearman 1904": "Spearman C (1904). The proof and measurement of association between two "
    "things. American Journal of Psychology 15, 72-101.",
    "Dice 1945": "Dice LR (1945). Measures of the amount of ecologic association between "
    "species. Ecology 26, 297-302.",
}
_HOW = {
    "leave-one-subject-out": "leaving out one subject at a time",
    "k-fold": "holding out the subjects of one fold at a time",
    "split-half": "choosing in one half of the subjects for the other",
    "given-folds": "holding out the subjects of one fold of the study table at a time",
    "leave-one-run-out": "in each subject on all runs but one, for that run",
    "split-half-runs": "in each subject on one half of the runs, for the other half",
    "localizer": "on other data than those that were tested",
    "orthogonal-contrast": "on another contrast of the same data",
}
_FOLDED = ("leave-one-subject-out", "k-fold", "split-half", "given-folds")
_VALUES = {
    "mean": "mean",
    "median": "median",
    "weighted": "weighted mean",
    "component": "score on the first principal component",
}


def methods_text(run: RunFolder) -> str:
    """The paragraphs and their references, wrapped, ending in a newline."""
    told = [" ".join(sentences) for sentences in _paragraphs(run)]
    cited = [full for name, full in _CITED.items() if any(name in text for text in told)]
    parts = [textwrap.fill(text, 96) for text in told]
    if cited:
        parts += ["References", *(textwrap.fill(one, 96, subsequent_indent="  ") for one in cited)]
    return "\n\n".join(parts) + "\n"


def _paragraphs(run: RunFolder) -> Iterator[list[str]]:
    """One for every group of regions that were treated alike, and one for all of them."""
    tested = [row for row in run.tests if not is_biased(row)]
    for group in _alike(run, tested):
        yield [*_chosen(run, group), *_tested(run, group)]
    yield list(_of_all(run, tested))


def _of_all(run: RunFolder, tested: list[Row]) -> Iterator[str]:
    if any(row["p_holm"] is not None for row in tested):
        yield "Adjusted p-values over the family are those of Holm 1979."
    if any(row["p_max"] is not None for row in tested):
        yield (
            "Over the regions that were exchanged together, p for any finding as large compares "
            "each statistic with the largest of every exchange (Westfall & Young 1993)."
        )
    if any(row.get("g") is not None for row in tested):
        yield (
            "Standardised effects are the mean over the standard deviation of the values (dz), "
            "and with the correction for small samples of Hedges 1981 (g)."
        )
    if any(row["plan"] in _FOLDED for row in tested):
        yield (
            "How alike the regions of the folds are is the mean overlap of their pairs (Dice "
            "1945), beside what it is under exchanges, where nothing but noise is found."
        )
    looked = [row for row in run.tests if is_biased(row)]
    if looked:
        yield (
            f"{_regions(looked)} {_were(looked)} chosen and read on the same data; such values "
            "are inflated by selection and were neither tested nor given an interval."
        )
    for one in run.study.get("comparison", []):
        yield f"Regions {listed(one.get('rois', []))} were compared ({one.get('kind', '')})."
    version = run.manifest["versions"]["sequester"]
    yield (
        "Before anything ran, what every region was chosen on was compared with what it was to "
        f"be tested on, for every map and every fold (sequester {version})."
    )


def _alike(run: RunFolder, tested: list[Row]) -> list[list[Row]]:
    """Rows that were treated alike, told together."""
    keys = (
        "plan", "tested", "chosen_on", "rule", "value", "scale", "null_value", "claim",
        "n_subjects", "p_kind", "sided", "interval_kind", "interval_method", "n_folds",
    )  # fmt: skip
    groups: dict[tuple[object, ...], list[Row]] = {}
    for row in tested:
        mine = run.region(str(row["roi"]))
        more = {
            k: mine.get(k) for k in ("on_empty", "k", "compare", "score", "covariates", "stratify")
        }
        key = (*(row[name] for name in keys), row["parcel"] is not None, repr(more))
        groups.setdefault(key, []).append(row)
    return list(groups.values())


def _chosen(run: RunFolder, group: list[Row]) -> Iterator[str]:
    """How these regions were chosen."""
    row, mine = group[0], run.region(str(group[0]["roi"]))
    search = listed(list(dict.fromkeys(str(one["search"]) for one in group)))
    if row["plan"] == "a-priori":
        where = listed(list(dict.fromkeys(_origins(mine))))
        from_outside = f" (source: {where})" if where else ""
        yield f"{_regions(group)} {_were(group)} fixed beforehand: {search}{from_outside}."
    else:
        how = _HOW.get(str(row["plan"]), str(row["plan"]))
        folds = f", in {row['n_folds']} folds" if row["plan"] in _FOLDED else ""
        head, _, rule = str(row["rule"]).rpartition(": ")
        how += f" ({head})" if head else ""
        yield f"{_regions(group)} {_were(group)} chosen {how}{folds}: {rule}, within {search}."
        if row["chosen_on"]:
            yield f"The maps that chose were: {row['chosen_on']}."
        empty = mine.get("on_empty", "empty")
        if empty == "strongest":
            yield f"Where the rule found nothing, the {mine.get('k')} strongest voxels stood in."
        elif empty == "empty":
            yield "Where the rule found nothing, the value counted as 0."
    value = _VALUES.get(str(row["value"]), str(row["value"]))
    scale = "" if row["scale"] == "effect maps" else f", in {row['scale']}"
    null = float(row["null_value"] or 0)
    less = f", less {null:g}" if null else ""
    yield (
        f"Each subject's value is the {value} of their map ({row['tested']}) in the region{scale}"
        f"{less}."
    )


def _tested(run: RunFolder, group: list[Row]) -> Iterator[str]:
    """How their values were tested."""
    row, mine = group[0], run.region(str(group[0]["roi"]))
    given = ", ".join(mine.get("covariates", []))
    beside = f", given {given} (Freedman & Lane 1983)" if given else ""
    if "score" in mine:
        yield f"Held-out values of the {row['n_subjects']} subjects were correlated with " + (
            f"{mine['score']}{beside}."
        )
        if "reliability" in mine:
            yield (
                "The largest correlation that the stated reliabilities allow is given with it "
                "(Spearman 1904)."
            )
    elif "compare" in mine:
        first, second = mine["compare"].get("first"), mine["compare"].get("second")
        yield (
            f"Held-out values of {first} and {second} were compared by the difference of their "
            f"means{beside}."
        )
    else:
        yield f"The estimate is the mean over {row['n_subjects']} subjects."
    if row["p_kind"] is None:
        yield "No p-value was computed."
    elif str(row["p_kind"]).startswith("whole-procedure"):
        yield (
            f"p is by {row['p_kind']}, one-sided ({row['sided']}): each time every fold chose "
            "again, and the studentised statistic was compared (Phipson & Smyth 2010)."
        )
    else:
        yield f"p is by {row['p_kind']}."
    if row["interval_method"]:
        yield f"The 95 % interval is {row['interval_kind']}: {row['interval_method']}."
    if row["claim"] == "these subjects":
        yield "The test speaks of these subjects only, as was declared."


def _origins(region: Any) -> Iterator[str]:
    """The declared sources of a region of STUDY.toml, and of its parts."""
    if isinstance(region, dict):
        if isinstance(region.get("origin"), str):
            yield region["origin"]
        for key, value in region.items():
            if key != "origin":
                yield from _origins(value)
    elif isinstance(region, list):
        for one in region:
            yield from _origins(one)


def _regions(rows: list[Row]) -> str:
    names = list(dict.fromkeys(str(row["roi"]) for row in rows))
    if len(names) == 1 and len(rows) > 1:
        return f"The {len(rows)} labels of {names[0]}"
    if len(names) == 1:
        return f"The region {called(rows[0])}"
    return f"The regions {listed(names, 1000)}"


def _were(rows: list[Row]) -> str:
    return "was" if len(rows) == 1 else "were"
