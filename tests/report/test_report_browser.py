"""The report in a real browser: no request, no error, no sideways scroll, no accessibility violation."""

from __future__ import annotations

import os
import shutil
from dataclasses import replace
from pathlib import Path

import pytest
from report_answers import made_answer, made_balance, with_groups

from steelyard.report.page import report_html

ARGUMENTS = [
    "--no-sandbox",
    "--disable-gpu",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    "--no-first-run",
]
WIDTHS = (360, 768, 1400)


def lacking(what):
    """Skip where a tool is not there, but not where the whole suite is meant to run."""
    if os.environ.get("CI") == "true":
        pytest.fail(f"{what}, and CI=true promises that it is there")
    pytest.skip(what)


def axe_source():
    named = os.environ.get("STEELYARD_AXE")
    if not named:
        lacking("STEELYARD_AXE does not name axe.min.js")
    path = Path(named)
    if path.is_dir():
        inside = (path / "axe.min.js", path / "node_modules" / "axe-core" / "axe.min.js")
        path = next((file for file in inside if file.is_file()), path)
    if not path.is_file():
        lacking(f"STEELYARD_AXE names no file: {path}")
    return path.read_text(encoding="utf-8")


def pages():
    answer = made_answer()
    long_names = answer.balance.table.assign(
        term=answer.balance.table["term"].replace(
            {"number_3": "a_very_long_name_without_any_place_to_break" * 3}
        )
    )
    hidden = made_balance(((1500, 1700), (1200, 1500), (900, 1100), (895, 1000), (700, 700), (5, 300)))
    return {
        "plain": answer,
        "long": replace(
            answer,
            balance=replace(answer.balance, table=long_names),
            warnings=("unbroken" * 40, *answer.warnings),
        ),
        "hidden": replace(answer, balance=replace(answer.balance, table=hidden)),
        "small": with_groups(answer, 7),
    }


@pytest.fixture(scope="module")
def browser():
    try:
        from playwright.sync_api import sync_playwright
    except ImportError:
        lacking("playwright is not installed")
    chromium = shutil.which("chromium") or shutil.which("chromium-browser")
    if chromium is None:
        lacking("Chromium is not installed")
    with sync_playwright() as playwright:
        browser = playwright.chromium.launch(executable_path=chromium, args=ARGUMENTS)
        yield browser
        browser.close()


@pytest.fixture(scope="module")
def files(tmp_path_factory):
    folder = tmp_path_factory.mktemp("pages")
    for name, answer in pages().items():
        (folder / f"{name}.html").write_text(report_html(answer), encoding="utf-8")
    return folder


@pytest.mark.parametrize(
    ("name", "width"),
    [*(("plain", width) for width in WIDTHS), ("long", 360), ("hidden", 360), ("small", 360)],
)
def test_the_page_holds_in_a_browser(browser, files, name, width):
    axe = axe_source()
    page = browser.new_page(viewport={"width": width, "height": 900})
    errors, requests = [], []
    page.on("console", lambda message: errors.append(message.text) if message.type == "error" else None)
    page.on("pageerror", lambda error: errors.append(str(error)))
    page.on("request", lambda request: requests.append(request.url))
    url = (files / f"{name}.html").as_uri()
    try:
        page.goto(url)
        assert page.screenshot(path=files / f"{name}-{width}.png", full_page=True)
        assert page.evaluate("document.documentElement.scrollWidth <= window.innerWidth")
        assert requests == [url]
        page.evaluate(axe)
        found = page.evaluate("axe.run()")
        told = [(v["id"], v["nodes"][0]["html"][:200]) for v in found["violations"]]
        assert told == []
        assert len(found["passes"]) > 20
        assert errors == []
    finally:
        page.close()


@pytest.mark.parametrize("width", WIDTHS)
def test_letters_in_pictures_are_large_enough_to_read(browser, files, width):
    page = browser.new_page(viewport={"width": width, "height": 900})
    try:
        page.goto((files / "plain.html").as_uri())
        sizes = page.evaluate(
            """[...document.querySelectorAll("figure svg text")].filter(t => t.getClientRects().length)
               .map(t => parseFloat(getComputedStyle(t).fontSize) * t.getScreenCTM().a)"""
        )
        assert len(sizes) > 40
        assert min(sizes) >= 11
    finally:
        page.close()


def test_letters_in_pictures_lie_within_them(browser, files):
    for width in WIDTHS:
        page = browser.new_page(viewport={"width": width, "height": 900})
        try:
            page.goto((files / "plain.html").as_uri())
            outside = page.evaluate(
                """[...document.querySelectorAll("figure svg")].filter(s => s.getClientRects().length)
                   .flatMap(s => { const b = s.getBoundingClientRect();
                     return [...s.querySelectorAll("text")].filter(t => { const r = t.getBoundingClientRect();
                       return r.left < b.left - 1 || r.right > b.right + 1 || r.top < b.top - 1
                         || r.bottom > b.bottom + 1; }).map(t => t.textContent); })"""
            )
            assert outside == []
        finally:
            page.close()


def test_nothing_is_cut_on_paper(browser, files):
    page = browser.new_page(viewport={"width": 673, "height": 950})
    try:
        page.emulate_media(media="print")
        page.goto((files / "plain.html").as_uri())
        cut = page.evaluate(
            """[...document.querySelectorAll(".scroll")].filter(e => e.firstElementChild.getBoundingClientRect().right
               > document.body.getBoundingClientRect().right + 1).map(e => e.firstElementChild.id)"""
        )
        assert cut == []
        shown = page.evaluate(
            """[...document.querySelectorAll("figure > div")].filter(d => d.getClientRects().length)
               .map(d => d.className)"""
        )
        assert shown == ["wide"] * 3
        assert page.pdf(prefer_css_page_size=True).startswith(b"%PDF")
    finally:
        page.close()
