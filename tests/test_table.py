"""`sequester table`: rows from BIDS-derivative names, from a pattern, from 4-D files and links."""

import csv
import errno
import json
import os
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from click.testing import CliRunner
from sequester.nodes.errors import InputError
from sequester.nodes.images import write_bytes
from sequester.nodes.touch import Unit
from sequester.workflows.cli import main
from sequester.workflows.settings import read_settings
from sequester.workflows.study import COLUMNS, read_table, table_text
from sequester.workflows.table import rows_from


def make(folder, *names, shape=(2, 2, 2)):
    """Maps of these names below a folder."""
    for name in names:
        path = folder / name
        path.parent.mkdir(parents=True, exist_ok=True)
        nib.save(nib.Nifti1Image(np.ones(shape, np.float32), np.eye(4)), path)


def table(*arguments):
    done = CliRunner().invoke(main, ["table", *map(str, arguments)])
    assert done.exception is None or isinstance(done.exception, SystemExit), done.exception
    return done


def rows(text):
    return list(csv.DictReader(text.splitlines(), delimiter="\t"))


# -- names of BIDS derivatives --------------------------------------------------------------


def test_entities_of_bids_names(tmp_path):
    make(
        tmp_path,
        "sub-01/func/sub-01_task-kites_run-2_contrast-gust_stat-effect_statmap.nii.gz",
        "sub-2b/ses-1/sub-2b_ses-1_task-kites_acq-hi_dir-AP_rec-n_run-02_contrast-lull_"
        "stat-effect_statmap.nii",
    )
    done = table(tmp_path, "--output", tmp_path / "table.tsv")
    assert done.stdout == f"2 maps of 2 subjects written to {tmp_path / 'table.tsv'}\n"
    text = (tmp_path / "table.tsv").read_text()
    assert text.splitlines()[0].split("\t") == list(COLUMNS)
    first, second = rows(text)
    plain = dict.fromkeys(COLUMNS, "n/a") | {"task": "kites", "suffix": "bold"}
    assert first == plain | {
        "path": "sub-01/func/sub-01_task-kites_run-2_contrast-gust_stat-effect_statmap.nii.gz",
        "sub": "01",
        "run": "2",
        "contrast": "gust",
    }
    assert second == plain | {
        "path": second["path"],
        "sub": "2b",
        "ses": "1",
        "acq": "hi",
        "dir": "AP",
        "rec": "n",
        "run": "02",
        "contrast": "lull",
    }


def test_labels_are_text(tmp_path):
    make(tmp_path, "sub-01_run-1_statmap.nii", "sub-1_run-01_statmap.nii")
    units = [row.unit for row in rows_from(tmp_path)]
    assert units == [
        Unit(sub="01", run="1", suffix="bold"),
        Unit(sub="1", run="01", suffix="bold"),
    ]


def test_contrast_agent_is_kept(tmp_path):
    """`ce` is an entity of a data unit: maps that differ in nothing else stay two units."""
    make(tmp_path, "sub-01_ce-a_statmap.nii", "sub-01_ce-b_statmap.nii")
    table(tmp_path, "--output", tmp_path / "table.tsv")
    units = {row.unit.ce for row in read_table(tmp_path / "table.tsv").rows}
    assert units == {"a", "b"}


def test_what_is_no_effect_map_is_left_alone(tmp_path):
    make(
        tmp_path,
        "sub-01_stat-effect_statmap.nii",
        "sub-01_stat-variance_statmap.nii",
        "sub-01_stat-z_statmap.nii",
        "sub-01_desc-brain_mask.nii",
        "sub-01_label-GM_probseg.nii",
        "group_statmap.nii",
        "sub-01_statmap/T1w.nii",
        ".sub-01_stat-effect_statmap.nii",
    )
    (tmp_path / "sub-01_stat-effect_statmap.json").write_text("{}")
    assert [row.path for row in rows_from(tmp_path)] == ["sub-01_stat-effect_statmap.nii"]


def test_maps_that_name_no_statistic_are_taken_when_no_other_does(tmp_path):
    make(tmp_path, "sub-01_effect.nii", "sub-01_stat-z_statmap.nii", "sub-01_desc-brain_mask.nii")
    assert [row.path for row in rows_from(tmp_path)] == [
        "sub-01_effect.nii",
        "sub-01_stat-z_statmap.nii",
    ]


def test_suffix_is_that_of_what_was_acquired(tmp_path):
    make(tmp_path, "sub-01_statmap.nii")
    assert rows(table(tmp_path).stdout)[0]["suffix"] == "bold"
    assert rows(table(tmp_path, "--suffix", "T1w").stdout)[0]["suffix"] == "T1w"


def test_nothing_found(tmp_path):
    make(tmp_path, "one.nii", "two.nii")
    done = table(tmp_path)
    assert done.exit_code == 2
    assert done.stderr == (
        f"sequester: no effect map found ({tmp_path}): expected names such as "
        "sub-01_task-x_contrast-y_stat-effect_statmap.nii.gz, got 2 NIfTI files, such as one.nii; "
        'give --pattern, such as "sub-{sub}/map.nii.gz"\n'
    )


# -- a pattern ------------------------------------------------------------------------------


def test_fields_of_a_pattern(tmp_path):
    make(tmp_path, "s01/r1_gust.nii.gz", "s01/r2_gust.nii.gz", "s02/r1_lull.nii.gz", "s03/x.nii.gz")
    found = rows(table(tmp_path, "--pattern", "s{sub}/r{run}_{contrast}.nii.gz").stdout)
    assert [(r["sub"], r["run"], r["contrast"]) for r in found] == [
        ("01", "1", "gust"),
        ("01", "2", "gust"),
        ("02", "1", "lull"),
    ]


def test_star_matches_within_a_name_only(tmp_path):
    make(tmp_path, "01/kite_a.nii", "01/deep/kite_b.nii", "02/kite.nii", "02/.kite.nii")
    found = rows_from(tmp_path, "{sub}/*.nii")
    assert [row.path for row in found] == ["01/kite_a.nii", "02/kite.nii"]


def test_field_named_twice_reads_the_same_twice(tmp_path):
    make(tmp_path, "sub-01/sub-01_map.nii", "sub-02/sub-01_map.nii")
    found = rows_from(tmp_path, "sub-{sub}/sub-{sub}_map.nii")
    assert [row.path for row in found] == ["sub-01/sub-01_map.nii"]


def test_signs_in_a_pattern_are_themselves(tmp_path):
    make(tmp_path, "01/map+(1).nii", "01/mapp1.nii", "02/mapXnii.nii")
    found = rows_from(tmp_path, "{sub}/map+(1).nii")
    assert [row.path for row in found] == ["01/map+(1).nii"]


@pytest.mark.parametrize(
    ("pattern", "message"),
    [
        ("map_{subject}.nii", "unknown field in the pattern (map_{subject}.nii): expected one of"),
        ("map.nii", "pattern without {sub} (map.nii)"),
        ("{sub}.nii.gz", "no effect map found (FOLDER): expected {sub}.nii.gz, got 1 NIfTI files"),
    ],
)
def test_pattern_that_does_not_do(tmp_path, pattern, message):
    make(tmp_path, "map_01.nii")
    done = table(tmp_path, "--pattern", pattern)
    assert done.exit_code == 2
    (line,) = done.stderr.splitlines()
    assert line.startswith("sequester: " + message.replace("FOLDER", str(tmp_path)))


# -- volumes and links ----------------------------------------------------------------------


def test_4d_file_has_a_row_per_volume(tmp_path):
    make(tmp_path, "sub-01_statmap.nii.gz", shape=(2, 2, 2, 11))
    make(tmp_path, "sub-02_statmap.nii.gz", shape=(2, 2, 2, 1))
    found = rows(table(tmp_path).stdout)
    assert [r["volume"] for r in found] == [*map(str, range(11)), "n/a"]
    assert [r["sub"] for r in found] == ["01"] * 11 + ["02"]


def test_damaged_file(tmp_path):
    make(tmp_path, "sub-01_statmap.nii.gz")
    (tmp_path / "sub-02_statmap.nii.gz").write_text("a map")
    done = table(tmp_path)
    assert done.exit_code == 2
    assert f"unreadable image ({tmp_path / 'sub-02_statmap.nii.gz'})" in done.stderr


def test_linked_trees_and_files(tmp_path):
    store, tree = tmp_path / "store", tmp_path / "tree"
    make(store, "7f3a.nii", "deep/sub-02_statmap.nii")
    tree.mkdir()
    (tree / "sub-01_statmap.nii").symlink_to(store / "7f3a.nii")
    (tree / "linked").symlink_to(store / "deep", target_is_directory=True)
    # Named as the links name them: what they point to is somebody else's order.
    assert [row.path for row in rows_from(tree)] == [
        "linked/sub-02_statmap.nii",
        "sub-01_statmap.nii",
    ]


def test_broken_link_stays_in_the_table(tmp_path):
    """The run will say that it is not fetched; a row that vanished would say nothing."""
    (tmp_path / "sub-01_statmap.nii").symlink_to("annex/7f3a")
    (row,) = rows_from(tmp_path)
    assert (row.unit.sub, row.volume) == ("01", None)


def test_link_to_a_folder_above_does_not_repeat_its_maps(tmp_path):
    make(tmp_path, "sub-01_statmap.nii")
    (tmp_path / "all").symlink_to(tmp_path, target_is_directory=True)
    assert [row.path for row in rows_from(tmp_path)] == ["sub-01_statmap.nii"]


def test_order_of_the_file_system_does_not_matter(tmp_path, monkeypatch):
    make(tmp_path / "a", "sub-01_statmap.nii")
    make(tmp_path / "b", "sub-02_statmap.nii")
    (tmp_path / "a" / "other").symlink_to(tmp_path / "b", target_is_directory=True)
    walk, found = os.walk, []
    for reverse in (False, True):

        def ordered(folder, followlinks, reverse=reverse):
            for root, folders, names in walk(folder, followlinks=followlinks):
                folders.sort(reverse=reverse)
                yield root, folders, names

        monkeypatch.setattr(os, "walk", ordered)
        found.append([row.path for row in rows_from(tmp_path)])
    assert found[0] == found[1]
    assert "b/sub-02_statmap.nii" in found[0]


# -- where it is written --------------------------------------------------------------------


def test_paths_are_relative_to_the_table(tmp_path):
    make(tmp_path / "maps", "sub-01_statmap.nii")
    (tmp_path / "lists").mkdir()
    done = table(tmp_path / "maps", "--output", tmp_path / "lists" / "table.tsv")
    assert done.exit_code == 0
    (row,) = read_table(tmp_path / "lists" / "table.tsv").rows
    assert row.path == "../maps/sub-01_statmap.nii"


def test_paths_on_standard_output_are_relative_to_the_current_folder(tmp_path, monkeypatch):
    make(tmp_path / "maps", "sub-01_statmap.nii")
    monkeypatch.chdir(tmp_path)
    assert rows(table("maps").stdout)[0]["path"] == "maps/sub-01_statmap.nii"


def test_table_that_exists_is_kept(tmp_path):
    make(tmp_path, "sub-01_statmap.nii")
    (tmp_path / "table.tsv").write_text("edited by hand")
    done = table(tmp_path, "--output", tmp_path / "table.tsv")
    assert done.exit_code == 2
    assert f"table exists already ({tmp_path / 'table.tsv'}): remove it" in done.stderr
    assert (tmp_path / "table.tsv").read_text() == "edited by hand"


def test_table_in_a_folder_that_is_not_there(tmp_path):
    make(tmp_path, "sub-01_statmap.nii")
    done = table(tmp_path, "--output", tmp_path / "lists" / "table.tsv")
    assert done.exit_code == 2
    (line,) = done.stderr.splitlines()
    assert line.startswith("sequester: ") and "lists" in line


def test_table_on_a_full_disk(tmp_path, monkeypatch):
    make(tmp_path, "sub-01_statmap.nii")

    def full(self, blob):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(Path, "write_bytes", full)
    done = table(tmp_path, "--output", tmp_path / "table.tsv")
    assert done.exit_code == 2
    (line,) = done.stderr.splitlines()
    assert line.startswith("sequester: ") and "No space left on device" in line
    assert not (tmp_path / "table.tsv").exists()


def test_json(tmp_path):
    make(tmp_path, "sub-01_run-1_statmap.nii", "sub-01_run-2_statmap.nii", "sub-02_statmap.nii")
    done = table(tmp_path, "--json", "--output", tmp_path / "table.tsv")
    expected = {"maps": 3, "subjects": 2, "output": str(tmp_path / "table.tsv")}
    assert json.loads(done.stdout) == expected
    done = table(tmp_path / "none", "--json")
    assert done.exit_code == 2
    assert json.loads(done.stdout) == {
        "error": f"no such folder ({tmp_path / 'none'}): "
        "name the folder that holds the effect maps",
        "exit_code": 2,
    }


# -- read back ------------------------------------------------------------------------------


def test_what_is_written_is_read_back(tmp_path):
    make(
        tmp_path,
        "sub-01_task-kites_run-1_contrast-gust_statmap.nii",
        "sub-02_ses-a_contrast-gust_statmap.nii",
    )
    made = rows_from(tmp_path)
    write_bytes(tmp_path / "table.tsv", table_text(made).encode())
    study = read_table(tmp_path / "table.tsv")
    assert [(r.path, r.volume, r.unit, r.contrast) for r in study.rows] == [
        (r.path, r.volume, r.unit, r.contrast) for r in made
    ]
    assert [r.line for r in study.rows] == [2, 3]


def test_columns_of_our_own_are_covariates(tmp_path):
    path = tmp_path / "table.tsv"
    path.write_text("sub\tage\tpath\n01\t31\ta.nii\n02\tn/a\tb.nii\n")
    one, two = read_table(path).rows
    assert (one.column("age"), two.column("age")) == ("31", "")
    assert one.extra == (("age", "31"),)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "empty study table (TABLE)"),
        ("path\tsub\tsub\na\t1\t1\n", "column named twice (TABLE): got sub"),
        ("path\trun\na\t1\n", "study table without a sub column (TABLE): expected tab-separated"),
        ("path\tsub\nn/a\t1\n", "row without a path or a sub (TABLE, line 2)"),
        ("path\tsub\na\t1\n\nb\n", "row of another length (TABLE, line 4): expected 2 tab-sep"),
        ("path\tsub\tvolume\na\t1\t-1\n", "volume is no number (TABLE, line 2): expected 0, 1"),
        ("path\tsub\tvolume\na\t1\t²\n", "volume is no number (TABLE, line 2): expected 0, 1"),
        (
            "path\tsub\texchange\na\t1\t2\nb\t2\tn/a\nc\t3\t2\n",
            "the exchange value '2' is the label of another subject (TABLE): got on sub-1 (line "
            "2), and sub-2 has none (line 3)",
        ),
        (
            "path\tsub\texchange\na\t1\t2\nb\t2\tx\n",
            "the exchange value '2' is the label of another subject",
        ),
        (
            "path\tsub\texchange\na\t1\tx\nb\t1\ty\n",
            "sub-1 has two exchange values (TABLE): got 'x' (line 2) and 'y' (line 3)",
        ),
        ("path\tsub\na\t1\na\t2\n", "the same map on two rows (TABLE, lines 2 and 3): got a"),
        (b"path\tsub\n\xff\xfe\t1\n", "TABLE"),
    ],
)
def test_table_that_does_not_do(tmp_path, text, message):
    path = tmp_path / "table.tsv"
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    with pytest.raises(InputError) as told:
        read_table(path)
    assert message.replace("TABLE", str(path)) in str(told.value)


def test_byte_order_mark_and_line_ends_of_other_programs(tmp_path):
    path = tmp_path / "table.tsv"
    path.write_bytes("\ufeffpath\tsub\r\na.nii\t01\r\n".encode())
    (row,) = read_table(path).rows
    assert (row.path, row.unit.sub) == ("a.nii", "01")


def test_a_cell_without_anything_is_blank_however_it_is_padded(tmp_path):
    path = tmp_path / "table.tsv"
    path.write_text("path\tsub\trun\ttask\texclude_reason\n a.nii\t01 \t n/a \t  \tn/a \n")
    (row,) = read_table(path).rows
    assert (row.path, row.unit.sub, row.unit.run, row.unit.task) == ("a.nii", "01", "", "")
    assert row.exclude_reason == ""


def test_rows_that_share_an_exchange_value_are_one_person(tmp_path):
    path = tmp_path / "table.tsv"
    path.write_text("path\tsub\texchange\na\t1\t1\nb\t2\t1\nc\t3\tn/a\n")
    study = read_table(path)  # named after the first of them
    assert study.table.people_of(study.table.everything) == {"1", "3"}
    path.write_text("path\tsub\texchange\na\t1\ttwins\nb\t2\ttwins\nc\t3\tn/a\n")
    assert [row.person for row in read_table(path).rows] == ["twins", "twins", "3"]


def test_columns_of_a_participants_table(tmp_path):
    names = [f"maps/sub-{sub}_stat-effect_statmap.nii.gz" for sub in ("01", "02")]
    make(tmp_path, *names)
    listed = tmp_path / "participants.tsv"
    listed.write_text(
        "participant_id\tgroup\texclude_reason\nsub-02\tpond\tmoved\nsub-01\thill\tn/a\n"
        "sub-03\thill\tn/a\n"
    )
    output = tmp_path / "table.tsv"
    done = table(tmp_path / "maps", "--participants", listed, "--output", output)
    assert done.exit_code == 0, done.output
    study = read_table(output)
    found = [(r.unit.sub, r.column("group"), r.exclude_reason) for r in study.rows]
    assert found == [("01", "hill", ""), ("02", "pond", "moved")]
    listed.write_text("participant_id\tgroup\nsub-01\thill\n")
    done = table(tmp_path / "maps", "--participants", listed)
    assert done.exit_code == 2
    assert "subjects without a line in the participants table" in done.stderr
    assert "sub-02" in done.stderr


@pytest.mark.parametrize(
    ("text", "told"),
    [
        (
            "participant_id\tage\nsub-01\t31\nsub-02\t40\n01\t32\n",
            "two lines of one subject that differ (LISTED, lines 2 and 4): expected one line for "
            "each subject, got sub-01 with age '31' and '32'",
        ),
        (
            "participant_id\tage\nsub-01\t31\nsub-02\n",
            "row of another length (LISTED, line 3): expected 2 tab-separated cells, got 1",
        ),
        (
            "participant_id\tage\trun\tspace\nsub-01\t31\t1\tx\n",
            "columns of the participants table with names that are taken (LISTED): expected names "
            "that say something of subjects, each once, got run, space",
        ),
        (
            "participant_id\tage\tage\nsub-01\t31\t1\n",
            "names that are taken (LISTED): expected names that say something of subjects, each "
            "once, got age",
        ),
        (None, "no such participants table (LISTED): check the path"),
    ],
)
def test_participants_table_that_does_not_do(tmp_path, text, told):
    make(tmp_path, *(f"maps/sub-{sub}_stat-effect_statmap.nii" for sub in ("01", "02")))
    listed, output = tmp_path / "participants.tsv", tmp_path / "table.tsv"
    if text is not None:
        listed.write_text(text)
    done = table(tmp_path / "maps", "--participants", listed, "--output", output)
    assert done.exit_code == 2
    assert told.replace("LISTED", str(listed)) in done.stderr
    assert not output.exists()


def test_the_same_line_twice_and_blank_lines_do_no_harm(tmp_path):
    make(tmp_path, "maps/sub-01_stat-effect_statmap.nii")
    listed = tmp_path / "participants.tsv"
    listed.write_text("participant_id\tage\nsub-01\t31\n\nsub-01\t31\n")
    done = table(tmp_path / "maps", "--participants", listed)
    assert [row["age"] for row in rows(done.stdout)] == ["31"]


def test_a_table_in_another_folder_than_the_study_file(tmp_path, monkeypatch):
    """What `sequester table` writes anywhere is what a study file anywhere else reads."""
    study = tmp_path / "study"
    study.mkdir()
    names = [
        f"sub-{sub}_stat-{kind}_statmap.nii" for sub in "12" for kind in ("effect", "variance")
    ]
    make(study, *(f"derivatives/maps/{name}" for name in names))
    monkeypatch.chdir(study)
    (study / "tabs").mkdir()
    done = table("derivatives/maps", "--output", "tabs/table.tsv")
    assert done.exit_code == 0, done.output
    assert "../derivatives/maps/sub-1_stat-effect" in Path("tabs/table.tsv").read_text()
    Path("STUDY.toml").write_text(
        '[study]\nname = "kites"\ntable = "tabs/table.tsv"\n[[roi]]\nname = "Ridge"\n'
        'plan = "a-priori"\nregion = { centre = [0, 0, 0], radius = 2, origin = "a guess" }\n'
    )
    study.rename(tmp_path / "elsewhere")
    monkeypatch.chdir(tmp_path)
    settings = read_settings("elsewhere/STUDY.toml")
    effects = [f"derivatives/maps/sub-{sub}_stat-effect_statmap.nii" for sub in "12"]
    assert [row.path for row in settings.study.rows] == effects
    assert all((settings.root / row.variance).is_file() for row in settings.study.rows)
