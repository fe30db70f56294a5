"""The methods paragraphs: what was done, in words, and whose methods these are.

They are made from how the run was set up, never from what came out: they change when the
procedure does, and only then.
"""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Sequence
from functools import partial
from typing import Any

from .folder import Row, RunFolder, called, is_biased
from .stated import FOLDED, chosen, data, maps_made, place, tested, tested_maps, value
from .words import listed, names_of

_MOST_LEFT = 60  # maps that were left out, by name

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
    "Greenhouse & Geisser 1959": "Greenhouse SW, Geisser S (1959). On methods in the analysis of "
    "profile data. Psychometrika 24, 95-112.",
    "Dice 1945": "Dice LR (1945). Measures of the amount of ecologic association between "
    "species. Ecology 26, 297-302.",
}
# How a question says that a region was chosen.
_ASKED = {
    "a-priori": "fixed beforehand",
    "leave-one-subject-out": "chosen leaving out one subject at a time",
    "k-fold": "chosen holding out the subjects of one fold at a time",
    "split-half": "chosen in one half of the subjects, for the other",
    "given-folds": "chosen holding out the subjects of one fold of the study table at a time",
    "leave-one-run-out": "chosen in each subject on all runs but one, for that run",
    "split-half-runs": "chosen in each subject on one half of the runs, for the other half",
    "localizer": "chosen on other data than those that were tested",
    "orthogonal-contrast": "chosen on another contrast of the same data",
}


def methods_text(run: RunFolder) -> str:
    """The paragraphs and their references, wrapped, ending in a newline."""
    told = [" ".join(sentences) for sentences in _paragraphs(run)]
    cited = [full for name, full in _CITED.items() if any(name in text for text in told)]
    wrapped = partial(textwrap.fill, width=96, break_on_hyphens=False)  # names of files stay whole
    parts = [wrapped(text) for text in told]
    if cited:
        parts += ["References", *(wrapped(one, subsequent_indent="  ") for one in cited)]
    return "\n\n".join(parts) + "\n"


def asked(run: RunFolder) -> list[str]:
    """What the tests ask, a sentence for those that ask the same of the same maps."""
    groups: dict[tuple[object, ...], list[Row]] = {}
    for row in (row for row in run.tests if not is_biased(row)):
        mine = run.region(str(row["roi"]))
        question = "What is the mean effect"
        if "score" in mine:
            question = f"Do values go with {mine['score']}"
        elif "compare" in mine:
            first, second = mine["compare"].get("first"), mine["compare"].get("second")
            question = f"Do {first} and {second} differ"
        key = (question, row["plan"], tested_maps(run, row), row["n_subjects"])
        groups.setdefault(key, []).append(row)
    return [
        f"{question} in {names_of(rows)}, {_ASKED.get(str(plan), plan)}? "
        f"{n}\N{NO-BREAK SPACE}subjects; {maps}."
        for (question, plan, maps, n), rows in groups.items()
    ]


def _paragraphs(run: RunFolder) -> Iterator[list[str]]:
    """One for every group of regions that were treated alike, and one for all of them."""
    rois: dict[str, list[Row]] = {}
    for row in run.tests:
        rois.setdefault(str(row["roi"]), []).append(row)
    alike: dict[tuple[str, ...], list[list[Row]]] = {}
    for rows in rois.values():
        told = (*_treated(run, rows, within=""), "labels" * (len(rows) > 1))
        alike.setdefault(told, []).append(rows)
    # What is the same of every region is said once.
    shared = [
        sentence
        for sentence in next(iter(alike), ())[1:-1]
        if len(alike) > 1 and all(sentence in told for told in alike)
    ]
    if shared:
        yield ["Of every region this holds.", *shared]
    for group in alike.values():
        places = [f"{place(run, rows[0])}" for rows in group]
        if len(dict.fromkeys(places)) > 1:
            names = [str(rows[0]["roi"]) for rows in group]
            places = [f"{where} for {name}" for where, name in zip(places, names, strict=True)]
        within = "; ".join(dict.fromkeys(places))
        rows = [row for rows in group for row in rows]
        first, *rest = _treated(run, group[0], within=within)
        own = [sentence for sentence in rest if sentence not in shared]
        yield [f"{_regions(rows)} {_were(rows)} {first}", *own]
    yield list(_of_all(run, [row for row in run.tests if not is_biased(row)]))


def _treated(run: RunFolder, rows: Sequence[Row], *, within: str) -> Iterator[str]:
    """All that is said of a region, but its name and place."""
    row = next((row for row in rows if row["p_kind"]), rows[0])
    yield from chosen(run, row, within=within)
    yield from maps_made(run, row)
    yield from value(run, row)
    if is_biased(row):
        yield (
            "A region that is read in the data that chose it has a value inflated by selection: "
            "it was neither tested nor given an interval."
        )
        return
    ns = sorted({int(one["n_subjects"] or 0) for one in rows})
    n = f"{ns[0]} subjects" if len(ns) == 1 else f"{ns[0]} to {ns[-1]} subjects"
    yield from tested(run, row, n)


def _of_all(run: RunFolder, rows: list[Row]) -> Iterator[str]:
    of_study = data(run)
    if of_study.get("zeros_are_missing", True):
        yield "In all maps exact zeros count as missing, as do NaN and infinities."
    else:
        yield "In all maps NaN and infinities count as missing; zeros are values."
    left = run.manifest["left_out"]
    if left:
        told = [f"{name} ({reason})" for name, reason in left.items()]
        yield f"Left out were {listed(told, _MOST_LEFT)}."
    yield f"Random numbers are keyed by the seed {run.manifest['seed']}."
    if any(row["p_holm"] is not None for row in rows):
        families = list(dict.fromkeys(str(row["roi"]) for row in rows if row["parcel"] is not None))
        over = ["over the tested regions"] if any(row["parcel"] is None for row in rows) else []
        over += [f"over the labels of {name}, a family of their own" for name in families]
        yield f"Adjusted p-values are those of Holm 1979, {listed(over)}."
    if any(row["p_max"] is not None for row in rows):
        yield (
            "Over the regions that were exchanged together, p for any finding as large compares "
            "each statistic with the largest of every exchange (Westfall & Young 1993)."
        )
    compared = [row for row in rows if "compare" in run.region(str(row["roi"]))]
    if any(row.get("g") is not None for row in rows if row not in compared):
        yield (
            "Standardised effects are the mean over the standard deviation of the values (dz), "
            "and with the correction for small samples of Hedges 1981 (g)."
        )
    if any(row.get("g") is not None for row in compared):
        yield (
            "The standardised difference of two groups is that of their means over the pooled "
            "standard deviation, with the correction for small samples of Hedges 1981 (g)."
        )
    if any(row["plan"] in FOLDED for row in rows):
        yield (
            "How alike the regions of the folds are is the mean overlap of their pairs (Dice "
            "1945), beside what it is under exchanges, where nothing but noise is found."
        )
    for one in run.study.get("comparison", []):
        yield _compared(run, one)
    if any(row.get("contour") is not None for row in rows):
        yield (
            "Of every mask from outside it was checked whether its boundary follows the contour "
            "of the group t of the tested maps, as that of a mask made from them does."
        )
    version = run.manifest["versions"]["sequester"]
    yield (
        "Before anything ran, what every region was chosen on was compared with what it was to "
        f"be tested on, for every map and every fold (sequester {version})."
    )


def _compared(run: RunFolder, one: dict[str, Any]) -> str:
    """How regions were compared with each other."""
    kind, names = str(one["kind"]), [str(name) for name in one["rois"]]
    row = next((row for row in run.comparisons if row["name"] == one["name"]), {})
    by = str(row.get("p_kind"))
    if by.startswith("F,"):  # it goes on with the epsilon that came out
        by = "F, with degrees of freedom corrected by the epsilon of Greenhouse & Geisser 1959"
    said = {
        "difference": f"{names[0]} minus {names[-1]} was tested",
        "equivalence": f"{' minus '.join(names)} was tested for equivalence with zero, within "
        f"{one.get('smallest')} either way (90 % interval),",
        "anova": f"Whether {listed(names, 1000)} differ was tested",
        "interaction": f"The interaction of {' by '.join('/'.join(f) for f in one['factors'])} in "
        f"{listed(names, 1000)} was tested, with simple effects adjusted by Holm 1979,"
        if kind == "interaction"
        else "",
    }[kind]
    return f"{said} within subjects ({one['name']}; p by {by})."


def _regions(rows: list[Row]) -> str:
    names = list(dict.fromkeys(str(row["roi"]) for row in rows))
    if len(names) == 1 and len(rows) > 1:
        return f"The {len(rows)} labels of {names[0]}, each a region of its own,"
    if len(names) == 1:
        return f"The region {called(rows[0])}"
    return f"The regions {listed(names, 1000)}"


def _were(rows: list[Row]) -> str:
    return "was" if len(rows) == 1 else "were"
