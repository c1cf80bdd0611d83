"""What to do with a stratum that has one PSU: from strata to the strata of the variance.

Knows the four treatments and says which strata they touched. Refuses to know what a variance is.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.units import Stage
from steelyard.errors import DesignError, PlanError

Integers = NDArray[np.int64]
Bools = NDArray[np.bool_]

TREATMENTS = ("refuse", "recentre", "collapse", "self-representing")
LABELS_SHOWN = 5


@dataclass(frozen=True)
class VarianceStrata:
    """The strata that a variance is taken within.

    Attributes
    ----------
    group : (H,) int64
        The variance stratum of each stratum: one of its own, or one shared with those it was joined with.
    centred_on_all : (G,) bool
        Variance strata of one PSU whose deviation is taken from the mean of all PSUs.
    certain : (G,) bool
        Variance strata whose one PSU was taken with certainty.
    notes : texts for the reader
    """

    group: Integers
    centred_on_all: Bools
    certain: Bools
    notes: tuple[str, ...]


def variance_strata(strata: Stage, psus: Integers, single_psu: str) -> VarianceStrata:
    """Return the variance strata of a design.

    Parameters
    ----------
    strata : Stage
    psus : (H,) int64
        PSUs that each stratum has in the extract.
    single_psu : {"refuse", "recentre", "collapse", "self-representing"}
        See :func:`steelyard.design.survey.survey_design`.

    Raises
    ------
    DesignError
        A stratum has one PSU and the treatment is "refuse", or there is nothing to compare it with.
    PlanError
        The treatment is none of the four words.
    """
    if single_psu not in TREATMENTS:
        raise PlanError(f'single_psu is "{single_psu}".', mend=f"It is one of {', '.join(TREATMENTS)}.")
    certain = np.zeros(len(strata), dtype=np.bool_)
    if strata.population is not None:
        certain = (psus == 1) & (strata.population == 1)
    lone = (psus == 1) & ~certain
    notes = []
    if certain.any():
        notes.append(
            f"{int(certain.sum()):,} stratum(s) have one PSU that is the whole population there "
            f"({_some(strata.labels[certain])}): taken with certainty, without a first-stage variance."
        )
    group = np.arange(len(strata), dtype=np.int64)
    centred = np.zeros(len(strata), dtype=np.bool_)
    if not lone.any():
        return VarianceStrata(group, centred, certain, tuple(notes))
    if single_psu == "refuse":
        raise _refusal(strata, lone)
    if single_psu != "self-representing":
        _refuse_nothing_to_compare(strata, psus, lone, certain, single_psu)
    named = f"{int(lone.sum()):,} stratum(s) have one PSU ({_some(strata.labels[lone])}): "
    if single_psu == "recentre":
        notes.append(f"{named}the lone PSU's deviation is taken from the mean of all PSUs.")
        return VarianceStrata(group, lone, certain, tuple(notes))
    if single_psu == "self-representing":
        notes.append(f"{named}taken as chosen with certainty, without a first-stage variance.")
        return VarianceStrata(group, centred, certain | lone, tuple(notes))
    group = _collapsed(lone, certain)
    joined = [" with ".join(strata.labels[group == g]) for g in np.unique(group[lone])]
    notes.append(
        f"{int(lone.sum()):,} stratum(s) with one PSU were joined with a neighbour: {_some(joined, '; ')}."
    )
    groups = int(group.max()) + 1
    of_group = np.zeros(groups, dtype=np.bool_)
    of_group[group[certain]] = True
    return VarianceStrata(group, np.zeros(groups, dtype=np.bool_), of_group, tuple(notes))


def _collapsed(lone: Bools, certain: Bools) -> Integers:
    """Return the variance stratum of each stratum; certain strata stand apart and are nobody's neighbour.

    A run of lone strata joins together; one by itself joins the next, or, the last, the one before.
    """
    group = np.full(len(lone), -1, dtype=np.int64)
    places = np.flatnonzero(~certain).tolist()
    count, at = 0, 0
    while at < len(places):
        run = 0
        while at + run < len(places) and lone[places[at + run]]:
            run += 1
        members = places[at : at + (2 if run == 1 else max(run, 1))]
        if run == 1 and len(members) == 1:
            group[members] = count - 1
        else:
            group[members] = count
            count += 1
        at += len(members)
    group[certain] = count + np.arange(int(certain.sum()))
    return group


def _refuse_nothing_to_compare(
    strata: Stage, psus: Integers, lone: Bools, certain: Bools, single_psu: str
) -> None:
    peers = psus if single_psu == "recentre" else psus[~certain]
    if peers.sum() > 1:
        return
    wanting = "nothing to join it with" if single_psu == "collapse" else "no other PSU to compare it with"
    raise DesignError(
        f"Stratum {strata.labels[lone][0]} has one PSU ({int(strata.rows[lone][0]):,} rows), and there is "
        f"{wanting}.",
        mend="Check design.clusters: a variance needs at least two PSUs. If the PSU was taken with certainty, "
        'name the clusters below it and set design.single_psu to "self-representing".',
    )


def _refusal(strata: Stage, lone: Bools) -> DesignError:
    named = [f"{strata.labels[h]} ({int(strata.rows[h]):,} rows)" for h in np.flatnonzero(lone)]
    return DesignError(
        f"{int(lone.sum()):,} of {len(strata):,} strata have one PSU: {_some(named)}. One PSU says nothing about "
        "the variance in its stratum.",
        mend='Set design.single_psu to "recentre", "collapse" or "self-representing", or join strata that '
        "were drawn together.",
    )


def _some(labels: Iterable[str], between: str = ", ") -> str:
    named = [str(label) for label in labels]
    more = len(named) - LABELS_SHOWN
    return between.join(named[:LABELS_SHOWN]) + (f"{between}and {more:,} more" if more > 0 else "")
