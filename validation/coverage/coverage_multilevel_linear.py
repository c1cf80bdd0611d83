"""Coverage of 95% intervals of a weighted linear multilevel model under sampling that is informative at both levels.

    python validation/coverage/coverage_multilevel_linear.py [--samples 1000] [--strong]

A population of clusters is made once. Clusters are drawn with chances that fall with their own effect, rows
within with chances that fall with their residual, so that a fit without weights is biased. For each parameter:
its value in the population (the same model fitted to all of it), then for weights left out, and for each
scaling of the level-1 weights: bias over the Monte Carlo standard deviation, and for the weighted fits mean
linearized standard error over that deviation, and the share of intervals that hold the value. Monte Carlo error
of a share of 0.95: 0.007 for 1,000.

Variances are where few rows a cluster show: the residual variance is biased by about the share 1 / rows of a
cluster times how informative the rows' sampling is, however many clusters there are. ``--strong`` draws fewer
rows, fewer clusters, and far more informatively, so that this can be seen.
"""

from __future__ import annotations

import argparse
from concurrent.futures import ProcessPoolExecutor
from functools import partial

import numpy as np
from scipy import stats

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.linear import fit_linear
from steelyard.outcome.multilevel.linear_influence import Scores
from steelyard.outcome.multilevel.linear_standard import LinearModel
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.scaling import scaled

CLUSTERS, MEMBERS = 3000, 200
# Clusters and rows in each that are drawn on average, and how chances fall with the cluster's effect and the residual.
USUAL, STRONG = (200, 40, 0.4, 0.2), (100, 20, 0.7, 0.5)
MODEL = LinearModel(("Intercept", "x", "exposed"), ("Intercept",), ("cluster",), "the model")
WAYS = ("no weights", "size", "effective", "none")


def population(seed: int = 20262) -> dict[str, np.ndarray]:
    """Return 600,000 rows in 3,000 clusters; clusters are exposed or not."""
    rng = np.random.default_rng(seed)
    cluster = np.repeat(np.arange(CLUSTERS), MEMBERS)
    own, exposed = rng.normal(0, 0.7, CLUSTERS), (rng.random(CLUSTERS) < 0.5).astype(float)
    x, residual = rng.normal(size=len(cluster)), rng.normal(size=len(cluster))
    y = 1 + 0.5 * x + 0.4 * exposed[cluster] + own[cluster] + residual
    return {"cluster": cluster, "own": own, "exposed": exposed, "x": x, "residual": residual, "y": y}


def run_of(rows: np.ndarray, sizes: np.ndarray, row_weight: np.ndarray, own_weight: np.ndarray) -> Nested:
    """Return chosen rows of the population, clusters of given sizes, under weights."""
    exposed = PEOPLE["exposed"][PEOPLE["cluster"][rows]]
    n = len(rows)
    return Nested(
        PEOPLE["y"][rows],
        np.column_stack([np.ones(n), PEOPLE["x"][rows], exposed]),
        np.ones((n, 1)),
        np.repeat(np.arange(len(sizes)), sizes),
        None,
        row_weight[:, np.newaxis],
        own_weight[:, np.newaxis],
        None,
    )


def one_sample(setting: tuple[int, int, float, float], seed: int) -> list[tuple[np.ndarray, np.ndarray]]:
    """Return estimates and standard errors for each way of weighting: all five parameters."""
    rng = np.random.default_rng(seed)
    clusters, members, by_own, by_residual = setting
    chance = np.exp(-by_own * PEOPLE["own"])
    chance = clusters * chance / chance.sum()
    chosen = np.flatnonzero(rng.random(CLUSTERS) < chance)
    rows, sizes, weights = [], [], []
    for j in chosen:
        inside = np.arange(j * MEMBERS, (j + 1) * MEMBERS)
        likely = np.exp(-by_residual * PEOPLE["residual"][inside])
        likely = members * likely / likely.sum()
        taken = rng.random(MEMBERS) < likely
        rows.append(inside[taken])
        sizes.append(int(taken.sum()))
        weights.append(1 / likely[taken])
    sizes = np.array(sizes)
    row_weight, place = np.concatenate(weights), np.repeat(np.arange(len(sizes)), sizes)
    found = []
    for way in WAYS:
        if way == "no weights":
            run = run_of(np.concatenate(rows), sizes, np.ones(len(place)), np.ones(len(sizes)))
        else:
            own = scaled(row_weight[:, np.newaxis], place, way)[:, 0]
            run = run_of(np.concatenate(rows), sizes, own, 1 / chance[chosen])
        fit = fit_linear(MODEL, Engine(), [run])
        influence = Scores(fit)(run) @ fit.combine
        n = len(influence)
        variance = n / (n - 1) * np.sum((influence - influence.mean(axis=0)) ** 2, axis=0)
        found.append((fit.values[:, 0], np.sqrt(variance)))
    return found


PEOPLE = population()


def main() -> None:
    """Draw the samples and print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--samples", type=int, default=1000)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--strong", action="store_true")
    arguments = parser.parse_args()
    setting = STRONG if arguments.strong else USUAL
    every = np.arange(CLUSTERS * MEMBERS)
    whole = run_of(every, np.full(CLUSTERS, MEMBERS), np.ones(len(every)), np.ones(CLUSTERS))
    fit = fit_linear(MODEL, Engine(), [whole])
    with ProcessPoolExecutor(arguments.workers) as pool:
        runs = list(pool.map(partial(one_sample, setting), range(arguments.samples), chunksize=10))
    reach = stats.t.ppf(0.975, setting[0] - 1)
    print(f"{arguments.samples} samples of about {setting[0]} clusters and {setting[0] * setting[1]:,} rows")
    print(
        "parameter                        weights     population     mean   bias/sd   se/sd   coverage (MC error)"
    )
    for k, name in enumerate(fit.names):
        for way, label in enumerate(WAYS):
            estimates = np.array([r[way][0][k] for r in runs])
            errors = np.array([r[way][1][k] for r in runs])
            true, sd = fit.values[k, 0], estimates.std(ddof=1)
            share = np.mean(np.abs(estimates - true) <= reach * errors)
            print(
                f"{name:<33}{label:<12}{true:10.3f}{estimates.mean():9.3f}{(estimates.mean() - true) / sd:10.2f}"
                f"{errors.mean() / sd:8.2f}{share:11.3f} ({np.sqrt(share * (1 - share) / len(runs)):.3f})"
            )


if __name__ == "__main__":
    main()
