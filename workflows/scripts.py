"""A workflow that a function in somebody's script makes: loaded, and judged without running it."""

from __future__ import annotations

import importlib.util
import sys
import tempfile
import traceback
from collections.abc import Iterator
from contextlib import contextmanager, redirect_stdout
from copy import deepcopy
from dataclasses import replace
from pathlib import Path
from typing import Any

from nipype import Workflow

from ..nodes.errors import InputError, SequesterError
from .findings import Findings
from .guard import GuardPlugin
from .keys import read_toml
from .run import engine_quiet
from .settings import origin_tables
from .study import Study, read_table


def is_script(target: str) -> bool:
    """Whether a text looks like ``FILE.py:FUNCTION``.

    Examples
    --------
    >>> is_script("plan.py:make"), is_script("STUDY.toml")
    (True, False)
    """
    return ".py" in Path(target).suffix


def workflow_from(target: str) -> Workflow:
    """The workflow that a function returns.

    Parameters
    ----------
    target : str
        ``FILE.py:FUNCTION``; the function is called without arguments.

    Raises
    ------
    InputError
        When there is no such file or function, none is named, it fails, runs something, or
        returns no workflow.
    """
    if Path(target).is_file():
        raise InputError(
            "no function is named",
            where=target,
            expected="FILE.py:FUNCTION, a function that returns a workflow",
        )
    name, _, function = target.rpartition(":")
    path = Path(name)
    if not path.is_file():
        raise InputError(
            "no such script",
            where=name or target,
            expected="FILE.py:FUNCTION, a function that returns a workflow",
        )
    with _as_script(path):
        module = _loaded(path)
        make = getattr(module, function, None)
        if not callable(make):
            known = sorted(
                key
                for key, value in vars(module).items()
                if callable(value) and getattr(value, "__module__", "") == module.__name__
            )
            raise InputError(
                f"no function {function!r} in the script",
                where=name,
                expected=f"one of {', '.join(known)}" if known else "a function",
                remedy="name the function that returns the workflow",
            )
        with _told(path, f"{function}()"):
            made = make()
    if not isinstance(made, Workflow):
        raise InputError(
            f"{function}() returns no workflow",
            where=name,
            expected="a nipype Workflow",
            got=type(made).__name__,
            remedy="end it with: return workflow",
        )
    return made


def study_of(table: Path, origins: Path | None = None) -> Study:
    """A study table, with the origins that a TOML file declares in ``[[origin]]`` tables.

    Raises
    ------
    InputError
    """
    study = read_table(table)
    if origins is None:
        return study
    toml, read = read_toml(origins)
    read.known(toml, {"origin"})
    return replace(study, origins=tuple(origin_tables(read, toml, study)))


def check_workflow(workflow: Workflow, study: Study, ledger: Path | None = None) -> Findings:
    """Judge a workflow; nothing runs, and nothing is written to its folders or to its ledger.

    Raises
    ------
    GuardRefused
        With all findings.
    InputError
        When there is no such ledger, or it was changed.
    """
    if ledger is not None and not ledger.is_file():
        raise InputError(
            "no such ledger",
            where=str(ledger),
            remedy="leave --ledger out before the first run with GuardPlugin(..., ledger=...)",
        )
    guard = GuardPlugin(study, dry=True, ledger=ledger)
    with tempfile.TemporaryDirectory() as folder, engine_quiet():
        judged = deepcopy(workflow)
        judged.base_dir = folder
        judged.config["execution"] = {**workflow.config["execution"], "create_report": "false"}
        judged.run(plugin=guard)
    return guard.findings


def _loaded(path: Path) -> Any:
    name = f"sequester_script_{path.stem}"
    spec = importlib.util.spec_from_file_location(name, path)
    if spec is None or spec.loader is None:
        raise InputError("the script is no Python file", where=str(path), expected="a name in .py")
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module  # what the script defines is pickled by this name
    with _told(path, "loading it"):
        spec.loader.exec_module(module)
    return module


@contextmanager
def _as_script(path: Path) -> Iterator[None]:
    """Modules beside the script are found, what it prints is no result, and nothing runs."""

    def refuse(*_: Any, **__: Any) -> None:
        raise InputError(
            "the script runs a workflow when it is loaded",
            where=str(path),
            expected="a function that returns it",
            remedy='put the run below: if __name__ == "__main__":',
        )

    folder, run = str(path.absolute().parent), Workflow.run
    kept, sys.dont_write_bytecode = sys.dont_write_bytecode, True  # nothing beside the script
    sys.path.insert(0, folder)
    Workflow.run = refuse
    try:
        with redirect_stdout(sys.stderr):
            yield
    finally:
        Workflow.run = run
        sys.path.remove(folder)
        sys.dont_write_bytecode = kept


@contextmanager
def _told(path: Path, doing: str) -> Iterator[None]:
    """Whatever the script raises, told with the line of the script."""
    try:
        yield
    except SequesterError:
        raise
    except (Exception, SystemExit) as error:
        lines = [
            frame.lineno
            for frame in traceback.extract_tb(error.__traceback__)
            if Path(frame.filename).resolve() == path.resolve()
        ]
        line = getattr(error, "lineno", None) or (lines[-1] if lines else None)
        raise InputError(
            f"the script fails on {doing}" if doing.endswith("it") else f"{doing} fails",
            where=f"{path}, line {line}" if line else str(path),
            got=f"{type(error).__name__}: {error}",
        ) from error
