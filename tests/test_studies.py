"""Whole studies on the data that labs have: tasks, sessions, groups, runs, grids of one's own.

Every value is compared with plain numpy on the files; every study runs through the engine.
"""

from __future__ import annotations

import csv
import json
import shutil
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from planting import files_in, save
from scipy import stats
from sequester import read_settings, run_study
from sequester.nodes.errors import InputError
from sequester.workflows.guard import GuardRefused
from sequester.workflows.report.folder import read_table
from sequester.workflows.report.words import notes
from sequester.workflows.run import check_study

SHAPE, LABELS = (8, 8, 6), {1: "Arbor", 2: "Brook", 3: "Cinder"}
SUBJECTS = [f"{i:02d}" for i in range(1, 7)]
HEAD = '[study]\nname = "garden"\ntable = "table.tsv"\nseed = 3\n[data]\n'
COLUMNS = ("path", "sub", "ses", "task", "run", "suffix", "contrast", "exclude_reason", "group",
           "variance", "age")  # fmt: skip


def affine(shift: float = 0.0, flip: bool = False) -> np.ndarray:
    made = np.diag([3.0, 3.0, 3.0, 1.0])
    made[:3, 3] = [-10.5 + shift, -12 - shift, -9 + shift]
    if flip:  # left-handed: voxels run from right to left
        made[0] *= -1
    return made


def coordinates(grid: np.ndarray) -> np.ndarray:
    index = np.stack(np.meshgrid(*map(np.arange, SHAPE), indexing="ij"), axis=-1)
    return index @ grid[:3, :3].T + grid[:3, 3]


def plant(root: Path, *, own_grids: bool = False) -> Path:
    """Six subjects, two sessions, two tasks, up to three runs, two groups, an atlas, a ball."""
    rng, rows = np.random.default_rng(5), []
    for i, sub in enumerate(SUBJECTS):
        grid = affine(i / 2, flip=i % 2 == 1) if own_grids else affine()
        inside = np.linalg.norm(coordinates(grid), axis=-1) < 7
        for ses in ("planting", "harvest"):
            for task in ("lanterns", "paths"):
                for run in "123":
                    if sub == "02" and run == "3":
                        continue
                    stem = f"maps/sub-{sub}_ses-{ses}_task-{task}_run-{run}"
                    data = rng.normal(0, 1, SHAPE) + 2 * inside
                    save(root / f"{stem}_effect.nii.gz", data.astype(np.float32), grid)
                    spread = 0.5 + rng.random(SHAPE)
                    save(root / f"{stem}_variance.nii.gz", spread.astype(np.float32), grid)
                    row = [f"{stem}_effect.nii.gz", sub, ses, task, run, "bold", "glow", "n/a"]
                    rows.append(
                        [
                            *row,
                            "hill" if i < 3 else "pond",
                            f"{stem}_variance.nii.gz",
                            str(30 + i * i),
                        ]
                    )
    lines = ["\t".join(COLUMNS), *("\t".join(row) for row in rows)]
    (root / "table.tsv").write_text("\n".join(lines) + "\n")
    x = coordinates(affine())[..., 0]
    save(root / "garden_dseg.nii.gz", (1 + (x > -4) + (x > 4)).astype(np.int16), affine())
    names = "".join(f"{number}\t{name}\n" for number, name in LABELS.items())
    (root / "garden_dseg.tsv").write_text(f"index\tname\n{names}")
    ball = np.linalg.norm(coordinates(affine()), axis=-1) < 10
    save(root / "ball.nii.gz", ball.astype(np.uint8), affine())
    save(root / "weights.nii.gz", (rng.random(SHAPE) * ball).astype(np.float32), affine())
    return root


@pytest.fixture(scope="module")
def garden(tmp_path_factory):
    return plant(tmp_path_factory.mktemp("garden"))


@pytest.fixture(scope="module")
def wild(tmp_path_factory):
    return plant(tmp_path_factory.mktemp("wild"), own_grids=True)


def write(folder: Path, text: str, name: str = "STUDY") -> Path:
    for other in folder.glob("*.ledger.jsonl"):  # the studies of these tests begin anew
        if other.name != f"{name}.ledger.jsonl":
            other.unlink()
    path = folder / f"{name}.toml"
    path.write_text(HEAD + text)
    return path


def ran(folder: Path, text: str, name: str, **more) -> Path:
    study = read_settings(write(folder, f"{text}\n", name))
    run_study(study, **more)
    return study.output


def table(path: Path) -> list[dict[str, str]]:
    with path.open() as stream:
        return list(csv.DictReader(stream, delimiter="\t"))


def values(output: Path, roi: str) -> dict[str, float]:
    rows = table(output / "roi_values.tsv")
    return {row["sub"]: float(row["value"]) for row in rows if row["roi"] == roi}


def runs_of(folder: Path, sub: str, kind: str = "effect", **entities: str) -> list[np.ndarray]:
    wanted = {"sub": sub, "ses": "harvest", "task": "lanterns", "run": "*"} | entities
    pattern = "_".join(f"{key}-{value}" for key, value in wanted.items())
    paths = sorted((folder / "maps").glob(f"{pattern}_{kind}.nii.gz"))
    assert paths
    return [nib.load(path).get_fdata() for path in paths]


def ball(folder: Path) -> np.ndarray:
    return nib.load(folder / "ball.nii.gz").get_fdata() > 0


# -- values ---------------------------------------------------------------------------------

BALL = 'region = { mask = "ball.nii.gz", origin = "drawn for this test" }\n'
HERE = 'select = { ses = "harvest", task = "lanterns" }\n'


def roi(name: str, plan: str, text: str) -> str:
    return f'[[roi]]\nname = "{name}"\nplan = "{plan}"\n{text}\n'


def test_paired_difference_is_of_each_subjects_maps(garden):
    text = HERE + 'minus = { ses = "planting" }\n' + roi("Ball", "a-priori", BALL)
    output = ran(garden, text, "paired")
    expected = {
        sub: (
            np.mean(runs_of(garden, sub), axis=0)
            - np.mean(runs_of(garden, sub, ses="planting"), axis=0)
        )[ball(garden)].mean()
        for sub in SUBJECTS
    }
    assert values(output, "Ball") == pytest.approx(expected, abs=1e-5)


def test_percent_of_baseline_and_null_value(garden):
    text = HERE + 'baseline = { task = "paths" }\nnull_value = 10\n'
    output = ran(garden, text + roi("Ball", "a-priori", BALL), "percent")
    expected = {}
    for sub in SUBJECTS:
        effect = np.mean(runs_of(garden, sub), axis=0)
        base = np.mean(runs_of(garden, sub, task="paths"), axis=0)
        with np.errstate(divide="ignore"):
            percent = np.where(base > 0, 100 * effect / base - 10, np.nan)
        expected[sub] = np.nanmean(percent[ball(garden)])
    assert values(output, "Ball") == pytest.approx(expected, rel=1e-4)
    (test,) = table(output / "roi_tests.tsv")
    assert (test["scale"], test["null_value"]) == ("percent of baseline", "10.0")
    said = "In percent of the baseline: contrast glow, session harvest, task paths, run 1 + 2 + 3."
    assert f"{said} Values are differences from 10, which is the null." in test["sentence"]
    assert test["tested"] == "contrast glow, session harvest, task lanterns, run 1 + 2 + 3"


def test_runs_weighted_by_their_variance_maps(garden):
    """Fixed effects: sum(e / v) / sum(1 / v) (Hedges & Olkin 1985, chapter 6)."""
    text = HERE + 'run_weights = "variance"\n' + roi("Ball", "a-priori", BALL)
    output = ran(garden, text, "variance")
    expected = {}
    for sub in SUBJECTS:
        effects, weights = runs_of(garden, sub), 1 / np.array(runs_of(garden, sub, "variance"))
        mean = (effects * weights).sum(axis=0) / weights.sum(axis=0)
        expected[sub] = mean[ball(garden)].mean()
    assert values(output, "Ball") == pytest.approx(expected, abs=1e-5)
    sources = json.loads((output / "manifest.json").read_text())["inputs"]
    assert "maps/sub-01_ses-harvest_task-lanterns_run-1_variance.nii.gz" in sources


@pytest.mark.parametrize("how", ["median", "weighted", "component"])
def test_value_summaries(garden, how):
    mask = "weights" if how == "weighted" else "ball"
    region = f'value = "{how}"\nregion = {{ mask = "{mask}.nii.gz", origin = "drawn" }}\n'
    output = ran(garden, HERE + roi("Ball", "a-priori", region), how)
    found = {}
    for sub in SUBJECTS:
        mean = np.mean(runs_of(garden, sub), axis=0)
        if how == "weighted":
            weights = nib.load(garden / "weights.nii.gz").get_fdata()
            found[sub] = (mean * weights).sum() / weights.sum()
        else:
            inside = mean[ball(garden)]
            size = np.sqrt(np.mean(np.square(inside))) * np.sign(inside.mean())
            found[sub] = np.median(inside) if how == "median" else size
    assert values(output, "Ball") == pytest.approx(found, abs=1e-5)


def test_masks_of_what_is_combined_eroded_and_mirrored(garden):
    text = HERE + roi(
        "Mixed",
        "a-priori",
        'region = { union = [{ difference = [{ mask = "ball.nii.gz" }, { centre = [0, 0, 0], '
        'radius = 5 }] }, { atlas = "garden_dseg.nii.gz", labels = ["Cinder"], erode = 3.1 }], '
        'mirror = "both", origin = "three sources" }\n',
    )
    output = ran(garden, text, "mixed")
    mm = coordinates(affine())
    x = mm[..., 0]
    inner = np.zeros(SHAPE, bool)
    inner[:, 1:-1, 1:-1] = True
    # Cinder holds x = 4.5, 7.5 and 10.5; a voxel of 3 mm goes on every side.
    cinder = (x > 7) & (x < 10) & inner
    hollow = ball(garden) & ~(np.linalg.norm(mm, axis=-1) <= 5)
    either = hollow | cinder
    assert np.array_equal(x[::-1], -x), "the grid is symmetric about x = 0"
    made = nib.load(output / "masks" / "label-Mixed_mask.nii.gz").get_fdata() > 0
    assert np.array_equal(made, either | either[::-1])


# -- which data chooses ---------------------------------------------------------------------

FOLDS = 'search = { mask = "ball.nii.gz", origin = "drawn" }\nflips = 9\n'
PEAK = 'rule = { kind = "strongest", k = 12 }\n'
OTHER = 'choose_on = { task = "paths" }\n'


def verdicts(folder: Path, text: str, name: str) -> set[tuple[str, str]]:
    settings = read_settings(write(folder, text, name))
    return {(f.verdict, f.level) for f in check_study(settings) if f.kind == "extraction"}


def refused(folder: Path, text: str, name: str) -> str:
    with pytest.raises(GuardRefused) as told:
        check_study(read_settings(write(folder, text, name)))
    return " ".join(str(told.value).split())


def test_localizer_of_another_task_is_apart_at_run_level(garden):
    text = HERE + roi("Own", "localizer", OTHER + PEAK)
    assert verdicts(garden, text, "own") == {("apart", "run")}
    output = ran(garden, text, "own")
    for sub, value in values(output, "Own").items():
        chooses = np.mean(runs_of(garden, sub, task="paths"), axis=0).astype(np.float32)
        mask = np.zeros(chooses.size, bool)
        mask[np.argsort(-chooses.ravel(), kind="stable")[:12]] = True
        name = f"sub-{sub}_label-Own_desc-localizer_mask"
        saved = nib.load(output / "masks" / f"{name}.nii.gz").get_fdata().ravel()
        assert np.array_equal(saved > 0, mask)
        read = np.mean(runs_of(garden, sub), axis=0).ravel()[mask].mean()
        assert value == pytest.approx(read, abs=1e-5)
        sources = json.loads((output / "masks" / f"{name}.json").read_text())["Sources"]
        assert all(f"sub-{sub}_ses-harvest_task-paths" in source for source in sources)
        assert len(sources) == len(runs_of(garden, sub, task="paths"))


def test_group_mask_of_the_same_people_needs_the_narrower_claim(garden):
    text = HERE + roi("Group", "localizer", OTHER + 'mask_of = "group"\n' + PEAK)
    assert 'claim = "these-subjects"' in refused(garden, text, "samepeople")
    text += 'claim = "these-subjects"\nclaim_reason = "they are all there are"\n'
    assert verdicts(garden, text, "claimed") == {("apart", "run")}
    path = ran(garden, text, "claimed") / "roi_tests.tsv"
    (test,) = table(path)
    waived = notes(read_table(path))[0]
    assert waived.kind == "waiver" and "Group, as stated: they are all there are." in waived.text
    assert (test["claim"], test["level"]) == ("these subjects", "run")
    assert test["null"] == "none of these subjects has an effect in the region"


def test_group_mask_of_other_people_is_apart_at_subject_level(garden):
    text = 'mask_of = "group"\nselect = { group = "hill" }\nchoose_on = { group = "pond" }\n'
    text = HERE + roi("Others", "localizer", text + PEAK)
    assert verdicts(garden, text, "others") == {("apart", "subject")}
    (test,) = table(ran(garden, text, "others") / "roi_tests.tsv")
    assert (test["n_subjects"], test["null"]) == ("3", "the population mean in this region is zero")


def test_region_of_baseline_is_not_tested_on_followup_minus_baseline(garden):
    """Regression to the mean: what chance raised at baseline falls afterwards."""
    text = HERE + roi(
        "Change",
        "localizer",
        'minus = { ses = "planting" }\nchoose_on = { ses = "planting" }\n' + PEAK,
    )
    told = refused(garden, text, "change")
    assert "leak" in told and "ses-planting" in told
    apart = text.replace('choose_on = { ses = "planting" }', 'choose_on = { task = "paths" }')
    assert verdicts(garden, apart, "unchanged") == {("apart", "run")}


@pytest.fixture
def two_contrasts(garden, tmp_path):
    """The maps of the second task as another contrast of the same runs, and a design."""
    folder = Path(shutil.copytree(garden, tmp_path / "garden"))
    lines = (folder / "table.tsv").read_text().splitlines()
    for line in lines[1:]:
        if "harvest_task-paths" in line:
            dim = line.replace("\tglow\t", "\tdim\t").replace("\tpaths\t", "\tlanterns\t")
            lines[lines.index(line)] = dim
    (folder / "table.tsv").write_text("\n".join(lines) + "\n")
    (folder / "design.tsv").write_text("amber\tteal\n" + "1\t0\n" * 6 + "0\t1\n" * 6)
    (folder / "uneven.tsv").write_text("amber\tteal\n" + "1\t0\n" * 6 + "0\t1\n" * 3)
    return folder


def test_another_contrast_of_the_same_runs_is_a_leak(two_contrasts):
    text = 'select = { ses = "harvest", task = "lanterns", contrast = "glow" }\n'
    text += roi("Own", "localizer", 'choose_on = { contrast = "dim" }\n' + PEAK)
    told = refused(two_contrasts, text, "dim")
    assert "chosen on another map of the very data it would be tested on" in told
    assert "k-fold with choose_on" in told


CERTIFIED = 'select = { ses = "harvest", task = "lanterns", contrast = "glow" }\n' + roi(
    "Sum",
    "orthogonal-contrast",
    'choose_on = { contrast = "dim" }\n'
    + PEAK
    + 'certificate = { design = "design.tsv", noise = "white", chosen = { amber = 1, teal = 1 }, '
    'tested = { amber = 1, teal = -1 }, between = [[1, 0.2], [0.2, 1]], source = "a pilot" }\n',
)


def test_orthogonal_contrast_with_its_certificate(two_contrasts):
    assert verdicts(two_contrasts, CERTIFIED, "sum") == {("certified", "subject")}
    (test,) = table(ran(two_contrasts, CERTIFIED, "sum") / "roi_tests.tsv")
    assert (test["verdict"], test["level"]) == ("certified", "subject")
    assert "amber + teal and amber - teal: correlation of the errors 0 (run" in test["sentence"]


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ("design.tsv", "uneven.tsv", "-0.333 (run: white noise, ordinary least squares), 0 (subj"),
        ("0.2, 1]]", "0.2, 4]]", "0 (run: white noise, ordinary least squares), -0.6"),
        ('contrast = "dim" }', 'contrast = ["glow"], run = ["1", "2"] }', "which chose and is tes"),
    ],
)
def test_certificate_that_does_not_hold_is_refused_with_the_numbers(two_contrasts, old, new, told):
    assert old in CERTIFIED
    said = refused(two_contrasts, CERTIFIED.replace(old, new), "sum")
    assert "leak: garden.Sum.extract, element 0: the mask was chosen on" in said
    assert told in said


@pytest.mark.parametrize(
    ("tested", "chosen", "told"),
    [
        ('contrast = "glow", run = "2"', 'run = ["1", "3"]', "was not chosen on exactly these"),
        ('contrast = "glow", run = "2"', 'contrast = "dim", run = "1"', "not chosen on exactly"),
        ('contrast = "glow"', 'contrast = "dim", run = ["1", "2"]', "not chosen on exactly these"),
    ],
)
def test_certificate_of_other_runs_makes_nothing_harmless(two_contrasts, tested, chosen, told):
    """It would make a localizer, which is refused for several subjects, one of the population."""
    text = CERTIFIED.replace('choose_on = { contrast = "dim" }', f"choose_on = {{ {chosen} }}")
    text = text.replace('contrast = "glow"', tested, 1)
    assert told in refused(two_contrasts, text, "sum")


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ("[0.2, 1]]", "[0.3, 1]]", "between is no covariance.*symmetric"),
        ("[[1, 0.2], [0.2, 1]]", "[[0, 0], [0, 0]]", "between is no covariance.*not all zero"),
        ("[[1, 0.2], [0.2, 1]]", "[[inf, 0], [0, 1]]", "between is no covariance"),
        ("{ amber = 1, teal = 1 }", "{}", "a contrast without weights .*sum.toml, line"),
        ("[[1, 0.2], [0.2, 1]]", "[1, 1]", "between is no covariance.*2 x 2 numbers"),
        ("teal = -1", "rose = -1", "unknown key 'rose'.*one of amber, teal"),
        ("design.tsv", "nowhere.tsv", "no such design"),
        (', source = "a pilot"', "", "missing key 'source'"),
    ],
)
def test_certificate_that_cannot_be_read(two_contrasts, old, new, told):
    with pytest.raises(InputError, match=told):
        read_settings(write(two_contrasts, CERTIFIED.replace(old, new), "sum"))


OWN_MASK = '"own/sub-{{sub}}_mask.nii.gz", origin = "drawn on the {0} run", '
OWN_MASK += 'derived_from = [{{ sub = "{{sub}}", ses = "harvest", task = "{0}" }}] }}\n'


def test_mask_files_of_each_subject_derive_from_that_subject(garden):
    for sub in SUBJECTS:
        chosen = runs_of(garden, sub, task="paths")[0] > 1
        save(garden / "own" / f"sub-{sub}_mask.nii.gz", chosen.astype(np.uint8), affine())
    text = HERE + roi("Drawn", "a-priori", "region = { mask = " + OWN_MASK.format("paths"))
    assert verdicts(garden, text, "drawn") == {("apart", "run")}
    output = ran(garden, text, "drawn")
    (test,) = table(output / "roi_tests.tsv")
    assert test["null"] == "no subject has a replicable effect in the search region"
    assert test["claim"] == "single subjects"
    for sub, value in values(output, "Drawn").items():
        mask = runs_of(garden, sub, task="paths")[0] > 1
        read = np.mean(runs_of(garden, sub), axis=0)[mask].mean()
        assert value == pytest.approx(read, abs=1e-5)
    leaky = text.replace('task = "paths" }]', 'task = "lanterns" }]')
    assert "the region was made from the data it would be tested on" in refused(garden, leaky, "a")


def test_mask_that_a_run_wrote_is_known_by_its_record_and_by_its_bytes(garden, tmp_path):
    """Look first, then give the region out as one from elsewhere: the likeliest accident."""
    folder = Path(shutil.copytree(garden, tmp_path / "garden"))
    output = ran(folder, HERE + roi("Look", "exploratory", PEAK), "look")
    mask = output / "masks" / "label-Look_mask.nii.gz"
    shutil.copy(mask, folder / "copied.nii.gz")
    for path in (mask.relative_to(folder), "copied.nii.gz"):
        given = BALL.replace("ball.nii.gz", str(path)).replace("drawn for this test", "a pilot")
        told = refused(folder, HERE + roi("Pilot", "a-priori", given), "look")
        assert "the region was made from the data it would be tested on" in told
        other = HERE.replace("lanterns", "paths") + roi("Pilot", "a-priori", given)
        assert "leak" in refused(folder, other, "look"), "other runs of the same people"
    fold = ran(folder, HERE + roi("Loso", "leave-one-subject-out", FOLDS + PEAK), "folds")
    without = fold.relative_to(folder) / "masks" / "label-Loso_desc-without01_mask.nii.gz"
    given = f'select = {{ sub = ["01", "02"] }}\nregion = {{ mask = "{without}", origin = "x" }}\n'
    told = refused(folder, HERE + roi("One", "a-priori", given), "one")
    assert "garden.One.extract, element 1" in told
    assert "element 0" not in told, "the first subject did not choose that mask"


def test_derived_from_each_subject_needs_a_file_of_each(garden):
    given = BALL.replace(" }", ', derived_from = [{ sub = "{sub}", task = "lanterns" }] }')
    with pytest.raises(InputError, match="for a region that all subjects share"):
        read_settings(write(garden, HERE + roi("Ball", "a-priori", given), "shared"))


def test_declarations_of_one_file_add_up(garden):
    """The honest declaration of one region is not undone by a later one that leaves it out."""
    honest = BALL.replace(" }", ', derived_from = [{ task = "lanterns" }] }')
    vague = BALL.replace("drawn for this test", "an atlas")
    text = HERE + roi("A", "a-priori", honest) + roi("B", "a-priori", vague)
    assert refused(garden, text, "both").count("leak: garden.B.extract") == 1
    text = HERE + roi("B", "a-priori", vague) + roi("A", "a-priori", honest)
    assert refused(garden, text, "both").count("leak: garden.B.extract") == 1


# -- spaces and grids -----------------------------------------------------------------------


def test_region_of_another_named_space_is_refused(garden, tmp_path):
    folder = Path(shutil.copytree(garden, tmp_path / "garden"))
    lines = (folder / "table.tsv").read_text().splitlines()
    lines = [f"{lines[0]}\tspace", *(f"{line}\torchard" for line in lines[1:])]
    (folder / "table.tsv").write_text("\n".join(lines) + "\n")
    shutil.copy(folder / "ball.nii.gz", folder / "ball_space-orchard_mask.nii.gz")
    shutil.copy(folder / "ball.nii.gz", folder / "ball_space-meadow_mask.nii.gz")
    fits = HERE + roi("Ball", "a-priori", BALL.replace("ball.nii", "ball_space-orchard_mask.nii"))
    assert read_settings(write(folder, fits, "fits")).rois[0].name == "Ball"
    other = fits.replace("space-orchard", "space-meadow")
    with pytest.raises(InputError, match=r"another space than the maps.*orchard.*meadow"):
        read_settings(write(folder, other, "other"))
    stated = HERE + roi("Ball", "a-priori", BALL.replace(" }", ', space = "meadow" }'))
    with pytest.raises(InputError, match="another space"):
        read_settings(write(folder, stated, "stated"))


def test_own_grids_are_read_in_mm(wild):
    text = 'grids = "own"\n' + HERE
    sphere = 'region = { centre = [0, 0, 0], radius = 6, origin = "drawn" }\n'
    label = 'search = { atlas = "garden_dseg.nii.gz", labels = ["Brook"], origin = "an atlas", '
    label += "regrid = true }\n"
    text += roi("Ball", "a-priori", sphere) + roi("Own", "localizer", OTHER + label + PEAK)
    output = ran(wild, text, "grids")
    for i, sub in enumerate(SUBJECTS):
        mm = coordinates(affine(i / 2, flip=i % 2 == 1))
        mean = np.mean(runs_of(wild, sub), axis=0)
        inside = np.linalg.norm(mm, axis=-1) <= 6
        assert values(output, "Ball")[sub] == pytest.approx(mean[inside].mean(), abs=1e-5)
        saved = output / "masks" / f"sub-{sub}_label-Own_desc-localizer_mask.nii.gz"
        chosen = nib.load(saved).get_fdata() > 0
        assert (np.abs(mm[..., 0][chosen]) < 4.5).all()
        assert values(output, "Own")[sub] == pytest.approx(mean[chosen].mean(), abs=1e-5)


@pytest.mark.parametrize("plan", ["k-fold", "exploratory"])
def test_group_plans_need_one_grid(wild, plan):
    text = 'grids = "own"\n' + HERE + roi("Found", plan, PEAK)
    with pytest.raises(InputError, match=f"grids = \"own\" does not go with plan '{plan}'"):
        read_settings(write(wild, text, "group"))
    undeclared = text.replace('grids = "own"\n', "")
    with pytest.raises(InputError, match="grids differ"):
        check_study(read_settings(write(wild, undeclared, "undeclared")))


# -- everything at once ---------------------------------------------------------------------

EVERY = HERE + "".join(
    [
        roi("Loso", "leave-one-subject-out", FOLDS + 'rule = { kind = "threshold", p = 0.05 }\n'),
        roi("Five", "k-fold", FOLDS + 'folds = 3\nrule = { kind = "peak-sphere", radius = 5 }\n'),
        roi("Half", "split-half", FOLDS + 'rule = { kind = "strongest", fraction = 0.1 }\n'),
        roi("Site", "given-folds", FOLDS + PEAK + 'fold_column = "group"\n' + OTHER),
        roi("Runs", "leave-one-run-out", PEAK.replace("12", '12, map = "mean"')),
        roi("Odd", "split-half-runs", PEAK.replace("12", '12, map = "mean"')),
        roi("Own", "localizer", OTHER + PEAK),
        roi("Given", "a-priori", BALL),
        roi("Labels", "a-priori", "each_label = true\nregion = { atlas = "
            '"garden_dseg.nii.gz", origin = "an atlas" }\n'),
        roi("Look", "exploratory", PEAK),
    ]
)  # fmt: skip


def test_every_plan_gives_the_same_bytes_on_both_engines_cold_and_warm(garden, tmp_path):
    work = tmp_path / "work"
    first = files_in(ran(garden, EVERY, "every"))
    assert files_in(ran(garden, EVERY, "every", processes=2, work=work)) == first
    assert files_in(ran(garden, EVERY, "every", work=work)) == first, "on a warm cache"
    shutil.rmtree(work)
    assert files_in(ran(garden, EVERY, "every", work=work)) == first, "after deleting the folder"


def test_where_masks_lie(garden):
    output = read_settings(write(garden, EVERY, "every")).output
    rows = {row["mask"]: row for row in table(output / "masks.tsv")}
    files = {p.name for p in (output / "masks").glob("*.nii.gz")}
    other = ("_dseg", "_desc-search_mask")
    assert set(rows) == {name for name in files if not any(word in name for word in other)}
    row = rows["label-Given_mask.nii.gz"]
    mm = coordinates(affine())[ball(garden)]
    assert (int(row["voxels"]), float(row["mm3"])) == (len(mm), 27.0 * len(mm))
    centre = [float(row[f"centre_{axis}"]) for axis in "xyz"]
    assert centre == pytest.approx(mm.mean(axis=0), abs=1e-4)
    overlap = rows["label-Loso_desc-foldoverlap_probseg.nii.gz"]
    share = nib.load(output / "masks" / overlap["mask"]).get_fdata()
    top = coordinates(affine())[share == share.max()]
    assert any(np.allclose([float(overlap[f"top_{axis}"]) for axis in "xyz"], at) for at in top)
    assert row["peak_x"] == overlap["peak_x"] == "n/a", "no map chose"
    chosen = [row for row in rows.values() if row["peak_value"] != "n/a"]
    assert {row["roi"] for row in chosen} == {
        "Loso", "Five", "Half", "Site", "Runs", "Odd", "Own", "Look"
    }  # fmt: skip
    for row in chosen:
        mask = nib.load(output / "masks" / row["mask"]).get_fdata() > 0
        peak = [float(row[f"peak_{axis}"]) for axis in "xyz"]
        assert any(np.allclose(peak, mm) for mm in coordinates(affine())[mask])


def test_wide_table_and_cells(garden):
    output = read_settings(write(garden, EVERY, "every")).output
    long = table(output / "roi_values.tsv")
    wide = {(row["sub"], row["run"]): row for row in table(output / "roi_values_wide.tsv")}
    for row in long:
        column = row["roi"] + ("_BIASED" if row["biased"] == "true" else "")
        column += "" if row["parcel"] == "n/a" else f"_{LABELS[int(row['parcel'])]}"
        assert wide[row["sub"], row["run"]][column] == row["value"]
    assert wide["01", "n/a"]["group"] == "hill"
    cells = table(output / "cells.tsv")
    loso = [row for row in cells if row["roi"] == "Loso"]
    assert [(r["group"], r["n_subjects"], r["n_maps"]) for r in loso] == [
        ("hill", "3", "8"),  # one subject lacks a run
        ("pond", "3", "9"),
    ]
    assert {r["side"] for r in cells if r["roi"] == "Own"} == {"tested", "chosen on"}
    labels = [r["parcel_name"] for r in table(output / "roi_tests.tsv") if r["roi"] == "Labels"]
    assert labels == list(LABELS.values())


# -- sensitivity ----------------------------------------------------------------------------

VARIED = roi(
    "Five",
    "k-fold",
    FOLDS + 'folds = 3\nrule = { kind = "threshold", p = 0.01 }\n'
    "sensitivity = { p = [0.05, 0.001], folds = [2, 3] }\n",
)


def test_declared_variants_are_one_table_beside_the_stated_analysis(garden):
    output = ran(garden, HERE + VARIED, "varied")
    assert [row["roi"] for row in table(output / "roi_tests.tsv")] == ["Five"]
    stated, *others = table(output / "sensitivity.tsv")
    assert stated["setting"] == "as stated"
    assert [row["setting"] for row in others] == [
        "p = 0.05, folds = 2", "p = 0.05, folds = 3", "p = 0.001, folds = 2", "p = 0.001, folds = 3"
    ]  # fmt: skip
    alone = VARIED.replace("sensitivity = { p = [0.05, 0.001], folds = [2, 3] }\n", "")
    alone = alone.replace("p = 0.01", "p = 0.001").replace("folds = 3", "folds = 2")
    (single,) = table(ran(garden, HERE + alone, "alone") / "roi_tests.tsv")
    assert [others[2][k] for k in ("estimate", "p")] == [single["estimate"], single["p"]]


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ("p = [0.05, 0.001]", "p = []", "sensitivity with too many or no combinations"),
        ("p = [0.05, 0.001]", f"p = {[0.01] * 60}", "expected 1 to 100, got 120"),
        ("p = [0.05, 0.001]", "radius = [3, 4]", "unknown key 'radius' in sensitivity"),
        ("p = [0.05, 0.001]", "p = [0.05, 0.7]", "p out of range"),
    ],
)
def test_sensitivity_that_does_not_do(garden, old, new, told):
    with pytest.raises(InputError, match=told):
        read_settings(write(garden, HERE + VARIED.replace(old, new), "varied"))


def test_a_difference_of_exactly_nothing_is_data(garden, tmp_path):
    """Accuracy maps at chance: 0.5 - 0.5 is an effect of zero, not a voxel without data."""
    folder = Path(shutil.copytree(garden, tmp_path / "garden"))
    for i, path in enumerate(sorted((folder / "maps").glob("*ses-harvest_task-lanterns*effect*"))):
        data = np.random.default_rng(i).choice([0.25, 0.5, 1.0], SHAPE)
        save(path, data.astype(np.float32), affine())
    text = HERE + "null_value = 0.5\n" + roi("Ball", "a-priori", BALL)
    output = ran(folder, text, "chance")
    expected = {
        sub: np.mean(runs_of(folder, sub), axis=0)[ball(folder)].mean() - 0.5 for sub in SUBJECTS
    }
    assert values(output, "Ball") == pytest.approx(expected, abs=1e-6)
    assert {row["coverage"] for row in table(output / "roi_values.tsv")} == {"1.0"}


# -- groups and scores ----------------------------------------------------------------------

COMPARED = FOLDS.replace("9", "99") + 'rule = { kind = "strongest", k = 8 }\n'
GROUPS = 'compare = { column = "group", first = "hill", second = "pond" }\n'


def test_groups_are_exchanged_through_the_whole_procedure(garden):
    text = HERE + roi("Hill", "leave-one-subject-out", COMPARED + GROUPS)
    output = ran(garden, text, "groups")
    (test,) = table(output / "roi_tests.tsv")
    found = values(output, "Hill")
    hill = [found[sub] for sub in SUBJECTS[:3]]
    pond = [found[sub] for sub in SUBJECTS[3:]]
    assert float(test["estimate"]) == pytest.approx(np.mean(hill) - np.mean(pond))
    assert test["n_flips"] == "20", "all ways to call three of six subjects hill"
    assert float(test["p"]) * 20 == pytest.approx(round(float(test["p"]) * 20))
    assert test["n_cells"] == "hill 3, pond 3"
    assert "exchangeable over the subjects with respect to the group" in test["null"]


def test_score_with_its_ceiling(garden):
    text = COMPARED + 'score = "age"\nreliability = { values = 0.8, score = 0.7 }\n'
    output = ran(garden, HERE + roi("Aged", "leave-one-subject-out", text), "score")
    (test,) = table(output / "roi_tests.tsv")
    found, ages = values(output, "Aged"), [30 + i * i for i in range(6)]
    r = np.corrcoef([found[sub] for sub in SUBJECTS], ages)[0, 1]
    assert float(test["estimate"]) == pytest.approx(r)
    # Spearman 1904: sqrt(.8 x .7); Vul et al. 2009 print .74.
    assert float(test["ceiling"]) == pytest.approx(0.7483315, abs=1e-7)
    rows = [r for r in table(output / "roi_values.tsv") if r["roi"] == "Aged"]
    influence = {row["sub"]: float(row["influence"]) for row in rows}
    without = {
        sub: np.corrcoef(
            [found[s] for s in SUBJECTS if s != sub],
            [age for s, age in zip(SUBJECTS, ages, strict=True) if s != sub],
        )[0, 1]
        for sub in SUBJECTS
    }
    assert influence == pytest.approx({sub: without[sub] - r for sub in SUBJECTS})
    assert test["most_influential"] == max(influence, key=lambda sub: abs(influence[sub]))


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ('score = "group"\n', "has no number in column 'group'"),
        ('score = "height"\n', "unknown column 'height'"),
        (GROUPS + 'score = "age"\n', "do not go together"),
        ('covariates = ["age"]\n', "do not go together"),
        (GROUPS.replace("pond", "lake"), "lake"),
        ("reliability = { values = 0.8, score = 0.7 }\n", "reliability without a score"),
        ('score = "age"\nreliability = { values = 8, score = 0.7 }\n', "reliability out of range"),
    ],
)
def test_comparison_that_does_not_do(garden, text, told):
    with pytest.raises(InputError, match=told):
        study = HERE + roi("Hill", "leave-one-subject-out", COMPARED + text)
        check_study(read_settings(write(garden, study, "no")))


# -- comparisons of regions -----------------------------------------------------------------

TWO = "".join(
    roi(name, "leave-one-subject-out", COMPARED.replace("ball", name.lower())) for name in "AB"
)
DIFFER = '[[comparison]]\nname = "Differ"\nkind = "difference"\nrois = ["A", "B"]\n'


@pytest.fixture(scope="module")
def halves(garden):
    """The ball's two sides as search regions."""
    x = coordinates(affine())[..., 0]
    for name, side in (("a", x < 0), ("b", x > 0)):
        save(garden / f"{name}.nii.gz", (ball(garden) & side).astype(np.uint8), affine())
    return garden


def test_difference_of_two_folded_regions_is_flipped_together(halves):
    output = ran(halves, HERE + TWO + DIFFER, "differ")
    (row,) = table(output / "comparisons.tsv")
    a, b = (values(output, name) for name in "AB")
    difference = [a[sub] - b[sub] for sub in SUBJECTS]
    assert float(row["estimate"]) == pytest.approx(np.mean(difference))
    t = np.mean(difference) / (np.std(difference, ddof=1) / np.sqrt(6))
    assert float(row["statistic"]) == pytest.approx(t)
    assert row["df"] == "n/a", "p is by flips"
    tests = table(output / "roi_tests.tsv")
    for test in tests:
        assert float(test["p"]) <= float(test["p_max"]) <= min(1, float(test["p"]) * 2 + 1e-9)
    assert "flip" in row["p_kind"]


def test_comparisons_of_regions_given_beforehand(halves):
    given = "".join(roi(n, "a-priori", BALL.replace("ball", n.lower())) for n in "AB")
    given += roi("Ball", "a-priori", BALL)
    text = HERE + given + DIFFER
    text += DIFFER.replace("Differ", "Alike").replace('"difference"', '"equivalence"\nsmallest = 3')
    text += (
        DIFFER.replace("Differ", "Any").replace("difference", "anova").replace('"B"', '"B", "Ball"')
    )
    output = ran(halves, text, "fixed")
    differ, alike, anova = table(output / "comparisons.tsv")
    a, b = (values(output, name) for name in "AB")
    found = stats.ttest_rel([a[s] for s in SUBJECTS], [b[s] for s in SUBJECTS])
    assert float(differ["p"]) == pytest.approx(found.pvalue)
    assert (alike["equivalent"], float(alike["smallest"])) == ("true", 3)
    assert 0.5 - 1e-9 <= float(anova["epsilon"]) <= 1, "two differences, or one"


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        ('["A", "B"]', '["A", "C"]', "comparison of an unknown region 'C'.*A, B"),
        ('["A", "B"]', '["A"]', "difference of 1 regions.*expected 2"),
        ('"difference"', '"equivalence"', "missing key 'smallest'"),
        ('"Differ"', '"A"', r"two \[\[comparison\]\] or \[\[roi\]\] of one name"),
        (
            DIFFER,
            roi("C", "a-priori", BALL) + DIFFER.replace('"B"', '"C"'),
            "folds and one without",
        ),
        (DIFFER, roi("C", "exploratory", PEAK) + DIFFER.replace('"B"', '"C"'), "no single tested"),
        (
            DIFFER,
            roi("C", "k-fold", FOLDS + 'folds = 3\nrule = { kind = "threshold", p = 0.05 }\n')
            + DIFFER.replace('"B"', '"C"'),
            'C may find no region in a fold.*give C on_empty = "strongest" with a k',
        ),
    ],
)
def test_comparison_of_regions_that_does_not_do(halves, old, new, told):
    text = (HERE + TWO + DIFFER).replace(old, new)
    with pytest.raises(InputError, match=told):
        read_settings(write(halves, text, "no"))
