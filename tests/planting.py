"""Small studies on disk: a map for each person, a table, regions from outside."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import nibabel as nib
import numpy as np
from sequester.nodes.images import Geometry, write_map
from sequester.workflows.study import Origin, Study, read_table

THREE_MM = np.diag([3.0, 3.0, 3.0, 1.0])


def a_grid(shape: tuple[int, ...], affine: np.ndarray | float = THREE_MM) -> Geometry:
    """Voxels as an affine has them, or cubes of so many mm from the origin on."""
    if isinstance(affine, float):
        affine = np.diag([affine, affine, affine, 1.0])
    return Geometry(shape, tuple(tuple(float(x) for x in row) for row in affine))


def save(path: Path, data: np.ndarray, affine: np.ndarray = THREE_MM) -> None:
    """An image by nibabel, in a folder that it makes."""
    path.parent.mkdir(parents=True, exist_ok=True)
    nib.save(nib.Nifti1Image(data, affine), path)


def plant(
    root: Path,
    maps: Mapping[str, np.ndarray],
    geometry: Geometry,
    regions: Mapping[str, np.ndarray],
    origins: Sequence[Origin],
    columns: Mapping[str, Sequence[object]] | None = None,
    prefix: str = "sub-",
) -> Study:
    """A study of one map a person.

    Parameters
    ----------
    root : Path
    maps : mapping of str to array
        By label, in the order of the table.
    geometry : Geometry
    regions : mapping of str to array
        By the name of the file.
    origins : sequence of Origin
        What is declared of them.
    columns : mapping of str to sequence, optional
        More columns of the table.
    prefix : str
        Of the maps' files, before the label.
    """
    root.mkdir(exist_ok=True)
    more = columns or {}
    lines = ["\t".join(("path", "sub", "suffix", *more))]
    for (sub, data), cells in zip(
        maps.items(), zip(*more.values(), strict=True) if more else [()] * len(maps), strict=True
    ):
        write_map(root / f"{prefix}{sub}.nii", data, geometry)
        lines.append("\t".join((f"{prefix}{sub}.nii", sub, "bold", *map(str, cells))))
    for name, mask in regions.items():
        write_map(root / f"{name}.nii", mask, geometry)
    (root / "table.tsv").write_text("\n".join(lines) + "\n")
    return read_table(root / "table.tsv", origins=origins)


def paths_of(study: Study) -> list[str]:
    """The files of a study's rows."""
    return [str(study.root / row.path) for row in study.rows]


def files_in(folder: Path) -> dict[str, bytes]:
    """Every file below a folder, with its bytes."""
    return {str(p.relative_to(folder)): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


def content(folder: Path) -> dict[str, bytes | None]:
    """Every path below a folder, with the bytes of files."""
    return {str(p.relative_to(folder)): None for p in folder.rglob("*")} | files_in(folder)
