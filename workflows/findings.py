"""What is found at a meeting: the verdict, its level, and what is said of it."""

from __future__ import annotations

import textwrap
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from html import escape

from ..nodes.rules import Meeting, Statistic
from ..nodes.scoreunits import UNNAMED
from ..nodes.touch import UnitTable
from .study import Doubt

_WIDTH = 66  # of what is said beside a head of 12: with "10. " before it, 80 columns
_MOST = 3  # doubts that are told in full
APART, CERTIFIED, LEAK, UNPROVEN = "apart", "certified", "leak", "unproven"


@dataclass(frozen=True)
class Finding:
    """The verdict on one meeting.

    Parameters
    ----------
    kind : {"extraction", "statistic"}
    node : str
        Where they meet.
    item : int or None
        Which element of a list.
    verdict : {"apart", "certified", "leak", "unproven"}
    level : {"subject", "run", ""}
        What independence is shown about.
    allowed : bool
        Whether the run may go on: an allowed leak yields values marked biased.
    mask_units, data_units, geometry_units : int
        Sets of units: the mask's values, the data's, and the mask's geometry.
    shared : int
        Units (or, at subject level, the mask's units of the tested subjects) that both touch.
    origins : tuple of str
        Declared sources of the mask.
    mask_path, data_path : tuple of str
        How a shared unit came to either side.
    mask_place : str
        Where the mask comes from.
    reason, cure : str
    lost : tuple of (node, reason, cure)
        Of a leak, where elements could not be told apart on the way: the overlap may be less
        than it seems. Told at the first leaking element of a node.
    made_of : tuple of str
        Of a leak, the origins by which the mask touches a shared unit: declared, or added by what
        a run has recorded.
    """

    kind: str
    node: str
    item: int | None
    verdict: str
    level: str
    allowed: bool
    mask_units: int = 0
    data_units: int = 0
    geometry_units: int = 0
    shared: int = 0
    origins: tuple[str, ...] = ()
    mask_path: tuple[str, ...] = ()
    data_path: tuple[str, ...] = ()
    mask_place: str = ""
    reason: str = ""
    cure: str = ""
    lost: tuple[tuple[str, str, str], ...] = ()
    made_of: tuple[str, ...] = ()

    def describe(self, table: UnitTable) -> str:
        """The finding in words: meeting, fold, shared units, origins, both paths, cure."""
        fold = "" if self.item is None else f", element {self.item}"
        parts = [("shared", _wrapped(table.describe(self.shared, most=2)) if self.shared else [])]
        parts += [("origin", _wrapped("; ".join(self.made_of)))]
        parts += [("region", list(self.mask_path)), ("data", list(self.data_path))]
        parts += [("cure", _wrapped(self.cure))]
        nodes_of: dict[tuple[str, str], list[str]] = {}
        for node, reason, cure in self.lost:
            nodes_of.setdefault((reason, cure), []).append(node)
        for (reason, cure), nodes in nodes_of.items():
            told = f"or it only seems so, at {', '.join(nodes[:3])}: {reason}; {cure}"
            parts.append(("lost", _wrapped(told)))
        lines = _wrapped(f"{self.verdict}: {self.node}{fold}: {self.reason}", _WIDTH + 10)
        for head, said in parts:
            for i, text in enumerate(said):
                arrow = "-> " if i and head in ("region", "data") else ""
                lines.append(f"    {head if not i else '':<8}{arrow}{text}")
        return "\n".join(lines)


def _wrapped(text: str, width: int = _WIDTH) -> list[str]:
    """Lines in which no name of a file or an option is broken."""
    return textwrap.wrap(text, width, break_on_hyphens=False, break_long_words=False)


class Findings(list[Finding]):
    """All findings of a graph; in a notebook, a table with a row per node.

    Attributes
    ----------
    warnings : list of str
        What was not judged, although values of an extraction go there.
    """

    warnings: list[str]

    def __init__(self, findings: Iterable[Finding] = (), warnings: Iterable[str] = ()) -> None:
        super().__init__(findings)
        self.warnings = list(warnings)

    def _repr_html_(self) -> str:
        rows = []
        for node in dict.fromkeys(finding.node for finding in self):
            here = [finding for finding in self if finding.node == node]
            marked = {LEAK: f"{LEAK} (values marked biased)"} if here[0].allowed else {}
            verdicts = dict.fromkeys(marked.get(one.verdict, one.verdict) for one in here)
            levels = dict.fromkeys(one.level for one in here if one.level)
            reasons = dict.fromkeys(one.reason for one in here if not one.allowed)
            told = (node, str(len(here)), *map(", ".join, (verdicts, levels)), "; ".join(reasons))
            rows.append("".join(f"<td>{escape(text)}</td>" for text in told))
        heads = ("node", "meetings", "verdict", "level", "refused because")
        head = "".join(f"<th>{text}</th>" for text in heads)
        body = "".join(f"<tr>{row}</tr>" for row in rows)
        return f"<table><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"


DECLARE = (
    "state where the region comes from: origin in STUDY.toml; for a script, sequester check ... "
    "--origins FILE.toml or read_table(..., origins=[Origin(source, files)]); if it was made from "
    "this study's data, say so with derived_from"
)
_NAME_COLUMN = (
    "give them as they stand in a column of the study table, and name it (Score(..., name=COLUMN), "
    "Groups(..., name=COLUMN)); or declare an origin of that name"
)


def declare(unknown: Iterable[str]) -> str:
    """The cure of an unknown choice."""
    return _NAME_COLUMN if all(what.startswith(UNNAMED) for what in unknown) else DECLARE


def undeclared(
    unknown: Iterable[str], doubts: Mapping[str, Doubt], otherwise: str = ""
) -> tuple[str, str]:
    """Reason and cure, when it is not known what something derives from.

    Parameters
    ----------
    unknown : iterable of str
    doubts : dict of str to Doubt
        Those of the study: they say more than that nobody has declared it.
    otherwise : str
        The cure of what is in no doubt, if it is another.
    """
    listed = sorted(unknown)
    doubted = [doubts[what] for what in listed if what in doubts]
    others = [what for what in listed if what not in doubts]
    told = doubted[:_MOST]
    reasons = [one.reason for one in told]
    commands: dict[str, list[str]] = {}
    for one in told:
        commands.setdefault(one.cure, []).extend([one.command] if one.command else [])
    cures = [
        f"{cure}: {'; '.join(listed)}" if listed else cure for cure, listed in commands.items()
    ]
    if doubted[_MOST:]:
        reasons.append(f"and so are {len(doubted) - _MOST} more")
    if others:
        reasons.append(f"nobody has declared what {', '.join(others[:3])} derives from")
        cures.append(otherwise or declare(others))
    return "; ".join(reasons), "; ".join(cures)


def these_subjects(contract: Meeting | Statistic, settings: Mapping[str, object]) -> bool:
    """Whether the claim is declared to be about the tested subjects only."""
    field = contract.these_only
    return settings.get(field) is True if isinstance(field, str) else field


def measured_in(table: UnitTable, data: int) -> int:
    """The units of the tested measurement: only these count for a leak."""
    acquired = data & ~table.scores
    return table.measured(frozenset(unit.suffix for unit in table.units_of(acquired)))


def several(table: UnitTable, chosen: int, tested: int) -> bool:
    """Whether a tested subject is one of several that a mask was chosen on."""
    own = table.company(tested)
    if not chosen & own:
        return False
    return bool(chosen & ~own) or len(table.people_of(tested)) > 1


def on_the_same(table: UnitTable, chosen: int, tested: int) -> bool:
    """Whether a mask was chosen on just those data of the tested subjects that are tested."""
    measured = measured_in(table, tested)
    tested &= measured
    subs = {unit.sub for unit in table.units_of(tested)}
    theirs = [unit for unit in table.units_of(chosen & measured) if unit.sub in subs]
    return bool(tested) and table.bits(theirs) == tested
