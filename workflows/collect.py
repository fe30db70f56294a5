"""What one region's nodes produced, gathered from a finished graph: values, masks, records."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from ..nodes.errors import InputError
from ..nodes.images import geometry_of, open_image, read_mask
from ..nodes.interfaces.base import read_json
from ..nodes.results import exploratory_result
from ..nodes.roi import exchange_p, holm, per_person
from .ancestry import node_name
from .build import tested_rows
from .plans import A_PRIORI, CROSS_FITTED, LEAVE_ONE_OUT, LOCALIZER, OTHER_RUNS
from .rois import Roi
from .selection import Selection
from .settings import Settings
from .study import Row


@dataclass(frozen=True)
class Value:
    """One value of one region.

    Parameters
    ----------
    sub, run : str
        The run is "" when runs were averaged.
    value, coverage : float
    mask : str
        The name of the mask it was read in.
    size : int
        Voxels in that mask.
    mm3 : float
    parcel : str
        The label's number, when a region is one of the labels of an atlas.
    """

    sub: str
    run: str
    value: float
    coverage: float
    mask: str
    size: int
    mm3: float
    parcel: str = ""


@dataclass(frozen=True)
class MaskOutput:
    """A mask (or label image) for the output folder.

    Parameters
    ----------
    name : str
        What it is called there.
    path : Path
    sources : tuple of str
        The study's files whose values it derives from.
    peak : tuple of float
        Of the map that chose it, highest in it: x, y, z in mm and the value; () without one.
    """

    name: str
    path: Path
    sources: tuple[str, ...]
    peak: tuple[float, ...] = ()


@dataclass(frozen=True)
class RoiOutput:
    """What one region's plan produced.

    Parameters
    ----------
    roi : Roi
    records : tuple of dict
        The results, as `RoiResult.as_dict`: one, or one per parcel.
    values : tuple of Value
    masks : tuple of MaskOutput
    overlap : Path or None
        Per voxel, the share of the folds that chose it.
    searched : tuple of Path
        The masks of the search region, one or one per row; empty for the whole map.
    flips : Path or None
        The statistic as observed, then under each exchange of the whole procedure.
    maps : tuple of Path
        The maps it was read in.
    """

    roi: Roi
    records: tuple[dict[str, Any], ...]
    values: tuple[Value, ...]
    masks: tuple[MaskOutput, ...]
    overlap: Path | None
    searched: tuple[Path, ...]
    flips: Path | None = None
    maps: tuple[Path, ...] = ()


def find_nodes(graph: Any) -> dict[str, Any]:
    """The nodes of a finished graph, by name."""
    return {node_name(node): node for node in graph.nodes()}


def collect(roi: Roi, settings: Settings, nodes: dict[str, Any]) -> RoiOutput:
    """What one region's nodes produced."""
    start = f"{settings.name}.{roi.name}."
    mine = {name.removeprefix(start): n for name, n in nodes.items() if name.startswith(start)}
    rows = tested_rows(roi)
    if roi.each_label:
        return _family(roi, rows, mine, settings)
    extract, choose = mine["extract"], mine.get("choose")
    read = extract.result.outputs
    given = [Path(path) for path in extract.inputs.mask_files]
    names = _names(roi, rows, given, choose)
    of_row = [names[path] for path in (given if len(given) > 1 else given * len(rows.subjects))]
    overlap = getattr(choose.result.outputs, "overlap_file", None) if choose is not None else None
    peaks = {} if choose is None else peaks_of(choose.result.outputs)
    mm3 = {name: _voxel_mm3(path) for path, name in names.items()}
    return RoiOutput(
        roi,
        (_record(roi, mine),),
        tuple(
            Value(label, _run(roi, listed[0]), value, share, name, size, size * mm3[name])
            for (label, listed), value, share, size, name in zip(
                rows.subjects, read.values, read.coverage, read.sizes, of_row, strict=True
            )
        ),
        tuple(
            MaskOutput(name, path, _sources(roi, rows, of_row, name, settings), peaks.get(path, ()))
            for path, name in names.items()
        ),
        None if overlap is None else Path(overlap),
        _searched(given if roi.plan == A_PRIORI else None, choose),
        _flips(mine.get("test")),
        tuple(map(Path, extract.inputs.in_files)),
    )


def peaks_of(made: Any) -> dict[Path, tuple[float, ...]]:
    """The peak of each mask that a node chose."""
    if hasattr(made, "mask_file"):
        listed = isinstance(made.mask_file, list)  # of a MapNode
        masks, peaks = (made.mask_file, made.peak) if listed else ([made.mask_file], [made.peak])
        return dict(zip(map(Path, masks), map(tuple, peaks), strict=True))
    masks = made.mask_files if hasattr(made, "mask_files") else made.row_masks
    return dict(zip(map(Path, masks), map(tuple, made.peaks), strict=True))


def _flips(test: Any) -> Path | None:
    found = getattr(test.result.outputs, "flips_file", None) if test is not None else None
    return Path(found) if isinstance(found, str) else None


def _family(roi: Roi, rows: Selection, mine: dict[str, Any], settings: Settings) -> RoiOutput:
    """What a parcellation produced: a value per parcel and subject, a test per parcel."""
    extract = mine["extract"]
    read = extract.result.outputs
    given = [Path(path) for path in extract.inputs.label_files]
    names = _names(roi, rows, given, None)
    of_row = [names[path] for path in (given if len(given) > 1 else given * len(rows.subjects))]
    mm3 = [_voxel_mm3(path) for path in given]
    table, coverage = np.load(read.values_file), np.load(read.coverage_file)
    values = []
    for i, (label, _) in enumerate(rows.subjects):
        image = min(i, len(given) - 1)
        for j, parcel in enumerate(read.parcels):
            size = read.sizes[image][j]
            values.append(
                Value(
                    label,
                    "",
                    float(table[i, j]),
                    float(coverage[i, j]),
                    of_row[i],
                    size,
                    size * mm3[image],
                    str(parcel),
                )
            )
    return RoiOutput(
        roi,
        tuple(read_json(mine["test"].result.outputs.record_file)["tests"]),
        tuple(values),
        tuple(
            MaskOutput(name, path, _sources(roi, rows, of_row, name, settings))
            for path, name in names.items()
        ),
        None,
        (),
        maps=tuple(map(Path, extract.inputs.in_files)),
    )


def _run(roi: Roi, row: Row) -> str:
    return row.unit.run if roi.plan in OTHER_RUNS else ""


def _names(roi: Roi, rows: Selection, given: Sequence[Path], choose: Any) -> dict[Path, str]:
    """What each mask is called in the output folder."""
    suffix = "dseg" if roi.each_label else "probseg" if roi.summary == "weighted" else "mask"
    if roi.plan in CROSS_FITTED:
        chosen = choose.result.outputs
        word = "without" if roi.plan == LEAVE_ONE_OUT else "fold"
        names = [f"label-{roi.name}_desc-{word}{_alnum(f)}_mask" for f in chosen.fold_names]
        paths = [Path(path) for path in chosen.mask_files]
    elif len(given) == 1:
        names, paths = [f"label-{roi.name}_{suffix}"], list(given)
    else:
        desc = "_desc-otherruns" if roi.plan in OTHER_RUNS else ""
        desc = "_desc-localizer" if roi.plan == LOCALIZER else desc
        names = []
        for label, listed in rows.subjects:
            run = f"_run-{_alnum(listed[0].unit.run)}" if roi.plan in OTHER_RUNS else ""
            names.append(f"sub-{_alnum(label)}{run}_label-{roi.name}{desc}_{suffix}")
        paths = list(given)
    if len(set(names)) != len(names):
        raise InputError(
            "subject labels that differ only in punctuation",
            got=", ".join(sorted({name for name in names if names.count(name) > 1})),
            remedy="BIDS labels are letters and digits; rename them in the table",
        )
    return {path: f"{name}.nii.gz" for path, name in zip(paths, names, strict=True)}


def _alnum(label: str) -> str:
    return "".join(c for c in label if c.isalnum())


def _record(roi: Roi, mine: dict[str, Any]) -> dict[str, Any]:
    """The result of a region's test; of an exploratory look, the value alone."""
    if "test" in mine:
        return read_json(mine["test"].result.outputs.record_file)
    assert roi.procedure is not None, "only the exploratory plan goes without a test"
    read = mine["extract"].result.outputs
    return exploratory_result(
        per_person(read.values, roi.tested.people),
        roi.names,
        roi.procedure.describe(),
        read.sizes[0],
        read.coverage,
        replaced=bool(mine["choose"].result.outputs.replaced),
    ).as_dict()


def _voxel_mm3(path: Path) -> float:
    # Headers hold float32: what is beyond their precision is not a volume.
    return float(f"{abs(np.linalg.det(open_image(path).affine[:3, :3])):.6g}")


def _sources(
    roi: Roi, rows: Selection, of_row: Sequence[str], name: str, settings: Settings
) -> tuple[str, ...]:
    """The study's files whose values a mask derives from, and those of its search region."""
    here = [i for i, mask in enumerate(of_row) if mask == name]
    found: list[str] = []
    for row in _chosen_on(roi, rows, here):
        found += [row.path, *([row.variance] if settings.maps.by_variance else [])]
    subs = [rows.subjects[i][0] for i in here]
    for leaf in roi.region.leaves():
        found += [file.replace("{sub}", sub) for sub in subs for file in leaf.files]
    return tuple(dict.fromkeys(filter(None, found)))


def _chosen_on(roi: Roi, rows: Selection, here: Sequence[int]) -> Iterator[Row]:
    """The rows that chose the mask which is read in the rows numbered `here`."""
    chosen = roi.choosing or rows
    if roi.plan == A_PRIORI:
        return
    if roi.plan in OTHER_RUNS:
        assert roi.procedure is not None, "own masks are chosen"
        label = rows.subjects[here[0]][0]
        mine = [i for i, (sub, _) in enumerate(rows.subjects) if sub == label]
        runs = [rows.subjects[i][1][0].unit.run for i in mine]
        for fold in roi.procedure.scheme.folds(runs):
            if mine.index(here[0]) in fold.held_out:
                for i in fold.selection:
                    yield from rows.rows_of(mine[i])
        return
    held = {rows.people[i] for i in here} if roi.plan in CROSS_FITTED else set()
    only = {rows.subjects[i][0] for i in here} if roi.own_masks else None
    for i, (label, listed) in enumerate(chosen.subjects):
        if listed[0].person not in held and (only is None or label in only):
            yield from chosen.rows_of(i)


def _searched(given: Sequence[Path] | None, choose: Any) -> tuple[Path, ...]:
    """The masks of the region that a null covers; none for the whole map."""
    if given is not None:
        return tuple(given)
    settings = choose.inputs.get()
    found = settings.get("search_files") or settings.get("search_file")
    listed = found if isinstance(found, list) else [found] if isinstance(found, str) else []
    return tuple(map(Path, listed))


def collect_comparisons(settings: Settings, nodes: dict[str, Any]) -> list[dict[str, Any]]:
    """The records of the comparisons of regions, each with its name."""
    rois = {roi.name: roi for roi in settings.rois}
    made = []
    for one in settings.comparisons:
        node = nodes[f"{settings.name}.{one.name}"]
        record = {"name": one.name} | read_json(node.result.outputs.record_file)
        if any(rois[name].own_masks or rois[name].own_region for name in one.rois):
            record["assumption"] += (
                "; for a population, also that the effects that choose and those that are tested "
                "are uncorrelated across subjects"
            )
        if any(rois[name].these_subjects for name in one.rois):
            record["assumption"] += "; it speaks of these subjects only"
        made.append(record)
    return made


def adjust(outputs: Sequence[RoiOutput]) -> list[tuple[str, str]]:
    """Holm over the tested regions, and single-step p over those exchanged together.

    What is controlled is the chance of any false "an effect somewhere in its search region" (of
    regions fixed beforehand: "in the mean of it"). Each p holds for that by itself, and Holm needs
    no more, so search regions may overlap; nothing is said of places within them. The labels of an
    atlas are a family of their own, adjusted in their test.

    Returns
    -------
    list of (name, name)
        The regions whose search regions share voxels.
    """
    stated = [o for o in outputs if not (o.roi.each_label or o.roi.variant_of)]
    tested = [o for o in stated if o.records[0]["p"] is not None]
    together = [
        (other, one)
        for i, one in enumerate(tested)
        for other in tested[:i]
        if not _apart(one, other)
    ]
    _over_the_largest(tested)
    p = [output.records[0]["p"] for output in tested]
    for output, adjusted in zip(tested, holm(p), strict=True):
        output.records[0]["p_holm"] = adjusted
    return [(one.roi.name, other.roi.name) for one, other in together]


def _over_the_largest(tested: Sequence[RoiOutput]) -> None:
    """Single-step p over the regions that were exchanged together (Westfall & Young 1993).

    The largest statistic of each exchange is compared, so that overlapping search regions do not
    matter: the chance of any false finding when none of the regions has an effect.
    """
    families: dict[tuple[object, ...], list[RoiOutput]] = {}
    for output in tested:
        if output.flips is not None:
            roi = output.roi
            model = None if roi.procedure is None else roi.procedure.model
            key = (tuple(roi.tested.people), roi.n_flips, model)
            families.setdefault(key, []).append(output)
    for family in families.values():
        tables = [np.load(one.flips) for one in family if one.flips is not None]
        largest = np.max([table[1:] for table in tables], axis=0)
        for output, table in zip(family, tables, strict=True):
            exact = output.records[0]["p_error"] is None
            output.records[0]["p_max"] = exchange_p(float(table[0]), largest, exact=exact)


def _apart(one: RoiOutput, other: RoiOutput) -> bool:
    """Whether two search regions share no voxel; on grids of their own, in no subject."""
    if not one.searched or not other.searched:
        return False  # a whole map overlaps everything
    for mine, theirs in {(a, b) for _, a, b in _pairs(one, other)}:
        like = (str(mine), geometry_of(open_image(mine)))
        if (read_mask(mine)[0] & read_mask(theirs, like)[0]).any():
            return False
    return True


def _pairs(one: RoiOutput, other: RoiOutput) -> Iterator[tuple[str, Path, Path]]:
    """The search masks of the same subject."""
    mine, theirs = ({v.sub: _at(o, i) for i, v in enumerate(o.values)} for o in (one, other))
    for sub in mine.keys() & theirs.keys():
        yield sub, mine[sub], theirs[sub]


def _at(output: RoiOutput, row: int) -> Path:
    return output.searched[row if len(output.searched) > 1 else 0]
