"""What every fit method promises, whatever it fits: one table, one contract."""

from dataclasses import replace

import numpy as np
import pytest
from fit_signals import example
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal

from qa.errors import TimingError
from qa.fit import METHODS, Signals, u_total_ms
from qa.site.recipe import QUANTITY_OF
from qa.words import Quantity, State

NAMES = sorted(METHODS)
NUMBERED = (State.GOOD, State.MARKED)


def rows(signals: Signals, index) -> Signals:
    """The same run with other rows, in another order."""
    fields = ("values", "voxels", "t1_ms", "u_t1_ms", "x_mm", "y_mm")
    return replace(signals, **{f: getattr(signals, f)[index] for f in fields if getattr(signals, f) is not None})


def test_recipes_may_name_exactly_these_methods():
    assert set(METHODS) == set(QUANTITY_OF)
    assert {name: method.quantity for name, method in METHODS.items()} == QUANTITY_OF
    assert {name: method.name for name, method in METHODS.items()} == {name: name for name in METHODS}


@pytest.mark.parametrize("name", NAMES)
def test_an_estimate_is_complete(name):
    signals, true = example(name)
    found = METHODS[name].fit(signals)
    n, m = signals.values.shape
    p = len(found.names)
    assert found.quantity is METHODS[name].quantity
    assert found.names[0] == f"{found.quantity}_ms"
    assert found.parameters.shape == (n, p)
    assert found.covariance.shape == (n, p, p)
    assert found.fitted.shape == found.residual.shape == (n, m)
    assert len(found.states) == len(found.notes) == len(found.reduced_chi2) == n
    assert_allclose(found.residual, signals.values - found.fitted)
    assert set(found.states) == {State.GOOD}
    assert_allclose(found.parameters[:, 0], found.value_ms)
    assert_allclose(np.sqrt(found.covariance[:, 0, 0]), found.u_ms, rtol=1e-9)
    assert np.all(found.u_ms > 0)
    assert np.all(found.u_model_ms >= 0)
    assert all(np.isfinite(list(found.shared.values())))
    assert_allclose(found.value_ms, true, rtol=0.015)  # 30 voxels at 0.4 % noise: three times the worst u
    assert np.all(np.abs(found.value_ms - true) < 4.0 * u_total_ms(found))
    assert np.median(found.reduced_chi2) < 2.0


@pytest.mark.parametrize("name", NAMES)
@settings(max_examples=5, deadline=None)
@given(exponent=st.integers(-5, 6))
def test_the_unit_of_the_signal_does_not_matter(name, exponent):
    signals, _ = example(name)
    scale = 10.0**exponent
    one = METHODS[name].fit(signals)
    other = METHODS[name].fit(replace(signals, values=signals.values * scale, noise=signals.noise * scale))
    assert_allclose(other.value_ms, one.value_ms, rtol=1e-5)
    assert_allclose(other.u_ms, one.u_ms, rtol=1e-3)
    assert_allclose(other.fitted, one.fitted * scale, rtol=1e-4)


@pytest.mark.parametrize("name", NAMES)
@settings(max_examples=4, deadline=None)
@given(order=st.permutations(range(8)))
def test_the_order_of_the_vials_does_not_matter(name, order):
    signals, _ = example(name)
    one, other = METHODS[name].fit(signals), METHODS[name].fit(rows(signals, list(order)))
    assert_allclose(other.value_ms, one.value_ms[order], rtol=1e-6)
    assert_allclose(u_total_ms(other), u_total_ms(one)[order], rtol=1e-4)


@pytest.mark.parametrize("name", NAMES)
def test_a_row_that_cannot_be_used_is_void_with_its_reason_and_stops_no_other(name):
    signals, true = example(name)
    values = signals.values.copy()
    values[2, 3], values[5] = np.nan, np.inf
    found = METHODS[name].fit(replace(signals, values=values))
    bad = np.isin(np.arange(len(true)), (2, 5))
    assert_array_equal(np.array([state is State.VOID for state in found.states]), bad)
    assert_array_equal(np.isnan(found.value_ms), bad)
    assert_array_equal(np.isnan(found.u_ms) & np.isnan(found.u_model_ms), bad)
    assert all("not finite" in found.notes[row][0] for row in (2, 5))
    assert_allclose(found.value_ms[~bad], true[~bad], rtol=0.015)


@pytest.mark.parametrize("name", NAMES)
@settings(max_examples=6, deadline=None)
@given(seed=st.integers(0, 10_000), kind=st.sampled_from(["noise", "zero", "flat", "spikes"]))
def test_nonsense_gives_no_number_without_a_reason(name, seed, kind):
    signals, _ = example(name)
    rng = np.random.default_rng(seed)
    shape = signals.values.shape
    values = {
        "noise": np.hypot(rng.standard_normal(shape), rng.standard_normal(shape)) * signals.noise,
        "zero": np.zeros(shape),
        "flat": np.ones(shape),
        "spikes": rng.random(shape) ** 8,
    }[kind]
    found = METHODS[name].fit(replace(signals, values=values, voxels=np.ones(shape[0])))
    for value, state, notes in zip(found.value_ms, found.states, found.notes, strict=True):
        assert (state in NUMBERED) == np.isfinite(value)
        assert state is State.GOOD or notes
    if kind in ("noise", "zero"):
        assert np.isnan(found.value_ms).all()


@pytest.mark.parametrize("name", NAMES)
def test_an_empty_run_and_a_single_vial_are_no_error(name):
    signals, true = example(name)
    none = METHODS[name].fit(rows(signals, np.zeros(0, int)))
    assert len(none.value_ms) == len(none.states) == 0
    one = METHODS[name].fit(rows(signals, [4]))
    assert one.states[0] in NUMBERED
    assert abs(one.value_ms[0] / true[4] - 1.0) < 0.04  # a lone vial of a train says little about the slice
    assert abs(one.value_ms[0] - true[4]) < 3.0 * u_total_ms(one)[0]


@pytest.mark.parametrize("name", NAMES)
def test_without_known_noise_the_residuals_stand_in(name):
    signals, true = example(name)
    known, unknown = METHODS[name].fit(signals), METHODS[name].fit(replace(signals, noise=float("nan")))
    assert np.isnan(unknown.reduced_chi2).all()
    assert_allclose(unknown.value_ms, true, rtol=0.02)
    assert 0.3 < np.median(unknown.u_ms / known.u_ms) < 3.0


@pytest.mark.parametrize("name", NAMES)
@pytest.mark.parametrize(
    "times",
    [
        lambda t: t[:-1],  # not as many as samples
        lambda t: np.where(t == t[1], np.nan, t),
        lambda t: t[::-1],
        lambda t: t - 2.0 * t[0] - 1.0,  # negative
        lambda t: np.full(len(t), t[0]),
    ],
)
def test_times_that_no_fit_can_use_are_an_error(name, times):
    signals, _ = example(name)
    with pytest.raises(TimingError):
        METHODS[name].fit(replace(signals, times_ms=times(signals.times_ms)))


@pytest.mark.parametrize("name", NAMES)
def test_too_few_samples_are_an_error_that_says_how_many_are_needed(name):
    signals, _ = example(name)
    least = METHODS[name].min_samples
    few = replace(signals, values=signals.values[:, : least - 1], times_ms=signals.times_ms[: least - 1])
    with pytest.raises(TimingError, match=str(least)):
        METHODS[name].fit(few)


@pytest.mark.parametrize("name", NAMES)
def test_a_map_agrees_with_the_vials_and_leaves_out_what_it_cannot_fit(name):
    signals, true = example(name)
    found = METHODS[name].fit(signals)
    owner = np.repeat(np.arange(len(true)), 3)
    voxels = rows(signals, owner)
    values = voxels.values.copy()
    values[4] = np.nan
    per_voxel = METHODS[name].map(replace(voxels, values=values, voxels=np.ones(len(owner))), found, owner)
    good = np.arange(len(owner)) != 4
    assert np.isnan(per_voxel[4])
    tolerance = 0.05 if found.quantity is Quantity.T1 else 0.02  # averages keep their floor: single voxels differ
    assert_allclose(per_voxel[good], found.value_ms[owner][good], rtol=tolerance)
