"""What unequal weights cost, from their sums (Kish 1965)."""

from __future__ import annotations

import numpy as np


def effective_size(total: float, squares: float) -> float:
    """Return ``(sum w)^2 / sum w^2``."""
    return total**2 / squares if squares > 0 else 0.0


def weighting_effect(count: float, total: float, squares: float) -> float:
    """Return the design effect of weighting alone, ``1 + cv^2 = n sum w^2 / (sum w)^2``."""
    return count * squares / total**2 if total > 0 else float("nan")


def coefficient_of_variation(count: float, total: float, squares: float) -> float:
    """Return the standard deviation of the weights over their mean, divisor n."""
    return float(np.sqrt(max(weighting_effect(count, total, squares) - 1, 0)))
