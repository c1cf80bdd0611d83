"""The units that replicates vary: PSUs, or what acts as PSUs, within the strata of the variance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.design.survey import SurveyDesign
from steelyard.errors import DesignError, PlanError

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True)
class ReplicationUnits:
    """The units that replicates vary, V of them, in G strata.

    Attributes
    ----------
    of_last : (U,) int64 or None
        The unit of each unit of the design's last stage, V where nothing varies it. None where every row is
        a unit of its own, numbered by its place in the extract.
    stratum : (V,) int64
    sizes : (G,) int64
        Units in each stratum.
    fractions : (G,)
        Sampling fractions of the units.
    lone : (G,) bool
        Strata of one unit, whose deviation is taken from the mean of all PSUs.
    first_rows : (V,) int64
        The first row of the extract in each unit.
    all_psus : int
        PSUs of the extract, certain ones included.
    labels : (G,) str
        Of the strata, for messages.
    notes : texts for the reader
    """

    of_last: Integers | None
    stratum: Integers
    sizes: Integers
    fractions: Floats
    lone: NDArray[np.bool_]
    first_rows: Integers
    all_psus: int
    labels: NDArray[np.str_]
    notes: tuple[str, ...] = ()

    @property
    def count(self) -> int:
        """How many units there are, V."""
        return len(self.stratum)

    def refuse_lone(self, why: str) -> None:
        """Refuse strata of one unit whose deviation is taken from the mean of all: ``why`` ends the message.

        Raises
        ------
        DesignError
            With the first such stratum.
        """
        if self.lone.any():
            where = self.labels[np.flatnonzero(self.lone)[0]]
            raise DesignError(
                f"{int(self.lone.sum()):,} stratum(s) of one PSU are recentred, {where} first: {why}.",
                mend='Set design.single_psu = "collapse", or variance.method = "jackknife".',
            )

    def of(self, block: Block) -> Integers:
        """Return the unit of each row of a block, (n,)."""
        return block.position if self.of_last is None else self.of_last[block.unit]


def replication_units(design: SurveyDesign, row_strata: Integers | None = None) -> ReplicationUnits:
    """Return the units that replicates of a design vary.

    Parameters
    ----------
    row_strata : (rows of the extract,) int64, for a design without clusters
        The stratum of every row.

    Raises
    ------
    PlanError
        The rows below PSUs taken with certainty would have to be varied one by one.

    Notes
    -----
    Replicates vary first-stage units only, as ultimate clusters (Wolter 2007, section 1.4). Below a PSU taken
    with certainty the clusters of the next stage take its place, with their own sampling fraction.
    """
    if not design.units.clustered:
        assert row_strata is not None
        return _rows_as_units(design, row_strata)
    strata, psus = design.units.stages[0], design.units.stages[1]
    group = design.group[psus.parent]
    certain = (design.fraction == 1) & (design.psus_in_group == 1)
    below = design.next_stage[group]
    if below.any() and len(design.units.stages) < 3:
        raise PlanError(
            f"In {int(below.sum())} PSU(s) taken with certainty single rows act as PSUs, and replicates vary clusters.",
            mend='Name the clusters below the PSUs in design.clusters, or set variance.method = "linearization".',
        )
    varied = np.flatnonzero(~certain[group])
    number = np.full(len(psus), -1, dtype=np.int64)
    number[varied] = np.arange(len(varied))
    stratum, first_rows = group[varied], psus.first_rows[varied]
    of_stage = number
    sizes, fractions = design.psus_in_group.astype(np.int64), design.fraction
    names = _group_labels(design.group, strata.labels, len(sizes))
    of_last = number[design.units.ancestor(1)]
    if below.any():
        clusters = design.units.stages[2]
        inside = np.flatnonzero(below[clusters.parent])
        of_stage = np.full(len(clusters), -1, dtype=np.int64)
        of_stage[inside] = len(varied) + np.arange(len(inside))
        acting = np.unique(clusters.parent[inside])
        place = np.searchsorted(acting, clusters.parent[inside])
        stratum = np.concatenate([stratum, len(sizes) + place])
        first_rows = np.concatenate([first_rows, clusters.first_rows[inside]])
        sizes = np.concatenate([sizes, np.bincount(place)])
        fractions = np.concatenate([fractions, design.fractions[1][acting]])
        names = np.concatenate([names, psus.labels[acting]])
        of_last = np.where(of_last >= 0, of_last, of_stage[design.units.ancestor(2)])
    # A cluster that is alone below its PSU, or the whole population there, varies with nothing.
    still = (sizes[stratum] < 2) & ~_padded(design.centred_on_all, len(sizes))[stratum]
    count = len(stratum)
    of_last = np.where(of_last < 0, count, of_last)
    if still.any():
        keep = np.cumsum(~still) - 1
        renumber = np.append(np.where(still, (~still).sum(), keep), (~still).sum())
        of_last = renumber[of_last]
        stratum, first_rows = stratum[~still], first_rows[~still]
    return ReplicationUnits(
        of_last,
        stratum,
        sizes,
        fractions,
        _padded(design.centred_on_all, len(sizes)),
        first_rows,
        design.all_psus,
        names,
        _notes(design),
    )


def _rows_as_units(design: SurveyDesign, row_strata: Integers) -> ReplicationUnits:
    group = design.group[row_strata]
    return ReplicationUnits(
        None,
        group,
        design.psus_in_group.astype(np.int64),
        design.fraction,
        design.centred_on_all,
        np.arange(len(group), dtype=np.int64),
        design.all_psus,
        _group_labels(design.group, design.units.stages[0].labels, len(design.psus_in_group)),
        _notes(design),
    )


def _notes(design: SurveyDesign) -> tuple[str, ...]:
    if design.stages > 1 and design.units.stages[0].population is not None:
        return (
            "Replicates vary the PSUs and leave out what later stages add to the variance where populations are "
            "given; linearization counts it.",
        )
    return ()


def _padded(flags: NDArray[np.bool_], size: int) -> NDArray[np.bool_]:
    return np.concatenate([flags, np.zeros(size - len(flags), dtype=np.bool_)])


def _group_labels(group: Integers, labels: NDArray[np.str_], size: int) -> NDArray[np.str_]:
    """Return what to call each variance stratum: the first of the strata it joins."""
    first = np.zeros(size, dtype=np.int64)
    first[group[::-1]] = np.arange(len(group))[::-1]
    return np.asarray(labels[first])
