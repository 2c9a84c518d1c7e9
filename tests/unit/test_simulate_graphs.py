"""Phase graphs of echo trains: closed forms, invariants, and brute-force isochromats as a second opinion."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from qa.simulate.graphs import echo_train

LONG = 1e12  # ms: no relaxation to speak of
times_ms = st.floats(5.0, 4000.0)
angles = st.floats(np.deg2rad(30), np.deg2rad(180))


def isochromats(t1_ms, t2_ms, excite, refocus, spacing_ms, echoes, spins=4000):
    """The same train by rotating many spins that dephase evenly over one turn per half spacing."""
    phase = 2 * np.pi * (np.arange(spins) + 0.5) / spins
    mx, my, mz = np.full(spins, np.sin(excite)), np.zeros(spins), np.full(spins, np.cos(excite))
    e1, e2 = np.exp(-spacing_ms / 2 / t1_ms), np.exp(-spacing_ms / 2 / t2_ms)

    def half(mx, my, mz):
        cos, sin = np.cos(phase), np.sin(phase)
        return e2 * (mx * cos - my * sin), e2 * (mx * sin + my * cos), 1 + (mz - 1) * e1

    out = []
    for _ in range(echoes):
        mx, my, mz = half(mx, my, mz)
        my, mz = my * np.cos(refocus) - mz * np.sin(refocus), my * np.sin(refocus) + mz * np.cos(refocus)
        mx, my, mz = half(mx, my, mz)
        out.append(mx.mean())
    return np.array(out), mz.mean()


@given(t2_ms=times_ms, longer=st.floats(1.0, 10.0))
def test_perfect_refocusing_decays_with_t2_alone(t2_ms, longer):
    echoes, _ = echo_train(longer * t2_ms, t2_ms, np.pi / 2, np.pi, 10.0, 12)
    assert_allclose(echoes, np.exp(-10.0 * np.arange(1, 13) / t2_ms), rtol=1e-9, atol=1e-15)


@given(angle=angles)
def test_first_two_echoes_without_relaxation(angle):
    # Hennig (1988), J. Magn. Reson. 78, 397-407: sin^2(a/2), then sin^2(a/2) (1 + cos^2(a/2)).
    echoes, _ = echo_train(LONG, LONG, np.pi / 2, angle, 10.0, 2)
    sin2 = np.sin(angle / 2) ** 2
    assert_allclose(echoes, [sin2, sin2 * (2 - sin2)], rtol=1e-7)


@settings(max_examples=40)
@given(t1_ms=times_ms, part=st.floats(0.05, 1.0), excite=angles, refocus=angles)
def test_isochromats_agree(t1_ms, part, excite, refocus):
    t2_ms = part * t1_ms
    echoes, left = echo_train(t1_ms, t2_ms, excite, refocus, 11.0, 9)
    other, left_other = isochromats(t1_ms, t2_ms, excite, refocus, 11.0, 9)
    assert_allclose(echoes, other, atol=1e-12)  # both are exact; 4000 spins resolve every order reached
    assert_allclose(left, left_other, atol=1e-12)


@given(start=st.floats(0.0, 1.0), refocus=angles)
def test_echoes_are_proportional_to_what_is_excited(start, refocus):
    full, left_full = echo_train(900.0, 70.0, np.pi / 2, refocus, 10.0, 8)
    part, left_part = echo_train(900.0, 70.0, np.pi / 2, refocus, 10.0, 8, start=start)
    assert_allclose(part, start * full, atol=1e-12)
    assert_allclose(left_part, left_full, atol=1e-12)  # after 90 degrees nothing of the start is left along z


def test_late_echoes_without_relaxation_reach_the_plateau():
    # Alsop (1997), Magn. Reson. Med. 37, 176-184: the train tends to sin(a/2).
    echoes, _ = echo_train(LONG, LONG, np.pi / 2, np.deg2rad(120), 10.0, 200)
    assert_allclose(echoes[-40:].mean(), np.sin(np.deg2rad(60)), rtol=2e-3)


def test_many_spins_at_once_are_each_as_if_alone():
    t1, t2 = np.array([[300.0], [2000.0]]), np.array([20.0, 90.0, 200.0])
    together, left = echo_train(t1, t2, 1.4, 2.8, 9.0, 7)
    assert together.shape == (2, 3, 7)
    assert left.shape == (2, 3)
    alone, _ = echo_train(2000.0, 90.0, 1.4, 2.8, 9.0, 7)
    assert_allclose(together[1, 1], alone, rtol=1e-14)
