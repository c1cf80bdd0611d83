"""Where a fit starts: the model without random effects, and the spread its residuals show."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear
from steelyard.outcome.multilevel.posterior import Members
from steelyard.outcome.multilevel.separation import refuse_runaway

Floats = NDArray[np.float64]

# Smallest and largest standard deviation, in linear predictors, at which random effects start.
FIRST_SPREADS = (0.2, 3.0)
# The pooled fit only starts another: this size of a step ends it.
POOLED_TOLERANCE = 1e-2
POOLED_STEPS = 25
SUSPICIOUS_STEPS = 8
LONGEST_STEP = 2.0


@dataclass(frozen=True)
class _Pooled:
    """From a run to score and information of the model without random effects, overall weights of column 0."""

    model: Nonlinear
    coefficients: Floats

    def __call__(self, run: Nested) -> tuple[Floats, Floats]:
        weight = self.model.overall_weights(run)[:, 0]
        mean, variance = self.model.cumulant.two(run.x @ self.coefficients)
        return run.x.T @ (weight * (run.y - mean)), run.x.T @ (run.x * (weight * variance)[:, np.newaxis])


def pooled_start(
    model: Nonlinear,
    scale: Floats,
    response: float,
    ones: NDArray[np.bool_],
    runs: Sequence[Nested],
    engine: Engine,
) -> Floats:
    """Return coordinates (m,) from a pooled fit and the spread between clusters that its residuals show.

    Parameters
    ----------
    scale : (P, m)
        From coordinates to ``theta``.
    response : float
        The weighted mean response.
    ones : (p,) bool
        Columns that are 1 in every row.

    Raises
    ------
    SeparationError
        Columns settle the response of some rows, so that no finite coefficients exist.
    """
    p = len(model.fixed)
    fixed = scale[:p, : scale.shape[1] - model.random_size]
    raw = np.zeros(p)
    if ones.any():
        level = np.log(response / (1 - response)) if model.family == "binomial" else np.log(response)
        raw[np.flatnonzero(ones)[0]] = level
    inverse = np.linalg.pinv(fixed)
    point = inverse @ raw
    for taken in range(POOLED_STEPS):
        score, information = engine.run(f"{model.what}: start", runs, _Pooled(model, fixed @ point))
        step = np.linalg.lstsq(fixed.T @ information @ fixed, fixed.T @ score, rcond=1e-12)[0]
        size = float(np.abs(step).max(initial=0))
        step *= min(1.0, LONGEST_STEP / size) if size > 0 else 1.0
        point = point + step
        if size < POOLED_TOLERANCE:
            break
        if taken >= SUSPICIOUS_STEPS:
            refuse_runaway(model, fixed @ step, runs, engine)
    sums = engine.run(f"{model.what}: start", runs, _Moments(model, fixed @ point))
    places = _diagonal(model)
    units = np.diag(scale[p:, scale.shape[1] - model.random_size :])[places]
    random = np.zeros(model.random_size)
    random[places] = np.clip(_spreads(model, sums) / units, *FIRST_SPREADS)
    return np.concatenate([point, random])


@dataclass(frozen=True)
class _Moments:
    """From a run to sums over clusters (and top clusters) that tell spreads between them, column 0."""

    model: Nonlinear
    coefficients: Floats

    def __call__(self, run: Nested) -> tuple[Floats, Floats]:
        model = self.model
        mean, variance = model.cumulant.two(run.x @ self.coefficients)
        weight, below = run.row_weight[:, :1], run.cluster_weight[:, :1]
        members = Members.of(run.cluster)
        residual = members.total((weight * (run.y - mean)[:, np.newaxis] * run.z).T).T
        noise = members.total((weight**2 * variance[:, np.newaxis] * run.z**2).T).T
        size = members.total((weight * variance[:, np.newaxis] * run.z**2).T).T
        if model.levels == 2:
            return (below * (residual**2 - noise)).sum(axis=0), (below * size**2).sum(axis=0)
        assert run.top is not None
        tops = Members.of(run.top)
        excess, square = residual**2 - noise, size**2
        top_excess = tops.total(residual[:, 0]) ** 2 - tops.total(noise[:, 0]) - tops.total(excess[:, 0])
        top_square = tops.total(size[:, 0]) ** 2 - tops.total(square[:, 0])
        return (
            np.array([excess.sum(), top_excess.sum()]),
            np.array([square.sum(), top_square.sum()]),
        )


def _spreads(model: Nonlinear, sums: tuple[Floats, Floats]) -> Floats:
    """Return standard deviations between clusters from the residuals of the pooled fit, by moments."""
    excess, size = sums
    variance = excess / np.where(size > 0, size, 1)
    if model.levels == 3:
        variance[0] -= variance[1]
    return np.sqrt(np.maximum(variance, 0))


def _diagonal(model: Nonlinear) -> NDArray[np.int64]:
    """Return which random parameters are standard deviations or diagonal entries of ``L``."""
    if model.levels == 3:
        return np.arange(2)
    rows, columns = model.lower
    return np.flatnonzero(rows == columns)
