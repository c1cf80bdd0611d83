"""Every outcome of a plan under one set of combined weights: the groups' means and the effects."""

from __future__ import annotations

from dataclasses import dataclass

from steelyard.data.blocks import Rows
from steelyard.data.passes import Engine
from steelyard.estimate.estimates import Estimates
from steelyard.exposure.balancing import Balancing
from steelyard.exposure.group_means import GroupMeans
from steelyard.exposure.one_pass import sums_in_one_pass
from steelyard.outcome.contrasts import contrast, outcome_means_asked
from steelyard.outcome.multilevel.outcome import MultilevelOutcome, multilevel_outcome
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
    multilevel : for each outcome its MultilevelOutcome, or None
    """

    outcomes: tuple[Outcome, ...]
    means: GroupMeans
    estimates: tuple[Estimates, ...]
    regressions: tuple[OutcomeRegression | None, ...]
    multilevel: tuple[MultilevelOutcome | None, ...]

    @property
    def failed(self) -> dict[int, str]:
        """Columns of weights under which an outcome's model has no solution, and why."""
        failed: dict[int, str] = {}
        for model in (*self.regressions, *self.multilevel):
            if model is not None:
                failed = {
                    **(model.failed if isinstance(model, MultilevelOutcome) else model.fit.failed),
                    **failed,
                }
        return failed


def effects(
    rows: Rows,
    outcomes: tuple[Outcome, ...],
    balancing: Balancing,
    engine: Engine,
    *,
    full: Effects | None = None,
    means: GroupMeans | None = None,
    exposed: str | None = None,
) -> Effects:
    """Estimate the effect on every outcome.

    ``full`` are the effects under column 0 where they are known already: outcome models then start at theirs.
    ``means`` are those that :func:`steelyard.outcome.contrasts.outcome_means_asked` asks for, where a pass has
    found them already. ``exposed`` names the clusters that are exposed as a whole, if any.

    Raises
    ------
    EstimationError
        A measure is not defined for an outcome's means, or an outcome model does not settle.
    """
    if means is None:
        asked = outcome_means_asked(outcomes, rows.outcomes)
        kernels = {"outcomes": asked.kernel}
        sums = sums_in_one_pass("outcomes: means", kernels, balancing, engine, rows.blocks)
        means = asked.made_of(sums["outcomes"])
    estimates, regressions, multilevel = [], [], []
    for place, (outcome, name, model) in enumerate(
        zip(outcomes, means.names, rows.outcome_models, strict=True)
    ):
        regression, levels = None, None
        if model is not None:
            before = None if full is None else full.regressions[place]
            regression = (
                outcome_regression(outcome, name, rows.outcomes[place], model, balancing, engine, rows.blocks)
                if before is None
                else before.under(balancing, engine, rows.blocks)
            )
        if outcome.multilevel is not None:
            known = None if full is None else full.multilevel[place]
            levels = (
                multilevel_outcome(
                    outcome, name, rows.outcomes[place], model, rows, balancing, engine, exposed
                )
                if known is None
                else known.under(balancing, engine)
            )
        if levels is not None:
            estimates.append(levels.effect())
        elif regression is not None:
            estimates.append(regression.effect())
        else:
            estimates.append(contrast(outcome, place, name, means))
        regressions.append(regression)
        multilevel.append(levels)
    return Effects(outcomes, means, tuple(estimates), tuple(regressions), tuple(multilevel))
