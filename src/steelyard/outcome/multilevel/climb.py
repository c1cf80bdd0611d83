"""Climb to the maximum of several functions at once: quasi-Newton steps from a good curvature.

Each column is a function of its own, such as a log-likelihood under a column of weights; they climb side by
side so that one pass over the rows serves all. It knows nothing of rows or models.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
# From points (m, a) and the columns they belong to (a,) to values (a,) and gradients (m, a).
Height = Callable[[Floats, NDArray[np.int64]], tuple[Floats, Floats]]

LONGEST_STEP = 2.0
# Coordinates beyond this are on their way to infinity.
FAR = 60.0
MOST_SHORTENINGS = 30
# Share of the increase promised by the slope that a step must bring (Armijo 1966).
SUFFICIENT = 1e-4
# Curvatures below this share of the largest are raised to it before the first step.
FLATTEST = 1e-9


@dataclass
class Climb:
    """Where each of K columns stands.

    Attributes
    ----------
    point, gradient, step : (m, K)
        ``step`` is the next one, or the last one taken.
    value : (K,)
    curvature : (K, m, m)
        The estimate of minus the second derivatives.
    taken : (K,) steps taken
    done : (K,) bool
    failure : (K,) texts, empty where there is none
    """

    point: Floats
    value: Floats
    gradient: Floats
    step: Floats
    curvature: Floats
    taken: NDArray[np.int64]
    done: NDArray[np.bool_]
    failure: list[str]


def climb(
    height: Height, start: Floats, curvature: Floats, tolerance: float, most_steps: int, far: float = FAR
) -> Climb:
    """Return the maxima of K columns, from ``start`` (m, K).

    Parameters
    ----------
    curvature : (K, m, m)
        Minus the second derivatives near the start, as well as they are known.
    tolerance : float
        A step that is, or leaves, less than this in every coordinate is the last; it is still taken.
    far : float
        A column with a coordinate beyond this is given up as running away.

    Notes
    -----
    Steps are ``B^-1 g`` with ``B`` updated after Broyden, Fletcher, Goldfarb & Shanno (1970), shortened until the
    function has risen enough. Near the maximum each step is shorter than the one before by a falling
    factor, so a step leaves about its own length times its ratio to the one before.
    """
    count = start.shape[1]
    everyone = np.arange(count)
    value, gradient = height(start, everyone)
    state = Climb(
        start.copy(),
        value,
        gradient,
        np.zeros_like(start),
        np.stack([_upright(bend) for bend in curvature]),
        np.zeros(count, dtype=np.int64),
        np.zeros(count, dtype=bool),
        [""] * count,
    )
    size = np.full(count, np.inf)
    shortened = np.zeros(count, dtype=np.int64)
    for k in range(count):
        if not np.isfinite(value[k]) or not np.isfinite(gradient[:, k]).all():
            state.done[k], state.failure[k] = True, "has no likelihood at its starting point"
            continue
        size[k] = _next_step(state, k, np.inf, tolerance)
    while not state.done.all():
        moving = np.flatnonzero(~state.done)
        trial = state.point[:, moving] + state.step[:, moving]
        value, gradient = height(trial, moving)
        for a, k in enumerate(moving.tolist()):
            if _risen(state, k, value[a], gradient[:, a]):
                _update_curvature(state, k, gradient[:, a])
                state.point[:, k], state.value[k] = trial[:, a], value[a]
                state.gradient[:, k] = gradient[:, a]
                state.taken[k] += 1
                shortened[k] = 0
                if np.abs(trial[:, a]).max() > far:
                    state.done[k], state.failure[k] = True, "runs away"
                    continue
                size[k] = _next_step(state, k, size[k], tolerance)
            else:
                state.step[:, k] *= 0.3
                shortened[k] += 1
                if shortened[k] > MOST_SHORTENINGS:
                    state.done[k], state.failure[k] = True, "found no step that improves it"
            if not state.done[k] and state.taken[k] >= most_steps:
                state.done[k], state.failure[k] = True, f"did not settle in {most_steps} steps"
    return state


def _next_step(state: Climb, k: int, before: float, tolerance: float) -> float:
    """Set the next step of a column, take it if it is the last, and return its size."""
    step = np.linalg.solve(state.curvature[k], state.gradient[:, k])
    size = float(np.abs(step).max(initial=0))
    if size > LONGEST_STEP:
        step *= LONGEST_STEP / size
    state.step[:, k] = step
    left = size * min(1.0, size / before) if np.isfinite(before) and before > 0 else size
    if size <= tolerance or (size <= 1e4 * tolerance and left <= tolerance):
        state.point[:, k] += step
        state.taken[k] += 1
        state.done[k] = True
    return min(size, LONGEST_STEP)


def _upright(curvature: Floats) -> Floats:
    """Return the matrix with negative and vanishing curvatures turned into positive ones."""
    scale = np.sqrt(np.maximum(np.abs(np.diag(curvature)), np.finfo(float).tiny))
    values, vectors = np.linalg.eigh(curvature / np.outer(scale, scale))
    values = np.maximum(np.abs(values), FLATTEST * np.abs(values).max(initial=1))
    return np.asarray((vectors * values) @ vectors.T * np.outer(scale, scale))


def _risen(state: Climb, k: int, value: float, gradient: Floats) -> bool:
    """Whether the step brought enough, up to the rounding of the function."""
    if not np.isfinite(value) or not np.isfinite(gradient).all():
        return False
    promised = SUFFICIENT * float(state.gradient[:, k] @ state.step[:, k])
    rounding = 1e-12 * (abs(state.value[k]) + 1)
    return bool(value >= state.value[k] + promised - rounding)


def _update_curvature(state: Climb, k: int, gradient: Floats) -> None:
    step, fall = state.step[:, k], state.gradient[:, k] - gradient
    along = float(step @ fall)
    old = state.curvature[k]
    bent = old @ step
    expected = float(step @ bent)
    if along <= 1e-3 * expected:
        # The function curves the other way: longer steps, until it does not.
        state.curvature[k] = 0.3 * old
        return
    state.curvature[k] = old - np.outer(bent, bent) / expected + np.outer(fall, fall) / along
