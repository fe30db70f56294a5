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
from .pages import Pages
from .presence import Presence
from .products import blocks_alone

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# Features a block: enough to hide the cost of a call, and fewer when the numbers of many rows
# would not fit a cache.
BLOCK, _SMALL_BLOCK, _BLOCK_NUMBERS = 8192, 1024, 2**19
# Bytes of a stack of which copies are made that are quicker to read; of a larger one there is
# no room for another.
_COPIED = 2**27


class FoldStack:
    """A stack of effects and its folds.

    Parameters
    ----------
    x : (n_rows, n_features) float, or Pages of such a stack
        Zero where data is missing; high in the direction of selection. Pages are read as sums
        ask for them; whatever needs the whole (`x`, `presence`, `pieces`, `turn`) holds it.
    presence : Presence, or None for data everywhere
        Pages have their own.
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
        self,
        x: Floats | Pages,
        presence: Presence | None,
        folds: Sequence[Fold],
        missing: Missing,
    ) -> None:
        self._x, self._presence, self.folds, self.missing = x, presence, folds, missing
        self.n_rows, self.n_features = x.shape
        self._complete = rows_with_data(None, folds)
        self._least: dict[str, Ints] = {}
        self._single: Floats | None = None
        self._by_feature: Floats | None = None
        self._even: Floats | None = None

    @property
    def x(self) -> Floats:
        """(n_rows, n_features) the whole stack."""
        return self._held()[0]

    @property
    def presence(self) -> Presence | None:
        """Where the whole stack has data; None for everywhere."""
        return self._held()[1]

    def _held(self) -> tuple[Floats, Presence | None]:
        if isinstance(self._x, Pages):
            self._x, self._presence = self._x.whole()
        return self._x, self._presence

    @property
    def turned(self) -> bool:
        """Whether the stack was made ready for many exchanges (see `turn`)."""
        return self._single is not None

    def turn(self) -> None:
        """Make the stack ready for many exchanges; later calls do nothing."""
        if self._single is None:
            self._single = self.x
            if self._copied:
                self._single = _as_single(self.x)
                self._by_feature = np.ascontiguousarray(self.x.T)

    @property
    def _copied(self) -> bool:
        return self.x.nbytes <= _COPIED

    @property
    def piece(self) -> int:
        """How many features a block has."""
        fitting: int = max(_SMALL_BLOCK, _BLOCK_NUMBERS // self.n_rows)
        return min(BLOCK, fitting)

    def pieces(self) -> list[slice]:
        """The features in blocks, of the whole stack."""
        return self._slices(self.x.shape[1])

    def batches(self, features: Ints | None = None) -> Iterator[Ints | slice]:
        """Blocks of all features, or positions among some, in the order that is quick to read.

        Not to hold the whole stack, go through it in these.
        """
        if isinstance(self._x, Pages):
            return self._x.batches(self.piece, features)
        return iter(self._slices(self.n_features if features is None else len(features)))

    def _slices(self, n: int) -> list[slice]:
        return [slice(at, min(at + self.piece, n)) for at in range(0, n, self.piece)]

    def numbers(self, features: Ints | slice) -> Ints:
        """The features of a block."""
        if not isinstance(features, slice):
            return features
        numbers: Ints = np.arange(*features.indices(self.n_features))
        return numbers

    def columns(self, features: Ints | slice, rows: slice = slice(None)) -> Floats:
        """(n_some_rows, n_some_features) of the stack."""
        if isinstance(self._x, Pages):
            return self._x.columns(features, rows)
        if self._by_feature is None or isinstance(features, slice):
            return self._x[rows, features]
        # Gathered by feature: whole cache lines.
        return np.take(self._by_feature, features, axis=0).T[rows]

    def there(self, features: Ints | slice, rows: slice = slice(None)) -> Bools | None:
        """(n_some_rows, n_some_features) where there is data, or None for everywhere."""
        if isinstance(self._x, Pages):
            return self._x.there(features, rows)
        # One missing value anywhere must not make all features slow.
        return None if self._presence is None else self._presence.at(features, rows)

    def rows(self, features: Ints | slice) -> Floats:
        """(n_folds, n_some_features or 1): rows of each fold's selection side with data."""
        present = self.there(features)
        return self._complete if present is None else rows_with_data(present, self.folds)

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
        """How far fold sums and the sums of `all_sums` can be apart, for weights of +-1.

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
            if self._copied:
                first, less = _uneven(reach)
                # The first fold's own part is smaller, and of the others' sums some is missing.
                reach = reach + np.where(first, -less, less)
            slack = 4 * (len(size) + 2) * (single.eps * total + single.tiny)
            return reach, slack, total < single.max / 2

    def all_sums(self, weights: Floats) -> Iterator[tuple[slice, Floats]]:
        """Blocks of features with their (n_exchanges, n_features) float32 sums over all rows.

        To be as near as can be to all folds' sums (see `most_off`), the fold that can change the
        sum the most counts less, if there is room for a stack of its own.

        Parameters
        ----------
        weights : (n_exchanges, n_rows)
        """
        self.turn()
        assert self._single is not None
        rows = self._evened() if self._copied else self._single
        yield from blocked_products(weights.astype(np.float32), rows)

    def _evened(self) -> Floats:
        """(n_rows, n_features) float32: the rows of `all_sums`."""
        if self._even is None:
            assert self._single is not None
            self._even = self._single.copy()
            fold_of_row = np.empty(self.n_rows, np.intp)
            for k, fold in enumerate(self.folds):
                fold_of_row[list(fold.held_out)] = k
            for block in self.pieces():
                with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
                    reach = fold_sums(np.abs(self.x[:, block].astype(np.float64)), self.folds)
                    first, less = _uneven(reach)
                    share = np.where(first & (less > 0), 1 - less / reach, 1)
                    self._even[:, block] *= share[fold_of_row]
        return self._even

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
        largest = max(len(held) for held in rows)
        for block in blocks_alone(self.n_features, len(weights) * largest):
            x = _as_single(self._single[:, block])
            with np.errstate(over="ignore", invalid="ignore"):
                held = [s @ x[some] for s, some in zip(signs, rows, strict=True)]
                total = np.sum(held, axis=0, dtype=np.float32)
                yield block, [total - part for part in held]


def _uneven(reach: Floats) -> tuple[Bools, Floats]:
    """Where a feature's fold has the largest reach, and half of what it is larger than the next."""
    most = reach.max(axis=0)
    first = reach == most
    next_most = np.where(first, 0, reach).max(axis=0)
    alone = (np.count_nonzero(first, axis=0) == 1) & np.isfinite(most)
    return first, np.where(alone, (most - next_most) / 2, 0)


def _as_single(x: Floats) -> Floats:
    """In float32: what does not fit is infinite."""
    with np.errstate(over="ignore"):
        return x.astype(np.float32, copy=False)


def blocked_products(weights: Floats, rows: Floats) -> Iterator[tuple[slice, Floats]]:
    """Blocks of features with weights @ rows there, in float32."""
    for block in blocks_alone(rows.shape[1], weights.size):
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
    pieces = ((block, ~(sums <= lowest[block])) for block, sums in products)
    return gathered(pieces, n, len(lowest))


def gathered(pieces: Iterator[tuple[slice, Bools]], n: int, n_features: int) -> list[Ints]:
    """For each of n exchanges the features, ascending, that are marked in blocks of them.

    Parameters
    ----------
    pieces : blocks of features with (n, n_features_of_block) bool
    n, n_features : int
    """
    marked = np.empty((n, n_features), bool)
    for block, may in pieces:
        marked[:, block] = may
    return [np.flatnonzero(row) for row in marked]
