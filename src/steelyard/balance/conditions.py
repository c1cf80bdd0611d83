"""The moment conditions of a propensity that is right: every column of its model balances exactly."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.estimate.estimates import Estimates, Product
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
    values = engine.run("balance: moment conditions", blocks, _ConditionsKernel(balancing))
    return Estimates(regression.names, values, signed_columns, np.eye(len(values)), "pure")


def signed_columns(rows: BalancedRows) -> list[Product]:
    """Return the exposure model's columns, negative in the reference."""
    return [(np.where(rows.exposed, 1.0, -1.0), rows.columns)]


@dataclass(frozen=True)
class _ConditionsKernel:
    balancing: Balancing

    def __call__(self, block: Block) -> Floats:
        rows = self.balancing.rows(block)
        sign = np.where(rows.exposed, 1.0, -1.0)
        return np.asarray(rows.columns.T @ (rows.sampling * sign * rows.pure))
