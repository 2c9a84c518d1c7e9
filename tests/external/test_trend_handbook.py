"""The charts that judge runs, put before worked examples of the NIST/SEMATECH e-Handbook of Statistical Methods."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from qa.trend.charts import cusum, ewma, individuals

# e-Handbook 6.3.2.4: twenty values, target 50, s = 2.0539, lambda = 0.3, k = 3; the page's own EWMA column
EWMA_VALUES = np.array(
    [
        *(52.0, 47.0, 53.0, 49.3, 50.1, 47.0, 51.0, 50.1, 51.2, 50.5),
        *(49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1),
    ]
)
EWMA_PRINTED = np.array(
    [
        *(50.60, 49.52, 50.56, 50.18, 50.16, 49.21, 49.75, 49.85, 50.26, 50.33),
        *(50.11, 49.36, 49.52, 50.05, 49.38, 49.92, 50.73, 51.23, 51.94, 51.99),
    ]
)
# e-Handbook 6.3.2.2: flow rates of ten batches
FLOW = np.array([49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1])
# e-Handbook 6.3.2.3: means of twenty groups of four, target 325, k = 0.3175, h = 4.1959 (from memory; the printed
# columns agree with the means to rounding in all forty cells)
GROUPS = np.array(
    [
        *(324.925, 324.675, 324.725, 324.350, 325.350, 325.225, 324.125, 324.525, 325.225, 324.600),
        *(324.625, 325.150, 328.325, 327.250, 327.825, 328.500, 326.675, 327.775, 326.875, 328.350),
    ]
)
HIGH = [0, 0, 0, 0, 0.03, 0, 0, 0, 0, 0, 0, 0, 3.01, 4.94, 7.45, 10.63, 11.99, 14.44, 16.00, 19.04]
LOW = [0, 0.01, 0, 0.33, 0, 0, 0.56, 0.72, 0.17, 0.25, 0.31, 0, 0, 0, 0, 0, 0, 0, 0, 0]


def test_ewma_reproduces_every_printed_value():
    chart = ewma(EWMA_VALUES, weight=0.3, centre=50.0, sigma=2.0539, width=3.0)
    assert_allclose(chart.level, EWMA_PRINTED, atol=0.005)
    assert not chart.signal.any()  # the page: the process is in control


def test_ewma_limits_end_at_the_printed_steady_ones():
    chart = ewma(EWMA_VALUES, weight=0.3, centre=50.0, sigma=2.0539, width=3.0)
    assert chart.upper[-1] == pytest.approx(52.5884, abs=1e-4)
    assert chart.lower[-1] == pytest.approx(47.4115, abs=1e-4)
    assert chart.upper[0] == pytest.approx(50.0 + 3.0 * 0.3 * 2.0539)  # one value: its own weight


def test_individuals_limits_as_printed():
    chart = individuals(FLOW)
    assert chart.centre == pytest.approx(50.81, abs=5e-5)
    assert chart.upper == pytest.approx(55.8041, abs=5e-5)
    assert chart.lower == pytest.approx(45.8159, abs=5e-5)
    assert chart.moving_range.mean() == pytest.approx(1.8778, abs=5e-5)


def test_individuals_with_the_exact_constant():
    assert individuals(FLOW, d2=2.0 / np.sqrt(np.pi)).upper == pytest.approx(55.80241168, abs=1e-7)


def test_cusum_reproduces_both_printed_columns_and_signals_at_group_14():
    chart = cusum(GROUPS, target=325.0, slack=0.3175, decision=4.1959)
    assert_allclose(chart.high, HIGH, atol=0.0051)
    assert_allclose(chart.low, LOW, atol=0.0051)
    assert np.flatnonzero(chart.signal)[0] + 1 == 14
