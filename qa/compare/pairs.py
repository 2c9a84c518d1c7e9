"""How far two scanners are apart: Bland and Altman's limits of agreement, and Lin's concordance correlation."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qa.compare.intervals import Interval, mean_interval
from qa.words import Floats

Z = 1.959963984540054


@dataclass(frozen=True, slots=True)
class Limits:
    """Bias and limits of agreement, in the unit of the differences; intervals hold 95 %; None: unknown."""

    count: int
    bias: float
    u_bias: float | None
    bias_interval: Interval | None
    spread: float | None  # standard deviation of differences between single readings
    lower: float | None
    upper: float | None
    lower_interval: Interval | None
    upper_interval: Interval | None


@dataclass(frozen=True, slots=True)
class Repeats:
    """Scatter of single readings about the mean of their subject, on one side of the comparison."""

    variance: float
    freedom: float
    inverse_count: float  # mean of 1 / (readings behind a mean)
    u_common: float = 0.0  # standard uncertainty that all means share


def limits_of_agreement(differences: Floats, first: Repeats | None = None, second: Repeats | None = None) -> Limits:
    """Bias of paired differences and the limits between which 95 % of differences of single readings lie.

    Parameters
    ----------
    differences : (n,) float64, one per subject (here: vial)
    first, second : where each difference is between means of repeated readings, how single readings scatter on
        each side; the spread is corrected from means to single readings. Absent: the readings are single.

    References
    ----------
    Bland and Altman (1986), Lancet i, 307-310 (limits, the intervals sqrt(3/n), correction for repeated readings);
    Bland and Altman (1999), Statistical Methods in Medical Research 8, 135-160, section 5.1 (its uncertainty).
    """
    d = np.asarray(differences, dtype=np.float64)
    n = d.size
    bias = float(d.mean())
    if n < 2:
        return Limits(n, bias, None, None, None, None, None, None, None)
    variance = float(d.var(ddof=1))
    freedom = n - 1.0
    sides = [side for side in (first, second) if side is not None]
    u_bias = float(np.sqrt(variance / n + sum(side.u_common**2 for side in sides)))
    added = [(1.0 - side.inverse_count) * side.variance for side in sides]
    spread = float(np.sqrt(variance + sum(added)))
    if sides:
        var_of_variance = 2.0 * variance**2 / freedom
        var_of_variance += sum(2.0 * part**2 / side.freedom for part, side in zip(added, sides, strict=True))
        u_limit = float(np.sqrt(u_bias**2 + (Z / (2.0 * spread)) ** 2 * var_of_variance)) if spread > 0 else 0.0
    else:
        u_limit = spread * float(np.sqrt(3.0 / n))
    lower, upper = bias - Z * spread, bias + Z * spread
    return Limits(
        n,
        bias,
        u_bias,
        mean_interval(bias, u_bias, freedom),
        spread,
        lower,
        upper,
        mean_interval(lower, u_limit, freedom),
        mean_interval(upper, u_limit, freedom),
    )


def concordance(x: Floats, y: Floats) -> tuple[float, Interval | None] | None:
    """Lin's concordance correlation with its 95 % interval (by the inverse hyperbolic tangent); None if undefined.

    References
    ----------
    Lin (1989), Biometrics 45, 255-268; variance with the correction of Lin (2000), Biometrics 56, 324-325.
    """
    n = x.size
    if n < 3:
        return None
    var_x, var_y = float(np.var(x)), float(np.var(y))
    covariance = float(np.mean((x - x.mean()) * (y - y.mean())))
    shift = float(x.mean() - y.mean())
    below = var_x + var_y + shift**2
    if below <= 0 or var_x <= 0 or var_y <= 0:
        return None
    ccc = 2.0 * covariance / below
    r = covariance / np.sqrt(var_x * var_y)
    u2 = shift**2 / np.sqrt(var_x * var_y)
    if abs(ccc) >= 1.0 or r == 0:
        return float(ccc), None
    c2, r2 = ccc**2, r**2
    z_variance = (
        (1.0 - r2) * c2 / ((1.0 - c2) * r2)
        + 2.0 * ccc**3 * (1.0 - ccc) * u2 / (r * (1.0 - c2) ** 2)
        - ccc**4 * u2**2 / (2.0 * r2 * (1.0 - c2) ** 2)
    ) / (n - 2.0)
    reach = Z * float(np.sqrt(max(z_variance, 0.0)))
    middle = float(np.arctanh(ccc))
    return float(ccc), (float(np.tanh(middle - reach)), float(np.tanh(middle + reach)))
