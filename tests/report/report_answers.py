"""A made answer with realistic frames, so that the report is tested without an extract."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pyarrow as pa

from steelyard.data.checkup import Checkup, Finding
from steelyard.keys import plan_keys
from steelyard.plan import Balance, Data, Design, Exposure, Outcome, Plan, Report
from steelyard.results.answer import Answer, BalanceResults, Overlap
from steelyard.results.estimates import EstimateResults, JointTest
from steelyard.results.variance_made import VarianceMade
from steelyard.results.weights_file import FIELDS

EXPOSED, REFERENCE = 5200, 6300
REGIONS = ("north", "south", "east", "west", "isles", "capital")


def made_plan(**changes):
    given = {
        "title": "Piped water and school days missed",
        "data": Data(
            files="survey.parquet", domain="age >= 6 and age <= 14", missing={"income": (9998, 9999)}
        ),
        "design": Design(weight="w", strata="stratum", clusters=("area", "household"), population="areas"),
        "exposure": Exposure(formula="piped ~ urban + C(region)\n  + bs(wealth, df=4)", cap_quantile=0.99),
        "outcome": (
            Outcome(name="days_missed"),
            Outcome(name="diarrhoea", family="binomial", measure="ratio"),
            Outcome(name="enrolled", family="binomial", measure="odds-ratio", covariates="age"),
        ),
        "balance": Balance(columns=("income",)),
    }
    return Plan(**(given | changes))


def made_balance(region_rows=((1500, 1700), (1200, 1500), (900, 1100), (800, 1000), (500, 700), (300, 300))):
    """25 rows: six regions, four spline columns, one 0/1 number, fourteen other numbers."""
    rng = np.random.default_rng(3)
    records = []

    def add(term, level, exposed, reference, after, counts, indicator):
        spread = 30.0 if reference > 1 else 0.5
        gap, gap_after = exposed - reference, 0.2 * after * spread
        records.append(
            {
                "term": term,
                "level": level,
                "mean_exposed_before": exposed,
                "mean_reference_before": reference,
                "smd_before": gap / spread,
                "variance_ratio_before": np.nan if indicator else 1 + rng.random(),
                "ks_before": abs(gap) if indicator else abs(gap) / spread / 3 + 0.01,
                "p_before": rng.random() ** 4,
                "mean_exposed_after": reference + gap_after,
                "mean_reference_after": reference,
                "smd_after": gap_after / spread,
                "variance_ratio_after": np.nan if indicator else 1 + 0.1 * rng.random(),
                "ks_after": abs(gap_after) if indicator else abs(gap_after) / spread / 3 + 0.01,
                "p_after": rng.random(),
                "rows_exposed": counts[0],
                "rows_reference": counts[1],
            }
        )

    for name, counts in zip(REGIONS, region_rows, strict=True):
        add("region", name, counts[0] / EXPOSED, counts[1] / REFERENCE, rng.normal() / 10, counts, True)
    for k in range(1, 5):
        exposed, reference = rng.random(2)
        add("bs(wealth, df=4)", str(k), exposed, reference, rng.normal(), (EXPOSED - k, REFERENCE - k), False)
    add("urban", "", 0.62, 0.31, 0.4, (3200, 1950), True)
    for k in range(14):
        exposed, reference = 50 * rng.random(2)
        add(f"number_{k}", "", exposed, reference, rng.normal(), (EXPOSED, REFERENCE), False)
    return pd.DataFrame.from_records(records)


def made_checkup(strata=40):
    rng = np.random.default_rng(4)
    exposed, reference = (
        rng.multinomial(EXPOSED, np.full(strata, 1 / strata)),
        rng.multinomial(REFERENCE, np.full(strata, 1 / strata)),
    )
    inside = EXPOSED + REFERENCE
    total = inside + 28_000 + 60 + 95
    statistic = ["sum", "mean", "min", "max", "cv", "design effect of weighting", "effective size"]
    return Checkup(
        files=pd.DataFrame(
            {"file": ["survey.parquet"], "rows": [total], "bytes": pd.array([226_308]), "sha256": ["ab" * 32]}
        ),
        facts=pd.DataFrame(
            [
                ("rows in the extract", total),
                ("rows in the domain, complete", inside),
                ("exposed rows", EXPOSED),
                ("reference rows", REFERENCE),
                ("rows with sampling weight 0", 0),
                ("strata", strata),
                ("strata in the domain", strata),
                ("PSUs", 300),
                ("PSUs in the domain", 300),
                ("degrees of freedom in the domain", 260),
            ],
            columns=["fact", "value"],
        ),
        weights=pd.DataFrame(
            {
                "statistic": statistic,
                "all_rows": [1.2e6, 30.0, 2.5, 182.0, 0.8, 1.64, 24_000.5],
                "domain_rows": [3.4e5, 29.5, 2.5, 182.0, 0.8, 1.64, 7000.5],
            }
        ),
        exclusions=pd.DataFrame(
            {
                "reason": ["outside the domain", "age missing", "income missing"],
                "rows": [28_000, 60, 95],
                "share": [28_000 / total, 60 / total, 95 / total],
            }
        ),
        strata=pd.DataFrame(
            {
                "stratum": [f"stratum {h:02d}" for h in range(strata)],
                "psus": 7,
                "rows": exposed + reference + 700,
                "domain_rows": exposed + reference,
                "exposed": exposed,
                "reference": reference,
                "psus_without_exposed": 1,
                "psus_without_reference": 0,
            }
        ),
        missing=pd.DataFrame(
            {
                "column": ["piped", "age", "income"],
                "missing": [0, 60, 110],
                "share": [0.0, 60 / inside, 110 / inside],
                "share_exposed": [0.0, 30 / EXPOSED, 50 / EXPOSED],
                "share_reference": [0.0, 30 / REFERENCE, 60 / REFERENCE],
            }
        ),
        findings=(
            Finding(
                "note", "12 of 300 PSUs in the domain have no exposed rows.", "Add what differs between PSUs."
            ),
            Finding("warning", "income is missing in 8.1% of the domain.", "Ask whether they differ."),
        ),
    )


def made_overlap():
    edges = np.linspace(0, 1, 21)
    middle = (edges[:-1] + edges[1:]) / 2
    shapes = {"exposed": middle**1.5 * (1 - middle), "reference": middle * (1 - middle) ** 2}
    histogram = pd.DataFrame({"low": edges[:-1], "high": edges[1:]})
    for (group, shape), rows in zip(shapes.items(), (EXPOSED, REFERENCE), strict=True):
        share = shape / shape.sum()
        both = shapes["exposed"] + shapes["reference"]
        histogram[f"{group}_before"] = share
        histogram[f"{group}_after"] = both / both.sum()
        histogram[f"{group}_rows"] = np.round(share * rows).astype(int)
    return Overlap(
        histogram=histogram,
        groups=pd.DataFrame(
            {
                "group": ["exposed", "reference"],
                "level": ["1", "0"],
                "rows": [EXPOSED, REFERENCE],
                "sampling_weight": [128_459.0, 195_884.0],
                "combined_weight": [315_819.0, 329_145.0],
                "effective_before": [2261.5, 4328.7],
                "effective_after": [1131.1, 1750.2],
                "propensity_min": [0.021, 0.004],
                "propensity_mean": [0.61, 0.26],
                "propensity_max": [0.93, 0.92],
                "outside": [12, 386],
                "largest_row_share": [0.008, 0.007],
                "largest_psu_share": [0.04, 0.05],
            }
        ),
        extremes=pd.DataFrame(
            {
                "propensity": ["below 0.01", "below 0.05", "above 0.95", "above 0.99"],
                "exposed_rows": [0, 24, 0, 0],
                "reference_rows": [210, 1107, 0, 0],
            }
        ),
        target="The effect is for the whole population of the domain. Combined weights are cut (110 rows).",
        trimmed={"rows capped": 110},
    )


def made_effects(plan, widths=1.0):
    frame = pd.DataFrame(
        {
            "outcome": [o.name for o in plan.outcome],
            "measure": [o.measure for o in plan.outcome],
            "estimand": plan.exposure.estimand,
            "domain": plan.data.domain,
            "exposed": [4.125, 0.1163, 0.919],
            "reference": [6.349, 0.1609, 0.885],
            "estimate": [-2.2216, 0.7228, 1.474],
            "std_error": np.array([0.2508, 0.069, 0.21]) * widths,
            "ci_low": [-2.7152, 0.599, 0.962],
            "ci_high": [-1.7279, 0.8722, 2.258],
            "df": 260.0,
            "statistic": [-8.86, -3.4, 1.78],
            "p_value": [8.4e-17, 0.0008, 0.0763],
            "variance": "linearization",
            "rows": EXPOSED + REFERENCE,
            "psus": 300,
            "strata": 40,
            "replicates": np.nan,
            "rows_exposed": EXPOSED,
            "rows_reference": REFERENCE,
            "nonzero_exposed": 900,
            "nonzero_reference": 950,
        }
    )
    values = np.array([-2.2216, np.log(0.7228), np.log(1.474)])
    covariance = np.diag((np.array([0.25, 0.095, 0.142]) * widths) ** 2)
    return EstimateResults(values, covariance, list(frame["outcome"]), 260.0, title="Effects", table=frame)


class MadeWeights:
    """Weights of some batches, as a weight file gives them; ``schema`` without replicates."""

    schema = pa.schema(FIELDS)
    replicates = None

    def __init__(self, batches=3, size=50):
        self.batches, self.size = batches, size

    def __call__(self):
        rng = np.random.default_rng(5)
        for number in range(self.batches):
            inside = rng.random(self.size) < 0.6
            e, s = rng.random(self.size), rng.random(self.size)
            yield pa.record_batch(
                [
                    pa.array(np.arange(self.size) + number * self.size),
                    pa.array(e, mask=~inside),
                    pa.array(s),
                    pa.array(1 / e, mask=~inside),
                    pa.array(np.where(inside, s / e, 0.0)),
                    pa.array(inside),
                ],
                schema=self.schema,
            )


def made_answer(minimum=10, **changes):
    plan = changes.pop("plan", None) or made_plan(report=Report(minimum_count=minimum))
    answer = Answer(
        plan=plan,
        checkup=made_checkup(),
        propensity=EstimateResults(np.array([0.1]), np.eye(1), ["Intercept"], 260.0),
        overlap=made_overlap(),
        balance=BalanceResults(
            table=made_balance(),
            joint_before=JointTest("Wald F", 45.6, (24.0, 237.0), 1e-40),
            joint_after=JointTest("Wald F", 1.2, (24.0, 237.0), 0.24),
            over_identification=JointTest("chi-square", 21.0, (18.0, None), 0.28),
        ),
        effects=made_effects(plan),
        effects_known=made_effects(plan, widths=1.25),
        variance=VarianceMade("linearization", "linearized", 260.0, 280, 20),
        beside=None,
        beside_known=None,
        multilevel=(),
        sensitivity=pd.DataFrame(
            {
                "outcome": [o.name for o in plan.outcome],
                "measure": [o.measure for o in plan.outcome],
                "risk_ratio": [0.718, 0.7228, 1.214],
                "risk_ratio_low": [0.667, 0.599, 0.981],
                "risk_ratio_high": [0.772, 0.8722, 1.503],
                "e_value": [2.13, 2.11, 1.72],
                "e_value_limit": [1.91, 1.56, 1.0],
                "approximation": [
                    "difference in standard deviations, 0.91 of it as the logarithm of a risk ratio",
                    "",
                    "common outcome: the square root of the odds ratio stands for the risk ratio",
                ],
            }
        ),
        warnings=("5.4% of the reference rows have a propensity outside the range of the other group.",),
        record={
            "plan": plan_keys(plan),
            "plan_sha256": "cd" * 32,
            "inputs": [{"file": "survey.parquet", "rows": 39_655, "bytes": 226_308, "sha256": "ab" * 32}],
            "versions": {"python": "3.11.7", "steelyard": "0.1.0"},
            "seed": None,
            "seconds": {"propensity": 0.07},
            "warnings": [],
        },
        weights=MadeWeights(),
    )
    return replace(answer, **changes)


def with_groups(answer, exposed, reference=REFERENCE):
    """The answer with groups of other sizes."""
    groups = answer.overlap.groups.assign(rows=[exposed, reference])
    facts = answer.checkup.facts.copy()
    facts.loc[facts["fact"] == "exposed rows", "value"] = exposed
    facts.loc[facts["fact"] == "reference rows", "value"] = reference
    facts.loc[facts["fact"] == "rows in the domain, complete", "value"] = exposed + reference
    return replace(
        answer,
        overlap=replace(answer.overlap, groups=groups),
        checkup=replace(answer.checkup, facts=facts),
    )
