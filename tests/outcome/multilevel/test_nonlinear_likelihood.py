"""The pseudo-likelihood of nonlinear multilevel models: against a dense grid, and its derivatives by differences."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from nonlinear_samples import brute_force, model, sample, value

from steelyard.outcome.multilevel.evaluate import Evaluate
from steelyard.outcome.multilevel.integrals import Integral
from steelyard.outcome.multilevel.pieces import parts, prepared
from steelyard.outcome.multilevel.second import second_derivatives

CASES = {
    "two levels": ({}, [-0.4, 0.3, 0.5, 0.9]),
    "random slope": ({"slope": True}, [-0.4, 0.3, 0.5, 0.9, -0.3, 0.6]),
    "three levels": ({"levels": 3}, [-0.4, 0.3, 0.5, 0.9, 0.7]),
}
SHAPES = [(family, case) for family in ("binomial", "poisson") for case in CASES]


def made(family, case, points, clusters=12, rows=6):
    kind, theta = CASES[case]
    run = sample(clusters=clusters, rows=rows, family=family, **kind)
    return model(family, points=points, **kind), run, np.array(theta)


@pytest.mark.parametrize(("family", "case"), SHAPES)
def test_many_adaptive_points_give_the_integral_of_a_dense_grid(family, case):
    fitted, run, theta = made(family, case, 25)
    assert value(fitted, run, theta) == pytest.approx(brute_force(fitted, run, theta), rel=1e-9)


@pytest.mark.parametrize(("family", "case"), SHAPES)
def test_more_points_come_closer(family, case):
    fitted, run, theta = made(family, case, 7)
    exact = brute_force(fitted, run, theta)
    off = [abs(value(fitted, run, theta, points=points) - exact) for points in (1, 7, 15, 31)]
    assert off[0] > off[1] > off[2] >= off[3] - 1e-9
    assert off[0] > 1e-4
    assert off[3] < 1e-8 * abs(exact)


@pytest.mark.parametrize("case", CASES)
def test_ordinary_quadrature_with_many_points_gives_the_same_integral(case):
    fitted, run, theta = made("binomial", case, 60, clusters=8, rows=4)
    ordinary = replace(fitted, adaptive=False)
    assert value(ordinary, run, theta) == pytest.approx(brute_force(fitted, run, theta), rel=1e-7)


@pytest.mark.parametrize("adaptive", [True, False])
@pytest.mark.parametrize("points", [1, 2, 7])
@pytest.mark.parametrize(("family", "case"), SHAPES)
def test_the_gradient_is_that_of_the_rule_its_moving_nodes_included(family, case, points, adaptive):
    fitted, run, theta = made(family, case, points)
    fitted = replace(fitted, adaptive=adaptive)
    _, gradient = Evaluate(fitted, theta[:, np.newaxis], (0,), points)(run)
    step = 1e-5
    for d, unit in enumerate(np.eye(len(theta))):
        difference = value(fitted, run, theta + step * unit) - value(fitted, run, theta - step * unit)
        assert gradient[d, 0] == pytest.approx(difference / (2 * step), rel=1e-6, abs=1e-6)


@pytest.mark.parametrize("points", [1, 5])
@pytest.mark.parametrize(("family", "case"), SHAPES)
def test_derivatives_in_the_log_weights_of_rows_and_clusters(family, case, points):
    fitted, run, theta = made(family, case, points)
    of_rows, of_clusters = [], []
    for part in parts(fitted, run, points):
        piece = prepared(fitted, run, part, 0).at(theta, points)
        rows, clusters = piece.weight_slopes(fitted.top_weights(run)[part.tops, 0])
        of_rows.append(rows)
        of_clusters.append(clusters)
    step = 1e-5
    for name, found in (("row_weight", of_rows), ("cluster_weight", of_clusters)):
        weight = getattr(run, name)
        for i in (0, 3, len(weight) - 1):
            up, down = weight.copy(), weight.copy()
            up[i] *= np.exp(step)
            down[i] *= np.exp(-step)
            difference = value(fitted, replace(run, **{name: up}), theta) - value(
                fitted, replace(run, **{name: down}), theta
            )
            assert np.concatenate(found)[i] == pytest.approx(difference / (2 * step), rel=1e-6, abs=1e-6)


@pytest.mark.parametrize("points", [1, 2, 7])
@pytest.mark.parametrize("case", ["two levels", "random slope"])
@pytest.mark.parametrize("family", ["binomial", "poisson"])
def test_second_derivatives_of_two_levels_are_differences_of_the_gradient(family, case, points):
    fitted, run, theta = made(family, case, points)
    (part,) = parts(fitted, run, points)
    ready = prepared(fitted, run, part, 0)
    source = ready.source(theta, points)
    assert isinstance(source, Integral)
    found = second_derivatives(source, run.x)
    step = 1e-5
    for d, unit in enumerate(np.eye(len(theta))):
        up, down = (ready.at(theta + sign * step * unit, points).scores() for sign in (1, -1))
        assert found[:, d] == pytest.approx((up - down) / (2 * step), rel=1e-6, abs=1e-7)


@pytest.mark.parametrize("case", CASES)
def test_far_off_parameters_are_worked_on_without_overflow(case):
    """Where exponentials of linear predictors cannot be taken apart, the plain formulas take over."""
    fitted, run, theta = made("binomial", case, 7)
    wide = replace(run, x=run.x * np.array([1, 400, 1]))
    found = value(fitted, wide, theta)
    assert np.isfinite(found)
    plain = replace(wide, x=wide.x.copy())
    off = brute_force(fitted, plain, theta)
    assert found == pytest.approx(off, rel=2e-2)


@pytest.mark.parametrize(("family", "case"), SHAPES)
def test_several_points_and_columns_in_one_pass_are_the_same_as_one_by_one(family, case):
    kind, theta = CASES[case]
    run = sample(clusters=12, rows=6, family=family, columns=3, **kind)
    fitted = model(family, **kind)
    shared = replace(run, row_weight=np.repeat(run.row_weight[:, :1], 3, axis=1))
    thetas = np.column_stack([theta, theta, theta, np.array(theta) * 1.1])
    for rows in (run, shared):
        values, gradients = Evaluate(fitted, thetas, (0, 1, 2, 2), 7)(rows)
        for m, column in enumerate((0, 1, 2, 2)):
            one, slope = Evaluate(fitted, thetas[:, [m]], (column,), 7)(rows)
            assert values[m] == pytest.approx(one[0], rel=1e-12)
            assert gradients[:, m] == pytest.approx(slope[:, 0], rel=1e-9, abs=1e-9)
