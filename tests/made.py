"""Design rows made straight from arrays, so that the estimating floors are tested without an extract."""

from __future__ import annotations

import numpy as np

from steelyard.data.blocks import Block, Model, Rows, Term
from steelyard.data.units import Stage, Units


def stage(parent, rows, domain_rows, population=None, columns=("id",), first_rows=None):
    parent = np.asarray(parent, dtype=np.int64)
    if first_rows is None:
        first_rows = np.arange(len(parent))
    return Stage(
        columns=columns,
        labels=np.array([str(i) for i in range(len(parent))]),
        parent=parent,
        rows=np.asarray(rows, dtype=np.int64),
        domain_rows=np.asarray(domain_rows, dtype=np.int64),
        first_rows=np.asarray(first_rows, dtype=np.int64),
        population=None if population is None else np.asarray(population, dtype=np.float64),
    )


def two_stage_units(stratum_of_psu, unit, domain=None):
    """Units of a stratified cluster design, from the stratum of each PSU and the PSU of each row."""
    stratum_of_psu = np.asarray(stratum_of_psu)
    inside = np.ones(len(unit), dtype=bool) if domain is None else domain
    count = len(stratum_of_psu)
    rows, domain_rows = np.bincount(unit, minlength=count), np.bincount(unit[inside], minlength=count)
    strata = int(stratum_of_psu.max()) + 1
    return Units(
        (
            stage(
                np.zeros(strata),
                np.bincount(stratum_of_psu, rows, strata),
                np.bincount(stratum_of_psu, domain_rows, strata),
            ),
            stage(stratum_of_psu, rows, domain_rows),
        )
    )


def made_rows(
    x,
    exposure,
    weight,
    outcomes=None,
    names=None,
    covariates=None,
    units=None,
    unit=None,
    block_rows=64,
    terms=None,
):
    """Rows with the exposure model ``x`` (n, p; first column the constant), then the outcomes.

    ``covariates`` maps the place of an outcome to the columns of ``x`` its model uses.
    """
    x = np.asarray(x, dtype=np.float64)
    n, p = x.shape
    outcomes = np.zeros((n, 0)) if outcomes is None else np.asarray(outcomes, dtype=np.float64).reshape(n, -1)
    columns = np.ascontiguousarray(np.column_stack([x, outcomes]))
    names = tuple(names or ["Intercept", *[f"x{j}" for j in range(1, p)]])
    unit = np.arange(n) if unit is None else np.asarray(unit)
    if units is None:
        units = two_stage_units(np.zeros(int(unit.max()) + 1, dtype=int), unit)
    blocks = [
        Block(
            position=np.arange(a, min(a + block_rows, n)),
            columns=np.ascontiguousarray(columns[a : a + block_rows]),
            exposure=np.asarray(exposure, dtype=np.float64)[a : a + block_rows],
            weight=np.asarray(weight, dtype=np.float64)[a : a + block_rows],
            unit=unit[a : a + block_rows].astype(np.int64),
        )
        for a in range(0, n, block_rows)
    ]
    covariates = covariates or {}
    models = tuple(
        Model("covariates", tuple(names[j] for j in covariates[k]), tuple(covariates[k]), 0)
        if k in covariates
        else None
        for k in range(outcomes.shape[1])
    )
    return Rows(
        blocks=blocks,
        names=(*names, *[f"y{k}" for k in range(outcomes.shape[1])]),
        exposure_model=Model("a ~ x", names, tuple(range(p)), 0),
        outcome_models=models,
        outcomes=tuple(range(p, p + outcomes.shape[1])),
        terms=terms or tuple(Term(names[j], "", "number", j) for j in range(1, p)),
        levels=("1", "0"),
        units=units,
        total=n,
        exclusions={},
    )


class ColumnsOfWeights:
    """Weight columns held in memory: the full sample's and any others, looked up by position."""

    def __init__(self, columns):
        self.columns = np.asarray(columns, dtype=np.float64)

    @property
    def count(self):
        return self.columns.shape[1]

    def __call__(self, block, out=None):
        return self.columns[block.position]

    def only(self, columns):
        return ColumnsOfWeights(self.columns[:, list(columns)])


def survey_sample(seed=0, n=500, p=4, psus=40, strata=5):
    """A confounded, weighted, clustered sample: x, exposure, weight, outcomes, PSU of row, stratum of PSU.

    The outcomes are a number, a 0/1 and a count.
    """
    rng = np.random.default_rng(seed)
    unit = np.sort(rng.integers(0, psus, n))
    shift = rng.normal(0, 0.5, psus)[unit]
    x = np.column_stack([np.ones(n), rng.normal(size=(n, p - 2)) + shift[:, None], rng.random(n) < 0.4])
    slope = np.linspace(0.6, -0.5, p - 1)
    e = 1 / (1 + np.exp(-(-0.2 + x[:, 1:] @ slope + 0.3 * shift)))
    exposure = (rng.random(n) < e).astype(float)
    weight = np.exp(0.5 * rng.normal(size=n) + 0.3 * x[:, 1]) * 50
    line = 0.3 + 0.8 * exposure + x[:, 1:] @ slope[::-1] + shift
    outcomes = np.column_stack(
        [
            line + rng.normal(size=n),
            rng.random(n) < 1 / (1 + np.exp(-line + 0.5)),
            rng.poisson(np.exp(0.4 * line)),
        ]
    ).astype(float)
    return x, exposure, weight, outcomes, unit, np.sort(np.arange(psus) % strata)
