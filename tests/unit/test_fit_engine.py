"""The batched engines: variable projection, its fast twin for one decay with an offset, and damped least squares."""

import numpy as np
import pytest
from fit_signals import TI_MS
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from qa.fit import forms, varpro
from qa.fit.descend import descend
from qa.fit.polarity import fit_decays, fit_magnitude_decays, rate_range, with_signs

LOW, HIGH = rate_range(TI_MS)
GRID = varpro.log_grid(LOW, HIGH, 48)
T1 = st.floats(120.0, 2500.0)


def curve(t1, offset=1.0, amplitude=-1.9):
    return offset + amplitude * np.exp(-TI_MS / t1)


@settings(max_examples=60, deadline=None)
@given(t1=T1, offset=st.floats(0.2, 5.0), amplitude=st.floats(-8.0, -0.3))
def test_clean_curves_are_recovered_exactly(t1, offset, amplitude):
    found = varpro.fit(curve(t1, offset, amplitude)[None], forms.offset_and_decays(TI_MS), GRID)
    assert found.converged.all()
    assert_allclose(1.0 / found.theta[0, 0], t1, rtol=1e-7)
    assert_allclose(found.coefficients[0], [offset, amplitude], rtol=1e-6)


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 10**6), t1=T1)
def test_both_engines_for_a_decay_with_offset_agree(seed, t1):
    values = curve(t1) + 0.02 * np.random.default_rng(seed).standard_normal((5, len(TI_MS)))
    slow = varpro.fit(values, forms.offset_and_decays(TI_MS), GRID)
    fast = fit_decays(values, TI_MS)
    assert_allclose(fast.rate, slow.theta[:, 0], rtol=1e-5)
    assert_allclose(fast.rss, slow.rss, rtol=1e-8)
    assert_allclose(np.stack([fast.offset, fast.amplitude], 1), slow.coefficients, rtol=1e-4)


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10**6), t1=T1)
def test_no_rate_nearby_gives_a_lower_residual(seed, t1):
    values = curve(t1) + 0.05 * np.random.default_rng(seed).standard_normal(len(TI_MS))
    found = varpro.fit(values[None], forms.offset_and_decays(TI_MS), GRID)
    for factor in (0.9, 0.99, 0.999, 1.001, 1.01, 1.1):
        design = np.stack([np.ones(len(TI_MS)), np.exp(-TI_MS * found.theta[0, 0] * factor)], axis=1)
        assert np.linalg.lstsq(design, values, rcond=None)[1][0] >= found.rss[0] * (1.0 - 1e-12)


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10**6))
def test_weights_act_as_repeated_samples(seed):
    rng = np.random.default_rng(seed)
    values = curve(700.0) + 0.02 * rng.standard_normal(len(TI_MS))
    times = rng.integers(1, 4, len(TI_MS))
    again = np.repeat(np.arange(len(TI_MS)), times)
    weighted = varpro.fit(values[None], forms.offset_and_decays(TI_MS), GRID, weights=times.astype(float))
    repeated = varpro.fit(values[again][None], forms.offset_and_decays(TI_MS[again]), GRID)
    assert_allclose(weighted.theta, repeated.theta, rtol=1e-8)
    assert_allclose(weighted.rss, repeated.rss, rtol=1e-10)
    assert_allclose(weighted.covariance(1.0), repeated.covariance(1.0), rtol=1e-6)


def test_rows_are_worked_in_chunks_without_a_seam():
    rng = np.random.default_rng(0)
    values = curve(rng.uniform(200.0, 2000.0, (varpro.CHUNK_ROWS + 7, 1)))
    together = varpro.fit(values, forms.offset_and_decays(TI_MS), GRID, tolerance=1e-6)
    some = [0, varpro.CHUNK_ROWS - 1, varpro.CHUNK_ROWS, varpro.CHUNK_ROWS + 6]
    alone = varpro.fit(values[some], forms.offset_and_decays(TI_MS), GRID, tolerance=1e-6)
    assert_allclose(together.theta[some], alone.theta, rtol=1e-6)


def test_what_the_data_do_not_determine_has_no_covariance():
    found = varpro.fit(np.ones((1, len(TI_MS))), forms.offset_and_decays(TI_MS), GRID)
    assert np.isnan(found.covariance(1.0)).all() or found.covariance(1.0)[0, 0, 0] > 1e6
    assert np.isnan(varpro.inverse(np.zeros((1, 2, 2)))).all()
    assert np.isnan(varpro.inverse(np.array([[[1.0, 1.0], [1.0, 1.0]]]))).all()


@settings(max_examples=60, deadline=None)
@given(t1=T1, efficiency=st.floats(0.7, 1.0), scale=st.floats(1e-3, 1e4))
def test_the_polarity_comes_from_the_fit(t1, efficiency, scale):
    signed = scale * curve(t1, 1.0, -(1.0 + efficiency))
    found, flips = fit_magnitude_decays(np.abs(signed)[None], TI_MS)
    assert_allclose(1.0 / found.rate[0], t1, rtol=1e-6)
    assert found.offset[0] > 0
    if np.all(np.abs(signed) > 1e-6 * scale):  # at the null itself either sign is right
        assert flips[0] == np.sum(signed < 0)


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 10**6), t1=T1, noise=st.floats(0.001, 0.03))
def test_no_other_polarity_has_a_lower_residual(seed, t1, noise):
    rng = np.random.default_rng(seed)
    values = np.hypot(curve(t1) + noise * rng.standard_normal(len(TI_MS)), noise * rng.standard_normal(len(TI_MS)))
    found, _ = fit_magnitude_decays(values[None], TI_MS, floor=2.0 * noise)
    every = fit_decays(with_signs(np.repeat(values[None], len(TI_MS) + 1, 0), np.arange(len(TI_MS) + 1)), TI_MS)
    assert found.rss[0] <= every.rss.min() * (1.0 + 1e-9)


def test_flips_count_the_first_samples():
    signs = np.sign(with_signs(np.ones((3, 4)), np.array([0, 2, 4])))
    assert_array_equal(signs, [[1, 1, 1, 1], [-1, -1, 1, 1], [-1, -1, -1, -1]])


@pytest.mark.parametrize("shift", [0.3, 3.0])
def test_damped_least_squares_finds_a_known_minimum(shift):
    times = np.arange(1.0, 9.0)
    truth = np.array([[2.0, 5.0], [4.0, 0.5]])

    def model(p, rows):
        decay = np.exp(-times / p[:, :1])
        return p[:, 1:] * decay, np.stack([p[:, 1:] * decay * times / p[:, :1] ** 2, decay], axis=2)

    values, _ = model(truth, np.arange(2))
    found = descend(values, model, truth * shift, np.ones_like(values), positive=2)
    assert found.converged.all()
    assert_allclose(found.parameters, truth, rtol=1e-6)
    assert_allclose(found.chi2, 0.0, atol=1e-10)
