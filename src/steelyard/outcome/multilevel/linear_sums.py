"""What a linear mixed model needs of the rows: sums by cluster, gathered in one pass.

Memory is that of clusters, not rows: q (q + p + 1) numbers for each cluster and column of weights. Columns
are therefore gathered some at a time.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.linear_standard import Standard
from steelyard.outcome.multilevel.nested import Nested, picked

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

# Rows whose products are formed at a time, unless one cluster has more.
ROWS_AT_A_TIME = 4096
# Bytes of cluster sums held at a time.
SUMS_AT_A_TIME = 2**26


@dataclass(frozen=True)
class ClusterSums:
    """Sums by cluster under K columns of weights, on the scale inside the fit; W is the row weights.

    Attributes
    ----------
    zz : (K or 1, J, q, q)
        ``Z'WZ``; one where the row weights are the same in every column.
    za : (K or 1, J, q, p' + 1)
        ``Z'W[X, y]``.
    gram : (K, p' + 1, p' + 1)
        ``[X, y]'W[X, y]``, summed over clusters under the weights of all levels.
    size : (K,)
        The sum of the weights of all levels.
    inner : (K or 1, J)
        The clusters' own weights.
    outer : (K or 1, T) or None
        The top clusters' weights.
    top, top_firsts : (J,) and (T,), or None
        The top cluster of each cluster, and the first cluster of each.
    """

    zz: Floats
    za: Floats
    gram: Floats
    size: Floats
    inner: Floats
    outer: Floats | None
    top: Integers | None
    top_firsts: Integers | None

    def only(self, columns: Integers) -> ClusterSums:
        """Return the sums of some of the columns."""

        def some(values: Floats) -> Floats:
            return values if len(values) == 1 else values[columns]

        outer = None if self.outer is None else some(self.outer)
        gram, size = self.gram[columns], self.size[columns]
        return ClusterSums(
            some(self.zz), some(self.za), gram, size, some(self.inner), outer, self.top, self.top_firsts
        )

    @property
    def weight(self) -> Floats:
        """The weight of each cluster, its top cluster's multiplied in; (K or 1, J)."""
        if self.outer is None or self.top is None:
            return self.inner
        return np.asarray(self.inner * self.outer[:, self.top])


def cluster_sums(
    what: str, standard: Standard, engine: Engine, rows: Sequence[Nested], columns: Integers
) -> ClusterSums:
    """Return the sums by cluster under some columns of weights, in one pass."""
    parts, gram, size = engine.run(f"{what}: sums by cluster", rows, _SumsKernel(standard, columns), _merge)
    q, width = len(standard.random), standard.fixed.shape[1] + 1
    by_cluster = np.concatenate(parts, axis=1)
    upper = np.triu_indices(q)
    zz = np.empty((*by_cluster.shape[:2], q, q))
    zz[:, :, upper[0], upper[1]] = zz[:, :, upper[1], upper[0]] = by_cluster[:, :, : len(upper[0])]
    za = np.ascontiguousarray(by_cluster[:, :, len(upper[0]) :]).reshape(*by_cluster.shape[:2], q, width)
    upper = np.triu_indices(width)
    full = np.empty((len(columns), width, width))
    full[:, upper[0], upper[1]] = full[:, upper[1], upper[0]] = gram
    inner = np.concatenate([picked(run.cluster_weight, columns) for run in rows]).T
    outer = [picked(run.top_weight, columns) for run in rows if run.top_weight is not None]
    if not outer:
        return ClusterSums(zz, za, full, size, np.ascontiguousarray(inner), None, None, None)
    tops, before, firsts, clusters = [], 0, [], 0
    for run in rows:
        assert run.top is not None
        tops.append(run.top + before)
        firsts.append(run.top_firsts + clusters)
        before += int(run.top[-1]) + 1
        clusters += len(run.top)
    return ClusterSums(
        zz,
        za,
        full,
        size,
        np.ascontiguousarray(inner),
        np.ascontiguousarray(np.concatenate(outer).T),
        np.concatenate(tops),
        np.concatenate(firsts),
    )


def column_batches(rows: Sequence[Nested], standard: Standard, columns: Integers) -> Iterator[Integers]:
    """Yield the columns of weights a batch at a time, so that their sums fit in memory."""
    clusters = sum(len(run.cluster_weight) for run in rows)
    q = len(standard.random)
    each = 8 * clusters * q * (q + standard.fixed.shape[1] + 1)
    if all(run.row_weight.shape[1] == 1 for run in rows):
        each = 8 * clusters
    step = max(1, SUMS_AT_A_TIME // max(each, 1))
    for start in range(0, len(columns), step):
        yield columns[start : start + step]


Part = tuple[list[Floats], Floats, Floats]


def _merge(left: Part, right: Part) -> Part:
    return left[0] + right[0], left[1] + right[1], left[2] + right[2]


@dataclass(frozen=True)
class _SumsKernel:
    """From a run to its clusters' sums (K or 1, J, m), its pooled cross-products (K, m') and weight (K,)."""

    standard: Standard
    columns: Integers

    def __call__(self, run: Nested) -> Part:
        firsts = run.cluster_firsts
        ends = np.append(firsts[1:], len(run.y))
        row_weight = picked(run.row_weight, self.columns)
        total = np.broadcast_to(run.cluster_total_weight(self.columns), (len(firsts), len(self.columns)))
        q, width = len(self.standard.random), self.standard.fixed.shape[1] + 1
        upper_z, upper_a = np.triu_indices(q), np.triu_indices(width)
        own = len(upper_z[0]) + q * width
        sums = np.empty((len(firsts), row_weight.shape[1], own))
        gram, size = np.zeros((len(self.columns), len(upper_a[0]))), np.zeros(len(self.columns))
        for clusters in _runs_of_clusters(firsts, ends):
            rows = slice(firsts[clusters.start], ends[clusters.stop - 1])
            x = self.standard.fixed_columns(run, rows)
            z = self.standard.random_columns(run, rows)
            a = np.column_stack([x, self.standard.response(run, rows, x)])
            za = (z[:, :, np.newaxis] * a[:, np.newaxis, :]).reshape(len(a), -1)
            products = np.concatenate([z[:, upper_z[0]] * z[:, upper_z[1]], za], axis=1)
            pooled = a[:, upper_a[0]] * a[:, upper_a[1]]
            w = row_weight[rows]
            start = firsts[clusters] - rows.start
            if w.shape[1] == 1:
                sums[clusters, 0] = np.add.reduceat(products * w, start, axis=0)
                gram += total[clusters].T @ np.add.reduceat(pooled * w, start, axis=0)
                size += total[clusters].T @ np.add.reduceat(w[:, 0], start)
                continue
            for j, first, end in zip(
                range(clusters.start, clusters.stop), start, ends[clusters] - rows.start, strict=True
            ):
                np.matmul(w[first:end].T, products[first:end], out=sums[j])
            weight = w * total[run.cluster[rows]]
            gram += weight.T @ pooled
            size += weight.sum(axis=0)
        return [np.ascontiguousarray(sums.transpose(1, 0, 2))], gram, size


def _runs_of_clusters(firsts: Integers, ends: Integers) -> Iterator[slice]:
    """Yield runs of clusters of about ``ROWS_AT_A_TIME`` rows."""
    start = 0
    while start < len(firsts):
        stop = int(np.searchsorted(ends, firsts[start] + ROWS_AT_A_TIME, side="right"))
        stop = max(stop, start + 1)
        yield slice(start, stop)
        start = stop
