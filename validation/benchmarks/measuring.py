"""What the benchmarks share: seconds, peak memory, and how much memory design rows take."""

from __future__ import annotations

import time
from pathlib import Path


def timed(function, *arguments):
    """Return seconds and the function's answer."""
    start = time.perf_counter()
    answer = function(*arguments)
    return time.perf_counter() - start, answer


def peak_kb() -> int:
    """Return the peak resident memory of this process so far; Linux counts it from the start of the program."""
    status = Path("/proc/self/status").read_text()
    return int(status.split("VmHWM:")[1].split()[0])


def rows_mb(rows) -> float:
    """Return the size of design rows in MB."""
    return (
        sum(
            b.columns.nbytes + b.exposure.nbytes + b.weight.nbytes + b.unit.nbytes + b.position.nbytes
            for b in rows.blocks
        )
        / 2**20
    )
