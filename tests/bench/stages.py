"""Run `sequester run STUDY.toml` in this process and print, as JSON, the seconds of each stage.

Every function that belongs to a stage is wrapped with a clock. An inner stage stops the clock
of the outer one, so that the stages add up to the whole.
"""

from __future__ import annotations

import functools
import json
import sys
import time
from collections.abc import Callable
from typing import Any

_spent: dict[str, float] = {}
_open: list[str] = []
_since = time.perf_counter()


def _turn() -> None:
    """Book the time since the last turn on the stage that is open."""
    global _since  # noqa: PLW0603 - one clock for one process
    now = time.perf_counter()
    _spent[_open[-1]] = _spent.get(_open[-1], 0.0) + now - _since
    _since = now


def timed(function: Callable[..., Any], stage: str) -> Callable[..., Any]:
    """The function, with its time booked on a stage."""

    @functools.wraps(function)
    def wrapped(*args: Any, **kwargs: Any) -> Any:
        _turn()
        _open.append(stage)
        try:
            return function(*args, **kwargs)
        finally:
            _turn()
            _open.pop()

    return wrapped


def _replace(function: Callable[..., Any], stage: str) -> None:
    """Time a function wherever a module has imported it to."""
    wrapped = timed(function, stage)
    for name, module in list(sys.modules.items()):
        if name.split(".")[0] in ("sequester", "nipype"):
            for key, value in list(vars(module).items()):
                if value is function:
                    setattr(module, key, wrapped)


def main() -> None:
    """Import, run, print."""
    _open.append("imports")
    import nipype.utils.filemanip as engine_files
    from sequester.nodes import images, interfaces
    from sequester.workflows import cli, digests, outputs, run  # noqa: F401 - patched below

    _turn()
    _open[:] = ["engine"]
    for function, stage in (
        (images.read_map, "decode"),
        (images.open_image, "decode"),
        (digests.digest, "hash, of the study's files"),
        (engine_files.hash_infile, "hash, of the engine's files"),
        (images.write_map, "write"),
        (images.write_bytes, "write"),
        (outputs.write_all, "write"),
    ):
        _replace(function, stage)
    for name in interfaces.__all__:
        kind = getattr(interfaces, name)
        kind._work = timed(kind._work, f"compute, {name}")
    try:
        cli.main(["run", sys.argv[1], "--quiet"], standalone_mode=False)
    finally:
        _turn()
    print(json.dumps(_spent), file=sys.stderr)


if __name__ == "__main__":
    main()
