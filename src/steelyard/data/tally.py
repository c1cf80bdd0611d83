"""What a check-up counts while an extract is read: everything here adds up over chunks."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from steelyard.data.reading import Chunk, Reader, exposure_counts
from steelyard.data.replicate_weights import ReplicateTally
from steelyard.data.values import Values, is_missing
from steelyard.errors import DesignError

Floats = NDArray[np.float64]

POSITIONS_SHOWN = 5
LEVELS_COUNTED = 1000


@dataclass
class WeightSums:
    """Count, sum, sum of squares, smallest and largest of some weights."""

    count: int = 0
    total: float = 0.0
    squares: float = 0.0
    low: float = np.inf
    high: float = -np.inf

    def add(self, weight: Floats) -> None:
        """Take in some weights."""
        if len(weight):
            self.count += len(weight)
            self.total += float(weight.sum())
            # Not a dot product: BLAS would wake its threads for it, run after run.
            self.squares += float(np.square(weight).sum())
            self.low = min(self.low, float(weight.min()))
            self.high = max(self.high, float(weight.max()))


@dataclass
class Tally:
    """Counts of a whole extract, taken in chunk by chunk.

    Attributes
    ----------
    rows, zero_weights : of the extract
    reasons : rows left out, by place of the reason
    weights, domain_weights : sums over all rows, and over rows in the domain
    missing : mapping
        Column -> rows where it is missing, among rows where the domain holds: all, exposed, reference.
    inside : rows where the domain holds: all, exposed, reference
    levels : values of the exposure where the domain holds, with their rows
    bad_values : mapping
        Outcome and family -> rows of the domain with a value that the family does not have.
    low, high : mapping
        Column -> smallest and largest number in the domain.
    texts : mapping
        Category column -> levels met in the domain; no more are looked for once there are two.
    replicates : ReplicateTally
    beyond : columns with a number other than 0 and 1 in the domain
    """

    reader: Reader
    rows: int = 0
    zero_weights: int = 0
    reasons: Counter[int] = field(default_factory=Counter)
    weights: WeightSums = field(default_factory=WeightSums)
    domain_weights: WeightSums = field(default_factory=WeightSums)
    missing: dict[str, NDArray[np.int64]] = field(default_factory=dict)
    inside: NDArray[np.int64] = field(default_factory=lambda: np.zeros(3, dtype=np.int64))
    levels: Counter[str] = field(default_factory=Counter)
    bad_values: Counter[tuple[str, str]] = field(default_factory=Counter)
    low: dict[str, float] = field(default_factory=dict)
    high: dict[str, float] = field(default_factory=dict)
    texts: dict[str, set[str]] = field(default_factory=dict)
    beyond: set[str] = field(default_factory=set)
    bad_weights: int = 0
    bad_positions: list[int] = field(default_factory=list)
    replicates: ReplicateTally = field(init=False)

    def __post_init__(self) -> None:
        self.replicates = ReplicateTally(self.reader.replicates)

    def add(self, chunk: Chunk) -> None:
        """Take in a chunk."""
        self.rows += len(chunk.weight)
        bad = ~np.isfinite(chunk.weight) | (chunk.weight < 0)
        if bad.any():
            self.bad_weights += int(bad.sum())
            room = POSITIONS_SHOWN - len(self.bad_positions)
            self.bad_positions += [chunk.start + int(i) for i in np.flatnonzero(bad)[:room]]
            return
        self.zero_weights += int((chunk.weight == 0).sum())
        places, counts = np.unique(chunk.reason[~chunk.kept], return_counts=True)
        self.reasons.update(dict(zip(places.tolist(), counts.tolist(), strict=True)))
        self.weights.add(chunk.weight)
        self.domain_weights.add(chunk.weight[chunk.kept])
        self._missing(chunk)
        if len(self.levels) <= LEVELS_COUNTED:
            self.levels.update(exposure_counts(chunk))
        self._values(chunk)

    @property
    def indicators(self) -> frozenset[str]:
        """Columns that are 0 or 1 wherever they are known."""
        return frozenset(self.low) - self.beyond

    def refuse_bad_weights(self) -> None:
        """Refuse weights that are missing, negative or infinite.

        Raises
        ------
        DesignError
            With how many there are, and the first rows.
        """
        if self.bad_weights:
            where = ", ".join(map(str, self.bad_positions))
            raise DesignError(
                f'The sampling weight "{self.reader.plan.design.weight}" is missing, negative or infinite in '
                f"{self.bad_weights:,} row(s), first in row(s) {where} (counted from 0).",
                mend="Ask the producer for those weights; a row that represents nobody has weight 0.",
            )

    def _missing(self, chunk: Chunk) -> None:
        groups = (chunk.inside, chunk.inside & (chunk.exposure == 1), chunk.inside & (chunk.exposure == 0))
        self.inside = self.inside + np.array([group.sum() for group in groups], dtype=np.int64)
        for name in (self.reader.exposure, *self.reader.complete):
            missing = is_missing(chunk.values[name])
            found = np.array([(missing & group).sum() for group in groups], dtype=np.int64)
            self.missing[name] = found + self.missing.get(name, 0)

    def _values(self, chunk: Chunk) -> None:
        for name, family in {(o.name, o.family) for o in self.reader.plan.outcome}:
            values = np.asarray(chunk.values[name])[chunk.kept]
            if family == "binomial":
                self.bad_values[name, family] += int(((values != 0) & (values != 1)).sum())
            elif family == "poisson":
                self.bad_values[name, family] += int((values < 0).sum())
        if chunk.kept.any():
            for name in self.reader.complete:
                self._range(name, chunk.values[name][chunk.kept])

    def _range(self, name: str, values: Values) -> None:
        if isinstance(values, pd.Categorical):
            seen = self.texts.setdefault(name, set())
            if len(seen) < 2:
                seen.update(values.categories[np.unique(values.codes)])
            return
        self.low[name] = min(self.low.get(name, np.inf), float(values.min()))
        self.high[name] = max(self.high.get(name, -np.inf), float(values.max()))
        if name not in self.beyond and not np.all((values == 0) | (values == 1)):
            self.beyond.add(name)
