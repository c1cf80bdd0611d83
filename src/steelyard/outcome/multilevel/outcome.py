"""The effect as the exposure's coefficient in a linear mixed model, under a weight at each level.

Everything the model estimates is handed over: coefficients, variances between clusters, their shares.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Model, Rows
from steelyard.data.passes import Engine
from steelyard.data.unit_totals import Product
from steelyard.errors import PlanError
from steelyard.estimate.estimates import Estimates
from steelyard.exposure.balancing import BalancedRows, Balancing
from steelyard.outcome.multilevel.level_rows import LevelRows, factors, level_rows
from steelyard.outcome.multilevel.linear import LinearFit, fit_linear
from steelyard.outcome.multilevel.linear_derived import intraclass_correlation
from steelyard.outcome.multilevel.linear_influence import Drifts, Scores
from steelyard.outcome.multilevel.linear_standard import LinearModel
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.scaling import LevelWeights
from steelyard.plan import Outcome, Scaling

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

# Columns of weights that are held for all rows at a time.
COLUMNS_HELD = 8


@dataclass(frozen=True)
class LookedUp:
    """Influences that were worked out for all rows together, found again by a row's position."""

    position: Integers
    influence: Floats

    def __call__(self, rows: BalancedRows) -> list[Product]:
        """Return the influence of a block's rows as one product with ones."""
        place = np.searchsorted(self.position, rows.block.position)
        return [(np.ones((len(place), 1)), self.influence[place])]


@dataclass(frozen=True)
class MultilevelOutcome:
    """A multilevel model of one outcome, under each scaling of the rows' weights that was asked for.

    Attributes
    ----------
    name : str
    rows : Rows
    level : LevelRows
    estimates : mapping
        Scaling -> every parameter, then the intraclass correlations.
    fits : mapping
        Scaling -> LinearFit of the full sample.
    failed : mapping
        Column of weights -> why it has no solution.
    """

    name: str
    rows: Rows
    level: LevelRows
    estimates: dict[Scaling, Estimates]
    fits: dict[Scaling, LinearFit]
    failed: dict[int, str]

    @property
    def scaling(self) -> Scaling:
        """The scaling of the answer."""
        return next(iter(self.fits))

    def effect(self) -> Estimates:
        """Return the exposure's coefficient under the answer's scaling."""
        return self.effect_under(self.scaling, self.name)

    def effect_under(self, scaling: Scaling, name: str) -> Estimates:
        """Return the exposure's coefficient under a scaling."""
        every = self.estimates[scaling]
        place = len(self.level.fixed) - 1
        of_nuisance = every.of_nuisance
        return replace(
            every,
            names=(name,),
            values=every.values[place : place + 1],
            combine=every.combine[:, place : place + 1],
            of_nuisance=None if of_nuisance is None else of_nuisance[:, place : place + 1],
        )

    def under(self, made: Balancing, engine: Engine) -> MultilevelOutcome:
        """Return the model under other columns of weights, whose column 0 is the one it has."""
        parts: dict[Scaling, list[Floats]] = {scaling: [] for scaling in self.fits}
        failed: dict[int, str] = {}
        for first in range(1, made.count, COLUMNS_HELD):
            some = np.arange(first, min(first + COLUMNS_HELD, made.count))
            weights = self.level.weights(
                *(self.level.of_blocks(part) for part in factors(made.only([0, *some]), self.rows))
            )
            for scaling, fit in self.fits.items():
                runs = self.level.runs(weights, scaling)
                again = fit_linear(fit.model, engine, runs, start=fit.values[:, 0])
                values = np.concatenate([again.values, intraclass_correlation(again).values])
                parts[scaling].append(values if first == 1 else values[:, 1:])
                failed |= {int(some[column - 1]): why for column, why in again.failed.items()}
        estimates = {}
        for scaling, found in parts.items():
            values = np.concatenate(found, axis=1)
            values[:, list(made.failed)] = np.nan
            estimates[scaling] = replace(self.estimates[scaling], values=values)
        return replace(self, estimates=estimates, failed={**failed, **made.failed})


def multilevel_outcome(
    outcome: Outcome,
    name: str,
    place: int,
    model: Model | None,
    rows: Rows,
    made: Balancing,
    engine: Engine,
    exposed: str | None = None,
) -> MultilevelOutcome:
    """Fit an outcome's multilevel model to the full sample, and work out its influences.

    ``exposed`` names the clusters that are exposed as a whole, if any.

    Raises
    ------
    PlanError
        The covariates leave out the intercept, or make the exposure redundant.
    EstimationError
        The model cannot be told apart on these rows, or does not settle.

    Notes
    -----
    Pseudo-maximum likelihood with a weight at each level (Pfeffermann et al. 1998; Rabe-Hesketh & Skrondal 2006);
    the balancing weight multiplies the conditional weights of the level that is exposed, before they are scaled.
    A top-most cluster's influence is shared by its rows, which leaves the totals of PSUs as they are; what the
    estimated propensity brings follows the weights of the level that is exposed (Binder 1983).
    """
    assert outcome.multilevel is not None
    if model is not None and model.intercept is None:
        raise PlanError(
            f'outcome "{outcome.name}": the covariates "{outcome.covariates}" leave out the intercept.',
            mend="Remove the 0 or -1 from them: the reference group's mean needs it.",
        )
    full = made.only([0])
    level = level_rows(rows, outcome.multilevel, place, model, exposed)
    estimates: dict[Scaling, Estimates] = {}
    fits: dict[Scaling, LinearFit] = {}
    described = LinearModel(
        level.fixed, level.random, level.levels, f'multilevel model of outcome "{outcome.name}"'
    )
    weights = level.weights(*(level.of_blocks(part) for part in factors(full, rows)))
    for scaling in outcome.multilevel.scaling:
        runs = level.runs(weights, scaling)
        fit = fit_linear(described, engine, runs)
        if "exposure" in fit.aliased:
            raise PlanError(
                f'outcome "{outcome.name}": the covariates "{outcome.covariates}" determine the exposure.',
                mend="Take the exposure, or what is computed from it, out of the covariates.",
            )
        fits[scaling] = fit
        estimates[scaling] = _estimates(level, rows, full, fit, runs, weights, scaling)
    found = MultilevelOutcome(name, rows, level, estimates, fits, {})
    return found if made.count == 1 else found.under(made, engine)


def _estimates(
    level: LevelRows,
    rows: Rows,
    full: Balancing,
    fit: LinearFit,
    runs: Sequence[Nested],
    weights: LevelWeights,
    scaling: Scaling,
) -> Estimates:
    shares = intraclass_correlation(fit)
    to_all = fit.combine @ np.column_stack([np.eye(len(fit.names)), shares.slopes])
    by_cluster = np.concatenate([Scores(fit)(run) for run in runs]) @ to_all
    outermost = level.outermost
    sizes = np.bincount(outermost)
    influence = by_cluster[outermost] / (sizes[outermost] * level.sampling)[:, np.newaxis]
    drifts = [Drifts(fit)(run) for run in runs]
    of_tops = [part.top for part in drifts if part.top is not None]
    drift = level.by_balancing(
        np.concatenate([part.row for part in drifts]),
        np.concatenate([part.cluster for part in drifts]),
        np.concatenate(of_tops) if of_tops else None,
        weights,
        scaling,
    )
    position = np.concatenate([block.position for block in rows.blocks])
    return Estimates(
        (*fit.names, *shares.names),
        np.concatenate([fit.values, shares.values])[:, :1],
        LookedUp(position, level.to_blocks(influence)),
        np.eye(to_all.shape[1]),
        "sampling",
        _through_propensity(full, rows, level.to_blocks(drift @ to_all)),
    )


def _through_propensity(full: Balancing, rows: Rows, drift: Floats) -> Floats:
    """Return the derivatives of the estimates in the nuisance parameters, (P, k), from those by log row weights."""
    total = np.zeros((full.nuisances, drift.shape[1]))
    first = 0
    for block in rows.blocks:
        balanced = full.rows(block)
        here = drift[first : first + len(block)]
        first += len(block)
        weight = balanced.balancing[:, 0]
        slope, in_share = (
            np.divide(part, weight, out=np.zeros_like(weight), where=weight > 0)
            for part in (balanced.slope, balanced.share_slope)
        )
        total[: balanced.columns.shape[1]] += (balanced.columns * slope[:, np.newaxis]).T @ here
        if full.share is not None:
            total[-1] += in_share @ here
    return total
