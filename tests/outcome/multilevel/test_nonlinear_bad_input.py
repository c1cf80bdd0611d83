"""What nonlinear multilevel fits refuse, and what they say."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from nonlinear_samples import ENGINE, model, sample

from steelyard.errors import EstimationError, PlanError, SeparationError
from steelyard.outcome.multilevel import nonlinear_fit
from steelyard.outcome.multilevel.nonlinear_fit import fit_nonlinear


def fit(run, *args, **options):
    return fit_nonlinear(model(*args, **options), [run], ENGINE)


@pytest.mark.parametrize(
    ("change", "said"),
    [
        (lambda run: {"y": run.y * 0}, "0 in every row"),
        (lambda run: {"y": run.y * 0 + 1}, "1 in every row"),
        (lambda run: {"y": np.where(np.arange(len(run.y)) < 3, 2, run.y)}, "neither 0 nor 1 in 3 of"),
        (
            lambda run: {"row_weight": np.where(run.row_weight > 1.9, -1, run.row_weight)},
            "negative or infinite",
        ),
        (lambda run: {"cluster_weight": run.cluster_weight * np.nan}, "40 weights are missing"),
        (lambda run: {"row_weight": run.row_weight * 0}, "no row carries weight"),
        (lambda run: {"x": np.where(run.x == run.x[5], np.inf, run.x)}, "missing or infinite"),
        (lambda run: {"cluster": run.cluster[::-1].copy()}, "not sorted"),
        (lambda run: {"cluster": run.cluster + (run.cluster > 3)}, "gaps"),
        (
            lambda run: {"cluster": run.cluster * 0, "cluster_weight": run.cluster_weight[:1]},
            "1 cluster at the top",
        ),
    ],
)
def test_rows_that_cannot_carry_the_model_are_refused(change, said):
    run = sample(clusters=40, rows=6)
    with pytest.raises(EstimationError, match=said) as caught:
        fit(replace(run, **change(run)))
    assert caught.value.mend


def test_counts_are_not_negative_and_not_all_zero():
    run = sample(clusters=40, rows=6, family="poisson")
    with pytest.raises(EstimationError, match="below 0 in 1 of"):
        fit(replace(run, y=np.where(np.arange(len(run.y)) == 4, -1, run.y)), "poisson")
    with pytest.raises(EstimationError, match="0 in every row"):
        fit(replace(run, y=run.y * 0), "poisson")


@pytest.mark.parametrize(
    ("wrong", "said"),
    [
        ({"levels": 4}, "4 levels"),
        ({"random": ("a", "b", "c")}, "3 random columns"),
        ({"random": ()}, "none"),
        ({"points": 0}, "0 quadrature points"),
        ({"points": 1000}, "1000 quadrature points"),
        ({"levels": 3, "random": ("one", "a")}, "2 random columns"),
    ],
)
def test_models_that_are_not_fitted_are_refused(wrong, said):
    with pytest.raises(PlanError, match=said):
        fit_nonlinear(replace(model(), **wrong), [sample()], ENGINE)


def test_three_levels_take_random_intercepts_only():
    run = sample(levels=3)
    with pytest.raises(PlanError, match="random intercepts only"):
        fit(replace(run, z=run.x[:, 1:2]), levels=3)


@pytest.mark.parametrize("levels", [2, 3])
def test_a_column_that_settles_the_response_is_named(levels):
    run = sample(clusters=40, rows=6, levels=levels)
    x = run.x.copy()
    x[:, 2] = (run.y > 0) & (np.arange(len(run.y)) % 3 == 0)
    with pytest.raises(SeparationError, match=f"b settle the response of {int(x[:, 2].sum())} of") as caught:
        fit(replace(run, x=x), levels=levels)
    assert "Join rare categories" in caught.value.mend


def test_a_category_without_counts_is_named():
    run = sample(clusters=40, rows=6, family="poisson")
    x = run.x.copy()
    x[:, 2] = (run.y == 0) & (np.arange(len(run.y)) % 3 == 0)
    with pytest.raises(SeparationError, match="b settle the response"):
        fit(replace(run, x=x), "poisson")


def test_clusters_that_do_not_vary_within_have_a_variance_without_bound():
    run = sample(clusters=40, rows=6)
    y = (run.cluster % 2 == 0).astype(float)
    with pytest.raises(EstimationError, match="grows without bound; 0 of 40 clusters") as caught:
        fit(replace(run, y=y))
    assert "level the response varies at" in caught.value.mend


def test_a_fit_that_does_not_settle_is_refused_never_its_last_iterate(monkeypatch):
    monkeypatch.setattr(nonlinear_fit, "MOST_STEPS", 1)
    monkeypatch.setattr(nonlinear_fit, "MOST_ROUNDS", 1)
    with pytest.raises(EstimationError, match="did not settle in 1 steps") as caught:
        fit(sample(clusters=40, rows=6))
    assert "quadrature points" in caught.value.mend


def test_a_replicate_without_a_solution_is_named_and_counted():
    """Column 2 leaves only the zeros of a category in."""
    run = sample(clusters=40, rows=6, columns=4)
    weight = run.row_weight.copy()
    weight[(run.x[:, 2] == 1) & (run.y == 1), 2] = 0
    found = fit(replace(run, row_weight=weight))
    assert set(found.failed) == {2}
    assert np.isnan(found.theta[:, 2]).all()
    assert np.isfinite(found.theta[:, [0, 1, 3]]).all()
    assert "1 of 3 replicates" in found.warnings[-1]


def test_clusters_of_one_row_are_warned_of():
    run = sample(clusters=60, rows=1, family="poisson", sd=1.5)
    found = fit(run, "poisson")
    assert len(run.y) == 60
    assert any("single row" in text for text in found.warnings)
