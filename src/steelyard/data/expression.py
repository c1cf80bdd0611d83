"""Domain expressions: a plan is data, so they are read into a tree of a few allowed parts and walked.

Comparisons, ``and``, ``or``, ``not``, ``in``, and arithmetic on numbers; nothing is ever handed to
Python to evaluate. A comparison with a missing value is unknown, and unknown follows the three-valued
logic of Kleene (1952).
"""

from __future__ import annotations

import ast
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from difflib import get_close_matches
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from steelyard.errors import FormulaError

Bools = NDArray[np.bool_]
Truth = tuple[Bools, Bools]

LONGEST = 10_000
ALLOWED = (
    "A domain may use column names, numbers, quoted text, ==, !=, <, <=, >, >=, in, not in, and, or, not, "
    "+ - * / and parentheses."
)

_COMPARE: dict[type[ast.cmpop], Callable[[Any, Any], Any]] = {
    ast.Eq: lambda a, b: a == b,
    ast.NotEq: lambda a, b: a != b,
    ast.Lt: lambda a, b: a < b,
    ast.LtE: lambda a, b: a <= b,
    ast.Gt: lambda a, b: a > b,
    ast.GtE: lambda a, b: a >= b,
}
_ARITHMETIC: dict[type[ast.operator], Callable[[Any, Any], Any]] = {
    ast.Add: lambda a, b: a + b,
    ast.Sub: lambda a, b: a - b,
    ast.Mult: lambda a, b: a * b,
    ast.Div: lambda a, b: a / b,
}


@dataclass(frozen=True)
class Expression:
    """A domain expression that uses nothing a plan may not use.

    ``columns`` are the columns it names, in order of appearance.
    """

    text: str
    columns: tuple[str, ...]
    tree: ast.expr | None

    def evaluate(self, values: Mapping[str, NDArray[np.float64] | pd.Categorical], n: int) -> Truth:
        """Return where the expression holds, and where it is known whether it does; (n,) each."""
        if self.tree is None:
            return np.ones(n, dtype=bool), np.ones(n, dtype=bool)
        with np.errstate(divide="ignore", invalid="ignore"):
            value, known = _Walk(values, n).truth(self.tree)
        return value & known, known


def parse_expression(text: str, columns: Mapping[str, str]) -> Expression:
    """Read a domain expression; ``columns`` maps names to their kinds. Empty text holds everywhere.

    Raises
    ------
    FormulaError
        It does not parse, or uses anything outside the allowed parts; the message names it.
    """
    if not text.strip():
        return Expression(text, (), None)
    if len(text) > LONGEST:
        raise FormulaError(
            f"The domain has {len(text):,} characters.", mend="Derive a column from it instead."
        )
    try:
        tree = ast.parse(text.strip(), mode="eval").body
        checked = _Check(text.strip(), columns)
        if checked.visit(tree) != "truth":
            raise FormulaError(
                f'The domain "{text}" is not true or false.',
                mend="Compare it with something, as in age >= 6.",
            )
    except SyntaxError as error:
        raise FormulaError(
            f'The domain "{text}" does not parse at character {error.offset}: {error.msg}.', mend=ALLOWED
        ) from None
    except (RecursionError, MemoryError, ValueError):
        raise FormulaError("The domain is nested too deeply or not text.", mend="Simplify it.") from None
    return Expression(text, tuple(dict.fromkeys(checked.names)), tree)


class _Check:
    """Walk a tree once: every node is allowed or refused, and types are told apart as far as known."""

    def __init__(self, text: str, columns: Mapping[str, str]) -> None:
        self.text = text
        self.columns = columns
        self.names: list[str] = []

    def visit(self, node: ast.expr) -> str:
        """Return what the node is: "number", "text", "boolean" column, or "truth"."""
        if isinstance(node, ast.BoolOp):
            for value in node.values:
                self._truth(value)
            return "truth"
        if isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.Not):
            self._truth(node.operand)
            return "truth"
        if isinstance(node, ast.Compare):
            return self._comparison(node)
        if isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.USub | ast.UAdd):
            return self._number(node.operand)
        if isinstance(node, ast.BinOp) and type(node.op) in _ARITHMETIC:
            self._number(node.left)
            return self._number(node.right)
        if isinstance(node, ast.Constant) and isinstance(node.value, str | int | float):
            return "text" if isinstance(node.value, str) else "number"
        name = _column(node)
        if name is not None:
            return self._named(name)
        raise self._refusal(node)

    def _named(self, name: str) -> str:
        if name not in self.columns:
            if name in {"true", "false"}:
                return "number"
            near = get_close_matches(name, self.columns, n=1, cutoff=0.6)
            hint = f'Did you mean "{near[0]}"?' if near else "Check the extract's columns."
            raise FormulaError(
                f'The domain names column "{name}", which the extract does not have.', mend=hint
            )
        kind = self.columns[name]
        if kind == "other":
            raise FormulaError(
                f'The domain uses "{name}", which is neither a number nor text.',
                mend="Derive a number from it.",
            )
        self.names.append(name)
        return {"category": "text", "boolean": "boolean"}.get(kind, "number")

    def _truth(self, node: ast.expr) -> None:
        if self.visit(node) not in {"truth", "boolean"}:
            raise FormulaError(
                f'In the domain, "{ast.unparse(node)}" is not true or false.',
                mend="Compare it with something.",
            )

    def _number(self, node: ast.expr) -> str:
        if self.visit(node) not in {"number", "boolean"}:
            raise FormulaError(f'In the domain, "{ast.unparse(node)}" is not a number.', mend=ALLOWED)
        return "number"

    def _comparison(self, node: ast.Compare) -> str:
        left = self.visit(node.left)
        for operator, right in zip(node.ops, node.comparators, strict=True):
            if isinstance(operator, ast.In | ast.NotIn):
                kinds = self._members(right)
            elif type(operator) in _COMPARE:
                kinds = {self.visit(right)}
            else:
                raise self._refusal(node)
            numeric = {"number", "boolean"}
            if any((left in numeric) != (kind in numeric) or "truth" in (left, kind) for kind in kinds):
                raise FormulaError(
                    f'The domain compares text with numbers in "{ast.unparse(node)}".',
                    mend="Write text in quotes and numbers without.",
                )
            if not isinstance(operator, ast.In | ast.NotIn):
                left = next(iter(kinds))
        return "truth"

    def _members(self, node: ast.expr) -> set[str]:
        if not isinstance(node, ast.List | ast.Tuple | ast.Set) or not node.elts:
            raise FormulaError(
                f'In the domain, "in" needs a list, not "{ast.unparse(node)}".',
                mend='Write it as in region in ["north", "south"].',
            )
        for member in node.elts:
            sign = isinstance(member, ast.UnaryOp) and isinstance(member.op, ast.USub)
            if not isinstance(member.operand if sign else member, ast.Constant):  # type: ignore[attr-defined]
                raise self._refusal(member)
        return {self.visit(member) for member in node.elts}

    def _refusal(self, node: ast.AST) -> FormulaError:
        place = getattr(node, "col_offset", 0) + 1
        snippet = (ast.get_source_segment(self.text, node) or type(node).__name__)[:60]
        return FormulaError(
            f'The domain uses "{snippet}" at character {place}, which it may not.', mend=ALLOWED
        )


class _Walk:
    """Evaluate an allowed tree on columns."""

    def __init__(self, values: Mapping[str, Any], n: int) -> None:
        self.values = values
        self.n = n

    def truth(self, node: ast.expr) -> Truth:
        if isinstance(node, ast.BoolOp):
            parts = [self.truth(value) for value in node.values]
            decisive = isinstance(node.op, ast.Or)
            # One known true settles an "or", one known false an "and"; else all parts must be known.
            settled = np.any([known & (value == decisive) for value, known in parts], axis=0)
            known = settled | np.all([known for _, known in parts], axis=0)
            return (settled if decisive else ~settled), known
        if isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.Not):
            value, known = self.truth(node.operand)
            return ~value, known
        if isinstance(node, ast.Compare):
            return self._comparison(node)
        value, known = self.operand(node)
        return np.broadcast_to(value, self.n) != 0, np.broadcast_to(known, self.n)

    def operand(self, node: ast.expr) -> tuple[Any, Any]:
        """Return values and where they are known."""
        if isinstance(node, ast.Constant):
            return node.value, np.bool_(True)
        if isinstance(node, ast.UnaryOp):
            value, known = self.operand(node.operand)
            return (-value if isinstance(node.op, ast.USub) else value), known
        if isinstance(node, ast.BinOp):
            left, right = self.operand(node.left), self.operand(node.right)
            result = _ARITHMETIC[type(node.op)](
                np.asarray(left[0], dtype=float), np.asarray(right[0], dtype=float)
            )
            return result, left[1] & right[1] & np.isfinite(result)
        name = _column(node)
        if name in {"true", "false"} and name not in self.values:
            return float(name == "true"), np.bool_(True)
        column = self.values[str(name)]
        if isinstance(column, pd.Categorical):
            return np.asarray(column.astype(object)), column.codes >= 0
        return column, ~np.isnan(column)

    def _comparison(self, node: ast.Compare) -> Truth:
        left, known = self.operand(node.left)
        value, all_known = np.ones(self.n, dtype=bool), np.broadcast_to(known, self.n)
        false = np.zeros(self.n, dtype=bool)
        for operator, right_node in zip(node.ops, node.comparators, strict=True):
            if isinstance(operator, ast.In | ast.NotIn):
                members = [self.operand(m)[0] for m in right_node.elts]  # type: ignore[attr-defined]
                step = np.isin(np.where(known, left, members[0]), members)
                step, here = (step if isinstance(operator, ast.In) else ~step), known
            else:
                right, right_known = self.operand(right_node)
                here = known & right_known
                step = self._compared(type(operator), left, right, here)
                left, known = right, right_known
            false |= np.broadcast_to(here & ~step, self.n)
            value &= np.broadcast_to(step, self.n)
            all_known = all_known & np.broadcast_to(here, self.n)
        # One link of a chain that is known to fail settles it, as in a chain of "and".
        return value & ~false, all_known | false

    def _compared(self, operator: type[ast.cmpop], left: Any, right: Any, known: Any) -> Bools:
        known = np.broadcast_to(known, self.n)
        left, right = np.broadcast_to(left, self.n), np.broadcast_to(right, self.n)
        out = np.zeros(self.n, dtype=bool)
        # Unknown places of text hold None, which has no order.
        out[known] = _COMPARE[operator](left[known], right[known])
        return out


def _column(node: ast.AST) -> str | None:
    """Return the column a node names: a bare name, or ``Q("odd name")``."""
    if isinstance(node, ast.Name):
        return node.id
    if (
        isinstance(node, ast.Call)
        and isinstance(node.func, ast.Name)
        and node.func.id == "Q"
        and len(node.args) == 1
        and not node.keywords
        and isinstance(node.args[0], ast.Constant)
        and isinstance(node.args[0].value, str)
    ):
        return node.args[0].value
    return None
