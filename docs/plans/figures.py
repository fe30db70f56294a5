"""The figures of these pages, drawn from what the guard saw in a run of each page's example.

    python docs/plans/figures.py            # all pages
    python docs/plans/figures.py k-fold     # one

A page's fenced blocks are its example: `python` and `toml` blocks are files, named in their first
line; `sh` blocks are run, in the folder that `sequester demo` writes; plain blocks are printed.
"""

from __future__ import annotations

import csv
import io
import os
import re
import runpy
import sys
import tempfile
from collections.abc import Iterator, Sequence
from contextlib import chdir, redirect_stdout
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from click.testing import CliRunner
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Rectangle
from sequester.workflows.cli import main as command
from sequester.workflows.demo import write_demo
from sequester.workflows.report.drawing import BIASED, CHOSEN, HELD, MUTED, PAPER, alone, drawing
from sequester.workflows.settings import Settings, read_settings

PAGES = Path(__file__).parent
SUBJECTS, COLUMNS = 6, 8  # that are shown


@dataclass(frozen=True)
class Meeting:
    """A mask and one value read in it: on which data it was chosen, and tested.

    Parameters
    ----------
    roi, mask : str
    chosen, tested : frozenset of str
        Units, as in ``touches.tsv``.
    """

    roi: str
    mask: str
    chosen: frozenset[str]
    tested: frozenset[str]


# -- the example of a page ------------------------------------------------------------------------


def blocks(page: Path) -> list[tuple[str, str]]:
    """The fenced blocks of a page: (kind, text)."""
    return re.findall(r"^```(\w*)\n(.*?)^```$", page.read_text(), re.M | re.S)


def perform(page: Path, folder: Path) -> tuple[str, list[Meeting]]:
    """Run a page's example in a demo's folder: what it printed, and its first run's meetings."""
    printed: list[str] = []
    meetings: list[Meeting] = []
    with chdir(folder):
        for kind, text in blocks(page):
            if kind in ("python", "toml"):
                Path(_file_name(text)).write_text(text)
            for line in text.splitlines() if kind == "sh" else ():
                said, met = _run(line.split())
                printed.append(said)
                meetings = meetings or met
    return "".join(printed), meetings


def _file_name(text: str) -> str:
    return text.split("\n", 1)[0].removeprefix("#").split()[0]


def _run(words: list[str]) -> tuple[str, list[Meeting]]:
    """One line of a shell block."""
    if words[0] == "python":
        with redirect_stdout(io.StringIO()) as said:
            made = runpy.run_path(words[1], run_name="__main__")
        return said.getvalue(), _of_guard(made) if "guard" in made else []
    done = CliRunner().invoke(command, [*words[1:], "--quiet"], catch_exceptions=False)
    if done.exit_code:
        raise RuntimeError(f"{' '.join(words)}: {done.output}")
    return done.output, _of_run(read_settings(words[2])) if words[1] == "run" else []


def _rows(path: Path) -> Iterator[dict[str, str]]:
    with path.open(newline="") as stream:
        yield from csv.DictReader(stream, delimiter="\t", quoting=csv.QUOTE_NONE)


def _of_run(study: Settings) -> list[Meeting]:
    """The meetings that a run's ``touches.tsv`` lists, in the order of regions and masks."""
    found: list[tuple[int, str, Meeting]] = []
    masks: dict[str, dict[tuple[str, str], str]] = {}
    for row in _rows(study.output / "roi_values.tsv"):
        masks.setdefault(row["roi"], {})[row["sub"], row["run"]] = row["mask"]
    everything = {str(row.unit) for row in study.study.rows}
    for row in _rows(study.output / "touches.tsv"):
        if row["role"] == "values":
            roi, number = re.findall(r"\.(\w+)\.extract(?:\[(\d+)\])?$", row["extraction"])[0]
            told = frozenset(row["touched"].split()) - {"n/a"}
            chosen = told if row["encoding"] == "units" else frozenset(everything - told)
            mask = _short(list(masks[roi].values())[int(number or 0)], roi)
            tested = frozenset(row["tested"].split())
            found.append((list(masks).index(roi), mask, Meeting(roi, mask, chosen, tested)))
    return [meeting for *_, meeting in sorted(found, key=lambda item: item[:2])]


def _short(mask: str, roi: str) -> str:
    """What is left of a mask's file name without its endings and its region."""
    parts = mask.removesuffix(".nii.gz").split("_")[:-1]
    kept = [p.removeprefix("desc-") for p in parts if p != f"label-{roi}"]
    return " ".join(p for p in kept if p not in ("otherruns", "localizer"))


def _of_guard(made: dict[str, Any]) -> list[Meeting]:
    """The meetings that a script's guard found."""
    table = made["study"].table
    found = [f for f in made["guard"].findings if f.kind == "extraction"]
    sides = [
        tuple(frozenset(map(str, table.units_of(bits))) for bits in (f.mask_units, f.data_units))
        for f in found
    ]
    numbers = {chosen: i for i, chosen in enumerate(dict.fromkeys(c for c, _ in sides), 1)}
    return [Meeting("", f"fold {numbers[c]}", c, t) for c, t in sides]


# -- the figure -----------------------------------------------------------------------------------

GAP = 0.5  # between subjects, in rows
STATES = ("chosen on", "tested on", "both", "neither")


def draw(name: str, meetings: Sequence[Meeting]) -> str:
    """The figure of a page, as SVG: rows are subjects and runs, columns are masks."""
    of_sub: dict[str, dict[str, list[str]]] = {}
    for unit in sorted(set().union(*(m.chosen | m.tested for m in meetings))):
        sub, found = unit.split("_")[0], re.findall(r"run-([A-Za-z0-9]+)", unit)
        of_sub.setdefault(sub, {}).setdefault(found[0] if found else "", []).append(unit)
    step = max(1, len(of_sub) // SUBJECTS)
    shown = list(of_sub)[::step][:SUBJECTS]
    columns = _columns(meetings, shown)
    total = len({(m.roi, m.mask) for m in meetings})
    rows = [(sub, run) for sub in shown for run in of_sub[sub]]
    with drawing():
        figure = Figure(
            (max(1.9 + 0.5 * len(columns), 5.6), 1.9 + 0.18 * (len(rows) + GAP * len(shown))),
            layout="constrained",
        )
        axes = figure.add_subplot()
        heights: list[float] = []
        for i, (sub, run) in enumerate(rows):
            heights.append(i + GAP * shown.index(sub))
            for j, (_, chosen, tested) in enumerate(columns):
                of_choice, of_test = (
                    not side.isdisjoint(of_sub[sub][run]) for side in (chosen, tested)
                )
                state = STATES[(0 if not of_test else 2) if of_choice else (1 if of_test else 3)]
                for mark in _marks(state, j, heights[-1]):
                    axes.add_artist(mark).set_gid(f"{state}, row {i}, column {j}".replace(" ", "_"))
        named = [
            f"{sub if run == next(iter(of_sub[sub])) else ''}  {run and f'run {run}'}".rstrip()
            for sub, run in rows
        ]
        axes.set_yticks(heights, named)
        axes.set_xticks(
            range(len(columns)), [label for label, *_ in columns], rotation=38, ha="left"
        )
        axes.xaxis.tick_top()
        axes.tick_params(length=0)
        axes.spines[:].set_visible(False)
        axes.set_xlim(-0.6, max(len(columns), 8) - 0.4)  # few masks make no broad cells
        axes.set_ylim(heights[-1] + 0.7, -0.7)
        figure.legend(
            [tuple(_marks(state)) for state in STATES], STATES, loc="outside lower left", ncols=4,
            frameon=False, handlelength=2.6, columnspacing=1.6,
            title=f"{len(shown)} of {len(of_sub)} subjects and {len(columns)} of {total} masks are "
            "shown.", alignment="left",
        )  # fmt: skip
        return alone(figure, _alt(name, columns))


def _marks(state: str, x: float = 0, y: float = 0) -> list[Any]:
    """What one cell is drawn with: hatched when chosen on, a disc when tested on."""
    chosen, tested = state in ("chosen on", "both"), state in ("tested on", "both")
    edge = {"edgecolor": MUTED, "linewidth": 0.5}
    if chosen:
        edge = {"edgecolor": BIASED if tested else CHOSEN, "linewidth": 1.8 if tested else 0.8}
    box = Rectangle(
        (x - 0.45, y - 0.42), 0.9, 0.84, facecolor="none", hatch="/////" if chosen else "", **edge
    )
    disc = Line2D(
        [x],
        [y],
        marker="o",
        markersize=7 if tested else 1.5,
        linestyle="none",
        color=HELD if tested else MUTED,
        markeredgecolor=PAPER if tested else MUTED,
        markeredgewidth=1.5 if tested else 0,
    )
    return [box] if state == "chosen on" else [box, disc]


def _columns(
    meetings: Sequence[Meeting], shown: Sequence[str]
) -> list[tuple[str, frozenset[str], frozenset[str]]]:
    """(label, chosen on, tested on) of the masks that are shown, an equal share per region."""
    found: dict[tuple[str, str], list[Meeting]] = {}
    for meeting in meetings:
        found.setdefault((meeting.roi, meeting.mask), []).append(meeting)
    rois = list(dict.fromkeys(roi for roi, _ in found))
    columns = []
    for roi in rois:
        listed = []
        for (owner, mask), met in found.items():
            tested = frozenset().union(*(m.tested for m in met))
            if owner == roi and any(unit.split("_")[0] in shown for unit in tested):
                chosen = frozenset().union(*(m.chosen for m in met))
                label = " ".join(filter(None, (roi if len(rois) > 1 else "", mask))) or roi
                listed.append((label, chosen, tested))
        columns += listed[: max(1, COLUMNS // len(rois))]
    return columns


def _alt(name: str, columns: Sequence[tuple[str, frozenset[str], frozenset[str]]]) -> str:
    both = any(chosen & tested for _, chosen, tested in columns)
    return (
        f"{name}: which runs of which subjects each mask was chosen on and tested on; "
        f"{'masks meet' if both else 'no mask meets'} the data that chose them"
    )


def main(names: Sequence[str]) -> None:
    """Draw the figures of some pages, or of all."""
    os.environ.setdefault("NO_ET", "1")
    with tempfile.TemporaryDirectory() as folder:
        write_demo(Path(folder) / "demo")
        for page in sorted(PAGES.glob("*.md")):
            if not names or page.stem in names:
                printed, meetings = perform(page, Path(folder) / "demo")
                page.with_suffix(".svg").write_text(draw(page.stem, meetings))
                print(f"{page.stem}\n{printed}")


if __name__ == "__main__":
    main(sys.argv[1:])
