"""Delete-one-PSU jackknife within strata (Wolter 2007, chapter 4)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.errors import PlanError
from steelyard.replicates.scheme import Scheme, made_scheme
from steelyard.replicates.units import ReplicationUnits

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

MOST_REPLICATES = 20_000


@dataclass(frozen=True)
class DeleteOne:
    """Replicate r drops unit r; its stratum's other units share the weight."""

    stratum: Integers
    sizes: Floats
    lone: NDArray[np.bool_]
    all_psus: int

    def __call__(self, units: Integers, replicates: Integers) -> Floats:
        """Return the multipliers of some units in some replicates, (u, c)."""
        dropped = self.stratum[replicates]
        size = self.sizes[dropped]
        stratum = np.append(self.stratum, -1)[units]
        others = np.where(stratum[:, np.newaxis] == dropped, size / np.maximum(size - 1, 1), 1.0)
        lone = self.lone[dropped]
        others[:, lone] = 1 + 1 / self.all_psus
        here = units[:, np.newaxis] == replicates
        return np.where(here, np.where(lone, 1 / self.all_psus, 0.0), others)


def jackknife(units: ReplicationUnits, df: float) -> Scheme:
    """Return the delete-one jackknife: as many replicates as units.

    Raises
    ------
    PlanError
        There are more units than can sensibly be dropped one by one.

    Notes
    -----
    ``a_r = (1 - f_h) (n_h - 1) / n_h`` for a unit of stratum ``h``; for linear statistics the variance is the
    linearized one. A lone PSU that is recentred is replaced by the mean of all ``N`` PSUs: it keeps ``1 / N``
    of its weight, all others get ``1 + 1 / N``, and ``a_r = 1 - f_h``.
    """
    if units.count > MOST_REPLICATES:
        raise PlanError(
            f"The jackknife would drop {units.count:,} units one by one; at most {MOST_REPLICATES:,} are allowed.",
            mend='Set variance.method = "bootstrap", or name the clusters in design.clusters if there are any.',
        )
    sizes = units.sizes.astype(np.float64)
    by_stratum = (1 - units.fractions) * np.where(units.lone, 1.0, (sizes - 1) / np.maximum(sizes, 1))
    multipliers = DeleteOne(units.stratum, sizes, units.lone, units.all_psus)
    return made_scheme("jackknife", units, multipliers, by_stratum[units.stratum], 1.0, df)
