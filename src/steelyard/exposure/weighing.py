"""Under which weights something is computed: the sampling weights ("before") or the combined ("after")."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.estimate.estimates import Estimates
from steelyard.exposure.balancing import BalancedRows, Balancing

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Weighing:
    """The sampling weights alone, or the combined ones.

    ``known`` treats the combined weights as if the propensity had been known: what is computed does not
    change, its influence loses the term through the propensity.
    """

    combined: bool
    known: bool = False

    def weights(self, rows: BalancedRows) -> Floats:
        """Return the weights, (n, K)."""
        return rows.combined if self.combined else rows.sampling

    def relative(self, rows: BalancedRows) -> Floats:
        """Return the full sample's weights over the sampling weights, (n,)."""
        return rows.balancing[:, 0] if self.combined else np.ones(len(rows.block))

    def estimated(self) -> bool:
        """Whether the weights carry an estimated propensity into the influence."""
        return self.combined and not self.known


BEFORE = Weighing(combined=False)
AFTER = Weighing(combined=True)


@dataclass(frozen=True)
class StackedInfluence:
    """The influences of several estimators side by side, on the same balanced rows; block -> (n, sum k)."""

    balancing: Balancing
    parts: tuple[Callable[[BalancedRows], Floats], ...]

    def __call__(self, block: Block) -> Floats:
        """Return the block's influences."""
        rows = self.balancing.rows(block)
        return np.column_stack([part(rows) for part in self.parts])


def stacked(balancing: Balancing, estimates: Sequence[Estimates]) -> StackedInfluence:
    """Return one influence for all ``estimates``, so that one pass gives their joint covariance."""
    return StackedInfluence(balancing, tuple(e.influence for e in estimates))
