"""Maps that stay in their files: what is read there, and what is chosen, to the last bit."""

from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from planting import a_grid
from sequester.nodes import foldstack, pages, storedmaps
from sequester.nodes.errors import InputError
from sequester.nodes.folds import KFold, LeaveOneOut
from sequester.nodes.groupmaps import Missing, group_map
from sequester.nodes.images import stack, write_map
from sequester.nodes.interfaces import ChooseByFold
from sequester.nodes.masks import Cluster, PeakSphere, Strongest, Threshold
from sequester.nodes.models import Groups, Score
from sequester.nodes.procedure import Procedure
from sequester.nodes.space import Grid
from sequester.nodes.storedmaps import StoredMaps, opened

pytestmark = pytest.mark.usefixtures("quiet_engine")

SHAPE = (7, 6, 5)
GEOMETRY = a_grid(SHAPE, 3.0)
INSIDE = np.random.default_rng(1).random(SHAPE) < 0.6
# Rows neither in the order of their labels nor one a label.
LABELS = [f"g{i:02}" for i in (5, 1, 4, 0, 3, 2, 9, 8, 7, 6, 10, 11)]
TWICE = [*LABELS[:6], *LABELS[:6]]
PEOPLE = sorted(LABELS)


def volumes(seed=3, dtype=np.float32):
    """Maps with an effect in a corner, and NaN, zeros and infinities here and there."""
    rng = np.random.default_rng(seed)
    x = rng.normal(size=(len(LABELS), *SHAPE))
    x[:, :3, :3, :3] += 0.9
    x[rng.random(x.shape) < 0.01] = np.nan
    x[rng.random(x.shape) < 0.01] = 0
    x[4, 1, 2, 3] = np.inf
    x[:, 6, 5, 4] = 0
    return x.astype(dtype)


def saved(folder, x, suffix=".nii"):
    return [str(write_map(folder / f"m{i:02}{suffix}", one, GEOMETRY)) for i, one in enumerate(x)]


@pytest.fixture
def small(monkeypatch):
    """Little is held at a time, and summed at a time; short gaps are passed over."""
    monkeypatch.setattr(pages, "HELD", 12 * 4 * 31)
    monkeypatch.setattr(foldstack, "BLOCK", 9)
    monkeypatch.setattr(storedmaps, "_FAR", 3)


# -- reading ------------------------------------------------------------------------------------


@pytest.mark.parametrize("far", [0, 3, 10**6])
def test_some_features_are_those_of_the_stack(tmp_path, far, monkeypatch):
    monkeypatch.setattr(storedmaps, "_FAR", far)
    x = volumes()
    paths = [*saved(tmp_path, x[:5]), str(write_map(tmp_path / "d.nii", volumes(9)[0], GEOMETRY))]
    write_map(tmp_path / "d.nii", volumes(9, np.float64)[0], GEOMETRY)  # one of doubles
    for inside in (INSIDE, None):
        held, grid, geometry = stack(paths, inside)
        maps, its_grid, its_geometry = opened(paths, inside)
        assert isinstance(maps, StoredMaps)
        assert (maps.shape, maps.dtype, its_geometry) == (held.shape, held.dtype, geometry)
        assert (its_grid.voxels == grid.voxels).all()
        rows = np.array([3, 5, 0])
        for features in (np.arange(held.shape[1]), np.array([7]), np.array([90, 2, 3, 70])):
            assert maps.read(features).tobytes() == held[:, features].tobytes()
            taken = maps.in_order(rows).read(features)
            assert taken.tobytes() == held[np.ix_(rows, features)].tobytes()
        assert maps.read(np.array([], np.intp)).shape == (6, 0)


def written(image, path):
    nib.save(image, path)
    return str(path)


def test_files_that_cannot_be_read_anywhere_are_stacked(tmp_path):
    x = np.nan_to_num(volumes(), posinf=2.0)
    plain = saved(tmp_path, x[:3])
    affine = GEOMETRY.affine
    scaled = nib.Nifti1Image(x[3], affine)
    scaled.set_data_dtype(np.int16)
    swapped = nib.Nifti1Image(x[3], affine).header.as_byteswapped(">")
    swapped.set_data_offset(352)
    (tmp_path / "swapped.nii").write_bytes(
        swapped.binaryblock + bytes(4) + x[3].T.astype(">f4").tobytes()
    )
    doubled = bytearray((tmp_path / "m00.nii").read_bytes())
    doubled[112:116] = np.float32(2).tobytes()  # the slope
    (tmp_path / "doubled.nii").write_bytes(doubled)
    moved = np.array(affine)
    moved[0, 3] += 1e-4  # the same grid, but not to the last bit
    others = {
        "packed": str(write_map(tmp_path / "packed.nii.gz", x[3], GEOMETRY)),
        "scaled": written(scaled, tmp_path / "scaled.nii"),
        "swapped": str(tmp_path / "swapped.nii"),
        "doubled": str(tmp_path / "doubled.nii"),
        "pair": written(nib.Nifti1Pair(x[3], affine), tmp_path / "pair.img"),
        "whole": written(
            nib.Nifti1Image((100 * x[3]).astype(np.int32), affine), tmp_path / "w.nii"
        ),
        "moved": written(nib.Nifti1Image(x[3], moved), tmp_path / "moved.nii"),
    }
    for name, other in others.items():
        for paths in ([*plain, other], [other, *plain]):
            effects, _, _ = opened(paths, INSIDE)
            assert isinstance(effects, np.ndarray), name
            assert effects.tobytes() == stack(paths, INSIDE)[0].tobytes()
    # These can be: of the other kind of header, of one volume, with an extension before it.
    extended = nib.Nifti1Image(x[3][..., None], affine)
    extended.header.extensions.append(nib.nifti1.Nifti1Extension("comment", b"planted in rows"))
    for image in (nib.Nifti2Image(x[3], affine), extended):
        paths = [*plain, written(image, tmp_path / "other.nii")]
        maps, grid, _ = opened(paths, INSIDE)
        assert isinstance(maps, StoredMaps)
        assert maps.read(np.arange(grid.n_features)).tobytes() == stack(paths, INSIDE)[0].tobytes()


def test_what_is_wrong_with_a_file_is_said_as_of_a_stack(tmp_path):
    plain = saved(tmp_path, volumes()[:3])
    cut = tmp_path / "cut.nii"
    cut.write_bytes((tmp_path / "m01.nii").read_bytes()[:-8])
    many = written(nib.Nifti1Image(np.ones((*SHAPE, 2), np.float32), np.eye(4)), tmp_path / "4.nii")
    other = str(write_map(tmp_path / "other.nii", np.ones(SHAPE, np.float32), a_grid(SHAPE, 2.0)))
    (tmp_path / "empty.nii").write_bytes(b"")
    for bad in (str(cut), many, other, str(tmp_path / "empty.nii"), str(tmp_path / "none.nii")):
        with pytest.raises(InputError) as told:
            opened([*plain, bad], INSIDE)
        with pytest.raises(InputError) as expected:
            stack([*plain, bad], INSIDE)
        assert str(told.value) == str(expected.value)
    with pytest.raises(InputError, match="no effect map"):
        opened([])


def test_file_that_is_cut_or_gone_after_it_was_opened_is_named(tmp_path):
    plain = saved(tmp_path, volumes()[:3])
    maps, grid, _ = opened(plain, INSIDE)
    everything = np.arange(grid.n_features)
    before = (tmp_path / "m02.nii").read_bytes()
    (tmp_path / "m02.nii").write_bytes(before[:400])
    with pytest.raises(InputError, match=r"damaged or truncated file \(.*m02.nii\)"):
        maps.read(everything)
    (tmp_path / "m02.nii").unlink()
    with pytest.raises(InputError, match=r"unreadable image \(.*m02.nii\).*No such file"):
        maps.read(everything)


# -- what is held at a time ---------------------------------------------------------------------


class Counted(StoredMaps):
    """Says which features were read."""

    def in_order(self, rows):
        self.ordered = Counted([self._files[row] for row in rows.tolist()], self.places)
        self.ordered.asked = self.asked = []
        return self.ordered

    def read(self, features, out=None):
        self.asked.append(features)
        return super().read(features, out)


def test_masks_and_peaks_hold_a_part_at_a_time(tmp_path, small):
    maps, grid, _ = opened(saved(tmp_path, volumes()), INSIDE)
    maps = Counted(maps._files, maps.places)
    ready = Procedure(Threshold(p=0.1)).prepare(maps, LABELS, grid)
    masks = ready.masks()
    most = 12 * 4 * 31 // (12 * 4)
    parts = -(-grid.n_features // most)
    assert len(maps.asked) == parts > 3
    assert max(map(len, maps.asked)) == most
    by_place = np.concatenate([np.sort(maps.places[some]) for some in maps.asked])
    assert (by_place == np.sort(maps.places)).all(), "every feature once, one part behind another"
    ready.peaks(masks)
    chosen = np.flatnonzero(np.any(masks, axis=0))
    assert (np.sort(np.concatenate(maps.asked[parts:])) == chosen).all()
    ready.flip_test(20, 1)
    assert len(maps.asked[-1]) == grid.n_features, "flips hold all"


RULES = {
    "threshold": Threshold(p=0.1),
    "cluster": Cluster(p=0.1, min_size=2, pick="all"),
    "peak's cluster": Cluster(p=0.1, pick="peak"),
    "strongest": Strongest(9),
    "strongest means": Strongest(9, "mean"),
    "fraction": Strongest(fraction=0.1),
    "peak sphere": PeakSphere(4.0),
}
MODELS = {
    "one sample": None,
    "score": Score(tuple((who, float(i * i % 13)) for i, who in enumerate(PEOPLE))),
    "adjusted": Score(
        tuple((who, float(i * i % 13)) for i, who in enumerate(PEOPLE)),
        (("age", tuple((who, float(i % 5)) for i, who in enumerate(PEOPLE))),),
    ),
    "groups": Groups(tuple((who, "ab"[i % 2]) for i, who in enumerate(PEOPLE)), "a", "b"),
}


CASES = [(rule, "one sample") for rule in RULES] + [
    (rule, model) for model in list(MODELS)[1:] for rule in ("threshold", "strongest")
]


@pytest.mark.parametrize(("rule", "model"), CASES)
def test_stored_is_as_held(rule, model, tmp_path, small):
    x = volumes(dtype=np.float64 if rule == "cluster" else np.float32)
    paths = saved(tmp_path, x)
    held, grid, _ = stack(paths, INSIDE)
    maps, _, _ = opened(paths, INSIDE)
    for scheme, tail, labels in (
        (LeaveOneOut(), "positive", LABELS),
        (KFold(3, 1), "negative", TWICE if model == "one sample" else LABELS),
    ):
        missing = Missing(min_fraction=0.5)
        made = Procedure(RULES[rule], scheme, tail, missing=missing, model=MODELS[model])
        one = made.prepare(held, labels, grid, paths)
        other = made.prepare(maps, labels, grid, paths)
        masks = one.masks()
        assert any(mask.any() for mask in masks)
        for mask, its in zip(masks, other.masks(), strict=True):
            assert mask.tobytes() == its.tobytes()
        assert one.peaks(masks) == other.peaks(masks)
        # Features of several parts at once, in whatever order.
        assert one.outcome() == other.outcome()
        exchanges, _ = one.exchanges(5, 2)
        for mine, its in zip(one.flips(exchanges), other.flips(exchanges), strict=True):
            assert np.array_equal(mine, its, equal_nan=True)
        assert one.outcome() == other.outcome(), "once all is held"


@pytest.mark.parametrize("scheme", [LeaveOneOut(), KFold(5, 2)])
def test_nothing_is_passed_over_where_rows_lack_data(scheme):
    rng, n = np.random.default_rng(6), 40
    x = rng.normal(0.25, 1, (n, 3000))
    x[rng.random(x.shape) < 0.4 * (rng.random(3000) < 0.5)] = np.nan
    labels = [f"{i:02}" for i in range(n)]
    missing, rule = Missing(min_fraction=0.5), Threshold(height=1.5)
    ready = Procedure(rule, scheme, missing=missing).prepare(
        x, labels, Grid((3000, 1, 1), np.eye(4))
    )
    for fold, mask in zip(ready.folds, ready.masks(), strict=True):
        with np.errstate(invalid="ignore"):
            plain = group_map(x[list(fold.selection)], missing) > 1.5
        assert np.array_equal(mask, plain)


def test_equal_peaks_are_told_apart_in_whatever_order_they_are_read(tmp_path, small):
    x = np.random.default_rng(5).normal(size=(12, *SHAPE)).astype(np.float32)
    # Far apart in a file, which holds x fastest: the first of the stack is the last there.
    x[:, 0, 0, 4] = x[:, 6, 5, 0] = np.arange(5, 17)
    paths = saved(tmp_path, x)
    maps, grid, _ = opened(paths)
    ready = Procedure(Strongest(20)).prepare(maps, LABELS, grid)
    assert [there for there, _ in ready.peaks(ready.masks())] == [4] * 12


@pytest.mark.parametrize("suffix", [".nii", ".nii.gz"])
def test_node_writes_the_same_whether_maps_are_packed_or_not(suffix, tmp_path, small, monkeypatch):
    folder = tmp_path / "maps"
    folder.mkdir()
    search = str(write_map(folder / "search.nii.gz", INSIDE, GEOMETRY))
    plan = {
        "in_files": saved(folder, volumes(), suffix),
        "row_names": [str(i) for i in range(12)],
        "labels": LABELS,
        "search_file": search,
        "procedure": Procedure(Threshold(p=0.1), KFold(4, 2)),
    }
    (tmp_path / "one").mkdir()
    one = ChooseByFold(**plan).run(cwd=tmp_path / "one").outputs
    monkeypatch.setattr("sequester.nodes.interfaces.procedure.opened", stack)
    (tmp_path / "other").mkdir()
    other = ChooseByFold(**plan).run(cwd=tmp_path / "other").outputs
    assert one.peaks == other.peaks
    assert any(one.peaks)
    for path in (*one.mask_files, one.overlap_file):
        again = tmp_path / "other" / Path(path).name
        assert Path(path).read_bytes() == again.read_bytes()
