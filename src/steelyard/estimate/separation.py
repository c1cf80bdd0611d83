"""Separation: covariates that tell the two values of a binary response apart, and their names.

When a direction of the coefficients never speaks against any row, the likelihood grows along it for
ever and no finite coefficients exist (Albert & Anderson 1984).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.errors import SeparationError
from steelyard.estimate.moments import EXPOSED, REFERENCE, Moments
from steelyard.estimate.regression import Regression, Scale

Floats = NDArray[np.float64]

# Coefficients of a separating direction below this share of the largest are rounding.
DIRECTION_TOLERANCE = 1e-3
NAMES_SHOWN = 8


def refuse_separating_columns(names: tuple[str, ...], moments: Moments, levels: tuple[str, str]) -> None:
    """Refuse columns that separate the exposed from the reference on their own.

    A column does so when its largest value in one group does not exceed its smallest in the other:
    a category without exposed rows is the usual case.

    Raises
    ------
    SeparationError
        Naming each such column, and the group it is confined to.
    """
    high, low = moments.high, moments.low
    varies = high.max(axis=0) > low.min(axis=0)
    apart = varies & ((low[EXPOSED] >= high[REFERENCE]) | (low[REFERENCE] >= high[EXPOSED]))
    if not apart.any():
        return
    told = [_describe(names[j], j, moments, levels) for j in np.flatnonzero(apart)[:NAMES_SHOWN]]
    more = int(apart.sum()) - len(told)
    raise SeparationError(
        f"exposure model: {int(apart.sum())} column(s) tell the exposed from the reference without error: "
        f"{'; '.join(told)}{f'; and {more} more' if more else ''}.",
        mend="Join such a category with a neighbour, drop the covariate, or leave those rows out "
        "through data.domain: they have no counterpart to be compared with.",
    )


def _describe(name: str, j: int, moments: Moments, levels: tuple[str, str]) -> str:
    for group, other in ((EXPOSED, REFERENCE), (REFERENCE, EXPOSED)):
        if moments.low[group, j] == moments.high[group, j] == 0:
            rows = int(moments.present[other, j])
            return f"{name} (all {rows} rows with it are {('exposed', 'reference')[other]}, {levels[other]})"
    return (
        f"{name} (exposed {moments.low[EXPOSED, j]:g} to {moments.high[EXPOSED, j]:g}, "
        f"reference {moments.low[REFERENCE, j]:g} to {moments.high[REFERENCE, j]:g})"
    )


def refuse_separation(
    regression: Regression,
    scale: Scale,
    direction: Floats,
    engine: Engine,
    blocks: Sequence[Block],
) -> None:
    """Refuse if ``direction`` (p,), where Newton's steps are heading, separates the response.

    Rows without weight in column 0 do not count.

    Raises
    ------
    SeparationError
        Naming the columns with a part in it, and how many rows they settle.
    """
    reach = np.abs(direction * scale.unit)
    if not reach.any():
        return
    direction = np.where(reach > DIRECTION_TOLERANCE * reach.max(), direction, 0) / reach.max()
    against, settled, rows = engine.run(
        f"{regression.what}: separation", blocks, _DirectionKernel(regression, scale, direction)
    )
    if against or not settled:
        return
    involved = [n for j, n in enumerate(regression.names) if direction[j] != 0 and j != regression.intercept]
    shown = ", ".join(involved[:NAMES_SHOWN]) + (
        f" and {len(involved) - NAMES_SHOWN} more" if len(involved) > NAMES_SHOWN else ""
    )
    raise SeparationError(
        f"{regression.what}: together, {shown} tell the two groups apart without error for "
        f"{settled:,} of {rows:,} rows, so the coefficients grow without bound.",
        mend="Join rare categories, drop one of these covariates or use fewer spline terms, or leave "
        "the rows without a counterpart out through data.domain.",
    )


@dataclass(frozen=True)
class _DirectionKernel:
    """Count the rows a direction speaks against, the rows it settles, and all rows with weight."""

    regression: Regression
    scale: Scale
    direction: Floats

    def __call__(self, block: Block) -> tuple[int, int, int]:
        counted = self.regression.weights(block)[:, 0] != 0
        x = self.scale(self.regression.columns(block))[counted]
        sign = np.where(self.regression.response(block)[counted] > 0.5, 1.0, -1.0)
        lean = sign * (x @ self.direction)
        # Rows on the separating plane itself are off it by the rounding and the convergence of the direction.
        slack = DIRECTION_TOLERANCE * 10 * max(1.0, float(np.max(np.abs(lean), initial=0)))
        return int((lean < -slack).sum()), int((lean > slack).sum()), int(counted.sum())
