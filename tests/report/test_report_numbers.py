"""How numbers are written."""

from __future__ import annotations

import math

import pytest

from steelyard.report.numbers import count, decimals_for, fixed, p_value, percent, plain, significant, thin


@pytest.mark.parametrize(
    ("value", "decimals", "text"),
    [(-2.2216, 2, "−2.22"), (1234567.0, 0, "1\u202f234\u202f567"), (-0.0001, 2, "0.00"), (math.nan, 2, "–")],
)
def test_fixed_has_a_true_minus_thin_thousands_and_no_negative_zero(value, decimals, text):
    assert fixed(value, decimals) == text


@pytest.mark.parametrize(
    ("scale", "decimals"),
    [(0.2508, 2), (0.0332, 3), (12.3, 0), (0.0996, 2), (1e-12, 8), (0.0, 3), (math.nan, 3)],
)
def test_decimals_show_two_significant_digits_of_the_standard_error(scale, decimals):
    assert decimals_for(scale) == decimals


@pytest.mark.parametrize(
    ("p", "text"),
    [(8e-17, "< 0.001"), (0.00099, "< 0.001"), (0.001, "0.001"), (0.0763, "0.076"), (math.nan, "–")],
)
def test_small_p_values_are_said_to_be_small(p, text):
    assert p_value(p) == text


def test_whole_digits_are_never_cut():
    assert significant(24_000.5) == "24\u202f000"
    assert significant(1.6412) == "1.64"
    assert count(11_004.0) == "11\u202f004"


def test_a_small_share_is_not_called_zero():
    assert percent(0.0004) == "< 0.1%"
    assert percent(0.0) == "0.0%"


def test_terminals_get_the_signs_of_a_keyboard():
    assert plain(fixed(-1234.5, 1)) == "-1,234.5"


def test_sentences_get_the_thousands_of_the_tables_and_lists_keep_their_commas():
    assert thin("1,234,567 of 2,000 rows; strata 12,3 and 1, 234") == (
        "1\u202f234\u202f567 of 2\u202f000 rows; strata 12,3 and 1, 234"
    )
