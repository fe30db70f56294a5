"""Regions given beforehand: labels, spheres, erosion and mirror images, on grids of all kinds."""

import re
from contextlib import suppress
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from nibabel.affines import apply_affine
from nipype import MapNode, Node, Workflow
from nipype.interfaces.utility import Merge
from planting import a_grid
from scipy import ndimage
from scipy.spatial.distance import cdist
from sequester.nodes.errors import InputError
from sequester.nodes.images import (
    read_label_table,
    read_labels,
    read_map,
    table_beside,
    write_map,
)
from sequester.nodes.interfaces import (
    CombineMasks,
    ErodeMask,
    Extract,
    LabelMask,
    MirrorMask,
    RegridLabels,
)
from sequester.nodes.masks import sphere
from sequester.nodes.regions import combined, eroded, labelled, mirrored, numbers_of
from sequester.nodes.space import Grid
from sequester.nodes.touch import Unit
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.study import Origin, Row, Study

SEEDS = st.integers(0, 2**32 - 1)


pytestmark = pytest.mark.usefixtures("quiet_engine")


def turned(sizes, origin=(0.0, 0.0, 0.0), *, oblique=False, flip=False):
    """Voxel sizes and origin in mm; rotated by 3-4-5 angles, left-handed when asked."""
    z = np.array([[0.8, -0.6, 0], [0.6, 0.8, 0], [0, 0, 1]])
    x = np.array([[1, 0, 0], [0, 0.8, 0.6], [0, -0.6, 0.8]])
    made = np.eye(4)
    made[:3, :3] = (z @ x if oblique else np.eye(3)) @ np.diag(sizes)
    if flip:
        made[:3, 0] *= -1
    made[:3, 3] = origin
    return made


def blob(shape, seed, share=0.8):
    """A mask of a few lumps."""
    noise = ndimage.gaussian_filter(np.random.default_rng(seed).normal(size=shape), 1.5)
    return noise > np.quantile(noise, 1 - share)


# -- spheres --------------------------------------------------------------------------------

# Integer lattice points with x2 + y2 + z2 <= r2 for r = 0 ... 6 (OEIS A000605).
LATTICE_POINTS = (1, 7, 33, 123, 257, 515, 925)


def test_the_published_numbers_of_lattice_points_are_those_of_a_count():
    squares = (np.stack(np.indices((13, 13, 13))) - 6) ** 2
    assert tuple(int((squares.sum(axis=0) <= r * r).sum()) for r in range(7)) == LATTICE_POINTS


@pytest.mark.parametrize("steps", range(7))
@pytest.mark.parametrize(
    ("size", "origin", "flip"),
    [
        (1.0, (0.0, 0.0, 0.0), False),
        (2.0, (-13.3, 7.1, 0.7), False),
        (2.0, (90.0, -126, -72), True),
    ],
)
def test_a_sphere_on_a_voxel_holds_the_lattice_points(steps, size, origin, flip):
    affine = turned((size,) * 3, origin, flip=flip)
    centre = tuple(apply_affine(affine, (7, 8, 7)))
    radius = steps * size or size / 2
    inside = sphere(Grid((15, 16, 17), affine), centre, radius)
    assert int(inside.sum()) == LATTICE_POINTS[steps]


@pytest.mark.parametrize("radius", [3, 5, 8])
@pytest.mark.parametrize(
    "axes",
    [
        np.diag([2, 3, 1]),
        np.array([[2, 1, 0], [0, 2, 1], [0, 0, 3]]),  # sheared
        np.array([[-4, 3, 0], [3, 4, 0], [0, 0, 2]]),  # oblique, left-handed
    ],
    ids=["anisotropic", "sheared", "oblique"],
)
def test_a_sphere_holds_the_points_of_the_quadratic_form(axes, radius):
    shape, middle = (23, 23, 23), np.array([11, 11, 11])
    affine = np.eye(4)
    affine[:3, :3], affine[:3, 3] = axes, (-20.0, 7.0, 3.0)
    steps = np.stack(np.indices(shape), axis=-1).reshape(-1, 3) - middle
    form = axes.T @ axes  # whole numbers: the count is exact
    count = int((np.einsum("ij,jk,ik->i", steps, form, steps) <= radius**2).sum())
    assert sphere(Grid(shape, affine), tuple(apply_affine(affine, middle)), radius).sum() == count


# -- labels and tables ----------------------------------------------------------------------

TABLE = [
    (0, "Background"),
    (1, "Arbor"),
    (2, "arbor"),
    (3, "Brook"),
    (17, "Cinder"),
    (18, "Cinder"),
]


@pytest.mark.parametrize(
    ("labels", "numbers"),
    [
        (["Arbor"], (1,)),
        (["arbor"], (2,)),  # as written, before any other case
        (["BROOK", 1, 99], (1, 3, 99)),
        (["Brook", 3], (3,)),
    ],
)
def test_names_and_numbers_become_numbers(labels, numbers):
    assert numbers_of(labels, TABLE) == numbers


@pytest.mark.parametrize(
    ("label", "message"),
    [
        ("ARBOR", "several labels (t.tsv): got 'ARBOR': 1, 2; give their numbers"),
        ("Cinder", "several labels (t.tsv): got 'Cinder': 17, 18; give their numbers"),
        ("brok", "no label of this name (t.tsv): expected a name like Brook, got 'brok'"),
        ("xxx", "no label of this name (t.tsv): expected one of 4 names, got 'xxx'"),
    ],
)
def test_a_name_that_is_not_one_label_is_refused(label, message):
    with pytest.raises(InputError, match=re.escape(message)):
        numbers_of([label], TABLE, "t.tsv")


def test_no_more_than_five_close_names_are_told():
    with pytest.raises(InputError) as raised:
        numbers_of(["Bed 0"], [(i, f"Bed {i}") for i in range(1, 10)])
    assert raised.value.fields["expected"].count("Bed") == 5


def test_a_label_on_no_voxel_is_refused_not_dropped():
    volume = np.arange(8).reshape(2, 2, 2)
    assert labelled(volume, [3, 5]).sum() == 2
    expected = "label on no voxel (d.nii): expected labels of the image: 1, 2, 3, 4, 5 and 2 more"
    with pytest.raises(InputError, match=re.escape(f"{expected}, got 8, 9;")):
        labelled(volume, [3, 8, 9], "d.nii")


def table(path, text):
    path.write_bytes(text.encode())
    return path


def test_a_label_table_is_read_as_spreadsheets_leave_it(tmp_path):
    text = (
        "\ufeffindex\tname\tabbreviation\tcolor\tmapping\r\n"
        '1\tArbor, "old"\tA\t#ff0000\tn/a\r\n'
        "\r\n"
        " 2 \tBrook \tB\tn/a\t1\r\n"
        "3\tn/a\tn/a\tn/a\tn/a\r\n"
        "\t\t\t\t\r\n"
        "-4\tCinder\t\t\t"
    )
    read = read_label_table(table(tmp_path / "a_dseg.tsv", text))
    assert read == [(1, 'Arbor, "old"'), (2, "Brook"), (-4, "Cinder")]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "without index and name .*got an empty file"),
        ("index,name\n1,Arbor\n", "without index and name .*got index,name"),
        ("index\tname\n1.5\tArbor\n", "line 2.*expected 0, 1, ..., got 1.5"),
        ("index\tname\n1\tArbor\n2\n", "another length .*line 3.*expected 2 .* got 1"),
    ],
)
def test_a_broken_table_is_refused_by_its_line(tmp_path, text, message):
    with pytest.raises(InputError, match=message):
        read_label_table(table(tmp_path / "a.tsv", text))


def test_an_absent_and_a_binary_table_are_refused(tmp_path):
    (tmp_path / "b.tsv").write_bytes(b"\xff\xfe\x00")
    for name in ("a.tsv", "b.tsv"):
        with pytest.raises(InputError, match=f"unreadable label table .*{name}"):
            read_label_table(tmp_path / name)


@pytest.mark.parametrize("ending", [".nii", ".nii.gz", ".img"])
def test_the_table_beside_has_the_name_of_the_image(tmp_path, ending):
    image = tmp_path / f"tpl-x_atlas-1.2_dseg{ending}"
    assert table_beside(image) is None
    made = table(tmp_path / "tpl-x_atlas-1.2_dseg.tsv", "index\tname\n")
    assert table_beside(image) == made


LABELS = np.array([0, 3, 3, 70000, 0, 12, 3, 0]).reshape(2, 2, 2)


@pytest.mark.parametrize(
    ("stored", "read"),
    [
        (np.uint32, np.uint32), (np.dtype(">i4"), np.int32), (np.int64, np.int32),
        (np.float32, np.int32), (np.float64, np.int32),
    ],
)  # fmt: skip
def test_labels_keep_their_numbers(tmp_path, stored, read):
    image = nib.Nifti1Image(LABELS.astype(stored), np.eye(4), dtype=stored)
    nib.save(image, tmp_path / "dseg.nii")
    labels, _ = read_labels(tmp_path / "dseg.nii")
    np.testing.assert_array_equal(labels, LABELS)
    assert labels.dtype.newbyteorder("=") == read
    # 2**24 + 1 has no float32: labels must not go through one.
    big = nib.Nifti1Image(np.full((1, 1, 1), 2**24 + 1, np.int32), np.eye(4))
    nib.save(big, tmp_path / "big.nii")
    assert read_labels(tmp_path / "big.nii")[0].item() == 2**24 + 1


@pytest.mark.parametrize(
    ("data", "message"),
    [
        (np.array([1.0, 0.25, 0.5]), r"got 0\.25 and the like \(float64\) at 2 voxels"),
        (np.array([1, np.nan]), "got nan"),
        (np.array([1, -np.inf]), "got -inf"),
        (np.array([1, -(2**63)]), "got -9223372036854775808"),
        (np.array([1j]), "complex"),
    ],
)
def test_what_is_no_label_image_is_refused(tmp_path, data, message):
    image = nib.Nifti1Image(data.reshape(-1, 1, 1), np.eye(4), dtype=data.dtype)
    nib.save(image, tmp_path / "p.nii")
    with pytest.raises(InputError, match=f"something else than labels .*p.nii.*{message}"):
        read_labels(tmp_path / "p.nii")


def test_a_4d_label_image_is_refused(tmp_path):
    nib.save(nib.Nifti1Image(np.ones((2, 2, 2, 3), np.uint8), np.eye(4)), tmp_path / "4.nii")
    with pytest.raises(InputError, match=r"4-D label image .*got 3 volumes"):
        read_labels(tmp_path / "4.nii")


# -- combining ------------------------------------------------------------------------------


@given(st.integers(1, 4), SEEDS)
def test_combinations_are_those_of_sets(n, seed):
    masks = list(np.random.default_rng(seed).random((n, 2, 3, 2)) < 0.6)
    first, *others = sets = [set(np.flatnonzero(mask)) for mask in masks]
    expected = {
        "union": first.union(*others),
        "intersection": first.intersection(*others),
        "difference": first.difference(*others),
    }
    for how, voxels in expected.items():
        assert set(np.flatnonzero(combined(masks, how))) == voxels
    assert sets == [set(np.flatnonzero(mask)) for mask in masks]  # inputs are left alone
    with pytest.raises(InputError, match=r"unknown combination: expected union, .* got 'xor'"):
        combined(masks, "'xor'")


# -- erosion --------------------------------------------------------------------------------


@pytest.mark.parametrize("sizes", [(2, 2, 2), (1.5, 2.5, 4)])
@pytest.mark.parametrize("oblique", [False, True])
@pytest.mark.parametrize("mm", [1.0, 2.0, 4.0, 5.5])
def test_erosion_agrees_with_the_distance_transform(sizes, oblique, mm):
    mask = blob((22, 20, 18), seed=3)
    grid = Grid(mask.shape, turned(sizes, (5, -3, 2), oblique=oblique, flip=True))
    far = ndimage.distance_transform_edt(np.pad(mask, 1), sampling=sizes)[1:-1, 1:-1, 1:-1]
    ours = eroded(mask, grid, mm)
    np.testing.assert_array_equal(ours, far > mm + 1e-9)
    assert ours.any()
    assert (ours.sum() < mask.sum()) == (mm >= min(sizes))


def test_erosion_reaches_as_far_along_every_axis_of_long_thin_voxels():
    # Turned, so that no axis of the grid is one of the world.
    mask, sizes = np.ones((34, 16, 9), bool), (1.0, 3.0, 5.0)
    mask[17, 8, 4] = False
    far = ndimage.distance_transform_edt(np.pad(mask, 1), sampling=sizes)[1:-1, 1:-1, 1:-1]
    ours = eroded(mask, Grid(mask.shape, turned(sizes, oblique=True)), 12.0)
    np.testing.assert_array_equal(ours, far > 12.0 + 1e-9)
    assert ours.any()


@given(
    st.lists(st.integers(-3, 3), min_size=9, max_size=9).filter(
        lambda entries: (
            abs(np.linalg.det(np.reshape(entries, (3, 3)))) > 0.5
            # A mm is no more than one step: then six voxels around the mask are enough.
            and np.linalg.norm(np.linalg.inv(np.reshape(entries, (3, 3))), axis=1).max() <= 1
        )
    ),
    st.floats(0.5, 6),
    SEEDS,
)
def test_erosion_on_sheared_grids_agrees_with_all_distances(entries, mm, seed):
    affine = np.eye(4)
    affine[:3, :3] = np.reshape(entries, (3, 3))
    rng = np.random.default_rng(seed)
    mask = rng.random(rng.integers(1, 6, 3)) < rng.choice([0.9, 1.0])
    padded = np.pad(mask, 6)
    inside, outside = (apply_affine(affine, np.argwhere(m)) for m in (padded, ~padded))
    expected = np.zeros_like(mask)
    if mask.any():
        expected[mask] = cdist(inside, outside).min(axis=1) > mm + 1e-6
    np.testing.assert_array_equal(eroded(mask, Grid(mask.shape, affine), mm), expected)


def test_an_erosion_without_a_distance_is_refused():
    for mm in (0.0, -1.0, float("nan")):
        with pytest.raises(InputError, match="erosion out of range: expected > 0 mm, got"):
            eroded(np.ones((2, 2, 2), bool), Grid((2, 2, 2), np.eye(4)), mm)


def test_a_distance_beyond_the_grid_leaves_nothing_and_costs_nothing():
    mask = np.ones((40, 40, 40), bool)
    assert not eroded(mask, Grid(mask.shape, np.eye(4)), 1e6).any()


# -- mirror images --------------------------------------------------------------------------


def symmetric(n, size, *, oblique, flip):
    """A grid of n voxels in x that x -> -x maps to itself; oblique: turned about x only."""
    made = turned((size, 2.0, 2.5), flip=flip)
    if oblique:
        about_x = np.array([[1, 0, 0], [0, 0.8, 0.6], [0, -0.6, 0.8]])
        made[:3, :3] = about_x @ made[:3, :3]
    made[:3, 3] = (-made[0, 0] * (n - 1) / 2, 4.1, -7.7)
    return made


@pytest.mark.parametrize("n", [10, 11])  # the midline between voxels, and through them
@pytest.mark.parametrize("size", [1.0, 2.2])
@pytest.mark.parametrize("oblique", [False, True])
@pytest.mark.parametrize("flip", [False, True])
def test_on_a_symmetric_grid_the_mirror_image_is_the_array_turned_round(n, size, oblique, flip):
    mask = blob((n, 8, 7), seed=5, share=0.2)
    grid = Grid(mask.shape, symmetric(n, size, oblique=oblique, flip=flip))
    other = mirrored(mask, grid, "other")
    np.testing.assert_array_equal(other, mask[::-1])
    assert not np.array_equal(other, mask)
    np.testing.assert_array_equal(mirrored(other, grid, "other"), mask)
    both = mirrored(mask, grid, "both")
    np.testing.assert_array_equal(both, mask | mask[::-1])


def test_a_voxel_that_is_covered_by_half_belongs_to_the_mirror_image():
    affine = np.diag([2.0, 2.0, 2.0, 1.0])
    affine[0, 3] = -4.5  # the mirror image of a voxel lies across two
    mask = np.array([0, 1, 0, 0, 0, 0], bool).reshape(6, 1, 1)
    image = mirrored(mask, Grid(mask.shape, affine), "other")
    assert image.ravel().tolist() == [False, False, False, True, True, False]


@pytest.mark.parametrize("flip", [False, True])
def test_on_any_grid_the_mirror_image_of_a_ball_is_the_ball_across(flip):
    shape = (30, 28, 26)
    affine = turned((1.5, 2.0, 1.8), oblique=True, flip=flip)
    affine[:3, 3] = -apply_affine(affine, (np.array(shape) - 1) / 2)
    affine[:3, 3] += (0.37, -0.2, 0.11)
    grid = Grid(shape, affine)
    ball = grid.filled(sphere(grid, (-9.0, 2.0, 3.0), 8.0))
    across = grid.filled(sphere(grid, (9.0, 2.0, 3.0), 8.0))
    image = mirrored(ball, grid, "other")
    assert 2 * (image & across).sum() / (image.sum() + across.sum()) > 0.9  # not resolved finer
    middle = apply_affine(affine, np.argwhere(image)).mean(axis=0)
    np.testing.assert_allclose(middle, (9.0, 2.0, 3.0), atol=0.2)
    with pytest.raises(InputError, match="unknown mirroring: expected other, both, got left"):
        mirrored(ball, grid, "left")


def test_how_a_grid_is_stored_does_not_matter_in_mm():
    # The same voxels stored right to left: erosion, mirror image and sphere agree in mm.
    shape = (16, 12, 10)
    plain = turned((2.0, 2.0, 2.5), (-14.3, -9.0, -8.0))
    stored = nib.Nifti1Image(blob(shape, seed=9, share=0.6).astype(np.uint8), plain)
    turned_round = stored.as_reoriented(np.array([[0, -1], [1, 1], [2, 1]]))
    assert np.linalg.det(plain[:3, :3]) * np.linalg.det(turned_round.affine[:3, :3]) < 0

    def in_mm(image, make):
        grid = Grid(image.shape, image.affine)
        made = make(np.asarray(image.dataobj) != 0, grid)
        return {tuple(row) for row in apply_affine(image.affine, np.argwhere(made)).round(3)}

    for make in (
        lambda mask, grid: eroded(mask, grid, 2.5),
        lambda mask, grid: mirrored(mask, grid, "other"),
        lambda mask, grid: grid.filled(sphere(grid, (3.0, 2.0, 1.0), 6.0)),
    ):
        one, same = in_mm(stored, make), in_mm(turned_round, make)
        assert one == same
        assert one


# -- the nodes ------------------------------------------------------------------------------


FINE = a_grid((12, 12, 12), turned((1, 1, 1), (-5.5, -5.5, -5.5)))
COARSE = a_grid((6, 6, 6), turned((2, 2, 2), (-4.8, -4.9, -5.2)))
OWN = a_grid((5, 7, 6), turned((2.1, 1.9, 2.3), (5.0, -6.0, -4.0), flip=True))
DSEG_TSV = """\
index	name	abbreviation	color
0	Path	P	#000000
4	Arbor	A	#00ff00
9	Brook	B	n/a
"""


@pytest.fixture
def garden(tmp_path):
    """A label image with its table, and references on grids of their own."""
    folder = tmp_path / "garden"
    folder.mkdir()
    labels = np.zeros(FINE.shape, np.int16)
    labels[1:5, 2:10, 2:10] = 4
    labels[7:11, 4:8, 4:8] = 9
    write_map(folder / "seg-beds_dseg.nii.gz", labels, FINE)
    (folder / "seg-beds_dseg.tsv").write_text(DSEG_TSV)
    for name, grid in {"fine": FINE, "coarse": COARSE, "own": OWN}.items():
        write_map(folder / f"{name}.nii", np.ones(grid.shape, np.float32), grid)
    return folder


def at(garden, *names):
    paths = [str(garden / f"{name}.nii") for name in names]
    return paths if len(paths) > 1 else paths[0]


def dseg(garden):
    return str(garden / "seg-beds_dseg.nii.gz")


def graph():
    empty = Workflow("beds", base_dir="work")
    empty.config["execution"] = {"crashdump_dir": ".", "create_report": "false"}
    return empty


def results(workflow, name, plugin="Linear"):
    ran = workflow.run(plugin=plugin)
    return next(node for node in ran.nodes() if node.name == name).result.outputs


def voxels(path):
    return read_map(path)[0] != 0


def test_a_mask_of_labels_by_name_from_the_table_beside(garden):
    made = LabelMask(in_file=dseg(garden), labels=["arbor", 9], reference=at(garden, "fine")).run()
    labels = read_labels(dseg(garden))[0]
    np.testing.assert_array_equal(voxels(made.outputs.mask_file), labels > 0)
    assert nib.load(made.outputs.mask_file).get_data_dtype() == np.uint8


def test_a_table_that_is_given_goes_before_the_one_beside(garden):
    other = table(garden / "other.tsv", "name\tindex\nArbor\t9\n")
    made = LabelMask(
        in_file=dseg(garden), labels=["Arbor"], table_file=str(other), reference=at(garden, "fine")
    ).run()
    np.testing.assert_array_equal(voxels(made.outputs.mask_file), read_labels(dseg(garden))[0] == 9)


def test_names_without_any_table_are_refused_and_numbers_are_not(garden):
    (garden / "seg-beds_dseg.tsv").unlink()
    inputs = {"in_file": dseg(garden), "reference": at(garden, "fine")}
    with pytest.raises(InputError, match=r"label names without a label table .* got Arbor, Brook;"):
        LabelMask(labels=["Arbor", 4, "Brook"], **inputs).run()
    assert voxels(LabelMask(labels=[4], **inputs).run().outputs.mask_file).sum() == 256


def test_another_grid_is_refused_unless_asked_for(garden):
    inputs = {"in_file": dseg(garden), "labels": [4], "reference": at(garden, "coarse")}
    with pytest.raises(InputError, match=r"grids differ .*dseg.nii.gz"):
        LabelMask(**inputs).run()
    made = LabelMask(regrid=True, **inputs).run().outputs.mask_file
    assert read_map(made)[1].same_as(COARSE)
    far = a_grid((6, 6, 6), turned((2, 2, 2), (500, 0, 0)))
    inputs["reference"] = str(write_map(garden / "far.nii", np.ones(far.shape), far))
    with pytest.raises(InputError, match=r"no voxel's centre is in the labels .*got labels \[4\]"):
        LabelMask(regrid=True, **inputs).run()
    with pytest.raises(InputError, match=r"no label on the reference's grid .*dseg.nii.gz"):
        RegridLabels(in_file=dseg(garden), reference=inputs["reference"]).run()


def test_of_the_labels_that_are_named_no_other_reaches_the_new_grid(garden):
    inputs = {"in_file": dseg(garden), "reference": at(garden, "coarse")}
    whole, _ = read_labels(RegridLabels(**inputs).run().outputs.label_file)
    some, _ = read_labels(RegridLabels(labels=[9, 77], **inputs).run().outputs.label_file)
    assert set(np.unique(whole)) == {0, 4, 9}
    np.testing.assert_array_equal(some, np.where(whole == 9, whole, 0))
    with pytest.raises(InputError, match=r"no label on the reference's grid .*got labels \[77\]"):
        RegridLabels(labels=[77], **inputs).run()


def test_regridded_labels_and_regridded_masks_are_one_thing_for_each_subject(garden):
    # One atlas, subjects with grids of their own.
    references = at(garden, "fine", "coarse", "own")
    beds = graph()
    brought = MapNode(RegridLabels(in_file=dseg(garden)), iterfield=["reference"], name="brought")
    brought.inputs.reference = references
    later = MapNode(
        LabelMask(labels=["Brook"], table_file=str(garden / "seg-beds_dseg.tsv")),
        iterfield=["in_file", "reference"],
        name="later",
    )
    later.inputs.reference = references
    once = MapNode(
        LabelMask(in_file=dseg(garden), labels=["Brook"], regrid=True),
        iterfield=["reference"],
        name="once",
    )
    once.inputs.reference = references
    beds.connect(brought, "label_file", later, "in_file")
    beds.add_nodes([once])
    ran = {node.name: node.result.outputs for node in beds.run(plugin="Linear").nodes()}
    for i, grid in enumerate((FINE, COARSE, OWN)):
        a, b = ran["later"].mask_file[i], ran["once"].mask_file[i]
        assert read_map(a)[1].same_as(grid)
        np.testing.assert_array_equal(voxels(a), voxels(b))
        assert voxels(a).any()
        assert read_labels(ran["brought"].label_file[i])[0].dtype == np.int16
    np.testing.assert_array_equal(
        voxels(ran["once"].mask_file[1]), nib_nearest(dseg(garden), COARSE, 9)
    )


def nib_nearest(path, grid, label):
    """Where a label image has a label at the centres of a grid's voxels."""
    image = nib.load(path)
    mm = apply_affine(grid.affine, np.stack(np.indices(grid.shape), axis=-1))
    where = np.rint(apply_affine(np.linalg.inv(image.affine), mm)).astype(int)
    return np.asarray(image.dataobj)[tuple(np.moveaxis(where, -1, 0))] == label


def test_nodes_make_regions_of_regions(garden):
    # Arbor and its mirror image, without its own rim, and without Brook.
    beds = graph()
    given = {"in_file": dseg(garden), "reference": at(garden, "fine")}
    arbor = Node(LabelMask(labels=["Arbor"], **given), name="arbor")
    brook = Node(LabelMask(labels=["Brook"], **given), name="brook")
    core = Node(ErodeMask(mm=1.0), name="core")
    both = Node(MirrorMask(how="both"), name="both")
    pair = Node(CombineMasks(how="difference"), name="pair")
    beds.connect(
        [(arbor, core, [("mask_file", "in_file")]), (core, both, [("mask_file", "in_file")])]
    )
    listed = Node(Merge(2), name="listed")
    beds.connect([(both, listed, [("mask_file", "in1")]), (brook, listed, [("mask_file", "in2")])])
    beds.connect(listed, "out", pair, "in_files")
    made = voxels(results(beds, "pair").mask_file)
    expected = np.zeros(FINE.shape, bool)
    expected[2:4, 3:9, 3:9] = expected[8:10, 3:9, 3:9] = True
    expected[7:11, 4:8, 4:8] = False
    np.testing.assert_array_equal(made, expected)


def test_masks_of_each_subject_are_combined_eroded_and_mirrored_by_map_nodes(garden):
    boxes = {}
    for name, part in {"a": np.s_[1:6, 2:9, 2:9], "b": np.s_[2:8, 3:9, 2:9]}.items():
        mask = np.zeros(FINE.shape, bool)
        mask[part] = True
        boxes[name] = (mask, str(write_map(garden / f"{name}.nii", mask, FINE)))
    (a, a_file), (b, b_file) = boxes.values()
    beds = graph()
    joint = MapNode(CombineMasks(how="intersection"), iterfield=["in_files"], name="joint")
    joint.inputs.in_files = [[a_file, b_file], [a_file, a_file]]
    core = MapNode(ErodeMask(mm=1.0), iterfield=["in_file"], name="core")
    across = MapNode(MirrorMask(how="other"), iterfield=["in_file"], name="across")
    beds.connect([(joint, core, [("mask_file", "in_file")])])
    beds.connect([(core, across, [("mask_file", "in_file")])])
    made = results(beds, "across").mask_file
    for path, mask in zip(made, (a & b, a), strict=True):
        cross = ndimage.generate_binary_structure(3, 1)  # one mm of one-mm voxels
        np.testing.assert_array_equal(voxels(path), ndimage.binary_erosion(mask, cross)[::-1])


def test_an_empty_result_is_an_error_that_says_why(garden):
    left = np.zeros(COARSE.shape, bool)
    left[1:3, 1:3, 1:3] = True
    one = str(write_map(garden / "one.nii", left, COARSE))
    other = str(write_map(garden / "other.nii", left[::-1], COARSE))
    with pytest.raises(InputError, match=r"the intersection of the masks is empty .* 8, 8 voxels"):
        CombineMasks(in_files=[one, other], how="intersection").run()
    with pytest.raises(InputError, match="the difference of the masks is empty"):
        CombineMasks(in_files=[one, one], how="difference").run()
    with pytest.raises(InputError, match=r"grids differ .*fine.nii"):
        CombineMasks(in_files=[one, at(garden, "fine")], how="union").run()
    with pytest.raises(InputError, match=r"nothing is left .*8 voxels eroded by 2 mm on 6 x 6 x 6"):
        ErodeMask(in_file=one, mm=2.0).run()
    aside = a_grid((6, 6, 6), turned((2, 2, 2), (40, 0, 0)))
    lone = str(write_map(garden / "lone.nii", left, aside))
    with pytest.raises(InputError, match=r"the mirror image lies outside the grid .*lone.nii"):
        MirrorMask(in_file=lone, how="other").run()


def test_a_changed_table_beside_the_image_is_noticed(garden):
    def size():
        beds = graph()
        inputs = {"in_file": dseg(garden), "labels": ["Arbor"], "reference": at(garden, "fine")}
        beds.add_nodes([Node(LabelMask(**inputs), name="arbor")])
        return voxels(results(beds, "arbor").mask_file).sum()

    assert size() == 256
    (garden / "seg-beds_dseg.tsv").write_text("index\tname\n9\tArbor\n")
    assert size() == 64


def test_the_same_inputs_make_the_same_bytes(garden, tmp_path):
    made = []
    for name in ("one", "two"):
        (tmp_path / name).mkdir()
        given = {"in_file": dseg(garden), "reference": at(garden, "own")}
        label = LabelMask(labels=["Arbor", "Brook"], regrid=True, **given)
        path = label.run(cwd=str(tmp_path / name)).outputs.mask_file
        made.append(Path(path).read_bytes())
    assert made[0] == made[1]


# -- under the guard ------------------------------------------------------------------------


def verdicts(garden, origins, **label):
    """What the guard says of a region of labels, mirrored and eroded, read in two maps."""
    rows = []
    for sub in ("01", "02"):
        data = np.random.default_rng(int(sub)).normal(size=COARSE.shape).astype(np.float32)
        write_map(garden / f"sub-{sub}.nii", data, COARSE)
        rows.append(Row(f"sub-{sub}.nii", None, Unit(sub=sub, suffix="bold")))
    beds = graph()
    region = Node(LabelMask(reference=at(garden, "sub-01"), regrid=True, **label), name="region")
    both = Node(MirrorMask(how="both"), name="both")
    read = Node(Extract(in_files=at(garden, "sub-01", "sub-02"), labels=["01", "02"]), name="read")
    beds.connect([(region, both, [("mask_file", "in_file")])])
    beds.connect(both, "mask_file", read, "mask_files")
    guard = GuardPlugin(Study(garden, rows, origins), dry=True)
    with suppress(GuardRefused):
        beds.run(plugin=guard)
    return [(f.verdict, f.origins) for f in guard.findings]


BEDS = Origin("beds of 1909", ("seg-beds_dseg.nii.gz",))


def test_labels_of_a_declared_image_are_apart_from_the_maps(garden):
    found = verdicts(garden, [BEDS], in_file=dseg(garden), labels=["Arbor"])
    assert found == [("apart", ("beds of 1909",))] * 2


def test_labels_of_an_image_made_of_the_tested_maps_leak(garden):
    derived = Origin("our own parcels", BEDS.files, (Unit(sub="02", suffix="bold"),))
    found = verdicts(garden, [derived], in_file=dseg(garden), labels=["Arbor"])
    assert [verdict for verdict, _ in found] == ["apart", "leak"]


def test_a_table_that_nobody_declared_is_unproven(garden):
    inputs = {"in_file": dseg(garden), "labels": ["Arbor"]}
    inputs["table_file"] = str(table(garden / "names.tsv", DSEG_TSV))
    assert {v for v, _ in verdicts(garden, [BEDS], **inputs)} == {"unproven"}
    named = Origin("beds of 1909", (*BEDS.files, "names.tsv"))
    assert {v for v, _ in verdicts(garden, [named], **inputs)} == {"apart"}
