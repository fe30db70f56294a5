"""The demo: truth, circular number, held-out estimate, and the refusal; over many seeds too."""

import csv
import json
import re

import numpy as np
import pytest
from click.testing import CliRunner
from scipy import stats
from sequester.nodes.groupmaps import group_map
from sequester.nodes.masks import Cluster, choose, strongest
from sequester.nodes.procedure import Procedure
from sequester.workflows import demo
from sequester.workflows.cli import main

RULE = Cluster(p=0.01, connectivity=18, min_size=5, pick="largest")
SUBJECTS = [f"{i:02d}" for i in range(demo.N_SUBJECTS)]


@pytest.fixture(scope="module")
def shown(tmp_path_factory):
    folder = tmp_path_factory.mktemp("demo") / "lanterns"
    runner = CliRunner(env={"COLUMNS": "80"})
    return folder, runner.invoke(main, ["demo", str(folder), "--quiet"])


def test_demo_prints_truth_circular_and_held_out_side_by_side(shown):
    _, done = shown
    assert done.exit_code == 0, done.output
    for name in demo.PLACES:
        (line,) = re.findall(rf"^{name}  .*$", done.output, re.M)
        biased, there, low_to_high, truth, p = re.fullmatch(
            rf"{name} +(\S+) +(\S+) +(\S+ \[.*?\]) +(\S+) +(.*)", line
        ).groups()
        assert float(there) <= 1 and float(truth) <= 1
        estimate, low, high = map(float, re.findall(r"-?\d+\.\d+", low_to_high))
        assert low < estimate < high and float(biased) > 0 and "." in p
    assert "BIASED" in done.output
    assert "not for diagnosis" in done.output


def test_demo_fits_80_columns_but_for_a_name_at_the_end_of_a_line(shown):
    wide = [line for line in shown[1].output.splitlines() if len(line) > 80]
    assert [line for line in wide if len(line.rpartition(" ")[0]) > 25] == []


def test_demo_refuses_the_circular_twin_with_the_way_and_the_cure(shown):
    _, done = shown
    assert "refused before anything ran: 2 causes, 25 findings" in done.output
    assert "leak: lanterns.Cinder.extract, element 0" in done.output
    assert "-> lanterns.Cinder.group.out_file" in done.output
    assert "cure    choose the region without the tested data" in done.output


def test_circular_study_file_ends_with_exit_code_3_and_writes_nothing(shown):
    folder, _ = shown
    done = CliRunner().invoke(main, ["run", str(folder / "circular.toml"), "--quiet"])
    assert done.exit_code == 3
    assert not (folder / "circular").exists()
    done = CliRunner().invoke(main, ["check", str(folder / "circular.toml"), "--json"])
    assert done.exit_code == 3
    assert json.loads(done.stdout)["exit_code"] == 3


def test_biased_rows_carry_no_interval_no_p_and_no_effect_size(shown):
    folder, _ = shown
    with (folder / "results" / "roi_tests.tsv").open() as stream:
        rows = list(csv.DictReader(stream, delimiter="\t"))
    biased = [row for row in rows if row["biased"] == "true"]
    assert [row["roi"] for row in biased] == ["ArborLook", "BrookLook", "CinderLook"]
    for row in biased:
        for column in ("interval_low", "interval_high", "t", "p", "p_holm", "p_error", "dz"):
            assert row[column] == "n/a"
    honest = [row for row in rows if row["biased"] == "false"]
    assert [row["verdict"] for row in honest] == ["apart"] * 3
    assert all(0 < float(row["p"]) <= 1 for row in honest)


def test_noise_looks_like_a_finding_when_circular_and_not_when_held_out():
    """Cinder holds no signal. Over 200 seeds the circular value is always above zero and a
    naive t-test on it would call it a finding in nearly all; the held-out estimate centres on
    zero and its whole-procedure p rejects at its nominal rate."""
    n = 200
    circular, naive, held_out, rejected = np.empty(n), np.empty(n), np.empty(n), 0
    procedure = Procedure(RULE, on_empty="strongest", k=20)
    for seed in range(n):
        effects, grid = demo.region_effects("Cinder", seed)
        t = group_map(effects)
        mask = choose(t, RULE, grid, len(effects))
        if not mask.any():
            mask = strongest(t, procedure.k)
        values = effects[:, mask].mean(axis=1)
        circular[seed], naive[seed] = values.mean(), stats.ttest_1samp(values, 0).pvalue
        ready = procedure.prepare(effects, SUBJECTS, grid)
        held_out[seed] = ready.outcome().estimate
        rejected += ready.flip_test(n_flips=39, seed=seed).p <= 0.05
    assert circular.min() > 0
    assert (naive < 0.05).mean() > 0.9
    assert abs(held_out.mean()) < 4 * held_out.std(ddof=1) / np.sqrt(n)
    assert abs(rejected / n - 0.05) < 4 * np.sqrt(0.05 * 0.95 / n)


def test_region_where_something_is_there_is_found_held_out():
    effects, grid = demo.region_effects("Arbor", 1)
    test = Procedure(RULE).prepare(effects, SUBJECTS, grid).flip_test(n_flips=199)
    assert test.p == 1 / 200


def test_demo_keeps_out_of_a_folder_of_something_else(tmp_path):
    (tmp_path / "precious.txt").write_text("mine")
    done = CliRunner().invoke(main, ["demo", str(tmp_path), "-q"])
    assert done.exit_code == 2
    assert "demo folder holds something else" in done.stderr
    assert [p.name for p in tmp_path.iterdir()] == ["precious.txt"]
