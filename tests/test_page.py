"""The page in a real browser: it asks for nothing, and what it offers does what it says.

Chromium is Debian's; the accessibility check is axe-core, whose file SEQUESTER_AXE names.
"""

from __future__ import annotations

import json
import os
import re
import shutil
from pathlib import Path

import networkx as nx
import pytest
from playwright.sync_api import Error, sync_playwright
from sequester.workflows.guard import GuardRefused
from sequester.workflows.report.refused import write_refused
from sequester.workflows.run import run_study
from sequester.workflows.settings import read_settings
from sequester.workflows.unitsets import members

CHROMIUM = shutil.which("chromium") or ""
ARGUMENTS = [
    "--no-sandbox", "--disable-gpu", "--disable-background-networking",
    "--disable-component-update", "--disable-sync", "--no-first-run",
]  # fmt: skip
AXE = os.environ.get("SEQUESTER_AXE", "")
WIDE, NARROW = 1280, 400

pytestmark = pytest.mark.skipif(not CHROMIUM, reason="no chromium: apt-get install chromium")


@pytest.fixture(scope="module")
def browser():
    with sync_playwright() as playwright:
        made = playwright.chromium.launch(executable_path=CHROMIUM, args=ARGUMENTS)
        yield made
        made.close()


@pytest.fixture(scope="module")
def pages(garden, tmp_path_factory):
    """The page of the run, and that of its refused twin."""
    folder = tmp_path_factory.mktemp("refused")
    shutil.copytree(garden.output.parent, folder, dirs_exist_ok=True)
    study = folder / "STUDY.toml"
    text = study.read_text().replace('plan = "exploratory"', 'plan = "exploratory"\ntest = "t"', 1)
    study.write_text(text)
    settings = read_settings(study)
    with pytest.raises(GuardRefused) as refused:
        run_study(settings, record=False)
    refusal = write_refused(refused.value, settings.output, settings.name, settings.variants)
    return {"report": garden.output / "report.html", "refused": refusal}


@pytest.fixture
def opened(browser, pages):
    """Opens a page; at the end nothing may have been said, failed or asked for."""
    heard, contexts = [], []

    def open_page(which="report", width=WIDE, **more):
        context = browser.new_context(viewport={"width": width, "height": 900}, **more)
        contexts.append(context)
        page = context.new_page()
        page.on("console", lambda message: heard.append(message.text))
        page.on("pageerror", lambda error: heard.append(str(error)))
        page.on("request", lambda request: heard.append(request.url))
        page.goto(pages[which].as_uri())
        assert heard.pop(0) == pages[which].as_uri()
        return page

    yield open_page
    for context in contexts:
        context.close()
    assert heard == []


@pytest.fixture(scope="module")
def record(garden):
    return json.loads((garden.output / "record.json").read_text())


def data_of(page):
    return json.loads(page.locator("#data").text_content())


def cell(page, row, column):
    """Where on the screen a cell of the touch map is."""
    data = data_of(page)
    svg = page.locator("#touchmap")
    svg.scroll_into_view_if_needed()
    box = svg.bounding_box()
    mask = data["columns"][column]
    x, y = mask["x"] + mask["wide"] / 2, data["lines"][row][1] + data["tall"] / 2
    scale = box["width"] / float(svg.get_attribute("viewBox").split()[2])
    return box["x"] + x * scale, box["y"] + y * scale


def lit(page):
    return set(
        page.eval_on_selector_all("#graph .box.lit", "all => all.map(one => one.dataset.node)")
    )


@pytest.mark.parametrize("which", ["report", "refused"])
@pytest.mark.parametrize("width", [WIDE, NARROW])
def test_it_opens_without_a_word_a_request_or_a_sideways_scroll(which, width, opened):
    page = opened(which, width)
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    assert page.evaluate("document.styleSheets[0].cssRules.length") > 50, (
        "the style was let through"
    )


def test_a_name_in_the_first_column_is_not_broken_where_a_line_holds_it(opened):
    page = opened()
    lines = page.evaluate(
        """() => [...document.querySelectorAll("tbody th")].map(cell => {
            cell.textContent = "BrookKfoldTwice";
            const name = document.createRange();
            name.selectNodeContents(cell);
            return new Set([...name.getClientRects()].map(one => one.top)).size;
        })"""
    )
    assert lines and set(lines) == {1}


def test_the_policy_stops_a_request_and_a_foreign_script(browser, pages):
    page = browser.new_page()
    page.goto(pages["report"].as_uri())
    with pytest.raises(Error, match="Failed to fetch"):
        page.evaluate("() => fetch('https://sequester.invalid/')")
    page.evaluate(
        "() => document.body.append(Object.assign(document.createElement('script'),"
        " {textContent: 'window.intruder = 1'}))"
    )
    assert page.evaluate("window.intruder") is None
    page.close()


def test_pointing_at_a_cell_tells_what_it_is_and_how_the_data_came_there(opened):
    page = opened()
    data = data_of(page)
    arbor = next(
        i
        for i, mask in enumerate(data["columns"])
        if ["Arbor", "garden.Arbor.choose.row_masks[2]", "garden.Arbor.extract"] in mask["places"]
    )
    rows = {data["units"][units[0]]: i for i, (units, _) in enumerate(data["lines"])}
    page.mouse.move(*cell(page, rows["sub-3_task-lanterns_run-1_bold"], arbor))
    says = page.locator("#cellsays")
    assert says.locator("h4").text_content() == "sub-3_task-lanterns_run-1_bold"
    assert "tested on it, not chosen on it" in says.locator(".state").text_content()
    assert says.locator("li").all_text_contents() == [
        "sub-3_task-lanterns_run-1_bold",
        "garden.maps.out_files[2]",
        "garden.Arbor.extract",
    ]
    page.mouse.move(*cell(page, rows["sub-5_task-lanterns_run-2_bold"], arbor))
    assert "chosen on it, not tested on it" in says.locator(".state").text_content()
    assert says.locator("li").all_text_contents() == [
        "sub-5_task-lanterns_run-2_bold",
        "garden.maps.out_files[4]",
        "garden.Arbor.choose.row_masks[2]",
    ]
    assert page.locator("#cursor").get_attribute("visibility") == "visible"


def test_the_map_works_by_keyboard_and_lights_up_the_graph(opened):
    page = opened()
    page.locator("#map").focus()
    says = page.locator("#cellsays h4")
    units = data_of(page)["units"]
    assert says.text_content() == units[0]
    for key in ("ArrowDown", "ArrowDown", "ArrowRight", "ArrowUp"):
        page.keyboard.press(key)
    assert says.text_content() == units[data_of(page)["lines"][1][0][0]]
    assert "Mask 2 of" in page.locator("#cellsays .state").text_content()
    page.keyboard.press("End")
    page.keyboard.press("ArrowDown")
    assert says.text_content() == units[data_of(page)["lines"][-1][0][0]]
    page.keyboard.press("Enter")
    assert lit(page) == {"garden.Arbor.choose", "garden.Arbor.region", "garden.maps"}


def test_what_is_looked_for_is_found(opened):
    page = opened()
    page.fill("#find", "sub-7")
    assert page.locator("#cellsays h4").text_content().startswith("sub-7_")
    assert "tested on it" in page.locator("#cellsays .state").text_content()
    page.fill("#find", "Cinder: 4")
    assert "Mask 4 of Arbor, Brook" in page.locator("#cellsays .state").text_content()


def test_cells_can_be_made_larger(opened):
    page = opened()
    before = float(page.locator("#touchmap").get_attribute("width"))
    page.click("#larger")
    assert float(page.locator("#touchmap").get_attribute("width")) == pytest.approx(1.4 * before)


def test_a_mask_lights_up_its_ancestry_and_a_unit_all_that_it_touched(opened, record):
    page = opened()
    graph = nx.DiGraph((source, target) for source, _, target, _ in record["edges"])
    page.select_option("#pickmask", label="Groups: 2of5")
    made = "garden.Groups.choose"
    assert lit(page) == nx.ancestors(graph, made) | {made}
    assert "garden.maps" in page.locator("#graphsays").text_content()
    edges = page.eval_on_selector_all(
        "#graph .edge.lit", "all => all.map(one => [one.dataset.from, one.dataset.to])"
    )
    assert ["garden.maps", "garden.Groups.choose"] in edges
    assert ["garden.maps", "garden.Arbor.choose"] not in edges

    unit = "sub-1_task-lanterns_run-2_bold"
    page.select_option("#pickunit", label=unit)
    number = record["units"].index(unit)
    touched = {
        one["node"]
        for one in record["elements"]
        for role in ("values", "geometry")
        if number in members(one[role], record["suffixes"])
    }
    flowing = {(source, output) for source, output, _, _ in record["edges"]}
    assert lit(page) <= touched
    assert {
        re.sub(r"Variant\d+", "Variant1", one["node"])
        for one in record["elements"]
        if (one["node"], one["output"]) in flowing
        and number in members(one["values"], record["suffixes"])
    } <= lit(page)
    page.click("#clear")
    assert lit(page) == set()


def test_the_mask_of_a_variant_lights_up_the_lane_that_all_variants_share(opened):
    page = opened()
    assert page.locator("[data-node^='garden.BrookVariant3']").count() == 0
    page.select_option("#pickmask", label="BrookVariant3: 1")
    of_lane = {name for name in lit(page) if "Brook" in name}
    assert of_lane == {"garden.BrookVariant1.region", "garden.BrookVariant1.choose"}
    assert "made by garden.BrookVariant3.choose" in page.locator("#graphsays").text_content()
    edge = "#graph .edge[data-from='garden.BrookVariant1.region'].lit"
    assert page.locator(edge).count() == 1


def test_the_steps_of_the_graph_are_reached_and_chosen_by_keyboard(opened):
    page = opened()
    box = page.locator('#graph .box[data-node="garden.Brook.extract"]')
    box.focus()
    page.keyboard.press("Enter")
    assert lit(page) == {
        "garden.Brook.extract",
        "garden.Brook.choose",
        "garden.Brook.region",
        "garden.maps",
    }
    assert box.get_attribute("aria-pressed") == "true"
    page.keyboard.press("Escape")
    assert lit(page) == set()


def test_the_biased_twin_stands_beside_the_result_only_when_asked_for(opened):
    page = opened()
    beside = page.locator(".beside").first
    assert not beside.is_visible() and page.locator(".plain").first.is_visible()
    page.check("#beside")
    assert beside.is_visible() and "no evidence" in beside.text_content()
    assert not page.locator(".plain").first.is_visible()
    page.uncheck("#beside")
    assert not beside.is_visible()


def test_a_point_of_a_figure_says_whose_it_is(opened, garden):
    page = opened()
    titles = page.locator("svg.figure").nth(1).locator("title").all_text_contents()
    values = garden.table("roi_values")
    mine = values[(values["roi"] == "Arbor") & (values["sub"] == "4")]["value"].iloc[0]
    (said,) = (title for title in titles if title.startswith("sub-4: "))
    assert float(said.split(": ")[1].replace("\N{MINUS SIGN}", "-")) == pytest.approx(
        mine, rel=5e-3
    )


def test_it_prints_with_its_figures_its_map_and_without_its_tools(opened):
    page = opened(width=800)
    page.evaluate("dispatchEvent(new Event('beforeprint'))")
    page.emulate_media(media="print")
    assert not page.locator(".tools").first.is_visible()
    assert page.locator("#touchmap").is_visible() and page.locator("#graph").is_visible()
    assert page.evaluate(
        "[...document.querySelectorAll('details.region')].every((one) => one.open)"
    )
    assert page.evaluate("document.documentElement.scrollWidth") <= 800
    assert len(page.pdf()) > 50_000


def test_without_script_the_map_its_table_and_all_results_are_there(opened):
    page = opened(java_script_enabled=False)
    assert page.locator("#touchmap .cell.tested").count() == 1
    assert page.locator("text=The map as a table").is_visible()
    assert page.locator("table.numbers tbody tr").count() == 6


_OVERLAPS = """
(selector) => {
  const found = [];
  for (const svg of document.querySelectorAll(selector)) {
    const frame = svg.getBoundingClientRect();
    if (!frame.width) continue;
    const texts = [...svg.querySelectorAll("text")].map(
      (one) => [one.textContent, one.getBoundingClientRect()]
    );
    texts.forEach(([text, box], i) => {
      const out = Math.max(
        frame.left - box.left, box.right - frame.right,
        frame.top - box.top, box.bottom - frame.bottom
      );
      if (out > 1.5) found.push(text + " leaves its figure");
      for (const [other, its] of texts.slice(i + 1)) {
        const wide = Math.min(box.right, its.right) - Math.max(box.left, its.left);
        const tall = Math.min(box.bottom, its.bottom) - Math.max(box.top, its.top);
        if (wide > 1.5 && tall > 2.5) found.push(text + " covers " + other);
      }
    });
  }
  return found;
}
"""


def test_no_text_of_a_figure_covers_another_or_leaves_it(opened):
    page = opened()
    page.evaluate("document.querySelectorAll('details').forEach((one) => (one.open = true))")
    page.check("#beside")
    assert page.evaluate(_OVERLAPS, "svg.figure, #graph") == []


@pytest.mark.skipif(not AXE, reason="SEQUESTER_AXE does not name the file axe.min.js of axe-core")
@pytest.mark.parametrize("which", ["report", "refused"])
@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("width", [WIDE, NARROW])
def test_nothing_keeps_anybody_out(which, scheme, width, opened):
    page = opened(which, width, color_scheme=scheme)
    page.evaluate("document.querySelectorAll('details').forEach((one) => (one.open = true))")
    page.evaluate(Path(AXE).read_text(encoding="utf-8"))
    found = page.evaluate("axe.run(document, {resultTypes: ['violations']})")["violations"]
    serious = [
        (one["id"], one["help"], [node["html"][:120] for node in one["nodes"][:3]])
        for one in found
        if one["impact"] in ("serious", "critical")
    ]
    assert serious == []
