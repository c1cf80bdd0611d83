"""The plan as frozen dataclasses; its one other spelling is a TOML file whose keys are their fields.

Knows which words a plan may use and which values each may take. Refuses to know how anything is
computed: every floor of the house may read a plan, so this module imports nothing but the errors.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal

from steelyard.errors import PlanError
from steelyard.keys import settle

SinglePsu = Literal["refuse", "recentre", "collapse", "self-representing"]
Estimand = Literal["ATE", "ATT", "ATC", "ATO"]
PropensityLink = Literal["logit", "probit"]
Family = Literal["gaussian", "binomial", "poisson"]
Measure = Literal["difference", "ratio", "odds-ratio"]
MadeReplicates = Literal["jackknife", "brr", "fay", "bootstrap", "successive-difference"]
VarianceMethod = Literal[
    "linearization", "jackknife", "brr", "fay", "bootstrap", "successive-difference", "supplied"
]
Centre = Literal["full-sample", "replicate-mean"]
Scaling = Literal["size", "effective", "none"]
PropensityStatus = Literal["estimated", "known"]
Scalar = str | int | float | bool


@dataclass(frozen=True, kw_only=True)
class Data:
    """The extract: where it lies, which codes mean 'no answer', and which subpopulation is asked about."""

    files: tuple[str, ...] = ()
    domain: str = ""
    missing: Mapping[str, tuple[Scalar, ...]] = field(default_factory=dict)

    def __post_init__(self) -> None:
        settle(self)


@dataclass(frozen=True, kw_only=True)
class SuppliedReplicates:
    """Replicate weights that came with the extract, and what their producer says of them.

    ``columns`` are names or patterns such as ``"rep_*"``, in the order of the extract; ``method`` is how they
    were made. ``factor`` is the overall factor of the variance and ``replicate_factors`` one more for each
    replicate, where the producer states them; ``df`` the degrees of freedom. ``centre`` says what the
    deviations are taken from.
    """

    columns: tuple[str, ...]
    method: MadeReplicates
    fay: float | None = None
    factor: float | None = None
    replicate_factors: tuple[float, ...] = ()
    df: float | None = None
    centre: Centre = "full-sample"

    def __post_init__(self) -> None:
        settle(self, "design.replicates")
        if self.method == "fay" and self.factor is None and self.fay is None:
            raise PlanError(
                'design.replicates has method = "fay" without its factor.',
                mend="Give design.replicates.fay as the producer states it, or the overall factor.",
            )
        if self.method != "fay" and self.fay is not None:
            raise PlanError(
                f'design.replicates.fay is given with method = "{self.method}".',
                mend='Fay\'s factor belongs to method = "fay".',
            )
        if self.method == "jackknife" and self.factor is None and not self.replicate_factors:
            raise PlanError(
                "design.replicates holds a jackknife, and nothing says what its squared deviations are multiplied by.",
                mend="Give design.replicates.factor or replicate_factors as the producer states them: "
                "(R - 1) / R for one PSU dropped at a time without strata, 1 for one of each pair, "
                "(n - 1) / n by stratum otherwise.",
            )
        _refuse_fay(self.fay, "design.replicates.fay")
        for name, value in (("factor", self.factor), ("df", self.df)):
            if value is not None and not value > 0:
                raise PlanError(f"design.replicates.{name} is {value:g}.", mend="It must be above 0.")
        if any(not value >= 0 for value in self.replicate_factors):
            raise PlanError(
                "design.replicates.replicate_factors holds a negative value.", mend="They must be 0 or more."
            )


@dataclass(frozen=True, kw_only=True)
class Design:
    """How the sample was drawn, as columns of the extract.

    ``clusters`` runs from the first stage down; without it every row is a PSU. ``population`` gives,
    stage by stage, the column that holds how many units of that stage the population has within
    the unit above (for the first stage: within the stratum). ``replicates`` are replicate weights that
    came with the extract; with them strata and clusters may be left out.
    """

    weight: str
    strata: tuple[str, ...] = ()
    clusters: tuple[str, ...] = ()
    population: tuple[str, ...] = ()
    single_psu: SinglePsu = "refuse"
    replicates: SuppliedReplicates | None = None

    def __post_init__(self) -> None:
        settle(self)
        if len(self.clusters) > 3:
            raise PlanError(
                f"design.clusters names {len(self.clusters)} stages; at most three are supported.",
                mend="Keep the first three stages: the later ones add almost nothing to the variance.",
            )
        if len(self.population) > len(self.clusters) + 1:
            raise PlanError(
                f"design.population names {len(self.population)} columns, but the design has only "
                f"{len(self.clusters)} cluster stage(s) and the rows below them.",
                mend="Give one column a stage, from the first stage down.",
            )
        repeated = sorted({c for c in self.clusters if self.clusters.count(c) > 1})
        if repeated:
            raise PlanError(
                f"design.clusters names {', '.join(repeated)} more than once.", mend="Name each stage once."
            )


@dataclass(frozen=True, kw_only=True)
class Exposure:
    """Who is exposed, the model of the propensity, and what is made of it.

    ``weighted`` fits the propensity under the sampling weights. ``stabilize`` multiplies the balancing
    weights by the marginal share of each group. ``cap_quantile`` caps the combined weights at that
    quantile of them; ``propensity_range`` drops rows whose propensity lies outside it.
    ``exposed`` and ``reference`` name the two values compared, where the column is not 0/1. ``clusters`` names
    those of the design that are exposed as a whole: the propensity is then modelled on them, under their own
    weight ``cluster_weight``, or what the rows' weights say of it.
    """

    formula: str
    estimand: Estimand = "ATE"
    link: PropensityLink = "logit"
    weighted: bool = True
    stabilize: bool = False
    cap_quantile: float | None = None
    propensity_range: tuple[float, float] | None = None
    exposed: Scalar | None = None
    reference: Scalar | None = None
    clusters: str | None = None
    cluster_weight: str | None = None

    def __post_init__(self) -> None:
        settle(self)
        if self.cap_quantile is not None and not 0.5 <= self.cap_quantile < 1:
            raise PlanError(
                f"exposure.cap_quantile is {self.cap_quantile}; it must lie from 0.5 up to, not including, 1.",
                mend="Use a high quantile such as 0.99, or leave the key out to cap nothing.",
            )
        if self.propensity_range is not None:
            if len(self.propensity_range) != 2:
                raise PlanError(
                    f"exposure.propensity_range has {len(self.propensity_range)} values; it takes two.",
                    mend="Write it as [0.05, 0.95], for example.",
                )
            low, high = self.propensity_range
            if not 0 <= low < high <= 1:
                raise PlanError(
                    f"exposure.propensity_range is [{low}, {high}]; it must satisfy 0 <= low < high <= 1.",
                    mend="Write it as [0.05, 0.95], for example.",
                )
        if self.stabilize and self.estimand == "ATO":
            raise PlanError(
                "exposure.stabilize has no meaning for the ATO: overlap weights are bounded by 1 as they are.",
                mend="Leave the key out, or choose another estimand.",
            )
        if self.cluster_weight is not None and self.clusters is None:
            raise PlanError(
                "exposure.cluster_weight is given without exposure.clusters.", mend="Name the clusters too."
            )
        if self.clusters is not None and self.cap_quantile is not None:
            raise PlanError(
                "exposure.cap_quantile caps rows, and exposure.clusters exposes whole clusters.",
                mend='Leave the cap out; estimand = "ATO" or exposure.propensity_range tame large weights.',
            )
        if self.reference is not None and self.exposed is None:
            raise PlanError(
                "exposure.reference is given without exposure.exposed.", mend="Name the exposed level too."
            )


@dataclass(frozen=True, kw_only=True)
class Balance:
    """What to check beyond the terms of the exposure formula.

    ``clusters`` names one of the design's clusters: every difference is then split into what lies between them
    and within them.
    """

    columns: tuple[str, ...] = ()
    clusters: str | None = None
    squares: bool = False
    interactions: bool = False

    def __post_init__(self) -> None:
        settle(self)


@dataclass(frozen=True, kw_only=True)
class Multilevel:
    """An outcome model with random effects of clusters.

    ``clusters`` are one or two of the design's clusters, the lowest first: an intercept varies between them.
    ``slopes`` are numeric columns, or "exposure", whose effect varies between the lowest. ``row_weight`` is the
    column of the rows' conditional weights and ``cluster_weights`` those of the clusters, in the order of
    ``clusters``; without them all are made from the overall weight. ``scaling`` is what the rows' weights are
    scaled to within clusters; of several the first is the answer and the others stand beside it.
    """

    clusters: tuple[str, ...]
    slopes: tuple[str, ...] = ()
    row_weight: str | None = None
    cluster_weights: tuple[str, ...] = ()
    scaling: tuple[Scaling, ...] = ("size",)

    def __post_init__(self) -> None:
        settle(self, "outcome.multilevel")
        if not 1 <= len(self.clusters) <= 2 or len(set(self.clusters)) != len(self.clusters):
            raise PlanError(
                f"outcome.multilevel.clusters names {', '.join(self.clusters) or 'nothing'}.",
                mend="Name one column of clusters, or two, the lowest first.",
            )
        if (self.row_weight is None) != (not self.cluster_weights):
            raise PlanError(
                "outcome.multilevel gives weights for some levels and not for others.",
                mend="Give row_weight and one of cluster_weights for each of clusters, or none of them.",
            )
        if self.cluster_weights and len(self.cluster_weights) != len(self.clusters):
            raise PlanError(
                f"outcome.multilevel.cluster_weights names {len(self.cluster_weights)} column(s) for "
                f"{len(self.clusters)} level(s) of clusters.",
                mend="Give one for each of clusters, in their order.",
            )
        if not self.scaling or len(set(self.scaling)) != len(self.scaling):
            raise PlanError(
                "outcome.multilevel.scaling is empty or names one twice.",
                mend="Name one or more of size, effective, none; the first is the answer.",
            )


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """One outcome: its column, its family, the measure of effect, covariates, and clusters that vary."""

    name: str
    family: Family = "gaussian"
    measure: Measure = "difference"
    covariates: str = ""
    multilevel: Multilevel | None = None

    def __post_init__(self) -> None:
        settle(self)
        if self.measure == "odds-ratio" and self.family != "binomial":
            raise PlanError(
                f'outcome "{self.name}" asks for an odds ratio of a {self.family} outcome.',
                mend='Odds need family = "binomial"; for other outcomes ask for "difference" or "ratio".',
            )
        if self.multilevel is not None and (self.family, self.measure) != ("gaussian", "difference"):
            raise PlanError(
                f'outcome "{self.name}" asks for a multilevel model of a {self.family} outcome by its {self.measure}.',
                mend='Multilevel models are linear so far: family = "gaussian" and measure = "difference".',
            )


@dataclass(frozen=True, kw_only=True)
class Variance:
    """How standard errors are made, and whether they count the propensity's own estimation.

    ``replicates`` is how many the bootstrap draws, and the least that successive difference makes; the
    jackknife and balanced half-samples have as many as the design gives. ``seed`` starts the bootstrap;
    ``fay`` is the factor of Fay's method. With replicates ``side_by_side`` adds the linearized variance, for
    comparison. Replicates that fail are left out up to the share ``most_failed`` of them, beyond it refused.
    """

    method: VarianceMethod = "linearization"
    propensity: PropensityStatus = "estimated"
    confidence: float = 0.95
    replicates: int = 200
    seed: int = 20261
    fay: float = 0.3
    side_by_side: bool = True
    most_failed: float = 0.05

    def __post_init__(self) -> None:
        settle(self)
        if not 0.5 <= self.confidence < 1:
            raise PlanError(
                f"variance.confidence is {self.confidence}; it must lie from 0.5 up to, not including, 1.",
                mend="Write 0.95 for a 95% interval.",
            )
        if self.replicates < 2:
            raise PlanError(
                f"variance.replicates is {self.replicates}.",
                mend="A variance needs at least 2; 200 is the default.",
            )
        if self.seed < 0:
            raise PlanError(f"variance.seed is {self.seed}.", mend="Give a whole number from 0 up.")
        if not 0 <= self.most_failed < 1:
            raise PlanError(
                f"variance.most_failed is {self.most_failed}; it is a share of the replicates.",
                mend="Write 0.05 to allow one in twenty to fail, 0 to allow none.",
            )
        _refuse_fay(self.fay, "variance.fay")


@dataclass(frozen=True, kw_only=True)
class Report:
    """What may leave the house: counts under ``minimum_count`` are hidden in tables and figures.

    ``replicate_weights`` says whether weights.parquet holds every replicate's weights too; where it is not
    given, it does unless they are more than a hundred million numbers.
    """

    minimum_count: int = 10
    replicate_weights: bool | None = None

    def __post_init__(self) -> None:
        settle(self)
        if self.minimum_count < 0:
            raise PlanError(
                f"report.minimum_count is {self.minimum_count}; it cannot be negative.",
                mend="Ask the disclosure officer for the local minimum; 10 is the default.",
            )


@dataclass(frozen=True, kw_only=True)
class Plan:
    """The whole plan. ``folder`` is where relative file names start; it is not a key of the TOML file."""

    title: str = ""
    data: Data = field(default_factory=Data)
    design: Design
    exposure: Exposure
    outcome: tuple[Outcome, ...]
    balance: Balance = field(default_factory=Balance)
    variance: Variance = field(default_factory=Variance)
    report: Report = field(default_factory=Report)
    folder: Path | None = field(default=None, compare=False, metadata={"key": False})

    def __post_init__(self) -> None:
        settle(self)
        if self.variance.method == "supplied" and self.design.replicates is None:
            raise PlanError(
                'variance.method is "supplied", and design.replicates names no replicate weights.',
                mend="Add [design.replicates] with their columns and method, or choose another variance.method.",
            )
        if not self.outcome:
            raise PlanError("The plan has no outcome.", mend="Add at least one [[outcome]] with a name.")
        seen: set[tuple[str, str, str, str]] = set()
        for outcome in self.outcome:
            key = (outcome.name, outcome.measure, outcome.covariates, str(outcome.multilevel))
            if key in seen:
                raise PlanError(
                    f'The plan lists outcome "{outcome.name}" with measure "{outcome.measure}" twice.',
                    mend="Remove one, or give it another measure, covariates or clusters.",
                )
            seen.add(key)
            levels = () if outcome.multilevel is None else outcome.multilevel.clusters
            strange = [name for name in levels if name not in self.design.clusters]
            stages = [self.design.clusters.index(name) for name in levels if name in self.design.clusters]
            if strange or stages != sorted(stages, reverse=True):
                raise PlanError(
                    f'The multilevel model of outcome "{outcome.name}" names clusters {", ".join(levels)}; the design '
                    f"has {', '.join(self.design.clusters) or 'none'}.",
                    mend="Name stages of design.clusters, the lowest first: clusters then never straddle PSUs.",
                )


def _refuse_fay(fay: float | None, where: str) -> None:
    if fay is not None and not 0 <= fay < 1:
        raise PlanError(
            f"{where} is {fay:g}; Fay's factor lies from 0 up to, not including, 1.",
            mend="It is what the lighter PSU of a pair keeps of its weight, 0.3 or 0.5 for example.",
        )
