"""A stack that is not held: so many features of all its rows at a time.

Features that lie together in whatever holds the rows are read together. Who goes through all
features, or many, does so in `batches`; anything else works too, and is slow.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import Protocol

import numpy as np
import numpy.typing as npt

from .presence import Presence

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# Bytes held at a time.
HELD = 2**26


class Source(Protocol):
    """What has the rows of a stack, such as files."""

    shape: tuple[int, int]
    dtype: np.dtype[np.floating]
    places: Ints
    """(n_features,): features that are near in number here are quick to read together."""

    def in_order(self, rows: Ints) -> Source:
        """The same rows in another order."""

    def read(self, features: Ints, out: Floats | None = None) -> Floats:
        """(n_rows, n_some_features), into `out` when that is given."""


class Pages:
    """A stack by some features of all rows at a time, which are held until others are.

    Parameters
    ----------
    source : Source
    ready : callable
        Makes some features of all rows ready in place, and says where they have data (None:
        everywhere).

    Examples
    --------
    >>> class Held:
    ...     x = np.arange(6.0).reshape(2, 3)
    ...     shape, dtype, places = x.shape, x.dtype, np.array([2, 0, 1])
    ...     def in_order(self, rows): ...
    ...     def read(self, features, out=None): return np.take(self.x, features, 1, out)
    >>> pages = Pages(Held(), lambda x: (x, None))
    >>> [(batch.tolist(), pages.columns(batch)[0].tolist()) for batch in pages.batches(2)]
    [([0, 1], [0.0, 1.0]), ([2], [2.0])]
    """

    def __init__(
        self, source: Source, ready: Callable[[Floats], tuple[Floats, Presence | None]]
    ) -> None:
        self._source, self._ready = source, ready
        self.shape = source.shape
        n_rows, n_features = self.shape
        self._most = max(1, HELD // (n_rows * source.dtype.itemsize))
        self._buffer = np.empty((n_rows, min(self._most, n_features)), source.dtype)
        # What is held, and where each feature is in it; -1 where it is not.
        self._x: Floats = self._buffer[:, :0]
        self._presence: Presence | None = None
        self._features: Ints = np.empty(0, np.intp)
        self._where = np.full(n_features, -1, np.int32)

    def batches(self, size: int, features: Ints | None = None) -> Iterator[Ints]:
        """Features (or, among some, their positions) in batches, held as they come.

        Parameters
        ----------
        size : int
            The most of a batch.
        features : (n_some_features,) int, optional
            The default is all.
        """
        some = np.arange(self.shape[1]) if features is None else features
        parts: list[Ints] = [np.arange(len(some))]
        held = (self._where[some] >= 0).all()
        if not held:
            order = np.argsort(self._source.places[some])
            ends = range(self._most, len(order), self._most)
            parts = [np.sort(near) for near in np.split(order, ends)]
        for part in parts:
            if not held:
                self._hold(some[part])
            for start in range(0, len(part), size):
                yield part[start : start + size]

    def columns(self, features: Ints | slice, rows: slice = slice(None)) -> Floats:
        """(n_some_rows, n_some_features) of the stack."""
        return self._with(features)[0][rows]

    def there(self, features: Ints | slice, rows: slice = slice(None)) -> Bools | None:
        """(n_some_rows, n_some_features) where there is data, or None for everywhere."""
        _, presence, where = self._with(features)
        return None if presence is None else presence.at(where, rows)

    def whole(self) -> tuple[Floats, Presence | None]:
        """All of the stack, made ready, and where it has data."""
        return self._ready(self._source.read(np.arange(self.shape[1])))

    def _hold(self, features: Ints) -> None:
        """Read some features of all rows, and no others any more."""
        self._where[self._features] = -1
        self._features = features[:0]  # what is half read is not held
        read = self._source.read(features, self._buffer[:, : len(features)])
        self._x, self._presence = self._ready(read)
        self._features = features
        self._where[features] = np.arange(len(features))

    def _with(self, features: Ints | slice) -> tuple[Floats, Presence | None, Ints | slice]:
        """Some features of all rows; and where, in what says where they have data, they are."""
        numbers = np.arange(self.shape[1])[features] if isinstance(features, slice) else features
        where: Ints = self._where[numbers]
        if (where < 0).any():
            return *self._ready(self._source.read(numbers)), slice(None)
        if len(where) and (np.diff(where) == 1).all():
            # A slice is no copy.
            beside = slice(int(where[0]), int(where[-1]) + 1)
            return self._x[:, beside], self._presence, beside
        return self._x[:, where], self._presence, where
