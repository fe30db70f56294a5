"""What the page says of a result before it shows one: how far it may be believed, and why."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from ...nodes.contour import FLAG
from ...nodes.results import estimate_texts, p_text
from .folder import Row, called, is_biased, number


@dataclass(frozen=True)
class Note:
    """Something that stands above all results.

    Parameters
    ----------
    kind : {"waiver", "certificate", "look", "history", "shape", "verdict"}
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


def found_in(row: Row) -> str:
    """In how many folds (or own masks) the rule found something, unless it did in all.

    Examples
    --------
    >>> found_in({"n_folds": "24", "n_empty": "0", "n_replaced": "22", "dice": "0.1"})
    'found in 2 of 24 folds; the strongest voxels stood in for the others'
    >>> found_in({"n_folds": "24", "n_empty": "0", "n_replaced": "0"})
    ''
    """
    n, empty, replaced = (number(row, k) or 0 for k in ("n_folds", "n_empty", "n_replaced"))
    if not empty + replaced:
        return ""
    of = "folds" if row.get("dice") or row.get("noise_dice") else "masks"
    filled = "the strongest voxels stood in for" if replaced else "the value counts as 0 in"
    return f"found in {n - empty - replaced:.0f} of {n:.0f} {of}; {filled} the others"


def headline(tests: Sequence[Row]) -> str:
    """The first sentence of the page.

    Examples
    --------
    >>> headline([{"biased": "true", "p": None}])
    'Nothing is tested. 1 value is exploratory and biased, which is no evidence.'
    """
    tested = [row for row in tests if not is_biased(row) and row["p"] is not None]
    biased = [row for row in tests if is_biased(row)]
    n = len(tested)
    if not n:
        said = "Nothing is tested."
    else:
        ways = dict.fromkeys(independence(row) for row in tested)
        of = "The one test" if n == 1 else f"All {n} tests"
        said = f"{of}: {_lower(next(iter(ways)))}"
        if len(ways) > 1:
            told = [
                f"{sum(independence(row) == way for row in tested)} \N{MULTIPLICATION SIGN} "
                f"{_lower(way).rstrip('.')}"
                for way in ways
            ]
            said = f"{n} tests: {'; '.join(told)}."
    if biased:
        are = "value is" if len(biased) == 1 else "values are"
        said += f" {len(biased)} {are} exploratory and biased, which is no evidence."
    return said


def _lower(text: str) -> str:
    return text[:1].lower() + text[1:]


def notes(tests: Sequence[Row]) -> list[Note]:
    """What narrows or burdens the results: waivers, certificates, later looks, shapes."""
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
    again = {called(row): looks for row in tested if (looks := number(row, "looks") or 1) > 1}
    if again:
        told = listed([f"{name} ({looks:.0f} looks)" for name, looks in again.items()])
        made.append(
            Note(
                "look",
                f"More than one look: {told}",
                "Other regions of this run (exploratory ones count), or earlier runs, read some "
                "of these voxels in some of these data. Each p-value is that of its own look and "
                "is not adjusted for the others.",
            )
        )
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
    return made


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
