"""The effect table: estimates on the scale a reader wants, with t intervals on the design's degrees of freedom."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from steelyard.estimate.moments import EXPOSED, REFERENCE, Moments
from steelyard.outcome.effects import Effects
from steelyard.outcome.measures import SCALES
from steelyard.plan import Outcome, Plan
from steelyard.results.estimates import EstimateResults
from steelyard.results.sensitivity import (
    RARE,
    e_value,
    e_value_of_limit,
    ratio_of_difference,
    ratio_of_odds,
)
from steelyard.results.variance_made import VarianceMade

Floats = NDArray[np.float64]


def effect_results(
    plan: Plan,
    effects: Effects,
    values: Floats,
    covariance: Floats,
    *,
    made: VarianceMade,
    rows: int,
    outcomes: Moments,
    title: str,
) -> EstimateResults:
    """Return the effects with their covariance; ``.table`` has the columns of effects.csv.

    ``params`` and the covariance are on the scale of each measure's link (logarithms of ratios). In the
    table, a ratio's standard error is that of the ratio itself (delta method), its interval the
    exponential of the interval of the logarithm, its test that of the logarithm against zero.
    ``made`` says how the variance was made. ``outcomes`` are the outcomes' moments; the table ends with the
    counts that disclosure control needs.
    """
    names = tuple(estimates.names[0] for estimates in effects.estimates)
    results = EstimateResults(values, covariance, names, made.df, title=title)
    limits = results.conf_int(1 - plan.variance.confidence).to_numpy()
    exponential = np.array([SCALES[o.measure].exponential for o in effects.outcomes])
    estimate = np.where(exponential, np.exp(np.where(exponential, values, 0)), values)
    results.table = pd.DataFrame(
        {
            "outcome": _told_apart(effects.outcomes, names),
            "measure": [o.measure for o in effects.outcomes],
            "estimand": plan.exposure.estimand,
            "domain": plan.data.domain or "all",
            "exposed": effects.means.means[0, :, 0],
            "reference": effects.means.means[1, :, 0],
            "estimate": estimate,
            "std_error": np.where(exponential, estimate, 1) * results.bse.to_numpy(),
            "ci_low": _back(limits[:, 0], exponential),
            "ci_high": _back(limits[:, 1], exponential),
            "df": results.df_resid,
            "statistic": results.tvalues.to_numpy(),
            "p_value": results.pvalues.to_numpy(),
            "variance": made.name,
            "rows": rows,
            "psus": made.psus,
            "strata": made.strata,
            "replicates": made.replicates,
            "rows_exposed": int(outcomes.rows[EXPOSED]),
            "rows_reference": int(outcomes.rows[REFERENCE]),
            "nonzero_exposed": outcomes.present[EXPOSED].astype(int),
            "nonzero_reference": outcomes.present[REFERENCE].astype(int),
        }
    )
    return results


def _told_apart(outcomes: tuple[Outcome, ...], names: tuple[str, ...]) -> list[str]:
    """Return the outcomes' names, with what tells them apart where one has the same measure twice."""
    asked = [(outcome.name, outcome.measure) for outcome in outcomes]
    return [
        name if asked.count(pair) > 1 else outcome.name
        for outcome, name, pair in zip(outcomes, names, asked, strict=True)
    ]


def _back(values: Floats, exponential: NDArray[np.bool_]) -> Floats:
    return np.where(exponential, np.exp(np.where(exponential, values, 0)), values)


def sensitivity_of(
    plan: Plan, effects: EstimateResults, spreads: Floats, ratios: dict[int, tuple[float, float]]
) -> pd.DataFrame:
    """Return the E-value of every effect and of its interval's limit nearer none (VanderWeele & Ding 2017).

    Parameters
    ----------
    spreads : (m,)
        Standard deviation of each outcome within the groups, under the sampling weights.
    ratios : mapping
        Place of an outcome -> logarithm of the ratio of its means and its standard error, for
        differences of binary and count outcomes, whose risk ratio need not be approximated.
    """
    records = []
    half = plan.variance.confidence
    for place, (outcome, row) in enumerate(zip(plan.outcome, effects.table.to_dict("records"), strict=True)):
        told = ""
        ratio, low, high = row["estimate"], row["ci_low"], row["ci_high"]
        if outcome.measure == "odds-ratio":
            rare = max(row["exposed"], row["reference"]) < RARE
            told = (
                "rare outcome: the odds ratio stands for the risk ratio"
                if rare
                else "common outcome: the square root of the odds ratio stands for the risk ratio"
            )
            ratio, low, high = (ratio_of_odds(value, rare) for value in (ratio, low, high))
        elif outcome.measure == "difference" and place in ratios:
            log_ratio, se = ratios[place]
            reach = (effects.conf_int(1 - half)[1] - effects.params).iloc[place] / effects.bse.iloc[place]
            ratio, low, high = (float(np.exp(log_ratio + k * reach * se)) for k in (0, -1, 1))
            told = "the ratio of the groups' weighted means"
        elif outcome.measure == "difference":
            ratio, low, high = ratio_of_difference(row["estimate"], row["std_error"], spreads[place])
            told = "difference in standard deviations, 0.91 of it as the logarithm of a risk ratio"
        records.append(
            {
                "outcome": outcome.name,
                "measure": outcome.measure,
                "risk_ratio": ratio,
                "risk_ratio_low": low,
                "risk_ratio_high": high,
                "e_value": e_value(ratio),
                "e_value_limit": e_value_of_limit(low, high),
                "approximation": told,
            }
        )
    return pd.DataFrame.from_records(records)
