"""What follows from a linear mixed model: shares of variance, and predicted effects of clusters."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.linear import LinearFit
from steelyard.outcome.multilevel.linear_influence import solution_in
from steelyard.outcome.multilevel.nested import Nested

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Derived:
    """Functions of the parameters: names, values under each column of weights, and slopes by the parameters.

    ``values`` (k, K); ``slopes`` (P, k) at the full sample: the influence is ``influence of parameters @ slopes``.
    """

    names: tuple[str, ...]
    values: Floats
    slopes: Floats


def intraclass_correlation(fit: LinearFit, at: Sequence[float] | None = None) -> Derived:
    """Return the correlation of two rows of the same cluster (and of the same top cluster), k = 1 or 2.

    Parameters
    ----------
    at : q numbers or None
        Values of the random columns at which both rows stand; None: 1 for the first column, 0 for slopes.

    Notes
    -----
    With three levels: rows of different clusters of a top cluster ``t / (t + g + r)``, of the same cluster
    ``(t + g) / (t + g + r)``; with two, ``g / (g + r)``. r is the residual variance, ``g = z'Gz``, ``t`` the top
    clusters' variance at the random intercept's column.
    """
    z = np.zeros(len(fit.model.random)) if at is None else np.asarray(at, dtype=np.float64)
    if at is None:
        z[0] = 1
    row, column = fit.layout.pairs
    variance = np.zeros((len(fit.names), 3))
    variance[fit.layout.covariances, 0] = np.where(row == column, 1, 2) * z[row] * z[column]
    if fit.model.three:
        variance[-2, 1] = z[0] ** 2
    variance[-1, 2] = 1
    own, top, residual = variance.T @ fit.values
    total = own + top + residual
    by_total = variance.sum(axis=1)
    names, values, slopes = [], [], []
    shares = [(fit.model.levels[0], own + top, variance[:, 0] + variance[:, 1])]
    if fit.model.three:
        shares.insert(0, (fit.model.levels[1], top, variance[:, 1]))
    for name, part, by_part in shares:
        names.append(f"intraclass correlation: {name}")
        values.append(part / total)
        slopes.append((by_part - part[0] / total[0] * by_total) / total[0])
    return Derived(tuple(names), np.array(values), np.column_stack(slopes))


@dataclass(frozen=True)
class ClusterEffects:
    """Predicted effects under the full sample: posterior means and variances given the rows, parameters as estimated.

    Attributes
    ----------
    mean, covariance : (J, q), (J, q, q)
        Of each cluster's effects on the random columns as they are.
    top_mean, top_variance : (T,) or None
        Of each top cluster's effect.
    """

    mean: Floats
    covariance: Floats
    top_mean: Floats | None
    top_variance: Floats | None


def cluster_effects(fit: LinearFit, engine: Engine, rows: Sequence[Nested]) -> ClusterEffects:
    """Return the predicted effects of all clusters, in their order over the runs.

    Notes
    -----
    Empirical Bayes: ``V Z' (Z V Z' + W^-1)^-1 r``, a row of weight w counted as w rows, and
    ``phi (V^-1 + Z'WZ)^-1`` (Rabe-Hesketh & Skrondal 2006); with three levels the uncertainty of the top
    cluster's effect is in the clusters' covariance.
    """
    parts = engine.run(f"{fit.model.what}: effects", rows, EffectsKernel(fit), _joined)
    mean, covariance, top_mean, top_variance = (np.concatenate(p) for p in parts)
    if not fit.model.three:
        return ClusterEffects(mean, covariance, None, None)
    return ClusterEffects(mean, covariance, top_mean, top_variance)


Part = tuple[list[Floats], ...]


@dataclass(frozen=True)
class EffectsKernel:
    """From a run to its clusters' effects and their covariance, and its top clusters' effects and variance."""

    fit: LinearFit

    def __call__(self, run: Nested) -> Part:
        """Return the effects of a run, a list of one each."""
        own, standard = solution_in(self.fit, run), self.fit.standard
        residual = standard.spread**2 * own.phi
        pulled = np.einsum("jab,jb->ja", own.effect, own.zz[:, :, 0])
        through = own.c[own.top, None, None] * (pulled[:, :, np.newaxis] * pulled[:, np.newaxis, :])
        carried = standard.random @ (own.effect + through) @ standard.random.T
        scale = standard.random[0, 0]
        return (
            [standard.spread * own.effects @ standard.random.T],
            [residual * carried],
            [standard.spread * scale * own.top_effect],
            [residual * scale**2 * own.c],
        )


def _joined(left: Part, right: Part) -> Part:
    return tuple(a + b for a, b in zip(left, right, strict=True))
