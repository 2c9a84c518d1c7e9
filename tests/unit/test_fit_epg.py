"""Phase graphs against closed forms, against spins carried one by one, and against their own derivatives."""

import numpy as np
import pytest
from fit_signals import isochromat_train
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from qa.fit.epg import echo_train, left_along_field

ANGLES = np.deg2rad([20.0, 60.0, 90.0, 120.0, 150.0, 170.0, 180.0, 195.0])
FOREVER = np.array(1e18)


def train(angle, spacing, t1, t2, echoes):
    return echo_train(np.atleast_1d(angle), spacing, np.asarray(t1, float), np.asarray(t2, float), echoes)[0]


def test_180_degrees_gives_the_pure_exponential():
    t2 = np.array([15.0, 80.0, 600.0])
    times = 12.0 * np.arange(1, 33)
    assert_allclose(train(np.full(3, np.pi), 12.0, 10.0 * t2, t2, 32).T, np.exp(-times / t2[:, None]), rtol=1e-12)


def test_first_echoes_in_closed_form():
    """Hennig (1988), J Magn Reson 78, 397-407; without relaxation."""
    first, second = train(ANGLES, 1.0, FOREVER, FOREVER, 2)
    half = np.sin(ANGLES / 2.0) ** 2
    assert_allclose(first, half, rtol=1e-12)
    assert_allclose(second, half * (1.0 + np.cos(ANGLES / 2.0) ** 2), rtol=1e-12)


def test_second_echo_with_relaxation_in_closed_form():
    """The spin echo decays with T2; the stimulated echo spends one spacing along the field."""
    spacing, t1, t2 = 10.0, 700.0, 60.0
    half = np.sin(ANGLES / 2.0) ** 2
    spin, stimulated = half**2 * np.exp(-20.0 / t2), 0.5 * np.sin(ANGLES) ** 2 * np.exp(-10.0 / t2 - 10.0 / t1)
    assert_allclose(train(ANGLES, spacing, t1, t2, 2)[1], spin + stimulated, rtol=1e-12)


@pytest.mark.parametrize("degrees", [60.0, 90.0, 120.0, 150.0])
def test_the_plateau_is_the_sine_of_half_the_angle(degrees):
    """Pseudo-steady state without relaxation: Alsop (1997), Magn Reson Med 37, 176-184."""
    late = train(np.deg2rad(degrees), 1.0, FOREVER, FOREVER, 300)[200:]
    assert_allclose(late.mean(), np.sin(np.deg2rad(degrees) / 2.0), atol=2e-3)


@pytest.mark.parametrize(
    ("t1", "t2", "degrees", "echo", "amplitude"),
    [
        # spacing 10 ms; computed once by phase graphs and by brute-force isochromats, which agreed to 4e-15
        (1000, 100, 180, 32, 0.0407622040),
        (1000, 100, 160, 1, 0.8775532314),
        (1000, 100, 150, 7, 0.4845532410),
        (1000, 100, 120, 32, 0.0544084879),
        (2000, 80, 160, 16, 0.1396072285),
        (2000, 80, 120, 3, 0.5942356461),
        (500, 40, 120, 2, 0.6274408065),
        (500, 40, 150, 32, 0.0022574987),
        (300, 200, 120, 16, 0.4027520473),
    ],
)
def test_values_computed_elsewhere(t1, t2, degrees, echo, amplitude):
    assert_allclose(train(np.deg2rad(degrees), 10.0, t1, t2, 32)[echo - 1, 0], amplitude, atol=6e-11)


@settings(max_examples=40, deadline=None)
@given(
    angle=st.floats(0.05, 3.5),
    t2=st.floats(5.0, 800.0),
    ratio=st.floats(1.0, 30.0),
    spacing=st.floats(4.0, 20.0),
    echoes=st.integers(1, 24),
)
def test_spins_carried_one_by_one_give_the_same_echoes(angle, t2, ratio, spacing, echoes):
    one_by_one, _ = isochromat_train(np.array([angle]), spacing, ratio * t2, t2, echoes)
    assert_allclose(train(angle, spacing, ratio * t2, t2, echoes)[:, 0], one_by_one[0], atol=1e-12)


@settings(max_examples=30, deadline=None)
@given(angle=st.floats(0.05, 3.5), tilt=st.floats(0.0, 3.0), before=st.floats(-1.0, 1.0), echoes=st.integers(1, 20))
def test_what_is_left_along_the_field(angle, tilt, before, echoes):
    start = (0.0, before * np.sin(tilt), before * np.cos(tilt))
    _, along = isochromat_train(np.array([angle]), 11.0, 500.0, 120.0, echoes, start)
    kept, regrown = left_along_field(np.array([angle]), 11.0, np.array(500.0), np.array(120.0), echoes)
    assert_allclose(before * np.cos(tilt) * kept + regrown, along, atol=1e-12)


@settings(max_examples=30, deadline=None)
@given(angle=st.floats(0.1, 3.5), t2=st.floats(10.0, 500.0), echoes=st.integers(1, 20))
def test_derivatives_are_those_of_finite_differences(angle, t2, echoes):
    def at(a, log_t2):
        return train(a, 10.0, 900.0, np.exp(log_t2), echoes)[:, 0]

    h, log_t2 = 1e-5, np.log(t2)
    plain, by_angle, by_t2 = echo_train(np.array([angle]), 10.0, np.array(900.0), np.array(t2), echoes, slopes=True)
    assert_allclose(plain[:, 0], at(angle, log_t2), atol=1e-15)
    assert_allclose(by_angle[:, 0], (at(angle + h, log_t2) - at(angle - h, log_t2)) / (2 * h), atol=1e-8)
    assert_allclose(by_t2[:, 0], (at(angle, log_t2 + h) - at(angle, log_t2 - h)) / (2 * h), atol=1e-8)


@settings(max_examples=30, deadline=None)
@given(angle=st.floats(0.1, np.pi), t2=st.floats(5.0, 500.0))
def test_an_echo_is_never_larger_than_what_a_perfect_train_allows(angle, t2):
    """With T1 = T2 every pathway decays alike, so no echo exceeds the exponential."""
    echoes = train(angle, 10.0, t2, t2, 24)[:, 0]
    assert np.all(np.abs(echoes) <= np.exp(-10.0 * np.arange(1, 25) / t2) * (1 + 1e-12))


def test_angles_beyond_180_degrees_mirror_those_below():
    assert_allclose(train(np.pi + 0.3, 9.0, 800.0, 70.0, 20), train(np.pi - 0.3, 9.0, 800.0, 70.0, 20), atol=1e-14)


def test_trains_side_by_side_are_independent():
    together = train(ANGLES, 10.0, 1000.0, np.linspace(20.0, 200.0, len(ANGLES)), 17)
    alone = [train(a, 10.0, 1000.0, t2, 17)[:, 0] for a, t2 in zip(ANGLES, np.linspace(20.0, 200.0, 8), strict=True)]
    assert_allclose(together.T, alone, atol=1e-15)
