"""Weighted maximum pseudo-likelihood for a multilevel model with a logit or log link, all columns of weights."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.passes import Engine
from steelyard.errors import EstimationError
from steelyard.outcome.multilevel.climb import Climb, climb
from steelyard.outcome.multilevel.evaluate import Evaluate
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear
from steelyard.outcome.multilevel.observed import observed_information
from steelyard.outcome.multilevel.readiness import Summary, scaling, summary
from steelyard.outcome.multilevel.separation import refuse_runaway
from steelyard.outcome.multilevel.start import pooled_start

Floats = NDArray[np.float64]

# Largest step, in coefficients of unit-spread columns, at which a solution counts as reached.
TOLERANCE = 1e-10
OTHERS_TOLERANCE = 1e-9
ROUGH_TOLERANCE = 3e-2
MOST_STEPS = 40
# How often a climb that has not settled goes on with a fresh curvature.
MOST_ROUNDS = 3
# A standard deviation below this, in linear predictors, is zero: the likelihood is even in it.
NOTHING = 1e-5
# Where a spread that may have been lost starts again.
SECOND_SPREAD = 0.3
# Coordinates of the random part beyond this are on their way to infinity.
FAR = 60.0

MEND = (
    "Look for very rare categories or nearly redundant covariates, and join or drop them; try more or fewer "
    "quadrature points, other starting values, or fewer random columns."
)


@dataclass(frozen=True)
class NonlinearFit:
    """A fitted model.

    Attributes
    ----------
    model : Nonlinear
    theta : (P, K)
        Parameters under each column of weights, as :class:`Nonlinear` lays them out; NaN where there is no solution.
    log_likelihood : (K,)
        Weighted log pseudo-likelihood, weights as given, the terms in ``y`` alone included.
    scale : (P, m)
        From the fit's coordinates to ``theta``.
    information : (m, m)
        Minus the second derivatives under column 0, weights as given, in the fit's coordinates.
    free : (m,) bool
        Coordinates not held at a boundary under column 0.
    aliased : names of fixed columns that others make redundant; their coefficients are zero
    boundary : names of random columns whose variance, or part of it, is estimated as zero under column 0
    steps : (K,)
        Steps each column took with the model's own quadrature points.
    failed : mapping
        Column of weights -> why it has no solution.
    rows, clusters, tops : int
    warnings : texts a reader of the results should see
    """

    model: Nonlinear
    theta: Floats
    log_likelihood: Floats
    scale: Floats
    information: Floats
    free: NDArray[np.bool_]
    aliased: tuple[str, ...]
    boundary: tuple[str, ...]
    steps: NDArray[np.int64]
    failed: dict[int, str]
    rows: int
    clusters: int
    tops: int
    warnings: tuple[str, ...]

    @property
    def bread(self) -> Floats:
        """The inverse of the information in ``theta``, (P, P): zero for what is aliased or at a boundary."""
        part = self.scale[:, self.free]
        inverse: Floats = part @ np.linalg.solve(self.information[np.ix_(self.free, self.free)], part.T)
        return 0.5 * (inverse + inverse.T)


def fit_nonlinear(
    model: Nonlinear, runs: Sequence[Nested], engine: Engine, start: Floats | None = None
) -> NonlinearFit:
    """Maximise the weighted log pseudo-likelihood under every column of weights.

    Parameters
    ----------
    runs : Sequence[Nested]
        Rows; no run splits a top-most cluster.
    start : (P,), optional
        ``theta`` to start from, as of an earlier fit; otherwise from a pooled fit by way of the Laplace approximation.

    Raises
    ------
    PlanError
        The model is one this code does not fit.
    SeparationError
        Columns settle the response of some rows.
    EstimationError
        The rows cannot carry the model, or column 0 has no solution; never a last iterate.

    Notes
    -----
    Top-most weights are scaled to mean 1 inside the fit. Column 0 is solved first; the other columns start at its
    solution with the information of its top-most clusters under their own weights, and step side by side.
    """
    sums = summary(model, runs, engine)
    scale, aliased = scaling(model, sums)
    work = _Work(model, runs, engine, sums, scale)
    state = work.first() if start is None else work.from_theta(start)
    theta, bound = settled(model, scale @ state.point[:, 0])
    free = ~np.concatenate([np.zeros(scale.shape[1] - model.random_size, dtype=bool), bound])
    columns = len(sums.top_total)
    information = observed_information(model, theta, scale, runs, engine, model.points, columns)
    _refuse_flat(model, information[0], free, sums)
    values, steps = np.array([state.value[0]]), state.taken
    thetas = theta[:, np.newaxis]
    failed: dict[int, str] = {}
    if columns > 1:
        others, more, taken, failed = work.others(theta, information, bound)
        thetas = np.column_stack([thetas, others])
        values, steps = np.concatenate([values, more]), np.concatenate([steps, taken])
    boundary = _boundary_names(model, bound)
    return NonlinearFit(
        model,
        thetas,
        values / work.unit + sums.constant,
        scale,
        information[0],
        free,
        aliased,
        boundary,
        steps,
        failed,
        sums.rows,
        sums.clusters,
        sums.tops,
        _warnings(model, sums, boundary, failed),
    )


@dataclass(frozen=True)
class _Work:
    """What every climb of a fit needs."""

    model: Nonlinear
    runs: Sequence[Nested]
    engine: Engine
    sums: Summary
    scale: Floats

    @property
    def unit(self) -> Floats:
        """What makes the top-most weights of each column 1 on average, (K,)."""
        total = self.sums.top_total
        return np.asarray(self.sums.tops / np.where(total > 0, total, np.nan))

    def first(self) -> Climb:
        """Solve column 0 from nothing."""
        model, sums = self.model, self.sums
        point = pooled_start(model, self.scale, sums.response, sums.ones, self.runs, self.engine)
        if model.points == 1:
            return self._solved(point, self._bend(point, 1))
        rough = self._climb(point[:, np.newaxis], self._bend(point, 1), (0,), 1, ROUGH_TOLERANCE)
        if not rough.failure[0]:
            point = self._respread(rough.point[:, 0], SECOND_SPREAD)
        return self._solved(point, rough.curvature)

    def from_theta(self, theta: Floats) -> Climb:
        """Solve column 0 from a given ``theta`` (P,)."""
        point = self._respread(self._coordinates(theta), NOTHING, SECOND_SPREAD)
        return self._solved(point, self._bend(point, self.model.points if self.model.levels == 2 else 1))

    def others(
        self, theta: Floats, information: Floats, bound: NDArray[np.bool_]
    ) -> tuple[Floats, Floats, NDArray[np.int64], dict[int, str]]:
        """Solve columns 1.. from the solution of column 0: parameters, values, steps, failures."""
        model = self.model
        columns = tuple(range(1, len(self.sums.top_total)))
        point = self._coordinates(theta)
        if bound.any():
            point = self._respread(point, NOTHING, SECOND_SPREAD)
        start = np.repeat(point[:, np.newaxis], len(columns), axis=1)
        bends = information[1:] * self.unit[1:, np.newaxis, np.newaxis]
        state = self._climb(start, bends, columns, model.points, OTHERS_TOLERANCE)
        failed: dict[int, str] = {}
        thetas = np.full((model.size, len(columns)), np.nan)
        for k, column in enumerate(columns):
            if state.failure[k]:
                alone = self._alone(self._respread(point, SECOND_SPREAD), information[0], column)
                if alone.failure[0]:
                    failed[column] = f"{model.what}: the fit {alone.failure[0]}."
                    state.value[k] = np.nan
                    continue
                state.point[:, k], state.value[k] = alone.point[:, 0], alone.value[0]
                state.taken[k] += alone.taken[0]
            thetas[:, k], _ = settled(model, self.scale @ state.point[:, k])
        return thetas, state.value, state.taken, failed

    def _alone(self, point: Floats, information: Floats, column: int) -> Climb:
        bend = information[np.newaxis] * self.unit[0]
        rough = self._climb(point[:, np.newaxis], bend, (column,), 1, ROUGH_TOLERANCE)
        if not rough.failure[0]:
            point, bend = self._respread(rough.point[:, 0], SECOND_SPREAD), rough.curvature
        return self._climb(point[:, np.newaxis], bend, (column,), self.model.points, OTHERS_TOLERANCE)

    def _coordinates(self, theta: Floats) -> Floats:
        return np.asarray(np.linalg.lstsq(self.scale, theta, rcond=None)[0], dtype=np.float64)

    def _bend(self, point: Floats, points: int) -> Floats:
        """Return the curvature under column 0, (1, m, m)."""
        bend = observed_information(
            self.model, self.scale @ point, self.scale, self.runs, self.engine, points
        )
        return np.asarray(self.unit[0] * bend)

    def _climb(
        self, start: Floats, bend: Floats, columns: tuple[int, ...], points: int, tolerance: float
    ) -> Climb:
        model, unit = self.model, self.unit

        def height(point: Floats, which: NDArray[np.int64]) -> tuple[Floats, Floats]:
            chosen = tuple(columns[k] for k in which)
            kernel = Evaluate(model, self.scale @ point, chosen, points)
            with np.errstate(over="ignore", invalid="ignore", divide="ignore"):
                value, gradient = self.engine.run(f"{model.what}: fit", self.runs, kernel)
            return value * unit[list(chosen)], (self.scale.T @ gradient) * unit[list(chosen)]

        return climb(height, start, bend, tolerance, MOST_STEPS, FAR)

    def _respread(self, point: Floats, low: float, to: float | None = None) -> Floats:
        """Return the point with spreads below ``low`` raised, since a likelihood is flat where one is zero."""
        point = point.copy()
        first = len(point) - self.model.random_size
        for d in _diagonal_places(self.model):
            if abs(point[first + d]) < low:
                point[first + d] = low if to is None else to
        return point

    def _solved(self, point: Floats, bend: Floats) -> Climb:
        """Climb to the solution of column 0, (m,), or say why there is none."""
        model, sums = self.model, self.sums
        for _ in range(MOST_ROUNDS):
            state = self._climb(point[:, np.newaxis], bend, (0,), model.points, TOLERANCE)
            if not state.failure[0]:
                return state
            if np.abs(state.point).max() > FAR:
                break
            point = state.point[:, 0]
            bend = self._bend(point, model.points)
        point, step = state.point[:, 0], state.step[:, 0]
        kept = len(point) - model.random_size
        fixed = self.scale[: len(model.fixed), :kept]
        for direction in (fixed @ step[:kept], fixed @ point[:kept]):
            refuse_runaway(model, direction, self.runs, self.engine)
        if np.abs(point[kept:]).max() > 0.5 * FAR:
            raise EstimationError(
                f"{model.what}: the variance between clusters grows without bound; {sums.mixed:,} of "
                f"{sums.clusters:,} clusters have rows that differ in the response.",
                mend="Check the column of the clusters and the level the response varies at; with hardly any "
                "variation within clusters, model the clusters themselves.",
            )
        raise EstimationError(f"{model.what}: the fit {state.failure[0]}.", mend=MEND)


def _diagonal_places(model: Nonlinear) -> NDArray[np.int64]:
    if model.levels == 3:
        return np.arange(2)
    rows, columns = model.lower
    return np.flatnonzero(rows == columns)


def settled(model: Nonlinear, theta: Floats) -> tuple[Floats, NDArray[np.bool_]]:
    """Return ``theta`` with standard deviations that are not negative, and which random parameters are at zero.

    The likelihood is even in every column of ``L``; a diagonal entry below :data:`NOTHING` is taken as zero, and
    a random intercept without variance has no covariance with the slope either.
    """
    theta = theta.copy()
    p = len(model.fixed)
    if model.levels == 3:
        spread = np.abs(theta[p:])
        bound = spread < NOTHING
        theta[p:] = np.where(bound, 0, spread)
        return theta, bound
    factor = model.factor(theta)
    factor = factor * np.where(np.diag(factor) < 0, -1, 1)
    size = len(factor)
    held = np.zeros_like(factor, dtype=bool)
    if size == 2 and factor[0, 0] < NOTHING:
        factor = np.array([[0.0, 0.0], [0.0, np.hypot(factor[1, 0], factor[1, 1])]])
        held[:, 0] = True
    for d in range(size):
        if factor[d, d] < NOTHING:
            factor[d, d], held[d, d] = 0.0, True
    theta[p:] = factor[model.lower]
    return theta, held[model.lower]


def _refuse_flat(model: Nonlinear, information: Floats, free: NDArray[np.bool_], sums: Summary) -> None:
    """Refuse a solution where the likelihood does not fall in every direction."""
    part = information[np.ix_(free, free)]
    scale = np.sqrt(np.abs(np.diag(part)))
    with np.errstate(divide="ignore", invalid="ignore"):
        lowest = np.linalg.eigvalsh(part / np.outer(scale, scale))[0] if np.all(scale > 0) else -1.0
    if lowest > 1e-10:
        return
    raise EstimationError(
        f"{model.what}: the likelihood has no curvature at its solution, so the parameters are not told apart "
        f"({sums.rows:,} rows in {sums.clusters:,} clusters).",
        mend="Clusters of one row say nothing of a variance between clusters; use larger clusters, drop a random "
        "column or a nearly redundant covariate.",
    )


def _boundary_names(model: Nonlinear, bound: NDArray[np.bool_]) -> tuple[str, ...]:
    if model.levels == 3:
        return tuple(name for name, held in zip(("cluster", "top"), bound, strict=True) if held)
    return tuple(model.random[d] for d in range(len(model.random)) if bound[_diagonal_places(model)[d]])


def _warnings(
    model: Nonlinear, sums: Summary, boundary: tuple[str, ...], failed: dict[int, str]
) -> tuple[str, ...]:
    told = []
    if boundary:
        told.append(
            f"{model.what}: the variance of {', '.join(boundary)} between clusters is estimated as zero, "
            "the edge of what it can be; it has no standard error, and those of the rest take it as zero."
        )
    if sums.clusters == sums.rows:
        told.append(
            f"{model.what}: every one of the {sums.clusters:,} clusters has a single row, so the variance between "
            "clusters rests on the shape of the distribution alone."
        )
    if failed:
        told.append(f"{model.what}: {len(failed)} of {len(sums.top_total) - 1} replicates have no solution.")
    return tuple(told)
