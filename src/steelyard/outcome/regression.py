"""The effect as the exposure's coefficient in a regression under the combined weights, with covariates."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block, Model
from steelyard.data.passes import Engine
from steelyard.errors import PlanError
from steelyard.estimate.estimates import Estimates
from steelyard.estimate.fit import Fit, fit
from steelyard.estimate.likelihood import Likelihood
from steelyard.estimate.regression import Regression, model_moments
from steelyard.exposure.balancing import BalancedRows, Balancing
from steelyard.exposure.weighing import AFTER, Weighing
from steelyard.outcome.measures import SCALES
from steelyard.plan import Outcome

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class ExposureAndCovariates:
    """From a block to the covariates' columns and, last, the exposure; (n, p + 1)."""

    model: Model

    def __call__(self, block: Block) -> Floats:
        """Return the block's columns."""
        return np.column_stack([self.model.of(block), block.exposure])


@dataclass(frozen=True)
class OutcomeColumn:
    """From a block to one outcome, (n,)."""

    place: int

    def __call__(self, block: Block) -> Floats:
        """Return the block's outcome."""
        return np.ascontiguousarray(block.columns[:, self.place])


@dataclass(frozen=True)
class OutcomeRegression:
    """A solved outcome model, and how its score drifts with the nuisance parameters; ``drift`` (p + 1, P)."""

    name: str
    fit: Fit
    drift: Floats
    weighing: Weighing = AFTER

    def known(self) -> OutcomeRegression:
        """Return the same model with the propensity taken as known."""
        return replace(self, weighing=replace(self.weighing, known=True))

    def coefficients(self) -> Estimates:
        """Return every coefficient: the covariates', then the exposure's."""
        names = self.fit.regression.names
        return Estimates(names, self.fit.coefficients, RegressionInfluence(self, np.arange(len(names))))

    def effect(self) -> Estimates:
        """Return the exposure's coefficient."""
        last = np.array([len(self.fit.scaled) - 1])
        return Estimates((self.name,), self.fit.coefficients[last], RegressionInfluence(self, last))


@dataclass(frozen=True)
class RegressionInfluence:
    """Influence of each row on some coefficients of an outcome model.

    Notes
    -----
    ``u_i = J^-1 [c_i score_i x_i + G u_i(g)]``, with ``J`` the observed information under the combined
    weights and ``G = sum s score x (dc/dg)'`` the drift of the estimating equation with the propensity's
    coefficients ``g`` (stacked estimating equations: Binder 1983; Lunceford & Davidian 2004).
    """

    regression: OutcomeRegression
    places: NDArray[np.intp]

    def __call__(self, rows: BalancedRows) -> Floats:
        """Return the (n, k) influences in a block's rows."""
        fitted, weighing = self.regression.fit, self.regression.weighing
        columns = fitted.columns(rows.block)
        eta = columns @ fitted.scaled[:, 0]
        influence = fitted.influence(rows.block, columns, eta) * weighing.relative(rows)[:, np.newaxis]
        if weighing.estimated():
            influence += rows.nuisance_influence @ fitted.information.solve(self.regression.drift).T
        return np.asarray(influence @ fitted.scale.matrix()[self.places].T)


def outcome_regression(
    outcome: Outcome,
    name: str,
    place: int,
    model: Model,
    balancing: Balancing,
    engine: Engine,
    blocks: Sequence[Block],
) -> OutcomeRegression:
    """Fit the outcome on exposure and covariates under every column of combined weights.

    The measure chooses the link: identity for a difference, log for a ratio, logit for an odds ratio.

    Raises
    ------
    PlanError
        The covariates leave out the intercept, or make the exposure redundant.
    EstimationError
        The fit does not settle.
    """
    if model.intercept is None:
        raise PlanError(
            f'outcome "{outcome.name}": the covariates "{outcome.covariates}" leave out the intercept.',
            mend="Remove the 0 or -1 from them: the reference group's mean needs it.",
        )
    regression = Regression(
        # The exposure comes last, so that a covariate that determines it is found out as what it is.
        names=(*model.names, "exposure"),
        columns=ExposureAndCovariates(model),
        response=OutcomeColumn(place),
        weights=balancing,
        likelihood=Likelihood(outcome.family, SCALES[outcome.measure].link),
        intercept=model.intercept,
        what=f'outcome model of "{outcome.name}"',
    )
    fitted = fit(regression, model_moments(regression, engine, blocks), engine, blocks)
    if "exposure" in fitted.aliased:
        raise PlanError(
            f'outcome "{outcome.name}": the covariates "{outcome.covariates}" determine the exposure.',
            mend="Take the exposure, or what is computed from it, out of the covariates.",
        )
    drift = engine.run(
        f'outcome model of "{outcome.name}": propensity estimated', blocks, _DriftKernel(fitted, balancing)
    )
    return OutcomeRegression(name, fitted, drift)


@dataclass(frozen=True)
class _DriftKernel:
    fitted: Fit
    balancing: Balancing

    def __call__(self, block: Block) -> Floats:
        rows = self.balancing.rows(block)
        columns = self.fitted.columns(block)
        regression = self.fitted.regression
        slope = regression.likelihood.score(regression.response(block), columns @ self.fitted.scaled[:, 0])
        return np.asarray((columns * (block.weight * slope)[:, np.newaxis]).T @ rows.slopes)
