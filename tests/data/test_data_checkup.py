"""The check-up's frames against pandas on the whole frame, and every finding provoked once."""

from __future__ import annotations

from itertools import product

import numpy as np
import pandas as pd
import pytest

from steelyard.plan import Data, Design, Exposure, Outcome
from steelyard.study import Study


def survey(seed=0, strata=5, areas=6, persons=12):
    """An extract with zero weights, missing values, and a domain that leaves a stratum empty."""
    rng = np.random.default_rng(seed)
    frame = pd.DataFrame(
        product(range(strata), range(areas), range(persons)), columns=["stratum", "area", "person"]
    )
    n = len(frame)
    frame["w"] = rng.gamma(2, 50, n)
    frame.loc[rng.choice(n, 7, replace=False), "w"] = 0
    frame["age"] = rng.integers(0, 60, n).astype(float)
    frame.loc[frame["stratum"] == 4, "age"] = 70
    frame["region"] = rng.choice(["north", "south", None], n, p=[0.5, 0.44, 0.06])
    frame["x"] = rng.normal(size=n)
    frame.loc[rng.random(n) < 0.1, "x"] = np.nan
    frame["a"] = rng.choice([0, 1, np.nan], n, p=[0.5, 0.45, 0.05])
    frame["y"] = rng.normal(size=n)
    frame.loc[rng.random(n) < 0.05, "y"] = np.nan
    frame.loc[rng.random(n) < 0.03, "age"] = np.nan
    # Shuffled, so that nothing rests on the order of rows.
    return frame.sample(frac=1, random_state=seed).reset_index(drop=True)


def study(**changes):
    given = {
        "data": Data(domain="age < 65"),
        "design": Design(weight="w", strata="stratum", clusters="area"),
        "exposure": Exposure(formula="a ~ x + region"),
        "outcome": (Outcome(name="y"),),
    }
    return Study(**(given | changes))


def domain(frame):
    """Rows where the domain holds, and those of them that are complete."""
    inside = frame["age"] < 65
    return inside, inside & frame[["a", "x", "region", "y"]].notna().all(axis=1)


@pytest.mark.parametrize("read_rows", [50, 65_536])
@pytest.mark.parametrize("seed", [0, 1])
def test_frames_are_what_pandas_counts_however_few_rows_are_read_at_once(seed, read_rows, monkeypatch):
    frame = survey(seed)
    monkeypatch.setattr("steelyard.data.build.READ_ROWS", read_rows)
    checkup = study().prepare(frame, block_rows=7).checkup
    inside, kept = domain(frame)
    rows = frame[kept]

    exposed, reference = rows["a"] == 1, rows["a"] == 0
    areas = frame.groupby(["stratum", "area"]).ngroups
    psus = frame.groupby("stratum")["area"].nunique()
    held = rows["stratum"].unique()
    facts = checkup.facts.set_index("fact")["value"]
    assert facts.to_dict() == {
        "rows in the extract": len(frame),
        "rows in the domain, complete": len(rows),
        "exposed rows": exposed.sum(),
        "reference rows": reference.sum(),
        "rows with sampling weight 0": (frame["w"] == 0).sum(),
        "strata": 5,
        "strata in the domain": len(held),
        "PSUs": areas,
        "PSUs in the domain": rows.groupby(["stratum", "area"]).ngroups,
        "PSUs minus strata in the domain": psus[held].sum() - len(held),
    }

    for column, weight in (("all_rows", frame["w"]), ("domain_rows", rows["w"])):
        found = checkup.weights.set_index("statistic")[column]
        cv = weight.std(ddof=0) / weight.mean()
        expected = {
            "sum": weight.sum(),
            "mean": weight.mean(),
            "min": weight.min(),
            "max": weight.max(),
            "cv": cv,
            "design effect of weighting": 1 + cv**2,
            "effective size": weight.sum() ** 2 / (weight**2).sum(),
        }
        pd.testing.assert_series_equal(found, pd.Series(expected), check_names=False, rtol=1e-10)

    by_stratum = checkup.strata.set_index(checkup.strata["stratum"].astype(int))
    assert by_stratum.index.tolist() == sorted(frame["stratum"].unique())
    for stratum, row in by_stratum.iterrows():
        here, all_here = rows[rows["stratum"] == stratum], frame[frame["stratum"] == stratum]
        counts = [here.loc[here["a"] == level].groupby("area").size() for level in (1, 0)]
        total = all_here["area"].nunique()
        assert row.drop("stratum").to_dict() == {
            "psus": total,
            "rows": len(all_here),
            "domain_rows": len(here),
            "exposed": (here["a"] == 1).sum(),
            "reference": (here["a"] == 0).sum(),
            "psus_without_exposed": total - len(counts[0]),
            "psus_without_reference": total - len(counts[1]),
        }

    missing = checkup.missing.set_index("column")
    assert set(missing.index) == {"a", "x", "region", "y"}
    for name, row in missing.iterrows():
        gone = frame[name].isna()
        assert row["missing"] == (gone & inside).sum()
        assert row["share"] == pytest.approx(gone[inside].mean())
        assert row["share_exposed"] == pytest.approx(gone[inside & (frame["a"] == 1)].mean())
        assert row["share_reference"] == pytest.approx(gone[inside & (frame["a"] == 0)].mean())

    left = pd.Series(True, index=frame.index)
    expected = {}
    for reason, holds in (
        ("outside the domain", frame["age"] >= 65),
        ("domain unknown: age missing", frame["age"].isna()),
        ("exposure a missing", frame["a"].isna()),
        ("x missing", frame["x"].isna()),
        ("region missing", frame["region"].isna()),
        ("y missing", frame["y"].isna()),
    ):
        expected[reason] = int((left & holds).sum())
        left &= ~holds
    found = checkup.exclusions.set_index("reason")
    assert found["rows"].to_dict() == expected
    assert found["rows"].sum() + len(rows) == len(frame)
    np.testing.assert_allclose(found["share"], found["rows"] / len(frame))


def test_without_clusters_every_row_is_a_psu():
    frame = survey()
    _, kept = domain(frame)
    checkup = study(design=Design(weight="w", strata="stratum")).check(frame)
    facts = checkup.facts.set_index("fact")["value"]
    held = frame.loc[kept, "stratum"].unique()
    assert facts["PSUs"] == len(frame)
    assert "PSUs in the domain" not in facts
    assert facts["PSUs minus strata in the domain"] == frame["stratum"].isin(held).sum() - len(held)
    assert (checkup.strata[["psus_without_exposed", "psus_without_reference"]] == 0).all(axis=None)
    assert not [f for f in checkup.findings if "PSUs in the domain have no" in f.message]


def complete(n=1200, strata=6, areas=60, seed=0):
    """An extract about which there is nothing to say."""
    rng = np.random.default_rng(seed)
    frame = pd.DataFrame({"area": np.arange(n) % areas})
    frame["stratum"] = frame["area"] % strata
    frame["w"] = rng.uniform(1, 2, n)
    frame["x"] = rng.normal(size=n)
    frame["a"] = (np.arange(n) // areas) % 2
    frame["y"] = rng.normal(size=n)
    frame["age"] = 30.0
    frame["region"] = rng.choice(["north", "south"], n)
    return frame


def findings(frame, **changes):
    return study(**changes).check(frame).findings


def the_only(found, weight, part):
    """The finding that says ``part``, which must be alone of its kind and have its mend."""
    (finding,) = [f for f in found if part in f.message]
    assert finding.weight == weight
    assert finding.mend
    return finding


def test_a_sound_extract_gives_no_finding():
    assert findings(complete()) == ()


def test_strata_with_one_psu_are_an_error_where_the_plan_refuses_them():
    frame = complete()
    lone = pd.DataFrame([{**frame.iloc[k], "stratum": 100 + k, "area": 900 + k} for k in range(7)])
    whole = pd.concat([frame, lone])
    finding = the_only(findings(whole), "error", "one PSU")
    assert "7 stratum(s)" in finding.message
    assert "100, 101, 102, 103, 104, ..." in finding.message
    assert "105" not in finding.message
    kept = findings(
        whole, design=Design(weight="w", strata="stratum", clusters="area", single_psu="recentre")
    )
    assert "recentre" in the_only(kept, "note", "one PSU").mend


@pytest.mark.parametrize(("name", "level"), [("exposed", 0), ("reference", 1)])
def test_strata_and_psus_without_a_level_are_told(name, level):
    frame = complete()
    frame.loc[frame["stratum"] == 2, "a"] = level
    frame.loc[frame["area"] == 7, "a"] = level
    found = findings(frame)
    assert the_only(found, "warning", f"no {name} rows: 2.").message.startswith("1 stratum(s)")
    assert "11 of 60 PSUs" in the_only(found, "note", f"PSUs in the domain have no {name} rows").message


def test_ids_that_recur_across_strata_are_told_as_nested():
    frame = complete()
    frame["area"] = frame["area"] // 6
    finding = the_only(findings(frame), "note", "recur in different strata")
    assert "10 of 10 ids of area" in finding.message


def test_very_unequal_weights_are_told_with_their_figures():
    frame = complete()
    frame.loc[::40, "w"] = 300.0
    weight = frame["w"]
    effect = len(weight) * (weight**2).sum() / weight.sum() ** 2
    assert effect > 3
    finding = the_only(findings(frame), "note", "very unequal")
    assert f"{effect:.1f}" in finding.message
    assert f"{weight.sum() ** 2 / (weight**2).sum():,.0f}" in finding.message
    assert "common practice" in finding.message


def test_weights_of_zero_are_counted():
    frame = complete()
    frame.loc[:12, "w"] = 0
    assert "13 row(s)" in the_only(findings(frame), "note", "sampling weight 0").message


def test_missingness_is_told_by_column_and_where_it_differs_between_the_groups():
    frame = complete()
    frame.loc[(frame["a"] == 1) & (np.arange(len(frame)) % 5 == 0), "x"] = np.nan
    share, exposed = frame["x"].isna().mean(), frame.loc[frame["a"] == 1, "x"].isna().mean()
    found = findings(frame)
    finding = the_only(found, "warning", f"x is missing in {share:.1%} of the domain")
    assert "common practice" in finding.message
    finding = the_only(found, "warning", f"{exposed:.1%} of the exposed but 0.0%")
    assert "bias" in finding.mend


def test_missingness_below_the_thresholds_is_not_told():
    frame = complete()
    frame.loc[::25, "x"] = np.nan
    assert findings(frame) == ()


@pytest.mark.parametrize(("name", "level"), [("exposed", 1), ("reference", 0)])
def test_small_groups_are_told(name, level):
    frame = complete()
    frame.loc[np.flatnonzero(frame["a"] == level)[29:], "a"] = 1 - level
    finding = the_only(findings(frame), "warning", f"only 29 {name} rows")
    assert "common practice" in finding.message


def test_few_degrees_of_freedom_are_told():
    frame = complete(areas=35)
    finding = the_only(findings(frame), "warning", "degrees of freedom")
    assert "leaves 29 degrees" in finding.message
    assert "common practice" in finding.message
    assert findings(complete(areas=36)) == ()


def test_many_exclusions_are_told():
    frame = complete()
    frame.loc[::4, "region"] = None
    finding = the_only(findings(frame), "warning", "are left out")
    assert "300 of the 1,200 rows" in finding.message
    assert "25.0%" in finding.message
    assert "common practice" in finding.message


def test_rows_outside_the_domain_are_no_exclusion_to_worry_about():
    frame = complete()
    frame.loc[::4, "age"] = 80
    assert findings(frame) == ()
