import numpy as np
import pytest
import statsmodels.api as sm

from made import ColumnsOfWeights, made_rows, survey_sample
from steelyard.data.passes import Engine, threads
from steelyard.errors import SeparationError
from steelyard.estimate.fit import fit
from steelyard.estimate.likelihood import Likelihood
from steelyard.estimate.regression import Regression, model_moments

FAMILIES = {
    ("binomial", "logit"): (1, sm.families.Binomial()),
    ("binomial", "probit"): (1, sm.families.Binomial(sm.families.links.Probit())),
    ("gaussian", "identity"): (0, sm.families.Gaussian()),
    ("poisson", "log"): (2, sm.families.Poisson()),
    ("gaussian", "log"): (2, sm.families.Gaussian(sm.families.links.Log())),
}


class Column:
    def __init__(self, place):
        self.place = place

    def __call__(self, block):
        return block.columns[:, self.place]


def fitted(rows, family, link, response, weights, engine=Engine()):  # noqa: B008
    model = rows.exposure_model
    regression = Regression(
        model.names, model.of, Column(response), weights, Likelihood(family, link), 0, "test model"
    )
    return fit(regression, model_moments(regression, engine, rows.blocks), engine, rows.blocks)


@pytest.mark.parametrize(("family", "link"), FAMILIES)
def test_every_column_equals_a_statsmodels_fit_under_its_weights(family, link):
    x, a, w, y, _, _ = survey_sample(1)
    rng = np.random.default_rng(2)
    # Half-sample, bootstrap and lightly perturbed columns beside the full sample.
    columns = w[:, None] * np.column_stack(
        [
            np.ones(len(w)),
            2.0 * rng.integers(0, 2, len(w)),
            rng.poisson(1, len(w)),
            1 + 0.3 * rng.normal(size=len(w)) ** 2,
        ]
    )
    place, sm_family = FAMILIES[family, link]
    rows = made_rows(x, a, w, y)
    found = fitted(rows, family, link, x.shape[1] + place, ColumnsOfWeights(columns))
    assert not found.failed
    for k in range(columns.shape[1]):
        oracle = sm.GLM(y[:, place], x, family=sm_family, freq_weights=columns[:, k]).fit(
            tol=1e-13, maxiter=200
        )
        np.testing.assert_allclose(found.coefficients[:, k], oracle.params, rtol=1e-7, atol=1e-8)


def test_information_is_minus_the_numerical_second_derivative():
    x, a, w, y, _, _ = survey_sample(3)
    for (family, link), (place, sm_family) in FAMILIES.items():
        rows = made_rows(x, a, w, y)
        found = fitted(rows, family, link, x.shape[1] + place, ColumnsOfWeights(w[:, None]))
        beta = found.coefficients[:, 0]

        def score(b, place=place, sm_family=sm_family):
            mu = sm_family.fitted(x @ b)
            return x.T @ (w * (y[:, place] - mu) / (sm_family.variance(mu) * sm_family.link.deriv(mu)))

        h = 1e-6
        jacobian = np.column_stack(
            [(score(beta + h * e) - score(beta - h * e)) / (2 * h) for e in np.eye(len(beta))]
        )
        t = found.scale.matrix()
        np.testing.assert_allclose(t @ found.information.inverse() @ t.T, np.linalg.inv(-jacobian), rtol=1e-5)


def test_scale_of_weights_and_columns_and_blocks_do_not_matter():
    x, a, w, y, _, _ = survey_sample(4)
    base = fitted(made_rows(x, a, w, y), "binomial", "logit", x.shape[1] + 1, ColumnsOfWeights(w[:, None]))
    stretched = x * [1, 1e6, 1e-6, 1]
    other = fitted(
        made_rows(stretched, a, w, y, block_rows=17),
        "binomial",
        "logit",
        x.shape[1] + 1,
        ColumnsOfWeights(1e9 * w[:, None]),
    )
    np.testing.assert_allclose(
        other.coefficients[:, 0] * [1, 1e6, 1e-6, 1], base.coefficients[:, 0], rtol=1e-10
    )


def test_workers_give_the_same_bits():
    x, a, w, y, _, _ = survey_sample(5, n=2000)
    rows = made_rows(x, a, w, y)
    one = fitted(rows, "binomial", "probit", x.shape[1] + 1, ColumnsOfWeights(w[:, None]))
    with threads(3) as engine:
        three = fitted(rows, "binomial", "probit", x.shape[1] + 1, ColumnsOfWeights(w[:, None]), engine)
    assert np.array_equal(one.scaled, three.scaled)


def test_a_large_mean_costs_no_digits():
    x, a, w, y, _, _ = survey_sample(6)
    shifted = x.copy()
    shifted[:, 1] += 1e6
    base = fitted(made_rows(x, a, w, y), "binomial", "logit", x.shape[1] + 1, ColumnsOfWeights(w[:, None]))
    other = fitted(
        made_rows(shifted, a, w, y), "binomial", "logit", x.shape[1] + 1, ColumnsOfWeights(w[:, None])
    )
    assert not other.aliased
    np.testing.assert_allclose(other.coefficients[1:, 0], base.coefficients[1:, 0], rtol=1e-8)


def test_redundant_columns_are_named_and_leave_the_fit_as_it_is():
    x, a, w, y, _, _ = survey_sample(7)
    wide = np.column_stack([x, x[:, 1] - 2 * x[:, 2], np.full(len(w), 3.0)])
    rows = made_rows(wide, a, w, y, names=["Intercept", "x1", "x2", "x3", "mix", "flat"])
    found = fitted(rows, "binomial", "logit", wide.shape[1] + 1, ColumnsOfWeights(w[:, None]))
    assert found.aliased == ("mix", "flat")
    oracle = sm.GLM(y[:, 1], x, family=sm.families.Binomial(), freq_weights=w).fit(tol=1e-13)
    np.testing.assert_allclose(found.coefficients[:4, 0], oracle.params, rtol=1e-8)


def test_complete_separation_by_two_columns_names_them():
    rng = np.random.default_rng(8)
    x = np.column_stack([np.ones(400), rng.normal(size=(400, 3))])
    a = (x[:, 1] + x[:, 2] > 0).astype(float)
    rows = made_rows(x, a, np.ones(400), a[:, None])
    with pytest.raises(SeparationError, match=r"together, x1, x2.* tell .* for 3[0-9]{2} of 400 rows"):
        fitted(rows, "binomial", "logit", 4, ColumnsOfWeights(np.ones((400, 1))))


def test_quasi_separation_is_found_too():
    rng = np.random.default_rng(9)
    x = np.column_stack([np.ones(400), rng.normal(size=(400, 2)), rng.random((400, 2)) < 0.3])
    a = (rng.random(400) < 0.5).astype(float)
    a[(x[:, 3] == 1) & (x[:, 4] == 1)] = 1
    x = np.column_stack([x, x[:, 3] * x[:, 4]])
    rows = made_rows(x, a, np.ones(400), a[:, None])
    with pytest.raises(SeparationError, match="x5"):
        fitted(rows, "binomial", "probit", 6, ColumnsOfWeights(np.ones((400, 1))))


def test_a_replicate_that_separates_is_named_and_the_others_stand():
    x, a, w, y, _, _ = survey_sample(10)
    keep = (x[:, 3] == 0) | (y[:, 1] == 1)
    columns = np.column_stack([w, w * keep, w])
    found = fitted(made_rows(x, a, w, y), "binomial", "logit", x.shape[1] + 1, ColumnsOfWeights(columns))
    assert list(found.failed) == [1]
    assert "without bound" in found.failed[1]
    assert np.isnan(found.coefficients[:, 1]).all()
    np.testing.assert_allclose(found.coefficients[:, 2], found.coefficients[:, 0], rtol=1e-10)
