"""STUDY.toml: what to analyse and how, stated beforehand.

Every key is checked; an unknown one is an error that names its line and the known ones.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from ..nodes.errors import InputError
from ..nodes.groupmaps import Missing
from ..nodes.images import geometry_of, open_image
from .comparisons import Comparison, read_comparisons
from .digests import digest, digest_text
from .keys import Reader, read_toml
from .ledger import ledger_path
from .lineage import recorded_units
from .regions import Ball, units
from .regions import Given as GivenRegion
from .rois import Maps, Roi, in_table, with_variants
from .selection import Selection
from .study import NAMING, Origin, Row, Study, read_table

_KEYS = {
    "": {"study", "data", "roi", "origin", "comparison", "report"},
    "study": {"name", "table", "output", "seed"},
    "data": {
        "select",
        "minus",
        "baseline",
        "quality",
        "null_value",
        "run_weights",
        "grids",
        "zeros_are_missing",
        "min_fraction",
        "min_coverage",
        "fwhm",
    },
    "origin": {"source", "files", "sha256", "derived_from"},
    "report": {"background"},
}


@dataclass(frozen=True)
class Settings:
    """A whole STUDY.toml.

    Parameters
    ----------
    name : str
    root, output : Path
        The study's folder, and where results go.
    seed : int
    maps : Maps
    study : Study
    rois : tuple of Roi
    comparisons : tuple of Comparison
    digest : str
        SHA-256 of the file; `text` is what it holds.
    table_path : Path
    ledger : Path
        Where the study's ledger lies; it need not exist.
    fwhm : float or None
        How smooth the maps are, in mm, where it is stated: how near a centre is to another.
    background : Path or None
        What the report's slices are drawn over, if not the study's mean map.
    quality : tuple of str
        Columns of the study table that say how good the data are: whom they keep, no result chose.
    """

    name: str
    root: Path
    output: Path
    seed: int
    maps: Maps
    study: Study
    rois: tuple[Roi, ...]
    comparisons: tuple[Comparison, ...]
    digest: str
    text: str
    table_path: Path
    ledger: Path
    fwhm: float | None
    background: Path | None = None
    quality: tuple[str, ...] = ()

    @property
    def selections(self) -> tuple[Selection, ...]:
        """Every selection of maps, tested ones first, each once."""
        listed = [roi.tested for roi in self.rois]
        listed += [roi.choosing for roi in self.rois if roi.choosing is not None]
        return tuple(dict.fromkeys(listed))

    @property
    def variants(self) -> dict[str, str]:
        """By declared variant: the region that it varies."""
        return {roi.name: roi.variant_of for roi in self.rois if roi.variant_of}

    @property
    def used(self) -> tuple[Row, ...]:
        """Every row that is read, each once."""
        return tuple(dict.fromkeys(row for one in self.selections for row in one.rows))

    @property
    def left_out(self) -> tuple[Row, ...]:
        """Every row that was selected but has an exclude_reason."""
        return tuple(dict.fromkeys(row for one in self.selections for row in one.left_out))

    @property
    def inputs(self) -> tuple[Path, ...]:
        """Everything that a run reads, and the study's folder: no output may take its place."""
        rows = [path for row in self.study.rows for path in (row.path, row.variance) if path]
        outside = [path for origin in self.study.origins for path in origin.files]
        files = [self.root / path for path in (*rows, *outside)]
        beside = [self.table_path, self.ledger, *([self.background] if self.background else [])]
        return (self.root, *beside, *files)


def read_settings(path: str | Path) -> Settings:
    """Read and check a STUDY.toml and the study table it names.

    Raises
    ------
    InputError
        For anything wrong in either; names file and line.
    """
    path = Path(path)
    toml, read = read_toml(path)
    read.known(toml, _KEYS[""])
    head, data = read.get(toml, "study", dict, ...), read.get(toml, "data", dict, {})
    read.known(head, _KEYS["study"], "study")
    read.known(data, _KEYS["data"], "data")
    root = path.parent.absolute()
    maps = _maps(read, data)
    tables = read.tables(toml, "roi", ...)
    plain = read_table(root / read.get(head, "table", str, ...), root)
    seed = read.get(head, "seed", int, 0)
    rois = tuple(
        roi
        for i, table in enumerate(tables)
        for roi in with_variants(read.within("roi", i), table, data, maps, plain, seed)
    )
    _distinct(read, rois)
    output = root / read.get(head, "output", str, "results")
    origins = tuple(_origins(read, toml, rois, plain, output))
    return Settings(
        name=read.label(head, "name"),
        root=root,
        output=output,
        seed=seed,
        maps=maps,
        study=Study(root, plain.rows, origins, plain.columns),
        rois=rois,
        comparisons=read_comparisons(read, toml, rois),
        digest=digest_text(read.text),
        text=read.text,
        table_path=root / head["table"],
        ledger=ledger_path(root / path.name),
        fwhm=_fwhm(read, data),
        background=_background(read, toml, root),
        quality=_quality(read, data, plain, rois),
    )


def _quality(
    read: Reader, data: dict[str, Any], study: Study, rois: tuple[Roi, ...]
) -> tuple[str, ...]:
    """The columns that say how good the data are: scores of the table that nothing tests."""
    columns = tuple(read.get(data, "quality", list, []))
    known = [name for name in study.columns if name not in NAMING]
    tested = {roi.procedure.model.name for roi in rois if roi.procedure and roi.procedure.model}
    for column in columns:
        if column not in known:
            raise InputError(
                "quality names no column that says something of the subjects",
                where=read.where("quality"),
                expected="a column of the study table such as one with how much they moved: "
                + (", ".join(known) or "it has none"),
                got=repr(column),
            )
        if column in tested:
            raise InputError(
                "a column of quality is what a [[roi]] tests",
                where=read.where("quality"),
                expected="columns that say how good the data are, and nothing that is tested",
                got=column,
                remedy="take it out of quality, or out of score and compare",
            )
    return columns


def _background(read: Reader, toml: dict[str, Any], root: Path) -> Path | None:
    report = read.get(toml, "report", dict, {})
    read.known(report, _KEYS["report"], "report")
    name = read.get(report, "background", str, "")
    if not name:
        return None
    try:
        geometry_of(open_image(root / str(name)))
    except InputError as error:
        raise error.within(read.where("background")) from error
    return root / str(name)


def _maps(read: Reader, data: dict[str, Any]) -> Maps:
    coverage = read.number(data, "min_coverage", 0)
    if not 0 <= coverage <= 1:
        raise InputError(
            "min_coverage out of range",
            where=read.where("min_coverage"),
            expected="0 to 1, a share of the region",
            got=f"{coverage:g}",
        )
    zeros = read.get(data, "zeros_are_missing", bool, True)
    try:
        missing = Missing(zeros, read.number(data, "min_fraction", 0.8))
    except InputError as error:
        raise error.at(read.where("min_fraction")) from error
    return Maps(
        missing,
        read.number(data, "null_value", 0),
        read.one_of(data, "run_weights", ("equal", "variance"), "equal") == "variance",
        read.one_of(data, "grids", ("one", "own"), "one") == "own",
        coverage,
    )


def _fwhm(read: Reader, data: dict[str, Any]) -> float | None:
    if "fwhm" not in data:
        return None
    width = read.number(data, "fwhm", ...)
    if width <= 0:
        raise InputError(
            "fwhm out of range", where=read.where("fwhm"), expected="> 0 mm", got=f"{width:g}"
        )
    return width


def _distinct(read: Reader, rois: tuple[Roi, ...]) -> None:
    if not rois:
        raise InputError("no [[roi]]", where=str(read.path), remedy="state at least one")
    first: dict[str, Roi] = {}
    number = -1
    for roi in rois:
        number += not roi.variant_of
        other = first.setdefault(roi.name.lower(), roi)
        if other is not roi:
            raise InputError(
                "two [[roi]] of one name",
                where=read.within("roi", number).where("name"),
                expected="one file name each, on any file system",
                got=f"{other.name!r} and {roi.name!r}",
                remedy="rename one",
            )


def _of_leaf(leaf: GivenRegion, subs: list[str], study: Study, output: Path) -> Iterator[Origin]:
    """What is declared, and what runs have recorded, of the files of one region."""
    own = [name for name in leaf.files if "{sub}" in name]
    of_each = any(unit.sub == "{sub}" for unit in leaf.derived_from)
    for sub in subs if own else ():
        files = tuple(name.replace("{sub}", sub) for name in own)
        stated = tuple(replace(u, sub=sub) if u.sub == "{sub}" else u for u in leaf.derived_from)
        recorded = recorded_units(study.root / files[0], study, output)
        # Each subject's file derives from that subject alone.
        source = f"{leaf.origin} (sub-{sub})" if of_each or recorded else leaf.origin
        yield Origin(source, files, (*stated, *recorded))
    shared = tuple(name for name in leaf.files if name not in own)
    if own:
        yield Origin(leaf.origin, shared)
    else:
        recorded = recorded_units(study.root / shared[0], study, output) if shared else ()
        sphere = (*leaf.centre, leaf.radius) if isinstance(leaf, Ball) else ()
        yield Origin(leaf.origin, shared, (*leaf.derived_from, *recorded), sphere=sphere)


def _origins(
    whole: Reader, toml: dict[str, Any], rois: tuple[Roi, ...], study: Study, output: Path
) -> Iterable[Origin]:
    for roi in rois:
        subs = [label for label, _ in roi.tested.subjects]
        for leaf in roi.region.leaves():
            yield from _of_leaf(leaf, subs, study, output)
    yield from origin_tables(whole, toml, study)


def origin_tables(whole: Reader, toml: dict[str, Any], study: Study) -> Iterator[Origin]:
    """What the ``[[origin]]`` tables of a file declare; their patterns are relative to the study.

    Raises
    ------
    InputError
    """
    root = study.root
    for i, table in enumerate(whole.tables(toml, "origin", [])):
        read = whole.within("origin", i)
        read.known(table, _KEYS["origin"], "origin")
        found: list[str] = []
        for pattern in read.get(table, "files", list, ...):
            if not str(pattern) or Path(str(pattern)).is_absolute():
                raise InputError(
                    "pattern of files out of range",
                    where=read.where("files"),
                    expected="a pattern relative to the study file",
                    got=repr(pattern),
                )
            try:
                matched = sorted(str(p.relative_to(root)) for p in root.glob(str(pattern)))
            except ValueError as error:
                raise InputError(
                    "pattern of files that cannot be used",
                    where=read.where("files"),
                    got=f"{pattern!r}: {error}",
                    remedy="* matches within a name, ** alone stands for any folders",
                ) from error
            if not matched:
                raise InputError(
                    "origin names no file",
                    where=read.where("files"),
                    expected=f"files below {root}",
                    got=repr(pattern),
                    remedy="check the pattern, and that the files are there",
                )
            found += matched
        _pinned(read, table, root, found)
        derived = units(read, table)
        in_table(read, derived, study)
        yield Origin(read.get(table, "source", str, ..., "origin"), tuple(found), derived)


def _pinned(read: Reader, table: dict[str, Any], root: Path, files: Iterable[str]) -> None:
    """Have every file of an origin be one of those whose digests it states, if it states any."""
    stated = read.get(table, "sha256", list, None)
    for name in files if stated is not None else ():
        if (found := digest(root / name)) not in stated:
            raise InputError(
                "a file of an origin is not the one that was declared",
                where=f"{root / name}, {read.where('sha256')}",
                expected="a file whose SHA-256 is listed in sha256",
                got=found,
                remedy="take the file that was declared, or list the digest of this one",
            )
