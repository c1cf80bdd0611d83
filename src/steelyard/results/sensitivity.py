"""How strong an unmeasured confounder would have to be: the E-value (VanderWeele & Ding 2017)."""

from __future__ import annotations

import numpy as np

# Below this share in both groups an outcome counts as rare, and its odds ratio as a risk ratio.
RARE = 0.15


def e_value(ratio: float) -> float:
    """Return the E-value of a risk ratio: ``RR + sqrt(RR (RR - 1))``, with ``1 / RR`` for a ratio below 1.

    It is the least strength of association, on the risk ratio scale, that an unmeasured confounder
    would need with both exposure and outcome, beyond the measured covariates, to explain the ratio away.

    Raises
    ------
    ValueError
        The ratio is not positive.
    """
    if not ratio > 0:
        raise ValueError(f"a risk ratio is positive, not {ratio}")
    ratio = max(ratio, 1 / ratio)
    return float(ratio + np.sqrt(ratio * (ratio - 1)))


def e_value_of_limit(low: float, high: float) -> float:
    """Return the E-value of the interval's limit nearer 1; 1 where the interval holds 1."""
    if low <= 1 <= high:
        return 1.0
    return e_value(low if low > 1 else high)


def ratio_of_odds(odds_ratio: float, rare: bool) -> float:
    """Return the risk ratio an odds ratio stands for: itself if rare, else its square root."""
    return float(odds_ratio if rare else np.sqrt(odds_ratio))


def ratio_of_difference(difference: float, std_error: float, spread: float) -> tuple[float, float, float]:
    """Return the approximate risk ratio and its limits for a difference of means.

    Notes
    -----
    With ``d`` the difference over the outcome's standard deviation and ``s`` its standard error,
    ``RR = exp(0.91 d)`` with limits ``exp(0.91 d -/+ 1.78 s)`` (VanderWeele & Ding 2017, table 2).
    """
    d, s = difference / spread, std_error / spread
    return float(np.exp(0.91 * d)), float(np.exp(0.91 * d - 1.78 * s)), float(np.exp(0.91 * d + 1.78 * s))
