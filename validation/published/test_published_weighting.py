"""The propensity side against published figures and exact results. Sources stand beside the checks."""

from __future__ import annotations

import causaldata
import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm
import statsmodels.formula.api as smf

from steelyard.plan import Balance, Design, Exposure, Outcome, Variance
from steelyard.study import Study

pytestmark = pytest.mark.filterwarnings("ignore::steelyard.errors.SteelyardWarning")

# Hernán & Robins, Causal Inference: What If, chapter 12: quitting smoking and weight gain, NHEFS.
NHEFS = (
    "qsmk ~ sex + race + age + I(age**2) + C(education) + smokeintensity + I(smokeintensity**2) + smokeyrs "
    "+ I(smokeyrs**2) + C(exercise) + C(active) + wt71 + I(wt71**2)"
)


@pytest.fixture(scope="module")
def nhefs() -> pd.DataFrame:
    frame = causaldata.nhefs_complete.load_pandas().data
    for name in ("sex", "race", "education", "exercise", "active"):
        frame[name] = frame[name].astype(str)
    return frame.assign(one=1.0)


def study(**changes) -> Study:
    given = {
        "design": Design(weight="one"),
        "exposure": Exposure(formula=NHEFS),
        "outcome": (Outcome(name="wt82_71"),),
    }
    return Study(**(given | changes))


def weights_of(answer) -> pd.DataFrame:
    return pd.concat([batch.to_pandas() for batch in answer.weights()], ignore_index=True)


def test_nhefs_weights_and_effect(nhefs):
    answer = study().run(nhefs)
    weight = weights_of(answer)["combined_weight"]
    # Chapter 12, section 12.2: mean 2.00, range 1.05 to 16.70; effect 3.4 kg, 95% interval 2.4 to 4.5.
    assert round(weight.mean(), 2) == 2.00
    assert (round(weight.min(), 2), round(weight.max(), 2)) == (1.05, 16.70)
    row = answer.effects.table.iloc[0]
    assert round(row["estimate"], 1) == 3.4
    assert row["estimate"] == pytest.approx(3.4405, abs=5e-5)


def test_nhefs_interval_with_the_weights_held_fixed(nhefs):
    # The book's interval comes from a robust variance with the weights held fixed: standard error 0.525.
    answer = study(variance=Variance(propensity="known")).run(nhefs)
    row = answer.effects.table.iloc[0]
    n = len(nhefs)
    assert int(1000 * row["std_error"] / np.sqrt(n / (n - 1))) == 525
    assert (round(row["ci_low"], 1), round(row["ci_high"], 1)) == (2.4, 4.5)
    # statsmodels' HC0 of the weighted regression, times n / (n - 1), exactly.
    w = weights_of(answer)["combined_weight"].to_numpy()
    fit = sm.WLS(nhefs["wt82_71"], sm.add_constant(nhefs["qsmk"]), weights=w).fit(cov_type="HC0")
    assert row["std_error"] == pytest.approx(fit.bse["qsmk"] * np.sqrt(n / (n - 1)), rel=1e-8)


def test_nhefs_stabilized_weights(nhefs):
    answer = study(exposure=Exposure(formula=NHEFS, stabilize=True)).run(nhefs)
    weight = weights_of(answer)["combined_weight"]
    # Section 12.3: mean 1.00, range 0.33 to 4.30; the effect does not move.
    assert round(weight.mean(), 2) == 1.00
    assert (round(weight.min(), 2), round(weight.max(), 2)) == (0.33, 4.30)
    plain = study().run(nhefs)
    assert answer.effects.params.iloc[0] == pytest.approx(plain.effects.params.iloc[0], rel=1e-12)
    assert answer.effects.bse.iloc[0] == pytest.approx(plain.effects.bse.iloc[0], rel=1e-9)


def test_nhefs_propensity_is_statsmodels_logit(nhefs):
    answer = study().run(nhefs)
    formula = NHEFS.replace("sex", "C(sex)").replace("race", "C(race)")
    oracle = smf.logit(formula, nhefs.assign(qsmk=nhefs["qsmk"].astype(float))).fit(disp=0, tol=1e-12)
    ours = answer.propensity.params
    np.testing.assert_allclose(sorted(ours), sorted(oracle.params), rtol=1e-6)


def test_lalonde_difference_of_means():
    # LaLonde (1986); Dehejia & Wahba (1999): the randomised trial, 445 men: 1,794 (SE 633; robust 671).
    frame = causaldata.nsw_mixtape.load_pandas().data.assign(one=1.0)
    answer = study(
        exposure=Exposure(formula="treat ~ age"),
        outcome=(Outcome(name="re78"),),
        balance=Balance(columns="re78"),
    ).run(frame)
    row = answer.balance.table.set_index("term").loc["re78"]
    assert round(row["mean_difference_before"]) == 1794
    assert round(row["se_before"]) == pytest.approx(671, abs=1.5)
    hc0 = sm.OLS(frame["re78"], sm.add_constant(frame["treat"])).fit(cov_type="HC0").bse["treat"]
    assert row["se_before"] == pytest.approx(hc0 * np.sqrt(445 / 444), rel=1e-10)


def test_overlap_weights_balance_every_term_exactly(nhefs):
    # Li, Morgan & Zaslavsky (2018), theorem 3.
    answer = study(exposure=Exposure(formula=NHEFS, estimand="ATO")).run(nhefs)
    table = answer.balance.table
    assert table["smd_before"].abs().max() > 0.2
    np.testing.assert_allclose(table["smd_after"], 0, atol=1e-9)
    assert table["p_after"].isna().all()
    assert answer.balance.over_identification is None


@pytest.mark.parametrize("estimand", ["ATE", "ATT", "ATC", "ATO"])
def test_weighted_regression_on_exposure_alone_is_the_difference_of_means(nhefs, estimand):
    # Common practice: both are the same number, to rounding.
    answer = study(exposure=Exposure(formula=NHEFS, estimand=estimand)).run(nhefs)
    w = weights_of(answer)["combined_weight"].to_numpy()
    fit = sm.WLS(nhefs["wt82_71"], sm.add_constant(nhefs["qsmk"]), weights=w).fit()
    assert answer.effects.params.iloc[0] == pytest.approx(fit.params["qsmk"], rel=1e-9)
