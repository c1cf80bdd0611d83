"""How a variance was made, and how a colleague makes it again from the weight file, in any software."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from steelyard.design.survey import SurveyDesign
from steelyard.plan import Plan
from steelyard.replicates.variance import Replicated


@dataclass(frozen=True)
class VarianceMade:
    """How a variance was made.

    Attributes
    ----------
    method : "linearization" or a method of replication
    origin : "linearized", "made" (replicates of our own) or "supplied" (with the extract)
    df : float
        Degrees of freedom.
    psus, strata : float
        Counted over strata that hold the domain; NaN where replicates alone carry the design.
    replicates : float
        NaN for linearization.
    factor, factors : the overall factor and one for each replicate
    about_mean : whether deviations are from the replicates' mean
    failed : mapping
        Replicate, from 1 -> why it has no estimate.
    details : what else was fixed, such as Fay's factor or the seed, by name
    propensity : "estimated" again in every replicate, or "known": the full sample's kept
    """

    method: str
    origin: str
    df: float
    psus: float
    strata: float
    replicates: float = float("nan")
    factor: float = 1.0
    factors: tuple[float, ...] = ()
    about_mean: bool = False
    failed: Mapping[int, str] | None = None
    details: tuple[tuple[str, float | int | str], ...] = ()
    propensity: str = "estimated"

    @property
    def name(self) -> str:
        """What the tables call it."""
        return f"{self.method}, supplied" if self.origin == "supplied" else self.method

    @property
    def replicated(self) -> bool:
        """Whether replicates made it."""
        return self.origin != "linearized"

    def record(self) -> dict[str, object]:
        """Return it as plain values, for record.json and the weight file."""
        out: dict[str, object] = {"method": self.method, "origin": self.origin, "df": self.df}
        if self.replicated:
            out |= {
                "replicates": int(self.replicates),
                "factor": self.factor,
                "replicate_factors": 1.0 if set(self.factors) == {1.0} else list(self.factors),
                "propensity": self.propensity,
                "centre": "replicate-mean" if self.about_mean else "full-sample",
                # Why they failed may count few rows: reasons stand in the warnings, which are released.
                "failed": sorted(self.failed or {}),
                **dict(self.details),
            }
        return out

    def usage(self, supplied_columns: tuple[str, ...]) -> str:
        """Return the paragraph that says how a colleague uses the replicate weights, in any software."""
        if not self.replicated:
            return ""
        left = int(self.replicates) - len(self.failed or {})
        by_replicate = len(set(self.factors)) > 1
        factor = self.factor * self.replicates / left * (1.0 if by_replicate else self.factors[0])
        centre = "their mean" if self.about_mean else "T"
        text = (
            "Compute any statistic T with combined_weight, and T_r in the same way with combined_replicate_r, for "
            f"r = 1 to {int(self.replicates)}. Its variance is V = a "
            + ("Σ a_r " if by_replicate else "Σ ")
            + f"(T_r − {'M' if self.about_mean else 'T'})², with a = {factor:.12g}"
            + (
                ", a_r the replicate_factors in the file's metadata (steelyard.variance)"
                if by_replicate
                else ""
            )
            + (", M the mean of the T_r" if self.about_mean else "")
            + f"; its standard error is the root of V, on {self.df:g} degrees of freedom. Software that asks for the "
            f"method is told: {self.method}, {int(self.replicates)} replicates, overall factor {factor:.12g}, "
            f"deviations from {'the full-sample estimate' if centre == 'T' else centre}."
        )
        if self.failed:
            shown = ", ".join(str(r) for r in list(self.failed)[:10])
            more = f" and {len(self.failed) - 10} more" if len(self.failed) > 10 else ""
            text += (
                f" {len(self.failed)} replicate(s) have no weights (empty columns: {shown}{more}); the factor counts "
                "the others for more."
            )
        if self.origin == "supplied":
            text += (
                f" Sampling weights of the replicates are the extract's own, {supplied_columns[0]} to "
                f"{supplied_columns[-1]}."
            )
        else:
            text += (
                " For statistics without the exposure take sampling_weight and sampling_replicate_r instead."
            )
        if self.propensity == "known":
            return f"{text} The full sample's propensity was kept in every replicate, as if it were known."
        return f"{text} The propensity was estimated again in every replicate: nothing more needs to be done for it."


def by_linearization(plan: Plan, design: SurveyDesign) -> VarianceMade:
    """Say that a variance was linearized."""
    return VarianceMade("linearization", "linearized", design.df, design.psus, design.strata)


def by_replication(plan: Plan, design: SurveyDesign, found: Replicated) -> VarianceMade:
    """Say that a variance was made of replicates."""
    scheme = found.scheme
    named = design_is_named(plan) or scheme.origin == "made"
    return VarianceMade(
        method=scheme.method,
        origin=scheme.origin,
        df=scheme.df,
        psus=design.psus if named else np.nan,
        strata=design.strata if named else np.nan,
        replicates=scheme.count,
        factor=scheme.factor,
        factors=tuple(float(f) for f in scheme.factors),
        about_mean=scheme.about_mean,
        failed={r + 1: why for r, why in found.failed.items()},
        details=scheme.details,
        propensity=plan.variance.propensity,
    )


def design_is_named(plan: Plan) -> bool:
    """Whether the plan names strata or clusters, so that linearization knows the design."""
    return bool(plan.design.strata or plan.design.clusters)
