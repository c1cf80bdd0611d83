"""What a design means: PSUs, strata, degrees of freedom, sampling fractions and strata with one PSU."""

from __future__ import annotations

import numpy as np
import pytest

from made import stage
from steelyard.data.units import Units
from steelyard.design.survey import survey_design
from steelyard.errors import DesignError


def units(psus, domain=None, population=None, below=None, below_population=None):
    """Strata with the given numbers of PSUs, ten rows each; ``below`` gives the next stage's units by PSU."""
    strata = len(psus)
    parent = np.repeat(np.arange(strata), psus)
    rows = np.full(len(parent), 10)
    inside = rows if domain is None else np.asarray(domain) * 10
    stages = [
        stage(
            np.zeros(strata),
            np.bincount(parent, rows, strata),
            np.bincount(parent, inside, strata),
            population,
        ),
        stage(parent, rows, inside, below_population),
    ]
    if below is not None:
        owner = np.repeat(np.arange(len(parent)), below)
        each = np.full(len(owner), 2)
        stages.append(stage(owner, each, each))
    return Units(tuple(stages))


def test_degrees_of_freedom_are_psus_minus_strata_that_hold_the_domain():
    found = survey_design(units([3, 4, 2], domain=[1, 0, 0, 0, 0, 0, 0, 1, 1]))
    assert (found.psus, found.strata, found.df) == (5, 2, 3)
    assert (found.all_psus, found.all_strata) == (9, 3)


def test_rows_are_psus_without_clusters():
    alone = Units((stage([0, 0], [5, 7], [5, 0], [50, 70]),))
    found = survey_design(alone)
    assert (found.psus, found.strata, found.df) == (5, 1, 4)
    np.testing.assert_allclose(found.fraction, [0.1, 0.1])


def test_lone_psus_are_refused_by_default_and_named():
    with pytest.raises(DesignError, match=r"2 of 4 strata have one PSU: 1 \(10 rows\), 3 \(10 rows\)"):
        survey_design(units([2, 1, 3, 1]))


def test_collapse_joins_runs_with_the_next_and_the_last_with_the_one_before():
    found = survey_design(units([1, 1, 3, 1, 2, 1], population=[2, 4, 30, 3, 8, 5]), "collapse")
    np.testing.assert_array_equal(found.group, [0, 0, 1, 2, 2, 2])
    np.testing.assert_array_equal(found.psus_in_group, [2, 3, 4])
    np.testing.assert_allclose(found.fraction, [2 / 6, 3 / 30, 4 / 16])
    assert (found.psus, found.strata, found.df) == (9, 3, 6)
    assert "4 stratum(s) with one PSU were joined" in found.notes[0]


def test_collapse_with_nothing_to_join_is_refused():
    with pytest.raises(DesignError, match="nothing to join"):
        survey_design(units([1]), "collapse")


def test_recentred_strata_count_their_psu_and_their_stratum():
    found = survey_design(units([3, 1]), "recentre")
    np.testing.assert_array_equal(found.centred_on_all, [False, True])
    assert found.df == 2


def test_self_representing_psus_count_through_the_units_below_them():
    found = survey_design(units([3, 1], below=[2, 2, 2, 6]), "self-representing")
    assert found.next_stage.tolist() == [False, True]
    assert found.fraction.tolist() == [0, 1]
    assert found.df == (3 - 1) + (6 - 1)
    assert found.stages == 2
    flat = survey_design(units([3, 1]), "self-representing")
    assert flat.df == 2
    assert flat.stages == 1


@pytest.mark.parametrize("treatment", ["refuse", "recentre", "collapse"])
def test_a_psu_that_is_its_whole_population_is_certain_whatever_the_treatment(treatment):
    found = survey_design(units([3, 1], population=[9, 1]), treatment)
    np.testing.assert_allclose(found.fraction, [1 / 3, 1])
    assert not found.centred_on_all.any()
    assert "certain" in found.notes[0]


def test_a_unit_alone_below_its_psu_is_noted():
    found = survey_design(units([2, 2], population=[9, 9], below=[1, 3, 3, 1], below_population=[5, 5, 5, 1]))
    assert "1 unit(s) of stage 1 have one sampled unit below" in found.notes[0]


def test_a_domain_without_degrees_of_freedom_is_noted():
    found = survey_design(units([2, 1], domain=[0, 0, 1]), "recentre")
    assert found.df == 0
    assert any("no degrees of freedom" in note for note in found.notes)
