"""The same voxels through general-purpose fitters: lmfit and scipy, told as much as we are, must not do better."""

import lmfit
import numpy as np
import pytest
from fit_signals import SINGLE_TE_MS, TI_MS, inversion, magnitudes, saturation, signals_of
from numpy.testing import assert_allclose
from scipy.optimize import curve_fit, least_squares
from scipy.stats import rice

from qa.fit import METHODS
from qa.fit.noise import magnitude_sd

T1_MS = np.array([140.0, 300.0, 520.0, 900.0, 1400.0, 2100.0])
NOISE = 0.01


def three(t, t1, a, b):
    return a + b * np.exp(-t / t1)


@pytest.mark.parametrize("name", ["inversion-recovery", "saturation-recovery"])
def test_lmfit_on_signed_recoveries(name):
    form = inversion if name == "inversion-recovery" else saturation
    rng = np.random.default_rng(1)
    values = form(T1_MS, TI_MS) + NOISE * rng.standard_normal((len(T1_MS), len(TI_MS)))
    found = METHODS[name].fit(signals_of(values, TI_MS, float("nan"), signed=True))
    model = lmfit.Model(three, independent_vars=["t"])
    for row, t1 in enumerate(T1_MS):
        tight = {"ftol": 1e-14, "xtol": 1e-14, "gtol": 1e-14}
        other = model.fit(values[row], t=TI_MS, t1=t1, a=1.0, b=-1.8, fit_kws=tight)
        assert_allclose(found.value_ms[row], other.params["t1"].value, rtol=1e-6)
        assert_allclose(found.u_ms[row], other.params["t1"].stderr, rtol=1e-4)
        assert np.sum(found.residual[row] ** 2) <= other.chisqr * (1.0 + 1e-9)


def test_scipy_on_magnitudes_with_every_polarity_tried():
    values = magnitudes(inversion(T1_MS, TI_MS), 0.002, 50, 2)
    found = METHODS["inversion-recovery"].fit(signals_of(values, TI_MS, float("nan")))
    for row, t1 in enumerate(T1_MS):
        best = np.inf
        for flips in range(len(TI_MS)):
            signed = np.where(np.arange(len(TI_MS)) < flips, -values[row], values[row])
            popt, _ = curve_fit(three, TI_MS, signed, p0=(t1, 1.0, -1.8), maxfev=20_000)
            rss = np.sum((signed - three(TI_MS, *popt)) ** 2)
            if rss < best:
                best, value = rss, popt[0]
        assert_allclose(found.value_ms[row], value, rtol=1e-4)
        assert np.sum(found.residual[row] ** 2) <= best * (1.0 + 1e-8)


def test_scipy_with_the_mean_of_scipys_rice_distribution():
    """The noise floor as scipy's own distribution has it, minimised by scipy's own least squares."""
    t2 = np.array([25.0, 60.0, 150.0])
    noise, voxels = 0.03, 40
    values = magnitudes(np.exp(-SINGLE_TE_MS / t2[:, None]), noise, voxels, 3)
    found = METHODS["spin-echo-multi-te"].fit(signals_of(values, SINGLE_TE_MS, noise, voxels, tr_ms=float("nan")))
    for row, start in enumerate(t2):
        sd = magnitude_sd(found.parameters[row, 1] * np.exp(-SINGLE_TE_MS / found.value_ms[row]), noise)

        def misfit(p, row=row, sd=sd):
            return (values[row] - rice.mean(p[1] * np.exp(-SINGLE_TE_MS / p[0]) / noise) * noise) / sd

        other = least_squares(misfit, (start, 1.0), x_scale=(start, 1.0), xtol=1e-12, ftol=1e-12, gtol=1e-12)
        assert_allclose(found.value_ms[row], other.x[0], rtol=2e-3)  # weights of our last step but one
        assert np.sum(misfit((found.value_ms[row], found.parameters[row, 1])) ** 2) <= 2.0 * other.cost * 1.001 + 1e-3


def test_maximum_likelihood_agrees_with_the_mean_where_both_are_fair():
    """Single voxels: the full Rice likelihood and the expected magnitude give T1 within a fraction of its scatter."""
    values = magnitudes(inversion(np.full(24, 600.0), TI_MS), 0.04, 1, 4)
    found = METHODS["inversion-recovery"].fit(signals_of(values, TI_MS, 0.04))

    def deviance(p, row):
        amplitude = np.abs(three(TI_MS, *p)) / 0.04
        return np.sqrt(np.maximum(-2.0 * rice.logpdf(values[row] / 0.04, amplitude) + 20.0, 0.0))

    likely = [
        least_squares(deviance, (600.0, 1.0, -1.9), x_scale=(100.0, 0.1, 0.1), args=(row,)).x[0] for row in range(24)
    ]
    difference = found.value_ms - np.array(likely)
    assert np.std(difference) < 0.35 * np.std(likely)
    assert abs(np.mean(difference)) < 0.2 * np.std(likely)
