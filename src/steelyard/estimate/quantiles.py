"""Quantiles of weighted values."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def weighted_quantile(values: Floats, weight: Floats, probability: float) -> float:
    """Return the smallest value (n,) at which the cumulated weight (n,) reaches a share of the total; NaN for none.

    Notes
    -----
    ``inf{t: F(t) >= p}`` with ``F`` the weighted distribution function (Francisco & Fuller 1991). Rows without
    weight do not count.
    """
    counted = weight != 0
    if not counted.any():
        return float("nan")
    values, weight = values[counted], weight[counted]
    order = np.argsort(values, kind="stable")
    cumulated = np.cumsum(weight[order])
    # The slack keeps a quantile that falls on a step from depending on rounding of the sum.
    place = int(np.searchsorted(cumulated, probability * cumulated[-1] * (1 - 1e-12)))
    return float(values[order[min(place, len(order) - 1)]])
