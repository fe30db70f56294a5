"""Signs for sign-flip tests, keyed so that they depend on nothing but seed, label and number.

A flip is keyed by (seed, label, flip number): neither the number of processes, nor the size of
a block, nor the order of the rows can change a p-value.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

Signs = npt.NDArray[np.int8]


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
        key = hashlib.sha256(f"{seed}\0{label}".encode()).digest()[:16]
        # random_raw is the bit generator's own stream, which NumPy keeps unchanged.
        words = np.random.Philox(key=int.from_bytes(key, "little")).random_raw(stop // 64 + 1)
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
