"""What the design means for the variance: PSUs by stratum, sampling fractions, degrees of freedom.

Knows nothing of estimates. The figures come from ``Units``, which counts every row of the extract, so a
domain never changes how many PSUs a stratum has.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.units import Units
from steelyard.design.single_psu import VarianceStrata, variance_strata
from steelyard.errors import DesignError

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True)
class SurveyDesign:
    """A design ready for variances.

    A stage is a stage of sampling: 1 draws PSUs within strata, 2 draws units within PSUs, and so on; rows
    are the last. The *peers* of a unit are those drawn together with it: the PSUs of its variance stratum,
    or the units within the same unit above.

    Attributes
    ----------
    units : Units
    group : (H,) int64
        The variance stratum of each stratum: one of its own, or one shared with those it was joined with.
    psus_in_group : (G,) float64
        PSUs of the extract in each variance stratum.
    centred_on_all : (G,) bool
        Variance strata of one PSU whose deviation is taken from the mean of all PSUs.
    next_stage : (G,) bool
        Variance strata whose PSU is certain and has units below it that act as PSUs.
    fractions : tuple of float64 arrays
        Sampling fraction by stage: of the first (G,) for each variance stratum, of a later one for each unit
        above. 0 where no population is given, 1 for a PSU taken with certainty.
    factors : tuple of float64 arrays, one for each stage that the variance has
        What multiplies the squared deviations of units from the mean of their peers: fractions above,
        times ``(1 - f) n / (n - 1)``. Of the same lengths as ``fractions``.
    psus, strata : int
        Counted over variance strata that hold a row of the domain.
    df : float
        Degrees of freedom: PSUs minus variance strata, so counted. A stratum whose PSU is certain brings
        instead the units below the PSU minus one, if those have a variance, else nothing.
    all_psus, all_strata : int
        Counted over the whole extract; strata before any were joined.
    notes : texts for the reader
    """

    units: Units
    group: Integers
    psus_in_group: Floats
    centred_on_all: NDArray[np.bool_]
    next_stage: NDArray[np.bool_]
    fractions: tuple[Floats, ...]
    factors: tuple[Floats, ...]
    psus: int
    strata: int
    df: float
    all_psus: int
    all_strata: int
    notes: tuple[str, ...]

    @property
    def fraction(self) -> Floats:
        """The first-stage sampling fraction of each variance stratum, (G,)."""
        return self.fractions[0]

    @property
    def stages(self) -> int:
        """How many stages of sampling the variance has."""
        return len(self.factors)

    def peers(self, stage: int) -> Integers:
        """Return, for each unit above those of a stage, the place of its group of peers in ``factors``."""
        if stage == 1:
            return self.group
        return np.arange(len(self.units.stages[stage - 1]), dtype=np.int64)


def survey_design(units: Units, single_psu: str = "refuse") -> SurveyDesign:
    """Make the design of some units, with a treatment for strata that have one PSU.

    Parameters
    ----------
    units : Units
    single_psu : {"refuse", "recentre", "collapse", "self-representing"}
        "refuse" stops.

        "recentre" takes the lone PSU's deviation from the mean total of all PSUs of the extract, with 1 in
        place of ``n / (n - 1)``. It brings no degree of freedom.

        "collapse" joins the stratum with the next in order, as if the two had been one stratum; the last
        joins the one before; neighbouring strata that all have one PSU join each other. Populations add up.
        The differences between joined strata count as variance, so it errs upwards.

        "self-representing" takes the PSU as chosen with certainty: its first-stage fraction is 1, it adds
        nothing there, and the clusters of the next stage, where the design has one, act as its PSUs, with
        their own fraction (0 where no population is given).

    Returns
    -------
    SurveyDesign

    Raises
    ------
    DesignError
        A stratum has one PSU and the treatment is "refuse", or nothing is left to estimate a variance from.
    PlanError
        The treatment is none of the four words.

    Notes
    -----
    A stratum whose one PSU is its whole population is certain under every treatment. Sources: Wolter
    (2007), chapter 2; Cochran (1977), section 5A.12, on collapsed strata; Särndal, Swensson & Wretman
    (1992), chapter 4, on later stages.
    """
    sampled = tuple(_sampled_below(units, stage) for stage in range(len(units.stages)))
    strata = variance_strata(units.stages[0], sampled[0].astype(np.int64), single_psu)
    groups = len(strata.certain)
    psus = np.bincount(strata.group, sampled[0], groups).astype(np.float64)
    fractions = _fractions(units, strata, sampled)
    # Below a certain PSU clusters act in its place; rows do so only where their population is given.
    acting = strata.certain & (len(units.stages) > 2 or _rows_below_psus_counted(units))
    if strata.certain.all() and not acting.any():
        raise DesignError(
            f"All {int(psus.sum()):,} PSUs were taken with certainty, and the design names no stage below them: "
            "nothing is left to vary.",
            mend="Name the clusters below the PSUs in design.clusters.",
        )
    factors, notes = _factors(units, strata, (psus, *sampled[1:]), fractions, _stages(units, acting))
    inside = np.bincount(strata.group, units.stages[0].domain_rows, groups) > 0
    df = float((psus - 1)[inside & ~strata.certain].sum())
    if acting.any():
        of_psu = (inside & acting)[strata.group[units.stages[1].parent]]
        df += float((sampled[1] - 1)[of_psu].sum())
    if df <= 0:
        notes.append(
            "The domain leaves no degrees of freedom for a variance: standard errors cannot be trusted."
        )
    return SurveyDesign(
        units=units,
        group=strata.group,
        psus_in_group=psus,
        centred_on_all=strata.centred_on_all,
        next_stage=acting,
        fractions=fractions,
        factors=factors,
        psus=int(psus[inside].sum()),
        strata=int(inside.sum()),
        df=df,
        all_psus=int(psus.sum()),
        all_strata=len(units.stages[0]),
        notes=(*strata.notes, *notes),
    )


def _sampled_below(units: Units, stage: int) -> Floats:
    """Return how many units of the next stage each unit of ``stage`` has in the extract, (U,)."""
    if stage + 1 < len(units.stages):
        return np.bincount(units.stages[stage + 1].parent, minlength=len(units.stages[stage])).astype(float)
    return units.stages[stage].rows.astype(float)


def _fractions(units: Units, strata: VarianceStrata, sampled: tuple[Floats, ...]) -> tuple[Floats, ...]:
    groups = len(strata.certain)
    first = np.zeros(groups)
    population = units.stages[0].population
    if population is not None:
        first = np.bincount(strata.group, sampled[0], groups) / np.bincount(strata.group, population, groups)
    later = [
        np.zeros(len(stage)) if stage.population is None else count / stage.population
        for stage, count in zip(units.stages[1:], sampled[1:], strict=True)
    ]
    return (np.where(strata.certain, 1.0, first), *later)


def _rows_below_psus_counted(units: Units) -> bool:
    return len(units.stages) == 2 and units.stages[1].population is not None


def _stages(units: Units, acting: NDArray[np.bool_]) -> int:
    """Return how many stages add to the variance: one, and those below as far as populations are given."""
    if not (acting.any() or units.stages[0].population is not None):
        return 1
    given = 1
    while given < len(units.stages) and units.stages[given].population is not None:
        given += 1
    return max(given, 2) if acting.any() else given


def _factors(
    units: Units,
    strata: VarianceStrata,
    sampled: tuple[Floats, ...],
    fractions: tuple[Floats, ...],
    stages: int,
) -> tuple[tuple[Floats, ...], list[str]]:
    """Return the factors of each stage, and notes on units that have no peer below the first stage."""
    first = _spread(sampled[0], fractions[0])
    factors, notes = [np.where(strata.centred_on_all, 1 - fractions[0], first)], []
    for stage in range(2, stages + 1):
        above = units.stages[stage - 1]
        if stage == 2:
            group = strata.group[above.parent]
            reach = fractions[0][group]
            if above.population is None:
                reach = np.where(strata.certain[group], reach, 0.0)
        else:
            reach = (reach * fractions[stage - 2])[above.parent]
        factors.append(reach * _spread(sampled[stage - 1], fractions[stage - 1]))
        alone = (reach > 0) & (sampled[stage - 1] == 1) & (fractions[stage - 1] < 1)
        if alone.any():
            notes.append(
                f"{int(alone.sum()):,} unit(s) of stage {stage - 1} have one sampled unit below them: the "
                "next stage adds nothing to the variance there."
            )
    return tuple(factors), notes


def _spread(count: Floats, fraction: Floats) -> Floats:
    """Return ``(1 - f) n / (n - 1)``, and 0 for one unit alone."""
    return np.where(count > 1, (1 - fraction) * count / np.maximum(count - 1, 1), 0.0)
