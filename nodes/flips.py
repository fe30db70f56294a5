"""Signs and orders for exchange tests, keyed: they depend on seed, labels and number alone.

A flip is keyed by (seed, label, flip number), and so is the key by which an order sorts the
labels: neither the number of processes, nor the size of a block, nor the order of the rows can
change a p-value.
"""

from __future__ import annotations

import hashlib
import itertools
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

Signs = npt.NDArray[np.int8]
Orders = npt.NDArray[np.intp]


def random_signs(seed: int, labels: Sequence[str], start: int, stop: int) -> Signs:
    """Signs of flips start..stop-1 for each label.

    Parameters
    ----------
    seed : int
    labels : sequence of str
        Distinct; who flips as one.
    start, stop : int
        Flip numbers.

    Returns
    -------
    (stop - start, n_labels) int8 of +1 and -1

    Examples
    --------
    >>> both = random_signs(7, ["a", "b"], 0, 100)
    >>> bool((both[60:70, 1] == random_signs(7, ["b"], 60, 70)[:, 0]).all())
    True
    """
    signs = np.empty((stop - start, len(labels)), np.int8)
    for column, label in enumerate(labels):
        words = _words(f"{seed}\0{label}", stop // 64 + 1)
        bits = np.unpackbits(words.astype("<u8").view(np.uint8), bitorder="little")
        signs[:, column] = 1 - 2 * bits[start:stop].astype(np.int8)
    return signs


def all_signs(n_labels: int, start: int, stop: int) -> Signs:
    """Rows start..stop-1 of the enumeration of all 2^n sign patterns; row 0 flips nobody.

    Examples
    --------
    >>> all_signs(2, 0, 4).tolist()
    [[1, 1], [-1, 1], [1, -1], [-1, -1]]
    """
    numbers = np.arange(start, stop, dtype=np.int64)[:, None]
    signs: Signs = (1 - 2 * ((numbers >> np.arange(n_labels)) & 1)).astype(np.int8)
    return signs


def random_orders(seed: int, labels: Sequence[str], start: int, stop: int) -> Orders:
    """Orders of the labels: exchange f gives label i what belongs to label ``order[f, i]``.

    Every label draws a number for every exchange; the ranks of the numbers are the order.

    Parameters
    ----------
    seed : int
    labels : sequence of str
        Distinct and sorted, so that their given order cannot matter.
    start, stop : int
        Exchange numbers.

    Returns
    -------
    (stop - start, n_labels) int

    Examples
    --------
    >>> whole = random_orders(7, ["a", "b", "c"], 0, 100)
    >>> bool((whole[60:70] == random_orders(7, ["a", "b", "c"], 60, 70)).all())
    True
    """
    drawn = np.empty((stop - start, len(labels)), np.uint64)
    for column, label in enumerate(labels):
        drawn[:, column] = _words(f"{seed}\0{label}\0order", stop)[start:]
    return np.argsort(np.argsort(drawn, axis=1, kind="stable"), axis=1)


def all_orders(n_labels: int) -> Orders:
    """All n! orders, (n!, n_labels); row 0 exchanges nothing.

    Examples
    --------
    >>> all_orders(3).tolist()
    [[0, 1, 2], [0, 2, 1], [1, 0, 2], [1, 2, 0], [2, 0, 1], [2, 1, 0]]
    """
    return np.array(list(itertools.permutations(range(n_labels))), dtype=np.intp)


def all_splits(first: npt.NDArray[np.bool_]) -> Orders:
    """One order for each way to name the members of the first of two groups.

    Parameters
    ----------
    first : (n_labels,) bool
        Who is in the first group.

    Examples
    --------
    >>> first = np.array([True, False, False])
    >>> first[all_splits(first)].tolist()
    [[True, False, False], [False, True, False], [False, False, True]]
    """
    inside, outside = np.flatnonzero(first), np.flatnonzero(~first)
    splits = list(itertools.combinations(range(len(first)), len(inside)))
    orders = np.empty((len(splits), len(first)), np.intp)
    for order, named in zip(orders, splits, strict=True):
        here = np.zeros(len(first), bool)
        here[list(named)] = True
        order[here], order[~here] = inside, outside
    return orders


def _words(key: str, n: int) -> npt.NDArray[np.uint64]:
    """The first n words of a stream of its own."""
    digest = hashlib.sha256(key.encode()).digest()[:16]
    # random_raw is the bit generator's own stream, which NumPy keeps unchanged.
    words: npt.NDArray[np.uint64] = np.random.Philox(
        key=int.from_bytes(digest, "little")
    ).random_raw(n)
    return words
