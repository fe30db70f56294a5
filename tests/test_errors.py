"""What goes wrong, and the one message that says so: the cases behind docs/errors.md.

Every case spoils a small sound study and gives the request to the real command line.
`python tests/test_errors.py` writes docs/errors.md anew from the list.
"""

import gzip
import re
import shutil
import struct
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import nibabel as nib
import numpy as np
import planting
import pytest
from click.testing import CliRunner
from planting import content
from sequester.workflows.cli import main

PAGE = Path(__file__).parent.parent / "docs" / "errors.md"
AFFINE = np.diag([3.0, 3.0, 3.0, 1.0])
AFFINE[:3, 3] = -9, -6, -6
SHAPE = (6, 5, 4)
SUBJECTS = ("01", "02", "03", "04", "05")
STUDY = """\
[study]
name = "garden"
table = "table.tsv"
seed = 3

[data]
select = { task = "lanterns" }

[[roi]]
name = "Arbor"
plan = "leave-one-subject-out"
search = { mask = "arbor.nii.gz", origin = "drawn beforehand" }
rule = { kind = "strongest", k = 5 }
flips = 19

[[roi]]
name = "Brook"
plan = "localizer"
choose_on = { task = "paths" }
rule = { kind = "threshold", height = 0.5 }

[[roi]]
name = "Cinder"
plan = "a-priori"
region = { atlas = "garden_dseg.nii.gz", labels = ["Cinder"], origin = "atlas of the garden" }
"""
MAP = "maps/sub-02_task-lanterns_run-1.nii.gz"  # line 6 of the table
VARIANCE = MAP.replace("maps", "variances")
CUT = "[...]"
TABLE = ("table", "FOLDER/maps", "--pattern", "sub-{sub}_task-{task}_run-{run}.nii.gz")
CHECK, RUN = ("check", "FOLDER/STUDY.toml", "--quiet"), ("run", "FOLDER/STUDY.toml", "--quiet")
LEDGER = "STUDY.ledger.jsonl"
DECLARE, VERIFY = ("declare", "--study", "FOLDER/STUDY.toml"), ("verify", f"FOLDER/{LEDGER}")
CONTOUR = ("contour", "FOLDER/arbor.nii.gz", "FOLDER/STUDY.toml", "--quiet")
SCRIPT = ("check", "FOLDER/plan.py:make", "--study", "FOLDER/table.tsv")


@dataclass(frozen=True)
class Case:
    """One fault.

    Parameters
    ----------
    what : str
        The fault in words, for the page.
    spoil : callable
        Does it to the folder of a sound study.
    message : str
        All of standard error, without "sequester: "; [...] stands for words left out.
    command : tuple of str
    exit_code : int
    """

    what: str
    spoil: Callable[[Path], object]
    message: str
    command: tuple[str, ...] = CHECK
    exit_code: int = 2


# -- a sound study ----------------------------------------------------------------------------


def noise(*shape, seed=0):
    return np.random.default_rng([seed, *shape]).standard_normal(shape).astype(np.float32)


save = partial(planting.save, affine=AFFINE)


def make_study(folder):
    """Five gardeners, two tasks of two runs, an atlas, a mask, and earlier results."""
    for name in ("maps", "variances", "results"):
        (folder / name).mkdir(parents=True)
    (folder / "results" / "manifest.json").write_text(
        '{"study": "garden", "outputs": {"roi_tests.tsv": ""}}'
    )
    (folder / "results" / "roi_tests.tsv").write_text("earlier\n")
    lines = ["path\tvolume\tsub\ttask\trun\tsuffix\tcontrast\texclude_reason\texchange\tvariance"]
    lines[0] += "\tgroup\tfold"
    for i, sub in enumerate(SUBJECTS):
        for j, (task, run) in enumerate((t, r) for t in ("lanterns", "paths") for r in "12"):
            name = f"sub-{sub}_task-{task}_run-{run}.nii.gz"
            save(folder / "maps" / name, 1 + noise(*SHAPE, seed=4 * i + j))
            save(folder / "variances" / name, 1 + noise(*SHAPE, seed=99 + 4 * i + j) ** 2)
            cells = f"maps/{name}", "n/a", sub, task, run, "bold", "glow", "n/a", "n/a"
            lines.append("\t".join((*cells, f"variances/{name}", "ab"[i % 2], "xyz"[i % 3])))
    (folder / "table.tsv").write_text("\n".join(lines) + "\n")
    labels = np.ones(SHAPE, np.int16)
    labels[2:4], labels[4:] = 2, 3
    save(folder / "garden_dseg.nii.gz", labels)
    (folder / "garden_dseg.tsv").write_text("index\tname\n1\tArbor\n2\tBrook\n3\tCinder\n")
    save(folder / "arbor.nii.gz", np.ones(SHAPE, np.uint8))
    (folder / "STUDY.toml").write_text(STUDY)


# -- ways to spoil it -------------------------------------------------------------------------


def another_folder(study):
    """The output is a folder that no run wrote."""
    (study / "others").mkdir()
    (study / "others" / "manifest.json").write_text("{}")
    edit("seed = 3", 'seed = 3\noutput = "others"')(study)


def edit(old, new, name="STUDY.toml"):
    def spoil(folder):
        text = (folder / name).read_text()
        assert old in text, old
        (folder / name).write_text(text.replace(old, new, 1))

    return spoil


def edit_all(old, new, name="table.tsv"):
    return lambda folder: (folder / name).write_text((folder / name).read_text().replace(old, new))


def put(name, content):
    raw = content.encode() if isinstance(content, str) else content
    return lambda folder: (folder / name).write_bytes(raw)


def remove(name):
    return lambda folder: (folder / name).unlink()


def copy(name, other):
    return lambda folder: shutil.copy(folder / name, folder / other)


def image(name, data, affine=AFFINE):
    return lambda folder: save(folder / name, data, affine=affine)


def raw(name, change):
    """Damage an image's unpacked bytes: header (348 bytes), 4 bytes, voxels."""

    def spoil(folder):
        content = bytearray(gzip.decompress((folder / name).read_bytes()))
        change(content)
        (folder / name).write_bytes(gzip.compress(bytes(content), mtime=0))

    return spoil


def cut(name, n_bytes):
    return lambda folder: (folder / name).write_bytes((folder / name).read_bytes()[:n_bytes])


def link(name, target):
    def spoil(folder):
        (folder / name).unlink()
        (folder / name).symlink_to(target)

    return spoil


def both(*spoils):
    return lambda folder: [spoil(folder) for spoil in spoils]


def region(text):
    """Another region for Cinder."""
    return edit(
        '{ atlas = "garden_dseg.nii.gz", labels = ["Cinder"], origin = "atlas of the garden" }',
        text,
    )


def plan(text):
    """Another plan for Arbor, which keeps its search region and rule."""
    return both(edit('plan = "leave-one-subject-out"', text), edit("flips = 19\n", ""))


def own_grid(sub, task=""):
    """Put a subject's maps (of a task) on a grid of their own, and say so."""

    def spoil(folder):
        edit('select = { task = "lanterns" }', 'select = { task = "lanterns" }\ngrids = "own"')(
            folder
        )
        for i, path in enumerate(sorted(folder.glob(f"*s/sub-{sub}_task-{task}*"))):
            save(path, 1 + noise(7, 5, 4, seed=i))

    return spoil


def cell(column, value, line=6):
    """Change one cell of the table; line 6 is run 1 of subject 02."""

    def spoil(folder):
        rows = [row.split("\t") for row in (folder / "table.tsv").read_text().splitlines()]
        rows[line - 1][rows[0].index(column)] = value
        (folder / "table.tsv").write_text("\n".join(map("\t".join, rows)) + "\n")

    return spoil


def exclude(*subjects):
    """Leave out the tested maps of some subjects."""
    kept = [f"\t{sub}\tlanterns\t{run}\tbold\tglow\t" for sub in subjects for run in "12"]
    return both(*[edit(f"{row}n/a", f"{row}moved", "table.tsv") for row in kept])


def in_data(text):
    """Another line in [data]."""
    return edit("select = {", f"{text}\nselect = {{")


def more(text):
    """Something behind the last region."""
    return edit("flips = 19\n", f"flips = 19\n\n{text}\n")


# A plan over runs, of which each subject has two: the rule reads their mean.
RUNS = both(
    plan('plan = "leave-one-run-out"'),
    edit('{ kind = "strongest", k = 5 }', '{ kind = "strongest", k = 5, map = "mean" }'),
)
WEIGHTED = in_data('run_weights = "variance"')
MINUS = in_data('minus = { task = "paths" }')
BASELINE = in_data('baseline = { task = "paths" }')
PATHS = MAP.replace("lanterns", "paths")
# The whole atlas as a family of regions, in the place of one label.
FAMILY = edit('labels = ["Cinder"], origin = "atlas of the garden" }', 'origin = "atlas" }')
FAMILY = both(FAMILY, edit('plan = "a-priori"', 'plan = "a-priori"\neach_label = true'))
ARBOR_ONLY = edit(STUDY[STUDY.index('\n[[roi]]\nname = "Brook"') :], "")
FAR = AFFINE + np.array([[0, 0, 0, 500.0], [0] * 4, [0] * 4, [0] * 4])
RGB = np.zeros(SHAPE, [("R", "u1"), ("G", "u1"), ("B", "u1")])
HALF = np.concatenate([noise(3, 5, 4), np.zeros((3, 5, 4), np.float32)])
nothing = both()
DRAWN_ON = 'origin = "drawn", derived_from = [{ task = "lanterns" }]'

SECTIONS = {
    "The study table": [
        Case(
            "There is no table.",
            remove("table.tsv"),
            "no such study table (FOLDER/table.tsv): make one: sequester table FOLDER",
        ),
        Case(
            "It is empty.",
            put("table.tsv", ""),
            "empty study table (FOLDER/table.tsv): make one: sequester table FOLDER",
        ),
        Case(
            "It is not in UTF-8.",
            put("table.tsv", "path\tsub\n".encode("utf-16")),
            "unreadable study table (FOLDER/table.tsv): expected a TSV in UTF-8, got "
            "[...]; save it as tab-separated text in UTF-8",
        ),
        Case(
            "Commas stand for tabs.",
            edit_all("\t", ","),
            "study table without a path column (FOLDER/table.tsv): expected "
            "tab-separated columns path volume sub [...], got path,volume,[...]; name "
            "the columns so in the first line, a tab between any two",
        ),
        Case(
            "A needed column has another name.",
            cell("sub", "subject", 1),
            "study table without a sub column (FOLDER/table.tsv): expected tab-separated "
            "columns path volume sub [...], got path volume subject [...]; name the "
            "columns so in the first line, a tab between any two",
        ),
        Case(
            "Two columns have one name.",
            cell("fold", "group", 1),
            "column named twice (FOLDER/table.tsv): got group; rename or remove one of the two",
        ),
        Case(
            "A row lacks a cell.",
            edit(f"{MAP}\tn/a", MAP, "table.tsv"),
            "row of another length (FOLDER/table.tsv, line 6): expected 12 tab-separated "
            "cells, got 11; write n/a into blank cells, and no tab at the end",
        ),
        Case(
            "A row has no subject.",
            cell("sub", "n/a"),
            "row without a path or a sub (FOLDER/table.tsv, line 6): got path "
            "maps/sub-02_task-lanterns_run-1.nii.gz, sub n/a; fill both cells, or remove "
            "the row",
        ),
        Case(
            "A volume is no number.",
            cell("volume", "last"),
            "volume is no number (FOLDER/table.tsv, line 6): expected 0, 1, ..., got "
            "last; volumes of a 4-D file count from 0; write n/a for a 3-D file",
        ),
        Case(
            "One file stands on two rows.",
            cell("path", MAP.replace("02", "01")),
            "the same map on two rows (FOLDER/table.tsv, lines 2 and 6): got "
            "maps/sub-01_task-lanterns_run-1.nii.gz; each map of a subject needs a file "
            "(or volume) of its own",
        ),
        Case(
            "A file does not exist.",
            cell("path", "maps/sub-2.nii.gz"),
            "no such file (FOLDER/maps/sub-2.nii.gz): check the path in the study table "
            "or the study file",
        ),
        Case(
            "A path holds a character that no path can hold.",
            cell("path", "maps/\0"),
            "path with a NUL character (FOLDER/table.tsv, line 6): got 'maps/\\x00'; take "
            "the character out",
        ),
        Case(
            "A subject's rows differ in `exchange`.",
            cell("exchange", "twins7"),
            "sub-02 has two exchange values (FOLDER/table.tsv): got 'twins7' (line 6) "
            "and '02' (line 7); give all rows of a subject the same value",
        ),
        Case(
            "A subject has two maps of one run.",
            cell("run", "2"),
            "sub-02 has several maps of one run (FOLDER/STUDY.toml, line 7): got "
            "maps/sub-02_task-lanterns_run-1.nii.gz (line 6 of the table), "
            "maps/sub-02_task-lanterns_run-2.nii.gz (line 7 of the table); select one, "
            "or fill the run column",
        ),
        Case(
            "The selected maps of a subject differ in more than the run.",
            edit('select = { task = "lanterns" }', 'select = { contrast = "glow" }'),
            "maps of sub-01 differ in task (FOLDER/STUDY.toml, line 7): got 'lanterns' "
            "and 'paths'; only runs are averaged: select one task",
        ),
        Case(
            "The selected maps are of two contrasts.",
            cell("contrast", "shade"),
            "several contrasts selected (FOLDER/STUDY.toml, line 6): got glow, shade; "
            'name one: [data] select = { contrast = "..." }',
        ),
        Case(
            "Every selected row has an `exclude_reason`.",
            exclude(*SUBJECTS),
            "no subject left (FOLDER/STUDY.toml, line 7): got 20 rows in the table, 10 "
            "of them with task lanterns, 10 of those excluded; check the values asked "
            "for and the exclude_reason column",
        ),
        Case(
            "Two labels would give one file name.",
            both(edit_all("\t01\t", "\t0-1\t"), edit_all("\t02\t", "\t0_1\t")),
            "subject labels that differ only in punctuation (FOLDER/STUDY.toml, line 7): "
            "expected letters and digits, as in BIDS, got '0-1' and '0_1'; rename them "
            "in the study table",
        ),
        Case(
            "Too few subjects are left.",
            exclude("01", "02", "03"),
            "too few subjects for leave-one-subject-out (FOLDER/STUDY.toml, line 11, roi "
            "Arbor): expected at least 3, got 2 (04, 05); check the study table and the "
            "rows it leaves out",
        ),
        Case(
            "All rows count as one person.",
            edit_all("glow\tn/a\tn/a", "glow\tn/a\tfam1"),
            "too few subjects (FOLDER/STUDY.toml, line 11, roi Arbor): expected at least "
            "2 (rows of one exchange value count as one), got 1 (fam1); check the study "
            "table and the rows it leaves out",
        ),
    ],
    "Images": [
        Case(
            "A link to content that was not fetched.",
            link(MAP, "../annex/7f3a"),
            "file not fetched (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): got a "
            "link to ../annex/7f3a, which is not there; fetch the file's content, or "
            "leave the row out with an exclude_reason",
        ),
        Case(
            "A folder in the place of a file.",
            cell("path", "maps"),
            "not a file (FOLDER/maps): got a folder; name a file in it",
        ),
        Case(
            "An empty file.",
            put(MAP, b""),
            "unreadable image (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): expected "
            "a NIfTI-1 or NIfTI-2 image, got [...]; copy or make the file again",
        ),
        Case(
            "A text file with an image's name.",
            put(MAP, "a map"),
            "unreadable image (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): expected "
            "a NIfTI-1 or NIfTI-2 image, got [...]; copy or make the file again",
        ),
        Case(
            "A download that broke off in the header.",
            cut(MAP, 20),
            "unreadable image (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): expected "
            "a NIfTI-1 or NIfTI-2 image, got [...]; copy or make the file again",
        ),
        Case(
            "A copy that broke off in the voxels.",
            raw(MAP, lambda content: content.__delitem__(slice(500, None))),
            "damaged or truncated file (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): "
            "expected a NIfTI-1 or NIfTI-2 image, got [...]; copy or make the file again",
            RUN,
        ),
        Case(
            "Another format.",
            both(
                cell("path", "maps/sub-02.mgz"),
                lambda folder: nib.save(
                    nib.MGHImage(noise(*SHAPE), AFFINE), folder / "maps" / "sub-02.mgz"
                ),
            ),
            "not a NIfTI image (FOLDER/maps/sub-02.mgz): got MGHImage; convert the map "
            "to NIfTI (.nii or .nii.gz)",
        ),
        Case(
            "A type of numbers that NIfTI does not have.",
            raw(MAP, lambda content: content.__setitem__(slice(70, 72), struct.pack("<h", 999))),
            "unreadable image (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): expected "
            "a NIfTI-1 or NIfTI-2 image, got [...]; copy or make the file again",
        ),
        Case(
            "A header whose affine is all zeros.",
            raw(MAP, lambda content: content.__setitem__(slice(280, 328), bytes(48))),
            "header without a grid (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): "
            "expected voxels along every axis, and an affine of finite numbers with an "
            "inverse, got 6 x 5 x 4 voxels of 0 x 0 x 0 mm; copy or make the file again, "
            "with its sform or qform",
        ),
        Case(
            "A header with a negative number of voxels.",
            raw(MAP, lambda content: content.__setitem__(slice(42, 44), struct.pack("<h", -6))),
            "header without a grid (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): "
            "expected voxels along every axis, and an affine of finite numbers with an "
            "inverse, got -6 x 5 x 4 voxels of 3 x 3 x 3 mm; copy or make the file "
            "again, with its sform or qform",
        ),
        Case(
            "Five dimensions.",
            image(MAP, noise(*SHAPE, 2, 2)),
            "too many dimensions (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): "
            "expected 3-D, or 4-D with a volume number, got 5-D (6, 5, 4, 2, 2); split "
            "the file into 3-D or 4-D images",
        ),
        Case(
            "Several volumes, and no volume in the table.",
            image(MAP, noise(*SHAPE, 2)),
            "4-D file without a volume number "
            "(FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): got 2 volumes; fill the "
            "table's volume column (counting from 0)",
        ),
        Case(
            "A volume that the file does not have.",
            cell("volume", "1"),
            "no such volume (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): expected 0 "
            "to 0, got 1; correct the table's volume column (counting from 0)",
        ),
        Case(
            "A map of another shape than the others.",
            image(MAP, noise(7, 5, 4)),
            "grids differ (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): expected the "
            "grid of FOLDER/maps/sub-01_task-lanterns_run-1.nii.gz: 6 x 5 x 4 voxels of "
            "3 x 3 x 3 mm, first at (-9, -6, -6) mm, got 7 x 5 x 4 voxels of 3 x 3 x 3 "
            "mm, first at (-9, -6, -6) mm; resample it to that grid, or leave it out of "
            "the study table",
        ),
        Case(
            "A map of other voxels than the others.",
            image(MAP, noise(*SHAPE), np.diag([2.0, 2.0, 2.0, 1.0])),
            "grids differ (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): expected the "
            "grid of FOLDER/maps/sub-01_task-lanterns_run-1.nii.gz: 6 x 5 x 4 voxels of "
            "3 x 3 x 3 mm, first at (-9, -6, -6) mm, got 6 x 5 x 4 voxels of 2 x 2 x 2 "
            "mm, first at (0, 0, 0) mm; resample it to that grid, or leave it out of the "
            "study table",
        ),
        Case(
            "Complex numbers.",
            image(MAP, noise(*SHAPE).astype(np.complex64)),
            "not a map of real numbers (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): "
            "expected integers or floating point, got complex numbers; give an image "
            "with one real number per voxel",
        ),
        Case(
            "Colours.",
            image(MAP, RGB),
            "not a map of real numbers (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): "
            "expected integers or floating point, got values of [('R', 'u1'), ('G', "
            "'u1'), ('B', 'u1')]; give an image with one real number per voxel",
        ),
        Case(
            "Nothing but NaN.",
            image(MAP, np.full(SHAPE, np.nan, np.float32)),
            "effect map without data (FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz): "
            "got only zeros, NaN and infinities; make the map again, or leave it out "
            "with an exclude_reason",
            RUN,
        ),
        Case(
            "One file under two names.",
            copy(MAP, MAP.replace("sub-02", "sub-04")),
            "identical files under two names "
            "(FOLDER/maps/sub-04_task-lanterns_run-1.nii.gz): got the same bytes as "
            "maps/sub-02_task-lanterns_run-1.nii.gz; one of the two rows of the study "
            "table names the wrong file",
        ),
        Case(
            "One map under two names, packed anew.",
            lambda folder: (folder / MAP.replace("02", "04")).write_bytes(
                gzip.compress(gzip.decompress((folder / MAP).read_bytes()), 1)
            ),
            "the same map under two names "
            "(FOLDER/maps/sub-04_task-lanterns_run-1.nii.gz): got identical to "
            "FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz; one of the two rows of the "
            "study table names the wrong file",
            RUN,
        ),
        Case(
            "Runs of a subject that share no voxel.",
            both(image(MAP, HALF), image(MAP.replace("run-1", "run-2"), HALF[::-1].copy())),
            "no voxel has data in all maps of a subject (02): got "
            "FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz, "
            "FOLDER/maps/sub-02_task-lanterns_run-2.nii.gz; check that these maps cover "
            "one part of the brain",
            RUN,
        ),
    ],
    "STUDY.toml": [
        Case(
            "There is no such file.",
            remove("STUDY.toml"),
            "no such study file (FOLDER/STUDY.toml): give a STUDY.toml",
        ),
        Case(
            "It is no TOML.",
            edit("seed = 3", "seed = = 3"),
            "malformed TOML (FOLDER/STUDY.toml): got [...] (at line 4, column 8); "
            "correct that line",
        ),
        Case(
            "It is not in UTF-8.",
            put("STUDY.toml", STUDY.replace("drawn", "gezählt").encode("latin-1")),
            "unreadable study file (FOLDER/STUDY.toml): expected TOML, which is text in "
            "UTF-8, got [...]; save it as UTF-8",
        ),
        Case(
            "A key is misspelt.",
            edit("seed =", "sede ="),
            "unknown key 'sede' in study (FOLDER/STUDY.toml, line 4): expected one of "
            "name, output, seed, [...]",
        ),
        Case(
            "A section is misspelt.",
            edit("[data]", "[date]"),
            "unknown key 'date' (FOLDER/STUDY.toml, line 6): expected one of [...]data, [...]",
        ),
        Case(
            "A key is missing.",
            edit('table = "table.tsv"\n', ""),
            "missing key 'table' (FOLDER/STUDY.toml): add it: table = ...",
        ),
        Case(
            "A region has no name.",
            edit('name = "Brook"\n', ""),
            "missing key 'name' (FOLDER/STUDY.toml, line 16): add it: name = ...",
        ),
        Case(
            "`[roi]` is written for `[[roi]]`.",
            put(
                "STUDY.toml",
                STUDY[: STUDY.index('\n[[roi]]\nname = "Brook')].replace("[[roi]]", "[roi]"),
            ),
            "roi is no list of tables (FOLDER/STUDY.toml, line 9): expected roi = [{ ... "
            "}, ...], or [[roi]] above each, got {'name': 'Arbor', 'plan': "
            "'leave-one-subject-out', 'search': ...",
        ),
        Case(
            "A number is in quotes.",
            edit("seed = 3", 'seed = "3"'),
            "seed has the wrong type (FOLDER/STUDY.toml, line 4): expected a whole "
            "number, without quotes, got '3'",
        ),
        Case(
            "A table is expected.",
            edit('{ task = "lanterns" }', '"lanterns"'),
            "select has the wrong type (FOLDER/STUDY.toml, line 7): expected a table { "
            "key = value, ... }, got 'lanterns'",
        ),
        Case(
            "A name has a space.",
            edit('"Brook"', '"the brook"'),
            "name is no label (FOLDER/STUDY.toml, line 17): expected letters and digits "
            "only, got 'the brook'",
        ),
        Case(
            "Two regions would give one file name.",
            edit('"Brook"', '"ARBOR"'),
            "two [[roi]] of one name (FOLDER/STUDY.toml, line 17): expected one file "
            "name each, on any file system, got 'Arbor' and 'ARBOR'; rename one",
        ),
        Case(
            "An unknown column is asked for.",
            edit("{ task =", "{ tusk ="),
            "unknown column 'tusk' (FOLDER/STUDY.toml, line 7): expected a column of the "
            "study table: path, volume, sub, [...]",
        ),
        Case(
            "A value is asked for that no row has.",
            edit('"lanterns"', '"lantern"'),
            "no subject left (FOLDER/STUDY.toml, line 7): expected in column task: "
            "'lanterns', 'paths', got 20 rows in the table, 0 of them with task lantern, "
            "0 of those excluded; check the values asked for and the exclude_reason "
            "column",
        ),
        Case(
            "A column is asked for in another way.",
            edit('{ task = "lanterns" }', '{ task = { is = "lanterns" } }'),
            "select asks for no value of task (FOLDER/STUDY.toml, line 7): expected task "
            '= "value", or task = ["one", "another"], got {\'is\': \'lanterns\'}',
        ),
        Case(
            "A share is given in percent.",
            in_data("min_fraction = 80"),
            "min_fraction out of range (FOLDER/STUDY.toml, line 7): expected 0 < "
            "min_fraction <= 1, got 80.0",
        ),
        Case(
            "A number is infinite.",
            in_data("null_value = inf"),
            "null_value is no finite number (FOLDER/STUDY.toml, line 7): got inf",
        ),
        Case(
            "A pattern of files finds none.",
            more('[[origin]]\nsource = "an atlas"\nfiles = ["parts/*.nii"]'),
            "origin names no file (FOLDER/STUDY.toml, line 18): expected files below "
            "FOLDER, got 'parts/*.nii'; check the pattern, and that the files are there",
        ),
        Case(
            "A pattern of files is none.",
            more('[[origin]]\nsource = "an atlas"\nfiles = ["parts**"]'),
            "pattern of files that cannot be used (FOLDER/STUDY.toml, line 18): got "
            "'parts**': [...]; * matches within a name, ** alone stands for any folders",
        ),
        Case(
            "A file of the study itself is declared to come from elsewhere.",
            more('[[origin]]\nsource = "an atlas"\nfiles = ["maps/*.nii.gz"]'),
            "a declared origin is one of the study's own maps "
            "(FOLDER/maps/sub-01_task-lanterns_run-1.nii.gz, origin 'an atlas'): got the "
            "same bytes as maps/sub-01_task-lanterns_run-1.nii.gz; give the file its row "
            "in the study table, or the region another file",
        ),
        Case(
            "The smoothness of the maps is zero.",
            in_data("fwhm = 0"),
            "fwhm out of range (FOLDER/STUDY.toml, line 7): expected > 0 mm, got 0",
        ),
        Case(
            "`quality` is no column that says something of the subjects.",
            edit("select = {", 'quality = ["task"]\nselect = {'),
            "quality names no column that says something of the subjects (FOLDER/STUDY.toml, line "
            "7): expected a column of the study table such as one with how much they moved: group, "
            "fold, got 'task'",
        ),
        Case(
            "A column of `quality` is what is tested.",
            both(
                edit("select = {", 'quality = ["group"]\nselect = {'),
                edit(
                    "flips = 19",
                    'flips = 19\ncompare = { column = "group", first = "a", second = "b" }',
                ),
            ),
            "a column of quality is what a [[roi]] tests (FOLDER/STUDY.toml, line 7): expected "
            "columns that say how good the data are, and nothing that is tested, got group; take "
            "it out of quality, or out of score and compare",
        ),
        Case(
            "A file of an origin is not the one that was declared.",
            more('[[origin]]\nsource = "an atlas"\nfiles = ["garden_dseg.tsv"]\nsha256 = ["0123"]'),
            "a file of an origin is not the one that was declared "
            "(FOLDER/garden_dseg.tsv, FOLDER/STUDY.toml, line 19): expected a file whose "
            "SHA-256 is listed in sha256, got [...]; take the file that was declared, or "
            "list the digest of this one",
        ),
        Case(
            "The report's background does not exist.",
            more('[report]\nbackground = "anatomy.nii.gz"'),
            "no such file (FOLDER/anatomy.nii.gz, FOLDER/STUDY.toml, line 17): check the "
            "path in the study table or the study file",
        ),
        Case(
            "A narrower claim is explained and not made.",
            edit(
                'choose_on = { task = "paths" }',
                'choose_on = { task = "paths" }\nclaim_reason = "they are all there are"',
            ),
            "a reason for a claim that is not narrowed (FOLDER/STUDY.toml, line 20): "
            'expected claim = "these-subjects" beside it, got claim = "population"',
        ),
    ],
    "Plans and rules": [
        Case(
            "There is no such plan.",
            edit('"localizer"', '"localiser"'),
            "unknown plan (FOLDER/STUDY.toml, line 18): expected one of "
            "leave-one-subject-out, k-fold, split-half, [...], got 'localiser'",
        ),
        Case(
            "A key does not go with the plan.",
            edit('plan = "leave-one-subject-out"', 'plan = "leave-one-subject-out"\nfolds = 3'),
            "key 'folds' does not go with plan 'leave-one-subject-out' "
            "(FOLDER/STUDY.toml, line 12): expected one of choose_on, [...]",
        ),
        Case(
            "A plan that chooses has no rule.",
            edit('rule = { kind = "strongest", k = 5 }\n', ""),
            "missing key 'rule' (FOLDER/STUDY.toml, line 9): add it: rule = ...",
        ),
        Case(
            "There is no such kind of rule.",
            edit('"strongest"', '"highest"'),
            "unknown kind (FOLDER/STUDY.toml, line 13): expected one of threshold, "
            "strongest, cluster, [...], got 'highest'",
        ),
        Case(
            "A rule has no kind.",
            edit('kind = "strongest", ', ""),
            "missing key 'kind' in rule (FOLDER/STUDY.toml, line 13): add it: kind = ...",
        ),
        Case(
            "A key does not go with the kind of rule.",
            edit("k = 5", "p = 0.01"),
            "key 'p' does not go with rule kind 'strongest' (FOLDER/STUDY.toml, line "
            "13): expected one of fraction, k, map",
        ),
        Case(
            "A rule lacks its number.",
            edit(", k = 5", ""),
            "the strongest voxels need exactly one of k and fraction "
            "(FOLDER/STUDY.toml, line 13, roi Arbor): got k 0, fraction 0.0",
        ),
        Case(
            "A p is in percent.",
            edit('"strongest", k = 5', '"threshold", p = 5'),
            "p out of range (FOLDER/STUDY.toml, line 13, roi Arbor): expected 0 < p < 0.5, got 5",
        ),
        Case(
            "A p for a subject's own map.",
            edit("height = 0.5", "p = 0.01"),
            "p does not go with a localizer's own maps (FOLDER/STUDY.toml, line 20): "
            "expected height, on the localizer map's own values (t, say, if it is a t "
            'map); or kind = "strongest"',
        ),
        Case(
            "A cluster rule lacks the point it needs.",
            edit('"strongest", k = 5', '"cluster", p = 0.01, pick = "nearest"'),
            'pick = "nearest" and near = [x, y, z] go together (FOLDER/STUDY.toml, line '
            "13, roi Arbor): got pick 'nearest', near None",
        ),
        Case(
            "No flips.",
            edit("flips = 19", "flips = 0"),
            "too few flips (FOLDER/STUDY.toml, line 14): expected at least 1, got 0; "
            "leave flips out for the usual number",
        ),
        Case(
            "More folds than subjects.",
            plan('plan = "k-fold"\nfolds = 9'),
            "too few subjects for 9 folds (FOLDER/STUDY.toml, line 11, roi Arbor): "
            "expected at least 9, got 5 (01, 02, 03, 04, 05); check the study table and "
            "the rows it leaves out",
        ),
        Case(
            "One fold.",
            plan('plan = "k-fold"\nfolds = 1'),
            "too few folds (FOLDER/STUDY.toml, line 12): expected >= 2, got 1",
        ),
        Case(
            "Given folds leave subjects out.",
            both(plan('plan = "given-folds"\nfold_column = "fold"'), edit_all("\ty\n", "\tn/a\n")),
            "folds do not name every subject once (FOLDER/STUDY.toml, line 11, roi "
            "Arbor): got no fold for 02, 05; fill the fold column of the study table, "
            "the same on all rows of a subject",
        ),
        Case(
            "Given folds are one fold.",
            plan('plan = "given-folds"\nfold_column = "suffix"'),
            "a single fold (FOLDER/STUDY.toml, line 11, roi Arbor): expected two or "
            "more, got 'bold'",
        ),
        Case(
            "A subject is in two given folds.",
            plan('plan = "given-folds"\nfold_column = "run"'),
            "01 has two values of run (FOLDER/STUDY.toml, line 12): got '1' and '2'; "
            "give all rows that count as one subject the same value",
        ),
        Case(
            "A plan over runs, and a subject with one.",
            both(plan('plan = "leave-one-run-out"'), cell("exclude_reason", "moved")),
            "too few runs for leave-one-run-out (FOLDER/STUDY.toml, line 11, roi Arbor): "
            "expected at least 2 runs (the run column) of every subject, got one for "
            "sub-02; leave these subjects out with an exclude_reason, or choose another "
            "plan",
        ),
        Case(
            "A plan over runs reads t, and one run is all that chooses.",
            plan('plan = "leave-one-run-out"'),
            "the rule reads t, and there is no t of one map (FOLDER/STUDY.toml, line 13, "
            "roi Arbor): expected at least 2 maps on the side that chooses, got one run "
            "in 01, 02, 03, 04, 05; use the rule strongest or peak-sphere with map = "
            '"mean"',
        ),
        Case(
            "Other maps choose, by a rule that may find nothing.",
            edit(
                'rule = { kind = "strongest", k = 5 }',
                'rule = { kind = "threshold", p = 0.01 }\nchoose_on = { task = "paths" }',
            ),
            "a region that is chosen on other maps than are tested, by a rule that may "
            "find nothing (FOLDER/STUDY.toml, line 14, roi Arbor): expected a rule that "
            "always finds something: [...], got all voxels with p < 0.01, on_empty = "
            '"empty"; state on_empty = "strongest" with a k, or the rule strongest or '
            "peak-sphere",
        ),
        Case(
            "A jackknife cannot do without somebody.",
            both(
                edit('plan = "leave-one-subject-out"', 'plan = "k-fold"\nfolds = 5'),
                edit("flips = 19", 'interval = "jackknife"'),
            ),
            "the jackknife cannot do without 01: too few subjects for 5 folds "
            "(FOLDER/STUDY.toml, line 15, roi Arbor): expected at least 5, got 4 (02, 03,"
            ' 04, 05); use interval = "flips"',
        ),
        Case(
            "A localizer without its maps.",
            edit('choose_on = { task = "paths" }\n', ""),
            "missing key 'choose_on' (FOLDER/STUDY.toml, line 16): add it: choose_on = ...",
        ),
        Case(
            "A localizer on the very maps that are tested.",
            edit('choose_on = { task = "paths" }', 'choose_on = { task = "lanterns" }'),
            "choose_on selects the very maps that are tested (FOLDER/STUDY.toml, line "
            '19): name another task, run or session: choose_on = { task = "..." }',
        ),
        Case(
            "A localizer on the maps of others.",
            edit('{ task = "paths" }', '{ task = "paths", group = "a" }'),
            "choose_on selects other subjects than [data] select (FOLDER/STUDY.toml, "
            "line 19): got sub-02, sub-04 in one of them only; give every subject a map "
            "of both; or narrow this region to those who have both: select = { sub = [...] } in "
            "its [[roi]]",
        ),
        Case(
            "A group is written in another way than in the table.",
            edit("flips = 19", 'compare = { column = "fold", first = "X", second = "y" }'),
            "compare names a group of nobody (FOLDER/STUDY.toml, line 14): expected what stands in "
            "column fold: 'x', 'y', 'z', got 'X'; write it as the table does: capitals count",
        ),
        Case(
            "More voxels are asked for than are searched.",
            edit('"strongest", k = 5', '"strongest", k = 5000'),
            "k is larger than the search region ([...]): expected at most its [...] voxels, got "
            "5000; state a smaller k, or a larger search region",
            RUN,
        ),
        Case(
            "Subjects of neither group.",
            edit("flips = 19", 'compare = { column = "fold", first = "x", second = "y" }'),
            "subjects of neither group (03[...]): expected x or y, got z; leave their maps out",
        ),
        Case(
            "A score that is no number.",
            edit("flips = 19", 'score = "group"'),
            "01 has no number in column 'group' (FOLDER/STUDY.toml, line 14): expected a finite "
            "number for every subject, got 'a'; fill it, or leave the subject out with an "
            "exclude_reason",
        ),
        Case(
            "Covariates of a mean.",
            edit("flips = 19", 'covariates = ["sub"]'),
            "compare, score and covariates do not go together like this (FOLDER/STUDY.toml, "
            "line 14): expected compare or score, one of them, and covariates with either",
        ),
        Case(
            "Groups of relatives.",
            both(
                *[
                    edit_all(f"{row}\tbold\tglow\tn/a\tn/a", f"{row}\tbold\tglow\tn/a\tkin")
                    for sub in ("01", "03")
                    for row in (
                        f"{sub}\tlanterns\t1",
                        f"{sub}\tlanterns\t2",
                        f"{sub}\tpaths\t1",
                        f"{sub}\tpaths\t2",
                    )
                ],
                edit("flips = 19", 'compare = { column = "group", first = "a", second = "b" }'),
            ),
            "compare and score need one map per independent subject (FOLDER/STUDY.toml, line "
            "14): expected no exchange value that several subjects share, got 5 subjects, 4 "
            "of them independent",
        ),
        Case(
            "A reliability without a score.",
            edit("flips = 19", "reliability = { values = 0.8, score = 0.7 }"),
            "reliability without a score (FOLDER/STUDY.toml, line 14): expected score = "
            '"COLUMN" in the same [[roi]]; the ceiling it gives is that of a correlation',
        ),
        Case(
            "Too few subjects for an interval.",
            edit("flips = 19", 'interval = "jackknife"\nselect = { sub = ["01", "02", "03"] }'),
            "too few subjects for the jackknife (FOLDER/STUDY.toml, line 14, roi Arbor): "
            'expected at least 4, got 3 (01, 02, 03); use interval = "flips"',
        ),
        Case(
            "One subject.",
            edit('plan = "a-priori"', 'plan = "a-priori"\nselect = { sub = "01" }'),
            "too few subjects (FOLDER/STUDY.toml, line 24, roi Cinder): expected at "
            "least 2 (rows of one exchange value count as one), got 1 (01); check the "
            "study table and the rows it leaves out",
        ),
        Case(
            "What stands in for an empty region lacks its size.",
            edit("flips = 19", 'on_empty = "strongest"'),
            'on_empty = "strongest" and k go together (FOLDER/STUDY.toml, line 13, roi '
            "Arbor): got on_empty 'strongest', k 0",
        ),
    ],
    "Regions": [
        Case(
            "There is no such mask.",
            remove("arbor.nii.gz"),
            "no such file (FOLDER/arbor.nii.gz, roi Arbor): check the path in the study "
            "table or the study file",
        ),
        Case(
            "A mask is empty.",
            image("arbor.nii.gz", np.zeros(SHAPE, np.uint8)),
            "empty mask (FOLDER/arbor.nii.gz, roi Arbor): give a mask with some voxels",
        ),
        Case(
            "A mask is on another grid.",
            image("arbor.nii.gz", np.ones((7, 5, 4), np.uint8)),
            "grids differ (FOLDER/arbor.nii.gz, roi Arbor): expected the grid of "
            "FOLDER/maps/sub-01_task-lanterns_run-1.nii.gz: 6 x 5 x 4 voxels of 3 x 3 x "
            "3 mm, first at (-9, -6, -6) mm, got 7 x 5 x 4 voxels of 3 x 3 x 3 mm, first "
            "at (-9, -6, -6) mm; resample it to that grid, or have it done: regrid = true",
        ),
        Case(
            "A mask has several volumes.",
            image("arbor.nii.gz", np.ones((*SHAPE, 2), np.uint8)),
            "4-D file without a volume number (FOLDER/arbor.nii.gz, roi Arbor): got 2 "
            "volumes; fill the table's volume column (counting from 0), or give a 3-D "
            "file",
        ),
        Case(
            "A mask is brought to the maps' grid, and lies elsewhere.",
            both(
                image("arbor.nii.gz", np.ones(SHAPE, np.uint8), FAR),
                edit('"arbor.nii.gz"', '"arbor.nii.gz", regrid = true'),
            ),
            "no voxel is covered by half of the mask (FOLDER/arbor.nii.gz, roi Arbor): "
            "expected a mask that meets the grid of "
            "FOLDER/maps/sub-01_task-lanterns_run-1.nii.gz: 6 x 5 x 4 voxels of 3 x 3 x "
            "3 mm, first at (-9, -6, -6) mm, got 6 x 5 x 4 voxels of 3 x 3 x 3 mm, first "
            "at (491, -6, -6) mm; check that both are in the same space (mm)",
        ),
        Case(
            "A mask is one of the study's maps.",
            region(f'{{ mask = "{MAP}", origin = "drawn" }}'),
            "a declared origin is one of the study's own maps "
            "(FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz, origin 'drawn'): got the "
            "same bytes as maps/sub-02_task-lanterns_run-1.nii.gz; give the file its row "
            "in the study table, or the region another file",
        ),
        Case(
            "Nothing says where a region comes from.",
            edit(', origin = "drawn beforehand"', ""),
            "search without an origin (FOLDER/STUDY.toml, line 12): state where it comes "
            'from, with a source: origin = "..."',
        ),
        Case(
            "A region is two things at once.",
            region('{ mask = "arbor.nii.gz", centre = [0, 0, 0], radius = 5, origin = "drawn" }'),
            "region needs exactly one of mask, centre, atlas, union, intersection, "
            "difference (FOLDER/STUDY.toml, line 25): got {'mask': 'arbor.nii.gz', "
            "'centre': [0, 0, 0], 'radius': 5, 'origin': 'drawn'}",
        ),
        Case(
            "A sphere has no radius.",
            region('{ centre = [0, 0, 0], origin = "table 2" }'),
            "missing key 'radius' in centre (FOLDER/STUDY.toml, line 25): add it: radius = ...",
        ),
        Case(
            "A coordinate has two numbers.",
            region('{ centre = [0, 0], radius = 5, origin = "table 2" }'),
            "centre is no coordinate (FOLDER/STUDY.toml, line 25): expected [x, y, z] in "
            "mm, got [0, 0]",
        ),
        Case(
            "A sphere lies outside the maps.",
            region('{ centre = [90, 0, 0], radius = 5, origin = "table 2" }'),
            "sphere holds no feature (roi Cinder): expected some voxel of "
            "FOLDER/maps/sub-01_task-lanterns_run-1.nii.gz: 6 x 5 x 4 voxels of 3 x 3 x "
            "3 mm, first at (-9, -6, -6) mm, got centre (90.0, 0.0, 0.0) mm, radius 5.0 "
            "mm; check the coordinate and its unit (mm, in the space of the data)",
        ),
        Case(
            "An atlas has no label of that name.",
            edit('["Cinder"]', '["Sinder"]'),
            "no label of this name (FOLDER/garden_dseg.tsv, roi Cinder): expected a name "
            "like Cinder, got 'Sinder'; take the name from the table, or give the "
            "label's number",
        ),
        Case(
            "An atlas has no label of that number.",
            edit('["Cinder"]', "[4]"),
            "label on no voxel (FOLDER/garden_dseg.nii.gz, roi Cinder): expected labels "
            "of the image: 1, 2, 3, got 4; check the numbers, and that the table belongs "
            "to the image",
        ),
        Case(
            "No label is named.",
            edit('labels = ["Cinder"], ', ""),
            "region names no label of its atlas (FOLDER/STUDY.toml, line 25): labels = "
            "[...]; or, in plan a-priori, each_label = true for all of them",
        ),
        Case(
            "A label is neither name nor number.",
            edit('["Cinder"]', "[3.5]"),
            "label is neither a name nor a number (FOLDER/STUDY.toml, line 25): expected "
            "text in quotes, or a whole number, got 3.5",
        ),
        Case(
            "Names, and no label table.",
            remove("garden_dseg.tsv"),
            "label names without a label table (FOLDER/garden_dseg.nii.gz, roi Cinder): "
            'expected names = "...", or a .tsv of the same name beside the image, got '
            "Cinder; give the table (columns index and name), or numbers instead of names",
        ),
        Case(
            "There is no such label table.",
            edit("labels", 'names = "names.tsv", labels'),
            "unreadable label table (FOLDER/names.tsv, roi Cinder): got No such file or "
            "directory; check the path",
        ),
        Case(
            "A label table lacks a column.",
            edit("index", "number", "garden_dseg.tsv"),
            "label table without index and name (FOLDER/garden_dseg.tsv, roi Cinder): "
            "expected tab-separated columns index and name, and any others, got number "
            "name; name the two columns so in the first line",
        ),
        Case(
            "An index is no number.",
            edit("2\tB", "two\tB", "garden_dseg.tsv"),
            "index is no whole number (FOLDER/garden_dseg.tsv, line 3, roi Cinder): "
            "expected 0, 1, ..., got two; give the number that the label has in the image",
        ),
        Case(
            "An index stands twice.",
            edit("2\tB", "1\tB", "garden_dseg.tsv"),
            "the same index on two rows (FOLDER/garden_dseg.tsv, lines 2 and 3, roi "
            "Cinder): got 1; give each label one row",
        ),
        Case(
            "A name stands twice.",
            edit("Brook", "Cinder", "garden_dseg.tsv"),
            "label name that stands for several labels (FOLDER/garden_dseg.tsv, roi "
            "Cinder): got 'Cinder': 2, 3; give their numbers",
        ),
        Case(
            "A label table belongs to another image.",
            edit("3\tC", "30\tC", "garden_dseg.tsv"),
            "label on no voxel (FOLDER/garden_dseg.nii.gz, roi Cinder): expected labels "
            "of the image: 1, 2, 3, got 30; check the numbers, and that the table "
            "belongs to the image",
        ),
        Case(
            "Probabilities for labels.",
            image("garden_dseg.nii.gz", np.full(SHAPE, 0.25, np.float32)),
            "label image with something else than labels (FOLDER/garden_dseg.nii.gz, roi "
            "Cinder): expected whole numbers of 32 bits at all voxels, got 0.25 and the "
            "like (float32) at 120 voxels; give the image of labels (dseg), not of "
            "probabilities or values",
        ),
        Case(
            "An atlas is on another grid.",
            image("garden_dseg.nii.gz", np.full((7, 5, 4), 3, np.int16)),
            "grids differ (FOLDER/garden_dseg.nii.gz, roi Cinder): expected the grid of "
            "FOLDER/maps/sub-01_task-lanterns_run-1.nii.gz: 6 x 5 x 4 voxels of 3 x 3 x "
            "3 mm, first at (-9, -6, -6) mm, got 7 x 5 x 4 voxels of 3 x 3 x 3 mm, first "
            "at (-9, -6, -6) mm; resample it to that grid, or have it done: regrid = true",
        ),
        Case(
            "Something is combined with nothing.",
            region('{ union = [{ mask = "arbor.nii.gz" }], origin = "drawn" }'),
            "union of 1 (FOLDER/STUDY.toml, line 25): expected two or more regions, got "
            "1; add a region, or give the one without union",
        ),
        Case(
            "An erosion by less than nothing.",
            region('{ mask = "arbor.nii.gz", erode = -3, origin = "drawn" }'),
            "erode out of range (FOLDER/STUDY.toml, line 25): expected > 0 mm, got -3",
        ),
        Case(
            "A file for each subject, and one is missing.",
            both(
                *[copy("arbor.nii.gz", f"arbor_{sub}.nii.gz") for sub in SUBJECTS if sub != "04"],
                region('{ mask = "arbor_{sub}.nii.gz", origin = "drawn" }'),
            ),
            "no such file (FOLDER/arbor_04.nii.gz, roi Cinder): check the path in the "
            "study table or the study file",
        ),
        Case(
            "An unknown field in a path.",
            region('{ mask = "arbor_{subject}.nii.gz", origin = "drawn" }'),
            "mask with an unknown field (FOLDER/STUDY.toml, line 25): expected {sub}, "
            "got arbor_{subject}.nii.gz",
        ),
        Case(
            "A region is in another named space than the maps.",
            both(
                edit_all("\tfold\n", "\tspace\n"),
                edit_all("\tx\n", "\thill\n"),
                edit_all("\ty\n", "\thill\n"),
                edit_all("\tz\n", "\thill\n"),
                copy("arbor.nii.gz", "space-lake_mask.nii.gz"),
                region('{ mask = "space-lake_mask.nii.gz", origin = "drawn" }'),
            ),
            "region is in another space than the maps (FOLDER/STUDY.toml, line 25): "
            "expected space hill, that of the maps, got space lake (space-lake_mask); "
            "bring it to the maps' space, or correct the space entity (or key, column)",
        ),
        Case(
            "A region was made from a subject who is not there.",
            region('{ mask = "arbor.nii.gz", origin = "drawn", derived_from = [{ sub = "1" }] }'),
            "derived_from names a subject who is not in the study table "
            "(FOLDER/STUDY.toml, line 25): expected a label such as 01, 02, 03, got '1'; "
            "write the label as in the table: 01 is not 1",
        ),
        Case(
            "A file of each subject's own data, for all subjects.",
            region(
                '{ mask = "arbor.nii.gz", origin = "drawn", derived_from = [{ sub = "{sub}" }] }'
            ),
            'derived_from with "{sub}" for a region that all subjects share '
            "(FOLDER/STUDY.toml, line 25): expected {sub} in the path too, or the subjects' "
            "labels here, got arbor; name whom it was made from: derived_from = "
            '[{ sub = "01" }, ...], or leave sub out for everybody',
        ),
        Case(
            "The record of what a mask was chosen on is damaged.",
            put("arbor.json", '{"Sources": ['),
            "unreadable record of a mask's sources (FOLDER/arbor.json): expected JSON, got "
            "[...]; correct the file, or move it away from the mask",
        ),
        Case(
            "Weights that are no mask's.",
            region('{ centre = [0, 0, 0], radius = 5, origin = "table 2" }\nvalue = "weighted"'),
            'value = "weighted" needs a plain mask whose values are the weights '
            "(FOLDER/STUDY.toml, line 25): expected mask = a file on the maps' grid, not "
            "regridded, eroded or mirrored, got sphere of 5 mm at (0, 0, 0) mm",
        ),
    ],
    "Grids of their own": [
        Case(
            "A plan that needs one group map.",
            own_grid("02"),
            "grids = \"own\" does not go with plan 'leave-one-subject-out' "
            "(FOLDER/STUDY.toml, line 8): expected maps on one grid, from which a group "
            "map can be made; use maps in a common space, or a plan with own masks "
            "(localizer, leave-one-run-out, split-half-runs) or an a-priori region",
        ),
        Case(
            "A mask on one of the grids alone.",
            both(RUNS, own_grid("02")),
            "grids differ (FOLDER/arbor.nii.gz, roi Arbor): expected the grid of "
            "FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz: 7 x 5 x 4 voxels of 3 x 3 x "
            "3 mm, first at (-9, -6, -6) mm, got 6 x 5 x 4 voxels of 3 x 3 x 3 mm, first "
            "at (-9, -6, -6) mm; resample it to that grid, or have it done: regrid = true",
        ),
        Case(
            "Two grids in one subject.",
            both(RUNS, own_grid("02", "paths")),
            "grids differ (FOLDER/maps/sub-02_task-paths_run-1.nii.gz): expected the "
            "grid of FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz: 6 x 5 x 4 voxels of "
            "3 x 3 x 3 mm, first at (-9, -6, -6) mm, got 7 x 5 x 4 voxels of 3 x 3 x 3 "
            "mm, first at (-9, -6, -6) mm; resample it to that grid, or leave it out of "
            "the study table",
        ),
    ],
    "Variance maps": [
        Case(
            "A map has none.",
            both(WEIGHTED, cell("variance", "n/a")),
            'run_weights = "variance" needs a variance map for every map '
            "(FOLDER/STUDY.toml, line 7): got none for "
            "maps/sub-02_task-lanterns_run-1.nii.gz; fill the variance column of the "
            "study table",
        ),
        Case(
            "The file is not there.",
            both(WEIGHTED, remove(VARIANCE)),
            "no such file (FOLDER/variances/sub-02_task-lanterns_run-1.nii.gz): check "
            "the path in the study table or the study file",
        ),
        Case(
            "It is on another grid.",
            image(VARIANCE, np.ones((7, 5, 4), np.float32)),
            "grids differ (FOLDER/variances/sub-02_task-lanterns_run-1.nii.gz): expected "
            "the grid of FOLDER/maps/sub-02_task-lanterns_run-1.nii.gz: 6 x 5 x 4 voxels "
            "of 3 x 3 x 3 mm, first at (-9, -6, -6) mm, got 7 x 5 x 4 voxels of 3 x 3 x "
            "3 mm, first at (-9, -6, -6) mm; resample it to that grid, or leave it out "
            "of the study table",
        ),
        Case(
            "It is the effect map itself.",
            cell("variance", MAP),
            "a map is named as its own variance map (FOLDER/table.tsv, line 6): got "
            "maps/sub-02_task-lanterns_run-1.nii.gz; correct the variance column, or "
            "leave it blank (n/a)",
        ),
        Case(
            "It is a copy of the effect map.",
            both(WEIGHTED, copy(MAP, VARIANCE)),
            "a variance map is one of the effect maps "
            "(FOLDER/variances/sub-02_task-lanterns_run-1.nii.gz): got the same bytes as "
            "maps/sub-02_task-lanterns_run-1.nii.gz; correct the variance column of the "
            "study table",
        ),
        Case(
            "There is no such way to weight.",
            in_data('run_weights = "inverse"'),
            "unknown run_weights (FOLDER/STUDY.toml, line 7): expected one of equal, "
            "variance, got 'inverse'",
        ),
    ],
    "Differences and percentages": [
        Case(
            "A map less itself.",
            both(ARBOR_ONLY, in_data('minus = { task = "lanterns" }')),
            "minus selects the very maps it is subtracted from (FOLDER/STUDY.toml, line "
            "7): name the column in which they differ",
        ),
        Case(
            "A map in percent of itself.",
            both(ARBOR_ONLY, in_data('baseline = { task = "lanterns" }')),
            "baseline selects the very maps that are given in percent of it "
            "(FOLDER/STUDY.toml, line 7): name the column in which they differ",
        ),
        Case(
            "Nothing to subtract.",
            both(ARBOR_ONLY, in_data('minus = { task = "path" }')),
            "no subject left (FOLDER/STUDY.toml, line 7): expected in column task: "
            "'lanterns', 'paths', got 20 rows in the table, 0 of them with task path, 0 "
            "of those excluded; check the values asked for and the exclude_reason column",
        ),
        Case(
            "A subject has one of the two.",
            both(
                ARBOR_ONLY,
                MINUS,
                edit_all("02\tpaths\t1\tbold\tglow\tn/a", "02\tpaths\t1\tbold\tglow\tmoved"),
                edit_all("02\tpaths\t2\tbold\tglow\tn/a", "02\tpaths\t2\tbold\tglow\tmoved"),
            ),
            "minus selects other subjects than [data] select (FOLDER/STUDY.toml, line "
            "7): got sub-02 in one of them only; give every subject a map of both; or narrow this "
            "region to those who have both: select = { sub = [...] } in its [[roi]]",
        ),
        Case(
            "A difference, and a plan over runs.",
            plan('plan = "leave-one-run-out"\nminus = { task = "paths" }'),
            "minus and baseline do not go with plan 'leave-one-run-out' "
            "(FOLDER/STUDY.toml, line 12): make the difference (or the percentage) per "
            "run beforehand",
        ),
        Case(
            "A map to subtract holds nothing.",
            both(ARBOR_ONLY, MINUS, image(PATHS, np.zeros(SHAPE, np.float32))),
            "effect map without data (FOLDER/maps/sub-02_task-paths_run-1.nii.gz): got "
            "only zeros, NaN and infinities; make the map again, or leave it out with an "
            "exclude_reason",
            RUN,
        ),
        Case(
            "A map to divide by holds nothing.",
            both(ARBOR_ONLY, BASELINE, image(PATHS, np.zeros(SHAPE, np.float32))),
            "baseline map without data (FOLDER/maps/sub-02_task-paths_run-1.nii.gz): got "
            "only zeros, NaN and infinities; make the map again, or leave it out with an "
            "exclude_reason",
            RUN,
        ),
    ],
    "Families of labels": [
        Case(
            "A mask has no labels.",
            region('{ mask = "arbor.nii.gz", origin = "drawn" }\neach_label = true'),
            "each_label needs a region that is labels of one atlas, and means "
            '(FOLDER/STUDY.toml, line 26): expected region = { atlas = "...", origin = '
            '"..." }, got arbor',
        ),
        Case(
            "Another value than the mean.",
            both(FAMILY, edit("each_label", 'value = "median"\neach_label')),
            "each_label needs a region that is labels of one atlas, and means "
            '(FOLDER/STUDY.toml, line 26): expected region = { atlas = "...", origin = '
            '"..." }, got all labels of garden_dseg',
        ),
        Case(
            "The atlas is empty.",
            both(FAMILY, image("garden_dseg.nii.gz", np.zeros(SHAPE, np.int16))),
            "label image without labels (FOLDER/garden_dseg.nii.gz, roi Cinder): got 0 "
            "at every voxel; give another image",
        ),
        Case(
            "A label is not in it.",
            both(FAMILY, edit('_dseg.nii.gz", ', '_dseg.nii.gz", labels = ["Brook", 9], ')),
            "label on no voxel (FOLDER/garden_dseg.nii.gz, roi Cinder): expected labels "
            "of the image: 1, 2, 3, got 9; check the numbers, and that the table belongs "
            "to the image",
        ),
        Case(
            "A number that a map cannot tell from the next.",
            both(FAMILY, image("garden_dseg.nii.gz", np.full(SHAPE, 2**30, np.int32))),
            "label numbers too large to be told apart (FOLDER/garden_dseg.nii.gz): "
            "expected below 16777216, got 1073741824; number the parcels from 1",
            RUN,
        ),
        Case(
            "The atlas is brought to the maps' grid, and lies elsewhere.",
            both(
                FAMILY,
                image("garden_dseg.nii.gz", np.ones(SHAPE, np.int16), FAR),
                edit('_dseg.nii.gz", ', '_dseg.nii.gz", regrid = true, '),
            ),
            "no label on the reference's grid (FOLDER/garden_dseg.nii.gz): expected "
            "labels that meet the grid of FOLDER/maps/sub-01_task-lanterns_run-1.nii.gz: "
            "6 x 5 x 4 voxels of 3 x 3 x 3 mm, first at (-9, -6, -6) mm, got 6 x 5 x 4 "
            "voxels of 3 x 3 x 3 mm, first at (491, -6, -6) mm; check that both are in "
            "the same space (mm)",
            RUN,
        ),
    ],
    "The command line": [
        Case(
            "There is no such study file.",
            nothing,
            "no such study file (FOLDER/STUDIO.toml): give a STUDY.toml",
            ("check", "FOLDER/STUDIO.toml"),
        ),
        Case(
            "A folder for a study file.",
            nothing,
            "no such study file (FOLDER): got a folder; give a STUDY.toml",
            ("check", "FOLDER"),
        ),
        Case(
            "No study file.",
            nothing,
            "Usage: sequester [...]Error: Missing argument 'STUDY.toml|FILE.py:FUNCTION'.",
            ("check",),
        ),
        Case(
            "There is no such command.",
            nothing,
            "Usage: sequester [...]Error: No such command 'chek'[...]",
            ("chek", "FOLDER/STUDY.toml"),
        ),
        Case(
            "No process at all.",
            nothing,
            "Usage: sequester [...]Error: Invalid value for '--processes': [...]",
            (*RUN, "--processes", "0"),
        ),
        Case(
            "A file for the working folder.",
            nothing,
            "--work is a file (FOLDER/table.tsv): name a folder",
            (*RUN, "--work", "FOLDER/table.tsv"),
        ),
        Case(
            "The output is a file.",
            edit("seed = 3", 'seed = 3\noutput = "table.tsv"'),
            "output is a file (FOLDER/table.tsv): expected a folder, or nothing yet; "
            "name another output folder",
            RUN,
        ),
        Case(
            "The output folder is somebody else's.",
            another_folder,
            "output folder holds something else (FOLDER/others): expected nothing, or an "
            "earlier run (its manifest.json); name another output folder; nothing was changed",
            RUN,
        ),
        Case(
            "The output folder holds the results of another study.",
            edit('name = "garden"', 'name = "gardens"'),
            "output folder holds the results of another study (FOLDER/results): expected nothing, "
            "or results of gardens, got those of garden; name another output folder, or take "
            "these away first; nothing was changed",
            RUN,
        ),
        Case(
            "The output folder is the study's own.",
            edit("seed = 3", 'seed = 3\noutput = "maps"'),
            "the output folder holds what the study is made from (FOLDER/maps): expected a folder "
            "of its own, got it holds [...]; name another output folder; nothing was changed",
            RUN,
        ),
        Case(
            "The output cannot be made.",
            edit("seed = 3", 'seed = 3\noutput = "table.tsv/out"'),
            "output folder cannot be made (FOLDER/table.tsv/out): got [...]; check the "
            "path and its permissions",
            RUN,
        ),
        Case(
            "There is no such folder of maps.",
            nothing,
            "no such folder (FOLDER/map): name the folder that holds the effect maps",
            ("table", "FOLDER/map"),
        ),
        Case(
            "There is no map in it.",
            nothing,
            "no effect map found (FOLDER/results): expected names such as "
            "sub-01_task-x_contrast-y_stat-effect_statmap.nii.gz, got 0 NIfTI files; "
            'give --pattern, such as "sub-{sub}/map.nii.gz"',
            ("table", "FOLDER/results"),
        ),
        Case(
            "The table is there already.",
            nothing,
            "table exists already (FOLDER/table.tsv): remove it, or name another file",
            ("table", "FOLDER/maps", "--output", "FOLDER/table.tsv"),
        ),
        Case(
            "The table's folder is not there.",
            nothing,
            "no such folder for the table (FOLDER/new): make it, or name another file",
            ("table", "FOLDER/maps", "--output", "FOLDER/new/table.tsv"),
        ),
        Case(
            "A pattern fits no name.",
            nothing,
            "no effect map found (FOLDER/maps): expected {sub}.nii.gz, got 20 NIfTI "
            "files, such as sub-01_task-lanterns_run-1.nii.gz; give --pattern, such as "
            '"sub-{sub}/map.nii.gz"',
            ("table", "FOLDER/maps", "--pattern", "{sub}.nii.gz"),
        ),
        Case(
            "A pattern without a subject.",
            nothing,
            "pattern without {sub} (*.nii.gz): expected {sub} where the subject's label "
            'stands; write it so: "sub-{sub}/map.nii.gz"',
            ("table", "FOLDER/maps", "--pattern", "*.nii.gz"),
        ),
        Case(
            "Participants without participant_id.",
            put("participants.tsv", "sub\tage\n01\t30\n"),
            "participants table without participant_id (FOLDER/participants.tsv): expected "
            "participant_id as the first column, as BIDS has it, got sub",
            (*TABLE, "--participants", "FOLDER/participants.tsv"),
        ),
        Case(
            "A subject without a line among the participants.",
            put("participants.tsv", "participant_id\tage\nsub-01\t30\nsub-02\t31\n"),
            "subjects without a line in the participants table (FOLDER/participants.tsv): "
            "expected participant_id sub-LABEL, or LABEL, got none for sub-03, sub-04, sub-05",
            (*TABLE, "--participants", "FOLDER/participants.tsv"),
        ),
        Case(
            "A pattern with an unknown field.",
            nothing,
            "unknown field in the pattern (sub-{person}_*.nii.gz): expected one of "
            "{sub}, {ses}, {task}, {acq}, {ce}, {dir}, {rec}, {run}, {contrast}, got "
            "{person}",
            ("table", "FOLDER/maps", "--pattern", "sub-{person}_*.nii.gz"),
        ),
        Case(
            "An engine that the guard does not know.",
            nothing,
            "Usage: sequester [...]Error: Invalid value for '--engine': [...]",
            (*RUN, "--engine", "PBS"),
        ),
        Case(
            "An engine's argument without a name.",
            nothing,
            "an engine's argument that is not NAME=VALUE: expected --engine-arg "
            "sbatch_args='--mem 8G', got '8G'",
            (*RUN, "--engine-arg", "8G"),
        ),
    ],
    "The ledger": [
        Case(
            "It was changed.",
            put(LEDGER, "{}\n"),
            "the ledger was changed (FOLDER/STUDY.ledger.jsonl): expected the lines as "
            "sequester wrote them, and in their order, got line 1: not an entry of a "
            "ledger; take it back from a copy or a commit",
        ),
        Case(
            "One that lies beside it was changed.",
            put("OTHER.ledger.jsonl", "{}\n"),
            "a ledger beside the study's own was changed (FOLDER/OTHER.ledger.jsonl): expected the "
            "lines as sequester wrote them, and in their order, got line 1: not an entry of a "
            "ledger; take it back from a copy or a commit, or move it out of the folder of "
            "STUDY.ledger.jsonl, whose looks it tells of",
        ),
        Case(
            "It was changed, and is verified.",
            put(LEDGER, "{}\n"),
            "the ledger was changed (FOLDER/STUDY.ledger.jsonl)\nline 1: not an entry of a ledger",
            VERIFY,
            exit_code=1,
        ),
        Case(
            "There is none yet.",
            nothing,
            "no such ledger (FOLDER/STUDY.ledger.jsonl): declare or run something first",
            VERIFY,
        ),
        Case(
            "An earlier head is not in it.",
            put(LEDGER, ""),
            "the ledger was changed (FOLDER/STUDY.ledger.jsonl)\n"
            "no entry 0123456789ab: what was there then was written again",
            (*VERIFY, "--deposited", "0123456789ab"),
            exit_code=1,
        ),
        Case(
            "What is asked for is no digest.",
            put(LEDGER, ""),
            "no digest (--deposited): expected a head as verify prints it: 64 hexadecimal digits, "
            "or the first 12 of them or more, got 'yes'",
            (*VERIFY, "--deposited", "yes"),
        ),
        Case(
            "A source without a region is declared.",
            nothing,
            "nothing to declare: expected MASK, or --centre and --radius",
            (*DECLARE, "--source", "atlas X"),
        ),
        Case(
            "A region without a source is declared.",
            nothing,
            'a region without a source: expected --source "where it comes from, with a reference"',
            ("declare", "FOLDER/arbor.nii.gz", *DECLARE[1:]),
        ),
        Case(
            "A centre without a radius is declared.",
            nothing,
            "declare needs one region: expected MASK, or --centre X Y Z with --radius R, "
            "got no radius",
            (*DECLARE, "--centre", "0", "0", "0", "--source", "a paper"),
        ),
        Case(
            "A mask and a sphere are declared at once.",
            nothing,
            "declare needs one region: expected MASK, or --centre X Y Z with --radius R, got both",
            (
                "declare",
                "FOLDER/arbor.nii.gz",
                *DECLARE[1:],
                "--centre",
                "0",
                "0",
                "0",
                "--radius",
                "6",
            ),
        ),
        Case(
            "A label of a sphere is declared.",
            nothing,
            "labels do not go with a sphere: expected an atlas before --label",
            (
                *DECLARE,
                "--centre",
                "0",
                "0",
                "0",
                "--radius",
                "6",
                "--label",
                "3",
                "--source",
                "a paper",
            ),
        ),
        Case(
            "An atlas is declared with a label that it lacks.",
            nothing,
            "no label of this name (FOLDER/garden_dseg.tsv): expected one of 3 names, got"
            " 'Moss'; take the name from the table, or give the label's number",
            (
                "declare",
                "FOLDER/garden_dseg.nii.gz",
                *DECLARE[1:],
                "--label",
                "Moss",
                "--source",
                "atlas X",
            ),
        ),
        Case(
            "A mask without a voxel is declared.",
            image("empty.nii.gz", np.zeros(SHAPE, np.uint8)),
            "empty mask (FOLDER/empty.nii.gz): give a mask with some voxels",
            ("declare", "FOLDER/empty.nii.gz", *DECLARE[1:], "--source", "drawn"),
        ),
        Case(
            "A region is derived from nobody's data.",
            nothing,
            "derived-from names no data of the study: expected such as "
            "sub-01_task-lanterns_run-1_bold, got 'sub=2'; write the labels as in the "
            "study table: 01 is not 1",
            (
                "declare",
                "FOLDER/arbor.nii.gz",
                *DECLARE[1:],
                "--source",
                "drawn",
                "--derived-from",
                "sub=2",
            ),
        ),
        Case(
            "A region is derived from an unknown entity.",
            nothing,
            "derived-from with an unknown entity: expected sub, ses, task, acq, ce, dir, "
            "rec, run, suffix: sub=01,task=lanterns, got 'subject=02'",
            (
                "declare",
                "FOLDER/arbor.nii.gz",
                *DECLARE[1:],
                "--source",
                "drawn",
                "--derived-from",
                "subject=02",
            ),
        ),
    ],
    "The shape check": [
        Case(
            "No region of the study has this name.",
            nothing,
            "no such region in the study: expected one of Arbor, Brook, Cinder, got 'Moss'",
            (*CONTOUR, "--roi", "Moss"),
        ),
        Case(
            "Each subject's maps have a grid of their own.",
            both(
                ARBOR_ONLY,
                in_data('grids = "own"'),
                RUNS,
            ),
            'the shape check needs maps on one grid, and grids = "own" says that they are'
            " not: check the mask on maps that were brought to one space",
            CONTOUR,
        ),
        Case(
            "Too few subjects.",
            both(
                ARBOR_ONLY,
                edit(
                    STUDY[STUDY.index('plan = "leave') : STUDY.index('\n[[roi]]\nname = "Brook"')],
                    'plan = "a-priori"\nregion = { mask = "arbor.nii.gz", origin = "drawn" }\n',
                ),
                exclude("01", "02"),
            ),
            "too few people for the shape check (FOLDER/arbor.nii.gz): expected at least "
            "4 who count as independent, got 3",
            CONTOUR,
        ),
        Case(
            "The mask is on another grid.",
            image("arbor.nii.gz", np.ones((7, 5, 4), np.uint8)),
            "grids differ (FOLDER/arbor.nii.gz): expected the grid of "
            "FOLDER/maps/sub-01_task-lanterns_run-1.nii.gz: 6 x 5 x 4 voxels of 3 x 3 x 3"
            " mm, first at (-9, -6, -6) mm, got 7 x 5 x 4 voxels of 3 x 3 x 3 mm, first "
            "at (-9, -6, -6) mm; resample it to that grid",
            (*CONTOUR, "--roi", "Brook"),
        ),
    ],
    "A workflow in a script": [
        Case(
            "There is no such script.",
            nothing,
            "no such script (FOLDER/plan.py): expected FILE.py:FUNCTION, a function that "
            "returns a workflow",
            SCRIPT,
        ),
        Case(
            "No function is named.",
            put("plan.py", ""),
            "no function is named (FOLDER/plan.py): expected FILE.py:FUNCTION, a function that "
            "returns a workflow",
            ("check", "FOLDER/plan.py", *SCRIPT[2:]),
        ),
        Case(
            "The study table is not named.",
            put("plan.py", ""),
            "no study table (FOLDER/plan.py:make): expected sequester check "
            "FILE.py:FUNCTION --study table.tsv; make one: sequester table FOLDER",
            SCRIPT[:2],
        ),
        Case(
            "There is no such ledger.",
            put("plan.py", "from nipype import Workflow\ndef make():\n    return Workflow('w')\n"),
            "no such ledger (FOLDER/own.ledger.jsonl): leave --ledger out before the first run "
            "with GuardPlugin(..., ledger=...)",
            (*SCRIPT, "--ledger", "FOLDER/own.ledger.jsonl"),
        ),
        Case(
            "There is no such function.",
            put("plan.py", "def build():\n    pass\n"),
            "no function 'make' in the script (FOLDER/plan.py): expected one of build; "
            "name the function that returns the workflow",
            SCRIPT,
        ),
        Case(
            "The script fails when it is loaded.",
            put("plan.py", "import moss_of_the_garden\n"),
            "the script fails on loading it (FOLDER/plan.py, line 1): got "
            "ModuleNotFoundError: No module named 'moss_of_the_garden'",
            SCRIPT,
        ),
        Case(
            "The function fails.",
            put("plan.py", "def make():\n    return 1 / 0\n"),
            "make() fails (FOLDER/plan.py, line 2): got ZeroDivisionError: division by zero",
            SCRIPT,
        ),
        Case(
            "The function returns something else.",
            put("plan.py", "def make():\n    return 7\n"),
            "make() returns no workflow (FOLDER/plan.py): expected a nipype Workflow, got"
            " int; end it with: return workflow",
            SCRIPT,
        ),
        Case(
            "The script runs its workflow.",
            put("plan.py", "import nipype\nnipype.Workflow('w').run()\n"),
            "the script runs a workflow when it is loaded (FOLDER/plan.py): expected a "
            'function that returns it; put the run below: if __name__ == "__main__":',
            SCRIPT,
        ),
        Case(
            "The file of origins declares something else.",
            both(put("plan.py", ""), put("origins.toml", "[region]\n")),
            "unknown key 'region' (FOLDER/origins.toml, line 1): expected one of origin",
            (*SCRIPT, "--origins", "FOLDER/origins.toml"),
        ),
        Case(
            "An origin names no file.",
            both(
                put("plan.py", ""),
                put("origins.toml", '[[origin]]\nsource = "an atlas"\nfiles = ["parts/*.nii"]\n'),
            ),
            "origin names no file (FOLDER/origins.toml, line 3): expected files below "
            "FOLDER, got 'parts/*.nii'; check the pattern, and that the files are there",
            (*SCRIPT, "--origins", "FOLDER/origins.toml"),
        ),
        Case(
            "An origin's file is an absolute path.",
            both(
                put("plan.py", ""),
                put(
                    "origins.toml",
                    '[[origin]]\nsource = "an atlas"\nfiles = ["/garden/parts/*.nii"]\n',
                ),
            ),
            "pattern of files out of range (FOLDER/origins.toml, line 3): expected a "
            "pattern relative to the study file, got '/garden/parts/*.nii'",
            (*SCRIPT, "--origins", "FOLDER/origins.toml"),
        ),
    ],
    "Refused by the guard": [
        Case(
            "A plain t-test of held-out values.",
            edit("flips = 19", 'test = "t"'),
            "refused before anything ran: 1 cause, 1 finding\n"
            "\n"
            "1. leak: garden.Arbor.test: the 5 values are cross-fitted: each mask was chosen\n"
            "on the other values' data, so they are correlated and this statistic rejects\n"
            "a true null far more often than it says (about 18% of the time at a nominal\n"
            "5 %, for n = 5 and a threshold of p < .01)\n"
            "    cure    use the whole-procedure sign flip, which chooses every fold's\n"
            "            region again in each flip (FlipTest; in STUDY.toml the default:\n"
            '            leave test = "t" out)',
            exit_code=3,
        ),
        Case(
            "A t-test where the region was chosen.",
            plan('plan = "exploratory"\ntest = "t"'),
            "refused before anything ran: 2 causes, 6 findings\n"
            "\n"
            "1. leak: garden.Arbor.extract, element 0: the mask was chosen on the data it\n"
            "would be tested on\n"
            "    shared  sub-01_task-lanterns_run-1_bold, sub-01_task-lanterns_run-2_bold\n"
            "    region  maps/sub-01_task-lanterns_run-1.nii.gz\n"
            "            -> garden.maps.out_files[0]\n"
            "            -> garden.Arbor.group.out_file\n"
            "            -> garden.Arbor.choose.mask_file\n"
            "    data    maps/sub-01_task-lanterns_run-1.nii.gz\n"
            "            -> garden.maps.out_files[0]\n"
            "    cure    choose the region without the tested data (plan k-fold or\n"
            "            leave-one-subject-out; a region from outside the study), or read\n"
            "            it as exploratory: a value without interval and p\n"
            "    also    4 more elements of this node\n"
            "\n"
            "2. leak: garden.Arbor.test: its values were read in a region chosen on those\n"
            "very data\n"
            "    cure    see the extraction that leaks",
            exit_code=3,
        ),
        Case(
            "A localizer on another map of the tested data.",
            both(
                edit_all("\tpaths\t1\tbold\tglow", "\tlanterns\t1\tbold\tglimmer"),
                edit_all("\tpaths\t2\tbold\tglow", "\tlanterns\t2\tbold\tglimmer"),
                edit('select = { task = "lanterns" }', 'select = { contrast = "glow" }'),
                edit('choose_on = { task = "paths" }', 'choose_on = { contrast = "glimmer" }'),
            ),
            "refused before anything ran: 2 causes, 6 findings\n"
            "\n"
            "1. leak: garden.Brook.extract, element 0: the mask was chosen on another map of\n"
            "the very data it would be tested on\n"
            "    shared  sub-01_task-lanterns_run-1_bold, sub-01_task-lanterns_run-2_bold\n"
            "    region  maps/sub-01_task-paths_run-1.nii.gz\n"
            "            -> garden.maps1.out_files[0]\n"
            "            -> garden.Brook.choose.row_masks[0]\n"
            "    data    maps/sub-01_task-lanterns_run-1.nii.gz\n"
            "            -> garden.maps.out_files[0]\n"
            "    cure    choose on that map in held-out subjects (plan k-fold with\n"
            "            choose_on), or show that the two contrasts are orthogonal (plan\n"
            "            orthogonal-contrast)\n"
            "    also    4 more elements of this node\n"
            "\n"
            "2. leak: garden.Brook.test: its values were read in a region chosen on those\n"
            "very data\n"
            "    cure    see the extraction that leaks",
            exit_code=3,
        ),
        Case(
            "A region made from the tested data.",
            both(
                image(
                    "cinder.nii.gz", np.tri(6, 5, dtype=np.uint8)[:, :, None] * np.ones(4, np.uint8)
                ),
                region(f'{{ mask = "cinder.nii.gz", {DRAWN_ON} }}'),
            ),
            "refused before anything ran: 2 causes, 6 findings\n"
            "\n"
            "1. leak: garden.Cinder.extract, element 0: the region was made from the data it\n"
            "would be tested on, as its origin declares or a run has recorded\n"
            "    shared  sub-01_task-lanterns_run-1_bold, sub-01_task-lanterns_run-2_bold\n"
            "    origin  drawn\n"
            "    region  cinder.nii.gz\n"
            "            -> garden.Cinder.region.mask_file\n"
            "    data    maps/sub-01_task-lanterns_run-1.nii.gz\n"
            "            -> garden.maps.out_files[0]\n"
            "    cure    choose the region without the tested data (plan k-fold or\n"
            "            leave-one-subject-out; a region from outside the study), or read\n"
            "            it as exploratory: a value without interval and p\n"
            "    also    4 more elements of this node\n"
            "\n"
            "2. leak: garden.Cinder.test: its values were read in a region chosen on those\n"
            "very data\n"
            "    cure    see the extraction that leaks",
            exit_code=3,
        ),
    ],
}


def told(case, folder):
    """Standard error of a case in a sound study's folder, which must stay as it was spoilt."""
    case.spoil(folder)
    before = content(folder)
    command = [word.replace("FOLDER", str(folder)) for word in case.command]
    done = CliRunner().invoke(main, command, prog_name="sequester")
    assert isinstance(done.exception, SystemExit), done.exception
    assert done.exit_code == case.exit_code
    assert done.stdout == ""
    after = content(folder)
    after.pop(".results.lock", None)  # it stays once a run has begun
    assert after == before, "something was written"
    return done.stderr.replace(str(folder), "FOLDER")


@pytest.fixture(scope="module")
def sound(tmp_path_factory):
    folder = tmp_path_factory.mktemp("errors") / "sound"
    make_study(folder)
    return folder


@pytest.fixture
def study(sound, tmp_path):
    return Path(shutil.copytree(sound, tmp_path / "study"))


@pytest.mark.parametrize("command", [CHECK, RUN])
def test_the_study_that_is_spoilt_is_sound(study, command):
    done = CliRunner().invoke(main, [word.replace("FOLDER", str(study)) for word in command])
    assert (done.exit_code, done.stderr) == (0, "")


@pytest.mark.parametrize(
    "case",
    [
        pytest.param(case, id=f"{section}: {case.what}")
        for section, cases in SECTIONS.items()
        for case in cases
    ],
)
def test_one_message_says_what_is_wrong(study, case):
    message = told(case, study).removeprefix("sequester: ").removesuffix("\n")
    expected = ".*".join(map(re.escape, case.message.split(CUT)))
    assert re.fullmatch(expected, message, re.DOTALL), (
        f"expected {case.message}\ngot      {message}"
    )
    assert "Traceback" not in message
    assert "\n" not in message or case.exit_code in (1, 3) or message.startswith("Usage: ")


@pytest.mark.parametrize("spoil", [cell("run", "2"), image(MAP, np.zeros(SHAPE, np.float32))])
def test_a_run_that_fails_leaves_no_output_folder(study, spoil):
    shutil.rmtree(study / "results")
    assert told(Case("", spoil, "", RUN), study).startswith("sequester: ")


# -- the page ---------------------------------------------------------------------------------

INTRO = f"""\
# What goes wrong, and what is said

When a request or its data are wrong, `sequester` ends with exit code 2 and one message on
standard error: what is wrong, where (the file, its line, the region), what was expected, what
was there, and what can be done. Nothing is written then: there is no output folder, and earlier
results are as they were. What the guard refuses ends with exit code 3 and the reasons. A
ledger that was changed ends `sequester verify` with exit code 1 (one whose branches wait to be
joined, after a merge, with 4), and everything else with 2. With
`--json` the same words are the value of `error`.

The messages below are those of a small study in FOLDER, spoilt in one way at a time; {CUT}
stands for words of the libraries that read the file, and for long lists. Most faults show in
`sequester check`, which executes nothing; those marked *run* show once the voxels are read.
Before each message stands `sequester: `.
"""


def page():
    """docs/errors.md, from the cases."""
    parts = [INTRO]
    for section, cases in SECTIONS.items():
        parts.append(f"\n## {section}\n")
        rows = [case for case in cases if "\n" not in case.message]
        if rows:
            parts.append("\n| what is wrong | what is said |\n| --- | --- |\n")
        for case in rows:
            late = " *(run)*" if case.command == RUN else ""
            message = case.message.replace("|", "\\|")
            parts.append(f"| {case.what}{late} | `{message}` |\n")
        for case in cases:
            if case not in rows:
                parts.append(f"\n{case.what}\n\n```\n{case.message}\n```\n")
    return "".join(parts)


def test_the_page_shows_these_cases():
    assert PAGE.read_text(encoding="utf-8") == page(), "write it anew: python tests/test_errors.py"


if __name__ == "__main__":
    PAGE.write_text(page(), encoding="utf-8")
