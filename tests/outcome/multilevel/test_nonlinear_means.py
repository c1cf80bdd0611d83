"""Population-averaged means: against integration by scipy, and their influence against refits."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pytest
from nonlinear_samples import ENGINE, model, sample, split
from scipy import integrate, special, stats

from steelyard.outcome.multilevel.nonlinear_fit import fit_nonlinear
from steelyard.outcome.multilevel.nonlinear_influence import influence
from steelyard.outcome.multilevel.population_means import SetColumns, population_means

KINDS = {"two levels": {}, "random slope": {"slope": True}, "three levels": {"levels": 3}}
SHAPES = [(family, kind) for family in ("binomial", "poisson") for kind in KINDS]


def fitted(family, kind, columns=1, sd=1.0):
    run = sample(clusters=40, rows=6, family=family, seed=5, sd=sd, sd2=0.8, columns=columns, **KINDS[kind])
    fit = fit_nonlinear(model(family, points=5, **KINDS[kind]), [run], ENGINE)
    return run, fit


def setting(kind):
    """The exposure is the random column where there is a random slope, else the last one."""
    return SetColumns((1,), (1,)) if kind == "random slope" else SetColumns((2,))


def spread(kind, entries, level):
    if kind == "three levels":
        return np.sqrt(np.square(entries).sum())
    if kind == "random slope":
        return np.hypot(entries[0] + level * entries[1], level * entries[2])
    return entries[0]


@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_means_are_integrals_over_the_random_effects(family, kind):
    run, fit = fitted(family, kind, columns=2)
    found = population_means(fit, influence(fit, [run], ENGINE), setting(kind), split(run, 3), ENGINE)
    inverse = special.expit if family == "binomial" else np.exp
    for k in range(2):
        theta = fit.theta[:, k]
        weight = fit.model.overall_weights(run)[:, k]
        for row, level in enumerate((1.0, 0.0)):
            x = run.x.copy()
            x[:, 1 if kind == "random slope" else 2] = level
            tau = spread(kind, theta[3:], level)

            def mean(eta, tau=tau):
                return integrate.quad(
                    lambda u: inverse(eta + tau * u) * stats.norm.pdf(u),
                    -12,
                    12,
                    epsabs=1e-13,
                    epsrel=1e-12,
                    limit=200,
                )[0]

            picked = np.arange(0, len(x), 9)
            of_rows = np.array([mean(eta) for eta in x[picked] @ theta[:3]])
            expected = weight[picked] @ of_rows / weight[picked].sum()
            thin = keep_rows(run, picked)
            few = population_means(fit, np.zeros((1, fit.model.size)), setting(kind), [thin], ENGINE)
            assert few.means[row, k] == pytest.approx(expected, rel=1e-10)
            assert found.means[row, k] > 0


def keep_rows(run, picked):
    """The run with some of its rows, their clusters all in one top-most cluster of a row each or more."""
    codes, cluster = np.unique(run.cluster[picked], return_inverse=True)
    top = None if run.top is None else np.unique(run.top[codes], return_inverse=True)
    return replace(
        run,
        y=run.y[picked],
        x=run.x[picked],
        z=run.z[picked],
        cluster=cluster,
        row_weight=run.row_weight[picked],
        cluster_weight=run.cluster_weight[codes],
        top=None if top is None else top[1],
        top_weight=None if top is None else run.top_weight[top[0]],
    )


@pytest.mark.parametrize("sd", [0.3, 4.0])
def test_wide_and_narrow_spreads_are_integrated_alike(sd):
    run, fit = fitted("binomial", "two levels", sd=1.0)
    theta = fit.theta.copy()
    theta[3] = sd
    fit = replace(fit, theta=theta)
    found = population_means(fit, np.zeros((40, 4)), SetColumns((2,)), [run], ENGINE)
    x = run.x.copy()
    x[:, 2] = 1
    at = np.linspace(-9, 9, 20001)
    density = stats.norm.pdf(at)
    density /= density.sum()
    rows = np.array([special.expit(eta + sd * at) @ density for eta in x @ theta[:3, 0]])
    weight = fit.model.overall_weights(run)[:, 0]
    assert found.means[0, 0] == pytest.approx(weight @ rows / weight.sum(), rel=1e-10)


@pytest.mark.parametrize(("family", "kind"), SHAPES)
def test_derivatives_in_theta(family, kind):
    run, fit = fitted(family, kind)
    nothing = np.zeros((len(fit.model.top_weights(run)), fit.model.size))
    found = population_means(fit, nothing, setting(kind), [run], ENGINE)
    step = 1e-5
    for d in range(fit.model.size):
        up, down = (
            population_means(
                replace(fit, theta=fit.theta + sign * step * np.eye(fit.model.size)[:, [d]]),
                nothing,
                setting(kind),
                [run],
                ENGINE,
            ).means[:, 0]
            for sign in (1, -1)
        )
        assert found.of_theta[:, d] == pytest.approx((up - down) / (2 * step), rel=1e-6, abs=1e-9)


@dataclass(frozen=True)
class Overall:
    """Row weights of their own, here the level-1 weight times the top-most one."""

    levels: int

    def __call__(self, run):
        top = run.cluster_weight[run.cluster] if self.levels == 2 else run.top_weight[run.top[run.cluster]]
        return run.row_weight * top


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("own", [False, True])
def test_influence_is_the_derivative_in_a_top_clusters_log_weight(kind, own):
    run, fit = fitted("binomial", kind)
    weights = Overall(fit.model.levels) if own else None
    found = population_means(
        fit, influence(fit, [run], ENGINE), setting(kind), split(run, 3), ENGINE, weights
    )
    name = "top_weight" if kind == "three levels" else "cluster_weight"
    step = 2e-3

    def moved(log):
        weight = getattr(run, name).copy()
        weight[3] *= np.exp(log)
        other = replace(run, **{name: weight})
        again = fit_nonlinear(fit.model, [other], ENGINE, start=fit.theta[:, 0])
        nothing = np.zeros((len(weight), fit.model.size))
        return population_means(again, nothing, setting(kind), [other], ENGINE, weights).means[:, 0]

    slope = (moved(step) - moved(-step)) / (2 * step)
    assert found.influence[3] == pytest.approx(slope, rel=1e-4, abs=1e-7)


def test_row_slopes_are_the_derivatives_in_a_rows_own_log_weight():
    run, fit = fitted("binomial", "two levels")
    nothing = np.zeros((40, fit.model.size))
    found = population_means(fit, nothing, SetColumns((2,)), [run], ENGINE)
    step = 1e-5

    def moved(log):
        weight = run.row_weight.copy()
        weight[7] *= np.exp(log)
        other = replace(run, row_weight=weight)
        return population_means(fit, nothing, SetColumns((2,)), [other], ENGINE).means[:, 0]

    assert found.row_slopes(run)[7] == pytest.approx((moved(step) - moved(-step)) / (2 * step), rel=1e-5)
