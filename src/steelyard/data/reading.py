"""From a run of the extract to a chunk: values with missing codes gone, and why each row is in or out."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
import pyarrow as pa
from numpy.typing import NDArray

from steelyard.data.expression import Expression, parse_expression
from steelyard.data.formula import Formula, parse_formula
from steelyard.data.replicate_weights import replicate_columns, replicates_of
from steelyard.data.source import Extract
from steelyard.data.values import (
    Values,
    is_missing,
    level_text,
    refuse_bad_codes,
    refuse_other_kinds,
    values_of,
)
from steelyard.errors import PlanError
from steelyard.plan import Plan

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True)
class Chunk:
    """A run of the extract, read.

    Attributes
    ----------
    start : row of the extract at which it begins
    values : mapping
        Column -> (n,) float64 with NaN for missing, or Categorical.
    weight : (n,) float64
    exposure : (n,) float64
        1 exposed, 0 reference, NaN missing or neither.
    raw_exposure : the exposure's own values
    inside : (n,) bool
        Whether the domain expression holds.
    reason : (n,) int16
        -1 in the domain and complete, else the place of the first reason that leaves the row out.
    """

    start: int
    values: Mapping[str, Values]
    weight: Floats
    exposure: Floats
    raw_exposure: Values
    inside: Bools
    reason: NDArray[np.int16]

    @property
    def kept(self) -> Bools:
        """Rows of the domain that are complete, (n,)."""
        return np.asarray(self.reason < 0)


@dataclass(frozen=True)
class Reader:
    """What a plan reads of an extract, and how a run of it becomes a chunk.

    Attributes
    ----------
    formula : Formula
        Of the exposure.
    covariates : for each outcome its Formula, or None
    domain : Expression
    complete : columns that must not be missing, in the order in which they are looked at
    reasons : why a row may be left out, in the order in which reasons are looked at
    replicates : columns of the replicate weights that came with the extract
    """

    plan: Plan
    extract: Extract
    formula: Formula
    covariates: tuple[Formula | None, ...]
    domain: Expression
    complete: tuple[str, ...]
    reasons: tuple[str, ...]
    replicates: tuple[str, ...] = ()

    @property
    def exposure(self) -> str:
        """The exposure's column."""
        assert self.formula.response is not None
        return self.formula.response

    @property
    def columns(self) -> tuple[str, ...]:
        """All columns that are read."""
        design = self.plan.design
        named = (
            design.weight,
            *design.strata,
            *design.clusters,
            *design.population,
            *self.replicates,
            self.exposure,
            *self.domain.columns,
            *self.complete,
        )
        return tuple(dict.fromkeys(named))

    @property
    def design_columns(self) -> tuple[str, ...]:
        """The columns of the weight and of the sampling units."""
        design = self.plan.design
        return tuple(dict.fromkeys((design.weight, *design.strata, *design.clusters, *self.replicates)))

    def replicate_weights(self, table: pa.Table) -> Floats | NDArray[np.float32] | None:
        """Return the replicate weights of a run, (n, R); None where the extract has none."""
        if not self.replicates:
            return None
        return replicates_of(table, self.replicates, self.plan.data.missing)

    @property
    def categories(self) -> tuple[str, ...]:
        """Columns that are categories and whose levels the whole extract must tell."""
        return tuple(name for name in self.complete if self.extract.columns[name] == "category")

    def chunk(
        self, start: int, table: pa.Table, levels: Mapping[str, tuple[str, ...]] | None = None
    ) -> Chunk:
        """Read a run; ``levels`` gives the categories' levels where they are known already."""
        levels = levels or {}
        codes = self.plan.data.missing
        named = dict.fromkeys((self.exposure, *self.domain.columns, *self.complete))
        values = {
            name: values_of(table.column(name), codes.get(name, ()), levels.get(name)) for name in named
        }
        weight = values_of(table.column(self.plan.design.weight), codes.get(self.plan.design.weight, ()))
        assert isinstance(weight, np.ndarray)
        raw = values[self.exposure]
        exposure, missing = self._coded(raw), is_missing(raw)
        holds, known = self.domain.evaluate(values, table.num_rows)
        reason = np.full(table.num_rows, -1, dtype=np.int16)
        conditions = [~holds & known, ~known, missing, ~missing & np.isnan(exposure)]
        conditions += [is_missing(values[name]) for name in self.complete]
        for place in range(len(conditions) - 1, -1, -1):
            reason[conditions[place]] = place
        return Chunk(start, values, weight, exposure, raw, holds, reason)

    def _coded(self, raw: Values) -> Floats:
        """Return 1 for exposed, 0 for reference, NaN for missing and for neither; (n,)."""
        exposed, reference = self.plan.exposure.exposed, self.plan.exposure.reference
        if exposed is None:
            exposed, reference = 1, 0
        out = np.full(len(raw), np.nan)
        if reference is None:
            out[~is_missing(raw)] = 0
        else:
            out[_equal(raw, reference)] = 0
        out[_equal(raw, exposed)] = 1
        return out


def reader(extract: Extract, plan: Plan) -> Reader:
    """Find out what a plan reads of an extract; nothing is read yet.

    Raises
    ------
    ExtractError
        A column the plan names is missing or of no use.
    FormulaError
        A formula or the domain uses something a plan may not use.
    PlanError
        Missing codes do not fit their columns, or an outcome is text.
    """
    kinds = extract.columns
    design = plan.design
    extract.require((design.weight, *design.strata, *design.clusters, *design.population))
    for name in (design.weight, *design.population):
        if kinds[name] != "number":
            raise PlanError(
                f'The design column "{name}" holds {"text" if kinds[name] == "category" else kinds[name]}.',
                mend="It must hold numbers.",
            )
    supplied = design.replicates
    replicates = () if supplied is None else replicate_columns(extract, supplied, design.weight)
    refuse_bad_codes(extract, plan.data.missing)
    formula = parse_formula(plan.exposure.formula, kinds, sided=True)
    domain = parse_expression(plan.data.domain, kinds)
    outcomes = [outcome.name for outcome in plan.outcome]
    extract.require((*outcomes, *plan.balance.columns))
    for name in outcomes:
        if kinds[name] == "category":
            raise PlanError(
                f'The outcome "{name}" holds text.',
                mend="Derive a number from it: 0 and 1 for a yes or no, a score otherwise.",
            )
    covariates = tuple(
        parse_formula(outcome.covariates, kinds, sided=False) if outcome.covariates.strip() else None
        for outcome in plan.outcome
    )
    complete = dict.fromkeys((*formula.columns, *outcomes))
    for other in covariates:
        complete |= dict.fromkeys(other.columns if other else ())
    carried = carried_columns(plan)
    extract.require(carried)
    for name in carried:
        if kinds[name] == "category":
            raise PlanError(
                f'The column "{name}", a weight or a slope, holds text.',
                mend="Weights and slopes are numbers; a category may vary through columns of 0 and 1.",
            )
    complete |= dict.fromkeys((*plan.balance.columns, *carried))
    refuse_other_kinds(extract, list(complete), "a model")
    unknown = ", ".join(domain.columns)
    reasons = (
        "outside the domain",
        f"domain unknown: {unknown} missing",
        f"exposure {formula.response} missing",
        f"exposure {formula.response} at neither level",
        *(f"{name} missing" for name in complete),
    )
    return Reader(plan, extract, formula, covariates, domain, tuple(complete), reasons, replicates)


def carried_columns(plan: Plan) -> tuple[str, ...]:
    """Return the columns that are read as they are: weights of levels and clusters, and slopes."""
    names: dict[str, None] = {}
    if plan.exposure.cluster_weight is not None:
        names[plan.exposure.cluster_weight] = None
    for outcome in plan.outcome:
        if outcome.multilevel is not None:
            model = outcome.multilevel
            named = (*model.slopes, *([model.row_weight] if model.row_weight else []), *model.cluster_weights)
            names |= dict.fromkeys(name for name in named if name != "exposure")
    return tuple(names)


def _equal(values: Values, level: object) -> Bools:
    if isinstance(values, pd.Categorical):
        return np.asarray(values.astype(object) == str(level))
    if isinstance(level, str):
        return np.zeros(len(values), dtype=bool)
    return np.asarray(values == float(level))  # type: ignore[arg-type]


def exposure_counts(chunk: Chunk) -> dict[str, int]:
    """Return how many rows of the domain have each value of the exposure, by its text."""
    raw = chunk.raw_exposure[chunk.inside]
    if isinstance(raw, pd.Categorical):
        found = raw.value_counts()
        return {str(level): int(count) for level, count in found.items() if count}
    distinct, counts = np.unique(raw[~np.isnan(raw)], return_counts=True)
    return {level_text(value): int(count) for value, count in zip(distinct, counts, strict=True)}
