"""The report as one HTML page: no script, nothing fetched, every figure from the answer's own frames."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from steelyard.report import words
from steelyard.report.disclosure import Shown
from steelyard.report.figures import Picture, balance_picture, effects_picture, overlap_picture
from steelyard.report.numbers import count, fixed, interval, number, p_value, percent
from steelyard.report.toml_text import plan_text
from steelyard.results.answer import Answer
from steelyard.results.estimates import JointTest


@dataclass(frozen=True)
class Table:
    """A table for the page: caption, column heads (text, whether numbers), and rows of texts.

    The first cell of a row is its head.
    """

    name: str
    caption: str
    heads: tuple[tuple[str, bool], ...]
    rows: tuple[tuple[str, ...], ...]


def report_html(answer: Answer, shown: Shown) -> str:
    """Return the page."""
    environment = Environment(
        loader=PackageLoader("steelyard.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters["picture"] = _picture
    plan = answer.plan
    levels = tuple(answer.overlap.groups["level"])
    methods, references = words.methods(answer)
    context: dict[str, Any] = {
        "title": plan.title or "Effect of an exposure",
        "question": words.question(answer),
        "findings": [
            words.finding(outcome, row, plan.variance.confidence)
            for outcome, row in zip(plan.outcome, shown.effects.to_dict("records"), strict=True)
        ],
        "warnings": answer.warnings,
        "hidden": shown.hidden,
        "minimum": shown.minimum,
        "checkup_findings": [f for f in answer.checkup.findings if f.weight != "note"],
        "notes": [f for f in answer.checkup.findings if f.weight == "note"],
        "exclusions": _exclusions(answer, shown),
        "missing": _missing(shown),
        "facts": _facts(answer),
        "weights": _weights(answer),
        "overlap_picture": overlap_picture(shown.histogram, (levels[0], levels[1])),
        "groups": _groups(shown),
        "extremes": _extremes(shown),
        "target": answer.overlap.target,
        "balance_picture": balance_picture(shown.balance),
        "balance": _balance(shown),
        "joint": [
            ("All differences, before", _test(answer.balance.joint_before)),
            ("All differences, after", _test(answer.balance.joint_after)),
            ("Moment conditions of the propensity", _over_identification(answer)),
        ],
        "effects_picture": effects_picture(
            plan.outcome, shown.effects, shown.effects_known, plan.variance.confidence
        ),
        "effects": _effects(answer, shown),
        "cost_of_known": words.cost_of_known(answer),
        "propensity": _propensity(answer),
        "sensitivity": _sensitivity(shown),
        "methods": methods,
        "references": references,
        "cautions": words.CAUTIONS,
        "plan_text": plan_text(answer.record["plan"]),  # type: ignore[arg-type]
        "plan_digest": answer.record["plan_sha256"],
        "files": _files(answer),
        "versions": answer.record["versions"],
        "seconds": answer.record["seconds"],
    }
    return environment.get_template("report.html").render(context)


def _picture(picture: Picture) -> Markup:
    # The figures' own texts were escaped when they were drawn.
    return Markup(f'<div class="narrow">{picture.narrow}</div><div class="wide">{picture.wide}</div>')


def _exclusions(answer: Answer, shown: Shown) -> Table:
    rows = [
        (row["reason"], count(row["rows"], shown.minimum), percent(row["share"]))
        for row in shown.exclusions.to_dict("records")
    ]
    total, kept = (int(answer.checkup.facts["value"].iloc[k]) for k in (0, 1))
    # With one count hidden the totals would give it away; they are known from the extract, so it goes unsaid.
    few = (shown.exclusions["rows"] < 0).sum() == 1
    last = (
        "in the domain, complete",
        "not shown" if few else f"{kept:,}",
        "" if few else percent(kept / total),
    )
    return Table(
        "exclusions",
        f"Rows of the extract ({total:,}) and why some are left out; each row is counted once",
        (("Reason", False), ("Rows", True), ("Share", True)),
        (*rows, last),
    )


def _missing(shown: Shown) -> Table:
    return Table(
        "missing",
        "Missing answers, where the domain holds",
        (("Column", False), ("Rows", True), ("Share", True), ("Of exposed", True), ("Of reference", True)),
        tuple(
            (
                row["column"],
                count(row["missing"], shown.minimum),
                percent(row["share"]),
                percent(row["share_exposed"]),
                percent(row["share_reference"]),
            )
            for row in shown.missing.to_dict("records")
        ),
    )


def _facts(answer: Answer) -> Table:
    minimum = answer.plan.report.minimum_count
    counted = {"exposed rows", "reference rows", "rows with sampling weight 0"}
    rows = [
        (
            row["fact"],
            count(-1 if row["fact"] in counted and 0 < row["value"] < minimum else row["value"], minimum),
        )
        for row in answer.checkup.facts.to_dict("records")
    ]
    psus = answer.checkup.strata["psus"]
    rows.append(
        ("PSUs a stratum: fewest, median, most", f"{psus.min():,}, {psus.median():g}, {psus.max():,}")
    )
    return Table("facts", "The design as found", (("Fact", False), ("Value", True)), tuple(rows))


def _weights(answer: Answer) -> Table:
    return Table(
        "weights",
        "Sampling weights",
        (("Statistic", False), ("All rows", True), ("Domain", True)),
        tuple(
            (row["statistic"], number(row["all_rows"], 4), number(row["domain_rows"], 4))
            for row in answer.checkup.weights.to_dict("records")
        ),
    )


def _groups(shown: Shown) -> Table:
    heads = [
        ("", False),
        *[(f"{row['group']} ({row['level']})", True) for row in shown.groups.to_dict("records")],
    ]
    records = shown.groups.to_dict("records")

    def line(label: str, show: Any) -> tuple[str, ...]:
        return (label, *(show(row) for row in records))

    return Table(
        "groups",
        "The groups, their weights and their propensities",
        tuple(heads),
        (
            line("rows with weight", lambda r: count(r["rows"], shown.minimum)),
            line("effective size, sampling weights", lambda r: number(r["effective_before"])),
            line("effective size, combined weights", lambda r: number(r["effective_after"])),
            line("propensity: mean", lambda r: fixed(r["propensity_mean"])),
            line(
                "propensity: range", lambda r: f"{fixed(r['propensity_min'])} to {fixed(r['propensity_max'])}"
            ),
            line("rows outside the other group's range", lambda r: count(r["outside"], shown.minimum)),
            line("largest share of weight held by one row", lambda r: percent(r["largest_row_share"])),
            line("largest share of weight held by one PSU", lambda r: percent(r["largest_psu_share"])),
        ),
    )


def _extremes(shown: Shown) -> Table:
    return Table(
        "extremes",
        "Rows with an extreme propensity (limits are common practice)",
        (("Propensity", False), ("Exposed", True), ("Reference", True)),
        tuple(
            (
                row["propensity"],
                count(row["exposed_rows"], shown.minimum),
                count(row["reference_rows"], shown.minimum),
            )
            for row in shown.extremes.to_dict("records")
        ),
    )


def _balance(shown: Shown) -> Table:
    heads: list[tuple[str, bool]] = [("Term", False)]
    for when in ("before", "after"):
        heads += [
            (f"{name}, {when}", True)
            for name in ("mean exposed", "mean reference", "SMD", "variance ratio", "KS", "p")
        ]
    rows = []
    for row in shown.balance.to_dict("records"):
        cells = [f"{row['term']}: {row['level']}" if row["level"] else row["term"]]
        for when in ("before", "after"):
            cells += [
                number(row[f"mean_exposed_{when}"]),
                number(row[f"mean_reference_{when}"]),
                fixed(row[f"smd_{when}"]),
                fixed(row[f"variance_ratio_{when}"]),
                fixed(row[f"ks_{when}"], 3),
                p_value(row[f"p_{when}"]),
            ]
        rows.append(tuple(cells))
    return Table(
        "balance",
        "Balance of every term: before under the sampling weights, after under the combined weights",
        tuple(heads),
        tuple(rows),
    )


def _effects(answer: Answer, shown: Shown) -> Table:
    rows = []
    pairs = zip(shown.effects.to_dict("records"), shown.effects_known.to_dict("records"), strict=True)
    for row, known in pairs:
        rows.append(
            (
                f"{row['outcome']}, {row['measure']}",
                number(row["exposed"]),
                number(row["reference"]),
                number(row["estimate"]),
                number(row["std_error"]),
                interval(row["ci_low"], row["ci_high"]),
                p_value(row["p_value"]),
                number(known["std_error"]),
            )
        )
    level = f"{answer.plan.variance.confidence:.0%} interval"
    return Table(
        "effects",
        f"Effects ({answer.plan.exposure.estimand})",
        (
            ("Outcome, measure", False),
            ("Mean exposed", True),
            ("Mean reference", True),
            ("Effect", True),
            ("Standard error", True),
            (level, True),
            ("p", True),
            ("Standard error, propensity known", True),
        ),
        tuple(rows),
    )


def _propensity(answer: Answer) -> Table:
    return Table(
        "propensity",
        f"Exposure model, coefficients on the {answer.plan.exposure.link} scale",
        (("Column", False), ("Coefficient", True), ("Standard error", True), ("p", True)),
        tuple(
            (row["name"], number(row["estimate"]), number(row["std_error"]), p_value(row["p_value"]))
            for row in answer.propensity.table.to_dict("records")
        ),
    )


def _sensitivity(shown: Shown) -> Table:
    return Table(
        "sensitivity",
        "E-values (VanderWeele & Ding 2017)",
        (
            ("Outcome, measure", False),
            ("Risk ratio", True),
            ("Its interval", True),
            ("E-value", True),
            ("E-value of the limit", True),
            ("How the ratio was got", False),
        ),
        tuple(
            (
                f"{row['outcome']}, {row['measure']}",
                fixed(row["risk_ratio"]),
                f"{fixed(row['risk_ratio_low'])} to {fixed(row['risk_ratio_high'])}",
                fixed(row["e_value"]),
                fixed(row["e_value_limit"]),
                row["approximation"] or "as estimated",
            )
            for row in shown.sensitivity.to_dict("records")
        ),
    )


def _files(answer: Answer) -> Table:
    return Table(
        "files",
        "Input files",
        (("File", False), ("Rows", True), ("Bytes", True), ("SHA-256", False)),
        tuple(
            (
                row["file"],
                f"{row['rows']:,}",
                "–" if pd.isna(row["bytes"]) else f"{row['bytes']:,}",
                row["sha256"] or "–",
            )
            for row in answer.checkup.files.to_dict("records")
        ),
    )


def _test(test: JointTest) -> str:
    if not np.isfinite(test.statistic):
        if test.df[0] == 0:
            return "nothing left to test: every difference is zero by construction"
        return f"not defined: {test.df[0]:g} terms on too few degrees of freedom"
    if test.df[1] is None:
        return (
            f"chi-square {number(test.statistic)} on {test.df[0]:g} degrees of freedom, p {_p(test.p_value)}"
        )
    return f"F {number(test.statistic)} on {test.df[0]:g} and {test.df[1]:g} degrees of freedom, p {_p(test.p_value)}"


def _over_identification(answer: Answer) -> str:
    test = answer.balance.over_identification
    return "met exactly by overlap weights from a logit" if test is None else _test(test)


def _p(value: float) -> str:
    text = p_value(value)
    return text if text.startswith("<") else f"= {text}"
