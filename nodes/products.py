"""Products in blocks that are small enough for a BLAS to do each on the thread that asks.

Waiting for other threads is what takes long of a product that is soon done: on a busy machine, a
hundred times as long.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.floating]

# So many multiplications stay on one thread, and in its cache.
_ALONE = 2**19 - 1
# Columns of a block: so many that each call is worth it, and so few that a cache holds them.
_LEAST, _MOST = 128, 16384


def blocks_alone(n: int, each: int) -> Iterator[slice]:
    """Blocks of n features.

    Parameters
    ----------
    n : int
        Features.
    each : int
        How many multiplications a feature takes.

    Examples
    --------
    >>> list(blocks_alone(1000, 26 * 26))
    [slice(0, 775, None), slice(775, 1000, None)]
    """
    size = min(max(_LEAST, _ALONE // each), _MOST)
    for start in range(0, n, size):
        yield slice(start, min(start + size, n))


def gram(x: Floats, other: Floats | None = None) -> Floats:
    """x @ x.T, or x @ other.T, in blocks of columns.

    Parameters
    ----------
    x, other : (n_rows, n) float

    Returns
    -------
    (n_rows, n_rows)

    Examples
    --------
    >>> gram(np.array([[1.0, 2.0], [0.0, 3.0]])).tolist()
    [[5.0, 6.0], [6.0, 9.0]]
    """
    n_rows, n = x.shape
    other = x if other is None else other
    made = np.zeros((n_rows, n_rows), x.dtype)
    # A BLAS sees that x @ x.T is symmetric, and such products go to more threads sooner.
    for block in blocks_alone(n, 2 * n_rows * (n_rows + 1)):
        made += x[:, block] @ other[:, block].T
    return made


def times(x: Floats, other: Floats) -> Floats:
    """x @ other, in blocks of rows.

    Parameters
    ----------
    x : (n, n_inner) float
    other : (n_inner, n_columns) float

    Returns
    -------
    (n, n_columns)

    Examples
    --------
    >>> times(np.array([[1.0, 2.0]]), np.array([[3.0, 0.0], [1.0, 1.0]])).tolist()
    [[5.0, 2.0]]
    """
    made = np.empty((len(x), other.shape[1]), np.result_type(x, other))
    for block in blocks_alone(len(x), other.size):
        np.matmul(x[block], other, out=made[block])
    return made
