"""What the gallery's pipelines are made of: a small garden of real files, and foreign nodes.

The foreign nodes are what a lab has of its own: functions that read NIfTI files and write them,
known to nobody. Where one extracts or tests, a contract names its inputs.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
from nipype import Function, MapNode, Node, Workflow
from sequester import contract
from sequester.nodes.interfaces import ChooseByFold, Extract, FixedRegionTest, FlipTest
from sequester.nodes.masks import Strongest
from sequester.nodes.models import Groups, Score
from sequester.nodes.procedure import Procedure
from sequester.nodes.rules import Meeting, Statistic
from sequester.workflows.study import Origin, Study, read_table

SUBS = ("01", "02", "03", "04", "05", "06")
AGE = (31, 45, 52, 28, 60, 39)
MOOD = (2.5, 3.0, 1.5, 4.0, 3.5, 2.0)
BANK = ("left", "right", "left", "right", "left", "right")
SHAPE = (4, 4, 3)
AFFINE = np.diag([3.0, 3.0, 3.0, 1.0])
NAMES = ("Arbor", "plan", "search")
# What each subject has: name of the file, and the entities of its unit.
SCANS = {
    "lanterns1": {"task": "lanterns", "run": "1", "suffix": "bold"},
    "lanterns2": {"task": "lanterns", "run": "2", "suffix": "bold"},
    "lanterns": {"task": "lanterns", "suffix": "bold"},
    "paths": {"task": "paths", "suffix": "bold"},
    "rest": {"task": "rest", "suffix": "bold"},
    "spring": {"task": "ponds", "ses": "spring", "suffix": "bold"},
    "autumn": {"task": "ponds", "ses": "autumn", "suffix": "bold"},
    "T1w": {"suffix": "T1w"},
}
OUTSIDE = ("atlas", "tissue", "stranger", "pilot", "seed")
COLUMNS = ("sub", "ses", "task", "run", "suffix", "exchange", "age", "mood", "bank")


@dataclass
class Garden:
    """A folder with six gardeners' scans and the study that declares them."""

    root: Path
    exchange: dict[str, str] = field(default_factory=dict)
    left_out: dict[str, str] = field(default_factory=dict)
    study: Study = field(init=False)

    def __post_init__(self) -> None:
        self.root.mkdir(exist_ok=True, parents=True)
        lines = ["path\t" + "\t".join(COLUMNS) + "\texclude_reason"]
        for n, sub in enumerate(SUBS):
            for scan, entities in SCANS.items():
                path = f"sub-{sub}_{scan}.nii"
                seed = 100 * n + list(SCANS).index(scan)
                self.image(path, np.random.default_rng(seed).normal(0.5, 1, SHAPE))
                told = {"sub": sub, "age": str(AGE[n]), "mood": str(MOOD[n]), "bank": BANK[n]}
                told |= {"exchange": self.exchange.get(sub, ""), **entities}
                cells = [told.get(name) or "n/a" for name in COLUMNS]
                lines.append("\t".join([path, *cells, self.left_out.get(sub) or "n/a"]))
        for seed, name in enumerate(OUTSIDE, 1000):
            self.image(f"{name}.nii", np.random.default_rng(seed).random(SHAPE) < 0.3)
        (self.root / "table.tsv").write_text("\n".join(lines) + "\n")
        self.declare()

    def declare(self, *origins: Origin) -> Garden:
        """The study with these origins besides the usual ones."""
        usual = [
            Origin("an atlas of 1909", ("atlas.nii",)),
            Origin("tissue probabilities that came with the software", ("tissue.nii",)),
            Origin("a seed from a paper of 1911", ("seed.nii",)),
        ]
        self.study = read_table(self.root / "table.tsv", origins=[*usual, *origins])
        return self

    def image(self, name: str, data: Any) -> str:
        """Write an image into the garden."""
        path = self.root / name
        nib.save(nib.Nifti1Image(np.asarray(data, np.float32), AFFINE), path)
        return str(path)

    def of(self, scan: str, subs: Sequence[str] = SUBS) -> list[str]:
        """The paths of one scan of several people."""
        return [str(self.root / f"sub-{sub}_{scan}.nii") for sub in subs]

    def outside(self, name: str) -> str:
        """The path of a file from outside."""
        return str(self.root / f"{name}.nii")


# -- foreign functions -------------------------------------------------------------------------


def average(in_files):
    """The mean image of some files, or of one."""
    import os

    import nibabel
    import numpy

    files = [in_files] if isinstance(in_files, str) else list(in_files)
    images = [nibabel.load(path) for path in files]
    data = numpy.mean([image.get_fdata() for image in images], axis=0)
    nibabel.save(nibabel.Nifti1Image(data.astype("f4"), images[0].affine), "average.nii")
    return os.path.abspath("average.nii")


def strongest(in_file, k=6):
    """A mask of the k highest voxels."""
    import os

    import nibabel
    import numpy

    image = nibabel.load(in_file)
    data = image.get_fdata()
    mask = (data >= numpy.sort(data, axis=None)[-k]).astype("f4")
    nibabel.save(nibabel.Nifti1Image(mask, image.affine), "mask.nii")
    return os.path.abspath("mask.nii")


def realigned(in_file, reference):
    """A scan on the grid of a reference image."""
    import os

    import nibabel

    image, like = nibabel.load(in_file), nibabel.load(reference)
    nibabel.save(nibabel.Nifti1Image(image.get_fdata().astype("f4"), like.affine), "moved.nii")
    return os.path.abspath("moved.nii")


def minus(in_file, other):
    """One image less another."""
    import os

    import nibabel

    image = nibabel.load(in_file)
    data = image.get_fdata() - nibabel.load(other).get_fdata()
    nibabel.save(nibabel.Nifti1Image(data.astype("f4"), image.affine), "minus.nii")
    return os.path.abspath("minus.nii")


def centred(in_files):
    """Every image less the mean of all."""
    import os

    import nibabel
    import numpy

    images = [nibabel.load(path) for path in in_files]
    data = numpy.array([image.get_fdata() for image in images])
    made = []
    for n, (image, one) in enumerate(zip(images, data - data.mean(axis=0), strict=True)):
        nibabel.save(nibabel.Nifti1Image(one.astype("f4"), image.affine), f"centred{n}.nii")
        made.append(os.path.abspath(f"centred{n}.nii"))
    return made


def going_with(in_files, scores):
    """A map of the correlation with a score."""
    import os

    import nibabel
    import numpy

    images = [nibabel.load(path) for path in in_files]
    data = numpy.array([image.get_fdata().ravel() for image in images])
    r = numpy.corrcoef(data.T, scores)[-1, :-1].reshape(images[0].shape)
    nibabel.save(nibabel.Nifti1Image(r.astype("f4"), images[0].affine), "r.nii")
    return os.path.abspath("r.nii")


def read_in(mask_file, in_file):
    """The mean of a map inside a mask."""
    import nibabel

    inside = nibabel.load(mask_file).get_fdata() > 0
    return float(nibabel.load(in_file).get_fdata()[inside].mean())


def motion_of(in_file):
    """How much somebody moved, say."""
    import nibabel

    return float(abs(nibabel.load(in_file).affine[:3, 3]).max())


def response_of(in_file):
    """How strong the response is."""
    import nibabel

    return float(nibabel.load(in_file).get_fdata().mean())


def best_size(in_files):
    """The number of voxels that shows most."""
    import nibabel

    return 3 + int(sum(nibabel.load(path).get_fdata().max() > 2 for path in in_files))


def peak_of(in_file):
    """Where a map is highest, in mm."""
    import nibabel
    import numpy

    image = nibabel.load(in_file)
    data = image.get_fdata()
    voxel = numpy.unravel_index(data.argmax(), data.shape)
    return tuple(float(x) for x in nibabel.affines.apply_affine(image.affine, voxel))


def scaled(values):
    """Some numbers, doubled."""
    return [2 * value for value in values]


def t_test(values):
    """Student's t."""
    import scipy.stats

    return float(scipy.stats.ttest_1samp(values, 0).statistic)


def correlated(values, scores):
    """Pearson's correlation."""
    import numpy

    return float(numpy.corrcoef(values, scores)[0, 1])


def mean_of(values):
    """The mean of some numbers."""
    return sum(values) / len(values)


def best_parcels(in_files):
    """The parcels that show most."""
    return [1]


def called_by(mask_file, command):
    """What a command makes of a mask, say."""
    return mask_file


def neighbour(in_file):
    """A file in the same folder."""
    import os

    return os.path.join(os.path.dirname(in_file), "sub-01_lanterns1.nii")


def copied(in_file):
    """A copy of a file in the same folder."""
    import os
    import shutil

    other = os.path.join(os.path.dirname(in_file), "sub-01_lanterns1.nii")
    return shutil.copy(other, os.path.abspath("copy.nii"))


def reversed_list(in_files):
    """A list, from its end."""
    return in_files[::-1]


def first_half(maps):
    """The first three."""
    return maps[:3]


def second_half(maps):
    """All others."""
    return maps[3:]


def peak_of_first(maps):
    """Where the first map is highest, in mm."""
    import nibabel
    import numpy

    image = nibabel.load(maps[0])
    data = image.get_fdata()
    voxel = numpy.unravel_index(data.argmax(), data.shape)
    return tuple(float(x) for x in nibabel.affines.apply_affine(image.affine, voxel))


class OwnFolds(ChooseByFold):
    """A lab's own version of our folds."""


def foreign(
    function: Callable[..., Any], name: str = "", over: Sequence[str] = (), **inputs: Any
) -> Node:
    """A node (over some fields a MapNode) with a function that nobody knows."""
    body = Function(function=function, output_names=["out"])
    made = (
        MapNode(body, iterfield=list(over), name=name or function.__name__)
        if over
        else Node(body, name=name or function.__name__)
    )
    made.inputs.trait_set(**inputs)
    return made


def reading(name: str = "read", **inputs: Any) -> Node:
    """A foreign extraction, element by element."""
    node = foreign(read_in, name, ["mask_file", "in_file"], **inputs)
    return contract(node, extraction=Meeting(mask="mask_file", data="in_file"))


def own_test(name: str = "test", **claim: Any) -> Node:
    """A foreign t-test."""
    return contract(foreign(t_test, name), statistic=Statistic(values="values", **claim))


def correlating(scores: Any, name: str = "correlate") -> Node:
    """A foreign correlation with a score."""
    node = foreign(correlated, name)
    if scores is not None:
        node.inputs.scores = list(scores)
    return contract(node, statistic=Statistic(values="values", scores=("scores",)))


# -- our own nodes -----------------------------------------------------------------------------


def empty(name: str = "w") -> Workflow:
    """A workflow without anything."""
    made = Workflow(name, base_dir="work")
    made.config["execution"] = {
        "crashdump_dir": ".",
        "create_report": "false",
        "poll_sleep_duration": "0.1",
    }
    return made


def extract(in_files: Sequence[str] | None = None, name: str = "extract", **inputs: Any) -> Node:
    """Our extraction."""
    node = Node(Extract(**inputs), name=name)
    node.inputs.labels = inputs.get("labels", list(SUBS))
    if in_files is not None:
        node.inputs.in_files = list(in_files)
    return node


def fixed_test(name: str = "test", **inputs: Any) -> Node:
    """Our t-test."""
    return Node(FixedRegionTest(names=NAMES, **inputs), name=name)


def read_and_test(graph: Workflow, region: Node, output: str, read: Node, test: Node) -> Workflow:
    """Region, extraction, test."""
    graph.connect(region, output, read, "mask_files")
    fields = ("values", "coverage", "sizes") if test.interface.__class__ is FixedRegionTest else ()
    graph.connect([(read, test, [(f, f) for f in fields or ("values",)])])
    return graph


def by_fold(in_files: Sequence[str], procedure: Procedure, labels: Sequence[str] = SUBS) -> Node:
    """Our masks, fold by fold."""
    node = ChooseByFold(in_files=list(in_files), labels=list(labels), procedure=procedure)
    return Node(node, name="choose")


def flip_test(in_files: Sequence[str], procedure: Procedure, labels: Sequence[str] = SUBS) -> Node:
    """Our whole-procedure test."""
    made = FlipTest(
        in_files=list(in_files), labels=list(labels), procedure=procedure, names=NAMES, n_flips=19
    )
    return Node(made, name="test")


def with_age(**more: Any) -> Procedure:
    """Chosen by the correlation with age."""
    of = tuple(zip(SUBS, map(float, AGE), strict=True))
    return Procedure(Strongest(6), model=Score(of, name="age"), **more)


def with_bank(**more: Any) -> Procedure:
    """Chosen by the difference of the two banks."""
    of = tuple(zip(SUBS, BANK, strict=True))
    return Procedure(Strongest(6), model=Groups(of, "left", "right", name="bank"), **more)
