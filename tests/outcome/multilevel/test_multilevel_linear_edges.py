"""Linear mixed models at the edge: variances of zero, searches that fail, rows that cannot bear the model."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm
from multilevel_samples import (
    MODELS,
    dense_log_likelihood,
    nested,
    sample,
    without_slopes,
)

from steelyard.data.passes import Engine
from steelyard.errors import EstimationError
from steelyard.outcome.multilevel import linear
from steelyard.outcome.multilevel.linear import fit_linear
from steelyard.outcome.multilevel.linear_likelihood import Coordinates, level
from steelyard.outcome.multilevel.linear_search import search
from steelyard.outcome.multilevel.linear_sums import cluster_sums

ENGINE = Engine()


def test_zero_variance_between_clusters_is_found_and_said():
    run = without_slopes(sample(seed=2, clusters=30, effect=0.0, sizes=(3, 6)), within=True)
    fit = fit_linear(MODELS[2, 0], ENGINE, [run])
    w = run.row_weight[:, 0] * run.cluster_weight[run.cluster, 0]
    plain = sm.WLS(run.y, run.x, weights=w).fit()
    assert fit.values[3, 0] == 0
    np.testing.assert_allclose(fit.values[:3, 0], plain.params, rtol=1e-9)
    assert fit.values[4, 0] == pytest.approx(w @ plain.resid**2 / w.sum(), rel=1e-9)
    assert "the variance between clusters (school) is estimated as zero" in fit.boundary[0]


def test_zero_variance_between_top_clusters_is_found_and_said():
    run = sample(seed=4, levels=2, slopes=0, clusters=40, sizes=(3, 6))
    # Weights of clusters well above one would count as so many clusters alike, and make top clusters differ.
    run = replace(run, cluster_weight=run.cluster_weight / run.cluster_weight.mean())
    three = replace(run, top=np.repeat(np.arange(10), 4), top_weight=np.ones((10, 1)))
    fit, two = fit_linear(MODELS[3, 0], ENGINE, [three]), fit_linear(MODELS[2, 0], ENGINE, [run])
    assert fit.values[-2, 0] == 0
    assert "the variance between top clusters (area) is estimated as zero" in fit.boundary[0]
    np.testing.assert_allclose(np.delete(fit.values, 4, axis=0), two.values, rtol=1e-8)


def test_covariance_that_has_lost_rank_is_said_and_higher_nowhere():
    run = sample(seed=22, slopes=1, clusters=30, sizes=(3, 6), shared_effect=True)
    fit = fit_linear(MODELS[2, 1], ENGINE, [run])
    g00, g01, g11 = fit.values[3:6, 0]
    assert g01**2 == pytest.approx(g00 * g11, rel=1e-9)
    assert "has rank 1" in fit.boundary[0]
    for more in (np.diag([1.0, 0]), np.diag([0, 1.0]), np.ones((2, 2)), np.array([[2500.0, -50], [-50, 1]])):
        cov = np.array([[g00, g01], [g01, g11]]) + 1e-3 * more
        assert dense_log_likelihood(run, fit.values[:3, 0], cov, fit.values[6, 0]) < fit.log_likelihood[0]


def test_replicates_reach_zero_variance_as_well():
    run = without_slopes(sample(seed=11, clusters=30, effect=0.0, sizes=(3, 6), columns=4), within=True)
    # In the last column a few clusters that stand far out weigh most.
    means = np.bincount(run.cluster, run.y) / np.bincount(run.cluster)
    far = np.argsort(np.abs(means - means.mean()))[-10:]
    run.cluster_weight[far, 3] *= 50
    fit = fit_linear(MODELS[2, 0], ENGINE, [run])
    for k in range(4):
        own = replace(run, row_weight=run.row_weight[:, [k]], cluster_weight=run.cluster_weight[:, [k]])
        alone = fit_linear(MODELS[2, 0], ENGINE, [own])
        np.testing.assert_allclose(fit.values[:, k], alone.values[:, 0], rtol=1e-8, atol=1e-10)
    assert fit.values[3, 0] == 0 and fit.values[3, 3] > 0


@pytest.mark.parametrize("levels", [2, 3])
def test_search_leaves_an_edge_where_the_slope_leads_away(levels):
    run, model = sample(levels=levels, slopes=1, clusters=60, tops=12), MODELS[levels, 1]
    fit = fit_linear(model, ENGINE, [run])
    assert not fit.boundary
    sums = cluster_sums("test", fit.standard, ENGINE, [run], np.arange(1))
    coordinates = Coordinates(np.eye(2), 2, levels == 3)
    # No variance at all has no slope in these coordinates; nor, by itself, has a part that is zero.
    nothing = np.zeros((1, coordinates.size))
    one_row, no_top = nothing.copy(), nothing.copy()
    one_row[0, 0] = 1
    no_top[0, [0, 2]] = 1
    for start in (nothing, one_row, no_top):
        found = search(sums, coordinates, start, 200)
        assert found.failed == {}
        value = level(sums, coordinates, found.points).value - sums.size * np.log(fit.standard.spread)
        assert value[0] == pytest.approx(fit.log_likelihood[0], rel=1e-12)


def test_column_that_fails_near_the_full_sample_is_searched_from_afar(monkeypatch):
    run, model = sample(slopes=1, clusters=40, columns=4), MODELS[2, 1]
    plain = fit_linear(model, ENGINE, [run])

    def failing(sums, coordinates, points, most_steps):
        found = search(sums, coordinates, points, most_steps)
        if len(points) == 3:
            found.points[1] = np.nan
            found.failed[1] = "made to fail"
        return found

    monkeypatch.setattr(linear, "search", failing)
    again = fit_linear(model, ENGINE, [run])
    assert again.failed == {}
    np.testing.assert_allclose(again.values, plain.values, rtol=1e-8)


def test_some_clusters_of_one_are_fine_and_all_of_one_are_refused():
    run = without_slopes(sample(seed=6, sizes=(1, 2), clusters=40))
    assert np.bincount(run.cluster).min() == 1
    fit = fit_linear(MODELS[2, 0], ENGINE, [run])
    brute = dense_log_likelihood(run, fit.values[:3, 0], fit.values[3:4], fit.values[4, 0])
    assert fit.log_likelihood[0] == pytest.approx(brute, abs=1e-7)
    alone = nested(run.y[:20], run.x[:20], run.z[:20], np.arange(20))
    with pytest.raises(EstimationError, match=r"each of the 20 clusters \(school\) has only one row"):
        fit_linear(MODELS[2, 0], ENGINE, [alone])


def test_one_cluster_and_lone_clusters_in_top_clusters_are_refused():
    run = without_slopes(sample(clusters=8, tops=8, levels=3))
    with pytest.raises(EstimationError, match="0 have more than one cluster"):
        fit_linear(MODELS[3, 0], ENGINE, [run])
    one = nested(run.y, run.x, run.z, np.zeros(len(run.y), int))
    with pytest.raises(EstimationError, match="only one cluster"):
        fit_linear(MODELS[2, 0], ENGINE, [one])


def test_three_levels_need_a_random_intercept():
    run, model = sample(levels=3, slopes=1), MODELS[3, 1]
    bare = replace(run, z=run.z[:, 1:])
    with pytest.raises(EstimationError, match='first random column, "number", must be a constant'):
        fit_linear(replace(model, random=("number",)), ENGINE, [bare])


def test_constant_random_slope_is_refused():
    run = sample(slopes=1)
    z = np.column_stack([run.z[:, 0], np.full(len(run.y), 3.0)])
    with pytest.raises(EstimationError, match='the random column "number" is constant'):
        fit_linear(MODELS[2, 1], ENGINE, [replace(run, z=z)])


def test_response_that_the_fixed_part_reproduces_is_refused():
    run = sample(slopes=0)
    with pytest.raises(EstimationError, match="reproduces the response"):
        fit_linear(MODELS[2, 0], ENGINE, [replace(run, y=run.x @ np.array([1.0, 2, 3]))])


def test_response_constant_within_clusters_is_refused():
    run = without_slopes(sample(seed=1, clusters=30, sizes=(2, 5)))
    means = np.random.default_rng(0).normal(size=30)
    constant = replace(run, y=means[run.cluster], x=run.x[:, :1])
    with pytest.raises(EstimationError, match="variance within clusters goes to zero"):
        fit_linear(replace(MODELS[2, 0], fixed=("Intercept",)), ENGINE, [constant])


def test_no_convergence_is_raised_with_what_to_try():
    with pytest.raises(EstimationError, match=r"did not settle in 2 steps\. Leave out a random slope"):
        fit_linear(MODELS[2, 1], ENGINE, [sample(slopes=1)], most_steps=2)


def test_columns_without_a_solution_are_named_and_nan():
    run = without_slopes(sample(columns=4, clusters=30))
    run.cluster_weight[:, 2] = 0
    run.cluster_weight[5:, 3] = 0
    few = replace(run, x=np.column_stack([run.x, (run.cluster > 10).astype(float)]))
    fit = fit_linear(replace(MODELS[2, 0], fixed=(*MODELS[2, 0].fixed, "late")), ENGINE, [few])
    assert fit.failed == {2: "no row carries weight", 3: "fixed columns are redundant under these weights"}
    assert np.isnan(fit.values[:, 2:]).all() and np.isnan(fit.log_likelihood[2:]).all()
    assert np.isfinite(fit.values[:, :2]).all()
