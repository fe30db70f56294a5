"""What the page says of a result before it shows one: how far it may be believed, and why."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from ...nodes.contour import FLAG
from ...nodes.results import estimate_texts, p_text
from .folder import Row, called, is_biased, number

LITTLE = 0.8  # a mask of which somebody covers less is said to be covered badly


@dataclass(frozen=True)
class Note:
    """Something that stands above all results.

    Parameters
    ----------
    kind : {"waiver", "certificate", "look", "history", "shape", "coverage", "verdict"}
    head, text : str
    """

    kind: str
    head: str
    text: str


def independence(row: Row) -> str:
    """The level of independence of a test, in a sentence.

    Examples
    --------
    >>> independence({"verdict": "apart", "level": "subject", "plan": "k-fold"})
    'The region was chosen without any data of the subjects it is tested on.'
    """
    if is_biased(row):
        return "None: the region was chosen and read on the same data."
    verdict, level = row.get("verdict"), row.get("level")
    if verdict == "certified":
        return (
            "The region was chosen on the tested data, by a contrast that a certificate shows to "
            "be orthogonal to the tested one."
        )
    if row.get("claim") == "these subjects":
        return (
            "The region was chosen on other data of the tested subjects: what persists in each is "
            "in both. The test speaks of these subjects only."
        )
    if level == "run":
        return (
            "The region was chosen on other data of the same subject: the noise of the tested data "
            "is not in it, what persists in the subject is."
        )
    if row["plan"] == "a-priori":
        return "The region came from outside, as declared: no data of this study chose it."
    if level == "subject":
        return "The region was chosen without any data of the subjects it is tested on."
    return "Not stated by this run."


def _in_brief(row: Row) -> str:
    """The same in a few words, for a page on which tests have several of them."""
    if row.get("verdict") == "certified":
        return "chosen on the tested data, under a certificate"
    if row.get("claim") == "these subjects":
        return "chosen on other data of the tested subjects"
    if row.get("level") == "run":
        return "chosen on other data of the same subject"
    if row["plan"] == "a-priori":
        return "from outside the study"
    return "chosen without the tested subjects" if row.get("level") == "subject" else "not stated"


@dataclass(frozen=True)
class Claim:
    """Tests of which the same may be believed.

    Parameters
    ----------
    names : str
        Of the regions or labels.
    independence, null, searched, verdict, level : str
    """

    names: str
    independence: str
    null: str
    searched: str
    verdict: str
    level: str


def claims(tested: Sequence[Row]) -> list[Claim]:
    """What may be believed of each test; those of which the same holds are told together."""
    alike: dict[tuple[object, ...], list[Row]] = {}
    for row in tested:
        key = (independence(row), row["null"], row["verdict"], row["level"])
        alike.setdefault(key, []).append(row)
    return [
        Claim(
            names_of(rows),
            independence(rows[0]),
            str(rows[0]["null"] or ""),
            "; ".join(dict.fromkeys(str(row["search"]) for row in rows)),
            str(rows[0]["verdict"] or ""),
            str(rows[0]["level"] or ""),
        )
        for rows in alike.values()
    ]


def names_of(rows: Sequence[Row]) -> str:
    """Regions by name, of labels how many there are.

    Examples
    --------
    >>> labels = [{"roi": "Beds", "parcel": str(i), "parcel_name": None} for i in range(3)]
    >>> names_of([{"roi": "Arbor", "parcel": None}, *labels])
    'Arbor and Beds (3 labels)'
    """
    many: dict[str, int] = {}
    for row in rows:
        name = str(row["roi"])
        many[name] = many.get(name, 0) + (row.get("parcel") is not None)
    labels = {n: f" ({k} label{'s' * (k > 1)})" if k else "" for n, k in many.items()}
    return listed([name + labels[name] for name in many], 8)


def found_in(row: Row) -> str:
    """In how many folds (or own masks) the rule found something, unless it did in all.

    Examples
    --------
    >>> found_in({"n_folds": "24", "n_empty": "0", "n_replaced": "22", "dice": "0.1"})
    'found in 2 of 24 folds; the strongest voxels stood in for the others'
    >>> found_in({"n_folds": "24", "n_empty": "0", "n_replaced": "0"})
    ''
    >>> found_in({"n_folds": "20", "n_empty": "3", "n_replaced": "0", "dice": "0.1"})
    'found in 17 of 20 folds; the value counts as 0 in the others: not the size of an effect'
    """
    n, empty, replaced = (number(row, k) or 0 for k in ("n_folds", "n_empty", "n_replaced"))
    if not empty + replaced:
        return ""
    if not n:
        return "the rule found nothing; the strongest voxels stood in"
    of = "folds" if row.get("dice") or row.get("noise_dice") else "masks"
    filled = "the strongest voxels stood in for" if replaced else "the value counts as 0 in"
    size = ": not the size of an effect" if empty else ""
    return f"found in {n - empty - replaced:.0f} of {n:.0f} {of}; {filled} the others{size}"


def headline(tests: Sequence[Row]) -> str:
    """The first sentence of the page.

    Examples
    --------
    >>> headline([{"biased": "true", "p": None, "estimate": "1.2"}])
    'Nothing is tested. 1 value is exploratory and biased, which is no evidence.'
    >>> headline([{"biased": "true", "p": None, "estimate": None}])
    'Nothing is tested. 1 exploratory look found no region.'
    """
    tested = [row for row in tests if not is_biased(row) and row["p"] is not None]
    looked = [row for row in tests if is_biased(row)]
    biased = [row for row in looked if number(row, "estimate") is not None]
    n = len(tested)
    if not n:
        said = "Nothing is tested."
    else:
        ways: dict[str, list[Row]] = {}
        for row in tested:
            ways.setdefault(independence(row), []).append(row)
        if len(ways) == 1:
            of = "The one test" if n == 1 else f"All {n} tests"
            said = f"{of}: {_lower(next(iter(ways)))}"
        else:
            brief = [f"{names_of(rows)}: {_in_brief(rows[0])}" for rows in ways.values()]
            said = f"{n} tests. {'; '.join(brief)}."
    if biased:
        are = "value is" if len(biased) == 1 else "values are"
        said += f" {len(biased)} {are} exploratory and biased, which is no evidence."
    if empty := len(looked) - len(biased):
        looks = "exploratory look" if empty == 1 else "exploratory looks"
        said += f" {empty} {looks} found no region."
    return said


def _lower(text: str) -> str:
    return text[:1].lower() + text[1:]


def notes(tests: Sequence[Row], beside: Sequence[str] = ()) -> list[Note]:
    """What narrows or burdens the results: waivers, certificates, later looks, shapes.

    `beside` are the ledgers beside the study's own that were counted too.
    """
    tested = [row for row in tests if not is_biased(row)]
    made = []
    waived = [row for row in tested if row["claim"] == "these subjects"]
    if waived:
        reasons = [
            f"{called(row)}, as stated: {row['claim_reason']}."
            for row in waived
            if row.get("claim_reason")
        ]
        said = (
            "The region was chosen on other data of the tested subjects. The result speaks of "
            "these subjects only and overstates the mean of the population they come from."
        )
        made.append(
            Note(
                "waiver",
                f"A narrower claim was declared: {listed([called(row) for row in waived])}",
                " ".join([said, *(reasons or ["No reason is stated."])]),
            )
        )
    certified = [called(row) for row in tested if row["verdict"] == "certified"]
    if certified:
        made.append(
            Note(
                "certificate",
                f"A certificate was relied on: {listed(certified)}",
                "The region was chosen on the tested data by another contrast. That this does no "
                "harm rests on the stated design and covariance; the sentence beside the result "
                "says on what.",
            )
        )
    made += _looks(tested, beside)
    late = [(called(row), row["history"]) for row in tested if row.get("history")]
    if late:
        made.append(
            Note(
                "history",
                f"Not settled before looking: {listed([name for name, _ in late])}",
                " ".join(dict.fromkeys(f"{name}: {said}" for name, said in late)),
            )
        )
    follows = [
        called(row) for row in tested if (p := number(row, "contour_p")) is not None and p <= FLAG
    ]
    if follows:
        made.append(
            Note(
                "shape",
                f"Shaped like the study's own result: {listed(follows)}",
                "Where it ends, the study's own group map falls off, as it does at a mask made "
                "from it, whatever the region was declared to be. The sentence beside the result "
                "says more. A true effect that fills the region looks like that too.",
            )
        )
    if low := low_coverage(tested):
        made.append(
            Note(
                "coverage",
                f"Masks that are not covered: {listed(low)}",
                "Somebody has data in so little of a mask. Their value is that of another place "
                "than the others' values. min_coverage in [data] asks for more.",
            )
        )
    return made


def low_coverage(tested: Sequence[Mapping[str, Any]]) -> list[str]:
    """The regions in which somebody has data in little of a mask, and in how much.

    Examples
    --------
    >>> label = {"parcel": None, "parcel_name": None}
    >>> low_coverage([label | {"roi": "Arbor", "coverage": "0.33"},
    ...               label | {"roi": "Brook", "coverage": 0.8}])
    ['Arbor (33 %)']
    """
    least: dict[str, float] = {}
    for row in tested:
        share = row.get("coverage")
        if share is not None and float(share) < LITTLE:
            name = str(row["roi"])
            least[name] = min(least.get(name, 1.0), float(share))
    return [f"{name} ({math.floor(100 * share)} %)" for name, share in least.items()]


def _looks(tested: Sequence[Row], beside: Sequence[str]) -> Iterator[Note]:
    """Tests whose voxels and data others have read too: in earlier runs, or in this one alone."""
    earlier, here = [], []
    for row in tested:
        looks = int(number(row, "looks") or 1)
        mine = number(row, "looks_of_run")
        if looks > 1 and mine == looks:
            here.append(f"{called(row)} ({looks})")
        elif looks > 1:
            told = "" if mine is None else f", {looks - int(mine)} of them in earlier runs"
            earlier.append(f"{called(row)} ({looks} looks{told})")
    if earlier:
        yield Note(
            "look",
            f"Looked at before: {listed(earlier)}",
            "Earlier runs read some of these voxels in some of these data. Each p-value is that "
            "of its own look and is not adjusted for the others, whose results were known."
            + (f" Counted too: the looks in {listed(beside)}." if beside else ""),
        )
    if here:
        yield Note(
            "look",
            f"Read by several regions of this run: {listed(here)}",
            "Each region is a look of its own, an exploratory one too, and these share voxels and "
            "data. No earlier run is counted. Each p-value is that of its own look; p Holm covers "
            "all tested regions of this run.",
        )


def listed(names: Sequence[str], most: int = 6) -> str:
    """Names in a row; many are cut and counted.

    Examples
    --------
    >>> listed(["Arbor", "Brook", "Cinder"]), listed(list("abcdefgh"))
    ('Arbor, Brook and Cinder', 'a, b, c, d, e, f and 2 more')
    """
    if len(names) > most:
        return f"{', '.join(names[:most])} and {len(names) - most} more"
    return " and ".join([", ".join(names[:-1]), names[-1]] if len(names) > 1 else names)


@dataclass(frozen=True)
class Found:
    """What came out, in a line.

    Parameters
    ----------
    name, estimate, interval, p : str
    note : str
        What must be known with it.
    """

    name: str
    estimate: str
    interval: str
    p: str
    note: str


def findings(tested: Sequence[Row]) -> list[Found]:
    """Every test in a line."""
    return [
        Found(
            called(row),
            estimate_cells(row)[0],
            estimate_cells(row)[1],
            "no test" if (p := number(row, "p")) is None else p_text(p),
            found_in(row),
        )
        for row in tested
    ]


def estimate_cells(row: Row) -> tuple[str, str]:
    """An estimate and its interval as a paper prints them; of a biased value the value alone.

    Examples
    --------
    >>> row = {"estimate": "1.236", "interval_low": "0.7819", "interval_high": "1.69"}
    >>> estimate_cells(row), estimate_cells({"estimate": "0.42857", "interval_low": None})
    (('1.24', '0.78 to 1.69'), ('0.429', ''))
    """
    value, low, high = (number(row, k) for k in ("estimate", "interval_low", "interval_high"))
    if value is None:
        return "none", ""
    if low is None or high is None:
        return plain(value), ""
    made = estimate_texts(value, low, high)
    return minus(made[0]), f"{minus(made[1])} to {minus(made[2])}"


def plain(value: float, digits: int = 3) -> str:
    """A number to so many significant digits, never in powers of ten for everyday sizes.

    Examples
    --------
    >>> plain(0.42857), plain(1234.5), plain(-0.05), plain(2.0)
    ('0.429', '1234', '\N{MINUS SIGN}0.05', '2')
    """
    text = f"{value:.{digits}g}"
    return minus(f"{value:.0f}" if "e+" in text and abs(value) < 1e7 else text)


def minus(text: str) -> str:
    """A number's text with a true minus sign."""
    return text.replace("-", "\N{MINUS SIGN}")


def p_cell(row: Row, name: str = "p") -> str:
    """A p-value for a table: without "p =".

    Examples
    --------
    >>> p_cell({"p": "0.0005"}), p_cell({"p": "0.0312"}), p_cell({"p": None})
    ('< .001', '.031', '')
    """
    p = number(row, name)
    return "" if p is None else p_text(p).removeprefix("p ").removeprefix("= ")
