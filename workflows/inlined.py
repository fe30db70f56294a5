"""Functions on connections that leave an identity node: what they were given.

The engine calls such a function while it expands the graph, and puts its result into the next
node like a value that somebody typed. Where the result came from would be gone. So the engine's
own step is told to leave a note of it, on the node that gets the result.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from typing import Any

from nipype.pipeline.engine import utils

from .literals import plain

_NOTE = "_sequester_inlined"  # the attribute of a node: per field, what functions were given

_propagate: Callable[..., None] = utils._propagate_root_output


def given_to_functions(node: Any) -> Mapping[str, list[Any]]:
    """Per field of a node of the expanded graph, the values from which functions computed it.

    A function that hands on some of the texts it was given (the first of a list of files) is
    no computation: its result says itself what it is.
    """
    notes: dict[str, list[Any]] = vars(node).get(_NOTE, {})
    return notes


def _noting(graph: Any, node: Any, field: str, connections: Any) -> None:
    _propagate(graph, node, field, connections)
    given = getattr(node.inputs, field)
    for target, port, source in connections:
        told = list(vars(node).get(_NOTE, {}).get(field, []))  # functions further up
        made = getattr(target.inputs, port)
        if isinstance(source, tuple) and not set(_atoms(made)) <= set(_atoms(given)):
            told.append(given)
        if told:
            vars(target).setdefault(_NOTE, {})[port] = told


def _atoms(value: Any) -> Iterator[str]:
    """The items of a nested value, as text."""
    value = plain(value)
    if isinstance(value, list | tuple | set | frozenset):
        for item in value:
            yield from _atoms(item)
    else:
        yield value if isinstance(value, str) else repr(value)


utils._propagate_root_output = _noting
