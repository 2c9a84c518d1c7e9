"""The promise about false alarms, shared out over all charts of a scanner.

A promise is a number of false `watch` per scanner-year over everything that is judged, not per chart. Half of it
goes to the smoothed charts (half of that to the common levels, half to the vials), a quarter to single readings
beyond a limit, a quarter to whole runs that lie apart from the run before.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from qa.trend.arl import chance_limit
from qa.trend.charts import ewma_level, ewma_spread
from qa.trend.levels import Chartable
from qa.trend.streams import Bools
from qa.trend.widths import width_of
from qa.words import Floats

WEIGHT = 0.2  # lambda of all smoothed charts: near the best for shifts of one sigma
CUT = 3.0  # a value farther out counts for so much where the run before lies on the same side, else for nothing
CONFIRMS = 2.5  # sigmas by which the run before must lie on the same side
_LOSS = 1.0 / 0.955


@dataclass(frozen=True, slots=True)
class Promise:
    """False alarms per scanner-year, over all vials, quantities and charts of a scanner together."""

    watch_per_year: float = 1.0
    act_per_year: float = 0.25


@dataclass(frozen=True, slots=True)
class Shares:
    """What the promise leaves for one chart or reading, given how many there are on the scanner."""

    level_arl: float  # runs per false signal of one common level
    vial_arl: float  # of one vial's chart
    reading: float  # probability that one unchanged reading passes the chance limit
    run: float  # probability that one unchanged level does, in one run


def shares(promise: Promise, runs_per_year: float, levels: int, vials: int) -> Shares:
    """Shares the promise out over `levels` common levels and `vials` streams."""
    per_run = promise.watch_per_year / max(runs_per_year, 1.0)
    return Shares(
        level_arl=max(levels, 1) / (0.25 * per_run),
        vial_arl=max(vials, 1) / (0.25 * per_run),
        reading=0.25 * per_run / max(vials, 1),
        run=0.25 * per_run / max(levels, 1),
    )


@dataclass(frozen=True, slots=True, eq=False)
class Smoothed:
    """EWMA of a series in percent, its limit in percent (symmetric about 0), and where it signals.

    `percent` smooths the values as they are, to be shown; signals come from values cut at three sigmas.
    """

    percent: Floats
    limit: Floats
    signal: Bools
    z: Floats  # the values charted, in sigmas; NaN where one did not count


_GRID = (4.0, 6.0, 8.0, 12.0, 20.0, 40.0, 120.0, float("inf"))


def smooth(series: Chartable, arl: float) -> Smoothed:
    """EWMA chart of a level (r,) or of residuals (r, S) whose baseline and scatter were estimated.

    A value beyond three sigmas is left out unless the run before confirms it, and a signal needs two of the last
    three runs on its own side: one run alone never makes a drift.
    """
    z, counting = _tamed(series.percent / series.sd)
    charted = np.where(counting, z, np.nan)
    level = ewma_level(charted, WEIGHT)
    count = np.cumsum(counting, axis=0).astype(np.float64)
    runs = np.maximum(series.runs, 1.0) / _LOSS
    kept = 1.0 - (1.0 - WEIGHT) ** count
    spread = np.sqrt(ewma_spread(WEIGHT, count) ** 2 + kept**2 / runs)
    widths = np.empty_like(level)
    for number in np.unique(runs):
        here = np.broadcast_to(runs == number, level.shape)
        widths[here] = width_of(arl, float(number), np.broadcast_to(series.freedom, level.shape)[here])
    limit = widths * spread
    side = np.sign(level)
    with np.errstate(invalid="ignore"):
        agreeing = (counting & (z * side > 0.5)).astype(np.int8)
    recent = agreeing.copy()
    recent[1:] += agreeing[:-1]
    recent[2:] += agreeing[:-2]
    signal = np.isfinite(z) & (np.abs(level) > limit) & (recent >= 2)
    started = count > 0
    plain = ewma_level(np.where(counting, series.percent, np.nan), WEIGHT)
    shown = np.where(np.abs(plain) > np.abs(level) * series.usual_sd, plain, level * series.usual_sd)
    return Smoothed(
        np.where(started, shown, np.nan), np.where(started, limit * series.usual_sd, np.nan), signal, charted
    )


def _tamed(z: Floats) -> tuple[Floats, Bools]:
    """Values cut at three sigmas, and which of them count: finite ones that are not wild all alone."""
    here = np.isfinite(z)
    newest = np.maximum.accumulate(np.where(here, np.arange(len(z)).reshape(-1, *[1] * (z.ndim - 1)), -1), axis=0)
    before = np.full_like(z, np.nan)
    before[1:] = np.where(newest[:-1] >= 0, np.take_along_axis(z, np.maximum(newest[:-1], 0), axis=0), np.nan)
    with np.errstate(invalid="ignore"):
        alone = (np.abs(z) > CUT) & ~(before * np.sign(z) > CONFIRMS)
    return np.clip(z, -CUT, CUT), here & ~alone


def beyond_chance(probability: float, freedom: Floats) -> Floats:
    """The chance limit in sigmas for many degrees of freedom."""
    inverse = [0.0 if np.isinf(f) else 1.0 / f for f in _GRID]
    limit: Floats = np.interp(1.0 / np.maximum(freedom, _GRID[0]), inverse[::-1], _chance_limits(probability)[::-1])
    return limit


@lru_cache(maxsize=64)
def _chance_limits(probability: float) -> tuple[float, ...]:
    return tuple(chance_limit(probability, freedom) for freedom in _GRID)
