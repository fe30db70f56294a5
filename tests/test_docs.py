"""What the documents show runs, and names what exists."""

import json
import re
import runpy
import tomllib
from pathlib import Path

import numpy as np
import pytest
from sequester.nodes.images import write_map
from sequester.workflows import demo, settings
from sequester.workflows.outputs import TEST_COLUMNS, VALUE_COLUMNS
from sequester.workflows.study import COLUMNS

DOCS = Path(__file__).parent.parent / "docs"


def test_the_own_workflow_runs_and_is_cleared(tmp_path, capfd):
    demo.write_demo(tmp_path / "garden")
    record = runpy.run_path(str(DOCS / "own_workflow.py"))["main"](tmp_path / "garden")
    assert record["p"] == 1 / 200
    assert record["n_subjects"] == demo.N_SUBJECTS
    assert "guard: apart (subject)" in capfd.readouterr().out


def test_the_snippet_of_the_readme_runs_as_printed(tmp_path, monkeypatch):
    demo.write_demo(tmp_path)
    monkeypatch.chdir(tmp_path)
    (code,) = re.findall(r"```python\n(.*?)```", (DOCS.parent / "README.md").read_text(), re.S)
    exec(compile(code, "README.md", "exec"), {})
    (record,) = (tmp_path / "work" / "mine" / "arbor" / "test").glob("result.json")
    assert json.loads(record.read_text())["p"] == 1 / 1000


def study_file() -> str:
    """The long STUDY.toml of the page."""
    blocks = re.findall(r"```toml\n(.*?)```", (DOCS / "study-file.md").read_text(), re.S)
    return max(blocks, key=len)


def test_the_study_file_of_the_page_is_read(tmp_path):
    grid = demo.geometry()
    (tmp_path / "regions").mkdir()
    write_map(tmp_path / "regions" / "arbor.nii.gz", demo.search_region("Arbor"), grid)
    lines = ["path\tsub\tsuffix\tcontrast"]
    for i in range(4):
        write_map(tmp_path / f"{i}.nii", np.full(demo.SHAPE, i + 1.0, np.float32), grid)
        lines.append(f"{i}.nii\t{i}\tbold\tamberMinusTeal")
    (tmp_path / "table.tsv").write_text("\n".join(lines) + "\n")
    (tmp_path / "STUDY.toml").write_text(study_file())
    read = settings.read_settings(tmp_path / "STUDY.toml")
    assert [roi.plan for roi in read.rois] == ["leave-one-subject-out", "a-priori", "exploratory"]
    assert tomllib.loads(study_file())["study"]["name"] == read.name == "lanterns"


@pytest.mark.parametrize("plan", settings.PLANS)
def test_every_plan_is_on_both_pages(plan):
    for page in ("study-file.md", "choosing.md"):
        assert f"`{plan}`" in (DOCS / page).read_text()


def test_every_key_is_on_the_page():
    text = (DOCS / "study-file.md").read_text()
    keys = set().union(*settings._KEYS.values(), *settings._PLAN_KEYS.values())
    missing = [key for key in sorted(keys) if not re.search(rf"\b{key}\b", text)]
    assert missing == []
    assert [column for column in COLUMNS if not re.search(rf"\b{column}\b", text)] == []


def test_the_columns_that_the_outputs_page_explains_exist():
    text = (DOCS / "outputs.md").read_text()
    named = re.findall(r"^- \*\*(.*?)\.\*\*", text, re.M)
    columns = {name for item in named for name in item.split(", ")}
    assert columns <= {*TEST_COLUMNS, *VALUE_COLUMNS}
    assert len(columns) >= 10
