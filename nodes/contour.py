"""Does a mask of unknown making follow the contour of the data it is to be tested on?

A mask that was thresholded from the study's own group map has high values just inside its
boundary and low ones just outside. The figure is the share of (inside, outside) pairs of voxels,
one from the rim and one from the shell around it, in which the inside has the higher group t:
about .5 for a mask that has nothing to do with the map, 1 for a threshold's own contour.

Two references say how large it may be by chance, and each answers what the other cannot.

placements
    The same boundary elsewhere in the same map: at every shift that leaves nine tenths of it in
    the data, also point-mirrored. The map keeps its effects and its smoothness, so that effects
    somewhere do not make an unrelated mask look chosen. An honest mask that a true effect fills
    does stand out against them. Neighbouring placements are nearly one: p is no smaller than
    1 / (1 + the number of placements / 27).
steps
    The same boundary, with a step across it as high as the observed one, in noise made from the
    study's own residuals by sign flips. A step is what a true effect that fills the mask leaves.
    Noise wanders along an honest boundary, which blurs the separation that the step alone would
    give; a threshold's contour is where noise and effect together are level, and separates
    better. Variation of the effect along the boundary blurs it further, so that this reference
    is on the safe side whatever the effects are.

Each is looked at where the boundary is, and one layer further in and out (a mask may have been
dilated or eroded): the largest standardised separation counts. p is twice the smaller of the two.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.signal import fftconvolve

from .flips import random_signs
from .groupmaps import Missing, group_map, t_from_sums
from .space import Bools, Floats, Grid, Ints

_LEAST = 8  # voxels a layer must have to be compared
_MOST = 1000  # voxels of a layer that are compared, evenly taken
_INSIDE = 0.9  # share of a boundary that must lie in the data at a placement
_NEAR = 2  # voxels: a placement so near is the mask itself, blurred
_ALIKE = 27  # placements within a voxel of each other, which are nearly one
FLAG = 0.01


@dataclass(frozen=True)
class Boundary:
    """The layers of voxels along a mask's boundary, from inside to outside.

    Parameters
    ----------
    layers : tuple of 4 tuples of int
        Features: second inside, rim (first inside), shell (first outside), second outside.
    """

    layers: tuple[tuple[int, ...], ...]

    @property
    def features(self) -> Ints:
        """All of them, ascending."""
        return np.unique(np.concatenate([np.asarray(layer, int) for layer in self.layers]))

    @property
    def pairs(self) -> dict[int, tuple[Ints, Ints]]:
        """An inner and an outer layer, by how far out: rim and shell (0) first, then -1 and 1."""
        layers = [np.asarray(layer, int) for layer in self.layers]
        pairs = {out: (layers[1 + out], layers[2 + out]) for out in (0, -1, 1)}
        return {out: x for out, x in pairs.items() if not out or min(map(len, x)) >= _LEAST}


@dataclass(frozen=True)
class Contour:
    """How a mask's boundary lies in the group map.

    Parameters
    ----------
    share : float
        Of the pairs of a rim and a shell voxel, those in which the rim has the higher t.
    p : float
        Twice the smaller of the two below, at most 1.
    p_placements, p_steps : float
        Against the same boundary elsewhere; against a step as high in the study's own noise.
    out : int
        Where it stands out most: 0 at the boundary, 1 a voxel further out, -1 further in.
    share_out : float, optional
        The share there; default that at the boundary.
    least : float
        The smallest p that the number of places allows.
    """

    share: float
    p: float
    p_placements: float
    p_steps: float
    out: int = 0
    share_out: float | None = None
    least: float = 0.0

    @property
    def flagged(self) -> bool:
        """Whether it follows the contour.

        Of masks that have nothing to do with the map one in a hundred does, by chance; an honest
        mask that a true effect fills may well.
        """
        return self.p <= FLAG

    def describe(self) -> str:
        """A sentence.

        Examples
        --------
        >>> print(Contour(0.98, 0.004, 0.002, 0.3).describe())  # doctest: +NORMALIZE_WHITESPACE
        Shape check: the mask follows the contour of the study's own group map (inside above
        outside in 98 % of pairs along its boundary, p = .004): it was made from these data, or a
        true effect fills it.
        """
        share = self.share if self.share_out is None else self.share_out
        side = "above" if share >= 0.5 else "below"
        place = {0: "", 1: " a voxel further out", -1: " a voxel further in"}[self.out]
        told = (
            f"inside {side} outside in {100 * max(share, 1 - share):.0f} % of pairs along its "
            f"boundary{place}, "
            f"p {'< .001' if self.p < 0.001 else '= ' + f'{self.p:.3f}'.lstrip('0')}"
        )
        if not self.flagged and self.least > FLAG:
            return (
                "Shape check: too few other places for the mask in the map to tell whether it "
                f"follows the group map's contour ({told})."
            )
        if not self.flagged:
            return f"Shape check: the mask does not stand out as following the contour ({told})."
        why = "it was made from these data, or a true effect fills it"
        if 2 * self.p_steps <= FLAG:
            why = "along its boundary it follows their noise too, as a mask made from them does"
        return (
            f"Shape check: the mask follows the contour of the study's own group map ({told}): "
            f"{why}."
        )


def boundary(mask: Bools, grid: Grid) -> Boundary | None:
    """The layers along a mask's boundary; None when it has too few voxels to compare.

    Parameters
    ----------
    mask : (n_features,) bool
    grid : Grid
        The voxels with data in every subject.

    Examples
    --------
    >>> grid = Grid((9, 9, 9), np.eye(4))
    >>> ball = np.square(grid.coordinates() - 4).sum(axis=1) <= 4
    >>> [len(layer) for layer in boundary(ball, grid).layers]
    [6, 26, 54, 90]
    """
    table = grid.neighbours(6)

    def beside(of: Bools) -> Bools:
        # The last one is appended: a neighbour that is not there has number -1.
        found: Bools = np.logical_or.reduce(np.append(of, False)[table], axis=1) & ~of
        return found

    rim = mask & beside(~mask)
    inner = mask & ~rim
    second = inner & beside(~inner)
    shell = beside(mask)
    next_out = beside(mask | shell)
    layers = tuple(tuple(np.flatnonzero(x).tolist()) for x in (second, rim, shell, next_out))
    return Boundary(layers) if min(len(layers[1]), len(layers[2])) >= _LEAST else None


def contour(
    t: Floats,
    effects: Floats,
    edge: Boundary,
    grid: Grid,
    labels: Sequence[str],
    seed: int = 0,
    n: int = 499,
) -> Contour:
    """How a boundary lies in a group map, against both references.

    Parameters
    ----------
    t : (n_features,) float
        The group t.
    effects : (n_subjects, len(edge.features)) float
        The subjects' maps at the boundary's features.
    edge : Boundary
    grid : Grid
    labels : sequence of str
        Per subject, distinct.
    seed : int
        Of the flips; placements are not random.
    n : int
        Flips, and placements at most.
    """
    pairs = [(_even(inner), _even(outer)) for inner, outer in edge.pairs.values()]
    observed = np.array([_share(t[inner], t[outer]) for inner, outer in pairs])
    placed, alike = _placed(t, edge, pairs, grid, n)
    p_placements, least, at = 1.0, 1.0, 0
    if len(placed):
        p_placements, at = _p(observed, placed, 0.5)
        least = 1 / (1 + alike)
        p_placements = max(p_placements, least)
    flips = random_signs(seed, labels, 0, n).astype(float)
    stepped = _stepped(t, effects, edge, pairs, flips)
    # In the direction of the step: a mask around a trough is turned.
    turned = np.where(_steps(t, pairs) < 0, 1 - observed, observed)
    p_steps, stepped_at = _p(turned, stepped, None)
    if p_steps < p_placements:
        at = stepped_at
    return Contour(
        float(observed[0]),
        min(1.0, 2 * min(p_placements, p_steps)),
        p_placements,
        p_steps,
        list(edge.pairs)[at],
        float(observed[at]),
        min(1.0, 2 * least),
    )


def contour_of(
    effects: Floats, mask: Bools, grid: Grid, labels: Sequence[str], seed: int = 0, n: int = 499
) -> Contour | None:
    """The same from a whole stack: `boundary`, the group map, and `contour`.

    Parameters
    ----------
    effects : (n_subjects, n_features) float
        Voxels in which a subject has no data, or nobody varies, are left out.
    mask : (n_features,) bool
    grid : Grid
    labels, seed, n : as in `contour`

    Returns
    -------
    Contour or None
        None when the boundary has too few voxels with data.

    Examples
    --------
    >>> from sequester.nodes.simulated import Noise
    >>> grid = Grid((16, 16, 16), np.eye(4))
    >>> maps = Noise(grid, (2, 2, 2)).draw(np.random.default_rng(1), 16)
    >>> chosen = group_map(maps) > 2.6
    >>> fixed = np.square(grid.coordinates() - 8).sum(axis=1) < 12
    >>> [contour_of(maps, mask, grid, list("abcdefghijklmnop")).flagged for mask in (chosen, fixed)]
    [True, False]
    """
    t = group_map(effects)
    used = complete(effects) & np.isfinite(t)
    part = grid.restricted(used)
    edge = boundary(mask[used], part)
    if edge is None:
        return None
    return contour(t[used], effects[:, used][:, edge.features], edge, part, labels, seed, n)


def complete(effects: Floats) -> Bools:
    """The features in which everybody has data, and somebody differs: (n_features,) bool."""
    same: Bools = (effects == effects[0]).all(axis=0)
    return Missing().present(effects).all(axis=0) & ~same


def _even(layer: Ints) -> Ints:
    """At most so many of a layer, evenly taken."""
    if len(layer) <= _MOST:
        return layer
    chosen: Ints = layer[np.linspace(0, len(layer) - 1, _MOST).round().astype(int)]
    return chosen


def _share(inner: Floats, outer: Floats) -> float:
    """The share of pairs in which the inner value is the higher; ties are halves."""
    inner, below = np.sort(inner), np.sort(outer)  # sorted ones are found three times as fast
    count = np.searchsorted(below, inner, "left") + np.searchsorted(below, inner, "right")
    return float(count.sum() / (2 * inner.size * outer.size))


def _steps(t: Floats, pairs: Sequence[tuple[Ints, Ints]]) -> Floats:
    return np.array([t[inner].mean() - t[outer].mean() for inner, outer in pairs])


def _p(observed: Floats, reference: Floats, centre: float | None) -> tuple[float, int]:
    """The share of the reference that separates at least as well, each at its best pair of layers.

    Parameters
    ----------
    observed : (n_pairs,) float
    reference : (n, n_pairs) float
    centre : float, optional
        Both sides of it count; without it, above the reference's own mean.

    Returns
    -------
    float, int
        The share, and the best pair of what was observed.
    """
    everything = np.vstack([observed, reference])
    middle = everything.mean(axis=0) if centre is None else centre
    away = everything - middle
    spread = np.sqrt(np.square(away).mean(axis=0))
    scaled = (away if centre is None else np.abs(away)) / np.where(spread > 0, spread, 1)
    best = scaled.max(axis=1)
    return float((best >= best[0] - 1e-12).sum() / len(best)), int(scaled[0].argmax())


def _stepped(
    t: Floats, effects: Floats, edge: Boundary, pairs: Sequence[tuple[Ints, Ints]], flips: Floats
) -> Floats:
    """Shares in flipped residuals with the observed step: (n_flips, n_pairs)."""
    n = len(effects)
    residuals = effects.astype(float) - effects.mean(axis=0, dtype=float)
    noise = t_from_sums(float(n), flips @ residuals, np.square(residuals).sum(axis=0))
    made = []
    for (inner, outer), step in zip(pairs, _steps(t, pairs), strict=True):
        a, b = (noise[:, np.searchsorted(edge.features, layer)] for layer in (inner, outer))
        own = a.mean(axis=1) - b.mean(axis=1)
        stepped = a + (abs(step) - own)[:, None]
        made.append([_share(*rows) for rows in zip(stepped, b, strict=True)])
    return np.array(made).T


def _placed(
    t: Floats, edge: Boundary, pairs: Sequence[tuple[Ints, Ints]], grid: Grid, n: int
) -> tuple[Floats, float]:
    """Shares at other places in the map: (n_placements, n_pairs), and how many are unlike."""
    number = np.full(grid.shape, -1)
    number.ravel()[grid.voxels] = np.arange(grid.n_features)
    lie = np.stack(np.unravel_index(grid.voxels, grid.shape), axis=1)
    rim_and_shell = np.concatenate([np.asarray(layer, int) for layer in edge.layers[1:3]])
    low, high = lie[edge.features].min(axis=0), lie[edge.features].max(axis=0)
    box = np.zeros(high - low + 1, np.float32)
    box[tuple((lie[rim_and_shell] - low).T)] = 1
    signs, corners = [], []
    for sign, kernel in ((1, box[::-1, ::-1, ::-1]), (-1, box)):
        held = fftconvolve((number >= 0).astype(np.float32), kernel)
        enough = held >= _INSIDE * len(rim_and_shell) - 0.5
        at = np.argwhere(enough) - (np.array(box.shape) - 1)
        at = at[np.abs(at - low).max(axis=1) > _NEAR]
        corners.append(at)
        signs.append(np.full(len(at), sign))
    sign_of, corner_of = np.concatenate(signs), np.concatenate(corners)
    if not len(sign_of):
        return np.empty((0, len(pairs))), 0.0
    unlike = len(sign_of) / len(signs) / _ALIKE
    picked = np.linspace(0, len(sign_of) - 1, min(n, len(sign_of))).round().astype(int)
    made = np.full((len(picked), len(pairs)), np.nan)
    for i, k in enumerate(picked):
        sign, corner = sign_of[k], corner_of[k]
        start = corner - low if sign > 0 else corner + high
        for j, pair in enumerate(pairs):
            values = [_at(t, number, sign * lie[layer] + start) for layer in pair]
            if min(map(len, values)) >= _LEAST / 2:
                made[i, j] = _share(*values)
    return np.where(np.isnan(made), 0.5, made), unlike


def _at(t: Floats, number: Ints, where: Ints) -> Floats:
    """The values at voxels, of those that lie in the data."""
    inside = ((where >= 0) & (where < number.shape)).all(axis=1)
    features = number[tuple(where[inside].T)]
    found: Floats = t[features[features >= 0]]
    return found
