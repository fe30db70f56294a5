"""Results and verdicts in a notebook: tables that render, and tables to compute with."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from html import escape
from pathlib import Path
from typing import Any

from ...nodes.errors import InputError
from .folder import Row, called, is_biased, read_table
from .words import estimate_cells, headline, independence, p_cell

_MOST = 40  # rows shown


def tests_html(tests: Sequence[Mapping[str, Any]]) -> str:
    """The results of a run as an HTML table, biased values apart and without interval or p.

    Examples
    --------
    >>> made = tests_html([{"roi": "Arbor", "biased": True, "estimate": 0.4321, "p": None,
    ...                     "plan": "exploratory"}])
    >>> "0.432" in made, "BIASED" in made
    (True, True)
    """
    rows = [cells(row) for row in tests]
    heads = ("region", "plan", "n", "estimate", "95 % interval", "p", "independence")
    lines = []
    for row in sorted(rows, key=is_biased)[:_MOST]:
        value, interval = estimate_cells(row)
        shown = [called(row), row.get("plan"), row.get("n_subjects")]
        if is_biased(row):
            shown += [f"{value} BIASED", "", "", independence(row)]
        else:
            shown += [value, interval, p_cell(row) or "no test", independence(row)]
        lines.append([text or "" for text in shown])
    more = f"<p>{len(rows) - _MOST} more rows.</p>" if len(rows) > _MOST else ""
    return f"<p>{escape(headline(rows))}</p>{_table(heads, lines)}{more}"


def table(folder: Path, name: str) -> Any:
    """A table of a run's folder: a pandas DataFrame where pandas is installed, else rows.

    Parameters
    ----------
    folder : Path
    name : str
        Such as "roi_values"; without ending.

    Raises
    ------
    InputError
        When the run wrote no such table.
    """
    path = folder / f"{name}.tsv"
    if not path.is_file():
        raise InputError(
            "no such table",
            where=str(folder),
            expected=", ".join(sorted(one.stem for one in folder.glob("*.tsv"))),
            got=name,
        )
    try:
        import pandas as pd
    except ImportError:
        return read_table(path)
    labels = dict.fromkeys(("sub", "run", "ses", "parcel"), str)
    return pd.read_csv(
        path, sep="\t", na_values=["n/a"], keep_default_na=False, dtype=labels, quoting=3
    )


def cells(row: Mapping[str, Any]) -> Row:
    """A row of results as its table holds it: text, None for nothing.

    Examples
    --------
    >>> cells({"biased": True, "p": 0.5, "t": None, "g": float("nan")})
    {'biased': 'true', 'p': '0.5', 't': None, 'g': None}
    """
    made: Row = {}
    for name, value in row.items():
        nothing = value is None or value == "" or (isinstance(value, float) and math.isnan(value))
        text = str(value).lower() if isinstance(value, bool) else str(value)
        made[name] = None if nothing else text
    return made


def _table(heads: Sequence[str], lines: Sequence[Sequence[str]]) -> str:
    head = "".join(f"<th>{escape(text)}</th>" for text in heads)
    body = "".join(
        f"<tr>{''.join(f'<td>{escape(text)}</td>' for text in line)}</tr>" for line in lines
    )
    return f"<table><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"
