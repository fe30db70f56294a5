"""Who takes part by a column of the study table: a choice, with what it was made by."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from gallery_studies import HEAD, planted
from nipype import Node, Workflow
from sequester import read_settings, read_table
from sequester.nodes.errors import InputError
from sequester.nodes.folds import KFold
from sequester.nodes.interfaces import FoldLists, LeaveOutMaps
from sequester.workflows.build import study_workflow
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.ledger import Chain
from sequester.workflows.origins import declarations
from sequester.workflows.run import check_study, run_study

SUBS = [f"{i:02}" for i in range(1, 8)]
SKILL = dict(zip(SUBS, ["5", "7", "7", "8", "9", "6", "2"], strict=True))
AGE = dict(zip(SUBS, ["31", "44", "28", "57", "39", "22", "63"], strict=True))
BANK = dict(zip(SUBS, ["hill", "pond", "hill", "pond", "hill", "pond", "wood"], strict=True))
MOTION = dict(zip(SUBS, ["0.1", "0.2", "0.3", "0.1", "0.2", "0.4", "0.9"], strict=True))
ABLE = 'skill = ["5", "6", "7", "8", "9"]'  # all but gardener 07
STILL = 'motion = ["0.1", "0.2", "0.3", "0.4"]'
FOLDED = """
[[roi]]
name = "Arbor"
plan = "k-fold"
folds = 3
flips = 9
rule = { kind = "strongest", k = 20 }
"""

pytestmark = pytest.mark.usefixtures("quiet_engine")


@pytest.fixture
def garden(tmp_path: Path) -> Path:
    """Seven gardeners with four columns, one of them in no group that is compared."""
    root = tmp_path / "garden"
    shutil.copytree(planted(), root)
    rows = ["path\tsub\tsuffix\texclude_reason\tskill\tage\tbank\tmotion"]
    for sub in SUBS:
        told = (SKILL[sub], AGE[sub], BANK[sub], MOTION[sub])
        rows.append("\t".join((f"sub-{sub}.nii.gz", sub, "bold", "n/a", *told)))
    (root / "table.tsv").write_text("\n".join(rows) + "\n")
    return root


def said(root: Path, data: str, roi: str) -> str:
    """What is said when the study is refused."""
    (root / "STUDY.toml").write_text(f"{HEAD}\n[data]\n{data}\n{FOLDED}{roi}\n")
    try:
        check_study(read_settings(root / "STUDY.toml"))
    except GuardRefused as refused:
        return " ".join(str(refused).split())
    return ""


def test_who_was_selected_by_a_score_is_not_compared_with_it(garden: Path):
    told = said(garden, f"select = {{ {ABLE} }}", 'score = "skill"')
    assert "kept or left out by skill, in the data or where the region was chosen" in told
    assert "shared sub-01_skill, sub-02_skill and 4 more" in told
    assert "garden.maps.kept_by" in told
    assert said(garden, f"select = {{ {ABLE} }}", 'score = "age"') == ""
    assert said(garden, 'select = { suffix = "bold" }', 'score = "skill"') == ""


def test_a_region_of_its_own_that_selects_by_a_score_counts_too(garden: Path):
    own = f'score = "skill"\nselect = {{ {ABLE} }}'
    assert "kept or left out by skill" in said(garden, "", own)


def test_so_does_a_score_that_is_a_covariate_unless_it_is_one_of_quality(garden: Path):
    model = 'score = "age"\ncovariates = ["motion"]'
    select = f"select = {{ {STILL} }}"
    assert "kept or left out by motion" in said(garden, select, model)
    assert said(garden, f'{select}\nquality = ["motion"]', model) == ""


def test_both_groups_of_a_comparison_are_the_question_itself(garden: Path):
    groups = 'compare = { column = "bank", first = "hill", second = "pond" }\nstratify = "bank"'
    assert said(garden, 'select = { bank = ["pond", "hill"] }', groups) == ""
    other = f'select = {{ bank = ["hill", "pond"], {ABLE} }}'
    assert said(garden, other, f'{groups}\ncovariates = ["age"]') == ""
    assert "kept or left out by skill" in said(garden, other, f'{groups}\ncovariates = ["skill"]')


@pytest.mark.parametrize(
    ("quality", "roles"), [("", ("selected", "geometry")), ("motion", ("geometry", "selected"))]
)
def test_every_map_carries_the_whole_column(garden: Path, quality: str, roles: tuple[str, str]):
    assert said(garden, f"select = {{ {STILL} }}\nquality = {[quality] * bool(quality)}", "") == ""
    settings = read_settings(garden / "STUDY.toml")
    guard = GuardPlugin(settings.study, dry=True)
    study_workflow(settings, garden / "work").run(plugin=guard)
    maps, column = guard.ancestry.outputs["garden.maps", "out_files"], settings.study.table
    for row, child in enumerate(maps.children):
        there, not_there = (getattr(child.touch, role) for role in roles)
        assert there == column.column(["motion"])
        assert not_there == 0
        assert child.touch.values == 1 << row


@pytest.mark.parametrize(
    ("quality", "roi", "told"),
    [
        ('["mood"]', "", "names no column that says something of the subjects"),
        ('["sub"]', "", "such as one with how much they moved: skill, age, bank, motion"),
        ('["skill"]', 'score = "skill"', "is what a [[roi]] tests"),
    ],
)
def test_columns_that_are_none_of_quality(garden: Path, quality: str, roi: str, told: str):
    with pytest.raises(InputError) as raised:
        said(garden, f"quality = {quality}", roi)
    assert told in str(raised.value)
    assert "line" in str(raised.value)


def test_what_is_declared_of_who_takes_part_goes_to_the_ledger(garden: Path):
    table = garden / "table.tsv"
    table.write_text(table.read_text().replace("07\tbold\tn/a", "07\tbold\tfell asleep"))
    assert said(garden, f'select = {{ {STILL} }}\nquality = ["motion"]', "") == ""
    fields = {"left_out": "", "quality": "motion says how good the data are"}
    settings = read_settings(garden / "STUDY.toml")
    assert settings.left_out == ()  # she moved too much, and is not selected at all
    made = {body.get("field"): body.get("says") for body in declarations(settings, Chain())}
    assert made["quality"].startswith(fields["quality"])
    assert "left_out" not in made
    said(garden, "", "")
    made = {b.get("field"): b.get("says") for b in declarations(read_settings(
        garden / "STUDY.toml"), Chain())}  # fmt: skip
    assert made["left_out"] == "sub-07: fell asleep"


def test_a_list_of_who_is_left_out_that_comes_after_a_look_says_so(garden: Path):
    region = '[[roi]]\nname = "Brook"\nplan = "a-priori"\n'
    region += 'region = { mask = "all.nii.gz", origin = "a map in the hut" }\n'
    study, table = garden / "STUDY.toml", garden / "table.tsv"
    study.write_text(HEAD + region)
    (first,) = run_study(read_settings(study)).tests
    table.write_text(table.read_text().replace("07\tbold\tn/a", "07\tbold\tfell asleep"))
    (second,) = run_study(read_settings(study)).tests
    (again,) = run_study(read_settings(study)).tests
    told = "Who is left out was stated after 1 look at these data."
    assert told not in first["sentence"]
    assert told in second["sentence"]
    assert again == second


@pytest.mark.parametrize(
    ("plan", "column"),
    [
        ('stratify = "bank"', "bank"),
        ('fold_column = "bank"\nplan = "given-folds"', "bank"),
        ("", ""),
    ],
)
def test_the_column_by_which_folds_are_dealt_is_geometry(garden: Path, plan: str, column: str):
    roi = FOLDED.replace('plan = "k-fold"\nfolds = 3\n', "") if "given" in plan else FOLDED
    (garden / "STUDY.toml").write_text(f"{HEAD}{roi}{plan}\n")
    settings = read_settings(garden / "STUDY.toml")
    guard, table = GuardPlugin(settings.study, dry=True), settings.study.table
    study_workflow(settings, garden / "work").run(plugin=guard)
    for name in ("mask_files", "row_masks"):
        for mask in guard.ancestry.outputs["garden.Arbor.choose", name].children:
            assert mask.touch.geometry == table.column([column])
            assert not mask.touch.values & table.scores
    test = [finding for finding in guard.findings if finding.kind == "statistic"]
    assert [finding.verdict for finding in test] == ["apart"]


def test_so_it_is_around_somebodys_own_group_software(garden: Path):
    study = read_table(garden / "table.tsv")
    files = [str(garden / f"sub-{sub}.nii.gz") for sub in SUBS]
    scheme = KFold(3, 1, tuple(BANK.items()))
    for made, output in ((FoldLists, "selection_files"), (LeaveOutMaps, "out_files")):
        graph = Workflow("w")
        graph.add_nodes([Node(made(in_files=files, labels=SUBS, scheme=scheme), "n")])
        guard = GuardPlugin(study, dry=True)
        graph.run(plugin=guard)
        folds = guard.ancestry.outputs["w.n", output].children
        assert [fold.touch.values.bit_count() for fold in folds] == [4, 5, 5]
        assert {fold.touch.geometry for fold in folds} == {study.table.column(["bank"])}
