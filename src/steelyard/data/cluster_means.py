"""Cluster means of the balance terms as columns of the design rows, so that they are compared like any other."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block, Rows, Term
from steelyard.data.passes import Engine
from steelyard.data.unit_totals import UnitTotals, totals_by_unit
from steelyard.errors import PlanError

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

LEVEL = "cluster"


def stage_of_clusters(rows: Rows, clusters: str, key: str = "balance.clusters") -> int:
    """Return the stage of the design whose units a column names.

    Raises
    ------
    PlanError
        The design has no such clusters.
    """
    named = [stage.columns[0] for stage in rows.units.stages[1:]]
    if clusters not in named:
        raise PlanError(
            f'{key} is "{clusters}"; the design has {", ".join(named) or "no clusters"}.',
            mend="Name one of design.clusters.",
        )
    return 1 + named.index(clusters)


def with_cluster_means(rows: Rows, clusters: str, engine: Engine) -> Rows:
    """Return the rows with the cluster mean of every term, and a term of level "cluster" for each.

    Means are over the cluster's rows of the domain under the sampling weights. A variance takes them as they
    are: what their own sampling brings is left out. Terms that do not vary within clusters have no such row,
    since they are their own cluster means.
    """
    unit = rows.units.ancestor(stage_of_clusters(rows, clusters))
    plain = tuple(term for term in rows.terms if term.times is None)
    index = np.array([term.index for term in plain])
    totals = engine.run("cluster means", rows.blocks, _MeansKernel(index, unit), UnitTotals.merged)
    weight = totals.values[:, -1:]
    of_found = np.divide(
        totals.values[:, :-1], weight, out=np.zeros((len(weight), len(index))), where=weight > 0
    )
    means = np.zeros((int(unit.max()) + 1, len(index)))
    means[totals.unit] = of_found
    varies = engine.run("cluster means: within", rows.blocks, _VariesKernel(index, unit, means)) > 0
    means, plain = means[:, varies], tuple(t for t, kept in zip(plain, varies, strict=True) if kept)
    first = len(rows.names)
    blocks = [
        replace(block, columns=np.concatenate([block.columns, means[unit[block.unit]]], axis=1))
        for block in rows.blocks
    ]
    terms = tuple(Term(term.label, LEVEL, "number", first + k) for k, term in enumerate(plain))
    return replace(
        rows,
        blocks=blocks,
        names=(*rows.names, *(f"{term.label}, cluster mean" for term in plain)),
        terms=(*rows.terms, *terms),
    )


@dataclass(frozen=True)
class _MeansKernel:
    index: Integers
    unit: Integers

    def __call__(self, block: Block) -> UnitTotals:
        weight = block.weight[:, np.newaxis]
        values = block.columns[:, self.index]
        return totals_by_unit([(weight, values), (weight, np.ones_like(weight))], self.unit[block.unit])


@dataclass(frozen=True)
class _VariesKernel:
    """Rows with weight whose value is not that of their cluster, by term."""

    index: Integers
    unit: Integers
    means: Floats

    def __call__(self, block: Block) -> NDArray[np.int64]:
        values, mean = block.columns[:, self.index], self.means[self.unit[block.unit]]
        differs = np.abs(values - mean) > 1e-9 * (np.abs(values) + np.abs(mean))
        return np.asarray((differs & (block.weight > 0)[:, np.newaxis]).sum(axis=0))
