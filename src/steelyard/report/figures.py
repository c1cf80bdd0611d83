"""The pictures of a report, each drawn twice: for a wide page and for a narrow one."""

from __future__ import annotations

import math
from dataclasses import dataclass
from itertools import pairwise
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from steelyard.report.disclosure import Released
from steelyard.report.numbers import decimals_for, fixed
from steelyard.report.suppression import is_hidden
from steelyard.report.svg import (
    ACCENT,
    INK,
    PALE,
    PAPER,
    SOFT,
    TEXT_PX,
    drawing,
    figure_of,
    printable,
    svg_text,
)
from steelyard.report.words import BAND, MEASURES, balance_finding, confidence, glance

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

WIDE, NARROW = 820, 328
BIN = 0.05
MOST_ROWS = 40
SMALL_PX = 11.5


@dataclass(frozen=True)
class Picture:
    """A figure as two ``<svg>`` elements, its caption, and a note."""

    name: str
    caption: str
    wide: str
    narrow: str
    note: str = ""


def pictures(released: Released) -> dict[str, Picture]:
    """Draw what the released frames allow: "overlap", "balance" and "effects", those that are not hidden."""
    with drawing():
        made = {
            "overlap": _overlap(released),
            "balance": _balance(released),
            "effects": _effects(released),
        }
    return {name: picture for name, picture in made.items() if picture is not None}


def _overlap(released: Released) -> Picture | None:
    histogram = released.histogram
    if not len(histogram["exposed"]) or not len(histogram["reference"]):
        return None
    by_group = released.groups.set_index("group")
    spans = [
        f"{group} from {fixed(by_group.loc[group, 'propensity_min'], 2)} to "
        f"{fixed(by_group.loc[group, 'propensity_max'], 2)}"
        for group in ("exposed", "reference")
    ]
    title = f"Propensity of the groups: {spans[0]}, {spans[1]}."
    top = max(
        float((frame[when] / (frame["high"] - frame["low"])).max()) * BIN
        for frame in histogram.values()
        for when in ("before", "after")
    )
    versions = {}
    for version, width, height in (("wide", WIDE, 320), ("narrow", NARROW, 560)):
        figure = figure_of(width, height)
        for number, when in enumerate(("before", "after")):
            beside, above = (58 + number * 396, 48, 356, 228), (48, 48 + (1 - number) * 270, 268, 198)
            box = beside if version == "wide" else above
            axes = figure.add_axes(_box(box, width, height))
            _mirrored(axes, histogram, when, top)
        versions[version] = svg_text(figure, f"overlap-{version}", title)
    note = (
        f"Exposed upwards, reference downwards: the share of the group's weight in {BIN} of the propensity. "
        f"Bins with few rows are joined with their neighbours."
    )
    return Picture("overlap", "Where the groups lie on the propensity", **versions, note=note)


def _mirrored(axes: Axes, histogram: dict[str, pd.DataFrame], when: str, top: float) -> None:
    reach = top * 1.3
    for group, sign in (("exposed", 1), ("reference", -1)):
        frame = histogram[group]
        edges = [*frame["low"], frame["high"].iloc[-1]]
        heights = sign * BIN * (frame[when] / (frame["high"] - frame["low"])).to_numpy()
        if group == "exposed":
            axes.stairs(heights, edges, fill=True, facecolor=ACCENT, edgecolor=ACCENT, alpha=0.85)
        else:
            axes.stairs(heights, edges, fill=True, facecolor=PALE, edgecolor=SOFT, hatch="////", linewidth=0)
            axes.stairs(heights, edges, edgecolor=INK, linewidth=1.1)
    axes.axhline(0, color=INK, linewidth=0.8)
    axes.set_xlim(0, 1)
    axes.set_ylim(-reach, reach)
    ticks = np.linspace(0, 1, 6)
    axes.set_xticks(ticks, [f"{t:g}" for t in ticks])
    step = _step(2 * top, 5)
    places = np.arange(-math.floor(reach / step), math.floor(reach / step) + 1) * step
    axes.set_yticks(places, [f"{100 * abs(p):.{0 if step >= 0.01 else 1}f}%" for p in places])
    axes.set_xlabel("propensity")
    heading = "Before: sampling weights" if when == "before" else "After: combined weights"
    axes.set_title(heading, loc="left", fontsize=12.5, fontweight="bold", color=INK, pad=10)
    axes.text(0.02, reach * 0.97, "exposed", va="top", color=ACCENT, fontweight="bold")
    axes.text(0.98, -reach * 0.97, "reference", va="bottom", ha="right", color=INK, fontweight="bold")


@dataclass(frozen=True)
class _Row:
    """A line of the balance picture: a heading without marks, or a term with two of them or hidden."""

    label: str
    heading: bool
    before: float = math.nan
    after: float = math.nan
    hidden: str = ""


def _balance(released: Released) -> Picture | None:
    if released.groups_hidden:
        return None
    table = released.balance
    sizes = np.array(
        [
            max((abs(v) for v in (b, a) if not is_hidden(v) and math.isfinite(v)), default=0.0)
            for b, a in zip(table["smd_before"], table["smd_after"], strict=True)
        ]
    )
    # A picture of hundreds of rows shows nothing: those that differ most, in the table's order.
    shown = np.sort(np.argsort(-sizes, kind="stable")[:MOST_ROWS])
    rows = _balance_rows(table.iloc[shown])
    limit = max(float(sizes.max()) * 1.1, 2.5 * BAND)
    versions = {}
    for version, width in (("wide", WIDE), ("narrow", NARROW)):
        figure = _balance_figure(rows, limit, width, stacked=version == "narrow")
        versions[version] = svg_text(figure, f"balance-{version}", balance_finding(released))
    note = (
        "Standardized mean differences, exposed minus reference. The band marks differences within 0.1: common "
        "practice, not a verdict."
    )
    if len(shown) < len(table):
        note += f" The {len(shown)} of {len(table)} terms that differ most are drawn; the table has all."
    return Picture("balance", "How far the groups differ, before and after", **versions, note=note)


def _balance_rows(table: pd.DataFrame) -> list[_Row]:
    rows: list[_Row] = []
    several = table["term"].value_counts()
    last = None
    for record in table.to_dict("records"):
        term, level = str(record["term"]), str(record["level"])
        nested = level != "" and several[record["term"]] > 1
        if nested and term != last:
            rows.append(_Row(term, heading=True))
        label = f"   {level}" if nested else (f"{term}: {level}" if level else term)
        before, after = record["smd_before"], record["smd_after"]
        if is_hidden(before):
            rows.append(
                _Row(label, heading=False, hidden=f"hidden ({before})" if before != "hidden" else "hidden")
            )
        else:
            rows.append(_Row(label, heading=False, before=float(before), after=float(after)))
        last = term
    return rows


def _balance_figure(rows: list[_Row], limit: float, width: int, stacked: bool) -> Figure:
    line, head = (34, 22) if stacked else (23, 26)
    top, bottom = (78 if stacked else 52), 44
    heights = [head if row.heading else line for row in rows]
    height = top + sum(heights) + bottom + 6
    left, right = (12, 12) if stacked else (262, 24)
    figure = figure_of(width, height)
    axes = figure.add_axes(_box((left, bottom, width - left - right, sum(heights) + 6), width, height))
    axes.set_xlim(-limit, limit)
    axes.set_ylim(sum(heights) + 6, 0)
    axes.axvspan(-BAND, BAND, color=PALE, linewidth=0, zorder=0)
    axes.axvline(0, color=SOFT, linewidth=0.8, zorder=1)
    for spine in ("left",):
        axes.spines[spine].set_visible(False)
    axes.set_yticks([])
    step = _step(2 * limit, 4 if stacked else 8)
    ticks = np.arange(-math.floor(limit / step), math.floor(limit / step) + 1) * step
    axes.set_xticks(ticks, [fixed(float(t), decimals_for(step, 1)) for t in ticks])
    axes.set_xlabel("standardized mean difference")
    most = int((width - 24 if stacked else left - 20) / 6.6)
    at = 3.0
    for row, size in zip(rows, heights, strict=True):
        _balance_row(axes, row, at, size, limit, most, stacked, (width - left - right))
        at += size
    _balance_key(figure, width, height, stacked)
    return figure


def _balance_row(
    axes: Axes, row: _Row, at: float, size: float, limit: float, most: int, stacked: bool, span: float
) -> None:
    indent = 14 if row.label.startswith("   ") else 0
    text = printable(row.label, most - 2 * bool(indent))
    weight = "bold" if row.heading else "normal"
    if stacked:
        label_at, mark_at = at + (size / 2 if row.heading else 11), at + size - 9
        start = -limit + indent * 2 * limit / span
        axes.text(start, label_at, text, va="center", fontsize=SMALL_PX, fontweight=weight)
    else:
        label_at = mark_at = at + size / 2 + (4 if row.heading else 0)
        start = -limit - (250 - indent) * 2 * limit / span
        axes.text(start, label_at, text, va="center", fontsize=TEXT_PX, fontweight=weight, clip_on=False)
    if row.heading:
        return
    axes.plot([-limit, limit], [mark_at, mark_at], color="#d5dade", linewidth=0.6, zorder=1)
    if row.hidden:
        box = {"facecolor": PAPER, "edgecolor": "none", "pad": 1.5}
        axes.text(0, mark_at, row.hidden, va="center", ha="center", fontsize=SMALL_PX, color=SOFT,
                  style="italic", bbox=box)  # fmt: skip
        return
    axes.plot([row.before, row.after], [mark_at, mark_at], color=SOFT, linewidth=1.2, zorder=2)
    axes.plot([row.before], [mark_at], **BEFORE)
    axes.plot([row.after], [mark_at], **AFTER)


def _balance_key(figure: Figure, width: int, height: int, stacked: bool) -> None:
    axes = figure.add_axes((0, 0, 1, 1), zorder=-1)
    axes.set_xlim(0, width)
    axes.set_ylim(0, height)
    axes.axis("off")
    start = 12 if stacked else 230
    places = (
        ((start, height - 16), (start, height - 36), (start, height - 56))
        if stacked
        else ((start, height - 18), (start + 195, height - 18), (start + 375, height - 18))
    )
    labels = ("before: sampling weights", "after: combined weights", "within 0.1: common practice")
    for (x, y), label, marks in zip(places, labels, (BEFORE, AFTER, None), strict=True):
        if marks is None:
            axes.add_patch(_patch(x + 1, y - 6, 12, 12))
        else:
            axes.plot([x + 7], [y], **marks)
        axes.text(x + 20, y, label, va="center", fontsize=SMALL_PX)


def _patch(x: float, y: float, width: float, height: float) -> Any:
    from matplotlib.patches import Rectangle

    return Rectangle((x, y), width, height, facecolor=PALE, edgecolor=SOFT, linewidth=0.6)


BEFORE: dict[str, Any] = {
    "marker": "o", "markersize": 7, "markerfacecolor": PAPER, "markeredgecolor": INK, "markeredgewidth": 1.4,
    "linestyle": "none", "zorder": 3,
}  # fmt: skip
AFTER: dict[str, Any] = {
    "marker": "D", "markersize": 7, "markerfacecolor": ACCENT, "markeredgecolor": ACCENT, "linestyle": "none",
    "zorder": 4,
}  # fmt: skip


def _effects(released: Released) -> Picture | None:
    if released.groups_hidden:
        return None
    effects = released.effects.to_dict("records")
    counted = released.plan.variance.propensity == "estimated"
    known = released.effects_known.to_dict("records") if counted else effects
    versions = {}
    found = [glance(row, released.plan) for row in effects]
    title = "; ".join(f"{g['name']}, {g['measure']} {g['figure']}, {g['interval']}" for g in found) + "."
    for version, width in (("wide", WIDE), ("narrow", NARROW)):
        stacked = version == "narrow"
        strip, top = (124, 60) if stacked else (84, 40)
        height = top + strip * len(effects)
        figure = figure_of(width, height)
        for number, (row, other) in enumerate(zip(effects, known, strict=True)):
            bottom = height - top - strip * (number + 1) + 30
            left, right = (14, 14) if stacked else (262, 24)
            box = (left, bottom, width - left - right, 44)
            axes = figure.add_axes(_box(box, width, height))
            _interval_strip(axes, row, other)
            name, measure = printable(row["outcome"], 40 if stacked else 34), MEASURES[row["measure"]]
            y = (bottom + 66 if stacked else bottom + 30) / height
            x = (14 if stacked else 12) / width
            figure.text(x, y, name, fontweight="bold", va="center")
            figure.text(x, y - 17 / height, measure, va="center", color=SOFT, fontsize=SMALL_PX)
        _effects_key(figure, width, height, stacked, counted)
        versions[version] = svg_text(figure, f"effects-{version}", printable(title, 2000))
    note = (
        f"{confidence(released.plan)} intervals, each outcome on its own scale; the vertical line marks no effect. "
        "Ratios are on a logarithmic scale."
    )
    return Picture("effects", "Effects with their intervals", **versions, note=note)


def _interval_strip(axes: Axes, row: dict[str, Any], known: dict[str, Any]) -> None:
    log = row["measure"] != "difference"
    none = 1.0 if log else 0.0
    values = [row["estimate"], row["ci_low"], row["ci_high"], known["ci_low"], known["ci_high"], none]
    usable = [v for v in values if math.isfinite(v) and (v > 0 or not log)]
    scale = np.log if log else (lambda value: value)
    low, high = float(scale(min(usable))), float(scale(max(usable)))
    room = 0.08 * (high - low) or 0.5
    axes.set_xlim(low - room, high + room)
    axes.set_ylim(0, 1)
    axes.axvline(float(scale(none)), color=INK, linewidth=0.9, zorder=1)
    strips = [(0.68, row, AFTER, 2.6), (0.28, known, BEFORE, 1.2)]
    for y, record, marks, width in strips[: 1 if known is row else 2]:
        if math.isfinite(record["ci_low"]) and math.isfinite(record["ci_high"]):
            ends = [float(scale(record["ci_low"])), float(scale(record["ci_high"]))]
            axes.plot(
                ends, [y, y], color=marks["markeredgecolor"], linewidth=width, zorder=2, solid_capstyle="butt"
            )
        axes.plot([float(scale(record["estimate"]))], [y], **marks)
    axes.spines["left"].set_visible(False)
    axes.set_yticks([])
    ticks = _ticks(low - room, high + room, log)
    decimals = max((decimals_for(t, 1) if t else 0) for t in _steps_of(ticks)) if len(ticks) > 1 else 2
    axes.set_xticks([float(scale(t)) for t in ticks], [fixed(t, decimals) for t in ticks])


def _effects_key(figure: Figure, width: int, height: int, stacked: bool, counted: bool) -> None:
    axes = figure.add_axes((0, 0, 1, 1), zorder=-1)
    axes.set_xlim(0, width)
    axes.set_ylim(0, height)
    axes.axis("off")
    labels = (
        ("propensity estimated", "propensity taken as known") if counted else ("propensity taken as known",)
    )
    start = 14 if stacked else 262
    for number, (label, marks) in enumerate(zip(labels, (AFTER, BEFORE), strict=False)):
        x, y = (start, height - 16 - 20 * number) if stacked else (start + 200 * number, height - 18)
        axes.plot([x + 7], [y], **marks)
        axes.text(x + 20, y, label, va="center", fontsize=SMALL_PX)


def _ticks(low: float, high: float, log: bool) -> list[float]:
    """Return about four round values between the limits, which are logarithms where ``log`` says so."""
    if log:
        low, high = math.exp(low), math.exp(high)
        if high / low > 8:
            decades = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
            digits = (1,) if high / low > 300 else (1, 3)
            return [d * 10.0**k for k in decades for d in digits if low <= d * 10.0**k <= high]
    step = _step(high - low, 4)
    return [k * step for k in range(math.ceil(low / step), math.floor(high / step) + 1)]


def _steps_of(ticks: list[float]) -> list[float]:
    return [b - a for a, b in pairwise(ticks)]


def _step(span: float, parts: int) -> float:
    """Return the round step that cuts ``span`` into about so many parts."""
    if not span > 0 or not math.isfinite(span):
        return 1.0
    raw = span / parts
    power = 10.0 ** math.floor(math.log10(raw))
    return next(m for m in (1, 2, 5, 10) if m * power >= raw * 0.999) * power


def _box(
    pixels: tuple[float, float, float, float], width: float, height: float
) -> tuple[float, float, float, float]:
    left, bottom, across, up = pixels
    return left / width, bottom / height, across / width, up / height
