"""The moment conditions of a propensity that is right: every column of its model balances exactly."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.estimate.estimates import Estimates
from steelyard.exposure.balancing import BalancedRows, Balancing

Floats = NDArray[np.float64]


def moment_conditions(balancing: Balancing, engine: Engine, blocks: Sequence[Block]) -> Estimates | None:
    """Return the balancing moments of the exposure model's columns, which are zero for a right model.

    None where maximum likelihood has set them to zero already: the ATO with a logit.

    Notes
    -----
    ``g = sum s c(e, A) (2A - 1) x`` with ``c`` the estimand's weight of the propensity alone, neither
    stabilized nor trimmed. At the maximum likelihood estimate the scores are zero, so the over-identifying
    restrictions of Imai & Ratkovic (2014, section 2.3) are these; their influence includes the estimation
    of the coefficients.
    """
    regression = balancing.fit.regression
    if balancing.estimand == "ATO" and regression.likelihood.link == "logit":
        return None
    values, drift = engine.run("balance: moment conditions", blocks, _ConditionsKernel(balancing))
    return Estimates(regression.names, values, ConditionsInfluence(drift))


@dataclass(frozen=True)
class ConditionsInfluence:
    """Influence of each row on the balancing moments; ``drift`` (p, p) is their slope in the coefficients."""

    drift: Floats

    def __call__(self, rows: BalancedRows) -> Floats:
        """Return the (n, p) influences in a block's rows."""
        sign = np.where(rows.exposed, 1.0, -1.0)
        influence: Floats = rows.columns * (sign * rows.pure[:, :1])
        coefficients = self.drift.shape[1]
        influence += rows.nuisance_influence[:, :coefficients] @ self.drift.T
        return influence


@dataclass(frozen=True)
class _ConditionsKernel:
    balancing: Balancing

    def __call__(self, block: Block) -> tuple[Floats, Floats]:
        rows = self.balancing.rows(block)
        sign = np.where(rows.exposed, 1.0, -1.0)
        values = rows.columns.T @ (rows.sampling * sign * rows.pure)
        slope = block.weight * sign[:, 0] * rows.pure_slope
        return values, rows.columns.T @ (rows.columns * slope[:, np.newaxis])
