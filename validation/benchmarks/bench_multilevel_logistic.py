"""Time a weighted multilevel logit by adaptive quadrature beside a plain logit fit, with and without replicates.

    python validation/benchmarks/bench_multilevel_logistic.py            # 100,000 rows, 2,000 clusters, 6 columns
    python validation/benchmarks/bench_multilevel_logistic.py --repeats 3 --replicates 80

Fits are taken in turn, in one process, on the same rows in memory: statsmodels' logit (both of its ways), the
multilevel fit from nothing to its information matrix (7 adaptive points), a tenth of the rows, and one run with 80
replicates (Fay's factor .3 by cluster), once with the level-1 weights of the full sample and once with level-1
weights of their own. Seconds are processor time of one thread; ratios are to the fits of the same repeat.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable

import numpy as np
import statsmodels.api as sm

from steelyard.data.passes import Engine
from steelyard.outcome.multilevel.nested import Nested
from steelyard.outcome.multilevel.nonlinear import Nonlinear
from steelyard.outcome.multilevel.nonlinear_fit import fit_nonlinear

COLUMNS = 6
ROWS_A_CLUSTER = 50


def made(
    clusters: int, replicates: int, own: bool, rows_a_run: int, seed: int = 1
) -> tuple[list[Nested], object]:
    """Return runs of whole clusters, and the plain response and columns."""
    rng = np.random.default_rng(seed)
    n = clusters * ROWS_A_CLUSTER
    x = np.column_stack([np.ones(n), rng.normal(size=(n, COLUMNS - 1))])
    cluster = np.repeat(np.arange(clusters), ROWS_A_CLUSTER)
    eta = x @ np.array([-0.5, 0.5, 0.3, -0.2, 0.1, 0.0]) + rng.normal(size=clusters)[cluster]
    y = (rng.random(n) < 1 / (1 + np.exp(-eta))).astype(float)
    rows = np.repeat(rng.uniform(0.5, 1.5, (n, 1)), 1 + replicates, axis=1)
    if own:
        rows[:, 1:] *= rng.uniform(0.95, 1.05, (n, replicates))
    factor = np.where(rng.random((clusters, replicates)) < 0.5, 0.3, 1.7)
    weight = rng.uniform(0.5, 1.5, (clusters, 1)) * np.column_stack([np.ones(clusters), factor])
    step = max(1, rows_a_run // ROWS_A_CLUSTER)
    runs = []
    for first in range(0, clusters, step):
        last = min(first + step, clusters)
        inside = slice(first * ROWS_A_CLUSTER, last * ROWS_A_CLUSTER)
        runs.append(
            Nested(
                y[inside],
                x[inside],
                np.ones((inside.stop - inside.start, 1)),
                cluster[inside] - first,
                None,
                rows[inside],
                weight[first:last],
                None,
            )
        )
    return runs, (y, x)


def seconds(work: Callable[[], object]) -> float:
    begun = time.process_time()
    work()
    return time.process_time() - begun


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--clusters", type=int, default=2000)
    parser.add_argument("--replicates", type=int, default=80)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--rows-a-run", type=int, default=20_000)
    asked = parser.parse_args()
    model = Nonlinear("logit", "binomial", tuple(f"x{j}" for j in range(COLUMNS)), ("x0",), 7)
    runs, (y, x) = made(asked.clusters, 0, False, asked.rows_a_run)
    tenth, _ = made(asked.clusters // 10, 0, False, asked.rows_a_run)
    shared, _ = made(asked.clusters, asked.replicates, False, asked.rows_a_run)
    own, _ = made(asked.clusters, asked.replicates, True, asked.rows_a_run)
    engine = Engine()
    work = {
        "statsmodels Logit": lambda: sm.Logit(y, x).fit(disp=0),
        "statsmodels GLM logit": lambda: sm.GLM(y, x, family=sm.families.Binomial()).fit(),
        "multilevel, 7 points": lambda: fit_nonlinear(model, runs, engine),
        "multilevel, a tenth of the rows": lambda: fit_nonlinear(model, tenth, engine),
        f"with {asked.replicates} replicates": lambda: fit_nonlinear(model, shared, engine),
        f"with {asked.replicates}, level-1 weights of their own": lambda: fit_nonlinear(model, own, engine),
    }
    taken: dict[str, list[float]] = {name: [] for name in work}
    for _ in range(asked.repeats):
        for name, job in work.items():
            taken[name].append(seconds(job))
    logit, glm, fit, *_ = (np.array(times) for times in taken.values())
    print(
        f"{len(y):,} rows, {asked.clusters:,} clusters, {COLUMNS} columns; medians of {asked.repeats} repeats"
    )
    print(f"{'':42}{'seconds':>9}{'to Logit':>10}{'to GLM':>9}{'to one fit':>12}")
    for name, times in taken.items():
        ratios = [np.median(np.array(times) / other) for other in (logit, glm, fit)]
        print(f"{name:42}{np.median(times):9.3f}{ratios[0]:10.2f}{ratios[1]:9.2f}{ratios[2]:12.2f}")


if __name__ == "__main__":
    main()
