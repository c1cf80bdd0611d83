"""The balance table with its design-based tests, and the tests of all terms together."""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from steelyard.balance.columns import TermColumns
from steelyard.balance.moments import TermMoments
from steelyard.data.cluster_means import LEVEL
from steelyard.design.linearization import standard_errors
from steelyard.estimate.moments import EXPOSED, REFERENCE, Moments
from steelyard.results.answer import BalanceResults
from steelyard.results.estimates import chi_square, t_p_values, wald_f
from steelyard.results.inference import Inference

Floats = NDArray[np.float64]

# A difference whose standard error is this small beside the spread is zero by construction, not by luck: what
# is left is the tolerance of the fits.
EXACT = 1e-6
# Rules of thumb (common practice, no source): not verdicts.
BALANCED_SMD, VARIANCE_RATIO = 0.1, (0.5, 2.0)


def balance_of(
    columns: TermColumns,
    moments: TermMoments,
    distances: tuple[Floats, Floats],
    inference: Inference,
    estimand: str,
    df: float,
    cluster_overlap: pd.DataFrame | None = None,
) -> BalanceResults:
    """Put the balance table together from moments, distances and the design-based covariance.

    ``inference`` holds the groups "before" and "after", exposed minus reference by term, and "conditions"
    where the propensity leaves moment conditions to test.
    """
    spread = moments.spread(estimand)
    table = pd.DataFrame(
        {
            "term": [t.term for t in columns.terms],
            "level": [t.level for t in columns.terms],
            "kind": [t.kind for t in columns.terms],
        }
    )
    number = np.array([t.kind == "number" for t in columns.terms], dtype=bool)
    tests = {}
    for when, of_group, distance in (
        ("before", moments.before, distances[0]),
        ("after", moments.after, distances[1]),
    ):
        values, covariance = inference.of(when)
        se = standard_errors(covariance)
        exact = ~(se > EXACT * spread)
        statistic = np.divide(values, se, out=np.full_like(values, np.nan), where=~exact)
        table[f"mean_exposed_{when}"] = of_group.mean[EXPOSED]
        table[f"mean_reference_{when}"] = of_group.mean[REFERENCE]
        table[f"mean_difference_{when}"] = values
        table[f"se_{when}"] = se
        table[f"smd_{when}"] = np.divide(values, spread, out=np.full_like(values, np.nan), where=spread > 0)
        table[f"variance_ratio_{when}"] = np.where(number, _variance_ratio(of_group), np.nan)
        table[f"ks_{when}"] = distance
        table[f"p_{when}"] = t_p_values(statistic, df)
        tested = np.flatnonzero(~exact)
        tests[when] = wald_f(values[tested], covariance[np.ix_(tested, tested)], df)
    present = moments.before.present.astype(int)
    table["rows_exposed"], table["rows_reference"] = present[EXPOSED], present[REFERENCE]
    clusters = _within_and_between(table, spread)
    conditions = None
    if "conditions" in inference.estimates:
        conditions = chi_square(*inference.of("conditions"))
    return BalanceResults(
        table,
        tests["before"],
        tests["after"],
        conditions,
        clusters,
        pd.DataFrame() if cluster_overlap is None else cluster_overlap,
    )


def _within_and_between(table: pd.DataFrame, spread: Floats) -> pd.DataFrame:
    """Split the standardized differences of rows that have a row of cluster means.

    Notes
    -----
    A value is its cluster's mean and what it differs from it, and so is a difference of means: the part between
    clusters is the difference of the cluster means, over the spread of the term itself, and the rest lies within.
    """
    labels = [
        f"{term}: {level}" if level else term
        for term, level in zip(table["term"], table["level"], strict=True)
    ]
    place = {label: k for k, label in enumerate(labels)}
    records = []
    for mean in np.flatnonzero((table["level"] == LEVEL).to_numpy()):
        row = place[table["term"].iloc[mean]]
        record: dict[str, object] = {
            "row": row,
            "term": table["term"].iloc[row],
            "level": table["level"].iloc[row],
        }
        for when in ("before", "after"):
            total = table[f"smd_{when}"].iloc[row]
            between = table[f"mean_difference_{when}"].iloc[mean] / spread[row] if spread[row] > 0 else np.nan
            record |= {f"smd_{when}": total, f"between_{when}": between, f"within_{when}": total - between}
        records.append(record)
    return pd.DataFrame.from_records(records)


def among_clusters(columns: TermColumns, moments: TermMoments, estimand: str) -> pd.DataFrame:
    """Return the terms compared among clusters, from moments under the rows' shares of their clusters' weights."""
    spread = moments.spread(estimand)
    frame = pd.DataFrame(
        {
            "row": range(len(columns.terms)),
            "term": [t.term for t in columns.terms],
            "level": [t.level for t in columns.terms],
        }
    )
    for when, of_group in (("before", moments.before), ("after", moments.after)):
        difference = of_group.mean[EXPOSED] - of_group.mean[REFERENCE]
        frame[f"mean_exposed_{when}"] = of_group.mean[EXPOSED]
        frame[f"mean_reference_{when}"] = of_group.mean[REFERENCE]
        frame[f"smd_{when}"] = np.divide(
            difference, spread, out=np.full_like(difference, np.nan), where=spread > 0
        )
    return frame


def balance_warnings(balance: BalanceResults, df: float, estimand: str) -> list[str]:
    """Return what a reader should be told about the balance that was reached, with a mend not in the plan already."""
    instead = "" if estimand == "ATO" else ", or choose the ATO"
    warnings = []
    table = balance.table
    off = table[table["smd_after"].abs() > BALANCED_SMD]
    if len(off):
        worst = off.loc[off["smd_after"].abs().idxmax()]
        name = f"{worst['term']}: {worst['level']}" if worst["level"] else worst["term"]
        warnings.append(
            f"{len(off)} of {len(table)} terms still differ by more than {BALANCED_SMD} standard deviations "
            f"under the combined weights, most of all {name} ({worst['smd_after']:.2f}). Add terms to the "
            f"exposure formula{instead}."
        )
    if balance.over_identification is not None and balance.over_identification.df[0] > df / 2:
        warnings.append(
            f"The over-identification test has {balance.over_identification.df[0]:g} conditions on {df:g} "
            "degrees of freedom of the design: it rejects too easily, so read it with care."
        )
    for when, test in (("before", balance.joint_before), ("after", balance.joint_after)):
        if test.df[0] > 0 and not np.isfinite(test.statistic):
            warnings.append(
                f"The joint test {when} balancing has {test.df[0]:g} terms on {df:g} degrees of freedom of "
                "the design, so it is not defined."
            )
    return warnings


def _variance_ratio(moments: Moments) -> Floats:
    variance = moments.variance
    ratio: Floats = np.divide(
        variance[EXPOSED],
        variance[REFERENCE],
        out=np.full_like(variance[EXPOSED], np.nan),
        where=variance[REFERENCE] > 0,
    )
    return ratio
