"""Temperature correction: exact at its definition, reversible, and honest when there is no thermometer."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from qa.temperature import RunTemperature, correct

times = st.floats(5.0, 4000.0)
celsius = st.floats(10.0, 35.0)
coefficients = st.floats(-3.0, 3.5)


@given(times, celsius, coefficients)
def test_correction_undoes_the_stated_temperature_dependence(true_ms, run_c, per_k):
    measured = true_ms * (1 + per_k / 100 * (run_c - 20.0))
    back = correct(measured, RunTemperature.measured(run_c, "t"), 20.0, per_k)
    assert back.value_ms == pytest.approx(true_ms, rel=1e-12)


@given(times, coefficients)
def test_at_the_reference_temperature_nothing_changes_but_the_thermometer_still_counts(value_ms, per_k):
    same = correct(value_ms, RunTemperature.measured(20.0, "t", 0.5), 20.0, per_k)
    assert same.value_ms == value_ms
    assert same.u_temperature_ms == pytest.approx(value_ms * abs(per_k) / 100 * 0.5, rel=1e-12, abs=1e-12)


def test_uncertainty_agrees_with_a_monte_carlo_of_the_inputs():
    """JCGM 101:2008 (propagation of distributions) against the first-order law that the code uses."""
    rng = np.random.default_rng(5)
    n = 400_000
    t = rng.normal(22.5, 0.3, n)
    c = rng.normal(0.024, 0.002, n)
    spread = np.std(1500.0 / (1 + c * (t - 20.0)))
    stated = correct(1500.0, RunTemperature.measured(22.5, "t", 0.3), 20.0, 2.4, 0.2).u_temperature_ms
    assert stated == pytest.approx(spread, rel=0.02)  # the first-order law is good to about 1 % here


def test_without_temperature_the_value_stands_and_its_uncertainty_is_the_rms_of_the_possible_range():
    found = correct(1000.0, RunTemperature.unknown((18.0, 24.0)), 20.0, 2.0)
    possible = np.linspace(18.0, 24.0, 100_001)
    rms = math.sqrt(np.mean((1000.0 * 0.02 * (possible - 20.0)) ** 2))
    assert found.value_ms == 1000.0
    assert found.u_temperature_ms == pytest.approx(rms, rel=1e-4)
    assert found.note is not None
    assert "not corrected" in found.note


def test_without_a_coefficient_an_unknown_temperature_does_not_matter():
    found = correct(1000.0, RunTemperature.unknown((18.0, 24.0)), 20.0, 0.0)
    assert (found.u_temperature_ms, found.note) == (0.0, None)
