"""The influence of clusters and rows on a linear mixed model, against numerical derivatives of the estimates."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from multilevel_samples import MODELS, sample, without_slopes

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.linear import fit_linear
from steelyard.outcome.multilevel.linear_derived import cluster_effects, intraclass_correlation
from steelyard.outcome.multilevel.linear_influence import Drifts, Scores

ENGINE = Engine()
STEP = 1e-4
SHAPES = [(2, 0), (2, 1), (2, 2), (3, 0), (3, 1)]


def drawn(levels, slopes):
    return sample(seed=5, levels=levels, slopes=slopes, tops=8, clusters=30)


def derivative(run, model, attribute, members):
    """Central differences of the estimates by the logarithm of one weight each, (members, P)."""
    weights = getattr(run, attribute)
    rows = []
    for member in members:
        ends = []
        for sign in (1, -1):
            moved = weights.copy()
            moved[member] *= np.exp(sign * STEP)
            ends.append(fit_linear(model, ENGINE, [replace(run, **{attribute: moved})]).values[:, 0])
        rows.append((ends[0] - ends[1]) / (2 * STEP))
    return np.array(rows)


def close(found, numerical):
    scale = np.abs(numerical).max(axis=0)
    np.testing.assert_allclose(found / scale, numerical / scale, atol=2e-6)


@pytest.mark.parametrize(("levels", "slopes"), SHAPES)
def test_influence_of_top_most_clusters(levels, slopes):
    run, model = drawn(levels, slopes), MODELS[levels, slopes]
    fit = fit_linear(model, ENGINE, [run])
    scores = Scores(fit)(run)
    attribute = "top_weight" if levels == 3 else "cluster_weight"
    members = range(len(scores))[:6]
    close((scores @ fit.combine)[:6], derivative(run, model, attribute, members))
    assert np.abs(scores.sum(axis=0)).max() < 1e-8 * np.abs(scores).sum()


@pytest.mark.parametrize(("levels", "slopes"), SHAPES)
@pytest.mark.parametrize(("attribute", "part"), [("row_weight", "row"), ("cluster_weight", "cluster")])
def test_drift_with_weights_within(levels, slopes, attribute, part):
    run, model = drawn(levels, slopes), MODELS[levels, slopes]
    fit = fit_linear(model, ENGINE, [run])
    members = range(6)
    found = (getattr(Drifts(fit)(run), part) @ fit.combine)[:6]
    close(found, derivative(run, model, attribute, members))


def test_influence_where_the_variance_between_clusters_is_zero():
    run = without_slopes(sample(seed=2, clusters=30, effect=0.0, sizes=(3, 6)), within=True)
    model = MODELS[2, 0]
    fit = fit_linear(model, ENGINE, [run])
    assert fit.values[-2, 0] == 0 and fit.boundary
    found = (Scores(fit)(run) @ fit.combine)[:6]
    assert np.all(found[:, -2] == 0)
    free = [0, 1, 2, 4]
    close(found[:, free], derivative(run, model, "cluster_weight", range(6))[:, free])


def test_influence_where_the_covariance_has_lost_rank():
    run = sample(seed=22, slopes=1, clusters=30, sizes=(3, 6), shared_effect=True)
    model = MODELS[2, 1]
    fit = fit_linear(model, ENGINE, [run])
    assert fit.settled.coordinates.rank == 1
    close((Scores(fit)(run) @ fit.combine)[:6], derivative(run, model, "cluster_weight", range(6)))


@pytest.mark.parametrize(("levels", "slopes"), SHAPES)
def test_slopes_of_the_intraclass_correlation(levels, slopes):
    run, model = drawn(levels, slopes), MODELS[levels, slopes]
    fit = fit_linear(model, ENGINE, [run])
    at = [1.0, 50.0, 2.0][: 1 + slopes]
    found = intraclass_correlation(fit, at)
    for p in range(len(fit.names)):
        # A complex step has no cancellation: variances near 1,500 make a correlation here.
        moved = fit.values.astype(complex)
        moved[p] += 1e-30j
        numerical = intraclass_correlation(replace(fit, values=moved), at).values[:, 0].imag / 1e-30
        np.testing.assert_allclose(found.slopes[p], numerical, rtol=1e-9, atol=1e-12)


def test_intraclass_correlation_by_hand():
    run, model = drawn(3, 0), MODELS[3, 0]
    fit = fit_linear(model, ENGINE, [run])
    own, top, residual = fit.values[-3:, 0]
    total = own + top + residual
    np.testing.assert_allclose(
        intraclass_correlation(fit).values[:, 0], [top / total, (own + top) / total], rtol=1e-14
    )


@pytest.mark.parametrize("slopes", [0, 1])
def test_cluster_effects_of_two_levels_by_dense_normal_conditioning(slopes):
    run, model = drawn(2, slopes), MODELS[2, slopes]
    fit = fit_linear(model, ENGINE, [run])
    q, values = 1 + slopes, fit.values[:, 0]
    cov = np.zeros((q, q))
    cov[np.tril_indices(q)] = values[3:-1]
    cov = cov + np.tril(cov, -1).T
    found = cluster_effects(fit, ENGINE, [run])
    for j in range(30):
        at = run.cluster == j
        z, r = run.z[at], run.y[at] - run.x[at] @ values[:3]
        total = z @ cov @ z.T + np.diag(values[-1] / run.row_weight[at, 0])
        gain = cov @ z.T @ np.linalg.inv(total)
        np.testing.assert_allclose(found.mean[j], gain @ r, rtol=1e-6, atol=1e-8)
        np.testing.assert_allclose(found.covariance[j], cov - gain @ z @ cov, rtol=1e-6, atol=1e-8)


def test_cluster_effects_of_three_levels_by_dense_normal_conditioning():
    run = drawn(3, 0)
    run = replace(run, cluster_weight=np.ones_like(run.cluster_weight))
    fit = fit_linear(MODELS[3, 0], ENGINE, [run])
    own, upper, residual = fit.values[-3:, 0]
    found = cluster_effects(fit, ENGINE, [run])
    of_cluster = (run.cluster[:, None] == np.arange(30)).astype(float)
    of_top = (run.top[run.cluster][:, None] == np.arange(8)).astype(float)
    design = np.column_stack([of_cluster, of_top])
    prior = np.diag(np.r_[np.full(30, own), np.full(8, upper)])
    total = design @ prior @ design.T + np.diag(residual / run.row_weight[:, 0])
    gain = prior @ design.T @ np.linalg.inv(total)
    mean = gain @ (run.y - run.x @ fit.values[:3, 0])
    variance = np.diag(prior - gain @ design @ prior)
    np.testing.assert_allclose(found.mean[:, 0], mean[:30], rtol=1e-8, atol=1e-10)
    np.testing.assert_allclose(found.covariance[:, 0, 0], variance[:30], rtol=1e-8)
    np.testing.assert_allclose(found.top_mean, mean[30:], rtol=1e-8, atol=1e-10)
    np.testing.assert_allclose(found.top_variance, variance[30:], rtol=1e-8)
