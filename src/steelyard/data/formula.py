"""Formulas: parsed by patsy, allowed by the guard, learnt over chunks, built chunk by chunk."""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np
import pandas as pd
import patsy
from numpy.typing import NDArray

from steelyard.data.guard import ALLOWED, LONGEST, NUMERIC, bare_column, checked_columns
from steelyard.errors import FormulaError

Floats = NDArray[np.float64]
Values: TypeAlias = Mapping[str, Floats | pd.Categorical]

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
    left, tilde, right = text.partition("~")
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
    info : patsy's description of the design, None for a formula of the constant alone
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
    environment = patsy.EvalEnvironment([dict(NUMERIC)])
    try:
        with np.errstate(all="ignore"):
            info = patsy.incr_dbuilder(formula.right, chunks, environment, _KEEP_ALL)
    except (patsy.PatsyError, ValueError, TypeError) as error:
        raise _failed(formula, error) from None
    return DesignBuilder(formula, info)


def _readable(name: str) -> str:
    """Return patsy's name of a column with its level as a person would write it: [T.2], not a repr."""
    return re.sub(r"np\.\w+\(([^)]*)\)", lambda found: re.sub(r"\.0$", "", found[1]), name)


def _response(code: str, columns: Mapping[str, str]) -> str:
    try:
        name = bare_column(code)
    except (SyntaxError, IndexError, AttributeError):
        name = None
    if name is None:
        raise FormulaError(
            f'The exposure formula has "{code}" on its left side.',
            mend="Name one column there, and nothing else.",
        )
    checked_columns(code, columns)
    return name


def _described(right: str, text: str) -> Any:
    try:
        description = patsy.ModelDesc.from_formula(right)
    except (patsy.PatsyError, RecursionError, MemoryError, ValueError, SyntaxError) as error:
        reason = str(error).splitlines()[0] if str(error) else "it is nested too deeply"
        raise FormulaError(f'The formula "{text[:200]}" does not parse: {reason}.', mend=ALLOWED) from None
    if description.lhs_termlist:
        raise FormulaError(f'The formula "{text}" has more than one "~".', mend="Keep one.")
    return description


def _failed(formula: Formula, error: Exception) -> FormulaError:
    reason = str(error).splitlines()[0].strip().rstrip(".")
    return FormulaError(
        f'The formula "{formula.text}" cannot be built: {reason}.',
        mend="Check the arguments of its functions and the columns' values.",
    )
