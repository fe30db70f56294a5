"""Calibration: a study's own plans on noise, the plans themselves against a real run."""

import json
import re
import shlex
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import nibabel as nib
import numpy as np
import psutil
import pytest
from click.testing import CliRunner
from planting import save
from scipy import ndimage
from sequester.nodes import nullsets, progress
from sequester.nodes.errors import InputError
from sequester.nodes.groupmaps import Missing
from sequester.nodes.masks import Strongest
from sequester.nodes.nullsets import Circular, NullMaps, Rows, Searched
from sequester.nodes.procedure import Procedure
from sequester.nodes.simulated import Noise
from sequester.nodes.smoothness import fwhm_of_stack
from sequester.nodes.space import Grid
from sequester.workflows import calibrate, demo
from sequester.workflows.calibrate import Calibration
from sequester.workflows.cli import main
from sequester.workflows.measured import Measured
from sequester.workflows.run import run_study
from sequester.workflows.settings import read_settings

PAGE = Path(__file__).parent.parent / "docs" / "calibrate.md"
SHAPE = (9, 8, 7)
FWHM = (2.5, 2.0, 1.5)
# Eight gardeners, two of whom are one household: seven independent ones, all flips enumerated.
HOUSEHOLD = {"07": "hut", "08": "hut"}
HEAD = """[study]
name = "garden"
table = "table.tsv"
seed = 3
[data]
select = { task = "lanterns" }
"""
PLANS = {
    "Arbor": 'plan = "leave-one-subject-out"\nrule = { kind = "cluster", p = 0.05 }\n'
    'on_empty = "strongest"\nk = 5\nflips = 199\nsearch = { mask = "bed.nii.gz", origin = "o" }',
    "Below": 'plan = "k-fold"\nfolds = 3\nrule = { kind = "strongest", k = 9 }\nflips = 199\n'
    'tail = "negative"\nvalue = "median"',
    "Other": 'plan = "split-half"\nrule = { kind = "threshold", p = 0.1 }\nflips = 199\n'
    'choose_on = { task = "paths" }\non_empty = "strongest"\nk = 5',
    "Brook": 'plan = "a-priori"\nvalue = "component"\nregion = { mask = "bed.nii.gz", '
    'origin = "o" }',
    "Scent": 'plan = "a-priori"\nvalue = "weighted"\nregion = { mask = "scent.nii.gz", '
    'origin = "o" }',
    "Beds": 'plan = "a-priori"\neach_label = true\nregion = { atlas = "beds.nii.gz", '
    'origin = "o" }',
    "Steps": 'plan = "leave-one-run-out"\nrule = { kind = "strongest", k = 9, map = "mean" }\n'
    'search = { mask = "bed.nii.gz", origin = "o" }',
    "Halves": 'plan = "split-half-runs"\nvalue = "component"\n'
    'rule = { kind = "peak-sphere", radius = 4, map = "mean" }',
    "Own": 'plan = "localizer"\nrule = { kind = "threshold", height = 1.5 }\n'
    'choose_on = { task = "paths" }\nsearch = { mask = "bed.nii.gz", origin = "o" }',
    "Group": 'plan = "localizer"\nmask_of = "group"\nclaim = "these-subjects"\ntail = "negative"\n'
    'rule = { kind = "cluster", p = 0.2 }\nchoose_on = { task = "paths" }',
    "Look": 'plan = "exploratory"\nrule = { kind = "strongest", k = 9 }',
}


def smooth(rng, fwhm=FWHM):
    x = ndimage.gaussian_filter(
        rng.standard_normal([n + 24 for n in SHAPE]), np.array(fwhm) / np.sqrt(8 * np.log(2))
    )
    x = x[tuple(slice(12, 12 + n) for n in SHAPE)]
    return x / x.std()


def study_text(names=tuple(PLANS)):
    return HEAD + "".join(f'[[roi]]\nname = "{name}"\n{PLANS[name]}\n' for name in names)


def plant(root, *, effect=0.4):
    """Eight subjects, two tasks, two or three runs, voxels that some or all of them lack."""
    rng, lines = np.random.default_rng(4), ["path\tsub\ttask\trun\tsuffix\tcontrast\texchange"]
    for i in range(8):
        sub = f"{i + 1:02d}"
        for task in ("lanterns", "paths"):
            for run in "123"[: 2 + (i % 2)]:
                data = smooth(rng) + effect
                data[:, :, 0] = 0  # nobody has these
                if i == 2:
                    data[:3, :2] = 0
                name = f"maps/sub-{sub}_task-{task}_run-{run}_effect.nii.gz"
                save(root / name, data.astype(np.float32))
                exchange = HOUSEHOLD.get(sub, sub)
                lines.append(f"{name}\t{sub}\t{task}\t{run}\tbold\tglow\t{exchange}")
    (root / "table.tsv").write_text("\n".join(lines) + "\n")
    bed = np.zeros(SHAPE, np.uint8)
    bed[1:7, 1:7, :5] = 1
    save(root / "bed.nii.gz", bed)
    save(root / "scent.nii.gz", (rng.random(SHAPE) * bed).astype(np.float32))
    beds = np.zeros(SHAPE, np.int16)
    beds[:3], beds[4:6], beds[7:, :, 1:] = 2, 5, 7
    save(root / "beds.nii.gz", beds)
    (root / "STUDY.toml").write_text(study_text())
    return root


@pytest.fixture(scope="module")
def garden(tmp_path_factory):
    return plant(tmp_path_factory.mktemp("garden"))


def sequester(*arguments, code=0):
    done = CliRunner().invoke(main, [str(a) for a in arguments])
    assert done.exit_code == code, done.output
    return done


def told(*arguments):
    said = sequester("calibrate", *arguments, "--json").stdout
    return {one["words"] + one["roi"]: one for one in json.loads(said)["calibrated"]}.values()


# -- the plans are the study's ----------------------------------------------------------------


def test_each_plan_gives_on_the_studys_maps_what_a_run_gives(garden, monkeypatch):
    """The maps themselves in place of noise: estimate and p are those of `sequester run`."""
    settings = read_settings(garden / "STUDY.toml")
    expected = {}
    for row in run_study(settings).tests:
        expected.setdefault(row["roi"], []).append(row)
    measured = dict(zip(expected, calibrate.measure(settings, settings.rois), strict=True))
    maps = {}
    for one in measured.values():
        for rows in (one.tested, one.choosing):
            if rows is not None:
                maps[id(rows)] = one

    def of_study(rows, grid, task, runs):
        stack = []
        for i, sub in enumerate(rows.subs):
            run = runs[i] if len(rows.subs) > 8 else "*"
            paths = sorted((garden / "maps").glob(f"sub-{sub}_task-{task}_run-{run}_*"))
            data = [nib.load(path).get_fdata(dtype=np.float32) for path in paths]
            mean = np.mean(np.array(data, np.float64), axis=0).astype(np.float32)
            mean[(np.array(data) == 0).any(axis=0)] = np.nan
            stack.append(mean.ravel()[grid.voxels])
        return np.stack(stack)

    def real(self, rng):
        one = maps[id(self.tested)]
        grid = one.searched.grid
        tested = of_study(self.tested, grid, "lanterns", one.runs)
        assert np.array_equal(np.isfinite(tested), self.tested.present)
        if self.choosing is None:
            return tested, None
        chosen = of_study(self.choosing, grid, "paths", one.runs)
        return tested, chosen / np.float32(one.spread)

    monkeypatch.setattr(NullMaps, "draw", real)
    for roi in settings.rois:
        draw = calibrate._draw(settings, roi, measured[roi.name], 199, 0.0)
        found, rows = draw(np.random.default_rng(0)), expected[roi.name]
        estimate = np.mean([r["estimate"] for r in rows])
        assert found.estimate == pytest.approx(estimate, rel=1e-5), roi.name
        if roi.plan == "exploratory":
            assert found.p is None
        else:
            p = min(r["p_holm"] if roi.each_label else r["p"] for r in rows)
            assert found.p == pytest.approx(p, rel=1e-4), roi.name
    assert measured["Own"].spread != 1
    assert len({row["p"] for rows in expected.values() for row in rows}) > 10


# -- rates ------------------------------------------------------------------------------------


def test_honest_plans_are_calibrated_and_wrong_ones_are_not(garden):
    """Rates within four Monte Carlo errors of the level; a plain t of held-out values is not."""
    names = ("Other", "Brook", "Beds", "Steps", "Own", "Look")
    wrong = PLANS["Arbor"].replace("cluster", "threshold") + '\ntest = "t"'
    text = study_text(names) + f'[[roi]]\nname = "Wrong"\n{wrong}\n'
    (garden / "RATES.toml").write_text(text)
    made = {one["roi"]: one for one in told(garden / "RATES.toml", "--sets", 200, "--flips", 19)}
    for name in names[:-1]:
        one = made[name]
        level = one["expected"]
        slack = 4 * np.sqrt(level * (1 - level) / 200)
        assert level - slack - (name == "Beds") <= one["rate"] <= level + slack, name
        assert abs(one["bias"]) < 4 * one["bias_error"], name
        assert one["verdict"] in ("calibrated", "conservative"), name
    assert made["Wrong"]["rate"] > 0.15
    assert made["Wrong"]["verdict"] == "too many"
    assert abs(made["Wrong"]["bias"]) < 4 * made["Wrong"]["bias_error"]  # unbiased all the same
    look = made["Look"]
    assert look["rate"] is None and look["bias"] > 10 * look["bias_error"]
    assert look["verdict"] == "circular: biased"


def test_what_persists_in_subjects_is_found_by_plans_with_own_masks_and_is_said(garden):
    text = study_text(("Arbor", "Steps", "Own", "Group"))
    (garden / "LASTING.toml").write_text(text)
    made = list(told(garden / "LASTING.toml", "--sets", 40, "--flips", 19, "--persistent", 0.5))
    assert [(one["roi"], one["its_own_null"]) for one in made] == [
        ("Arbor", True), ("Steps", True), ("Steps", False), ("Own", True), ("Own", False),
        ("Group", True), ("Group", False),
    ]  # fmt: skip
    of = {(one["roi"], one["its_own_null"]): one for one in made}
    assert "noise without a persistent part" in of["Steps", True]["null"]
    for name in ("Steps", "Own"):
        assert of[name, False]["rate"] > 0.5 > 0.3 > of[name, True]["rate"]
        assert of[name, False]["verdict"] == "not its null"
    assert of["Group", False]["bias"] < -8 * of["Group", False]["bias_error"]  # its tail


def test_a_circular_value_is_off_as_the_largest_of_noise_are():
    """Brute force: the mean of the k largest of V normal means."""
    grid, n, k = Grid((10, 10, 5), np.eye(4)), 20, 25
    rows = Rows(tuple(map(str, range(n))), tuple(map(str, range(n))), np.ones((n, 500), bool))
    procedure = Procedure(Strongest(k, "mean"), missing=Missing(zeros=False))
    draw = Circular(NullMaps(Noise(grid, (0, 0, 0)), rows), procedure, grid)
    made = [draw(np.random.default_rng([1, i])).estimate for i in range(200)]
    brute = np.sort(np.random.default_rng(2).normal(size=(20000, 500)), axis=1)[:, -k:].mean()
    error = np.std(made) / np.sqrt(len(made))
    assert np.mean(made) == pytest.approx(brute / np.sqrt(n), abs=4 * error)


def test_the_level_that_few_flips_can_have(garden):
    roi = read_settings(garden / "STUDY.toml").rois[0]
    assert calibrate._expected(roi, 199, 7) == 6 / 128  # all 2^7 flips
    assert calibrate._expected(roi, 19, 7) == calibrate._expected(roi, 199, 20) == 0.05
    assert calibrate._expected(roi, 30, 20) == 1 / 31


@pytest.mark.parametrize(
    ("hits", "n", "said"),
    [
        (25, 500, "calibrated"), (42, 500, "too many"), (41, 500, "calibrated"),
        (10, 500, "conservative"), (3, 50, "too few sets to tell"), (12, 50, "too many"),
    ],
)  # fmt: skip
def test_verdicts(garden, hits, n, said):
    settings = read_settings(garden / "STUDY.toml")
    (one,) = calibrate.measure(settings, settings.rois[:1])
    (row,) = calibrate._rows_of(settings, settings.rois[0], one, Calibration())
    assert calibrate._verdict(row, n, hits, biased=False) == said
    assert calibrate._verdict(row, n, hits, biased=True) == f"{said}, biased"


# -- what the noise has of the study ----------------------------------------------------------


def test_smoothness_of_the_studys_maps_is_recovered_and_drawn(tmp_path):
    rng, wide = np.random.default_rng(8), (3.0, 2.0, 0.0)
    lines = ["path\tsub\trun\tsuffix\tcontrast"]
    slope = np.indices(SHAPE).sum(axis=0) * 2.0  # what all share is not taken for smoothness
    for i in range(60):
        save(tmp_path / f"{i}.nii", (smooth(rng, wide) + slope + 1).astype(np.float32))
        lines.append(f"{i}.nii\t{i:02d}\t1\tbold\tglow")
    (tmp_path / "table.tsv").write_text("\n".join(lines) + "\n")
    text = HEAD.replace('task = "lanterns"', 'contrast = "glow"')
    (tmp_path / "STUDY.toml").write_text(f'{text}[[roi]]\nname = "Look"\n{PLANS["Look"]}\n')
    (one,) = told(tmp_path / "STUDY.toml", "--sets", 2)
    assert one["fwhm_voxels"][:2] == pytest.approx(wide[:2], rel=0.05)
    assert one["fwhm_voxels"][2] < 0.7  # neighbours correlate by exp(-2 ln 2 / .7^2) = .06
    grid = Grid((24, 24, 24), np.eye(4))
    drawn = Noise(grid, one["fwhm_voxels"]).draw(rng, 20)
    found, wanted = (
        np.exp(-2 * np.log(2) / np.square(width))  # how neighbours correlate
        for width in (fwhm_of_stack(drawn, grid), np.array(one["fwhm_voxels"]))
    )
    assert found == pytest.approx(wanted, abs=0.05)


def test_runs_are_as_smooth_as_they_are_about_their_subjects_mean(garden):
    settings = read_settings(garden / "STUDY.toml")
    one = calibrate.measure(settings, settings.rois)[list(PLANS).index("Halves")]
    assert one.fwhm == pytest.approx(FWHM, rel=0.15)
    assert one.runs[:5] == ("1", "2", "1", "2", "3")


def test_rows_lack_what_the_studys_lack_and_share_what_is_said():
    subs, people = ("1", "2", "3", "4"), ("a", "b", "b", "c")
    present = np.ones((4, 400), bool)
    present[1, :7] = present[3, 100:] = False
    grid = Grid((20, 20, 1), np.eye(4))
    rows, noise = Rows(subs, people, present), Noise(grid, (0, 0, 0))
    maps = NullMaps(noise, rows, Rows(subs, people, ~present | True), persistent=0.4)
    drawn = [maps.draw(np.random.default_rng([5, i])) for i in range(60)]
    tested = np.stack([one for one, _ in drawn])
    assert np.array_equal(np.isnan(tested), np.broadcast_to(~present, tested.shape))
    both = np.concatenate([tested, np.stack([other for _, other in drawn])], axis=1)
    found = np.corrcoef(both[:, :, 10:90].transpose(1, 0, 2).reshape(8, -1))
    expected = np.eye(8)
    expected[1, 2] = expected[2, 1] = expected[5, 6] = expected[6, 5] = 0.5 * 0.6
    expected[range(4), range(4, 8)] = expected[range(4, 8), range(4)] = 0.4
    assert found == pytest.approx(expected, abs=4 / np.sqrt(4800))
    assert np.nanvar(both) == pytest.approx(1, abs=0.02)
    assert nullsets.SHARED == 0.5


def test_no_effect_of_the_study_enters(garden, tmp_path):
    """Another effect, of everybody: nothing changes but the last digits of the smoothness."""
    more = plant(tmp_path, effect=3.0)
    for folder in (garden, more):
        (folder / "EFFECT.toml").write_text(study_text(("Arbor", "Own", "Look")))
    one, two = (list(told(f / "EFFECT.toml", "--sets", 5)) for f in (garden, more))
    for here, there in zip(one, two, strict=True):
        assert here["rate"] == there["rate"]
        assert here["bias"] == pytest.approx(there["bias"], rel=1e-3)


# -- the same bytes ---------------------------------------------------------------------------


def test_processes_and_stops_change_nothing(garden, tmp_path):
    (garden / "SAME.toml").write_text(study_text(("Arbor", "Steps", "Look")))
    ask = ("calibrate", garden / "SAME.toml", "--sets", 12, "--flips", 19, "--json")
    whole = sequester(*ask).stdout
    assert sequester(*ask, "--processes", 2).stdout == whole
    keep = tmp_path / "keep"

    def stop(what, done, total):
        if what.startswith("Steps") and done == 5:
            raise KeyboardInterrupt

    settings = read_settings(garden / "SAME.toml")
    progress.listen(stop)
    with pytest.raises(KeyboardInterrupt):
        calibrate.calibrate(settings, Calibration(12, 19, keep=keep), lambda said: None)
    progress.listen(None)
    files = {path.stem: path for path in keep.glob("*.jsonl")}
    lines = {name: path.read_text().splitlines() for name, path in files.items()}
    assert {name: len(found) - 1 for name, found in lines.items()} == {
        "Arbor": 12, "Steps": 5, "Look": 2,
    }  # fmt: skip
    # A line cut short, as by a power cut, is made again; a line that is whole is not.
    files["Steps"].write_text("\n".join(lines["Steps"])[:-9])
    assert sequester(*ask, "--keep", keep, "--processes", 2).stdout == whole
    again = files["Steps"].read_text().splitlines()
    assert again[:5] == lines["Steps"][:5] and len(again) == 13
    # What is kept is not made again: a false line shows.
    files["Look"].write_text(files["Look"].read_text().replace('"estimate": 0.', '"estimate": 7.'))
    assert sequester(*ask, "--keep", keep).stdout != whole


def test_a_killed_run_leaves_no_process_and_goes_on(garden, tmp_path):
    (garden / "KILLED.toml").write_text(study_text(("Arbor",)))
    keep = tmp_path / "keep"
    ask = [garden / "KILLED.toml", "--flips", "39", "--keep", keep, "--processes", "2"]
    command = [sys.executable, "-c", "from sequester.workflows.cli import main; main()"]
    command += map(str, ["calibrate", *ask, "--sets", 2000])
    run = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)

    def n_kept():
        path = keep / "Arbor.jsonl"
        return path.read_bytes().count(b"\n") - 1 if path.exists() else 0

    def wait_for(what):
        end = time.monotonic() + 120
        while not what():
            assert time.monotonic() < end and run.poll() in (None, -signal.SIGKILL)
            time.sleep(0.05)

    wait_for(lambda: n_kept() > 3)
    children = psutil.Process(run.pid).children()
    assert len(children) == 2
    run.kill()
    run.wait()
    wait_for(lambda: not any(child.is_running() for child in children))
    n = n_kept()
    made = sequester("calibrate", *ask, "--sets", n + 1, "--json").stdout
    assert n_kept() == n + 1
    fresh = sequester("calibrate", garden / "KILLED.toml", "--flips", 39, "--sets", n + 1, "--json")
    assert made == fresh.stdout


def test_kept_sets_of_something_else_are_refused(garden, tmp_path):
    (garden / "KEPT.toml").write_text(study_text(("Arbor",)))
    ask = ("calibrate", garden / "KEPT.toml", "--sets", 2, "--keep", tmp_path / "keep", "-q")
    sequester(*ask, "--flips", 19)
    sequester(*ask, "--flips", 19)
    assert "got another flips" in sequester(*ask, "--flips", 29, code=2).stderr
    (garden / "KEPT.toml").write_text(study_text(("Arbor",)).replace("p = 0.05", "p = 0.04"))
    assert "got another inputs" in sequester(*ask, "--flips", 19, code=2).stderr
    (tmp_path / "keep" / "Arbor.jsonl").write_text("{}\nnonsense\n")
    assert "kept data sets cannot be read" in sequester(*ask, code=2).stderr


def test_kept_sets_are_of_all_that_decides_what_they_give(garden):
    """Whatever changes a row's data sets must change the digest by which they are kept."""
    settings = read_settings(garden / "STUDY.toml")
    (roi,) = [roi for roi in settings.rois if roi.name == "Own"]
    n = int(np.prod(SHAPE))

    def rows(*gaps):
        present = np.ones((2, n), bool)
        present[gaps] = False
        return Rows(("01", "02"), ("01", "02"), present)

    def place(affine):
        return Searched(Grid(SHAPE, affine), np.ones((1, n)))

    one = Measured(
        place(np.eye(4)), np.ones((1, n), int), (1,), FWHM, rows(), rows(), ("1", "1"), 1.0
    )
    outside = np.where(np.arange(n) == 5, 0.0, 1.0)[None]
    others = [
        replace(one, searched=place(np.diag([2.0, 1, 1, 1]))),
        replace(one, searched=Searched(one.searched.grid, outside)),
        replace(one, labels=one.labels + 1),
        replace(one, numbers=(2,)),
        replace(one, fwhm=(2.5, 2.0, 1.6)),
        replace(one, tested=rows(0, 7)),
        replace(one, tested=replace(one.tested, people=("01", "01"))),
        replace(one, choosing=rows(0, 7)),
        replace(one, choosing=None),
        replace(one, runs=("1", "2")),
        replace(one, spread=1.5),
    ]
    digests = [calibrate._digest(settings, roi, measured) for measured in (one, *others)]
    assert len(set(digests)) == len(digests)
    assert calibrate._digest(settings, roi, replace(one)) == digests[0]
    covered = replace(settings.maps, min_coverage=0.5)
    assert calibrate._digest(replace(settings, maps=covered), roi, one) not in digests
    middle = replace(roi, summary="median")
    assert calibrate._digest(settings, middle, one) not in digests


# -- what is asked ----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("change", "more", "message"),
    [
        ("", ["--sets", 1], "sets out of range: expected 2 or more, got 1"),
        ("", ["--flips", 5], "flips out of range: expected 19 or more"),
        ("", ["--persistent", 1], "persistent out of range: expected 0 or more, below 1"),
        ("", ["--roi", "Pond"], "no such region: expected one of Steps, got 'Pond'"),
        ('grids = "own"\n', [], 'grids = "own" cannot be simulated (roi Steps)'),
    ],
)
def test_what_cannot_be_asked(garden, change, more, message):
    (garden / "WRONG.toml").write_text(
        study_text(("Steps",)).replace("[[roi]]", f"{change}[[roi]]")
    )
    done = sequester("calibrate", garden / "WRONG.toml", "-q", *more, code=2)
    assert message in done.stderr
    assert done.stdout == ""


def test_maps_without_a_smoothness_are_refused(tmp_path):
    lines = ["path\tsub\trun\tsuffix\tcontrast"]
    for i in range(6):
        save(tmp_path / f"{i}.nii", np.full(SHAPE, i + 1.0, np.float32))
        lines.append(f"{i}.nii\t{i:02d}\t1\tbold\tglow")
    (tmp_path / "table.tsv").write_text("\n".join(lines) + "\n")
    text = HEAD.replace('task = "lanterns"', 'contrast = "glow"')
    (tmp_path / "STUDY.toml").write_text(f'{text}[[roi]]\nname = "Look"\n{PLANS["Look"]}\n')
    done = sequester("calibrate", tmp_path / "STUDY.toml", "-q", code=2)
    assert "maps too smooth to simulate (roi Look): expected a FWHM of up to 30" in done.stderr


def test_a_stop_counts_as_empty_and_the_time_is_told_first(garden):
    stop = PLANS["Arbor"].replace("p = 0.05", "p = 0.0001").replace('"strongest"\nk = 5', '"stop"')
    (garden / "STOP.toml").write_text(f'{HEAD}[[roi]]\nname = "Stop"\n{stop}\n')
    done = sequester("calibrate", garden / "STOP.toml", "--sets", 4, "--flips", 19)
    assert re.search(r"2 data sets to make: about \d+ s\n", done.stderr)
    said = " ".join(done.stdout.split())
    for words in (
        "Where the plan would stop, the mask counts as empty.",
        "7 subjects", "8 maps, those of one exchange label 50% alike", "of the values missing",
        "jointly symmetric about zero over the search region 'bed'", "no look at its results",
        "too few sets to tell",
    ):  # fmt: skip
        assert words in said
    with pytest.raises(InputError, match="--keep is a file"):
        calibrate.calibrate(
            read_settings(garden / "STOP.toml"),
            Calibration(2, keep=garden / "table.tsv"),
            lambda said: None,
        )


def test_the_help_says_that_it_is_no_look():
    said = " ".join(sequester("calibrate", "--help").stdout.split())
    assert "no effect is looked at, and this never counts as a look" in said
    page = PAGE.read_text()
    names = [name for p in main.commands["calibrate"].params for name in p.opts if name[:2] == "--"]
    assert [name for name in names if f"`{name}" not in page] == []


def test_the_page_shows_what_the_commands_say(tmp_path, monkeypatch):
    demo.write_demo(tmp_path)
    monkeypatch.chdir(tmp_path)
    blocks = re.findall(r"```console\n\$ sequester (.*?)\n(.*?)```", PAGE.read_text(), re.S)
    assert len(blocks) >= 2
    for command, answer in blocks:
        assert sequester(*shlex.split(command)).stdout.startswith(answer)
