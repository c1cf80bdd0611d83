"""The report's pictures, as SVG for a page: readable without colour, the same bytes for the same answer.

Each is drawn twice, for a narrow and for a wide page, so that its letters keep their size on both.
"""

from __future__ import annotations

import io
import re
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from html import escape
from typing import Any, cast

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.figure import Figure

from steelyard.plan import Outcome
from steelyard.report.numbers import number

NARROW, WIDE = 3.35, 7.6
INK, QUIET, RULE = "#1c2430", "#5a6470", "#c9cfd6"
EXPOSED, REFERENCE = "#1d5c7a", "#b0561a"
BAND = "#e9eef2"
MOST_TERMS = 60


@dataclass(frozen=True)
class Picture:
    """One picture in both widths, with the text that stands in for it."""

    narrow: str
    wide: str
    text: str


def overlap_picture(histogram: pd.DataFrame, levels: tuple[str, str], name: str = "overlap") -> Picture:
    """Draw the propensity of the exposed upward and of the reference downward, before and after weighting."""
    text = (
        f"Two mirrored histograms of the propensity, exposed ({levels[0]}) upward and reference ({levels[1]}) "
        "downward: under the sampling weights, and under the combined weights."
    )

    def draw(width: float) -> Figure:
        figure = Figure(figsize=(width, 3.6 if width < 5 else 3.4), layout="constrained")
        several = figure.subplots(2, 1, sharex=True) if width < 5 else figure.subplots(1, 2, sharey=True)
        low, high = histogram["low"].to_numpy(), histogram["high"].to_numpy()
        shares = histogram[[f"{g}_{w}" for g in ("exposed", "reference") for w in ("before", "after")]]
        reach = 1.12 * max(float(np.nanmax(shares.to_numpy())), 0.01)
        for axes, when, title in zip(
            several, ("before", "after"), ("Sampling weights", "Combined weights"), strict=True
        ):
            up = histogram[f"exposed_{when}"].to_numpy()
            down = histogram[f"reference_{when}"].to_numpy()
            width_of = high - low
            axes.bar(low, up, width_of, align="edge", color=EXPOSED, edgecolor="white", linewidth=0.6)
            axes.bar(
                low,
                -down,
                width_of,
                align="edge",
                color="white",
                edgecolor=REFERENCE,
                hatch="////",
                linewidth=0.8,
            )
            axes.axhline(0, color=INK, linewidth=0.8)
            axes.set(xlim=(0, 1), ylim=(-reach, reach))
            axes.set_title(title, loc="left")
            axes.yaxis.set_major_formatter(lambda value, _: f"{abs(100 * value):.0f}%")
            axes.text(0.985, 0.95, f"exposed ({levels[0]})", transform=axes.transAxes, ha="right", va="top")
            axes.text(
                0.985, 0.05, f"reference ({levels[1]})", transform=axes.transAxes, ha="right", va="bottom"
            )
            _bare(axes)
        for axes in several if width >= 5 else several[-1:]:
            axes.set_xlabel("propensity")
        figure.supylabel("share of the group's weight", fontsize=9)
        return figure

    return _picture(draw, text, name)


def balance_picture(table: pd.DataFrame, name: str = "balance") -> Picture:
    """Draw each term's standardized difference before (ring) and after (filled diamond)."""
    drawn = table[np.isfinite(table["smd_before"]) & np.isfinite(table["smd_after"])]
    left_out = max(0, len(drawn) - MOST_TERMS)
    if left_out:
        drawn = drawn.loc[
            drawn["smd_before"].abs().sort_values(ascending=False).index[:MOST_TERMS].sort_values()
        ]
    before, after = drawn["smd_before"].to_numpy(), drawn["smd_after"].to_numpy()
    over = int((np.abs(after) > 0.1).sum())
    text = (
        f"Standardized differences of {len(drawn)} terms. The largest was {np.abs(before).max(initial=0):.2f} under "
        f"the sampling weights and is {np.abs(after).max(initial=0):.2f} under the combined weights; {over} lie beyond "
        "0.1 after weighting." + (f" The {left_out} smallest are not drawn." if left_out else "")
    )
    labels = [f"{t}: {v}" if v else t for t, v in zip(drawn["term"], drawn["level"], strict=True)]

    def draw(width: float) -> Figure:
        figure = Figure(figsize=(width, 1.15 + 0.23 * max(len(drawn), 1)), layout="constrained")
        axes = figure.subplots()
        place = np.arange(len(drawn))[::-1]
        axes.axvspan(-0.1, 0.1, color=BAND, linewidth=0)
        axes.axvline(0, color=INK, linewidth=0.8)
        axes.hlines(place, before, after, color=RULE, linewidth=1.2)
        axes.plot(
            before, place, "o", mfc="white", mec=REFERENCE, mew=1.4, ms=5.5, label="before: sampling weights"
        )
        axes.plot(after, place, "D", color=EXPOSED, ms=4.5, label="after: combined weights")
        most = 20 if width < 5 else 48
        axes.set_yticks(place, [_short(label, most) for label in labels])
        axes.set_ylim(-0.8, len(drawn) - 0.2)
        axes.set_xlabel(
            "standardized difference (shaded: 0.1, common practice)"
            if width >= 5
            else "standardized difference\n(shaded: 0.1, common practice)"
        )
        axes.grid(axis="y", color="#eef1f4", linewidth=0.8)
        axes.set_axisbelow(True)
        figure.legend(loc="outside upper left", ncols=1 if width < 5 else 2, frameon=False)
        _bare(axes)
        return figure

    return _picture(draw, text, name)


def effects_picture(
    outcomes: tuple[Outcome, ...],
    table: pd.DataFrame,
    known: pd.DataFrame,
    confidence: float,
    name: str = "effects",
) -> Picture:
    """Draw each effect with its interval on a scale of its own, and the interval with the propensity known."""
    told = [
        f"{o.name}: {number(r['estimate'])}, {number(r['ci_low'])} to {number(r['ci_high'])}"
        for o, r in zip(outcomes, table.to_dict("records"), strict=True)
    ]
    text = f"Effects with {confidence:.0%} intervals. " + "; ".join(told) + "."

    def draw(width: float) -> Figure:
        figure = Figure(figsize=(width, 0.35 + 0.95 * len(outcomes)), layout="constrained")
        several = np.atleast_1d(figure.subplots(len(outcomes), 1))
        for axes, outcome, row, other in zip(
            several, outcomes, table.to_dict("records"), known.to_dict("records"), strict=True
        ):
            none = 0.0 if outcome.measure == "difference" else 1.0
            title = f"{outcome.name}: {outcome.measure}" + (", adjusted" if outcome.covariates else "")
            axes.set_title(_short(title, 48 if width < 5 else 90), loc="left")
            axes.set_yticks([])
            axes.set_ylim(-1, 1)
            _bare(axes)
            axes.spines["left"].set_visible(False)
            if not np.isfinite(row["estimate"]):
                axes.text(0.5, 0.5, "hidden: small groups", transform=axes.transAxes, ha="center")
                continue
            axes.axvline(none, color=INK, linewidth=1, linestyle=(0, (4, 3)))
            axes.plot(
                [row["ci_low"], row["ci_high"]], [0.25, 0.25], color=EXPOSED, linewidth=2.2, marker="|", ms=9
            )
            axes.plot(row["estimate"], 0.25, "D", color=EXPOSED, ms=6)
            axes.plot(
                [other["ci_low"], other["ci_high"]],
                [-0.4, -0.4],
                color=QUIET,
                linewidth=1.2,
                linestyle=":",
                marker="|",
            )
            axes.plot(other["estimate"], -0.4, "o", mfc="white", mec=QUIET, ms=4.5)
            limits = np.array([row["ci_low"], row["ci_high"], other["ci_low"], other["ci_high"], none])
            margin = 0.06 * max(float(np.ptp(limits)), 1e-12)
            axes.set_xlim(limits.min() - margin, limits.max() + margin)
            axes.xaxis.set_major_locator(mpl.ticker.MaxNLocator(5 if width < 5 else 9))
        return figure

    return _picture(draw, text, name)


def _picture(draw: Callable[[float], Figure], text: str, name: str) -> Picture:
    with _style():
        return Picture(
            _svg(draw(NARROW), f"{name}-narrow", text), _svg(draw(WIDE), f"{name}-wide", text), text
        )


@contextmanager
def _style() -> Iterator[None]:
    settings: dict[str, Any] = {
        "svg.fonttype": "none",
        "svg.hashsalt": "steelyard",
        "text.parse_math": False,
        "font.family": "sans-serif",
        "font.size": 8.5,
        "axes.titlesize": 9,
        "axes.labelsize": 8.5,
        "axes.titleweight": "bold",
        "axes.edgecolor": QUIET,
        "axes.labelcolor": INK,
        "xtick.color": INK,
        "ytick.color": INK,
        "text.color": INK,
        "hatch.linewidth": 0.7,
        "axes.unicode_minus": True,
        "legend.fontsize": 8.5,
    }
    with mpl.rc_context(cast(Any, settings)):
        yield


def _bare(axes: Any) -> None:
    axes.spines[["top", "right"]].set_visible(False)
    axes.tick_params(length=3, width=0.6)


def _short(label: str, most: int) -> str:
    return label if len(label) <= most else label[: most - 1] + "…"


def _svg(figure: Figure, name: str, text: str) -> str:
    """Return the figure as an SVG element whose ids no other figure on the page shares."""
    buffer = io.StringIO()
    figure.savefig(buffer, format="svg", metadata={"Date": None, "Creator": None})
    svg = buffer.getvalue()
    svg = svg[svg.index("<svg") :].strip()
    svg = re.sub(r"<metadata>.*?</metadata>", "", svg, flags=re.DOTALL)
    svg = re.sub(r'\bid="([^"]+)"', rf'id="{name}-\1"', svg)
    svg = re.sub(r'(xlink:href="#|url\(#)', rf"\g<1>{name}-", svg)
    head = f'<svg role="img" aria-labelledby="{name}-title" focusable="false"'
    svg = svg.replace("<svg", head, 1)
    return re.sub(
        r"(<svg[^>]*>)", rf'\1<title id="{name}-title">{_literal(escape(text))}</title>', svg, count=1
    )


def _literal(text: str) -> str:
    """Return text that a regular expression puts in as it stands."""
    return text.replace("\\", "\\\\")
