"""Folds around group maps that no flip can repeat: any software's, or those of a design.

`around_folds` puts a group node of yours between the folds: it runs once per fold, on the list
of maps that choose there. `compared` maps the difference of two groups (or any design that
compares two) without each fold. Both read every map in the mask chosen without it, and give
the estimate alone: the test that matches would repeat the whole procedure.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from nipype import IdentityInterface, MapNode, Node, Workflow

from ..nodes.design import Design
from ..nodes.errors import InputError
from ..nodes.folds import LeaveOneOut, Scheme
from ..nodes.groupmaps import Missing
from ..nodes.interfaces import (
    ChooseMask,
    Extract,
    FoldLists,
    HeldOutSummary,
    LeaveOutMaps,
    MasksByRow,
)
from ..nodes.interfaces.foldlists import fold_of_row
from .plans import LEAVE_ONE_OUT, node
from .regions import mask_of

_OUTPUTS = ("mask_files", "values", "record_file")


def around_folds(
    name: str,
    group: Any,
    list_field: str,
    map_field: str,
    rule: Any,
    labels: Sequence[str],
    scheme: Scheme | None = None,
    search: Node | Workflow | None = None,
    search_name: str = "whole map",
    labels_field: str = "",
    tail: str = "positive",
    on_empty: str = "empty",
    k: int = 0,
    missing: Missing | None = None,
    plan: str = "",
    mem_gb: float = 1.0,
) -> Workflow:
    """Choose a region on each fold's group map by software of any kind, and read it held out.

    Parameters
    ----------
    name : str
        Of the region and of the workflow.
    group : nipype interface
        Makes one group map of a list of maps; its other inputs are set beforehand, alike for
        all folds. It runs once per fold, so it must choose nothing by itself.
    list_field, map_field : str
        Its input that takes the list, and its output with the map.
    rule : Threshold, Cluster, Strongest or another mask rule
        Applied to the map as it comes (t, z ...): a threshold is a height.
    labels : sequence of str
        Per map of ``inputnode.effects``: who it belongs to.
    scheme : Scheme, optional
        Default leave-one-out. With at most half as many folds as subjects there is an interval.
    search : Node or Workflow, optional
        With an output ``mask_file`` (of a workflow's ``outputnode``): the search region.
    search_name : str
        What the search region is called in the result.
    labels_field : str
        An input of `group` that takes the labels of the list's maps.
    tail : {"positive", "negative"}
    on_empty, k : as in `ChooseMask`
    missing : Missing, optional
        What counts as no data where the values are read.
    plan : str
        What the plan is called in the result.
    mem_gb : float
        Needed by `group` for one fold.

    Returns
    -------
    nipype.Workflow
        With ``inputnode.effects`` and ``outputnode.{mask_files, values, record_file}``.

    Raises
    ------
    InputError
        When `group` has no such field, or the rule's threshold is a p, whose degrees of freedom
        only the software knows.

    Examples
    --------
    >>> from nipype import Function
    >>> from sequester.nodes.folds import KFold
    >>> from sequester.nodes.masks import Cluster
    >>> group = Function(["in_files"], ["out_file"], "def group(in_files): ...")
    >>> people = [f"{i:02}" for i in range(20)]
    >>> plan = around_folds(
    ...     "arbor", group, "in_files", "out_file", Cluster(height=3.1), people, KFold(5)
    ... )
    >>> plan.list_node_names()
    ['choose', 'extract', 'folds', 'group', 'inputnode', 'outputnode', 'rows', 'summary']
    """
    given = [list_field, *([labels_field] if labels_field else [])]
    inputs, outputs = group.inputs.copyable_trait_names(), list(group._outputs().get())
    for field, there in [*((field, inputs) for field in given), (map_field, outputs)]:
        if field not in there:
            raise InputError(
                "the group node has no such field",
                where=field,
                expected=f"one of {', '.join(there)}",
            )
    if getattr(rule, "p", None) is not None:
        raise InputError(
            "a threshold as p on a map from other software",
            expected="a height on the map as it comes",
            got=f"p = {rule.p:g}",
            remedy="its degrees of freedom are known to the software alone: give height",
        )
    workflow, start, end = _ends(name)
    labels, scheme = list(labels), scheme or LeaveOneOut()
    folds = node(FoldLists(), "folds", labels=labels, scheme=scheme)
    # Somebody else's node keeps its own way of hashing.
    map_of = MapNode(group, iterfield=given, name="group", mem_gb=mem_gb, n_procs=1)
    choose = _choose(["in_file"], rule, tail, on_empty, k)
    workflow.connect(
        [
            (start, folds, [("effects", "in_files")]),
            (folds, map_of, [("selection_files", list_field)]),
            (map_of, choose, [(map_field, "in_file")]),
        ]
    )
    if labels_field:
        workflow.connect(folds, "selection_labels", map_of, labels_field)
    names = (name, plan or _plan(scheme), search_name)
    about = {"names": names, "rule": rule.describe(tail)}
    _read(workflow, start, end, choose, search, labels, scheme, missing, about)
    return workflow


def compared(
    name: str,
    design: Design,
    rule: Any,
    labels: Sequence[str],
    groups: Sequence[str],
    scheme: Scheme | None = None,
    search: Node | Workflow | None = None,
    search_name: str = "whole map",
    tail: str = "positive",
    on_empty: str = "empty",
    k: int = 0,
    missing: Missing | None = None,
    plan: str = "",
    mem_gb: float = 1.0,
) -> Workflow:
    """Choose a region by the difference of two groups, and read that difference held out.

    Folds that hold out people of both groups read both in one mask: give `KFold` the groups
    as strata.

    Parameters
    ----------
    name : str
        Of the region and of the workflow.
    design : Design
        Compares two groups (`two_sample`, with covariates if wished), one row per map.
    rule : Threshold, Cluster, Strongest or another mask rule
        A p has the degrees of freedom of the design.
    labels, groups : sequence of str
        Per map of ``inputnode.effects``: who it belongs to, and that subject's group.
    scheme : Scheme, optional
        Default leave-one-out.
    search : Node or Workflow, optional
        With an output ``mask_file`` (of a workflow's ``outputnode``): the search region.
    search_name : str
    tail : {"positive", "negative"}
        Look where the first group is higher, or lower.
    on_empty, k : as in `ChooseMask`
    missing : Missing, optional
    plan : str
        What the plan is called in the result.
    mem_gb : float
        Needed by the node that holds the whole stack.

    Returns
    -------
    nipype.Workflow
        With ``inputnode.effects`` and ``outputnode.{mask_files, values, record_file}``.

    Examples
    --------
    >>> from sequester.nodes.design import two_sample
    >>> from sequester.nodes.folds import KFold
    >>> from sequester.nodes.masks import Cluster
    >>> people, groups = [f"{i:02}" for i in range(20)], ["hill", "pond"] * 10
    >>> folds = KFold(5, strata=tuple(zip(people, groups)))
    >>> design = two_sample(groups, "hill", "pond")
    >>> plan = compared("arbor", design, Cluster(p=0.001), people, groups, folds)
    >>> plan.list_node_names()
    ['choose', 'extract', 'inputnode', 'maps', 'outputnode', 'rows', 'summary']
    """
    workflow, start, end = _ends(name)
    labels, scheme = list(labels), scheme or LeaveOneOut()
    maps = node(
        LeaveOutMaps(),
        "maps",
        mem_gb,
        labels=labels,
        scheme=scheme,
        design=design,
        missing=missing,
        kind=rule.map_kind,
    )
    choose = _choose(["in_file", "count_file"], rule, tail, on_empty, k)
    workflow.connect(
        [
            (start, maps, [("effects", "in_files")]),
            (maps, choose, [("out_files", "in_file"), ("count_files", "count_file")]),
        ]
    )
    about = {
        "names": (name, plan or _plan(scheme), search_name),
        "rule": rule.describe(tail),
        "groups": list(groups),
        "compared": design.compared(),
    }
    _read(workflow, start, end, choose, search, labels, scheme, missing, about)
    return workflow


def _plan(scheme: Scheme) -> str:
    return LEAVE_ONE_OUT if isinstance(scheme, LeaveOneOut) else "folds over subjects"


def _ends(name: str) -> tuple[Workflow, Node, Node]:
    workflow = Workflow(name=name)
    start = Node(IdentityInterface(["effects"]), name="inputnode")
    end = Node(IdentityInterface(list(_OUTPUTS)), name="outputnode")
    workflow.add_nodes([start, end])
    return workflow, start, end


def _choose(iterfield: list[str], rule: Any, tail: str, on_empty: str, k: int) -> MapNode:
    """One mask per fold's map."""
    made = MapNode(ChooseMask(), iterfield=iterfield, name="choose", mem_gb=0.5, n_procs=1)
    made.config = {"execution": {"hash_method": "content"}}
    made.inputs.trait_set(rule=rule, negative=tail == "negative", on_empty=on_empty, k=k)
    return made


def _read(
    workflow: Workflow,
    start: Node,
    end: Node,
    choose: MapNode,
    search: Node | Workflow | None,
    labels: list[str],
    scheme: Scheme,
    missing: Missing | None,
    about: dict[str, Any],
) -> None:
    """From the folds' masks to the result."""
    folds = scheme.folds(labels)
    # A literal: over an edge, the guard could not tell before the run which row has which mask.
    rows = node(MasksByRow(), "rows", fold_of_row=fold_of_row(folds))
    extract = node(Extract(), "extract", labels=labels, missing=missing)
    summary = node(HeldOutSummary(), "summary", labels=labels, n_folds=len(folds), **about)
    workflow.connect(
        [
            (choose, rows, [("mask_file", "mask_files")]),
            (choose, end, [("mask_file", "mask_files")]),
            (rows, extract, [("row_masks", "mask_files")]),
            (start, extract, [("effects", "in_files")]),
            (extract, summary, [(f, f) for f in ("values", "coverage", "sizes")]),
            (extract, end, [("values", "values")]),
            (summary, end, [("record_file", "record_file")]),
        ]
    )
    if search is not None:
        workflow.connect(*mask_of(search), choose, "search_file")
