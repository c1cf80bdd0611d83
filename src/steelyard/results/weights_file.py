"""The weights of every row of the extract, in its order, as record batches; those of replicates too if asked."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from steelyard.data.blocks import Block, Rows
from steelyard.data.source import Extract
from steelyard.exposure.balancing import Balancing
from steelyard.replicates.scheme import MadeColumns, Scheme

Floats = NDArray[np.float64]

FIELDS = (
    pa.field("row", pa.int64(), nullable=False),
    pa.field("propensity", pa.float64()),
    pa.field("sampling_weight", pa.float64(), nullable=False),
    pa.field("balancing_weight", pa.float64()),
    pa.field("combined_weight", pa.float64(), nullable=False),
    pa.field("in_domain", pa.bool_(), nullable=False),
)
# Beyond so many numbers (800 MB before compression) replicate weights are written only if the plan asks for them.
MOST_NUMBERS = 100_000_000


@dataclass(frozen=True)
class ReplicateWeights:
    """The replicates whose weights are written.

    ``balancings`` hold some replicates each, in their order, column 0 being the full sample's.
    """

    scheme: Scheme
    balancings: Sequence[Balancing]

    @property
    def writes_sampling(self) -> bool:
        """Whether the sampling weights of the replicates are written: those supplied are in the extract already."""
        return self.scheme.origin == "made"

    @property
    def numbers_a_row(self) -> int:
        """How many numbers a row takes."""
        return self.scheme.count * (1 + self.writes_sampling)

    def fields(self) -> list[pa.Field]:
        """Return the columns of the file."""
        names = [f"combined_replicate_{r}" for r in range(1, self.scheme.count + 1)]
        if self.writes_sampling:
            names = [f"sampling_replicate_{r}" for r in range(1, self.scheme.count + 1)] + names
        return [pa.field(name, pa.float64()) for name in names]

    def combined(self, block: Block) -> Floats:
        """Return the block's combined weights in every replicate, (n, R); NaN where a replicate failed."""
        with np.errstate(invalid="ignore", over="ignore"):
            return np.concatenate([made.rows(block).combined[:, 1:] for made in self.balancings], axis=1)


def is_written(asked: bool | None, numbers: int) -> bool:
    """Whether replicate weights of so many numbers are written, given what the plan asks."""
    return numbers <= MOST_NUMBERS if asked is None else asked


@dataclass(frozen=True)
class WeightFile:
    """The rows of weights.parquet: ``schema``, and batches each time the object is called."""

    extract: Extract
    weight: str
    design_columns: tuple[str, ...]
    rows: Rows
    balancing: Balancing
    replicates: ReplicateWeights | None = None

    @property
    def schema(self) -> pa.Schema:
        """The columns of the file."""
        return pa.schema([*FIELDS, *(self.replicates.fields() if self.replicates else ())])

    def __call__(self) -> Iterator[pa.RecordBatch]:
        """Give the weights batch by batch; the extract's weight and design columns are read again.

        Rows outside the domain have no propensity and no balancing weight (null), and a combined weight of 0, in
        every replicate too; their sampling weights vary with the replicates as those of other rows do.
        """
        wanted = list(dict.fromkeys((self.weight, *self.design_columns)))
        blocks = iter(self.rows.blocks)
        block = next(blocks, None)
        for start, batch in self.extract.read(wanted):
            count = batch.num_rows
            sampling = np.asarray(batch.column(self.weight).cast(pa.float64()), dtype=np.float64)
            propensity, balance = np.full(count, np.nan), np.full(count, np.nan)
            inside = np.zeros(count, dtype=bool)
            again = np.zeros((count, self.replicates.scheme.count if self.replicates else 0))
            # A block may begin in one batch and end in the next: it is cut by its rows' positions.
            while block is not None and block.position[0] < start + count:
                here = (block.position >= start) & (block.position < start + count)
                places = block.position[here] - start
                balanced = self.balancing.rows(block)
                propensity[places] = balanced.propensity[here, 0]
                balance[places] = balanced.balancing[here, 0]
                inside[places] = True
                if self.replicates is not None:
                    again[places] = self.replicates.combined(block.some(here))
                if block.position[-1] >= start + count:
                    break
                block = next(blocks, None)
            columns = [
                pa.array(np.arange(start, start + count)),
                pa.array(propensity, mask=~inside),
                pa.array(sampling),
                pa.array(balance, mask=~inside),
                pa.array(np.where(inside, sampling * np.where(inside, balance, 0), 0.0)),
                pa.array(inside),
            ]
            if self.replicates is not None and self.replicates.writes_sampling:
                columns += [pa.array(column) for column in self._sampling(start, batch, sampling).T]
            columns += [pa.array(column, mask=np.isnan(column)) for column in again.T]
            yield pa.record_batch(columns, schema=self.schema)

    def _sampling(self, start: int, batch: pa.Table, sampling: Floats) -> Floats:
        """Return the sampling weights of all rows in every replicate, (n, R)."""
        assert self.replicates is not None
        every = self.replicates.scheme.every
        assert isinstance(every, MadeColumns)
        if every.placed.of_last is None:
            unit = np.arange(start, start + len(sampling))
        else:
            assert self.rows.unit_of is not None
            unit = every.placed.of_last[self.rows.unit_of(batch)]
        return every.of_units(unit, sampling)[:, 1:]
