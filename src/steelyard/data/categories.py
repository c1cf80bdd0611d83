"""``C()`` of a formula: marks values as categories, having learnt their levels over all chunks."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
import patsy

from steelyard.errors import FormulaError

MOST_LEVELS = 2000


class _Categories:
    """Patsy's ``C``, as a transform that learns.

    Patsy itself stops looking for levels as soon as it has met 0 and 1 and nothing else, taking them for false
    and true; a code 2 further down the extract is then a level it does not know.
    """

    def __init__(self) -> None:
        self._found: set[Any] = set()
        self._levels: tuple[Any, ...] | None = None

    def memorize_chunk(self, data: Any, contrast: Any = None, levels: Any = None) -> None:
        """Take in a chunk of values."""
        if isinstance(data, pd.Categorical):
            self._levels = tuple(data.categories)
        elif np.asarray(data).dtype == bool:
            self._levels = (False, True)
        else:
            self._found.update(np.unique(np.asarray(data)).tolist())

    def memorize_finish(self) -> None:
        """Settle the levels, sorted."""
        if self._levels is None:
            refuse_many_levels("C() of a number", len(self._found))
            self._levels = tuple(sorted(self._found))

    def transform(self, data: Any, contrast: Any = None, levels: Any = None) -> Any:
        """Return the values marked as categories of all levels, or of those the formula lists."""
        if levels is None:
            assert self._levels is not None
            levels = self._levels
            data = _coded(data, levels)
        return patsy.categorical.C(data, contrast, levels)


def _coded(data: Any, levels: tuple[Any, ...]) -> Any:
    """Return numbers as a Categorical, which patsy need not look up one by one; unknown ones are left to patsy."""
    if isinstance(data, pd.Categorical) or not levels:
        return data
    sorted_levels, values = np.asarray(levels), np.asarray(data)
    codes = np.minimum(np.searchsorted(sorted_levels, values), len(levels) - 1)
    if values.ndim != 1 or not np.array_equal(sorted_levels[codes], values):
        return data
    return pd.Categorical.from_codes(codes, categories=pd.Index(levels, dtype=object))


def refuse_many_levels(what: str, count: int) -> None:
    """Refuse a category of more levels than a model can use: their contrasts would fill the memory.

    Raises
    ------
    FormulaError
        Naming the category and the count.
    """
    if count > MOST_LEVELS:
        raise FormulaError(
            f"{what} has {count:,} levels; at most {MOST_LEVELS:,} are taken.",
            mend="Group them, or use a number as a number.",
        )


C = patsy.stateful_transform(_Categories)
