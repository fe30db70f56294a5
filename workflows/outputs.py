"""The output folder of a run: masks, tables, touches, manifest; see docs/outputs.md.

Everything is written into a folder beside the target and takes its name at the end, so that
a run that fails or is killed leaves no half-written results and loses none of the earlier ones.
"""

from __future__ import annotations

import math
import os
import platform
import shutil
from collections.abc import Iterator, Sequence
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np

from ..nodes.images import read_map, write_bytes
from ..nodes.interfaces.base import write_json
from ..nodes.reliability import ceiling, ceiling_sentence
from ..nodes.space import Grid
from .collect import RoiOutput
from .digests import digest
from .judge import Finding
from .pictures import FLIP_COLUMNS, flip_rows, write_pictures
from .plans import CROSS_FITTED, EXPLORATORY
from .rois import Roi
from .selection import Subjects
from .settings import Settings
from .staging import MANIFEST
from .study import CELLS, Row, Study
from .unitsets import encoded

_DEPENDENCIES = ("nipype", "nibabel", "numpy", "scipy", "networkx")

VALUE_COLUMNS = {
    "roi": "Region of interest, as named in STUDY.toml.",
    "plan": "How the region was chosen.",
    "parcel": "Label number, when every label of an atlas is a region; else n/a.",
    "sub": "Subject label.",
    "run": "Run, when each run has a mask of its own; n/a when runs were averaged.",
    "value": "Effect of the subject in its mask (summary, scale and null value: see roi_tests); 0 "
    "when the mask is empty.",
    "mask": "Mask the value was read in.",
    "mask_voxels": "Voxels in that mask.",
    "mask_mm3": "Volume of that mask in mm3.",
    "coverage": "Share of the mask in which the subject has data.",
    "influence": "Estimate without this subject's value, minus the estimate (folded plans).",
    "biased": "true when the mask was chosen on this subject's data (exploratory).",
}
TEST_COLUMNS = {
    "roi": "Region of interest, as named in STUDY.toml.",
    "plan": "How the region was chosen.",
    "tested": "The maps that are tested: contrast, session, task, runs.",
    "chosen_on": "The maps that chose, where they are others.",
    "parcel": "Label number, when every label of an atlas is a region; else n/a.",
    "parcel_name": "Its name in the atlas's label table.",
    "rule": "The mask rule in words.",
    "value": "How a map is summarised in its mask: mean, median, weighted or component.",
    "scale": "What values are measured in: the units of the effect maps, or percent of baseline.",
    "null_value": "Subtracted from the maps: estimates are differences from it.",
    "claim": "Who the test speaks of: the population, these subjects only (as declared), single "
    "subjects (regions of their own), or, of an exploratory value, nobody.",
    "claim_reason": "Why it speaks of these subjects only, as stated.",
    "search": "The search region that the null hypothesis covers.",
    "n_subjects": "Independent subjects tested: rows that share an exchange value are one.",
    "estimate": "Mean of the values; of compare, the difference of the groups' means; of score, "
    "the correlation of values and scores.",
    "target": "What the estimate estimates.",
    "biased": "true for exploratory values: no interval, no p, no error bar.",
    "interval_low": "Lower end of the 95 % interval.",
    "interval_high": "Upper end of the 95 % interval.",
    "interval_kind": "exact, approximate or conservative.",
    "interval_method": "How the interval was made.",
    "t": "Studentised mean, positive in the direction of selection.",
    "p": "p-value; p_kind and sided say how it was made.",
    "p_error": "Monte Carlo standard error of p; n/a when exact.",
    "p_holm": "Holm-adjusted over the tested regions, each with its own null hypothesis (search "
    "regions may overlap), or over the labels of an atlas.",
    "p_max": "Single-step p over all regions exchanged together: the chance of any finding as "
    "large when none of them has an effect; search regions may overlap (folded plans).",
    "looks": "Different looks that had read some of these voxels in some of these data when this "
    "one was first made, itself included.",
    "looks_of_run": "Of these, the looks of the run in which it was first made, itself included.",
    "history": "What the ledger says against taking it as stated beforehand: declared after looks, "
    "another region of that name before, like a recorded mask for a reason that was stated.",
    "p_kind": "The test.",
    "sided": "greater, less or two-sided.",
    "null": "The null hypothesis.",
    "dz": "Mean of the values over their standard deviation.",
    "g": "Standardised effect with Hedges' factor for small samples: of the mean, or of a "
    "difference of two groups.",
    "most_influential": "The subject without whose value the estimate changes most.",
    "n_cells": "Independent subjects per group that is compared; else per cell of the tested maps "
    "(and of those subtracted, and of a baseline): named by what tells the cells apart.",
    "ceiling": "Largest correlation that the stated reliabilities allow (Spearman 1904).",
    "n_flips": "Sign flips made.",
    "n_folds": "Folds; of masks of the subjects' own, masks.",
    "n_empty": "Of these, in which the rule found nothing and the value counts as 0: then the "
    "estimate is not the size of an effect.",
    "n_replaced": "Of these (1 where there is one mask for all), in which the rule found nothing "
    "and the strongest voxels stood in.",
    "dice": "Mean Dice overlap of pairs of fold masks.",
    "noise_dice": "The same under sign flips: what noise alone gives.",
    "coverage": "Least coverage over subjects; empty masks do not count.",
    "contour": "Share of pairs of voxels along the given region's boundary in which the inside has "
    "the higher group t; about .5 for a region that has nothing to do with the map (shape check).",
    "contour_p": "Of the shape check: the chance of so much for a region made without these data; "
    "at or below .01 it is said in the sentence.",
    "contour_step_p": "The same against an honest boundary with a step as high across it.",
    "level": "What independence of mask and data is shown about: subject or run.",
    "verdict": "The guard's verdict: apart, certified (orthogonal contrast), or leak (allowed for "
    "exploratory values alone).",
    "sentence": "The result in a sentence.",
}
CELL_COLUMNS = {
    "roi": "Region of interest.",
    "side": "tested, subtracted (minus), baseline, or chosen on (where other maps choose).",
    **{name: f"The maps' {name}, as in the study table." for name in CELLS},
    "n_subjects": "Subjects.",
    "n_independent": "Subjects that count as one for exchange counted once.",
    "n_maps": "Maps.",
    "n_left_out": "Maps of this cell left out; the reasons are in manifest.json.",
}
COMPARISON_COLUMNS = {
    "name": "The comparison, as named in STUDY.toml; a simple effect of an interaction below it.",
    "kind": "difference, equivalence, anova or interaction; simple effect.",
    "regions": "The regions, in order.",
    "what": "What is estimated.",
    "n": "Subjects with a value in every region.",
    "estimate": "In the units of the values; of anova, partial eta squared.",
    "interval_low": "Lower end of the interval (95 %; of equivalence 90 %).",
    "interval_high": "Upper end.",
    "interval_kind": "exact or approximate.",
    "statistic": "t; of anova, F.",
    "df": "Degrees of freedom; n/a when p is by exchanges.",
    "epsilon": "Of anova: Greenhouse & Geisser's.",
    "smallest": "Of equivalence: the smallest effect of interest.",
    "equivalent": "Of equivalence: whether the interval lies within it.",
    "p": "p-value; of a simple effect, Holm-adjusted over the simple effects.",
    "p_kind": "The test.",
    "looks": "Different looks that had read some of these voxels in some of these data when this "
    "one was first made, itself and those of its regions included.",
    "null": "The null hypothesis.",
    "assumption": "What the test takes for granted.",
    "sentence": "The result in a sentence.",
}
MASK_COLUMNS = {
    "roi": "Region of interest.",
    "mask": "File in masks/.",
    "voxels": "Voxels in it; of a fold overlap, those that any fold chose.",
    "mm3": "Their volume in mm3.",
    **{
        f"centre_{axis}": f"Centre of gravity, {axis} in mm (weighted, where values are weights)."
        for axis in "xyz"
    },
    **{
        f"top_{axis}": f"Voxel with the highest value, {axis} in mm (of a fold overlap: chosen "
        "most often; the first of several)."
        for axis in "xyz"
    },
    **{
        f"peak_{axis}": f"Highest voxel, in the direction of selection, of the map that chose the "
        f"mask (of a fold: of its selection side) inside it, {axis} in mm; n/a where no map chose."
        for axis in "xyz"
    },
    "peak_value": "The value there: t, or the mean where the rule reads means.",
}
SENSITIVITY_COLUMNS = {
    "roi": "Region of interest.",
    "setting": "What is varied, as declared in STUDY.toml beforehand; the stated analysis first.",
    "rule": "The mask rule in words.",
    "estimate": "Mean of the values.",
    "interval_low": "Lower end of the 95 % interval.",
    "interval_high": "Upper end of the 95 % interval.",
    "p": "p-value of this variant by itself: the variants are one look, none is to be picked.",
    "n_folds": "Folds, or masks.",
    "n_empty": "Of which empty.",
    "mask_voxels": "Median number of voxels of its masks.",
}
TOUCH_COLUMNS = {
    "mask": "Where the mask comes from in the graph.",
    "extraction": "The node (and element) that reads data inside it.",
    "role": "values or geometry: how the mask derives from the units.",
    "encoding": "units: the list names the units touched; all_but: it names the units NOT touched.",
    "of": "Of all_but: all units with these suffixes; n/a: of all units.",
    "touched": "Units, separated by spaces.",
    "tested": "Units read inside the mask, separated by spaces.",
    "origin": "Declared source of a mask from outside.",
    "verdict": "apart, certified, leak (exploratory values only) or unproven.",
    "level": "subject or run.",
}


_ENTITY_WORDS = {
    "contrast": "contrast",
    "ses": "session",
    "task": "task",
    "acq": "acquisition",
    "run": "run",
}
_SUMMARY_WORDS = {
    "median": "median",
    "weighted": "weighted mean",
    "component": "first principal component",
}


def write_all(
    stage: Path,
    settings: Settings,
    outputs: Sequence[RoiOutput],
    comparisons: Sequence[dict[str, Any]],
    findings: Sequence[Finding],
) -> list[dict[str, Any]]:
    """Write the whole output folder; returns the rows of roi_tests.tsv.

    Parameters
    ----------
    stage : Path
        An empty folder.
    settings : Settings
    outputs : sequence of RoiOutput
    comparisons : sequence of dict
        Records of the comparisons of regions.
    findings : sequence of Finding
        The guard's verdicts.
    """
    variants = [output for output in outputs if output.roi.variant_of]
    outputs = [output for output in outputs if not output.roi.variant_of]
    masks = stage / "masks"
    masks.mkdir()
    for output in outputs:
        for mask in output.masks:
            shutil.copyfile(mask.path, masks / mask.name)
            uris = [f"bids:study:{path}" for path in mask.sources]
            _sidecar(masks / mask.name, {"Type": "ROI", "Sources": uris})
        if output.overlap is not None:
            name = _overlap_name(output)
            shutil.copyfile(output.overlap, masks / name)
            _sidecar(
                masks / name,
                {
                    "Description": "Share of the folds whose mask holds the voxel.",
                    "Sources": [f"bids::masks/{mask.name}" for mask in output.masks],
                },
            )
    _table(stage / "roi_values.tsv", VALUE_COLUMNS, _value_rows(outputs))
    _table(stage / "masks.tsv", MASK_COLUMNS, _mask_rows(masks, outputs))
    _write_wide(stage / "roi_values_wide.tsv", settings, outputs)
    _table(stage / "cells.tsv", CELL_COLUMNS, _cell_rows(settings))
    tests = _test_rows(settings, outputs, findings)
    if comparisons:
        _table(stage / "comparisons.tsv", COMPARISON_COLUMNS, _compared_rows(comparisons))
    if variants:
        _table(stage / "sensitivity.tsv", SENSITIVITY_COLUMNS, _varied(outputs, variants))
    _table(stage / "roi_tests.tsv", TEST_COLUMNS, tests)
    write_pictures(stage, settings, outputs)
    flips = list(flip_rows(outputs))
    if flips:
        _table(stage / "flips.tsv", FLIP_COLUMNS, flips)
    _table(stage / "touches.tsv", TOUCH_COLUMNS, _touch_rows(settings.study, findings))
    write_json(
        stage / "dataset_description.json",
        {
            "Name": f"{settings.name}: region-of-interest statistics",
            "BIDSVersion": "1.9.0",
            "DatasetType": "derivative",
            "GeneratedBy": [{"Name": "sequester", "Version": version("sequester")}],
            "DatasetLinks": {"study": os.path.relpath(settings.root, settings.output)},
        },
    )
    write_bytes(stage / "STUDY.toml", settings.text.encode())
    _manifest(stage, settings, outputs)
    return tests


def _sidecar(path: Path, content: dict[str, Any]) -> None:
    write_json(path.with_name(path.name.removesuffix(".nii.gz") + ".json"), content)


def _value_rows(outputs: Sequence[RoiOutput]) -> Iterator[dict[str, Any]]:
    for output in outputs:
        biased = output.records[0]["biased"]
        influence = dict(output.records[0].get("influence") or ())
        people = {sub: rows[0].person for sub, rows in output.roi.tested.subjects}
        for value in output.values:
            yield {
                "roi": output.roi.name,
                "plan": output.roi.plan,
                "parcel": value.parcel,
                "sub": value.sub,
                "run": value.run,
                "value": value.value,
                "mask": value.mask,
                "mask_voxels": value.size,
                "mask_mm3": value.mm3,
                "coverage": value.coverage,
                "influence": influence.get(people[value.sub]),
                "biased": biased,
            }


_PEAK = ("peak_x", "peak_y", "peak_z", "peak_value")


def _mask_rows(folder: Path, outputs: Sequence[RoiOutput]) -> Iterator[dict[str, Any]]:
    """Where every mask lies: size, centre, and where a fold overlap is densest."""
    for output in outputs:
        if output.roi.each_label:
            continue  # an image of many labels; their sizes are with the values
        peaks = {mask.name: mask.peak for mask in output.masks}
        if output.overlap is not None:
            peaks[_overlap_name(output)] = ()
        for name, peak in peaks.items():
            row = {"roi": output.roi.name, "mask": name, **_lie(folder / name)}
            yield row | dict(zip(_PEAK, peak, strict=False))


def _lie(path: Path) -> dict[str, Any]:
    """The size, the centre and the top of a mask or of weights."""
    data, geometry = read_map(path)
    grid = Grid(geometry.shape, geometry.affine, data > 0)
    row: dict[str, Any] = dict.fromkeys(MASK_COLUMNS)
    row |= {"voxels": grid.n_features, "mm3": grid.n_features * float(f"{grid.feature_size:.6g}")}
    if grid.n_features:
        weights, mm = data[data > 0].astype(float), grid.coordinates()
        centre = (weights[:, None] * mm).sum(axis=0) / weights.sum()
        plain = weights.min() == weights.max()
        for i, axis in enumerate("xyz"):
            row[f"centre_{axis}"] = float(f"{centre[i]:.6g}")
            row[f"top_{axis}"] = None if plain else float(f"{mm[weights.argmax()][i]:.6g}")
    del row["roi"], row["mask"]
    return row


def _overlap_name(output: RoiOutput) -> str:
    return f"label-{output.roi.name}_desc-foldoverlap_probseg.nii.gz"


def _write_wide(path: Path, settings: Settings, outputs: Sequence[RoiOutput]) -> None:
    """A row per subject (and run), a column per region: for spreadsheets."""
    columns = {name: VALUE_COLUMNS[name] for name in ("sub", "run")}
    covariates = _covariates(settings)
    names = dict.fromkeys(name for of_sub in covariates.values() for name in of_sub)
    columns |= {name: "Covariate, from the study table." for name in names}
    rows: dict[tuple[str, str], dict[str, Any]] = {}
    for output in outputs:
        biased = bool(output.records[0]["biased"])
        called = {str(r.get("parcel")): str(r.get("parcel_name")) for r in output.records}
        for value in output.values:
            name = output.roi.name
            if value.parcel:
                label = "".join(c for c in called[value.parcel] if c.isalnum())
                name += f"_{label or value.parcel}"
                if name in columns and f"label {value.parcel} " not in columns[name]:
                    name += f"_{value.parcel}"  # two labels of one name
            if biased:
                name += "_BIASED"
            of = f"label {value.parcel} of " if value.parcel else ""
            note = ": chosen on these data (exploratory)" if biased else ""
            columns[name] = f"Value in {of}{output.roi.name}, plan {output.roi.plan}{note}."
            row = rows.setdefault(
                (value.sub, value.run),
                {"sub": value.sub, "run": value.run, **covariates.get(value.sub, {})},
            )
            row[name] = value.value
    blank = dict.fromkeys(columns)
    _table(path, columns, (blank | rows[key] for key in sorted(rows)))


def _covariates(settings: Settings) -> dict[str, dict[str, str]]:
    """Per subject, the columns of the study table that hold one value for the whole subject."""
    found: dict[str, dict[str, set[str]]] = {}
    for row in settings.used:
        of_sub = found.setdefault(row.unit.sub, {})
        for name, value in row.extra:
            of_sub.setdefault(name, set()).add(value)
    single = {
        name
        for name in dict.fromkeys(name for of_sub in found.values() for name in of_sub)
        if all(len(of_sub.get(name, {""})) == 1 for of_sub in found.values())
    }
    return {
        sub: {name: values.copy().pop() for name, values in of_sub.items() if name in single}
        for sub, of_sub in found.items()
    }


def _cell_rows(settings: Settings) -> Iterator[dict[str, Any]]:
    """How many subjects and maps each region has, per cell of the study."""
    for roi in settings.rois:
        if roi.variant_of:
            continue
        sides = {"tested": roi.tested.subjects, "subtracted": roi.tested.minus}
        sides |= {"baseline": roi.tested.baseline}
        sides |= {"chosen on": roi.choosing.subjects if roi.choosing is not None else ()}
        left = [*roi.tested.left_out, *(roi.choosing.left_out if roi.choosing else ())]
        for side, subjects in sides.items():
            for cell, rows in _by_cell(subjects).items():
                yield {
                    "roi": roi.name,
                    "side": side,
                    **dict(zip(CELLS, cell, strict=True)),
                    "n_subjects": len({row.unit.sub for row in rows}),
                    "n_independent": len({row.person for row in rows}),
                    "n_maps": len(rows),
                    "n_left_out": sum(tuple(row.cell) == cell for row in left),
                }


def _by_cell(subjects: Subjects) -> dict[tuple[str, ...], list[Row]]:
    """The rows of each cell of the study, cells sorted."""
    cells: dict[tuple[str, ...], list[Row]] = {}
    for row in (row for _, rows in subjects for row in rows):
        cells.setdefault(tuple(row.cell), []).append(row)
    return dict(sorted(cells.items()))


def _counted(roi: Roi, record: dict[str, Any]) -> str:
    """Independent subjects per group that is compared, or per cell of the maps read, in short."""
    if record.get("n_cells"):
        return ", ".join(f"{name} {n}" for name, n in record["n_cells"])
    sides = {"": roi.tested.subjects, "; minus ": roi.tested.minus}
    sides |= {"; baseline ": roi.tested.baseline}
    told = ""
    for word, subjects in sides.items():
        cells = _by_cell(subjects)
        # What all cells share is not said, but for the contrast where it is all there is to say.
        varied = [i for i in range(len(CELLS)) if len({cell[i] for cell in cells}) > 1]
        shown = varied or [CELLS.index("contrast")]
        names = [" ".join(cell[i] for i in shown if cell[i]) or "all" for cell in cells]
        counts = [len({row.person for row in rows}) for rows in cells.values()]
        if cells:
            pairs = zip(names, counts, strict=True)
            told += word + ", ".join(f"{name} {count}" for name, count in pairs)
    return told


def _compared_rows(comparisons: Sequence[dict[str, Any]]) -> Iterator[dict[str, Any]]:
    for record in comparisons:
        yield _compared_row(record)
        for effect in record.get("simple", []):
            head = {name: record.get(name) for name in ("name", "regions", "looks")}
            head |= {"kind": "simple effect", "p": effect["p_holm"]}
            yield _compared_row({**effect, **head})


def _compared_row(record: dict[str, Any]) -> dict[str, Any]:
    interval, df = record.get("interval") or {}, record.get("df")
    return {name: record.get(name) for name in COMPARISON_COLUMNS} | {
        "regions": " ".join(record["regions"]),
        "df": " ".join(f"{x:g}" for x in df) if isinstance(df, list) else df,
        "interval_low": interval.get("low"),
        "interval_high": interval.get("high"),
        "interval_kind": interval.get("kind"),
    }


def _varied(
    outputs: Sequence[RoiOutput], variants: Sequence[RoiOutput]
) -> Iterator[dict[str, Any]]:
    """The stated analysis of a region, then its variants: one look, whatever their number."""
    for output in outputs:
        mine = [one for one in variants if one.roi.variant_of == output.roi.name]
        for one in [output, *mine] if mine else []:
            record, interval = one.records[0], one.records[0]["interval"] or {}
            yield {
                "roi": output.roi.name,
                "setting": ", ".join(f"{k} = {v}" for k, v in one.roi.setting) or "as stated",
                "rule": one.roi.rule,
                "estimate": record["estimate"],
                "interval_low": interval.get("low"),
                "interval_high": interval.get("high"),
                "p": record["p"],
                "n_folds": record["n_folds"],
                "n_empty": record["n_empty"],
                "mask_voxels": float(np.median(record["mask_sizes"])),
            }


def _test_rows(
    settings: Settings, outputs: Sequence[RoiOutput], findings: Sequence[Finding]
) -> list[dict[str, Any]]:
    rows = []
    for output in outputs:
        roi = output.roi
        met = [f for f in findings if f.node == f"{settings.name}.{roi.name}.extract"]
        worst = [f for f in met if f.verdict != "apart"] or met
        levels = {f.level for f in met}
        for record in output.records:
            interval = record["interval"] or {}
            row = {name: record.get(name) for name in TEST_COLUMNS}
            row |= {
                "tested": _cells(roi.tested.subjects),
                "chosen_on": _cells(roi.choosing.subjects) if roi.choosing else None,
                "rule": _rule(roi, record),
                "value": roi.summary,
                "n_cells": _counted(roi, record),
                "ceiling": None if roi.reliability is None else ceiling(*roi.reliability),
                "null_value": settings.maps.null_value,
                "scale": "percent of baseline" if roi.tested.baseline else "effect maps",
                "claim": _claim(roi),
                "claim_reason": roi.claim_reason or None,
                "sentence": " ".join(
                    [record["sentence"], *_about(roi, settings, record["estimate"])]
                ),
                "interval_low": interval.get("low"),
                "interval_high": interval.get("high"),
                "interval_kind": interval.get("kind"),
                "interval_method": interval.get("method"),
                "n_replaced": len(record["replaced"])
                if record["replaced"] or record["n_folds"] is not None
                else None,
                "level": "run" if "run" in levels else "subject" if "subject" in levels else None,
                "verdict": worst[0].verdict if worst else None,
            }
            rows.append(row)
    return rows


def _rule(roi: Roi, record: dict[str, Any]) -> str:
    """How the region was chosen: the rule as stated, where the record only says by whom."""
    if roi.procedure is None or roi.plan in CROSS_FITTED or roi.plan == EXPLORATORY:
        return str(record["rule"])
    return f"{record['rule']}: {roi.rule}"


def _claim(roi: Roi) -> str:
    if roi.plan == EXPLORATORY:
        return "nobody"
    if roi.these_subjects:
        return "these subjects"
    return "single subjects" if roi.own_masks or roi.own_region else "population"


def _about(roi: Roi, settings: Settings, estimate: float) -> Iterator[str]:
    """What a value is, where it is not the plain mean of the effect maps; and what chose."""
    told = [f"Tested maps: {_cells(roi.tested.subjects)}."]
    if roi.claim_reason:
        told.append(f"It speaks of these subjects only, because: {roi.claim_reason}.")
    if roi.own_masks or roi.group_mask:
        told.append(f"Rule: {roi.rule}.")
    if roi.choosing is not None and roi.plan not in CROSS_FITTED:
        told.append(f"Chosen on: {_cells(roi.choosing.subjects)}.")
    if settings.maps.by_variance:
        told.append("Runs are weighted by the inverse of their variance maps.")
    if roi.summary != "mean":
        told.append(f"Each subject's value is the {_SUMMARY_WORDS[roi.summary]} of the region.")
    if roi.tested.minus:
        told.append(f"Subtracted from them: {_cells(roi.tested.minus)}.")
    if roi.tested.baseline:
        told.append(f"In percent of the baseline: {_cells(roi.tested.baseline)}.")
    if settings.maps.null_value:
        told.append(f"Values are differences from {settings.maps.null_value:g}, which is the null.")
    if roi.choosing is not None and roi.plan in CROSS_FITTED:
        chose = _cells(roi.choosing.subjects)
        told.append(f"Regions were chosen on {chose}, held out and exchanged together.")
    yield from told
    if roi.reliability is not None:
        yield ceiling_sentence(estimate, ceiling(*roi.reliability))


def _cells(subjects: Subjects) -> str:
    """The contrasts, sessions, tasks and runs of some maps, in words."""
    rows = [row for _, listed in subjects for row in listed]
    told = []
    for name, word in _ENTITY_WORDS.items():
        values = sorted({row.column(name) for row in rows} - {""})
        if values and len(values) <= 4:
            told.append(f"{word} {' + '.join(values)}")
    return ", ".join(told) or "all of the table"


def _touch_rows(study: Study, findings: Sequence[Finding]) -> Iterator[dict[str, Any]]:
    table = study.table
    for finding in findings:
        if finding.kind != "extraction":
            continue
        where = finding.node if finding.item is None else f"{finding.node}[{finding.item}]"
        for role, bits in (("values", finding.mask_units), ("geometry", finding.geometry_units)):
            if not bits and role == "geometry":
                continue
            listed = encoded(bits, table)
            how = "units" if "units" in listed else "all_but"
            yield {
                "mask": finding.mask_place,
                "extraction": where,
                "role": role,
                "encoding": how,
                "of": " ".join(listed.get("of", ())),
                "touched": " ".join(str(table.units[i]) for i in listed[how]),
                "tested": " ".join(map(str, table.units_of(finding.data_units))),
                "origin": "; ".join(finding.origins),
                "verdict": finding.verdict,
                "level": finding.level,
            }


def _table(path: Path, columns: dict[str, str], rows: Any) -> None:
    lines = ["\t".join(columns)]
    lines += ["\t".join(_cell(row[name]) for name in columns) for row in rows]
    write_bytes(path, ("\n".join(lines) + "\n").encode())
    dictionary = {name: {"Description": text} for name, text in columns.items()}
    write_json(path.with_suffix(".json"), dictionary)


def _cell(value: Any) -> str:
    """A value as BIDS tables hold it: shortest exact number, n/a for nothing."""
    if value is None or value == "" or (isinstance(value, float) and math.isnan(value)):
        return "n/a"
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, float):
        return repr(value)
    return " ".join(str(value).split())


def _manifest(stage: Path, settings: Settings, outputs: Sequence[RoiOutput]) -> None:
    """What went in and what came out, with digests: enough to repeat the run and compare."""
    records = [record for output in outputs for record in output.records]
    study = settings.study
    outside = [f for origin in study.origins for f in origin.files]
    used = [row.path for row in settings.used]
    if settings.maps.by_variance:
        used += [row.variance for row in settings.used if row.variance]
    files = sorted(p for p in stage.rglob("*") if p.is_file())
    write_json(
        stage / MANIFEST,
        {
            "study": settings.name,
            "settings_sha256": settings.digest,
            "table_sha256": digest(settings.table_path),
            "seed": settings.seed,
            "versions": {
                "sequester": version("sequester"),
                "python": platform.python_version(),
                **{name: version(name) for name in _DEPENDENCIES},
            },
            "inputs": {path: digest(settings.root / path) for path in sorted({*used, *outside})},
            "left_out": {row.name: row.exclude_reason for row in settings.left_out},
            "ledgers_beside": sorted({name for one in records for name in one.get("beside", ())}),
            "origins": [
                {
                    "source": o.source,
                    "files": list(o.files),
                    "derived_from": [str(u) for u in o.derived_from],
                }
                for o in study.origins
            ],
            "outputs": {str(p.relative_to(stage)): digest(p) for p in files},
        },
    )
