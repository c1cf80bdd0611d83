"""The balance table's rows, against indicators and numbers made from the columns themselves."""

from __future__ import annotations

from itertools import combinations

import numpy as np
import pandas as pd
import pytest

from steelyard.data.formula import learn, parse_formula
from steelyard.data.terms import plan_terms
from steelyard.errors import PlanError
from steelyard.plan import Balance

N = 400
KINDS = {
    "x": "number",
    "z": "number",
    "k": "number",
    "b": "boolean",
    "r": "category",
    "g": "category",
    "odd name": "number",
    "o:d": "category",
    **{f"c{i}": "number" for i in range(40)},
}
LEVELS = {"r": ("east", "north", "south"), "g": ("u", "v"), "o:d": ("[1]", "T.p")}


@pytest.fixture(scope="module")
def values():
    rng = np.random.default_rng(3)
    made = {name: rng.gamma(2, 2, N) + 0.1 for name, kind in KINDS.items() if kind == "number"}
    made |= {
        name: pd.Categorical(rng.choice(levels, N), categories=levels) for name, levels in LEVELS.items()
    }
    return made | {"k": rng.integers(0, 3, N) * 1.0, "b": rng.integers(0, 2, N) * 1.0}


def planned(text, values, balance=None, **more):
    builder = learn(parse_formula(text, KINDS, sided=False), lambda: iter([values]))
    plan = plan_terms(builder, KINDS, LEVELS, balance or Balance(), **more)
    columns = np.column_stack([builder.build(values, N), plan.extra(values, N)])
    assert columns.shape[1] == len(builder.names) + len(plan.extra_names)
    rows = {}
    for term in plan.terms:
        assert (term.term, term.level) not in rows, "a row twice"
        column = columns[:, term.index] * (1 if term.times is None else columns[:, term.times])
        rows[term.term, term.level] = (term.kind, column)
    return builder, plan, rows


def is_level(column, level):
    if isinstance(column, pd.Categorical):
        return np.asarray(column == level).astype(float)
    return (column == float(level)).astype(float)


def agree(rows, values, expected):
    """``expected`` maps (term, level) to its column, in the order of the table."""
    assert list(rows) == list(expected)
    for key, (_, column) in rows.items():
        np.testing.assert_allclose(column, expected[key], rtol=1e-12, atol=1e-12, err_msg=str(key))


def levels_of(name, values):
    levels = LEVELS.get(name, ("0", "1", "2"))
    return {(name, level): is_level(values[name], level) for level in levels}


CODINGS = [
    "C({0})",
    "C({0}, Treatment)",
    "C({0}, Treatment(1))",
    "C({0}, Sum)",
    "C({0}, Poly)",
    "C({0}, Diff)",
    "C({0}, Helmert)",
    "0 + C({0})",
    "0 + C({0}, Sum)",
]


@pytest.mark.parametrize("name", ["r", "g", "k"])
@pytest.mark.parametrize("coding", CODINGS)
def test_a_category_has_a_row_for_every_level_whatever_its_contrasts(coding, name, values):
    _, _, rows = planned(coding.format(name), values)
    agree(rows, values, levels_of(name, values))
    assert {kind for kind, _ in rows.values()} == {"level"}


def test_levels_that_the_model_has_are_not_made_again(values):
    assert planned("r + x", values)[1].extra_names == ["r: east"]
    assert planned("0 + r + x", values)[1].extra_names == []
    assert planned("C(r, Treatment('south'))", values)[1].extra_names == ["r: south"]
    assert planned("C(r, Sum)", values)[1].extra_names == ["r: east", "r: north", "r: south"]


def test_a_level_named_like_a_contrast_is_told_from_it(values):
    tricky = {**values, "r": pd.Categorical(np.where(values["k"] > 0, "mean", "S.a"))}
    _, _, rows = planned("0 + C(r, Sum)", tricky)
    for level in ("S.a", "mean"):
        np.testing.assert_array_equal(rows["r", level][1], np.asarray(tricky["r"]) == level)


def test_a_plain_number_is_one_row_and_the_constant_none(values):
    _, plan, rows = planned('x + b + Q("odd name")', values)
    agree(rows, values, {(name, ""): values[name] for name in ("x", "b", "odd name")})
    assert plan.extra_names == []
    assert {kind for kind, _ in rows.values()} == {"number"}


def test_a_transformed_number_brings_its_columns_and_itself_once(values):
    builder, plan, rows = planned("log(x) + I(x**2) + bs(x, df=4) + I(x * z)", values)
    spline = builder.build(values, N)[:, 3:7]
    agree(
        rows,
        values,
        {
            ("log(x)", ""): np.log(values["x"]),
            ("x", ""): values["x"],
            ("I(x ** 2)", ""): values["x"] ** 2,
            **{("bs(x, df=4)", str(j + 1)): spline[:, j] for j in range(4)},
            ("I(x * z)", ""): values["x"] * values["z"],
            ("z", ""): values["z"],
        },
    )
    assert plan.extra_names == ["x", "z"]


def test_a_comparison_has_its_two_sides(values):
    _, _, rows = planned("I(x > 3)", values)
    agree(rows, values, {("I(x > 3)", "False"): values["x"] <= 3, ("I(x > 3)", "True"): values["x"] > 3})


@pytest.mark.parametrize("text", ["r:g", "r*g", "r + r:g", "C(r, Treatment('south')):g"])
def test_an_interaction_brings_every_level_by_itself_and_the_models_products(text, values):
    builder, _, rows = planned(text, values)
    expected = {**levels_of("r", values), **levels_of("g", values)}
    for key, column in expected.items():
        np.testing.assert_array_equal(rows[key][1], column)
    products = [key for key in rows if key[0] == "r:g"]
    assert len(products) == sum(":" in name for name in builder.names) > 0
    for term, level in products:
        r, g = level.split(", ")
        kind, column = rows[term, level]
        assert kind == "level"
        np.testing.assert_array_equal(column, is_level(values["r"], r) * is_level(values["g"], g))
    assert len(rows) == 5 + len(products)


@pytest.mark.parametrize("text", ["x:r", "x*r", "0 + x:r", "z + r + x:r"])
def test_a_number_by_a_category_is_a_row_a_level(text, values):
    _, _, rows = planned(text, values)
    np.testing.assert_array_equal(rows["x", ""][1], values["x"])
    for key, column in levels_of("r", values).items():
        np.testing.assert_array_equal(rows[key][1], column)
    term = "x:r" if ("x:r", "south") in rows else "r:x"
    for level in {level for name, level in rows if name == term}:
        kind, column = rows[term, level]
        assert kind == "number"
        np.testing.assert_allclose(column, values["x"] * is_level(values["r"], level))


def test_spline_columns_in_interactions_are_numbered_as_by_themselves(values):
    _, _, rows = planned("bs(x, df=4)*r", values)
    for number in "1234":
        for level in ("north", "south"):
            np.testing.assert_allclose(
                rows["bs(x, df=4):r", f"{number}, {level}"][1],
                rows["bs(x, df=4)", number][1] * is_level(values["r"], level),
            )


def test_three_factors_and_names_with_brackets_and_colons(values):
    _, _, rows = planned("""Q("o:d"):C(k, levels=[2, 0, 1]):Q("odd name")""", values)
    found = [level for term, level in rows if term == "o:d:k:odd name"]
    assert len(found) == 6
    for level in found:
        first, second = level.split(", ")
        np.testing.assert_allclose(
            rows["o:d:k:odd name", level][1],
            is_level(values["o:d"], first) * is_level(values["k"], second) * values["odd name"],
        )


def test_the_users_columns_follow_without_repeating_what_is_there(values):
    _, plan, rows = planned("r + x", values, Balance(columns=("x", "r", "z", "g")))
    agree(
        rows,
        values,
        {
            **levels_of("r", values),
            ("x", ""): values["x"],
            ("z", ""): values["z"],
            **levels_of("g", values),
        },
    )
    assert plan.extra_names == ["r: east", "z", "g: u", "g: v"]


def test_squares_are_of_plain_numbers_that_are_not_squared_already(values):
    _, _, rows = planned(
        "x + b + r + k + bs(c0, df=4) + z + I(z ** 2)", values, Balance(squares=True), indicators={"k"}
    )
    squares = [term for term, _ in rows if term.endswith("squared")]
    assert squares == ["x squared", "c0 squared"]
    np.testing.assert_allclose(rows["x squared", ""][1], values["x"] ** 2)
    np.testing.assert_allclose(rows["c0 squared", ""][1], values["c0"] ** 2)


def test_interactions_are_all_pairs_of_different_columns(values):
    _, _, rows = planned("x + r + log(c0)", values, Balance(columns=("g",), interactions=True))
    plain = {
        ("x", ""): values["x"],
        **levels_of("r", values),
        ("c0", ""): values["c0"],
        **levels_of("g", values),
    }
    wanted = {frozenset((a, b)) for a, b in combinations(plain, 2) if a[0] != b[0]}
    made = {key: row for key, row in rows.items() if ":" in key[0]}
    assert len(made) == len(wanted)
    for a, b in map(tuple, wanted):
        forms = [(f"{p[0]}:{q[0]}", ", ".join(v for v in (p[1], q[1]) if v)) for p, q in ((a, b), (b, a))]
        (key,) = [form for form in forms if form in made]
        np.testing.assert_allclose(made[key][1], plain[a] * plain[b])
        assert made[key][0] == ("level" if a[1] and b[1] else "number")


def test_interactions_that_the_model_has_are_not_made_again(values):
    _, _, rows = planned("r*g + r:x", values, Balance(interactions=True))
    contents = [tuple(column) for _, column in rows.values()]
    assert len(set(contents)) == len(contents)


def test_too_many_interactions_are_refused_with_their_number(values):
    text = " + ".join(f"c{i}" for i in range(33))
    with pytest.raises(PlanError, match=r"528 rows") as caught:
        planned(text, values, Balance(interactions=True))
    assert "balance.columns" in caught.value.mend
    assert (
        len(planned(" + ".join(f"c{i}" for i in range(32)), values, Balance(interactions=True))[2])
        == 32 + 496
    )
