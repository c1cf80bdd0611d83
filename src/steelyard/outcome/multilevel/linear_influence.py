"""How each top-most cluster, cluster and row moves the estimates of a linear mixed model.

All are slopes of the full sample's pseudo-log-likelihood by what the fit's ``combine`` expects: coefficients,
V (by rows), the top clusters' relative variance where there are three levels, and log phi. Times ``combine``
they are influences on the parameters.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.linear import LinearFit
from steelyard.outcome.multilevel.nested import Nested, picked

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Scores:
    """From a run to the slopes of its top-most clusters' own contributions, weighted; (T, M), or (J, M).

    They add up to zero over all runs. A top-most cluster's influence is its row times ``fit.combine``; sums of
    them by PSU are what the linearized variance is made of (Binder 1983). A row is also the derivative of the
    whole slope by the logarithm of the top-most cluster's weight.
    """

    fit: LinearFit

    def __call__(self, run: Nested) -> Floats:
        """Return the slopes of a run."""
        own = solution_in(self.fit, run)
        return own.top_scores()


@dataclass(frozen=True)
class Drift:
    """Derivatives of the slope by logarithms of weights: rows (n, M), clusters (J, M), top clusters (T, M) or None."""

    row: Floats
    cluster: Floats
    top: Floats | None


@dataclass(frozen=True)
class Drifts:
    """From a run to what the slope of the pseudo-log-likelihood owes to each weight of each level.

    A weight that depends on an estimated propensity carries its estimation into the parameters: with
    ``d`` the derivative of the logarithm of the weight by the propensity's coefficients, the parameters move by
    ``(d' drift) @ fit.combine``. The row weights are those of the run, scaled if they were
    (see :func:`steelyard.outcome.multilevel.scaling.carried_to_unscaled`).
    """

    fit: LinearFit

    def __call__(self, run: Nested) -> Drift:
        """Return the derivatives of a run."""
        own = solution_in(self.fit, run)
        if run.top is None:
            return Drift(own.row_drift(), own.cluster_drift(), None)
        return Drift(own.row_drift(), own.cluster_drift(), own.top_scores())


@dataclass(frozen=True)
class SolutionInRun:
    """The full sample's solution on the rows of a run, on the scale inside the fit.

    With S, P, U, u, c, V, phi as in :func:`steelyard.outcome.multilevel.linear_curvature.derivatives`.

    Attributes
    ----------
    run : Nested
    x, z : (n, p'), (n, q)
    residual : (n,)
        After the fixed part and the top cluster's effect.
    left : (n,)
        After the cluster's effects as well.
    row, inner, outer : (n,), (J,), (T,)
        The weights of each level; ``outer`` is one with two levels.
    top : (J,)
        The top cluster of each cluster; the cluster itself with two levels.
    effects, top_effect : (J, q), (T,)
        Predicted.
    zz, zx, effect, spread : (J, q, q), (J, q, p'), (J, q, q), (J, q, q)
        S, ``Z'WX``, P, U.
    c, share, total : (T,)
        ``nu / (1 + nu U_k)``, ``1 / (1 + nu U_k)``, ``U_k``.
    phi : number
    three : whether there are three levels
    """

    run: Nested
    x: Floats
    z: Floats
    residual: Floats
    left: Floats
    row: Floats
    inner: Floats
    outer: Floats
    top: NDArray[np.int64]
    effects: Floats
    top_effect: Floats
    zz: Floats
    zx: Floats
    effect: Floats
    spread: Floats
    c: Floats
    share: Floats
    total: Floats
    phi: float
    three: bool

    def by_cluster(self, values: Floats) -> Floats:
        """Return sums of rows by cluster."""
        return np.asarray(np.add.reduceat(values, self.run.cluster_firsts, axis=0))

    def by_top(self, values: Floats) -> Floats:
        """Return sums of clusters by top-most cluster."""
        return np.asarray(np.add.reduceat(values, self.run.top_firsts, axis=0))

    @property
    def u(self) -> Floats:
        """The constant's column of U, (J, q)."""
        return self.spread[:, :, 0]

    @property
    def e(self) -> Floats:
        """``Z'W`` times what is left, (J, q)."""
        return self.by_cluster(self.z * (self.row * self.left)[:, np.newaxis])

    def cluster_scores(self) -> Floats:
        """Return the slopes of each cluster's own contribution, its top cluster's effect held; (J, p' + q^2 + 1)."""
        weighted = self.row * self.left
        u, e = self.u, self.e
        by_cov = -self.spread + self.c[self.top, None, None] * _outer(u, u) + _outer(e, e) / self.phi
        squares = self.by_cluster(weighted * self.residual) / self.phi
        return np.column_stack(
            [
                self.by_cluster(self.x * weighted[:, np.newaxis]) / self.phi,
                0.5 * by_cov.reshape(len(u), -1),
                0.5 * (squares - self.by_cluster(self.row)),
            ]
        )

    def top_scores(self) -> Floats:
        """Return the weighted slopes of each top-most cluster's contribution, (T, M)."""
        own = self.by_top(self.cluster_scores() * self.inner[:, np.newaxis])
        if self.three:
            e = self._top_left()
            own[:, -1] += 0.5 * self.top_effect * e / self.phi
            own = np.insert(own, -1, 0.5 * (e**2 / self.phi - self.share * self.total), axis=1)
        return np.asarray(own * self.outer[:, np.newaxis])

    def cluster_drift(self) -> Floats:
        """Return the derivatives of the slope by the logarithm of each cluster's weight, (J, M)."""
        own = self.cluster_scores()
        drift = self._with_top(own, self.spread[:, 0, 0], self.e[:, 0], self.top)
        return np.asarray(drift * (self.outer[self.top] * self.inner)[:, np.newaxis])

    def row_drift(self) -> Floats:
        """Return the derivatives of the slope by the logarithm of each row's weight, (n, M).

        Notes
        -----
        With ``g = (I - S P) z`` and r what is left of the row: U moves by ``g g'``, e by ``g r``.
        """
        cluster = self.run.cluster
        g = self.z - np.einsum("nab,nb->na", (self.zz @ self.effect)[cluster], self.z)
        pulled = np.einsum("nab,nb->na", self.effect[cluster], self.z)
        fixed = self.x - np.einsum("nap,na->np", self.zx[cluster], pulled)
        gu, ge = _outer(g, self.u[cluster]), _outer(g, self.e[cluster])
        c, r = self.c[self.top][cluster], self.left
        by_cov = (
            -_outer(g, g)
            + (c * g[:, 0])[:, None, None] * (gu + gu.swapaxes(1, 2))
            + (r / self.phi)[:, None, None] * (ge + ge.swapaxes(1, 2))
        )
        own = np.column_stack(
            [
                fixed * (r / self.phi)[:, np.newaxis],
                0.5 * by_cov.reshape(len(g), -1),
                0.5 * (r**2 / self.phi - 1),
            ]
        )
        drift = self._with_top(own, g[:, 0] ** 2, g[:, 0] * r, self.top[cluster])
        weight = self.row * (self.outer[self.top] * self.inner)[cluster]
        return np.asarray(drift * weight[:, np.newaxis])

    def _with_top(self, own: Floats, moves_u: Floats, moves_e: Floats, top: NDArray[np.int64]) -> Floats:
        """Return slopes with what they owe to the top cluster: U_k and e_k, its effect held, move by so much."""
        if not self.three:
            return own
        inner, u, e, p = self.inner[:, np.newaxis], self.u, self.e, self.x.shape[1]
        uu = self.by_top(inner * _outer(u, u).reshape(len(u), -1))
        ue = _outer(u, e)
        ue = self.by_top(inner * ((ue + ue.swapaxes(1, 2)) / 2).reshape(len(u), -1))
        fixed = self.by_top(inner * self._fixed_of_constant())
        c, share = self.c[top, np.newaxis], self.share[top]
        moves_effect = c * moves_e[:, np.newaxis]
        moves_c = -(c**2) * moves_u[:, np.newaxis]
        own = own.copy()
        own[:, :p] -= moves_effect * fixed[top] / self.phi
        own[:, p:-1] += 0.5 * moves_c * uu[top] - moves_effect * ue[top] / self.phi
        by_top = -0.5 * share**2 * moves_u + self._top_left()[top] * share * moves_e / self.phi
        return np.insert(own, -1, by_top, axis=1)

    def _fixed_of_constant(self) -> Floats:
        """Return the constant's row of ``Z'WX - S P Z'WX``, (J, p')."""
        return np.asarray((self.zx - self.zz @ self.effect @ self.zx)[:, 0])

    def _top_left(self) -> Floats:
        """Return ``e_k / (1 + nu U_k)``: what is left of each top cluster at the constant, its effect taken out."""
        return self.by_top(self.inner * self.e[:, 0])


def solution_in(fit: LinearFit, run: Nested) -> SolutionInRun:
    """Return the full sample's solution on the rows of a run."""
    settled, standard = fit.settled, fit.standard
    every, zero = slice(0, len(run.y)), slice(0, 1)
    x, z = standard.fixed_columns(run, every), standard.random_columns(run, every)
    r = standard.response(run, every, x) - x @ settled.beta
    row, inner = picked(run.row_weight, zero)[:, 0], picked(run.cluster_weight, zero)[:, 0]
    first, three = run.cluster_firsts, run.top is not None
    q = z.shape[1]
    zw = z * row[:, np.newaxis]
    zz = np.add.reduceat(_outer(zw, z), first, axis=0)
    zx = np.add.reduceat(_outer(zw, x), first, axis=0)
    zr = np.add.reduceat(zw * r[:, np.newaxis], first, axis=0)
    root = settled.coordinates.root(settled.point[np.newaxis])[0]
    effect = root @ np.linalg.inv(np.eye(root.shape[1]) + root.T @ zz @ root) @ root.T
    effect = np.broadcast_to(effect, (len(first), q, q))
    spread = zz - zz @ effect @ zz
    top = run.top if run.top is not None else np.arange(len(first))
    tops = int(top[-1]) + 1
    c, total, top_effect, outer = np.zeros(tops), np.zeros(tops), np.zeros(tops), np.ones(tops)
    share = np.ones(tops)
    if three and run.top_weight is not None:
        outer = picked(run.top_weight, zero)[:, 0]
        own = (zr - np.einsum("jab,jb->ja", zz @ effect, zr))[:, 0]
        total = np.add.reduceat(inner * spread[:, 0, 0], run.top_firsts)
        share = 1 / (1 + settled.top * total)
        c = settled.top * share
        top_effect = c * np.add.reduceat(inner * own, run.top_firsts)
    zr = zr - zz[:, :, 0] * top_effect[top][:, np.newaxis]
    effects = np.einsum("jab,jb->ja", effect, zr)
    residual = r - top_effect[top][run.cluster]
    return SolutionInRun(
        run=run,
        x=x,
        z=z,
        residual=residual,
        left=residual - np.sum(z * effects[run.cluster], axis=1),
        row=row,
        inner=inner,
        outer=outer,
        top=top,
        effects=effects,
        top_effect=top_effect,
        zz=zz,
        zx=zx,
        effect=effect,
        spread=spread,
        c=c,
        share=share,
        total=total,
        phi=settled.phi,
        three=three,
    )


def _outer(left: Floats, right: Floats) -> Floats:
    """Return the outer product of each row's two vectors, (n, a, b)."""
    return np.asarray(left[:, :, np.newaxis] * right[:, np.newaxis, :])
