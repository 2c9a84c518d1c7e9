"""Echo trains of all vials of a run at once: T2 and M0 per vial; transmit field and slice profile shared by all.

    S_v(k) = M_v sum_q p_q(b_v, c) h_vq E_k(b_v alpha_q, T1_v, T2_v) / sin(b_v alpha_q / 2)

E_k is the phase graph's echo k, p_q the share of the signal with refocusing angle alpha_q (`qa.fit.profiles`), b_v a
smooth transmit field over the plate, c the sizes of the profile's components, and h how far a part of the slice has
recovered within TR. Shared parameters carry Gaussian priors, so what the echoes do not tell stays uncertain instead of
going astray. The early echoes of all vials fix the shared parameters; each vial's later echoes fix its T2.

References
----------
.. [1] Hennig J, J Magn Reson 78 (1988) 397-407 (echo amplitudes of a train with any refocusing angle).
.. [2] Marquardt D W, J Soc Ind Appl Math 11 (1963) 431-441 (the descent).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from qa.fit.epg import echo_train, left_along_field
from qa.fit.noise import expected_magnitude
from qa.fit.profiles import Profiles
from qa.words import Floats, Ints

NEARLY = 0.25  # the same after all steps: the shared parameters still creep along a valley that T2 hardly feels
SHORTER = 0.7  # a step is tried again, shorter, where its parabola is lowest before so much of it


@dataclass(frozen=True, slots=True, eq=False)
class Train:
    """What is known of a train before the fit; n vials, m echoes, s shared parameters: field, profile, log of noise."""

    spacing_ms: float
    echoes: Ints  # (m,), 1 for the first
    t1_ms: Floats  # (n,)
    tr_ms: float  # NaN: taken as long
    noise: float  # of one voxel's channel, near enough; 0 where unknown or where the values are signed
    field: Floats  # (n, f), smooth functions of place; transmit level = 1 + field @ their sizes
    profiles: Profiles
    prior_sd: Floats  # (s,), of shared parameters around 0
    recovered: Floats | None = None  # (n, q), see `with_recovery`; None: the same everywhere

    def amplitudes(self, t2_ms: Floats, shared: Floats) -> Floats:
        """Amplitudes (n, m) for M = 1."""
        share, _, _, angle, scale = self._at(shared)
        n, q = share.shape
        t1, t2 = np.repeat(self.t1_ms, q), np.repeat(t2_ms, q)
        amplitude = echo_train(angle.ravel(), self.spacing_ms, t1, t2, int(self.echoes[-1]))[0]
        kept = amplitude[self.echoes - 1].reshape(len(self.echoes), n, q)
        return np.asarray(np.einsum("mnq,nq->nm", kept, scale * share))

    def slopes(self, t2_ms: Floats, shared: Floats) -> tuple[Floats, Floats, Floats]:
        """Amplitudes (n, m) for M = 1 and their derivatives by ln T2 (n, m) and by field and profile (n, m, s - 1)."""
        share, share_by_level, share_by_size, angle, scale = self._at(shared)
        n, q = share.shape
        t1, t2 = np.repeat(self.t1_ms, q), np.repeat(t2_ms, q)
        trains = echo_train(angle.ravel(), self.spacing_ms, t1, t2, int(self.echoes[-1]), slopes=True)
        amplitude, by_angle, by_t2 = (a[self.echoes - 1].reshape(len(self.echoes), n, q) for a in trains)
        by_level = (by_angle - amplitude * (0.5 / np.tan(angle / 2.0))) * (scale * share * self.profiles.angle)
        amplitude = amplitude * scale
        along_level = np.sum(by_level + amplitude * share_by_level, axis=2).T
        along_sizes = amplitude.transpose(1, 0, 2) @ share_by_size.transpose(0, 2, 1)
        return (
            np.einsum("mnq,nq->nm", amplitude, share),
            np.einsum("mnq,nq->nm", by_t2, scale * share),
            np.concatenate([along_level[:, :, None] * self.field[:, None, :], along_sizes], axis=2),
        )

    def _at(self, shared: Floats) -> tuple[Floats, Floats, Floats, Floats, Floats]:
        """Shares, their slopes, angles (n, q), and the factor (n, q) from echoes of an angle to those per share."""
        fields = self.field.shape[1]
        level = 1.0 + self.field @ shared[:fields]
        angle = level[:, None] * self.profiles.angle
        scale = 1.0 / np.sin(angle / 2.0)
        return (
            *self.profiles.at(level, shared[fields:-1]),
            angle,
            scale if self.recovered is None else scale * self.recovered,
        )


def with_recovery(train: Train, t2_ms: Floats, shared: Floats) -> Train:
    """The train with longitudinal magnetisation before each excitation in the steady state, over its mean."""
    if not np.isfinite(train.tr_ms):
        return train
    level = (1.0 + train.field @ shared[: train.field.shape[1]])[:, None]
    angle, excitation = level * train.profiles.angle, level * train.profiles.excitation
    q, echoes = angle.shape[1], int(train.echoes[-1])
    kept, regrown = left_along_field(
        angle.ravel(), train.spacing_ms, np.repeat(train.t1_ms, q), np.repeat(t2_ms, q), echoes
    )
    rest = np.exp(-max(train.tr_ms - echoes * train.spacing_ms, 0.0) / train.t1_ms)[:, None]
    start = 1.0 - rest + rest * regrown.reshape(angle.shape)
    start = start / (1.0 - rest * kept.reshape(angle.shape) * np.cos(excitation))
    return replace(train, recovered=start / start.mean(axis=1, keepdims=True))


@dataclass(frozen=True, slots=True, eq=False)
class Joint:
    """The minimum: n vials, s shared parameters."""

    t2_ms: Floats  # (n,)
    m0: Floats  # (n,)
    shared: Floats  # (s,)
    fitted: Floats  # (n, m), expected magnitude
    amplitude: Floats  # (n, m), without the noise floor
    jacobian: Floats  # (n, m, 2 + s): ln T2, ln M0, shared
    chi2: Floats  # (n,), weighted
    total: float  # of chi2 and the priors
    converged: bool


def fit_jointly(
    values: Floats,
    train: Train,
    weights: Floats,
    t2_ms: Floats,
    shared: Floats,
    *,
    tolerance: float = 0.03,
    most_steps: int = 40,
) -> Joint:
    """Minimise sum w (y - f)^2 + sum (shared / prior sd)^2 over all parameters.

    Parameters
    ----------
    values, weights : (n, m); weights are 1 / variance
    t2_ms, shared : where to start
    tolerance : how far the sum may still be from its least, in units of the noise's variance
    """
    log_t2, shared = np.log(t2_ms), np.array(shared, float)
    shape = train.amplitudes(t2_ms, shared)
    log_m0 = np.log(np.maximum(_scale(values, shape, weights), 1e-12))
    damping, converged, fall, near = 1e-3, False, np.inf, 1.0
    now = _evaluate(values, train, weights, log_t2, log_m0, shared)
    for _ in range(most_steps):
        step_t2, step_m0, step_shared, fall = _step(values, train, weights, now, damping)
        step_t2, step_m0 = np.clip(step_t2, -0.7, 0.7), np.clip(step_m0, -0.7, 0.7)

        def along(part: float, at: _Point = now, steps: tuple[Floats, ...] = (step_t2, step_m0, step_shared)) -> _Point:
            moved = [a + part * b for a, b in zip((at.log_t2, at.log_m0, at.shared), steps, strict=True)]
            return _evaluate(values, train, weights, *moved)

        trial = along(1.0)
        part = fall / max(trial.total - now.total + 2.0 * fall, 1e-300)  # the lowest point of a parabola on the way
        if part < SHORTER:
            shorter = along(max(part, 0.02))
            trial = shorter if shorter.total < trial.total else trial
        near = 1.0 + 1e-3 * now.total
        converged = fall < tolerance * near
        if trial.total <= now.total:
            now, damping = trial, max(damping * 0.1, 1e-7)
        else:
            damping *= 10.0
        if converged or damping > 1e8:
            break
    converged |= fall < NEARLY * near
    return Joint(
        np.exp(now.log_t2),
        np.exp(now.log_m0),
        now.shared,
        now.fitted,
        now.amplitude,
        now.jacobian,
        now.chi2,
        now.total,
        converged,
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Point:
    log_t2: Floats
    log_m0: Floats
    shared: Floats
    fitted: Floats
    amplitude: Floats
    jacobian: Floats
    chi2: Floats
    total: float


def _evaluate(values: Floats, train: Train, weights: Floats, log_t2: Floats, log_m0: Floats, shared: Floats) -> _Point:
    shape, by_t2, by_shared = train.slopes(np.exp(log_t2), shared)
    m0 = np.exp(log_m0)[:, None]
    amplitude = m0 * shape
    fitted, slope = amplitude, np.ones_like(shape)
    if train.noise > 0:
        fitted, slope = expected_magnitude(amplitude, train.noise * float(np.exp(shared[-1])))
    by_noise = fitted - slope * amplitude  # a magnitude's mean grows in proportion with amplitude and noise together
    scaled = slope * m0
    own = (scaled * by_t2)[:, :, None], (scaled * shape)[:, :, None]
    jacobian = np.concatenate([*own, scaled[:, :, None] * by_shared, by_noise[:, :, None]], axis=2)
    chi2 = np.einsum("nm,nm->n", weights, np.square(values - fitted))
    total = float(chi2.sum() + np.sum(np.square(shared / train.prior_sd)))
    return _Point(log_t2, log_m0, shared, fitted, amplitude, jacobian, chi2, total)


def _step(
    values: Floats, train: Train, weights: Floats, now: _Point, damping: float
) -> tuple[Floats, Floats, Floats, float]:
    """A damped Gauss-Newton step by the Schur complement of the vials' own parameters, and how far chi2 would fall."""
    weighted = now.jacobian * weights[:, :, None]
    gradient = np.einsum("nmp,nm->np", weighted, values - now.fitted)
    normal = np.einsum("nmp,nmr->npr", weighted, now.jacobian)
    prior = train.prior_sd**-2.0
    own = normal[:, :2, :2] + damping * normal[:, :2, :2] * np.eye(2) + 1e-12 * np.eye(2)
    inverse_own = np.linalg.inv(own)
    across = normal[:, :2, 2:]
    common = normal[:, 2:, 2:].sum(axis=0)
    common = common + np.diag(damping * np.diag(common) + prior)
    pull = gradient[:, 2:].sum(axis=0) - prior * now.shared
    solved = inverse_own @ across
    schur = common - np.einsum("nps,npr->sr", across, solved)
    step_shared = np.linalg.solve(schur, pull - np.einsum("nps,np->s", solved, gradient[:, :2]))
    step_own = np.einsum("npr,nr->np", inverse_own, gradient[:, :2]) - solved @ step_shared
    fall = float(np.sum(step_own * gradient[:, :2]) + step_shared @ pull)
    return step_own[:, 0], step_own[:, 1], step_shared, fall


@dataclass(frozen=True, slots=True, eq=False)
class Spread:
    """Covariances at the minimum."""

    own: Floats  # (n, 2, 2), of ln T2 and ln M0 with the shared parameters held
    through_shared: Floats  # (n,), variance of ln T2 that the shared parameters bring in
    shared: Floats  # (s, s)
    determined: float  # how many of the shared parameters the data determine rather than the priors


def spread(found: Joint, train: Train, weights: Floats) -> Spread:
    """Covariances from the normal equations and the priors."""
    normal = np.einsum("nmp,nm,nmr->npr", found.jacobian, weights, found.jacobian)
    own = np.linalg.inv(normal[:, :2, :2] + 1e-12 * np.eye(2))
    solved = own @ normal[:, :2, 2:]
    schur = (
        normal[:, 2:, 2:].sum(axis=0)
        + np.diag(train.prior_sd**-2.0)
        - np.einsum("nps,npr->sr", normal[:, :2, 2:], solved)
    )
    shared = np.linalg.inv(schur)
    determined = len(shared) - float(np.sum(np.diag(shared) / np.square(train.prior_sd)))
    return Spread(own, np.einsum("ns,sr,nr->n", solved[:, 0], shared, solved[:, 0]), shared, determined)


def moved_by(found: Joint, weights: Floats, change: Floats) -> Floats:
    """How far ln T2 (n,) moves when the model's amplitudes change by `change` (n, m): own echoes only."""
    own = found.jacobian[:, :, :2]
    normal = np.einsum("nmp,nm,nmr->npr", own, weights, own) + 1e-12 * np.eye(2)
    pull = np.einsum("nmp,nm,nm->np", own, weights, change)
    return np.asarray(-np.linalg.solve(normal, pull[:, :, None])[:, 0, 0])


def _scale(values: Floats, shape: Floats, weights: Floats) -> Floats:
    return np.asarray(
        np.einsum("nm,nm,nm->n", weights, values, shape) / np.einsum("nm,nm,nm->n", weights, shape, shape)
    )
