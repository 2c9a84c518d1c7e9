"""Intervals of standard deviations and of sums of variances."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy.special import chdtri, stdtrit

LEVEL = 0.95
Interval = tuple[float, float]


def spread_interval(s: float, freedom: float, level: float = LEVEL) -> Interval | None:
    """Interval of a standard deviation from `freedom` degrees of freedom (chi square); None below one degree."""
    if not freedom >= 1 or not np.isfinite(s):
        return None
    tail = (1.0 - level) / 2.0
    return (
        float(s * np.sqrt(freedom / chdtri(freedom, tail))),
        float(s * np.sqrt(freedom / chdtri(freedom, 1.0 - tail))),
    )


def sum_interval(parts: Sequence[tuple[float, float]], level: float = LEVEL) -> Interval | None:
    """Interval of the square root of a sum of variances, by the modified large-sample method.

    Parameters
    ----------
    parts : (variance, degrees of freedom) of independent mean squares, each already with its coefficient (> 0)

    Returns
    -------
    None where a part has less than one degree of freedom.

    References
    ----------
    Graybill and Wang (1980), Journal of the American Statistical Association 75, 869-873.
    """
    variance = np.array([part for part, _ in parts], dtype=np.float64)
    freedom = np.array([count for _, count in parts], dtype=np.float64)
    if not variance.size or not np.all(freedom >= 1) or not np.all(np.isfinite(variance)):
        return None
    tail = (1.0 - level) / 2.0
    down = 1.0 - freedom / chdtri(freedom, tail)
    up = freedom / chdtri(freedom, 1.0 - tail) - 1.0
    total = float(variance.sum())
    low = total - float(np.sqrt(np.sum((down * variance) ** 2)))
    high = total + float(np.sqrt(np.sum((up * variance) ** 2)))
    return float(np.sqrt(max(low, 0.0))), float(np.sqrt(high))


def mean_interval(mean: float, u: float, freedom: float, level: float = LEVEL) -> Interval | None:
    """Interval of a mean with standard uncertainty `u` (Student's t); None below one degree of freedom."""
    if not freedom >= 1 or not np.isfinite(u) or not np.isfinite(mean):
        return None
    reach = float(stdtrit(freedom, 0.5 + level / 2.0)) * u
    return mean - reach, mean + reach


def combined_freedom(parts: Sequence[tuple[float, float]]) -> float:
    """Effective degrees of freedom of a sum of variances (variance, degrees of freedom); 0 where there is none.

    References
    ----------
    Welch (1947), Biometrika 34, 28-35; Satterthwaite (1946), Biometrics Bulletin 2, 110-114.
    """
    total = sum(part for part, _ in parts)
    below = sum(part**2 / count for part, count in parts if count > 0 and np.isfinite(count))
    if any(count <= 0 and part > 0 for part, count in parts):
        return 0.0
    return float(total**2 / below) if below > 0 else float("inf")
