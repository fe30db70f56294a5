"""Files that stand in a literal input: under any type, in a text, or behind a pattern.

A node may be given files in a command, as the keys of a mapping, in an array, by a pattern
("maps/sub-*.nii") or by a template ("maps/sub-{sub}.nii"). What it may read by them counts as if
each file were an input of its own.
"""

from __future__ import annotations

import fnmatch
import glob
import os
import re
from collections.abc import Iterator, Mapping
from typing import Any

from nipype.interfaces.base import Bunch

from ..nodes.touch import Touch
from .study import Study

_FIELD = re.compile(r"\{[^{}\s]*\}|%(?:\(\w+\))?\d*[sdi]")  # of a template
_WORD = re.compile(r"/[^\s'\"`,;:()=\[\]{}<>|&]+")
_WILD = re.compile(r"[*?]")


def plain(value: Any) -> Any:
    """A value as Python's own types: mappings with their keys, tables and arrays, bytes.

    Examples
    --------
    >>> plain({"/a.nii": 1}), plain(b"/a.nii"), plain(3)
    (('/a.nii', 1), '/a.nii', 3)
    """
    if isinstance(value, Bunch):
        value = dict(value.items())
    if isinstance(value, Mapping):
        return (*value.keys(), *value.values())
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace")
    for method in ("to_numpy", "tolist"):  # a table, an array
        value = getattr(value, method)() if callable(getattr(value, method, None)) else value
    return value


def paths_in(text: str) -> list[str]:
    """The absolute paths that stand in a text, files or not.

    Examples
    --------
    >>> paths_in("tool -mask=/a/b.nii,1 out.nii")
    ['/a/b.nii']
    """
    return sorted(set(_WORD.findall(text)))


def named_in(text: str, study: Study, *, strangers: bool = True) -> Iterator[tuple[str, Touch]]:
    """What the paths, patterns and folders in a text touch, each with its name.

    A program that is called is none of them.

    Parameters
    ----------
    text : str
    study : Study
    strangers : bool
        Also what is not declared, and what lies behind patterns and in folders.
    """
    if not strangers:
        words = [word for word in paths_in(text) if study.is_declared(word)]
        touches = [(study.relative(word), study.touch_of(word)) for word in words]
        yield from ((name, touch) for name, touch in touches if touch is not None)
        return
    for word in sorted({*paths_in(text), *paths_in(_FIELD.sub("*", text))}):
        found: list[str] = []
        wild = _WILD.search(word)
        if wild:
            found = _behind(word, os.path.dirname(word[: wild.start()]), study)
        elif os.path.isdir(word):
            folder = word.rstrip("/")
            found = [*_behind(f"{folder}/*", folder, study), word] if study.holds(folder) else []
        elif study.is_declared(word) or (os.path.isfile(word) and not os.access(word, os.X_OK)):
            found = [word]
        for path in found:
            touch = study.touch_of(path)
            if touch is not None:
                yield study.relative(path), touch


def _behind(pattern: str, folder: str, study: Study) -> list[str]:
    """The files of the study that match a pattern, and strangers beside them."""
    if not study.holds(folder):
        return []  # "/*" and the like say nothing
    there = [path for path in glob.glob(pattern) if os.path.isfile(path)]
    return sorted({*fnmatch.filter(study.paths(), pattern), *there})
