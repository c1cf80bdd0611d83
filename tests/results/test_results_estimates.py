import numpy as np
import pytest
import statsmodels.api as sm
from scipy import stats

from steelyard.results.estimates import EstimateResults, chi_square, wald_f
from steelyard.results.sensitivity import e_value, e_value_of_limit, ratio_of_difference


@pytest.fixture
def ols():
    rng = np.random.default_rng(0)
    x = sm.add_constant(rng.normal(size=(40, 2)))
    return sm.OLS(x @ [1, 2, 0.3] + rng.normal(size=40), x).fit()


def test_results_speak_as_statsmodels_does(ols):
    ours = EstimateResults(ols.params, ols.cov_params(), ["const", "x1", "x2"], ols.df_resid, title="t")
    np.testing.assert_allclose(ours.params, ols.params)
    np.testing.assert_allclose(ours.bse, ols.bse)
    np.testing.assert_allclose(ours.tvalues, ols.tvalues)
    np.testing.assert_allclose(ours.pvalues, ols.pvalues)
    np.testing.assert_allclose(ours.conf_int(), ols.conf_int())
    np.testing.assert_allclose(ours.conf_int(0.1), ols.conf_int(0.1))
    np.testing.assert_allclose(ours.cov_params(), ols.cov_params())
    for restriction in ("x1 = x2", [[0, 1, -1]]):
        assert ours.t_test(restriction).pvalue == pytest.approx(ols.t_test(restriction).pvalue)
    assert ours.wald_test("x1 = 0, x2 = 0").pvalue == pytest.approx(
        float(ols.wald_test("x1 = 0, x2 = 0", scalar=True).pvalue)
    )
    text = str(ours.summary())
    assert "x1" in text
    assert f"{ols.params[1]:.4f}" in text


def test_without_degrees_of_freedom_there_is_no_interval():
    ours = EstimateResults(np.array([1.0]), np.array([[0.25]]), ["a"], 0)
    assert ours.bse.iloc[0] == 0.5
    assert ours.conf_int().isna().all(axis=None)
    assert ours.pvalues.isna().all()


def test_adjusted_wald_is_hotelling():
    # With a sample covariance of n vectors, df = n - 1, the adjusted Wald F is Hotelling's T-squared test.
    rng = np.random.default_rng(1)
    z = rng.normal(size=(25, 4)) + 0.2
    mean, covariance = z.mean(axis=0), np.cov(z.T) / 25
    got = wald_f(mean, covariance, 24)
    t2 = mean @ np.linalg.solve(covariance, mean)
    f = t2 * (25 - 4) / (4 * 24)
    assert got.statistic == pytest.approx(f)
    assert got.df == (4, 21)
    assert got.p_value == pytest.approx(stats.f.sf(f, 4, 21))
    redundant = np.vstack([np.eye(4), [[-1, -1, -1, -1]]])
    again = wald_f(redundant @ mean, redundant @ covariance @ redundant.T, 24)
    assert again.statistic == pytest.approx(f)
    assert again.df == (4, 21)


def test_too_few_degrees_of_freedom_leave_the_test_undefined():
    got = wald_f(np.ones(4), np.eye(4), 3)
    assert np.isnan(got.statistic)
    assert np.isnan(wald_f(np.zeros(0), np.zeros((0, 0)), 3).p_value)


def test_chi_square_counts_the_rank():
    v, c = np.array([1.0, 2.0, 3.0]), np.ones((3, 3)) + np.diag([1, 1, 0])
    got = chi_square(v, c)
    assert got.df == (3, None)
    assert got.p_value == pytest.approx(stats.chi2.sf(v @ np.linalg.solve(c, v), 3))


def test_e_values_published():
    # VanderWeele & Ding (2017): risk ratio 3.9, lower limit 1.8; value from memory.
    assert e_value(3.9) == pytest.approx(7.26, abs=0.005)
    assert e_value_of_limit(1.8, 8.7) == pytest.approx(3.0, abs=0.005)


def test_e_values_of_protection_are_those_of_the_inverse_and_one_is_one():
    assert e_value(1 / 3.9) == pytest.approx(e_value(3.9))
    assert e_value_of_limit(0.2, 1 / 1.8) == pytest.approx(e_value(1.8))
    assert e_value_of_limit(0.9, 1.1) == 1
    assert e_value(1.0) == 1
    with pytest.raises(ValueError, match="positive"):
        e_value(0.0)


def test_ratio_of_a_standardized_difference():
    # VanderWeele & Ding (2017), table 2: exp(0.91 d), limits exp(0.91 d -/+ 1.78 s).
    ratio, low, high = ratio_of_difference(2.0, 0.5, 4.0)
    assert (ratio, low, high) == pytest.approx(tuple(np.exp([0.455, 0.455 - 0.2225, 0.455 + 0.2225])))
