"""Exposures of whole clusters: against fits on one row a cluster, and clusters left out one by one."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
import statsmodels.api as sm

import oracle
from steelyard.errors import PlanError, SteelyardWarning
from steelyard.plan import Design, Exposure, Multilevel, Outcome, Variance
from steelyard.report.disclosure import release
from steelyard.report.multilevel import among_clusters_table
from steelyard.study import Study

pytestmark = pytest.mark.filterwarnings("ignore::steelyard.errors.SteelyardWarning")

MODELS = {
    "plain": Outcome(name="y"),
    "multilevel": Outcome(name="y", covariates="x", multilevel=Multilevel(clusters="school")),
    "three levels": Outcome(
        name="y", covariates="x", multilevel=Multilevel(clusters=("school", "district"), scaling="none")
    ),
}


def schools(seed=0, count=48):
    """Pupils in schools in districts; schools are exposed by what they are, and carry weights of their own."""
    rng = np.random.default_rng(seed)
    size = rng.integers(4, 12, count)
    school = np.repeat(np.arange(count), size)
    z = rng.normal(size=count)
    a = (rng.random(count) < oracle.expit(0.2 + 0.9 * z)).astype(int)
    u = rng.normal(0, 0.6, count) + np.repeat(rng.normal(0, 0.8, count // 4), 4)
    frame = pd.DataFrame({"school": school, "district": school // 4, "a": a[school], "z": z[school]})
    frame["w_school"] = np.exp(0.5 * rng.normal(size=count))[school]
    frame["w_pupil"] = rng.integers(1, 4, len(frame)) * 1.0
    frame["w"] = frame["w_school"] * frame["w_pupil"]
    frame["x"] = rng.normal(size=len(frame)) + 0.3 * frame["z"]
    frame["y"] = (
        1 + 0.5 * frame["a"] + 0.6 * frame["z"] + frame["x"] + u[school] + rng.normal(size=len(frame))
    )
    return frame.sample(frac=1, random_state=seed).reset_index(drop=True)


def study(outcome="plain", **changes):
    given = {
        "design": Design(weight="w", clusters=("district", "school")),
        "exposure": Exposure(formula="a ~ z", clusters="school", cluster_weight="w_school"),
        "outcome": (MODELS[outcome],),
    }
    return Study(**(given | changes))


def one_row_a_school(frame):
    return frame.groupby("school", as_index=False).first()


@pytest.mark.parametrize(("weight", "weighted"), [("w_school", True), (None, True), (None, False)])
def test_the_propensity_is_that_of_the_clusters_under_their_weights(weight, weighted):
    frame = schools()
    exposure = Exposure(formula="a ~ z", clusters="school", cluster_weight=weight, weighted=weighted)
    answer = study(exposure=exposure).run(frame)
    clusters = one_row_a_school(frame)
    own = {
        ("w_school", True): clusters["w_school"],
        (None, True): frame.groupby("school")["w"].mean(),
        (None, False): pd.Series(1.0, index=clusters.index),
    }[weight, weighted].to_numpy()
    x = sm.add_constant(clusters["z"])
    fit = sm.GLM(clusters["a"], x, sm.families.Binomial(), freq_weights=own).fit(tol=1e-14)
    np.testing.assert_allclose(answer.propensity.params, fit.params, rtol=1e-8)
    # Persons carry their sampling weight times their school's balancing weight.
    e = fit.predict(sm.add_constant(frame["z"]))
    w = frame["w"] * oracle.balancing_weight("ATE", e, frame["a"])
    expected = np.average(frame["y"], weights=w * frame["a"]) - np.average(
        frame["y"], weights=w * (1 - frame["a"])
    )
    assert answer.effects.params.iloc[0] == pytest.approx(expected, rel=1e-8)


@pytest.mark.parametrize("outcome", MODELS)
def test_the_jackknife_leaves_out_one_district_at_a_time(outcome):
    frame = schools(count=32)
    answer = study(outcome, variance=Variance(method="jackknife")).run(frame)
    values = np.array(
        [study(outcome).run(frame[frame["district"] != d]).effects.params.iloc[0] for d in range(8)]
    )
    expected = np.sqrt(7 / 8 * ((values - answer.effects.params.iloc[0]) ** 2).sum())
    assert answer.effects.bse.iloc[0] == pytest.approx(expected, rel=1e-5)


@pytest.mark.parametrize("outcome", MODELS)
@pytest.mark.parametrize("weight", ["w_school", None])
def test_linearization_agrees_with_the_jackknife_in_large_samples(outcome, weight):
    exposure = Exposure(formula="a ~ z", clusters="school", cluster_weight=weight)
    answer = study(outcome, exposure=exposure, variance=Variance(method="jackknife")).run(schools(3, 800))
    assert answer.beside is not None
    ratio = answer.effects.bse / answer.beside.bse
    np.testing.assert_allclose(ratio, 1, atol=0.04)
    np.testing.assert_allclose(answer.effects_known.bse / answer.beside_known.bse, 1, atol=0.04)
    # The propensity's estimation matters, so that agreement above says something of it.
    assert abs(answer.effects_known.bse.iloc[0] / answer.effects.bse.iloc[0] - 1) > 0.005


def test_clusters_are_compared_each_for_its_own_weight():
    frame = schools()
    answer = study().run(frame)
    clusters = one_row_a_school(frame)
    s, a, z = clusters["w_school"].to_numpy(), clusters["a"].to_numpy(float), clusters["z"].to_numpy()
    x = np.column_stack([np.ones(len(z)), z])
    w = s * oracle.balancing_weight("ATE", oracle.expit(x @ oracle.logit_fit(x, a, s)), a)
    row = answer.balance.among_clusters.set_index("term").loc["z"]
    variances = [np.average((z - np.average(z, weights=s * g)) ** 2, weights=s * g) for g in (a, 1 - a)]
    for when, under in (("before", s), ("after", w)):
        exposed, reference = np.average(z, weights=under * a), np.average(z, weights=under * (1 - a))
        assert row[f"mean_exposed_{when}"] == pytest.approx(exposed, rel=1e-9)
        assert row[f"mean_reference_{when}"] == pytest.approx(reference, rel=1e-9)
        assert row[f"smd_{when}"] == pytest.approx(
            (exposed - reference) / np.sqrt(np.mean(variances)), rel=1e-8
        )
    table = among_clusters_table(release(answer))
    assert [cells[0] for cells in table.rows] == ["z"]


def test_weights_made_of_rows_are_told():
    with pytest.warns(SteelyardWarning, match="mean sampling weight of their rows"):
        study(exposure=Exposure(formula="a ~ z", clusters="school")).run(schools())


@pytest.mark.parametrize(
    ("change", "exposure", "message"),
    [
        ({"a": lambda f: (f["x"] > 0).astype(int)}, {}, r"the exposure differs within 4\d of them \(school"),
        ({}, {"formula": "a ~ z + x"}, "x differs within 48 of them"),
        ({"w_school": lambda f: f["w"]}, {}, "w_school differs within"),
        ({}, {"clusters": "village"}, r'exposure.clusters is "village"; the design has district, school'),
    ],
)
def test_clusters_that_are_not_of_one_piece_are_refused(change, exposure, message):
    given = {"formula": "a ~ z", "clusters": "school", "cluster_weight": "w_school"} | exposure
    with pytest.raises(PlanError, match=message):
        study(exposure=Exposure(**given)).run(schools().assign(**change))


def test_plans_that_cannot_be_are_refused():
    with pytest.raises(PlanError, match=r"without exposure\.clusters"):
        Exposure(formula="a ~ z", cluster_weight="w")
    with pytest.raises(PlanError, match="caps rows"):
        Exposure(formula="a ~ z", clusters="school", cap_quantile=0.99)
