"""Linearized variance: from the influence of each row to a design-based covariance.

One formula serves all designs (Binder 1983; Wolter 2007; Särndal, Swensson & Wretman 1992, chapter 4):

    V = sum_h (1 - f_h) n_h / (n_h - 1) sum_j (z_hj - zbar_h)(z_hj - zbar_h)'
      + sum_h f_h sum_j (1 - f_hj) m_hj / (m_hj - 1) sum_k (z_hjk - zbar_hj)(z_hjk - zbar_hj)' + ...

with ``z`` the sum of ``s u`` in a unit; a stage after the first is added where populations are given.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise
from typing import Protocol

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from steelyard.data.blocks import Block, Rows
from steelyard.data.passes import Engine
from steelyard.design.survey import SurveyDesign, sampled_below

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Product = tuple[Floats, Floats]


class Influence(Protocol):
    """The influence of the rows of a block on k estimates, whole or in parts.

    ``products(block)`` gives pairs of factors (n, J) and columns (n, q); their J q products, the factors'
    columns outermost and the pairs one after another, times ``matrix`` (m, k) are the influence ``u``,
    which calling the object with the block gives outright.
    """

    @property
    def matrix(self) -> Floats:
        """How the products combine, (m, k)."""
        ...

    def products(self, block: Block) -> list[Product]:
        """Return the block's products."""
        ...

    def __call__(self, block: Block) -> Floats:
        """Return the block's influence, (n, k)."""
        ...


@dataclass(frozen=True)
class PlainInfluence:
    """Any function from a block to (n, k) as an influence."""

    function: Callable[[Block], Floats]
    size: int

    @property
    def matrix(self) -> Floats:
        """The identity: every product is an estimate's influence already."""
        return np.eye(self.size)

    def products(self, block: Block) -> list[Product]:
        """Return the influence as one product with ones."""
        return [(np.ones((len(block), 1)), self.function(block))]

    def __call__(self, block: Block) -> Floats:
        """Return the block's influence, (n, k)."""
        return self.function(block)


def covariance(
    design: SurveyDesign, rows: Rows, engine: Engine, influence: Influence, what: str = "variance"
) -> Floats:
    """Return the covariance (k, k) of estimates whose rows have the given ``influence``.

    Parameters
    ----------
    influence : Influence
        Of ``u``, with ``estimate - truth`` near ``sum(s u)``. Rows outside the domain are in no block and
        count as zeros.

    Notes
    -----
    Where the last stage of the variance is a stage of clusters, one pass sums ``s u`` by unit. Where it is
    the rows themselves, a second pass adds the rows' deviations from the means of their units, so that no
    array of all rows is held.
    """
    last = min(design.stages, len(design.units.stages) - 1)
    unit = design.units.ancestor(last)
    kernel = _TotalsKernel(influence, unit, len(design.units.stages[last]))
    totals = engine.run(what, rows.blocks, kernel, _Totals.merged).dense() @ influence.matrix
    variance = np.zeros((totals.shape[1], totals.shape[1]))
    by_stage = [totals]
    for stage in range(last, 0, -1):
        stage_units = design.units.stages[stage]
        above = np.zeros((len(design.units.stages[stage - 1]), totals.shape[1]))
        np.add.at(above, stage_units.parent, by_stage[0])
        by_stage.insert(0, above)
    for stage in range(1, last + 1):
        variance += _clusters_part(design, stage, by_stage)
    if design.stages > last:
        variance += _rows_part(design, rows, engine, influence, by_stage, what)
    return np.asarray((variance + variance.T) / 2)


def stage_factors(design: SurveyDesign, stage: int) -> tuple[Floats, Integers]:
    """Return what multiplies squared deviations of units of ``stage`` (1 = PSUs), and their peer groups.

    The factor is one a peer group: product of the fractions above, ``1 - f`` of this stage, and
    ``n / (n - 1)``; a group of one unit gets 0 (1 where it is centred on all PSUs). The second array maps
    units of the stage above to peer groups: strata to variance strata at the first stage, themselves below.
    """
    if stage == 1:
        n = design.psus_in_group
        factor = np.where(n > 1, (1 - design.fraction) * n / np.maximum(n - 1, 1), 0.0)
        return np.where(design.centred_on_all, 1 - design.fraction, factor), design.group
    units = design.units
    parents = units.stages[stage - 1]
    n = sampled_below(units, stage - 1)
    share = np.ones(len(parents))
    index = np.arange(len(parents), dtype=np.int64)
    for above in range(stage - 1, 1, -1):
        index = units.stages[above].parent[index]
        grand = units.stages[above - 1]
        # Without a population the stage adds nothing below itself.
        fraction = (
            np.zeros(len(grand))
            if grand.population is None
            else sampled_below(units, above - 1) / grand.population
        )
        share *= fraction[index]
    group = design.group[units.stages[1].parent[index]]
    first = design.fraction[group]
    if units.stages[0].population is None:
        first = np.where(design.next_stage[group], 1.0, 0.0)
    population = parents.population
    if population is None:
        # Nothing is known below these units; only below certain PSUs do they stand for the first stage.
        first = np.where(design.next_stage[group] & (stage == 2), first, 0.0)
    here = np.zeros(len(parents)) if population is None else n / population
    factor = share * first * np.where(n > 1, (1 - here) * n / np.maximum(n - 1, 1), 0.0)
    return factor, np.arange(len(parents), dtype=np.int64)


def _clusters_part(design: SurveyDesign, stage: int, by_stage: list[Floats]) -> Floats:
    """Return the part of the variance that the totals of one stage of clusters bring."""
    factor, peers = stage_factors(design, stage)
    group = peers[design.units.stages[stage].parent]
    z = by_stage[stage]
    centre = _centres(design, stage, z, group, len(factor))
    deviation = z - centre[group]
    return np.asarray((deviation * factor[group][:, np.newaxis]).T @ deviation)


def _centres(design: SurveyDesign, stage: int, z: Floats, group: Integers, groups: int) -> Floats:
    """Return the mean total of each peer group, or of all PSUs for a lone PSU that is centred on them."""
    sums = np.zeros((groups, z.shape[1]))
    np.add.at(sums, group, z)
    return _means(design, stage, sums, np.bincount(group, minlength=groups).astype(np.float64))


def _means(design: SurveyDesign, stage: int, sums: Floats, counts: Floats) -> Floats:
    means = np.divide(sums, counts[:, np.newaxis], out=np.zeros_like(sums), where=counts[:, np.newaxis] > 0)
    if stage == 1:
        means[design.centred_on_all] = sums.sum(axis=0) / counts.sum()
    return means


def _rows_part(
    design: SurveyDesign,
    rows: Rows,
    engine: Engine,
    influence: Influence,
    by_stage: list[Floats],
    what: str,
) -> Floats:
    """Return the part that rows as the last stage bring: a second pass over their deviations.

    Rows in no block have ``s u = 0``, so what they add is known from their number alone.
    """
    stage = len(by_stage)
    factor, peers = stage_factors(design, stage)
    last = design.units.stages[-1]
    sums = np.zeros((len(factor), by_stage[-1].shape[1]))
    np.add.at(sums, peers, by_stage[-1])
    counts = np.bincount(peers, last.rows, len(factor)).astype(np.float64)
    centre = _means(design, stage, sums, counts)
    kernel = _DeviationsKernel(influence, peers, centre, np.sqrt(factor))
    seen = engine.run(what, rows.blocks, kernel)
    unseen = np.bincount(peers, last.rows - last.domain_rows, len(factor))
    return np.asarray(seen + (centre * (factor * unseen)[:, np.newaxis]).T @ centre)


@dataclass(frozen=True)
class _DeviationsKernel:
    influence: Influence
    peers: Integers
    centre: Floats
    root_factor: Floats

    def __call__(self, block: Block) -> Floats:
        group = self.peers[block.unit]
        deviation = block.weight[:, np.newaxis] * self.influence(block) - self.centre[group]
        deviation *= self.root_factor[group][:, np.newaxis]
        return np.asarray(deviation.T @ deviation)


@dataclass(frozen=True)
class _Totals:
    """Totals of the units from ``first`` on, so that a part is no larger than what its blocks touched."""

    first: int
    values: Floats
    count: int

    def merged(self, other: _Totals) -> _Totals:
        first = min(self.first, other.first)
        last = max(self.first + len(self.values), other.first + len(other.values))
        values = np.zeros((last - first, self.values.shape[1]))
        for part in (self, other):
            values[part.first - first : part.first - first + len(part.values)] += part.values
        return _Totals(first, values, self.count)

    def dense(self) -> Floats:
        values = np.zeros((self.count, self.values.shape[1]))
        values[self.first : self.first + len(self.values)] = self.values
        return values


# Runs of rows of one unit this long on average are summed by a matrix product each; shorter ones together.
LONG_RUN = 32


@dataclass(frozen=True)
class _TotalsKernel:
    influence: Influence
    unit: Integers
    count: int

    def __call__(self, block: Block) -> _Totals:
        unit = self.unit[block.unit]
        products = [(f * block.weight[:, np.newaxis], z) for f, z in self.influence.products(block)]
        first, last = int(unit.min()), int(unit.max())
        cuts = np.flatnonzero(np.diff(unit)) + 1
        if (len(cuts) + 1) * LONG_RUN > len(unit):
            return _Totals(first, _scattered(products, unit - first, last - first + 1), self.count)
        values = np.zeros((last - first + 1, len(self.influence.matrix)))
        edges = [0, *cuts.tolist(), len(unit)]
        for a, b in pairwise(edges):
            values[unit[a] - first] += np.concatenate([(f[a:b].T @ z[a:b]).ravel() for f, z in products])
        return _Totals(first, values, self.count)


def _scattered(products: list[Product], unit: Integers, size: int) -> Floats:
    """Return the sums of products by unit, (size, m), for units in any order."""
    places = (unit, np.arange(len(unit)))
    parts = [
        np.asarray(sparse.csr_array((f[:, j], places), shape=(size, len(unit))) @ z)
        for f, z in products
        for j in range(f.shape[1])
    ]
    return np.concatenate(parts, axis=1)
