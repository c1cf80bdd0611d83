"""Everything a study estimates under some columns of weights, by name: one pass gives all the sums."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from steelyard.balance.columns import TermColumns
from steelyard.balance.conditions import ConditionsKernel, conditions_of, has_conditions
from steelyard.data.blocks import Rows
from steelyard.data.passes import Engine
from steelyard.estimate.estimates import Estimates
from steelyard.exposure.balancing import Balancing
from steelyard.exposure.group_means import MeansAsked
from steelyard.exposure.one_pass import RowsKernel, sums_in_one_pass
from steelyard.exposure.propensity import coefficients
from steelyard.outcome.contrasts import contrast, outcome_means_asked
from steelyard.outcome.effects import Effects, effects
from steelyard.plan import Outcome, Plan


@dataclass(frozen=True)
class Groups:
    """What a study estimates under some columns of weights.

    ``estimates`` holds, by name, "propensity", "before" and "after" (differences of the terms), "effect 0",
    "effect 1", ..., "conditions" where the propensity leaves any, and "ratio k" where the risk ratio beside a
    difference needs no approximation.
    """

    effects: Effects
    estimates: dict[str, Estimates]

    def with_weights_known(self) -> dict[str, Estimates]:
        """Return all estimates, and the effects once more with the propensity taken as known."""
        known = {f"{name}, propensity known": e.with_weights_known() for name, e in self.of_effects.items()}
        return self.estimates | known

    @property
    def of_effects(self) -> dict[str, Estimates]:
        """The effects alone."""
        return {name: e for name, e in self.estimates.items() if name.startswith("effect ")}


def groups(
    rows: Rows, plan: Plan, balancing: Balancing, engine: Engine, full: Groups | None = None
) -> Groups:
    """Estimate everything whose covariance is wanted; ``full`` holds what is known under column 0.

    Raises
    ------
    EstimationError
        See :func:`steelyard.outcome.effects.effects`.
    """
    columns = TermColumns(rows.terms)
    asked = {
        "before": MeansAsked(columns.labels, columns, "sampling"),
        "after": MeansAsked(columns.labels, columns, "combined"),
        "outcomes": outcome_means_asked(plan.outcome, rows.outcomes),
    }
    kernels: dict[str, RowsKernel] = {name: means.kernel for name, means in asked.items()}
    if has_conditions(balancing):
        kernels["conditions"] = ConditionsKernel()
    sums = sums_in_one_pass("balance and effects", kernels, balancing, engine, rows.blocks)
    means = {name: of.made_of(sums[name]) for name, of in asked.items()}
    found = effects(
        rows,
        plan.outcome,
        balancing,
        engine,
        full=None if full is None else full.effects,
        means=means["outcomes"],
    )
    estimates = {
        "propensity": coefficients(balancing),
        "before": means["before"].differences(),
        "after": means["after"].differences(),
    }
    estimates |= {f"effect {place}": effect for place, effect in enumerate(found.estimates)}
    if "conditions" in sums:
        estimates["conditions"] = conditions_of(balancing, sums["conditions"])
    for place in _ratio_places(plan.outcome, found):
        outcome = replace(plan.outcome[place], measure="ratio")
        estimates[f"ratio {place}"] = contrast(outcome, place, outcome.name, found.means)
    return Groups(found, estimates)


def _ratio_places(outcomes: tuple[Outcome, ...], found: Effects) -> list[int]:
    """Return the outcomes whose difference has a risk ratio beside it that needs no approximation."""
    means = found.means.means[:, :, 0]
    return [
        place
        for place, outcome in enumerate(outcomes)
        if outcome.measure == "difference"
        and outcome.family != "gaussian"
        and not outcome.covariates
        and np.all(means[:, place] > 0)
    ]
