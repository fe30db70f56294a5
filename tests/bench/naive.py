"""The loops that a lab would write: SciPy's t-test once per fold, and once per fold and flip."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from scipy import ndimage, stats
from sequester.nodes.masks import Cluster, Threshold

EIGHTEEN = ndimage.generate_binary_structure(3, 2)


def without_each(x: np.ndarray) -> Iterator[np.ndarray]:
    """The selection side of every leave-one-out fold."""
    for i in range(len(x)):
        yield x[np.arange(len(x)) != i]


def plain_pass(x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """One mean/sd pass over a stack."""
    return x.mean(0), x.std(0, ddof=1)


def loop_of_plain(x: np.ndarray) -> None:
    """Every fold's mean and sd."""
    for selection in without_each(x):
        plain_pass(selection)


def loop_of_scipy(x: np.ndarray) -> np.ndarray:
    """(n_rows, n_features): every fold's t map."""
    return np.stack([stats.ttest_1samp(s, 0).statistic for s in without_each(x)])


def mask_of(t: np.ndarray, rule: Threshold | Cluster, inside: np.ndarray, n: int) -> np.ndarray:
    """The region of one t map, clusters by `scipy.ndimage`."""
    above = t > stats.t.isf(rule.p, n - 1)
    if not isinstance(rule, Cluster):
        return above
    volume = np.zeros(inside.shape, bool)
    volume[inside] = above
    cluster, n_clusters = ndimage.label(volume, EIGHTEEN)
    sizes = np.bincount(cluster.ravel(), minlength=n_clusters + 1)[1:]
    if not n_clusters or sizes.max() < rule.min_size:
        return np.zeros_like(above)
    return (cluster == 1 + sizes.argmax())[inside]


def one_flip(
    x: np.ndarray, signs: np.ndarray, rule: Threshold | Cluster, inside: np.ndarray
) -> list[float]:
    """The held-out values of the whole procedure under one choice of signs."""
    flipped = x * signs.astype(x.dtype)[:, None]
    values = []
    for i, selection in enumerate(without_each(flipped)):
        t = stats.ttest_1samp(selection, 0).statistic
        mask = mask_of(t, rule, inside, len(selection))
        values.append(float(flipped[i][mask].mean()) if mask.any() else 0.0)
    return values


def one_flip_float64(
    x: np.ndarray, signs: np.ndarray, rules: list[Threshold | Cluster], inside: np.ndarray
) -> list[tuple[np.ndarray, list[float]]]:
    """For each rule, the fold masks and held-out values, all in float64."""
    flipped = x.astype(np.float64) * signs[:, None]
    masks: list[list[np.ndarray]] = [[] for _ in rules]
    for selection in without_each(flipped):
        t = stats.ttest_1samp(selection, 0).statistic
        for of_rule, rule in zip(masks, rules, strict=True):
            of_rule.append(mask_of(t, rule, inside, len(selection)))
    return [
        (
            np.stack(of_rule),
            [
                float(row[m].mean()) if m.any() else 0.0
                for row, m in zip(flipped, of_rule, strict=True)
            ],
        )
        for of_rule in masks
    ]
