"""T1 from inversion and saturation recovery: |a + b exp(-TI / T1)|, three parameters, noise floor included.

With `a` and `b` free, whatever is the same for every TI (imperfect inversion, a repetition time that is not long, the
readout's relaxation and its profile) goes into them and not into T1: before the readout every part of the slice
recovers as M0 + (M(0) - M0) exp(-TI / T1), and sums of such curves are one such curve.

References
----------
.. [1] Barral J K et al., Magn Reson Med 64 (2010) 1057-1067 (the form, and the polarity restored by the fit).
.. [2] Golub G H and Pereyra V, SIAM J Numer Anal 10 (1973) 413-432 (variable projection).
.. [3] Gudbjartsson H and Patz S, Magn Reson Med 34 (1995) 910-914 (the noise floor).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qa.fit import forms, varpro
from qa.fit.descend import Model, descend
from qa.fit.estimate import Estimate, Signals
from qa.fit.noise import expected_magnitude, magnitude_sd
from qa.fit.polarity import Decays, fit_decays, fit_magnitude_decays, lowest, polarities, rate_range, with_signs
from qa.fit.quality import COMMON, Check, Facts, check_signals, conclude, mean_sd, residual_scale, usable
from qa.words import Floats, Ints, Quantity, State

NEAR_FLOOR = 5.0  # voxel maps: rows with a sample within so many noises of zero get the noise floor's model


@dataclass(frozen=True, slots=True)
class Recovery:
    """A T1 method, for `qa.fit.METHODS`."""

    name: str
    inverted: bool  # False: saturation; the signal is never negative
    version: str = "1"
    quantity: Quantity = Quantity.T1
    min_samples: int = 4

    def fit(self, signals: Signals) -> Estimate:
        """T1 of each row.

        Parameters
        ----------
        signals : times are TI in ms; at least 4 different ones

        Returns
        -------
        Estimate
            Parameters T1_ms, a, b (signal units; a made positive for magnitudes). `shared` has the
            inversion efficiency (1: perfect), or the saturation left over.

        Raises
        ------
        TimingError
            If the times cannot be used by any fit.
        """
        check_signals(signals, self.min_samples)
        values = usable(signals)
        times = np.asarray(signals.times_ms, float)
        sd = mean_sd(signals)
        if signals.signed:
            parameters, fitted, covariance, chi2, converged = _fit_signed(values, times)
        elif not signals.noise > 0:
            flips = fit_magnitude_decays(values, times)[1] if self.inverted else np.zeros(len(values), int)
            parameters, fitted, covariance, chi2, converged = _fit_signed(with_signs(values, flips), times)
            fitted = np.abs(fitted)
        else:
            parameters, fitted, covariance, chi2, converged = self._fit_magnitude(values, times, signals)
        freedom = len(times) - 3
        if signals.noise > 0:
            if signals.signed:
                chi2, covariance = chi2 / sd[:, 0] ** 2, covariance * sd[:, :, None] ** 2
            reduced = chi2 / freedom
            covariance = covariance * residual_scale(reduced, freedom)[:, None, None] ** 2
        else:  # the noise is not known: the residuals are all there is
            covariance = covariance * (chi2 / freedom)[:, None, None]
            reduced = np.full(len(values), np.nan)
        with np.errstate(invalid="ignore"):
            u = np.sqrt(covariance[:, 0, 0])
        low, high = rate_range(times)
        facts = Facts(
            signals,
            Quantity.T1,
            parameters[:, 0],
            u,
            np.zeros(len(u)),
            reduced,
            converged,
            1.0 / high,
            1.0 / low,
            _traits(values, times, parameters, fitted, covariance, signals),
        )
        return conclude(
            facts,
            (*COMMON, *(INVERSION if self.inverted else SATURATION)),
            names=("T1_ms", "a", "b"),
            parameters=parameters,
            covariance=covariance,
            fitted=fitted,
            shared=self._shared(parameters, covariance, facts),
        )

    def map(self, signals: Signals, of_vials: Estimate, vial: Ints) -> Floats:
        """T1 of each voxel, ms, NaN where it lies outside the range of these TIs; each voxel stands by itself."""
        check_signals(signals, self.min_samples)
        values = usable(signals)
        times = np.asarray(signals.times_ms, float)
        noise = float(np.nan_to_num(signals.noise))
        if signals.signed or not self.inverted:
            decays = fit_decays(values, times)
        else:
            decays, _ = fit_magnitude_decays(values, times, 2.0 * noise)
        t1 = 1.0 / decays.rate
        if noise > 0 and not signals.signed:
            amplitude = decays.offset[:, None] + decays.amplitude[:, None] * np.exp(-times * decays.rate[:, None])
            near = np.flatnonzero(np.min(np.abs(amplitude), axis=1) < NEAR_FLOOR * noise)
            start = np.stack([t1, decays.offset, decays.amplitude], axis=1)[near]
            for first in range(0, len(near), varpro.CHUNK_ROWS):
                part = slice(first, first + varpro.CHUNK_ROWS)
                weights = 1.0 / magnitude_sd(amplitude[near[part]], noise) ** 2
                found = descend(
                    values[near[part]], _floored(times, noise), start[part], weights, tolerance=1e-4, most_steps=12
                )
                t1[near[part]] = found.parameters[:, 0]
        low, high = rate_range(times)
        good = (t1 > 1.001 / high) & (t1 < 0.999 / low) & np.isfinite(signals.values).all(axis=1)
        return np.where(good, t1, np.nan)

    def _fit_magnitude(
        self, values: Floats, times: Floats, signals: Signals
    ) -> tuple[Floats, Floats, Floats, Floats, np.ndarray]:
        """Expected magnitude of a voxel, averaged; every polarity near the minimum is tried to the end."""
        n = len(values)
        if self.inverted:
            owner, flips = polarities(values, 3.0 * signals.noise)
            start = fit_decays(with_signs(values[owner], flips), times)
        else:
            owner, start = np.arange(n), fit_decays(values, times)
        first = np.stack([1.0 / start.rate, start.offset, start.amplitude], axis=1)
        voxels = np.maximum(signals.voxels, 1.0)[owner, None]
        model = _floored(times, signals.noise)
        amplitude = _amplitude(first, times)
        for _ in range(2):
            weights = voxels / magnitude_sd(amplitude, signals.noise) ** 2
            found = descend(values[owner], model, first, weights)
            first, amplitude = found.parameters, _amplitude(found.parameters, times)
        best = lowest(owner, found.chi2, n)
        parameters = found.parameters[best]
        parameters[:, 1:] *= np.where(parameters[:, 1] < 0, -1.0, 1.0)[:, None]
        jacobian, _ = model(parameters, np.arange(n))[1], None
        covariance = varpro.inverse(np.einsum("rmi,rm,rmj->rij", jacobian, weights[best], jacobian))
        return parameters, found.fitted[best], covariance, found.chi2[best], found.converged[best]

    def _shared(self, parameters: Floats, covariance: Floats, facts: Facts) -> dict[str, float]:
        """Run-level finding from the vials that determine it: their median."""
        with np.errstate(all="ignore"):
            left = np.exp(-facts.signals.tr_ms / parameters[:, 0]) if facts.signals.tr_ms > 0 else 0.0
            ratio = -parameters[:, 2] / parameters[:, 1]
            sure = (facts.u_ms < 0.05 * facts.value_ms) & np.isfinite(ratio) & (ratio > 0)
            sure &= np.sqrt(covariance[:, 2, 2]) < 0.02 * np.abs(parameters[:, 2])
            finding = (ratio - 1.0) / (1.0 - ratio * left) if self.inverted else 1.0 - ratio
        if not sure.any():
            return {}
        return {("inversion_efficiency" if self.inverted else "saturation_left"): float(np.median(finding[sure]))}


def _amplitude(parameters: Floats, times: Floats) -> Floats:
    return np.asarray(parameters[:, 1:2] + parameters[:, 2:3] * np.exp(-times / parameters[:, 0:1]))


def _floored(times: Floats, noise: float) -> Model:
    """Expected magnitude of a + b exp(-t / T1); parameters T1, a, b."""

    def model(parameters: Floats, rows: Ints) -> tuple[Floats, Floats]:
        t1, b = parameters[:, 0:1], parameters[:, 2:3]
        decay = np.exp(-times / t1)
        mean, slope = expected_magnitude(parameters[:, 1:2] + b * decay, noise)
        return mean, np.stack([slope * b * decay * times / t1**2, slope, slope * decay], axis=2)

    return model


def _fit_signed(values: Floats, times: Floats) -> tuple[Floats, Floats, Floats, Floats, np.ndarray]:
    """Plain least squares by the variable projection engine; covariance for unit variance."""
    start: Decays = fit_decays(values, times)
    found = varpro.refine(values, forms.offset_and_decays(times), start.rate[:, None])
    t1 = 1.0 / found.theta[:, 0]
    parameters = np.concatenate([t1[:, None], found.coefficients], axis=1)
    turn = np.ones((len(t1), 3))
    turn[:, 0] = -(t1**2)  # d T1 / d rate
    covariance = found.covariance(1.0) * turn[:, :, None] * turn[:, None, :]
    sign = np.where(parameters[:, 1] < 0, -1.0, 1.0)  # a global sign is arbitrary; a final value is positive
    parameters[:, 1:] *= sign[:, None]
    covariance[:, 0, 1:] *= sign[:, None]
    covariance[:, 1:, 0] *= sign[:, None]
    return parameters, found.fitted, covariance, found.rss, found.converged


def _traits(
    values: Floats, times: Floats, parameters: Floats, fitted: Floats, covariance: Floats, signals: Signals
) -> dict[str, Floats]:
    peak = np.max(np.abs(values), axis=1)
    with np.errstate(all="ignore"):
        ratio = -parameters[:, 2] / parameters[:, 1]
        relative = np.sqrt(covariance[:, 2, 2]) / np.abs(parameters[:, 2])
        relative = np.hypot(relative, np.sqrt(covariance[:, 1, 1]) / np.abs(parameters[:, 1]))
        return {
            "peak": peak,
            "misfit": np.sqrt(np.mean((values - fitted) ** 2, axis=1)) / np.where(peak > 0, peak, 1.0),
            "ratio": ratio,
            "u_ratio": ratio * relative,
            "tr_over_t1": signals.tr_ms / parameters[:, 0],
            "ti_over_t1": times[-1] / parameters[:, 0],
            "plateau_loss": plateau_loss(times, parameters[:, 0]),
        }


def relative_u(times: Floats, t1_ms: Floats, noise_over_b: float = 1.0) -> Floats:
    """Cramér-Rao bound of u(T1) / T1 (n,) of the three-parameter form for noise / |b|, away from the noise floor."""
    decay = np.exp(-np.asarray(times) / np.asarray(t1_ms)[:, None])
    moved = decay * np.asarray(times) / np.asarray(t1_ms)[:, None]
    q = varpro.orthonormal(np.stack([np.ones_like(decay), decay], axis=2))
    moved = moved - np.einsum("rmk,rk->rm", q, np.einsum("rmk,rm->rk", q, moved))
    power = np.einsum("rm,rm->r", moved, moved)
    return np.asarray(noise_over_b / np.sqrt(np.maximum(power, 1e-300)))


def plateau_loss(times: Floats, t1_ms: Floats) -> Floats:
    """By what factor u(T1) is larger than if the longest TI were 5 T1 (1 where it is at least that)."""
    loss = np.ones(len(t1_ms))
    short = np.flatnonzero(times[-1] < 5.0 * t1_ms)
    for i in short:
        longer = np.append(times[:-1], 5.0 * t1_ms[i])
        loss[i] = relative_u(times, t1_ms[i : i + 1])[0] / relative_u(longer, t1_ms[i : i + 1])[0]
    return loss


_SHARED_CHECKS: tuple[Check, ...] = (
    Check(
        "not-a-recovery",
        State.NOT_DETERMINED,
        lambda f: f.traits["ratio"] <= 0,
        lambda f, i: "the signal does not recover with TI: this is no recovery curve",
    ),
    Check(
        "no-plateau",
        State.GOOD,
        lambda f: (f.traits["ti_over_t1"] < 3.0) & (f.traits["plateau_loss"] > 1.05),
        lambda f, i: (
            f"the longest TI is {f.traits['ti_over_t1'][i]:.1f} T1, so the final value is extrapolated: u(T1) is "
            f"{f.traits['plateau_loss'][i]:.2g} times what a longest TI of 5 T1 would give"
        ),
    ),
)
INVERSION: tuple[Check, ...] = (
    *_SHARED_CHECKS,
    Check(
        "short-tr",
        State.GOOD,
        lambda f: f.traits["tr_over_t1"] < 5.0,
        lambda f, i: (
            f"TR is {f.traits['tr_over_t1'][i]:.1f} T1: {100 * np.exp(-f.traits['tr_over_t1'][i]):.2g} % of the "
            "magnetisation is not recovered before the inversion; the three-parameter form allows for it as long as "
            "TR is the same for every TI"
        ),
    ),
    Check(
        "more-than-inversion",
        State.MARKED,
        lambda f: f.traits["ratio"] - 2.0 > np.maximum(3.0 * f.traits["u_ratio"], 0.03),
        lambda f, i: (
            f"the curve starts lower than a perfect inversion can (b / a = {-f.traits['ratio'][i]:.2f}, at least -2): "
            "the signals of this scan are not on one scale, or the times are not those of the data"
        ),
    ),
)
SATURATION: tuple[Check, ...] = (
    *_SHARED_CHECKS,
    Check(
        "not-saturated",
        State.MARKED,
        lambda f: np.abs(f.traits["ratio"] - 1.0) > np.maximum(3.0 * f.traits["u_ratio"], 0.1),
        lambda f, i: (
            f"{100 * (1.0 - f.traits['ratio'][i]):.0f} % of the magnetisation is there at TI = 0: the saturation is "
            "not what the method assumes, though the three-parameter form allows for it"
        ),
    ),
)
