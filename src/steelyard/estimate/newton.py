"""Newton's method for one column of weights, and what to say when it fails.

A step after which the next would be shorter is taken as it is; only where steps grow is the deviance
looked at, and the step halved until it does not rise.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.errors import EstimationError
from steelyard.estimate.linear import Factored, factored, independent_columns
from steelyard.estimate.regression import Regression, Scale
from steelyard.estimate.separation import refuse_separation

Floats = NDArray[np.float64]

# Largest step, in coefficients of unit-spread columns, at which a solution counts as reached.
STEP_TOLERANCE = 1e-9
MOST_STEPS = 60
# From so many blocks on, one in a few is solved first, roughly: two or three passes over all then suffice.
MANY_BLOCKS, EVERY_FEW, ROUGH = 64, 16, 1e-3
MOST_HALVINGS = 30
# From this step on, steps that do not shrink are looked at for separation.
SUSPICIOUS_STEPS = 9


@dataclass(frozen=True)
class _StepKernel:
    """From a block to its score, expected information and count of inadmissible rows at ``b``."""

    regression: Regression
    scale: Scale
    b: Floats

    def __call__(self, block: Block) -> tuple[Floats, Floats, int]:
        likelihood = self.regression.likelihood
        x, y, w, eta = _counted_rows(self.regression, self.scale, self.b, block)
        size = len(self.b)
        if not likelihood.admissible(eta):
            return np.zeros(size), np.zeros((size, size)), 1
        score = x.T @ (w * likelihood.score(y, eta))
        information = x.T @ (x * (w * likelihood.expected_information(eta))[:, np.newaxis])
        return score, information, 0


@dataclass(frozen=True)
class _DevianceKernel:
    """From a block to its deviance at ``b``, infinite where a row is inadmissible."""

    regression: Regression
    scale: Scale
    b: Floats

    def __call__(self, block: Block) -> float:
        _, y, w, eta = _counted_rows(self.regression, self.scale, self.b, block)
        likelihood = self.regression.likelihood
        return likelihood.deviance(y, eta, w) if likelihood.admissible(eta) else np.inf


def _counted_rows(
    regression: Regression, scale: Scale, b: Floats, block: Block
) -> tuple[Floats, Floats, Floats, Floats]:
    """Return columns, response, weight and linear predictor of the rows that carry weight."""
    x, y = scale(regression.columns(block)), regression.response(block)
    w = regression.weights(block)[:, 0]
    # A producer's replicate weights may be negative; such rows count.
    counted = w != 0
    if not counted.all():
        x, y, w = x[counted], y[counted], w[counted]
    return x, y, w, x @ b


@dataclass(frozen=True)
class _InformationKernel:
    """From a block to the observed information at ``b``."""

    regression: Regression
    scale: Scale
    b: Floats

    def __call__(self, block: Block) -> Floats:
        x = self.scale(self.regression.columns(block))
        w = self.regression.weights(block)[:, 0]
        h = self.regression.likelihood.information(self.regression.response(block), x @ self.b)
        return x.T @ (x * np.where(w != 0, w * h, 0)[:, np.newaxis])


@dataclass(frozen=True)
class _ResponseKernel:
    regression: Regression

    def __call__(self, block: Block) -> tuple[float, float]:
        w = self.regression.weights(block)[:, 0]
        return float(w @ self.regression.response(block)), float(w.sum())


@dataclass(frozen=True)
class Solution:
    """Scaled coefficients (p,), the information (p, p) near them, which columns it keeps, steps taken."""

    b: Floats
    information: Floats
    keep: NDArray[np.bool_]
    steps: int


@dataclass(frozen=True)
class Newton:
    """Newton's method (Fisher scoring off the canonical link) under column 0 of the regression's weights."""

    regression: Regression
    scale: Scale
    engine: Engine
    blocks: Sequence[Block]

    def under(self, column: int) -> Newton:
        """Return Newton's method under another column of the weights."""
        return replace(self, regression=self.regression.under([column]))

    def solve(self, start: Floats | None = None, tolerance: float = STEP_TOLERANCE) -> Solution:
        """Return the solution, from ``start`` (p,) or from a start of its own; steps end below ``tolerance``.

        Raises
        ------
        SeparationError
            The coefficients run away because columns separate the response.
        EstimationError
            They do not settle for another reason.
        """
        b = self._start() if start is None else start
        score, information, bad = self._at(b)
        if bad:
            raise self._failure("has no admissible starting point")
        keep = independent_columns(information)
        step, size = self._step(information, keep, score, b)
        for taken in range(1, MOST_STEPS + 1):
            if size <= tolerance:
                return Solution(b + step, information, keep, taken)
            if taken > SUSPICIOUS_STEPS and size > 0.1:
                self._look_for_separation(step)
            score, ahead, bad = self._at(b + step)
            if not bad:
                further, next_size = self._step(ahead, keep, score, b + step)
                if next_size < size:
                    b, step, size, information = b + step, further, next_size, ahead
                    continue
            b = self._shortened(b, step)
            score, information, _ = self._at(b)
            step, size = self._step(information, keep, score, b)
        self._look_for_separation(step)
        raise self._failure(f"did not settle in {MOST_STEPS} steps")

    def observed_information(self, solution: Solution) -> Factored:
        """Return the observed information at the solution, factored over the kept columns."""
        information = solution.information
        if not self.regression.likelihood.canonical:
            kernel = _InformationKernel(self.regression, self.scale, solution.b)
            information = self.engine.run(f"{self.regression.what}: information", self.blocks, kernel)
        try:
            return factored(information, solution.keep)
        except np.linalg.LinAlgError:
            raise self._failure("has no curvature at its solution") from None

    def _start(self) -> Floats:
        """Return the solution of every few blocks where there are many, else what the mean response says."""
        if len(self.blocks) >= MANY_BLOCKS:
            try:
                return replace(self, blocks=self.blocks[::EVERY_FEW]).solve(tolerance=ROUGH).b
            except EstimationError:
                # A few blocks may lack what the whole has; they are a short cut and nothing more.
                pass
        return self._from_mean()

    def _from_mean(self) -> Floats:
        b = np.zeros(len(self.regression.names))
        if self.regression.intercept is None:
            return b
        total, weight = self.engine.run(
            f"{self.regression.what}: start", self.blocks, _ResponseKernel(self.regression)
        )
        mean = total / weight
        if self.regression.likelihood.family == "binomial" and not 0 < mean < 1:
            raise EstimationError(
                f"{self.regression.what}: the response is {mean:g} in every row that carries weight.",
                mend="A model needs both values; check the domain and the missing codes.",
            )
        if self.regression.likelihood.family == "poisson" and mean <= 0:
            raise EstimationError(
                f"{self.regression.what}: the response is 0 in every row that carries weight.",
                mend="A model of counts needs at least one count above 0.",
            )
        if self.regression.likelihood.link == "log" and mean <= 0:
            raise EstimationError(
                f"{self.regression.what}: the mean response is {mean:g}, and a ratio needs a positive one.",
                mend='Ask for measure = "difference".',
            )
        b[self.regression.intercept] = self.regression.likelihood.predictor(np.array([mean]))[0]
        return b

    def _at(self, b: Floats) -> tuple[Floats, Floats, int]:
        kernel = _StepKernel(self.regression, self.scale, b)
        return self.engine.run(f"{self.regression.what}: fit", self.blocks, kernel)

    def _step(
        self, information: Floats, keep: NDArray[np.bool_], score: Floats, b: Floats
    ) -> tuple[Floats, float]:
        """Return the step and its size in coefficients of unit-spread columns."""
        try:
            step = factored(information, keep).solve(score)
        except np.linalg.LinAlgError:
            self._look_for_separation(b)
            raise self._failure("lost its curvature") from None
        return step, float(np.max(np.abs(step * self.scale.unit), initial=0))

    def _shortened(self, b: Floats, step: Floats) -> Floats:
        """Return where the longest of the step, its half, its quarter, ... leads that does not raise the deviance."""
        before = self._deviance(b)
        for _ in range(MOST_HALVINGS):
            if self._deviance(b + step) <= before + 1e-9 * (abs(before) + 1):
                return b + step
            step = step / 2
        raise self._failure("found no step that improves it")

    def _deviance(self, b: Floats) -> float:
        kernel = _DevianceKernel(self.regression, self.scale, b)
        return self.engine.run(f"{self.regression.what}: deviance", self.blocks, kernel)

    def _look_for_separation(self, direction: Floats) -> None:
        if self.regression.likelihood.family == "binomial":
            refuse_separation(self.regression, self.scale, direction, self.engine, self.blocks)

    def _failure(self, what: str) -> EstimationError:
        return EstimationError(
            f"{self.regression.what}: the fit {what}.",
            mend="Look for very rare categories or nearly redundant covariates, and join or drop them; "
            "for a ratio or a difference of a binary outcome with covariates, ask for an odds ratio.",
        )
