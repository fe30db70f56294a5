"""`sequester check FILE.py:FUNCTION`: a workflow in somebody's script is judged, and runs not."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner, Result
from planting import a_grid
from sequester.nodes.images import write_map
from sequester.workflows.cli import main
from sequester.workflows.guard import GuardPlugin
from sequester.workflows.scripts import workflow_from
from sequester.workflows.study import read_table

SHAPE = (4, 4, 3)
GRID = a_grid(SHAPE, 2.0)
LABELS = [f"{i:02d}" for i in range(4)]
SCRIPT = """
from pathlib import Path
from nipype import Function, Node, Workflow
from sequester.nodes.interfaces import ChooseMask, Extract, GroupMap
from sequester.nodes.masks import Strongest
from names import labels  # beside the script

HERE = Path(__file__).parent
maps = [str(HERE / f"{label}.nii") for label in labels]

def act(x):
    open("trace", "w").close()
    return x

def circular():
    print("making it")
    workflow = Workflow("mine")
    group, choose = Node(GroupMap(in_files=maps), "group"), Node(ChooseMask(rule=Strongest(3)), "c")
    read = Node(Extract(in_files=maps, labels=labels), "read")
    workflow.connect([(group, choose, [("out_file", "in_file")])])
    workflow.connect([(choose, read, [("mask_file", "mask_files")])])
    return workflow

def given():
    workflow = Workflow("mine")
    read = Extract(in_files=maps, labels=labels, mask_files=[str(HERE / "moss.nii")])
    step = Function(["x"], ["out"], act)
    step.inputs.x = 1
    workflow.add_nodes([Node(read, "read"), Node(step, "step")])
    return workflow

def nothing():
    return 3

def broken():
    return 1 / 0

def counted(maps):
    return len(maps)

def foreign():
    workflow = Workflow("mine", base_dir=str(HERE / "work"))
    step = Node(Function(["maps"], ["out"], counted), "step")
    step.inputs.maps = maps
    workflow.add_nodes([step])
    return workflow
"""


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    lines = ["path\tsub\tsuffix"]
    for i, label in enumerate(LABELS):
        noise = np.random.default_rng(i).standard_normal(SHAPE)
        write_map(tmp_path / f"{label}.nii", noise.astype(np.float32), GRID)
        lines.append(f"{label}.nii\t{label}\tbold")
    write_map(tmp_path / "moss.nii", np.arange(48).reshape(SHAPE) < 9, GRID)
    (tmp_path / "table.tsv").write_text("\n".join(lines) + "\n")
    (tmp_path / "names.py").write_text(f"labels = {LABELS!r}\n")
    (tmp_path / "mine.py").write_text(SCRIPT)
    (tmp_path / "origins.toml").write_text('[[origin]]\nsource = "a chart"\nfiles = ["moss.nii"]\n')
    monkeypatch.chdir(tmp_path)
    return tmp_path


def check(*arguments: str) -> Result:
    return CliRunner().invoke(main, ["check", *arguments])


def test_a_circular_workflow_is_refused_and_a_given_region_is_not(folder):
    before = sorted(folder.rglob("*.nii")) + sorted(folder.glob("*"))
    done = check("mine.py:circular", "--study", "table.tsv")
    assert done.exit_code == 3, done.output
    assert "refused before anything ran: 1 cause, 4 findings" in done.stderr
    assert "mine.read" in done.stderr and done.stdout == ""

    assert check("mine.py:given", "--study", "table.tsv").exit_code == 3  # from nowhere
    fine = ("mine.py:given", "--study", "table.tsv", "--origins", "origins.toml")
    done = check(*fine)
    assert done.exit_code == 0, done.output
    assert "mine.read" in done.stdout and "apart" in done.stdout
    assert "Nothing is refused; the workflow may run under GuardPlugin." in done.stdout
    written = set(folder.glob("*")) - set(before)
    assert {path.name for path in written} <= {"__pycache__"}


def test_a_workflow_in_which_nothing_is_judged_is_not_called_fine(folder, caplog):
    done = check("mine.py:foreign", "--study", "table.tsv")
    assert done.exit_code == 0, done.output
    assert done.stdout.startswith("Nothing was judged, and nothing is shown by that")
    assert "refused" not in done.stdout
    done = check("mine.py:foreign", "--study", "table.tsv", "--must-judge")
    assert done.exit_code == 1 and "Nothing was judged" in done.stderr and done.stdout == ""
    fine = ("mine.py:given", "--study", "table.tsv", "--origins", "origins.toml", "--must-judge")
    assert check(*fine).exit_code == 0

    workflow_from("mine.py:foreign").run(plugin=GuardPlugin(read_table("table.tsv")))
    assert "Nothing was judged" in caplog.text


def test_json_is_one_object_whatever_the_script_prints(folder):
    done = check("mine.py:circular", "--study", "table.tsv", "--json")
    told = json.loads(done.stdout)
    assert (told["exit_code"], done.exit_code) == (3, 3)
    assert [f["verdict"] for f in told["findings"]] == ["leak"] * 4
    fine = check("mine.py:given", "--study", "table.tsv", "--origins", "origins.toml", "--json")
    assert [f["verdict"] for f in json.loads(fine.stdout)["findings"]] == ["apart"] * 4


@pytest.mark.parametrize(
    ("target", "told"),
    [
        ("absent.py:make", "no such script (absent.py): expected FILE.py:FUNCTION"),
        ("absent.py", "no such script (absent.py): expected FILE.py:FUNCTION"),
        ("mine.py", "no function is named (mine.py): expected FILE.py:FUNCTION, a function that "),
        ("mine.py:absent", "no function 'absent' in the script (mine.py): expected one of act, "),
        ("mine.py:HERE", "no function 'HERE' in the script (mine.py): expected one of act, "),
        ("mine.py:nothing", "nothing() returns no workflow (mine.py): expected a nipype Workflow"),
        ("mine.py:broken", "broken() fails (mine.py, line 36): got ZeroDivisionError"),
        ("typo.py:make", "the script fails on loading it (typo.py, line 2): got SyntaxError"),
        ("ends.py:make", "the script fails on loading it (ends.py, line 2): got SystemExit: 4"),
        ("runs.py:make", "the script runs a workflow when it is loaded (runs.py): expected a "),
        ("table.tsv:make", "the script is no Python file (table.tsv): expected a name in .py"),
    ],
)
def test_what_is_wrong_with_a_script_is_told(folder, target, told):
    (folder / "typo.py").write_text("import os\ndef make(:\n")
    (folder / "ends.py").write_text("import sys\nsys.exit(4)\n")
    (folder / "runs.py").write_text("from mine import given\ngiven().run()\n")
    done = check(target, "--study", "table.tsv")
    assert done.exit_code == 2, done.output
    assert told in " ".join(done.stderr.split())


def test_a_script_needs_a_table_and_a_study_file_has_one(folder):
    done = check("mine.py:given")
    assert (done.exit_code, "no study table (mine.py:given)" in done.stderr) == (2, True)
    (folder / "origins.toml").write_text('[[origins]]\nsource = "a chart"\n')
    done = check("mine.py:given", "--study", "table.tsv", "--origins", "origins.toml")
    assert (done.exit_code, "unknown key 'origins'" in done.stderr) == (2, True)
