"""Every meeting of a graph, judged: apart, leak or unproven; and statistics that fit or not.

Levels, at a meeting of mask M with data D, both restricted to values of the tested measurement:

1. M and D share a unit: leak.
2. No shared unit, but a tested subject is among M's subjects: apart at run level when M touches
   that one subject only; a leak at subject level when it touches several, unless the claim is
   declared to be about these subjects only: then apart at run level.
3. No shared subject: apart at subject level.

A certificate that holds (orthogonal contrasts) makes a shared unit harmless: certified. It speaks
of two contrasts of the same data, so it covers a mask that was chosen on exactly the units of the
tested subjects that are tested, on maps of another contrast.

An unknown file on either side, or a mask nobody declared, leaves the meeting unproven. A leak
may run only into values marked biased, which no statistic accepts.

What decided that a subject is in the data at all has chosen, like what chose the mask. Scores
meet at the statistic: a value whose mask was chosen by its own subject's score is a leak when it
is compared with that score, also when the maps were held out; masks chosen by the scores of the
others are cross-fitted.
"""

from __future__ import annotations

import os
import re
from collections.abc import Iterator
from dataclasses import replace
from typing import Any

from ..nodes.errors import InputError
from ..nodes.images import n_volumes, open_image
from ..nodes.interfaces.contracts import as_stated
from ..nodes.orthogonality import Certificate
from ..nodes.rules import Inputs, Leaf, Meeting, Tree, lost_precision, path_to
from ..nodes.scoreunits import UNNAMED
from ..nodes.touch import UnitTable
from .ancestry import SEEN, Ancestry, flat, iterations, meetings_of, node_name
from .digests import digest, map_digest
from .findings import (
    APART,
    CERTIFIED,
    DECLARE,
    LEAK,
    UNPROVEN,
    Finding,
    Findings,
    measured_in,
    on_the_same,
    several,
    these_subjects,
    undeclared,
)
from .statistics import judge_statistic
from .study import Study
from .untold import untold

__all__ = ["APART", "CERTIFIED", "LEAK", "UNPROVEN", "Finding", "judge"]

_PLACE = re.compile(rf"(.*?)(?: volume (\d+))?(?:{re.escape(SEEN)})?", re.DOTALL)


def _subs(table: UnitTable, bits: int) -> set[str]:
    return {unit.sub for unit in table.units_of(bits)}


def judge(ancestry: Ancestry) -> Findings:
    """All findings of a graph, meetings in the order in which they would run."""
    findings = Findings(warnings=[one.describe() for one in untold(ancestry)])
    for node in ancestry.nodes:
        meeting, statistic = meetings_of(node.interface)
        if meeting is not None:
            findings += _extractions(ancestry, node, meeting)
        if statistic is not None:
            findings.append(judge_statistic(ancestry, node, statistic))
    return findings


def meetings_at(
    node: Any, meeting: Meeting, inputs: Inputs
) -> tuple[list[Inputs], list[tuple[Leaf, Leaf, Inputs]]]:
    """What each iteration of a node is given; every mask with its data, and in which iteration."""
    given = [as_stated(node.interface, one) for one in flat(iterations(node, inputs))]
    return given, [(mask, data, one) for one in given for mask, data in meeting.pairs(one)]


def _extractions(ancestry: Ancestry, node: Any, meeting: Meeting) -> list[Finding]:
    name = node_name(node)
    given, met = meetings_at(node, meeting, ancestry.inputs[name])
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
    found: list[Finding] = []
    leaked = False
    for i, (mask, data, one) in enumerate(met):
        finding = _meet(
            ancestry.study,
            name,
            i if len(met) > 1 else None,
            mask,
            data,
            biased=one.settings.get(meeting.biased) is True,
            these_only=these_subjects(meeting, one.settings),
            certificate=one.settings.get(meeting.certificate),
        )
        if finding.verdict == LEAK and not leaked:
            leaked = True
            ways = [*lost_precision(mask, finding.shared), *lost_precision(data, finding.shared)]
            finding = replace(finding, lost=tuple(dict.fromkeys(ways)))
        found.append(finding)
    return found


def _meet(
    study: Study,
    name: str,
    item: int | None,
    mask: Leaf,
    data: Leaf,
    *,
    biased: bool,
    these_only: bool,
    certificate: object,
) -> Finding:
    table = study.table
    measured = measured_in(table, data.touch.values)
    of_data, kept_by = data.touch.values & measured, data.touch.selected & measured
    of_mask = mask.touch.choosers & measured | kept_by
    unknown = sorted(mask.touch.unknown | data.touch.unknown)
    own = table.company(of_data)
    shared = table.overlapping(of_mask) & of_data
    verdict, level, reason, cure = APART, "", "", ""
    made_of: tuple[str, ...] = ()
    both = same_files(study, mask, data) if shared or certificate is not None else set()
    if not both and certificate is not None:
        both = same_maps(study, mask, data)
    lacks = ""
    if isinstance(certificate, Certificate) and of_mask & own:
        lacks = _not_covered(study, certificate, mask, data, both)
    if isinstance(certificate, Certificate) and of_mask & own and not (lacks or unknown):
        verdict, level = CERTIFIED, "subject"
        reason = f"chosen on the tested data by an orthogonal contrast: {certificate.describe()}"
    elif shared:
        verdict = LEAK
        made_of = () if both else _made_of(study, mask, shared)
        reason, cure = _circular(table, mask, shared, both, made_of)
    elif several(table, of_mask, of_data) and not these_only:
        verdict, level, shared = LEAK, "subject", of_mask & own
        reason, cure = _same_people(table, mask, of_mask, of_data)
    elif unknown:
        verdict = UNPROVEN
        of_region = mask.touch.unknown or all(what.startswith(UNNAMED) for what in unknown)
        otherwise = "" if of_region else "add the file to the study table"
        reason, cure = undeclared(unknown, study.doubts, otherwise)
    elif not of_data:
        verdict, reason = UNPROVEN, "the graph shows no file of the study table in the tested data"
        cure = (
            "list the files in the study table, and give them to a node as inputs (literals, "
            "iterables, a file grabber) so that the graph shows them"
        )
    elif not mask.touch.values and not mask.touch.origins:
        verdict, reason = UNPROVEN, "nothing says where the mask comes from"
        cure = DECLARE
    elif several(table, of_mask, of_data):
        level, reason = "run", "the mask was chosen on other runs of the tested subjects"
    elif of_mask & own:
        level, reason = "run", "the mask was chosen on other runs of this one subject"
    else:
        level, reason = "subject", "the mask was chosen without any data of the tested subjects"
    leak = verdict == LEAK
    if leak and lacks:
        reason += f"; {lacks}"
    # One unit on each side for the two ways: the same, or two that overlap (or one person's).
    to_data = shared & -shared if leak and not level else of_data & -of_data
    to_mask = table.overlapping(to_data) & of_mask if leak and not level else shared
    chosen_by = mask if mask.touch.choosers & to_mask else data
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
        tuple(path_to(chosen_by, to_mask & -to_mask)) if leak else (),
        tuple(path_to(data, to_data)) if leak else (),
        place_of(mask),
        reason,
        cure,
        made_of=made_of,
    )


def _made_of(study: Study, mask: Leaf, shared: int) -> tuple[str, ...]:
    """The origins of a mask that touch shared units: as declared, or as seen while running."""
    touching, known = study.table.overlapping(shared), study.declared
    made_of = {
        source for source in mask.touch.origins & known.keys() if known[source].choosers & touching
    }
    for leaf in () if made_of else _sources(mask):
        if leaf.touch.choosers & touching:
            made_of |= leaf.touch.origins
    return tuple(sorted(made_of))


def _circular(
    table: UnitTable,
    mask: Leaf,
    shared: int,
    both: set[str],
    made_of: tuple[str, ...],
) -> tuple[str, str]:
    """Reason and cure, when the tested data have chosen; `both` are files of either side."""
    reason = "the mask was chosen on the data it would be tested on"
    cure = (
        "choose the region without the tested data (plan k-fold or leave-one-subject-out; a "
        "region from outside the study), or read it as exploratory: a value without "
        "interval and p"
    )
    if not mask.touch.choosers & table.overlapping(shared):
        reason = "subjects were kept or left out by the very data that is tested"
        cure = "keep them by other data, or leave them out with an exclude_reason beforehand"
    elif made_of:
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
    return reason, cure


def _not_covered(
    study: Study, certificate: Certificate, mask: Leaf, data: Leaf, both: set[str]
) -> str:
    """Why a certificate does not cover a meeting; "" when it does."""
    table = study.table
    measured = measured_in(table, data.touch.values)
    of_data = data.touch.values & measured
    own = table.company(of_data) & measured
    if both:
        return "no certificate covers a map which chose and is tested"
    if not certificate.holds:
        return f"the certificate does not hold: {certificate.describe()}"
    if (mask.touch.selected | data.touch.selected) & own:
        return "the certificate says nothing of what kept or left out subjects"
    if not on_the_same(table, mask.touch.values, data.touch.values):
        return (
            "the certificate is about the data that are tested, and the mask was not chosen on "
            "exactly these"
        )
    chose, tested = _contrasts(study, mask, own), _contrasts(study, data, own)
    if "" in chose | tested:
        return (
            "the certificate is about two contrasts, and the study table does not say of which "
            "each of these maps is: fill its contrast column"
        )
    if chose & tested:
        return (
            f"the certificate is about two contrasts, and {min(chose & tested)} chose and is tested"
        )
    return ""


def _contrasts(study: Study, leaf: Tree, units: int) -> set[str]:
    """Of which contrasts the files are by which an element touches some units; "" is unknown."""
    found: set[str] = set()
    for source in _sources(leaf):
        if source.touch.values & units:
            path, volume = _file(source.place)
            rows = study.rows_of(path, volume)
            found |= {row.contrast for row in rows} or {""}
    return found


def _same_people(table: UnitTable, mask: Leaf, of_mask: int, of_data: int) -> tuple[str, str]:
    """Reason and cure, when other data of the tested people have chosen."""
    shared = of_mask & table.company(of_data)
    if not _subs(table, of_mask) & _subs(table, of_data):
        alike = ", ".join(sorted(table.people_of(shared)))
        return (
            "the mask was chosen on somebody who counts as the same subject as the tested "
            f"one (exchange {alike})",
            "give both the same label, so that they are held out together",
        )
    narrow = (
        'declare the narrower claim, about these subjects only (claim = "these-subjects", '
        "these_subjects=True)"
    )
    if not mask.touch.choosers & shared:
        return (
            "subjects were kept or left out by other data of the tested ones: what persists in "
            "them is in both",
            f"keep them by something else, or {narrow}",
        )
    return (
        "the mask was chosen on other runs of several subjects, the tested ones among "
        "them: their persistent effects are in both",
        "leave the tested subject out of the selection, or choose each subject's own "
        f"mask from their own other runs; or {narrow}",
    )


def source_files(leaf: Tree) -> set[str]:
    """The files whose values an element derives from."""
    return {source.place for source in _sources(leaf)}


def same_files(study: Study, mask: Tree, data: Tree) -> set[str]:
    """The tested files that a mask derives from, by whatever name, link or copy it knew them."""
    touching = study.table.overlapping(data.touch.values)
    chose = {_content(study, leaf.place) for leaf in _sources(mask) if leaf.touch.values & touching}
    return {
        place
        for place in source_files(data)
        for content, volume in [_content(study, place)]
        if any(content == c and (None in (volume, v) or volume == v) for c, v in chose)
    }


def same_maps(study: Study, mask: Tree, data: Tree) -> set[str]:
    """The tested maps that a mask derives from, however their files store them."""
    touching = study.table.overlapping(data.touch.values)
    chose: set[str] = set()
    for leaf in _sources(mask):
        if leaf.touch.values & touching:
            chose |= _maps(study, leaf.place)
    return {place for place in source_files(data) if chose & _maps(study, place)}


def _maps(study: Study, place: str) -> set[str]:
    """What the maps of a place say; nothing for what is no image: its bytes were compared."""
    name, volume = _file(place)
    path = os.path.realpath(study.full(name))
    try:
        volumes = range(n_volumes(path, open_image(path))) if volume is None else [int(volume)]
        return {map_digest(path, one) for one in volumes}
    except InputError:
        return set()


def _content(study: Study, place: str) -> tuple[str, str | None]:
    """What stands in a file, and which of its volumes is meant."""
    name, volume = _file(place)
    path = os.path.realpath(study.full(name))
    return digest(path) if os.path.isfile(path) else path, volume


def _file(place: str) -> tuple[str, str | None]:
    """The file of a place, and the volume in it that is meant."""
    found = _PLACE.fullmatch(place)
    assert found is not None, "every text is a place"
    return found[1], found[2]


def _sources(leaf: Tree) -> Iterator[Tree]:
    """Where the values of an element come into the graph."""
    seen, waiting = set(), [leaf]
    while waiting:
        here = waiting.pop()
        if id(here) in seen or not here.touch.values:
            continue
        seen.add(id(here))
        waiting += here.parents
        if not here.parents:
            yield here


def place_of(leaf: Tree) -> str:
    """Where an element comes from: a file, or an output of a node."""
    while not leaf.place and len(leaf.parents) == 1:
        leaf = leaf.parents[0]
    return leaf.place
