"""Facts of the trade ("common practice": no source), through the code that users meet."""

import numpy as np
from fit_signals import TI_MS, inversion, saturation, signals_of
from numpy.testing import assert_allclose

from qa.fit import METHODS
from qa.plausible import doubts
from qa.words import Quantity


def test_full_recovery_needs_five_t1():
    """Common practice: after five T1 all but exp(-5) has recovered, that is 99.3 %."""
    assert_allclose(saturation(np.array([700.0]), np.array([3500.0]), left=0.0), 1.0 - np.exp(-5.0), rtol=1e-12)
    clean = np.abs(inversion(np.array([700.0]), TI_MS, tr_ms=3000.0))
    short = METHODS["inversion-recovery"].fit(signals_of(clean, TI_MS, 1e-4, 20, tr_ms=3000.0))
    enough = METHODS["inversion-recovery"].fit(signals_of(clean, TI_MS, 1e-4, 20, tr_ms=3600.0))
    assert any("TR is" in note for note in short.notes[0])
    assert not any("TR is" in note for note in enough.notes[0])


def test_a_perfect_inversion_is_null_at_t1_ln_2():
    """Common practice: the signal of a perfect inversion passes through zero at T1 ln 2; the fit finds that T1."""
    null_ms = 500.0
    times = np.array([100.0, 250.0, null_ms, 900.0, 1500.0, 2500.0, 5000.0])
    values = np.abs(1.0 - 2.0 * np.exp(-times * np.log(2.0) / null_ms))[None, :]
    assert values[0, 2] < 1e-12
    found = METHODS["inversion-recovery"].fit(signals_of(values, times, float("nan"), tr_ms=1e6))
    assert_allclose(found.value_ms, null_ms / np.log(2.0), rtol=1e-6)


def test_t1_is_never_shorter_than_t2():
    """Common practice: a T2 above T1 beyond doubt is remarked, one within doubt is not."""
    assert "physically impossible" in doubts(Quantity.T2, 900.0, 5.0, (800.0, 5.0), 50, 0, 8)[0]
    assert doubts(Quantity.T2, 805.0, 5.0, (800.0, 5.0), 50, 0, 8) == []
    assert doubts(Quantity.T2, 80.0, 5.0, (800.0, 5.0), 50, 0, 8) == []
