"""Pulse shapes, and how they share out a slice's signal among refocusing angles."""

import numpy as np
import pytest
from fit_signals import slice_angles
from numpy.testing import assert_allclose

from qa.fit.epg import echo_train
from qa.fit.profiles import COMPONENTS, LEVELS, NODES, shares, unknown_profiles
from qa.fit.pulses import FREQUENCIES, PIECES, Pulse, envelope, rotation

PULSES = [Pulse("sinc", 4.0, 0.0), Pulse("sinc", 3.0), Pulse("gaussian", 2.0), Pulse("designed", 5.0)]


@pytest.mark.parametrize("pulse", PULSES)
def test_on_resonance_a_pulse_turns_by_its_angle(pulse):
    assert_allclose(envelope(pulse).sum(), 1.0)
    assert_allclose(rotation(pulse, np.array([0.3, 1.5, 3.1]))[:, 0], [0.3, 1.5, 3.1], rtol=1e-6)


@pytest.mark.parametrize("pulse", PULSES[:3])
def test_small_angles_follow_the_spectrum_of_the_pulse(pulse):
    t = (np.arange(PIECES) + 0.5) / PIECES - 0.5
    spectrum = np.abs(np.exp(2j * np.pi * np.outer(FREQUENCIES, t)) @ envelope(pulse))
    assert_allclose(rotation(pulse, np.array([1e-3]))[0] / 1e-3, spectrum, atol=0.02)  # pieces of finite length


def test_rotations_are_those_of_matrices():
    """The same pulse on a vector, piece by piece, by Rodrigues' formula."""
    pulse, angle = Pulse("sinc", 3.0), 2.5
    for frequency in (0.0, 0.9, 2.1):
        m = np.array([0.0, 0.0, 1.0])
        for piece in envelope(pulse):
            axis = np.array([angle * piece, 0.0, 2.0 * np.pi * frequency / PIECES])
            size = np.linalg.norm(axis)
            n = axis / size if size > 0 else axis
            m = m * np.cos(size) + np.cross(n, m) * np.sin(size) + n * (n @ m) * (1.0 - np.cos(size))
        found = np.interp(frequency, FREQUENCIES, rotation(pulse, np.array([angle]))[0])
        assert_allclose(np.cos(found), m[2], atol=1e-9)


@pytest.mark.parametrize("nominal", [180.0, 150.0])
def test_shares_are_shares(nominal):
    share, excitation = shares(nominal)
    assert share.shape[1:] == (2, NODES)
    assert_allclose(share.sum(axis=2), 1.0, rtol=1e-9)
    assert np.all(share >= 0)
    assert np.all((excitation > 0) & (excitation <= np.pi / 2.0))
    profiles = unknown_profiles(nominal)
    assert_allclose(profiles.mean.sum(axis=1), 1.0, rtol=1e-9)
    assert_allclose(profiles.components.sum(axis=2), 0.0, atol=1e-9)
    assert_allclose(profiles.angle[-1], np.deg2rad(nominal))


def test_derivatives_of_shares():
    profiles = unknown_profiles(180.0)
    sizes, level, h = np.linspace(-0.5, 0.8, COMPONENTS), np.array([0.9, 1.05]), 1e-6
    share, by_level, by_size = profiles.at(level, sizes)
    assert_allclose(by_level, (profiles.at(level + h, sizes)[0] - share) / h, atol=1e-6)
    for k in range(COMPONENTS):
        moved = profiles.at(level, sizes + h * np.eye(COMPONENTS)[k])[0]
        assert_allclose(by_size[:, k], (moved - share) / h, atol=1e-6)
    at_known = profiles.at(np.array(LEVELS), np.zeros(COMPONENTS))[0]
    assert_allclose(at_known, profiles.mean, atol=1e-12)


def test_a_slice_that_is_no_pulses_is_described_to_a_thousandth():
    """Echoes of the Fermi-shaped slice of the tests, by components that were made from other shapes."""
    angles, weight = slice_angles(60)
    profiles = unknown_profiles(180.0)
    t1, t2, spacing, echoes = 900.0, 90.0, 10.0, 20
    truth = echo_train(angles, spacing, np.array(t1), np.array(t2), echoes)[0] @ weight
    table = echo_train(profiles.angle, spacing, np.array(t1), np.array(t2), echoes)[0] / np.sin(profiles.angle / 2.0)
    design = table @ np.concatenate([profiles.mean[1:], profiles.components[1]]).T
    found = design @ np.linalg.lstsq(design, truth, rcond=None)[0]
    assert_allclose(found, truth, atol=1e-3 * truth.max())
