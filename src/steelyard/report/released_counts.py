"""The counts of the check-up and of the overlap as they may leave the house."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd

from steelyard.report.suppression import (
    HIDDEN,
    Mask,
    is_hidden,
    joined_runs,
    small,
    small_but_some,
    with_complements,
)

GROUPS = ("exposed", "reference")
GROUP_CELLS = (
    "rows",
    "sampling_weight",
    "combined_weight",
    "effective_before",
    "effective_after",
    "propensity_min",
    "propensity_mean",
    "propensity_max",
    "outside",
    "largest_row_share",
    "largest_psu_share",
)
# Each extreme lies within the next one of its side.
NESTED = (("below 0.01", "below 0.05"), ("above 0.99", "above 0.95"))


def released_facts(
    facts: pd.DataFrame, groups_hidden: bool, few_left_out: bool, minimum: int, text: str
) -> pd.DataFrame:
    """Hide counts of rows: of small groups, and the extract's where few rows were left out of it."""
    value = facts["value"].astype(object)
    name = facts["fact"]
    of_rows = name.str.contains("rows")
    value = value.where(~(of_rows & small_but_some(facts["value"], minimum)), text)
    if groups_hidden:
        of_group = name.isin(["exposed rows", "reference rows"])
        value = value.where(~of_group | value.map(is_hidden), HIDDEN)
    if few_left_out:
        value = value.where(name != "rows in the extract", HIDDEN)
    return facts.assign(value=value)


def released_weights(
    weights: pd.DataFrame, domain_hidden: bool, few_left_out: bool, text: str
) -> pd.DataFrame:
    """Hide figures of the sampling weights that rest on few rows, or differ by few rows."""
    released = weights.astype({"all_rows": object, "domain_rows": object})
    if domain_hidden:
        released["domain_rows"] = text
    if few_left_out:
        released["all_rows"] = HIDDEN
    return released


def released_exclusions(
    exclusions: pd.DataFrame, few_left_out: bool, minimum: int, text: str
) -> tuple[pd.DataFrame, tuple[str, ...]]:
    """Hide small exclusions, and the next smallest; also return the hidden reasons."""
    counts = exclusions["rows"].to_numpy(dtype=float)
    few = small_but_some(counts, minimum)
    every = few if few_left_out else with_complements(counts, few, minimum, may_hide=counts > 0)
    released = _put(_put(exclusions, every & ~few, ("rows", "share"), HIDDEN), few, ("rows", "share"), text)
    return released, tuple(exclusions["reason"][every])


def released_missing(
    missing: pd.DataFrame, rows: Mapping[str, int], reasons: Sequence[str], minimum: int, text: str
) -> pd.DataFrame:
    """Hide columns with few missing values, in all or in a group, and those of hidden exclusions."""
    counts = missing["missing"].to_numpy(dtype=float)
    few = small_but_some(counts, minimum)
    # Rows of a group where the domain holds are at least its complete rows: the count is at least this.
    few_in_group = np.zeros(len(missing), dtype=bool)
    for group in GROUPS:
        few_in_group |= small_but_some(missing[f"share_{group}"].to_numpy() * rows[group], minimum)
    told = missing["column"].map(lambda name: any(reason.endswith(f"{name} missing") for reason in reasons))
    hidden = told.to_numpy(dtype=bool) & (counts > 0)
    shares = tuple(f"share_{group}" for group in GROUPS)
    released = _put(missing, few, ("missing", "share", *shares), text)
    released = _put(released, hidden & ~few, ("missing", "share", *shares), HIDDEN)
    return _put(released, few_in_group & ~few & ~hidden, shares, HIDDEN)


def released_strata(strata: pd.DataFrame, minimum: int, text: str) -> pd.DataFrame:
    """Hide strata with few rows, and exposure where it is rare or nearly everybody's.

    The extract's rows of a stratum are left out: beside those of the domain they would show how few were
    left out.
    """
    kept = strata[strata["domain_rows"] > 0]
    columns = ["stratum", "psus", "domain_rows", "exposed", "reference"]
    kept = kept[[*columns, "psus_without_exposed", "psus_without_reference"]].reset_index(drop=True)
    totals = kept["domain_rows"].to_numpy(dtype=float)
    few_rows = small(totals, minimum)
    hidden_rows = with_complements(totals, few_rows, minimum)
    groups = {group: kept[group].to_numpy(dtype=float) for group in GROUPS}
    few = {group: small(counts, minimum) for group, counts in groups.items()}
    apart = hidden_rows | few["exposed"] | few["reference"]
    # What is added for one group may still be too little for the other.
    for group in (*GROUPS, *GROUPS):
        apart = with_complements(groups[group], apart, minimum)
    released = _put(kept, hidden_rows & ~few_rows, ("domain_rows",), HIDDEN)
    released = _put(released, few_rows, ("domain_rows",), text)
    for group in GROUPS:
        released = _put(released, apart & ~few[group], (group,), HIDDEN)
        released = _put(released, few[group], (group,), text)
    return _put(released, apart, ("psus_without_exposed", "psus_without_reference"), HIDDEN)


def released_groups(
    groups: pd.DataFrame, in_domain: Mapping[str, int], groups_hidden: bool, minimum: int, text: str
) -> pd.DataFrame:
    """Hide everything that counts or sums rows of a group where either group is small.

    ``in_domain`` counts rows without a weight as well: where few lack one, the rows with a weight are hidden.
    """
    if groups_hidden:
        few = small(groups["rows"], minimum)
        released = _put(groups, ~few, GROUP_CELLS, HIDDEN)
        return _put(released, few, GROUP_CELLS, text)
    few = _few_or_nearly_all(groups["outside"].to_numpy(), groups["rows"].to_numpy(), minimum)
    released = _put(groups, few, ("outside",), text)
    unweighted = groups["group"].map(in_domain).to_numpy() - groups["rows"].to_numpy()
    return _put(released, small_but_some(unweighted, minimum), ("rows",), HIDDEN)


def released_extremes(
    extremes: pd.DataFrame, rows: Mapping[str, int], groups_hidden: bool, minimum: int, text: str
) -> pd.DataFrame:
    """Hide small counts of extreme propensities, and the inner one of two that differ by little."""
    released = extremes
    for group in GROUPS:
        column = f"{group}_rows"
        counts = extremes[column].to_numpy(dtype=float)
        few = _few_or_nearly_all(counts, np.full(len(counts), rows[group]), minimum)
        told = np.zeros(len(counts), dtype=bool)
        for inner, outer in NESTED:
            place, around = (np.flatnonzero(extremes["propensity"] == name) for name in (inner, outer))
            told[place] |= small_but_some(counts[around] - counts[place], minimum)
        if groups_hidden:
            told[:] = True
        # An inner zero beside a small outer count tells nothing that "under" does not.
        told &= (counts > 0) | groups_hidden
        released = _put(_put(released, told & ~few, (column,), HIDDEN), few, (column,), text)
    return released


def released_histogram(histogram: pd.DataFrame, groups_hidden: bool, minimum: int) -> dict[str, pd.DataFrame]:
    """Return each group's bins of the propensity, joined until each holds enough rows; empty where hidden."""
    released = {}
    for group in GROUPS:
        runs = [] if groups_hidden else joined_runs(histogram[f"{group}_rows"], minimum)
        released[group] = pd.DataFrame(
            [
                (
                    histogram["low"].iloc[start],
                    histogram["high"].iloc[stop - 1],
                    histogram[f"{group}_before"].iloc[start:stop].sum(),
                    histogram[f"{group}_after"].iloc[start:stop].sum(),
                )
                for start, stop in runs
            ],
            columns=["low", "high", "before", "after"],
            dtype=float,
        )
    return released


def released_trimming(trimmed: Mapping[str, int], minimum: int, text: str) -> dict[str, object]:
    """Hide small counts of what trimming did."""
    return {what: text if 0 < rows < minimum else rows for what, rows in trimmed.items()}


def _few_or_nearly_all(counts: np.ndarray, rows: np.ndarray, minimum: int) -> Mask:
    return np.asarray(small_but_some(counts, minimum) | ((counts > 0) & small(rows - counts, minimum)))


def _put(frame: pd.DataFrame, mask: Mask, cells: Sequence[str], text: str) -> pd.DataFrame:
    if not mask.any():
        return frame
    frame = frame.copy()
    for cell in cells:
        frame[cell] = frame[cell].astype(object).where(~mask, text)
    return frame
