"""Formulas: parsed by patsy, allowed by the guard, learnt over chunks, built chunk by chunk.

Patsy's parser evaluates nothing; what it would evaluate later are the factors, and the guard sees each of
them first.
"""

from __future__ import annotations

import re
import tokenize
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from math import comb
from typing import Any, TypeAlias

import numpy as np
import pandas as pd
import patsy
from numpy.typing import NDArray
from patsy.parse_formula import parse_formula as operator_tree

from steelyard.data.categories import C, refuse_many_levels
from steelyard.data.functions import ALLOWED, NUMERIC
from steelyard.data.guard import LONGEST, bare_column, checked_columns, without_quotes
from steelyard.errors import FormulaError

Floats = NDArray[np.float64]
Values: TypeAlias = Mapping[str, Floats | pd.Categorical]

MOST_TERMS = 2000
MOST_COLUMNS = 2000

_KEEP_ALL = patsy.NAAction(on_NA="raise", NA_types=[])


@dataclass(frozen=True)
class Formula:
    """A formula that uses nothing a plan may not use.

    Attributes
    ----------
    text : as the plan has it
    response : the column left of ``~``, or None for a right side only
    right : the text right of ``~``
    columns : names of the columns the right side uses, in order of appearance
    by_factor : mapping
        Code of each factor -> the columns it uses.
    """

    text: str
    response: str | None
    right: str
    columns: tuple[str, ...]
    by_factor: Mapping[str, tuple[str, ...]]


def parse_formula(text: str, columns: Mapping[str, str], *, sided: bool) -> Formula:
    """Parse and guard a formula; nothing is evaluated.

    Parameters
    ----------
    columns : names of the extract's columns and their kinds
    sided : whether it has a response and ``~``

    Raises
    ------
    FormulaError
        It does not parse, or uses something a plan may not use.
    """
    if len(text) > LONGEST:
        raise FormulaError(f"A formula has {len(text):,} characters.", mend="Derive columns instead.")
    left, tilde, right = _sides(text)
    response = None
    if sided:
        if not tilde or not left.strip():
            raise FormulaError(
                f'The exposure formula "{text}" has no response.', mend='Write it as "exposure ~ covariates".'
            )
        response = _response(left.strip(), columns)
    elif tilde:
        raise FormulaError(f'The covariates "{text}" have a "~".', mend="Write the covariates only.")
    right = right if tilde else text
    description = _described(right, text)
    by_factor = {
        factor.code: checked_columns(factor.code, columns)
        for term in description.rhs_termlist
        for factor in term.factors
    }
    if not description.rhs_termlist:
        raise FormulaError(f'The formula "{text}" has no terms.', mend="Name at least one covariate.")
    used = tuple(dict.fromkeys(name for names in by_factor.values() for name in names))
    if response is not None and response in used:
        raise FormulaError(
            f'The exposure "{response}" stands on both sides of its formula.', mend="Take it out."
        )
    return Formula(text, response, right.strip(), used, by_factor)


class DesignBuilder:
    """The right side of a formula, with what its transforms have learnt; builds design rows.

    Attributes
    ----------
    formula : Formula
    names : patsy's names of the p columns
    intercept : place of the constant column, or None
    info : patsy's description of the design

    Building reads what was learnt and changes nothing, so threads may share a builder. Patsy's factors
    cannot be pickled, so it does not travel to other processes.
    """

    def __init__(self, formula: Formula, info: Any) -> None:
        self.formula = formula
        self.info = info
        self.names: tuple[str, ...] = tuple(_readable(name) for name in info.column_names)
        self.intercept = self.names.index("Intercept") if "Intercept" in self.names else None

    def build(self, values: Values, n: int) -> Floats:
        """Return the (n, p) design rows of values without missing ones.

        Raises
        ------
        FormulaError
            A transform cannot take a value: one outside a spline's bounds, an unknown category.
        """
        if not self.info.factor_infos:
            return np.ones((n, len(self.names)))
        try:
            with np.errstate(all="ignore"):
                (matrix,) = patsy.build_design_matrices([self.info], values, NA_action=_KEEP_ALL)
        except (patsy.PatsyError, ValueError, TypeError) as error:
            raise _failed(self.formula, error) from None
        # A right side of numbers that do not vary by row comes back as one row.
        return np.ascontiguousarray(
            np.broadcast_to(np.asarray(matrix, dtype=np.float64), (n, len(self.names)))
        )

    def codes(self, factor: str, values: Values) -> NDArray[np.int64]:
        """Return the category number of each row under one categorical factor, (n,)."""
        found = self._factor(factor)
        boxed = found.factor.eval(found.state, values)
        return np.asarray(
            patsy.categorical.categorical_to_int(boxed, found.categories, _KEEP_ALL), dtype=np.int64
        )

    def categories(self, factor: str) -> tuple[Any, ...]:
        """Return the categories of a factor, or nothing for a number."""
        found = self._factor(factor)
        return tuple(found.categories) if found.type == "categorical" else ()

    def _factor(self, code: str) -> Any:
        return next(info for factor, info in self.info.factor_infos.items() if factor.code == code)


def learn(formula: Formula, chunks: Callable[[], Iterator[Values]]) -> DesignBuilder:
    """Learn the transforms of a formula (categories, spline knots, centres) over chunks of values.

    ``chunks`` gives a fresh iterator each time it is called; it is called as often as the transforms
    are nested, and not read further than they need.

    Raises
    ------
    FormulaError
        A transform or its arguments do not work on these values.
    """
    environment = _Sealed([{**NUMERIC, "C": C}])

    def limited() -> Iterator[Values]:
        for chunk in chunks():
            for name in formula.columns:
                column = chunk[name]
                if isinstance(column, pd.Categorical):
                    refuse_many_levels(name, len(column.categories))
            yield chunk

    try:
        with np.errstate(all="ignore"):
            info = patsy.incr_dbuilder(formula.right, limited, environment, _KEEP_ALL)
    except (patsy.PatsyError, ValueError, TypeError) as error:
        raise _failed(formula, error) from None
    if len(info.column_names) > MOST_COLUMNS:
        widest = max(info.terms, key=lambda term: _columns_of(info, term))
        raise FormulaError(
            f'The formula "{_short(formula.text)}" has {len(info.column_names):,} columns, of which '
            f"{_columns_of(info, widest):,} belong to {widest.name()}; at most {MOST_COLUMNS:,} are built.",
            mend="Group its levels, or use it as a number.",
        )
    return DesignBuilder(formula, info)


class _Sealed(patsy.EvalEnvironment):  # type: ignore[misc]
    """Patsy's environment with no names but its own: Python's built-in functions are out of reach as well."""

    def eval(self, expr: str, source_name: str = "<formula>", inner_namespace: Any = None) -> Any:
        """Evaluate a factor the guard has passed."""
        code = compile(expr, source_name, "eval", self.flags, False)
        names = [{} if inner_namespace is None else inner_namespace, *self._namespaces]
        return eval(code, {"__builtins__": {}}, patsy.eval.VarLookupDict(names))

    def subset(self, names: Any) -> _Sealed:
        """Return the environment with these names only."""
        return _Sealed([{name: self.namespace[name] for name in names}], self.flags)


def _readable(name: str) -> str:
    """Return patsy's name of a column with its level as a person would write it: [T.2], not a repr."""
    plain = re.sub(r"np\.\w+\(([^)]*)\)", r"\1", name)
    return re.sub(r"\[(T\.|S\.|D\.|H\.)?(-?\d+)\.0\]", r"[\1\2]", plain)


def _sides(text: str) -> tuple[str, str, str]:
    """Part a formula at the first ~ that is not within quotes."""
    place = without_quotes(text).find("~")
    return (text, "", "") if place < 0 else (text[:place], "~", text[place + 1 :])


def _response(code: str, columns: Mapping[str, str]) -> str:
    try:
        name = bare_column(code)
    except (SyntaxError, ValueError, RecursionError, MemoryError):
        name = None
    if name is None:
        raise FormulaError(
            f'The exposure formula has "{_short(code)}" on its left side.',
            mend="Name one column there, and nothing else.",
        )
    checked_columns(code, columns)
    return name


def _described(right: str, text: str) -> Any:
    """Return patsy's description of a right side, having refused one of too many terms before it is spelt out."""
    try:
        count = _term_count(operator_tree(right))
        description = patsy.ModelDesc.from_formula(right) if count <= MOST_TERMS else None
    except (RecursionError, MemoryError):
        raise FormulaError(
            f'The formula "{_short(text)}" has too many terms or is nested too deeply.',
            mend="Name fewer columns, or derive a score from them.",
        ) from None
    except (
        patsy.PatsyError,
        ValueError,
        SyntaxError,
        AssertionError,
        IndexError,
        tokenize.TokenError,
    ) as error:
        reason = str(error).splitlines()[0] if str(error) else "it is not a formula"
        raise FormulaError(f'The formula "{_short(text)}" does not parse: {reason}.', mend=ALLOWED) from None
    if description is None:
        raise FormulaError(
            f'The formula "{_short(text)}" has more than {MOST_TERMS:,} terms.',
            mend="Name the products you need, as a:b, in place of all of them.",
        )
    if description.lhs_termlist:
        raise FormulaError(f'The formula "{_short(text)}" has more than one "~".', mend="Keep one.")
    return description


def _term_count(node: Any) -> int:
    """Return at least how many terms patsy would make of an operator tree; products grow as powers of two."""
    counts = [min(_term_count(each), MOST_TERMS + 1) for each in node.args]
    if len(counts) < 2:
        return counts[0] if counts else 1
    left, right = counts
    if node.type == "**":
        power = node.args[1].token.extra if node.args[1].type == "NUMBER" else "1"
        highest = min(left, int(power)) if power.isdigit() else 1
        total = 0
        for size in range(1, highest + 1):
            total += comb(left, size)
            if total > MOST_TERMS:
                break
        return total
    return {"*": left + right + left * right, ":": left * right, "-": left}.get(node.type, left + right)


def _columns_of(info: Any, term: Any) -> int:
    place = info.term_slices[term]
    return int(place.stop - place.start)


def _short(text: str) -> str:
    return text if len(text) <= 200 else text[:197] + "..."


# What patsy says -> what to do about it.
_MENDS = {
    "upper bound": "Widen upper_bound, or leave it out.",
    "lower bound": "Widen lower_bound, or leave it out.",
    "outermost knots": "Widen lower_bound and upper_bound, or leave them out.",
    "does not match number of scores": "Give one score a level.",
    "does not match any of the expected levels": "Name every level in levels=[...], or leave it out.",
    "is too small": "Use a larger df, or a smaller degree.",
    "must specify either": "Give the spline df or knots, as in bs(x, df=4).",
    "unable to compute": "The column has too few distinct values for that many knots: use a smaller df.",
    "specified level": "Name a level that the column has, spelled as in the extract.",
}


def _failed(formula: Formula, error: Exception) -> FormulaError:
    reason = str(error).splitlines()[0].strip().rstrip(".")
    said = str(error).lower()
    usual = "Check the arguments of its functions and the columns' values."
    mend = next((mend for sign, mend in _MENDS.items() if sign in said), usual)
    reason = reason.replace("Error evaluating factor: ", "").replace(
        ", and I'm not sure how to handle them", ""
    )
    return FormulaError(f'The formula "{_short(formula.text)}" cannot be built: {reason}.', mend=mend)
