"""What a multilevel outcome model found: its parameters, the scalings side by side, the effect without it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from steelyard.design.linearization import standard_errors
from steelyard.outcome.effects import Effects
from steelyard.outcome.multilevel.outcome import MultilevelOutcome
from steelyard.results.estimates import EstimateResults
from steelyard.results.inference import Inference


@dataclass(frozen=True)
class MultilevelResults:
    """One outcome's multilevel model.

    Attributes
    ----------
    outcome : its name, as in the effects
    clusters : mapping
        Level -> clusters with a row that carries weight, the lowest level first.
    parameters : EstimateResults
        Coefficients, variances, intraclass correlations, under the answer's scaling.
    coefficients : int
        How many of them are coefficients: they come first, the exposure's last of them.
    scalings : frame
        ``scaling``, ``parameter``, ``estimate``, ``std_error``: the effect and what comes after it, under each
        scaling that was asked for, the answer's first.
    plain : (estimate, standard error)
        The effect without the multilevel part, under the same combined weights.
    notes : texts for the reader
    balanced : what the balancing weight multiplies the weights of: "rows", or the level that is exposed
    """

    outcome: str
    clusters: dict[str, int]
    parameters: EstimateResults
    coefficients: int
    scalings: pd.DataFrame
    plain: tuple[float, float]
    notes: tuple[str, ...]
    balanced: str = "rows"


def multilevel_results(
    effects: Effects, inference: Inference, df: float, confidence: float
) -> tuple[MultilevelResults, ...]:
    """Return the results of every outcome that has a multilevel model."""
    return tuple(
        _results(place, model, inference, df, confidence)
        for place, model in enumerate(effects.multilevel)
        if model is not None
    )


def _results(
    place: int, model: MultilevelOutcome, inference: Inference, df: float, confidence: float
) -> MultilevelResults:
    effect_place = len(model.level.fixed) - 1
    frames = []
    for scaling, estimates in model.estimates.items():
        values, covariance = inference.of(f"levels {place} {scaling}")
        shown = slice(effect_place, None)
        frames.append(
            pd.DataFrame(
                {
                    "scaling": scaling,
                    "parameter": estimates.names[shown],
                    "estimate": values[shown],
                    "std_error": standard_errors(covariance)[shown],
                }
            )
        )
    plain, variance = inference.of(f"plain {place}")
    level = model.level
    counts = [level.clusters] if level.top is None else [level.clusters, int(level.top[-1]) + 1]
    return MultilevelResults(
        outcome=model.name,
        clusters=dict(zip(level.levels, counts, strict=True)),
        parameters=EstimateResults(
            *inference.of(f"levels {place} {model.scaling}"),
            model.estimates[model.scaling].names,
            df,
            title=f"Multilevel model of {model.name}",
            confidence=confidence,
        ),
        coefficients=effect_place + 1,
        scalings=pd.concat(frames, ignore_index=True),
        plain=(float(plain[0]), float(np.sqrt(max(variance[0, 0], 0)))),
        notes=multilevel_notes(model),
        balanced={"rows": "rows", "clusters": level.levels[0], "tops": level.levels[-1]}[level.exposed_level],
    )


def multilevel_notes(model: MultilevelOutcome) -> tuple[str, ...]:
    """Return what a reader should be told about a multilevel model."""
    notes = list(model.fits[model.scaling].boundary)
    if model.level.from_overall:
        notes.append(
            f"The weights of the levels of {model.name}'s multilevel model were made from the overall weight: whether "
            "a cluster was unlikely to be drawn, or few of its rows were, is lost, and variances between clusters may "
            "be wrong. Name row_weight and cluster_weights if the producer has them."
        )
    return tuple(notes)
