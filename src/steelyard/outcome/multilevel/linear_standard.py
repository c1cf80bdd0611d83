"""How the columns of a linear mixed model stand inside the fit: means and units that harm no digit.

The fit sees fixed columns that are orthonormal under the full sample's weights, a response that is what
least squares leaves of it, on its own spread, and random columns centred on their means. The model is the
same: coefficients and variances are carried back exactly.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

from steelyard.data.passes import Engine
from steelyard.errors import EstimationError
from steelyard.estimate.linear import independent_columns
from steelyard.outcome.multilevel.nested import Nested, picked

Floats = NDArray[np.float64]

# Share of the response's spread below which what least squares leaves of it is rounding.
NOTHING_LEFT = 1e-12


@dataclass(frozen=True)
class LinearModel:
    """What is fitted: names of the fixed and of the random columns, and of the levels above the rows.

    ``levels`` names the clusters, then the top clusters where there are three levels; ``what`` names the
    model in messages.
    """

    fixed: tuple[str, ...]
    random: tuple[str, ...]
    levels: tuple[str, ...]
    what: str

    @property
    def three(self) -> bool:
        """Whether there are three levels."""
        return len(self.levels) == 2


@dataclass(frozen=True)
class Standard:
    """The columns inside the fit.

    With ``x_s = (x - centre) fixed`` and ``z_s = z random``, the response is
    ``y_s = (y - y_centre - x_s ols) / spread``.

    Attributes
    ----------
    keep : (p,) bool
        Fixed columns that those before them do not make redundant.
    centre, fixed : (p,), (p, p')
    to_raw : (p, p')
        Coefficients of the columns as they are, from those of ``x_s``, but for the constant's share of
        ``y_centre``, which ``constant`` (p,) adds.
    ols : (p',)
    random_centre, random : (q,), (q, q)
        ``z_s = (z - random_centre) diag(random)``; effects of ``z`` are ``random`` times those of ``z_s``.
    """

    keep: NDArray[np.bool_]
    centre: Floats
    fixed: Floats
    to_raw: Floats
    constant: Floats
    ols: Floats
    y_centre: float
    spread: float
    random_centre: Floats
    random: Floats

    def fixed_columns(self, run: Nested, rows: slice) -> Floats:
        """Return ``x_s``, (n, p')."""
        return (run.x[rows] - self.centre) @ self.fixed

    def random_columns(self, run: Nested, rows: slice) -> Floats:
        """Return ``z_s``, (n, q)."""
        return np.asarray((run.z[rows] - self.random_centre) * np.diag(self.random))

    def response(self, run: Nested, rows: slice, x_s: Floats) -> Floats:
        """Return ``y_s``, (n,)."""
        return np.asarray((run.y[rows] - self.y_centre - x_s @ self.ols) / self.spread)

    def coefficients(self, scaled: Floats) -> Floats:
        """Return coefficients of the fixed columns as they are, (p, K), from those inside the fit (p', K)."""
        inside = self.ols[:, np.newaxis] + self.spread * scaled
        return np.asarray(self.to_raw @ inside + self.constant[:, np.newaxis])


def standard(model: LinearModel, engine: Engine, rows: Sequence[Nested]) -> Standard:
    """Return how the columns stand inside the fit, from two passes under the full sample's weights.

    Raises
    ------
    EstimationError
        The model cannot be told apart on these rows: no cluster, or no top cluster, with two members; a
        random column that does not vary; nothing left of the response.
    """
    look = engine.run(f"{model.what}: look", rows, _LookKernel(), _merge_looks)
    _refuse(model, look)
    p = len(model.fixed)
    origin = _origin(model, look)
    gram = engine.run(f"{model.what}: spreads", rows, _GramKernel(origin)) / look.weight
    size = np.sqrt(np.diag(gram))
    _refuse_random(model, gram[p + 1 :, p + 1 :], look)
    unit = np.where(size > 0, size, 1)
    gram = gram / np.outer(unit, unit)
    keep = independent_columns(gram[:p, :p])
    to_fit = _orthonormal(gram[:p, :p], keep)
    ols = to_fit.T @ gram[:p, p]
    left = 1 - ols @ ols
    if not size[p] > 0 or left < NOTHING_LEFT:
        raise EstimationError(
            f"{model.what}: the fixed part reproduces the response in every row, so nothing varies.",
            mend="Check that the response is not among its own covariates.",
        )
    to_fit = to_fit / unit[:p, np.newaxis]
    to_raw, shift, constants = to_fit.copy(), np.zeros(p), np.flatnonzero(look.constant[:p])
    if len(constants):
        at, value = constants[0], look.low[constants[0]]
        to_raw[at] -= origin[:p] @ to_fit / value
        shift[at] = origin[p] / value
    spreads = np.where(look.constant, look.low, unit)[p + 1 :]
    effects = np.diag(1 / spreads)
    effects[0, 1:] -= origin[p + 2 :] / spreads[1:] / spreads[0]
    return Standard(
        keep=keep,
        centre=origin[:p],
        fixed=to_fit,
        to_raw=to_raw,
        constant=shift,
        ols=ols * unit[p],
        y_centre=float(origin[p]),
        spread=float(size[p] * np.sqrt(left)),
        random_centre=origin[p + 1 :],
        random=effects,
    )


def _origin(model: LinearModel, look: _Look) -> Floats:
    """Return what is taken off the columns [x, y, z]: their means where a constant makes up for them, else zero.

    The same constant among fixed or random columns is left as it is.
    """
    p, mean = len(model.fixed), look.total / look.weight
    origin = np.where(look.constant, 0, mean)
    if not look.constant[:p].any():
        origin[: p + 1] = 0
    if not look.constant[p + 1]:
        origin[p + 1 :] = 0
        if model.three:
            raise EstimationError(
                f'{model.what}: with three levels the first random column, "{model.random[0]}", must be a constant.',
                mend="Give three levels a random intercept.",
            )
    return np.asarray(origin)


def _orthonormal(gram: Floats, keep: NDArray[np.bool_]) -> Floats:
    """Return the matrix that makes columns with these cross-products orthonormal, (p, kept)."""
    kept = np.flatnonzero(keep)
    matrix = np.zeros((len(keep), len(kept)))
    if len(kept):
        lower = linalg.cholesky(gram[np.ix_(kept, kept)], lower=True)
        matrix[kept] = linalg.solve_triangular(lower, np.eye(len(kept)), lower=True).T
    return matrix


@dataclass(frozen=True)
class _Look:
    """Sums, ranges and counts under the full sample's weights, of the columns [x, y, z]."""

    weight: float
    total: Floats
    low: Floats
    high: Floats
    clusters: int
    several_rows: int
    tops: int
    several_clusters: int

    @property
    def constant(self) -> NDArray[np.bool_]:
        """Which columns hold one value, not zero, in all rows that carry weight."""
        return np.asarray((self.low == self.high) & (self.low != 0))


@dataclass(frozen=True)
class _LookKernel:
    """From a run to its look."""

    def __call__(self, run: Nested) -> _Look:
        columns = _columns(run)
        w = _full_sample_weight(run)
        carrying = w > 0
        rows = np.add.reduceat(carrying, run.cluster_firsts, dtype=np.int64)
        clusters = np.add.reduceat(rows > 0, run.top_firsts, dtype=np.int64)
        held = columns[carrying]
        nothing = np.full(columns.shape[1], np.inf)
        return _Look(
            weight=float(w.sum()),
            total=w @ columns,
            low=held.min(axis=0) if len(held) else nothing,
            high=held.max(axis=0) if len(held) else -nothing,
            clusters=int(np.sum(rows > 0)),
            several_rows=int(np.sum(rows > 1)),
            tops=int(np.sum(clusters > 0)),
            several_clusters=int(np.sum(clusters > 1)),
        )


def _merge_looks(left: _Look, right: _Look) -> _Look:
    return _Look(
        left.weight + right.weight,
        left.total + right.total,
        np.minimum(left.low, right.low),
        np.maximum(left.high, right.high),
        left.clusters + right.clusters,
        left.several_rows + right.several_rows,
        left.tops + right.tops,
        left.several_clusters + right.several_clusters,
    )


@dataclass(frozen=True)
class _GramKernel:
    """From a run to the weighted cross-products of [x, y, z] about an origin."""

    origin: Floats

    def __call__(self, run: Nested) -> Floats:
        columns = _columns(run) - self.origin
        return np.asarray((columns * _full_sample_weight(run)[:, np.newaxis]).T @ columns)


def _columns(run: Nested) -> Floats:
    return np.column_stack([run.x, run.y, run.z])


def _full_sample_weight(run: Nested) -> Floats:
    total = run.cluster_total_weight(slice(0, 1))[:, 0]
    return np.asarray(picked(run.row_weight, slice(0, 1))[:, 0] * total[run.cluster])


def _refuse(model: LinearModel, look: _Look) -> None:
    if not np.all(np.isfinite(look.total)) or not np.isfinite(look.weight):
        raise EstimationError(
            f"{model.what}: a weight or a column is missing or infinite.",
            mend="Leave incomplete rows out of the domain.",
        )
    if not look.weight > 0:
        raise EstimationError(
            f"{model.what}: no row carries weight.", mend="Check the domain and the weights."
        )
    if not look.several_rows:
        raise EstimationError(
            f"{model.what}: each of the {look.clusters} clusters ({model.levels[0]}) has only one row that "
            "carries weight, so what varies between them cannot be told from what varies within.",
            mend="Use a coarser level, or a model without clusters.",
        )
    if look.clusters < 2:
        raise EstimationError(
            f"{model.what}: there is only one cluster ({model.levels[0]}).",
            mend="Use a finer level, or a model without clusters.",
        )
    if model.three and (look.tops < 2 or not look.several_clusters):
        raise EstimationError(
            f"{model.what}: of {look.tops} top clusters ({model.levels[1]}), {look.several_clusters} have more "
            f"than one cluster ({model.levels[0]}) within, so the two levels cannot be told apart.",
            mend="Leave one of the two levels out.",
        )


def _refuse_random(model: LinearModel, gram: Floats, look: _Look) -> None:
    fixed = len(model.fixed) + 1
    keep = independent_columns(gram)
    varies = look.low[fixed:] < look.high[fixed:]
    for k, name in enumerate(model.random):
        if not keep[k] or (k and not varies[k]):
            raise EstimationError(
                f'{model.what}: the random column "{name}" is constant or follows from those before it.',
                mend="Leave its random slope out.",
            )
