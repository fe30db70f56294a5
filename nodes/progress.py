"""How long work tells how far it is: one hook, silent unless a program sets it."""

from __future__ import annotations

from collections.abc import Callable

_listener: Callable[[str, int, int], None] | None = None


def listen(listener: Callable[[str, int, int], None] | None) -> None:
    """Have ``listener(what, done, total)`` called by long work in this process."""
    global _listener  # noqa: PLW0603 - one hook for one process is the whole idea
    _listener = listener


def tell(what: str, done: int, total: int) -> None:
    """Say how far a piece of work is."""
    if _listener is not None:
        _listener(what, done, total)
