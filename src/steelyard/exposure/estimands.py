"""What each estimand makes of a propensity: the balancing weight, its slope, and its target population.

The weights are those of Li, Morgan & Zaslavsky (2018), table 1: the target density ``h(e)`` over the
probability of the group a row is in.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class BalancingRule:
    """The balancing weight of an estimand as a function of the propensity.

    ``exposed`` and ``reference`` take ``e`` and ``1 - e`` (both given, so that neither loses digits) and
    return the weight; ``*_slope`` return its derivative in ``e``. ``exposed_share`` and ``reference_share``
    give the stabilizing factor from the share ``p`` of the exposed, ``*_share_slope`` the derivative of
    its logarithm in ``p``.
    """

    exposed: Callable[[Floats, Floats], Floats]
    reference: Callable[[Floats, Floats], Floats]
    exposed_slope: Callable[[Floats, Floats], Floats]
    reference_slope: Callable[[Floats, Floats], Floats]
    exposed_share: Callable[[Floats], Floats]
    reference_share: Callable[[Floats], Floats]
    exposed_share_slope: Callable[[Floats], Floats]
    reference_share_slope: Callable[[Floats], Floats]
    spread_of: tuple[bool, bool]
    target: str


def _one(e: Floats, f: Floats) -> Floats:
    return np.ones_like(e)


def _zero(e: Floats, f: Floats) -> Floats:
    return np.zeros_like(e)


def _one_share(p: Floats) -> Floats:
    return np.ones_like(p)


def _zero_share(p: Floats) -> Floats:
    return np.zeros_like(p)


# Each rule: weight of exposed and of reference, slopes in e, stabilizing factors and their log-slopes,
# whose spread standardizes a difference, and the population the weighted sample stands for.
RULES: dict[str, BalancingRule] = {
    "ATE": BalancingRule(
        exposed=lambda e, f: 1 / e,
        reference=lambda e, f: 1 / f,
        exposed_slope=lambda e, f: -1 / e**2,
        reference_slope=lambda e, f: 1 / f**2,
        exposed_share=lambda p: p,
        reference_share=lambda p: 1 - p,
        exposed_share_slope=lambda p: 1 / p,
        reference_share_slope=lambda p: -1 / (1 - p),
        spread_of=(True, True),
        target="the whole population of the domain",
    ),
    "ATT": BalancingRule(
        exposed=_one,
        reference=lambda e, f: e / f,
        exposed_slope=_zero,
        reference_slope=lambda e, f: 1 / f**2,
        exposed_share=_one_share,
        reference_share=lambda p: (1 - p) / p,
        exposed_share_slope=_zero_share,
        reference_share_slope=lambda p: -1 / (p * (1 - p)),
        spread_of=(True, False),
        target="the exposed population of the domain",
    ),
    "ATC": BalancingRule(
        exposed=lambda e, f: f / e,
        reference=_one,
        exposed_slope=lambda e, f: -1 / e**2,
        reference_slope=_zero,
        exposed_share=lambda p: p / (1 - p),
        reference_share=_one_share,
        exposed_share_slope=lambda p: 1 / (p * (1 - p)),
        reference_share_slope=_zero_share,
        spread_of=(False, True),
        target="the reference population of the domain",
    ),
    "ATO": BalancingRule(
        exposed=lambda e, f: f,
        reference=lambda e, f: e,
        exposed_slope=lambda e, f: -np.ones_like(e),
        reference_slope=lambda e, f: np.ones_like(e),
        exposed_share=_one_share,
        reference_share=_one_share,
        exposed_share_slope=_zero_share,
        reference_share_slope=_zero_share,
        spread_of=(True, True),
        target="the overlap population of the domain: persons count by e(1 - e), most where the propensity "
        "is near one half",
    ),
}
