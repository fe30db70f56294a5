"""The command line: demo, run, check, table."""

from __future__ import annotations

import json
import os
import sys
import textwrap
from collections.abc import Callable
from functools import wraps
from pathlib import Path
from typing import Any

import click

# The engine asks the network for newer versions unless told not to.
os.environ.setdefault("NO_ET", "1")

from ..nodes import progress
from ..nodes.errors import InputError, SequesterError
from ..nodes.images import read_map, write_bytes
from ..nodes.results import estimate_texts
from .demo import PLACES, truth_in, write_demo
from .guard import GuardRefused
from .run import check_study, run_study
from .settings import read_settings
from .show import (
    CAUTION,
    Progress,
    finding_record,
    p_value,
    print_findings,
    print_table,
    print_tests,
)
from .study import table_text
from .table import rows_from


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="sequester")
def main() -> None:
    """Region-of-interest statistics that never test a region on the data that chose it.

    Exit codes: 0 done, 1 something failed, 2 the request or the data is wrong, 3 refused by
    the guard. For research use, not for diagnosis.
    """


def _command(function: Callable[..., dict[str, Any]]) -> Callable[..., None]:
    """Give a command --quiet and --json, and end it with the error's exit code.

    The command prints for people unless ``as_json``, and returns what --json prints.
    """

    @click.option("--quiet", "-q", is_flag=True, help="No progress.")
    @click.option("--json", "as_json", is_flag=True, help="Print one JSON object.")
    @wraps(function)  # brings the command's own options along
    def wrapped(*, quiet: bool, as_json: bool, **arguments: Any) -> None:
        show = Progress(quiet=quiet or as_json)
        progress.listen(show.work)
        try:
            try:
                told = function(show=show, as_json=as_json, **arguments)
            except BrokenPipeError:
                raise  # whoever read our output has gone; click ends quietly
            except OSError as error:
                raise InputError(
                    "cannot be read or written",
                    where=str(error.filename or "output"),
                    got=os.strerror(error.errno) if error.errno else str(error),
                ) from error
            if as_json:
                _print_json(told)
        except SequesterError as error:
            show.clear()
            if as_json:
                told = {"error": str(error), "exit_code": error.exit_code}
                if isinstance(error, GuardRefused):
                    told["findings"] = [finding_record(f, error.study) for f in error.findings]
                _print_json(told)
            click.echo(f"sequester: {error}", err=True)
            sys.exit(error.exit_code)
        finally:
            show.clear()
            progress.listen(None)

    return wrapped


def _print_json(told: dict[str, Any]) -> None:
    click.echo(json.dumps(told, default=str))


@main.command()
@click.argument("study_toml", type=click.Path(path_type=Path))
@click.option(
    "--work",
    type=click.Path(path_type=Path),
    help="Keep the engine's working folder here, so that a second run is faster.",
)
@click.option(
    "--processes",
    type=click.IntRange(1),
    default=1,
    show_default=True,
    help="How many steps may run at once; the results have the same bytes.",
)
@_command
def run(
    study_toml: Path, work: Path | None, processes: int, show: Progress, as_json: bool
) -> dict[str, Any]:
    """Analyse a study and write its output folder."""
    settings = read_settings(study_toml)
    result = run_study(settings, show.node, work, processes)
    show.clear()
    if not as_json:
        print_tests(settings, result.tests)
        click.echo(f"\nWritten to {result.output}\n{CAUTION}")
    return {"output": str(result.output), "tests": result.tests}


@main.command()
@click.argument("study_toml", type=click.Path(path_type=Path))
@_command
def check(study_toml: Path, show: Progress, as_json: bool) -> dict[str, Any]:
    """Judge a study without running it: every meeting, its verdict and level."""
    settings = read_settings(study_toml)
    show.say("reading headers and digests")
    findings = check_study(settings)
    show.clear()
    if not as_json:
        print_findings(findings)
        click.echo("\nNothing is refused; `sequester run` may run this study.")
    return {"findings": [finding_record(f, settings.study) for f in findings]}


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
    show: Progress,
    as_json: bool,
) -> dict[str, Any]:
    """Write the study table of the effect maps below a folder.

    Paths are relative to the table's own folder (to the current one on standard output).
    """
    if output is not None and output.exists():
        raise InputError(
            "table exists already", where=str(output), remedy="remove it, or name another file"
        )
    base = Path.cwd() if output is None else output.absolute().parent
    rows = rows_from(folder.absolute(), pattern, suffix, base)
    text = table_text(rows)
    subjects = len({row.unit.sub for row in rows})
    if output is not None:
        write_bytes(output.absolute(), text.encode())
    if not as_json:
        said = f"{len(rows)} maps of {subjects} subjects written to {output}\n"
        click.echo(text if output is None else said, nl=False)
    told = {"maps": len(rows), "subjects": subjects, "output": output and str(output)}
    return told if output is not None else {**told, "table": text}


@main.command()
@click.argument("folder", type=click.Path(path_type=Path), default=Path("sequester-demo"))
@_command
def demo(folder: Path, show: Progress, as_json: bool) -> dict[str, Any]:
    """Make a small study with known truth, analyse it, and have its circular twin refused."""
    show.say("making 24 subjects x 4 runs of effect maps")
    honest, circular = write_demo(folder)
    result = run_study(read_settings(honest), show.node)
    tests = {row["roi"]: row for row in result.tests}

    def truth(pattern: str) -> float:
        masks = sorted((folder / "results" / "masks").glob(pattern))
        return truth_in([read_map(path)[0] != 0 for path in masks])

    held_out = {name: truth(f"label-{name}_desc-without*_mask.nii.gz") for name in PLACES}
    looked = {name: truth(f"label-{name}Look_mask.nii.gz") for name in PLACES}
    try:
        run_study(read_settings(circular), show.node)
    except GuardRefused as error:
        refusal = str(error)
    else:
        raise SequesterError("the circular twin was not refused; please report this")
    show.clear()
    if not as_json:
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
            mean, low, high = estimate_texts(
                row["estimate"], row["interval_low"], row["interval_high"]
            )
            rows.append(
                [
                    name,
                    f"{look['estimate']:.2f}",
                    f"{looked[name]:.2f}",
                    f"{mean} [{low}, {high}]",
                    f"{held_out[name]:.2f}",
                    p_value(row["p"]),
                ]
            )
        click.echo(
            "A made-up study: 24 subjects x 4 runs. Arbor responds strongly, Brook weakly, and\n"
            "Cinder is noise: there is nothing in it to find.\n"
        )
        print_table(rows)
        click.echo(
            "\nHeld out: leave-one-subject-out; interval approximate; p by whole-procedure sign\n"
            "flip, one-sided, for the search region. The biased column has no interval and no p.\n"
            "Where the rule found no cluster (as in Cinder), the 20 strongest voxels stood in, as\n"
            "the study file says. One study proves nothing: the tests repeat it over 200 seeds.\n"
            f"\nThe same study, asking for a t-test in the circular region ({circular}):\n"
        )
        click.echo(textwrap.indent(refusal, "    "))
        click.echo(
            f"\nResults are in {result.output}; start from {honest} for your own.\n{CAUTION}"
        )
    return {
        "tests": result.tests,
        "truth": held_out,
        "truth_in_circular": looked,
        "refusal": refusal,
    }
