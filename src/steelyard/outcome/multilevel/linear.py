"""Linear mixed models by weighted pseudo-maximum likelihood, for every column of weights at once.

Two levels with a random intercept and random slopes, their covariance unstructured; or three levels, with a
random intercept for the top clusters as well. Maximum likelihood, not restricted: a restricted likelihood has
no meaning under weights that differ by level.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.passes import Engine
from steelyard.errors import EstimationError
from steelyard.outcome.multilevel.linear_curvature import derivatives
from steelyard.outcome.multilevel.linear_likelihood import Coordinates, Level, level
from steelyard.outcome.multilevel.linear_parameters import Layout
from steelyard.outcome.multilevel.linear_search import (
    MOST_STEPS,
    VANISHES,
    Found,
    cluster_size,
    from_afar,
    negligible,
    point_of,
    search,
)
from steelyard.outcome.multilevel.linear_standard import LinearModel, Standard, standard
from steelyard.outcome.multilevel.linear_sums import ClusterSums, cluster_sums, column_batches
from steelyard.outcome.multilevel.nested import Nested, column_count

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

# Smallest eigenvalue of the information's correlations at which parameters count as told apart.
TOLD_APART = 1e-10
SMALLER = (
    "Leave out a random slope or a level, join rare categories, or scale the level-1 weights to cluster size."
)


@dataclass(frozen=True)
class Settled:
    """The full sample's solution inside the fit.

    Attributes
    ----------
    coordinates, point : Coordinates, (m,)
        Of the variances, at the rank that the solution has.
    beta, cov, top, phi : (p',), (q, q), number, number
        Coefficients, V, the top clusters' relative variance, the residual variance.
    information : (p' + m + 1, p' + m + 1)
        Minus the curvature by coefficients, point and log phi.
    """

    coordinates: Coordinates
    point: Floats
    beta: Floats
    cov: Floats
    top: float
    phi: float
    information: Floats


@dataclass(frozen=True)
class LinearFit:
    """A solved linear mixed model.

    Attributes
    ----------
    model : LinearModel
    names : P texts
        The fixed columns', then the clusters' covariance by rows, the top clusters' variance if there are
        three levels, and the residual variance.
    values : (P, K)
        The parameters under each column of weights.
    log_likelihood : (K,)
        The pseudo-log-likelihood, its weights as they were given.
    standard, settled : Standard, Settled
        What the full sample's solution is made of.
    combine : (M, P)
        From the slopes of the pseudo-log-likelihood by coefficients (p'), V (q q), the top variance (1, with
        three levels) and log phi, to the influence on the parameters: ``influence = slopes @ combine``.
    aliased : names of fixed columns that others make redundant; their coefficients are zero
    boundary : texts
        What was estimated as zero because the pseudo-log-likelihood is highest at the edge.
    steps : int
        Newton steps that column 0 took.
    failed : mapping
        Column of weights -> why it has no solution. Its parameters are NaN.
    """

    model: LinearModel
    names: tuple[str, ...]
    values: Floats
    log_likelihood: Floats
    standard: Standard
    settled: Settled
    combine: Floats
    aliased: tuple[str, ...]
    boundary: tuple[str, ...]
    steps: int
    failed: dict[int, str]

    @property
    def layout(self) -> Layout:
        """Where each parameter stands."""
        return Layout(self.model)


def fit_linear(
    model: LinearModel,
    engine: Engine,
    rows: Sequence[Nested],
    start: Floats | None = None,
    most_steps: int = MOST_STEPS,
) -> LinearFit:
    """Return the parameters at which the pseudo-log-likelihood is highest, for every column of weights.

    Column 0 is solved first; the others start from its solution.

    Parameters
    ----------
    start : (P,) or None
        Parameters to start from, as another fit of the same model reports them.
    most_steps : int
        Newton steps a search may take.

    Raises
    ------
    EstimationError
        The model cannot be told apart on these rows, or the full sample's search does not settle.
    """
    layout, inside = Layout(model), standard(model, engine, rows)
    sums = cluster_sums(model.what, inside, engine, rows, np.arange(1))
    near = None if start is None else layout.inside(inside, start)
    at, steps = _full_sample(model, sums, near, most_steps)
    settled = _settled(model, at)
    values = layout.values(inside, at.beta, at.cov, at.top_cov, at.phi)
    count = column_count(rows)
    columns = [(values, at.value - sums.size * np.log(inside.spread))]
    failed: dict[int, str] = {}
    turned = Coordinates(settled.coordinates.basis, len(model.random), model.three)
    for batch in column_batches(rows, inside, np.arange(1, count)):
        part = cluster_sums(model.what, inside, engine, rows, batch)
        solved, why = _solved_columns(part, turned, settled, most_steps)
        failed |= {int(batch[k]): text for k, text in why.items()}
        values = layout.values(inside, solved.beta, solved.cov, solved.top_cov, solved.phi)
        values[:, list(why)] = np.nan
        height = solved.value - part.size * np.log(inside.spread)
        height[list(why)] = np.nan
        columns.append((values, height))
    return LinearFit(
        model=model,
        names=layout.names,
        values=np.concatenate([v for v, _ in columns], axis=1),
        log_likelihood=np.concatenate([h for _, h in columns]),
        standard=inside,
        settled=settled,
        combine=_combine(layout, inside, settled),
        aliased=tuple(n for n, kept in zip(model.fixed, inside.keep, strict=True) if not kept),
        boundary=_boundary(model, settled),
        steps=steps,
        failed=failed,
    )


def _full_sample(
    model: LinearModel, sums: ClusterSums, near: tuple[Floats, float] | None, most_steps: int
) -> tuple[Level, int]:
    """Return the solution of column 0 and the steps taken, from near a V and top variance or from the best start."""
    free = Coordinates(np.eye(len(model.random)), len(model.random), model.three)
    if near is not None:
        point = point_of(free, *near, float(cluster_size(sums)[0]))
        found = search(sums, free, point[np.newaxis], most_steps)
    if near is None or found.failed:
        found = from_afar(sums, free, most_steps)
    if found.failed:
        raise _failure(model, found.failed[0])
    at, steps = _at_its_rank(model, sums, level(sums, free, found.points), most_steps)
    return at, steps + int(found.steps[0])


def _at_its_rank(model: LinearModel, sums: ClusterSums, at: Level, most_steps: int) -> tuple[Level, int]:
    """Return the solution in coordinates of the rank it has, variances that are zero left out, and steps taken."""
    size = float(cluster_size(sums)[0])
    values, vectors = np.linalg.eigh(at.cov[0])
    values, vectors = values[::-1], vectors[:, ::-1]
    rank = int(np.sum(~negligible(values, size)))
    top = model.three and not bool(negligible(at.top_cov[0], size))
    coordinates = Coordinates(vectors, rank, top)
    row, column = coordinates.entries
    point = np.diag(np.sqrt(np.maximum(values, 0)))[row, column]
    if top:
        point = np.append(point, np.abs(at.coordinates.top_root(at.points)))
    found = search(sums, coordinates, point[np.newaxis], most_steps)
    if found.failed:
        raise _failure(model, found.failed[0])
    return level(sums, coordinates, found.points), int(found.steps[0])


def _solved_columns(
    sums: ClusterSums, coordinates: Coordinates, settled: Settled, most_steps: int
) -> tuple[Level, dict[int, str]]:
    """Return the solutions of other columns of weights, and why some have none."""
    sizes = cluster_size(sums)
    near = np.array([point_of(coordinates, settled.cov, settled.top, size) for size in sizes])
    found = search(sums, coordinates, near, most_steps)
    again = np.array(sorted(found.failed), dtype=np.int64)
    if len(again):
        part = sums.only(again)
        second = from_afar(part, coordinates, most_steps)
        points = found.points.copy()
        points[again] = second.points
        found = Found(points, found.steps, {int(again[k]): why for k, why in second.failed.items()})
    points = found.points.copy()
    points[list(found.failed)] = near[list(found.failed)]
    return level(sums, coordinates, _zeroed(coordinates, points, sizes)), found.failed


def _zeroed(coordinates: Coordinates, points: Floats, sizes: Floats) -> Floats:
    """Return the points with variances that count as zero put to zero; only a variance, or all of a covariance."""
    points = points.copy()
    if coordinates.top:
        points[negligible(points[:, -1] ** 2, sizes), -1] = 0
    lower = points[:, : len(coordinates.entries[0])]
    lower[negligible(np.sum(lower**2, axis=1), sizes)] = 0
    return points


def _settled(model: LinearModel, at: Level) -> Settled:
    """Return the full sample's solution, once its information tells all free parameters apart."""
    information = -derivatives(at).curvature[0]
    diagonal = np.diag(information)
    if not np.all(diagonal > 0):
        raise _failure(model, "has no curvature at its solution")
    scale = np.sqrt(diagonal)
    if np.linalg.eigvalsh(information / np.outer(scale, scale))[0] < TOLD_APART:
        raise _failure(model, "cannot tell its variances apart")
    return Settled(
        coordinates=at.coordinates,
        point=at.points[0],
        beta=at.beta[0],
        cov=at.cov[0],
        top=float(at.top_cov[0]),
        phi=float(at.phi[0]),
        information=information,
    )


def _combine(layout: Layout, inside: Standard, settled: Settled) -> Floats:
    """Return what takes slopes by coefficients, V, top variance and log phi to influence; (M, P).

    Notes
    -----
    ``influence = H^-1 slope`` with H the information (Binder 1983). A variance estimated as zero stays there.
    """
    coordinates, q = settled.coordinates, len(inside.random)
    p, m = len(settled.beta), coordinates.size
    root = coordinates.root(settled.point[np.newaxis])
    moves = coordinates.moves(root)[0].reshape(-1, q * q)
    chain = np.zeros((p + q * q + layout.model.three + 1, p + m + 1))
    chain[:p, :p] = np.eye(p)
    chain[p : p + q * q, p : p + len(moves)] = moves.T
    if coordinates.top:
        chain[-2, -2] = 2 * settled.point[-1]
    chain[-1, -1] = 1
    slopes = layout.slopes(inside, coordinates, settled.point, settled.phi)
    return np.asarray(chain @ np.linalg.solve(settled.information, slopes.T))


def _boundary(model: LinearModel, settled: Settled) -> tuple[str, ...]:
    """Return what was estimated as zero, in words."""
    texts = []
    q, rank = len(model.random), settled.coordinates.rank
    if rank == 0:
        texts.append(
            f"{model.what}: the variance between clusters ({model.levels[0]}) is estimated as zero: clusters "
            "differ no more than chance within them explains."
        )
    elif rank < q:
        texts.append(
            f"{model.what}: the covariance of the {q} random effects of {model.levels[0]} has rank {rank}: some "
            "combination of them is estimated not to vary."
        )
    if model.three and not settled.coordinates.top:
        texts.append(
            f"{model.what}: the variance between top clusters ({model.levels[1]}) is estimated as zero: they differ "
            f"no more than the clusters ({model.levels[0]}) within them explain."
        )
    return tuple(texts)


def _failure(model: LinearModel, what: str) -> EstimationError:
    if what == VANISHES:
        mend = (
            "The random effects can follow every row of the small clusters: leave out a random slope, and scale the "
            "level-1 weights to cluster size. Or the response is the same in all rows of a cluster."
        )
        return EstimationError(f"{model.what}: {what}.", mend=mend)
    return EstimationError(f"{model.what}: the fit {what}.", mend=SMALLER)
