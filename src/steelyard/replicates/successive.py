"""Successive difference replication for systematic samples in the order of the file (Fay & Train 1995)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.replicates.hadamard import hadamard, next_order
from steelyard.replicates.scheme import Scheme, made_scheme
from steelyard.replicates.units import ReplicationUnits

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

REACH = 2**-1.5


@dataclass(frozen=True)
class Neighbours:
    """Each unit varies against the next through two rows of a Hadamard matrix."""

    row: Integers
    next_row: Integers
    reach: Floats
    signs: NDArray[np.int8]

    def __call__(self, units: Integers, replicates: Integers) -> Floats:
        """Return the multipliers of some units in some replicates, (u, c)."""
        own = self.signs[self.row[units][:, np.newaxis], replicates]
        other = self.signs[self.next_row[units][:, np.newaxis], replicates]
        return np.asarray(1 + self.reach[units, np.newaxis] * (own - other))


def successive_difference(units: ReplicationUnits, df: float, replicates: int) -> Scheme:
    """Return successive difference replication with at least so many replicates: the next order there is.

    Raises
    ------
    DesignError
        A stratum has one unit.

    Notes
    -----
    Units are taken in the order of their first rows within strata. Unit ``i`` gets
    ``1 + 2^-1.5 a_{i+1,r} - 2^-1.5 a_{i+2,r}``, times ``sqrt(1 - f_h)`` in what it deviates from 1, and
    ``V = 4 / R`` times the sum of squares (Fay & Train 1995). The last unit of a stratum is followed by its
    first, so that for linear statistics, with more replicates than units,
    ``V = sum_h (1 - f_h) / 2 sum_i (z_i - z_{i+1})^2`` (Wolter 2007, section 8.2). Rows of the matrix are used
    again, the first row of ones left out, where units outnumber them.
    """
    units.refuse_lone("with no neighbour to differ from")
    order = next_order(max(replicates, 4))
    sequence = np.lexsort((units.first_rows, units.stratum))
    strata = units.stratum[sequence]
    place = np.arange(units.count)
    starts = np.searchsorted(strata, strata, side="left")
    ends = np.searchsorted(strata, strata, side="right")
    following = np.where(place + 1 < ends, place + 1, starts)
    rows = 1 + place % (order - 1)
    next_rows = rows[following]
    # A long stratum may come round to the row it started with.
    next_rows = np.where(next_rows == rows, 1 + rows % (order - 1), next_rows)
    row, next_row = np.zeros(units.count + 1, dtype=np.int64), np.zeros(units.count + 1, dtype=np.int64)
    row[sequence], next_row[sequence] = rows, next_rows
    reach = np.append((REACH * np.sqrt(1 - units.fractions))[units.stratum], 0.0)
    notes: tuple[str, ...] = ()
    if units.count > order - 1:
        notes = (
            f"{units.count:,} units share the {order - 1:,} rows of the successive-difference matrix; more replicates "
            "would tell more of them apart.",
        )
    return made_scheme(
        "successive-difference",
        units,
        Neighbours(row, next_row, reach, hadamard(order)),
        np.ones(order),
        4 / order,
        min(df, order - 1.0),
        notes,
    )
