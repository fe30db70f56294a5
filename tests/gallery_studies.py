"""Cases of the gallery that need a study with a past: regions that a run of its own has chosen.

Each is a function that gets the folder of a study that has been run once, and adds a region to
its STUDY.toml; its docstring is the story.
"""

from __future__ import annotations

import shutil
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
from scipy.ndimage import binary_dilation
from sequester import read_settings, run_study
from sequester.workflows.guard import GuardRefused
from sequester.workflows.run import check_study

SHAPE, BULB = (9, 8, 7), (3, 3, 3)
AFFINE = np.array([[3.0, 0, 0, -12], [0, 3, 0, -10], [0, 0, 3, -9], [0, 0, 0, 1]])
HEAD = '[study]\nname = "garden"\ntable = "table.tsv"\n'
ARBOR = """
[[roi]]
name = "Arbor"
plan = "leave-one-subject-out"
search = { mask = "all.nii.gz", origin = "the whole garden, drawn beforehand" }
rule = { kind = "strongest", k = 20 }
flips = 9
"""
BROOK = """
[[roi]]
name = "Brook"
plan = "a-priori"
region = { REGION, origin = "a map in the hut" }
"""

Add = Callable[[Path], str]
_FOLDER = tempfile.TemporaryDirectory()  # goes with the process


@dataclass(frozen=True)
class StudyCase:
    """A study that was run, and a region that is added afterwards.

    Parameters
    ----------
    title : str
    add : callable
        From the folder to the region in STUDY.toml; its docstring is the story.
    said : str
        Words of the refusal; "" when it is cleared.
    before : bool
        Whether the region stood in the study file already when that was run.
    """

    title: str
    add: Add
    said: str = ""
    before: bool = False

    @property
    def story(self) -> str:
        """One sentence or two."""
        return " ".join((self.add.__doc__ or "").split())

    def judged(self, folder: Path, **how: Any) -> str:
        """What is said when the study with the region is refused; with an engine it is run."""
        root = folder / "garden"
        shutil.copytree(planted() if self.before else run_once(), root)
        region = BROOK.replace("REGION", self.add(root))
        study = root / "STUDY.toml"
        study.write_text(HEAD + ARBOR + region)
        if self.before:
            run_study(read_settings(study), **how)
        try:
            if how:
                run_study(read_settings(study), **how)
            else:
                check_study(read_settings(study))
        except GuardRefused as refused:
            return str(refused)
        return ""


RIGHT: list[StudyCase] = []
WRONG: list[StudyCase] = []


@cache
def planted() -> Path:
    """A study of seven gardeners that nobody has run."""
    root = Path(_FOLDER.name) / "planted"
    root.mkdir()
    rng, rows = np.random.default_rng(2), ["path\tsub\tsuffix"]
    at = np.stack(np.meshgrid(*map(np.arange, SHAPE), indexing="ij"), axis=-1)
    bulb = 3 * (np.linalg.norm(at - BULB, axis=-1) < 1.8)
    for sub in (f"{i:02}" for i in range(1, 8)):
        save(root / f"sub-{sub}.nii.gz", (rng.normal(0, 1, SHAPE) + bulb).astype(np.float32))
        rows.append(f"sub-{sub}.nii.gz\t{sub}\tbold")
    (root / "table.tsv").write_text("\n".join(rows) + "\n")
    save(root / "all.nii.gz", np.ones(SHAPE, np.uint8))
    return root


@cache
def run_once() -> Path:
    """The same after a run that chose and tested Arbor."""
    root = Path(_FOLDER.name) / "run"
    shutil.copytree(planted(), root)
    (root / "STUDY.toml").write_text(HEAD + ARBOR)
    run_study(read_settings(root / "STUDY.toml"))
    return root


def save(path: Path, data: np.ndarray) -> None:
    nib.save(nib.Nifti1Image(data, AFFINE), path)


def arbor(root: Path) -> np.ndarray:
    """The region that the run chose without gardener 03."""
    path = root / "results" / "masks" / "label-Arbor_desc-without03_mask.nii.gz"
    return np.asarray(nib.load(path).dataobj) != 0


def atlas(root: Path) -> str:
    """An atlas whose label 1 is that region, dilated; 2 is somewhere else."""
    labels = binary_dilation(arbor(root)).astype(np.int16)
    labels[:1, :1, :] = 2
    save(root / "atlas.nii.gz", labels)
    return 'atlas = "atlas.nii.gz"'


def case(into: list[StudyCase], title: str, said: str = "", *, before: bool = False):
    """Add a case to a list."""

    def add(function: Add) -> Add:
        into.append(StudyCase(title, function, said, before))
        return function

    return add


@case(RIGHT, "A declared atlas that later succeeds", before=True)
def _(root: Path) -> str:
    """Brook was declared before the first run, and the regions which that run chose turned out to
    lie there; being right beforehand is no fault."""
    save(root / "brook.nii.gz", arbor(run_once()).astype(np.uint8))
    return 'mask = "brook.nii.gz"'


@case(RIGHT, "A sphere somewhere else")
def _(root: Path) -> str:
    """A sphere is added after a run, far from everything that the run chose."""
    return "centre = [9, 8, 6], radius = 4"


@case(RIGHT, "Another label of an atlas with a label like one's own cluster")
def _(root: Path) -> str:
    """One label of an atlas is like the region that a run chose; the study reads another one, of
    which nothing is known."""
    return f"{atlas(root)}, labels = [2]"


@case(WRONG, "A region of one's own, saved anew", "a run has recorded")
def _(root: Path) -> str:
    """The region that a run chose comes back under another name and data type, as "a map in the
    hut"."""
    save(root / "hut.nii.gz", arbor(root).astype(np.float32) * 7)
    return 'mask = "hut.nii.gz"'


@case(
    WRONG,
    "A cluster of one's own, dilated by one voxel",
    "is like a mask that was chosen on the data",
)
def _(root: Path) -> str:
    """The region that a run chose is made one voxel larger all round, and declared as a map in
    the hut."""
    save(root / "hut.nii.gz", binary_dilation(arbor(root)).astype(np.uint8))
    return 'mask = "hut.nii.gz"'


@case(
    WRONG, "A label of an atlas that is like one's own cluster", "is like a mask that was chosen on"
)
def _(root: Path) -> str:
    """The label of the same atlas that is like the region that a run chose."""
    return f"{atlas(root)}, labels = [1]"


@case(WRONG, "A region of one's own, in the copy of a study file", "run recorded in COPY.ledger")
def _(root: Path) -> str:
    """The ledger of the first run lies beside under another name, as after copying STUDY.toml to
    begin anew; it is consulted."""
    (root / "STUDY.ledger.jsonl").rename(root / "COPY.ledger.jsonl")
    save(root / "hut.nii.gz", arbor(root).astype(np.float32) * 7)
    return 'mask = "hut.nii.gz"'


@case(WRONG, "A peak copied into a sphere", "is like a mask that was chosen on the data")
def _(root: Path) -> str:
    """The coordinate where the run found most becomes the centre of a sphere."""
    x, y, z = nib.affines.apply_affine(AFFINE, BULB)
    return f"centre = [{x:g}, {y:g}, {z:g}], radius = 5"


@case(WRONG, "The mean map of the page, as weights", "a run has recorded")
def _(root: Path) -> str:
    """The background of the page, which is the mean of the maps that were read, comes back as the
    weights of a weighted mean."""
    shutil.copyfile(root / "results" / "background.nii.gz", root / "hut.nii.gz")
    return 'mask = "hut.nii.gz"'
