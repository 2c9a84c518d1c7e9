"""Voxel maps from curves of the vials: each voxel is close to its vial, so its curve is one of a small table.

The noise floor is part of the model, as it is for the vials.
"""

from __future__ import annotations

import numpy as np

from qa.fit import varpro
from qa.fit.descend import Model, descend
from qa.fit.estimate import Signals
from qa.fit.noise import expected_magnitude, magnitude_sd
from qa.words import Floats, Ints

REACH = 3.0  # a voxel's T2 is looked for within this factor of its vial's
GRID = np.linspace(-np.log(REACH), np.log(REACH), 15)  # ln T2 over the vial's


def t2_by_curves(values: Floats, signals: Signals, owner: Ints, centre_ms: Floats, curves: Floats) -> Floats:
    """T2 (v,) of voxels, ms, by descent on curves that are interpolated in ln T2 between the points of GRID.

    Parameters
    ----------
    values : (v, m), finite
    owner : (v,), the vial of each voxel
    centre_ms : (n,), T2 of each vial, NaN where it has none; its voxels get NaN
    curves : (n, len(GRID), m), amplitudes for M0 = 1 at T2 = centre exp(GRID)
    """
    noise = float(np.nan_to_num(signals.noise))
    use = np.flatnonzero(np.isfinite(centre_ms[owner]))
    out = np.full(len(values), np.nan)
    if not use.size:
        return out
    slopes = np.gradient(curves, GRID, axis=1)
    middle = len(GRID) // 2
    for first in range(0, len(use), varpro.CHUNK_ROWS):
        rows = use[first : first + varpro.CHUNK_ROWS]
        own = owner[rows]
        at_vial = curves[own, middle]
        m0 = np.einsum("rm,rm->r", values[rows], at_vial) / np.einsum("rm,rm->r", at_vial, at_vial)
        start = np.stack([np.ones(len(rows)), np.maximum(m0, 1e-12)], axis=1)
        amplitude = m0[:, None] * at_vial
        sd = noise if signals.signed or noise == 0 else magnitude_sd(amplitude, noise)
        weights = np.ones_like(amplitude) / np.square(sd if noise > 0 else 1.0)
        model = _interpolated(curves, slopes, own, 0.0 if signals.signed else noise)
        found = descend(values[rows], model, start, weights, positive=2, tolerance=1e-4, most_steps=20)
        factor = found.parameters[:, 0]
        good = found.converged & (np.abs(np.log(factor)) < 0.999 * GRID[-1])
        out[rows] = np.where(good & np.isfinite(signals.values[rows]).all(axis=1), factor * centre_ms[own], np.nan)
    return out


def _interpolated(curves: Floats, slopes: Floats, own: Ints, noise: float) -> Model:
    """Expected magnitude of M0 times the vial's curve at T2 = factor x the vial's; parameters factor, M0."""
    step = GRID[1] - GRID[0]

    def model(parameters: Floats, rows: Ints) -> tuple[Floats, Floats]:
        factor, m0 = parameters[:, 0], parameters[:, 1:2]
        place = np.clip((np.log(factor) - GRID[0]) / step, 0.0, len(GRID) - 1.000001)
        index = place.astype(np.intp)
        u = (place - index)[:, None]
        vial = own[rows]
        c0, c1 = curves[vial, index], curves[vial, index + 1]
        s0, s1 = slopes[vial, index] * step, slopes[vial, index + 1] * step
        a, b = 3.0 * (c1 - c0) - 2.0 * s0 - s1, s0 + s1 - 2.0 * (c1 - c0)
        shape = c0 + u * (s0 + u * (a + u * b))
        by_log = (s0 + u * (2.0 * a + 3.0 * u * b)) / step
        mean, slope = expected_magnitude(m0 * shape, noise) if noise else (m0 * shape, np.ones_like(shape))
        return mean, np.stack([slope * m0 * by_log / factor[:, None], slope * shape], axis=2)

    return model
