"""How smooth noise is: against kernels of known width, and sums against residuals."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter
from sequester.nodes.errors import InputError
from sequester.nodes.groupmaps import Missing
from sequester.nodes.smoothness import (
    axis_pairs,
    fwhm_from_sums,
    fwhm_of_residuals,
    fwhm_of_roughness,
    fwhm_of_stack,
    pair_products,
    resel_count,
)
from sequester.nodes.space import Grid

SIGMA = 1 / np.sqrt(8 * np.log(2))


def smooth_noise(rng, n_rows, shape, fwhm):
    """White noise under a Gaussian kernel, its ends joined: equally smooth everywhere."""
    sigma = np.broadcast_to(fwhm, 3) * SIGMA
    noise = rng.normal(size=(n_rows, *shape))
    return gaussian_filter(noise, (0, *sigma), mode="wrap", truncate=6).reshape(n_rows, -1)


def by_definition(residuals, shape, inside, nu):
    """lambda of each axis as it is defined: loops, whole volumes, no sums."""
    u = np.full((len(residuals), *shape), np.nan)
    u[:, inside] = residuals / np.linalg.norm(residuals, axis=0)
    widths = []
    for axis in (1, 2, 3):
        change = np.square(np.diff(u, axis=axis)).sum(axis=0)
        roughness = (nu - 2) / (nu - 1) * np.nanmean(change)
        widths.append(np.sqrt(-2 * np.log(2) / np.log(1 - roughness / 2)))
    return widths


@pytest.fixture
def masked():
    """A stack over a mask with holes, and its grid."""
    rng = np.random.default_rng(5)
    shape = (9, 8, 7)
    inside = rng.random(shape) > 0.2
    stack = smooth_noise(rng, 12, shape, (2, 3, 4))[:, inside.ravel()] + 0.3
    return stack, Grid(shape, np.eye(4), inside), inside


@pytest.mark.parametrize(
    ("fwhm", "derivative"), [(2, 2.17557), (3, 3.11624), (4, 4.08695), (6, 6.05785)]
)
def test_the_exact_inverse_gives_the_width_of_the_kernel(fwhm, derivative):
    """Differences of one voxel taken for a derivative read too much (closed form, recomputed)."""
    roughness = 2 - 2 * np.exp(-2 * np.log(2) / fwhm**2)
    assert np.sqrt(4 * np.log(2) / roughness) == pytest.approx(derivative, abs=5e-6)
    assert fwhm_of_roughness(roughness) == pytest.approx(fwhm, rel=1e-12)


@pytest.mark.parametrize("fwhm", [(2, 2, 2), (3, 3, 3), (2, 4, 6)])
def test_the_kernel_that_made_the_noise_is_found(fwhm):
    stack = smooth_noise(np.random.default_rng(1), 20, (24, 24, 24), fwhm)
    # A sampled kernel of 2 voxels is a little wider than the continuous one: 2.024.
    assert fwhm_of_stack(stack, Grid((24, 24, 24), np.eye(4))) == pytest.approx(fwhm, rel=0.025)


def test_few_rows_and_a_model_with_many_columns_do_not_bias_it():
    rng = np.random.default_rng(2)
    X = rng.normal(size=(10, 4))
    hat = X @ np.linalg.pinv(X)
    found = []
    for _ in range(10):
        stack = smooth_noise(rng, 10, (16, 16, 16), 4)
        found.append(fwhm_of_residuals(stack - hat @ stack, Grid((16, 16, 16), np.eye(4)), 6))
    # Without the factor (nu - 2) / (nu - 1) it would be 10 % less.
    assert np.mean(found) == pytest.approx(4, rel=0.05)


def test_sums_give_what_the_definition_gives(masked):
    stack, grid, inside = masked
    residuals = stack - stack.mean(axis=0)
    expected = by_definition(residuals, grid.shape, inside, len(stack) - 1)
    assert fwhm_of_stack(stack, grid) == pytest.approx(expected, rel=1e-10)
    assert fwhm_of_residuals(residuals, grid, len(stack) - 1) == pytest.approx(expected, rel=1e-10)
    expected = by_definition(residuals, grid.shape, inside, 8)
    assert fwhm_of_residuals(residuals, grid, 8) == pytest.approx(expected, rel=1e-10)


def test_a_flip_of_rows_changes_the_sums_only(masked):
    stack, grid, _ = masked
    signs = np.random.default_rng(3).choice([-1.0, 1.0], size=(5, len(stack)))
    pairs = axis_pairs(grid)
    Q = np.square(stack).sum(axis=0)
    flips = fwhm_from_sums(len(stack), signs @ stack, Q, pair_products(stack, pairs), pairs)
    each = [fwhm_of_stack(sign[:, None] * stack, grid) for sign in signs]
    assert flips == pytest.approx(np.array(each), rel=1e-9)
    assert len({round(width, 6) for width in flips[:, 0]}) == 5


def test_features_without_all_rows_or_without_variance_are_left_out(masked):
    stack, grid, _ = masked
    spoilt = stack.copy()
    spoilt[3, 10:20] = 0
    spoilt[5, 30] = np.nan
    spoilt[:, 40] = 7.0
    keep = np.ones(grid.n_features, bool)
    keep[[*range(10, 20), 30, 40]] = False
    expected = fwhm_of_stack(stack[:, keep], grid.restricted(keep))
    assert fwhm_of_stack(spoilt, grid) == pytest.approx(expected, rel=1e-12)
    # A zero is a value when the plan says so.
    assert fwhm_of_stack(spoilt, grid, Missing(zeros=False))[0] != pytest.approx(expected[0])


def test_one_slice_has_no_width_across_it_and_white_noise_none_at_all():
    rng = np.random.default_rng(4)
    flat = fwhm_of_stack(smooth_noise(rng, 8, (30, 30, 1), (3, 3, 0)), Grid((30, 30, 1), np.eye(4)))
    assert flat[:2] == pytest.approx(3, rel=0.1)
    assert np.isnan(flat[2])
    assert resel_count(900, flat) == pytest.approx(900 / (flat[0] * flat[1]))
    white = fwhm_of_stack(rng.normal(size=(8, 1000)), Grid((10, 10, 10), np.eye(4)))
    assert (white < 1).all()
    stripes = np.tile([1.0, -1.0], 50) * rng.normal(size=(8, 1))
    assert fwhm_of_stack(stripes, Grid((100, 1, 1), np.eye(4)))[0] == 0


def test_a_feature_in_float32_and_any_unit_gives_the_same(masked):
    stack, grid, _ = masked
    expected = fwhm_of_stack(stack, grid)
    assert fwhm_of_stack(stack.astype(np.float32), grid) == pytest.approx(expected, rel=1e-5)
    assert fwhm_of_stack(stack * 1e-120, grid) == pytest.approx(expected, rel=1e-9)


def test_too_few_rows_are_refused(masked):
    stack, grid, _ = masked
    with pytest.raises(InputError, match=r"too few rows .*\(4 rows for a mean\), got 2"):
        fwhm_of_stack(stack[:3], grid)
    assert np.isfinite(fwhm_of_stack(stack[:4], grid)).all()
