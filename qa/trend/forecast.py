"""When a slope reaches a limit, with an interval."""

from __future__ import annotations

from datetime import date, timedelta

import numpy as np

from qa.trend.change import YEAR, Change
from qa.trend.findings import Forecast

HORIZON_YEARS = 10.0


def forecast(change: Change, now_percent: float, limit_percent: float, today: date) -> Forecast:
    """The day on which the level, now at `now_percent` and going on as it does, passes the limit on its side.

    The interval comes from the 90 % interval of the rate. A level already beyond the limit crosses today.
    """
    side = float(np.sign(change.rate))
    left = limit_percent - side * now_percent
    if left <= 0:
        return Forecast(today, today, today)
    low, high = sorted(abs(r) if np.sign(r) == side else 0.0 for r in change.rate_interval() or (0.0, 0.0))
    return Forecast(_after(today, left, abs(change.rate)), _after(today, left, high), _after(today, left, low))


def _after(today: date, left: float, rate: float) -> date | None:
    years = left / rate if rate > 0 else float("inf")
    return today + timedelta(days=round(years * YEAR)) if years < HORIZON_YEARS else None
