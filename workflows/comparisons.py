"""Comparisons of regions, stated in STUDY.toml: read, checked, and built into the workflow."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from nipype import Merge, Node, Workflow

from ..nodes.errors import InputError
from ..nodes.interfaces import CompareFixed, CompareHeldOut
from ..nodes.interfaces.comparisons import KINDS
from .keys import Reader
from .plans import CROSS_FITTED, EXPLORATORY, node
from .rois import Roi

_KEYS = {"name", "kind", "rois", "smallest", "factors"}
_COUNTS = {"difference": (2, 2), "equivalence": (1, 2), "anova": (2, 100), "interaction": (4, 4)}


@dataclass(frozen=True)
class Comparison:
    """Regions against each other.

    Parameters
    ----------
    name, kind : str
    rois : tuple of str
        Of an interaction in the order a1 b1, a1 b2, a2 b1, a2 b2.
    smallest : float
        Of an equivalence: the smallest effect of interest.
    factors : tuple of tuple of str
        Of an interaction: the names of the levels.
    """

    name: str
    kind: str
    rois: tuple[str, ...]
    smallest: float = 0.0
    factors: tuple[tuple[str, ...], ...] = ()


def read_comparisons(
    read: Reader, toml: dict[str, Any], rois: Sequence[Roi]
) -> tuple[Comparison, ...]:
    """The ``[[comparison]]`` tables of a STUDY.toml.

    Raises
    ------
    InputError
        For anything wrong in them; names file and line.
    """
    stated = {roi.name: roi for roi in rois if not roi.variant_of}
    made: list[Comparison] = []
    for i, table in enumerate(read.tables(toml, "comparison", [])):
        made.append(_read(read.within("comparison", i), table, stated))
    names = [one.name.lower() for one in made] + [name.lower() for name in stated]
    for name in names:
        if names.count(name) > 1:
            raise InputError(
                "two [[comparison]] or [[roi]] of one name", where=str(read.path), got=repr(name)
            )
    return tuple(made)


def _read(read: Reader, table: dict[str, Any], stated: dict[str, Roi]) -> Comparison:
    read.known(table, _KEYS, "comparison")
    name, kind = read.label(table, "name"), read.one_of(table, "kind", KINDS, ...)
    rois = read.get(table, "rois", list, ...)
    for one in rois:
        if one not in stated:
            raise InputError(
                f"comparison of an unknown region {one!r}",
                where=read.where("rois"),
                expected="names of [[roi]]: " + ", ".join(stated),
            )
    least, most = _COUNTS[kind]
    if not least <= len(rois) <= most or len(set(rois)) < len(rois):
        raise InputError(
            f"{kind} of {len(rois)} regions",
            where=read.where("rois"),
            expected=f"{least} different ones" if least == most else f"{least} to {most} of them",
            got=", ".join(map(str, rois)),
        )
    _compatible(read, [stated[one] for one in rois])
    smallest = read.number(table, "smallest", ... if kind == "equivalence" else 0)
    if kind == "equivalence" and not smallest > 0:
        raise InputError(
            "smallest out of range",
            where=read.where("smallest"),
            expected="> 0",
            got=f"{smallest:g}",
        )
    factors = read.get(table, "factors", list, ... if kind == "interaction" else [])
    if kind == "interaction" and [len(levels) for levels in factors] != [2, 2]:
        raise InputError(
            "factors of another form",
            where=read.where("factors"),
            expected='[["Arbor", "Brook"], ["amber", "teal"]]: two names for each of two factors',
            got=str(factors),
        )
    return Comparison(
        name, kind, tuple(rois), smallest, tuple(tuple(map(str, levels)) for levels in factors)
    )


def _compatible(read: Reader, rois: Sequence[Roi]) -> None:
    """Refuse regions whose values cannot be compared under one null."""
    where, first = read.where("rois"), rois[0]
    for roi in rois:
        if roi.plan == EXPLORATORY or roi.test == "none" or roi.each_label:
            raise InputError(
                f"{roi.name} has no single tested value to compare",
                where=where,
                expected="regions with a test of their own: no exploratory look, no each_label",
            )
        if roi.procedure is not None and roi.procedure.model is not None:
            raise InputError(
                f"{roi.name} compares groups or goes with a score already",
                where=where,
                expected="regions whose mean is tested",
            )
        procedure = roi.procedure
        if roi.plan in CROSS_FITTED and procedure is not None and procedure.may_find_nothing:
            raise InputError(
                f"{roi.name} may find no region in a fold, and cannot be compared",
                where=where,
                expected="a rule that always finds something: where folds stay empty under flips, "
                "equal effects differ too often (50 % at a nominal 5 %)",
                got=f'{procedure.describe()}, on_empty = "{procedure.on_empty}"',
                remedy=f'give {roi.name} on_empty = "strongest" with a k, or the rule strongest '
                "or peak-sphere",
            )
        if (roi.plan in CROSS_FITTED) != (first.plan in CROSS_FITTED):
            raise InputError(
                "a region of folds and one without cannot be compared",
                where=where,
                expected="all of them of folded plans, or none",
                got=f"{first.name}: {first.plan}, {roi.name}: {roi.plan}",
                remedy="the folds' null (no effect anywhere) is not that of a region given "
                "beforehand; choose both in folds, or neither",
            )
        if sorted(set(roi.tested.people)) != sorted(set(first.tested.people)):
            raise InputError(
                "regions of different subjects cannot be compared within subjects",
                where=where,
                got=f"{first.name} and {roi.name}",
                remedy="select the same subjects for both",
            )
        if roi.plan in CROSS_FITTED and roi.n_flips != first.n_flips:
            raise InputError(
                "regions with other numbers of flips cannot be flipped together",
                where=where,
                got=f"{first.n_flips} and {roi.n_flips}",
                remedy="give both the same flips",
            )


def add_comparison(
    workflow: Workflow, one: Comparison, plans: dict[str, Workflow], rois: dict[str, Roi]
) -> None:
    """Connect a comparison to the plans of its regions."""
    held_out = rois[one.rois[0]].plan in CROSS_FITTED
    interface = CompareHeldOut() if held_out else CompareFixed()
    made = node(
        interface,
        one.name,
        kind=one.kind,
        names=list(one.rois),
        smallest=one.smallest,
        factors=[list(levels) for levels in one.factors] or None,
    )
    fields = ("values_file", "record_file") if held_out else ("values",)
    for field in fields:
        merge = Node(Merge(len(one.rois), no_flatten=True), name=f"{one.name}{field.title()}")
        merge.name = "".join(c for c in merge.name if c.isalnum())
        for i, name in enumerate(one.rois, 1):
            workflow.connect(plans[name], f"outputnode.{field}", merge, f"in{i}")
        workflow.connect(merge, "out", made, field if field == "values" else f"{field}s")
    if not held_out:
        labels = [plans[name].get_node("extract").inputs.labels for name in one.rois]
        made.inputs.labels = sorted(set(labels[0]))
        made.inputs.row_labels = labels
