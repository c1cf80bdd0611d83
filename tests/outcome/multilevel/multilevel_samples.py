"""Small made samples in clusters, and the dense likelihood of a linear mixed model in plain numpy."""

from __future__ import annotations

import numpy as np
from steelyard.outcome.multilevel.nested import Nested


def sample(seed=1, tops=6, clusters=18, slopes=1, levels=2, columns=1, sizes=(1, 6), effect=0.8):
    """A run with fixed columns (constant, number, cluster's number), ``slopes`` random slopes, weights of K columns."""
    rng = np.random.default_rng(seed)
    n_j = rng.integers(sizes[0], sizes[1] + 1, clusters)
    cluster = np.repeat(np.arange(clusters), n_j)
    top = np.sort(np.r_[np.arange(tops), rng.integers(0, tops, clusters - tops)])
    n = len(cluster)
    x = np.column_stack([np.ones(n), rng.normal(50, 3, n), rng.normal(size=clusters)[cluster]])
    z = np.column_stack([np.ones(n), x[:, 1:2], rng.normal(2, 1, (n, 3))])[:, : 1 + slopes]
    own = rng.normal(size=(clusters, 1 + slopes)) * effect
    centred = z - np.r_[0, z[:, 1:].mean(axis=0)]
    y = 7 + 0.3 * x[:, 1] - x[:, 2] + np.sum(centred * own[cluster], axis=1) + rng.normal(size=n)
    if levels == 3:
        y += rng.normal(size=tops)[top[cluster]]
    return Nested(
        y,
        x,
        z,
        cluster,
        top if levels == 3 else None,
        rng.uniform(0.4, 2.5, (n, columns)),
        rng.uniform(0.5, 4, (clusters, columns)),
        rng.uniform(0.5, 4, (tops, columns)) if levels == 3 else None,
    )


def nested(y, x, z, cluster, top=None, row=None, own=None, upper=None):
    """A run with weights of one unless given, one column."""
    column = lambda w, n: np.ones((n, 1)) if w is None else np.asarray(w, float).reshape(n, -1)
    clusters = cluster[-1] + 1
    tops = None if top is None else column(upper, top[-1] + 1)
    return Nested(y, x, z, cluster, top, column(row, len(y)), column(own, clusters), tops)


def normal_log_density(r, covariance):
    sign, logdet = np.linalg.slogdet(covariance)
    assert sign > 0
    return -0.5 * (len(r) * np.log(2 * np.pi) + logdet + r @ np.linalg.solve(covariance, r))


def dense_log_likelihood(run, beta, cov, phi, top_var=0.0, column=0):
    """The pseudo-log-likelihood by dense multivariate normal densities, one cluster at a time.

    A row of weight w counts as ``f^w = N(r; m, phi / w) (2 pi phi)^(-(w - 1)/2) w^(-1/2)``, exactly; a top
    cluster's integral over its effect, with clusters of weight w within, is done by 80-point quadrature.
    """
    r = run.y - run.x @ beta
    w1 = run.row_weight[:, column]
    w2 = run.cluster_weight[:, column]

    def cluster_log(j, shift):
        at = run.cluster == j
        w, z = w1[at], run.z[at]
        covariance = z @ cov @ z.T + np.diag(phi / w)
        extra = np.sum(-0.5 * (w - 1) * np.log(2 * np.pi * phi) - 0.5 * np.log(w))
        return normal_log_density(r[at] - shift, covariance) + extra

    if run.top is None:
        return sum(w2[j] * cluster_log(j, 0.0) for j in range(len(w2)))
    total = 0.0
    for k, w3 in enumerate(run.top_weight[:, column]):
        inside = np.flatnonzero(run.top == k)

        def log_inside(u, inside=inside):
            return sum(w2[j] * cluster_log(j, u) for j in inside)

        if top_var == 0:
            total += w3 * log_inside(0.0)
            continue
        # A normal in u: three points give its quadratic, and the integral is closed.
        f0, f1, f2 = log_inside(0.0), log_inside(1.0), log_inside(-1.0)
        a, b = (f1 + f2) / 2 - f0, (f1 - f2) / 2
        precision = 1 / top_var - 2 * a
        total += w3 * (f0 + b**2 / (2 * precision) - 0.5 * np.log(top_var * precision))
    return total
