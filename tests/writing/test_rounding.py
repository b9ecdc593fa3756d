"""Values rounded by their intervals."""

from __future__ import annotations

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from glidefit.writing.rounding import decimals, percent, probability, rounded, significant

NAN = math.nan


# Two digits of the uncertainty, JCGM 100:2008 (GUM) 7.2.6; worked by hand: 9.96 carries to 10.
@pytest.mark.parametrize(
    ("value", "uncertainty", "text"),
    [
        (0.80349, 0.01234, "0.803 (0.791 to 0.816)"),
        (123.456, 9.96, "123 (113 to 133)"),
        (0.0041234, 0.000095, "0.004123 (0.004028 to 0.004218)"),
        # GUM 7.2.6: 10.05762 Ω with 27 mΩ is 10.058 Ω.
        (10.05762, 0.027, "10.058 (10.031 to 10.085)"),
    ],
)
def test_value_has_two_digits_of_half_its_interval(value, uncertainty, text):
    assert str(rounded(value, value - uncertainty, value + uncertainty)) == text


@pytest.mark.parametrize(
    ("uncertainty", "places"), [(9.96, 0), (9.94, 1), (0.01234, 3), (0.000095, 6), (1234.0, -2)]
)
def test_decimals_of_an_uncertainty(uncertainty, places):
    assert decimals(uncertainty) == places


@pytest.mark.parametrize("wrong", [0.0, -1.0, NAN, math.inf])
def test_decimals_refuses_what_is_no_uncertainty(wrong):
    with pytest.raises(ValueError, match="uncertainty"):
        decimals(wrong)


@pytest.mark.parametrize(
    ("numbers", "text"),
    [
        ((0.80, 0.77, 0.83), "0.80 (0.77 to 0.83)"),
        ((35.2, 12.0, NAN), "35 (at least 12)"),
        ((NAN, 12.0, NAN), "at least 12"),
        ((35.2, 12.0, math.inf), "35 (at least 12)"),
        ((0.01, NAN, 0.0312), "0.010 (at most 0.031)"),
        ((0.8, NAN, NAN), "0.80, no interval"),
        ((0.81234, NAN, NAN), "0.812, no interval"),
        ((NAN, 0.77, 0.83), "0.77 to 0.83"),
        ((NAN, NAN, NAN), "–"),
        ((-0.0004, -0.0061, 0.0053), "−0.0004 (−0.0061 to 0.0053)"),
        ((12340.0, 11106.0, 13574.0), "12300 (11100 to 13600)"),
        ((1e-5, 0.8e-5, 1.2e-5), "1.0 × 10⁻⁵ (0.8 × 10⁻⁵ to 1.2 × 10⁻⁵)"),
        ((2.1e-4, NAN, 9.4e-4), "2.1 × 10⁻⁴ (at most 9.4 × 10⁻⁴)"),
        ((0.0, 0.0, 0.0), "0.0 (0.0 to 0.0)"),
        ((5.0, 5.0, 5.0), "5.0 (5.0 to 5.0)"),
    ],
)
def test_ranges_open_ends_and_nothing(numbers, text):
    assert str(rounded(*numbers)) == text


@given(
    value=st.floats(-1e5, 1e5),
    below=st.floats(1e-3, 1e4),
    above=st.floats(1e-3, 1e4),
)
def test_rounding_moves_no_number_by_more_than_a_twentieth_of_half_the_interval(
    value, below, above
):
    low, high = value - below, value + above
    shown = rounded(value, low, high)
    numbers = [float(t.replace("−", "-")) for t in re.findall(r"[−\d.]+(?![⁰-⁹])", str(shown))]
    # Two digits are 10 to 99, so half a unit of the second is at most 1/20; 1e-9 is for floats.
    limit = (high - low) / 2 * (0.05 + 1e-9)
    if "×" not in str(shown):
        assert abs(numbers[0] - value) <= limit
        assert abs(numbers[1] - low) <= limit
        assert abs(numbers[2] - high) <= limit


@given(st.floats(0.002, 99), st.floats(0.001, 0.9))
def test_change_of_unit_by_ten_keeps_the_digits(value, share):
    first = rounded(value, value * (1 - share), value * (1 + share))
    second = rounded(10 * value, 10 * value * (1 - share), 10 * value * (1 + share))
    # A float times ten may fall on the other side of a tie, in the last digit.
    digits = [int(re.sub(r"\D", "", s.value).strip("0") or "0") for s in (first, second)]
    assert str(digits[0])[:2] == str(digits[1])[:2] or abs(digits[0] - digits[1]) <= 1


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (0.81749, "0.817"),
        (0.0, "0.00"),
        (NAN, "–"),
        (1234.5, "1230"),
        (0.00012345, "1.23 × 10⁻⁴"),
        (0.0009999, "1.00 × 10⁻³"),
        (-0.5, "−0.500"),
        (math.inf, "–"),
    ],
)
def test_number_alone_has_three_digits(value, text):
    assert significant(value) == text


def test_percent_and_probability():
    shares = [(0.95, 1), (0.004, 1), (3, 40), (1, 0), (0, 5), (8, 26_672), (1, 1)]
    assert [percent(part, whole) for part, whole in shares] == [
        *("95 %", "0.4 %", "7.5 %", "–", "0 %", "< 0.1 %", "100 %")
    ]
    assert [probability(p) for p in (0.0312, 0.5, 1e-9, NAN)] == ["0.031", "0.50", "< 0.0001", "–"]


@pytest.mark.parametrize(
    ("numbers", "text"),
    [
        ((111.0, 55.8, 9212.0), "111 (56 to 9212)"),
        ((162.0, 13.5, math.nan), "162 (at least 14)"),
        ((0.99, 0.70, 1.0), "0.99 (0.70 to 1.00)"),
    ],
)
def test_a_lopsided_interval_is_judged_by_its_shorter_arm(numbers, text):
    assert str(rounded(*numbers)) == text
