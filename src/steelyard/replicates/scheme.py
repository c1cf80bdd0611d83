"""What replicate weights are: multipliers of units or columns of the extract, and the factors of their variance."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.unit_totals import LONG_RUN
from steelyard.replicates.units import ReplicationUnits

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

FULL_SAMPLE = -1


class Multipliers(Protocol):
    """What each replicate multiplies the weight of a unit by. Picklable.

    The unit after the last is that of rows no replicate varies.
    """

    def __call__(self, units: Integers, replicates: Integers) -> Floats:
        """Return the multipliers of some units in some replicates, (u, c)."""
        ...


class Columns(Protocol):
    """Columns of sampling weights: what the estimating floors call ``WeightColumns``."""

    @property
    def count(self) -> int:
        """How many columns there are."""
        ...

    def __call__(self, block: Block, out: Floats | None = None) -> Floats:
        """Return the block's (n, K) weights; ``out`` (n, K) is room for them that may be used."""
        ...

    def only(self, columns: Sequence[int] | Integers) -> Columns:
        """Return some of the columns."""
        ...


@dataclass(frozen=True)
class Scheme:
    """Replicate weights ready for use.

    Attributes
    ----------
    method : "jackknife", "brr", "fay", "bootstrap" or "successive-difference"
    origin : "made" or "supplied"
    count : int
        Replicates, R.
    factor : float
        ``a``, the overall factor.
    factors : (R,)
        ``a_r``, the factors by replicate.
    df : float
        Degrees of freedom of the variance.
    about_mean : whether deviations are taken from the replicates' mean, not from the full sample's estimate
    every : Columns
        The full sample's weights (column 0) and those of all replicates.
    notes : texts for the reader
    details : what else a colleague needs to know of how the replicates were made, by name
    """

    method: str
    origin: str
    count: int
    factor: float
    factors: Floats
    df: float
    about_mean: bool
    every: Columns
    notes: tuple[str, ...] = ()
    details: tuple[tuple[str, float | int | str], ...] = ()

    def columns(self, first: int, last: int) -> Columns:
        """Return the weights of the full sample (column 0) and of the replicates ``first`` to ``last - 1``."""
        return self.every.only([0, *range(first + 1, last + 1)])


@dataclass(frozen=True)
class MadeColumns:
    """Sampling weights times multipliers of units; no array of rows by replicates is ever held.

    ``which`` (K,) names the replicate of each column, -1 the full sample.
    """

    placed: ReplicationUnits
    made: Multipliers
    which: Integers

    @property
    def count(self) -> int:
        """How many columns there are."""
        return len(self.which)

    @property
    def units(self) -> int:
        """How many units there are, the one of rows that no replicate varies included."""
        return self.placed.count + 1

    def unit(self, block: Block) -> Integers:
        """Return the unit of each row, (n,)."""
        return self.placed.of(block)

    def multipliers(self, units: Integers) -> Floats:
        """Return the multipliers of some units, (u, K)."""
        out = np.ones((len(units), len(self.which)))
        varied = np.flatnonzero(self.which != FULL_SAMPLE)
        if len(varied):
            out[:, varied] = self.made(units, self.which[varied])
        return out

    def __call__(self, block: Block, out: Floats | None = None) -> Floats:
        """Return the block's weights, (n, K)."""
        return self.of_units(self.unit(block), block.weight, out)

    def of_units(self, unit: Integers, weight: Floats, out: Floats | None = None) -> Floats:
        """Return the weights of rows whose units and own weights are given, (n, K)."""
        out = np.empty((len(unit), self.count)) if out is None else out
        edges = np.flatnonzero(np.diff(unit, prepend=-1, append=-1))
        if (len(edges) - 1) * LONG_RUN <= len(unit):
            multipliers = self.multipliers(unit[edges[:-1]])
            for run, (a, b) in enumerate(pairwise(edges.tolist())):
                np.multiply(weight[a:b, np.newaxis], multipliers[run], out=out[a:b])
            return out
        found, place = np.unique(unit, return_inverse=True)
        np.take(self.multipliers(found), place, axis=0, out=out, mode="clip")
        out *= weight[:, np.newaxis]
        return out

    def only(self, columns: Sequence[int] | Integers) -> MadeColumns:
        """Return some of the columns."""
        return MadeColumns(self.placed, self.made, self.which[list(columns)])


def made_scheme(
    method: str,
    units: ReplicationUnits,
    multipliers: Multipliers,
    factors: Floats,
    factor: float,
    df: float,
    notes: tuple[str, ...] = (),
    details: tuple[tuple[str, float | int | str], ...] = (),
) -> Scheme:
    """Return the scheme of replicates that were made from a design."""
    which = np.arange(-1, len(factors), dtype=np.int64)
    every = MadeColumns(units, multipliers, which)
    return Scheme(
        method, "made", len(factors), factor, factors, df, False, every, (*units.notes, *notes), details
    )
