"""The parameters of a linear mixed model as they are reported, and how they move with those inside the fit."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.linear_likelihood import Coordinates
from steelyard.outcome.multilevel.linear_standard import LinearModel, Standard

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True)
class Layout:
    """Where each parameter stands: coefficients, the clusters' covariance by rows, the top variance, the residual.

    ``names`` are P texts; ``pairs`` the row and column of each entry of the clusters' covariance.
    """

    model: LinearModel

    @property
    def pairs(self) -> tuple[Integers, Integers]:
        """Row and column of each reported entry of the clusters' covariance."""
        row, column = np.tril_indices(len(self.model.random))
        return row, column

    @property
    def names(self) -> tuple[str, ...]:
        """The names of the parameters."""
        random, levels = self.model.random, self.model.levels
        return (
            *self.model.fixed,
            *(
                f"variance: {levels[0]} {random[i]}"
                if i == j
                else f"covariance: {levels[0]} {random[j]}, {random[i]}"
                for i, j in zip(*self.pairs, strict=True)
            ),
            *((f"variance: {levels[1]} {random[0]}",) if self.model.three else ()),
            "variance: residual",
        )

    @property
    def size(self) -> int:
        """P, how many parameters there are."""
        return len(self.model.fixed) + len(self.pairs[0]) + self.model.three + 1

    @property
    def covariances(self) -> slice:
        """The entries of the clusters' covariance."""
        start = len(self.model.fixed)
        return slice(start, start + len(self.pairs[0]))

    def values(self, standard: Standard, beta: Floats, cov: Floats, top: Floats, phi: Floats) -> Floats:
        """Return the parameters (P, K) from those inside the fit: (K, p'), (K, q, q), (K,), (K,)."""
        residual = standard.spread**2 * phi
        covariance = residual[:, None, None] * (standard.random @ cov @ standard.random.T)
        parts = [standard.coefficients(beta.T), covariance[:, *self.pairs].T]
        if self.model.three:
            parts.append((self.top_scale(standard) * residual * top)[np.newaxis])
        return np.concatenate([*parts, residual[np.newaxis]])

    def inside(self, standard: Standard, values: Floats) -> tuple[Floats, float]:
        """Return the relative V (q, q) and top variance of (P,) parameters."""
        residual = values[-1]
        covariance = np.zeros((len(standard.random),) * 2)
        covariance[self.pairs] = covariance[self.pairs[::-1]] = values[self.covariances]
        inverse = np.linalg.inv(standard.random)
        top = values[-2] / residual / self.top_scale(standard) if self.model.three else 0.0
        return inverse @ covariance @ inverse.T / residual, float(top)

    def slopes(self, standard: Standard, coordinates: Coordinates, point: Floats, phi: float) -> Floats:
        """Return the derivative of the parameters (P, p' + m + 1) by those inside the fit, log phi last."""
        fixed, p, m = len(self.model.fixed), standard.to_raw.shape[1], coordinates.size
        slopes = np.zeros((self.size, p + m + 1))
        slopes[:fixed, :p] = standard.spread * standard.to_raw
        residual = standard.spread**2 * phi
        root = coordinates.root(point[np.newaxis])
        moves = coordinates.moves(root)[0]
        carried = residual * (standard.random @ moves @ standard.random.T)
        slopes[self.covariances, p : p + len(moves)] = carried[:, *self.pairs].T
        cov = residual * (standard.random @ (root[0] @ root[0].T) @ standard.random.T)
        slopes[self.covariances, -1] = cov[self.pairs]
        if self.model.three:
            mu, scale = float(coordinates.top_root(point[np.newaxis])[0]), self.top_scale(standard) * residual
            if coordinates.top:
                slopes[-2, p + m - 1] = 2 * mu * scale
            slopes[-2, -1] = mu**2 * scale
        slopes[-1, -1] = residual
        return slopes

    @staticmethod
    def top_scale(standard: Standard) -> float:
        """The square of what turns an effect of the constant inside the fit into one of the column as it is."""
        return float(standard.random[0, 0] ** 2)
