"""What a block holds, and what the rows of a study are: blocks plus the names of their columns.

A block holds only rows of the domain that are complete, so a small domain costs little. Rows
outside it still count as members of their strata and PSUs: ``Units`` remembers those of all rows.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from steelyard.data.units import Units

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Block:
    """A contiguous run of the extract, reduced to its complete domain rows and ready to compute on.

    Attributes
    ----------
    position : (n,) int64
        Row numbers in the extract, from 0, increasing.
    columns : (n, C) float64, C-contiguous
        The design rows: every column that any model or balance check uses, once each.
    exposure : (n,) float64
        1 for exposed, 0 for reference.
    weight : (n,) float64
        The sampling weight ``s`` (>= 0).
    unit : (n,) int64
        Index of the row's unit in the last stage of ``Units.stages``.
    replicates : (n, R) float64 or float32, as the extract holds them, or None
        Replicate weights that came with the extract.
    """

    position: Integers
    columns: Floats
    exposure: Floats
    weight: Floats
    unit: Integers
    replicates: Floats | NDArray[np.float32] | None = None

    def __len__(self) -> int:
        return len(self.position)

    def pieces(self, rows: int) -> Iterator[Block]:
        """Give the block in pieces of so many rows, as views: many columns of weights need short ones."""
        for first in range(0, len(self), rows):
            yield self.some(slice(first, first + rows))

    def some(self, rows: slice | Integers) -> Block:
        """Return some of the block's rows: views for a slice, copies for an array of places."""
        return Block(
            self.position[rows],
            self.columns[rows],
            self.exposure[rows],
            self.weight[rows],
            self.unit[rows],
            None if self.replicates is None else self.replicates[rows],
        )


@dataclass(frozen=True)
class Model:
    """The columns of one formula's right-hand side, as indices into ``Block.columns``.

    ``names`` are patsy's column names ("Intercept", "C(region)[T.north]", ...); ``index`` is the
    same length. ``intercept`` is the place of the intercept within the model, or None.
    """

    formula: str
    names: tuple[str, ...]
    index: tuple[int, ...]
    intercept: int | None

    def of(self, block: Block) -> Floats:
        """Return the model's (n, p) design matrix in a block; a view where its columns lie side by side."""
        first, last = self.index[0], self.index[-1]
        if self.index == tuple(range(first, last + 1)):
            return block.columns[:, first : last + 1]
        return block.columns[:, list(self.index)]


@dataclass(frozen=True)
class Term:
    """One row of a balance table: a column of the design rows, or the product of two.

    ``level`` is the category or the spline's basis number, empty for a plain number. ``kind`` is
    "number" or "level" (an indicator of a category).
    """

    term: str
    level: str
    kind: str
    index: int
    times: int | None = None

    @property
    def label(self) -> str:
        """The term and its level as one text."""
        return f"{self.term}: {self.level}" if self.level else self.term


@dataclass(frozen=True)
class Rows:
    """The design rows of a study: blocks, the names of their columns, and who was left out and why.

    Attributes
    ----------
    blocks : sequence of Block
        In the order of the extract.
    names : C names
        Of ``Block.columns``.
    exposure_model : Model
    outcome_models : one Model or None for each outcome of the plan
        None where the outcome has no covariates.
    outcomes : for each outcome of the plan, its index in ``Block.columns``
    terms : the rows of the balance table
    levels : the labels (exposed, reference) as the extract spells them
    units : Units
        The sampling units of every row of the extract.
    unit_of : callable
        From a run of the extract that holds the design's columns to the unit of each row in the last stage, (n,).
    replicates : columns of the extract that ``Block.replicates`` holds
    carried : mapping
        Columns of multilevel models, weights of levels and slopes -> place in ``Block.columns``.
    total : int
        Rows in the extract.
    exclusions : mapping
        Reason -> number of rows left out of the domain, in the order in which reasons are applied;
        each row is counted once, under the first reason that holds for it. The counts and the
        number of block rows add up to ``total``.
    """

    blocks: Sequence[Block]
    names: tuple[str, ...]
    exposure_model: Model
    outcome_models: tuple[Model | None, ...]
    outcomes: tuple[int, ...]
    terms: tuple[Term, ...]
    levels: tuple[str, str]
    units: Units
    total: int
    exclusions: Mapping[str, int]
    warnings: tuple[str, ...] = ()
    unit_of: Callable[[pa.Table], Integers] | None = None
    replicates: tuple[str, ...] = ()
    carried: Mapping[str, int] = field(default_factory=dict)

    def __len__(self) -> int:
        return sum(len(block) for block in self.blocks)
