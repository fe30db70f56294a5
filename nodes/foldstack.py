"""A stack of effects with its folds, made ready to be summed again and again under weights.

A map of any fold is a function of sums over its selection side, and what an exchange changes is
one weight per row: a sign, or a score. `FoldStack` holds the rows once and gives the folds'
sums in float64 (from both ends, so that held-out rows never enter), the sums over all rows in
float32 (for a screen), and how far the two can be apart.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np
import numpy.typing as npt

from .folds import Fold
from .groupmaps import Missing, fold_sums, rows_with_data, without_each

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# Features a block: enough to hide the cost of a call, and fewer when the numbers of many rows
# would not fit a cache.
BLOCK, _SMALL_BLOCK, _BLOCK_NUMBERS = 8192, 1024, 2**19
# Small enough for a BLAS to stay on one thread and in its cache: the product is soon done, and
# waiting for other threads is what would take long.
_SCREEN_BLOCK = 1024
# With fewer exchanges than these, blocks are larger.
_FULL = 16
# Bytes of a stack of which copies are made that are quicker to read; of a larger one there is
# no room for another.
_COPIED = 2**27


class Presence:
    """Where a stack has data, a bit each: a large study has no room for bytes.

    Examples
    --------
    >>> there = Presence(3, 2)
    >>> there.put(1, np.array([True, False]))
    >>> there.at(slice(None)).tolist()
    [[True, True], [True, False], [True, True]]
    """

    def __init__(self, n_rows: int, n_features: int) -> None:
        self._n_rows = n_rows
        self._bits = np.full((-(-n_rows // 8), n_features), 255, np.uint8)

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

    def at(self, features: Ints | slice, rows: slice = slice(None)) -> Bools:
        """(n_some_rows, n_some_features) where there is data."""
        bits = np.unpackbits(self._bits[:, features], axis=0, count=self._n_rows)
        return bits.view(np.bool_)[rows]


class FoldStack:
    """A stack of effects and its folds.

    Parameters
    ----------
    x : (n_rows, n_features) float
        Zero where data is missing; high in the direction of selection.
    presence : Presence, or None for data everywhere
    folds : sequence of Fold
        Their held-out rows partition the rows.
    missing : Missing

    Examples
    --------
    >>> from sequester.nodes.folds import LeaveOneOut
    >>> x = np.array([[1.0, 4.0], [2.0, 5.0], [4.0, 6.0]])
    >>> stack = FoldStack(x, None, LeaveOneOut().folds(list("abc")), Missing())
    >>> stack.sums(np.array([1.0, 1.0, -1.0]), slice(None)).tolist()
    [[-2.0, -1.0], [-3.0, -2.0], [3.0, 9.0]]
    """

    def __init__(
        self, x: Floats, presence: Presence | None, folds: Sequence[Fold], missing: Missing
    ) -> None:
        self.x, self.presence, self.folds, self.missing = x, presence, folds, missing
        self.n_rows, self.n_features = x.shape
        self._least: dict[str, Ints] = {}
        self._single: Floats | None = None
        self._by_feature: Floats | None = None

    @property
    def turned(self) -> bool:
        """Whether the stack was made ready for many exchanges (see `turn`)."""
        return self._single is not None

    def turn(self) -> None:
        """Make the stack ready for many exchanges; later calls do nothing."""
        if self._single is None:
            self._single = self.x
            if self.x.nbytes <= _COPIED:
                self._single = _as_single(self.x)
                self._by_feature = np.ascontiguousarray(self.x.T)

    @property
    def piece(self) -> int:
        """How many features a block has."""
        fitting: int = max(_SMALL_BLOCK, _BLOCK_NUMBERS // self.n_rows)
        return min(BLOCK, fitting)

    def pieces(self) -> list[slice]:
        """The features in blocks."""
        return [
            slice(start, min(start + self.piece, self.n_features))
            for start in range(0, self.n_features, self.piece)
        ]

    def columns(self, features: Ints | slice, rows: slice = slice(None)) -> Floats:
        """(n_some_rows, n_some_features) of the stack."""
        if self._by_feature is None or isinstance(features, slice):
            return self.x[rows, features]
        # Gathered by feature: whole cache lines.
        return np.take(self._by_feature, features, axis=0).T[rows]

    def there(self, features: Ints | slice, rows: slice = slice(None)) -> Bools | None:
        """(n_some_rows, n_some_features) where there is data, or None for everywhere."""
        present = None if self.presence is None else self.presence.at(features, rows)
        # One missing value anywhere must not make all features slow.
        return None if present is None or present.all() else present

    def rows(self, features: Ints | slice) -> Floats:
        """(n_folds, n_some_features or 1): rows of each fold's selection side with data."""
        return rows_with_data(self.there(features), self.folds)

    def least(self, kind: str = "t") -> Ints:
        """(n_folds, 1): how many rows of each fold's selection side must have data."""
        if kind not in self._least:
            sizes = [len(fold.selection) for fold in self.folds]
            self._least[kind] = np.array([[self.missing.least(n, kind)] for n in sizes])
        return self._least[kind]

    def sums(self, weights: Floats, features: Ints | slice) -> Floats:
        """(n_folds, n_some_features) weighted sums over each fold's selection side."""
        x = self.columns(features)
        with np.errstate(over="ignore", invalid="ignore"):
            weighted = np.multiply(x, weights[:, None], order="C")
            return without_each(fold_sums(weighted, self.folds))

    def squares(self, features: Ints | slice) -> Floats:
        """(n_folds, n_some_features) sums of squares over each fold's selection side."""
        with np.errstate(over="ignore", invalid="ignore"):
            return without_each(fold_sums(self.columns(features), self.folds, square=True))

    def most_off(self, block: slice) -> tuple[Floats, Floats, Bools]:
        """How far fold sums and the float32 sum over all rows can be apart, for weights of +-1.

        Returns
        -------
        reach : (n_folds, n_features)
            The most that leaving out a fold can change the sum.
        slack : (n_features,)
            Rounding and underflow of a float32 sum, generously.
        known : (n_features,) bool
            False where float32 may overflow, and no bound holds.
        """
        single = np.finfo(np.float32)
        size = np.abs(self.x[:, block].astype(np.float64))
        with np.errstate(over="ignore", invalid="ignore"):
            reach = fold_sums(size, self.folds)
            total = size.sum(axis=0)
            slack = 4 * (len(size) + 2) * (single.eps * total + single.tiny)
            return reach, slack, total < single.max / 2

    def all_sums(self, weights: Floats) -> Iterator[tuple[slice, Floats]]:
        """Blocks of features with their (n_exchanges, n_features) float32 sums over all rows.

        Parameters
        ----------
        weights : (n_exchanges, n_rows)
        """
        self.turn()
        assert self._single is not None
        yield from blocked_products(weights.astype(np.float32), self._single)

    def side_sums(self, weights: Floats) -> Iterator[tuple[slice, list[Floats]]]:
        """Blocks of features with their float32 sums over each fold's selection side.

        For few folds: a product for each fold's rows costs no more than one for all rows.

        Parameters
        ----------
        weights : (n_exchanges, n_rows)

        Yields
        ------
        the block, and for each fold (n_exchanges, n_features)
        """
        self.turn()
        assert self._single is not None
        rows = [list(fold.held_out) for fold in self.folds]
        signs = [np.ascontiguousarray(weights[:, held], np.float32) for held in rows]
        for block in _screen_blocks(self.n_features, len(weights)):
            x = _as_single(self._single[:, block])
            with np.errstate(over="ignore", invalid="ignore"):
                held = [s @ x[some] for s, some in zip(signs, rows, strict=True)]
                total = np.sum(held, axis=0, dtype=np.float32)
                yield block, [total - part for part in held]

    def may_reach(self, weights: Floats, lowest: Floats) -> list[Ints]:
        """For each row of weights, features where some fold's sum is not below its lowest.

        Parameters
        ----------
        weights : (n_exchanges, n_rows)
        lowest : (n_folds, n_features) float32
            NaN keeps a feature in.
        """

        def pieces() -> Iterator[tuple[slice, Bools]]:
            for block, sums in self.side_sums(weights):
                may = np.zeros(sums[0].shape, bool)
                for of_fold, least in zip(sums, lowest[:, block], strict=True):
                    # Negated, so that what is not a number stays in.
                    may |= ~(of_fold <= least)
                yield block, may

        return gathered(pieces(), len(weights))


def _as_single(x: Floats) -> Floats:
    """In float32: what does not fit is infinite."""
    with np.errstate(over="ignore"):
        return x.astype(np.float32, copy=False)


def _screen_blocks(n_features: int, n_exchanges: int) -> Iterator[slice]:
    size = _SCREEN_BLOCK * max(1, _FULL // n_exchanges)
    for start in range(0, n_features, size):
        yield slice(start, start + size)


def blocked_products(weights: Floats, rows: Floats) -> Iterator[tuple[slice, Floats]]:
    """Blocks of features with weights @ rows there, in float32."""
    for block in _screen_blocks(rows.shape[1], len(weights)):
        with np.errstate(over="ignore", invalid="ignore"):
            yield block, weights @ _as_single(rows[:, block])


def by_exchange(products: Iterator[tuple[slice, Floats]], lowest: Floats, n: int) -> list[Ints]:
    """For each of n exchanges the features, ascending, whose product is not below the lowest.

    Parameters
    ----------
    products : blocks of features with their (n, n_features) products
    lowest : (n_features,) float32
        NaN keeps a feature in.
    n : int
    """
    # Negated, so that what is not a number stays in.
    return gathered(((block, ~(sums <= lowest[block])) for block, sums in products), n)


def gathered(pieces: Iterator[tuple[slice, Bools]], n: int) -> list[Ints]:
    """For each of n exchanges the features, ascending, that are marked in blocks of them.

    Parameters
    ----------
    pieces : blocks of features with (n, n_features) bool
    n : int
    """
    exchanges, features = [], []
    for block, may in pieces:
        exchange, feature = np.divmod(np.flatnonzero(may), may.shape[1])
        exchanges.append(exchange)
        features.append(feature + block.start)
    of_exchange = np.concatenate(exchanges)
    # Blocks come in order, so a stable sort by exchange leaves the features ascending.
    order = np.argsort(of_exchange, kind="stable")
    ends = np.cumsum(np.bincount(of_exchange, minlength=n))
    return np.split(np.concatenate(features)[order], ends[:-1])
