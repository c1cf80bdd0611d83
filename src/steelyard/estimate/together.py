"""All replicate columns of weights at once: shared steps first, then own steps for those that need them."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.errors import EstimationError
from steelyard.estimate.linear import Factored
from steelyard.estimate.newton import STEP_TOLERANCE, Newton
from steelyard.estimate.regression import Regression, Scale

Floats = NDArray[np.float64]

SHARED_STEPS = 8


def solve_replicates(newton: Newton, b: Floats, information: Factored) -> tuple[Floats, dict[int, str]]:
    """Return scaled coefficients for every column of weights, (p, K), and why columns have none.

    Parameters
    ----------
    b : (p,)
        The solution of column 0, where every other column starts.
    information : Factored
        The full sample's, at ``b``.

    Notes
    -----
    ``B += H^-1 G`` with ``G = X' (W * score(Y, X B))``, block by block (design.md, section 6). The error of
    a column shrinks by the same factor at each step, about how far its information is from ``H``.
    """
    probe = newton.regression.weights(newton.blocks[0])
    count = probe.shape[1]
    coefficients = np.repeat(b[:, np.newaxis], count, axis=1)
    moving = np.arange(1, count)
    for _ in range(SHARED_STEPS):
        if not len(moving):
            break
        kernel = _SharedKernel(newton.regression, newton.scale, coefficients[:, moving], moving)
        score = newton.engine.run(f"{newton.regression.what}: replicates", newton.blocks, kernel)
        step = information.solve(score)
        finite = np.isfinite(step).all(axis=0)
        coefficients[:, moving[finite]] += step[:, finite]
        size = np.max(np.abs(step * newton.scale.unit[:, np.newaxis]), axis=0, initial=0)
        moving = moving[~(size <= STEP_TOLERANCE)]
    failed: dict[int, str] = {}
    for column in map(int, moving):
        try:
            coefficients[:, column] = replace(newton, column=column).solve(b).b
        except EstimationError as error:
            coefficients[:, column] = np.nan
            failed[column] = error.message
    return coefficients, failed


@dataclass(frozen=True)
class _SharedKernel:
    """From a block to the scores of the moving columns, (p, moving)."""

    regression: Regression
    scale: Scale
    coefficients: Floats
    moving: NDArray[np.int64]

    def __call__(self, block: Block) -> Floats:
        x = self.scale(self.regression.columns(block))
        w = self.regression.weights(block)[:, self.moving]
        y = self.regression.response(block)[:, np.newaxis]
        with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
            score = self.regression.likelihood.score(y, x @ self.coefficients)
            return x.T @ np.where(w != 0, w * score, 0)
