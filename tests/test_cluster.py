"""The guard on every engine it wraps: the same record, refusals, and workers that die."""

from __future__ import annotations

import json
import logging
import os
import shutil
import signal
import subprocess
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import nipype
import numpy as np
import pytest
from click.testing import CliRunner
from engines_under_test import ENGINES, arguments
from nipype import Function, IdentityInterface, MapNode, Node, Workflow
from sequester.nodes.errors import InputError, Refused
from sequester.nodes.images import Geometry, write_map
from sequester.nodes.interfaces import Extract, SubjectMaps
from sequester.nodes.interfaces.contracts import contract
from sequester.nodes.rules import leaves, only
from sequester.workflows.cli import main
from sequester.workflows.engines import WorkerLost
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.study import Origin, Study, read_table

SHAPE = (5, 5, 4)
GRID = Geometry(SHAPE, ((2, 0, 0, 0), (0, 2, 0, 0), (0, 0, 2, 0), (0, 0, 0, 1)))
LABELS = [f"{i:02d}" for i in range(3)]
# What docs/guard.md states; on a busy machine a test may take as long again.
SECONDS = 60


@pytest.fixture(autouse=True)
def _alone(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """In a folder of its own, quiet, and for two minutes at most."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.setenv("NO_ET", "1")
    for name in ("nipype.workflow", "nipype.utils", "nipype.interface", "concurrent.futures"):
        monkeypatch.setattr(logging.getLogger(name), "level", logging.CRITICAL + 1)

    def late(*_: object) -> None:
        raise TimeoutError("still running after two minutes")

    before = signal.signal(signal.SIGALRM, late)
    signal.alarm(120)
    yield
    signal.alarm(0)
    signal.signal(signal.SIGALRM, before)


@pytest.fixture
def study(tmp_path: Path) -> Study:
    rng = np.random.default_rng(5)
    lines = ["path\tsub\tsuffix"]
    for label in LABELS:
        noise = rng.standard_normal(SHAPE).astype(np.float32)
        write_map(tmp_path / f"{label}.nii", noise + 1, GRID)
        lines.append(f"{label}.nii\t{label}\tbold")
    write_map(tmp_path / "moss.nii", np.arange(100).reshape(SHAPE) < 40, GRID)
    (tmp_path / "table.tsv").write_text("\n".join(lines) + "\n")
    return read_table(tmp_path / "table.tsv", origins=[Origin("a chart of moss", ("moss.nii",))])


@pytest.fixture
def maps(study: Study) -> list[str]:
    return [str(study.root / row.path) for row in study.rows]


def workflow(name: str, **execution: str) -> Workflow:
    made = Workflow(name, base_dir=str(Path("work").absolute()))
    made.config["execution"] = {
        "crashdump_dir": str(Path("crashes").absolute()),
        "create_report": "false",
        "poll_sleep_duration": "0.1",
        "job_finished_timeout": "2",
        **execution,
    }
    return made


def called(body: str, **inputs: Any) -> Function:
    made = Function(input_names=list(inputs), output_names=["out"])
    made.inputs.function_str = body
    made.inputs.trait_set(**inputs)
    return made


def results(name: str) -> list[str]:
    """The nodes of a workflow that have left a result."""
    kept = [*Path("work", name).rglob("result_*.pklz"), *Path("work", name).rglob("crashstore*")]
    return sorted({path.parent.name for path in kept})


def queued() -> list[str]:
    told = subprocess.run(["squeue", "-h", "-o", "%j"], capture_output=True, text=True, check=True)
    return told.stdout.split()


HARD = "def hard(x):\n    return x.replace('moss', '00')\n"  # names a file of its own choice
SHIFT = (  # other bytes than those of its input
    "def shift(x):\n"
    "    import os, nibabel as nib\n"
    "    image = nib.load(x)\n"
    "    made = nib.Nifti1Image(image.get_fdata(dtype='float32') + 9, image.affine)\n"
    "    made.to_filename('shifted.nii')\n"
    "    return os.path.abspath('shifted.nii')\n"
)


# -- the same record ---------------------------------------------------------------------------


def leaky(maps: list[str]) -> Workflow:
    """A map is used under the name of a chart: the graph shows the chart, the run the map."""
    made = workflow("leaky")
    chart = str(Path("moss.nii").absolute())
    hard = Node(called(HARD, x=chart), "hard")
    read = Node(Extract(in_files=maps[:2], labels=LABELS[:2]), "read")
    shift = Node(called(SHIFT, x=None), "shift")
    made.connect([(hard, shift, [("out", "x")]), (shift, read, [("out", "mask_files")])])
    other = Extract(in_files=maps, labels=LABELS, mask_files=[chart])
    made.add_nodes([Node(other, "other")])
    return made


def clean(maps: list[str]) -> Workflow:
    """Maps that a MapNode with a contract handed on, in a region from outside."""
    made = workflow("clean")
    each = MapNode(called("def each(x):\n    return x\n", x=None), iterfield=["x"], name="each")
    each.inputs.x = maps[:2]
    contract(each, rules={"out": only("x")})
    chart = str(Path("moss.nii").absolute())
    read = Node(Extract(labels=LABELS[:2], mask_files=[chart]), "read")
    made.connect(each, "out", read, "in_files")
    return made


def record(guard: GuardPlugin) -> Any:
    """All verdicts, and what every element of every output touches."""
    assert guard.ancestry is not None
    trees = sorted(guard.ancestry.outputs.items())
    return guard.findings, [(where, [leaf.touch for leaf in leaves(t)]) for where, t in trees]


@pytest.fixture(scope="module")
def told() -> list[Any]:
    """What the engines told, one after another."""
    return []


@pytest.mark.parametrize("engine", ENGINES)
def test_the_record_is_the_same(engine, request, study, maps, told):
    guard = GuardPlugin(study, **arguments(engine, request))
    done = clean(maps).run(plugin=guard)
    (read,) = (node for node in done.nodes() if node.name == "read")
    fine = record(guard)
    assert [f.verdict for f in guard.findings] == ["apart"] * 2

    with pytest.raises(Exception, match="2 raised"):
        leaky(maps).run(plugin="Linear")
    assert results("leaky") == ["hard", "other", "read", "shift"]  # cached now
    for path in (*Path("work/leaky/other").glob("*"), *Path("work/leaky/read").glob("*")):
        path.unlink() if path.is_file() else shutil.rmtree(path)
    guard = GuardPlugin(study, **arguments(engine, request))
    with pytest.raises(GuardRefused, match="refused while running: 1 cause, 1 finding") as refused:
        leaky(maps).run(plugin=guard)
    assert refused.value.ancestry is guard.ancestry
    (finding,) = refused.value.findings
    assert (finding.node, finding.verdict) == ("leaky.read", "leak")
    assert finding.mask_path == ("00.nii (seen while running)", "leaky.shift.out")
    assert results("leaky") == ["hard", "other", "shift"]  # another branch has ended

    told.append((fine, list(read.result.outputs.values), record(guard)))
    assert told[-1] == told[0]


@pytest.mark.parametrize("engine", ENGINES)
def test_several_refusals_and_faults_arrive_as_one_refusal(engine, request, study, maps):
    made = workflow("several")
    chart = str(Path("moss.nii").absolute())
    hard = Node(called(HARD, x=chart), "hard")
    made.add_nodes([Node(called("def fail(x):\n    return 1 / 0\n", x=1), "fail")])
    for name in ("one", "two"):
        read = Node(Extract(in_files=maps[:1], labels=LABELS[:1]), name)
        after = Node(called("def after(x):\n    return x\n", x=None), f"after_{name}")
        made.connect([(hard, read, [("out", "mask_files")]), (read, after, [("values", "x")])])
    with pytest.raises(GuardRefused, match="refused while running: 2 causes") as refused:
        made.run(plugin=GuardPlugin(study, **arguments(engine, request)))
    assert sorted(f.node for f in refused.value.findings) == ["several.one", "several.two"]
    assert results("several") == ["fail", "hard"]
    if engine == "SLURM":
        assert queued() == []


@pytest.mark.parametrize("engine", ENGINES)
def test_an_error_of_ours_arrives_as_itself(engine, request, study, maps):
    Path(maps[2]).write_bytes(b"no image")
    made = workflow("fault")
    made.add_nodes([Node(SubjectMaps(in_files=maps, labels=LABELS), "maps")])
    with pytest.raises(InputError, match=r"unreadable image \(.*02\.nii\)"):
        made.run(plugin=GuardPlugin(study, **arguments(engine, request)))


STUDY = """[study]
name = "moss"
table = "table.tsv"
output = "OUTPUT"
[[roi]]
name = "Arbor"
plan = "a-priori"
region = { mask = "moss.nii", origin = "a chart of moss" }
"""


@pytest.mark.parametrize("engine", ENGINES)
def test_a_study_runs_on_it_from_the_command_line_to_the_same_bytes(engine, request, study):
    """The output folders of all engines, made one after another, are compared with Linear's."""
    given = arguments(engine, request)["plugin_args"]
    options = [f"--engine-arg={name}={value}" for name, value in given.items()]
    for name in dict.fromkeys(("Linear", engine)):
        Path("STUDY.toml").write_text(STUDY.replace("OUTPUT", name))
        call = ["run", "STUDY.toml", "--no-page", "--engine", name]
        told = CliRunner().invoke(main, call + options * (name == engine))
        assert told.exit_code == 0, told.output
        Path("STUDY.ledger.jsonl").unlink()  # it would be another look
    made = [
        {p.relative_to(name): p.read_bytes() for p in Path(name).rglob("*") if p.is_file()}
        for name in ("Linear", engine)
    ]
    for files in made:  # these name the output folder
        del files[Path("manifest.json")], files[Path("STUDY.toml")]
    assert made[0] == made[1] and len(made[0]) > 5


@pytest.mark.parametrize("given", ["sbatch_args", "=8", "max jobs=8"])
def test_an_engine_argument_without_a_name_or_a_value(given, study):
    Path("STUDY.toml").write_text(STUDY)
    told = CliRunner().invoke(main, ["run", "STUDY.toml", "--engine-arg", given])
    assert told.exit_code == 2 and "an engine's argument that is not NAME=VALUE" in told.output


def test_slurm_in_a_folder_whose_name_its_commands_would_break(slurm, study, maps):
    made = clean(maps)
    made.base_dir = str(Path("the gardener's work").absolute())
    with pytest.raises(InputError, match="SLURM's jobs cannot start in this working folder"):
        made.run(plugin=GuardPlugin(study, engine="SLURM"))
    assert queued() == []


# -- settings and engines that do not go with the guard ----------------------------------------

HARMLESS = [
    {"hash_method": "content"},
    {"keep_inputs": "true"},
    {"remove_unnecessary_outputs": "false"},
    {"local_hash_check": "false"},
    {"parameterize_dirs": "false"},
    {"use_relative_paths": "true"},
    {"create_report": "true"},
    {"stop_on_first_rerun": "true"},
    {"stop_on_first_crash": "true"},
    {"crashfile_format": "txt"},
    {"plugin": "SLURMGraph"},
]


@pytest.mark.parametrize("engine", ["Linear", "MultiProc"])
def test_settings_that_change_no_verdict_and_no_value(engine, request, study, maps):
    said = []
    tried = HARMLESS if engine == "Linear" else HARMLESS[3:5]  # each takes a pool of processes
    for i, execution in enumerate([{}, *tried]):
        values = []
        for make in (clean, clean, leaky):  # cached the second time
            made = make(maps)
            made.base_dir = str(Path("work", str(i)).absolute())
            made.config["execution"] |= execution
            guard = GuardPlugin(study, **arguments(engine, request))
            try:
                done = made.run(plugin=guard)
            except GuardRefused as error:
                values.append(str(error))
            else:
                values += [n.result.outputs.values for n in done.nodes() if n.name == "read"]
            values.append(record(guard))
        said.append(values)
    assert len(said[0]) == 6 and "leaky.read" in said[0][4]
    assert [values == said[0] for values in said] == [True] * len(said)


@pytest.mark.parametrize("name", ["remove_node_directories", "write_provenance"])
@pytest.mark.parametrize("where", ["the workflow", "nipype.cfg"])
def test_settings_that_are_refused(where, name, study, maps, monkeypatch):
    made = clean(maps)
    if where == "the workflow":
        made.config["execution"][name] = "true"
    else:  # what a nipype.cfg sets when nipype is imported
        monkeypatch.setitem(nipype.config._sections["execution"], name, "true")
    with pytest.raises(InputError, match=f"does not go with the guard .{name} in nipype.cfg or"):
        made.run(plugin=GuardPlugin(study))
    assert results("clean") == []


def test_marking_as_done_is_refused(study, maps):
    with pytest.raises(Refused, match="updatehash marks nodes as done that never ran"):
        clean(maps).run(plugin=GuardPlugin(study), updatehash=True)


@pytest.mark.parametrize(
    ("engine", "told"),
    [
        ("SLURMGraph", "sends the whole graph away.*expected one of Linear, .*; use SLURM"),
        ("SGEGraph", "sends the whole graph away.*expected one of Linear"),
        ("CondorDAGMan", "sends the whole graph away"),
        ("PBS", "the guard does not know this engine .engine PBS.: expected one of Linear"),
    ],
)
def test_engines_that_are_refused(engine, told, study, maps):
    with pytest.raises(InputError, match=told):
        clean(maps).run(plugin=GuardPlugin(study, engine=engine))
    assert results("clean") == []


def test_an_engine_that_is_not_here(study, maps, monkeypatch):
    monkeypatch.setenv("PATH", "/nowhere")
    with pytest.raises(InputError, match=r"SLURM is not here .*: expected the command sbatch"):
        clean(maps).run(plugin=GuardPlugin(study, engine="SLURM"))


@pytest.mark.parametrize("dry", [True, False])
def test_iterable_values_that_share_a_folder(dry, study):
    made = workflow("shared")
    who = Node(IdentityInterface(["x"]), "who")
    who.iterables = ("x", ["sub 1", "sub1"])
    made.connect(who, "x", Node(called("def step(x):\n    return x\n", x=None), "step"), "x")
    with pytest.raises(InputError, match="two nodes share a working folder"):
        made.run(plugin=GuardPlugin(study, dry=dry))
    assert results("shared") == []


def test_a_callback_of_ones_own_is_still_called(study, maps):
    heard: list[tuple[str, str]] = []
    given = {"status_callback": lambda node, what: heard.append((node.name, what))}
    clean(maps).run(plugin=GuardPlugin(study, engine="Linear", plugin_args=given))
    assert heard == [(n, what) for n in ("each", "read") for what in ("start", "end")]


# -- workers that die --------------------------------------------------------------------------

KILL = "def kill(x):\n    import os\n    os.kill(os.getpid(), 9)\n"
ENDLESS = "def endless(x):\n    import time\n    time.sleep(600)\n"


@pytest.mark.parametrize("engine", ["MultiProc", "SLURM"])
def test_a_killed_worker_ends_the_run(engine, request, study):
    made = workflow("killed")
    kill, after = Node(called(KILL, x=1), "kill"), Node(called(SHIFT, x=None), "after")
    made.connect(kill, "out", after, "x")
    given = arguments(engine, request)
    began = time.monotonic()
    with pytest.raises(WorkerLost, match=r"a worker ended without an answer \(killed\.kill\)"):
        made.run(plugin=GuardPlugin(study, **given))
    assert time.monotonic() - began < SECONDS


def test_an_engine_of_ipython_that_dies_ends_the_run(mortal, study, maps):
    made = workflow("killed")
    made.add_nodes([Node(called(KILL, x=1), "kill"), Node(called(SHIFT, x=maps[0]), "shift")])
    began = time.monotonic()
    with pytest.raises(WorkerLost, match=r"a worker ended without an answer \(killed\.kill"):
        made.run(plugin=GuardPlugin(study, engine="IPython", plugin_args=mortal))
    assert time.monotonic() - began < SECONDS


def test_a_job_that_vanishes_from_the_queue_ends_the_run(slurm, study, tmp_path):
    """In the folder lie an older result, which the engine would take for the job's, and an older
    note of an error, which we would."""
    made = workflow("gone")
    quick = "def quick(x):\n    return x\n"
    made.add_nodes([Node(called(quick, x=1), "node")])
    made.run(plugin=GuardPlugin(study))
    assert results("gone") == ["node"]
    again = workflow("gone")
    again.add_nodes([Node(called(quick, x=2), "node")])
    note = {"kind": "Refused", "message": "an older fault"}
    Path("work/gone/node/sequester-error.json").write_text(json.dumps(note))
    # Held in the queue, and taken out of it as soon as it is there.
    given = {"sbatch_args": "--hold"}
    watcher = subprocess.Popen(
        ["bash", "-c", "until squeue -h -o %A | grep -q .; do sleep 0.1; done; scancel -u $USER"],
        env={**os.environ, "USER": "root"},
    )
    with pytest.raises(WorkerLost, match=r"\(gone\.node\).*slurm-\d+\.out"):
        again.run(plugin=GuardPlugin(study, engine="SLURM", plugin_args=given))
    assert watcher.wait(10) == 0


@pytest.mark.parametrize("engine", ["MultiProc", "SLURM"])
def test_a_run_that_stops_at_the_first_fault_leaves_no_job(engine, request, study):
    made = workflow("stop", stop_on_first_crash="true")
    held = Node(called("def held(x):\n    return x\n", x=1), "held")
    held.plugin_args = {"sbatch_args": "--hold"}
    made.add_nodes([held, Node(called("def fail(x):\n    return 1 / 0\n", x=1), "fail")])
    with pytest.raises(Exception, match="ZeroDivisionError"):
        made.run(plugin=GuardPlugin(study, **arguments(engine, request)))
    if engine == "SLURM":
        assert queued() == []
