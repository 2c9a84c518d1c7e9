"""Ringing kept out of vial averages: the window's kernel, its noise, and what is left of water in a vial."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose
from plate_images import crescent
from test_locate_find import scene
from test_locate_regions import measured

from qa.locate import calm, independent_voxels


def test_it_is_hammings_window_over_k_space():
    # Harris (1978), Proc. IEEE 66(1), 51-83: 0.54 + 0.46 cos(2 pi k / n). Exact on an image that repeats itself.
    image = np.random.default_rng(1).standard_normal((2, 32, 48)).astype(np.float32)
    image[:, [0, -1]] = 0
    image[:, :, [0, -1]] = 0
    wy, wx = (0.54 + 0.46 * np.cos(2 * np.pi * np.fft.fftfreq(n)) for n in (32, 48))
    want = np.fft.ifft2(np.fft.fft2(image) * wy[:, None] * wx[None, :]).real
    assert_allclose(calm(image)[:, 1:-1, 1:-1], want[:, 1:-1, 1:-1], atol=1e-6)


def test_a_flat_image_stays_as_it_is():
    assert_allclose(calm(np.full((3, 9, 7), 5.0, dtype=np.float32)), 5.0, rtol=1e-6)


@settings(max_examples=10)
@given(seed=st.integers(0, 999), size=st.integers(1, 40))
def test_the_noise_of_a_mean_is_that_of_so_many_voxels(seed, size):
    rng = np.random.default_rng(seed)
    places = rng.permutation(144)[:size]
    rows, columns = places // 12 + 4, places % 12 + 4
    noise = rng.standard_normal((4000, 20, 20)).astype(np.float32)
    means = calm(noise)[:, rows, columns].mean(axis=1)
    # the standard deviation of 4000 draws is itself known to 1.1 %
    assert_allclose(means.std(), independent_voxels(rows, columns) ** -0.5, rtol=0.06)


def test_more_voxels_than_were_averaged_and_none_for_none():
    rows, columns = (grid.ravel() for grid in np.mgrid[5:15, 5:15])
    assert 100 < independent_voxels(rows, columns) < 144  # those just outside count in part
    assert independent_voxels(rows[:0], columns[:0]) == 0.0
    assert_allclose(independent_voxels(rows[:1], columns[:1]), (0.54**2 + 2 * 0.23**2) ** -2)


@pytest.mark.parametrize("matrix", [64, 96, 128])
def test_water_around_a_vial_hardly_reaches_into_it(matrix):
    """Root mean square over vials and frames of what ringing adds, in units of the water's signal."""
    what = scene(crescent(), matrix=matrix, fov_mm=180.0, water=True, sigma=0.0)
    frames, found = measured(what)
    calmed = calm(frames)
    bright = what.vial_signals > 0.2  # near zero a magnitude turns ringing of either sign upward
    left = {}
    for name, images in (("plain", frames), ("calmed", calmed)):
        means = np.stack([images[:, region.rows, region.columns].mean(axis=1) for region in found])
        left[name] = np.sqrt(np.mean((means - what.vial_signals)[bright] ** 2))
    assert left["calmed"] < 0.006
    assert left["calmed"] < 0.5 * left["plain"]
