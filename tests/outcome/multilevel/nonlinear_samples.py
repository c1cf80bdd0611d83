"""Made-up nested samples, and the pseudo-likelihood by brute force: a dense grid in plain numpy."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
from scipy import special

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.evaluate import Evaluate
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear

ENGINE = Engine()
NAMES = ("one", "a", "b")


def sample(
    clusters=40,
    rows=8,
    family="binomial",
    slope=False,
    levels=2,
    seed=1,
    sd=1.0,
    sd2=0.5,
    columns=1,
    tops=None,
):
    """Rows in clusters of ``rows`` / 2 to ``rows`` * 3 / 2, with a weight at each level."""
    rng = np.random.default_rng(seed)
    sizes = rng.integers(max(1, rows // 2), rows + rows // 2 + 1, clusters)
    cluster = np.repeat(np.arange(clusters), sizes)
    n = len(cluster)
    x = np.column_stack([np.ones(n), rng.normal(size=n), rng.random(n) < 0.4]).astype(float)
    z = x[:, : 2 if slope else 1]
    effects = rng.normal(size=(clusters, 2)) @ np.array([[sd, 0.3 * sd2], [0, sd2]])
    eta = x @ np.array([-0.4, 0.3, 0.6]) + (z * effects[cluster, : z.shape[1]]).sum(axis=1)
    top = top_weight = None
    if levels == 3:
        top = np.sort(rng.integers(0, tops or clusters // 5, clusters))
        top = np.unique(top, return_inverse=True)[1]
        eta = eta + (rng.normal(size=top.max() + 1) * sd2)[top[cluster]]
        top_weight = rng.uniform(0.5, 2, (top.max() + 1, columns))
    if family == "binomial":
        y = (rng.random(n) < special.expit(eta)).astype(float)
    else:
        y = rng.poisson(np.exp(0.5 * eta)).astype(float)
    row_weight = rng.uniform(0.5, 2, (n, 1)) * rng.uniform(0.9, 1.1, (n, columns))
    return Nested(y, x, z, cluster, top, row_weight, rng.uniform(0.5, 2, (clusters, columns)), top_weight)


def model(family="binomial", slope=False, levels=2, points=7, adaptive=True):
    return Nonlinear("a model", family, NAMES, ("one", "a")[: 1 + slope], points, levels, adaptive)


def value(made, run, theta, column=0, points=None):
    """The log pseudo-likelihood of the code under test, terms in ``y`` alone left out."""
    kernel = Evaluate(made, np.asarray(theta)[:, np.newaxis], (column,), points or made.points)
    return float(kernel(run)[0][0])


def normal_grid(count, reach=8.5):
    """Points and weights of the trapezoid rule for a standard normal variable; log weights."""
    at = np.linspace(-reach, reach, count)
    return at, -0.5 * at**2 - 0.5 * np.log(2 * np.pi) + np.log(at[1] - at[0])


def log_density(family, y, eta):
    """Log density of rows, constants in y left out."""
    if family == "binomial":
        return np.where(y > 0.5, -np.logaddexp(0, -eta), -np.logaddexp(0, eta))
    return y * eta - np.exp(eta)


def brute_force(made, run, theta, column=0, count=241):
    """The log pseudo-likelihood by a dense grid, cluster by cluster."""
    p = len(made.fixed)
    fixed = run.x @ np.asarray(theta)[:p]
    at, logs = normal_grid(count)
    w1, w2 = run.row_weight[:, column], run.cluster_weight[:, column]
    if made.levels == 2:
        total = 0.0
        for j in range(len(w2)):
            rows = run.cluster == j
            total += w2[j] * _cluster(made, run, theta, fixed, rows, w1, at, logs)
        return total
    b, a = np.asarray(theta)[-2:]
    total = 0.0
    for k in range(len(run.top_weight)):
        inside = np.zeros(len(at))
        for j in np.flatnonzero(run.top == k):
            rows = run.cluster == j
            eta = fixed[rows, None, None] + a * at[None, :, None] + b * at[None, None, :]
            density = log_density(made.family, run.y[rows, None, None], eta)
            inner = np.einsum("i,its->ts", w1[rows], density)
            inside += w2[j] * special.logsumexp(inner + logs, axis=1)
        total += run.top_weight[k, column] * special.logsumexp(inside + logs)
    return total


def _cluster(made, run, theta, fixed, rows, w1, at, logs):
    entries = np.asarray(theta)[len(made.fixed) :]
    y, w = run.y[rows], w1[rows]
    if len(made.random) == 1:
        eta = fixed[rows, None] + run.z[rows, :1] * entries[0] * at
        return special.logsumexp(w @ log_density(made.family, y[:, None], eta) + logs)
    factor = np.array([[entries[0], 0], [entries[1], entries[2]]])
    tilt = run.z[rows] @ factor
    eta = fixed[rows, None, None] + tilt[:, 0, None, None] * at[:, None] + tilt[:, 1, None, None] * at
    inner = np.einsum("i,ist->st", w, log_density(made.family, y[:, None, None], eta))
    return special.logsumexp(inner + logs[:, None] + logs)


def repeated_rows(run, times):
    """The run with each row repeated, its level-1 weight one."""
    pick = np.repeat(np.arange(len(run.y)), times)
    return replace(
        run,
        y=run.y[pick],
        x=run.x[pick],
        z=run.z[pick],
        cluster=run.cluster[pick],
        row_weight=np.ones((len(pick), run.row_weight.shape[1])),
    )


def repeated_clusters(run, times):
    """The two-level run with each cluster repeated, its level-2 weight one."""
    picks, codes, new = [], [], 0
    for j, count in enumerate(times):
        rows = np.flatnonzero(run.cluster == j)
        for _ in range(count):
            picks.append(rows)
            codes.append(np.full(len(rows), new))
            new += 1
    pick, cluster = np.concatenate(picks), np.concatenate(codes)
    return replace(
        run,
        y=run.y[pick],
        x=run.x[pick],
        z=run.z[pick],
        cluster=cluster,
        row_weight=run.row_weight[pick],
        cluster_weight=np.ones((new, run.cluster_weight.shape[1])),
    )


def split(run, pieces):
    """The run cut into several between top-most clusters."""
    top = run.top[run.cluster] if run.top is not None else run.cluster
    edges = np.linspace(0, top.max() + 1, pieces + 1).astype(int)
    out = []
    for low, high in pairwise(edges):
        rows = (top >= low) & (top < high)
        if not rows.any():
            continue
        first, last = run.cluster[rows][0], run.cluster[rows][-1] + 1
        out.append(
            Nested(
                run.y[rows],
                run.x[rows],
                run.z[rows],
                run.cluster[rows] - first,
                None if run.top is None else run.top[first:last] - low,
                run.row_weight[rows],
                run.cluster_weight[first:last],
                None if run.top_weight is None else run.top_weight[low:high],
            )
        )
    return out
