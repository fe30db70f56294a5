"""Power: closed forms against published numbers and statsmodels, plans against simulation."""

import json
import math
import re
import shlex
import shutil
import xml.etree.ElementTree as ET
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from click.testing import CliRunner
from scipy import ndimage, optimize, stats
from sequester.nodes import power, simulated
from sequester.nodes.errors import InputError
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.heldout import _words
from sequester.nodes.masks import Cluster, Strongest, Threshold
from sequester.nodes.models import Groups, Score
from sequester.nodes.power import Correlation, OneSample, Repeated, TwoSample
from sequester.nodes.procedure import Procedure
from sequester.nodes.smoothness import fwhm_of_stack
from sequester.nodes.space import Grid
from sequester.workflows import trials
from sequester.workflows.cli import main
from sequester.workflows.curves import Curve, curves_svg
from sequester.workflows.planning import plan_test
from sequester.workflows.settings import read_settings
from statsmodels.stats.power import FTestAnovaPower, TTestIndPower, TTestPower

PAGE = Path(__file__).parent.parent / "docs" / "power.md"
SVG = "{http://www.w3.org/2000/svg}"
GRID = Grid((8, 8, 8), np.diag([3.0, 3.0, 3.0, 1.0]))


# -- closed forms -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("test", "effect", "n", "expected"),
    [
        # R 4.2's and scipy's noncentral t and F; the correlations by numerical integration.
        (OneSample(), 0.5, 20, 0.5645044),
        (OneSample(), 0.5, 12, 0.3528241),
        (Correlation(), 0.5, 29, 0.81394),
        (Correlation(), 0.3, 84, 0.80034),
        # Cohen (1988), chapter 8: lambda = f^2 N m / (1 - rho) = 10.
        (Repeated(4), 0.25, 20, 0.7288426),
        # Two levels are a paired t-test at d = f sqrt(2 m / (1 - rho)) / 2.
        (Repeated(2), 0.25, 20, 0.5645044),
    ],
)
def test_power_is_what_the_reference_says(test, effect, n, expected):
    digits = len(str(expected)) - 2
    assert test.at(effect, n).power == pytest.approx(expected, rel=1e-6, abs=0.51 * 10**-digits)


def test_the_effect_ten_subjects_find():
    # With ten subjects only effects of about one standard deviation are found four times in five.
    assert power.effect_for(OneSample(), 10, 0.8) == pytest.approx(0.9960007, rel=1e-6)


@pytest.mark.parametrize(
    ("d", "exact", "printed"), [(0.2, 393.4057, 393), (0.5, 63.76561, 64), (0.8, 25.52457, 26)]
)
def test_two_sample_sizes_are_cohens(d, exact, printed):
    # Cohen (1988), table 2.4.1, prints the whole numbers.
    n = power.n_for(TwoSample(), d, 0.8)
    assert n == pytest.approx(exact, rel=1e-6)
    assert round(n) == printed


@pytest.mark.parametrize(("d", "n"), [(0.2, 300), (0.5, 12), (1.0, 2), (3.0, 4), (0.05, 50)])
@pytest.mark.parametrize("alpha", [0.05, 0.001])
def test_t_tests_agree_with_statsmodels(d, n, alpha):
    for sides, word in ((2, "two-sided"), (1, "larger")):
        one = TTestPower().power(d, n, alpha, alternative=word)
        two = TTestIndPower().power(d, n, alpha, alternative=word)
        assert OneSample(alpha, sides).at(d, n).power == pytest.approx(one, rel=1e-8)
        assert TwoSample(alpha, sides).at(d, n).power == pytest.approx(two, rel=1e-8)


def test_the_f_test_agrees_with_scipy():
    for levels, n, f in ((2, 5, 0.1), (3, 12, 0.4), (5, 200, 0.3)):
        df = levels - 1
        critical = stats.f.isf(0.05, df, (n - 1) * df)
        expected = stats.ncf.sf(critical, df, (n - 1) * df, f * f * n * levels / 0.7)
        assert Repeated(levels, 0.3).at(f, n).power == pytest.approx(expected, rel=1e-7)
    critical = stats.f.isf(0.05, 2.1, 19 * 2.1)
    expected = stats.ncf.sf(critical, 2.1, 19 * 2.1, 0.25**2 * 20 * 4 * 0.7 / 0.5)
    assert Repeated(4, epsilon=0.7).at(0.25, 20).power == pytest.approx(expected, rel=1e-7)
    # Between subjects statsmodels knows the same noncentrality: f^2 N.
    critical = stats.f.isf(0.05, 2, 57)
    assert FTestAnovaPower().power(0.4, 60, 0.05, 3) == pytest.approx(
        stats.ncf.sf(critical, 2, 57, 0.16 * 60), rel=1e-7
    )


@pytest.mark.parametrize(("row", "digits"), [(0, None), (1, None), (2, None), (3, None), (4, None)])
def test_errors_of_an_estimate_are_gelman_and_carlins(checks, row, digits):
    # Gelman & Carlin (2014), Perspect Psychol Sci 9:641-651; three of them are in the paper.
    effect, error, expected, type_s, type_m = checks["retrodesign"][row]
    made = power.estimate_errors(effect, error)
    assert made.power == pytest.approx(expected, rel=2e-6)
    assert made.type_s == pytest.approx(type_s, rel=5e-5)
    assert made.type_m == pytest.approx(type_m, rel=2e-6)


def test_exaggeration_follows_power():
    # The shape of Button et al. (2013), Nat Rev Neurosci 14:365-376.
    for wanted, expected in ((0.1, 3.71269), (0.2, 2.25724), (0.5, 1.40712), (0.8, 1.12491)):
        effect = optimize.brentq(
            lambda e, wanted=wanted: power.estimate_errors(e, 1).power - wanted, 1e-6, 9
        )
        assert power.estimate_errors(effect, 1).type_m == pytest.approx(expected, abs=5.1e-6)


def test_a_significant_d_is_too_large():
    made = OneSample().at(0.5, 20)
    assert made.type_m == pytest.approx(1.385216, rel=1e-6)
    # The same of f with two levels: |t| is the root of F.
    assert Repeated(2).at(0.25, 20).type_m == pytest.approx(made.type_m, rel=1e-10)


@pytest.mark.parametrize("sides", [1, 2])
def test_errors_are_those_of_drawn_samples(sides):
    rng = np.random.default_rng(3)
    x = rng.standard_normal((200_000, 12)) + 0.4
    d = x.mean(axis=1) / x.std(axis=1, ddof=1)
    r = np.array([0.4])
    made = OneSample(0.05, sides).at(0.4, 12)
    hit = (np.abs(d) if sides == 2 else d) > made.smallest
    assert hit.mean() == pytest.approx(made.power, abs=4 * np.sqrt(0.25 / len(d)))
    assert np.abs(d[hit]).mean() / 0.4 == pytest.approx(made.type_m, rel=0.01)
    assert (d[hit] < 0).mean() == pytest.approx(made.type_s, abs=0.001)
    y, z = rng.standard_normal((2, 100_000, 10))
    z = r * y + np.sqrt(1 - r**2) * z
    y, z = (v - v.mean(axis=1, keepdims=True) for v in (y, z))
    r = (y * z).sum(axis=1) / np.sqrt((y * y).sum(axis=1) * (z * z).sum(axis=1))
    made = Correlation(0.05, sides).at(0.4, 10)
    hit = (np.abs(r) if sides == 2 else r) > made.smallest
    assert hit.mean() == pytest.approx(made.power, abs=4 * np.sqrt(0.25 / len(r)))
    assert np.abs(r[hit]).mean() / 0.4 == pytest.approx(made.type_m, rel=0.01)
    assert (r[hit] < 0).mean() == pytest.approx(made.type_s, abs=0.002)


def test_the_smallest_significant_effects():
    assert power.smallest_r(20, 0.001) == pytest.approx(0.6787811, rel=1e-6)  # from the t table
    assert OneSample().at(0, 9).smallest == pytest.approx(stats.t.isf(0.025, 8) / 3)
    # An effect is as significant as its test says.
    for test in (OneSample(), TwoSample(), Correlation(), Repeated(3)):
        assert test.at(0, 15).power == pytest.approx(0.05, rel=1e-9)


def test_sizes_and_effects_solve_their_power():
    for test in (OneSample(0.01), TwoSample(sides=1), Correlation(), Repeated(3, 0.2, 0.7)):
        n = power.n_for(test, 0.35, 0.9)
        assert test.at(0.35, n).power == pytest.approx(0.9, rel=1e-9)
        assert power.effect_for(test, n, 0.9) == pytest.approx(0.35, rel=1e-8)


def test_the_interval_of_dz(checks):
    # R 4.2: noncentral t limits for Student's sleep data (Student 1908).
    assert power.dz_interval(checks["sleep"]["dz"], 10) == pytest.approx(
        checks["sleep"]["dz_ci"], rel=1e-6
    )
    for dz, n in ((0.0, 12), (0.02, 5), (3.0, 400)):
        low, high = power.dz_interval(dz, n)
        for share, end in ((0.975, low), (0.025, high)):
            assert stats.nct.cdf(dz * n**0.5, n - 1, end * n**0.5) == pytest.approx(share)
    low, high = power.dz_interval(-0.5, 30)
    assert (low, high) == pytest.approx([-x for x in power.dz_interval(0.5, 30)][::-1])


def test_inflation_is_what_noise_reads():
    # h(u) = phi(u) / p
    for p, expected in ((0.05, 2.0627128), (0.01, 2.6652142), (0.001, 3.3670901)):
        assert power.selected_mean(p) == pytest.approx(expected, rel=1e-7)
    z = np.random.default_rng(1).standard_normal((20, 400_000))
    mean = z.mean(axis=0)
    chosen = mean * np.sqrt(20) > stats.norm.isf(0.01)
    assert power.circular_inflation(0.01, 20) == pytest.approx(mean[chosen].mean(), rel=0.01)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: OneSample(alpha=0.7), "alpha out of range: expected above 0, below 0.5, got 0.7"),
        (lambda: OneSample(sides=3), "sides out of range: expected 1 or 2, got 3"),
        (lambda: OneSample().at(-0.1, 9), "effect out of range: expected 0 or more, got -0.1"),
        (lambda: OneSample().at(0.1, 1), "too few subjects: expected 2 or more, got 1"),
        (lambda: Correlation().at(1.0, 9), "effect out of range: expected 0 or more, below 1"),
        (lambda: power.n_for(OneSample(), 0, 0.8), "effect out of range: expected above 0, got 0"),
        (lambda: power.n_for(OneSample(), 1e-6, 0.8), "no such number of subjects"),
        (lambda: power.n_for(OneSample(), 1, 1), "power out of range"),
        (lambda: power.effect_for(OneSample(), 9, 0.04), "power out of range: expected above 0.05"),
        (lambda: Repeated(1), "too few levels: expected 2 or more, got 1"),
        (lambda: Repeated(4, epsilon=0.3), "epsilon out of range: expected 0.333 to 1, got 0.3"),
        (lambda: Repeated(4, rho=-0.4), "rho out of range: expected above -0.333, below 1"),
        (lambda: power.circular_inflation(0.5, 9), "p out of range"),
        (lambda: power.estimate_errors(1, 0), "effect or error out of range"),
    ],
)
def test_what_cannot_be_is_an_error(call, message):
    with pytest.raises(InputError, match=re.escape(message)):
        call()


# -- simulated plans --------------------------------------------------------------------------


@pytest.mark.parametrize("fwhm", [(0.0, 0.0, 0.0), (1.0, 2.0, 3.0)])
def test_noise_is_as_smooth_as_asked_and_has_variance_one(fwhm):
    inside = ndimage.generate_binary_structure(3, 1)
    inside = ndimage.binary_dilation(np.pad(inside, 8), iterations=7)
    grid = Grid(inside.shape, np.eye(4), inside)
    x = simulated.Noise(grid, fwhm).draw(np.random.default_rng(2), 120)
    assert x.var() == pytest.approx(1, abs=0.03)
    # Independent voxels read as up to 0.6: neighbours correlate a little by chance.
    assert fwhm_of_stack(x, grid) == pytest.approx(fwhm, abs=0.12 if any(fwhm) else 0.65)
    # The box wraps around, the search region must not: its far ends are independent.
    ends = [x[:, 0], x[:, -1]]
    assert abs(np.corrcoef(*ends)[0, 1]) < 4 / np.sqrt(120)


def world(effect=0.0, share=0.2, fwhm=0.0, **more):
    return simulated.World(GRID, simulated.Noise(GRID, (fwhm,) * 3), effect, share, **more)


def many(trial, n=100):
    return simulated.summarised([trial(i, np.random.default_rng([9, i])) for i in range(n)])


PLANS = {
    "leave-one-out cluster": Procedure(Cluster(p=0.05)),
    "five folds": Procedure(Threshold(p=0.05), KFold(5), tail="negative"),
    "strongest": Procedure(Strongest(20), KFold(4)),
}
LABELS = [f"{i:02}" for i in range(12)]


@pytest.mark.parametrize("name", PLANS)
def test_held_out_plans_have_their_level_and_no_bias(name):
    made = many(
        lambda i, rng: simulated.cross_fitted_trial(
            PLANS[name], world(fwhm=1.5), LABELS, 39, i, 0.05, rng
        ),
        60,
    )
    assert made.truth == 0
    assert made.power <= 0.05 + 4 * np.sqrt(0.05 * 0.95 / made.n_sets)
    assert abs(made.bias) < 4 * made.bias_error
    found = many(
        lambda i, rng: simulated.cross_fitted_trial(
            PLANS[name], world(1.5), LABELS, 19, i, 0.05, rng
        ),
        30,
    )
    assert found.power > 0.9
    assert 1 < found.truth <= 1.5
    assert abs(found.bias) < 4 * found.bias_error


def test_a_circular_region_is_biased_by_what_the_formula_says():
    # inference.md's simulation and the truncated normal: h / sqrt(N) = .596 at p < .01, N = 20.
    made = many(
        lambda _, rng: simulated.circular_trial(Procedure(Threshold(p=0.01)), world(), 20, rng)
    )
    assert made.power == 0
    # The rule thresholds t, the formula z: t asks a little less of the mean.
    assert made.bias == pytest.approx(power.circular_inflation(0.01, 20), rel=0.08)


def test_masks_of_ones_own_find_what_persists_and_are_unbiased_about_it():
    plan = Procedure(Strongest(20, "mean"), LeaveOneOut(2))
    made = many(
        lambda _, rng: simulated.own_masks_trial(
            plan, world(run_variance=1.0), [3, 4] * 5, 0.05, rng
        ),
        60,
    )
    assert made.truth > 0.5
    assert abs(made.bias) < 4 * made.bias_error
    # Without any such part of the subjects (all variance is the runs'), it has its level.
    most = 1 / np.mean([1 / 3, 1 / 4])
    null = many(
        lambda _, rng: simulated.own_masks_trial(
            plan, world(run_variance=most), [3, 4] * 5, 0.05, rng
        )
    )
    assert null.power <= 0.05 + 4 * np.sqrt(0.05 * 0.95 / null.n_sets)
    assert abs(null.bias) < 4 * null.bias_error


def test_a_group_mask_of_the_same_people_is_biased_by_r_h():
    # inference.md: bias = r h(u) group standard errors.
    plan, r = Procedure(Threshold(p=0.01)), 0.5

    def trial(**more):
        return many(
            lambda _, rng: simulated.localizer_trial(
                plan, world(alike=r), 20, 0.05, rng, group_mask=True, **more
            )
        )

    same = trial(of_population=True)
    assert same.bias == pytest.approx(r * power.circular_inflation(0.01, 20), rel=0.15)
    assert same.power > 0.3
    assert abs(trial().bias) < 4 * same.bias_error  # about these subjects it is right
    other = trial(others=15)
    assert abs(other.bias) < 4 * other.bias_error
    assert other.power <= 0.05 + 4 * np.sqrt(0.05 * 0.95 / other.n_sets)


def test_power_of_a_known_region_is_the_formulas():
    # All of the search region is chosen, and the effect is everywhere: one value per subject.
    plan = Procedure(Strongest(8), KFold(2))
    small = simulated.World(
        Grid((2, 2, 2), np.eye(4)), simulated.Noise(Grid((2, 2, 2), np.eye(4)), (0,) * 3), 0.3, 1.0
    )
    made = many(lambda i, rng: simulated.cross_fitted_trial(plan, small, LABELS, 39, i, 0.05, rng))
    expected = OneSample(sides=1).at(0.3 * np.sqrt(8), 12)
    assert made.power == pytest.approx(expected.power, abs=4 * made.power_error)
    assert made.truth == pytest.approx(0.3)


# -- a study ----------------------------------------------------------------------------------

STUDY = """[study]
name = "lanterns"
table = "table.tsv"
seed = 3

[data]
select = { task = "dusk" }

[[roi]]
name = "Arbor"
plan = "k-fold"
folds = 4
search = { mask = "arbor.nii.gz", origin = "drawn beforehand" }
rule = { kind = "threshold", p = 0.05 }
flips = 99

[[roi]]
name = "Brook"
plan = "a-priori"
region = { mask = "arbor.nii.gz", origin = "drawn beforehand" }

[[roi]]
name = "ArborLook"
plan = "exploratory"
search = { mask = "arbor.nii.gz", origin = "drawn beforehand" }
rule = { kind = "threshold", p = 0.05 }

[[roi]]
name = "Cinder"
plan = "leave-one-run-out"
search = { mask = "arbor.nii.gz", origin = "drawn beforehand" }
rule = { kind = "strongest", k = 20, map = "mean" }

[[roi]]
name = "Meadow"
plan = "localizer"
choose_on = { task = "dawn" }
search = { mask = "arbor.nii.gz", origin = "drawn beforehand" }
rule = { kind = "strongest", k = 20, map = "mean" }
"""
FWHM, ALIKE = 2.0, 0.6


@pytest.fixture(scope="module")
def study(tmp_path_factory):
    """A study of 12 subjects in two tasks with two runs each, and what its noise is made of."""
    folder = tmp_path_factory.mktemp("garden") / "study"
    folder.mkdir()
    rng, affine = np.random.default_rng(8), np.diag([3.0, 3.0, 3.0, 1.0])
    grid = Grid((12, 12, 12), affine)
    noise = simulated.Noise(grid, (FWHM,) * 3)
    lines = ["path\tsub\ttask\trun\tsuffix\tcontrast"]
    for i in range(12):
        shared = noise.draw(rng, 1)[0]
        for task in ("dusk", "dawn"):
            own = np.sqrt(ALIKE) * shared + np.sqrt(1 - ALIKE) * noise.draw(rng, 1)[0]
            for run in (1, 2):
                name = f"{i:02}_{task}_{run}.nii"
                data = 5 * (own + 0.5 * noise.draw(rng, 1)[0])
                nib.save(nib.Nifti1Image(grid.filled(data), affine), folder / name)
                lines.append(f"{name}\t{i:02}\t{task}\t{run}\tbold\tamberMinusTeal")
    (folder / "table.tsv").write_text("\n".join(lines) + "\n")
    inside = np.zeros(grid.shape, np.uint8)
    inside[2:10, 2:10, 3:9] = 1
    nib.save(nib.Nifti1Image(inside, affine), folder / "arbor.nii.gz")
    (folder / "STUDY.toml").write_text(STUDY)
    return folder


def sequester(*arguments, code=0):
    done = CliRunner().invoke(main, [str(a) for a in arguments])
    assert done.exit_code == code, done.output + repr(done.exception)
    return done


def test_what_the_study_says_of_its_noise_is_what_it_was_made_of(study):
    settings = read_settings(study / "STUDY.toml")
    rois = {roi.name: roi for roi in settings.rois}
    arbor = trials._measure(settings, rois["Arbor"])
    assert arbor.grid.n_features == 8 * 8 * 6
    assert arbor.fwhm == pytest.approx((FWHM,) * 3, abs=0.25)
    assert len(arbor.people) == 12
    cinder = trials._measure(settings, rois["Cinder"])
    # A run's noise has .25, the averages of two 1 + .25 / 2.
    assert cinder.run_variance == pytest.approx(0.25 / 1.125, rel=0.15)
    assert cinder.runs == (2,) * 12
    meadow = trials._measure(settings, rois["Meadow"])
    assert meadow.alike == pytest.approx(ALIKE / 1.125, abs=0.1)
    assert meadow.choosing_sd == pytest.approx(5 * np.sqrt(1.125), rel=0.1)


def test_a_study_is_simulated_to_the_same_bytes_and_each_region_by_itself(study, tmp_path):
    asked = ["power", study / "STUDY.toml", "--effect", 1, "--sets", 20, "--json", "--share", 0.3]
    first = sequester(*asked).stdout
    assert sequester(*asked).stdout == first
    told = {one["roi"]: one for one in json.loads(first)["planned"]}
    assert list(told) == ["Arbor", "Brook", "ArborLook", "Cinder", "Meadow"]
    assert {one["n"] for one in told.values()} == {12}
    assert told["Arbor"]["power"] > 0.8
    assert told["Brook"]["power"] == OneSample().at(1, 12).power
    assert told["ArborLook"]["power"] is None
    assert told["ArborLook"]["bias"] > 0.03
    for name in ("Arbor", "Cinder", "Meadow"):
        assert abs(told[name]["bias"]) < 4 * told[name]["bias_error"]
    alone = json.loads(sequester(*asked, "--roi", "Arbor", "--n", 12, "--n", 6).stdout)["planned"]
    assert alone[0] == told["Arbor"]
    assert alone[1]["power"] < alone[0]["power"]
    other = json.loads(sequester(*asked, "--roi", "Arbor", "--seed", 4).stdout)["planned"]
    assert other[0]["estimate"] != told["Arbor"]["estimate"]


def test_folds_that_choose_on_another_task_are_simulated_so(study):
    """A region found on maps of dawn and read on those of dusk, which go with them."""
    region = 'search = { mask = "arbor.nii.gz", origin = "drawn beforehand" }\n'
    region += 'rule = { kind = "strongest", k = 20 }\nplan = "k-fold"\nfolds = 4\n'
    (study / "TASKS.toml").write_text(
        f'{STUDY.split("[[roi]]", 1)[0]}[[roi]]\nname = "Pond"\n{region}'
        f'choose_on = {{ task = "dawn" }}\n[[roi]]\nname = "Same"\n{region}'
    )
    settings = read_settings(study / "TASKS.toml")
    labels, asked = [f"{i:05d}" for i in range(12)], trials.Simulation(effect=0.8, n_flips=19)
    for roi, other in zip(settings.rois, (True, False), strict=True):
        measured = trials._measure(settings, roi)
        assert measured.alike == pytest.approx(other * ALIKE / 1.125, abs=0.1)
        world = simulated.World(
            measured.grid, simulated.Noise(measured.grid, measured.fwhm), 0.8, 0.1, measured.alike
        )
        made = trials._trial(roi, measured, world, 12, asked)(7, np.random.default_rng(1))
        expected, unlike = (
            simulated.cross_fitted_trial(
                roi.procedure, world, labels, 19, 7, 0.05, np.random.default_rng(1), other_maps=maps
            )
            for maps in (other, not other)
        )
        assert made == expected != unlike


def test_the_text_names_what_the_numbers_rest_on(study):
    said = sequester(
        "power", study / "STUDY.toml", "--effect", 1, "--sets", 5, "--flips", 19, "-q"
    ).stdout
    said = " ".join(said.split())
    for words in (
        "Simulated: 5 data sets a row",
        "19 flips, seed 3",
        "Arbor: 384 voxels searched, FWHM",
        "Brook: by formula (one-sample t, two-sided)",
        "ArborLook: 384 voxels searched",
        "circular: no test and no power, the bias alone",
        "what persists in a subject is found too",
        "maps that choose and maps that are tested correlate 0.",
    ):
        assert words in said


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--effect", "-1"], "effect out of range: expected 0 or more, got -1"),
        ([], "no effect to plan on: give --effect D"),
        (["--effect", "1", "--n", "2"], "n out of range: expected 3 or more, got 2"),
        (["--effect", "1", "--share", "0"], "share out of range: expected above 0, at most 1"),
        (["--effect", "1", "--flips", "9"], "too few flips for this alpha: expected at least 19"),
        (["--effect", "1", "--roi", "Pond"], "no such region: expected one of Arbor, Brook"),
        (["--effect", "1", "--sides", "1"], "--sides does not go with STUDY.toml: leave it out"),
        (["--effect", "1", "--test", "paired"], "power needs one thing to plan on"),
        (
            ["--effect", "1", "--roi", "Arbor", "--n", "3"],
            "too few subjects for 4 folds: expected at least 4, got 3",
        ),
    ],
)
def test_what_a_study_cannot_be_asked(study, arguments, message):
    done = sequester("power", study / "STUDY.toml", "-q", *arguments, code=2)
    assert message in done.stderr
    assert done.stdout == ""


def test_own_grids_are_not_simulated(study, tmp_path):
    copy = Path(shutil.copytree(study, tmp_path / "study"))
    text = (copy / "STUDY.toml").read_text()
    head, *regions = text.split("[[roi]]")
    (copy / "STUDY.toml").write_text(f'{head}grids = "own"\n[[roi]]{regions[3]}')
    done = sequester("power", copy / "STUDY.toml", "--effect", 1, "-q", code=2)
    assert 'grids = "own" cannot be simulated' in done.stderr


def test_what_tests_no_mean_is_left_out_by_name_and_refused_alone(study, tmp_path):
    copy = Path(shutil.copytree(study, tmp_path / "study"))
    text = (copy / "STUDY.toml").read_text()
    head, arbor, brook, *_ = text.split("[[roi]]")
    groups = arbor.replace("Arbor", "Sides") + (
        'compare = { column = "shift", first = "early", second = "late" }\n'
    )
    score = arbor.replace("Arbor", "Skilled") + 'score = "skill"\n'
    (copy / "STUDY.toml").write_text("[[roi]]".join([head, groups, brook, score]))
    head, *lines = (copy / "table.tsv").read_text().splitlines()
    cells = [(line, int(line[:2])) for line in lines]
    lines = [f"{line}\t{'late' if i % 2 else 'early'}\t{i * i % 7}" for line, i in cells]
    (copy / "table.tsv").write_text("\n".join([f"{head}\tshift\tskill", *lines]) + "\n")
    asked = ["power", copy / "STUDY.toml", "--effect", 1, "-q"]
    made = json.loads(sequester(*asked, "--json").stdout)
    told = {one["roi"]: one for one in made["planned"]}
    assert told["Brook"]["power"] == OneSample().at(1, 12).power
    for name, what, test in (
        ("Sides", "a comparison of early and late", "two-sample"),
        ("Skilled", "a correlation with skill", "correlation"),
    ):
        why = f"{what}; by formula: sequester power --test {test}"
        assert told[name] == {"roi": name, "plan": "k-fold", "refused": why}
        assert f"{name}: not simulated. It is {why}." in made["notes"]
        said = " ".join(sequester(*asked, "--roi", name, code=2).stderr.split())
        assert f"no region that can be simulated (roi {name}): expected a test of one mean" in said
        assert f"got {why}" in said
    shown = sequester(*asked).stdout
    assert "\nBrook " in shown and "\nSides " not in shown.partition("Simulated")[0]


# -- an earlier run ---------------------------------------------------------------------------

COLUMNS = [
    "roi", "plan", "parcel", "parcel_name", "n_subjects", "estimate", "biased", "claim",
    "interval_low", "interval_high", "interval_kind", "p", "p_kind", "dz", "target",
]  # fmt: skip
FLIPS = "whole-procedure sign flip, 999 random flips"
T = "Student's t, two-sided"
ROWS = [
    ["Arbor", "k-fold", "n/a", "n/a", "24", "1.2", "false", "population", "0.6", "1.8",
     "approximate", "0.001", FLIPS, "0.8"],
    ["Brook", "a-priori", "n/a", "n/a", "10", "-1.58", "false", "population", "-2.46", "-0.7",
     "exact", "0.003", T, "-1.28455756259105"],
    ["Cinder", "k-fold", "n/a", "n/a", "24", "0.2", "false", "population", "-0.3", "0.7",
     "approximate", "0.2", FLIPS, "0.2"],
    ["ArborLook", "exploratory", "n/a", "n/a", "24", "1.9", "true", "population", "n/a", "n/a",
     "n/a", "n/a", "n/a", "n/a"],
    ["Meadow", "localizer", "n/a", "n/a", "24", "1.9", "false", "these subjects", "1", "2.8",
     "exact", "0.001", T, "1"],
    ["Pond", "given-folds", "n/a", "n/a", "24", "1.9", "false", "population", "1", "2.8",
     "approximate", "n/a", "n/a", "n/a"],
    ["Sides", "k-fold", "n/a", "n/a", "24", "1.9", "false", "population", "1", "2.8",
     "approximate", "0.01", FLIPS, "n/a"],
    ["Skilled", "k-fold", "n/a", "n/a", "24", "0.5", "false", "population", "0.1", "0.7",
     "approximate", "0.01", FLIPS, "n/a"],
    ["Hole", "k-fold", "n/a", "n/a", "24", "1.9", "false", "population", "n/a", "n/a",
     "n/a", "0.01", FLIPS, "n/a"],
]  # fmt: skip
TARGETS = {
    "Sides": _words(Groups((("a", "late"), ("b", "early")), "late", "early"), "ab").target,
    "Skilled": _words(Score((("a", 1.0), ("b", 2.0)), name="skill"), "ab").target,
}


@pytest.fixture
def results(tmp_path):
    def written(rows=ROWS):
        about = [[*row, TARGETS.get(row[0], "mean true effect")] for row in rows]
        lines = ["\t".join(row) for row in [COLUMNS, *about]]
        (tmp_path / "roi_tests.tsv").write_text("\n".join(lines) + "\n")
        return tmp_path

    return written


def test_a_new_study_is_planned_on_held_out_effects_and_their_lower_ends(results):
    told = json.loads(sequester("power", "--from", results(), "--json").stdout)["planned"]
    told = {one["roi"]: one for one in told}
    arbor = told["Arbor"]
    # The values' sd is 1.2 / .8 = 1.5.
    assert (arbor["dz"], arbor["dz_low"]) == pytest.approx((0.8, 0.4))
    for one, (effect, wanted) in zip(
        arbor["basis"], [(0.8, 0.8), (0.8, 0.9), (0.4, 0.8), (0.4, 0.9)], strict=True
    ):
        n = TTestPower().solve_power(effect, power=wanted, alpha=0.05)
        assert one["n"] == math.ceil(n)
        assert one["power"] >= wanted > OneSample().at(effect, one["n"] - 1).power
        assert one["type_m"] > 1
    # Student's sleep data with their sign turned: the noncentral t interval, not the mean's.
    assert told["Brook"]["dz_low"] == pytest.approx(0.4146278, rel=1e-6)
    # An interval that includes 0 is no basis; the estimate still is.
    assert told["Cinder"]["dz_low"] == pytest.approx(-0.3)
    assert {one["kind"] for one in told["Cinder"]["basis"]} == {"held-out dz"}
    assert "inflated by selection" in told["ArborLook"]["refused"]
    assert "about these subjects only" in told["Meadow"]["refused"]
    assert told["Pond"]["refused"] == "not tested"
    by = "which has no dz; by formula: sequester power --test"
    assert told["Sides"]["refused"] == f"a comparison of groups, {by} two-sample"
    assert told["Skilled"]["refused"] == f"a correlation, {by} correlation"
    assert told["Hole"]["refused"] == "without an effect size"
    said = " ".join(sequester("power", "--from", results()).stdout.split())
    assert "none: includes 0" in said
    assert "ArborLook: refused as a basis. It is exploratory" in said


@pytest.mark.parametrize(
    ("spoil", "more", "message"),
    [
        (lambda rows: rows, ["--roi", "ArborLook"], "no result that a sample may be planned on"),
        (lambda rows: rows, ["--roi", "Hill"], "expected one of Arbor, Brook, Cinder"),
        (lambda rows: [[*rows[0][:5], "much", *rows[0][6:]]], [], "estimate is no number"),
        (lambda rows: [row[:3] for row in rows], [], "estimate is no number"),
        (lambda rows: rows, ["--effect", "1"], "--effect does not go with --from: leave it out"),
    ],
)
def test_what_is_no_basis(results, spoil, more, message):
    done = sequester("power", "--from", results(spoil(ROWS)), *more, code=2)
    assert message in done.stderr


def test_a_folder_without_results(tmp_path):
    assert "no results here" in sequester("power", "--from", tmp_path, code=2).stderr
    (tmp_path / "roi_tests.tsv").write_text("roi\tplan\nArbor\tk-fold\n")
    assert "roi_tests.tsv lacks columns" in sequester("power", "--from", tmp_path, code=2).stderr


# -- command, figure, page --------------------------------------------------------------------


def test_two_of_three_are_needed():
    for given in ((0.5, [], None), (0.5, [20], 0.8), (None, [20], None)):
        with pytest.raises(InputError, match="expected two of --effect, --n and --power"):
            plan_test("paired", *given)
    made = plan_test("paired", 0.5, [], 0.8).records[0]
    assert made["n"] == math.ceil(TTestPower().solve_power(0.5, power=0.8, alpha=0.05))
    assert made["power"] >= 0.8
    with pytest.raises(InputError, match="an F-test has no sides"):
        plan_test("repeated", 0.5, [20], None, sides=1)
    assert "Approximate" in plan_test("repeated", 0.5, [20], None, levels=3, epsilon=0.6).notes[0]
    assert "Approximate" not in plan_test("repeated", 0.5, [20], None, levels=3).notes[0]


def test_no_infinity_reaches_json():
    said = sequester("power", "--test", "paired", "--effect", 1, "--n", 2, "--json").stdout
    (one,) = json.loads(said, parse_constant=pytest.fail)["planned"]
    assert one["type_m"] is None


def marks(svg, curve):
    """Where the points of a curve are drawn: those of its line."""
    (group,) = [e for e in ET.fromstring(svg).iter() if e.get("id") == curve]
    drawn = group.find(f"{SVG}path").get("d")
    return [tuple(map(float, xy)) for xy in re.findall(r"[ML] ([\d.]+) ([\d.]+)", drawn)]


def test_the_figure_shows_the_numbers(tmp_path):
    path = tmp_path / "inflation.svg"
    sequester("power", "--inflation", "--p", 0.01, "--n", 12, "--n", 60, "--figure", path)
    ticks = {}
    for group in ET.parse(path).iter(f"{SVG}g"):
        if group.get("id", "").startswith("ytick"):
            at, said = (next(group.iter(f"{SVG}{tag}")) for tag in ("use", "text"))
            ticks[float(said.text)] = float(at.get("y"))
    zero, one = ticks[0], max(ticks)
    y = np.array(marks(path.read_text(), "curve0"))[:, 1]
    expected = [power.circular_inflation(0.01, n) for n in range(12, 61)]
    assert (zero - y) / (zero - ticks[one]) * one == pytest.approx(expected, abs=1e-4)
    assert (
        "figure exists already"
        in sequester("power", "--inflation", "--figure", path, code=2).stderr
    )


def test_a_figure_names_its_curves_safely_and_shows_errors():
    def drawn(*error):
        return curves_svg("a < b", "n", "$power$", [Curve("d & e", (5.0,), (0.4,), error)], 1)

    texts = [e.text for e in ET.fromstring(drawn(0.1)).iter() if e.tag.endswith("text")]
    assert {"a < b", "d & e", "$power$"} <= set(texts)
    assert "LineCollection" in drawn(0.1)
    assert "LineCollection" not in drawn()
    assert drawn(0.1) == drawn(0.1)


def test_curves_are_where_their_numbers_say():
    (one, other) = Curve("b", (5.0, 10.0, 20.0), (0, 0.5, 1)), Curve("c", (5.0, 20.0), (1, 0))
    made = curves_svg("a", "n", "power", [one, other], 1)
    (x, low), (middle, half), (far, high) = marks(made, "curve0")
    assert marks(made, "curve1") == [(x, high), (far, low)]
    assert middle - x == pytest.approx((far - x) / 3, abs=0.02)
    assert low - half == pytest.approx((low - high) / 2, abs=0.02)


def test_a_logarithmic_axis_spaces_by_ratio():
    made = curves_svg("a", "n", "power", [Curve("b", (5.0, 50.0, 500.0), (0, 0, 0))], 1, log=True)
    (a, _), (b, _), (c, _) = marks(made, "curve0")
    assert b - a == pytest.approx(c - b, abs=0.02)
    assert ">200</text>" in made


def test_no_two_curves_look_the_same():
    listed = [Curve(f"c{i}", (5.0, 6.0), (0.1 * i, 0.1 * i)) for i in range(12)]
    made = ET.fromstring(curves_svg("a", "n", "power", listed, 1))
    styles = [e[0].get("style") for e in made.iter() if e.get("id", "").startswith("curve")]
    assert len(set(styles)) == len(styles) == 12


def commands():
    """Every command of the page that needs no study, and what the page shows of its answer."""
    for block in re.findall(r"```console\n(.*?)```", PAGE.read_text(), re.S):
        command, _, answer = block.partition("\n")
        yield pytest.param(shlex.split(command.removeprefix("$ sequester ")), answer, id=command)


@pytest.mark.parametrize(("arguments", "answer"), list(commands()))
def test_the_page_shows_what_the_command_says(arguments, answer, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert sequester(*arguments).stdout.startswith(answer)


def test_every_option_is_on_the_page():
    text = PAGE.read_text()
    names = [name for p in main.commands["power"].params for name in p.opts if name[:2] == "--"]
    assert [name for name in names if f"`{name}" not in text and f" {name} " not in text] == []
