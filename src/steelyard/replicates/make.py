"""From what the plan asks for to replicate weights: one place that knows all methods."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Rows
from steelyard.data.passes import Engine
from steelyard.design.survey import SurveyDesign
from steelyard.plan import Plan
from steelyard.replicates.balanced import balanced_half_samples
from steelyard.replicates.bootstrap import bootstrap
from steelyard.replicates.jackknife import jackknife
from steelyard.replicates.scheme import Scheme
from steelyard.replicates.successive import successive_difference
from steelyard.replicates.supplied import supplied_scheme
from steelyard.replicates.units import replication_units


def scheme_of(
    plan: Plan,
    method: str,
    rows: Rows,
    design: SurveyDesign,
    engine: Engine,
    row_strata: NDArray[np.int64] | None = None,
) -> Scheme:
    """Return the replicate weights of a method: one of the plan's words for ``variance.method``.

    ``row_strata`` gives the stratum of every row of the extract, for a design without clusters.

    Raises
    ------
    DesignError, PlanError
        The design does not suit the method; each says what would.
    """
    if method == "supplied":
        assert plan.design.replicates is not None
        stated = bool(plan.design.strata or plan.design.clusters)
        count = rows.blocks[0].replicates
        assert count is not None
        return supplied_scheme(
            plan.design.replicates, count.shape[1], rows, engine, design.df if stated else None
        )
    units = replication_units(design, row_strata)
    variance = plan.variance
    if method == "jackknife":
        return jackknife(units, design.df)
    if method == "bootstrap":
        return bootstrap(units, design.df, variance.replicates, variance.seed)
    if method == "successive-difference":
        return successive_difference(units, design.df, variance.replicates)
    return balanced_half_samples(units, design.df, variance.fay if method == "fay" else None)
