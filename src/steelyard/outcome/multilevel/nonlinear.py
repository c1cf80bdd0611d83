"""A weighted multilevel model with a logit or log link: what its pseudo-likelihood is made of.

    log L = sum_k w3 log int exp( sum_j w2 log int exp( sum_i w1 log f(y | u, t) ) phi(u) du ) phi(t) dt

(Rabe-Hesketh & Skrondal 2006, equation 4); without top clusters the outer integral falls away. The
parameters stand in one vector ``theta``: fixed effects, then the entries of the Cholesky factor ``L`` of the random
effects' covariance, row by row; with top clusters the standard deviations of cluster and top effects.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.cumulants import Cumulant, Family
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.posterior import Members

Floats = NDArray[np.float64]
Codes = NDArray[np.int64]


@dataclass(frozen=True)
class Nonlinear:
    """Which model: names and sizes, no data.

    Attributes
    ----------
    what : how messages call the model
    family : "binomial" (logit link) or "poisson" (log link)
    fixed : p names
    random : q names of the random part's columns, one or two; a random intercept only with top clusters
    points : int
        Quadrature points along each axis; 1 is the Laplace approximation.
    levels : 2 or 3
    adaptive : bool
        False is ordinary quadrature: the nodes stay where the prior puts them. It needs many more points, and is
        here to compare with figures that were computed so.
    """

    what: str
    family: Family
    fixed: tuple[str, ...]
    random: tuple[str, ...]
    points: int = 7
    levels: int = 2
    adaptive: bool = True

    @property
    def cumulant(self) -> Cumulant:
        """The family's ``b``."""
        return Cumulant(self.family)

    @cached_property
    def lower(self) -> tuple[Codes, Codes]:
        """Rows and columns of the entries of ``L`` in ``theta``; two levels."""
        rows, columns = np.tril_indices(len(self.random))
        return rows, columns

    @property
    def random_size(self) -> int:
        """How many parameters the random part has."""
        return 2 if self.levels == 3 else len(self.lower[0])

    @property
    def size(self) -> int:
        """Length of ``theta``, P."""
        return len(self.fixed) + self.random_size

    def factor(self, theta: Floats) -> Floats:
        """Return ``L`` (q, q) of two levels."""
        factor = np.zeros((len(self.random), len(self.random)))
        factor[self.lower] = theta[len(self.fixed) :]
        return factor

    def scales(self, theta: Floats) -> tuple[float, float]:
        """Return the standard deviations of cluster and top effects of three levels."""
        return float(theta[-2]), float(theta[-1])

    def top_weights(self, run: Nested) -> Floats:
        """Return the weights of the run's top-most clusters, (T, K)."""
        if self.levels == 2:
            return run.cluster_weight
        assert run.top_weight is not None
        return run.top_weight

    def tops(self, run: Nested) -> Members:
        """Return which rows make up each of the run's top-most clusters."""
        if self.levels == 2:
            return Members.of(run.cluster)
        assert run.top is not None
        return Members.of(run.top[run.cluster])

    def overall_weights(self, run: Nested) -> Floats:
        """Return the product of the weights of all levels, (n, K)."""
        weight = run.row_weight * run.cluster_weight[run.cluster]
        if self.levels == 3:
            assert run.top is not None and run.top_weight is not None
            weight = weight * run.top_weight[run.top[run.cluster]]
        return weight
