"""The main job on data that nobody here made: scikit-learn's handwritten digits.

Forty pseudo-subjects share out the images of two digits. A subject's effect map is the mean of
its images of the one minus the mean of its images of the other: 8 x 8 pixels, one slice. Equal
pixels are data here, so exact zeros are not missing.
"""

from __future__ import annotations

import itertools
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from scipy import stats
from sequester.nodes.groupmaps import Missing, group_map
from sequester.nodes.masks import Cluster, Strongest, Threshold, choose
from sequester.nodes.procedure import Procedure
from sequester.nodes.space import Grid
from sequester.workflows.run import run_study
from sequester.workflows.settings import read_settings
from sequester.workflows.study import table_text
from sequester.workflows.table import rows_from
from sklearn.datasets import load_digits

N, EACH, FLIPS = 40, 4, 499
LABELS = [f"{i + 1:02}" for i in range(N)]
AFFINE = np.diag([3.0, 3.0, 3.0, 1.0])
GRID = Grid((8, 8, 1), AFFINE)
KEPT = Missing(zeros=False)


@pytest.fixture(scope="module")
def images() -> dict[int, np.ndarray]:
    """The first 160 images of each digit, flat."""
    digits = load_digits()
    return {d: digits.data[digits.target == d][: N * EACH] for d in range(10)}


def effects_of(images: dict[int, np.ndarray], one: int, other: int) -> np.ndarray:
    """(N, 64): each subject's share of one digit's images minus its share of the other's."""
    share = {d: images[d].reshape(EACH, N, 64).mean(axis=0) for d in (one, other)}
    return share[one] - share[other]


def t_of(effects: np.ndarray) -> np.ndarray:
    """SciPy's t of every pixel over all subjects; 0 where no subject has ink."""
    with np.errstate(invalid="ignore", divide="ignore"):
        t = effects.mean(axis=0) / stats.sem(effects, axis=0)
    return np.where(effects.any(axis=0), t, 0)


def top_quarter(effects: np.ndarray) -> set[int]:
    return set(np.argsort(-np.abs(t_of(effects)), kind="stable")[:16].tolist())


STUDY = """
[study]
name = "digits"
table = "table.tsv"
seed = 5

[data]
zeros_are_missing = false

[[roi]]
name = "more"
plan = "leave-one-subject-out"
rule = { kind = "strongest", k = 4 }
flips = 499

[[roi]]
name = "less"
plan = "leave-one-subject-out"
rule = { kind = "strongest", k = 4 }
tail = "negative"
flips = 499

[[roi]]
name = "stroke"
plan = "leave-one-subject-out"
rule = { kind = "cluster", height = 6.0, connectivity = 6, pick = "peak" }
flips = 499
interval = "jackknife"
"""


@pytest.fixture(scope="module")
def study(images, tmp_path_factory) -> tuple[Path, np.ndarray, list[dict]]:
    """Threes minus eights, from NIfTI files on disk through a whole guarded run."""
    folder = tmp_path_factory.mktemp("digits")
    effects = effects_of(images, 3, 8).astype(np.float32)
    for label, effect in zip(LABELS, effects, strict=True):
        image = nib.Nifti1Image(effect.reshape(8, 8, 1), AFFINE)
        nib.save(image, folder / f"sub-{label}_contrast-threeMinusEight_statmap.nii.gz")
    rows = rows_from(folder, suffix="beh")
    (folder / "table.tsv").write_text(table_text(rows), encoding="utf-8")
    (folder / "STUDY.toml").write_text(STUDY, encoding="utf-8")
    result = run_study(read_settings(folder / "STUDY.toml"))
    return result.output, effects, result.tests


def masks_of(output: Path, roi: str) -> dict[str, np.ndarray]:
    """Each subject's fold mask, flat, from the files."""
    found = {}
    for label in LABELS:
        path = output / "masks" / f"label-{roi}_desc-without{label}_mask.nii.gz"
        image = nib.load(path)
        assert image.shape == (8, 8, 1)
        found[label] = np.asarray(image.dataobj).ravel().astype(bool)
    return found


@pytest.mark.parametrize(("roi", "direction"), [("more", 1), ("less", -1)])
def test_only_pixels_of_the_top_quarter_are_chosen(study, roi, direction):
    output, effects, _ = study
    top = top_quarter(effects)
    assert len(top) == 16
    for mask in masks_of(output, roi).values():
        assert int(mask.sum()) == 4
        assert set(np.flatnonzero(mask)) <= top
        assert (direction * t_of(effects)[mask] > 0).all()


@pytest.mark.parametrize("roi", ["more", "less", "stroke"])
def test_p_is_at_its_minimum(study, roi):
    _, _, tests = study
    row = next(row for row in tests if row["roi"] == roi)
    assert row["p"] == 1 / (1 + FLIPS)
    assert (row["n_subjects"], row["n_folds"], row["n_empty"]) == (N, N, 0)
    assert (row["verdict"], row["level"], row["biased"]) == ("apart", "subject", False)
    # Whole maps overlap: Holm is over their three hypotheses, not over places.
    assert row["p_holm"] == 3 / (1 + FLIPS)
    assert row["sided"] == ("less" if roi == "less" else "greater")
    assert row["interval_kind"] == ("conservative" if roi == "stroke" else "approximate")
    assert "in the search region 'whole map'" in row["sentence"]


@pytest.mark.parametrize("roi", ["more", "less", "stroke"])
def test_the_tables_hold_what_the_masks_on_disk_give(study, roi):
    output, effects, tests = study
    lines = (output / "roi_values.tsv").read_text(encoding="utf-8").splitlines()
    header = lines[0].split("\t")
    rows = [dict(zip(header, line.split("\t"), strict=True)) for line in lines[1:]]
    values = {row["sub"]: float(row["value"]) for row in rows if row["roi"] == roi}
    expected = {
        label: effects[i, mask].astype(float).mean()
        for i, (label, mask) in enumerate(masks_of(output, roi).items())
    }
    assert values == pytest.approx(expected, rel=1e-6)
    test = next(row for row in tests if row["roi"] == roi)
    sign = -1 if roi == "less" else 1
    reference = stats.ttest_1samp(list(values.values()), 0).statistic
    assert test["t"] == pytest.approx(sign * reference, rel=1e-6)
    assert test["estimate"] == pytest.approx(np.mean(list(values.values())), rel=1e-9)


def test_each_mask_is_that_of_the_other_subjects_alone(study):
    output, effects, _ = study
    for i, (_, mask) in enumerate(masks_of(output, "more").items()):
        t = t_of(np.delete(effects, i, axis=0))
        assert set(np.flatnonzero(mask)) == set(np.argsort(-t, kind="stable")[:4])
    for i, (_, mask) in enumerate(masks_of(output, "stroke").items()):
        t = t_of(np.delete(effects, i, axis=0))
        assert mask[np.argmax(t)]
        assert (t[mask] > 6).all()


def test_the_same_holds_for_every_pair_of_digits(images):
    pairs_whose_folds_differ = 0
    for one, other in itertools.permutations(range(10), 2):
        effects = effects_of(images, one, other)
        ready = Procedure(Strongest(4), missing=KEPT).prepare(effects, LABELS, GRID)
        top = top_quarter(effects)
        chosen = [set(np.flatnonzero(mask).tolist()) for mask in ready.masks()]
        for i, pixels in enumerate(chosen):
            assert pixels <= top, (one, other)
            t = t_of(np.delete(effects, i, axis=0))
            assert pixels == set(np.argsort(-t, kind="stable")[:4].tolist()), (one, other)
        assert ready.flip_test(9, 1).p == 1 / 10, (one, other)
        pairs_whose_folds_differ += any(pixels != chosen[0] for pixels in chosen)
    # Whom a fold leaves out matters in a third of the pairs: the comparison is no formality.
    assert pairs_whose_folds_differ > 20


@pytest.mark.parametrize("rule", [Threshold(p=0.01), Cluster(p=0.05, connectivity=6)])
def test_a_digit_against_itself_rejects_no_more_often_than_it_should(images, rule):
    n_shuffles = 200
    rng = np.random.default_rng(2)
    rejected = plain = circular = 0
    for shuffle in range(n_shuffles):
        # Each subject's images are dealt into halves by chance: swapping them changes nothing.
        dealt = rng.permutation(images[shuffle % 10]).reshape(N, EACH, 64)
        half = EACH // 2
        effects = dealt[:, :half].mean(axis=1) - dealt[:, half:].mean(axis=1)
        ready = Procedure(rule, missing=KEPT).prepare(effects, LABELS, GRID)
        rejected += ready.flip_test(39, shuffle).p <= 0.05
        values = np.array(ready.outcome().values)
        plain += values.any() and stats.ttest_1samp(values, 0).pvalue <= 0.05
        mask = choose(group_map(effects, KEPT), rule, GRID, N)
        if mask.any():
            circular += stats.ttest_1samp(effects[:, mask].mean(axis=1), 0).pvalue <= 0.05
    tolerance = 4 * np.sqrt(0.05 * 0.95 / n_shuffles)
    assert rejected / n_shuffles <= 0.05 + tolerance
    # The same values by the usual test, and a region found on everybody, would have.
    assert plain / n_shuffles > 0.05 + tolerance
    assert circular / n_shuffles > 0.05 + tolerance
