"""Which rows the balance table has: every term of the exposure formula, level by level, and what was asked for."""

from __future__ import annotations

import ast
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass, field
from itertools import combinations, product
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from steelyard.data.blocks import Term
from steelyard.data.formula import DesignBuilder, Values
from steelyard.data.guard import bare_column
from steelyard.data.values import level_text
from steelyard.errors import PlanError
from steelyard.plan import Balance

Floats = NDArray[np.float64]

MOST_TERMS = 500


@dataclass
class TermPlan:
    """The balance table's terms, and the columns to add to the exposure model's for them.

    ``extra_names`` and :meth:`extra` are the E columns to append after the model's p.
    """

    terms: list[Term] = field(default_factory=list)
    extra_names: list[str] = field(default_factory=list)
    makers: list[Callable[[Values], Floats]] = field(default_factory=list)

    def extra(self, values: Values, n: int) -> Floats:
        """Return the (n, E) extra columns."""
        if not self.makers:
            return np.zeros((n, 0))
        return np.column_stack([np.asarray(make(values), dtype=np.float64) for make in self.makers])


def plan_terms(
    builder: DesignBuilder,
    kinds: Mapping[str, str],
    levels: Mapping[str, tuple[str, ...]],
    balance: Balance,
    indicators: Collection[str] = (),
) -> TermPlan:
    """Plan the balance table of an exposure model.

    A category has a row for every level, the reference level included; a number has one row; a transformed
    number has a row for each of its columns and one for the number itself; then the columns the user
    names, and, on request, squares and products.

    Parameters
    ----------
    kinds : the extract's columns and their kinds
    levels : levels of the categories among the user's columns
    indicators : numbers known to be 0 or 1, whose squares are themselves

    Raises
    ------
    PlanError
        Products would make more than 500 rows.
    """
    maker = _Maker(builder, kinds)
    for term, where in builder.info.term_slices.items():
        if len(term.factors) == 1:
            maker.factor(term.factors[0].code, where)
        elif term.factors:
            maker.interaction(term, where)
    for name in balance.columns:
        if kinds[name] == "category":
            for level in levels[name]:
                maker.level(name, level, _LevelOf(name, level))
        else:
            maker.number(name)
    numbers = [row for row in maker.mains if maker.is_plain(row)]
    factors = numbers + [row for row in maker.mains if row.kind == "level"]
    if balance.squares:
        for row in numbers:
            if row.term not in indicators and not maker.has(f"I({row.term} ** 2)", ""):
                maker.add(Term(f"{row.term} squared", "", "number", row.index, row.index))
    if balance.interactions:
        for row in _products(factors, maker):
            maker.add(row)
    return maker.plan


class _Maker:
    """Collect rows, each once, and the extra columns they need.

    ``mains`` are the rows that are no interaction.
    """

    def __init__(self, builder: DesignBuilder, kinds: Mapping[str, str]) -> None:
        self.builder = builder
        self.kinds = kinds
        self.plan = TermPlan()
        self.mains: list[Term] = []
        self.numbers = {
            bare_column(term.factors[0].code): where.start
            for term, where in builder.info.term_slices.items()
            if len(term.factors) == 1 and not builder.categories(term.factors[0].code)
        }
        self.indicators = _indicators(builder)
        self.seen: set[tuple[str, str]] = set()

    def factor(self, code: str, where: slice) -> None:
        """Rows of a term of one factor, whose columns of the model are ``where``."""
        if not self.builder.categories(code) and bare_column(code) is None:
            columns = range(where.start, where.stop)
            for number, j in enumerate(columns, start=1):
                self.main(Term(code, str(number) if len(columns) > 1 else "", "number", j))
        self.margin(code)

    def margin(self, code: str) -> None:
        """Rows of a factor by itself: every level of a category, or the columns it is computed from."""
        categories = self.builder.categories(code)
        for number, category in enumerate(categories):
            label, text = self._label(code), level_text(category)
            index = self.indicators.get((code, number))
            if index is None:
                self.level(label, text, _CategoryOf(self.builder, code, number))
            else:
                self.main(Term(label, text, "level", index))
        if not categories:
            for name in self.builder.formula.by_factor[code]:
                if self.kinds[name] != "category":
                    self.number(name)

    def interaction(self, term: Any, where: slice) -> None:
        """Rows of an interaction: its factors by themselves, and the model's own columns."""
        for factor in term.factors:
            self.margin(factor.code)
        first = where.start
        for subterm in self.builder.info.term_codings[term]:
            if len(subterm.factors) > 1:
                name = ":".join(self._label(factor.code) for factor in subterm.factors)
                parts = [self._parts(subterm, factor) for factor in subterm.factors]
                # In patsy's columns the first factor runs fastest.
                for place, reverse in enumerate(product(*reversed(parts))):
                    texts = [text for text, _ in reversed(reverse) if text]
                    is_level = all(indicates for _, indicates in reverse)
                    self.add(Term(name, ", ".join(texts), "level" if is_level else "number", first + place))
            first += subterm.num_columns

    def number(self, name: str) -> None:
        """A row for a plain number, from the model's column if it has one."""
        if self.has(name, ""):
            return
        index = self.numbers.get(name)
        if index is None:
            index = self._extra(name, _NumberOf(name))
        self.main(Term(name, "", "number", index))

    def level(self, label: str, level: str, make: Callable[[Values], Floats]) -> None:
        """A row for a level that is no column of the model."""
        if not self.has(label, level):
            self.main(Term(label, level, "level", self._extra(f"{label}: {level}", make)))

    def main(self, term: Term) -> None:
        """Add a row that is no interaction, unless it is there."""
        if self.add(term):
            self.mains.append(term)

    def add(self, term: Term) -> bool:
        """Add a row and return whether it was new."""
        if self.has(term.term, term.level):
            return False
        self.seen.add((term.term, term.level))
        self.plan.terms.append(term)
        return True

    def has(self, term: str, level: str) -> bool:
        """Whether there is such a row."""
        return (term, level) in self.seen

    def is_plain(self, row: Term) -> bool:
        """Whether a row is a number that is a column of the extract itself, and not a yes or no."""
        return row.kind == "number" and not row.level and self.kinds.get(row.term) == "number"

    def _extra(self, name: str, make: Callable[[Values], Floats]) -> int:
        self.plan.extra_names.append(name)
        self.plan.makers.append(make)
        return len(self.builder.names) + len(self.plan.makers) - 1

    def _parts(self, subterm: Any, factor: Any) -> list[tuple[str, bool]]:
        """Return, for each column of a factor within an interaction, its text and whether it is an indicator."""
        info = self.builder.info.factor_infos[factor]
        if info.type == "numerical":
            count = info.num_columns
            return [(str(number) if count > 1 else "", False) for number in range(1, count + 1)]
        contrast = subterm.contrast_matrices[factor]
        levels = _unit_columns(contrast.matrix)
        return [
            (level_text(info.categories[levels[j]]), True) if j in levels else (suffix.strip("[]."), False)
            for j, suffix in enumerate(contrast.column_suffixes)
        ]

    def _label(self, code: str) -> str:
        """Return the plain name of a factor: its column, where it is C() of it or nothing else."""
        node = ast.parse(code, mode="eval").body
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == "C":
            return bare_column(ast.unparse(node.args[0])) or code
        return bare_column(code) or code


def _indicators(builder: DesignBuilder) -> dict[tuple[str, int], int]:
    """Return factor and number of a level -> the model's column that is the indicator of that level."""
    found = {}
    for term, subterms in builder.info.term_codings.items():
        first = builder.info.term_slices[term].start
        for subterm in subterms:
            if len(subterm.factors) == 1 and subterm.contrast_matrices:
                (factor,) = subterm.factors
                columns = _unit_columns(subterm.contrast_matrices[factor].matrix)
                found.update({(factor.code, level): first + j for j, level in columns.items()})
            first += subterm.num_columns
    return found


def _unit_columns(matrix: Floats) -> dict[int, int]:
    """Return column -> level for those columns of a contrast matrix that indicate one level."""
    return {
        j: int(np.argmax(column))
        for j, column in enumerate(np.asarray(matrix).T)
        if (column != 0).sum() == 1 and column.max() == 1
    }


def _products(rows: list[Term], maker: _Maker) -> list[Term]:
    """Return the products of pairs of rows of different terms that have no row yet."""
    pairs = [
        (a, b)
        for a, b in combinations(rows, 2)
        if a.term != b.term
        and not maker.has(f"{a.term}:{b.term}", _join(a, b))
        and not maker.has(f"{b.term}:{a.term}", _join(b, a))
    ]
    if len(pairs) > MOST_TERMS:
        raise PlanError(
            f"balance.interactions would add {len(pairs):,} rows to the balance table; at most {MOST_TERMS} are made.",
            mend="Write the products you need into the exposure formula, as a:b, and leave the key out; or "
            "derive them as columns and name those in balance.columns.",
        )
    return [
        Term(
            f"{a.term}:{b.term}",
            _join(a, b),
            "level" if a.kind == b.kind == "level" else "number",
            a.index,
            b.index,
        )
        for a, b in pairs
    ]


def _join(a: Term, b: Term) -> str:
    return ", ".join(row.level for row in (a, b) if row.level)


@dataclass(frozen=True)
class _NumberOf:
    name: str

    def __call__(self, values: Values) -> Floats:
        return np.asarray(values[self.name], dtype=np.float64)


@dataclass(frozen=True)
class _LevelOf:
    name: str
    level: str

    def __call__(self, values: Values) -> Floats:
        column = values[self.name]
        assert isinstance(column, pd.Categorical)
        return np.asarray(column == self.level, dtype=np.float64)


@dataclass(frozen=True)
class _CategoryOf:
    builder: DesignBuilder
    code: str
    number: int

    def __call__(self, values: Values) -> Floats:
        return np.asarray(self.builder.codes(self.code, values) == self.number, dtype=np.float64)
