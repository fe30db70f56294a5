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
from sequester.workflows.cli import main as command
from sequester.workflows.demo import write_demo
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

CELL, ROW, LEFT, TOP = 40, 13, 150, 112
STYLE = """
    svg { font-family: sans-serif; font-size: 12px }
    .paper { fill: #fdfcf8 } .ink, text { fill: #23303d } .line { stroke: #23303d; fill: none }
    .faint { stroke: #8a939c; stroke-width: 0.5; fill: none } .dot { fill: #8a939c }
    @media (prefers-color-scheme: dark) {
      .paper { fill: #16202a } .ink, text { fill: #e9e4d6 } .line { stroke: #e9e4d6 }
      .faint { stroke: #75808b } .dot { fill: #75808b }
    }
  """
HATCH = (
    '<pattern id="hatch" width="5" height="5" patternUnits="userSpaceOnUse" '
    'patternTransform="rotate(45)"><path d="M0 0V5" class="line" stroke-width="2"/></pattern>'
)
LEGEND = (
    ("chosen on", True, False),
    ("tested on", False, True),
    ("both", True, True),
    ("neither", False, False),
)


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
    units = [(sub, run, of_sub[sub][run]) for sub in shown for run in of_sub[sub]]
    bottom = TOP + ROW * len(units) + 8 * len(shown)
    width, height = max(LEFT + CELL * len(columns) + 90, 560), bottom + 66
    parts = [
        f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {width} {height}" width="{width}" '
        f'height="{height}" role="img" aria-label="{_alt(name, columns)}">',
        f"<title>{_alt(name, columns)}</title>",
        f"<style>{STYLE}</style><defs>{HATCH}</defs>",
        f'<rect class="paper" width="{width}" height="{height}" rx="6"/>',
    ]
    for i, (label, *_) in enumerate(columns):
        middle = LEFT + CELL * i + CELL / 2
        turned = f' transform="rotate(-38 {middle:g} {TOP - 8})"'
        parts.append(_text(middle, TOP - 8, label, turned))
    for at, head in ((16, "subject"), (88, "run"), (LEFT - 34, "mask")):
        parts.append(_text(at, TOP - 8, head))
    y = TOP
    for i, (sub, run, names) in enumerate(units):
        first = i == 0 or units[i - 1][0] != sub
        y += 8 * (first and i > 0)
        if first:
            parts.append(_text(16, y + 10.5, sub))
        parts.append(_text(88, y + 10.5, run or "all"))
        for j, (_, chosen, tested) in enumerate(columns):
            both = bool(chosen & set(names)), bool(tested & set(names))
            parts.append(_cell(LEFT + CELL * j, y, *both))
        y += ROW
    x = 16
    for text, of_choice, of_test in LEGEND:
        parts.append(_cell(x, bottom + 14, of_choice, of_test))
        parts.append(_text(x + CELL + 2, bottom + 24.5, text))
        x += CELL + 20 + 7 * len(text)
    note = f"{len(shown)} of {len(of_sub)} subjects and {len(columns)} of {total} masks are shown."
    parts += [_text(16, bottom + 50, note), "</svg>"]
    return "\n".join(parts) + "\n"


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


def _cell(x: float, y: float, chosen: bool, tested: bool) -> str:
    """One cell: hatched when chosen on, a disc when tested on; both in a heavy frame."""
    w, h = CELL - 4, ROW - 2
    box = f'x="{x:g}" y="{y:g}" width="{w}" height="{h}"'
    parts = [f'<rect {box} fill="url(#hatch)"/>'] if chosen else []
    heavy = chosen and tested
    parts.append(f'<rect {box} class="{"line" if heavy else "faint"}" stroke-width="2"/>')
    centre = f'cx="{x + w / 2:g}" cy="{y + h / 2:g}"'
    if heavy:
        parts.append(f'<circle {centre} r="6" class="paper"/>')
    if tested:
        parts.append(f'<circle {centre} r="4.5" class="ink"/>')
    elif not chosen:
        parts.append(f'<circle {centre} r="1" class="dot"/>')
    return "".join(parts)


def _text(x: float, y: float, text: str, more: str = "") -> str:
    return f'<text x="{x:g}" y="{y:g}"{more}>{text}</text>'


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
