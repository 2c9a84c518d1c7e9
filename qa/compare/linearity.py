"""Whether a scanner's values follow the references in proportion: weighted regression of vial means on references."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from qa.compare.intervals import Interval, combined_freedom, mean_interval
from qa.words import Floats

FEWEST_VIALS = 3


@dataclass(frozen=True, slots=True)
class Line:
    """``value = intercept + slope * reference``; u are standard uncertainties, intervals hold 95 %; None: unknown."""

    slope: float
    u_slope: float | None
    slope_interval: Interval | None
    intercept_ms: float
    u_intercept_ms: float | None
    intercept_interval_ms: Interval | None
    vials: int


def weighted_line(x: Floats, y: Floats, weight: Floats) -> tuple[Floats, Floats, float]:
    """Straight line by weighted least squares.

    Returns
    -------
    (intercept, slope), their covariance (2, 2) for weights that are inverse variances, and the weighted sum of
    squared residuals.

    References
    ----------
    ISO/TS 28037:2010, Determination and use of straight-line calibration functions, clause 6.
    """
    middle = float(weight @ x / weight.sum())
    from_middle = x - middle
    power = float(weight @ from_middle**2)
    slope = float((weight * from_middle) @ y) / power
    mean = float(weight @ y / weight.sum())
    var_slope, var_mean = 1.0 / power, 1.0 / float(weight.sum())
    covariance = np.array([[var_mean + middle**2 * var_slope, -middle * var_slope], [-middle * var_slope, var_slope]])
    rest = y - mean - slope * from_middle
    return np.array([mean - slope * middle, slope]), covariance, float(weight @ rest**2)


def line(value_ms: Floats, reference_ms: Floats, u_reference_ms: Floats) -> Line | None:
    """The line of one scanner, from all its runs.

    Vials are weighted by the scatter of their mean and the uncertainty of their reference together. The
    uncertainty of the line has two parts: the vials' scatter about it (never less than the weights say), and what
    all vials of a run share, seen as the scatter of the runs' own lines.

    Parameters
    ----------
    value_ms : (runs, vials) float64 at the reference temperature, NaN where there is none
    reference_ms, u_reference_ms : (vials,) float64; an unknown u is NaN

    Returns
    -------
    None with fewer than three vials that have a reference and a value.
    """
    count = np.isfinite(value_ms).sum(axis=0)
    usable = (count > 0) & np.isfinite(reference_ms)
    if usable.sum() < FEWEST_VIALS or np.unique(reference_ms[usable]).size < 2:
        return None
    y, x, count = value_ms[:, usable], reference_ms[usable], count[usable]
    mean = np.nansum(y, axis=0) / count
    square = np.nansum((y - mean) ** 2, axis=0)
    freedom = count - 1.0
    relative = np.sqrt(float(np.sum(square / mean**2)) / freedom.sum()) if freedom.sum() > 0 else 0.0
    u_reference = np.nan_to_num(u_reference_ms[usable])
    variance = (relative * mean) ** 2 / count + u_reference**2
    stated = bool(np.all(variance > 0))
    weight = 1.0 / (variance if stated else mean**2)
    found, covariance, chi2 = weighted_line(x, mean, weight)
    left = float(usable.sum() - 2)
    stretch = max(chi2 / left, 1.0) if stated else chi2 / left
    shared = _shared(y, mean, x, weight)
    u: list[float | None] = [None, None]
    interval: list[Interval | None] = [None, None]
    for place in (0, 1):
        own = float(covariance[place, place]) * stretch
        if shared is not None:
            total = own + float(shared[place])
            u[place] = float(np.sqrt(total))
            runs = float(np.isfinite(y).any(axis=1).sum())
            free = combined_freedom(((own, left), (float(shared[place]), runs - 1.0)))
            interval[place] = mean_interval(float(found[place]), float(np.sqrt(total)), free)
    return Line(float(found[1]), u[1], interval[1], float(found[0]), u[0], interval[0], int(usable.sum()))


def _shared(y: Floats, mean: Floats, x: Floats, weight: Floats) -> Floats | None:
    """Variance of the mean (intercept, slope) as the runs' own lines scatter; None with fewer than two whole runs."""
    here = np.isfinite(y)
    whole = here.sum(axis=1) >= FEWEST_VIALS
    if whole.sum() < 2:
        return None
    w = np.where(here, weight, 0.0)[whole]
    # around the vial means, so that a missing vial does not tilt the line by its own deviation
    apart = np.where(here, y - mean, 0.0)[whole]
    total = w.sum(axis=1)
    middle = (w @ x) / total
    from_middle = x - middle[:, None]
    power = (w * from_middle**2).sum(axis=1)
    slope = (w * from_middle * apart).sum(axis=1) / np.where(power > 0, power, np.inf)
    lines = np.stack([(w * apart).sum(axis=1) / total - slope * middle, slope], axis=1)
    return np.asarray(np.var(lines, axis=0, ddof=1) / len(lines), dtype=np.float64)
