"""The guard on several processes: the same verdicts, the same bytes, nothing left hanging."""

from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner
from nipype import MapNode, Node
from planting import a_grid, plant
from running import called, hidden, two_minutes, workflow
from sequester.nodes.errors import InputError
from sequester.nodes.interfaces import Extract, GivenMask, SubjectMaps
from sequester.workflows.cli import main
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.study import Origin, Study, read_table

SHAPE = (5, 5, 4)
GRID = a_grid(SHAPE, 2.0)
LABELS = [f"{i:02d}" for i in range(6)]
CHART = Origin("a chart of moss", ("moss.nii",))


@pytest.fixture(autouse=True)
def time_limit(quiet_engine):
    with two_minutes():
        yield


@pytest.fixture
def study(tmp_path) -> Study:
    maps = np.random.default_rng(5).standard_normal((len(LABELS), *SHAPE)).astype(np.float32)
    moss = np.arange(100).reshape(SHAPE) < 40
    return plant(
        tmp_path, dict(zip(LABELS, maps, strict=True)), GRID, {"moss": moss}, [CHART], prefix=""
    )


@pytest.fixture
def folder(study) -> Path:
    return study.root


def result_of(folder: Path, name: str) -> bool:
    return bool(list((folder / "work" / "w" / name).glob("result_*")))


STUDY = """[study]
name = "moss"
table = "table.tsv"
[[roi]]
name = "Turn"
plan = "leave-one-subject-out"
rule = { kind = "cluster", p = 0.2 }
flips = 63
[[roi]]
name = "Chart"
plan = "a-priori"
region = { mask = "moss.nii", origin = "a chart of moss" }
[[roi]]
name = "Look"
plan = "exploratory"
rule = { kind = "strongest", k = 4 }
"""


def test_the_same_bytes_on_one_process_and_on_two(folder):
    (folder / "STUDY.toml").write_text(STUDY)
    found = []
    for processes in ("1", "2"):
        done = CliRunner().invoke(
            main, ["run", str(folder / "STUDY.toml"), "-q", "--processes", processes]
        )
        assert done.exit_code == 0, done.output
        results = folder / "results"
        found.append(
            {p.relative_to(results): p.read_bytes() for p in results.rglob("*") if p.is_file()}
        )
    assert found[0] == found[1]
    assert len(found[0]) > 20


@pytest.mark.parametrize("processes", [1, 2])
def test_a_refusal_while_running_stops_what_depends_on_it_alone(folder, study, processes):
    """A node hands on the path of a tested map as a mask; another branch has nothing to do
    with it, and ends."""
    maps = [str(folder / f"{label}.nii") for label in LABELS]
    made = workflow()
    hard = called(f"def hard(x):\n    return {hidden(maps[0])}\n", x=str(folder / "moss.nii"))
    read = Node(Extract(in_files=[maps[0]], labels=LABELS[:1]), "read")
    made.connect(Node(hard, "hard"), "out", read, "mask_files")
    after = Node(called("def after(x):\n    return x\n", x=None), "after")
    made.connect(read, "values", after, "x")
    slow = "def slow(x):\n    import time\n    time.sleep(0.3)\n    return x\n"
    other, last = (Node(called(slow, x=1), "other"), Node(called(slow, x=None), "last"))
    made.connect(other, "out", last, "x")
    with pytest.raises(GuardRefused, match="refused while running") as told:
        made.run(plugin=GuardPlugin(study, processes=processes))
    assert told.value.started
    assert [f.node for f in told.value.findings] == ["w.read"]
    assert [result_of(folder, n) for n in ("hard", "read", "after", "other", "last")] == [
        True,
        False,
        False,
        True,
        True,
    ]


@pytest.mark.parametrize("processes", [1, 2])
def test_a_map_node_is_looked_at_before_it_is_split(folder, study, processes):
    maps = [str(folder / f"{label}.nii") for label in LABELS]
    made = workflow()
    hard = called(f"def hard(x):\n    return [{hidden(maps[0])}, {hidden(maps[1])}]\n", x=1)
    each = MapNode(called("def each(x):\n    return x\n", x=None), iterfield=["x"], name="each")
    read = Node(Extract(in_files=maps[:2], labels=LABELS[:2]), "read")
    made.connect(Node(hard, "hard"), "out", each, "x")
    mask = Node(GivenMask(in_file=str(folder / "moss.nii"), reference=maps[0]), "mask")
    join = Node(called("def join(x, y):\n    return y\n", x=None, y=None), "join")
    made.connect([(each, join, [("out", "x")]), (mask, join, [("mask_file", "y")])])
    made.connect(join, "out", read, "mask_files")
    with pytest.raises(GuardRefused, match="refused while running"):
        made.run(plugin=GuardPlugin(study, processes=processes))
    assert not (folder / "work" / "w" / "each" / "mapflow").exists()
    assert not result_of(folder, "read")


@pytest.mark.parametrize("processes", [1, 2])
def test_an_error_of_our_nodes_arrives_as_itself(folder, study, processes):
    (folder / "03.nii").write_bytes(b"no image")
    made = workflow()
    maps = [str(folder / f"{label}.nii") for label in LABELS]
    made.add_nodes([Node(SubjectMaps(in_files=maps, labels=LABELS), "maps")])
    with pytest.raises(InputError, match=r"unreadable image \(.*03\.nii\)"):
        made.run(plugin=GuardPlugin(study, processes=processes))


def test_a_leak_is_refused_before_any_process_starts(folder, study):
    made = workflow()
    maps = [str(folder / f"{label}.nii") for label in LABELS]
    trace = folder / "trace"
    body = f"def mark(x):\n    open({str(trace)!r}, 'w').close()\n    return x\n"
    mark = Node(called(body, x=maps[0]), "mark")
    read = Node(Extract(in_files=[maps[0]], labels=LABELS[:1]), "read")
    made.connect(mark, "out", read, "mask_files")
    with pytest.raises(GuardRefused, match="refused before anything ran: 1 cause, 1 finding"):
        made.run(plugin=GuardPlugin(study, processes=2))
    assert not trace.exists()


def test_a_declared_file_that_changes_while_the_workflow_runs_is_refused(folder, study):
    maps = [str(folder / f"{label}.nii") for label in LABELS]
    moss = folder / "moss.nii"
    made = workflow()
    body = (
        "def swap(x):\n    import shutil\n"
        f"    shutil.copyfile({hidden(maps[0])}, {str(moss)!r})\n    return x\n"
    )
    swap = Node(called(body, x=maps[:2]), "swap")
    read = Node(Extract(mask_files=[str(moss)], labels=LABELS[:2]), "read")
    made.connect(swap, "out", read, "in_files")
    with pytest.raises(Exception, match=r"moss\.nii was changed while the workflow ran"):
        made.run(plugin=GuardPlugin(study))
    assert not result_of(folder, "read")


def test_a_row_left_out_of_the_study_is_not_read(folder):
    text = (folder / "table.tsv").read_text().splitlines()
    rows = [f"{text[0]}\texclude_reason", *(f"{line}\tn/a" for line in text[1:-1])]
    (folder / "table.tsv").write_text("\n".join([*rows, f"{text[-1]}\tmoved"]) + "\n")
    study = read_table(folder / "table.tsv", origins=[CHART])
    maps = [str(folder / f"{label}.nii") for label in LABELS]
    made = workflow()
    read = Extract(in_files=maps, labels=LABELS, mask_files=[str(folder / "moss.nii")])
    made.add_nodes([Node(read, "read")])
    with pytest.raises(GuardRefused, match=r"05\.nii \(left out of\sthe study: moved\)"):
        made.run(plugin=GuardPlugin(study))


def test_who_a_map_counts_as(folder, study):
    assert study.label_of(folder / "03.nii") == study.label_of("03.nii") == "03"
    with pytest.raises(InputError, match="no such map in the study table"):
        study.label_of("moss.nii")
