"""Columns of weights: what an estimator is solved under, one column for the sample and one a replicate."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol, cast

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


class WeightColumns(Protocol):
    """A picklable callable from a block to its (n, K) weights; column 0 is the full sample."""

    @property
    def count(self) -> int:
        """How many columns there are, K."""
        ...

    def __call__(self, block: Block, out: Floats | None = None) -> Floats:
        """Return the block's (n, K) weights; ``out`` (n, K) is room for them that may be used."""
        ...

    def only(self, columns: Sequence[int] | Integers) -> WeightColumns:
        """Return some of the columns, in the order asked for."""
        ...


class UnitWeights(Protocol):
    """Weight columns that multiply a row's own weight by a multiplier of its unit.

    What adds up over rows can then be summed by unit once and multiplied after, for any number of columns.
    """

    @property
    def units(self) -> int:
        """How many units there are."""
        ...

    def unit(self, block: Block) -> Integers:
        """Return the unit of each row, (n,)."""
        ...

    def multipliers(self, units: Integers) -> Floats:
        """Return the multipliers of some units under every column, (u, K)."""
        ...


@dataclass(frozen=True)
class SamplingWeights:
    """The sampling weights as the only column; (n, 1)."""

    count: int = 1

    def __call__(self, block: Block, out: Floats | None = None) -> Floats:
        """Return the block's sampling weights as one column."""
        return block.weight[:, np.newaxis]

    def only(self, columns: Sequence[int] | Integers) -> SamplingWeights:
        """Return the one column there is."""
        return self


@dataclass(frozen=True)
class UnweightedFit:
    """For a fit that leaves the sampling weights out: each column over the full sample's weights.

    A row of weight zero stays out; a replicate keeps the multiplier it gives to each row.
    """

    columns: WeightColumns

    @property
    def count(self) -> int:
        """How many columns there are."""
        return self.columns.count

    def __call__(self, block: Block, out: Floats | None = None) -> Floats:
        """Return the block's (n, K) multipliers."""
        columns, weight = self.columns(block, out), block.weight[:, np.newaxis]
        return np.divide(columns, weight, out=np.zeros_like(columns), where=weight > 0)

    def only(self, columns: Sequence[int] | Integers) -> UnweightedFit:
        """Return some of the columns."""
        return UnweightedFit(self.columns.only(columns))


@dataclass(frozen=True)
class ClusterShares:
    """For a fit on clusters: each row counts for its share of its cluster's weight, a column of the design rows.

    A replicate multiplies it as it multiplies the row's own weight.
    """

    columns: WeightColumns
    place: int

    @property
    def count(self) -> int:
        """How many columns there are."""
        return self.columns.count

    def __call__(self, block: Block, out: Floats | None = None) -> Floats:
        """Return the block's (n, K) shares."""
        multipliers = UnweightedFit(self.columns)(block, out)
        return np.multiply(multipliers, block.columns[:, self.place, np.newaxis], out=multipliers)

    def only(self, columns: Sequence[int] | Integers) -> ClusterShares:
        """Return some of the columns."""
        return ClusterShares(self.columns.only(columns), self.place)


def multiplied_by_unit(weights: WeightColumns) -> UnitWeights | None:
    """Return what multiplies the rows' own weights unit by unit; None where the columns are not of that kind."""
    columns = weights.columns if isinstance(weights, UnweightedFit | ClusterShares) else weights
    # Asked for every piece of a block: isinstance() of a protocol would cost more than the sums it saves.
    return cast(UnitWeights, columns) if hasattr(columns, "multipliers") else None


@dataclass(frozen=True)
class FullSample:
    """Column 0 of some weight columns, as (n,)."""

    columns: WeightColumns

    def __call__(self, block: Block) -> Floats:
        """Return the full sample's weights in the block."""
        return np.ascontiguousarray(self.columns.only([0])(block)[:, 0])
