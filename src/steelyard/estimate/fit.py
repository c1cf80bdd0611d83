"""Weighted maximum likelihood over blocks, for one model under every column of weights at once.

Column 0 is solved by Newton's method. The other columns start at its solution and step together
with its information factored once; a column that has not settled after a few such steps gets
Newton steps of its own. Columns of the model are centred and scaled inside the fit where their means
or units could harm it.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.data.unit_totals import UnitTotals
from steelyard.estimate.linear import Factored
from steelyard.estimate.moments import Moments
from steelyard.estimate.newton import Newton
from steelyard.estimate.regression import Regression, Scale, model_scale
from steelyard.estimate.together import solve_replicates, sums_by_unit
from steelyard.estimate.weights import WeightColumns

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Fit:
    """A solved regression.

    Attributes
    ----------
    regression : Regression
    scale : Scale
    scaled : (p, K)
        Coefficients of the columns on the fit's scale, a column for each column of weights.
    information : Factored
        The observed information of the full sample about them, at the solution.
    aliased : names of columns that others make redundant; their coefficients are zero
    steps : int
        Newton steps that column 0 took.
    failed : mapping
        Column of weights -> why it has no solution. Its coefficients are NaN.
    """

    regression: Regression
    scale: Scale
    scaled: Floats
    information: Factored
    aliased: tuple[str, ...]
    steps: int
    failed: dict[int, str]

    @property
    def coefficients(self) -> Floats:
        """Coefficients of the columns as they are, (p, K)."""
        coefficients: Floats = self.scale.matrix() @ self.scaled
        return coefficients

    def columns(self, block: Block) -> Floats:
        """Return the block's columns on the fit's scale, (n, p)."""
        return self.scale(self.regression.columns(block))


def fit(regression: Regression, moments: Moments, engine: Engine, blocks: Sequence[Block]) -> Fit:
    """Solve ``sum w score(y, x'b) x = 0`` for every column of weights.

    ``moments`` are those of :func:`steelyard.estimate.regression.model_moments`.

    Raises
    ------
    SeparationError
        Columns of the model tell the two values of a binary response apart.
    EstimationError
        The full sample has no solution within the allowed steps.
    """
    newton = Newton(regression, model_scale(moments, regression.intercept), engine, blocks)
    solution = newton.under(0).solve()
    information = newton.under(0).observed_information(solution)
    aliased = tuple(n for n, kept in zip(regression.names, information.keep, strict=True) if not kept)
    sums = sums_by_unit(newton, solution.b) if regression.weights.count > 1 else None
    scaled, failed = solve_replicates(newton, solution.b, information, sums)
    return Fit(regression, newton.scale, scaled, information, aliased, solution.steps, failed)


def refit(
    full: Fit,
    weights: WeightColumns,
    engine: Engine,
    blocks: Sequence[Block],
    sums: UnitTotals | None = None,
    unsolvable: Mapping[int, str] | None = None,
) -> Fit:
    """Return the fit under other columns of weights, whose column 0 is that of ``full``.

    ``sums`` are those of :func:`replicate_sums`; ``unsolvable`` names columns whose weights are not there, and
    why: they are passed on as failed.
    """
    newton = _under(full, weights, engine, blocks)
    scaled, failed = solve_replicates(newton, full.scaled[:, 0], full.information, sums, unsolvable)
    return replace(full, regression=newton.regression, scaled=scaled, failed=failed)


def replicate_sums(
    full: Fit, weights: WeightColumns, engine: Engine, blocks: Sequence[Block]
) -> UnitTotals | None:
    """Return what every refit under columns like these starts from; None where there is no such short cut."""
    return sums_by_unit(_under(full, weights, engine, blocks), full.scaled[:, 0])


def _under(full: Fit, weights: WeightColumns, engine: Engine, blocks: Sequence[Block]) -> Newton:
    return Newton(replace(full.regression, weights=weights), full.scale, engine, blocks)
