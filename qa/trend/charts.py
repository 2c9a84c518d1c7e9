"""Control charts as pure functions on arrays: individuals, EWMA, tabular CUSUM.

A missing value (NaN) leaves a chart where it was; it never signals by itself.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from qa.words import Floats

D2_OF_TWO = 1.128  # mean range of two standard normals, as tables print it (exact: 2/sqrt(pi))
D4_OF_TWO = 3.267


@dataclass(frozen=True, slots=True, eq=False)
class IndividualsChart:
    """Centre, sigma and 3-sigma limits in the unit of the values; moving ranges (n - 1,)."""

    centre: float
    sigma: float
    lower: float
    upper: float
    moving_range: Floats
    moving_range_upper: float


@dataclass(frozen=True, slots=True, eq=False)
class EwmaChart:
    """The smoothed level after each value and its limits, all of the shape of the values."""

    level: Floats
    lower: Floats
    upper: Floats
    signal: NDArray[np.bool_]


@dataclass(frozen=True, slots=True, eq=False)
class CusumChart:
    """Both one-sided sums after each value, in the unit of the values; `signal` where one exceeds h."""

    high: Floats
    low: Floats
    signal: NDArray[np.bool_]


def individuals(values: Floats, width: float = 3.0, d2: float = D2_OF_TWO) -> IndividualsChart:
    """Chart single values against limits from their own moving ranges.

    Parameters
    ----------
    values : (n,) float64, in order of time, n >= 2; NaN is left out
    width : half-width of the limits in sigmas
    d2 : the constant that turns a mean moving range of two into sigma

    References
    ----------
    NIST/SEMATECH e-Handbook of Statistical Methods, 6.3.2.2.
    """
    kept = np.asarray(values, dtype=np.float64)
    kept = kept[np.isfinite(kept)]
    moving = np.abs(np.diff(kept))
    centre = float(kept.mean()) if kept.size else float("nan")
    mean_range = float(moving.mean()) if moving.size else float("nan")
    sigma = mean_range / d2
    return IndividualsChart(
        centre, sigma, centre - width * sigma, centre + width * sigma, moving, D4_OF_TWO * mean_range
    )


def ewma_spread(weight: float, count: Floats) -> Floats:
    """Standard deviation of an EWMA of unit-variance values after `count` values (exact, time-varying).

    References
    ----------
    Lucas and Saccucci (1990), Technometrics 32(1), 1-12.
    """
    return np.sqrt(weight / (2.0 - weight) * (1.0 - (1.0 - weight) ** (2.0 * np.asarray(count, dtype=np.float64))))


def ewma_level(values: Floats, weight: float, start: Floats | float = 0.0) -> Floats:
    """Exponentially weighted moving average down the first axis.

    Parameters
    ----------
    values : (n,) or (n, streams) float64; NaN leaves the level where it was
    weight : lambda, above 0 and at most 1
    start : the level before the first value

    Returns
    -------
    Array of the shape of `values`.
    """
    given = np.asarray(values, dtype=np.float64)
    level = np.empty_like(given)
    last = np.broadcast_to(np.asarray(start, dtype=np.float64), given.shape[1:]).astype(np.float64)
    stride = 1 if weight == 1.0 else max(1, int(600.0 / -np.log(1.0 - weight)))  # keeps the powers below within range
    for begin in range(0, len(given), stride):
        values = given[begin : begin + stride]
        there = np.isfinite(values)
        kept = (1.0 - weight) ** np.cumsum(there, axis=0)  # what is left of the level before, after each value
        if weight == 1.0:
            level[begin : begin + stride] = last = np.where(there[0], values[0], last)
            continue
        taken = np.cumsum(np.where(there, weight * values, 0.0) / kept, axis=0)
        level[begin : begin + stride] = kept * (last + taken)
        last = level[min(begin + stride, len(given)) - 1]
    return level


def ewma(values: Floats, *, weight: float, centre: float, sigma: float, width: float) -> EwmaChart:
    """EWMA chart with exact time-varying limits ``centre +/- width * sigma * spread(t)``.

    Parameters
    ----------
    values : (n,) float64 in order of time
    weight : lambda, above 0 and at most 1
    centre, sigma : in-control mean and standard deviation of one value
    width : half-width in standard deviations of the EWMA (L)

    References
    ----------
    NIST/SEMATECH e-Handbook of Statistical Methods, 6.3.2.4; Roberts (1959), Technometrics 1(3), 239-250.
    """
    given = np.asarray(values, dtype=np.float64)
    level = ewma_level(given, weight, centre)
    count = np.maximum(np.cumsum(np.isfinite(given)), 1).astype(np.float64)
    half = width * sigma * ewma_spread(weight, count)
    return EwmaChart(level, centre - half, centre + half, np.abs(level - centre) > half)


def last_zero(values: Floats, *, slack: float) -> int:
    """Index of the first value after the CUSUM that now stands higher was last zero: where a shift began.

    Parameters
    ----------
    values : (n,) float64 in order of time, target 0, ending at the signal
    slack : k, in the unit of the values

    References
    ----------
    Page (1954), Biometrika 41, 100-115.
    """
    chart = cusum(values, target=0.0, slack=slack, decision=float("inf"))
    higher = chart.high if chart.high[-1] >= chart.low[-1] else chart.low
    zeros = np.flatnonzero(higher <= 0.0)
    here = np.flatnonzero(np.isfinite(values))
    after = here[here > zeros[-1]] if zeros.size else here
    return int(after[0]) if after.size else len(values) - 1


def cusum(values: Floats, *, target: float, slack: float, decision: float, head_start: float = 0.0) -> CusumChart:
    """Two-sided tabular CUSUM.

    Parameters
    ----------
    values : (n,) float64 in order of time
    target : in-control mean
    slack : k, in the unit of the values
    decision : h, in the unit of the values
    head_start : both sums start here (fast initial response; half of h is usual)

    References
    ----------
    NIST/SEMATECH e-Handbook 6.3.2.3; Lucas and Crosier (1982), Technometrics 24(3), 199-205 (head start).
    """
    given = np.asarray(values, dtype=np.float64)
    high, low = np.empty_like(given), np.empty_like(given)
    up = down = head_start
    for index, value in enumerate(given):
        if np.isfinite(value):
            up = max(0.0, up + value - target - slack)
            down = max(0.0, down + target - slack - value)
        high[index], low[index] = up, down
    return CusumChart(high, low, (high > decision) | (low > decision))
