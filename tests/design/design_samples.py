"""Samples for the tests of the design floor, and their variance by brute force.

``Sample`` holds a sample as ids and populations row by row. ``rows`` makes the package's shapes of it;
``brute_variance`` walks the ids in loops, straight from the formula, and shares no code with the package.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import groupby

import numpy as np

from steelyard.data.blocks import Block, Model, Rows
from steelyard.data.units import Stage, Units


@dataclass
class Sample:
    """n rows: ``ids`` (n, 1 + cluster stages) from the stratum down; ``populations`` (n, given stages).

    ``u`` (n, k) is the influence, which rows outside ``inside`` (n,) do not have.
    """

    ids: np.ndarray
    populations: np.ndarray
    weight: np.ndarray
    u: np.ndarray
    inside: np.ndarray

    def __len__(self):
        return len(self.ids)

    @property
    def z(self):
        return np.where(self.inside[:, None], self.weight[:, None] * self.u, 0.0)

    def take(self, order):
        names = ("ids", "populations", "weight", "u", "inside")
        return Sample(**{name: getattr(self, name)[order] for name in names})

    def changed(self, **fields):
        return replace(self, **fields)


def influence(block):
    """The columns of a block are the influence itself."""
    return block.columns


def made_sample(
    seed, depth=1, given=0, strata=4, psus=(2, 5), below=(1, 4), k=3, domain=False, unnested=False
):
    """A random sample of ``depth`` stages of clusters (0: rows are PSUs), ``given`` stages with populations.

    With a domain some PSUs and the whole of stratum 1 have no row in it. Ids start at 0 within the unit above
    unless ``unnested``; rows are shuffled.
    """
    rng = np.random.default_rng(seed)
    ids, populations = [], []

    def draw(prefix, sizes):
        level = len(prefix) - 1
        low, high = psus if level == 0 else below
        count = int(rng.integers(low, high + 1))
        population = count + int(rng.integers(0, 6)) + (1 if level == 0 else 0)
        for unit in range(count):
            if level == depth:
                ids.append(prefix)
                populations.append([*sizes, population])
            else:
                draw([*prefix, unit], [*sizes, population])

    for h in range(strata):
        draw([h], [])
    order = rng.permutation(len(ids))
    ids, populations = np.array(ids)[order], np.array(populations, dtype=float)[order, :given]
    if unnested and depth:
        ids[:, -1] += 100 * ids[:, -2]
    n = len(ids)
    inside = np.ones(n, dtype=bool)
    if domain:
        of_psu = (7 * ids[:, 0] + ids[:, min(1, depth)]) % 3 > 0 if depth else rng.random(n) < 0.7
        inside = of_psu & (rng.random(n) < 0.8) & (ids[:, 0] != 1)
        inside[np.flatnonzero(ids[:, 0] != 1)[:2]] = True
    return Sample(ids, populations, np.exp(rng.normal(size=n)), rng.normal(size=(n, k)) + 0.5, inside)


def units_of(sample):
    """The sampling units of a sample, as the data floor would number them."""
    stages, parent = [], np.zeros(1, dtype=np.int64)
    for level in range(sample.ids.shape[1]):
        found, first, unit = np.unique(
            sample.ids[:, : level + 1], axis=0, return_index=True, return_inverse=True
        )
        unit = unit.reshape(-1)
        given = level < sample.populations.shape[1]
        stages.append(
            Stage(
                columns=(("stratum",), ("area",), ("household",), ("room",))[level],
                labels=np.array([f"{'hahr'[level]}{row[-1]}" for row in found]),
                parent=np.zeros(len(found), dtype=np.int64) if level == 0 else parent[first],
                rows=np.bincount(unit, minlength=len(found)),
                domain_rows=np.bincount(unit[sample.inside], minlength=len(found)),
                first_rows=first,
                population=sample.populations[first, level] if given else None,
            )
        )
        parent = unit
    return Units(tuple(stages)), unit


def rows_of(sample, block_rows=16):
    """The design rows of a sample: blocks of its domain rows whose columns are the influence."""
    units, unit = units_of(sample)
    blocks = []
    for start in range(0, len(sample), block_rows):
        kept = start + np.flatnonzero(sample.inside[start : start + block_rows])
        if len(kept):
            columns = np.ascontiguousarray(sample.u[kept])
            blocks.append(Block(kept, columns, np.zeros(len(kept)), sample.weight[kept], unit[kept]))
    names = tuple(f"u{j}" for j in range(sample.u.shape[1]))
    return Rows(
        blocks=blocks,
        names=names,
        exposure_model=Model("a ~ 1", names[:1], (0,), None),
        outcome_models=(),
        outcomes=(),
        terms=(),
        levels=("1", "0"),
        units=units,
        total=len(sample),
        exclusions={},
    )


def brute_variance(sample, single_psu="refuse"):
    """V of design.md section 6 in loops over ids, each treatment of a lone PSU written out."""
    z, ids = sample.z, sample.ids
    k, last = z.shape[1], ids.shape[1] - 1

    def children(members, level):
        if level == last:
            return [np.array([i]) for i in members]
        return [members[ids[members, level + 1] == c] for c in np.unique(ids[members, level + 1])]

    def population(members, level):
        return sample.populations[members[0], level] if level < sample.populations.shape[1] else None

    def spread(groups, centre):
        v = np.zeros((k, k))
        for g in groups:
            d = z[g].sum(axis=0) - centre
            v += np.outer(d, d)
        return v

    def within(members, level, share, certain=False):
        size = population(members, level)
        if size is None and not (certain and level < last):
            return np.zeros((k, k))
        parts = children(members, level)
        m = len(parts)
        f = 0.0 if size is None else m / size
        v = np.zeros((k, k))
        if m > 1:
            mean = sum(z[part].sum(axis=0) for part in parts) / m
            v += share * (1 - f) * m / (m - 1) * spread(parts, mean)
        if level < last:
            for part in parts:
                v += within(part, level + 1, share * f)
        return v

    strata = {h: np.flatnonzero(ids[:, 0] == h) for h in np.unique(ids[:, 0])}
    psus = {h: children(members, 0) for h, members in strata.items()}
    sure = {h for h in strata if len(psus[h]) == 1 and population(strata[h], 0) == 1}
    every = [p for h in psus for p in psus[h]]
    grand = sum(z[p].sum(axis=0) for p in every) / len(every)
    joined, waiting = [], None
    if single_psu == "collapse":
        for lone, run in groupby([h for h in psus if h not in sure], key=lambda h: len(psus[h]) == 1):
            run = list(run)
            if lone and len(run) > 1:
                joined.append(run)
            elif lone:
                waiting = run[0]
            else:
                for h in run:
                    joined.append([h] if waiting is None else [waiting, h])
                    waiting = None
        if waiting is not None:
            joined[-1].append(waiting)
    else:
        joined = [[h] for h in psus if h not in sure]
    v = np.zeros((k, k))
    for h in sure:
        v += within(psus[h][0], 1, 1.0, certain=True) if last or sample.populations.shape[1] > 1 else 0
    for group in joined:
        parts = [p for h in group for p in psus[h]]
        n = len(parts)
        sizes = [population(strata[h], 0) for h in group]
        f = 0.0 if sizes[0] is None else n / sum(sizes)
        if n == 1 and single_psu == "self-representing":
            v += within(parts[0], 1, 1.0, certain=True) if last else 0
            continue
        if n == 1:
            assert single_psu == "recentre"
            v += (1 - f) * spread(parts, grand)
        else:
            v += (1 - f) * n / (n - 1) * spread(parts, sum(z[p].sum(axis=0) for p in parts) / n)
        if last:
            for p in parts:
                v += within(p, 1, f)
    return v
