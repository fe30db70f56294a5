"""Pictures of the page: the demo, its refused twin, 26 subjects x 4 runs, and 500 subjects.

Usage: python tests/bench/screenshots.py FOLDER [--only NAME]
Makes the studies that FOLDER does not hold yet, runs them, makes their pages, and takes pictures
in light and dark, wide and narrow, and as printed. Prints the size of each page, how long it took
to make, and how long it takes to open.
"""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Callable
from pathlib import Path

from playwright.sync_api import Page, sync_playwright
from sequester.workflows.demo import write_demo
from sequester.workflows.guard import GuardRefused
from sequester.workflows.report.page import write_report
from sequester.workflows.report.refused import write_refused
from sequester.workflows.run import run_study
from sequester.workflows.settings import read_settings

sys.path.append(str(Path(__file__).parent.parent))
from gardens import plant

CHROMIUM = "/usr/bin/chromium"
ARGUMENTS = [
    "--no-sandbox", "--disable-gpu", "--disable-background-networking",
    "--disable-component-update", "--disable-sync", "--no-first-run",
]  # fmt: skip
VIEWS = {
    "wide": (1280, "light", "screen"),
    "dark": (1280, "dark", "screen"),
    "narrow": (400, "light", "screen"),
    "print": (800, "light", "print"),
}


def paged(study: Path) -> tuple[Path, float]:
    """The page of a study, run if it was not yet; and how long the page took to make."""
    settings = read_settings(study)
    if not (settings.output / "manifest.json").is_file():
        try:
            run_study(settings)
        except GuardRefused as error:
            started = time.perf_counter()
            return write_refused(error, settings.output, settings.name, settings.variants), (
                time.perf_counter() - started
            )
    started = time.perf_counter()
    return write_report(settings.output), time.perf_counter() - started


def opened(page: Page, path: Path) -> float:
    """Open a page; seconds until it is there and drawn."""
    started = time.perf_counter()
    page.goto(path.absolute().as_uri())
    page.evaluate("() => new Promise((done) => requestAnimationFrame(() => setTimeout(done)))")
    return time.perf_counter() - started


def main() -> None:
    """See the module."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("folder", type=Path)
    parser.add_argument("--only", default="")
    asked = parser.parse_args()
    studies: dict[str, Callable[[], Path]] = {
        "demo": lambda: write_demo(asked.folder / "demo")[0],
        "refused": lambda: write_demo(asked.folder / "demo")[1],
        "26x4": lambda: plant(asked.folder / "26x4", 26, 4),
        "500x1": lambda: plant(asked.folder / "500x1", 500, 1, flips=99),
    }
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=CHROMIUM, args=ARGUMENTS)
        for name, make in studies.items():
            if asked.only not in ("", name):
                continue
            path, made = paged(make())
            seconds = 0.0
            for view, (width, scheme, media) in VIEWS.items():
                page = browser.new_page(viewport={"width": width, "height": 900})
                page.emulate_media(color_scheme=scheme, media=media)
                seconds = max(seconds, opened(page, path))
                page.screenshot(path=asked.folder / f"{name}-{view}.png", full_page=True)
                page.close()
            print(
                f"{name}: {path.stat().st_size / 1e6:.2f} MB, made in {made:.1f} s, "
                f"opens in {seconds:.2f} s"
            )
        browser.close()


if __name__ == "__main__":
    main()
