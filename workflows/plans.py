"""Each plan as a ready-made workflow, and a whole study as one.

Every plan has an ``inputnode`` with ``effects`` (a list with one map per row) and an
``outputnode``; nest it in a workflow of your own and run that under the guard.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

from nipype import IdentityInterface, Node, Workflow

from ..nodes.folds import LeaveOneOut
from ..nodes.interfaces import (
    ChooseByFold,
    ChooseMask,
    ChooseWithin,
    Extract,
    FixedRegionTest,
    FlipTest,
    GivenMask,
    GroupMap,
    SphereMask,
    SubjectMaps,
)
from ..nodes.procedure import Procedure
from .settings import (
    A_PRIORI,
    EXPLORATORY,
    LEAVE_ONE_OUT,
    LEAVE_RUN_OUT,
    OWN_MASKS,
    Region,
    Roi,
    Settings,
    Subjects,
)


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


def region_node(region: Region, name: str, reference: str, root: Path) -> Node | None:
    """The node that makes a given region's mask; None for the whole map."""
    if region.mask:
        path = str(root / region.mask)
        return node(GivenMask(), name, in_file=path, reference=reference, regrid=region.regrid)
    if region.centre is not None:
        return node(
            SphereMask(),
            name,
            reference=reference,
            centre=region.centre,
            radius=region.radius,
            origin=region.origin,
        )
    return None


def cross_fitted(
    name: str,
    procedure: Procedure,
    labels: Sequence[str],
    search: Node | None = None,
    search_name: str = "whole map",
    n_flips: int = 4999,
    seed: int = 0,
    interval: str = "flips",
    test: str = "whole-procedure",
    plan: str = "folds over subjects",
    other_maps: bool = False,
    mem_gb: float = 1.0,
) -> Workflow:
    """Choose a region without each fold's subjects, read it there, test the whole procedure.

    Parameters
    ----------
    name : str
        Of the region and of the workflow.
    procedure : Procedure
        Mask rule, folds (its ``scheme``), what happens when a fold finds nothing.
    labels : sequence of str
        Per map of ``inputnode.effects``: who it belongs to.
    search : Node, optional
        With an output ``mask_file``: the search region.
    search_name : str
        What the search region is called in the p sentence.
    n_flips, seed : int
    interval : {"flips", "jackknife", "folds"}
        "folds" is for few folds, not for leave-one-subject-out.
    test : {"whole-procedure", "t"}
        A plain t is refused by the guard; it can be asked for to see the reason.
    plan : str
        What the plan is called in results.
    other_maps : bool
        Choose on ``inputnode.choosing`` (another contrast of the same subjects) and test
        ``inputnode.effects``; both are held out and flipped together.
    mem_gb : float
        Needed by the nodes that hold the whole stack.

    Returns
    -------
    nipype.Workflow
        With ``inputnode.effects`` and ``outputnode.{mask_files, overlap_file, values,
        record_file}``.

    Examples
    --------
    >>> from sequester.nodes.folds import KFold
    >>> from sequester.nodes.masks import Cluster
    >>> rule = Procedure(Cluster(p=0.001), scheme=KFold(5))
    >>> plan = cross_fitted("arbor", rule, [f"{i:02}" for i in range(20)], plan="k-fold")
    >>> sorted(plan.list_node_names())
    ['choose', 'extract', 'inputnode', 'outputnode', 'test']
    """
    workflow = Workflow(name=name)
    fields = ["effects", "choosing"] if other_maps else ["effects"]
    start, end = _ends(workflow, ["mask_files", "overlap_file", "values", "record_file"], fields)
    chooser = fields[-1]
    labels = list(labels)
    choose = node(ChooseByFold(), "choose", mem_gb, labels=labels, procedure=procedure)
    extract = node(Extract(), "extract", labels=labels, missing=procedure.missing)
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
        workflow.connect(search, "mask_file", choose, "search_file")
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
        )
        workflow.connect(
            [
                (start, flips, [(chooser, "in_files")]),
                (extract, flips, [("values", "values")]),
                (flips, end, [("record_file", "record_file")]),
            ]
        )
        if other_maps:
            workflow.connect(start, "effects", flips, "tested_files")
        if search is not None:
            workflow.connect(search, "mask_file", flips, "search_file")
    elif test == "t":
        _fixed_test(workflow, extract, end, names)
    return workflow


def leave_one_subject_out(
    name: str,
    procedure: Procedure,
    labels: Sequence[str],
    search: Node | None = None,
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


def _fixed_test(
    workflow: Workflow,
    extract: Node,
    end: Node,
    names: tuple[str, str, str],
    *,
    own_masks: bool = False,
) -> None:
    test = node(
        FixedRegionTest(),
        "test",
        names=names,
        labels=extract.inputs.labels,
        own_masks=own_masks,
    )
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
    search: Node | None = None,
    search_name: str = "whole map",
    plan: str = LEAVE_RUN_OUT,
    mem_gb: float = 0.5,
) -> Workflow:
    """Each subject's own mask from their other runs; runs averaged, then t across subjects.

    Parameters
    ----------
    name : str
    procedure : Procedure
        Its rule reads the subject's mean (or t) over the runs that choose; its scheme folds
        over runs (`LeaveOneOut(2)`, `Halves`).
    labels, runs : sequence of str
        Per map of ``inputnode.effects``: the subject and the run.
    search : Node, optional
        With an output ``mask_file``: the region in which each subject's mask lies.
    search_name, plan : str
    mem_gb : float
    """
    workflow = Workflow(name=name)
    start, end = _ends(workflow, ["mask_files", "values", "record_file"])
    labels = list(labels)
    choose = node(
        ChooseWithin(), "choose", mem_gb, labels=labels, runs=list(runs), procedure=procedure
    )
    extract = node(Extract(), "extract", labels=labels, missing=procedure.missing)
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
        workflow.connect(search, "mask_file", choose, "search_file")
    _fixed_test(workflow, extract, end, (name, plan, search_name), own_masks=True)
    return workflow


def a_priori(
    name: str,
    labels: Sequence[str],
    region: Node,
    region_name: str,
    missing: Any = None,
    test: str = "t",
) -> Workflow:
    """Read a region that was fixed beforehand, and test its mean.

    Parameters
    ----------
    name : str
    labels : sequence of str
        Per map of ``inputnode.effects``.
    region : Node
        With an output ``mask_file``: a `GivenMask` or `SphereMask` whose origin is declared.
    region_name : str
    missing : Missing, optional
    test : {"t", "none"}
    """
    workflow = Workflow(name=name)
    start, end = _ends(workflow, ["mask_files", "values", "record_file"])
    extract = node(Extract(), "extract", labels=list(labels), missing=missing)
    workflow.connect(
        [
            (start, extract, [("effects", "in_files")]),
            (region, extract, [("mask_file", "mask_files")]),
            (region, end, [("mask_file", "mask_files")]),
            (extract, end, [("values", "values")]),
        ]
    )
    if test == "t":
        _fixed_test(workflow, extract, end, (name, A_PRIORI, region_name))
    return workflow


def exploratory(
    name: str,
    procedure: Procedure,
    labels: Sequence[str],
    search: Node | None = None,
    search_name: str = "whole map",
    test: str = "none",
    mem_gb: float = 1.0,
) -> Workflow:
    """Choose a region on all data and read it on the same data: a value marked biased.

    Parameters
    ----------
    name : str
    procedure : Procedure
        Its mask rule is used once, on the group map of everybody.
    labels : sequence of str
    search : Node, optional
    search_name : str
    test : {"none", "t"}
        With "t" the values are not marked, and the guard refuses the run: the circular analysis.
    mem_gb : float
    """
    workflow = Workflow(name=name)
    start, end = _ends(workflow, ["mask_files", "values", "record_file"])
    group = node(GroupMap(), "group", mem_gb, missing=procedure.missing)
    choose = node(
        ChooseMask(),
        "choose",
        rule=procedure.rule,
        k=procedure.k,
        on_empty=procedure.on_empty,
        negative=procedure.tail == "negative",
    )
    extract = node(
        Extract(),
        "extract",
        labels=list(labels),
        missing=procedure.missing,
        exploratory=test == "none",
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
        workflow.connect(search, "mask_file", choose, "search_file")
    if test == "t":
        _fixed_test(workflow, extract, end, (name, EXPLORATORY, search_name))
    return workflow


def study_workflow(settings: Settings, base_dir: Path) -> Workflow:
    """The workflow of a whole STUDY.toml: maps of each subject, then every region's plan.

    Parameters
    ----------
    settings : Settings
    base_dir : Path
        The engine's working folder; not an output.
    """
    workflow = Workflow(name=settings.name, base_dir=str(base_dir))
    workflow.config["execution"] = {
        "crashdump_dir": str(base_dir),
        "create_report": "false",
        "stop_on_first_crash": "true",
        "remove_unnecessary_outputs": "false",
        "poll_sleep_duration": "0.05",  # the default of 2 s would be most of a run
    }
    root = settings.root
    maps = _subject_maps(settings, settings.rows, "maps")
    by_run = tuple((label, (row,)) for label, runs in settings.rows for row in runs)
    single = None
    if any(roi.plan in OWN_MASKS for roi in settings.rois):
        single = _subject_maps(settings, by_run, "runs")
    people = [runs[0].person for _, runs in settings.rows]
    reference = str(root / settings.rows[0][1][0].path)
    for roi in settings.rois:
        where = region_node(roi.region, "region", reference, root)
        plan = _plan(roi, people, where, settings)
        source = single if roi.plan in OWN_MASKS else maps
        workflow.connect(source, "out_files", plan, "inputnode.effects")
        if roi.choosing is not None:
            choosing = _subject_maps(settings, roi.choosing, f"{roi.name}Choosing")
            workflow.connect(choosing, "out_files", plan, "inputnode.choosing")
    return workflow


def _subject_maps(settings: Settings, rows: Subjects, name: str) -> Node:
    return node(
        SubjectMaps(),
        name,
        in_files=[[str(settings.root / row.path) for row in runs] for _, runs in rows],
        labels=[label for label, _ in rows],
        volumes=[[-1 if r.volume is None else r.volume for r in runs] for _, runs in rows],
        missing=settings.missing,
    )


def _plan(roi: Roi, people: list[str], where: Node | None, settings: Settings) -> Workflow:
    name, plan, search = roi.names
    if plan == A_PRIORI:
        assert where is not None, "an a-priori region is a mask or a sphere"
        return a_priori(name, people, where, search, settings.missing, roi.test)
    assert roi.procedure is not None
    if plan in OWN_MASKS:
        rows = [row for _, runs in settings.rows for row in runs]
        subjects, runs = [row.person for row in rows], [row.unit.run for row in rows]
        return own_masks(name, roi.procedure, subjects, runs, where, search, plan)
    if plan == EXPLORATORY:
        return exploratory(name, roi.procedure, people, where, search, roi.test)
    return cross_fitted(
        name,
        roi.procedure,
        people,
        where,
        search,
        roi.n_flips,
        settings.seed,
        roi.interval,
        roi.test,
        plan,
        roi.choosing is not None,
    )
