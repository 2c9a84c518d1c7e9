"""T2 from separate spin-echo acquisitions, one TE each, with a repetition time that need not be long.

    S(TE) = M0 [1 - (1 - c) exp(-(TR - TE/2) / T1) - c exp(-TR / T1)] exp(-TE / T2),   c = cos(refocusing angle)

for a 90 degree excitation: the refocusing pulse at TE/2 turns what has recovered until then, so a longer TE leaves less
time to recover and looks like a shorter T2. With c = -1 this is the usual 1 - 2 exp(...) + exp(...).

References
----------
.. [1] Hahn E L, Phys Rev 80 (1950) 580-594 (the spin echo); the recovery factor follows from the Bloch equations.
.. [2] Gudbjartsson H and Patz S, Magn Reson Med 34 (1995) 910-914 (the noise floor).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qa.fit import forms, varpro
from qa.fit.descend import Descent, Model, descend
from qa.fit.estimate import Estimate, Signals
from qa.fit.noise import expected_magnitude, magnitude_sd
from qa.fit.polarity import rate_range
from qa.fit.quality import COMMON, ECHO_CHECKS, Check, Facts, check_signals, conclude, residual_scale, usable
from qa.words import Floats, Ints, Quantity, State

T1_OVER_T2 = np.array([1.0, 1.8, 3.2, 5.6, 10.0, 18.0])  # where T1 is not known: even in the logarithm
LONGEST_T1_MS = 4500.0  # of a liquid at room temperature, with a margin over pure water
DOUBTFUL_COSINE = -0.8  # a refocusing pulse of 143 degrees, the worst that is allowed for


@dataclass(frozen=True, slots=True)
class MultiEcho:
    """A T2 method, for `qa.fit.METHODS`."""

    name: str = "spin-echo-multi-te"
    version: str = "1"
    quantity: Quantity = Quantity.T2
    min_samples: int = 3

    def fit(self, signals: Signals) -> Estimate:
        """T2 of each row.

        Where T1 is not known and TR is finite, the value is the mean over the T1 that are possible (T1 is at least
        T2), and their spread is `u_model_ms`. Where it is known, `u_model_ms` carries u(T1) and what a refocusing
        pulse below 180 degrees would change.

        Raises
        ------
        TimingError
            If the times cannot be used by any fit.
        """
        check_signals(signals, self.min_samples)
        values = usable(signals)
        n, m = values.shape
        start = _start(values, signals.times_ms)
        t1 = _given(signals.t1_ms, n)
        found = _descend(values, signals, start, recovery(signals, t1))
        weights = _weights(found.fitted, signals)
        covariance = found.covariance(weights)
        freedom = m - 2
        if signals.noise > 0:
            reduced = found.chi2 / freedom
            covariance = covariance * residual_scale(reduced, freedom)[:, None, None] ** 2
        else:
            covariance = covariance * (found.chi2 / freedom)[:, None, None]
            reduced = np.full(n, np.nan)
        t2, u_model = _over_t1(values, signals, found, t1)
        found.parameters[:, 0] = t2
        with np.errstate(invalid="ignore"):
            u = np.sqrt(covariance[:, 0, 0])
        low, high = rate_range(signals.times_ms)
        peak = np.max(np.abs(values), axis=1)
        facts = Facts(
            signals,
            Quantity.T2,
            t2,
            u,
            u_model,
            reduced,
            found.converged,
            1.0 / high,
            1.0 / low,
            {
                "peak": peak,
                "misfit": np.sqrt(np.mean((values - found.fitted) ** 2, axis=1)) / np.where(peak > 0, peak, 1.0),
                "above": np.sum(np.abs(found.fitted) > 2.0 * np.nan_to_num(signals.noise), axis=1),
                "t1_known": np.isfinite(t1),
            },
        )
        return conclude(
            facts,
            (*COMMON, *ECHO_CHECKS, *_CHECKS),
            names=("T2_ms", "M0"),
            parameters=found.parameters,
            covariance=covariance,
            fitted=found.fitted,
        )

    def map(self, signals: Signals, of_vials: Estimate, vial: Ints) -> Floats:
        """T2 of each voxel, ms, NaN where the fit fails."""
        check_signals(signals, self.min_samples)
        values = usable(signals)
        start = _start(values, signals.times_ms)
        t1 = _given(signals.t1_ms, len(values))
        t1 = np.where(np.isfinite(t1), t1, np.clip(5.0 * start[:, 0], 0.0, LONGEST_T1_MS))
        factor = recovery(signals, t1)
        t2 = np.empty(len(values))
        done = np.empty(len(values), bool)
        for first in range(0, len(values), varpro.CHUNK_ROWS):
            rows = slice(first, first + varpro.CHUNK_ROWS)
            found = _descend(values[rows], signals, start[rows], factor[rows], rows, tolerance=1e-4)
            t2[rows], done[rows] = found.parameters[:, 0], found.converged
        low, high = rate_range(signals.times_ms)
        good = done & (t2 > 1.0 / high) & (t2 < 1.0 / low) & np.isfinite(signals.values).all(axis=1)
        return np.where(good, t2, np.nan)


def recovery(signals: Signals, t1_ms: Floats, cosine: float = -1.0) -> Floats:
    """The factor in brackets above, (n, m); 1 where T1 or TR is not known."""
    if not signals.tr_ms > 0:
        return np.ones((len(t1_ms), len(signals.times_ms)))
    rate = np.where(np.isfinite(t1_ms) & (t1_ms > 0), 1.0 / np.where(t1_ms > 0, t1_ms, 1.0), np.inf)[:, None]
    left = np.maximum(signals.tr_ms - np.asarray(signals.times_ms) / 2.0, 0.0)
    with np.errstate(invalid="ignore"):
        factor = 1.0 - (1.0 - cosine) * np.exp(-left * rate) - cosine * np.exp(-signals.tr_ms * rate)
    return np.asarray(np.where(np.isfinite(rate), np.maximum(factor, 1e-6), 1.0))


def _given(t1_ms: Floats | None, n: int) -> Floats:
    return np.full(n, np.nan) if t1_ms is None else np.asarray(t1_ms, float)


def _start(values: Floats, times: Floats) -> Floats:
    """T2 and M0 (n, 2) of a plain exponential."""
    low, high = rate_range(times)
    found = varpro.fit(values, forms.decays(times), varpro.log_grid(low, high, 32), tolerance=1e-3, most_steps=6)
    return np.stack([1.0 / np.clip(found.theta[:, 0], low, high), np.maximum(found.coefficients[:, 0], 1e-12)], axis=1)


def _weights(fitted: Floats, signals: Signals, rows: slice = slice(None)) -> Floats:
    """1 / variance of each averaged sample (n, m); 1 where the noise is not known."""
    if not signals.noise > 0:
        return np.ones_like(fitted)
    voxels = np.maximum(signals.voxels[rows], 1.0)[:, None]
    sd = signals.noise if signals.signed else magnitude_sd(fitted, signals.noise)
    return np.asarray(voxels / np.square(sd) * np.ones_like(fitted))


def _descend(
    values: Floats,
    signals: Signals,
    start: Floats,
    factor: Floats,
    rows: slice = slice(None),
    tolerance: float = 1e-8,
) -> Descent:
    times = np.asarray(signals.times_ms, float)
    noise = 0.0 if signals.signed or not signals.noise > 0 else float(signals.noise)
    model = _model(times, factor, noise)
    low, high = rate_range(times)
    amplitude = start[:, 1:] * np.exp(-times / start[:, :1])
    for _ in range(2 if noise else 1):
        found = descend(values, model, start, _weights(amplitude, signals, rows), positive=2, tolerance=tolerance)
        start = found.parameters.copy()
        start[:, 0] = np.clip(start[:, 0], 1.0 / high, 1.0 / low)
        amplitude = start[:, 1:] * factor * np.exp(-times / start[:, :1])
    return found


def _model(times: Floats, factor: Floats, noise: float) -> Model:
    """Expected magnitude (or the amplitude itself, noise 0) of M0 F exp(-TE / T2); parameters T2, M0."""

    def model(parameters: Floats, rows: Ints) -> tuple[Floats, Floats]:
        t2, m0 = parameters[:, 0:1], parameters[:, 1:2]
        shape = factor[rows] * np.exp(-times / t2)
        mean, slope = expected_magnitude(m0 * shape, noise) if noise else (m0 * shape, np.ones_like(shape))
        return mean, np.stack([slope * m0 * shape * times / t2**2, slope * shape], axis=2)

    return model


def _over_t1(values: Floats, signals: Signals, found: Descent, t1: Floats) -> tuple[Floats, Floats]:
    """T2 (n,) and the part of its uncertainty (n,) that T1 and the refocusing pulse bring in."""
    t2, u = found.parameters[:, 0].copy(), np.zeros(len(t1))
    if not signals.tr_ms > 0:
        return t2, u

    def again(rows: Ints, t1_ms: Floats, cosine: float = -1.0) -> Floats:
        factor = recovery(signals, t1_ms, cosine)
        part = Signals(
            values[rows], signals.times_ms, signals.signed, signals.noise, signals.voxels[rows], signals.tr_ms
        )
        return _descend(values[rows], part, found.parameters[rows], factor, tolerance=1e-6).parameters[:, 0]

    known = np.flatnonzero(np.isfinite(t1))
    if known.size:
        u_t1 = np.nan_to_num(_given(signals.u_t1_ms, len(t1))[known])
        moved = again(known, t1[known] + np.maximum(u_t1, 0.001 * t1[known])) - t2[known]
        by_t1 = moved * u_t1 / np.maximum(u_t1, 0.001 * t1[known])
        u[known] = np.hypot(by_t1, (again(known, t1[known], DOUBTFUL_COSINE) - t2[known]) / np.sqrt(3.0))
    unknown = np.flatnonzero(~np.isfinite(t1))
    if unknown.size:
        apparent = t2[unknown]
        possible = np.stack([again(unknown, np.clip(k * apparent, 1.0, LONGEST_T1_MS)) for k in T1_OVER_T2])
        t2[unknown], u[unknown] = possible.mean(axis=0), possible.std(axis=0)
    return t2, u


_CHECKS: tuple[Check, ...] = (
    Check(
        "tr-unknown",
        State.GOOD,
        lambda f: np.full(len(f.value_ms), not f.signals.tr_ms > 0),
        lambda f, i: "TR is not known: the signal is taken as fully recovered",
    ),
    Check(
        "t1-unknown",
        State.GOOD,
        lambda f: ~f.traits["t1_known"].astype(bool) & (f.u_model_ms > 0.002 * f.value_ms),
        lambda f, i: (
            f"T1 of this vial is not known: for all that is possible with a TR of {f.signals.tr_ms:g} ms, T2 is given "
            f"{100 * f.u_model_ms[i] / f.value_ms[i]:.1f} % more uncertainty"
        ),
    ),
)
