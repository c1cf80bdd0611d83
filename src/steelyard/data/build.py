"""From an extract to design rows: the first reading looks, the second builds.

The first reading finds levels, units and exclusions and lets the formulas learn; the second builds the
design rows, block by block, and nothing is built again after that.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from itertools import pairwise
from typing import TypeAlias

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from steelyard.data.blocks import Block, Model, Rows
from steelyard.data.checkup import Checkup, conclude
from steelyard.data.coding import UnitCoder, UnitCollector
from steelyard.data.formula import DesignBuilder, learn
from steelyard.data.passes import Engine
from steelyard.data.reading import Chunk, Reader, carried_columns, reader
from steelyard.data.source import READ_ROWS, Extract
from steelyard.data.tally import Tally
from steelyard.data.terms import TermPlan, plan_terms
from steelyard.data.values import Values, level_text, levels_of
from steelyard.errors import ExtractError, FormulaError, PlanError
from steelyard.plan import Plan, Scalar

Floats = NDArray[np.float64]
Levels: TypeAlias = Mapping[str, tuple[str, ...]]
# The place of a column, and the rows of the extract where it is not a finite number.
_Unusable: TypeAlias = tuple[int, NDArray[np.int64]]


def build_rows(extract: Extract, plan: Plan, engine: Engine, block_rows: int = 8192) -> tuple[Rows, Checkup]:
    """Read an extract twice and return its design rows and its check-up.

    Parameters
    ----------
    block_rows : rows of the extract to a block, before those outside the domain are left out

    Raises
    ------
    SteelyardError
        The extract, the design or the plan cannot give an answer; see :mod:`steelyard.errors`.
    """
    if block_rows < 1:
        raise PlanError(
            f"block_rows is {block_rows}.", mend="Give a block at least one row; 8192 is the default."
        )
    plan_reader = reader(extract, plan)
    size = block_rows * max(1, READ_ROWS // block_rows)
    tally, coder, levels = _look(plan_reader, size, engine)
    _refuse_unusable(plan_reader, tally)
    assembly = _assembly(plan_reader, levels, coder, size, tally.indicators)
    blocks = _blocks(plan_reader, assembly, block_rows, size, engine)
    names, exposure_model, outcome_models = assembly.columns()
    rows = Rows(
        blocks=blocks,
        names=names,
        exposure_model=exposure_model,
        outcome_models=outcome_models,
        outcomes=assembly.outcome_places(),
        terms=tuple(assembly.terms.terms),
        levels=_level_names(plan_reader, tally),
        units=coder.units,
        unit_of=coder.encode,
        replicates=plan_reader.replicates,
        carried=assembly.carried(),
        total=tally.rows,
        exclusions={plan_reader.reasons[k]: n for k, n in sorted(tally.reasons.items())},
        warnings=tuple(_constant_warnings(plan_reader, tally)),
    )
    return rows, conclude(plan_reader, tally, rows, coder.notes, extract.digests(), engine)


def _look(plan_reader: Reader, size: int, engine: Engine) -> tuple[Tally, UnitCoder, Levels]:
    """The first reading: count, collect units and levels."""
    plan = plan_reader.plan
    tally, collector = Tally(plan_reader), UnitCollector(plan.design, plan.data.missing)
    levels: dict[str, set[str]] = {name: set() for name in plan_reader.categories}
    extract = plan_reader.extract
    for start, table in extract.read(plan_reader.columns, size):
        chunk = plan_reader.chunk(start, table)
        tally.add(chunk)
        replicates = plan_reader.replicate_weights(table)
        if replicates is not None:
            tally.replicates.add(start, replicates, chunk.weight)
        collector.add(table, chunk.kept)
        for name, found in levels.items():
            found |= levels_of(table.column(name), plan.data.missing.get(name, ()))
        engine.progress("reading: look", min(start + size, extract.rows), extract.rows)
    tally.refuse_bad_weights()
    if plan_reader.replicates:
        tally.replicates.refuse_unfit(plan.design.weight)
    return tally, collector.finish(), {name: tuple(sorted(found)) for name, found in levels.items()}


def _refuse_unusable(plan_reader: Reader, tally: Tally) -> None:
    exposure, plan = plan_reader.exposure, plan_reader.plan.exposure
    found = ", ".join(f"{level} ({count:,} rows)" for level, count in tally.levels.most_common(12))
    if not tally.domain_weights.count:
        told = ", ".join(f"{plan_reader.reasons[k]} ({n:,} rows)" for k, n in sorted(tally.reasons.items()))
        if not tally.levels or not tally.reasons.get(3):
            raise ExtractError(
                f"No row is left in the domain: {told}.", mend="Check data.domain and the missing codes."
            )
    if tally.domain_weights.count and not tally.domain_weights.total > 0:
        raise ExtractError(
            f"All {tally.domain_weights.count:,} rows of the domain have sampling weight 0.",
            mend="Check design.weight and data.domain.",
        )
    kind = plan_reader.extract.columns[exposure]
    for key, value in (("exposed", plan.exposed), ("reference", plan.reference)):
        if isinstance(value, str) and kind != "category":
            raise PlanError(
                f'exposure.{key} is the text "{value}", but the exposure "{exposure}" holds {kind}s: {found}.',
                mend="Write it without quotes.",
            )
    if plan.exposed is None and kind == "category":
        raise PlanError(
            f'The exposure "{exposure}" is text: {found}.',
            mend='Say which is which: exposure.exposed = "..." and exposure.reference = "...".',
        )
    if plan.exposed is None and set(tally.levels) - {"0", "1"}:
        raise PlanError(
            f'The exposure "{exposure}" is not 0 or 1 everywhere in the domain: {found}.',
            mend="Say which values to compare: exposure.exposed and exposure.reference; or name codes that "
            "mean 'no answer' in data.missing.",
        )
    if plan.exposed is not None and plan.reference is None and len(tally.levels) > 2:
        raise PlanError(
            f'The exposure "{exposure}" has {len(tally.levels)} values: {found}.',
            mend="Name the one to compare with in exposure.reference; rows with another leave the domain.",
        )
    exposed, reference = (int(n) for n in tally.inside[1:])
    if not exposed or not reference:
        raise PlanError(
            f'The exposure "{exposure}" has {exposed:,} exposed and {reference:,} reference rows in the '
            f"domain: {found or 'no value'}.",
            mend="A comparison needs both; check exposure.exposed, exposure.reference and data.domain.",
        )
    for (name, family), count in tally.bad_values.items():
        if count:
            raise PlanError(
                f'The outcome "{name}" has {count:,} row(s) that a {family} outcome cannot have.',
                mend="A binomial outcome is 0 or 1, a poisson outcome not negative; name codes that mean "
                "'no answer' in data.missing.",
            )


def _level_names(plan_reader: Reader, tally: Tally) -> tuple[str, str]:
    """Return the exposed and the reference level as the extract spells them."""
    plan = plan_reader.plan.exposure
    is_text = plan_reader.extract.columns[plan_reader.exposure] == "category"

    def text(value: Scalar) -> str:
        return str(value) if is_text else level_text(float(value))

    if plan.exposed is None:
        return "1", "0"
    exposed = text(plan.exposed)
    if plan.reference is not None:
        return exposed, text(plan.reference)
    return exposed, next(level for level in tally.levels if level != exposed)


def _constant_warnings(plan_reader: Reader, tally: Tally) -> list[str]:
    constant = {name: f"{low:g}" for name, low in tally.low.items() if low == tally.high[name]}
    # Weights of clusters and levels may well be one and the same.
    weights = carried_columns(plan_reader.plan)
    constant |= {name: f'"{next(iter(seen))}"' for name, seen in tally.texts.items() if len(seen) == 1}
    return [
        f"{name} is {constant[name]} in every row of the domain: it tells nothing there."
        for name in plan_reader.complete
        if name in constant and name not in weights
    ]


@dataclass(frozen=True)
class _Assembly:
    """How a chunk becomes the columns of a block, and what they are called."""

    plan_reader: Reader
    levels: Levels
    coder: UnitCoder
    exposure: DesignBuilder
    covariates: tuple[DesignBuilder | None, ...]
    terms: TermPlan

    def columns(self) -> tuple[tuple[str, ...], Model, tuple[Model | None, ...]]:
        """Return the names of the blocks' columns, the exposure's model, and the outcomes' models.

        A column that several models share stands once: patsy's name of it says all there is to it, as every
        formula has learnt from the same rows.
        """
        names = [*self.exposure.names, *self.terms.extra_names]
        names += [f"outcome {name}" for name in self._outcomes()]
        names += [f"carried {name}" for name in self._carried()]
        place = self._places()
        models: list[Model | None] = []
        for builder in self.covariates:
            if builder is None:
                models.append(None)
                continue
            for column, name in zip(builder.info.column_names, builder.names, strict=True):
                if column not in place:
                    place[column] = len(names)
                    names.append(name)
            models.append(_model(builder, tuple(place[column] for column in builder.info.column_names)))
        exposure_model = _model(self.exposure, tuple(range(len(self.exposure.names))))
        return tuple(names), exposure_model, tuple(models)

    def _places(self) -> dict[str, int]:
        """Return where outcome models find columns that stand there anyway, by patsy's names of them."""
        first = len(self.exposure.names)
        # A plain word names a column of the extract here as in patsy; an odd name might mean something else.
        extra = {name: first + k for k, name in enumerate(self.terms.extra_names) if name.isidentifier()}
        return {**extra, **{column: k for k, column in enumerate(self.exposure.info.column_names)}}

    def outcome_places(self) -> tuple[int, ...]:
        """Return, for each outcome of the plan, the place of its column."""
        first = len(self.exposure.names) + len(self.terms.extra_names)
        place = {name: first + k for k, name in enumerate(self._outcomes())}
        return tuple(place[outcome.name] for outcome in self.plan_reader.plan.outcome)

    def _outcomes(self) -> tuple[str, ...]:
        return tuple(dict.fromkeys(outcome.name for outcome in self.plan_reader.plan.outcome))

    def _carried(self) -> tuple[str, ...]:
        return tuple(name for name in carried_columns(self.plan_reader.plan) if name not in self._outcomes())

    def carried(self) -> dict[str, int]:
        """Return the places of the columns that multilevel models read as they are."""
        first = len(self.exposure.names) + len(self.terms.extra_names)
        place = {name: first + k for k, name in enumerate((*self._outcomes(), *self._carried()))}
        return {name: place[name] for name in carried_columns(self.plan_reader.plan)}

    def build(self, values: Mapping[str, Values], n: int) -> Floats:
        """Return the (n, C) columns of complete rows."""
        parts = [self.exposure.build(values, n), self.terms.extra(values, n)]
        as_they_are = (*self._outcomes(), *self._carried())
        parts += [np.asarray(values[name], dtype=np.float64)[:, np.newaxis] for name in as_they_are]
        parts += [builder.build(values, n)[:, own] for builder, own in self._own_columns()]
        return np.concatenate(parts, axis=1)

    def _own_columns(self) -> Iterator[tuple[DesignBuilder, list[int]]]:
        """Give the outcome models that bring columns no model before them has, and which those are."""
        known = set(self._places())
        for builder in self.covariates:
            if builder is not None:
                own = [k for k, column in enumerate(builder.info.column_names) if column not in known]
                known.update(builder.info.column_names)
                if own:
                    yield builder, own


def _model(builder: DesignBuilder, index: tuple[int, ...]) -> Model:
    return Model(builder.formula.text, builder.names, index, builder.intercept)


def _assembly(
    plan_reader: Reader, levels: Levels, coder: UnitCoder, size: int, indicators: frozenset[str]
) -> _Assembly:
    """Let the formulas learn from the complete rows of the domain, and plan the columns."""

    def chunks() -> Iterator[Mapping[str, Values]]:
        for start, table in plan_reader.extract.read(plan_reader.columns, size):
            chunk = plan_reader.chunk(start, table, levels)
            if chunk.kept.any():
                yield _kept(chunk)

    exposure = learn(plan_reader.formula, chunks)
    covariates = tuple(None if f is None else learn(f, chunks) for f in plan_reader.covariates)
    kinds = plan_reader.extract.columns
    terms = plan_terms(exposure, kinds, levels, plan_reader.plan.balance, indicators)
    if not terms.terms:
        raise FormulaError(
            f'The exposure formula "{plan_reader.formula.text}" has no covariate.',
            mend="Name what confounds exposure and outcome.",
        )
    return _Assembly(plan_reader, levels, coder, exposure, covariates, terms)


def _kept(chunk: Chunk) -> dict[str, Values]:
    return {name: column[chunk.kept] for name, column in chunk.values.items()}


def _blocks(
    plan_reader: Reader, assembly: _Assembly, block_rows: int, size: int, engine: Engine
) -> list[Block]:
    """The second reading: build the design rows, chunk by chunk, and cut them into blocks."""

    def build(run: tuple[int, pa.Table]) -> tuple[list[Block], list[_Unusable]]:
        start, table = run
        chunk = plan_reader.chunk(start, table, assembly.levels)
        kept = np.flatnonzero(chunk.kept)
        if not len(kept):
            return [], []
        columns = assembly.build(_kept(chunk), len(kept))
        unusable = _unusable(columns, start + kept)
        if unusable:
            return [], unusable
        unit = assembly.coder.encode(table)
        replicates = plan_reader.replicate_weights(table)
        if replicates is not None:
            replicates = replicates[kept]
        cuts = np.searchsorted(kept, np.arange(0, table.num_rows + block_rows, block_rows))
        blocks = [
            Block(
                position=(start + kept[a:b]).astype(np.int64),
                columns=columns[a:b] if b - a == len(kept) else columns[a:b].copy(),
                exposure=chunk.exposure[kept[a:b]],
                weight=chunk.weight[kept[a:b]],
                unit=unit[kept[a:b]],
                replicates=None if replicates is None else replicates[a:b].copy(),
            )
            for a, b in pairwise(cuts)
            if b > a
        ]
        return blocks, []

    runs = plan_reader.extract.read(plan_reader.columns, size)
    count = -(-plan_reader.extract.rows // size)
    # Formulas that have learnt something cannot travel to another process.
    blocks, unusable = engine.local().run("reading: build", runs, build, total=count)
    _refuse_unusable_values(unusable, assembly.columns()[0])
    # What Arrow keeps for reading more is better used by the estimates.
    pa.default_memory_pool().release_unused()
    return blocks


def _unusable(columns: Floats, position: NDArray[np.int64]) -> list[_Unusable]:
    """Return each column that is not finite somewhere, with the rows of the extract where it is not."""
    bad = ~np.isfinite(columns)
    return [(int(place), position[bad[:, place]]) for place in np.flatnonzero(bad.any(axis=0))]


def _refuse_unusable_values(unusable: list[_Unusable], names: tuple[str, ...]) -> None:
    if not unusable:
        return
    first = min(place for place, _ in unusable)
    where = np.concatenate([rows for place, rows in unusable if place == first])
    raise FormulaError(
        f'The design column "{names[first]}" is not a finite number in {len(where):,} row(s), first in '
        f"row(s) {', '.join(map(str, where[:5]))} (counted from 0).",
        mend="Look at the values there, such as the logarithm of 0: recode them, or name codes in "
        "data.missing.",
    )
