"""The page read back by a parser that shares nothing with the template."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from report_answers import made_answer, made_balance, made_effects, made_plan, with_groups
from report_page_reader import PageReader

from steelyard.plan import Outcome, Variance
from steelyard.report.page import SECTIONS, report_html

HOSTILE = "<script>alert(1)</script>\"'&--><svg onload=alert(2)>$\\frac{$"


@pytest.fixture(scope="module")
def text():
    return report_html(made_answer())


@pytest.fixture(scope="module")
def page(text):
    return PageReader(text)


def number(text):
    return float(text.replace("−", "-").replace("\u202f", ""))


def test_the_same_answer_gives_the_same_bytes(text):
    assert report_html(made_answer()) == text


def test_nothing_is_fetched_and_nothing_runs(page, text):
    assert page.fetched == []
    assert page.handlers == []
    assert not {"script", "link", "iframe", "object", "img"} & {tag for tag, _ in page.tags}
    style = re.search(r"<style>(.*?)</style>", text, re.DOTALL)[1]
    assert "url(" not in style
    assert "@import" not in style


def test_every_section_has_its_heading_and_its_line_in_the_contents(page):
    headings = [" ".join(text.split()) for tag, text in page.headings if tag == "h2"]
    assert headings == [f"{number} {title}" for number, (_, title) in enumerate(SECTIONS, start=1)]
    links = [a["href"] for tag, a in page.tags if tag == "a" and a.get("class") != "skip"]
    assert links == [f"#{id_}" for id_, _ in SECTIONS]
    assert [tag for tag, _ in page.headings].count("h1") == 1


def test_ids_are_unique_over_the_page_and_its_pictures(page):
    assert len(page.ids) == len(set(page.ids))
    assert sum(tag == "svg" for tag, _ in page.tags) == 6


def test_references_within_pictures_lead_to_ids_of_the_same_picture(text):
    for svg in re.findall(r"<svg .*?</svg>", text, re.DOTALL):
        ids = set(re.findall(r' id="([^"]+)"', svg))
        used = set(re.findall(r"url\(#([^)]+)\)", svg)) | set(re.findall(r'xlink:href="#([^"]+)"', svg))
        assert used <= ids


def test_pictures_say_what_they_show(page):
    labels = [a["aria-label"] for tag, a in page.tags if tag == "svg"]
    assert all(a["role"] == "img" for tag, a in page.tags if tag == "svg")
    assert sum("exposed from 0.02 to 0.93, reference from 0.00 to 0.92" in label for label in labels) == 2
    assert sum("days_missed, difference −2.22, 95% interval −2.72 to −1.73" in label for label in labels) == 2


def test_the_effects_are_those_of_the_frame(page):
    frame = made_answer().effects.table
    rows = page.tables["table-effects"][2:]
    assert [row[0] for row in rows] == list(frame["outcome"])
    for row, (_, record) in zip(rows, frame.iterrows(), strict=True):
        names = ("exposed", "reference", "estimate", "ci_low", "ci_high", "std_error")
        for text, name in zip(row[2:8], names, strict=True):
            decimals = len(text.split(".")[1])
            assert number(text) == pytest.approx(record[name], abs=0.5000001 * 10**-decimals)
            assert decimals >= 2
    assert rows[0][10] == "< 0.001"
    assert rows[2][10] == "0.076"


def test_every_row_of_the_balance_is_in_the_table(page):
    table = made_balance()
    rows = page.tables["table-balance"][2:]
    assert len(rows) == len(table) == 25
    for row, (_, record) in zip(rows, table.iterrows(), strict=True):
        assert number(row[3]) == pytest.approx(record["smd_before"], abs=0.00501)
        assert number(row[9]) == pytest.approx(record["smd_after"], abs=0.00501)


def test_data_rows_are_as_wide_as_the_heads(page):
    for name, rows in page.tables.items():
        assert len({len(row) for row in rows if row} - {len(rows[0])}) <= 1, name


def test_table_heads_have_a_scope_and_wide_tables_can_be_reached_by_keyboard(page):
    assert all(a.get("scope") in {"col", "row", "colgroup"} for tag, a in page.tags if tag == "th")
    regions = [a for tag, a in page.tags if a.get("role") == "region"]
    assert len(regions) == len(page.tables) + 1
    assert all(a["tabindex"] == "0" and (a.get("aria-label") or a.get("aria-labelledby")) for a in regions)


def test_labels_from_the_data_stay_text_in_the_page_and_in_its_pictures():
    answer = made_answer()
    table = answer.balance.table.copy()
    table.loc[table["level"] == "isles", "level"] = HOSTILE
    table["term"] = table["term"].replace({"number_3": HOSTILE + "\x00\x1b[31m", "number_4": "$\\frac{$"})
    strata = answer.checkup.strata.copy()
    strata["stratum"] = [HOSTILE, *strata["stratum"][1:]]
    effects = answer.effects.table.assign(outcome=[HOSTILE, "b", "c"])
    answer.effects.table = effects
    hostile = replace(
        answer,
        balance=replace(answer.balance, table=table),
        checkup=replace(answer.checkup, strata=strata),
        warnings=(HOSTILE,),
        plan=made_plan(title=HOSTILE, outcome=(Outcome(name=HOSTILE), *made_plan().outcome[1:])),
        record={**answer.record, "versions": {HOSTILE: HOSTILE}},
    )
    text = report_html(hostile)
    page = PageReader(text)
    assert "<script" not in text
    assert "<svg onload" not in text
    assert page.handlers == []
    assert page.headings[0][1] == HOSTILE
    assert HOSTILE in page.tables["table-strata"][1][0]
    drawn = [s for s in re.findall(r"<svg .*?</svg>", text, re.DOTALL) if "&lt;script&gt;alert(1)" in s]
    assert len(drawn) == 4


def test_warnings_stand_near_the_top_and_in_the_record(page):
    places = [m.start() for m in re.finditer("5.4% of the reference rows", page.text)]
    assert len(places) == 2
    assert places[0] < page.text.index("3 The extract")


def test_the_page_names_its_language_and_title(text):
    assert '<html lang="en">' in text
    assert "<title>Piped water and school days missed</title>" in text


def test_what_ignoring_the_estimation_would_have_cost_is_said(page):
    assert "the standard errors would have been 25% larger for days_missed (difference)" in page.text


def test_a_known_propensity_is_said_to_be_one_sided():
    plan = made_plan(variance=Variance(propensity="known"))
    answer = made_answer(plan=plan)
    text = PageReader(report_html(replace(answer, effects=answer.effects_known))).text
    assert "treat the propensity as known, as if nobody had estimated it" in text
    assert "would have been" not in text


def test_effects_without_degrees_of_freedom_are_drawn_without_an_interval():
    plan = made_plan()
    effects = made_effects(plan)
    effects.table = effects.table.assign(
        ci_low=np.nan, ci_high=np.nan, std_error=0.0, p_value=np.nan, statistic=np.nan, df=0.0
    )
    text = PageReader(report_html(made_answer(effects=effects, effects_known=effects))).text
    assert "The design leaves no interval" in text


def test_a_group_that_is_too_small_leaves_a_page_without_comparisons():
    page = PageReader(report_html(with_groups(made_answer(), 7)))
    assert not any(tag == "svg" for tag, _ in page.tags)
    assert "A group is too small" in page.text


def test_a_long_balance_table_is_drawn_in_part_and_says_so():
    table = made_balance()
    long = table.loc[table.index.repeat(4)].reset_index(drop=True)
    long["term"] = [f"{term} {k}" for k, term in enumerate(long["term"])]
    answer = made_answer()
    text = report_html(replace(answer, balance=replace(answer.balance, table=long)))
    assert "The 40 of 100 terms that differ most are drawn" in text
    assert len(PageReader(text).tables["table-balance"]) == 102


def test_no_machine_path_is_in_the_page():
    plan = replace(made_plan(), folder=Path("/somewhere/secret"))
    assert "/somewhere" not in report_html(made_answer(plan=plan))
