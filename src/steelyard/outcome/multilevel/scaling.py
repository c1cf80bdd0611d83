"""Weights for each level: level-1 weights scaled within clusters, and levels made from an overall weight.

A weight at each level is the inverse of a conditional probability: of the cluster, and of the row given
its cluster. Only ratios between clusters matter for the cluster's weight, but for the row's weight its
size within the cluster matters too, because it says how much is known about the cluster: hence the
scaling. Nothing here knows what the weights are used for.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import get_args

import numpy as np
from numpy.typing import NDArray

from steelyard.errors import PlanError
from steelyard.outcome.multilevel.nested import firsts
from steelyard.plan import Scaling

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]


def scaled(weight: Floats, group: Integers, method: Scaling) -> Floats:
    """Return weights scaled within groups, every column on its own; (n, K).

    Parameters
    ----------
    weight : (n, K)
        Conditional weights, 0 or more.
    group : (n,) int
        Codes 0, 1, ... that never fall: the cluster of each row (or the top cluster of each cluster).
    method : "size", "effective" or "none"

    Raises
    ------
    PlanError
        The method is none of these.

    Notes
    -----
    With sums over the rows of one group that carry weight, n of them:

    - size: ``w_i n / sum w``. The weights add up to the number of rows in the sample (Pfeffermann et al.
      1998, method 2; Rabe-Hesketh & Skrondal 2006, method 1; Asparouhov 2006; Carle 2009, method A).
    - effective: ``w_i sum w / sum w^2``. They add up to the effective size ``(sum w)^2 / sum w^2`` of Kish
      (1965) (Pfeffermann et al. 1998, method 1; Asparouhov 2006; Carle 2009, method B).
    - none: as they are. Variances between clusters are then overstated where clusters are small.

    A group without weight keeps its zeros.
    """
    known(method)
    if method == "none":
        return weight
    factor = _ratio(*_numerator_and_denominator(weight, group, method))
    return np.asarray(weight * factor[group])


def carried_to_unscaled(derivative: Floats, weight: Floats, group: Integers, method: Scaling) -> Floats:
    """Return derivatives by the logarithms of the unscaled weights, (n, m), from those by the scaled ones.

    Parameters
    ----------
    derivative : (n, m)
        Of m numbers, by the logarithm of each scaled weight.
    weight : (n,)
        The unscaled weights.
    group, method
        As in :func:`scaled`.

    Notes
    -----
    The scaled weights of a group all move with each of its weights. With D the group's sum of
    ``derivative`` and ``d_k`` that of row k: ``d_k - D w_k / sum w`` for "size", and
    ``d_k + D (w_k / sum w - 2 w_k^2 / sum w^2)`` for "effective".
    """
    known(method)
    if method == "none":
        return derivative
    first = firsts(group)
    total = np.add.reduceat(derivative, first, axis=0)[group]
    share = _share(weight, group, first)
    move = -share if method == "size" else share - 2 * _share(weight**2, group, first)
    return np.asarray(derivative + move[:, np.newaxis] * total)


@dataclass(frozen=True)
class LevelWeights:
    """A weight for each level: rows (n, K), clusters (J, K), and top clusters (T, K) or None."""

    row: Floats
    cluster: Floats
    top: Floats | None


def from_overall(overall: Floats, cluster: Integers, top: Integers | None) -> LevelWeights:
    """Return weights of all levels made from an overall weight, where the extract has no others.

    Parameters
    ----------
    overall : (n, K)
        The product of all levels' weights, as surveys deliver it.
    cluster : (n,) int
        The cluster of each row: codes 0, 1, ... that never fall.
    top : (J,) int or None
        The top cluster of each cluster.

    Notes
    -----
    The cluster's weight is the mean overall weight of its rows, the row's what remains, so that their
    product is the overall weight and the rows' weights add up to the cluster's rows (Goldstein 2011,
    ch. 3; Kovacevic & Rai 2003); likewise one level up. Rows without weight count in no mean.

    What is lost: a high mean may come from a cluster that was unlikely to be drawn, or from few rows drawn
    in a large one, and the overall weight cannot tell the two apart. The rule takes it for the former. Where
    clusters were drawn with probability proportional to size, or sampled at unlike rates within, the
    clusters' weights are wrong, and with them above all the variances between clusters and the intercept.
    """
    row, means = _split(overall, cluster)
    if top is None:
        return LevelWeights(row, means, None)
    within_top, means = _split(means, top)
    return LevelWeights(row, within_top, means)


def known(method: str) -> None:
    """Refuse a scaling that is none of the three."""
    if method not in get_args(Scaling):
        raise PlanError(
            f'the scaling of level-1 weights is "{method}", which is not known.',
            mend='Use "size", "effective" or "none".',
        )


def _numerator_and_denominator(weight: Floats, group: Integers, method: Scaling) -> tuple[Floats, Floats]:
    first = firsts(group)
    total = np.add.reduceat(weight, first, axis=0)
    if method == "size":
        return np.add.reduceat((weight > 0).astype(np.float64), first, axis=0), total
    # Relative to the group's largest, so that no square leaves the range of numbers.
    largest = np.maximum.reduceat(weight, first, axis=0)
    relative = _ratio(weight, largest[group])
    return np.add.reduceat(relative, first, axis=0), np.add.reduceat(relative**2, first, axis=0) * largest


def _split(weight: Floats, group: Integers) -> tuple[Floats, Floats]:
    """Return what remains of each weight after its group's mean, and the mean."""
    count, total = _numerator_and_denominator(weight, group, "size")
    mean = _ratio(total, count)
    return _ratio(weight, mean[group]), mean


def _share(value: Floats, group: Integers, first: Integers) -> Floats:
    """Return each value's share of its group's sum."""
    return _ratio(value, np.add.reduceat(value, first)[group])


def _ratio(numerator: Floats, denominator: Floats) -> Floats:
    """Return the quotient, zero where the denominator is."""
    return np.divide(numerator, denominator, out=np.zeros_like(denominator), where=denominator != 0)
