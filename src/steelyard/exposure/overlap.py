"""How far the groups share the range of the propensity, and on whom the combined weights rest."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.exposure.balancing import Balancing

Floats = NDArray[np.float64]

BINS = 20
# Propensities below the first two or above the last two are counted as extreme (common practice).
EXTREMES = (0.01, 0.05, 0.95, 0.99)


@dataclass(frozen=True)
class GroupOverlap:
    """Row 0 is the exposed, row 1 the reference, of the full sample; rows without sampling weight do not count.

    Attributes
    ----------
    rows : (2,)
    bins_rows, bins_before, bins_after : (2, BINS)
        Rows, sampling weight and combined weight by propensity, bins of equal width from 0 to 1.
    extremes : (2, 4)
        Rows below 0.01 and 0.05, above 0.95 and 0.99.
    before, before_squared, after, after_squared : (2,)
        Sums of the weights and of their squares.
    propensity_sum : (2,)
        Of ``s e``.
    low, high : (2,)
        Range of the propensity.
    largest : (2,)
        Largest combined weight of a row.
    psus : (2, U) combined weight by PSU; (2, 0) where rows are PSUs
    capped, outside : (2,) rows whose weight was capped, and rows outside the propensity range
    """

    rows: Floats
    bins_rows: Floats
    bins_before: Floats
    bins_after: Floats
    extremes: Floats
    before: Floats
    before_squared: Floats
    after: Floats
    after_squared: Floats
    propensity_sum: Floats
    low: Floats
    high: Floats
    largest: Floats
    psus: Floats
    capped: Floats
    outside: Floats

    def merged(self, other: GroupOverlap) -> GroupOverlap:
        """Return both parts together."""
        parts = {
            name: getattr(self, name) + getattr(other, name)
            for name in self.__dataclass_fields__
            if name not in {"low", "high", "largest"}
        }
        return GroupOverlap(
            **parts,
            low=np.minimum(self.low, other.low),
            high=np.maximum(self.high, other.high),
            largest=np.maximum(self.largest, other.largest),
        )


def group_overlap(
    balancing: Balancing, psu_of_unit: NDArray[np.int64] | None, engine: Engine, blocks: Sequence[Block]
) -> GroupOverlap:
    """Return the overlap of the groups; ``psu_of_unit`` maps block units to PSUs, None where rows are PSUs."""
    return engine.run("overlap", blocks, _OverlapKernel(balancing, psu_of_unit), GroupOverlap.merged)


def rows_without_counterpart(
    balancing: Balancing, overlap: GroupOverlap, engine: Engine, blocks: Sequence[Block]
) -> Floats:
    """Return how many rows of each group lie outside the other group's range of the propensity, (2,)."""
    kernel = _OutsideKernel(balancing, overlap.low, overlap.high)
    return engine.run("overlap: rows without counterpart", blocks, kernel)


@dataclass(frozen=True)
class _OutsideKernel:
    balancing: Balancing
    low: Floats
    high: Floats

    def __call__(self, block: Block) -> Floats:
        e = self.balancing.rows(block).propensity[:, 0]
        counts = np.zeros(2)
        for group, members in enumerate(_groups(block)):
            other = 1 - group
            counts[group] = np.sum((e[members] < self.low[other]) | (e[members] > self.high[other]))
        return counts


@dataclass(frozen=True)
class _OverlapKernel:
    balancing: Balancing
    psu_of_unit: NDArray[np.int64] | None

    def __call__(self, block: Block) -> GroupOverlap:
        rows = self.balancing.rows(block)
        e, w, s = rows.propensity[:, 0], rows.combined[:, 0], block.weight
        bins = np.minimum((e * BINS).astype(np.int64), BINS - 1)
        psu = None if self.psu_of_unit is None else self.psu_of_unit[block.unit]
        count = 0 if self.psu_of_unit is None else int(self.psu_of_unit.max()) + 1
        parts: list[dict[str, Any]] = []
        for members in _groups(block):
            e_g, w_g, s_g, b_g = e[members], w[members], s[members], bins[members]
            parts.append(
                {
                    "rows": np.float64(len(e_g)),
                    "bins_rows": np.bincount(b_g, minlength=BINS).astype(float),
                    "bins_before": np.bincount(b_g, s_g, minlength=BINS),
                    "bins_after": np.bincount(b_g, w_g, minlength=BINS),
                    "extremes": np.array(
                        [np.sum(e_g < t) if t < 0.5 else np.sum(e_g > t) for t in EXTREMES], dtype=float
                    ),
                    "before": s_g.sum(),
                    "before_squared": s_g @ s_g,
                    "after": w_g.sum(),
                    "after_squared": w_g @ w_g,
                    "propensity_sum": s_g @ e_g,
                    "low": e_g.min(initial=np.inf),
                    "high": e_g.max(initial=-np.inf),
                    "largest": w_g.max(initial=0),
                    "psus": np.zeros(0) if psu is None else np.bincount(psu[members], w_g, minlength=count),
                    "capped": np.float64(rows.capped[members, 0].sum()),
                    "outside": np.float64(rows.outside[members, 0].sum()),
                }
            )
        return GroupOverlap(**{name: np.stack([part[name] for part in parts]) for name in parts[0]})


def _groups(block: Block) -> tuple[NDArray[np.bool_], NDArray[np.bool_]]:
    counted = block.weight > 0
    return counted & (block.exposure == 1), counted & (block.exposure == 0)
