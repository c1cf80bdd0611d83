"""Pieces of a run: top-most clusters side by side, few enough to stay near the processor, and their likelihood."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.integrals import Integral, integral
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear
from steelyard.outcome.multilevel.posterior import Level1, Loadings, Members
from steelyard.outcome.multilevel.top_integrals import Level2, TopIntegral, top_integral

Floats = NDArray[np.float64]

# Rows times nodes that are worked on at once: what stays near the processor.
ROOM = 150_000


@dataclass(frozen=True)
class Piece:
    """Some top-most clusters of a run at one ``theta`` under one column of the weights below the top-most.

    Attributes
    ----------
    x : (n, p)
    tops : Members
        Rows of each of the T top-most clusters.
    value : (T,)
        ``log L_k``, without the terms in ``y`` alone.
    slope : (n,)
        Its derivative in each row's linear predictor.
    random_slope : (r, T)
        Its derivative in the parameters of the random part.
    source : the integral they come from
    """

    x: Floats
    tops: Members
    value: Floats
    slope: Floats
    random_slope: Floats
    source: Integral | TopIntegral

    def total(self, weight: Floats) -> tuple[float, Floats]:
        """Return the weighted log-likelihood and its gradient (P,); ``weight`` (T,) is the top-most clusters'."""
        fixed = self.x.T @ (self.tops.spread(weight) * self.slope)
        return float(weight @ self.value), np.concatenate([fixed, self.random_slope @ weight])

    def scores(self) -> Floats:
        """Return the gradient of each top-most cluster's value, its weight left out, (T, P)."""
        fixed = np.add.reduceat(self.x * self.slope[:, np.newaxis], self.tops.starts, axis=0)
        return np.concatenate([fixed, self.random_slope.T], axis=1)

    def weight_slopes(self, top_weight: Floats) -> tuple[Floats, Floats]:
        """Return derivatives of the weighted log-likelihood in log row weights (n,) and log cluster weights (J,)."""
        spread = self.tops.spread(top_weight)
        if isinstance(self.source, Integral):
            return spread * self.source.weight_slope(), top_weight * self.value
        of_rows, of_clusters = self.source.weight_slopes()
        return spread * of_rows, self.source.clusters.tops.spread(top_weight) * of_clusters


@dataclass(frozen=True)
class Part:
    """Consecutive top-most clusters of a run, whatever the weights.

    Attributes
    ----------
    rows, clusters, tops : slice
        Where the part lies among the run's rows, clusters and top-most clusters.
    x : (n, p)
    y : (n,)
    loadings : Loadings
    of_rows : Members
        Rows of each cluster.
    top_rows : Members
        Rows of each top-most cluster.
    of_clusters : Members or None
        Clusters of each top cluster; None for two levels.
    """

    rows: slice
    clusters: slice
    tops: slice
    x: Floats
    y: Floats
    loadings: Loadings
    of_rows: Members
    top_rows: Members
    of_clusters: Members | None


def parts(model: Nonlinear, run: Nested, points: int) -> list[Part]:
    """Cut a run between top-most clusters into parts of about :data:`ROOM` rows times nodes."""
    tops = model.tops(run)
    of_clusters = np.arange(len(run.cluster_weight)) if model.levels == 2 else run.top
    assert of_clusters is not None
    pieces = max(1, round(len(run.y) * points ** len(model.random) / ROOM))
    middle = tops.starts + 0.5 * tops.sizes
    piece = np.minimum((middle * pieces / len(run.y)).astype(np.int64), pieces - 1)
    firsts = np.concatenate([[0], np.flatnonzero(np.diff(piece)) + 1, [len(piece)]])
    out = []
    for first, last in pairwise(firsts.tolist()):
        rows = slice(int(tops.starts[first]), int(tops.starts[last - 1] + tops.sizes[last - 1]))
        low, high = np.searchsorted(of_clusters, [first, last])
        top_rows = Members(tops.starts[first:last] - rows.start, tops.sizes[first:last])
        members, inside = top_rows, None
        if model.levels == 3:
            members, inside = Members.of(run.cluster[rows]), Members.of(of_clusters[low:high])
        out.append(
            Part(
                rows,
                slice(int(low), int(high)),
                slice(first, last),
                run.x[rows],
                run.y[rows],
                Loadings.of(run.z[rows]),
                members,
                top_rows,
                inside,
            )
        )
    return out


@dataclass(frozen=True)
class Prepared:
    """A part under one column of weights, ready for any ``theta``."""

    model: Nonlinear
    part: Part
    below: Level1 | Level2

    def source(self, theta: Floats, points: int, start: Floats | None = None) -> Integral | TopIntegral:
        """Return the part's integrals at ``theta`` (P,); ``start`` is where two-level modes begin."""
        eta = self.part.x @ theta[: len(self.model.fixed)]
        adaptive = self.model.adaptive or points == 1
        if isinstance(self.below, Level1):
            return integral(self.below, eta, self.model.factor(theta), points, start, adaptive)
        return top_integral(self.below, eta, self.model.scales(theta), points, adaptive)

    def at(self, theta: Floats, points: int, start: Floats | None = None) -> Piece:
        """Return the part's likelihood at ``theta``, with its derivatives."""
        source = self.source(theta, points, start)
        random = (
            source.factor_slope()[self.model.lower] if isinstance(source, Integral) else source.scale_slope()
        )
        return Piece(self.part.x, self.part.top_rows, source.value, source.slope(), random, source)


def prepared(model: Nonlinear, run: Nested, part: Part, column: int) -> Prepared:
    """Return a part of a run under one column of weights."""
    weight = np.ascontiguousarray(run.row_weight[part.rows, column])
    rows = Level1(part.y, weight, part.loadings, part.of_rows, model.cumulant)
    if part.of_clusters is None:
        return Prepared(model, part, rows)
    return Prepared(model, part, Level2(rows, run.cluster_weight[part.clusters, column], part.of_clusters))


def same_below(model: Nonlinear, run: Nested, part: Part, one: int, other: int) -> bool:
    """Whether two columns have the same weights below the top-most level, so that one integral serves both."""
    if one == other:
        return True
    if not np.array_equal(run.row_weight[part.rows, one], run.row_weight[part.rows, other]):
        return False
    weight = run.cluster_weight[part.clusters]
    return model.levels == 2 or np.array_equal(weight[:, one], weight[:, other])
