"""The outline of an extract, its guesses at a design, and the plan it hands over."""

from __future__ import annotations

import datetime
import tomllib

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from steelyard.data.drafts import toml_text
from steelyard.data.guesses import ColumnSummary, guess_design, no_answer_codes
from steelyard.data.outline import outline
from steelyard.data.source import open_extract
from steelyard.plan import Plan, SuppliedReplicates
from steelyard.plan_file import read_plan
from steelyard.study import Study

N = 900


@pytest.fixture(scope="module")
def frame():
    rng = np.random.default_rng(5)
    made = pd.DataFrame(
        {
            "stratum": rng.integers(1, 9, N),
            "area": rng.integers(1, 60, N),
            "household_id": rng.integers(1, 9, N),
            "household_income": rng.integers(0, 9, N),
            "household_size": rng.integers(1, 9, N),
            "areas_in_stratum": 400,
            "weight_kg": rng.normal(60, 5, N),
            "person_weight": rng.gamma(3, 50, N),
            "age": rng.integers(6, 15, N),
            "piped": rng.integers(0, 2, N),
            "income": rng.choice([100.0, 200.5, 350.0, 9998.0, 9999.0], N),
            "visits": rng.choice([0, 1, 2, 3, 9], N),
            "region": rng.choice(["north", "south", "east", "Don't know"], N),
            "insured": rng.random(N) < 0.5,
            "day": pd.date_range("2020-01-01", periods=N),
            "lists": [[1]] * N,
            "nothing": [None] * N,
        }
    )
    made.loc[:89, "age"] = None
    for r in range(1, 41):
        made[f"rep_{r}"] = made["person_weight"] * rng.choice([0.7, 1.3], N)
    for q in range(1, 11):
        made[f"q{q}"] = rng.integers(1, 6, N)
    return made


@pytest.fixture(scope="module")
def outlined(frame):
    return outline(open_extract(frame))


def test_the_frame_of_columns_is_what_pandas_counts(frame, outlined):
    table = outlined.columns.set_index("column")
    assert list(table.index) == list(frame.columns)
    for name in frame.columns:
        assert table.loc[name, "missing"] == pytest.approx(frame[name].isna().mean()), name
        if name not in ("lists", "nothing"):
            distinct = frame[name].nunique()
            assert table.loc[name, "distinct"] == distinct, name
    for name in ("age", "income", "rep_7"):
        assert table.loc[name, "low"] == frame[name].min()
        assert table.loc[name, "high"] == frame[name].max()
    assert table["kind"].loc[["age", "insured", "region", "day", "lists"]].tolist() == [
        "number",
        "boolean",
        "category",
        "other",
        "other",
    ]
    assert table.loc["region", "values"] == "Don't know, east, north, south"
    assert table.loc["day", "values"].startswith("2020-01-01")
    assert pd.isna(table.loc["lists", "distinct"])
    assert table.loc["nothing", "missing"] == 1


def test_distinct_values_are_counted_up_to_a_thousand():
    table = outline(open_extract(pd.DataFrame({"x": np.arange(1001.0), "y": np.arange(1001) % 1000}))).columns
    assert pd.isna(table["distinct"][0])
    assert table["distinct"][1] == 1000


def test_long_lists_of_levels_are_cut_and_say_so():
    table = outline(open_extract(pd.DataFrame({"r": list("abcdefghij")}))).columns
    assert table["values"][0] == "a, b, c, d, e, f, and 4 more"


def test_guesses_name_the_design_columns_and_the_reasons(outlined):
    found = {guess.part: guess for guess in outlined.guesses}
    assert found["weight"].columns == ("person_weight",)
    assert "never negative" in found["weight"].reason
    assert found["strata"].columns == ("stratum",)
    assert "8 values" in found["strata"].reason
    assert found["clusters"].columns == ("area", "household_id")
    assert found["population"].columns == ("areas_in_stratum",)
    assert found["replicate weights"].columns == tuple(f"rep_{r}" for r in range(1, 41))
    assert "40 numbered columns" in found["replicate weights"].reason


@pytest.mark.parametrize(
    ("columns", "part"),
    [
        ({"weight_kg": np.linspace(50, 90, 100)}, "weight"),
        ({"birthweight": np.linspace(2, 5, 100)}, "weight"),
        ({"overweight": np.arange(100) % 2}, "weight"),
        ({"weight": np.linspace(-1, 5, 100)}, "weight"),
        ({"weight": np.arange(100) % 2}, "weight"),
        ({"stratum": np.arange(100)}, "strata"),
        ({"stratum": np.where(np.arange(100) < 5, np.nan, 1.0 * (np.arange(100) % 4))}, "strata"),
        ({"areas_in_stratum": np.arange(100) % 4}, "clusters"),
        ({"household": np.arange(100)}, "clusters"),
        ({"cluster": np.linspace(0, 1, 100)}, "clusters"),
        ({f"q{i}": np.arange(100) % 5 for i in range(20)}, "replicate weights"),
        ({f"rep{i}": np.arange(100) % 5 for i in range(7)}, "replicate weights"),
        (
            {"weight": np.linspace(50, 90, 100), **{f"rep{i}": np.arange(100) % 5 for i in range(20)}},
            "replicate weights",
        ),
    ],
)
def test_what_only_looks_like_a_design_column_is_not_guessed(columns, part):
    found = outline(open_extract(pd.DataFrame(columns))).guesses
    assert part not in {guess.part for guess in found}


def test_codes_for_no_answer_are_what_lies_beyond_the_rest():
    def codes(*numbers):
        return no_answer_codes(
            ColumnSummary("x", "int64", "number", 0, len(numbers), numbers=tuple(map(float, numbers)))
        )

    assert codes(0, 1, 2, 3, 9) == (9,)
    assert codes(100, 250, 9998, 9999) == (9998, 9999)
    assert codes(*range(60), 97, 98, 99) == (97, 98, 99)
    assert codes(-9, -8, 0, 1, 2) == (-9, -8)
    assert codes(*range(100)) == ()
    assert codes(*range(-9, 10)) == ()
    assert codes(7, 8, 9) == ()
    assert codes(9, 99) == ()
    text = ColumnSummary("r", "string", "category", 0, 3, levels=("N/A", "north", "refused"))
    assert no_answer_codes(text) == ("N/A", "refused")


def test_the_plan_is_valid_and_runs_once_the_marked_places_are_filled(frame, tmp_path):
    usable = frame.drop(columns=["lists", "nothing"])
    usable["days"] = np.arange(N) % 7 + usable["piped"]
    usable.to_parquet(tmp_path / "survey.parquet")
    made = outline(open_extract("survey.parquet", tmp_path))
    path = tmp_path / "plan.toml"
    path.write_text(made.plan_text, encoding="utf-8")
    draft = Plan(**read_plan(path))
    assert draft.data.files == ("survey.parquet",)
    assert draft.design.weight == "person_weight"
    assert draft.design.strata == ("stratum",)
    assert draft.design.clusters == ("area", "household_id")
    assert draft.design.population == ("areas_in_stratum",)
    for mark, fill in (("EXPOSURE", "piped"), ("COVARIATES", "age + region"), ("OUTCOME", "days")):
        assert f"THE_{mark}" in made.plan_text.splitlines()[1]
        body = made.plan_text.split("\n", 2)
        made_text = body[2].replace(f"THE_{mark}", fill)
        made = type(made)(
            made.columns, made.guesses, "\n".join([*body[:2], made_text]), made.rows, made.looked_at
        )
    path.write_text(made.plan_text, encoding="utf-8")
    checkup = Study.read(path).check()
    assert not [finding for finding in checkup.findings if finding.weight == "error"]
    # The lines that are commented out are TOML as well.
    uncommented = "\n".join(
        line.removeprefix("# ") if line.startswith('# "') and " = [" in line else line
        for line in made.plan_text.splitlines()
    )
    path.write_text(uncommented, encoding="utf-8")
    assert Study.read(path).data.missing == {
        "income": (9998, 9999),
        "visits": (9,),
        "region": ("Don't know",),
    }


def test_without_any_guess_the_plan_says_what_to_name(tmp_path):
    made = outline(open_extract(pd.DataFrame({"x": [1.5, 2.5], "r": ["a", "b"]})))
    assert made.guesses == ()
    keys = tomllib.loads(made.plan_text)
    assert keys["design"]["weight"] == "THE_WEIGHT"
    assert "THE_WEIGHT" in made.plan_text.splitlines()[1]
    assert 'nowhere missing: "x"' in made.plan_text
    assert "files" not in keys["data"]


def test_the_draft_of_supplied_replicates_is_a_plan_once_uncommented():
    columns = {"weight": [1.5, 2.5, 3.5], **{f"rep_{r:02d}": [1.5, 2.5, 3.5] for r in range(1, 13)}}
    text = outline(open_extract(pa.table(columns))).plan_text
    for key in ("[design.replicates]", "columns =", "method =", "fay ="):
        text = text.replace(f"# {key}", key)
    text = text.replace('method = "..."', 'method = "fay"')
    drafted = SuppliedReplicates(**tomllib.loads(text)["design"]["replicates"])
    assert drafted == SuppliedReplicates(columns=("rep_*",), method="fay", fay=0.5)


hostile = st.text(min_size=1, max_size=12).filter(lambda text: text.strip() and "\x00" not in text)


@settings(max_examples=60, deadline=None)
@given(st.lists(hostile, min_size=3, max_size=6, unique=True), st.text(max_size=20))
def test_a_plan_stays_valid_whatever_the_columns_are_called(names, level):
    names = [name.encode("utf-8", "replace").decode() for name in names]
    names = list(dict.fromkeys(names))
    columns = {f"weight {names[0]}": [1.5, 2.5, 3.5], f"stratum {names[-1]}": [1, 1, 2]}
    columns |= {name: pa.array([0, 1, 1]) for name in names}
    columns |= {f"rep {names[0]} {r}": [1.5, 2.5, 3.5] for r in range(8)}
    columns[f"codes {names[0]}"] = pa.array([1, 2, 99])
    columns["r"] = pa.array(["a", "refused", level.encode("utf-8", "replace").decode()])
    text = outline(open_extract(pa.table(columns))).plan_text
    keys = tomllib.loads(text)
    assert "look like replicate weights" in text
    assert set(keys) == {"title", "data", "design", "exposure", "outcome"}
    assert set(keys["data"]) <= {"missing"}
    assert set(keys["design"]) <= {"weight", "strata", "clusters", "population", "single_psu"}
    assert keys["design"]["weight"] in (*columns, "THE_WEIGHT")


@given(st.text(max_size=30))
def test_toml_text_comes_back_as_it_was(text):
    text = text.encode("utf-8", "replace").decode()
    assert tomllib.loads(f"a = {toml_text(text)}") == {"a": text}


def test_only_the_first_rows_are_looked_at_and_it_says_so(tmp_path):
    pq.write_table(pa.table({"x": [1.0] * 50 + [7.0] * 50}), tmp_path / "a.parquet", row_group_size=10)
    made = outline(open_extract("a.parquet", tmp_path), rows=50)
    assert (made.rows, made.looked_at) == (100, 50)
    assert made.columns["high"].tolist() == [1.0]
    assert "the first 50 of 100 rows" in made.plan_text


def test_a_wide_extract_is_outlined_column_by_column():
    table = pa.table({f"v{j}": [j, j + 1] for j in range(200)})
    found = outline(open_extract(table)).columns
    assert found["column"].tolist() == [f"v{j}" for j in range(200)]
    assert found["low"].tolist() == list(range(200))


def test_dates_times_and_durations_do_not_stop_it():
    table = pa.table(
        {
            "day": pa.array([datetime.date(2020, 1, 2), None]),
            "time": pa.array([datetime.time(1, 2), datetime.time(3, 4)]),
            "long": pa.array([datetime.timedelta(1), datetime.timedelta(2)]),
            "raw": pa.array([b"a", b"b"]),
            "record": pa.array([{"a": 1}, {"a": 2}]),
        }
    )
    found = outline(open_extract(table)).columns.set_index("column")
    assert (found["kind"] == "other").all()
    assert found.loc["day", "missing"] == 0.5
    assert found.loc["day", "values"] == "2020-01-02 to 2020-01-02"


def test_codes_are_found_at_the_end_of_many_values():
    income = np.r_[np.linspace(0, 5000, 3000), 99998, 99999]
    assert '# "income" = [99998, 99999]' in outline(open_extract(pd.DataFrame({"income": income}))).plan_text


def test_nothing_is_guessed_where_there_is_no_column():
    assert guess_design([], 0) == ()
