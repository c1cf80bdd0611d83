"""Which rows the balance table has: every term of the exposure formula, level by level, and what was asked for."""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from itertools import combinations

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
) -> TermPlan:
    """Plan the balance table of an exposure model.

    A category has a row for every level, the reference level included; a number has one row; a transformed
    number has a row for each of its columns and one for the number itself; then the columns the user
    names, and, on request, squares and products.

    Parameters
    ----------
    kinds : the extract's columns and their kinds
    levels : levels of the categories among the user's columns

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
            maker.product_of_model(where)
    for name in balance.columns:
        if kinds[name] == "category":
            for level in levels[name]:
                maker.indicator(name, level, _LevelOf(name, level))
        else:
            maker.number(name)
    numbers, rows = maker.plain_numbers(), list(maker.plan.terms)
    if balance.squares:
        maker.plan.terms += [Term(f"{t.term} squared", "", "number", t.index, t.index) for t in numbers]
    if balance.interactions:
        maker.plan.terms += _products(numbers + [t for t in rows if t.kind == "level" and t.times is None])
    return maker.plan


class _Maker:
    def __init__(self, builder: DesignBuilder, kinds: Mapping[str, str]) -> None:
        self.builder = builder
        self.kinds = kinds
        self.plan = TermPlan()
        self.place = {name: j for j, name in enumerate(builder.names)}

    def factor(self, code: str, where: slice) -> None:
        """Rows of a term of one factor, whose columns of the model are ``where``."""
        categories = self.builder.categories(code)
        columns = range(*where.indices(len(self.builder.names)))
        if categories:
            label = self._label(code)
            for number, category in enumerate(categories):
                text = level_text(category)
                own = [self.place.get(f"{code}[T.{text}]"), self.place.get(f"{code}[{text}]")]
                index = next((j for j in own if j is not None), None)
                if index is not None:
                    self._add(Term(label, text, "level", index))
                else:
                    self.indicator(label, text, _CategoryOf(self.builder, code, number))
            return
        if bare_column(code) is not None:
            self._add(Term(str(bare_column(code)), "", "number", columns[0]))
            return
        for number, j in enumerate(columns, start=1):
            self._add(Term(code, str(number) if len(columns) > 1 else "", "number", j))
        for name in self.builder.formula.by_factor[code]:
            if self.kinds[name] != "category":
                self.number(name)

    def product_of_model(self, where: slice) -> None:
        """Rows of an interaction: the model's own columns."""
        for j in range(*where.indices(len(self.builder.names))):
            name = self.builder.names[j]
            found = re.findall(r"\[(?:T\.)?([^\]]*)\]", name)
            plain = re.sub(r"\[[^\]]*\]", "", name)
            term = ":".join(self._label(part) for part in plain.split(":"))
            self._add(Term(term, ", ".join(found), "number", j))

    def number(self, name: str) -> None:
        """A row for a plain number, from the model's column if it has one."""
        if name in self.place:
            self._add(Term(name, "", "number", self.place[name]))
        elif not self._has(name, ""):
            self._add(Term(name, "", "number", self._extra(name, _NumberOf(name))))

    def indicator(self, label: str, level: str, make: Callable[[Values], Floats]) -> None:
        """A row for a level that is no column of the model."""
        if not self._has(label, level):
            self._add(Term(label, level, "level", self._extra(f"{label}: {level}", make)))

    def plain_numbers(self) -> list[Term]:
        """Rows of numbers that are columns of the extract themselves and can take two values or more."""
        return [
            t
            for t in self.plan.terms
            if t.kind == "number" and self.kinds.get(t.term) == "number" and not t.level
        ]

    def _extra(self, name: str, make: Callable[[Values], Floats]) -> int:
        self.plan.extra_names.append(name)
        self.plan.makers.append(make)
        return len(self.builder.names) + len(self.plan.makers) - 1

    def _add(self, term: Term) -> None:
        if not self._has(term.term, term.level):
            self.plan.terms.append(term)

    def _has(self, term: str, level: str) -> bool:
        return any(t.term == term and t.level == level for t in self.plan.terms)

    def _label(self, code: str) -> str:
        """The plain name of a factor: its one column, where it is C() of it or nothing else."""
        columns = self.builder.formula.by_factor.get(code, ())
        if len(columns) == 1 and (code == columns[0] or re.match(r"(C|Q)\(", code)):
            return columns[0]
        return code


def _products(terms: list[Term]) -> list[Term]:
    pairs = [(a, b) for a, b in combinations(terms, 2) if a.term != b.term]
    if len(pairs) > MOST_TERMS:
        raise PlanError(
            f"balance.interactions would add {len(pairs):,} rows to the balance table; at most {MOST_TERMS} are made.",
            mend="Write the products you need into the exposure formula, as a:b, and leave the key out.",
        )
    return [
        Term(f"{a.term}:{b.term}", ", ".join(x for x in (a.level, b.level) if x), "number", a.index, b.index)
        for a, b in pairs
    ]


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
