"""Figures of values: each subject's, with the estimate and the interval the plan allows."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
from matplotlib.figure import Figure

from .drawing import BIASED, CHOSEN, HELD, INK, LINE, MUTED, PAPER, Drawn
from .folder import Row, RunFolder, called, is_biased, number
from .words import estimate_cells, minus, p_cell, plain

Floats = npt.NDArray[np.floating]

_MOST_NAMES = 24  # characters of a label in a figure
_MOST_ROWS = 100  # labels to a figure
_CLOSE = 40  # more rows than this are set closer


def person_values(run: RunFolder, roi: str) -> dict[str, float]:
    """Each subject's value in a region: the mean of their runs, where these have masks."""
    found: dict[str, list[float]] = {}
    for row in run.values:
        value = number(row, "value")
        if row["roi"] == roi and value is not None:
            found.setdefault(str(row["sub"]), []).append(value)
    return {sub: float(np.mean(values)) for sub, values in found.items()}


def twin_of(run: RunFolder, row: Row) -> Row | None:
    """The exploratory value of the same maps by the same rule in the same search region.

    A look that found no region has none.
    """
    alike = ("search", "tested", "rule", "value", "scale", "null_value")
    return next(
        (
            other
            for other in run.tests
            if is_biased(other)
            and number(other, "estimate") is not None
            and not is_biased(row)
            and all(other[k] == row[k] for k in alike)
        ),
        None,
    )


def forest(rows: Sequence[Row], name: str, scale: str) -> Drawn:
    """Estimates and intervals of several tests, one below the other."""
    labels = [_forest_label(row) for row in rows]
    figure = _below_one_another(rows, labels, f"estimate and 95 % interval ({scale})")
    return Drawn(name, figure, f"Estimates with their intervals: {_told(rows, called)}.")


def family_forests(rows: Sequence[Row]) -> Iterator[Drawn]:
    """The labels of one region, on one axis; of many, so many to a figure."""
    ends = [x for row in rows for k in ("estimate", "interval_low", "interval_high")
            if (x := number(row, k)) is not None and np.isfinite(x)]  # fmt: skip
    if not ends:
        return
    room = 0.03 * (max(*ends, 0.0) - min(*ends, 0.0))
    limits = (min(*ends, 0.0) - room, max(*ends, 0.0) + room)
    parts = [rows[i : i + _MOST_ROWS] for i in range(0, len(rows), _MOST_ROWS)]
    for i, part in enumerate(parts, 1):
        of = "" if len(parts) == 1 else f"; part {i} of {len(parts)}"
        said = f"estimate and 95 % interval of each label ({part[0]['scale']}{of})"
        figure = _below_one_another(part, [_label(row) for row in part], said, limits)
        name = f"{part[0]['roi']}_labels" + ("" if len(parts) == 1 else f"_{i}")
        told = f"Estimates of the labels of {part[0]['roi']}{of}: {_told(part, _label)}."
        yield Drawn(name, figure, told)


def _label(row: Row) -> str:
    return str(row["parcel_name"] or row["parcel"])


def _told(rows: Sequence[Row], named: Callable[[Row], str]) -> str:
    return "; ".join(f"{named(row)} {', '.join(filter(None, estimate_cells(row)))}" for row in rows)


def _below_one_another(
    rows: Sequence[Row],
    labels: Sequence[str],
    x_label: str,
    limits: tuple[float, float] | None = None,
) -> Figure:
    """Estimates with their intervals, a line each; many are set closer."""
    close = len(rows) > _CLOSE
    step = 0.15 if close else 0.3
    figure = Figure(figsize=(6.6, 0.75 + step * len(rows)), layout="constrained")
    axes = figure.add_subplot()
    axes.axvline(0, color=MUTED, linewidth=0.9)
    for y, row in enumerate(rows):
        _interval(axes, row, y, 0.55 if close else 1.0)
    axes.set_yticks(range(len(rows)), [cut(label, 34) for label in labels])
    axes.set_ylim(len(rows) - 0.4, -0.6)
    if limits is not None:
        axes.set_xlim(limits)
    axes.tick_params(axis="y", length=0, labelsize=6.5 if close else 8.5)
    axes.spines["left"].set_visible(False)
    axes.set_xlabel(x_label)
    return figure


def _forest_label(row: Row) -> str:
    """A region's name; a comparison of groups says that it is a difference."""
    difference = " minus " in str(row["target"]).split(":")[0]
    return f"{called(row)} (difference)" if difference else called(row)


def _interval(axes: Any, row: Row, y: float, size: float = 1.0) -> None:
    value, low, high = (number(row, k) for k in ("estimate", "interval_low", "interval_high"))
    if low is not None and high is not None:
        axes.plot([low, high], [y, y], color=HELD, linewidth=2.2 * size, solid_capstyle="butt")
    if value is not None:
        axes.plot([value], [y], marker="D", markersize=6.5 * size, color=HELD,
                  markeredgecolor=INK, markeredgewidth=0.8 * size, linestyle="none")  # fmt: skip


def strip(run: RunFolder, row: Row, twin: Row | None = None) -> Drawn:
    """Each subject's value, the estimate and its interval; when asked, the biased twin below."""
    roi, values = str(row["roi"]), person_values(run, str(row["roi"]))
    other = person_values(run, str(twin["roi"])) if twin is not None else {}
    groups = _groups(run, row, values)
    n_strips = len(groups) + bool(other)
    figure = Figure(figsize=(5.4, 0.8 + 0.72 * n_strips), layout="constrained")
    axes = figure.add_subplot()
    axes.axvline(0, color=MUTED, linewidth=0.9)
    titles: dict[str, list[str]] = {}
    labels: list[str] = []
    y = 0.0
    for i, (group, subs) in enumerate(groups.items()):
        listed = [values[sub] for sub in subs]
        axes.scatter(listed, y - spread(listed), s=20, facecolor="none", edgecolor=CHOSEN,
                     linewidth=1.1, gid=f"points{i}")  # fmt: skip
        titles[f"points{i}"] = [f"sub-{sub}: {plain(values[sub])}" for sub in subs]
        if len(groups) > 1:
            axes.plot([np.mean(listed)] * 2, [y - 0.3, y + 0.3], color=INK, linewidth=1.5)
        labels.append(f"{cut(group, 14)}\nn = {len(subs)}")
        y += 1
    if len(groups) == 1:
        _interval(axes, row, 0.42)
    if twin is not None and other:
        listed = list(other.values())
        axes.scatter(listed, y - spread(listed), s=22, marker="s", facecolor="none",
                     edgecolor=BIASED, linewidth=1.1, gid="twin-points")  # fmt: skip
        titles["twin-points"] = [f"sub-{s}: {plain(v)} (biased)" for s, v in other.items()]
        mean = number(twin, "estimate")
        if mean is not None and np.isfinite(mean):
            axes.plot([mean], [y + 0.42], marker="X", markersize=8, color=BIASED,
                      linestyle="none", gid="twin-mean")  # fmt: skip
        labels.append("chosen and read\non the same: BIASED")
        y += 1
    axes.set_yticks(range(n_strips), labels)
    axes.set_ylim(n_strips - 0.3, -0.45)
    axes.tick_params(axis="y", length=0)
    axes.spines["left"].set_visible(False)
    axes.set_xlabel(f"value of each subject ({row['scale']})")
    estimate, interval = estimate_cells(row)
    said = f"{len(values)} subjects' values in {roi}; estimate {estimate}"
    said += f", 95 % interval {interval}" if interval else ""
    if twin is not None:
        said += f". Biased, chosen and read on the same data: {estimate_cells(twin)[0]}"
    name = f"{roi}_values" if twin is None else f"{roi}_values_beside_biased"
    return Drawn(name, figure, f"{said}.", titles)


def biased_strip(run: RunFolder, row: Row) -> Drawn:
    """The values of an exploratory region: points and their mean, no interval and no error bar."""
    roi, values = str(row["roi"]), person_values(run, str(row["roi"]))
    figure = Figure(figsize=(5.4, 1.5), layout="constrained")
    axes = figure.add_subplot()
    axes.axvline(0, color=MUTED, linewidth=0.9)
    listed = list(values.values())
    axes.scatter(listed, 0 - spread(listed), s=22, marker="s", facecolor="none",
                 edgecolor=BIASED, linewidth=1.1, gid="points")  # fmt: skip
    mean = number(row, "estimate")
    if mean is not None and np.isfinite(mean):
        axes.plot([mean], [0.42], marker="X", markersize=8, color=BIASED, linestyle="none")
    axes.set_yticks([0], [f"BIASED\nn = {len(values)}"])
    axes.set_ylim(0.7, -0.45)
    axes.tick_params(axis="y", length=0)
    axes.spines["left"].set_visible(False)
    axes.set_xlabel(f"value of each subject ({row['scale']})")
    titles = {"points": [f"sub-{sub}: {plain(v)} (biased)" for sub, v in values.items()]}
    said = f"Biased values of {len(values)} subjects in {roi}, mean {estimate_cells(row)[0]}."
    return Drawn(f"{roi}_biased", figure, said, titles)


def scatter(run: RunFolder, row: Row, score: str) -> Drawn | None:
    """Held-out values against the score they are correlated with, and what reliability allows."""
    roi, values = str(row["roi"]), person_values(run, str(row["roi"]))
    known = {str(line["sub"]): number(line, score) for line in run.wide if score in line}
    pairs = [(sub, x, values[sub]) for sub, x in known.items() if x is not None and sub in values]
    if not pairs:
        return None
    figure = Figure(figsize=(4.2, 3.2), layout="constrained")
    axes = figure.add_subplot()
    axes.scatter([x for _, x, _ in pairs], [y for _, _, y in pairs], s=20, facecolor="none",
                 edgecolor=CHOSEN, linewidth=1.1, gid="points")  # fmt: skip
    axes.set_xlabel(cut(score, 40))
    axes.set_ylabel(f"held-out value ({row['scale']})")
    estimate, interval = estimate_cells(row)
    told = f"r = {estimate}" + (f" [{interval}]" if interval else "")
    ceiling = number(row, "ceiling")
    if ceiling is not None:
        told += f"\nreliability allows at most {plain(ceiling, 2)}"
    axes.set_title(told, loc="left")
    titles = {
        "points": [f"sub-{s}: {cut(score)} {plain(x)}, value {plain(y)}" for s, x, y in pairs]
    }
    said = f"Held-out values in {roi} against {score}: {told}.".replace("\n", "; ")
    return Drawn(f"{roi}_score", figure, said, titles)


def flips(run: RunFolder, row: Row) -> Drawn | None:
    """The statistic under exchanges of the whole procedure, and as observed."""
    roi, t = str(row["roi"]), number(row, "t")
    mine = [one for one in run.flips if one["roi"] == roi]
    if not mine or t is None:
        return None
    low, high, count = (
        np.array([float(one[k] or 0) for one in mine]) for k in ("low", "high", "count")
    )
    figure = Figure(figsize=(4.2, 2.1), layout="constrained")
    axes = figure.add_subplot()
    width = high[0] - low[0]
    beyond = low + width / 2 >= t
    axes.bar(low, count, width, align="edge", color=LINE, edgecolor=MUTED, linewidth=0.5)
    axes.bar(low[beyond], count[beyond], width, align="edge", facecolor="none", edgecolor=HELD,
             linewidth=0.9, hatch="////")  # fmt: skip
    ends = [float(low[0]), float(high[-1])]
    # Far beyond all exchanges, the axis reaches out to what was observed.
    if np.isfinite(t):
        top = count.max() * 1.16
        axes.plot([t, t], [0, top], color=HELD, linewidth=1.8)
        ends += [t]
        left = t > (min(ends) + max(ends)) / 2
        axes.annotate(f"observed {minus(f'{t:.2f}')}", (t, top), color=INK,
                      ha="right" if left else "left", va="top", textcoords="offset points",
                      xytext=(-5 if left else 5, 0))  # fmt: skip
    room = 0.04 * (max(ends) - min(ends))
    axes.set_xlim(min(ends) - room, max(ends) + room)
    axes.set_ylim(0, count.max() * 1.18)
    axes.set_xlabel("t with nothing but noise, by exchanges")
    axes.set_ylabel("exchanges")
    shown = p_cell(row)
    said = f"{roi}: t of {row['n_flips']} exchanges, observed {t:.2f}, p {shown}."
    return Drawn(f"{roi}_flips", figure, said)


def stability(run: RunFolder, row: Row) -> Drawn | None:
    """How alike the fold masks are beside what noise gives; whose value moves the estimate most."""
    roi = str(row["roi"])
    dice, noise = number(row, "dice"), number(row, "noise_dice")
    moves = {
        str(one["sub"]): moved
        for one in run.values
        if one["roi"] == roi and (moved := number(one, "influence")) is not None
    }
    most = sorted(moves, key=lambda sub: (-abs(moves[sub]), sub))[:8]
    if dice is None and not most:
        return None
    figure = Figure(figsize=(5.4, 0.9 + 0.19 * max(len(most), 5)), layout="constrained")
    both = figure.subplots(1, 2, width_ratios=(1, 1.15))
    axes = both[0]
    axes.set_title("overlap of fold masks", loc="left")
    for y, (value, fill) in enumerate(((dice, CHOSEN), (noise, "none"))):
        if value is not None:
            axes.barh(y, value, 0.55, facecolor=fill, edgecolor=CHOSEN, linewidth=1.1)
            inside = value > 0.75
            axes.text(value + (-0.03 if inside else 0.03), y, f"{value:.2f}",
                      ha="right" if inside else "left", va="center",
                      color=PAPER if inside and fill != "none" else INK)  # fmt: skip
    axes.set_yticks([0, 1], ["found", "noise"])
    axes.set_ylim(1.6, -0.6)
    axes.set_xlim(0, 1)
    axes.set_xlabel("mean Dice of pairs")
    axes = both[1]
    axes.set_title("estimate without ...", loc="left")
    axes.axvline(0, color=MUTED, linewidth=0.9)
    for y, sub in enumerate(most):
        axes.plot([0, moves[sub]], [y, y], color=MUTED, linewidth=1)
        axes.plot([moves[sub]], [y], marker="o", markersize=4.5, color=CHOSEN, linestyle="none")
    axes.set_yticks(range(len(most)), [f"sub-{cut(sub, 10)}" for sub in most])
    axes.set_ylim(max(len(most), 1) - 0.4, -0.6)
    axes.set_xlabel("change of the estimate")
    axes.locator_params(axis="x", nbins=4)
    told = [] if dice is None else [f"overlap of fold masks {dice:.2f}"]
    told += [] if noise is None else [f"by noise alone {noise:.2f}"]
    told += [f"most influential sub-{most[0]}, {plain(moves[most[0]])}"] if most else []
    return Drawn(f"{roi}_stability", figure, f"{roi}: {'; '.join(told)}.")


def sensitivity(run: RunFolder, roi: str) -> Drawn | None:
    """The stated analysis and its declared variants: one look."""
    mine = [row for row in run.variants if row["roi"] == roi]
    if not mine:
        return None
    x_label = "estimate and 95 % interval; one look, none is to be picked"
    figure = _below_one_another(mine, [str(row["setting"]) for row in mine], x_label)
    told = _told(mine, lambda row: str(row["setting"]))
    return Drawn(f"{roi}_sensitivity", figure, f"Sensitivity of {roi}: {told}.")


def spread(values: Sequence[float]) -> Floats:
    """Offsets that keep points of a strip from covering one another, at most 0.3 up or down.

    Examples
    --------
    >>> spread([0.0, 0.0, 5.0]).round(2).tolist()
    [0.0, 0.1, 0.0]
    """
    order = np.argsort(values, kind="stable")
    made, near = np.zeros(len(values)), (np.ptp(values) if len(values) else 0) / 45
    steps = [0.0, 0.1, -0.1, 0.2, -0.2, 0.3, -0.3]
    placed: list[tuple[float, float]] = []
    for i in order:
        here = float(values[i])
        taken = [y for x, y in placed[-12:] if here - x < near or here == x]
        made[i] = next((step for step in steps if step not in taken), steps[len(taken) % 7])
        placed.append((here, made[i]))
    return made


def cut(text: str, most: int = _MOST_NAMES) -> str:
    """A text short enough for a figure.

    Examples
    --------
    >>> cut("Arbor"), cut("a" * 300, 6)
    ('Arbor', 'aaaaa…')
    """
    return text if len(text) <= most else text[: most - 1] + "\N{HORIZONTAL ELLIPSIS}"


def _groups(run: RunFolder, row: Row, values: dict[str, float]) -> dict[str, list[str]]:
    """The subjects by the groups that a region compares; all of them as one when it does not."""
    compare = run.region(str(row["roi"])).get("compare")
    if compare is None:
        at_once = row["plan"] in ("a-priori", "localizer", "orthogonal-contrast")
        return {"subjects" if at_once else "held out": list(values)}
    of = {str(line["sub"]): line.get(compare["column"]) for line in run.wide}
    names = (compare["first"], compare["second"])
    return {str(name): [sub for sub in values if of.get(sub) == name] for name in names}
