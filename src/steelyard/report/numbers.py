"""Numbers as a reader wants them: few digits, a real minus sign, and words for what is hidden or undefined."""

from __future__ import annotations

import math
from typing import Any

from steelyard.report.disclosure import HIDDEN_COUNT

NONE = "–"


def number(value: Any, digits: int = 3) -> str:
    """Return a number with so many significant digits; whole thousands keep theirs."""
    if value is None or not math.isfinite(value):
        return NONE
    if value == 0:
        return "0"
    places = max(0, digits - 1 - math.floor(math.log10(abs(value))))
    return _signed(f"{value:,.{min(places, 12)}f}")


def fixed(value: Any, places: int = 2) -> str:
    """Return a number with so many decimals."""
    if value is None or not math.isfinite(value):
        return NONE
    text = f"{value:,.{places}f}"
    return _signed(text if float(text.replace(",", "")) else text.lstrip("-"))


def count(value: Any, minimum: int) -> str:
    """Return a count, or that it is under the minimum."""
    return f"under {minimum}" if value == HIDDEN_COUNT else f"{int(value):,}"


def percent(value: Any, places: int = 1) -> str:
    """Return a share as a percentage."""
    return NONE if value is None or not math.isfinite(value) else _signed(f"{100 * value:.{places}f}%")


def p_value(value: Any) -> str:
    """Return a p-value with three decimals, never as zero."""
    if value is None or not math.isfinite(value):
        return NONE
    return "<0.001" if value < 0.001 else f"{value:.3f}"


def interval(low: Any, high: Any, digits: int = 3) -> str:
    """Return an interval in words that read well aloud."""
    if not (math.isfinite(low) and math.isfinite(high)):
        return NONE
    return f"{number(low, digits)} to {number(high, digits)}"


def _signed(text: str) -> str:
    return text.replace("-", "−")
