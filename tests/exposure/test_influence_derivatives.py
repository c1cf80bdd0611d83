"""The influence of every estimator against a numerical derivative: perturb one row's weight, estimate again."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from made import ColumnsOfWeights, made_rows, survey_sample
from steelyard.balance.columns import TermColumns
from steelyard.balance.conditions import ConditionsKernel, conditions_of, has_conditions
from steelyard.data.passes import Engine
from steelyard.estimate.estimates import Estimates
from steelyard.exposure.group_means import group_means
from steelyard.exposure.influence import joint_influence
from steelyard.exposure.one_pass import sums_in_one_pass
from steelyard.exposure.propensity import balancing, coefficients, fit_propensity
from steelyard.outcome.effects import effects
from steelyard.plan import Exposure, Outcome

STEP = 1e-4
ENGINE = Engine()
X, A, S, Y, UNIT, _ = survey_sample(11, n=160)
PROBED = np.arange(0, 160, 7)
S[14] = 0.0  # a row without weight has no influence on anything


def perturbed():
    """The full sample, then each probed row's weight up and down by a small share."""
    columns = np.repeat(S[:, None], 1 + 2 * len(PROBED), axis=1)
    for k, i in enumerate(PROBED):
        columns[i, 1 + 2 * k] *= 1 + STEP
        columns[i, 2 + 2 * k] *= 1 - STEP
    return ColumnsOfWeights(columns)


def influence_of(estimates: Estimates, made, rows):
    joint = joint_influence([estimates], made, ENGINE, rows.blocks)
    return np.concatenate([joint(block) for block in rows.blocks])


def check(estimates: Estimates, made, rows, rtol=1e-5):
    """The derivative of each estimate in a row's multiplier is its weight times its influence."""
    influence = influence_of(estimates, made, rows)
    moved = (estimates.values[:, 1::2] - estimates.values[:, 2::2]) / (2 * STEP)
    expected = (S[:, None] * influence)[PROBED].T
    scale = np.abs(expected).max(axis=1, keepdims=True)
    np.testing.assert_allclose(moved / scale, expected / scale, atol=rtol)
    # Estimates are functions of proportions: all weights together move nothing.
    assert np.abs((S[:, None] * influence).sum(axis=0)).max() < 1e-6 * np.abs(S[:, None] * influence).sum()


PLANS = {
    "ATE": Exposure(formula="", estimand="ATE"),
    "ATT": Exposure(formula="", estimand="ATT"),
    "ATC": Exposure(formula="", estimand="ATC"),
    "ATO": Exposure(formula="", estimand="ATO"),
    "ATE probit": Exposure(formula="", estimand="ATE", link="probit"),
    "ATT probit": Exposure(formula="", estimand="ATT", link="probit"),
    "ATO probit": Exposure(formula="", estimand="ATO", link="probit"),
    "ATE, unweighted fit": Exposure(formula="", estimand="ATE", weighted=False),
    "ATE stabilized": Exposure(formula="", estimand="ATE", stabilize=True),
    "ATT stabilized": Exposure(formula="", estimand="ATT", stabilize=True),
    "ATC stabilized": Exposure(formula="", estimand="ATC", stabilize=True, weighted=False),
    "ATE, range": Exposure(formula="", estimand="ATE", propensity_range=(0.2, 0.8)),
    "ATE, cap": Exposure(formula="", estimand="ATE", cap_quantile=0.9),
    "ATE, all": Exposure(
        formula="", estimand="ATE", stabilize=True, cap_quantile=0.9, propensity_range=(0.15, 0.9)
    ),
}
OUTCOMES = (
    Outcome(name="number"),
    Outcome(name="binary", family="binomial", measure="odds-ratio"),
    Outcome(name="count", family="poisson", measure="ratio"),
    Outcome(name="number", covariates="x"),
    Outcome(name="binary", family="binomial", measure="odds-ratio", covariates="x"),
    Outcome(name="count", family="poisson", measure="ratio", covariates="x"),
    Outcome(name="count", family="gaussian", measure="ratio", covariates="x"),
)
PLACES = (0, 1, 2, 0, 1, 2, 2)


@pytest.fixture(params=PLANS, ids=list(PLANS))
def balanced(request):
    plan = PLANS[request.param]
    used = {k: [0, 1, 3] for k in range(3, 7)}
    rows = made_rows(X, A, S, Y[:, PLACES], covariates=used, unit=UNIT)
    sampling = perturbed()
    fit = fit_propensity(rows, plan, sampling, ENGINE)
    made = balancing(rows, plan, fit, sampling, ENGINE)
    if made.cap is not None:
        # Linearization takes the cap as given; let the perturbed columns do the same, and keep the row whose
        # weight is the cap off the kink.
        made = replace(made, cap=np.full_like(made.cap, 0.999 * made.cap[0]))
        assert sum(made.rows(b).capped[:, 0].sum() for b in rows.blocks) > 5
    return rows, fit, made


def test_propensity_coefficients(balanced):
    rows, _, made = balanced
    check(coefficients(made), made, rows)


@pytest.mark.parametrize("weighing", ["sampling", "combined"])
def test_differences_of_terms(balanced, weighing):
    rows, fit, made = balanced
    columns = TermColumns(rows.terms)
    differences = group_means(columns.labels, columns, weighing, made, ENGINE, rows.blocks).differences()
    if weighing == "combined" and made.estimand == "ATO" and fit.regression.likelihood.link == "logit":
        influence = influence_of(differences, made, rows)
        np.testing.assert_allclose(differences.values, 0, atol=1e-9)
        np.testing.assert_allclose(S[:, None] * influence, 0, atol=1e-9)
    else:
        check(differences, made, rows)


def test_effects_of_every_family_and_measure(balanced):
    rows, _, made = balanced
    for estimates in effects(rows, OUTCOMES, made, ENGINE).estimates:
        check(estimates, made, rows)


def test_moment_conditions(balanced):
    rows, _, made = balanced
    if not has_conditions(made):
        assert made.estimand == "ATO"
        return
    sums = sums_in_one_pass("conditions", {"c": ConditionsKernel()}, made, ENGINE, rows.blocks)
    conditions = conditions_of(made, sums["c"])
    influence = influence_of(conditions, made, rows)
    moved = (conditions.values[:, 1::2] - conditions.values[:, 2::2]) / (2 * STEP)
    expected = (S[:, None] * influence)[PROBED].T
    scale = np.abs(expected).max(axis=1, keepdims=True)
    np.testing.assert_allclose(moved / scale, expected / scale, atol=1e-5)


def test_known_propensity_leaves_the_estimates_and_drops_its_term(balanced):
    rows, _, made = balanced
    found = effects(rows, OUTCOMES, made, ENGINE)
    for estimated in found.estimates:
        known = estimated.with_weights_known()
        assert np.array_equal(estimated.values, known.values)
        u, v = influence_of(estimated, made, rows), influence_of(known, made, rows)
        assert np.abs(u - v).max() > 1e-6 * np.abs(u).max()
