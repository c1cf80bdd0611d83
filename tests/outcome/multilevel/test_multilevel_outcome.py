"""The multilevel outcome in a study: expanded data, deleted clusters, perturbed weights as oracles."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
import statsmodels.formula.api as smf

from made import ColumnsOfWeights, made_rows, two_stage_units
from steelyard.data.passes import Engine
from steelyard.data.units import Units
from steelyard.errors import ExtractError, PlanError, SteelyardWarning
from steelyard.exposure.influence import joint_influence
from steelyard.exposure.propensity import balancing, fit_propensity
from steelyard.outcome.multilevel.outcome import multilevel_outcome
from steelyard.plan import Design, Exposure, Multilevel, Outcome, Variance
from steelyard.report.disclosure import release
from steelyard.report.multilevel import multilevel_tables
from steelyard.study import Study

pytestmark = pytest.mark.filterwarnings("ignore::steelyard.errors.SteelyardWarning")


def pupils(seed=0, schools=40, size=12):
    """Pupils in schools in districts, of whom exactly a half (x = 0) or two thirds (x = 1) are exposed."""
    rng = np.random.default_rng(seed)
    school = np.repeat(np.arange(schools), size)
    x = np.tile(np.repeat([0, 1], size // 2), schools)
    a = np.tile([0, 1, 0, 1, 0, 1, 1, 1, 0, 1, 1, 0], schools)
    order = rng.permutation(len(school))
    y = 1 + 0.5 * a + 0.3 * x + rng.normal(0, 0.8, schools)[school] + rng.normal(size=len(school))
    frame = pd.DataFrame({"school": school, "district": school // 5, "x": x, "a": a, "y": y, "w": 1.0})
    frame["v"] = rng.normal(size=len(frame))
    return frame.iloc[order].reset_index(drop=True)


def study(**changes):
    model = changes.pop("model", Multilevel(clusters="school", scaling="none"))
    given = {
        "design": Design(weight="w", clusters="school"),
        "exposure": Exposure(formula="a ~ x", estimand="ATT"),
        "outcome": (Outcome(name="y", covariates="x", multilevel=model),),
    }
    return Study(**(given | changes))


def expanded(frame):
    """The rows as often as their ATT weight: 1 for the exposed, e / (1 - e) for the reference: 1 or 2."""
    times = np.where((frame["a"] == 0) & (frame["x"] == 1), 2, 1)
    return frame.loc[frame.index.repeat(times)].reset_index(drop=True)


def test_integer_combined_weights_are_the_rows_repeated():
    frame = pupils()
    answer = study().run(frame)
    repeated = frame.loc[
        frame.index.repeat(np.where((frame["a"] == 0) & (frame["x"] == 1), 2, 1))
    ].reset_index(drop=True)
    oracle = smf.mixedlm("y ~ x + a", repeated, groups="school").fit(reml=False, gtol=1e-9)
    found = answer.multilevel[0].parameters.params
    np.testing.assert_allclose(found[["Intercept", "x", "exposure"]], oracle.fe_params, rtol=1e-5, atol=1e-6)
    assert found["variance: school Intercept"] == pytest.approx(oracle.cov_re.iloc[0, 0], rel=1e-4)
    assert found["variance: residual"] == pytest.approx(oracle.scale, rel=1e-5)
    assert answer.effects.params.iloc[0] == found["exposure"]
    share = found["variance: school Intercept"]
    assert found["intraclass correlation: school"] == pytest.approx(
        share / (share + found["variance: residual"])
    )


def test_the_jackknife_is_the_study_without_one_cluster_at_a_time():
    frame = pupils(schools=12)
    plan = study(variance=Variance(method="jackknife"))
    answer = plan.run(frame)
    full = answer.multilevel[0].parameters.params.to_numpy()
    left_out = np.array(
        [
            study().run(frame[frame["school"] != school]).multilevel[0].parameters.params.to_numpy()
            for school in range(12)
        ]
    )
    expected = np.sqrt(11 / 12 * ((left_out - full) ** 2).sum(axis=0))
    np.testing.assert_allclose(answer.multilevel[0].parameters.bse, expected, rtol=1e-5)


def test_linearization_agrees_with_the_jackknife_in_large_samples():
    frame = pupils(schools=200, seed=3)
    frame["w"] = np.exp(0.4 * np.random.default_rng(1).normal(size=len(frame)))
    for model in (
        Multilevel(clusters="school", scaling=("size", "effective")),
        Multilevel(clusters="school", slopes=("exposure",)),
    ):
        answer = study(model=model, variance=Variance(method="jackknife")).run(frame)
        linear = study(model=model).run(frame)
        ratio = answer.multilevel[0].parameters.bse / linear.multilevel[0].parameters.bse
        np.testing.assert_allclose(ratio, 1, atol=0.05)
        np.testing.assert_allclose(answer.effects_known.bse / linear.effects_known.bse, 1, atol=0.05)
        pair = answer.multilevel[0].scalings["std_error"] / linear.multilevel[0].scalings["std_error"]
        np.testing.assert_allclose(pair, 1, atol=0.05)


STEP = 1e-4


@pytest.mark.parametrize("scaling", ["size", "effective", "none"])
@pytest.mark.parametrize("levels", [("school",), ("school", "district")])
@pytest.mark.parametrize("stabilize", [False, True])
def test_the_influence_of_a_cluster_is_the_derivative_by_its_weight(scaling, levels, stabilize):
    frame = pupils(schools=20, seed=5)
    rng = np.random.default_rng(7)
    frame["y"] += np.array([-2.0, 1.0, 0.5, 2.0])[frame["district"]]
    # Not a saturated propensity, unequal weights, a cluster without weight.
    x = np.column_stack([np.ones(len(frame)), frame["x"], rng.normal(size=len(frame))])
    s = np.exp(0.5 * rng.normal(size=len(frame)))
    s[frame["school"] == 7] = 0
    s[3] = 0
    units = two_stage_units(np.zeros(20, dtype=int), frame["school"].to_numpy())
    unit = frame["school"].to_numpy()
    if len(levels) == 2:
        districts = two_stage_units(np.zeros(4, dtype=int), frame["district"].to_numpy())
        schools = two_stage_units(np.arange(20) // 5, unit).stages[1]
        units = Units((*districts.stages, schools))
    named = [("h",), *[(name,) for name in reversed(levels)]]
    units = Units(tuple(replace(st, columns=c) for st, c in zip(units.stages, named, strict=True)))
    rows = made_rows(x, frame["a"], s, frame["y"], covariates={0: (0, 1)}, units=units, unit=unit)
    outermost = frame[levels[-1]].to_numpy()
    moved = np.unique(outermost)
    columns = np.repeat(s[:, None], 1 + 2 * len(moved), axis=1)
    for k, which in enumerate(moved):
        columns[outermost == which, 1 + 2 * k] *= 1 + STEP
        columns[outermost == which, 2 + 2 * k] *= 1 - STEP
    exposure = Exposure(formula="", stabilize=stabilize)
    outcome = Outcome(name="y", multilevel=Multilevel(clusters=levels, scaling=scaling))
    engine, sampling = Engine(), ColumnsOfWeights(columns)
    made = balancing(rows, exposure, fit_propensity(rows, exposure, sampling, engine), sampling, engine)
    found = multilevel_outcome(outcome, "y", rows.outcomes[0], rows.outcome_models[0], rows, made, engine)
    assert not found.failed
    every = found.estimates[scaling]
    joint = joint_influence([every], made.only([0]), engine, rows.blocks)
    influence = np.concatenate([b.weight[:, None] * joint(b) for b in rows.blocks])
    by_cluster = np.array([influence[outermost == which].sum(axis=0) for which in moved])
    derivative = ((every.values[:, 1::2] - every.values[:, 2::2]) / (2 * STEP)).T
    scale = np.abs(derivative).max(axis=0)
    np.testing.assert_allclose(by_cluster / scale, derivative / scale, atol=2e-4)


def test_weights_of_levels_are_used_as_they_are_named():
    frame = pupils()
    rng = np.random.default_rng(2)
    frame["w_school"] = np.exp(rng.normal(size=40))[frame["school"]]
    frame["w_pupil"] = 1 + rng.integers(0, 2, len(frame))
    frame["w"] = frame["w_school"] * frame["w_pupil"]
    named = Multilevel(
        clusters="school", row_weight="w_pupil", cluster_weights="w_school", scaling=("none", "size")
    )
    answer = study(model=named, exposure=Exposure(formula="a ~ x", weighted=False, estimand="ATT")).run(frame)
    # Whole pupils' weights repeat rows; schools' weights are the clusters' own: doubling one school adds it again.
    twice = frame.copy()
    twice["w_school"] = np.where(frame["school"] == 3, 2 * frame["w_school"], frame["w_school"])
    again = pd.concat([frame, frame[frame["school"] == 3].assign(school=99)])
    plan = study(model=named, exposure=Exposure(formula="a ~ x", weighted=False, estimand="ATT"))
    double = plan.run(twice.assign(w=twice["w_school"] * twice["w_pupil"]))
    repeated = plan.run(again.reset_index(drop=True))
    for found in (double, repeated):
        assert not np.allclose(
            found.multilevel[0].parameters.params, answer.multilevel[0].parameters.params, rtol=1e-4
        )
    np.testing.assert_allclose(
        double.multilevel[0].parameters.params, repeated.multilevel[0].parameters.params, rtol=1e-6
    )
    assert not any("overall weight" in note for note in answer.multilevel[0].notes)


def test_levels_made_from_the_overall_weight_are_told():
    with pytest.warns(SteelyardWarning, match="made from the overall weight"):
        answer = study(model=Multilevel(clusters="school")).run(pupils())
    assert answer.multilevel[0].clusters == {"school": 40}


def test_three_levels_and_their_shares():
    frame = pupils(schools=60, seed=8)
    frame["y"] += np.random.default_rng(3).normal(0, 1, 12)[frame["district"]]
    model = Multilevel(clusters=("school", "district"), scaling="none")
    answer = study(model=model, design=Design(weight="w", clusters=("district", "school"))).run(frame)
    found = answer.multilevel[0]
    assert found.clusters == {"school": 60, "district": 12}
    names = list(found.parameters.params.index)
    assert "intraclass correlation: district" in names
    repeated = frame.loc[
        frame.index.repeat(np.where((frame["a"] == 0) & (frame["x"] == 1), 2, 1))
    ].reset_index(drop=True)
    oracle = smf.mixedlm(
        "y ~ x + a", repeated, groups="district", re_formula="1", vc_formula={"school": "0 + C(school)"}
    ).fit(reml=False, gtol=1e-8)
    np.testing.assert_allclose(
        found.parameters.params[["Intercept", "x", "exposure"]], oracle.fe_params, rtol=1e-3, atol=1e-3
    )


def test_no_variance_between_clusters_is_estimated_and_told():
    frame = pupils(seed=4)
    rng = np.random.default_rng(0)
    # Clusters more alike than chance: their means are taken out.
    frame["y"] = rng.normal(size=len(frame))
    frame["y"] -= frame.groupby("school")["y"].transform("mean")
    with pytest.warns(SteelyardWarning, match="variance between clusters .* is estimated as zero"):
        answer = study().run(frame)
    assert answer.multilevel[0].parameters.params["variance: school Intercept"] == 0
    assert np.isfinite(answer.effects.bse.iloc[0])


def test_the_effect_without_the_model_stands_beside_it():
    frame = pupils()
    answer = study().run(frame)
    plain = study(outcome=(Outcome(name="y", covariates="x"),)).run(frame)
    assert answer.multilevel[0].plain == pytest.approx(
        (plain.effects.params.iloc[0], plain.effects.bse.iloc[0])
    )
    bare = study(outcome=(Outcome(name="y", multilevel=Multilevel(clusters="school")),)).run(frame)
    contrast = study(outcome=(Outcome(name="y"),)).run(frame)
    assert bare.multilevel[0].plain[0] == pytest.approx(contrast.effects.params.iloc[0])


def test_the_tables_do_not_guess_from_names():
    # A covariate that is called like a variance is still a coefficient; a slope's name may end in anything.
    frame = pupils().rename(columns={"v": "v_se"})
    frame["variance_x"] = frame["x"]
    model = Multilevel(clusters="school", slopes="v_se", scaling=("size", "none"))
    outcome = Outcome(name="y", covariates="variance_x", multilevel=model)
    answer = study(outcome=(outcome,)).run(frame)
    parameters, effects = multilevel_tables(release(answer))
    shown = {row[0]: row[-1] for row in parameters.rows}
    assert shown["variance_x"] != ""
    assert shown["variance: school v_se"] == ""
    assert "variance: school v_se" in [row[0] for row in effects.rows]
    assert [len(row) for row in effects.rows] == [4] * len(effects.rows)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (
            lambda: study(model=Multilevel(clusters="district")),
            "names clusters district; the design has school",
        ),
        (
            lambda: study(
                model=Multilevel(clusters=("district", "school")),
                design=Design(weight="w", clusters=("district", "school")),
            ),
            "names clusters district, school",
        ),
        (lambda: Multilevel(clusters=("a", "b", "c")), "names a, b, c"),
        (lambda: Multilevel(clusters="a", row_weight="r"), "for some levels and not for others"),
        (
            lambda: Multilevel(clusters=("a", "b"), row_weight="r", cluster_weights="s"),
            r"1 column\(s\) for 2",
        ),
        (lambda: Multilevel(clusters="a", scaling=()), "scaling is empty"),
        (lambda: Multilevel(clusters="a", scaling="sizes"), "size"),
        (
            lambda: Outcome(name="y", family="binomial", multilevel=Multilevel(clusters="a")),
            "multilevel model of a binomial outcome",
        ),
    ],
)
def test_plans_that_cannot_be_are_refused(make, message):
    with pytest.raises(PlanError, match=message):
        make()


def test_columns_of_the_model_are_looked_at_before_anything_runs():
    with pytest.raises(ExtractError, match="nowhere"):
        study(model=Multilevel(clusters="school", slopes="nowhere")).run(pupils())
    text = pupils().assign(v="text")
    with pytest.raises(PlanError, match='"v", a weight or a slope, holds text'):
        study(model=Multilevel(clusters="school", slopes="v")).run(text)
    missing = pupils()
    missing.loc[:9, "v"] = np.nan
    answer = study(model=Multilevel(clusters="school", slopes="v")).run(missing)
    assert answer.checkup.exclusions.set_index("reason")["rows"]["v missing"] == 10


def test_order_of_rows_and_size_of_blocks_do_not_matter():
    frame = pupils()
    model = Multilevel(clusters="school", slopes="exposure")
    base = study(model=model).run(frame, workers=1)
    shuffled = study(model=model).run(
        frame.sample(frac=1, random_state=1).reset_index(drop=True), block_rows=31
    )
    np.testing.assert_allclose(
        shuffled.multilevel[0].parameters.params, base.multilevel[0].parameters.params, rtol=1e-8
    )
    np.testing.assert_allclose(
        shuffled.multilevel[0].parameters.bse, base.multilevel[0].parameters.bse, rtol=1e-7
    )
