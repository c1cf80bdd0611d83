"""The propensity model: maximum pseudo-likelihood over the design rows, then the weights it makes."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block, Rows
from steelyard.data.exposed_clusters import SHARE
from steelyard.data.passes import Engine
from steelyard.data.unit_totals import Product
from steelyard.errors import OverlapError
from steelyard.estimate.estimates import Estimates
from steelyard.estimate.fit import Fit, fit
from steelyard.estimate.likelihood import Likelihood
from steelyard.estimate.quantiles import weighted_quantile
from steelyard.estimate.regression import Regression, model_moments
from steelyard.estimate.separation import refuse_separating_columns
from steelyard.estimate.weights import ClusterShares, UnweightedFit, WeightColumns
from steelyard.exposure.balancing import BalancedRows, Balancing
from steelyard.plan import Exposure

Floats = NDArray[np.float64]

# Weights of this many columns are gathered at a time when caps are looked for.
COLUMNS_GATHERED = 8


def exposed(block: Block) -> Floats:
    """Return the exposure as the response of a model, (n,)."""
    return block.exposure


def fit_propensity(rows: Rows, exposure: Exposure, sampling: WeightColumns, engine: Engine) -> Fit:
    """Fit the propensity by maximum pseudo-likelihood (Binder 1983), under every column of weights.

    Raises
    ------
    SeparationError
        Covariates tell exposed and reference apart; the message names them.
    EstimationError
        The fit does not settle.
    """
    model = rows.exposure_model
    regression = Regression(
        names=model.names,
        columns=model.of,
        response=exposed,
        weights=fit_weights(exposure, sampling, rows),
        likelihood=Likelihood("binomial", exposure.link),
        intercept=model.intercept,
        what="exposure model",
    )
    moments = model_moments(regression, engine, rows.blocks)
    refuse_separating_columns(model.names, moments, rows.levels)
    return fit(regression, moments, engine, rows.blocks)


def coefficients(made: Balancing) -> Estimates:
    """Return the propensity's coefficients, on the columns' own scale, as estimates."""
    size = len(made.fit.scaled)
    of_nuisance = np.zeros((made.nuisances, size))
    of_nuisance[:size] = made.fit.scale.matrix().T
    return Estimates(
        made.fit.regression.names,
        made.fit.coefficients,
        no_products,
        np.zeros((0, size)),
        "sampling",
        of_nuisance,
    )


def no_products(rows: BalancedRows) -> list[Product]:
    """Return no products: these estimates are the nuisance parameters, whose influence is there already."""
    return []


def fit_weights(exposure: Exposure, sampling: WeightColumns, rows: Rows) -> WeightColumns:
    """Return the weights that the propensity is fitted under.

    The sampling weights; or what replicates make of 1; or, where clusters are exposed, the rows' shares of their
    clusters' weights.
    """
    if exposure.clusters is not None:
        return ClusterShares(sampling, rows.carried[SHARE])
    return sampling if exposure.weighted else UnweightedFit(sampling)


def balancing(
    rows: Rows, exposure: Exposure, propensity: Fit, sampling: WeightColumns, engine: Engine
) -> Balancing:
    """Turn a fitted propensity into the plan's balancing weights: stabilized, trimmed and capped as asked.

    The range is applied first, then the cap, at a quantile of the combined weights that are left.

    Raises
    ------
    OverlapError
        A propensity is so near 0 or 1 that its weight is not finite, or trimming leaves a group empty.
    """
    made = Balancing(
        propensity,
        sampling,
        exposure.estimand,
        propensity_range=exposure.propensity_range,
    )
    made = _stabilized(made, exposure, engine, rows.blocks)
    _refuse_empty_groups(rows, made, engine)
    return _capped(made, exposure, engine, rows.blocks)


def rebalanced(
    full: Balancing,
    exposure: Exposure,
    propensity: Fit,
    sampling: WeightColumns,
    engine: Engine,
    blocks: Sequence[Block],
) -> Balancing:
    """Return the balancing weights under other columns of weights, each with a share and a cap of its own."""
    made = replace(full, fit=propensity, sampling=sampling, share=None, total=None, cap=None)
    return _capped(_stabilized(made, exposure, engine, blocks), exposure, engine, blocks)


def _stabilized(made: Balancing, exposure: Exposure, engine: Engine, blocks: Sequence[Block]) -> Balancing:
    if not exposure.stabilize:
        return made
    weighted, total = engine.run("share of the exposed", blocks, _ShareKernel(made.sampling))
    with np.errstate(divide="ignore", invalid="ignore"):
        return replace(made, share=weighted / total, total=total)


def _capped(made: Balancing, exposure: Exposure, engine: Engine, blocks: Sequence[Block]) -> Balancing:
    if exposure.cap_quantile is None:
        return made
    return replace(made, cap=_caps(made, exposure.cap_quantile, engine, blocks))


@dataclass(frozen=True)
class _ShareKernel:
    sampling: WeightColumns

    def __call__(self, block: Block) -> tuple[Floats, Floats]:
        weights = self.sampling(block)
        return block.exposure @ weights, weights.sum(axis=0)


@dataclass(frozen=True)
class _GroupsKernel:
    """Count, in column 0, the rows with weight in each group and the weights that are not finite."""

    balancing: Balancing

    def __call__(self, block: Block) -> tuple[int, int, int]:
        balanced = self.balancing.rows(block)
        combined = balanced.combined[:, 0]
        present = (combined > 0) & (block.weight > 0)
        is_exposed = balanced.exposed[:, 0]
        broken = ~np.isfinite(balanced.balancing[:, 0]) & (block.weight > 0)
        return int((present & is_exposed).sum()), int((present & ~is_exposed).sum()), int(broken.sum())


def _refuse_empty_groups(rows: Rows, made: Balancing, engine: Engine) -> None:
    counts = engine.run("balancing weights", rows.blocks, _GroupsKernel(made.only([0])))
    if counts[2]:
        raise OverlapError(
            f"{counts[2]:,} row(s) have a propensity so near 0 or 1 that their {made.estimand} weight has no "
            "finite value.",
            mend='Ask for estimand = "ATO", set exposure.propensity_range, or simplify the exposure formula.',
        )
    for name, level, count in zip(("exposed", "reference"), rows.levels, counts[:2], strict=True):
        if not count:
            raise OverlapError(
                f"No {name} row ({level}) that carries weight is left inside the propensity range "
                f"{list(made.propensity_range or ())}.",
                mend="Widen exposure.propensity_range.",
            )


@dataclass(frozen=True)
class _CombinedKernel:
    """The uncapped combined weights under the full sample's ``s``, and each replicate's multiplier."""

    balancing: Balancing

    def __call__(self, block: Block) -> list[tuple[Floats, Floats]]:
        balanced = self.balancing.rows(block)
        weight = block.weight[:, np.newaxis]
        counted = block.weight > 0
        multiplier = balanced.sampling[counted] / weight[counted]
        return [((weight * balanced.uncapped)[counted], multiplier)]


def _caps(made: Balancing, quantile: float, engine: Engine, blocks: Sequence[Block]) -> Floats:
    """Return, for each column, the quantile of the positive combined weights."""
    caps = np.empty(made.count)
    for first in range(0, made.count, COLUMNS_GATHERED):
        some = np.arange(first, min(first + COLUMNS_GATHERED, made.count))
        parts = engine.run("cap of the combined weights", blocks, _CombinedKernel(made.only(some)))
        combined = np.concatenate([part[0] for part in parts])
        multiplier = np.concatenate([part[1] for part in parts])
        for j, column in enumerate(some):
            carries = combined[:, j] > 0
            caps[column] = weighted_quantile(combined[carries, j], multiplier[carries, j], quantile)
    return caps
