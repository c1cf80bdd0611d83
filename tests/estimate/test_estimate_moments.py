from functools import reduce

import numpy as np
from hypothesis import given
from hypothesis import strategies as st
from statsmodels.stats.weightstats import DescrStatsW

from steelyard.estimate.moments import merge_moments, moments_of


@given(st.integers(0, 10_000), st.integers(1, 60), st.floats(0, 1e6))
def test_moments_in_parts_are_those_of_the_whole(seed, size, shift):
    rng = np.random.default_rng(seed)
    values = rng.normal(size=(120, 3)) + shift
    weight = rng.exponential(size=120) * (rng.random(120) < 0.9)
    exposure = (rng.random(120) < 0.4).astype(float)
    exposure[:2], weight[:2] = (0, 1), 1
    parts = [
        moments_of(values[i : i + size], weight[i : i + size, None], exposure[i : i + size])[0]
        for i in range(0, 120, size)
    ]
    got = reduce(merge_moments, parts)
    for row, group in ((0, 1), (1, 0)):
        use = (exposure == group) & (weight > 0)
        oracle = DescrStatsW(values[use], weight[use], ddof=0)
        np.testing.assert_allclose(got.mean[row], oracle.mean, rtol=1e-12)
        np.testing.assert_allclose(got.variance[row], oracle.var, rtol=1e-8)
        assert got.rows[row] == use.sum()
        np.testing.assert_array_equal(got.low[row], values[use].min(axis=0))
        np.testing.assert_array_equal(got.high[row], values[use].max(axis=0))
        np.testing.assert_allclose(
            got.effective_size[row], weight[use].sum() ** 2 / (weight[use] ** 2).sum(), rtol=1e-12
        )
    mean, spread = got.pooled()
    oracle = DescrStatsW(values[weight > 0], weight[weight > 0], ddof=0)
    np.testing.assert_allclose(mean, oracle.mean, rtol=1e-12)
    np.testing.assert_allclose(spread, oracle.std, rtol=1e-8)
