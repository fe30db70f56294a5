"""Whether what chose is what is tested: the same file has many names."""

from __future__ import annotations

import os
import shutil
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from sequester.nodes.rules import Leaf
from sequester.nodes.touch import Touch
from sequester.workflows.ancestry import SEEN
from sequester.workflows.digests import map_digest
from sequester.workflows.judge import same_files, same_maps
from sequester.workflows.study import Study, read_table

TABLE = "path\tvolume\tsub\tcontrast\nmap.nii\t0\t01\tamber\nmap.nii\t1\t01\tteal\n"


@pytest.mark.parametrize(
    ("chose", "tested", "same"),
    [
        ("map.nii", "map.nii", True),
        ("map.nii volume 0", "map.nii volume 0", True),
        ("map.nii volume 0", "map.nii volume 1", False),
        ("map.nii", "map.nii volume 1", True),  # all volumes chose
        ("map.nii volume 1", f"map.nii{SEEN}", True),
        ("store/map.nii", "map.nii", True),
        ("store/map.nii volume 1", "map.nii volume 0", False),
        (f"copy.nii{SEEN}", "map.nii", True),
        ("ROOT/copy.nii", "map.nii volume 1", True),
        ("other.nii", "map.nii", False),
        ("gone.nii", "map.nii", False),
        ("gone.nii", "./gone.nii", True),
    ],
)
def test_a_file_is_known_by_what_it_holds(chose: str, tested: str, same: bool, tmp_path: Path):
    (tmp_path / "store").mkdir()
    (tmp_path / "store" / "map.nii").write_bytes(b"amber and teal")
    os.symlink("store/map.nii", tmp_path / "map.nii")
    shutil.copy(tmp_path / "map.nii", tmp_path / "copy.nii")
    (tmp_path / "other.nii").write_bytes(b"amber and rose")
    (tmp_path / "table.tsv").write_text(TABLE)
    study = read_table(tmp_path / "table.tsv")
    chose = chose.replace("ROOT", str(tmp_path))
    mask, data = trees(study, chose, tested)
    assert same_files(study, mask, data) == ({tested} if same else set())
    assert same_maps(study, mask, data) == set()  # none of them is an image


def trees(study: Study, chose: str, tested: str) -> tuple[Leaf, Leaf]:
    """A mask and the data that it is read in, of one unit both."""
    values = study.table.bits([study.rows[0].unit])
    mask = Leaf(Touch(values), parents=(Leaf(Touch(values), place=chose),))
    return mask, Leaf(Touch(values), place=tested)


AFFINE = np.array([[3.0, 0, 0, -12], [0, 3, 0, -10], [0, 0, 3, -9], [0, 0, 0, 1]])


@pytest.fixture
def stored(tmp_path: Path) -> Path:
    """One map, stored in several ways, and others that differ a little."""
    data = np.random.default_rng(4).normal(size=(5, 4, 3)).astype(np.float32)
    data[0] = 0
    data[4, 0, 0] = np.nan
    packed = np.stack([data, data + 1], axis=-1)
    turned = AFFINE @ np.array([[-1, 0, 0, 4], [0, 1, 0, 0], [0, 0, 1, 0], [0, 0, 0, 1.0]])
    moved = AFFINE + np.eye(4, k=3)
    near = data.copy()
    near[2, 2, 2] = np.nextafter(near[2, 2, 2], np.float32(9))
    for name, values, affine in (
        ("map.nii", data, AFFINE),
        ("packed.nii.gz", data, AFFINE),
        ("double.nii", data.astype(float), AFFINE),
        ("minus.nii", np.where(data == 0, np.float32(-0.0), data), AFFINE),
        ("turned.nii", data[::-1], turned),
        ("both.nii.gz", packed, AFFINE),
        ("near.nii", near, AFFINE),
        ("moved.nii", data, moved),
    ):
        nib.save(nib.Nifti1Image(values, affine), tmp_path / name)
    (tmp_path / "table.tsv").write_text("path\tsub\nmap.nii\t01\n")
    return tmp_path


@pytest.mark.parametrize(
    ("chose", "same"),
    [
        ("packed.nii.gz", True),
        ("double.nii", True),
        ("minus.nii", True),
        ("turned.nii", True),
        ("both.nii.gz", True),
        ("both.nii.gz volume 0", True),
        ("both.nii.gz volume 1", False),
        ("near.nii", False),
        ("moved.nii", False),
        ("table.tsv", False),
    ],
)
def test_a_map_is_known_by_what_it_says_where(chose: str, same: bool, stored: Path):
    study = read_table(stored / "table.tsv")
    mask, data = trees(study, chose, "map.nii")
    assert same_maps(study, mask, data) == ({"map.nii"} if same else set())
    assert same_files(study, mask, data) == set()


def test_a_map_that_was_changed_is_read_anew(stored: Path):
    before = map_digest(stored / "map.nii")
    shutil.copy(stored / "near.nii", stored / "map.nii")
    assert map_digest(stored / "map.nii") != before
