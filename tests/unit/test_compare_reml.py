"""Variance components against a dense restricted likelihood, balanced analysis of variance, and their invariances."""

from dataclasses import astuple

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from qa.compare.reml import reml


def study(seed, scanners=3, vials=4, runs=5, missing=0.0, sds=(1.0, 0.5, 0.8, 0.4, 0.6)):
    """Readings with known standard deviations (scanner, scanner x vial, vial, run, rest) and their codes."""
    rng = np.random.default_rng(seed)
    s, v, r = (
        code.ravel() for code in np.meshgrid(np.arange(scanners), np.arange(vials), np.arange(runs), indexing="ij")
    )
    run = s * runs + r
    y = 5.0 + sds[0] * rng.standard_normal(scanners)[s] + sds[1] * rng.standard_normal((scanners, vials))[s, v]
    y += sds[2] * rng.standard_normal(vials)[v] + sds[3] * rng.standard_normal(scanners * runs)[run]
    y += sds[4] * rng.standard_normal(y.size)
    kept = rng.random(y.size) >= missing
    return y[kept], s[kept], v[kept], run[kept]


def restricted(variances, y, s, v, run):
    """Minus twice the restricted log likelihood, from the dense covariance (Patterson and Thompson 1971)."""
    scanner, cross, vial, of_run, rest = variances
    same = [np.equal.outer(code, code).astype(float) for code in (s, s * 1000 + v, v, run)]
    total = rest * np.eye(y.size)
    for variance, alike in zip((scanner, cross, vial, of_run), same, strict=True):
        total += variance * alike
    inverse = np.linalg.inv(total)
    ones = np.ones(y.size)
    weight = ones @ inverse @ ones
    left = y - (ones @ inverse @ y) / weight
    return np.linalg.slogdet(total)[1] + np.log(weight) + left @ inverse @ left


@pytest.mark.parametrize("seed", range(4))
@pytest.mark.parametrize("missing", [0.0, 0.3])
def test_no_other_variances_are_likelier(seed, missing):
    data = study(seed, missing=missing)
    found = reml(*data)
    best = np.array([found.scanner, found.scanner_vial, found.vial, found.run, found.rest])
    least = restricted(best, *data)
    for place in range(5):
        for factor in (0.9, 0.99, 1.01, 1.1):
            other = best.copy()
            other[place] = max(other[place] * factor, 1e-4 if factor > 1 else 0.0)
            assert restricted(other, *data) >= least - 1e-7


@pytest.mark.parametrize("seed", range(3))
def test_a_balanced_study_gives_the_analysis_of_variance(seed):
    scanners, vials, runs = 4, 6, 8
    y, *codes = study(seed, scanners, vials, runs, sds=(2.0, 1.5, 1.5, 1.2, 0.5))
    found = reml(y, *codes)
    cube = y.reshape(scanners, vials, runs)
    mean, by_s, by_v = cube.mean(), cube.mean(axis=(1, 2)), cube.mean(axis=(0, 2))
    by_sv, by_run = cube.mean(axis=2), cube.mean(axis=1)
    of_s = runs * vials * np.sum((by_s - mean) ** 2) / (scanners - 1)
    of_v = runs * scanners * np.sum((by_v - mean) ** 2) / (vials - 1)
    cross = by_sv - by_s[:, None] - by_v + mean
    of_cross = runs * np.sum(cross**2) / ((scanners - 1) * (vials - 1))
    of_run = vials * np.sum((by_run - by_s[:, None]) ** 2) / (scanners * (runs - 1))
    rest = cube - by_run[:, None, :] - by_sv[:, :, None] + by_s[:, None, None]
    of_rest = np.sum(rest**2) / (scanners * (runs - 1) * (vials - 1))
    assert found.rest == pytest.approx(of_rest, rel=1e-5)
    assert found.run == pytest.approx((of_run - of_rest) / vials, rel=1e-4)
    assert found.scanner_vial == pytest.approx((of_cross - of_rest) / runs, rel=1e-4)
    assert found.vial == pytest.approx((of_v - of_cross) / (runs * scanners), rel=1e-4)
    assert found.scanner == pytest.approx((of_s - of_run - of_cross + of_rest) / (runs * vials), rel=1e-4)


@settings(max_examples=10, deadline=None)
@given(seed=st.integers(0, 999), factor=st.floats(0.01, 100.0), shift=st.floats(-1e3, 1e3))
def test_variances_go_with_the_square_of_the_unit_and_not_with_the_level(seed, factor, shift):
    y, *codes = study(seed, missing=0.2)
    plain, other = reml(y, *codes), reml(factor * y + shift, *codes)
    assert np.array(astuple(other)[:5]) == pytest.approx(factor**2 * np.array(astuple(plain)[:5]), rel=1e-3, abs=1e-6)
    assert other.mean == pytest.approx(factor * plain.mean + shift, rel=1e-4, abs=1e-4 * factor)


def test_truth_is_recovered_from_many_readings():
    found = reml(*study(1, scanners=60, vials=12, runs=12, missing=0.1))
    told = np.sqrt([found.scanner, found.scanner_vial, found.vial, found.run, found.rest])
    assert told == pytest.approx([1.0, 0.5, 0.8, 0.4, 0.6], rel=0.25)


@pytest.mark.parametrize(
    ("told", "untold"),
    [
        ({"scanners": 1}, {"scanner", "scanner_vial"}),
        ({"vials": 1}, {"vial", "scanner_vial", "run"}),
        ({"runs": 1}, {"scanner_vial", "run"}),
    ],
)
def test_parts_that_cannot_be_told_apart_are_none(told, untold):
    found = reml(*study(2, **told))
    assert {name for name in ("scanner", "vial", "scanner_vial", "run") if getattr(found, name) is None} == untold


def test_a_single_reading_tells_nothing():
    one = np.zeros(1, dtype=np.intp)
    assert reml(np.ones(1), one, one, one) is None


def test_readings_without_any_scatter_have_no_variance():
    _, *codes = study(3)
    found = reml(np.full(codes[0].size, 7.0), *codes)
    assert [found.scanner, found.vial, found.scanner_vial, found.run, found.rest] == pytest.approx([0.0] * 5, abs=1e-12)
    assert found.mean == 7.0
