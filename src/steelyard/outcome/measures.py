"""Measures of effect: the link on which each is a difference, and how to come back from it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.errors import EstimationError
from steelyard.plan import Outcome

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class MeasureScale:
    """A measure is a difference of ``link(mean)``; ``exponential`` says that its exponential is reported."""

    link: str
    exponential: bool
    low: float
    high: float


SCALES = {
    "difference": MeasureScale("identity", False, -np.inf, np.inf),
    "ratio": MeasureScale("log", True, 0.0, np.inf),
    "odds-ratio": MeasureScale("logit", True, 0.0, 1.0),
}


def refuse_undefined(outcome: Outcome, exposed: float, reference: float) -> None:
    """Refuse a ratio of means that are not positive, or odds of means at 0 or 1.

    Raises
    ------
    EstimationError
        Naming the outcome, the group and its mean.
    """
    scale = SCALES[outcome.measure]
    for group, mean in (("exposed", exposed), ("reference", reference)):
        if not scale.low < mean < scale.high:
            raise EstimationError(
                f'outcome "{outcome.name}": the weighted mean of the {group} is {mean:g}, and the '
                f"{outcome.measure} needs one between {scale.low:g} and {scale.high:g}.",
                mend='Ask for measure = "difference", or check the outcome\'s codes.',
            )


def outcome_label(outcome: Outcome, outcomes: tuple[Outcome, ...]) -> str:
    """Return the outcome's name, with what tells it apart where the plan asks for it more than once."""
    same = [other for other in outcomes if other.name == outcome.name]
    if len(same) == 1:
        return outcome.name
    adjusted = ", adjusted" if outcome.covariates else ""
    if outcome.multilevel is not None:
        adjusted += ", multilevel"
    return f"{outcome.name} ({outcome.measure}{adjusted})"
