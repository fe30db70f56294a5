"""The guard on every engine it wraps: the same record, refusals, and workers that die."""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import partial
from pathlib import Path
from threading import Event, Thread
from typing import Any

import nipype
import numpy as np
import psutil
import pytest
import running
from click.testing import CliRunner
from engines_under_test import ENGINES, arguments, ipython_cluster, slurm_cluster
from nipype import IdentityInterface, MapNode, Node, Workflow
from planting import a_grid, plant
from running import called
from sequester.nodes.errors import InputError, Refused
from sequester.nodes.interfaces import Extract, SubjectMaps
from sequester.nodes.interfaces.contracts import contract
from sequester.nodes.rules import leaves, only
from sequester.workflows import engines
from sequester.workflows.cli import main
from sequester.workflows.engines import WorkerLost
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.study import Origin, Study

SHAPE = (5, 5, 4)
LABELS = [f"{i:02d}" for i in range(3)]
# What docs/guard.md states; on a busy machine a test may take as long again.
SECONDS = 60


@pytest.fixture(autouse=True)
def _alone(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """In a folder of its own, quiet, and for two minutes at most."""
    monkeypatch.chdir(tmp_path)
    running.silence(monkeypatch, "concurrent.futures")
    with running.two_minutes():
        yield


@pytest.fixture
def study(tmp_path: Path) -> Study:
    noise = np.random.default_rng(5).standard_normal((len(LABELS), *SHAPE)).astype(np.float32)
    maps = dict(zip(LABELS, noise + 1, strict=True))
    moss = np.arange(100).reshape(SHAPE) < 40
    chart = Origin("a chart of moss", ("moss.nii",))
    return plant(tmp_path, maps, a_grid(SHAPE, 2.0), {"moss": moss}, [chart], prefix="")


def workflow(name: str, **execution: str) -> Workflow:
    """One that asks a cluster less often, and waits less for its files."""
    waits = {"poll_sleep_duration": "0.1", "job_finished_timeout": "2"}
    return running.workflow(name, **waits, **execution)


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


# -- controllers that die ----------------------------------------------------------------------

WAITING = (  # tells that it runs, and ends when it is told to
    "def waiting(x):\n"
    "    import os, time\n"
    "    open(x + '.runs', 'w').close()\n"
    "    for _ in range(600):\n"
    "        if os.path.exists(x):\n"
    "            return 'done'\n"
    "        time.sleep(0.1)\n"
)


def waiting(name: str) -> Workflow:
    made = workflow(name)
    made.add_nodes([Node(called(WAITING, x=str(Path(name).absolute())), "wait")])
    return made


@contextmanager
def once_it_runs(name: str, act: Callable[[], object]) -> Iterator[None]:
    """Do something when the node of a workflow has begun."""

    def watch() -> None:
        while not over.wait(0.1):
            if Path(f"{root}/{name}.runs").exists():
                act()
                return

    over, root = Event(), Path.cwd()
    watcher = Thread(target=watch)
    watcher.start()
    try:
        yield
    finally:
        over.set()
        watcher.join()


def test_a_controller_of_slurm_that_is_started_anew_and_one_that_is_gone(study, monkeypatch):
    root = Path.cwd()
    with slurm_cluster() as folder:
        with (folder / "slurm.conf").open("a") as conf:
            conf.write("MessageTimeout=2\n")  # how long squeue itself tries

        def end(how: signal.Signals) -> None:
            os.kill(int((folder / "slurmctld.pid").read_text()), how)

        def start_anew() -> None:
            end(signal.SIGTERM)
            time.sleep(3)
            (root / "anew").touch()
            subprocess.run(["slurmctld"], check=True)

        with once_it_runs("anew", start_anew):
            done = waiting("anew").run(plugin=GuardPlugin(study, engine="SLURM"))
        assert [node.result.outputs.out for node in done.nodes()] == ["done"]

        monkeypatch.setattr(engines, "PATIENCE", 1.0)
        lost = (
            r"controller does not answer \(gone\.wait\): squeue says '.*look at squeue when it is"
        )
        with (
            once_it_runs("gone", partial(end, signal.SIGKILL)),
            pytest.raises(WorkerLost, match=lost),
        ):
            waiting("gone").run(plugin=GuardPlugin(study, engine="SLURM"))
        (root / "gone").touch()


def test_a_controller_of_ipython_that_is_gone(study, monkeypatch):
    with ipython_cluster(engines=1) as (cluster, given):
        hub = psutil.Process(cluster.controller.pid)
        rest = hub.children(recursive=True)  # it survives the hub, and passes answers on
        guard = GuardPlugin(study, engine="IPython", plugin_args=given)

        def kill_the_hub() -> None:
            hub.kill()
            Path(root, "hub").touch()

        root = Path.cwd()
        try:
            with once_it_runs("hub", kill_the_hub):
                done = waiting("hub").run(plugin=guard)
            assert [node.result.outputs.out for node in done.nodes()] == ["done"]
        finally:
            for process in rest:
                process.kill()

    monkeypatch.setattr(engines, "PATIENCE", 1.0)
    monkeypatch.setattr(engines, "ASK_AGAIN", 0.1)
    with ipython_cluster(engines=1) as (cluster, given):
        hub = psutil.Process(cluster.controller.pid)

        def kill_it_all() -> None:
            for process in [hub, *hub.children(recursive=True)]:
                process.kill()

        lost = r"controller does not answer \(gone\.wait\): start the cluster anew"
        with once_it_runs("gone", kill_it_all), pytest.raises(WorkerLost, match=lost):
            waiting("gone").run(plugin=GuardPlugin(study, engine="IPython", plugin_args=given))


# -- jobs that are left ------------------------------------------------------------------------


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
