"""Weighted means, variances and ranges of columns, for the exposed and the reference apart.

Parts merge by the updating formulas of Chan, Golub & LeVeque (1983), which lose no digits to a
large mean.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block

Floats = NDArray[np.float64]

EXPOSED, REFERENCE = 0, 1


@dataclass(frozen=True)
class Moments:
    """Moments of q columns in two groups; row 0 is the exposed, row 1 the reference.

    Attributes
    ----------
    rows : (2,) rows with positive weight
    weight, weight_squared : (2,) sums of the weights and of their squares
    mean, sum_squares : (2, q) weighted mean, and weighted sum of squared deviations from it
    low, high : (2, q) over rows with positive weight
    present : (2, q) rows with positive weight where the column is not zero
    """

    rows: Floats
    weight: Floats
    weight_squared: Floats
    mean: Floats
    sum_squares: Floats
    low: Floats
    high: Floats
    present: Floats

    @property
    def variance(self) -> Floats:
        """The weighted variance in each group, divisor the sum of the weights; (2, q)."""
        return np.divide(
            self.sum_squares,
            self.weight[:, None],
            out=np.full_like(self.sum_squares, np.nan),
            where=self.weight[:, None] > 0,
        )

    @property
    def effective_size(self) -> Floats:
        """``(sum w)^2 / sum w^2`` in each group (Kish 1965); (2,)."""
        return np.divide(self.weight**2, self.weight_squared, out=np.zeros(2), where=self.weight_squared > 0)

    def pooled(self) -> tuple[Floats, Floats]:
        """Return the mean and the standard deviation of both groups together; (q,) each."""
        total = self.weight.sum()
        mean = self.weight @ self.mean / total
        between = self.weight @ (self.mean - mean) ** 2
        return mean, np.sqrt((self.sum_squares.sum(axis=0) + between) / total)

    def merged(self, other: Moments) -> Moments:
        """Return the moments of this part and ``other`` together."""
        weight = self.weight + other.weight
        share = np.divide(other.weight, weight, out=np.zeros(2), where=weight > 0)[:, None]
        gap = other.mean - self.mean
        return Moments(
            rows=self.rows + other.rows,
            weight=weight,
            weight_squared=self.weight_squared + other.weight_squared,
            mean=self.mean + share * gap,
            sum_squares=self.sum_squares + other.sum_squares + gap**2 * share * self.weight[:, None],
            low=np.minimum(self.low, other.low),
            high=np.maximum(self.high, other.high),
            present=self.present + other.present,
        )


def moments_of(values: Floats, weights: Floats, exposure: Floats) -> tuple[Moments, ...]:
    """Return the moments of (n, q) ``values`` by ``exposure`` (n,), under each column of (n, J) ``weights``.

    Ranges and counts are those of the rows with weight in column 0.
    """
    width, several = values.shape[1], weights.shape[1]
    low, high = np.full((2, width), np.inf), np.full((2, width), -np.inf)
    present, rows = np.zeros((2, width)), np.zeros(2)
    mean, sum_squares = np.zeros((several, 2, width)), np.zeros((several, 2, width))
    total, squared = np.zeros((several, 2)), np.zeros((several, 2))
    for g, group in enumerate((exposure == 1, exposure == 0)):
        members = np.flatnonzero(group & (weights[:, 0] > 0))
        if not len(members):
            continue
        z, w = values[members], weights[members]
        rows[g] = len(members)
        low[g], high[g] = z.min(axis=0), z.max(axis=0)
        present[g] = np.count_nonzero(z, axis=0)
        total[:, g], squared[:, g] = w.sum(axis=0), np.einsum("ij,ij->j", w, w)
        # Deviations from one centre serve every column of weights: the mean under the first is near them all.
        centre = w[:, 0] @ z / total[0, g]
        z -= centre
        first = np.divide((w.T @ z).T, total[:, g], out=np.zeros((width, several)), where=total[:, g] > 0).T
        z *= z
        mean[:, g] = centre + first
        sum_squares[:, g] = np.maximum(w.T @ z - total[:, g, np.newaxis] * first**2, 0)
    return tuple(
        Moments(rows, total[j], squared[j], mean[j], sum_squares[j], low, high, present)
        for j in range(several)
    )


@dataclass(frozen=True)
class MomentsKernel:
    """From a block to the moments of some columns under some weights."""

    values: Callable[[Block], Floats]
    weight: Callable[[Block], Floats]

    def __call__(self, block: Block) -> Moments:
        """Return the block's moments."""
        return moments_of(self.values(block), self.weight(block)[:, np.newaxis], block.exposure)[0]


def merge_moments(left: Moments, right: Moments) -> Moments:
    """Merge two parts of a pass."""
    return left.merged(right)
