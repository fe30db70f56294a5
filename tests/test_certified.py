"""What a certificate of orthogonal contrasts makes harmless, and what it does not.

Nothing runs here: the guard judges the expanded graph and stops. The files are no images.
"""

from __future__ import annotations

from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from nipype import Function, Node, Workflow
from sequester.nodes.folds import LeaveOneOut
from sequester.nodes.interfaces import (
    ChooseByFold,
    ChooseMask,
    Extract,
    FixedRegionTest,
    GivenMask,
    GroupMap,
    KeepSubjects,
)
from sequester.nodes.masks import Strongest
from sequester.nodes.orthogonality import Certificate, Condition
from sequester.nodes.procedure import Procedure
from sequester.nodes.subjects import Keep
from sequester.nodes.touch import Unit
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.study import Origin, Row, Study

pytestmark = pytest.mark.usefixtures("quiet_engine")

SUBS = ("01", "02", "03", "04")
# Name of the map: its run, and the contrast that the table states.
MAPS = {
    "glow1": "glow",
    "dim1": "dim",
    "again1": "glow",
    "blank1": "",
    "glow2": "glow",
    "dim2": "dim",
}
HOLDS = Certificate("a + b", "a - b", (Condition("run", 0.0), Condition("subject", 0.0)), ())


@pytest.fixture
def study(tmp_path: Path) -> Study:
    rows = [
        Row(f"{sub}_{name}.nii", None, Unit(sub=sub, run=name[-1], suffix="bold"), contrast)
        for sub in SUBS
        for name, contrast in MAPS.items()
    ]
    for row in rows:
        (tmp_path / row.path).write_text(row.path)
    (tmp_path / "ours.nii").write_text("ours")
    return Study(tmp_path, rows, [Origin("our map", ("ours.nii",), (Unit(run="1"),))])


def maps(study: Study, name: str, subs: tuple[str, ...] = SUBS) -> list[str]:
    return [str(study.root / f"{sub}_{name}.nii") for sub in subs]


def read_in(study: Study, chosen: Node, out: str, certificate: Certificate | None) -> Workflow:
    """Run 1 of the contrast glow, read in what was chosen, and tested."""
    graph = Workflow("garden")
    read = Extract(in_files=maps(study, "glow1"), labels=list(SUBS))
    test = FixedRegionTest(labels=list(SUBS), names=("roi", "plan", "search"))
    if certificate is not None:
        read.inputs.certificate = test.inputs.certificate = certificate
    extract, end = Node(read, "extract"), Node(test, "test")
    graph.connect(
        [(chosen, extract, [(out, "mask_files")]), (extract, end, [("values", "values")])]
    )
    return graph


def by_group(study: Study, name: str, certificate: Certificate | None = HOLDS) -> Workflow:
    """The region is chosen on the group's map of some maps."""
    choose = Node(ChooseMask(rule=Strongest(2)), "choose")
    graph = read_in(study, choose, "mask_file", certificate)
    graph.connect(
        Node(GroupMap(in_files=maps(study, name)), "group"), "out_file", choose, "in_file"
    )
    return graph


def judged(graph: Workflow, study: Study) -> str:
    """What the guard says: the verdicts, or its refusal."""
    guard = GuardPlugin(study, dry=True)
    try:
        graph.run(plugin=guard)
    except GuardRefused as error:
        return " ".join(str(error).split())
    return " ".join(sorted({f"{one.kind} {one.verdict} {one.level}" for one in guard.findings}))


def test_another_contrast_of_the_same_runs_is_certified(study):
    assert judged(by_group(study, "dim1"), study).startswith("extraction certified subject")
    assert "another map of the very data" in judged(by_group(study, "dim1", None), study)


@pytest.mark.parametrize(
    ("name", "told"),
    [
        ("glow1", "no certificate covers a map which chose and is tested"),
        ("again1", "the certificate is about two contrasts, and glow chose and is tested"),
        ("blank1", "fill its contrast column"),
        ("glow2", "the mask was not chosen on exactly these"),
        ("dim2", "the mask was not chosen on exactly these"),
    ],
)
def test_it_covers_the_same_runs_and_another_contrast_only(study, name, told):
    assert told in judged(by_group(study, name), study)


def test_it_does_not_cover_the_tested_map_that_is_stored_in_another_way(study):
    rng = np.random.default_rng(3)
    for sub in SUBS:
        data = rng.normal(size=(3, 3, 3)).astype(np.float32)
        nib.save(nib.Nifti1Image(data, np.eye(4)), study.root / f"{sub}_glow1.nii")
        nib.save(nib.Nifti1Image(data.astype(float), np.eye(4)), study.root / f"{sub}_dim1.nii")
    told = judged(by_group(study, "dim1"), study)
    assert "no certificate covers a map which chose and is tested" in told
    for sub in SUBS:
        nib.save(nib.Nifti1Image(data + int(sub), np.eye(4)), study.root / f"{sub}_dim1.nii")
    assert judged(by_group(study, "dim1"), study).startswith("extraction certified subject")


def test_runs_besides_the_tested_ones_are_not_covered(study):
    graph = by_group(study, "dim1")
    graph.get_node("group").inputs.in_files = maps(study, "dim1") + maps(study, "dim2")
    assert "the mask was not chosen on exactly these" in judged(graph, study)


def test_a_declared_region_has_no_contrast(study):
    """What was made from run 1 is on the tested units, but of which contrast nobody says."""
    given = Node(GivenMask(in_file=str(study.root / "ours.nii")), "given")
    told = judged(read_in(study, given, "mask_file", HOLDS), study)
    assert "fill its contrast column" in told


@pytest.mark.parametrize("certificate", [None, HOLDS])
def test_turns_of_folds_stay_turns_beside_a_certificate(study, certificate):
    """Held-out masks need no certificate, and with one the naive t still does not fit them."""
    choose = ChooseByFold(
        in_files=maps(study, "glow1"),
        labels=list(SUBS),
        procedure=Procedure(Strongest(2), LeaveOneOut()),
    )
    graph = read_in(study, Node(choose, "choose"), "row_masks", certificate)
    assert "FlipTest" in judged(graph, study)


def test_subjects_kept_by_their_data_are_not_covered(study):
    """Whose maps go into the group's map is decided by a measure of these maps."""
    body = Function(input_names=["files"], output_names=["out"], function=sizes)
    measure = Node(body, "measure")
    measure.inputs.files = maps(study, "dim1")
    keep = KeepSubjects(in_files=maps(study, "dim1"), labels=list(SUBS), keep=Keep(0, 1))
    keep = Node(keep, "keep")
    graph = by_group(study, "dim1")
    graph.connect(measure, "out", keep, "measures")
    graph.connect(keep, "out_files", graph.get_node("group"), "in_files")
    assert "the certificate says nothing of what kept or left out" in judged(graph, study)


def sizes(files):
    return [0.5 for _ in files]
