"""The search for changes against plain least squares, its invariances, and its false alarms."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.trend.change import YEAR, find_change, measure, peak_chance, wild
from qa.trend.changes import find_changes

WEEKS = np.arange(40) * 7.0


def by_lstsq(kind, t, y, weight, group):
    """Residual sum of squares of the best onset, by least squares one onset at a time."""
    times = np.unique(t)
    onsets = times[3:-2] if kind == "step" else times[:-4]
    best = np.inf
    for onset in onsets:
        x = (t >= onset).astype(float) if kind == "step" else np.clip(t - onset, 0, None) / YEAR
        design = np.column_stack([*(group == g for g in np.unique(group)), x]).astype(float)
        root = np.sqrt(weight)
        found, *_ = np.linalg.lstsq(design * root[:, None], y * root, rcond=None)
        best = min(best, float((weight * (y - design @ found) ** 2).sum()))
    return best


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10_000), kind=st.sampled_from(["step", "slope"]), groups=st.integers(1, 3))
def test_no_onset_fits_better_than_the_one_found(seed, kind, groups):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(12, 40))
    t = np.sort(rng.choice(200, n, replace=False)).astype(float) + 20_000.0
    group = rng.integers(0, groups, n)
    sd = rng.uniform(0.5, 2.0, n)
    y = sd * rng.standard_normal(n) + group + (2.0 * (t >= t[n // 2]) if kind == "step" else 0.05 * (t - t[0]))
    found = find_change(t, y, sd, group)
    best = min(by_lstsq(shape, t, y, 1 / sd**2, group) for shape in ("step", "slope"))
    ours = y - found.at(t)
    means = np.array([np.average(ours[group == g], weights=1 / sd[group == g] ** 2) for g in group])
    assert ((ours - means) ** 2 / sd**2).sum() == pytest.approx(best, rel=1e-6)


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10_000), factor=st.floats(1e-3, 1e3), later=st.floats(-1e4, 1e4), up=st.floats(-1e3, 1e3))
def test_a_change_does_not_care_for_unit_epoch_or_level(seed, factor, later, up):
    rng = np.random.default_rng(seed)
    y = rng.standard_normal(40) + 1.5 * (np.arange(40) > 22)
    one = find_change(WEEKS, y, np.ones(40))
    other = find_change(WEEKS + later, factor * y + up, np.ones(40))
    assert other.kind == one.kind
    assert other.size == pytest.approx(factor * one.size, rel=1e-5, abs=1e-6 * factor)
    assert other.onset == pytest.approx(one.onset + later, abs=1e-6)
    assert other.chance == pytest.approx(one.chance, rel=1e-3, abs=1e-12)


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 10_000))
def test_turned_upside_down_the_change_is_the_same_but_for_its_sign(seed):
    y = np.random.default_rng(seed).standard_normal(40)
    one, other = find_change(WEEKS, y, np.ones(40)), find_change(WEEKS, -y, np.ones(40))
    assert other.size == pytest.approx(-one.size)
    assert (other.kind, other.onset) == (one.kind, one.onset)


def test_an_unchanged_series_is_said_to_have_changed_as_seldom_as_stated():
    rng = np.random.default_rng(11)
    chances = np.array([find_change(WEEKS, rng.standard_normal(40), np.ones(40)).chance for _ in range(600)])
    assert (chances < 0.05).mean() < 0.07  # 600 trials: 0.05 +- 0.009
    assert (chances < 0.005).mean() < 0.014


def test_scatter_that_lingers_is_not_taken_for_a_change():
    rng = np.random.default_rng(12)
    false = 0
    for _ in range(200):
        y = np.zeros(60)
        for place in range(1, 60):
            y[place] = 0.4 * y[place - 1] + rng.standard_normal()
        false += bool(find_changes(np.arange(60) * 7.0, y, np.ones(60), alpha=0.01))
    assert false < 24  # 2 of 200 if nothing lingered; more than 60 without regard to what does


@pytest.mark.parametrize(("kind", "size"), [("step", 3.0), ("slope", 12.0)])
def test_intervals_hold_what_they_promise(kind, size):
    rng = np.random.default_rng(13)
    right = sized = dated = 0
    t = np.arange(60) * 7.0
    onset = 7.0 * 30
    for _ in range(200):
        change = size * (t >= onset) if kind == "step" else size * np.clip(t - onset, 0, None) / YEAR
        found = find_change(t, change + rng.standard_normal(60), np.ones(60))
        low, high = found.interval() if found.kind == "step" else found.rate_interval()
        right += found.kind == kind
        sized += found.kind == kind and low <= size <= high
        dated += found.kind == kind and found.earliest <= onset <= found.latest
    assert right > 190
    assert sized > 0.85 * right  # promised 0.90; 200 trials: +- 0.02
    assert dated > 0.85 * right


@pytest.mark.parametrize(("first", "last"), [(30, 55), (40, 52), (10, 22)])
def test_a_fault_that_was_mended_is_two_changes(first, last):
    weeks = np.arange(80)
    y = 0.3 * np.random.default_rng(14).standard_normal(80) + 2.0 * ((weeks >= first) & (weeks < last))
    found = find_changes(weeks * 7.0, y, np.full(80, 0.3), alpha=1e-3)
    assert [change.kind for change in found] == ["step", "step"]
    assert [change.onset / 7.0 for change in found] == [first, last]
    assert [change.size for change in found] == pytest.approx([2.0, -2.0], abs=0.4)


def test_a_drift_that_was_set_back_is_a_slope_and_a_step():
    weeks = np.arange(104.0)
    y = 0.3 * np.random.default_rng(15).standard_normal(104)
    y += 4.0 * np.clip(weeks - 25, 0, None) / 52.0 - 3.8 * (weeks >= 75)  # set back, but it goes on
    found = find_changes(weeks * 7.0, y, np.full(104, 0.3), alpha=1e-3)
    assert [change.kind for change in found] == ["slope", "step"]
    assert found[0].rate == pytest.approx(4.0, abs=0.5)
    assert found[1].onset == 75 * 7.0
    assert found[1].size == pytest.approx(-3.8, abs=0.3)


@pytest.mark.parametrize("runs", [0, 1, 6])
def test_too_few_runs_give_no_change(runs):
    assert find_change(WEEKS[:runs], np.ones(runs), np.ones(runs)) is None


def test_a_constant_series_has_no_change():
    assert find_change(WEEKS, np.full(40, 3.0), np.ones(40)) is None


def test_measuring_where_there_is_no_run_before_gives_nothing():
    before_all = replace(find_change(WEEKS, np.arange(40.0) > 20, np.ones(40)), onset=-1.0)
    size, u = measure(before_all, WEEKS, np.ones(40), np.ones(40))
    assert np.isnan(size)
    assert np.isnan(u)


def test_a_fault_is_measured_together_with_its_mending():
    y = 0.2 * np.random.default_rng(16).standard_normal(40) + 2.0 * ((np.arange(40) >= 10) & (np.arange(40) < 16))
    there, back = find_changes(WEEKS, y, np.full(40, 0.2), alpha=1e-3)
    alone, _ = measure(there, WEEKS, y, np.full(40, 0.2))
    together, u = measure(there, WEEKS, y, np.full(40, 0.2), along=[back])
    assert alone < 1.0
    assert together == pytest.approx(2.0, abs=4 * u)


@given(st.integers(0, 39), st.sampled_from([-1.0, 1.0]), st.floats(10.0, 1e4))
def test_a_single_wild_run_is_told_from_a_shift(place, side, size):
    y = 0.2 * np.sin(np.arange(40) * 2.3)
    y[place] += side * size
    flags = wild(y, np.full(40, 0.2))
    assert flags[place]
    shifted = 0.2 * np.sin(np.arange(40) * 2.3) + side * size * (np.arange(40) >= 20)
    assert not wild(shifted, np.full(40, 0.2)).any()


def test_larger_peaks_are_rarer():
    chances = [peak_chance(z, 100, 3) for z in (2.0, 3.0, 4.0, 5.0)]
    assert chances == sorted(chances, reverse=True)
    assert 0 < chances[-1] < 1e-4
