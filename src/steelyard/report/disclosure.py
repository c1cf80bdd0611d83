"""What may be shown: counts under the plan's minimum are hidden, with all that would give them away.

Nothing else in the house hides anything. The rules are those any statistics office starts from; they do
not replace the local ones, nor the review of a disclosure officer.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from steelyard.results.answer import Answer

GROUPS = ("exposed", "reference")
# Figures of a balance row that rest on its few rows, and so go with them.
BALANCE_FIGURES = (
    "mean_exposed",
    "mean_reference",
    "mean_difference",
    "se",
    "smd",
    "variance_ratio",
    "ks",
    "p",
)


@dataclass(frozen=True)
class Shown:
    """An answer's tables as they may be shown.

    Attributes
    ----------
    minimum : int
        Counts from 1 up to, not including, this are hidden.
    effects, effects_known, balance, sensitivity, groups, histogram, extremes, exclusions, missing : frames
        Hidden figures are NaN; hidden counts are -1.
    hidden : texts that say what was hidden
    """

    minimum: int
    effects: pd.DataFrame
    effects_known: pd.DataFrame
    balance: pd.DataFrame
    sensitivity: pd.DataFrame
    groups: pd.DataFrame
    histogram: pd.DataFrame
    extremes: pd.DataFrame
    exclusions: pd.DataFrame
    missing: pd.DataFrame
    hidden: tuple[str, ...]


HIDDEN_COUNT = -1


def shown(answer: Answer) -> Shown:
    """Return an answer's tables with small counts hidden, and what would give them away."""
    minimum = answer.plan.report.minimum_count
    told: list[str] = []
    sizes = dict(zip(answer.overlap.groups["group"], answer.overlap.groups["rows"], strict=True))
    small_group = any(0 < size < minimum for size in sizes.values())
    balance = _balance(answer.balance.table, sizes, minimum, told)
    effects = _effects(answer.effects.table, minimum, small_group, told)
    known = _effects(answer.effects_known.table, minimum, small_group, [])
    return Shown(
        minimum=minimum,
        effects=effects,
        effects_known=known,
        balance=balance,
        sensitivity=_blank_all(answer.sensitivity, small_group),
        groups=_counts(answer.overlap.groups, ("rows", "outside"), minimum),
        histogram=_histogram(answer.overlap.histogram, minimum, told),
        extremes=_counts(answer.overlap.extremes, ("exposed_rows", "reference_rows"), minimum),
        exclusions=_with_share(answer.checkup.exclusions, "rows", ("share",), minimum),
        missing=_with_share(
            answer.checkup.missing, "missing", ("share", "share_exposed", "share_reference"), minimum
        ),
        hidden=tuple(told),
    )


def hide(count: int | float, minimum: int) -> int:
    """Return a count, or the sign of a hidden one."""
    return HIDDEN_COUNT if 0 < count < minimum else int(count)


def _counts(frame: pd.DataFrame, columns: tuple[str, ...], minimum: int) -> pd.DataFrame:
    frame = frame.copy()
    for name in columns:
        frame[name] = [hide(count, minimum) for count in frame[name]]
    return frame


def _with_share(frame: pd.DataFrame, count: str, shares: tuple[str, ...], minimum: int) -> pd.DataFrame:
    """Hide small counts and the shares they could be worked out from."""
    frame = frame.copy()
    small = (frame[count] > 0) & (frame[count] < minimum)
    frame.loc[small, list(shares)] = np.nan
    frame[count] = frame[count].mask(small, HIDDEN_COUNT)
    return frame


def _effects(table: pd.DataFrame, minimum: int, small_group: bool, told: list[str]) -> pd.DataFrame:
    """Blank group means that rest on few rows with the outcome, or all but few; everything if a group is small."""
    table = table.copy()
    if small_group:
        told.append(f"A group has under {minimum} rows: every effect is hidden.")
        figures = [
            "exposed",
            "reference",
            "estimate",
            "std_error",
            "ci_low",
            "ci_high",
            "statistic",
            "p_value",
        ]
        table[figures] = np.nan
        return table
    blank = pd.Series(False, index=table.index)
    for group in GROUPS:
        with_it, without = table[f"nonzero_{group}"], table[f"rows_{group}"] - table[f"nonzero_{group}"]
        blank |= (with_it > 0) & (with_it < minimum) | (without > 0) & (without < minimum)
    # One mean and the effect give the other mean, so both go.
    table.loc[blank, ["exposed", "reference"]] = np.nan
    for name in table.loc[blank, "outcome"]:
        told.append(
            f"{name}: fewer than {minimum} rows of a group have it, or lack it; group means are hidden."
        )
    return table


def _balance(table: pd.DataFrame, sizes: dict[str, int], minimum: int, told: list[str]) -> pd.DataFrame:
    """Blank rows of levels with few rows, and, where one level of a category is hidden, its next smallest."""
    table = table.copy()
    small = pd.Series(False, index=table.index)
    for group in GROUPS:
        present = table[f"rows_{group}"]
        absent = sizes[group] - present
        small |= (present > 0) & (present < minimum)
        small |= (table["kind"] == "level") & (absent > 0) & (absent < minimum)
    smallest = table[["rows_exposed", "rows_reference"]].min(axis=1)
    blank = small.copy()
    for _, rows in table[table["kind"] == "level"].groupby("term", sort=False):
        if small[rows.index].sum() == 1 and len(rows) > 1:
            blank[smallest[rows.index][~small[rows.index]].idxmin()] = True
    figures = [f"{name}_{when}" for when in ("before", "after") for name in BALANCE_FIGURES]
    table.loc[blank, figures] = np.nan
    table.loc[blank, ["rows_exposed", "rows_reference"]] = HIDDEN_COUNT
    if blank.any():
        told.append(
            f"{int(blank.sum())} row(s) of the balance table rest on fewer than {minimum} rows of a group, or "
            "would give such a row away, and are blank."
        )
    return table


def _histogram(histogram: pd.DataFrame, minimum: int, told: list[str]) -> pd.DataFrame:
    histogram = histogram.copy()
    hidden = 0
    for group in GROUPS:
        rows = histogram[f"{group}_rows"]
        small = (rows > 0) & (rows < minimum)
        hidden += int(small.sum())
        histogram.loc[small, [f"{group}_before", f"{group}_after"]] = np.nan
        histogram[f"{group}_rows"] = rows.mask(small, HIDDEN_COUNT)
    if hidden:
        told.append(
            f"{hidden} bar(s) of the overlap picture stand for fewer than {minimum} rows and are not drawn."
        )
    return histogram


def _blank_all(frame: pd.DataFrame, blank: bool) -> pd.DataFrame:
    if not blank:
        return frame
    frame = frame.copy()
    numbers = frame.select_dtypes("number").columns
    frame[numbers] = np.nan
    return frame
