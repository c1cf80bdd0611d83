"""An answer in plain sentences: what was asked, what was found, and how fragile it is."""

from __future__ import annotations

import math
from typing import Any

from steelyard.plan import Exposure, Plan
from steelyard.report.disclosure import Released
from steelyard.report.numbers import common_decimals, decimals_for, fixed, p_value, percent, significant
from steelyard.report.suppression import is_hidden

BAND = 0.1

_WHO = {
    "ATE": "the whole population of the domain: everybody exposed compared with nobody exposed",
    "ATT": "the exposed: as they are, compared with what would be seen had they not been exposed",
    "ATC": "the reference population: as it is, compared with what would be seen had it been exposed",
    "ATO": "the overlap population, persons who could well have been in either group",
}
_NAMES = {
    "ATE": "average effect in the population",
    "ATT": "average effect in the exposed",
    "ATC": "average effect in the reference population",
    "ATO": "average effect in the overlap population",
}
MEASURES = {"difference": "difference of means", "ratio": "ratio of means", "odds-ratio": "odds ratio"}
COMPARISONS = {"difference": "difference", "ratio": "ratio", "odds-ratio": "odds ratio"}


def exposure_name(exposure: Exposure) -> str:
    """Return the exposure's column."""
    return exposure.formula.split("~", 1)[0].strip()


def covariates_of(exposure: Exposure) -> str:
    """Return the right-hand side of the exposure formula, on one line."""
    return " ".join(exposure.formula.split("~", 1)[1].split())


def level_of(plan: Plan, groups: Any, group: str) -> str:
    """Return a level of the exposure with its column, as in ``piped = 1``."""
    level = groups.loc[groups["group"] == group, "level"].iloc[0]
    return f"{exposure_name(plan.exposure)} = {level}"


def estimand_name(estimand: str) -> str:
    """Return the estimand in words."""
    return _NAMES[estimand]


def domain_name(plan: Plan) -> str:
    """Return the domain, or that it is everybody."""
    return plan.data.domain or "all rows of the extract"


def listed(names: list[str]) -> str:
    """Return names as a list in a sentence."""
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def question(released: Released) -> list[str]:
    """Say what was asked: the comparison, for whom, and who is left out."""
    plan = released.plan
    outcomes = listed(list(dict.fromkeys(outcome.name for outcome in plan.outcome)))
    where = f"in the domain {plan.data.domain}" if plan.data.domain else "in the whole extract"
    return [
        f"What difference does {exposure_name(plan.exposure)} make to {outcomes}, {where}? The exposed are the rows "
        f"with {level_of(plan, released.groups, 'exposed')}, the reference those with "
        f"{level_of(plan, released.groups, 'reference')}.",
        f"The answer is for {_WHO[plan.exposure.estimand]} ({plan.exposure.estimand}, the "
        f"{_NAMES[plan.exposure.estimand]}).",
        "Nobody randomised the exposure. Rows are weighted so that the two groups agree in "
        f"{covariates_of(plan.exposure)}, and so that the sample stands for its population.",
    ]


def confidence(plan: Plan) -> str:
    """Return the level of the intervals, as in ``95%``."""
    return f"{100 * plan.variance.confidence:g}%"


def effect_decimals(row: dict[str, Any]) -> int:
    """Return how many decimals an effect deserves: its standard error to two significant digits."""
    if is_hidden(row["std_error"]):
        return 3
    if row["std_error"] > 0:
        return decimals_for(row["std_error"])
    return common_decimals([row["estimate"]], 3)


def mean_decimals(row: dict[str, Any]) -> int:
    """Return the decimals of the groups' means, three significant digits of the smaller one at least."""
    if is_hidden(row["exposed"]):
        return 3
    least = common_decimals([row["exposed"], row["reference"]], 3)
    return max(least, effect_decimals(row) if row["measure"] == "difference" else 0)


def glance(row: dict[str, Any], plan: Plan) -> dict[str, str]:
    """Return one effect in words: ``name``, ``figure``, ``interval``, ``means``, ``reading``."""
    measure = COMPARISONS[row["measure"]]
    name = str(row["outcome"])
    if is_hidden(row["estimate"]):
        return {
            "name": name,
            "measure": measure,
            "figure": str(row["estimate"]),
            "interval": "",
            "means": "",
            "reading": "A group is too small for the effect to be shown.",
        }
    places = effect_decimals(row)
    interval = f"{fixed(row['ci_low'], places)} to {fixed(row['ci_high'], places)}"
    means = mean_decimals(row)
    return {
        "name": name,
        "measure": measure,
        "figure": fixed(row["estimate"], places),
        "interval": f"{confidence(plan)} interval {interval}",
        "means": "The groups' means rest on too few rows to be shown."
        if is_hidden(row["exposed"])
        else f"Weighted mean {fixed(row['exposed'], means)} in the exposed, "
        f"{fixed(row['reference'], means)} in the reference.",
        "reading": _reading(row, places),
    }


def _reading(row: dict[str, Any], places: int) -> str:
    none = 0.0 if row["measure"] == "difference" else 1.0
    estimate, low, high = row["estimate"], row["ci_low"], row["ci_high"]
    if math.isnan(low) or math.isnan(high):
        return "The design leaves no interval, so the data do not say how sure this is."
    if low <= none <= high:
        return (
            f"No effect ({none:g}) lies inside the interval: the data agree with effects in both directions."
        )
    higher = estimate > none
    size = {
        "difference": f"{significant(abs(estimate), 2)} {'higher' if higher else 'lower'} with exposure",
        "ratio": f"{fixed(estimate, places)} times what it is without exposure",
        "odds-ratio": f"{fixed(estimate, places)} times what they are without exposure",
    }[row["measure"]]
    what = "odds" if row["measure"] == "odds-ratio" else "mean"
    verb = "are" if row["measure"] == "odds-ratio" else "is"
    return f"The {what} of {row['outcome']} {verb} {size}; no effect ({none:g}) lies outside the interval."


def cost_of_ignoring(effects: list[dict[str, Any]], known: list[dict[str, Any]], plan: Plan) -> str:
    """Say what standard errors that treat the propensity as known would have claimed."""
    if plan.variance.propensity == "known":
        return (
            "The plan asks for standard errors that treat the propensity as known, as if nobody had estimated it. "
            'That is wrong in either direction; set variance.propensity = "estimated" to count it.'
        )
    parts = []
    for row, other in zip(effects, known, strict=True):
        if is_hidden(row["std_error"]) or not row["std_error"] > 0:
            continue
        change = other["std_error"] / row["std_error"] - 1
        if abs(change) < 0.005:
            parts.append(f"the same for {row['outcome']} ({COMPARISONS[row['measure']]})")
        else:
            word = "larger" if change > 0 else "smaller"
            parts.append(
                f"{percent(abs(change), 0)} {word} for {row['outcome']} ({COMPARISONS[row['measure']]})"
            )
    if not parts:
        return ""
    return (
        "Had the propensity been treated as known, the standard errors would have been "
        f"{listed(parts)}. The intervals of this report count its estimation."
    )


def fragility(row: dict[str, Any]) -> str:
    """Say what an E-value means for one outcome."""
    if is_hidden(row["e_value"]):
        return "A group is too small for the effect to be shown."
    value, limit = significant(row["e_value"], 3), significant(row["e_value_limit"], 3)
    text = (
        f"Risk ratios of {value} with the exposure and with {row['outcome']}, beyond the covariates, would explain the "
        "estimate away; "
    )
    if row["e_value_limit"] <= 1:
        return text + "no effect lies inside the interval already."
    return text + f"{limit} each would move the interval to no effect."


def joint_test(test: Any) -> str:
    """Return a joint test as one phrase."""
    numerator, denominator = test.df
    if math.isnan(test.statistic):
        return "not defined on the degrees of freedom of the design"
    value = fixed(test.statistic, 2)
    p = p_value(test.p_value)
    p = f"p {p}" if p.startswith("<") else f"p = {p}"
    if denominator is None:
        return f"chi-square = {value} on {numerator:g} df, {p}"
    return f"F = {value} on {numerator:g} and {denominator:g} df, {p}"


def effective_sizes(released: Released) -> str:
    """Say how many rows of equal weight each group is worth, before and after."""
    if released.groups_hidden:
        return "hidden, a group is too small."
    return (
        "; ".join(
            f"{row.group} {fixed(row.effective_before, 0)} before, {fixed(row.effective_after, 0)} after"
            for row in released.groups.itertuples()
        )
        + "."
    )


def balance_finding(released: Released) -> str:
    """Say how many terms lie in the band before and after, and which differs most."""
    if released.groups_hidden:
        return "A group is too small for the comparison to be shown."
    shown = released.balance[~released.balance["smd_after"].map(is_hidden)].dropna(
        subset=["smd_before", "smd_after"]
    )
    if not len(shown):
        return "No term can be shown."
    before, after = (shown[f"smd_{when}"].astype(float).abs() for when in ("before", "after"))
    worst = shown.loc[after.idxmax()]
    name = f"{worst['term']}: {worst['level']}" if worst["level"] else worst["term"]
    return (
        f"Of {len(shown)} terms shown, {int((before > BAND).sum())} differ by more than {BAND} standard deviations "
        f"under the sampling weights and {int((after > BAND).sum())} under the combined weights. The largest "
        f"difference was {fixed(before.max(), 2)} and is {fixed(after.max(), 2)} ({name})."
    )
