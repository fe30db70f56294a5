"""Grids: neighbour tables, coordinates and the way back to a volume."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from nibabel.affines import apply_affine, from_matvec
from scipy import ndimage
from scipy.spatial.transform import Rotation
from sequester.nodes.space import Grid, offsets

CONNECTIVITIES = (6, 18, 26)
VOLUMES = hnp.arrays(bool, hnp.array_shapes(min_dims=3, max_dims=3, min_side=1, max_side=5))


def oblique() -> np.ndarray:
    """Rotated, anisotropic, one axis mirrored, off-centre."""
    turn = Rotation.from_euler("xyz", [20, -35, 50], degrees=True).as_matrix()
    return from_matvec(turn @ np.diag([-2.0, 2.5, 3.5]), [-31.0, 12.5, 7.0])


@pytest.mark.parametrize("connectivity", CONNECTIVITIES)
def test_the_steps_are_those_of_scipys_structuring_element(connectivity):
    rank = CONNECTIVITIES.index(connectivity) + 1
    element = ndimage.generate_binary_structure(3, rank)
    element[1, 1, 1] = False
    # Both in lexicographic order.
    assert (offsets(connectivity) == np.argwhere(element) - 1).all()
    assert len(offsets(connectivity)) == connectivity


@pytest.mark.parametrize("connectivity", CONNECTIVITIES)
def test_offset_j_is_the_opposite_of_offset_minus_one_minus_j(connectivity):
    steps = offsets(connectivity)
    assert (steps == -steps[::-1]).all()


@given(VOLUMES, st.sampled_from(CONNECTIVITIES))
@settings(max_examples=50)
def test_neighbours_equal_a_search_over_all_pairs(inside, connectivity):
    grid = Grid(inside.shape, np.eye(4), inside)
    table = grid.neighbours(connectivity)
    where = np.argwhere(inside)
    assert table.shape == (len(where), connectivity)
    for column, step in enumerate(offsets(connectivity)):
        for feature, voxel in enumerate(where):
            match = np.flatnonzero((where == voxel + step).all(axis=1))
            assert table[feature, column] == (match[0] if len(match) else -1)


@given(VOLUMES, st.sampled_from(CONNECTIVITIES))
@settings(max_examples=50)
def test_who_is_a_neighbour_has_a_neighbour_in_the_opposite_column(inside, connectivity):
    table = Grid(inside.shape, np.eye(4), inside).neighbours(connectivity)
    feature, column = np.nonzero(table >= 0)
    assert (table[table[feature, column], connectivity - 1 - column] == feature).all()


@given(VOLUMES)
@settings(max_examples=50)
def test_coordinates_are_those_of_the_affine(inside):
    grid = Grid(inside.shape, oblique(), inside)
    expected = apply_affine(oblique(), np.argwhere(inside))
    np.testing.assert_allclose(grid.coordinates(), expected, rtol=0, atol=1e-12)


@given(VOLUMES, st.data())
@settings(max_examples=50)
def test_a_volume_of_values_reads_back_and_is_zero_elsewhere(inside, data):
    grid = Grid(inside.shape, np.eye(4), inside)
    values = np.arange(1, grid.n_features + 1, dtype=np.int16)
    volume = grid.filled(values)
    assert volume.shape == inside.shape
    assert volume.dtype == np.int16
    assert (volume[inside] == values).all()
    assert not volume[~inside].any()
    keep = data.draw(hnp.arrays(bool, grid.n_features))
    part = grid.restricted(keep)
    assert (part.voxels == grid.voxels[keep]).all()
    assert (part.filled(values[keep])[inside] == values * keep).all()


def test_the_size_of_a_feature_is_the_volume_of_a_voxel():
    assert Grid((1, 1, 1), oblique()).feature_size == pytest.approx(2.0 * 2.5 * 3.5)


def test_faults_are_named():
    with pytest.raises(ValueError, match="connectivity is 6, 18 or 26, not 8"):
        offsets(8)
    with pytest.raises(ValueError, match=r"5 flags for a grid of 8 voxels \(2, 2, 2\)"):
        Grid((2, 2, 2), np.eye(4), np.ones(5, bool))
