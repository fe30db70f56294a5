"""Every meeting of a graph, judged: apart, leak or unproven; and statistics that fit or not.

Levels, at a meeting of mask M with data D, both restricted to values of the tested measurement:

1. M and D share a unit: leak.
2. No shared unit, but a tested subject is among M's subjects: apart at run level when M touches
   that one subject only; a leak at subject level when it touches several, unless the claim is
   declared to be about these subjects only: then apart at run level.
3. No shared subject: apart at subject level.

A certificate that holds (orthogonal contrasts) makes a shared unit harmless: certified.

An unknown file on either side, or a mask nobody declared, leaves the meeting unproven. A leak
may run only into values marked biased, which no statistic accepts.
"""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from dataclasses import dataclass, replace

from ..nodes.foldnull import plain_t_false_positives
from ..nodes.orthogonality import Certificate
from ..nodes.rules import Leaf, Meeting, Statistic, joined, leaves, path_to
from ..nodes.touch import Extraction, Touch, UnitTable, cross_fitted
from .ancestry import Ancestry, flat, iterations, meetings_of, node_name

_WIDTH = 84  # of a line of a refusal's reason and cure
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

    def describe(self, table: UnitTable) -> str:
        """The finding in words: meeting, fold, shared units, both paths, cure."""
        fold = "" if self.item is None else f", element {self.item}"
        parts = [("shared", [table.describe(self.shared, most=2)] if self.shared else [])]
        parts += [("region", list(self.mask_path)), ("data", list(self.data_path))]
        parts += [("cure", textwrap.wrap(self.cure, _WIDTH))]
        lines = textwrap.wrap(f"{self.verdict}: {self.node}{fold}: {self.reason}", _WIDTH + 10)
        for head, told in parts:
            for i, text in enumerate(told):
                arrow = "-> " if i and head in ("region", "data") else ""
                lines.append(f"    {head if not i else '':<8}{arrow}{text}")
        return "\n".join(lines)


_DECLARE = (
    "state where the region comes from: origin in STUDY.toml, or read_table(..., origins=[Origin("
    "source, files)]); if it was made from this study's data, say so with derived_from"
)


def _subs(table: UnitTable, bits: int) -> set[str]:
    return {unit.sub for unit in table.units_of(bits)}


def judge(ancestry: Ancestry) -> list[Finding]:
    """All findings of a graph, meetings in the order in which they would run."""
    findings: list[Finding] = []
    for node in ancestry.nodes:
        meeting, statistic = meetings_of(node.interface)
        if meeting is not None:
            findings += _extractions(ancestry, node, meeting)
        if statistic is not None:
            findings.append(_statistic(ancestry, node, statistic))
    return findings


def _extractions(ancestry: Ancestry, node: object, meeting: Meeting) -> list[Finding]:
    name = node_name(node)
    given = list(flat(iterations(node, ancestry.inputs[name])))
    met = [(mask, data, one) for one in given for mask, data in meeting.pairs(one)]
    table = ancestry.study.table
    unpaired = [lengths for one in given if (lengths := meeting.lengths(one)) is not None]
    if unpaired:
        masks, maps = unpaired[0]
        return [
            Finding(
                "extraction",
                name,
                None,
                UNPROVEN,
                "",
                False,
                reason=f"{masks} masks do not pair up with {maps} maps",
                cure="give one label and one map for every row that takes part",
            )
        ]
    return [
        _meet(
            table,
            name,
            i if len(met) > 1 else None,
            mask,
            data,
            biased=one.settings.get(meeting.biased) is True,
            these_only=_these(meeting, one.settings),
            certificate=one.settings.get(meeting.certificate),
        )
        for i, (mask, data, one) in enumerate(met)
    ]


def _these(contract: Meeting | Statistic, settings: Mapping[str, object]) -> bool:
    """Whether the claim is declared to be about the tested subjects only."""
    return settings.get(contract.these_only) is True


def _measured_in(table: UnitTable, data: int) -> int:
    """The units of the tested measurement: only these count for a leak."""
    return table.measured(frozenset(unit.suffix for unit in table.units_of(data)))


def _meet(
    table: UnitTable,
    name: str,
    item: int | None,
    mask: Leaf,
    data: Leaf,
    *,
    biased: bool,
    these_only: bool,
    certificate: object,
) -> Finding:
    measured = _measured_in(table, data.touch.values)
    of_mask, of_data = mask.touch.values & measured, data.touch.values & measured
    unknown = sorted(mask.touch.unknown | data.touch.unknown)
    tested = table.people_of(of_data)
    choosers = table.people_of(of_mask)
    shared = table.overlapping(of_mask) & of_data
    verdict, level, reason, cure = APART, "", "", ""
    both = _files(mask) & _files(data) if shared or certificate is not None else set()
    if (
        isinstance(certificate, Certificate)
        and certificate.holds
        and choosers & tested
        and not (both or unknown)
    ):
        verdict, level = CERTIFIED, "subject"
        reason = f"chosen on the tested data by an orthogonal contrast: {certificate.describe()}"
    elif shared:
        verdict, reason = LEAK, "the mask was chosen on the data it would be tested on"
        cure = (
            "choose the region without the tested data (plan k-fold or leave-one-subject-out; a "
            "region from outside the study), or read it as exploratory: a value without "
            "interval and p"
        )
        if not both and mask.touch.origins:
            reason = (
                "the region was made from the data it would be tested on, as its origin declares "
                "or a run has recorded"
            )
        elif not both:
            reason = "the mask was chosen on another map of the very data it would be tested on"
            cure = (
                "choose on that map in held-out subjects (plan k-fold with choose_on), or show "
                "that the two contrasts are orthogonal (plan orthogonal-contrast)"
            )
        if isinstance(certificate, Certificate):
            reason += (
                f"; no certificate covers {min(both)}, which chose and is tested"
                if both
                else f", and the certificate does not hold: {certificate.describe()}"
            )
    elif _several(choosers, tested) and not these_only:
        verdict, level = LEAK, "subject"
        shared = sum(1 << n for n in table.numbers(of_mask) if table.people_of(1 << n) & tested)
        reason = (
            "the mask was chosen on other runs of several subjects, the tested ones among "
            "them: their persistent effects are in both"
        )
        cure = (
            "leave the tested subject out of the selection, or choose each subject's own "
            "mask from their own other runs; or declare the narrower claim, about these subjects "
            'only (claim = "these-subjects", these_subjects=True)'
        )
        if not _subs(table, of_mask) & _subs(table, of_data):
            alike = ", ".join(sorted(choosers & tested))
            reason = (
                "the mask was chosen on somebody who counts as the same subject as the tested "
                f"one (exchange {alike})"
            )
            cure = "give both the same label, so that they are held out together"
    elif unknown:
        verdict = UNPROVEN
        reason = f"nobody has declared what {', '.join(unknown[:3])} derives from"
        cure = _DECLARE if mask.touch.unknown else "add the file to the study table"
    elif not of_data:
        verdict, reason = UNPROVEN, "the graph shows no file of the study table in the tested data"
        cure = (
            "list the files in the study table, and give them to a node as inputs (literals, "
            "iterables, a file grabber) so that the graph shows them"
        )
    elif not mask.touch.values and not mask.touch.origins:
        verdict, reason = UNPROVEN, "nothing says where the mask comes from"
        cure = _DECLARE
    elif _several(choosers, tested):
        level, reason = "run", "the mask was chosen on other runs of the tested subjects"
    elif choosers & tested:
        level, reason = "run", "the mask was chosen on other runs of this one subject"
    else:
        level, reason = "subject", "the mask was chosen without any data of the tested subjects"
    leak = verdict == LEAK
    # One unit on each side for the two ways: the same, or two that overlap (or one person's).
    to_data = shared & -shared if leak and not level else of_data & -of_data
    to_mask = table.overlapping(to_data) & of_mask if leak and not level else shared
    return Finding(
        "extraction",
        name,
        item,
        verdict,
        level,
        verdict in (APART, CERTIFIED) or (leak and biased),
        of_mask,
        of_data,
        mask.touch.geometry,
        shared if leak else 0,
        tuple(sorted(mask.touch.origins)),
        tuple(path_to(mask, to_mask & -to_mask)) if leak else (),
        tuple(path_to(data, to_data)) if leak else (),
        _place(mask),
        reason,
        cure,
    )


def _files(leaf: Leaf) -> set[str]:
    """The files whose values an element derives from."""
    found, seen, waiting = set(), set(), [leaf]
    while waiting:
        here = waiting.pop()
        if id(here) in seen or not here.touch.values:
            continue
        seen.add(id(here))
        waiting += here.parents
        if not here.parents:
            found.add(here.place)
    return found


def _several(choosers: frozenset[str], tested: frozenset[str]) -> bool:
    """Whether a tested subject is one of several that a mask was chosen on."""
    return bool(choosers & tested) and not (len(choosers) == 1 and choosers == tested)


def _place(leaf: Leaf) -> str:
    while not leaf.place and len(leaf.parents) == 1:
        leaf = leaf.parents[0]
    return leaf.place


def _statistic(ancestry: Ancestry, node: object, statistic: Statistic) -> Finding:
    name = node_name(node)
    # Values typed in have no tree: an empty touch, which is not let pass.
    tree = ancestry.inputs[name].trees.get(statistic.values) or Leaf(Touch())
    table = ancestry.study.table
    whole = joined(leaves(tree))
    every = [
        replace(mark, mask=mark.mask & _measured_in(table, mark.data))
        for mark in whole.touch.extractions
    ]
    marks = [mark for mark in every if not mark.certified]
    mask_units = data_units = 0
    for mark in every:
        mask_units |= mark.mask
        data_units |= mark.data
    verdict, reason, cure = APART, "", ""
    if whole.touch.biased:
        verdict, reason = LEAK, "the values are marked biased, and no statistic accepts them"
        cure = "report the exploratory value alone, or choose the region without the tested data"
    elif any(table.overlapping(mark.mask) & mark.data for mark in marks):
        verdict, reason = LEAK, "its values were read in a region chosen on those very data"
        cure = "see the extraction that leaks"
    elif not statistic.cross_fitted and cross_fitted(
        marks, table, averaged=_averaged(ancestry, name, statistic, data_units)
    ):
        n = len(marks)
        rate = (
            f" (about {plain_t_false_positives(n, n, 0.01):.0%} of the time at a nominal 5 %, "
            f"for n = {n} and a threshold of p < .01)"
            if n > 3
            else ""
        )
        verdict, reason = (
            LEAK,
            (
                f"the {n} values are cross-fitted: each mask was chosen on the other values' data, "
                "so they are correlated and this statistic rejects a true null far more often than "
                f"it says{rate}"
            ),
        )
        cure = statistic.cure
    elif not _these(statistic, ancestry.inputs[name].settings) and any(
        _several(table.people_of(mark.mask), table.people_of(mark.data)) for mark in marks
    ):
        verdict = LEAK
        reason = (
            "its region was chosen on other runs of the tested subjects, which does not protect "
            "a claim about those they were drawn from"
        )
        cure = (
            'declare that it speaks of these subjects only (claim = "these-subjects", '
            "these_subjects=True), or choose the region on other subjects"
        )
    elif whole.touch.unknown:
        unknown = ", ".join(sorted(whole.touch.unknown)[:3])
        verdict, reason = UNPROVEN, f"nobody has declared what {unknown} derives from"
        cure = _DECLARE
    elif not every:
        verdict, reason = UNPROVEN, "nothing says in which region its values were read"
        cure = "read them with Extract, so that the region and the data are judged"
    return Finding(
        "statistic",
        name,
        None,
        verdict,
        _weakest(marks, table) if verdict == APART else "",
        verdict == APART,
        mask_units,
        data_units,
        reason=reason,
        cure=cure,
    )


def _averaged(ancestry: Ancestry, name: str, statistic: Statistic, data: int) -> bool:
    """Whether a statistic averages each person's values first: its labels name each person."""
    labels = ancestry.inputs[name].settings.get(statistic.labels)
    return labels is not None and len(set(labels)) == len(ancestry.study.table.people_of(data))


def _weakest(marks: list[Extraction], table: UnitTable) -> str:
    within = any(table.people_of(mark.mask) & table.people_of(mark.data) for mark in marks)
    return "run" if within else "subject"
