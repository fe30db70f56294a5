"""The engine's own plugins, with a look at every node just before it runs.

`before` is called with each node, cached ones too, and may raise to stop it and what depends on
it; `after` hears of its end ("end" or "exception"), also of the elements of a MapNode.
"""

from __future__ import annotations

import gc
from collections.abc import Callable
from traceback import format_exception
from typing import Any

from nipype.pipeline.plugins.linear import LinearPlugin
from nipype.pipeline.plugins.multiproc import MultiProcPlugin

Before = Callable[[Any], None]
After = Callable[[Any, str], None]


def engine(processes: int, before: Before, after: After) -> Any:
    """A plugin of the engine: one node after another, or several at once.

    Parameters
    ----------
    processes : int
        1 for Linear, more for MultiProc.
    before, after : callable
    """
    if processes > 1:
        return WatchedMultiProc(processes, before, after)

    def status(node: Any, what: str) -> None:
        if what == "start":
            before(node)
        else:
            after(node, what)

    return LinearPlugin(plugin_args={"status_callback": status})


class WatchedMultiProc(MultiProcPlugin):
    """MultiProc that looks at each node in the driver before it is split, skipped or sent."""

    def __init__(self, processes: int, before: Before, after: After) -> None:
        def status(node: Any, what: str) -> None:
            if what != "start":
                after(node, what)

        super().__init__(
            {"n_procs": processes, "status_callback": status, "raise_insufficient": False}
        )
        self._before = before
        self._graph: Any = None

    def run(self, graph: Any, config: Any, updatehash: bool = False) -> None:
        """Run a graph; its loop collects garbage again and again, so what is there is set aside."""
        self._graph = graph
        gc.freeze()
        try:
            super().run(graph, config, updatehash)
        except BaseException:
            self.pool.shutdown(cancel_futures=True)
            raise
        finally:
            gc.unfreeze()

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
            self._before(self.procs[jobid])
        except Exception as error:
            self._run_errors.append(error)
            # The engine's own default is a text, which its crash report then fails to extend.
            fault = {"result": None, "traceback": format_exception(error)}
            self._clean_queue(jobid, self._graph, result=fault)
            self.proc_done[jobid], self.proc_pending[jobid] = True, False
            return False
        return True
