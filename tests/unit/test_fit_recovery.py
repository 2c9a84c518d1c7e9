"""T1 from recovery curves: common practice as numbers, polarity, the noise floor, and words on doubtful curves."""

from dataclasses import replace

import numpy as np
import pytest
from fit_signals import T1_MS, TI_MS, inversion, magnitudes, saturation, signals_of
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from qa.fit import METHODS
from qa.fit.recovery import relative_u
from qa.words import State

IR, SR = METHODS["inversion-recovery"], METHODS["saturation-recovery"]


def test_five_t1_recover_to_99_percent_and_the_null_is_at_ln_2():
    """Common practice, computed: 1 - exp(-5) = 0.99326 after saturation; perfect inversion nulls at T1 ln 2."""
    assert_allclose(saturation(np.array([100.0]), np.array([500.0]), left=0.0), 0.9932620530009145, rtol=1e-12)
    null = inversion(np.array([1000.0]), np.array([1000.0 * np.log(2.0)]), efficiency=1.0, tr_ms=1e9)
    assert_allclose(null, 0.0, atol=1e-12)


@pytest.mark.parametrize("signed", [False, True])
@pytest.mark.parametrize("efficiency", [0.8, 0.95, 1.0])
def test_imperfect_inversion_and_short_tr_do_not_touch_t1(signed, efficiency):
    clean = inversion(T1_MS, TI_MS, efficiency, tr_ms=4000.0)
    values = clean if signed else np.abs(clean)
    found = IR.fit(signals_of(values, TI_MS, float("nan"), signed=signed, tr_ms=4000.0))
    assert_allclose(found.value_ms, T1_MS, rtol=1e-6)
    assert_allclose(found.shared["inversion_efficiency"], efficiency, rtol=1e-6)


@settings(max_examples=25, deadline=None)
@given(t1=st.floats(150.0, 1500.0), seed=st.integers(0, 10**6))
def test_magnitudes_and_signed_values_give_the_same_t1(t1, seed):
    """Polarity is the fit's business: dropping the sign costs a fraction of the uncertainty."""
    clean = inversion(np.array([t1]), TI_MS)
    noisy = clean + 0.001 * np.random.default_rng(seed).standard_normal(clean.shape)
    signed = IR.fit(signals_of(noisy, TI_MS, 0.001, signed=True))
    magnitude = IR.fit(signals_of(np.abs(noisy), TI_MS, 0.001))
    turned = IR.fit(signals_of(-noisy, TI_MS, 0.001, signed=True))  # a phase convention of the other sign
    assert_allclose(turned.value_ms, signed.value_ms, rtol=1e-9)
    assert abs(magnitude.value_ms[0] - signed.value_ms[0]) < 1.5 * signed.u_ms[0]


@pytest.mark.parametrize("method", [IR, SR])
def test_the_noise_floor_does_not_bias_t1(method):
    form = inversion if method is IR else saturation
    truth = np.array([300.0, 900.0])
    runs = 120
    clean = np.repeat(form(truth, TI_MS), runs, axis=0)
    found = method.fit(signals_of(magnitudes(clean, 0.05, 40, 5), TI_MS, 0.05, 40))
    value = found.value_ms.reshape(2, runs)
    error = value.mean(axis=1) - truth
    assert np.all(np.abs(error) < 4.0 * value.std(axis=1) / np.sqrt(runs) + 0.001 * truth)
    inside = np.abs(found.value_ms - np.repeat(truth, runs)) < 2.0 * found.u_ms
    assert 0.91 < inside.mean() < 0.99


def test_more_noise_gives_a_larger_u_and_no_value_at_all_in_the_end():
    clean = inversion(np.array([800.0]), TI_MS)
    u = [IR.fit(signals_of(magnitudes(clean, n, 10, 1), TI_MS, n, 10)).u_ms[0] for n in (0.003, 0.01, 0.03, 0.1)]
    assert all(np.diff(u) > 0)
    lost = IR.fit(signals_of(magnitudes(clean, 0.5, 10, 1), TI_MS, 0.5, 10))
    assert lost.states == (State.NOT_DETERMINED,)
    assert lost.notes[0]


@pytest.mark.parametrize("t1", [2.0, 60_000.0])
def test_t1_that_these_tis_cannot_determine_gets_no_number(t1):
    clean = np.abs(inversion(np.array([t1]), TI_MS, tr_ms=1e7))
    found = IR.fit(signals_of(magnitudes(clean, 0.005, 20, 3), TI_MS, 0.005, 20))
    assert found.states == (State.NOT_DETERMINED,)
    assert np.isnan(found.value_ms).all()


def test_a_recovery_delay_below_five_t1_is_told():
    found = IR.fit(signals_of(np.abs(inversion(np.array([1500.0, 200.0]), TI_MS)), TI_MS, 0.001))
    assert any("TR is 4.0 T1" in note for note in found.notes[0])
    assert any("longest TI is 2.4 T1" in note for note in found.notes[0])
    assert found.notes[1] == ()


def test_a_curve_that_starts_lower_than_any_inversion_is_marked():
    """Scans that are not on one scale, for example: the first samples twice too large."""
    values = np.abs(inversion(np.array([900.0]), TI_MS, efficiency=1.6, tr_ms=1e6))
    found = IR.fit(signals_of(values, TI_MS, 0.002, 20))
    assert found.states == (State.MARKED,)
    assert "lower than a perfect inversion" in found.notes[0][0]


def test_a_decay_is_no_recovery():
    found = SR.fit(signals_of(0.2 + np.exp(-TI_MS[None] / 500.0), TI_MS, 0.001, 20))
    assert found.states == (State.NOT_DETERMINED,)
    assert "does not recover" in found.notes[0][0]


def test_saturation_that_leaves_much_is_marked_but_fits():
    found = SR.fit(signals_of(saturation(np.array([600.0]), TI_MS, left=0.3), TI_MS, 0.001, 20))
    assert found.states == (State.MARKED,)
    assert_allclose(found.value_ms, 600.0, rtol=2e-3)
    assert_allclose(found.shared["saturation_left"], 0.3, atol=0.01)


def test_a_curve_of_two_components_is_marked_as_a_misfit():
    mixed = 0.2 * inversion(np.array([120.0]), TI_MS) + 0.8 * inversion(np.array([900.0]), TI_MS)
    found = IR.fit(signals_of(mixed, TI_MS, 0.002, 30, signed=True))
    assert found.states == (State.MARKED,)
    assert "does not follow the model" in found.notes[0][0]


def test_noise_that_voxels_share_widens_every_u():
    """Filtered images: averages of 30 voxels scatter as those of 5 do."""
    rng = np.random.default_rng(8)
    clean = inversion(np.tile(T1_MS, 3), TI_MS)
    values = clean + 0.01 / np.sqrt(5.0) * rng.standard_normal(clean.shape)
    claimed = IR.fit(signals_of(values, TI_MS, 0.01, 30, signed=True))
    honest = IR.fit(signals_of(values, TI_MS, 0.01, 5, signed=True))
    assert 0.8 < np.median(claimed.u_ms / honest.u_ms) < 1.4


def test_the_bound_for_planning_is_the_fits_own_uncertainty():
    values = inversion(T1_MS, TI_MS)
    found = IR.fit(signals_of(values, TI_MS, 0.01, signed=True))
    over_b = 0.01 / np.abs(found.parameters[:, 2])
    assert_allclose(found.u_ms / T1_MS, relative_u(TI_MS, T1_MS, 1.0) * over_b, rtol=1e-6)


def test_a_map_of_noisy_voxels_scatters_around_the_truth():
    truth = np.array([250.0, 1200.0])
    owner = np.repeat([0, 1], 300)
    voxels = signals_of(magnitudes(inversion(truth, TI_MS)[owner], 0.02, 1, 4), TI_MS, 0.02)
    found = IR.map(voxels, IR.fit(voxels), owner)
    for vial in (0, 1):
        assert_allclose(np.nanmedian(found[owner == vial]), truth[vial], rtol=0.01)


def test_tr_unknown_is_no_hindrance():
    found = IR.fit(replace(signals_of(np.abs(inversion(T1_MS, TI_MS)), TI_MS, 0.001), tr_ms=float("nan")))
    assert_allclose(found.value_ms, T1_MS, rtol=2e-3)
