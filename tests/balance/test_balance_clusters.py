"""Differences between and within clusters against pandas, and where the groups meet."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import oracle
from steelyard.errors import PlanError
from steelyard.plan import Balance, Data, Variance
from steelyard.report.disclosure import release
from steelyard.report.multilevel import between_table, cluster_overlap_table
from test_study_brute_force import design_columns, extract, study

pytestmark = pytest.mark.filterwarnings("ignore::steelyard.errors.SteelyardWarning")

FRAME = extract(strata=4, areas=4, households=5)
FRAME["z"] = FRAME["h"] * 1.0 + FRAME["area"] * 0.1  # the same in all rows of an area
PLAN = {"balance": Balance(columns=("z",), clusters="area"), "data": Data(domain="x1 > -1.5")}


def by_hand(frame):
    """The differences of x1 before and after: whole, and of the areas' means, over the spread of x1."""
    frame = frame[frame["x1"] > -1.5]
    s, a, x = frame["w"].to_numpy(), frame["a"].to_numpy(float), frame["x1"].to_numpy()
    c = oracle.balancing_weight(
        "ATE", oracle.expit(design_columns(frame) @ oracle.logit_fit(design_columns(frame), a, s)), a
    )
    unit = frame["h"] * 100 + frame["area"]
    weighted = pd.DataFrame({"sx": s * x, "s": s}).groupby(unit.to_numpy()).transform("sum")
    mean = (weighted["sx"] / weighted["s"]).to_numpy()

    def difference(v, w):
        return (w * a) @ v / (w @ a) - (w * (1 - a)) @ v / (w @ (1 - a))

    def variance(group):
        m = s[group] @ x[group] / s[group].sum()
        return s[group] @ (x[group] - m) ** 2 / s[group].sum()

    spread = np.sqrt((variance(a == 1) + variance(a == 0)) / 2)
    return {
        when: (difference(x, w) / spread, difference(mean, w) / spread, difference(mean, w))
        for when, w in (("before", s), ("after", s * c))
    }


def test_every_difference_is_split_between_and_within():
    answer = study(**PLAN).run(FRAME)
    row = answer.balance.clusters.set_index("term").loc["x1"]
    for when, (whole, between, _) in by_hand(FRAME).items():
        assert row[f"smd_{when}"] == pytest.approx(whole, abs=1e-9)
        assert row[f"between_{when}"] == pytest.approx(between, abs=1e-9)
        assert row[f"within_{when}"] == pytest.approx(whole - between, abs=1e-9)
    means = answer.balance.table[answer.balance.table["level"] == "cluster"].set_index("term")
    assert means.loc["x1", "mean_difference_after"] == pytest.approx(by_hand(FRAME)["after"][2], abs=1e-9)
    # Every level of a category has its own; what does not vary within areas is its own mean.
    assert set(means.index) == {"x1", "x2: 0", "x2: 1", "x2: 2"}
    assert "z" not in set(answer.balance.clusters["term"])


def test_the_test_of_cluster_means_is_that_of_any_column():
    frame = FRAME.copy()
    inside = frame["x1"] > -1.5
    unit = frame["h"] * 100 + frame["area"]
    part = frame[inside]
    sums = pd.DataFrame({"sx": part["w"] * part["x1"], "s": part["w"]}).groupby(unit[inside]).sum()
    frame["mean_x1"] = unit.map(sums["sx"] / sums["s"])
    direct = (
        study(**{**PLAN, "balance": Balance(columns=("mean_x1",))}).run(frame).balance.table.set_index("term")
    )
    split = study(**PLAN).run(FRAME).balance.table
    split = split[split["level"] == "cluster"].set_index("term")
    for name in ("se_before", "se_after", "p_after", "ks_after", "variance_ratio_before"):
        assert split.loc["x1", name] == pytest.approx(direct.loc["mean_x1", name], rel=1e-7)


def test_replicates_know_cluster_means_too():
    answer = study(**PLAN, variance=Variance(method="jackknife")).run(FRAME)
    linear = study(**PLAN).run(FRAME)
    rows = (answer.balance.table["level"] == "cluster") & (answer.balance.table["term"] == "x1")
    ratio = answer.balance.table.loc[rows, "se_before"] / linear.balance.table.loc[rows, "se_before"]
    assert ratio.iloc[0] == pytest.approx(1, abs=0.1)


def test_clusters_where_the_groups_meet_are_counted():
    frame = FRAME.copy()
    area = frame["h"] * 100 + frame["area"]
    frame.loc[area == 1, "a"] = 1
    frame.loc[(area == 2) | (area == 103), "a"] = 0
    answer = study(**PLAN).run(frame)
    part = frame[frame["x1"] > -1.5]
    by_area = part.groupby(area[part.index])["a"].agg(["sum", "size"])
    only = {
        "exposed only": by_area["sum"] == by_area["size"],
        "reference only": by_area["sum"] == 0,
    }
    found = answer.balance.cluster_overlap.set_index("clusters_with")
    for kind, which in only.items():
        assert found.loc[kind, "clusters"] == which.sum()
        assert found.loc[kind, ["exposed_rows", "reference_rows"]].sum() == by_area.loc[which, "size"].sum()
    assert found["clusters"].sum() == 16
    np.testing.assert_allclose(found[["exposed_share", "reference_share"]].sum(), 1)


def test_the_report_shows_the_split_and_hides_what_is_small():
    answer = study(**PLAN).run(FRAME)
    released = release(answer)
    table = between_table(released)
    assert [row[0] for row in table.rows] == ["x1", "x2: 0", "x2: 1", "x2: 2"] or len(table.rows) == 4
    assert "(area)" in table.caption
    frame = FRAME.copy()
    area = frame["h"] * 100 + frame["area"]
    few = frame.index[area == 1][:4]
    frame = frame.drop(frame.index[(area == 1) & ~frame.index.isin(few)])
    frame.loc[few, "a"] = 1
    frame.loc[few, "x1"] = 0.0
    rows = {row[0]: row[1:] for row in cluster_overlap_table(release(study(**PLAN).run(frame))).rows}
    assert rows["exposed only"] == ("hidden",) * 5
    assert rows["both groups"] == ("hidden",) * 5  # the total would give the four away


def test_clusters_that_the_design_has_not_are_refused():
    with pytest.raises(PlanError, match=r'balance\.clusters is "hh"; the design has area'):
        study(balance=Balance(clusters="hh")).run(FRAME)
