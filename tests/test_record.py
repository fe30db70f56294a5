"""The record of a run: complete, the same each time, readable as W3C PROV, and small."""

from __future__ import annotations

import csv
import hashlib
import json
import os
import shutil
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import prov
import pytest
import running
from nipype import Function, Node, Workflow
from planting import a_grid, paths_of, plant
from prov.model import PROV, ProvDocument
from sequester import GuardPlugin, Procedure, leave_one_subject_out, read_settings, run_study
from sequester.nodes.errors import InputError
from sequester.nodes.folds import LeaveOneOut
from sequester.nodes.interfaces import ChooseMask, Extract, GroupMap, KeepSubjects
from sequester.nodes.interfaces.contracts import contract
from sequester.nodes.masks import Strongest, Threshold
from sequester.nodes.rules import each, leaves
from sequester.nodes.subjects import Keep
from sequester.nodes.touch import Unit
from sequester.workflows import plans
from sequester.workflows.around import around_folds
from sequester.workflows.guard import GuardRefused
from sequester.workflows.record import record_of, write_record
from sequester.workflows.study import Origin, Study

GRID = a_grid((5, 5, 5))
FILES = ("record.json", "record.tsv", "record_prov.json")
NAMESPACE = "urn:sequester:record:"
PROCEDURE = Procedure(Strongest(9, "mean"))


pytestmark = pytest.mark.usefixtures("quiet_engine")


def planted(root: Path, n: int) -> Study:
    """n subjects with an effect map each, and an atlas of declared origin."""
    seeded = [np.random.default_rng(i).normal(0.8, 1, GRID.shape) for i in range(n)]
    return plant(
        root,
        {f"{i:03d}": data.astype(np.float32) for i, data in enumerate(seeded)},
        GRID,
        {"atlas": np.random.default_rng(99).random(GRID.shape) < 0.2},
        [Origin("an atlas of 1909", ("atlas.nii",))],
    )


def labels(study: Study) -> list[str]:
    return [row.unit.sub for row in study.rows]


def workflow(plan: Workflow | None = None, study: Study | None = None) -> Workflow:
    made = running.workflow("garden", remove_unnecessary_outputs="false")
    if plan is not None and study is not None:
        made.add_nodes([plan])
        plan.get_node("inputnode").inputs.effects = paths_of(study)
    return made


def one_left_out(study: Study) -> Workflow:
    return workflow(leave_one_subject_out("arbor", PROCEDURE, labels(study), n_flips=9), study)


def recorded(graph: Workflow, study: Study, folder: str = "record") -> tuple[Any, GuardPlugin]:
    guard = GuardPlugin(study)
    graph.run(plugin=guard)
    Path(folder).mkdir()
    write_record(folder, guard)
    return json.loads(Path(folder, "record.json").read_text()), guard


def bits(encoding: dict[str, list[int]], n: int) -> int:
    ((how, rows),) = encoding.items()
    listed = sum(1 << row for row in rows)
    return listed if how == "units" else (1 << n) - 1 & ~listed


def test_every_element_has_its_touch_and_the_digest_of_its_file(tmp_path):
    study = planted(tmp_path / "study", 6)
    record, guard = recorded(one_left_out(study), study)
    assert record["units"] == [f"sub-{sub}_bold" for sub in labels(study)]
    assert record["people"] == labels(study)
    names = [node["name"] for node in record["nodes"]]
    assert {n["name"]: (n["interface"], n["kind"]) for n in record["nodes"]} == {
        "garden.arbor.choose": ("ChooseByFold", "own"),
        "garden.arbor.extract": ("Extract", "extraction"),
        "garden.arbor.test": ("FlipTest", "statistic"),
    }
    assert ["garden.arbor.choose", "row_masks", "garden.arbor.extract", "mask_files"] in record[
        "edges"
    ]
    assert all(names.index(s) < names.index(t) for s, _, t, _ in record["edges"])
    made = {(e["node"], e["output"], *e["index"]): e for e in record["elements"]}
    assert len(made) == len(record["elements"])
    for (name, output), tree in guard.ancestry.outputs.items():
        for i, leaf in enumerate(leaves(tree)):
            at = (name, output, *([i] if (name, output, i) in made else []))
            if at in made:
                for role in ("values", "geometry"):
                    assert bits(made[at][role], 6) == getattr(leaf.touch, role)
    node = next(n for n in guard.ancestry.nodes if n.name == "choose")
    for i, path in enumerate(node.result.outputs.row_masks):
        known = hashlib.sha256(Path(path).read_bytes()).hexdigest()
        assert made["garden.arbor.choose", "row_masks", i]["sha256"] == known
        assert made["garden.arbor.choose", "row_masks", i]["values"] == {"all_but": [i]}
    assert made["garden.arbor.extract", "values", 0]["sha256"] is None


def test_verdicts_name_region_and_fold(tmp_path):
    study = planted(tmp_path / "study", 6)
    record, guard = recorded(one_left_out(study), study)
    assert len(record["meetings"]) == len(guard.findings) == 7
    for i, meeting in enumerate(record["meetings"][:6]):
        assert (meeting["item"], meeting["roi"], meeting["fold"]) == (i, "arbor", f"00{i}")
        assert (meeting["verdict"], meeting["level"]) == ("apart", "subject")
        assert (meeting["mask"], meeting["data"]) == ({"all_but": [i]}, {"units": [i]})
    assert record["meetings"][6]["kind"] == "statistic"
    with Path("record/record.tsv").open() as stream:
        rows = list(csv.DictReader(stream, delimiter="\t"))
    assert len(rows) == len(record["elements"])
    (third,) = [r for r in rows if (r["output"], r["element"]) == ("row_masks", "2")]
    assert third["values"] == "all but sub-002_bold"
    (value,) = [r for r in rows if (r["output"], r["element"]) == ("values", "2")]
    assert (value["values"], value["verdict"], value["level"]) == ("all", "apart", "subject")


def test_folds_are_named_in_every_plan_that_has_them(tmp_path):
    people, runs = ["a", "a", "b", "b", "c", "c"], ["1", "2"] * 3
    rows = [
        replace(row, unit=Unit(sub=sub, run=run, suffix="bold"))
        for row, sub, run in zip(planted(tmp_path / "study", 6).rows, people, runs, strict=True)
    ]
    study = Study(tmp_path / "study", rows)
    group = Function(["in_files"], ["out_file"], mean_of)
    around = around_folds("brook", group, "in_files", "out_file", Threshold(height=0.5), people)
    over_runs = replace(PROCEDURE, scheme=LeaveOneOut(2))
    own = plans.own_masks("cinder", over_runs, people, runs)
    graph = workflow(around, study)
    graph.add_nodes([own])
    own.get_node("inputnode").inputs.effects = paths_of(study)
    guard = GuardPlugin(study, dry=True)
    graph.run(plugin=guard)
    met = [m for m in record_of(guard)["meetings"] if m["kind"] == "extraction"]
    folds = {roi: [m["fold"] for m in met if m["roi"] == roi] for roi in ("brook", "cinder")}
    assert folds["brook"] == people
    read = workflow(around, study)  # without the runs of the same people, whose test is refused
    record, _ = recorded(read, study)
    of_group = [e for e in record["elements"] if e["node"] == "garden.brook.group"]
    assert [e["index"] for e in of_group] == [[0], [1], [2]] and all(e["sha256"] for e in of_group)
    assert folds["cinder"] == ["a 1", "a 2", "b 1", "b 2", "c 1", "c 2"]


def mean_of(in_files):
    from pathlib import Path

    import nibabel as nib
    import numpy as np

    data = np.mean([nib.load(path).get_fdata() for path in in_files], axis=0)
    out = Path("mean.nii").absolute()
    nib.Nifti1Image(data.astype(np.float32), nib.load(in_files[0]).affine).to_filename(out)
    return str(out)


def test_a_list_of_unknown_length_is_recorded_item_by_item(tmp_path):
    def copies(in_files, names):
        import shutil
        from pathlib import Path

        return [
            shutil.copy(path, Path(name).absolute())
            for path, name in zip(in_files, names, strict=True)
        ]

    study = planted(tmp_path / "study", 3)
    made = Node(Function(["in_files", "names"], ["out"], copies), name="copies")
    made.inputs.in_files, made.inputs.names = paths_of(study), ["a.nii", "b.nii", "c.nii"]
    graph = workflow()
    graph.add_nodes([made])
    record, _ = recorded(graph, study)
    assert [e["index"] for e in record["elements"]] == [[0], [1], [2]]
    for element, path in zip(record["elements"], paths_of(study), strict=True):
        assert element["values"] == {"all_but": []}  # which copy is whose, the guard cannot know
        assert element["sha256"] == hashlib.sha256(Path(path).read_bytes()).hexdigest()


def test_a_refused_run_has_a_record_without_digests_and_without_this_machine(tmp_path):
    study = planted(tmp_path / "study", 5)
    elsewhere = tmp_path / "my files"
    elsewhere.mkdir()
    shutil.copy(study.root / "atlas.nii", elsewhere / "some mask.nii")
    os.utime(elsewhere / "some mask.nii")
    graph = workflow()
    group = Node(GroupMap(in_files=paths_of(study)), name="group")
    choose = Node(ChooseMask(rule=Strongest(9)), name="choose")
    read = Node(Extract(in_files=paths_of(study), labels=labels(study)), name="extract")
    graph.connect(group, "out_file", choose, "in_file")
    graph.connect(choose, "mask_file", read, "mask_files")
    other = Node(Extract(in_files=paths_of(study), labels=labels(study)), name="other")
    other.inputs.mask_files = [str(elsewhere / "some mask.nii")]
    graph.add_nodes([other])
    with pytest.raises(GuardRefused) as refused:
        graph.run(plugin=GuardPlugin(study))
    write_record(tmp_path, refused.value)
    text = "".join((tmp_path / name).read_text() for name in FILES)
    assert str(tmp_path) not in text
    record = json.loads((tmp_path / "record.json").read_text())
    leaks = [m for m in record["meetings"] if m["verdict"] == "leak"]
    assert leaks[1]["mask_path"] == [
        "sub-001.nii", "garden.group.out_file", "garden.choose.mask_file",
    ]  # fmt: skip
    (reason,) = {m["reason"] for m in record["meetings"] if m["verdict"] == "unproven"}
    assert reason == "nobody has declared what .../some mask.nii derives from"
    assert {e["sha256"] for e in record["elements"]} == {None}
    assert [".../some mask.nii"] in [e["unknown"] for e in record["elements"]]


def test_who_decided_that_an_element_is_there_and_who_answers_for_it_is_recorded(tmp_path):
    study = planted(tmp_path / "study", 4)
    graph = workflow()
    measure = Node(Function(["in_files", "grid"], ["out"], each_mean), name="measure")
    measure.inputs.in_files, measure.inputs.grid = paths_of(study), str(study.root / "atlas.nii")
    contract(measure, rules={"out": each("in_files")}, geometry=["grid"])
    keep = Node(
        KeepSubjects(in_files=paths_of(study), labels=labels(study), keep=Keep(at_least=-9)), "keep"
    )
    graph.connect(measure, "out", keep, "measures")
    record, _ = recorded(graph, study)
    kept = [e for e in record["elements"] if e["output"] == "out_files"]
    assert [e["selected"] for e in kept] == [{"all_but": []}] * 4
    assert all("selected" not in e for e in record["elements"] if e["node"] == "garden.measure")
    with Path("record/record.tsv").open() as stream:
        rows = list(csv.DictReader(stream, delimiter="\t"))
    assert {r["output"]: r["selected"] for r in rows} == {
        "out": "n/a", "out_files": "all", "out_labels": "all", "record_file": "n/a",
    }  # fmt: skip
    says = "rules for out; geometry only: grid"
    assert {r["output"]: r["waived"] for r in rows} == {
        "out": f"contract: {says}", "out_files": "n/a", "out_labels": "n/a", "record_file": "n/a",
    }  # fmt: skip
    document = prov.read("record/record_prov.json", format="json")
    roles = [role for made in derived_from(document).values() for _, role in made]
    assert roles.count("selected") == len(kept) + sum(r["output"] == "out_labels" for r in rows)
    assert record["waivers"] == [
        {
            "node": "garden.measure",
            "field": "contract",
            "says": "rules for out; geometry only: grid",
            "reason": None,
        }
    ]


def each_mean(in_files, grid):
    import nibabel as nib

    return [float(nib.load(path).get_fdata().mean()) for path in in_files]


def test_nothing_judged_is_nothing_to_record(tmp_path):
    with pytest.raises(InputError, match="nothing to record"):
        write_record(tmp_path, GuardPlugin(Study(tmp_path, [])))
    assert not list(tmp_path.iterdir())


# -- W3C PROV ---------------------------------------------------------------------------------


def attribute(record: Any, name: str) -> set[Any]:
    return {value for key, value in record.attributes if key.uri == NAMESPACE + name}


def units_of(document: ProvDocument, entity: Any) -> set[str]:
    """The units that an entity stands for, from the document alone."""
    (record,) = document.get_record(entity)
    if PROV["Collection"] not in record.get_asserted_types():
        return {entity.localpart}
    members = {
        m.localpart
        for relation in document.get_records(prov.model.ProvMembership)
        for whole, m in [[value for _, value in relation.formal_attributes]]
        if whole == entity
    }
    if members:
        return members
    (everything,) = [s for s, role in derived_from(document)[entity] if role == "set"]
    return units_of(document, everything) - {n.localpart for n in attribute(record, "allBut")}


def derived_from(document: ProvDocument) -> dict[Any, list[tuple[Any, str]]]:
    found: dict[Any, list[tuple[Any, str]]] = {}
    for relation in document.get_records(prov.model.ProvDerivation):
        (made, source) = [value for _, value in relation.formal_attributes][:2]
        (role,) = attribute(relation, "role")
        found.setdefault(made, []).append((source, role))
    return found


def test_the_prov_document_says_the_same_as_the_record(tmp_path):
    study = planted(tmp_path / "study", 6)
    record, _ = recorded(one_left_out(study), study)
    document = prov.read("record/record_prov.json", format="json")
    assert document == ProvDocument.deserialize(content=document.serialize(format="json"))
    sources = derived_from(document)
    named = document.valid_qualified_name
    for i, element in enumerate(record["elements"]):
        entity = named(f"s:element{i}")
        for role in ("values", "geometry"):
            told = {
                unit
                for source, as_what in sources.get(entity, [])
                if as_what == role
                for unit in units_of(document, source)
            }
            assert told == {f"unit{k}" for k in range(6) if bits(element[role], 6) >> k & 1}
        (entry,) = document.get_record(entity)
        assert attribute(entry, "sha256") == ({element["sha256"]} - {None})
    labels_of = {
        record_.identifier: record_.label
        for kind in (prov.model.ProvEntity, prov.model.ProvActivity)
        for record_ in document.get_records(kind)
    }
    used = {
        (labels_of[activity], labels_of[entity])
        for relation in document.get_records(prov.model.ProvUsage)
        for activity, entity in [[v for _, v in relation.formal_attributes][:2]]
    }
    assert ("garden.arbor.extract", "garden.arbor.choose.row_masks[4]") in used
    made = {
        (labels_of[entity], labels_of[activity])
        for relation in document.get_records(prov.model.ProvGeneration)
        for entity, activity in [[v for _, v in relation.formal_attributes][:2]]
    }
    assert ("garden.arbor.choose.row_masks[4]", "garden.arbor.choose") in made
    assert len(made) == len(record["elements"])


def test_leaving_each_of_300_out_stays_small(tmp_path):
    study = planted(tmp_path / "study", 300)
    graph = one_left_out(study)
    record, _ = recorded(graph, study)
    document = prov.read("record/record_prov.json", format="json")
    masks = [
        (i, e) for i, e in enumerate(record["elements"]) if e["output"] in ("row_masks", "values")
    ]
    sources, named = derived_from(document), document.valid_qualified_name
    i, element = masks[7]
    assert element["values"] == {"all_but": [7]}
    (of_it,) = [s for s, role in sources[named(f"s:element{i}")] if role == "values"]
    assert units_of(document, of_it) == {f"unit{k}" for k in range(300) if k != 7}
    sizes = {name: Path("record", name).stat().st_size for name in FILES}
    assert sizes["record_prov.json"] < 2_000_000, sizes
    assert sum(sizes.values()) < 3_000_000, sizes


# -- in the results folder of a study ---------------------------------------------------------

STUDY = """[study]
name = "garden"
table = "table.tsv"
[[roi]]
name = "Arbor"
plan = "leave-one-subject-out"
rule = { kind = "strongest", k = 9 }
flips = 9
[[roi]]
name = "ArborLook"
plan = "exploratory"
rule = { kind = "strongest", k = 9 }
"""


def settled(root: Path) -> Path:
    planted(root, 5)
    (root / "STUDY.toml").write_text(STUDY)
    return root / "STUDY.toml"


def test_a_study_leaves_the_same_record_wherever_and_however_it_runs(tmp_path):
    here, there = settled(tmp_path / "here"), settled(tmp_path / "there")
    settings = read_settings(here)
    run_study(settings)
    first = {name: (settings.output / name).read_bytes() for name in FILES}
    assert all(str(tmp_path).encode() not in blob for blob in first.values())
    for more in ({"work": tmp_path / "warm"}, {"work": tmp_path / "warm"}, {"processes": 2}):
        run_study(settings, **more)
        for name in FILES:
            assert (settings.output / name).read_bytes() == first[name], (name, more)
    other = read_settings(there)
    run_study(other)
    assert {name: (other.output / name).read_bytes() for name in FILES} == first
    record = json.loads(first["record.json"])
    digests = {
        e["sha256"]
        for e in record["elements"]
        if (e["node"], e["output"]) == ("garden.Arbor.choose", "mask_files")
    }
    written = (settings.output / "masks").glob("label-Arbor_desc-without*_mask.nii.gz")
    assert digests == {hashlib.sha256(path.read_bytes()).hexdigest() for path in written}
    assert len(digests) > 1
    looked = [e for e in record["elements"] if e["node"] == "garden.ArborLook.extract"]
    assert {e["biased"] for e in looked if e["output"] == "values"} == {True}
    manifest = json.loads((settings.output / "manifest.json").read_text())
    assert set(FILES) <= set(manifest["outputs"])
