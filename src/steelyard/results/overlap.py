"""The overlap of the groups as frames, the target population in words, and what a reader should be told."""

from __future__ import annotations

import numpy as np
import pandas as pd

from steelyard.data.blocks import Rows
from steelyard.data.passes import Engine
from steelyard.exposure.balancing import Balancing
from steelyard.exposure.estimands import RULES
from steelyard.exposure.overlap import BINS, EXTREMES, GroupOverlap, group_overlap, rows_without_counterpart
from steelyard.plan import Exposure
from steelyard.results.answer import Overlap

GROUPS = ("exposed", "reference")
# Shares of a group's combined weight beyond which one row or one PSU is worth a word (common practice).
HEAVY_ROW, HEAVY_PSU = 0.05, 0.25


def overlap_of(rows: Rows, exposure: Exposure, balancing: Balancing, engine: Engine) -> Overlap:
    """Describe the overlap under the sampling and the combined weights."""
    psus = rows.units.ancestor(1) if rows.units.clustered else None
    found = group_overlap(balancing, psus, engine, rows.blocks)
    outside = rows_without_counterpart(balancing, found, engine, rows.blocks)
    trimmed = {}
    if exposure.propensity_range is not None:
        trimmed["rows outside the propensity range"] = int(found.outside.sum())
    if exposure.cap_quantile is not None:
        trimmed["rows capped"] = int(found.capped.sum())
    return Overlap(
        histogram=_histogram(found),
        groups=_groups(found, outside, rows),
        extremes=pd.DataFrame(
            {
                "propensity": [f"{'below' if t < 0.5 else 'above'} {t:g}" for t in EXTREMES],
                "exposed_rows": found.extremes[0].astype(int),
                "reference_rows": found.extremes[1].astype(int),
            }
        ),
        target=target_population(exposure, trimmed),
        trimmed=trimmed,
    )


def target_population(exposure: Exposure, trimmed: dict[str, int]) -> str:
    """Say whom the effect is about, once the estimand and the trimming have had their say."""
    text = f"The effect is for {RULES[exposure.estimand].target}."
    if exposure.propensity_range is not None:
        low, high = exposure.propensity_range
        count = trimmed["rows outside the propensity range"]
        text += (
            f" Trimming drops the {count:,} rows whose propensity lies outside {low:g} to {high:g}: the effect "
            "is for persons inside that range only, a population the propensity model itself defines."
        )
    if exposure.cap_quantile is not None:
        text += (
            f" Combined weights above their {exposure.cap_quantile:g} quantile are cut to it "
            f"({trimmed['rows capped']:,} rows): persons with the rarest exposure for their covariates count "
            "for less than they should, which trades some bias for less variance."
        )
    return text


def overlap_warnings(overlap: Overlap, estimand: str) -> list[str]:
    """Return what a reader should be told about the overlap, with a mend that the plan does not have already."""
    warnings = []
    rarest = "" if estimand == "ATO" else " or the ATO"
    heaviest = "exposure.cap_quantile" if estimand == "ATO" else "the ATO, exposure.cap_quantile,"
    for group in overlap.groups.itertuples():
        share = group.outside / group.rows
        if share > 0.01:
            warnings.append(
                f"{share:.1%} of the {group.group} rows have a propensity outside the range of the other "
                f"group: nobody there is comparable with them. Consider exposure.propensity_range{rarest}."
            )
        if group.largest_row_share > HEAVY_ROW:
            warnings.append(
                f"One {group.group} row carries {group.largest_row_share:.1%} of its group's combined weight. "
                f"Consider {heaviest} or a simpler exposure formula."
            )
        if np.isfinite(group.largest_psu_share) and group.largest_psu_share > HEAVY_PSU:
            warnings.append(
                f"One PSU carries {group.largest_psu_share:.1%} of the combined weight of the {group.group}."
            )
        if group.effective_after < 30:
            warnings.append(
                f"Under the combined weights the {group.group} count for {group.effective_after:.1f} rows: "
                "a very small base."
            )
    return warnings


def _histogram(found: GroupOverlap) -> pd.DataFrame:
    edges = np.linspace(0, 1, BINS + 1)
    frame = pd.DataFrame({"low": edges[:-1], "high": edges[1:]})
    for g, group in enumerate(GROUPS):
        frame[f"{group}_before"] = found.bins_before[g] / found.before[g]
        frame[f"{group}_after"] = found.bins_after[g] / found.after[g]
        frame[f"{group}_rows"] = found.bins_rows[g].astype(int)
    return frame


def _groups(found: GroupOverlap, outside: np.ndarray, rows: Rows) -> pd.DataFrame:
    heaviest = found.psus.max(axis=1) if found.psus.shape[1] else found.largest
    return pd.DataFrame(
        {
            "group": GROUPS,
            "level": rows.levels,
            "rows": found.rows.astype(int),
            "sampling_weight": found.before,
            "combined_weight": found.after,
            "effective_before": found.before**2 / found.before_squared,
            "effective_after": found.after**2 / found.after_squared,
            "propensity_min": found.low,
            "propensity_mean": found.propensity_sum / found.before,
            "propensity_max": found.high,
            "outside": outside.astype(int),
            "largest_row_share": found.largest / found.after,
            "largest_psu_share": heaviest / found.after,
        }
    )
