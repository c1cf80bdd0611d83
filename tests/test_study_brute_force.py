"""The whole job from a frame, against brute force in plain numpy (tests/oracle.py)."""

from __future__ import annotations

from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor

import numpy as np
import pandas as pd
import pytest
from scipy import stats

import oracle
from steelyard.plan import Balance, Data, Design, Exposure, Outcome, Variance
from steelyard.study import Study

pytestmark = pytest.mark.filterwarnings("ignore::steelyard.errors.SteelyardWarning")


def extract(seed=0, strata=6, areas=5, households=4, persons=3):
    """A confounded three-stage sample with populations at every stage."""
    rng = np.random.default_rng(seed)
    records = []
    for h in range(strata):
        for area in range(areas):
            shift = rng.normal()
            for household in range(households):
                for _ in range(rng.integers(2, persons + 2)):
                    x1, x2 = rng.normal() + 0.5 * shift, rng.integers(0, 3)
                    a = int(rng.random() < oracle.expit(-0.3 + 0.7 * x1 - 0.3 * x2 + 0.2 * h))
                    y = 1 + 0.5 * a + x1 - 0.4 * x2 + shift + rng.normal()
                    records.append(
                        (h, area, household, x1, x2, a, y, int(rng.random() < oracle.expit(y - 1)))
                    )
    frame = pd.DataFrame(records, columns=["h", "area", "hh", "x1", "x2", "a", "y", "b"])
    frame["w"] = np.exp(0.4 * rng.normal(size=len(frame))) * (1 + frame["h"])
    frame["areas"] = areas * (2 + frame["h"])
    frame["hhs"] = households * (3 + frame["area"])
    frame["persons"] = frame.groupby(["h", "area", "hh"])["a"].transform("size") + frame["hh"] % 2
    return frame


def study(**changes):
    given = {
        "design": Design(weight="w", strata="h", clusters="area"),
        "exposure": Exposure(formula="a ~ x1 + C(x2)"),
        "outcome": (Outcome(name="y"), Outcome(name="b", family="binomial")),
    }
    return Study(**(given | changes))


def design_columns(frame):
    return np.column_stack([np.ones(len(frame)), frame["x2"] == 1, frame["x2"] == 2, frame["x1"]]).astype(
        float
    )


def expected(frame, estimand, inside=None):
    """Differences of the means of y and b, and s*u for every row of the frame (zero outside the domain)."""
    use = np.ones(len(frame), dtype=bool) if inside is None else np.asarray(inside)
    part = frame[use]
    s = part["w"].to_numpy()
    z = part[["y", "b"]].to_numpy(dtype=float)
    difference, u, m1, m0 = oracle.stacked_influence(
        design_columns(part), part["a"].to_numpy(dtype=float), s, z, estimand
    )
    total = np.zeros((len(frame), 2))
    total[use] = s[:, None] * u
    return difference, total, m1, m0


def agree(answer, difference, variance, df):
    table = answer.effects.table
    np.testing.assert_allclose(table["estimate"], difference, rtol=1e-8)
    np.testing.assert_allclose(answer.effects.cov_params(), variance, rtol=1e-6, atol=1e-12)
    np.testing.assert_allclose(table["std_error"], np.sqrt(np.diag(variance)), rtol=1e-6)
    reach = stats.t.ppf(0.975, df) * np.sqrt(np.diag(variance))
    np.testing.assert_allclose(table["ci_low"], difference - reach, rtol=1e-6)
    assert (table["df"] == df).all()


@pytest.mark.parametrize("estimand", ["ATE", "ATT", "ATC", "ATO"])
def test_effect_and_standard_error_with_the_propensity_estimated(estimand):
    frame = extract(1)
    difference, z, m1, m0 = expected(frame, estimand)
    answer = study(exposure=Exposure(formula="a ~ x1 + C(x2)", estimand=estimand)).run(frame)
    agree(answer, difference, oracle.stratified_variance(z, frame["h"].array, frame["area"].array), 30 - 6)
    np.testing.assert_allclose(answer.effects.table["exposed"], m1, rtol=1e-8)
    np.testing.assert_allclose(answer.effects.table["reference"], m0, rtol=1e-8)


def test_three_stages_with_populations():
    frame = extract(2)
    difference, z, _, _ = expected(frame, "ATE")
    ids = frame[["h", "area", "hh"]].assign(row=np.arange(len(frame))).to_numpy()
    populations = frame[["areas", "hhs", "persons"]].to_numpy(dtype=float)
    design = Design(weight="w", strata="h", clusters=["area", "hh"], population=["areas", "hhs", "persons"])
    answer = study(design=design).run(frame)
    agree(answer, difference, oracle.staged_variance(z, ids, populations), 24)
    for stages in (1, 2):
        given = populations.copy()
        given[:, stages:] = np.nan
        design = Design(weight="w", strata="h", clusters=["area", "hh"], population=["areas", "hhs"][:stages])
        agree(study(design=design).run(frame), difference, oracle.staged_variance(z, ids, given), 24)


def test_rows_as_psus_with_and_without_strata_and_population():
    frame = extract(3)
    frame["size"] = frame.groupby("h")["a"].transform("size") * 4
    difference, z, _, _ = expected(frame, "ATT")
    exposure = Exposure(formula="a ~ x1 + C(x2)", estimand="ATT")
    n = len(frame)
    answer = study(exposure=exposure, design=Design(weight="w")).run(frame)
    agree(answer, difference, oracle.stratified_variance(z, np.zeros(n), np.arange(n)), n - 1)
    answer = study(exposure=exposure, design=Design(weight="w", strata="h", population="size")).run(frame)
    ids = np.column_stack([frame["h"], np.arange(n)])
    agree(answer, difference, oracle.staged_variance(z, ids, frame[["size"]].to_numpy(dtype=float)), n - 6)


@pytest.mark.parametrize("treatment", ["recentre", "collapse", "self-representing"])
def test_each_treatment_of_a_lone_psu(treatment):
    frame = extract(4)
    frame = frame[((frame["h"] != 2) & (frame["h"] != 5)) | (frame["area"] == 1)].reset_index(drop=True)
    difference, z, _, _ = expected(frame, "ATE")
    variance = oracle.stratified_variance(z, frame["h"].array, frame["area"].array, treatment)
    design = Design(weight="w", strata="h", clusters="area", single_psu=treatment)
    answer = study(design=design).run(frame)
    np.testing.assert_allclose(answer.effects.table["estimate"], difference, rtol=1e-8)
    np.testing.assert_allclose(answer.effects.cov_params(), variance, rtol=1e-6, atol=1e-12)


def test_a_domain_stays_in_the_design():
    frame = extract(5)
    inside = (frame["x1"] > -0.5) & (frame["h"] != 3)
    difference, z, _, _ = expected(frame, "ATO", inside)
    answer = study(
        exposure=Exposure(formula="a ~ x1 + C(x2)", estimand="ATO"), data=Data(domain="x1 > -0.5 and h != 3")
    ).run(frame)
    variance = oracle.stratified_variance(z, frame["h"].array, frame["area"].array)
    agree(answer, difference, variance, 25 - 5)
    assert (answer.effects.table["rows"] == inside.sum()).all()


def test_missing_rows_leave_the_domain_and_stay_in_the_design():
    frame = extract(6)
    frame["x1"] = frame["x1"].where(frame.index % 11 != 0)
    frame.loc[frame.index % 13 == 0, "y"] = 999.0
    inside = frame["x1"].notna() & (frame["y"] != 999)
    difference, z, _, _ = expected(frame, "ATE", inside)
    answer = study(data=Data(missing={"y": (999,)})).run(frame)
    agree(answer, difference, oracle.stratified_variance(z, frame["h"].array, frame["area"].array), 24)


def test_known_propensity_leaves_its_term_out():
    frame = extract(7)
    a, s = frame["a"].to_numpy(dtype=float), frame["w"].to_numpy()
    x = design_columns(frame)
    c = oracle.balancing_weight("ATE", oracle.expit(x @ oracle.logit_fit(x, a, s)), a)
    z = frame[["y", "b"]].to_numpy(dtype=float)
    n1, n0 = (s * c * a).sum(), (s * c * (1 - a)).sum()
    m1, m0 = (s * c * a) @ z / n1, (s * c * (1 - a)) @ z / n0
    u = (s * c * a / n1)[:, None] * (z - m1) - (s * c * (1 - a) / n0)[:, None] * (z - m0)
    variance = oracle.stratified_variance(u, frame["h"].array, frame["area"].array)
    answer = study(variance=Variance(propensity="known")).run(frame)
    agree(answer, m1 - m0, variance, 24)
    np.testing.assert_allclose(answer.effects_known.cov_params(), variance, rtol=1e-6)


@pytest.mark.parametrize("estimand", ["ATE", "ATC"])
def test_balance_table(estimand):
    frame = extract(8)
    a, s = frame["a"].to_numpy(dtype=float), frame["w"].to_numpy()
    x = design_columns(frame)
    terms = np.column_stack([frame["x2"] == k for k in range(3)] + [frame["x1"], frame["hh"]]).astype(float)
    answer = study(
        exposure=Exposure(formula="a ~ x1 + C(x2)", estimand=estimand), balance=Balance(columns="hh")
    ).run(frame)
    table = answer.balance.table
    key = table["term"] + ":" + table["level"]
    order = [list(key).index(k) for k in ("x2:0", "x2:1", "x2:2", "x1:", "hh:")]
    table = table.iloc[order]
    difference, u, m1, m0 = oracle.stacked_influence(x, a, s, terms, estimand)
    mean1, mean0 = (s * a) @ terms / (s * a).sum(), (s * (1 - a)) @ terms / (s * (1 - a)).sum()
    v1 = (s * a) @ (terms - mean1) ** 2 / (s * a).sum()
    v0 = (s * (1 - a)) @ (terms - mean0) ** 2 / (s * (1 - a)).sum()
    spread = np.sqrt((v1 + v0) / 2) if estimand == "ATE" else np.sqrt(v0)
    np.testing.assert_allclose(table["mean_exposed_before"], mean1, rtol=1e-10)
    np.testing.assert_allclose(table["mean_reference_after"], m0, rtol=1e-8)
    np.testing.assert_allclose(table["smd_before"], (mean1 - mean0) / spread, rtol=1e-9)
    np.testing.assert_allclose(table["smd_after"], difference / spread, rtol=1e-6, atol=1e-9)
    np.testing.assert_allclose(table["variance_ratio_before"].iloc[3:], (v1 / v0)[3:], rtol=1e-9)
    w = s * oracle.balancing_weight(estimand, oracle.expit(x @ oracle.logit_fit(x, a, s)), a)
    after = [(w * g) @ (terms - m) ** 2 / (w * g).sum() for g, m in ((a, m1), (1 - a, m0))]
    np.testing.assert_allclose(table["variance_ratio_after"].iloc[3:], (after[0] / after[1])[3:], rtol=1e-7)
    variance = oracle.stratified_variance(s[:, None] * u, frame["h"].array, frame["area"].array)
    se = np.sqrt(np.diag(variance))
    np.testing.assert_allclose(table["se_after"], se, rtol=1e-5)
    np.testing.assert_allclose(table["p_after"], 2 * stats.t.sf(np.abs(difference / se), 24), rtol=1e-4)
    before = (s * a / (s * a).sum())[:, None] * (terms - mean1) - (s * (1 - a) / (s * (1 - a)).sum())[
        :, None
    ] * (terms - mean0)
    variance = oracle.stratified_variance(before, frame["h"].array, frame["area"].array)
    np.testing.assert_allclose(table["se_before"], np.sqrt(np.diag(variance)), rtol=1e-8)
    # One level of x2 is redundant in the joint test: four free differences.
    free = [1, 2, 3, 4]
    form = (mean1 - mean0)[free] @ np.linalg.solve(variance[np.ix_(free, free)], (mean1 - mean0)[free])
    joint = answer.balance.joint_before
    assert joint.df == (4, 24 - 4 + 1)
    assert joint.statistic == pytest.approx(form * 21 / (24 * 4), rel=1e-7)


def test_over_identification_statistic():
    frame = extract(9)
    a, s, x = frame["a"].to_numpy(dtype=float), frame["w"].to_numpy(), design_columns(frame)

    def equations(g, total):
        e = oracle.expit(x @ g)
        moment = x * (a / e - (1 - a) / (1 - e))[:, None]
        return np.column_stack([x * (a - e)[:, None], moment - total / s.sum()])

    g = oracle.logit_fit(x, a, s)
    e = oracle.expit(x @ g)
    total = s @ (x * (a / e - (1 - a) / (1 - e))[:, None])
    theta = np.concatenate([g, total])
    jacobian = np.empty((8, 8))
    for j in range(8):
        h = 1e-6 * max(1, abs(theta[j]))
        up, down = theta.copy(), theta.copy()
        up[j] += h
        down[j] -= h
        jacobian[:, j] = (s @ equations(up[:4], up[4:]) - s @ equations(down[:4], down[4:])) / (2 * h)
    u = -np.linalg.solve(jacobian, equations(g, 0 * total).T).T[:, 4:]
    variance = oracle.stratified_variance(s[:, None] * u, frame["h"].array, frame["area"].array)
    form = total @ np.linalg.solve(variance, total)
    found = study().run(frame).balance.over_identification
    assert found.df == (4, None)
    assert found.statistic == pytest.approx(form, rel=1e-5)
    assert found.p_value == pytest.approx(stats.chi2.sf(form, 4), rel=1e-4)


def test_the_answer_does_not_depend_on_blocks_workers_scale_or_order():
    frame = extract(10)
    base = study().run(frame, block_rows=50, workers=1)
    other = study().run(
        frame.sample(frac=1, random_state=1).assign(w=lambda f: 1e6 * f["w"]), block_rows=33, workers=3
    )
    for name in ("effects", "propensity"):
        one, two = getattr(base, name), getattr(other, name)
        np.testing.assert_allclose(two.params, one.params, rtol=1e-10)
        np.testing.assert_allclose(two.bse, one.bse, rtol=1e-10)
    number = base.balance.table.select_dtypes("number")
    np.testing.assert_allclose(other.balance.table[number.columns], number, rtol=1e-8, atol=1e-10)
    same = study().run(frame, block_rows=50, workers=2)
    assert np.array_equal(same.effects.params, base.effects.params)
    assert np.array_equal(same.effects.cov_params(), base.effects.cov_params())


def test_integer_weights_are_repeated_rows():
    frame = extract(11)
    frame["w"] = 1 + frame.index % 3
    long = frame.loc[frame.index.repeat(frame["w"])].assign(w=1).reset_index(drop=True)
    one, two = study().run(frame), study().run(long)
    np.testing.assert_allclose(one.effects.params, two.effects.params, rtol=1e-10)
    np.testing.assert_allclose(one.propensity.params, two.propensity.params, rtol=1e-9)
    # Whole clusters are repeated rows' clusters, so here the standard errors agree as well.
    np.testing.assert_allclose(one.effects.bse, two.effects.bse, rtol=1e-9)


def test_weight_file_holds_every_row_in_order():
    frame = extract(12)
    answer = study(data=Data(domain="x1 > 0")).run(frame, block_rows=37)
    table = pd.concat([batch.to_pandas() for batch in answer.weights()], ignore_index=True)
    inside = (frame["x1"] > 0).to_numpy()
    assert table["row"].tolist() == list(range(len(frame)))
    assert (table["in_domain"] == inside).all()
    np.testing.assert_array_equal(table["sampling_weight"], frame["w"])
    assert table.loc[~inside, ["propensity", "balancing_weight"]].isna().all(axis=None)
    assert (table.loc[~inside, "combined_weight"] == 0).all()
    part = frame[inside]
    x, a, s = design_columns(part), part["a"].to_numpy(dtype=float), part["w"].to_numpy()
    e = oracle.expit(x @ oracle.logit_fit(x, a, s))
    np.testing.assert_allclose(table.loc[inside, "propensity"], e, rtol=1e-9)
    np.testing.assert_allclose(
        table.loc[inside, "combined_weight"], s * oracle.balancing_weight("ATE", e, a), rtol=1e-9
    )


def test_any_executor_gives_the_same_bits():
    frame = extract(13)
    base = study().run(frame, block_rows=50, workers=1)
    for pool in (ProcessPoolExecutor(2), ThreadPoolExecutor(3)):
        with pool:
            other = study().run(frame, block_rows=50, executor=pool)
        assert np.array_equal(other.effects.params, base.effects.params)
        assert np.array_equal(other.effects.cov_params(), base.effects.cov_params())
        assert other.balance.table.equals(base.balance.table)
