"""A linear random-intercept model by weighted pseudo-likelihood, beside one statsmodels MixedLM fit on the same rows.

    python validation/benchmarks/bench_multilevel_linear.py [--rows 100000] [--clusters 2000] [--repeats 5]

Rows are in memory, as MixedLM needs them; ours is weighted, MixedLM is not, with all weights one both agree.
Prints seconds (medians of the repeats, taken in turn) of one fit, of one fit with its clusters' influence, and
of one fit with 80 replicate columns, for replicates that move clusters' weights and for replicates that move
every row's weight; then one fit at twice and four times the rows.
"""

from __future__ import annotations

import argparse
import json
import statistics
import warnings
from dataclasses import replace
from pathlib import Path

import numpy as np
from measuring import timed

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.linear import fit_linear
from steelyard.outcome.multilevel.linear_influence import Scores
from steelyard.outcome.multilevel.linear_standard import LinearModel
from steelyard.outcome.multilevel.nested import Nested

REPLICATES = 80
MODEL = LinearModel(
    ("Intercept", *(f"x{k}" for k in range(5))), ("Intercept",), ("cluster",), "the outcome model"
)


def made(rows: int, clusters: int, seed: int = 1) -> Nested:
    """Return rows in clusters of about equal size: a constant, three columns of rows, two of clusters."""
    rng = np.random.default_rng(seed)
    cluster = np.sort(np.r_[np.arange(clusters), rng.integers(0, clusters, rows - clusters)])
    own = rng.normal(size=(clusters, 2))[cluster]
    x = np.column_stack([np.ones(rows), rng.normal(size=(rows, 3)), own])
    y = (
        x @ np.array([1, 0.5, -0.3, 0.2, 0.4, 0.1])
        + rng.normal(0, 0.6, clusters)[cluster]
        + rng.normal(size=rows)
    )
    weights = np.exp(rng.normal(0, 0.4, (rows, 1))), np.exp(rng.normal(0, 0.4, (clusters, 1)))
    return Nested(y, x, np.ones((rows, 1)), cluster, None, *weights, None)


def with_replicates(run: Nested, by_row: bool) -> Nested:
    """Return the run with replicate columns: Fay's factors for clusters, and small moves of every row's weight."""
    rng = np.random.default_rng(2)
    factors = rng.choice([0.3, 1.7], (len(run.cluster_weight), REPLICATES))
    own = np.column_stack([run.cluster_weight, run.cluster_weight * factors])
    if not by_row:
        return replace(run, cluster_weight=own)
    moves = np.exp(rng.normal(0, 0.05, (len(run.y), REPLICATES)))
    return replace(
        run, cluster_weight=own, row_weight=np.column_stack([run.row_weight, run.row_weight * moves])
    )


def split(run: Nested, rows_at_a_time: int) -> list[Nested]:
    """Return runs of about so many rows that split no cluster."""
    firsts = run.cluster_firsts
    ends = np.append(firsts[1:], len(run.y))
    cuts = np.unique(np.searchsorted(firsts, np.arange(0, len(run.y), rows_at_a_time)))
    runs = []
    for start, stop in zip(cuts, np.append(cuts[1:], len(firsts)), strict=True):
        rows = slice(firsts[start], ends[stop - 1])
        runs.append(
            Nested(
                run.y[rows],
                run.x[rows],
                run.z[rows],
                run.cluster[rows] - start,
                None,
                run.row_weight[rows],
                run.cluster_weight[start:stop],
                None,
            )
        )
    return runs


def with_influence(runs: list[Nested]) -> list[np.ndarray]:
    """One fit, and the influence of every cluster."""
    fit = fit_linear(MODEL, Engine(), runs)
    scores = Scores(fit)
    return [scores(run) @ fit.combine for run in runs]


def main() -> None:
    """Time them side by side."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rows", type=int, default=100_000)
    parser.add_argument("--clusters", type=int, default=2_000)
    parser.add_argument("--repeats", type=int, default=5)
    parser.add_argument("--json", type=Path, help="also write the figures there")
    arguments = parser.parse_args()
    import statsmodels.api as sm

    warnings.simplefilter("ignore")
    run = made(arguments.rows, arguments.clusters)
    jobs = {
        "one fit": split(run, 8192),
        "81 columns, clusters' weights": split(with_replicates(run, by_row=False), 8192),
        "81 columns, rows' weights": split(with_replicates(run, by_row=True), 8192),
        "one fit, 2 x rows": split(made(2 * arguments.rows, arguments.clusters), 8192),
        "one fit, 4 x rows": split(made(4 * arguments.rows, arguments.clusters), 8192),
    }
    seconds: dict[str, list[float]] = {name: [] for name in ("MixedLM", *jobs, "one fit and influence")}
    for _ in range(arguments.repeats):
        for name, runs in jobs.items():
            seconds[name].append(timed(fit_linear, MODEL, Engine(), runs)[0])
        seconds["one fit and influence"].append(timed(with_influence, jobs["one fit"])[0])
        model = sm.MixedLM(run.y, run.x, groups=run.cluster)
        seconds["MixedLM"].append(timed(lambda model=model: model.fit(reml=False))[0])
    middle = {name: statistics.median(values) for name, values in seconds.items()}
    for name, values in seconds.items():
        print(f"{name:<32}{middle[name]:8.3f} s   ({min(values):.3f} to {max(values):.3f})")
    one = middle["one fit"]
    ratios = {
        "MixedLM / one fit": (middle["MixedLM"] / one, "target at least 20"),
        "MixedLM / one fit and influence": (middle["MixedLM"] / middle["one fit and influence"], ""),
        "81 columns, clusters' / one fit": (
            middle["81 columns, clusters' weights"] / one,
            "target at most 20",
        ),
        "81 columns, rows' / one fit": (middle["81 columns, rows' weights"] / one, "target at most 20"),
        "2 x rows / one fit": (middle["one fit, 2 x rows"] / one, "linear: 2"),
        "4 x rows / one fit": (middle["one fit, 4 x rows"] / one, "linear: 4"),
    }
    for name, (ratio, target) in ratios.items():
        print(f"{name:<34}{ratio:6.2f}   {target}")
    if arguments.json:
        figures = {"seconds": middle, "ratios": {name: ratio for name, (ratio, _) in ratios.items()}}
        arguments.json.write_text(json.dumps(figures))


if __name__ == "__main__":
    main()
