"""Predicted cluster effects: posterior means and standard deviations of the random effects, parameters held."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.integrals import Integral
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear
from steelyard.outcome.multilevel.nonlinear_fit import NonlinearFit
from steelyard.outcome.multilevel.pieces import parts, prepared

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class ClusterEffects:
    """Effects of clusters, and of top clusters where there are any, in the order of the runs.

    Attributes
    ----------
    mean, sd : (J, q)
        Posterior means and standard deviations on the scale of the linear predictor.
    top_mean, top_sd : (T,), empty for two levels
    """

    mean: Floats
    sd: Floats
    top_mean: Floats
    top_sd: Floats


@dataclass(frozen=True)
class _Effects:
    model: Nonlinear
    theta: Floats

    def __call__(self, run: Nested) -> tuple[Floats, Floats, Floats, Floats]:
        found = []
        for part in parts(self.model, run, self.model.points):
            source = prepared(self.model, run, part, 0).source(self.theta, self.model.points)
            if isinstance(source, Integral):
                mean, covariance = source.moments()
                variance = np.stack([covariance[d, d] for d in range(len(mean))])
                found.append((mean.T, np.sqrt(variance).T, np.zeros(0), np.zeros(0)))
            else:
                of_cluster, variance, of_top, top_variance = source.moments()
                sd = np.sqrt(variance)[:, np.newaxis]
                found.append((of_cluster[:, np.newaxis], sd, of_top, np.sqrt(top_variance)))
        return _stacked(*found)


def cluster_effects(fit: NonlinearFit, runs: Sequence[Nested], engine: Engine) -> ClusterEffects:
    """Return predicted effects under column 0.

    Notes
    -----
    Empirical Bayes (Rabe-Hesketh & Skrondal 2009, Journal of the Royal Statistical Society A 172): moments of the
    posterior under the weights of the fit, by the same nodes. The standard deviations leave out that the
    parameters are estimated.
    """
    kernel = _Effects(fit.model, fit.theta[:, 0])
    return ClusterEffects(*engine.run(f"{fit.model.what}: cluster effects", runs, kernel, _stacked))


def _stacked(*found: tuple[Floats, Floats, Floats, Floats]) -> tuple[Floats, Floats, Floats, Floats]:
    mean, sd, top_mean, top_sd = (np.concatenate(parts) for parts in zip(*found, strict=True))
    return mean, sd, top_mean, top_sd
