"""Write a made-up extract of any size: 30 covariates, 2,000 PSUs in 50 strata, weights, exposure, outcome.

Rows are drawn and written 131,072 at a time with a fixed seed, so any number of them fits in memory.
"""

from __future__ import annotations

import argparse
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

COVARIATES = 30
PSUS, STRATA = 2_000, 50
ROW_GROUP = 131_072
NAMES = [f"x{j:02d}" for j in range(1, COVARIATES + 1)]
FORMULA = "exposed ~ " + " + ".join(NAMES)


def draw(rows: int, start: int, total: int, rng: np.random.Generator) -> pa.Table:
    """Return some rows of the extract; PSUs are contiguous, as in a file sorted by area."""
    psu = (np.arange(start, start + rows) * PSUS) // total
    shift = np.random.default_rng(1).normal(0, 0.3, PSUS)[psu]
    x = rng.normal(size=(rows, COVARIATES)) + 0.3 * shift[:, None]
    x[:, ::3] = x[:, ::3] > 0.4
    slope = np.linspace(0.25, -0.25, COVARIATES)
    exposed = rng.random(rows) < 1 / (1 + np.exp(-(x @ slope + shift - 0.2)))
    outcome = 1 + 0.3 * exposed + x @ slope[::-1] + shift + rng.normal(size=rows)
    columns = {name: x[:, j] for j, name in enumerate(NAMES)}
    return pa.table(
        {
            "stratum": (psu * STRATA // PSUS).astype(np.int32),
            "psu": psu.astype(np.int32),
            "weight": np.exp(0.4 * rng.normal(size=rows) + 0.2 * x[:, 1]) * 100,
            "exposed": exposed.astype(np.int8),
            "outcome": outcome,
            **columns,
        }
    )


def write(path: Path, rows: int, seed: int = 20261) -> None:
    """Write the extract, row group by row group."""
    rng = np.random.default_rng(seed)
    writer = None
    for start in range(0, rows, ROW_GROUP):
        table = draw(min(ROW_GROUP, rows - start), start, rows, rng)
        writer = writer or pq.ParquetWriter(path, table.schema)
        writer.write_table(table, row_group_size=ROW_GROUP)
    if writer is not None:
        writer.close()


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("path", type=Path)
    parser.add_argument("--rows", type=int, default=1_000_000)
    arguments = parser.parse_args()
    write(arguments.path, arguments.rows)
