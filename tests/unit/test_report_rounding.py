"""Numbers as people read them: two digits of the uncertainty, and the value to the same decimal."""

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.report.rounding import NONE, decimals_of, fixed, interval, significant, with_u

sizes = st.floats(1e-6, 1e6)
values = st.floats(-1e6, 1e6)


def number(text):
    return float(text.replace("−", "-"))


@given(sizes)
def test_an_uncertainty_keeps_two_significant_digits(u):
    places = decimals_of(u)
    assert abs(round(u, places) - u) <= 0.5 * 10.0**-places * (1 + 1e-9)
    digits = round(round(u, places) * 10.0**places)
    assert 10 <= digits <= 99


@given(values, sizes)
def test_the_value_ends_at_the_same_decimal_and_is_the_nearest(value, u):
    shown, shown_u = with_u(value, u).split(" ± ")
    places = max(decimals_of(u), 0)
    for text in (shown, shown_u):
        assert len(text.partition(".")[2]) == places
    assert abs(number(shown) - value) <= 0.5 * 10.0 ** -decimals_of(u) * (1 + 1e-9)


@pytest.mark.parametrize(
    ("value", "u", "text"),
    [
        (812.43, 3.14, "812.4 ± 3.1"),
        (1502.0, 99.6, "1500 ± 100"),
        (1502.0, 123.0, "1500 ± 120"),
        (-0.004, 0.12, "0.00 ± 0.12"),
        (-2.25, 0.41, "−2.25 ± 0.41"),
        (0.0996, 0.0996, "0.10 ± 0.10"),
    ],
)
def test_examples(value, u, text):
    assert with_u(value, u) == text


def test_what_is_absent_is_said_to_be():
    for nothing in (None, math.nan, math.inf):
        assert with_u(nothing, 1.0, "ms") == NONE
        assert significant(nothing) == NONE
        assert fixed(nothing, 2) == NONE
        assert interval(nothing, 1.0) == NONE
    assert "uncertainty unknown" in with_u(12.3, None, "ms")


@given(values, values)
def test_an_interval_contains_its_ends_to_its_own_rounding(first, second):
    low, high = sorted((first, second))
    text = interval(low, high, "%", sign=True)
    ends = [number(part) for part in re.findall(r"[+−]?[\d.]+", text)]
    room = max((high - low) / 2.0, abs(high) / 10.0, 1e-9)
    assert abs(ends[0] - low) <= room
    assert abs(ends[1] - high) <= room
