"""What the command line shows: progress, tables, findings."""

from __future__ import annotations

import math
import shutil
import sys
import textwrap
import time
from collections.abc import Mapping, Sequence
from typing import Any

import click

from ..nodes.results import estimate_texts, p_text
from .judge import LEAK, Finding
from .report.words import listed, low_coverage
from .settings import Settings
from .study import Study

# Of a large family of labels, so many are shown in the table, and told in sentences.
_ROWS, _SENTENCES = 10, 3
_WIDEST = 96  # characters of a line of text
CAUTION = "For research use, not for diagnosis. Follow your ethics board and local rules."


class Progress:
    """One line on standard error, rewritten in place on a terminal, sparse elsewhere."""

    def __init__(self, *, quiet: bool) -> None:
        self.quiet = quiet
        self._live = sys.stderr.isatty()
        self._shown, self._last = "", 0.0

    def say(self, text: str) -> None:
        """Show a line."""
        if self.quiet:
            return
        if self._live:
            width = shutil.get_terminal_size().columns - 1
            click.echo("\r" + text[:width].ljust(len(self._shown)), nl=False, err=True)
            self._shown = text[:width]
        else:
            click.echo(text, err=True)

    def node(self, what: str, name: str, done: int, total: int) -> None:
        """Hear of a node (see `guard.Listener`)."""
        if what == "start":
            self.say(f"[{done}/{total}] {name}")

    def work(self, what: str, done: int, total: int) -> None:
        """Hear of long work inside a node (see `progress.listen`)."""
        now = time.monotonic()
        if now - self._last > (0.2 if self._live else 10) or (self._live and done == total):
            self._last = now
            self.say(f"{what}: {done} of {total}")

    def clear(self) -> None:
        """Take the line away."""
        if self._shown:
            click.echo("\r" + " " * len(self._shown) + "\r", nl=False, err=True)
            self._shown = ""


def finding_record(finding: Finding, study: Study) -> dict[str, Any]:
    """A finding in plain types, for JSON."""
    names = (
        "kind", "node", "item", "verdict", "level", "allowed", "mask_path", "data_path",
        "reason", "cure",
    )  # fmt: skip
    shared = [str(unit) for unit in study.table.units_of(finding.shared)]
    return {name: getattr(finding, name) for name in names} | {"shared": shared}


def print_findings(findings: Sequence[Finding]) -> None:
    """A line per node: how many meetings, verdicts, levels."""
    rows = [["node", "kind", "meetings", "verdict", "level"]]
    for name in dict.fromkeys(finding.node for finding in findings):
        here = [finding for finding in findings if finding.node == name]
        verdicts = dict.fromkeys(
            f"{f.verdict} (values marked biased)" if f.verdict == LEAK else f.verdict for f in here
        )
        levels = dict.fromkeys(finding.level for finding in here if finding.level)
        rows.append(
            [name, here[0].kind, str(len(here)), ", ".join(verdicts), ", ".join(levels) or "-"]
        )
    print_table(rows)


def print_tests(
    settings: Settings,
    tests: Sequence[Mapping[str, Any]],
    comparisons: Sequence[Mapping[str, Any]] = (),
    overlaps: Sequence[tuple[str, str]] = (),
) -> None:
    """The results of a run: a line per region, then its sentence."""
    left = settings.left_out
    subs = ", ".join(f"sub-{sub}" for sub in sorted({row.unit.sub for row in left})[:5])
    note = (
        f", {len(left)} map{'s' * (len(left) > 1)} left out ({subs}; reasons in manifest.json)"
        if left
        else ""
    )
    subjects = {row.unit.sub: row.person for roi in settings.rois for row in roi.tested.rows}
    people = set(subjects.values())
    alike = "" if len(people) == len(subjects) else f", {len(people)} of them independent"
    click.echo(f"{settings.name}: {len(subjects)} subjects{alike}{note}\n")
    families = [
        [row for row in tests if row["roi"] == roi.name]
        for roi in settings.rois
        if not roi.variant_of
    ]
    rows = [
        [
            "roi",
            "plan",
            "speaks of",
            "estimate",
            "95 % interval",
            "dz",
            "p",
            "p Holm",
            "p max",
            "found in",
            "Dice (noise)",
        ]
    ]
    for row in (row for family in families for row in _strongest(family)):
        head = [_called(row), row["plan"], "nobody" if row["biased"] else row["claim"]]
        if row["biased"] or row["p"] is None:
            # Of no region: NaN in the value that was read, None in what a test has recorded.
            none = row["estimate"] is None or math.isnan(row["estimate"])
            value = "-" if none else f"{row['estimate']:.3g}"
            rows.append([*head, f"{value} BIASED" if row["biased"] else value, *["-"] * 7])
            continue
        mean, interval = f"{row['estimate']:.3g}", "-"
        if row["interval_low"] is not None:
            ends = row["interval_low"], row["interval_high"]
            mean, low, high = estimate_texts(row["estimate"], *ends)
            interval = f"{low} to {high} ({row['interval_kind']})"
        elif row["interval_kind"] is not None:
            interval = f"without bounds ({row['interval_kind']})"
        folds, dice = "-", "-"
        if row["n_folds"] is not None:
            found = row["n_folds"] - row["n_empty"] - row["n_replaced"]
            folded = row["dice"] is not None or row["noise_dice"] is not None
            folds = f"{found}/{row['n_folds']} {'folds' if folded else 'masks'}"
            if folded:
                dice = f"{_two_digits(row['dice'])} ({_two_digits(row['noise_dice'])})"
        numbers = [_two_digits(row["dz"]), *(p_value(row[k]) for k in ("p", "p_holm", "p_max"))]
        rows.append([*head, mean, interval, *numbers, folds, dice])
    print_table(rows)
    if overlaps:
        click.echo("\n" + paragraph(_shared(overlaps)))
    if covered := low_coverage([row for row in tests if not row["biased"]]):
        said = (
            f"Somebody has data in little of a mask: {listed(covered)}. "
            "min_coverage in [data] asks for more."
        )
        click.echo("\n" + paragraph(said))
    for family in families:
        shown = _strongest(family, _SENTENCES)
        for row in shown:
            click.echo("\n" + paragraph(row["sentence"]))
        if len(shown) < len(family):
            told = sum(row["p_holm"] is not None and row["p_holm"] < 0.05 for row in family)
            said = (
                f"{family[0]['roi']}: {len(family)} labels, {told} with Holm-adjusted p < .05; "
                "all of them are in roi_tests.tsv."
            )
            click.echo("\n" + paragraph(said))
    for record in comparisons:
        said = f"{record['name']}: {record['sentence']} Taken for granted: {record['assumption']}."
        click.echo("\n" + paragraph(said))
    varied = [roi for roi in settings.rois if roi.variant_of]
    if varied:
        said = (
            f"Sensitivity: {len(varied)} declared variants in sensitivity.tsv, one look at the "
            "stated analysis, none to be picked."
        )
        click.echo("\n" + paragraph(said))


def _shared(overlaps: Sequence[tuple[str, str]]) -> str:
    """What Holm says of regions whose search regions share voxels."""
    (one, other), rest = overlaps[0], len(overlaps) - 1
    more = f" (and of {rest} more pair{'s' * (rest > 1)})" if rest else ""
    return (
        f"p Holm is over null hypotheses, not over places: the search regions of {one} and "
        f"{other}{more} share voxels (a whole map shares all), and each p speaks of its own "
        "region as a whole."
    )


def _strongest(
    family: Sequence[Mapping[str, Any]], most: int = _ROWS
) -> Sequence[Mapping[str, Any]]:
    """The tests of one region, or the labels of its atlas with the smallest p."""
    if len(family) <= most:
        return family
    return sorted(family, key=lambda row: math.inf if row["p"] is None else row["p"])[:most]


def _called(row: Mapping[str, Any]) -> str:
    return f"{row['roi']} {row['parcel_name']}" if row["parcel_name"] else str(row["roi"])


def paragraph(text: str) -> str:
    """A text in lines of at most 96 characters, fewer where the terminal is narrower."""
    width = min(_WIDEST, shutil.get_terminal_size((_WIDEST, 24)).columns)
    # Names of files stay whole.
    return textwrap.fill(text, width, break_on_hyphens=False, break_long_words=False)


def print_table(rows: Sequence[Sequence[str]]) -> None:
    """Columns padded to their widest cell, the first row underlined.

    On a terminal too narrow for that, each row stands in lines of its own.
    """
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    if sum(widths) + 2 * (len(widths) - 1) <= shutil.get_terminal_size((sys.maxsize, 24)).columns:
        for row in [rows[0], ["-" * width for width in widths], *rows[1:]]:
            click.echo("  ".join(map(str.ljust, row, widths)).rstrip())
        return
    heads = rows[0][1:]
    for i, (name, *cells) in enumerate(rows[1:]):
        click.echo(("\n" if i else "") + name)
        for head, cell in zip(heads, cells, strict=True):
            if cell != "-":
                click.echo(f"  {head.ljust(max(map(len, heads)))}  {cell}")


def p_value(p: float | None) -> str:
    """A p-value for a table's cell."""
    return "-" if p is None else p_text(p).removeprefix("p ").removeprefix("= ")


def _two_digits(value: float | None) -> str:
    return "-" if value is None else f"{value:.2f}"
