"""The pictures show the frames: places of marks are read back from the SVG."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ET
from dataclasses import replace

import matplotlib
import numpy as np
import pytest
from report_answers import made_answer, made_balance

from steelyard.report.disclosure import release
from steelyard.report.figures import pictures
from steelyard.report.svg import ACCENT, drawing, figure_of, printable, svg_text

SVG, LINK = "{http://www.w3.org/2000/svg}", "{http://www.w3.org/1999/xlink}href"


@pytest.fixture(scope="module")
def drawn():
    return pictures(release(made_answer()))


def marks(svg, fill):
    """Places (x, y) of the marks of one fill, from the top, the key's left out."""
    root = ET.fromstring(svg)
    found = [
        (float(use.get("x")), float(use.get("y")))
        for use in root.iter(f"{SVG}use")
        if f"fill: {fill}" in use.get("style", "")
    ]
    return np.array(sorted(found, key=lambda place: place[1])[1:])


@pytest.mark.parametrize("version", ["wide", "narrow"])
@pytest.mark.parametrize(("when", "fill"), [("before", "#ffffff"), ("after", ACCENT)])
def test_marks_of_the_balance_lie_where_the_differences_are(drawn, version, when, fill):
    places = marks(getattr(drawn["balance"], version), fill)
    differences = made_balance()[f"smd_{when}"].to_numpy()
    assert len(places) == len(differences)
    shift, scale = np.polynomial.Polynomial.fit(differences, places[:, 0], 1).convert().coef
    assert scale > 50
    assert places[:, 0] == pytest.approx(shift + scale * differences, abs=0.01)
    assert np.all(np.diff(places[:, 1]) > 10)


@pytest.mark.parametrize("version", ["wide", "narrow"])
def test_before_and_after_share_one_scale_and_the_band_is_a_tenth(drawn, version):
    svg = getattr(drawn["balance"], version)
    table = made_balance()
    lines = [
        np.polynomial.Polynomial.fit(table[f"smd_{when}"], marks(svg, fill)[:, 0], 1).convert().coef
        for when, fill in (("before", "#ffffff"), ("after", ACCENT))
    ]
    assert lines[0] == pytest.approx(lines[1], abs=0.05)
    shapes = [
        np.array([[float(v) for v in pair] for pair in re.findall(r"[ML] ([\d.]+) ([\d.]+)", path.get("d"))])
        for path in ET.fromstring(svg).iter(f"{SVG}path")
        if "fill: #e6ecee" in path.get("style", "")
    ]
    band = max(shapes, key=lambda shape: np.ptp(shape[:, 1]))
    edges = [band[:, 0].min(), band[:, 0].max()]
    shift, scale = lines[0]
    assert edges == pytest.approx([shift - 0.1 * scale, shift + 0.1 * scale], abs=0.05)


@pytest.mark.parametrize("version", ["wide", "narrow"])
@pytest.mark.parametrize(
    ("frame", "colour", "width"), [("effects", ACCENT, "2.6"), ("effects_known", "#1b1f24", "1.2")]
)
def test_intervals_reach_from_limit_to_limit(drawn, version, frame, colour, width):
    root = ET.fromstring(getattr(drawn["effects"], version))
    bars = [
        [float(x) for x in re.findall(r"[ML] ([\d.]+) ", path.get("d"))]
        for path in root.iter(f"{SVG}path")
        if f"stroke: {colour}" in path.get("style", "") and f"stroke-width: {width}" in path.get("style", "")
    ]
    middles = marks(getattr(drawn["effects"], version), ACCENT if frame == "effects" else "#ffffff")[:, 0]
    table = getattr(made_answer(), frame).table
    assert len(bars) == len(middles) == len(table)
    for (low, high), middle, row in zip(bars, middles, table.itertuples(), strict=True):
        scale = (lambda v: v) if row.measure == "difference" else np.log
        expected = (scale(row.estimate) - scale(row.ci_low)) / (scale(row.ci_high) - scale(row.ci_low))
        assert low < high
        assert (middle - low) / (high - low) == pytest.approx(expected, abs=0.002)


def test_areas_of_the_overlap_are_the_shares_of_the_groups(drawn):
    histogram = release(made_answer()).histogram["exposed"]
    assert histogram[["before", "after"]].sum().to_numpy() == pytest.approx([1, 1])
    root = ET.fromstring(drawn["overlap"].wide)
    bars = [
        path.get("d")
        for path in root.iter(f"{SVG}path")
        if f"fill: {ACCENT}" in path.get("style", "") and "opacity" in path.get("style", "")
    ]
    assert len(bars) == 2
    for shape, when in zip(bars, ("before", "after"), strict=True):
        points = np.array([[float(v) for v in pair] for pair in re.findall(r"[ML] ([\d.]+) ([\d.]+)", shape)])
        heights = np.unique(np.round(points[:, 1].max() - points[:, 1], 3))
        expected = np.unique(np.round(histogram[when] / (histogram["high"] - histogram["low"]), 9))
        heights = heights[heights > 0]
        assert heights / heights.max() == pytest.approx(expected / expected.max(), abs=0.001)


def test_hidden_rows_are_named_without_marks():
    answer = made_answer()
    table = made_balance(((1500, 1700), (1200, 1500), (900, 1100), (895, 1000), (700, 700), (5, 300)))
    made = pictures(release(replace(answer, balance=replace(answer.balance, table=table))))
    texts = [text.text for text in ET.fromstring(made["balance"].wide).iter(f"{SVG}text")]
    assert "capital" in [text.strip() for text in texts]
    assert texts.count("hidden (under 10)") == 1
    assert texts.count("hidden") == 1
    assert len(marks(made["balance"].wide, ACCENT)) == len(table) - 2


def test_pictures_do_not_depend_on_the_user_s_settings(drawn):
    with matplotlib.rc_context({"font.size": 30, "svg.fonttype": "path", "axes.facecolor": "red"}):
        assert pictures(release(made_answer())) == drawn


def test_texts_stay_texts(drawn):
    for picture in drawn.values():
        assert len(list(ET.fromstring(picture.narrow).iter(f"{SVG}text"))) > 10


def test_labels_lose_what_xml_cannot_hold_and_are_cut():
    assert printable("a\x00b\nc") == "a\N{REPLACEMENT CHARACTER}b c"
    assert printable("x" * 300, 10) == "x" * 9 + "\N{HORIZONTAL ELLIPSIS}"


def test_ids_are_the_figure_s_own():
    with drawing():
        figure = figure_of(100, 100)
        figure.add_axes((0, 0, 1, 1)).plot([0, 1], [0, 1], marker="o")
        root = ET.fromstring(svg_text(figure, "mine", "A title"))
    ids = [element.get("id") for element in root.iter() if element.get("id")]
    assert ids
    assert all(name.startswith("mine-") for name in ids)
    assert root.find(f"{SVG}title").text == root.get("aria-label") == "A title"
    assert all(use.get(LINK).startswith("#mine-") for use in root.iter(f"{SVG}use"))
