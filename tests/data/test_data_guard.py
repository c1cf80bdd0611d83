"""What a formula may not use is refused before anything is evaluated."""

from __future__ import annotations

import builtins
import time
from collections.abc import Mapping

import numpy as np
import pandas as pd
import patsy
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from steelyard.data.formula import Formula, learn, parse_formula
from steelyard.data.functions import FUNCTIONS
from steelyard.errors import FormulaError

KINDS = {
    "x": "number",
    "y": "number",
    "b": "boolean",
    "r": "category",
    "g": "category",
    "day": "other",
    "odd name": "number",
    "a~b": "number",
    "sqrt": "number",
    "Sum": "number",
    **{f"c{i}": "number" for i in range(40)},
}


@pytest.fixture
def canary(monkeypatch):
    """A built-in function that tells whether anybody called it."""
    seen = []
    monkeypatch.setattr(builtins, "canary", lambda *given: seen.append(given) or 1.0, raising=False)
    return seen


class Watched(Mapping):
    """Values that tell whether anybody looked at them."""

    def __init__(self):
        self.looked = []

    def __getitem__(self, name):
        self.looked.append(name)
        return np.arange(3.0)

    def __iter__(self):
        return iter(KINDS)

    def __len__(self):
        return len(KINDS)


HOSTILE = [
    "canary()",
    "canary(x)",
    "x + canary(x)",
    "x:canary()",
    "I(canary())",
    "log(canary())",
    "C(canary())",
    "C(x, canary())",
    "C(x, levels=[canary()])",
    "C(x, levels=canary())",
    "C(r, Treatment(canary()))",
    "bs(x, df=canary())",
    "bs(x, knots=[canary()])",
    "Q(canary())",
    "I(x if canary() else x)",
    "I([canary() for z in x])",
    "I({canary() for z in x})",
    "I((canary() for z in x))",
    "I({'a': canary()})",
    "I((lambda: canary())())",
    "I(x[canary()])",
    "I(f'{canary()}' == r)",
    "I((z := canary()))",
    "I(x and canary())",
    "I(not canary())",
    "log(*[canary()])",
    "log(**{'x': canary()})",
    "log(x, where=canary())",
    "canary",
    "x.canary",
    "x.__class__",
    "I(x.__class__.__base__.__subclasses__())",
    "log.__globals__",
    "np.log(x)",
    "Q('x').y",
    "C(r)(x)",
    "C(r)[0]",
    "[canary()]",
    "{canary()}",
    "__import__('os').system('true')",
    "I(__import__('os'))",
    "open('f')",
    "eval('canary()')",
    "exec('canary()')",
    "getattr(x, 'y')",
    "I(x @ x)",
    "I(x << 2)",
    "I(x | x)",
    "I(x in [1])",
    "I(x is x)",
    "I(None)",
    "I(...)",
    "I(1j * x)",
    "I(b'a')",
    "I(x ** 99)",
    "I(x ** -99)",
    "I(2 ** 9 ** 9)",
    "I((x * 0 + 10) ** 10 ** 10)",
    "I(10 ** 10 * x)",
    "I(x ** y)",
    "I('a' * 1000000000)",
    "I('%1000000000d' % x)",
    "I(x * 99999999999999999999)",
    "I(x * 1e999)",
    "log(x, y)",
    "log(x, out=y)",
    "clip(x, 0, 1, y)",
    "minimum(x, 1, y)",
    "abs(x, y)",
    "bs(x, df=200000)",
    "bs(x, 200000)",
    "bs(x, df=4, degree=9999999)",
    "bs(x, df=4.5)",
    "bs(x, knots=y)",
    "bs(x, df=y)",
    "te(bs(x, df=40), bs(y, df=40))",
    "te(bs(x, knots=[.1, .2, .3, .4]), cr(y, df=30), cr(c1, df=30))",
    "(" + " + ".join(f"c{i}" for i in range(16)) + ")**16",
    "*".join(f"c{i}" for i in range(16)),
    "(" * 3 + " + ".join(f"c{i}" for i in range(40)) + ")**9)**9)**9",
    "I(" * 300 + "x" + ")" * 300,
    "I(" + "-" * 2000 + "x)",
    "I(" + "x + " * 2000 + "x)",
    "x + " * 2400 + "x",
    "x" * 20_000,
]


@pytest.mark.parametrize("text", HOSTILE, ids=lambda text: text[:40])
def test_a_hostile_formula_is_refused_at_once_before_anything_is_evaluated(text, canary):
    watched, start = Watched(), time.perf_counter()
    with pytest.raises(FormulaError) as caught:
        learn(parse_formula(text, KINDS, sided=False), lambda: iter([watched]))
    assert not canary
    assert not watched.looked
    assert caught.value.mend
    assert len(caught.value.message) < 600
    assert time.perf_counter() - start < 2


def test_the_canary_sings_where_nothing_guards(canary):
    patsy.dmatrix("I(canary() * x)", {"x": np.arange(3.0)}, eval_env=patsy.EvalEnvironment([{}]))
    assert canary


def test_patsy_parses_a_formula_without_evaluating_it(canary):
    patsy.ModelDesc.from_formula("canary() + canary(x):I(canary())")
    assert not canary


def test_built_in_functions_are_out_of_reach_even_behind_the_guard(canary):
    unguarded = Formula("canary()", None, "I(canary() * x)", ("x",), {})
    with pytest.raises(FormulaError, match="canary"):
        learn(unguarded, lambda: iter([{"x": np.arange(3.0)}]))
    assert not canary
    assert learn(
        Formula("x", None, "I(x * 2) + center(x)", ("x",), {}), lambda: iter([{"x": np.arange(3.0)}])
    )


def test_a_response_is_guarded_too(canary):
    for left in (
        "canary()",
        "log(x)",
        "x + y",
        "x[0]",
        "",
        "canary",
        "I(x)",
        "x.y",
        "Q('x', 'y')",
        "-" * 5000 + "x",
    ):
        with pytest.raises(FormulaError) as caught:
            parse_formula(f"{left} ~ y", KINDS, sided=True)
        assert caught.value.mend
    assert not canary


@pytest.mark.parametrize(
    ("text", "said", "mend"),
    [
        ("np.log(x)", 'uses "np.log"', "Write log(x) without the prefix"),
        ("lg(x)", 'calls "lg"', "Did you mean log?"),
        ("xx", 'column "xx"', 'Did you mean "x"?'),
        ("zebra", 'column "zebra"', "Check"),
        ("od_name", 'column "od_name"', 'Did you mean "odd name"?'),
        ("day", "neither a number nor text", "a year or an age"),
        ("sqrt(x)", "a column of that name", "Rename"),
        ("C(r, Sum)", "a column of that name", "Rename"),
        ("C(r, Sum())", "a column of that name", "Rename"),
        ("log", "without arguments", "log(x)"),
        ("log(r)", '"r", which is text', "derive a number"),
        ("I(r + 1)", '"r", which is text', "derive a number"),
        ("I('a' * x)", "which is text", "derive a number"),
        ("log(C(x))", "which is categories", "term of its own"),
        ("I(bs(x, df=4) * y)", "the columns of a spline", "term of its own"),
        ("C(bs(x, df=4))", "the columns of a spline", "term of its own"),
        ("I(r < 'north')", "orders text", "=="),
        ("I(r == g)", "two text columns", "Derive"),
        ("I(r == 1)", "compares text with numbers", "quotes"),
        ("I(1 < x < 3)", "chains comparisons", "multiply"),
        ("I(1)", "names no column", "Take it out"),
        ("C(r, levels=['a' 'b'])", "side by side", "comma"),
        ("Treatment('a')", "outside C()", "C(x, Treatment)"),
        ("C(r, treatment)", "no contrast", "Treatment, Sum"),
        ("C(r, 'a')", "no contrast", "Treatment, Sum"),
        ("bs(x, 4, 3)", "3 arguments", "degree"),
        ("bs(x, dff=4)", '"dff"', "df"),
        ("bs(x, df=4, degree=60)", "degree=60", "5"),
        ("Q(x)", "does not name a column", 'Q("odd name")'),
        ("a b", "cannot be read", "may use"),
        ("x +", "does not parse", "may use"),
        ("%", "does not parse", "may use"),
        ("x # y", "comments", "may use"),
        ("-x", "does not parse", "may use"),
        ("0", "no terms", "covariate"),
        ("x ~ y", 'have a "~"', "covariates only"),
    ],
)
def test_a_message_says_what_is_wrong_and_the_mend(text, said, mend):
    with pytest.raises(FormulaError) as caught:
        parse_formula(text, KINDS, sided=False)
    assert said in caught.value.message
    assert mend in caught.value.mend


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("y", "no response"),
        ("~ x", "no response"),
        ("y ~ x ~ r", 'more than one "~"'),
        ("y ~ y", "both sides"),
        ("y ~ x + log(y)", "both sides"),
        ("zz ~ x", 'column "zz"'),
        ("day ~ x", "neither a number nor text"),
    ],
)
def test_an_exposure_formula_has_one_column_left_and_covariates_right(text, said):
    with pytest.raises(FormulaError, match=said) as caught:
        parse_formula(text, KINDS, sided=True)
    assert caught.value.mend


def test_columns_come_in_order_of_appearance_once_each():
    formula = parse_formula('Q("a~b") ~ log(y) + x:r + Q("odd name") + I(x * y)', KINDS, sided=True)
    assert formula.response == "a~b"
    assert formula.columns == ("y", "x", "r", "odd name")


def test_a_column_named_like_a_function_is_a_column_where_it_is_not_called():
    assert parse_formula("sqrt + Sum", KINDS, sided=False).columns == ("sqrt", "Sum")


def test_no_allowed_function_can_write_into_its_arguments():
    x, y = np.array([1.0, 2.0, 3.0]), np.array([4.0, 5.0, 6.0])
    for name in FUNCTIONS:
        for text in (f"{name}(x, y)", f"{name}(x, y, y)", f"{name}(x, 0, 1, y)", f"{name}(x, out=y)"):
            try:
                values = {"x": x, "y": y}
                learn(
                    parse_formula(text, {"x": "number", "y": "number"}, sided=False),
                    lambda v=values: iter([v]),
                )
            except FormulaError:
                pass
            assert x.tolist() == [1, 2, 3], text
            assert y.tolist() == [4, 5, 6], text


@settings(max_examples=400, deadline=None)
@given(st.text(alphabet="xyrCIQbslog01.'\"()[]{}<>=!+-*/,:@#~% \\\n_é", max_size=40))
def test_any_text_is_either_parsed_or_refused_with_a_mend(text):
    try:
        parse_formula(text, KINDS, sided=False)
    except FormulaError as error:
        assert error.mend


@pytest.mark.parametrize(("text", "said"), [("C(x)", r"C\(\) of a number"), ("r", "r"), ("C(r)", "r")])
def test_a_category_with_too_many_levels_is_refused_before_its_contrasts_fill_the_memory(text, said):
    numbers = np.arange(60_000.0)
    values = {"x": numbers, "r": pd.Categorical(numbers.astype(int).astype(str))}
    with pytest.raises(FormulaError, match=f"{said} has 60,000 levels"):
        learn(parse_formula(text, KINDS, sided=False), lambda: iter([values]))


def test_a_formula_with_too_many_columns_is_refused_by_its_widest_term():
    rng = np.random.default_rng(0)
    values = {"x": rng.integers(0, 60, 9000) * 1.0, "y": rng.integers(0, 50, 9000) * 1.0}
    with pytest.raises(FormulaError, match=r"3,000 columns, of which 2,\d\d\d belong to C\(x\):C\(y\)"):
        learn(parse_formula("C(x)*C(y)", KINDS, sided=False), lambda: iter([values]))
