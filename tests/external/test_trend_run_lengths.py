"""The run lengths from which limits are set, put before published tables and before simulated charts."""

import numpy as np
import pytest

from qa.trend.arl import cusum_arl, cusum_limit, ewma_arl, ewma_limit, shewhart_arl
from qa.trend.charts import ewma_spread

# Montgomery, Introduction to Statistical Quality Control, chapter on CUSUM charts, k = 0.5 (from memory)
CUSUM = [
    (4.0, [(0.0, 168.0), (0.25, 74.2), (0.5, 26.6), (0.75, 13.3), (1.0, 8.38), (1.5, 4.75), (2.0, 3.34), (3.0, 2.19)]),
    (5.0, [(0.0, 465.0), (0.25, 139.0), (0.5, 38.0), (0.75, 17.0), (1.0, 10.4), (1.5, 5.75), (2.0, 4.01), (3.0, 2.57)]),
]
# Lucas and Saccucci (1990), Technometrics 32, 1-12, table 3 (from memory; printed to three digits or one decimal,
# worked out by a Markov chain: right to about one in the last digit)
LUCAS = [
    (0.40, 3.054, [(0.0, 500.0), (0.25, 224.0), (0.5, 71.2), (1.0, 14.3), (1.5, 5.9), (2.0, 3.5), (3.0, 2.0)]),
    (0.25, 2.998, [(0.0, 500.0), (0.25, 170.0), (0.5, 48.2), (1.0, 11.1), (1.5, 5.5), (2.0, 3.6), (3.0, 2.3)]),
    (0.20, 2.962, [(0.0, 500.0), (0.25, 150.0), (0.5, 41.8), (1.0, 10.5), (1.5, 5.5), (2.0, 3.7), (3.0, 2.4)]),
    (0.10, 2.814, [(0.0, 500.0), (0.25, 106.0), (0.5, 31.3), (1.0, 10.3), (1.5, 6.1), (2.0, 4.4), (3.0, 2.9)]),
    (0.05, 2.615, [(0.0, 500.0), (0.25, 84.1), (0.5, 28.8), (1.0, 11.4), (1.5, 7.1), (2.0, 5.2), (3.0, 3.5)]),
]
# Method of Crowder (1987), L = 3, as printed in the user guide of a general statistics system
CROWDER = [
    (0.25, [(0.5, 48.453), (1.0, 11.1543), (1.5, 5.4697), (2.0, 3.61677)]),
    (0.50, [(0.5, 75.354), (1.0, 15.7378), (1.5, 6.1111), (2.0, 3.4685)]),
    (0.75, [(0.5, 110.95), (1.0, 25.6391), (1.5, 8.7201), (2.0, 4.15346)]),
]


@pytest.mark.parametrize(("decision", "shift", "printed"), [(h, shift, arl) for h, row in CUSUM for shift, arl in row])
def test_cusum_table(decision, shift, printed):
    assert cusum_arl(0.5, decision, shift) == pytest.approx(printed, rel=0.004)


@pytest.mark.parametrize(
    ("weight", "width", "shift", "printed"), [(w, L, shift, arl) for w, L, row in LUCAS for shift, arl in row]
)
def test_ewma_table(weight, width, shift, printed):
    last_digit = 1.0 if printed >= 100 else 0.1
    assert ewma_arl(weight, width, shift) == pytest.approx(printed, abs=last_digit)


@pytest.mark.parametrize(("weight", "shift", "printed"), [(w, shift, arl) for w, row in CROWDER for shift, arl in row])
def test_ewma_table_of_the_integral_equation(weight, shift, printed):
    assert ewma_arl(weight, 3.0, shift) == pytest.approx(printed, rel=1e-5)


@pytest.mark.parametrize("shift", [0.5, 1.0, 1.5, 2.0])
def test_ewma_of_weight_one_is_the_chart_of_single_values(shift):
    # Crowder's table for weight 1: 155.224, 43.8947, 14.9677, 6.30296
    printed = {0.5: 155.224, 1.0: 43.8947, 1.5: 14.9677, 2.0: 6.30296}[shift]
    assert shewhart_arl(3.0, shift) == pytest.approx(printed, rel=1e-5)
    assert ewma_arl(1.0, 3.0, shift) == pytest.approx(printed, rel=1e-5)


def test_head_start_shortens_the_wait_after_a_shift_at_the_start():
    # Lucas and Crosier (1982), Technometrics 24, 199-205: half of h; values solved by a Markov chain
    assert cusum_arl(0.5, 4.0, 0.0, 2.0) == pytest.approx(148.6956, rel=1e-4)
    assert cusum_arl(0.5, 5.0, 1.0, 2.5) == pytest.approx(6.3469, rel=1e-4)


@pytest.mark.parametrize("arl", [100.0, 500.0, 5000.0])
def test_limits_turn_run_lengths_back(arl):
    assert ewma_arl(0.2, ewma_limit(arl, 0.2)) == pytest.approx(arl, rel=1e-6)
    assert cusum_arl(0.5, cusum_limit(arl)) == pytest.approx(arl, rel=1e-6)
    assert ewma_limit(500.0, 0.2) == pytest.approx(2.962, abs=0.001)


def test_run_length_of_the_chart_itself_by_simulation():
    rng = np.random.default_rng(7)
    charts, weight, width, shift = 4000, 0.2, 2.962, 1.0
    half = width * ewma_spread(weight, np.array(np.inf))
    level, length = np.zeros(charts), np.zeros(charts)
    running = np.ones(charts, dtype=bool)
    while running.any():
        level = weight * (shift + rng.standard_normal(charts)) + (1 - weight) * level
        length += running
        running &= np.abs(level) <= half
    standard_error = length.std() / np.sqrt(charts)
    assert abs(length.mean() - ewma_arl(weight, width, shift)) < 4.0 * standard_error
