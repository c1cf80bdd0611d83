"""What the rows must satisfy before a multilevel model by quadrature is fitted, and how its columns are scaled."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from steelyard.data.passes import Engine
from steelyard.errors import EstimationError, PlanError
from steelyard.estimate.linear import independent_columns
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear
from steelyard.outcome.multilevel.posterior import Members
from steelyard.outcome.multilevel.quadrature import MOST_POINTS

Floats = NDArray[np.float64]

MOST_RANDOM = 2


@dataclass(frozen=True)
class Summary:
    """Sums over all rows.

    Attributes
    ----------
    rows, clusters, tops : int
        ``tops`` counts the top-most clusters.
    top_total : (K,)
        Sums of the top-most weights.
    weight : float
        Sum of the rows' overall weights under column 0.
    response : float
        Weighted mean of ``y``.
    mean : (p,)
        Weighted means of the fixed part's columns.
    gram : (p, p)
        Their weighted mean cross-products.
    random_square : (q,)
        Weighted mean squares of the random part's columns.
    ones : (p,) bool
        Which columns are 1 in every row.
    constant : (K,)
        What the terms in ``y`` alone add to the log-likelihood.
    mixed : int
        Clusters whose counted rows differ in ``y``.
    """

    rows: int
    clusters: int
    tops: int
    top_total: Floats
    weight: float
    response: float
    mean: Floats
    gram: Floats
    random_square: Floats
    ones: NDArray[np.bool_]
    constant: Floats
    mixed: int


@dataclass(frozen=True)
class _Order:
    """Count the places where a run's codes fall, leave a gap, or do not fit its weights."""

    model: Nonlinear

    def __call__(self, run: Nested) -> int:
        wrong = _misplaced(run.cluster, len(run.cluster_weight))
        if self.model.levels == 2:
            return wrong
        if run.top is None or run.top_weight is None:
            return wrong + 1
        return wrong + abs(len(run.top) - len(run.cluster_weight)) + _misplaced(run.top, len(run.top_weight))


def _misplaced(codes: NDArray[np.int64], count: int) -> int:
    if not len(codes):
        return count
    steps = np.diff(codes)
    return int(((steps < 0) | (steps > 1)).sum()) + int(codes[0] != 0) + int(codes[-1] != count - 1)


@dataclass(frozen=True)
class _Look:
    model: Nonlinear

    def __call__(self, run: Nested) -> dict[str, Any]:
        model = self.model
        overall = model.overall_weights(run)
        weight, y = overall[:, 0], run.y
        weights = [run.row_weight, run.cluster_weight]
        if run.top_weight is not None:
            weights.append(run.top_weight)
        members = Members.of(run.cluster)
        counted = weight > 0
        low = np.minimum.reduceat(np.where(counted, y, np.inf), members.starts)
        high = np.maximum.reduceat(np.where(counted, y, -np.inf), members.starts)
        with np.errstate(invalid="ignore", over="ignore"):
            mean, gram = weight @ run.x, run.x.T @ (run.x * weight[:, np.newaxis])
        binary = (y == 0) | (y == 1)
        return {
            "rows": len(y),
            "clusters": len(run.cluster_weight),
            "tops": len(model.top_weights(run)),
            "top_total": model.top_weights(run).sum(axis=0),
            "weight": float(weight.sum()),
            "response": float(weight @ y),
            "mean": mean,
            "gram": gram,
            "random_square": weight @ run.z**2,
            "other": (run.x != 1).sum(axis=0),
            "random_other": (run.z != 1).sum(axis=0),
            "constant": overall.T @ model.cumulant.constant(np.where(np.isfinite(y) & (y >= 0), y, 0)),
            "mixed": int((high > low).sum()),
            "not_binary": int((~binary).sum()),
            "not_count": int((~(np.isfinite(y) & (y >= 0))).sum()),
            "bad_weight": sum(int((~(np.isfinite(part) & (part >= 0))).sum()) for part in weights),
            "not_finite": int((~np.isfinite(run.x)).sum() + (~np.isfinite(run.z)).sum()),
            "low": int((counted & (y == 0)).sum()),
            "high": int((counted & (y > 0)).sum()),
        }


def summary(model: Nonlinear, runs: Sequence[Nested], engine: Engine) -> Summary:
    """Return the sums a fit starts from.

    Raises
    ------
    PlanError
        The model is one this code does not fit.
    EstimationError
        The rows cannot carry it: naming what is wrong and how many rows, clusters or weights.
    """
    _refuse_model(model)
    disorder = engine.run(f"{model.what}: order", runs, _Order(model))
    if disorder:
        raise EstimationError(
            f"{model.what}: rows are not sorted by cluster, or cluster codes have gaps or no weight "
            f"({disorder:,} places).",
            mend="Sort rows by top cluster and cluster, number both from 0 without gaps in each run, and give each "
            "a weight.",
        )
    sums = engine.run(f"{model.what}: look", runs, _Look(model))
    _refuse_rows(model, sums)
    weight = sums["weight"]
    if model.levels == 3 and sums["random_other"].any():
        raise PlanError(
            f"{model.what}: three levels carry random intercepts only.",
            mend="Leave the random slope out, or fit two levels.",
        )
    return Summary(
        rows=sums["rows"],
        clusters=sums["clusters"],
        tops=sums["tops"],
        top_total=sums["top_total"],
        weight=weight,
        response=sums["response"] / weight,
        mean=sums["mean"] / weight,
        gram=sums["gram"] / weight,
        random_square=sums["random_square"] / weight,
        ones=np.asarray(sums["other"] == 0),
        constant=sums["constant"],
        mixed=sums["mixed"],
    )


def _refuse_model(model: Nonlinear) -> None:
    if model.levels not in (2, 3):
        raise PlanError(f"{model.what}: a model of {model.levels} levels.", mend="Ask for 2 or 3 levels.")
    if not 1 <= len(model.random) <= MOST_RANDOM or (model.levels == 3 and len(model.random) > 1):
        raise PlanError(
            f"{model.what}: {len(model.random)} random columns ({', '.join(model.random) or 'none'}) at "
            f"{model.levels} levels.",
            mend="A logit or log link takes a random intercept and at most one random slope at two levels, "
            "and random intercepts at three.",
        )
    if not 1 <= model.points <= MOST_POINTS:
        raise PlanError(
            f"{model.what}: {model.points} quadrature points.",
            mend=f"Ask for 1 (Laplace) to {MOST_POINTS}; 7 to 15 serve most models.",
        )


def _refuse_rows(model: Nonlinear, sums: dict[str, Any]) -> None:
    if sums["bad_weight"]:
        raise EstimationError(
            f"{model.what}: {sums['bad_weight']:,} weights are missing, negative or infinite.",
            mend="Give every row and every cluster a weight of 0 or more.",
        )
    if sums["not_finite"]:
        raise EstimationError(
            f"{model.what}: {sums['not_finite']:,} values of its columns are missing or infinite.",
            mend="Leave those rows out, or say which codes mean missing.",
        )
    if model.family == "binomial" and sums["not_binary"]:
        raise EstimationError(
            f"{model.what}: the response is neither 0 nor 1 in {sums['not_binary']:,} of {sums['rows']:,} rows.",
            mend='Code it 0 and 1, or ask for family = "poisson" or "gaussian".',
        )
    if model.family == "poisson" and sums["not_count"]:
        raise EstimationError(
            f"{model.what}: the response is missing or below 0 in {sums['not_count']:,} of {sums['rows']:,} rows.",
            mend='Counts are 0 or more; for other responses ask for family = "gaussian".',
        )
    if not sums["weight"] > 0:
        raise EstimationError(
            f"{model.what}: no row carries weight.", mend="Check the weights of each level."
        )
    if model.family == "binomial" and not (sums["low"] and sums["high"]):
        raise EstimationError(
            f"{model.what}: the response is {int(sums['high'] > 0)} in every row that carries weight.",
            mend="A model needs both values; check the domain and the missing codes.",
        )
    if model.family == "poisson" and not sums["high"]:
        raise EstimationError(
            f"{model.what}: the response is 0 in every row that carries weight.",
            mend="A model of counts needs at least one count above 0.",
        )
    if sums["tops"] < 2:
        raise EstimationError(
            f"{model.what}: there is {sums['tops']} cluster at the top level, and a variance between clusters "
            "needs two or more.",
            mend="Check the column of the clusters, or fit the model without a random part.",
        )


def scaling(model: Nonlinear, sums: Summary) -> tuple[Floats, tuple[str, ...]]:
    """Return the (P, m) matrix from the fit's coordinates to ``theta``, and the names of aliased columns.

    Fixed columns have unit spread in the fit's coordinates, and mean zero where one column is 1 in every row;
    a column that others make redundant has no coordinate, and its coefficient is zero.
    """
    p = len(model.fixed)
    keep = independent_columns(sums.gram)
    aliased = tuple(name for name, kept in zip(model.fixed, keep, strict=True) if not kept)
    constant = np.flatnonzero(sums.ones & keep)
    centred = sums.mean if len(constant) else np.zeros(p)
    spread = np.sqrt(np.maximum(np.diag(sums.gram) - centred**2, 0))
    spread[constant] = 1
    matrix = np.zeros((model.size, model.size))
    matrix[range(p), range(p)] = 1 / np.where(spread > 0, spread, 1)
    if len(constant):
        first = constant[0]
        others = np.arange(p) != first
        matrix[first, :p][others] = -(sums.mean / np.where(spread > 0, spread, 1))[others]
    if model.levels == 2:
        rows, _ = model.lower
        unit = np.sqrt(np.where(sums.random_square > 0, sums.random_square, 1))
        matrix[range(p, model.size), range(p, model.size)] = 1 / unit[rows]
    else:
        matrix[[-2, -1], [-2, -1]] = 1
    kept = np.concatenate([keep, np.ones(model.random_size, dtype=bool)])
    return matrix[:, kept], aliased
