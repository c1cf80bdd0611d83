"""Scaling of weights within clusters, and levels made from one weight, against loops and identities."""

from __future__ import annotations

import numpy as np
import pytest

from steelyard.errors import PlanError
from steelyard.outcome.multilevel.scaling import (
    carried_to_unscaled,
    from_overall,
    scaled,
)

GROUP = np.array([0, 0, 0, 1, 2, 2, 3, 3])
TOP = np.array([0, 0, 1, 1])
WEIGHT = np.array([1.0, 2.0, 5.0, 7.0, 0.0, 3.0, 0.0, 0.0])
RNG = np.random.default_rng(4)


def test_scaled_to_size_by_hand():
    found = scaled(np.column_stack([WEIGHT, 10 * WEIGHT]), GROUP, "size")
    by_hand = [3 / 8, 6 / 8, 15 / 8, 1, 0, 1, 0, 0]
    np.testing.assert_allclose(found, np.column_stack([by_hand, by_hand]), rtol=1e-14)


def test_scaled_to_effective_size_by_hand():
    # (1 + 2 + 5) / (1 + 4 + 25) = 8 / 30; one row with weight counts as one.
    found = scaled(WEIGHT[:, np.newaxis], GROUP, "effective")[:, 0]
    np.testing.assert_allclose(found, [8 / 30, 16 / 30, 40 / 30, 1, 0, 1, 0, 0], rtol=1e-14)
    assert found[:3].sum() == pytest.approx(8**2 / 30)


def test_effective_size_of_very_small_and_very_large_weights():
    for factor in (1e-200, 1e200):
        found = scaled(factor * WEIGHT[:, np.newaxis], GROUP, "effective")
        np.testing.assert_allclose(found, scaled(WEIGHT[:, np.newaxis], GROUP, "effective"), rtol=1e-13)


def test_none_leaves_weights_alone():
    np.testing.assert_array_equal(scaled(WEIGHT[:, np.newaxis], GROUP, "none")[:, 0], WEIGHT)


def test_unknown_scaling_is_refused():
    with pytest.raises(PlanError, match='"size", "effective" or "none"'):
        scaled(WEIGHT[:, np.newaxis], GROUP, "sizes")


def test_levels_from_the_overall_weight_by_hand():
    levels = from_overall(WEIGHT[:, np.newaxis], GROUP, TOP)
    # Means of rows with weight: 8/3, 7, 3, none; of clusters with weight: 29/6, 3.
    np.testing.assert_allclose(levels.top[:, 0], [29 / 6, 3])
    np.testing.assert_allclose(levels.cluster[:, 0], [16 / 29, 42 / 29, 1, 0])
    np.testing.assert_allclose(levels.row[:, 0], [3 / 8, 6 / 8, 15 / 8, 1, 0, 1, 0, 0])


def test_levels_from_the_overall_weight_multiply_to_it():
    overall = RNG.uniform(1, 9, (8, 3))
    levels = from_overall(overall, GROUP, TOP)
    product = levels.row * levels.cluster[GROUP] * levels.top[TOP][GROUP]
    np.testing.assert_allclose(product, overall, rtol=1e-14)
    two = from_overall(overall, GROUP, None)
    np.testing.assert_allclose(two.row, scaled(overall, GROUP, "size"), rtol=1e-14)


def numerical(function, weight, step=1e-6):
    """Central differences of ``function`` by the logarithm of each weight, (n, m)."""
    rows = []
    for k in range(len(weight)):
        up, down = weight.copy(), weight.copy()
        up[k] *= np.exp(step)
        down[k] *= np.exp(-step)
        rows.append((function(up) - function(down)) / (2 * step))
    return np.array(rows)


@pytest.mark.parametrize("method", ["size", "effective", "none"])
def test_derivatives_carried_through_the_scaling(method):
    by_scaled = RNG.normal(size=(8, 2))

    def number(weight):
        w = scaled(weight[:, np.newaxis], GROUP, method)[:, 0]
        return by_scaled.T @ np.log(w, out=np.zeros_like(w), where=w > 0)

    carrying = WEIGHT > 0
    found = carried_to_unscaled(by_scaled * carrying[:, np.newaxis], WEIGHT, GROUP, method)
    np.testing.assert_allclose(found, numerical(number, WEIGHT), atol=1e-8)
