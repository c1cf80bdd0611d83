"""From ids to codes: strata and clusters, nested stage by stage, numbered in the order of their ids.

Works in two steps, each a pass over runs of the extract: collect which ids occur together, then give
every row the number of its unit. The numbering depends on the ids alone, not on the order of rows.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from steelyard.data.units import Stage, Units
from steelyard.data.values import values_of
from steelyard.errors import DesignError
from steelyard.plan import Design, Scalar

Integers = NDArray[np.int64]

SEEN_BEFORE_COMPACTING = 1_000_000
# Beyond 2^53 neighbouring whole numbers are one double: ids may have run into each other already.
LARGEST_EXACT_DOUBLE = 2.0**53


class UnitCollector:
    """The first step: which ids occur together, and how many rows they have.

    ``missing`` gives, by column, the codes that mean 'no answer'. Ids are held as places in ``found``, which
    lists the distinct ids of every run, run after run.
    """

    def __init__(self, design: Design, missing: Mapping[str, Sequence[Scalar]] | None = None) -> None:
        self.design = design
        self.codes = missing or {}
        self.ids = (*design.strata, *design.clusters)
        self.found: dict[str, list[pa.Array]] = {name: [] for name in self.ids}
        self.missing: dict[str, int] = {}
        self.seen: list[pd.DataFrame] = []
        self.held = 0
        self.rows = 0
        self.limit = SEEN_BEFORE_COMPACTING

    def add(self, table: pa.Table, in_domain: NDArray[np.bool_]) -> None:
        """Take in a run of the extract; ``in_domain`` (n,) says which rows are in the domain.

        Raises
        ------
        DesignError
            A column holds what cannot be an id.
        """
        columns: dict[str, NDArray[np.int64 | np.float64]] = {}
        for place, name in enumerate(self.ids):
            columns[f"id{place}"] = self._places(name, table.column(name))
        for place, name in enumerate(self.design.population):
            values = np.asarray(values_of(table.column(name), self.codes.get(name, ())), dtype=np.float64)
            self._count_missing(name, int(np.isnan(values).sum()))
            columns[f"population{place}"] = values
        frame = pd.DataFrame({**columns, "domain_rows": in_domain.astype(np.int64)})
        frame["rows"] = 1
        frame["first_row"] = np.arange(self.rows, self.rows + len(frame))
        self.rows += len(frame)
        self.seen.append(_distinct(frame))
        self.held += len(self.seen[-1])
        if self.held > self.limit:
            self._compact()
            self.limit = max(SEEN_BEFORE_COMPACTING, 2 * self.held)

    def _places(self, name: str, column: pa.ChunkedArray) -> Integers:
        """Return the place of every row's id in ``found``, -1 where it is missing; (n,)."""
        codes, values = _encoded(name, column)
        unknown = _is_code(values, self.codes.get(name, ()))
        codes[unknown[codes]] = -1
        self._count_missing(name, int((codes < 0).sum()))
        known = self.found[name]
        if known and known[0].type != values.type:
            raise DesignError(
                f'The design column "{name}" is {known[0].type} in one place and {values.type} in another.',
                mend="Write it with one type in all files.",
            )
        before = sum(map(len, known))
        known.append(values)
        return np.where(codes < 0, -1, codes + before)

    def _count_missing(self, name: str, count: int) -> None:
        if count:
            self.missing[name] = self.missing.get(name, 0) + count

    def _compact(self) -> None:
        """Hold every id once, in sorted order, and every combination of ids once."""
        frame = pd.concat(self.seen, ignore_index=True)
        for place, name in enumerate(self.ids):
            values = pa.concat_arrays(self.found[name])
            used = frame[f"id{place}"].to_numpy()
            occurs = np.zeros(len(values), dtype=bool)
            occurs[used[used >= 0]] = True
            distinct = pc.unique(values.filter(pa.array(occurs)))
            distinct = distinct.take(pc.sort_indices(distinct))
            rank = pc.index_in(values, value_set=distinct).fill_null(-1).to_numpy(zero_copy_only=False)
            frame[f"id{place}"] = np.append(rank, -1)[used].astype(np.int64)
            self.found[name] = [distinct]
        self.seen = [_distinct(frame)]
        self.held = len(self.seen[0])

    def finish(self) -> UnitCoder:
        """Number the units.

        Raises
        ------
        DesignError
            An id is missing, or a population differs within a unit or is smaller than its sample.
        """
        for name, count in self.missing.items():
            by_code = (
                f", counting the code(s) {_listed(self.codes[name])} of data.missing"
                if self.codes.get(name)
                else ""
            )
            raise DesignError(
                f'The design column "{name}" is missing in {count:,} row(s){by_code}.',
                mend="Every row needs its stratum, clusters and populations: ask the producer, or drop those "
                "rows from the extract knowingly.",
            )
        self._compact()
        return _coder(self.design, self.ids, [self.found[name][0] for name in self.ids], self.seen[0])


@dataclass(frozen=True)
class UnitCoder:
    """The second step: from a run of the extract to the number of each row's unit in the last stage.

    ``levels`` holds the sorted ids of each id column; ``keys``, for each, the sorted numbers
    ``parent * levels + rank`` that occur. A unit's number is the place of its key.
    """

    ids: tuple[str, ...]
    levels: tuple[pd.Index, ...]
    keys: tuple[Integers, ...]
    units: Units
    notes: tuple[str, ...]

    def encode(self, table: pa.Table) -> Integers:
        """Return the unit of each row in the last stage of ``units``, (n,)."""
        code = np.zeros(table.num_rows, dtype=np.int64)
        for name, levels, keys in zip(self.ids, self.levels, self.keys, strict=True):
            codes, values = _encoded(name, table.column(name))
            ranks = levels.get_indexer(_index(values)).astype(np.int64)
            code = np.searchsorted(keys, code * len(levels) + ranks[codes])
        return code


def _coder(design: Design, ids: tuple[str, ...], levels: list[pa.Array], frame: pd.DataFrame) -> UnitCoder:
    code = np.zeros(len(frame), dtype=np.int64)
    keys, codes = [], []
    for place, of_column in enumerate(levels):
        key = code * len(of_column) + frame[f"id{place}"].to_numpy()
        distinct, code = np.unique(key, return_inverse=True)
        keys.append(distinct)
        codes.append(code)
    strata = len(design.strata)
    by_stage = [codes[strata - 1] if strata else np.zeros(len(frame), dtype=np.int64), *codes[strata:]]
    texts = [_texts(of_column) for of_column in levels]
    stages: list[Stage] = []
    notes: list[str] = []
    for number, of_stage in enumerate(by_stage):
        size = int(of_stage.max()) + 1
        first = np.full(size, -1, dtype=np.int64)
        first[of_stage[::-1]] = np.arange(len(frame))[::-1]
        columns = design.strata if number == 0 else (design.clusters[number - 1],)
        places = range(strata) if number == 0 else (strata + number - 1,)
        ranks = [frame[f"id{place}"].to_numpy()[first] for place in places]
        labels = _joined([texts[place][rank] for place, rank in zip(places, ranks, strict=True)], size)
        stages.append(
            Stage(
                columns=columns,
                labels=labels,
                parent=np.zeros(size, dtype=np.int64) if number == 0 else by_stage[number - 1][first],
                rows=_sums(of_stage, frame["rows"].to_numpy(), size),
                domain_rows=_sums(of_stage, frame["domain_rows"].to_numpy(), size),
                first_rows=_smallest(of_stage, frame["first_row"].to_numpy(), size),
                population=_population(design, number, of_stage, frame, labels, size),
            )
        )
        if number and len(stages[number - 1]) > 1:
            notes += _recurring(design, number, np.bincount(ranks[0]))
    units = Units(tuple(stages))
    _refuse_small_populations(design, units)
    indexes = tuple(_index(of_column) for of_column in levels)
    for index in indexes:
        # The first look-up builds the table of ids, once, before threads share it.
        index.get_indexer(index[:1])
    return UnitCoder(ids, indexes, tuple(keys), units, tuple(notes))


def _population(
    design: Design, number: int, of_stage: Integers, frame: pd.DataFrame, labels: NDArray[np.str_], size: int
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
        endless = np.flatnonzero(~np.isfinite(stage.population))
        if len(endless):
            raise DesignError(
                f'The population column "{name}" is infinite in {len(endless)} unit(s), first in '
                f"{_unit(design, number)} {stage.labels[endless[0]]}.",
                mend="Give how many units the population has there; leave the column out of the plan if nobody knows.",
            )
        small = np.flatnonzero(stage.population < sampled)
        if len(small):
            unit = small[0]
            raise DesignError(
                f'The population column "{name}" is smaller than the sample in {len(small)} unit(s): '
                f"{_unit(design, number)} {stage.labels[unit]} has {int(sampled[unit]):,} sampled units and a "
                f"population of {stage.population[unit]:g}.",
                mend="Check that it counts units of that stage, not persons, and covers the whole population.",
            )


def _recurring(design: Design, number: int, units_of_id: Integers) -> list[str]:
    """Say which ids of a stage stand for several units: they are nested within the unit above."""
    shared = int((units_of_id > 1).sum())
    if not shared:
        return []
    where = "strata" if number == 1 else f"units of {design.clusters[number - 2]}"
    return [
        f"{shared:,} of {len(units_of_id):,} ids of {design.clusters[number - 1]} recur in different {where}: "
        "they are taken as different units, nested within them."
    ]


def _unit(design: Design, number: int) -> str:
    return "stratum" if number == 0 else design.clusters[number - 1]


def _sums(code: Integers, values: Integers, size: int) -> Integers:
    return np.bincount(code, values.astype(np.float64), size).astype(np.int64)


def _smallest(code: Integers, values: Integers, size: int) -> Integers:
    smallest = np.full(size, np.iinfo(np.int64).max)
    np.minimum.at(smallest, code, values.astype(np.int64))
    return smallest


# What is said of each combination of ids, and how that adds up.
COUNTED = {"rows": "sum", "domain_rows": "sum", "first_row": "min"}


def _distinct(frame: pd.DataFrame) -> pd.DataFrame:
    by = [name for name in frame.columns if name not in COUNTED]
    if not by:
        return frame.agg(COUNTED).to_frame().T
    return frame.groupby(by, as_index=False, sort=False, dropna=False)[list(COUNTED)].agg(COUNTED)


def _encoded(name: str, column: pa.ChunkedArray) -> tuple[Integers, pa.Array]:
    """Return a code for every row, -1 where missing, and the distinct ids; (n,)."""
    if pa.types.is_nested(column.type):
        raise DesignError(
            f'The design column "{name}" is a {column.type}, which cannot be an id.',
            mend="Derive an integer or a text from it.",
        )
    if not pa.types.is_dictionary(column.type):
        if pa.types.is_floating(column.type):
            column = pc.if_else(pc.is_nan(column), None, column)
        column = pc.dictionary_encode(column)
    array = column.combine_chunks()
    if isinstance(array, pa.ChunkedArray):
        array = array.unify_dictionaries().combine_chunks()
    codes = array.indices.cast(pa.int64()).fill_null(-1).to_numpy(zero_copy_only=False)
    values = array.dictionary
    if len(values) > len(codes):
        # A file's own dictionary may list the ids of a whole row group.
        used, codes = np.unique(codes, return_inverse=True)
        codes -= int(used[0] < 0)
        values = values.take(pa.array(used[used >= 0]))
    if pa.types.is_floating(values.type):
        _refuse_inexact(name, values)
    # A dictionary may hold a missing value of its own.
    empty = np.append(values.is_null().to_numpy(zero_copy_only=False), False)
    return np.where(empty[codes], -1, codes), values


def _refuse_inexact(name: str, values: pa.Array) -> None:
    large = values.filter(pc.greater_equal(pc.abs(values), LARGEST_EXACT_DOUBLE))
    if len(large):
        raise DesignError(
            f'The design column "{name}" holds ids as {values.type} that are too large for it, such as '
            f"{large[0].as_py():.0f}: different ids may have become one.",
            mend="Have it written again as an integer or a text.",
        )


def _is_code(values: pa.Array, codes: Sequence[Scalar]) -> NDArray[np.bool_]:
    """Return which ids are codes for 'no answer', and one False more for the place -1; (distinct + 1,)."""
    unknown = np.zeros(len(values) + 1, dtype=bool)
    if codes:
        unknown[:-1] = [value in codes for value in values.to_pylist()]
    return unknown


def _index(values: pa.Array) -> pd.Index:
    """Return ids as an index that finds them by value: numbers as numbers, all else as objects."""
    if pa.types.is_integer(values.type) or pa.types.is_floating(values.type):
        return pd.Index(values.to_numpy(zero_copy_only=False))
    return pd.Index(values.to_pylist(), dtype=object)


def _texts(values: pa.Array) -> NDArray[np.str_]:
    """Return ids as a person would write them: whole numbers without a point."""
    return np.array([_label(value) for value in values.to_pylist()], dtype=np.str_)


def _label(value: object) -> str:
    return str(int(value)) if isinstance(value, float) and value.is_integer() else str(value)


def _joined(parts: Sequence[NDArray[np.str_]], size: int) -> NDArray[np.str_]:
    if not parts:
        return np.full(size, "all rows", dtype=np.str_)
    if len(parts) == 1:
        return parts[0]
    return np.array([", ".join(each) for each in zip(*parts, strict=True)], dtype=np.str_)


def _listed(codes: Sequence[Scalar]) -> str:
    return ", ".join(map(str, codes))
