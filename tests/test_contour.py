"""The shape check: masks made from the data stand out, honest ones do not, and why is told."""

from __future__ import annotations

import csv
import json
import shutil
from pathlib import Path

import nibabel as nib
import numpy as np
import pytest
from click.testing import CliRunner
from planting import a_grid
from scipy import ndimage, stats
from sequester import read_settings, run_study
from sequester.nodes.contour import _LEAST, Contour, _at, _share, boundary, complete, contour_of
from sequester.nodes.errors import InputError
from sequester.nodes.groupmaps import group_map
from sequester.nodes.images import write_map
from sequester.nodes.masks import Cluster, Threshold, choose
from sequester.nodes.simulated import Noise
from sequester.nodes.space import Grid
from sequester.workflows import contours
from sequester.workflows.cli import main
from sequester.workflows.contours import contour_in_files

SHAPE, N = (30, 32, 28), 18
GRID = Grid(SHAPE, np.diag([3.0, 3.0, 3.0, 1.0]))
LABELS = [f"{i:02d}" for i in range(N)]
FACES = ndimage.generate_binary_structure(3, 1)
NOISE = Noise(GRID, (2.7,) * 3)


def ball(centre, radius):
    where = np.stack(np.unravel_index(GRID.voxels, SHAPE), axis=1)
    return np.square(where - np.asarray(centre)).sum(axis=1) <= radius**2


def dilated(mask):
    return ndimage.binary_dilation(mask.reshape(SHAPE), FACES).ravel()


def smoothed(mask):
    return ndimage.gaussian_filter(mask.reshape(SHAPE).astype(float), 0.85).ravel() > 0.5


def effects(seed, effect=None):
    made = NOISE.draw(np.random.default_rng(seed), N)
    return made if effect is None else made + effect


def own_cluster(maps, p=0.01):
    rule = Cluster(p=p, connectivity=18, min_size=1, pick="largest")
    return choose(group_map(maps), rule, GRID, N)


def test_the_layers_are_those_of_morphology():
    mask = dilated(ball((10, 12, 9), 4.3)) | ball((20, 22, 18), 3)
    second, rim, shell, outer = (np.isin(np.arange(GRID.n_features), layer).reshape(SHAPE)
                                 for layer in boundary(mask, GRID).layers)  # fmt: skip
    volume = mask.reshape(SHAPE)
    smaller = ndimage.binary_erosion(volume, FACES)
    assert (rim == volume & ~smaller).all()
    assert (second == smaller & ~ndimage.binary_erosion(smaller, FACES)).all()
    larger = ndimage.binary_dilation(volume, FACES)
    assert (shell == larger & ~volume).all()
    assert (outer == ndimage.binary_dilation(larger, FACES) & ~larger).all()


def test_where_data_end_a_mask_has_no_boundary():
    data = np.zeros(SHAPE, bool)
    data[:, :, :14] = True
    grid = Grid(SHAPE, GRID.affine, data)
    mask = ball((15, 15, 13), 4).reshape(SHAPE)[data]
    rim, shell = (grid.voxels[list(layer)] for layer in boundary(mask, grid).layers[1:3])
    assert np.unravel_index(shell, SHAPE)[2].max() == 13
    inside = ndimage.binary_erosion(ball((15, 15, 13), 4).reshape(SHAPE), FACES, border_value=1)
    assert not inside.ravel()[rim].any()
    assert boundary(np.ones(grid.n_features, bool), grid) is None
    assert boundary(ball((15, 15, 13), 0)[data.ravel()], grid) is None and _LEAST > 1


def test_the_share_is_that_of_mann_and_whitney():
    rng = np.random.default_rng(0)
    inner, outer = (
        rng.integers(0, 9, (5, 20)).astype(float),
        rng.integers(0, 9, (5, 31)).astype(float),
    )
    for i in range(5):
        u = stats.mannwhitneyu(inner[i], outer[i]).statistic
        assert _share(inner[i], outer[i]) == pytest.approx(u / (20 * 31), abs=1e-12)


def rates(kinds, sets, effect=None):
    """Per kind of mask: how many are flagged, and how often by the step reference alone."""
    found = {kind: [0, 0] for kind in kinds}
    for seed in range(sets):
        maps = effects([5, seed], effect)
        for kind, made in kinds.items():
            result = contour_of(maps, made(maps, np.random.default_rng(seed)), GRID, LABELS, seed)
            assert result is not None
            found[kind][0] += result.flagged
            found[kind][1] += 2 * result.p_steps <= 0.01
    return found


def test_masks_from_the_data_are_flagged_and_others_are_not():
    kinds = {
        "ball": lambda maps, rng: ball(rng.uniform(7, 21, 3), 3.5),
        "blob": lambda maps, rng: Noise(GRID, (5,) * 3).draw(rng, 1)[0] > 2.2,
        "cluster": lambda maps, rng: own_cluster(maps),
        "dilated": lambda maps, rng: dilated(own_cluster(maps)),
        "smoothed": lambda maps, rng: smoothed(dilated(own_cluster(maps))),
        "threshold": lambda maps, rng: choose(group_map(maps), Threshold(p=0.01), GRID, N),
    }
    found = rates(kinds, 6)
    assert found["ball"][0] + found["blob"][0] == 0, found
    assert found["cluster"][0] == 6, found
    assert found["dilated"][0] >= 5, found
    assert found["threshold"][0] == 6, found


def test_an_effect_that_fills_a_mask_is_told_from_a_contour():
    place = ball((15, 16, 14), 4)
    soft = 1.2 * ndimage.gaussian_filter(place.reshape(SHAPE).astype(float), 1.2).ravel()
    kinds = {
        "filled": lambda maps, rng: place,
        "cluster": lambda maps, rng: own_cluster(maps),
    }
    found = rates(kinds, 4, soft)
    assert found["filled"] == [4, 0], found  # flagged, and the sentence leaves both possible
    assert found["cluster"][0] == 4 and found["cluster"][1] >= 3, found
    assert "or a true effect fills it" in Contour(0.98, 0.004, 0.002, 0.2).describe()
    assert "follows their noise too" in Contour(0.98, 0.004, 0.3, 0.002).describe()
    assert "does not stand out" in Contour(0.6, 0.3, 0.15, 0.2).describe()
    assert "too few other places" in Contour(1.0, 0.1, 0.05, 0.2, least=0.1).describe()


def test_the_sentence_says_where_the_contour_is_followed():
    maps = effects([5, 0], 1.2 * ball((15, 16, 14), 4))
    told = {
        4.0: (0, "along its boundary, p"),
        2.8: (1, "along its boundary a voxel further out, p"),
        5.2: (-1, "along its boundary a voxel further in, p"),
    }
    for radius, (out, words) in told.items():
        result = contour_of(maps, ball((15, 16, 14), radius), GRID, LABELS)
        assert result.flagged and result.out == out, (radius, result)
        assert abs(result.share_out - 0.5) > abs(result.share - 0.5) or not out, result
        assert words in result.describe(), result.describe()


def test_order_sign_and_scale_do_not_matter():
    maps, turn = effects(3), np.random.default_rng(1).permutation(N)
    mask = own_cluster(maps)
    first = contour_of(maps, mask, GRID, LABELS)
    labels = [LABELS[i] for i in turn]
    order = np.argsort(labels)
    again = contour_of(maps[turn][order], mask, GRID, [labels[i] for i in order])
    assert again == first
    assert contour_of(4 * maps, mask, GRID, LABELS) == first
    turned = contour_of(-maps, mask, GRID, LABELS)
    assert turned.share == pytest.approx(1 - first.share)
    assert turned.p_placements == first.p_placements and turned.p <= 0.01


def test_few_unlike_placements_cannot_make_a_small_p():
    maps, inside = effects(3), np.zeros(SHAPE, bool)
    mask = own_cluster(maps)
    where = np.argwhere(mask.reshape(SHAPE))
    low, high = np.maximum(where.min(axis=0) - 4, 0), where.max(axis=0) + 5
    inside[tuple(slice(a, b) for a, b in zip(low, high, strict=True))] = True
    part = GRID.restricted(inside.ravel())
    result = contour_of(maps[:, inside.ravel()], mask[inside.ravel()], part, LABELS)
    assert result.share > 0.95 and result.p_placements > 0.02


def test_what_lies_outside_the_data_has_no_value():
    number = np.full((3, 3, 3), -1)
    number[0, 1, 2], number[2, 1, 0] = 0, 1
    where = np.array([[0, 1, 2], [-1, 1, 0], [0, 1, 3], [1, 1, 1], [2, 1, 0]])
    assert _at(np.array([5.0, 7.0]), number, where).tolist() == [5.0, 7.0]


# -- on files -----------------------------------------------------------------------------------

GEOMETRY = a_grid(SHAPE, GRID.affine)


@pytest.fixture(scope="module")
def garden(tmp_path_factory):
    """A study with one mask from its own map, one that is a ball, both declared as from outside."""
    root = tmp_path_factory.mktemp("garden")
    maps = effects(3)
    maps[4, ball((3, 3, 3), 2)] = np.nan
    lines = ["path\tsub\trun\tsuffix"]
    for label, data in zip(LABELS, maps, strict=True):
        for run in "12":
            sign = 1 if run == "1" else -1
            uneven = data + sign * np.linspace(-1, 1, data.size)
            name = f"sub-{label}_run-{run}.nii"
            write_map(root / name, uneven.astype(np.float32).reshape(SHAPE), GEOMETRY)
            lines.append(f"{name}\t{label}\t{run}\tbold")
    (root / "table.tsv").write_text("\n".join(lines) + "\n")
    write_map(root / "found.nii", own_cluster(maps).reshape(SHAPE), GEOMETRY)
    write_map(root / "ball.nii", ball((20, 9, 12), 3.5).reshape(SHAPE), GEOMETRY)
    rois = "".join(
        f'[[roi]]\nname = "{name}"\nplan = "a-priori"\n'
        f'region = {{ mask = "{file}.nii", origin = "a drawing of 1909" }}\n'
        for name, file in (("Arbor", "found"), ("Brook", "ball"))
    )
    head = '[study]\nname = "garden"\ntable = "table.tsv"\n'
    (root / "STUDY.toml").write_text(head + rois)
    return root


def test_files_give_what_arrays_give(garden):
    paths = [garden / f"sub-{label}_run-{run}.nii" for run in "12" for label in LABELS]
    made = contour_in_files(garden / "found.nii", paths, LABELS * 2)
    maps = effects(3)
    maps[4, ball((3, 3, 3), 2)] = np.nan
    expected = contour_of(maps, own_cluster(maps), GRID, LABELS)
    assert made.share == expected.share
    assert made.p_placements == pytest.approx(expected.p_placements, abs=0.005)
    assert made.p_steps == pytest.approx(expected.p_steps, abs=0.005)
    assert not complete(maps)[ball((3, 3, 3), 2)].any()
    with pytest.raises(InputError, match="too few people"):
        contour_in_files(garden / "found.nii", paths, ["a", "b", "c"] * 12)
    write_map(garden / "other.nii", np.ones((4, 4, 4), bool), a_grid((4, 4, 4), GRID.affine))
    with pytest.raises(InputError, match="grid"):
        contour_in_files(garden / "other.nii", paths, LABELS * 2)


def test_a_run_says_which_masks_follow_its_maps(garden):
    settings = read_settings(garden / "STUDY.toml")
    run_study(settings)
    with (settings.output / "roi_tests.tsv").open() as stream:
        arbor, brook = csv.DictReader(stream, delimiter="\t")
    assert float(arbor["contour"]) > 0.95 and float(arbor["contour_p"]) <= 0.01
    assert "follows the contour of the study's own group map" in arbor["sentence"]
    assert arbor["verdict"] == "apart"  # as declared: the check reports, and refuses nothing
    assert float(brook["contour_p"]) > 0.01 and "contour" not in brook["sentence"]
    arguments = ["contour", str(garden / "found.nii"), str(garden / "STUDY.toml"), "--json"]
    (told,) = json.loads(CliRunner().invoke(main, arguments).stdout)["checked"]
    assert (told["contour"], told["p"]) == (float(arbor["contour"]), float(arbor["contour_p"]))
    assert told["flagged"] is True
    unknown = CliRunner().invoke(main, [*arguments, "--roi", "Cinder"])
    assert unknown.exit_code == 2 and "no such region" in unknown.stdout


def atlas_of(root: Path) -> np.ndarray:
    """A label image: 3 is what was found, 5 the ball, 9 is too small to have a boundary."""
    found, other = (np.asarray(nib.load(root / f"{n}.nii").dataobj) != 0 for n in ("found", "ball"))
    atlas = 3 * found + 5 * (other & ~found)
    atlas[0, 0, 0] = 9
    return atlas.astype(np.int16)


def run_of(root: Path, region: str, data: str = "") -> list[dict[str, str]]:
    """The tests of a study with one region."""
    head = f'[study]\nname = "garden"\ntable = "table.tsv"\noutput = "others"\n{data}'
    (root / "OTHER.toml").write_text(
        f'{head}\n[[roi]]\nname = "All"\nplan = "a-priori"\n{region}\n'
    )
    settings = read_settings(root / "OTHER.toml")
    run_study(settings, record=False)
    with (settings.output / "roi_tests.tsv").open() as stream:
        return list(csv.DictReader(stream, delimiter="\t"))


def test_every_label_of_a_family_is_checked_by_itself(garden, monkeypatch):
    write_map(garden / "atlas.nii", atlas_of(garden), GEOMETRY)
    region = 'each_label = true\nregion = { atlas = "atlas.nii", origin = "an atlas of 1909" }'
    found, other, small = run_of(garden, region)
    paths = [garden / f"sub-{label}_run-{run}.nii" for run in "12" for label in LABELS]
    alone = contour_in_files(garden / "found.nii", paths, LABELS * 2)
    assert float(found["contour"]) == pytest.approx(alone.share)
    assert float(found["contour_p"]) <= 0.01 < float(other["contour_p"])
    told = (
        "It is one of 1 such among the 2 labels that were checked; by chance alone 0.02 would be."
    )
    assert told in found["sentence"]
    assert "contour" not in other["sentence"]
    assert (small["contour"], small["contour_p"]) == ("n/a", "n/a")
    monkeypatch.setattr(contours, "_MOST_VALUES", 1)  # a boundary at a time
    assert run_of(garden, region) == [found, other, small]


def test_where_there_is_no_one_boundary_in_one_map_it_says_why(garden):
    for label in LABELS:
        shutil.copy(garden / "ball.nii", garden / f"{label}_ball.nii")
    own = 'region = { mask = "{sub}_ball.nii", origin = "drawn for each" }'
    (made,) = run_of(garden, own)
    assert (
        "Shape check: not made, because each subject has a region of their own" in made["sentence"]
    )
    given = 'region = { mask = "ball.nii", origin = "a drawing of 1909" }'
    (made,) = run_of(garden, given, '[data]\ngrids = "own"\n')
    assert "Shape check: not made, because the maps share no grid" in made["sentence"]
    (made,) = run_of(
        garden, f'select = {{ sub = ["{LABELS[0]}", "{LABELS[1]}", "{LABELS[2]}"] }}\n{given}'
    )
    assert "Shape check: not made, because it needs 4 independent subjects" in made["sentence"]
    assert made["contour"] == "n/a"
