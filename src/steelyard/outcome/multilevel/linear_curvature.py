"""Slope and curvature of the linear mixed model's pseudo-log-likelihood, exact, in closed form.

Both are worked out by V, the clusters' covariance relative to the residual variance, where they are simple,
and carried to the coordinates of the search after.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.linear_likelihood import Coordinates, Level, TopLevel, solved

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Derivatives:
    """Slope and curvature at the best coefficients and residual variance of a point; K columns of weights.

    Attributes
    ----------
    slope : (K, m)
        By the coordinates' point; that by coefficients and residual variance is zero there.
    curvature : (K, p' + m + 1, p' + m + 1)
        By coefficients, point, and logarithm of the residual variance.
    by_cov : (K, q, q)
        By V: where V has lost rank, it says whether more would help.
    by_top : (K,)
        By the top clusters' relative variance; zero with two levels.
    """

    slope: Floats
    curvature: Floats
    by_cov: Floats
    by_top: Floats

    def profile_curvature(self) -> Floats:
        """Return the curvature by the point alone, coefficients and residual variance following; (K, m, m)."""
        m = self.slope.shape[1]
        fixed = self.curvature.shape[1] - m - 1
        point, rest = slice(fixed, fixed + m), np.r_[0:fixed, fixed + m]
        across = self.curvature[:, rest, point]
        behind = self.curvature[:, rest[:, np.newaxis], rest]
        return np.asarray(self.curvature[:, point, point] - across.swapaxes(1, 2) @ solved(behind, across))


def derivatives(at: Level) -> Derivatives:
    """Return slope and curvature at a point.

    Notes
    -----
    With ``e`` and ``F = Z'WX - S P Z'WX`` less their top cluster's share, ``c = nu / (1 + nu U_k)``, u the
    constant's column of U, and w the product of the weights: the slope by V is
    ``sum w [-(U - c u u') + e e' / phi] / 2``, and a move D of V moves U by ``-U D U`` and e by ``-U D e``.
    """
    clusters = _cluster_parts(at)
    by_cov, cov_cov, fixed_cov, cov_phi = _cov_blocks(at, clusters)
    tops = None if at.top is None else _top_blocks(at, at.top, clusters)
    if tops is not None:
        by_cov = by_cov + tops.by_cov
        cov_cov = cov_cov + tops.cov_cov
    coordinates: Coordinates = at.coordinates
    count, q = len(at.phi), at.root.shape[1]
    p, m = at.beta.shape[1], coordinates.size
    moves = coordinates.moves(at.root).reshape(count, -1, q * q)
    lower = moves.shape[1]
    slope, size = np.zeros((count, m)), p + m + 1
    slope[:, :lower] = _along(moves, by_cov)
    h = np.zeros((count, size, size))
    v = slice(p, p + lower)
    h[:, :p, :p] = -at.cross[:, :-1, :-1] / at.phi[:, None, None]
    h[:, v, v] = moves @ cov_cov @ moves.swapaxes(1, 2) + coordinates.curves(by_cov.reshape(count, q, q))
    h[:, :p, v] = fixed_cov @ moves.swapaxes(1, 2)
    h[:, v, -1] = _along(moves, cov_phi)
    h[:, -1, -1] = -at.sums.size / 2
    if tops is not None and coordinates.top:
        mu, k = coordinates.top_root(at.points), p + m - 1
        slope[:, -1] = 2 * mu * tops.by_top
        h[:, :p, k] = 2 * mu[:, None] * tops.fixed_top
        h[:, v, k] = 2 * mu[:, None] * _along(moves, tops.cov_top)
        h[:, k, k] = 4 * mu**2 * tops.top_top + 2 * tops.by_top
        h[:, k, -1] = 2 * mu * tops.top_phi
    row, column = np.triu_indices(size, 1)
    h[:, column, row] = h[:, row, column]
    by_top = np.zeros(count) if tops is None else tops.by_top
    return Derivatives(slope, h, by_cov.reshape(count, q, q), by_top)


@dataclass(frozen=True)
class _ClusterParts:
    """Of each cluster: its weight w and c (K, J, 1), u and e (K, J, q), U (K, J, q^2), F (K, J, q, p')."""

    weight: Floats
    c: Floats
    u: Floats
    e: Floats
    flat: Floats
    f: Floats


@dataclass(frozen=True)
class _TopBlocks:
    """What the top level adds by V, and the blocks of its relative variance nu; (K, ...) each."""

    by_cov: Floats
    cov_cov: Floats
    by_top: Floats
    fixed_top: Floats
    cov_top: Floats
    top_top: Floats
    top_phi: Floats


def _cluster_parts(at: Level) -> _ClusterParts:
    count, clusters, q = at.own.shape[:3]
    f = at.own[..., :-1]
    e = at.own[..., -1] - (f @ at.beta[:, np.newaxis, :, np.newaxis])[..., 0]
    spread = np.broadcast_to(at.spread, (count, clusters, q, q))
    u, c = spread[..., 0], np.zeros((1, 1, 1))
    if at.top is not None and at.sums.top is not None:
        top, place = at.top, at.sums.top
        effect, each = top.effect(at.beta), top.each[..., :-1]
        c = top.c[:, place, np.newaxis]
        e = e - u * effect[:, place, np.newaxis]
        f = f - u[..., np.newaxis] * (c * each[:, place])[:, :, np.newaxis]
    return _ClusterParts(at.sums.weight[:, :, np.newaxis], c, u, e, spread.reshape(count, clusters, q * q), f)


def _cov_blocks(at: Level, part: _ClusterParts) -> tuple[Floats, Floats, Floats, Floats]:
    """Return the slope by V, and the curvature of V with V, with coefficients, and with log phi."""
    count, clusters, q, p = part.f.shape
    phi, w = at.phi[:, None], part.weight
    ee = _outer(part.e, part.e)
    sum_ee = np.sum(w * ee, axis=1)
    by_cov = 0.5 * (sum_ee / phi - np.sum(w * part.flat, axis=1))
    cov_cov = (
        0.5 * _sorted(w * part.flat, part.flat, "trace") - _sorted(w * ee, part.flat, "ends") / phi[:, None]
    )
    weighted = (w[..., np.newaxis] * part.f).transpose(0, 3, 2, 1).reshape(count, p * q, clusters)
    fixed_cov = -(weighted @ part.e).reshape(count, p, q * q) / phi[:, None]
    return by_cov, cov_cov, fixed_cov, -sum_ee / (2 * phi)


def _top_blocks(at: Level, top: TopLevel, part: _ClusterParts) -> _TopBlocks:
    sums, phi = at.sums, at.phi[:, None]
    assert sums.outer is not None and sums.top_firsts is not None
    uu, ue = _outer(part.u, part.u), _outer(part.u, part.e)
    weighted = part.weight * part.c * uu
    inner, outer = sums.inner[:, :, np.newaxis], sums.outer[:, :, np.newaxis]
    sum_uu = np.add.reduceat(inner * uu, sums.top_firsts, axis=1)
    sum_ue = np.add.reduceat(inner * ue, sums.top_firsts, axis=1)
    c, share = top.c[:, :, np.newaxis], top.share[:, :, np.newaxis]
    cov_cov = (
        0.5 * (outer * c**2 * sum_uu).swapaxes(1, 2) @ sum_uu
        + (outer * c * sum_ue).swapaxes(1, 2) @ sum_ue / phi[:, None]
        - _sorted(weighted, part.flat, "ends")
    )
    e, u = top.share * top.left(at.beta), top.share * top.total
    fixed = (sums.outer * top.share * e)[:, np.newaxis] @ top.each[..., :-1]
    by_cov_and_top = 0.5 * share**2 * sum_uu - share * e[:, :, np.newaxis] * sum_ue / phi[:, None]
    return _TopBlocks(
        by_cov=0.5 * np.sum(weighted, axis=1),
        cov_cov=cov_cov,
        by_top=0.5 * np.sum(sums.outer * (e**2 / phi - u), axis=1),
        fixed_top=-fixed[:, 0] / phi,
        cov_top=np.sum(outer * by_cov_and_top, axis=1),
        top_top=np.sum(sums.outer * (0.5 * u**2 - e**2 * u / phi), axis=1),
        top_phi=-np.sum(sums.outer * e**2, axis=1) / (2 * at.phi),
    )


def _outer(left: Floats, right: Floats) -> Floats:
    """Return ``left right'`` of each cluster, flat; (K, J, q^2)."""
    product = left[..., :, np.newaxis] * right[..., np.newaxis, :]
    return product.reshape(*product.shape[:2], -1)


def _sorted(left: Floats, right: Floats, how: str) -> Floats:
    """Return ``sum_j A_j x B_j`` (K, q^2, q^2) so that D stands on the first pair of indices and D' on the second.

    "trace": ``tr(A D' B D)``. "ends", with ``A = a b'``: ``a'D B D'b``.
    """
    count, square = len(right), right.shape[2]
    q = int(np.sqrt(square))
    tensor = (left.swapaxes(1, 2) @ right).reshape(count, q, q, q, q)
    order = (0, 4, 1, 2, 3) if how == "trace" else (0, 1, 3, 4, 2)
    sorted_ = tensor.transpose(order).reshape(count, square, square)
    return np.asarray((sorted_ + sorted_.swapaxes(1, 2)) / 2)


def _along(moves: Floats, slope: Floats) -> Floats:
    return np.asarray((moves @ slope[:, :, np.newaxis])[..., 0])
