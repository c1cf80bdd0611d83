"""The sampling units of an extract: strata, then clusters stage by stage, as integer codes.

Knows who lies in whom and how many rows each unit has; refuses to know what a variance is.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Stage:
    """The units of one stage, sorted by their ids within their parents' order.

    Attributes
    ----------
    columns : names of the extract's columns that identify a unit within its parent
        Empty for the single stratum of a design without strata.
    labels : (U,) str
        Printable ids, without the parents' ids.
    parent : (U,) int64
        Index of the unit above, in the previous stage; zeros for strata. Non-decreasing.
    rows : (U,) int64
        Rows of the extract in the unit, in the domain or not.
    domain_rows : (U,) int64
        Those of them that are in blocks.
    first_rows : (U,) int64
        The first row of the extract in the unit.
    population : (U,) float64 or None
        How many units of the *next* stage (rows, below the last stage) the population has within
        this unit; None where the plan gives no such column.
    """

    columns: tuple[str, ...]
    labels: NDArray[np.str_]
    parent: NDArray[np.int64]
    rows: NDArray[np.int64]
    domain_rows: NDArray[np.int64]
    first_rows: NDArray[np.int64]
    population: NDArray[np.float64] | None = None

    def __len__(self) -> int:
        return len(self.parent)


@dataclass(frozen=True)
class Units:
    """All stages of a design: ``stages[0]`` holds the strata, ``stages[1]`` the PSUs, and so on.

    A design without clusters has the strata only; then every row is a PSU.
    """

    stages: tuple[Stage, ...]

    @property
    def clustered(self) -> bool:
        """Whether PSUs are clusters of rows (else every row is a PSU)."""
        return len(self.stages) > 1

    def ancestor(self, stage: int) -> NDArray[np.int64]:
        """Return, for every unit of the last stage, the index of its ancestor in ``stage``; (U_last,)."""
        index = np.arange(len(self.stages[-1]), dtype=np.int64)
        for below in range(len(self.stages) - 1, stage, -1):
            index = self.stages[below].parent[index]
        return index
