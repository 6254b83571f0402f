"""Digits follow sigma; typesetting of numbers and angles."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from firstarc.report.rounding import (
    agreeing,
    declination,
    declination_decimals,
    fixed,
    right_ascension,
    scientific,
    sexagesimal,
    sigma_decimals,
    significant,
    with_sigma,
)


@pytest.mark.parametrize(
    ("sigma", "decimals"),
    [
        (1.0, 1),
        (1.94, 1),
        (2.0, 0),
        (9.4, 0),
        (9.6, -0),
        (96.0, -1),
        (0.13, 2),
        (0.034, 2),
        (0.0996, 2),
        (140.0, -1),
        (3000.0, -3),
    ],
)
def test_two_digits_after_a_leading_one_else_one(sigma, decimals):
    assert sigma_decimals(sigma) == decimals


@pytest.mark.parametrize("sigma", [0.0, -1.0, math.nan, math.inf])
def test_no_decimals_from_a_sigma_that_is_none(sigma):
    with pytest.raises(ValueError, match="positive and finite"):
        sigma_decimals(sigma)


def test_value_is_written_to_the_place_of_its_sigma():
    assert with_sigma(24517.63, 9.1, "km") == "24\u202f518 ± 9 km"
    assert with_sigma(0.699991, 0.000031) == "0.69999 ± 0.00003"
    assert with_sigma(24.60057, 0.00131, "°") == "24.6006 ± 0.0013°"
    assert with_sigma(24517.63, None, "km") == "24\u202f520 km"


def test_minus_signs_thousands_and_missing_numbers():
    assert fixed(-1485.2, 0) == "\u22121\u202f485"
    assert fixed(0.0004, 2, sign=True) == "0.00"
    assert fixed(-0.0004, 2, sign=True) == "0.00"
    assert fixed(math.nan, 3) == "\u2013"
    assert scientific(2.7e-6) == "2.7·10⁻⁶"
    assert scientific(0.00992, 3) == "0.009920"
    assert significant(0.00012345, 2) == "0.00012"


def test_sexagesimal_carries_when_it_rounds():
    assert sexagesimal(59.9999999 / 60.0, 1, sign=False) == "01 00 00.0"
    assert sexagesimal(-0.5, 0, sign=True) == "\u221200 30 00"
    assert right_ascension(359.99999999, 2) == "00 00 00.00"
    assert declination(-10.5, 1) == "\u221210 30 00.0"


@given(st.floats(-89.9, 89.9), st.floats(0.05, 9.0))
def test_a_declination_reads_back_to_half_its_last_place(dec_deg, sigma):
    text = declination(dec_deg, declination_decimals(sigma))
    sign = -1.0 if text[0] == "\u2212" else 1.0
    degrees, minutes, seconds = text[1:].split()
    assert float(seconds) < 60.0 and int(minutes) < 60
    back = sign * (int(degrees) + int(minutes) / 60.0 + float(seconds) / 3600.0)
    places = len(seconds.partition(".")[2])
    assert abs(back - dec_deg) * 3600.0 <= 0.5 * 10.0**-places + 1e-9


@given(st.floats(-1e6, 1e6), st.floats(1e-3, 1e3))
def test_rounding_never_moves_a_value_by_more_than_a_sigma(value, sigma):
    text = with_sigma(value, sigma).split(" ± ")[0].replace("\u202f", "").replace("\u2212", "-")
    assert abs(float(text) - value) <= sigma


def test_underlined_digits_are_settled_by_difference_not_by_text():
    # 9.99 and 10.01 share no digit, yet both are settled to the tens and units
    assert agreeing("9.99", 9.99, 10.01, 2) == 3  # "9.9": |difference| 0.02 < 0.05
    assert agreeing("24.6153", 24.6153, 24.6006, 4) == 4
    assert agreeing("359.99", 359.99, 0.01, 2, period=360.0) == 5
    assert agreeing("359.99", 359.99, 0.01, 2) == 0
    assert agreeing("5.0", math.nan, 5.0, 1) == 0
