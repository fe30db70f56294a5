"""Maps of a linear model with covariates in every fold, and the exchange of their residuals.

Scores that go with covariates cannot be exchanged by themselves: maps and covariates would part.
Freedman & Lane (1983, J. Business & Economic Statistics 1:292-298): fit the covariates alone,
exchange the residuals of whole maps, add the fitted part back, and repeat the procedure on
these data. Exact but for the fit of the covariates. Maps are made whole, without a screen.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence

import numpy as np
import numpy.typing as npt

from .design import Design, design_maps
from .foldstack import FoldStack
from .groupmaps import Missing
from .leading import leading

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# By `present`, what is missing is NaN already; every row of a selection side must have data.
_COMPLETE = Missing(zeros=False, min_fraction=1.0)


class AdjustedMaps:
    """Maps of a design's contrast, of every fold; see `choosing.FoldMaps`.

    The weights of an exchange are not used: the data themselves are exchanged (`Residuals`).

    Parameters
    ----------
    stack : FoldStack
    critical : callable, optional
        The value t must exceed, for numbers of rows of a one-sample t (here: n - p + 1).
    design : Design
        Over the rows of the stack.
    """

    def __init__(
        self, stack: FoldStack, critical: Callable[[Floats], Floats] | None, design: Design
    ) -> None:
        self.stack, self._critical, self._design = stack, critical, design
        self._n = np.array([[len(fold.selection)] for fold in stack.folds], dtype=float)

    def counts(self, kind: str) -> Ints:
        """(n_folds,) features with a value in each fold's map."""
        found = np.zeros(len(self._n), dtype=np.intp)
        for block in self.stack.batches():
            found += np.count_nonzero(~np.isnan(self._maps(block, kind)), axis=1)
        return found

    def above(self, weights: Floats, features: Ints | slice) -> Bools:
        """(n_some_features, n_folds) whether t exceeds the critical value."""
        assert self._critical is not None
        limit = self._critical(self._n - self._design.n_columns + 1)
        with np.errstate(invalid="ignore"):
            above: Bools = (self._maps(features, "t") > limit).T
        return above

    def maps(self, weights: Floats, features: Ints, kind: str) -> Floats:
        """(n_folds, n_some_features) t or the contrast; NaN where there is no value."""
        maps = np.empty((len(self._n), len(features)))
        for at in self.stack.batches(features):
            maps[:, at] = self._maps(features[at], kind)
        return maps

    def may_pass(self, weights: Floats) -> list[Ints]:
        """Every feature, for each row of weights."""
        return [np.arange(self.stack.n_features)] * len(weights)

    def leaders(self, weights: Floats, k: Sequence[int], kind: str) -> Iterator[tuple[Ints, Bools]]:
        """For each row of weights, the features in the first k (of each fold) of any fold."""
        for row, every in zip(weights, self.may_pass(weights), strict=True):
            yield leading(self.maps(row, every, kind), every, k)

    def _maps(self, features: Ints | slice, kind: str) -> Floats:
        x = self.stack.columns(features).astype(np.float64)
        there = self.stack.there(features)
        if there is not None:
            x[~there] = np.nan
        return design_maps(x, self.stack.folds, self._design, _COMPLETE, kind)


class Residuals:
    """A stack as the part that covariates explain and the rest, which may be exchanged.

    Parameters
    ----------
    x : (n_rows, n_features) float
        Zero where data is missing.
    present : (n_rows, n_features) bool, or None for everywhere
        A feature is fitted on the rows that have data; what is missing moves with its residual.
    nuisance : (n_rows, n_columns) float
        An intercept and the covariates.

    Examples
    --------
    >>> x = np.array([[1.0], [2.0], [6.0]])
    >>> Residuals(x, None, np.ones((3, 1))).exchanged(np.array([2, 0, 1]))[0].ravel().tolist()
    [6.0, 1.0, 2.0]
    """

    def __init__(self, x: Floats, present: Bools | None, nuisance: Floats) -> None:
        self._x, self._present = x, present
        self._fitted = np.zeros(x.shape)
        if present is None:
            self._fitted[:] = _fit(nuisance, x, np.ones(len(x), bool))
        else:
            patterns, which = np.unique(present, axis=1, return_inverse=True)
            for i, rows in enumerate(patterns.T):
                if np.count_nonzero(rows) > nuisance.shape[1]:
                    same = np.flatnonzero(which.ravel() == i)
                    self._fitted[:, same] = _fit(nuisance, x[:, same], rows)

    def exchanged(self, order: Ints) -> tuple[Floats, Bools | None]:
        """The data with row i's residual that of row ``order[i]``, and where there is data."""
        if (order == np.arange(len(order))).all():
            return self._x, self._present  # to the last bit
        x = self._fitted + (self._x - self._fitted)[order]
        if self._present is None:
            return x, None
        present = self._present[order]
        x[~present] = 0
        return x, present


def _fit(nuisance: Floats, x: Floats, rows: Bools) -> Floats:
    """What the nuisance columns explain, fitted on some rows and given for all."""
    beta = np.linalg.lstsq(nuisance[rows], x[rows].astype(np.float64), rcond=None)[0]
    fitted: Floats = nuisance @ beta
    return fitted
