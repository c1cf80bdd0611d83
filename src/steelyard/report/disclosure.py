"""What of an answer may leave the house: the same frames with small counts, and what would give them away, hidden.

Every table, figure and printed summary draws on :class:`Released` and never on the answer itself. A hidden
cell holds a text, "under 10" for a small one and "hidden" for one that would give a small one away. The
rules are in :func:`release`; they are a first line, not a substitute for a disclosure officer.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from steelyard.plan import Plan
from steelyard.report.released_counts import (
    released_exclusions,
    released_extremes,
    released_facts,
    released_groups,
    released_histogram,
    released_missing,
    released_strata,
    released_trimming,
    released_weights,
)
from steelyard.report.released_texts import TextRules
from steelyard.report.suppression import (
    HIDDEN,
    Mask,
    is_hidden,
    small,
    small_but_some,
    under,
    with_complements,
)
from steelyard.results.answer import Answer
from steelyard.results.estimates import EstimateResults, JointTest
from steelyard.results.multilevel import MultilevelResults

EXPOSED_CELLS = ("mean_exposed_before", "mean_exposed_after")
REFERENCE_CELLS = ("mean_reference_before", "mean_reference_after")
COMPARED_CELLS = tuple(
    f"{name}_{when}" for when in ("before", "after") for name in ("smd", "variance_ratio", "ks", "p")
)
BALANCE_COLUMNS = (
    "term",
    "level",
    *(
        f"{name}_{when}"
        for when in ("before", "after")
        for name in ("mean_exposed", "mean_reference", "smd", "variance_ratio", "ks", "p")
    ),
)
EFFECT_COLUMNS = (
    *("outcome", "measure", "estimand", "domain", "exposed", "reference", "estimate", "std_error"),
    *("ci_low", "ci_high", "df", "statistic", "p_value", "variance", "rows", "psus", "strata", "replicates"),
)
EFFECT_CELLS = (
    "exposed",
    "reference",
    "estimate",
    "std_error",
    "ci_low",
    "ci_high",
    "statistic",
    "p_value",
)
SENSITIVITY_CELLS = ("risk_ratio", "risk_ratio_low", "risk_ratio_high", "e_value", "e_value_limit")
INDICATOR_SLACK = 1e-9


@dataclass(frozen=True)
class Released:
    """An answer as it may leave the house. Frames are those of the answer, hidden cells holding a text.

    Attributes
    ----------
    plan : Plan
    minimum : int
        Counts under it are hidden.
    groups_hidden : bool
        Whether a whole group is under the minimum, so that no comparison is shown.
    facts, weights, exclusions, strata, missing : frames
        Of the check-up. ``strata`` has no rows outside the domain.
    findings : (weight, message, mend) of each finding
    groups, extremes : frames
        Of the overlap.
    histogram : mapping
        "exposed" and "reference" -> frame ``low``, ``high``, ``before``, ``after``: bins with few rows are
        joined with their neighbours, group by group.
    trimmed : mapping
        What trimming did -> count or text.
    target : str
    balance : frame
        The columns of balance.csv.
    clusters, cluster_overlap, among_clusters : frames
        Differences between and within clusters, where the groups meet, and whole clusters compared; empty where the
        plan names none.
    joint_before, joint_after, over_identification : JointTest or None
        None where there is none, or it is hidden.
    effects, effects_known : frames
        The columns of effects.csv.
    beside, beside_known : frames
        The same with the linearized variance, where it stands beside that of replicates; else without rows.
    multilevel : results of multilevel models; none where a group is hidden
    sensitivity : frame
    warnings, notes : texts
        ``notes`` say what was hidden.
    """

    plan: Plan
    minimum: int
    groups_hidden: bool
    facts: pd.DataFrame
    weights: pd.DataFrame
    exclusions: pd.DataFrame
    strata: pd.DataFrame
    missing: pd.DataFrame
    findings: tuple[tuple[str, str, str], ...]
    groups: pd.DataFrame
    extremes: pd.DataFrame
    histogram: dict[str, pd.DataFrame]
    trimmed: dict[str, object]
    target: str
    balance: pd.DataFrame
    clusters: pd.DataFrame
    cluster_overlap: pd.DataFrame
    among_clusters: pd.DataFrame
    joint_before: JointTest | None
    joint_after: JointTest | None
    over_identification: JointTest | None
    effects: pd.DataFrame
    effects_known: pd.DataFrame
    beside: pd.DataFrame
    beside_known: pd.DataFrame
    multilevel: tuple[MultilevelResults, ...]
    sensitivity: pd.DataFrame
    warnings: tuple[str, ...]
    notes: tuple[str, ...]

    @property
    def every_effect(self) -> pd.DataFrame:
        """The effects under the plan's variance, then under the one beside it: effects.csv."""
        return pd.concat([self.effects, self.beside], ignore_index=True) if len(self.beside) else self.effects

    @property
    def under(self) -> str:
        """What stands in a small cell."""
        return under(self.minimum)


def release(answer: Answer) -> Released:
    """Hide what may not leave the house.

    Notes
    -----
    With ``m`` the plan's ``report.minimum_count``:

    - A group (exposed, reference) of fewer than ``m`` rows: no effect, no comparison, no weight sums of
      either group are shown, because one follows from the other and their total.
    - A level with fewer than ``m`` rows in a group, or all but fewer than ``m``: its means in that group, and
      every figure that compares it, are hidden; the shares of a category add up to 1, so the next smallest
      levels go too, until at least two are hidden that together hold ``m`` rows. Of an interaction with a
      hidden row every row is hidden.
    - Strata: exposed and reference are hidden together, since their sum is shown; and in at least two
      strata that together hold ``m`` of either, since the totals are shown. Zero is hidden like any small
      count: a stratum without reference rows says of everybody in it that they are exposed.
    - Exclusions, missing values and extreme propensities from 1 to ``m - 1`` are hidden; zero is shown,
      because it describes nobody. Nested counts whose difference is small lose the inner one.
    - Where few rows of a group have sampling weight 0, the rows with a weight are hidden beside all rows.
    - Propensity bins with few rows are joined with their neighbours before anything is drawn.

    - An outcome that fewer than ``m`` rows of a group have, or lack: both groups' means.

    Not covered: what follows from two reports of overlapping domains; categories nested in one another;
    and, where every row is a PSU, rows left out, which the degrees of freedom give away.
    """
    minimum = answer.plan.report.minimum_count
    checkup, overlap = answer.checkup, answer.overlap
    rows = {group.group: int(group.rows) for group in overlap.groups.itertuples()}
    facts = dict(zip(checkup.facts["fact"], checkup.facts["value"], strict=True))
    in_domain = {group: int(facts[f"{group} rows"]) for group in ("exposed", "reference")}
    groups_hidden = min(*rows.values(), *in_domain.values()) < minimum
    total, inside = int(facts["rows in the extract"]), int(facts["rows in the domain, complete"])
    few_left_out = 0 < total - inside < minimum
    text = under(minimum)
    exclusions, named = released_exclusions(checkup.exclusions, few_left_out, minimum, text)
    balance, hidden_rows = _balance(answer.balance.table, rows, groups_hidden, minimum)
    texts = TextRules(
        minimum=minimum,
        rows=rows,
        groups_hidden=groups_hidden,
        hidden_terms=tuple(_label(row.term, row.level) for row in balance[hidden_rows].itertuples()),
    )
    strata = released_strata(checkup.strata, minimum, text)
    return Released(
        plan=answer.plan,
        minimum=minimum,
        groups_hidden=groups_hidden,
        facts=released_facts(checkup.facts, groups_hidden, few_left_out, minimum, text),
        weights=released_weights(checkup.weights, inside < minimum, few_left_out, text),
        exclusions=exclusions,
        strata=strata,
        missing=released_missing(checkup.missing, rows, named, minimum, text),
        findings=tuple((f.weight, texts.released(f.message), f.mend) for f in checkup.findings),
        groups=released_groups(overlap.groups, in_domain, groups_hidden, minimum, text),
        extremes=released_extremes(overlap.extremes, rows, groups_hidden, minimum, text),
        histogram=released_histogram(overlap.histogram, groups_hidden, minimum),
        trimmed=released_trimming(overlap.trimmed, minimum, text),
        target=texts.released(overlap.target),
        balance=balance,
        clusters=_clusters(answer.balance.clusters, hidden_rows),
        among_clusters=_clusters(answer.balance.among_clusters, hidden_rows),
        cluster_overlap=_cluster_overlap(answer.balance.cluster_overlap, groups_hidden, minimum),
        joint_before=None if groups_hidden else answer.balance.joint_before,
        joint_after=None if groups_hidden else answer.balance.joint_after,
        over_identification=None if groups_hidden else answer.balance.over_identification,
        effects=_effects(answer.effects.table, groups_hidden, inside, minimum),
        effects_known=_effects(answer.effects_known.table, groups_hidden, inside, minimum),
        beside=_beside(answer.beside, groups_hidden, inside, minimum),
        beside_known=_beside(answer.beside_known, groups_hidden, inside, minimum),
        multilevel=() if groups_hidden else answer.multilevel,
        sensitivity=_covered(answer.sensitivity, groups_hidden, SENSITIVITY_CELLS, text),
        warnings=tuple(texts.released(warning) for warning in answer.warnings),
        notes=_notes(minimum, groups_hidden, int(hidden_rows.sum()), strata),
    )


def _balance(
    table: pd.DataFrame, rows: dict[str, int], groups_hidden: bool, minimum: int
) -> tuple[pd.DataFrame, Mask]:
    """Return balance.csv's columns with small cells hidden, and which rows compare nothing any more."""
    released = (
        table.loc[:, list(BALANCE_COLUMNS)].astype(object).where(table[list(BALANCE_COLUMNS)].notna(), np.nan)
    )
    none = np.zeros(len(table), dtype=bool)
    compared_small, compared_hidden = none.copy(), none.copy()
    indicator = _indicators(table)
    for group, cells in (("exposed", EXPOSED_CELLS), ("reference", REFERENCE_CELLS)):
        counts = table[f"rows_{group}"].to_numpy()
        few = small(counts, minimum) | (indicator & small(rows[group] - counts, minimum))
        if rows[group] < minimum:
            few = ~none
        every = _with_other_levels(table, counts, few, minimum)
        released = _put(released, every & ~few, cells, HIDDEN)
        released = _put(released, few, cells, under(minimum))
        compared_small |= few
        compared_hidden |= every
    if groups_hidden:
        compared_hidden = ~none
    released = _put(released, compared_hidden & ~compared_small, COMPARED_CELLS, HIDDEN)
    released = _put(released, compared_small, COMPARED_CELLS, under(minimum))
    return released, compared_hidden


def _clusters(frame: pd.DataFrame, hidden_rows: Mask) -> pd.DataFrame:
    """Return the split differences of rows that may be compared."""
    return frame if frame.empty else frame[~hidden_rows[frame["row"].to_numpy()]]


def _cluster_overlap(frame: pd.DataFrame, groups_hidden: bool, minimum: int) -> pd.DataFrame:
    """Return where the groups meet; rows are left out where a kind of cluster has few of them, clusters too."""
    if frame.empty or groups_hidden:
        return frame.iloc[:0]
    released = frame.astype(object)
    few = np.zeros(len(frame), dtype=bool)
    for name in ("exposed_rows", "reference_rows"):
        counts = frame[name].to_numpy()
        few |= with_complements(counts, small_but_some(counts, minimum), minimum, may_hide=counts > 0)
    cells = [name for name in frame if name != "clusters_with"]
    released.loc[few, cells] = HIDDEN
    return released


def _indicators(table: pd.DataFrame) -> Mask:
    """Return which rows are shares, levels and numbers that are 0 or 1: their KS distance is their difference."""
    alike = np.ones(len(table), dtype=bool)
    for when in ("before", "after"):
        difference = table[f"mean_exposed_{when}"] - table[f"mean_reference_{when}"]
        alike &= (table[f"ks_{when}"] - difference.abs()).abs().to_numpy() < INDICATOR_SLACK
    return alike


def _with_other_levels(table: pd.DataFrame, counts: np.ndarray, few: Mask, minimum: int) -> Mask:
    every = few.copy()
    for name, places in table.groupby("term", sort=False).indices.items():
        if len(places) < 2 or not few[places].any():
            continue
        if ":" in str(name):
            every[places] = True
        else:
            every[places] = with_complements(counts[places], few[places], minimum)
    return every


def _effects(table: pd.DataFrame, groups_hidden: bool, inside: int, minimum: int) -> pd.DataFrame:
    released = _covered(table, groups_hidden, EFFECT_CELLS, under(minimum))
    few = pd.Series(False, index=table.index)
    for group in ("exposed", "reference"):
        with_it, without = table[f"nonzero_{group}"], table[f"rows_{group}"] - table[f"nonzero_{group}"]
        few |= (with_it > 0) & (with_it < minimum) | (without > 0) & (without < minimum)
    # The effect and one mean give the other, so both means go.
    released = _put(released, few, ("exposed", "reference"), under(minimum))
    return _covered(released[list(EFFECT_COLUMNS)], inside < minimum, ("rows",), under(minimum))


def _beside(results: EstimateResults | None, groups_hidden: bool, inside: int, minimum: int) -> pd.DataFrame:
    if results is None:
        return pd.DataFrame(columns=list(EFFECT_COLUMNS))
    return _effects(results.table, groups_hidden, inside, minimum)


def _covered(table: pd.DataFrame, hide: bool, cells: tuple[str, ...], text: str) -> pd.DataFrame:
    """Return the frame with whole columns hidden, or as it is."""
    return table.assign(**dict.fromkeys(cells, text)) if hide else table


def _put(frame: pd.DataFrame, mask: Mask, cells: tuple[str, ...], text: str) -> pd.DataFrame:
    frame = frame.copy()
    for cell in cells:
        frame[cell] = frame[cell].where(~mask | frame[cell].isna(), text)
    return frame


def _label(term: str, level: str) -> str:
    return f"{term}: {level}" if level else term


def _notes(minimum: int, groups_hidden: bool, rows: int, strata: pd.DataFrame) -> tuple[str, ...]:
    if minimum == 0:
        return ("The plan sets report.minimum_count = 0: no count is hidden.",)
    notes = [
        f"Counts under {minimum}, and figures that rest on so few rows, are hidden; so is the next smallest where "
        "a total would give them away.",
        "Propensity bins with few rows are joined with their neighbours.",
    ]
    if groups_hidden:
        notes.append(
            f"A group has fewer than {minimum} rows, so no effect and no comparison of the groups is shown."
        )
    elif rows:
        notes.append(f"{rows} row(s) of the balance table are hidden.")
    hidden_strata = int(strata["exposed"].map(is_hidden).sum())
    if hidden_strata:
        notes.append(f"Exposure counts of {hidden_strata} stratum(s) are hidden.")
    return tuple(notes)
