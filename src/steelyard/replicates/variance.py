"""The variance of replicates: squared deviations from the full sample's estimates, times their factors."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from steelyard.errors import EstimationError
from steelyard.replicates.scheme import Scheme

Floats = NDArray[np.float64]

REASONS_SHOWN = 3


@dataclass(frozen=True)
class Replicated:
    """Estimates under every replicate that did not fail.

    Attributes
    ----------
    scheme : Scheme
        With the factors of the replicates that are left.
    full : (k,)
    values : (k, R)
        NaN in the columns of replicates that failed.
    failed : mapping
        Replicate (from 0) -> why.
    """

    scheme: Scheme
    full: Floats
    values: Floats
    failed: Mapping[int, str]

    def covariance(self) -> Floats:
        """Return the covariance (k, k).

        Notes
        -----
        ``V = a sum_r a_r (theta_r - theta)(theta_r - theta)'`` (Wolter 2007) with ``theta`` the full sample's
        estimate, or the mean of the replicates where the producer says so. Where F of R replicates have failed,
        the rest count for ``R / (R - F)`` times as much.
        """
        left = np.array([r for r in range(self.scheme.count) if r not in self.failed], dtype=np.int64)
        values = self.values[:, left]
        centre = values.mean(axis=1) if self.scheme.about_mean else self.full
        deviations = (values - centre[:, np.newaxis]) * np.sqrt(self.scheme.factors[left])
        weight = self.scheme.factor * self.scheme.count / len(left)
        return np.asarray(weight * (deviations @ deviations.T))

    def warnings(self) -> tuple[str, ...]:
        """Return what a reader should be told about replicates that failed."""
        if not self.failed:
            return ()
        return (
            f"{len(self.failed)} of {self.scheme.count} replicates failed and were left out, the others counting "
            f"for more: {_told(self.failed)}. Standard errors are less certain for it.",
        )


def replicated(
    scheme: Scheme, full: Floats, values: Floats, failed: Mapping[int, str], most_failed: float
) -> Replicated:
    """Return the replicates' estimates, or refuse where too many have failed.

    A replicate in which any estimate is not finite counts as failed.

    Raises
    ------
    EstimationError
        More than the share ``most_failed`` of the replicates failed, or fewer than two are left.
    """
    failed = dict(failed)
    for r in np.flatnonzero(~np.isfinite(values).all(axis=0)).tolist():
        failed.setdefault(
            r, "an estimate is not defined: a group is empty, or its mean allows no ratio or odds"
        )
    if len(failed) > most_failed * scheme.count or scheme.count - len(failed) < 2:
        raise EstimationError(
            f"{len(failed)} of {scheme.count} replicates failed, more than variance.most_failed = {most_failed:g} "
            f"allows: {_told(failed)}.",
            mend='Simplify the exposure formula or join rare categories; variance.method = "fay" keeps every PSU '
            "in every replicate; linearization needs no replicate.",
        )
    return Replicated(scheme, full, values, dict(sorted(failed.items())))


def _told(failed: Mapping[int, str]) -> str:
    """Name the first replicates that failed, counted from 1, with the reason."""
    shown = [f"replicate {r + 1} ({why.rstrip('.')})" for r, why in sorted(failed.items())[:REASONS_SHOWN]]
    more = len(failed) - len(shown)
    return "; ".join(shown) + (f"; and {more} more" if more else "")
