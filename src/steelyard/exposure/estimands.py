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

    ``exposed`` and ``reference`` take the odds of the other group, ``(1 - e) / e`` for the exposed and
    ``e / (1 - e)`` for the reference, and return the weight; they may work in the array they are given.
    ``*_slope`` take ``e`` and ``1 - e`` (both, so that neither loses digits) and return the weight's
    derivative in ``e``. ``exposed_share`` and ``reference_share``
    give the stabilizing factor from the share ``p`` of the exposed, ``*_share_slope`` the derivative of
    its logarithm in ``p``.
    """

    exposed: Callable[[Floats], Floats]
    reference: Callable[[Floats], Floats]
    exposed_slope: Callable[[Floats, Floats], Floats]
    reference_slope: Callable[[Floats, Floats], Floats]
    exposed_share: Callable[[Floats], Floats]
    reference_share: Callable[[Floats], Floats]
    exposed_share_slope: Callable[[Floats], Floats]
    reference_share_slope: Callable[[Floats], Floats]
    spread_of: tuple[bool, bool]
    target: str


def _one(odds: Floats) -> Floats:
    return np.ones_like(odds)


def _odds(odds: Floats) -> Floats:
    return odds


def _inverse_probability(odds: Floats) -> Floats:
    # 1 / P(own) = 1 + P(other) / P(own).
    return np.add(odds, 1, out=odds)


def _other_probability(odds: Floats) -> Floats:
    # P(other) = odds / (1 + odds), written so that infinite odds give 1 and none give 0.
    np.reciprocal(odds, out=odds)
    np.add(odds, 1, out=odds)
    return np.reciprocal(odds, out=odds)


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
        exposed=_inverse_probability,
        reference=_inverse_probability,
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
        reference=_odds,
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
        exposed=_odds,
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
        exposed=_other_probability,
        reference=_other_probability,
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
