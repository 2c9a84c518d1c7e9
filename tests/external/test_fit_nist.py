"""The engine behind the fits, put to certified nonlinear regressions of the forms that relaxometry uses.

Values: NIST Statistical Reference Datasets, Nonlinear Regression (see fit_nist.toml). Digits are -log10 of the relative
error. Lanczos3 is a sum of three exponentials on data with five digits: its own condition allows fewer.
"""

import tomllib
from pathlib import Path

import numpy as np
import pytest

from qa.fit import forms, varpro

SETS = tomllib.loads((Path(__file__).parent / "fit_nist.toml").read_text(encoding="utf-8"))


def digits(found, certified):
    return np.min(-np.log10(np.maximum(np.abs(found / np.asarray(certified) - 1.0), 1e-16)))


def fitted(name, basis, grid):
    """Everything in NIST's terms: rates, linear coefficients, standard deviations of both, residual sum of squares."""
    x, y = np.array(SETS[name]["x"]), np.array(SETS[name]["y"])
    found = varpro.fit(y[None], basis(x), grid, most_steps=400)
    assert found.converged.all()
    p = found.theta.shape[1] + found.coefficients.shape[1]
    sd = np.sqrt(np.diagonal(found.covariance(found.rss / (len(x) - p))[0]))
    rates = found.theta.shape[1]
    return found.theta[0], found.coefficients[0], sd[:rates], sd[rates:], found.rss[0]


@pytest.mark.parametrize(("name", "fastest"), [("BoxBOD", 5.0), ("Misra1a", 0.05)])
def test_recovery_from_saturation(name, fastest):
    """b1 (1 - exp(-b2 x)): the grid spans five decades, so no start has to be guessed."""
    rate, size, sd_rate, sd_size, rss = fitted(name, forms.saturating, varpro.log_grid(1e-5, fastest, 60))
    given = SETS[name]
    assert digits(np.append(size, rate), given["certified"]) >= 9.0
    assert digits(np.append(sd_size, sd_rate), given["certified_sd"]) >= 8.0
    assert digits(rss, given["rss"]) >= 9.0


def test_offset_and_two_decays():
    """MGH17, b1 + b2 exp(-b4 x) + b3 exp(-b5 x): higher difficulty; the two rates nearly cancel."""
    rates = varpro.log_grid(1e-3, 0.5, 24)
    rate, size, sd_rate, sd_size, rss = fitted("MGH17", forms.offset_and_decays, varpro.pair_grid(rates, rates))
    given = SETS["MGH17"]
    assert digits(np.concatenate([size, rate]), given["certified"]) >= 7.0
    assert digits(np.concatenate([sd_size, sd_rate]), given["certified_sd"]) >= 6.0
    assert digits(rss, given["rss"]) >= 9.0


def test_three_decays():
    """Lanczos3, b1 exp(-b2 x) + b3 exp(-b4 x) + b5 exp(-b6 x)."""
    rates = np.geomspace(0.3, 12.0, 12)
    grid = np.array([(a, b, c) for a in rates for b in rates for c in rates if a < b < c])
    rate, size, sd_rate, sd_size, rss = fitted("Lanczos3", forms.decays, grid)
    given = SETS["Lanczos3"]
    order = np.argsort(rate)
    mixed = np.stack([size[order], rate[order]], axis=1).ravel()
    mixed_sd = np.stack([sd_size[order], sd_rate[order]], axis=1).ravel()
    assert digits(mixed, given["certified"]) >= 6.0
    assert digits(mixed_sd, given["certified_sd"]) >= 5.0
    assert digits(rss, given["rss"]) >= 6.0
