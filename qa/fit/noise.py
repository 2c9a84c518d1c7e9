"""Noise: what is expected of a magnitude, and how large the noise of one voxel is.

A magnitude of a complex signal A with Gaussian noise of standard deviation sigma in each channel follows the Rice
distribution: its mean lies above A near the noise floor, and its spread is smaller there.

References
----------
.. [1] Rice S O, Bell Syst Tech J 24 (1945) 46-156.
.. [2] Gudbjartsson H and Patz S, Magn Reson Med 34 (1995) 910-914.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache

import numpy as np

from qa.words import Floats

_ROOT_HALF_PI = float(np.sqrt(np.pi / 2.0))
_TABLE_END = 16.0  # in units of sigma; beyond it the asymptotic series is exact to 1e-10
_STEP = 1.0 / 64.0


def expected_magnitude(amplitude: Floats, sigma: Floats | float) -> tuple[Floats, Floats]:
    """Mean of the magnitude and its derivative with respect to the amplitude.

    Parameters
    ----------
    amplitude : any shape; true amplitudes, of either sign (the sign does not matter to the magnitude)
    sigma : noise of one channel, same unit; 0 gives the absolute value

    Returns
    -------
    mean, slope : both of the broadcast shape; `slope` is d mean / d amplitude, negative for negative amplitudes.
        Exact to 1e-9 of sigma.
    """
    amplitude, sigma = np.broadcast_arrays(np.asarray(amplitude, float), np.asarray(sigma, float))
    noisy = sigma > 0
    safe = np.where(noisy, sigma, 1.0)
    over = np.abs(amplitude) / safe
    mean, slope = _moments_over_sigma(over)
    sign = np.sign(amplitude)
    return (
        np.where(noisy, mean * safe, np.abs(amplitude)),
        np.where(noisy, slope * sign, sign),
    )


def magnitude_sd(amplitude: Floats, sigma: Floats | float) -> Floats:
    """Standard deviation of the magnitude, same unit and shape as `amplitude`: sigma far from the floor, 0.655 at 0."""
    mean, _ = expected_magnitude(amplitude, sigma)
    square = np.square(amplitude) + 2.0 * np.square(sigma)
    return np.asarray(np.sqrt(np.maximum(square - mean**2, 0.18 * np.square(sigma) * 2.0)))


def amplitude_behind(mean: Floats, sigma: Floats | float) -> Floats:
    """The amplitude whose expected magnitude is `mean`: the inverse of `expected_magnitude`; 0 below the floor."""
    mean, sigma = np.broadcast_arrays(np.asarray(mean, float), np.asarray(sigma, float))
    safe = np.where(sigma > 0, sigma, 1.0)
    over = mean / safe
    knots, values, _ = _table()
    start = np.where(over < values[-1], np.interp(over, values, knots), over - 0.5 / np.maximum(over, 1.0))
    for _ in range(3):  # Newton from the table
        got, slope = _moments_over_sigma(start)
        start = np.where(over > _ROOT_HALF_PI, np.maximum(start - (got - over) / np.maximum(slope, 1e-4), 0.0), 0.0)
    return np.asarray(np.where(sigma > 0, start * safe, np.abs(mean)))


def noise_of_regions(voxels: Sequence[Floats], *, signed: bool) -> float:
    """Noise of one voxel, one channel, from how the voxels of each vial differ between frames.

    In a vial all voxels follow one curve, each with its own scale (receive field, density); ringing from neighbours
    adds a second pattern. Both are removed by a truncated singular value decomposition, and what is left is noise:
    unlike the plain standard deviation it does not grow with shading. The median over vials resists a bad vial.

    Parameters
    ----------
    voxels : per vial (voxels, frames), one linear unit
    signed : False where the values are magnitudes; their smaller spread at the noise floor is then allowed for

    Returns
    -------
    Standard deviation in signal units; NaN where no vial has two voxels and two frames.
    """
    found = [_variance_of(np.asarray(block, float), signed) for block in voxels]
    known = np.array([f for f in found if np.isfinite(f[0]) and f[1] >= 1.0]).reshape(-1, 2)
    if len(known) == 0:
        return float("nan")
    order = np.argsort(known[:, 0])
    weight = np.cumsum(known[order, 1])
    return float(np.sqrt(known[order[np.searchsorted(weight, 0.5 * weight[-1])], 0]))


def noise_of_background(magnitudes: Floats) -> float:
    """Noise of one channel from magnitudes where there is no signal (Rayleigh): median / sqrt(2 ln 2)."""
    flat = np.asarray(magnitudes, float).ravel()
    flat = flat[np.isfinite(flat)]
    return float(np.median(flat) / np.sqrt(2.0 * np.log(2.0))) if flat.size else float("nan")


def _variance_of(block: Floats, signed: bool) -> tuple[float, float]:
    """Variance and its degrees of freedom from one vial's (voxels, frames)."""
    count, frames = block.shape
    if count < 2 or frames < 2 or not np.isfinite(block).all():
        return float("nan"), 0.0
    left, size, right = np.linalg.svd(block, full_matrices=False)
    if size[0] == 0:
        return float("nan"), 0.0
    rank = 1
    while rank < min(3, min(count, frames) - 2):  # a pattern is real if it stands above the edge of pure noise
        rest = np.sum(size[rank + 1 :] ** 2) / ((count - rank - 1) * (frames - rank - 1))
        if size[rank] <= 1.1 * np.sqrt(rest) * (np.sqrt(count) + np.sqrt(frames)):
            break
        rank += 1
    residual = block - (left[:, :rank] * size[:rank]) @ right[:rank]
    free = (count - rank) * np.maximum(1.0 - np.sum(right[:rank] ** 2, axis=0), 0.0)  # per frame
    power = np.sum(residual**2, axis=0)
    if free.sum() < 1.0:
        return float("nan"), 0.0
    variance = power.sum() / free.sum()
    if not signed:
        level = block.mean(axis=0)
        for _ in range(12):
            if variance <= 0:
                break
            before = variance
            variance = power.sum() / np.sum(free * _spread_at_mean(level / np.sqrt(variance)))
            if abs(variance - before) <= 1e-7 * variance:
                break
    return float(variance), float(free.sum())


def _spread_at_mean(over: Floats) -> Floats:
    """Variance of a magnitude over sigma squared, where its mean over sigma is `over`; from the table, to 1e-5."""
    knots, mean, _ = _table()
    inside = np.interp(over, mean, knots**2 + 2.0 - mean**2)
    return np.where(over > mean[-1], 1.0 - 0.5 / np.square(np.maximum(over, 1.0)), inside)


def _moments_over_sigma(over: Floats) -> tuple[Floats, Floats]:
    """Mean and slope for amplitudes in units of sigma, by cubic Hermite interpolation of an exact table."""
    _, mean, slope = _table()
    place = np.minimum(over, _TABLE_END) / _STEP
    index = np.minimum(np.nan_to_num(place).astype(np.intp), len(mean) - 2)
    u = place - index
    m0, m1, s0, s1 = mean[index], mean[index + 1], slope[index] * _STEP, slope[index + 1] * _STEP
    rise = m1 - m0
    c2, c3 = 3.0 * rise - 2.0 * s0 - s1, s0 + s1 - 2.0 * rise
    inside = m0 + u * (s0 + u * (c2 + u * c3))
    inside_slope = (s0 + u * (2.0 * c2 + 3.0 * u * c3)) / _STEP
    far = over > _TABLE_END
    if not far.any():
        return inside, inside_slope
    inverse = 1.0 / np.where(far, over, 1.0)
    square = inverse * inverse
    outside = over + inverse * (0.5 + square * (0.125 + square * 0.1875))
    outside_slope = 1.0 - square * (0.5 + square * (0.375 + square * 0.9375))
    return np.where(far, outside, inside), np.where(far, outside_slope, inside_slope)


@cache
def _table() -> tuple[Floats, Floats, Floats]:
    """Exact mean and slope on a regular grid, from scaled Bessel functions by the (here exponentially exact) mean rule.

    mean = sqrt(pi/2) [(1 + 2x) I0e(x) + 2x I1e(x)], slope = sqrt(pi/2) (A/2) [I0e(x) + I1e(x)], x = A^2 / 4 [2]_.
    """
    over = np.arange(0.0, _TABLE_END + _STEP / 2, _STEP)
    x = over**2 / 4.0
    cosine = np.cos((np.arange(96) + 0.5) * np.pi / 96)
    weight = np.exp(x[:, None] * (cosine - 1.0))
    i0, i1 = weight.mean(axis=1), (weight * cosine).mean(axis=1)
    return over, _ROOT_HALF_PI * ((1.0 + 2.0 * x) * i0 + 2.0 * x * i1), _ROOT_HALF_PI * over / 2.0 * (i0 + i1)
