"""Linear algebra for information matrices: a Cholesky solve that says which columns are redundant."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

Floats = NDArray[np.float64]

# Share of a column's sum of squares that the columns before it must leave unexplained.
ALIAS_TOLERANCE = 1e-10
# Eigenvalues of a correlation matrix below this count as zero.
RANK_TOLERANCE = 1e-9


def independent_columns(gram: Floats, tolerance: float = ALIAS_TOLERANCE) -> NDArray[np.bool_]:
    """Return which of p columns are linearly independent of those before them; (p,) bool.

    Parameters
    ----------
    gram : (p, p)
        Cross-products of the columns; earlier columns take precedence.

    Notes
    -----
    Plain Cholesky in the order of the columns, of the matrix scaled to a unit diagonal: the pivot
    of a column is the share of its sum of squares that the earlier ones leave unexplained.
    """
    size = len(gram)
    diagonal = np.sqrt(np.maximum(np.diag(gram), 0))
    keep = np.zeros(size, dtype=bool)
    if size == 0 or not diagonal.any():
        return keep
    scale = np.where(diagonal > 0, diagonal, 1)
    scaled = gram / np.outer(scale, scale)
    factor = np.zeros((size, size))
    for j in range(size):
        row = scaled[j, : j + 1].copy()
        for i in np.flatnonzero(keep[:j]):
            row[i] = (row[i] - factor[j, :i] @ factor[i, :i]) / factor[i, i]
            factor[j, i] = row[i]
        pivot = row[j] - factor[j, :j] @ factor[j, :j]
        if diagonal[j] > 0 and pivot > tolerance:
            keep[j] = True
            factor[j, j] = np.sqrt(pivot)
    return keep


@dataclass(frozen=True)
class Factored:
    """A symmetric positive definite matrix over the kept columns, factored once.

    ``solve`` answers zero for every column that was not kept.
    """

    factor: Floats
    scale: Floats
    keep: NDArray[np.bool_]

    def solve(self, right: Floats) -> Floats:
        """Return the solution for ``right`` of shape (p,) or (p, K)."""
        out = np.zeros_like(right, dtype=np.float64)
        if self.keep.any():
            shape = (-1,) + (1,) * (right.ndim - 1)
            scale = self.scale.reshape(shape)
            out[self.keep] = linalg.cho_solve((self.factor, True), right[self.keep] / scale) / scale
        return out

    def inverse(self) -> Floats:
        """Return the (p, p) generalised inverse: zero in the rows and columns not kept."""
        return self.solve(np.diag(self.keep.astype(np.float64)))


def factored(matrix: Floats, keep: NDArray[np.bool_]) -> Factored:
    """Factor ``matrix`` over the columns in ``keep``.

    Raises
    ------
    numpy.linalg.LinAlgError
        It is not positive definite there.
    """
    part = matrix[np.ix_(keep, keep)]
    diagonal = np.diag(part)
    if not np.all(diagonal > 0) or not np.all(np.isfinite(part)):
        raise np.linalg.LinAlgError("information matrix is not positive definite")
    scale = np.sqrt(diagonal)
    lower = linalg.cholesky(part / np.outer(scale, scale), lower=True) if len(part) else part
    return Factored(lower, scale, keep)


def quadratic_form(vector: Floats, covariance: Floats) -> tuple[float, int]:
    """Return ``v' C^- v`` and the rank of ``C``, which may be singular, as under redundant terms.

    The inverse is the Moore-Penrose one of the correlation matrix, so units of the entries do not
    matter; entries without variance take no part.
    """
    spread = np.sqrt(np.maximum(np.diag(covariance), 0))
    use = spread > 0
    if not use.any():
        return 0.0, 0
    scaled = vector[use] / spread[use]
    correlation = covariance[np.ix_(use, use)] / np.outer(spread[use], spread[use])
    values, vectors = linalg.eigh(correlation)
    kept = values > RANK_TOLERANCE * values[-1]
    along = vectors[:, kept].T @ scaled
    return float(np.sum(along**2 / values[kept])), int(kept.sum())
