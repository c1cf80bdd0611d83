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
from steelyard.exposure.influence import joint_influence

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Inference:
    """Named groups of estimates with their joint design-based covariance.

    ``of(name, ...)`` gives the full-sample values (k,) of one or more groups and their covariance (k, k).
    """

    estimates: Mapping[str, Estimates]
    joint: Floats

    def of(self, *names: str) -> tuple[Floats, Floats]:
        """Return the values and the covariance of some groups together."""
        ends = np.cumsum([len(estimates.names) for estimates in self.estimates.values()])
        end = dict(zip(self.estimates, ends.tolist(), strict=True))
        places = np.concatenate(
            [np.arange(end[name] - len(self.estimates[name].names), end[name]) for name in names]
        )
        values = np.concatenate([self.estimates[name].full_sample for name in names])
        return values, self.joint[np.ix_(places, places)]


def linearized(
    estimates: Mapping[str, Estimates],
    balancing: Balancing,
    design: SurveyDesign,
    rows: Rows,
    engine: Engine,
) -> Inference:
    """Return the linearized covariance of all groups of estimates together."""
    influence = joint_influence(list(estimates.values()), balancing, engine, rows.blocks)
    return Inference(estimates, covariance(design, rows, engine, influence, "linearized variance"))
