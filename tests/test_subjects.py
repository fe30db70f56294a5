"""One map per subject: against NumPy, statsmodels and a worked example, and as a node."""

from __future__ import annotations

import warnings
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from nipype.interfaces.base import isdefined
from planting import a_grid
from sequester.nodes.errors import InputError
from sequester.nodes.groupmaps import Missing
from sequester.nodes.images import Geometry, read_map, write_map
from sequester.nodes.interfaces import SubjectMaps
from sequester.nodes.subjects import combine_runs, percent_of, subject_map

with warnings.catch_warnings():
    warnings.simplefilter("ignore")
    from statsmodels.stats.meta_analysis import combine_effects

GRID, FINER = a_grid((4, 5, 3)), a_grid((5, 5, 3), 2.0)


pytestmark = pytest.mark.usefixtures("quiet_engine")


def noise(seed: int, shape: tuple[int, ...] = GRID.shape, dtype: type = np.float32) -> np.ndarray:
    return np.random.default_rng(seed).normal(1, 1, shape).astype(dtype)


# -- runs -------------------------------------------------------------------------------------


def test_equal_weights_are_the_mean():
    runs = [noise(i, dtype=np.float64) for i in range(5)]
    np.testing.assert_allclose(combine_runs(runs), np.mean(runs, axis=0), rtol=1e-14)


def test_weighted_mean_of_the_fixed_effect_model():
    """Hedges & Olkin 1985, chapter 6: weights 1/v, estimate sum(e/v) / sum(1/v).

    With effects 3, 5, 10 and variances 1, 2, 4 the weights are 1, 1/2, 1/4, and the estimate
    is (3 + 2.5 + 2.5) / 1.75 = 32/7.
    """
    effects = [np.array([e]) for e in (3.0, 5.0, 10.0)]
    variances = [np.array([v]) for v in (1.0, 2.0, 4.0)]
    assert combine_runs(effects, variances)[0] == pytest.approx(32 / 7, rel=1e-15)


def test_inverse_variance_against_statsmodels():
    rng = np.random.default_rng(3)
    effects, variances = rng.normal(size=(4, 6)), rng.gamma(2, 1, (4, 6))
    ours = combine_runs(list(effects), list(variances))
    for voxel in range(6):
        table = combine_effects(effects[:, voxel], variances[:, voxel]).summary_frame()
        assert ours[voxel] == pytest.approx(table.loc["fixed effect", "eff"], rel=1e-12)


@given(
    hnp.arrays(np.float32, (3, 8), elements=st.floats(-1e6, 1e6, width=32)),
    hnp.arrays(np.float64, 8, elements=st.floats(1e-300, 1e300)),
)
def test_equal_variances_of_any_size_give_equal_weights_bit_for_bit(runs, variance):
    np.testing.assert_array_equal(
        combine_runs(list(runs), [variance] * 3), combine_runs(list(runs))
    )


@pytest.mark.parametrize("bad", [0.0, -1.0, np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("n", [1, 3])
def test_run_without_a_variance_is_missing_in_the_average(bad, n):
    runs, variances = [noise(i, (2,)) for i in range(n)], [np.ones(2) for _ in range(n)]
    variances[-1][1] = bad
    combined = combine_runs(runs, variances)
    assert np.isnan(combined).tolist() == [False, True]


@pytest.mark.parametrize("weighted", [False, True])
def test_voxel_missing_in_one_run_is_missing(weighted):
    runs = [noise(i, (4,)) for i in range(3)]
    runs[0][1] = runs[2][3] = np.nan
    variances = [np.full(4, 2.0)] * 3 if weighted else None
    assert np.isnan(combine_runs(runs, variances)).tolist() == [False, True, False, True]


@pytest.mark.parametrize("weighted", [False, True])
@pytest.mark.parametrize(
    ("stored", "made"),
    [
        ((np.float32, np.float32), np.float32),
        ((np.float32, np.float64), np.float64),
        ((np.float64, np.float64), np.float64),
    ],
)
def test_precision_is_that_of_the_maps(stored, made, weighted):
    runs = [noise(i, dtype=dtype) for i, dtype in enumerate(stored)]
    variances = [np.ones(GRID.shape)] * 2 if weighted else None
    combined = combine_runs(runs, variances)
    assert combined.dtype == made
    assert subject_map(combined, baseline=np.ones(GRID.shape), null_value=0.5).dtype == made


def test_average_does_not_overflow():
    most = np.finfo(np.float32).max
    runs = [np.full(2, most, np.float32)] * 2
    assert combine_runs(runs).tolist() == [most, most]
    assert np.isnan(percent_of(runs[0], np.ones(2))).all()  # a number that does not fit


def test_maps_and_variances_pair_up():
    with pytest.raises(ValueError, match="1 variance maps for 2 effect maps"):
        combine_runs([noise(0), noise(1)], [noise(2)])
    with pytest.raises(ValueError, match="no map"):
        combine_runs([])


# -- differences, percent, null value -----------------------------------------------------------


def test_steps_and_their_order():
    after, before, base = (noise(i, dtype=np.float64) for i in range(3))
    base = np.abs(base) + 50
    np.testing.assert_allclose(
        subject_map(after, before, base, 0.25), 100 * (after - before) / base - 0.25, rtol=1e-12
    )


def test_percent_is_missing_without_a_baseline_above_zero():
    base = np.array([50.0, 0.0, -50.0, np.nan, np.inf])
    percent = percent_of(np.ones(5, np.float32), base)
    np.testing.assert_array_equal(percent, np.array([2, np.nan, np.nan, np.nan, np.nan], "f4"))


# -- the node -----------------------------------------------------------------------------------


def saved(folder: Path, name: str, data: np.ndarray, grid: Geometry = GRID) -> str:
    return str(write_map(folder / f"{name}.nii.gz", data, grid))


def made(folder: Path, **inputs: object) -> list[np.ndarray]:
    work = folder / "work"
    work.mkdir(exist_ok=True)
    out = SubjectMaps(**inputs).run(cwd=str(work)).outputs
    assert isdefined(out.out_files)
    return [read_map(path)[0] for path in out.out_files]


def test_paired_differences_by_inverse_variance(tmp_path: Path):
    x, v = noise(0, (2, 4, *GRID.shape)), noise(1, (2, 4, *GRID.shape)) ** 2 + np.float32(0.1)
    files = [[saved(tmp_path, f"e{s}{i}", x[s, i]) for i in range(4)] for s in (0, 1)]
    spread = [[saved(tmp_path, f"v{s}{i}", v[s, i]) for i in range(4)] for s in (0, 1)]
    found = made(
        tmp_path,
        labels=["a", "b"],
        in_files=[f[:2] for f in files],
        variance_files=[f[:2] for f in spread],
        minus_files=[f[2:] for f in files],
        minus_variance_files=[f[2:] for f in spread],
    )
    x, v = x.astype(float), v.astype(float)
    for s in (0, 1):
        late, early = (
            np.average(x[s, part], axis=0, weights=1 / v[s, part])
            for part in (slice(0, 2), slice(2, 4))
        )
        assert found[s].dtype == np.float32
        np.testing.assert_allclose(found[s], late - early, rtol=1e-5, atol=1e-6)


def test_difference_of_zero_is_data_and_what_was_stored_as_zero_is_not(tmp_path: Path):
    after, before = noise(0), noise(1)
    after[0, 0, 0] = before[0, 0, 0]  # a difference of exactly zero
    after[1, 0, 0], before[2, 0, 0], before[3, 0, 0] = 0, 0, np.inf
    files = {
        "in_files": [saved(tmp_path, "after", after)],
        "minus_files": [saved(tmp_path, "before", before)],
        "labels": ["a"],
    }
    (found,) = made(tmp_path, **files)
    assert found[0, 0, 0] == 0
    assert np.isnan(found[1:4, 0, 0]).all()
    assert np.isnan(found).sum() == 3
    (found,) = made(tmp_path, **files, missing=Missing(zeros=False))
    assert np.isnan(found[:, 0, 0]).tolist() == [False, False, False, True]


def test_chance_is_taken_from_accuracies(tmp_path: Path):
    accuracy = np.full(GRID.shape, 0.75, np.float32)
    accuracy[0, 0, 0], accuracy[1, 0, 0] = 0.5, 0
    path = saved(tmp_path, "accuracy", accuracy)
    (found,) = made(tmp_path, in_files=[path], labels=["a"], null_value=0.5)
    assert found[0, 0, 0] == 0
    assert np.isnan(found[1, 0, 0])
    assert (found[2:] == 0.25).all()


def test_percent_of_the_mean_baseline_and_each_field_has_volumes_of_its_own(tmp_path: Path):
    x = noise(0, (*GRID.shape, 6), np.float64)
    x[..., 3:] = np.abs(x[..., 3:]) + 100
    path = str(tmp_path / "all.nii")
    nib.save(nib.Nifti1Image(x, GRID.affine), path)
    (found,) = made(
        tmp_path,
        labels=["a"],
        in_files=[[path, path]],
        volumes=[[2, 0]],
        minus_files=[path],
        minus_volumes=[1],
        baseline_files=[[path, path]],
        baseline_volumes=[[3, 5]],
    )
    effect = (x[..., 2] + x[..., 0]) / 2 - x[..., 1]
    assert found.dtype == np.float64
    np.testing.assert_allclose(found, 100 * effect / ((x[..., 3] + x[..., 5]) / 2), rtol=1e-12)


def test_rows_may_be_on_grids_of_their_own_but_one_row_may_not(tmp_path: Path):
    one, two, three = (saved(tmp_path, f"e{i}", noise(i)) for i in range(3))
    other = saved(tmp_path, "finer", noise(3, FINER.shape), FINER)
    found = made(tmp_path, in_files=[one, other], labels=["a", "b"])
    assert [data.shape for data in found] == [GRID.shape, FINER.shape]
    for name in ("variance_files", "minus_files", "baseline_files"):
        with pytest.raises(InputError, match="grids differ") as told:
            made(tmp_path, in_files=[one, two], labels=["a", "b"], **{name: [three, other]})
        assert f"({other}): expected the grid of {two}: 4 x 5 x 3 voxels" in str(told.value)


# -- what is refused ----------------------------------------------------------------------------


def test_map_given_before_is_found_wherever_it_stands(tmp_path: Path, monkeypatch):
    one, two, three = (saved(tmp_path, f"e{i}", noise(i)) for i in range(3))
    again = str(write_map(tmp_path / "again.nii", noise(0), GRID))
    cases = [
        {"in_files": [one, again], "labels": ["a", "b"]},
        {"in_files": [[one, two, again]], "labels": ["a"]},
        {"in_files": [one, two], "labels": ["a", "b"], "minus_files": [three, again]},
        {"in_files": [two, three], "labels": ["a", "b"], "minus_files": [one, again]},
    ]
    for case in cases:
        with pytest.raises(InputError) as told:
            made(tmp_path, **case)
        assert f"the same map under two names ({again}): got identical to {one}" in str(told.value)
    # One first visit may be taken from several rows, under its one name.
    made(tmp_path, in_files=[one, two], labels=["a", "a"], minus_files=[three, three])
    # A sum is no proof: with one that is always the same, other maps still pass.
    monkeypatch.setattr("sequester.nodes.interfaces.images._sum", lambda bits: 7)
    made(tmp_path, in_files=[one, two, three], labels=["a", "b", "c"])
    with pytest.raises(InputError, match="the same map under two names"):
        made(tmp_path, in_files=[one, two, again], labels=["a", "b", "c"])


def test_map_without_data_is_named(tmp_path: Path):
    one = saved(tmp_path, "one", noise(2))
    nothing = saved(tmp_path, "nothing", np.zeros(GRID.shape, np.float32))
    for name, word in (("minus_files", "effect"), ("baseline_files", "baseline")):
        with pytest.raises(InputError) as told:
            made(tmp_path, in_files=[one], labels=["a"], **{name: [nothing]})
        assert f"{word} map without data ({nothing}): got only zeros" in str(told.value)
    half, rest = noise(0), noise(1)
    half[:2], rest[2:] = 0, 0
    files = [saved(tmp_path, "half", half), saved(tmp_path, "rest", rest)]
    with pytest.raises(InputError) as told:
        made(tmp_path, in_files=[one, files], labels=["a", "kite"])
    assert str(told.value).startswith(
        f"no voxel has data in all maps of a subject (kite): got {files[0]}, {files[1]}; check"
    )
    with pytest.raises(InputError, match="no voxel has data"):
        made(tmp_path, in_files=[one], variance_files=[nothing], labels=["a"])


@pytest.mark.parametrize(
    ("inputs", "message"),
    [
        ({"minus_files": []}, r"labels and maps do not pair up \(minus_files\): got 1 labels, 0"),
        ({"minus_files": [[]]}, r"subject without a map \(a\): got minus_files is empty"),
        (
            {"variance_files": [["V", "V"]]},
            r"maps and variances do not pair up \(a\): expected one file in variance_files for "
            "each in in_files, got 2 for 1",
        ),
        (
            {"minus_variance_files": ["V"]},
            r"maps and variances do not pair up \(a\): .* in minus_files, got 1 for 0",
        ),
        ({"volumes": [[-1, -1]]}, r"maps and volume numbers do not pair up \(in_files\)"),
    ],
)
def test_fields_that_do_not_fit_together(tmp_path: Path, inputs, message):
    one, spread = saved(tmp_path, "one", noise(0)), saved(tmp_path, "v", noise(1) ** 2)

    def filled(item):
        return [filled(i) for i in item] if isinstance(item, list) else spread

    given_ = {k: v if k == "volumes" else filled(v) for k, v in inputs.items()}
    with pytest.raises(InputError, match=message):
        made(tmp_path, in_files=[one], labels=["a"], **given_)
