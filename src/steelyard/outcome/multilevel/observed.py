"""Scores of top-most clusters and the observed information: what the influence of a nonlinear fit is made of."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.integrals import Integral
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear
from steelyard.outcome.multilevel.pieces import Part, Piece, Prepared, parts, prepared
from steelyard.outcome.multilevel.second import second_derivatives

Floats = NDArray[np.float64]

# Step of the central differences, in coefficients of unit-spread columns: error about its square.
DIFFERENCE = 1e-4


def moved(ready: Prepared, theta: Floats, directions: Floats, points: int) -> list[tuple[Piece, Piece]]:
    """Return the part's likelihood a little before and a little after ``theta`` along each of m directions (P, m)."""
    start = None
    out = []
    for direction in directions.T:
        pair = []
        for sign in (1, -1):
            piece = ready.at(theta + sign * DIFFERENCE * direction, points, start)
            if start is None and isinstance(piece.source, Integral):
                start = piece.source.mode.v
            pair.append(piece)
        out.append((pair[0], pair[1]))
    return out


@dataclass(frozen=True)
class _Information:
    """From a run to minus the second derivatives, every top-most cluster weighted by each of some columns."""

    model: Nonlinear
    theta: Floats
    scale: Floats
    points: int
    columns: int

    def __call__(self, run: Nested) -> Floats:
        model, m = self.model, self.scale.shape[1]
        total = np.zeros((self.columns, m, m))
        for part in parts(model, run, self.points):
            ready = prepared(model, run, part, 0)
            weight = _column_weights(model, run, ready, part)[:, : self.columns]
            bent = self._of_tops(ready)
            total += (weight.T @ bent.reshape(len(bent), -1)).reshape(total.shape)
        return total

    def _of_tops(self, ready: Prepared) -> Floats:
        """Return minus the second derivatives of each top-most cluster's value, (T, m, m)."""
        model, scale = self.model, self.scale
        if model.levels == 2 and (model.adaptive or self.points == 1):
            source = ready.source(self.theta, self.points)
            assert isinstance(source, Integral)
            return np.asarray(-scale.T @ second_derivatives(source, ready.part.x) @ scale)
        bent = [
            ((before.scores() - after.scores()) @ scale) / (2 * DIFFERENCE)
            for after, before in moved(ready, self.theta, scale, self.points)
        ]
        return np.stack(bent, axis=1)


def _column_weights(model: Nonlinear, run: Nested, ready: Prepared, part: Part) -> Floats:
    """Return what each top-most cluster counts for under each column, (T, K); column 0 exactly, others nearly.

    Where weights below the top-most differ between columns, the cluster counts in proportion to its rows' overall
    weight: good enough for the length of a step.
    """
    weight = model.top_weights(run)[part.tops]
    if weight.shape[1] == 1:
        return weight
    overall = part.top_rows.total(np.ascontiguousarray(model.overall_weights(run)[part.rows].T)).T
    first = overall[:, :1]
    share = np.where(first > 0, overall / np.where(first > 0, first, 1), 1)
    return np.column_stack([weight[:, :1], (weight[:, :1] * share)[:, 1:]])


def observed_information(
    model: Nonlinear,
    theta: Floats,
    scale: Floats,
    runs: Sequence[Nested],
    engine: Engine,
    points: int,
    columns: int = 1,
) -> Floats:
    """Return minus the second derivatives in the coordinates of ``scale``, for the first columns, (columns, m, m).

    Column 0 is exact. The others take each top-most cluster's derivatives from column 0 and weight them as their own.

    Notes
    -----
    In closed form for two levels with adaptive nodes; otherwise central differences of the exact scores, with an
    error of about :data:`DIFFERENCE` squared.
    """
    kernel = _Information(model, theta, scale, points, columns)
    information = engine.run(f"{model.what}: information", runs, kernel)
    return 0.5 * (information + information.transpose(0, 2, 1))
