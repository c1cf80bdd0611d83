import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from steelyard.estimate.linear import factored, independent_columns, quadratic_form


def test_independent_columns_prefer_the_earlier_and_ignore_units():
    rng = np.random.default_rng(0)
    x = rng.normal(size=(50, 3))
    wide = np.column_stack([x[:, 0], 1e8 * x[:, 0], x[:, 1], np.zeros(50), 1e-9 * x[:, 2], x @ [1, 2, 3]])
    assert independent_columns(wide.T @ wide).tolist() == [True, False, True, False, True, False]


@given(st.integers(0, 10_000), st.integers(1, 6), st.integers(0, 4))
def test_number_of_independent_columns_is_the_rank(seed, rank, more):
    rng = np.random.default_rng(seed)
    x = rng.normal(size=(40, rank))
    x = np.column_stack([x, x @ rng.normal(size=(rank, more))])[:, rng.permutation(rank + more)]
    assert independent_columns(x.T @ x).sum() == np.linalg.matrix_rank(x) == rank


def test_factored_solves_over_the_kept_columns_only():
    rng = np.random.default_rng(1)
    x = rng.normal(size=(50, 4)) * [1, 1e5, 1e-5, 1]
    gram = x.T @ x
    keep = np.array([True, True, False, True])
    right = rng.normal(size=(4, 3))
    got = factored(gram, keep).solve(right)
    expected = np.linalg.solve(gram[np.ix_(keep, keep)], right[keep])
    np.testing.assert_allclose(got[keep], expected, rtol=1e-9)
    assert not got[2].any()
    np.testing.assert_allclose(factored(gram, keep).solve(right[:, 0]), got[:, 0], rtol=1e-14)
    with pytest.raises(np.linalg.LinAlgError):
        factored(-gram, keep)


def test_quadratic_form_of_a_singular_covariance_is_that_of_a_basis():
    rng = np.random.default_rng(2)
    root = rng.normal(size=(3, 3))
    spread = np.vstack([np.eye(3), [[1, -1, 2], [0, 1, 1]]])
    small, covariance = root @ root.T, spread @ (root @ root.T) @ spread.T
    v = rng.normal(size=3)
    form, rank = quadratic_form(spread @ v, covariance)
    assert rank == 3
    assert form == pytest.approx(v @ np.linalg.solve(small, v), rel=1e-8)
    units = np.array([1, 1e6, 1e-6, 1, 10])
    assert quadratic_form(units * (spread @ v), covariance * np.outer(units, units))[0] == pytest.approx(
        form, rel=1e-8
    )
    assert quadratic_form(np.zeros(2), np.zeros((2, 2))) == (0.0, 0)
