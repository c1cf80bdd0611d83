"""Weighted (Hajek) means of columns in each group, under every column of weights, with their influence."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.estimate.estimates import Estimates
from steelyard.exposure.balancing import BalancedRows, Balancing
from steelyard.exposure.weighing import Weighing

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class GroupMeans:
    """Means of q columns in the exposed (row 0) and the reference (row 1).

    Attributes
    ----------
    names : q texts
    columns : callable from a block to (n, q)
    weighing : Weighing
    means : (2, q, K)
    weight : (2, K)
        Sums of the weights.
    drift : (2, q, P)
        Derivatives of the full sample's means in the nuisance parameters; zero before balancing, and
        where the propensity counts as known.
    """

    names: tuple[str, ...]
    columns: Callable[[Block], Floats]
    weighing: Weighing
    means: Floats
    weight: Floats
    drift: Floats

    def known(self) -> GroupMeans:
        """Return the same means with the propensity taken as known."""
        return replace(self, weighing=replace(self.weighing, known=True))

    def differences(self) -> Estimates:
        """Return exposed minus reference, q estimates."""
        influence = MeansInfluence(self, np.eye(len(self.names)), -np.eye(len(self.names)))
        return Estimates(self.names, self.means[0] - self.means[1], influence)


@dataclass(frozen=True)
class MeansInfluence:
    """Influence of linear functions of the group means: ``of_exposed @ m1 + of_reference @ m0``; (k, q) each.

    Notes
    -----
    For group ``a`` with weights ``w = s c`` and nuisance parameters ``g`` (the propensity's coefficients):
    ``u_i = c_i 1(A_i = a) (z_i - m_a) / sum_a w + (dm_a/dg) u_i(g)`` (Lunceford & Davidian 2004;
    Zeng, Li & Tong 2025).
    """

    group_means: GroupMeans
    of_exposed: Floats
    of_reference: Floats

    def __call__(self, rows: BalancedRows) -> Floats:
        """Return the (n, k) influences in a block's rows."""
        means, weight = self.group_means.means[:, :, 0], self.group_means.weight[:, 0]
        z = self.group_means.columns(rows.block)
        is_exposed = rows.exposed
        relative = self.group_means.weighing.relative(rows)[:, np.newaxis]
        own = relative * np.where(is_exposed, (z - means[0]) / weight[0], (z - means[1]) / weight[1])
        influence = np.where(is_exposed, own @ self.of_exposed.T, own @ self.of_reference.T)
        if self.group_means.weighing.estimated():
            drift = self.group_means.drift
            both = self.of_exposed @ drift[0] + self.of_reference @ drift[1]
            influence += rows.nuisance_influence @ both.T
        return np.asarray(influence)


def group_means(
    names: tuple[str, ...],
    columns: Callable[[Block], Floats],
    weighing: Weighing,
    balancing: Balancing,
    engine: Engine,
    blocks: Sequence[Block],
) -> GroupMeans:
    """Return the weighted means of ``columns`` in each group, under every column of weights."""
    what = "means, combined weights" if weighing.combined else "means, sampling weights"
    sums, weight = engine.run(what, blocks, _SumsKernel(columns, weighing, balancing))
    with np.errstate(divide="ignore", invalid="ignore"):
        means = sums / weight[:, np.newaxis, :]
    drift = np.zeros((2, len(names), balancing.nuisances))
    if weighing.estimated():
        kernel = _DriftKernel(columns, balancing, means[:, :, 0])
        drift = engine.run("means, propensity estimated", blocks, kernel) / weight[:, :1, np.newaxis]
    return GroupMeans(names, columns, weighing, means, weight, drift)


@dataclass(frozen=True)
class _SumsKernel:
    columns: Callable[[Block], Floats]
    weighing: Weighing
    balancing: Balancing

    def __call__(self, block: Block) -> tuple[Floats, Floats]:
        rows = self.balancing.rows(block)
        weights, z = self.weighing.weights(rows), self.columns(block)
        of_exposed = np.where(rows.exposed, weights, 0)
        of_reference = np.where(rows.exposed, 0, weights)
        return (
            np.stack([z.T @ of_exposed, z.T @ of_reference]),
            np.stack([of_exposed.sum(axis=0), of_reference.sum(axis=0)]),
        )


@dataclass(frozen=True)
class _DriftKernel:
    """Sums of ``s (dc/dg) (z - m_a)`` by group, (2, q, P)."""

    columns: Callable[[Block], Floats]
    balancing: Balancing
    means: Floats

    def __call__(self, block: Block) -> Floats:
        rows = self.balancing.rows(block)
        z, slopes = self.columns(block), rows.slopes
        gap = block.weight[:, np.newaxis] * (z - np.where(rows.exposed, self.means[0], self.means[1]))
        return np.stack(
            [np.where(rows.exposed, gap, 0).T @ slopes, np.where(rows.exposed, 0, gap).T @ slopes]
        )
