"""Released frames as tables of texts: one description that the page and the terminal both draw from."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any

import pandas as pd

from steelyard.data.checkup import Checkup
from steelyard.report.disclosure import Released
from steelyard.report.numbers import UNDEFINED, count, fixed, p_value, percent, significant
from steelyard.report.suppression import is_hidden
from steelyard.report.words import (
    COMPARISONS,
    MEASURES,
    confidence,
    effect_decimals,
    joint_test,
    listed,
    mean_decimals,
)

Writer = Callable[[float], str]
# What is counted, as it may leave the house or, for the analyst's own check-up, in full.
Counted = Released | Checkup


@dataclass(frozen=True)
class Table:
    """A table ready to print.

    Attributes
    ----------
    name : str
        A word for ids.
    caption : str
    columns : texts
    rows : rows of texts, as long as ``columns``
    text_columns : int
        How many columns at the left are text; the first one names the row.
    groups : (heading, columns) of the columns after the first ones, or none
    note : str
    """

    name: str
    caption: str
    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    text_columns: int = 1
    groups: tuple[tuple[str, int], ...] = ()
    note: str = ""


def cell(value: object, writer: Writer) -> str:
    """Return a hidden cell's text, or the number as ``writer`` writes it."""
    return str(value) if is_hidden(value) else writer(float(value))  # type: ignore[arg-type]


def with_decimals(decimals: int) -> Writer:
    """Return a writer of numbers with that many decimals."""
    return lambda value: fixed(value, decimals)


def facts_table(released: Counted) -> Table:
    """What the extract and the design hold."""
    rows = tuple((str(r.fact), cell(r.value, count)) for r in released.facts.itertuples())
    return Table("facts", "The extract and its design, as counted", ("", "Count"), rows)


def weights_table(released: Counted) -> Table:
    """The sampling weights."""
    rows = tuple(
        (str(r.statistic), cell(r.all_rows, significant), cell(r.domain_rows, significant))
        for r in released.weights.itertuples()
    )
    return Table(
        "sampling-weights", "The sampling weights", ("", "All rows", "Domain"), rows,
        note="Design effect of weighting 1 + cv²; effective size (Σs)²/Σs² (Kish 1965).",
    )  # fmt: skip


def exclusions_table(released: Counted) -> Table:
    """Rows left out, by reason."""
    rows = tuple(
        (str(r.reason), cell(r.rows, count), cell(r.share, percent)) for r in released.exclusions.itertuples()
    )
    return Table(
        "exclusions",
        "Rows left out of the estimates, by the first reason that holds",
        ("Reason", "Rows", "Share of the extract"),
        rows,
        note="Rows left out stay in the design: their strata and PSUs count in the variance.",
    )


def missing_table(released: Counted) -> Table:
    """Missing values by column and exposure."""
    rows = tuple(
        (
            str(r.column),
            cell(r.missing, count),
            *(cell(v, percent) for v in (r.share, r.share_exposed, r.share_reference)),
        )
        for r in released.missing.itertuples()
        if is_hidden(r.missing) or r.missing > 0
    )
    complete = [
        str(r.column) for r in released.missing.itertuples() if not is_hidden(r.missing) and r.missing == 0
    ]
    columns = ("Column", "Rows", "Share", "of exposed", "of reference")
    note = f"Complete: {listed(complete)}." if complete else ""
    return Table("missing", "Missing values in the domain", columns, rows, note=note)


def strata_table(released: Counted, fewest_psus: int | None = None) -> Table:
    """Strata that hold the domain; those with the fewest PSUs, if so many are asked for."""
    strata = released.strata
    if fewest_psus is not None:
        places = strata["psus"].to_numpy().argsort(kind="stable")[:fewest_psus]
        strata = strata.iloc[sorted(places)]
    rows = tuple(
        (
            str(r.stratum),
            *(
                cell(v, count)
                for v in (
                    r.psus,
                    r.domain_rows,
                    r.exposed,
                    r.reference,
                    r.psus_without_exposed,
                    r.psus_without_reference,
                )
            ),
        )
        for r in strata.itertuples()
    )
    columns = ("Stratum", "PSUs", "Rows", "Exposed", "Reference", "PSUs, no exposed", "PSUs, no reference")
    return Table("strata", "Strata that hold the domain", columns, rows, note="Rows are those of the domain.")


def group_weights_table(released: Released) -> Table:
    """The two groups: rows, weights and effective sizes."""
    writers: tuple[tuple[str, str, Writer], ...] = (
        ("Rows with a weight", "rows", count),
        ("Sum of sampling weights", "sampling_weight", significant),
        ("Sum of combined weights", "combined_weight", significant),
        ("Effective size before", "effective_before", with_decimals(1)),
        ("Effective size after", "effective_after", with_decimals(1)),
        ("Largest share of one row, after", "largest_row_share", percent),
        ("Largest share of one PSU, after", "largest_psu_share", percent),
    )
    note = "Effective size (Σw)²/Σw² (Kish 1965). Shares are of the group's combined weight."
    return _by_group(released, "group-weights", "The groups and their weights", writers, note)


def propensity_table(released: Released) -> Table:
    """The two groups: their range of the propensity."""
    writers: tuple[tuple[str, str, Writer], ...] = (
        ("Smallest propensity", "propensity_min", _probability),
        ("Mean propensity", "propensity_mean", _probability),
        ("Largest propensity", "propensity_max", _probability),
        ("Rows outside the other group's range", "outside", count),
    )
    note = "The mean is under the sampling weights."
    return _by_group(released, "propensity", "The groups on the propensity", writers, note)


def _by_group(
    released: Released, name: str, caption: str, writers: Iterable[tuple[str, str, Writer]], note: str
) -> Table:
    by_group = released.groups.set_index("group")
    rows = tuple(
        (label, *(cell(by_group.loc[group, column], writer) for group in ("exposed", "reference")))
        for label, column, writer in writers
    )
    heads = (f"{g.capitalize()} ({by_group.loc[g, 'level']})" for g in ("exposed", "reference"))
    return Table(name, caption, ("", *heads), rows, note=note)


def joint_tests_table(released: Released) -> Table:
    """The tests of all terms together."""
    tests = [
        ("All differences, before", released.joint_before),
        ("All differences, after", released.joint_after),
        ("The propensity's moment conditions", released.over_identification),
    ]
    rows = tuple((label, joint_test(test)) for label, test in tests if test is not None)
    return Table(
        "joint-tests", "Tests of all terms together", ("What is tested to be zero", "Result"), rows, 2
    )


def extremes_table(released: Released) -> Table:
    """Rows with an extreme propensity."""
    rows = tuple(
        (str(r.propensity), cell(r.exposed_rows, count), cell(r.reference_rows, count))
        for r in released.extremes.itertuples()
    )
    return Table("extremes", "Rows with an extreme propensity", ("Propensity", "Exposed", "Reference"), rows)


def balance_table(released: Released) -> Table:
    """The groups compared, before and after, term by term."""
    records = released.balance.to_dict("records")
    parts = (("mean_exposed", "mean_reference"), ("smd", "variance_ratio", "ks"), ("p",))
    rows = []
    for record in records:
        means = [record[f"{name}_{when}"] for when in ("before", "after") for name in parts[0]]
        size = max((abs(v) for v in means if isinstance(v, float) and math.isfinite(v)), default=0.0)
        writers: dict[str, Writer] = dict.fromkeys(
            parts[0], with_decimals(3 if size < 10 else 2 if size < 100 else 1)
        )
        writers |= dict.fromkeys(parts[1], with_decimals(2)) | {"p": p_value}
        cells = [
            cell(record[f"{name}_{when}"], writers[name])
            for when in ("before", "after")
            for name in ("mean_exposed", "mean_reference", "smd", "variance_ratio", "ks", "p")
        ]
        rows.append((term_label(record), *cells))
    heads = ("Exposed", "Reference", "SMD", "Var. ratio", "KS", "p")
    return Table(
        "balance",
        "The groups compared, term by term",
        ("Term", *heads, *heads),
        tuple(rows),
        groups=(("", 1), ("Before: sampling weights", 6), ("After: combined weights", 6)),
        note="Means of each group, standardized mean difference (SMD), ratio of variances exposed over reference, "
        "Kolmogorov-Smirnov distance (KS), p of the design-based test of the difference. Common practice, not a "
        f"verdict: |SMD| under 0.1, variance ratio 0.5 to 2, p above 0.05. {UNDEFINED} not defined, "
        "or zero by construction.",
    )


def effects_table(released: Released) -> Table:
    """The effects with intervals and tests, and the standard errors with the propensity known beside them."""
    rows = []
    known = released.effects_known.to_dict("records")
    for record, other in zip(released.effects.to_dict("records"), known, strict=True):
        effect, mean = with_decimals(effect_decimals(record)), with_decimals(mean_decimals(record))
        rows.append(
            (
                str(record["outcome"]),
                MEASURES[record["measure"]],
                cell(record["exposed"], mean),
                cell(record["reference"], mean),
                cell(record["estimate"], effect),
                cell(record["ci_low"], effect),
                cell(record["ci_high"], effect),
                cell(record["std_error"], effect),
                cell(other["std_error"], effect),
                cell(record["statistic"], with_decimals(2)),
                cell(record["p_value"], p_value),
            )
        )
    first = released.effects.iloc[0]
    columns = (
        *("Outcome", "Measure", "Exposed", "Reference", "Estimate", "from", "to"),
        *("estimated", "known", "t", "p"),
    )
    replicates = "" if pd.isna(first["replicates"]) else f", {count(first['replicates'])} replicates"
    design = (
        ""
        if pd.isna(first["strata"])
        else f"{cell(first['psus'], count)} PSUs, {count(first['strata'])} strata, "
    )
    note = (
        f"{first['estimand']}; domain: {first['domain']}. {cell(first['rows'], count)} rows, {design}"
        f"{first['df']:g} degrees of freedom; variance: {first['variance']}{replicates}. SE: "
        "standard error, with the propensity counted as estimated and taken as known. The test of a ratio is that of "
        "its logarithm. An effect adjusted for covariates is a regression's, not the contrast of the means beside it."
    )
    return Table(
        "effects",
        "Effects, with intervals and tests",
        columns,
        tuple(rows),
        text_columns=2,
        groups=(("", 2), ("Weighted means", 2), ("", 1), ("Interval", 2), ("SE, propensity", 2), ("", 2)),
        note=note,
    )


def effects_summary_table(released: Released) -> Table:
    """The effects in as few columns as a terminal has room for."""
    rows = []
    for record in released.effects.to_dict("records"):
        effect, mean = with_decimals(effect_decimals(record)), with_decimals(mean_decimals(record))
        shown = is_hidden(record["ci_low"])
        interval = " to ".join(cell(record[name], effect) for name in ("ci_low", "ci_high"))
        rows.append(
            (
                str(record["outcome"]),
                COMPARISONS[record["measure"]],
                cell(record["exposed"], mean),
                cell(record["reference"], mean),
                cell(record["estimate"], effect),
                str(record["ci_low"]) if shown else interval,
                cell(record["p_value"], p_value),
            )
        )
    level = confidence(released.plan)
    columns = ("Outcome", "Measure", "Exposed", "Reference", "Estimate", f"{level} interval", "p")
    return Table("effects-summary", "Effects", columns, tuple(rows), text_columns=2)


def sensitivity_table(released: Released) -> Table:
    """E-values."""
    records = released.sensitivity.to_dict("records")
    rows = tuple(
        (
            str(r["outcome"]),
            MEASURES[r["measure"]],
            *(
                cell(r[name], significant)
                for name in ("risk_ratio", "risk_ratio_low", "risk_ratio_high", "e_value", "e_value_limit")
            ),
            str(r["approximation"]) or "exact",
        )
        for r in records
    )
    columns = (
        "Outcome",
        "Measure",
        "Risk ratio",
        "from",
        "to",
        "estimate",
        "interval",
        "Risk ratio made from",
    )
    return Table(
        "sensitivity",
        "E-values",
        columns,
        rows,
        text_columns=2,
        groups=(("", 3), ("Interval", 2), ("E-value of the", 2), ("", 1)),
    )


def inputs_table(files: pd.DataFrame) -> Table:
    """The files of the extract, without their rows."""
    rows = tuple(
        (str(r.file), count(float(r.bytes)) if pd.notna(r.bytes) else "in memory", str(r.sha256) or "none")
        for r in files.itertuples()
    )
    return Table("inputs", "Files of the extract", ("File", "Bytes", "SHA-256"), rows)


def pairs_table(name: str, caption: str, heads: tuple[str, str], pairs: Iterable[tuple[Any, Any]]) -> Table:
    """A table of names and values."""
    return Table(name, caption, heads, tuple((str(a), str(b)) for a, b in pairs))


def frame_table(caption: str, frame: pd.DataFrame) -> Table:
    """A frame as it is; shares of missing values in per cent."""
    writers: dict[str, Writer] = {"missing": percent, "distinct": count}
    rows = tuple(
        tuple(
            ("" if pd.isna(value) else writers[str(name)](float(value))) if name in writers else str(value)
            for name, value in record.items()
        )
        for record in frame.to_dict("records")
    )
    return Table(
        "frame", caption, tuple(str(name) for name in frame.columns), rows, text_columns=len(frame.columns)
    )


def term_label(record: dict[str, Any]) -> str:
    """Return a balance row's term and level as one text."""
    return f"{record['term']}: {record['level']}" if record["level"] else str(record["term"])


def _probability(value: float) -> str:
    if 0 < value < 0.01:
        return "< 0.01"
    return "> 0.99" if 0.99 < value < 1 else fixed(value, 2)
