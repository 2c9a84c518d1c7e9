"""Discs sampled in k-space: area, centre, edge, ringing, and noise."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from qa.simulate.kspace import discs, noise, window

places = st.floats(-30.0, 30.0)


def one(x, y, radius, matrix=64, field_of_view_mm=128.0, weight=None):
    got = discs(
        np.array([x]),
        np.array([y]),
        np.array([radius]),
        matrix=matrix,
        field_of_view_mm=field_of_view_mm,
        weight=weight,
    )
    return got[0]


@given(x=places, y=places, radius=st.floats(2.0, 15.0))
def test_area_is_that_of_the_disc_wherever_it_lies(x, y, radius):
    assert_allclose(one(x, y, radius).sum() * 2.0**2, np.pi * radius**2, rtol=1e-9)


@given(x=places, y=places)
def test_centre_of_mass_is_the_centre(x, y):
    image = one(x, y, 9.0, weight=window(64, 0.46))  # windowed: ringing far away would weigh in
    at = (np.arange(64) - 31.5) * 2.0
    assert_allclose((image * at[None, :]).sum() / image.sum(), x, atol=0.05)
    assert_allclose((image * -at[:, None]).sum() / image.sum(), y, atol=0.05)


def test_row_zero_is_at_the_top_and_column_zero_at_the_left():
    image = one(-40.0, 40.0, 6.0)
    row, column = np.unravel_index(image.argmax(), image.shape)
    assert row < 20
    assert column < 20


def test_edge_voxels_hold_the_part_that_lies_inside():
    """With many samples the disc is sharp: a voxel's value is then the part of it inside the disc, but for ringing."""
    fine = one(0.0, 0.0, 10.0, matrix=512)
    coarse = fine.reshape(64, 8, 64, 8).mean(axis=(1, 3))
    at = (np.arange(512) - 255.5) * 0.25
    inside = (at[:, None] ** 2 + at[None, :] ** 2 < 100.0).astype(float)
    part = inside.reshape(64, 8, 64, 8).mean(axis=(1, 3))
    assert np.any((part > 0.2) & (part < 0.8))
    assert_allclose(coarse, part, atol=0.03)


def test_ringing_is_that_of_a_truncated_edge():
    # A step cut off in k-space overshoots by 9 % of its height (Wilbraham 1848, Gibbs 1899); a straight edge in
    # the limit of a large disc. Sampled at twice the resolution so that the overshoot is seen.
    weight = window(1024, 0.0, sampled=256)
    image = one(0.0, 0.0, 40.0, matrix=1024, weight=weight)
    row = image[512]
    assert 1.06 < row.max() < 1.12
    assert_allclose(row[480:544].mean(), 1.0, atol=0.01)


def test_a_hamming_window_takes_the_ringing_away():
    plain, soft = one(0.0, 0.0, 12.0), one(0.0, 0.0, 12.0, weight=window(64, 0.46))
    outside = np.hypot(*np.meshgrid(np.arange(64) - 31.5, np.arange(64) - 31.5)) > 10.0
    assert soft[outside].std() < 0.1 * plain[outside].std()


def test_what_lies_outside_the_field_of_view_folds_in():
    assert_allclose(one(70.0, 0.0, 8.0), one(70.0 - 128.0, 0.0, 8.0), atol=1e-10)


def test_white_noise_has_the_asked_size_in_both_parts():
    got = noise((40, 64, 64), 0.02, np.ones(64), np.random.default_rng(1))
    count = got.size
    for part in (got.real, got.imag):
        assert_allclose(part.std(), 0.02, rtol=4 / np.sqrt(2 * count))  # four standard errors
    assert abs(np.mean(got.real * got.imag)) < 4 * 0.02**2 / np.sqrt(count)


@pytest.mark.parametrize("sampled", [None, 48])
def test_filtered_noise_is_smaller_by_the_windows_rms(sampled):
    weight = window(64, 0.46, sampled)
    got = noise((60, 64, 64), 1.0, weight, np.random.default_rng(2))
    assert_allclose(got.real.std(), np.mean(weight**2), rtol=0.01)  # rms of the product of two windows
    beside = np.mean(got.real[:, :, 1:] * got.real[:, :, :-1]) / got.real.var()
    assert beside > 0.3  # neighbours are alike
