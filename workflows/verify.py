"""A study's files, looked at before anything runs: headers, grids, digests."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from pathlib import Path

from ..nodes.errors import InputError
from ..nodes.images import (
    TO_GRID,
    Geometry,
    check_real,
    check_same_grid,
    geometry_of,
    n_volumes,
    open_image,
    read_label_table,
    read_labels,
    read_mask,
)
from ..nodes.masks import sphere
from ..nodes.regions import labelled, numbers_of
from ..nodes.space import Grid
from .digests import digest
from .regions import Ball, Given, Labels, MaskFile
from .rois import Roi
from .settings import Settings
from .study import Row

Named = tuple[str, Geometry]


def verify(settings: Settings) -> None:
    """Check every selected file's header and digest, and every region's grid and labels.

    Raises
    ------
    InputError
        For an absent or unreadable file, differing grids, or identical files under two names.
    """
    grids = {row: _one_grid(settings, row.path, row) for row in settings.used}
    for rows in _on_one_grid(settings):
        first, *others = (grids[row] for row in rows)
        check_same_grid(first, others)
    for row in settings.used:
        if row.variance:
            check_same_grid(grids[row], [_one_grid(settings, row.variance, row)])
    maps = _distinct_files(settings)
    if settings.maps.by_variance:
        _variances_are_others(settings, maps)
    for origin in settings.study.origins:
        for name in origin.files:
            path = settings.root / name
            if path.is_file() and digest(path) in maps:
                raise InputError(
                    "a declared origin is one of the study's own maps",
                    where=f"{path}, origin {origin.source!r}",
                    got=f"the same bytes as {maps[digest(path)]}",
                    remedy="give the file its row in the study table, or the region another file",
                )
    for roi in settings.rois:
        for sub, like in _region_grids(settings, roi, grids):
            for leaf in roi.region.leaves():
                try:
                    _check_leaf(leaf, settings.root, sub, like)
                except InputError as error:
                    raise error.within(f"roi {roi.name}") from error


def _one_grid(settings: Settings, name: str, row: Row) -> Named:
    """A file's grid; its values and its volume checked on the way."""
    path = settings.root / name
    image = open_image(path)
    check_real(path, image)
    total = n_volumes(path, image)
    if row.volume is not None and row.volume >= total:
        raise InputError(
            "no such volume",
            where=str(path),
            expected=f"0 to {total - 1}",
            got=str(row.volume),
            remedy="correct the table's volume column (counting from 0)",
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


def _variances_are_others(settings: Settings, maps: dict[str, str]) -> None:
    for row in settings.used:
        path = settings.root / row.variance
        if row.variance and digest(path) in maps:
            raise InputError(
                "a variance map is one of the effect maps",
                where=str(path),
                got=f"the same bytes as {maps[digest(path)]}",
                remedy="correct the variance column of the study table",
            )


def _region_grids(
    settings: Settings, roi: Roi, grids: dict[Row, Named]
) -> Iterator[tuple[str, Named]]:
    """The subjects (and their maps' grids) for which a region's files are looked at."""
    each = settings.maps.own_grids or roi.region.of_each
    subjects = roi.tested.subjects if each else roi.tested.subjects[:1]
    for label, rows in subjects:
        yield label, grids[rows[0]]


def _check_leaf(leaf: Given, root: Path, sub: str, like: Named) -> None:
    """A mask, labels or a sphere that will hold something on the grid of a subject's maps."""
    paths = [root / name.replace("{sub}", sub) for name in leaf.files]
    if isinstance(leaf, MaskFile):
        read_mask(paths[0], like, regrid=leaf.regrid)
    elif isinstance(leaf, Labels):
        volume, geometry = read_labels(paths[0])
        if not leaf.regrid:
            check_same_grid(like, [(str(paths[0]), geometry)], TO_GRID)
        names = [label for label in leaf.labels if isinstance(label, str)]
        if names and len(paths) == 1:
            raise InputError(
                "label names without a label table",
                where=str(paths[0]),
                expected='names = "...", or a .tsv of the same name beside the image',
                got=", ".join(names),
                remedy="give the table (columns index and name), or numbers instead of names",
            )
        if not volume.any():
            raise InputError(
                "label image without labels",
                where=str(paths[0]),
                got="0 at every voxel",
                remedy="give another image",
            )
        table = read_label_table(paths[1]) if len(paths) > 1 else ()
        labelled(volume, numbers_of(leaf.labels, table, str(paths[-1])), str(paths[0]))
    elif isinstance(leaf, Ball):
        grid = like[1]
        try:
            sphere(Grid(grid.shape, grid.affine), leaf.centre, leaf.radius)
        except InputError as error:
            fields = {**error.fields, "expected": f"some voxel of {like[0]}: {grid}"}
            raise InputError(**fields) from error
