"""T2 of trains from the simulator: its pulses, phase graphs and steady state are its own, and it tells none of them.

Whole runs, from files to readings, are measured by tests/bench/accuracy.py.
"""

import numpy as np
import pytest
from fit_signals import T1_MS, T2_MS, X_MM, Y_MM, magnitudes, signals_of
from numpy.testing import assert_allclose

from qa.fit import METHODS, u_total_ms
from qa.simulate import PulsePair
from qa.simulate.pulses import profiles
from qa.simulate.sequences import spin_echo_train

TE_MS = 12.0 * np.arange(1, 17)
TR_MS = 3000.0
PAIRS = [
    PulsePair(),
    PulsePair("sinc", "sinc", 4.0, 1.6),
    PulsePair("hann-sinc", "hann-sinc", 3.0, 1.2),
    PulsePair("gaussian", "gaussian", 2.0, 1.3),
    PulsePair("gaussian", "sinc", 4.0, 1.0),
    PulsePair("sinc", "gaussian", 3.0, 1.5),
    PulsePair("hard", "hard"),
]


def trains(pulses, refocusing_deg=180.0, level=0.97):
    field = level * (1.0 - 0.06 * (X_MM**2 + Y_MM**2) / 1e4 + 0.03 * X_MM / 100.0)
    found = spin_echo_train(
        T1_MS, T2_MS, field, TE_MS[0], len(TE_MS), tr_ms=TR_MS, profiles=profiles(pulses, refocusing_deg)
    )
    return found / found.max()


def fitted(values, noise, voxels, refocusing_deg=180.0):
    return METHODS["spin-echo-train"].fit(
        signals_of(
            values,
            TE_MS,
            noise,
            voxels,
            tr_ms=TR_MS,
            t1_ms=T1_MS,
            u_t1_ms=0.005 * T1_MS,
            x_mm=X_MM,
            y_mm=Y_MM,
            refocusing_deg=refocusing_deg,
        )
    )


@pytest.mark.parametrize("pulses", PAIRS, ids=lambda p: f"{p.excitation}-{p.refocusing}-{p.refocusing_width}")
def test_profiles_that_nobody_told_the_fit(pulses):
    noise, voxels = 1.0 / 150.0, 40
    clean = trains(pulses)
    errors = []
    for seed in range(2):
        found = fitted(magnitudes(clean, noise, voxels, seed), noise, voxels)
        errors.append(100.0 * (found.value_ms / T2_MS - 1.0))
        assert np.all(np.abs(found.value_ms - T2_MS) < 4.0 * u_total_ms(found))
    assert np.median(np.abs(errors)) < 1.5
    assert np.max(np.abs(errors)) < 6.0


@pytest.mark.parametrize("pulses", PAIRS[:4], ids=lambda p: f"{p.excitation}-{p.refocusing}-{p.refocusing_width}")
def test_with_little_noise_only_the_model_is_left(pulses):
    found = fitted(trains(pulses), 2e-3, 40)
    assert_allclose(found.value_ms, T2_MS, rtol=0.012)
    assert np.median(np.abs(found.value_ms / T2_MS - 1.0)) < 0.004


def test_a_lower_nominal_angle():
    found = fitted(trains(PAIRS[0], 150.0), 2e-3, 40, refocusing_deg=150.0)
    assert_allclose(found.value_ms, T2_MS, rtol=0.012)


def test_a_nominal_angle_that_is_not_what_the_recipe_says():
    """150 degrees where 180 are stated: the transmit level and the profile take it up."""
    found = fitted(trains(PAIRS[0], 150.0), 2e-3, 40)
    assert_allclose(found.value_ms, T2_MS, rtol=0.03)
    assert found.shared["refocusing_angle_deg"] < fitted(trains(PAIRS[0]), 2e-3, 40).shared["refocusing_angle_deg"]
