"""Same study, same bytes: run twice, moved in time, shuffled, or killed midway and run again."""

import contextlib
import csv
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner
from planting import files_in, save
from sequester.workflows.cli import main

STUDY = """\
[study]
name = "kites"
table = "table.tsv"
seed = {seed}

[[roi]]
name = "Ridge"
plan = "leave-one-subject-out"
search = {{ mask = "ridge.nii.gz", origin = "drawn for this test" }}
rule = {{ kind = "cluster", p = 0.05, min_size = 2 }}
flips = 199

[[roi]]
name = "RidgeLook"
plan = "exploratory"
rule = {{ kind = "threshold", p = 0.05 }}
"""
SEED, EARLIER_SEED = 3, 4
KILLS = 25


def write_study(folder):
    """A study of 8 subjects, three maps each, with something in it to find."""
    folder.mkdir()
    rng = np.random.default_rng(5)
    lines = ["path\tsub\trun\tsuffix"]
    for i in range(1, 9):
        for run in (1, 2, 3):
            data = rng.standard_normal((10, 10, 10)).astype(np.float32)
            data[2:5, 2:5, 2:5] += 1
            name = f"sub-{i:02d}_run-{run}.nii.gz"
            save(folder / name, data)
            lines.append(f"{name}\t{i:02d}\t{run}\tbold")
    ridge = np.zeros((10, 10, 10), np.uint8)
    ridge[1:8, 1:8, 1:8] = 1
    save(folder / "ridge.nii.gz", ridge)
    (folder / "table.tsv").write_text("\n".join(lines) + "\n")
    (folder / "STUDY.toml").write_text(STUDY.format(seed=SEED))
    return folder


def run(study, *arguments):
    done = CliRunner().invoke(
        main, ["run", str(study / "STUDY.toml"), "-q", "--no-page", *arguments]
    )
    assert done.exit_code == 0, done.output
    return files_in(study / "results")


def rows(files, name):
    return list(csv.DictReader(files[name].decode().splitlines(), delimiter="\t"))


@pytest.fixture(scope="module")
def plain(tmp_path_factory):
    """The study, and what an undisturbed run of the installed command writes."""
    study = write_study(tmp_path_factory.mktemp("plain") / "study")
    command = [str(Path(sys.executable).with_name("sequester")), "run", str(study / "STUDY.toml")]
    subprocess.run([*command, "--no-page"], check=True, capture_output=True)
    return study, files_in(study / "results")


def test_two_runs_give_the_same_bytes(plain):
    study, expected = plain
    # Masks, search region, overlap and look, tables, background, each with a JSON; the record
    # as JSON, PROV and table, manifest, description and the study file.
    assert len(expected) == 2 * 8 + 2 * 3 + 2 * 7 + 2 + 3 + 3
    assert run(study) == expected


def test_a_kept_working_folder_gives_the_same_bytes(plain, tmp_path):
    study, expected = plain
    assert run(study, "--work", str(tmp_path / "work")) == expected
    assert run(study, "--work", str(tmp_path / "work")) == expected, "on a warm cache"


def test_row_order_does_not_matter(plain, tmp_path):
    study, expected = plain
    other = Path(shutil.copytree(study, tmp_path / "study"))
    shutil.rmtree(other / "results")
    header, *lines = (other / "table.tsv").read_text().splitlines()
    shuffled = [lines[i] for i in np.random.default_rng(1).permutation(len(lines))]
    assert shuffled not in (lines, lines[::-1])
    (other / "table.tsv").write_text("\n".join([header, *shuffled]) + "\n")
    found = run(other)
    for name in expected:
        if name.endswith((".nii.gz", "roi_values.tsv", "roi_tests.tsv")):
            assert found[name] == expected[name], name
    assert float(rows(found, "roi_tests.tsv")[0]["p"]) < 0.05


# -- killed ---------------------------------------------------------------------------------

# Imports once, and then runs the command in a fork of its own group for every line it is told:
# so the kills fall into the run and not, nearly always, into the imports.
SERVER = """
import os, sys
from sequester.workflows import cli, plans, run
for line in sys.stdin:
    child = os.fork()
    if not child:
        os.dup2(os.open(os.devnull, os.O_WRONLY), 1)
        cli.main(["run", line.strip(), "--quiet", "--no-page"])
    os.setpgid(child, child)
    print(child, flush=True)
    print(os.waitpid(child, 0)[1], flush=True)
"""


class Server:
    """Starts runs of a study, each in a session of its own."""

    def __init__(self):
        self.process = subprocess.Popen(
            [sys.executable, "-c", SERVER],
            stdin=subprocess.PIPE,
            stdout=subprocess.PIPE,
            text=True,
            bufsize=1,
            start_new_session=True,
            env={**os.environ, "OMP_NUM_THREADS": "1"},
        )

    def start(self, study):
        """Begin a run; returns its process group."""
        self.process.stdin.write(f"{study / 'STUDY.toml'}\n")
        return int(self.process.stdout.readline())

    def end(self):
        """Wait for the run; returns its wait status."""
        return int(self.process.stdout.readline())


@pytest.fixture
def server():
    made = Server()
    yield made
    made.process.stdin.close()
    made.process.wait(timeout=30)


def test_killed_at_random_moments_and_started_again(plain, server, tmp_path):
    study, expected = plain
    study = Path(shutil.copytree(study, tmp_path / "study"))
    results = study / "results"

    # Earlier results, of other bytes: a run must leave them or replace them, whole.
    (study / "STUDY.toml").write_text(STUDY.format(seed=EARLIER_SEED))
    earlier = run(study)
    assert earlier.keys() == expected.keys() and earlier != expected
    shutil.copytree(results, tmp_path / "earlier")
    (study / "STUDY.toml").write_text(STUDY.format(seed=SEED))
    inputs = {p.name for p in study.iterdir() if p.is_file()}

    start = time.monotonic()
    server.start(study)
    assert server.end() == 0
    span = time.monotonic() - start
    assert files_in(results) == expected

    rng = np.random.default_rng(25)
    killed, left = 0, []
    for attempt in range(4 * KILLS):
        shutil.rmtree(results)
        if attempt % 2:
            shutil.copytree(tmp_path / "earlier", results)
        group = server.start(study)
        time.sleep(rng.uniform(0, span))
        with contextlib.suppress(ProcessLookupError):
            os.killpg(group, signal.SIGKILL)
        if not os.WIFSIGNALED(server.end()):
            span *= 0.9  # it had ended: the machine is less busy than it was
            continue
        killed += 1
        left.append({p.name for p in study.iterdir()} - inputs - {"results"})
        if results.exists():
            assert files_in(results) in ([expected, earlier] if attempt % 2 else [expected])
        elif attempt % 2:
            assert files_in(study / ".results.old") == earlier, "earlier results are lost"

        assert run(study) == expected
        assert {p.name for p in study.iterdir()} == inputs | {"results"}
        if killed == KILLS:
            break

    assert killed == KILLS
    # Enough of them found the run at work; the others, before it had begun to write.
    assert sum({".results.work", ".results.new"} <= names for names in left) >= 5


@pytest.mark.parametrize("stage_is_there", [True, False])
def test_killed_between_the_two_renames(plain, tmp_path, stage_is_there):
    """The moment is too short to be met by chance: earlier results set aside, new ones not yet
    in their place."""
    study, expected = plain
    study = Path(shutil.copytree(study, tmp_path / "study"))
    (study / "results").rename(study / ".results.old")
    if stage_is_there:
        shutil.copytree(study / ".results.old", study / ".results.new")
    assert run(study) == expected
    assert {p.name for p in study.iterdir()} == {p.name for p in plain[0].iterdir()}


def test_a_run_that_fails_puts_earlier_results_back(plain, tmp_path):
    """After a kill between the two renames, the next run may fail: nothing must be lost then."""
    study, expected = plain
    study = Path(shutil.copytree(study, tmp_path / "study"))
    (study / "results").rename(study / ".results.old")
    text = (study / "STUDY.toml").read_text()
    stop = 'rule = { kind = "cluster", p = 1e-9 }\non_empty = "stop"\n'
    (study / "STUDY.toml").write_text(
        text.replace('rule = { kind = "cluster", p = 0.05, min_size = 2 }\n', stop)
    )
    done = CliRunner().invoke(main, ["run", str(study / "STUDY.toml"), "-q"])
    assert "8 of 8 folds found no region" in done.stderr
    assert files_in(study / "results") == expected
    assert {p.name for p in study.iterdir()} == {p.name for p in plain[0].iterdir()}


@pytest.mark.parametrize(
    ("fault", "exit_code"), [(OSError(5, "no luck"), 2), (KeyboardInterrupt, 1)]
)
def test_fault_between_the_two_renames(plain, tmp_path, monkeypatch, fault, exit_code):
    """Earlier results are set aside, and the new ones cannot, or may not, take their place."""
    study, expected = plain
    study = Path(shutil.copytree(study, tmp_path / "study"))
    rename = Path.rename

    def faulty(self, target):
        if self.name == ".results.new":
            raise fault
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", faulty)
    done = CliRunner().invoke(main, ["run", str(study / "STUDY.toml"), "-q"])
    assert done.exit_code == exit_code
    assert files_in(study / "results") == expected
    assert {p.name for p in study.iterdir()} == {p.name for p in plain[0].iterdir()}


def test_two_runs_at_once(plain, server, tmp_path):
    """The second is told that the folder is in use; the first ends as if alone."""
    study, expected = plain
    study = Path(shutil.copytree(study, tmp_path / "study"))
    shutil.rmtree(study / "results")
    server.start(study)
    deadline = time.monotonic() + 30
    while not (study / ".results.new").exists():
        assert time.monotonic() < deadline
        time.sleep(0.001)
    done = CliRunner().invoke(main, ["run", str(study / "STUDY.toml"), "-q"])
    first = server.end()
    assert first == 0
    assert done.exit_code == 2
    assert f"output folder in use ({study / 'results'}): got another run" in done.stderr
    assert files_in(study / "results") == expected
