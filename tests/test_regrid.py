"""Masks and labels on another grid, against scipy.ndimage and against counting."""

import nibabel as nib
import numpy as np
import pytest
from nibabel.processing import resample_from_to
from scipy.ndimage import affine_transform
from sequester.nodes.errors import InputError
from sequester.nodes.images import Geometry, read_mask, write_map
from sequester.nodes.regrid import covered_fraction, nearest_label
from sequester.nodes.space import Grid

RNG = np.random.default_rng(8)
LABELS = RNG.integers(0, 9, (9, 8, 7))


def affine(size, origin=(0.0, 0.0, 0.0), turn=0.0, flip=False):
    """Voxel size, origin in mm, rotation about two axes, left-handed when flipped."""
    c, s = np.cos(turn), np.sin(turn)
    about_z = np.array([[c, -s, 0], [s, c, 0], [0, 0, 1]])
    about_x = np.array([[1, 0, 0], [0, c, -s], [0, s, c]])
    made = np.eye(4)
    made[:3, :3] = about_z @ about_x @ np.diag(np.broadcast_to(size, 3))
    if flip:
        made[:3, 0] *= -1
    made[:3, 3] = origin
    return made


SOURCES = {
    "axis-aligned": affine(2.0, (-3.1, 1.3, 0.2)),
    "oblique": affine((2.0, 2.5, 1.7), (-3.1, 1.3, 0.2), turn=0.3),
    "left-handed": affine(2.0, (12.0, 1.3, 0.2), flip=True),
}


@pytest.mark.parametrize("source", SOURCES.values(), ids=SOURCES)
@pytest.mark.parametrize("target", [affine(1.3), affine(3.0, (1.0, 2.0, 3.0), turn=-0.2)])
def test_labels_agree_with_scipy_voxel_for_voxel(source, target):
    shape = (11, 10, 9)
    ours = nearest_label(LABELS, Grid(LABELS.shape, source), Grid(shape, target))
    both = np.linalg.inv(source) @ target
    theirs = affine_transform(LABELS, both[:3, :3], both[:3, 3], output_shape=shape, order=0)
    # Beyond the source's outer centres SciPy gives nothing, we up to the outer voxels' edges.
    where = np.stack(np.indices(shape), axis=-1).reshape(-1, 3) @ both[:3, :3].T + both[:3, 3]
    inner = ((where >= 0) & (where <= np.array(LABELS.shape) - 1)).all(axis=1)
    assert inner.sum() > 50
    np.testing.assert_array_equal(ours[inner], theirs.ravel()[inner])


@pytest.mark.parametrize("source", SOURCES.values(), ids=SOURCES)
@pytest.mark.parametrize(
    "target",
    [
        affine(1.3, (14.0, 0.3, -0.1), flip=True),
        affine((1.1, 2.3, 3.1), (16.0, 0.7, 0.4), turn=0.4, flip=True),
        affine(1.7, (-2.0, 1.0, 0.1))[:, [2, 0, 1, 3]],  # axes stored in another order
    ],
    ids=["left-handed", "oblique and left-handed", "other axes"],
)
def test_labels_agree_with_nibabel_on_the_whole_grid(source, target):
    # Zeros around the labels: then the grid's edge, where conventions differ, does not matter.
    padded = np.pad(LABELS, 2).astype(np.int16)
    origin = source.copy()
    origin[:3, 3] -= 2 * source[:3, :3].sum(axis=1)
    shape = (19, 18, 17)
    theirs = resample_from_to(nib.Nifti1Image(padded, origin), (shape, target), order=0)
    ours = nearest_label(padded, Grid(padded.shape, origin), Grid(shape, target))
    assert ours.dtype == padded.dtype
    assert (ours != 0).sum() > 250
    np.testing.assert_array_equal(ours.reshape(shape), theirs.get_fdata())


def test_labels_do_not_depend_on_how_the_source_is_stored():
    source = nib.Nifti1Image(LABELS.astype(np.int16), SOURCES["left-handed"])
    other = nib.as_closest_canonical(source)
    assert not np.allclose(other.affine, source.affine)
    target = Grid((8, 8, 8), affine(2.2, (-4.0, 1.0, 0.0), turn=0.2))
    one, same = (
        nearest_label(np.asarray(image.dataobj), Grid(image.shape, image.affine), target)
        for image in (source, other)
    )
    assert one.any()
    np.testing.assert_array_equal(one, same)


@pytest.mark.parametrize("source", SOURCES.values(), ids=SOURCES)
def test_covered_fraction_agrees_with_many_points(source):
    mask = LABELS > 4
    target = Grid((5, 5, 5), affine(3.1, (0.3, 2.0, 1.0), turn=0.1))
    ours = covered_fraction(mask, Grid(mask.shape, source), target)
    points = RNG.uniform(-0.5, 0.5, (4000, 3)) @ target.affine[:3, :3].T
    for feature in range(0, target.n_features, 13):
        mm = target.coordinates()[feature] + points
        where = np.rint((mm - source[:3, 3]) @ np.linalg.inv(source[:3, :3]).T).astype(int)
        valid = ((where >= 0) & (where < mask.shape)).all(axis=1)
        share = mask[tuple(where[valid].T)].sum() / len(points)
        assert abs(ours[feature] - share) < 0.12


def test_a_mask_of_finer_voxels_is_brought_to_the_maps(tmp_path):
    def rows(matrix):
        return tuple(tuple(float(x) for x in row) for row in matrix)

    fine = np.zeros((12, 12, 12), bool)
    fine[2:8, 2:8, 2:7] = True
    shift = affine(1.0, (0.5, 0.5, 0.5))  # two fine voxels to a coarse one
    path = write_map(tmp_path / "fine.nii.gz", fine, Geometry(fine.shape, rows(shift)))
    maps = ("the maps", Geometry((6, 6, 6), rows(affine(2.0, (1.0, 1.0, 1.0)))))
    with pytest.raises(InputError, match="grids differ"):
        read_mask(path, maps)
    mask, geometry = read_mask(path, maps, regrid=True)
    assert geometry == maps[1]
    expected = np.zeros((6, 6, 6), bool)
    expected[1:4, 1:4, 1:4] = True  # the last slice is covered by exactly half
    np.testing.assert_array_equal(mask, expected)
    far = ("the maps", Geometry((6, 6, 6), rows(affine(2.0, (900.0, 1.0, 1.0)))))
    with pytest.raises(InputError, match="no voxel is covered by half of the mask"):
        read_mask(path, far, regrid=True)
