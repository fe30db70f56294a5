"""The ledger around a workflow made by hand: what it knows before, and what a run adds."""

from __future__ import annotations

import json
import shutil
from dataclasses import replace
from pathlib import Path
from typing import Any, ClassVar

import nibabel as nib
import numpy as np
import pytest
from click.testing import CliRunner
from nipype import Function, JoinNode, MapNode, Node, Workflow
from nipype.interfaces.utility import IdentityInterface
from planting import a_grid, paths_of, plant
from running import workflow
from sequester import GuardPlugin, contract
from sequester.nodes.errors import InputError
from sequester.nodes.interfaces import (
    ChooseByFold,
    Extract,
    ExtractParcels,
    FamilyTest,
    FixedRegionTest,
    FlipTest,
    LabelMask,
    SphereMask,
)
from sequester.nodes.masks import Strongest
from sequester.nodes.procedure import Procedure
from sequester.nodes.rules import Meeting, Statistic, each
from sequester.workflows.cli import main
from sequester.workflows.graphledger import _said
from sequester.workflows.guard import GuardRefused
from sequester.workflows.ledger import Ledger
from sequester.workflows.record import record_of
from sequester.workflows.study import Origin, Study

SHAPE, SUBS = (9, 8, 7), [f"{i:02}" for i in range(1, 8)]
AFFINE = np.array([[-3, 0.2, 0, 12], [0.2, 3, -0.1, -11], [0, 0.1, 3, -9], [0, 0, 0, 1.0]])
GRID = a_grid(SHAPE, AFFINE)
PROCEDURE = Procedure(Strongest(20))


pytestmark = pytest.mark.usefixtures("quiet_engine")


@pytest.fixture
def garden(tmp_path: Path) -> Study:
    """Seven people with a map each, a bulb of an effect at the voxel (3, 3, 3), a plot apart."""
    at = np.stack(np.meshgrid(*map(np.arange, SHAPE), indexing="ij"), axis=-1)
    bulb = 3 * (np.linalg.norm(at - [3, 3, 3], axis=-1) < 1.8)
    noise = {sub: np.random.default_rng(i).normal(0, 1, SHAPE) for i, sub in enumerate(SUBS)}
    return plant(
        tmp_path / "garden",
        {sub: (data + bulb).astype(np.float32) for sub, data in noise.items()},
        GRID,
        {"plot": (at == [7, 6, 5]).all(axis=-1) | (at[..., 0] == 8)},
        [Origin("a plan of 1909", ("plot.nii",))],
        {"contrast": ["glow"] * len(SUBS)},
    )


def found(study: Study, name: str = "found", *, k: int = 20, seed: int = 0) -> Workflow:
    """A region that is found and tested, everybody held out in turn."""
    graph = workflow(name)
    procedure = Procedure(Strongest(k))
    choose = Node(
        ChooseByFold(in_files=paths_of(study), labels=SUBS, procedure=procedure), name="choose"
    )
    read = Node(Extract(in_files=paths_of(study), labels=SUBS), name="extract")
    test = Node(
        FlipTest(
            in_files=paths_of(study),
            labels=SUBS,
            procedure=procedure,
            n_flips=9,
            seed=seed,
            names=("Arbor", "leave-one-subject-out", "whole map"),
        ),
        name="test",
    )
    graph.connect(choose, "row_masks", read, "mask_files")
    graph.connect(read, "values", test, "values")
    return graph


def t_test(graph: Workflow, read: Node) -> None:
    """Student's t-test of what was read."""
    test = Node(FixedRegionTest(names=("Brook", "a-priori", "the region")), name="test")
    for field in ("values", "coverage", "sizes"):
        graph.connect(read, field, test, field)


def given(study: Study, mask: Path, name: str = "given") -> Workflow:
    """A region from outside that is tested."""
    graph = workflow(name)
    read = Node(
        Extract(in_files=paths_of(study), labels=SUBS, mask_files=[str(mask)]), name="extract"
    )
    t_test(graph, read)
    return graph


def parcels(study: Study, atlas: Path, base: str = "work") -> Workflow:
    """The labels of an atlas, each tested."""
    graph = workflow("parcels")
    graph.base_dir = base
    read = ExtractParcels(in_files=paths_of(study), labels=SUBS, label_files=[str(atlas)])
    node = Node(read, name="extract")
    test = Node(FamilyTest(labels=SUBS, names=("Brook", "a-priori", "the atlas")), name="test")
    for field in ("values_file", "coverage_file", "parcels", "sizes"):
        graph.connect(node, field, test, field)
    return graph


def sphere(study: Study, centre: tuple[float, ...], name: str = "ball") -> Workflow:
    graph = workflow(name)
    ball = Node(
        SphereMask(reference=paths_of(study)[0], centre=centre, radius=4.0, origin="a letter"),
        name="sphere",
    )
    read = Node(Extract(in_files=paths_of(study), labels=SUBS), name="extract")
    graph.connect(ball, "mask_file", read, "mask_files")
    t_test(graph, read)
    return graph


def run(graph: Workflow, study: Study, **more: Any) -> GuardPlugin:
    guard = GuardPlugin(study, ledger="garden/own.ledger.jsonl", **more)
    graph.run(plugin=guard)
    return guard


def ledger() -> Ledger:
    return Ledger(Path("garden/own.ledger.jsonl"))


def kinds() -> list[str]:
    return [entry.kind for entry in ledger().sound().entries]


def bodies(kind: str) -> list[Any]:
    return [entry.body for entry in ledger().sound().of_kind(kind)]


def with_region(study: Study, name: str, data: Any, affine: Any = AFFINE) -> tuple[Study, Path]:
    path = study.root / name
    nib.save(nib.Nifti1Image(data, affine), path)
    origins = [*study.origins, Origin("a map in the hut", (name,))]
    return Study(study.root, study.rows, origins), path


def fold_mask() -> Any:
    """The mask of the fold that leaves the third person out."""
    return nib.load(sorted(Path("work/found/choose").glob("fold*.nii.gz"))[2])


def results_of(*names: str) -> list[Path]:
    return [*Path("work", *names).rglob("result_*.pklz")]


class TestWhatARunAdds:
    def test_declarations_masks_and_looks_in_one_piece(self, garden: Study):
        guard = run(found(garden), garden)
        assert kinds() == ["declaration", "units", "artefact", "look"]
        (plan,), (made,), (look,) = bodies("declaration"), bodies("artefact"), bodies("look")
        assert plan["sources"] == ["a plan of 1909"] and plan["files"][0]["path"] == "plot.nii"
        # Each mask was chosen on all but the one who is held out.
        assert made["node"] == "found.choose"
        assert [mask["without"] for mask in made["masks"]] == [[i] for i in range(len(SUBS))]
        assert all(len(mask["peaks"]) == 1 for mask in made["masks"])
        assert look["node"] == "found.test" and look["statistic"] == "FlipTest"
        assert look["tested"] == {"all_but": []} and look["contrast"] == ["glow"]
        assert look["looks"] == 1 and guard.looks == [look]

    def test_a_repetition_is_no_new_look_on_a_warm_cache_or_in_another_folder(self, garden: Study):
        run(found(garden), garden)
        first = bodies("look")
        again = run(found(garden), garden)
        assert kinds()[4:] == ["look"]
        assert bodies("look")[1] == {"key": first[0]["key"], "again": True}
        assert again.looks == first
        shutil.move("work", "old")
        graph = found(garden)
        graph.get_node("test").inputs.release = "the next one"
        assert run(graph, garden, processes=2).looks == first

    def test_another_seed_rule_or_map_is_a_new_look_and_counts(self, garden: Study):
        run(found(garden), garden)
        assert [look["looks"] for look in run(found(garden, seed=1), garden).looks] == [2]
        assert [look["looks"] for look in run(found(garden, k=21), garden).looks] == [3]
        # A look elsewhere is none at these voxels.
        assert [
            look["looks"] for look in run(given(garden, garden.root / "plot.nii"), garden).looks
        ] == [1]

    def test_values_that_no_statistic_takes_were_looked_at(self, garden: Study):
        graph = workflow("values")
        mask = str(garden.root / "plot.nii")
        read = Node(
            Extract(in_files=paths_of(garden), labels=SUBS, mask_files=[mask]), name="extract"
        )
        graph.add_nodes([read])
        (look,) = run(graph, garden).looks
        assert (look["node"], look["statistic"]) == ("values.extract", "")
        # Everybody by an iterable is one look too: the nodes are one in the script.
        graph = workflow("each")
        read = Node(Extract(mask_files=[mask], labels=["somebody"]), name="extract")
        read.iterables = ("in_files", [[path] for path in paths_of(garden)])
        graph.add_nodes([read])
        (look,) = run(graph, garden).looks
        assert (look["node"], look["tested"], look["looks"]) == ("each.extract", {"all_but": []}, 2)

    def test_everybody_apart_by_map_and_join_nodes_is_the_same_look(self, garden: Study):
        """Whichever way the lists are wired: what was read where counts."""
        mask = str(garden.root / "plot.nii")
        (whole,) = run(given(garden, garden.root / "plot.nii"), garden).looks
        graph = workflow("mapped")
        read = MapNode(Extract(mask_files=[mask]), iterfield=["in_files", "labels"], name="extract")
        read.inputs.in_files = [[path] for path in paths_of(garden)]
        read.inputs.labels = [[sub] for sub in SUBS]
        flat = MapNode(Function(["a"], ["out"], first), iterfield=["a"], name="flat")
        contract(flat, rules={"out": each("a")})
        graph.connect(read, "values", flat, "a")
        t_tested(graph, flat)
        joined = workflow("joined")
        who = Node(IdentityInterface(["path"]), name="who")
        who.iterables = ("path", paths_of(garden))
        pick = JoinNode(
            Extract(mask_files=[mask], labels=SUBS),
            joinsource="who",
            joinfield="in_files",
            name="extract",
        )
        joined.connect(who, "path", pick, "in_files")
        t_test(joined, pick)
        looks = [run(made, garden).looks[0] for made in (graph, joined)]
        for look in looks:
            assert {n: look[n] for n in ("where", "tested", "masks", "maps", "contrast")} == {
                n: whole[n] for n in ("where", "tested", "masks", "maps", "contrast")
            }
        assert looks[1]["key"] == whole["key"] and looks[0]["looks"] == 2

    def test_a_contract_is_written_down_with_the_geometry_it_states(self, garden: Study):
        graph = given(garden, garden.root / "plot.nii")
        smooth = Node(Function(["files", "grid"], ["out"], same), name="smooth")
        smooth.inputs.files, smooth.inputs.grid = paths_of(garden), paths_of(garden)[0]
        contract(smooth, rules={"out": each("files")}, geometry=["grid"])
        graph.connect(smooth, "out", graph.get_node("extract"), "in_files")
        says = "rules for out; geometry only: grid"
        for _ in range(2):  # said once
            guard = run(graph, garden)
            (waiver,) = bodies("waiver")
            assert waiver == {"node": "given.smooth", "field": "contract", "says": says}
        assert [w["says"] for w in record_of(guard)["waivers"]] == [says]

    def test_claims_biased_values_and_rules_of_their_own_are_written_down(self, garden: Study):
        graph = workflow("waived")
        choose = Node(
            ChooseByFold(in_files=paths_of(garden), labels=SUBS, procedure=PROCEDURE), name="choose"
        )
        read = Node(Own(in_files=paths_of(garden), labels=SUBS[1:] + SUBS[:1]), name="extract")
        read.inputs.exploratory = read.inputs.these_subjects = True
        graph.connect(choose, "row_masks", read, "mask_files")
        run(graph, garden)
        assert {(w["field"], w["node"]) for w in bodies("waiver")} == {
            (field, "waived.extract") for field in ("claim", "biased", "rules")
        }

    def test_extractions_and_tests_of_others_are_looks_too(self, garden: Study):
        graph = workflow("foreign")
        read = Node(Function(["mask", "files"], ["out"], means), name="means")
        read.inputs.mask, read.inputs.files = str(garden.root / "plot.nii"), paths_of(garden)
        contract(read, extraction=Meeting(mask="mask", data="files"))
        test = Node(Function(["values"], ["t"], t_of), name="t")
        contract(test, statistic=Statistic(values="values"))
        graph.connect(read, "out", test, "values")
        guard = run(graph, garden)
        (look,) = guard.looks
        assert (look["node"], look["tested"]) == ("foreign.t", {"all_but": []})
        # The same voxels in the same data as a look with a node of ours.
        (other,) = run(given(garden, garden.root / "plot.nii"), garden).looks
        assert (other["where"], other["maps"], other["looks"]) == (look["where"], look["maps"], 2)


class TestRegionsFromOutside:
    @pytest.mark.parametrize("how", ["copied", "linked", "saved again", "cropped"])
    def test_a_mask_that_a_first_workflow_found_is_no_region_for_a_second(
        self, garden: Study, how: str
    ):
        run(found(garden), garden)
        mask = fold_mask()
        data = np.asarray(mask.dataobj)
        if how == "cropped":
            mask = mask.slicer[1:-1, 1:, :-1]
        elif how == "saved again":
            mask = nib.Nifti1Image(data[::-1].astype(np.float32), turned(mask.affine, len(data)))
        study, path = with_region(garden, "mine.nii.gz", np.asarray(mask.dataobj), mask.affine)
        if how == "linked":
            path = path.rename("mine.nii.gz").absolute()
            (study.root / "mine.nii.gz").symlink_to(path)
            study = replace(study)
        size = ledger().path.stat().st_size
        with pytest.raises(GuardRefused, match="or a run has recorded") as caught:
            run(given(study, path), study)
        assert not caught.value.started and not Path("work/given/extract").exists()
        leaks = [f for f in caught.value.findings if f.node == "given.extract"]
        # All but the third were there when that mask was chosen.
        assert [f.item for f in leaks] == [i for i in range(len(SUBS)) if i != 2]
        assert ledger().path.stat().st_size == size

    def test_a_region_that_was_stated_first_and_then_found_has_succeeded(self, garden: Study):
        run(found(garden), garden)
        mask = np.asarray(fold_mask().dataobj)
        shutil.rmtree("work")
        ledger().path.unlink()
        study, path = with_region(garden, "mine.nii.gz", mask)
        run(given(study, path), study)
        run(found(study), study)
        guard = run(given(study, path), study)
        assert all(f.allowed for f in guard.findings)
        # It would not have, had nobody stated it before.
        ledger().path.unlink()
        run(found(garden), garden)
        with pytest.raises(GuardRefused, match="or a run has recorded"):
            run(given(study, path), study)

    def test_a_sphere_near_a_found_region_is_unproven_until_it_is_explained(self, garden: Study):
        run(found(garden), garden)
        study = Study(garden.root, garden.rows, [*garden.origins, Origin("a letter")])
        near = tuple(float(x) for x in (AFFINE @ [3, 3, 3, 1])[:3])
        with pytest.raises(GuardRefused, match=r"is like a mask\sthat was chosen on") as caught:
            run(sphere(study, near), study)
        assert {f.verdict for f in caught.value.findings if not f.allowed} >= {"unproven"}
        said = " ".join(str(caught.value).split())
        assert f"--centre {' '.join(f'{x:g}' for x in near)} --radius 4 --source" in said
        assert "--study TABLE --ledger own.ledger.jsonl" in said
        table = garden.root / "table.tsv"
        table.write_text(
            "path\tsub\tsuffix\n" + "".join(f"{r.path}\t{r.unit.sub}\tbold\n" for r in garden.rows)
        )
        call = ["declare", "--centre", *map(str, near), "--radius", "4", "--source", "a letter"]
        call += ["--explained", "it is older", "--study", str(table)]
        told = CliRunner().invoke(main, [*call, "--ledger", str(ledger().path)])
        assert told.exit_code == 0, told.output
        run(sphere(study, near), study)

    @pytest.mark.parametrize("searched", [False, True], ids=["read", "searched"])
    def test_the_label_of_an_atlas_counts_and_not_its_neighbours(
        self, garden: Study, searched: bool
    ):
        """Known as soon as the label is a mask: before it is read, or searched for another."""
        run(found(garden), garden)
        atlas = np.where(np.asarray(fold_mask().dataobj) != 0, 3, 0).astype(np.int16)
        atlas[8] = 4
        study, path = with_region(garden, "garden_dseg.nii.gz", atlas)

        def through(label: int) -> Workflow:
            graph = found(study, f"label{label}", k=5) if searched else workflow(f"label{label}")
            mask = Node(
                LabelMask(in_file=str(path), labels=[label], reference=paths_of(study)[0]),
                name="label",
            )
            if searched:
                for name in ("choose", "test"):
                    graph.connect(mask, "mask_file", graph.get_node(name), "search_file")
            else:
                read = Node(Extract(in_files=paths_of(study), labels=SUBS), name="extract")
                graph.connect(mask, "mask_file", read, "mask_files")
                t_test(graph, read)
            return graph

        with pytest.raises(GuardRefused, match="a run has recorded") as caught:
            run(through(3), study)
        assert caught.value.started and caught.value.findings[0].verdict == "leak"
        assert not results_of("label3", "extract")
        assert all(f.allowed for f in run(through(4), study).findings)
        assert bodies("declaration")[-1]["files"][0]["path"] == "garden_dseg.nii.gz"

    def test_labels_that_are_read_one_by_one_are_known_before_anything_runs(self, garden: Study):
        run(found(garden), garden)
        first = np.asarray(fold_mask().dataobj) != 0
        study, path = with_region(garden, "garden_dseg.nii.gz", first.astype(np.int16))
        atlas = first * np.int16(3)
        atlas[8] = 4
        nib.save(nib.Nifti1Image(atlas, AFFINE), path)
        with pytest.raises(GuardRefused, match="a run has recorded") as caught:
            run(parcels(study, path), study)
        assert not caught.value.started
        # A table of values is known by its content, wherever the engine works.
        study, path = with_region(garden, "plot_dseg.nii.gz", (atlas == 4) * np.int16(4))
        one = run(parcels(study, path), study).looks
        assert run(parcels(study, path, "elsewhere"), study).looks == one

    @pytest.mark.parametrize("how", ["mapped", "joined"])
    def test_spheres_in_a_list_are_looked_at_one_by_one(self, garden: Study, how: str):
        run(found(garden), garden)
        study = Study(garden.root, garden.rows, [*garden.origins, Origin("a letter")])
        # All but one of them in the far corner.
        centres = [tuple(map(float, (AFFINE @ [8, 7, 6 - i / 9, 1])[:3])) for i in range(7)]
        near = tuple(map(float, (AFFINE @ [3, 3, 3, 1])[:3]))

        def balls(name: str, centres: list[Any]) -> Workflow:
            graph = workflow(name)
            ball = SphereMask(reference=paths_of(study)[0], radius=4.0, origin="a letter")
            read = Extract(in_files=paths_of(study), labels=SUBS)
            if how == "mapped":
                made: Node = MapNode(ball, iterfield=["centre"], name="spheres")
                made.inputs.centre = centres
                node: Node = Node(read, name="extract")
            else:
                made = Node(ball, name="spheres")
                made.iterables = ("centre", centres)
                node = JoinNode(read, joinsource="spheres", joinfield="mask_files", name="extract")
            graph.connect(made, "mask_file", node, "mask_files")
            return graph

        with pytest.raises(GuardRefused, match=r"is like a mask\s+that was chosen") as caught:
            run(balls("near", [*centres[:6], near]), study)
        assert not results_of("near", "extract")
        assert "spheres" in str(caught.value) or "sphere at" in str(caught.value)
        assert run(balls("far", centres), study).looks[0]["tested"] == {"all_but": []}

    def test_a_sphere_elsewhere_is_let_pass_and_said_to_be_declared_late(self, garden: Study):
        run(found(garden), garden)
        study = Study(garden.root, garden.rows, [*garden.origins, Origin("a letter")])
        far = tuple(float(x) for x in (AFFINE @ [8, 7, 6, 1])[:3])
        for _ in range(2):
            (look,) = run(sphere(study, far), study).looks
            assert look["notes"] == ["The region was declared after 1 look at these data."]
        declared = bodies("declaration")[1:]
        assert [d["sources"] for d in declared] == [["a letter"], ["a letter"]]


def test_a_number_makes_another_look_down_to_its_tenth_digit():
    assert _said({"p": [0.05]}) != _said({"p": [0.05001]})
    assert _said({"p": [0.1 + 0.2]}) == _said({"p": [0.3]})  # another machine's last digit


class TestNothingIsWritten:
    def test_by_a_refused_run(self, garden: Study):
        study, path = with_region(garden, "mine.nii.gz", np.ones(SHAPE, np.uint8))
        undeclared = Study(study.root, study.rows)
        with pytest.raises(GuardRefused, match=r"unproven: .*mine\.nii\.gz"):
            run(given(undeclared, path), undeclared)
        assert not ledger().path.exists()

    def test_by_a_run_that_fails_at_its_last_node(self, garden: Study):
        graph = found(garden)
        graph.get_node("test").inputs.n_flips = 0
        with pytest.raises(Exception, match="flips"):
            run(graph, garden)
        assert not ledger().path.exists()

    def test_by_a_dry_run_which_reads(self, garden: Study):
        run(found(garden), garden)
        study, path = with_region(garden, "mine.nii.gz", np.asarray(fold_mask().dataobj))
        size = ledger().path.stat().st_size
        with pytest.raises(GuardRefused, match="or a run has recorded"):
            run(given(study, path), study, dry=True)
        run(given(garden, garden.root / "plot.nii"), garden, dry=True)
        assert ledger().path.stat().st_size == size

    def test_to_a_changed_ledger_or_a_locked_folder_and_nothing_ran(
        self, garden: Study, monkeypatch: pytest.MonkeyPatch
    ):
        run(found(garden), garden)
        shutil.rmtree("work")
        whole = ledger().path.read_bytes()
        ledger().path.write_bytes(whole.replace(b"1909", b"1910"))
        with pytest.raises(InputError, match="the ledger was changed"):
            run(found(garden), garden)
        ledger().path.write_bytes(whole)
        monkeypatch.setattr("os.access", lambda path, mode: False)
        with pytest.raises(InputError, match="the ledger cannot be written"):
            run(found(garden), garden)
        assert not Path("work/found/choose").exists() and ledger().path.read_bytes() == whole


def test_check_reads_the_ledger_and_writes_nothing(garden: Study, tmp_path: Path):
    run(found(garden), garden)
    study, path = with_region(garden, "mine.nii.gz", np.asarray(fold_mask().dataobj))
    lines = "".join(f"{row.path}\t{row.unit.sub}\tbold\n" for row in study.rows)
    (study.root / "table.tsv").write_text(f"path\tsub\tsuffix\n{lines}")
    origins = '[[origin]]\nsource = "a map in the hut"\nfiles = ["mine.nii.gz"]\n'
    (study.root / "origins.toml").write_text(origins)
    Path("script.py").write_text(
        "from nipype import Node, Workflow\n"
        "from sequester.nodes.interfaces import Extract\n"
        "def build():\n"
        "    graph = Workflow('w')\n"
        f"    maps, labels, mask = {paths_of(study)!r}, {SUBS!r}, {str(path)!r}\n"
        "    read = Extract(in_files=maps, labels=labels, mask_files=mask)\n"
        "    graph.add_nodes([Node(read, name='extract')])\n"
        "    return graph\n"
    )
    call = ["check", "script.py:build", "--study", str(study.root / "table.tsv")]
    call += ["--origins", str(study.root / "origins.toml")]
    size = ledger().path.stat().st_size
    assert CliRunner().invoke(main, call).exit_code == 0
    told = CliRunner().invoke(main, [*call, "--ledger", str(ledger().path), "--json"])
    assert told.exit_code == 3
    assert "a run has recorded" in json.loads(told.stdout)["error"]
    assert ledger().path.stat().st_size == size
    told = CliRunner().invoke(main, [*call, "--ledger", "none.ledger.jsonl"])
    assert told.exit_code == 2 and "no such ledger" in told.output


# -- what stands in for the programs of others ------------------------------------------------


class Own(Extract):
    """Somebody's subclass, with rules of its own."""

    touch_rules: ClassVar = dict(Extract.touch_rules)


def turned(affine: Any, n: int) -> Any:
    return affine @ np.array([[-1, 0, 0, n - 1], [0, 1, 0, 0], [0, 0, 1, 0], [0, 0, 0, 1]])


def t_tested(graph: Workflow, values: Node) -> None:
    test = Node(Function(["values"], ["t"], t_of), name="t")
    contract(test, statistic=Statistic(values="values"))
    graph.connect(values, "out", test, "values")


def first(a):
    return a[0] if isinstance(a, list) else a


def same(files, grid):
    return files


def means(mask, files):
    import nibabel as nib

    inside = nib.load(mask).get_fdata() != 0
    return [float(nib.load(path).get_fdata()[inside].mean()) for path in files]


def t_of(values):
    import numpy as np

    return float(np.mean(values) / np.std(values))
