"""From an extract to design rows, against plain pandas and plain patsy on the whole frame."""

from __future__ import annotations

from decimal import Decimal

import numpy as np
import pandas as pd
import patsy
import pyarrow as pa
import pyarrow.dataset as ds
import pyarrow.parquet as pq
import pytest

from steelyard.data import build
from steelyard.data.build import build_rows
from steelyard.data.passes import Engine, threads
from steelyard.data.source import open_extract
from steelyard.errors import DesignError, ExtractError, FormulaError, PlanError
from steelyard.plan import Balance, Data, Design, Exposure, Outcome, Plan

ROWS = 700
FORMULA = "a ~ region + bs(age, df=4) + center(income) + C(rooms) + owner:age"
DOMAIN = "age >= 20 and region in ('east', 'north', 'west')"
MISSING = {"income": (9998, 9999), "region": ("DK",), "a": (9,), "y": (-1,)}


def frame(seed=0, n=ROWS):
    """A survey with codes for 'no answer', empty cells, text, booleans and zero weights."""
    rng = np.random.default_rng(seed)
    psu = np.sort(rng.integers(0, 30, n))
    made = pd.DataFrame(
        {
            "w": np.where(rng.random(n) < 0.03, 0.0, rng.exponential(size=n) + 0.5),
            "h": psu // 6,
            "psu": psu % 6,
            "a": rng.choice([0, 1, 9], n, p=[0.55, 0.4, 0.05]),
            "region": rng.choice(["west", "east", "DK", "north", "south"], n),
            "age": rng.integers(15, 80, n).astype(float),
            "income": rng.choice([9998.0, 9999.0, *np.arange(10.0, 200.0, 7)], n),
            "rooms": rng.integers(1, 5, n),
            "owner": rng.random(n) < 0.5,
            "y": rng.choice([-1.0, *np.arange(8.0)], n),
            "b": rng.integers(0, 2, n).astype(float),
        }
    )
    made.loc[rng.random(n) < 0.05, "age"] = np.nan
    made.loc[rng.random(n) < 0.05, "b"] = np.nan
    made["region"] = made["region"].astype(object)
    made.loc[rng.random(n) < 0.05, "region"] = None
    return made


def plan(**changes):
    given = {
        "data": Data(domain=DOMAIN, missing=MISSING),
        "design": Design(weight="w", strata="h", clusters="psu"),
        "exposure": Exposure(formula=FORMULA),
        "outcome": (
            Outcome(name="y", covariates="region + center(income)"),
            Outcome(name="b", family="binomial", covariates="region + age"),
            Outcome(name="b", family="binomial"),
        ),
        "balance": Balance(columns=("rooms",)),
    }
    return Plan(**(given | changes))


def rows_of(extract, folder=None, block_rows=8192, engine=None, **changes):
    return build_rows(open_extract(extract, folder), plan(**changes), engine or Engine(), block_rows)[0]


def whole(rows, field):
    return np.concatenate([getattr(block, field) for block in rows.blocks])


def same(one, two):
    assert one.names == two.names
    for field in ("position", "columns", "exposure", "weight", "unit"):
        np.testing.assert_array_equal(whole(one, field), whole(two, field))
    assert one.exclusions == two.exclusions
    assert [stage.labels.tolist() for stage in one.units.stages] == [
        stage.labels.tolist() for stage in two.units.stages
    ]


def recoded(made):
    """The frame with missing codes gone, and the reason why each row is out, one after the other."""
    made = made.copy()
    for name, codes in MISSING.items():
        made[name] = made[name].where(~made[name].isin(codes))
    unknown = made["age"].isna() | made["region"].isna()
    # Not known to be outside: an expression with one part false is false whatever the other part is.
    outside = (made["age"] < 20) | made["region"].eq("south")
    reasons = pd.Series("", index=made.index)
    tests = {
        "outside the domain": outside,
        "domain unknown: age, region missing": unknown & ~outside,
        "exposure a missing": made["a"].isna(),
        "income missing": made["income"].isna(),
        "y missing": made["y"].isna(),
        "b missing": made["b"].isna(),
    }
    for reason, holds in tests.items():
        reasons[holds & (reasons == "")] = reason
    return made, reasons


def test_rows_left_out_are_counted_under_the_first_reason_that_holds():
    made, reasons = recoded(frame())
    expected = reasons.value_counts().drop("")
    rows = rows_of(frame())
    assert dict(rows.exclusions) == expected.to_dict()
    assert list(rows.exclusions) == [r for r in reasons_in_order() if r in expected]
    assert sum(rows.exclusions.values()) + len(rows) == rows.total == ROWS
    np.testing.assert_array_equal(whole(rows, "position"), np.flatnonzero(reasons == ""))
    np.testing.assert_array_equal(whole(rows, "weight"), made["w"][reasons == ""])
    np.testing.assert_array_equal(whole(rows, "exposure"), made["a"][reasons == ""])


def reasons_in_order():
    return [
        "outside the domain",
        "domain unknown: age, region missing",
        "exposure a missing",
        "income missing",
        "y missing",
        "b missing",
    ]


def test_design_rows_are_those_of_patsy_on_the_whole_domain():
    made, reasons = recoded(frame())
    inside = made[reasons == ""].copy()
    # Levels are those of the whole extract: "south" keeps its column in a domain that has none of it.
    inside["region"] = pd.Categorical(inside["region"], ["east", "north", "south", "west"])
    inside["owner"] = inside["owner"].astype(float)
    rows = rows_of(frame(), block_rows=64)
    columns = whole(rows, "columns")

    def patsys(text):
        return patsy.dmatrix(text, inside, return_type="dataframe")

    for model, text in (
        (rows.exposure_model, FORMULA.split("~")[1]),
        (rows.outcome_models[0], "region + center(income)"),
        (rows.outcome_models[1], "region + age"),
    ):
        expected = patsys(text)
        assert [name.replace("T.1.0", "T.1") for name in expected.columns] == list(model.names)
        np.testing.assert_allclose(columns[:, list(model.index)], expected, rtol=1e-12, atol=1e-12)
        assert model.names[model.intercept] == "Intercept"
    assert rows.outcome_models[2] is None
    np.testing.assert_array_equal(columns[:, list(rows.outcomes)], inside[["y", "b", "b"]])
    assert (columns[:, rows.names.index("region[T.south]")] == 0).all()


def test_splines_learn_from_the_domain_and_not_from_the_extract():
    wide = frame()
    far = wide.assign(age=lambda f: np.where(f["age"] < 20, -500.0, f["age"]))
    np.testing.assert_array_equal(whole(rows_of(wide), "columns"), whole(rows_of(far), "columns"))


def test_every_column_stands_once_whatever_models_share_it():
    rows = rows_of(frame())
    assert len(set(rows.names)) == len(rows.names) == rows.blocks[0].columns.shape[1]
    assert rows.exposure_model.index == tuple(range(len(rows.exposure_model.names)))
    assert set(rows.outcome_models[0].names) <= set(rows.exposure_model.names)
    adjusted = Outcome(name="y", covariates=FORMULA.split("~")[1])
    assert len(rows_of(frame(), outcome=(adjusted,)).names) == len(
        rows_of(frame(), outcome=outcome_named("y")).names
    )


def test_an_odd_column_name_is_not_taken_for_a_column_of_a_formula():
    odd = frame().rename(columns={"age": "C(rooms)[T.2.0]"})
    rows = rows_of(
        odd,
        data=Data(missing=MISSING),
        exposure=Exposure(formula="a ~ income"),
        balance=Balance(columns=("C(rooms)[T.2.0]",)),
        outcome=(Outcome(name="y", covariates="C(rooms)"),),
    )
    model = rows.outcome_models[0]
    column = whole(rows, "columns")[:, model.index[model.names.index("C(rooms)[T.2]")]]
    np.testing.assert_array_equal(column, odd["rooms"][whole(rows, "position")] == 2)


def outcome_named(text):
    return (Outcome(name=text),)


def test_a_column_called_like_an_outcomes_place_is_not_taken_for_it():
    odd = frame().rename(columns={"rooms": "outcome y"})
    rows = rows_of(
        odd,
        exposure=Exposure(formula="a ~ age"),
        balance=Balance(columns=("outcome y",)),
        outcome=outcome_named("y"),
    )
    made = recoded(frame())[0]
    np.testing.assert_array_equal(
        whole(rows, "columns")[:, rows.outcomes[0]], made["y"][whole(rows, "position")]
    )


def test_units_are_those_of_a_grouping_of_the_whole_extract():
    made = frame()
    rows = rows_of(made)
    strata, psus = made.groupby("h").ngroup(), made.groupby(["h", "psu"]).ngroup()
    np.testing.assert_array_equal(whole(rows, "unit"), psus[whole(rows, "position")])
    np.testing.assert_array_equal(rows.units.stages[0].rows, np.bincount(strata))
    np.testing.assert_array_equal(rows.units.stages[1].rows, np.bincount(psus))
    np.testing.assert_array_equal(
        rows.units.stages[1].domain_rows, np.bincount(psus[whole(rows, "position")], minlength=psus.max() + 1)
    )


def test_every_kind_of_extract_gives_the_same_rows(tmp_path):
    made = frame()
    table = pa.Table.from_pandas(made, preserve_index=False)
    parts = tmp_path / "parts"
    parts.mkdir()
    for k in range(4):
        piece = table.slice(k * 200, 200 if k < 3 else ROWS)
        if k % 2:
            # Other widths and spellings of the same kinds, as files of one survey have them.
            piece = pa.table(
                {
                    **{name: piece[name] for name in piece.schema.names},
                    "region": piece["region"].dictionary_encode(),
                    "rooms": piece["rooms"].cast(pa.int8()),
                    "y": piece["y"].cast(pa.int16()),
                    "income": pa.array(
                        [Decimal(int(v)) for v in piece["income"].to_pylist()], pa.decimal128(9, 2)
                    ),
                }
            )
        pq.write_table(piece, parts / f"{k}.parquet", row_group_size=37)
    pq.write_table(table, tmp_path / "one.parquet", row_group_size=101)
    expected = rows_of(made)
    categories = made.assign(region=made["region"].astype("category"), rooms=made["rooms"].astype("Int64"))
    for extract in (
        "one.parquet",
        [f"parts/{k}.parquet" for k in range(4)],
        "parts/*.parquet",
        "parts",
        table,
        ds.dataset(tmp_path / "one.parquet"),
        categories,
    ):
        same(rows_of(extract, tmp_path), expected)


@pytest.mark.parametrize("block_rows", [1, 64, 699, 700, 8192])
@pytest.mark.parametrize("read_rows", [16, 16_384])
def test_the_size_of_blocks_and_runs_changes_nothing(block_rows, read_rows, monkeypatch):
    expected = rows_of(frame())
    monkeypatch.setattr(build, "READ_ROWS", read_rows)
    with threads(2) as engine:
        rows = rows_of(frame(), block_rows=block_rows, engine=engine)
    # What is learnt from runs (means) may differ in the last bits.
    assert rows.names == expected.names
    np.testing.assert_allclose(whole(rows, "columns"), whole(expected, "columns"), rtol=1e-12, atol=1e-12)
    for field in ("position", "exposure", "weight", "unit"):
        np.testing.assert_array_equal(whole(rows, field), whole(expected, field))
    assert rows.exclusions == expected.exclusions
    for block in rows.blocks:
        assert block.columns.flags.c_contiguous
        assert block.position[0] // block_rows == block.position[-1] // block_rows


@pytest.mark.parametrize(
    ("values", "exposed", "reference", "levels"),
    [
        ([0, 1], None, None, ("1", "0")),
        ([False, True], None, None, ("1", "0")),
        ([False, True], True, None, ("1", "0")),
        ([0, 1], 1.0, None, ("1", "0")),
        ([1, 0], 1.0, None, ("1", "0")),
        ([1, 2], 2, None, ("2", "1")),
        ([2, 1], 2.0, 1, ("2", "1")),
        ([0.5, 1.5], 1.5, None, ("1.5", "0.5")),
        (["no", "yes"], "yes", None, ("yes", "no")),
        (["1", "2"], 2, 1, ("2", "1")),
    ],
)
def test_levels_are_told_as_the_extract_spells_them(values, exposed, reference, levels):
    made = frame().assign(a=[values[k % 2] for k in range(ROWS)])
    rows = rows_of(
        made,
        data=Data(),
        exposure=Exposure(formula="a ~ rooms", exposed=exposed, reference=reference),
        outcome=outcome_named("w"),
    )
    assert rows.levels == levels
    second = "1" if exposed is None else str(exposed)
    is_exposed = np.array([str(v) == second or v == (1 if exposed is None else exposed) for v in made["a"]])
    np.testing.assert_array_equal(whole(rows, "exposure"), is_exposed[whole(rows, "position")])


def refused(error, *words, extract=None, **changes):
    with pytest.raises(error) as caught:
        rows_of(frame() if extract is None else extract, **changes)
    for word in words:
        assert word in str(caught.value), str(caught.value)
    assert caught.value.mend


def test_a_level_in_quotes_for_an_exposure_of_numbers_is_refused():
    two = frame().assign(a=lambda f: 1 + (f["a"] == 1))
    for levels in ({"exposed": "2"}, {"exposed": 2, "reference": "1"}):
        refused(
            PlanError,
            "is the text",
            '"a" holds numbers',
            "without quotes",
            extract=two,
            exposure=Exposure(formula=FORMULA, **levels),
        )


def test_values_that_are_not_finite_are_counted_over_all_runs(monkeypatch):
    monkeypatch.setattr(build, "READ_ROWS", 64)
    made = frame()
    made["z"] = np.where(np.arange(ROWS) % 10 == 3, 0.0, 1.0)
    kept = recoded(frame())[1].to_numpy() == ""
    bad = np.flatnonzero(kept & (made["z"].to_numpy() == 0))
    assert len(bad) > 5
    for block_rows in (16, 50, 8192):
        refused(
            FormulaError,
            f'"log(z)" is not a finite number in {len(bad)} row(s)',
            f"first in row(s) {', '.join(map(str, bad[:5]))} (counted from 0)",
            extract=made,
            block_rows=block_rows,
            exposure=Exposure(formula="a ~ log(z)"),
        )


def test_values_that_are_not_finite_outside_the_domain_do_no_harm():
    made = frame().assign(z=lambda f: (f["age"] >= 20) * 1.0)
    assert len(rows_of(made, exposure=Exposure(formula="a ~ log(z + 1) + age"))) > 0
    rows = rows_of(made, exposure=Exposure(formula="a ~ log(z) + age"))
    assert (whole(rows, "columns")[:, rows.names.index("log(z)")] == 0).all()


def test_a_constant_covariate_is_told_be_it_number_or_text():
    made = frame().assign(rooms=3, region=lambda f: np.where(f["age"] < 20, "west", "east"))
    rows = rows_of(made)
    assert rows.warnings == (
        'region is "east" in every row of the domain: it tells nothing there.',
        "rooms is 3 in every row of the domain: it tells nothing there.",
    )
    assert rows_of(frame()).warnings == ()


def test_a_column_that_one_file_lacks_is_refused(tmp_path):
    table = pa.Table.from_pandas(frame(), preserve_index=False)
    pq.write_table(table, tmp_path / "1.parquet")
    pq.write_table(table.drop(["income"]), tmp_path / "2.parquet")
    refused(ExtractError, '"income", which 2.parquet does not have', extract="*.parquet", folder=tmp_path)


def test_missing_codes_of_a_design_column_are_refused_and_not_taken_for_a_unit():
    data = Data(domain=DOMAIN, missing={**MISSING, "psu": (3,)})
    rows = int((frame()["psu"] == 3).sum())
    refused(DesignError, f'"psu" is missing in {rows} row(s)', "code(s) 3 of data.missing", data=data)


def test_large_whole_numbers_are_numbers_like_any_other():
    made = frame().assign(age=lambda f: f["rooms"] + 2**60)
    rows = rows_of(made, data=Data(missing=MISSING), exposure=Exposure(formula="a ~ age + region"))
    np.testing.assert_array_equal(
        whole(rows, "columns")[:, rows.names.index("age")],
        made["age"].to_numpy(dtype=float)[whole(rows, "position")],
    )
