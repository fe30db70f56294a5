"""Each plan as a ready-made workflow.

Every plan has an ``inputnode`` with ``effects`` (a list with one map per row) and an
``outputnode``; nest it in a workflow of your own and run that under the guard.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

from nipype import IdentityInterface, Node, Workflow

from ..nodes.folds import LeaveOneOut
from ..nodes.groupmaps import Missing
from ..nodes.interfaces import (
    ChooseByFold,
    ChooseEach,
    ChooseMask,
    ChooseWithin,
    Extract,
    ExtractParcels,
    FamilyTest,
    FixedRegionTest,
    FlipTest,
    GroupMap,
)
from ..nodes.orthogonality import Certificate
from ..nodes.procedure import Procedure
from .regions import mask_of

LEAVE_ONE_OUT, A_PRIORI, EXPLORATORY = "leave-one-subject-out", "a-priori", "exploratory"
K_FOLD, SPLIT_HALF, GIVEN_FOLDS = "k-fold", "split-half", "given-folds"
# The plans in which subjects take turns at choosing and being tested.
CROSS_FITTED = (LEAVE_ONE_OUT, K_FOLD, SPLIT_HALF, GIVEN_FOLDS)
LEAVE_RUN_OUT, SPLIT_RUNS = "leave-one-run-out", "split-half-runs"
# The plans in which each subject has masks of their own, from their other runs.
OTHER_RUNS = (LEAVE_RUN_OUT, SPLIT_RUNS)
LOCALIZER, ORTHOGONAL = "localizer", "orthogonal-contrast"
PLANS = (*CROSS_FITTED, *OTHER_RUNS, LOCALIZER, ORTHOGONAL, A_PRIORI, EXPLORATORY)


def node(interface: Any, name: str, mem_gb: float = 0.5, **inputs: Any) -> Node:
    """A node of ours: hashed by content, with its memory need stated."""
    made = Node(interface, name=name, mem_gb=mem_gb, n_procs=1)
    # By time stamp and size, another subject's file could pass for this one's.
    made.config = {"execution": {"hash_method": "content"}}
    for field, value in inputs.items():
        if value is not None:
            setattr(made.inputs, field, value)
    return made


def _ends(
    workflow: Workflow, outputs: Sequence[str], inputs: Sequence[str] = ("effects",)
) -> tuple[Node, Node]:
    start = Node(IdentityInterface(list(inputs)), name="inputnode")
    end = Node(IdentityInterface(list(outputs)), name="outputnode")
    workflow.add_nodes([start, end])
    return start, end


def cross_fitted(
    name: str,
    procedure: Procedure,
    labels: Sequence[str],
    search: Node | Workflow | None = None,
    search_name: str = "whole map",
    n_flips: int = 4999,
    seed: int = 0,
    interval: str = "flips",
    test: str = "whole-procedure",
    plan: str = "folds over subjects",
    other_maps: bool = False,
    min_coverage: float = 0.0,
    mem_gb: float = 1.0,
    keep_values: bool = False,
) -> Workflow:
    """Choose a region without each fold's subjects, read it there, test the whole procedure.

    Parameters
    ----------
    name : str
        Of the region and of the workflow.
    procedure : Procedure
        Mask rule, folds (its ``scheme``), what happens when a fold finds nothing; with a
        ``model`` (`Groups` or `Score`) scores are exchanged instead of signs flipped.
    labels : sequence of str
        Per map of ``inputnode.effects``: who it belongs to.
    search : Node or Workflow, optional
        With an output ``mask_file`` (of a workflow's ``outputnode``): the search region.
    search_name : str
        What the search region is called in the p sentence.
    n_flips, seed : int
        Of flips, or of exchanges.
    interval : {"flips", "jackknife", "folds"}
        "folds" is for few folds, not for leave-one-subject-out.
    test : {"whole-procedure", "t"}
        A plain t is refused by the guard; it can be asked for to see the reason.
    plan : str
        What the plan is called in results.
    other_maps : bool
        Choose on ``inputnode.choosing`` (another contrast of the same subjects) and test
        ``inputnode.effects``; both are held out and flipped together. The rule must always find
        something (`Procedure.check_other_maps`).
    min_coverage : float
        The least share of its mask in which a map must have data.
    mem_gb : float
        Needed by the nodes that hold the whole stack.
    keep_values : bool
        Keep everybody's values under each flip (``outputnode.values_file``), for comparisons.

    Returns
    -------
    nipype.Workflow
        With ``inputnode.effects`` and ``outputnode.{mask_files, overlap_file, values,
        record_file, flips_file}``.

    Examples
    --------
    >>> from sequester.nodes.folds import KFold
    >>> from sequester.nodes.masks import Cluster
    >>> rule = Procedure(Cluster(p=0.001), scheme=KFold(5))
    >>> plan = cross_fitted("arbor", rule, [f"{i:02}" for i in range(20)], plan="k-fold")
    >>> sorted(plan.list_node_names())
    ['choose', 'extract', 'inputnode', 'outputnode', 'test']
    """
    if other_maps:
        procedure.check_other_maps()
    workflow = Workflow(name=name)
    fields = ["effects", "choosing"] if other_maps else ["effects"]
    given = ["mask_files", "overlap_file", "values", "record_file", "flips_file", "values_file"]
    start, end = _ends(workflow, given, fields)
    chooser = fields[-1]
    labels = list(labels)
    choose = node(ChooseByFold(), "choose", mem_gb, labels=labels, procedure=procedure)
    extract = _reading(labels, procedure.missing, procedure.summary, min_coverage)
    workflow.connect(
        [
            (start, choose, [(chooser, "in_files")]),
            (start, extract, [("effects", "in_files")]),
            (choose, extract, [("row_masks", "mask_files")]),
            (choose, end, [("mask_files", "mask_files"), ("overlap_file", "overlap_file")]),
            (extract, end, [("values", "values")]),
        ]
    )
    if search is not None:
        workflow.connect(*mask_of(search), choose, "search_file")
    names = (name, plan, search_name)
    if test == "whole-procedure":
        flips = node(
            FlipTest(),
            "test",
            mem_gb,
            labels=labels,
            procedure=procedure,
            n_flips=n_flips,
            seed=seed,
            interval=interval,
            names=names,
            keep_values=keep_values,
        )
        outputs = ["record_file", "flips_file", *(["values_file"] if keep_values else [])]
        workflow.connect(
            [
                (start, flips, [(chooser, "in_files")]),
                (extract, flips, [("values", "values")]),
                (flips, end, [(name, name) for name in outputs]),
            ]
        )
        if other_maps:
            workflow.connect(start, "effects", flips, "tested_files")
        if search is not None:
            workflow.connect(*mask_of(search), flips, "search_file")
    elif test == "t":
        _fixed_test(workflow, extract, end, names)
    return workflow


def leave_one_subject_out(
    name: str,
    procedure: Procedure,
    labels: Sequence[str],
    search: Node | Workflow | None = None,
    **settings: Any,
) -> Workflow:
    """`cross_fitted`, each subject held out once; further settings are those of `cross_fitted`.

    Examples
    --------
    >>> from sequester.nodes.masks import Cluster
    >>> plan = leave_one_subject_out("arbor", Procedure(Cluster(p=0.001)), ["01", "02", "03"])
    >>> plan.get_node("choose").inputs.procedure.scheme
    LeaveOneOut(least=3)
    """
    procedure = replace(procedure, scheme=LeaveOneOut())
    return cross_fitted(name, procedure, labels, search, plan=LEAVE_ONE_OUT, **settings)


def _reading(
    labels: Sequence[str],
    missing: Missing | None,
    summary: str,
    min_coverage: float,
    **more: Any,
) -> Node:
    """The extraction of a plan."""
    return node(
        Extract(),
        "extract",
        labels=list(labels),
        missing=missing,
        summary=summary,
        min_coverage=min_coverage,
        **more,
    )


def _fixed_test(
    workflow: Workflow,
    extract: Node,
    end: Node,
    names: tuple[str, str, str],
    choose: Node | None = None,
    **more: Any,
) -> None:
    """Student's t of the values of an extraction, in masks that a node chose or in given ones."""
    labels = extract.inputs.labels
    test = node(FixedRegionTest(), "test", names=names, labels=labels, **more)
    if choose is not None:
        workflow.connect(choose, "replaced", test, "replaced")
    workflow.connect(
        [
            (extract, test, [(f, f) for f in ("values", "coverage", "sizes")]),
            (test, end, [("record_file", "record_file")]),
        ]
    )


def own_masks(
    name: str,
    procedure: Procedure,
    labels: Sequence[str],
    runs: Sequence[str],
    search: Node | Workflow | None = None,
    search_name: str = "whole map",
    plan: str = LEAVE_RUN_OUT,
    min_coverage: float = 0.0,
    mem_gb: float = 0.5,
) -> Workflow:
    """Each subject's own mask from their other runs; runs averaged, then t across subjects.

    Each subject's maps may be on a grid of their own; then `search` gives a list, a mask per row.

    Parameters
    ----------
    name : str
    procedure : Procedure
        Its rule reads the subject's mean (or t) over the runs that choose; its scheme folds
        over runs (`LeaveOneOut(2)`, `Halves`).
    labels, runs : sequence of str
        Per map of ``inputnode.effects``: the subject and the run.
    search : Node or Workflow, optional
        With an output ``mask_file``: the region in which each subject's mask lies.
    search_name, plan : str
    min_coverage : float
    mem_gb : float

    Examples
    --------
    >>> from sequester.nodes.masks import Strongest
    >>> rule = Procedure(Strongest(50, "mean"), scheme=LeaveOneOut(2))
    >>> plan = own_masks("arbor", rule, ["01", "01", "02", "02"], ["1", "2", "1", "2"])
    >>> sorted(plan.list_node_names())
    ['choose', 'extract', 'inputnode', 'outputnode', 'test']
    """
    workflow = Workflow(name=name)
    start, end = _ends(workflow, ["mask_files", "values", "record_file"])
    labels = list(labels)
    choose = node(
        ChooseWithin(), "choose", mem_gb, labels=labels, runs=list(runs), procedure=procedure
    )
    extract = _reading(labels, procedure.missing, procedure.summary, min_coverage)
    workflow.connect(
        [
            (start, choose, [("effects", "in_files")]),
            (start, extract, [("effects", "in_files")]),
            (choose, extract, [("row_masks", "mask_files")]),
            (choose, end, [("row_masks", "mask_files")]),
            (extract, end, [("values", "values")]),
        ]
    )
    if search is not None:
        workflow.connect(*mask_of(search), choose, "search_files")
    _fixed_test(workflow, extract, end, (name, plan, search_name), choose, chosen_on="other runs")
    return workflow


def localizer(
    name: str,
    procedure: Procedure,
    labels: Sequence[str],
    search: Node | Workflow | None = None,
    search_name: str = "whole map",
    group_mask: bool = False,
    these_subjects: bool = False,
    min_coverage: float = 0.0,
    mem_gb: float = 0.5,
    certificate: Certificate | None = None,
    plan: str = LOCALIZER,
) -> Workflow:
    """Choose on other data (another task, run, session, other people), then t across subjects.

    Parameters
    ----------
    name : str
    procedure : Procedure
        Its mask rule is used on each subject's localizer map, or on the group's.
    labels : sequence of str
        Per map of ``inputnode.effects``.
    search : Node or Workflow, optional
        With an output ``mask_file``: the region in which a mask lies.
    search_name : str
    group_mask : bool
        One mask for all from the group map of ``inputnode.choosing``, instead of one per row
        of it. When these are maps of the tested subjects the guard refuses it, unless
    these_subjects : bool
        declares that the claim is about these subjects only.
    min_coverage : float
    mem_gb : float
        Needed by the group map.
    certificate : Certificate, optional
        With it, ``inputnode.choosing`` may hold another contrast of the tested data.
    plan : str

    Returns
    -------
    nipype.Workflow
        With ``inputnode.{effects, choosing}``: the maps that are tested and those that choose.

    Examples
    --------
    >>> from sequester.nodes.masks import Strongest
    >>> plan = localizer("arbor", Procedure(Strongest(50)), ["01", "02"])
    >>> sorted(plan.list_node_names())
    ['choose', 'extract', 'inputnode', 'outputnode', 'test']
    """
    workflow = Workflow(name=name)
    start, end = _ends(workflow, ["mask_files", "values", "record_file"], ["effects", "choosing"])
    rule: dict[str, Any] = {
        "rule": procedure.rule,
        "k": procedure.k,
        "on_empty": procedure.on_empty,
        "negative": procedure.tail == "negative",
    }
    extract = _reading(
        labels,
        procedure.missing,
        procedure.summary,
        min_coverage,
        these_subjects=these_subjects,
        certificate=certificate,
    )
    if group_mask:
        choose, masks, regions = node(ChooseMask(), "choose", **rule), "mask_file", "search_file"
        kind = procedure.rule.map_kind
        group = node(GroupMap(), "group", mem_gb, missing=procedure.missing, kind=kind)
        workflow.connect(
            [
                (start, group, [("choosing", "in_files")]),
                (group, choose, [("out_file", "in_file"), ("count_file", "count_file")]),
            ]
        )
    else:
        choose, masks, regions = node(ChooseEach(), "choose", **rule), "row_masks", "search_files"
        workflow.connect(start, "choosing", choose, "in_files")
    workflow.connect(
        [
            (start, extract, [("effects", "in_files")]),
            (choose, extract, [(masks, "mask_files")]),
            (choose, end, [(masks, "mask_files")]),
            (extract, end, [("values", "values")]),
        ]
    )
    if search is not None:
        workflow.connect(*mask_of(search), choose, regions)
    _fixed_test(
        workflow,
        extract,
        end,
        (name, plan, search_name),
        choose,
        chosen_on="group" if group_mask else "localizer",
        these_subjects=these_subjects,
        certificate=certificate,
    )
    return workflow


def a_priori(
    name: str,
    labels: Sequence[str],
    region: Node | Workflow,
    region_name: str,
    missing: Missing | None = None,
    test: str = "t",
    summary: str = "mean",
    min_coverage: float = 0.0,
    own_region: bool = False,
) -> Workflow:
    """Read a region that was fixed beforehand, and test its mean.

    Parameters
    ----------
    name : str
    labels : sequence of str
        Per map of ``inputnode.effects``.
    region : Node or Workflow
        With an output ``mask_file`` (one, or one per map): a `GivenMask`, `SphereMask` or
        `LabelMask` whose origin is declared, or what is made of such.
    region_name : str
    missing : Missing, optional
    test : {"t", "none"}
    summary : {"mean", "median", "weighted", "component"}
    min_coverage : float
    own_region : bool
        Each subject has a region of their own, made from other data of theirs.

    Examples
    --------
    >>> from sequester.nodes.interfaces import SphereMask
    >>> sphere = Node(SphereMask(centre=(0, 0, 0), radius=6, origin="a paper"), "sphere")
    >>> plan = a_priori("beacon", ["01", "02"], sphere, "6 mm sphere")
    >>> sorted(plan.list_node_names())
    ['extract', 'inputnode', 'outputnode', 'sphere', 'test']
    """
    workflow = Workflow(name=name)
    start, end = _ends(workflow, ["mask_files", "values", "record_file"])
    extract = _reading(labels, missing, summary, min_coverage)
    made, field = mask_of(region)
    workflow.connect(
        [
            (start, extract, [("effects", "in_files")]),
            (made, extract, [(field, "mask_files")]),
            (made, end, [(field, "mask_files")]),
            (extract, end, [("values", "values")]),
        ]
    )
    if test == "t":
        chosen_on = "other data" if own_region else "nothing"
        _fixed_test(workflow, extract, end, (name, A_PRIORI, region_name), chosen_on=chosen_on)
    return workflow


def parcels(
    name: str,
    labels: Sequence[str],
    atlas: Node | str | list[str],
    atlas_name: str,
    numbers: Sequence[int] = (),
    table_file: str | None = None,
    missing: Missing | None = None,
    min_coverage: float = 0.0,
    own_labels: bool = False,
) -> Workflow:
    """Read every label of an atlas that was fixed beforehand: one extraction, one family of tests.

    Parameters
    ----------
    name : str
    labels : sequence of str
        Per map of ``inputnode.effects``.
    atlas : str, list of str, or Node
        A label image on the maps' grid (or one per map), with a declared origin; or a node with
        an output ``label_file``, such as `RegridLabels`.
    atlas_name : str
    numbers : sequence of int
        The labels to read; none for all.
    table_file : str, optional
        A BIDS ``dseg.tsv`` with the labels' names.
    missing : Missing, optional
    min_coverage : float
        A map that covers less of a label than this does not count there.
    own_labels : bool
        The label images were made from each subject's own other data.

    Examples
    --------
    >>> from sequester.nodes.interfaces import RegridLabels
    >>> on_grid = Node(RegridLabels(), "atlas")
    >>> plan = parcels("garden", ["01", "02"], on_grid, "atlas X")
    >>> sorted(plan.list_node_names())
    ['atlas', 'extract', 'inputnode', 'outputnode', 'test']
    """
    workflow = Workflow(name=name)
    start, end = _ends(workflow, ["values_file", "record_file"])
    labels = list(labels)
    extract = node(
        ExtractParcels(),
        "extract",
        labels=labels,
        parcels=list(numbers) or None,
        missing=missing,
        min_coverage=min_coverage,
    )
    test = node(
        FamilyTest(),
        "test",
        labels=labels,
        names=(name, A_PRIORI, atlas_name),
        table_file=table_file,
        min_coverage=min_coverage,
        own_labels=own_labels,
    )
    passed = ("values_file", "coverage_file", "parcels", "sizes")
    workflow.connect(
        [
            (start, extract, [("effects", "in_files")]),
            (extract, test, [(field, field) for field in passed]),
            (extract, end, [("values_file", "values_file")]),
            (test, end, [("record_file", "record_file")]),
        ]
    )
    if isinstance(atlas, Node):
        workflow.connect(atlas, "label_file", extract, "label_files")
    else:
        extract.inputs.label_files = atlas
    return workflow


def exploratory(
    name: str,
    procedure: Procedure,
    labels: Sequence[str],
    search: Node | Workflow | None = None,
    search_name: str = "whole map",
    test: str = "none",
    min_coverage: float = 0.0,
    mem_gb: float = 1.0,
) -> Workflow:
    """Choose a region on all data and read it on the same data: a value marked biased.

    Parameters
    ----------
    name : str
    procedure : Procedure
        Its mask rule is used once, on the group map of everybody.
    labels : sequence of str
    search : Node or Workflow, optional
    search_name : str
    test : {"none", "t"}
        With "t" the values are not marked, and the guard refuses the run: the circular analysis.
    min_coverage : float
    mem_gb : float
    """
    workflow = Workflow(name=name)
    start, end = _ends(workflow, ["mask_files", "values", "record_file"])
    kind = procedure.rule.map_kind
    group = node(GroupMap(), "group", mem_gb, missing=procedure.missing, kind=kind)
    choose = node(
        ChooseMask(),
        "choose",
        rule=procedure.rule,
        k=procedure.k,
        on_empty=procedure.on_empty,
        negative=procedure.tail == "negative",
    )
    extract = _reading(
        labels, procedure.missing, procedure.summary, min_coverage, exploratory=test == "none"
    )
    workflow.connect(
        [
            (start, group, [("effects", "in_files")]),
            (start, extract, [("effects", "in_files")]),
            (group, choose, [("out_file", "in_file"), ("count_file", "count_file")]),
            (choose, extract, [("mask_file", "mask_files")]),
            (choose, end, [("mask_file", "mask_files")]),
            (extract, end, [("values", "values")]),
        ]
    )
    if search is not None:
        workflow.connect(*mask_of(search), choose, "search_file")
    if test == "t":
        _fixed_test(workflow, extract, end, (name, EXPLORATORY, search_name))
    return workflow
