"""Where a stack has data, a bit each: a large study has no room for bytes."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]


class Presence:
    """Where a stack has data.

    Parameters
    ----------
    n_rows, n_features : int
        So far there is data everywhere.

    Examples
    --------
    >>> there = Presence(3, 2)
    >>> there.put(1, np.array([True, False]))
    >>> there.at(slice(None)).tolist()
    [[True, True], [True, False], [True, True]]
    >>> there.at(slice(0, 1)) is None
    True
    """

    def __init__(self, n_rows: int, n_features: int) -> None:
        self._n_rows = n_rows
        self._bits = np.full((-(-n_rows // 8), n_features), 255, np.uint8)
        self._complete = np.ones(n_features, bool)

    @classmethod
    def of(cls, present: Bools) -> Presence:
        """From (n_rows, n_features) bool."""
        made = cls(*present.shape)
        for row, there in enumerate(present):
            made.put(row, there)
        return made

    def put(self, row: int, present: Bools) -> None:
        """Say where a row has data: (n_features,). So far it has it everywhere."""
        self._bits[row // 8] &= ~((~present).astype(np.uint8) << (7 - row % 8))
        self._complete &= present

    def at(self, features: Ints | slice, rows: slice = slice(None)) -> Bools | None:
        """(n_some_rows, n_some_features) where there is data; None when that is everywhere."""
        # Most features lack nothing: they are told before any bit is unpacked.
        if self._complete[features].all():
            return None
        packed = self._bits[:, features]
        bits = np.empty((8 * len(packed), packed.shape[1]), np.uint8)
        for place in range(8):
            bits[place::8] = packed >> (7 - place) & 1
        present: Bools = bits[: self._n_rows].view(np.bool_)[rows]
        return None if present.all() else present
