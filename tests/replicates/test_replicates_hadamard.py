"""Hadamard matrices against their definition: H H' = n I, exactly, in whole numbers."""

import numpy as np
import pytest

from steelyard.replicates.hadamard import hadamard, next_order

# Every multiple of 4 up to 200 that doubling, quadratic residues and products reach; the gaps are documented.
UNREACHED = {92, 116, 156, 172, 184, 188}
ORDERS = [1, 2, *[n for n in range(4, 201, 4) if n not in UNREACHED]]


@pytest.mark.parametrize("order", ORDERS)
def test_rows_are_orthogonal_and_the_first_is_all_ones(order):
    matrix = hadamard(order).astype(int)
    assert set(np.unique(matrix)) <= {-1, 1}
    np.testing.assert_array_equal(matrix @ matrix.T, order * np.eye(order, dtype=int))
    assert (matrix[0] == 1).all()


@pytest.mark.parametrize("order", [28, 244, 730, 1000])
def test_fields_of_prime_powers_serve_too(order):
    # 27 + 1, 243 + 1, and the next beyond 730 and 1,000.
    reached = next_order(order)
    matrix = hadamard(reached).astype(int)
    np.testing.assert_array_equal(matrix @ matrix.T, reached * np.eye(reached, dtype=int))


@pytest.mark.parametrize(
    ("least", "order"), [(0, 1), (1, 1), (2, 2), (3, 4), (5, 8), (9, 12), (90, 96), (177, 180)]
)
def test_the_next_order_is_the_smallest_that_is_reached(least, order):
    assert next_order(least) == order


@pytest.mark.parametrize("order", [3, 6, 10, *sorted(UNREACHED)])
def test_an_order_out_of_reach_is_refused(order):
    with pytest.raises(ValueError, match=f"order {order} "):
        hadamard(order)
