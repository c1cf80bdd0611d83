"""Relative weights of rows under each weighing, and how they move with the nuisance parameters."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from steelyard.estimate.estimates import Weighing
from steelyard.exposure.balancing import BalancedRows

Floats = NDArray[np.float64]


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
