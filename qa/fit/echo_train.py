"""T2 from a train of spin echoes, with stimulated echoes, a slice profile that is not known, and the noise floor.

All vials of a run share one pair of pulses and a smooth transmit field. The early echoes of all of them together tell
how the refocusing angle is spread over the slice, and each vial's T2 is fitted with that spread (`qa.fit.train`). A
profile that a recipe states would be a `Profiles` without components in place of `unknown_profiles`.

References
----------
.. [1] Hennig J, J Magn Reson 78 (1988) 397-407 (echo trains with any refocusing angle).
.. [2] Lebel R M and Wilman A H, Magn Reson Med 64 (2010) 1005-1014 (T2 with stimulated echoes and slice profile).
.. [3] Gudbjartsson H and Patz S, Magn Reson Med 34 (1995) 910-914 (the noise floor).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from qa.fit import forms, varpro
from qa.fit.curve_map import GRID, t2_by_curves
from qa.fit.estimate import Estimate, Signals
from qa.fit.noise import magnitude_sd
from qa.fit.polarity import rate_range
from qa.fit.profiles import unknown_profiles
from qa.fit.quality import COMMON, ECHO_CHECKS, Check, Facts, check_signals, conclude, residual_scale, usable
from qa.fit.train import Joint, Spread, Train, fit_jointly, moved_by, spread, with_recovery
from qa.words import Floats, Ints, Quantity, State

FIELD_SD = (0.1, 0.05, 0.05, 0.1)  # prior of the transmit field: level, slopes and bow, relative at 100 mm
FIELD_REACH_MM = 100.0
PROFILE_SD = 1.5  # prior of the profile's components, over their spread among the pulse pairs, but at least
WIDER = 1.5  # times what the components turn out to be
NOISE_SD = 0.2  # prior of the logarithm of the noise behind the floor, over what differences of voxels say
FEW_VIALS = 3  # with fewer, the field is taken to be the same for all
GUESSED_T1_OVER_T2 = 5.0
LONGEST_T1_MS = 4500.0  # of a liquid at room temperature, with a margin over pure water
U_LOG_GUESSED_T1 = 0.7
ROUNDS = 3  # of the fit, at most; two where no vial is spoilt
SPOILT = 9.0  # times the median excess of the residuals' variance


@dataclass(frozen=True, slots=True)
class EchoTrain:
    """A T2 method, for `qa.fit.METHODS`."""

    name: str = "spin-echo-train"
    version: str = "1"
    quantity: Quantity = Quantity.T2
    min_samples: int = 4

    def fit(self, signals: Signals) -> Estimate:
        """T2 of each row; all rows belong to one run.

        Parameters
        ----------
        signals : times are TE in ms, whole multiples of the echo spacing; T1 where it is known; places on the plate

        Returns
        -------
        Estimate
            Parameters T2_ms, M0 (of the train's plateau) and the transmit level (true over nominal flip angle, held in
            the covariance). `u_model_ms` carries the slice profile, the transmit field and T1. `shared` has the mean
            refocusing angle and its spread over the slice at the plate's centre, and the profile's components.

        Raises
        ------
        TimingError
            If the times cannot be used by any fit.
        """
        check_signals(signals, self.min_samples)
        values = usable(signals)
        n = len(values)
        times = np.asarray(signals.times_ms, float)
        spacing, echoes = echo_numbers(times)
        low, high = rate_range(times)
        start = np.clip(_mono_exponential(values, times), 1.001 / high, 0.999 / low)
        t1, u_log_t1 = _known_t1(signals, start)
        noise = float(np.nan_to_num(signals.noise))
        train = _train(signals, spacing, echoes, t1, 0.0 if signals.signed else noise)
        train, found, size, weights, reduced = _robust_fit(values, train, signals, start)
        u = found.t2_ms * np.sqrt(size.own[:, 0, 0])
        through_t1 = _through_t1(found, train, weights, u_log_t1)
        u_model = found.t2_ms * np.hypot(np.sqrt(size.through_shared), through_t1)
        level = 1.0 + train.field @ found.shared[: train.field.shape[1]]
        covariance = np.zeros((n, 3, 3))
        turn = np.stack([found.t2_ms, found.m0], axis=1)
        covariance[:, :2, :2] = size.own * turn[:, :, None] * turn[:, None, :]
        covariance[:, 2, 2] = np.einsum(
            "nf,fg,ng->n", train.field, size.shared[: train.field.shape[1], : train.field.shape[1]], train.field
        )
        peak = np.max(np.abs(values), axis=1)
        facts = Facts(
            signals,
            Quantity.T2,
            found.t2_ms,
            u,
            u_model,
            reduced if noise > 0 else np.full(n, np.nan),
            np.full(n, found.converged),
            1.0 / high,
            1.0 / low,
            {
                "peak": peak,
                "misfit": np.sqrt(np.mean((values - found.fitted) ** 2, axis=1)) / np.where(peak > 0, peak, 1.0),
                "above": np.sum(found.amplitude > 2.0 * noise, axis=1),
                "t1_known": _given(signals.t1_ms, n),
                "u_t1_part": through_t1,
                "even": np.full(n, spacing > 0),
                "vials": np.full(n, n),
            },
        )
        return conclude(
            facts,
            (*COMMON, *ECHO_CHECKS, *_CHECKS),
            names=("T2_ms", "M0", "transmit_level"),
            parameters=np.stack([found.t2_ms, found.m0, level], axis=1),
            covariance=covariance,
            fitted=found.fitted,
            shared=_findings(found, train, size),
        )

    def map(self, signals: Signals, of_vials: Estimate, vial: Ints) -> Floats:
        """T2 of each voxel, ms, with its vial's transmit level and the run's profile held.

        NaN where the vial has no T2, or the voxel's lies beyond a factor of three from it.
        """
        check_signals(signals, self.min_samples)
        values = usable(signals)
        owner = np.asarray(vial, np.intp)
        centre = of_vials.value_ms
        known = np.flatnonzero(np.isfinite(centre))
        if not known.size or "transmit_level" not in of_vials.shared:
            return np.full(len(values), np.nan)
        curves = np.full((len(centre), len(GRID), len(signals.times_ms)), np.nan)
        curves[known] = _curves(signals, of_vials, owner, known)
        return t2_by_curves(values, signals, owner, centre, curves)


def echo_numbers(times_ms: Floats) -> tuple[float, Ints]:
    """Echo spacing and the number of each echo; 0 for the spacing where the times are no multiples of any.

    The spacing is the largest that gives every time a whole number, to 2 % of the spacing.
    """
    steps = np.diff(times_ms)
    least = float(np.min(steps[steps > 0]))
    for part in (1.0, 2.0, 3.0):
        number = np.rint(times_ms * part / least)
        spacing = float(times_ms @ number / (number @ number)) if number[0] >= 1 else 0.0
        if spacing > 0 and np.all(np.abs(times_ms - number * spacing) < 0.02 * spacing):
            return spacing, number.astype(np.intp)
    return 0.0, np.arange(1, len(times_ms) + 1)


def _train(signals: Signals, spacing: float, echoes: Ints, t1: Floats, noise: float) -> Train:
    n = len(t1)
    field = np.ones((n, 1))
    if n >= FEW_VIALS and signals.x_mm is not None and signals.y_mm is not None:
        x, y = signals.x_mm / FIELD_REACH_MM, signals.y_mm / FIELD_REACH_MM
        field = np.stack([np.ones(n), x, y, x * x + y * y], axis=1)
    profiles = unknown_profiles(round(float(signals.refocusing_deg), 1))
    sd = np.concatenate([FIELD_SD[: field.shape[1]], np.full(profiles.components.shape[1], PROFILE_SD), [NOISE_SD]])
    usable_spacing = spacing if spacing > 0 else float(signals.times_ms[-1]) / len(echoes)
    return Train(usable_spacing, echoes, t1, signals.tr_ms, noise, field, profiles, sd)


def _given(values: Floats | None, n: int) -> Floats:
    return np.full(n, np.nan) if values is None else np.asarray(values, float)


def _known_t1(signals: Signals, t2_start: Floats) -> tuple[Floats, Floats]:
    """T1 (n,) to use and the standard uncertainty (n,) of its logarithm."""
    n = len(t2_start)
    t1 = _given(signals.t1_ms, n)
    known = np.isfinite(t1) & (t1 > 0)
    guess = np.clip(GUESSED_T1_OVER_T2 * t2_start, t2_start, LONGEST_T1_MS)
    safe = np.where(known, t1, 1.0)
    u = np.where(known, np.nan_to_num(_given(signals.u_t1_ms, n)) / safe, U_LOG_GUESSED_T1)
    return np.where(known, t1, guess), u


def _mono_exponential(values: Floats, times: Floats) -> Floats:
    low, high = rate_range(times)
    found = varpro.fit(values, forms.decays(times), varpro.log_grid(low, high, 32), tolerance=1e-3, most_steps=6)
    return np.asarray(1.0 / found.theta[:, 0])


def _weights(amplitude: Floats, signals: Signals) -> Floats:
    """1 / variance of each averaged sample (n, m); 1 where the noise is not known."""
    if not signals.noise > 0:
        return np.ones_like(amplitude)
    sd = signals.noise if signals.signed else magnitude_sd(amplitude, signals.noise)
    return np.asarray(np.maximum(signals.voxels, 1.0)[:, None] / np.square(sd) * np.ones_like(amplitude))


def _robust_fit(
    values: Floats, train: Train, signals: Signals, start: Floats
) -> tuple[Train, Joint, Spread, Floats, Floats]:
    """The joint fit, repeated with weights by what the residuals turn out to be; also the final weights.

    Without known noise the residuals of each vial stand in for it.
    """
    plain = _weights(values, signals)
    if not signals.noise > 0:
        plain = plain / np.maximum((0.01 * np.max(np.abs(values), axis=1, keepdims=True)) ** 2, 1e-300)
    weights = plain
    t2, shared, finishing = start, np.zeros(len(train.prior_sd)), False
    for rounds_left in range(ROUNDS - 1, -1, -1):
        train = with_recovery(train, t2, shared)
        found = fit_jointly(values, train, weights, t2, shared)
        t2, shared = found.t2_ms, found.shared
        plain = _weights(found.amplitude, signals) if signals.noise > 0 else plain
        size = spread(found, train, weights)
        freedom = max(values.shape[1] - 2.0 - size.determined / max(len(values), 1), 1.0)
        reduced = np.einsum("nm,nm->n", plain, np.square(values - found.fitted)) / freedom
        if rounds_left == 0 or finishing:
            break
        excess = np.maximum(reduced, 1e-6) if not signals.noise > 0 else residual_scale(reduced, freedom) ** 2
        spoilt = len(excess) > 0 and bool(np.max(excess) > SPOILT * np.median(excess))
        finishing = rounds_left == 1 or not spoilt
        weights = plain / excess[:, None]
        if finishing:  # a spoilt vial bends the profile, so the profile is judged without it
            train = _widened(train, shared)
    return train, found, size, weights, reduced


def _widened(train: Train, shared: Floats) -> Train:
    """The train with a wider prior where its own profile turns out to be further from the mean than most pulses are."""
    fields = train.field.shape[1]
    sizes = float(np.sqrt(np.mean(np.square(shared[fields:-1]))))
    prior = train.prior_sd.copy()
    prior[fields:-1] = max(PROFILE_SD, WIDER * sizes)
    return replace(train, prior_sd=prior)


def _through_t1(found: Joint, train: Train, weights: Floats, u_log_t1: Floats) -> Floats:
    """Standard uncertainty of ln T2 (n,) from that of T1."""
    step = np.where(u_log_t1 > 0, np.minimum(u_log_t1, 0.3), 0.01)
    moved = replace(train, t1_ms=train.t1_ms * np.exp(step)).amplitudes(found.t2_ms, found.shared)
    change = found.m0[:, None] * moved - found.amplitude
    return np.asarray(np.abs(moved_by(found, weights, change)) * u_log_t1 / step)


def _findings(found: Joint, train: Train, size: Spread) -> dict[str, float]:
    """Run-level findings for trending, at the plate's centre."""
    fields = train.field.shape[1]
    level = 1.0 + found.shared[:1]
    share = np.maximum(train.profiles.at(level, found.shared[fields:-1])[0][0], 0.0)
    angle = float(level[0]) * train.profiles.angle
    excited = share / np.sin(angle / 2.0)  # from the plateau's signal to the excited signal
    weight = excited / excited.sum()
    angle = np.rad2deg(angle)
    mean = float(weight @ angle)
    findings = {
        "refocusing_angle_deg": mean,
        "refocusing_spread_deg": float(np.sqrt(weight @ np.square(angle - mean))),
        "refocused_share": float(weight @ np.sin(np.deg2rad(angle) / 2.0) ** 2),
        "transmit_level": float(level[0]),
        "u_transmit_level": float(np.sqrt(size.shared[0, 0])),
    }
    return findings | {f"profile_{k + 1}": float(c) for k, c in enumerate(found.shared[fields:-1])}


def _curves(signals: Signals, of_vials: Estimate, owner: Ints, known: Ints) -> Floats:
    """Amplitudes (known, grid, m) of the vials at T2 exp(GRID)."""
    spacing, echoes = echo_numbers(np.asarray(signals.times_ms, float))
    first = np.array([np.flatnonzero(owner == row)[0] if (owner == row).any() else 0 for row in known])
    t1 = _given(signals.t1_ms, len(owner))[first]
    centre = of_vials.value_ms[known]
    t1 = np.where(np.isfinite(t1), t1, np.clip(GUESSED_T1_OVER_T2 * centre, centre, LONGEST_T1_MS))
    profiles = unknown_profiles(round(float(signals.refocusing_deg), 1))
    sizes = np.array([of_vials.shared[f"profile_{k + 1}"] for k in range(profiles.components.shape[1])])
    points = len(GRID)
    level = np.repeat(of_vials.parameters[known, 2], points)
    train = Train(
        spacing,
        echoes,
        np.repeat(t1, points),
        signals.tr_ms,
        0.0,
        (level - 1.0)[:, None],
        profiles,
        np.ones(2 + len(sizes)),
    )
    t2 = (centre[:, None] * np.exp(GRID)).ravel()
    shared = np.concatenate([[1.0], sizes, [0.0]])
    shape = with_recovery(train, t2, shared).amplitudes(t2, shared)
    return shape.reshape(len(known), points, -1)


_CHECKS: tuple[Check, ...] = (
    Check(
        "uneven-echoes",
        State.NOT_DETERMINED,
        lambda f: ~f.traits["even"].astype(bool),
        lambda f, i: "the echo times are not whole multiples of one echo spacing: this is no echo train",
    ),
    Check(
        "t1-unknown",
        State.GOOD,
        lambda f: ~np.isfinite(f.traits["t1_known"]) & (f.traits["u_t1_part"] > 0.001),
        lambda f, i: (
            f"T1 of this vial is not known: T2 is given {100 * f.traits['u_t1_part'][i]:.1f} % more uncertainty"
        ),
    ),
    Check(
        "few-vials",
        State.GOOD,
        lambda f: f.traits["vials"] < FEW_VIALS,
        lambda f, i: (
            f"only {int(f.traits['vials'][i])} vials tell of the slice profile: the transmit field is taken to be the "
            "same for all"
        ),
    ),
)
