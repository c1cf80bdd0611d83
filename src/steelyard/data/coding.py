"""From ids to codes: strata and clusters, nested stage by stage, numbered in the order of their ids.

Works in two steps, each a pass over runs of the extract: collect which ids occur together, then give
every row the number of its unit. The numbering depends on the ids alone, not on the order of rows.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from steelyard.data.units import Stage, Units
from steelyard.errors import DesignError
from steelyard.plan import Design

Integers = NDArray[np.int64]


class UnitCollector:
    """The first step: which ids occur together, and how many rows they have."""

    def __init__(self, design: Design) -> None:
        self.design = design
        self.ids = (*design.strata, *design.clusters)
        self.found: dict[str, dict[Any, int]] = {name: {} for name in self.ids}
        self.missing: dict[str, int] = {}
        self.seen: list[pd.DataFrame] = []
        self.held = 0

    def add(self, table: pa.Table, in_domain: NDArray[np.bool_]) -> None:
        """Take in a run of the extract; ``in_domain`` (n,) says which rows are in the domain."""
        columns: dict[str, Any] = {}
        for place, name in enumerate(self.ids):
            columns[f"id{place}"] = self._first_seen(name, table.column(name))
        for place, name in enumerate(self.design.population):
            values = table.column(name).cast(pa.float64()).to_numpy()
            self._count_missing(name, int(np.isnan(values).sum()))
            columns[f"population{place}"] = values
        frame = pd.DataFrame({**columns, "domain_rows": in_domain.astype(np.int64)})
        frame["rows"] = 1
        self.seen.append(_distinct(frame))
        self.held += len(self.seen[-1])
        if self.held > 1_000_000 and len(self.seen) > 1:
            self._compact()

    def _first_seen(self, name: str, column: pa.ChunkedArray) -> Integers:
        """Return a number for every id, in the order in which ids were first seen; (n,)."""
        known = self.found[name]
        codes, values = _encoded(column)
        self._count_missing(name, int((codes < 0).sum()))
        numbers = np.array([known.setdefault(value, len(known)) for value in values] + [-1], dtype=np.int64)
        return np.asarray(numbers[codes])

    def _count_missing(self, name: str, count: int) -> None:
        if count:
            self.missing[name] = self.missing.get(name, 0) + count

    def _compact(self) -> None:
        self.seen = [_distinct(pd.concat(self.seen, ignore_index=True))]
        self.held = len(self.seen[0])

    def finish(self) -> UnitCoder:
        """Number the units.

        Raises
        ------
        DesignError
            An id is missing, or a population differs within a unit or is smaller than its sample.
        """
        for name, count in self.missing.items():
            raise DesignError(
                f'The design column "{name}" is missing in {count:,} row(s).',
                mend="Every row needs its stratum, clusters and populations: ask the producer, or drop those "
                "rows from the extract knowingly.",
            )
        self._compact()
        frame = self.seen[0]
        ranks = []
        for place, name in enumerate(self.ids):
            order = sorted(self.found[name], key=_sort_key)
            rank = np.empty(len(order), dtype=np.int64)
            rank[[self.found[name][value] for value in order]] = np.arange(len(order))
            ranks.append({value: k for k, value in enumerate(order)})
            frame[f"id{place}"] = rank[frame[f"id{place}"]]
        return _coder(self.design, self.ids, ranks, frame)


@dataclass(frozen=True)
class UnitCoder:
    """The second step: from a run of the extract to the number of each row's unit in the last stage.

    ``keys`` holds, for each id column, the sorted numbers ``parent * levels + rank`` that occur; a unit's
    number is the place of its key.
    """

    ids: tuple[str, ...]
    ranks: tuple[dict[Any, int], ...]
    keys: tuple[Integers, ...]
    units: Units
    notes: tuple[str, ...]

    def encode(self, table: pa.Table) -> Integers:
        """Return the unit of each row in the last stage of ``units``, (n,)."""
        code = np.zeros(table.num_rows, dtype=np.int64)
        for name, rank, keys in zip(self.ids, self.ranks, self.keys, strict=True):
            codes, values = _encoded(table.column(name))
            ranks = np.array([rank[value] for value in values], dtype=np.int64)
            code = np.searchsorted(keys, code * len(rank) + ranks[codes])
        return code


def _coder(
    design: Design, ids: tuple[str, ...], ranks: list[dict[Any, int]], frame: pd.DataFrame
) -> UnitCoder:
    code = np.zeros(len(frame), dtype=np.int64)
    keys, codes = [], []
    for place in range(len(ids)):
        key = code * len(ranks[place]) + frame[f"id{place}"].to_numpy()
        distinct, code = np.unique(key, return_inverse=True)
        keys.append(distinct)
        codes.append(code)
    strata = len(design.strata)
    by_stage = [codes[strata - 1] if strata else np.zeros(len(frame), dtype=np.int64), *codes[strata:]]
    names = [[*rank] for rank in ranks]
    stages: list[Stage] = []
    for number, of_stage in enumerate(by_stage):
        size = int(of_stage.max()) + 1
        first = np.full(size, -1, dtype=np.int64)
        first[of_stage[::-1]] = np.arange(len(frame))[::-1]
        columns = design.strata if number == 0 else (design.clusters[number - 1],)
        places = range(strata) if number == 0 else (strata + number - 1,)
        labels = [
            ", ".join(_label(names[p][frame[f"id{p}"].iat[i]]) for p in places) or "all rows" for i in first
        ]
        stages.append(
            Stage(
                columns=columns,
                labels=np.array(labels, dtype=np.str_),
                parent=np.zeros(size, dtype=np.int64) if number == 0 else by_stage[number - 1][first],
                rows=_sums(of_stage, frame["rows"], size),
                domain_rows=_sums(of_stage, frame["domain_rows"], size),
                population=_population(design, number, of_stage, frame, labels, size),
            )
        )
    units = Units(tuple(stages))
    _refuse_small_populations(design, units)
    return UnitCoder(ids, tuple(ranks), tuple(keys), units, tuple(_recurring(design, units)))


def _population(
    design: Design, number: int, of_stage: Integers, frame: pd.DataFrame, labels: list[str], size: int
) -> NDArray[np.float64] | None:
    """Return the population below each unit of a stage, refusing one that differs within a unit."""
    if number >= len(design.population):
        return None
    name = design.population[number]
    values = frame[f"population{number}"].to_numpy()
    low, high = np.full(size, np.inf), np.full(size, -np.inf)
    np.minimum.at(low, of_stage, values)
    np.maximum.at(high, of_stage, values)
    differs = np.flatnonzero(low != high)
    if len(differs):
        unit = differs[0]
        raise DesignError(
            f'The population column "{name}" differs within {len(differs)} unit(s): in {_unit(design, number)} '
            f"{labels[unit]} it is both {low[unit]:g} and {high[unit]:g}.",
            mend="It must say how many units the population has there, the same in every row of the unit.",
        )
    return low


def _refuse_small_populations(design: Design, units: Units) -> None:
    for number, name in enumerate(design.population):
        stage = units.stages[number]
        assert stage.population is not None
        if number + 1 < len(units.stages):
            sampled = np.bincount(units.stages[number + 1].parent, minlength=len(stage))
        else:
            sampled = stage.rows
        small = np.flatnonzero(~(stage.population >= sampled) | ~np.isfinite(stage.population))
        if len(small):
            unit = small[0]
            raise DesignError(
                f'The population column "{name}" is smaller than the sample in {len(small)} unit(s): '
                f"{_unit(design, number)} {stage.labels[unit]} has {int(sampled[unit]):,} sampled units and a "
                f"population of {stage.population[unit]:g}.",
                mend="Check that it counts units of that stage, not persons, and covers the whole population.",
            )


def _recurring(design: Design, units: Units) -> list[str]:
    """Say which ids stand for several units: they are nested within the unit above."""
    notes = []
    for number in range(1, len(units.stages)):
        stage, above = units.stages[number], units.stages[number - 1]
        if len(above) < 2:
            continue
        ids, counts = np.unique(stage.labels, return_counts=True)
        shared = int((counts > 1).sum())
        if shared:
            where = "strata" if number == 1 else f"units of {design.clusters[number - 2]}"
            notes.append(
                f"{shared:,} of {len(ids):,} ids of {design.clusters[number - 1]} recur in different {where}: "
                "they are taken as different units, nested within them."
            )
    return notes


def _unit(design: Design, number: int) -> str:
    return "stratum" if number == 0 else design.clusters[number - 1]


def _sums(code: Integers, values: Any, size: int) -> Integers:
    return np.bincount(code, np.asarray(values, dtype=np.float64), size).astype(np.int64)


def _distinct(frame: pd.DataFrame) -> pd.DataFrame:
    by = [name for name in frame.columns if name not in {"rows", "domain_rows"}]
    if not by:
        return frame[["rows", "domain_rows"]].sum().to_frame().T
    return frame.groupby(by, as_index=False, sort=False, dropna=False)[["rows", "domain_rows"]].sum()


def _encoded(column: pa.ChunkedArray) -> tuple[Integers, Sequence[Any]]:
    """Return a code for every row, -1 where missing, and the distinct ids; (n,)."""
    if not pa.types.is_dictionary(column.type):
        if pa.types.is_floating(column.type):
            column = pc.if_else(pc.is_nan(column), None, column)
        column = pc.dictionary_encode(column)
    array = column.combine_chunks()
    if isinstance(array, pa.ChunkedArray):
        array = array.unify_dictionaries().combine_chunks()
    codes = array.indices.fill_null(-1).to_numpy(zero_copy_only=False).astype(np.int64)
    values = array.dictionary.to_pylist()
    if None in values:
        codes[codes == values.index(None)] = -1
    return codes, values


def _sort_key(value: Any) -> tuple[int, Any]:
    """Order ids: numbers and booleans by value, text by code point, dates by date."""
    if isinstance(value, bool | int | float):
        return (0, value)
    return (1, value)


def _label(value: Any) -> str:
    return str(int(value)) if isinstance(value, float) and value.is_integer() else str(value)
