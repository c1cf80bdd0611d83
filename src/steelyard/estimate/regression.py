"""What a fit is asked for: a response on columns under weights, and the scale its columns are put on."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.estimate.likelihood import Likelihood
from steelyard.estimate.moments import Moments, MomentsKernel, merge_moments
from steelyard.estimate.weights import FullSample, WeightColumns

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Regression:
    """What is fitted: a response on the columns of a model, under columns of weights.

    ``columns`` and ``response`` are picklable callables from a block to (n, p) and (n,);
    ``intercept`` is the place of the constant column, or None; ``what`` names it in messages.
    """

    names: tuple[str, ...]
    columns: Callable[[Block], Floats]
    response: Callable[[Block], Floats]
    weights: WeightColumns
    likelihood: Likelihood
    intercept: int | None
    what: str

    def under(self, columns: Sequence[int] | NDArray[np.int64]) -> Regression:
        """Return the regression under some of its columns of weights."""
        return replace(self, weights=self.weights.only(columns))


# Means up to this many standard deviations, and standard deviations within this factor of 1, cost a
# Cholesky factor no more than four digits: such columns are used as they are, without a copy.
HARMLESS_MEAN, HARMLESS_SPREAD = 100.0, 1e4


@dataclass(frozen=True)
class Scale:
    """The scale a model's columns are put on: ``(x - centre) / spread``, identity for the constant.

    ``unit`` (p,) is the spread of each column on that scale: one, or its own where columns are used as
    they are (``centre`` and ``spread`` None).
    """

    unit: Floats
    intercept: int | None
    centre: Floats | None = None
    spread: Floats | None = None

    def __call__(self, columns: Floats) -> Floats:
        """Return the (n, p) columns on the scale."""
        if self.centre is None or self.spread is None:
            return columns
        scaled = columns - self.centre
        scaled /= self.spread
        return scaled

    def matrix(self) -> Floats:
        """Return ``T`` (p, p) with ``beta = T b`` for coefficients ``b`` on the scale."""
        if self.centre is None or self.spread is None:
            return np.eye(len(self.unit))
        matrix = np.diag(1 / self.spread)
        if self.intercept is not None:
            matrix[self.intercept] -= self.centre / self.spread
        return matrix


def model_moments(regression: Regression, engine: Engine, blocks: Sequence[Block]) -> Moments:
    """Return the moments of the model's columns under the full sample's fit weights, by exposure."""
    kernel = MomentsKernel(regression.columns, FullSample(regression.weights))
    return engine.run(f"{regression.what}: moments", blocks, kernel, merge_moments)


def model_scale(moments: Moments, intercept: int | None) -> Scale:
    """Return a scale on which the columns' means and spreads harm no solution.

    Columns far from mean 0 and spread 1 are given spread one, and mean zero where there is a constant.
    """
    mean, spread = moments.pooled()
    varies = moments.high.max(axis=0) > moments.low.min(axis=0)
    if intercept is None:
        # Without a constant, centring would change the model; the root mean square keeps the units out.
        spread = np.sqrt(spread**2 + mean**2)
        spread, mean = np.where(spread > 0, spread, 1.0), np.zeros_like(mean)
    else:
        mean[intercept] = 0
        spread = np.where(varies & (spread > 0), spread, 1.0)
    near = (np.abs(mean) <= HARMLESS_MEAN * spread) & (np.abs(np.log(spread)) <= np.log(HARMLESS_SPREAD))
    if near.all():
        return Scale(spread, intercept)
    return Scale(np.ones_like(spread), intercept, mean, spread)
