"""From a fitted propensity to combined weights, and how they move when the propensity's coefficients do.

One picklable kernel, ``Balancing``, turns a block into its ``BalancedRows``; balance and outcomes are
computed on those and never on weights of their own making.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.estimate.fit import Fit
from steelyard.estimate.weights import WeightColumns
from steelyard.exposure.estimands import RULES

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Balancing:
    """How balancing weights are made of propensities.

    Attributes
    ----------
    fit : Fit
        The propensity model, K columns.
    sampling : WeightColumns
        The sampling weights, K columns.
    estimand : "ATE", "ATT", "ATC" or "ATO"
    weighted : bool
        Whether the fit was under the sampling weights.
    share : (K,) or None
        Sampling-weighted share of the exposed, where weights are stabilized; ``total`` (K,) the sum of the
        sampling weights it is a share of.
    cap : (K,) or None
        Largest combined weight; larger ones are cut to it.
    propensity_range : (low, high) or None
        Rows outside it get weight zero.

    Notes
    -----
    The cap acts on a row's balancing weight, ``min(c, cap / s)`` with ``s`` the full sample's weight, so
    that a replicate multiplies a capped row like any other. Cap and range are taken as fixed by
    linearization; replicates find their own cap.
    """

    fit: Fit
    sampling: WeightColumns
    estimand: str
    weighted: bool = True
    share: Floats | None = None
    total: Floats | None = None
    cap: Floats | None = None
    propensity_range: tuple[float, float] | None = None

    @property
    def nuisances(self) -> int:
        """How many nuisance parameters the weights hang on: coefficients, and the share if stabilized."""
        return len(self.fit.scaled) + (self.share is not None)

    def rows(self, block: Block) -> BalancedRows:
        """Return the block with everything that weighting makes of it, computed when asked for."""
        return BalancedRows(self, block)

    def __call__(self, block: Block) -> Floats:
        """Return the block's combined weights (n, K): a ``WeightColumns``."""
        return self.rows(block).combined


class BalancedRows:
    """A block under a :class:`Balancing`. Arrays are computed when first asked for, and kept."""

    def __init__(self, balancing: Balancing, block: Block) -> None:
        self.balancing_rule = RULES[balancing.estimand]
        self.plan = balancing
        self.block = block

    @cached_property
    def columns(self) -> Floats:
        """The propensity model's columns, centred and scaled; (n, p)."""
        return self.plan.fit.columns(self.block)

    @cached_property
    def eta(self) -> Floats:
        """The linear predictors, (n, K)."""
        eta: Floats = self.columns @ self.plan.fit.scaled
        return eta

    @cached_property
    def propensity(self) -> Floats:
        """The propensities ``e``, (n, K)."""
        return self.plan.fit.regression.likelihood.mean(self.eta)

    @cached_property
    def complement(self) -> Floats:
        """``1 - e``, (n, K)."""
        # Both links are symmetric, so 1 - e keeps its digits as the mean of -eta.
        return self.plan.fit.regression.likelihood.mean(-self.eta)

    @cached_property
    def sampling(self) -> Floats:
        """The sampling weights, (n, K)."""
        return self.plan.sampling(self.block)

    @cached_property
    def exposed(self) -> NDArray[np.bool_]:
        """Whether each row is exposed, (n, 1)."""
        return np.asarray(self.block.exposure[:, np.newaxis] == 1)

    @cached_property
    def pure(self) -> Floats:
        """The estimand's weight of the propensity alone, before stabilizing and trimming; (n, K)."""
        e, f, rule = self.propensity, self.complement, self.balancing_rule
        with np.errstate(divide="ignore", over="ignore", invalid="ignore"):
            return np.where(self.exposed, rule.exposed(e, f), rule.reference(e, f))

    @cached_property
    def pure_slope(self) -> Floats:
        """Derivative of :attr:`pure` in the linear predictor, full sample; (n,)."""
        e, f, rule = self.propensity[:, :1], self.complement[:, :1], self.balancing_rule
        slope = np.where(self.exposed, rule.exposed_slope(e, f), rule.reference_slope(e, f))
        return np.asarray(slope[:, 0] * self.plan.fit.regression.likelihood.mean_slope(self.eta[:, 0]))

    @cached_property
    def stabilizer(self) -> Floats:
        """The stabilizing factor, (n, K); ones where weights are not stabilized."""
        share = self.plan.share
        if share is None:
            return np.ones((1, 1))
        rule = self.balancing_rule
        return np.where(self.exposed, rule.exposed_share(share), rule.reference_share(share))

    @cached_property
    def outside(self) -> NDArray[np.bool_]:
        """Whether the propensity lies outside the range that is kept, (n, K)."""
        if self.plan.propensity_range is None:
            return np.zeros(self.propensity.shape, dtype=bool)
        low, high = self.plan.propensity_range
        return np.asarray((self.propensity < low) | (self.propensity > high))

    @cached_property
    def uncapped(self) -> Floats:
        """Balancing weights before the cap, (n, K)."""
        return np.where(self.outside, 0.0, self.pure * self.stabilizer)

    @cached_property
    def ceiling(self) -> Floats:
        """The largest balancing weight that the cap leaves each row, (n, K)."""
        if self.plan.cap is None:
            return np.full((1, 1), np.inf)
        weight = self.block.weight[:, np.newaxis]
        ceiling = np.full(self.propensity.shape, np.inf)
        np.divide(self.plan.cap, weight, out=ceiling, where=weight > 0)
        return ceiling

    @cached_property
    def capped(self) -> NDArray[np.bool_]:
        """Whether the cap cuts the row's weight, (n, K)."""
        return np.asarray(np.broadcast_to(self.uncapped > self.ceiling, self.propensity.shape))

    @cached_property
    def balancing(self) -> Floats:
        """The balancing weights ``c``: stabilized, trimmed and capped as asked; (n, K)."""
        return np.asarray(np.minimum(self.uncapped, self.ceiling))

    @cached_property
    def combined(self) -> Floats:
        """The combined weights ``w = s c``, (n, K)."""
        combined: Floats = self.sampling * self.balancing
        return combined

    @cached_property
    def slopes(self) -> Floats:
        """Derivatives of the balancing weight in the nuisance parameters, full sample; (n, P)."""
        free = ~(self.outside[:, 0] | self.capped[:, 0])
        factor = np.broadcast_to(self.stabilizer, self.propensity.shape)[:, 0]
        in_coefficients = self.columns * (self.pure_slope * factor * free)[:, np.newaxis]
        if self.plan.share is None:
            return np.asarray(in_coefficients)
        rule, share = self.balancing_rule, self.plan.share[:1]
        log_slope = np.where(
            self.exposed[:, 0], rule.exposed_share_slope(share), rule.reference_share_slope(share)
        )
        return np.asarray(np.column_stack([in_coefficients, self.balancing[:, 0] * log_slope * free]))

    @cached_property
    def nuisance_influence(self) -> Floats:
        """Influence of each row on the nuisance parameters, so that ``sum(s u)`` is their error; (n, P)."""
        influence = self.plan.fit.influence(self.block, self.columns, self.eta[:, 0])
        if not self.plan.weighted:
            weight = self.block.weight
            influence *= np.divide(1, weight, out=np.zeros_like(weight), where=weight > 0)[:, np.newaxis]
        if self.plan.share is None:
            return np.asarray(influence)
        assert self.plan.total is not None
        in_share = (self.block.exposure - self.plan.share[0]) / self.plan.total[0]
        return np.column_stack([influence, in_share])
