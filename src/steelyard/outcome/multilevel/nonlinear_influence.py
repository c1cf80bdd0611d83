"""The influence of top-most clusters on a nonlinear fit, and how its equations move with the weights."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear
from steelyard.outcome.multilevel.nonlinear_fit import NonlinearFit
from steelyard.outcome.multilevel.observed import DIFFERENCE, moved
from steelyard.outcome.multilevel.pieces import parts, prepared

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class TopScores:
    """From a run to the weighted score of each of its top-most clusters under column 0, (T, P)."""

    model: Nonlinear
    theta: Floats

    def __call__(self, run: Nested) -> Floats:
        """Return ``w_k d log L_k / d theta``."""
        weight = self.model.top_weights(run)
        return np.concatenate(
            [
                weight[part.tops, :1]
                * prepared(self.model, run, part, 0).at(self.theta, self.model.points).scores()
                for part in parts(self.model, run, self.model.points)
            ]
        )


def scores(fit: NonlinearFit, runs: Sequence[Nested], engine: Engine) -> Floats:
    """Return the weighted scores of all top-most clusters, in the order of the runs, (T, P); they add to 0."""
    kernel = TopScores(fit.model, fit.theta[:, 0])
    return engine.run(f"{fit.model.what}: scores", runs, kernel, _stacked)


def influence(fit: NonlinearFit, runs: Sequence[Nested], engine: Engine) -> Floats:
    """Return the influence of each top-most cluster on ``theta``, in the order of the runs, (T, P).

    Notes
    -----
    ``-H^-1 score_k`` with ``score_k`` weighted, so that their sum over the clusters of a PSU is that PSU's total in the
    linearized variance (Binder 1983; Rabe-Hesketh & Skrondal 2006, section 3.3). Parameters at a boundary,
    and aliased ones, have none.
    """
    return scores(fit, runs, engine) @ fit.bread


@dataclass(frozen=True)
class WeightSlopes:
    """From a run to the derivatives of the estimating function in the logs of its weights, column 0.

    The estimating function is the sum of the weighted scores. Weights of rows are those the fit saw: where they were
    scaled within clusters, the caller carries the derivative through the scaling.

    Notes
    -----
    Central differences along ``theta`` of the exact derivatives of the log-likelihood in the log weights; error
    about :data:`steelyard.outcome.multilevel.observed.DIFFERENCE` squared. In two levels the derivative in a
    cluster's log weight is its weighted score. To carry parameters ``g`` of the weights through to ``theta``:
    ``d theta / d g = bread' (sum_i rows_i (d log w_i / d g)' + sum_j clusters_j (d log w_j / d g)')``.
    """

    fit: NonlinearFit

    def __call__(self, run: Nested) -> tuple[Floats, Floats]:
        """Return those of level-1 weights (n, P) and of level-2 weights (J, P)."""
        model, scale, theta = self.fit.model, self.fit.scale, self.fit.theta[:, 0]
        weight = model.top_weights(run)[:, 0]
        back = np.linalg.pinv(scale)
        of_rows, of_clusters = [], []
        for part in parts(model, run, model.points):
            top_weight = weight[part.tops]
            ready = prepared(model, run, part, 0)
            rows, clusters = [], []
            for after, before in moved(ready, theta, scale, model.points):
                row_after, cluster_after = after.weight_slopes(top_weight)
                row_before, cluster_before = before.weight_slopes(top_weight)
                rows.append((row_after - row_before) / (2 * DIFFERENCE))
                clusters.append((cluster_after - cluster_before) / (2 * DIFFERENCE))
            of_rows.append(np.stack(rows, axis=1) @ back)
            of_clusters.append(np.stack(clusters, axis=1) @ back)
        return np.concatenate(of_rows), np.concatenate(of_clusters)


def _stacked(left: Floats, right: Floats) -> Floats:
    return np.concatenate([left, right])
