"""What a fit is asked for: a response on columns under weights, and the scale its columns are put on."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

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


@dataclass(frozen=True)
class Scale:
    """The centring and scaling of a model's columns: ``(x - centre) / spread``, identity for the constant."""

    centre: Floats
    spread: Floats
    intercept: int | None

    def __call__(self, columns: Floats) -> Floats:
        """Return the (n, p) columns centred and scaled."""
        scaled: Floats = (columns - self.centre) / self.spread
        return scaled

    def matrix(self) -> Floats:
        """Return ``T`` (p, p) with ``beta = T b`` for scaled coefficients ``b``."""
        matrix = np.diag(1 / self.spread)
        if self.intercept is not None:
            matrix[self.intercept] -= self.centre / self.spread
        return matrix


def model_moments(regression: Regression, engine: Engine, blocks: Sequence[Block]) -> Moments:
    """Return the moments of the model's columns under the full sample's fit weights, by exposure."""
    kernel = MomentsKernel(regression.columns, FullSample(regression.weights))
    return engine.run(f"{regression.what}: moments", blocks, kernel, merge_moments)


def model_scale(moments: Moments, intercept: int | None) -> Scale:
    """Return the scale that gives every column a spread of one, and mean zero where there is a constant."""
    mean, spread = moments.pooled()
    varies = moments.high.max(axis=0) > moments.low.min(axis=0)
    if intercept is None:
        # Without a constant, centring would change the model; the root mean square keeps the units out.
        spread = np.sqrt(spread**2 + mean**2)
        return Scale(np.zeros_like(mean), np.where(spread > 0, spread, 1.0), None)
    mean[intercept] = 0
    return Scale(mean, np.where(varies & (spread > 0), spread, 1.0), intercept)
