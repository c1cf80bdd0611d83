"""First and second moments of every term in each group, before and after, and the spread that scales them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.balance.columns import TermColumns
from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.estimate.moments import Moments, moments_of
from steelyard.exposure.balancing import Balancing
from steelyard.exposure.estimands import RULES

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class TermMoments:
    """Moments of the terms by group under the sampling weights and under the combined weights."""

    before: Moments
    after: Moments

    def merged(self, other: TermMoments) -> TermMoments:
        """Return the moments of both parts together."""
        return TermMoments(self.before.merged(other.before), self.after.merged(other.after))

    def spread(self, estimand: str) -> Floats:
        """Return the standard deviation that scales a difference; (q,).

        Weighting does not move it: it comes from the sampling weights, of both groups for the ATE
        and the ATO, of the group whose population is the target for the ATT and the ATC.
        """
        variance = self.before.variance
        uses = np.array(RULES[estimand].spread_of, dtype=float)
        return np.asarray(np.sqrt(uses @ variance / uses.sum()))


def term_moments(
    columns: TermColumns, balancing: Balancing, engine: Engine, blocks: Sequence[Block]
) -> TermMoments:
    """Return the moments of every term, of the full sample."""
    return engine.run("balance: moments", blocks, _TermMomentsKernel(columns, balancing), TermMoments.merged)


@dataclass(frozen=True)
class _TermMomentsKernel:
    columns: TermColumns
    balancing: Balancing

    def __call__(self, block: Block) -> TermMoments:
        weights = np.column_stack([block.weight, self.balancing(block)[:, 0]])
        return TermMoments(*moments_of(self.columns(block), weights, block.exposure))
