"""How many subjects a study needs: by formula, or from an earlier run.

A sample planned on the effect that was found, where it was found, would be too small: only
held-out and a-priori results are a basis, and the lower end of their interval stands beside them.
"""

from __future__ import annotations

import csv
import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np

from ..nodes.errors import InputError
from ..nodes.power import (
    Correlation,
    OneSample,
    Power,
    PowerTest,
    Repeated,
    TwoSample,
    circular_inflation,
    dz_interval,
    effect_for,
    n_for,
)
from .curves import Curve

TESTS = ("one-sample", "paired", "two-sample", "correlation", "repeated")
FORMING, SIZES = (0.05, 0.01, 0.005, 0.001), (12, 16, 20, 30, 40, 60)
POWERS = (0.8, 0.9)
_SYMBOL = {"correlation": "r", "repeated": "f"}
_EXPLORATORY = (
    "exploratory: chosen and read on the same data, so its size is inflated by selection and a "
    "sample planned on it would be too small"
)

# By the words that `target` has for them: what is no mean, and the test whose formula it needs.
_NO_MEAN = (
    ("difference of the groups' mean", "a comparison of groups", "two-sample"),
    ("correlation of ", "a correlation", "correlation"),
)


@dataclass(frozen=True)
class Planned:
    """An answer of `sequester power`.

    Parameters
    ----------
    records : list of dict
        In full, for programs.
    table : list of list of str
        For people, the header first.
    notes : list of str
        What the numbers rest on.
    title, x_label, y_label : str
        Of the figure.
    curves : list of Curve
    log : bool
        Whether its x axis is logarithmic.
    """

    records: list[dict[str, Any]]
    table: list[list[str]]
    notes: list[str]
    title: str
    x_label: str
    y_label: str
    curves: list[Curve]
    log: bool = False


# -- by formula -------------------------------------------------------------------------------


def plan_test(
    name: str,
    effect: float | None,
    ns: Sequence[int],
    power: float | None,
    alpha: float = 0.05,
    sides: int = 2,
    levels: int = 2,
    rho: float = 0.5,
    epsilon: float = 1.0,
) -> Planned:
    """Of effect, number of subjects and power, the one that is not given.

    Parameters
    ----------
    name : str
        One of `TESTS`.
    effect : float, optional
        d, r or f.
    ns : sequence of int
        Subjects; of two-sample, in each group.
    power : float, optional
    alpha : float
    sides : {2, 1}
    levels : int
    rho, epsilon : float
        Of "repeated".

    Raises
    ------
    InputError
        Unless two of the three are given, and in range.
    """
    given = (effect is not None) + bool(ns) + (power is not None)
    if given != 2:
        raise InputError(
            "too little is given" if given < 2 else "too much is given",
            expected="two of --effect, --n and --power",
            got=f"{given} of them",
            remedy="the third is what is worked out",
        )
    test: PowerTest
    if name == "repeated":
        if sides != 2:
            raise InputError(
                "an F-test has no sides", got=f"--sides {sides}", remedy="leave it out"
            )
        test = Repeated(levels, rho, epsilon, alpha)
    else:
        kinds: dict[str, Callable[[float, int], PowerTest]] = {
            "one-sample": OneSample,
            "paired": OneSample,
            "two-sample": TwoSample,
            "correlation": Correlation,
        }
        test = kinds[name](alpha, sides)
    symbol = _SYMBOL.get(name, "d")
    count = "n per group" if name == "two-sample" else "n"
    records = []
    for n in ns or [0]:
        if not ns:
            assert effect is not None and power is not None
            exact = n_for(test, effect, power)
            # A whole number that rounding puts a hair above itself is that number.
            one = {"effect": effect, "n": math.ceil(exact - 1e-6), "n_exact": exact}
        elif effect is None:
            assert power is not None
            one = {"effect": effect_for(test, n, power), "n": n}
        else:
            one = {"effect": effect, "n": n}
        records.append({"test": name, **one, **errors_of(test.at(one["effect"], one["n"]))})
    notes = [_test_note(name, alpha, sides, levels, rho, epsilon)]
    notes.append(
        "type M: mean size of a significant estimate over the true effect; type S: share of "
        "significant estimates with the wrong sign; smallest: the smallest significant "
        f"{symbol}."
    )
    return Planned(
        records,
        [
            [symbol, count, "power", "type M", "type S", f"smallest {symbol}"],
            *(
                [
                    f"{one['effect']:.4g}",
                    str(one["n"]),
                    f"{one['power']:.3f}",
                    *said_errors(one),
                    f"{one['smallest']:.3f}",
                ]
                for one in records
            ),
        ],
        notes,
        f"Power of the {name} test, {'two' if sides == 2 else 'one'}-sided, alpha {alpha:g}",
        "subjects per group" if name == "two-sample" else "subjects",
        "power",
        [
            _power_curve(test, f"{symbol} = {size:.3g}", size, [int(one["n"]) for one in records])
            for size in dict.fromkeys(one["effect"] for one in records)
        ],
    )


def errors_of(made: Power) -> dict[str, Any]:
    """A power with its companions; JSON knows no infinity."""
    return {
        name: value if value is not None and math.isfinite(value) else None
        for name, value in asdict(made).items()
    }


def said_errors(one: dict[str, Any]) -> list[str]:
    """Type M and type S in a table's cells."""
    wrong, size = one["type_s"], one["type_m"]
    return [
        "-" if size is None else f"{size:.2f}",
        "-" if wrong is None else "< .001" if wrong < 0.001 else f"{wrong:.3f}",
    ]


def _test_note(name: str, alpha: float, sides: int, levels: int, rho: float, epsilon: float) -> str:
    if name == "repeated":
        rough = (
            " Approximate: without sphericity power depends on the pattern of the means too."
            if epsilon < 1
            else ""
        )
        return (
            f"F-test of one within-subject factor of {levels} levels, alpha {alpha:g}, correlation "
            f"of levels {rho:g}, epsilon {epsilon:g}. f: sd of the cell means over the sd within a "
            f"cell.{rough}"
        )
    what = {
        "one-sample": "t-test of one mean; d in standard deviations of the values",
        "paired": "t-test of paired differences; d in standard deviations of the differences",
        "two-sample": "t-test of two groups; d in standard deviations within a group",
        "correlation": "test of a correlation (exact distribution of r, two normal variables)",
    }[name]
    return f"{what[0].upper()}{what[1:]}. Alpha {alpha:g}, {'two' if sides == 2 else 'one'}-sided."


def _power_curve(test: PowerTest, name: str, effect: float, around: Sequence[int]) -> Curve:
    """Power over numbers of subjects, to well beyond those that were asked about."""
    low, high = math.ceil(test.least_n) + 1, max(2 * max(around), 20)
    xs = sorted({round(x) for x in np.geomspace(low, high, 60)} | {n for n in around if n >= low})
    return Curve(name, tuple(map(float, xs)), tuple(test.at(effect, n).power for n in xs))


def plan_inflation(ps: Sequence[float] = FORMING, ns: Sequence[int] = SIZES) -> Planned:
    """What noise alone reads in a circular region, per forming threshold and number of subjects.

    Examples
    --------
    >>> plan_inflation([0.01], [20]).table
    [['p', 'n = 20'], ['0.01', '0.60']]
    """
    values = {(p, n): circular_inflation(p, n) for p in ps for n in ns}
    return Planned(
        [{"p": p, "n": n, "inflation": value} for (p, n), value in values.items()],
        [
            ["p", *(f"n = {n}" for n in ns)],
            *([f"{p:g}", *(f"{values[p, n]:.2f}" for n in ns)] for p in ps),
        ],
        [
            "The mean of noise alone in the voxels above a one-sided threshold p, chosen and "
            "read on the same n subjects: h(u) / sqrt(n), in standard deviations between subjects."
        ],
        "What noise alone reads in a circular region",
        "subjects",
        "inflation (standard deviations)",
        [
            Curve(
                f"p < {p:g}",
                tuple(float(n) for n in range(min(ns), max(ns) + 1)),
                tuple(circular_inflation(p, n) for n in range(min(ns), max(ns) + 1)),
            )
            for p in ps
        ],
    )


# -- from an earlier run ----------------------------------------------------------------------


def plan_from(
    folder: Path, only: str = "", powers: Sequence[float] = POWERS, alpha: float = 0.05
) -> Planned:
    """The subjects a new study of an earlier run's regions needs.

    Parameters
    ----------
    folder : Path
        The results of `sequester run`.
    only : str
        One region; "" for all.
    powers : sequence of float
    alpha : float
        Two-sided.

    Raises
    ------
    InputError
        When there are no such results, or none that a sample may be planned on.
    """
    rows = list(_tests(folder, only))
    records, table, refused, curves = [], [], [], []
    test = OneSample(alpha)
    for row in rows:
        name = row["roi"] if row["parcel"] == "n/a" else f"{row['roi']} {row['parcel_name']}"
        why = _no_basis(row)
        if why:
            refused.append(f"{name}: refused as a basis. It is {why}.")
            records.append({"roi": name, "plan": row["plan"], "refused": why})
            continue
        dz, low, how = _held_out_dz(row)
        one: dict[str, Any] = {"roi": name, "plan": row["plan"], "dz": dz, "dz_low": low}
        one |= {"dz_interval": how, "basis": []}
        head = [name, row["plan"], row["n_subjects"]]
        for word, size in (("held-out dz", dz), ("its lower end", low)):
            if size <= 0:
                table.append([*head, f"{word} {size:.2f}", *["none: includes 0"] * len(powers)])
                continue
            wanted = [math.ceil(n_for(test, size, power) - 1e-6) for power in powers]
            reached = [errors_of(test.at(size, n)) for n in wanted]
            pairs = zip(powers, wanted, reached, strict=True)
            one["basis"] += [
                {"kind": word, "effect": size, "asked": power, "n": n, **made}
                for power, n, made in pairs
            ]
            said = [
                f"{n} ({', '.join(said_errors(made))})"
                for n, made in zip(wanted, reached, strict=True)
            ]
            table.append([*head, f"{word} {size:.2f}", *said])
            curves.append(_power_curve(test, f"{name}: {word}", size, wanted))
        records.append(one)
    if not table:
        raise InputError(
            "no result that a sample may be planned on",
            where=str(folder),
            got=" ".join(refused) or "no test",
            remedy="plan on the mean of a held-out or an a-priori region",
        )
    head = ["region", "plan", "n", "planned on", *(f"N for power {p:g}" for p in powers)]
    return Planned(
        records,
        [head, *table],
        [
            "N (type M, type S): subjects of a new study that reads the region as one fixed "
            f"beforehand, one-sample t, two-sided, alpha {alpha:g}. Plan on the lower end where "
            "you can: an estimate worth planning on is more often too large than too small.",
            "For a study that chooses its region again: sequester power STUDY.toml --effect D.",
            *refused,
        ],
        "Power of a new study of these regions",
        "subjects",
        "power",
        curves,
        log=True,
    )


def _tests(folder: Path, only: str) -> Iterator[dict[str, str]]:
    """The rows of roi_tests.tsv, or those of one region."""
    path = folder / "roi_tests.tsv"
    if not path.is_file():
        raise InputError(
            "no results here",
            where=str(folder),
            expected="the output folder of `sequester run`, with roi_tests.tsv",
            remedy="run the study first",
        )
    with path.open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream, delimiter="\t", quoting=csv.QUOTE_NONE))
    needed = {"roi", "plan", "parcel", "parcel_name", "n_subjects", "estimate", "biased", "claim"}
    needed |= {"target", "interval_low", "interval_high", "interval_kind", "p", "p_kind", "dz"}
    lacking = sorted(needed - set(rows[0] if rows else ()))
    if lacking:
        raise InputError(
            "roi_tests.tsv lacks columns", where=str(path), got=f"no {', '.join(lacking)}"
        )
    found = [row for row in rows if only in ("", row["roi"])]
    if not found:
        raise InputError(
            "no such region",
            where=str(path),
            expected="one of " + ", ".join(dict.fromkeys(row["roi"] for row in rows)),
            got=repr(only),
        )
    for number, row in enumerate(rows, 2):
        if row in found:
            yield _checked(row, f"{path}, line {number}")


def _checked(row: dict[str, str], where: str) -> dict[str, str]:
    """A row whose numbers are numbers."""
    for name in ("estimate", "interval_low", "interval_high", "dz", "n_subjects"):
        try:
            if row[name] != "n/a":
                float(row[name])
        except (TypeError, ValueError) as error:
            raise InputError(
                f"{name} is no number",
                where=where,
                got=repr(row[name]),
                remedy="run the study again",
            ) from error
    return row


def _no_basis(row: dict[str, str]) -> str:
    """Why a result is no basis for a sample size; "" when it is one."""
    if row["biased"] != "false":
        return _EXPLORATORY
    if row["claim"] == "these subjects":
        return "about these subjects only, not about the population that a new sample comes from"
    if row["p"] == "n/a":
        return "not tested"
    for told, what, test in _NO_MEAN:
        if told in row["target"]:
            return f"{what}, which has no dz; by formula: sequester power --test {test}"
    if "n/a" in (row["dz"], row["interval_low"]) or float(row["dz"]) == 0:
        return "without an effect size"
    return ""


def _held_out_dz(row: dict[str, str]) -> tuple[float, float, str]:
    """dz in the direction it was found in, the lower end of its interval, and how that was made."""
    dz, sign = float(row["dz"]), math.copysign(1, float(row["dz"]))
    if row["p_kind"].startswith("Student's t"):
        low, high = dz_interval(dz, int(row["n_subjects"]))
        return abs(dz), min(sign * low, sign * high), "exact: noncentral t"
    # In units of the standard deviation of the held-out values.
    deviation = float(row["estimate"]) / dz
    ends = [sign * float(row[name]) / deviation for name in ("interval_low", "interval_high")]
    return abs(dz), min(ends), f"{row['interval_kind']}: the estimate's interval over the sd"
