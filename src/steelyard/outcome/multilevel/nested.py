"""Rows in clusters, and clusters in top clusters, with a weight at each level."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


@dataclass(frozen=True)
class Nested:
    """Rows sorted so that the rows of a cluster, and the clusters of a top cluster, stand together.

    A study's rows are a sequence of these: runs that never split a top-most cluster. Weights of K columns
    hold the full sample in column 0. A level whose weights are the same in every column may give them
    as one column.

    Attributes
    ----------
    y : (n,) float
    x : (n, p) float
        The fixed part's columns.
    z : (n, q) float
        The random part's columns; the first one the constant for a random intercept.
    cluster : (n,) int
        Codes 0..J-1, non-decreasing: the level-2 cluster of each row.
    top : (J,) int or None
        Codes 0..T-1, non-decreasing: the level-3 cluster of each level-2 cluster. None: two levels.
    row_weight : (n, K)
        Level-1 conditional weights, already scaled if asked.
    cluster_weight : (J, K)
        Level-2 conditional weights.
    top_weight : (T, K) or None
    """

    y: Floats
    x: Floats
    z: Floats
    cluster: Integers
    top: Integers | None
    row_weight: Floats
    cluster_weight: Floats
    top_weight: Floats | None

    @property
    def columns(self) -> int:
        """K, the number of columns of weights."""
        weights = (self.row_weight, self.cluster_weight, self.top_weight)
        return max(int(w.shape[1]) for w in weights if w is not None)

    @property
    def cluster_firsts(self) -> Integers:
        """The first row of each cluster, (J,)."""
        return firsts(self.cluster)

    @property
    def top_firsts(self) -> Integers:
        """The first cluster of each top-most cluster; every cluster where there are two levels."""
        return np.arange(len(self.cluster_weight)) if self.top is None else firsts(self.top)

    def cluster_total_weight(self, columns: slice | Integers) -> Floats:
        """Return the product of each cluster's own weight and its top cluster's, (J, columns)."""
        own = picked(self.cluster_weight, columns)
        if self.top is None or self.top_weight is None:
            return own
        return own * picked(self.top_weight, columns)[self.top]


def firsts(codes: Integers) -> Integers:
    """Return where each code begins, for codes 0, 1, ... that never fall and skip none.

    Raises
    ------
    ValueError
        They do fall, or skip one.
    """
    steps = np.diff(codes, prepend=-1)
    if len(codes) and not np.all((steps == 0) | (steps == 1)):
        raise ValueError("codes of clusters must start at 0, never fall, and skip none")
    return np.flatnonzero(steps)


def picked(weights: Floats, columns: slice | Integers) -> Floats:
    """Return some columns of weights; the only column where one stands for all."""
    return weights if weights.shape[1] == 1 else weights[:, columns]


def column_count(rows: Sequence[Nested]) -> int:
    """Return K over all runs."""
    return max(run.columns for run in rows)
