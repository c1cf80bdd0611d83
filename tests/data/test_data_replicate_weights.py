"""Replicate weights that came with an extract: found, looked at, and refused when they cannot be what they claim."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from steelyard.errors import DesignError, PlanError
from steelyard.plan import Design, Exposure, Outcome, SuppliedReplicates, Variance
from steelyard.study import Study

R = 16


def frame(seed=0, n=240, fay=0.5):
    """Thirty PSUs in fifteen strata, with Fay replicates written out from a Sylvester matrix."""
    rng = np.random.default_rng(seed)
    psu = np.repeat(np.arange(30), n // 30)
    x = rng.normal(size=n)
    out = pd.DataFrame(
        {
            "w": np.exp(0.3 * rng.normal(size=n)) * 40,
            "x": x,
            "a": (rng.random(n) < 1 / (1 + np.exp(-x))).astype(int),
            "y": x + rng.normal(size=n),
        }
    )
    signs = np.array([[1]])
    for _ in range(4):
        signs = np.kron(signs, [[1, 1], [1, -1]])
    for r in range(R):
        gain = (1 - fay) * signs[1 + psu // 2, r] * np.where(psu % 2, -1, 1)
        out[f"rw{r + 1}"] = out["w"] * (1 + gain)
    return out


def study(columns="rw*", method="fay", fay: float | None = 0.5, **more):
    return Study(
        design=Design(
            weight="w", replicates=SuppliedReplicates(columns=columns, method=method, fay=fay, **more)
        ),
        exposure=Exposure(formula="a ~ x"),
        outcome=(Outcome(name="y"),),
        variance=Variance(method="supplied"),
    )


def told(data, **changes):
    return [f for f in study(**changes).check(data).findings if "eplicate" in f.message]


def test_sound_replicates_are_counted_and_nothing_is_held_against_them():
    found = told(frame())
    assert [f.weight for f in found] == ["note"]
    assert "16 replicate weights (fay), rw1 to rw16; they add up to" in found[0].message
    facts = study().check(frame()).facts.set_index("fact")["value"]
    assert facts["replicate weights"] == 16


def test_names_and_patterns_find_columns_in_the_order_of_the_extract():
    data = frame()
    some = study(columns=("rw1?", "rw2", "rw2")).check(data).facts.set_index("fact")["value"]
    assert some["replicate weights"] == 8  # rw10 to rw16, and rw2 once
    everything = study(columns=("rw*", "w")).check(data).facts.set_index("fact")["value"]
    assert everything["replicate weights"] == 16  # the full weight is not one of them


@pytest.mark.parametrize(
    ("change", "columns", "message", "mend"),
    [
        (lambda d: d, "rep*", 'names "rep\\*", and the extract has no such column', "It has w, x, a"),
        (lambda d: d, "rw1", r"finds 1 column\(s\)", "at least two"),
        (
            lambda d: d.assign(rw2="text"),
            "rw*",
            r"1 replicate weight column\(s\) hold no numbers: rw2",
            "Narrow",
        ),
        (
            lambda d: d.assign(rw3=d["rw3"].where(d.index != 17)),
            "rw*",
            r'"rw3" is missing or infinite in 1 row\(s\), first in row 17',
            "weight 0",
        ),
        (
            lambda d: d.assign(rw3=d["rw3"].where(d.index < 200, np.inf)),
            "rw*",
            r'"rw3" is missing or infinite in 40 row\(s\), first in row 200',
            "weight 0",
        ),
        (
            lambda d: d.assign(**{c: d[c] / d["w"] for c in d if c.startswith("rw")}),
            "rw*",
            r"add up to 0.0\d+ times the full weights .* look like multipliers",
            "weights of the same persons",
        ),
        (
            lambda d: d.assign(**{c: d[c] * 3 for c in d if c.startswith("rw")}),
            "rw*",
            r"add up to 3(\.0\d+)? times the full weights",
            "weights of the same persons",
        ),
        (
            lambda d: d.assign(**{c: d["w"] for c in d if c.startswith("rw")}),
            "rw*",
            'All 16 replicate weights equal "w"',
            "Check design.replicates.columns",
        ),
    ],
)
def test_replicates_that_cannot_be_weights_are_refused(change, columns, message, mend):
    with pytest.raises(DesignError, match=message) as refused:
        study(columns=columns).check(change(frame()))
    assert mend in refused.value.mend


def test_factors_must_be_as_many_as_replicates():
    with pytest.raises(DesignError, match=r"has 3 value\(s\), and there are 16 replicates"):
        study(replicate_factors=(1.0, 1.0, 1.0)).check(frame())


@pytest.mark.parametrize(
    ("changes", "spread", "other"),
    [
        ({"fay": 0.2}, "0.25; it would be 0.64 for fay with the factor 0.2", "factor 0.50"),
        ({"fay": None, "method": "brr"}, "0.25; it would be 1 for brr", "factor 0.50"),
        ({"fay": None, "method": "jackknife", "factor": 1.0}, None, None),
    ],
)
def test_a_wrong_method_or_factor_shows_in_how_far_weights_move(changes, spread, other):
    found = [f for f in told(frame(), **changes) if f.weight == "warning"]
    if spread is None:
        found = [
            f for f in told(frame(fay=0.2), **changes) if f.weight == "warning"
        ]  # 0.64 is no jackknife's
        assert "close to 0" in found[0].message
        return
    assert len(found) == 1
    assert spread in found[0].message
    assert other in found[0].message


def test_odd_columns_are_named():
    data = frame()
    repeated = told(data.assign(rw16=data["rw15"]))
    assert any("1 replicate weight(s) repeat another: rw16" in f.message for f in repeated)
    still = told(data.assign(rw16=data["w"]))
    assert any("1 replicate weight(s) equal the full weight in every row: rw16" in f.message for f in still)
    small = told(data.assign(rw16=data["rw16"] * 0.2))
    assert any("1 of 16 replicate weights add up to less than half" in f.message for f in small)
    negative = told(data.assign(rw16=data["rw16"].where(data.index > 2, -data["rw16"])))
    assert any("3 replicate weights are negative, in 1 column(s)" in f.message for f in negative)
    back = told(data.assign(w=data["w"].where(data.index > 4, 0.0)))
    assert any("5 row(s) have full weight 0 and weight in some replicate" in f.message for f in back)


def test_codes_for_no_answer_hold_for_replicate_weights_too():
    plan = study()
    data = frame()
    data.loc[3, "rw5"] = -9
    from dataclasses import replace

    from steelyard.plan import Data

    coded = replace(plan, data=Data(missing={"rw5": (-9,)}))
    with pytest.raises(DesignError, match='"rw5" is missing or infinite in 1 row'):
        coded.check(data)


def test_a_key_that_is_no_key_of_replicates_is_refused_with_the_nearest():
    with pytest.raises(
        PlanError, match=r'Unknown key "facter" in the plan: \[design.replicates\]'
    ) as refused:
        Design(weight="w", replicates={"columns": "rw*", "method": "brr", "facter": 1})  # type: ignore[arg-type]
    assert '"factor"' in refused.value.mend
