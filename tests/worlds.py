"""Small studies whose truth is known at every voxel, and what results say against it.

A subject's true effect in a voxel is the population's times an amplitude of the subject, plus a
part of the subject that is independent from voxel to voxel; both are the same in the two tasks.
A map of a run is the true effect plus noise. The region Cinder has no population effect.
"""

from __future__ import annotations

import csv
import itertools
from collections.abc import Iterable
from pathlib import Path
from typing import NamedTuple

import nibabel as nib
import numpy as np
from scipy import stats

SUBS = tuple(f"{i:02}" for i in range(1, 11))
RUNS = ("1", "2", "3")
# The maps: each is a task and a contrast in the table. The sum comes from the runs of the tested
# difference, and is independent of it.
TESTED, SUM, LOCALIZER = "lanterns difference", "lanterns sum", "paths difference"
SHAPE, STEP = (7, 7, 6), 3.0
PERSISTENT = 0.6  # sd of what a subject shows in both tasks; the noise of a run has sd 1
P = 0.05  # of the rules that threshold

# In the studies with missing runs: a run that the table leaves out, and two it does not name.
EXCLUDED = (("02", TESTED, "3"), ("02", SUM, "3"))
ABSENT = (("05", TESTED, "1"), ("05", SUM, "1"), ("07", LOCALIZER, "2"))
LAYOUTS = ("files", "stack of each subject", "stack of the study")  # the last on one grid alone

# What an estimate is compared with: the mean over its masks of the true effect of the
# population, or of the tested subjects themselves.
POPULATION, THEMSELVES = "population", "these subjects"


class Plan(NamedTuple):
    """A [[roi]] of the study, whose true effect it estimates, and whether it needs one grid.

    "@" in its keys becomes ``regrid = true`` where subjects have grids of their own.
    """

    name: str
    plan: str
    target: str
    keys: str
    group: bool = False


_ATLAS = 'atlas = "garden_dseg.nii.gz", origin = "garden, 2nd edition"@'
_CINDER = f'search = {{ {_ATLAS}, labels = ["Cinder"] }}\n'
_ELSEWHERE = 'choose_on = { task = "paths" }\n'
_P = f'rule = {{ kind = "threshold", p = {P} }}\n'
_FLIPS = "flips = 9\n"

_A_PRIORI = {
    "Ball": 'region = { centre = [-6, 0, 0], radius = 6, origin = "a walk" }',
    "Patch": 'region = { mask = "patch.nii.gz", origin = "drawn beforehand"@ }',
    "Brook": f'region = {{ {_ATLAS}, labels = ["Brook"] }}',
    "Parts": f"each_label = true\nregion = {{ {_ATLAS} }}",
}
_OWN_MASKS = {
    ("Own", "localizer"): _ELSEWHERE + 'rule = { kind = "strongest", k = 12 }',
    ("Near", "localizer"): _ELSEWHERE
    + 'rule = { kind = "cluster", height = 0.9 }\n'
    + f"search = {{ {_ATLAS}, labels = [1, 2] }}",
    ("Runs", "leave-one-run-out"): 'rule = { kind = "strongest", fraction = 0.05, map = "mean" }',
    ("Halves", "split-half-runs"): _CINDER + 'rule = { kind = "strongest", k = 8, map = "mean" }',
}
_FOLDS = {
    ("Few", "k-fold"): f'folds = 3\nrule = {{ kind = "cluster", p = {P} }}',
    ("Half", "split-half"): 'rule = { kind = "peak-sphere", radius = 5 }',
    ("Beds", "given-folds"): 'fold_column = "bed"\nrule = { kind = "strongest", fraction = 0.1 }',
    ("Each", "leave-one-subject-out"): _P,
    ("Apart", "leave-one-subject-out"): _ELSEWHERE + 'rule = { kind = "strongest", k = 20 }',
}
_OTHERS = 'mask_of = "group"\nselect = { bank = "left" }\nchoose_on = { bank = "right" }\n' + _P
_SAME = 'mask_of = "group"\nclaim = "these-subjects"\n' + _ELSEWHERE + _CINDER + _P
_SUM = (
    'choose_on = { contrast = "sum" }\ncertificate = { design = "design.tsv", noise = "white", '
    "chosen = { amber = 1, teal = 1 }, tested = { amber = 1, teal = -1 }, "
    'between = [[1, 0], [0, 1]], source = "the generator" }\n'
)
PLANS = (
    *(Plan(name, "a-priori", POPULATION, keys) for name, keys in _A_PRIORI.items()),
    *(Plan(*names, THEMSELVES, keys) for names, keys in _OWN_MASKS.items()),
    *(Plan(*names, POPULATION, _FLIPS + keys, True) for names, keys in _FOLDS.items()),
    Plan("Others", "localizer", POPULATION, _OTHERS, True),
    Plan("Same", "localizer", THEMSELVES, _SAME, True),
    Plan("Sum", "orthogonal-contrast", POPULATION, _SUM + _P, True),
    Plan("Look", "exploratory", POPULATION, _CINDER + _P, True),
)
# What is circular, and what claims more than its plan gives: these must be seen to be off.
WRONG = (("Look", POPULATION), ("Same", POPULATION), ("Halves", POPULATION))

Read = dict[tuple[str, str, str, str], tuple[float, np.ndarray]]
"""(roi, parcel, sub, run) to the value and the mask it was read in; "" for none."""


def bank(sub: str) -> str:
    """The half of the subjects that a subject is in."""
    return ("left", "right")[SUBS.index(sub) % 2]


def bed(sub: str) -> str:
    """The fold that the table names for a subject."""
    return "abbcaccbca"[SUBS.index(sub)]


class Grid(NamedTuple):
    """Shape and affine."""

    shape: tuple[int, ...]
    affine: np.ndarray

    def mm(self) -> np.ndarray:
        """(x, y, z, 3) where each voxel's centre is."""
        return nib.affines.apply_affine(self.affine, np.moveaxis(np.indices(self.shape), 0, -1))


def _grid(number: int = 0, shift: tuple[float, ...] = (0, 0, 0), turn: float = 0.0) -> Grid:
    """The garden's box: stored in one of 48 orders of the axes, moved by mm, turned about z."""
    axes = list(itertools.permutations(range(3)))[number % 6]
    signs = list(itertools.product((1, -1), repeat=3))[number // 6 % 8]
    matrix = np.zeros((3, 3))
    for column, (axis, sign) in enumerate(zip(axes, signs, strict=True)):
        matrix[axis, column] = sign * STEP
    c, s = np.cos(turn), np.sin(turn)
    matrix = np.array([[c, -s, 0], [s, c, 0], [0, 0, 1]]) @ matrix
    shape = tuple(SHAPE[axis] for axis in axes)
    affine = np.eye(4)
    affine[:3, :3] = matrix
    affine[:3, 3] = np.array(shift) - matrix @ ((np.array(shape) - 1) / 2)
    return Grid(shape, affine)


ONE = _grid()
# Moved by quarters of a voxel, never by half of one, so that nothing is a matter of rounding; three
# are left-handed, and the last one is oblique.
OWN = {
    sub: _grid(5 * i + 3, (0.75 * (i % 3 - 1), 0.75 * (i % 2), -2.25 * (i % 2)), 0.2 * (i == 9))
    for i, sub in enumerate(SUBS)
}
_X = ONE.mm()[..., 0]
ATLAS = np.select([_X < -4, _X < 1.5], [1, 2], 3).astype(np.int16)
PATCH = (np.abs(ONE.mm() - [-4, 2, 0]) < [5, 5, 6]).all(axis=-1)


def population(grid: Grid, task: str) -> np.ndarray:
    """The population's effect in each voxel of a grid."""
    top, height, wide = (-6, 0.6, 5) if task == TESTED else (-4, 0.5, 6)
    mm = grid.mm()
    bump = height * np.exp(-((mm - [top, 0, 0]) ** 2).sum(axis=-1) / (2 * wide**2))
    return np.where(mm[..., 0] < 1.5, bump, 0)


class World:
    """One study: its maps and their truth.

    Parameters
    ----------
    seed : int
    own : bool
        Each subject's maps are on a grid of their own.
    missing : bool
        Some subjects lack a run.
    """

    def __init__(self, seed: int, own: bool = False, missing: bool = False) -> None:
        rng = np.random.default_rng(seed)
        self.own = own
        self.excluded, self.absent = (EXCLUDED, ABSENT) if missing else ((), ())
        self.grids = OWN if own else dict.fromkeys(SUBS, ONE)
        self.truth: dict[tuple[str, str], np.ndarray] = {}
        self.maps: dict[tuple[str, str, str], np.ndarray] = {}
        for sub, grid in self.grids.items():
            for kinds in ((TESTED, LOCALIZER), (SUM,)):
                persistent = PERSISTENT * rng.standard_normal(grid.shape)
                amplitude = rng.normal(1, 0.3)
                for kind in kinds:
                    self.truth[sub, kind] = amplitude * population(grid, kind) + persistent
                    for run in RUNS:
                        made = self.truth[sub, kind] + rng.standard_normal(grid.shape)
                        self.maps[sub, kind, run] = made.astype(np.float32)
        # What a file or a volume holds all the same, and must not be read.
        self._lost = {
            key: self.maps.pop(key) + np.float32(50) for key in (*self.excluded, *self.absent)
        }

    def runs(self, sub: str, task: str) -> list[str]:
        """The runs that count."""
        return [run for run in RUNS if (sub, task, run) in self.maps]

    def mean(self, sub: str, task: str) -> np.ndarray:
        """A subject's runs averaged, stored in single precision as maps are."""
        runs = [self.maps[sub, task, run] for run in self.runs(sub, task)]
        return np.mean(runs, axis=0, dtype=np.float64).astype(np.float32)

    def true_effect(self, sub: str, target: str) -> np.ndarray:
        """The effect of the tested task in each voxel: the population's or the subject's own."""
        if target == POPULATION:
            return population(self.grids[sub], TESTED)
        return self.truth[sub, TESTED]

    def write(self, folder: Path, layout: str) -> Path:
        """Maps, table, regions and STUDY.toml; returns the path of the last."""
        every = self.maps | self._lost
        files: dict[str, list[tuple[str, str, str]]] = {}
        for key in sorted(every, reverse=True):  # volumes in another order than the table's rows
            if layout == "files" and key in self.absent:
                continue
            sub, kind, run = key
            name = {
                "files": f"sub-{sub}_{kind.replace(' ', '-')}_run-{run}.nii.gz",
                "stack of each subject": f"sub-{sub}_runs.nii",
                "stack of the study": "study.nii.gz",
            }[layout]
            files.setdefault(name, []).append(key)
        rows = []
        for name, held in files.items():
            data = np.stack([every[key] for key in held], axis=-1)
            if layout == "files":
                data = data[..., 0]
            nib.save(nib.Nifti1Image(data, self.grids[held[0][0]].affine), folder / name)
            for volume, key in enumerate(held):
                if key in self.absent:
                    continue
                sub, kind, run = key
                why = "fell asleep" if key in self.excluded else "n/a"
                number = "n/a" if layout == "files" else str(volume)
                rows.append(
                    [sub, *kind.split(), run, "bold", name, number, why, bank(sub), bed(sub)]
                )
        head = "sub\ttask\tcontrast\trun\tsuffix\tpath\tvolume\texclude_reason\tbank\tbed\n"
        lines = ["\t".join(row) + "\n" for row in sorted(rows)]
        (folder / "table.tsv").write_text(head + "".join(lines), encoding="utf-8")
        (folder / "design.tsv").write_text("amber\tteal\n" + "1\t0\n0\t1\n" * 9)
        nib.save(nib.Nifti1Image(ATLAS, ONE.affine), folder / "garden_dseg.nii.gz")
        (folder / "garden_dseg.tsv").write_text("index\tname\n1\tArbor\n2\tBrook\n3\tCinder\n")
        nib.save(nib.Nifti1Image(PATCH.astype(np.uint8), ONE.affine), folder / "patch.nii.gz")
        study = folder / "STUDY.toml"
        plans = [plan for plan in PLANS if not (self.own and plan.group)]
        study.write_text(study_toml(plans, self.own), encoding="utf-8")
        return study


def study_toml(plans: Iterable[Plan], own: bool) -> str:
    """The study file with a [[roi]] for each plan."""
    text = (
        '[study]\nname = "garden"\ntable = "table.tsv"\nseed = 5\n[data]\n'
        'select = { task = "lanterns", contrast = "difference" }\n'
        f'grids = "{"own" if own else "one"}"\n'
    )
    for plan in plans:
        keys = plan.keys.replace("@", ", regrid = true" if own else "")
        text += f'[[roi]]\nname = "{plan.name}"\nplan = "{plan.plan}"\n{keys.strip()}\n'
    return text


def table(path: Path) -> list[dict[str, str]]:
    """The rows of a tab-separated file, blanks for n/a."""
    with path.open(encoding="utf-8") as file:
        rows = csv.DictReader(file, delimiter="\t")
        return [{key: "" if v == "n/a" else v for key, v in row.items()} for row in rows]


def read_results(folder: Path) -> tuple[Read, dict[str, dict[str, str]]]:
    """Every value of an output folder with its mask, and per region who shares which mask."""
    found: Read = {}
    images: dict[str, np.ndarray] = {}
    shared: dict[str, dict[str, str]] = {}
    for row in table(folder / "roi_values.tsv"):
        name = row["mask"]
        if name not in images:
            images[name] = np.asarray(nib.load(folder / "masks" / name).dataobj)
        mask = images[name] == int(row["parcel"] or 1)
        found[row["roi"], row["parcel"], row["sub"], row["run"]] = float(row["value"]), mask
        shared.setdefault(row["roi"], {})[row["sub"]] = name
    return found, shared


def offset(read: Read, world: World, roi: str, target: str, parcel: str = "") -> float:
    """Estimate minus its target: the mean true effect over the masks that were used.

    Runs are averaged within a subject, subjects then. In an empty mask the value counts as 0,
    and so does the truth.
    """
    of_sub: dict[str, list[float]] = {}
    for (name, part, sub, _), (value, mask) in read.items():
        if (name, part) == (roi, parcel):
            true = world.true_effect(sub, target)[mask].mean() if mask.any() else 0.0
            of_sub.setdefault(sub, []).append(value - float(true))
    return float(np.mean([np.mean(values) for values in of_sub.values()]))


def offsets(read: Read, world: World) -> dict[tuple[str, str, str], float]:
    """`offset` of every region, at its own target and at the wrong ones: (roi, parcel, target)."""
    wanted = {(plan.name, plan.target) for plan in PLANS} | set(WRONG)
    keys = sorted({(roi, parcel) for roi, parcel, _, _ in read})
    return {
        (roi, parcel, target): offset(read, world, roi, target, parcel)
        for roi, parcel in keys
        for target in (POPULATION, THEMSELVES)
        if (roi, target) in wanted
    }


def null_bias(missing: bool, many: int = 4000, seed: int = 0) -> dict[str, tuple[float, float]]:
    """How far Look and Same are off in Cinder: mean of many data sets and its standard error.

    Nothing but subjects' means in independent voxels, thresholded by their own t (Look) or by
    the localizer's (Same) and read in the tested task; no study, no files.
    """
    rng, size = np.random.default_rng(seed), (many, len(SUBS), int((ATLAS == 3).sum()))
    lost = (*EXCLUDED, *ABSENT) if missing else ()
    persistent = PERSISTENT * rng.standard_normal(size)
    means, passed = {}, {}
    for task in (TESTED, LOCALIZER):
        runs = [len(RUNS) - sum(key[:2] == (sub, task) for key in lost) for sub in SUBS]
        x = persistent + rng.standard_normal(size) / np.sqrt(runs)[:, None]
        means[task] = x.mean(axis=1)
        t = means[task] / (x.std(axis=1, ddof=1) / np.sqrt(len(SUBS)))
        passed[task] = t > stats.t.isf(P, len(SUBS) - 1)
    made = {}
    for roi, task in (("Look", TESTED), ("Same", LOCALIZER)):
        inside = passed[task]
        read = (means[TESTED] * inside).sum(axis=1) / np.maximum(inside.sum(axis=1), 1)
        made[roi] = float(read.mean()), float(read.std(ddof=1) / np.sqrt(many))
    return made
