"""What --json prints is JSON, to any reader: no bare NaN, whatever was found."""

import json

import numpy as np
import pytest
from click.testing import CliRunner
from planting import a_grid
from sequester.nodes.images import write_map
from sequester.workflows.cli import main

SHAPE = (6, 6, 5)
STUDY = """[study]
name = "moss"
table = "table.tsv"
[[roi]]
name = "Look"
plan = "exploratory"
rule = { kind = "threshold", height = 60 }
[[roi]]
name = "Bed"
plan = "a-priori"
region = { mask = "bed.nii.gz", origin = "drawn beforehand" }
[[roi]]
name = "Moss"
plan = "k-fold"
rule = { kind = "threshold", height = 60 }
flips = 19
"""
SCRIPT = "from nipype import Workflow\n\n\ndef made():\n    return Workflow('moss')\n"


@pytest.fixture(scope="module")
def moss(tmp_path_factory):
    """Six subjects; in two of the regions no rule finds anything."""
    folder, rng = tmp_path_factory.mktemp("moss"), np.random.default_rng(8)
    lines = ["path\tsub\tsuffix"]
    for sub in ("01", "02", "03", "04", "05", "06"):
        write_map(folder / f"sub-{sub}.nii", rng.normal(0.5, 1, SHAPE), a_grid(SHAPE))
        lines.append(f"sub-{sub}.nii\t{sub}\tbold")
    bed = np.zeros(SHAPE, np.uint8)
    bed[:3, :3, :2] = 1
    write_map(folder / "bed.nii.gz", bed, a_grid(SHAPE))
    (folder / "table.tsv").write_text("\n".join(lines) + "\n")
    (folder / "STUDY.toml").write_text(STUDY)
    (folder / "graph.py").write_text(SCRIPT)
    return folder


def not_json(word):
    raise AssertionError(f"{word} is no JSON")


COMMANDS = (
    "table .",
    "check STUDY.toml",
    "check graph.py:made --study table.tsv",
    "declare --study STUDY.toml",
    "run STUDY.toml",
    "report results",
    "verify STUDY.toml",
    "verify STUDY.toml --deposited ffffffffffffffff",
    "contour bed.nii.gz STUDY.toml",
    "power STUDY.toml --effect 0.5 --sets 2 --flips 9 --roi Bed",
    "power --from results",
    "power --test paired --effect 0.5 --n 20",
    "power --inflation",
    "calibrate STUDY.toml --sets 2 --flips 9",
)


def test_every_command_prints_json(moss, monkeypatch):
    monkeypatch.chdir(moss)
    for command in COMMANDS:
        done = CliRunner().invoke(main, [*command.split(), "--json"])
        assert isinstance(done.exception, SystemExit | None), (command, done.exception)
        try:
            told = json.loads(done.stdout, parse_constant=not_json)
        except json.JSONDecodeError as error:
            raise AssertionError(f"{command}: {done.output}") from error
        assert isinstance(told, dict), command
        if command.startswith("run"):
            assert {row["roi"]: row["estimate"] for row in told["tests"]}["Look"] is None
