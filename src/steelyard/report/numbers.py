"""How numbers are written for a reader: sensible digits, a true minus sign, thin spaces between thousands."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable

MINUS = "\N{MINUS SIGN}"
THIN_SPACE = "\N{NARROW NO-BREAK SPACE}"
UNDEFINED = "\N{EN DASH}"
MOST_DECIMALS = 8

_COMMA = re.compile(r"(?<=\d),(?=\d{3}(?!\d))")


def plain(text: str) -> str:
    """Return the text with the signs of a keyboard, for terminals and logs."""
    return (
        text.replace(MINUS, "-")
        .replace(THIN_SPACE, ",")
        .replace(UNDEFINED, "-")
        .replace("\N{NO-BREAK SPACE}", " ")
    )


def thin(text: str) -> str:
    """Return a sentence with thin spaces between the thousands of its numbers, as the tables have them."""
    return _COMMA.sub(THIN_SPACE, text)


def decimals_for(scale: float, digits: int = 2) -> int:
    """Return how many decimals show ``scale`` to ``digits`` significant digits; 0 for large, 3 for undefined."""
    if not math.isfinite(scale) or scale == 0:
        return 3
    # The rounding first, so that 0.0996 to two digits is 0.10 and not 0.100.
    magnitude = math.floor(math.log10(float(f"{abs(scale):.{digits - 1}e}")))
    return min(max(digits - 1 - magnitude, 0), MOST_DECIMALS)


def common_decimals(values: Iterable[object], digits: int = 2) -> int:
    """Return the decimals that show the smallest of the positive numbers to ``digits`` significant digits."""
    sizes = [abs(v) for v in values if isinstance(v, int | float) and math.isfinite(v) and v != 0]
    return decimals_for(min(sizes), digits) if sizes else 3


def fixed(value: float, decimals: int) -> str:
    """Return ``value`` with that many decimals."""
    if math.isnan(value):
        return UNDEFINED
    if math.isinf(value):
        return f"{MINUS if value < 0 else ''}\N{INFINITY}"
    text = f"{abs(value):,.{decimals}f}".replace(",", THIN_SPACE)
    negative = value < 0 and any(c in "123456789" for c in text)
    return f"{MINUS}{text}" if negative else text


def significant(value: float, digits: int = 3) -> str:
    """Return ``value`` to that many significant digits, whole digits never cut."""
    return fixed(value, decimals_for(value, digits)) if value else "0"


def count(value: float) -> str:
    """Return a whole number with thousands apart."""
    return fixed(round(value), 0) if math.isfinite(value) else UNDEFINED


def p_value(value: float) -> str:
    """Return a p-value to three decimals, or that it is less than 0.001."""
    if math.isnan(value):
        return UNDEFINED
    return "< 0.001" if value < 0.001 else fixed(value, 3)


def percent(share: float, decimals: int = 1) -> str:
    """Return a share (0..1) in per cent."""
    if math.isnan(share):
        return UNDEFINED
    least = 10.0**-decimals
    if 0 < 100 * share < least:
        return f"< {fixed(least, decimals)}%"
    return f"{fixed(100 * share, decimals)}%"
