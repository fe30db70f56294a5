"""Reading a TOML file key by key, with errors that name the file and the line."""

from __future__ import annotations

import math
import re
import tomllib
from collections.abc import Iterable
from pathlib import Path
from typing import Any

from ..nodes.errors import InputError


class Reader:
    """Reads keys of the tables of one TOML file.

    Parameters
    ----------
    path : Path
    text : str
        The file's text.
    start : int
        The line (from 0) from which keys are looked for in messages.
    """

    def __init__(self, path: Path, text: str, start: int = 0) -> None:
        self.path, self.text, self.start = path, text, start

    def within(self, section: str, number: int) -> Reader:
        """The same file, looking for lines from the header of table `number` of an array on."""
        headers = [
            i
            for i, line in enumerate(self.text.splitlines())
            if re.match(rf"\s*\[\[\s*{section}\s*\]\]", line)
        ]
        return Reader(self.path, self.text, headers[number] if number < len(headers) else 0)

    def where(self, key: str) -> str:
        """The file, and the first line (from `start` on, or at all) on which a key stands."""
        pattern = re.compile(rf'(^|[\s{{,\["]){re.escape(key)}["\]]*\s*[=\]]')
        lines = list(enumerate(self.text.splitlines(), 1))
        for number, line in [*lines[self.start :], *lines[: self.start]]:
            if pattern.search(line):
                return f"{self.path}, line {number}"
        return str(self.path)

    def known(self, table: dict[str, Any], keys: Iterable[str], section: str = "") -> None:
        """Refuse keys that do not exist."""
        for key in table:
            if key not in keys:
                raise InputError(
                    f"unknown key {key!r}" + (f" in {section}" if section else ""),
                    where=self.where(key),
                    expected="one of " + ", ".join(sorted(keys)),
                )

    def tables(self, table: dict[str, Any], key: str, default: Any) -> list[dict[str, Any]]:
        """A list of tables, such as ``[[roi]]``."""
        listed = self.get(table, key, list, default)
        for item in listed:
            if not isinstance(item, dict):
                raise InputError(
                    f"{key} is no list of tables", where=self.where(key), got=repr(item)
                )
        return list(listed)

    def get(
        self, table: dict[str, Any], key: str, kind: type | tuple[type, ...], default: Any
    ) -> Any:
        """A value of a type, or the default; `...` as default makes it mandatory."""
        if key not in table:
            if default is ...:
                raise InputError(f"missing key {key!r}", where=str(self.path))
            return default
        value = table[key]
        if not isinstance(value, kind) or (isinstance(value, bool) and kind is not bool):
            names = (
                kind.__name__ if isinstance(kind, type) else " or ".join(k.__name__ for k in kind)
            )
            raise InputError(
                f"{key} has the wrong type",
                where=self.where(key),
                expected=names,
                got=f"{type(value).__name__} {value!r}",
            )
        return value

    def number(self, table: dict[str, Any], key: str, default: Any) -> float:
        """A finite number."""
        value = float(self.get(table, key, (int, float), default))
        if not math.isfinite(value):
            raise InputError(f"{key} is no finite number", where=self.where(key), got=f"{value}")
        return value

    def one_of(self, table: dict[str, Any], key: str, allowed: Iterable[str], default: Any) -> str:
        """A word out of a list."""
        value = self.get(table, key, str, default)
        if value not in allowed:
            raise InputError(
                f"unknown {key}",
                where=self.where(key),
                expected="one of " + ", ".join(allowed),
                got=repr(value),
            )
        return str(value)

    def point(self, table: dict[str, Any], key: str) -> tuple[float, float, float] | None:
        """A coordinate in mm, or None where the key is absent."""
        value = self.get(table, key, list, None)
        if value is None:
            return None
        numbers = [x for x in value if isinstance(x, int | float) and not isinstance(x, bool)]
        if len(value) != 3 or len(numbers) != 3 or not all(map(math.isfinite, numbers)):
            raise InputError(
                f"{key} is no coordinate",
                where=self.where(key),
                expected="[x, y, z] in mm",
                got=str(value),
            )
        return float(value[0]), float(value[1]), float(value[2])

    def label(self, table: dict[str, Any], key: str) -> str:
        """A BIDS label: letters and digits."""
        value = self.get(table, key, str, ...)
        if not re.fullmatch(r"[A-Za-z0-9]+", value):
            raise InputError(
                f"{key} is no label",
                where=self.where(key),
                expected="letters and digits only",
                got=repr(value),
            )
        return str(value)


def read_toml(path: Path) -> tuple[dict[str, Any], Reader]:
    """A TOML file's tables, and the reader of its keys.

    Raises
    ------
    InputError
        When there is no such file, or it is malformed.
    """
    if not path.is_file():
        raise InputError("no such study file", where=str(path), remedy="give a STUDY.toml")
    try:
        text = path.read_text(encoding="utf-8")
        return tomllib.loads(text), Reader(path, text)
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        raise InputError(
            "malformed TOML", where=str(path), got=str(error), remedy="correct that line"
        ) from error
