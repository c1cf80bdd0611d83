"""The weighted Kolmogorov-Smirnov distance of each term between the groups, before and after.

The distance does not add up over blocks: it needs a column in one piece. Columns are gathered a few
at a time, so that no more than those are held beside the design rows.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.balance.columns import TermColumns
from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.exposure.balancing import Balancing

Floats = NDArray[np.float64]

COLUMNS_GATHERED = 4


def distances(
    columns: TermColumns, balancing: Balancing, engine: Engine, blocks: Sequence[Block]
) -> tuple[Floats, Floats]:
    """Return the distance of every term before and after, (q,) each.

    Notes
    -----
    ``max over t of |F1(t) - F0(t)|`` with ``F`` the weighted distribution functions of the groups.
    """
    before, after = _gathered(engine.run("distributions: weights", blocks, _SignedWeights(balancing)))
    of_before, of_after = np.zeros(len(columns.terms)), np.zeros(len(columns.terms))
    places = tuple(range(len(columns.terms)))
    for first in range(0, len(places), COLUMNS_GATHERED):
        some = places[first : first + COLUMNS_GATHERED]
        gathered = _gathered(engine.run("distributions", blocks, _Values(columns.only(some))))
        found = engine.map(_Distance(before, after), gathered)
        for place, (b, a) in zip(some, found, strict=True):
            of_before[place], of_after[place] = b, a
    return of_before, of_after


def _gathered(parts: list[tuple[Floats, ...]]) -> list[Floats]:
    return [np.concatenate(pieces) for pieces in zip(*parts, strict=True)]


def signed_shares(weight: Floats, exposure: Floats) -> Floats:
    """Return each row's share of its group's weight, positive for exposed, negative for reference; (n,)."""
    exposed = np.where(exposure == 1, weight, 0)
    reference = np.where(exposure == 1, 0, weight)
    shares: Floats = exposed / exposed.sum() - reference / reference.sum()
    return shares


def distance(values: Floats, shares: tuple[Floats, ...]) -> tuple[float, ...]:
    """Return the largest gap between the groups' distribution functions, for each of several ``shares``, (n,)."""
    low = values.min()
    at_low = values == low
    if np.all(at_low | (values == values.max())):
        return tuple(0.0 if at_low.all() else float(abs(share[at_low].sum())) for share in shares)
    order = np.argsort(values)
    ordered = values[order]
    last_of_ties = np.append(ordered[1:] != ordered[:-1], True)
    tied = not last_of_ties.all()
    found = []
    for share in shares:
        gap = np.cumsum(share[order])
        gap = gap[last_of_ties] if tied else gap
        found.append(float(max(gap.max(), -gap.min())))
    return tuple(found)


@dataclass(frozen=True)
class _SignedWeights:
    balancing: Balancing

    def __call__(self, block: Block) -> list[tuple[Floats, ...]]:
        sign = np.where(block.exposure == 1, 1.0, -1.0)
        return [(sign * block.weight, sign * self.balancing(block)[:, 0])]


@dataclass(frozen=True)
class _Values:
    columns: TermColumns

    def __call__(self, block: Block) -> list[tuple[Floats, ...]]:
        return [tuple(np.ascontiguousarray(self.columns(block).T))]


class _Distance:
    def __init__(self, before: Floats, after: Floats) -> None:
        self._shares = (_shares(before), _shares(after))

    def __call__(self, values: Floats) -> tuple[float, ...]:
        return distance(values, self._shares)


def _shares(signed: Floats) -> Floats:
    return signed_shares(np.abs(signed), (signed > 0).astype(float))
