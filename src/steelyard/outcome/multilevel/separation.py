"""Columns of a multilevel model that settle the response of some rows, so that coefficients have no bound.

A direction of the fixed effects along which no row's likelihood falls and some rows' rises for ever separates the
data (Albert & Anderson 1984 for binary responses; for counts, rows with a count must lie on its plane and the
others on its lower side). Random effects do not change that.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.passes import Engine
from steelyard.errors import SeparationError
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear

Floats = NDArray[np.float64]

# Entries of a direction below this share of its largest are rounding, or have not converged.
DIRECTION_TOLERANCE = 1e-2
NAMES_SHOWN = 8


@dataclass(frozen=True)
class _Spread:
    """The largest absolute value of each column among rows that count; merged by maximum."""

    model: Nonlinear
    column: int

    def __call__(self, run: Nested) -> Floats:
        counted = self.model.overall_weights(run)[:, self.column] > 0
        return np.asarray(np.abs(run.x[counted]).max(axis=0, initial=0))


@dataclass(frozen=True)
class _Lean:
    """Count the rows a direction speaks against, the rows it settles, and the rows that count."""

    model: Nonlinear
    direction: Floats
    column: int

    def __call__(self, run: Nested) -> tuple[int, int, int]:
        counted = self.model.overall_weights(run)[:, self.column] > 0
        lean, y = run.x[counted] @ self.direction, run.y[counted]
        slack = 10 * DIRECTION_TOLERANCE
        if self.model.family == "binomial":
            lean = np.where(y > 0.5, lean, -lean)
            against = lean < -slack
        else:
            against = np.where(y > 0, np.abs(lean), lean) > slack
        return int(against.sum()), int((np.abs(lean) > slack).sum()), int(counted.sum())


def refuse_runaway(
    model: Nonlinear, direction: Floats, runs: Sequence[Nested], engine: Engine, column: int = 0
) -> None:
    """Refuse if ``direction`` (p,), where the fixed effects are heading, separates the response.

    ``column`` says under which column of weights: rows of weight zero do not count.

    Raises
    ------
    SeparationError
        Naming the columns with a part in it, and how many rows they settle.
    """
    what = f"{model.what}: separation"
    reach = np.abs(direction) * engine.run(what, runs, _Spread(model, column), np.maximum)
    if not reach.any():
        return
    involved = reach > DIRECTION_TOLERANCE * reach.max()
    direction = np.where(involved, direction, 0) / reach.max()
    against, settled, rows = engine.run(what, runs, _Lean(model, direction, column))
    if against or not settled:
        return
    names = [name for name, part in zip(model.fixed, involved, strict=True) if part]
    shown = ", ".join(names[:NAMES_SHOWN]) + (
        f" and {len(names) - NAMES_SHOWN} more" if len(names) > NAMES_SHOWN else ""
    )
    raise SeparationError(
        f"{model.what}: {shown} settle the response of {settled:,} of {rows:,} rows without error, "
        "so the coefficients grow without bound.",
        mend="Join rare categories, drop one of these covariates or use fewer spline terms, or leave "
        "the rows without a counterpart out through data.domain.",
    )
