"""The page of a run, from its folder alone: what stands in it, and that it stays the same."""

from __future__ import annotations

import csv
import json
import re
import shutil
import sys
from base64 import b64encode
from hashlib import sha256
from html.parser import HTMLParser
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
import running
from click.testing import CliRunner
from gardens import CENTRES, FLIPS
from matplotlib.collections import PathCollection
from nipype import Node
from planting import a_grid, paths_of, plant
from sequester import GuardPlugin
from sequester.nodes.errors import InputError
from sequester.nodes.images import Geometry
from sequester.nodes.interfaces import Extract
from sequester.nodes.touch import Unit
from sequester.workflows.cli import main
from sequester.workflows.guard import GuardRefused
from sequester.workflows.record import record_of
from sequester.workflows.report import effects
from sequester.workflows.report.drawing import drawing
from sequester.workflows.report.folder import read_folder
from sequester.workflows.report.graphmap import HELD_OUT, RESULT, SELECTION, graph_map
from sequester.workflows.report.methods import methods_text
from sequester.workflows.report.page import write_report
from sequester.workflows.report.refused import refused_page, write_refused
from sequester.workflows.report.slices import Volume, densest
from sequester.workflows.report.touchmap import touch_map
from sequester.workflows.report.words import headline, notes
from sequester.workflows.run import run_study
from sequester.workflows.settings import read_settings
from sequester.workflows.study import Origin
from worlds import PLANS, World, study_toml

OTHERS = ("Ball", "Parts", "Own", "Half", "Beds", "Same", "Sum")  # plans the garden has not


@pytest.fixture(scope="module")
def page(garden):
    return (garden.output / "report.html").read_text(encoding="utf-8")


@pytest.fixture
def copy(garden, tmp_path):
    """The run's folder somewhere else, to be changed."""
    return Path(shutil.copytree(garden.output, tmp_path / "copy"))


class Seen(HTMLParser):
    """The tags, the attributes and the text of a page."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.given: list[tuple[str, str, str]] = []
        self.scripts: list[str] = []
        self.text = ""
        self._inside = ""
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.given += [(tag, name, value or "") for name, value in attrs]
        self._inside = tag

    def handle_data(self, data):
        if self._inside == "script":
            self.scripts.append(data)
        elif self._inside != "style":
            self.text += data

    def handle_endtag(self, tag):
        self._inside = ""


def table(path: Path) -> list[dict[str, str]]:
    with path.open(newline="") as stream:
        return list(csv.DictReader(stream, delimiter="\t"))


def changed(path: Path, old: str, new: str) -> None:
    text = path.read_text(encoding="utf-8")
    assert old in text
    path.write_text(text.replace(old, new), encoding="utf-8")


# -- the page as a whole --------------------------------------------------------------------------


def test_the_five_questions_stand_in_order_and_the_notes_above_all(page):
    heads = re.findall(r"<h2><span>(\d)</span> (.*?)</h2>", page)
    assert heads == [
        ("1", "May I believe these numbers?"),
        ("2", "What are they?"),
        ("3", "How were the regions chosen?"),
        ("4", "What touched what?"),
        ("5", "How do I repeat it?"),
    ]
    assert page.index('class="headline"') < page.index("<h2><span>2")


def test_the_first_screen_says_what_was_asked_whether_to_believe_it_and_what_was_found(
    garden, page
):
    first = page[: page.index("<h2><span>1")]
    seen = Seen(first).text
    places = [seen.index(head) for head in ("What was asked", "May I believe it", "What was found")]
    assert places == sorted(places)
    for row in table(garden.output / "roi_tests.tsv"):
        assert (f'<tr><th scope="row">{row["roi"]}</th>' in first) == (row["biased"] == "false")
    assert "What is the mean effect in Arbor, Brook and Cinder, chosen leaving out one" in seen
    assert "Do values go with skill in Skilled" in seen
    assert "Do day and night differ in Groups" in seen
    assert "Read by several regions of this run" in seen and "Looked at before" not in seen
    assert "3 values are exploratory and biased" in seen


def test_the_page_asks_for_nothing_and_lets_only_its_own_style_and_script_through(page):
    seen = Seen(page)
    for tag, name, value in seen.given:
        if name in ("src", "href", "xlink:href", "action", "data", "poster", "srcset"):
            assert value.startswith(("#", "data:image/png;base64,")), (tag, name, value)
        assert name != "style" and not name.startswith("on"), (tag, name)
        assert "url(" not in value or value.startswith("url(#"), (tag, name, value)
    policy = next(v for t, n, v in seen.given if n == "content" and v.startswith("default-src"))
    assert policy.startswith("default-src 'none';") and "unsafe" not in policy
    for tag in ("style", "script"):
        (inside,) = re.findall(rf"<{tag}>(.*?)</{tag}>", page, re.S)
        digest = b64encode(sha256(inside.encode()).digest()).decode()
        assert f"{tag}-src 'sha256-{digest}'" in policy
    assert "@import" not in page and "http:" not in re.sub(r"http://www.w3.org/\S+", "", page)


def test_the_same_folder_gives_the_same_bytes_wherever_it_lies(garden, copy):
    shutil.rmtree(copy / "figures")
    for name in ("report.html", "methods.txt"):
        (copy / name).unlink()
    done = CliRunner().invoke(main, ["report", str(copy)])
    assert done.exit_code == 0 and str(copy / "report.html") in done.output
    made = [copy / "report.html", copy / "methods.txt", *sorted((copy / "figures").iterdir())]
    assert len(made) > 20
    for path in made:
        assert path.read_bytes() == (garden.output / path.relative_to(copy)).read_bytes(), path


def test_every_figure_is_there_for_a_paper_too_and_ids_are_not_repeated(garden, page):
    names = {path.stem for path in (garden.output / "figures").glob("*.svg")}
    assert names == {path.stem for path in (garden.output / "figures").glob("*.png")}
    assert names == set(re.findall(r"figures/(\S+)\.svg, \.png", page))
    assert {"Arbor_values", "Arbor_flips", "Arbor_stability", "Arbor_where"} <= names
    assert {"Brook_sensitivity", "Skilled_score", "estimates_1", "ArborLook_biased"} <= names
    ids = [value for _, name, value in Seen(page).given if name == "id"]
    assert len(ids) == len(set(ids))


def test_a_label_that_is_code_and_a_name_of_300_characters_break_nothing(copy):
    code, long, region = "<script>alert(1)</script>", "n" * 300, "r" * 200  # a file bears it
    for name in ("record.json", "roi_values.tsv", "roi_values_wide.tsv", "roi_tests.tsv"):
        text = (copy / name).read_text()
        text = re.sub(r"\bsub-3\b", f"sub-{code.replace('/', '~')}", text)
        if "values" in name:
            text = re.sub(r"\b3\t", f"{code}\t", text)
        text = text.replace("Skilled", region).replace("task lanterns", long)
        (copy / name).write_text(text.replace("a walk", f"{code} $x$"))
    changed(copy / "STUDY.toml", '"Skilled"', f'"{region}"')
    manifest = json.loads((copy / "manifest.json").read_text())
    manifest |= {"study": f"{code}&{long}", "left_out": {code: f'"{code}'}}
    (copy / "manifest.json").write_text(json.dumps(manifest))
    changed(copy / "roi_tests.tsv", "the largest cluster", f"{code}the largest cluster")
    page = write_report(copy).read_text(encoding="utf-8")
    seen = Seen(page)
    assert seen.tags.count("script") == 2
    assert "alert(1)" not in seen.scripts[1]
    assert code in seen.text and long in seen.text and region in seen.text
    json.loads(seen.scripts[0])


def test_a_folder_that_no_run_wrote_is_refused_with_what_is_missing(tmp_path, copy):
    with pytest.raises(InputError, match=r"no folder of a run.*got no folder"):
        write_report(tmp_path / "nowhere")
    (copy / "record.json").unlink()
    with pytest.raises(InputError, match=r"no record\.json in it"):
        write_report(copy)
    (copy / "record.json").write_text("{")
    with pytest.raises(InputError, match="damaged folder of a run"):
        write_report(copy)
    done = CliRunner().invoke(main, ["report", str(tmp_path / "nowhere")])
    assert done.exit_code == 2


# -- believing ------------------------------------------------------------------------------------


def test_a_region_says_in_how_many_folds_its_rule_found_something(garden, copy):
    def told(path):
        row = table(path / "roi_tests.tsv")[0]
        page = write_report(path).read_text(encoding="utf-8")
        first = page[: page.index("<h2><span>2")]
        assert '<th scope="col">Region or search region</th>' in first
        (line,) = re.findall(rf'<tr><th scope="row">{row["roi"]}</th>.*?</tr>', first)
        return re.findall(r"<small>(found in .*?)</small>", line)

    n = int(table(garden.output / "roi_tests.tsv")[0]["n_folds"])
    for empty, replaced, said in (
        ("0", "0", []),
        (
            "2",
            "0",
            [
                f"found in {n - 2} of {n} folds; the value counts as 0 in the others: not the size "
                "of an effect"
            ],
        ),
        (
            "0",
            "3",
            [f"found in {n - 3} of {n} folds; the strongest voxels stood in for the others"],
        ),
    ):
        rows = table(copy / "roi_tests.tsv")
        rows[0] |= {"n_empty": empty, "n_replaced": replaced}
        lines = ["\t".join(rows[0]), *("\t".join(row.values()) for row in rows)]
        (copy / "roi_tests.tsv").write_text("\n".join(lines) + "\n")
        assert told(copy) == said


def test_levels_claims_certificates_and_looks_are_said_before_any_number():
    row = {"roi": "Arbor", "plan": "k-fold", "p": "0.01", "verdict": "apart", "level": "subject"}
    row |= {"claim": "population", "biased": "false"}
    waived = row | {"claim": "these subjects", "level": "run", "roi": "Brook"}
    certified = row | {"verdict": "certified", "roi": "Cinder"}
    again = row | {"looks": "3"}
    shaped = row | {"contour_p": "0.004"}
    biased = row | {"biased": "true", "verdict": "leak", "p": None, "estimate": "2.5"}
    assert notes([row, biased]) == []
    assert [note.kind for note in notes([waived, certified, again])] == [
        "waiver",
        "certificate",
        "look",
    ]
    assert [note.kind for note in notes([shaped, row | {"contour_p": "0.2"}])] == ["shape"]
    assert "Brook" in notes([waived])[0].head and "these subjects only" in notes([waived])[0].text
    assert "Arbor (3 looks)" in notes([again])[0].head
    # What only this run has read is told apart from what was looked at before it.
    here, before = again | {"looks_of_run": "3"}, again | {"looks_of_run": "1", "roi": "Brook"}
    heads = [note.head for note in notes([here, before])]
    assert heads == [
        "Looked at before: Brook (3 looks, 2 of them in earlier runs)",
        "Read by several regions of this run: Arbor (3)",
    ]
    (told,) = notes([before], ["OTHER.ledger.jsonl"])
    assert told.text.endswith("Counted too: the looks in OTHER.ledger.jsonl.")
    assert "Counted" not in notes([here], ["OTHER.ledger.jsonl"])[0].text
    late = row | {"history": "The region was declared after 1 look at these data."}
    assert "Arbor" in notes([late])[0].head and "after 1 look" in notes([late])[0].text
    assert headline([row, row]).startswith("All 2 tests: the region was chosen without any data")
    assert "1 value is exploratory and biased" in headline([row, biased])
    assert headline([row, waived]) == (
        "2 tests. Arbor: chosen without the tested subjects; Brook: chosen on other data of the "
        "tested subjects."
    )


def test_biased_values_stand_apart_without_interval_error_bar_or_p(garden, page):
    block = page[page.index('<section class="biased"') :]
    block = block[: block.index("</section>")]
    assert "ArborLook" in block and "Groups" not in block
    assert not re.search(
        r"\bto \N{MINUS SIGN}?\d|95 %|p [<=]|t\(", re.sub(r"<svg.*?</svg>", "", block, flags=re.S)
    )
    before = page[page.index('id="numbers"') : page.index('<section class="biased"')]
    assert "ArborLook</th>" not in before
    run = read_folder(garden.output)
    with drawing():
        for row in run.tests:
            if row["biased"] == "true":
                (axes,) = effects.biased_strip(run, row).figure.axes
                # Points, their mean, and where zero is: nothing that spans a range of values.
                for line in axes.lines:
                    assert len(set(line.get_xdata())) == 1
                assert [type(c) for c in axes.collections] == [PathCollection]


def test_points_and_intervals_of_a_figure_are_those_of_the_tables(garden):
    run = read_folder(garden.output)
    row = next(row for row in run.tests if row["roi"] == "Arbor")
    twin = effects.twin_of(run, row)
    assert twin is not None and twin["roi"] == "ArborLook"
    with drawing():
        (axes,) = effects.strip(run, row, twin).figure.axes
    values = {
        r["sub"]: float(r["value"])
        for r in table(garden.output / "roi_values.tsv")
        if r["roi"] == "Arbor"
    }
    drawn = axes.collections[0].get_offsets()[:, 0]
    assert sorted(drawn) == pytest.approx(sorted(values.values()))
    ends = next(line.get_xdata() for line in axes.lines if len(set(line.get_xdata())) == 2)
    assert list(ends) == [float(row["interval_low"]), float(row["interval_high"])]
    spans = [line for line in axes.lines if len(set(line.get_xdata())) > 1]
    assert len(spans) == 1, "the twin has no interval"


def test_all_labels_of_an_atlas_are_drawn_on_one_axis_in_as_many_figures_as_it_takes():
    rows = [
        {
            "roi": "Beds", "parcel": str(i), "parcel_name": f"bed {i}", "scale": "effect maps",
            "estimate": str(i - 60), "interval_low": str(i - 61), "interval_high": str(i - 59),
        }
        for i in range(230)
    ]  # fmt: skip
    with drawing():
        made = list(effects.family_forests(rows))
        axes = [one.figure.axes[0] for one in made]
        named = [tick.get_text() for one in axes for tick in one.get_yticklabels()]
    assert [one.name for one in made] == ["Beds_labels_1", "Beds_labels_2", "Beds_labels_3"]
    assert named == [row["parcel_name"] for row in rows]
    assert len({one.get_xlim() for one in axes}) == 1
    low, high = axes[0].get_xlim()
    assert low < -61 and high > 170
    points = [
        line.get_xdata()[0] for one in axes for line in one.lines if len(line.get_xdata()) == 1
    ]
    assert points == [float(row["estimate"]) for row in rows]


def test_the_histogram_of_flips_counts_every_exchange(garden):
    rows = table(garden.output / "flips.tsv")
    for name in ("Arbor", "Brook", "Cinder", "Skilled", "Groups"):
        mine = [row for row in rows if row["roi"] == name]
        assert sum(int(row["count"]) for row in mine) == FLIPS
        tests = {row["roi"]: row for row in table(garden.output / "roi_tests.tsv")}
        at_least = sum(int(r["count"]) for r in mine if float(r["low"]) > float(tests[name]["t"]))
        assert (1 + at_least) / (1 + FLIPS) <= float(tests[name]["p"]) + 1e-9


# -- methods --------------------------------------------------------------------------------------


def test_the_methods_change_when_the_procedure_does_and_only_then(copy):
    said = methods_text(read_folder(copy))
    words = " ".join(said.split())
    assert "(Phipson & Smyth 2010)" in words and "Phipson B, Smyth GK (2010)" in words
    assert "Holm 1979" in words
    rows = table(copy / "roi_tests.tsv")
    outcome = (
        "estimate",
        "t",
        "p",
        "dz",
        "dice",
        "n_empty",
        "coverage",
        "sentence",
        "interval_low",
    )
    for row in rows:
        row |= {name: "0.123" for name in outcome if row[name] != "n/a"}
    lines = ["\t".join(rows[0]), *("\t".join(row.values()) for row in rows)]
    (copy / "roi_tests.tsv").write_text("\n".join(lines) + "\n")
    assert methods_text(read_folder(copy)) == said
    for name, old, new in (
        ("STUDY.toml", "k = 10\n", "k = 11\n"),
        ("STUDY.toml", 'on_empty = "strongest"', 'on_empty = "empty"'),
        ("roi_tests.tsv", "p < 0.01", "p < 0.02"),
        ("roi_tests.tsv", f"{FLIPS} random flips", "29 random flips"),
    ):
        kept = (copy / name).read_text()
        changed(copy / name, old, new)
        assert methods_text(read_folder(copy)) != said, (old, new)
        (copy / name).write_text(kept)


# -- touches --------------------------------------------------------------------------------------


def test_the_touch_map_says_what_touches_tsv_says(garden):
    """Every extraction of the run's table, cell by cell, against the drawn states."""
    run = read_folder(garden.output)
    units = run.record["units"]
    made = touch_map(run.record)
    columns = {}
    for panel in made.panels:
        for column in panel.columns:
            for region, _, _ in column.places:
                columns.setdefault(region, []).append(column)
    checked = 0
    for row in table(garden.output / "touches.tsv"):
        region = row["extraction"].split(".")[1]
        listed = set() if row["touched"] == "n/a" else set(row["touched"].split(" "))
        if row["encoding"] == "all_but":
            of = set(row["of"].split(" ")) - {"n/a"}
            suffixes = zip(units, run.record["suffixes"], strict=True)
            listed = {unit for unit, suffix in suffixes if suffix in of or not of} - listed
        tested = set(row["tested"].split(" "))
        role = "chosen" if row["role"] == "values" else "geometry"
        found = [
            column
            for column in columns[region]
            if {units[i] for i in getattr(column, role)} == listed
            and tested <= {units[i] for i in column.tested}
        ]
        assert found, row
        checked += 1
    assert checked > 60
    arbor = columns["Arbor"]
    assert len(arbor) == 8 and all(not one.chosen & one.tested for one in arbor)
    assert columns["Arbor"] is not columns["ArborLook"]
    assert made.marks["biased"] and not made.marks["leak"]


def test_regions_with_the_same_folds_share_a_panel_and_other_plans_do_not(garden):
    made = touch_map(read_folder(garden.output).record)
    shared = [set(panel.regions) for panel in made.panels]
    assert any({"Arbor", "Brook", "Cinder"} <= one for one in shared)
    assert any(one == {"ArborLook", "BrookLook", "CinderLook"} for one in shared)
    assert any(one == {"Runs"} for one in shared)


def test_the_flows_of_the_graph(garden):
    made = graph_map(read_folder(garden.output).record)
    flows = {(arrow.source, arrow.target): arrow.flow for arrow in made.arrows}
    assert flows["garden.maps", "garden.Arbor.choose"] == SELECTION
    assert flows["garden.Arbor.region", "garden.Arbor.choose"] == SELECTION
    assert flows["garden.Arbor.choose", "garden.Arbor.extract"] == SELECTION
    assert flows["garden.maps", "garden.Arbor.extract"] == HELD_OUT
    assert flows["garden.Arbor.extract", "garden.Arbor.test"] == RESULT
    assert flows["garden.maps", "garden.ArborLook.group"] == SELECTION
    places = [(box.x, box.y) for box in made.boxes]
    assert len(places) == len(set(places)), "boxes cover one another"
    layer = {box.name: box.layer for box in made.boxes}
    assert all(layer[arrow.source] < layer[arrow.target] for arrow in made.arrows)


def test_the_lanes_of_variants_are_drawn_once_and_many_alike_too(garden):
    record = read_folder(garden.output).record
    made = graph_map(record)
    assert made.alike == {"BrookVariant1": ["BrookVariant2", "BrookVariant3", "BrookVariant4"]}
    assert made.drawn_as["garden.BrookVariant4.test"] == "garden.BrookVariant1.test"
    drawn = {box.name for box in made.boxes}
    assert drawn | set(made.drawn_as) == {node["name"] for node in record["nodes"]}
    assert not drawn & set(made.drawn_as)
    assert any("Brook with 4 variants" in said for said in touch_map(record).summary)

    # A region of its own, whatever its name.
    named_so = json.loads(json.dumps(record).replace("Cinder", "BrookVariant9"))
    assert graph_map(named_so).alike == made.alike
    told = " ".join(touch_map(named_so).summary)
    assert "Brook with 4 variants and BrookVariant9" in told

    one = {"interface": "Extract", "kind": "extraction"}
    many = {
        "nodes": [
            {"name": f"w.{lane}.{step}", **one} for lane in range(13) for step in ("a", "b")
        ] + [{"name": "w.other.a", **one}, {"name": "w.maps", **one}],
        "edges": [[f"w.{lane}.a", "out", f"w.{lane}.b", "in"] for lane in range(13)]
        + [["w.maps", "out", f"w.{lane}.a", "in"] for lane in (*range(13), "other")],
        "meetings": [],
        "variants": {},
    }  # fmt: skip
    assert {lane: len(others) for lane, others in graph_map(many).alike.items()} == {"0": 12}
    many["edges"].pop(0)  # a lane of another shape
    assert graph_map(many).alike == {}


# -- where ----------------------------------------------------------------------------------------


@pytest.mark.parametrize("turned", [False, True])
def test_a_slice_shows_the_place_in_mm_whatever_the_order_of_the_voxels(turned):
    affine = np.diag([-2.0, 3.0, 2.5, 1.0]) if turned else np.diag([2.0, 3.0, 2.5, 1.0])
    affine[:3, 3] = [30, -40, -10] if turned else [-30, -40, -10]
    if turned:  # oblique, too
        c, s = np.cos(0.3), np.sin(0.3)
        affine[:3] = np.array([[c, -s, 0], [s, c, 0], [0, 0, 1]]) @ affine[:3]
    data = np.zeros((30, 25, 12))
    data[20, 5, 7] = 1
    volume = Volume(data, Geometry(data.shape, tuple(map(tuple, affine.tolist()))))
    mm = (affine @ [20, 5, 7, 1])[:3]
    assert volume.at(mm[None], 0) == pytest.approx([1])
    assert volume.at(mm[None] + 500, 0) == pytest.approx([0])
    assert densest(volume) == pytest.approx(mm)


def test_what_the_page_draws_is_kept_in_the_folder(garden):
    background = nib.load(garden.output / "background.nii.gz")
    grey = np.asarray(background.dataobj)
    run_1 = np.asarray(nib.load(garden.output.parent / "maps" / "sub-1_run-1.nii.gz").dataobj)
    assert ((grey == 0) == (run_1 == 0)).all() and grey.max() == 255
    search = nib.load(garden.output / "masks" / "label-Arbor_desc-search_mask.nii.gz")
    inside = np.argwhere(np.asarray(search.dataobj)) @ search.affine[:3, :3].T
    distance = np.linalg.norm(inside + search.affine[:3, 3] - CENTRES["Arbor"], axis=1)
    assert distance.max() <= 24 and len(distance) > 200


def test_a_background_of_the_users_own(garden, tmp_path):
    folder = Path(shutil.copytree(garden.output.parent, tmp_path / "garden"))
    shutil.rmtree(folder / "results")
    anatomy = np.random.default_rng(1).uniform(1, 9, (13, 15, 12)).astype(np.float32)
    nib.save(nib.Nifti1Image(anatomy, np.diag([12.0, 12, 12, 1])), folder / "leaf.nii.gz")
    study = folder / "STUDY.toml"
    text = study.read_text()
    head, first = text.split("\n[[roi]]\n", 2)[:2]
    study.write_text(f"{head}\n[report]\nbackground = 'leaf.nii.gz'\n[[roi]]\n{first}")
    output = run_study(read_settings(study), record=False).output
    assert nib.load(output / "background.nii.gz").shape == (13, 15, 12)
    assert "leaf.nii.gz" in (output / "background.json").read_text()
    assert "Arbor_where" in write_report(output).read_text()
    study.write_text(study.read_text().replace("leaf.nii.gz", "fern.nii.gz"))
    with pytest.raises(InputError, match=r"no such file \(.*fern\.nii\.gz, .*line \d+"):
        read_settings(study)


# -- other studies --------------------------------------------------------------------------------


@pytest.mark.parametrize("own", [False, True])
def test_every_plan_has_a_page_on_one_grid_and_on_grids_of_their_own(own, tmp_path):
    study = World(4, own=own).write(tmp_path, "files")
    plans = [plan for plan in PLANS if plan.name in OTHERS and not (own and plan.group)]
    study.write_text(study_toml(plans, own))
    output = run_study(read_settings(study), record=False).output
    page = write_report(output).read_text(encoding="utf-8")
    for row in table(output / "roi_tests.tsv"):
        assert row["roi"] in page
    spread = [row["roi"] for row in table(output / "roi_tests.tsv") if row["parcel"] == "n/a"]
    for roi in spread:
        assert f'id="{roi}_where-figure_1"' in page, "slices of every region"
        assert (f"{roi} on grids of the subjects' own" in page) == own
    assert ("filled: the region, on each subject's own grid; 6 of 10 subjects" in page) == own
    assert ('id="Parts_where-figure_1"' in page) != own
    assert 'id="Parts_labels-figure_1"' in page and "Parts (3 labels)" in page
    assert len(list(output.glob("sub-*_background.nii.gz"))) == (6 if own else 0)
    if not own:
        assert "A narrower claim was declared: Same" in page and "No reason is stated." in page
        assert "A certificate was relied on: Sum" in page


def test_a_refused_run_has_a_page_with_the_leak_both_ways_and_the_fix(garden, tmp_path):
    folder = Path(shutil.copytree(garden.output.parent, tmp_path / "garden"))
    changed(
        folder / "STUDY.toml",
        'name = "CinderLook"\nplan = "exploratory"',
        'name = "CinderLook"\nplan = "exploratory"\ntest = "t"',
    )
    done = CliRunner().invoke(main, ["run", str(folder / "STUDY.toml"), "--quiet"])
    page = refused_page(folder / "results")
    assert done.exit_code == 3 and str(page) in done.output
    text = page.read_text(encoding="utf-8")
    seen = Seen(text).text
    assert "Refused before anything ran. 2 causes" in seen
    assert "garden.CinderLook.choose.mask_file" in seen
    assert "maps/sub-1_run-1.nii.gz" in seen
    assert "Choose the region without the tested data" in seen
    settings = read_settings(folder / "STUDY.toml")
    with pytest.raises(GuardRefused) as refused:
        run_study(settings, record=False)
    again = write_refused(refused.value, settings.output, settings.name, settings.variants)
    assert again.read_text(encoding="utf-8") == text
    record = json.loads((garden.output / "record.json").read_text())
    for meeting in record["meetings"]:
        meeting["allowed"] = meeting["verdict"] != "leak"
    assert touch_map(record).marks["leak"]


def test_the_page_of_a_refusal_says_what_a_mask_is_made_of_and_where_precision_was_lost(
    tmp_path, monkeypatch, quiet_engine
):
    monkeypatch.chdir(tmp_path)
    study = plant(
        tmp_path / "garden",
        {sub: np.full((3, 3, 3), ord(sub), np.float32) for sub in "abcd"},
        a_grid((3, 3, 3)),
        {"drawn": np.ones((3, 3, 3))},
        [Origin("a <drawing> of b", ("drawn.nii",), (Unit(sub="b"),))],
    )
    maps = paths_of(study)
    graph = running.workflow()
    pick = Node(running.called("def pick(all): return all[0]", all=maps[:2]), name="pick")
    for name, tested in (("drawn", maps[1:2]), ("picked", maps[1:3])):
        labels = [Path(path).stem.removeprefix("sub-") for path in tested]
        graph.add_nodes([Node(Extract(in_files=tested, labels=labels), name=name)])
    graph.get_node("drawn").inputs.mask_files = [str(study.root / "drawn.nii")]
    graph.connect([(pick, graph.get_node("picked"), [("out", "mask_files")])])
    with pytest.raises(GuardRefused) as refused:
        graph.run(plugin=GuardPlugin(study))
    seen = Seen(write_refused(refused.value, tmp_path / "results", "garden").read_text()).text
    assert "What it is made of: a <drawing> of b." in seen
    assert seen.count("What it is made of") == 1
    assert "Or it only seems so" in seen and seen.count("At w.pick") == 1
    assert "say so: contract(NODE" in seen
    meetings = record_of(refused.value)["meetings"]
    assert [one["made_of"] for one in meetings] == [["a <drawing> of b"], []]
    assert [[lost["node"] for lost in one["lost"]] for one in meetings] == [[], ["w.pick"]]


def test_the_page_is_there_with_the_results_or_neither_is(garden, tmp_path, monkeypatch):
    folder = Path(shutil.copytree(garden.output.parent, tmp_path / "garden"))
    study = folder / "STUDY.toml"
    head, *regions = study.read_text().split("\n[[roi]]\n")
    study.write_text("\n[[roi]]\n".join([head, regions[-1]]))
    (folder / "results" / "mark").write_text("earlier results")
    refusal = refused_page(folder / "results")
    refusal.write_text("an earlier refusal")

    def fails(folder: Path) -> None:
        assert (folder / "manifest.json").is_file() and folder != study.parent / "results"
        raise InputError("no room for figures")

    with monkeypatch.context() as patch:
        patch.setattr("sequester.workflows.report.page.write_report", fails)
        done = CliRunner().invoke(main, ["run", str(study), "--quiet"])
    assert done.exit_code == 2 and "no room for figures" in done.output
    assert (folder / "results" / "mark").is_file(), "earlier results are lost"

    done = CliRunner().invoke(main, ["run", str(study), "--quiet", "--no-page"])
    assert done.exit_code == 0, done.output
    assert not (folder / "results" / "report.html").exists()
    assert not refusal.exists(), "it no longer holds"
    done = CliRunner().invoke(main, ["run", str(study), "--quiet"])
    assert str(folder / "results" / "report.html") in done.output
    assert (folder / "results" / "report.html").is_file()


# -- in a notebook --------------------------------------------------------------------------------


def test_results_show_themselves_in_a_notebook(garden, monkeypatch):
    shown = garden._repr_html_()
    assert "ArborLook" in shown and "BIASED" in shown and "<script" not in shown
    biased = next(line for line in shown.split("<tr>") if "ArborLook" in line)
    assert biased.count("<td></td>") == 2, "neither interval nor p"
    verdicts = garden.findings._repr_html_()
    assert verdicts.count("<tr>") == 1 + len({finding.node for finding in garden.findings})
    assert "<td>garden.Arbor.extract</td><td>8</td><td>apart</td><td>subject</td>" in verdicts
    assert "leak (values marked biased)" in verdicts
    frame = garden.table("roi_values")
    assert set(frame["sub"]) == {str(i) for i in range(1, 9)}
    assert frame["value"].dtype == float
    monkeypatch.setitem(sys.modules, "pandas", None)
    rows = garden.table("roi_values")
    assert isinstance(rows, list) and len(rows) == len(frame)
    with pytest.raises(InputError, match=r"no such table.*roi_values"):
        garden.table("values")
