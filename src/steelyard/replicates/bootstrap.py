"""The rescaled bootstrap of Rao, Wu & Yue (1992)."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.replicates.scheme import Scheme, made_scheme
from steelyard.replicates.units import ReplicationUnits

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

MOST_DRAWN = 4_000_000


@dataclass(frozen=True)
class Redrawn:
    """How often each unit was redrawn, and what a unit keeps and gains by it."""

    times: NDArray[np.uint8]
    kept: Floats
    gained: Floats

    def __call__(self, units: Integers, replicates: Integers) -> Floats:
        """Return the multipliers of some units in some replicates, (u, c)."""
        still = units >= len(self.times)
        here = np.where(still, 0, units)
        out = self.times[here[:, np.newaxis], replicates] * self.gained[here, np.newaxis]
        out += self.kept[here, np.newaxis]
        out[still] = 1.0
        return np.asarray(out)


def bootstrap(units: ReplicationUnits, df: float, replicates: int, seed: int) -> Scheme:
    """Return the rescaled bootstrap with so many replicates.

    Raises
    ------
    DesignError
        A stratum has one unit.

    Notes
    -----
    In each replicate ``m_h = n_h - 1`` units of stratum ``h`` are drawn with replacement; a unit drawn ``k``
    times is multiplied by ``1 - l + l k n_h / m_h`` with ``l = sqrt(1 - f_h)`` (Rao, Wu & Yue 1992; for
    this ``m_h`` no weight is ever negative). ``V`` is the mean of squared deviations. Strata are drawn from
    in their order, with numpy's default generator started at ``seed``.
    """
    units.refuse_lone("with nothing there to redraw from")
    generator = np.random.default_rng(seed)
    times = np.zeros((units.count, replicates), dtype=np.uint8)
    order = np.argsort(units.stratum, kind="stable")
    edges = np.searchsorted(units.stratum[order], np.arange(len(units.sizes) + 1))
    for h, size in enumerate(units.sizes.tolist()):
        members = order[edges[h] : edges[h + 1]]
        if len(members):
            # With m = n - 1 draws, no unit is ever drawn 256 times: the chance is below 1 in 10^500.
            times[members] = _drawn(generator, size, replicates)
    reach = np.sqrt(1 - units.fractions)
    sizes = units.sizes.astype(np.float64)
    gained = reach * sizes / np.maximum(sizes - 1, 1)
    return made_scheme(
        "bootstrap",
        units,
        Redrawn(times, (1 - reach)[units.stratum], gained[units.stratum]),
        np.ones(replicates),
        1 / replicates,
        min(df, replicates - 1.0),
        details=(("seed", seed),),
    )


def _drawn(generator: np.random.Generator, size: int, replicates: int) -> Integers:
    """Return how often each of ``size`` units is drawn, (size, replicates)."""
    drawn = np.empty((size, replicates), dtype=np.int64)
    together = max(1, MOST_DRAWN // size)
    for first in range(0, replicates, together):
        count = min(together, replicates - first)
        draws = generator.integers(size, size=(count, size - 1)) + size * np.arange(count)[:, np.newaxis]
        drawn[:, first : first + count] = (
            np.bincount(draws.ravel(), minlength=size * count).reshape(count, size).T
        )
    return drawn
