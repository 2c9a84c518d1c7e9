"""Offset plus one decay, y = a + b exp(-t R), for very many rows; and the sign that a magnitude has lost.

The same variable projection as `qa.fit.varpro`, written out for this one basis: every quantity the search needs is a
moment sum_i t_i^k exp(-t_i R) {1, exp(-t_i R), y_i}, so a step costs three products with small matrices.
A test holds both to the same answers.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qa.fit.varpro import CHUNK_ROWS
from qa.words import Floats, Ints

GRID = 48
STEPS = 4
HOPE = 3.0  # a case is given up on the grid if even so many times the grid's coarseness would not save it
SETTLED = 1e-6  # a last step of this size leaves an error of its square


@dataclass(frozen=True, slots=True, eq=False)
class Decays:
    """One offset-plus-decay curve per row: a + b exp(-t rate)."""

    rate: Floats  # (n,), per unit of time
    offset: Floats  # (n,), a
    amplitude: Floats  # (n,), b
    rss: Floats  # (n,)


def rate_range(times: Floats) -> tuple[float, float]:
    """Rates searched: from a T1 of 30 times the longest time to one of a third of the shortest positive time."""
    positive = times[times > 0]
    return 1.0 / (30.0 * float(positive.max())), 3.0 / float(positive.min())


def fit_decays(values: Floats, times: Floats) -> Decays:
    """Least squares of a + b exp(-t R) for signed `values` (n, m): grid, then safeguarded Newton to convergence."""
    grid = _grid(times)
    mean = values.mean(axis=1)
    y = values - mean[:, None]
    best = np.argmax(np.square(y @ grid.shapes.T), axis=1)
    return _refined(y, mean, grid, best)


@dataclass(frozen=True, slots=True, eq=False)
class _Grid:
    """Rates searched first, in units of the longest time; `shapes` (g, m) are centred and of unit length."""

    unit: float
    times: Floats  # (m,)
    rates: Floats  # (g,)
    shapes: Floats  # (g, m)

    def coarseness(self) -> float:
        """Share of a decay's power that the nearest grid rate may miss."""
        neighbours = np.einsum("gm,gm->g", self.shapes[1:], self.shapes[:-1])
        return float(1.0 - np.min(neighbours) ** 2) / 4.0  # half way between, the angle is half as large


def _grid(times: Floats) -> _Grid:
    unit = float(np.max(times))
    t = np.asarray(times, float) / unit
    low, high = rate_range(t)
    rates = np.geomspace(low, high, GRID)
    shapes = np.exp(-t[None, :] * rates[:, None])
    shapes -= shapes.mean(axis=1, keepdims=True)
    shapes /= np.linalg.norm(shapes, axis=1, keepdims=True)
    return _Grid(unit, t, rates, shapes)


def _refined(y: Floats, mean: Floats, grid: _Grid, best: Ints) -> Decays:
    """From the best grid rates to convergence; `y` (n, m) is centred, and is used up."""
    t, rates = grid.times, grid.rates
    left, right = rates[np.maximum(best - 1, 0)], rates[np.minimum(best + 1, GRID - 1)]
    rate = _newton(y, t, rates[best], left, right)
    e = np.exp(-t * rate[:, None])
    e_mean = e.mean(axis=1)
    e -= e_mean[:, None]
    power = np.einsum("rm,rm->r", e, e)
    amplitude = np.einsum("rm,rm->r", e, y) / np.where(power > 0, power, 1.0)
    e *= amplitude[:, None]
    y -= e
    return Decays(rate / grid.unit, mean - amplitude * e_mean, amplitude, np.einsum("rm,rm->r", y, y))


def _newton(y: Floats, t: Floats, rate: Floats, left: Floats, right: Floats) -> Floats:
    """Maximise the explained power P^2 / Q over log R, inside [left, right]."""
    m = len(t)
    powers = np.stack([np.ones(m), t, t * t], axis=1)
    for step in range(4 * STEPS):
        e = np.exp(-t * rate[:, None])
        m0, m1, m2 = (e @ powers).T
        n0, n1, n2 = ((e * e) @ powers).T
        p0, p1, p2 = ((e * y) @ powers).T
        q0, q1, q2 = n0 - m0 * m0 / m, n1 - m0 * m1 / m, 4.0 * n2 - 2.0 * (m1 * m1 + m0 * m2) / m
        p1, q1 = -p1, -2.0 * q1
        ratio = p0 / q0
        slope = ratio * (2.0 * p1 - ratio * q1)
        curve = 2.0 * (p1 - ratio * q1) ** 2 / q0 + ratio * (2.0 * p2 - ratio * q2)
        slope_log = slope * rate  # derivatives with respect to log R
        curve_log = curve * rate * rate + slope_log
        left, right = np.where(slope > 0, rate, left), np.where(slope > 0, right, rate)
        change = np.where(curve_log < 0, -slope_log / np.where(curve_log < 0, curve_log, -1.0), np.inf)
        new = rate * np.exp(np.clip(change, -3.0, 3.0))
        inside = (new >= left) & (new <= right)  # at the optimum the step is zero, and one end lies there
        new = np.where(inside, new, np.sqrt(left * right))
        moved = ~inside | (np.abs(new - rate) > SETTLED * rate)
        rate = new
        if step >= 2 and not moved.any():
            break
        if step == STEPS - 1:  # the few that are still moving go on alone
            some = np.flatnonzero(moved)
            rate[some] = (
                _newton(y[some], t, rate[some], left[some], right[some]) if 0 < len(some) < len(y) else rate[some]
            )
            if len(some) < len(y):
                break
    return np.asarray(rate)


def polarities(magnitudes: Floats, floor: float) -> tuple[Ints, Ints]:
    """The cases worth trying: row numbers (c,) and how many first samples are negative (c,). See the fit below."""
    n, m = magnitudes.shape
    least = np.argmin(magnitudes, axis=1)
    rows = np.arange(n)
    before = np.where(least > 0, magnitudes[rows, np.maximum(least - 1, 0)], np.inf)
    after = np.where(least < m - 1, magnitudes[rows, np.minimum(least + 1, m - 1)], np.inf)
    two_back, two_on = np.flatnonzero(before <= floor), np.flatnonzero(after <= floor)
    owner = np.concatenate([rows, rows, two_back, two_on])
    return owner, np.concatenate([least, least + 1, least[two_back] - 1, least[two_on] + 2])


def with_signs(magnitudes: Floats, flips: Ints) -> Floats:
    """Copy (c, m) whose first `flips` (c,) samples are negative."""
    return np.where(np.arange(magnitudes.shape[1]) < flips[:, None], -magnitudes, magnitudes)


def lowest(owner: Ints, score: Floats, n: int) -> Ints:
    """For each of n rows the index of its case with the lowest score; every row has a case."""
    order = np.lexsort((score, owner))
    return np.asarray(order[np.searchsorted(owner[order], np.arange(n))])


def fit_magnitude_decays(magnitudes: Floats, times: Floats, floor: float = 0.0) -> tuple[Decays, Ints]:
    """Fit |a + b exp(-t R)|: the polarity comes from the fit.

    The curve is monotone, so the sign changes at most once, and it does so beside the smallest magnitude: the samples
    before it are negative, or the samples up to and including it. Both are refined to convergence and the lower
    residual wins. Where neighbours of the smallest lie within `floor`, the change may be one sample further away, and
    those cases are tried too.

    Parameters
    ----------
    magnitudes : (n, m), times in the second axis
    times : (m,)
    floor : signal units; magnitudes below it say nothing about where the null is (a few times the noise)

    Returns
    -------
    decays : of the best polarity, with the final value a made positive
    flips : (n,), how many first samples were negative before that
    """
    parts = [
        _best_of(magnitudes[i : i + CHUNK_ROWS], times, floor) for i in range(0, max(len(magnitudes), 1), CHUNK_ROWS)
    ]
    rate, offset, amplitude, rss, flips = (np.concatenate(columns) for columns in zip(*parts, strict=True))
    return Decays(rate, offset, amplitude, rss), flips


def _best_of(magnitudes: Floats, times: Floats, floor: float) -> tuple[Floats, Floats, Floats, Floats, Ints]:
    owner, flips = polarities(magnitudes, floor)
    grid = _grid(times)
    signed = with_signs(magnitudes[owner], flips)
    mean = signed.mean(axis=1)
    signed -= mean[:, None]
    explained = np.square(signed @ grid.shapes.T)
    best = np.argmax(explained, axis=1)
    power = np.einsum("rm,rm->r", signed, signed)
    most = power - explained[np.arange(len(best)), best]  # refinement can only lower it, and not by much:
    least = most - HOPE * grid.coarseness() * power
    kept = least <= most[lowest(owner, most, len(magnitudes))][owner]
    owner, flips = owner[kept], flips[kept]
    tried = _refined(signed[kept], mean[kept], grid, best[kept])
    best = lowest(owner, tried.rss, len(magnitudes))
    sign = np.where(tried.offset[best] < 0, -1.0, 1.0)
    return tried.rate[best], sign * tried.offset[best], sign * tried.amplitude[best], tried.rss[best], flips[best]
