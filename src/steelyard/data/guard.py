"""What a formula in a plan may use: columns, arithmetic, comparisons, and a fixed list of functions.

Everything else is refused before anything is evaluated.
"""

from __future__ import annotations

import ast
from collections.abc import Mapping
from difflib import get_close_matches

import numpy as np

from steelyard.errors import FormulaError

LONGEST = 10_000
LARGEST_POWER = 10

# Patsy's own, which it looks up itself, and numpy's, which it is given.
STATEFUL = frozenset({"bs", "cr", "cc", "te", "center", "standardize", "scale"})
CONTRASTS = frozenset({"Treatment", "Sum", "Poly", "Diff", "Helmert"})
NUMERIC = {
    name: getattr(np, name)
    for name in (
        "log",
        "log10",
        "log2",
        "log1p",
        "exp",
        "expm1",
        "sqrt",
        "abs",
        "sign",
        "floor",
        "minimum",
        "maximum",
        "clip",
    )
}
FUNCTIONS = STATEFUL | CONTRASTS | set(NUMERIC) | {"C", "I", "Q"}
ALLOWED = (
    "A formula may use columns, + - * / : and ( ), comparisons, and the functions "
    f"{', '.join(sorted(FUNCTIONS))}."
)


def checked_columns(code: str, columns: Mapping[str, str]) -> tuple[str, ...]:
    """Return the columns that one factor of a formula names, having refused all it may not use.

    Parameters
    ----------
    code : the factor as patsy would evaluate it
    columns : names of the extract's columns and their kinds

    Raises
    ------
    FormulaError
        Naming what is refused, and what is allowed.
    """
    try:
        tree = ast.parse(code, mode="eval").body
        check = _Check(code, columns)
        check.visit(tree)
    except (RecursionError, MemoryError, ValueError, SyntaxError):
        raise FormulaError(f'The formula part "{code[:80]}" cannot be read.', mend=ALLOWED) from None
    return tuple(dict.fromkeys(check.names))


def bare_column(code: str) -> str | None:
    """Return the column that a factor is nothing but, or None."""
    node = ast.parse(code, mode="eval").body
    if isinstance(node, ast.Name):
        return node.id
    if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == "Q":
        return str(node.args[0].value)  # type: ignore[attr-defined]
    return None


class _Check:
    def __init__(self, code: str, columns: Mapping[str, str]) -> None:
        self.code = code
        self.columns = columns
        self.names: list[str] = []

    def visit(self, node: ast.expr) -> None:
        if isinstance(node, ast.Call):
            self._call(node)
        elif isinstance(node, ast.Name):
            self._name(node.id)
        elif isinstance(node, ast.Constant):
            self._constant(node)
        elif isinstance(node, ast.BinOp):
            self._arithmetic(node)
        elif isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.USub | ast.UAdd):
            self.visit(node.operand)
        elif isinstance(node, ast.Compare) and not any(
            isinstance(op, ast.In | ast.NotIn | ast.Is | ast.IsNot) for op in node.ops
        ):
            self.visit(node.left)
            for right in node.comparators:
                self.visit(right)
        elif isinstance(node, ast.Attribute) and isinstance(node.value, ast.Name) and node.attr in FUNCTIONS:
            raise FormulaError(
                f'The formula uses "{ast.unparse(node)}".', mend=f"Write {node.attr}(...) without the prefix."
            )
        else:
            raise self._refusal(node)

    def _call(self, node: ast.Call) -> None:
        if not isinstance(node.func, ast.Name):
            if isinstance(node.func, ast.Attribute):
                self.visit(node.func)
            raise self._refusal(node.func)
        name = node.func.id
        if name not in FUNCTIONS:
            near = get_close_matches(name, FUNCTIONS, n=1, cutoff=0.6)
            hint = f"Did you mean {near[0]}? " if near else ""
            raise FormulaError(f'The formula calls "{name}", which it may not.', mend=hint + ALLOWED)
        if name in self.columns:
            raise FormulaError(
                f'The formula calls "{name}", but the extract has a column of that name.',
                mend="Rename the column in the extract.",
            )
        if name == "Q":
            self._quoted(node)
            return
        for argument in node.args:
            self._argument(argument)
        for keyword in node.keywords:
            if keyword.arg is None:
                raise self._refusal(node)
            self._argument(keyword.value)

    def _argument(self, node: ast.expr) -> None:
        """An argument may also be a list of constants, or the name of a contrast."""
        if isinstance(node, ast.List | ast.Tuple):
            for item in node.elts:
                if not isinstance(item, ast.Constant | ast.UnaryOp):
                    raise self._refusal(item)
                self.visit(item)
        elif (isinstance(node, ast.Name) and node.id in CONTRASTS and node.id not in self.columns) or (
            isinstance(node, ast.Constant) and node.value is None
        ):
            return
        else:
            self.visit(node)

    def _quoted(self, node: ast.Call) -> None:
        argument = node.args[0] if len(node.args) == 1 and not node.keywords else None
        if not (isinstance(argument, ast.Constant) and isinstance(argument.value, str)):
            raise FormulaError(
                f'"{ast.unparse(node)}" does not name a column.', mend='Write it as Q("odd name").'
            )
        self._name(argument.value)

    def _name(self, name: str) -> None:
        if name not in self.columns:
            near = get_close_matches(name, self.columns, n=1, cutoff=0.6)
            hint = f'Did you mean "{near[0]}"?' if near else "Check the extract's columns."
            raise FormulaError(
                f'The formula names column "{name}", which the extract does not have.', mend=hint
            )
        if self.columns[name] == "other":
            raise FormulaError(
                f'The formula uses "{name}", which is neither a number nor text.',
                mend="Derive a number from it, such as a year or an age.",
            )
        self.names.append(name)

    def _constant(self, node: ast.Constant) -> None:
        if not isinstance(node.value, str | int | float | bool):
            raise self._refusal(node)

    def _arithmetic(self, node: ast.BinOp) -> None:
        if isinstance(node.op, ast.Pow):
            power = node.right
            power = power.operand if isinstance(power, ast.UnaryOp) else power
            if not (isinstance(power, ast.Constant) and isinstance(power.value, int | float)):
                raise FormulaError(f'"{ast.unparse(node)}" has a power that is not a number.', mend=ALLOWED)
            if abs(power.value) > LARGEST_POWER:
                raise FormulaError(
                    f'"{ast.unparse(node)[:60]}" has a power above {LARGEST_POWER}.',
                    mend="Use a spline: bs(x, df=4).",
                )
            if isinstance(node.left, ast.Constant | ast.BinOp) and not _names_something(node.left):
                raise self._refusal(node)
        elif not isinstance(node.op, ast.Add | ast.Sub | ast.Mult | ast.Div | ast.FloorDiv | ast.Mod):
            raise self._refusal(node)
        self.visit(node.left)
        self.visit(node.right)

    def _refusal(self, node: ast.AST) -> FormulaError:
        snippet = (ast.get_source_segment(self.code, node) or type(node).__name__)[:60]
        return FormulaError(f'The formula uses "{snippet}", which it may not.', mend=ALLOWED)


def _names_something(node: ast.expr) -> bool:
    return any(isinstance(part, ast.Name) for part in ast.walk(node))
