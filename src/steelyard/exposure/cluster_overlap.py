"""In how many clusters the two groups meet, and how much of the combined weight lies there."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.exposure.balancing import Balancing

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

KINDS = ("both groups", "exposed only", "reference only")


def cluster_overlap(
    balancing: Balancing, unit: Integers, engine: Engine, blocks: Sequence[Block]
) -> pd.DataFrame:
    """Return, for clusters with both groups and with one alone: clusters, rows, shares of the combined weight.

    ``unit`` gives the cluster of every unit of the design's last stage. Rows without sampling weight do not count.
    """
    size = int(unit.max()) + 1
    rows, weight = engine.run("clusters: overlap", blocks, _ByClusterKernel(balancing.only([0]), unit, size))
    has = rows > 0
    kinds = (has[0] & has[1], has[0] & ~has[1], has[1] & ~has[0])
    return pd.DataFrame(
        {
            "clusters_with": KINDS,
            "clusters": [int(kind.sum()) for kind in kinds],
            "exposed_rows": [int(rows[0, kind].sum()) for kind in kinds],
            "reference_rows": [int(rows[1, kind].sum()) for kind in kinds],
            "exposed_share": [weight[0, kind].sum() / weight[0].sum() for kind in kinds],
            "reference_share": [weight[1, kind].sum() / weight[1].sum() for kind in kinds],
        }
    )


@dataclass(frozen=True)
class _ByClusterKernel:
    balancing: Balancing
    unit: Integers
    size: int

    def __call__(self, block: Block) -> tuple[Floats, Floats]:
        cluster, combined = self.unit[block.unit], self.balancing(block)[:, 0]
        counted = block.weight > 0
        groups = (counted & (block.exposure == 1), counted & (block.exposure == 0))
        rows = [np.bincount(cluster[g], minlength=self.size).astype(np.float64) for g in groups]
        weight = [np.bincount(cluster[g], combined[g], self.size) for g in groups]
        return np.stack(rows), np.stack(weight)
