"""All replicate columns of weights at once: shared steps first, then own steps for those that need them.

Never a fit a replicate. Columns whose weights are a unit's multiplier take their first step from sums by
unit, with an information matrix of their own that costs nothing more; all columns then step together,
block by block, until they settle.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.unit_totals import Product, UnitTotals, totals_by_unit
from steelyard.errors import EstimationError
from steelyard.estimate.linear import ALIAS_TOLERANCE, Factored
from steelyard.estimate.newton import Newton
from steelyard.estimate.regression import Regression, Scale
from steelyard.estimate.weights import UnitWeights, multiplied_by_unit

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

SHARED_STEPS = 10
# Largest error, in coefficients of unit-spread columns, that the steps left to take may still correct.
ERROR_TOLERANCE = 1e-9
# A column whose steps shrink by less than this is better served by steps of its own.
SLOWEST = 0.5
# Numbers that the sums by unit may take (128 MB): beyond, columns share the full sample's information.
MOST_SUMS = 16_000_000
# So many rows at a time keep all columns' work in cache.
PIECE_ROWS = 2048


def solve_replicates(
    newton: Newton,
    b: Floats,
    information: Factored,
    sums: UnitTotals | None = None,
    unsolvable: Mapping[int, str] | None = None,
) -> tuple[Floats, dict[int, str]]:
    """Return scaled coefficients for every column of weights, (p, K), and why columns have none.

    Parameters
    ----------
    b : (p,)
        The solution of column 0, where every other column starts.
    information : Factored
        The full sample's, at ``b``.
    sums : UnitTotals or None
        Those of :func:`sums_by_unit`, for weights that are multiplied unit by unit.
    unsolvable : mapping
        Columns whose weights are not there, and why: they are passed on as failed.

    Notes
    -----
    ``B += H^-1 G`` with ``G = X' (W * score(Y, X B))``, block by block. ``H`` is the column's own information
    at ``b`` where weights are multiplied unit by unit (the sum of the units' informations times the
    multipliers), else the full sample's. A step shrinks the error by about how far the column's
    information at its solution is from ``H``; with steps of sizes ``d`` and ``r d`` what is left after the
    second is about ``r^2 d / (1 - r)``, and a column stops when that is below the tolerance. Columns that
    do not shrink, or lose a column of the model, take Newton steps of their own.
    """
    count = newton.regression.weights.count
    coefficients = np.repeat(b[:, np.newaxis], count, axis=1)
    failed = dict(unsolvable or {})
    moving = np.array([k for k in range(1, count) if k not in failed], dtype=np.int64)
    inverses, own = np.repeat(information.inverse()[np.newaxis], len(moving), axis=0), []
    sizes = np.full(len(moving), np.inf)
    if len(moving) and sums is not None:
        score, theirs = _multiplied(newton, sums, moving)
        inverses, lost = _inverses(theirs, information.keep)
        step = np.einsum("kij,jk->ik", inverses, score)
        coefficients[:, moving] += step
        sizes = _sizes(step, newton.scale)
        own += moving[lost].tolist()
        moving, inverses, sizes = moving[~lost], inverses[~lost], sizes[~lost]
    elif len(moving):
        lost = _weightless(newton, moving, information.keep)
        own += moving[lost].tolist()
        moving, inverses, sizes = moving[~lost], inverses[~lost], sizes[~lost]
    for _ in range(SHARED_STEPS):
        if not len(moving):
            break
        kernel = _SharedKernel(newton.regression.under(moving), newton.scale, coefficients[:, moving])
        score = newton.engine.run(f"{newton.regression.what}: replicates", newton.blocks, kernel)
        step = np.einsum("kij,jk->ik", inverses, score)
        step_sizes = _sizes(step, newton.scale)
        rate = np.divide(step_sizes, sizes, out=np.zeros_like(sizes), where=sizes > 0)
        slow = ~np.isfinite(step_sizes) | ((rate > SLOWEST) & (step_sizes > ERROR_TOLERANCE))
        coefficients[:, moving[~slow]] += step[:, ~slow]
        own += moving[slow].tolist()
        settled = (rate < SLOWEST) & (step_sizes * rate / (1 - rate) < ERROR_TOLERANCE) & np.isfinite(sizes)
        going = ~slow & ~settled & (step_sizes > ERROR_TOLERANCE / 1000)
        moving, inverses, sizes = moving[going], inverses[going], step_sizes[going]
    for column in sorted({*own, *moving.tolist()}):
        try:
            coefficients[:, column] = newton.under(column).solve(b).b
        except EstimationError as error:
            failed[column] = error.message
    coefficients[:, list(failed)] = np.nan
    return coefficients, failed


def _sizes(step: Floats, scale: Scale) -> Floats:
    """Return the largest entry of each column's step, in coefficients of unit-spread columns; (K,)."""
    return np.asarray(np.max(np.abs(step) * scale.unit[:, np.newaxis], axis=0, initial=0))


def sums_by_unit(newton: Newton, b: Floats) -> UnitTotals | None:
    """Return the sums by unit of the rows' scores and informations at ``b``, under the full sample's weights.

    None where the weights are not multiplied unit by unit, or the units are too many to hold sums of.
    """
    units = multiplied_by_unit(newton.regression.weights)
    if units is None or units.units * len(b) * (len(b) + 1) > MOST_SUMS:
        return None
    kernel = _UnitKernel(newton.regression.under([0]), newton.scale, b, units)
    what = f"{newton.regression.what}: sums by unit"
    return newton.engine.run(what, newton.blocks, kernel, UnitTotals.merged)


def _multiplied(newton: Newton, sums: UnitTotals, moving: Integers) -> tuple[Floats, Floats]:
    """Return the scores (p, M) and informations (M, p, p) of the moving columns, from sums by unit."""
    units = multiplied_by_unit(newton.regression.weights)
    assert units is not None
    multiplied = sums.values.T @ units.multipliers(sums.unit)[:, moving]
    size = len(newton.regression.names)
    return multiplied[:size], multiplied[size:].T.reshape(-1, size, size)


def _inverses(informations: Floats, keep: NDArray[np.bool_]) -> tuple[Floats, NDArray[np.bool_]]:
    """Return the inverses (K, p, p) over the kept columns, and which matrices (K,) have none.

    A Cholesky factor of all correlation matrices at once; a pivot is the share of a column's sum of squares
    that the columns before it leave unexplained.
    """
    count, size = informations.shape[:2]
    kept = np.flatnonzero(keep)
    part = informations[:, kept[:, np.newaxis], kept]
    diagonal = np.diagonal(part, axis1=1, axis2=2)
    lost = np.asarray(~(np.isfinite(part).all(axis=(1, 2)) & (diagonal > 0).all(axis=1)))
    part = np.where(lost[:, np.newaxis, np.newaxis], np.eye(len(kept)), part)
    scale = np.sqrt(np.diagonal(part, axis1=1, axis2=2))
    part = part / (scale[:, :, np.newaxis] * scale[:, np.newaxis, :])
    rest = part.copy()
    for j in range(len(kept)):
        pivot = rest[:, j, j]
        lost |= ~(pivot > ALIAS_TOLERANCE)
        column = rest[:, j + 1 :, j] / np.sqrt(np.maximum(pivot, ALIAS_TOLERANCE))[:, np.newaxis]
        rest[:, j + 1 :, j + 1 :] -= column[:, :, np.newaxis] * column[:, np.newaxis, :]
    part[lost] = np.eye(len(kept))
    inverses = np.zeros((count, size, size))
    inverses[:, kept[:, np.newaxis], kept] = np.linalg.inv(part) / (
        scale[:, :, np.newaxis] * scale[:, np.newaxis, :]
    )
    return inverses, lost


def _weightless(newton: Newton, moving: Integers, keep: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Return which moving columns of weights leave a kept column of the model without any value; (M,)."""
    kernel = _PresenceKernel(newton.regression.under(moving), newton.scale)
    present = newton.engine.run(f"{newton.regression.what}: columns present", newton.blocks, kernel)
    return np.asarray((present[keep] == 0).any(axis=0))


@dataclass(frozen=True)
class _UnitKernel:
    """Sums by unit of the rows' scores (p) and informations (p x p) under their own weights."""

    regression: Regression
    scale: Scale
    b: Floats
    of: UnitWeights

    def __call__(self, block: Block) -> UnitTotals:
        x, y = self.scale(self.regression.columns(block)), self.regression.response(block)
        w, eta = self.regression.weights(block)[:, 0], x @ self.b
        likelihood = self.regression.likelihood
        score = np.where(w != 0, w * likelihood.score(y, eta), 0)[:, np.newaxis]
        information = np.where(w != 0, w * likelihood.information(y, eta), 0)[:, np.newaxis]
        products: list[Product] = [(score, x), (information * x, x)]
        return totals_by_unit(products, self.of.unit(block))


@dataclass(frozen=True)
class _PresenceKernel:
    """Rows with weight in which a column of the model is not zero, (p, K)."""

    regression: Regression
    scale: Scale

    def __call__(self, block: Block) -> Floats:
        x = self.scale(self.regression.columns(block))
        return np.asarray((x != 0).T.astype(np.float64) @ (self.regression.weights(block) != 0))


@dataclass(frozen=True)
class _SharedKernel:
    """From a block to the scores of some columns of weights, (p, K)."""

    regression: Regression
    scale: Scale
    coefficients: Floats

    def __call__(self, block: Block) -> Floats:
        score = np.zeros_like(self.coefficients)
        # Room for two arrays of rows by columns: asking the system for it piece by piece costs as much as the sums.
        room = np.empty((2, min(len(block), PIECE_ROWS), score.shape[1]))
        for piece in block.pieces(PIECE_ROWS):
            eta, weights = room[0, : len(piece)], room[1, : len(piece)]
            x = self.scale(self.regression.columns(piece))
            w = self.regression.weights(piece, out=weights)
            y = self.regression.response(piece)[:, np.newaxis]
            with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
                of_rows = self.regression.likelihood.score(
                    y, np.matmul(x, self.coefficients, out=eta), out=eta
                )
                part = x.T @ np.multiply(w, of_rows, out=of_rows)
                if not np.isfinite(part).all():
                    # A row without weight may have a mean the family does not allow.
                    part = x.T @ np.where(w != 0, of_rows, 0)
            score += part
        return score
