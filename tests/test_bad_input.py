"""Bad input from end to end: each is refused or counted, and the message names what, where, how many and the mend."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from steelyard.errors import (
    DesignError,
    EstimationError,
    ExtractError,
    FormulaError,
    OverlapError,
    PlanError,
    SeparationError,
    SteelyardError,
    SteelyardWarning,
)
from steelyard.plan import Data, Design, Exposure, Outcome
from steelyard.study import Study

pytestmark = pytest.mark.filterwarnings("ignore::steelyard.errors.SteelyardWarning")


def extract(n=400, seed=0):
    rng = np.random.default_rng(seed)
    x = rng.normal(size=n)
    region = rng.choice(["east", "north", "west"], n)
    a = (rng.random(n) < 1 / (1 + np.exp(-x))).astype(int)
    return pd.DataFrame(
        {
            "w": rng.exponential(size=n) + 0.5,
            "h": np.arange(n) * 4 // n,
            "psu": np.arange(n) * 20 // n,
            "x": x,
            "region": region,
            "a": a,
            "y": x + a + rng.normal(size=n),
            "b": (rng.random(n) < 0.4).astype(int),
            "day": pd.Timestamp("2024-01-01"),
        }
    )


def study(**changes):
    given = {
        "design": Design(weight="w", strata="h", clusters="psu"),
        "exposure": Exposure(formula="a ~ x + region"),
        "outcome": (Outcome(name="y"),),
    }
    return Study(**(given | changes))


def refused(frame, error, *words, **changes):
    with pytest.raises(SteelyardError) as caught:
        study(**changes).run(frame)
    assert type(caught.value) is error, caught.value
    text = str(caught.value)
    for word in words:
        assert word in text, text
    assert caught.value.mend
    return text


def test_weights_that_are_missing_negative_or_infinite():
    for bad in (np.nan, -1.0, np.inf):
        frame = extract()
        frame.loc[[3, 7], "w"] = bad
        refused(frame, DesignError, '"w"', "2 row(s)", "3, 7")


def test_all_weights_zero():
    refused(extract().assign(w=0.0), ExtractError, "All 400 rows", "weight 0")


def test_weight_zero_stays_in_the_design_and_counts_for_nothing():
    frame = extract()
    frame.loc[frame.index % 9 == 0, "w"] = 0.0
    answer = study().run(frame)
    facts = answer.checkup.facts.set_index("fact")["value"]
    assert facts["rows with sampling weight 0"] == 45
    kept = study().run(frame[frame["w"] > 0])
    assert answer.effects.params.iloc[0] == pytest.approx(kept.effects.params.iloc[0], rel=1e-10)


def test_design_columns_that_are_not_there_or_not_numbers():
    refused(extract(), ExtractError, '"wt"', "Did you mean", design=Design(weight="wt"))
    refused(extract(), PlanError, '"region"', "numbers", design=Design(weight="region"))


def test_a_missing_design_id():
    frame = extract().astype({"psu": "Int64"})
    frame.loc[5, "psu"] = pd.NA
    refused(frame, DesignError, '"psu" is missing in 1 row(s)')


def test_missing_values_are_counted_by_reason():
    frame = extract()
    frame.loc[:9, "x"] = np.nan
    frame.loc[5:19, "y"] = np.nan
    frame["a"] = frame["a"].astype("Int64")
    frame.loc[395:, "a"] = pd.NA
    answer = study(data=Data(domain="x > -5")).run(frame)
    counted = answer.checkup.exclusions.set_index("reason")["rows"].to_dict()
    assert counted == {"domain unknown: x missing": 10, "exposure a missing": 5, "y missing": 10}
    assert (answer.effects.table["rows"] == 375).all()


def test_one_psu_in_a_stratum():
    frame = extract().assign(h=lambda f: np.where(f["psu"] == 19, 9, f["h"]))
    refused(frame, DesignError, "1 of 5 strata have one PSU", "9 (20 rows)", "recentre")


def test_psu_ids_that_recur_are_nested_and_said_so():
    frame = extract().assign(psu=lambda f: f["psu"] % 5)
    found = study().check(frame).findings
    assert any("5 of 5 ids of psu recur in different strata" in finding.message for finding in found)


def test_exposures_that_cannot_be_compared():
    frame = extract()
    refused(frame.assign(a=1), PlanError, '"a" has 400 exposed and 0 reference', "1 (400 rows)")
    refused(frame.assign(a=np.arange(400) % 3), PlanError, "not 0 or 1", "2 (133 rows)")
    text = frame.assign(a=np.where(frame["a"] == 1, "yes", "no"))
    refused(text, PlanError, "is text", "yes (", "exposure.exposed")
    three = text.assign(a=np.where(frame.index % 7 == 0, "moved", text["a"]))
    refused(
        three, PlanError, "3 values", "exposure.reference", exposure=Exposure(formula="a ~ x", exposed="yes")
    )
    refused(text, PlanError, "0 exposed", exposure=Exposure(formula="a ~ x", exposed="Yes", reference="no"))


def test_a_text_exposure_with_its_levels_named_is_the_same_study():
    frame = extract()
    text = frame.assign(a=np.where(frame["a"] == 1, "yes", "no"))
    one = study().run(frame)
    for exposure in (
        Exposure(formula="a ~ x + region", exposed="yes", reference="no"),
        Exposure(formula="a ~ x + region", exposed="yes"),
    ):
        two = study(exposure=exposure).run(text)
        assert np.array_equal(one.effects.params, two.effects.params)
        assert list(two.overlap.groups["level"]) == ["yes", "no"]
    moved = pd.concat([text, text.head(30).assign(a="moved")], ignore_index=True)
    answer = study(exposure=Exposure(formula="a ~ x + region", exposed="yes", reference="no")).run(moved)
    assert answer.checkup.exclusions["reason"].tolist() == ["exposure a at neither level"]
    assert answer.effects.params.iloc[0] == pytest.approx(one.effects.params.iloc[0], rel=1e-10)


def test_outcomes_that_do_not_fit():
    frame = extract()
    refused(frame, PlanError, '"region" holds text', outcome=Outcome(name="region"))
    refused(
        frame.assign(b=9), PlanError, "400 row(s)", "binomial", outcome=Outcome(name="b", family="binomial")
    )
    refused(frame, PlanError, "poisson", outcome=Outcome(name="y", family="poisson"))
    refused(
        frame.assign(y=-1.0),
        EstimationError,
        "ratio",
        outcome=Outcome(name="y", family="gaussian", measure="ratio"),
    )
    refused(frame, FormulaError, '"day"', exposure=Exposure(formula="a ~ x + day"))


def test_a_constant_or_redundant_covariate_is_left_out_and_named():
    frame = extract().assign(flat=3.0, twice=lambda f: 2 * f["x"])
    with pytest.warns(SteelyardWarning, match="flat is 3 in every row"):
        answer = study(exposure=Exposure(formula="a ~ x + region + flat + twice")).run(frame)
    assert any("left out: flat, twice" in warning for warning in answer.warnings)
    plain = study().run(frame)
    assert answer.effects.params.iloc[0] == pytest.approx(plain.effects.params.iloc[0], rel=1e-9)
    assert answer.effects.bse.iloc[0] == pytest.approx(plain.effects.bse.iloc[0], rel=1e-9)


def test_a_covariate_that_separates():
    frame = extract()
    north = frame["region"] == "north"
    text = refused(frame.assign(a=frame["a"].where(~north, 1)), SeparationError, "region[T.north]")
    assert f"all {north.sum()} rows with it are exposed" in text
    refused(frame.assign(a=(frame["x"] > 0).astype(int)), SeparationError, "x (exposed", "reference")


def test_no_overlap_left_after_trimming():
    exposure = Exposure(formula="a ~ x + region", propensity_range=(0.0, 1e-6))
    refused(extract(), OverlapError, "No exposed row", "Widen", exposure=exposure)


def test_a_covariate_that_is_the_exposure():
    refused(extract(), FormulaError, "both sides", exposure=Exposure(formula="a ~ x + a"))
    frame = extract().assign(same=lambda f: 1 - f["a"])
    refused(frame, PlanError, "determine the exposure", outcome=Outcome(name="y", covariates="x + same"))
    refused(frame, PlanError, "intercept", outcome=Outcome(name="y", covariates="x - 1"))


def test_formulas_with_values_that_are_not_finite():
    text = refused(
        extract(), FormulaError, "log(x)", "not a finite number", exposure=Exposure(formula="a ~ log(x)")
    )
    assert "first in row(s)" in text


def test_empty_domains_and_unknown_columns():
    refused(
        extract(), ExtractError, "No row is left", "outside the domain (400 rows)", data=Data(domain="x > 99")
    )
    refused(extract(), FormulaError, '"xx"', data=Data(domain="xx > 1"))
    refused(extract(), PlanError, "'nine'", data=Data(missing={"x": ("nine",)}))
    refused(extract(), ExtractError, '"xy"', data=Data(missing={"xy": (9,)}))


def test_types_that_the_plan_does_not_have():
    with pytest.raises(PlanError, match="no files"):
        study().run()
    with pytest.raises(ExtractError, match="cannot be a dict"):
        study().run({"a": 1})
