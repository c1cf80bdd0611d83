"""The influence of all estimates together, the propensity's own estimation included.

An estimator hands over its products and how they combine. The term that it owes to the propensity is the
same for all, so it is worked out here, once: how the estimates drift with the nuisance parameters,
times the influence of each row on those (stacked estimating equations: Binder 1983; Lunceford &
Davidian 2004; Zeng, Li & Tong 2025).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.data.unit_totals import Product
from steelyard.estimate.estimates import Estimates, expanded
from steelyard.exposure.balancing import BalancedRows, Balancing
from steelyard.exposure.weighing import relative_weight, weight_slopes

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class JointInfluence:
    """The influence of several estimators' estimates: products by block, and the matrix that combines them.

    ``matrix`` (m, k) has the nuisance parameters' products first; ``shared`` are the distinct estimators'
    own products after them.
    """

    balancing: Balancing
    shared: tuple[Estimates, ...]
    matrix: Floats

    def products(self, block: Block) -> list[Product]:
        """Return the block's products, a row's relative weight multiplied in."""
        return self._products(self.balancing.rows(block))

    def __call__(self, block: Block) -> Floats:
        """Return the influence ``u`` of each row, (n, k)."""
        return np.asarray(expanded(self.products(block)) @ self.matrix)

    def _products(self, rows: BalancedRows) -> list[Product]:
        products = rows.nuisance_products
        for estimates in self.shared:
            relative = relative_weight(rows, estimates.weighing)[:, np.newaxis]
            products = products + [(factors * relative, columns) for factors, columns in estimates.own(rows)]
        return products


def joint_influence(
    estimates: Sequence[Estimates], balancing: Balancing, engine: Engine, blocks: Sequence[Block]
) -> JointInfluence:
    """Return the joint influence of all estimates, in their order.

    Estimates that differ only in whether the propensity counts as known share their products.
    """
    shared = tuple({id(e.own): e for e in estimates}.values())
    place = {id(e.own): k for k, e in enumerate(shared)}
    starts = np.cumsum([0, *(len(e.combine) for e in shared)])
    drifts = engine.run("propensity estimated", blocks, _DriftKernel(balancing, shared))
    own = np.zeros((starts[-1], sum(len(e.names) for e in estimates)))
    through = np.zeros((balancing.nuisances, own.shape[1]))
    first = 0
    for e in estimates:
        columns = slice(first, first + len(e.names))
        own[starts[place[id(e.own)]] : starts[place[id(e.own)] + 1], columns] = e.combine
        if not e.known and e.weighing != "sampling":
            through[:, columns] += drifts[place[id(e.own)]].T @ e.combine
        if not e.known and e.of_nuisance is not None:
            through[:, columns] += e.of_nuisance
        first += len(e.names)
    return JointInfluence(balancing, shared, np.concatenate([balancing.nuisance_combine @ through, own]))


@dataclass(frozen=True)
class _DriftKernel:
    """For each estimator, the sums of ``s (dc/dg)`` times its products, (m, P)."""

    balancing: Balancing
    shared: tuple[Estimates, ...]

    def __call__(self, block: Block) -> tuple[Floats, ...]:
        rows = self.balancing.rows(block)
        return tuple(self._drift(rows, e) for e in self.shared)

    def _drift(self, rows: BalancedRows, e: Estimates) -> Floats:
        if e.weighing == "sampling" or not len(e.combine):
            return np.zeros((len(e.combine), self.balancing.nuisances))
        in_predictor, in_share = weight_slopes(rows, e.weighing)
        parts = []
        for factors, columns in e.own(rows):
            weight = rows.block.weight[:, np.newaxis] * factors
            if columns.shape[1] == 1:
                moved = (columns * weight * in_predictor[:, np.newaxis]).T @ rows.columns
            else:
                moved = np.concatenate(
                    [(columns * (w * in_predictor)[:, np.newaxis]).T @ rows.columns for w in weight.T]
                )
            if self.balancing.share is not None:
                shares = columns.T @ (weight * in_share[:, np.newaxis])
                moved = np.column_stack([moved, shares.T.ravel()])
            parts.append(moved)
        return np.concatenate(parts)
