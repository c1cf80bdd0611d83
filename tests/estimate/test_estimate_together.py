"""The fast path for replicates against a fit a replicate: plain Newton written out here, and statsmodels."""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm

from made import ColumnsOfWeights, made_rows
from steelyard.data.passes import Engine
from steelyard.estimate import together
from steelyard.estimate.fit import fit
from steelyard.estimate.likelihood import Likelihood
from steelyard.estimate.regression import Regression, model_moments

PSUS = 60


class Response:
    def __call__(self, block):
        return block.exposure


class ByUnit(ColumnsOfWeights):
    """Columns that are a unit's multiplier times the first: the kind that may start from sums by unit."""

    def __init__(self, weight, unit, multipliers, which=None):
        self.weight, self.of_row, self.table = weight, unit, multipliers
        super().__init__(weight[:, None] * multipliers[unit])

    @property
    def units(self):
        return len(self.table)

    def unit(self, block):
        return self.of_row[block.position]

    def multipliers(self, units):
        return self.table[units]

    def only(self, columns):
        return ByUnit(self.weight, self.of_row, self.table[:, list(columns)])


def data(kind, seed=3, n=3000):
    rng = np.random.default_rng(seed)
    unit = np.sort(rng.integers(0, PSUS, n))
    x = np.column_stack([np.ones(n), rng.normal(size=(n, 3)), rng.random(n) < 0.5, np.zeros(n)])
    # The last column is a rare category that lives in two PSUs alone.
    x[(unit == 7) | (unit == 8), 5] = rng.random(((unit == 7) | (unit == 8)).sum()) < 0.5
    line = {"easy": -0.2, "rare exposure": -5.3, "near separation": 0.0, "dropped category": -0.2}[kind]
    slope = np.array([0.0, 0.6, -0.4, 0.2, 0.3, 0.4])
    if kind == "near separation":
        slope = slope * np.array([1, 9, 1, 1, 1, 1])
    a = (rng.random(n) < 1 / (1 + np.exp(-(line + x @ slope)))).astype(float)
    w = np.exp(0.5 * rng.normal(size=n))
    multipliers = np.ones((PSUS, 31))
    drawn = rng.multinomial(PSUS - 1, np.ones(PSUS) / PSUS, size=30).T * PSUS / (PSUS - 1)
    multipliers[:, 1:] = drawn if kind != "rare exposure" else 0.3 + 0.7 * drawn
    if kind == "dropped category":
        multipliers[7:9, 1:6] = 0
    else:
        multipliers[7:9, 1:] = np.maximum(multipliers[7:9, 1:], 0.2)
    return x, a, w, unit, multipliers


def newton(x, a, w, start):
    """Plain Newton for one column of weights; columns without any weight stay where they start."""
    use = (np.abs(x) * w[:, None]).sum(axis=0) > 0
    b = start.copy()
    for _ in range(200):
        e = 1 / (1 + np.exp(-(x @ b)))
        information = x[:, use].T @ (x[:, use] * (w * e * (1 - e))[:, None])
        step = np.linalg.solve(information, x[:, use].T @ (w * (a - e)))
        b[use] += step
        if np.abs(step).max() < 1e-13:
            return b
    raise AssertionError("the oracle did not settle")


def fitted(x, a, w, columns, block_rows=256):
    rows = made_rows(x, a, w, block_rows=block_rows)
    model = rows.exposure_model
    regression = Regression(
        model.names, model.of, Response(), columns, Likelihood("binomial", "logit"), 0, "test model"
    )
    return fit(regression, model_moments(regression, Engine(), rows.blocks), Engine(), rows.blocks)


@pytest.mark.parametrize("kind", ["easy", "rare exposure", "near separation", "dropped category"])
@pytest.mark.parametrize("by_unit", [True, False])
def test_every_coefficient_of_every_replicate_is_that_of_its_own_newton(kind, by_unit):
    x, a, w, unit, multipliers = data(kind)
    if kind == "rare exposure":
        assert 0.005 < a.mean() < 0.015
    columns = w[:, None] * multipliers[unit]
    found = fitted(x, a, w, ByUnit(w, unit, multipliers) if by_unit else ColumnsOfWeights(columns))
    assert not found.failed
    start = newton(x, a, w, np.zeros(x.shape[1]))
    for k in range(multipliers.shape[1]):
        expected = newton(x, a, columns[:, k], start)
        np.testing.assert_allclose(found.coefficients[:, k], expected, rtol=1e-8, atol=1e-8)


def test_a_dropped_category_keeps_the_full_samples_coefficient_and_leaves_the_others_exact():
    x, a, w, unit, multipliers = data("dropped category")
    found = fitted(x, a, w, ByUnit(w, unit, multipliers))
    for k in range(1, 6):
        assert found.coefficients[5, k] == found.coefficients[5, 0]
        columns = w * multipliers[unit, k]
        oracle = sm.GLM(a, x[:, :5], family=sm.families.Binomial(), freq_weights=columns).fit(tol=1e-14)
        np.testing.assert_allclose(found.coefficients[:5, k], oracle.params, rtol=1e-8, atol=1e-8)


def test_a_replicate_that_separates_fails_by_name_and_no_other_does():
    x, a, w, unit, multipliers = data("easy")
    # Replicate 4 keeps only rows that the first covariate tells apart.
    columns = w[:, None] * multipliers[unit]
    columns[:, 4] = w * ((x[:, 1] > 0.2) == (a == 1)) * (np.abs(x[:, 1] - 0.2) > 0.1)
    found = fitted(x, a, w, ColumnsOfWeights(columns))
    assert list(found.failed) == [4]
    assert "tell the two groups apart" in found.failed[4]
    assert np.isnan(found.coefficients[:, 4]).all()
    assert np.isfinite(np.delete(found.coefficients, 4, axis=1)).all()


def test_columns_are_few_passes_away_from_the_full_sample():
    x, a, w, unit, multipliers = data("easy")
    rows = made_rows(x, a, w, block_rows=512)
    seen = []
    engine = Engine(progress=lambda what, done, total: seen.append(what) if done == total else None)
    model = rows.exposure_model
    regression = Regression(
        model.names,
        model.of,
        Response(),
        ByUnit(w, unit, multipliers),
        Likelihood("binomial", "logit"),
        0,
        "test model",
    )
    fit(regression, model_moments(regression, engine, rows.blocks), engine, rows.blocks)
    assert seen.count("test model: replicates") <= 7
    assert seen.count("test model: sums by unit") == 1


def test_too_many_units_for_sums_take_the_shared_steps(monkeypatch):
    x, a, w, unit, multipliers = data("easy")
    with_sums = fitted(x, a, w, ByUnit(w, unit, multipliers))
    monkeypatch.setattr(together, "MOST_SUMS", 10)
    without = fitted(x, a, w, ByUnit(w, unit, multipliers))
    np.testing.assert_allclose(with_sums.coefficients, without.coefficients, rtol=1e-8, atol=1e-8)


def test_negative_weights_of_a_producer_are_used_as_they_are():
    x, a, w, unit, multipliers = data("easy")
    columns = w[:, None] * multipliers[unit]
    columns[::50, 3] *= -0.2
    found = fitted(x, a, w, ColumnsOfWeights(columns))
    start = newton(x, a, w, np.zeros(x.shape[1]))
    np.testing.assert_allclose(
        found.coefficients[:, 3], newton(x, a, columns[:, 3], start), rtol=1e-8, atol=1e-8
    )
