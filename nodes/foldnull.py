"""What noise alone does across folds: stability that means nothing, and t-tests gone wrong.

N subjects, k folds of m = N / k, independent features, a region of the features whose group
map passes p. Selection maps of two folds share most of their subjects, so their masks overlap
and their held-out values correlate although there is nothing to find.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy import stats

from .products import gram

Bools = npt.NDArray[np.bool_]


def dice(one: Bools, other: Bools) -> float:
    """Dice overlap of two masks, 2 |A and B| / (|A| + |B|); NaN when both are empty.

    Examples
    --------
    >>> a = np.array([1, 1, 1, 1, 0], bool); b = np.array([0, 0, 1, 1, 1], bool)
    >>> round(dice(a, b), 6)
    0.571429
    """
    total = int(one.sum()) + int(other.sum())
    return 2 * int((one & other).sum()) / total if total else float("nan")


def mean_dice(members: Bools) -> float:
    """Mean Dice over all pairs of masks; NaN when there is no pair with a feature.

    Parameters
    ----------
    members : (n_features, n_masks) bool
    """
    both = gram(members.T.astype(np.float32))
    size = np.diag(both)
    total = size[:, None] + size[None, :]
    upper = np.triu(total > 0, k=1)
    if not upper.any():
        return float("nan")
    return float((2 * both[upper] / total[upper]).mean())


def expected_dice(n_subjects: int, n_folds: int, p: float) -> float:
    """Dice of two folds' masks that noise alone gives: Phi2(-u, -u; (N-2m)/(N-m)) / p.

    For selection maps that are normal under the null; t maps of few subjects overlap less.

    Examples
    --------
    >>> round(expected_dice(20, 20, 0.01), 3)
    0.662
    """
    m = n_subjects / n_folds
    r = (n_subjects - 2 * m) / (n_subjects - m)
    u = stats.norm.isf(p)
    both = stats.multivariate_normal.cdf([-u, -u], mean=[0, 0], cov=[[1, r], [r, 1]])
    return float(both / p)


def variance_inflation(n_subjects: int, n_folds: int, p: float) -> float:
    """By what factor the variance of the mean of cross-fitted values exceeds the naive one.

    Examples
    --------
    >>> round(variance_inflation(20, 20, 0.01), 4)
    4.087
    """
    m = n_subjects / n_folds
    u = stats.norm.isf(p)
    shared = stats.norm.pdf(u * np.sqrt((n_subjects - m) / (n_subjects - 1.5 * m)))
    r = np.sqrt(m) / (2 * np.sqrt(np.pi)) * shared / (np.sqrt(n_subjects - 1.5 * m) * p)
    return float(1 + (n_folds - 1) * r)


def plain_t_false_positives(n_subjects: int, n_folds: int, p: float, alpha: float = 0.05) -> float:
    """How often a plain two-sided t-test of cross-fitted values rejects when nothing is there.

    Examples
    --------
    >>> round(plain_t_false_positives(20, 20, 0.01), 4)
    0.3553
    """
    vif = variance_inflation(n_subjects, n_folds, p)
    r = (vif - 1) / (n_subjects - 1)
    df = n_subjects - 1
    limit = stats.t.isf(alpha / 2, df)
    return float(2 * stats.t.sf(limit / np.sqrt(vif / (1 - r)), df))
