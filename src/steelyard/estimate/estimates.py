"""What an estimator hands over: a column of estimates for every column of weights, and their influence."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Estimates:
    """k estimates under K columns of weights.

    Attributes
    ----------
    names : k texts
    values : (k, K)
        Column 0 is the full sample.
    influence : callable
        From the rows of a block, as the estimator's floor sees them, to (n, k): the influence ``u`` of
        each row on column 0, with ``estimate - truth`` near ``sum(s u)`` (Binder 1983). Picklable.
    """

    names: tuple[str, ...]
    values: Floats
    influence: Callable[[Any], Floats]

    @property
    def full_sample(self) -> Floats:
        """The estimates of the full sample, (k,)."""
        return self.values[:, 0]
