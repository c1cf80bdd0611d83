import re
from dataclasses import replace
from html.parser import HTMLParser
from xml.etree import ElementTree

import numpy as np
import pytest

from steelyard.plan import Exposure
from steelyard.report.disclosure import shown
from steelyard.report.figures import balance_picture, overlap_picture
from steelyard.report.html import report_html
from steelyard.report.numbers import count, fixed, interval, number, p_value, percent
from steelyard.report.words import REFERENCES, methods


class Page(HTMLParser):
    """Ids, headings, links, tables and text of a page; unclosed elements are an error."""

    VOID = frozenset({"meta", "link", "br", "img", "hr", "input"})

    def __init__(self, html):
        super().__init__()
        self.open, self.ids, self.headings, self.targets, self.tags = [], [], [], [], []
        self.feed(html)
        assert not self.open

    def handle_starttag(self, tag, attributes):
        given = dict(attributes)
        self.tags.append(tag)
        if "id" in given:
            self.ids.append(given["id"])
        if re.fullmatch("h[1-6]", tag):
            self.headings.append(int(tag[1]))
        if tag == "a":
            self.targets.append(given["href"])
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attributes):
        self.handle_starttag(tag, attributes)
        if tag not in self.VOID:
            self.open.pop()

    def handle_endtag(self, tag):
        assert self.open.pop() == tag


@pytest.fixture(scope="module")
def html(answer):
    return report_html(answer, shown(answer))


def test_the_page_is_whole_and_stands_alone(html):
    page = Page(html)
    assert len(page.ids) == len(set(page.ids))
    assert "script" not in page.tags
    assert all(target.startswith("#") and target[1:] in page.ids for target in page.targets)
    assert not re.search(r"""(src|href)\s*=\s*["']https?:|@import|url\(["']?http""", html)
    assert page.headings[0] == 1
    assert all(b - a <= 1 for a, b in zip(page.headings, page.headings[1:], strict=False))
    references = re.findall(r'xlink:href="#([^"]+)"|url\(#([^)]+)\)', html)
    assert {a or b for a, b in references} <= set(page.ids)


def test_every_section_of_the_job_is_there(html):
    for name in (
        *("answer", "extract", "design", "overlap", "balance", "effects"),
        *("weights", "sensitivity", "methods", "cautions", "record"),
    ):
        assert f'<h2 id="{name}">' in html


def test_effects_balance_and_sensitivity_are_the_answers(html, answer):
    for row in answer.effects.table.to_dict("records"):
        assert number(row["estimate"]) in html
        assert interval(row["ci_low"], row["ci_high"]) in html
    for row in answer.balance.table.to_dict("records"):
        assert fixed(row["smd_before"]) in html
    for row in answer.sensitivity.to_dict("records"):
        assert fixed(row["e_value"]) in html
    for warning in answer.warnings:
        assert warning.partition("'")[0][:40] in html


def test_names_from_the_data_cannot_write_html(answer):
    bad = '<script>alert("x")</script> $y$ & \\1'
    table = answer.balance.table.copy()
    table["level"] = table["level"].mask(table["term"] == "roof", bad)
    groups = answer.overlap.groups.assign(level=[bad, "0"])
    changed = replace(
        answer,
        balance=replace(answer.balance, table=table),
        overlap=replace(answer.overlap, groups=groups),
        warnings=(bad,),
        plan=replace(answer.plan, title=bad),
    )
    html = report_html(changed, shown(changed))
    assert "<script" not in html
    assert "&lt;script&gt;" in html
    Page(html)


def test_figures_are_xml_with_a_title_and_fonts_of_the_page(answer):
    for picture in (
        balance_picture(answer.balance.table),
        overlap_picture(answer.overlap.histogram, ("yes & no", "<b>")),
    ):
        for svg in (picture.narrow, picture.wide):
            tree = ElementTree.fromstring(svg)
            title = next(iter(tree))
            assert title.tag.endswith("title")
            assert title.text == picture.text
            assert tree.get("role") == "img"


def test_a_balance_picture_of_many_terms_draws_the_largest(answer):
    import pandas as pd

    many = pd.concat([answer.balance.table] * 4, ignore_index=True)
    many["term"] = [f"t{k}" for k in range(len(many))]
    assert "smallest are not drawn" in balance_picture(many).text


def test_methods_name_what_was_done_and_only_that(answer):
    text, references = methods(answer)
    for word in (
        "logit",
        "ATE",
        "344 degrees of freedom",
        "joined with their neighbour",
        "Imai & Ratkovic 2014",
    ):
        assert word in text, word
    for key in ("binder", "imai", "zeng"):
        assert REFERENCES[key] in references
    known = replace(
        answer,
        plan=replace(
            answer.plan,
            exposure=Exposure(
                formula=answer.plan.exposure.formula, estimand="ATO", link="probit", weighted=False
            ),
            variance=replace(answer.plan.variance, propensity="known"),
        ),
        balance=replace(answer.balance, over_identification=None),
    )
    text, references = methods(known)
    assert "probit" in text
    assert "without sampling weights" in text
    assert "treated as known" in text
    for key in ("imai", "zeng", "lunceford"):
        assert REFERENCES[key] not in references


def test_every_reference_is_cited_and_every_citation_referenced(answer):
    text, references = methods(answer)
    for reference in references:
        name, year = reference.split(",")[0], re.search(r"\((\d{4})\)", reference)[1]
        assert re.search(rf"{name}[^.]*{year}", text), reference
    for name, year in re.findall(r"(\w+)(?: & \w+)? (\d{4})", text):
        if name not in {"May"}:
            assert any(name in r and year in r for r in references), (name, year)


@pytest.mark.parametrize(
    ("got", "expected"),
    [
        (number(-0.0012345), "−0.00123"),
        (number(1234567.0), "1,234,567"),
        (number(12.3456), "12.3"),
        (number(0), "0"),
        (number(np.nan), "–"),
        (fixed(-0.001), "0.00"),
        (fixed(-1.256), "−1.26"),
        (percent(0.1234), "12.3%"),
        (p_value(0.0004), "<0.001"),
        (p_value(0.0412), "0.041"),
        (count(-1, 10), "under 10"),
        (count(12345, 10), "12,345"),
        (interval(-1.5, 2), "−1.50 to 2.00"),
    ],
)
def test_numbers_read_well(got, expected):
    assert got == expected


def test_the_examples_truth_is_near(answer):
    # The generator knows both potential outcomes of everybody; the estimates must lie within three standard errors.
    import json
    from pathlib import Path

    truth = json.loads((Path(__file__).parents[2] / "examples/piped-water/truth.json").read_text())["ATE"]
    for row in answer.effects.table.to_dict("records"):
        expected = truth[f"{row['outcome']}, {row['measure']}"]
        assert abs(row["estimate"] - expected) < 3 * row["std_error"], row["outcome"]
