"""Any statistic of a frame and weights, with the covariance that replicates give it; quantiles among them."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from steelyard.data.blocks import Rows
from steelyard.data.reading import reader
from steelyard.data.source import Extract
from steelyard.data.values import values_of
from steelyard.errors import EstimationError, PlanError
from steelyard.estimate.quantiles import weighted_quantile
from steelyard.exposure.balancing import Balancing
from steelyard.plan import Plan
from steelyard.replicates.scheme import Scheme
from steelyard.replicates.variance import replicated
from steelyard.results.estimates import EstimateResults
from steelyard.results.replication import Turn

Floats = NDArray[np.float64]
Statistic = Callable[[pd.DataFrame, Floats], Any]

# The column of the frame that says who is exposed, whatever the extract calls it.
EXPOSED = "is_exposed"
# Weights of this many replicates are held at a time, each as long as the frame.
COLUMNS_HELD = 8


def domain_frame(extract: Extract, plan: Plan, rows: Rows, columns: Sequence[str]) -> pd.DataFrame:
    """Return the domain's complete rows with the columns the plan reads and ``columns``; one more says who is exposed.

    The index is the row of the extract, from 0. Codes for 'no answer' are missing values.

    Raises
    ------
    ExtractError
        A column is not in the extract.
    PlanError
        The extract has a column ``is_exposed`` that says something else.
    """
    extract.require(tuple(columns))
    plan_reader = reader(extract, plan)
    wanted = dict.fromkeys((*plan_reader.columns, *columns))
    for name in plan_reader.replicates:
        wanted.pop(name, None)
    if EXPOSED in wanted:
        raise PlanError(
            f'The extract has a column "{EXPOSED}", the name under which the frame says who is exposed.',
            mend="Rename the column.",
        )
    position = np.concatenate([block.position for block in rows.blocks])
    parts = []
    for start, table in extract.read(list(wanted)):
        first, last = np.searchsorted(position, [start, start + table.num_rows])
        kept = table.take(position[first:last] - start)
        codes = plan.data.missing
        parts.append(
            pd.DataFrame({name: _plain(values_of(kept.column(name), codes.get(name, ()))) for name in wanted})
        )
    frame = pd.concat(parts, ignore_index=True)
    frame.index = pd.Index(position, name="row")
    frame[EXPOSED] = np.concatenate([block.exposure for block in rows.blocks]) == 1
    return frame


def _plain(values: Any) -> Any:
    # Categories differ between runs of the extract; texts do not.
    return values.astype(object) if isinstance(values, pd.Categorical) else values


def replicate_statistic(
    function: Statistic,
    frame: pd.DataFrame,
    made: Balancing,
    turns: Iterable[Turn],
    scheme: Scheme,
    rows: Rows,
    plan: Plan,
    weights: Literal["combined", "sampling"],
) -> EstimateResults:
    """Return the statistic with its replicate covariance; see :meth:`steelyard.study.Study.statistic`.

    Raises
    ------
    EstimationError
        The function returns what is no vector of numbers, or fails in too many replicates.
    """
    if weights not in ("combined", "sampling"):
        raise PlanError(f'weights is "{weights}".', mend='It is "combined" or "sampling".')
    full, names = _vector(function(frame, _column(made, rows, weights)[:, 0]), function)
    if not np.isfinite(full).all():
        bad = names[int(np.flatnonzero(~np.isfinite(full))[0])]
        raise EstimationError(
            f'The statistic "{bad}" is not a finite number for the full sample.',
            mend="Look at what the function does with missing values and empty groups.",
        )
    values = np.full((len(full), scheme.count), np.nan)
    failed: dict[int, str] = {}
    for turn in turns:
        held = turn.known if plan.variance.propensity == "known" else turn.balancing
        failed |= {turn.first + column - 1: why for column, why in held.failed.items()}
        for first, columns in _columns_of(held, rows, weights):
            for offset, weight in enumerate(columns.T):
                place = turn.first + first - 1 + offset
                if place in failed:
                    continue
                try:
                    again, same = _vector(function(frame, weight), function)
                except EstimationError:
                    raise
                except Exception as error:
                    # Whatever the user's function raises is that replicate's failure, named and counted.
                    failed[place] = f"{type(error).__name__}: {error}"
                    continue
                if same != names:
                    raise EstimationError(
                        f"The statistic has {len(same)} values in a replicate and {len(names)} in the full sample, or "
                        "other names.",
                        mend="Return the same values in the same order for any weights.",
                    )
                values[:, place] = again
    found = replicated(scheme, full, values, failed, plan.variance.most_failed)
    return EstimateResults(
        full,
        found.covariance(),
        names,
        scheme.df,
        title=f"Statistic under the {weights} weights, {scheme.count} replicates ({scheme.method})",
        confidence=plan.variance.confidence,
    )


def _columns_of(
    held: Balancing, rows: Rows, weights: Literal["combined", "sampling"]
) -> Iterator[tuple[int, Floats]]:
    """Give the replicates' weights some at a time: the first column's place and an array (n, some)."""
    for first in range(1, held.count, COLUMNS_HELD):
        some = np.arange(first, min(first + COLUMNS_HELD, held.count))
        yield first, _column(held.only(some), rows, weights)


def _column(made: Balancing, rows: Rows, weights: Literal["combined", "sampling"]) -> Floats:
    with np.errstate(invalid="ignore", over="ignore"):
        return np.concatenate(
            [
                made.rows(block).combined if weights == "combined" else made.sampling(block)
                for block in rows.blocks
            ]
        )


def _vector(found: Any, function: Statistic) -> tuple[Floats, tuple[str, ...]]:
    """Return a function's answer as numbers and names."""
    if isinstance(found, Mapping):
        names, found = tuple(str(name) for name in found), list(found.values())
    elif isinstance(found, pd.Series):
        names = tuple(str(name) for name in found.index)
    else:
        size = np.size(found)
        what = getattr(function, "__name__", "statistic").strip("<>")
        names = (what,) if size == 1 else tuple(f"{what} {k}" for k in range(size))
    try:
        values = np.atleast_1d(np.asarray(found, dtype=np.float64))
    except (TypeError, ValueError):
        values = np.empty((0, 0))
    if values.ndim != 1 or not len(values):
        raise EstimationError(
            f"The statistic's function returned {type(found).__name__}, which is no number or vector of numbers.",
            mend="Return a number, a list or array of numbers, or a mapping or Series of them with names.",
        )
    return values, names


@dataclass(frozen=True)
class Quantiles:
    """Weighted quantiles of a column by exposure, and their differences: a statistic."""

    column: str
    at: tuple[float, ...]

    def __call__(self, frame: pd.DataFrame, weights: Floats) -> dict[str, float]:
        """Return exposed, reference and difference at each probability."""
        values, is_exposed = frame[self.column].to_numpy(), frame[EXPOSED].to_numpy()
        out: dict[str, float] = {}
        for p in self.at:
            exposed, reference = (
                weighted_quantile(values[group], weights[group], p) for group in (is_exposed, ~is_exposed)
            )
            out |= {
                f"exposed {p:g}": exposed,
                f"reference {p:g}": reference,
                f"difference {p:g}": exposed - reference,
            }
        return out


def quantiles_asked(plan: Plan, outcome: str, at: tuple[float, ...], method: str) -> Quantiles:
    """Return quantiles of an outcome as a statistic.

    Raises
    ------
    PlanError
        See :meth:`steelyard.study.Study.quantiles`.
    """
    if not at or not all(0 < p < 1 for p in at):
        raise PlanError(
            f"Quantiles are asked for at {', '.join(f'{p:g}' for p in at) or 'no probability'}.",
            mend="Give probabilities above 0 and below 1, such as 0.5 for the median.",
        )
    if outcome not in {o.name for o in plan.outcome}:
        raise PlanError(
            f'"{outcome}" is no outcome of the plan.',
            mend="Add it as an [[outcome]]: rows that lack it then leave the domain, and are counted.",
        )
    made = plan.design.replicates.method if method == "supplied" and plan.design.replicates else method
    if made == "jackknife":
        raise PlanError(
            "The delete-one jackknife does not give a consistent variance of a quantile (Efron 1982).",
            mend='Set variance.method to "bootstrap", "brr", "fay" or "successive-difference".',
        )
    return Quantiles(outcome, at)
