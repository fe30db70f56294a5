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
from .products import gram
from .smoothness import axis_pairs, fwhm_of_roughness, pair_products
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
# A sum of squares below this share of the whole is rounding.
_FLAT = 64 * np.finfo(float).eps
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
    total : (n_folds, 3) float64
        C.
    n_pairs : (n_folds, 3) int
    """

    plain: Floats
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
        self._weighted: Floats | None = None

    def fwhm(self, weights: Floats, folds: Ints) -> Floats:
        """(n_some_folds, 3), in voxels."""
        sums = np.empty((len(folds), self.stack.n_features))
        for block in self.stack.pieces():
            sums[:, block] = self.stack.sums(weights, block)[folds]
        return np.array(
            [self._fwhm(k, of_fold) for k, of_fold in zip(folds.tolist(), sums, strict=True)]
        ).reshape(-1, 3)

    def _fwhm(self, k: int, S: Floats) -> Floats:
        """(3,) as `smoothness.fwhm_from_sums` has it, with fewer passes over the features."""
        n, Q = int(self.rows[k]), self._squares[k]
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            spread = Q - S * S / n
            weight = 1 / np.sqrt(np.where(spread > _FLAT * Q, spread, np.inf))
        weight[~np.isfinite(weight)] = 0
        a = S * weight / np.sqrt(n)
        sums, n_pairs = np.empty(3), np.empty(3, np.intp)
        for axis, (one, other) in enumerate(self.pairs):
            both = weight[one] * weight[other]
            n_pairs[axis] = np.count_nonzero(both)
            # Not a product of BLAS, which may round otherwise on another number of threads.
            alike = np.einsum("i,i", self._products[axis][k], both)
            alike -= np.einsum("i,i", a[one], a[other])
            sums[axis] = 2 * (n_pairs[axis] - alike)
        return self._width(sums, n_pairs, n - 1)

    def most(self, weights: Floats) -> Floats:
        """(n_folds, 3) what no FWHM is above; infinite where there is no bound."""
        forms = self._forms()
        if forms is None:
            return np.full((len(self.rows), 3), np.inf)
        found = self._form(forms.plain, weights)
        E, G = found[:, :3], found[:, 3:]
        with np.errstate(invalid="ignore"):
            least = forms.total - E - np.sqrt(E * np.maximum(4 * G - E, 0))
            least -= _ROUNDED * forms.total
            return self._width(least, forms.n_pairs, self.rows[:, None] - 1)

    def least(self, weights: Floats) -> Floats:
        """(n_folds, 3) what no FWHM is below; 0 where there is no bound."""
        forms = self._forms()
        if forms is None:
            return np.zeros((len(self.rows), 3))
        if self._weighted is None:
            self._weighted = self._weigh()
        most = forms.total + self._form(self._weighted, weights)
        return self._width(most * (1 + _ROUNDED), forms.n_pairs, self.rows[:, None] - 1)

    def _form(self, products: Floats, weights: Floats) -> Floats:
        """(n_folds, n_forms) weights' products weights / n."""
        form: Floats = ((products @ weights) @ weights) / self.rows[:, None]
        return form

    @staticmethod
    def _width(sums: Floats, n_pairs: Ints, nu: Ints | int) -> Floats:
        """The FWHM that goes with sums of d over pairs; NaN without pairs."""
        with np.errstate(invalid="ignore", divide="ignore"):
            return fwhm_of_roughness((nu - 2) / (nu - 1) * np.maximum(sums, 0) / n_pairs)

    def _forms(self) -> _Forms | None:
        """The forms, made when exchanges first ask; None when there is no room for them."""
        stack = self.stack
        if not stack.turned or 7 * len(self.rows) * stack.n_rows**2 > _KEPT:
            return None
        if self._made is None:
            self._made = self._formed()
        return self._made

    def _formed(self) -> _Forms:
        """The forms: what is fetched serves all folds."""
        stack, n_folds = self.stack, len(self.rows)
        plain = np.zeros((n_folds, 4, stack.n_rows, stack.n_rows))
        n_pairs = np.zeros((n_folds, 3), np.intp)
        with np.errstate(over="ignore", invalid="ignore"):  # of held-out rows, which go
            for axis, (one, other) in enumerate(self.pairs):
                for start in range(0, len(one), stack.piece):
                    some = slice(start, start + stack.piece)
                    here, there = one[some], other[some]
                    x, x_there = (stack.columns(at).astype(np.float64) for at in (here, there))
                    for k in range(n_folds):
                        by, by_there = self._by(k, here), self._by(k, there)
                        both = (by > 0) & (by_there > 0)
                        u = x * np.where(both, by, 0)
                        u -= x_there * np.where(both, by_there, 0)
                        plain[k, axis] += gram(u)
                        n_pairs[k, axis] += np.count_nonzero(both)
            for block in stack.pieces():
                x = stack.columns(block).astype(np.float64)
                for k in range(n_folds):
                    u = x * self._by(k, block)
                    plain[k, 3] += gram(u)
        self._choose(plain)
        return _Forms(plain, np.trace(plain[:, :3], axis1=2, axis2=3), n_pairs)

    def _weigh(self) -> Floats:
        """(n_folds, 3, n_rows, n_rows) products of the features times h f, for H."""
        stack, n_folds = self.stack, len(self.rows)
        weighted = np.zeros((n_folds, 3, stack.n_rows, stack.n_rows))
        for k, fold in enumerate(stack.folds):
            side = list(fold.selection)
            half = np.zeros((3, stack.n_features))
            for axis, (one, other) in enumerate(self.pairs):
                by = self._by(k, one) * self._by(k, other)
                # |u - u'|^2, half of it to either; never less than nothing.
                c = np.where(by > 0, np.maximum(1 - self._products[axis][k] * by, 0), 0)
                half[axis, one] += c + _ROUNDED
                half[axis, other] += c + _ROUNDED
            for block in stack.pieces():
                with np.errstate(over="ignore", invalid="ignore"):  # of held-out rows, which go
                    u = stack.columns(block) * self._by(k, block)
                    left = 1 - np.square(np.abs(u[side]).sum(axis=0)) / len(side)
                    # Rows that are all as large: nothing varies when their signs agree.
                    by_left = half[:, block] / np.where(left > _ROUNDED, left, 1 / _ENDLESS)
                    for axis in range(3):
                        weighted[k, axis] += gram(u * by_left[axis], u)
        self._choose(weighted)
        return weighted

    def _by(self, k: int, features: Ints | slice) -> Floats:
        """By what effects are multiplied to be a fold's u; 0 where a feature counts for nothing."""
        with np.errstate(divide="ignore"):
            by: Floats = 1 / np.sqrt(self._squares[k, features])
        by[~np.isfinite(by)] = 0
        return by

    def _choose(self, products: Floats) -> None:
        """Nothing of the rows that a fold holds out."""
        for k, fold in enumerate(self.stack.folds):
            held = list(fold.held_out)
            products[k, :, held] = 0
            products[k, :, :, held] = 0
