from functools import partial

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import ks_2samp

from made import ColumnsOfWeights, made_rows
from steelyard.balance import distributions
from steelyard.balance.columns import TermColumns
from steelyard.balance.distributions import Distance, distances
from steelyard.data.blocks import Term
from steelyard.data.passes import Engine, threads
from steelyard.exposure.propensity import balancing, fit_propensity
from steelyard.plan import Exposure


def columns_of(rng, n):
    """Columns of every kind: normal, skewed, with ties, two-valued, constant but for one, a product."""
    x = np.column_stack(
        [
            np.ones(n),
            rng.normal(size=n),
            np.exp(2 * rng.normal(size=n)),
            rng.integers(0, 7, n),
            rng.random(n) < 0.3,
            rng.normal(size=n).round(1) + 1e6,
        ]
    )
    a = (rng.random(n) < 1 / (1 + np.exp(-0.5 * x[:, 1] + 0.3 * x[:, 4]))).astype(float)
    return x, a


TERMS = (*(Term(f"x{j}", "", "number", j) for j in range(1, 6)), Term("x1 x3", "", "number", 1, 3))


def found(x, a, s, engine, block_rows=64):
    rows = made_rows(x, a, s, terms=TERMS, block_rows=block_rows)
    sampling = ColumnsOfWeights(s[:, None])
    plan = Exposure(formula="", estimand="ATT")
    made = balancing(rows, plan, fit_propensity(rows, plan, sampling, engine), sampling, engine)
    after = np.concatenate([made(block)[:, 0] for block in rows.blocks])
    return distances(TermColumns(TERMS), made, engine, rows.blocks), after


def by_brute_force(values, weight, a):
    return max(
        abs(
            weight[(a == 1) & (values <= t)].sum() / weight[a == 1].sum()
            - weight[(a == 0) & (values <= t)].sum() / weight[a == 0].sum()
        )
        for t in np.unique(values)
    )


@pytest.mark.parametrize("bins", [1, 3, 65_536])
@settings(max_examples=15, deadline=None)
@given(seed=st.integers(0, 10_000))
def test_every_term_before_and_after_by_brute_force(bins, seed):
    rng = np.random.default_rng(seed)
    x, a = columns_of(rng, 300)
    s = rng.exponential(size=300) * (rng.random(300) < 0.9)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(distributions, "Distance", partial(Distance, bins=bins))
        (before, after), w = found(x, a, s, Engine())
    values = np.column_stack([x[:, 1:], x[:, 1] * x[:, 3]])
    for j in range(len(TERMS)):
        np.testing.assert_allclose(before[j], by_brute_force(values[:, j], s, a), atol=1e-12)
        np.testing.assert_allclose(after[j], by_brute_force(values[:, j], w, a), atol=1e-12)


def test_with_equal_weights_it_is_the_two_sample_statistic():
    x, a = columns_of(np.random.default_rng(1), 5000)
    with threads(2) as engine:
        (before, _), _ = found(x, a, np.ones(5000), engine)
    for j in range(5):
        expected = ks_2samp(x[a == 1, j + 1], x[a == 0, j + 1]).statistic
        np.testing.assert_allclose(before[j], expected, atol=1e-12)


def test_integer_weights_are_rows_repeated():
    rng = np.random.default_rng(2)
    x, a = columns_of(rng, 400)
    weight = rng.integers(1, 5, 400)
    (before, _), _ = found(x, a, weight.astype(float), Engine())
    many, of = np.repeat(x, weight, axis=0), np.repeat(a, weight)
    for j in range(5):
        expected = ks_2samp(many[of == 1, j + 1], many[of == 0, j + 1]).statistic
        np.testing.assert_allclose(before[j], expected, atol=1e-12)
