"""Widths of EWMA charts with estimated baselines, at once: a Chebyshev series of what `qa.trend.arl` solves.

Solving one width takes a tenth of a second, and judging needs dozens. The series lies in a file that
``tests/bench/ewma_widths.py`` makes; a test compares it with the solved widths.
"""

from __future__ import annotations

import json
from functools import lru_cache
from pathlib import Path

import numpy as np

from qa.words import Floats

TABLE = Path(__file__).with_name("ewma_widths.json")
DOMAIN = ((float(np.log(20.0)), float(np.log(2e5))), (0.0, 0.5), (0.0, 0.25))  # ln(arl), 1 / runs, 1 / freedom


@lru_cache(maxsize=1)
def _series() -> Floats:
    return np.asarray(json.loads(TABLE.read_text(encoding="utf-8"))["series"], dtype=np.float64)


@lru_cache(maxsize=256)
def _in_freedom(arl: float, inverse_runs: float) -> Floats:
    """The series in 1 / freedom alone."""
    first, second = (_unit(value, axis) for axis, value in enumerate((np.log(arl), inverse_runs)))
    chebyshev = np.polynomial.chebyshev
    inner = chebyshev.chebval(first, _series())  # (runs terms, freedom terms)
    return np.asarray(chebyshev.chebval(second, inner))


def width_of(arl: float, runs: float, freedom: Floats) -> Floats:
    """The width L (see `qa.trend.arl.ewma_limit_estimated`) of charts with the weight of `qa.trend.budget`, to 0.4 %.

    Parameters
    ----------
    arl : runs per false signal, 20 to 200 000 (taken to the nearer end outside)
    runs : runs behind the estimated mean, at least 2 (infinite: known)
    freedom : any shape; degrees of freedom behind the estimated sigma, at least 4 (infinite: known)
    """
    inverse_runs = 0.0 if np.isinf(runs) else 1.0 / runs
    last = _unit(1.0 / np.asarray(freedom, dtype=np.float64), 2)
    return np.asarray(np.exp(np.polynomial.chebyshev.chebval(last, _in_freedom(round(arl, 1), inverse_runs))))


def _unit(value: Floats | float, axis: int) -> Floats:
    low, high = DOMAIN[axis]
    return np.asarray(np.clip(2.0 * (np.asarray(value) - low) / (high - low) - 1.0, -1.0, 1.0))
