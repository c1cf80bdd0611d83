"""The methods paragraph of a paper, composed from the plan, with exactly the references it uses."""

from __future__ import annotations

from dataclasses import dataclass, field

from steelyard.plan import Outcome, Plan
from steelyard.report.multilevel import multilevel_sentence
from steelyard.report.words import confidence, covariates_of, estimand_name, exposure_name, listed
from steelyard.results.answer import Answer

REFERENCES = {
    "Binder 1983": "Binder, D. A. (1983). On the variances of asymptotically normal estimators from complex "
    "surveys. International Statistical Review, 51(3), 279–292.",
    "Cochran 1977": "Cochran, W. G. (1977). Sampling Techniques (3rd ed.). New York: Wiley.",
    "Fay & Train 1995": "Fay, R. E. & Train, G. F. (1995). Aspects of survey and model-based postcensal estimation "
    "of income and poverty characteristics for states and counties. Proceedings of the Section on Government "
    "Statistics, American Statistical Association, 154–159.",
    "Hájek 1971": "Hájek, J. (1971). Comment on “An essay on the logical foundations of survey sampling, part "
    "one” by D. Basu. In V. P. Godambe & D. A. Sprott (Eds.), Foundations of Statistical Inference. Toronto: "
    "Holt, Rinehart and Winston.",
    "Imai & Ratkovic 2014": "Imai, K. & Ratkovic, M. (2014). Covariate balancing propensity score. Journal of "
    "the Royal Statistical Society B, 76(1), 243–263.",
    "Judkins 1990": "Judkins, D. R. (1990). Fay's method for variance estimation. Journal of Official Statistics, "
    "6(3), 223–239.",
    "Kish 1965": "Kish, L. (1965). Survey Sampling. New York: Wiley.",
    "Korn & Graubard 1990": "Korn, E. L. & Graubard, B. I. (1990). Simultaneous testing of regression "
    "coefficients with complex survey data: use of Bonferroni t statistics. The American Statistician, 44(4), "
    "270–276.",
    "Li, Morgan & Zaslavsky 2018": "Li, F., Morgan, K. L. & Zaslavsky, A. M. (2018). Balancing covariates via "
    "propensity score weighting. Journal of the American Statistical Association, 113(521), 390–400.",
    "Lunceford & Davidian 2004": "Lunceford, J. K. & Davidian, M. (2004). Stratification and weighting via the "
    "propensity score in estimation of causal treatment effects: a comparative study. Statistics in Medicine, "
    "23(19), 2937–2960.",
    "McCarthy 1969": "McCarthy, P. J. (1969). Pseudo-replication: half samples. Review of the International "
    "Statistical Institute, 37(3), 239–264.",
    "Pfeffermann et al. 1998": "Pfeffermann, D., Skinner, C. J., Holmes, D. J., Goldstein, H. & Rasbash, J. (1998). "
    "Weighting for unequal selection probabilities in multilevel models. Journal of the Royal Statistical Society B, "
    "60(1), 23–40.",
    "Rabe-Hesketh & Skrondal 2006": "Rabe-Hesketh, S. & Skrondal, A. (2006). Multilevel modelling of complex survey "
    "data. Journal of the Royal Statistical Society A, 169(4), 805–827.",
    "Rao, Wu & Yue 1992": "Rao, J. N. K., Wu, C. F. J. & Yue, K. (1992). Some recent work on resampling methods for "
    "complex surveys. Survey Methodology, 18(2), 209–217.",
    "VanderWeele & Ding 2017": "VanderWeele, T. J. & Ding, P. (2017). Sensitivity analysis in observational "
    "research: introducing the E-value. Annals of Internal Medicine, 167(4), 268–274.",
    "Wolter 2007": "Wolter, K. M. (2007). Introduction to Variance Estimation (2nd ed.). New York: Springer.",
    "Zeng, Li & Tong 2025": "Zeng, Y., Li, F. & Tong, G. (2025). Preprint on propensity weighting with survey "
    "data. arXiv:2501.16156.",
}

_SPREADS = {
    "ATE": "the root of the mean of both groups' variances under the sampling weights",
    "ATO": "the root of the mean of both groups' variances under the sampling weights",
    "ATT": "the exposed's standard deviation under the sampling weights",
    "ATC": "the reference's standard deviation under the sampling weights",
}
_SINGLE_PSU = {
    "refuse": "",
    "recentre": "In strata with one PSU, its deviation was taken from the mean of all PSUs.",
    "collapse": "Strata with one PSU were joined with a neighbouring stratum.",
    "self-representing": "PSUs that are alone in their stratum were taken as chosen with certainty.",
}
# How each method is called in a sentence, and where it was published.
_REPLICATED: dict[str, tuple[str, tuple[str, ...]]] = {
    "jackknife": ("the jackknife that leaves out one PSU at a time", ("Wolter 2007",)),
    "brr": ("balanced repeated replication", ("McCarthy 1969", "Wolter 2007")),
    "fay": ("Fay's balanced repeated replication", ("Judkins 1990", "Wolter 2007")),
    "bootstrap": ("the rescaled bootstrap", ("Rao, Wu & Yue 1992",)),
    "successive-difference": ("successive difference replication", ("Fay & Train 1995",)),
}
_LINKS = {"difference": "identity", "ratio": "log", "odds-ratio": "logit"}


@dataclass
class _Citing:
    used: set[str] = field(default_factory=set)

    def __call__(self, *keys: str) -> str:
        self.used.update(keys)
        return f"({'; '.join(keys)})"


def methods(answer: Answer) -> tuple[list[str], list[str]]:
    """Return the sentences of the methods, by paragraph, and the references they cite, in alphabetical order."""
    cite = _Citing()
    plan = answer.plan
    paragraphs = [
        " ".join(part for part in sentences if part)
        for sentences in (
            _weighting(plan, cite),
            _balance(answer, cite),
            _effects(answer, cite),
            _variance(answer, cite),
            _sensitivity(answer, cite),
        )
    ]
    return paragraphs, [REFERENCES[key] for key in sorted(cite.used)]


def _weighting(plan: Plan, cite: _Citing) -> list[str]:
    exposure = plan.exposure
    name, covariates = exposure_name(exposure), covariates_of(exposure)
    model = "logistic" if exposure.link == "logit" else "probit"
    how = (
        f"by maximum pseudo-likelihood under the sampling weights {cite('Binder 1983')}"
        if exposure.weighted
        else "by maximum likelihood, without the sampling weights"
    )
    sentences = [
        f"We estimated the {estimand_name(exposure.estimand)} ({exposure.estimand}) of {name}"
        + (f" in the domain {plan.data.domain}." if plan.data.domain else "."),
        f"The propensity was modelled by {model} regression on {covariates}, fitted {how}.",
        "Each row's sampling weight was multiplied by a balancing weight made of its propensity for that estimand "
        f"{cite('Li, Morgan & Zaslavsky 2018')}; the product is the combined weight.",
    ]
    if exposure.stabilize:
        sentences.append("Balancing weights were stabilized by the marginal share of each group.")
    if exposure.propensity_range is not None:
        low, high = exposure.propensity_range
        sentences.append(
            f"Rows with a propensity outside {low:g} to {high:g} were given weight zero, which narrows the target "
            "population to those inside."
        )
    if exposure.cap_quantile is not None:
        sentences.append(f"Combined weights were capped at their {exposure.cap_quantile:g} quantile.")
    return sentences


def _balance(answer: Answer, cite: _Citing) -> list[str]:
    test = answer.balance.over_identification
    return [
        "Balance before (under the sampling weights) and after (under the combined weights) was described by "
        "standardized mean differences, the difference of means over "
        f"{_SPREADS[answer.plan.exposure.estimand]}, variance ratios and weighted Kolmogorov-Smirnov distances.",
        "Each difference was tested by a design-based t test, and all together by an adjusted Wald F test "
        f"{cite('Korn & Graubard 1990')}.",
        ""
        if test is None
        else "The propensity's moment conditions were tested by the over-identification chi-square test "
        f"{cite('Imai & Ratkovic 2014')} with their design-based covariance.",
        f"Effective sample sizes are (Σw)²/Σw² {cite('Kish 1965')}.",
    ]


def _effects(answer: Answer, cite: _Citing) -> list[str]:
    single = [outcome for outcome in answer.plan.outcome if outcome.multilevel is None]
    plain = [outcome for outcome in single if not outcome.covariates]
    adjusted = [outcome for outcome in single if outcome.covariates]
    sentences = []
    if plain:
        kinds = listed(list(dict.fromkeys(outcome.measure.replace("-", " ") for outcome in plain)))
        names = listed(list(dict.fromkeys(outcome.name for outcome in plain)))
        sentences.append(
            f"For {names} the effect is the {kinds} of the groups' weighted means {cite('Hájek 1971')}."
        )
    sentences += [_regression(outcome) for outcome in adjusted]
    for results in answer.multilevel:
        sources = cite("Pfeffermann et al. 1998", "Rabe-Hesketh & Skrondal 2006")
        sentences.append(f"{multilevel_sentence(results)} {sources}.")
    return sentences


def _regression(outcome: Outcome) -> str:
    told = "" if outcome.measure == "difference" else ", exponentiated"
    return (
        f"For {outcome.name} the effect is the coefficient of the exposure{told} in a {outcome.family} regression "
        f"with {_LINKS[outcome.measure]} link under the combined weights, adjusted for "
        f"{' '.join(outcome.covariates.split())}."
    )


def _variance(answer: Answer, cite: _Citing) -> list[str]:
    plan = answer.plan
    design = plan.design
    sentences = _replicated(answer, cite) if answer.variance.replicated else []
    if not answer.variance.replicated or answer.beside is not None:
        sentences += _linearized(answer, cite)
    by_design = answer.variance.origin != "supplied" or answer.beside is not None
    if by_design and (answer.checkup.strata["psus"] == 1).any():
        sentences.append(_SINGLE_PSU[design.single_psu])
    counted = (
        ""
        if answer.variance.origin == "supplied"
        else ", PSUs minus strata over the strata that hold the domain"
    )
    ratios = any(outcome.measure != "difference" for outcome in plan.outcome)
    sentences.append(
        f"Intervals are {confidence(plan)} t intervals with {answer.effects.df_resid:g} degrees of freedom{counted}"
        + ("; those of ratios were made on the logarithm." if ratios else ".")
    )
    return sentences


def _replicated(answer: Answer, cite: _Citing) -> list[str]:
    made, design = answer.variance, answer.plan.design
    number = f"{int(made.replicates):,}"
    details = dict(made.details)
    fay = f" with the factor {details['fay']:g}" if "fay" in details else ""
    how, sources = _REPLICATED[made.method]
    cited = cite(*sources)
    origin = (
        f"the {number} replicate weights that came with the extract ({', '.join(design.replicates.columns)})"
        if made.origin == "supplied" and design.replicates is not None
        else f"{number} replicates made from the design"
    )
    sentences = [f"Variances were estimated by {how}{fay} {cited}, with {origin}."]
    if answer.plan.variance.propensity == "estimated":
        sentences.append(
            "Propensity, balancing weights, trimming, balance and effects were estimated again in every replicate."
        )
    else:
        sentences.append("The propensity of the full sample was kept in every replicate.")
    if made.failed:
        sentences.append(f"{len(made.failed)} replicate(s) had no estimate and were left out.")
    return sentences


def _linearized(answer: Answer, cite: _Citing) -> list[str]:
    plan = answer.plan
    design = plan.design
    units = f"PSUs ({design.clusters[0]})" if design.clusters else "rows, each of which is a PSU of its own"
    strata = f" within strata ({', '.join(design.strata)})" if design.strata else ", without strata"
    whose = "Beside them, variances" if answer.variance.replicated else "Variances"
    sentences = [
        f"{whose} were linearized {cite('Binder 1983', 'Wolter 2007')}: from the spread of the totals of each row's "
        f"influence over {units}{strata}."
    ]
    if plan.variance.propensity == "estimated":
        known = cite("Lunceford & Davidian 2004", "Zeng, Li & Tong 2025")
        sentences.append(f"The influence counts the estimation of the propensity {known}.")
    else:
        sentences.append("The propensity was treated as known.")
    if plan.exposure.cap_quantile is not None or plan.exposure.propensity_range is not None:
        sentences.append("What trimming did was taken as fixed.")
    if design.population:
        stages = "the first stage" if len(design.population) == 1 else f"{len(design.population)} stages"
        sentences.append(
            f"Finite population corrections were made at {stages}, from {', '.join(design.population)} "
            f"{cite('Cochran 1977')}."
        )
    else:
        sentences.append("No finite population correction was made.")
    return sentences


def _sensitivity(answer: Answer, cite: _Citing) -> list[str]:
    approximated = sorted({text for text in answer.sensitivity["approximation"] if text})
    told = f" For what is not a risk ratio: {'; '.join(approximated)}." if approximated else ""
    steelyard = answer.record.get("versions", {})
    version = steelyard.get("steelyard", "") if isinstance(steelyard, dict) else ""
    return [
        f"Sensitivity to unmeasured confounding is given as E-values {cite('VanderWeele & Ding 2017')}.{told}",
        f"Computed with steelyard {version}.".replace(" .", "."),
    ]
