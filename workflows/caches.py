"""Results that the engine would take from its cache although they were made from another file.

By default the engine recognises a file by size and time stamp, not by its path. A node that now
gets one subject's map can so be handed the result of another subject's. What a cached result was
made from stands in the folder of its node, as JSON.
"""

from __future__ import annotations

import json
import os
import re
from collections.abc import Iterable, Iterator, Mapping
from pathlib import Path
from typing import Any

from nipype.pipeline.engine import MapNode

from .ancestry import files_in
from .study import Study


def made_from_another(node: Any, settings: Mapping[str, Any], study: Study) -> bool:
    """Whether a cached result of a node was made from another file of the study.

    Parameters
    ----------
    node : Node
        Its inputs are set.
    settings : mapping of str to object
        Their values.
    study : Study
    """
    folder = Path(node.output_dir())
    notes = [(path, settings) for path in folder.glob("_0x*.json")]
    if isinstance(node, MapNode):
        for path in folder.glob("mapflow/*/_0x*.json"):
            notes.append((path, _element(node, settings, path.parent.name)))
    return any(_differs(path.read_text(), now, study) for path, now in notes)


def _differs(text: str, now: Mapping[str, Any], study: Study) -> bool:
    def declared(files: Iterable[str]) -> list[str]:
        return [os.path.realpath(file) for file in files if study.is_declared(file)]

    try:
        recorded = json.loads(text)
    except ValueError:  # Python's own text, where an input is beyond JSON
        then = declared(re.findall(r"\('([^']+)', '[0-9a-f]{32}'\)", text))
        return not set(then) <= set(declared(files_in(now)))
    # A path that was recorded as text, without a hash, is recognised by the engine itself.
    return any(
        then and then != declared(files_in(now.get(field)))
        for field, value in recorded
        for then in [declared(_hashed(value))]
    )


def _element(node: Any, settings: Mapping[str, Any], name: str) -> Mapping[str, Any]:
    """What an element of a MapNode is given; its folder ends in its number."""
    found = re.search(r"\d+$", name)
    number = int(found[0]) if found else 0
    given = dict(settings)
    for field in node.iterfield:
        items = files_in(settings.get(field)) if node.nested else settings.get(field)
        given[field] = items[number] if isinstance(items, list) and number < len(items) else None
    return given


def _hashed(value: Any) -> Iterator[str]:
    """The files of a recorded input, each beside the hash that stood for it."""
    if not isinstance(value, list):
        return
    if len(value) == 2 and all(isinstance(part, str) for part in value):
        if re.fullmatch("[0-9a-f]{32}", value[1]):
            yield value[0]
        return
    for part in value:
        yield from _hashed(part)
