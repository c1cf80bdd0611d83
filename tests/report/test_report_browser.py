"""The report in a real browser: both widths, on paper, and an accessibility audit.

Needs Chromium, playwright, and axe-core through STEELYARD_AXE (the path of axe.min.js). In CI a missing one fails.
"""

from __future__ import annotations

import os
import shutil
from pathlib import Path

import pytest

from steelyard.report.write import write_answer

AXE = os.environ.get("STEELYARD_AXE", "")
CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")
FLAGS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--no-first-run",
]

if not os.environ.get("CI"):
    if not CHROMIUM:
        pytest.skip("no Chromium on this machine", allow_module_level=True)
    if not Path(AXE).is_file():
        pytest.skip("STEELYARD_AXE does not name axe-core's axe.min.js", allow_module_level=True)


@pytest.fixture(scope="module")
def page_file(answer, tmp_path_factory):
    out = tmp_path_factory.mktemp("report") / "out"
    write_answer(answer, out)
    return out / "report.html"


@pytest.fixture(scope="module")
def browser():
    from playwright.sync_api import sync_playwright

    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=CHROMIUM, args=FLAGS)
        yield browser
        browser.close()


@pytest.mark.parametrize("width", [360, 1400])
def test_the_report_reads_well_and_is_accessible(browser, page_file, width, tmp_path):
    page = browser.new_page(viewport={"width": width, "height": 900})
    requests, messages = [], []
    page.on("request", lambda request: requests.append(request.url))
    page.on("console", lambda message: messages.append(message.text))
    page.on("pageerror", lambda error: messages.append(str(error)))
    page.goto(page_file.as_uri())
    page.screenshot(path=tmp_path / f"report-{width}.png", full_page=True)
    assert (tmp_path / f"report-{width}.png").stat().st_size > 50_000
    assert requests == [page_file.as_uri()]
    assert messages == []
    assert page.evaluate("document.documentElement.scrollWidth") <= width
    smallest = page.evaluate(
        """() => Math.min(...[...document.querySelectorAll('figure svg')]
             .filter(svg => svg.getBoundingClientRect().width > 0)
             .flatMap(svg => [...svg.querySelectorAll('text')])
             .map(text => text.getBoundingClientRect().height))"""
    )
    assert smallest >= 10
    shown = page.evaluate(
        "[...document.querySelectorAll('figure svg')].filter(s => s.getBoundingClientRect().width > 0).length"
    )
    assert shown == 3
    page.evaluate(Path(AXE).read_text(encoding="utf-8"))
    violations = page.evaluate("axe.run().then(found => found.violations)")
    assert [(v["id"], [n["html"][:120] for n in v["nodes"]]) for v in violations] == []
    page.close()


def test_the_report_prints(browser, page_file, tmp_path):
    page = browser.new_page()
    page.goto(page_file.as_uri())
    page.emulate_media(media="print")
    clipped = page.evaluate(
        "[...document.querySelectorAll('.scroll')].filter(e => getComputedStyle(e).overflowX !== 'visible').length"
    )
    assert clipped == 0
    page.pdf(path=tmp_path / "report.pdf", format="A4")
    assert (tmp_path / "report.pdf").read_bytes().startswith(b"%PDF")
    page.close()
