"""How figures look and how they are kept: an SVG and a PNG for a paper, an SVG for the page.

One drawing serves both. In the page the colours become the page's own, so that they follow light
and dark, and styles become attributes, which the page's content-security policy lets pass.
"""

from __future__ import annotations

import io
import re
import xml.etree.ElementTree as ET
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import matplotlib as mpl
from matplotlib.figure import Figure

from ...nodes.images import write_bytes

# Of the page in light; each is a variable of page.css, by which it follows the reader's theme.
INK, MUTED, LINE, PAPER = "#1b2430", "#59636f", "#d8d3c8", "#fdfcf9"
CHOSEN, HELD, BIASED = "#2b5f8c", "#b4530f", "#8a2b6b"
_VARIABLES = {
    INK: "ink", MUTED: "muted", LINE: "line", PAPER: "paper",
    CHOSEN: "chosen", HELD: "held", BIASED: "biased",
}  # fmt: skip
# What a file of its own shows instead in the dark: those of page.css.
_DARK = {
    INK: "#ece8df", MUTED: "#aab2bc", LINE: "#3a424c", PAPER: "#14191f",
    CHOSEN: "#86b7df", HELD: "#f2a661", BIASED: "#e69bcb",
}  # fmt: skip
_STYLE: Any = {
    "svg.hashsalt": "sequester",
    "svg.fonttype": "none",
    "text.parse_math": False,  # a label may hold a dollar sign
    "axes.unicode_minus": True,
    "font.family": "DejaVu Sans",
    "font.size": 9.0,
    "axes.labelsize": 9.0,
    "axes.titlesize": 9.5,
    "xtick.labelsize": 8.5,
    "ytick.labelsize": 8.5,
    "text.color": INK,
    "axes.labelcolor": INK,
    "axes.edgecolor": MUTED,
    "xtick.color": MUTED,
    "ytick.color": MUTED,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "axes.facecolor": "none",
    "figure.facecolor": PAPER,
    "savefig.facecolor": PAPER,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.linewidth": 0.8,
    "path.simplify": False,
}
_SVG, _LINK = "http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"
_DPI = 200


@dataclass
class Drawn:
    """A figure that was drawn.

    Parameters
    ----------
    name : str
        Of its files, without ending.
    figure : Figure
    says : str
        What it shows, for those who do not see it.
    titles : mapping of group id to sequence of str
        What each mark of a group stands for; shown where the pointer rests.
    """

    name: str
    figure: Figure
    says: str
    titles: Mapping[str, Sequence[str]] = field(default_factory=dict)


@contextmanager
def drawing() -> Iterator[None]:
    """Draw and save inside this block: the house style, whatever the user's settings are."""
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams.update(_STYLE)
        yield


def saved(drawn: Drawn, folder: Path) -> str:
    """Write a figure as SVG and PNG, and return the SVG for the page.

    Parameters
    ----------
    drawn : Drawn
    folder : Path
        Exists.

    Returns
    -------
    str
        An ``<svg>`` element without styles, scripts or references outside itself.
    """
    svg, png = io.BytesIO(), io.BytesIO()
    drawn.figure.draw_without_rendering()
    drawn.figure.set_layout_engine("none")  # it is laid out: once is enough for both files
    drawn.figure.savefig(svg, format="svg", metadata={"Date": None, "Creator": None})
    drawn.figure.savefig(png, format="png", dpi=_DPI, metadata={"Software": None})
    write_bytes(folder / f"{drawn.name}.svg", svg.getvalue())
    write_bytes(folder / f"{drawn.name}.png", png.getvalue())
    return inline(svg.getvalue(), drawn.name, drawn.says, drawn.titles)


def inline(
    svg: bytes, name: str, says: str, titles: Mapping[str, Sequence[str]] | None = None
) -> str:
    """A figure's SVG as an element of the page.

    Parameters
    ----------
    svg : bytes
    name : str
        Put before every id: ids are one name space in a page.
    says : str
        Its text alternative.
    titles : mapping of group id to sequence of str, optional
    """
    ET.register_namespace("", _SVG)
    ET.register_namespace("xlink", _LINK)
    root = ET.fromstring(svg)
    for tag in ("metadata", "defs"):
        for found in root.findall(f"{{{_SVG}}}{tag}"):
            root.remove(found)
    for element in root.iter():
        _attributes(element, name)
    _background(root)
    for group, texts in (titles or {}).items():
        marks = root.find(f".//*[@id='{name}-{group}']")
        assert marks is not None, f"a group {group} was drawn"
        _titled(marks, texts)
    root.attrib.pop("width", None)
    root.attrib.pop("height", None)
    root.set("role", "img")
    root.set("aria-label", says)
    width = root.get("viewBox", "0 0 0 0").split()[2]
    root.set("class", f"figure w{round(float(width) / 36)}")
    text = ET.tostring(root, encoding="unicode")
    return re.sub(r"\s*\n\s*", " ", text)


def alone(figure: Figure, says: str, dark: Mapping[str, str] | None = None) -> str:
    """A figure as an SVG file of its own, which follows its reader's light and dark.

    Parameters
    ----------
    figure : Figure
        Drawn inside `drawing`, as this is called.
    says : str
        Its text alternative.
    dark : mapping of str to str, optional
        Of colours beside those of the house: what they become in the dark.

    Returns
    -------
    str
        The same bytes for the same figure. A viewer that knows no media queries shows the light.

    Examples
    --------
    >>> with drawing():
    ...     made = alone(Figure(figsize=(1, 1)), "nothing")
    >>> made.startswith("<svg"), "prefers-color-scheme: dark" in made
    (True, True)
    """
    kept = io.BytesIO()
    figure.savefig(kept, format="svg", metadata={"Date": None, "Creator": None})
    ET.register_namespace("", _SVG)
    ET.register_namespace("xlink", _LINK)
    root = ET.fromstring(kept.getvalue())
    for found in root.findall(f"{{{_SVG}}}metadata"):
        root.remove(found)
    root.set("role", "img")
    root.set("aria-label", says)
    title, style = ET.Element(f"{{{_SVG}}}title"), ET.Element(f"{{{_SVG}}}style")
    title.text = says
    rules = [
        f'[style*="{key}: {light}"] {{ {key}: {other} !important }}'
        for light, other in (_DARK | dict(dark or {})).items()
        for key in ("fill", "stroke")
    ]
    style.text = "\n".join(["@media (prefers-color-scheme: dark) {", *rules, "}"])
    root[:0] = [title, style]
    return ET.tostring(root, encoding="unicode") + "\n"


def _attributes(element: ET.Element, name: str) -> None:
    """Styles as attributes, colours as the page's, ids and references under the figure's name."""
    for part in (element.attrib.pop("style", "")).split(";"):
        key, _, value = part.partition(":")
        if value and key.strip() != "font-family":  # the page's own
            element.set(key.strip(), value.strip())
    for key, value in list(element.attrib.items()):
        if key == "id":
            element.set(key, f"{name}-{value}")
        elif value.startswith("url(#"):
            element.set(key, f"url(#{name}-{value[5:]}")
        elif key == f"{{{_LINK}}}href" and value.startswith("#"):
            element.set(key, f"#{name}-{value[1:]}")
        elif value in _VARIABLES:
            element.set(key, f"var(--{_VARIABLES[value]})")
        elif key == "transform":
            element.set(key, value.replace("rotate(-0 ", "rotate(0 "))


def _background(root: ET.Element) -> None:
    """The page's paper shows through instead of the figure's."""
    figure = root.find(f".//{{{_SVG}}}g[@id]")
    if figure is not None and len(figure) and (figure[0].get("id") or "").endswith("-patch_1"):
        figure.remove(figure[0])


def _titled(marks: ET.Element, texts: Sequence[str]) -> None:
    # Many marks are drawn as uses of one path, a few as paths of their own.
    found = list(marks.iter(f"{{{_SVG}}}use")) or list(marks.iter(f"{{{_SVG}}}path"))
    assert len(found) == len(texts), f"{len(found)} marks for {len(texts)} titles"
    for mark, text in zip(found, texts, strict=True):
        ET.SubElement(mark, f"{{{_SVG}}}title").text = text
