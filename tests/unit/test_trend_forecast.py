"""When a slope reaches a limit."""

from dataclasses import replace
from datetime import date, timedelta

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.trend.change import Change
from qa.trend.forecast import forecast

TODAY = date(2026, 3, 2)
SLOPE = Change("slope", 0.0, 0.0, 0.0, 3.0, 0.2, 3.0, 0.2, 60.0, 1e-9, 9.0, 1.0)


def test_two_percent_left_at_two_percent_a_year_is_a_year():
    slope = replace(SLOPE, rate=2.0, u_rate=0.1)
    told = forecast(slope, 3.0, 0.0, 5.0, TODAY)
    assert abs(told.crosses - (TODAY + timedelta(days=365))) <= timedelta(days=1)
    # 90 % of the rate: 2 +- 0.167 for 60 degrees of freedom
    assert abs((told.earliest - TODAY).days - 365.25 * 2 / 2.167) < 3
    assert abs((told.latest - TODAY).days - 365.25 * 2 / 1.833) < 3


@given(
    rate=st.floats(0.2, 20.0),
    u_rate=st.floats(0.001, 5.0),
    now=st.floats(-4.0, 8.0),
    u_now=st.floats(0.0, 1.0),
    side=st.sampled_from([-1.0, 1.0]),
)
def test_a_forecast_is_in_order_and_the_same_on_both_sides(rate, u_rate, now, u_now, side):
    slope = replace(SLOPE, rate=side * rate, u_rate=u_rate)
    told = forecast(slope, side * now, u_now, 5.0, TODAY)
    far = date.max
    days = [told.earliest or far, told.crosses or far, told.latest or far]
    assert days == sorted(days)
    assert days[0] >= TODAY
    assert told == forecast(replace(slope, rate=rate), now, u_now, 5.0, TODAY)


def test_a_level_beyond_the_limit_crosses_today():
    told = forecast(SLOPE, 5.5, 0.1, 5.0, TODAY)
    assert (told.crosses, told.earliest, told.latest) == (TODAY, TODAY, TODAY)


def test_what_lies_beyond_ten_years_is_not_told():
    told = forecast(replace(SLOPE, rate=0.1, u_rate=0.001), 0.0, 0.0, 5.0, TODAY)
    assert (told.crosses, told.earliest, told.latest) == (None, None, None)


def test_an_unsure_slope_has_no_latest_day():
    told = forecast(replace(SLOPE, rate=1.0, u_rate=1.0), 4.0, 0.0, 5.0, TODAY)
    assert told.latest is None
    assert told.crosses is not None


@pytest.mark.parametrize("u_now", [0.05, 0.5])
def test_doubt_about_the_level_widens_the_interval(u_now):
    sure = forecast(SLOPE, 3.0, 0.0, 5.0, TODAY)
    unsure = forecast(SLOPE, 3.0, u_now, 5.0, TODAY)
    assert unsure.crosses == sure.crosses
    assert unsure.earliest < sure.earliest
    assert unsure.latest > sure.latest
    assert np.isclose((unsure.latest - unsure.crosses).days ** 2, _widened(sure, u_now), rtol=0.1)


def _widened(sure, u_now):
    """Squared days of both doubts together."""
    return (sure.latest - sure.crosses).days ** 2 + (1.645 * u_now / 3.0 * 365.25) ** 2
