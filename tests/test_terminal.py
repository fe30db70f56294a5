"""What the command line shows fits the terminal, and is the same wherever there is none."""

from __future__ import annotations

import pytest
from sequester.workflows.show import paragraph, print_table

ROWS = [
    ["region", "plan", "p"],
    ["Arbor", "leave-one-subject-out", ".005"],
    ["Brook", "k-fold", "-"],
]


@pytest.mark.parametrize(("columns", "widest"), [("40", 40), ("80", 80), ("200", 96)])
def test_a_paragraph_is_as_wide_as_the_terminal_and_never_wider_than_a_page(
    columns, widest, monkeypatch
):
    monkeypatch.setenv("COLUMNS", columns)
    lines = paragraph("a word " * 60).splitlines()
    assert widest - 7 < max(map(len, lines)) <= widest


def test_the_name_of_a_file_is_never_broken(monkeypatch):
    monkeypatch.setenv("COLUMNS", "40")
    name = f"/garden/{'long-' * 20}name.nii"
    assert name in paragraph(f"a word and {name} and more words").splitlines()


def test_a_table_that_is_too_wide_stands_row_by_row(monkeypatch, capsys):
    monkeypatch.setenv("COLUMNS", "35")  # what the table needs
    print_table(ROWS)
    wide = capsys.readouterr().out
    assert max(map(len, wide.splitlines())) <= 35
    assert wide.splitlines()[2] == "Arbor   leave-one-subject-out  .005"
    monkeypatch.setenv("COLUMNS", "34")
    print_table(ROWS)
    assert capsys.readouterr().out == (
        "Arbor\n  plan  leave-one-subject-out\n  p     .005\n\nBrook\n  plan  k-fold\n"
    )
