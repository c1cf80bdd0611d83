"""The weighted log pseudo-likelihood and its gradient, for several parameters and columns of weights in one pass."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.integrals import Integral
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear
from steelyard.outcome.multilevel.pieces import Part, parts, prepared, same_below

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Evaluate:
    """From a run to its weighted log-likelihood and gradient at some points.

    Attributes
    ----------
    model : Nonlinear
    thetas : (P, M)
    columns : M columns of weights, one a point
    points : int
        Quadrature points.
    """

    model: Nonlinear
    thetas: Floats
    columns: tuple[int, ...]
    points: int

    def __call__(self, run: Nested) -> tuple[Floats, Floats]:
        """Return values (M,) and gradients (P, M)."""
        values, gradients = np.zeros(len(self.columns)), np.zeros_like(self.thetas)
        for part in parts(self.model, run, self.points):
            self._add(run, part, values, gradients)
        return values, gradients

    def _add(self, run: Nested, part: Part, values: Floats, gradients: Floats) -> None:
        weights = self.model.top_weights(run)[part.tops]
        start = None
        m = 0
        while m < len(self.columns):
            column = self.columns[m]
            last = m + 1
            while (
                last < len(self.columns)
                and np.array_equal(self.thetas[:, last], self.thetas[:, m])
                and same_below(self.model, run, part, column, self.columns[last])
            ):
                last += 1
            piece = prepared(self.model, run, part, column).at(self.thetas[:, m], self.points, start)
            if start is None and isinstance(piece.source, Integral):
                start = piece.source.mode.v
            if last == m + 1:
                value, gradient = piece.total(weights[:, column])
                values[m] += value
                gradients[:, m] += gradient
            else:
                several = weights[:, list(self.columns[m:last])]
                values[m:last] += several.T @ piece.value
                gradients[:, m:last] += piece.scores().T @ several
            m = last
