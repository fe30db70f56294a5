"""Files to arrays and back: values, grids, volumes, and bytes that do not depend on the day."""

import errno
import gzip
import io
import os
import shutil
import subprocess
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from click.testing import CliRunner
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from planting import a_grid
from sequester.nodes.errors import InputError
from sequester.nodes.images import (
    check_same_grid,
    n_volumes,
    open_image,
    read_map,
    read_mask,
    stack,
    write_bytes,
    write_map,
)
from sequester.workflows.cli import main

# Rotated, sheared and flipped, so that no axis or sign can be mistaken for another.
AFFINE = np.array(
    [[-2.9, 0.3, 0.1, 40.0], [0.2, 3.1, -0.4, -70.5], [0.0, 0.5, 2.8, -33.25], [0, 0, 0, 1]]
)
SHAPE = (4, 5, 3)


def geometry(affine=AFFINE, shape=SHAPE):
    return a_grid(shape, affine)


def values(*shape, dtype=np.float32):
    return np.random.default_rng(8).normal(size=shape or SHAPE).astype(dtype)


def save(path, data, affine=AFFINE, kind=nib.Nifti1Image):
    nib.save(kind(data, affine), path)
    return path


# -- writing --------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["map.nii", "map.nii.gz"])
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_round_trip(tmp_path, name, dtype):
    data = values(dtype=dtype)
    path = write_map(tmp_path / name, data, geometry())
    assert path == tmp_path / name
    back, grid = read_map(path)
    assert back.dtype == dtype
    np.testing.assert_array_equal(back, data)
    assert grid.same_as(geometry())


@given(
    hnp.arrays(np.float32, hnp.array_shapes(min_dims=3, max_dims=3), elements=st.floats(width=32))
)
def test_round_trip_of_any_values(tmp_path_factory, data):
    path = tmp_path_factory.mktemp("any") / "map.nii.gz"
    back, _ = read_map(write_map(path, data, geometry(shape=data.shape)))
    np.testing.assert_array_equal(back, data)


def test_mask_is_stored_as_bytes_of_0_and_1(tmp_path):
    mask = values() > 0
    path = write_map(tmp_path / "mask.nii.gz", mask, geometry())
    image = nib.load(path)
    assert image.get_data_dtype() == np.uint8
    assert image.dataobj.slope == 1 and image.dataobj.inter == 0
    assert image.header.get_xyzt_units()[0] == "mm"
    np.testing.assert_array_equal(read_mask(path)[0], mask)


@pytest.mark.parametrize("dtype", [bool, np.uint8, np.int16, np.float32, np.float64, ">f4", ">i2"])
def test_bytes_are_those_of_an_image_that_nibabel_writes(tmp_path, dtype):
    data = (10 * values()).astype(dtype)
    native = np.uint8 if dtype is bool else np.dtype(dtype).newbyteorder("=")
    image = nib.Nifti1Image(data.astype(native), AFFINE)
    image.header.set_xyzt_units("mm")
    image.header.set_slope_inter(1, 0)
    for order in "CF":
        path = write_map(tmp_path / "map.nii", np.asarray(data, order=order), geometry())
        assert path.read_bytes() == image.to_bytes()
        packed = write_map(tmp_path / "map.nii.gz", np.asarray(data, order=order), geometry())
        assert gzip.decompress(packed.read_bytes()) == image.to_bytes()


def test_two_writes_give_the_same_bytes(tmp_path, monkeypatch):
    data = values()
    one = write_map(tmp_path / "one.nii.gz", data, geometry()).read_bytes()
    monkeypatch.setattr("time.time", lambda: 2e9)
    other = write_map(tmp_path / "another name.nii.gz", data, geometry()).read_bytes()
    assert one == other
    assert one[3] == 0, "the gzip header holds a name or a comment"
    assert one[4:8] == bytes(4), "the gzip header holds a time"


def test_file_appears_whole_or_not_at_all(tmp_path, monkeypatch):
    path = write_map(tmp_path / "map.nii.gz", values(), geometry())
    before = path.read_bytes()

    def half(self, blob):
        with self.open("wb") as stream:
            stream.write(blob[: len(blob) // 2])
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(Path, "write_bytes", half)
    with pytest.raises(OSError, match="No space left on device"):
        write_map(path, values() + 1, geometry())
    with pytest.raises(OSError, match="No space left on device"):
        write_bytes(tmp_path / "new.tsv", b"a table")
    assert [p.name for p in tmp_path.iterdir()] == ["map.nii.gz"]
    assert path.read_bytes() == before


def test_map_that_the_disk_has_no_room_for_leaves_nothing(tmp_path, monkeypatch):
    class Full(io.BytesIO):
        def write(self, piece):
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    plain = Path.open

    def opened(self, mode="r", *rest, **more):
        return Full() if mode == "ab" else plain(self, mode, *rest, **more)

    monkeypatch.setattr(Path, "open", opened)
    with pytest.raises(OSError, match="No space left on device"):
        write_map(tmp_path / "map.nii", values(), geometry())
    assert list(tmp_path.iterdir()) == []


def test_file_takes_its_name_when_its_bytes_are_there(tmp_path, monkeypatch):
    """Another program that looks at any moment sees the old bytes or the new ones."""
    path = tmp_path / "table.tsv"
    path.write_bytes(b"old")
    seen = []
    plain = Path.replace

    def watched(self, target):
        seen.append((path.read_bytes(), self.parent, self.read_bytes()))
        return plain(self, target)

    monkeypatch.setattr(Path, "replace", watched)
    write_bytes(path, b"new")
    # In the same folder, thus on the same disk: a rename, not a copy.
    assert seen == [(b"old", tmp_path, b"new")]
    assert path.read_bytes() == b"new"


# -- grids ----------------------------------------------------------------------------------


def test_grids_that_differ_by_rounding_are_one_grid():
    rounded = AFFINE.astype(np.float32).astype(float)
    assert (rounded != AFFINE).any()
    assert geometry().same_as(geometry(rounded))


@pytest.mark.parametrize(("row", "column"), [(0, 0), (1, 0), (2, 3)])
def test_grids_that_differ_by_more_are_not(row, column):
    other = AFFINE.copy()
    other[row, column] += 0.01
    assert not geometry().same_as(geometry(other))
    assert not geometry().same_as(geometry(shape=(4, 3, 5)))


def test_grid_that_is_not_a_number_is_no_grid():
    other = AFFINE.copy()
    other[0, 0] = np.nan
    assert not geometry().same_as(geometry(other))


def test_differing_grids_are_both_named():
    plain = geometry(np.diag([3.0, 3.0, 3.0, 1.0]))
    other = geometry(np.diag([2.0, 2.0, 2.5, 1.0]), (6, 5, 3))
    check_same_grid(("a.nii", plain), [("b.nii", plain)])
    with pytest.raises(InputError) as told:
        check_same_grid(("a.nii", plain), [("b.nii", plain), ("c.nii", other)])
    assert str(told.value) == (
        "grids differ (c.nii): expected the grid of a.nii: 4 x 5 x 3 voxels of 3 x 3 x 3 mm, "
        "first at (0, 0, 0) mm, got 6 x 5 x 3 voxels of 2 x 2 x 2.5 mm, first at (0, 0, 0) mm; "
        "resample it to that grid, or leave it out of the study table"
    )


def test_voxel_size_of_a_rotated_grid():
    turned = np.eye(4)
    turned[:2, :2] = 3 * np.array([[0.6, -0.8], [0.8, 0.6]])
    assert "voxels of 3 x 3 x 1 mm" in str(geometry(turned))


# -- reading --------------------------------------------------------------------------------


def test_scaled_integers_are_read_in_their_units(tmp_path):
    stored = np.arange(60, dtype=np.int16).reshape(SHAPE)
    image = nib.Nifti1Image(stored, AFFINE)
    image.header.set_slope_inter(0.25, -3)
    raw = bytearray(image.to_bytes())
    # nibabel rescales on saving; put the numbers into the header as a scanner's program does.
    raw[112:120] = np.array([0.25, -3], "<f4").tobytes()
    raw[352:] = stored.astype("<i2").tobytes(order="F")
    (tmp_path / "map.nii").write_bytes(raw)
    data, _ = read_map(tmp_path / "map.nii")
    assert data.dtype == np.float32
    np.testing.assert_array_equal(data, stored * 0.25 - 3)


@pytest.mark.parametrize("kind", [nib.Nifti1Image, nib.Nifti2Image])
@pytest.mark.parametrize(
    ("stored", "read"),
    [
        (np.uint8, np.float32),
        (np.int16, np.float32),
        (np.float32, np.float32),
        (np.float64, np.float64),
        (">f4", np.float32),
    ],
)
def test_types_and_kinds(tmp_path, kind, stored, read):
    data = np.arange(60).reshape(SHAPE).astype(stored)
    header = kind.header_class(endianness=">" if stored == ">f4" else "<")
    header.set_data_dtype(np.dtype(stored).newbyteorder("="))
    nib.save(kind(data, AFFINE, header), tmp_path / "map.nii.gz")
    back, grid = read_map(tmp_path / "map.nii.gz")
    assert back.dtype == read
    np.testing.assert_array_equal(back, np.arange(60).reshape(SHAPE))
    assert grid.same_as(geometry())


def test_volumes_of_a_4d_file(tmp_path):
    data = values(*SHAPE, 6)
    path = save(tmp_path / "maps.nii.gz", data)
    for volume in range(6):
        np.testing.assert_array_equal(read_map(path, volume)[0], data[..., volume])
    with pytest.raises(InputError, match=r"no such volume \(.*\): expected 0 to 5, got 6"):
        read_map(path, 6)
    with pytest.raises(InputError, match="4-D file without a volume number"):
        read_map(path)


def packed_noise(path):
    """A map of noise that is longer than a piece of reading, its bytes, and its packed file."""
    data = np.random.default_rng(3).standard_normal((40, 30, 31)).astype(np.float32)
    image = nib.Nifti1Image(data, np.eye(4))
    nib.save(image, path)
    return data, image.to_bytes()


def test_file_packed_in_several_parts_is_read_as_one(tmp_path):
    path = tmp_path / "map.nii.gz"
    data, blob = packed_noise(path)
    for cuts in ((100,), (352, 90_000), (50_000, 50_000)):
        parts = np.split(np.frombuffer(blob, np.uint8), cuts)
        path.write_bytes(b"".join(gzip.compress(part.tobytes()) for part in parts))
        assert np.array_equal(read_map(path)[0], data)


def test_packed_file_of_which_a_byte_or_the_end_is_lost(tmp_path):
    path = tmp_path / "map.nii.gz"
    packed_noise(path)
    whole = path.read_bytes()
    flipped = bytearray(whole)
    flipped[len(whole) // 2] ^= 1
    cut = [whole[:-1], whole[:-8], whole[: len(whole) // 2]]
    for content in (bytes(flipped), whole[:-8] + bytes(8), *cut):
        path.write_bytes(content)
        with pytest.raises(InputError, match="damaged or truncated file"):
            read_map(path)
    path.write_bytes(whole + b"what stands behind the map is not of the map")
    read_map(path)


@pytest.mark.parametrize("extra", [(1,), (1, 1), (1, 1, 1)])
def test_trailing_dimensions_of_one_are_none(tmp_path, extra):
    data = values()
    path = save(tmp_path / "map.nii", data.reshape(*SHAPE, *extra))
    for volume in (None, 0):
        back, grid = read_map(path, volume)
        np.testing.assert_array_equal(back, data)
        assert grid.shape == SHAPE
    with pytest.raises(InputError, match="expected 0 to 0, got 1"):
        read_map(path, 1)


def test_volumes_before_a_trailing_dimension_of_one(tmp_path):
    data = values(*SHAPE, 2, 1)
    path = save(tmp_path / "map.nii", data)
    assert n_volumes(path, open_image(path)) == 2
    np.testing.assert_array_equal(read_map(path, 1)[0], data[..., 1, 0])


def test_5d_file(tmp_path):
    path = save(tmp_path / "map.nii", values(*SHAPE, 2, 3))
    with pytest.raises(InputError, match=r"too many dimensions .* got 5-D \(4, 5, 3, 2, 3\)"):
        read_map(path, 0)


def test_slice_is_a_volume_one_voxel_thick(tmp_path):
    data = values(4, 5)
    back, grid = read_map(save(tmp_path / "map.nii", data))
    assert grid.shape == (4, 5, 1)
    np.testing.assert_array_equal(back[..., 0], data)


def test_image_of_another_format(tmp_path):
    path = tmp_path / "map.mgz"
    nib.save(nib.MGHImage(values(), AFFINE), path)
    with pytest.raises(InputError, match=r"not a NIfTI image .* got MGHImage; convert the map"):
        read_map(path)


def test_complex_map(tmp_path):
    """Its imaginary part must not be dropped in silence."""
    path = save(tmp_path / "map.nii", values().astype(np.complex64))
    with pytest.raises(InputError, match="complex"):
        read_map(path)


def test_colour_map(tmp_path):
    colours = np.zeros(SHAPE, [("R", "u1"), ("G", "u1"), ("B", "u1")])
    path = save(tmp_path / "map.nii", colours)
    with pytest.raises(InputError, match=r"map\.nii"):
        read_map(path)


def test_mask_of_finite_values_that_are_not_zero(tmp_path):
    data = np.zeros(SHAPE, np.float32)
    data[0, 0] = [1, -2, np.nan]
    data[1, 1] = [np.inf, 0.5, 0]
    mask, _ = read_mask(save(tmp_path / "mask.nii", data))
    assert np.argwhere(mask).tolist() == [[0, 0, 0], [0, 0, 1], [1, 1, 1]]
    with pytest.raises(InputError, match=r"grids differ .* the grid of maps: 4 x 5 x 2 voxels"):
        read_mask(tmp_path / "mask.nii", ("maps", geometry(shape=(4, 5, 2))))
    with pytest.raises(InputError, match="empty mask"):
        read_mask(save(tmp_path / "none.nii", np.full(SHAPE, np.nan, np.float32)))


def test_stack_of_maps(tmp_path):
    data = values(3, *SHAPE)
    paths = [save(tmp_path / f"{i}.nii", x) for i, x in enumerate(data)]
    effects, grid, found = stack(paths)
    np.testing.assert_array_equal(effects, data.reshape(3, -1))
    assert (grid.n_features, found.shape) == (60, SHAPE)
    inside = data[0] > 0
    effects, grid, _ = stack(paths, inside)
    np.testing.assert_array_equal(effects, data[:, inside])
    np.testing.assert_array_equal(grid.filled(effects[1]), np.where(inside, data[1], 0))


def test_stack_of_several_types_keeps_the_finest(tmp_path):
    paths = [
        save(tmp_path / "one.nii", values()),
        save(tmp_path / "two.nii", values(dtype=np.float64)),
    ]
    assert stack(paths)[0].dtype == np.float64
    assert stack(paths[:1])[0].dtype == np.float32


def test_stack_of_differing_grids(tmp_path):
    paths = [save(tmp_path / "one.nii", values()), save(tmp_path / "two.nii", values(4, 5, 4))]
    with pytest.raises(InputError, match=r"grids differ \(.*two\.nii\).*the grid of .*one\.nii"):
        stack(paths)
    with pytest.raises(InputError, match="no effect map"):
        stack([])


# -- somebody else's reader -----------------------------------------------------------------


@pytest.fixture(scope="module")
def checker():
    """Debian's nifti_tool (package nifti-bin); says of each file whether it is good."""
    program = shutil.which("nifti_tool")
    if program is None:
        if os.environ.get("CI"):
            pytest.fail("nifti_tool is not installed: apt-get install nifti-bin")
        pytest.skip("nifti_tool is not installed: apt-get install nifti-bin")

    def check(paths):
        said = subprocess.run(
            [program, "-check_hdr", "-check_nim", "-infiles", *map(str, paths)],
            capture_output=True,
            text=True,
            check=True,
        ).stdout.splitlines()
        # Its exit code is 0 for bad files too.
        return {
            path
            for path in paths
            if f"header IS GOOD for file {path}" in said
            and f"nifti_image IS GOOD for file {path}" in said
        }

    return check


@pytest.mark.parametrize("name", ["map.nii", "map.nii.gz"])
@pytest.mark.parametrize("dtype", [bool, np.uint8, np.float32, np.float64])
def test_other_reader_accepts_what_is_written(tmp_path, checker, name, dtype):
    path = write_map(tmp_path / name, values().astype(dtype), geometry())
    assert checker([path]) == {path}


def test_other_reader_notices_a_bad_header(tmp_path, checker):
    path = write_map(tmp_path / "map.nii", values(), geometry())
    raw = bytearray(path.read_bytes())
    raw[70:72] = (999).to_bytes(2, "little")  # no such data type
    path.write_bytes(raw)
    assert checker([path]) == set()


STUDY = """\
[study]
name = "kites"
table = "table.tsv"

[[roi]]
name = "Ridge"
plan = "leave-one-subject-out"
rule = { kind = "cluster", p = 0.05 }
flips = 19

[[roi]]
name = "Vale"
plan = "a-priori"
region = { centre = [9, 12, 9], radius = 4, origin = "drawn for this test" }

[[roi]]
name = "RidgeLook"
plan = "exploratory"
rule = { kind = "threshold", p = 0.05 }
"""


def test_other_reader_accepts_every_file_of_a_run(tmp_path, checker):
    maps = np.random.default_rng(3).standard_normal((6, 8, 9, 7)).astype(np.float32) + 0.5
    lines = ["path\tsub\tsuffix"]
    for i, data in enumerate(maps):
        save(tmp_path / f"{i}.nii.gz", data, np.diag([3.0, 3.0, 3.0, 1.0]))
        lines.append(f"{i}.nii.gz\t{i}\tbold")
    (tmp_path / "table.tsv").write_text("\n".join(lines) + "\n")
    (tmp_path / "STUDY.toml").write_text(STUDY)
    arguments = ["run", str(tmp_path / "STUDY.toml"), "-q", "--work", str(tmp_path / "work")]
    done = CliRunner().invoke(main, arguments)
    assert done.exit_code == 0, done.output
    written = sorted((tmp_path / "results").rglob("*.nii*"))
    # Fold masks, their overlap, sphere, exploratory mask, and what they are drawn on.
    assert len(written) == 6 + 1 + 1 + 1 + 1
    # What the engine's working folder holds is written by the same function.
    inner = sorted((tmp_path / "work").rglob("*.nii*"))
    assert len(inner) > len(written)
    assert checker([*written, *inner]) == {*written, *inner}
    for path in written:
        assert gzip.decompress(path.read_bytes())[344:348] == b"n+1\0"


def test_a_map_that_may_not_be_read_says_so(tmp_path, monkeypatch):
    """It is no fault of the file's content, whatever the library makes of it."""
    path = tmp_path / "map.nii"
    path.write_bytes(b"")
    monkeypatch.setattr(os, "access", lambda path, how: False)
    with pytest.raises(InputError, match="no permission to read it; change its permissions"):
        open_image(path)
