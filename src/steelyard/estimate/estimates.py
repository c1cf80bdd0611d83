"""What an estimator hands over: a column of estimates for every column of weights, and their influence."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from steelyard.data.unit_totals import Product

Floats = NDArray[np.float64]


Weighing = Literal["sampling", "combined", "pure"]


@dataclass(frozen=True)
class Estimates:
    """k estimates under K columns of weights, with the influence of each row on column 0.

    The influence ``u``, with ``estimate - truth`` near ``sum(s u)`` (Binder 1983), is kept in the parts it is
    made of: products of a few factors and the design rows' own columns, and one matrix that combines
    them. Rows can then be summed first and combined after, which is what makes a variance cheap.

    Attributes
    ----------
    names : k texts
    values : (k, K)
        Column 0 is the full sample.
    own : callable
        From the rows of a block, as the estimator's floor sees them, to products that hold the influence
        of a row *apart from its relative weight*. Picklable.
    combine : (m, k)
        ``u = c * products @ combine``, plus what the nuisance parameters bring through ``c``.
    weighing : which relative weight ``c`` multiplies the products
        "sampling": 1. "combined": the balancing weight as used. "pure": the estimand's weight of the
        propensity, neither stabilized nor trimmed.
    of_nuisance : (P, k) or None
        Derivatives of estimates that are functions of the nuisance parameters themselves, or that have worked out
        for themselves how they hang on them.
    known : whether ``c`` is taken as known, so that the nuisance parameters bring nothing
    """

    names: tuple[str, ...]
    values: Floats
    own: Callable[[Any], list[Product]]
    combine: Floats
    weighing: Weighing
    of_nuisance: Floats | None = None
    known: bool = False

    @property
    def full_sample(self) -> Floats:
        """The estimates of the full sample, (k,)."""
        return self.values[:, 0]

    def with_weights_known(self) -> Estimates:
        """Return the same estimates with the propensity taken as known."""
        return replace(self, known=True)


def expanded(products: list[Product]) -> Floats:
    """Return the products row by row, (n, m)."""
    parts = [
        factors[:, j : j + 1] * columns for factors, columns in products for j in range(factors.shape[1])
    ]
    return np.concatenate(parts, axis=1)
