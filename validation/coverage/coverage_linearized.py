"""Coverage of 95% intervals: informative sampling, strata, clusters, an estimated propensity.

    python validation/coverage/coverage_linearized.py [--samples 1000]

A finite population with both potential outcomes is made once; samples are drawn from it with chances that
depend on the outcome's causes. For each estimand: bias over the Monte Carlo standard deviation of the
estimate, mean standard error over that deviation, and the share of intervals that hold the truth, with
the propensity counted as estimated and as known. Monte Carlo error of a share of 0.95: 0.007 for 1,000.
"""

from __future__ import annotations

import argparse
import warnings
from concurrent.futures import ProcessPoolExecutor

import numpy as np
import pandas as pd

from steelyard.plan import Design, Exposure, Outcome
from steelyard.study import Study

STRATA, AREAS, PERSONS = 10, 120, 60
SAMPLED, TAKEN = 12, 14
ESTIMANDS = ("ATE", "ATT", "ATC", "ATO")


def population(seed: int = 20261) -> pd.DataFrame:
    """Return the population: 72,000 persons in 1,200 areas in 10 strata."""
    rng = np.random.default_rng(seed)
    stratum = np.repeat(np.arange(STRATA), AREAS * PERSONS)
    area = np.repeat(np.arange(STRATA * AREAS), PERSONS)
    shift = rng.normal(0, 0.4, STRATA * AREAS)
    n = len(area)
    x1 = rng.normal(size=n) + 0.5 * shift[area]
    x2 = (rng.random(n) < 0.4 + 0.02 * stratum).astype(float)
    e = 1 / (1 + np.exp(-(-0.3 + 0.7 * x1 - 0.5 * x2)))
    a = (rng.random(n) < e).astype(int)
    y0 = 2 + x1 + 0.8 * x2 + shift[area] + rng.normal(size=n)
    y1 = y0 + 0.5 + 0.3 * x1
    return pd.DataFrame(
        {
            "h": stratum,
            "area": area,
            "x1": x1,
            "x2": x2,
            "e": e,
            "a": a,
            "y0": y0,
            "y1": y1,
            "level": shift[area],
        }
    )


def truths(people: pd.DataFrame) -> dict[str, float]:
    """Return the population's effects, the ATT, ATC and ATO by the true propensity."""
    gain, e = people["y1"] - people["y0"], people["e"]
    weights = {"ATE": np.ones(len(e)), "ATT": e, "ATC": 1 - e, "ATO": e * (1 - e)}
    return {name: float(np.average(gain, weights=w)) for name, w in weights.items()}


def one_sample(seed: int) -> list[tuple[str, float, float, float, float]]:
    """Return, for each estimand: name, estimate, its standard error, that with the propensity known, t quantile."""
    people, rng = PEOPLE, np.random.default_rng(seed)
    parts = []
    for _, stratum in people.groupby("h"):
        level = stratum.groupby("area")["level"].first()
        size = np.exp(-0.6 * level)
        chance = np.minimum(SAMPLED * size / size.sum(), 1)
        order = rng.permutation(len(chance))
        ticks = np.cumsum(chance.to_numpy()[order])
        places = order[np.unique(np.searchsorted(ticks, np.arange(rng.random(), ticks[-1], 1.0)))]
        for place in places:
            members = stratum[stratum["area"] == chance.index[place]]
            taken = members.sample(TAKEN, random_state=int(rng.integers(2**31)))
            parts.append(taken.assign(w=PERSONS / TAKEN / chance.iloc[place]))
    frame = pd.concat(parts, ignore_index=True)
    frame["y"] = np.where(frame["a"] == 1, frame["y1"], frame["y0"])
    found = []
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for estimand in ESTIMANDS:
            answer = Study(
                design=Design(weight="w", strata="h", clusters="area"),
                exposure=Exposure(formula="a ~ x1 + x2", estimand=estimand),
                outcome=(Outcome(name="y"),),
            ).run(frame, workers=1)
            reach = float(
                (answer.effects.conf_int()[1] - answer.effects.params).iloc[0] / answer.effects.bse.iloc[0]
            )
            found.append(
                (
                    estimand,
                    float(answer.effects.params.iloc[0]),
                    float(answer.effects.bse.iloc[0]),
                    float(answer.effects_known.bse.iloc[0]),
                    reach,
                )
            )
    return found


PEOPLE = population()


def main() -> None:
    """Draw the samples and print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--samples", type=int, default=1000)
    parser.add_argument("--workers", type=int, default=2)
    arguments = parser.parse_args()
    true = truths(PEOPLE)
    with ProcessPoolExecutor(arguments.workers) as pool:
        runs = [row for rows in pool.map(one_sample, range(arguments.samples), chunksize=10) for row in rows]
    frame = pd.DataFrame(runs, columns=["estimand", "estimate", "se", "se_known", "reach"])
    print(f"{arguments.samples} samples of about {STRATA * SAMPLED * TAKEN:,} persons")
    print("estimand   truth    bias/sd   se/sd   coverage (MC error)   known: se/sd   coverage")
    for name, rows in frame.groupby("estimand", sort=False):
        sd = rows["estimate"].std()
        off = (rows["estimate"] - true[name]).abs()
        share = (off <= rows["reach"] * rows["se"]).mean()
        known = (off <= rows["reach"] * rows["se_known"]).mean()
        error = np.sqrt(share * (1 - share) / len(rows))
        print(
            f"{name:<9}{true[name]:7.3f}{(rows['estimate'].mean() - true[name]) / sd:10.2f}"
            f"{rows['se'].mean() / sd:9.2f}{share:11.3f} ({error:.3f}){rows['se_known'].mean() / sd:18.2f}{known:11.3f}"
        )


if __name__ == "__main__":
    main()
