"""Replication of the whole job: every replicate fitted again by statsmodels or plain numpy, from a frame."""

from __future__ import annotations

from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

import oracle
from steelyard.errors import EstimationError, PlanError, SteelyardWarning
from steelyard.plan import Data, Design, Exposure, Outcome, Report, SuppliedReplicates, Variance
from test_study_brute_force import design_columns, extract, study

pytestmark = pytest.mark.filterwarnings("ignore::steelyard.errors.SteelyardWarning")

FRAME = extract(strata=6, areas=2, households=6)
MANY = extract(strata=4, areas=5)


def weights_of(answer, columns=None):
    """The rows of weights.parquet as a frame."""
    return pd.concat([batch.to_pandas() for batch in answer.weights()], ignore_index=True)


def by_brute_force(frame, weights, estimand="ATE", inside=None, known=False):
    """Differences of both outcomes under every column of weights, the propensity fitted again by statsmodels."""
    use = np.ones(len(frame), dtype=bool) if inside is None else np.asarray(inside)
    part = frame[use]
    x, a = design_columns(part), part["a"].to_numpy(float)
    z = part[["y", "b"]].to_numpy(float)
    found = []
    for k in range(weights.shape[1]):
        s = weights[use, k]
        counted = s > 0
        fit_weights = weights[use, 0] if known else s
        fit = sm.GLM(
            a[fit_weights > 0],
            x[fit_weights > 0],
            sm.families.Binomial(),
            freq_weights=fit_weights[fit_weights > 0],
        ).fit(tol=1e-14)
        w = s * oracle.balancing_weight(estimand, oracle.expit(x @ fit.params), a)
        assert counted.any()
        found.append(
            [(w * a) @ z[:, j] / (w @ a) - (w * (1 - a)) @ z[:, j] / (w @ (1 - a)) for j in range(z.shape[1])]
        )
    return np.array(found).T


def covariance(values, factor, factors=1.0, about_mean=False):
    centre = values[:, 1:].mean(axis=1, keepdims=True) if about_mean else values[:, :1]
    deviations = values[:, 1:] - centre
    return factor * (deviations * factors) @ deviations.T


def dropped_psus(frame):
    """The jackknife's weights, PSU by PSU, written out: (n, 1 + PSUs), and its factors."""
    columns, factors = [frame["w"].to_numpy()], []
    for h in sorted(frame["h"].unique()):
        psus = sorted(frame.loc[frame["h"] == h, "area"].unique())
        for psu in psus:
            w = frame["w"].to_numpy().copy()
            mine = (frame["h"] == h).to_numpy()
            w[mine] *= len(psus) / (len(psus) - 1)
            w[mine & (frame["area"] == psu).to_numpy()] = 0
            columns.append(w)
            factors.append((len(psus) - 1) / len(psus))
    return np.column_stack(columns), np.array(factors)


@pytest.mark.parametrize("estimand", ["ATE", "ATT", "ATO"])
def test_the_jackknife_is_a_statsmodels_fit_for_every_psu_left_out(estimand):
    answer = study(
        exposure=Exposure(formula="a ~ x1 + C(x2)", estimand=estimand), variance=Variance(method="jackknife")
    ).run(MANY)
    columns, factors = dropped_psus(MANY)
    expected = covariance(by_brute_force(MANY, columns, estimand), 1.0, factors)
    np.testing.assert_allclose(answer.effects.cov_params(), expected, rtol=1e-6)
    assert (answer.effects.table["df"] == 16).all()
    assert (answer.effects.table["replicates"] == 20).all()


METHODS = {
    "jackknife": Variance(method="jackknife"),
    "brr": Variance(method="brr"),
    "fay": Variance(method="fay", fay=0.4),
    "bootstrap": Variance(method="bootstrap", replicates=25),
    "successive-difference": Variance(method="successive-difference", replicates=16),
}


@pytest.mark.parametrize("method", METHODS)
def test_a_colleague_gets_the_standard_errors_back_from_the_weight_file(method):
    answer = study(variance=METHODS[method]).run(FRAME)
    told, file = answer.variance.record(), weights_of(answer)
    count = told["replicates"]
    factors = np.broadcast_to(told["replicate_factors"], count)
    a, z = FRAME["a"].to_numpy(float), FRAME[["y", "b"]].to_numpy(float)
    names = ["combined_weight", *[f"combined_replicate_{r}" for r in range(1, count + 1)]]
    w = file[names].to_numpy()
    values = (w.T * a) @ z / (w.T @ a)[:, None] - (w.T * (1 - a)) @ z / (w.T @ (1 - a))[:, None]
    expected = covariance(values.T, told["factor"], factors)
    np.testing.assert_allclose(answer.effects.cov_params(), expected, rtol=1e-9)
    # And the sampling weights of the replicates, fitted again by statsmodels, give the combined ones.
    sampling = file[["sampling_weight", *[f"sampling_replicate_{r}" for r in range(1, count + 1)]]].to_numpy()
    again = covariance(by_brute_force(FRAME, sampling), told["factor"], factors)
    np.testing.assert_allclose(answer.effects.cov_params(), again, rtol=1e-5)


def test_the_paragraph_for_colleagues_says_the_factor_that_gives_the_variance():
    answer = study(variance=Variance(method="jackknife")).run(FRAME)
    text = answer.variance.usage(())
    # Two PSUs a stratum: every a_r is one half, and nothing is left to look up.
    assert "V = a Σ (T_r − T)², with a = 0.5;" in text
    assert "12 replicates, overall factor 0.5, deviations from the full-sample estimate" in text
    unequal = study(variance=Variance(method="jackknife")).run(extract(strata=2, areas=3).iloc[:-10])
    assert set(unequal.variance.factors) == {2 / 3}
    held = study(variance=Variance(method="fay", propensity="known")).run(FRAME).variance.usage(())
    assert "full sample's propensity was kept" in held


@pytest.mark.parametrize("method", ["jackknife", "bootstrap"])
def test_a_domain_varies_with_the_whole_design(method):
    inside = FRAME["x1"] > -0.6
    answer = study(data=Data(domain="x1 > -0.6"), variance=METHODS[method]).run(FRAME)
    told, file = answer.variance.record(), weights_of(answer)
    names = ["sampling_weight", *[f"sampling_replicate_{r}" for r in range(1, told["replicates"] + 1)]]
    sampling = file[names].to_numpy()
    assert (sampling[~inside, 1:] != sampling[~inside, :1]).any()
    expected = covariance(
        by_brute_force(FRAME, sampling, inside=inside),
        told["factor"],
        np.broadcast_to(told["replicate_factors"], told["replicates"]),
    )
    np.testing.assert_allclose(answer.effects.cov_params(), expected, rtol=1e-6)
    assert (file.loc[~inside, ["combined_weight", "combined_replicate_1"]] == 0).all(axis=None)


def test_the_propensity_may_be_held():
    estimated = study(variance=Variance(method="jackknife")).run(MANY)
    held = study(variance=Variance(method="jackknife", propensity="known")).run(MANY)
    columns, factors = dropped_psus(MANY)
    expected = covariance(by_brute_force(MANY, columns, known=True), 1.0, factors)
    np.testing.assert_allclose(held.effects.cov_params(), expected, rtol=1e-6)
    np.testing.assert_allclose(estimated.effects_known.cov_params(), expected, rtol=1e-6)
    assert (held.effects.bse > estimated.effects.bse).any()
    file = weights_of(held)
    c = file["balancing_weight"]
    np.testing.assert_allclose(file["combined_replicate_3"], c * file["sampling_replicate_3"], rtol=1e-12)


def test_balance_means_and_coefficients_are_estimated_again():
    answer = study(variance=Variance(method="jackknife")).run(MANY)
    columns, factors = dropped_psus(MANY)
    x, a = design_columns(MANY), MANY["a"].to_numpy(float)
    coefficients, after, before = [], [], []
    for s in columns.T:
        use = s > 0
        fit = sm.GLM(a[use], x[use], sm.families.Binomial(), freq_weights=s[use]).fit(tol=1e-14)
        coefficients.append(fit.params)
        w = s * oracle.balancing_weight("ATE", oracle.expit(x @ fit.params), a)
        for found, under in ((after, w), (before, s)):
            v = MANY["x1"].to_numpy()
            found.append((under * a) @ v / (under @ a) - (under * (1 - a)) @ v / (under @ (1 - a)))
    se = np.sqrt(np.diag(covariance(np.array(coefficients).T, 1.0, factors)))
    named = answer.propensity.bse[["Intercept", "C(x2)[T.1]", "C(x2)[T.2]", "x1"]]
    np.testing.assert_allclose(named, se, rtol=1e-6)
    row = answer.balance.table.set_index("term").loc["x1"]
    for when, values in (("before", before), ("after", after)):
        expected = np.sqrt(covariance(np.array([values]), 1.0, factors)[0, 0])
        assert row[f"se_{when}"] == pytest.approx(expected, rel=1e-6)


def test_stabilizing_range_and_cap_are_found_again_in_every_replicate():
    exposure = Exposure(
        formula="a ~ x1 + C(x2)", stabilize=True, cap_quantile=0.9, propensity_range=(0.15, 0.9)
    )
    answer = study(exposure=exposure, variance=Variance(method="jackknife")).run(MANY)
    columns, factors = dropped_psus(MANY)
    x, a, s = design_columns(MANY), MANY["a"].to_numpy(float), MANY["w"].to_numpy()
    z = MANY["y"].to_numpy()
    values = []
    for s_r in columns.T:
        e = oracle.expit(x @ oracle.logit_fit(x, a, s_r))
        share = s_r @ a / s_r.sum()
        c = a * share / e + (1 - a) * (1 - share) / (1 - e)
        c = np.where((e < 0.15) | (e > 0.9), 0, c)
        combined, multiplier = s * c, s_r / s
        order = np.argsort(combined)
        order = order[combined[order] > 0]
        reached = np.cumsum(multiplier[order])
        cap = combined[order][np.searchsorted(reached, 0.9 * reached[-1] * (1 - 1e-12))]
        w = s_r * np.minimum(c, cap / s)
        values.append((w * a) @ z / (w @ a) - (w * (1 - a)) @ z / (w @ (1 - a)))
    expected = np.sqrt(covariance(np.array([values]), 1.0, factors)[0, 0])
    assert answer.effects.bse.iloc[0] == pytest.approx(expected, rel=1e-7)


def test_an_adjusted_odds_ratio_is_fitted_again_too():
    outcome = (Outcome(name="b", family="binomial", measure="odds-ratio", covariates="x1"),)
    answer = study(outcome=outcome, variance=Variance(method="jackknife")).run(MANY)
    columns, factors = dropped_psus(MANY)
    x, a = design_columns(MANY), MANY["a"].to_numpy(float)
    model = np.column_stack([np.ones(len(MANY)), MANY["x1"], a])
    values = []
    for s in columns.T:
        w = s * oracle.balancing_weight("ATE", oracle.expit(x @ oracle.logit_fit(x, a, s)), a)
        use = w > 0
        fit = sm.GLM(MANY["b"][use], model[use], sm.families.Binomial(), freq_weights=w[use]).fit(tol=1e-14)
        values.append(fit.params.iloc[-1] if hasattr(fit.params, "iloc") else fit.params[-1])
    expected = np.sqrt(covariance(np.array([values]), 1.0, factors)[0, 0])
    assert answer.effects.bse.iloc[0] == pytest.approx(expected, rel=1e-6)


def test_rows_without_weight_and_a_fit_without_weights():
    frame = MANY.copy()
    frame.loc[frame.index % 7 == 0, "w"] = 0.0
    exposure = Exposure(formula="a ~ x1 + C(x2)", weighted=False, link="probit")
    answer = study(exposure=exposure, variance=Variance(method="jackknife")).run(frame)
    columns, factors = dropped_psus(frame)
    x, a, y = design_columns(frame), frame["a"].to_numpy(float), frame["y"].to_numpy()
    base = frame["w"].to_numpy()
    values = []
    for s in columns.T:
        use = s > 0
        # Without sampling weights a replicate still multiplies: by 0, or by what makes up for the PSU left out.
        multiplier = s[use] / base[use]
        probit = sm.families.Binomial(sm.families.links.Probit())
        fit = sm.GLM(a[use], x[use], probit, freq_weights=multiplier).fit(tol=1e-14, maxiter=200)
        e = fit.predict(x)
        w = s * oracle.balancing_weight("ATE", e, a)
        values.append((w * a) @ y / (w @ a) - (w * (1 - a)) @ y / (w @ (1 - a)))
    expected = np.sqrt(covariance(np.array([values]), 1.0, factors)[0, 0])
    assert answer.effects.bse.iloc[0] == pytest.approx(expected, rel=1e-6)


def supplied(answer):
    """The frame with the replicate weights of an answer as a producer would add them."""
    file = weights_of(answer)
    names = [name for name in file if name.startswith("sampling_replicate_")]
    added = file[names].rename(columns=lambda name: name.replace("sampling_replicate", "rep"))
    return pd.concat([FRAME, added.astype(float)], axis=1)


@pytest.mark.parametrize("method", METHODS)
def test_supplied_replicates_alone_run_the_whole_job(method):
    made = study(variance=METHODS[method]).run(FRAME)
    told = made.variance.record()
    factors = told["replicate_factors"]
    replicates = SuppliedReplicates(
        columns="rep_*",
        method=method,
        fay=0.4 if method == "fay" else None,
        replicate_factors=tuple(factors) if isinstance(factors, list) else (),
    )
    # No strata and no PSUs in the plan: the replicates carry the design.
    plan = study(design=Design(weight="w", replicates=replicates), variance=Variance(method="supplied"))
    answer = plan.run(supplied(made))
    np.testing.assert_allclose(answer.effects.cov_params(), made.effects.cov_params(), rtol=1e-8)
    np.testing.assert_allclose(answer.balance.table["se_after"], made.balance.table["se_after"], rtol=1e-7)
    assert answer.beside is None
    assert answer.effects.table["psus"].isna().all()
    if method in ("jackknife", "brr", "fay"):
        # The rank of the replicates is PSUs minus strata.
        assert answer.variance.df == 6


def test_the_producers_factors_centre_and_degrees_of_freedom_come_first():
    made = study(variance=METHODS["bootstrap"]).run(FRAME)
    frame = supplied(made)
    factors = tuple(np.linspace(0.5, 1.5, 25))
    replicates = SuppliedReplicates(
        columns="rep_*",
        method="bootstrap",
        factor=0.03,
        replicate_factors=factors,
        df=17,
        centre="replicate-mean",
    )
    plan = study(design=Design(weight="w", replicates=replicates), variance=Variance(method="supplied"))
    answer = plan.run(frame)
    columns = frame[["w", *[f"rep_{r}" for r in range(1, 26)]]].to_numpy()
    expected = covariance(by_brute_force(FRAME, columns), 0.03, np.array(factors), about_mean=True)
    np.testing.assert_allclose(answer.effects.cov_params(), expected, rtol=1e-6)
    assert (answer.effects.table["df"] == 17).all()


def test_single_precision_replicates_are_read_as_they_are():
    frame = supplied(study(variance=METHODS["fay"]).run(FRAME))
    names = [name for name in frame if name.startswith("rep_")]
    frame[names] = frame[names].astype(np.float32)
    replicates = SuppliedReplicates(columns="rep_*", method="fay", fay=0.4)
    answer = study(
        design=Design(weight="w", replicates=replicates), variance=Variance(method="supplied")
    ).run(frame)
    columns = frame[["w", *names]].to_numpy(float)
    expected = covariance(by_brute_force(FRAME, columns), 1 / (len(names) * 0.36))
    np.testing.assert_allclose(answer.effects.cov_params(), expected, rtol=1e-6)


def test_one_line_of_the_plan_changes_the_variance_and_nothing_else():
    linear = study().run(FRAME)
    for variance in METHODS.values():
        answer = study(variance=variance).run(FRAME)
        np.testing.assert_allclose(answer.effects.params, linear.effects.params, rtol=1e-12)
        np.testing.assert_allclose(
            answer.balance.table["smd_after"], linear.balance.table["smd_after"], atol=1e-12
        )
        assert answer.beside is not None
        np.testing.assert_allclose(answer.beside.cov_params(), linear.effects.cov_params(), rtol=1e-10)
        table = answer.effects_table
        assert list(table["variance"]) == [variance.method] * 2 + ["linearization"] * 2
    alone = study(variance=Variance(method="brr", side_by_side=False)).run(FRAME)
    assert alone.beside is None
    assert list(alone.effects_table["variance"]) == ["brr"] * 2


def with_a_lonely_category(frame):
    """A category whose only exposed rows live in one PSU: without that PSU the propensity separates."""
    frame = frame.copy()
    here = (frame["h"] == 1) & (frame["area"] == 0)
    frame["rare"] = here.astype(int)
    others = (frame["h"] == 2) & (frame["area"] == 1)
    frame["rare"] = (here | others).astype(int)
    frame.loc[others, "a"] = 0
    frame.loc[here, "a"] = np.arange(here.sum()) % 2
    return frame


def test_replicates_that_fail_are_named_counted_and_refused_past_a_share():
    frame = with_a_lonely_category(MANY)
    plan = study(
        exposure=Exposure(formula="a ~ x1 + rare"), variance=Variance(method="jackknife", most_failed=0.1)
    )
    with pytest.warns(SteelyardWarning, match=r"1 of 20 replicates failed .* replicate 6 \("):
        answer = plan.run(frame)
    assert list(answer.variance.failed) == [6]
    file = weights_of(answer)
    assert file["combined_replicate_6"].isna().all()
    assert answer.variance.record()["failed"] == [6]
    assert "rows" not in str(answer.record["variance"])
    columns, factors = dropped_psus(frame)
    x = np.column_stack([np.ones(len(frame)), frame["x1"], frame["rare"]])
    a, y = frame["a"].to_numpy(float), frame["y"].to_numpy()
    values = []
    for k, s in enumerate(columns.T):
        if k != 6:
            w = s * oracle.balancing_weight("ATE", oracle.expit(x @ oracle.logit_fit(x, a, s)), a)
            values.append((w * a) @ y / (w @ a) - (w * (1 - a)) @ y / (w @ (1 - a)))
    left = np.delete(factors, 5)
    expected = covariance(np.array([values]), 20 / 19, left)[0, 0]
    assert answer.effects.cov_params().iloc[0, 0] == pytest.approx(expected, rel=1e-6)
    strict = replace(plan, variance=Variance(method="jackknife", most_failed=0.0))
    with pytest.raises(
        EstimationError, match=r"1 of 20 replicates failed, more than .* replicate 6"
    ) as refused:
        strict.run(frame)
    assert "Simplify" in refused.value.mend


def test_a_group_that_a_replicate_empties_fails_it():
    frame = MANY.copy()
    only = (frame["h"] == 0) & (frame["area"] == 2)
    frame["a"] = (only & (np.arange(len(frame)) % 3 > 0)).astype(int)
    plan = study(exposure=Exposure(formula="a ~ x2"), variance=Variance(method="jackknife"))
    answer = plan.run(frame)
    assert list(answer.variance.failed) == [3]


@pytest.mark.parametrize("executor", [ThreadPoolExecutor, ProcessPoolExecutor])
@pytest.mark.parametrize("method", ["bootstrap", "jackknife"])
def test_workers_and_block_size_do_not_move_the_variance(executor, method):
    base = study(variance=METHODS[method]).run(MANY, workers=1).effects.cov_params()
    blocks = study(variance=METHODS[method]).run(MANY, workers=1, block_rows=37).effects.cov_params()
    np.testing.assert_allclose(blocks, base, rtol=1e-9)
    with executor(2) as pool:
        shared = study(variance=METHODS[method]).run(MANY, executor=pool).effects.cov_params()
    assert np.array_equal(shared, base)


def test_rows_without_clusters_are_replicated_one_by_one():
    frame = FRAME.iloc[:60].reset_index(drop=True)
    plan = study(
        design=Design(weight="w", strata="h"),
        exposure=Exposure(formula="a ~ x1 + x2"),
        outcome=(Outcome(name="y"),),
        variance=Variance(method="jackknife"),
    )
    answer = plan.run(frame)
    x, a, s = (
        np.column_stack([np.ones(60), frame["x1"], frame["x2"]]),
        frame["a"].to_numpy(float),
        frame["w"].to_numpy(),
    )
    y, total = frame["y"].to_numpy(), 0.0

    def effect(s):
        w = s * oracle.balancing_weight("ATE", oracle.expit(x @ oracle.logit_fit(x, a, s)), a)
        return (w * a) @ y / (w @ a) - (w * (1 - a)) @ y / (w @ (1 - a))

    for i in range(60):
        mine = (frame["h"] == frame["h"][i]).to_numpy()
        n = mine.sum()
        without = np.where(mine, s * n / (n - 1), s)
        without[i] = 0
        total += (n - 1) / n * (effect(without) - effect(s)) ** 2
    assert answer.effects.bse.iloc[0] == pytest.approx(np.sqrt(total), rel=1e-7)


def test_replicate_weights_are_written_as_the_plan_says():
    answer = study(variance=METHODS["fay"], report=Report(replicate_weights=False)).run(FRAME)
    assert [name for name in answer.weights.schema.names if "replicate" in name] == []
    assert answer.weights.replicates is None


def test_the_plan_refuses_what_no_replicate_weights_can_be():
    with pytest.raises(PlanError, match="names no replicate weights"):
        study(variance=Variance(method="supplied"))
    with pytest.raises(PlanError, match="without its factor"):
        SuppliedReplicates(columns="r*", method="fay")
    with pytest.raises(PlanError, match="holds a jackknife"):
        SuppliedReplicates(columns="r*", method="jackknife")
    with pytest.raises(PlanError, match=r"fay is given with method"):
        SuppliedReplicates(columns="r*", method="brr", fay=0.3)
    with pytest.raises(PlanError, match="lies from 0"):
        Variance(method="fay", fay=1.0)
    with pytest.raises(PlanError, match="at least 2"):
        Variance(method="bootstrap", replicates=1)
