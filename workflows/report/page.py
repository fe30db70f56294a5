"""One self-contained HTML file from a run's folder; figures and the methods paragraph beside it.

The page asks the network for nothing: its content-security policy forbids all requests, and lets
only its own style and script through, by their digests. Everything a user has named is escaped.
"""

from __future__ import annotations

import json
import re
from base64 import b64encode
from collections.abc import Iterator, Mapping, Sequence
from hashlib import sha256
from importlib.resources import files
from pathlib import Path
from typing import Any

import jinja2
from markupsafe import Markup

from ...nodes.images import write_bytes
from ...nodes.interfaces.base import finite
from ..staging import FIGURES, METHODS, PAGE
from ..unitsets import members
from . import effects, slices
from .drawing import Drawn, drawing, saved
from .folder import Row, RunFolder, called, is_biased, number, read_folder
from .graphmap import GraphMap, graph_map
from .methods import asked, methods_text
from .stated import chosen_maps, runs_averaged, tested_maps
from .touchmap import TouchMap, named, touch_map
from .words import claims, estimate_cells, findings, headline, minus, notes, p_cell

_MOST_OPEN = 6  # regions whose figures stand open
_MOST_FOUND = 8  # tests whose results stand on the first screen
_MOST_DRAWN = 40  # regions that have figures of their own


def write_report(folder: str | Path) -> Path:
    """Write report.html, methods.txt and figures/ into a run's folder.

    Parameters
    ----------
    folder : path
        What `sequester run` wrote; nothing outside it is read.

    Returns
    -------
    Path
        Of the page.

    Raises
    ------
    InputError
        When it is no run's folder.
    """
    run = read_folder(Path(folder))
    place = run.path / FIGURES
    place.mkdir(exist_ok=True)
    for old in [*place.glob("*.svg"), *place.glob("*.png")]:
        old.unlink()
    with drawing():
        shown = {drawn.name: Markup(saved(drawn, place)) for drawn in _drawn(run)}
    methods = methods_text(run)
    write_bytes(run.path / METHODS, methods.encode())
    tested = [row for row in run.tests if not is_biased(row)]
    text = rendered(
        "report.html.j2",
        run.record,
        title=run.name,
        run=run,
        asked=asked(run),
        headline=headline(run.tests),
        notes=notes(run.tests, run.manifest["ledgers_beside"]),
        claims=claims(tested),
        findings=findings(tested),
        most_found=_MOST_FOUND,
        tested=tested,
        biased=[row for row in run.tests if is_biased(row)],
        regions=_regions(run, tested),
        shows=_shown(run, tested),
        forests=[name for name in shown if re.fullmatch(r"estimates(_\d+)?", name)],
        figures=shown,
        methods=methods.split("\n\n"),
        left_out=run.manifest["left_out"],
    )
    write_bytes(run.path / PAGE, text.encode())
    return run.path / PAGE


def rendered(template: str, record: Mapping[str, Any], **given: Any) -> str:
    """A page from a template, with its map, its graph, style, script and policy.

    Parameters
    ----------
    template : str
    record : mapping
        The content of record.json.
    **given
        What the template names.
    """
    here = files(__package__)
    style = (here / "static" / "page.css").read_text(encoding="utf-8")
    script = (here / "static" / "page.js").read_text(encoding="utf-8")
    environment = jinja2.Environment(
        loader=jinja2.PackageLoader(__package__ or "", "templates"),
        autoescape=True,
        trim_blocks=True,
        lstrip_blocks=True,
        undefined=jinja2.StrictUndefined,
    )
    environment.filters |= {
        "called": called,
        "p": p_cell,
        "cut": effects.cut,
        "worded": worded,
        "few": _few,
        "named": named,
        "capitalize_first": _capitalised,
    }
    environment.globals |= {
        "number": number,
        "estimate": estimate_cells,
        "two": _two_digits,
        "tested_maps": tested_maps,
        "chosen_maps": chosen_maps,
        "runs_averaged": runs_averaged,
    }
    touches, graph = touch_map(record), graph_map(record)
    policy = (
        f"default-src 'none'; style-src '{_digest(style)}'; script-src '{_digest(script)}'; "
        "img-src data:; base-uri 'none'; form-action 'none'"
    )
    return environment.get_template(template).render(
        policy=policy,
        style=Markup(style),
        script=Markup(script),
        data=Markup(in_script(_data(record, touches, graph))),
        touches=touches,
        graph=graph,
        record=record,
        **given,
    )


def _digest(text: str) -> str:
    return f"sha256-{b64encode(sha256(text.encode()).digest()).decode()}"


def in_script(content: Any) -> str:
    """JSON that cannot end the script element it stands in.

    Examples
    --------
    >>> in_script({"name": "</script>"})
    '{"name":"\\\\u003c/script\\\\u003e"}'
    """
    text = json.dumps(finite(content), ensure_ascii=False, separators=(",", ":"), allow_nan=False)
    for sign in "<>&\u2028\u2029":
        text = text.replace(sign, f"\\u{ord(sign):04x}")
    return text


def _data(record: Mapping[str, Any], touches: TouchMap, graph: GraphMap) -> dict[str, Any]:
    """What the script needs: units, columns as drawn, and the touches of what flows on."""
    number_of = {node["name"]: i for i, node in enumerate(record["nodes"])}
    outputs: dict[tuple[str, str], int] = {}
    sets: dict[tuple[int, ...], int] = {}

    def kept(units: set[int]) -> int:
        return sets.setdefault(tuple(ranges(units)), len(sets))

    elements = [
        [outputs.setdefault(key, len(outputs)), index, kept(values), kept(geometry)]
        for key, index, values, geometry in _flowing(record)
    ]
    columns = [
        {
            "label": column.label,
            "x": round(column.x, 2),
            "wide": round(column.width, 2),
            "regions": named((place[0] for place in column.places), record["variants"]),
            "places": column.places,
            "chosen": kept(column.chosen),
            "geometry": kept(column.geometry),
            "tested": kept(column.tested),
            "verdict": column.verdict,
            "level": column.level,
            "allowed": column.allowed,
            "origins": column.origins,
        }
        for panel in touches.panels
        for column in panel.columns
    ]
    return {
        "units": record["units"],
        "lines": [[line.units, round(line.y, 2)] for line in touches.lines],
        "tall": round(touches.cell_height, 2),
        "columns": columns,
        "nodes": list(number_of),
        "drawn": [number_of[graph.drawn_as.get(name, name)] for name in number_of],
        "edges": [
            [number_of[source], output, number_of[target]]
            for source, output, target, _ in record["edges"]
        ],
        "outputs": [[number_of[node], output] for node, output in outputs],
        "elements": elements,
        "sets": list(sets),
    }


def _flowing(
    record: Mapping[str, Any],
) -> Iterator[tuple[tuple[str, str], list[int], set[int], set[int]]]:
    """The elements that flow on, and the first of every node from which nothing does.

    No way to a mask or to data that are read goes through values that were read: of these, all
    elements of an output are told together.
    """
    suffixes = record["suffixes"]
    wanted = {(source, output) for source, output, _, _ in record["edges"]}
    ends = {node["name"] for node in record["nodes"]} - {node for node, _ in wanted}
    read = {node["name"] for node in record["nodes"] if node["kind"] == "extraction"}
    together: dict[tuple[str, str], tuple[set[int], set[int]]] = {}
    for one in record["elements"]:
        key = (one["node"], one["output"])
        if one["node"] in ends:
            ends.discard(one["node"])
            wanted.add(key)
        if key not in wanted:
            continue
        values, geometry = (members(one[role], suffixes) for role in ("values", "geometry"))
        if one["node"] in read:
            of = together.setdefault(key, (set(), set()))
            of[0].update(values)
            of[1].update(geometry)
        else:
            yield key, one["index"], values, geometry
    for key, (values, geometry) in together.items():
        yield key, [], values, geometry


def ranges(units: set[int]) -> list[int]:
    """A set of units as the first and last of each unbroken row of numbers.

    Examples
    --------
    >>> ranges({0, 1, 2, 5, 7, 8})
    [0, 2, 5, 5, 7, 8]
    """
    made: list[int] = []
    for unit in sorted(units):
        if made and unit == made[-1] + 1:
            made[-1] = unit
        else:
            made += [unit, unit]
    return made


def worded(units: set[int], names: Sequence[str], most: int = 6) -> str:
    """A set of units in words, by its complement when that is shorter.

    Examples
    --------
    >>> worded({0, 2}, ["a", "b", "c", "d"]), worded({0, 1, 2}, ["a", "b", "c", "d"])
    ('a, c', 'all but d')
    """
    outside = [name for i, name in enumerate(names) if i not in units]
    if not units:
        return "nothing"
    if not outside:
        return f"all {len(names)} units"
    if len(outside) < len(units):
        return f"all but {_few(outside, most)}"
    return _few([names[i] for i in sorted(units)], most)


def _few(names: Sequence[str], most: int) -> str:
    more = f" and {len(names) - most} more" if len(names) > most else ""
    return ", ".join(names[:most]) + more


def _capitalised(text: str) -> str:
    return text[:1].upper() + text[1:]


def _two_digits(value: float | None) -> str:
    return "" if value is None else minus(f"{value:z.2f}")


def _shown(run: RunFolder, tested: Sequence[Row]) -> dict[str, bool]:
    """Which columns and switches the results have any use for."""
    columns = ("p_holm", "p_max", "g")
    made = {name: any(row.get(name) is not None for row in tested) for name in columns}
    made["looks"] = any((number(row, "looks") or 0) > 1 for row in tested)
    made["twins"] = any(effects.twin_of(run, row) is not None for row in tested)
    return made


def _regions(run: RunFolder, tested: Sequence[Row]) -> list[dict[str, Any]]:
    """Per region: its rows, its biased twin, and which figures it has."""
    made: dict[str, dict[str, Any]] = {}
    for row in tested:
        name = str(row["roi"])
        one = made.setdefault(name, {"name": name, "rows": [], "twin": None})
        one["rows"].append(row)
        one["twin"] = effects.twin_of(run, row)
    for i, one in enumerate(made.values()):
        one["open"] = i < _MOST_OPEN
        sizes = [size for row in run.masks if row["roi"] == one["name"]
                 and "foldoverlap" not in str(row["mask"])
                 and (size := number(row, "voxels")) is not None]  # fmt: skip
        one["sizes"] = f"{min(sizes):.0f} to {max(sizes):.0f}" if sizes else ""
        if sizes and min(sizes) == max(sizes):
            one["sizes"] = f"{sizes[0]:.0f}"
    return list(made.values())


def _drawn(run: RunFolder) -> Iterator[Drawn]:
    """All figures of a run, each closed before the next is made."""
    background = slices.background_of(run)
    tested = [row for row in run.tests if not is_biased(row)]
    of_scale: dict[str, list[Row]] = {}
    families: dict[str, list[Row]] = {}
    for row in tested:
        if number(row, "estimate") is None:
            continue
        scale = "r" if "score" in run.region(str(row["roi"])) else str(row["scale"])
        if row["parcel"] is None:
            of_scale.setdefault(scale, []).append(row)
        else:
            families.setdefault(str(row["roi"]), []).append(row)
    for i, (scale, rows) in enumerate(of_scale.items(), 1):
        if len(rows) > 1:
            name = "estimates" if len(of_scale) == 1 else f"estimates_{i}"
            yield effects.forest(rows, name, scale)
    for rows in families.values():
        yield from effects.family_forests(rows)
        lies = slices.labels_where(run, rows, background)
        if lies is not None:
            yield lies
    for row in tested[:_MOST_DRAWN]:
        if row["parcel"] is None:
            yield from _of_region(run, row, background)
    for row in [row for row in run.tests if is_biased(row)][:_MOST_DRAWN]:
        if number(row, "estimate") is None:
            continue  # no region: there is nothing to show
        yield effects.biased_strip(run, row)
        lies = slices.where(run, row, background)
        if lies is not None:
            yield lies


def _of_region(run: RunFolder, row: Row, background: slices.Volume | None) -> Iterator[Drawn]:
    roi = str(row["roi"])
    score = run.region(roi).get("score")
    twin = effects.twin_of(run, row)
    # A correlation is no value among the subjects' values; without a region there is none.
    if score is None and number(row, "estimate") is not None:
        yield effects.strip(run, row)
        if twin is not None:
            yield effects.strip(run, row, twin)
    found = [
        effects.scatter(run, row, score) if score else None,
        effects.flips(run, row),
        effects.stability(run, row),
        effects.sensitivity(run, roi),
        slices.where(run, row, background),
    ]
    yield from (one for one in found if one is not None)
