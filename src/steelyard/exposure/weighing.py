"""Relative weights of rows under each weighing, and how they move with the nuisance parameters."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from steelyard.data.unit_totals import totals_by_unit
from steelyard.estimate.estimates import Weighing
from steelyard.estimate.weights import multiplied_by_unit
from steelyard.exposure.balancing import BalancedRows

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


def weights(rows: BalancedRows, weighing: Weighing) -> Floats:
    """Return the weights under a weighing, (n, K)."""
    return {"sampling": rows.sampling, "combined": rows.combined}[weighing]


def relative_weight(rows: BalancedRows, weighing: Weighing) -> Floats:
    """Return the full sample's weights over the sampling weights, (n,)."""
    if weighing == "sampling":
        return np.ones(len(rows.block))
    return np.asarray((rows.balancing if weighing == "combined" else rows.pure)[:, 0])


def weight_slopes(rows: BalancedRows, weighing: Weighing) -> tuple[Floats, Floats]:
    """Return the relative weight's derivatives in the linear predictor and in the stabilizing share, (n,) each."""
    if weighing == "combined":
        return rows.slope, rows.share_slope
    return rows.pure_slope, np.zeros(len(rows.block))


def weighted_sums(
    rows: BalancedRows, weighing: Weighing, values: Floats, members: Integers | slice
) -> tuple[Floats, Floats]:
    """Return the weighted sums of ``values`` (n, q) and of ones over some rows: (q, K) and (K,).

    Where columns of weights differ by a unit's multiplier alone, as they do while the propensity is held, rows
    are summed by unit first and multiplied after.
    """
    units = multiplied_by_unit(rows.plan.sampling)
    held = weighing == "sampling" or rows.plan.fit.scaled.shape[1] == 1
    z = values[members]
    if not len(z):
        return np.zeros((values.shape[1], rows.plan.count)), np.zeros(rows.plan.count)
    if units is None or not held or rows.plan.count == 1:
        under = weights(rows, weighing)[members]
        return z.T @ under, under.sum(axis=0)
    own = (rows.block.weight * relative_weight(rows, weighing))[members, np.newaxis]
    ones = np.ones((len(own), 1))
    totals = totals_by_unit([(own, z), (own, ones)], units.unit(rows.block)[members])
    sums = totals.values.T @ units.multipliers(totals.unit)
    return sums[:-1], sums[-1]
