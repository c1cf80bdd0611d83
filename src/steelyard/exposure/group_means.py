"""Weighted (Hajek) means of columns in each group, under every column of weights, with their influence."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block
from steelyard.data.passes import Engine
from steelyard.data.unit_totals import Product
from steelyard.estimate.estimates import Estimates, Weighing
from steelyard.exposure.balancing import BalancedRows, Balancing
from steelyard.exposure.one_pass import sums_in_one_pass
from steelyard.exposure.weighing import weighted_sums

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class GroupMeans:
    """Means of q columns in the exposed (row 0) and the reference (row 1).

    Attributes
    ----------
    names : q texts
    columns : callable from a block to (n, q)
    weighing : "sampling" or "combined"
    means : (2, q, K)
    weight : (2, K)
        Sums of the weights.
    """

    names: tuple[str, ...]
    columns: Callable[[Block], Floats]
    weighing: Weighing
    means: Floats
    weight: Floats

    def differences(self) -> Estimates:
        """Return exposed minus reference, q estimates."""
        values = self.means[0] - self.means[1]
        return self.contrasts(self.names, values, np.ones(len(self.names)), -np.ones(len(self.names)))

    def contrasts(
        self, names: tuple[str, ...], values: Floats, of_exposed: Floats, of_reference: Floats
    ) -> Estimates:
        """Return functions of the means, one a column, given their derivatives in both means; (q,) each.

        Notes
        -----
        For group ``a`` with weights ``w = s c``: ``u_i = c_i 1(A_i = a) (z_i - m_a) / sum_a w``, plus what the
        propensity's coefficients bring (Lunceford & Davidian 2004; Zeng, Li & Tong 2025).
        """
        means, weight = self.means[:, :, 0], self.weight[:, 0]
        size = len(self.names)
        combine = np.concatenate(
            [
                np.diag(of_exposed / weight[0]),
                np.diag(of_reference / weight[1]),
                [-means[0] * of_exposed / weight[0]],
                [-means[1] * of_reference / weight[1]],
            ]
        )
        if np.array_equal(of_exposed, -of_reference):
            # One factor serves both groups: a third of the products less for the commonest contrast.
            combine = np.concatenate([np.diag(of_exposed), combine[2 * size :]])
            return Estimates(names, values, DifferenceProducts(self.columns, weight), combine, self.weighing)
        return Estimates(names, values, GroupProducts(self.columns), combine, self.weighing)


@dataclass(frozen=True)
class GroupProducts:
    """Each column, and a one, in the exposed and in the reference apart."""

    columns: Callable[[Block], Floats]

    def __call__(self, rows: BalancedRows) -> list[Product]:
        """Return the products of a block's rows."""
        groups = np.concatenate([rows.exposed, ~rows.exposed], axis=1).astype(np.float64)
        return [(groups, self.columns(rows.block)), (groups, np.ones((len(groups), 1)))]


@dataclass(frozen=True)
class DifferenceProducts:
    """Each column over its group's weight, negative in the reference; and ones, by group."""

    columns: Callable[[Block], Floats]
    weight: Floats

    def __call__(self, rows: BalancedRows) -> list[Product]:
        """Return the products of a block's rows."""
        signed = np.where(rows.exposed, 1 / self.weight[0], -1 / self.weight[1])
        groups = np.concatenate([rows.exposed, ~rows.exposed], axis=1).astype(np.float64)
        return [(signed, self.columns(rows.block)), (groups, np.ones((len(groups), 1)))]


def group_means(
    names: tuple[str, ...],
    columns: Callable[[Block], Floats],
    weighing: Weighing,
    balancing: Balancing,
    engine: Engine,
    blocks: Sequence[Block],
) -> GroupMeans:
    """Return the weighted means of ``columns`` in each group, under every column of weights."""
    asked = MeansAsked(names, columns, weighing)
    kernels = {"means": asked.kernel}
    return asked.made_of(
        sums_in_one_pass(f"means, {weighing} weights", kernels, balancing, engine, blocks)["means"]
    )


@dataclass(frozen=True)
class MeansAsked:
    """Means that are asked for: ``kernel`` gives their sums in any pass, ``made_of`` makes means of those."""

    names: tuple[str, ...]
    columns: Callable[[Block], Floats]
    weighing: Weighing

    @property
    def kernel(self) -> SumsKernel:
        """From balanced rows to the sums that the means are made of."""
        return SumsKernel(self.columns, self.weighing)

    def made_of(self, sums: tuple[Floats, Floats]) -> GroupMeans:
        """Return the means of the kernel's sums over all rows."""
        totals, weight = sums
        with np.errstate(divide="ignore", invalid="ignore"):
            means = totals / weight[:, np.newaxis, :]
        return GroupMeans(self.names, self.columns, self.weighing, means, weight)


@dataclass(frozen=True)
class SumsKernel:
    """From balanced rows to the weighted sums of some columns in each group (2, q, K), and of ones (2, K)."""

    columns: Callable[[Block], Floats]
    weighing: Weighing

    def __call__(self, rows: BalancedRows) -> tuple[Floats, Floats]:
        """Return the sums of the rows."""
        z = self.columns(rows.block)
        sums = [weighted_sums(rows, self.weighing, z, members) for members in rows.groups]
        return np.stack([of_values for of_values, _ in sums]), np.stack([of_ones for _, of_ones in sums])
