from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from steelyard.plan import Report
from steelyard.report.disclosure import HIDDEN_COUNT, hide, shown


def with_tables(answer, minimum=10, **tables):
    plan = replace(answer.plan, report=Report(minimum_count=minimum))
    balance = replace(answer.balance, table=tables["balance"]) if "balance" in tables else answer.balance
    overlap = replace(
        answer.overlap, **{k: v for k, v in tables.items() if k in {"histogram", "groups", "extremes"}}
    )
    return replace(answer, plan=plan, balance=balance, overlap=overlap)


def small_level(answer, term, level, rows):
    table = answer.balance.table.copy()
    table.loc[(table["term"] == term) & (table["level"] == level), "rows_exposed"] = rows
    return with_tables(answer, balance=table)


def test_counts_from_one_to_the_minimum_are_hidden_and_zero_is_not():
    assert [hide(n, 10) for n in (0, 1, 9, 10, 11)] == [0, HIDDEN_COUNT, HIDDEN_COUNT, 10, 11]


def test_a_small_level_is_blank_with_the_next_smallest_of_its_category(answer):
    table = shown(small_level(answer, "roof", "tile", 3)).balance.set_index(["term", "level"])
    blank = table["smd_after"].isna()
    roofs = blank.loc["roof"]
    assert roofs["tile"]
    assert roofs.sum() == 2
    counts = answer.balance.table[answer.balance.table["term"] == "roof"].set_index("level")
    others = counts[["rows_exposed", "rows_reference"]].min(axis=1).drop("tile")
    assert roofs[others.idxmin()]
    for column in ("mean_exposed_before", "mean_reference_after", "ks_before", "p_after"):
        assert table.loc[("roof", "tile"), column] != table.loc[("roof", "tile"), column]
    assert not blank.drop("roof").any()


def test_a_level_that_nearly_everybody_has_is_small_too(answer):
    rows = int(answer.overlap.groups.set_index("group").loc["exposed", "rows"]) - 4
    table = shown(small_level(answer, "residence", "town", rows)).balance.set_index(["term", "level"])
    assert table.loc["residence"]["smd_before"].isna().all()


def test_bars_of_few_rows_are_not_drawn_and_said_so(answer):
    histogram = answer.overlap.histogram.assign(exposed_rows=[4, *[50] * 19])
    tables = shown(with_tables(answer, histogram=histogram))
    assert np.isnan(tables.histogram["exposed_after"].iloc[0])
    assert any("not drawn" in text for text in tables.hidden)


def test_group_means_on_few_cases_are_hidden_but_the_effect_is_not(answer):
    table = answer.effects.table.copy()
    table.loc[table["outcome"] == "diarrhoea", "nonzero_exposed"] = 5
    answer.effects.table, kept = table, answer.effects.table
    try:
        tables = shown(answer)
    finally:
        answer.effects.table = kept
    row = tables.effects.set_index("outcome").loc["diarrhoea"]
    assert np.isnan(row["exposed"])
    assert np.isnan(row["reference"])
    assert np.isfinite(row["estimate"])


def test_a_small_group_hides_every_effect(answer):
    groups = answer.overlap.groups.assign(rows=[6, 5000])
    tables = shown(with_tables(answer, groups=groups))
    assert tables.effects[["estimate", "std_error", "ci_low", "p_value"]].isna().all(axis=None)
    assert tables.sensitivity["e_value"].isna().all()
    assert tables.groups["rows"].tolist() == [HIDDEN_COUNT, 5000]


def test_a_minimum_of_zero_hides_nothing(answer):
    tables = shown(with_tables(answer, minimum=0))
    assert not tables.hidden
    pd.testing.assert_frame_equal(tables.balance, answer.balance.table)


@pytest.mark.parametrize("minimum", [10, 200])
def test_no_small_count_is_left_anywhere(answer, minimum):
    tables = shown(with_tables(answer, minimum=minimum))
    for frame, columns in (
        (tables.groups, ["rows", "outside"]),
        (tables.extremes, ["exposed_rows", "reference_rows"]),
        (tables.histogram, ["exposed_rows", "reference_rows"]),
        (tables.exclusions, ["rows"]),
        (tables.missing, ["missing"]),
    ):
        values = frame[columns].to_numpy()
        assert not ((values > 0) & (values < minimum)).any()
