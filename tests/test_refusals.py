"""Ordinary pipelines are cleared, subtly wrong ones refused: the cases behind docs/refusals.md.

`python tests/test_refusals.py` writes docs/refusals.md anew from the gallery.

``SEQUESTER_GALLERY=all`` runs every case on every engine, not a sample of them.
"""

from __future__ import annotations

import contextlib
import logging
import os
import re
import tempfile
from collections.abc import Sequence
from functools import cache
from pathlib import Path
from typing import Any

import gallery_studies
import pytest
from engines_under_test import ENGINES, arguments
from gallery import HIDDEN, RIGHT, WRONG, Case
from gallery_studies import StudyCase
from running import LOGGERS
from sequester.workflows.guard import GuardPlugin, GuardRefused
from sequester.workflows.record import record_of

PAGE = Path(__file__).parent.parent / "docs" / "refusals.md"
STUDIES = (*gallery_studies.RIGHT, *gallery_studies.WRONG)
ALL = os.environ.get("SEQUESTER_GALLERY") == "all"
ON_EVERY_ENGINE = [*RIGHT, *WRONG, *HIDDEN] if ALL else [RIGHT[0], *WRONG[::9], HIDDEN[0]]


pytestmark = pytest.mark.usefixtures("quiet_engine")


def judged(case: Case, folder: Path, **how: Any) -> tuple[GuardPlugin, str]:
    """The guard after the pipeline, and what is said when that is refused."""
    guard, said, _ = ran(case, folder, **how)
    return guard, said


def ran(case: Case, folder: Path, **how: Any) -> tuple[GuardPlugin, str, dict[str, str]]:
    """The same, and the outputs of every node, where that is not refused."""
    garden = case.garden(folder / "garden")
    graph, guard = case.build(garden), GuardPlugin(garden.study, **how)
    try:
        done = graph.run(plugin=guard)
    except GuardRefused as refused:
        return guard, str(refused), {}
    if guard.dry:
        return guard, "", {}
    made = {}
    for node in done.nodes():
        outputs = node.result.outputs
        named = {name: getattr(outputs, name) for name, _ in outputs.items()}
        made[node.fullname] = repr(named)
    return guard, "", made


def named(cases: Sequence[Case | StudyCase]) -> list[Any]:
    return [pytest.param(case, id=case.title) for case in cases]


def test_the_gallery_is_large_enough_and_no_title_comes_twice():
    assert len(RIGHT) >= 30
    assert len(WRONG) >= 40
    titles = [case.title for case in (*RIGHT, *WRONG, *HIDDEN, *STUDIES)]
    assert len(set(titles)) == len(titles)


@pytest.mark.parametrize("case", named(RIGHT))
def test_an_ordinary_pipeline_is_cleared(case: Case, tmp_path: Path):
    guard, said = judged(case, tmp_path)
    assert said == ""
    assert guard.findings


@pytest.mark.parametrize("case", named(WRONG))
def test_a_subtly_wrong_pipeline_is_refused(case: Case, tmp_path: Path):
    _, said = judged(case, tmp_path)
    assert said.startswith("refused before anything ran")
    assert case.said in " ".join(said.split())
    assert not Path("work").exists()


@pytest.mark.parametrize("case", named(HIDDEN))
def test_what_only_the_run_shows_is_refused(case: Case, tmp_path: Path):
    _, said = judged(case, tmp_path)
    assert said.startswith("refused while running")
    assert case.said in " ".join(said.split())
    assert not Path("work/w/test").exists()


@pytest.mark.parametrize("case", named(STUDIES))
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


@cache
def told_by_linear(case: Case | StudyCase) -> Any:
    """What is compared with every engine's."""
    with tempfile.TemporaryDirectory() as folder:
        return told(case, Path(folder).resolve(), engine="Linear")


def told(case: Case | StudyCase, folder: Path, **how: Any) -> Any:
    """What is said, the record, and what every node gave; of a study, its whole results."""
    with contextlib.chdir(folder):
        if isinstance(case, StudyCase):
            said, results = case.judged(folder, **how), folder / "garden" / "results"
            return said, {p.relative_to(results): p.read_bytes() for p in results.rglob("*.*")}
        guard, said, outputs = ran(case, folder, **how)
        assert said.startswith("refused before") is not Path("work").exists()
    # A folder of the engine's has the values of iterables in its name.
    names = re.compile("|".join(re.escape(str(folder).replace("/", sign)) for sign in ("/", "..")))
    places = {name: names.sub("", made) for name, made in outputs.items()}
    return names.sub("", said).split(), record_of(guard), places


@pytest.mark.parametrize("case", named([*ON_EVERY_ENGINE, *STUDIES * ALL]))
@pytest.mark.parametrize("engine", ENGINES)
def test_every_engine_says_the_same(
    engine: str, case: Case | StudyCase, request: pytest.FixtureRequest, tmp_path: Path
):
    assert told(case, tmp_path, **arguments(engine, request)) == told_by_linear(case)


# -- the page ---------------------------------------------------------------------------------

INTRO = """\
# What the guard clears, and what it refuses

Small pipelines of six gardeners: first ordinary ones that are right and are cleared, then ones
that are subtly wrong, each with what the guard says. Most are refused before anything runs; a few
show what they are only while they run. Each is a few nodes in `tests/gallery.py`, where "a lab's
own node" is a function that the guard does not know; some are studies that were run once, in
`tests/gallery_studies.py`. The long run of the tests takes all of them, {n_right} right and
{n_wrong} wrong, through Linear, MultiProc, a SLURM and an IPython cluster, and compares verdicts,
records and values.

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
  In a study file `select` by a further column of the table is such a choice too
  ([study-file.md](study-file.md)).
  The guard cannot see a choice of subjects inside a foreign node.
- **Values.** A statistic takes values marked biased never, cross-fitted values only when it is
  valid for them, and several values of one person only when it averages them first.
- **Lost precision.** Where elements could not be told apart, everything is taken to derive from
  everything. A refusal then names the node and what would tell them apart (`lost`).
"""


def page() -> str:
    """docs/refusals.md, from the gallery."""
    n_right, n_wrong = (
        sum(bool(case.said) is wrong for case in (*RIGHT, *WRONG, *HIDDEN, *STUDIES))
        for wrong in (False, True)
    )
    intro = INTRO.format(n_right=n_right, n_wrong=n_wrong)
    parts = [intro, "\n## Cleared\n\n| pipeline | what it does |\n| --- | --- |\n"]
    parts += [f"| {c.title} | {c.story} |\n" for c in (*RIGHT, *gallery_studies.RIGHT)]
    for title, cases in (
        ("Refused before anything runs", [*WRONG, *gallery_studies.WRONG]),
        ("Refused while running", HIDDEN),
    ):
        parts.append(f"\n## {title}\n")
        parts += [f"\n### {c.title}\n\n{c.story}\n\n```\n{_shown(c)}\n```\n" for c in cases]
    return "".join(parts)


def _shown(case: Case | StudyCase) -> str:
    """What is said, without the folder; that has the same length each time, as lines break."""
    with tempfile.TemporaryDirectory(dir="/tmp") as name, contextlib.chdir(name):
        folder = Path(name).resolve()
        said = case.judged(folder) if isinstance(case, StudyCase) else judged(case, folder)[1]
    return said.replace(f"{folder}/", "")


def test_the_page_shows_these_cases():
    assert PAGE.read_text(encoding="utf-8") == page(), (
        "write it anew: python tests/test_refusals.py"
    )


def test_what_is_said_fits_80_columns():
    lines = "".join(PAGE.read_text(encoding="utf-8").split("```")[1::2]).splitlines()
    assert len(lines) > 500
    # A file's name is never broken.
    assert [line for line in lines if len(line) > 80 and " " in line.split(maxsplit=1)[1]] == []


if __name__ == "__main__":
    os.environ["NO_ET"] = "1"
    for logger in LOGGERS:
        logging.getLogger(logger).setLevel(logging.CRITICAL + 1)
    PAGE.write_text(page(), encoding="utf-8")
