"""The effect as the exposure's coefficient in a regression under the combined weights, with covariates."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block, Model
from steelyard.data.passes import Engine
from steelyard.data.unit_totals import Product
from steelyard.errors import PlanError
from steelyard.estimate.estimates import Estimates
from steelyard.estimate.fit import Fit, fit, refit
from steelyard.estimate.likelihood import Likelihood
from steelyard.estimate.regression import Regression, model_moments
from steelyard.exposure.balancing import BalancedRows, Balancing
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
    """A solved outcome model under the combined weights."""

    name: str
    fit: Fit

    def coefficients(self) -> Estimates:
        """Return every coefficient: the covariates', then the exposure's.

        Notes
        -----
        ``u_i = J^-1 c_i score_i x_i``, plus what the propensity's coefficients bring, with ``J`` the observed
        information under the combined weights (Binder 1983; Lunceford & Davidian 2004).
        """
        combine = self.fit.information.inverse() @ self.fit.scale.matrix().T
        names = self.fit.regression.names
        return Estimates(names, self.fit.coefficients, Scores(self.fit), combine, "combined")

    def effect(self) -> Estimates:
        """Return the exposure's coefficient."""
        every = self.coefficients()
        return replace(every, names=(self.name,), values=every.values[-1:], combine=every.combine[:, -1:])

    def under(self, balancing: Balancing, engine: Engine, blocks: Sequence[Block]) -> OutcomeRegression:
        """Return the model under other columns of combined weights, whose column 0 is the one it has."""
        return replace(self, fit=refit(self.fit, balancing, engine, blocks, unsolvable=balancing.failed))


@dataclass(frozen=True)
class Scores:
    """Each row's score under a weight of one, as one product of the model's columns."""

    fit: Fit

    def __call__(self, rows: BalancedRows) -> list[Product]:
        """Return the products of a block's rows."""
        columns = self.fit.columns(rows.block)
        regression = self.fit.regression
        score = regression.likelihood.score(regression.response(rows.block), columns @ self.fit.scaled[:, 0])
        return [(score[:, np.newaxis], columns)]


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
    return OutcomeRegression(name, fitted)
