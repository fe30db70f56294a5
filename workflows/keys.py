"""Reading a TOML file key by key, with errors that name the file and the line."""

from __future__ import annotations

import math
import re
import tomllib
from collections.abc import Iterable
from pathlib import Path
from typing import Any

from ..nodes.errors import InputError

_NUMBER = (int, float)
# What a user calls a type of TOML's.
_WORDS: dict[type | tuple[type, ...], str] = {
    str: "text in quotes",
    bool: "true or false, without quotes",
    int: "a whole number, without quotes",
    _NUMBER: "a number, without quotes",
    list: "a list [ ... ]",
    dict: "a table { key = value, ... }",
}
_LONG = 60


class Reader:
    """Reads keys of the tables of one TOML file.

    Parameters
    ----------
    path : Path
    text : str
        The file's text.
    start, end : int
        The lines (from 0, the last one excluded) in which keys are looked for first in messages.
    """

    def __init__(self, path: Path, text: str, start: int = 0, end: int | None = None) -> None:
        self.path, self.text, self.start, self.end = path, text, start, end

    def within(self, section: str, number: int) -> Reader:
        """The same file, looking for lines in table `number` of an array first."""
        headers = [
            i
            for i, line in enumerate(self.text.splitlines())
            if re.match(rf"\s*\[\[\s*{section}\s*\]\]", line)
        ]
        if number >= len(headers):  # not written with headers, but inline
            return self
        end = headers[number + 1] if number + 1 < len(headers) else None
        return Reader(self.path, self.text, headers[number], end)

    def where(self, key: str) -> str:
        """The file, and the first line (of this table, or at all) on which a key stands."""
        pattern = re.compile(rf'(^|[\s{{,\["]){re.escape(key)}["\]]*\s*[=\]]')
        lines = list(enumerate(self.text.splitlines(), 1))
        for number, line in [*lines[self.start : self.end], *lines]:
            if pattern.search(line):
                return f"{self.path}, line {number}"
        return self.here

    @property
    def here(self) -> str:
        """The file, and the line of the table's own header if it has one."""
        return f"{self.path}, line {self.start + 1}" if self.start else str(self.path)

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
        listed = self.get(table, key, object, default)
        wrong = [x for x in listed if not isinstance(x, dict)] if isinstance(listed, list) else [1]
        if wrong:
            raise InputError(
                f"{key} is no list of tables",
                where=self.where(key),
                expected=f"{key} = [{{ ... }}, ...], or [[{key}]] above each",
                got=_shown(wrong[0] if isinstance(listed, list) else listed),
            )
        return list(listed)

    def get(
        self,
        table: dict[str, Any],
        key: str,
        kind: type | tuple[type, ...],
        default: Any,
        of: str = "",
    ) -> Any:
        """A value of a type, or the default; `...` as default makes it mandatory.

        `of` is the key of which `table` is the value, for messages.
        """
        if key not in table:
            if default is ...:
                raise InputError(
                    f"missing key {key!r}" + (f" in {of}" if of else ""),
                    where=self.where(of) if of else self.here,
                    remedy=f"add it: {key} = ...",
                )
            return default
        value = table[key]
        if not isinstance(value, kind) or (isinstance(value, bool) and kind in (int, _NUMBER)):
            raise InputError(
                f"{key} has the wrong type",
                where=self.where(key),
                expected=_WORDS[kind],
                got=_shown(value),
            )
        if isinstance(value, str) and "\0" in value:
            raise InputError(
                f"{key} with a NUL character",
                where=self.where(key),
                got=repr(value),
                remedy="take the character out",
            )
        return value

    def number(self, table: dict[str, Any], key: str, default: Any, of: str = "") -> float:
        """A finite number."""
        value = float(self.get(table, key, _NUMBER, default, of))
        if not math.isfinite(value):
            raise InputError(f"{key} is no finite number", where=self.where(key), got=f"{value}")
        return value

    def one_of(
        self, table: dict[str, Any], key: str, allowed: Iterable[str], default: Any, of: str = ""
    ) -> str:
        """A word out of a list."""
        value = self.get(table, key, str, default, of)
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


def _shown(value: Any) -> str:
    """A value as it may be written, cut when long."""
    text = str(value).lower() if isinstance(value, bool) else repr(value)
    return text if len(text) <= _LONG else text[:_LONG] + " ..."


def read_toml(path: Path) -> tuple[dict[str, Any], Reader]:
    """A TOML file's tables, and the reader of its keys.

    Raises
    ------
    InputError
        When there is no such file, or it is malformed.
    """
    if not path.is_file():
        raise InputError(
            "no such study file",
            where=str(path),
            got="a folder" if path.is_dir() else "",
            remedy="give a STUDY.toml",
        )
    try:
        text = path.read_text(encoding="utf-8-sig")  # some editors begin with a byte order mark
    except UnicodeDecodeError as error:
        raise InputError(
            "unreadable study file",
            where=str(path),
            expected="TOML, which is text in UTF-8",
            got=str(error),
            remedy="save it as UTF-8",
        ) from error
    try:
        return tomllib.loads(text), Reader(path, text)
    except tomllib.TOMLDecodeError as error:
        raise InputError(
            "malformed TOML", where=str(path), got=str(error), remedy="correct that line"
        ) from error
