"""The plan written as TOML is the plan, and the record is JSON."""

from __future__ import annotations

import hashlib
import json
import tomllib

import numpy as np
import pytest
from report_answers import made_plan

from steelyard.plan import Data, Exposure, Outcome, Plan
from steelyard.report.record import plan_json, plan_toml, record_text

AWKWARD = 'a "quoted" \\ back\tslash\x7f\u2028 é 水'


@pytest.mark.parametrize(
    "plan",
    [
        made_plan(),
        made_plan(
            title=AWKWARD,
            data=Data(files=("a b.parquet", AWKWARD), missing={"odd name.é": ("x", 9, 1.5, True)}),
        ),
        made_plan(
            exposure=Exposure(
                formula="a ~ b\n + c\n", exposed="yes", reference="no", propensity_range=(0.1, 0.9)
            )
        ),
        made_plan(exposure=Exposure(formula='a ~ Q("b\nc")'), outcome=Outcome(name="y")),
    ],
)  # fmt: skip
def test_a_plan_read_back_from_its_toml_is_the_same_plan(plan):
    assert Plan(**tomllib.loads(plan_toml(plan))) == plan


def test_long_formulas_stay_readable():
    assert 'formula = """\npiped ~ urban + C(region)\n  + bs(wealth, df=4)"""' in plan_toml(made_plan())


def test_the_json_of_the_plan_is_what_the_digest_of_a_study_is_taken_of():
    plan = made_plan()
    text = plan_json(plan)
    assert json.loads(text)["exposure"]["cap_quantile"] == 0.99
    assert list(json.loads(text)) == sorted(json.loads(text))
    assert (
        hashlib.sha256(text.encode()).hexdigest()
        == hashlib.sha256(plan_json(made_plan()).encode()).hexdigest()
    )


def test_the_record_takes_numpy_numbers_and_the_released_warnings():
    text = record_text(
        {"rows": np.int64(3), "seconds": np.float64(0.5), "warnings": ["7 rows"]}, ("few rows",)
    )
    assert json.loads(text) == {"rows": 3, "seconds": 0.5, "warnings": ["few rows"]}
    assert text.endswith("\n")
