"""Fits of nonlinear multilevel models against brute force, expanded data, a plain GLM, and themselves rearranged."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm
from nonlinear_samples import ENGINE, brute_force, model, repeated_clusters, repeated_rows, sample, split

from steelyard.data.passes import Engine, threads
from steelyard.outcome.multilevel.nonlinear_fit import fit_nonlinear

KINDS = {"two levels": {}, "random slope": {"slope": True}, "three levels": {"levels": 3}}
SHAPES = [(family, kind) for family in ("binomial", "poisson") for kind in KINDS]


def fitted(run, family="binomial", kind="two levels", points=7, **options):
    return fit_nonlinear(model(family, points=points, **KINDS[kind]), [run], ENGINE, **options)


def counting(counts):
    """Count passes by what they are for."""

    def told(what, done, total):
        counts[what] += done == total

    return told


def balanced(family="binomial", levels=2):
    """Clusters that vary less between them than chance has it."""
    run = sample(clusters=30, rows=1, family=family, levels=levels)
    pattern = np.array([0, 1, 1, 0, 1, 0]) if family == "binomial" else np.array([0, 1, 2, 3, 1, 2])
    rng = np.random.default_rng(3)
    n = 30 * 6
    x = np.column_stack([np.ones(n), rng.normal(size=n), rng.random(n) < 0.5]).astype(float)
    return replace(
        run,
        y=np.tile(pattern, 30).astype(float),
        x=x,
        z=x[:, :1],
        cluster=np.repeat(np.arange(30), 6),
        row_weight=rng.uniform(0.9, 1.1, (n, 1)),
    )


@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_the_fit_is_where_the_dense_grid_is_highest(family, kind):
    """Differences of the brute-force likelihood vanish at the estimate, beside their size a little away."""
    run = sample(clusters=20, rows=5, family=family, seed=4, **KINDS[kind])
    fit = fitted(run, family, kind, points=25)
    theta, step = fit.theta[:, 0], 1e-3
    spread = np.sqrt(np.diag(fit.bread))
    for d, unit in enumerate(np.eye(len(theta))):
        if spread[d] == 0:
            continue
        up, down = (brute_force(fit.model, run, theta + sign * step * unit, count=161) for sign in (1, -1))
        slope = (up - down) / (2 * step)
        assert abs(slope) * spread[d] < 2e-4
        middle = brute_force(fit.model, run, theta, count=161)
        information = -(up - 2 * middle + down) / step**2
        assert information == pytest.approx(np.linalg.pinv(fit.bread)[d, d], rel=1e-2)


@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_log_likelihood_is_the_dense_grids_with_the_terms_in_y(family, kind):
    run = sample(clusters=15, rows=5, family=family, seed=4, **KINDS[kind])
    fit = fitted(run, family, kind, points=25)
    exact = brute_force(fit.model, run, fit.theta[:, 0], count=161)
    if family == "poisson":
        overall = fit.model.overall_weights(run)[:, 0]
        exact += overall @ sm.families.Poisson().loglike_obs(run.y, np.ones(len(run.y)))
        exact += overall.sum()
    assert fit.log_likelihood[0] == pytest.approx(exact, rel=1e-8)


@pytest.mark.parametrize("points", [1, 7])
@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_integer_row_weights_are_the_rows_repeated(family, kind, points):
    run = sample(clusters=30, rows=6, family=family, **KINDS[kind])
    times = np.random.default_rng(8).integers(1, 4, len(run.y))
    weighted = replace(run, row_weight=times[:, np.newaxis].astype(float))
    one = fitted(weighted, family, kind, points)
    other = fitted(repeated_rows(run, times), family, kind, points)
    assert one.theta == pytest.approx(other.theta, rel=1e-7, abs=1e-8)
    assert one.log_likelihood == pytest.approx(other.log_likelihood, rel=1e-11)
    assert one.bread == pytest.approx(other.bread, rel=1e-5, abs=1e-8)


@pytest.mark.parametrize("points", [1, 7])
@pytest.mark.parametrize(("family", "kind"), [shape for shape in SHAPES if shape[1] != "three levels"])
def test_integer_cluster_weights_are_the_clusters_repeated(family, kind, points):
    run = sample(clusters=30, rows=6, family=family, **KINDS[kind])
    times = np.random.default_rng(8).integers(1, 4, 30)
    one = fitted(replace(run, cluster_weight=times[:, np.newaxis].astype(float)), family, kind, points)
    other = fitted(repeated_clusters(run, times), family, kind, points)
    assert one.theta == pytest.approx(other.theta, rel=1e-7, abs=1e-8)
    assert one.log_likelihood == pytest.approx(other.log_likelihood, rel=1e-11)


def test_integer_cluster_weights_of_three_levels_are_the_clusters_repeated():
    run = sample(clusters=40, rows=5, levels=3)
    times = np.random.default_rng(8).integers(1, 4, 40)
    one = fitted(replace(run, cluster_weight=times[:, np.newaxis].astype(float)), kind="three levels")
    more = replace(repeated_clusters(replace(run, top=None), times), top=np.repeat(run.top, times))
    other = fitted(more, kind="three levels")
    assert one.theta == pytest.approx(other.theta, rel=1e-7, abs=1e-8)


@pytest.mark.parametrize("levels", [2, 3])
@pytest.mark.parametrize("family", ["binomial", "poisson"])
def test_no_variance_between_clusters_is_said_and_leaves_a_weighted_glm(family, levels):
    run = balanced(family, levels)
    fit = fitted(run, family, "three levels" if levels == 3 else "two levels")
    weight = fit.model.overall_weights(run)[:, 0]
    kind = sm.families.Binomial() if family == "binomial" else sm.families.Poisson()
    plain = sm.GLM(run.y, run.x, family=kind, freq_weights=weight).fit(tol=1e-13)
    assert fit.theta[:3, 0] == pytest.approx(plain.params, rel=1e-7, abs=1e-8)
    assert np.all(fit.theta[3:, 0] == 0)
    assert fit.bread[:3, :3] == pytest.approx(plain.cov_params(), rel=1e-6)
    assert np.all(fit.bread[3:] == 0)
    assert fit.log_likelihood[0] == pytest.approx(plain.llf, rel=1e-11)
    assert len(fit.boundary) == levels - 1
    assert "estimated as zero" in fit.warnings[0]


def test_a_random_slope_that_does_not_vary_is_a_boundary():
    run = sample(clusters=40, rows=8, slope=True, sd2=0.0, seed=12)
    fit = fitted(run, kind="random slope")
    smaller = fitted(replace(run, z=run.z[:, :1]))
    assert fit.boundary == ("a",)
    assert fit.theta[5, 0] == 0
    assert fit.log_likelihood[0] >= smaller.log_likelihood[0]
    assert np.all(fit.bread[5] == 0)


@pytest.mark.parametrize("points", [1, 7])
@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_several_columns_are_several_fits(family, kind, points):
    run = sample(clusters=40, rows=6, family=family, columns=4, seed=5, **KINDS[kind])
    together = fitted(run, family, kind, points)
    assert not together.failed
    for k in range(4):
        alone = replace(
            run,
            row_weight=run.row_weight[:, [k]],
            cluster_weight=run.cluster_weight[:, [k]],
            top_weight=None if run.top_weight is None else run.top_weight[:, [k]],
        )
        one = fitted(alone, family, kind, points)
        assert together.theta[:, k] == pytest.approx(one.theta[:, 0], rel=1e-7, abs=1e-7)
        assert together.log_likelihood[k] == pytest.approx(one.log_likelihood[0], rel=1e-11)


def test_columns_about_a_boundary_are_several_fits():
    run = balanced()
    rng = np.random.default_rng(1)
    weight = np.column_stack([np.ones(30), rng.uniform(0.2, 3, (30, 3))])
    rows = np.repeat(run.row_weight, 4, axis=1)
    rows[:, 3] *= np.where(run.y == np.arange(len(run.y)) // 6 % 2, 4, 0.5)
    several = replace(run, cluster_weight=weight, row_weight=rows)
    together = fitted(several)
    assert together.theta[3, 0] == 0
    assert together.theta[3, 3] > 0.5
    for k in range(4):
        one = fitted(replace(run, cluster_weight=weight[:, [k]], row_weight=rows[:, [k]]))
        assert together.theta[:, k] == pytest.approx(one.theta[:, 0], rel=1e-7, abs=1e-7)


@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_scale_of_top_weights_order_of_rows_and_runs_do_not_matter(family, kind):
    run = sample(clusters=40, rows=6, family=family, columns=2, seed=5, **KINDS[kind])
    base = fitted(run, family, kind)
    top = "cluster_weight" if run.top is None else "top_weight"
    scaled = fitted(replace(run, **{top: getattr(run, top) * 1e5}), family, kind)
    assert scaled.theta == pytest.approx(base.theta, rel=1e-10, abs=1e-12)
    assert scaled.bread * 1e5 == pytest.approx(base.bread, rel=1e-8, abs=1e-14)
    order = np.lexsort((np.random.default_rng(0).random(len(run.y)), run.cluster))
    rows = {name: getattr(run, name)[order] for name in ("y", "x", "z", "cluster", "row_weight")}
    shuffled = fitted(replace(run, **rows), family, kind)
    assert shuffled.theta == pytest.approx(base.theta, rel=1e-10, abs=1e-12)
    with threads(2) as engine:
        cut = fit_nonlinear(model(family, **KINDS[kind]), split(run, 5), engine)
    assert cut.theta == pytest.approx(base.theta, rel=1e-10, abs=1e-12)
    assert cut.bread == pytest.approx(base.bread, rel=1e-8, abs=1e-13)


@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_units_and_origins_of_columns_do_not_matter(family, kind):
    run = sample(clusters=40, rows=6, family=family, seed=5, **KINDS[kind])
    base = fitted(run, family, kind)
    x = run.x * np.array([1, 1000, 1])
    x[:, 2] += 5
    fit = fitted(replace(run, x=x), family, kind)
    expected = base.theta[:, 0].copy()
    expected[1] /= 1000
    expected[0] -= 5 * expected[2]
    assert fit.theta[:, 0] == pytest.approx(expected, rel=1e-8)


@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_a_warm_start_leads_to_the_same_place(family, kind):
    run = sample(clusters=40, rows=6, family=family, seed=5, **KINDS[kind])
    cold, warmed = Counter(), Counter()
    base = fit_nonlinear(model(family, **KINDS[kind]), [run], Engine(progress=counting(cold)))
    warm = fit_nonlinear(
        model(family, **KINDS[kind]), [run], Engine(progress=counting(warmed)), start=base.theta[:, 0]
    )
    assert warm.theta == pytest.approx(base.theta, rel=1e-8, abs=1e-9)
    assert warmed.total() < cold.total()
    off = fitted(run, family, kind, start=base.theta[:, 0] * 1.3)
    assert off.theta == pytest.approx(base.theta, rel=1e-7, abs=1e-8)


def test_a_redundant_column_is_named_and_has_no_coefficient():
    run = sample(clusters=40, rows=6)
    base = fitted(run)
    named = replace(base.model, fixed=("one", "a", "b", "twice"))
    more = replace(run, x=np.column_stack([run.x, 1 + 2 * run.x[:, 1]]))
    fit = fit_nonlinear(named, [more], ENGINE)
    assert fit.aliased == ("twice",)
    assert fit.theta[3, 0] == 0
    assert fit.theta[[0, 1, 2, 4]] == pytest.approx(base.theta, rel=1e-8)


def test_rows_and_clusters_of_weight_zero_do_not_count():
    run = sample(clusters=40, rows=6)
    rows, clusters = run.row_weight.copy(), run.cluster_weight.copy()
    rows[::7] = 0
    rows[run.cluster == 4] = 0
    clusters[[2, 9]] = 0
    fit = fitted(replace(run, row_weight=rows, cluster_weight=clusters))
    keep = (rows[:, 0] > 0) & (clusters[run.cluster, 0] > 0)
    codes = np.unique(run.cluster[keep], return_inverse=True)
    smaller = replace(
        run,
        y=run.y[keep],
        x=run.x[keep],
        z=run.z[keep],
        row_weight=rows[keep],
        cluster=codes[1],
        cluster_weight=clusters[codes[0]],
    )
    assert fit.theta == pytest.approx(fitted(smaller).theta, rel=1e-8)


def test_clusters_of_one_row_and_clusters_all_zero_or_one_are_fitted():
    run = sample(clusters=80, rows=2, sd=2.0, seed=2)
    sizes = np.bincount(run.cluster)
    alike = np.array([np.ptp(run.y[run.cluster == j]) == 0 for j in range(80)])
    assert (sizes == 1).any()
    assert alike.sum() > 40
    fit = fitted(run, points=25)
    exact = brute_force(fit.model, run, fit.theta[:, 0], count=401)
    assert fit.log_likelihood[0] == pytest.approx(exact, rel=1e-6)
