"""STUDY.toml: what may stand in it, what the errors say, and a study that can be moved."""

import csv
import json
import shutil
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner
from planting import files_in, save
from sequester.nodes.controlled import Controlled
from sequester.nodes.errors import InputError
from sequester.nodes.groupmaps import Missing
from sequester.nodes.masks import Cluster, Strongest, Threshold
from sequester.nodes.touch import Unit
from sequester.workflows.cli import main
from sequester.workflows.regions import Ball, MaskFile
from sequester.workflows.settings import read_settings

HEAD = """\
[study]
name = "kites"
table = "table.tsv"
"""
FOUND = """
[[roi]]
name = "Ridge"
plan = "leave-one-subject-out"
rule = { kind = "threshold", p = 0.01 }
"""
GIVEN = """
[[roi]]
name = "Vale"
plan = "a-priori"
region = { centre = [9, 12, 9], radius = 4, origin = "drawn for this test" }
"""
TABLE = "path\tsub\trun\ttask\tsuffix\tcontrast\texclude_reason\tage\n"


def row(path, sub, run="1", task="kites", contrast="gust", reason="n/a", age="30"):
    return f"{path}\t{sub}\t{run}\t{task}\tbold\t{contrast}\t{reason}\t{age}\n"


@pytest.fixture
def study(tmp_path):
    """Reads a study of four subjects from the text of a STUDY.toml and, if given, a table."""
    (tmp_path / "ridge.nii.gz").touch()

    def read(text, table=None):
        table = table or TABLE + "".join(row(f"{i}.nii", str(i)) for i in (2, 10, 1, 3))
        (tmp_path / "table.tsv").write_text(table)
        (tmp_path / "STUDY.toml").write_text(text)
        return read_settings(tmp_path / "STUDY.toml")

    return read


# -- what is read ---------------------------------------------------------------------------


def test_defaults(study, tmp_path):
    settings = study(HEAD + FOUND)
    assert (settings.name, settings.seed) == ("kites", 0)
    assert (settings.root, settings.output) == (tmp_path, tmp_path / "results")
    assert settings.maps.missing == Missing(zeros=True, min_fraction=0.8)
    (roi,) = settings.rois
    assert (roi.n_flips, roi.interval, roi.test) == (4999, "flips", "whole-procedure")
    assert (roi.procedure.tail, roi.procedure.on_empty) == ("positive", "empty")
    assert roi.names == ("Ridge", "leave-one-subject-out", "whole map")


def test_subjects_are_sorted_as_text_and_runs_within_them(study):
    table = TABLE + row("b.nii", "2", "2") + row("c.nii", "10", "1") + row("a.nii", "2", "1")
    settings = study(HEAD + GIVEN, table)
    found = settings.rois[0].tested.subjects
    assert [(label, [r.path for r in runs]) for label, runs in found] == [
        ("10", ["c.nii"]),
        ("2", ["a.nii", "b.nii"]),
    ]


@pytest.mark.parametrize(
    ("text", "rule"),
    [
        ('{ kind = "threshold", height = 3.1 }', Threshold(height=3.1)),
        ('{ kind = "threshold", p = 0.01 }', Threshold(p=0.01)),
        ('{ kind = "strongest", k = 50 }', Strongest(50)),
        ('{ kind = "cluster", p = 0.001 }', Cluster(p=0.001, connectivity=18, min_size=1)),
        (
            '{ kind = "cluster", height = 4, connectivity = 26, min_size = 10, pick = "nearest", '
            "near = [1, -2.5, 3] }",
            Cluster(4, None, 26, 10, "nearest", (1.0, -2.5, 3.0)),
        ),
        (
            '{ kind = "threshold", control = "bonferroni" }',
            Threshold(control=Controlled("bonferroni", 0.05, 999, 7)),
        ),
        (
            '{ kind = "cluster", p = 0.01, extent = "max-cluster", level = 0.1, flips = 49 }',
            Cluster(p=0.01, extent=Controlled("max-cluster", 0.1, 49, 7)),
        ),
    ],
)
def test_rules(study, text, rule):
    settings = study(HEAD + "seed = 7\n" + FOUND.replace('{ kind = "threshold", p = 0.01 }', text))
    assert settings.rois[0].procedure.rule == rule


def test_regions_and_their_origins(study):
    text = HEAD + GIVEN + FOUND
    text += 'search = { mask = "ridge.nii.gz", origin = "an atlas", derived_from = [{sub="1"}] }\n'
    settings = study(text)
    assert settings.rois[0].region == Ball("drawn for this test", (), "", (9.0, 12.0, 9.0), 4.0)
    derived = (Unit(sub="1"),)
    assert settings.rois[1].region == MaskFile("an atlas", derived, "", "ridge.nii.gz")
    atlas = settings.study.origins[1]
    assert (atlas.source, atlas.files) == ("an atlas", ("ridge.nii.gz",))
    assert atlas.derived_from == (Unit(sub="1"),)
    touch = settings.study.touch_of("ridge.nii.gz")
    assert settings.study.table.describe(touch.values) == "sub-1_task-kites_run-1_bold"


def test_origins_in_bulk(study, tmp_path):
    (tmp_path / "parcels").mkdir()
    for name in ("b.nii", "a.nii", "c.txt"):
        (tmp_path / "parcels" / name).touch()
    text = '\n[[origin]]\nsource = "an atlas"\nfiles = ["parcels/*.nii"]\n'
    (origin,) = study(HEAD + FOUND + text).study.origins
    assert origin.files == ("parcels/a.nii", "parcels/b.nii")
    assert study(HEAD + FOUND + text).study.touch_of("parcels/c.txt").unknown == {"parcels/c.txt"}


def test_selection_of_rows(study):
    table = TABLE
    for sub in ("1", "2", "3"):
        table += row(f"{sub}g.nii", sub, contrast="gust", age="31" if sub == "1" else "45")
        table += row(f"{sub}l.nii", sub, contrast="lull")
    data = '\n[data]\nselect = {{ contrast = "{}"{} }}\n'
    settings = study(HEAD + data.format("lull", "") + GIVEN, table)
    found = settings.rois[0].tested.subjects
    assert [r.path for _, runs in found for r in runs] == ["1l.nii", "2l.nii", "3l.nii"]
    settings = study(HEAD + data.format("gust", ', sub = ["1", "3"]') + GIVEN, table)
    assert [label for label, _ in settings.rois[0].tested.subjects] == ["1", "3"]
    settings = study(HEAD + data.format("gust", ", age = 45") + GIVEN, table)
    assert [label for label, _ in settings.rois[0].tested.subjects] == ["2", "3"]


# -- what is refused ------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "missing key 'study' (STUDY)"),
        ('[study]\nname = "kites"\n' + FOUND, "missing key 'table' (STUDY)"),
        (HEAD, "missing key 'roi' (STUDY)"),
        ("roi = []\n" + HEAD, "no [[roi]] (STUDY): state at least one"),
        ("roi = [1]\n" + HEAD, "roi"),
        ("origin = [1]\n" + HEAD + FOUND, "origin"),
        (HEAD + FOUND + "\n[rio]\n", "unknown key 'rio' (STUDY, line 10): expected one of "),
        (
            HEAD + 'seed = "3"\n' + FOUND,
            "seed has the wrong type (STUDY, line 4): expected a whole number, without quotes, ",
        ),
        (
            HEAD + "seed = true\n" + FOUND,
            "seed has the wrong type (STUDY, line 4): expected a whole number, without quotes, ",
        ),
        (
            HEAD.replace("kites", "my kites") + FOUND,
            "name is no label (STUDY, line 2): expected letters and digits only, got 'my kites'",
        ),
        (
            HEAD + FOUND.replace("Ridge", "../Ridge"),
            "name is no label (STUDY, line 6): expected letters and digits only, got '../Ridge'",
        ),
        (
            HEAD + FOUND + FOUND.replace("Ridge", "rIDGE"),
            "two [[roi]] of one name (STUDY, line 11): ",
        ),
        (
            HEAD + FOUND.replace("leave-one-subject-out", "leave-some-out"),
            "unknown plan (STUDY, line 7): expected one of leave-one-subject-out, k-fold, "
            "split-half, given-folds, leave-one-run-out, split-half-runs, localizer, "
            "orthogonal-contrast, a-priori, exploratory, got 'leave-some-out'",
        ),
        (
            HEAD + FOUND.replace("threshold", "hull"),
            "unknown kind (STUDY, line 8): expected one of threshold, strongest, cluster, peak-sp",
        ),
        (
            HEAD + FOUND.replace("p = 0.01", "p = 0.01, min_size = 3"),
            "key 'min_size' does not go with rule kind 'threshold' (STUDY, line 8): expected one "
            "of control, flips, height, level, p",
        ),
        (
            HEAD + FOUND.replace("p = 0.01", "p = 0.01, height = 3"),
            "a threshold needs exactly one of height, p and control",
        ),
        (HEAD + FOUND.replace("0.01", "0.6"), "p out of range"),
        (HEAD + FOUND.replace("p = 0.01", "hight = 3"), "unknown key 'hight' in rule (STUDY, line"),
        (
            HEAD + FOUND + 'on_empty = "strongest"\n',
            'on_empty = "strongest" and k go together (STUDY, line 8, roi Ridge): got on_empty',
        ),
        (HEAD + FOUND + 'on_empty = "smallest"\n', "unknown on_empty (STUDY, line 9)"),
        (HEAD + FOUND + 'tail = "both"\n', "unknown tail (STUDY, line 9)"),
        (
            HEAD + FOUND + 'value = "weighted"\n',
            "value = \"weighted\" does not go with plan 'leave-one-subject-out' (STUDY, line 9)",
        ),
        (HEAD + FOUND + 'interval = "bootstrap"\n', "unknown interval (STUDY, line 9)"),
        (HEAD + FOUND + "flips = 9.5\n", "flips has the wrong type (STUDY, line 9): expected a w"),
        (
            HEAD + FOUND + 'region = { mask = "ridge.nii.gz", origin = "an atlas" }\n',
            "key 'region' does not go with plan 'leave-one-subject-out' (STUDY, line 9)",
        ),
        (HEAD + GIVEN + "flips = 99\n", "key 'flips' does not go with plan 'a-priori'"),
        (HEAD + GIVEN + 'test = "whole-procedure"\n', "unknown test (STUDY, line 9): expected on"),
        (
            HEAD + GIVEN.replace("centre = [9, 12, 9], radius = 4, ", ""),
            "region needs exactly one of mask, centre, atlas, union, intersection, difference (",
        ),
        (
            HEAD + GIVEN.replace("radius = 4", 'radius = 4, mask = "ridge.nii.gz"'),
            "region needs exactly one of mask, centre, atlas, union, intersection, difference (",
        ),
        (HEAD + GIVEN.replace("[9, 12, 9]", "[9, 12]"), "centre is no coordinate (STUDY, line 8)"),
        (HEAD + GIVEN.replace("[9, 12, 9]", "[9, true, 9]"), "centre is no coordinate (STUDY, lin"),
        (HEAD + GIVEN.replace("[9, 12, 9]", "[9, nan, 9]"), "centre is no coordinate (STUDY, line"),
        (
            HEAD + GIVEN.replace("radius = 4, ", ""),
            "missing key 'radius' in centre (STUDY, line 8)",
        ),
        (
            HEAD + GIVEN.replace(', origin = "drawn for this test"', ""),
            "region without an origin (STUDY, line 8): state where it comes from",
        ),
        (
            HEAD + GIVEN.replace("}", ", derived_from = [{ subject = '1' }] }"),
            "unknown key 'subject' in derived_from (STUDY, line 8): expected one of acq, ce, dir",
        ),
        (HEAD + GIVEN.replace("}", ", derived_from = [1] }"), "derived_from"),
        (
            HEAD + FOUND + '\n[[origin]]\nsource = "an atlas"\nfiles = ["parcels/*.nii"]\n',
            "origin names no file (STUDY, line 12): ",
        ),
        (
            HEAD + FOUND + '\n[[origin]]\nsource = "an atlas"\nfiles = ["/parcels/*.nii"]\n',
            "'/parcels/*.nii'",
        ),
        (HEAD + FOUND + '\n[[origin]]\nsource = "an atlas"\nfiles = [""]\n', "(STUDY, line 12)"),
        (
            HEAD + FOUND + '\n[[origin]]\nfiles = ["*.gz"]\n',
            "missing key 'source' in origin (STUDY, line 10)",
        ),
        (
            HEAD + "\n[data]\nmin_fraction = 1.5\n" + FOUND,
            "min_fraction out of range (STUDY, line 6): expected 0 < min_fraction <= 1, got 1.5",
        ),
        (
            HEAD + "\n[data]\nmin_coverage = 1.5\n" + FOUND,
            "min_coverage out of range (STUDY, line 6): expected 0 to 1, a share of t",
        ),
        (
            HEAD + "\n[data]\nmin_coverage = -0.1\n" + FOUND,
            "min_coverage out of range (STUDY, line 6): expected 0 to 1, a share of t",
        ),
        (
            HEAD + "\n[data]\nselect = { mood = 'calm' }\n" + FOUND,
            "unknown column 'mood' (STUDY, line 6): expected a column of the study table: path, s",
        ),
    ],
)
def test_study_file_that_does_not_do(study, tmp_path, text, message):
    with pytest.raises(InputError) as told:
        study(text)
    assert message.replace("STUDY", str(tmp_path / "STUDY.toml"), 1) in str(told.value)


def test_line_of_a_fault_is_that_of_the_region_at_fault(study, tmp_path):
    """A key that stands in every region is at fault in one of them."""
    text = HEAD + FOUND + FOUND.replace('"Ridge"', '"Sea gap"')
    with pytest.raises(InputError) as told:
        study(text)
    assert f"name is no label ({tmp_path / 'STUDY.toml'}, line 11)" in str(told.value)


@pytest.mark.parametrize(
    ("rows", "message"),
    [
        (
            [("a.nii", "1"), ("b.nii", "2", "1", "kites", "lull")],
            "several contrasts selected (STUDY, line DATA): got gust, lull; name one",
        ),
        (
            [("a.nii", "1"), ("b.nii", "1", "2", "gliders")],
            "maps of sub-1 differ in task (STUDY, line 8): got 'kites' and 'gliders'; only ru",
        ),
        (
            [("a.nii", "1"), ("b.nii", "1")],
            "sub-1 has several maps of one run (STUDY, line 8): got a.nii (line 2 of the tabl",
        ),
    ],
)
def test_rows_that_do_not_fit_together(study, tmp_path, rows, message):
    with pytest.raises(InputError) as told:
        study(HEAD + "\n[data]\nmin_fraction = 1\n" + GIVEN, TABLE + "".join(row(*r) for r in rows))
    expected = message.replace("STUDY", str(tmp_path / "STUDY.toml")).replace("DATA", "5")
    assert expected in str(told.value)


def test_volumes_of_which_nobody_has_said_what_they_hold(study, tmp_path):
    table = "path\tvolume\tsub\tcontrast\nmaps.nii\t0\t1\tn/a\nmaps.nii\t1\t1\tn/a\n"
    with pytest.raises(InputError, match=r"maps of one run.*fill the contrast column of the table"):
        study(HEAD + GIVEN, table)


def test_a_group_is_written_as_the_table_does(study, tmp_path):
    text = 'compare = { column = "task", first = "Kites", second = "gliders" }\n'
    table = TABLE + "".join(row(f"{i}.nii", f"{i}", "1", ("kites", "gliders")[i % 2])
                            for i in range(8))  # fmt: skip
    study(HEAD + FOUND.replace("0.01", "0.1") + text.replace("K", "k"), table)
    with pytest.raises(InputError) as told:
        study(HEAD + FOUND + text, table)
    assert str(told.value) == (
        f"compare names a group of nobody ({tmp_path / 'STUDY.toml'}, line 9): expected what "
        "stands in column task: 'gliders', 'kites', got 'Kites'; write it as the table does: "
        "capitals count"
    )


def test_a_region_may_subtract_nothing_where_the_others_do(study):
    table = TABLE + "".join(
        row(f"{i}{contrast}.nii", str(i), contrast=contrast)
        for i in range(1, 5)
        for contrast in ("gust", "lull")
    )
    data = '\n[data]\nselect = { contrast = "gust" }\nminus = { contrast = "lull" }\n'
    both, plain = study(HEAD + data + GIVEN + FOUND + "minus = {}\n", table).rois
    assert (len(both.tested.minus), len(plain.tested.minus)) == (4, 0)
    with pytest.raises(InputError, match="minus selects the very maps"):
        study(HEAD + data.replace('{ contrast = "lull" }', "{}") + GIVEN, table)


def test_a_byte_order_mark_before_the_study_file_is_none_of_its_text(study, tmp_path):
    plain = study(HEAD + GIVEN)
    (tmp_path / "STUDY.toml").write_text("\ufeff" + HEAD + GIVEN, encoding="utf-8")
    marked = read_settings(tmp_path / "STUDY.toml")
    assert (marked.text, marked.rois) == (plain.text, plain.rois)


# -- run ------------------------------------------------------------------------------------

RUN = HEAD + FOUND.replace("0.01", "0.1") + 'search = { mask = "in/ridge.nii.gz", origin = "x" }\n'
RUN += "flips = 49\n" + GIVEN


@pytest.fixture(scope="module")
def analysed(tmp_path_factory):
    """A study of 7 subjects, one left out, that was run once."""
    folder = tmp_path_factory.mktemp("settings") / "study"
    rng, table = np.random.default_rng(2), TABLE
    for i in range(1, 8):
        data = rng.standard_normal((7, 8, 6)).astype(np.float32) + np.float32(0.5)
        save(folder / "in" / f"{i}.nii.gz", data)
        reason = "moved more than 3 mm" if i == 4 else "n/a"
        table += row(f"in/{i}.nii.gz", f"{i:02d}", reason=reason)
    mask = np.ones((7, 8, 6), np.uint8)
    save(folder / "in" / "ridge.nii.gz", mask)
    (folder / "table.tsv").write_text(table)
    (folder / "STUDY.toml").write_text(RUN)
    run(folder / "STUDY.toml")
    return folder


def run(path):
    done = CliRunner().invoke(main, ["run", str(path), "-q"])
    assert done.exit_code == 0, done.output
    return done


def test_study_that_is_moved_gives_the_same_bytes(analysed, tmp_path):
    moved = Path(shutil.copytree(analysed, tmp_path / "elsewhere" / "under another name"))
    shutil.rmtree(moved / "results")
    run(moved / "STUDY.toml")
    assert files_in(moved / "results") == files_in(analysed / "results")


def test_study_that_is_run_from_its_own_folder_gives_the_same_bytes(
    analysed, tmp_path, monkeypatch
):
    moved = Path(shutil.copytree(analysed, tmp_path / "study"))
    shutil.rmtree(moved / "results")
    monkeypatch.chdir(moved)
    run("STUDY.toml")
    assert files_in(moved / "results") == files_in(analysed / "results")
    assert Path.cwd() == moved, "the engine's change of folder was not undone"


def test_no_path_of_this_machine_is_recorded(analysed):
    here = str(analysed.parent).encode()
    for name, data in files_in(analysed / "results").items():
        assert here not in data, name


def test_rows_left_out_are_recorded(analysed):
    manifest = json.loads((analysed / "results" / "manifest.json").read_text())
    assert manifest["left_out"] == {"in/4.nii.gz": "moved more than 3 mm"}
    assert sorted(manifest["inputs"]) == [
        *(f"in/{i}.nii.gz" for i in (1, 2, 3, 5, 6, 7)),
        "in/ridge.nii.gz",
    ]
    with (analysed / "results" / "roi_values.tsv").open() as stream:
        found = {(r["roi"], r["sub"]) for r in csv.DictReader(stream, delimiter="\t")}
    subjects = ("01", "02", "03", "05", "06", "07")
    assert found == {(roi, sub) for roi in ("Ridge", "Vale") for sub in subjects}
    said = run(analysed / "STUDY.toml").stdout
    assert "1 map left out (sub-04; reasons in manifest.json)" in said


def test_row_left_out_may_lack_its_file(analysed, tmp_path):
    """A subject who was never measured can stand in the table with the reason."""
    study = Path(shutil.copytree(analysed, tmp_path / "study"))
    (study / "in" / "4.nii.gz").unlink()
    shutil.rmtree(study / "results")
    run(study / "STUDY.toml")
    assert files_in(study / "results") == files_in(analysed / "results")
