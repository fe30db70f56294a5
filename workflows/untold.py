"""Values of extractions that go into nodes of which the guard was told nothing.

The guard judges statistics of which it knows. A test inside any other node is not judged, also
when it is fed values of an extraction that is; so it says by name where such values go. Plumbing,
sinks and sequester's own nodes are not named; nor is what makes the values of a statistic that is
judged (an average over runs, say; what sets another input of it is named). Values end at a
statistic. Any contract is an answer, also an
empty one, which says that there is nothing to state.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import networkx as nx
from nipype.algorithms.misc import AddCSVColumn, AddCSVRow, MergeCSVFiles
from nipype.interfaces.io import DataSink, JSONFileSink, MySQLSink, SQLiteSink, XNATSink
from nipype.interfaces.utility import IdentityInterface, Merge, Rename, Select, Split

from ..nodes.interfaces.base import SequesterInterface
from ..nodes.interfaces.contracts import told_of
from .ancestry import Ancestry, join_slot, meetings_of, node_name

_PLUMBING = (IdentityInterface, Merge, Rename, Select, Split)
_WRITERS = (
    *(DataSink, JSONFileSink, MySQLSink, SQLiteSink, XNATSink),
    *(AddCSVColumn, AddCSVRow, MergeCSVFiles),
)
_OURS = SequesterInterface.__module__.partition(".")[0]


@dataclass(frozen=True)
class Untold:
    """A node that is given values of extractions, and of which the guard knows nothing.

    Parameters
    ----------
    node : str
        Without the values of iterables: copies of a node are one.
    sources : tuple of str
        The extractions.
    """

    node: str
    sources: tuple[str, ...]

    def describe(self) -> str:
        """What it is about, and the two ways to answer.

        Examples
        --------
        >>> print(Untold("w.test", ("w.read",)).describe())  # doctest: +NORMALIZE_WHITESPACE
        not judged: values from w.read go into w.test, of which the guard knows nothing. If it is
        a statistic, name its values: contract(NODE, statistic=Statistic(values=INPUT)). If it is
        none, say so: contract(NODE)
        """
        return (
            f"not judged: values from {' and '.join(self.sources)} go into {self.node}, of which "
            "the guard knows nothing. If it is a statistic, name its values: contract(NODE, "
            "statistic=Statistic(values=INPUT)). If it is none, say so: contract(NODE)"
        )


def untold(ancestry: Ancestry) -> list[Untold]:
    """Every node of a graph that is given values and has no contract, in the order of the run."""
    carried: dict[Any, set[str]] = {}
    found: dict[str, set[str]] = {}
    before = _before_values(ancestry)
    for node in ancestry.nodes:
        meeting, statistic = meetings_of(node.interface)
        if meeting is not None:
            carried[node] = {node.fullname}
        elif statistic is None and (sources := _arriving(ancestry, node, carried)):
            carried[node] = sources
            if node not in before and not _known(node.interface):
                found.setdefault(node.fullname, set()).update(sources)
    return [Untold(name, tuple(sorted(sources))) for name, sources in found.items()]


def _before_values(ancestry: Ancestry) -> set[Any]:
    """The nodes from which a way leads to the values of a statistic, and through no other one."""
    graph = ancestry.graph
    fields = {node: s.values for node in graph if (s := meetings_of(node.interface)[1])}
    inner = graph.subgraph(node for node in graph if node not in fields)
    found: set[Any] = set()
    for node, field in fields.items():
        for source, _, data in graph.in_edges(node, data=True):
            into = {(join_slot(node, name) or (name,))[0] for _, name in data["connect"]}
            if field in into and source in inner:
                found |= {source, *nx.ancestors(inner, source)}
    return found


def _arriving(ancestry: Ancestry, node: Any, carried: dict[Any, set[str]]) -> set[str]:
    """The extractions of which an edge brings values."""
    arriving: set[str] = set()
    for source, _, data in ancestry.graph.in_edges(node, data=True):
        for output, _ in data["connect"] if source in carried else ():
            name = output[0] if isinstance(output, tuple) else output
            tree = ancestry.outputs.get((node_name(source), name))
            if tree is None or tree.touch.extractions:  # of outputs that nobody knows, to be safe
                arriving |= carried[source]
    return arriving


def _known(interface: Any) -> bool:
    """Whether it is plumbing, a writer, one of sequester's own, or has a contract."""
    kind = type(interface)
    if kind in _PLUMBING or isinstance(interface, _WRITERS) or told_of(interface):
        return True
    return isinstance(interface, SequesterInterface) and kind.__module__.startswith(f"{_OURS}.")
