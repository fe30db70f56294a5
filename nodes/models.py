"""What a procedure compares, as a plan declares it: two groups, or maps with a score.

Without a model a procedure compares one map per subject with zero, and signs are flipped.
`Groups` compares one group's maps with another's, `Score` asks which maps go with a score; it
is exchanged whose group or score is whose. Keyed by label, not by row.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
import numpy.typing as npt

from .compared import Comparison, OneSample, OneScore, TwoGroups
from .errors import InputError
from .folds import Fold

Floats = npt.NDArray[np.floating]
Scores = tuple[tuple[str, float], ...]
Covariates = tuple[tuple[str, Scores], ...]
Labelled = tuple[str, float] | tuple[str, str]
Value = TypeVar("Value")


@dataclass(frozen=True)
class Groups:
    """Choose where the first group's maps are higher; test the difference of the groups.

    Maps: the pooled two-sample t (or the difference). Statistic: the difference of the groups'
    held-out means over Welch's standard error. One map per label.

    Parameters
    ----------
    of : tuple of (label, group)
        Keyed by label, not by row; labels that no map has do not matter.
    first, second : str
        Every map belongs to one of the two. The tail "negative" chooses where the first is lower.
    covariates : tuple of (name, ((label, value), ...))
        Nuisance in every fold's model and in the statistic; the test is then Freedman & Lane's.
    name : str
        The column of the study table that says who is in which group: the guard has to know.

    Examples
    --------
    >>> groups = Groups(tuple(zip("abcdef", ["pond"] * 3 + ["hill"] * 3)), "pond", "hill")
    >>> made = groups.comparison(list("abcdef"))
    >>> made.estimate(np.array([3.0, 4.0, 5.0, 1.0, 2.0, 3.0]), made.observed())
    2.0
    """

    of: tuple[tuple[str, str], ...]
    first: str
    second: str
    covariates: Covariates = ()
    name: str = "group"

    def __post_init__(self) -> None:
        _once("group", self.of)
        _covariates(self.covariates)
        if self.first == self.second:
            raise InputError("two groups of one name", got=self.first)

    def comparison(self, people: Sequence[str]) -> Comparison:
        """The model on these people (sorted).

        Raises
        ------
        InputError
            When a person has no group or another one, or a group nobody.
        """
        group = _of_each(people, self.of, "group")
        other = [person for person in people if group[person] not in (self.first, self.second)]
        if other:
            raise InputError(
                "subjects of neither group",
                where=", ".join(other[:5]),
                expected=f"{self.first} or {self.second}",
                got=group[other[0]],
                remedy="leave their maps out",
            )
        scores = np.array([float(group[person] == self.first) for person in people])
        if len(set(scores.tolist())) < 2:
            raise InputError(
                "a group without subjects",
                where=self.second if scores[0] else self.first,
                remedy="two groups are compared: give the maps of both",
            )
        return TwoGroups(people, scores, _values_of(people, self.covariates))

    def check(self, people: Sequence[str], folds: Sequence[Fold]) -> None:
        """Refuse folds whose selection side lacks a group, or is too small for a t.

        Raises
        ------
        InputError
        """
        group = dict(self.of)
        for fold in folds:
            there = {group[people[row]] for row in fold.selection}
            if len(there) < 2:
                raise InputError(
                    "a selection side without both groups",
                    where=f"fold {fold.name}",
                    expected=f"{self.first} and {self.second}",
                    got=", ".join(there) or "nobody",
                    remedy="use folds that keep both groups on both sides (KFold with strata)",
                )
            _enough(fold)

    def describe(self) -> str:
        """What the map shows, in words."""
        return f"{self.first} minus {self.second}{_given(self.covariates)}"

    def score_columns(self, labels: Sequence[str]) -> list[tuple[str, Sequence[Labelled]]]:
        """What the model was told of whom: the groups' column, and the covariates."""
        return [(self.name, self.of), *self.covariates]

    def counts(self, people: Sequence[str]) -> tuple[int, int]:
        """How many of the people are in the first group and in the second."""
        group = dict(self.of)
        first = sum(group[person] == self.first for person in people)
        return first, len(people) - first


@dataclass(frozen=True)
class Score:
    """Choose where maps go with a score; test the correlation of held-out values with it.

    Maps: t of the correlation (or the slope). Statistic: t of the correlation of held-out
    values with the scores; with covariates the partial correlation. One map per label.

    Parameters
    ----------
    of : tuple of (label, value)
        Keyed by label, not by row; labels that no map has do not matter.
    covariates : tuple of (name, ((label, value), ...))
        Nuisance in every fold's model and in the statistic; the test is then Freedman & Lane's.
    name : str
        What the score is called in results: the column of the study table that it is from, by
        which the guard knows whose score has chosen.

    Examples
    --------
    >>> made = Score(tuple(zip("abcd", [1.0, 2.0, 3.0, 4.0]))).comparison(list("abcd"))
    >>> round(made.estimate(np.array([2.0, 1.0, 4.0, 3.0]), made.observed()), 3)
    0.6
    """

    of: Scores
    covariates: Covariates = ()
    name: str = "score"

    def __post_init__(self) -> None:
        _once("score", self.of)
        _finite(self.name, self.of)
        _covariates(self.covariates)

    def comparison(self, people: Sequence[str]) -> Comparison:
        """The model on these people (sorted).

        Raises
        ------
        InputError
            When a person has no score, or all have the same.
        """
        score = _of_each(people, self.of, "score")
        scores = np.array([score[person] for person in people], dtype=float)
        if len(set(scores.tolist())) < 2:
            raise InputError(
                "a score without variance",
                where=self.name,
                got=f"{scores[0]:g} for everybody" if len(scores) else "nobody",
                remedy="nothing can go with a score that is the same for all",
            )
        return OneScore(people, scores, _values_of(people, self.covariates))

    def check(self, people: Sequence[str], folds: Sequence[Fold]) -> None:
        """Refuse folds whose selection side has one score only, or is too small for a t.

        Raises
        ------
        InputError
        """
        score = dict(self.of)
        for fold in folds:
            if len({score[people[row]] for row in fold.selection}) < 2:
                raise InputError(
                    "a selection side on which the score does not vary", where=f"fold {fold.name}"
                )
            _enough(fold)

    def describe(self) -> str:
        """What the map shows, in words."""
        return f"the correlation with {self.name}{_given(self.covariates)}"

    def score_columns(self, labels: Sequence[str]) -> list[tuple[str, Sequence[Labelled]]]:
        """What the model was told of whom: the score, and the covariates."""
        return [(self.name, self.of), *self.covariates]


Model = Groups | Score


def compared(model: Model | None, labels: Sequence[str], folds: Sequence[Fold]) -> Comparison:
    """The model on one stack.

    Parameters
    ----------
    model : Groups, Score or None
        None: one sample.
    labels : sequence of str
        Of the rows, sorted.
    folds : sequence of Fold
        Over these rows.

    Raises
    ------
    InputError
        When rows share a label, or the model does not fit labels and folds.
    """
    people = sorted(set(labels))
    if model is None:
        return OneSample(people)
    if len(people) < len(labels):
        twice = [label for label in people if list(labels).count(label) > 1]
        raise InputError(
            "several maps of one subject",
            where=", ".join(twice[:5]),
            expected="one map per label where scores are exchanged",
            got=f"{len(labels)} maps of {len(people)} labels",
            remedy="average each subject's maps first (SubjectMaps does)",
        )
    made = model.comparison(people)
    model.check(people, folds)
    return made


def _given(covariates: Covariates) -> str:
    return f", given {', '.join(name for name, _ in covariates)}" if covariates else ""


def _once(what: str, of: Sequence[tuple[str, object]]) -> None:
    labels = [label for label, _ in of]
    twice = sorted({label for label in labels if labels.count(label) > 1})
    if twice:
        raise InputError(f"a subject with more than one {what}", where=", ".join(twice[:5]))


def _finite(name: str, of: Scores) -> None:
    for label, value in of:
        if not np.isfinite(value):
            raise InputError(
                "a score that is not a finite number",
                where=f"{name}, {label}",
                got=str(value),
                remedy="leave the subject's map out: what is not known cannot enter the model",
            )


def _covariates(covariates: Covariates) -> None:
    _once("covariate of one name", covariates)
    for name, of in covariates:
        _once(name, of)
        _finite(name, of)


def _of_each(people: Sequence[str], of: Sequence[tuple[str, Value]], what: str) -> dict[str, Value]:
    known = dict(of)
    lost = [person for person in people if person not in known]
    if lost:
        raise InputError(
            f"subjects without a {what}",
            where=", ".join(lost[:5]),
            expected=f"a {what} for each label of the maps",
            remedy="add it to the model, or leave the maps out",
        )
    return known


def _values_of(people: Sequence[str], covariates: Covariates) -> dict[str, Floats]:
    made = {}
    for name, of in covariates:
        known = _of_each(people, of, f"value of {name}")
        made[name] = np.array([known[person] for person in people], dtype=float)
    return made


def _enough(fold: Fold) -> None:
    if len(fold.selection) < 3:
        raise InputError(
            "too few subjects for a t of two parameters",
            where=f"fold {fold.name}",
            expected="at least 3 on the side that chooses",
            got=str(len(fold.selection)),
            remedy="more subjects, or folds that hold out fewer",
        )
