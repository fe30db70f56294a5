"""The record of a run: for every node and element what it touches, its verdicts, its digest.

Three files hold the same: ``record.json`` for programs (the page is made from it), ``record.tsv``
to read, ``record_prov.json`` for whatever reads W3C PROV. See docs/record.md.

What is recorded is what was judged, with what was seen while running. Sets of units are listed,
or their complement is, whichever is shorter. Nothing in it depends on where the study lies, when
it ran, or how many processes ran it.
"""

from __future__ import annotations

import json
import os
import re
from collections.abc import Callable, Iterator, Mapping, Sequence
from functools import cache, partial
from itertools import chain
from pathlib import Path
from typing import Any, Protocol

import networkx as nx

from ..nodes.errors import InputError
from ..nodes.folds import Scheme
from ..nodes.images import write_bytes
from ..nodes.interfaces.base import SequesterInterface, isdefined
from ..nodes.interfaces.contracts import contract_of, told_of
from ..nodes.orthogonality import Certificate
from ..nodes.rules import Leaf, Tree, leaves
from ..nodes.touch import Touch, UnitTable
from .ancestry import Ancestry, join_slot, meetings_of, node_name
from .digests import digest
from .findings import Finding, these_subjects
from .prov import prov_document
from .study import Study
from .unitsets import encoded

_OURS = __name__.partition(".")[0]
JSON, TABLE, PROV = "record.json", "record.tsv", "record_prov.json"
COLUMNS = (
    "node", "interface", "output", "element", "values", "geometry", "selected", "origins",
    "unknown", "biased", "verdict", "level", "waived", "sha256",
)  # fmt: skip

Shorten = Callable[[str], str]
FoldNames = Callable[[str], list[str] | None]


class Judged(Protocol):
    """What a record is made of: a `GuardPlugin` after its run, or a `GuardRefused`."""

    @property
    def ancestry(self) -> Ancestry | None:
        """The touches."""

    @property
    def findings(self) -> list[Finding]:
        """The verdicts."""

    @property
    def study(self) -> Study:
        """The study."""


def write_record(
    folder: str | Path,
    guard: Judged,
    reasons: Mapping[str, str] | None = None,
    variants: Mapping[str, str] | None = None,
) -> None:
    """Write the record of a workflow that ran under the guard, or was refused by it.

    Parameters
    ----------
    folder : path of a folder that exists
    guard : GuardPlugin or GuardRefused
        After ``workflow.run(plugin=guard)``, while the engine's working folder is still there:
        files that are gone have no digest.
    reasons : mapping of str to str, optional
        By region: why its claim is narrower than usual.
    variants : mapping of str to str, optional
        By declared variant: the region that it varies.

    Raises
    ------
    InputError
        When nothing was judged yet.
    """
    folder, record = Path(folder), record_of(guard, reasons, variants)
    write_bytes(folder / JSON, _by_rows(record).encode())
    write_bytes(folder / TABLE, _table(record).encode())
    write_bytes(folder / PROV, _by_rows(prov_document(record)).encode())


def record_of(
    guard: Judged,
    reasons: Mapping[str, str] | None = None,
    variants: Mapping[str, str] | None = None,
) -> dict[str, Any]:
    """The content of ``record.json``.

    Parameters
    ----------
    guard, reasons, variants : as in `write_record`

    Returns
    -------
    dict
        ``waivers``, ``variants``, ``units``, ``suffixes`` and ``people`` (parallel), ``nodes``,
        ``edges``, ``elements`` and ``meetings``; docs/record.md lists the keys. A set of units is
        ``{"units": [row numbers]}`` or ``{"all_but": [row numbers], "of": [suffixes]}``.
    """
    ancestry = guard.ancestry
    if ancestry is None:
        raise InputError(
            "nothing to record",
            expected="a guard that has judged a workflow",
            remedy="workflow.run(plugin=guard) first",
        )
    table, graph = guard.study.table, ancestry.graph
    nodes = list(nx.lexicographical_topological_sort(graph, node_name))
    shorten = _shortener(ancestry, nodes)
    named = {node_name(node): node for node in nodes}
    order = {name: i for i, name in enumerate(named)}
    folds = cache(partial(_fold_names, named, ancestry))
    return {
        "waivers": [row for node in nodes for row in waivers_at(ancestry, node, reasons or {})],
        "variants": dict(variants or {}),
        "units": [str(unit) for unit in table.units],
        "suffixes": [unit.suffix for unit in table.units],
        "people": [person for i in range(len(table.units)) for person in table.people_of(1 << i)],
        "nodes": [
            {"name": node_name(n), "interface": type(n.interface).__name__, "kind": _kind(n)}
            for n in nodes
        ],
        "edges": [list(edge) for node in nodes for edge in sorted(_edges(graph, node))],
        "elements": [row for node in nodes for row in _elements(ancestry, node, shorten)],
        "meetings": [
            _meeting(finding, table, named[finding.node], folds, shorten)
            for finding in sorted(guard.findings, key=lambda f: (order[f.node], f.item or 0))
        ],
    }


# -- nodes and edges ------------------------------------------------------------------------


def _kind(node: Any) -> str:
    """What a node does here: extraction, statistic, own (another of ours) or foreign."""
    meeting, statistic = meetings_of(node.interface)
    if meeting is not None:
        return "extraction"
    if statistic is not None:
        return "statistic"
    return "own" if isinstance(node.interface, SequesterInterface) else "foreign"


def waivers_at(
    ancestry: Ancestry, node: Any, reasons: Mapping[str, str]
) -> Iterator[dict[str, Any]]:
    """What somebody has taken responsibility for at a node.

    Narrower claims, certificates, values read to be biased, contracts, rules of their own.
    """
    name, (meeting, statistic) = node_name(node), meetings_of(node.interface)
    settings = ancestry.inputs[name].settings

    def waiver(field: str, says: str, reason: str = "") -> dict[str, Any]:
        return {"node": name, "field": field, "says": says, "reason": reason or None}

    if any(one is not None and these_subjects(one, settings) for one in (meeting, statistic)):
        says = "the claim is about these subjects only"
        yield waiver("claim", says, reasons.get(_region(node) or "", ""))
    certificate = settings.get(meeting.certificate) if meeting is not None else None
    if isinstance(certificate, Certificate):
        yield waiver("certificate", certificate.describe())
    if meeting is not None and settings.get(meeting.biased) is True:
        yield waiver("biased", "read on the data that chose the region: its values are biased")
    stated, kind = contract_of(node.interface), type(node.interface)
    nothing = "neither an extraction nor a statistic" if told_of(node.interface) else ""
    if (says := stated.describe() or nothing) and not isinstance(
        node.interface, SequesterInterface
    ):
        yield waiver("contract", says)
    elif stated.rules and not kind.__module__.startswith(f"{_OURS}."):
        yield waiver("rules", f"{kind.__name__} has {stated.describe()} of its own")


def _edges(graph: Any, node: Any) -> Iterator[tuple[str, str, str, str]]:
    for source, _, data in graph.in_edges(node, data=True):
        for output, field in data["connect"]:
            # A connection function stands between: (output, function, arguments).
            name = output[0] if isinstance(output, tuple) else output
            slot = join_slot(node, field)
            yield node_name(source), name, node_name(node), slot[0] if slot else field


# -- elements -------------------------------------------------------------------------------


def _elements(ancestry: Ancestry, node: Any, shorten: Shorten) -> Iterator[dict[str, Any]]:
    name, made = node_name(node), _made(node)
    for output in sorted(out for of, out in ancestry.outputs if of == name):
        if made and output not in made:
            continue  # an output that this run had no use for
        tree = ancestry.outputs[name, output]
        for index, leaf, value in _items(tree, made.get(output), []):
            touch = leaf.touch
            yield {
                "node": name,
                "output": output,
                "index": index,
                **_sets(touch, ancestry.study.table),
                "origins": sorted(touch.origins),
                "unknown": sorted(map(shorten, touch.unknown)),
                "biased": touch.biased,
                "sha256": _digest(value),
            }


def _digest(value: Any) -> str | None:
    """That of a file; the engine removes outputs that nobody asked for, unless told not to."""
    kept = isinstance(value, str | Path) and os.path.isabs(value) and os.path.isfile(value)
    return digest(value) if kept else None


def _sets(touch: Touch, table: UnitTable) -> dict[str, Any]:
    sets = {"values": touch.values, "geometry": touch.geometry}
    if touch.selected:  # few elements were kept by what was measured
        sets["selected"] = touch.selected
    return {role: encoded(bits, table) for role, bits in sets.items()}


def _made(node: Any) -> dict[str, Any]:
    """The outputs of a node that ran, by name; none of one that did not."""
    try:
        outputs = node.result.outputs
    except FileNotFoundError:
        return {}
    if outputs is None:
        return {}
    # By name: the items of a MapNode's outputs are values, those of a node's are their types.
    made = {name: getattr(outputs, name) for name, _ in outputs.items()}
    return {name: value for name, value in made.items() if isdefined(value)}


def _items(tree: Tree, value: Any, index: list[int]) -> Iterator[tuple[list[int], Leaf, Any]]:
    """Every element of an output with its place in nested lists and what it turned out to be.

    The elements of a list whose length was not known before the run share one touch.
    """
    # The engine hands on a list of one as that one.
    listed = value if isinstance(value, list | tuple) else (value,)
    if not isinstance(tree, Leaf):
        for i, child in enumerate(tree.children):
            yield from _items(child, listed[i] if i < len(listed) else None, [*index, i])
    elif listed is value and not tree.single and _holds_path(value):
        for i, item in enumerate(listed):
            yield from _items(tree, item, [*index, i])
    else:
        yield index, tree, value


def _holds_path(value: Any) -> bool:
    if isinstance(value, list | tuple):
        return any(map(_holds_path, value))
    return isinstance(value, str | Path) and os.path.isabs(value)


# -- meetings -------------------------------------------------------------------------------


def _meeting(
    finding: Finding, table: UnitTable, node: Any, folds: FoldNames, shorten: Shorten
) -> dict[str, Any]:
    return {
        "kind": finding.kind,
        "node": finding.node,
        "item": finding.item,
        "verdict": finding.verdict,
        "level": finding.level,
        "allowed": finding.allowed,
        "mask": encoded(finding.mask_units, table),
        "data": encoded(finding.data_units, table),
        "geometry": encoded(finding.geometry_units, table),
        "shared": encoded(finding.shared, table),
        "origins": list(finding.origins),
        "made_of": list(finding.made_of),
        "lost": [
            {"node": at, "reason": shorten(reason), "cure": shorten(cure)}
            for at, reason, cure in finding.lost
        ],
        "mask_path": [shorten(place) for place in finding.mask_path],
        "data_path": [shorten(place) for place in finding.data_path],
        "mask_place": shorten(finding.mask_place),
        "reason": shorten(finding.reason),
        "cure": finding.cure,
        "roi": _region(node),
        "fold": _fold(finding.mask_place, folds),
    }


def _region(node: Any) -> str | None:
    """The region whose plan a node of ours belongs to: a plan's workflow has its name."""
    nested = node._hierarchy.split(".")
    ours = isinstance(node.interface, SequesterInterface)
    return str(nested[-1]) if ours and len(nested) > 1 else None


def _fold(place: str, names: FoldNames) -> str | None:
    """The fold that made a row's mask, where that can be told."""
    found = re.fullmatch(r"(.+)\.row_masks\[(\d+)\]", place)
    known = names(found[1]) if found is not None else None
    return known[int(found[2])] if found is not None and known is not None else None


def _fold_names(nodes: Mapping[str, Any], ancestry: Ancestry, name: str) -> list[str] | None:
    """Per row: the fold that holds it out, from the next node upstream that has a scheme."""
    if name not in nodes:
        return None
    upstream = nx.bfs_tree(ancestry.graph, nodes[name], reverse=True)
    for settings in (ancestry.inputs[node_name(node)].settings for node in upstream):
        scheme = settings.get("scheme", getattr(settings.get("procedure"), "scheme", None))
        labels, runs = settings.get("labels"), settings.get("runs")
        if isinstance(scheme, Scheme) and isinstance(labels, list):
            return _by_row(scheme, labels) if runs is None else _by_run(scheme, labels, runs)
    return None


def _by_row(scheme: Scheme, labels: Sequence[str]) -> list[str]:
    names = {row: fold.name for fold in scheme.folds(labels) for row in fold.held_out}
    return [names[row] for row in range(len(labels))]


def _by_run(scheme: Scheme, labels: Sequence[str], runs: Sequence[str]) -> list[str]:
    """Folds over each subject's runs, told with the subject."""
    rows: dict[str, list[int]] = {}
    for row, label in enumerate(labels):
        rows.setdefault(label, []).append(row)
    names = {
        row: f"{label} {name}"
        for label, mine in rows.items()
        for row, name in zip(mine, _by_row(scheme, [runs[i] for i in mine]), strict=True)
    }
    return [names[row] for row in range(len(labels))]


# -- text -----------------------------------------------------------------------------------


def _shortener(ancestry: Ancestry, nodes: Sequence[Any]) -> Shorten:
    """Paths of this machine out of a text: in a node's folder, the node's; else the name alone."""
    folders = {str(Path(node.output_dir()).resolve()): node_name(node) for node in nodes}

    def short(text: str) -> str:
        found = re.fullmatch(r"(/.*?)((?: volume \d+)?(?: \(.*\))?)", text)
        assert found is not None, "every text that begins with a slash matches"
        path = Path(found[1])
        place = next((p for p in path.parents if str(p) in folders), None)
        named = f".../{path.name}" if place is None else _inside(folders[str(place)], path, place)
        return named + found[2]

    shown = (tree for inputs in ancestry.inputs.values() for tree in inputs.trees.values())
    told = {
        text: short(text)
        for leaf in chain(chain.from_iterable(map(leaves, shown)), ancestry.seen)
        for text in (leaf.place, *leaf.touch.unknown)
        if text.startswith("/")
    }
    if not told:
        return str
    any_of = re.compile("|".join(map(re.escape, sorted(told, key=len, reverse=True))))
    return lambda text: any_of.sub(lambda match: told[match[0]], text)


def _inside(name: str, path: Path, folder: Path) -> str:
    return f"{name}/{path.relative_to(folder)}"


def _by_rows(content: dict[str, Any]) -> str:
    """JSON with one row of a list, or one member of an object, per line."""
    dumps = json.JSONEncoder(ensure_ascii=False, separators=(",", ":")).encode
    parts = []
    for key, value in content.items():
        if isinstance(value, dict):
            rows = [f"{dumps(name)}:{dumps(item)}" for name, item in value.items()]
            parts.append(f"{dumps(key)}:{{\n" + ",\n".join(rows) + "\n}")
        else:
            parts.append(f"{dumps(key)}:[\n" + ",\n".join(map(dumps, value)) + "\n]")
    return "{" + ",\n".join(parts) + "}\n"


def _table(record: Mapping[str, Any]) -> str:
    lines = ["\t".join(COLUMNS)]
    kinds = {node["name"]: node["interface"] for node in record["nodes"]}
    waived: dict[str, list[str]] = {}
    for waiver in record["waivers"]:
        waived.setdefault(waiver["node"], []).append(f"{waiver['field']}: {waiver['says']}")
    met: dict[str, list[dict[str, Any]]] = {}
    for meeting in record["meetings"]:
        met.setdefault(meeting["node"], []).append(meeting)
    for element in record["elements"]:
        here = [m for m in met.get(element["node"], []) if _concerns(m, element)]
        cells = (
            element["node"],
            kinds[element["node"]],
            element["output"],
            ".".join(map(str, element["index"])),
            _words(element["values"], record["units"]),
            _words(element["geometry"], record["units"]),
            _words(element.get("selected", {"units": []}), record["units"]),
            "; ".join(element["origins"]),
            "; ".join(element["unknown"]),
            "true" if element["biased"] else "false",
            ", ".join(dict.fromkeys(m["verdict"] for m in here)),
            ", ".join(dict.fromkeys(m["level"] for m in here if m["level"])),
            "; ".join(waived.get(element["node"], [])),
            element["sha256"] or "",
        )
        lines.append("\t".join(" ".join(cell.split()) or "n/a" for cell in cells))
    return "\n".join(lines) + "\n"


def _concerns(meeting: Mapping[str, Any], element: Mapping[str, Any]) -> bool:
    """Whether a verdict of a node is about this element of it: item by item, or about all."""
    return meeting["item"] is None or not element["index"] or element["index"][0] == meeting["item"]


def _words(encoding: Mapping[str, list[Any]], units: Sequence[str]) -> str:
    """A set of units in words: the complement is named when that is shorter."""
    if "units" in encoding:
        return " ".join(units[i] for i in encoding["units"])
    named = " ".join(units[i] for i in encoding["all_but"])
    whole = " ".join(["all", *encoding.get("of", ())])
    return f"{whole} but {named}" if named else whole
