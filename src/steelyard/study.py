"""A study: the plan, and the order of the work from an extract to an answer."""

from __future__ import annotations

import hashlib
import json
import platform
import time
import warnings as python_warnings
from collections.abc import Iterator, Mapping
from concurrent.futures import Executor
from contextlib import contextmanager
from dataclasses import dataclass
from functools import partial
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np

from steelyard.balance.columns import TermColumns
from steelyard.balance.distributions import distances
from steelyard.balance.moments import term_moments
from steelyard.data.blocks import Rows
from steelyard.data.build import build_rows
from steelyard.data.checkup import Checkup
from steelyard.data.passes import Engine, Progress, silent, threads
from steelyard.data.source import Extract, open_extract
from steelyard.design.survey import SurveyDesign, survey_design
from steelyard.errors import PlanError, SteelyardWarning
from steelyard.estimate.fit import Fit
from steelyard.estimate.moments import Moments, MomentsKernel, merge_moments
from steelyard.estimate.weights import FullSample, SamplingWeights
from steelyard.exposure.propensity import balancing, fit_propensity
from steelyard.outcome.contrasts import OutcomeColumns
from steelyard.plan import Plan, plan_keys, read_plan
from steelyard.results.answer import Answer
from steelyard.results.balance import balance_of, balance_warnings
from steelyard.results.effects import effect_results, sensitivity_of
from steelyard.results.estimates import EstimateResults
from steelyard.results.groups import groups
from steelyard.results.inference import Inference, linearized
from steelyard.results.overlap import overlap_of, overlap_warnings
from steelyard.results.weights_file import weight_batches

PACKAGES = ("steelyard", "numpy", "pandas", "scipy", "statsmodels", "patsy", "pyarrow")


@dataclass(frozen=True)
class Prepared:
    """An extract made ready: its design rows, its design, and what the check-up found."""

    extract: Extract
    rows: Rows
    design: SurveyDesign
    checkup: Checkup
    seconds: Mapping[str, float]


@dataclass(frozen=True, kw_only=True)
class Study(Plan):
    """A plan that can be carried out.

    ``extract`` arguments take what ``data.files`` may name, or an Arrow table or dataset, or a pandas
    frame; without one the plan's files are read. ``workers`` is the number of threads (default: one a
    processor); any other ``concurrent.futures.Executor`` may be given instead. ``progress`` is called with
    what is being done, how many blocks of it are done, and how many there are.
    """

    @classmethod
    def read(cls, path: str | Path) -> Study:
        """Read a plan from a TOML file; file names in it start at its folder.

        Raises
        ------
        PlanError
            The file is missing, not TOML, or has a key or value that no plan has.
        """
        return cls(**read_plan(path))

    def check(self, extract: Any = None, **where: Any) -> Checkup:
        """Check the extract and the design, nothing estimated."""
        source = self._open(extract)
        with _engine(**where) as engine:
            return build_rows(source, self, engine)[1]

    def run(self, extract: Any = None, **where: Any) -> Answer:
        """Do the whole job: prepare the extract and estimate.

        Raises
        ------
        SteelyardError
            Anything that would make the answer wrong, with the mend.
        """
        return self.estimate(self.prepare(extract, **where), **where)

    def prepare(self, extract: Any = None, *, block_rows: int = 8192, **where: Any) -> Prepared:
        """Read and check the extract, and build its design rows; ``block_rows`` of them to a block."""
        watch = _Watch()
        source = self._open(extract)
        with _engine(**where) as engine, watch("read and build the design rows"):
            rows, checkup = build_rows(source, self, engine, block_rows=block_rows)
            design = survey_design(rows.units, self.design.single_psu)
        return Prepared(source, rows, design, checkup, watch.seconds)

    def estimate(self, prepared: Prepared, **where: Any) -> Answer:
        """Estimate propensity, balance and effects on design rows that are ready."""
        where.pop("block_rows", None)
        watch = _Watch(prepared.seconds)
        rows, design, blocks = prepared.rows, prepared.design, prepared.rows.blocks
        sampling = SamplingWeights()
        columns = TermColumns(rows.terms)
        with _engine(**where) as engine:
            with watch("propensity"):
                fit = fit_propensity(rows, self.exposure, sampling, engine)
                made = balancing(rows, self.exposure, fit, sampling, engine)
            with watch("overlap"):
                overlap = overlap_of(rows, self.exposure, made, engine)
            with watch("balance"):
                moments = term_moments(columns, made, engine, blocks)
                apart = distances(columns, made, engine, blocks)
            with watch("effects"):
                found = groups(rows, self, made, engine)
                outcomes = _outcome_moments(rows, engine)
            with watch("variance"):
                inference = linearized(found.with_weights_known(), made, design, rows, engine)
        balance = balance_of(columns, moments, apart, inference, self.exposure.estimand, design.df)
        known = self.variance.propensity == "known"
        as_asked = partial(
            effect_results,
            self,
            found.effects,
            design=design,
            rows=len(rows),
            outcomes=outcomes,
            title=self.title or "Effects",
        )
        every = range(len(self.outcome))
        estimated_effects = as_asked(*inference.of(*(f"effect {k}" for k in every)))
        known_effects = as_asked(*inference.of(*(f"effect {k}, propensity known" for k in every)))
        headline = known_effects if known else estimated_effects
        told = (
            *rows.warnings,
            *design.notes,
            *_fit_warnings(fit),
            *overlap_warnings(overlap),
            *balance_warnings(balance, design.df),
        )
        for text in told:
            python_warnings.warn(text, SteelyardWarning, stacklevel=2)
        return Answer(
            plan=self,
            checkup=prepared.checkup,
            propensity=EstimateResults(
                *inference.of("propensity"),
                fit.regression.names,
                design.df,
                title="Exposure model",
                confidence=self.variance.confidence,
            ),
            overlap=overlap,
            balance=balance,
            effects=headline,
            effects_known=known_effects,
            sensitivity=sensitivity_of(
                self, headline, np.sqrt(outcomes.variance.mean(axis=0)), _ratios(self, inference)
            ),
            warnings=told,
            record=_record(self, prepared, watch.seconds, told),
            weights=partial(weight_batches, prepared.extract, self.design.weight, rows, made),
        )

    def _open(self, extract: Any) -> Extract:
        if extract is None:
            if not self.data.files:
                raise PlanError(
                    "The plan names no files and no extract was given.",
                    mend="Set data.files, or give the extract to run() or check().",
                )
            extract = list(self.data.files)
        return open_extract(extract, self.folder)


@contextmanager
def _engine(
    workers: int | None = None, executor: Executor | None = None, progress: Progress = silent
) -> Iterator[Engine]:
    if executor is not None:
        yield Engine(executor, progress=progress)
        return
    with threads(workers, progress) as engine:
        yield engine


def _ratios(plan: Plan, inference: Inference) -> dict[int, tuple[float, float]]:
    ratios = {}
    for place in range(len(plan.outcome)):
        if f"ratio {place}" in inference.estimates:
            values, covariance = inference.of(f"ratio {place}")
            ratios[place] = float(values[0]), float(np.sqrt(max(covariance[0, 0], 0)))
    return ratios


def _outcome_moments(rows: Rows, engine: Engine) -> Moments:
    """Return the moments of the outcomes by group, under the sampling weights."""
    kernel = MomentsKernel(OutcomeColumns(rows.outcomes), FullSample(SamplingWeights()))
    return engine.run("outcomes: moments", rows.blocks, kernel, merge_moments)


def _fit_warnings(fit: Fit) -> list[str]:
    if not fit.aliased:
        return []
    return [
        f"exposure model: {len(fit.aliased)} column(s) are constant in the domain or redundant beside the "
        f"others and were left out: {', '.join(fit.aliased)}."
    ]


class _Watch:
    """Seconds by stage of the work."""

    def __init__(self, before: Mapping[str, float] | None = None) -> None:
        self.seconds: dict[str, float] = dict(before or {})

    @contextmanager
    def __call__(self, stage: str) -> Iterator[None]:
        start = time.perf_counter()
        try:
            yield
        finally:
            self.seconds[stage] = round(time.perf_counter() - start, 3)


def _record(
    plan: Plan, prepared: Prepared, seconds: Mapping[str, float], told: tuple[str, ...]
) -> dict[str, object]:
    keys = plan_keys(plan)
    text = json.dumps(keys, sort_keys=True, ensure_ascii=False)
    return {
        "plan": keys,
        "plan_sha256": hashlib.sha256(text.encode()).hexdigest(),
        "inputs": prepared.checkup.files.to_dict("records"),
        "versions": {"python": platform.python_version(), **{name: version(name) for name in PACKAGES}},
        "seed": None,
        "seconds": dict(seconds),
        "warnings": list(told),
    }
