"""Curves as an SVG file: the same bytes every time, readable on light and on dark."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from html import escape

_WIDTH, _HEIGHT = 820, 420
_LEFT, _RIGHT, _TOP, _BOTTOM = 64, 270, 44, 56
# Told apart by colour-blind eyes too, and by their dashes in print.
_LIGHT = ("#0b5fa5", "#b34700", "#00694e", "#9c2f77", "#5b5b5b", "#7a6000")
_DARK = ("#6db9f2", "#ff9e5e", "#3fd0a3", "#f08fc8", "#b8b8b8", "#e0c341")
_DASHES = ("none", "8 4", "2 3", "10 3 2 3", "5 5", "14 4")


@dataclass(frozen=True)
class Curve:
    """One line of a figure.

    Parameters
    ----------
    name : str
    x, y : tuple of float
    error : tuple of float
        Half the height of a bar at each point, and a dot; without it the line alone is drawn.
    """

    name: str
    x: tuple[float, ...]
    y: tuple[float, ...]
    error: tuple[float, ...] = ()


def curves_svg(
    title: str,
    x_label: str,
    y_label: str,
    curves: Sequence[Curve],
    most: float = 0.0,
    *,
    log: bool = False,
) -> str:
    """A figure of curves over one pair of axes, y from 0 on.

    Parameters
    ----------
    title, x_label, y_label : str
    curves : sequence of Curve
        At least one, with at least one point each.
    most : float
        Where the y axis ends at the least.
    log : bool
        A logarithmic x axis.

    Returns
    -------
    str
        SVG, ending in a newline.

    Examples
    --------
    >>> made = curves_svg("Power", "n", "power", [Curve("d = 0.5", (10.0, 20.0), (0.3, 0.6))], 1)
    >>> made.count("<path"), "prefers-color-scheme: dark" in made
    (2, True)
    """
    xs = [x for curve in curves for x in curve.x]
    tops = [y + e for c in curves for y, e in zip(c.y, c.error or (0.0,) * len(c.y), strict=True)]
    low, high = min(xs), max(xs)
    if low == high:
        low, high = low / 2, high * 2
    x_ticks = [t for t in (_decades if log else _ticks)(low, high) if low <= t <= high]
    scale = math.log if log else float
    y_ticks = _ticks(0.0, max(most, *tops))
    top = y_ticks[-1]
    wide, tall = _WIDTH - _LEFT - _RIGHT, _HEIGHT - _TOP - _BOTTOM

    def at(x: float, y: float) -> tuple[float, float]:
        along = (scale(x) - scale(low)) / (scale(high) - scale(low))
        return _LEFT + along * wide, _TOP + tall - y / top * tall

    parts = [
        f'<text class="title" x="{_LEFT}" y="24">{escape(title)}</text>',
        f'<text x="{_LEFT + wide / 2:g}" y="{_HEIGHT - 14}" text-anchor="middle">'
        f"{escape(x_label)}</text>",
        f'<text x="18" y="{_TOP + tall / 2:g}" text-anchor="middle" '
        f'transform="rotate(-90 18 {_TOP + tall / 2:g})">{escape(y_label)}</text>',
    ]
    for tick in y_ticks:
        _, y = at(low, tick)
        parts.append(
            f'<line class="grid" x1="{_LEFT}" x2="{_LEFT + wide}" y1="{y:.2f}" y2="{y:.2f}"/>'
        )
        parts.append(f'<text x="{_LEFT - 8}" y="{y + 4:.2f}" text-anchor="end">{tick:g}</text>')
    for tick in x_ticks:
        x, y = at(tick, 0)
        parts.append(f'<line class="grid" x1="{x:.2f}" x2="{x:.2f}" y1="{_TOP}" y2="{y:.2f}"/>')
        parts.append(f'<text x="{x:.2f}" y="{y + 18:.2f}" text-anchor="middle">{tick:g}</text>')
    for i, curve in enumerate(curves):
        kind = f"c{i % len(_LIGHT)}"
        points = [at(x, y) for x, y in zip(curve.x, curve.y, strict=True)]
        line = "M" + " L".join(f"{x:.2f} {y:.2f}" for x, y in points)
        parts.append(f'<path class="{kind}" d="{line}"/>')
        for (x, y), error in zip(points, curve.error, strict=False):
            half = error / top * tall
            parts.append(f'<path class="bar {kind}" d="M{x:.2f} {y - half:.2f} V{y + half:.2f}"/>')
            parts.append(f'<circle class="{kind}" cx="{x:.2f}" cy="{y:.2f}" r="3.5"/>')
        x, y = _LEFT + wide + 16, _TOP + 10 + 22 * i
        parts.append(f'<path class="{kind}" d="M{x} {y} H{x + 30}"/>')
        parts.append(f'<text x="{x + 38}" y="{y + 4}">{escape(curve.name)}</text>')
    return "\n".join(
        [
            f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {_WIDTH} {_HEIGHT}" '
            f'width="{_WIDTH}" height="{_HEIGHT}" role="img" aria-labelledby="title">',
            f'<title id="title">{escape(title)}</title>',
            f"<style>\n{_style()}\n</style>",
            f'<rect class="paper" width="{_WIDTH}" height="{_HEIGHT}"/>',
            *parts,
            "</svg>\n",
        ]
    )


def _style() -> str:
    def colours(paper: str, ink: str, grid: str, lines: Sequence[str]) -> list[str]:
        return [
            f".paper {{ fill: {paper} }} text {{ fill: {ink} }} .grid {{ stroke: {grid} }}",
            *(
                f".c{i} {{ stroke: {line} }} circle.c{i} {{ fill: {line} }}"
                for i, line in enumerate(lines)
            ),
        ]

    return "\n".join(
        [
            "text { font: 13px system-ui, sans-serif }",
            "text.title { font-weight: 600; font-size: 15px }",
            "path { fill: none; stroke-width: 2.2 } .grid { stroke-width: 1 }",
            *(f"path.c{i} {{ stroke-dasharray: {dash} }}" for i, dash in enumerate(_DASHES)),
            "path.bar { stroke-dasharray: none; stroke-width: 1.4 }",
            *colours("#ffffff", "#1c1c1c", "#dddddd", _LIGHT),
            "@media (prefers-color-scheme: dark) {",
            *colours("#161616", "#eeeeee", "#3d3d3d", _DARK),
            "}",
        ]
    )


def _ticks(low: float, high: float) -> list[float]:
    """Round numbers from at or below `low` to at or above `high`, about six."""
    raw = (high - low) / 5
    size = 10 ** math.floor(math.log10(raw))
    step = next(m * size for m in (1, 2, 2.5, 5, 10) if m * size >= raw * (1 - 1e-9))
    first, last = math.floor(low / step + 1e-9), math.ceil(high / step - 1e-9)
    return [round(i * step, 10) for i in range(first, last + 1)]


def _decades(low: float, high: float) -> list[float]:
    """1, 2 and 5 times the powers of ten from at or below `low` to at or above `high`."""
    first, last = math.floor(math.log10(low)), math.ceil(math.log10(high))
    return [m * 10.0**i for i in range(first, last + 1) for m in (1, 2, 5)]
