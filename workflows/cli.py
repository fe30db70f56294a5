"""The command line: demo, run, check, power, calibrate, table."""

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
from click.core import ParameterSource

# The engine asks the network for newer versions unless told not to.
os.environ.setdefault("NO_ET", "1")

from ..nodes import progress
from ..nodes.errors import InputError, SequesterError
from ..nodes.images import read_map, write_bytes
from ..nodes.results import estimate_texts
from .calibrate import Calibration, calibrate
from .curves import curves_svg
from .demo import PLACES, truth_in, write_demo
from .guard import GuardRefused
from .planning import FORMING, POWERS, SIZES, TESTS, Planned, plan_from, plan_inflation, plan_test
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
from .table import rows_from, with_participants
from .trials import Simulation, plan_study


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
        print_tests(settings, result.tests, result.comparisons, result.overlaps)
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
@click.option(
    "--participants",
    type=click.Path(path_type=Path),
    help="A participants.tsv: its columns by subject, exclude_reason and exchange among them.",
)
@click.option("--output", type=click.Path(path_type=Path), help="File; default: standard output.")
@_command
def table(
    folder: Path,
    pattern: str | None,
    suffix: str,
    participants: Path | None,
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
    if not base.is_dir():
        raise InputError(
            "no such folder for the table", where=str(base), remedy="make it, or name another file"
        )
    rows = rows_from(folder.absolute(), pattern, suffix, base)
    if participants is not None:
        rows = with_participants(rows, participants)
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
@click.argument("study_toml", required=False, type=click.Path(path_type=Path))
@click.option("--from", "results", type=click.Path(path_type=Path), help="Results of a run.")
@click.option("--test", type=click.Choice(TESTS), help="By formula, without a study.")
@click.option("--inflation", is_flag=True, help="What noise reads in a circular region.")
@click.option("--effect", "--d", type=float, help="True effect: d, the correlation, or f.")
@click.option("--n", "ns", type=int, multiple=True, help="Subjects; may be repeated.")
@click.option("--power", "powers", type=float, multiple=True, help="Power that is wanted.")
@click.option("--alpha", type=float, default=0.05, show_default=True, help="Level.")
@click.option("--sides", type=click.IntRange(1, 2), default=2, show_default=True, help="--test.")
@click.option("--levels", type=int, default=2, show_default=True, help="Of a repeated factor.")
@click.option("--rho", type=float, default=0.5, show_default=True, help="Between its levels.")
@click.option("--epsilon", type=float, default=1.0, show_default=True, help="Its sphericity.")
@click.option("--p", "ps", type=float, multiple=True, help="Forming threshold, of --inflation.")
@click.option("--roi", default="", help="One region of the study or of the results.")
@click.option("--share", type=float, default=0.1, show_default=True, help="Part with the effect.")
@click.option("--sets", type=int, default=400, show_default=True, help="Simulated data sets.")
@click.option("--flips", type=int, default=199, show_default=True, help="Of each data set.")
@click.option("--seed", type=int, help="Of the simulation; default: the study's.")
@click.option("--figure", type=click.Path(path_type=Path), help="Draw it, as an SVG file.")
@_command
def power(
    study_toml: Path | None,
    results: Path | None,
    figure: Path | None,
    show: Progress,
    as_json: bool,
    **asked: Any,
) -> dict[str, Any]:
    """How many subjects, how much power, and what significance does to an effect.

    \b
    sequester power STUDY.toml --effect D     each region's own plan, simulated
    sequester power --from RESULTS            subjects for a new study of its regions
    sequester power --test NAME ...           by formula: two of --effect, --n, --power
    sequester power --inflation               of a circular region
    """
    if figure is not None and figure.exists():
        raise InputError(
            "figure exists already", where=str(figure), remedy="remove it, or name another file"
        )
    made = _planned(study_toml, results, **asked)
    if figure is not None:
        if not 0 < len(made.curves) <= _MOST_CURVES:
            raise InputError(
                "nothing to draw" if not made.curves else "too many curves for one figure",
                where=str(figure),
                expected=f"1 to {_MOST_CURVES}",
                got=str(len(made.curves)),
                remedy="name one region with --roi",
            )
        most = 1.0 if made.y_label == "power" else 0.0
        drawn = curves_svg(made.title, made.x_label, made.y_label, made.curves, most, log=made.log)
        write_bytes(figure.absolute(), drawn.encode())
    show.clear()
    if not as_json:
        print_table(made.table)
        for note in made.notes:
            click.echo("\n" + textwrap.fill(note, 96))
    return {"planned": made.records, "notes": made.notes, "figure": figure and str(figure)}


_MOST_CURVES = 12
# What goes with each thing that `power` can plan on, beside the thing itself.
_POWER_OPTIONS = {
    "STUDY.toml": {"effect", "ns", "alpha", "roi", "share", "sets", "flips", "seed"},
    "--from": {"powers", "alpha", "roi"},
    "--test": {"effect", "ns", "powers", "alpha", "sides", "levels", "rho", "epsilon"},
    "--inflation": {"ns", "ps"},
}


def _only_its_options(mode: str) -> None:
    """Refuse an option that would do nothing."""
    context = click.get_current_context()
    known = set().union(*_POWER_OPTIONS.values())
    for parameter in context.command.params:
        name = parameter.name or ""
        given = context.get_parameter_source(name) is ParameterSource.COMMANDLINE
        if given and name in known - _POWER_OPTIONS[mode]:
            raise InputError(f"{parameter.opts[0]} does not go with {mode}", remedy="leave it out")


def _planned(
    study_toml: Path | None,
    results: Path | None,
    test: str | None,
    inflation: bool,
    effect: float | None,
    ns: tuple[int, ...],
    powers: tuple[float, ...],
    alpha: float,
    sides: int,
    levels: int,
    rho: float,
    epsilon: float,
    ps: tuple[float, ...],
    roi: str,
    share: float,
    sets: int,
    flips: int,
    seed: int | None,
) -> Planned:
    """The answer that the options of `power` ask for."""
    modes = {
        "STUDY.toml": study_toml is not None,
        "--from": results is not None,
        "--test": test is not None,
        "--inflation": inflation,
    }
    if sum(modes.values()) != 1:
        raise InputError(
            "power needs one thing to plan on",
            expected="STUDY.toml, --from RESULTS, --test NAME or --inflation",
            got=f"{sum(modes.values())} of them",
        )
    _only_its_options(next(mode for mode, given in modes.items() if given))
    if study_toml is not None:
        if effect is None:
            raise InputError(
                "no effect to plan on",
                remedy="give --effect D, in standard deviations between subjects",
            )
        settings = read_settings(study_toml)
        seed = settings.seed if seed is None else seed
        simulation = Simulation(effect, share, sets, flips, alpha, seed)
        return plan_study(settings, simulation, ns, roi)
    if results is not None:
        return plan_from(results, roi, powers or POWERS, alpha)
    if test is not None:
        if len(powers) > 1:
            raise InputError("--test takes one --power", got=f"{len(powers)} of them")
        wanted = powers[0] if powers else None
        return plan_test(test, effect, ns, wanted, alpha, sides, levels, rho, epsilon)
    return plan_inflation(ps or FORMING, ns or SIZES)


@main.command("calibrate")
@click.argument("study_toml", type=click.Path(path_type=Path))
@click.option("--sets", type=int, default=500, show_default=True, help="Data sets per region.")
@click.option(
    "--flips", "n_flips", type=int, help="Of each data set; default: the study's, 199 at most."
)
@click.option("--processes", type=int, default=1, show_default=True, help="The result is the same.")
@click.option("--roi", "only", default="", help="One region.")
@click.option(
    "--persistent",
    type=float,
    default=0.0,
    help="Also show plans that choose on other data of the same subjects when so much of the "
    "variance persists in a subject, which is not their null.",
)
@click.option(
    "--keep",
    type=click.Path(path_type=Path),
    help="Keep what is done in this folder; a run that was stopped goes on there.",
)
@_command
def calibrate_command(
    study_toml: Path, show: Progress, as_json: bool, **asked: Any
) -> dict[str, Any]:
    """Put noise through a study's own plans, and count how often they reject.

    The noise has the study's subjects, search regions, smoothness, missing voxels, runs and
    exchange labels. Of the maps, no more is read than where they have data and how much their
    residuals vary from voxel to voxel: no effect is looked at, and this never counts as a look.
    """
    made = calibrate(read_settings(study_toml), Calibration(**asked), show.say)
    show.clear()
    if not as_json:
        print_table(made.table)
        for note in made.notes:
            click.echo("\n" + textwrap.fill(note, 96))
    return {"calibrated": made.records, "notes": made.notes}


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
