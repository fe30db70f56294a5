"""The loops that a lab would write: SciPy's t-test once per fold, and once per fold and flip.

Arithmetic is in the type of the maps. What a rule needs of the grid alone (neighbours,
coordinates) is made beforehand, outside of any clock. Formulas of one number (the height that
goes with so many resels) are the project's; which maps they are given is not.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from scipy import ndimage, stats
from sequester.nodes.controlled import Controlled
from sequester.nodes.familywise import FlipPlan
from sequester.nodes.masks import Cluster, MaskRule, PeakSphere, Strongest, Threshold
from sequester.nodes.randomfield import ClusterSizes, height_threshold, lattice, resels
from sequester.nodes.space import Grid

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


class Loop:
    """A rule, leave-one-subject-out, fold by fold.

    Parameters
    ----------
    rule : MaskRule
    space : Grid
    """

    def __init__(self, rule: MaskRule, space: Grid) -> None:
        self.rule, self.space = rule, space
        self.height: Controlled | None = getattr(rule, "control", None)
        self.extent: Controlled | None = getattr(rule, "extent", None)
        self.mm, self.cells = space.coordinates(), lattice(space)
        back = space.neighbours(6)[:, :3].T
        self.pairs = [(np.flatnonzero(before >= 0), before[before >= 0]) for before in back]
        # Per fold, of controls by flips.
        self.settled: list[float] = []

    @property
    def by_flips(self) -> Controlled | None:
        """The control whose threshold is settled by flips, once for each fold."""
        return next((c for c in (self.height, self.extent) if c and c.control[:3] == "max"), None)

    def settle(self, x: np.ndarray, labels: list[str]) -> None:
        """Find every fold's threshold by flips, if that is how the rule has it."""
        if self.by_flips is None:
            return
        control = self.by_flips
        plan = FlipPlan(tuple(labels), control.n_flips, control.seed)
        assert not plan.exact
        signs = np.concatenate([some for _, some in plan.signs(100)])
        found = np.array([self.extremes(x, one) for one in signs])
        self.settled = [plan.critical(of_fold, control.level) for of_fold in found.T]

    def extremes(self, x: np.ndarray, signs: np.ndarray) -> list[float]:
        """What one of these flips gives: each fold's highest t, or the size of its largest."""
        flipped, found = x * signs.astype(x.dtype)[:, None], []
        for selection in without_each(flipped):
            t = stats.ttest_1samp(selection, 0).statistic
            if self.extent is None:
                found.append(float(t.max()))
            else:
                _, sizes = self.clusters(t > self.critical(t, selection, -1))
                found.append(float(sizes.max(initial=0)))
        return found

    def one_flip(self, x: np.ndarray, signs: np.ndarray) -> tuple[np.ndarray, list[float]]:
        """The fold masks and held-out values of the whole procedure under one choice of signs."""
        flipped = x * signs.astype(x.dtype)[:, None]
        masks = np.empty(x.shape, bool)
        for i, selection in enumerate(without_each(flipped)):
            masks[i] = self.mask_of(stats.ttest_1samp(selection, 0).statistic, selection, i)
        return masks, [
            float(row[mask].mean()) if mask.any() else 0.0
            for row, mask in zip(flipped, masks, strict=True)
        ]

    def mask_of(self, t: np.ndarray, selection: np.ndarray, fold: int) -> np.ndarray:
        """The region of one fold."""
        rule = self.rule
        if isinstance(rule, Strongest | PeakSphere):
            values = t if rule.map_kind == "t" else selection.mean(axis=0)
            if isinstance(rule, PeakSphere):
                apart = np.linalg.norm(self.mm - self.mm[values.argmax()], axis=1)
                return apart <= rule.radius + 1e-6
            mask = np.zeros(len(t), bool)
            k = rule.k or int(np.ceil(rule.fraction * len(t)))
            mask[np.argpartition(values, -k)[-k:]] = True
            return mask
        assert isinstance(rule, Threshold | Cluster)
        above = t > self.critical(t, selection, fold)
        if isinstance(rule, Threshold):
            return above
        cluster, sizes = self.clusters(above)
        big = sizes >= max(rule.min_size, self.least_size(selection, fold))
        if not big.any():
            return np.zeros_like(above)
        merit = np.where(big, sizes, 0)
        if rule.pick == "peak":
            peaks = np.full(len(sizes), -np.inf)
            np.maximum.at(peaks, cluster[above] - 1, t[above])
            merit = np.where(big, peaks, -np.inf)
        return cluster == 1 + merit.argmax()

    def critical(self, t: np.ndarray, selection: np.ndarray, fold: int) -> float:
        """What t must exceed."""
        rule, df = self.rule, len(selection) - 1
        assert isinstance(rule, Threshold | Cluster)
        if self.height is None:
            return float(stats.t.isf(rule.p, df))
        control, level = self.height.control, self.height.level
        if control == "bonferroni":
            return float(stats.t.isf(level / len(t), df))
        if control == "max-t":
            return self.settled[fold]
        if control == "random-field":
            region = resels(self.cells, self.fwhm(selection))
            return height_threshold(region, df, level, len(t))
        p = stats.t.sf(t, df)
        passing = stats.false_discovery_control(p) <= level
        return float(np.nextafter(t[passing].min(), -np.inf)) if passing.any() else np.inf

    def least_size(self, selection: np.ndarray, fold: int) -> float:
        """What the size of a cluster must be at least."""
        if self.extent is None:
            return 0
        if self.extent.control == "max-cluster":
            return self.settled[fold] + 1
        assert isinstance(self.rule, Cluster)
        df, (a, b, c) = len(selection) - 1, self.fwhm(selection)
        height = float(stats.t.isf(self.rule.p, df))
        sizes = ClusterSizes(selection.shape[1], (a, b, c), height, df)
        return sizes.critical_size(self.extent.level)

    def clusters(self, above: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Which cluster each feature is in, from 1; and their sizes: by `scipy.ndimage`."""
        cluster, n_clusters = ndimage.label(
            np.ascontiguousarray(self.space.filled(above)), EIGHTEEN
        )
        inside = cluster[self.space.filled(np.ones_like(above))]
        return inside, np.bincount(inside, minlength=n_clusters + 1)[1:]

    def fwhm(self, selection: np.ndarray) -> np.ndarray:
        """(3,) of the residuals' noise, in voxels (Kiebel et al. 1999, NeuroImage 10:756-766)."""
        residuals = selection - selection.mean(axis=0)
        residuals /= np.sqrt(np.square(residuals).sum(axis=0))
        nu = len(selection) - 1
        rough = [
            np.square(residuals[:, here] - residuals[:, before]).sum() / len(here)
            for here, before in self.pairs
        ]
        return np.sqrt(-2 * np.log(2) / np.log(1 - (nu - 2) / (nu - 1) * np.array(rough) / 2))
