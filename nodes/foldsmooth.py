"""How smooth the noise of every fold's selection side is under signs of the rows: exact, bounded.

Thresholds from random field theory need the smoothness of each exchange's own maps, and it
takes longer than all else of an exchange. Mostly a bound is enough to see that nothing passes.

Definitions
-----------
Of one fold, over its n rows under signs s: Q the sum of squares at a feature, which no sign
changes, u_j = s_j x_j / sqrt(Q), a = sum_j u_j / sqrt(n), so that a^2 = t^2 / (n - 1 + t^2), and
p the residuals of u, |p|^2 = 1 - a^2. At a neighbour the same, with a dash. `smoothness` takes
the mean over pairs of d = |p/|p| - p'/|p'||^2, and with c = |u - u'|^2, which no sign changes,

    |p - p'|^2 = c - (a - a')^2,    |p||p'| d = |p - p'|^2 - (|p| - |p'|)^2.

From below: |p||p'| is at most 1, and (|p| - |p'|)^2 at most |a^2 - a'^2|, so that by Cauchy and
Schwarz sum d >= C - E - sqrt(E (4 G - E)), with C, E, G the sums of c and (a - a')^2 over pairs
and of a^2 over features, each of which is in two pairs along an axis at the most.

From above: d is at most c (1 / |p|^2 + 1 / |p'|^2) / 2, and 1 / |p|^2 = 1 + a^2 / (1 - a^2) at most
1 + f a^2 with f = 1 / (1 - A), A the most that a^2 can be: that of signs which agree with the
data. So sum d <= C + H, with H the sum over features of h f a^2, and h half the c of a feature's
pairs.

E, G and H are quadratic forms in the signs: products of rows with rows, summed over the features
once, serve all exchanges.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .errors import InputError
from .foldstack import FoldStack
from .groupmaps import without_each
from .smoothness import axis_pairs, fwhm_from_sums, fwhm_of_roughness, pair_products
from .space import Grid

Floats = npt.NDArray[np.floating]
Ints = npt.NDArray[np.integer]
Bools = npt.NDArray[np.bool_]

# A t field in three dimensions has more than 3 degrees of freedom.
_LEAST_ROWS = 5
# Numbers kept for the bounds at the most; with more rows there are none.
_KEPT = 2**24
# Rounding of a sum, generously.
_ROUNDED = 1e-9
# In place of infinity, for a bound that says nothing.
_ENDLESS = 1e30


@dataclass(frozen=True)
class _Forms:
    """Products of a fold's rows with its rows, summed over features; zero for held-out rows.

    Parameters
    ----------
    plain : (n_folds, 4, n_rows, n_rows) float64
        Of the differences of neighbours along each axis, for E, whose diagonals sum to C; then of
        the features themselves, for G.
    weighted : (n_folds, 3, n_rows, n_rows) float64
        Of the features times h f, for H.
    total : (n_folds, 3) float64
        C.
    n_pairs : (n_folds, 3) int
    """

    plain: Floats
    weighted: Floats
    total: Floats
    n_pairs: Ints


class FoldSmoothness:
    """The FWHM of the noise on every fold's selection side, under any signs of the rows.

    Products of neighbours are kept for all folds: 24 bytes a feature and fold.

    Parameters
    ----------
    stack : FoldStack
    space : Grid

    Raises
    ------
    InputError
        With too few rows for a t field.

    Examples
    --------
    >>> from sequester.nodes.folds import KFold
    >>> from sequester.nodes.groupmaps import Missing
    >>> x = np.random.default_rng(0).standard_normal((12, 1000))
    >>> folds = KFold(2).folds(list("abcdefghijkl"))
    >>> smooth = FoldSmoothness(FoldStack(x, None, folds, Missing()), Grid((10, 10, 10), np.eye(4)))
    >>> exact = smooth.fwhm(np.ones(12), np.array([0, 1]))
    >>> bool((exact <= smooth.most(np.ones(12))).all())
    True
    """

    def __init__(self, stack: FoldStack, space: Grid) -> None:
        self.stack, self.rows = stack, np.array([len(fold.selection) for fold in stack.folds])
        if self.rows.min() < _LEAST_ROWS:
            raise InputError(
                "too few maps for a random field",
                expected=f"at least {_LEAST_ROWS} on the side that chooses",
                got=str(self.rows.min()),
                remedy="more subjects, or folds that hold out fewer",
            )
        self.pairs = axis_pairs(space)
        parts = [pair_products(stack.x[list(fold.held_out)], self.pairs) for fold in stack.folds]
        self._products = [without_each(np.stack(along)) for along in zip(*parts, strict=True)]
        self._squares = np.empty((len(self.rows), stack.n_features))
        for block in stack.pieces():
            # Without a square a feature counts for nothing.
            complete = stack.rows(block) == self.rows[:, None]
            self._squares[:, block] = np.where(complete, stack.squares(block), 0)
        self._made: _Forms | None = None

    def fwhm(self, weights: Floats, folds: Ints) -> Floats:
        """(n_some_folds, 3), in voxels."""
        sums = np.empty((len(folds), self.stack.n_features))
        for block in self.stack.pieces():
            sums[:, block] = self.stack.sums(weights, block)[folds]
        widths = np.empty((len(folds), 3))
        for i, k in enumerate(folds.tolist()):
            products = [along[k] for along in self._products]
            n = int(self.rows[k])
            widths[i] = fwhm_from_sums(n, sums[i], self._squares[k], products, self.pairs)
        return widths

    def most(self, weights: Floats) -> Floats:
        """(n_folds, 3) what no FWHM is above; infinite where there is no bound."""
        forms = self._forms()
        if forms is None:
            return np.full((len(self.rows), 3), np.inf)
        found = self._form(forms.plain, weights)
        E, G = found[:, :3], found[:, 3:]
        with np.errstate(invalid="ignore"):
            least = forms.total - E - np.sqrt(E * np.maximum(4 * G - E, 0))
            return self._width(least - _ROUNDED * forms.total, forms.n_pairs)

    def least(self, weights: Floats) -> Floats:
        """(n_folds, 3) what no FWHM is below; 0 where there is no bound."""
        forms = self._forms()
        if forms is None:
            return np.zeros((len(self.rows), 3))
        most = forms.total + self._form(forms.weighted, weights)
        return self._width(most * (1 + _ROUNDED), forms.n_pairs)

    def _form(self, products: Floats, weights: Floats) -> Floats:
        """(n_folds, n_forms) weights' products weights / n."""
        form: Floats = ((products @ weights) @ weights) / self.rows[:, None]
        return form

    def _width(self, sums: Floats, n_pairs: Ints) -> Floats:
        """The FWHM that goes with sums of d over pairs; NaN without pairs."""
        nu = self.rows[:, None] - 1
        with np.errstate(invalid="ignore", divide="ignore"):
            return fwhm_of_roughness((nu - 2) / (nu - 1) * np.maximum(sums, 0) / n_pairs)

    def _forms(self) -> _Forms | None:
        """The forms, made when exchanges first ask; None when there is no room for them."""
        stack = self.stack
        n_folds, square = len(self.rows), (stack.n_rows, stack.n_rows)
        if not stack.turned or 7 * len(self.rows) * stack.n_rows**2 > _KEPT:
            return None
        if self._made is None:
            forms = _Forms(
                np.zeros((n_folds, 4, *square)),
                np.zeros((n_folds, 3, *square)),
                np.zeros((n_folds, 3)),
                np.zeros((n_folds, 3), np.intp),
            )
            for k, fold in enumerate(stack.folds):
                rows = np.array(fold.selection)
                self._add(forms, k, rows)
            self._made = forms
        return self._made

    def _add(self, forms: _Forms, k: int, rows: Ints) -> None:
        """One fold's forms."""
        stack, square = self.stack, np.ix_(rows, rows)
        with np.errstate(divide="ignore"):
            by = 1 / np.sqrt(self._squares[k])
        by[~np.isfinite(by)] = 0
        half = np.zeros((3, stack.n_features))
        for axis, (one, other) in enumerate(self.pairs):
            both = np.flatnonzero((by[one] > 0) & (by[other] > 0))
            forms.n_pairs[k, axis] = len(both)
            for start in range(0, len(both), stack.piece):
                some = both[start : start + stack.piece]
                here, there = one[some], other[some]
                u = stack.x[np.ix_(rows, here)] * by[here]
                u -= stack.x[np.ix_(rows, there)] * by[there]
                forms.plain[k, axis][square] += u @ u.T
                c = np.square(u).sum(axis=0)
                half[axis] += np.bincount(here, c / 2, stack.n_features)
                half[axis] += np.bincount(there, c / 2, stack.n_features)
            forms.total[k, axis] = np.trace(forms.plain[k, axis])
        for block in stack.pieces():
            u = stack.x[rows, block] * by[block]
            forms.plain[k, 3][square] += u @ u.T
            left = 1 - np.square(np.abs(u).sum(axis=0)) / len(rows)
            # Rows that are all as large: nothing varies when their signs agree.
            by_left = half[:, block] / np.where(left > _ROUNDED, left, 1 / _ENDLESS)
            for axis in range(3):
                forms.weighted[k, axis][square] += (u * by_left[axis]) @ u.T
