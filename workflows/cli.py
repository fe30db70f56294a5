"""The command line: demo, run, check, table."""

from __future__ import annotations

import json
import os
import shutil
import sys
import textwrap
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

import click

# The engine asks the network for newer versions unless told not to.
os.environ.setdefault("NO_ET", "1")

from ..nodes import progress
from ..nodes.errors import SequesterError
from .guard import GuardRefused
from .judge import Finding
from .settings import Settings, read_settings
from .study import Study, table_text
from .table import rows_from

CAUTION = "For research use, not for diagnosis. Follow your ethics board and local rules."


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="sequester")
def main() -> None:
    """Region-of-interest statistics that never test a region on the data that chose it.

    Exit codes: 0 done, 1 something failed, 2 the request or the data is wrong, 3 refused by
    the guard. For research use, not for diagnosis.
    """


def _command(function: Callable[..., None]) -> Callable[..., None]:
    """Give a command --quiet and --json, and end it with the error's exit code."""

    @click.option("--quiet", "-q", is_flag=True, help="No progress.")
    @click.option("--json", "as_json", is_flag=True, help="Print one JSON object.")
    def wrapped(*, quiet: bool, as_json: bool, **arguments: Any) -> None:
        show = _Progress(quiet=quiet or as_json)
        progress.listen(show.work)
        try:
            function(show=show, as_json=as_json, **arguments)
        except SequesterError as error:
            show.clear()
            if as_json:
                told: dict[str, Any] = {"error": str(error), "exit_code": error.exit_code}
                if isinstance(error, GuardRefused):
                    told["findings"] = [_plain(f, error.study) for f in error.findings]
                click.echo(json.dumps(told))
            click.echo(f"sequester: {error}", err=True)
            sys.exit(error.exit_code)
        finally:
            show.clear()
            progress.listen(None)

    wrapped.__name__, wrapped.__doc__ = function.__name__, function.__doc__
    wrapped.__click_params__ = [  # type: ignore[attr-defined]  # click's own place for options
        *getattr(wrapped, "__click_params__", []),
        *getattr(function, "__click_params__", []),
    ]
    return wrapped


class _Progress:
    """One line on standard error, rewritten in place on a terminal, sparse elsewhere."""

    def __init__(self, *, quiet: bool) -> None:
        self.quiet = quiet
        self._live = sys.stderr.isatty()
        self._shown, self._last = "", 0.0

    def say(self, text: str) -> None:
        if self.quiet:
            return
        if self._live:
            width = shutil.get_terminal_size().columns - 1
            click.echo("\r" + text[:width].ljust(len(self._shown)), nl=False, err=True)
            self._shown = text[:width]
        else:
            click.echo(text, err=True)

    def node(self, what: str, name: str, done: int, total: int) -> None:
        if what == "start":
            self.say(f"[{done}/{total}] {name}")

    def work(self, what: str, done: int, total: int) -> None:
        now = time.monotonic()
        if now - self._last > (0.2 if self._live else 10) or (self._live and done == total):
            self._last = now
            self.say(f"{what}: {done} of {total}")

    def clear(self) -> None:
        if self._shown:
            click.echo("\r" + " " * len(self._shown) + "\r", nl=False, err=True)
            self._shown = ""


@main.command()
@click.argument("study_toml", type=click.Path(path_type=Path))
@click.option(
    "--work",
    type=click.Path(path_type=Path),
    help="Keep the engine's working folder here, so that a second run is faster.",
)
@_command
def run(study_toml: Path, work: Path | None, show: _Progress, as_json: bool) -> None:
    """Analyse a study and write its output folder."""
    from .run import run_study

    settings = read_settings(study_toml)
    result = run_study(settings, show.node, work)
    show.clear()
    if as_json:
        click.echo(
            json.dumps(
                {"output": str(result.output), "tests": result.tests}, allow_nan=False, default=str
            )
        )
        return
    _print_tests(settings, result.tests)
    click.echo(f"\nWritten to {result.output}\n{CAUTION}")


@main.command()
@click.argument("study_toml", type=click.Path(path_type=Path))
@_command
def check(study_toml: Path, show: _Progress, as_json: bool) -> None:
    """Judge a study without running it: every meeting, its verdict and level."""
    from .run import check_study

    settings = read_settings(study_toml)
    show.say("reading headers and digests")
    findings = check_study(settings)
    show.clear()
    if as_json:
        click.echo(json.dumps({"findings": [_plain(f, settings.study) for f in findings]}))
        return
    nodes = dict.fromkeys(f.node for f in findings)
    rows = [["node", "kind", "meetings", "verdict", "level"]]
    for name in nodes:
        here = [f for f in findings if f.node == name]
        verdicts = ", ".join(dict.fromkeys(_verdict(f) for f in here))
        levels = ", ".join(dict.fromkeys(f.level for f in here if f.level)) or "-"
        rows.append([name, here[0].kind, str(len(here)), verdicts, levels])
    _print_table(rows)
    click.echo("\nNothing is refused; `sequester run` may run this study.")


@main.command()
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--pattern", help='Such as "sub-{sub}/con_{contrast}.nii.gz"; default: BIDS names.')
@click.option("--suffix", default="bold", show_default=True, help="Suffix of what was acquired.")
@click.option("--output", type=click.Path(path_type=Path), help="File; default: standard output.")
@_command
def table(
    folder: Path,
    pattern: str | None,
    suffix: str,
    output: Path | None,
    show: _Progress,
    as_json: bool,
) -> None:
    """Write the study table of the effect maps below a folder.

    Paths are relative to the table's own folder (to the current one on standard output).
    """
    from ..nodes.errors import InputError
    from ..nodes.images import write_bytes

    base = Path.cwd() if output is None else output.absolute().parent
    rows = rows_from(folder.absolute(), pattern, suffix, base)
    text = table_text(rows)
    if output is not None:
        if output.exists():
            raise InputError(
                "table exists already", where=str(output), remedy="remove it, or name another file"
            )
        write_bytes(output.absolute(), text.encode())
    subjects = len({row.unit.sub for row in rows})
    if as_json:
        click.echo(
            json.dumps(
                {
                    "maps": len(rows),
                    "subjects": subjects,
                    "output": None if output is None else str(output),
                }
            )
        )
    elif output is None:
        click.echo(text, nl=False)
    else:
        click.echo(f"{len(rows)} maps of {subjects} subjects written to {output}")


@main.command()
@click.argument("folder", type=click.Path(path_type=Path), default=Path("sequester-demo"))
@_command
def demo(folder: Path, show: _Progress, as_json: bool) -> None:
    """Make a small study with known truth, analyse it, and have its circular twin refused."""
    from ..nodes.images import read_map
    from .demo import PLACES, truth_in, write_demo
    from .run import run_study

    show.say("making 24 subjects x 4 runs of effect maps")
    honest, circular = write_demo(folder)
    result = run_study(read_settings(honest), show.node)
    tests = {row["roi"]: row for row in result.tests}
    masks = folder / "results" / "masks"
    truth = {
        name: truth_in(
            [read_map(p)[0] != 0 for p in sorted(masks.glob(f"label-{name}_*_mask.nii.gz"))]
        )
        for name in PLACES
    }
    looked = {
        name: truth_in([read_map(masks / f"label-{name}Look_mask.nii.gz")[0] != 0])
        for name in PLACES
    }
    refusal = ""
    try:
        run_study(read_settings(circular), show.node)
    except GuardRefused as error:
        refusal = str(error)
    show.clear()
    if not refusal:
        raise SequesterError("the circular twin was not refused; please report this")
    if as_json:
        click.echo(
            json.dumps(
                {
                    "truth": truth,
                    "truth_in_circular": looked,
                    "tests": result.tests,
                    "refusal": refusal,
                },
                default=str,
            )
        )
        return
    rows = [
        [
            "region",
            "chosen and read on all (BIASED)",
            "truth in it",
            "held out, 95 % interval",
            "truth in it",
            "p",
        ]
    ]
    for name in PLACES:
        row, look = tests[name], tests[f"{name}Look"]
        rows.append(
            [
                name,
                f"{look['estimate']:.2f}",
                f"{looked[name]:.2f}",
                f"{row['estimate']:.2f} [{row['interval_low']:.2f}, {row['interval_high']:.2f}]",
                f"{truth[name]:.2f}",
                _p(row["p"]),
            ]
        )
    click.echo(
        "A made-up study: 24 subjects x 4 runs. Arbor responds strongly, Brook weakly, and\n"
        "Cinder is noise: there is nothing in it to find.\n"
    )
    _print_table(rows)
    click.echo(
        "\nHeld out: leave-one-subject-out; interval approximate; p by whole-procedure sign flip,\n"
        "one-sided, for the search region. The biased column has no interval and no p.\n"
        f"\nThe same study, asking for a t-test in the circular region ({circular}):\n"
    )
    click.echo(textwrap.indent(refusal, "    "))
    click.echo(f"\nResults are in {result.output}; start from {honest} for your own.\n{CAUTION}")


def _plain(finding: Finding, study: Study) -> dict[str, Any]:
    return {
        "kind": finding.kind,
        "node": finding.node,
        "item": finding.item,
        "verdict": finding.verdict,
        "level": finding.level,
        "allowed": finding.allowed,
        "shared": [str(u) for u in study.table.units_of(finding.shared)],
        "mask_path": list(finding.mask_path),
        "data_path": list(finding.data_path),
        "reason": finding.reason,
        "cure": finding.cure,
    }


def _verdict(finding: Finding) -> str:
    return (
        f"{finding.verdict} (values marked biased)"
        if finding.verdict == "leak"
        else finding.verdict
    )


def _number(value: float | None) -> str:
    return "-" if value is None else f"{value:.2f}"


def _p(p: float | None) -> str:
    return "-" if p is None else "< .001" if p < 0.001 else f"{p:.3f}".replace("0.", ".", 1)


def _print_tests(settings: Settings, tests: list[dict[str, Any]]) -> None:
    left = len(settings.left_out)
    click.echo(
        f"{settings.name}: {len(settings.rows)} subjects"
        + (f", {left} maps left out (reasons in the table)" if left else "")
        + "\n"
    )
    rows = [
        ["roi", "plan", "estimate", "95 % interval", "dz", "p", "p Holm", "empty", "Dice (noise)"]
    ]
    for row in tests:
        if row["biased"]:
            value = "-" if row["estimate"] != row["estimate"] else f"{row['estimate']:.3g}"
            rows.append([row["roi"], row["plan"], f"{value} BIASED", *["-"] * 6])
            continue
        folds = (
            "-"
            if row["n_folds"] is None
            else f"{row['n_empty'] + row['n_replaced']}/{row['n_folds']}"
        )
        dice = "-" if row["dice"] is None else f"{row['dice']:.2f} ({_number(row['noise_dice'])})"
        rows.append(
            [
                row["roi"],
                row["plan"],
                f"{row['estimate']:.3g}",
                f"{row['interval_low']:.3g} to {row['interval_high']:.3g} ({row['interval_kind']})",
                _number(row["dz"]),
                _p(row["p"]),
                _p(row["p_holm"]),
                folds,
                dice,
            ]
        )
    _print_table(rows)
    for row in tests:
        click.echo("\n" + textwrap.fill(row["sentence"], 96))


def _print_table(rows: list[list[str]]) -> None:
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    for number, row in enumerate(rows):
        click.echo("  ".join(cell.ljust(w) for cell, w in zip(row, widths, strict=True)).rstrip())
        if number == 0:
            click.echo("  ".join("-" * w for w in widths))
