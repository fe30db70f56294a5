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

import logging
from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from typing import Any

import networkx as nx
from nipype.pipeline.plugins.base import PluginBase

from ..nodes.errors import InputError, Refused, SequesterError
from ..nodes.interfaces.base import SequesterInterface, kept_error, notes_of
from ..nodes.interfaces.generic import settings_of
from ..nodes.rules import Branch, Tree
from ..nodes.touch import Touch
from .ancestry import Ancestry, files_in, join_slot, meetings_of, node_name
from .caches import made_from_another
from .engines import engine
from .findings import Findings
from .graphledger import GraphLedger
from .judge import Finding, judge
from .states import States
from .study import Study
from .twins import check_twins

Listener = Callable[[str, str, int, int], None]

NOTHING_JUDGED = (
    "Nothing was judged, and nothing is shown by that: no node of this workflow is known to read "
    "a region or to test values. If one of yours does, say so with contract(NODE, "
    "extraction=Meeting(mask=INPUT, data=INPUT)) and contract(NODE, "
    "statistic=Statistic(values=INPUT))."
)


class GuardRefused(Refused):
    """The guard refused; carries the findings.

    Parameters
    ----------
    findings : list of Finding
        Those that may not take place.
    study : Study
    started : bool
        Whether nodes had executed (a refusal while running).
    ancestry : Ancestry
        What the verdicts rest on.
    """

    def __init__(
        self,
        findings: list[Finding],
        study: Study,
        *,
        started: bool = False,
        ancestry: Ancestry | None = None,
    ) -> None:
        self.findings, self.study, self.started = findings, study, started
        self.ancestry = ancestry
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


def check(ancestry: Ancestry) -> tuple[Findings, list[Finding]]:
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
    listener : callable, optional
        Told ``(what, node, done, total)`` as nodes start and end.
    engine : str, optional
        The plugin that runs the nodes: Linear, MultiProc, SLURM or IPython. Default: Linear, or
        MultiProc for more than one process.
    plugin_args : dict, optional
        What that plugin is given, as in ``workflow.run(plugin_args=...)``.
    processes : int
        How many nodes may run at once (MultiProc).
    dry : bool
        Judge only; execute nothing.
    ledger : path, optional
        Of the workflow's ledger (see `graphledger`): regions from outside are compared with the
        masks in it, and a run that ends well is added to it. A dry run writes nothing.

    Attributes
    ----------
    findings : Findings
        All verdicts of the last run; its `warnings` say what was not judged.
    ancestry : Ancestry or None
        The touches of the last run, with what was seen while running.
    looks : list of dict
        Of the last run, with a ledger: each look as it was first recorded.
    """

    def __init__(
        self,
        study: Study,
        listener: Listener | None = None,
        *,
        engine: str = "",
        plugin_args: Mapping[str, Any] | None = None,
        processes: int = 1,
        dry: bool = False,
        ledger: str | Path | None = None,
    ) -> None:
        super().__init__(plugin_args={})  # goes into every MapNode, whatever it holds
        self.study, self.listener, self.dry = study, listener, dry
        self.engine = engine or ("MultiProc" if processes > 1 else "Linear")
        self.engine_args = dict(plugin_args or {})
        if self.engine == "MultiProc" and processes > 1:
            self.engine_args.setdefault("n_procs", processes)
        self.findings = Findings()
        self.ancestry: Ancestry | None = None
        self.looks: list[dict[str, Any]] = []
        self._ledger = None if ledger is None else GraphLedger(Path(ledger), study)
        self._refused: list[Finding] = []
        self._errors: list[SequesterError] = []
        self._folders: dict[str, Any] = {}
        self._states = States(study)

    def run(self, graph: Any, config: Any, updatehash: bool = False) -> None:
        """Called by the engine with the expanded graph.

        Raises
        ------
        GuardRefused
            Before or while running.
        InputError
            Before anything ran, when the ledger was changed or cannot be written.
        SequesterError
            The first error of one of our nodes, as it was raised.
        """
        if updatehash:
            raise Refused("updatehash marks nodes as done that never ran; run without it")
        _allowed(config)
        self._refused, self._errors, self.looks = [], [], []
        check_twins(self.study)
        ancestry = self._touches(graph)
        self.findings, refused = check(ancestry)
        if refused:
            raise GuardRefused(refused, self.study, ancestry=ancestry)
        said = self.findings.warnings if self.findings else [NOTHING_JUDGED]
        for warning in () if self.dry else said:
            logging.getLogger("nipype.workflow").warning(warning)
        self._folders = self._working_folders(ancestry)
        if self.dry:
            return
        self._states = States(self.study)
        self._make_ready(ancestry)
        names, done = {node_name(node) for node in ancestry.nodes}, 0

        def before(node: Any) -> None:
            self._tell("start", node, done, len(names))
            for note in notes_of(Path(node.output_dir())):
                note.unlink()  # of an earlier run
            self._look(ancestry, graph, node)
            here = [f for f in self._refused if f.node == node_name(node)]
            if here:
                raise GuardRefused(here, self.study, started=True, ancestry=ancestry)

        def after(node: Any, what: str) -> None:
            nonlocal done
            if node_name(node) in names:  # not an element of a MapNode
                done += 1
                self._tell(what, node, done, len(names))
            if what == "exception":
                error = kept_error(Path(node.output_dir()))
                if error is not None:
                    self._errors.append(_placed(error, node))

        runner = engine(self.engine, self.engine_args, before, after)
        try:
            runner.run(graph, config, updatehash=False)
            self._states.look_again()
        except Exception as error:  # raised again, or as our own
            # Our own error says more than the engine's wrapping of it.
            if self._refused:
                raise GuardRefused(
                    self._refused, self.study, started=True, ancestry=ancestry
                ) from error
            if self._errors:
                raise self._errors[0] from error
            raise
        if self._ledger is not None:
            self.looks = self._ledger.write(ancestry, self.findings)

    def _make_ready(self, ancestry: Ancestry) -> None:
        """Look at all declared files; set up nodes of ours, and clear the extractions."""
        for inputs in ancestry.inputs.values():
            for path in files_in(list(inputs.settings.values())):
                if self.study.is_declared(path):
                    self._states.look(path)
        for node in ancestry.nodes:
            if isinstance(node.interface, SequesterInterface):
                # By size and time stamp, another subject's file could pass for this one's.
                execution = {**node.config["execution"], "hash_method": "content"}
                node.config = {**node.config, "execution": execution}
            if self._ledger is not None:
                self._ledger.keep(node)
            if meetings_of(node.interface)[0] is not None:
                # A MapNode hands its elements what its interface holds.
                for inputs in (node.inputs, node.interface.inputs):
                    if inputs.trait("clearance") is not None:  # a foreign extraction has none
                        inputs.trait_set(clearance="cleared")

    def _touches(self, graph: Any) -> Ancestry:
        """The touches before the run, with what the ledger knows of regions from outside."""
        if self._ledger is None:
            self.ancestry = Ancestry(graph, self.study)
            return self.ancestry
        self._ledger.open(write=not self.dry)
        stated = Ancestry(graph, self._ledger.study)
        self.study = self._ledger.recognised(stated)
        if self.study.origins != stated.study.origins:
            stated = Ancestry(graph, self.study)
        stated.study = self.study  # its doubts may grow while running
        self.ancestry = stated
        return stated

    def _working_folders(self, ancestry: Ancestry) -> dict[str, Any]:
        """Every node by its working folder, which must be its own."""
        folders: dict[str, Any] = {}
        for node in ancestry.nodes:
            if node.base_dir is None:  # the engine makes it a folder of its own
                continue
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
        ours = isinstance(node.interface, SequesterInterface)  # these hash content
        if not ours and made_from_another(node, settings, self.study):
            node.overwrite = True
        for name, value in settings.items():
            slot = join_slot(node, name)
            field = slot[0] if slot else name
            tree = promised.trees.get(field)
            if slot and isinstance(tree, Branch):
                tree = tree.children[slot[1] - 1]
            arrives = field in promised.arriving
            found = _broken(value, tree) if arrives else {}
            for path, known in _promised(value, tree) if arrives else _each(value, tree):
                if arrives:
                    touch = self.study.recognise(path)
                    if touch is None and not self._made_upstream(graph, node, path):
                        touch = self.study.touch_of(path)
                elif self.study.is_declared(path):
                    self._still(path)  # the graph showed this literal, volume by volume
                    continue
                else:
                    touch = self.study.recognise(path)
                if touch is not None and not _within(touch, known):
                    found[self.study.relative(path)] = touch
            if found:
                ancestry.observe(node, field, found)
                changed = True
        if self._ledger is not None:
            for field, place, touch in self._ledger.look(ancestry, node, self.findings):
                ancestry.observe(node, field, {place: touch})
                changed = True
        if not changed:
            return
        ancestry.propagate()
        before = set(self._refused)
        self.findings, self._refused = check(ancestry)
        # What turns out here stops here, before it is used; other branches go on.
        new = [finding for finding in self._refused if finding not in before]
        if new:
            raise GuardRefused(self._refused, self.study, started=True, ancestry=ancestry)

    def _still(self, path: str) -> None:
        try:
            self._states.look(path)
        except Refused as error:
            self._errors.append(error)
            raise

    def _made_upstream(self, graph: Any, node: Any, path: str) -> bool:
        """Whether a file lies in the folder of a node upstream.

        A file elsewhere is unknown, although a node of this run may have put it there: on a
        warm cache nobody could tell, and the same workflow must be judged the same twice.
        """
        parents = map(str, Path(path).resolve().parents)
        owner = next((self._folders[f] for f in parents if f in self._folders), None)
        return owner is not None and (owner is node or nx.has_path(graph, owner, node))


_SETTINGS = {
    "remove_node_directories": "it removes folders that the guard looks into while others run",
    "write_provenance": "the engine cannot write down the settings of our nodes, and fails when "
    "all has run",
}


def _allowed(config: Mapping[str, Any]) -> None:
    """Refuse settings of the engine under which a run cannot be guarded to its end."""
    for name, reason in _SETTINGS.items():
        if str(config["execution"][name]).lower() == "true":
            raise InputError(
                "a setting of the engine that does not go with the guard",
                where=f"{name} in nipype.cfg or in the workflow's config",
                expected="false",
                got=f"true: {reason}",
            )


def _each(value: Any, tree: Tree | None) -> Iterator[tuple[str, Touch]]:
    """Every file of a value, with all that its input was promised to touch."""
    known = Touch() if tree is None else tree.touch
    return ((path, known) for path in files_in(value))


def _promised(value: Any, tree: Tree | None) -> Iterator[tuple[str, Touch]]:
    """Every file of a value, with what the graph promised of the very item of the list."""
    if isinstance(value, list) and isinstance(tree, Branch) and len(value) == len(tree.children):
        for item, child in zip(value, tree.children, strict=True):
            yield from _promised(item, child)
    else:
        yield from _each(value, tree)


def _broken(value: Any, tree: Tree | None) -> dict[str, Touch]:
    """What the lists in a value touch whose length is not the promised one: who is who is lost."""
    if not isinstance(value, list) or not isinstance(tree, Branch):
        return {}
    if len(value) != len(tree.children):
        return {f"a list of {len(value)} instead of {len(tree.children)}": tree.touch}
    found: dict[str, Touch] = {}
    for item, child in zip(value, tree.children, strict=True):
        found |= _broken(item, child)
    return found


def _within(touch: Touch, known: Touch) -> bool:
    """Whether the graph already promised all that a file touches."""
    return (
        not touch.values & ~(known.values | known.geometry)
        and touch.origins <= known.origins
        and touch.unknown <= known.unknown
    )
