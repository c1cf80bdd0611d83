"""From a column of the extract to what formulas see: numbers with NaN, or categories with levels.

Missing codes become missing here and nowhere else.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, TypeAlias

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from steelyard.data.source import Extract
from steelyard.errors import ExtractError, PlanError
from steelyard.plan import Scalar

Floats = NDArray[np.float64]
Values: TypeAlias = Floats | pd.Categorical


def refuse_bad_codes(extract: Extract, missing: Mapping[str, Sequence[Scalar]]) -> None:
    """Refuse missing codes for columns that are not there, or of another kind than the column.

    Raises
    ------
    ExtractError, PlanError
        Naming the column and the code.
    """
    extract.require(list(missing), "data.missing table")
    for name, codes in missing.items():
        kind = extract.columns[name]
        for code in codes:
            is_text = isinstance(code, str)
            if kind == "other" or is_text != (kind == "category"):
                raise PlanError(
                    f"data.missing gives {name} the code {code!r}, but the column holds "
                    f"{'text' if kind == 'category' else kind + 's'}.",
                    mend="Write text codes in quotes and number codes without.",
                )


def values_of(
    column: pa.ChunkedArray, codes: Sequence[Scalar], levels: Sequence[str] | None = None
) -> Values:
    """Return a column as float64 with NaN for missing, or as a Categorical.

    Parameters
    ----------
    codes : values that mean 'no answer'
    levels : all levels of a category, sorted; by default those found in the column itself
    """
    kind = column.type
    if pa.types.is_dictionary(kind):
        return _category(column, frozenset(map(str, codes)), levels)
    # Whole numbers beyond 2^53 are rounded, as any other number is.
    numbers = np.array(column.cast(pa.float64(), safe=False).to_numpy(), dtype=np.float64)
    for code in codes:
        numbers[numbers == float(code)] = np.nan
    return numbers


def levels_of(column: pa.ChunkedArray, codes: Sequence[Scalar]) -> set[str]:
    """Return the levels that occur in a category column, missing codes left out."""
    found = set(pc.unique(column.combine_chunks().dictionary_decode()).to_pylist()) - {None}
    return found - set(map(str, codes))


def is_missing(values: Values) -> NDArray[np.bool_]:
    """Return where values are missing, (n,)."""
    return np.asarray(pd.isna(values))


def level_text(value: Any) -> str:
    """Return a level as a person would write it: whole numbers without a point."""
    if isinstance(value, float | np.floating) and float(value).is_integer():
        return str(int(value))
    return str(value)


def refuse_other_kinds(extract: Extract, names: Sequence[str], what: str) -> None:
    """Refuse columns that are neither numbers nor categories.

    Raises
    ------
    ExtractError
        Naming the column and what to derive from it.
    """
    for name in names:
        if extract.columns[name] == "other":
            raise ExtractError(
                f'Column "{name}" is a {extract.parts[0].schema.field(name).type}, which {what} cannot use.',
                mend="Derive a number from it, such as a year or an age.",
            )


def _category(column: pa.ChunkedArray, codes: frozenset[str], levels: Sequence[str] | None) -> pd.Categorical:
    array = column.combine_chunks()
    if isinstance(array, pa.ChunkedArray):
        array = array.unify_dictionaries().combine_chunks()
    own = array.dictionary.to_pylist()
    if levels is None:
        levels = sorted({level for level in own if level is not None} - codes)
    place = {level: k for k, level in enumerate(levels)}
    lookup = np.array([place.get(level, -1) for level in own] + [-1], dtype=np.int32)
    index = array.indices.fill_null(len(own)).to_numpy(zero_copy_only=False)
    return pd.Categorical.from_codes(lookup[index], categories=pd.Index(list(levels), dtype=object))
