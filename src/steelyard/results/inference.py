"""Many estimates, one pass, one covariance: where estimates and the design meet."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Rows
from steelyard.data.passes import Engine
from steelyard.design.linearization import covariance
from steelyard.design.survey import SurveyDesign
from steelyard.estimate.estimates import Estimates
from steelyard.exposure.balancing import Balancing
from steelyard.exposure.weighing import stacked

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Inference:
    """Named groups of estimates with their joint design-based covariance.

    ``of(name)`` gives a group's full-sample values (k,) and their covariance (k, k).
    """

    estimates: Mapping[str, Estimates]
    joint: Floats

    def of(self, name: str) -> tuple[Floats, Floats]:
        """Return a group's values and covariance."""
        first = 0
        for other, estimates in self.estimates.items():
            if other == name:
                places = slice(first, first + len(estimates.names))
                return estimates.full_sample, self.joint[places, places]
            first += len(estimates.names)
        raise KeyError(name)


def linearized(
    estimates: Mapping[str, Estimates],
    balancing: Balancing,
    design: SurveyDesign,
    rows: Rows,
    engine: Engine,
) -> Inference:
    """Return the linearized covariance of all groups of estimates, from one pass over their influences."""
    influence = stacked(balancing, list(estimates.values()))
    return Inference(estimates, covariance(design, rows, engine, influence, "linearized variance"))
