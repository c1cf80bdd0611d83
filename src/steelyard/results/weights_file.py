"""The weights of every row of the extract, in its order, as record batches."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import pyarrow as pa

from steelyard.data.blocks import Rows
from steelyard.data.source import Extract
from steelyard.exposure.balancing import Balancing

SCHEMA = pa.schema(
    [
        pa.field("row", pa.int64(), nullable=False),
        pa.field("propensity", pa.float64()),
        pa.field("sampling_weight", pa.float64(), nullable=False),
        pa.field("balancing_weight", pa.float64()),
        pa.field("combined_weight", pa.float64(), nullable=False),
        pa.field("in_domain", pa.bool_(), nullable=False),
    ]
)


def weight_batches(
    extract: Extract, weight: str, rows: Rows, balancing: Balancing
) -> Iterator[pa.RecordBatch]:
    """Give the weights of the full sample, batch by batch; the extract's weight column is read again.

    Rows outside the domain have no propensity and no balancing weight (null), and a combined weight of 0.
    """
    blocks = iter(rows.blocks)
    block = next(blocks, None)
    for start, batch in extract.read([weight]):
        count = batch.num_rows
        sampling = np.asarray(batch.column(0).cast(pa.float64()), dtype=np.float64)
        propensity, balance = np.full(count, np.nan), np.full(count, np.nan)
        inside = np.zeros(count, dtype=bool)
        # A block may begin in one batch and end in the next: it is cut by its rows' positions.
        while block is not None and block.position[0] < start + count:
            here = (block.position >= start) & (block.position < start + count)
            places = block.position[here] - start
            balanced = balancing.rows(block)
            propensity[places] = balanced.propensity[here, 0]
            balance[places] = balanced.balancing[here, 0]
            inside[places] = True
            if block.position[-1] >= start + count:
                break
            block = next(blocks, None)
        yield pa.record_batch(
            [
                pa.array(np.arange(start, start + count)),
                pa.array(propensity, mask=~inside),
                pa.array(sampling),
                pa.array(balance, mask=~inside),
                pa.array(np.where(inside, sampling * np.where(inside, balance, 0), 0.0)),
                pa.array(inside),
            ],
            schema=SCHEMA,
        )
