"""Run lengths of control charts: how long until a chart signals, and the limit that keeps a promise.

Run lengths are in runs, from the start of the chart (zero state). Shifts are in sigmas of one value.
Everything is solved, not simulated: integral equations by Gauss-Legendre quadrature, and for a baseline
estimated from few runs the same equation averaged over what that baseline could have been.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
from scipy.special import gammaincinv, ndtr, ndtri, stdtrit

from qa.words import Floats

_NODES = 81  # one chart, to six digits
_COARSE = 61  # averages over baselines: dense enough for the kernel wherever the limit is near
_FAR = 7.5  # a limit so many standard deviations of the EWMA away is never passed (and no quadrature could tell)


def _normal(x: Floats) -> Floats:
    density: Floats = np.exp(-0.5 * x * x) / np.sqrt(2.0 * np.pi)
    return density


@lru_cache(maxsize=8)
def _unit_legendre(count: int) -> tuple[Floats, Floats]:
    nodes, weights = np.polynomial.legendre.leggauss(count)
    return nodes, weights


def _legendre(low: float, high: float, count: int = _NODES) -> tuple[Floats, Floats]:
    nodes, weights = _unit_legendre(count)
    return 0.5 * (high - low) * (nodes + 1.0) + low, 0.5 * (high - low) * weights


def shewhart_arl(width: float, shift: float = 0.0) -> float:
    """Average run length of a chart of single values with limits at +/- `width` sigmas."""
    return float(1.0 / (ndtr(-width - shift) + ndtr(-width + shift)))


def ewma_arl(weight: float, width: float, shift: float = 0.0) -> float:
    """Average run length of a two-sided EWMA chart with steady-state limits.

    Parameters
    ----------
    weight : lambda, above 0 and at most 1
    width : L, half-width of the limits in standard deviations of the EWMA
    shift : of the mean from the first value on, in sigmas

    References
    ----------
    Crowder (1987), Technometrics 29(4), 401-407 (integral equation).
    """
    half = width * np.sqrt(weight / (2.0 - weight))
    return float(_ewma_arls(weight, np.array([half]), np.array([shift]))[0])


def _ewma_arls(weight: float, half: Floats, shift: Floats, count: int = _NODES) -> Floats:
    """Run lengths for many (limit, shift) pairs; `half` in sigmas of one value. Shapes (m,) -> (m,)."""
    nodes, weights = _unit_legendre(count)
    x = half[:, None] * nodes  # (m, k)
    at = np.concatenate([x, np.zeros((half.size, 1))], axis=1)  # the last row is the start of the chart
    kernel = _normal((x[:, None, :] - (1.0 - weight) * at[:, :, None]) / weight - shift[:, None, None])
    kernel *= (half[:, None] * weights)[:, None, :] / weight
    inner = np.linalg.solve(np.eye(count) - kernel[:, :-1], np.ones((half.size, count, 1)))[..., 0]
    answer: Floats = 1.0 + np.einsum("mk,mk->m", kernel[:, -1], inner)
    return answer


def _one_sided_cusum(slack: float, decision: float, shift: float, starts: Floats) -> Floats:
    x, w = _legendre(0.0, decision)
    states = np.concatenate([[0.0], x])
    system = np.empty((states.size, states.size))
    system[:, 0] = ndtr(slack - shift - states)
    system[:, 1:] = w * _normal(x + slack - shift - states[:, None])
    solved = np.linalg.solve(np.eye(states.size) - system, np.ones(states.size))
    from_start = ndtr(slack - shift - starts) * solved[0]
    lengths: Floats = 1.0 + from_start + (w * _normal(x + slack - shift - starts[:, None])) @ solved[1:]
    return lengths


def cusum_arl(slack: float, decision: float, shift: float = 0.0, head_start: float = 0.0) -> float:
    """Average run length of a two-sided tabular CUSUM of unit-variance values.

    Parameters
    ----------
    slack, decision : k and h, in sigmas
    shift : of the mean from the first value on, in sigmas
    head_start : both sums start here, in sigmas, at most (h - k) / 2 + k so that the two sides cannot interact

    References
    ----------
    Page (1954), Biometrika 41, 100-115 (integral equation); Lucas and Crosier (1982), Technometrics 24(3),
    199-205 (how the two sides combine, with a head start).
    """
    starts = np.array([0.0, head_start])
    up0, up1 = _one_sided_cusum(slack, decision, shift, starts)
    down0, down1 = _one_sided_cusum(slack, decision, -shift, starts)
    return float((up1 * down0 + up0 * down1 - up0 * down0) / (up0 + down0))


@lru_cache(maxsize=256)
def ewma_limit(arl: float, weight: float) -> float:
    """The width L of an EWMA chart whose in-control average run length is `arl` (baseline known exactly)."""
    low, high = 0.5, 7.0
    for _ in range(50):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if ewma_arl(weight, middle) < arl else (low, middle)
    return 0.5 * (low + high)


@lru_cache(maxsize=256)
def cusum_limit(arl: float, slack: float = 0.5) -> float:
    """The decision interval h (sigmas) of a two-sided CUSUM whose in-control average run length is `arl`."""
    low, high = 0.1, 25.0
    for _ in range(50):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if cusum_arl(slack, middle) < arl else (low, middle)
    return 0.5 * (low + high)


def _baseline_could_be(runs: float, freedom: float) -> tuple[Floats, Floats, Floats]:
    """Quadrature over baselines: error of the mean (sigmas), estimated over true sigma, probability; (m,) each."""
    z, wz = np.polynomial.hermite_e.hermegauss(9)
    error = z / np.sqrt(runs) if np.isfinite(runs) else np.zeros(1)
    wz = wz / wz.sum() if np.isfinite(runs) else np.ones(1)
    if np.isfinite(freedom):
        q, wq = _legendre(0.0, 1.0, 9)
        p, wp = q**3, 3.0 * q * q * wq  # denser where sigma is estimated far too small: there the alarms come from
        ratio = np.sqrt(2.0 * gammaincinv(freedom / 2.0, p) / freedom)
    else:
        ratio, wp = np.ones(1), np.ones(1)
    return (
        np.repeat(error, ratio.size),
        np.tile(ratio, error.size),
        np.repeat(wz, ratio.size) * np.tile(wp, error.size),
    )


def ewma_signal_rate(weight: float, width: float, baseline_runs: float, freedom: float) -> float:
    """Signals per run of an in-control EWMA chart, averaged over the baselines that chance can give.

    The chart's limits are ``width`` times the standard deviation of (EWMA - estimated mean), that is
    ``sigma_hat * sqrt(weight / (2 - weight) + 1 / baseline_runs)``. For each possible baseline the conditional
    run length is solved; the mean of its inverse is the expected number of signals per run when a chart that has
    signalled starts again.

    References
    ----------
    Jones, Champ and Rigdon (2001), Technometrics 43(2), 156-167 (conditioning on the estimated parameters).
    The average over baselines taken here is of the rate, because a budget counts alarms.
    """
    error, ratio, probability = _baseline_could_be(baseline_runs, freedom)
    known = weight / (2.0 - weight)
    half = width * ratio * np.sqrt(known + (1.0 / baseline_runs if np.isfinite(baseline_runs) else 0.0))
    near = half - np.abs(error) < _FAR * np.sqrt(known)
    if not near.any():
        return 0.0
    return float(np.sum(probability[near] / _ewma_arls(weight, half[near], -error[near], _COARSE)))


@lru_cache(maxsize=1024)
def ewma_limit_estimated(
    arl: float, weight: float, baseline_runs: float = float("inf"), freedom: float = float("inf")
) -> float:
    """The width whose false signals come once in `arl` runs though mean and sigma are only estimated.

    Parameters
    ----------
    arl : runs per false signal
    weight : lambda
    baseline_runs : runs behind the estimated mean; infinite: known
    freedom : degrees of freedom behind the estimated sigma; infinite: known

    Returns
    -------
    The width to multiply with the standard deviation given in `ewma_signal_rate`.
    """
    low, high = 0.3, 40.0
    for _ in range(26):
        middle = float(np.sqrt(low * high))
        too_often = ewma_signal_rate(weight, middle, baseline_runs, freedom) * arl > 1.0
        low, high = (middle, high) if too_often else (low, middle)
    return float(np.sqrt(low * high))


def chance_limit(probability: float, freedom: float = float("inf")) -> float:
    """The two-sided limit, in estimated sigmas, that one in-control value passes with `probability` (normal or t)."""
    if np.isfinite(freedom):
        return float(-stdtrit(freedom, probability / 2.0))
    return float(-ndtri(probability / 2.0))
