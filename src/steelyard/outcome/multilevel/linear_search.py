"""The search for the variances between clusters: damped Newton steps, all columns of weights at once.

A search ends where no step helps, at the edge too: a variance of zero, or a covariance that has lost rank,
is looked at from within, and left only where the slope says so.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.linear_curvature import Derivatives, derivatives
from steelyard.outcome.multilevel.linear_likelihood import Coordinates, Level, level
from steelyard.outcome.multilevel.linear_sums import ClusterSums

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

# Most steps of a search, and most halvings of a step.
MOST_STEPS = 200
MOST_HALVINGS = 40
# Gain in log-likelihood a unit of weight, below which the step that promises it is the last.
LAST_GAIN = 1e-20
# Share of the largest curvature below which a direction counts as flat.
FLAT = 1e-7
# A fall in log-likelihood a unit of weight that is rounding.
ROUNDING = 1e-12
# A variance that adds less than this share to that of a cluster's mean is zero.
NEGLIGIBLE = 1e-8
# Variances between clusters, relative to that within, past which the latter is vanishing.
RUNAWAY = 1e7
# Slope at the edge, a unit of weight and relative to a cluster's size, past which the edge is left.
EDGE_SLOPE = 1e-9
# Why a column has no solution where the weights leave nothing to vary within clusters.
VANISHES = "the variance within clusters goes to zero"
# How often a search may leave the edge.
MOST_RETURNS = 4
# Starting variances between clusters, relative to that within.
STARTS = (0.01, 0.1, 0.5, 2.0)
TOP_STARTS = (0.02, 0.5)
# Bytes worked on at a time.
COLUMNS_AT_A_TIME = 2**22


@dataclass(frozen=True)
class Found:
    """Where searches ended: points (K, m), steps taken (K,), and why a column has no solution."""

    points: Floats
    steps: Integers
    failed: dict[int, str]


def search(sums: ClusterSums, coordinates: Coordinates, points: Floats, most_steps: int) -> Found:
    """Return the points where the pseudo-log-likelihood of each column is highest, from (K, m) points.

    Columns are worked on some at a time, so that what is held stays in the processor's cache.
    """
    if not len(points):
        return Found(points, np.zeros(0, np.int64), {})
    count, (_, clusters, q, width) = len(points), sums.za.shape
    step = max(1, COLUMNS_AT_A_TIME // (8 * clusters * q * (width + q)))
    parts = []
    for start in range(0, count, step):
        columns = np.arange(start, min(start + step, count))
        parts.append(_returning(sums.only(columns), coordinates, points[columns], most_steps))
    failed: dict[int, str] = {}
    for number, part in enumerate(parts):
        failed |= {number * step + column: why for column, why in part.failed.items()}
    return Found(np.concatenate([p.points for p in parts]), np.concatenate([p.steps for p in parts]), failed)


def from_afar(sums: ClusterSums, coordinates: Coordinates, most_steps: int) -> Found:
    """Return the best of searches from several starting points, for full coordinates.

    A random intercept of two levels is searched for from the likeliest of them; more variances can have more than
    one peak, so there every one is followed.
    """
    count, q = len(sums.size), len(coordinates.basis)
    pairs = [(own, own) for own in STARTS]
    if coordinates.top:
        pairs = [(own, top) for own in TOP_STARTS for top in TOP_STARTS]
    starts = np.array([_point(coordinates, own * np.eye(q), top) for own, top in pairs])
    if coordinates.size == 1:
        heights = np.array([level(sums, coordinates, np.tile(s, (count, 1))).value for s in starts])
        best = np.argmax(np.nan_to_num(heights, nan=-np.inf), axis=0)
        return search(sums, coordinates, starts[best], most_steps)
    ends = [search(sums, coordinates, np.tile(s, (count, 1)), most_steps) for s in starts]
    heights = np.array([level(sums, coordinates, end.points).value for end in ends])
    for height, end in zip(heights, ends, strict=True):
        height[list(end.failed)] = -np.inf
    best = np.argmax(np.nan_to_num(heights, nan=-np.inf), axis=0)
    return Found(
        np.array([ends[b].points[k] for k, b in enumerate(best)]),
        np.array([ends[b].steps[k] for k, b in enumerate(best)]),
        {k: ends[b].failed[k] for k, b in enumerate(best) if k in ends[b].failed},
    )


def point_of(coordinates: Coordinates, cov: Floats, top: float, size: float) -> Floats:
    """Return a point inside the edge near a covariance V (q, q) and a top variance, for full coordinates."""
    least = 0.1 / size
    turned = coordinates.basis.T @ cov @ coordinates.basis
    values, vectors = np.linalg.eigh(turned)
    inside = (vectors * np.maximum(values, least)) @ vectors.T
    return _point(coordinates, np.asarray(inside), max(top, least))


def negligible(variance: Floats | float, size: Floats | float) -> NDArray[np.bool_]:
    """Return which variances, relative to that within, count as zero in clusters of such a size."""
    return np.asarray(np.asarray(variance) * size < NEGLIGIBLE)


def cluster_size(sums: ClusterSums) -> Floats:
    """Return the mean weight within a cluster, (K,)."""
    weight = np.broadcast_to(np.sum(sums.weight, axis=1), sums.size.shape)
    return np.asarray(np.divide(sums.size, weight, out=np.ones_like(sums.size), where=weight > 0))


def _point(coordinates: Coordinates, turned: Floats, top: float) -> Floats:
    """Return the point of a positive definite ``basis' V basis``, and of the top variance if it is free."""
    row, column = coordinates.entries
    lower = np.linalg.cholesky(turned)[row, column]
    return np.asarray(np.append(lower, np.sqrt(top)) if coordinates.top else lower)


def _returning(sums: ClusterSums, coordinates: Coordinates, points: Floats, most_steps: int) -> Found:
    """Search, and search again from within where a column ended at an edge that it should leave."""
    size = cluster_size(sums)
    points, steps, failed = points.copy(), np.zeros(len(points), np.int64), _without_solution(sums)
    moving = np.array([k for k in range(len(points)) if k not in failed], dtype=np.int64)
    for _ in range(MOST_RETURNS):
        if not len(moving):
            return Found(points, steps, failed)
        part = sums.only(moving)
        points[moving], taken, reasons = _newton(part, coordinates, points[moving], most_steps)
        steps[moving] += taken
        failed |= {int(moving[k]): why for k, why in reasons.items()}
        at = level(part, coordinates, points[moving])
        leaving = {k: p for k, p in _leaving(at, derivatives(at), size[moving]).items() if k not in reasons}
        moving = moving[list(leaving)]
        for column, point in zip(moving, leaving.values(), strict=True):
            points[column] = point
    failed |= {int(column): "comes back to the edge time and again" for column in moving}
    return Found(points, steps, failed)


def _newton(
    sums: ClusterSums, coordinates: Coordinates, points: Floats, most_steps: int
) -> tuple[Floats, Integers, dict[int, str]]:
    """Return where damped Newton steps lead each column, the steps taken, and why some lead nowhere."""
    points, count = points.copy(), len(points)
    steps, moving = np.zeros(count, np.int64), np.arange(count)
    failed: dict[int, str] = {}
    if not coordinates.size:
        return points, steps, failed
    at = level(sums, coordinates, points)
    for _ in range(most_steps):
        step, gain = _step(derivatives(at), at)
        last = gain <= LAST_GAIN
        points[moving[last]] += step[last]
        steps[moving] += 1
        keep = np.flatnonzero(~last)
        moving, step = moving[keep], step[keep]
        if not len(moving):
            return points, steps, failed
        part = sums.only(moving)
        points[moving], at, stuck = _improved(part, coordinates, points[moving], step, at.value[keep])
        runaway = np.sum(points[moving] ** 2, axis=1) > RUNAWAY
        for k in np.flatnonzero(stuck | runaway):
            failed[int(moving[k])] = VANISHES if runaway[k] else "no step improves it"
        if (stuck | runaway).any():
            moving = moving[~(stuck | runaway)]
            if not len(moving):
                return points, steps, failed
            at = level(sums.only(moving), coordinates, points[moving])
    failed |= {int(column): f"did not settle in {most_steps} steps" for column in moving}
    return points, steps, failed


def _step(slopes: Derivatives, at: Level) -> tuple[Floats, Floats]:
    """Return the Newton step, uphill along every direction, (K, m), and the gain a unit of weight it promises."""
    size = at.sums.size
    bend = np.nan_to_num(-slopes.profile_curvature() / size[:, None, None])
    slope = slopes.slope / size[:, None]
    values, vectors = np.linalg.eigh((bend + bend.swapaxes(1, 2)) / 2)
    along = (vectors.swapaxes(1, 2) @ slope[:, :, None])[..., 0]
    values = np.abs(values)
    floor = np.maximum(FLAT * values.max(axis=1, keepdims=True), np.finfo(float).tiny)
    along_step = along / np.maximum(values, floor)
    step = (vectors @ along_step[:, :, None])[..., 0]
    length, longest = np.linalg.norm(step, axis=1), 1 + np.linalg.norm(at.points, axis=1)
    step *= np.minimum(1, longest / np.maximum(length, longest))[:, None]
    return step, 0.5 * np.sum(along * along_step, axis=1)


def _improved(
    sums: ClusterSums, coordinates: Coordinates, points: Floats, step: Floats, before: Floats
) -> tuple[Floats, Level, NDArray[np.bool_]]:
    """Return the first of step, half step, ... that does not lower each column, and which have none."""
    least = before - ROUNDING * (np.abs(before) + sums.size)
    step = step.copy()
    for _ in range(MOST_HALVINGS):
        at = level(sums, coordinates, points + step)
        worse = ~(at.value >= least)
        if not worse.any():
            return points + step, at, worse
        step[worse] /= 2
    return points + step, at, worse


def _leaving(at: Level, slopes: Derivatives, size: Floats) -> dict[int, Floats]:
    """Return a point inside for each column that ended at an edge from which the slope leads away."""
    found: dict[int, Floats] = {}
    coordinates = at.coordinates
    if coordinates.rank < len(coordinates.basis):
        return found
    for k, cov in enumerate(at.cov):
        turned = coordinates.basis.T @ cov @ coordinates.basis
        uphill = coordinates.basis.T @ slopes.by_cov[k] @ coordinates.basis
        values, vectors = np.linalg.eigh(turned)
        edge = vectors[:, negligible(values, size[k])]
        limit = EDGE_SLOPE * at.sums.size[k] * size[k]
        leave = False
        if edge.shape[1]:
            rises, ways = np.linalg.eigh(edge.T @ uphill @ edge)
            if rises[-1] > limit:
                way = edge @ ways[:, -1]
                turned, leave = turned + np.outer(way, way) / size[k], True
        top = float(at.top_cov[k])
        if coordinates.top and negligible(top, size[k]) and slopes.by_top[k] > limit:
            top, leave = 1 / size[k], True
        if leave:
            values, vectors = np.linalg.eigh(turned)
            inside = (vectors * np.maximum(values, 1e-6 / size[k])) @ vectors.T
            found[k] = _point(coordinates, inside, max(top, 1e-6 / size[k]))
    return found


def _without_solution(sums: ClusterSums) -> dict[int, str]:
    """Return the columns of weights under which the fixed part cannot be told apart."""
    failed = {}
    for k, (gram, size) in enumerate(zip(sums.gram, sums.size, strict=True)):
        if not (np.isfinite(size) and size > 0 and np.all(np.isfinite(gram))):
            failed[k] = "no row carries weight"
        elif len(gram) > 1 and np.linalg.eigvalsh(gram[:-1, :-1] / size)[0] < 1e-10:
            failed[k] = "fixed columns are redundant under these weights"
    return failed
