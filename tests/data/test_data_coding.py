import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from steelyard.data.coding import UnitCollector
from steelyard.data.source import open_extract
from steelyard.errors import DesignError
from steelyard.plan import Design


def coded(frame, design, size, inside=None):
    extract = open_extract(frame)
    columns = [*design.strata, *design.clusters, *design.population] or [frame.columns[0]]
    inside = np.ones(len(frame), dtype=bool) if inside is None else inside
    collector = UnitCollector(design)
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
)
def test_codes_are_those_of_a_grouping_in_sorted_order(seed, size, kind, strata, stages):
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
