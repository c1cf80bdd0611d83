"""The effect as a contrast of the groups' weighted means: their difference, ratio or odds ratio."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.estimate.estimates import Estimates
from steelyard.estimate.likelihood import Likelihood
from steelyard.exposure.group_means import GroupMeans, MeansAsked
from steelyard.outcome.measures import SCALES, outcome_label, refuse_undefined
from steelyard.plan import Outcome

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class OutcomeColumns:
    """From a block to some of its columns, (n, m)."""

    places: tuple[int, ...]

    def __call__(self, block: Block) -> Floats:
        """Return the block's columns; a view where they lie side by side."""
        first, last = self.places[0], self.places[-1]
        if self.places == tuple(range(first, last + 1)):
            return block.columns[:, first : last + 1]
        return block.columns[:, list(self.places)]


def outcome_means_asked(outcomes: tuple[Outcome, ...], places: tuple[int, ...]) -> MeansAsked:
    """Ask for the combined-weight means of the outcomes in each group."""
    names = tuple(outcome_label(outcome, outcomes) for outcome in outcomes)
    return MeansAsked(names, OutcomeColumns(places), "combined")


def contrast(outcome: Outcome, place: int, name: str, means: GroupMeans) -> Estimates:
    """Return one outcome's contrast on the scale of its measure's link.

    ``place`` is the outcome's place in ``means``, which are those of :func:`outcome_means_asked`. The difference of
    means is the coefficient of the exposure in a weighted regression on exposure alone; the ratio and the
    odds ratio likewise, with a log and a logit link.

    Raises
    ------
    EstimationError
        The measure is not defined for these means.
    """
    exposed, reference = means.means[0, place], means.means[1, place]
    refuse_undefined(outcome, float(exposed[0]), float(reference[0]))
    assert isinstance(means.columns, OutcomeColumns)
    column = means.columns.places[place]
    link = Likelihood("gaussian", SCALES[outcome.measure].link)
    of_exposed, of_reference = link.predictor_slope(exposed[:1]), -link.predictor_slope(reference[:1])
    with np.errstate(divide="ignore", invalid="ignore"):
        values = link.predictor(exposed) - link.predictor(reference)
    alone = replace(
        means, names=(name,), columns=OutcomeColumns((column,)), means=means.means[:, place : place + 1]
    )
    return alone.contrasts((name,), values[np.newaxis, :], of_exposed, of_reference)
