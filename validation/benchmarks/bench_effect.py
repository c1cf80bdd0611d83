"""From Parquet to effect with balance, linearized, beside one statsmodels GLM logit fit on the same rows.

    python validation/benchmarks/bench_effect.py [--rows 1000000] [--repeats 3]

Prints seconds (medians of the repeats, taken in turn), ratios to the logit fit, and the peak memory of a
run beyond its design rows, measured in a process of its own. The logit fit is what an analyst would run
instead: no weights, no design, no balance, rows already in memory.
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


def plan():
    """The study that is timed."""
    from steelyard.plan import Design, Exposure, Outcome
    from steelyard.study import Study

    return Study(
        design=Design(weight="weight", strata="stratum", clusters="psu"),
        exposure=Exposure(formula=FORMULA),
        outcome=(Outcome(name="outcome"),),
    )


def peak_of_a_run(path: str) -> None:
    """Print the peak resident memory of one run beyond imports and design rows, in MB."""
    study = plan()
    before = peak_kb()
    prepared = study.prepare(path)
    ready = peak_kb()
    study.estimate(prepared)
    rows = rows_mb(prepared.rows)
    peak = peak_kb()
    beyond = (peak - before) / 1024 - rows
    preparing = (ready - before) / 1024 - rows
    print(json.dumps({"rows_mb": rows, "beyond_mb": beyond, "preparing_mb": preparing}))


def main() -> None:
    """Time the three side by side, then measure memory."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--rows", type=int, default=1_000_000)
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--json", type=Path, help="also write the figures there")
    parser.add_argument("--peak", help=argparse.SUPPRESS)
    arguments = parser.parse_args()
    if arguments.peak:
        peak_of_a_run(arguments.peak)
        return
    import statsmodels.api as sm

    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "extract.parquet"
        write(path, arguments.rows)
        table = pq.read_table(path)
        x = np.column_stack([np.ones(table.num_rows), *[table[name].to_numpy() for name in NAMES]])
        a = table["exposed"].to_numpy().astype(float)
        del table
        study = plan()
        seconds: dict[str, list[float]] = {"logit": [], "whole": [], "estimation": []}
        for _ in range(arguments.repeats):
            seconds["logit"].append(timed(sm.GLM(a, x, family=sm.families.Binomial()).fit)[0])
            first, prepared = timed(study.prepare, path)
            second, answer = timed(study.estimate, prepared)
            seconds["whole"].append(first + second)
            seconds["estimation"].append(second)
            del prepared
        print({k: round(v, 2) for k, v in answer.record["seconds"].items()})
        del x, a
        command = [sys.executable, __file__, "--peak", str(path)]
        memory = json.loads(subprocess.run(command, check=True, capture_output=True, text=True).stdout)
    middle = {name: statistics.median(values) for name, values in seconds.items()}
    for name, values in seconds.items():
        print(f"{name:<12}{middle[name]:7.2f} s   ({min(values):.2f} to {max(values):.2f})")
    ratios = {name: middle[name] / middle["logit"] for name in ("whole", "estimation")}
    print(f"whole / logit        {ratios['whole']:.3f}  (target 0.7)")
    print(f"estimation / logit   {ratios['estimation']:.3f}  (target 0.35)")
    print(f"design rows          {memory['rows_mb']:.0f} MB")
    print(
        f"peak beyond them     {memory['beyond_mb']:.0f} MB  (target 300; {memory['preparing_mb']:.0f} MB preparing)"
    )
    if arguments.json:
        arguments.json.write_text(json.dumps({"seconds": middle, "ratios": ratios, "memory": memory}))


if __name__ == "__main__":
    main()
