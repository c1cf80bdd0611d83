"""The weighted pseudo-log-likelihood of a linear mixed model.

All is worked out from sums by cluster, for all columns of weights at once. Coefficients and residual
variance are solved for in closed form, so that a search runs over the variances between clusters alone.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.linear_sums import ClusterSums

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True)
class Coordinates:
    """What a search moves: the variances between clusters, relative to the residual variance.

    The clusters' covariance is ``phi V``, ``V = basis L L' basis'`` with ``L`` (q, rank) zero above its
    diagonal, so that V stays valid and may lose rank; the top clusters' variance is ``phi mu^2``. A point
    holds the entries of L by rows, then mu if ``top``; m numbers.
    """

    basis: Floats
    rank: int
    top: bool

    @cached_property
    def entries(self) -> tuple[Integers, Integers]:
        """Row and column of each free entry of L."""
        row, column = np.tril_indices(len(self.basis), 0, self.rank)
        return row, column

    @property
    def size(self) -> int:
        """m, how many numbers a point has."""
        return len(self.entries[0]) + self.top

    def root(self, points: Floats) -> Floats:
        """Return ``basis L`` at (K, m) points; (K, q, rank)."""
        lower = np.zeros((len(points), len(self.basis), self.rank))
        lower[:, self.entries[0], self.entries[1]] = points[:, : len(self.entries[0])]
        return np.asarray(self.basis @ lower)

    def top_root(self, points: Floats) -> Floats:
        """Return mu at (K, m) points, zero where it is not free; (K,)."""
        return points[:, -1] if self.top else np.zeros(len(points))

    def moves(self, root: Floats) -> Floats:
        """Return the derivative of V by each free entry of L, (K, entries, q, q)."""
        row, column = self.entries
        along = (
            self.basis[:, row].T[np.newaxis, :, :, np.newaxis]
            * root.transpose(0, 2, 1)[:, column, np.newaxis]
        )
        return np.asarray(along + along.swapaxes(2, 3))

    def curves(self, slope: Floats) -> Floats:
        """Return ``tr(slope d2V)`` for each pair of free entries of L, (K, entries, entries)."""
        row, column = self.entries
        turned = self.basis.T @ slope @ self.basis
        return np.asarray(2 * turned[:, row[:, np.newaxis], row] * (column[:, np.newaxis] == column))


@dataclass(frozen=True)
class Level:
    """The pseudo-log-likelihood at one point, for K columns of weights, and what its derivatives are made of.

    Attributes
    ----------
    value : (K,)
        At the best coefficients and residual variance.
    beta, phi : (K, p'), (K,)
        Those.
    cross : (K, p' + 1, p' + 1)
        ``[X, y]' C^-1 [X, y]`` with C the covariance relative to phi.
    spread : (K or 1, J, q, q)
        U of each cluster.
    own : (K, J, q, p' + 1)
        ``[F, e]`` of each cluster, at coefficients of zero and without the top cluster's share.
    """

    sums: ClusterSums
    coordinates: Coordinates
    points: Floats
    root: Floats
    value: Floats
    beta: Floats
    phi: Floats
    cross: Floats
    spread: Floats
    own: Floats
    top: TopLevel | None

    @property
    def cov(self) -> Floats:
        """V, (K, q, q)."""
        return np.asarray(self.root @ self.root.swapaxes(1, 2))

    @property
    def top_cov(self) -> Floats:
        """The top clusters' variance relative to the residual variance, (K,)."""
        return np.asarray(self.coordinates.top_root(self.points) ** 2)


@dataclass(frozen=True)
class TopLevel:
    """The top clusters' share: with U, e, F summed over a top cluster's clusters under their own weights.

    ``share = 1 / (1 + nu U)``, all (K, T), and ``each`` (K, T, p' + 1) the sums of ``[F, e]`` of the constant.
    """

    nu: Floats
    total: Floats
    share: Floats
    each: Floats

    @property
    def c(self) -> Floats:
        """``nu / (1 + nu U)``, (K, T)."""
        return self.nu * self.share

    def left(self, beta: Floats) -> Floats:
        """Return e at coefficients (K, p'), (K, T)."""
        return np.asarray(self.each[..., -1] - (self.each[..., :-1] @ beta[:, :, np.newaxis])[..., 0])

    def effect(self, beta: Floats) -> Floats:
        """Return the predicted effect of each top cluster, ``c e``; (K, T)."""
        return np.asarray(self.c * self.left(beta))


def level(sums: ClusterSums, coordinates: Coordinates, points: Floats) -> Level:
    """Return the profile pseudo-log-likelihood at (K, m) points.

    Notes
    -----
    ``log L = sum_k w_k log int exp(sum_j w_j log int exp(sum_i w_i log f) ...)`` (Rabe-Hesketh & Skrondal
    2006, section 2), normal at each level; maximum likelihood, not restricted. With ``S = Z'WZ``,
    ``t = Z'Wr``, ``P = V (I + S V)^-1``, ``U = S - S P S`` and ``e = t - S P t`` of a cluster, its integral is

    ``log L_j = -1/2 [n_j log(2 pi phi) + log|I + S V| + (r'Wr - t'P t) / phi]``, ``n_j`` its sum of weights.

    The same again for a top cluster with variance ``phi nu``, of sums over its clusters under their weights,
    at the constant: ``-1/2 [log(1 + nu U_k) - nu e_k^2 / ((1 + nu U_k) phi)]`` is added.
    Coefficients are generalised least squares, and phi the weighted mean of what is left.
    """
    root = coordinates.root(points)
    cov = (root @ root.swapaxes(1, 2))[:, np.newaxis]
    # I - S P is (I + S V)^-1: as an inverse it loses no digits where V is large.
    kept, logdet = _inverse_and_logdet(np.eye(root.shape[1]) + sums.zz @ cov)
    weight, own, spread = sums.weight, kept @ sums.za, kept @ sums.zz
    pulled = cov @ own
    cross = sums.gram - _summed(sums.za * weight[:, :, np.newaxis, np.newaxis], pulled)
    twice = np.sum(weight * logdet, axis=1)
    spread = (spread + spread.swapaxes(2, 3)) / 2
    top = None
    if sums.outer is not None and sums.top_firsts is not None:
        nu = coordinates.top_root(points)[:, np.newaxis] ** 2
        total = np.add.reduceat(sums.inner * spread[:, :, 0, 0], sums.top_firsts, axis=1)
        each = np.add.reduceat(sums.inner[:, :, np.newaxis] * own[:, :, 0], sums.top_firsts, axis=1)
        share = 1 / (1 + nu * total)
        top = TopLevel(nu, total, share, each)
        scaled = (sums.outer * nu * share)[:, :, np.newaxis] * each
        cross = cross - scaled.swapaxes(1, 2) @ each
        twice = twice + np.sum(sums.outer * np.log1p(nu * total), axis=1)
    beta = solved(cross[:, :-1, :-1], cross[:, :-1, -1])
    left = cross[:, -1, -1] - np.sum(cross[:, -1, :-1] * beta, axis=1)
    phi = left / sums.size
    with np.errstate(invalid="ignore", divide="ignore"):
        value = -0.5 * (sums.size * (np.log(2 * np.pi * phi) + 1) + twice)
    value = np.where(phi > 0, value, -np.inf)
    return Level(sums, coordinates, points, root, value, beta, phi, cross, spread, own, top)


def _summed(left: Floats, right: Floats) -> Floats:
    """Return ``sum_j left_j' right_j``, (K, a, b), for (K, J, q, a) and (K, J, q, b)."""
    count = max(len(left), len(right))
    left = np.broadcast_to(left, (count, *left.shape[1:])).reshape(count, -1, left.shape[3])
    right = np.broadcast_to(right, (count, *right.shape[1:])).reshape(count, -1, right.shape[3])
    return np.asarray(left.swapaxes(1, 2) @ right)


def _inverse_and_logdet(matrix: Floats) -> tuple[Floats, Floats]:
    """Return inverses and logarithms of the determinants, which are positive, of (..., q, q) matrices."""
    q = matrix.shape[-1]
    if q == 1:
        return 1 / matrix, np.log(matrix[..., 0, 0])
    if q == 2:
        a, b, c, d = matrix[..., 0, 0], matrix[..., 0, 1], matrix[..., 1, 0], matrix[..., 1, 1]
        det = a * d - b * c
        inverse = np.empty_like(matrix)
        inverse[..., 0, 0], inverse[..., 1, 1] = d / det, a / det
        inverse[..., 0, 1], inverse[..., 1, 0] = -b / det, -c / det
        return inverse, np.log(det)
    return np.asarray(np.linalg.inv(matrix)), np.asarray(np.linalg.slogdet(matrix)[1])


def solved(matrix: Floats, right: Floats) -> Floats:
    """Return the solutions of (K, p, p) systems for (K, p) or (K, p, s); NaN where one has none."""
    vector = right.ndim == 2
    if vector:
        right = right[..., np.newaxis]
    try:
        found = np.linalg.solve(matrix, right)
    except np.linalg.LinAlgError:
        found = np.full(right.shape, np.nan)
        for k in range(len(matrix)):
            if np.all(np.isfinite(matrix[k])) and np.linalg.matrix_rank(matrix[k]) == len(matrix[k]):
                found[k] = np.linalg.solve(matrix[k], right[k])
    return np.asarray(found[..., 0] if vector else found)
