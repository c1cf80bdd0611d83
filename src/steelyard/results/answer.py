"""Everything one run of a study found, as frames and small results that a report can draw from."""

from __future__ import annotations

from dataclasses import dataclass, field

import pandas as pd

from steelyard.data.checkup import Checkup
from steelyard.plan import Plan
from steelyard.results.estimates import EstimateResults, JointTest
from steelyard.results.multilevel import MultilevelResults
from steelyard.results.variance_made import VarianceMade
from steelyard.results.weights_file import WeightFile


@dataclass(frozen=True)
class Overlap:
    """How far exposed and reference share the range of the propensity.

    Attributes
    ----------
    histogram : frame
        ``low``, ``high`` (propensity bin), and for each of the columns ``exposed_before``,
        ``reference_before``, ``exposed_after``, ``reference_after`` the share (0..1) of the group's
        sampling (before) or combined (after) weight in the bin; ``exposed_rows``, ``reference_rows``.
    groups : frame, one row for each of ``exposed`` and ``reference``
        ``group``, ``level`` (as spelled in the extract), ``rows``, ``sampling_weight`` (sum),
        ``combined_weight`` (sum), ``effective_before``, ``effective_after`` (Kish), ``propensity_min``,
        ``propensity_mean`` (sampling-weighted), ``propensity_max``, ``outside`` (rows outside the range
        of the other group), ``largest_row_share`` and ``largest_psu_share`` (of the group's combined weight).
    extremes : frame
        ``propensity`` ("below 0.01", "below 0.05", "above 0.95", "above 0.99"), ``exposed_rows``,
        ``reference_rows``.
    target : text
        The population that the estimand and the trimming leave as the target, in one or two sentences.
    trimmed : mapping
        What trimming did, "rows outside the propensity range" -> n, "rows capped" -> n; empty without.
    """

    histogram: pd.DataFrame
    groups: pd.DataFrame
    extremes: pd.DataFrame
    target: str
    trimmed: dict[str, int]


@dataclass(frozen=True)
class BalanceResults:
    """The groups compared, before and after.

    ``table`` has the columns of balance.csv, and beside them ``kind`` ("number" or "level"), ``se_before``,
    ``se_after``, ``mean_difference_before``, ``mean_difference_after``, and the rows of each group where the
    term is not zero, ``rows_exposed`` and ``rows_reference``, which disclosure control needs.
    ``joint_before`` and ``joint_after`` are the Wald F tests of all differences; ``over_identification`` is the
    chi-square test of the propensity's moment conditions (None where the estimand leaves none to test, as
    for the ATO with a logit).
    ``clusters``, where the plan names some, splits the standardized differences of the table's rows that vary within
    them: ``row`` (place in ``table``), ``term``, ``level``, and ``between_before``, ``within_before``,
    ``between_after``, ``within_after``, whose sums are ``smd_before`` and ``smd_after``. ``cluster_overlap``: see
    :func:`steelyard.exposure.cluster_overlap.cluster_overlap`. ``among_clusters``, where whole clusters are exposed,
    compares them, each for its own weight and shared by its rows: ``row`` (place in ``table``), ``term``, ``level``,
    and ``mean_exposed_``, ``mean_reference_`` and ``smd_`` before and after.
    """

    table: pd.DataFrame
    joint_before: JointTest
    joint_after: JointTest
    over_identification: JointTest | None
    clusters: pd.DataFrame = field(default_factory=pd.DataFrame)
    cluster_overlap: pd.DataFrame = field(default_factory=pd.DataFrame)
    among_clusters: pd.DataFrame = field(default_factory=pd.DataFrame)


@dataclass(frozen=True)
class Answer:
    """What one run of a study found.

    Attributes
    ----------
    plan : Plan
    checkup : Checkup
        The extract and the design as they were found.
    propensity : EstimateResults
        The coefficients of the exposure model with design-based covariance.
    overlap : Overlap
    balance : BalanceResults
    effects : EstimateResults
        One parameter for each outcome of the plan; ``effects.table`` has the columns of effects.csv.
    effects_known : EstimateResults
        The same with the propensity treated as known: what ignoring its estimation would have claimed.
    variance : VarianceMade
        How the variance of ``effects``, of balance and of the propensity was made.
    beside, beside_known : EstimateResults or None
        The same effects with the linearized variance, where replicates made the first and both were asked for.
    multilevel : one MultilevelResults for each outcome with a multilevel model
    sensitivity : frame
        E-values: ``outcome``, ``measure``, ``risk_ratio`` (the ratio the E-value is for, exact or by the
        published approximation), ``risk_ratio_low``, ``risk_ratio_high``, ``e_value``, ``e_value_limit``
        (of the interval's limit nearer 1; 1 where the interval holds 1), ``approximation`` (text, empty
        if exact).
    warnings : texts, in the order in which they arose
    record : dict
        Versions, input digests, seeds, timings: what ``record.json`` says.
    weights : WeightFile
        The rows of weights.parquet, in the order of the extract.
    """

    plan: Plan
    checkup: Checkup
    propensity: EstimateResults
    overlap: Overlap
    balance: BalanceResults
    effects: EstimateResults
    effects_known: EstimateResults
    variance: VarianceMade
    beside: EstimateResults | None
    beside_known: EstimateResults | None
    multilevel: tuple[MultilevelResults, ...]
    sensitivity: pd.DataFrame
    warnings: tuple[str, ...]
    record: dict[str, object]
    weights: WeightFile

    @property
    def effects_table(self) -> pd.DataFrame:
        """The effects as effects.csv has them: under the plan's variance, then under the one beside it."""
        tables = [self.effects.table] + ([self.beside.table] if self.beside is not None else [])
        return pd.concat(tables, ignore_index=True)
