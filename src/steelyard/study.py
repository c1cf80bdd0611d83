"""A study: the plan, and the order of the work from an extract to an answer."""

from __future__ import annotations

import warnings as python_warnings
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import Executor
from contextlib import contextmanager
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path
from typing import Any, Literal

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from steelyard.balance.columns import TermColumns
from steelyard.balance.distributions import distances
from steelyard.balance.moments import term_moments
from steelyard.data.blocks import Rows
from steelyard.data.build import build_rows
from steelyard.data.checkup import Checkup
from steelyard.data.cluster_means import stage_of_clusters, with_cluster_means
from steelyard.data.exposed_clusters import weighed_by_share, with_cluster_shares
from steelyard.data.passes import Engine, Progress, silent, threads
from steelyard.data.source import Extract, open_extract
from steelyard.design.survey import SurveyDesign, survey_design
from steelyard.errors import PlanError, SteelyardWarning
from steelyard.estimate.fit import Fit
from steelyard.estimate.moments import Moments, MomentsKernel, merge_moments
from steelyard.estimate.weights import FullSample, SamplingWeights
from steelyard.exposure.balancing import Balancing
from steelyard.exposure.cluster_overlap import cluster_overlap
from steelyard.exposure.propensity import balancing, fit_propensity
from steelyard.outcome.contrasts import OutcomeColumns
from steelyard.plan import Plan
from steelyard.plan_file import read_plan
from steelyard.replicates.make import scheme_of
from steelyard.replicates.scheme import Scheme
from steelyard.results.answer import Answer
from steelyard.results.balance import among_clusters, balance_of, balance_warnings
from steelyard.results.effects import effect_results, sensitivity_of
from steelyard.results.estimates import EstimateResults
from steelyard.results.groups import Groups, groups
from steelyard.results.inference import Inference, linearized
from steelyard.results.multilevel import multilevel_results
from steelyard.results.overlap import overlap_of, overlap_warnings
from steelyard.results.replication import Replication, replication, turns
from steelyard.results.run_record import Watch, run_record
from steelyard.results.statistic import domain_frame, quantiles_asked, replicate_statistic
from steelyard.results.variance_made import VarianceMade, by_linearization, by_replication, design_is_named
from steelyard.results.weights_file import ReplicateWeights, WeightFile, is_written


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
        watch = Watch()
        source = self._open(extract)
        with _engine(**where) as engine, watch("read and build the design rows"):
            rows, checkup = build_rows(source, self, engine, block_rows=block_rows)
            if self.exposure.clusters is not None:
                rows = with_cluster_shares(rows, self.exposure, engine)
            if self.balance.clusters is not None:
                rows = with_cluster_means(rows, self.balance.clusters, engine)
            design = survey_design(rows.units, self.design.single_psu)
        return Prepared(source, rows, design, checkup, watch.seconds)

    def estimate(self, prepared: Prepared, **where: Any) -> Answer:
        """Estimate propensity, balance and effects on design rows that are ready."""
        watch = Watch(prepared.seconds)
        rows, design, blocks = prepared.rows, prepared.design, prepared.rows.blocks
        sampling = SamplingWeights()
        columns = TermColumns(rows.terms)
        with _engine(**_without_block_rows(where)) as engine:
            with watch("propensity"):
                fit = fit_propensity(rows, self.exposure, sampling, engine)
                made = balancing(rows, self.exposure, fit, sampling, engine)
            with watch("overlap"):
                overlap = overlap_of(rows, self.exposure, made, engine)
            with watch("balance"):
                moments = term_moments(columns, made, engine, blocks)
                apart = distances(columns, made, engine, blocks)
                meeting = self._cluster_overlap(rows, made, engine)
                clusters = None
                if self.exposure.clusters is not None:
                    clusters = term_moments(columns, made, engine, weighed_by_share(rows))
            with watch("effects"):
                found = groups(rows, self, made, engine)
                outcomes = _outcome_moments(rows, engine)
            with watch("variance"):
                again = self._replication(prepared, found, made, engine)
                linear = None
                if again is None or (self.variance.side_by_side and self._linearizes(again)):
                    linear = linearized(found.with_weights_known(), made, design, rows, engine)
        inference, how = self._headline(again, linear, design)
        balance = balance_of(columns, moments, apart, inference, self.exposure.estimand, how.df, meeting)
        if clusters is not None:
            balance = replace(
                balance, among_clusters=among_clusters(columns, clusters, self.exposure.estimand)
            )
        as_asked = partial(
            effect_results,
            self,
            found.effects,
            rows=len(rows),
            outcomes=outcomes,
            title=self.title or "Effects",
        )
        first = _both(as_asked, inference, how, len(self.outcome))
        second = None
        if again is not None and linear is not None:
            second = _both(as_asked, linear, by_linearization(self, design), len(self.outcome))
        known = self.variance.propensity == "known"
        levels = multilevel_results(found.effects, inference, how.df, self.variance.confidence)
        told = (
            *rows.warnings,
            *design.notes,
            *_fit_warnings(fit),
            *(() if again is None else (*again.found.scheme.notes, *again.found.warnings())),
            *overlap_warnings(overlap, self.exposure.estimand),
            *balance_warnings(balance, how.df, self.exposure.estimand),
            *(note for results in levels for note in results.notes),
        )
        for text in told:
            python_warnings.warn(text, SteelyardWarning, stacklevel=2)
        weights, not_written = self._weight_file(prepared, made, again)
        return Answer(
            plan=self,
            checkup=prepared.checkup,
            propensity=EstimateResults(
                *inference.of("propensity"),
                fit.regression.names,
                how.df,
                title="Exposure model",
                confidence=self.variance.confidence,
            ),
            overlap=overlap,
            balance=balance,
            effects=first[known],
            effects_known=first[1],
            variance=how,
            beside=None if second is None else second[known],
            beside_known=None if second is None else second[1],
            multilevel=levels,
            sensitivity=sensitivity_of(
                self, first[known], np.sqrt(outcomes.variance.mean(axis=0)), _ratios(self, inference)
            ),
            warnings=(*told, *not_written),
            record=run_record(self, prepared.checkup.files, watch.seconds, (*told, *not_written), how),
            weights=weights,
        )

    def statistic(
        self,
        function: Callable[[pd.DataFrame, NDArray[np.float64]], Any],
        extract: Any = None,
        *,
        columns: Sequence[str] = (),
        weights: Literal["combined", "sampling"] = "combined",
        **where: Any,
    ) -> EstimateResults:
        """Return any statistic of the domain's rows with its standard error and covariance, by replication.

        Parameters
        ----------
        function : callable
            From a frame of the domain's n complete rows and weights (n,) to a number, a sequence of numbers, or a
            mapping or Series of them with names. It is called once for the full sample and once a replicate.
        columns : columns of the extract that the frame has beside those the plan reads
        weights : which weights the function is given
        **where : as for :meth:`run`

        Notes
        -----
        The propensity is estimated again in each replicate, unless ``variance.propensity`` is "known". Replicates
        are those of ``variance.method``; where that is "linearization", the supplied ones, or else the bootstrap.

        Raises
        ------
        SteelyardError
            As for :meth:`run`; or the function returns no numbers, or fails in too many replicates.
        """
        prepared = self.prepare(extract, **where)
        with _engine(**_without_block_rows(where)) as engine:
            fit = fit_propensity(prepared.rows, self.exposure, SamplingWeights(), engine)
            made = balancing(prepared.rows, self.exposure, fit, SamplingWeights(), engine)
            scheme = self._scheme(prepared, self._replicate_method(), engine)
            frame = domain_frame(prepared.extract, self, prepared.rows, columns)
            again = turns(scheme, made, prepared.rows, self, engine)
            return replicate_statistic(function, frame, made, again, scheme, prepared.rows, self, weights)

    def quantiles(
        self,
        outcome: str,
        at: Sequence[float] = (0.25, 0.5, 0.75),
        extract: Any = None,
        **where: Any,
    ) -> EstimateResults:
        """Return weighted quantiles of an outcome among exposed and reference, and their differences.

        Standard errors are made by replication: see :meth:`statistic`. ``at`` are probabilities in (0, 1).

        Raises
        ------
        PlanError
            A probability is out of range, the outcome is none of the plan's, or the plan asks for the jackknife,
            whose variance of a quantile is not consistent.
        """
        asked = quantiles_asked(self, outcome, tuple(at), self._replicate_method())
        return self.statistic(asked, extract, columns=(outcome,), **where)

    def _cluster_overlap(self, rows: Rows, made: Balancing, engine: Engine) -> pd.DataFrame | None:
        if self.balance.clusters is None:
            return None
        unit = rows.units.ancestor(stage_of_clusters(rows, self.balance.clusters))
        return cluster_overlap(made, unit, engine, rows.blocks)

    def _replicate_method(self) -> str:
        """Return the method that replicates are made by where replicates are needed whatever the plan says."""
        if self.variance.method != "linearization":
            return self.variance.method
        return "supplied" if self.design.replicates is not None else "bootstrap"

    def _scheme(self, prepared: Prepared, method: str, engine: Engine) -> Scheme:
        rows = prepared.rows
        row_strata = None
        if not rows.units.clustered and method != "supplied":
            assert rows.unit_of is not None
            wanted = (self.design.weight, *self.design.strata)
            row_strata = np.concatenate(
                [rows.unit_of(table) for _, table in prepared.extract.read(list(dict.fromkeys(wanted)))]
            )
        return scheme_of(self, method, rows, prepared.design, engine, row_strata)

    def _replication(
        self, prepared: Prepared, found: Groups, made: Balancing, engine: Engine
    ) -> Replication | None:
        if self.variance.method == "linearization":
            return None
        scheme = self._scheme(prepared, self.variance.method, engine)
        return replication(found, made, scheme, prepared.rows, self, engine)

    def _linearizes(self, again: Replication) -> bool:
        """Whether linearization would know the design: not where supplied replicates alone carry it."""
        return again.found.scheme.origin == "made" or design_is_named(self)

    def _headline(
        self, again: Replication | None, linear: Inference | None, design: SurveyDesign
    ) -> tuple[Inference, VarianceMade]:
        if again is not None:
            return again.inference, by_replication(self, design, again.found)
        assert linear is not None
        return linear, by_linearization(self, design)

    def _weight_file(
        self, prepared: Prepared, made: Balancing, again: Replication | None
    ) -> tuple[WeightFile, tuple[str, ...]]:
        """Return the rows of weights.parquet, and what to say of replicate weights that are not in them."""
        replicates = None
        told: tuple[str, ...] = ()
        if again is not None:
            known = self.variance.propensity == "known"
            replicates = ReplicateWeights(
                again.found.scheme, [turn.known if known else turn.balancing for turn in again.turns]
            )
            numbers = replicates.numbers_a_row * prepared.rows.total
            if not is_written(self.report.replicate_weights, numbers):
                replicates = None
                if self.report.replicate_weights is None:
                    told = (
                        f"The replicates' weights are {numbers:,} numbers and were not written to weights.parquet: set "
                        "report.replicate_weights = true to have them.",
                    )
        design = (*self.design.strata, *self.design.clusters)
        file = WeightFile(prepared.extract, self.design.weight, design, prepared.rows, made, replicates)
        return file, told

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


def _without_block_rows(where: Mapping[str, Any]) -> dict[str, Any]:
    return {name: value for name, value in where.items() if name != "block_rows"}


def _both(
    as_asked: Callable[..., EstimateResults], inference: Inference, how: VarianceMade, count: int
) -> tuple[EstimateResults, EstimateResults]:
    """Return the effects with the propensity estimated, and with it taken as known."""
    names = [f"effect {place}" for place in range(count)]
    known = [f"{name}, propensity known" for name in names]
    return as_asked(*inference.of(*names), made=how), as_asked(*inference.of(*known), made=how)


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
