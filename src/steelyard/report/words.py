"""The report's sentences: what was asked, what came out, how it was done, and what to beware of."""

from __future__ import annotations

import numpy as np

from steelyard.plan import Outcome, Plan
from steelyard.report.numbers import fixed, interval, number, p_value
from steelyard.results.answer import Answer

MEASURES = {"difference": "difference in means", "ratio": "ratio of means", "odds-ratio": "odds ratio"}
BETWEEN = {"difference": "difference between", "ratio": "ratio of", "odds-ratio": "odds ratio from"}
WHOM = {
    "ATE": "for everybody in the domain",
    "ATT": "for the exposed in the domain",
    "ATC": "for the reference group in the domain",
    "ATO": "for those whose exposure could have gone either way",
}
TREATMENTS = {
    "refuse": "",
    "recentre": "Strata with one PSU contributed their deviation from the mean of all PSUs.",
    "collapse": "Strata with one PSU were joined with their neighbour.",
    "self-representing": "PSUs alone in their stratum were taken as chosen with certainty.",
}

REFERENCES = {
    "binder": "Binder, D. A. (1983). On the variances of asymptotically normal estimators from complex surveys. "
    "International Statistical Review 51, 279–292.",
    "wolter": "Wolter, K. M. (2007). Introduction to Variance Estimation, 2nd ed. Springer.",
    "lunceford": "Lunceford, J. K. and Davidian, M. (2004). Stratification and weighting via the propensity score in "
    "estimation of causal treatment effects. Statistics in Medicine 23, 2937–2960.",
    "zeng": "Zeng, Y., Li, F. and Tong, G. (2025). Survey-weighted propensity score estimators. arXiv 2501.16156.",
    "rosenbaum": "Rosenbaum, P. R. and Rubin, D. B. (1983). The central role of the propensity score in observational "
    "studies for causal effects. Biometrika 70, 41–55.",
    "li": "Li, F., Morgan, K. L. and Zaslavsky, A. M. (2018). Balancing covariates via propensity score weighting. "
    "Journal of the American Statistical Association 113, 390–400.",
    "kish": "Kish, L. (1965). Survey Sampling. Wiley.",
    "korn": "Korn, E. L. and Graubard, B. I. (1990). Simultaneous testing of regression coefficients with complex "
    "survey data: use of Bonferroni t statistics. The American Statistician 44, 270–276.",
    "imai": "Imai, K. and Ratkovic, M. (2014). Covariate balancing propensity score. Journal of the Royal Statistical "
    "Society B 76, 243–263.",
    "vanderweele": "VanderWeele, T. J. and Ding, P. (2017). Sensitivity analysis in observational research: "
    "introducing the E-value. Annals of Internal Medicine 167, 268–274.",
}


def question(answer: Answer) -> str:
    """Return what was asked, as one sentence."""
    plan = answer.plan
    exposed, reference = answer.overlap.groups["level"]
    names = _listed([outcome.name for outcome in plan.outcome])
    domain = f" among rows where {plan.data.domain}" if plan.data.domain else ""
    return (
        f"What difference does {exposure_name(plan)} ({exposed} against {reference}) make to {names}{domain}, "
        f"{WHOM[plan.exposure.estimand]} ({plan.exposure.estimand})?"
    )


def exposure_name(plan: Plan) -> str:
    """Return the exposure's column."""
    return plan.exposure.formula.partition("~")[0].strip()


def finding(outcome: Outcome, row: dict[str, float], confidence: float) -> str:
    """Return one effect in words."""
    if not np.isfinite(row["estimate"]):
        return f"{outcome.name}: hidden, the groups are too small to show."
    level = f"{confidence:.0%}"
    text = (
        f"{outcome.name}: {MEASURES[outcome.measure]} {number(row['estimate'])} "
        f"({level} interval {interval(row['ci_low'], row['ci_high'])}; p {_equals(p_value(row['p_value']))})"
    )
    if np.isfinite(row["exposed"]):
        text += (
            f", with weighted means {number(row['exposed'])} in the exposed and {number(row['reference'])} in "
            "the reference"
        )
    none = 0 if outcome.measure == "difference" else 1
    if row["ci_low"] <= none <= row["ci_high"]:
        return text + ". The interval includes no difference."
    higher = row["estimate"] > none
    return text + f". The interval lies {'above' if higher else 'below'} no difference."


def cost_of_known(answer: Answer) -> str:
    """Return what treating the propensity as known would have done to the standard errors."""
    ratio = answer.effects_known.bse / answer.effects.bse
    if answer.plan.variance.propensity == "known":
        return (
            "The plan treats the propensity as known, so these standard errors leave out that it was estimated: "
            "set variance.propensity to “estimated” to count it."
        )
    low, high = ratio.min(), ratio.max()
    if not np.isfinite(low):
        return ""
    spread = fixed(low) if fixed(low) == fixed(high) else f"{fixed(low)} to {fixed(high)}"
    return (
        f"Treated as known, the propensity would have given standard errors {spread} times these: estimating it is "
        "part of the design of the weights, and counts."
    )


def methods(answer: Answer) -> tuple[str, tuple[str, ...]]:
    """Return a paragraph of methods to paste into a paper, and exactly the references it uses."""
    plan, table = answer.plan, answer.effects.table
    exposure, design = plan.exposure, plan.design
    used = ["rosenbaum", "binder", "wolter", "lunceford", "zeng", "li"]
    weighted = "under the sampling weights" if exposure.weighted else "without sampling weights"
    text = [
        f"The propensity of {exposure_name(plan)} was modelled by {exposure.link} regression "
        f"({exposure.formula.partition('~')[2].strip()}), fitted by maximum pseudo-likelihood {weighted} "
        "(Rosenbaum & Rubin 1983; Binder 1983).",
        f"Balancing weights for the {exposure.estimand} (Li, Morgan & Zaslavsky 2018) were multiplied by the "
        "sampling weights; balance and outcomes were computed under these combined weights.",
    ]
    if exposure.stabilize:
        text.append("The balancing weights were stabilized by the weighted share of each group.")
    if exposure.propensity_range is not None or exposure.cap_quantile is not None:
        text.append(answer.overlap.target.partition(". ")[2] or answer.overlap.target)
    for outcome in plan.outcome:
        text.append(_outcome_method(outcome))
    row = table.iloc[0]
    units = f"{row['psus']:,} PSUs" if design.clusters else f"{row['psus']:,} rows, each its own PSU,"
    strata = f" in {row['strata']:,} strata" if design.strata else ""
    text.append(
        f"Variances were estimated by Taylor linearization (Binder 1983; Wolter 2007) from {units}{strata}"
        + (
            f", with finite population corrections at {len(design.population)} stage(s)"
            if design.population
            else ""
        )
        + "."
    )
    if plan.variance.propensity == "estimated":
        text.append(
            "They include the estimation of the propensity through stacked estimating equations (Lunceford & "
            "Davidian 2004; Zeng, Li & Tong 2025)."
        )
    else:
        text.append("The propensity was treated as known.")
        used = [name for name in used if name not in {"lunceford", "zeng"}]
    if TREATMENTS[design.single_psu] and (answer.checkup.strata["psus"] == 1).any():
        text.append(TREATMENTS[design.single_psu])
    text.append(
        f"Intervals ({plan.variance.confidence:.0%}) and tests use Student's t with {row['df']:g} degrees of freedom "
        "(PSUs minus strata)."
    )
    text.append(
        "Balance was described by differences standardized by the sampling-weighted standard deviation, variance "
        "ratios and weighted Kolmogorov–Smirnov distances, and tested by an adjusted Wald F test (Korn & Graubard "
        "1990)"
        + (
            ""
            if answer.balance.over_identification is None
            else " and by the over-identification test of "
            "the propensity's moment conditions (Imai & Ratkovic 2014)"
        )
        + "."
    )
    text.append(
        "Effective sample sizes follow Kish (1965). Sensitivity to unmeasured confounding is given by E-values "
        "(VanderWeele & Ding 2017)."
    )
    used += (
        ["korn"] + ([] if answer.balance.over_identification is None else ["imai"]) + ["kish", "vanderweele"]
    )
    used.sort(key=lambda name: REFERENCES[name])
    version = answer.record["versions"]["steelyard"]  # type: ignore[index]
    text.append(f"Computed with steelyard {version}.")
    return " ".join(text), tuple(REFERENCES[name] for name in used)


def _outcome_method(outcome: Outcome) -> str:
    if not outcome.covariates:
        return f"The effect on {outcome.name} is the {BETWEEN[outcome.measure]} the groups' weighted (Hájek) means."
    link = {"difference": "identity", "ratio": "log", "odds-ratio": "logit"}[outcome.measure]
    back = "" if outcome.measure == "difference" else " exponential of the"
    return (
        f"The effect on {outcome.name} is the{back} coefficient of the exposure in a weighted {outcome.family} "
        f"regression with {link} link, adjusted for {outcome.covariates}."
    )


CAUTIONS = (
    (
        "Unmeasured confounding",
        "Nobody randomised the exposure. Weighting balances the covariates in the model and says nothing about those "
        "that are not. The E-values say how strong an unmeasured confounder would have to be; whether one exists is "
        "a question for people who know the field.",
    ),
    (
        "Overlap",
        "Where hardly anybody with the same covariates has the other level of exposure, the effect rests on the "
        "model. Look at the overlap before the estimate.",
    ),
    (
        "Small bases",
        "Few PSUs, few rows in a group or few rows that carry most of the weight make standard errors themselves "
        "uncertain. Read the degrees of freedom and the effective sizes beside every interval.",
    ),
    (
        "Missing answers",
        "Rows with a missing covariate or outcome leave the domain. If those who did not answer differ, so may the "
        "effect.",
    ),
    (
        "Disclosure of persons",
        "Small counts are hidden in this report and its tables, by rules that any office starts from. They do not "
        "replace the local rules: have a disclosure officer pass what leaves the house. The weight file is about "
        "single persons and is not for release.",
    ),
    (
        "Rules of thumb",
        "Limits such as |SMD| below 0.1, a variance ratio from 0.5 to 2, or p above 0.05 are common practice, not "
        "verdicts. Qualified review decides whether an effect may be claimed.",
    ),
)


def _equals(text: str) -> str:
    return text if text.startswith("<") else f"= {text}"


def _listed(names: list[str]) -> str:
    names = list(dict.fromkeys(names))
    return names[0] if len(names) == 1 else ", ".join(names[:-1]) + " and " + names[-1]
