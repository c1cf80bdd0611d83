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

from steelyard.data.guard import QUOTED, quoted_column, without_quotes
from steelyard.errors import FormulaError

Bools = NDArray[np.bool_]
Truth = tuple[Bools, Bools]

LONGEST = 10_000
DEEPEST = 200
LARGEST = 1e300
ALLOWED = (
    "A domain may use column names, numbers, quoted text, true, false, ==, !=, <, <=, >, >=, in, not in, and, or, "
    'not, + - * / and parentheses; a column whose name is not a plain word is written Q("odd name").'
)

_TRUE_OR_FALSE = frozenset({"truth", "boolean"})
_NUMERIC = frozenset({"number", "boolean"})
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
    plain = " ".join(text.split("\n")).strip()
    if not plain:
        return Expression(text, (), None)
    if len(plain) > LONGEST:
        raise FormulaError(
            f"The domain has {len(plain):,} characters; at most {LONGEST:,} are read.",
            mend="Derive a column from it instead.",
        )
    _refuse_comment(plain)
    check = _Check(plain, columns)
    try:
        tree = ast.parse(plain, mode="eval").body
        kind = check.visit(tree)
    except SyntaxError as error:
        place = f" at character {error.offset}" if error.offset else ""
        raise FormulaError(
            f'The domain "{_short(plain)}" does not parse{place}: {error.msg}.', mend=ALLOWED
        ) from None
    except (RecursionError, MemoryError):
        raise _too_deep() from None
    except ValueError as error:
        raise FormulaError(f"The domain does not parse: {error}.", mend=ALLOWED) from None
    if kind not in _TRUE_OR_FALSE:
        raise FormulaError(
            f'The domain "{_short(plain)}" is not true or false.',
            mend="Compare it with something, as in age >= 6.",
        )
    return Expression(text, tuple(dict.fromkeys(check.names)), tree)


def _refuse_comment(text: str) -> None:
    """Refuse a #, behind which Python would read nothing, so that conditions there were lost in silence."""
    masked = without_quotes(text)
    if "#" in masked:
        raise FormulaError(
            f'The domain has a "#" at character {masked.index("#") + 1}.', mend="Write comments outside it."
        )


def _too_deep() -> FormulaError:
    return FormulaError(
        f"The domain is nested more than {DEEPEST} deep.", mend="Derive a column from it instead."
    )


def _short(text: str) -> str:
    return text if len(text) <= 200 else text[:197] + "..."


class _Check:
    """Walk a tree once: every node is allowed or refused, and types are told apart as far as known."""

    def __init__(self, text: str, columns: Mapping[str, str]) -> None:
        self.text = text
        self.columns = columns
        self.names: list[str] = []
        self.depth = 0

    def visit(self, node: ast.expr) -> str:
        """Return what the node is: "number", "text", "boolean" (true, false or such a column), or "truth"."""
        self.depth += 1
        if self.depth > DEEPEST:
            raise _too_deep()
        kind = self._visit(node)
        self.depth -= 1
        return kind

    def _visit(self, node: ast.expr) -> str:
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
            return self._constant(node)
        name = _column(node)
        if name is not None:
            return self._named(name)
        raise self._refusal(node)

    def _constant(self, node: ast.Constant) -> str:
        if isinstance(node.value, str):
            if len(QUOTED.findall(self._snippet(node))) > 1:
                raise FormulaError(
                    f"In the domain, two texts stand side by side in {self._snippet(node)}.",
                    mend="Put a comma between them.",
                )
            return "text"
        if isinstance(node.value, bool):
            return "boolean"
        if not abs(node.value) <= LARGEST:  # type: ignore[arg-type]
            raise FormulaError(
                f'The domain uses the number "{self._snippet(node)}", beyond {LARGEST:g}.',
                mend="Rescale the column.",
            )
        return "number"

    def _named(self, name: str) -> str:
        if name not in self.columns:
            if name in {"true", "false"}:
                return "boolean"
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
        if self.visit(node) not in _TRUE_OR_FALSE:
            raise FormulaError(
                f'In the domain, "{self._snippet(node)}" is not true or false.',
                mend="Compare it with something.",
            )

    def _number(self, node: ast.expr) -> str:
        if self.visit(node) not in _NUMERIC:
            raise FormulaError(f'In the domain, "{self._snippet(node)}" is not a number.', mend=ALLOWED)
        return "number"

    def _comparison(self, node: ast.Compare) -> str:
        left = self.visit(node.left)
        for operator, right in zip(node.ops, node.comparators, strict=True):
            if isinstance(operator, ast.In | ast.NotIn):
                if right is not node.comparators[-1]:
                    raise FormulaError(
                        f'The domain compares a list in "{self._snippet(node)}".',
                        mend='Join the conditions by "and".',
                    )
                kinds = self._members(right)
            elif type(operator) in _COMPARE:
                kinds = {self.visit(right)}
            else:
                raise self._refusal(node)
            if "truth" in {left, *kinds}:
                raise FormulaError(
                    f'The domain compares a comparison in "{self._snippet(node)}".',
                    mend="Join conditions by and, or, not.",
                )
            if any((left in _NUMERIC) != (kind in _NUMERIC) for kind in kinds):
                raise FormulaError(
                    f'The domain compares text with numbers in "{self._snippet(node)}".',
                    mend="Write text in quotes and numbers without.",
                )
            left = next(iter(kinds))
        return "truth"

    def _members(self, node: ast.expr) -> set[str]:
        if not isinstance(node, ast.List | ast.Tuple | ast.Set) or not node.elts:
            raise FormulaError(
                f'In the domain, "in" needs a list, not "{self._snippet(node)}".',
                mend='Write it as in region in ["north", "south"].',
            )
        for member in node.elts:
            signed = isinstance(member, ast.UnaryOp) and isinstance(member.op, ast.USub | ast.UAdd)
            value = member.operand if signed else member  # type: ignore[attr-defined]
            if not isinstance(value, ast.Constant):
                raise self._refusal(member)
        return {self.visit(member) for member in node.elts}

    def _refusal(self, node: ast.AST) -> FormulaError:
        line = self.text.encode()[: getattr(node, "col_offset", 0)]
        return FormulaError(
            f'The domain uses "{self._snippet(node)}" ({_construct(node)}) at character '
            f"{len(line.decode()) + 1}, which it may not.",
            mend=ALLOWED,
        )

    def _snippet(self, node: ast.AST) -> str:
        text = ast.get_source_segment(self.text, node) or type(node).__name__
        return text if len(text) <= 60 else text[:57] + "..."


_CONSTRUCTS = {
    ast.Call: "a function call",
    ast.Attribute: "an attribute",
    ast.Subscript: "an index",
    ast.Lambda: "a function",
    ast.JoinedStr: "a formatted text",
    ast.NamedExpr: "an assignment",
    ast.IfExp: "a conditional",
    ast.ListComp: "a loop",
    ast.SetComp: "a loop",
    ast.DictComp: "a loop",
    ast.GeneratorExp: "a loop",
    ast.Compare: 'the comparison "is"',
    ast.BinOp: "an operator",
    ast.UnaryOp: "an operator",
    ast.Name: "a column where a constant belongs",
}


def _construct(node: ast.AST) -> str:
    return _CONSTRUCTS.get(type(node), "no part of a domain")


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
            return (node.value if isinstance(node.value, str) else float(node.value)), np.bool_(True)  # type: ignore[arg-type]
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
    return quoted_column(node)
