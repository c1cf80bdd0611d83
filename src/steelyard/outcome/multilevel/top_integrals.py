"""The integral over a top cluster's effect, of the weighted integrals over the clusters in it.

Random intercepts at two levels: rows of cluster ``j`` in top cluster ``k`` have ``eta + a t_k + b v_j``, with ``t``
and ``v`` standard normal. As in :mod:`steelyard.outcome.multilevel.integrals` the nodes move with the
parameters, at both levels, and derivatives are those of the rule itself.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.integrals import Integral, added, integral
from steelyard.outcome.multilevel.posterior import (
    BOLD_STEPS,
    LAST_MOVE,
    LONG_MOVE,
    MOST_MODE_STEPS,
    SURE_MOVE,
    Level1,
    Members,
)
from steelyard.outcome.multilevel.quadrature import Rule, rule

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Level2:
    """Clusters under one column of level-2 weights.

    Attributes
    ----------
    rows : Level1
        Their rows, with the constant for the only loading.
    weight : (J,)
        Level-2 conditional weights.
    tops : Members
        Which clusters make up each of the T top clusters.
    """

    rows: Level1
    weight: Floats
    tops: Members


@dataclass(frozen=True)
class JointMode:
    """The joint mode of top and cluster effects, and what the rows look like there.

    Attributes
    ----------
    top : (T,)
    cluster : (J,)
    mean, variance : (n,)
    score : (J,)
        ``S = sum w (y - b')``.
    spread : (J,)
        ``a = sum w b''``.
    curvature : (J,)
        ``1 + b^2 a``: that of a cluster's effect.
    top_curvature : (T,)
        ``1 + a^2 sum w2 spread / curvature``: that of a top effect, the clusters' effects following.
    """

    top: Floats
    cluster: Floats
    mean: Floats
    variance: Floats
    score: Floats
    spread: Floats
    curvature: Floats
    top_curvature: Floats


def joint_mode(clusters: Level2, eta: Floats, scales: tuple[float, float]) -> JointMode:
    """Return the mode of ``sum_j w2 [sum_i w1 (y eta - b(eta)) - v_j^2 / 2] - t^2 / 2`` for each top cluster.

    ``scales`` are the standard deviations of cluster and top effects. Steps are those of
    :func:`steelyard.outcome.multilevel.posterior.posterior_mode`, for all effects of a top cluster together.
    """
    rows, tops, w2 = clusters.rows, clusters.tops, clusters.weight
    of_cluster, of_top = scales
    v, t = np.zeros(len(w2)), np.zeros(len(tops.sizes))
    arrived = False
    for taken in range(MOST_MODE_STEPS):
        shift = of_cluster * v + of_top * tops.spread(t)
        mean, variance = rows.cumulant.two(eta + rows.members.spread(shift))
        score = rows.members.total(rows.weight * (rows.y - mean))
        spread = rows.members.total(rows.weight * variance)
        curvature = 1 + of_cluster**2 * spread
        top_curvature = 1 + of_top**2 * tops.total(w2 * spread / curvature)
        if arrived:
            break
        gap = of_cluster * score - v
        pull = of_top * tops.total(w2 * score) - t
        pull = pull - of_top * of_cluster * tops.total(w2 * spread * gap / curvature)
        top_step = pull / top_curvature
        step = (gap - of_cluster * of_top * spread * tops.spread(top_step)) / curvature
        moves = np.abs(of_cluster * step + of_top * tops.spread(top_step))
        moves = np.maximum(moves, np.abs(of_cluster * step))
        move = np.maximum.reduceat(moves, tops.starts)
        bold = taken < BOLD_STEPS
        long = move > (LONG_MOVE if bold else SURE_MOVE)
        shorter = np.where(long, (LONG_MOVE if bold else np.log1p(move)) / np.where(long, move, 1), 1)
        t = t + shorter * top_step
        v = v + tops.spread(shorter) * step
        arrived = not np.any(move > LAST_MOVE)
    return JointMode(t, v, mean, variance, score, spread, curvature, top_curvature)


@dataclass(frozen=True)
class TopIntegral:
    """``log int exp(sum_j w2_j Q_j(eta + a t)) phi(t) dt`` for each top cluster, by R adaptive nodes.

    Attributes
    ----------
    clusters : Level2
    eta : (n,)
    scales : standard deviations of cluster and top effects, ``b`` and ``a``
    points : int
    adaptive : bool
        Whether the nodes of both levels move with the parameters.
    mode : JointMode
    value : (T,)
    share : (R, T)
        Posterior weights of the nodes.
    nodes : (R, T)
        Nodes of the top effect, in standard units.
    inner_value, inner_scale : (R, J)
        ``Q_j`` at each node of the top effect, and its derivative in ``b``.
    inner_slope : (R, n)
        Its derivative in the linear predictor of each row.

    Notes
    -----
    Nodes are ``t_r = m + a_r C^-1/2``, ``m`` from the joint mode and ``C`` its curvature once the clusters' effects
    are maximised out. At each of them every ``Q_j`` has its own adaptive nodes. Backwards: ``C`` from the
    spreads of the clusters, the joint mode from its equations, an arrow system solved by one elimination.
    """

    clusters: Level2
    eta: Floats
    scales: tuple[float, float]
    points: int
    adaptive: bool
    mode: JointMode
    value: Floats
    share: Floats
    nodes: Floats
    inner_value: Floats
    inner_scale: Floats
    inner_slope: Floats

    @property
    def grid(self) -> Rule:
        """The rule of the top effect."""
        return rule(self.points)

    def inner(self, r: int) -> Integral:
        """Return the clusters' integrals at node ``r`` of their top cluster's effect."""
        clusters, mode = self.clusters, self.mode
        return _inner(clusters, self.eta, self.scales, mode, self.nodes[r], self.points, self.adaptive)

    @cached_property
    def _row_total(self) -> Floats:
        """Return the sums of the rows' slopes by node and top cluster, weights of clusters in, (R, T)."""
        by_cluster = self.clusters.rows.members.total(self.inner_slope)
        return self.clusters.tops.total(by_cluster * self.clusters.weight)

    @cached_property
    def _backward(self) -> tuple[Floats, Floats, Floats, Floats, Floats]:
        """Return what reaches spread (J,), cluster equation (J,), top equation (T,), rows (n,), curvature (T,)."""
        rows, tops, w2 = self.clusters.rows, self.clusters.tops, self.clusters.weight
        b, a = self.scales
        mode = self.mode
        if not self.adaptive:
            none = np.zeros_like(mode.cluster)
            return none, none, np.zeros_like(mode.top), np.zeros_like(mode.mean), np.zeros_like(mode.top)
        slope = a * self._row_total - self.nodes
        pull = (self.share * slope).sum(axis=0)
        turn = (self.share * slope * self.grid.nodes[0][:, np.newaxis]).sum(axis=0)
        curved = -0.5 * (turn * mode.top_curvature**-1.5 + 1 / mode.top_curvature)
        of_spread = tops.spread(curved) * a**2 * w2 / mode.curvature**2
        third = rows.cumulant.third(mode.mean, mode.variance)
        row_bend = rows.weight * third * rows.members.spread(of_spread)
        bend = rows.members.total(row_bend)
        of_top = pull + a * tops.total(bend)
        of_cluster = b * bend
        eliminated = tops.total(b * a * mode.spread * of_cluster / mode.curvature)
        top_carried = (of_top - eliminated) / mode.top_curvature
        across = b * a * w2 * mode.spread * tops.spread(top_carried)
        carried = (of_cluster - across) / mode.curvature
        return of_spread, carried, top_carried, row_bend, curved

    @cached_property
    def _through(self) -> Floats:
        """What a change of a cluster's score carries, (J,)."""
        b, a = self.scales
        _, carried, top_carried, _, _ = self._backward
        tops = self.clusters.tops
        return np.asarray(b * carried + a * self.clusters.weight * tops.spread(top_carried))

    @cached_property
    def _cluster_share(self) -> Floats:
        """Posterior weights of the nodes for each cluster, (R, J)."""
        return self.clusters.tops.spread(self.share)

    def slope(self) -> Floats:
        """Return the derivative of each top cluster's value in the linear predictor of each row, (n,)."""
        rows, mode = self.clusters.rows, self.mode
        weighted = rows.members.spread(self._cluster_share * self.clusters.weight)
        direct = np.einsum("rn,rn->n", weighted, self.inner_slope)
        row_bend = self._backward[3]
        return np.asarray(
            direct + row_bend - rows.weight * mode.variance * rows.members.spread(self._through)
        )

    def scale_slope(self) -> Floats:
        """Return the derivatives of each top cluster's value in ``b`` and ``a``, (2, T)."""
        tops, w2, mode = self.clusters.tops, self.clusters.weight, self.mode
        b, a = self.scales
        _, carried, top_carried, row_bend, curved = self._backward
        bend = self.clusters.rows.members.total(row_bend)
        direct_b = tops.total(w2 * (self._cluster_share * self.inner_scale).sum(axis=0))
        direct_a = (self.share * self.nodes * self._row_total).sum(axis=0)
        curved_b = curved * a**2 * tops.total(-2 * b * w2 * (mode.spread / mode.curvature) ** 2)
        curved_a = curved * 2 * a * tops.total(w2 * mode.spread / mode.curvature)
        moved = mode.spread * self._through
        of_b = (
            direct_b
            + curved_b
            + tops.total(bend * mode.cluster + carried * mode.score - moved * mode.cluster)
        )
        of_a = direct_a + curved_a + mode.top * tops.total(bend - moved)
        of_a = of_a + top_carried * tops.total(w2 * mode.score)
        return np.stack([of_b, of_a])

    def weight_slopes(self) -> tuple[Floats, Floats]:
        """Return the derivatives of values in the log of row weights, (n,), and of cluster weights, (J,)."""
        rows, tops, w2, mode = self.clusters.rows, self.clusters.tops, self.clusters.weight, self.mode
        a = self.scales[1]
        of_spread, _, top_carried, _, curved = self._backward
        weighted = self._cluster_share * w2
        of_rows = rows.weight * (
            mode.variance * rows.members.spread(of_spread)
            + (rows.y - mode.mean) * rows.members.spread(self._through)
        )
        for r in range(self.points):
            of_rows = of_rows + rows.members.spread(weighted[r]) * self.inner(r).weight_slope()
        of_clusters = (weighted * self.inner_value).sum(axis=0)
        of_clusters = of_clusters + tops.spread(curved) * a**2 * w2 * mode.spread / mode.curvature
        return of_rows, of_clusters + a * w2 * mode.score * tops.spread(top_carried)

    def moments(self) -> tuple[Floats, Floats, Floats, Floats]:
        """Return posterior means and variances of cluster effects (J,) and of top effects (T,).

        With one node the variances are those of the inverse curvature at the joint mode.
        """
        b, a = self.scales
        mean = np.zeros(len(self.clusters.weight))
        square = np.zeros_like(mean)
        for r in range(self.points):
            inner_mean, inner_covariance = self.inner(r).moments()
            mean += self._cluster_share[r] * inner_mean[0]
            square += self._cluster_share[r] * (inner_covariance[0, 0] + inner_mean[0] ** 2)
        top_mean = (self.share * self.nodes).sum(axis=0)
        top_variance = (self.share * (self.nodes - top_mean) ** 2).sum(axis=0)
        variance = np.maximum(square - mean**2, 0)
        if self.points == 1:
            top_variance = 1 / self.mode.top_curvature
            carried = b**2 * a * self.mode.spread / self.mode.curvature
            variance = variance + carried**2 * self.clusters.tops.spread(top_variance)
        return mean, variance, a * top_mean, a**2 * top_variance


def top_integral(
    clusters: Level2, eta: Floats, scales: tuple[float, float], points: int, adaptive: bool = True
) -> TopIntegral:
    """Return the integrals of all top clusters of some rows.

    Parameters
    ----------
    eta : (n,)
        The linear predictor without the random effects.
    scales : standard deviations of cluster effects and of top effects
    points : int
        Nodes at each level.
    adaptive : bool
        False leaves the nodes where the priors put them, as ordinary quadrature does.
    """
    grid = rule(points)
    mode = joint_mode(clusters, eta, scales) if adaptive else _prior(clusters, eta)
    nodes = mode.top + grid.nodes[0][:, np.newaxis] / np.sqrt(mode.top_curvature)
    values, slopes, of_scale = [], [], []
    for r in range(points):
        inner = _inner(clusters, eta, scales, mode, nodes[r], points, adaptive)
        values.append(inner.value)
        slopes.append(inner.slope())
        of_scale.append(inner.factor_slope()[0, 0])
    inner_value = np.stack(values)
    logs = grid.lift[:, np.newaxis] + clusters.tops.total(inner_value * clusters.weight) - 0.5 * nodes**2
    total, share = added(logs)
    return TopIntegral(
        clusters,
        eta,
        scales,
        points,
        adaptive,
        mode,
        total - 0.5 * np.log(mode.top_curvature),
        share,
        nodes,
        inner_value,
        np.stack(of_scale),
        np.stack(slopes),
    )


def _prior(clusters: Level2, eta: Floats) -> JointMode:
    """Return the mode of the priors, zero, with curvatures of one."""
    rows = clusters.rows
    mean, variance = rows.cumulant.two(eta)
    zero, ones = np.zeros(len(clusters.weight)), np.ones(len(clusters.weight))
    tops = len(clusters.tops.sizes)
    score = rows.members.total(rows.weight * (rows.y - mean))
    spread = rows.members.total(rows.weight * variance)
    return JointMode(np.zeros(tops), zero, mean, variance, score, spread, ones, np.ones(tops))


def _inner(
    clusters: Level2,
    eta: Floats,
    scales: tuple[float, float],
    mode: JointMode,
    top: Floats,
    points: int,
    adaptive: bool,
) -> Integral:
    """Return the clusters' integrals where the top effects are ``top`` (T,), in standard units."""
    b, a = scales
    tops, rows = clusters.tops, clusters.rows
    start = mode.cluster - b * a * mode.spread / mode.curvature * tops.spread(top - mode.top)
    shifted = eta + rows.members.spread(a * tops.spread(top))
    return integral(rows, shifted, np.array([[b]]), points, start[np.newaxis, :], adaptive)
