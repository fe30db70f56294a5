"""Data sets that are done, kept on disk, so that a run that was stopped goes on where it was.

One file a row: its first line says what the data sets are of, each further line is one of them.
A line that a stop cut short is taken away.
"""

from __future__ import annotations

import contextlib
import json
import os
from collections.abc import Iterator
from dataclasses import asdict
from pathlib import Path
from typing import Any

from filelock import FileLock, Timeout

from ..nodes.errors import InputError
from ..nodes.nullsets import Found


@contextlib.contextmanager
def kept_folder(folder: Path | None) -> Iterator[Path | None]:
    """The folder for data sets that are done, for this process alone."""
    if folder is None:
        yield None
        return
    if folder.exists() and not folder.is_dir():
        raise InputError("--keep is a file", where=str(folder), remedy="name a folder")
    folder.mkdir(parents=True, exist_ok=True)
    # Its file stays: taking it away while somebody waits for it would admit two.
    lock = FileLock(folder / ".lock")
    try:
        lock.acquire(timeout=0.2)  # held a moment longer by a run that was killed just now
    except Timeout:
        raise InputError(
            "--keep folder in use",
            where=str(folder),
            got="another calibration is writing to it",
            remedy="wait for it, or name another folder",
        ) from None
    try:
        yield folder
    finally:
        lock.release()


class Kept:
    """The data sets of one row that are done: in memory, and in a file if there is a folder.

    Parameters
    ----------
    folder : Path or None
    name : str
        Of the file.
    head : dict
        What the data sets are of, in plain types.

    Raises
    ------
    InputError
        When the file holds something else.
    """

    def __init__(self, folder: Path | None, name: str, head: dict[str, Any]) -> None:
        self.found: dict[int, Found] = {}
        self._path = None if folder is None else folder / f"{name}.jsonl"
        if self._path is None:
            return
        whole = b""
        if self._path.exists():
            there = self._path.read_bytes()
            whole = there[: there.rfind(b"\n") + 1]
            if len(whole) < len(there):
                os.truncate(self._path, len(whole))
        if not whole:
            self._append(head)
            return
        try:
            first, *others = (json.loads(line) for line in whole.splitlines())
            self.found = {one.pop("set"): Found(**one) for one in others}
        except (ValueError, TypeError, KeyError, AttributeError) as error:
            raise InputError(
                "kept data sets cannot be read",
                where=str(self._path),
                got=str(error),
                remedy="remove the file",
            ) from error
        if first != head:
            differ = [
                key for key in head if not isinstance(first, dict) or first.get(key) != head[key]
            ]
            raise InputError(
                "kept data sets are of something else",
                where=str(self._path),
                expected="the same version, study, regions, maps and options",
                got=f"another {', '.join(differ)}",
                remedy="name another folder, or remove the file",
            )

    def lacking(self, sets: int) -> list[int]:
        """The numbers of the data sets that are not there yet."""
        return [number for number in range(sets) if number not in self.found]

    def add(self, number: int, found: Found) -> None:
        """Keep one data set."""
        self.found[number] = found
        self._append({"set": number, **asdict(found)})

    def _append(self, line: dict[str, Any]) -> None:
        if self._path is not None:
            with self._path.open("ab", buffering=0) as file:
                file.write(f"{json.dumps(line)}\n".encode())  # in one piece
