"""Exposures of whole clusters: what a row's share of its cluster's weight is, and whether clusters are of one piece."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from steelyard.data.blocks import Block, Rows
from steelyard.data.cluster_means import stage_of_clusters
from steelyard.data.passes import Engine
from steelyard.errors import PlanError
from steelyard.plan import Exposure

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

SHARE = "share of the cluster's weight"
LABELS_SHOWN = 5


def with_cluster_shares(rows: Rows, exposure: Exposure, engine: Engine) -> Rows:
    """Return the rows with each row's share of its cluster's weight as one more column, ``carried[SHARE]``.

    A cluster counts once in a fit under these shares, for its own weight: ``exposure.cluster_weight``, or the mean
    sampling weight of its rows, or one where the fit is without weights.

    Raises
    ------
    PlanError
        The exposure, a covariate or the clusters' weight differs within a cluster, or the design has no such clusters.

    Notes
    -----
    With exposure and covariates the same in all rows of a cluster, the score of a logit on the clusters is the sum of
    their rows' scores under the shares; so are its information and its influence.
    """
    assert exposure.clusters is not None
    stage = stage_of_clusters(rows, exposure.clusters, "exposure.clusters")
    unit = rows.units.ancestor(stage)
    size = int(unit.max()) + 1
    model = rows.exposure_model
    weighed = [] if exposure.cluster_weight is None else [rows.carried[exposure.cluster_weight]]
    index = np.array([*model.index, *weighed])
    looked = engine.run("clusters exposed: look", rows.blocks, _LookKernel(index, unit, size), _merged)
    names = ("the exposure", *model.names, *([exposure.cluster_weight] if exposure.cluster_weight else []))
    _refuse_differing(looked, tuple(map(str, names)), exposure.clusters, rows.units.stages[stage].labels)
    count, total = looked.count, looked.weight
    if not exposure.weighted:
        own = np.ones(size)
    elif weighed:
        own = looked.low[:, -1]
    else:
        own = np.divide(total, count, out=np.zeros(size), where=count > 0)
    share = np.divide(own, count, out=np.zeros(size), where=count > 0)
    blocks = [
        replace(
            block,
            columns=np.column_stack(
                [block.columns, np.where(block.weight > 0, share[unit[block.unit]], 0.0)]
            ),
        )
        for block in rows.blocks
    ]
    notes = () if weighed or not exposure.weighted else (_note(exposure.clusters),)
    return replace(
        rows,
        blocks=blocks,
        names=(*rows.names, SHARE),
        carried={**rows.carried, SHARE: len(rows.names)},
        warnings=(*rows.warnings, *notes),
    )


def weighed_by_share(rows: Rows) -> list[Block]:
    """Return the blocks with the rows' shares of their clusters' weights in place of their sampling weights."""
    place = rows.carried[SHARE]
    return [replace(block, weight=np.ascontiguousarray(block.columns[:, place])) for block in rows.blocks]


def _note(clusters: str) -> str:
    return (
        f"The propensity is modelled on clusters ({clusters}) under the mean sampling weight of their rows: whether a "
        "cluster was unlikely to be drawn, or few of its rows were, is lost. Name exposure.cluster_weight if the "
        "producer has it."
    )


@dataclass(frozen=True)
class _Looked:
    """Ranges of columns by cluster, the exposure first, and rows with weight and their weight."""

    low: Floats
    high: Floats
    count: Floats
    weight: Floats


def _merged(left: _Looked, right: _Looked) -> _Looked:
    return _Looked(
        np.minimum(left.low, right.low),
        np.maximum(left.high, right.high),
        left.count + right.count,
        left.weight + right.weight,
    )


@dataclass(frozen=True)
class _LookKernel:
    index: Integers
    unit: Integers
    size: int

    def __call__(self, block: Block) -> _Looked:
        counted = block.weight > 0
        cluster, weight = self.unit[block.unit][counted], block.weight[counted]
        values = np.column_stack([block.exposure[counted], block.columns[counted][:, self.index]])
        low, high = (np.full((self.size, values.shape[1]), edge) for edge in (np.inf, -np.inf))
        np.minimum.at(low, cluster, values)
        np.maximum.at(high, cluster, values)
        count = np.bincount(cluster, minlength=self.size).astype(np.float64)
        return _Looked(low, high, count, np.bincount(cluster, weight, self.size).astype(np.float64))


def _refuse_differing(
    looked: _Looked, names: tuple[str, ...], clusters: str, labels: NDArray[np.str_]
) -> None:
    differs = looked.high > looked.low + 1e-9 * np.maximum(np.abs(looked.high), np.abs(looked.low))
    differs &= (looked.count > 0)[:, np.newaxis]
    for column, name in enumerate(names):
        where = np.flatnonzero(differs[:, column])
        if len(where):
            shown = ", ".join(labels[where[:LABELS_SHOWN]])
            more = f" and {len(where) - LABELS_SHOWN:,} more" if len(where) > LABELS_SHOWN else ""
            raise PlanError(
                f"exposure.clusters says that whole clusters are exposed, and {name} differs within {len(where):,} of "
                f"them ({clusters} {shown}{more}).",
                mend="Use covariates of the clusters, such as their means; leave exposure.clusters out if persons are "
                "exposed one by one.",
            )
