"""Everything a study estimates, estimated again in every replicate: the covariance that comes of it.

Replicates are taken a few dozen at a time, so that memory does not grow with their number.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Rows
from steelyard.data.passes import Engine
from steelyard.estimate.estimates import Estimates
from steelyard.estimate.fit import refit, replicate_sums
from steelyard.exposure.balancing import Balancing
from steelyard.exposure.propensity import fit_weights, rebalanced
from steelyard.outcome.effects import Effects, effects
from steelyard.plan import Plan
from steelyard.replicates.scheme import Scheme
from steelyard.replicates.variance import Replicated, replicated
from steelyard.results.groups import Groups, groups
from steelyard.results.inference import Inference

Floats = NDArray[np.float64]

# Replicates to a turn: enough for matrix products to pay, few enough for the work to stay in cache.
TOGETHER = 80


@dataclass(frozen=True)
class Turn:
    """Some replicates, ready for any statistic: ``first`` to ``last - 1`` are columns 1, 2, ... of the weights.

    ``balancing`` has the propensity estimated again in each; ``known`` keeps the full sample's.
    """

    first: int
    last: int
    balancing: Balancing
    known: Balancing


def turns(
    scheme: Scheme, made: Balancing, rows: Rows, plan: Plan, engine: Engine, together: int = TOGETHER
) -> Iterator[Turn]:
    """Give the replicates some at a time, with propensity and balancing weights estimated again in each.

    ``made`` are the full sample's balancing weights.
    """
    every = fit_weights(plan.exposure, scheme.columns(0, 0), rows)
    sums = replicate_sums(made.fit, every, engine, rows.blocks)
    for first in range(0, scheme.count, together):
        last = min(first + together, scheme.count)
        sampling = scheme.columns(first, last)
        fit = refit(made.fit, fit_weights(plan.exposure, sampling, rows), engine, rows.blocks, sums)
        balancing = rebalanced(made, plan.exposure, fit, sampling, engine, rows.blocks)
        yield Turn(first, last, balancing, replace(made, sampling=sampling))


@dataclass(frozen=True)
class Replication:
    """What replication found: the joint inference, how it went, and the replicates' balancing weights by turn."""

    inference: Inference
    found: Replicated
    turns: tuple[Turn, ...]


def replication(
    found: Groups, made: Balancing, scheme: Scheme, rows: Rows, plan: Plan, engine: Engine
) -> Replication:
    """Estimate everything again in every replicate; effects also with the propensity held fixed.

    Raises
    ------
    EstimationError
        Too many replicates failed.
    """
    full = found.with_weights_known()
    parts: dict[str, list[Floats]] = {name: [] for name in full}
    failed: dict[int, str] = {}
    taken: list[Turn] = []
    for turn in turns(scheme, made, rows, plan, engine):
        taken.append(turn)
        again = groups(rows, plan, turn.balancing, engine, full=found)
        fixed = effects(rows, plan.outcome, turn.known, engine, full=found.effects)
        estimates = again.estimates | {
            f"effect {place}, propensity known": e for place, e in enumerate(fixed.estimates)
        }
        for name, part in parts.items():
            part.append(estimates[name].values[:, 1:])
        failed |= _failures(turn, again.effects, fixed)
    values = {name: np.concatenate(part, axis=1) for name, part in parts.items()}
    inference, found_again = _concluded(full, values, failed, scheme, plan)
    return Replication(inference, found_again, tuple(taken))


def _concluded(
    full: Mapping[str, Estimates],
    values: Mapping[str, Floats],
    failed: dict[int, str],
    scheme: Scheme,
    plan: Plan,
) -> tuple[Inference, Replicated]:
    needed = [name for name in full if not name.startswith("ratio")]
    stacked = np.concatenate([values[name] for name in needed])
    first = replicated(
        scheme,
        np.concatenate([full[name].full_sample for name in needed]),
        stacked,
        failed,
        plan.variance.most_failed,
    )
    # A ratio that some replicate does not define serves no one else; it is left out rather than the replicate.
    left = [r for r in range(scheme.count) if r not in first.failed]
    names = [name for name in full if np.isfinite(values[name][:, left]).all()]
    found = replace(
        first,
        full=np.concatenate([full[name].full_sample for name in names]),
        values=np.concatenate([values[name] for name in names]),
    )
    return Inference({name: full[name] for name in names}, found.covariance()), found


def _failures(turn: Turn, *found: Effects) -> dict[int, str]:
    """Return the replicates that have no solution, and why: the propensity's reason goes before an outcome's."""
    by_column = dict(turn.balancing.failed)
    for effects_found in found:
        by_column = {**effects_found.failed, **by_column}
    return {turn.first + column - 1: why for column, why in by_column.items()}
