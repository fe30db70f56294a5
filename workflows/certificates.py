"""The certificate of an orthogonal contrast, from what STUDY.toml states of the design.

Both contrasts come from the same runs: ``design`` is a TSV with a column per regressor and a row
per time point (``{sub}`` for one per subject); the noise and the covariance of the regressors'
true effects between subjects are stated with a source.
"""

from __future__ import annotations

import csv
from pathlib import Path
from typing import Any

import numpy as np

from ..nodes.errors import InputError
from ..nodes.orthogonality import Certificate, within_and_between
from .keys import Reader
from .selection import Selection

_KEYS = {"design", "noise", "rho", "fit", "chosen", "tested", "between", "source"}


def read_certificate(read: Reader, table: dict[str, Any], tested: Selection) -> Certificate:
    """The certificate that a table of STUDY.toml describes; it may turn out not to hold.

    Parameters
    ----------
    read : Reader
    table : dict
    tested : Selection

    Raises
    ------
    InputError
        For anything wrong in it; names file and line.
    """
    read.known(table, _KEYS, "certificate")
    source = read.get(table, "source", str, ...)
    pattern = read.get(table, "design", str, ...)
    subs = [label for label, _ in tested.subjects] if "{sub}" in pattern else [""]
    root = read.path.parent
    designs = [_read_design(root / pattern.replace("{sub}", sub)) for sub in subs]
    names = designs[0][0]
    for sub, (other, _) in zip(subs, designs, strict=True):
        if other != names:
            raise InputError(
                "designs with other columns",
                where=pattern.replace("{sub}", sub),
                expected=", ".join(names),
                got=", ".join(other),
            )
    weights = {key: _weights(read, table, key, names) for key in ("chosen", "tested")}
    between = np.array(read.get(table, "between", list, ...), dtype=object)
    square = (len(names), len(names))
    if between.shape != square or not all(
        isinstance(x, int | float) and not isinstance(x, bool) for x in between.ravel()
    ):
        raise InputError(
            "between is no covariance of the regressors",
            where=read.where("between"),
            expected=f"{square[0]} x {square[1]} numbers, in the order {', '.join(names)}",
            got=str(table["between"]),
        )
    covariance = between.astype(float)
    if not _is_covariance(covariance):
        raise InputError(
            "between is no covariance of the regressors",
            where=read.where("between"),
            expected="a symmetric matrix without negative eigenvalues, not all zero",
            got=str(table["between"]),
        )
    noise = read.one_of(table, "noise", ("white", "ar1"), ...)
    rho = read.number(table, "rho", ... if noise == "ar1" else 0)
    fit = read.one_of(table, "fit", ("ordinary", "generalised"), "ordinary")
    try:
        conditions = within_and_between(
            [design for _, design in designs],
            weights["chosen"],
            weights["tested"],
            covariance,
            rho,
            ordinary=fit == "ordinary",
        )
    except InputError as error:
        raise error.at(read.where("certificate")) from error
    return Certificate(
        _told(table["chosen"]),
        _told(table["tested"]),
        conditions,
        (
            "normal errors",
            f"{noise} noise" + (f", rho = {rho:g}" if rho else ""),
            f"between-subject covariance: {source}",
        ),
    )


def _is_covariance(matrix: Any) -> bool:
    """Whether a square matrix is symmetric, finite, not all zero, and without a negative eigenvalue
    beyond rounding."""
    largest = np.abs(matrix).max()
    if not 0 < largest < np.inf:
        return False
    scaled = matrix / largest
    return bool(np.allclose(scaled, scaled.T) and np.linalg.eigvalsh(scaled).min() > -1e-9)


def _read_design(path: Path) -> tuple[list[str], Any]:
    """A design's column names, and its (n_points, n_columns) numbers."""
    if not path.is_file():
        raise InputError("no such design", where=str(path), expected="a TSV with a header line")
    with path.open(newline="", encoding="utf-8-sig") as stream:
        lines = [line for line in csv.reader(stream, delimiter="\t") if line]
    try:
        numbers = np.array([[float(cell) for cell in line] for line in lines[1:]])
        if numbers.ndim != 2 or numbers.shape[1] != len(lines[0]) or not np.isfinite(numbers).all():
            raise ValueError(f"{len(lines)} lines")
    except (ValueError, IndexError) as error:
        raise InputError(
            "unreadable design",
            where=str(path),
            expected="a header line, then as many finite numbers in every line",
            got=str(error),
        ) from error
    return lines[0], numbers


def _weights(read: Reader, table: dict[str, Any], key: str, names: list[str]) -> list[float]:
    stated = read.get(table, key, dict, ...)
    read.known(stated, names, f"certificate.{key}")
    return [read.number(stated, name, 0) for name in names]


def _told(weights: dict[str, Any]) -> str:
    """A contrast in words: amber + teal, amber - teal."""
    text = ""
    for name, weight in weights.items():
        size = "" if abs(weight) == 1 else f"{abs(weight):g} "
        sign = ("-" if weight < 0 else "") if not text else (" - " if weight < 0 else " + ")
        text += f"{sign}{size}{name}"
    return text
