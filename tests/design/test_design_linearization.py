"""The linearized covariance of any influence, against brute force (tests/oracle.py) and exact properties."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import oracle
from made import made_rows, stage
from steelyard.data.passes import Engine, threads
from steelyard.data.units import Units
from steelyard.design.linearization import PlainInfluence, covariance
from steelyard.design.survey import survey_design


class Lookup:
    """Influence looked up by position in the extract."""

    def __init__(self, u):
        self.u = u

    def __call__(self, block):
        return self.u[block.position]


def nested(rng, n, levels, inside):
    """Random nested ids, their units, and populations at every stage."""
    ids = np.zeros((n, levels + 1), dtype=int)
    ids[:, 0] = rng.integers(0, 3, n)
    code = ids[:, 0]
    stages, populations = [], np.full((n, levels + 1), np.nan)
    for depth in range(levels + 1):
        if depth:
            pair = np.column_stack([code, rng.integers(0, 4, n)])
            code = np.unique(pair, axis=0, return_inverse=True)[1].ravel()
            ids[:, depth] = code
        else:
            code = np.unique(code, return_inverse=True)[1]
            ids[:, 0] = code
        stages.append(code)
    built = []
    for depth, code in enumerate(stages):
        size = code.max() + 1
        first = np.array([np.flatnonzero(code == u)[0] for u in range(size)])
        parent = np.zeros(size) if depth == 0 else stages[depth - 1][first]
        below = stages[depth + 1] if depth + 1 < len(stages) else np.arange(n)
        sampled = np.array([len(np.unique(below[code == u])) for u in range(size)])
        # Two or more everywhere, so that no stratum is certain by accident.
        population = sampled + rng.integers(1, 9, size)
        populations[:, depth] = population[code]
        built.append(
            stage(parent, np.bincount(code), np.bincount(code, inside, size), population.astype(float))
        )
    return ids, Units(tuple(built)), populations


def given_populations(units, upto):
    from dataclasses import replace

    return Units(tuple(s if k < upto else replace(s, population=None) for k, s in enumerate(units.stages)))


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 100_000),
    levels=st.integers(0, 3),
    upto=st.integers(0, 4),
    block_rows=st.integers(5, 130),
    order=st.sampled_from(["sorted", "shuffled"]),
)
def test_covariance_by_brute_force_for_any_stages_populations_domain_and_order(
    seed, levels, upto, block_rows, order
):
    rng = np.random.default_rng(seed)
    n = 120
    inside = rng.random(n) < 0.8
    ids, units, populations = nested(rng, n, levels, inside)
    upto = min(upto, levels + 1)
    units = given_populations(units, upto)
    populations[:, upto:] = np.nan
    psus = units.stages[0].rows if levels == 0 else np.bincount(units.stages[1].parent)
    u, s = rng.normal(size=(n, 3)), rng.exponential(size=n)
    z = np.where(inside[:, None], s[:, None] * u, 0)
    if (psus == 1).any():
        return
    place = np.arange(n) if order == "sorted" else rng.permutation(n)
    if order == "sorted":
        place = np.lexsort(ids.T[::-1])
    kept = place[inside[place]]
    rows = made_rows(
        np.ones((len(kept), 1)),
        np.zeros(len(kept)),
        s[kept],
        unit=ids[kept, levels],
        units=units,
        block_rows=block_rows,
    )
    got = covariance(survey_design(units), rows, Engine(), PlainInfluence(Lookup(u[kept]), 3))
    full_ids = np.column_stack([ids, np.arange(n)])
    expected = oracle.staged_variance(z, full_ids, populations)
    np.testing.assert_allclose(got, expected, rtol=1e-9, atol=1e-12)
    assert np.linalg.eigvalsh(got).min() > -1e-10 * np.trace(got)


@pytest.fixture
def sample():
    rng = np.random.default_rng(3)
    psu = np.sort(rng.integers(0, 30, 5000))
    stratum = np.arange(30) % 4
    stratum.sort()
    psus = stage(stratum, np.bincount(psu), np.bincount(psu))
    strata = stage(np.zeros(4), np.bincount(stratum, psus.rows), np.bincount(stratum, psus.rows))
    units = Units((strata, psus))
    return rng.normal(size=(5000, 4)), rng.exponential(size=5000), psu, units


def test_workers_and_block_size_do_not_matter(sample):
    u, s, psu, units = sample
    design = survey_design(units)

    def found(block_rows, workers):
        rows = made_rows(np.ones((5000, 1)), np.zeros(5000), s, unit=psu, units=units, block_rows=block_rows)
        with threads(workers) as engine:
            return covariance(design, rows, engine, PlainInfluence(Lookup(u), 4))

    base = found(512, 1)
    assert np.array_equal(base, found(512, 3))
    np.testing.assert_allclose(found(97, 1), base, rtol=1e-10)
    np.testing.assert_allclose(found(5000, 1), base, rtol=1e-10)


def test_products_combined_after_summing_are_the_influence_combined_before(sample):
    u, s, psu, units = sample
    rng = np.random.default_rng(4)
    factors, matrix = rng.normal(size=(5000, 2)), rng.normal(size=(8, 3))

    class Products:
        def __init__(self):
            self.matrix = matrix

        def products(self, block):
            return [(factors[block.position], u[block.position])]

        def __call__(self, block):
            f, z = factors[block.position], u[block.position]
            return np.column_stack([f[:, :1] * z, f[:, 1:] * z]) @ matrix

    def found(influence, unit, units):
        rows = made_rows(np.ones((5000, 1)), np.zeros(5000), s, unit=unit, units=units, block_rows=700)
        return covariance(survey_design(units), rows, Engine(), influence)

    whole = PlainInfluence(Products(), 3)
    shuffled = np.random.default_rng(5).permutation(psu)
    flat = Units((stage([0], [5000], [5000]),))
    for unit, design_units in ((psu, units), (shuffled, units), (np.zeros(5000, dtype=int), flat)):
        np.testing.assert_allclose(
            found(Products(), unit, design_units), found(whole, unit, design_units), rtol=1e-9
        )


def test_scale_of_the_influence_is_squared(sample):
    u, s, psu, units = sample
    rows = made_rows(np.ones((5000, 1)), np.zeros(5000), s, unit=psu, units=units)
    design = survey_design(units)
    one = covariance(design, rows, Engine(), PlainInfluence(Lookup(u), 4))
    two = covariance(design, rows, Engine(), PlainInfluence(Lookup(3 * u), 4))
    np.testing.assert_allclose(two, 9 * one, rtol=1e-12)


def test_self_representing_psus_bring_the_variance_of_the_stage_below():
    # One certain PSU with five clusters in it: the clusters are the PSUs of that stratum.
    rng = np.random.default_rng(6)
    cluster = np.repeat(np.arange(5 + 6), 4)
    owner = np.array([0] * 5 + [1] * 3 + [2] * 3)
    psus = stage([0, 1, 1], [20, 12, 12], [20, 12, 12])
    units = Units((stage([0, 0], [20, 24], [20, 24]), psus, stage(owner, [4] * 11, [4] * 11)))
    u, s = rng.normal(size=(44, 2)), rng.exponential(size=44)
    rows = made_rows(np.ones((44, 1)), np.zeros(44), s, unit=cluster, units=units)
    got = covariance(survey_design(units, "self-representing"), rows, Engine(), PlainInfluence(Lookup(u), 2))
    z = s[:, None] * u
    stratum = np.where(cluster < 5, 0, 1)
    as_psu = np.where(cluster < 5, cluster, 100 + owner[cluster])
    np.testing.assert_allclose(got, oracle.stratified_variance(z, stratum, as_psu), rtol=1e-10)
