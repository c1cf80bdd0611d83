"""Where the random effects of a cluster are most likely given its rows, and how sharply.

Rows run along the last axis of every array, clusters along the last axis of every sum. Random effects are
written ``u = L v`` with ``v`` standard normal, so that a variance of zero is an ordinary value of ``L``.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.cumulants import SAFE_REACH, Cumulant

Floats = NDArray[np.float64]
Codes = NDArray[np.int64]

# A step that moves linear predictors by less than this is the last: what it leaves is less than its square.
LAST_MOVE = 3e-6
# The first steps are Newton's own, up to this move; should they not arrive, those that move more than the other
# are shortened so that they cannot overshoot.
BOLD_STEPS = 8
LONG_MOVE = 3.0
SURE_MOVE = 0.5
MOST_MODE_STEPS = 200


@dataclass(frozen=True)
class Members:
    """Which rows make up each cluster: J clusters of neighbouring rows.

    Attributes
    ----------
    starts : (J,)
        The first row of each.
    sizes : (J,)
        Its number of rows, at least one.
    """

    starts: Codes
    sizes: Codes

    @classmethod
    def of(cls, codes: Codes) -> Members:
        """Return the members of the clusters in ``codes`` (n,), which do not decrease."""
        starts = np.concatenate([[0], np.flatnonzero(np.diff(codes)) + 1]).astype(np.int64)
        return cls(starts, np.diff(np.append(starts, len(codes))))

    @cached_property
    def codes(self) -> Codes:
        """The cluster of each row, (n,)."""
        return np.repeat(np.arange(len(self.sizes)), self.sizes)

    def total(self, values: Floats) -> Floats:
        """Return the sums over each cluster's rows: (..., n) to (..., J)."""
        return np.asarray(np.add.reduceat(values, self.starts, axis=-1))

    def spread(self, values: Floats) -> Floats:
        """Return each cluster's value for each of its rows: (..., J) to (..., n)."""
        return np.repeat(values, self.sizes, axis=-1)


@dataclass(frozen=True)
class Loadings:
    """The random part's columns, (n,) each; None stands for the constant 1."""

    columns: tuple[Floats | None, ...]

    @classmethod
    def of(cls, z: Floats) -> Loadings:
        """Return the loadings of ``z`` (n, q)."""
        return cls(
            tuple(None if np.all(z[:, d] == 1) else np.ascontiguousarray(z[:, d]) for d in range(z.shape[1]))
        )

    @property
    def size(self) -> int:
        """How many there are, q."""
        return len(self.columns)

    def times(self, values: Floats, d: int) -> Floats:
        """Return ``values * z_d``."""
        column = self.columns[d]
        return values if column is None else values * column

    def predictor(self, effects: Floats, members: Members) -> Floats:
        """Return ``z'u`` of each row, (n,), for the effects of its cluster, (q, J)."""
        total = self.times(members.spread(effects[0]), 0)
        for d in range(1, self.size):
            total = total + self.times(members.spread(effects[d]), d)
        return total

    def totals(self, values: Floats, members: Members) -> Floats:
        """Return ``sum values z_d`` by cluster: (..., n) to (q, ..., J)."""
        if self.columns == (None,):
            return members.total(values)[np.newaxis]
        return np.stack([members.total(self.times(values, d)) for d in range(self.size)])

    def square_totals(self, values: Floats, members: Members) -> Floats:
        """Return ``sum values z_d z_e`` by cluster: (..., n) to (q, q, ..., J)."""
        out = np.empty((self.size, self.size, *values.shape[:-1], len(members.sizes)))
        for d in range(self.size):
            weighted = self.times(values, d)
            for e in range(d + 1):
                out[d, e] = out[e, d] = members.total(self.times(weighted, e))
        return out

    def form(self, matrix: Floats, members: Members) -> Floats:
        """Return ``z'M z`` of each row, (n,), for the symmetric matrix of its cluster, (q, q, J)."""
        total = self.times(self.times(members.spread(matrix[0, 0]), 0), 0)
        for d in range(1, self.size):
            total = total + self.times(self.times(members.spread(matrix[d, d]), d), d)
            for e in range(d):
                total = total + 2 * self.times(self.times(members.spread(matrix[d, e]), d), e)
        return total


@dataclass(frozen=True)
class Level1:
    """Rows under one column of level-1 weights.

    Attributes
    ----------
    y, weight : (n,)
    loadings : Loadings
    members : Members
    cumulant : Cumulant
    """

    y: Floats
    weight: Floats
    loadings: Loadings
    members: Members
    cumulant: Cumulant

    @cached_property
    def responses(self) -> Floats:
        """The sums ``sum w y z`` by cluster, (q, J)."""
        return self.loadings.totals(self.weight * self.y, self.members)


def lower_factor(matrix: Floats) -> Floats:
    """Return ``K`` with ``K K' = matrix``, both (q, q, J), lower triangular in the first two axes."""
    size = len(matrix)
    if size == 1:
        return np.sqrt(matrix)
    factor = np.zeros_like(matrix)
    for i in range(size):
        for j in range(i + 1):
            rest = matrix[i, j] - sum((factor[i, k] * factor[j, k] for k in range(j)), np.zeros(1))
            factor[i, j] = np.sqrt(rest) if i == j else rest / factor[j, j]
    return factor


def inverse_transpose(factor: Floats) -> Floats:
    """Return ``K^-T`` of a lower triangular ``K``, (q, q, J): upper triangular."""
    size = len(factor)
    if size == 1:
        return 1 / factor
    inverse = np.zeros_like(factor)
    for i in range(size):
        inverse[i, i] = 1 / factor[i, i]
        for j in range(i):
            row = sum((factor[i, k] * inverse[j, k] for k in range(j, i)), np.zeros(1))
            inverse[j, i] = -row / factor[i, i]
    return inverse


def product(left: Floats, right: Floats) -> Floats:
    """Return the matrix product in the first two axes, cluster by cluster; axes without clusters spread."""
    if len(left) == 1:
        return left * right
    return np.asarray(np.einsum("ab...,bc...->ac...", left, right))


def applied(matrix: Floats, vector: Floats) -> Floats:
    """Return matrix times vector, cluster by cluster: (a, b, ...) and (b, ...) to (a, ...)."""
    if len(matrix) == 1:
        return np.asarray(matrix[0] * vector)
    return np.asarray(np.einsum("ab...,b...->a...", matrix, vector))


def transposed(matrix: Floats) -> Floats:
    """Return the transpose in the first two axes."""
    return np.swapaxes(matrix, 0, 1)


@dataclass(frozen=True)
class Mode:
    """The posterior mode of each cluster, and what its rows look like there.

    Attributes
    ----------
    v : (q, J)
        The mode in standard units.
    eta, mean, variance : (n,)
        Linear predictor, ``b'`` and ``b''`` of the rows at the mode.
    score : (q, J)
        ``S = sum w (y - b') z``.
    spread : (q, q, J)
        ``Z = sum w b'' z z'``.
    root : (q, q, J)
        ``A`` with ``A A' = (I + L' Z L)^-1``, the inverse curvature; upper triangular.
    """

    v: Floats
    eta: Floats
    mean: Floats
    variance: Floats
    score: Floats
    spread: Floats
    root: Floats


def posterior_mode(rows: Level1, eta: Floats, factor: Floats, start: Floats | None = None) -> Mode:
    """Return the mode of ``sum w (y eta - b(eta)) - |v|^2 / 2`` for each cluster.

    Parameters
    ----------
    eta : (n,)
        The linear predictor without the random effects.
    factor : (q, q)
        ``L``: random effects are ``L v``.
    start : (q, J), optional
        Where to begin; zero otherwise.

    Notes
    -----
    Newton's method; where it has not arrived after a few steps, shortened by ``log(1 + d) / d`` where ``d`` bounds
    the step's move of any linear predictor of the cluster. As ``|b'''| <= b''`` for both families, that step
    cannot overshoot (Bach 2010, Electronic Journal of Statistics 4, proposition 1).
    """
    size, count = rows.loadings.size, len(rows.members.sizes)
    v = np.zeros((size, count)) if start is None else start
    reach = _reach(rows)
    full = factor[:, :, np.newaxis]
    identity = np.eye(size)[:, :, np.newaxis]
    tilted = _Tilted.of(rows, eta)
    arrived = False
    for taken in range(MOST_MODE_STEPS):
        mean, variance = tilted.two(factor @ v)
        mean *= rows.weight
        variance *= rows.weight
        score = rows.responses - rows.loadings.totals(mean, rows.members)
        spread = rows.loadings.square_totals(variance, rows.members)
        curvature = identity + product(transposed(full), product(spread, full))
        root = inverse_transpose(lower_factor(curvature))
        if arrived:
            break
        step = applied(root, applied(transposed(root), factor.T @ score - v))
        move = (np.abs(factor @ step) * reach).sum(axis=0)
        long = move > (LONG_MOVE if taken < BOLD_STEPS else SURE_MOVE)
        if long.any():
            limit = LONG_MOVE if taken < BOLD_STEPS else np.log1p(move)
            step = step * np.where(long, limit / np.where(long, move, 1), 1)
        v = v + step
        arrived = not np.any(move > LAST_MOVE)
    linear = eta + rows.loadings.predictor(factor @ v, rows.members)
    mean, variance = rows.cumulant.two(linear)
    return Mode(v, linear, mean, variance, score, spread, root)


@dataclass(frozen=True)
class _Tilted:
    """Means and variances of rows as their clusters' effects move.

    Where the only loading is the constant and exponentials are of a safe size, that of the linear predictor is
    taken once and multiplied by the cluster's own.
    """

    rows: Level1
    eta: Floats
    exponential: Floats | None

    @classmethod
    def of(cls, rows: Level1, eta: Floats) -> _Tilted:
        """Return the rows at linear predictors ``eta`` (n,) plus effects to come."""
        safe = rows.loadings.columns == (None,) and bool(np.abs(eta).max() < SAFE_REACH)
        return cls(rows, eta, np.exp(eta) if safe else None)

    def two(self, effects: Floats) -> tuple[Floats, Floats]:
        """Return ``b'`` and ``b''`` of each row under the effects of its cluster, (q, J); new arrays."""
        members, cumulant = self.rows.members, self.rows.cumulant
        if self.exponential is not None and np.abs(effects).max() < SAFE_REACH:
            mean = members.spread(np.exp(effects[0]))
            mean *= self.exponential
            if cumulant.family == "poisson":
                return mean, mean.copy()
            rest = 1 + mean
            np.divide(1, rest, out=rest)
            mean *= rest
            rest *= mean
            return mean, rest
        mean, variance = cumulant.two(self.eta + self.rows.loadings.predictor(effects, members))
        return mean, variance.copy()


def prior_mode(rows: Level1, eta: Floats) -> Mode:
    """Return the mode of the prior, zero, with a curvature of one: where an ordinary rule puts its nodes."""
    size, count = rows.loadings.size, len(rows.members.sizes)
    mean, variance = rows.cumulant.two(eta)
    score = rows.loadings.totals(rows.weight * (rows.y - mean), rows.members)
    spread = rows.loadings.square_totals(rows.weight * variance, rows.members)
    root = np.repeat(np.eye(size)[:, :, np.newaxis], count, axis=2)
    return Mode(np.zeros((size, count)), eta, mean, variance, score, spread, root)


def _reach(rows: Level1) -> Floats:
    """Return the largest absolute loading of each cluster, (q, J), or (q, 1) where all are 1."""
    ones = np.ones(len(rows.members.sizes))
    return np.stack(
        [
            ones if column is None else np.maximum.reduceat(np.abs(column), rows.members.starts)
            for column in rows.loadings.columns
        ]
    )
