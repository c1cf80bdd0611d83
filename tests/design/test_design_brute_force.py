"""Linearized covariance against brute force in loops, exact identities and statsmodels."""

from __future__ import annotations

import tracemalloc
from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor
from dataclasses import dataclass
from multiprocessing import get_context

import numpy as np
import pytest
import statsmodels.api as sm
from design_samples import Sample, brute_variance, influence, made_sample, rows_of
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from steelyard.data.passes import Engine
from steelyard.data.unit_totals import LONG_RUN
from steelyard.design import linearization
from steelyard.design.linearization import (
    PlainInfluence,
    _TotalsKernel,
    covariance,
    standard_errors,
    unit_totals,
)
from steelyard.design.survey import survey_design

SERIAL = Engine()
TREATMENTS = ["recentre", "collapse", "self-representing"]


def variance_of(sample, word="refuse", block_rows=16, engine=SERIAL, of=influence):
    rows = rows_of(sample, block_rows)
    return covariance(survey_design(rows.units, word), rows, engine, of)


def close(found, expected, rtol=1e-10):
    np.testing.assert_allclose(found, expected, rtol=rtol, atol=rtol * np.abs(expected).max())


@pytest.mark.parametrize("domain", [False, True], ids=["all rows", "domain"])
@pytest.mark.parametrize(
    ("depth", "given_stages"), [(d, g) for d in range(4) for g in range(d + 2)], ids=lambda v: str(v)
)
def test_every_number_of_stages_and_populations(depth, given_stages, domain):
    for seed in range(3):
        sample = made_sample(10 * depth + seed, depth, given_stages, domain=domain)
        close(variance_of(sample), brute_variance(sample))


def test_populations_of_later_stages_do_move_the_variance():
    # So that the test above compares something at every stage.
    sample = made_sample(7, depth=3, given=4)
    by_given = [
        np.trace(variance_of(sample.changed(populations=sample.populations[:, :given]))) for given in range(5)
    ]
    assert by_given[0] > by_given[1] < by_given[2] < by_given[3] < by_given[4]


@pytest.mark.parametrize("depth", [0, 1])
def test_one_stratum(depth):
    sample = made_sample(11, depth, strata=1, psus=(12, 12))
    close(variance_of(sample), brute_variance(sample))


def with_lone_strata(seed, depth, given_stages, certain=False, domain=False):
    """Strata 0, 3, 4 and 7 of eight keep one PSU; stratum 4's is certain on request."""
    sample = made_sample(seed, depth, given_stages, strata=8, psus=(3, 4), below=(2, 4), domain=domain)
    rows = np.arange(len(sample))
    keep = np.ones(len(sample), dtype=bool)
    for h in (0, 3, 4, 7):
        there = rows[sample.ids[:, 0] == h]
        keep[there] = (sample.ids[there, 1] == 0) if depth else there == there[0]
    sample = sample.take(keep)
    if certain:
        sample.populations[sample.ids[:, 0] == 4, 0] = 1
    return sample


@pytest.mark.parametrize("word", TREATMENTS)
@pytest.mark.parametrize("domain", [False, True], ids=["all rows", "domain"])
@pytest.mark.parametrize(
    ("depth", "given_stages"), [(d, g) for d in range(4) for g in range(d + 2)], ids=lambda v: str(v)
)
def test_each_treatment_of_a_lone_psu(word, depth, given_stages, domain):
    for certain in (False, True) if given_stages else (False,):
        sample = with_lone_strata(5 + depth, depth, given_stages, certain, domain)
        close(variance_of(sample, word), brute_variance(sample, word))


def test_the_treatments_differ():
    sample = with_lone_strata(21, 2, 0)
    traces = [np.trace(variance_of(sample, word)) for word in TREATMENTS]
    assert len({round(t, 6) for t in traces}) == 3


def test_certain_psus_under_refuse():
    sample = made_sample(31, depth=2, given=3, strata=5, psus=(3, 4), below=(2, 4))
    sample = sample.take((sample.ids[:, 0] != 2) | (sample.ids[:, 1] == 0))
    sample.populations[sample.ids[:, 0] == 2, 0] = 1
    close(variance_of(sample), brute_variance(sample))


@dataclass(frozen=True)
class InParts:
    """An influence that comes as products: two factors times two columns, one factor times a column."""

    matrix: np.ndarray

    def products(self, block):
        c = block.columns
        return [(c[:, :2], c[:, 1:3]), (np.ones((len(c), 1)), c[:, 2:3])]

    def __call__(self, block):
        a, b, c = block.columns.T
        return np.column_stack([a * b, a * c, b * b, b * c, c]) @ self.matrix


@pytest.mark.parametrize("rows_a_psu", [2, 3 * LONG_RUN], ids=["short runs", "long runs"])
@pytest.mark.parametrize("order", ["sorted", "shuffled", "in two pieces"])
@pytest.mark.parametrize("given_stages", [0, 2])
def test_products_are_summed_before_they_are_combined(rows_a_psu, order, given_stages):
    sample = made_sample(41, 1, given_stages, strata=3, psus=(2, 4), below=(rows_a_psu, rows_a_psu + 5))
    place = np.lexsort(sample.ids.T[::-1])
    if order == "shuffled":
        place = np.random.default_rng(1).permutation(place)
    if order == "in two pieces":
        place = np.concatenate([place[::2], place[1::2]])
    sample = sample.take(place)
    of = InParts(np.random.default_rng(2).normal(size=(5, 4)))
    a, b, c = sample.u.T
    combined = sample.changed(u=np.column_stack([a * b, a * c, b * b, b * c, c]) @ of.matrix)
    expected = brute_variance(combined)
    # In one block of all rows a PSU in two pieces has two long runs.
    for block_rows in (250, len(sample)):
        close(variance_of(sample, of=of, block_rows=block_rows), expected)


def test_units_are_taken_slice_by_slice(monkeypatch):
    monkeypatch.setattr(linearization, "SLICE", 3)
    sample = made_sample(45, 2, 2, domain=True)
    close(variance_of(sample), brute_variance(sample))


def test_a_function_and_a_plain_influence_are_the_same():
    sample = made_sample(51, 2, 2)
    close(variance_of(sample, of=PlainInfluence(influence, 3)), variance_of(sample), rtol=1e-15)


def test_unit_totals_are_sums_of_weight_times_influence():
    sample = made_sample(61, 2, domain=True)
    rows = rows_of(sample)
    design = survey_design(rows.units)
    for stage in (0, 1, 2):
        found = unit_totals(design, rows, SERIAL, influence, stage)
        units = np.unique(sample.ids[:, : stage + 1], axis=0)
        expected = [
            sum(sample.z[i] for i in range(len(sample)) if (sample.ids[i, : stage + 1] == unit).all())
            for unit in units
        ]
        close(found, np.array(expected), rtol=1e-13)


def test_standard_errors_are_square_roots_of_the_diagonal():
    assert standard_errors(np.array([[4.0, 1.0], [1.0, 9.0]])).tolist() == [2, 3]


def test_weighted_regression_has_the_cluster_covariance_of_statsmodels():
    # Identity: one stratum, no population; statsmodels' covariance without its small-sample factor, G / (G - 1).
    rng = np.random.default_rng(71)
    n, clusters = 600, 40
    cluster, w = rng.integers(0, clusters, n), np.exp(rng.normal(size=n))
    x = np.column_stack([np.ones(n), rng.normal(size=(n, 2)), rng.normal(size=clusters)[cluster]])
    y = x @ [1, 2, -1, 0.5] + rng.normal(size=clusters)[cluster] + rng.normal(size=n)
    fit = sm.WLS(y, x, weights=w).fit(
        cov_type="cluster", cov_kwds={"groups": cluster, "use_correction": False}
    )
    # The influence of a row on the coefficients, with estimate - truth = sum(w u).
    residual = y - x @ np.linalg.solve(x.T @ (x * w[:, None]), x.T @ (w * y))
    u = np.linalg.solve(x.T @ (x * w[:, None]), (x * residual[:, None]).T).T
    ids = np.column_stack([np.zeros(n, dtype=int), cluster])
    sample = Sample(ids, np.zeros((n, 0)), w, u, np.ones(n, dtype=bool))
    groups = len(np.unique(cluster))
    close(variance_of(sample), fit.cov_params() * groups / (groups - 1), rtol=1e-9)


samples = st.builds(
    made_sample,
    seed=st.integers(0, 10**6),
    depth=st.integers(0, 3),
    given=st.integers(0, 4),
    strata=st.integers(1, 5),
    below=st.sampled_from([(1, 3), (2, 3)]),
    domain=st.booleans(),
    unnested=st.booleans(),
).map(lambda s: s.changed(populations=s.populations[:, : s.ids.shape[1]]))
moderate = settings(max_examples=40, deadline=None)


@moderate
@given(samples, st.integers(1, 60), st.integers(1, 60), st.randoms(use_true_random=False))
def test_row_order_and_block_size_do_not_matter(sample, one, other, random):
    assume(sample.inside.any())
    order = list(range(len(sample)))
    random.shuffle(order)
    close(variance_of(sample.take(order), block_rows=other), variance_of(sample, block_rows=one))


@settings(max_examples=20, deadline=None)
@given(samples, st.integers(2, 4))
def test_workers_do_not_change_a_bit(sample, workers):
    assume(sample.inside.any())
    with ThreadPoolExecutor(workers) as executor:
        threaded = variance_of(sample, engine=Engine(executor, window=2 * workers))
    assert np.array_equal(threaded, variance_of(sample))


def test_processes_do_not_change_a_bit():
    sample = made_sample(81, 1, 2, domain=True)
    with ProcessPoolExecutor(1, mp_context=get_context("spawn")) as executor:
        assert np.array_equal(variance_of(sample, engine=Engine(executor)), variance_of(sample))


@moderate
@given(samples)
def test_covariances_are_symmetric_and_positive_semi_definite(sample):
    assume(sample.inside.any())
    v = variance_of(sample)
    assert np.array_equal(v, v.T)
    eigenvalues = np.linalg.eigvalsh(v)
    assert eigenvalues.min() >= -1e-12 * max(eigenvalues.max(), 1e-300)


@moderate
@given(samples, st.sampled_from([1e-6, 3.0, 1e7]))
def test_scale_squares_and_linear_maps_carry_through(sample, scale):
    assume(sample.inside.any())
    v = variance_of(sample)
    close(variance_of(sample.changed(weight=scale * sample.weight)), scale**2 * v)
    a = np.array([[1.0, 2.0], [0.5, -1.0], [0.0, 1.0]])
    close(variance_of(sample.changed(u=sample.u @ a)), a.T @ v @ a)


@moderate
@given(samples)
def test_rows_of_weight_zero_change_nothing_where_no_row_is_drawn(sample):
    assume(sample.inside.any() and sample.ids.shape[1] > 1)
    sample = sample.changed(populations=sample.populations[:, : sample.ids.shape[1] - 1])
    again = sample.take(np.r_[np.arange(len(sample)), 0, 0, len(sample) // 2])
    again.weight[len(sample) :] = 0
    close(variance_of(again), variance_of(sample))


@moderate
@given(samples, samples)
def test_strata_apart_add_up(one, other):
    depth = min(one.ids.shape[1], other.ids.shape[1])
    one, other = (s.changed(ids=s.ids[:, :depth], populations=s.populations[:, :0]) for s in (one, other))
    assume(depth > 1 and one.inside.any() and other.inside.any())
    shifted = other.changed(ids=other.ids + np.array([50] + [0] * (depth - 1)))
    both = Sample(
        **{
            name: np.concatenate([getattr(one, name), getattr(shifted, name)])
            for name in ("ids", "populations", "weight", "u", "inside")
        }
    )
    close(variance_of(both), variance_of(one) + variance_of(other))


@moderate
@given(st.integers(0, 10**6), st.integers(0, 2), st.integers(2, 6))
def test_doubling_every_psu_of_n_gives_4_times_n_minus_1_over_2n_minus_1(seed, depth, n):
    # Exact: the squared deviations double, and n / (n - 1) becomes 2 n / (2 n - 1).
    sample = made_sample(seed, depth, strata=3, psus=(n, n))
    double = sample.take(np.tile(np.arange(len(sample)), 2))
    if depth:
        double.ids[len(sample) :, 1] += 1000
    close(variance_of(double), variance_of(sample) * 4 * (n - 1) / (2 * n - 1))


@pytest.mark.parametrize("given_stages", [0, 1])
def test_a_large_common_value_does_not_swamp_rows_that_are_psus(given_stages):
    # Equal weights and a constant added to u: totals move, deviations do not.
    sample = made_sample(91, 0, given_stages, psus=(40, 60))
    sample = sample.changed(weight=np.ones(len(sample)))
    close(variance_of(sample.changed(u=sample.u + 1e8)), variance_of(sample), rtol=1e-6)


def test_a_domain_is_not_a_smaller_sample():
    # The trap: variances from the domain's rows alone forget that its size is random.
    sample = made_sample(95, 1, psus=(9, 9), below=(3, 5), domain=True)
    alone = sample.take(sample.inside)
    assert len(np.unique(alone.ids, axis=0)) < len(np.unique(sample.ids, axis=0))
    assert not np.allclose(variance_of(alone), variance_of(sample), rtol=0.02)


def test_rows_that_are_psus_are_never_held_all_at_once():
    n, k = 120_000, 20
    rng = np.random.default_rng(3)
    ids = np.sort(rng.integers(0, 10, n))[:, None]
    sample = Sample(ids, np.zeros((n, 0)), np.ones(n), np.zeros((n, 1)), np.ones(n, dtype=bool))
    rows = rows_of(sample, block_rows=4096)
    design = survey_design(rows.units)
    tracemalloc.start()
    covariance(design, rows, SERIAL, Waves(k))
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < n * k * 8 / 3


@dataclass(frozen=True)
class Waves:
    """An influence worked out from positions, (n, k), so that no rows lie in memory."""

    k: int

    def __call__(self, block):
        return np.sin(block.position[:, None] * np.arange(1.0, self.k + 1))


def test_a_part_holds_only_the_units_of_its_blocks():
    sample = made_sample(99, 2, strata=30, psus=(5, 8), below=(2, 3))
    rows = rows_of(sample, block_rows=8)
    kernel = _TotalsKernel(PlainInfluence(influence, 3), rows.units.ancestor(2))
    one, other = kernel(rows.blocks[0]), kernel(rows.blocks[1])
    assert one.unit.tolist() == np.unique(rows.blocks[0].unit).tolist()
    merged = one.merged(other)
    touched = np.unique(np.concatenate([rows.blocks[0].unit, rows.blocks[1].unit]))
    assert merged.unit.tolist() == touched.tolist()
    assert len(touched) < len(rows.units.stages[2]) / 10
