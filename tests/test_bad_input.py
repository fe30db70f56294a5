"""Bad input ends in one clear line and exit code 2, and leaves everything as it was."""

import gzip
import json
import resource
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner
from planting import content, save
from sequester.workflows.cli import main

SEQUESTER = str(Path(sys.executable).with_name("sequester"))
GRID = "10 x 10 x 10 voxels of 3 x 3 x 3 mm, first at (0, 0, 0) mm"
STUDY = """\
[study]
name = "kites"
table = "table.tsv"
seed = 3

[data]
select = { contrast = "gust" }

[[roi]]
name = "Ridge"
plan = "leave-one-subject-out"
search = { mask = "ridge.nii.gz", origin = "drawn for this test" }
rule = { kind = "threshold", p = 0.05 }
flips = 99
"""


def noise(*shape):
    return np.random.default_rng(len(shape)).standard_normal(shape).astype(np.float32)


def swap(path, old, new):
    text = path.read_text()
    assert old in text
    path.write_text(text.replace(old, new, 1))


@pytest.fixture(scope="module")
def analysed(tmp_path_factory):
    """A study of 8 subjects that was run once."""
    folder = tmp_path_factory.mktemp("kites") / "study"
    folder.mkdir()
    lines = ["path\tvolume\tsub\tsuffix\tcontrast\texclude_reason"]
    maps = np.random.default_rng(5).standard_normal((8, 10, 10, 10)).astype(np.float32)
    maps[:, 2:5, 2:5, 2:5] += 1
    for i, data in enumerate(maps, 1):
        save(folder / f"sub-{i:02d}.nii.gz", data)
        lines.append(f"sub-{i:02d}.nii.gz\tn/a\t{i:02d}\tbold\tgust\tn/a")
    save(folder / "ridge.nii.gz", np.ones((10, 10, 10), np.uint8))
    (folder / "table.tsv").write_text("\n".join(lines) + "\n")
    (folder / "STUDY.toml").write_text(STUDY)
    done = run(folder)
    assert done.exit_code == 0, done.output
    return folder


@pytest.fixture
def study(analysed, tmp_path):
    """A copy of that study, to be spoilt."""
    return Path(shutil.copytree(analysed, tmp_path / "study"))


def run(study, command=("run",)):
    return CliRunner().invoke(main, [*command, str(study / "STUDY.toml"), "--quiet"])


def refused(study, command=("run",), exit_code=2, writes=()):
    """Run a command that must fail; returns its one line on standard error.

    It may write the files that are named, and no other.
    """
    before = content(study.parent)
    done = run(study, command)
    assert isinstance(done.exception, SystemExit), done.exception
    assert done.exit_code == exit_code
    assert done.stdout == ""
    after = content(study.parent)
    changed = {name for name in before | after if before.get(name) != after.get(name)}
    assert changed <= {f"{study.name}/{name}" for name in writes}, "something was written"
    assert "Traceback" not in done.stderr
    line, rest = done.stderr.split("\n", 1)
    assert line.startswith("sequester: ")
    assert rest == "" or exit_code == 3
    return line


# -- maps -----------------------------------------------------------------------------------


def truncated_gzip(path):
    path.write_bytes(path.read_bytes()[:1800])


def truncated_header(path):
    path.write_bytes(path.read_bytes()[:20])


def wrong_magic(path):
    raw = bytearray(gzip.decompress(path.read_bytes()))
    raw[344:348] = b"none"
    path.write_bytes(gzip.compress(bytes(raw)))


def other_affine(path):
    save(path, noise(10, 10, 10), np.diag([2.0, 2.0, 2.0, 1.0]))


def broken_link(path):
    path.unlink()
    path.symlink_to("annex/7f3a")


@pytest.mark.parametrize(
    ("spoil", "message"),
    [
        (truncated_gzip, "damaged or truncated file (PATH): expected a NIfTI-1 or NIfTI-2 image"),
        (truncated_header, "unreadable image (PATH): "),
        (wrong_magic, "unreadable image (PATH): "),
        (lambda path: path.write_bytes(b""), "unreadable image (PATH): "),
        (lambda path: path.write_text("a map"), "got File PATH is not a gzip file"),
        (
            lambda path: save(path, noise(10, 10, 10, 2, 2)),
            "too many dimensions (PATH): expected 3-D, or 4-D with a volume number, "
            "got 5-D (10, 10, 10, 2, 2)",
        ),
        (
            lambda path: save(path, noise(10, 10, 10, 2)),
            "4-D file without a volume number (PATH): got 2 volumes; fill the table's volume",
        ),
        (
            lambda path: save(path, noise(9, 10, 10)),
            f"grids differ (PATH): expected the grid of FIRST: {GRID}, "
            "got 9 x 10 x 10 voxels of 3 x 3 x 3 mm, first at (0, 0, 0) mm; resample it",
        ),
        (
            other_affine,
            f"grids differ (PATH): expected the grid of FIRST: {GRID}, "
            "got 10 x 10 x 10 voxels of 2 x 2 x 2 mm, first at (0, 0, 0) mm; resample it",
        ),
        (
            lambda path: save(path, np.full((10, 10, 10), np.nan, np.float32)),
            "effect map without data (PATH): got only zeros, NaN and infinities",
        ),
        (
            lambda path: save(path, np.zeros((10, 10, 10), np.float32)),
            "effect map without data (PATH): got only zeros, NaN and infinities",
        ),
        (broken_link, "file not fetched (PATH): got a link to annex/7f3a, which is not there"),
        (Path.unlink, "no such file (PATH): check the path in the study table or"),
    ],
)
def test_map_that_is_no_map(study, spoil, message):
    path = study / "sub-03.nii.gz"
    spoil(path)
    expected = message.replace("PATH", str(path)).replace("FIRST", str(study / "sub-01.nii.gz"))
    assert expected in refused(study)


def test_volume_out_of_range(study):
    save(study / "sub-03.nii.gz", noise(10, 10, 10, 2))
    swap(study / "table.tsv", "sub-03.nii.gz\tn/a", "sub-03.nii.gz\t2")
    path = study / "sub-03.nii.gz"
    assert f"no such volume ({path}): expected 0 to 1, got 2" in refused(study)


def test_identical_files_under_two_names(study):
    shutil.copy(study / "sub-03.nii.gz", study / "sub-06.nii.gz")
    assert (
        f"identical files under two names ({study / 'sub-06.nii.gz'}): "
        "got the same bytes as sub-03.nii.gz" in refused(study)
    )


def test_identical_maps_recompressed_under_two_names(study):
    one, other = study / "sub-03.nii.gz", study / "sub-06.nii.gz"
    other.write_bytes(gzip.compress(gzip.decompress(one.read_bytes()), 1))
    assert one.read_bytes() != other.read_bytes()
    assert f"the same map under two names ({other}): got identical to {one}" in refused(study)


def test_mask_on_another_grid(study):
    save(study / "ridge.nii.gz", np.ones((9, 10, 10), np.uint8))
    told = refused(study)
    assert f"grids differ ({study / 'ridge.nii.gz'}, roi Ridge)" in told
    assert "have it done: regrid = true" in told
    assert GRID in told and "got 9 x 10 x 10 voxels" in told


@pytest.mark.parametrize(
    ("name", "data", "message"),
    [
        ("sub-03.nii.gz", noise(9, 10, 10), "grids differ (PATH)"),
        ("sub-03.nii.gz", noise(10, 10, 10, 2), "4-D file without a volume number (PATH)"),
        ("sub-03.nii.gz", noise(10, 10, 10, 2, 2), "too many dimensions (PATH)"),
        ("ridge.nii.gz", noise(9, 10, 10), "grids differ (PATH, roi Ridge)"),
    ],
)
def test_check_alone_sees_what_headers_tell(study, name, data, message):
    save(study / name, data)
    assert message.replace("PATH", str(study / name)) in refused(study, ("check",))


def test_check_alone_sees_a_volume_out_of_range(study):
    swap(study / "table.tsv", "sub-03.nii.gz\tn/a", "sub-03.nii.gz\t1")
    path = study / "sub-03.nii.gz"
    assert f"no such volume ({path}): expected 0 to 0, got 1" in refused(study, ("check",))


def test_mask_without_a_voxel(study):
    save(study / "ridge.nii.gz", np.zeros((10, 10, 10), np.uint8))
    assert f"empty mask ({study / 'ridge.nii.gz'}, roi Ridge)" in refused(study)


# -- table and study file -------------------------------------------------------------------


def exclude_everybody(study):
    path = study / "table.tsv"
    path.write_text(path.read_text().replace("gust\tn/a", "gust\tmoved"))


def keep_two(study):
    path = study / "table.tsv"
    path.write_text("".join(path.read_text().splitlines(keepends=True)[:3]))


def repeat_a_row(study):
    path = study / "table.tsv"
    path.write_text(path.read_text() + path.read_text().splitlines(keepends=True)[1])


@pytest.mark.parametrize(
    ("spoil", "message"),
    [
        (
            exclude_everybody,
            "no subject left (STUDY, line 7): got 8 rows in the table, 8 of them with contra",
        ),
        (
            lambda study: swap(study / "STUDY.toml", '"gust"', '"lull"'),
            "no subject left (STUDY, line 7): expected in column contrast: 'gust', got 8 rows in",
        ),
        (
            keep_two,
            "too few subjects for leave-one-subject-out (STUDY, line 11, roi Ridge): expected",
        ),
        (
            lambda study: swap(study / "STUDY.toml", "contrast =", "kontrast ="),
            "unknown column 'kontrast' (STUDY, line 7): expected a column of the study table: path",
        ),
        (
            lambda study: swap(study / "STUDY.toml", "seed =", "sede ="),
            "unknown key 'sede' in study (STUDY, line 4): expected one of name, output, seed, t",
        ),
        (
            lambda study: swap(study / "STUDY.toml", "seed = 3", "seed = = 3"),
            "malformed TOML (STUDY): got Invalid value (at line 4, column 8)",
        ),
        (
            lambda study: swap(study / "STUDY.toml", ', origin = "drawn for this test"', ""),
            "search without an origin (STUDY, line 12): state where it comes from",
        ),
        (
            lambda study: swap(study / "STUDY.toml", "drawn for this test", " "),
            "search without an origin (STUDY, line 12): state where it comes from",
        ),
        (
            lambda study: (study / "table.tsv").unlink(),
            "no such study table (TABLE): make one: sequester table FOLDER",
        ),
        (lambda study: (study / "table.tsv").write_text(""), "empty study table (TABLE)"),
        (
            lambda study: swap(study / "table.tsv", "path\t", "file\t"),
            "study table without a path column (TABLE): expected tab-separated columns path",
        ),
        (
            lambda study: swap(study / "table.tsv", "sub-03.nii.gz\tn/a", "sub-03.nii.gz"),
            "row of another length (TABLE, line 4): expected 6 tab-separated cells, got 5",
        ),
        (
            lambda study: swap(study / "table.tsv", "sub-03.nii.gz\tn/a", "sub-03.nii.gz\tlast"),
            "volume is no number (TABLE, line 4): expected 0, 1, ..., got last",
        ),
        (
            repeat_a_row,
            "the same map on two rows (TABLE, lines 2 and 10): got sub-01.nii.gz",
        ),
        (
            lambda study: (study / "STUDY.toml").unlink(),
            "no such study file (STUDY): give a STUDY.toml",
        ),
    ],
)
def test_table_and_study_file(study, spoil, message):
    spoil(study)
    expected = message.replace("STUDY", str(study / "STUDY.toml"), 1)
    assert expected.replace("TABLE", str(study / "table.tsv")) in refused(study)


@pytest.mark.parametrize("command", ["run", "check"])
def test_error_as_json(study, command):
    swap(study / "STUDY.toml", "seed =", "sede =")
    told = refused(study, (command,)).removeprefix("sequester: ")
    done = CliRunner().invoke(main, [command, str(study / "STUDY.toml"), "--json"])
    assert json.loads(done.stdout) == {"error": told, "exit_code": 2}
    assert done.exit_code == 2


# -- the output folder ----------------------------------------------------------------------


def test_output_folder_that_is_a_file(study):
    (study / "out").write_text("mine")
    swap(study / "STUDY.toml", "seed = 3", 'seed = 3\noutput = "out"')
    assert f"output is a file ({study / 'out'}): expected a folder" in refused(study)


def test_output_folder_that_holds_something_else(study):
    (study / "out").mkdir()
    (study / "out" / "thesis.txt").write_text("mine")
    swap(study / "STUDY.toml", "seed = 3", 'seed = 3\noutput = "out"')
    assert f"output folder holds something else ({study / 'out'})" in refused(study)


def test_output_folder_below_a_file(study):
    swap(study / "STUDY.toml", "seed = 3", 'seed = 3\noutput = "table.tsv/out"')
    assert f"output folder cannot be made ({study / 'table.tsv' / 'out'})" in refused(study)


@pytest.fixture
def disk(study):
    """A small disk of its own, with the earlier results on it."""
    place = study / "disk"
    place.mkdir()
    done = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", "size=1m", "tmpfs", str(place)],
        capture_output=True,
        text=True,
        check=False,
    )
    if done.returncode:
        pytest.skip(f"no right to mount a small disk here: {done.stderr.strip()}")
    shutil.copytree(study / "results", place / "results")
    swap(study / "STUDY.toml", "seed = 3", 'seed = 3\noutput = "disk/results"')
    yield place
    subprocess.run(["umount", str(place)], check=True)


def test_full_disk(study, disk):
    """From room for the earlier results alone, in small steps, until the new ones fit beside
    them: so that the writing of every kind of file fails once."""
    used = shutil.disk_usage(disk).used
    for step in range(100):
        size = f"remount,size={used + 24_576 * step}"
        subprocess.run(["mount", "-o", size, str(disk)], check=True)
        if step > 10 and run(study).exit_code == 0:
            break
        # The ledger, which is on another disk, says that this run has looked.
        assert (
            f"output cannot be written ({disk / 'results'}): got No space left on device; make room"
            in refused(study, writes=["STUDY.ledger.jsonl", "disk/.results.lock"])
        )
    assert 10 < step < 99
    assert sorted(p.name for p in disk.iterdir()) == [".results.lock", "results"]


# -- the program itself ---------------------------------------------------------------------


def installed(study, *arguments, **options):
    return subprocess.run(
        [SEQUESTER, "run", str(study / "STUDY.toml"), *arguments],
        capture_output=True,
        text=True,
        check=False,
        **options,
    )


@pytest.mark.parametrize("spoil", [truncated_gzip, broken_link])
def test_installed_command(study, spoil):
    spoil(study / "sub-03.nii.gz")
    before = content(study)
    done = installed(study, "--quiet")
    assert done.returncode == 2
    assert done.stdout == ""
    (line,) = done.stderr.splitlines()
    assert line.startswith("sequester: ") and str(study / "sub-03.nii.gz") in line
    assert content(study) == before


def test_files_that_may_not_grow(study):
    """A limit on the size of files, which any user may set, stops the writing midway."""
    before = content(study)
    limit = 3000  # the subjects' maps of 4352 bytes do not fit
    done = installed(
        study,
        "--quiet",
        preexec_fn=lambda: resource.setrlimit(resource.RLIMIT_FSIZE, (limit, limit)),
    )
    assert done.returncode == 2, done.stderr
    (line,) = done.stderr.splitlines()
    assert "output cannot be written" in line and "File too large" in line
    assert content(study) == before


CIRCULAR = """
[[roi]]
name = "RidgeLook"
plan = "exploratory"
test = "t"
search = { mask = "ridge.nii.gz", origin = "drawn for this test" }
rule = { kind = "threshold", p = 0.05 }
"""


def test_refused_study_ends_with_exit_code_3(study):
    (study / "STUDY.toml").write_text(STUDY + CIRCULAR)
    page = "results.refused.html"
    for command, writes in (("run", [page]), ("check", [])):
        told = refused(study, (command,), exit_code=3, writes=writes)
        assert (study / page).exists()
        assert "refused before anything ran: 2 causes, 9 findings" in told
    done = installed(study, "--json")
    told = json.loads(done.stdout)
    assert (done.returncode, told["exit_code"]) == (3, 3)
    error = " ".join(told["error"].split())
    assert "the mask was chosen on the data it would be tested on" in error
