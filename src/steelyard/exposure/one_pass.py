"""Several sums over balanced rows in one pass: propensities and weights are worked out once for all of them."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from steelyard.data.blocks import Block
from steelyard.data.passes import Engine, add
from steelyard.exposure.balancing import BalancedRows, Balancing

# From the balanced rows of a block to a part that adds up. Picklable.
RowsKernel = Callable[[BalancedRows], Any]
# With many columns of weights, so many rows at a time keep the work in cache.
PIECE_ROWS = 4096
FEW_COLUMNS = 4


def sums_in_one_pass(
    what: str,
    kernels: Mapping[str, RowsKernel],
    balancing: Balancing,
    engine: Engine,
    blocks: Sequence[Block],
) -> dict[str, Any]:
    """Return the sum of each kernel over all blocks, by its name."""
    parts: dict[str, Any] = engine.run(what, blocks, _SeveralKernel(balancing, dict(kernels)))
    return parts


@dataclass(frozen=True)
class _SeveralKernel:
    balancing: Balancing
    kernels: dict[str, RowsKernel]

    def __call__(self, block: Block) -> dict[str, Any]:
        total: dict[str, Any] | None = None
        for piece in self._pieces(block):
            # A column of weights that has no propensity is NaN, and so is what it makes.
            with np.errstate(invalid="ignore", over="ignore"):
                balanced = self.balancing.rows(piece)
                part = {name: kernel(balanced) for name, kernel in self.kernels.items()}
            total = part if total is None else add(total, part)
        assert total is not None
        return total

    def _pieces(self, block: Block) -> Iterator[Block]:
        """Give the block whole, or, for many columns, short pieces of one group: no array by columns is indexed."""
        if self.balancing.fit.scaled.shape[1] <= FEW_COLUMNS:
            yield block
            return
        for piece in block.pieces(PIECE_ROWS):
            is_exposed = piece.exposure == 1
            for members in (np.flatnonzero(is_exposed), np.flatnonzero(~is_exposed)):
                if len(members):
                    yield piece.some(members)
