"""From the blocks of a study to rows in clusters, with a weight at each level, balancing included.

Rows of one cluster may lie anywhere in the extract; here they stand together. The balancing weight multiplies
the weights of the level that is exposed; a replicate's multiplier belongs to the top-most clusters.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Model, Rows
from steelyard.data.units import Units
from steelyard.exposure.balancing import Balancing
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.scaling import LevelWeights, carried_to_unscaled, from_overall, scaled
from steelyard.plan import Multilevel, Scaling

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

ExposedLevel = Literal["rows", "clusters", "tops"]
# Rows to a run, but for the last top-most cluster's.
RUN_ROWS = 8192


@dataclass(frozen=True)
class LevelRows:
    """Rows with sampling weight, sorted by top-most cluster and cluster.

    Attributes
    ----------
    order : (n,) int64
        The place of each row among the rows of all blocks, one after another.
    count : rows of all blocks
    y, x, z : (n,), (n, p), (n, q)
    cluster, top : (n,), (J,) or None
        As in :class:`Nested`, over all rows.
    row_weight, cluster_weight, top_weight : (n,), (J,), (T,) or None
        Before balancing and scaling.
    sampling : (n,)
        The overall sampling weight.
    fixed, random : names of the columns
    levels : names of the levels, the lowest first
    from_overall : whether the levels' weights were made from the overall weight
    exposed_level : "rows", "clusters" or "tops"
        The level whose weights the balancing weight multiplies.
    """

    order: Integers
    count: int
    y: Floats
    x: Floats
    z: Floats
    cluster: Integers
    top: Integers | None
    row_weight: Floats
    cluster_weight: Floats
    top_weight: Floats | None
    sampling: Floats
    fixed: tuple[str, ...]
    random: tuple[str, ...]
    levels: tuple[str, ...]
    from_overall: bool
    exposed_level: ExposedLevel

    @property
    def outermost(self) -> Integers:
        """The top-most cluster of each row, (n,)."""
        return self.cluster if self.top is None else self.top[self.cluster]

    @property
    def clusters(self) -> int:
        """How many clusters there are, J."""
        return len(self.cluster_weight)

    def of_blocks(self, values: Floats) -> Floats:
        """Return values of the blocks' rows, (count, ...), for the sorted rows."""
        return values[self.order]

    def to_blocks(self, values: Floats) -> Floats:
        """Return values of the sorted rows for the blocks' rows, zero for those without sampling weight."""
        out = np.zeros((self.count, *values.shape[1:]))
        out[self.order] = values
        return out

    def weights(self, balancing: Floats, multiplier: Floats) -> LevelWeights:
        """Return the weights of all levels before scaling.

        Parameters
        ----------
        balancing, multiplier : (n, K)
            The balancing weight, and what a replicate makes of the sampling weight over that weight. What it does
            to all rows of a top-most cluster alike belongs to the cluster, the rest to the rows.
        """
        outermost = self.outermost
        firsts = _firsts(outermost)
        sizes = np.diff(np.append(firsts, len(outermost)))
        of_cluster = np.add.reduceat(multiplier, firsts, axis=0) / sizes[:, np.newaxis]
        shared = of_cluster[outermost]
        rest = np.divide(multiplier, shared, out=np.ones_like(shared), where=shared != 0)
        row, cluster = self.row_weight[:, np.newaxis] * rest, self.cluster_weight[:, np.newaxis]
        top = None if self.top_weight is None else self.top_weight[:, np.newaxis] * of_cluster
        if self.top is None:
            cluster = cluster * of_cluster
        if self.exposed_level == "rows":
            row = row * balancing
        elif self.exposed_level == "clusters":
            cluster = cluster * balancing[_firsts(self.cluster)]
        else:
            assert top is not None
            top = top * balancing[firsts]
        return LevelWeights(row, cluster, top)

    def runs(self, weights: LevelWeights, scaling: Scaling) -> list[Nested]:
        """Return the rows in runs that never split a top-most cluster, weights scaled."""
        row, cluster = scaled(weights.row, self.cluster, scaling), weights.cluster
        if self.top is not None:
            cluster = scaled(cluster, self.top, scaling)
        return list(self._cut(row, cluster, weights.top))

    def by_balancing(
        self, row: Floats, cluster: Floats, top: Floats | None, weights: LevelWeights, scaling: Scaling
    ) -> Floats:
        """Return derivatives by the logarithm of each row's balancing weight, (n, m), from those of a fit's drifts.

        ``weights`` are those of the full sample, unscaled. Where clusters are exposed all rows of one have the same
        balancing weight, and share the derivative by it.
        """
        if self.exposed_level == "rows":
            return carried_to_unscaled(row, weights.row[:, 0], self.cluster, scaling)
        if self.exposed_level == "clusters":
            if self.top is not None:
                cluster = carried_to_unscaled(cluster, weights.cluster[:, 0], self.top, scaling)
            return np.asarray(cluster[self.cluster] / np.bincount(self.cluster)[self.cluster, np.newaxis])
        assert top is not None
        return np.asarray(top[self.outermost] / np.bincount(self.outermost)[self.outermost, np.newaxis])

    def _cut(self, row: Floats, cluster_weight: Floats, top_weight: Floats | None) -> Iterator[Nested]:
        edges = np.flatnonzero(np.diff(self.outermost, prepend=-1, append=-1))
        cuts = [0]
        for edge in edges[1:].tolist():
            if edge - cuts[-1] >= RUN_ROWS or edge == edges[-1]:
                cuts.append(edge)
        for a, b in pairwise(cuts):
            first, last = int(self.cluster[a]), int(self.cluster[b - 1]) + 1
            top, tops = None, None
            if self.top is not None:
                assert top_weight is not None
                low, high = int(self.top[first]), int(self.top[last - 1]) + 1
                top, tops = self.top[first:last] - low, top_weight[low:high]
            yield Nested(
                self.y[a:b],
                self.x[a:b],
                self.z[a:b],
                self.cluster[a:b] - first,
                top,
                row[a:b],
                cluster_weight[first:last],
                tops,
            )


def level_rows(
    rows: Rows, asked: Multilevel, place: int, model: Model | None, exposed: str | None = None
) -> LevelRows:
    """Return the rows of an outcome's model.

    ``place`` is the outcome's column, ``model`` its covariates, ``exposed`` the clusters that are exposed as a
    whole, if any: the balancing weight belongs to the highest level whose clusters lie within those.
    """

    def column(where: int) -> Floats:
        return np.concatenate([block.columns[:, where] for block in rows.blocks])[order]

    exposure = np.concatenate([block.exposure for block in rows.blocks])
    sampling = np.concatenate([block.weight for block in rows.blocks])
    unit = np.concatenate([block.unit for block in rows.blocks])
    stages = _stages(rows.units, asked.clusters)
    counted = np.flatnonzero(sampling > 0)
    codes = [stage[unit[counted]] for stage in stages]
    order = counted[np.lexsort(codes)]
    cluster_id = stages[0][unit[order]]
    cluster = _numbered(cluster_id)
    firsts = _firsts(cluster)
    top = None if len(stages) < 2 else _numbered(stages[1][unit[order]])[firsts]
    covariates = [np.ones(len(order))] if model is None else [column(k) for k in model.index]
    names = ("Intercept",) if model is None else model.names
    slopes = [exposure[order] if name == "exposure" else column(rows.carried[name]) for name in asked.slopes]
    s = sampling[order]
    if asked.row_weight is None:
        made = from_overall(s[:, np.newaxis], cluster, top)
        row, cluster_weight = made.row[:, 0], made.cluster[:, 0]
        top_weight = None if made.top is None else made.top[:, 0]
    else:
        row = column(rows.carried[asked.row_weight])
        by_level = [column(rows.carried[name]) for name in asked.cluster_weights]
        cluster_weight = by_level[0][firsts]
        top_weight = None if top is None else by_level[1][firsts][_firsts(top)]
    return LevelRows(
        order=order,
        count=len(sampling),
        y=column(place),
        x=np.column_stack([*covariates, exposure[order]]),
        z=np.column_stack([np.ones(len(order)), *slopes]),
        cluster=cluster,
        top=top,
        row_weight=row,
        cluster_weight=cluster_weight,
        top_weight=top_weight,
        sampling=s,
        fixed=(*names, "exposure"),
        random=("Intercept", *asked.slopes),
        levels=asked.clusters,
        from_overall=asked.row_weight is None,
        exposed_level=_exposed_level(rows.units, asked.clusters, exposed),
    )


def factors(made: Balancing, rows: Rows) -> tuple[Floats, Floats]:
    """Return the balancing weights and the multipliers of the sampling weights of all blocks' rows, (N, K) each."""
    balancing, multipliers = [], []
    with np.errstate(invalid="ignore", over="ignore"):
        for block in rows.blocks:
            balanced = made.rows(block)
            weight = block.weight[:, np.newaxis]
            multiplier = np.zeros((len(block), made.count))
            np.divide(balanced.sampling, weight, out=multiplier, where=weight > 0)
            multipliers.append(multiplier)
            balancing.append(np.broadcast_to(balanced.balancing, multiplier.shape))
    return np.concatenate(balancing), np.concatenate(multipliers)


def _exposed_level(units: Units, clusters: Sequence[str], exposed: str | None) -> ExposedLevel:
    stage = {stage.columns[0]: number for number, stage in enumerate(units.stages) if number}
    if exposed is None or stage[clusters[0]] < stage[exposed]:
        return "rows"
    return "tops" if len(clusters) == 2 and stage[clusters[1]] >= stage[exposed] else "clusters"


def _firsts(codes: Integers) -> Integers:
    return np.flatnonzero(np.diff(codes, prepend=-1))


def _stages(units: Units, clusters: Sequence[str]) -> list[Integers]:
    """Return, for each level, the cluster of every unit of the design's last stage."""
    stage = {stage.columns[0]: number for number, stage in enumerate(units.stages) if number}
    return [units.ancestor(stage[name]) for name in clusters]


def _numbered(ids: Integers) -> Integers:
    """Return codes 0, 1, ... of runs of equal ids."""
    return np.cumsum(np.diff(ids, prepend=ids[:1]) != 0)
