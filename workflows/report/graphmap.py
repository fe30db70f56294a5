"""The graph as it ran, laid out in layers: what flows into a choice, and what is held out from it.

Layers run from left to right, sources first; every region has a lane of its own. Lanes that are
alike are drawn once when they are declared variants of one region, or many. An edge is
selection (it leads to a mask), held out (it brings the data that are read in a mask), or result
(what is made of the values).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import networkx as nx

_MOST_ALIKE = 12  # lanes of one shape that are drawn one by one
_STEP_X, _STEP_Y, _BOX_W, _BOX_H = 214.0, 58.0, 146.0, 38.0
_LEFT, _TOP, _LANE_GAP = 112.0, 16.0, 10.0
SELECTION, HELD_OUT, RESULT = "selection", "held-out", "result"
# How far from a box a flow turns, and above or below its middle where it arrives.
_OFFSETS = {SELECTION: (18.0, -9.0), HELD_OUT: (27.0, 2.0), RESULT: (36.0, 12.0)}


@dataclass
class Box:
    """A node, where it is drawn."""

    name: str
    interface: str
    kind: str
    lane: str
    layer: int
    x: float = 0.0
    y: float = 0.0

    @property
    def short(self) -> str:
        """The last part of its name."""
        return self.name.rsplit(".", 1)[-1]


@dataclass
class Arrow:
    """All edges of one flow between two nodes."""

    source: str
    target: str
    flow: str
    ports: list[str] = field(default_factory=list)
    path: str = ""


@dataclass
class GraphMap:
    """The graph, laid out.

    Parameters
    ----------
    boxes : list of Box
    arrows : list of Arrow
    lanes : list of (y, height, name)
    width, height : float
    alike : dict of str to list of str
        By the lane that is drawn: those for which it stands too.
    drawn_as : dict of str to str
        By a node that is not drawn: the one that stands for it.
    """

    boxes: list[Box]
    arrows: list[Arrow]
    lanes: list[tuple[float, float, str]]
    width: float
    height: float
    alike: dict[str, list[str]]
    drawn_as: dict[str, str]


def graph_map(record: Mapping[str, Any]) -> GraphMap:
    """Lay the graph out.

    Parameters
    ----------
    record : mapping
        The content of record.json.
    """
    graph = nx.MultiDiGraph()
    for node in record["nodes"]:
        graph.add_node(node["name"])
    for source, output, target, field_name in record["edges"]:
        graph.add_edge(source, target, ports=f"{output} to {field_name}")
    layers = {
        name: i for i, names in enumerate(nx.topological_generations(graph)) for name in names
    }
    # A source stands beside what it feeds first, not at the far left of everything.
    for name in reversed(list(nx.topological_sort(graph))):
        if not graph.in_degree(name) and graph.out_degree(name):
            layers[name] = min(layers[after] for after in graph.successors(name)) - 1
    boxes = {
        node["name"]: Box(
            node["name"], node["interface"], node["kind"], _lane(node["name"]), layers[node["name"]]
        )
        for node in record["nodes"]
    }
    flow_of = _flows(record, graph)
    alike, drawn_as = _folded(boxes, graph, record["variants"])
    boxes = {name: box for name, box in boxes.items() if name not in drawn_as}
    arrows: dict[tuple[str, str, str], Arrow] = {}
    for source, target, data in graph.edges(data=True):
        if source in drawn_as or target in drawn_as:
            continue
        key = (source, target, flow_of(source, target))
        arrows.setdefault(key, Arrow(*key)).ports.append(data["ports"])
    lanes, height = _place(list(boxes.values()))
    for arrow in arrows.values():
        arrow.path = _wire(arrow, boxes[arrow.source], boxes[arrow.target])
    width = max((box.x for box in boxes.values()), default=0) + _BOX_W + 16
    drawn = list(boxes.values()), list(arrows.values())
    return GraphMap(*drawn, lanes, width, height, alike, drawn_as)


def _folded(
    boxes: Mapping[str, Box], graph: Any, variants: Mapping[str, str]
) -> tuple[dict[str, list[str]], dict[str, str]]:
    """Lanes that stand for others too, and which node stands for which."""
    lanes: dict[str, list[Box]] = {}
    for box in boxes.values():
        if box.lane:
            lanes.setdefault(box.lane, []).append(box)
    groups: dict[tuple[object, ...], list[str]] = {}
    for lane, mine in lanes.items():
        key = (variants.get(lane, ""), _shape(lane, mine, boxes, graph))
        groups.setdefault(key, []).append(lane)
    alike: dict[str, list[str]] = {}
    drawn_as: dict[str, str] = {}
    for (varied, _), found in groups.items():
        if len(found) > (1 if varied else _MOST_ALIKE):
            first, *alike[found[0]] = found
            names = {box.name.split(".", 2)[2]: box.name for box in lanes[first]}
            drawn_as |= {
                box.name: names[box.name.split(".", 2)[2]]
                for lane in alike[first]
                for box in lanes[lane]
            }
    return alike, drawn_as


def _shape(
    lane: str, mine: Sequence[Box], boxes: Mapping[str, Box], graph: Any
) -> tuple[object, ...]:
    """What two lanes have in common that are drawn alike: steps, and what flows between them."""

    def called(name: str) -> str:
        return f".{name.split('.', 2)[2]}" if boxes[name].lane == lane else name

    names = {box.name for box in mine}
    steps = tuple(sorted((called(box.name), box.interface, box.layer) for box in mine))
    edges = [*graph.in_edges(names, data="ports"), *graph.out_edges(names, data="ports")]
    flows = {(called(source), called(target), ports) for source, target, ports in edges}
    return steps, tuple(sorted(flows))


def _lane(name: str) -> str:
    """A region's workflow, the second part of the name; "" for what all regions share.

    Examples
    --------
    >>> _lane("lanterns.Arbor.choose"), _lane("lanterns.maps")
    ('Arbor', '')
    """
    parts = name.split(".")
    return parts[1] if len(parts) > 2 else ""


def _place(boxes: list[Box]) -> tuple[list[tuple[float, float, str]], float]:
    lanes: dict[str, list[Box]] = {}
    for box in sorted(boxes, key=lambda one: one.lane != ""):
        lanes.setdefault(box.lane, []).append(box)
    y, placed = _TOP, []
    for lane, mine in lanes.items():
        filled: dict[int, int] = {}
        for box in mine:
            row = filled.get(box.layer, 0)
            filled[box.layer] = row + 1
            box.x, box.y = _LEFT + _STEP_X * box.layer, y + _STEP_Y * row
        tall = _STEP_Y * max(filled.values())
        placed.append((y - _LANE_GAP / 2, tall, lane))
        y += tall + _LANE_GAP
    return placed, y


def _wire(arrow: Arrow, source: Box, target: Box) -> str:
    """Down a line of the flow's own beside the source, and along below boxes in between."""
    leave, enter = _OFFSETS[arrow.flow]
    x, y = source.x + _BOX_W, source.y + _BOX_H / 2 + enter
    to_x, to_y = target.x - 1, target.y + _BOX_H / 2 + enter
    path = f"M{x:.0f} {y:.0f}H{x + leave:.0f}"
    if target.layer - source.layer > 1:
        below, up = target.y + _BOX_H + leave / 4 + 1, to_x - leave
        return f"{path}V{below:.0f}H{up:.0f}V{to_y:.0f}H{to_x:.0f}"
    return f"{path}V{to_y:.0f}H{to_x:.0f}"


def _flows(record: Mapping[str, Any], graph: Any) -> Callable[[str, str], str]:
    """Which flow an edge belongs to."""
    chooses, reads = set(), set()
    for meeting in record["meetings"]:
        if meeting["kind"] == "extraction":
            reads.add(meeting["node"])
            place = meeting["mask_place"].rsplit(".", 1)[0]
            if place in graph:
                chooses.add((place, meeting["node"]))
    masks = {place for place, _ in chooses}
    upstream = masks.union(*(nx.ancestors(graph, place) for place in masks))
    after = set().union(*(nx.descendants(graph, node) for node in reads)) if reads else set()

    def flow(source: str, target: str) -> str:
        if (source, target) in chooses:
            return SELECTION
        if target in reads:
            return HELD_OUT
        if target in after:
            return RESULT
        return SELECTION if target in upstream else HELD_OUT

    return flow
