"""The variance in words and numbers: how it was made, and two ways side by side."""

from __future__ import annotations

import pandas as pd

from steelyard.plan import Plan
from steelyard.report.disclosure import Released
from steelyard.report.numbers import UNDEFINED, count, fixed
from steelyard.report.suppression import is_hidden
from steelyard.report.tables import Table, cell, with_decimals
from steelyard.report.words import MEASURES, effect_decimals
from steelyard.results.variance_made import VarianceMade

METHODS = {
    "linearization": "linearization",
    "jackknife": "delete-one jackknife",
    "brr": "balanced repeated replication",
    "fay": "Fay's balanced repeated replication",
    "bootstrap": "rescaled bootstrap",
    "successive-difference": "successive difference replication",
}


def variance_in_words(made: VarianceMade, plan: Plan) -> str:
    """Return the method with the number of replicates, degrees of freedom and the propensity's part."""
    text = METHODS[made.method]
    if made.replicated:
        origin = "supplied with the extract" if made.origin == "supplied" else "made from the design"
        text += f", {count(made.replicates)} replicates {origin}"
        if made.failed:
            text += f", {len(made.failed)} of which failed"
    return f"{text}; {made.df:g} degrees of freedom; propensity {plan.variance.propensity}"


def standard_errors_table(released: Released) -> Table:
    """Each effect's standard error by replicates and by linearization; no rows where only one was made."""
    rows = []
    pairs = [(released.effects, released.effects_known), (released.beside, released.beside_known)]
    if len(released.beside):
        for place in range(len(released.effects)):
            first = released.effects.iloc[place]
            for frame, known in pairs:
                rows.append(_row(frame.iloc[place].to_dict(), known.iloc[place].to_dict(), first.to_dict()))
    return Table(
        "standard-errors",
        "Standard errors side by side",
        (
            *("Outcome", "Measure", "Variance", "Replicates", "df"),
            *("estimated", "known", "to the first", "from", "to"),
        ),
        tuple(rows),
        text_columns=3,
        groups=(("", 5), ("SE, propensity", 2), ("Ratio", 1), ("Interval", 2)),
        note="Both ways estimate the same quantity. They agree in large samples; where they are far apart, the design "
        "has few PSUs, or an estimate is far from linear in the data.",
    )


def _row(record: dict[str, object], known: dict[str, object], first: dict[str, object]) -> tuple[str, ...]:
    effect = with_decimals(effect_decimals(first))
    # One digit more than elsewhere, since these are here to be compared.
    error = with_decimals(effect_decimals(first) + 1)
    replicates = record["replicates"]
    return (
        str(record["outcome"]),
        MEASURES[str(record["measure"])],
        str(record["variance"]),
        "" if pd.isna(replicates) else count(float(replicates)),  # type: ignore[arg-type]
        f"{record['df']:g}",
        cell(record["std_error"], error),
        cell(known["std_error"], error),
        _ratio(record["std_error"], first["std_error"]),
        cell(record["ci_low"], effect),
        cell(record["ci_high"], effect),
    )


def _ratio(of: object, to: object) -> str:
    if is_hidden(of) or is_hidden(to):
        return str(of)
    return fixed(float(of) / float(to), 3) if float(to) > 0 else UNDEFINED  # type: ignore[arg-type]
