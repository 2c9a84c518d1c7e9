"""Repeatability and reproducibility of one level from laboratories (here: scanners) with any numbers of results.

References
----------
ISO 5725-2, Accuracy (trueness and precision) of measurement methods and results, Part 2: basic method for the
determination of repeatability and reproducibility; Mandel (1985), ASTM Standardization News 13, 17-20 (h and k).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import betaincinv, chdtri, fdtri, stdtrit

from qa.compare.intervals import LEVEL, Interval, spread_interval, sum_interval
from qa.words import Floats

SMALLEST_CHANGE = 1.959963984540054 * float(np.sqrt(2.0))  # 2.77: two results differ by less in 95 % of pairs


@dataclass(frozen=True, slots=True, eq=False)
class Precision:
    """Variances of one level, in the unit of the results squared; NaN where a part cannot be estimated."""

    mean: float  # over all results
    groups: int
    results: int
    nbar: float  # effective number of results per scanner
    variance_repeatability: float  # s_r squared
    variance_between: float  # s_L squared, never below 0
    truncated: bool  # whether the between estimate was below 0

    @property
    def s_r(self) -> float:
        """Repeatability standard deviation."""
        return float(np.sqrt(self.variance_repeatability))

    @property
    def s_L(self) -> float:  # noqa: N802 - the standard's own symbol
        """Between-scanner standard deviation."""
        return float(np.sqrt(self.variance_between))

    @property
    def s_R(self) -> float:  # noqa: N802 - the standard's own symbol
        """Reproducibility standard deviation."""
        return float(np.sqrt(self.variance_repeatability + self.variance_between))

    @property
    def freedom_within(self) -> int:
        """Degrees of freedom behind s_r."""
        return self.results - self.groups

    def s_r_interval(self, level: float = LEVEL) -> Interval | None:
        """Interval of s_r (chi square)."""
        return spread_interval(self.s_r, self.freedom_within, level)

    def s_R_interval(self, level: float = LEVEL) -> Interval | None:  # noqa: N802
        """Interval of s_R (modified large sample, on the two mean squares that make it up)."""
        if self.groups < 2 or not np.isfinite(self.variance_between):
            return None
        between = self.variance_between + self.variance_repeatability / self.nbar
        parts = [(between, self.groups - 1.0)]
        if self.nbar > 1.0:
            parts.append(((1.0 - 1.0 / self.nbar) * self.variance_repeatability, float(self.freedom_within)))
        return sum_interval(parts, level)

    def s_L_interval(self, level: float = LEVEL) -> Interval | None:  # noqa: N802
        """Interval of s_L from exact F and chi square parts (Williams 1962, Biometrika 49, 278-281)."""
        p, within = self.groups, self.freedom_within
        if p < 2 or within < 1 or not self.variance_repeatability > 0:
            return None
        ratio = (self.nbar * self.variance_between + self.variance_repeatability) / self.variance_repeatability
        tail = (1.0 - level) / 2.0
        square = (p - 1.0) * self.variance_repeatability / self.nbar
        low = square * (ratio - fdtri(p - 1, within, 1.0 - tail)) / chdtri(p - 1, tail)
        high = square * (ratio - fdtri(p - 1, within, tail)) / chdtri(p - 1, 1.0 - tail)
        return float(np.sqrt(max(low, 0.0))), float(np.sqrt(max(high, 0.0)))


def precision(groups: Sequence[Floats]) -> Precision:
    """s_r, s_L and s_R of one level.

    Parameters
    ----------
    groups : one array of results per scanner, any lengths; empty groups are left out

    Returns
    -------
    NaN variances where a part cannot be estimated (a single scanner, or no repeated result).
    """
    kept = [np.asarray(g, dtype=np.float64) for g in groups if len(g)]
    p = len(kept)
    counts = np.array([g.size for g in kept], dtype=np.float64)
    total = float(counts.sum())
    if not p:
        return Precision(float("nan"), 0, 0, float("nan"), float("nan"), float("nan"), False)
    means = np.array([g.mean() for g in kept])
    mean = float(np.sum(counts * means) / total)
    within = float(sum(((g - g.mean()) ** 2).sum() for g in kept))
    repeatability = within / (total - p) if total > p else float("nan")
    nbar = float((total - np.sum(counts**2) / total) / (p - 1)) if p > 1 else float("nan")
    between = float("nan")
    if p > 1:
        between = (float(np.sum(counts * (means - mean) ** 2)) / (p - 1) - repeatability) / nbar
    truncated = bool(between < 0)
    return Precision(
        mean, p, int(total), nbar, repeatability, max(between, 0.0) if np.isfinite(between) else between, truncated
    )


@dataclass(frozen=True, slots=True, eq=False)
class Consistency:
    """Mandel's h (between) and k (within) for each scanner of one level, with their critical values; (p,) each.

    NaN where a scanner has no result (h) or only one (k), or where the scanners are too few.
    """

    h: Floats
    k: Floats
    h_critical_5: float
    h_critical_1: float
    k_critical_5: Floats
    k_critical_1: Floats


def mandel(groups: Sequence[Floats]) -> Consistency:
    """Mandel's consistency statistics of one level. `groups`: one array of results per scanner, may be empty."""
    means = np.array([np.mean(g) if len(g) else np.nan for g in groups])
    freedom = np.array([max(len(g) - 1.0, 0.0) for g in groups])
    spreads = np.array([np.std(g, ddof=1) if len(g) > 1 else np.nan for g in groups])
    nothing = np.full(len(groups), np.nan)
    p = int(np.isfinite(means).sum())
    spread_of_means = float(np.std(means[np.isfinite(means)], ddof=1)) if p > 1 else 0.0
    h = (means - np.nanmean(means)) / spread_of_means if spread_of_means > 0 else nothing
    total = float(freedom.sum())
    pooled = float(np.sqrt(np.sum(freedom * np.nan_to_num(spreads) ** 2) / total)) if total > 0 else 0.0
    k = spreads / pooled if pooled > 0 and (freedom > 0).sum() > 1 else nothing
    return Consistency(
        h, k, h_critical(p, 0.05), h_critical(p, 0.01), k_critical(freedom, 0.05), k_critical(freedom, 0.01)
    )


def h_critical(scanners: int, alpha: float) -> float:
    """Critical value of h, two-sided at `alpha`; NaN for fewer than three scanners.

    With t of p - 2 degrees of freedom: (p - 1) t / sqrt(p (t^2 + p - 2)).
    """
    if scanners < 3:
        return float("nan")
    t = float(stdtrit(scanners - 2, 1.0 - alpha / 2.0))
    return float((scanners - 1) * t / np.sqrt(scanners * (t * t + scanners - 2)))


def k_critical(freedom: Floats, alpha: float) -> Floats:
    """Critical values of k, one-sided at `alpha`, for scanners with these degrees of freedom; NaN where there are none.

    A scanner's share of the pooled sum of squares is a beta variable, also with unequal numbers of results; with n
    results each this is the standard's sqrt(p F / (F + p - 1)).
    """
    own = np.asarray(freedom, dtype=np.float64)
    rest = own.sum() - own
    usable = (own > 0) & (rest > 0)
    safe_own, safe_rest = np.where(usable, own, 1.0), np.where(usable, rest, 1.0)
    share = betaincinv(safe_own / 2.0, safe_rest / 2.0, 1.0 - alpha)
    return np.where(usable, np.sqrt(own.sum() * share / safe_own), np.nan)
