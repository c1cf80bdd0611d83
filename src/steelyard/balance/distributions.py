"""The weighted Kolmogorov-Smirnov distance of each term between the groups, before and after.

The distance does not add up over blocks: it needs a column in one piece. Columns are gathered a few
at a time, so that no more than those are held beside the design rows.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.balance.columns import TermColumns
from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.exposure.balancing import Balancing

Floats = NDArray[np.float64]

# A cache line of a row holds eight columns: gathering eight reads the rows no more often than one.
COLUMNS_GATHERED = 8
BINS = 65_536
RUN = 65_536
# Shares of weight below this are rounding: a bin that could beat an edge by less is left alone.
ROUNDING = 1e-13


def distances(
    columns: TermColumns, balancing: Balancing, engine: Engine, blocks: Sequence[Block]
) -> tuple[Floats, Floats]:
    """Return the distance of every term before and after, (q,) each.

    Notes
    -----
    ``max over t of |F1(t) - F0(t)|`` with ``F`` the weighted distribution functions of the groups.
    """
    distance = _distance(*_gathered(engine.run("distributions: weights", blocks, _Weights(balancing))))
    found: list[tuple[float, ...]] = []
    places = tuple(range(len(columns.terms)))
    for first in range(0, len(places), COLUMNS_GATHERED):
        some = columns.only(places[first : first + COLUMNS_GATHERED])
        found += engine.map(distance, _gathered(engine.run("distributions", blocks, _Values(some))))
    result = np.array(found)
    return result[:, 0], result[:, 1]


class Distance:
    """The distance of a column under several weights, exact without sorting it.

    The groups' weights are added up in many bins of the column's range. The gap between the distribution
    functions is then known at every edge, and inside a bin it can rise or fall by no more than the weight
    the bin holds. Only bins that could beat the largest gap at an edge, a few, are sorted.
    """

    def __init__(self, exposure: Floats, weights: tuple[Floats, ...], bins: int = BINS) -> None:
        self._bins = bins
        # Exposed rows fill the first half of the bins, reference rows the second: one count for both.
        self._half = np.where(exposure == 1, 0, bins).astype(np.int32)
        self._shares = tuple(
            weight / np.where(exposure == 1, weight[exposure == 1].sum(), weight[exposure == 0].sum())
            for weight in weights
        )

    def __call__(self, values: Floats) -> tuple[float, ...]:
        """Return the distance under each of the weights."""
        low, width = values.min(), np.ptp(values)
        if not width > 0:
            return (0.0,) * len(self._shares)
        place = self._places(values, low, self._bins / width)
        one_value_a_bin = self._discrete(values, place)
        return tuple(self._largest(values, place, share, one_value_a_bin) for share in self._shares)

    def _places(self, values: Floats, low: float, scale: float) -> NDArray[np.int32]:
        """Return the bin of each row, in its group's half; (n,). Equal values share a bin, larger ones follow."""
        place = np.empty(len(values), dtype=np.int32)
        for run in _runs(len(values)):
            scaled = values[run] - low
            scaled *= scale
            place[run] = np.minimum(scaled, self._bins - 1, out=scaled)
            place[run] += self._half[run]
        return place

    def _discrete(self, values: Floats, place: NDArray[np.int32]) -> bool:
        """Whether every bin holds one value, so that the gap changes at edges alone."""
        value = np.zeros(self._bins)
        for run in _runs(len(values)):
            value[place[run] % self._bins] = values[run]
        return all(np.array_equal(value[place[run] % self._bins], values[run]) for run in _runs(len(values)))

    def _largest(
        self, values: Floats, place: NDArray[np.int32], share: Floats, one_value_a_bin: bool
    ) -> float:
        binned = np.zeros(2 * self._bins)
        for run in _runs(len(values)):
            binned += np.bincount(place[run], share[run], 2 * self._bins)
        exposed, reference = binned.reshape(2, -1)
        rise = exposed - reference
        right = np.cumsum(rise)
        left = right - rise
        best = float(np.abs(right).max())
        if one_value_a_bin:
            return best
        open_bins = np.maximum(np.abs(left + exposed), np.abs(left - reference)) > best + ROUNDING
        either = np.concatenate([open_bins, open_bins])
        rows = np.concatenate([run.start + np.flatnonzero(either[place[run]]) for run in _runs(len(values))])
        if not len(rows):
            return best
        rows = rows[np.argsort(values[rows])]
        inside, in_bin = values[rows], place[rows] % self._bins
        signed = np.where(place[rows] < self._bins, share[rows], -share[rows])
        gap = np.cumsum(signed)
        # Within its bin a row's gap starts from the one at the bin's left edge.
        starts = np.flatnonzero(np.append(True, in_bin[1:] != in_bin[:-1]))
        offset = left[in_bin[starts]] - (gap[starts] - signed[starts])
        gap += np.repeat(offset, np.diff(np.append(starts, len(gap))))
        last_of_ties = np.append(inside[1:] != inside[:-1], True)
        return max(best, float(np.abs(gap[last_of_ties]).max()))


def _runs(count: int) -> list[slice]:
    """Return runs of rows short enough that what is computed on them stays out of fresh memory pages."""
    return [slice(first, min(first + RUN, count)) for first in range(0, count, RUN)]


def _distance(before: Floats, after: Floats, exposure: Floats) -> Distance:
    return Distance(exposure, (before, after))


def _gathered(parts: list[tuple[Floats, ...]]) -> list[Floats]:
    return [np.concatenate(pieces) for pieces in zip(*parts, strict=True)]


@dataclass(frozen=True)
class _Weights:
    balancing: Balancing

    def __call__(self, block: Block) -> list[tuple[Floats, ...]]:
        return [(block.weight, self.balancing(block)[:, 0], block.exposure)]


@dataclass(frozen=True)
class _Values:
    columns: TermColumns

    def __call__(self, block: Block) -> list[tuple[Floats, ...]]:
        return [tuple(np.ascontiguousarray(self.columns(block).T))]
