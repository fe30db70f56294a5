"""A study's files, looked at before anything runs: headers, grids, digests."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

from ..nodes.errors import InputError
from ..nodes.images import (
    Geometry,
    check_same_grid,
    geometry_of,
    n_volumes,
    open_image,
    read_labels,
    read_mask,
)
from .digests import digest
from .regions import Labels, MaskFile
from .settings import Roi, Settings
from .study import Row

Named = tuple[str, Geometry]


def verify(settings: Settings) -> None:
    """Check every selected file's header and digest, and every region's grid.

    Raises
    ------
    InputError
        For an absent or unreadable file, differing grids, or identical files under two names.
    """
    grids = {row: _grid_of(settings, row) for row in settings.used}
    for rows in _on_one_grid(settings):
        first, *others = (grids[row] for row in rows)
        check_same_grid(first, others)
    maps = _distinct_files(settings)
    for origin in settings.study.origins:
        for name in origin.files:
            path = settings.root / name
            if path.is_file() and digest(path) in maps:
                raise InputError(
                    "a declared origin is one of the study's own maps",
                    where=str(path),
                    got=f"the same bytes as {maps[digest(path)]}",
                    remedy="give the file its row in the study table, or the region another file",
                )
    for roi in settings.rois:
        for sub, like in _region_grids(settings, roi, grids):
            _check_region(settings, roi, sub, like)


def _grid_of(settings: Settings, row: Row) -> Named:
    """The grid of a row's map; its volume and its variance map checked on the way."""
    named = [_one_grid(settings, name, row) for name in (row.path, row.variance) if name]
    check_same_grid(named[0], named[1:])
    return named[0]


def _one_grid(settings: Settings, name: str, row: Row) -> Named:
    path = settings.root / name
    image = open_image(path)
    total = n_volumes(path, image)
    if row.volume is not None and row.volume >= total:
        raise InputError(
            "no such volume", where=str(path), expected=f"0 to {total - 1}", got=str(row.volume)
        )
    if row.volume is None and total > 1:
        raise InputError(
            "4-D file without a volume number",
            where=str(path),
            got=f"{total} volumes",
            remedy="fill the table's volume column (counting from 0)",
        )
    return str(path), geometry_of(image)


def _on_one_grid(settings: Settings) -> Iterable[list[Row]]:
    """The rows that must share a grid: all of them, or each subject's."""
    if not settings.maps.own_grids:
        return [list(settings.used)]
    of_sub: dict[str, list[Row]] = {}
    for row in settings.used:
        of_sub.setdefault(row.unit.sub, []).append(row)
    return of_sub.values()


def _distinct_files(settings: Settings) -> dict[str, str]:
    """The rows' names by the digest of their files, which must differ."""
    seen: dict[tuple[str, int | None], str] = {}
    for row in settings.used:
        path = settings.root / row.path
        key = (digest(path), row.volume)
        if seen.setdefault(key, row.name) != row.name:
            raise InputError(
                "identical files under two names",
                where=str(path),
                got=f"the same bytes as {seen[key]}",
                remedy="one of the two rows of the study table names the wrong file",
            )
    return {key[0]: name for key, name in seen.items()}


def _region_grids(
    settings: Settings, roi: Roi, grids: dict[Row, Named]
) -> Iterator[tuple[str, Named]]:
    """The subjects (and their maps' grids) for which a region's files are looked at."""
    each = settings.maps.own_grids or roi.region.of_each
    subjects = roi.tested.subjects if each else roi.tested.subjects[:1]
    for label, rows in subjects:
        yield label, grids[rows[0]]


def _check_region(settings: Settings, roi: Roi, sub: str, like: Named) -> None:
    for leaf in roi.region.leaves():
        paths = [settings.root / name.replace("{sub}", sub) for name in leaf.files]
        if isinstance(leaf, MaskFile):
            read_mask(paths[0], like, regrid=leaf.regrid)
        elif isinstance(leaf, Labels):
            _, geometry = read_labels(paths[0])
            if not leaf.regrid:
                check_same_grid(like, [(str(paths[0]), geometry)])
