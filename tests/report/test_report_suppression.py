"""Which cells are hidden: an attacker with linear algebra must not find a small one."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pandas as pd
from hypothesis import given, settings
from hypothesis import strategies as st

from steelyard.report.released_counts import released_exclusions, released_strata
from steelyard.report.suppression import is_hidden, joined_runs, with_complements

MINIMUM = 10


def determined(constraints, size):
    """Which unknowns the linear constraints fix: those whose unit vector lies in the constraints' row space."""
    matrix = np.array(constraints, dtype=float).reshape(-1, size)
    rank = np.linalg.matrix_rank(matrix) if matrix.size else 0
    return [np.linalg.matrix_rank(np.vstack([matrix, np.eye(size)[j]])) == rank for j in range(size)]


some_rows = st.one_of(st.integers(0, 6), st.integers(0, 60))
counts = st.lists(st.integers(0, 40), min_size=2, max_size=12)


@given(counts)
def test_hidden_cells_of_a_row_with_a_known_total_are_several_and_hold_the_minimum(cells):
    numbers = np.array(cells)
    hidden = with_complements(numbers, numbers < MINIMUM, MINIMUM)
    assert hidden[numbers < MINIMUM].all()
    if hidden.any() and not hidden.all():
        assert hidden.sum() >= 2
        assert numbers[hidden].sum() >= MINIMUM


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(some_rows, some_rows), min_size=3, max_size=10))
def test_nobody_can_subtract_their_way_to_a_hidden_stratum(cells):
    exposed, reference = np.array(cells).T
    frame = pd.DataFrame(
        {
            "stratum": [f"h{k}" for k in range(len(cells))],
            "psus": 3,
            "rows": exposed + reference + 100,
            "domain_rows": exposed + reference,
            "exposed": exposed,
            "reference": reference,
            "psus_without_exposed": 0,
            "psus_without_reference": 0,
        }
    )
    released = released_strata(frame, MINIMUM, "under 10")
    inside = released["stratum"].str[1:].astype(int).to_numpy()
    small_shown = [
        value
        for name in ("exposed", "reference", "domain_rows")
        for value in released[name]
        if not is_hidden(value) and value < MINIMUM
    ]
    assert small_shown == []
    hidden = {
        name: released[name].map(is_hidden).to_numpy() for name in ("exposed", "reference", "domain_rows")
    }
    unknown = [(name, k) for name, mask in hidden.items() for k in np.flatnonzero(mask)]
    if not unknown or hidden["exposed"].all():
        return
    place = {cell: j for j, cell in enumerate(unknown)}

    def row(cells_of):
        return [1.0 if cell in cells_of else 0.0 for cell in unknown]

    constraints = [row([(name, k) for k in range(len(inside))]) for name in hidden]
    for k in range(len(inside)):
        line = np.zeros(len(unknown))
        for name, sign in (("exposed", 1), ("reference", 1), ("domain_rows", -1)):
            if (name, k) in place:
                line[place[name, k]] = sign
        constraints.append(line)
    assert not any(determined(constraints, len(unknown)))


def test_one_hidden_cell_is_never_alone_however_large_it_is():
    hidden = with_complements(np.array([50, 60, 70]), np.array([True, False, False]), MINIMUM)
    assert list(hidden) == [True, True, False]


def test_a_hidden_total_hides_its_parts():
    exposed, reference = [3, 12, 90, 80], [4, 90, 11, 85]
    frame = pd.DataFrame({"stratum": list("abcd"), "psus": 3, "exposed": exposed, "reference": reference})
    frame = frame.assign(psus_without_exposed=0, psus_without_reference=0, rows=200)
    frame["domain_rows"] = frame["exposed"] + frame["reference"]
    released = released_strata(frame, MINIMUM, "under 10")
    for k in np.flatnonzero(released["domain_rows"].map(is_hidden)):
        assert is_hidden(released["exposed"][k])
        assert is_hidden(released["reference"][k])


def test_a_lone_small_exclusion_takes_the_next_smallest_with_it():
    frame = pd.DataFrame(
        {"reason": ["outside the domain", "age missing", "x missing", "y missing"], "rows": [900, 4, 60, 0],
         "share": [0.9, 0.004, 0.06, 0.0]}
    )  # fmt: skip
    released, named = released_exclusions(frame, False, MINIMUM, "under 10")
    assert list(released["rows"]) == [900, "under 10", "hidden", 0]
    assert list(released["share"]) == [0.9, "under 10", "hidden", 0.0]
    assert named == ("age missing", "x missing")


@given(st.lists(st.integers(0, 30), min_size=1, max_size=20))
def test_joined_bins_hold_enough_rows_and_cover_every_row_once(cells):
    runs = joined_runs(cells, MINIMUM)
    if sum(cells) < MINIMUM:
        assert runs == []
        return
    assert all(sum(cells[a:b]) >= MINIMUM for a, b in runs)
    assert all(left[1] == right[0] for left, right in pairwise(runs))
    assert sum(sum(cells[a:b]) for a, b in runs) == sum(cells)


def test_without_a_minimum_every_bin_stands_alone():
    assert joined_runs([0, 3, 0, 5, 0], 0) == [(1, 2), (2, 3), (3, 4)]
