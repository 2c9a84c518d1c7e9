"""T2 from separate spin echoes: finite repetition times, T1 known and unknown, the noise floor."""

import numpy as np
import pytest
from fit_signals import SINGLE_TE_MS, T1_MS, T2_MS, TR_MS, magnitudes, signals_of, single_echoes
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from qa.fit import METHODS, u_total_ms
from qa.fit.multi_echo import recovery
from qa.words import State

METHOD = METHODS["spin-echo-multi-te"]


def fitted(clean, noise=1e-4, voxels=20, **more):
    return METHOD.fit(signals_of(clean, SINGLE_TE_MS, noise, voxels, **more))


def test_long_repetition_time_is_the_plain_exponential():
    clean = np.exp(-SINGLE_TE_MS / T2_MS[:, None])
    assert_allclose(fitted(clean, tr_ms=1e6, t1_ms=T1_MS, u_t1_ms=0 * T1_MS).value_ms, T2_MS, rtol=1e-5)


def test_the_recovery_factor_is_that_of_one_repetition_followed_step_by_step():
    plain = single_echoes(T1_MS, T2_MS, SINGLE_TE_MS, 2500.0) * np.exp(SINGLE_TE_MS / T2_MS[:, None])
    factor = recovery(signals_of(np.ones((8, len(SINGLE_TE_MS))), SINGLE_TE_MS, 0.0, tr_ms=2500.0), T1_MS)
    assert_allclose(factor, plain, rtol=1e-9)


@pytest.mark.parametrize("tr_ms", [1000.0, 2500.0, TR_MS])
def test_a_short_repetition_time_is_corrected_with_a_known_t1(tr_ms):
    clean = single_echoes(T1_MS, T2_MS, SINGLE_TE_MS, tr_ms)
    found = fitted(clean, tr_ms=tr_ms, t1_ms=T1_MS, u_t1_ms=0.01 * T1_MS)
    assert_allclose(found.value_ms, T2_MS, rtol=1e-5)
    long = T1_MS > 1000.0
    assert np.all(found.u_model_ms[long] > 0)


def test_without_t1_the_value_is_widened_by_what_t1_may_be():
    tr_ms = 2500.0
    clean = single_echoes(T1_MS, T2_MS, SINGLE_TE_MS, tr_ms)
    found = fitted(clean, tr_ms=tr_ms)
    assert np.all(np.abs(found.value_ms - T2_MS) < 2.5 * u_total_ms(found) + 1e-3 * T2_MS)
    assert found.u_model_ms[0] > 0.003 * T2_MS[0]
    assert any("T1 of this vial is not known" in note for note in found.notes[0])


def test_an_unknown_repetition_time_is_told():
    found = fitted(np.exp(-SINGLE_TE_MS / T2_MS[:, None]), tr_ms=float("nan"))
    assert_allclose(found.value_ms, T2_MS, rtol=1e-5)
    assert all("TR is not known" in notes[0] for notes in found.notes)


@settings(max_examples=20, deadline=None)
@given(t2=st.floats(20.0, 300.0), noise=st.floats(0.005, 0.05), seed=st.integers(0, 10**6))
def test_truth_lies_near_at_any_noise(t2, noise, seed):
    clean = np.exp(-SINGLE_TE_MS[None] / t2)
    found = METHOD.fit(signals_of(magnitudes(clean, noise, 40, seed), SINGLE_TE_MS, noise, 40, tr_ms=float("nan")))
    if found.states[0] in (State.GOOD, State.MARKED):
        assert abs(found.value_ms[0] - t2) < 5.5 * u_total_ms(found)[0]
    else:
        assert found.notes[0]


def test_the_noise_floor_does_not_lengthen_t2():
    """Late echoes in the floor: a plain fit of these magnitudes is 7 % off."""
    clean = np.repeat(np.exp(-SINGLE_TE_MS[None] / 40.0), 200, axis=0)
    values = magnitudes(clean, 0.05, 40, 3)
    found = METHOD.fit(signals_of(values, SINGLE_TE_MS, 0.05, 40, tr_ms=float("nan")))
    plain = METHOD.fit(signals_of(values, SINGLE_TE_MS, 0.05, 40, tr_ms=float("nan"), signed=True))
    assert abs(np.mean(found.value_ms) / 40.0 - 1.0) < 0.004
    assert np.mean(plain.parameters[:, 0]) / 40.0 - 1.0 > 0.05


def test_few_echoes_above_the_floor_give_no_number():
    clean = np.exp(-SINGLE_TE_MS[None] / 5.0)
    found = METHOD.fit(signals_of(magnitudes(clean, 0.03, 40, 2), SINGLE_TE_MS, 0.03, 40))
    assert found.states == (State.NOT_DETERMINED,)
    assert np.isnan(found.value_ms).all()


def test_a_map_scatters_around_the_truth():
    owner = np.repeat(np.arange(8), 100)
    clean = single_echoes(T1_MS, T2_MS, SINGLE_TE_MS, TR_MS)[owner]
    voxels = signals_of(magnitudes(clean, 0.01, 1, 4), SINGLE_TE_MS, 0.01, t1_ms=T1_MS[owner])
    found = METHOD.map(voxels, METHOD.fit(voxels), owner)
    for vial in range(8):
        assert_allclose(np.nanmedian(found[owner == vial]), T2_MS[vial], rtol=0.015)
