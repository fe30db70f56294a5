"""Is every plan's estimate right on average? Real runs of many small studies with known truth.

Usage: python tests/bench/matrix.py [--many 200] [--processes 2] [--json FILE]
Each cell is a way to store the maps and what is missing; each line a plan and whose true effect
it is compared with. Lines of what is circular, or claims too much, are marked "off": they must
differ from 0, by what a direct simulation predicts where there is one.
"""

from __future__ import annotations

import argparse
import itertools
import json
import multiprocessing
import os
import sys
import tempfile
from pathlib import Path
from typing import Any, NamedTuple

# One thread a process; and the studies' module lies beside the tests.
os.environ |= {"OMP_NUM_THREADS": "1", "NO_ET": "1"}
sys.path.append(str(Path(__file__).parents[1]))

import numpy as np
from sequester import read_settings, run_study
from worlds import LAYOUTS, WRONG, World, null_bias, offsets, read_results

_TOO_FAR = 4  # Monte Carlo standard errors


class Cell(NamedTuple):
    """One way to store a study."""

    own: bool
    missing: bool
    stacked: bool

    def __str__(self) -> str:
        grids, runs = ("one grid", "own grids")[self.own], ("full", "missing runs")[self.missing]
        return f"{grids}, {runs}, {('3-D files', '4-D stacks')[self.stacked]}"

    def layout(self, number: int) -> str:
        """How a study is stored: on one grid, every other stack is one of the whole study."""
        files, of_each, of_all = LAYOUTS
        if not self.stacked:
            return files
        return of_each if self.own or number % 2 else of_all


CELLS = [Cell(*which) for which in itertools.product((False, True), repeat=3)]


def one(task: tuple[int, int]) -> dict[tuple[str, str, str], float]:
    """How far each estimate of one study, a cell's and a seed's, is from its target."""
    cell, seed = CELLS[task[0]], task[0] * 100_000 + task[1]
    world = World(seed, cell.own, cell.missing)
    with tempfile.TemporaryDirectory() as folder:
        result = run_study(read_settings(world.write(Path(folder), cell.layout(task[1]))))
        return offsets(read_results(result.output)[0], world)


def line(x: Any, expected: tuple[float, float], *, off: bool) -> dict[str, Any]:
    """The summary of one plan in one cell."""
    error = float(x.std(ddof=1) / np.sqrt(len(x)))
    z = (float(x.mean()) - expected[0]) / float(np.hypot(error, expected[1]))
    return {
        "studies": len(x),
        "mean": float(x.mean()),
        "error": error,
        "expected": expected[0],
        "z": z,
        "off": off,
        "right": abs(z) < _TOO_FAR,
    }


def lines(cell: Cell, made: list[dict[tuple[str, str, str], float]]) -> list[dict[str, Any]]:
    """The table of one cell."""
    predicted = {} if cell.own else null_bias(cell.missing)
    out = []
    for roi, parcel, target in made[0]:
        x = np.array([of[roi, parcel, target] for of in made])
        off = (roi, target) in WRONG
        expected = predicted.get(roi, (0.0, 0.0)) if off else (0.0, 0.0)
        found = line(x, expected, off=off)
        if off and roi not in predicted:  # no prediction: it must be seen to be off
            found |= {"expected": None, "right": abs(found["z"]) > _TOO_FAR}
        out.append({"roi": roi + parcel, "target": target, **found})
    return out


def show(tables: dict[str, list[dict[str, Any]]]) -> None:
    """The tables, printed."""
    for cell, rows in tables.items():
        print(f"\n{cell}, {rows[0]['studies']} studies")
        print("plan      whose effect      mean off      error   expected       z")
        for row in rows:
            expected = "not 0" if row["expected"] is None else f"{row['expected']:.4f}"
            print(
                f"{row['roi']:<9} {row['target']:<15} {row['mean']:>10.4f} "
                f"{row['error']:>10.4f} {expected:>10} {row['z']:>7.2f}"
                + (" off" if row["off"] else "")
                + ("" if row["right"] else "   WRONG")
            )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--many", type=int, default=200, help="studies a cell")
    parser.add_argument("--processes", type=int, default=2)
    parser.add_argument("--json", type=Path, help="written anew every 20 studies a cell")
    arguments = parser.parse_args()
    tasks = [(cell, k) for k in range(arguments.many) for cell in range(len(CELLS))]
    made: list[list[dict[tuple[str, str, str], float]]] = [[] for _ in CELLS]
    tables = {}
    with multiprocessing.get_context("spawn").Pool(arguments.processes) as pool:
        for (cell, k), found in zip(tasks, pool.imap(one, tasks), strict=True):
            made[cell].append(found)
            if cell == len(CELLS) - 1 and ((k + 1) % 20 == 0 or k + 1 == arguments.many):
                tables = {str(c): lines(c, m) for c, m in zip(CELLS, made, strict=True)}
                print(f"{k + 1} of {arguments.many} studies a cell", file=sys.stderr, flush=True)
                if arguments.json is not None:
                    text = json.dumps(tables, indent=1) + "\n"
                    arguments.json.write_text(text, encoding="utf-8")
    show(tables)
    wrong = sum(not row["right"] for rows in tables.values() for row in rows)
    print(f"\n{sum(map(len, tables.values()))} lines, {wrong} wrong")
    sys.exit(1 if wrong else 0)


if __name__ == "__main__":
    main()
