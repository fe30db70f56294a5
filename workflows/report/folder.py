"""A run's folder, read back: all that the page is made from."""

from __future__ import annotations

import csv
import json
import sys
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ...nodes.errors import InputError

Row = dict[str, str | None]

csv.field_size_limit(min(sys.maxsize, 2**31 - 1))  # a cell may list thousands of units


@dataclass(frozen=True)
class RunFolder:
    """What `sequester run` wrote.

    Parameters
    ----------
    path : Path
    tests, values, masks, flips, comparisons, variants : list of dict
        The rows of roi_tests, roi_values, masks, flips, comparisons and sensitivity; cells are
        text, None for n/a. A table that a run has no use for is empty.
    cells : list of dict
        The rows of cells: how many maps and subjects each region has.
    wide : list of dict
        The rows of roi_values_wide, which hold the covariates.
    record, manifest : dict
        record.json and manifest.json.
    study : dict
        STUDY.toml.
    """

    path: Path
    tests: list[Row]
    values: list[Row]
    masks: list[Row]
    flips: list[Row]
    comparisons: list[Row]
    variants: list[Row]
    cells: list[Row]
    wide: list[Row]
    record: dict[str, Any]
    manifest: dict[str, Any]
    study: dict[str, Any]

    @property
    def name(self) -> str:
        """The study's name."""
        return str(self.manifest["study"])

    def region(self, name: str) -> dict[str, Any]:
        """The ``[[roi]]`` of STUDY.toml of this name."""
        return next((roi for roi in self.study["roi"] if roi.get("name") == name), {})


def read_folder(path: Path) -> RunFolder:
    """Read a run's folder.

    Raises
    ------
    InputError
        When it is none, or was written without the record that the page needs.
    """
    needed = ("manifest.json", "roi_tests.tsv", "roi_values.tsv", "record.json", "STUDY.toml")
    missing = [name for name in needed if not (path / name).is_file()]
    if missing:
        raise InputError(
            "no folder of a run",
            where=str(path),
            expected="the output folder of `sequester run`",
            got="no folder" if not path.is_dir() else f"no {', '.join(missing)} in it",
            remedy="name the folder that a run has written; one from an older version is run again",
        )
    try:
        return RunFolder(
            path,
            read_table(path / "roi_tests.tsv"),
            read_table(path / "roi_values.tsv"),
            read_table(path / "masks.tsv"),
            read_table(path / "flips.tsv"),
            read_table(path / "comparisons.tsv"),
            read_table(path / "sensitivity.tsv"),
            read_table(path / "cells.tsv"),
            read_table(path / "roi_values_wide.tsv"),
            json.loads((path / "record.json").read_text(encoding="utf-8")),
            json.loads((path / "manifest.json").read_text(encoding="utf-8")),
            tomllib.loads((path / "STUDY.toml").read_text(encoding="utf-8-sig")),
        )
    except (ValueError, KeyError) as error:
        raise InputError(
            "damaged folder of a run",
            where=str(path),
            got=str(error),
            remedy="run the study again",
        ) from error


def read_table(path: Path) -> list[Row]:
    """The rows of a table as text, None for n/a; none when there is no such table."""
    if not path.is_file():
        return []
    with path.open(newline="", encoding="utf-8") as stream:
        rows = csv.DictReader(stream, delimiter="\t", quoting=csv.QUOTE_NONE)
        return [{k: None if v == "n/a" else v for k, v in row.items()} for row in rows]


def number(row: Row, name: str) -> float | None:
    """A cell as a number; None for n/a and for a column that is not there."""
    value = row.get(name)
    return None if value is None else float(value)


def called(row: Row) -> str:
    """What a row of roi_tests is about: the region, or a label of it.

    Examples
    --------
    >>> called({"roi": "Garden", "parcel": "3", "parcel_name": "Arbor"})
    'Garden, Arbor'
    """
    parcel = row.get("parcel_name") or row.get("parcel")
    return f"{row['roi']}, {parcel}" if parcel else str(row["roi"])


def is_biased(row: Row) -> bool:
    """Whether a row's value was read on the data that chose its region."""
    return row.get("biased") == "true"
