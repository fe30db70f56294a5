"""`sequester table`: a study table from file names.

Entities are read from BIDS-derivative names, or from a pattern with ``{sub}``-like fields
relative to the folder. The suffix is that of what was acquired, which a derivative's name does
not tell: it is asked for.
"""

from __future__ import annotations

import os
import re
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

from ..nodes.errors import InputError
from ..nodes.images import n_volumes, open_image
from ..nodes.touch import ENTITIES, Unit
from .study import BLANK, NAMING, Row, read_cells

_FIELDS = (*ENTITIES, "contrast")
_ENDINGS = (".nii", ".nii.gz")
# Derivative maps that hold no effect of their own.
_NOT_EFFECTS = ("mask", "dseg", "probseg")
# The study table's own columns that are about subjects.
_OF_SUBJECTS = ("exclude_reason", "exchange")


def rows_from(
    folder: Path, pattern: str | None = None, suffix: str = "bold", base: Path | None = None
) -> list[Row]:
    """Rows for the maps below a folder.

    Parameters
    ----------
    folder : Path
    pattern : str, optional
        Such as "sub-{sub}/con_{contrast}.nii.gz"; "*" matches within a name. Without it, all
        names of BIDS form are taken, ``stat-effect`` alone where several statistics lie there.
    suffix : str
        Of what was acquired.
    base : Path, optional
        Paths are written relative to it; default the folder.

    Raises
    ------
    InputError
        When nothing matches.

    Examples
    --------
    >>> _entities("sub-01_task-lanterns_run-2_contrast-a_stat-effect_statmap")["run"]
    '2'
    """
    if not folder.is_dir():
        raise InputError(
            "no such folder",
            where=str(folder),
            got="a file" if folder.is_file() else "",
            remedy="name the folder that holds the effect maps",
        )
    base = base or folder
    files = sorted(_images_below(folder))
    found: list[tuple[Path, dict[str, str]]] = []
    matcher = None if pattern is None else _matcher(pattern)
    for path in files:
        if matcher is not None:
            match = matcher.fullmatch(path.relative_to(folder).as_posix())
            fields = match.groupdict() if match else None
        else:
            fields = _entities(path.name.removesuffix(".gz").removesuffix(".nii"))
        if fields is not None:
            found.append((path, fields))
    if matcher is None and any(fields.get("stat") == "effect" for _, fields in found):
        found = [(path, fields) for path, fields in found if fields.get("stat") == "effect"]
    if not found:
        raise InputError(
            "no effect map found",
            where=str(folder),
            expected=pattern or "names such as sub-01_task-x_contrast-y_stat-effect_statmap.nii.gz",
            got=f"{len(files)} NIfTI files"
            + (f", such as {files[0].relative_to(folder)}" if files else ""),
            remedy='give --pattern, such as "sub-{sub}/map.nii.gz"',
        )
    return [row for path, fields in found for row in _rows(path, fields, suffix, base)]


def _images_below(folder: Path) -> Iterator[Path]:
    """NIfTI files in a tree, links followed, each folder once and by its own path first."""
    seen: set[str] = set()
    waiting = [str(folder)]
    while waiting:
        for root, folders, names in os.walk(waiting.pop(0), followlinks=False):
            if os.path.realpath(root) in seen:  # a link back up would repeat the tree
                folders.clear()
                continue
            seen.add(os.path.realpath(root))
            links = [os.path.join(root, f) for f in sorted(folders)]
            waiting += [path for path in links if os.path.islink(path)]
            for name in names:
                if name.endswith(_ENDINGS) and not name.startswith("."):
                    yield Path(root) / name


def _rows(path: Path, fields: dict[str, str], suffix: str, base: Path) -> list[Row]:
    relative = os.path.relpath(path, base)
    unit = Unit(**{e: fields.get(e, "") for e in ENTITIES}, suffix=suffix)
    # A broken link stays in the table: the run says that it is not fetched.
    total = n_volumes(path, open_image(path)) if path.exists() else 1
    more: dict[str, Any] = {
        "contrast": fields.get("contrast", ""),
        "variance": _variance_of(path, relative) if fields.get("stat") == "effect" else "",
        "space": fields.get("space", ""),
    }
    if total == 1:
        return [Row(relative, None, unit, **more)]
    return [Row(relative, volume, unit, **more) for volume in range(total)]


def _variance_of(path: Path, relative: str) -> str:
    """The variance map of the same name beside an effect map; "" when there is none."""
    name = path.name.replace("_stat-effect_", "_stat-variance_")
    beside = path.with_name(name)
    return os.path.join(os.path.dirname(relative), name) if beside.is_file() else ""


def _entities(stem: str) -> dict[str, str] | None:
    """The entities of a BIDS name; None when it has none or is no effect map."""
    *parts, suffix = stem.split("_")
    pairs = [part.split("-", 1) for part in parts]
    if not parts or any(len(pair) != 2 for pair in pairs) or pairs[0][0] != "sub":
        return None
    if suffix in _NOT_EFFECTS:
        return None
    return {key: value for key, value in pairs}


def _matcher(pattern: str) -> re.Pattern[str]:
    pieces, seen = [], set()
    for piece in re.split(r"(\{\w+\}|\*)", pattern):
        if piece == "*":
            pieces.append("[^/]*")
        elif piece.startswith("{"):
            name = piece[1:-1]
            if name not in _FIELDS:
                raise InputError(
                    "unknown field in the pattern",
                    where=pattern,
                    expected="one of " + ", ".join(f"{{{f}}}" for f in _FIELDS),
                    got=piece,
                )
            # A field named twice must read the same twice.
            pieces.append(f"(?P={name})" if name in seen else f"(?P<{name}>[^/_]+?)")
            seen.add(name)
        else:
            pieces.append(re.escape(piece))
    if "sub" not in seen:
        raise InputError(
            "pattern without {sub}",
            where=pattern,
            expected="{sub} where the subject's label stands",
            remedy='write it so: "sub-{sub}/map.nii.gz"',
        )
    return re.compile("".join(pieces))


def with_participants(rows: list[Row], path: Path) -> list[Row]:
    """The rows with the columns of a BIDS ``participants.tsv``, by subject.

    Columns of the study table's own (``exclude_reason``, ``exchange``) are filled; any other
    becomes a covariate, and must not be named as what says which map is meant.

    Parameters
    ----------
    rows : list of Row
    path : Path

    Raises
    ------
    InputError
        When the file cannot be read, or does not say one thing of every subject of the rows.
    """
    if not path.is_file():
        raise InputError(
            "no such participants table",
            where=str(path),
            got="a folder" if path.is_dir() else "",
            remedy="check the path",
        )
    header, *lines = read_cells(path, "participants table") or [[]]
    if not header or header[0] != "participant_id":
        raise InputError(
            "participants table without participant_id",
            where=str(path),
            expected="participant_id as the first column, as BIDS has it",
            got=header[0] if header else "an empty file",
        )
    taken = sorted(
        {n for n in header if (n in NAMING and n not in _OF_SUBJECTS) or header.count(n) > 1}
    )
    if taken:
        raise InputError(
            "columns of the participants table with names that are taken",
            where=str(path),
            expected="names that say something of subjects, each once",
            got=", ".join(taken),
            remedy="rename them: the study table has columns of these names, which say of each map "
            "what it was made from",
        )
    of_sub: dict[str, dict[str, str]] = {}
    first: dict[str, int] = {}
    for number, line in enumerate(lines, 2):
        if not line:
            continue
        if len(line) != len(header):
            raise InputError(
                "row of another length",
                where=f"{path}, line {number}",
                expected=f"{len(header)} tab-separated cells",
                got=str(len(line)),
                remedy="write n/a into blank cells, and no tab at the end",
            )
        sub, cells = line[0].strip().removeprefix("sub-"), dict(zip(header, line, strict=True))
        cells["participant_id"] = sub
        if of_sub.setdefault(sub, cells) != cells:
            raise InputError(
                "two lines of one subject that differ",
                where=f"{path}, lines {first[sub]} and {number}",
                expected="one line for each subject",
                got=f"sub-{sub} with "
                + "; ".join(
                    f"{k} {of_sub[sub][k]!r} and {v!r}"
                    for k, v in cells.items()
                    if of_sub[sub][k] != v
                ),
                remedy="remove one of them",
            )
        first.setdefault(sub, number)
    lacking = sorted({row.unit.sub for row in rows} - of_sub.keys())
    if lacking:
        raise InputError(
            "subjects without a line in the participants table",
            where=str(path),
            expected="participant_id sub-LABEL, or LABEL",
            got="none for sub-" + ", sub-".join(lacking[:5]),
        )
    made = []
    for row in rows:
        cells = {
            k: "" if v.strip() in BLANK else v.strip() for k, v in of_sub[row.unit.sub].items()
        }
        own: dict[str, Any] = {k: v for k, v in cells.items() if k in _OF_SUBJECTS}
        extra = tuple((k, v) for k, v in cells.items() if k not in (*own, "participant_id"))
        made.append(replace(row, **own, extra=(*row.extra, *extra)))
    return made
