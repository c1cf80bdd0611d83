"""Totals of products of rows by unit: what a variance and a replicate start from.

Knows nothing of designs or estimates; a unit is a number.
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
# Factors (n, J) and columns (n, q): J q products, the factor's columns outermost.
Product = tuple[Floats, Floats]

# Runs of rows of one unit this long on average are summed by a matrix product each; shorter ones together.
LONG_RUN = 32


@dataclass(frozen=True)
class UnitTotals:
    """Totals of products in some units, in their order: a part is no larger than what its blocks touched.

    ``unit`` (u,) is increasing; ``values`` is (u, m).
    """

    unit: Integers
    values: Floats

    def merged(self, other: UnitTotals) -> UnitTotals:
        """Return the totals of both; runs of an extract in the order of its units need no search."""
        if self.unit[-1] <= other.unit[0]:
            shared = int(self.unit[-1] == other.unit[0])
            values = np.concatenate([self.values, other.values[shared:]])
            if shared:
                values[len(self.unit) - 1] += other.values[0]
            return UnitTotals(np.concatenate([self.unit, other.unit[shared:]]), values)
        if np.array_equal(self.unit, other.unit):
            return UnitTotals(self.unit, self.values + other.values)
        unit = np.union1d(self.unit, other.unit)
        values = np.zeros((len(unit), self.values.shape[1]))
        for part in (self, other):
            values[np.searchsorted(unit, part.unit)] += part.values
        return UnitTotals(unit, values)

    def above(self, parent: Integers) -> UnitTotals:
        """Return the totals of the units above, given the parent of every unit of this stage."""
        unit, place = np.unique(parent[self.unit], return_inverse=True)
        return UnitTotals(unit, sums_by_index(place, self.values, len(unit)))

    def combined(self, matrix: Floats, count: int) -> Floats:
        """Return the totals of estimates' influences in all ``count`` units of the stage, (count, k)."""
        totals = np.zeros((count, matrix.shape[1]))
        totals[self.unit] = self.values @ matrix
        return totals


def totals_by_unit(products: list[Product], unit: Integers) -> UnitTotals:
    """Return the totals of the products (m of them in all) by ``unit`` (n,)."""
    edges = _edges(unit)
    if (len(edges) - 1) * LONG_RUN > len(unit):
        return _in_any_order(products, unit)
    found, run_place = np.unique(unit[edges[:-1]], return_inverse=True)
    values = np.zeros((len(found), sum(f.shape[1] * z.shape[1] for f, z in products)))
    for place, (a, b) in zip(run_place.tolist(), pairwise(edges.tolist()), strict=True):
        values[place] += np.concatenate([(f[a:b].T @ z[a:b]).ravel() for f, z in products])
    return UnitTotals(found, values)


def sums_by_index(index: Integers, values: Floats, size: int) -> Floats:
    """Return the sums of the rows of ``values`` that share an index, (size, m)."""
    entries = (np.ones(len(index)), (index, np.arange(len(index))))
    return np.asarray(sparse.csr_array(entries, shape=(size, len(index))) @ values)


def _edges(unit: Integers) -> Integers:
    """Return where runs of equal units begin, and the end."""
    return np.concatenate([[0], np.flatnonzero(np.diff(unit)) + 1, [len(unit)]])


def _in_any_order(products: list[Product], unit: Integers) -> UnitTotals:
    """Return the totals of products by unit, for rows in any order."""
    order = np.argsort(unit, kind="stable")
    starts = _edges(unit[order])
    found = unit[order[starts[:-1]]]
    parts = [
        np.asarray(sparse.csr_array((f[order, j], order, starts), shape=(len(found), len(unit))) @ z)
        for f, z in products
        for j in range(f.shape[1])
    ]
    return UnitTotals(found, np.concatenate(parts, axis=1))
