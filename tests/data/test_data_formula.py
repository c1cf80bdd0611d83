"""Formulas learnt and built chunk by chunk, against plain patsy on the whole frame."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pandas as pd
import patsy
import pytest

from steelyard.data.formula import learn, parse_formula
from steelyard.errors import FormulaError

N = 600
KINDS = {"x": "number", "z": "number", "k": "number", "b": "boolean", "r": "category", "odd name": "number"}


@pytest.fixture(scope="module")
def values():
    rng = np.random.default_rng(1)
    # Sorted, so that chunks differ and nothing learnt from the first would do for all.
    return {
        "x": np.sort(rng.gamma(2, 2, N) + 0.1),
        "z": rng.normal(size=N),
        "k": np.sort(rng.integers(0, 4, N)).astype(float),
        "b": (rng.random(N) < 0.4).astype(float),
        "r": pd.Categorical(np.sort(rng.choice(["east", "north", "south"], N, p=[0.5, 0.3, 0.2]))),
        "odd name": rng.random(N),
    }


def pieces(values, size=37):
    return [{name: column[a : a + size] for name, column in values.items()} for a in range(0, N, size)]


def built(text, values, size=37):
    chunks = pieces(values, size)
    builder = learn(parse_formula(text, KINDS, sided=False), lambda: iter(chunks))
    return builder, np.concatenate([builder.build(chunk, len(chunk["x"])) for chunk in chunks])


NAMES = ("log", "log10", "log1p", "exp", "sqrt", "abs", "floor", "minimum", "maximum", "clip", "sign")
FUNCTIONS = patsy.EvalEnvironment([{name: getattr(np, name) for name in NAMES}])
ACCEPTED = [
    "x",
    "x + z + b",
    "r",
    "x + r",
    "0 + r + x",
    "x - 1",
    "r:x",
    "r*x",
    "r*C(k)",
    "(x + z + r)**2",
    "x/z",
    "C(k)",
    "C(k, Sum)",
    "C(k, Poly)",
    "C(k, Diff) + C(r, Helmert)",
    "C(r, Treatment('south'))",
    "C(r, Treatment(reference='north'))",
    "C(k, Treatment(2))",
    "C(r, levels=['south', 'north', 'east'])",
    "C(k, Poly(scores=[0, 1, 2, 5]))",
    "C(r, contrast=Sum(omit='east'))",
    "bs(x, df=5)",
    "bs(x, 4)",
    "bs(x, knots=[1, 3, 5], degree=2, include_intercept=True)",
    "bs(x, df=4, lower_bound=0, upper_bound=100)",
    "cr(x, df=4)",
    "cc(z, df=4)",
    "cr(x, df=4, constraints='center')",
    "te(cr(x, df=3), cr(z, df=3))",
    "center(x) + standardize(z)",
    "scale(x, center=False, ddof=1)",
    "center(log(x)):r",
    "bs(center(x), df=4)",
    "standardize(minimum(x, 3))",
    "log(x) + log10(x) + log1p(x) + sqrt(x) + exp(-x) + abs(z) + floor(x) + sign(z)",
    "maximum(x, z) + clip(x, 1, 5)",
    "I(x**2) + I(x**-1) + I(x**0.5)",
    "I(x * z + 2 * b - z / x)",
    "I(x > 3) + I(r == 'north') + I((x > 1) * (x < 4))",
    "I(k % 2) + I(x // 2)",
    "C(x > 3) + C(b == 1)",
    'Q("odd name") + log(Q("odd name") + 1)',
]


@pytest.mark.parametrize("text", ACCEPTED)
def test_rows_learnt_and_built_in_chunks_are_those_of_patsy_on_the_whole(text, values):
    builder, rows = built(text, values)
    whole = patsy.dmatrix(text, {**values, "r": values["r"]}, eval_env=FUNCTIONS)
    expected = np.broadcast_to(np.asarray(whole), (N, whole.shape[1]))
    np.testing.assert_allclose(rows, expected, rtol=1e-10, atol=1e-10)
    assert rows.flags.c_contiguous
    assert len(builder.names) == expected.shape[1]
    has_constant = "Intercept" in whole.design_info.column_names
    assert (builder.intercept is not None) == has_constant
    if has_constant:
        assert (rows[:, builder.intercept] == 1).all()


def test_a_level_that_only_the_last_chunk_has_is_known_from_the_first(values):
    late = pieces(values)
    assert set(late[0]["r"].codes) == {0}
    builder, rows = built("r", values)
    assert builder.names == ("Intercept", "r[T.north]", "r[T.south]")
    np.testing.assert_array_equal(rows[:, 2], np.asarray(values["r"]) == "south")


def test_a_number_code_that_only_the_last_chunk_has_is_learnt(values):
    builder, rows = built("C(k)", values)
    assert builder.names == ("Intercept", "C(k)[T.1]", "C(k)[T.2]", "C(k)[T.3]")
    np.testing.assert_array_equal(rows[:, 3], values["k"] == 3)


@pytest.mark.parametrize("size", [5, 37, 600])
def test_codes_0_and_1_in_the_first_chunks_are_not_taken_for_all_there_is(size, values):
    first = pieces(values, size)[0]
    assert size == 600 or set(first["k"]) <= {0, 1}
    builder, rows = built("C(k, Treatment(1)):r + C(b)", values, size)
    whole = patsy.dmatrix("C(k, Treatment(1)):r + C(b)", values)
    np.testing.assert_array_equal(rows, np.asarray(whole))
    assert builder.categories("C(k, Treatment(1))") == (0, 1, 2, 3)


def test_a_constant_alone_is_a_column_of_ones(values):
    builder, rows = built("1", values)
    assert builder.names == ("Intercept",)
    np.testing.assert_array_equal(rows, np.ones((N, 1)))


def test_chunk_size_changes_nothing(values):
    _, small = built("bs(x, df=5) + center(z) + r", values, 7)
    _, large = built("bs(x, df=5) + center(z) + r", values, N)
    np.testing.assert_allclose(small, large, rtol=1e-12, atol=1e-12)


def test_threads_share_a_builder(values):
    builder, expected = built("bs(x, df=5)*r + C(k) + center(z) + te(cr(x, df=3), cr(z, df=3))", values)
    chunks = pieces(values) * 8
    with ThreadPoolExecutor(8) as pool:
        rows = np.concatenate(list(pool.map(lambda chunk: builder.build(chunk, len(chunk["x"])), chunks)))
    np.testing.assert_array_equal(rows, np.tile(expected, (8, 1)))


def test_building_leaves_the_values_as_they_were(values):
    before = {name: np.array(column) for name, column in values.items()}
    built("clip(x, 1, 2) + minimum(x, z) + log(x) + standardize(z) + bs(x, df=4)", values)
    for name, column in before.items():
        np.testing.assert_array_equal(np.array(values[name]), column)


def test_categories_and_codes_of_a_factor(values):
    builder, _ = built("C(k) + r + x", values)
    assert builder.categories("C(k)") == (0, 1, 2, 3)
    assert builder.categories("x") == ()
    np.testing.assert_array_equal(builder.codes("r", values), values["r"].codes)


@pytest.mark.parametrize(
    ("text", "said", "mend"),
    [
        ("bs(x)", "either df or knots", "bs(x, df=4)"),
        ("bs(x, df=1)", "is too small", "larger df"),
        ("bs(x, df=4, upper_bound=2)", "", "bound"),
        ("C(r, levels=['east', 'north'])", "'south'", "levels="),
        ("C(r, Treatment('west'))", "'west'", "spelled"),
    ],
)
def test_what_patsy_cannot_do_is_told_with_a_mend(text, said, mend, values):
    with pytest.raises(FormulaError) as caught:
        built(text, values)
    assert said in caught.value.message
    assert text in caught.value.message
    assert mend in caught.value.mend


def test_a_value_outside_a_splines_bounds_is_refused_when_built(values):
    builder, _ = built("bs(x, df=4)", values)
    beyond = {**values, "x": values["x"] + 100}
    with pytest.raises(FormulaError, match="outermost knots") as caught:
        builder.build(beyond, N)
    assert "upper_bound" in caught.value.mend
