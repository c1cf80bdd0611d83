"""Gauss-Hermite rules for a standard normal weight, in one and two dimensions."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

MOST_POINTS = 100


@dataclass(frozen=True)
class Rule:
    """Nodes and log weights of a rule in q dimensions, made of one rule an axis.

    Attributes
    ----------
    axis : (m,)
        The nodes along every axis, ascending.
    nodes : (q, R)
        All ``R = m^q`` nodes; the last axis moves fastest.
    log_weights : (R,)
        Logarithms of the weights, whose weights add to 1.
    lift : (R,)
        ``log_weights + |node|^2 / 2``: what an adaptive rule multiplies an unnormalised density by.
    """

    axis: Floats
    nodes: Floats
    log_weights: Floats
    lift: Floats


@cache
def rule(points: int, dimensions: int = 1) -> Rule:
    """Return the rule of ``points`` an axis: ``sum exp(log_weights) g(nodes)`` near ``E g(N(0, I))``.

    One point is the mean, so that the adaptive rule built on it is the Laplace approximation.

    Notes
    -----
    Nodes are those of the probabilists' Hermite polynomials (Golub & Welsch 1969, by way of numpy).
    """
    axis, weight = np.polynomial.hermite_e.hermegauss(points)
    log_weight = np.log(weight) - 0.5 * np.log(2 * np.pi)
    grid = np.meshgrid(*[axis] * dimensions, indexing="ij")
    logs = np.meshgrid(*[log_weight] * dimensions, indexing="ij")
    nodes = np.stack([part.ravel() for part in grid])
    log_weights = np.sum([part.ravel() for part in logs], axis=0)
    return Rule(axis, nodes, log_weights, log_weights + 0.5 * (nodes**2).sum(axis=0))
