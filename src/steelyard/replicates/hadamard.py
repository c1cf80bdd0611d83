"""Hadamard matrices, constructed: doubling (Sylvester 1867), quadratic residues (Paley 1933), and products."""

from __future__ import annotations

from functools import cache
from itertools import product

import numpy as np
from numpy.typing import NDArray

Signs = NDArray[np.int8]


def hadamard(order: int) -> Signs:
    """Return a Hadamard matrix: entries 1 and -1, rows mutually orthogonal, first row all ones; (order, order).

    Raises
    ------
    ValueError
        No construction known here has this order.
    """
    matrix = _matrix(order)
    if matrix is None:
        raise ValueError(f"no Hadamard matrix of order {order} is constructed here")
    # Columns may change sign: the first row becomes all ones.
    return np.asarray(matrix * matrix[0], dtype=np.int8)


def next_order(least: int) -> int:
    """Return the smallest order that can be constructed and is not below ``least``.

    Notes
    -----
    Orders other than 1 and 2 are multiples of 4. Doubling, the two constructions from quadratic residues of a
    field of odd prime power, and products of smaller matrices reach every multiple of 4 up to 88; the first
    that they pass over are 92, 116, 156, 172 and 184.
    """
    order = max(int(least), 1)
    while not _reachable(order):
        order += 1
    return order


@cache
def _reachable(order: int) -> bool:
    if order in (1, 2):
        return True
    if order % 4:
        return False
    if _field(order - 1, 3) or _field(order // 2 - 1, 1):
        return True
    return any(
        order % factor == 0 and _reachable(factor) and _reachable(order // factor)
        for factor in range(2, int(order**0.5) + 1)
    )


@cache
def _matrix(order: int) -> Signs | None:
    if not _reachable(order):
        return None
    if order == 1:
        return np.ones((1, 1), dtype=np.int8)
    if order == 2:
        return np.array([[1, 1], [1, -1]], dtype=np.int8)
    if _field(order - 1, 3):
        return _from_residues(order - 1)
    if _field(order // 2 - 1, 1):
        return _from_residues_doubled(order // 2 - 1)
    for factor in range(2, int(order**0.5) + 1):
        if order % factor == 0:
            left, right = _matrix(factor), _matrix(order // factor)
            if left is not None and right is not None:
                return np.kron(left, right).astype(np.int8)
    raise AssertionError(f"order {order} was said to be within reach")


def _from_residues(q: int) -> Signs:
    """Return Paley's first construction, of order q + 1 for a prime power q = 3 (mod 4)."""
    size = q + 1
    skew = np.zeros((size, size), dtype=np.int8)
    skew[0, 1:], skew[1:, 0] = 1, -1
    skew[1:, 1:] = _jacobsthal(q)
    return (skew + np.eye(size, dtype=np.int8)).astype(np.int8)


def _from_residues_doubled(q: int) -> Signs:
    """Return Paley's second construction, of order 2(q + 1) for a prime power q = 1 (mod 4)."""
    size = q + 1
    conference = np.zeros((size, size), dtype=np.int8)
    conference[0, 1:], conference[1:, 0] = 1, 1
    conference[1:, 1:] = _jacobsthal(q)
    signs = np.kron(conference, np.array([[1, 1], [1, -1]]))
    return (signs + np.kron(np.eye(size), np.array([[1, -1], [-1, -1]]))).astype(np.int8)


def _field(q: int, residue: int) -> bool:
    """Whether there is a field of odd order q, and q leaves this residue modulo 4."""
    return q > 2 and q % 4 == residue and _prime_power(q) is not None


@cache
def _prime_power(q: int) -> tuple[int, int] | None:
    """Return the prime and the exponent that make q; None if q is no prime power."""
    prime = next((d for d in range(2, int(q**0.5) + 1) if q % d == 0), q)
    exponent, rest = 0, q
    while rest % prime == 0:
        rest //= prime
        exponent += 1
    return (prime, exponent) if rest == 1 and q > 1 else None


def _jacobsthal(q: int) -> Signs:
    """Return the quadratic character of differences of the field's elements, (q, q)."""
    found = _prime_power(q)
    assert found is not None
    prime, exponent = found
    elements = np.array(list(product(range(prime), repeat=exponent)), dtype=np.int64)
    places = prime ** np.arange(exponent - 1, -1, -1)
    character = np.full(q, -1, dtype=np.int8)
    character[0] = 0
    character[list(_squares(prime, exponent))] = 1
    differences = (elements[:, np.newaxis, :] - elements[np.newaxis, :, :]) % prime
    return np.asarray(character[differences @ places])


def _squares(prime: int, exponent: int) -> set[int]:
    """Return the squares of the nonzero elements of the field, as places in the list of its elements."""
    if exponent == 1:
        return {x * x % prime for x in range(1, prime)}
    nonzero = [e for e in product(range(prime), repeat=exponent) if any(e)]
    for low in product(range(prime), repeat=exponent):
        squares = {_place(_times(e, e, low, prime), prime) for e in nonzero}
        # A modulus that factors makes a ring in which more than two elements share a square, or a square is 0.
        if 0 not in squares and len(squares) == len(nonzero) // 2 and _is_field(nonzero, low, prime):
            return squares
    raise AssertionError("every field of prime power order has an irreducible polynomial")


def _is_field(nonzero: list[tuple[int, ...]], low: tuple[int, ...], prime: int) -> bool:
    """Whether the powers of some element run through all nonzero ones: then none divides zero."""
    one = (0,) * (len(low) - 1) + (1,)
    for element in nonzero:
        power, order = element, 1
        while power != one and any(power) and order <= len(nonzero):
            power, order = _times(power, element, low, prime), order + 1
        if power == one and order == len(nonzero):
            return True
    return False


def _times(
    left: tuple[int, ...], right: tuple[int, ...], low: tuple[int, ...], prime: int
) -> tuple[int, ...]:
    """Return the product of two polynomials (highest power first) modulo ``x^k + low``."""
    size = len(low)
    full = [0] * (2 * size - 1)
    for i, a in enumerate(left):
        for j, b in enumerate(right):
            full[i + j] += a * b
    for i in range(size - 1):
        for j, c in enumerate(low):
            full[i + 1 + j] -= full[i] * c
    return tuple(value % prime for value in full[size - 1 :])


def _place(element: tuple[int, ...], prime: int) -> int:
    place = 0
    for digit in element:
        place = place * prime + digit
    return place
