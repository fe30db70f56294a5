"""What the documents show runs, and names what exists."""

import importlib.util
import json
import logging
import re
import runpy
import sys
import tomllib
import xml.etree.ElementTree as ET
from pathlib import Path

import numpy as np
import pytest
from sequester.nodes.images import write_map
from sequester.workflows import comparisons, demo, plans, regions, rois, settings, study
from sequester.workflows.guard import GuardRefused
from sequester.workflows.outputs import (
    CELL_COLUMNS,
    COMPARISON_COLUMNS,
    MASK_COLUMNS,
    SENSITIVITY_COLUMNS,
    TEST_COLUMNS,
    TOUCH_COLUMNS,
    VALUE_COLUMNS,
)
from sequester.workflows.run import check_study
from sequester.workflows.study import COLUMNS

DOCS = Path(__file__).parent.parent / "docs"
PAGES = sorted((DOCS / "plans").glob("*.md"))


@pytest.fixture(scope="module")
def figures():
    """docs/plans/figures.py, which runs the examples of the pages and draws what they did."""
    spec = importlib.util.spec_from_file_location("figures", DOCS / "plans" / "figures.py")
    module = importlib.util.module_from_spec(spec)
    sys.modules["figures"] = module
    spec.loader.exec_module(module)
    yield module
    del sys.modules["figures"]


@pytest.fixture(scope="module")
def garden(tmp_path_factory):
    folder = tmp_path_factory.mktemp("docs") / "demo"
    demo.write_demo(folder)
    return folder


def shows(svg):
    """The cells and the words of a figure, whatever version of the library has drawn it."""
    elements = list(ET.fromstring(svg).iter())
    cells = {one.get("id") for one in elements if "column" in one.get("id", "")}
    return cells, [one.text for one in elements if one.tag.endswith("}text")]


@pytest.mark.parametrize("page", PAGES, ids=[page.stem for page in PAGES])
def test_the_example_of_a_plan_runs_prints_what_is_shown_and_is_drawn(
    page, figures, garden, monkeypatch
):
    monkeypatch.setattr(logging.getLogger("nipype"), "disabled", True)
    blocks = figures.blocks(page)
    shown = [text for kind, text in blocks if not kind]
    assert shown
    for ledger in garden.glob("*.ledger.jsonl"):  # each page begins anew
        ledger.unlink()
    printed, meetings = figures.perform(page, garden)
    for text in shown:
        assert " ".join(text.split()) in " ".join(printed.split())
    run = {line.split()[-1] for kind, text in blocks if kind == "sh" for line in text.splitlines()}
    files = {text.split()[1] for kind, text in blocks if kind in ("python", "toml")}
    assert files <= run  # nothing is shown that is not run
    figure = page.with_suffix(".svg")
    drawn = figures.draw(page.stem, meetings)
    assert shows(figure.read_text()) == shows(drawn)  # else run docs/plans/figures.py
    assert drawn == figures.draw(page.stem, meetings)
    assert f"]({figure.name})" in page.read_text()


def test_a_circular_mask_is_drawn_as_one(figures):
    runs = frozenset({"sub-01_run-1_bold", "sub-01_run-2_bold"})
    met = [figures.Meeting("Arbor", "", runs, frozenset({"sub-01_run-2_bold"}))]
    circular = figures.draw("a", met)
    apart = figures.draw("a", [figures.Meeting("Arbor", "", runs - met[0].tested, met[0].tested)])
    assert shows(circular)[0] >= {"chosen_on,_row_0,_column_0", "both,_row_1,_column_0"}
    assert shows(apart)[0] >= {"chosen_on,_row_0,_column_0", "tested_on,_row_1,_column_0"}
    assert len({cell for cell in shows(apart)[0] if "row" in cell}) == 2
    assert "masks meet the data" in circular and "no mask meets the data" in apart


def test_every_plan_has_its_page_and_every_page_is_linked():
    assert set(plans.PLANS) | {"group-software"} == {page.stem for page in PAGES}
    for page in PAGES:
        assert f"(plans/{page.name})" in (DOCS / "choosing.md").read_text()
        assert f"(docs/plans/{page.name})" in (DOCS.parent / "README.md").read_text()


@pytest.mark.parametrize("page", [*PAGES, *DOCS.glob("*.md"), DOCS.parent / "README.md"], ids=str)
def test_links_lead_somewhere(page):
    targets = re.findall(r"\]\((?!http)([^)#]+)\)", page.read_text())
    assert [target for target in targets if not (page.parent / target).exists()] == []


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


def test_the_refusal_in_the_readme_is_what_the_demo_says(garden):
    (shown,) = re.findall(r"```\n(refused .*?)```", (DOCS.parent / "README.md").read_text(), re.S)
    with pytest.raises(GuardRefused) as refusal:
        check_study(settings.read_settings(garden / "circular.toml"))
    assert str(refusal.value).startswith(shown.rstrip())


def toml_of(page: str) -> list[str]:
    """The TOML blocks of a page, the longest first."""
    text = (DOCS / page).read_text()
    return sorted(re.findall(r"```toml\n(.*?)```", text, re.S), key=len, reverse=True)


@pytest.fixture(scope="module")
def two_visits(tmp_path_factory):
    """A folder for the study files of a page: every file and column that they name."""
    folder, grid = tmp_path_factory.mktemp("visits"), demo.geometry()
    (folder / "regions").mkdir()
    (folder / "parcels").mkdir()
    inside = demo.search_region("Arbor")
    for name in ("arbor", "weights", "garden_dseg", "terrace"):
        write_map(folder / "regions" / f"{name}.nii.gz", inside, grid)
    write_map(folder / "parcels" / "one.nii.gz", inside, grid)
    table = "index\tname\n1\tArbor\n2\tBrook\n"
    (folder / "regions" / "garden_dseg.tsv").write_text(table)
    columns = "path sub ses task run suffix contrast variance group site age skill motion"
    lines = ["\t".join(columns.split())]
    number = 0
    for sub in ("01", "02", "03", "04", "05", "06"):
        for ses in ("before", "after"):
            for contrast in ("amberMinusTeal", "baseline"):
                for run in ("1", "2"):
                    number += 1
                    for kind in ("e", "v"):
                        write_map(
                            folder / f"{kind}{number}.nii", np.full((2, 2, 2), number + 0.5), grid
                        )
                    lines.append(
                        f"e{number}.nii\t{sub}\t{ses}\tlanterns\t{run}\tbold\t{contrast}\t"
                        f"v{number}.nii\t{'day' if int(sub) % 2 else 'night'}\tnorth\t"
                        f"3{sub}\t{int(sub) ** 2}\t0.{sub}"
                    )
    (folder / "table.tsv").write_text("\n".join(lines) + "\n")
    return folder


@pytest.mark.parametrize("text", toml_of("study-file.md"))
def test_the_study_files_of_the_page_are_read(two_visits, text):
    (two_visits / "STUDY.toml").write_text(whole(text))
    read = settings.read_settings(two_visits / "STUDY.toml")
    given = tomllib.loads(whole(text))
    assert [roi.name for roi in read.rois] == [roi["name"] for roi in given["roi"]]


def whole(text: str) -> str:
    """A study file out of a piece of one."""
    head = '[study]\nname = "lanterns"\ntable = "table.tsv"\n'
    data = '[data]\nselect = { contrast = "amberMinusTeal", ses = "before" }\n'
    roi = '[[roi]]\nname = "Any"\nplan = "k-fold"\nrule = { kind = "strongest", k = 9 }\n'
    return "\n".join(
        (
            *(part for part, key in ((head, "[study]"), (data, "[data]")) if key not in text),
            text,
            *([roi] if "[[roi]]" not in text else []),
        )
    )


@pytest.mark.parametrize("plan", plans.PLANS)
def test_every_plan_is_on_both_pages(plan):
    for page in ("study-file.md", "choosing.md"):
        assert f"`{plan}`" in (DOCS / page).read_text()


def test_every_key_is_on_the_page():
    text = (DOCS / "study-file.md").read_text()
    keys = set().union(*settings._KEYS.values(), *rois._PLAN_KEYS.values(), rois._ROI_KEYS)
    keys |= comparisons._KEYS
    keys |= set(rois._RULES).union(*rois._RULES.values()) | set(regions._KEYS)
    missing = [key for key in sorted(keys) if not re.search(rf"\b{key}\b", text)]
    assert missing == []
    columns = (*COLUMNS, *study._MORE, *study.CELLS)
    assert [column for column in columns if not re.search(rf"\b{column}\b", text)] == []


def test_every_word_that_a_key_takes_is_on_the_page():
    text = (DOCS / "study-file.md").read_text()
    words = (*rois.SUMMARIES, *rois.INTERVALS, *rois.ON_EMPTY, *rois.TAILS)
    assert [word for word in (*words, *regions.MIRRORED) if f"`{word}`" not in text] == []


def test_every_column_is_on_the_outputs_page_and_those_it_explains_exist():
    text = (DOCS / "outputs.md").read_text()
    tables = (TEST_COLUMNS, VALUE_COLUMNS, CELL_COLUMNS, TOUCH_COLUMNS, SENSITIVITY_COLUMNS)
    columns = set().union(*tables, COMPARISON_COLUMNS, MASK_COLUMNS)
    assert [name for name in sorted(columns) if not re.search(rf"\b{name}\b", text)] == []
    named = re.findall(r"^- \*\*(.*?)\.\*\*", text, re.M)
    explained = {name for item in named for name in item.split(", ")}
    assert explained <= columns
    assert len(explained) >= 10
