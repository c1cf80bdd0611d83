"""What a design says of itself: counts, fractions, treatments of lone PSUs, notes and refusals."""

from __future__ import annotations

import numpy as np
import pytest
from design_samples import Sample, made_sample, units_of

from steelyard.design.survey import survey_design
from steelyard.errors import DesignError, PlanError

WORDS = ["refuse", "recentre", "collapse", "self-representing"]


def sample_of(psus, rows=2, populations=None, households=None, outside=()):
    """A sample of ``psus[h]`` PSUs in stratum h with ``rows`` rows each; strata ``outside`` leave the domain."""
    ids = [
        [h, j] + ([] if households is None else [i % households])
        for h, count in enumerate(psus)
        for j in range(count)
        for i in range(rows)
    ]
    ids = np.array(ids)
    given = np.zeros((len(ids), 0)) if populations is None else np.array(populations, float)[ids[:, 0]]
    n = len(ids)
    return Sample(
        ids,
        given.reshape(n, -1),
        np.ones(n),
        np.arange(n, dtype=float)[:, None] ** 2,
        ~np.isin(ids[:, 0], outside),
    )


def design_of(psus, word="refuse", **how):
    return survey_design(units_of(sample_of(psus, **how))[0], word)


def lone_in_rows(populations=None):
    """Rows as PSUs: strata of 1, 3 and 2 rows."""
    ids = np.array([[0], [1], [1], [1], [2], [2]])
    given = np.zeros((6, 0)) if populations is None else np.array(populations, float)[ids]
    return Sample(ids, given, np.ones(6), np.arange(6.0)[:, None], np.ones(6, bool))


def test_counts_are_of_strata_that_hold_the_domain():
    design = design_of([2, 3, 4], outside=(1,))
    assert (design.psus, design.strata, design.df) == (6, 2, 4)
    assert (design.all_psus, design.all_strata) == (9, 3)
    assert design.notes == ()


def test_psus_without_a_row_of_the_domain_still_count_in_their_stratum():
    sample = sample_of([2, 3])
    sample.inside[sample.ids[:, 1] > 0] = False
    design = survey_design(units_of(sample)[0])
    assert (design.psus, design.strata, design.df) == (5, 2, 3)


def test_rows_are_psus_where_there_are_no_clusters():
    sample = lone_in_rows()
    sample = sample.take(sample.ids[:, 0] > 0)
    design = survey_design(units_of(sample)[0])
    assert (design.psus, design.strata, design.df, design.stages) == (5, 2, 3, 1)


def test_fractions_by_stage_come_from_populations():
    sample = made_sample(3, depth=2, given=3, strata=3)
    design = survey_design(units_of(sample)[0])
    ids, populations = sample.ids, sample.populations
    for level, fractions in enumerate(design.fractions):
        above = np.unique(ids[:, : level + 1], axis=0)
        assert len(fractions) == len(above)
        for unit, fraction in zip(above, fractions, strict=True):
            there = (ids[:, : level + 1] == unit).all(axis=1)
            count = len(np.unique(ids[there, level + 1])) if level < 2 else there.sum()
            assert fraction == pytest.approx(count / populations[there, level][0], rel=1e-15)
    assert design.stages == 3


def test_stages_without_populations_have_no_fraction_and_no_variance():
    design = survey_design(units_of(made_sample(4, depth=2))[0])
    assert all((fractions == 0).all() for fractions in design.fractions)
    assert design.stages == 1


def test_refusal_names_strata_rows_and_the_mend():
    with pytest.raises(DesignError) as refused:
        design_of([1, 1, 4, 1, 1, 1, 1, 1], rows=3)
    assert refused.value.message.startswith(
        "7 of 8 strata have one PSU: h0 (3 rows), h1 (3 rows), h3 (3 rows),"
    )
    assert "h5 (3 rows), and 2 more." in refused.value.message
    assert "h6" not in refused.value.message
    for word in WORDS[1:]:
        assert f'"{word}"' in refused.value.mend
    assert "join strata" in refused.value.mend


def test_refusal_of_a_lone_row():
    with pytest.raises(DesignError, match=r"1 of 3 strata have one PSU: h0 \(1 rows\)"):
        survey_design(units_of(lone_in_rows())[0])


def test_an_unknown_treatment_is_refused():
    with pytest.raises(PlanError, match='single_psu is "ignore"'):
        design_of([2, 2], "ignore")


@pytest.mark.parametrize(
    ("psus", "joined"),
    [
        ([1, 3, 2], [{0, 1}, {2}]),  # the next one
        ([3, 2, 1], [{0}, {1, 2}]),  # the last joins the one before
        ([2, 1, 1, 3], [{0}, {1, 2}, {3}]),  # a run joins together
        ([1, 1, 1], [{0, 1, 2}]),
        ([1, 1, 1, 2], [{0, 1, 2}, {3}]),
        ([2, 1, 1, 1], [{0}, {1, 2, 3}]),
        ([1, 2, 1], [{0, 1, 2}]),  # the last joins a stratum that was joined already
        ([1, 2, 1, 2], [{0, 1}, {2, 3}]),
        ([2, 2], [{0}, {1}]),
    ],
)
def test_collapse_joins_neighbours(psus, joined):
    design = design_of(psus, "collapse")
    group = design.group
    assert sorted(({int(h) for h in np.flatnonzero(group == g)} for g in np.unique(group)), key=min) == joined
    assert (design.psus, design.strata) == (sum(psus), len(joined))
    assert design.df == sum(psus) - len(joined)
    told = [" with ".join(f"h{h}" for h in sorted(strata)) for strata in joined if len(strata) > 1]
    assert all(any(text in note for note in design.notes) for text in told)


def test_collapse_adds_populations_up():
    design = design_of([1, 3, 2], "collapse", populations=[4, 12, 5])
    assert design.fractions[0].tolist() == pytest.approx([4 / 16, 2 / 5])
    assert design.notes == ("1 stratum(s) with one PSU were joined with a neighbour: h0 with h1.",)


def test_collapse_passes_over_a_certain_stratum():
    design = design_of([3, 1, 1, 1, 2], "collapse", populations=[9, 1, 7, 1, 6])
    group = design.group
    assert group[2] == group[4]
    assert len(np.unique(group)) == 4
    assert (design.fraction[group] == 1).tolist() == [False, True, False, True, False]


def test_collapse_of_strata_in_the_domain_counts_them_once():
    design = design_of([1, 3, 2], "collapse", outside=(1,))
    assert (design.psus, design.strata, design.df) == (6, 2, 4)


@pytest.mark.parametrize("word", WORDS)
def test_a_psu_that_is_its_population_is_certain_under_every_treatment(word):
    design = design_of([1, 3], word, populations=[1, 12], households=2)
    assert design.fractions[0].tolist() == [1, 3 / 12]
    assert design.factors[0][0] == 0
    assert "whole population there (h0)" in design.notes[0]
    # Two households act in place of the certain PSU: one degree of freedom beside the two of the other.
    assert design.df == 1 + 2


def test_recentred_psus_bring_no_degree_of_freedom():
    design = design_of([1, 3, 1], "recentre")
    assert (design.psus, design.strata, design.df) == (5, 3, 2)
    assert design.notes == (
        "2 stratum(s) have one PSU (h0, h2): the lone PSU's deviation is taken from the mean of all PSUs.",
    )


def test_self_representing_psus_bring_the_clusters_below_them():
    below = design_of([1, 3], "self-representing", households=4, rows=8)
    assert below.df == 2 + 3
    assert below.stages == 2
    rows_only = design_of([1, 3], "self-representing", rows=8)
    assert rows_only.df == 2
    assert rows_only.stages == 1
    # Rows whose population is given have a variance of their own, and so degrees of freedom.
    counted = design_of([1, 3], "self-representing", rows=8, populations=[(2, 20), (9, 20)])
    assert counted.df == 2 + 7


def test_one_psu_in_all_cannot_be_compared():
    for word, wanting in (("recentre", "no other PSU to compare"), ("collapse", "nothing to join")):
        with pytest.raises(
            DesignError, match=rf"Stratum h0 has one PSU \(2 rows\), and there is {wanting}"
        ) as refused:
            design_of([1], word)
        assert "at least two PSUs" in refused.value.mend
    with pytest.raises(DesignError, match="Stratum h1 has one PSU"):
        design_of([1, 1], "collapse", populations=[1, 4])


def test_only_certain_psus_without_a_stage_below_leave_nothing():
    with pytest.raises(DesignError, match="All 2 PSUs were taken with certainty"):
        design_of([1, 1], "self-representing")
    assert design_of([1, 1], "self-representing", households=2).df == 2


def test_a_domain_without_degrees_of_freedom_is_noted():
    design = design_of([3, 1], "recentre", outside=(0,))
    assert design.df == 0
    assert any("no degrees of freedom" in note for note in design.notes)


def test_units_alone_below_are_noted_where_they_would_count():
    sample = sample_of([2, 2], rows=3, households=3, populations=[(4, 5), (4, 5)])
    lone = (sample.ids[:, 0] == 1) & (sample.ids[:, 2] > 0)
    units = units_of(sample.take(~lone))[0]
    assert survey_design(units).notes == (
        "2 unit(s) of stage 1 have one sampled unit below them: the next stage adds nothing to the variance "
        "there.",
    )
    without = sample.changed(populations=sample.populations[:, :1]).take(~lone)
    assert survey_design(units_of(without)[0]).notes == ()


def test_a_unit_that_is_all_there_is_below_is_not_noted():
    sample = sample_of([2, 2], rows=2, households=1, populations=[(4, 1), (4, 1)])
    assert survey_design(units_of(sample)[0]).notes == ()


def test_only_units_below_certain_psus_are_noted_where_no_population_is_given():
    sample = sample_of([1, 2], rows=2, households=1)
    notes = survey_design(units_of(sample)[0], "self-representing").notes
    assert any(note.startswith("1 unit(s) of stage 1") for note in notes)
