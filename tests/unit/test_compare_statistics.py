"""Properties of the single statistics of agreement, for any numbers."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from qa.compare.intervals import mean_interval, spread_interval, sum_interval
from qa.compare.linearity import line
from qa.compare.pairs import Repeats, concordance, limits_of_agreement
from qa.compare.precision import h_critical, k_critical, mandel, precision
from qa.compare.slabs import scatter

numbers = st.floats(-100.0, 100.0, allow_nan=False)
results = st.lists(arrays(np.float64, st.integers(0, 6), elements=numbers), min_size=1, max_size=6)


@given(results)
def test_reproducibility_is_never_below_repeatability(groups):
    found = precision(groups)
    if np.isfinite(found.s_R):
        assert found.s_R >= found.s_r
        assert found.s_R**2 == pytest.approx(found.s_r**2 + found.s_L**2)
    assert found.results == sum(len(group) for group in groups)


@given(results, st.floats(-50.0, 50.0), st.floats(0.01, 100.0))
def test_precision_does_not_care_for_level_and_goes_with_the_unit(groups, shift, factor):
    plain, other = precision(groups), precision([factor * group + shift for group in groups])
    assert other.s_r == pytest.approx(factor * plain.s_r, rel=1e-6, abs=1e-5 * factor, nan_ok=True)


@given(results)
def test_h_sums_to_nothing_and_stays_within_its_bound(groups):
    found = mandel(groups)
    told = found.h[np.isfinite(found.h)]
    if told.size:
        assert told.sum() == pytest.approx(0.0, abs=1e-6)
        assert np.abs(told).max() <= (told.size - 1) / np.sqrt(told.size) + 1e-9


@settings(max_examples=20)
@given(st.integers(3, 30))
def test_critical_values_lie_below_their_bounds(scanners):
    assert h_critical(scanners, 0.05) < h_critical(scanners, 0.01) < (scanners - 1) / np.sqrt(scanners)
    freedom = np.arange(1.0, scanners + 1.0)
    at_5, at_1 = k_critical(freedom, 0.05), k_critical(freedom, 0.01)
    assert (at_5 < at_1).all()
    assert (at_1 < np.sqrt(freedom.sum() / freedom)).all()


def test_critical_values_are_exceeded_as_often_as_they_say():
    rng = np.random.default_rng(8)
    sizes = [4, 6, 3, 8, 5]
    h = k = 0
    for _ in range(800):
        found = mandel([rng.standard_normal(size) for size in sizes])
        k += (found.k > found.k_critical_5).sum()
        equal = mandel([rng.standard_normal(5) for _ in sizes])
        h += (np.abs(equal.h) > equal.h_critical_5).sum()
    assert 0.035 < h / 4000 < 0.065
    assert 0.035 < k / 4000 < 0.065


@given(arrays(np.float64, st.integers(2, 30), elements=numbers))
def test_limits_of_agreement_lie_around_the_bias(differences):
    found = limits_of_agreement(differences)
    assert found.lower <= found.bias <= found.upper
    assert found.lower_interval[0] <= found.lower <= found.lower_interval[1]
    turned = limits_of_agreement(-differences)
    assert turned.upper == pytest.approx(-found.lower)
    assert turned.bias == pytest.approx(-found.bias)


@given(st.floats(0.1, 5.0), st.floats(2.0, 100.0))
def test_repeated_readings_widen_limits_for_single_ones(variance, freedom):
    differences = np.array([0.3, -0.2, 0.1, 0.5])
    side = Repeats(variance, freedom, 0.1)
    assert limits_of_agreement(differences, side, side).spread > limits_of_agreement(differences).spread


@given(arrays(np.float64, 8, elements=numbers), arrays(np.float64, 8, elements=numbers))
def test_concordance_is_symmetric_and_bounded(x, y):
    one, other = concordance(x, y), concordance(y, x)
    if one is None:
        assert other is None
        return
    assert one[0] == pytest.approx(other[0], abs=1e-9)
    assert -1.0 - 1e-9 <= one[0] <= 1.0 + 1e-9
    if one[1] is not None:
        assert one[1][0] <= one[0] + 1e-9
        assert one[0] <= one[1][1] + 1e-9


def test_equal_readings_are_in_full_concordance():
    assert concordance(np.arange(5.0), np.arange(5.0))[0] == pytest.approx(1.0)
    assert concordance(np.ones(5), np.ones(5)) is None


@settings(max_examples=30)
@given(st.floats(0.8, 1.2), st.floats(-20.0, 20.0), st.integers(0, 999))
def test_a_line_without_scatter_is_found_exactly(slope, intercept, seed):
    reference = np.random.default_rng(seed).uniform(100.0, 2000.0, 8)
    found = line(np.tile(intercept + slope * reference, (5, 1)), reference, np.full(8, np.nan))
    assert found.slope == pytest.approx(slope, rel=1e-9)
    assert found.intercept_ms == pytest.approx(intercept, abs=1e-6)


def test_intervals_of_the_line_cover_the_truth():
    rng = np.random.default_rng(9)
    reference = np.geomspace(150.0, 1900.0, 8)
    caught = 0
    for _ in range(300):
        certified = reference * (1.0 + 0.005 * rng.standard_normal(8))
        shared = 1.0 + 0.004 * rng.standard_normal((12, 1))
        value = 1.01 * reference * shared * (1.0 + 0.006 * rng.standard_normal((12, 8)))
        low, high = line(value, certified, 0.005 * certified).slope_interval
        caught += low <= 1.01 <= high
    assert 0.91 < caught / 300 < 0.995


def test_missing_vials_do_not_tilt_the_line():
    reference = np.geomspace(150.0, 1900.0, 8)
    value = np.tile(reference * (1.0 + 0.02 * np.cos(np.arange(8))), (6, 1))
    holed = value.copy()
    holed[2, 5:] = np.nan
    holed[4, :3] = np.nan
    whole, some = line(value, reference, 0.01 * reference), line(holed, reference, 0.01 * reference)
    assert some.slope == pytest.approx(whole.slope, rel=1e-9)


@pytest.mark.parametrize("vials", [0, 1, 2])
def test_two_vials_are_no_line(vials):
    assert line(np.ones((4, vials)), np.ones(vials), np.ones(vials)) is None


def test_runs_that_move_as_a_whole_have_few_degrees_of_freedom():
    rng = np.random.default_rng(10)
    together = scatter(rng.standard_normal((10, 1)) + 0.01 * rng.standard_normal((10, 12)))
    apart = scatter(rng.standard_normal((10, 12)))
    assert together.freedom == pytest.approx(9.0, rel=0.05)
    assert apart.freedom > 80.0
    assert together.shared == pytest.approx(together.total, rel=0.05)
    assert apart.shared < 0.3 * apart.total


@given(st.floats(0.01, 100.0), st.floats(1.0, 200.0))
def test_intervals_of_spreads_lie_around_them_and_narrow(s, freedom):
    low, high = spread_interval(s, freedom)
    assert low < s < high
    tighter = spread_interval(s, 2.0 * freedom)
    assert tighter[1] - tighter[0] < high - low
    one = sum_interval([(s**2, freedom)])
    assert one == pytest.approx((low, high))


def test_without_freedom_there_is_no_interval():
    assert spread_interval(1.0, 0.0) is None
    assert sum_interval([]) is None
    assert mean_interval(1.0, 0.1, 0.0) is None
    assert mean_interval(1.0, 0.1, float("inf")) == pytest.approx((0.804, 1.196), abs=1e-3)
