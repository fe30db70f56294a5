"""The guard: an engine plugin that judges a workflow before and while it runs.

Use it as the plugin of any workflow::

    workflow.run(plugin=GuardPlugin(study))

Three gates. Before the run, touches are propagated over the expanded graph and every meeting is
judged; one that may not take place refuses the whole run, and nothing has executed. While
running, each node's real inputs are looked at just before it runs; a study file that the graph
did not promise (reached by its path, or under another name with the same content) is added to
the ancestry, and everything is judged again. Clearance: an extraction runs only with a note that
the guard hands out, on a warm cache too.

What a graph cannot see, and this guard does not: choices made by a person after looking;
values copied into a file of other bytes by a program outside the graph; files that a node
reads behind its back without receiving their paths.
"""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path
from typing import Any

import networkx as nx
from nipype.pipeline.plugins.base import PluginBase

from ..nodes.errors import InputError, Refused, SequesterError
from ..nodes.interfaces.base import SequesterInterface, kept_error
from ..nodes.interfaces.generic import settings_of
from ..nodes.rules import joined, leaves
from ..nodes.touch import Touch
from .ancestry import Ancestry, files_in, join_slot, meetings_of, node_name
from .engines import engine
from .judge import Finding, judge
from .study import Study

Listener = Callable[[str, str, int, int], None]


class GuardRefused(Refused):
    """The guard refused; carries the findings.

    Parameters
    ----------
    findings : list of Finding
        Those that may not take place.
    study : Study
    started : bool
        Whether nodes had executed (a refusal while running).
    """

    def __init__(self, findings: list[Finding], study: Study, *, started: bool = False) -> None:
        self.findings, self.study, self.started = findings, study, started
        # A chain of elements with the same fault is told once, with how many more there are.
        told: dict[tuple[str, str], list[Finding]] = {}
        for finding in findings:
            told.setdefault((finding.node, finding.reason), []).append(finding)
        when = "while running" if started else "before anything ran"
        causes = f"{len(told)} cause{'s' if len(told) > 1 else ''}"
        lines = [f"refused {when}: {causes}, {len(findings)} finding{'s' * (len(findings) > 1)}"]
        for number, group in enumerate(told.values(), 1):
            lines.append(f"\n{number}. {group[0].describe(study.table)}")
            if len(group) > 1:
                lines.append(f"    {'also':<8}{len(group) - 1} more elements of this node")
        super().__init__("\n".join(lines))


def check(ancestry: Ancestry) -> tuple[list[Finding], list[Finding]]:
    """All findings, and those among them that may not take place."""
    findings = judge(ancestry)
    return findings, [f for f in findings if not f.allowed]


def _placed(error: SequesterError, node: Any) -> SequesterError:
    """An error with a place that is there when the run is over: the node for its own folder."""
    if not isinstance(error, InputError):
        return error
    inside = str(node.base_dir) in error.fields["where"]
    fields = {**error.fields, "where": "" if inside else error.fields["where"]}
    return type(error)(fields.pop("what"), **fields).at(f"node {node_name(node)}")


class GuardPlugin(PluginBase):
    """Judges, hands out clearances, and runs the workflow.

    Parameters
    ----------
    study : Study
        Which file is which data unit.
    processes : int
        1 runs one node after another (Linear), more run that many at once (MultiProc).
    listener : callable, optional
        Told ``(what, node, done, total)`` as nodes start and end.
    dry : bool
        Judge only; execute nothing.

    Attributes
    ----------
    findings : list of Finding
        All verdicts of the last run.
    """

    def __init__(
        self,
        study: Study,
        listener: Listener | None = None,
        *,
        processes: int = 1,
        dry: bool = False,
    ) -> None:
        super().__init__(plugin_args={})
        self.study, self.listener, self.processes, self.dry = study, listener, processes, dry
        self.findings: list[Finding] = []
        self._refused: list[Finding] = []
        self._errors: list[SequesterError] = []
        self._folders: dict[str, Any] = {}
        self._states: dict[str, tuple[int, int, int]] = {}

    def run(self, graph: Any, config: Any, updatehash: bool = False) -> None:
        """Called by the engine with the expanded graph.

        Raises
        ------
        GuardRefused
            Before or while running.
        SequesterError
            The first error of one of our nodes, as it was raised.
        """
        if updatehash:
            raise Refused("updatehash marks nodes as done that never ran; run without it")
        self._refused, self._errors = [], []
        ancestry = Ancestry(graph, self.study)
        self.findings, refused = check(ancestry)
        if refused:
            raise GuardRefused(refused, self.study)
        if self.dry:
            return
        self._folders = self._working_folders(ancestry)
        self._states = {}
        for inputs in ancestry.inputs.values():
            for path in files_in(list(inputs.settings.values())):
                if self.study.is_declared(path):
                    self._unchanged(path)
        for node in ancestry.nodes:
            if isinstance(node.interface, SequesterInterface):
                # By size and time stamp, another subject's file could pass for this one's.
                execution = {**node.config["execution"], "hash_method": "content"}
                node.config = {**node.config, "execution": execution}
            if meetings_of(node.interface)[0] is not None:
                # A MapNode hands its elements what its interface holds.
                for inputs in (node.inputs, node.interface.inputs):
                    inputs.trait_set(clearance="cleared")
        names, done = {node_name(node) for node in ancestry.nodes}, 0

        def before(node: Any) -> None:
            self._tell("start", node, done, len(names))
            self._look(ancestry, graph, node)
            here = [f for f in self._refused if f.node == node_name(node)]
            if here:
                raise GuardRefused(here, self.study, started=True)

        def after(node: Any, what: str) -> None:
            nonlocal done
            if node_name(node) in names:  # not an element of a MapNode
                done += 1
                self._tell(what, node, done, len(names))
            if what == "exception":
                error = kept_error(Path(node.output_dir()))
                if error is not None:
                    self._errors.append(_placed(error, node))

        try:
            engine(self.processes, before, after).run(graph, config, updatehash=False)
        except Exception as error:
            # Our own error says more than the engine's wrapping of it.
            if self._refused:
                raise GuardRefused(self._refused, self.study, started=True) from error
            if self._errors:
                raise self._errors[0] from error
            raise

    def _working_folders(self, ancestry: Ancestry) -> dict[str, Any]:
        """Every node by its working folder, which must be its own."""
        folders: dict[str, Any] = {}
        for node in ancestry.nodes:
            folder = str(Path(node.output_dir()).resolve())
            if folder in folders:
                raise InputError(
                    "two nodes share a working folder",
                    where=folder,
                    got=f"{node_name(folders[folder])} and {node_name(node)}",
                    remedy="iterable values must differ in letters and digits, not in signs alone",
                )
            folders[folder] = node
        return folders

    def _tell(self, what: str, node: Any, done: int, total: int) -> None:
        if self.listener is not None:
            self.listener(what, node_name(node), done, total)

    def _look(self, ancestry: Ancestry, graph: Any, node: Any) -> None:
        """Compare a node's real inputs with what the graph promised; judge again if they differ."""
        node._get_inputs()
        promised = ancestry.inputs[node_name(node)]
        changed = False
        settings = {**settings_of(node.interface.inputs), **settings_of(node.inputs)}
        for name, value in settings.items():
            slot = join_slot(node, name)
            field = slot[0] if slot else name
            known = _union(promised.trees.get(field))
            found = {}
            for path in files_in(value):
                if field in promised.arriving:
                    touch = self.study.recognise(path)
                    if touch is None and not self._made_upstream(graph, node, path):
                        touch = self.study.touch_of(path)
                elif self.study.is_declared(path):
                    self._unchanged(path)  # the graph showed this literal, volume by volume
                    continue
                else:
                    touch = self.study.recognise(path)
                if touch is not None and not _within(touch, known):
                    found[self.study.relative(path)] = touch
            if found:
                ancestry.observe(node, field, found)
                changed = True
        if not changed:
            return
        ancestry.propagate()
        before = set(self._refused)
        self.findings, self._refused = check(ancestry)
        # What turns out here stops here, before it is used; other branches go on.
        new = [finding for finding in self._refused if finding not in before]
        if new:
            raise GuardRefused(self._refused, self.study, started=True)

    def _unchanged(self, path: str) -> None:
        """Refuse a declared file that is no longer the one that was judged."""
        status = os.stat(path)
        now = (status.st_ino, status.st_size, status.st_mtime_ns)
        if self._states.setdefault(os.path.realpath(path), now) != now:
            error = Refused(f"{self.study.relative(path)} was changed while the workflow ran")
            self._errors.append(error)
            raise error

    def _made_upstream(self, graph: Any, node: Any, path: str) -> bool:
        """Whether a file lies in the folder of a node upstream.

        A file elsewhere is unknown, although a node of this run may have put it there: on a
        warm cache nobody could tell, and the same workflow must be judged the same twice.
        """
        parents = map(str, Path(path).resolve().parents)
        owner = next((self._folders[f] for f in parents if f in self._folders), None)
        return owner is not None and (owner is node or nx.has_path(graph, owner, node))


def _union(tree: Any) -> Touch:

    return Touch() if tree is None else joined(leaves(tree)).touch


def _within(touch: Touch, known: Touch) -> bool:
    """Whether the graph already promised all that a file touches."""
    return (
        not touch.values & ~(known.values | known.geometry)
        and touch.origins <= known.origins
        and touch.unknown <= known.unknown
    )
