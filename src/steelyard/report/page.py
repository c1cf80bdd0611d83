"""The report as one HTML page: nothing fetched, no script, every label from the data escaped."""

from __future__ import annotations

from dataclasses import dataclass
from importlib.resources import files
from typing import Any

from steelyard.errors import MissingExtraError
from steelyard.plan import SuppliedReplicates
from steelyard.report import tables
from steelyard.report.disclosure import Released, release
from steelyard.report.figures import Picture, pictures
from steelyard.report.methods import methods
from steelyard.report.multilevel import (
    among_clusters_table,
    between_table,
    cluster_overlap_table,
    multilevel_tables,
)
from steelyard.report.numbers import count, thin
from steelyard.report.record import plan_toml
from steelyard.report.side_by_side import METHODS, standard_errors_table, variance_in_words
from steelyard.report.suppression import is_hidden
from steelyard.report.words import (
    balance_finding,
    cost_of_ignoring,
    domain_name,
    estimand_name,
    exposure_name,
    fragility,
    glance,
    question,
)
from steelyard.results.answer import Answer

SECTIONS = (
    ("asked", "What was asked"),
    ("answer", "The answer at a glance"),
    ("extract", "The extract"),
    ("design", "The design"),
    ("overlap", "Overlap"),
    ("balance", "Balance"),
    ("effects", "Effects"),
    ("weights", "Weights"),
    ("sensitivity", "Sensitivity"),
    ("methods", "Methods"),
    ("cautions", "Cautions"),
    ("record", "The record"),
)
SINGLE_PSU = {
    "refuse": "a stratum with one PSU is refused",
    "recentre": "in a stratum with one PSU, its deviation is taken from the mean of all PSUs",
    "collapse": "a stratum with one PSU is joined with a neighbour",
    "self-representing": "a PSU alone in its stratum is taken as chosen with certainty",
}


@dataclass(frozen=True)
class Section:
    """A heading and its place."""

    id: str
    number: int
    title: str


def report_html(answer: Answer, released: Released | None = None) -> str:
    """Return the report of an answer as the text of one HTML file; the same answer gives the same text.

    Raises
    ------
    MissingExtraError
        jinja2 or matplotlib is not installed.
    """
    try:
        from jinja2 import Environment, PackageLoader, StrictUndefined
        from markupsafe import Markup
    except ImportError:
        raise MissingExtraError(
            "The report needs jinja2, which is not installed.", mend="pip install 'steelyard[app]'"
        ) from None
    released = release(answer) if released is None else released
    environment = Environment(
        loader=PackageLoader("steelyard.report", "templates"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters["thin"] = thin
    environment.tests["hidden_text"] = is_hidden
    style = Markup(files("steelyard.report").joinpath("templates", "style.css").read_text(encoding="utf-8"))
    # The pictures are made of texts that svg_text has escaped.
    drawn = {name: _marked(picture, Markup) for name, picture in pictures(released).items()}
    page = environment.get_template("report.html.jinja").render(
        style=style, pictures=drawn, **_contents(answer, released)
    )
    return page if page.endswith("\n") else page + "\n"


def _marked(picture: Picture, markup: Any) -> dict[str, Any]:
    return {
        "name": picture.name,
        "caption": picture.caption,
        "note": picture.note,
        "wide": markup(picture.wide),
        "narrow": markup(picture.narrow),
    }


def _contents(answer: Answer, released: Released) -> dict[str, Any]:
    plan = released.plan
    effects = released.effects.to_dict("records")
    known = released.effects_known.to_dict("records")
    paragraphs, references = methods(answer)
    return {
        "title": plan.title or f"The effect of {exposure_name(plan.exposure)}",
        "sections": {
            id_: Section(id_, number, title) for number, (id_, title) in enumerate(SECTIONS, start=1)
        },
        "released": released,
        "estimand": f"{estimand_name(plan.exposure.estimand)} ({plan.exposure.estimand})",
        "exposure": exposure_name(plan.exposure),
        "domain": domain_name(plan),
        "question": question(released),
        "answers": [glance(row, plan) for row in effects],
        "design": _design(answer),
        "usage": answer.variance.usage(answer.weights.rows.replicates) if answer.weights.replicates else "",
        "trimming": [
            (what, rows if is_hidden(rows) else count(rows))  # type: ignore[arg-type]
            for what, rows in released.trimmed.items()
        ],
        "balance_finding": balance_finding(released),
        "cost": cost_of_ignoring(effects, known, plan),
        "fragility": [
            (row["outcome"], row["measure"], fragility(row))
            for row in released.sensitivity.to_dict("records")
        ],
        "methods": paragraphs,
        "references": references,
        "tables": _tables(answer, released),
        "multilevel": multilevel_tables(released),
        "version": _versions(answer).get("steelyard", ""),
        "plan_text": plan_toml(plan),
        "plan_digest": str(answer.record.get("plan_sha256", "")),
    }


def _tables(answer: Answer, released: Released) -> dict[str, tables.Table]:
    seconds = answer.record.get("seconds", {})
    assert isinstance(seconds, dict)
    made = (
        tables.facts_table(released),
        tables.weights_table(released),
        tables.exclusions_table(released),
        tables.missing_table(released),
        tables.strata_table(released),
        tables.propensity_table(released),
        tables.extremes_table(released),
        tables.group_weights_table(released),
        tables.balance_table(released),
        tables.joint_tests_table(released),
        among_clusters_table(released),
        between_table(released),
        cluster_overlap_table(released),
        tables.effects_table(released),
        standard_errors_table(released),
        tables.sensitivity_table(released),
        tables.inputs_table(answer.checkup.files),
        tables.pairs_table("versions", "Versions", ("Package", "Version"), _versions(answer).items()),
        tables.pairs_table(
            "timings", "Timings", ("Stage", "Seconds"), ((k, f"{v:.2f}") for k, v in seconds.items())
        ),
    )
    return {table.name: table for table in made}


def _versions(answer: Answer) -> dict[str, str]:
    versions = answer.record.get("versions", {})
    assert isinstance(versions, dict)
    return versions


def _design(answer: Answer) -> list[tuple[str, str]]:
    plan = answer.plan
    design = plan.design
    supplied = [] if design.replicates is None else [("Replicate weights", _supplied(design.replicates))]
    return [
        ("Sampling weight", design.weight),
        *supplied,
        ("Strata", ", ".join(design.strata) or "none: one stratum"),
        ("Clusters, from the first stage down", ", ".join(design.clusters) or "none: every row is a PSU"),
        ("Population counts", ", ".join(design.population) or "none: no finite population correction"),
        ("One PSU in a stratum", f"{design.single_psu}: {SINGLE_PSU[design.single_psu]}"),
        ("Variance", variance_in_words(answer.variance, plan)),
    ]


def _supplied(replicates: SuppliedReplicates) -> str:
    fay = "" if replicates.fay is None else f", Fay's factor {replicates.fay:g}"
    return f"{', '.join(replicates.columns)}: {METHODS[replicates.method]}{fay}"
