"""The integral over a cluster's random effects by adaptive Gauss-Hermite quadrature, and its exact derivatives.

The nodes move with the parameters: they sit about each cluster's posterior mode, scaled by the curvature
there. The derivatives below are those of the rule itself, the movement of its nodes included, so they agree
with finite differences at any number of points, one (the Laplace approximation) included.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.cumulants import SAFE_REACH
from steelyard.outcome.multilevel.posterior import (
    Level1,
    Mode,
    applied,
    posterior_mode,
    prior_mode,
    product,
    transposed,
)
from steelyard.outcome.multilevel.quadrature import Rule, rule

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Integral:
    """``log int exp(sum w (y eta - b(eta + z'L v))) phi(v) dv`` for each cluster, by ``R`` adaptive nodes.

    Attributes
    ----------
    rows : Level1
    rule : Rule
    factor : (q, q)
        ``L``.
    adaptive : bool
        Whether the nodes sit about the posterior mode and move with it; otherwise they stay about zero.
    mode : Mode
    value : (J,)
        The logarithm of the integral, without the terms in ``y`` alone.
    share : (R, J)
        Posterior weights of the nodes; they add to 1.
    nodes : (q, R, J)
        The nodes ``v``, in standard units.
    node_value, node_mean : (R, n)
        ``w b`` and ``w b'`` of each row at each node of its cluster.
    node_score : (q, R, J)
        ``sum w (y - b') z`` at each node.

    Notes
    -----
    With mode ``m``, curvature ``H = I + L'ZL = K K'``, ``A = K^-T`` and nodes ``v_r = m + A a_r``,

        Q = log|A| + log sum_r exp(log omega_r + |a_r|^2 / 2 + h(v_r)),

    ``h`` the log of the integrand without the normal constant (Liu & Pierce 1994; Pinheiro & Bates 1995;
    Rabe-Hesketh, Skrondal & Pickles 2005). The derivative of ``Q`` in whatever moves ``h`` is

        sum_r p_r dh(v_r) + g'dm + tr(M'dA) + d log|A|,   g = sum p_r h'(v_r),  M = sum p_r h'(v_r) a_r',

    worked out backwards: from ``A`` to ``H`` by the derivative of the Cholesky factor, from the mode through
    ``h'(m) = 0``.
    """

    rows: Level1
    rule: Rule
    factor: Floats
    adaptive: bool
    mode: Mode
    value: Floats
    share: Floats
    nodes: Floats
    node_value: Floats
    node_mean: Floats
    node_score: Floats

    @cached_property
    def backward(self) -> tuple[Floats, Floats, Floats]:
        """Return what the curvature (q, q, J) and the mode's equation (q, J) carry, and ``w b''' z'Gz`` (n,)."""
        rows, mode, root = self.rows, self.mode, self.mode.root
        if not self.adaptive:
            return np.zeros_like(root), np.zeros_like(mode.v), np.zeros_like(mode.eta)
        full = self.factor[:, :, np.newaxis]
        slope = effects(self.factor.T, self.node_score) - self.nodes
        pull = np.einsum("rj,arj->aj", self.share, slope)
        turn = np.einsum("rj,arj,br->abj", self.share, slope, self.rule.nodes)
        inner = -product(transposed(turn), root)
        size = rows.loadings.size
        for i in range(size):
            inner[i, i] *= 0.5
            for j in range(i + 1, size):
                inner[i, j] = 0
        curved = product(root, product(inner, transposed(root)))
        curved = 0.5 * (curved + transposed(curved)) - 0.5 * product(root, transposed(root))
        bent = product(full, product(curved, transposed(full)))
        third = rows.cumulant.third(mode.mean, mode.variance)
        row_bend = rows.weight * third * rows.loadings.form(bent, rows.members)
        bend = rows.loadings.totals(row_bend, rows.members)
        carried = applied(root, applied(transposed(root), pull + self.factor.T @ bend))
        return curved, carried, row_bend

    def slope(self) -> Floats:
        """Return the derivative of each cluster's value in the linear predictor of each row, (n,)."""
        rows, mode = self.rows, self.mode
        _, carried, row_bend = self.backward
        mean = np.einsum("rn,rn->n", rows.members.spread(self.share), self.node_mean)
        through = rows.loadings.predictor(self.factor @ carried, rows.members)
        return np.asarray(rows.weight * (rows.y - mode.variance * through) - mean + row_bend)

    def factor_slope(self) -> Floats:
        """Return the derivative of each cluster's value in ``L``, (q, q, J); its upper triangle is no use."""
        mode = self.mode
        curved, carried, row_bend = self.backward
        full = self.factor[:, :, np.newaxis]
        bend = self.rows.loadings.totals(row_bend, self.rows.members)
        direct = np.einsum("rj,arj,brj->abj", self.share, self.node_score, self.nodes)
        of_curvature = 2 * product(mode.spread, product(full, curved)) + _outer(bend, mode.v)
        moved = applied(mode.spread, self.factor @ carried)
        return np.asarray(direct + of_curvature + _outer(mode.score, carried) - _outer(moved, mode.v))

    def weight_slope(self) -> Floats:
        """Return the derivative of each cluster's value in the log of each row's weight, (n,)."""
        rows, mode = self.rows, self.mode
        curved, carried, _ = self.backward
        full = self.factor[:, :, np.newaxis]
        bent = product(full, product(curved, transposed(full)))
        mean_effects = effects(self.factor, np.einsum("rj,brj->bj", self.share, self.nodes))
        expected = np.einsum("rn,rn->n", rows.members.spread(self.share), self.node_value)
        base = mode.eta - rows.loadings.predictor(self.factor @ mode.v, rows.members)
        linear = base + rows.loadings.predictor(mean_effects, rows.members)
        through = rows.loadings.predictor(self.factor @ carried, rows.members)
        of_mode = mode.variance * rows.loadings.form(bent, rows.members) + (rows.y - mode.mean) * through
        return np.asarray(rows.weight * (rows.y * linear + of_mode) - expected)

    def moments(self) -> tuple[Floats, Floats]:
        """Return posterior means (q, J) and covariances (q, q, J) of the random effects ``L v``.

        With one node the covariance is the inverse curvature at the mode.
        """
        mean = np.einsum("rj,arj->aj", self.share, self.nodes)
        gap = self.nodes - mean[:, np.newaxis, :]
        covariance = np.einsum("rj,arj,brj->abj", self.share, gap, gap)
        if len(self.share) == 1:
            covariance = product(self.mode.root, transposed(self.mode.root))
        full = self.factor[:, :, np.newaxis]
        return self.factor @ mean, product(full, product(covariance, transposed(full)))


def integral(
    rows: Level1, eta: Floats, factor: Floats, points: int, start: Floats | None = None, adaptive: bool = True
) -> Integral:
    """Return the integrals of all clusters of some rows.

    Parameters
    ----------
    eta : (n,)
        The linear predictor without the random effects.
    factor : (q, q)
        ``L``, lower triangular; random effects are ``L v``.
    points : int
        Nodes along each axis.
    start : (q, J), optional
        Where the search for the modes begins.
    adaptive : bool
        False leaves the nodes where the prior puts them, as ordinary quadrature does.
    """
    loadings, members = rows.loadings, rows.members
    grid = rule(points, loadings.size)
    mode = posterior_mode(rows, eta, factor, start) if adaptive else prior_mode(rows, eta)
    shift = np.einsum("abj,br->arj", mode.root, grid.nodes)
    nodes = mode.v[:, np.newaxis, :] + shift
    value, mean = _at_nodes(rows, mode, product(factor[:, :, np.newaxis], mode.root), grid)
    score = rows.responses[:, np.newaxis, :] - loadings.totals(mean, members)
    moves = effects(factor, shift)
    base = members.total(rows.weight * rows.y * mode.eta)
    logs = (
        grid.lift[:, np.newaxis]
        + (rows.responses[:, np.newaxis] * moves).sum(axis=0)
        - members.total(value)
        - 0.5 * (nodes**2).sum(axis=0)
    )
    log_root = np.log(np.abs(np.stack([mode.root[d, d] for d in range(loadings.size)]))).sum(axis=0)
    total, share = added(logs)
    return Integral(
        rows, grid, factor, adaptive, mode, base + log_root + total, share, nodes, value, mean, score
    )


def _at_nodes(rows: Level1, mode: Mode, spokes: Floats, grid: Rule) -> tuple[Floats, Floats]:
    """Return ``w b`` and ``w b'`` of every row at every node of its cluster, (R, n) each.

    ``spokes`` (q, q, J) is ``L A``: node ``a`` moves the linear predictor by ``z'L A a``. The exponential of the
    moved predictor is a product of one factor an axis, which saves nearly all exponentials.
    """
    loadings, members = rows.loadings, rows.members
    tilts = [loadings.predictor(spokes[:, d], members) for d in range(loadings.size)]
    reach = max(mode.eta.max(), -mode.eta.min()) + np.abs(grid.axis).max() * sum(
        np.abs(tilt).max() for tilt in tilts
    )
    if not reach < SAFE_REACH:
        eta = mode.eta + sum(node[:, np.newaxis] * tilt for node, tilt in zip(grid.nodes, tilts, strict=True))
        with np.errstate(over="ignore", invalid="ignore"):
            return rows.weight * rows.cumulant.value(eta), rows.weight * rows.cumulant.mean(eta)
    exponential = np.exp(mode.eta)
    if loadings.columns == (None,):
        moved = members.spread(np.exp(grid.axis[:, np.newaxis] * spokes[0, 0]))
        moved *= exponential
    else:
        for tilt in tilts:
            exponential = exponential[..., np.newaxis, :] * np.exp(grid.axis[:, np.newaxis] * tilt)
        moved = exponential.reshape(-1, exponential.shape[-1])
    value, mean = rows.cumulant.of_exponential(moved)
    value *= rows.weight
    mean *= rows.weight
    return value, mean


def effects(factor: Floats, standard: Floats) -> Floats:
    """Return ``L v``: (q, q) and (q, ...) to (q, ...)."""
    if len(factor) == 1:
        return np.asarray(factor[0, 0] * standard)
    return np.asarray(np.tensordot(factor, standard, axes=1))


def added(logs: Floats) -> tuple[Floats, Floats]:
    """Return ``log sum exp`` over the first axis, and each entry's share of the sum: (R, J) to (J,) and (R, J)."""
    highest = logs.max(axis=0)
    share = np.exp(logs - highest)
    total = share.sum(axis=0)
    share /= total
    return highest + np.log(total), share


def _outer(left: Floats, right: Floats) -> Floats:
    """Return ``left right'`` cluster by cluster: (a, J) and (b, J) to (a, b, J)."""
    return left[:, np.newaxis, :] * right[np.newaxis, :, :]
