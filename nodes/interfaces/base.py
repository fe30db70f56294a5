"""What all our interfaces share: contracts on the class, and errors that survive the engine."""

from __future__ import annotations

import hashlib
import json
import math
from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping
from importlib.metadata import version
from pathlib import Path
from typing import Any, ClassVar

from nipype.interfaces.base import (
    BaseInterfaceInputSpec,
    SimpleInterface,
    TraitedSpec,
    isdefined,
    traits,
)

from ..errors import InputError, SequesterError
from ..images import write_bytes
from ..rules import Meeting, Rule, Statistic

ERROR_FILE = "sequester-error.json"


def _release() -> str:
    """The version, and what the nodes' source is: in a checkout it changes at one version."""
    source = hashlib.sha256()
    for path in sorted(Path(__file__).parents[1].rglob("*.py")):
        source.update(path.read_bytes())
    return f"{version('sequester')} {source.hexdigest()[:12]}"


class InputSpec(BaseInterfaceInputSpec):
    """Adds the release to the hashed inputs: the engine does not notice a changed program."""

    release = traits.Str(_release(), usedefault=True, desc="sequester's version and source")


class SequesterInterface(SimpleInterface, ABC):
    """Base of our interfaces.

    A subclass gives ``_work()``: load, one call, save, and a dict of the outputs.

    Attributes
    ----------
    touch_rules : dict of str to Rule
        How each output's elements inherit touches; an output not named touches everything.
    volumes : dict of str to str
        For a field with image paths, the parallel field with volume numbers.
    labels_read : dict of str to callable
        For a field with label images, which labels are read: from the settings to the numbers, or
        to None when they are not known before the run.
    meeting, statistic : Meeting, Statistic or None
    mem_gb : float
        What a node needs unless the plan knows better.
    """

    touch_rules: ClassVar[dict[str, Rule]] = {}
    volumes: ClassVar[dict[str, str]] = {}
    labels_read: ClassVar[dict[str, Callable[[Mapping[str, Any]], tuple[int, ...] | None]]] = {}
    meeting: ClassVar[Meeting | None] = None
    statistic: ClassVar[Statistic | None] = None

    @abstractmethod
    def _work(self, cwd: Path) -> dict[str, Any]:
        """Load, one call, save; the outputs by name."""

    def _run_interface(self, runtime: Any) -> Any:
        cwd = Path(runtime.cwd)
        try:
            self._results = self._work(cwd)
        except SequesterError as error:
            # The engine turns exceptions into text; this keeps the error itself for the caller.
            note: dict[str, Any] = {"kind": type(error).__name__, "message": str(error)}
            if isinstance(error, InputError):
                note["fields"] = error.fields
            try:
                write_bytes(cwd / ERROR_FILE, json.dumps(note).encode())
            except OSError:
                # On a full disk there is no room for the note either; the error itself goes on,
                # as the engine's text.
                raise error from None
            raise
        return runtime

    def _value(self, name: str) -> Any:
        value = getattr(self.inputs, name)
        return value if isdefined(value) else None


def one_or_each(field: str, items: list[Any] | None, n_rows: int) -> list[Any]:
    """An input that holds one item for all rows, or one per row: one per row.

    Raises
    ------
    InputError
        For any other number of items.
    """
    if not items:
        return [None] * n_rows
    if len(items) not in (1, n_rows):
        raise InputError(
            f"{field} do not pair up with the rows",
            expected=f"one for all, or one for each of {n_rows} rows",
            got=str(len(items)),
        )
    return list(items) * (n_rows if len(items) == 1 else 1)


def notes_of(folder: Path) -> list[Path]:
    """What a node of ours (or an element of it) left of an error in its working folder."""
    elements = folder.glob(f"mapflow/*/{ERROR_FILE}")  # where a MapNode runs its elements
    return [path for path in (folder / ERROR_FILE, *sorted(elements)) if path.is_file()]


def kept_error(folder: Path) -> SequesterError | None:
    """The error a node of ours (or an element of it) left in its working folder, as raised."""
    notes = notes_of(folder)
    if not notes:
        return None
    note = json.loads(notes[0].read_text())
    kind = _error_kinds(SequesterError)[note["kind"]]
    if "fields" in note:
        fields = dict(note["fields"])
        return kind(fields.pop("what"), **fields)
    return kind(note["message"])


def _error_kinds(base: type[SequesterError]) -> dict[str, type[SequesterError]]:
    found = {base.__name__: base}
    for kind in base.__subclasses__():
        found |= _error_kinds(kind)
    return found


def write_json(path: Path, content: dict[str, Any]) -> str:
    """Write JSON, keys in the given order, and return the path as text.

    Numbers that are not finite become null: JSON has no word for them.
    """
    text = json.dumps(finite(content), indent=2, ensure_ascii=False, allow_nan=False)
    write_bytes(path, f"{text}\n".encode())
    return str(path)


def read_json(path: str | Path) -> dict[str, Any]:
    """A record that a node wrote."""
    record: dict[str, Any] = json.loads(Path(path).read_text())
    return record


def finite(value: Any) -> Any:
    """Plain values for JSON, which has no word for numbers that are not finite: None for those.

    Examples
    --------
    >>> finite({"p": float("nan"), "of": (1, float("inf"))})
    {'p': None, 'of': [1, None]}
    """
    if isinstance(value, dict):
        return {key: finite(item) for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [finite(item) for item in value]
    return None if isinstance(value, float) and not math.isfinite(value) else value


__all__ = [
    "ERROR_FILE",
    "InputSpec",
    "SequesterInterface",
    "TraitedSpec",
    "finite",
    "isdefined",
    "kept_error",
    "notes_of",
    "one_or_each",
    "read_json",
    "traits",
    "write_json",
]
