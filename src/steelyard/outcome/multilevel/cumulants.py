"""The log-likelihood of one row under a canonical link, ``y eta - b(eta)``, and the derivatives of ``b``.

Binomial with a logit link: ``b = log(1 + exp eta)``. Poisson with a log link: ``b = exp eta``. The first
derivative is the mean, the second the variance (McCullagh & Nelder 1989, section 2.2). Terms in ``y`` alone
are left out; :meth:`Cumulant.constant` has them.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray
from scipy import special

Floats = NDArray[np.float64]
Family = Literal["binomial", "poisson"]

# Beyond this reach of the linear predictor its exponential is not taken apart into factors.
SAFE_REACH = 300.0


@dataclass(frozen=True)
class Cumulant:
    """The function ``b`` of a family, by name, so that a kernel that holds it can travel."""

    family: Family

    def value(self, eta: Floats) -> Floats:
        """Return ``b``, of the shape of ``eta``."""
        if self.family == "binomial":
            return np.asarray(np.logaddexp(0, eta))
        return np.asarray(np.exp(eta))

    def mean(self, eta: Floats) -> Floats:
        """Return ``b'``, the mean."""
        if self.family == "binomial":
            return np.asarray(special.expit(eta))
        return np.asarray(np.exp(eta))

    def two(self, eta: Floats) -> tuple[Floats, Floats]:
        """Return ``b'`` and ``b''``: mean and variance."""
        mean = np.exp(np.minimum(eta, SAFE_REACH)) if self.family == "binomial" else np.exp(eta)
        if self.family == "poisson":
            return mean, mean
        rest = 1 / (1 + mean)
        mean *= rest
        return mean, mean * rest

    def third(self, mean: Floats, variance: Floats) -> Floats:
        """Return ``b'''`` where ``b'`` is ``mean`` and ``b''`` is ``variance``."""
        if self.family == "binomial":
            return variance * (1 - 2 * mean)
        return variance

    def fourth(self, mean: Floats, variance: Floats) -> Floats:
        """Return the fourth derivative of ``b`` where ``b'`` is ``mean`` and ``b''`` is ``variance``."""
        if self.family == "binomial":
            return variance * (1 - 6 * variance)
        return mean

    def of_exponential(self, exponential: Floats) -> tuple[Floats, Floats]:
        """Return ``b`` and ``b'`` where ``exp(eta)`` is given, which is used up: no exponential is taken."""
        if self.family == "binomial":
            total = 1 + exponential
            exponential /= total
            return np.log(total, out=total), exponential
        return exponential, exponential.copy()

    def constant(self, y: Floats) -> Floats:
        """Return the part of a row's log-likelihood that holds no parameter, (n,)."""
        if self.family == "binomial":
            return np.zeros_like(y)
        return -np.asarray(special.gammaln(y + 1))
