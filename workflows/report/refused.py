"""The page of a run that was refused: the leak, both ways to it side by side, and the fix."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ...nodes.images import write_bytes
from ..guard import GuardRefused
from ..record import record_of
from ..unitsets import members
from .page import rendered, worded


@dataclass(frozen=True)
class Cause:
    """Findings of one node with one reason, told once.

    Parameters
    ----------
    kind, node, verdict, reason, cure : str
    shared : str
        The units that both sides touch, in words.
    mask_path, data_path : list of str
        How such a unit came to either side.
    many : int
        How many elements have this fault.
    made_of : list of str
        Origins by which the region touches such a unit.
    lost : list of (nodes, reason, cure)
        Where elements could not be told apart on the way, so that it may only seem so.
    """

    kind: str
    node: str
    verdict: str
    reason: str
    cure: str
    shared: str
    mask_path: list[str]
    data_path: list[str]
    many: int
    made_of: list[str]
    lost: list[tuple[list[str], str, str]]


def refused_page(output: Path) -> Path:
    """Where the page of a refused run lies: beside the folder that was not written.

    Examples
    --------
    >>> str(refused_page(Path("garden/results")))
    'garden/results.refused.html'
    """
    return output.with_name(f"{output.name}.refused.html")


def write_refused(
    error: GuardRefused, output: Path, name: str, variants: Mapping[str, str] | None = None
) -> Path:
    """Write the page of a refused run.

    Parameters
    ----------
    error : GuardRefused
    output : Path
        The output folder that the run would have written.
    name : str
        The study's.
    variants : mapping of str to str, optional
        By declared variant: the region that it varies.

    Returns
    -------
    Path
        Of the page.
    """
    record = record_of(error, variants=variants)
    causes = causes_of(record)
    text = rendered(
        "refused.html.j2",
        record,
        title=f"{name}: refused",
        name=name,
        causes=causes,
        n_findings=sum(cause.many for cause in causes),
        started=error.started,
    )
    page = refused_page(output)
    page.parent.mkdir(parents=True, exist_ok=True)
    write_bytes(page, text.encode())
    return page


def causes_of(record: Mapping[str, Any]) -> list[Cause]:
    """What stands in the way, each node and reason once."""
    groups: dict[tuple[str, str], list[dict[str, Any]]] = {}
    for meeting in record["meetings"]:
        if not meeting["allowed"]:
            groups.setdefault((meeting["node"], meeting["reason"]), []).append(meeting)
    return [_cause(found, record) for found in groups.values()]


def _cause(found: Sequence[dict[str, Any]], record: Mapping[str, Any]) -> Cause:
    one, units = found[0], record["units"]
    shared = members(one["shared"], record["suffixes"])
    nodes_of: dict[tuple[str, str], list[str]] = {}
    for lost in (lost for meeting in found for lost in meeting["lost"]):
        nodes_of.setdefault((lost["reason"], lost["cure"]), []).append(lost["node"])
    return Cause(
        one["kind"],
        one["node"],
        one["verdict"],
        one["reason"],
        one["cure"],
        worded(shared, units) if shared else "",
        one["mask_path"],
        one["data_path"],
        len(found),
        one["made_of"],
        [(nodes, reason, cure) for (reason, cure), nodes in nodes_of.items()],
    )
