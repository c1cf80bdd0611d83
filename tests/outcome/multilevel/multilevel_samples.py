"""Small made samples in clusters, and the dense likelihood of a linear mixed model in plain numpy."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from steelyard.outcome.multilevel.linear_standard import LinearModel
from steelyard.outcome.multilevel.nested import Nested

FIXED, RANDOM, LEVELS = (
    ("Intercept", "number", "own"),
    ("Intercept", "number", "other", "third"),
    ("school", "area"),
)
MODELS = {
    (levels, slopes): LinearModel(FIXED, RANDOM[: 1 + slopes], LEVELS[: levels - 1], "the model")
    for levels in (2, 3)
    for slopes in range(4)
}


def sample(
    seed=1, tops=6, clusters=18, slopes=1, levels=2, columns=1, sizes=(1, 6), effect=0.8, shared_effect=False
):
    """A run with fixed columns (constant, number, cluster's number), ``slopes`` random slopes, weights of K columns."""
    rng = np.random.default_rng(seed)
    n_j = rng.integers(sizes[0], sizes[1] + 1, clusters)
    cluster = np.repeat(np.arange(clusters), n_j)
    top = np.sort(np.r_[np.arange(tops), rng.integers(0, tops, clusters - tops)])
    n = len(cluster)
    x = np.column_stack([np.ones(n), rng.normal(50, 3, n), rng.normal(size=clusters)[cluster]])
    z = np.column_stack([np.ones(n), x[:, 1:2], rng.normal(2, 1, (n, 3))])[:, : 1 + slopes]
    own = rng.normal(size=(clusters, 1 + slopes)) * effect
    if shared_effect:
        own[:] = own[:, :1]
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


def without_slopes(run, within=False):
    """The run with the random constant alone; ``within``: with hardly any difference of clusters."""
    y = run.y
    if within:
        means = np.bincount(run.cluster, y) / np.bincount(run.cluster)
        y = y - 0.9 * (means - means.mean())[run.cluster]
    return replace(run, y=y, z=run.z[:, :1])


def nested(y, x, z, cluster, top=None, row=None, own=None, upper=None):
    """A run with weights of one unless given, one column."""

    def column(w, n):
        return np.ones((n, 1)) if w is None else np.asarray(w, float).reshape(n, -1)

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


def some_clusters(run, clusters):
    """The clusters with these numbers, in this order and renumbered; a two-level run, or whole top clusters."""
    rows = np.concatenate([np.flatnonzero(run.cluster == j) for j in clusters])
    sizes = [np.sum(run.cluster == j) for j in clusters]
    top, weight = None, None
    if run.top is not None:
        order = list(dict.fromkeys(run.top[clusters]))
        top = np.array([order.index(k) for k in run.top[clusters]])
        weight = run.top_weight[order]
    cluster = np.repeat(np.arange(len(clusters)), sizes)
    own = run.cluster_weight[clusters]
    return Nested(run.y[rows], run.x[rows], run.z[rows], cluster, top, run.row_weight[rows], own, weight)


def repeated_clusters(run, times):
    """Each cluster as often as ``times`` says, as clusters of their own."""
    return some_clusters(run, np.repeat(np.arange(len(times)), times))


def runs_of(run, count):
    """The run in several, none of which splits a top-most cluster."""
    own = np.arange(len(run.cluster_weight)) if run.top is None else run.top
    return [
        some_clusters(run, np.flatnonzero(np.isin(own, part)))
        for part in np.array_split(np.unique(own), count)
    ]


def permuted(run, seed):
    """The run with its top-most clusters, the clusters in them, and their rows in another order."""
    rng = np.random.default_rng(seed)
    own = np.arange(len(run.cluster_weight)) if run.top is None else run.top
    order = np.concatenate(
        [rng.permutation(np.flatnonzero(own == k)) for k in rng.permutation(own.max() + 1)]
    )
    run = some_clusters(run, order)
    rows = np.lexsort([rng.random(len(run.y)), run.cluster])
    return replace(run, y=run.y[rows], x=run.x[rows], z=run.z[rows], row_weight=run.row_weight[rows])
