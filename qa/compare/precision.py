"""Repeatability and reproducibility from laboratories (here: scanners) with unequal numbers of results.

References
----------
ISO 5725-2, Accuracy (trueness and precision) of measurement methods and results, Part 2: basic method for the
determination of repeatability and reproducibility; Mandel (1985), ASTM Standardization News 13, 17-20 (h and k).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.special import btdtri, chdtri, fdtri, stdtrit

from qa.words import Floats

SMALLEST_CHANGE = 1.959963984540054 * np.sqrt(2.0)  # 2.77: two results differ by less in 95 % of pairs


@dataclass(frozen=True, slots=True, eq=False)
class Precision:
    """Variances of one level, in the unit of the results squared; `nbar` is the effective number per scanner."""

    mean: float
    groups: int
    results: int
    nbar: float
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

    def s_r_interval(self, level: float = 0.95) -> tuple[float, float]:
        """Interval of s_r (chi square)."""
        return spread_interval(self.s_r, self.freedom_within, level)

    def s_L_interval(self, level: float = 0.95) -> tuple[float, float]:  # noqa: N802
        """Interval of s_L (Williams 1962, Biometrika 49, 278-281), exact F and chi square parts combined."""
        p, within = self.groups, self.freedom_within
        if p < 2 or within < 1 or self.variance_repeatability <= 0:
            return (float("nan"), float("nan"))
        between = self.nbar * self.variance_between + self.variance_repeatability
        ratio = between / self.variance_repeatability
        tail = (1.0 - level) / 2.0
        square = (p - 1.0) * self.variance_repeatability
        low = square * (ratio - fdtri(p - 1, within, 1.0 - tail)) / (self.nbar * chdtri(p - 1, tail))
        high = square * (ratio - fdtri(p - 1, within, tail)) / (self.nbar * chdtri(p - 1, 1.0 - tail))
        return float(np.sqrt(max(low, 0.0))), float(np.sqrt(max(high, 0.0)))


def spread_interval(s: float, freedom: float, level: float = 0.95) -> tuple[float, float]:
    """Interval of a standard deviation from `freedom` degrees of freedom (chi square)."""
    if freedom < 1:
        return (float("nan"), float("nan"))
    tail = (1.0 - level) / 2.0
    return (
        float(s * np.sqrt(freedom / chdtri(freedom, tail))),
        float(s * np.sqrt(freedom / chdtri(freedom, 1.0 - tail))),
    )


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
    total = counts.sum()
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
    """Mandel's h (between) and k (within) for each scanner of one level, and their critical values."""

    h: Floats
    k: Floats
    h_critical_5: float
    h_critical_1: float
    k_critical_5: float
    k_critical_1: float


def mandel(groups: Sequence[Floats]) -> Consistency:
    """Mandel's consistency statistics of one level; k is NaN for a scanner with one result."""
    means = np.array([np.mean(g) if len(g) else np.nan for g in groups])
    spreads = np.array([np.std(g, ddof=1) if len(g) > 1 else np.nan for g in groups])
    counts = np.array([len(g) for g in groups], dtype=np.float64)
    p = int(np.isfinite(means).sum())
    spread_of_means = float(np.nanstd(means, ddof=1)) if p > 1 else float("nan")
    h = (means - np.nanmean(means)) / spread_of_means if p > 1 and spread_of_means > 0 else np.full(len(groups), np.nan)
    there = np.isfinite(spreads)
    freedom = np.where(there, counts - 1.0, 0.0)
    pooled = np.sqrt(np.sum(freedom * np.nan_to_num(spreads) ** 2) / max(freedom.sum(), 1.0))
    k = spreads / pooled if pooled > 0 else np.full(len(groups), np.nan)
    n = float(np.mean(counts[there])) if there.any() else float("nan")
    return Consistency(
        h,
        k,
        h_critical(p, 0.05),
        h_critical(p, 0.01),
        k_critical(int(there.sum()), n, 0.05),
        k_critical(int(there.sum()), n, 0.01),
    )


def h_critical(scanners: int, alpha: float) -> float:
    """Critical value of h, two-sided at `alpha`: (p-1) t / sqrt(p (t^2 + p - 2)) with p - 2 degrees of freedom."""
    if scanners < 3:
        return float("nan")
    t = float(stdtrit(scanners - 2, 1.0 - alpha / 2.0))
    return float((scanners - 1) * t / np.sqrt(scanners * (t * t + scanners - 2)))


def k_critical(scanners: int, results: float, alpha: float) -> float:
    """Critical value of k, one-sided at `alpha`: sqrt(p F / (F + p - 1)), F with n-1 and (p-1)(n-1) degrees of freedom."""
    if scanners < 2 or not results > 1:
        return float("nan")
    share = btdtri((results - 1) / 2.0, (scanners - 1) * (results - 1) / 2.0, 1.0 - alpha)  # k^2 / p is a beta variable
    return float(np.sqrt(scanners * share))
