"""Replicate weights against the formulas: identities with the linearized variance, and factors written out."""

from __future__ import annotations

import numpy as np
import pytest

from made import made_rows, stage, two_stage_units
from oracle import stratified_variance
from steelyard.data.units import Units
from steelyard.design.survey import survey_design
from steelyard.errors import DesignError, PlanError
from steelyard.replicates.balanced import balanced_half_samples
from steelyard.replicates.bootstrap import bootstrap
from steelyard.replicates.hadamard import hadamard
from steelyard.replicates.jackknife import jackknife
from steelyard.replicates.successive import successive_difference
from steelyard.replicates.units import replication_units


def sample(sizes, seed=0, rows_a_psu=(1, 5), populations=None):
    """PSUs in strata of the given sizes; a total's contribution of each row, z (n, 3)."""
    rng = np.random.default_rng(seed)
    stratum = np.repeat(np.arange(len(sizes)), sizes)
    unit = np.repeat(np.arange(len(stratum)), rng.integers(*rows_a_psu, len(stratum)))
    w = np.exp(rng.normal(size=len(unit)))
    z = rng.normal(size=(len(unit), 3)) + 0.7 + 0.5 * stratum[unit, None]
    units = two_stage_units(stratum, unit)
    if populations is not None:
        first = units.stages[0]
        strata = stage(first.parent, first.rows, first.domain_rows, populations)
        units = Units((strata, units.stages[1]))
    rows = made_rows(np.ones((len(w), 1)), np.zeros(len(w)), w, z, units=units, unit=unit, block_rows=7)
    return rows, w, z, stratum, unit


def totals(rows, scheme):
    """Each column's weighted totals of the outcomes, (3, 1 + R), block by block as an estimator sees them."""
    return sum(block.columns[:, 1:].T @ scheme.every(block) for block in rows.blocks)


def variance(rows, scheme):
    theta = totals(rows, scheme)
    deviations = theta[:, 1:] - theta[:, :1]
    return scheme.factor * (deviations * scheme.factors) @ deviations.T


def by_formula(z, w, stratum, unit, fractions=None, lone="refuse"):
    """The textbook variance of a total, strata apart so that each may have a sampling fraction."""
    if fractions is None:
        return stratified_variance(w[:, None] * z, stratum[unit], unit, lone)
    v = 0
    for h in np.unique(stratum):
        mine = stratum[unit] == h
        v = v + (1 - fractions[h]) * stratified_variance(
            w[mine, None] * z[mine], stratum[unit][mine], unit[mine]
        )
    return v


@pytest.mark.parametrize("sizes", [[2] * 5, [2, 3, 7, 4], [25]])
def test_jackknife_of_a_total_is_the_linearized_variance(sizes):
    # Wolter 2007, chapter 4.
    rows, w, z, stratum, unit = sample(sizes)
    design = survey_design(rows.units)
    scheme = jackknife(replication_units(design), design.df)
    assert scheme.count == sum(sizes)
    np.testing.assert_allclose(variance(rows, scheme), by_formula(z, w, stratum, unit), rtol=1e-12)


@pytest.mark.parametrize("strata", [1, 2, 3, 4, 7, 11, 12, 27])
@pytest.mark.parametrize("fay", [None, 0.3, 0.5])
def test_balanced_half_samples_of_a_total_are_the_linearized_variance(strata, fay):
    # Wolter 2007, chapter 3: exact on a full orthogonal set, whatever Fay's factor.
    rows, w, z, stratum, unit = sample([2] * strata, seed=strata)
    design = survey_design(rows.units)
    scheme = balanced_half_samples(replication_units(design), design.df, fay)
    assert scheme.count > strata
    np.testing.assert_allclose(variance(rows, scheme), by_formula(z, w, stratum, unit), rtol=1e-11)
    multipliers = np.unique(np.round(scheme.every.multipliers(np.arange(2 * strata))[:, 1:], 12))
    np.testing.assert_allclose(multipliers, [fay or 0, 2 - (fay or 0)])
    mean = scheme.every.multipliers(np.arange(2 * strata))[:, 1:].mean(axis=1)
    np.testing.assert_allclose(mean, 1, rtol=1e-12)


@pytest.mark.parametrize("method", ["jackknife", "fay", "brr"])
def test_sampling_fractions_shrink_the_replicates_as_they_shrink_the_variance(method):
    fractions = np.array([0.5, 0.1, 1.0, 0.25])
    rows, w, z, stratum, unit = sample([2] * 4, populations=2 / fractions)
    design = survey_design(rows.units)
    units = replication_units(design)
    scheme = (
        jackknife(units, 1)
        if method == "jackknife"
        else balanced_half_samples(units, 1, 0.3 if method == "fay" else None)
    )
    np.testing.assert_allclose(variance(rows, scheme), by_formula(z, w, stratum, unit, fractions), rtol=1e-11)


@pytest.mark.parametrize("scatter", [False, True])
def test_rows_as_psus_and_rows_in_any_order(scatter):
    rng = np.random.default_rng(3)
    strata = np.repeat(np.arange(4), [2, 3, 5, 4])
    if scatter:
        strata = rng.permutation(strata)
    n = len(strata)
    w, z = np.exp(rng.normal(size=n)), rng.normal(size=(n, 3))
    flat = Units((stage(np.zeros(4), np.bincount(strata), np.bincount(strata)),))
    rows = made_rows(np.ones((n, 1)), np.zeros(n), w, z, units=flat, unit=strata, block_rows=4)
    design = survey_design(flat)
    scheme = jackknife(replication_units(design, strata), design.df)
    expected = stratified_variance(w[:, None] * z, strata, np.arange(n))
    np.testing.assert_allclose(variance(rows, scheme), expected, rtol=1e-12)


def test_a_recentred_lone_psu_is_jackknifed_towards_the_mean_of_all():
    rows, w, z, stratum, unit = sample([3, 1, 4])
    design = survey_design(rows.units, "recentre")
    scheme = jackknife(replication_units(design), design.df)
    np.testing.assert_allclose(
        variance(rows, scheme), by_formula(z, w, stratum, unit, lone="recentre"), rtol=1e-12
    )


def test_collapsed_strata_are_replicated_as_one():
    rows, w, z, stratum, unit = sample([3, 1, 4])
    design = survey_design(rows.units, "collapse")
    scheme = jackknife(replication_units(design), design.df)
    np.testing.assert_allclose(
        variance(rows, scheme), by_formula(z, w, stratum, unit, lone="collapse"), rtol=1e-12
    )


def test_certain_psus_never_vary_and_the_clusters_below_them_take_their_place():
    # Stratum 0: a PSU chosen with certainty, three clusters in it; stratum 1: two PSUs of two clusters.
    rng = np.random.default_rng(5)
    psu_of_cluster = np.array([0, 0, 0, 1, 1, 2, 2])
    stratum_of_psu = np.array([0, 1, 1])
    cluster = np.repeat(np.arange(7), 3)
    n = len(cluster)
    w, z = np.exp(rng.normal(size=n)), rng.normal(size=(n, 3)) + 1
    counts = np.bincount(cluster)
    by_psu = np.bincount(psu_of_cluster, counts)
    units = Units(
        (
            stage([0, 0], np.bincount(stratum_of_psu, by_psu), np.bincount(stratum_of_psu, by_psu)),
            stage(stratum_of_psu, by_psu, by_psu),
            stage(psu_of_cluster, counts, counts),
        )
    )
    rows = made_rows(np.ones((n, 1)), np.zeros(n), w, z, units=units, unit=cluster)
    design = survey_design(units, "self-representing")
    inside = cluster < 3
    expected = stratified_variance(w[inside, None] * z[inside], np.zeros(9), cluster[inside])
    expected = expected + stratified_variance(
        w[~inside, None] * z[~inside], np.ones(12), psu_of_cluster[cluster[~inside]]
    )
    scheme = jackknife(replication_units(design), design.df)
    assert scheme.count == 5
    np.testing.assert_allclose(variance(rows, scheme), expected, rtol=1e-12)
    # Three clusters below the certain PSU: half-samples refuse, the bootstrap does not.
    with pytest.raises(DesignError, match=r"1 of 2 strata have another number: 0 \(3\)"):
        balanced_half_samples(replication_units(design), 1)
    assert bootstrap(replication_units(design), 3, 20, 1).count == 20


def test_successive_difference_factors_are_the_published_ones():
    # Fay & Train 1995; US Census Bureau, ACS Design and Methodology (2014), chapter 12: 1, 1.7071, 0.2929 and 4/R.
    rows, *_ = sample([40, 30])
    design = survey_design(rows.units)
    scheme = successive_difference(replication_units(design), design.df, 80)
    assert scheme.count == 80
    assert scheme.factor == 4 / 80
    found = np.unique(np.round(scheme.every.multipliers(np.arange(70))[:, 1:], 4))
    np.testing.assert_array_equal(found, [0.2929, 1.0, 1.7071])
    signs = hadamard(80)
    # The third PSU of the file takes the third and fourth rows below the first.
    expected = 1 + 2**-1.5 * signs[3] - 2**-1.5 * signs[4]
    np.testing.assert_allclose(scheme.every.multipliers(np.array([2]))[0, 1:], expected, rtol=1e-15)


def test_successive_differences_of_a_total_are_half_the_squared_steps_of_the_file():
    rows, w, z, stratum, unit = sample([6, 2, 9], seed=4)
    order = np.random.default_rng(8).permutation(17)
    psus = rows.units.stages[1]
    units = Units((rows.units.stages[0], stage(psus.parent, psus.rows, psus.domain_rows, first_rows=order)))
    rows = made_rows(np.ones((len(w), 1)), np.zeros(len(w)), w, z, units=units, unit=unit)
    scheme = successive_difference(replication_units(survey_design(units)), 1, 20)
    t = np.array([(w[unit == j, None] * z[unit == j]).sum(axis=0) for j in range(17)])
    expected = np.zeros((3, 3))
    for h in range(3):
        members = np.flatnonzero(stratum == h)
        members = members[np.argsort(order[members])]
        steps = t[members] - t[np.roll(members, -1)]
        expected += steps.T @ steps / 2
    np.testing.assert_allclose(variance(rows, scheme), expected, rtol=1e-12)


def test_the_bootstrap_is_unbiased_for_the_linearized_variance_of_a_total():
    fractions = np.array([0.0, 0.3, 0.5])
    rows, w, z, stratum, unit = sample([4, 2, 9], populations=np.array([4e12, 2 / 0.3, 18]))
    design = survey_design(rows.units)
    units = replication_units(design)
    expected = np.diag(by_formula(z, w, stratum, unit, fractions))
    draws = np.array([np.diag(variance(rows, bootstrap(units, 1, 50, seed))) for seed in range(200)])
    monte_carlo = draws.std(axis=0, ddof=1) / np.sqrt(len(draws))
    # The mean of 200 seeds lies within four of its Monte Carlo errors, which are under two per cent.
    assert (monte_carlo < 0.02 * expected).all()
    assert (np.abs(draws.mean(axis=0) - expected) < 4 * monte_carlo).all()


def test_the_bootstrap_keeps_the_number_of_draws_and_its_seed():
    rows, *_ = sample([4, 2, 9])
    units = replication_units(survey_design(rows.units))
    once, again, other = (
        bootstrap(units, 1, 30, seed).every.multipliers(np.arange(15)) for seed in (7, 7, 8)
    )
    assert np.array_equal(once, again)
    assert not np.array_equal(once, other)
    for members in (slice(0, 4), slice(4, 6), slice(6, 15)):
        size = members.stop - members.start
        np.testing.assert_allclose(once[members].sum(axis=0), size, rtol=1e-12)
        drawn = once[members, 1:] * (size - 1) / size
        np.testing.assert_allclose(drawn, np.round(drawn), atol=1e-12)
    assert (once >= 0).all()


def test_half_samples_need_two_psus_and_say_which_strata_have_not():
    rows, *_ = sample([2, 3, 2, 5])
    units = replication_units(survey_design(rows.units))
    with pytest.raises(DesignError, match=r"2 of 4 strata have another number: 1 \(3\), 3 \(5\)") as refused:
        balanced_half_samples(units, 1)
    assert "jackknife" in refused.value.mend


@pytest.mark.parametrize(
    "make", [lambda u: bootstrap(u, 1, 10, 1), lambda u: successive_difference(u, 1, 10)]
)
def test_a_recentred_lone_psu_cannot_be_redrawn_or_differenced(make):
    rows, *_ = sample([3, 1, 4])
    units = replication_units(survey_design(rows.units, "recentre"))
    with pytest.raises(DesignError, match=r"1 stratum\(s\) of one PSU are recentred, 1 first") as refused:
        make(units)
    assert "collapse" in refused.value.mend


def test_the_jackknife_refuses_what_would_take_for_ever():
    flat = Units((stage([0], [20_001], [20_001]),))
    with pytest.raises(PlanError, match="20,001 units"):
        jackknife(replication_units(survey_design(flat), np.zeros(20_001, dtype=np.int64)), 1)
