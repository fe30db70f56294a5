"""Fold schemes: who is held out in each fold.

A scheme says only who is held out; the selection side is always the complement, computed in
one place. Labels name the people that count as one (see the study table's ``exchange``
column): rows that share a label are held out together.
"""

from __future__ import annotations

import hashlib
from abc import ABC, abstractmethod
from collections.abc import Sequence
from dataclasses import dataclass

from .errors import InputError


@dataclass(frozen=True)
class Fold:
    """One selection/held-out pair, as row numbers.

    Parameters
    ----------
    name : str
        What the fold is called in file names and tables.
    held_out, selection : tuple of int
        Row numbers; disjoint, and together all rows.
    """

    name: str
    held_out: tuple[int, ...]
    selection: tuple[int, ...]


@dataclass(frozen=True)
class Scheme(ABC):
    """Base of the fold schemes; a scheme supplies the held-out labels of each fold."""

    @property
    def dealt_by(self) -> tuple[tuple[str, str], ...]:
        """What was looked at of each label to deal the folds, as (label, what it says)."""
        return ()

    @abstractmethod
    def _held_out(self, labels: list[str]) -> list[tuple[str, tuple[str, ...]]]:
        """The name of each fold and the labels it holds out, given the sorted labels."""

    def folds(self, labels: Sequence[str]) -> list[Fold]:
        """The folds over rows with these labels.

        Parameters
        ----------
        labels : sequence of str
            One label per row; rows that share a label stay together.

        Returns
        -------
        list of Fold

        Raises
        ------
        InputError
            When the labels do not suffice for the scheme.
        """
        rows = set(range(len(labels)))
        return [
            Fold(name, held, tuple(sorted(rows.difference(held))))
            for name, held in self.held_out(labels)
        ]

    def held_out(self, labels: Sequence[str]) -> list[tuple[str, tuple[int, ...]]]:
        """The name of each fold and the rows it holds out: `folds` without their selections.

        Parameters
        ----------
        labels : sequence of str
            One label per row.

        Raises
        ------
        InputError
            When the labels do not suffice for the scheme.

        Examples
        --------
        >>> LeaveOneOut().held_out(["b", "a", "a", "c"])
        [('a', (1, 2)), ('b', (0,)), ('c', (3,))]
        """
        rows: dict[str, list[int]] = {}
        for row, label in enumerate(labels):
            rows.setdefault(label, []).append(row)
        return [
            (name, tuple(sorted(row for label in out for row in rows[label])))
            for name, out in self._held_out(sorted(rows))
        ]


@dataclass(frozen=True)
class LeaveOneOut(Scheme):
    """Each label is held out once.

    Parameters
    ----------
    least : int
        How many labels there must be: 3 subjects (two are left for a t), 2 runs for a mean.

    Examples
    --------
    >>> [fold.held_out for fold in LeaveOneOut().folds(["b", "a", "a", "c"])]
    [(1, 2), (0,), (3,)]
    """

    least: int = 3

    def _held_out(self, labels: list[str]) -> list[tuple[str, tuple[str, ...]]]:
        _need(
            labels, self.least, "leave-one-subject-out" if self.least > 2 else "leave-one-run-out"
        )
        return [(label, (label,)) for label in labels]


@dataclass(frozen=True)
class KFold(Scheme):
    """k folds of nearly equal size, dealt in an order fixed by the seed and the labels.

    With k = 2 this is the split half, used in both directions.

    Parameters
    ----------
    k : int
        Number of folds.
    seed : int
        The same seed and labels give the same folds, whatever the order of the rows.
    strata : tuple of (label, stratum)
        Labels of one stratum are spread evenly over the folds; a label that is not named
        belongs to the stratum "".

    Examples
    --------
    >>> folds = KFold(k=2, seed=1).folds(list("abcd"))
    >>> sorted(i for fold in folds for i in fold.held_out)
    [0, 1, 2, 3]
    """

    k: int
    seed: int = 0
    strata: tuple[tuple[str, str], ...] = ()

    @property
    def dealt_by(self) -> tuple[tuple[str, str], ...]:
        """The strata."""
        return self.strata

    def _held_out(self, labels: list[str]) -> list[tuple[str, tuple[str, ...]]]:
        if self.k < 2:
            raise InputError("too few folds", expected="k >= 2", got=str(self.k))
        _need(labels, self.k, f"{self.k} folds")
        stratum = dict(self.strata)
        dealt = sorted(labels, key=lambda label: (stratum.get(label, ""), _draw(self.seed, label)))
        return [(f"{i + 1}of{self.k}", tuple(dealt[i :: self.k])) for i in range(self.k)]


@dataclass(frozen=True)
class Given(Scheme):
    """Folds named by the user: who is held out in which.

    Parameters
    ----------
    fold_of : tuple of (label, fold name)
        Every label exactly once.

    Examples
    --------
    >>> scheme = Given((("a", "x"), ("b", "y"), ("c", "x")))
    >>> [(fold.name, fold.held_out) for fold in scheme.folds(["a", "b", "c"])]
    [('x', (0, 2)), ('y', (1,))]
    """

    fold_of: tuple[tuple[str, str], ...]

    @property
    def dealt_by(self) -> tuple[tuple[str, str], ...]:
        """The folds themselves."""
        return self.fold_of

    def _held_out(self, labels: list[str]) -> list[tuple[str, tuple[str, ...]]]:
        of = dict(self.fold_of)
        lost = [label for label in labels if not of.get(label)]
        if lost or len(of) != len(self.fold_of):
            raise InputError(
                "folds do not name every subject once",
                got=f"no fold for {', '.join(lost)}" if lost else "a subject in two folds",
                remedy="fill the fold column of the study table, the same on all rows of a subject",
            )
        names = sorted({of[label] for label in labels})
        if len(names) < 2:
            raise InputError("a single fold", expected="two or more", got=repr(names[0]))
        return [(name, tuple(label for label in labels if of[label] == name)) for name in names]


@dataclass(frozen=True)
class Halves(Scheme):
    """Two folds over ordered labels (runs): each half is held out once.

    Labels are ordered by number where they are numbers. With an odd count the first half, or
    the odd positions, hold one more; a missing run moves those behind it up by one position.

    Parameters
    ----------
    how : {"odd-even", "first-second"}

    Examples
    --------
    >>> [fold.held_out for fold in Halves("odd-even").folds(["1", "2", "10"])]
    [(0, 2), (1,)]
    >>> [fold.held_out for fold in Halves("first-second").folds(["1", "2", "10"])]
    [(0, 1), (2,)]
    """

    how: str = "odd-even"

    def __post_init__(self) -> None:
        if self.how not in ("odd-even", "first-second"):
            raise InputError(
                "unknown way to halve", expected="odd-even or first-second", got=repr(self.how)
            )

    def _held_out(self, labels: list[str]) -> list[tuple[str, tuple[str, ...]]]:
        _need(labels, 2, "two halves")
        ordered = sorted(labels, key=natural_key)
        if self.how == "odd-even":
            return [("odd", tuple(ordered[::2])), ("even", tuple(ordered[1::2]))]
        middle = (len(ordered) + 1) // 2
        return [("first", tuple(ordered[:middle])), ("second", tuple(ordered[middle:]))]


def natural_key(label: str) -> tuple[int, int, str]:
    """Sorts numbers by value, before other labels.

    Examples
    --------
    >>> sorted(["10", "2", "b"], key=natural_key)
    ['2', '10', 'b']
    """
    return (0, int(label), label) if label.isdecimal() else (1, 0, label)


def _draw(seed: int, label: str) -> bytes:
    return hashlib.sha256(f"{seed}\0{label}".encode()).digest()


def _need(labels: list[str], least: int, scheme: str) -> None:
    if len(labels) < least:
        raise InputError(
            f"too few subjects for {scheme}",
            expected=f"at least {least}",
            got=f"{len(labels)} ({', '.join(labels) or 'none'})",
            remedy="check the study table and the rows it leaves out",
        )
