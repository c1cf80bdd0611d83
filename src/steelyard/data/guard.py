"""What a formula in a plan may use: columns, arithmetic, comparisons, and a fixed list of functions.

Everything else is refused before anything is evaluated. Knows names, arguments and kinds; refuses to
know values.
"""

from __future__ import annotations

import ast
import re
from collections.abc import Mapping
from difflib import get_close_matches
from math import prod

from steelyard.data.functions import ALLOWED, CONTRASTS, FUNCTIONS, SPLINES, Signature
from steelyard.errors import FormulaError

LONGEST = 10_000
DEEPEST = 200
LARGEST_POWER = 10
LARGEST_NUMBER = 1e15
LARGEST_BASIS = 50
LARGEST_TENSOR = 500
QUOTED = re.compile(r"'(?:\\.|[^'\\])*'|\"(?:\\.|[^\"\\])*\"")


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
    check = _Check(code, columns)
    try:
        check.visit(ast.parse(code, mode="eval").body)
    except (RecursionError, MemoryError):
        raise _too_deep(code) from None
    except (ValueError, SyntaxError) as error:
        reason = error.msg if isinstance(error, SyntaxError) else str(error)
        raise FormulaError(
            f'The formula part "{code[:80]}" cannot be read: {reason}.', mend=ALLOWED
        ) from None
    if not check.names:
        raise FormulaError(f'The formula part "{code[:80]}" names no column.', mend="Take it out.")
    return tuple(dict.fromkeys(check.names))


def bare_column(code: str) -> str | None:
    """Return the column that a factor is nothing but, or None."""
    node = ast.parse(code, mode="eval").body
    if isinstance(node, ast.Name):
        return node.id
    return quoted_column(node)


def without_quotes(text: str) -> str:
    """Return the text with every quoted part, quotes included, overwritten by underscores."""
    return QUOTED.sub(lambda found: "_" * len(found[0]), text)


class _Check:
    """Walk a factor once; every node is allowed, or refused with its place.

    A node is "number", "text", "category" (of C) or "spline": what may be done with it next.
    """

    def __init__(self, code: str, columns: Mapping[str, str]) -> None:
        self.code = code
        self.columns = columns
        self.names: list[str] = []
        self.depth = 0

    def visit(self, node: ast.expr) -> str:
        self.depth += 1
        if self.depth > DEEPEST:
            raise _too_deep(self.code)
        kind = self._visit(node)
        self.depth -= 1
        return kind

    def _visit(self, node: ast.expr) -> str:
        if isinstance(node, ast.Call):
            return self._call(node)
        if isinstance(node, ast.Name):
            return self._name(node.id)
        if isinstance(node, ast.Constant):
            return self._constant(node)
        if isinstance(node, ast.BinOp):
            return self._arithmetic(node)
        if isinstance(node, ast.UnaryOp) and isinstance(node.op, ast.USub | ast.UAdd):
            return self._number(node.operand, node)
        if isinstance(node, ast.Compare):
            return self._comparison(node)
        if isinstance(node, ast.Attribute) and isinstance(node.value, ast.Name) and node.attr in FUNCTIONS:
            raise FormulaError(
                f'The formula uses "{ast.unparse(node)}".', mend=f"Write {node.attr}(x) without the prefix."
            )
        raise self._refusal(node)

    def _call(self, node: ast.Call) -> str:
        if not isinstance(node.func, ast.Name):
            if isinstance(node.func, ast.Attribute):
                self.visit(node.func)
            raise self._refusal(node.func)
        name = node.func.id
        if name not in FUNCTIONS:
            near = get_close_matches(name, FUNCTIONS, n=1, cutoff=0.6)
            hint = f"Did you mean {near[0]}? " if near else ""
            raise FormulaError(f'The formula calls "{name}", which it may not.', mend=hint + ALLOWED)
        if name in CONTRASTS:
            raise FormulaError(
                f'The formula uses "{self._snippet(node)}" outside C().', mend=f"Write C(x, {name})."
            )
        self._refuse_shadowed(name)
        if name == "Q":
            return self._name(self._quoted_name(node))
        given = self._refuse_misfit(node, name)
        kinds = [self.visit(argument) for argument in node.args[: given.data]]
        if name == "C":
            self._contrast(node)
        else:
            for argument in node.args[given.data :]:
                self._setting("df", argument)
            for keyword in node.keywords:
                self._setting(str(keyword.arg), keyword.value)
        return self._result(node, name, kinds)

    def _result(self, node: ast.Call, name: str, kinds: list[str]) -> str:
        """Return what a call gives, having refused arguments of the wrong kind."""
        if name == "I":
            return kinds[0]
        if name == "C":
            if kinds[0] not in ("number", "text"):
                raise self._wrong_kind(node.args[0], kinds[0], node)
            return "category"
        wanted = ("number", "spline") if name == "te" else ("number",)
        for argument, kind in zip(node.args, kinds, strict=False):
            if kind not in wanted:
                raise self._wrong_kind(argument, kind, node)
        if name == "te" and prod(_width(argument) for argument in node.args) > LARGEST_TENSOR:
            raise FormulaError(
                f'"{self._snippet(node)}" would have more than {LARGEST_TENSOR} columns.',
                mend="Use smaller df.",
            )
        return "spline" if name in SPLINES else "number"

    def _refuse_misfit(self, node: ast.Call, name: str) -> Signature:
        """Return the signature of a function, having refused arguments that it does not have."""
        given = FUNCTIONS[name]
        if any(isinstance(argument, ast.Starred) for argument in node.args):
            raise self._refusal(node)
        if not given.least <= len(node.args) <= given.most:
            wanted = f"{given.least}" if given.least == given.most else f"{given.least} to {given.most}"
            raise FormulaError(
                f'"{self._snippet(node)}" has {len(node.args)} arguments without a name; '
                f"{name} takes {wanted}.",
                mend=f"{name} takes by name: {', '.join(sorted(given.keywords)) or 'nothing'}.",
            )
        for keyword in node.keywords:
            if keyword.arg not in given.keywords:
                raise FormulaError(
                    f'"{self._snippet(node)}" names the argument "{keyword.arg or "**"}", which {name} may not '
                    "have in a plan.",
                    mend=f"{name} takes by name: {', '.join(sorted(given.keywords)) or 'nothing'}.",
                )
        return given

    def _contrast(self, node: ast.Call) -> None:
        """Check the second argument of C, a contrast, and its keywords."""
        contrasts = [*node.args[1:], *(k.value for k in node.keywords if k.arg == "contrast")]
        for keyword in node.keywords:
            if keyword.arg == "levels":
                self._setting("levels", keyword.value)
        for contrast in contrasts:
            function = contrast.func if isinstance(contrast, ast.Call) else contrast
            if not (isinstance(function, ast.Name) and function.id in CONTRASTS):
                raise FormulaError(
                    f'"{self._snippet(node)}" has no contrast that steelyard knows.',
                    mend=f"The contrast is one of {', '.join(CONTRASTS)}.",
                )
            self._refuse_shadowed(function.id)
            if isinstance(contrast, ast.Call):
                self._refuse_misfit(contrast, function.id)
                for argument in (*contrast.args, *(k.value for k in contrast.keywords)):
                    self._setting("reference", argument)

    def _setting(self, name: str, node: ast.expr) -> None:
        """Check an argument that must be a constant or a list of them."""
        items = node.elts if isinstance(node, ast.List | ast.Tuple) else [node]
        for item in items:
            signed = isinstance(item, ast.UnaryOp) and isinstance(item.op, ast.USub | ast.UAdd)
            value = item.operand if signed else item  # type: ignore[attr-defined]
            if not isinstance(value, ast.Constant):
                raise FormulaError(
                    f'"{self._snippet(item)}" is not a constant, but an argument like {name} must be one.',
                    mend="Write numbers, quoted text, or a list of them there.",
                )
            if value.value is not None:
                self._constant(value)
            if name in ("df", "degree") and item is node and not self._is_small(value.value):
                raise FormulaError(
                    f"The formula asks for {name}={self._snippet(node)}; it is a whole number from 0 to "
                    f"{LARGEST_BASIS}.",
                    mend="Splines for confounders rarely need more than 5.",
                )

    @staticmethod
    def _is_small(value: object) -> bool:
        return value is None or (isinstance(value, int) and 0 <= value <= LARGEST_BASIS)

    def _quoted_name(self, node: ast.Call) -> str:
        name = quoted_column(node)
        if name is None:
            raise FormulaError(
                f'"{self._snippet(node)}" does not name a column.', mend='Write it as Q("odd name").'
            )
        return name

    def _name(self, name: str) -> str:
        if name not in self.columns:
            if name in FUNCTIONS:
                raise FormulaError(
                    f'The formula uses the function "{name}" without arguments.', mend=f"Write {name}(x)."
                )
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
        return "text" if self.columns[name] == "category" else "number"

    def _constant(self, node: ast.Constant) -> str:
        if isinstance(node.value, str):
            if len(QUOTED.findall(self._snippet(node))) > 1:
                raise FormulaError(
                    f"Two texts stand side by side in {self._snippet(node)}.",
                    mend="Put a comma between them.",
                )
            return "text"
        if not isinstance(node.value, int | float):
            raise self._refusal(node)
        if not abs(node.value) <= LARGEST_NUMBER:
            raise FormulaError(
                f'The formula uses the number "{self._snippet(node)}", beyond {LARGEST_NUMBER:g}.',
                mend="Rescale the column.",
            )
        return "number"

    def _comparison(self, node: ast.Compare) -> str:
        if len(node.ops) > 1:
            raise FormulaError(
                f'The formula chains comparisons in "{self._snippet(node)}".',
                mend="Write two and multiply them, as in I((x > 1) * (x < 9)).",
            )
        operator, right = node.ops[0], node.comparators[0]
        if isinstance(operator, ast.In | ast.NotIn | ast.Is | ast.IsNot):
            raise self._refusal(node)
        kinds = {self.visit(node.left), self.visit(right)}
        if kinds == {"text"}:
            if not isinstance(operator, ast.Eq | ast.NotEq):
                raise FormulaError(
                    f'"{self._snippet(node)}" orders text, which has no order in a formula.',
                    mend="Compare it by == or !=.",
                )
            if not any(isinstance(side, ast.Constant) for side in (node.left, right)):
                raise FormulaError(
                    f'"{self._snippet(node)}" compares two text columns.', mend="Derive a column from them."
                )
        elif kinds != {"number"}:
            raise FormulaError(
                f'"{self._snippet(node)}" compares text with numbers.',
                mend="Write text in quotes and numbers without.",
            )
        return "number"

    def _arithmetic(self, node: ast.BinOp) -> str:
        if isinstance(node.op, ast.Pow):
            self._refuse_power(node)
        elif not isinstance(node.op, ast.Add | ast.Sub | ast.Mult | ast.Div | ast.FloorDiv | ast.Mod):
            raise self._refusal(node)
        self._number(node.left, node)
        return self._number(node.right, node)

    def _refuse_power(self, node: ast.BinOp) -> None:
        power = node.right.operand if isinstance(node.right, ast.UnaryOp) else node.right
        if not (isinstance(power, ast.Constant) and isinstance(power.value, int | float)):
            raise FormulaError(f'"{self._snippet(node)}" has a power that is not a number.', mend=ALLOWED)
        if abs(power.value) > LARGEST_POWER:
            raise FormulaError(
                f'"{self._snippet(node)}" has a power above {LARGEST_POWER}.',
                mend="Use a spline: bs(x, df=4).",
            )
        # A power of constants is computed in whole numbers without end.
        if not any(isinstance(part, ast.Name) for part in ast.walk(node.left)):
            raise self._refusal(node)

    def _number(self, node: ast.expr, within: ast.expr) -> str:
        kind = self.visit(node)
        if kind != "number":
            raise self._wrong_kind(node, kind, within)
        return kind

    def _wrong_kind(self, node: ast.expr, kind: str, within: ast.expr) -> FormulaError:
        held = {"text": "text", "category": "categories", "spline": "the columns of a spline"}[kind]
        return FormulaError(
            f'"{self._snippet(within)}" computes with "{self._snippet(node)}", which is {held}, not a number.',
            mend="Use it as a term of its own, or derive a number from it.",
        )

    def _refuse_shadowed(self, name: str) -> None:
        if name in self.columns:
            raise FormulaError(
                f'The formula uses the function "{name}", but the extract has a column of that name.',
                mend="Rename the column in the extract.",
            )

    def _refusal(self, node: ast.AST) -> FormulaError:
        return FormulaError(f'The formula uses "{self._snippet(node)}", which it may not.', mend=ALLOWED)

    def _snippet(self, node: ast.AST) -> str:
        text = ast.get_source_segment(self.code, node) or type(node).__name__
        return text if len(text) <= 60 else text[:57] + "..."


def quoted_column(node: ast.AST) -> str | None:
    """Return the column of ``Q("odd name")``, or None for anything else."""
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


def _width(node: ast.expr) -> int:
    """Return about how many columns one argument of ``te`` has."""
    if not isinstance(node, ast.Call):
        return 1
    widths = []
    for value in (*node.args[1:], *(k.value for k in node.keywords)):
        if isinstance(value, ast.Constant) and isinstance(value.value, int):
            widths.append(value.value)
        elif isinstance(value, ast.List | ast.Tuple):
            widths.append(len(value.elts) + 4)
    return max(widths, default=10)


def _too_deep(code: str) -> FormulaError:
    return FormulaError(
        f'The formula part "{code[:60]}..." is nested more than {DEEPEST} deep.',
        mend="Derive a column from it instead.",
    )
