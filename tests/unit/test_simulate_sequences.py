"""Sequences against closed forms and against magnetisation followed repeat by repeat."""

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from qa.simulate.pulses import profiles
from qa.simulate.sequences import inversion_recovery, saturation_recovery, spin_echo_train, spin_echoes
from qa.simulate.truth import Inversion, PulsePair

HARD = profiles(PulsePair("hard", "hard"), 180.0)
PERFECT = Inversion(efficiency=1.0, loss_ms=0.0)
ONE = np.ones(1)
TI = np.array([20.0, 80.0, 300.0, 700.0, 1500.0, 2900.0])
times_ms = st.floats(50.0, 3000.0)


@given(t1_ms=times_ms, tr_ms=st.floats(3200.0, 20000.0))
def test_ideal_inversion_recovery_at_finite_tr(t1_ms, tr_ms):
    # 1 - 2 exp(-TI/T1) + exp(-TR/T1) for perfect pulses and a short echo time: common practice.
    got = inversion_recovery(
        t1_ms * ONE, 1e9 * ONE, ONE, TI, te_ms=1e-6, tr_ms=tr_ms, profiles=HARD, inversion=PERFECT
    )[0]
    assert_allclose(got, 1 - 2 * np.exp(-TI / t1_ms) + np.exp(-tr_ms / t1_ms), atol=1e-7)


@given(t1_ms=times_ms)
def test_null_of_a_perfect_inversion(t1_ms):
    null = np.array([t1_ms * np.log(2)])
    got = inversion_recovery(t1_ms * ONE, 1e9 * ONE, ONE, null, te_ms=1e-6, tr_ms=1e7, profiles=HARD, inversion=PERFECT)
    assert_allclose(got, 0.0, atol=1e-6)


def follow(t1, t2, excite, refocus, kept, ti, te, tr, repeats=40, spins=64):
    """One spin system followed through many repeats with crushed pulses, by rotating a fan of spins."""
    fan = 2 * np.pi * (np.arange(spins) + 0.5) / spins
    mz = np.ones(spins)
    for _ in range(repeats):
        mz = mz.mean() * kept * np.ones(spins)
        mz = 1 + (mz - 1) * np.exp(-ti / t1)
        mx, my, mz = np.zeros(spins), mz * np.sin(excite), mz * np.cos(excite)
        decay, recover = np.exp(-te / 2 / t2), np.exp(-te / 2 / t1)
        mx, my = decay * (mx * np.cos(fan) - my * np.sin(fan)), decay * (mx * np.sin(fan) + my * np.cos(fan))
        mz = 1 + (mz - 1) * recover
        mx, mz = mx * np.cos(refocus) + mz * np.sin(refocus), -mx * np.sin(refocus) + mz * np.cos(refocus)
        mx, my = decay * (mx * np.cos(fan) - my * np.sin(fan)), decay * (mx * np.sin(fan) + my * np.cos(fan))
        mz = 1 + (mz - 1) * recover
        echo = my.mean()
        mz = 1 + (mz - 1) * np.exp(-(tr - ti - te) / t1)
    return echo


@settings(max_examples=25)
@given(t1_ms=times_ms, flip=st.floats(0.7, 1.2), efficiency=st.floats(0.6, 1.0))
def test_steady_state_is_what_many_repeats_reach(t1_ms, flip, efficiency):
    t2_ms = 0.3 * t1_ms
    got = inversion_recovery(
        t1_ms * ONE,
        t2_ms * ONE,
        flip * ONE,
        TI,
        te_ms=14.0,
        tr_ms=3000.0,
        profiles=HARD,
        inversion=Inversion(efficiency=efficiency, adiabatic=False, loss_ms=0.7),
    )[0]
    kept = efficiency * np.exp(-0.7 / t2_ms) * np.cos(np.pi * flip)
    want = [follow(t1_ms, t2_ms, flip * np.pi / 2, flip * np.pi, kept, ti, 14.0, 3000.0) for ti in TI]
    assert_allclose(got, want, atol=1e-9)


@given(t2_ms=st.floats(5.0, 500.0))
def test_separate_echoes_decay_with_t2_when_all_has_recovered(t2_ms):
    te = np.array([10.0, 30.0, 80.0])
    got = spin_echoes(400.0 * ONE, t2_ms * ONE, ONE, te, tr_ms=1e6, profiles=HARD)[0]
    assert_allclose(got, np.exp(-te / t2_ms), rtol=1e-9, atol=1e-12)


@given(t1_ms=times_ms)
def test_separate_echoes_saturate_as_a_spin_echo_does(t1_ms):
    # 1 - 2 exp(-(TR - TE/2)/T1) + exp(-TR/T1): the refocusing pulse inverts what has recovered by TE/2.
    te, tr = np.array([10.0, 30.0, 80.0]), 800.0
    got = spin_echoes(t1_ms * ONE, 1e9 * ONE, ONE, te, tr_ms=tr, profiles=HARD)[0]
    want = 1 - 2 * np.exp(-(tr - te / 2) / t1_ms) + np.exp(-tr / t1_ms)
    assert_allclose(got, want, atol=1e-6)


def test_train_of_perfect_pulses_is_an_exponential_whatever_the_repeat():
    for tr in (400.0, 3000.0):
        got = spin_echo_train(900 * ONE, 70 * ONE, ONE, 10.0, 12, tr_ms=tr, profiles=HARD)[0]
        assert_allclose(got / got[0], np.exp(-10.0 * np.arange(12) / 70), rtol=1e-9)


def test_an_imperfect_slice_lengthens_the_apparent_t2_of_a_train():
    """The reason why a plain exponential is not the answer: stimulated echoes carry T1 into the decay."""
    te = 10.0 * np.arange(1, 25)
    for pulses in (PulsePair(), PulsePair("gaussian", "gaussian"), PulsePair("sinc", "sinc", 4.0, 1.6)):
        train = spin_echo_train(1000 * ONE, 80 * ONE, ONE, 10.0, 24, tr_ms=3000, profiles=profiles(pulses, 165.0))[0]
        slope = np.polyfit(te[1:16], np.log(train[1:16]), 1)[0]
        assert 1.03 < -1 / slope / 80.0 < 1.35


def test_separate_echoes_are_hardly_touched_by_the_slice():
    te = np.array([12.0, 40.0, 90.0, 160.0])
    table = profiles(PulsePair(), 165.0)
    echoes = spin_echoes(600 * ONE, 80 * ONE, 0.95 * ONE, te, tr_ms=6000, profiles=table)[0]
    slope = np.polyfit(te, np.log(echoes), 1)[0]
    assert_allclose(-1 / slope, 80.0, rtol=1e-3)


@given(t1_ms=times_ms)
def test_saturation_recovery_starts_from_what_is_left(t1_ms):
    got = saturation_recovery(t1_ms * ONE, 1e9 * ONE, ONE, TI, te_ms=1e-6, profiles=HARD, left=0.02)[0]
    assert_allclose(got, 1 - 0.98 * np.exp(-TI / t1_ms), atol=1e-7)
