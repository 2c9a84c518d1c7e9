"""Slice profiles from Bloch-integrated pulses."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from qa.simulate.pulses import envelope, profiles, spinor
from qa.simulate.truth import PulsePair

SHAPES = ["gaussian", "sinc", "hamming-sinc", "hann-sinc"]


def rotate_step_by_step(wave, angle, cycles):
    """The same pulse on a magnetisation vector, by rotation matrices instead of spinors."""
    turn = 2 * np.pi * cycles / len(wave)
    m = np.array([0.0, 0.0, 1.0])
    for piece in wave:
        axis = np.array([angle * piece, 0.0, turn])
        size = np.linalg.norm(axis)
        if size > 0:
            n = axis / size
            m = m * np.cos(size) + np.cross(n, m) * np.sin(size) + n * (n @ m) * (1 - np.cos(size))
    return m


@settings(max_examples=40)
@given(angle=st.floats(0.1, 3.1), cycles=st.floats(-4.0, 4.0), shape=st.sampled_from(SHAPES))
def test_spinors_and_rotation_matrices_agree(angle, cycles, shape):
    wave = envelope(shape, 4.0)
    a2, b2 = spinor(wave, np.array(angle), np.array(cycles))
    m = rotate_step_by_step(wave, angle, cycles)
    assert_allclose(a2 + b2, 1.0, atol=1e-12)
    assert_allclose(a2 - b2, m[2], atol=1e-10)


@pytest.mark.parametrize("shape", SHAPES)
def test_on_resonance_the_angle_is_the_nominal_one(shape):
    _, b2 = spinor(envelope(shape, 3.0), np.array([np.pi / 2, np.pi]), np.zeros(2))
    assert_allclose(b2, [0.5, 1.0], atol=1e-12)


@pytest.mark.parametrize("shape", SHAPES)
def test_small_angle_profile_is_the_spectrum_of_the_pulse(shape):
    wave, cycles = envelope(shape, 4.0), np.linspace(0, 6, 25)
    _, b2 = spinor(wave, np.array(1e-3), cycles)
    t = (np.arange(len(wave)) + 0.5) / len(wave) - 0.5
    spectrum = np.abs(np.exp(2j * np.pi * cycles[:, None] * t) @ wave)
    assert_allclose(np.sqrt(b2) / 0.5e-3, spectrum, atol=2e-3)  # linear regime, pieces of finite length


@pytest.mark.parametrize("shape", SHAPES)
def test_half_the_small_angle_signal_is_at_the_nominal_edge(shape):
    table = profiles(PulsePair(shape, shape, 5.0, 1.0), 180.0)
    small = np.sin(table.excitation[1])  # 5 % of the nominal 90 degrees
    assert 0.4 < np.interp(0.5, table.z, small / small[0]) < 0.6
    assert np.all(small[table.z > 1.2] < 0.05 * small[0])


def test_refocusing_slice_is_wider_by_its_factor():
    narrow = profiles(PulsePair("sinc", "sinc", 4.0, 1.0), 180.0)
    wide = profiles(PulsePair("sinc", "sinc", 4.0, 1.5), 180.0)
    flip = np.array(1.0)
    at = 0.6
    _, refocus_narrow = narrow.at(flip)
    _, refocus_wide = wide.at(flip)
    assert_allclose(
        np.interp(at * 1.5, wide.z, refocus_wide), np.interp(at, narrow.z, refocus_narrow), rtol=0.05
    )  # 5 %: both are read between tabulated points
    assert_allclose(wide.excitation, narrow.excitation)


def test_hard_pulses_excite_a_uniform_slice_of_width_one():
    table = profiles(PulsePair("hard", "hard"), 160.0)
    excite, refocus = table.at(np.array([0.9, 1.0]))
    assert_allclose(table.weight.sum(), 1.0)
    assert_allclose(np.rad2deg(excite[:, 0]), [81.0, 90.0], rtol=1e-12)
    assert_allclose(np.rad2deg(refocus[:, -1]), [144.0, 160.0], rtol=1e-12)


@pytest.mark.parametrize("pulses", [PulsePair(), PulsePair("sinc", "sinc", 4.0, 1.6), PulsePair("gaussian", "sinc")])
def test_enough_points_across_the_slice(pulses):
    from qa.simulate.sequences import spin_echo_train

    def train(points):
        table = profiles(pulses, 165.0, points)
        one = np.array([1.0])
        return spin_echo_train(1000 * one, 90 * one, 0.97 * one, 12.0, 16, tr_ms=3000, profiles=table)[0]

    coarse, fine = train(41), train(401)
    assert_allclose(coarse / coarse[0], fine / fine[0], rtol=1e-3)
