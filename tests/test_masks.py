"""Mask rules: clusters against scipy.ndimage, spheres against brute force, ties, faults."""

from __future__ import annotations

import math
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from nibabel.affines import apply_affine, from_matvec
from scipy import ndimage, stats
from scipy.spatial.transform import Rotation
from sequester.nodes import masks
from sequester.nodes.errors import InputError
from sequester.nodes.groupmaps import Missing
from sequester.nodes.masks import (
    Cluster,
    Neighbourhood,
    PeakSphere,
    Strongest,
    Threshold,
    choose,
    components,
    sphere,
    strongest,
)
from sequester.nodes.procedure import Procedure
from sequester.nodes.space import Grid

RANK = {6: 1, 18: 2, 26: 3}
CONNECTIVITIES = st.sampled_from(sorted(RANK))
SHAPES = hnp.array_shapes(min_dims=3, max_dims=3, min_side=1, max_side=7)
SEEDS = st.integers(0, 2**32 - 1)


def scipy_clusters(volume: np.ndarray, connectivity: int) -> list[frozenset[int]]:
    """Clusters of a boolean volume as sets of voxel numbers, ordered by their first voxel."""
    labels, n = ndimage.label(volume, ndimage.generate_binary_structure(3, RANK[connectivity]))
    flat = labels.ravel()
    return sorted((frozenset(np.flatnonzero(flat == i)) for i in range(1, n + 1)), key=min)


def volume_of(grid: Grid, mask: np.ndarray) -> frozenset[int]:
    """The voxel numbers of a mask over a grid's features."""
    return frozenset(np.flatnonzero(grid.filled(mask)))


def random_grid(shape: tuple[int, int, int], rng: np.random.Generator) -> Grid:
    return Grid(shape, np.eye(4), rng.uniform(size=shape) < 0.9)


# -- clusters -------------------------------------------------------------------------------


@given(SHAPES, CONNECTIVITIES, st.floats(0.05, 0.7), st.integers(1, 3), SEEDS)
def test_components_of_several_maps_at_once_are_scipys(shape, connectivity, density, maps, seed):
    rng = np.random.default_rng(seed)
    grid = random_grid(shape, rng)
    above = rng.uniform(size=(grid.n_features, maps)) < density
    features = np.flatnonzero(above.any(axis=1))
    members = above[features]
    pairs = Neighbourhood(grid, connectivity).pairs(features)
    candidate, of_map, cluster = components(members, pairs)
    assert np.array_equal([candidate, of_map], np.nonzero(members))
    voxel = grid.voxels[features[candidate]]
    for m in range(maps):
        mine = of_map == m
        found = [frozenset(voxel[mine & (cluster == c)]) for c in np.unique(cluster[mine])]
        assert sorted(found, key=min) == scipy_clusters(grid.filled(above[:, m]), connectivity)
        # A number belongs to one map only.
        assert not set(cluster[mine]) & set(cluster[~mine])


@given(SHAPES, CONNECTIVITIES, st.integers(1, 5), SEEDS)
def test_all_clusters_of_sufficient_size_are_scipys(shape, connectivity, min_size, seed):
    rng = np.random.default_rng(seed)
    grid = random_grid(shape, rng)
    t = rng.normal(0, 3, grid.n_features)
    rule = Cluster(height=1.5, connectivity=connectivity, min_size=min_size, pick="all")
    big = [c for c in scipy_clusters(grid.filled(t > 1.5), connectivity) if len(c) >= min_size]
    assert volume_of(grid, choose(t, rule, grid)) == frozenset().union(*big)


@given(SHAPES, CONNECTIVITIES, st.integers(1, 4), st.sampled_from(["largest", "peak"]), SEEDS)
@settings(max_examples=200)
def test_one_cluster_is_picked_and_ties_go_to_the_lowest_feature(
    shape, connectivity, min_size, pick, seed
):
    rng = np.random.default_rng(seed)
    grid = random_grid(shape, rng)
    t = rng.integers(0, 5, grid.n_features).astype(float)  # coarse: ties are the rule
    value = grid.filled(t).ravel()
    big = [c for c in scipy_clusters(grid.filled(t > 2), connectivity) if len(c) >= min_size]
    # max() takes the first of equals, and the clusters are ordered by their first voxel.
    merit = len if pick == "largest" else lambda cluster: max(value[list(cluster)])
    expected = max(big, key=merit) if big else frozenset()
    rule = Cluster(height=2.0, connectivity=connectivity, min_size=min_size, pick=pick)
    assert volume_of(grid, choose(t, rule, grid)) == expected


@given(SHAPES, CONNECTIVITIES, st.integers(1, 4), st.tuples(*[st.integers(-2, 8)] * 3), SEEDS)
@settings(max_examples=200)
def test_the_nearest_cluster_has_the_nearest_voxel(shape, connectivity, min_size, near, seed):
    rng = np.random.default_rng(seed)
    grid = random_grid(shape, rng)
    t = rng.normal(0, 3, grid.n_features)
    where = np.stack(np.unravel_index(np.arange(np.prod(shape)), shape), axis=1)
    apart = np.square(where - near).sum(axis=1)  # integers: ties are exact
    big = [c for c in scipy_clusters(grid.filled(t > 1.5), connectivity) if len(c) >= min_size]
    expected = min(big, key=lambda c: min(apart[list(c)])) if big else frozenset()
    rule = Cluster(1.5, None, connectivity, min_size, "nearest", tuple(map(float, near)))
    assert volume_of(grid, choose(t, rule, grid)) == expected


@pytest.mark.parametrize("pick", ["largest", "peak", "nearest"])
def test_many_maps_at_once_pick_what_each_does_by_itself(pick, monkeypatch):
    """Which clusters cannot be picked is seen in all maps together."""
    monkeypatch.setattr(masks, "_MANY", 0)
    grid, near = Grid((9, 8, 7), np.eye(4)), (4.0, 3.0, 3.0) if pick == "nearest" else None
    hood, seen = Neighbourhood(grid, 18), 0
    for seed in range(60):
        rng = np.random.default_rng(seed)
        alike = rng.normal(0, 1, (grid.n_features, 1))
        # Coarse: ties are the rule.
        t = np.round(2 * (alike + 0.5 * rng.normal(0, 1, (grid.n_features, 6))))
        members = t > 3
        features = np.flatnonzero(members.any(axis=1))
        members, t = members[features], t[features]
        rule = Cluster(height=3.0, min_size=1 + seed % 4, pick=pick, near=near)
        distance = np.round(masks.distances(grid, near)) if near else None
        kept = masks.keep_clusters(members, features, rule, hood, t, distance)
        merits = {
            "largest": [None] * 6,
            "peak": [t[:, [k]] for k in range(6)],
            "nearest": [None if distance is None else -distance[features, None]] * 6,
        }[pick]
        each = zip(np.split(members, 6, axis=1), merits, strict=True)
        alone = [masks._kept(one, hood.pairs(features), rule, merit) for one, merit in each]
        assert np.array_equal(kept, np.concatenate(alone, axis=1))
        seen += kept.any(axis=0).sum()
    assert seen > 100


@pytest.mark.parametrize(("connectivity", "sizes"), [(6, [2, 2, 1]), (18, [3, 2]), (26, [5])])
def test_five_voxels_by_hand(connectivity, sizes):
    # The worked example of check-values (from memory; its sizes follow from the definitions).
    voxels = [(0, 0, 0), (0, 0, 1), (0, 1, 2), (1, 2, 3), (2, 2, 3)]
    t = np.zeros((3, 3, 4))
    t[tuple(zip(*voxels, strict=True))] = 5
    grid = Grid(t.shape, np.eye(4))
    features = np.flatnonzero(t)
    pairs = Neighbourhood(grid, connectivity).pairs(features)
    _, _, cluster = components(np.ones((5, 1), bool), pairs)
    assert sorted(np.bincount(cluster), reverse=True) == sizes
    largest = choose(t.ravel(), Cluster(height=1.0, connectivity=connectivity), grid)
    assert int(largest.sum()) == sizes[0]


def test_voxels_joined_only_through_a_voxel_outside_are_two_clusters():
    inside = np.array([True, True, False, True, True, True]).reshape(6, 1, 1)
    t = np.full(5, 9.0)
    chosen = choose(t, Cluster(height=1.0), Grid(inside.shape, np.eye(4), inside))
    assert chosen.tolist() == [False, False, True, True, True]


@given(
    SHAPES.filter(lambda shape: np.prod(shape) > 1),
    st.sampled_from(
        [
            Threshold(p=0.2),
            Cluster(p=0.2, pick="all", connectivity=26),
            Cluster(p=0.2, pick="nearest", near=(1.0, 2.0, 0.0)),
            Strongest(k=3),
            Strongest(fraction=0.2, map_kind="mean"),
            PeakSphere(1.5),
        ]
    ),
    st.sampled_from(["positive", "negative"]),
    SEEDS,
)
def test_masks_lie_in_their_search_region_and_what_is_outside_does_not_matter(
    shape, rule, tail, seed
):
    rng = np.random.default_rng(seed)
    n_voxels = int(np.prod(shape))
    search = rng.uniform(size=n_voxels) < 0.5
    search[rng.integers(n_voxels)] = True
    if rule == Strongest(k=3):
        rule = Strongest(k=min(3, int(search.sum())))
    grid = Grid(shape, np.eye(4), search)
    maps = rng.normal(0, 1, (5, n_voxels))
    procedure = Procedure(rule, tail=tail)
    masks = procedure.prepare(maps[:, search], list("abcde"), grid).masks()
    for mask in masks:
        assert set(np.flatnonzero(grid.filled(mask))) <= set(np.flatnonzero(search))
    if not isinstance(rule, Cluster):
        return
    # The whole grid with no data outside gives the same regions.
    whole = Grid(shape, np.eye(4))
    emptied = np.where(search, maps, np.nan)
    for mask, same in zip(
        masks, procedure.prepare(emptied, list("abcde"), whole).masks(), strict=True
    ):
        assert volume_of(grid, mask) == volume_of(whole, same)


# -- thresholds and the strongest -----------------------------------------------------------


def test_a_threshold_as_p_is_the_quantile_for_the_rows_with_data():
    counts = np.array([[20, 2], [1, 0], [12, 20]])
    expected = stats.t.isf(0.01, [[19, 1], [np.nan, np.nan], [11, 19]])
    made = Threshold(p=0.01).critical(counts)
    np.testing.assert_allclose(made, np.where(counts < 2, np.inf, expected), rtol=1e-13)
    assert Threshold(height=2.5).critical(counts).tolist() == [
        [2.5, 2.5],
        [np.inf, np.inf],
        [2.5, 2.5],
    ]


def test_a_feature_counts_by_its_own_number_of_rows():
    t = np.array([3.0, 3.0, np.nan, -9.0, np.inf])
    grid = Grid((5, 1, 1), np.eye(4))
    chosen = choose(t, Threshold(p=0.01), grid, n=np.array([20, 4, 20, 20, 20]))
    assert chosen.tolist() == [True, False, False, False, True]
    # Strictly above.
    assert not choose(t, Threshold(height=3.0), grid)[:2].any()


@given(
    hnp.arrays(float, st.integers(1, 30), elements=st.sampled_from([-1.5, 0, 0.5, 2, np.nan])),
    st.integers(1, 12),
)
def test_the_strongest_are_the_highest_with_ties_to_the_lowest_feature(values, k):
    usable = [i for i, value in enumerate(values) if not np.isnan(value)]
    expected = sorted(usable, key=lambda i: (-values[i], i))[:k]
    assert np.flatnonzero(strongest(values, k)).tolist() == sorted(expected)
    grid = Grid((len(values), 1, 1), np.eye(4))
    if k <= len(values):
        assert (choose(values, Strongest(k), grid) == strongest(values, k)).all()


@pytest.mark.parametrize(
    "procedure",
    [
        Procedure(Strongest(7)),
        Procedure(Threshold(height=2.0), on_empty="strongest", k=7),
    ],
)
def test_more_voxels_than_are_searched_cannot_be_the_strongest(procedure):
    """The words of the result would say 7, and it would have 6."""
    rng, grid = np.random.default_rng(1), Grid((6, 1, 1), np.eye(4))
    told = "k is larger than the search region: expected at most its 6 voxels, got 7"
    with pytest.raises(InputError, match=told):
        procedure.prepare(rng.normal(0, 1, (5, 6)), list("abcde"), grid)
    with pytest.raises(InputError, match=told):
        choose(rng.normal(0, 1, 6), Strongest(7), grid)


@pytest.mark.parametrize("usable", [0, 1, 99, 100, 300, 250_000])
def test_a_fraction_is_a_share_of_the_features_with_a_value(usable):
    rng = np.random.default_rng(usable)
    for percent in range(1, 100):
        # Exact arithmetic: 7 % of 100 features are 7, whatever binary makes of 0.07.
        expected = max(1, math.ceil(Fraction(percent, 100) * usable))
        rule = Strongest(fraction=percent / 100)
        assert rule.number(usable) == expected
        if usable > 300:
            continue
        values = rng.integers(0, 9, usable + 20).astype(float)  # ties
        values[rng.permutation(len(values))[:20]] = np.nan
        grid = Grid((len(values), 1, 1), np.eye(4))
        mask = choose(values, rule, grid)
        assert (mask == choose(values, Strongest(expected), grid)).all()
        assert int(mask.sum()) == min(expected, usable)


def test_the_strongest_by_mean_may_differ_from_those_by_t():
    # A large mean with a large spread, and a small one with hardly any.
    effects = np.array([[1.0, 9.0], [1.1, -1.0], [0.9, 8.0], [1.0, -2.0]])
    space, labels = Grid((2, 1, 1), np.eye(4)), list("abcd")
    by_t = Procedure(Strongest(1)).prepare(effects, labels, space).masks()
    by_mean = Procedure(Strongest(1, "mean")).prepare(effects, labels, space).masks()
    assert all(mask.tolist() == [True, False] for mask in by_t)
    assert all(mask.tolist() == [False, True] for mask in by_mean)


# -- spheres --------------------------------------------------------------------------------


@given(
    SHAPES,
    st.tuples(*[st.floats(-180, 180)] * 3),
    st.tuples(*[st.floats(0.5, 4)] * 3),
    st.floats(0.3, 12),
    SEEDS,
)
def test_a_sphere_holds_the_voxels_within_its_radius(shape, angles, sizes, radius, seed):
    rng = np.random.default_rng(seed)
    turn = Rotation.from_euler("xyz", angles, degrees=True).as_matrix()
    affine = from_matvec(turn @ np.diag([-sizes[0], *sizes[1:]]), rng.uniform(-50, 50, 3))
    grid = Grid(shape, affine, rng.uniform(size=shape) < 0.8)
    centre = apply_affine(affine, rng.uniform(0, shape))
    apart = np.array(
        [
            np.sqrt(sum((mm - centre) ** 2))
            for mm in apply_affine(
                affine, np.argwhere(np.isin(np.arange(np.prod(shape)), grid.voxels).reshape(shape))
            )
        ]
    ).reshape(-1)
    if not (apart <= radius).any():
        with pytest.raises(InputError, match=r"sphere holds no feature: got centre .* mm, radius"):
            sphere(grid, tuple(centre), radius)
        return
    clear = np.abs(apart - radius) > 2e-6
    assert (sphere(grid, tuple(centre), radius) == (apart <= radius))[clear].all()


@pytest.mark.parametrize(("reach", "n"), [(1, 7), (2, 19), (3, 27), (4, 33)])
def test_voxels_on_the_surface_belong_to_the_sphere_whatever_the_rounding(reach, n):
    # Voxels at squared distances 0, 1, 2, 3, 4 of a cubic lattice: 1 + 6 + 12 + 8 + 6.
    for seed in range(20):
        rng = np.random.default_rng(seed)
        turn = Rotation.random(random_state=seed).as_matrix()
        affine = from_matvec(turn * 2.4, rng.uniform(-90, 90, 3))
        centre = apply_affine(affine, [3, 3, 3])
        mask = sphere(Grid((7, 7, 7), affine), tuple(centre), 2.4 * np.sqrt(reach))
        assert int(mask.sum()) == n


@given(SHAPES, st.floats(0.3, 9), st.tuples(*[st.floats(-180, 180)] * 3), SEEDS)
def test_a_peak_sphere_is_the_sphere_around_the_first_highest_feature(shape, radius, angles, seed):
    rng = np.random.default_rng(seed)
    turn = Rotation.from_euler("xyz", angles, degrees=True).as_matrix()
    affine = from_matvec(turn @ np.diag([-2.0, 2.5, 3.0]), rng.uniform(-50, 50, 3))
    grid = Grid(shape, affine, rng.uniform(size=shape) < 0.8)
    values = rng.integers(-5, 5, grid.n_features).astype(float)  # coarse: ties
    values[rng.uniform(size=len(values)) < 0.4] = np.nan
    chosen = choose(values, PeakSphere(radius), grid)
    if np.isnan(values).all():
        assert not chosen.any()
        return
    peak = min(np.flatnonzero(~np.isnan(values)), key=lambda i: (-values[i], i))
    assert chosen[peak]
    centre = tuple(grid.coordinates()[peak])
    assert (chosen == sphere(grid, centre, radius)).all()


@pytest.mark.parametrize(("reach", "n"), [(1, 7), (2, 19), (3, 27), (4, 33)])
def test_a_peak_sphere_holds_its_surface_whatever_the_rounding(reach, n):
    # As for a sphere around a point: 1 + 6 + 12 + 8 + 6 lattice points.
    t = np.zeros((7, 7, 7))
    t[3, 3, 3] = 1
    for seed in range(20):
        rng = np.random.default_rng(seed)
        turn = Rotation.random(random_state=seed).as_matrix()
        grid = Grid(t.shape, from_matvec(turn * 2.4, rng.uniform(-90, 90, 3)))
        assert int(choose(t.ravel(), PeakSphere(2.4 * np.sqrt(reach)), grid).sum()) == n


# -- faults ---------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (Threshold, "exactly one of height, p and control: got height None, p None"),
        (
            lambda: Threshold(3.0, 0.01),
            "exactly one of height, p and control: got height 3.0, p 0.01",
        ),
        (lambda: Threshold(height=-1.0), "height out of range: expected height > 0, got -1.0"),
        (lambda: Threshold(p=0.5), "p out of range: expected 0 < p < 0.5, got 0.5"),
        (lambda: Cluster(p=0.01, pick="best"), "unknown pick: expected one of largest, peak,"),
        (lambda: Cluster(p=0.01, connectivity=8), "expected 6, 18 or 26, got 8"),
        (lambda: Cluster(p=0.01, min_size=0), "min_size out of range: expected >= 1, got 0"),
        (lambda: Cluster(p=0.01, pick="nearest"), "go together: got pick 'nearest', near None"),
        (lambda: Cluster(p=0.01, near=(0, 0, 0)), "go together: got pick 'largest', near"),
        (lambda: Strongest(0), "exactly one of k and fraction: got k 0, fraction 0.0"),
        (lambda: Strongest(3, fraction=0.1), "of k and fraction: got k 3, fraction 0.1"),
        (lambda: Strongest(-1), "k out of range: expected >= 1, got -1"),
        (lambda: Strongest(fraction=1.0), "fraction out of range: expected 0 < fraction < 1, got"),
        (lambda: Strongest(fraction=-0.1), "expected 0 < fraction < 1, got -0.1"),
        (lambda: Strongest(fraction=float("nan")), "expected 0 < fraction < 1, got nan"),
        (lambda: Strongest(3, "z"), "unknown map: expected t or mean, got z"),
        (lambda: PeakSphere(0.0), "radius out of range: expected > 0 mm, got 0.0"),
        (lambda: PeakSphere(float("nan")), "radius out of range: expected > 0 mm, got nan"),
        (lambda: PeakSphere(6.0, "z"), "unknown map: expected t or mean, got z"),
        (lambda: sphere(Grid((2, 2, 2), np.eye(4)), (0, 0, 0), 0.0), "radius out of range"),
        (
            lambda: choose(np.zeros(8), Threshold(p=0.01), Grid((2, 2, 2), np.eye(4))),
            "a threshold given as p or by what it controls needs the number of rows",
        ),
    ],
)
def test_a_rule_that_makes_no_sense_is_refused_with_the_reason(make, message):
    with pytest.raises(InputError) as caught:
        make()
    assert message in str(caught.value)


def test_rules_describe_themselves():
    assert Threshold(p=0.01).describe() == "all voxels with p < 0.01"
    assert Threshold(height=3.1).describe() == "all voxels with t > 3.1"
    assert Cluster(p=0.001, connectivity=6, min_size=4).describe() == (
        "the largest cluster of voxels with p < 0.001 (connectivity 6, at least 4 voxels)"
    )
    assert (
        "nearest to (1, 2, 3) mm"
        in Cluster(height=3.0, pick="nearest", near=(1.0, 2.0, 3.0)).describe()
    )
    assert Strongest(5).describe() == "the 5 voxels with the highest group t"
    share = Strongest(fraction=0.05, map_kind="mean")
    assert share.describe() == "the 5 % of the voxels with the highest group mean"
    assert share.describe("negative") == "the 5 % of the voxels with the lowest group mean"
    around = PeakSphere(7.5)
    assert around.describe() == "the voxels within 7.5 mm of the one with the highest group t"
    assert around.describe("negative").endswith("of the one with the lowest group t")


def test_the_missing_rule_reaches_the_mask():
    # A feature with data in too few rows is in no mask, however strong.
    effects = np.full((6, 2), 5.0) + np.arange(6)[:, None] / 10
    effects[:3, 0] = np.nan
    ready = Procedure(Threshold(height=2.0), missing=Missing()).prepare(
        effects, list("abcdef"), Grid((2, 1, 1), np.eye(4))
    )
    assert all(mask.tolist() == [False, True] for mask in ready.masks())
