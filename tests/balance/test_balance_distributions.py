import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import ks_2samp

from made import ColumnsOfWeights, made_rows, survey_sample
from steelyard.balance.columns import TermColumns
from steelyard.balance.distributions import distance, distances, signed_shares
from steelyard.data.blocks import Term
from steelyard.data.passes import Engine, threads
from steelyard.exposure.propensity import balancing, fit_propensity
from steelyard.plan import Exposure


@given(st.integers(0, 10_000))
def test_with_equal_weights_it_is_the_two_sample_statistic(seed):
    rng = np.random.default_rng(seed)
    values = rng.integers(0, 9, 50).astype(float)
    exposure = (np.arange(50) < 20).astype(float)
    (got,) = distance(values, (signed_shares(np.ones(50), exposure),))
    np.testing.assert_allclose(got, ks_2samp(values[:20], values[20:]).statistic, atol=1e-12)


@given(st.integers(0, 10_000))
def test_integer_weights_are_rows_repeated(seed):
    rng = np.random.default_rng(seed)
    values, exposure = rng.normal(size=40).round(1), (np.arange(40) < 15).astype(float)
    weight = rng.integers(1, 5, 40)
    (got,) = distance(values, (signed_shares(weight.astype(float), exposure),))
    many, of = np.repeat(values, weight), np.repeat(exposure, weight)
    np.testing.assert_allclose(got, ks_2samp(many[of == 1], many[of == 0]).statistic, atol=1e-12)


def test_every_term_before_and_after_by_brute_force():
    x, a, s, y, _, _ = survey_sample(12, n=300, p=7)
    terms = (*(Term(f"x{j}", "", "number", j) for j in range(1, 7)), Term("x1 x2", "", "number", 1, 2))
    rows = made_rows(x, a, s, y, terms=terms)
    sampling = ColumnsOfWeights(s[:, None])
    plan = Exposure(formula="", estimand="ATT")
    made = balancing(rows, plan, fit_propensity(rows, plan, sampling, Engine()), sampling, Engine())
    w = np.concatenate([made(block)[:, 0] for block in rows.blocks])
    with threads(2) as engine:
        before, after = distances(TermColumns(terms), made, engine, rows.blocks)
    values = np.column_stack([x[:, 1:], x[:, 1] * x[:, 2]])
    for j in range(7):
        for got, weight in ((before[j], s), (after[j], w)):
            gaps = [
                abs(
                    weight[(a == 1) & (values[:, j] <= t)].sum() / weight[a == 1].sum()
                    - weight[(a == 0) & (values[:, j] <= t)].sum() / weight[a == 0].sum()
                )
                for t in values[:, j]
            ]
            np.testing.assert_allclose(got, max(gaps), atol=1e-12)
