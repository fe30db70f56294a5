"""The command line: demo, run, check, declare, verify, power, calibrate, table."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Callable
from functools import partial, wraps
from pathlib import Path
from typing import Any

import click
from click.core import ParameterSource

# The engine asks the network for newer versions unless told not to.
os.environ.setdefault("NO_ET", "1")

from ..nodes import progress
from ..nodes.errors import InputError, SequesterError
from ..nodes.images import read_map, write_bytes
from ..nodes.interfaces.base import finite
from ..nodes.results import estimate_texts
from .calibrate import Calibration, calibrate
from .contours import TOO_SMALL, check_mask, known_as
from .curves import curves_svg
from .demo import PLACES, truth_in, write_demo
from .engines import ENGINES, plugin_args
from .guard import NOTHING_JUDGED, GuardRefused
from .ledger import Entry, Ledger, Unjoined, ledger_path
from .origins import declare as declare_region
from .origins import declare_in, given_by_hand, unit_of
from .planning import FORMING, POWERS, SIZES, TESTS, Planned, plan_from, plan_inflation, plan_test
from .run import RunResult, check_study, engine_quiet, run_study
from .scripts import check_workflow, is_script, study_of, workflow_from
from .settings import Settings, read_settings
from .show import (
    CAUTION,
    Progress,
    finding_record,
    p_value,
    paragraph,
    print_findings,
    print_table,
    print_tests,
)
from .staging import PAGE
from .study import read_table, table_text
from .table import rows_from, with_participants
from .trials import Simulation, plan_study

_PATH = click.Path(path_type=Path)


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="sequester")
def main() -> None:
    """Region-of-interest statistics that never test a region on the data that chose it.

    Exit codes: 0 done, 1 something failed, 2 the request or the data is wrong, 3 refused by
    the guard, 4 branches of a ledger wait to be joined (verify alone). For research use, not for
    diagnosis.
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
    click.echo(json.dumps(finite(told), default=str, allow_nan=False))


@main.command()
@click.argument("study_toml", type=_PATH)
@click.option(
    "--work",
    type=_PATH,
    help="Keep the engine's working folder here, so that a second run is faster.",
)
@click.option(
    "--processes",
    type=click.IntRange(1),
    default=1,
    show_default=True,
    help="How many steps may run at once; the results have the same bytes.",
)
@click.option(
    "--engine",
    type=click.Choice(ENGINES),
    help="What runs the steps; default: Linear, or MultiProc for more than one process.",
)
@click.option(
    "--engine-arg",
    "engine_args",
    metavar="NAME=VALUE",
    multiple=True,
    help="What the engine is given, such as sbatch_args='--mem 8G'; may be repeated.",
)
@click.option("--no-page", is_flag=True, help="Make no page; `sequester report` makes it later.")
@_command
def run(
    study_toml: Path,
    work: Path | None,
    processes: int,
    engine: str | None,
    engine_args: tuple[str, ...],
    no_page: bool,
    show: Progress,
    as_json: bool,
) -> dict[str, Any]:
    """Analyse a study, write its output folder, and the page of it."""
    how = {"engine": engine or "", "plugin_args": plugin_args(engine_args), "processes": processes}
    settings = read_settings(study_toml)
    result, page = _run(settings, show, page=not no_page, work=work, **how)
    show.clear()
    if not as_json:
        print_tests(settings, result.tests, result.comparisons, result.overlaps)
        click.echo(f"\nWritten to {result.output}")
        if page is not None:
            click.echo(f"The page to read: {page}")
        click.echo(CAUTION)
    told = {"output": str(result.output), "report": page and str(page)}
    return {**told, "tests": result.tests}


def _run(
    settings: Settings, show: Progress, *, page: bool = True, **more: Any
) -> tuple[RunResult, Path | None]:
    """Run a study and make its page; a refusal's page goes when a later run succeeds."""
    from .report.page import write_report  # draws, and so loads slowly
    from .report.refused import refused_page, write_refused

    def finish(folder: Path) -> None:
        show.say("making the page")
        write_report(folder)

    try:
        result = run_study(settings, show.node, finish=finish if page else None, **more)
    except GuardRefused as error:
        told = write_refused(error, settings.output, settings.name, settings.variants)
        error.args = (f"{error}\n\nThe refusal as a page: {told}",)
        raise
    refused_page(settings.output).unlink(missing_ok=True)
    return result, result.output / PAGE if page else None


@main.command()
@click.argument("run_folder", type=_PATH)
@_command
def report(run_folder: Path, show: Progress, as_json: bool) -> dict[str, Any]:
    """Make the page of a run again, from its output folder alone: report.html and its figures."""
    from .report.page import write_report  # draws, and so loads slowly

    page = write_report(run_folder)
    if not as_json:
        click.echo(f"The page to read: {page}")
    return {"report": str(page)}


@main.command()
@click.argument("target", metavar="STUDY.toml|FILE.py:FUNCTION")
@click.option(
    "--study",
    "table",
    type=_PATH,
    help="The study table, when a function of a script makes the workflow.",
)
@click.option(
    "--origins",
    type=_PATH,
    help="A TOML file with [[origin]] tables, as in STUDY.toml.",
)
@click.option(
    "--ledger",
    type=_PATH,
    help="That of the script's runs: it is read, and not written.",
)
@click.option(
    "--must-judge",
    is_flag=True,
    help="Exit code 1 when nothing was judged, or values of a region go where nobody knows.",
)
@_command
def check(
    target: str,
    table: Path | None,
    origins: Path | None,
    ledger: Path | None,
    must_judge: bool,
    show: Progress,
    as_json: bool,
) -> dict[str, Any]:
    """Judge a study, or a workflow, without running it: every meeting, its verdict and level.

    \b
    sequester check STUDY.toml
    sequester check FILE.py:FUNCTION --study table.tsv
    """
    if table is None:
        if origins is not None or ledger is not None or is_script(target):
            raise InputError(
                "no study table",
                where=target,
                expected="sequester check FILE.py:FUNCTION --study table.tsv",
                remedy="make one: sequester table FOLDER",
            )
        settings = read_settings(target)
        show.say("reading headers and digests")
        study, findings = settings.study, check_study(settings)
        fine = "Nothing is refused; `sequester run` may run this study."
    else:
        study = study_of(table, origins)
        findings = check_workflow(workflow_from(target), study, ledger)
        fine = "Nothing is refused; the workflow may run under GuardPlugin."
        if not findings:
            fine = NOTHING_JUDGED
    if must_judge and (findings.warnings or not findings):
        raise SequesterError(" ".join(findings.warnings) if findings else NOTHING_JUDGED)
    show.clear()
    if not as_json:
        if findings:
            print_findings(findings)
            click.echo()
        for said in (*findings.warnings, fine):
            click.echo(paragraph(said))
    found = [finding_record(f, study) for f in findings]
    return {"findings": found, "warnings": findings.warnings}


@main.command()
@click.argument("mask", required=False, type=_PATH)
@click.option(
    "--study",
    "study_toml",
    type=_PATH,
    default=Path("STUDY.toml"),
    show_default=True,
    help="The study whose ledger it goes to; with --ledger, its table.",
)
@click.option(
    "--ledger",
    type=_PATH,
    help="That of a workflow of your own, run with GuardPlugin(..., ledger=...).",
)
@click.option("--source", default="", help="Where the region comes from, with a reference.")
@click.option("--label", "labels", multiple=True, help="MASK is an atlas: number or name.")
@click.option("--all-labels", is_flag=True, help="MASK is an atlas: all of it.")
@click.option("--centre", type=float, nargs=3, help="A sphere instead of a MASK: x y z in mm.")
@click.option("--radius", type=float, help="Of the sphere, in mm.")
@click.option(
    "--derived-from",
    multiple=True,
    help="Data of the study it was made from, such as sub=01,task=lanterns; may be repeated.",
)
@click.option("--explained", default="", help="Why it is like a mask that a run recorded.")
@_command
def declare(
    mask: Path | None,
    study_toml: Path,
    ledger: Path | None,
    source: str,
    derived_from: tuple[str, ...],
    explained: str,
    show: Progress,
    as_json: bool,
    **place: Any,
) -> dict[str, Any]:
    """Write to the study's ledger where a region comes from, before data are looked at.

    \b
    sequester declare MASK --source TEXT                a mask
    sequester declare ATLAS --label 12 --source TEXT    labels of an atlas
    sequester declare --centre X Y Z --radius R --source TEXT
    sequester declare                                   all that the study file states
    """
    stated: Callable[..., tuple[list[Entry], list[str]]]
    if ledger is None:
        settings = read_settings(study_toml)
        study, path, stated = settings.study, settings.ledger, partial(declare_region, settings)
    else:
        study, path = read_table(study_toml), ledger
        stated = partial(declare_in, path, study)
    derived = tuple(unit_of(text, study) for text in derived_from)
    region = given_by_hand(study, mask, source.strip(), derived, **place)
    if region is None and (ledger is not None or source or derived or explained):
        raise InputError("nothing to declare", expected="MASK, or --centre and --radius")
    made, notes = stated(region, explained)
    head = " ".join(Ledger(path).sound().heads)
    if not as_json:
        for entry in made:
            told = entry.body.get("what") or f"{entry.body['field']}: {entry.body['says']}"
            click.echo(f"{entry.kind}: {told}")
        if not made:
            click.echo("Nothing new: all of it is in the ledger.")
        for note in notes:
            click.echo("\n" + paragraph(f"note: {note}"))
        click.echo(f"head {head}")
    return {"entries": [entry.digest for entry in made], "notes": notes, "head": head}


@main.command()
@click.argument("study_or_ledger", type=_PATH)
@click.option("--deposited", default="", help="A head that was noted earlier: it must be there.")
@_command
def verify(study_or_ledger: Path, deposited: str, show: Progress, as_json: bool) -> dict[str, Any]:
    """See whether a ledger holds what was written, and print its head.

    Exit codes: 0 when it does, 1 when it was changed, 4 when branches of it were merged and wait
    to be joined by the next run or declare.
    """
    given = study_or_ledger
    path = ledger_path(given) if given.suffix == ".toml" else given
    if not path.is_file():
        raise InputError("no such ledger", where=str(path), remedy="declare or run something first")
    chain = Ledger(path).chain()
    faults = chain.problems(deposited)
    if faults:
        raise SequesterError(f"the ledger was changed ({path})\n" + "\n".join(faults))
    if chain.unjoined:
        raise Unjoined(
            f"the ledger has more than one end, as after a merge ({path})\n{chain.unjoined}"
        )
    head = " ".join(chain.heads)
    if not as_json:
        kinds = [entry.kind for entry in chain.entries]
        counts = ", ".join(f"{kinds.count(kind)} {kind}" for kind in dict.fromkeys(kinds))
        click.echo(f"{len(kinds)} entries: {counts or 'none'}")
        if chain.torn:
            click.echo(
                f"A torn tail of {chain.torn} bytes: a write was cut off. The next one removes it."
            )
        click.echo(f"head {head}")
    return {"entries": len(chain.entries), "torn": chain.torn, "head": head}


@main.command()
@click.argument("folder", type=_PATH)
@click.option("--pattern", help='Such as "sub-{sub}/con_{contrast}.nii.gz"; default: BIDS names.')
@click.option("--suffix", default="bold", show_default=True, help="Suffix of what was acquired.")
@click.option(
    "--participants",
    type=_PATH,
    help="A participants.tsv: its columns by subject, exclude_reason and exchange among them.",
)
@click.option("--output", type=_PATH, help="File; default: standard output.")
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
@click.argument("study_toml", required=False, type=_PATH)
@click.option("--from", "results", type=_PATH, help="Results of a run.")
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
@click.option("--figure", type=_PATH, help="Draw it, as an SVG file.")
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
            click.echo("\n" + paragraph(note))
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


@main.command("contour")
@click.argument("mask", type=_PATH)
@click.argument("study_toml", type=_PATH)
@click.option("--roi", default="", help="On the maps of this region; default: all sets of maps.")
@_command
def contour_command(
    mask: Path, study_toml: Path, roi: str, show: Progress, as_json: bool
) -> dict[str, Any]:
    """Does a mask of unknown making follow the contour of a study's maps?

    A mask that was thresholded from the data it is to be tested on shows it by its boundary.
    It is a report: nothing is refused, and no effect in the mask is read.
    """
    settings = read_settings(study_toml)
    show.say("reading maps")
    with engine_quiet():
        found = check_mask(mask.absolute(), settings, roi)
    known = known_as(mask.absolute(), settings)
    show.clear()
    told = [
        {
            "maps_of": one.name,
            "contour": made and made.share,
            "p": made and made.p,
            "p_placements": made and made.p_placements,
            "p_steps": made and made.p_steps,
            "flagged": made and made.flagged,
            "sentence": made.describe() if made else TOO_SMALL,
        }
        for one, made in found
    ]
    for row in told if not as_json else []:
        click.echo(paragraph(f"On the maps of {row['maps_of']}. {row['sentence']}"))
    if known and not as_json:
        click.echo(paragraph(known))
    return {"checked": told, "known": known or None}


@main.command("calibrate")
@click.argument("study_toml", type=_PATH)
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
    type=_PATH,
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
            click.echo("\n" + paragraph(note))
    return {"calibrated": made.records, "notes": made.notes}


@main.command()
@click.argument("folder", type=_PATH, default=Path("sequester-demo"))
@_command
def demo(folder: Path, show: Progress, as_json: bool) -> dict[str, Any]:
    """Make a small study with known truth, analyse it, and have its circular twin refused."""
    show.say("making 24 subjects x 4 runs of effect maps")
    honest, circular = write_demo(folder)
    result, page = _run(read_settings(honest), show, record=False)
    tests = {row["roi"]: row for row in result.tests}

    def truth(pattern: str) -> float:
        masks = sorted((folder / "results" / "masks").glob(pattern))
        return truth_in([read_map(path)[0] != 0 for path in masks])

    held_out = {name: truth(f"label-{name}_desc-without*_mask.nii.gz") for name in PLACES}
    looked = {name: truth(f"label-{name}Look_mask.nii.gz") for name in PLACES}
    try:
        _run(read_settings(circular), show, record=False)
    except GuardRefused as error:
        refusal = str(error)
    else:
        raise SequesterError("the circular twin was not refused; please report this")
    show.clear()
    if not as_json:
        rows = [
            [
                "region",
                "circular (BIASED)",
                "truth",
                "held out, 95 % interval",
                "truth",
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
            "A made-up study: 24 subjects x 4 runs. Arbor responds strongly, Brook weakly,\n"
            "and Cinder is noise: there is nothing in it to find.\n"
        )
        print_table(rows)
        click.echo(
            "\nCircular: chosen and read on all data; it has no interval and no p. Truth: the\n"
            "mean effect that was put into those voxels. Held out: leave-one-subject-out;\n"
            "interval approximate; p by whole-procedure sign flip, one-sided, for the search\n"
            "region. Where the rule found no cluster (as in Cinder), the 20 strongest voxels\n"
            "stood in, as the study file says. One study proves nothing: the tests repeat it\n"
            "over 200 seeds.\n"
            f"\nThe same study, asking for a t-test in the circular region:\n{circular}\n"
        )
        click.echo(refusal)
        click.echo(
            f"\nWritten to {result.output}\nThe page to read: {page}\n"
            f"Start your own from {honest}\n{CAUTION}"
        )
    return {
        "tests": result.tests,
        "truth": held_out,
        "truth_in_circular": looked,
        "refusal": refusal,
        "report": str(page),
    }
