"""Which cells of a table of counts must be hidden: the small ones, and those that would give them away.

Knows counts and a minimum; refuses to know what is counted.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

Mask = NDArray[np.bool_]
HIDDEN = "hidden"


def under(minimum: int) -> str:
    """Return what stands in a cell whose count is under ``minimum``."""
    return f"under {minimum}"


def is_hidden(cell: object) -> bool:
    """Return whether a cell holds one of the texts that stand for a hidden figure."""
    return isinstance(cell, str) and (cell == HIDDEN or cell.startswith("under "))


def small(counts: ArrayLike, minimum: int) -> Mask:
    """Return which counts are under ``minimum``, zero among them."""
    return np.asarray(np.asarray(counts, dtype=np.float64) < minimum)


def small_but_some(counts: ArrayLike, minimum: int) -> Mask:
    """Return which counts are under ``minimum`` but not zero: for cells whose emptiness describes nobody."""
    numbers = np.asarray(counts, dtype=np.float64)
    return np.asarray((numbers > 0) & (numbers < minimum))


def with_complements(counts: ArrayLike, hidden: Mask, minimum: int, may_hide: Mask | None = None) -> Mask:
    """Return ``hidden`` with the cells that must go too where the total of the counts is known.

    One hidden cell beside a total can be found by subtraction, and so can the sum of several. The next
    smallest cells are hidden until at least two are, and together hold at least ``minimum``.
    ``may_hide`` names the cells that can be chosen (default: all).
    """
    numbers = np.asarray(counts, dtype=np.float64)
    hidden = hidden.copy()
    if not hidden.any():
        return hidden
    allowed = np.ones(len(numbers), dtype=bool) if may_hide is None else may_hide
    for place in np.argsort(numbers, kind="stable"):
        if hidden.sum() > 1 and numbers[hidden].sum() >= minimum:
            break
        if allowed[place]:
            hidden[place] = True
    return hidden


def joined_runs(counts: ArrayLike, minimum: int) -> list[tuple[int, int]]:
    """Return runs (start, stop) of neighbouring cells that hold at least ``minimum`` each.

    Empty cells at both ends are left out. Without enough for one run there is none.
    """
    numbers = np.asarray(counts, dtype=np.float64)
    filled = np.flatnonzero(numbers > 0)
    if not len(filled) or numbers.sum() < minimum:
        return []
    first, last = int(filled[0]), int(filled[-1]) + 1
    runs: list[tuple[int, int]] = []
    start = first
    for stop in range(first + 1, last + 1):
        if numbers[start:stop].sum() >= max(minimum, 0):
            runs.append((start, stop))
            start = stop
    if start < last:
        runs[-1] = (runs[-1][0], last)
    return runs
