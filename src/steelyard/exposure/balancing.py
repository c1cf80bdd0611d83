"""From a fitted propensity to combined weights, and how they move when the propensity's coefficients do.

One picklable kernel, ``Balancing``, turns a block into its ``BalancedRows``; balance and outcomes are
computed on those and never on weights of their own making.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

from steelyard.data.blocks import Block
from steelyard.data.unit_totals import Product
from steelyard.estimate.fit import Fit
from steelyard.estimate.weights import WeightColumns
from steelyard.exposure.estimands import RULES

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True)
class Balancing:
    """How balancing weights are made of propensities.

    Attributes
    ----------
    fit : Fit
        The propensity model: K columns, or the full sample's alone, which then holds for all K.
    sampling : WeightColumns
        The sampling weights, K columns.
    estimand : "ATE", "ATT", "ATC" or "ATO"
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
    share: Floats | None = None
    total: Floats | None = None
    cap: Floats | None = None
    propensity_range: tuple[float, float] | None = None

    @property
    def nuisances(self) -> int:
        """How many nuisance parameters the weights hang on: coefficients, and the share if stabilized."""
        return len(self.fit.scaled) + (self.share is not None)

    @property
    def nuisance_combine(self) -> Floats:
        """How the nuisance products of a row make its influence on the nuisance parameters; (P, P)."""
        inverse = self.fit.information.inverse()
        return inverse if self.share is None else linalg.block_diag(inverse, np.eye(1))

    @property
    def count(self) -> int:
        """How many columns of weights there are."""
        return self.sampling.count

    @property
    def failed(self) -> Mapping[int, str]:
        """Columns without weights, and why: those whose propensity has no solution."""
        return self.fit.failed

    def only(self, columns: Sequence[int] | Integers) -> Balancing:
        """Return some of the columns: a ``WeightColumns``, as the object itself is."""
        sampling = self.sampling.only(columns)
        if self.fit.scaled.shape[1] == 1:
            return replace(self, sampling=sampling)
        columns = list(columns)
        fit = replace(
            self.fit,
            scaled=self.fit.scaled[:, columns],
            failed={k: self.fit.failed[c] for k, c in enumerate(columns) if c in self.fit.failed},
        )
        share, total, cap = (
            None if values is None else values[columns] for values in (self.share, self.total, self.cap)
        )
        return replace(self, fit=fit, sampling=sampling, share=share, total=total, cap=cap)

    def rows(self, block: Block) -> BalancedRows:
        """Return the block with everything that weighting makes of it, computed when asked for."""
        return BalancedRows(self, block)

    def __call__(self, block: Block, out: Floats | None = None) -> Floats:
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
    def groups(self) -> tuple[Integers | slice, Integers | slice]:
        """The places of the exposed and of the reference rows; slices where one group is all there is."""
        is_exposed = self.block.exposure == 1
        if is_exposed.all():
            return slice(None), slice(0, 0)
        if not is_exposed.any():
            return slice(0, 0), slice(None)
        return np.flatnonzero(is_exposed), np.flatnonzero(~is_exposed)

    @cached_property
    def pure(self) -> Floats:
        """The estimand's weight of the propensity alone, before stabilizing and trimming; (n, K)."""
        rule, eta, likelihood = self.balancing_rule, self.eta, self.plan.fit.regression.likelihood
        exposed, reference = self.groups
        with np.errstate(divide="ignore", over="ignore", invalid="ignore"):
            if isinstance(exposed, slice):
                every_row = exposed == slice(None)
                return (
                    rule.exposed(likelihood.odds(-eta)) if every_row else rule.reference(likelihood.odds(eta))
                )
            pure = np.empty_like(eta)
            pure[exposed] = rule.exposed(likelihood.odds(-eta[exposed]))
            pure[reference] = rule.reference(likelihood.odds(eta[reference]))
        return pure

    @cached_property
    def plain(self) -> bool:
        """Whether the balancing weights are the estimand's alone, neither stabilized nor trimmed."""
        return self.plan.share is None and self.plan.cap is None and self.plan.propensity_range is None

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
        balancing = self.pure if self.plan.share is None else self.pure * self.stabilizer
        return balancing if self.plan.propensity_range is None else np.where(self.outside, 0.0, balancing)

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
        return self.uncapped if self.plan.cap is None else np.minimum(self.uncapped, self.ceiling)

    @cached_property
    def combined(self) -> Floats:
        """The combined weights ``w = s c``, (n, K)."""
        combined: Floats = self.sampling * self.balancing
        return combined

    @cached_property
    def _free(self) -> NDArray[np.bool_]:
        """Rows of the full sample that neither the range nor the cap holds fixed, (n,)."""
        return ~(self.outside[:, 0] | self.capped[:, 0])

    @cached_property
    def slope(self) -> Floats:
        """Derivative of the balancing weight in the linear predictor, full sample; (n,)."""
        factor = np.broadcast_to(self.stabilizer, self.propensity.shape)[:, 0]
        return np.asarray(self.pure_slope * factor * self._free)

    @cached_property
    def share_slope(self) -> Floats:
        """Derivative of the balancing weight in the stabilizing share, full sample; (n,)."""
        if self.plan.share is None:
            return np.zeros(len(self.block))
        rule, share = self.balancing_rule, self.plan.share[:1]
        log_slope = np.where(
            self.exposed[:, 0], rule.exposed_share_slope(share), rule.reference_share_slope(share)
        )
        return np.asarray(self.balancing[:, 0] * log_slope * self._free)

    @cached_property
    def nuisance_products(self) -> list[Product]:
        """Products that :attr:`Balancing.nuisance_combine` makes the rows' influence on the nuisances."""
        regression = self.plan.fit.regression
        score = regression.likelihood.score(self.block.exposure, self.eta[:, 0])
        # The fit's own weight over the sampling weight: one, where the fit is under the sampling weights.
        fitted_under, weight = regression.weights.only([0])(self.block)[:, 0], self.block.weight
        score = score * np.divide(fitted_under, weight, out=np.zeros_like(weight), where=weight > 0)
        products: list[Product] = [(score[:, np.newaxis], self.columns)]
        if self.plan.share is not None:
            assert self.plan.total is not None
            in_share = (self.block.exposure - self.plan.share[0]) / self.plan.total[0]
            products.append((in_share[:, np.newaxis], np.ones((len(self.block), 1))))
        return products
