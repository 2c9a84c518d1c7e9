"""Moments of magnitudes against published and exact values, and noise found in voxels."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from scipy import stats

from qa.fit.noise import (
    amplitude_behind,
    expected_magnitude,
    magnitude_sd,
    noise_of_background,
    noise_of_regions,
)


def test_pure_noise_has_rayleigh_moments():
    """Gudbjartsson and Patz (1995), Magn Reson Med 34, 910-914: sqrt(pi / 2) and sqrt(2 - pi / 2)."""
    mean, slope = expected_magnitude(np.array(0.0), 1.0)
    assert_allclose(mean, 1.2533141373155001, rtol=1e-9)
    assert slope == 0.0
    assert_allclose(magnitude_sd(np.array(0.0), 1.0), 0.6551363775620336, rtol=1e-8)


@pytest.mark.parametrize(
    ("amplitude", "mean", "sd"),
    [  # in units of sigma; integrals of the Rice density, computed once in long precision
        (0.5, 1.3304473406, 0.6927552770),
        (1.0, 1.5485724606, 0.7758371829),
        (3.0, 3.1725772879, 0.9668264334),
        (10.0, 10.0501269367, 0.9974710806),
        (20.0, 20.0250156841, 0.9993732302),
    ],
)
def test_rician_moments(amplitude, mean, sd):
    assert_allclose(expected_magnitude(np.array(amplitude), 1.0)[0], mean, rtol=1e-9)
    assert_allclose(magnitude_sd(np.array(amplitude), 1.0), sd, rtol=1e-6)


@settings(max_examples=100, deadline=None)
@given(amplitude=st.floats(0.0, 30.0), sigma=st.floats(0.01, 100.0))
def test_moments_are_those_of_scipys_rice_distribution(amplitude, sigma):
    rice = stats.rice(amplitude)
    assert_allclose(expected_magnitude(np.array(amplitude * sigma), sigma)[0], rice.mean() * sigma, rtol=1e-7)
    if amplitude < 25.0:  # beyond, the difference of two large numbers says nothing
        assert_allclose(magnitude_sd(np.array(amplitude * sigma), sigma), rice.std() * sigma, rtol=2e-4)


@settings(max_examples=50, deadline=None)
@given(amplitude=st.floats(-40.0, 40.0), sigma=st.floats(0.1, 10.0))
def test_the_slope_is_the_derivative_and_the_sign_does_not_matter(amplitude, sigma):
    h = 1e-5 * sigma
    mean, slope = expected_magnitude(np.array([amplitude - h, amplitude, amplitude + h]), sigma)
    assert_allclose(slope[1], (mean[2] - mean[0]) / (2 * h), atol=1e-6)
    assert_allclose(expected_magnitude(np.array(-amplitude), sigma)[0], mean[1], rtol=1e-12)


@settings(max_examples=50, deadline=None)
@given(amplitude=st.floats(0.3, 50.0), sigma=st.floats(0.1, 10.0))
def test_the_amplitude_behind_a_mean_is_found_again(amplitude, sigma):
    mean, _ = expected_magnitude(np.array(amplitude * sigma), sigma)
    assert_allclose(amplitude_behind(mean, sigma), amplitude * sigma, rtol=1e-5)


def test_a_mean_below_the_floor_has_no_amplitude_behind_it():
    assert_allclose(amplitude_behind(np.array([0.5, 1.2]), 1.0), 0.0)


def test_without_noise_a_magnitude_is_an_absolute_value():
    mean, slope = expected_magnitude(np.array([-2.0, 3.0]), 0.0)
    assert_allclose(mean, [2.0, 3.0])
    assert_allclose(slope, [-1.0, 1.0])


def test_noise_of_air():
    rng = np.random.default_rng(2)
    air = np.hypot(*(7.0 * rng.standard_normal((2, 40_000))))
    assert_allclose(noise_of_background(air), 7.0, rtol=0.02)
    assert np.isnan(noise_of_background(np.array([])))


def blocks(rng, noise, signed, vials=10, voxels=20, frames=12):
    """Voxels of vials with shading of 20 % and curves of their own."""
    found = []
    for vial in range(vials):
        curve = np.exp(-np.arange(frames) / (1.5 + vial))
        clean = (1.0 + 0.2 * rng.standard_normal(voxels))[:, None] * curve
        real = clean + noise * rng.standard_normal(clean.shape)
        found.append(real if signed else np.hypot(real, noise * rng.standard_normal(clean.shape)))
    return found


@pytest.mark.parametrize("signed", [True, False])
@pytest.mark.parametrize("noise", [0.002, 0.02, 0.08])
def test_noise_of_regions_is_not_taken_in_by_shading_nor_by_the_floor(signed, noise):
    rng = np.random.default_rng(3)
    found = [noise_of_regions(blocks(rng, noise, signed), signed=signed) for _ in range(10)]
    assert_allclose(np.mean(found), noise, rtol=0.04)


def test_one_bad_vial_does_not_spoil_the_noise():
    rng = np.random.default_rng(4)
    voxels = blocks(rng, 0.02, True)
    voxels[3] = voxels[3] + 0.5 * rng.standard_normal(voxels[3].shape)
    assert_allclose(noise_of_regions(voxels, signed=True), 0.02, rtol=0.1)


def test_noise_needs_two_voxels_and_two_frames():
    assert np.isnan(noise_of_regions([], signed=True))
    assert np.isnan(noise_of_regions([np.ones((1, 8))], signed=True))
    assert np.isnan(noise_of_regions([np.ones((9, 1))], signed=False))
