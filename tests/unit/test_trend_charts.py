"""Charts, their widths and the sharing out of the promise, for any numbers."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from numpy.testing import assert_allclose

from qa.trend.arl import ewma_limit, ewma_limit_estimated
from qa.trend.budget import WEIGHT, Promise, beyond_chance, shares, smooth
from qa.trend.charts import cusum, ewma, ewma_level, individuals, last_zero
from qa.trend.levels import Chartable
from qa.trend.widths import width_of

numbers = st.floats(-1e6, 1e6, allow_nan=False)
series = arrays(np.float64, st.integers(2, 60), elements=numbers)


@given(series, st.floats(0.05, 1.0), st.floats(-1e3, 1e3))
def test_ewma_is_the_recursion_it_says(values, weight, start):
    level, expected = start, []
    for value in values:
        level = weight * value + (1.0 - weight) * level
        expected.append(level)
    assert_allclose(ewma_level(values, weight, start), expected, rtol=1e-9, atol=1e-6)


@pytest.mark.parametrize("weight", [0.05, 0.2, 0.9])
def test_ewma_of_thousands_of_values_loses_no_digits(weight):
    values = np.random.default_rng(1).standard_normal(20_000)
    expected = 0.0
    for value in values:
        expected = weight * value + (1.0 - weight) * expected
    assert ewma_level(values, weight)[-1] == pytest.approx(expected, abs=1e-12)


@given(series, st.data())
def test_a_missing_value_leaves_every_chart_where_it_was(values, data):
    place = data.draw(st.integers(1, values.size - 1))
    holed = values.copy()
    holed[place] = np.nan
    level = ewma_level(holed, 0.2)
    assert level[place] == pytest.approx(level[place - 1], rel=1e-12, abs=1e-9)
    chart = cusum(holed, target=0.0, slack=1.0, decision=5.0)
    assert chart.high[place] == chart.high[place - 1]


@given(series, st.floats(0.01, 100.0))
def test_charts_do_not_care_for_the_unit(values, factor):
    sigma = float(np.std(values)) + 1.0
    one = ewma(values, weight=0.2, centre=0.0, sigma=sigma, width=2.9)
    other = ewma(values * factor, weight=0.2, centre=0.0, sigma=sigma * factor, width=2.9)
    assert_allclose(other.level, one.level * factor, rtol=1e-9, atol=1e-6 * factor)
    clear = np.abs(np.abs(one.level) - one.upper) > 1e-6 * one.upper
    assert (one.signal == other.signal)[clear].all()
    assert_allclose(individuals(values * factor).sigma, individuals(values).sigma * factor, rtol=1e-9)


def test_the_series_of_widths_agrees_with_the_solved_ones():
    for arl, runs, freedom in [(50.0, 4.0, 10.0), (800.0, 8.0, 15.0), (3000.0, 12.0, 60.0), (5800.0, 8.4, 25.0)]:
        solved = ewma_limit_estimated(arl, WEIGHT, runs, freedom)
        assert width_of(arl, runs, np.array([freedom]))[0] == pytest.approx(solved, rel=0.005)


def test_a_known_baseline_needs_the_textbook_width():
    assert width_of(500.0, np.inf, np.array([np.inf]))[0] == pytest.approx(ewma_limit(500.0, WEIGHT), rel=0.005)


@settings(deadline=None)
@given(st.floats(30.0, 1e5), st.floats(2.0, 50.0), st.floats(5.0, 200.0))
def test_widths_grow_with_the_promise_and_with_doubt_about_the_baseline(arl, runs, freedom):
    width = width_of(arl, runs, np.array([freedom]))[0]
    assert width_of(arl * 1.3, runs, np.array([freedom]))[0] > width
    assert width_of(arl, runs, np.array([freedom * 0.8]))[0] > width * 0.995


def test_shares_add_up_to_the_promise():
    share = shares(Promise(watch_per_year=1.0), 52.0, levels=2, vials=28)
    a_year = 52.0 * (2 / share.level_arl + 28 / share.vial_arl + 28 * share.reading + 2 * share.run)
    assert a_year == pytest.approx(1.0)


def test_chance_limits_widen_where_the_scatter_is_little_known():
    narrow, wide = beyond_chance(1e-3, np.array([1e6, 5.0]))
    assert narrow == pytest.approx(3.29, abs=0.01)
    assert wide > 1.5 * narrow


@given(st.integers(0, 39), st.floats(-1e6, 1e6))
def test_one_run_however_wild_makes_no_signal(place, size):
    percent = np.zeros(40)
    percent[place] = size
    assert not smooth(chartable(percent), 50.0).signal.any()


@given(st.integers(2, 39), st.floats(3.0, 1e6))
def test_two_wild_runs_that_disagree_make_no_signal(place, size):
    percent = np.zeros(40)
    percent[place - 2 : place] = size, -size
    assert not smooth(chartable(percent), 50.0).signal.any()


def test_a_lasting_shift_of_two_sigmas_is_soon_seen():
    delays = []
    for seed in range(40):
        percent = 0.5 * np.random.default_rng(seed).standard_normal(80)
        percent[30:] += 1.0
        after = np.flatnonzero(smooth(chartable(percent), 300.0).signal[30:])
        delays.append(int(after[0]) + 1 if after.size else 99)
    assert np.median(delays) <= 10
    assert max(delays) < 50


@given(st.integers(5, 30), st.integers(3, 20), st.sampled_from([-1.0, 1.0]))
def test_a_shift_is_dated_to_its_first_value(before, after, side):
    values = np.concatenate([np.zeros(before), np.full(after, 2.0 * side)])
    assert last_zero(values, slack=0.5) == before
    values[0] = np.nan
    assert last_zero(values, slack=0.5) == before


def chartable(percent):
    shape = percent.shape
    sd = np.full(shape, 0.5)
    return Chartable(percent, sd, sd, np.full(shape, 30.0), np.array(8.0))
