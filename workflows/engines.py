"""The engine's own plugins, with a look at every node just before it runs.

`before` is called in the driver with each node, cached ones too, and may raise to stop it and
what depends on it; `after` hears of its end ("end" or "exception"), also of the elements of a
MapNode. A worker that dies ends the run with `WorkerLost`, and so does a cluster whose controller
has not answered for `PATIENCE` seconds; jobs that are still queued when a run ends early are
taken back.
"""

from __future__ import annotations

import gc
import getpass
import importlib.util
import json
import math
import os
import re
import shutil
import subprocess
import sys
import time
from abc import ABC, abstractmethod
from collections.abc import Callable, Iterable, Mapping
from concurrent.futures.process import BrokenProcessPool
from pathlib import Path
from threading import Event, Thread
from traceback import format_exception
from typing import Any

import numpy as np
from nipype.pipeline.plugins.base import DistributedPluginBase
from nipype.pipeline.plugins.ipython import IPythonPlugin
from nipype.pipeline.plugins.linear import LinearPlugin
from nipype.pipeline.plugins.multiproc import MultiProcPlugin
from nipype.pipeline.plugins.slurm import SLURMPlugin

from ..nodes.errors import InputError, SequesterError

Before = Callable[[Any], None]
After = Callable[[Any, str], None]

_OF_THE_SHELL = re.compile(r"""[\s'"\\$`&;|<>()*?!\[\]{}#~]""")
ENGINES = ("Linear", "MultiProc", "SLURM", "IPython")
PATIENCE = 300.0  # seconds: a controller that is started anew is back by then
ASK_AGAIN = 5.0  # seconds

DIED = "a worker ended without an answer"
SILENT = "the cluster's controller does not answer"


class WorkerLost(SequesterError):
    """No answer will come: a worker was killed, its job was removed, the controller is gone."""

    def __init__(self, what: str, nodes: str, remedy: str) -> None:
        super().__init__(
            f"{what} ({nodes}): {remedy}; what was finished is kept in the working folder, and a "
            "second run goes on from there"
        )


def engine(
    name: str, arguments: Mapping[str, Any], before: Before, after: After
) -> LinearPlugin | DistributedPluginBase:
    """A plugin of the engine that is looked at.

    Parameters
    ----------
    name : str
        One of ``ENGINES``.
    arguments : dict
        The plugin's own ``plugin_args``.
    before, after : callable

    Raises
    ------
    InputError
        For an engine that cannot be looked at, or is not here.
    """
    _usable(name)
    theirs = arguments.get("status_callback")

    def status(node: Any, what: str) -> None:
        if theirs is not None:
            theirs(node, what)
        if what == "start":
            if name == "Linear":
                before(node)
        else:
            after(node, what)

    told = {**arguments, "status_callback": status}
    if name == "Linear":
        return LinearPlugin(plugin_args=told)
    made = {"MultiProc": _MultiProc, "SLURM": _SLURM, "IPython": _IPython}[name](plugin_args=told)
    made.before = before
    return made


def _usable(name: str) -> None:
    if name not in ENGINES:
        graph = name.endswith("Graph") or name in ("CondorDAGMan", "SomaFlow")
        raise InputError(
            "this engine sends the whole graph away, so that no node can be looked at before it "
            "runs" if graph else "the guard does not know this engine",
            where=f"engine {name}",
            expected="one of " + ", ".join(ENGINES),
            remedy=f"use {name.removesuffix('Graph')}" if name == "SLURMGraph" else "",
        )  # fmt: skip
    if name == "SLURM" and shutil.which("sbatch") is None:
        raise InputError(
            "SLURM is not here",
            where="engine SLURM",
            expected="the command sbatch",
            remedy="run on a machine that submits jobs, or with MultiProc",
        )
    if name == "IPython" and importlib.util.find_spec("ipyparallel") is None:
        raise InputError(
            "IPython's clusters are not here",
            where="engine IPython",
            expected="the package ipyparallel",
            remedy="install it, or use MultiProc",
        )


def plugin_args(given: Iterable[str]) -> dict[str, Any]:
    """A plugin's ``plugin_args`` from texts NAME=VALUE; numbers, true and false are what they say.

    Raises
    ------
    InputError

    Examples
    --------
    >>> plugin_args(["sbatch_args=--mem 8G --time=9", "max_jobs=20"])
    {'sbatch_args': '--mem 8G --time=9', 'max_jobs': 20}
    """
    made = {}
    for text in given:
        name, equals, value = text.partition("=")
        if not name.isidentifier() or not equals:
            raise InputError(
                "an engine's argument that is not NAME=VALUE",
                expected="--engine-arg sbatch_args='--mem 8G'",
                got=repr(text),
            )
        try:
            found = json.loads(value)
        except ValueError:
            found = value
        made[name] = found if isinstance(found, bool | int | float) else value
    return made


class _Watched(DistributedPluginBase, ABC):
    """Looks at each node in the driver before it is split, skipped or sent."""

    before: Before

    def __init__(self, plugin_args: dict[str, Any]) -> None:
        super().__init__(plugin_args=plugin_args)
        self._lost: list[WorkerLost] = []

    def run(self, graph: Any, config: Any, updatehash: bool = False) -> None:
        """Run a graph; whatever ends it, nothing stays queued.

        Raises
        ------
        WorkerLost
        """
        self._graph = graph
        # The engine collects garbage at every poll and with every command; what is there already
        # is set aside.
        gc.freeze()
        try:
            super().run(graph, config, updatehash)
        except Exception as error:  # raised again, or as what is known to be its cause
            # The engine's own error is that of the first node that failed, or a count of them.
            if self._lost:
                raise self._lost[0] from error
            raise
        finally:
            gc.unfreeze()
            self._take_back()

    @abstractmethod
    def _take_back(self) -> None:
        """Cancel the jobs that are still queued, if any, and let the workers go."""

    def _submit_mapnode(self, jobid: int) -> bool:
        if jobid not in self.mapnodes and not self._passes(jobid):
            return False
        return bool(super()._submit_mapnode(jobid))

    def _local_hash_check(self, jobid: int, graph: Any) -> bool:
        looked_at = jobid in self.mapnodes or jobid in self.mapnodesubids
        if not looked_at and not self._passes(jobid):
            return True  # nothing more to do for it
        return bool(super()._local_hash_check(jobid, graph))

    def _passes(self, jobid: int) -> bool:
        try:
            self.before(self.procs[jobid])
        except Exception as error:  # kept: other branches go on
            # Told by the engine when the other branches are done.
            self._run_errors.append(error)
            self._clean_queue(jobid, self._graph)
            self.proc_done[jobid], self.proc_pending[jobid] = True, False
            return False
        return True

    def _clean_queue(self, jobid: int, graph: Any, result: Any = None) -> Any:
        # The engine's crash report extends a list of lines; its own default is a text.
        if result is None:
            result = {"result": None, "traceback": format_exception(*sys.exc_info())}
        elif isinstance(result["traceback"], str):
            result = {**result, "traceback": result["traceback"].splitlines(keepends=True)}
        return super()._clean_queue(jobid, graph, result=result)

    def _lose(self, what: str, remedy: str) -> WorkerLost:
        """Note that a worker is gone; which of the running nodes it had, nobody can tell."""
        running = np.flatnonzero(self.proc_done & self.proc_pending)
        nodes = ", ".join(sorted(str(self.procs[jobid].fullname) for jobid in running))
        self._lost.append(WorkerLost(what, nodes, remedy))
        return self._lost[-1]


class _MultiProc(_Watched, MultiProcPlugin):
    def __init__(self, plugin_args: dict[str, Any]) -> None:
        super().__init__({"raise_insufficient": False, **plugin_args})

    def _take_back(self) -> None:
        self.pool.shutdown(cancel_futures=True)

    def _async_callback(self, args: Any) -> None:
        if not args.cancelled() and args.exception() is None:
            super()._async_callback(args)

    def _get_result(self, taskid: int) -> Any:
        # The engine asks for answers only, and waits for ever for one that cannot come.
        future = self._task_obj[taskid]
        fault = future.exception() if future.done() else None
        if isinstance(fault, BrokenProcessPool):
            cure = "run fewer processes, or state what memory the nodes need (mem_gb)"
            raise self._lose(DIED, f"killed, or out of memory; {cure}")
        if fault is not None:
            raise fault
        return super()._get_result(taskid)

    def _send_procs_to_workers(self, updatehash: bool = False, graph: Any = None) -> None:
        if self._lost:  # the pool is broken as a whole
            raise self._lost[0]
        super()._send_procs_to_workers(updatehash, graph)


class _SLURM(_Watched, SLURMPlugin):
    def __init__(self, plugin_args: dict[str, Any]) -> None:
        super().__init__(plugin_args)
        self._logs: dict[int, Path] = {}
        self._queued: dict[int, bool] = {}
        self._silent_since, self._gone = math.inf, False
        os.environ.setdefault("LOGNAME", getpass.getuser())  # the engine names jobs by it

    def run(self, graph: Any, config: Any, updatehash: bool = False) -> None:
        # The engine puts paths into commands as they are.
        for node in graph.nodes():
            folder = str(node.output_dir())
            if _OF_THE_SHELL.search(folder):
                raise InputError(
                    "SLURM's jobs cannot start in this working folder",
                    where=folder,
                    expected="a path without blanks, quotes and other signs of the shell",
                    remedy="name another: base_dir of the workflow, or --work",
                )
        super().run(graph, config, updatehash)

    def _take_back(self) -> None:
        if self._pending:
            subprocess.run(["scancel", *map(str, self._pending)], check=False, capture_output=True)

    def _submit_batchtask(self, scriptfile: str, node: Any) -> int:
        # The engine takes any result in the folder for the job's, an older one too.
        for old in Path(node.output_dir()).glob("result_*.pklz"):
            old.unlink()
        taskid = int(super()._submit_batchtask(scriptfile, node))
        self._logs[taskid] = Path(scriptfile).with_name(f"slurm-{taskid}.out")
        return taskid

    def _send_procs_to_workers(self, updatehash: bool = False, graph: Any = None) -> None:
        if self._gone:
            raise self._lost[-1]
        if math.isinf(self._silent_since):  # the engine gives up after two attempts
            super()._send_procs_to_workers(updatehash, graph)

    def _get_result(self, taskid: int) -> Any:
        answer = super()._get_result(taskid)
        if answer and answer.get("hostname") == "unknown":  # no result file came
            where = f"see its log, {self._logs[taskid]}"
            raise self._lose(DIED, f"killed, or out of memory or time; {where}")
        return answer

    def _is_pending(self, taskid: int) -> bool:
        # The engine asks about every job by itself, at every poll. The queue is asked about all
        # of them at once, and again when a job comes round that this answer was used for.
        if self._gone:
            raise self._lost[-1]
        if taskid not in self._queued:
            self._queued = self._look_at_queue()
        return self._queued.pop(taskid)

    def _look_at_queue(self) -> dict[int, bool]:
        """Which jobs are still in the queue; all of them while its controller says nothing."""
        call = ["squeue", "--noheader", "--all", "--format=%A", f"--user={os.getuid()}"]
        told = subprocess.run(call, check=False, capture_output=True, text=True)
        if told.returncode == 0:
            self._silent_since = math.inf
            here = set(told.stdout.split())
            return {job: str(job) in here for job in self._pending}
        self._silent_since = min(self._silent_since, time.monotonic())
        if time.monotonic() - self._silent_since > PATIENCE:
            self._gone = True
            cure = "jobs that it was given may still run: look at squeue when it is back"
            raise self._lose(SILENT, f"squeue says {told.stderr.strip()!r}; {cure}")
        return dict.fromkeys(self._pending, True)


class _IPython(_Watched, IPythonPlugin):
    def __init__(self, plugin_args: dict[str, Any]) -> None:
        super().__init__(plugin_args)
        # The engine passes it under a name that the cluster's client no longer heeds.
        if "url_file" in self.client_args:
            self.client_args["connection_info"] = self.client_args.pop("url_file")
        self._over = Event()
        self._heard = math.inf

    def _prerun_check(self, graph: Any) -> None:
        self._heard = time.monotonic()
        # A client of its own: whoever asks a controller that is gone waits for ever.
        asking = self.iparallel.Client(**self.client_args)
        Thread(target=self._keep_asking, args=(asking,), daemon=True).start()
        super()._prerun_check(graph)

    def _keep_asking(self, client: Any) -> None:
        while not self._over.wait(ASK_AGAIN):
            client.queue_status()
            self._heard = time.monotonic()
        client.close()

    def _take_back(self) -> None:
        self._over.set()
        if self.taskclient is not None:
            self.taskclient.close()

    def _send_procs_to_workers(self, updatehash: bool = False, graph: Any = None) -> None:
        # The cluster takes nothing back that it has queued, so it is given what it can begin.
        most = self.plugin_args.get("max_jobs", np.inf)
        self.max_jobs = min(most, max(1, len(self.taskclient.ids)))
        super()._send_procs_to_workers(updatehash, graph)

    def _get_result(self, taskid: int) -> Any:
        try:
            answer = super()._get_result(taskid)
        except Exception as error:  # raised again, or as a worker that is lost
            if getattr(error, "ename", type(error).__name__) == "EngineError":
                cure = "look at the cluster's log"
                raise self._lose(DIED, f"killed, or out of memory or time; {cure}") from error
            raise
        if answer is None and time.monotonic() - self._heard > PATIENCE + ASK_AGAIN:
            raise self._lose(SILENT, "start the cluster anew: ipcluster start")
        return answer

    def _submit_job(self, node: Any, updatehash: bool = False) -> Any:
        if not self.taskclient.ids:
            cure = "start engines: ipcluster start, or ipcluster engines"
            raise self._lose(DIED, cure)
        return super()._submit_job(node, updatehash)

    def _clear_task(self, taskid: int) -> None:
        # The engine has the controller forget the result, too, and would wait for ever for one
        # that is gone; a controller has a limit to what it keeps.
        self.taskclient.purge_local_results(self.taskmap.pop(taskid))
