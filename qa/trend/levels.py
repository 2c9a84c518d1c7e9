"""What a scan's vials share and what each has of its own: the common level, the residuals, and their scatter.

One scan of one phantom on one scanner gives one `Lane`. A run's noise common to all vials (temperature, set-up)
goes into the level; each vial's residual is then judged apart from it, so the two kinds of chart are independent.
All scatter is estimated causally: what is used at a run comes from earlier runs only.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qa.trend.baseline import LOSS, Segment, nanmedian, robust_mean
from qa.trend.streams import Bools, Ints
from qa.words import Floats

FEWEST_VIALS = 4  # with fewer, one vial could pull the level: then each vial is charted as it is
_PRIOR_FREEDOM = 8.0  # weight of the pooled scatter against a vial's own, in degrees of freedom
_LEAST_OF_STATED = 0.05  # scatter is never taken for less than this part of the stated uncertainty
_BIWEIGHT = 5.0  # in sigmas; 95 % efficient at 4.7


@dataclass(frozen=True, slots=True, eq=False)
class Chartable:
    """A series in percent with what is needed to chart it, per run r (and stream S); NaN while it is being learnt."""

    percent: Floats  # deviation from the baseline
    sd: Floats  # of one value of an unchanged series, known before the run
    usual_sd: Floats  # the same if the run were no more uncertain than those of the baseline
    freedom: Floats  # degrees of freedom behind sd
    runs: Floats  # runs behind the baseline


@dataclass(frozen=True, slots=True, eq=False)
class Lane:
    """One scan of one segment."""

    scan: str
    quantity: str
    columns: Ints  # of the block
    level: Chartable | None  # (r,); None with a single vial
    vials: Chartable  # (r, S): residuals from the level, or plain deviations where there are few vials
    apart: bool  # whether `vials` are residuals from the level
    sd_total: Floats  # (r, S) of one deviation from the baseline, the baseline's own uncertainty included


def common_level(percent: Floats, sd: Floats) -> Floats:
    """Robust weighted mean over vials, (r, S) and (S,) -> (r,); NaN where fewer than half the vials are there.

    Tukey's biweight started at the median: one ageing vial cannot pull it.

    References
    ----------
    Beaton and Tukey (1974), Technometrics 16(2), 147-185.
    """
    there = np.isfinite(percent) & np.isfinite(sd)
    enough = there.sum(axis=1) >= max(1, (np.isfinite(sd).sum() + 1) // 2)
    if not enough.any():
        return np.full(len(percent), np.nan)
    y = np.where(there, percent, 0.0)
    weight = np.where(there, 1.0 / np.where(np.isfinite(sd), sd, 1.0) ** 2, 0.0)
    total = weight.sum(axis=1)
    total[total == 0] = np.nan
    if percent.shape[1] < FEWEST_VIALS:
        level = (weight * y).sum(axis=1) / total
    else:
        level = nanmedian(np.where(there, percent, np.nan).T)
        for _ in range(4):
            distance = (y - level[:, None]) / (_BIWEIGHT * sd)
            bounded = np.where(there, weight * np.clip(1.0 - distance**2, 0.0, None) ** 2, 0.0)
            total = bounded.sum(axis=1)
            moved = (bounded * y).sum(axis=1) / np.where(total > 0, total, 1.0)
            level = np.where(total > 0, moved, level)
    return np.where(enough, level, np.nan)


def _window_variance(values: Floats, mask: Bools) -> tuple[Floats, Floats]:
    """Mean square about the mean within the mask, one wild value left out, and its degrees of freedom; (S,) each."""
    x = np.where(mask, values, np.nan)
    middle = nanmedian(x)
    rough = 1.4826 * nanmedian(np.abs(x - middle))
    x = np.where(np.abs(x - middle) > 5.0 * np.maximum(rough, 1e-9), np.nan, x)
    count = np.isfinite(x).sum(axis=0)
    mean = np.nansum(x, axis=0) / np.maximum(count, 1)
    square = np.nansum((x - mean) ** 2, axis=0)
    freedom = np.maximum(count - 1.0, 0.0)
    return np.where(freedom > 0, square / np.maximum(freedom, 1.0), np.nan), freedom


def _later_variance(values: Floats, judged: Bools, clip: Floats) -> tuple[Floats, Floats]:
    """Half the squared successive differences known before each run: sum and degrees of freedom, (r, S) each.

    Differences see scatter but hardly a drift or step (von Neumann 1941, Ann. Math. Stat. 12, 367-395); each is
    cut at four sigmas (of the variances `clip`, (S,) or (r, S)), and counts two thirds of a degree of freedom.
    """
    sums, counts = np.zeros_like(values), np.zeros_like(values)
    if len(values) < 2:
        return sums, counts
    fresh = np.isfinite(values) & judged
    newest = np.maximum.accumulate(np.where(fresh, np.arange(len(values))[:, None], -1), axis=0)
    before, later = newest[:-1], values[1:]
    pair = fresh[1:] & (before >= 0)
    earlier = np.take_along_axis(values, np.maximum(before, 0), axis=0)
    half = np.minimum(0.5 * np.where(pair, later - earlier, 0.0) ** 2, 16.0 * np.broadcast_to(clip, values.shape)[1:])
    sums[2:] = np.cumsum(half * (2.0 / 3.0), axis=0)[:-1]
    counts[2:] = np.cumsum(pair * (2.0 / 3.0), axis=0)[:-1]
    return sums, counts


def lanes(segment: Segment, scans: tuple[tuple[str, str, Ints], ...]) -> tuple[Lane, ...]:
    """Splits a segment into level and residuals for each scan."""
    return tuple(_lane(segment, scan, quantity, columns) for scan, quantity, columns in scans)


def _lane(segment: Segment, scan: str, quantity: str, columns: Ints) -> Lane:
    percent = segment.percent[:, columns]
    used, known = segment.used[:, columns], segment.known[:, columns]
    u, typical = segment.u[:, columns], segment.u_typical[columns]
    seen = np.where(used | known, percent, np.nan)
    apart = columns.size >= FEWEST_VIALS

    wide = nanmedian((u - typical).T) if len(u) else np.zeros(0)
    common_excess = np.where(wide > 0.05 * nanmedian(typical), nanmedian((u**2 - typical**2).T), 0.0)
    common_excess = np.clip(np.nan_to_num(common_excess), 0.0, None)

    level = common_level(seen, typical)
    residual = percent - level[:, None] if apart else percent
    centre = np.nan_to_num(robust_mean(residual, used & np.isfinite(residual)))
    residual = residual - centre
    own, own_freedom = _window_variance(residual, used)
    ratio = nanmedian((own / typical**2)[:, None])
    pooled = (float(ratio[0]) if np.isfinite(ratio[0]) else 1.0) * typical**2
    own = np.where(np.isfinite(own), own, pooled)
    base = (_PRIOR_FREEDOM * pooled + own_freedom * own) / (_PRIOR_FREEDOM + own_freedom)
    base = np.maximum(base, (_LEAST_OF_STATED * typical) ** 2)
    later, later_freedom = _later_variance(residual, known, base)
    freedom = _PRIOR_FREEDOM + own_freedom + later_freedom
    variance = ((_PRIOR_FREEDOM + own_freedom) * base + later) / freedom
    stretch = np.clip(np.nan_to_num(u / typical, nan=1.0), 1.0, None) ** 2
    sd = np.sqrt(variance * stretch)
    vials = Chartable(np.where(known, residual, np.nan), sd, np.sqrt(variance), freedom, segment.count[columns])

    if columns.size < 2:
        return Lane(scan, quantity, columns, None, vials, apart, sd * np.sqrt(1.0 + LOSS / np.maximum(vials.runs, 1.0)))
    chart = _level_chart(level, known, variance, common_excess)
    total = variance * stretch + (chart.sd[:, None] ** 2 if apart else 0.0)
    total = np.where(np.isfinite(total), total, variance * stretch)
    return Lane(
        scan, quantity, columns, chart, vials, apart, np.sqrt(total * (1.0 + LOSS / np.maximum(vials.runs, 1.0)))
    )


def _level_chart(level: Floats, known: Bools, variance: Floats, excess: Floats) -> Chartable:
    half = known.sum(axis=1) * 2 >= known.shape[1]
    start = int(half.argmax()) if half.any() else len(level)
    window = (np.arange(len(level)) < start) & np.isfinite(level)
    count = float(window.sum())
    level = level - (float(robust_mean(level[:, None], window[:, None])[0]) if count else 0.0)
    base, freedom = _window_variance(level[:, None], window[:, None])
    precision = np.nansum(1.0 / variance, axis=1)
    floor = 1.0 / np.where(precision > 0, precision, np.nan)  # noise of the vials alone
    known_base = np.where(np.isfinite(base), base, floor)
    judged = ~window & (np.arange(len(level)) >= start)
    later, later_freedom = _later_variance(level[:, None], judged[:, None], np.maximum(known_base, floor)[:, None])
    total = (freedom * known_base + later[:, 0]) / np.maximum(freedom + later_freedom[:, 0], 1.0)
    usual = np.maximum(total, floor)
    return Chartable(
        np.where(judged, level, np.nan),
        np.sqrt(usual + excess),
        np.sqrt(usual),
        np.maximum(freedom + later_freedom[:, 0], 1.0),
        np.array(count),
    )
