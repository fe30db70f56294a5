"""Curves as an SVG file: the same bytes every time, readable on light and on dark."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

# Told apart by colour-blind eyes too, and by their dashes in print; what each is in the dark.
_COLOURS = {
    "#0b5fa5": "#6db9f2", "#b34700": "#ff9e5e", "#00694e": "#3fd0a3",
    "#9c2f77": "#f08fc8", "#5b5b5b": "#b8b8b8", "#7a6000": "#e0c341",
}  # fmt: skip
_DASHES = ("-", (0, (5, 2)), (0, (1, 1.4)), (0, (6, 2, 1, 2)), (0, (3, 3)), (0, (9, 2.5)))


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
    >>> "d = 0.5" in made, "prefers-color-scheme: dark" in made
    (True, True)
    """
    # Here, so that commands which draw nothing start without the library.
    from matplotlib.figure import Figure
    from matplotlib.layout_engine import ConstrainedLayoutEngine
    from matplotlib.ticker import LogLocator, MaxNLocator, NullFormatter, StrMethodFormatter

    from .report.drawing import INK, LINE, alone, drawing

    with drawing():
        layout = ConstrainedLayoutEngine(w_pad=0.12, h_pad=0.12)
        figure = Figure(figsize=(8.2, 4.2), layout=layout)
        axes = figure.add_subplot()
        axes.grid(color=LINE, linewidth=0.8)
        axes.set_axisbelow(True)
        for i, curve in enumerate(curves):
            again = i + i // len(_COLOURS)  # a colour that comes again has another dash
            axes.errorbar(
                curve.x,
                curve.y,
                curve.error or None,
                label=curve.name,
                color=list(_COLOURS)[i % len(_COLOURS)],
                linestyle=_DASHES[again % len(_DASHES)],
                marker="o" if curve.error else "",
                markersize=4.5,
                gid=f"curve{i}",
                clip_on=False,
            )
        axes.xaxis.set_major_locator(MaxNLocator(integer=True))  # subjects are whole
        if log:
            axes.set_xscale("log")
            axes.xaxis.set_major_locator(LogLocator(subs=(1, 2, 5)))
            axes.xaxis.set_major_formatter(StrMethodFormatter("{x:g}"))
            axes.xaxis.set_minor_formatter(NullFormatter())
        axes.set_ylim(0, max(most, axes.get_ylim()[1]))
        axes.set_title(title, loc="left", fontweight="bold", color=INK)
        axes.set_xlabel(x_label)
        axes.set_ylabel(y_label)
        axes.legend(loc="upper left", bbox_to_anchor=(1.01, 1.0), frameon=False, handlelength=3.2)
        return alone(figure, title, _COLOURS)
