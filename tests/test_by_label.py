"""Labels of one atlas are regions of their own: what is known of one is nothing of the others."""

from __future__ import annotations

import shutil
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import pytest
from click.testing import CliRunner
from gallery_studies import ARBOR, HEAD, SHAPE, arbor, planted, run_once, save
from nipype import Function, MapNode, Node, Workflow
from running import workflow
from sequester import read_settings, read_table, run_study
from sequester.nodes.interfaces import Extract, ExtractParcels, LabelMask
from sequester.nodes.touch import Unit
from sequester.workflows.ancestry import Ancestry
from sequester.workflows.cli import main
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.ledger import Ledger, shelf_of
from sequester.workflows.origins import Recorded, Selected, atlas_sets
from sequester.workflows.run import check_study
from sequester.workflows.study import Doubt, Origin, Row, Study

PART = """
[[roi]]
name = "{name}"
plan = "a-priori"
region = {{ atlas = "atlas.nii.gz", origin = "an atlas of 1909"{labels} }}
"""

pytestmark = pytest.mark.usefixtures("quiet_engine")


@pytest.fixture
def garden(tmp_path: Path) -> Path:
    """A study that has found Arbor, and an atlas: 5 and 6 are its halves, 2 is somewhere else."""
    root = tmp_path / "garden"
    shutil.copytree(run_once(), root)
    atlas, found = np.zeros(SHAPE, np.int16), np.argwhere(arbor(root))
    middle = np.median(found[:, 0])
    for voxel in map(tuple, found):
        atlas[voxel] = 5 if voxel[0] < middle else 6
    atlas[7:, 6:, 5:] = 2
    save(root / "atlas.nii.gz", atlas)
    (root / "atlas.tsv").write_text("index\tname\n2\tMoss\n5\tWest\n6\tEast\n")
    return root


def region(name: str, *labels: int | str, each: bool = False) -> str:
    listed = f", labels = {list(labels)}" if labels else ""
    return PART.format(name=name, labels=listed) + "each_label = true\n" * each


def refused(root: Path, *regions: str) -> list[Any]:
    """What is refused when these regions are there besides."""
    (root / "STUDY.toml").write_text(HEAD + ARBOR + "".join(regions))
    try:
        check_study(read_settings(root / "STUDY.toml"))
    except GuardRefused as error:
        return error.findings
    return []


def declared(root: Path, *call: str) -> None:
    call = ("declare", str(root / "atlas.nii.gz"), "--study", str(root / "STUDY.toml"), *call)
    done = CliRunner().invoke(main, [*call, "--source", "an atlas of 1909"])
    assert done.exit_code == 0, done.output


@pytest.mark.parametrize(("west", "moss"), [(5, 2), ("West", "Moss")])
def test_a_doubt_about_one_label_stops_what_reads_it_alone(garden: Path, west: Any, moss: Any):
    found = refused(garden, region("West", west), region("Moss", moss))
    assert {finding.node for finding in found} == {"garden.West.extract", "garden.West.test"}
    assert refused(garden, region("Moss", moss)) == []


def test_a_family_is_told_which_label_is_in_doubt(garden: Path):
    found = refused(garden, region("All", each=True))
    (reason,) = {finding.reason for finding in found}
    assert "label 5 of atlas.nii.gz is like a mask that was chosen on the data" in reason
    assert "label 6 of atlas.nii.gz is like" in reason
    assert "label 2" not in reason
    assert "sequester declare atlas.nii.gz --label 5 --source TEXT --explained" in found[0].cure
    assert refused(garden, region("One", 2, each=True)) == []
    assert refused(garden, region("Two", 2, 6, each=True)) != []
    # What is in doubt of it is in doubt of those labels alone, whoever reads them.
    found = refused(garden, region("All", each=True), region("Moss", 2))
    assert {finding.node for finding in found} == {"garden.All.extract", "garden.All.test"}


def test_an_explanation_is_of_the_labels_that_it_names(garden: Path):
    west, east = region("West", 5), region("East", 6)
    assert refused(garden, west) and refused(garden, east)
    declared(garden, "--label", "5", "--explained", "the path to the gate")
    assert refused(garden, west) == []
    assert {finding.node for finding in refused(garden, west, east)} == {
        "garden.East.extract",
        "garden.East.test",
    }
    (reason,) = {finding.reason for finding in refused(garden, region("All", each=True))}
    assert "label 6" in reason and "label 5" not in reason
    settings = read_settings(garden / "STUDY.toml")
    shelf = shelf_of(settings.ledger, Ledger(settings.ledger).sound())
    known, selects = (
        Recorded(shelf, settings.study),
        atlas_sets(garden / "atlas.nii.gz", ())[0],
    )
    for labels, covered in (((5,), True), ((5, 6), False), ((6,), False), ((), False)):
        assert known.explained(Selected("", (), (), selects, labels), known.made[0]) is covered
    declared(garden, "--all-labels", "--explained", "it is older than the garden")
    assert refused(garden, west, east, region("All", each=True)) == []


def test_so_is_what_a_label_was_made_from(garden: Path):
    declared(garden, "--label", "2", "--derived-from", "suffix=bold")
    found = refused(garden, region("Moss", 2))
    assert {(f.kind, f.verdict) for f in found} == {("extraction", "leak"), ("statistic", "leak")}
    declared(garden, "--label", "6", "--explained", "a hedge")
    assert refused(garden, region("East", 6)) == []


def saved(root: Path, label: int) -> str:
    """A region of a label's voxels, saved as a mask of their own."""
    volume = np.asarray(nib.load(root / "atlas.nii.gz").dataobj)
    save(root / "own.nii.gz", (volume == label).astype(np.uint8))
    given = 'mask = "own.nii.gz", origin = "an atlas of 1909"'
    return f'[[roi]]\nname = "Saved"\nplan = "a-priori"\nregion = {{ {given} }}\n'


@pytest.mark.parametrize("named", [("--label", "5"), ("--all-labels",), ("--label", "2"), ()])
def test_a_declared_label_that_is_saved_as_a_mask_is_declared(
    garden: Path, tmp_path: Path, named: tuple[str, ...]
):
    """Before the run the label was declared, and its voxels are like what the run found then."""
    root = Path(shutil.copytree(planted(), tmp_path / "before"))
    shutil.copyfile(garden / "atlas.nii.gz", root / "atlas.nii.gz")
    study = root / "STUDY.toml"
    study.write_text(HEAD + ARBOR)
    if named:
        declared(root, *named)
    run_study(read_settings(study))
    told = {finding.verdict for finding in refused(root, saved(root, 5))}
    assert told == (set() if "5" in named or "--all-labels" in named else {"unproven"})


def test_what_a_label_was_made_from_stays_with_its_voxels(garden: Path):
    declared(garden, "--label", "2", "--derived-from", "suffix=bold")
    assert {finding.verdict for finding in refused(garden, saved(garden, 2))} == {"leak"}
    assert refused(garden, saved(garden, 2).replace("own.nii.gz", "all.nii.gz")) == []


def test_what_the_study_file_and_the_ledger_both_say_is_said_once(garden: Path):
    stated = saved(garden, 2).replace(" }", ', derived_from = [{ suffix = "bold" }] }')
    before = refused(garden, stated)
    (garden / "STUDY.toml").write_text(HEAD + ARBOR + stated)
    done = CliRunner().invoke(main, ["declare", "--study", str(garden / "STUDY.toml")])
    assert done.exit_code == 0 and "declaration: own" in done.output
    after = refused(garden, stated)
    assert {finding.made_of for finding in after if finding.made_of} == {("an atlas of 1909",)}
    assert [finding.verdict for finding in after] == [finding.verdict for finding in before]


def test_another_label_in_its_place_is_another_region(garden: Path):
    atlas = np.zeros(SHAPE, np.int16)
    atlas[7:, 6:, 5:], atlas[:1, :1, :] = 2, 3
    save(garden / "atlas.nii.gz", atlas)
    study = garden / "STUDY.toml"
    for label, note in ((2, ""), (3, "Moss was another region (2 of atlas) in 1 look before.")):
        study.write_text(HEAD + region("Moss", label))
        (made,) = run_study(read_settings(study)).tests
        assert note in made["sentence"]
        assert bool(note) == ("another region" in made["sentence"])


class Renamed(LabelMask):
    """A subclass, which may read anything."""


def unknown(study: Study, node: Node, output: str) -> bool:
    graph = Workflow("w")
    graph.add_nodes([node])
    return _unknown(study, graph, f"w.{node.name}", output)


def _unknown(study: Study, graph: Workflow, name: str, output: str) -> bool:
    guard = GuardPlugin(study, dry=True)
    try:
        graph.run(plugin=guard)
        ancestry = guard.ancestry
    except GuardRefused as error:
        ancestry = error.ancestry
    assert isinstance(ancestry, Ancestry)
    return bool(ancestry.outputs[name, output].touch.unknown)


def test_which_labels_a_node_reads_is_known_from_its_settings_or_it_reads_all(garden: Path):
    atlas, like = str(garden / "atlas.nii.gz"), str(garden / "sub-01.nii.gz")
    doubt = Origin("an atlas (5)", ("atlas.nii.gz",), (), (Doubt("5", "who knows", "ask"),), (5,))
    rows = [Row("sub-01.nii.gz", None, Unit(sub="01", suffix="bold"))]
    study = Study(garden, rows, [Origin("an atlas", ("atlas.nii.gz",)), doubt])

    def mask(kind: Any = LabelMask, **given: Any) -> Node:
        return Node(kind(in_file=atlas, reference=like, **given), "n")

    assert not unknown(study, mask(labels=[2, 6]), "mask_file")
    assert unknown(study, mask(labels=[2, 5]), "mask_file")
    assert not unknown(study, mask(labels=["Moss"]), "mask_file")
    assert unknown(study, mask(labels=["west"]), "mask_file")
    assert unknown(study, mask(Renamed, labels=[2]), "mask_file")
    several = MapNode(LabelMask(labels=[2]), iterfield=["in_file", "reference"], name="n")
    several.inputs.in_file, several.inputs.reference = [atlas, atlas], [like, like]
    assert not unknown(study, several, "mask_file")
    each = MapNode(LabelMask(in_file=atlas, reference=like), iterfield=["labels"], name="n")
    each.inputs.labels = [[2], [6]]
    assert unknown(study, each, "mask_file")
    late, graph = Node(LabelMask(in_file=atlas, reference=like), "n"), Workflow("w")
    graph.connect(
        Node(Function([], ["out"], "def f():\n    return [2]"), "f"), "out", late, "labels"
    )
    assert _unknown(study, graph, "w.n", "mask_file")

    def family(**given: Any) -> Node:
        return Node(
            ExtractParcels(label_files=[atlas], in_files=[like], labels=["01"], **given), "n"
        )

    assert not unknown(study, family(parcels=[2, 6]), "values_file")
    assert unknown(study, family(parcels=[5]), "values_file")
    assert unknown(study, family(), "values_file")


# -- labels that are read together, and regions without a file ------------------------------------


def found_in(root: Path) -> None:
    """Label 5 is the mask that a run recorded, 6 is next to it, 2 is somewhere else."""
    atlas = np.where(arbor(root), 5, 0).astype(np.int16)
    atlas[0, :, :] = 6
    atlas[7:, 6:, 5:] = 2
    save(root / "atlas.nii.gz", atlas)


def test_a_recorded_mask_does_not_hide_among_other_labels(garden: Path):
    found_in(garden)
    for labels in ((5,), (5, 6), (2, 5, 6)):
        found = refused(garden, region("Pair", *labels))
        assert {f.verdict for f in found} == {"leak"}, labels
    assert "label 2, 5, 6: one has the same voxels as label-Arbor" in found[0].made_of[0]
    assert refused(garden, region("Pair", 2, 6)) == []


def test_nor_does_one_that_is_like_it(garden: Path):
    found_in(garden)
    volume = np.asarray(nib.load(garden / "atlas.nii.gz").dataobj).copy()
    volume[tuple(np.argwhere(volume == 5)[0])] = 0
    save(garden / "atlas.nii.gz", volume)
    assert {f.verdict for f in refused(garden, region("Pair", 5, 6))} == {"unproven"}
    declared(garden, "--label", "5", "--label", "6", "--explained", "drawn from the path")
    assert refused(garden, region("Pair", 5, 6)) == []


def test_nor_in_a_union_of_labels_of_the_same_atlas(garden: Path):
    found_in(garden)
    parts = [f'{{ atlas = "atlas.nii.gz", labels = [{label}] }}' for label in (2, 5)]
    given = f'union = [{", ".join(parts)}], origin = "an atlas of 1909"'
    union = f'[[roi]]\nname = "Both"\nplan = "a-priori"\nregion = {{ {given} }}\n'
    assert "leak" in {f.verdict for f in refused(garden, union)}


@pytest.mark.parametrize("labels", [[5], [2, 5]])
def test_nor_in_a_graph_that_takes_labels_together(
    garden: Path, labels: list[int], monkeypatch: pytest.MonkeyPatch
):
    found_in(garden)
    declared(garden, "--explained", "all that grows, as a whole")
    maps = sorted(map(str, garden.glob("sub-*.nii.gz")))
    study = read_table(
        garden / "table.tsv", origins=[Origin("an atlas of 1909", ("atlas.nii.gz",))]
    )
    monkeypatch.chdir(garden)
    graph, subs = workflow(), [f"{i:02}" for i in range(1, 8)]
    atlas = str(garden / "atlas.nii.gz")
    mask = Node(LabelMask(in_file=atlas, labels=labels, reference=maps[0]), "mask")
    read = Node(Extract(in_files=maps, labels=subs), "extract")
    graph.connect(mask, "mask_file", read, "mask_files")
    guard = GuardPlugin(study, ledger=garden / "STUDY.ledger.jsonl")
    with pytest.raises(GuardRefused, match=r"leak: w\.extract"):
        graph.run(plugin=guard)


def sphere(name: str, centre: list[int], more: str = "") -> str:
    given = f'centre = {centre}, radius = 5, origin = "table 2 of paper Z"{more}'
    return f'[[roi]]\nname = "{name}"\nplan = "a-priori"\nregion = {{ {given} }}\n'


def test_two_spheres_of_one_source_do_not_share_a_doubt(garden: Path):
    near, far = sphere("One", [-3, -1, 0]), sphere("Two", [9, 8, 6])
    assert {f.node for f in refused(garden, near, far)} == {"garden.One.extract", "garden.One.test"}
    assert refused(garden, far) == []


def test_nor_what_one_was_made_from(garden: Path):
    made = sphere("Two", [9, 8, 6], ', derived_from = [{ suffix = "bold" }]')
    other = sphere("Three", [9, -7, 6])
    assert {f.node for f in refused(garden, made, other)} == {
        "garden.Two.extract",
        "garden.Two.test",
    }


@pytest.mark.parametrize("shape", ["erode = 1", 'mirror = "both"'])
def test_what_is_made_of_a_sphere_is_in_doubt_alone(garden: Path, shape: str):
    near, far = sphere("One", [-3, -1, 0], f", {shape}"), sphere("Two", [9, 8, 6])
    assert {f.node for f in refused(garden, near, far)} == {"garden.One.extract", "garden.One.test"}


def test_a_cure_is_told_once_for_several_labels(garden: Path):
    cure = refused(garden, region("Both", 5, 6, each=True))[0].cure
    assert cure.count("if it was made from these data") == 1
    assert [cure.count(f"sequester declare atlas.nii.gz --label {n}") for n in (5, 6)] == [1, 1]


@pytest.mark.parametrize("regrid", [False, True])
def test_a_family_on_another_grid_reads_the_labels_that_it_names(garden: Path, regrid: bool):
    found_in(garden)
    stated = ', regrid = true, origin = "an' if regrid else ', origin = "an'
    search = region("Five", 5).replace("a-priori", "exploratory").replace("region =", "search =")
    search += 'rule = { kind = "strongest", k = 5 }\n'
    family = region("Six", 2, 6, each=True).replace(', origin = "an', stated)
    assert refused(garden, search, family) == []
    family = region("Six", 5, 6, each=True).replace(', origin = "an', stated)
    assert {f.node for f in refused(garden, search, family)} >= {"garden.Six.extract"}
