"""The workflow of a whole STUDY.toml: one map per subject, then every region's plan."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from nipype import MapNode, Node, Workflow

from ..nodes.images import geometry_of, open_image, read_label_table
from ..nodes.interfaces import RegridLabels, SubjectMaps
from ..nodes.regions import numbers_of
from .comparisons import add_comparison
from .plans import (
    A_PRIORI,
    EXPLORATORY,
    LOCALIZER,
    ORTHOGONAL,
    OTHER_RUNS,
    a_priori,
    cross_fitted,
    exploratory,
    localizer,
    node,
    own_masks,
    parcels,
)
from .regions import Labels, Places, region_node
from .rois import Roi
from .selection import Selection, Subjects
from .settings import Settings
from .study import Row


def study_workflow(settings: Settings, base_dir: Path) -> Workflow:
    """The workflow of a whole STUDY.toml.

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
    made: dict[tuple[Selection, bool], Node] = {}

    def maps_of(selection: Selection, *, tested: bool) -> Node:
        """The node with a selection's maps; the same selection is read once."""
        key = (selection, tested and settings.maps.null_value != 0)
        if key not in made:
            name = f"maps{len(made) or ''}"
            made[key] = subject_maps(settings, selection, name, null_value=key[1])
        return made[key]

    compared = {name for one in settings.comparisons for name in one.rois}
    plans: dict[str, Workflow] = {}
    for roi in settings.rois:
        rows = tested_rows(roi)
        plan = _plan(roi, rows, settings, keep_values=roi.name in compared)
        plans[roi.name] = plan
        workflow.connect(maps_of(rows, tested=True), "out_files", plan, "inputnode.effects")
        if roi.choosing is not None:
            chosen = maps_of(roi.choosing, tested=False)
            workflow.connect(chosen, "out_files", plan, "inputnode.choosing")
    for one in settings.comparisons:
        add_comparison(workflow, one, plans, {roi.name: roi for roi in settings.rois})
    return workflow


def tested_rows(roi: Roi) -> Selection:
    """What a region is read in: a map per subject, or per run where each run has a mask."""
    return roi.tested.by_run() if roi.plan in OTHER_RUNS else roi.tested


def subject_maps(
    settings: Settings, selection: Selection, name: str, *, null_value: bool = False
) -> Node:
    """The node that makes one map per subject of a selection."""
    maps = settings.maps

    def files(subjects: Subjects, field: str = "path") -> list[list[str]] | None:
        if not subjects:
            return None
        root = settings.root
        return [[str(root / getattr(row, field)) for row in rows] for _, rows in subjects]

    def volumes(subjects: Subjects) -> list[list[int]] | None:
        if not subjects:
            return None
        return [[-1 if r.volume is None else r.volume for r in rows] for _, rows in subjects]

    given: dict[str, Any] = {}
    for field, subjects in (
        ("in_files", selection.subjects),
        ("minus_files", selection.minus),
        ("baseline_files", selection.baseline),
    ):
        given[field] = files(subjects)
        given["volumes" if field == "in_files" else f"{field[:-6]}_volumes"] = volumes(subjects)
    if maps.by_variance and all(row.variance for row in selection.variance_rows):
        for field, subjects in (
            ("variance", selection.subjects),
            ("minus_variance", selection.minus),
        ):
            given[f"{field}_files"] = files(subjects, "variance")
            given[f"{field}_volumes"] = volumes(subjects)
    quality = [column for column in selection.kept_by if column in settings.quality]
    scores = [column for column in selection.kept_by if column not in quality]
    for field, columns in (("kept_by", scores), ("quality", quality)):
        given[field] = columns or None
    most = max(len(rows) for _, rows in selection.subjects)
    return node(
        SubjectMaps(),
        name,
        0.2 + _gb(settings, 4 + most),
        labels=[label for label, _ in selection.subjects],
        missing=maps.missing,
        null_value=maps.null_value if null_value else None,
        **given,
    )


def _gb(settings: Settings, n_maps: float) -> float:
    """The memory of some float32 maps of the study."""
    first = settings.rois[0].tested.subjects[0][1][0]
    shape = geometry_of(open_image(settings.root / first.path)).shape
    return 4 * math.prod(shape) * n_maps / 1e9


def _places(roi: Roi, rows: Selection, settings: Settings) -> Places:
    """On which grids a region's mask is wanted: one for all, or one per row."""
    first: Sequence[tuple[str, Row]] = [(label, runs[0]) for label, runs in rows.subjects]
    if not settings.maps.own_grids and not roi.region.of_each:
        first = first[:1]
    references = tuple(str(settings.root / row.path) for _, row in first)
    return Places(settings.root, references, tuple(label for label, _ in first))


def _plan(roi: Roi, rows: Selection, settings: Settings, *, keep_values: bool) -> Workflow:
    name, plan, search = roi.names
    maps, people = settings.maps, rows.people
    at = _places(roi, rows, settings)
    if roi.each_label:
        assert isinstance(roi.region, Labels), "checked with the settings"
        return _parcels(roi, roi.region, people, at, settings)
    where = region_node(roi.region, at)
    least = maps.min_coverage
    if plan == A_PRIORI:
        assert where is not None, "an a-priori region is given"
        return a_priori(
            name,
            people,
            where,
            search,
            maps.marked,
            roi.test,
            roi.summary,
            least,
            roi.own_region,
        )
    assert roi.procedure is not None, "every other plan chooses"
    if plan in OTHER_RUNS:
        runs = [listed[0].unit.run for _, listed in rows.subjects]
        return own_masks(name, roi.procedure, people, runs, where, search, plan, least)
    chosen = roi.choosing or rows
    stack = 0.3 + _gb(settings, 4 * len(chosen.subjects))
    if plan in (LOCALIZER, ORTHOGONAL):
        return localizer(
            name,
            roi.procedure,
            people,
            where,
            search,
            roi.group_mask,
            roi.these_subjects,
            least,
            stack if roi.group_mask else 0.5,
            roi.certificate,
            plan,
        )
    if plan == EXPLORATORY:
        return exploratory(
            name, roi.procedure, people, where, search, roi.test, least, mem_gb=stack
        )
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
        least,
        stack,
        keep_values,
    )


def _parcels(
    roi: Roi, region: Labels, people: list[str], at: Places, settings: Settings
) -> Workflow:
    """The plan of an atlas whose every label is a region."""
    table = str(settings.root / region.names) if region.names else None
    numbers: tuple[int, ...] = ()
    if region.labels:
        numbers = numbers_of(region.labels, read_label_table(table) if table else (), table or "")
    return parcels(
        roi.name,
        people,
        _atlas(region, at, numbers) if region.regrid else at.path(region.atlas),
        region.describe(),
        numbers,
        table,
        settings.maps.marked,
        settings.maps.min_coverage,
        roi.own_region,
    )


def _atlas(region: Labels, at: Places, numbers: tuple[int, ...]) -> Node:
    """The node that brings labels of an atlas to the grid of the maps, or of each subject's."""
    if len(at.references) == 1:
        atlas = Node(RegridLabels(), name="atlas", mem_gb=0.3)
        atlas.inputs.reference = at.references[0]
    else:
        fields = ["in_file", "reference"]
        atlas = MapNode(RegridLabels(), iterfield=fields, name="atlas", mem_gb=0.3)
        atlas.inputs.reference = list(at.references)
    atlas.inputs.in_file = at.path(region.atlas)
    if numbers:
        atlas.inputs.labels = list(numbers)
    atlas.config = {"execution": {"hash_method": "content"}}
    return atlas
