"""Every outcome of a plan under one set of combined weights: the groups' means and the effects."""

from __future__ import annotations

from dataclasses import dataclass

from steelyard.data.blocks import Rows
from steelyard.data.passes import Engine
from steelyard.estimate.estimates import Estimates
from steelyard.exposure.balancing import Balancing
from steelyard.exposure.group_means import GroupMeans
from steelyard.outcome.contrasts import contrast, outcome_means
from steelyard.outcome.measures import outcome_label
from steelyard.outcome.regression import OutcomeRegression, outcome_regression
from steelyard.plan import Outcome


@dataclass(frozen=True)
class Effects:
    """The effects of all outcomes of a plan.

    Attributes
    ----------
    outcomes : m outcomes of the plan
    means : GroupMeans
        Of the m outcomes, under the combined weights.
    estimates : m Estimates of one effect each, on the scale of the measure's link
    regressions : for each outcome its OutcomeRegression, or None where it has no covariates
    """

    outcomes: tuple[Outcome, ...]
    means: GroupMeans
    estimates: tuple[Estimates, ...]
    regressions: tuple[OutcomeRegression | None, ...]


def effects(rows: Rows, outcomes: tuple[Outcome, ...], balancing: Balancing, engine: Engine) -> Effects:
    """Estimate the effect on every outcome.

    Raises
    ------
    EstimationError
        A measure is not defined for an outcome's means, or an outcome model does not settle.
    """
    names = tuple(outcome_label(outcome, outcomes) for outcome in outcomes)
    means = outcome_means(names, rows.outcomes, balancing, engine, rows.blocks)
    estimates, regressions = [], []
    for place, (outcome, name, model) in enumerate(zip(outcomes, names, rows.outcome_models, strict=True)):
        if model is None:
            regression = None
            estimates.append(contrast(outcome, place, name, means))
        else:
            regression = outcome_regression(
                outcome, name, rows.outcomes[place], model, balancing, engine, rows.blocks
            )
            estimates.append(regression.effect())
        regressions.append(regression)
    return Effects(outcomes, means, tuple(estimates), tuple(regressions))
