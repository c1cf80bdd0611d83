"""Columns of weights: what an estimator is solved under, one column for the sample and one a replicate."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block

Floats = NDArray[np.float64]


class WeightColumns(Protocol):
    """A picklable callable from a block to its (n, K) weights; column 0 is the full sample."""

    def __call__(self, block: Block) -> Floats:
        """Return the block's (n, K) weights."""
        ...


@dataclass(frozen=True)
class SamplingWeights:
    """The sampling weights as the only column; (n, 1)."""

    def __call__(self, block: Block) -> Floats:
        """Return the block's sampling weights as one column."""
        return block.weight[:, np.newaxis]


@dataclass(frozen=True)
class UnweightedFit:
    """For a fit that leaves the sampling weights out: each column over the full sample's weights.

    A row of weight zero stays out; a replicate keeps the multiplier it gives to each row.
    """

    columns: WeightColumns

    def __call__(self, block: Block) -> Floats:
        """Return the block's (n, K) multipliers."""
        columns, weight = self.columns(block), block.weight[:, np.newaxis]
        return np.divide(columns, weight, out=np.zeros_like(columns), where=weight > 0)


@dataclass(frozen=True)
class FullSample:
    """Column 0 of some weight columns, as (n,)."""

    columns: WeightColumns

    def __call__(self, block: Block) -> Floats:
        """Return the full sample's weights in the block."""
        return np.ascontiguousarray(self.columns(block)[:, 0])
