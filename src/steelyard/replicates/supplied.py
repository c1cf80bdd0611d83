"""Replicate weights that came with the extract, and what their producer says of them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

from steelyard.data.blocks import Block, Rows
from steelyard.data.passes import Engine
from steelyard.plan import SuppliedReplicates
from steelyard.replicates.scheme import FULL_SAMPLE, Scheme

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

# Directions whose share of the replicates' squared deviations is below this are rounding of the file.
RANK_TOLERANCE = 1e-9


@dataclass(frozen=True)
class SuppliedColumns:
    """The full sample's weights and the extract's replicate weights; ``which`` (K,) as in ``MadeColumns``."""

    which: Integers

    @property
    def count(self) -> int:
        """How many columns there are."""
        return len(self.which)

    def __call__(self, block: Block, out: Floats | None = None) -> Floats:
        """Return the block's weights, (n, K)."""
        assert block.replicates is not None
        weights = np.empty((len(block), len(self.which))) if out is None else out
        full = self.which == FULL_SAMPLE
        weights[:, full] = block.weight[:, np.newaxis]
        weights[:, ~full] = block.replicates[:, self.which[~full]]
        return weights

    def only(self, columns: Sequence[int] | Integers) -> SuppliedColumns:
        """Return some of the columns."""
        return SuppliedColumns(self.which[list(columns)])


def supplied_scheme(
    supplied: SuppliedReplicates, count: int, rows: Rows, engine: Engine, design_df: float | None
) -> Scheme:
    """Return the scheme of supplied replicates.

    Parameters
    ----------
    count : replicates, R
    design_df : degrees of freedom of the design, where the plan names strata or clusters

    Notes
    -----
    The producer's factors come first. Without them ``a`` is 1 / R for half-samples and the bootstrap,
    ``1 / (R (1 - fay)^2)`` for Fay's method and 4 / R for successive differences. Degrees of freedom, where the
    producer states none, are the rank of the replicates' deviations from the full weights in the domain, which
    is PSUs minus strata for jackknifes and balanced half-samples; never more than the design's own.
    """
    overall = supplied.factor
    if overall is None:
        fay = supplied.fay or 0.0
        overall = {
            "jackknife": 1.0,
            "brr": 1 / count,
            "fay": 1 / (count * (1 - fay) ** 2),
            "bootstrap": 1 / count,
            "successive-difference": 4 / count,
        }[supplied.method]
    factors = np.array(supplied.replicate_factors) if supplied.replicate_factors else np.ones(count)
    df = supplied.df
    notes: tuple[str, ...] = ()
    if df is None:
        df = _rank(engine.run("replicates: rank", rows.blocks, _DeviationsKernel(count)))
        if design_df is not None:
            df = min(df, design_df)
        if supplied.method in ("bootstrap", "successive-difference"):
            df = min(df, count - 1.0)
        notes = (
            f"The producer's degrees of freedom are not given: {df:g} are taken, the rank of the replicates' "
            "deviations from the full weights in the domain.",
        )
    return Scheme(
        supplied.method,
        "supplied",
        count,
        overall,
        factors,
        float(df),
        supplied.centre == "replicate-mean",
        SuppliedColumns(np.arange(-1, count, dtype=np.int64)),
        notes,
        () if supplied.fay is None else (("fay", supplied.fay),),
    )


def _rank(products: Floats) -> float:
    values = linalg.eigvalsh(products)
    return float(np.sum(values > RANK_TOLERANCE * max(values[-1], 0)))


@dataclass(frozen=True)
class _DeviationsKernel:
    """Cross-products of the replicates' deviations from the full weights, (R, R)."""

    count: int

    def __call__(self, block: Block) -> Floats:
        assert block.replicates is not None
        deviations = block.replicates - block.weight[:, np.newaxis]
        return np.asarray(deviations.T @ deviations)
