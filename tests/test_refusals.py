"""Ordinary pipelines are cleared, subtly wrong ones refused: the cases behind docs/refusals.md.

`python tests/test_refusals.py` writes docs/refusals.md anew from the gallery.
"""

from __future__ import annotations

import contextlib
import logging
import os
import tempfile
from pathlib import Path
from typing import Any

import gallery_studies
import pytest
from engines_under_test import ENGINES, arguments
from gallery import RIGHT, WRONG, Case
from gallery_studies import StudyCase
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.record import record_of

PAGE = Path(__file__).parent.parent / "docs" / "refusals.md"
LOGGERS = ("nipype.workflow", "nipype.utils", "nipype.interface")
ON_EVERY_ENGINE = [  # a MapNode with contracts of foreign nodes; and some that are refused
    *(case for case in RIGHT if case.title == "A lab's own extraction and test, by contract"),
    *WRONG[::6],
]


pytestmark = pytest.mark.usefixtures("quiet_engine")


def judged(case: Case, folder: Path, **how: Any) -> tuple[GuardPlugin, str]:
    """The guard after the pipeline, and what is said when that is refused."""
    garden = case.garden(folder / "garden")
    graph, guard = case.build(garden), GuardPlugin(garden.study, **how)
    try:
        graph.run(plugin=guard)
    except GuardRefused as refused:
        return guard, str(refused)
    return guard, ""


def named(cases: list[Case] | list[StudyCase]) -> list[Any]:
    return [pytest.param(case, id=case.title) for case in cases]


def test_the_gallery_is_large_enough_and_no_title_comes_twice():
    assert len(RIGHT) >= 25
    assert len(WRONG) >= 25
    studies = (*gallery_studies.RIGHT, *gallery_studies.WRONG)
    titles = [case.title for case in (*RIGHT, *WRONG, *studies)]
    assert len(set(titles)) == len(titles)


@pytest.mark.parametrize("case", named(RIGHT))
def test_an_ordinary_pipeline_is_cleared(case: Case, tmp_path: Path):
    guard, said = judged(case, tmp_path, dry=not case.runs)
    assert said == ""
    assert guard.findings


@pytest.mark.parametrize("case", named(WRONG))
def test_a_subtly_wrong_pipeline_is_refused(case: Case, tmp_path: Path):
    _, said = judged(case, tmp_path)
    assert said.startswith("refused before anything ran")
    assert case.said in " ".join(said.split())
    assert not Path("work").exists()


@pytest.mark.parametrize("case", named(gallery_studies.RIGHT + gallery_studies.WRONG))
def test_a_study_that_was_run_before(case: StudyCase, tmp_path: Path):
    said = case.judged(tmp_path)
    assert bool(said) is bool(case.said)
    assert case.said in " ".join(said.split())


def test_a_restart_on_a_warm_cache_is_judged_alike(tmp_path: Path):
    (case,) = (case for case in RIGHT if case.title == "Iterated over gardeners and joined")
    first, said = judged(case, tmp_path)
    again, said_again = judged(case, tmp_path)
    assert said == said_again == ""
    assert again.findings == first.findings


@pytest.fixture(scope="module")
def plain(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """What the guard says with its usual engine: findings and record, or the refusal."""
    return {case.title: said_of(case, tmp_path_factory.mktemp("plain")) for case in ON_EVERY_ENGINE}


def said_of(case: Case, folder: Path, **how: Any) -> Any:
    with contextlib.chdir(folder):
        guard, said = judged(case, folder, **how)
    return said or (guard.findings, record_of(guard))


@pytest.mark.parametrize("engine", ENGINES)
def test_every_engine_says_the_same(
    engine: str, request: pytest.FixtureRequest, tmp_path: Path, plain: dict[str, Any]
):
    how = arguments(engine, request)
    # SLURM starts a Python for each of the six gardeners; contracts on it are in test_cluster.py.
    cases = [case for case in ON_EVERY_ENGINE if engine != "SLURM" or not case.runs]
    for number, case in enumerate(cases):
        folder = tmp_path / str(number)  # the cluster's commands stumble over blanks in a path
        folder.mkdir()
        assert said_of(case, folder, **how) == plain[case.title]


# -- the page ---------------------------------------------------------------------------------

INTRO = """\
# What the guard clears, and what it refuses

Small pipelines of six gardeners: first ordinary ones that are right and are cleared, then ones
that are subtly wrong, each with what the guard says. All of them are judged before anything
runs. Each is a few nodes in `tests/gallery.py`, where "a lab's own node" is a function that the
guard does not know; the last ones are studies that were run once, in `tests/gallery_studies.py`.

## What is compared

- **Maps.** What a mask was chosen on is compared with what it is read on: only data of the tested
  measurement count (`bold` against `bold`; a template of everybody's `T1w` is no leak). A unit
  whose `run` is left open overlaps every run of its subject.
- **People.** Subjects who share an `exchange` value count as one. A mask chosen on other data of
  several subjects, the tested ones among them, supports a claim about these subjects only, and
  only where that is declared.
- **Scores.** Every further column of the study table is data too: `sub-01`'s `age` is a unit. A
  mask chosen by a score, by group labels or with covariates derives from those of the subjects
  who chose. Where values are compared with a score, the mask of a value must not derive from the
  same subject's score of that column, whether or not the maps were held out. Masks that derive
  from the scores of the others are cross-fitted: FlipTest, which exchanges the scores through the
  whole procedure, is valid for them, and a plain correlation is not.
- **Which column a list is.** `Score(..., name="age")`, `Groups(..., name="bank")` and the
  covariates name theirs, and the values must be those of the column. Centred or standardised
  values hold everybody's score. A list that is typed into a foreign node is recognised by its
  values. A list with one number for each of several people that no column holds is an unknown
  choice; add it to the study table, or declare an origin of its name.
- **Who takes part.** `KeepSubjects` keeps or leaves out by a measure, and what the measure derives
  from has chosen like what chose the mask. A motion summary is geometry when a contract of the
  node that makes it says so. A fixed list, with reasons, is the study table's `exclude_reason`.
  The guard cannot see a choice of subjects inside a foreign node.
- **Values.** A statistic takes values marked biased never, cross-fitted values only when it is
  valid for them, and several values of one person only when it averages them first.
- **Lost precision.** Where elements could not be told apart, everything is taken to derive from
  everything. A refusal then names the node and what would tell them apart (`lost`).
"""


def page() -> str:
    """docs/refusals.md, from the gallery."""
    parts = [INTRO, "\n## Cleared\n\n| pipeline | what it does |\n| --- | --- |\n"]
    parts += [f"| {c.title} | {c.story} |\n" for c in (*RIGHT, *gallery_studies.RIGHT)]
    parts.append("\n## Refused\n")
    home = Path.cwd()
    for case in (*WRONG, *gallery_studies.WRONG):
        with tempfile.TemporaryDirectory() as name:
            os.chdir(name)
            folder = Path(name).resolve()
            try:
                if isinstance(case, StudyCase):
                    said = case.judged(folder)
                else:
                    _, said = judged(case, folder, dry=True)
            finally:
                os.chdir(home)
        parts.append(f"\n### {case.title}\n\n{case.story}\n\n```\n{said}\n```\n")
    return "".join(parts)


def test_the_page_shows_these_cases():
    assert PAGE.read_text(encoding="utf-8") == page(), (
        "write it anew: python tests/test_refusals.py"
    )


if __name__ == "__main__":
    os.environ["NO_ET"] = "1"
    for logger in LOGGERS:
        logging.getLogger(logger).setLevel(logging.CRITICAL + 1)
    PAGE.write_text(page(), encoding="utf-8")
