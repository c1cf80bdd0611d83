"""Balanced half-samples for two PSUs a stratum, and Fay's variant that keeps every PSU."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.errors import DesignError
from steelyard.replicates.hadamard import hadamard, next_order
from steelyard.replicates.scheme import Scheme, made_scheme
from steelyard.replicates.units import ReplicationUnits

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

LABELS_SHOWN = 5


@dataclass(frozen=True)
class HalfSamples:
    """One PSU of a stratum gains what the other loses; which of them, a row of a Hadamard matrix says."""

    sign: Floats
    row: Integers
    reach: Floats
    signs: NDArray[np.int8]

    def __call__(self, units: Integers, replicates: Integers) -> Floats:
        """Return the multipliers of some units in some replicates, (u, c)."""
        return np.asarray(
            1
            + (self.sign * self.reach)[units, np.newaxis]
            * self.signs[self.row[units][:, np.newaxis], replicates]
        )


def balanced_half_samples(units: ReplicationUnits, df: float, fay: float | None = None) -> Scheme:
    """Return balanced repeated replication, or Fay's variant with the factor ``fay``.

    Raises
    ------
    DesignError
        A stratum does not have two units.

    Notes
    -----
    The PSUs of stratum ``h`` get ``1 +/- (1 - fay) sqrt(1 - f_h) a_hr`` with ``a`` rows of a Hadamard matrix
    other than the first, as many columns as the next order above the number of strata, so that all strata
    are in full orthogonal balance and every PSU's mean multiplier is 1; ``V = 1 / (R (1 - fay)^2)`` times the
    sum of squares (McCarthy 1969; Judkins 1990; Wolter 2007, chapter 3). Without Fay's factor (0) and
    without a sampling fraction a half-sample doubles one PSU and drops the other.
    """
    varied = np.unique(units.stratum)
    odd = varied[(units.sizes[varied] != 2) | units.lone[varied]]
    if len(odd):
        shown = ", ".join(f"{units.labels[h]} ({units.sizes[h]:,})" for h in odd[:LABELS_SHOWN])
        more = f" and {len(odd) - LABELS_SHOWN:,} more" if len(odd) > LABELS_SHOWN else ""
        raise DesignError(
            f"Balanced half-samples need two PSUs a stratum; {len(odd):,} of {len(varied):,} strata have another "
            f"number: {shown}{more}.",
            mend='Set variance.method to "jackknife" or "bootstrap", which take any number; or name in '
            "design.strata a column that pairs the PSUs as they were drawn.",
        )
    order = next_order(len(varied) + 1)
    factor = 0.0 if fay is None else fay
    row = np.append(1 + np.searchsorted(varied, units.stratum), 0).astype(np.int64)
    first = np.full(len(units.sizes), units.count, dtype=np.int64)
    np.minimum.at(first, units.stratum, np.arange(units.count))
    sign = np.append(np.where(np.arange(units.count) == first[units.stratum], 1.0, -1.0), 0.0)
    reach = np.append(((1 - factor) * np.sqrt(1 - units.fractions))[units.stratum], 0.0)
    return made_scheme(
        "brr" if fay is None else "fay",
        units,
        HalfSamples(sign, row, reach, hadamard(order)),
        np.ones(order),
        1 / (order * (1 - factor) ** 2),
        df,
        details=() if fay is None else (("fay", factor),),
    )
