"""Ledgers that lie beside a study's own: their looks and masks count, a broken one is told."""

from __future__ import annotations

import json
import re
import shutil
from pathlib import Path
from typing import Any

import nibabel as nib
import numpy as np
import pytest
from gallery_studies import AFFINE, ARBOR, BROOK, HEAD, SHAPE, arbor, run_once, save
from sequester import read_settings, run_study
from sequester.nodes.errors import InputError
from sequester.workflows.digests import fingerprint
from sequester.workflows.guard import GuardRefused
from sequester.workflows.ledger import Chain, Ledger, Shelf, shelf_of
from sequester.workflows.origins import declare
from sequester.workflows.regions import Given, MaskFile
from sequester.workflows.run import check_study

OTHER = HEAD.replace('table.tsv"', 'table.tsv"\noutput = "others"')

pytestmark = pytest.mark.usefixtures("quiet_engine")


@pytest.fixture
def garden(tmp_path: Path) -> Path:
    """A study that chose and tested Arbor once, with its ledger."""
    root = tmp_path / "garden"
    shutil.copytree(run_once(), root)
    return root


def ran(root: Path, text: str, name: str = "COPY.toml") -> dict[str, Any]:
    (root / name).write_text(text)
    return run_study(read_settings(root / name)).tests[0]


def refused(root: Path, text: str, name: str = "COPY.toml") -> str:
    (root / name).write_text(text)
    try:
        check_study(read_settings(root / name))
    except GuardRefused as error:
        return " ".join(str(error).split())
    return ""


def test_a_copied_study_file_is_no_way_round_the_count(garden: Path):
    made = ran(garden, OTHER + ARBOR.replace("k = 20", "k = 25"))
    assert made["looks"] == 2
    said = "Looks at these voxels in these data so far: 2 (1 of them in STUDY.ledger.jsonl)."
    assert said in made["sentence"]
    manifest = json.loads((garden / "others" / "manifest.json").read_text())
    assert manifest["ledgers_beside"] == ["STUDY.ledger.jsonl"]
    # Asked anew from the first file, the copy's look counts there too.
    again = ran(garden, HEAD + ARBOR.replace("k = 20", "k = 30"), "STUDY.toml")
    assert again["looks"] == 3
    assert "(1 of them in COPY.ledger.jsonl)" in again["sentence"]


def test_the_very_same_question_is_one_look_in_whatever_file(garden: Path):
    made = ran(garden, OTHER + ARBOR)
    assert made["looks"] == 1
    assert "Looks at" not in made["sentence"]


def test_a_copy_of_a_ledger_counts_once(garden: Path):
    shutil.copy(garden / "STUDY.ledger.jsonl", garden / "BACKUP.ledger.jsonl")
    changed = ARBOR.replace("k = 20", "k = 25")
    assert ran(garden, HEAD + changed, "STUDY.toml")["looks"] == 2


def test_a_repetition_gives_the_same_bytes_whatever_came_beside(garden: Path):
    ran(garden, OTHER + ARBOR.replace("k = 20", "k = 25"))
    before = {p.name: p.read_bytes() for p in (garden / "others").iterdir() if p.is_file()}
    ran(garden, HEAD.replace("table.tsv", 'table.tsv"\noutput = "third') + ARBOR, "THIRD.toml")
    ran(garden, OTHER + ARBOR.replace("k = 20", "k = 25"))
    assert before == {p.name: p.read_bytes() for p in (garden / "others").iterdir() if p.is_file()}


def test_a_mask_that_another_study_file_found_is_known(garden: Path):
    save(garden / "hut.nii.gz", (7 * arbor(garden)).astype("f4"))
    region = BROOK.replace("REGION", 'mask = "hut.nii.gz"')
    told = refused(garden, OTHER + region)
    assert "leak: garden.Brook.extract" in told
    assert "which a run recorded in STUDY.ledger.jsonl" in told
    x, y, z = -3, -1, 0  # where most was found
    told = refused(garden, OTHER + BROOK.replace("REGION", f"centre = [{x}, {y}, {z}], radius = 5"))
    assert re.search(r"in entry \d+ of STUDY.ledger.jsonl, and no entry declares this region", told)


def test_a_region_that_another_file_declared_before_its_run_has_succeeded(tmp_path: Path):
    root = tmp_path / "garden"
    shutil.copytree(run_once().parent / "planted", root)
    save(root / "brook.nii.gz", arbor(run_once()).astype("u1"))
    region = BROOK.replace("REGION", 'mask = "brook.nii.gz"')
    ran(root, HEAD + ARBOR + region, "STUDY.toml")
    assert refused(root, OTHER + region) == ""
    assert refused(root, HEAD + ARBOR + region, "STUDY.toml") == ""


@pytest.mark.parametrize("how", ["run", "check"])
def test_a_ledger_beside_that_was_changed_stops_the_run(garden: Path, how: str):
    ledger = garden / "STUDY.ledger.jsonl"
    ledger.write_bytes(ledger.read_bytes().replace(b"Arbor", b"Amber", 1))
    (garden / "COPY.toml").write_text(OTHER + ARBOR)
    with pytest.raises(InputError) as raised:
        (run_study if how == "run" else check_study)(read_settings(garden / "COPY.toml"))
    said = str(raised.value)
    assert "a ledger beside the study's own was changed" in said
    assert "or move it out of the folder of COPY.ledger.jsonl, whose looks it tells of" in said
    assert not (garden / "others").exists()
    assert not (garden / "COPY.ledger.jsonl").exists()


def test_between_ledgers_only_the_clock_says_what_came_first(tmp_path: Path, monkeypatch: Any):
    times = iter(["10:00:00", "10:00:01", "10:00:01", "10:00:02"])

    class Clock:
        @staticmethod
        def now(_: Any) -> Any:
            return type(
                "Now", (), {"isoformat": lambda self, timespec: f"2026-01-01T{next(times)}"}
            )()

    monkeypatch.setattr("sequester.workflows.ledger.datetime", Clock)
    own, other = (Ledger(tmp_path / f"{name}.ledger.jsonl") for name in "ab")
    first, second = (own.append([{"kind": "waiver", "says": one}])[0] for one in ("a", "b"))
    third, fourth = (other.append([{"kind": "waiver", "says": one}])[0] for one in ("c", "d"))
    shelf = shelf_of(own.path, own.sound())
    assert shelf.beside == ("b.ledger.jsonl",)
    assert [shelf.name_of(entry) for entry in shelf.entries] == ["", "", *["b.ledger.jsonl"] * 2]
    assert shelf.precedes(first, second) and shelf.may_know(first, second)
    assert shelf.precedes(first, third) and not shelf.precedes(third, first)
    # In the same second, neither is shown to have come first.
    assert not shelf.precedes(second, third) and not shelf.precedes(third, second)
    assert shelf.may_know(second, third) and shelf.may_know(third, second)
    assert not shelf.may_know(fourth, first)
    assert Shelf(Chain()).entries == []


# -- whose data they are --------------------------------------------------------------------------

HUT = BROOK.replace("REGION", 'mask = "hut.nii.gz"')
SUBS = [f"{i:02}" for i in range(1, 8)]


def second(root: Path, label: str = "{}", same: int = 0) -> str:
    """The head of a study of a second table: seven maps, so many of which are in the first too."""
    save(root / "hut.nii.gz", arbor(root).astype("u1"))
    rng, rows = np.random.default_rng(8), ["path\tsub\tsuffix"]
    for i, sub in enumerate(SUBS):
        name = f"sub-{sub}.nii.gz" if i < same else f"again-{sub}.nii.gz"
        if i >= same:
            nib.save(nib.Nifti1Image(rng.normal(0, 1, SHAPE).astype("f4"), AFFINE), root / name)
        rows.append(f"{name}\t{label.format(sub)}\tbold")
    (root / "second.tsv").write_text("\n".join(rows) + "\n")
    return OTHER.replace('"table.tsv"', '"second.tsv"')


def near(of: float) -> str:
    """A sphere, so far (mm) from where most was found."""
    return BROOK.replace("REGION", f"centre = [{-3 + of:g}, -1, 0], radius = 5")


def test_a_look_at_other_maps_of_the_same_labels_is_none_at_these(garden: Path):
    head = second(garden)
    assert refused(garden, head + near(of=9)) == ""  # like no mask
    made = ran(garden, head + near(of=9))
    assert (made["looks"], made["history"]) == (1, None)
    # Nor do they count for the first study, whose own looks do.
    assert ran(garden, HEAD + ARBOR.replace("k = 20", "k = 25"), "STUDY.toml")["looks"] == 2


@pytest.mark.parametrize(
    ("roi", "how"),
    [
        (HUT, r"its overlap \(Dice\) is 1.00 with"),
        (
            BROOK.replace("REGION", 'mask = "less.nii.gz"'),
            r"its overlap \(Dice\) is 0\.[89]\d with",
        ),
        (near(of=0), "its centre is"),
    ],
    ids=["the same", "alike", "near"],
)
def test_a_mask_of_other_maps_of_the_same_labels_is_in_doubt_until_explained(
    garden: Path, roi: str, how: str
):
    # They may be other people, or the very same data smoothed anew.
    head, less = second(garden), arbor(garden)
    less[tuple(np.argwhere(less)[0])] = False
    save(garden / "less.nii.gz", less.astype("u1"))
    told = refused(garden, head + roi)
    assert "unproven: garden.Brook.extract" in told
    assert "leak" not in told
    assert "found on maps that are not in this table, of subjects with the same labels" in told
    assert re.search(how + r" .*, which a run recorded in entry \d+ of STUDY.ledger.jsonl", told)
    assert "if these are other people or new data, say so: sequester declare" in told
    settings = read_settings(garden / "COPY.toml")
    others = [one for one in (HUT, near(of=0)) if one != roi]
    region = settings.rois[0].region
    assert isinstance(region, Given)
    declare(settings, region, "gardeners of another town")
    assert refused(garden, head + roi) == ""
    made = ran(garden, head + roi)
    assert made["looks"] == 1
    assert '"gardeners of another town"' in made["history"]
    # It speaks of this region alone.
    assert all("unproven: garden.Brook" in refused(garden, head + one) for one in others)


def test_whose_a_mask_of_other_maps_is_can_be_read_when_it_is_explained(garden: Path):
    (garden / "COPY.toml").write_text(second(garden) + HUT)
    settings = read_settings(garden / "COPY.toml")
    declare(settings, MaskFile("a map in the hut", (), "", "hut.nii.gz"), "other gardeners")
    run_study(settings)
    record = json.loads((garden / "others" / "record.json").read_text())
    said = {origin for one in record["meetings"] for origin in one["origins"]}
    (told,) = (one for one in said if one.startswith("a map in the hut (the same voxels as label-"))
    assert told.endswith("in STUDY.ledger.jsonl, chosen on data that are not in this table)")


def test_that_a_mask_is_one_of_these_data_clears_no_doubt_of_others(garden: Path):
    head = second(garden) + '[data]\nselect = { sub = ["04", "05", "06", "07"] }\n'
    entries = [
        {"kind": one.kind, **one.body}
        for one in Ledger(garden / "STUDY.ledger.jsonl").sound().entries
    ]
    own = [one for one in entries if one["kind"] in ("units", "artefact")]
    own[0]["id"] = own[1]["of"] = "these"
    for mask in own[1]["masks"]:  # as if chosen on 01 to 03 of the study's own maps
        mask["only"] = [0, 1, 2]
    Ledger(garden / "COPY.ledger.jsonl").append(own)
    told = refused(garden, head + HUT)
    assert "leak" not in told
    assert "found on maps that are not in this table" in told
    (garden / "STUDY.ledger.jsonl").unlink()
    assert refused(garden, head + HUT) == ""


def test_what_a_mask_of_other_data_was_made_from_is_theirs(garden: Path):
    head, far = second(garden), np.zeros(SHAPE, "u1")
    far[6:8, 5:7, 4:6] = 1
    save(garden / "hut.nii.gz", far)
    stated = HUT.replace('origin = "a map', 'derived_from = [{ suffix = "bold" }], origin = "a map')
    (garden / "STUDY.toml").write_text(HEAD + ARBOR + stated)
    declare(read_settings(garden / "STUDY.toml"), None)
    assert refused(garden, head + HUT) == ""
    assert "made from the data it would be tested on" in refused(
        garden, HEAD + ARBOR + HUT, "A.toml"
    )


@pytest.mark.parametrize(
    ("label", "same", "chose"),
    [
        ("{}", 1, 6),  # one table goes on with the other: its labels are the same
        ("g{}", 7, 6),  # the same maps under other labels
        ("g{}", 1, 1),
        ("g{}", 0, 0),
    ],
)
def test_data_are_the_same_by_their_maps(garden: Path, label: str, same: int, chose: int):
    (garden / "COPY.toml").write_text(second(garden, label, same) + HUT)
    if not chose:
        check_study(read_settings(garden / "COPY.toml"))
        return
    with pytest.raises(GuardRefused) as refused:
        check_study(read_settings(garden / "COPY.toml"))
    assert refused.value.findings[0].mask_units.bit_count() == chose
    assert "(by the labels" not in str(refused.value)


@pytest.mark.parametrize("beside", [False, True])
def test_in_the_study_s_own_ledger_labels_are_those_of_its_table(garden: Path, beside: bool):
    if beside:  # a look at the same data that another study file took
        ran(garden, OTHER + ARBOR)
    second(garden)  # the same table of maps that were made anew
    told = refused(garden, HEAD.replace("table.tsv", "second.tsv") + HUT, "STUDY.toml")
    assert "leak: garden.Brook.extract" in told


def test_an_entry_without_maps_is_matched_by_labels_and_that_is_said(garden: Path):
    head, path = second(garden), garden / "STUDY.ledger.jsonl"
    entries = [{"kind": one.kind, **one.body} for one in Ledger(path).sound().entries]
    assert [one.pop("maps") for one in entries if one["kind"] == "units"]
    path.unlink()
    Ledger(path).append(entries)
    told = refused(garden, head + HUT)
    assert "recorded in STUDY.ledger.jsonl (by the labels of its subjects alone)" in told


def test_what_a_system_keeps_of_a_ledger_is_none(garden: Path):
    (garden / "._STUDY.ledger.jsonl").write_bytes(b"\x00\x05\x16\x07Mac OS X\n")
    assert ran(garden, OTHER + ARBOR)["looks"] == 1


@pytest.mark.parametrize("size", [0, 1, 70_000, 140_000, 200_000, 1_000_000])
def test_a_fingerprint_is_of_the_size_and_of_what_stands_at_both_ends_and_between(
    tmp_path: Path, size: int
):
    path, blob = tmp_path / "map.nii", bytearray(size)
    path.write_bytes(blob)
    made = {fingerprint(path)}
    path.write_bytes(blob + b"\0")
    made.add(fingerprint(path))
    at = {0, size // 2, size - 1} if size > 200_000 else set(range(0, size, 9973))
    for place in at:
        changed = blob.copy()
        changed[place] = 1
        path.write_bytes(changed)
        made.add(fingerprint(path))
    assert len(made) == 2 + len(at)
