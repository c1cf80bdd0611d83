"""What the design means for the variance: PSUs by stratum, sampling fractions, and strata with one PSU.

Knows nothing of estimates. The figures come from ``Units``, which counts every row of the extract, so a
domain never changes how many PSUs a stratum has.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.units import Units
from steelyard.errors import DesignError

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

LABELS_SHOWN = 5


@dataclass(frozen=True)
class SurveyDesign:
    """A design ready for variances.

    Attributes
    ----------
    units : Units
    group : (H,) int64
        The variance stratum of each stratum: itself, or the one it was collapsed into.
    psus_in_group : (G,) float64
        PSUs sampled in each variance stratum.
    fraction : (G,) float64
        First-stage sampling fraction; 0 where no population is given, 1 where PSUs are certain.
    centred_on_all : (G,) bool
        Variance strata of one PSU whose deviation is taken from the mean of all PSUs.
    next_stage : (G,) bool
        Variance strata whose PSU is certain, so that the units below act as its PSUs.
    psus, strata : int
        Counted over variance strata that hold at least one row of the domain.
    df : float
        PSUs minus strata, so counted; a certain PSU counts through the units that act in its place.
    all_psus, all_strata : int
        Counted over the whole extract.
    stages : int
        How many stages of sampling the variance has.
    notes : texts for the reader
    """

    units: Units
    group: Integers
    psus_in_group: Floats
    fraction: Floats
    centred_on_all: NDArray[np.bool_]
    next_stage: NDArray[np.bool_]
    psus: int
    strata: int
    df: float
    all_psus: int
    all_strata: int
    stages: int
    notes: tuple[str, ...]


def survey_design(units: Units, single_psu: str = "refuse") -> SurveyDesign:
    """Make the design of some units, with a treatment for strata that have one PSU.

    Parameters
    ----------
    units : Units
    single_psu : {"refuse", "recentre", "collapse", "self-representing"}
        "refuse" stops. "recentre" takes the lone PSU's deviation from the mean of all PSU totals.
        "collapse" joins the stratum with the next in order (the last one with the one before), as if
        both had been one stratum. "self-representing" takes the PSU as chosen with certainty: it adds
        nothing at the first stage, and the clusters of the next stage, where there are any, act as its
        PSUs (Wolter 2007, chapter 2; Cochran 1977, section 5A.12).

    Returns
    -------
    SurveyDesign
        A stratum whose one PSU is its whole population is certain under every treatment.

    Raises
    ------
    DesignError
        A stratum has one PSU and the treatment is "refuse", or nothing is left to estimate a variance from.
    """
    strata = units.stages[0]
    sampled = psus_by_stratum(units)
    population = strata.population
    notes: list[str] = []
    lone = sampled == 1
    certain = lone & (population == 1) if population is not None else np.zeros(len(strata), dtype=bool)
    if certain.any():
        notes.append(
            f"{int(certain.sum())} stratum(s) have one PSU that is their whole population "
            f"({_some(strata.labels[certain])}): certain, without a first-stage variance."
        )
    lone = lone & ~certain
    if lone.any() and single_psu == "refuse":
        _refuse(units, lone)
    group = np.arange(len(strata), dtype=np.int64)
    if lone.any() and single_psu == "collapse":
        group = _collapsed(sampled, certain)
        notes.append(_collapse_note(strata.labels, group, lone))
    groups = int(group.max()) + 1
    psus = np.bincount(group, sampled, groups).astype(np.float64)
    of_group = np.bincount(group, certain, groups) > 0
    still_lone = (psus == 1) & ~of_group
    centred = np.zeros(groups, dtype=bool)
    if still_lone.any() and single_psu == "recentre":
        centred = still_lone
        notes.append(
            f"{int(still_lone.sum())} stratum(s) have one PSU ({_some(strata.labels[lone])}): its deviation "
            "is taken from the mean of all PSUs."
        )
    elif still_lone.any() and single_psu == "self-representing":
        of_group = of_group | still_lone
        notes.append(
            f"{int(still_lone.sum())} stratum(s) have one PSU ({_some(strata.labels[lone])}), taken as "
            "chosen with certainty: no first-stage variance."
        )
    elif still_lone.any():
        raise DesignError(
            "The design has one stratum with one PSU, and nothing to join it with.",
            mend="Check design.clusters: a variance needs at least two PSUs.",
        )
    fraction = _fractions(group, groups, psus, population)
    fraction[of_group] = 1.0
    next_stage = of_group & (len(units.stages) > 2)
    stages = _stages(units, next_stage)
    notes += _lone_below(units, stages)
    inside = np.bincount(group, strata.domain_rows, groups) > 0
    df = float(psus[inside & ~of_group].sum() - (inside & ~of_group).sum())
    df += _df_below(units, group, next_stage & inside)
    if df <= 0:
        notes.append(
            "The domain leaves no degrees of freedom for a variance: standard errors cannot be trusted."
        )
    return SurveyDesign(
        units=units,
        group=group,
        psus_in_group=psus,
        fraction=fraction,
        centred_on_all=centred,
        next_stage=next_stage,
        psus=int(psus[inside].sum()),
        strata=int(inside.sum()),
        df=df,
        all_psus=int(psus.sum()),
        all_strata=groups,
        stages=stages,
        notes=tuple(notes),
    )


def psus_by_stratum(units: Units) -> Integers:
    """Return how many PSUs each stratum has in the extract, (H,); rows where there are no clusters."""
    if units.clustered:
        return np.bincount(units.stages[1].parent, minlength=len(units.stages[0])).astype(np.int64)
    return units.stages[0].rows


def sampled_below(units: Units, stage: int) -> Floats:
    """Return how many units of the next stage each unit of ``stage`` has in the extract, (U,)."""
    if stage + 1 < len(units.stages):
        return np.bincount(units.stages[stage + 1].parent, minlength=len(units.stages[stage])).astype(float)
    return units.stages[stage].rows.astype(float)


def _stages(units: Units, next_stage: NDArray[np.bool_]) -> int:
    """Return how many stages add to the variance: one, and those below as far as populations are given."""
    stages = 2 if next_stage.any() else 1
    given = units.stages[0].population is not None
    for place, stage in enumerate(units.stages[1:], start=2):
        if stage.population is None or not (given or next_stage.any()):
            break
        stages = place
    return stages


def _fractions(group: Integers, groups: int, psus: Floats, population: Floats | None) -> Floats:
    if population is None:
        return np.zeros(groups)
    return np.asarray(psus / np.bincount(group, population, groups))


def _refuse(units: Units, lone: NDArray[np.bool_]) -> None:
    strata = units.stages[0]
    named = ", ".join(
        f"{strata.labels[h]} ({int(strata.rows[h]):,} rows)" for h in np.flatnonzero(lone)[:LABELS_SHOWN]
    )
    more = int(lone.sum()) - LABELS_SHOWN
    raise DesignError(
        f"{int(lone.sum())} of {len(strata)} strata have one PSU: {named}"
        f"{f' and {more} more' if more > 0 else ''}. One PSU says nothing about the variance in its stratum.",
        mend='Set design.single_psu to "recentre", "collapse" or "self-representing", or join strata that '
        "were drawn together.",
    )


def _collapsed(sampled: Integers, certain: NDArray[np.bool_]) -> Integers:
    """Join runs of strata, in order, until each has two PSUs; certain strata stand apart."""
    group = np.zeros(len(sampled), dtype=np.int64)
    current: int = 0
    held, last_full = 0, -1
    for h, count in enumerate(sampled.tolist()):
        if certain[h]:
            continue
        group[h] = current
        held += count
        if held > 1:
            last_full, held = current, 0
            current = current + 1
    if held and last_full >= 0:
        group[group == current] = last_full
    elif held:
        current += 1
    for h in np.flatnonzero(certain).tolist():
        group[h] = current
        current += 1
    return np.unique(group, return_inverse=True)[1].astype(np.int64)


def _collapse_note(labels: NDArray[np.str_], group: Integers, lone: NDArray[np.bool_]) -> str:
    joined = [" with ".join(labels[group == g]) for g in np.unique(group[lone])]
    return f"{int(lone.sum())} stratum(s) with one PSU were joined with a neighbour: {_some(joined)}."


def _lone_below(units: Units, stages: int) -> list[str]:
    notes = []
    for stage in range(1, stages):
        below, population = sampled_below(units, stage), units.stages[stage].population
        alone = below == 1
        if population is not None:
            alone &= population > 1
        if alone.any():
            notes.append(
                f"{int(alone.sum())} unit(s) of stage {stage} have one sampled unit below them: the next "
                "stage adds nothing to the variance there."
            )
    return notes


def _df_below(units: Units, group: Integers, certain: NDArray[np.bool_]) -> float:
    """Return the degrees of freedom that the units below certain PSUs bring."""
    if not certain.any():
        return 0.0
    psu_group = group[units.stages[1].parent]
    below = sampled_below(units, 1)[certain[psu_group]]
    return float((below - 1).sum())


def _some(labels: Iterable[str]) -> str:
    named = [str(label) for label in labels]
    return ", ".join(named[:LABELS_SHOWN]) + (", ..." if len(named) > LABELS_SHOWN else "")
