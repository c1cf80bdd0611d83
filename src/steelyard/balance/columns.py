"""The columns of a balance table: design rows, and products of two of them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block, Term

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class TermColumns:
    """From a block to the values of the balance table's terms, (n, q)."""

    terms: tuple[Term, ...]

    def __call__(self, block: Block) -> Floats:
        """Return the block's values; a view where they lie side by side."""
        first, last = self.terms[0].index, self.terms[-1].index
        plain = all(term.times is None for term in self.terms)
        if plain and [term.index for term in self.terms] == list(range(first, last + 1)):
            return block.columns[:, first : last + 1]
        values = block.columns[:, [term.index for term in self.terms]]
        for j, term in enumerate(self.terms):
            if term.times is not None:
                values[:, j] *= block.columns[:, term.times]
        return values

    def only(self, places: tuple[int, ...]) -> TermColumns:
        """Return the columns of some of the terms."""
        return TermColumns(tuple(self.terms[place] for place in places))

    @property
    def labels(self) -> tuple[str, ...]:
        """The terms' labels."""
        return tuple(term.label for term in self.terms)
