"""The methods paragraph says what the plan asks for, and cites exactly what it lists."""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from report_answers import made_answer, made_plan

from steelyard.plan import Design, Exposure, Outcome, Variance
from steelyard.report.methods import REFERENCES, methods
from steelyard.results.estimates import EstimateResults
from steelyard.results.multilevel import MultilevelResults
from steelyard.results.variance_made import VarianceMade

PLAIN = Exposure(formula="piped ~ urban")


def told(**changes):
    answer = made_answer(plan=made_plan(**changes))
    paragraphs, references = methods(answer)
    return " ".join(paragraphs), references


@pytest.mark.parametrize("changes", [{}, {"exposure": PLAIN}, {"variance": Variance(propensity="known")}])
def test_the_references_are_exactly_those_cited(changes):
    text, references = told(**changes)
    cited = {
        key
        for group in re.findall(r"\(([^()]*\d{4}[^()]*)\)", text)
        for key in group.split("; ")
        if key in REFERENCES
    }
    assert sorted(REFERENCES[key] for key in cited) == sorted(references)
    assert len(references) == len(set(references))


REPLICATED = {
    "jackknife": "the jackknife that leaves out one PSU at a time (Wolter 2007), with 280 replicates made",
    "brr": "balanced repeated replication (McCarthy 1969; Wolter 2007)",
    "fay": "Fay's balanced repeated replication with the factor 0.3 (Judkins 1990; Wolter 2007)",
    "bootstrap": "the rescaled bootstrap (Rao, Wu & Yue 1992)",
    "successive-difference": "successive difference replication (Fay & Train 1995)",
}


@pytest.mark.parametrize("method", REPLICATED)
@pytest.mark.parametrize("beside", [True, False])
def test_replication_is_said_with_its_own_references_alone(method, beside):
    details = (("fay", 0.3),) if method == "fay" else ()
    made = VarianceMade(method, "made", 260.0, 280, 20, 280, factors=(1.0,) * 280, details=details)
    answer = made_answer(plan=made_plan(), variance=made)
    answer = replace(answer, beside=answer.effects if beside else None, beside_known=answer.effects_known)
    paragraphs, references = methods(answer)
    text = " ".join(paragraphs)
    assert REPLICATED[method] in text
    assert ("Beside them, variances were linearized" in text) is beside
    assert "estimated again in every replicate" in text
    cited = {key for key in REFERENCES if re.search(rf"[(;] ?{re.escape(key)}[);]", text)}
    assert sorted(REFERENCES[key] for key in cited) == sorted(references)


def test_the_paragraph_follows_the_plan():
    text, _ = told()
    for phrase in (
        "average effect in the population (ATE) of piped in the domain age >= 6 and age <= 14",
        "logistic regression on urban + C(region) + bs(wealth, df=4)",
        "maximum pseudo-likelihood under the sampling weights",
        "capped at their 0.99 quantile",
        "adjusted Wald F test",
        "over-identification chi-square test",
        "PSUs (area) within strata (stratum)",
        "The influence counts the estimation of the propensity",
        "Finite population corrections were made at the first stage, from areas",
        "95% t intervals with 260 degrees of freedom",
        "adjusted for age",
        "steelyard 0.1.0",
    ):
        assert phrase in text


@pytest.mark.parametrize(
    ("changes", "phrase"),
    [
        ({"exposure": replace(PLAIN, link="probit")}, "probit regression"),
        ({"exposure": replace(PLAIN, weighted=False)}, "without the sampling weights"),
        ({"exposure": replace(PLAIN, stabilize=True)}, "stabilized by the marginal share"),
        ({"exposure": replace(PLAIN, propensity_range=(0.05, 0.95))}, "outside 0.05 to 0.95"),
        ({"exposure": replace(PLAIN, estimand="ATT")}, "the exposed's standard deviation"),
        ({"design": Design(weight="w")}, "rows, each of which is a PSU of its own, without strata"),
        ({"design": Design(weight="w", clusters="area")}, "No finite population correction"),
        ({"variance": Variance(propensity="known")}, "The propensity was treated as known."),
        ({"variance": Variance(confidence=0.9)}, "90% t intervals"),
    ],
)
def test_each_choice_of_the_plan_has_its_words(changes, phrase):
    assert phrase in told(**changes)[0]


def test_a_lone_psu_is_mentioned_only_where_there_is_one():
    assert "joined with a neighbouring" not in told(design=Design(weight="w", single_psu="collapse"))[0]
    answer = made_answer(plan=made_plan(design=Design(weight="w", single_psu="collapse")))
    strata = answer.checkup.strata.assign(psus=[1, *answer.checkup.strata["psus"][1:]])
    paragraphs, _ = methods(replace(answer, checkup=replace(answer.checkup, strata=strata)))
    assert "joined with a neighbouring stratum" in " ".join(paragraphs)


def test_a_test_that_was_not_done_is_not_claimed():
    answer = made_answer()
    paragraphs, references = methods(
        replace(answer, balance=replace(answer.balance, over_identification=None))
    )
    assert "over-identification" not in " ".join(paragraphs)
    assert not any("Imai" in reference for reference in references)


def test_only_ratios_speak_of_logarithms():
    text, _ = told(outcome=(Outcome(name="a"), Outcome(name="b"), Outcome(name="c")))
    assert "made on the logarithm" not in text


def test_multilevel_models_are_said_with_their_references():
    parameters = EstimateResults(np.array([0.1]), np.eye(1), ["exposure"], 260.0)
    frame = pd.DataFrame(
        {
            "scaling": ["size", "none"],
            "parameter": "exposure",
            "estimate": [0.1, 0.2],
            "std_error": [0.1, 0.1],
        }
    )
    results = MultilevelResults("score", {"school": 160}, parameters, 1, frame, (0.1, 0.1), ())
    answer = replace(made_answer(plan=made_plan()), multilevel=(results,))
    paragraphs, references = methods(answer)
    assert (
        "For score the effect is the exposure's coefficient in a linear mixed model with random effects of school"
        in paragraphs[2]
    )
    assert (
        "scaled to cluster size and nothing (Pfeffermann et al. 1998; Rabe-Hesketh & Skrondal 2006)."
        in paragraphs[2]
    )
    assert any(reference.startswith("Rabe-Hesketh") for reference in references)
