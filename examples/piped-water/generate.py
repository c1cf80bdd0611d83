"""Make the invented extract of this example: a household survey in Orvania, a country that does not exist.

    python examples/piped-water/generate.py

A population of areas, households and persons is made in full, with both potential outcomes of every
child, so the true effects are known: they are printed and written to truth.json. Then a stratified
sample in two stages is drawn from it and damaged as real extracts are. Everybody here is invented.
"""

from __future__ import annotations

import json
from decimal import Decimal
from pathlib import Path

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

HERE = Path(__file__).parent
SEED = 20261
REPLICATES = 100
REGIONS = ("Ostrel Coast", "Vennik Hills", "Tharo Plain", "Quennar Valley", "Ziskel Steppe")
# Areas in the population and in the sample, by region, rural and urban: fractions differ on purpose.
AREAS = {
    "Ostrel Coast": ((240, 44), (200, 44)),
    "Vennik Hills": ((260, 40), (90, 30)),
    "Tharo Plain": ((300, 42), (140, 34)),
    "Quennar Valley": ((220, 44), (60, 28)),
    # The steppe's towns: one area was sampled, so its stratum has a single PSU.
    "Ziskel Steppe": ((180, 46), (12, 1)),
}
ROOFS = ("metal sheet", "tile", "thatch", "concrete")


def expit(x: np.ndarray) -> np.ndarray:
    """Return the logistic function."""
    return 1 / (1 + np.exp(-x))


def population(rng: np.random.Generator) -> pd.DataFrame:
    """Return every child aged 6 to 14 and everybody else, with both potential outcomes of the children."""
    frames = []
    for r, region in enumerate(REGIONS):
        for urban in (0, 1):
            areas = AREAS[region][urban][0]
            for area in range(1, areas + 1):
                frames.append(area_of(rng, r, region, urban, area))
    people = pd.concat(frames, ignore_index=True)
    people["school_age"] = (people["age"] >= 6) & (people["age"] <= 14)
    return with_outcomes(rng, people)


def area_of(rng: np.random.Generator, r: int, region: str, urban: int, area: int) -> pd.DataFrame:
    """Return the persons of one area, household by household."""
    households = int(rng.integers(55, 110))
    road = rng.gamma(2.0, 2.5 if not urban else 0.6)
    level = 0.9 * urban - 0.06 * road + 0.25 * (2 - r) / 2 + rng.normal(0, 0.45)
    wealth = level + rng.normal(0, 0.8, households)
    head_school = np.clip(np.round(5 + 2.2 * wealth + rng.normal(0, 2.5, households)), 0, 16)
    head_age = np.clip(np.round(rng.normal(44, 11, households)), 18, 90)
    roof = np.where(wealth > 1.1, 3, np.where(wealth > 0.3, 1, np.where(wealth > -0.6, 0, 2)))
    piped = rng.random(households) < expit(
        -1.0 + 0.95 * wealth + 0.7 * urban - 0.07 * road - 0.15 * r + 0.05 * head_school
    )
    persons = 2 + rng.poisson(np.exp(0.95 - 0.10 * wealth))
    who = np.repeat(np.arange(households), persons)
    line = np.concatenate([np.arange(1, n + 1) for n in persons])
    age = np.where(line == 1, head_age[who], np.where(line == 2, np.maximum(head_age[who] - 3, 17), 0))
    child = line > 2
    age[child] = rng.integers(0, 19, int(child.sum()))
    return pd.DataFrame(
        {
            "region": region,
            "region_code": r,
            "urban": urban,
            "area": area,
            "household": who + 1,
            "person": line,
            "age": age.astype(int),
            "girl": rng.random(len(who)) < 0.49,
            "wealth": wealth[who],
            "road_km": road,
            "roof": roof[who],
            "head_school": head_school[who],
            "head_age": head_age[who],
            "household_size": persons[who],
            "piped": piped[who].astype(int),
            "households_in_area": households,
            "area_level": level,
        }
    )


def with_outcomes(rng: np.random.Generator, people: pd.DataFrame) -> pd.DataFrame:
    """Add both potential outcomes, and the one that is seen."""
    n = len(people)
    poor = -people["wealth"].to_numpy()
    urban, age = people["urban"].to_numpy(), people["age"].to_numpy()
    girl = people["girl"].to_numpy()
    area_shift = pd.factorize(people["region"] + people["urban"].astype(str) + people["area"].astype(str))[0]
    shift = rng.normal(0, 0.25, area_shift.max() + 1)[area_shift]
    mean0 = np.exp(1.15 + 0.28 * poor - 0.25 * urban + 0.10 * girl + 0.02 * people["road_km"] + shift)
    # Piped water saves fetching: more so for girls, and for the poor.
    mean1 = mean0 * np.exp(-0.22 - 0.12 * girl - 0.05 * poor)
    draw = rng.random(n)
    people["days_0"], people["days_1"] = poisson_at(draw, mean0), poisson_at(draw, mean1)
    base = -1.7 + 0.45 * poor - 0.2 * urban + 0.5 * shift
    draw = rng.random(n)
    people["ill_0"] = (draw < expit(base)).astype(int)
    people["ill_1"] = (draw < expit(base - 0.45)).astype(int)
    base = 2.2 - 0.55 * poor + 0.3 * urban - 0.12 * np.abs(age - 10) - 0.15 * girl - 0.4 * shift
    draw = rng.random(n)
    people["enrolled_0"] = (draw < expit(base)).astype(int)
    people["enrolled_1"] = (draw < expit(base + 0.30)).astype(int)
    for name in ("days", "ill", "enrolled"):
        people[name] = np.where(people["piped"] == 1, people[f"{name}_1"], people[f"{name}_0"])
    return people


def poisson_at(draw: np.ndarray, mean: np.ndarray) -> np.ndarray:
    """Return Poisson counts from uniform draws, so that the two outcomes of a child share their luck."""
    count = np.zeros(len(draw), dtype=int)
    term = np.exp(-mean)
    total = term.copy()
    for k in range(1, 60):
        count += draw > total
        term = term * mean / k
        total += term
    return count


def truth(people: pd.DataFrame) -> dict[str, dict[str, float]]:
    """Return the true effects for all children of school age, for those with piped water, and for those without."""
    children = people[people["school_age"]]
    groups = {
        "ATE": children,
        "ATT": children[children["piped"] == 1],
        "ATC": children[children["piped"] == 0],
    }
    found = {}
    for name, group in groups.items():
        found[name] = {}
        for outcome, column in (("days_missed", "days"), ("diarrhoea", "ill"), ("enrolled", "enrolled")):
            one, zero = group[f"{column}_1"].mean(), group[f"{column}_0"].mean()
            found[name][f"{outcome}, difference"] = one - zero
            found[name][f"{outcome}, ratio"] = one / zero
            if outcome != "days_missed":
                found[name][f"{outcome}, odds-ratio"] = one / (1 - one) / (zero / (1 - zero))
    return {name: {k: round(float(v), 4) for k, v in values.items()} for name, values in found.items()}


def sample(rng: np.random.Generator, people: pd.DataFrame) -> pd.DataFrame:
    """Draw areas within strata, households within areas, and everybody in them; return persons with weights."""
    drawn = []
    for region in REGIONS:
        for urban in (0, 1):
            total, wanted = AREAS[region][urban]
            stratum = people[(people["region"] == region) & (people["urban"] == urban)]
            # Poorer areas are likelier to be drawn, as where a programme pays for its own evaluation.
            level = stratum.groupby("area")["area_level"].first()
            size = np.exp(-0.55 * level)
            chance = np.minimum(wanted * size / size.sum(), 1)
            areas = level.index[systematic(rng, chance.to_numpy())]
            for area in areas:
                drawn.append(
                    households_of(rng, stratum[stratum["area"] == area], float(chance.loc[area]), total)
                )
    return pd.concat(drawn, ignore_index=True)


def systematic(rng: np.random.Generator, chance: np.ndarray) -> np.ndarray:
    """Return the places drawn with the given chances, systematically from a random start."""
    ticks = np.cumsum(chance)
    return np.unique(np.searchsorted(ticks, np.arange(rng.random(), ticks[-1], 1.0)))


def households_of(rng: np.random.Generator, area: pd.DataFrame, chance: float, areas: int) -> pd.DataFrame:
    """Draw 29 households of an area; some do not answer, and the weight makes up for them."""
    homes = area["household"].unique()
    chosen = rng.choice(homes, size=min(29, len(homes)), replace=False)
    answer = rng.random(len(chosen)) < 0.93
    kept = area[area["household"].isin(chosen[answer])].copy()
    # Homes that did not answer are made up for by those that did, area by area.
    kept["person_weight"] = len(homes) / answer.sum() / chance
    kept["areas_in_stratum"] = areas
    return kept


def redrawn(rng: np.random.Generator, drawn: pd.DataFrame) -> np.ndarray:
    """Return what the producer's bootstrap multiplies each person's weight by, (persons, REPLICATES).

    In each replicate n - 1 of a stratum's n areas are drawn with replacement, and what that moves is shrunk by the
    share of the country's areas that was not drawn (Rao, Wu & Yue 1992). The steppe's one town is redrawn with its
    countryside.
    """
    stratum = drawn["region"] + np.where(drawn["region"] == REGIONS[-1], "", drawn["urban"].astype(str))
    area = drawn["region"] + drawn["urban"].astype(str) + "-" + drawn["area"].astype(str)
    multipliers = np.empty((len(drawn), REPLICATES))
    for name in stratum.unique():
        here = (stratum == name).to_numpy()
        unit, codes = area[here].unique(), pd.factorize(area[here])[0]
        first = drawn[here].drop_duplicates(["urban"])
        reach = np.sqrt(1 - len(unit) / first["areas_in_stratum"].sum())
        draws = rng.integers(len(unit), size=(REPLICATES, len(unit) - 1))
        times = np.array([np.bincount(draw, minlength=len(unit)) for draw in draws]).T
        multipliers[here] = (1 - reach + reach * times * len(unit) / (len(unit) - 1))[codes]
    return multipliers


def extract(rng: np.random.Generator, drawn: pd.DataFrame) -> pa.Table:
    """Turn the sample into the columns of a delivered file, warts and all."""
    n = len(drawn)

    def some(share: float) -> np.ndarray:
        return rng.random(n) < share

    weight = np.where(some(0.004), 0.0, drawn["person_weight"].round(3))
    income = (
        np.round(np.exp(6 + 0.6 * drawn["wealth"] + 0.4 * rng.normal(size=n)), -1).astype(int).clip(10, 9000)
    )
    income = np.where(some(0.03), 9998, np.where(some(0.02), 9999, income))
    head_age = np.where(some(0.01), 99, drawn["head_age"]).astype(np.int16)
    school = pd.array(drawn["head_school"].astype(int), dtype="Int8")
    school[some(0.015)] = pd.NA
    child = drawn["school_age"].to_numpy()
    days = np.where(child, np.where(some(0.01), 98, drawn["days"].clip(upper=60)), 99)
    visited = pd.Timestamp("2024-03-04") + pd.to_timedelta(rng.integers(0, 75, n), unit="D")
    replicates = weight[:, np.newaxis] * redrawn(rng, drawn)
    return pa.table(
        {
            "region": pa.array(drawn["region"], pa.string()),
            "residence": pa.array(np.where(drawn["urban"] == 1, "town", "countryside")).dictionary_encode(),
            "area": pa.array(drawn["area"], pa.int16()),
            "household": pa.array(drawn["household"], pa.int16()),
            "person": pa.array(drawn["person"], pa.int8()),
            "person_weight": pa.array(weight, pa.float64()),
            "areas_in_stratum": pa.array(drawn["areas_in_stratum"], pa.int16()),
            "households_in_area": pa.array(drawn["households_in_area"], pa.int16()),
            "age": pa.array(drawn["age"], pa.int8()),
            "girl": pa.array(drawn["girl"], pa.bool_()),
            "wealth": pa.array(drawn["wealth"].round(2), pa.float32()),
            "income": pa.array(income, pa.int32()),
            "road_km": pa.array([Decimal(f"{km:.1f}") for km in drawn["road_km"]], pa.decimal128(5, 1)),
            "roof": pa.array([ROOFS[k] for k in drawn["roof"]]).dictionary_encode(),
            "head_school": pa.array(school, pa.int8()),
            "head_age": pa.array(head_age, pa.int16()),
            "household_size": pa.array(drawn["household_size"], pa.int8()),
            "piped": pa.array(drawn["piped"], pa.int8()),
            "days_missed": pa.array(days, pa.int8()),
            "diarrhoea": pa.array(np.where(some(0.008), 9, drawn["ill"]), pa.int8()),
            "enrolled": pa.array(np.where(child, drawn["enrolled"], 9), pa.int8()),
            "interview_date": pa.array(visited.date, pa.date32()),
            **{f"rep_{r:03d}": pa.array(replicates[:, r - 1].round(3)) for r in range(1, REPLICATES + 1)},
        }
    )


def main() -> None:
    """Write household_survey.parquet and truth.json, and print the truth."""
    rng = np.random.default_rng(SEED)
    people = population(rng)
    true = truth(people)
    table = extract(rng, sample(rng, people))
    pq.write_table(table, HERE / "household_survey.parquet", compression="zstd", compression_level=19)
    (HERE / "truth.json").write_text(json.dumps(true, indent=2) + "\n", encoding="utf-8")
    children = table.to_pandas().query("age >= 6 and age <= 14")
    print(f"{table.num_rows:,} persons, {len(children):,} of them aged 6 to 14")
    print(f"{(HERE / 'household_survey.parquet').stat().st_size / 1e6:.2f} MB")
    asked = children[(children["days_missed"] < 98) & (children["diarrhoea"] < 9)]
    for name in ("days_missed", "diarrhoea", "enrolled"):
        means = asked.groupby("piped")[name].mean()
        print(f"{name}: plain difference in the sample {means[1] - means[0]:+.3f}")
    for name, values in true.items():
        print(f"true {name}: " + "; ".join(f"{key} {value:g}" for key, value in values.items()))


if __name__ == "__main__":
    main()
