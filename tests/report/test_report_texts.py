"""Messages of the house as they may leave it: made by the floors that write them, not copied here."""

from __future__ import annotations

import re

import numpy as np
import pandas as pd
import pytest

from steelyard.plan import Design, Exposure, Outcome
from steelyard.report.released_texts import TextRules
from steelyard.results.overlap import target_population
from steelyard.study import Study

RULES = TextRules(10, {"exposed": 600, "reference": 500}, False, ("region: isles",))
SMALL = TextRules(10, {"exposed": 7, "reference": 500}, True, ())


def checkup_of(frame, formula="a ~ x"):
    study = Study(
        design=Design(weight="w", strata="h", clusters="psu", single_psu="recentre"),
        exposure=Exposure(formula=formula),
        outcome=(Outcome(name="y"),),
    )
    return study.check(frame)


def survey(n=400):
    rng = np.random.default_rng(0)
    frame = pd.DataFrame(
        {"h": np.arange(n) % 4, "psu": np.arange(n) // 20, "w": 1.0, "x": rng.normal(size=n)}
    )
    frame["a"] = (rng.random(n) < 0.5).astype(int)
    frame["y"] = rng.normal(size=n)
    return frame


def findings(frame):
    return [finding.message for finding in checkup_of(frame).findings]


def only(messages, word):
    (message,) = [m for m in messages if word in m]
    return message


def test_rows_of_weight_zero_are_not_counted_when_few():
    frame = survey()
    frame.loc[:3, "w"] = 0
    message = only(findings(frame), "sampling weight 0")
    assert message.startswith("4 row(s)")
    assert RULES.released(message).startswith("fewer than 10 row(s) have sampling weight 0")
    frame.loc[:30, "w"] = 0
    message = only(findings(frame), "sampling weight 0")
    assert RULES.released(message) == message


def test_a_small_group_is_not_counted_in_the_finding_about_it():
    frame = survey()
    frame["a"] = 0
    frame.loc[:6, "a"] = 1
    message = only(findings(frame), "There are only")
    assert "7 exposed rows" in message
    assert not re.search(r"\b7\b", SMALL.released(message))


def test_strata_without_a_group_are_counted_but_not_named():
    frame = survey()
    frame.loc[frame["h"] == 2, "a"] = 1
    message = only(findings(frame), "of the domain have no reference rows")
    assert message.endswith(": 2.")
    assert RULES.released(message) == "1 stratum(s) of the domain have no reference rows (not named here)."


def test_few_rows_left_out_are_not_counted():
    frame = survey(24)
    frame.loc[:6, "x"] = np.nan
    message = only(findings(frame), "are left out")
    assert message.startswith("7 of the 24 rows")
    assert not re.search(r"\b7\b|29", RULES.released(message))


def test_shares_that_stand_for_few_rows_are_put_in_words():
    frame = survey(120)
    frame.loc[np.flatnonzero(frame["a"] == 1)[:7], "x"] = np.nan
    rules = TextRules(
        10, {"exposed": int(frame["a"].sum()) - 7, "reference": int((frame["a"] == 0).sum())}, False, ()
    )
    for message in findings(frame):
        if "missing in" in message:
            told = rules.released(message)
            assert "a small share of the" in told
            assert not re.search(r"\d%", told.split("(common practice")[0].replace("0.0%", ""))


def test_overlap_warnings_hide_the_share_of_a_few_rows():
    text = "1.3% of the exposed rows have a propensity outside the range of the other group: nobody there."
    assert RULES.released(text).startswith("A small share of the exposed rows have a propensity outside")
    text = text.replace("1.3%", "5.4%")
    assert RULES.released(text) == text


def test_effective_sizes_of_a_hidden_group_are_not_said():
    text = "Under the combined weights the exposed count for 6.3 rows: a very small base."
    assert "6.3" not in SMALL.released(text)
    assert RULES.released(text) == text


def test_the_difference_of_a_hidden_term_is_not_said():
    text = "1 of 42 terms still differ by more than 0.1 standard deviations, most of all region: isles (-0.18). Add."
    assert RULES.released(text).endswith("most of all region: isles (hidden). Add.")


@pytest.mark.parametrize("count", [4, 40, 4000])
def test_the_target_population_counts_trimmed_rows_only_when_many(count):
    exposure = Exposure(formula="a ~ x", propensity_range=(0.05, 0.95), cap_quantile=0.99)
    text = target_population(exposure, {"rows outside the propensity range": count, "rows capped": count})
    told = RULES.released(text)
    assert (told == text) == (count >= 10)
    assert ("fewer than 10 rows" in told) == (count < 10)


def test_nothing_changes_without_a_minimum():
    rules = TextRules(0, {"exposed": 7, "reference": 5}, False, ("x",))
    assert rules.released("There are only 7 exposed rows.") == "There are only 7 exposed rows."


def test_a_replicate_that_separates_does_not_tell_how_few_rows_it_settles():
    message = "replicate 6 (together, x tell the two groups apart without error for 7 of 500 rows)."
    assert RULES.released(message) == message.replace("7 of 500 rows", "fewer than 10 of 500 rows")
    many = message.replace("7 of", "70 of")
    assert RULES.released(many) == many
