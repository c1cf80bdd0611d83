import pytest

from steelyard.errors import PlanError
from steelyard.keys import plan_keys
from steelyard.plan import Design, Exposure, Outcome, Plan
from steelyard.plan_file import read_plan

MINIMAL = """
[data]
files = "a.parquet"
[design]
weight = "w"
[exposure]
formula = "a ~ x"
[[outcome]]
name = "y"
"""


def read(tmp_path, text):
    path = tmp_path / "study.toml"
    path.write_text(text)
    return Plan(**read_plan(path))


def refusal(tmp_path, text):
    with pytest.raises(PlanError) as caught:
        read(tmp_path, text)
    assert caught.value.mend
    return str(caught.value)


def test_toml_and_python_spell_the_same_plan(tmp_path):
    full = """
title = "t"
[data]
files = ["a.parquet", "b.parquet"]
domain = "age > 5"
[data.missing]
income = [9998, "DK"]
[design]
weight = "w"
strata = "h"
clusters = ["area", "hh"]
population = "areas"
single_psu = "collapse"
[exposure]
formula = "a ~ x"
estimand = "ATT"
link = "probit"
weighted = false
stabilize = true
cap_quantile = 0.99
propensity_range = [0, 0.9]
exposed = "yes"
reference = 0
[balance]
columns = "z"
squares = true
interactions = true
[[outcome]]
name = "y"
family = "poisson"
measure = "ratio"
covariates = "x"
[[outcome]]
name = "b"
[variance]
propensity = "known"
confidence = 0.9
[report]
minimum_count = 5
"""
    plan = read(tmp_path, full)
    same = Plan(
        title="t",
        data={"files": ("a.parquet", "b.parquet"), "domain": "age > 5", "missing": {"income": [9998, "DK"]}},
        design=Design(
            weight="w", strata=("h",), clusters=("area", "hh"), population=["areas"], single_psu="collapse"
        ),
        exposure=Exposure(
            formula="a ~ x",
            estimand="ATT",
            link="probit",
            weighted=False,
            stabilize=True,
            cap_quantile=0.99,
            propensity_range=(0.0, 0.9),
            exposed="yes",
            reference=0,
        ),
        balance={"columns": ["z"], "squares": True, "interactions": True},
        outcome=[Outcome(name="y", family="poisson", measure="ratio", covariates="x"), {"name": "b"}],
        variance={"propensity": "known", "confidence": 0.9},
        report={"minimum_count": 5},
    )
    assert plan == same
    assert plan.folder == tmp_path
    assert plan_keys(plan)["exposure"]["propensity_range"] == [0.0, 0.9]
    assert Plan(**plan_keys(plan)) == plan


def test_unknown_keys_are_refused_with_the_nearest_known_one(tmp_path):
    assert 'Did you mean "weight"?' in refusal(tmp_path, MINIMAL.replace("weight", "wieght"))
    assert 'Did you mean "exposure"?' in refusal(tmp_path, MINIMAL.replace("[exposure]", "[exposur]"))
    assert 'Did you mean "name"?' in refusal(tmp_path, MINIMAL.replace("name", "nam"))
    assert "Known there: title, data" in refusal(tmp_path, MINIMAL + "[zzzzzz]\n")


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (("[design]", "[design]\nsingle_psu = 'colapse'"), 'Did you mean "collapse"'),
        (('weight = "w"', "weight = 3"), "design.weight is 3; it must be text"),
        (('weight = "w"', ""), 'lacks "weight"'),
        (("[exposure]", "[exposure]\nestimand = 'att'"), "one of ATE, ATT, ATC, ATO"),
        (("[exposure]", "[exposure]\ncap_quantile = 1.5"), "cap_quantile is 1.5"),
        (("[exposure]", "[exposure]\npropensity_range = [0.9, 0.1]"), "low < high"),
        (("[exposure]", "[exposure]\npropensity_range = [0.1]"), "takes two"),
        (("[exposure]", "[exposure]\nestimand = 'ATO'\nstabilize = true"), "no meaning for the ATO"),
        (("[exposure]", "[exposure]\nweighted = 'yes'"), "true or false"),
        (("[exposure]", "[exposure]\nreference = 0"), "without exposure.exposed"),
        (('name = "y"', 'name = "y"\nmeasure = "odds-ratio"'), "odds ratio of a gaussian"),
        (('name = "y"', 'name = "y"\n[[outcome]]\nname = "y"'), "twice"),
        (("[design]", "[design]\nclusters = ['a', 'b', 'c', 'd']"), "at most three"),
        (("[design]", "[design]\nclusters = ['a', 'a']"), "more than once"),
        (("[design]", "[design]\npopulation = ['a', 'b']"), "only 0 cluster stage(s)"),
        (("[design]", "[variance]\nconfidence = 95\n[design]"), "confidence is 95"),
        (("[design]", "[variance]\nmethod = 'guess'\n[design]"), "linearization"),
        (("[design]", "[report]\nminimum_count = -1\n[design]"), "cannot be negative"),
        (("[design]", "[report]\nminimum_count = 2.5\n[design]"), "a whole number"),
        (("[[outcome]]", "[outcome2]"), "Unknown key"),
        (('[[outcome]]\nname = "y"', "outcome = []"), "must be"),
    ],
)
def test_values_a_plan_cannot_have_are_refused(tmp_path, change, words):
    text = MINIMAL.replace(*change)
    assert text != MINIMAL
    message = refusal(tmp_path, text)
    assert words in message or change[0].startswith("[[outcome]]"), message


def test_a_plan_without_outcomes_is_refused():
    with pytest.raises(PlanError, match="no outcome"):
        Plan(design=Design(weight="w"), exposure=Exposure(formula="a ~ x"), outcome=())


def test_a_plan_file_that_is_missing_or_not_toml_is_told(tmp_path):
    with pytest.raises(PlanError, match="no plan file"):
        read_plan(tmp_path / "none.toml")
    assert "not valid TOML" in refusal(tmp_path, "title = unquoted")
    (tmp_path / "bad.toml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(PlanError, match="cannot be read"):
        read_plan(tmp_path / "bad.toml")
