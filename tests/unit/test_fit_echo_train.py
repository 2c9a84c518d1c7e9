"""T2 from echo trains whose slice profile nobody states: a slice like no pulse's, a transmit field that varies."""

from dataclasses import replace

import numpy as np
import pytest
from fit_signals import (
    T1_MS,
    T2_MS,
    TRAIN_TE_MS,
    X_MM,
    Y_MM,
    example,
    example_trains,
    isochromat_train,
    magnitudes,
    signals_of,
    slice_angles,
)
from numpy.testing import assert_allclose

from qa.fit import METHODS, u_total_ms
from qa.fit.echo_train import echo_numbers
from qa.fit.noise import expected_magnitude
from qa.words import State

TRAIN = METHODS["spin-echo-train"]
KNOWN = {"t1_ms": T1_MS, "u_t1_ms": 0.005 * T1_MS, "x_mm": X_MM, "y_mm": Y_MM, "tr_ms": float("nan")}


def uniform_trains(level=1.0, t1_ms=T1_MS, t2_ms=T2_MS, times_ms=TRAIN_TE_MS):
    """Every spin of the slice sees the same angle (n, m)."""
    spacing = times_ms[0]
    return np.concatenate(
        [
            isochromat_train(np.array([np.pi * level]), spacing, a, b, len(times_ms))[0]
            for a, b in zip(t1_ms, t2_ms, strict=True)
        ]
    )


def mono_exponential(values, times_ms=TRAIN_TE_MS):
    """What T2 would be without a thought for stimulated echoes: a straight line through the logarithm."""
    return np.array([-1.0 / np.polyfit(times_ms, np.log(row), 1)[0] for row in values])


def test_ideal_pulses_give_the_plain_exponential():
    found = TRAIN.fit(signals_of(uniform_trains(), TRAIN_TE_MS, 0.0005, 20, **KNOWN))
    assert_allclose(found.value_ms, T2_MS, rtol=0.002)
    assert set(found.states) == {State.GOOD}


def test_a_slice_like_no_pulse_and_a_field_that_varies():
    clean = example_trains()
    middle = [0, 2, 3, 4, 6]
    assert np.all(mono_exponential(clean[middle]) / T2_MS[middle] > 1.03)  # there is something to correct
    values, _ = expected_magnitude(clean, 0.001)
    found = TRAIN.fit(signals_of(values, TRAIN_TE_MS, 0.001, 20, **KNOWN))
    assert_allclose(found.value_ms, T2_MS, rtol=0.003)
    assert found.reduced_chi2.max() < 3.0  # in units of 2e-4 of the signal


@pytest.mark.parametrize("level", [0.88, 0.95, 1.06])
def test_other_transmit_levels(level):
    found = TRAIN.fit(signals_of(example_trains(np.full(8, level)), TRAIN_TE_MS, 0.001, 20, **KNOWN))
    assert_allclose(found.value_ms, T2_MS, rtol=0.01)


def test_a_low_nominal_angle_that_the_recipe_states():
    clean = uniform_trains(level=140.0 / 180.0)
    found = TRAIN.fit(signals_of(clean, TRAIN_TE_MS, 0.001, 20, **KNOWN, refocusing_deg=140.0))
    assert_allclose(found.value_ms, T2_MS, rtol=0.006)
    assert_allclose(found.shared["refocusing_angle_deg"], 140.0, atol=5.0)
    assert found.shared["refocusing_spread_deg"] < 20.0


def test_what_the_run_says_of_its_pulses():
    sharp = TRAIN.fit(signals_of(uniform_trains(), TRAIN_TE_MS, 0.001, 20, **KNOWN)).shared
    soft = TRAIN.fit(signals_of(example_trains(), TRAIN_TE_MS, 0.001, 20, **KNOWN)).shared
    angles, weight = slice_angles()
    share = weight @ np.sin(angles / 2.0) ** 2 / weight.sum()
    assert_allclose(soft["refocused_share"], share, atol=0.05)
    assert sharp["refocused_share"] > 0.97 > soft["refocused_share"]
    assert soft["refocusing_spread_deg"] > 2.0 * sharp["refocusing_spread_deg"]


def test_truth_lies_within_two_u_about_as_often_as_promised():
    clean = example_trains()
    inside = []
    for seed in range(12):
        values = magnitudes(clean, 0.01, 30, seed)
        found = TRAIN.fit(signals_of(values, TRAIN_TE_MS, 0.01, 30, **KNOWN))
        inside.append(np.abs(found.value_ms - T2_MS) < 2.0 * u_total_ms(found))
    assert np.mean(inside) > 0.85  # 96 readings that share a profile in groups of eight


def test_the_noise_floor_does_not_bias_t2():
    """The shortest T2 has most of its echoes in the floor."""
    clean = example_trains()
    errors = []
    for seed in range(8):
        values = magnitudes(clean, 0.04, 60, 50 + seed)
        found = TRAIN.fit(signals_of(values, TRAIN_TE_MS, 0.04, 60, **KNOWN))
        errors.append(found.value_ms / T2_MS - 1.0)
    assert np.all(np.abs(np.mean(errors, axis=0)) < 0.03)


def test_a_short_repetition_time_is_allowed_for():
    """Slowly relaxing edges of the slice have recovered further than its middle: the steady state, spin by spin."""
    angles, weight = slice_angles()
    spacing, tr_ms, echoes = TRAIN_TE_MS[0], 900.0, len(TRAIN_TE_MS)
    excitation = np.arcsin(weight)
    rows = []
    for t1, t2 in zip(T1_MS, T2_MS, strict=True):
        rest = np.exp(-(tr_ms - echoes * spacing) / t1)
        row = 0.0
        for angle, turn in zip(angles, excitation, strict=True):
            per_unit, _ = isochromat_train(np.array([angle]), spacing, t1, t2, echoes)
            left = [
                isochromat_train(np.array([angle]), spacing, t1, t2, echoes, (0.0, 0.0, mz * np.cos(turn)))[1][0]
                for mz in (0.0, 1.0)
            ]
            low, high = (1.0 + (z - 1.0) * rest for z in left)
            row = row + np.sin(turn) * low / (1.0 - (high - low)) * per_unit[0]
        rows.append(row)
    values = np.array(rows) / np.max(rows)
    found = TRAIN.fit(signals_of(values, TRAIN_TE_MS, 0.001, 20, **KNOWN | {"tr_ms": tr_ms}))
    assert_allclose(found.value_ms, T2_MS, rtol=0.01)


def test_t1_matters_little_and_its_absence_is_told():
    signals, _ = example("spin-echo-train")
    known = TRAIN.fit(signals)
    unknown = TRAIN.fit(replace(signals, t1_ms=None, u_t1_ms=None))
    some = T1_MS.copy()
    some[0] = np.nan
    mixed = TRAIN.fit(replace(signals, t1_ms=some))
    assert_allclose(unknown.value_ms, T2_MS, rtol=0.04)
    assert np.all(np.abs(unknown.value_ms - T2_MS) < 3.0 * u_total_ms(unknown))
    assert np.all(unknown.u_model_ms > known.u_model_ms)
    assert any("T1 of this vial is not known" in note for note in mixed.notes[0])
    assert not any("T1 of this vial" in note for notes in mixed.notes[1:] for note in notes)


def test_an_uncertain_t1_widens_u_model():
    signals, _ = example("spin-echo-train")
    sure = TRAIN.fit(replace(signals, u_t1_ms=0.0 * T1_MS))
    unsure = TRAIN.fit(replace(signals, u_t1_ms=0.5 * T1_MS))
    assert_allclose(sure.value_ms, unsure.value_ms, rtol=1e-9)
    assert np.all(unsure.u_model_ms >= sure.u_model_ms)
    assert unsure.u_model_ms[0] > 1.05 * sure.u_model_ms[0]


def test_two_vials_say_less_and_say_so():
    signals, _ = example("spin-echo-train")
    two = replace(
        signals,
        **{f: getattr(signals, f)[[3, 6]] for f in ("values", "voxels", "t1_ms", "u_t1_ms", "x_mm", "y_mm")},
    )
    found, whole = TRAIN.fit(two), TRAIN.fit(signals)
    assert np.all(np.abs(found.value_ms - T2_MS[[3, 6]]) < 3.0 * u_total_ms(found))
    assert np.all(found.u_model_ms > whole.u_model_ms[[3, 6]])
    assert all(any("only 2 vials" in note for note in notes) for notes in found.notes)


def test_a_spoilt_vial_does_not_spoil_the_others():
    signals, _ = example("spin-echo-train")
    values = signals.values.copy()
    values[4] *= 1.0 + 0.3 * np.sin(np.arange(values.shape[1]))
    found = TRAIN.fit(replace(signals, values=values))
    others = np.arange(8) != 4
    assert found.states[4] is not State.GOOD
    assert_allclose(found.value_ms[others], T2_MS[others], rtol=0.02)


def test_echoes_may_be_missing():
    signals, _ = example("spin-echo-train")
    kept = np.array([0, 2, 3, 4, 6, 8, 9, 12, 13, 15])
    found = TRAIN.fit(replace(signals, values=signals.values[:, kept], times_ms=signals.times_ms[kept]))
    assert np.all(np.abs(found.value_ms - T2_MS) < 3.5 * u_total_ms(found))


def test_times_that_are_no_train_get_no_number():
    signals, _ = example("spin-echo-train")
    times = signals.times_ms + np.where(np.arange(16) % 2 == 1, 3.1, 0.0)
    found = TRAIN.fit(replace(signals, times_ms=times))
    assert set(found.states) == {State.NOT_DETERMINED}
    assert "no echo train" in found.notes[0][0]
    assert np.isnan(TRAIN.map(replace(signals, times_ms=times), found, np.arange(8))).all()


@pytest.mark.parametrize(
    ("times", "spacing", "numbers"),
    [
        ([10, 20, 30], 10, [1, 2, 3]),
        ([20, 30, 40, 50], 10, [2, 3, 4, 5]),
        ([15, 45, 75], 15, [1, 3, 5]),
        ([9.99, 20.01, 30.0], 10, [1, 2, 3]),
        ([12, 36, 84], 12, [1, 3, 7]),
        ([10, 23, 31], 0, [1, 2, 3]),
    ],
)
def test_numbering_of_echoes(times, spacing, numbers):
    found, numbered = echo_numbers(np.array(times, float))
    assert_allclose(found, spacing, rtol=1e-3)
    assert numbered.tolist() == numbers


def test_signed_trains_need_no_floor():
    clean = example_trains()
    noisy = clean + 0.003 * np.random.default_rng(6).standard_normal(clean.shape)
    found = TRAIN.fit(signals_of(noisy, TRAIN_TE_MS, 0.003, 1, **KNOWN, signed=True))
    assert np.all(np.abs(found.value_ms - T2_MS) < 3.5 * u_total_ms(found))


def test_a_map_keeps_the_vials_profile_and_leaves_out_what_lies_far_off():
    signals, _ = example("spin-echo-train", voxels=60)
    found = TRAIN.fit(signals)
    owner = np.repeat(np.arange(8), 120)
    clean = example_trains()[owner]
    clean[5] = np.exp(-TRAIN_TE_MS / (8.0 * T2_MS[0]))  # a voxel that does not belong
    voxels = signals_of(
        magnitudes(clean, 0.004, 1, 7),
        TRAIN_TE_MS,
        0.004,
        t1_ms=T1_MS[owner],
        x_mm=X_MM[owner],
        y_mm=Y_MM[owner],
        tr_ms=float("nan"),
    )
    per_voxel = TRAIN.map(voxels, found, owner)
    assert np.isnan(per_voxel[5])
    assert np.isfinite(per_voxel).mean() > 0.99
    for vial in range(8):
        assert_allclose(np.nanmedian(per_voxel[owner == vial]), found.value_ms[vial], rtol=0.01)
