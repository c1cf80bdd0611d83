"""What leaves the house: small counts, means on small bases, and what would give them away."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from report_answers import EXPOSED, REFERENCE, REGIONS, made_answer, made_balance, with_groups

from steelyard.report.disclosure import COMPARED_CELLS, EFFECT_CELLS, release
from steelyard.report.page import report_html
from steelyard.report.suppression import is_hidden
from steelyard.report.write import csv_text


def with_balance(table, minimum=10):
    answer = made_answer(minimum)
    return replace(answer, balance=replace(answer.balance, table=table))


def rows_of(released, term):
    return released.balance[released.balance["term"] == term].set_index("level")


def test_nothing_is_hidden_where_nothing_is_small():
    answer = made_answer()
    released = release(answer)
    shown = answer.effects.table[released.effects.columns]
    pd.testing.assert_frame_equal(released.effects, shown)
    for name in ("facts", "weights", "exclusions", "strata", "missing", "groups", "extremes", "balance"):
        assert not getattr(released, name).map(is_hidden).to_numpy().any(), name
    numbers = released.balance.drop(columns=["term", "level"]).astype(float)
    expected = answer.balance.table[numbers.columns]
    pd.testing.assert_frame_equal(numbers, expected)


def test_a_level_with_few_exposed_rows_hides_its_mean_its_comparison_and_the_next_smallest_level():
    table = made_balance(((1500, 1700), (1200, 1500), (900, 1100), (895, 1000), (700, 700), (5, 300)))
    region = rows_of(release(with_balance(table)), "region")
    assert region.loc["capital", "mean_exposed_before"] == "under 10"
    assert region.loc["capital", "mean_exposed_after"] == "under 10"
    assert region.loc["isles", "mean_exposed_before"] == "hidden"
    assert isinstance(region.loc["capital", "mean_reference_before"], float)
    assert isinstance(region.loc["isles", "mean_reference_after"], float)
    for level in ("capital", "isles"):
        told = region.loc[level, list(COMPARED_CELLS)]
        assert all(is_hidden(v) for v in told if not (isinstance(v, float) and np.isnan(v)))
        assert is_hidden(region.loc[level, "smd_after"])
    assert not region.loc[["north", "south", "east", "west"]].map(is_hidden).to_numpy().any()


def test_several_tiny_levels_are_joined_by_more_until_they_hold_the_minimum():
    table = made_balance(((1800, 1700), (1700, 1500), (1680, 1100), (14, 1000), (3, 700), (2, 300)))
    region = rows_of(release(with_balance(table)), "region")
    assert [is_hidden(region.loc[name, "mean_exposed_before"]) for name in REGIONS] == [
        False, False, False, True, True, True
    ]  # fmt: skip


def test_a_level_that_nearly_everybody_has_is_hidden_as_well():
    table = made_balance()
    urban = table["term"] == "urban"
    table.loc[urban, "rows_exposed"] = EXPOSED - 4
    released = release(with_balance(table))
    assert rows_of(released, "urban").loc["", "mean_exposed_before"] == "under 10"


def test_a_number_that_is_nowhere_zero_is_no_share_and_stays():
    assert not rows_of(release(made_answer()), "number_3").map(is_hidden).to_numpy().any()


def test_of_an_interaction_with_a_hidden_row_every_row_is_hidden():
    table = made_balance()
    term = table["term"].where(table["term"] != "region", "region:urban")
    table = table.assign(term=term)
    table.loc[table["level"] == "isles", "rows_reference"] = 9
    released = rows_of(release(with_balance(table)), "region:urban")
    assert released["mean_reference_after"].map(is_hidden).all()
    assert released["smd_before"].map(is_hidden).all()


def test_a_group_under_the_minimum_hides_every_effect_and_comparison():
    answer = with_groups(made_answer(), 7)
    released = release(answer)
    assert released.groups_hidden
    assert released.effects[list(EFFECT_CELLS)].map(is_hidden).to_numpy().all()
    assert released.effects_known[list(EFFECT_CELLS)].map(is_hidden).to_numpy().all()
    assert released.sensitivity["e_value"].map(is_hidden).all()
    assert released.balance["smd_after"].map(is_hidden).all()
    assert released.balance["mean_exposed_before"].map(is_hidden).all()
    assert released.joint_after is None
    facts = released.facts.set_index("fact")["value"]
    assert facts["exposed rows"] == "under 10"
    assert facts["reference rows"] == "hidden"
    assert released.groups.set_index("group").loc["reference", "rows"] == "hidden"
    assert not len(released.histogram["reference"])
    page = report_html(answer, released)
    assert "A group is too small" in page
    assert "2.2216" not in csv_text(released.effects)
    assert "−2.22" not in page
    assert "2.13" not in page


def test_the_minimum_is_the_plan_s_and_zero_switches_hiding_off():
    table = made_balance(((1500, 1700), (1200, 1500), (900, 1100), (895, 1000), (699, 700), (6, 300)))
    assert is_hidden(rows_of(release(with_balance(table, 7)), "region").loc["capital", "smd_after"])
    assert not is_hidden(rows_of(release(with_balance(table, 6)), "region").loc["capital", "smd_after"])
    assert "under" not in csv_text(release(with_balance(table, 0)).balance)
    assert not release(with_groups(made_answer(0), 3)).groups_hidden


def test_few_rows_left_out_hide_the_extract_s_rows_instead_of_the_domain_s():
    answer = made_answer()
    facts = answer.checkup.facts.copy()
    facts.loc[facts["fact"] == "rows in the extract", "value"] = EXPOSED + REFERENCE + 4
    exclusions = pd.DataFrame({"reason": ["age missing"], "rows": [4], "share": [4 / 11_504]})
    released = release(replace(answer, checkup=replace(answer.checkup, facts=facts, exclusions=exclusions)))
    values = released.facts.set_index("fact")["value"]
    assert values["rows in the extract"] == "hidden"
    assert values["rows in the domain, complete"] == EXPOSED + REFERENCE
    assert list(released.exclusions["rows"]) == ["under 10"]
    assert set(released.weights["all_rows"]) == {"hidden"}


def test_missing_values_of_a_hidden_exclusion_are_hidden_beside_it():
    answer = made_answer()
    exclusions = answer.checkup.exclusions.assign(rows=[28_000, 4, 95])
    missing = answer.checkup.missing.assign(missing=[0, 4, 95])
    released = release(
        replace(answer, checkup=replace(answer.checkup, exclusions=exclusions, missing=missing))
    )
    assert list(released.exclusions["rows"]) == [28_000, "under 10", "hidden"]
    assert list(released.missing["missing"]) == [0, "under 10", "hidden"]
    assert list(released.missing["share_exposed"]) == [0.0, "under 10", "hidden"]


def test_shares_of_few_missing_rows_in_one_group_are_hidden():
    answer = made_answer()
    missing = answer.checkup.missing.assign(share_exposed=[0.0, 30 / EXPOSED, 3 / EXPOSED])
    released = release(replace(answer, checkup=replace(answer.checkup, missing=missing)))
    assert list(released.missing["share_exposed"])[2] == "hidden"
    assert list(released.missing["share_reference"])[2] == "hidden"
    assert list(released.missing["missing"]) == [0, 60, 110]


@pytest.mark.parametrize(
    ("below", "shown"),
    [((0, 24), (0, 24)), ((0, 4), (0, "under 10")), ((7, 30), ("under 10", 30)), ((18, 25), ("hidden", 25))],
)
def test_extreme_propensities_hide_small_counts_and_small_differences(below, shown):
    answer = made_answer()
    extremes = answer.overlap.extremes.assign(exposed_rows=[*below, 0, 0])
    released = release(replace(answer, overlap=replace(answer.overlap, extremes=extremes)))
    assert tuple(released.extremes["exposed_rows"][:2]) == shown


def test_few_rows_of_weight_zero_in_a_group_are_not_shown_by_a_difference():
    answer = made_answer()
    groups = answer.overlap.groups.assign(rows=[EXPOSED - 3, REFERENCE])
    released = release(replace(answer, overlap=replace(answer.overlap, groups=groups)))
    assert list(released.groups["rows"]) == ["hidden", REFERENCE]


def test_bins_of_the_propensity_are_joined_and_their_shares_kept():
    answer = made_answer()
    histogram = answer.overlap.histogram.copy()
    histogram.loc[0, "exposed_rows"] = 3
    histogram.loc[19, "exposed_rows"] = 0
    released = release(replace(answer, overlap=replace(answer.overlap, histogram=histogram)))
    bins = released.histogram["exposed"]
    assert bins["low"].iloc[0] == 0
    assert bins["high"].iloc[0] == pytest.approx(0.1)
    assert bins["high"].iloc[-1] == pytest.approx(0.95)
    assert bins["before"].iloc[0] == pytest.approx(histogram["exposed_before"][:2].sum())


def test_trimming_hides_small_counts_in_the_list_and_in_the_sentence():
    answer = made_answer()
    overlap = replace(
        answer.overlap,
        trimmed={"rows capped": 4},
        target="Combined weights above their 0.99 quantile are cut to it (4 rows): less variance.",
    )
    released = release(replace(answer, overlap=overlap))
    assert released.trimmed == {"rows capped": "under 10"}
    assert released.target.endswith("(fewer than 10 rows): less variance.")
    assert "0.99" in released.target


@pytest.mark.parametrize(("column", "rows"), [("nonzero_exposed", 6), ("nonzero_reference", REFERENCE - 6)])
def test_an_outcome_that_few_have_or_lack_hides_both_means_and_not_the_effect(column, rows):
    answer = made_answer()
    answer.effects.table.loc[1, column] = rows
    effects = release(answer).effects
    assert effects.loc[1, ["exposed", "reference"]].tolist() == ["under 10", "under 10"]
    assert np.isfinite(effects.loc[1, "estimate"])
    assert np.isfinite(effects.loc[0, "exposed"])
    assert "under 10" in report_html(answer)
