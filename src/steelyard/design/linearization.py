"""Linearized variance: from the influence of each row to a design-based covariance.

One formula serves all designs (Binder 1983; Cochran 1977; Wolter 2007; Särndal, Swensson & Wretman 1992,
chapter 4):

    V = sum_h (1 - f_h) n_h / (n_h - 1) sum_j (z_hj - zbar_h)(z_hj - zbar_h)'
      + sum_h f_h sum_j (1 - f_hj) m_hj / (m_hj - 1) sum_k (z_hjk - zbar_hj)(z_hjk - zbar_hj)' + ...

with ``z`` the sum of ``s u`` in a unit; a stage after the first is added where populations are given.
Units without a row of the domain count as zeros. What multiplies the deviations, and whose mean they are
taken from, the design says (``SurveyDesign.factors``).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block, Rows
from steelyard.data.passes import Engine
from steelyard.data.unit_totals import Product, UnitTotals, sums_by_index, totals_by_unit
from steelyard.design.survey import SurveyDesign

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@runtime_checkable
class Influence(Protocol):
    """The influence of the rows of a block on k estimates, whole or in parts.

    ``products(block)`` gives pairs of factors (n, J) and columns (n, q); their J q products, the factors'
    columns outermost and the pairs one after another, times ``matrix`` (m, k) are the influence ``u``,
    which calling the object with the block gives outright. Rows can so be summed first and combined after.
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
    design: SurveyDesign,
    rows: Rows,
    engine: Engine,
    influence: Influence | Callable[[Block], Floats],
    what: str = "variance",
) -> Floats:
    """Return the covariance (k, k) of estimates whose rows have the given ``influence``.

    Parameters
    ----------
    influence : Influence, or a picklable function from a block to (n, k)
        Of ``u``, with ``estimate - truth`` near ``sum(s u)``.
    what : name of the pass, for progress

    Returns
    -------
    (k, k) float64
        Symmetric and, to rounding, positive semi-definite.

    Notes
    -----
    Where the last stage of the variance is a stage of clusters, one pass sums ``s u`` by unit and its totals,
    (units, products), are held. Where it is the rows themselves, a second pass adds the rows' deviations
    from the means of their units, so that no array of all rows is held.
    """
    of_rows = _as_influence(influence, rows)
    matrix = of_rows.matrix
    # Rows are not a stage of Units: their peers' totals are those of the units right above them.
    last = min(design.stages, len(design.units.stages) - 1)
    totals = _totals(design, rows, engine, of_rows, last, what)
    variance = np.zeros((matrix.shape[1],) * 2)
    if design.stages > last:
        variance += _rows_part(design, rows, engine, of_rows, totals, what)
    for stage in range(last, 0, -1):
        variance += _clusters_part(design, stage, totals, matrix)
        totals = totals.above(design.units.stages[stage].parent)
    return np.asarray((variance + variance.T) / 2)


def standard_errors(covariance: Floats) -> Floats:
    """Return the square roots of a covariance's diagonal, (k,)."""
    return np.asarray(np.sqrt(np.maximum(np.diag(covariance), 0.0)))


def unit_totals(
    design: SurveyDesign,
    rows: Rows,
    engine: Engine,
    influence: Influence | Callable[[Block], Floats],
    stage: int = 1,
    what: str = "totals",
) -> Floats:
    """Return the totals of ``s u`` in the units of ``design.units.stages[stage]`` (1: PSUs), (U, k)."""
    of_rows = _as_influence(influence, rows)
    return _totals(design, rows, engine, of_rows, stage, what).combined(
        of_rows.matrix, len(design.units.stages[stage])
    )


def _as_influence(influence: Influence | Callable[[Block], Floats], rows: Rows) -> Influence:
    if isinstance(influence, Influence):
        return influence
    return PlainInfluence(influence, influence(rows.blocks[0]).shape[1])


def _totals(
    design: SurveyDesign, rows: Rows, engine: Engine, influence: Influence, stage: int, what: str
) -> UnitTotals:
    kernel = _TotalsKernel(influence, design.units.ancestor(stage))
    return engine.run(what, rows.blocks, kernel, UnitTotals.merged)


# Units to a slice when deviations are formed: keeps them in cache, and no second array of all units.
SLICE = 4096


def _clusters_part(design: SurveyDesign, stage: int, totals: UnitTotals, matrix: Floats) -> Floats:
    """Return the part of the variance that one stage of clusters brings, from its units' totals."""
    factor = design.factors[stage - 1]
    peers = design.peers(stage)[design.units.stages[stage].parent]
    seen = peers[totals.unit]
    counts = np.bincount(peers, minlength=len(factor))
    centre = _centre(design, stage, sums_by_index(seen, totals.values, len(factor)) @ matrix, counts)
    root = np.sqrt(factor)
    part = _of_zeros(centre, factor, counts - np.bincount(seen, minlength=len(factor)))
    for first in range(0, len(seen), SLICE):
        group = seen[first : first + SLICE]
        deviation = totals.values[first : first + SLICE] @ matrix
        deviation -= centre[group]
        deviation *= root[group][:, np.newaxis]
        part += deviation.T @ deviation
    return part


def _rows_part(
    design: SurveyDesign, rows: Rows, engine: Engine, influence: Influence, totals: UnitTotals, what: str
) -> Floats:
    """Return the part that rows as the last stage bring: a second pass over their deviations.

    Rows in no block have ``s u = 0``, so what they add is known from their number alone.
    """
    stage, factor, last = design.stages, design.factors[-1], design.units.stages[-1]
    peers = design.peers(stage)
    sums = sums_by_index(peers[totals.unit], totals.values, len(factor)) @ influence.matrix
    centre = _centre(design, stage, sums, np.bincount(peers, last.rows, len(factor)))
    seen = engine.run(what, rows.blocks, _DeviationsKernel(influence, peers, centre, np.sqrt(factor)))
    unseen = np.bincount(peers, last.rows - last.domain_rows, len(factor))
    return np.asarray(seen + _of_zeros(centre, factor, unseen))


def _centre(design: SurveyDesign, stage: int, sums: Floats, counts: NDArray[np.number]) -> Floats:
    """Return the mean total of each group of peers; of all PSUs for a lone one that is centred on them."""
    means = np.asarray(sums / np.maximum(counts, 1)[:, np.newaxis])
    if stage == 1:
        means[design.centred_on_all] = sums.sum(axis=0) / counts.sum()
    return means


def _of_zeros(centre: Floats, factor: Floats, count: NDArray[np.number]) -> Floats:
    """Return what ``count`` units with a total of zero add in each group of peers."""
    deviation = centre * np.sqrt(factor * count)[:, np.newaxis]
    return np.asarray(deviation.T @ deviation)


@dataclass(frozen=True)
class _DeviationsKernel:
    """Cross-products of the rows' deviations from the means of their peers, (k, k)."""

    influence: Influence
    peers: Integers
    centre: Floats
    root_factor: Floats

    def __call__(self, block: Block) -> Floats:
        group = self.peers[block.unit]
        deviation = block.weight[:, np.newaxis] * self.influence(block)
        deviation -= self.centre[group]
        deviation *= self.root_factor[group][:, np.newaxis]
        return np.asarray(deviation.T @ deviation)


@dataclass(frozen=True)
class _TotalsKernel:
    """Totals of the products of ``s u`` by unit, (units of the block, m)."""

    influence: Influence
    unit: Integers

    def __call__(self, block: Block) -> UnitTotals:
        products = [(f * block.weight[:, np.newaxis], z) for f, z in self.influence.products(block)]
        return totals_by_unit(products, self.unit[block.unit])
