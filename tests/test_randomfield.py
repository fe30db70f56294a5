"""Random field theory: published densities, shapes with a known Euler characteristic, noise."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from scipy import stats
from scipy.ndimage import gaussian_filter, label
from scipy.special import eval_hermitenorm
from sequester.nodes.errors import InputError
from sequester.nodes.randomfield import (
    ClusterSizes,
    corrected_p,
    ec_densities,
    height_threshold,
    lattice,
    resels,
)
from sequester.nodes.smoothness import fwhm_of_stack
from sequester.nodes.space import Grid

BOX = np.array([1.0, 30.0, 300.0, 1000.0])


def grid_of(inside):
    return Grid(inside.shape, np.eye(4), inside)


def euler(inside):
    return resels(lattice(grid_of(inside)), np.ones(3))[0]


@pytest.mark.parametrize(
    ("height", "df", "expected"),
    [
        (3.0, None, [1.349898e-3, 2.943999e-3, 5.866941e-3, 1.039282e-2]),
        (4.0, 19, [3.830962e-4, 1.085008e-3, 2.845338e-3, 6.778555e-3]),
    ],
)
def test_ec_densities(height, df, expected):
    """Worsley et al. 1996, HBM 4:58-73, recomputed independently."""
    assert ec_densities(height, df) == pytest.approx(np.array(expected), rel=1e-6)


def test_gaussian_densities_are_hermite_polynomials_and_the_limit_of_t():
    z = np.linspace(-1, 6, 15)
    made = ec_densities(z)
    assert made.shape == (15, 4)
    assert made[:, 0] == pytest.approx(stats.norm.sf(z), rel=1e-12)
    for d in (1, 2, 3):
        factor = (4 * np.log(2)) ** (d / 2) * (2 * np.pi) ** (-(d + 1) / 2)
        expected = factor * eval_hermitenorm(d - 1, z) * np.exp(-z * z / 2)
        assert made[:, d] == pytest.approx(expected, rel=1e-12)
    assert ec_densities(z, 1e7) == pytest.approx(made, rel=1e-4, abs=1e-8)


def test_lattice_counts_against_loops():
    inside = np.random.default_rng(1).random((5, 6, 7)) > 0.25

    def count(*axes):
        steps = [np.eye(3, dtype=int)[axis] for axis in axes]
        corners = [sum(some, np.zeros(3, int)) for r in range(len(steps) + 1)
                   for some in itertools.combinations(steps, r)]  # fmt: skip
        total = 0
        for voxel in np.ndindex(inside.shape):
            places = [tuple(voxel + corner) for corner in corners]
            total += all(max(np.subtract(p, inside.shape)) < 0 and inside[p] for p in places)
        return total

    cells = lattice(grid_of(inside))
    assert cells.points == count()
    assert cells.edges == (count(0), count(1), count(2))
    assert cells.faces == (count(1, 2), count(0, 2), count(0, 1))
    assert cells.cubes == count(0, 1, 2)


def test_the_zeroth_resel_is_the_euler_characteristic():
    solid = np.ones((7, 7, 7), bool)
    shell = solid.copy()
    shell[2:5, 2:5, 2:5] = False
    ring = solid.copy()
    ring[2:5, 2:5] = False
    pair = np.zeros((7, 7, 7), bool)
    pair[:2], pair[5:] = True, True
    assert [euler(shape) for shape in (solid, shell, ring, pair)] == [1, 2, 0, 2]


def test_resels_of_a_box_and_of_a_slice():
    fwhm = np.array([2.0, 4.0, 5.0])
    cells = lattice(Grid((21, 21, 21), np.eye(4)))
    a, b, c = 20 / fwhm
    assert resels(cells, fwhm) == pytest.approx([1, a + b + c, a * b + a * c + b * c, a * b * c])
    both = np.stack([fwhm, 2 * fwhm])
    assert resels(cells, both)[1] == pytest.approx(resels(cells, 2 * fwhm))
    flat = lattice(Grid((21, 21, 1), np.eye(4)))
    assert resels(flat, np.array([2.0, 4.0, np.nan])) == pytest.approx([1, a + b, a * b, 0])


@pytest.mark.parametrize("height", [1.0, 2.0, 2.5])
def test_excursions_of_noise_have_the_expected_euler_characteristic(height):
    rng = np.random.default_rng(7)
    fwhm, n = 6.0, 60
    sigma = fwhm / np.sqrt(8 * np.log(2))
    found = []
    for _ in range(n):
        field = gaussian_filter(rng.normal(size=(32, 32, 32)), sigma, mode="wrap", truncate=5)
        z = field[:24, :24, :24] / np.sqrt(np.square(field).mean())
        found.append(euler(z > height))
    expected = ec_densities(height) @ resels(lattice(Grid((24, 24, 24), np.eye(4))), [fwhm] * 3)
    error = np.std(found) / np.sqrt(n)
    assert np.mean(found) == pytest.approx(expected, abs=4 * error + 0.1)
    assert abs(expected) > 4 * error + 0.1


def test_the_height_for_a_box_of_ten_resels_each_way():
    """Recomputed independently: 10 x 10 x 10 resels, family-wise .05."""
    assert height_threshold(BOX) == pytest.approx(4.667140, rel=1e-6)
    cells = lattice(Grid((21, 21, 21), np.eye(4)))
    assert height_threshold(resels(cells, np.full(3, 2.0))) == pytest.approx(4.667140, rel=1e-6)


@pytest.mark.parametrize("df", [None, 6, 11, 200])
@pytest.mark.parametrize("size", [0.001, 0.3, 1, 40])
@pytest.mark.parametrize("alpha", [0.001, 0.05, 0.4])
def test_threshold_and_corrected_p_are_each_others_inverse(df, size, alpha):
    region = np.array([1.0, 3 * size, 3 * size**2, size**3])
    height = height_threshold(region, df, alpha)
    assert corrected_p(height, region, df) == pytest.approx(alpha, rel=1e-9)
    assert height >= (stats.norm.isf(alpha) if df is None else stats.t.isf(alpha, df)) - 1e-9
    p = corrected_p(np.linspace(0, 2 * height, 200), region, df)
    assert (np.diff(p[p < 1]) < 1e-12).all()


def test_the_last_crossing_counts():
    """With holes in a region the expectation may fall below alpha, rise, and fall again."""
    holed = np.array([4.0, 24.0, -40.0, 56.0])
    assert ec_densities(0.6) @ holed < 0.45 < ec_densities(2.0) @ holed
    height = height_threshold(holed, alpha=0.45)
    assert ec_densities(height) @ holed == pytest.approx(0.45, rel=1e-9)
    assert (ec_densities(np.linspace(height + 1e-6, height + 3, 1000)) @ holed < 0.45).all()


def test_a_t_of_few_degrees_of_freedom_can_have_no_height_at_all():
    assert height_threshold(BOX * 64, 4, 0.001) == np.inf


def test_rough_maps_take_bonferroni():
    cells = lattice(Grid((20, 20, 20), np.eye(4)))
    bound = stats.t.isf(0.05 / 8000, 15)
    rough = resels(cells, np.array([1.0, 1.0, 0.0]))
    assert height_threshold(rough, 15) == np.inf
    assert corrected_p(9.0, rough, 15) == 1
    for region in (rough, resels(cells, np.ones(3))):
        assert height_threshold(region, 15, n_features=8000) == pytest.approx(bound)
        assert corrected_p(bound, region, 15, n_features=8000) == pytest.approx(0.05)
    smooth = resels(cells, np.full(3, 5.0))
    assert height_threshold(smooth, 15, n_features=8000) == height_threshold(smooth, 15) < bound


def test_one_feature_needs_no_correction():
    one = resels(lattice(Grid((1, 1, 1), np.eye(4))), np.full(3, np.nan))
    assert height_threshold(one, 19) == pytest.approx(stats.t.isf(0.05, 19))


def test_a_region_with_holes_never_asks_less_than_one_feature():
    assert height_threshold(np.array([-3.0, 1.0, 0.0, 0.0])) == pytest.approx(stats.norm.isf(0.05))
    assert corrected_p(2.0, np.array([-3.0, 0.0, 0.0, 0.0])) == pytest.approx(stats.norm.sf(2.0))


def test_cluster_sizes():
    """Friston et al. 1994, HBM 1:210-220, recomputed independently."""
    sizes = ClusterSizes(50_000, (3.0, 3.0, 3.0), 3.0902323)
    assert sizes.expected_clusters == pytest.approx(17.454266, rel=1e-6)
    assert sizes.expected_clusters * sizes.expected_size == pytest.approx(50.0, rel=1e-6)
    assert sizes.expected_size == pytest.approx(2.864629, rel=1e-6)
    assert sizes.beta == pytest.approx(0.5993933, rel=1e-6)
    assert sizes.corrected_p(50) == pytest.approx(0.0051027, rel=1e-5)


@pytest.mark.parametrize("fwhm", [(3.0, 3.0, 3.0), (2.0, 5.0, np.nan), (4.0, np.nan, np.nan)])
@pytest.mark.parametrize("alpha", [0.001, 0.05, 0.4])
def test_the_critical_size_is_the_first_that_passes(fwhm, alpha):
    sizes = ClusterSizes(9_000, fwhm, 2.5)
    critical = sizes.critical_size(alpha)
    assert sizes.corrected_p(critical) <= alpha < sizes.corrected_p(critical - 1)
    # The distribution has the mean it is made from.
    k = np.linspace(0, 4000, 400_001)
    mean = np.trapezoid([sizes.p(x) for x in k[::20]], k[::20])
    assert mean == pytest.approx(sizes.expected_size, rel=0.01)


def test_the_edges_of_cluster_sizes():
    assert ClusterSizes(50, (9.0, 9.0, 9.0), 5.0).critical_size() == 1
    rough = ClusterSizes(50, (1.0, 1.0, 0.0), 3.0)
    assert rough.critical_size() == np.inf
    assert rough.corrected_p(40) == 1
    with pytest.raises(InputError, match=r"forming threshold too low: expected above 0"):
        ClusterSizes(50, (3.0, 3.0, 3.0), 0.0)
    with pytest.raises(InputError, match="no axis along which features neighbour"):
        ClusterSizes(1, (np.nan, np.nan, np.nan), 3.0)


def sizes_by_chance(df, D, n=200_000):
    """Cluster sizes of a t field over their mean, drawn (Cao 1999)."""
    rng = np.random.default_rng(2)
    square = rng.beta(1, (df - D) / 2, n) ** D * rng.chisquare(df + 1 - D, n) ** D
    for i in range(D):
        square /= rng.chisquare(df + 1 - i, n)
    return np.sqrt(square) / np.sqrt(square).mean()


@pytest.mark.parametrize(
    ("df", "fwhm"), [(5, (3.0,) * 3), (11, (3.0,) * 3), (11, (3.0, 3.0, np.nan))]
)
def test_sizes_of_clusters_of_a_t_field(df, fwhm):
    field = ClusterSizes(9_000, fwhm, 3.5, df)
    drawn = sizes_by_chance(df, field.dimensions)
    for share in (0.2, 1.0, 3.0, 6.0):
        seen = np.mean(drawn >= share)
        error = 4 * np.sqrt(seen / len(drawn))
        assert field.p(share * field.expected_size) == pytest.approx(seen, abs=error)
    for alpha in (0.001, 0.05, 0.4):
        critical = field.critical_size(alpha)
        assert field.corrected_p(critical) <= alpha < field.corrected_p(critical - 1)


def test_many_degrees_of_freedom_make_a_gaussian_field():
    t = stats.t.isf(0.001, 1e5)
    many = ClusterSizes(50_000, (3.0, 3.0, 3.0), t, 1e5)
    gauss = ClusterSizes(50_000, (3.0, 3.0, 3.0), stats.norm.isf(0.001))
    assert many.expected_clusters == pytest.approx(gauss.expected_clusters, rel=1e-3)
    assert many.corrected_p(50) == pytest.approx(gauss.corrected_p(50), rel=1e-3)
    # With few, clusters are more, smaller, and a few larger.
    few = ClusterSizes(50_000, (3.0, 3.0, 3.0), stats.t.isf(0.001, 7), 7)
    assert few.expected_clusters > 2 * gauss.expected_clusters
    assert few.p(20 * few.expected_size) > 5 * gauss.p(20 * gauss.expected_size)


def test_with_few_rows_clusters_of_noise_are_as_seldom_as_stated():
    """Six rows: the sizes of a Gaussian field are found twice as often as they should be."""
    rng, n, sets, alpha = np.random.default_rng(5), 6, 400, 0.1
    grid, t = grid_of(np.ones((8, 8, 8), bool)), stats.t.isf(0.001, n - 1)
    near = np.ones((3, 3, 3), bool)
    near[::2, ::2, ::2] = False
    few = gauss = 0
    for _ in range(sets):
        x = gaussian_filter(rng.normal(size=(n, 8, 8, 8)), (0, 1.2, 1.2, 1.2), mode="wrap")
        above = stats.ttest_1samp(x, 0).statistic > t
        largest = np.bincount(label(above, near)[0].ravel())[1:].max(initial=0)
        fwhm = tuple(fwhm_of_stack(x.reshape(n, -1), grid))
        few += largest >= ClusterSizes(512, fwhm, t, n - 1).critical_size(alpha)
        gauss += largest >= ClusterSizes(512, fwhm, stats.norm.isf(0.001)).critical_size(alpha)
    error = 4 * np.sqrt(alpha * (1 - alpha) / sets)
    assert few / sets < alpha + error < gauss / sets


def test_out_of_range_is_refused():
    with pytest.raises(InputError, match=r"too few degrees of freedom .* got 3"):
        height_threshold(BOX, 3)
    with pytest.raises(InputError, match=r"alpha out of range: expected 0 < alpha < 0.5, got 0.5"):
        height_threshold(BOX, alpha=0.5)
