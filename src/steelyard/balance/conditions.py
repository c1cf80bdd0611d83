"""The moment conditions of a propensity that is right: every column of its model balances exactly."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.unit_totals import Product
from steelyard.estimate.estimates import Estimates
from steelyard.exposure.balancing import BalancedRows, Balancing

Floats = NDArray[np.float64]


def has_conditions(balancing: Balancing) -> bool:
    """Whether maximum likelihood has left conditions to test: not so for the ATO with a logit."""
    return not (balancing.estimand == "ATO" and balancing.fit.regression.likelihood.link == "logit")


def conditions_of(balancing: Balancing, sums: Floats) -> Estimates:
    """Return the balancing moments of the exposure model's columns, which are zero for a right model.

    ``sums`` (p, K) are those of :class:`ConditionsKernel` over all rows.

    Notes
    -----
    ``g = sum s c(e, A) (2A - 1) x`` with ``c`` the estimand's weight of the propensity alone, neither
    stabilized nor trimmed. At the maximum likelihood estimate the scores are zero, so the over-identifying
    restrictions of Imai & Ratkovic (2014, section 2.3) are these; their influence includes the estimation
    of the coefficients.
    """
    return Estimates(balancing.fit.regression.names, sums, signed_columns, np.eye(len(sums)), "pure")


def signed_columns(rows: BalancedRows) -> list[Product]:
    """Return the exposure model's columns, negative in the reference."""
    return [(np.where(rows.exposed, 1.0, -1.0), rows.columns)]


@dataclass(frozen=True)
class ConditionsKernel:
    """From balanced rows to the moments of the exposure model's columns, (p, K)."""

    def __call__(self, rows: BalancedRows) -> Floats:
        """Return the sums of the rows."""
        weights = rows.combined if rows.plain else rows.sampling * rows.pure
        of_exposed, of_reference = (rows.columns[members].T @ weights[members] for members in rows.groups)
        return np.asarray(of_exposed - of_reference)
