"""What a nonlinear fit says of the variation between clusters: spreads, correlation, intraclass correlation."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.outcome.multilevel.nonlinear import Nonlinear
from steelyard.outcome.multilevel.nonlinear_fit import NonlinearFit

Floats = NDArray[np.float64]
# Real, or complex for a derivative by a complex step.
Numbers = NDArray[np.inexact[Any]]

# Variance of the standard logistic distribution: the latent residual of a logit model.
LOGISTIC_VARIANCE = np.pi**2 / 3


@dataclass(frozen=True)
class Components:
    """Functions of the random part's parameters.

    Attributes
    ----------
    names : k texts
    values : (k, K)
        Under each column of weights.
    jacobian : (k, P)
        Derivatives in ``theta`` under column 0; zero where the derivative is in a parameter at a boundary.
    """

    names: tuple[str, ...]
    values: Floats
    jacobian: Floats

    def influence(self, influence: Floats) -> Floats:
        """Return the influence of each top-most cluster, (T, k), from that on ``theta``, (T, P)."""
        return influence @ self.jacobian.T


def components(fit: NonlinearFit) -> Components:
    """Return variances, log standard deviations, correlation and intraclass correlations.

    Notes
    -----
    Two levels: the covariance of the random effects is ``L L'``. The log standard deviation of an effect without
    variance is minus infinity, with a derivative of zero. The intraclass correlation is that of the latent
    responses of two rows of a cluster, ``v / (v + pi^2 / 3)`` for a logit link and a random intercept (at zero of
    the other random column); with three levels, of two rows of a top cluster and of two rows of a cluster within
    it. A log link has no latent residual and no such correlation.
    """
    model = fit.model
    names, of = _functions(model)
    values = np.stack([np.real(of(theta[len(model.fixed) :])) for theta in fit.theta.T], axis=1)
    jacobian = np.zeros((len(names), model.size))
    at = fit.theta[len(model.fixed) :, 0]
    free = fit.free[len(fit.free) - model.random_size :]
    for d in np.flatnonzero(free):
        jacobian[:, len(model.fixed) + d] = _derivative(of, at, int(d))
    return Components(names, values, np.where(np.isfinite(jacobian), jacobian, 0))


def _functions(model: Nonlinear) -> tuple[tuple[str, ...], Callable[[Numbers], Numbers]]:
    if model.levels == 3:
        return _three_levels(model)
    random = model.random
    names = [f"variance({name})" for name in random] + [f"log_sd({name})" for name in random]
    names += [f"correlation({random[0]}, {random[1]})"] if len(random) == 2 else []
    latent = model.family == "binomial"
    names += ["intraclass correlation"] if latent else []

    def of(parameters: Numbers) -> Numbers:
        factor = np.zeros((len(random), len(random)), dtype=parameters.dtype)
        factor[model.lower] = parameters
        covariance = factor @ factor.T
        variance = np.diag(covariance)
        out = [*variance, *_log_sd(variance)]
        if len(random) == 2:
            with np.errstate(invalid="ignore", divide="ignore"):
                out.append(covariance[1, 0] / np.sqrt(variance[0] * variance[1]))
        if latent:
            out.append(variance[0] / (variance[0] + LOGISTIC_VARIANCE))
        return np.array(out)

    return tuple(names), of


def _three_levels(model: Nonlinear) -> tuple[tuple[str, ...], Callable[[Numbers], Numbers]]:
    names = ["variance(cluster)", "variance(top)", "log_sd(cluster)", "log_sd(top)"]
    latent = model.family == "binomial"
    names += ["intraclass correlation(top)", "intraclass correlation(cluster)"] if latent else []

    def of(parameters: Numbers) -> Numbers:
        variance = parameters**2
        out = [*variance, *_log_sd(variance)]
        if latent:
            total = variance.sum() + LOGISTIC_VARIANCE
            out += [variance[1] / total, variance.sum() / total]
        return np.array(out)

    return tuple(names), of


def _log_sd(variance: Numbers) -> Numbers:
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(0.5 * np.log(variance), dtype=variance.dtype)


def _derivative(of: Callable[[Numbers], Numbers], at: Floats, d: int) -> Floats:
    """Return the derivative by a complex step (Squire & Trapp 1998), exact to rounding."""
    moved = at.astype(np.complex128)
    moved[d] += 1e-30j
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.asarray(of(moved).imag / 1e-30)
