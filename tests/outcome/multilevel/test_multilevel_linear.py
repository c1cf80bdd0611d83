"""Linear mixed models under weights: statsmodels, expanded data, dense normal densities, identities."""

from __future__ import annotations

import warnings
from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm
from multilevel_samples import (
    MODELS,
    dense_log_likelihood,
    nested,
    permuted,
    repeated_clusters,
    runs_of,
    sample,
)

from steelyard.data.passes import Engine, threads
from steelyard.outcome.multilevel import linear_sums
from steelyard.outcome.multilevel.linear import fit_linear
from steelyard.outcome.multilevel.linear_curvature import derivatives
from steelyard.outcome.multilevel.linear_likelihood import Coordinates, level
from steelyard.outcome.multilevel.linear_standard import standard
from steelyard.outcome.multilevel.linear_sums import cluster_sums
from steelyard.outcome.multilevel.nested import Nested

ENGINE = Engine()
SHAPES = [(2, 0), (2, 1), (2, 2), (3, 0), (3, 2)]


def mixed_lm(y, x, cluster, z):
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        return sm.MixedLM(y, x, groups=cluster, exog_re=z).fit(reml=False, gtol=1e-9)


def agrees_with_mixed_lm(fit, oracle):
    q = oracle.cov_re.shape[0]
    covariance = np.asarray(oracle.cov_re)[np.tril_indices(q)]
    estimates = np.r_[oracle.fe_params, covariance, oracle.scale]
    assert fit.log_likelihood[0] == pytest.approx(oracle.llf, abs=2e-7)
    np.testing.assert_allclose(fit.values[:, 0], estimates, rtol=2e-4, atol=2e-4)


def centred(slopes, seed=3, **more):
    run = sample(seed=seed, slopes=slopes, clusters=40, sizes=(2, 9), **more)
    return replace(run, z=run.z - np.r_[0, run.z[:, 1:].mean(axis=0)])


@pytest.mark.parametrize("slopes", [0, 1, 2])
def test_weights_of_one_equal_mixed_lm(slopes):
    run = centred(slopes)
    fit = fit_linear(MODELS[2, slopes], ENGINE, [nested(run.y, run.x, run.z, run.cluster)])
    agrees_with_mixed_lm(fit, mixed_lm(run.y, run.x, run.cluster, run.z))


@pytest.mark.parametrize("slopes", [0, 1])
def test_integer_weights_of_rows_equal_rows_repeated(slopes):
    run = centred(slopes)
    times = np.random.default_rng(1).integers(1, 4, len(run.y))
    fit = fit_linear(MODELS[2, slopes], ENGINE, [nested(run.y, run.x, run.z, run.cluster, row=times)])
    again = np.repeat(np.arange(len(run.y)), times)
    agrees_with_mixed_lm(fit, mixed_lm(run.y[again], run.x[again], run.cluster[again], run.z[again]))


@pytest.mark.parametrize("slopes", [0, 1])
def test_integer_weights_of_clusters_equal_clusters_repeated(slopes):
    run = centred(slopes)
    times = np.random.default_rng(2).integers(1, 4, 40)
    fit = fit_linear(MODELS[2, slopes], ENGINE, [nested(run.y, run.x, run.z, run.cluster, own=times)])
    more = repeated_clusters(run, times)
    agrees_with_mixed_lm(fit, mixed_lm(more.y, more.x, more.cluster, more.z))


def test_three_levels_equal_a_variance_component_of_mixed_lm():
    run = sample(seed=8, levels=3, slopes=0, tops=12, clusters=50, sizes=(2, 6))
    fit = fit_linear(MODELS[3, 0], ENGINE, [nested(run.y, run.x, run.z, run.cluster, run.top)])
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        oracle = sm.MixedLM(
            run.y,
            run.x,
            groups=run.top[run.cluster],
            exog_re=np.ones((len(run.y), 1)),
            exog_vc=component_of_clusters(run),
        ).fit(reml=False, gtol=1e-9)
    assert fit.log_likelihood[0] == pytest.approx(oracle.llf, abs=2e-7)
    estimates = np.r_[oracle.fe_params, oracle.vcomp, oracle.cov_re[0, 0], oracle.scale]
    np.testing.assert_allclose(fit.values[:, 0], estimates, rtol=2e-4, atol=2e-4)


def component_of_clusters(run):
    groups = run.top[run.cluster]
    indicators, columns = [], []
    for k in range(groups[-1] + 1):
        inside = np.flatnonzero(run.top == k)
        indicators.append((run.cluster[groups == k][:, None] == inside).astype(float))
        columns.append([f"c{j}" for j in inside])
    return sm.regression.mixed_linear_model.VCSpec(["clusters"], [columns], [indicators])


@pytest.mark.parametrize(("levels", "slopes"), SHAPES)
def test_likelihood_by_dense_normal_densities(levels, slopes):
    run = sample(levels=levels, slopes=slopes, columns=2)
    fit = fit_linear(MODELS[levels, slopes], ENGINE, [run])
    q = 1 + slopes
    for column, values in enumerate(fit.values.T):
        cov = np.zeros((q, q))
        cov[np.tril_indices(q)] = values[3 : 3 + q * (q + 1) // 2]
        cov = cov + np.tril(cov, -1).T
        top = values[-2] if levels == 3 else 0.0
        brute = dense_log_likelihood(run, values[:3], cov, values[-1], top, column)
        assert fit.log_likelihood[column] == pytest.approx(brute, abs=1e-7)


@pytest.mark.parametrize(("levels", "slopes"), SHAPES)
def test_dense_likelihood_is_nowhere_higher_near_the_estimates(levels, slopes):
    run = sample(levels=levels, slopes=slopes)
    fit = fit_linear(MODELS[levels, slopes], ENGINE, [run])
    q, values, rng = 1 + slopes, fit.values[:, 0], np.random.default_rng(0)
    cov = np.zeros((q, q))
    cov[np.tril_indices(q)] = values[3 : 3 + q * (q + 1) // 2]
    cov = cov + np.tril(cov, -1).T
    root = np.linalg.cholesky(cov + 1e-13 * np.eye(q))
    for size in (1e-3, 1e-2, 0.1, 1.0):
        for _ in range(5):
            turn = np.eye(q) + size * rng.normal(size=(q, q))
            near = dense_log_likelihood(
                run,
                values[:3] * (1 + 1e-2 * size * rng.normal(size=3)),
                root @ turn @ turn.T @ root.T,
                values[-1] * np.exp(size * rng.normal()),
                values[-2] * np.exp(size * rng.normal()) if levels == 3 else 0.0,
            )
            assert near < fit.log_likelihood[0]


@pytest.mark.parametrize("rank", [0, 1, 2])
@pytest.mark.parametrize("levels", [2, 3])
def test_slope_and_curvature_by_finite_differences(levels, rank):
    run, model = sample(levels=levels, slopes=1, columns=2), MODELS[levels, 1]
    sums = cluster_sums("test", standard(model, ENGINE, [run]), ENGINE, [run], np.arange(2))
    rng, step = np.random.default_rng(rank), 1e-5
    coordinates = Coordinates(np.linalg.qr(rng.normal(size=(2, 2)))[0], rank, levels == 3)
    points = rng.normal(size=(2, coordinates.size))
    found = derivatives(level(sums, coordinates, points))
    curvature = found.profile_curvature()
    for a, move in enumerate(step * np.eye(coordinates.size)):
        up, down = level(sums, coordinates, points + move), level(sums, coordinates, points - move)
        np.testing.assert_allclose(
            found.slope[:, a], (up.value - down.value) / (2 * step), rtol=1e-6, atol=1e-5
        )
        numerical = (derivatives(up).slope - derivatives(down).slope) / (2 * step)
        np.testing.assert_allclose(curvature[:, a], numerical, rtol=1e-6, atol=1e-6 * np.abs(curvature).max())


@pytest.mark.parametrize(("levels", "slopes"), SHAPES)
def test_columns_equal_fits_of_their_own(levels, slopes):
    run, model = sample(levels=levels, slopes=slopes, columns=5, clusters=40, tops=9), MODELS[levels, slopes]
    together = fit_linear(model, ENGINE, [run])
    assert together.failed == {}
    for k in range(5):
        alone = replace(
            run,
            row_weight=run.row_weight[:, [k]],
            cluster_weight=run.cluster_weight[:, [k]],
            top_weight=None if run.top is None else run.top_weight[:, [k]],
        )
        own = fit_linear(model, ENGINE, [alone])
        np.testing.assert_allclose(together.values[:, k], own.values[:, 0], rtol=2e-8, atol=1e-9)
        assert together.log_likelihood[k] == pytest.approx(own.log_likelihood[0], rel=1e-11)


@pytest.mark.parametrize("levels", [2, 3])
def test_one_column_of_a_level_stands_for_all(levels):
    run, model = sample(levels=levels, columns=4, clusters=40, tops=9), MODELS[levels, 1]
    one = replace(run, row_weight=run.row_weight[:, :1])
    every = replace(run, row_weight=np.repeat(run.row_weight[:, :1], 4, axis=1))
    found = fit_linear(model, ENGINE, [one])
    np.testing.assert_allclose(found.values, fit_linear(model, ENGINE, [every]).values, rtol=1e-9)


def test_columns_a_few_at_a_time_equal_all_at_once(monkeypatch):
    run, model = sample(columns=7, clusters=40), MODELS[2, 1]
    together = fit_linear(model, ENGINE, [run])
    monkeypatch.setattr(linear_sums, "SUMS_AT_A_TIME", 8 * 40 * 2 * 6 * 3)
    monkeypatch.setattr(linear_sums, "ROWS_AT_A_TIME", 7)
    np.testing.assert_allclose(fit_linear(model, ENGINE, [run]).values, together.values, rtol=1e-10)


@pytest.mark.parametrize(("levels", "slopes"), SHAPES)
def test_answer_does_not_depend_on_runs_workers_weight_scale_or_order(levels, slopes):
    run, model = sample(levels=levels, slopes=slopes, columns=3, clusters=40, tops=9), MODELS[levels, slopes]
    whole = fit_linear(model, ENGINE, [run])

    def same(other):
        np.testing.assert_allclose(other.values, whole.values, rtol=1e-10, atol=1e-10)

    same(fit_linear(model, ENGINE, runs_of(run, 3)))
    with threads(2) as engine:
        same(fit_linear(model, engine, runs_of(run, 4)))
    same(fit_linear(model, ENGINE, [permuted(run, seed=1)]))
    if levels == 3:
        scaled = replace(run, top_weight=run.top_weight * 1e6)
    else:
        scaled = replace(run, cluster_weight=run.cluster_weight * 1e6)
    other = fit_linear(model, ENGINE, [scaled])
    same(other)
    np.testing.assert_allclose(other.log_likelihood, whole.log_likelihood * 1e6, rtol=1e-10)


def test_units_and_large_means_carry_through():
    run, model = sample(slopes=1, clusters=40), MODELS[2, 1]
    shift, unit = 1e6, 1e3
    x = run.x.copy()
    x[:, 1] = shift + unit * x[:, 1]
    z = run.z.copy()
    z[:, 1] = shift + unit * z[:, 1]
    plain = fit_linear(model, ENGINE, [run]).values[:, 0]
    other = fit_linear(model, ENGINE, [replace(run, y=5e6 + 10 * run.y, x=x, z=z)]).values[:, 0]
    turn = np.array([[1, -shift / unit], [0, 1 / unit]])
    cov = 100 * turn @ np.array([[plain[3], plain[4]], [plain[4], plain[5]]]) @ turn.T
    beta = 10 * np.array([plain[0] - plain[1] * shift / unit + 5e5, plain[1] / unit, plain[2]])
    expected = np.r_[beta, cov[0, 0], cov[1, 0], cov[1, 1], 100 * plain[6]]
    np.testing.assert_allclose(other, expected, rtol=1e-7)


def test_start_from_another_fit_leads_to_the_same_answer_sooner():
    run, model = sample(levels=3, slopes=1, clusters=60, tops=12), MODELS[3, 1]
    cold = fit_linear(model, ENGINE, [run])
    warm = fit_linear(model, ENGINE, [run], start=cold.values[:, 0])
    np.testing.assert_allclose(warm.values, cold.values, rtol=1e-9)
    assert warm.steps < cold.steps


def test_redundant_fixed_column_is_named_and_left_out():
    run, model = sample(slopes=0), MODELS[2, 0]
    x = np.column_stack([run.x, 3 - 2 * run.x[:, 1]])
    fit = fit_linear(replace(model, fixed=(*model.fixed, "copy")), ENGINE, [replace(run, x=x)])
    plain = fit_linear(model, ENGINE, [run])
    assert fit.aliased == ("copy",)
    np.testing.assert_allclose(np.delete(fit.values, 3, axis=0), plain.values, rtol=1e-10)
    assert fit.values[3, 0] == 0


def test_model_without_constants():
    run, model = sample(slopes=1, clusters=40), MODELS[2, 0]
    bare = replace(run, x=run.x[:, 1:], z=run.z[:, 1:])
    fit = fit_linear(replace(model, fixed=model.fixed[1:], random=("number",)), ENGINE, [bare])
    brute = dense_log_likelihood(bare, fit.values[:2, 0], fit.values[2:3], fit.values[3, 0])
    assert fit.log_likelihood[0] == pytest.approx(brute, abs=1e-7)


def test_rows_and_clusters_of_weight_zero_count_for_nothing():
    run = sample(slopes=1, clusters=30, columns=2)
    run.row_weight[::7] = 0
    run.cluster_weight[::5] = 0
    kept = (run.row_weight[:, 0] > 0) & (run.cluster_weight[run.cluster, 0] > 0)
    codes, cluster = np.unique(run.cluster[kept], return_inverse=True)
    fewer = Nested(
        run.y[kept],
        run.x[kept],
        run.z[kept],
        cluster,
        None,
        run.row_weight[kept],
        run.cluster_weight[codes],
        None,
    )
    model = MODELS[2, 1]
    np.testing.assert_allclose(
        fit_linear(model, ENGINE, [run]).values, fit_linear(model, ENGINE, [fewer]).values, rtol=1e-9
    )


def test_names_follow_the_values():
    assert fit_linear(MODELS[3, 1], ENGINE, [sample(levels=3, slopes=1)]).names == (
        "Intercept",
        "number",
        "own",
        "variance: school Intercept",
        "covariance: school Intercept, number",
        "variance: school number",
        "variance: area Intercept",
        "variance: residual",
    )
