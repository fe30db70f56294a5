"""Where nothing was found, or nothing is there to read, no number stands that says otherwise."""

import csv

import numpy as np
import pytest
from click.testing import CliRunner
from planting import a_grid
from sequester.nodes.errors import InputError
from sequester.nodes.fixed import fixed_region_result, group_mask_result, own_mask_result
from sequester.nodes.folds import Given, KFold, LeaveOneOut
from sequester.nodes.heldout import check_jackknife, cross_fitted_result
from sequester.nodes.images import write_map
from sequester.nodes.masks import PeakSphere, Strongest, Threshold
from sequester.nodes.models import Groups, Score
from sequester.nodes.procedure import Procedure
from sequester.nodes.roi import holm
from sequester.nodes.space import Grid
from sequester.workflows.cli import main

SHAPE = (6, 6, 5)
NAMES = ("Arbor", "a plan", "the brook")
SUBS = tuple(f"{i:02}" for i in range(1, 7))
HEAD = """[study]
name = "moss"
table = "table.tsv"
[data]
select = { task = "shade", run = ["1", "2"] }
"""
STRICT, STAND_IN = 'rule = { kind = "threshold", height = 60 }\n', 'on_empty = "strongest"\nk = 5\n'
ELSEWHERE = 'choose_on = { task = "paths" }\n'
GROUP = 'mask_of = "group"\nclaim = "these-subjects"\n' + ELSEWHERE
GIVEN = 'region = { mask = "bed.nii.gz", origin = "drawn beforehand" }\n'


def roi(name, plan, keys):
    return f'[[roi]]\nname = "{name}"\nplan = "{plan}"\n{keys}'


@pytest.fixture(scope="module")
def moss(tmp_path_factory):
    """Six subjects with two runs of two tasks; in the bed, subject 04 has data in no voxel."""
    folder, rng = tmp_path_factory.mktemp("moss"), np.random.default_rng(8)
    lines = ["path\tsub\ttask\trun\tsuffix\tgroup"]
    bed = np.zeros(SHAPE, np.uint8)
    bed[:3, :3, :2] = 1
    for i, sub in enumerate(SUBS):
        for task in ("shade", "paths"):
            for run in ("1", "2"):
                data = rng.normal(0.5, 1, SHAPE).astype(np.float32)
                if task == "paths":
                    data[5, 5, 4] = 30 + 20 * (i % 3)  # above 60 in two of six
                if sub == "04":
                    data[bed > 0] = 0
                name = f"sub-{sub}_task-{task}_run-{run}.nii.gz"
                write_map(folder / name, data, a_grid(SHAPE))
                lines.append(f"{name}\t{sub}\t{task}\t{run}\tbold\t{'ab'[i % 2]}")
    write_map(folder / "bed.nii.gz", bed, a_grid(SHAPE))
    write_map(folder / "plot.nii.gz", 1 - bed, a_grid(SHAPE))
    (folder / "table.tsv").write_text("\n".join(lines) + "\n")
    return folder


def told(moss, text, *command, code=0):
    (moss / "STUDY.toml").write_text(HEAD + text)
    done = CliRunner().invoke(main, [*(command or ("run",)), str(moss / "STUDY.toml"), "-q"])
    assert done.exit_code == code, done.output
    return " ".join(done.output.split())


def rows_of(moss):
    with (moss / "results" / "roi_tests.tsv").open() as file:
        return {row["roi"]: row for row in csv.DictReader(file, delimiter="\t")}


# -- no region ------------------------------------------------------------------------------------

NUMBERS = ("interval_low", "interval_high", "t", "p", "p_holm", "dz", "g")


def test_a_run_says_what_was_found_and_tests_nothing_where_nothing_was(moss):
    plans = {
        "Own": ("localizer", ELSEWHERE + STRICT.replace("60", "900")),
        "Some": ("localizer", ELSEWHERE + STRICT),
        "Stood": ("localizer", ELSEWHERE + STRICT + STAND_IN),
        "Same": ("localizer", GROUP + STRICT),
        "SameStood": ("localizer", GROUP + STRICT + STAND_IN),
        "Runs": ("leave-one-run-out", 'rule = { kind = "strongest", k = 5, map = "mean" }\n'),
        "Folds": ("k-fold", "folds = 3\nflips = 9\n" + STRICT),
        "Look": ("exploratory", STRICT + STAND_IN),
        "Plot": ("a-priori", 'region = { mask = "plot.nii.gz", origin = "all but the bed" }\n'),
    }
    told(moss, "".join(roi(name, *keys) for name, keys in plans.items()), "run", "--no-page")
    rows = rows_of(moss)
    for name in ("Own", "Same"):
        assert {rows[name][number] for number in (*NUMBERS, "estimate")} == {"n/a"}
        assert "no value and no test: no region was found (n = 6)" in rows[name]["sentence"]
    found = {name: [rows[name][k] for k in ("n_folds", "n_empty", "n_replaced")] for name in rows}
    assert found == {
        "Own": ["6", "6", "0"],
        "Some": ["6", "4", "0"],
        "Stood": ["6", "0", "4"],
        "Same": ["n/a", "n/a", "n/a"],
        "SameStood": ["n/a", "n/a", "1"],
        "Runs": ["12", "0", "0"],
        "Folds": ["3", "3", "0"],
        "Look": ["n/a", "n/a", "1"],
        "Plot": ["n/a", "n/a", "n/a"],
    }
    assert (
        "In 4 of 6 masks the rule found nothing; there the strongest" in rows["Stood"]["sentence"]
    )
    assert "The rule found nothing; the strongest voxels stood in." in rows["SameStood"]["sentence"]
    some = rows["Some"]
    assert [some[k] == "n/a" for k in ("p", "interval_low", "dz", "g")] == [
        False,
        False,
        True,
        True,
    ]
    assert some["target"].endswith("in their own masks, 0 in the empty ones")
    # Six regions are tested, and search regions overlap: Holm is over these six hypotheses.
    tested = [name for name in rows if rows[name]["p"] != "n/a"]
    assert tested == ["Some", "Stood", "SameStood", "Runs", "Folds", "Plot"]
    adjusted = holm([float(rows[name]["p"]) for name in tested])
    assert [float(rows[name]["p_holm"]) for name in tested] == pytest.approx(adjusted)
    few = ("Own", "Plot", "Some", "Stood")
    shown = told(moss, "".join(roi(name, *plans[name]) for name in few))
    assert "Own in 'whole map' (localizer): no value and no test: no region was found" in shown
    assert "p Holm is over null hypotheses, not over places" in shown
    page = (moss / "results" / "report.html").read_text()
    assert "found in 2 of 6 masks; the strongest voxels stood in for the others" in page
    assert "the value counts as 0 in the others: not the size of an effect" in page


def test_a_look_that_found_no_region_has_no_value_and_speaks_of_nobody(moss):
    look = roi("Look", "exploratory", STRICT.replace("60", "900"))
    shown = told(moss, look + roi("Same", "localizer", GROUP + STRICT.replace("60", "900")))
    row = rows_of(moss)["Look"]
    assert (row["claim"], row["estimate"], row["biased"]) == ("nobody", "n/a", "true")
    assert "exploratory look found no region" in shown
    page = (moss / "results" / "report.html").read_text()
    assert "Nothing is tested. 1 exploratory look found no region." in page
    assert "Look: no region was found" in " ".join(page.split()) and "biased</small>" not in page
    # No points at zero stand for values that nobody has, nor for those of the other empty region.
    assert not {one.name for one in (moss / "results" / "figures").glob("*.svg")} & {
        "Look_biased.svg", "Same_values.svg",
    }  # fmt: skip


def test_a_mask_in_which_somebody_has_little_data_is_named_on_the_screen_and_the_page(moss):
    most = np.zeros(SHAPE, np.uint8)
    most[:3, :3, :2] = most[4, :2, 0] = 1  # of 20 voxels subject 04 has two
    write_map(moss / "most.nii.gz", most, a_grid(SHAPE))
    given = 'region = { mask = "%s.nii.gz", origin = "drawn" }\n'
    shown = told(
        moss, roi("Most", "a-priori", given % "most") + roi("Plot", "a-priori", given % "plot")
    )
    assert "Somebody has data in little of a mask: Most (10 %). min_coverage in [data]" in shown
    page = " ".join((moss / "results" / "report.html").read_text().split())
    assert "Masks that are not covered: Most (10 %)<" in page
    assert "and was read in" in page and "came from outside and read" not in page


@pytest.mark.parametrize("interval", ["flips", "folds", "jackknife"])
@pytest.mark.parametrize("model", ["none", "groups", "score"])
def test_with_an_empty_fold_the_estimate_is_no_effect_size(model, interval):
    """One fold, of those with the effect, finds nothing in the others, who are too few."""
    labels, rng = [f"{i:02}" for i in range(12)], np.random.default_rng(3)
    x = rng.normal(size=(12, 40))
    half = np.arange(12) < 6
    models = {
        "none": None,
        "groups": Groups(
            tuple(zip(labels, np.where(half, "a", "b").tolist(), strict=True)), "a", "b"
        ),
        "score": Score(tuple(zip(labels, rng.normal(size=12).tolist(), strict=True))),
    }
    if model != "none" and interval == "folds":
        return
    for height in np.linspace(1, 9, 81):
        plan = Procedure(Threshold(height=height), KFold(4), model=models[model])
        ready = plan.prepare(x, labels, Grid((40, 1, 1), np.eye(4)))
        if 0 < len(ready.outcome().empty) < 4:
            break
    n = len(ready.outcome().empty)
    made, outcome, _ = cross_fitted_result(ready, NAMES, 99, 0, interval)
    assert 0 < made.n_empty == n < 4
    assert (made.interval, made.dz, made.g) == (None, None, None)
    assert made.p == ready.flip_test(99, 0).p
    assert made.estimate == outcome.estimate
    assert f"(only {4 - n} of 4 folds found a region: no interval)" in made.sentence
    assert "not the size of an effect" in made.target
    assert 'state on_empty = "strongest" beforehand' in made.sentence
    again = Procedure(plan.rule, plan.scheme, on_empty="strongest", k=3, model=plan.model)
    full = cross_fitted_result(
        again.prepare(x, labels, Grid((40, 1, 1), np.eye(4))), NAMES, 99, 0, interval
    )[0]
    assert full.interval is not None
    assert "not the size" not in full.target + full.sentence


def test_own_and_group_masks_that_are_all_empty_or_all_equal_have_no_test():
    for made in (
        own_mask_result([0.0] * 3, NAMES, [0] * 3, [0.0] * 3, empty=list("abc")),
        group_mask_result([0.0] * 3, NAMES, [0] * 3, [0.0] * 3),
    ):
        assert np.isnan(made.estimate)
        assert (made.t, made.p, made.interval, made.dz, made.coverage) == (None,) * 5
        assert "no region was found" in made.sentence
    equal = group_mask_result([2.0] * 3, NAMES, [5] * 3, [1.0] * 3, replaced=True)
    assert (equal.estimate, equal.p, equal.interval) == (2, None, None)
    assert equal.sentence.endswith(
        "(n = 3). The rule found nothing; the strongest voxels stood in."
    )


# -- no data --------------------------------------------------------------------------------------


def test_a_subject_without_data_in_a_region_is_named_and_no_value(moss):
    said = told(moss, roi("Bed", "a-priori", GIVEN), code=2)
    assert (
        "(node moss.Bed.extract): expected coverage above 0, got 04 0; leave them out with" in said
    )
    assert "1 of 6 maps have no data in their masks" in said
    keys = 'search = { mask = "bed.nii.gz", origin = "o" }\nrule = { kind = "strongest", k = 4 }\n'
    for plan in ("k-fold", "leave-one-subject-out"):
        said = told(moss, roi("Bed", plan, "flips = 9\n" + keys), code=2)
        assert "1 of 6 maps have no data in their masks" in said


def test_values_without_data_are_refused_whoever_asks_for_a_result():
    args = ([1.0, 2.0, 0.0], NAMES, [8, 8, 8], [1.0, 0.5, 0.0])
    for made in (fixed_region_result, own_mask_result, group_mask_result):
        with pytest.raises(InputError, match=r"without data in their masks.*got none in 1 of 3"):
            made(*args)
    assert fixed_region_result([1.0, 2.0, 4.0], NAMES, [8], [1, 0.5, 0.25]).coverage == 0.25
    labels, x = [f"{i:02}" for i in range(8)], np.random.default_rng(0).normal(size=(8, 30))
    x[2, :-1] = np.nan
    ready = Procedure(Strongest(3)).prepare(x, labels, Grid((30, 1, 1), np.eye(4)))
    with pytest.raises(
        InputError, match=r"no data in the mask of their fold \(02\).*none in 1 of 8"
    ):
        cross_fitted_result(ready, NAMES, 9, 0)


def test_flips_under_which_somebody_has_no_data_in_a_mask_keep_the_level():
    """Where data is missing no flip changes, so y = 0 there is one function of the maps."""
    labels, grid, rejected, n = [f"{i:02}" for i in range(16)], Grid((60, 1, 1), np.eye(4)), 0, 150
    lacking = 0
    for seed in range(n):
        x = np.random.default_rng([seed, 5]).normal(size=(16, 60))
        x[0, 20:], x[1, :30] = np.nan, np.nan
        ready = Procedure(Strongest(3)).prepare(x, labels, grid)
        lacking += 0.0 in ready.outcome().coverage
        rejected += ready.flip_test(19, seed).p <= 0.05
    assert lacking > n / 4
    assert abs(rejected / n - 0.05) < 4 * np.sqrt(0.05 * 0.95 / n)


# -- no t -----------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("plan", "rule"),
    [
        ("leave-one-run-out", 'rule = { kind = "strongest", k = 5 }\n'),
        ("leave-one-run-out", 'rule = { kind = "cluster", p = 0.01 }\n' + STAND_IN),
        ("split-half-runs", 'rule = { kind = "peak-sphere", radius = 5 }\n'),
        ("split-half-runs", STRICT),
    ],
)
def test_a_rule_that_reads_t_needs_two_runs_that_choose(moss, plan, rule):
    said = told(moss, roi("Runs", plan, rule), "check", code=2)
    assert "the rule reads t, and there is no t of one map" in said
    assert "roi Runs): expected at least 2 maps on the side that chooses, got one run in 01" in said
    assert 'use the rule strongest or peak-sphere with map = "mean"' in said


@pytest.mark.parametrize("rule", [Strongest(3), PeakSphere(2.0), Threshold(height=1.0)])
def test_no_procedure_reads_t_of_one_map(rule):
    grid, x = Grid((30, 1, 1), np.eye(4)), np.random.default_rng(0).normal(size=(3, 30))
    for labels, scheme in (
        ("ab", LeaveOneOut(2)),
        ("abc", Given(tuple(zip("abc", "xyy", strict=True)))),
    ):
        with pytest.raises(InputError, match="there is no t of one map"):
            Procedure(rule, scheme).prepare(x[: len(labels)], list(labels), grid)
    Procedure(rule, LeaveOneOut(2)).prepare(x, list("abc"), grid)


# -- no jackknife, no test on other maps ----------------------------------------------------------


def test_a_jackknife_that_cannot_do_without_somebody_is_refused_before_any_flip(moss):
    labels = [f"{i:02}" for i in range(6)]
    with pytest.raises(InputError, match=r"cannot do without 00: .*use interval = \"flips\""):
        check_jackknife(Procedure(Strongest(3), KFold(6)), labels)
    groups = Groups(tuple(zip(labels, "aabbbb", strict=True)), "a", "b")
    plan = Procedure(Strongest(3), LeaveOneOut(), model=groups)
    with pytest.raises(InputError, match="cannot do without 00: a selection side without both"):
        check_jackknife(plan, labels)
    ready = plan.prepare(np.ones((6, 9)), labels, Grid((9, 1, 1), np.eye(4)))
    with pytest.raises(InputError, match="cannot do without 00"):
        cross_fitted_result(ready, NAMES, 10**9, 0, "jackknife")  # flips would take for ever
    keys = 'folds = 6\ninterval = "jackknife"\nrule = { kind = "strongest", k = 5 }\n'
    said = told(moss, roi("Few", "k-fold", keys), "check", code=2)
    assert "the jackknife cannot do without 01" in said


@pytest.mark.parametrize(
    "rule",
    [
        STRICT,
        STRICT + 'on_empty = "stop"\n',
        'rule = { kind = "threshold", control = "max-t", flips = 9 }\n',
        'rule = { kind = "cluster", p = 0.01, extent = "max-cluster" }\n',
        STRICT + 'compare = { column = "group", first = "a", second = "b" }\n',
    ],
)
def test_a_study_does_not_test_other_maps_by_a_rule_that_may_find_nothing(moss, rule):
    said = told(moss, roi("Other", "k-fold", "folds = 3\n" + ELSEWHERE + rule), "check", code=2)
    assert "chosen on other maps than are tested, by a rule that may find nothing" in said
    assert "roi Other): expected a rule that always" in said
    assert 'state on_empty = "strongest" with a k, or the rule strongest or peak-sphere' in said
    if "on_empty" not in rule:
        told(moss, roi("Other", "k-fold", "folds = 3\n" + ELSEWHERE + rule + STAND_IN), "check")
