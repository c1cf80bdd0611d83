"""The replicate weights that came with an extract: which columns, whether they are usable, whether they fit.

Looks at them as columns of the file. What a variance makes of them is no business of this module.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from fnmatch import fnmatchcase

import numpy as np
import pandas as pd
import pyarrow as pa
from numpy.typing import NDArray

from steelyard.data.source import Extract
from steelyard.data.values import values_of
from steelyard.errors import DesignError
from steelyard.plan import Scalar, SuppliedReplicates

Floats = NDArray[np.float64]

NAMES_SHOWN = 5
# A mean total further from the full weights' than this is another kind of number, not sampling error.
FAR_OFF = 0.2
# A single replicate this far off is worth a word.
ODD = 0.5
# What the mean of (r / s - 1)^2 is for each method; jackknifes leave most weights alone.
SPREADS = {"brr": 1.0, "bootstrap": 1.0, "successive-difference": 0.25}
SPREAD_SLACK = 1.5
JACKKNIFE_SPREAD = 0.25


def replicate_columns(extract: Extract, supplied: SuppliedReplicates, weight: str) -> tuple[str, ...]:
    """Return the columns that the plan's names and patterns stand for, in the order of the extract.

    Raises
    ------
    DesignError
        A name or pattern finds nothing, a column holds no numbers, or the factors are not as many.
    """
    kinds = extract.columns
    found: list[str] = []
    for wanted in supplied.columns:
        here = [name for name in kinds if name == wanted or fnmatchcase(name, wanted)]
        if not here:
            raise DesignError(
                f'design.replicates.columns names "{wanted}", and the extract has no such column.',
                mend=f"It has {_listed(list(kinds))}.",
            )
        found += here
    places = {name: k for k, name in enumerate(kinds)}
    columns = tuple(sorted(set(found) - {weight}, key=places.__getitem__))
    if len(columns) < 2:
        raise DesignError(
            f"design.replicates.columns finds {len(columns)} column(s) beside the full weight.",
            mend="A variance needs at least two replicates: check the names or the pattern.",
        )
    wrong = [name for name in columns if kinds[name] != "number"]
    if wrong:
        raise DesignError(
            f"{len(wrong)} replicate weight column(s) hold no numbers: {_listed(wrong)}.",
            mend="Narrow design.replicates.columns to the weights.",
        )
    if supplied.replicate_factors and len(supplied.replicate_factors) != len(columns):
        raise DesignError(
            f"design.replicates.replicate_factors has {len(supplied.replicate_factors)} value(s), and there are "
            f"{len(columns)} replicates.",
            mend="Give one for each replicate, in the order of the columns in the extract.",
        )
    return columns


def replicates_of(
    table: pa.Table, columns: Sequence[str], codes: Mapping[str, tuple[Scalar, ...]]
) -> Floats | NDArray[np.float32]:
    """Return the replicate weights of a run, (n, R): single precision where the extract holds it so."""
    single = all(pa.types.is_float32(table.schema.field(name).type) for name in columns)
    out = np.empty((table.num_rows, len(columns)), dtype=np.float32 if single else np.float64)
    for place, name in enumerate(columns):
        out[:, place] = np.asarray(values_of(table.column(name), codes.get(name, ())))
    return out


@dataclass
class ReplicateTally:
    """What is counted of replicate weights while an extract is read.

    Attributes
    ----------
    columns : R names
    total, full : sums of the replicates (R,) and of the full weights
    deviation : (R,) sum of ``(r / s - 1)^2`` over the rows with full weight; ``rows`` of them
    negative, zero, bad : (R,) rows with a negative weight, with none, with a missing or infinite one
    first_bad : (R,) the first such row
    unequal : (R,) rows where the replicate is not the full weight
    resurrected : rows without full weight that have weight in some replicate
    """

    columns: tuple[str, ...]

    def __post_init__(self) -> None:
        size = len(self.columns)
        self.total, self.deviation = np.zeros(size), np.zeros(size)
        self.negative, self.zero, self.bad, self.unequal = (np.zeros(size, dtype=np.int64) for _ in range(4))
        self.first_bad = np.full(size, -1, dtype=np.int64)
        self.marks = np.zeros(size)
        self.full, self.rows, self.resurrected, self.all_rows = 0.0, 0, 0, 0

    def add(self, start: int, replicates: Floats | NDArray[np.float32], weight: Floats) -> None:
        """Take in a run of rows: replicate weights (n, R) and full weights (n,)."""
        replicates = np.asarray(replicates, dtype=np.float64)
        bad = ~np.isfinite(replicates)
        if bad.any():
            first = np.where(bad.any(axis=0), start + bad.argmax(axis=0), -1)
            self.first_bad = np.where(self.first_bad < 0, first, self.first_bad)
            self.bad += bad.sum(axis=0)
            return
        self.all_rows += len(weight)
        self.total += replicates.sum(axis=0)
        self.full += float(weight.sum())
        self.negative += (replicates < 0).sum(axis=0)
        self.zero += (replicates == 0).sum(axis=0)
        self.unequal += (replicates != weight[:, np.newaxis]).sum(axis=0)
        # A sum that a column shares with no other unless the two are one.
        self.marks += np.cos(np.arange(start, start + len(weight))) @ replicates
        counted = weight > 0
        self.rows += int(counted.sum())
        self.resurrected += int((replicates[~counted] != 0).any(axis=1).sum())
        self.deviation += np.square(replicates[counted] / weight[counted, np.newaxis] - 1).sum(axis=0)

    def frame(self) -> pd.DataFrame:
        """Return what was found, a row a replicate: column, its total over the full weights', zeros, negatives."""
        return pd.DataFrame(
            {
                "column": self.columns,
                "total": self.total,
                "share_of_full": self.total / self.full,
                "zero": self.zero,
                "negative": self.negative,
                "spread": self.deviation / max(self.rows, 1),
            }
        )

    def refuse_unfit(self, weight: str) -> None:
        """Refuse replicate weights that are missing or infinite, or that cannot belong to the full weights.

        Raises
        ------
        DesignError
            Naming the columns, how far off they are, and what they look like.
        """
        broken = np.flatnonzero(self.bad)
        if len(broken):
            first = broken[0]
            raise DesignError(
                f'The replicate weight "{self.columns[first]}" is missing or infinite in {self.bad[first]:,} row(s), '
                f"first in row {self.first_bad[first]} (counted from 0); {len(broken)} of {len(self.columns)} "
                "columns have such rows.",
                mend="Ask the producer for those weights: a row that a replicate leaves out has weight 0 there.",
            )
        still = [name for name, rows in zip(self.columns, self.unequal, strict=True) if not rows]
        if len(still) == len(self.columns):
            raise DesignError(
                f'All {len(still)} replicate weights equal "{weight}" in every row: they vary nothing.',
                mend="Check design.replicates.columns.",
            )
        share = float(np.mean(self.total)) / self.full
        if abs(share - 1) > FAR_OFF:
            raise DesignError(
                f"The replicate weights ({_listed(list(self.columns))}) add up to {share:.3g} times the full "
                f'weights "{weight}" on average.{self._looks_like()}',
                mend="Check design.weight and design.replicates.columns: they must be weights of the same persons.",
            )

    def _looks_like(self) -> str:
        mean = float(np.mean(self.total)) / max(self.all_rows, 1)
        if abs(mean - 1) < FAR_OFF:
            return (
                " Their mean is near 1: they look like multipliers, which must be multiplied by the full weight "
                "first."
            )
        return ""

    def warnings(self, supplied: SuppliedReplicates) -> list[tuple[str, str]]:
        """Return what is odd about them: message and mend."""
        told = []
        share = self.total / self.full
        odd = [self.columns[k] for k in np.flatnonzero(np.abs(share - 1) > ODD)]
        if odd:
            told.append(
                (
                    f"{len(odd)} of {len(self.columns)} replicate weights add up to less than half or more than one "
                    f"and a half times the full weights: {_listed(odd)}.",
                    "See whether these columns belong to the same set of replicates.",
                )
            )
        still = [name for name, rows in zip(self.columns, self.unequal, strict=True) if not rows]
        if still:
            told.append(
                (
                    f"{len(still)} replicate weight(s) equal the full weight in every row: {_listed(still)}.",
                    "Leave out a column that is the full weight under another name.",
                )
            )
        pairs = pd.DataFrame({"mark": self.marks, "total": self.total, "zero": self.zero})
        twins = [self.columns[k] for k in np.flatnonzero(pairs.duplicated().to_numpy())]
        if twins and not still:
            told.append(
                (
                    f"{len(twins)} replicate weight(s) repeat another: {_listed(twins)}.",
                    "See whether a pattern caught two sets of replicates.",
                )
            )
        if self.resurrected:
            told.append(
                (
                    f"{self.resurrected:,} row(s) have full weight 0 and weight in some replicate.",
                    "Replicates and full weights may come from different versions of the extract.",
                )
            )
        if self.negative.any():
            told.append(
                (
                    f"{int(self.negative.sum()):,} replicate weights are negative, in "
                    f"{int((self.negative > 0).sum())} column(s); they are used as they are.",
                    "Some producers have them; ask if yours does.",
                )
            )
        return told + self._unlike(supplied)

    def _unlike(self, supplied: SuppliedReplicates) -> list[tuple[str, str]]:
        """Say so where the replicates spread about the full weights as another method's would."""
        spread = float(np.mean(self.deviation)) / max(self.rows, 1)
        if supplied.method == "jackknife":
            unlike = spread > JACKKNIFE_SPREAD and len(self.columns) > 10
            wanted = "close to 0, as most weights change little in a jackknife"
        else:
            expected = (1 - supplied.fay) ** 2 if supplied.fay is not None else SPREADS.get(supplied.method)
            if expected is None:
                return []
            unlike = not expected / SPREAD_SLACK < spread < expected * SPREAD_SLACK
            wanted = f"{expected:.3g} for {supplied.method}" + (
                f" with the factor {supplied.fay:g}" if supplied.fay is not None else ""
            )
        if not unlike:
            return []
        other = f", Fay's with the factor {1 - spread**0.5:.2f}" if spread < 1 else ""
        return [
            (
                f"The mean of (replicate / full weight - 1)^2 is {spread:.3g}; it would be {wanted}. Such a mean "
                f"belongs to another method or factor{other}.",
                "Check design.replicates.method and fay against the producer's documentation: a wrong factor "
                "multiplies every variance.",
            )
        ]


def _listed(names: Sequence[str]) -> str:
    shown = ", ".join(names[:NAMES_SHOWN])
    return shown + (f" and {len(names) - NAMES_SHOWN} more" if len(names) > NAMES_SHOWN else "")
