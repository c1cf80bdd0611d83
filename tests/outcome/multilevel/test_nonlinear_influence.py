"""Influence, weight derivatives, components and predicted effects of nonlinear fits, against refits and dense grids."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from nonlinear_samples import ENGINE, log_density, model, normal_grid, sample, split

from steelyard.outcome.multilevel.cluster_effects import cluster_effects
from steelyard.outcome.multilevel.components import components
from steelyard.outcome.multilevel.nonlinear_fit import fit_nonlinear
from steelyard.outcome.multilevel.nonlinear_influence import WeightSlopes, influence, scores

KINDS = {"two levels": {}, "random slope": {"slope": True}, "three levels": {"levels": 3}}
SHAPES = [(family, kind) for family in ("binomial", "poisson") for kind in KINDS]
# Relative change of a weight in the refits.
STEP = 1e-2


def fitted(family, kind, points=5, **options):
    sd2 = 0.8 if family == "binomial" else 1.6
    run = sample(clusters=40, rows=6, family=family, seed=5, sd2=sd2, **KINDS[kind], **options)
    return run, fit_nonlinear(model(family, points=points, **KINDS[kind]), [run], ENGINE)


def refit_slope(fit, run, name, i):
    """The derivative of theta in the log of one weight, by two refits and Richardson's extrapolation of four."""

    def moved(log):
        weight = getattr(run, name).copy()
        weight[i] *= np.exp(log)
        again = fit_nonlinear(fit.model, [replace(run, **{name: weight})], ENGINE, start=fit.theta[:, 0])
        return again.theta[:, 0]

    one = (moved(STEP) - moved(-STEP)) / (2 * STEP)
    two = (moved(2 * STEP) - moved(-2 * STEP)) / (4 * STEP)
    return (4 * one - two) / 3


def close(found, expected):
    assert found == pytest.approx(expected, rel=1e-4, abs=2e-5 * np.abs(expected).max())


@pytest.mark.parametrize("points", [1, 5])
@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_influence_is_the_derivative_in_a_top_clusters_log_weight(family, kind, points):
    run, fit = fitted(family, kind, points)
    found = influence(fit, [run], ENGINE)
    top = "top_weight" if kind == "three levels" else "cluster_weight"
    assert found.shape == (len(getattr(run, top)), fit.model.size)
    for k in (0, 3):
        close(found[k], refit_slope(fit, run, top, k))


@pytest.mark.parametrize("points", [1, 5])
@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_weight_slopes_carry_a_change_of_weights_to_theta(family, kind, points):
    run, fit = fitted(family, kind, points)
    of_rows, of_clusters = WeightSlopes(fit)(run)
    assert of_rows.shape == (len(run.y), fit.model.size)
    close(fit.bread @ of_rows[7], refit_slope(fit, run, "row_weight", 7))
    close(fit.bread @ of_clusters[4], refit_slope(fit, run, "cluster_weight", 4))


@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_scores_add_to_zero_and_do_not_depend_on_the_runs(family, kind):
    run, fit = fitted(family, kind)
    whole = scores(fit, [run], ENGINE)
    assert np.abs(whole.sum(axis=0)) == pytest.approx(0, abs=1e-6)
    cut = scores(fit, split(run, 4), ENGINE)
    assert cut == pytest.approx(whole, rel=1e-9, abs=1e-10)


def test_influence_of_a_redundant_or_boundary_parameter_is_zero():
    run = sample(clusters=40, rows=6, seed=5)
    twice = replace(run, x=np.column_stack([run.x, run.x[:, 1]]))
    named = replace(model(), fixed=("one", "a", "b", "again"))
    fit = fit_nonlinear(named, [twice], ENGINE)
    assert np.all(influence(fit, [twice], ENGINE)[:, 3] == 0)


@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_components_are_the_formulas_and_their_derivatives(family, kind):
    _, fit = fitted(family, kind)
    found = components(fit)
    entries = fit.theta[3:, 0]
    value = dict(zip(found.names, found.values[:, 0], strict=True))
    latent = np.pi**2 / 3
    if kind == "three levels":
        b, a = entries
        expected = {
            "variance(cluster)": b**2,
            "variance(top)": a**2,
            "log_sd(cluster)": np.log(b),
            "log_sd(top)": np.log(a),
        }
        if family == "binomial":
            total = a**2 + b**2 + latent
            expected |= {
                "intraclass correlation(top)": a**2 / total,
                "intraclass correlation(cluster)": (a**2 + b**2) / total,
            }
    elif kind == "random slope":
        factor = np.array([[entries[0], 0], entries[1:]])
        covariance = factor @ factor.T
        expected = {
            "variance(one)": covariance[0, 0],
            "variance(a)": covariance[1, 1],
            "log_sd(one)": 0.5 * np.log(covariance[0, 0]),
            "log_sd(a)": 0.5 * np.log(covariance[1, 1]),
            "correlation(one, a)": covariance[0, 1] / np.sqrt(covariance[0, 0] * covariance[1, 1]),
        }
        if family == "binomial":
            expected["intraclass correlation"] = covariance[0, 0] / (covariance[0, 0] + latent)
    else:
        variance = entries[0] ** 2
        expected = {"variance(one)": variance, "log_sd(one)": 0.5 * np.log(variance)}
        if family == "binomial":
            expected["intraclass correlation"] = variance / (variance + latent)
    assert value == pytest.approx(expected, rel=1e-12)
    step = 1e-6
    for d in range(fit.model.size):
        up, down = (fit.theta + sign * step * np.eye(fit.model.size)[:, [d]] for sign in (1, -1))
        difference = components(replace(fit, theta=up)).values - components(replace(fit, theta=down)).values
        assert found.jacobian[:, d] == pytest.approx(difference[:, 0] / (2 * step), rel=1e-6, abs=1e-8)
    through = np.arange(2.0 * fit.model.size).reshape(2, -1)
    assert found.influence(through) == pytest.approx(through @ found.jacobian.T)


@pytest.mark.parametrize("family", ["binomial", "poisson"])
def test_predicted_effects_are_the_moments_of_the_posterior_on_a_dense_grid(family):
    run, fit = fitted(family, "two levels", points=25)
    found = cluster_effects(fit, split(run, 3), ENGINE)
    at, logs = normal_grid(401)
    sd = fit.theta[3, 0]
    for j in (0, 17):
        rows = run.cluster == j
        eta = (run.x[rows] @ fit.theta[:3, 0])[:, None] + sd * at
        density = np.exp(run.row_weight[rows, 0] @ log_density(family, run.y[rows, None], eta) + logs)
        mean = (density @ at) / density.sum() * sd
        spread = np.sqrt(density @ (sd * at - mean) ** 2 / density.sum())
        assert found.mean[j, 0] == pytest.approx(mean, rel=1e-8)
        assert found.sd[j, 0] == pytest.approx(spread, rel=1e-8)


def test_predicted_effects_of_a_random_slope_are_the_moments_on_a_dense_grid():
    run, fit = fitted("binomial", "random slope", points=25)
    found = cluster_effects(fit, [run], ENGINE)
    at, logs = normal_grid(201)
    entries = fit.theta[3:, 0]
    factor = np.array([[entries[0], 0], entries[1:]])
    first, second = (part.ravel() for part in np.meshgrid(at, at, indexing="ij"))
    effects = factor @ np.stack([first, second])
    weight = (logs[:, None] + logs).ravel()
    rows = run.cluster == 5
    eta = (run.x[rows] @ fit.theta[:3, 0])[:, None] + run.z[rows] @ effects
    density = np.exp(run.row_weight[rows, 0] @ log_density("binomial", run.y[rows, None], eta) + weight)
    mean = effects @ density / density.sum()
    spread = np.sqrt(((effects - mean[:, None]) ** 2) @ density / density.sum())
    assert found.mean[5] == pytest.approx(mean, rel=1e-7)
    assert found.sd[5] == pytest.approx(spread, rel=1e-7)


def test_predicted_effects_of_three_levels_are_the_moments_on_a_dense_grid():
    run, fit = fitted("binomial", "three levels", points=25)
    found = cluster_effects(fit, [run], ENGINE)
    at, logs = normal_grid(201)
    b, a = fit.theta[3:, 0]
    fixed = run.x @ fit.theta[:3, 0]
    inside, means, squares = np.zeros(len(at)), [], []
    clusters = np.flatnonzero(run.top == 2)
    for j in clusters:
        rows = run.cluster == j
        eta = fixed[rows, None, None] + a * at[:, None] + b * at
        inner = np.einsum(
            "i,ist->st", run.row_weight[rows, 0], log_density("binomial", run.y[rows, None, None], eta)
        )
        density = np.exp(inner + logs)
        inside += run.cluster_weight[j, 0] * np.log(density.sum(axis=1))
        means.append(b * (density @ at) / density.sum(axis=1))
        squares.append(b**2 * (density @ at**2) / density.sum(axis=1))
    outer = np.exp(inside + logs - inside.max())
    outer /= outer.sum()
    assert found.top_mean[2] == pytest.approx(a * outer @ at, rel=1e-6)
    assert found.top_sd[2] == pytest.approx(a * np.sqrt(outer @ at**2 - (outer @ at) ** 2), rel=1e-6)
    for j, mean, square in zip(clusters, means, squares, strict=True):
        assert found.mean[j, 0] == pytest.approx(outer @ mean, rel=1e-6)
        assert found.sd[j, 0] == pytest.approx(np.sqrt(outer @ square - (outer @ mean) ** 2), rel=1e-6)


@pytest.mark.parametrize("kind", KINDS)
def test_one_point_gives_spreads_by_the_curvature(kind):
    """Near those of many points, and never zero."""
    run, laplace = fitted("poisson", kind, points=1)
    many = replace(laplace, model=replace(laplace.model, points=15))
    one, other = cluster_effects(laplace, [run], ENGINE), cluster_effects(many, [run], ENGINE)
    assert one.sd == pytest.approx(other.sd, rel=0.2)
    assert one.top_sd == pytest.approx(other.top_sd, rel=0.2)
