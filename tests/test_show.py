"""What the terminal says of a run: its table, and the sentences below it."""

from __future__ import annotations

from types import SimpleNamespace
from typing import Any

import pytest
from sequester.workflows.show import print_tests


@pytest.fixture(autouse=True)
def _wide(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("COLUMNS", "200")  # else a narrow terminal has each row in lines of its own


def a_test(roi: str, **more: Any) -> dict[str, Any]:
    """The test of a region given beforehand, as a result has it."""
    plain: dict[str, Any] = dict.fromkeys(
        ("parcel_name", "p_max", "n_folds", "n_empty", "n_replaced", "dice", "noise_dice")
    )
    return plain | {
        "roi": roi, "plan": "a-priori", "claim": "population", "biased": False,
        "estimate": 0.5, "interval_low": 0.25, "interval_high": 0.75, "interval_kind": "exact",
        "dz": 1.5, "p": 0.01, "p_holm": 0.02, "sentence": f"Of {roi}.",
    } | more  # fmt: skip


def settings(*rois: str, left_out: tuple[str, ...] = (), together: bool = False) -> Any:
    """Three gardeners, two of whom may be one household."""
    people = {"01": "hut" if together else "01", "02": "hut" if together else "02", "03": "03"}
    rows = [SimpleNamespace(unit=SimpleNamespace(sub=s), person=who) for s, who in people.items()]
    lost = [SimpleNamespace(unit=SimpleNamespace(sub=sub)) for sub in left_out]
    regions = [
        SimpleNamespace(name=name, variant_of="", tested=SimpleNamespace(rows=rows))
        for name in rois
    ]
    return SimpleNamespace(name="garden", rois=regions, left_out=lost)


def cells(said: str, name: str) -> list[str]:
    """The cells of a row of the table, which stand two blanks apart or more."""
    (line,) = [line for line in said.splitlines() if line.startswith(f"{name}  ")]
    return [cell.strip() for cell in line.split("  ") if cell.strip()]


def test_a_row_holds_what_was_found(capsys: pytest.CaptureFixture[str]):
    folded = {"plan": "k-fold", "n_folds": 5, "n_empty": 1, "n_replaced": 1}
    print_tests(
        settings("Arbor", "Brook", "Look"),
        [
            a_test("Arbor"),
            a_test("Brook", **folded, dice=0.62, noise_dice=0.1, p_max=0.04),
            a_test("Look", biased=True, plan="exploratory", p=None, interval_low=None, estimate=2),
        ],
    )
    said = capsys.readouterr().out
    head = ["Arbor", "a-priori", "population", "0.50", "0.25 to 0.75 (exact)", "1.50"]
    assert cells(said, "Arbor") == [*head, ".010", ".020", "-", "-", "-"]
    assert cells(said, "Brook")[6:] == [".010", ".020", ".040", "3/5 folds", "0.62 (0.10)"]
    assert cells(said, "Look") == ["Look", "exploratory", "nobody", "2 BIASED", *"-------"]
    assert [line for line in said.splitlines() if line.startswith("Of")] == [
        "Of Arbor.", "Of Brook.", "Of Look.",
    ]  # fmt: skip


def test_of_many_labels_the_table_names_those_with_the_smallest_p(
    capsys: pytest.CaptureFixture[str],
):
    labels = [
        a_test("Beds", parcel_name=f"bed{i}", p=None if i == 7 else (100 - i) / 1000, p_holm=None)
        for i in range(60)
    ]
    labels[59]["p_holm"] = 0.03
    labels[58]["p_holm"] = 0.05
    print_tests(settings("Beds"), labels)
    said = capsys.readouterr().out
    shown = [line.split()[1] for line in said.splitlines() if line.startswith("Beds ")]
    assert 5 <= len(shown) < 60
    assert shown == [f"bed{59 - i}" for i in range(len(shown))]
    assert "Beds: 60 labels, 1 with Holm-adjusted p < .05; all of them are in" in said


def test_who_was_left_out_and_who_counts_as_one(capsys: pytest.CaptureFixture[str]):
    print_tests(settings("Arbor"), [a_test("Arbor")])
    assert capsys.readouterr().out.startswith("garden: 3 subjects\n")
    print_tests(settings("Arbor", left_out=("05",), together=True), [a_test("Arbor")])
    assert capsys.readouterr().out.startswith(
        "garden: 3 subjects, 2 of them independent, 1 map left out (sub-05; reasons in"
    )
    print_tests(settings("Arbor", left_out=("05", "04", "05")), [a_test("Arbor")])
    assert "3 subjects, 3 maps left out (sub-04, sub-05; reasons" in capsys.readouterr().out


def test_regions_that_share_voxels_are_named(capsys: pytest.CaptureFixture[str]):
    tests = [a_test("Arbor"), a_test("Brook")]
    for n, more in ((1, ""), (2, "(and of 1 more pair)"), (3, "(and of 2 more pairs)")):
        print_tests(settings("Arbor", "Brook"), tests, overlaps=[("Arbor", "Brook")] * n)
        said = " ".join(capsys.readouterr().out.split())
        assert "search regions of Arbor and Brook " + more in said
        assert ("more pair" in said) == (n > 1)
