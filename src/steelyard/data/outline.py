"""The outline of an extract: its columns, which of them look like its design, and a plan to edit.

Looks at the first rows only and says so. Knows names and values; refuses to decide: every guess comes
with its reason and waits for a person.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc

from steelyard.data.drafts import draft_plan
from steelyard.data.guesses import ColumnSummary, Guess, guess_design
from steelyard.data.source import Extract
from steelyard.data.values import values_of

MOST_DISTINCT = 1000
LEVELS_SHOWN = 6
ENDS = 20
COLUMNS_AT_ONCE = 64


LOOKED_AT = 65_536


@dataclass(frozen=True)
class Outline:
    """What an extract looks like at first sight.

    Attributes
    ----------
    columns : frame, a row a column
        ``column``, ``type`` (as stored), ``kind`` ("number", "boolean", "category", "other"), ``missing``
        (share of the rows looked at), ``distinct`` (values found; missing above 1,000), ``low``, ``high``
        (numbers), ``values`` (range or first levels, as text).
    guesses : tuple of Guess
        Columns that may be the design, with the reasons.
    plan_text : str
        A TOML plan to edit: valid as it is, with every guess in place.
    rows : int
        In the extract.
    looked_at : int
        Rows that all this rests on: the first ones.
    """

    columns: pd.DataFrame
    guesses: tuple[Guess, ...]
    plan_text: str
    rows: int
    looked_at: int


def outline(extract: Extract, rows: int = LOOKED_AT) -> Outline:
    """Outline an extract from its first ``rows`` rows.

    Raises
    ------
    ExtractError
        A file is cut short, damaged or gone.
    """
    summaries = _summaries(extract, rows)
    looked_at = min(rows, extract.rows)
    guesses = guess_design(summaries, looked_at)
    files = tuple(part.name for part in extract.parts if part.path is not None)
    return Outline(
        columns=_frame(summaries),
        guesses=guesses,
        plan_text=draft_plan(files, summaries, guesses, extract.rows, looked_at),
        rows=extract.rows,
        looked_at=looked_at,
    )


def _summaries(extract: Extract, rows: int) -> tuple[ColumnSummary, ...]:
    names = list(extract.columns)
    found: list[ColumnSummary] = []
    # A wide extract is looked at some columns at a time, so that it need not fit in memory.
    for first in range(0, len(names), COLUMNS_AT_ONCE):
        some = names[first : first + COLUMNS_AT_ONCE]
        extract.require(some, "first file")
        _, table = next(extract.read(some, rows))
        found += [_summary(extract, name, table.column(name)) for name in some]
    return tuple(found)


def _summary(extract: Extract, name: str, column: pa.ChunkedArray) -> ColumnSummary:
    kind = extract.columns[name]
    stored = str(next(part.schema.field(name).type for part in extract.parts if name in part.schema.names))
    if kind == "other":
        return _other(name, stored, column)
    values = values_of(column, ())
    if isinstance(values, pd.Categorical):
        counts = values.value_counts()
        counts = counts[counts > 0].sort_index()
        return ColumnSummary(
            name=name,
            stored=stored,
            kind=kind,
            missing=float(np.mean(values.codes < 0)),
            distinct=len(counts),
            levels=tuple(str(level) for level in counts.index),
        )
    known = values[~np.isnan(values)]
    distinct = np.unique(known)
    return ColumnSummary(
        name=name,
        stored=stored,
        kind=kind,
        missing=float(np.mean(np.isnan(values))),
        distinct=len(distinct),
        low=float(known.min()) if len(known) else np.nan,
        high=float(known.max()) if len(known) else np.nan,
        mean=float(known.mean()) if len(known) else np.nan,
        whole=bool(np.all(distinct == np.floor(distinct))),
        numbers=tuple(
            distinct.tolist() if len(distinct) <= MOST_DISTINCT else [*distinct[:ENDS], *distinct[-ENDS:]]
        ),
    )


def _other(name: str, stored: str, column: pa.ChunkedArray) -> ColumnSummary:
    """Summarize dates, times and what is nested: as far as Arrow can count and order them."""
    try:
        distinct = int(pc.count_distinct(column).as_py())
    except pa.ArrowException:
        distinct = -1
    levels: tuple[str, ...] = ()
    if pa.types.is_temporal(column.type) and not pa.types.is_duration(column.type):
        limits = pc.min_max(column).as_py()
        levels = tuple(str(limits[key]) for key in ("min", "max") if limits[key] is not None)
    return ColumnSummary(
        name=name,
        stored=stored,
        kind="other",
        missing=column.null_count / max(len(column), 1),
        distinct=distinct,
        levels=levels,
    )


def _frame(summaries: tuple[ColumnSummary, ...]) -> pd.DataFrame:
    frame = pd.DataFrame(
        {
            "column": [each.name for each in summaries],
            "type": [each.stored for each in summaries],
            "kind": [each.kind for each in summaries],
            "missing": [each.missing for each in summaries],
            "distinct": pd.array(
                [each.distinct if 0 <= each.distinct <= MOST_DISTINCT else None for each in summaries],
                dtype="Int64",
            ),
            "low": [each.low for each in summaries],
            "high": [each.high for each in summaries],
            "values": [_values(each) for each in summaries],
        }
    )
    return frame


def _values(column: ColumnSummary) -> str:
    if column.kind == "other":
        return " to ".join(column.levels)
    if column.kind == "category":
        more = f", and {column.distinct - LEVELS_SHOWN:,} more" if column.distinct > LEVELS_SHOWN else ""
        return ", ".join(column.levels[:LEVELS_SHOWN]) + more
    return "" if np.isnan(column.low) else f"{column.low:.6g} to {column.high:.6g}"
