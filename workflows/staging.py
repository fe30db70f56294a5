"""The output folder of a run: who may write there, and how it is replaced without losing anything.

Results are made in a staging folder beside the target, which takes the target's name at the end.
A run that fails or is killed leaves the earlier results as they were. Files in the target that
no run wrote are somebody's own: they are carried over.
"""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from filelock import FileLock, Timeout

from ..nodes.errors import InputError

MANIFEST = "manifest.json"
# The page of a run, which can be made again and is not in the manifest.
PAGE, METHODS, FIGURES = "report.html", "methods.txt", "figures"


@contextmanager
def claimed(target: Path, study: str, inputs: Iterable[Path] = ()) -> Iterator[Path]:
    """A staging folder that becomes `target` when the block ends well.

    Parameters
    ----------
    target : Path
        Of a symbolic link, what it points to is replaced.
    study : str
        Whose results these are: those of another study are not replaced.
    inputs : iterable of Path
        Files that must not lie in the target.

    Raises
    ------
    InputError
        When the target is a file, a folder of something else, holds an input, or is in use by
        another run; and when a file cannot be read or written in the block.
    """
    named, target = target, target.resolve()
    _check(named, target, study, inputs)
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        # Its file stays: taking it away while somebody waits for it would admit two.
        lock = FileLock(target.parent / f".{target.name}.lock")
        # A run that was killed just now holds it a moment longer, through a process it had begun.
        lock.acquire(timeout=0.2)
    except Timeout:
        raise InputError(
            "output folder in use",
            where=str(named),
            got="another run is writing to it",
            remedy="wait for it, or name another output folder",
        ) from None
    except OSError as error:
        raise InputError(
            "output folder cannot be made",
            where=str(named),
            got=str(error),
            remedy="check the path and its permissions",
        ) from error
    # The lock is held, so whatever lies here was left by a run that was killed.
    stage, old = (target.parent / f".{target.name}.{word}" for word in ("new", "old"))
    try:
        if old.exists() and not target.exists():
            old.rename(target)  # killed between the two renames below
        for leftover in (stage, old):
            shutil.rmtree(leftover, ignore_errors=True)
        stage.mkdir()
        yield stage
        _carry_over(target, stage)
        _take_place(stage, target, old)
    except OSError as error:
        raise _failed(error, named, target) from error
    finally:
        for leftover in (stage, old):
            shutil.rmtree(leftover, ignore_errors=True)
        lock.release()


def _failed(error: OSError, named: Path, target: Path) -> InputError:
    """What a run's error of reading or writing is called: mostly there is no room."""
    got = os.strerror(error.errno or 0)
    path = None if error.filename is None else Path(os.fsdecode(error.filename))
    if path is not None and not str(path).startswith(str(target.with_name(f".{target.name}."))):
        return InputError(
            "a file cannot be read or written",
            where=str(path),
            got=got,
            remedy="check it and its permissions; earlier results are untouched",
        )
    return InputError(
        "output cannot be written",
        where=str(named),
        got=got,
        remedy="make room, or name another output folder; earlier results are untouched",
    )


def _check(named: Path, target: Path, study: str, inputs: Iterable[Path]) -> None:
    """That nothing but the results of an earlier run would be replaced."""
    if target.exists() and not target.is_dir():
        raise InputError(
            "output is a file",
            where=str(named),
            expected="a folder, or nothing yet",
            remedy="name another output folder",
        )
    for path in inputs:
        if path.resolve().is_relative_to(target):
            raise InputError(
                "the output folder holds what the study is made from",
                where=str(named),
                expected="a folder of its own",
                got=f"it holds {path}",
                remedy="name another output folder; nothing was changed",
            )
    if not target.is_dir() or not any(target.iterdir()):
        return
    manifest = _manifest(target)
    if manifest is None:
        raise InputError(
            "output folder holds something else",
            where=str(named),
            expected=f"nothing, or an earlier run (its {MANIFEST})",
            remedy="name another output folder; nothing was changed",
        )
    if manifest["study"] != study:
        raise InputError(
            "output folder holds the results of another study",
            where=str(named),
            expected=f"nothing, or results of {study}",
            got=f"those of {manifest['study']}",
            remedy="name another output folder, or take these away first; nothing was changed",
        )


def _manifest(folder: Path) -> dict[str, Any] | None:
    """The manifest that a run wrote into its folder, or None where no run did."""
    try:
        manifest = json.loads((folder / MANIFEST).read_text(encoding="utf-8"))
    except (OSError, ValueError):  # unreadable is not known to be ours
        return None
    ours = isinstance(manifest, dict) and {"study", "outputs"} <= manifest.keys()
    return manifest if ours else None


def _carry_over(target: Path, stage: Path) -> None:
    """Keep what no run wrote; where a new result has its name, the result stays."""
    manifest = _manifest(target) if target.is_dir() else None
    if manifest is None:
        return
    ours = {MANIFEST, PAGE, METHODS, *manifest["outputs"]}
    folders = {str(parent) for name in ours for parent in Path(name).parents}
    for folder, inside, names in os.walk(target):
        links = [name for name in inside if Path(folder, name).is_symlink()]
        for name in (*names, *links):
            path = Path(folder, name).relative_to(target)
            if path.as_posix() not in ours and path.parts[0] != FIGURES:
                _keep(target / path, stage / path)
        path = Path(folder).relative_to(target)
        if str(path) not in folders and path.parts[0] != FIGURES:
            (stage / path).mkdir(parents=True, exist_ok=True)


def _keep(source: Path, made: Path) -> None:
    """The same file or link in another folder, without a copy where the disk can."""
    if os.path.lexists(made):
        return
    made.parent.mkdir(parents=True, exist_ok=True)
    try:
        os.link(source, made, follow_symlinks=False)
    except OSError:  # some disks have no hard links
        shutil.copy2(source, made, follow_symlinks=False)


def _take_place(stage: Path, target: Path, old: Path) -> None:
    """Give the new results their name; the earlier ones come back if that fails."""
    if target.exists():
        target.rename(old)
    try:
        stage.rename(target)
    except BaseException:
        if old.exists():
            old.rename(target)
        raise
