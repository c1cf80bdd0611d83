from decimal import Decimal

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from steelyard.data import coding
from steelyard.data.coding import UnitCollector
from steelyard.data.source import open_extract
from steelyard.errors import DesignError
from steelyard.plan import Design


def coded(frame, design, size, inside=None, missing=None):
    extract = open_extract(frame)
    columns = [*design.strata, *design.clusters, *design.population] or list(extract.columns)[:1]
    inside = np.ones(len(frame), dtype=bool) if inside is None else inside
    collector = UnitCollector(design, missing)
    for start, table in extract.read(columns, size):
        collector.add(table, inside[start : start + size])
    coder = collector.finish()
    return coder.units, np.concatenate([coder.encode(t) for _, t in extract.read(columns, size)]), coder.notes


@settings(max_examples=40, deadline=None)
@given(
    st.integers(0, 10_000),
    st.integers(1, 40),
    st.sampled_from(["number", "text", "dictionary", "float", "boolean"]),
    st.integers(0, 2),
    st.integers(0, 3),
    st.sampled_from([5, 1_000_000]),
)
def test_codes_are_those_of_a_grouping_in_sorted_order(seed, size, kind, strata, stages, held):
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(coding, "SEEN_BEFORE_COMPACTING", held)
        _check_codes(seed, size, kind, strata, stages)


def _check_codes(seed, size, kind, strata, stages):
    rng = np.random.default_rng(seed)
    n = 60
    frame = pd.DataFrame(
        {f"c{j}": rng.integers(0, 3 + j, n) for j in range(strata + stages)} | {"other": np.ones(n)}
    )
    for name in frame.columns[:-1]:
        if kind in ("text", "dictionary"):
            frame[name] = "id " + frame[name].astype(str)
        elif kind == "float":
            frame[name] = frame[name] * 1.0
        elif kind == "boolean":
            frame[name] = frame[name] > 1
    names = list(frame.columns[:-1])
    given_frame = frame.astype(dict.fromkeys(names, "category")) if kind == "dictionary" else frame
    inside = rng.random(n) < 0.5
    design = Design(weight="other", strata=tuple(names[:strata]), clusters=tuple(names[strata:]))
    units, code, _ = coded(given_frame, design, size, inside)
    assert len(units.stages) == 1 + stages
    for stage in range(stages + 1):
        by = names[: strata + stage]
        expected = frame.groupby(by, sort=True).ngroup().to_numpy() if by else np.zeros(n, dtype=int)
        np.testing.assert_array_equal(units.ancestor(stage)[code], expected)
        np.testing.assert_array_equal(units.stages[stage].rows, np.bincount(expected))
        domain = np.bincount(expected, inside, len(units.stages[stage]))
        np.testing.assert_array_equal(units.stages[stage].domain_rows, domain)
        assert (np.diff(units.stages[stage].parent) >= 0).all()


def survey():
    return pd.DataFrame(
        {
            "h": [1, 1, 1, 2, 2, 2],
            "psu": [1, 1, 2, 1, 2, 2],
            "areas": [5, 5, 5, 7, 7, 7],
            "w": 1.0,
        }
    )


def test_recurring_ids_are_nested_and_said_so():
    units, _, notes = coded(survey(), Design(weight="w", strata="h", clusters="psu"), 4)
    assert len(units.stages[1]) == 4
    assert "2 of 2 ids of psu recur in different strata" in notes[0]


def test_populations_are_read_by_unit():
    units, _, _ = coded(survey(), Design(weight="w", strata="h", clusters="psu", population="areas"), 4)
    np.testing.assert_array_equal(units.stages[0].population, [5, 7])
    assert units.stages[1].population is None


def test_a_missing_id_is_refused():
    frame = survey().astype({"psu": "Int64"})
    frame.loc[[1, 4], "psu"] = pd.NA
    with pytest.raises(DesignError, match=r'"psu" is missing in 2 row\(s\).*Every row needs'):
        coded(frame, Design(weight="w", strata="h", clusters="psu"), 4)


def test_a_population_that_differs_within_a_unit_is_refused():
    frame = survey()
    frame.loc[5, "areas"] = 8
    with pytest.raises(
        DesignError, match=r'"areas" differs within 1 unit\(s\): in stratum 2 it is both 7 and 8'
    ):
        coded(frame, Design(weight="w", strata="h", clusters="psu", population="areas"), 4)


def test_a_population_smaller_than_the_sample_is_refused():
    frame = survey().assign(areas=lambda f: f["areas"].where(f["h"] == 1, 1))
    with pytest.raises(DesignError, match=r"stratum 2 has 2 sampled units and a population of 1"):
        coded(frame, Design(weight="w", strata="h", clusters="psu", population="areas"), 4)


def test_large_integer_ids_stay_apart():
    frame = pd.DataFrame({"psu": pa.array([2**60, 2**60 + 1] * 2).to_pandas(), "w": 1.0})
    units, _, _ = coded(frame, Design(weight="w", clusters="psu"), 3)
    assert list(units.stages[1].labels) == [str(2**60), str(2**60 + 1)]


def test_the_order_of_rows_does_not_move_a_unit():
    frame = survey().assign(psu=["b", "b", "ä", "b", "Z", "Z"])
    design = Design(weight="w", strata="h", clusters="psu")
    units, code, _ = coded(frame, design, 2)
    # Text goes by code point: capitals, small letters, accented letters.
    assert units.stages[1].labels.tolist() == ["b", "ä", "Z", "b"]
    order = np.array([4, 0, 5, 2, 3, 1])
    again, moved, _ = coded(frame.iloc[order].reset_index(drop=True), design, 3)
    np.testing.assert_array_equal(moved, code[order])
    assert again.stages[1].labels.tolist() == units.stages[1].labels.tolist()


@pytest.mark.parametrize(("column", "code"), [("psu", 2), ("h", 2), ("areas", 7)])
def test_a_missing_code_in_a_design_column_is_a_missing_id(column, code):
    design = Design(weight="w", strata="h", clusters="psu", population="areas")
    rows = int((survey()[column] == code).sum())
    said = rf'"{column}" is missing in {rows} row\(s\), counting the code\(s\) {code} of data.missing'
    with pytest.raises(DesignError, match=said):
        coded(survey(), design, 4, missing={column: (code,)})
    units, _, _ = coded(survey(), design, 4, missing={column: (98,), "elsewhere": (code,)})
    assert len(units.stages[1]) == 4


def test_missing_codes_of_text_and_of_true_or_false_ids():
    design = Design(weight="w", clusters="psu")
    text = survey().assign(psu=["a", "DK", "b", "b", "DK", "a"])
    with pytest.raises(DesignError, match=r'"psu" is missing in 2 row\(s\)'):
        coded(text, design, 4, missing={"psu": ("DK",)})
    units, _, _ = coded(text.assign(psu=text["psu"] == "DK"), design, 4, missing={"psu": (9,)})
    assert units.stages[1].labels.tolist() == ["False", "True"]


def of_wide_dictionary(index, missing=()):
    """A table whose ids come from a dictionary of 500 and a missing value, as a row group's own may be."""
    every = pa.array([f"id {i:03d}" for i in range(500)] + [None])
    places = pa.array(np.array(index, dtype=np.int16), mask=np.isin(np.arange(len(index)), missing))
    return pa.table({"psu": pa.DictionaryArray.from_arrays(places, every), "w": np.ones(len(index))})


def test_ids_in_a_dictionary_larger_than_the_run():
    index = [3, 400, 3, 7, 400, 0]
    design = Design(weight="w", clusters="psu")
    units, code, _ = coded(of_wide_dictionary(index), design, 2)
    assert units.stages[1].labels.tolist() == ["id 000", "id 003", "id 007", "id 400"]
    np.testing.assert_array_equal(code, [1, 3, 1, 2, 3, 0])
    collector = UnitCollector(design)
    for _, table in open_extract(of_wide_dictionary(index)).read(["psu"], 2):
        collector.add(table, np.ones(2, dtype=bool))
    # Only ids that occur are held, not the dictionary again with every run.
    assert sum(map(len, collector.found["psu"])) <= len(index)


@pytest.mark.parametrize(("index", "missing"), [([3, 400, 500, 7], []), ([3, 400, 3, 7], [2])])
@pytest.mark.parametrize("size", [2, 4])
def test_a_missing_id_of_a_dictionary_is_refused_wherever_it_is_kept(index, missing, size):
    with pytest.raises(DesignError, match=r'"psu" is missing in 1 row\(s\)'):
        coded(of_wide_dictionary(index, missing), Design(weight="w", clusters="psu"), size)


def test_wide_decimal_ids_stay_apart():
    ids = pa.array([Decimal(2**60 + i) for i in (0, 1, 2, 1)], pa.decimal128(38, 0))
    units, code, _ = coded(pa.table({"psu": ids, "w": np.ones(4)}), Design(weight="w", clusters="psu"), 3)
    assert units.stages[1].labels.tolist() == [str(2**60 + i) for i in range(3)]
    np.testing.assert_array_equal(code, [0, 1, 2, 1])


def test_ids_that_have_lost_their_digits_are_refused():
    frame = survey().assign(psu=np.array([2.0**60, 2.0**60 + 1, 1, 2, 3, 4]))
    with pytest.raises(DesignError, match=r'"psu" holds ids as double.*1152921504606846976.*may have become'):
        coded(frame, Design(weight="w", clusters="psu"), 4)
    units, _, _ = coded(survey().assign(psu=2.0**53 - 1), Design(weight="w", clusters="psu"), 4)
    assert units.stages[1].labels.tolist() == [str(2**53 - 1)]


def test_what_cannot_be_an_id_is_refused():
    table = pa.table({"psu": [[1], [2]], "w": [1.0, 1.0]})
    with pytest.raises(DesignError, match=r'"psu" is a list<.*cannot be an id.*Derive'):
        coded(table, Design(weight="w", clusters="psu"), 4)


def test_an_infinite_population_is_refused_in_its_own_words():
    frame = survey().assign(areas=lambda f: f["areas"].where(f["h"] == 1, np.inf))
    with pytest.raises(DesignError, match=r'"areas" is infinite in 1 unit\(s\), first in stratum 2'):
        coded(frame, Design(weight="w", strata="h", clusters="psu", population="areas"), 4)


def test_lower_ids_that_recur_are_nested_and_said_so():
    frame = survey().assign(psu=lambda f: f["psu"] + 10 * f["h"], hh=[1, 2, 1, 1, 3, 3])
    units, _, notes = coded(frame, Design(weight="w", strata="h", clusters=["psu", "hh"]), 4)
    assert len(units.stages[2]) == 5
    assert notes == (
        "1 of 3 ids of hh recur in different units of psu: they are taken as different units, nested within them.",
    )
