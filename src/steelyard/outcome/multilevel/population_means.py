"""Population-averaged means of a nonlinear multilevel model: all rows set to a level, effects integrated out."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy import special

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear
from steelyard.outcome.multilevel.nonlinear_fit import NonlinearFit
from steelyard.outcome.multilevel.pieces import ROOM

Floats = NDArray[np.float64]

# How far the rule reaches in standard normal units, and what its step is to leave of the integral.
REACH = 7.5
LEFT_OVER = 1e-12
EXPOSED, REFERENCE = 0, 1


@dataclass(frozen=True)
class SetColumns:
    """From a run to its columns with the exposure set to 1 or 0 in every row.

    Attributes
    ----------
    fixed : places in ``x`` that hold the exposure itself
    random : places in ``z`` that hold it
    """

    fixed: tuple[int, ...]
    random: tuple[int, ...] = ()

    def __call__(self, run: Nested, level: float) -> tuple[Floats, Floats]:
        """Return ``x`` (n, p) and ``z`` (n, q) at ``level``."""
        x, z = run.x.copy(), run.z
        x[:, list(self.fixed)] = level
        if self.random:
            z = z.copy()
            z[:, list(self.random)] = level
        return x, z


# From a run and a level, 1 or 0, to the columns every row would have at that level.
Setting = Callable[[Nested, float], tuple[Floats, Floats]]
# From a run to the weight each of its rows has in the mean, (n, K).
RowWeights = Callable[[Nested], Floats]


@dataclass(frozen=True)
class LevelProduct:
    """The product of the weights of all levels, (n, K): the rows' own weight where level-1 weights are not scaled."""

    model: Nonlinear

    def __call__(self, run: Nested) -> Floats:
        """Return it."""
        return self.model.overall_weights(run)


@dataclass(frozen=True)
class PopulationMeans:
    """Means with the exposure set to 1 (row 0) and to 0 (row 1) in every row of the population.

    Attributes
    ----------
    means : (2, K)
        Under each column of weights.
    of_theta : (2, P)
        Derivatives in ``theta`` under column 0.
    influence : (T, 2)
        Of each top-most cluster, weights in, the estimation of ``theta`` included.
    model, setting, weights : what the means were taken with
    """

    means: Floats
    of_theta: Floats
    influence: Floats
    model: Nonlinear
    theta: Floats
    total: float
    setting: Setting
    weights: RowWeights

    def row_slopes(self, run: Nested) -> Floats:
        """Return the derivatives of the means in the log of each row's weight in them, ``theta`` held, (n, 2)."""
        weight = self.weights(run)[:, :1]
        both = [
            _mean(self.model, self.theta, *self.setting(run, 1.0 - level)) for level in (EXPOSED, REFERENCE)
        ]
        return np.asarray(weight * (np.stack(both, axis=1) - self.means[:, 0]) / self.total)


def population_means(
    fit: NonlinearFit,
    influence: Floats,
    setting: Setting,
    runs: Sequence[Nested],
    engine: Engine,
    weights: RowWeights | None = None,
) -> PopulationMeans:
    """Return the population-averaged means at both levels of the exposure.

    Parameters
    ----------
    influence : (T, P)
        That of the top-most clusters on ``theta``, in the order of the runs.
    setting : callable
        How a run's columns look at a level of the exposure, interactions included; picklable.
    weights : callable, optional
        The rows' weights in the mean; by default the product of the weights of all levels, which is right where
        level-1 weights are not scaled.

    Notes
    -----
    ``m_a = sum w E g^-1(x(a)'b + tau Z) / sum w`` with ``tau^2 = z(a)' Sigma z(a)`` and ``Z`` standard normal (Zeger,
    Liang & Albert 1988). For a log link the expectation is ``exp(eta + tau^2 / 2)``; for a logit link it is a
    sum over equally spaced points, whose error falls exponentially with their number (Trefethen & Weideman
    2014) and is kept near rounding. Standardised to the population's covariates (Graubard & Korn 1999).
    """
    model = fit.model
    weigh = LevelProduct(model) if weights is None else weights
    sums = engine.run(f"{model.what}: population means", runs, _Sums(model, fit.theta, setting, weigh))
    total, levels, of_theta = sums
    means = levels / total
    of_theta = of_theta / total[0]
    found = PopulationMeans(
        means, of_theta, np.zeros((0, 2)), model, fit.theta[:, 0], float(total[0]), setting, weigh
    )
    own = engine.run(f"{model.what}: population means", runs, _OfTops(found), _stacked)
    return replace(found, influence=own + influence @ of_theta.T)


@dataclass(frozen=True)
class _Sums:
    """From a run to sums of weights (K,), of weighted means (2, K) and of their derivatives under column 0 (2, P)."""

    model: Nonlinear
    thetas: Floats
    setting: Setting
    weights: RowWeights

    def __call__(self, run: Nested) -> tuple[Floats, Floats, Floats]:
        weight = self.weights(run)
        levels = np.zeros((2, weight.shape[1]))
        of_theta = np.zeros((2, self.model.size))
        for level in (EXPOSED, REFERENCE):
            x, z = self.setting(run, 1.0 - level)
            mean, slope, bend = _integrated(self.model, self.thetas[:, 0], x, z)
            w = weight[:, 0]
            levels[level, 0] = w @ mean
            random = _of_random(self.model, self.thetas[:, 0], z, w * bend)
            of_theta[level] = np.concatenate([x.T @ (w * slope), random])
            for k in range(1, weight.shape[1]):
                levels[level, k] = weight[:, k] @ _mean(self.model, self.thetas[:, k], x, z)
        return weight.sum(axis=0), levels, of_theta


@dataclass(frozen=True)
class _OfTops:
    """From a run to what its top-most clusters add to the means by their weights alone, (T, 2)."""

    found: PopulationMeans

    def __call__(self, run: Nested) -> Floats:
        slopes = self.found.row_slopes(run)
        return np.add.reduceat(slopes, self.found.model.tops(run).starts, axis=0)


def _spread(model: Nonlinear, theta: Floats, z: Floats) -> Floats:
    """Return ``tau^2``, the variance of the random part of each row, (n,)."""
    if model.levels == 3:
        return np.full(len(z), float(np.square(model.scales(theta)).sum()))
    return np.asarray(((z @ model.factor(theta)) ** 2).sum(axis=1))


def _of_random(model: Nonlinear, theta: Floats, z: Floats, weighted: Floats) -> Floats:
    """Return the derivative in the random part's parameters, from the weighted ones in ``tau^2 / 2`` (n,)."""
    if model.levels == 3:
        return np.asarray(weighted.sum() * np.array(model.scales(theta)))
    return np.asarray(((z.T @ (z * weighted[:, np.newaxis])) @ model.factor(theta))[model.lower])


def _mean(model: Nonlinear, theta: Floats, x: Floats, z: Floats) -> Floats:
    """Return each row's mean over the random effects, (n,)."""
    eta, square = x @ theta[: len(model.fixed)], _spread(model, theta, z)
    if model.family == "poisson":
        return np.asarray(np.exp(eta + 0.5 * square))
    tau = np.sqrt(square)
    nodes, weight = _spaced(float(tau.max(initial=0)))
    average = np.empty(len(eta))
    for rows in _slices(len(eta), len(nodes)):
        moved = nodes[:, np.newaxis] * tau[rows]
        moved += eta[rows]
        average[rows] = weight @ special.expit(moved, out=moved)
    return average


def _integrated(model: Nonlinear, theta: Floats, x: Floats, z: Floats) -> tuple[Floats, Floats, Floats]:
    """Return each row's mean over the random effects, and its derivatives in ``eta`` and in ``tau^2 / 2``, (n,) each.

    By Stein's identity the derivative in ``tau^2 / 2`` is the expectation of the second derivative in ``eta``.
    """
    if model.family == "poisson":
        mean = _mean(model, theta, x, z)
        return mean, mean, mean
    eta, tau = x @ theta[: len(model.fixed)], np.sqrt(_spread(model, theta, z))
    nodes, weight = _spaced(float(tau.max(initial=0)))
    out = np.empty((3, len(eta)))
    for rows in _slices(len(eta), len(nodes)):
        mean, variance = model.cumulant.two(eta[rows] + nodes[:, np.newaxis] * tau[rows])
        out[0, rows] = weight @ mean
        out[1, rows] = weight @ variance
        out[2, rows] = weight @ model.cumulant.third(mean, variance)
    return out[0], out[1], out[2]


def _slices(rows: int, nodes: int) -> Iterator[slice]:
    step = max(1, ROOM // nodes)
    for first in range(0, rows, step):
        yield slice(first, first + step)


def _spaced(tau: float) -> tuple[Floats, Floats]:
    """Return equally spaced nodes and their standard normal weights, fine enough for spreads up to ``tau``.

    A step ``h`` leaves about ``exp(y^2 / 2 - 2 pi y / h)`` of the integral for any ``y`` below ``pi / tau``, where
    the poles of the logistic function lie; the best ``y`` is ``2 pi / h`` where that is allowed.
    """
    room = -np.log(LEFT_OVER)
    step = np.sqrt(2 * np.pi**2 / room)
    if step < 2 * tau:
        step = (2 * np.pi**2 / tau) / (room + np.pi**2 / (2 * tau**2))
    count = int(np.ceil(REACH / step))
    nodes = step * np.arange(-count, count + 1)
    weight = np.exp(-0.5 * nodes**2)
    return nodes, weight / weight.sum()


def _stacked(left: Floats, right: Floats) -> Floats:
    return np.concatenate([left, right])
