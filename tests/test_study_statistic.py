"""Any statistic under a study's replicates: against the effects themselves, closed forms and brute force."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from steelyard.errors import EstimationError, ExtractError, PlanError
from steelyard.plan import Data, Outcome, Variance
from test_study_brute_force import extract, study

pytestmark = pytest.mark.filterwarnings("ignore::steelyard.errors.SteelyardWarning")

FRAME = extract(strata=6, areas=2, households=6)
FAY = Variance(method="fay", fay=0.4)


def weighted(values, weights):
    return float(values @ weights / weights.sum())


def difference(frame, weights):
    exposed = frame["is_exposed"].to_numpy()
    return {
        name: weighted(frame[name].to_numpy()[exposed], weights[exposed])
        - weighted(frame[name].to_numpy()[~exposed], weights[~exposed])
        for name in ("y", "b")
    }


def test_a_difference_of_means_has_the_standard_error_of_the_effect():
    plan = study(variance=FAY)
    answer, found = plan.run(FRAME), plan.statistic(difference, FRAME)
    np.testing.assert_allclose(found.params, answer.effects.params, rtol=1e-12)
    np.testing.assert_allclose(found.cov_params(), answer.effects.cov_params(), rtol=1e-9)
    assert list(found.params.index) == ["y", "b"]
    assert found.df_resid == answer.effects.df_resid


def test_the_propensity_may_be_held_and_the_domain_is_the_plans():
    plan = study(variance=Variance(method="jackknife", propensity="known"), data=Data(domain="x2 < 2"))
    answer, found = plan.run(FRAME), plan.statistic(difference, FRAME)
    np.testing.assert_allclose(found.cov_params(), answer.effects.cov_params(), rtol=1e-9)


def test_sampling_weights_give_a_statistic_without_the_exposure():
    # A mean under the sampling weights: the jackknife by hand over the twelve PSUs.
    found = study(variance=Variance(method="jackknife")).statistic(
        lambda frame, weights: weighted(frame["y"], weights), FRAME, weights="sampling"
    )
    w, y = FRAME["w"].to_numpy(), FRAME["y"].to_numpy()
    total = 0.0
    for h in range(6):
        for area in range(2):
            mine = (FRAME["h"] == h).to_numpy()
            without = np.where(mine, 2 * w, w)
            without[mine & (FRAME["area"] == area).to_numpy()] = 0
            total += (weighted(y, without) - weighted(y, w)) ** 2 / 2
    assert found.bse.iloc[0] == pytest.approx(np.sqrt(total), rel=1e-12)


def test_without_a_replicate_method_the_bootstrap_serves():
    plan = study(variance=Variance(replicates=30, seed=5))
    found = plan.statistic(difference, FRAME)
    same = study(variance=Variance(method="bootstrap", replicates=30, seed=5)).run(FRAME)
    np.testing.assert_allclose(found.cov_params(), same.effects.cov_params(), rtol=1e-9)


def test_other_columns_of_the_extract_come_when_asked_for():
    frame = FRAME.assign(extra=np.arange(len(FRAME)), label="north", area_name=FRAME["area"].astype(str))
    seen = {}

    def look(data, weights):
        seen.update(columns=set(data.columns), index=data.index.to_numpy(), extra=data["extra"].to_numpy())
        assert set(data["label"]) == {"north"}
        return weights.sum()

    study(variance=FAY, data=Data(domain="x2 > 0")).statistic(look, frame, columns=("extra", "label"))
    inside = np.flatnonzero(frame["x2"] > 0)
    assert np.array_equal(seen["index"], inside)
    assert np.array_equal(seen["extra"], inside)
    assert {"is_exposed", "a", "x1", "x2", "y", "b", "w", "extra"} <= seen["columns"]
    assert "area_name" not in seen["columns"]
    with pytest.raises(ExtractError, match="nowhere"):
        study(variance=FAY).statistic(look, frame, columns=("nowhere",))


def quantile_by_hand(values, weights, p):
    order = np.argsort(values)
    share = np.cumsum(weights[order]) / weights.sum()
    return values[order][np.flatnonzero(share >= p - 1e-12)[0]]


def test_quantiles_and_their_differences_by_hand():
    plan = study(variance=FAY)
    found = plan.quantiles("y", (0.1, 0.5), FRAME)
    file = pd.concat([batch.to_pandas() for batch in plan.run(FRAME).weights()])
    names = ["combined_weight", *[f"combined_replicate_{r}" for r in range(1, 9)]]
    a, y = FRAME["a"].to_numpy() == 1, FRAME["y"].to_numpy()
    values = []
    for name in names:
        w, out = file[name].to_numpy(), []
        for p in (0.1, 0.5):
            one, two = quantile_by_hand(y[a], w[a], p), quantile_by_hand(y[~a], w[~a], p)
            out += [one, two, one - two]
        values.append(out)
    values = np.array(values).T
    np.testing.assert_allclose(found.params, values[:, 0], rtol=1e-12)
    deviations = values[:, 1:] - values[:, :1]
    expected = np.sqrt((deviations**2).sum(axis=1) / (8 * 0.36))
    np.testing.assert_allclose(found.bse, expected, rtol=1e-10)
    assert list(found.params.index[:3]) == ["exposed 0.1", "reference 0.1", "difference 0.1"]


def test_the_standard_error_of_a_median_covers():
    # Large-sample standard error of a median under equal weights: 1 / (2 f sqrt(n)), here of a normal sample.
    rng = np.random.default_rng(2)
    n = 4000
    frame = pd.DataFrame({"w": 1.0, "a": np.arange(n) % 2, "x": rng.normal(size=n), "y": rng.normal(size=n)})
    frame["psu"] = np.arange(n) // 4
    from steelyard.plan import Design, Exposure

    plan = study(
        design=Design(weight="w", clusters="psu"),
        exposure=Exposure(formula="a ~ x"),
        outcome=(Outcome(name="y"),),
        variance=Variance(method="bootstrap", replicates=200),
    )
    found = plan.quantiles("y", (0.5,), frame)
    theory = np.sqrt(2 * np.pi) / 2 / np.sqrt(n / 2)
    # The bootstrap's standard error of 200 replicates has a relative error near 1 / sqrt(400), a median's more.
    assert found.bse.iloc[0] == pytest.approx(theory, rel=0.25)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (("y", (0.5, 1.0)), "0.5, 1"),
        (("y", ()), "no probability"),
        (("x1", (0.5,)), '"x1" is no outcome'),
    ],
)
def test_quantiles_that_cannot_be_are_refused(arguments, message):
    with pytest.raises(PlanError, match=message):
        study(variance=FAY).quantiles(*arguments, FRAME)


def test_the_jackknife_of_a_quantile_is_refused():
    with pytest.raises(PlanError, match="not give a consistent variance"):
        study(variance=Variance(method="jackknife")).quantiles("y", (0.5,), FRAME)


def test_a_function_that_fails_in_a_replicate_is_counted_and_refused_past_the_share():
    calls = []

    def fails_once(frame, weights):
        calls.append(1)
        if len(calls) == 4:
            raise ZeroDivisionError("nothing there")
        return weighted(frame["y"], weights)

    plan = study(variance=Variance(method="fay", most_failed=0.2))
    found = plan.statistic(fails_once, FRAME)
    assert np.isfinite(found.bse.iloc[0])
    calls.clear()
    with pytest.raises(EstimationError, match=r"replicate 3 \(ZeroDivisionError: nothing there"):
        study(variance=Variance(method="fay", most_failed=0.0)).statistic(fails_once, FRAME)


@pytest.mark.parametrize(
    ("function", "message"),
    [
        (lambda frame, weights: "text", "returned str"),
        (lambda frame, weights: [], "returned list"),
        (lambda frame, weights: float("nan"), "not a finite number for the full sample"),
        (lambda frame, weights: np.ones(2 + int(weights.sum() * 1e6) % 7), "other names"),
    ],
)
def test_what_is_no_vector_of_numbers_is_refused(function, message):
    with pytest.raises(EstimationError, match=message):
        study(variance=FAY).statistic(function, FRAME)


def test_an_error_of_the_function_in_the_full_sample_is_the_users_to_see():
    def broken(frame, weights):
        return frame["nowhere"].sum()

    with pytest.raises(KeyError, match="nowhere"):
        study(variance=FAY).statistic(broken, FRAME)
