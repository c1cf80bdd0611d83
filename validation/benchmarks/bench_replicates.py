"""Replicates beside one statsmodels logit fit and weighted fits by glum, on the same rows.

    python validation/benchmarks/bench_replicates.py [--rows 1000000] [--repeats 3] [--parts speed,memory]

Times, in turn: one statsmodels GLM logit fit (no weights, no design); the propensity, the ATE and the balance of
all covariates with 80 replicates in which the propensity is estimated again (the full sample's fit included);
and a few weighted fits by glum (the extra `glum` of the environment, if it is there), from which 80 are scaled
up. Then a jackknife of 2,000 PSUs, growth with rows and with replicates, and the peak memory of a process of
its own beyond the design rows.
"""

from __future__ import annotations

import argparse
import json
import statistics
import subprocess
import sys
import tempfile
import warnings
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq

sys.path.insert(0, str(Path(__file__).parent))
from make_extract import FORMULA, NAMES, write
from measuring import peak_kb, rows_mb, timed

warnings.simplefilter("ignore")

REPLICATES = 80
GLUM_FITS = 3
# Its own tolerance stops at a gradient of 1e-4; the replicates' coefficients here are good to 1e-8.
ONE_GLUM, ONE_GLUM_SHARP = "one glum fit", "one glum fit, gradient to 1e-8"


def plan(method: str = "bootstrap", replicates: int = REPLICATES):
    """The study that is timed."""
    from steelyard.plan import Design, Exposure, Outcome, Variance
    from steelyard.study import Study

    return Study(
        design=Design(weight="weight", strata="stratum", clusters="psu"),
        exposure=Exposure(formula=FORMULA),
        outcome=(Outcome(name="outcome"),),
        variance=Variance(method=method, replicates=replicates, side_by_side=False),  # type: ignore[arg-type]
    )


def replicated(study, prepared):
    """Propensity, ATE and balance of the full sample, and all of it again in every replicate."""
    from steelyard.data.passes import threads
    from steelyard.estimate.weights import SamplingWeights
    from steelyard.exposure.propensity import balancing, fit_propensity
    from steelyard.replicates.make import scheme_of
    from steelyard.results.groups import groups
    from steelyard.results.replication import replication

    rows = prepared.rows
    with threads() as engine:
        fit = fit_propensity(rows, study.exposure, SamplingWeights(), engine)
        made = balancing(rows, study.exposure, fit, SamplingWeights(), engine)
        found = groups(rows, study, made, engine)
        scheme = scheme_of(study, study.variance.method, rows, prepared.design, engine)
        return replication(found, made, scheme, rows, study, engine)


def peak_of_a_run(path: str) -> None:
    """Print the peak resident memory of the replicated job beyond imports and design rows, in MB."""
    study = plan()
    import steelyard.results.replication  # noqa: F401

    before = peak_kb()
    prepared = study.prepare(path)
    replicated(study, prepared)
    rows = rows_mb(prepared.rows)
    print(json.dumps({"rows_mb": rows, "beyond_mb": (peak_kb() - before) / 1024 - rows}))


def shown(seconds: dict[str, list[float]], by: float) -> None:
    """Print medians, ranges, and ratios to ``by`` seconds."""
    for name, values in seconds.items():
        middle = statistics.median(values)
        print(
            f"{name:<34}{middle:8.2f} s ({min(values):.2f} to {max(values):.2f})   {middle / by:7.3f}",
            flush=True,
        )


def speed(prepared, x, a, weight, repeats: int) -> None:
    """Time 80 replicates, one logit fit, and weighted fits by glum, in turn."""
    import statsmodels.api as sm

    seconds: dict[str, list[float]] = {"one statsmodels logit": [], "80 replicates, all again": []}
    try:
        from glum import GeneralizedLinearRegressor
    except ImportError:
        print("glum is not installed: its fits are not timed.")
        glum = None
    else:
        seconds[ONE_GLUM], seconds[ONE_GLUM_SHARP] = [], []
        rng = np.random.default_rng(1)

        def glum(w, **options):
            model = GeneralizedLinearRegressor(family="binomial", alpha=0, fit_intercept=True, **options)
            model.fit(x[:, 1:], a, sample_weight=w)

    study = plan()
    for _ in range(repeats):
        seconds["one statsmodels logit"].append(timed(sm.GLM(a, x, family=sm.families.Binomial()).fit)[0])
        seconds["80 replicates, all again"].append(timed(replicated, study, prepared)[0])
        if glum is not None:
            for name, options in ((ONE_GLUM, {}), (ONE_GLUM_SHARP, {"gradient_tol": 1e-8})):
                fits = [
                    timed(lambda w, o=options: glum(w, **o), weight * rng.integers(0, 3, len(weight)))[0]
                    for _ in range(GLUM_FITS)
                ]
                seconds[name].append(statistics.mean(fits))
    logit = statistics.median(seconds["one statsmodels logit"])
    shown(seconds, logit)
    eighty = statistics.median(seconds["80 replicates, all again"])
    print(f"80 replicates / logit          {eighty / logit:.3f}  (wanted: at most 0.5)")
    if glum is not None:
        for name in (ONE_GLUM, ONE_GLUM_SHARP):
            one = statistics.median(seconds[name])
            print(f"80 x {name} / 80 replicates   {REPLICATES * one / eighty:.1f}  (wanted: at least 25)")


def jackknife(prepared) -> None:
    """Time a jackknife of 2,000 PSUs beside 80 replicates."""
    eighty = timed(replicated, plan(), prepared)[0]
    many = timed(replicated, plan("jackknife"), prepared)[0]
    print(
        f"2,000 PSUs jackknifed {many:.1f} s, 80 replicates {eighty:.2f} s: {many / eighty:.1f}  (wanted: at most 25)"
    )


def linear(folder: Path, rows: int, prepared) -> None:
    """Show growth with replicates on the same rows, and with rows at 80 replicates."""
    for count in (40, 80, 160, 320):
        print(
            f"{rows:,} rows, {count} replicates: {timed(replicated, plan(replicates=count), prepared)[0]:.2f} s",
            flush=True,
        )
    for part in (rows // 4, rows // 2, rows):
        path = folder / f"part{part}.parquet"
        write(path, part)
        smaller = plan().prepare(str(path))
        print(f"{part:,} rows, 80 replicates: {timed(replicated, plan(), smaller)[0]:.2f} s", flush=True)


def main() -> None:
    """Time what is asked for."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rows", type=int, default=1_000_000)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--parts", default="speed,memory,jackknife,linear")
    parser.add_argument("--peak", help=argparse.SUPPRESS)
    arguments = parser.parse_args()
    if arguments.peak:
        peak_of_a_run(arguments.peak)
        return
    parts = set(arguments.parts.split(","))
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "extract.parquet"
        write(path, arguments.rows)
        prepared = plan().prepare(str(path))
        if "speed" in parts:
            table = pq.read_table(path)
            x = np.column_stack([np.ones(table.num_rows), *[table[name].to_numpy() for name in NAMES]])
            a, weight = table["exposed"].to_numpy().astype(float), table["weight"].to_numpy()
            del table
            speed(prepared, x, a, weight, arguments.repeats)
            del x, a, weight
        if "memory" in parts:
            command = [sys.executable, __file__, "--peak", str(path)]
            memory = json.loads(subprocess.run(command, check=True, capture_output=True, text=True).stdout)
            print(
                f"design rows {memory['rows_mb']:.0f} MB, peak beyond them {memory['beyond_mb']:.0f} MB  (wanted: 500)"
            )
        if "jackknife" in parts:
            jackknife(prepared)
        if "linear" in parts:
            linear(Path(folder), arguments.rows, prepared)


if __name__ == "__main__":
    main()
