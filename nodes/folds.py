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
        rows: dict[str, list[int]] = {}
        for row, label in enumerate(labels):
            rows.setdefault(label, []).append(row)
        made = []
        for name, out in self._held_out(sorted(rows)):
            held = sorted(row for label in out for row in rows[label])
            away = set(held)
            kept = tuple(row for row in range(len(labels)) if row not in away)
            made.append(Fold(name, tuple(held), kept))
        return made


@dataclass(frozen=True)
class LeaveOneOut(Scheme):
    """Each label is held out once.

    Examples
    --------
    >>> [fold.held_out for fold in LeaveOneOut().folds(["b", "a", "a", "c"])]
    [(1, 2), (0,), (3,)]
    """

    def _held_out(self, labels: list[str]) -> list[tuple[str, tuple[str, ...]]]:
        _need(labels, 3, "leave-one-subject-out")
        return [(label, (label,)) for label in labels]


@dataclass(frozen=True)
class KFold(Scheme):
    """k folds of nearly equal size, dealt in an order fixed by the seed and the labels.

    Parameters
    ----------
    k : int
        Number of folds.
    seed : int
        The same seed and labels give the same folds, whatever the order of the rows.

    Examples
    --------
    >>> folds = KFold(k=2, seed=1).folds(list("abcd"))
    >>> sorted(i for fold in folds for i in fold.held_out)
    [0, 1, 2, 3]
    """

    k: int
    seed: int = 0

    def _held_out(self, labels: list[str]) -> list[tuple[str, tuple[str, ...]]]:
        if self.k < 2:
            raise InputError("too few folds", expected="k >= 2", got=str(self.k))
        _need(labels, self.k, f"{self.k} folds")
        dealt = sorted(labels, key=lambda label: _draw(self.seed, label))
        return [(f"{i + 1}of{self.k}", tuple(dealt[i :: self.k])) for i in range(self.k)]


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
