"""Regions from outside and the ledger: laundered masks, explanations, looks."""

import json
import re
import shutil
from functools import partial
from pathlib import Path

import nibabel as nib
import numpy as np
import planting
import pytest
from click.testing import CliRunner
from scipy.ndimage import gaussian_filter
from sequester import read_settings, run_study
from sequester.nodes.errors import InputError
from sequester.nodes.likeness import dice, packed, same, unpacked, voxel_set
from sequester.workflows.cli import main
from sequester.workflows.guard import GuardRefused
from sequester.workflows.ledger import Ledger
from sequester.workflows.looks import look_body
from sequester.workflows.origins import mask_set
from sequester.workflows.run import check_study

SHAPE, SUBS = (9, 8, 7), [f"{i:02}" for i in range(1, 8)]
# Left-handed and a little turned, as scanners make them.
AFFINE = np.array([[-3, 0.2, 0, 12], [0.2, 3, -0.1, -11], [0, 0.1, 3, -9], [0, 0, 0, 1.0]])
HEAD = '[study]\nname = "garden"\ntable = "table.tsv"\n[data]\nselect = {{ contrast = "{glow}" }}\n'
ARBOR = """
[[roi]]
name = "Arbor"
plan = "leave-one-subject-out"
search = {{ mask = "all.nii.gz", origin = "the whole garden, drawn beforehand" }}
rule = {{ kind = "strongest", k = {k} }}
flips = 9
"""
BEACON = """
[[roi]]
name = "Beacon"
plan = "a-priori"
region = {{ {region}, origin = "a map in the hut" }}
"""


def study(root: Path, *rois: str, k: int = 20, glow: str = "glow") -> Path:
    path = root / "STUDY.toml"
    path.write_text(HEAD.format(glow=glow) + "".join(rois or (ARBOR.format(k=k),)))
    return path


def run(root: Path, *rois: str, **words) -> dict[str, dict]:
    done = run_study(read_settings(study(root, *rois, **words)))
    return {row["roi"]: row for row in done.tests}


def refused(root: Path, region: str) -> list:
    """The findings of a study that tests a given region too, if the guard refuses it."""
    beacon = BEACON.format(region=region)
    try:
        check_study(read_settings(study(root, ARBOR.format(k=20), beacon)))
    except GuardRefused as error:
        return [f for f in error.findings if f.kind == "extraction"]
    return []


save = partial(planting.save, affine=AFFINE)


def plant(root: Path) -> None:
    """Seven subjects, two contrasts, a bulb of an effect at the voxel (3, 3, 3)."""
    rng, rows = np.random.default_rng(2), ["path\tsub\tsuffix\tcontrast\texclude_reason"]
    at = np.stack(np.meshgrid(*map(np.arange, SHAPE), indexing="ij"), axis=-1)
    bulb = 3 * (np.linalg.norm(at - [3, 3, 3], axis=-1) < 1.8)
    for sub in SUBS:
        for contrast in ("glow", "hum"):
            name = f"sub-{sub}_{contrast}.nii.gz"
            save(root / name, (rng.normal(0, 1, SHAPE) + bulb).astype(np.float32))
            rows.append(f"{name}\t{sub}\tbold\t{contrast}\tn/a")
    (root / "table.tsv").write_text("\n".join(rows) + "\n")
    save(root / "all.nii.gz", np.ones(SHAPE, np.uint8))


@pytest.fixture(scope="module")
def before(tmp_path_factory):
    """A study that nobody has run."""
    root = tmp_path_factory.mktemp("before") / "garden"
    root.mkdir()
    plant(root)
    return root


@pytest.fixture(scope="module")
def after(before, tmp_path_factory):
    """The same after a run that chose and tested Arbor."""
    root = tmp_path_factory.mktemp("after") / "garden"
    shutil.copytree(before, root)
    run(root)
    return root


@pytest.fixture
def fresh(before, tmp_path):
    return shutil.copytree(before, tmp_path / "garden")


@pytest.fixture
def ran(after, tmp_path):
    return shutil.copytree(after, tmp_path / "ran" / "garden")


def fold_mask(root: Path) -> nib.Nifti1Image:
    return nib.load(root / "results" / "masks" / "label-Arbor_desc-without03_mask.nii.gz")


def recorded(root: Path) -> np.ndarray:
    return np.asarray(fold_mask(root).dataobj) != 0


# -- a mask is what it selects --------------------------------------------------------------------


def cropped(image):
    where = np.argwhere(np.asarray(image.dataobj))
    low, high = np.maximum(where.min(axis=0) - 1, 0), where.max(axis=0) + 1
    return image.slicer[tuple(slice(a, b) for a, b in zip(low, high, strict=True))]


def padded(image):
    data = np.pad(np.asarray(image.dataobj), 3)
    affine = image.affine.copy()
    affine[:3, 3] -= image.affine[:3, :3] @ [3, 3, 3]
    return nib.Nifti1Image(data, affine)


def turned(*axes):
    def turn(image):
        return image.as_reoriented(np.array(axes))

    return turn


def stored(dtype, factor):
    def store(image):
        data = np.asarray(image.dataobj).astype(float) * factor
        return nib.Nifti1Image(data.astype(dtype), image.affine)

    return store


def by_quaternion(image):
    """As a program writes it that keeps the affine as a quaternion alone."""
    made = nib.Nifti1Image(np.asarray(image.dataobj), None)
    made.set_qform(image.affine, code=1, strip_shears=True)
    made.set_sform(None, code=0)
    return made


LAUNDRY = {
    "saved again": (lambda image: image, ".nii"),
    "packed": (lambda image: image, ".nii.gz"),
    "nifti2": (lambda i: nib.Nifti2Image(np.asarray(i.dataobj), i.affine), ".nii"),
    "cropped": (cropped, ".nii.gz"),
    "padded": (padded, ".nii.gz"),
    "flipped": (turned([0, -1], [1, 1], [2, 1]), ".nii.gz"),
    "permuted": (turned([2, 1], [0, -1], [1, -1]), ".nii.gz"),
    "as float": (stored(np.float64, 0.37), ".nii.gz"),
    "as short": (stored(np.int16, -3), ".nii"),
    "all of it": (lambda i: stored(np.float32, 7)(turned([1, -1], [2, 1], [0, 1])(cropped(i))),
                  ".nii.gz"),
}  # fmt: skip


@pytest.mark.parametrize("how", LAUNDRY)
def test_a_laundered_mask_is_known_and_refused(ran, how):
    change, suffix = LAUNDRY[how]
    nib.save(change(fold_mask(ran)), ran / f"beacon{suffix}")
    findings = refused(ran, f'mask = "beacon{suffix}", regrid = true')
    assert {finding.verdict for finding in findings} == {"leak"}
    # Its fold left subject 03 out: that one's values are not among those that chose it.
    assert len(findings) == len(SUBS) - 1
    told = "a map in the hut (the same voxels as label-Arbor_desc-without03_mask.nii.gz, which"
    assert any(origin.startswith(told) for origin in findings[0].origins)


def test_an_affine_kept_as_a_quaternion_is_the_same_grid():
    straight = np.linalg.qr(AFFINE[:3, :3])[0] * 2.5
    affine = np.eye(4)
    affine[:3, :3], affine[:3, 3] = straight, [7.1, -33.3, 12.7]
    mask = np.zeros((30, 40, 20), np.uint8)
    mask[3:29, 1:38, 2:19] = np.random.default_rng(0).random((26, 37, 17)) > 0.7
    image = nib.Nifti1Image(mask, affine)
    again = by_quaternion(image)
    assert not np.array_equal(again.affine, affine)
    assert same(voxel_set(mask, affine), voxel_set(mask, again.affine))
    mask[5, 5, 5] ^= 1
    assert not same(voxel_set(mask, affine), voxel_set(np.asarray(image.dataobj) * 0 + 1, affine))


@pytest.mark.parametrize("seed", range(8))
def test_every_arrangement_of_the_axes_is_the_same_set(seed):
    """Also of a lattice turned by 45 degrees, which is as near to one arrangement as to another."""
    rng = np.random.default_rng(seed)
    turn = np.linalg.qr(rng.normal(size=(3, 3)))[0] if seed else np.eye(3)
    if seed == 1:
        turn = np.array([[1, -1, 0], [1, 1, 0], [0, 0, 2**0.5]]) / 2**0.5
    affine = np.eye(4)
    affine[:3, :3], affine[:3, 3] = turn * [2.0, 2.0, 2.0], rng.normal(0, 40, 3)
    image = nib.Nifti1Image((rng.random((5, 6, 7)) > 0.6).astype(np.uint8), affine)
    first = voxel_set(np.asarray(image.dataobj), image.affine)
    for order in ([0, 1, 2], [2, 0, 1], [1, 0, 2], [2, 1, 0]):
        for signs in np.ndindex(2, 2, 2):
            axes = np.array([[a, 1 - 2 * s] for a, s in zip(order, signs, strict=True)])
            other = image.as_reoriented(axes)
            found = voxel_set(np.asarray(other.dataobj), other.affine)
            assert found.digest == first.digest and same(found, first)


def test_sets_come_back_from_a_ledger_as_they_were_also_on_several_lattices():
    rng = np.random.default_rng(1)
    sets = []
    for i in range(6):
        affine = AFFINE.copy()
        affine[:3, 3] += i % 2 * 0.7
        sets.append(voxel_set(rng.random(SHAPE) > 0.5, affine))
    again = unpacked(packed(sets))
    assert [one.digest for one in again] == [one.digest for one in sets]
    assert not sets[0].same_lattice(sets[1]) and sets[0].same_lattice(sets[2])


def test_dice_across_grids_is_that_of_the_volumes():
    """A box on voxels of 2 mm and the same box, moved by 1 mm, on voxels of 1 mm."""
    coarse = voxel_set(np.ones((4, 4, 4)), np.diag([2.0, 2, 2, 1]))
    affine = np.eye(4)
    affine[:3, 3] = [0.5, -0.5, -0.5]  # 0 to 8 mm along x, where the other is at -1 to 7
    fine = voxel_set(np.ones((8, 8, 8)), affine)
    assert dice(coarse, fine) == pytest.approx(7 / 8)
    assert dice(fine, coarse) == pytest.approx(7 / 8)


def test_parts_of_an_atlas_and_what_is_made_of_parts_are_compared_too(ran):
    mask = recorded(ran)
    atlas = np.where(mask, 5, 0).astype(np.int16)
    atlas[0, 0, 0], atlas[8, 7, 6] = 1, 2
    save(ran / "atlas.nii.gz", atlas)
    left = mask.copy()
    left[:3] = False
    save(ran / "left.nii.gz", left.astype(np.uint8))
    save(ran / "right.nii.gz", (mask & ~left).astype(np.uint8))
    halves = 'union = [{ mask = "left.nii.gz" }, { mask = "right.nii.gz" }]'
    for region in ('atlas = "atlas.nii.gz", labels = [5]', halves):
        # A half by itself is like the mask it lies in.
        assert "leak" in {finding.verdict for finding in refused(ran, region)}
    family = BEACON.format(region='atlas = "atlas.nii.gz"') + "each_label = true\n"
    with pytest.raises(GuardRefused, match=r"made from the data it\s+would be tested\s+on"):
        check_study(read_settings(study(ran, family)))


# -- declared beforehand, like, explained ---------------------------------------------------------


def test_a_region_that_was_declared_and_then_found_has_succeeded(fresh, after):
    """The very voxels that a fold will choose: declared first or not makes all the difference."""
    save(fresh / "beacon.nii", recorded(after).astype(np.float32))
    late = shutil.copytree(fresh, fresh.with_name("late"))
    told = CliRunner().invoke(
        main,
        ["declare", str(fresh / "beacon.nii"), "--study", str(study(fresh)), "--source", "a guess"],
    )
    assert told.exit_code == 0 and "note" not in told.output
    for root in (fresh, late):
        run(root)
    # Another file of the same voxels is the region that was declared.
    save(fresh / "copy.nii.gz", recorded(after).astype(np.uint8))
    assert refused(fresh, 'mask = "copy.nii.gz"') == []
    assert {f.verdict for f in refused(late, 'mask = "beacon.nii"')} == {"leak"}


def test_what_is_like_a_recorded_mask_is_unproven_until_it_is_explained(ran, monkeypatch):
    monkeypatch.chdir(ran)
    near = recorded(ran)
    near[tuple(np.argwhere(near)[0])] = False
    part = recorded(ran)
    part[4:] = False
    far = np.zeros(SHAPE, bool)
    far[7:, 6:, 5:] = True
    save(ran / "near.nii.gz", near.astype(np.uint8))
    save(ran / "part.nii.gz", part.astype(np.uint8))
    save(ran / "far.nii.gz", far.astype(np.uint8))
    x, y, z = (round(float(v), 1) for v in (AFFINE @ [3, 3, 3, 1])[:3])
    sphere = f"centre = [{x}, {y}, {z}], radius = 3.2"
    assert refused(ran, 'mask = "far.nii.gz"') == []
    for region, how, call in (
        ('mask = "near.nii.gz"', "near is like a mask that was chosen on", ["near.nii.gz"]),
        ('mask = "part.nii.gz"', "% of it is inside label-Arbor_", ["part.nii.gz"]),
        (sphere, "its centre is", ["--centre", x, y, z, "--radius", "3.2"]),
    ):
        findings = refused(ran, region)
        assert {finding.verdict for finding in findings} == {"unproven"}
        told, name = findings[0].reason, "label-Arbor_desc-without"
        assert how in told and name in told and "nobody has declared" not in told
        assert told.endswith("a run recorded in entry 3 of the ledger, and no entry declares "
                             "this region")  # fmt: skip
        command = f"sequester declare {' '.join(map(str, call))} --source TEXT --explained TEXT"
        assert findings[0].cure.endswith(command)
        words = ["--source", "a map in the hut", "--explained", "printed in 1987, by the gate"]
        assert CliRunner().invoke(main, ["declare", *map(str, call), *words]).exit_code == 0
        assert refused(ran, region) == []


def test_a_region_declared_after_a_mask_that_it_is_like_is_told_so(ran):
    near = recorded(ran)
    near[tuple(np.argwhere(near)[0])] = False
    save(ran / "near.nii.gz", near.astype(np.uint8))
    call = ["declare", str(ran / "near.nii.gz"), "--study", str(study(ran)), "--source", "a guess"]
    told = CliRunner().invoke(main, call)
    assert told.exit_code == 0 and "note: near is like a mask that was chosen on" in told.output
    (number,) = {finding.reason.split()[-1] for finding in refused(ran, 'mask = "near.nii.gz"')}
    entry = Ledger(ran / "STUDY.ledger.jsonl").sound().entries[int(number) - 1]
    assert (entry.kind, entry.body["sources"]) == ("declaration", ["a guess"])


def test_a_centre_near_a_recorded_one_is_unproven_within_the_smoothness_of_the_maps(ran):
    """Of white noise that is a voxel; of maps that are smoothed afterwards, more; or as stated."""
    centre = voxel_set(recorded(ran), AFFINE).centre
    region = f"centre = [{centre[0]}, {centre[1]}, {centre[2] + 7}], radius = 3.2"
    assert refused(ran, region) == []
    path = study(ran, BEACON.format(region=region))
    path.write_text(path.read_text().replace("[data]", "[data]\nfwhm = 8"))
    with pytest.raises(GuardRefused, match=r"\(the\smaps' FWHM is 8.0 mm\)\sfrom that of"):
        check_study(read_settings(path))
    width = 9  # mm
    for sub in SUBS:
        noise = np.random.default_rng(int(sub)).normal(0, 1, SHAPE)
        smooth = gaussian_filter(noise, width / 3 / np.sqrt(8 * np.log(2)), mode="wrap")
        save(ran / f"sub-{sub}_glow.nii.gz", smooth.astype(np.float32))
    (reason,) = {finding.reason for finding in refused(ran, region)}
    (found,) = re.findall(r"its centre is \d\.\d mm \(the maps' FWHM is (.*) mm\)", reason)
    assert float(found) == pytest.approx(width, rel=0.25)


def test_a_mask_chosen_on_data_that_are_not_tested_does_not_make_a_region_doubtful(fresh):
    table = (fresh / "table.tsv").read_text()

    def without(subs):
        text = table
        for sub in subs:
            text = text.replace(f"{sub}\tbold\tglow\tn/a", f"{sub}\tbold\tglow\tasleep")
        (fresh / "table.tsv").write_text(text)

    without(SUBS[4:])
    run(fresh)
    near = np.asarray(
        nib.load(fresh / "results" / "masks" / "label-Arbor_desc-without01_mask.nii.gz").dataobj
    )
    near[tuple(np.argwhere(near)[0])] = 0
    save(fresh / "near.nii.gz", near)
    beacon = BEACON.format(region='mask = "near.nii.gz"')
    with pytest.raises(GuardRefused, match="unproven"):
        check_study(read_settings(study(fresh, beacon)))
    without(SUBS[:4])
    assert check_study(read_settings(study(fresh, beacon)))


def test_an_explanation_on_another_branch_knew_nothing_of_the_mask(ran, fresh):
    """As after a merge: declared and explained on one branch, found by a run on the other."""
    near = recorded(ran)
    near[tuple(np.argwhere(near)[0])] = False
    for root in (ran, fresh):
        save(root / "near.nii.gz", near.astype(np.uint8))
    call = ["declare", str(fresh / "near.nii.gz"), "--study", str(study(fresh))]
    call += ["--source", "a map in the hut", "--explained", "printed in 1987, by the gate"]
    assert CliRunner().invoke(main, call).exit_code == 0
    theirs = (fresh / "STUDY.ledger.jsonl").read_bytes()
    with (ran / "STUDY.ledger.jsonl").open("ab") as stream:
        stream.write(theirs)
    assert {f.verdict for f in refused(ran, 'mask = "near.nii.gz"')} == {"unproven"}
    call[1], call[3] = str(ran / "near.nii.gz"), str(ran / "STUDY.toml")
    assert CliRunner().invoke(main, call).exit_code == 0  # joins the two, and explains again
    assert refused(ran, 'mask = "near.nii.gz"') == []


def test_an_explanation_is_told_beside_the_result(ran):
    near = recorded(ran)
    near[tuple(np.argwhere(near)[0])] = False
    save(ran / "near.nii.gz", near.astype(np.uint8))
    call = ["declare", str(ran / "near.nii.gz"), "--study", str(study(ran))]
    call += ["--source", "a map in the hut", "--explained", "printed in 1987, by the gate"]
    assert CliRunner().invoke(main, call).exit_code == 0
    made = run(ran, ARBOR.format(k=20), BEACON.format(region='mask = "near.nii.gz"'))
    assert '"printed in 1987, by the gate"' in made["Beacon"]["history"]
    assert "printed" not in (made["Arbor"]["history"] or "")


def test_an_explanation_does_not_cover_the_very_same_voxels(ran):
    save(ran / "beacon.nii", recorded(ran).astype(np.uint8))
    call = ["declare", str(ran / "beacon.nii"), "--study", str(ran / "STUDY.toml")]
    call += ["--source", "a map in the hut", "--explained", "it just looks so"]
    told = CliRunner().invoke(main, call)
    assert told.exit_code == 0 and "note: a map in the hut (the same voxels as" in told.output
    assert {f.verdict for f in refused(ran, 'mask = "beacon.nii"')} == {"leak"}


def test_masks_of_a_run_derive_from_what_their_sidecars_say(ran):
    """Even without a ledger: shared by all, or one for each subject."""
    masks, name = ran / "results" / "masks", "label-Arbor_desc-without{}_mask"
    for sub in SUBS:
        for suffix in ("nii.gz", "json"):
            here = masks / f"{name.format(sub)}.{suffix}"
            shutil.copyfile(here, masks / f"sub-{sub}_mask.{suffix}")
    for file, without in (
        (f"results/masks/{name.format('03')}.nii.gz", {"03"}),
        ("results/masks/sub-{sub}_mask.nii.gz", None),
    ):
        settings = read_settings(study(ran, BEACON.format(region=f'mask = "{file}"')))
        of = {path: o.derived_from for o in settings.study.origins for path in o.files}
        for sub in SUBS if without is None else ("",):
            units = {unit.sub for unit in of[file.replace("{sub}", sub)]}
            assert units == set(SUBS) - (without or {sub})


def test_a_reason_alone_declares_nothing(fresh):
    call = ["declare", "--study", str(study(fresh)), "--explained", "as the moss grows"]
    done = CliRunner().invoke(main, call)
    assert (done.exit_code, "nothing to declare" in done.stderr) == (2, True)
    assert not (fresh / "STUDY.ledger.jsonl").exists()


def test_a_sphere_is_declared_with_the_voxels_that_a_run_reads(fresh):
    centre = (AFFINE @ [6, 5, 4, 1])[:3].tolist()
    run(fresh, BEACON.format(region=f"centre = {centre}, radius = 5"))
    (stated,) = (
        entry.body
        for entry in Ledger(fresh / "STUDY.ledger.jsonl").chain().entries
        if entry.kind == "declaration" and entry.body.get("voxels")
    )
    (read,) = (fresh / "results" / "masks").glob("label-Beacon*_mask.nii.gz")
    assert stated["voxels"] == [mask_set(read).digest]


def test_neither_a_name_nor_the_numbers_of_rows_make_another_look():
    what = {"roi": "Arbor", "node": "a", "tested": {"units": [0]}, "of": ["Arbor"], "p": 0.05}
    key = look_body(what, [])["key"]
    renamed = {"roi": "Brook", "node": "b", "tested": {"units": [3]}, "of": ["Brook"]}
    for name, other in renamed.items():
        assert look_body(what | {name: other}, [])["key"] == key, name
    assert look_body(what | {"p": 0.01}, [])["key"] != key


def test_a_mask_declared_as_derived_is_so_wherever_it_is_used(fresh):
    made = np.zeros(SHAPE, np.uint8)
    made[7:, 6:, 5:] = 1
    save(fresh / "drawn.nii.gz", made)
    call = ["declare", str(fresh / "drawn.nii.gz"), "--study", str(study(fresh))]
    call += ["--source", "drawn on the map of 04", "--derived-from", "sub=04,suffix=bold"]
    assert CliRunner().invoke(main, call).exit_code == 0
    save(fresh / "copy.nii", made[5:, 4:], affine=AFFINE @ np.array(
        [[1, 0, 0, 5], [0, 1, 0, 4], [0, 0, 1, 0], [0, 0, 0, 1]]))  # fmt: skip
    (finding,) = refused(fresh, 'mask = "copy.nii", regrid = true')
    assert (finding.verdict, finding.data_path[0]) == ("leak", "sub-04_glow.nii.gz")
    call[-1] = "sub=4"
    told = CliRunner().invoke(main, call)
    assert told.exit_code == 2 and "names no data of the study" in told.output


def test_files_of_an_origin_may_be_pinned_by_their_digests(fresh):
    from sequester.workflows.digests import digest

    origin = '[[origin]]\nsource = "hut"\nfiles = ["all*.nii.gz"]\nsha256 = ["{}"]\n'
    path = study(fresh, ARBOR.format(k=20), origin.format(digest(fresh / "all.nii.gz")))
    run_study(read_settings(path))
    save(fresh / "all.nii.gz", np.ones(SHAPE, np.int16))
    with pytest.raises(InputError, match="is not the one that was declared"):
        read_settings(path)


# -- looks ----------------------------------------------------------------------------------------


def contents(root: Path) -> dict[str, bytes]:
    folder = root / "results"
    return {str(p.relative_to(folder)): p.read_bytes() for p in folder.rglob("*") if p.is_file()}


def test_a_repeated_look_does_not_count_and_another_does(fresh):
    ledger = Ledger(fresh / "STUDY.ledger.jsonl")
    assert run(fresh)["Arbor"]["looks"] == 1
    once = contents(fresh)
    assert run(fresh)["Arbor"]["looks"] == 1 and contents(fresh) == once  # a warm ledger
    looks = ledger.sound().of_kind("look")
    assert [entry.body.get("again", False) for entry in looks] == [False, True]
    row = run(fresh, k=15)["Arbor"]
    assert row["looks"] == 2
    assert "Looks at these voxels in these data so far: 2." in row["sentence"]
    assert run(fresh)["Arbor"]["looks"] == 1 and contents(fresh) == once  # as of its first run
    assert run(fresh, k=15)["Arbor"] == row
    assert run(fresh, glow="hum")["Arbor"]["looks"] == 3  # another contrast of the same data
    ledger.path.unlink()
    assert run(fresh)["Arbor"]["looks"] == 1 and contents(fresh) == once  # a cold one


def test_more_subjects_and_other_preprocessing_are_new_looks(fresh):
    table = (fresh / "table.tsv").read_text()
    last = f"sub-{SUBS[-1]}_glow.nii.gz\t{SUBS[-1]}\tbold\tglow\t"
    (fresh / "table.tsv").write_text(table.replace(f"{last}n/a", f"{last}asleep"))
    assert run(fresh)["Arbor"]["looks"] == 1
    (fresh / "table.tsv").write_text(table)
    assert run(fresh)["Arbor"]["looks"] == 2
    # The order of the table's rows is no look.
    head, *rows = table.splitlines()
    (fresh / "table.tsv").write_text("\n".join([head, *reversed(rows)]) + "\n")
    assert run(fresh)["Arbor"]["looks"] == 2
    path = fresh / f"sub-{SUBS[0]}_glow.nii.gz"
    image = nib.load(path)
    save(path, np.asarray(image.dataobj) + np.float32(0.01))
    assert run(fresh)["Arbor"]["looks"] == 3


def test_looks_at_other_voxels_or_other_people_do_not_count(fresh):
    corner, opposite = np.zeros((2, *SHAPE), np.uint8)
    corner[:2, :2, :2] = opposite[6:, 6:, 5:] = 1
    save(fresh / "corner.nii.gz", corner)
    save(fresh / "opposite.nii.gz", opposite)
    one, other = (
        BEACON.format(region=f'mask = "{name}.nii.gz"') for name in ("corner", "opposite")
    )
    assert run(fresh, one)["Beacon"]["looks"] == 1
    row = run(fresh, other.replace("Beacon", "Cinder"))["Cinder"]
    # Other voxels; but this region was declared when those data had been looked at.
    assert row["looks"] == 1
    assert "The region was declared after 1 look at these data." in row["sentence"]
    both = 'union = [{ mask = "corner.nii.gz" }, { mask = "opposite.nii.gz" }]'
    row = run(fresh, BEACON.format(region=both))["Beacon"]
    assert "Beacon was another region (corner) in 1 look before." in row["sentence"]
    assert row["history"] and row["history"] in row["sentence"]
    assert row["looks"] == 3


def test_labels_of_a_family_and_variants_are_one_look_and_regions_together_are_several(fresh):
    atlas = np.ones(SHAPE, np.int16)
    atlas[4:] = 2
    save(fresh / "atlas.nii.gz", atlas)
    family = BEACON.format(region='atlas = "atlas.nii.gz"') + "each_label = true\n"
    done = run_study(read_settings(study(fresh, family)))
    assert [row["looks"] for row in done.tests] == [1, 1]
    both = ARBOR.format(k=12) + "sensitivity = { k = [10, 14] }\n"
    assert run(fresh, both, family)["Arbor"]["looks"] == 2


def test_the_shape_check_says_that_a_mask_is_one_of_the_studys_own(fresh):
    corner = np.zeros(SHAPE, np.uint8)
    corner[:4, :4, :4] = 1
    save(fresh / "corner.nii.gz", corner)
    run(fresh, ARBOR.format(k=20), BEACON.format(region='mask = "corner.nii.gz"'))
    (mask, *_) = sorted((fresh / "results" / "masks").glob("*desc-without*_mask.nii.gz"))
    mine = Path(shutil.copyfile(mask, fresh / "found-in-the-hut.nii.gz"))
    for path, known in ((mine, True), (fresh / "corner.nii.gz", False)):
        said = CliRunner().invoke(main, ["contour", str(path), str(fresh / "STUDY.toml")])
        told = "one of the study's own: it has the very voxels of label-Arbor_desc-without"
        assert said.exit_code == 0, said.output
        assert (told in " ".join(said.output.split())) == known


def test_a_comparison_is_a_look_of_its_own_and_counts_for_its_regions(fresh):
    corner, opposite = np.zeros((2, *SHAPE), np.uint8)
    corner[:2, :2, :2] = opposite[6:, 6:, 5:] = 1
    save(fresh / "corner.nii.gz", corner)
    save(fresh / "opposite.nii.gz", opposite)
    one = BEACON.format(region='mask = "corner.nii.gz"')
    other = BEACON.format(region='mask = "opposite.nii.gz"').replace("Beacon", "Cinder")
    assert run(fresh, one)["Beacon"]["looks"] == 1
    both = (
        '[[comparison]]\nname = "BeaconCinder"\nkind = "difference"\nrois = ["Beacon", "Cinder"]\n'
    )
    done = run_study(read_settings(study(fresh, one, other, both)))
    assert {row["roi"]: row["looks"] for row in done.tests} == {"Beacon": 1, "Cinder": 2}
    assert done.comparisons[0]["looks"] == 3  # its own, and each region's
    assert "in these data so far: 3 (2 of them of one run)." in done.comparisons[0]["sentence"]
    table = (fresh / "results" / "comparisons.tsv").read_text().splitlines()
    assert dict(zip(*(line.split("\t") for line in table), strict=True))["looks"] == "3"
    once = contents(fresh)
    done = run_study(read_settings(study(fresh, one, other, both)))
    assert done.comparisons[0]["looks"] == 3 and contents(fresh) == once
    turned = both.replace('"difference"', '"equivalence"\nsmallest = 0.3')
    done = run_study(read_settings(study(fresh, one, other, turned)))
    assert done.comparisons[0]["looks"] == 4


def test_of_two_runs_at_the_same_time_the_second_counts_the_first(fresh):
    def other(stage: Path) -> None:
        text = study(fresh, k=15).read_text()
        (fresh / "STUDY.toml").write_text(text.replace("[data]", 'output = "others"\n[data]'))
        assert not (fresh / "results").exists()  # the first still writes
        inner.extend(run_study(read_settings(fresh / "STUDY.toml")).tests)

    inner: list[dict] = []
    outer = run_study(read_settings(study(fresh)), finish=other).tests
    assert (outer[0]["looks"], inner[0]["looks"]) == (1, 2)
    assert run(fresh)["Arbor"]["looks"] == 1


def test_a_run_that_cannot_write_its_results_has_looked_once(fresh):
    def full(stage: Path) -> None:
        raise OSError(28, "No space left on device")

    with pytest.raises((InputError, OSError)):
        run_study(read_settings(study(fresh)), finish=full)
    assert not (fresh / "results").exists()
    assert run(fresh)["Arbor"]["looks"] == 1
    assert run(fresh, k=15)["Arbor"]["looks"] == 2


def test_check_and_a_run_without_record_write_no_ledger(fresh):
    settings = read_settings(study(fresh))
    check_study(settings)
    run_study(settings, record=False)
    assert not settings.ledger.exists()
    run_study(settings)
    whole = settings.ledger.read_bytes()
    check_study(settings)
    assert settings.ledger.read_bytes() == whole


def test_a_changed_ledger_and_a_folder_without_room_for_one_stop_the_run(ran, monkeypatch):
    ledger = ran / "STUDY.ledger.jsonl"
    results = contents(ran)
    ledger.write_bytes(ledger.read_bytes().replace(b"drawn", b"grown"))
    with pytest.raises(InputError, match="the ledger was changed"):
        run(ran)
    ledger.unlink()
    monkeypatch.setattr("os.access", lambda path, mode: False)
    with pytest.raises(InputError, match="the ledger cannot be written"):
        run(ran)
    assert contents(ran) == results and not ledger.exists()


def test_the_ledger_holds_claims_and_stays_small(ran):
    ledger = Ledger(ran / "STUDY.ledger.jsonl")
    (artefact,) = ledger.sound().of_kind("artefact")
    units = {e.body["id"]: e.body["units"] for e in ledger.sound().of_kind("units")}
    listed = units[artefact.body["of"]]
    for mask, sub in zip(artefact.body["masks"], SUBS, strict=True):
        assert [listed[i]["sub"] for i in mask["without"]] == [sub]
    assert ledger.path.stat().st_size < 10_000
    localizer = """
[[roi]]
name = "Brook"
plan = "localizer"
mask_of = "group"
claim = "these-subjects"
claim_reason = "these seven are all there are"
choose_on = { contrast = "hum" }
search = { mask = "all.nii.gz", origin = "the whole garden, drawn beforehand" }
rule = { kind = "strongest", k = 5 }
"""
    study(ran, localizer)
    told = CliRunner().invoke(main, ["declare", "--study", str(ran / "STUDY.toml")])
    assert told.exit_code == 0 and "claim: the claim is about these subjects only" in told.output
    (waiver,) = ledger.sound().of_kind("waiver")
    assert (waiver.body["roi"], waiver.body["field"]) == ("Brook", "claim")
    assert waiver.body["reason"] == "these seven are all there are"
    # It goes with the result, its record and its page.
    table = (ran / "table.tsv").read_text()
    for sub in SUBS:
        table = table.replace(f"{sub}\tbold\thum", f"{sub}\trest\thum")
    (ran / "table.tsv").write_text(table)
    row = run(ran, localizer)["Brook"]
    assert row["claim_reason"] == "these seven are all there are"
    assert f"speaks of these subjects only, because: {row['claim_reason']}." in row["sentence"]
    waivers = json.loads((ran / "results" / "record.json").read_text())["waivers"]
    assert {(one["node"], one["field"], one["reason"]) for one in waivers} == {
        (f"garden.Brook.{name}", "claim", "these seven are all there are")
        for name in ("extract", "test")
    }
