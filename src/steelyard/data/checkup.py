"""The check-up of an extract and its design: what is there, what was left out, and what to mend."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from steelyard.data.blocks import Block, Rows
from steelyard.data.kish import coefficient_of_variation, effective_size, weighting_effect
from steelyard.data.passes import Engine
from steelyard.data.reading import Reader
from steelyard.data.tally import Tally, WeightSums
from steelyard.data.units import Units

# Rules of thumb (common practice, no source): where a figure is worth a word.
UNEQUAL_WEIGHTS = 3.0
MUCH_MISSING, MISSING_GAP = 0.05, 0.05
SMALL_GROUP, FEW_DEGREES = 30, 30
MUCH_EXCLUDED = 0.20
LABELS_SHOWN = 5


@dataclass(frozen=True)
class Finding:
    """Something the analyst should know before she trusts the extract: what, and the mend.

    ``weight`` is "note" (good to know), "warning" (may bias or mislead) or "error" (a run would refuse).
    """

    weight: str
    message: str
    mend: str


@dataclass(frozen=True)
class Checkup:
    """The extract and the design as found, nothing estimated.

    Attributes
    ----------
    files : frame
        ``file`` (name relative to the plan, or "in memory"), ``rows``, ``bytes``, ``sha256``.
    facts : frame
        ``fact``, ``value`` (numbers): rows, rows in the domain, strata, PSUs, units of later stages,
        rows with weight zero, exposed rows, reference rows, PSUs minus strata.
    weights : frame
        ``statistic``, ``all_rows``, ``domain_rows``: sum, mean, min, max, cv, design effect of
        weighting 1 + cv^2 (Kish 1965), effective size (sum w)^2 / sum w^2.
    exclusions : frame
        ``reason``, ``rows``, ``share`` (of the extract).
    strata : frame
        ``stratum``, ``psus``, ``rows``, ``domain_rows``, ``exposed``, ``reference``,
        ``psus_without_exposed``, ``psus_without_reference``.
    missing : frame
        ``column``, ``missing``, ``share`` (of rows where the domain holds), ``share_exposed``,
        ``share_reference``.
    findings : tuple of Finding
    """

    files: pd.DataFrame
    facts: pd.DataFrame
    weights: pd.DataFrame
    exclusions: pd.DataFrame
    strata: pd.DataFrame
    missing: pd.DataFrame
    findings: tuple[Finding, ...]


def conclude(
    reader: Reader,
    tally: Tally,
    rows: Rows,
    notes: tuple[str, ...],
    files: pd.DataFrame,
    engine: Engine,
) -> Checkup:
    """Put the check-up together from what was counted while the extract was read."""
    units = rows.units
    exposed, reference = engine.run(
        "check-up: exposure by unit", rows.blocks, _GroupsByUnit(len(units.stages[-1]))
    )
    strata = _strata(units, exposed, reference)
    missing = _missing(tally)
    checkup = Checkup(
        files=files,
        facts=_facts(tally, units, exposed, reference),
        weights=_weights(tally),
        exclusions=pd.DataFrame(
            [
                {"reason": reason, "rows": count, "share": count / tally.rows}
                for reason, count in rows.exclusions.items()
            ],
            columns=["reason", "rows", "share"],
        ),
        strata=strata,
        missing=missing,
        findings=(),
    )
    found = (
        *(Finding("note", note, "Check that this is how the sample was numbered.") for note in notes),
        *_design_findings(reader, strata, units, exposed, reference),
        *_weight_findings(tally),
        *_replicate_findings(reader, tally),
        *_missing_findings(missing),
        *_size_findings(tally, rows, exposed, reference),
    )
    return replace(checkup, findings=found)


def degrees_of_freedom(units: Units) -> int:
    """Return PSUs minus strata, over strata that hold a row of the domain."""
    inside = units.stages[0].domain_rows > 0
    return int(_psus(units)[inside].sum() - inside.sum())


@dataclass(frozen=True)
class _GroupsByUnit:
    """Count exposed and reference rows in each unit of the last stage; two (U,) arrays."""

    count: int

    def __call__(self, block: Block) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        is_exposed = block.exposure == 1
        return (
            np.bincount(block.unit[is_exposed], minlength=self.count),
            np.bincount(block.unit[~is_exposed], minlength=self.count),
        )


def _psus(units: Units) -> NDArray[np.int64]:
    if units.clustered:
        return np.bincount(units.stages[1].parent, minlength=len(units.stages[0]))
    return units.stages[0].rows


def _strata(units: Units, exposed: NDArray[np.int64], reference: NDArray[np.int64]) -> pd.DataFrame:
    strata = units.stages[0]
    count = len(strata)
    stratum = units.ancestor(0)
    frame = pd.DataFrame(
        {
            "stratum": strata.labels.astype(object),
            "psus": _psus(units),
            "rows": strata.rows,
            "domain_rows": strata.domain_rows,
            "exposed": np.bincount(stratum, exposed, count).astype(int),
            "reference": np.bincount(stratum, reference, count).astype(int),
        }
    )
    for name, rows in (("exposed", exposed), ("reference", reference)):
        frame[f"psus_without_{name}"] = (
            np.bincount(units.stages[1].parent, _by_psu(units, rows) == 0, count).astype(int)
            if units.clustered
            else 0
        )
    return frame


def _by_psu(units: Units, values: NDArray[np.int64]) -> NDArray[np.float64]:
    return np.bincount(units.ancestor(1), values, len(units.stages[1])).astype(np.float64)


def _facts(
    tally: Tally, units: Units, exposed: NDArray[np.int64], reference: NDArray[np.int64]
) -> pd.DataFrame:
    facts: list[tuple[str, int]] = [
        ("rows in the extract", tally.rows),
        ("rows in the domain, complete", tally.domain_weights.count),
        ("exposed rows", int(exposed.sum())),
        ("reference rows", int(reference.sum())),
        ("rows with sampling weight 0", tally.zero_weights),
        ("strata", len(units.stages[0])),
        ("strata in the domain", int((units.stages[0].domain_rows > 0).sum())),
        ("PSUs", int(_psus(units).sum())),
    ]
    if units.clustered:
        facts.append(("PSUs in the domain", int((units.stages[1].domain_rows > 0).sum())))
    facts += [
        (f"units of stage {number} ({stage.columns[0]})", len(stage))
        for number, stage in enumerate(units.stages[2:], start=2)
    ]
    facts.append(("PSUs minus strata in the domain", degrees_of_freedom(units)))
    if tally.reader.replicates:
        facts.append(("replicate weights", len(tally.reader.replicates)))
    return pd.DataFrame(facts, columns=["fact", "value"])


def _weights(tally: Tally) -> pd.DataFrame:
    def column(sums: WeightSums) -> list[float]:
        count, total, squares = sums.count, sums.total, sums.squares
        return [
            total,
            total / count if count else np.nan,
            sums.low if count else np.nan,
            sums.high if count else np.nan,
            coefficient_of_variation(count, total, squares),
            weighting_effect(count, total, squares),
            effective_size(total, squares),
        ]

    return pd.DataFrame(
        {
            "statistic": ["sum", "mean", "min", "max", "cv", "design effect of weighting", "effective size"],
            "all_rows": column(tally.weights),
            "domain_rows": column(tally.domain_weights),
        }
    )


def _missing(tally: Tally) -> pd.DataFrame:
    records = []
    for name, counts in tally.missing.items():
        share = np.divide(counts, tally.inside, out=np.zeros(3), where=tally.inside > 0)
        records.append(
            {
                "column": name,
                "missing": int(counts[0]),
                "share": share[0],
                "share_exposed": share[1],
                "share_reference": share[2],
            }
        )
    return pd.DataFrame.from_records(records)


def _design_findings(
    reader: Reader,
    strata: pd.DataFrame,
    units: Units,
    exposed: NDArray[np.int64],
    reference: NDArray[np.int64],
) -> list[Finding]:
    found = []
    lone = strata[strata["psus"] == 1]
    if len(lone):
        refused = reader.plan.design.single_psu == "refuse"
        found.append(
            Finding(
                "error" if refused else "note",
                f"{len(lone)} stratum(s) have one PSU: {_some(lone['stratum'])}.",
                'Set design.single_psu to "recentre", "collapse" or "self-representing".'
                if refused
                else f'They are treated as design.single_psu = "{reader.plan.design.single_psu}" says.',
            )
        )
    for name in ("exposed", "reference"):
        without = strata[(strata["domain_rows"] > 0) & (strata[name] == 0)]
        if len(without):
            found.append(
                Finding(
                    "warning",
                    f"{len(without)} stratum(s) of the domain have no {name} rows: {_some(without['stratum'])}.",
                    "The comparison there rests on the model alone; join strata in the formula, or leave "
                    "them out through data.domain.",
                )
            )
    if units.clustered:
        inside = units.stages[1].domain_rows > 0
        for name, rows in (("exposed", exposed), ("reference", reference)):
            count = int((inside & (_by_psu(units, rows) == 0)).sum())
            if count:
                found.append(
                    Finding(
                        "note",
                        f"{count} of {int(inside.sum())} PSUs in the domain have no {name} rows.",
                        "Comparisons run between PSUs there: add what differs between PSUs to the formula.",
                    )
                )
    return found


def _weight_findings(tally: Tally) -> list[Finding]:
    found = []
    sums = tally.weights
    effect = weighting_effect(sums.count, sums.total, sums.squares)
    if effect > UNEQUAL_WEIGHTS:
        found.append(
            Finding(
                "note",
                f"The sampling weights are very unequal: their design effect is {effect:.1f}, so "
                f"{sums.count:,} rows are worth {effective_size(sums.total, sums.squares):,.0f} "
                "(common practice: a word above 3).",
                "Ask the producer whether the largest were meant.",
            )
        )
    if tally.zero_weights:
        found.append(
            Finding(
                "note",
                f"{tally.zero_weights:,} row(s) have sampling weight 0: they stay in the design and count for "
                "nothing in the estimates.",
                "Check that this is what the producer meant.",
            )
        )
    return found


def _replicate_findings(reader: Reader, tally: Tally) -> list[Finding]:
    supplied = reader.plan.design.replicates
    if supplied is None:
        return []
    frame = tally.replicates.frame()
    low, high = frame["share_of_full"].min(), frame["share_of_full"].max()
    found = [
        Finding(
            "note",
            f"The extract has {len(frame)} replicate weights ({supplied.method}), {frame['column'].iloc[0]} to "
            f"{frame['column'].iloc[-1]}; they add up to {low:.3f} to {high:.3f} times the full weights.",
            'They are used where variance.method is "supplied".',
        )
    ]
    return found + [
        Finding("warning", message, mend) for message, mend in tally.replicates.warnings(supplied)
    ]


def _missing_findings(missing: pd.DataFrame) -> list[Finding]:
    found = []
    for row in missing.itertuples():
        if row.share > MUCH_MISSING:
            found.append(
                Finding(
                    "warning",
                    f"{row.column} is missing in {row.share:.1%} of the domain (common practice: a word "
                    "above 5%).",
                    "Rows without it leave the domain: ask whether they differ, and consider imputation.",
                )
            )
        if abs(row.share_exposed - row.share_reference) > MISSING_GAP:
            found.append(
                Finding(
                    "warning",
                    f"{row.column} is missing in {row.share_exposed:.1%} of the exposed but "
                    f"{row.share_reference:.1%} of the reference rows (common practice: a word above 5 points).",
                    "Leaving them out may bias the comparison: find out why it is missing.",
                )
            )
    return found


def _size_findings(
    tally: Tally, rows: Rows, exposed: NDArray[np.int64], reference: NDArray[np.int64]
) -> list[Finding]:
    found = []
    for name, counts in (("exposed", exposed), ("reference", reference)):
        if counts.sum() < SMALL_GROUP:
            found.append(
                Finding(
                    "warning",
                    f"There are only {int(counts.sum())} {name} rows in the domain (common practice: a word "
                    f"below {SMALL_GROUP}).",
                    "Widen the domain; estimates on so few rows are unstable and may disclose persons.",
                )
            )
    df = degrees_of_freedom(rows.units)
    if df < FEW_DEGREES:
        found.append(
            Finding(
                "warning",
                f"The design leaves {df} degrees of freedom in the domain (common practice: a word below 30).",
                "Standard errors are unstable; read p-values and intervals with care.",
            )
        )
    in_expression = int(tally.inside[0])
    left_out = in_expression - tally.domain_weights.count
    if in_expression and left_out / in_expression > MUCH_EXCLUDED:
        found.append(
            Finding(
                "warning",
                f"{left_out:,} of the {in_expression:,} rows of the domain ({left_out / in_expression:.1%}) are "
                "left out because something is missing (common practice: a word above 20%).",
                "See which columns cost most below, and whether the plan needs them.",
            )
        )
    return found


def _some(labels: pd.Series[str]) -> str:
    named = [str(label) for label in labels[:LABELS_SHOWN]]
    return ", ".join(named) + (", ..." if len(labels) > LABELS_SHOWN else "")
