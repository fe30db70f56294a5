"""The output folder takes its place without losing what somebody else put there."""

import json
import threading

import pytest
from sequester.nodes.errors import InputError
from sequester.workflows.staging import MANIFEST, claimed


def run_into(target, files, inputs=()):
    """As a run does: its files, and a manifest of them."""
    with claimed(target, "lanterns", inputs) as stage:
        for name, text in files.items():
            (stage / name).parent.mkdir(parents=True, exist_ok=True)
            (stage / name).write_text(text)
        (stage / MANIFEST).write_text(
            json.dumps({"study": "lanterns", "outputs": dict.fromkeys(files, "")})
        )


def held(folder):
    return {
        path.relative_to(folder).as_posix(): path.read_text()
        for path in folder.rglob("*")
        if path.is_file() and path.name != MANIFEST
    }


def test_own_files_are_carried_over_and_earlier_results_are_not(tmp_path):
    target = tmp_path / "results"
    run_into(target, {"a.tsv": "1", "masks/one.nii": "1", "figures/one.svg": "1"})
    (target / "notes.txt").write_text("mine")
    (target / "masks" / "mine.nii").write_text("mine")
    (target / "empty" / "in it").mkdir(parents=True)
    (tmp_path / "elsewhere").mkdir()
    (target / "linked").symlink_to(tmp_path / "elsewhere")
    run_into(target, {"a.tsv": "2", "masks/two.nii": "2"})
    assert held(target) == {
        "a.tsv": "2",
        "masks/two.nii": "2",
        "masks/mine.nii": "mine",
        "notes.txt": "mine",
    }
    assert (target / "empty" / "in it").is_dir()
    assert (target / "linked").is_symlink()
    assert not (target / "figures").exists()
    assert {p.name for p in tmp_path.iterdir()} == {"results", ".results.lock", "elsewhere"}


@pytest.mark.parametrize("manifest", ["{}", "[]", "not json", '{"outputs": {}}'])
def test_a_folder_with_somebody_elses_manifest_is_left_alone(tmp_path, manifest):
    target = tmp_path / "maps"
    target.mkdir()
    (target / MANIFEST).write_text(manifest)
    (target / "map.nii").write_text("data")
    with pytest.raises(InputError, match="holds something else"):
        run_into(target, {"a.tsv": "1"})
    assert (target / "map.nii").read_text() == "data"


@pytest.mark.parametrize("where", [".", "results", "results/masks", "results/.."])
def test_an_output_that_holds_an_input_is_refused(tmp_path, where):
    run_into(tmp_path / "results", {"masks/region.nii": "1"})
    # Even where an earlier run wrote.
    (tmp_path / MANIFEST).write_text('{"study": "lanterns", "outputs": {}}')
    with pytest.raises(InputError, match="holds what the study is made from"):
        run_into(tmp_path / where, {"a.tsv": "2"}, [tmp_path / "results/masks/region.nii"])
    assert held(tmp_path)["results/masks/region.nii"] == "1"


def test_results_of_another_study_are_not_replaced(tmp_path):
    target = tmp_path / "results"
    run_into(target, {"a.tsv": "1"})
    with (
        pytest.raises(InputError, match=r"results of another study .*got those of lanterns"),
        claimed(target, "ferries"),
    ):
        pass
    assert held(target) == {"a.tsv": "1"}


def test_a_file_that_is_gone_is_named_and_is_no_lack_of_room(tmp_path):
    gone = tmp_path / "gone.nii"
    with (
        pytest.raises(InputError, match=f"cannot be read .*{gone.name}.*No such file"),
        claimed(tmp_path / "results", "lanterns"),
    ):
        gone.read_bytes()
    with (
        pytest.raises(InputError, match=r"output cannot be written .*results.*make room"),
        claimed(tmp_path / "results", "lanterns") as stage,
    ):
        (stage / "no" / "folder").write_text("")
    assert not (tmp_path / "results").exists()


def test_a_link_goes_on_pointing_at_the_results(tmp_path):
    real, link = tmp_path / "disk" / "real", tmp_path / "results"
    real.mkdir(parents=True)
    link.symlink_to(real)
    for text in "123":
        run_into(link, {"a.tsv": text})
        assert link.is_symlink()
        assert (real / "a.tsv").read_text() == text
    assert {p.name for p in real.parent.iterdir()} == {"real", ".real.lock"}


def test_a_folder_has_one_writer_at_a_time(tmp_path):
    """Three in a row: the lock's file must not go when the first of them ends."""
    target, entered, go_on = tmp_path / "results", threading.Event(), threading.Event()
    run_into(target, {"a.tsv": "1"})

    def second():
        with claimed(target, "lanterns"):
            entered.set()
            assert go_on.wait(20)

    waiting = threading.Thread(target=second)
    lock = (tmp_path / ".results.lock").stat().st_ino
    waiting.start()
    assert entered.wait(20)
    with pytest.raises(InputError, match="in use"), claimed(target, "lanterns"):
        pass
    go_on.set()
    waiting.join()
    assert (tmp_path / ".results.lock").stat().st_ino == lock


def test_a_failure_leaves_the_earlier_results(tmp_path):
    target = tmp_path / "results"
    run_into(target, {"a.tsv": "1"})
    with pytest.raises(ZeroDivisionError), claimed(target, "lanterns") as stage:
        (stage / "a.tsv").write_text("2")
        raise ZeroDivisionError
    assert held(target) == {"a.tsv": "1"}
    assert {p.name for p in tmp_path.iterdir()} == {"results", ".results.lock"}
