"""A record as W3C PROV-JSON.

Data units, declared origins, unknown files and elements are entities, nodes are activities, and
the programs are agents. A node ``used`` elements and units, an element ``wasGeneratedBy`` its
node and ``wasDerivedFrom`` what it touches, each derivation with its role. A set of units is a
collection; "all but sub-07" is one entity that is derived from the collection of all units and
names those it lacks, so that leaving each of 300 subjects out costs 300 lines, not 90,000.

It is written here, without a library for PROV: it is JSON with fixed keys, and a record must have
the same bytes each time it is written.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from importlib.metadata import version
from typing import Any

from .unitsets import members

NAMESPACE = "urn:sequester:record:"

Encoded = Mapping[str, list[Any]]


def prov_document(record: Mapping[str, Any]) -> dict[str, Any]:
    """The content of ``record_prov.json``, from that of ``record.json``.

    Parameters
    ----------
    record : mapping
        See docs/record.md.

    Returns
    -------
    dict
        PROV-JSON (W3C member submission, 2013): by kind of statement, the statements by name.

    Examples
    --------
    >>> empty = {"units": ["sub-a_bold"], "suffixes": ["bold"], "people": ["a"], "nodes": [],
    ...          "edges": [], "elements": [], "meetings": []}
    >>> prov_document(empty)["entity"]["s:unit0"]["prov:label"]
    'sub-a_bold'
    """
    return _Document(record).content()


class _Document:
    """The statements made so far."""

    def __init__(self, record: Mapping[str, Any]) -> None:
        self._record = record
        self._entities: dict[str, dict[str, Any]] = {}
        self._relations: dict[str, dict[str, dict[str, Any]]] = {}
        self._named: dict[tuple[str, str], str] = {}
        self._sets: dict[str, str] = {}
        self._sources: dict[str, list[str]] = {}

    def content(self) -> dict[str, Any]:
        record = self._record
        programs = {name: f"{name} {version(name)}" for name in ("sequester", "nipype")}
        for i, (unit, person) in enumerate(zip(record["units"], record["people"], strict=True)):
            self._entities[f"s:unit{i}"] = {
                "prov:type": _name("s:DataUnit"),
                "prov:label": unit,
                "s:person": person,
            }
        nodes = {node["name"]: f"s:node{i}" for i, node in enumerate(record["nodes"])}
        for node in record["nodes"]:
            agent = "s:nipype" if node["kind"] == "foreign" else "s:sequester"
            self._relate(
                "wasAssociatedWith", {"prov:activity": nodes[node["name"]], "prov:agent": agent}
            )
        made = self._elements(nodes)
        self._uses(nodes, made)
        self._verdicts(nodes)
        return {
            "prefix": {"s": NAMESPACE},
            "entity": self._entities,
            "activity": {
                nodes[node["name"]]: {
                    "prov:label": node["name"],
                    "prov:type": _name(f"s:{node['kind'].capitalize()}"),
                    "s:interface": node["interface"],
                }
                for node in record["nodes"]
            },
            "agent": {
                f"s:{name}": {"prov:type": _name("prov:SoftwareAgent"), "prov:label": label}
                for name, label in programs.items()
            },
            **self._relations,
        }

    def _relate(self, kind: str, statement: dict[str, Any]) -> None:
        of_kind = self._relations.setdefault(kind, {})
        of_kind[f"_:{kind}{len(of_kind)}"] = statement

    def _elements(self, nodes: Mapping[str, str]) -> dict[tuple[str, str], list[str]]:
        """An entity for every element; their names by node and output."""
        made: dict[tuple[str, str], list[str]] = {}
        for i, element in enumerate(self._record["elements"]):
            name, of = f"s:element{i}", (element["node"], element["output"])
            made.setdefault(of, []).append(name)
            place = "".join(f"[{k}]" for k in element["index"])
            self._entities[name] = {"prov:label": f"{of[0]}.{of[1]}{place}"}
            if element["sha256"]:
                self._entities[name]["s:sha256"] = element["sha256"]
            if element["biased"]:
                self._entities[name]["s:biased"] = True
            self._relate(
                "wasGeneratedBy",
                {"prov:entity": name, "prov:activity": nodes[of[0]], "prov:role": of[1]},
            )
            for role in ("values", "geometry", "selected"):
                self._derive(name, self._set(element.get(role, {"units": []})), role)
            for word in ("origin", "unknown"):
                for text in element["origins" if word == "origin" else word]:
                    self._derive(name, self._other(word, text), word)
        return made

    def _derive(self, made: str, source: str | None, role: str) -> None:
        if source is not None:
            self._sources.setdefault(made, []).append(source)
            self._relate(
                "wasDerivedFrom",
                {"prov:generatedEntity": made, "prov:usedEntity": source, "s:role": role},
            )

    def _other(self, word: str, text: str) -> str:
        """The entity of a declared origin, or of an unknown file."""
        key = (word, text)
        if key not in self._named:
            self._named[key] = f"s:{word}{sum(kind == word for kind, _ in self._named)}"
            kind = "s:Origin" if word == "origin" else "s:Unknown"
            self._entities[self._named[key]] = {"prov:type": _name(kind), "prov:label": text}
        return self._named[key]

    def _set(self, units: Encoded) -> str | None:
        """The entity of a set of units: a unit, a collection; None when it is empty."""
        rows = units.get("units", units.get("all_but", []))
        if "units" in units and len(rows) < 2:
            return f"s:unit{rows[0]}" if rows else None
        key = repr(units)
        if key not in self._sets:
            name = self._sets[key] = f"s:set{len(self._sets)}"
            self._entities[name] = {"prov:type": _name("prov:Collection")}
            if "all_but" in units and rows:
                lacking = [_name(f"s:unit{row}") for row in rows]
                self._entities[name]["s:allBut"] = lacking if len(lacking) > 1 else lacking[0]
                self._derive(name, self._set({**units, "all_but": []}), "set")
            else:
                self._members(name, sorted(members(units, self._record["suffixes"])))
        return self._sets[key]

    def _members(self, name: str, rows: Iterable[int]) -> None:
        for row in rows:
            self._relate("hadMember", {"prov:collection": name, "prov:entity": f"s:unit{row}"})

    def _uses(self, nodes: Mapping[str, str], made: Mapping[tuple[str, str], list[str]]) -> None:
        """What each node was given: the elements that came over edges; at a source, the units."""
        fed = set()
        for source, output, target, field in self._record["edges"]:
            fed.add(target)
            for name in made.get((source, output), []):
                self._relate(
                    "used",
                    {"prov:activity": nodes[target], "prov:entity": name, "prov:role": field},
                )
        # A source was given what all its elements derive from.
        at = {node: activity for node, activity in nodes.items() if node not in fed}
        given: dict[tuple[str, str], None] = {}
        for i, element in enumerate(self._record["elements"]):
            if element["node"] in at:
                for source in self._sources.get(f"s:element{i}", []):
                    given[at[element["node"]], source] = None
        for activity, source in given:
            self._relate("used", {"prov:activity": activity, "prov:entity": source})

    def _verdicts(self, nodes: Mapping[str, str]) -> None:
        """A verdict is an entity that the guard's activity made, derived from both sides."""
        for i, meeting in enumerate(self._record["meetings"]):
            name = f"s:verdict{i}"
            at = "" if meeting["item"] is None else f"[{meeting['item']}]"
            self._entities[name] = {
                "prov:type": _name("s:Verdict"),
                "prov:label": f"{meeting['node']}{at}: {meeting['verdict']}",
                **({"s:level": meeting["level"]} if meeting["level"] else {}),
            }
            self._relate("wasAttributedTo", {"prov:entity": name, "prov:agent": "s:sequester"})
            self._relate(
                "wasInfluencedBy",
                {"prov:influencee": nodes[meeting["node"]], "prov:influencer": name},
            )
            for side in ("mask", "data"):
                self._derive(name, self._set(meeting[side]), side)


def _name(text: str) -> dict[str, str]:
    """A qualified name as an attribute's value."""
    return {"$": text, "type": "prov:QUALIFIED_NAME"}
