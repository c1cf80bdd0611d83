"""Everything a study estimates under some columns of weights, by name: one pass gives all the sums."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.balance.columns import TermColumns
from steelyard.balance.conditions import ConditionsKernel, conditions_of, has_conditions
from steelyard.data.blocks import Block, Rows, Term
from steelyard.data.passes import Engine
from steelyard.estimate.estimates import Estimates
from steelyard.exposure.balancing import Balancing
from steelyard.exposure.group_means import MeansAsked, SumsKernel
from steelyard.exposure.one_pass import RowsKernel, sums_in_one_pass
from steelyard.exposure.propensity import coefficients
from steelyard.outcome.contrasts import contrast, outcome_means_asked
from steelyard.outcome.effects import Effects, effects
from steelyard.plan import Outcome, Plan


@dataclass(frozen=True)
class Groups:
    """What a study estimates under some columns of weights.

    ``estimates`` holds, by name: "propensity"; "before" and "after" (differences of the terms); "effect 0",
    "effect 1", ...; "conditions" where the propensity leaves any; for a multilevel outcome "levels k scaling" (all
    its parameters) and "plain k" (the effect without it); and "ratio k" where the risk ratio beside a difference
    needs no approximation.
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
    columns, every = TermColumns(rows.terms), _EveryColumn.of(rows)
    kernels: dict[str, RowsKernel] = {
        "before": SumsKernel(columns, "sampling"),
        "combined": SumsKernel(every, "combined"),
    }
    derived = _conditions_are_differences(balancing)
    if has_conditions(balancing) and not derived:
        kernels["conditions"] = ConditionsKernel()
    sums = sums_in_one_pass("balance and effects", kernels, balancing, engine, rows.blocks)
    totals, weight = sums["combined"]
    if derived:
        model = totals[:, rows.exposure_model.index, :]
        sums["conditions"] = model[0] - model[1]
    before = MeansAsked(columns.labels, columns, "sampling").made_of(sums["before"])
    after = MeansAsked(columns.labels, columns, "combined").made_of((totals[:, every.of_terms], weight))
    of_outcomes = outcome_means_asked(plan.outcome, rows.outcomes).made_of(
        (totals[:, rows.outcomes, :], weight)
    )
    found = effects(
        rows,
        plan.outcome,
        balancing,
        engine,
        full=None if full is None else full.effects,
        means=of_outcomes,
        exposed=plan.exposure.clusters,
    )
    estimates = {
        "propensity": coefficients(balancing),
        "before": before.differences(),
        "after": after.differences(),
    }
    estimates |= {f"effect {place}": effect for place, effect in enumerate(found.estimates)}
    for place, levels in enumerate(found.multilevel):
        if levels is not None:
            plain = found.regressions[place]
            estimates[f"plain {place}"] = (
                contrast(plan.outcome[place], place, levels.name, found.means)
                if plain is None
                else plain.effect()
            )
            estimates |= {f"levels {place} {scaling}": every for scaling, every in levels.estimates.items()}
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


def _conditions_are_differences(balancing: Balancing) -> bool:
    """Whether the moment conditions are differences of the columns' sums under the combined weights as they are."""
    plain = balancing.share is None and balancing.cap is None and balancing.propensity_range is None
    return has_conditions(balancing) and plain and balancing.fit.scale.centre is None


@dataclass(frozen=True)
class _EveryColumn:
    """From a block to all its columns, then the terms that are products of two: one matrix product sums them all.

    ``of_terms`` gives the place of each term.
    """

    products: tuple[Term, ...]
    of_terms: tuple[int, ...]

    @classmethod
    def of(cls, rows: Rows) -> _EveryColumn:
        products = tuple(term for term in rows.terms if term.times is not None)
        place = {id(term): len(rows.names) + k for k, term in enumerate(products)}
        return cls(products, tuple(place.get(id(term), term.index) for term in rows.terms))

    def __call__(self, block: Block) -> NDArray[np.float64]:
        if not self.products:
            return block.columns
        return np.concatenate([block.columns, TermColumns(self.products)(block)], axis=1)
