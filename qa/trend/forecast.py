"""When a slope reaches a limit, with an interval."""

from __future__ import annotations

from datetime import date, timedelta

import numpy as np

from qa.trend.change import YEAR, Change
from qa.trend.findings import Forecast

HORIZON_YEARS = 10.0
_K = 1.645  # 90 %


def forecast(change: Change, now_percent: float, u_now: float, limit_percent: float, today: date) -> Forecast:
    """The day on which the level, now at `now_percent` and going on as it does, passes the limit on its side.

    The 90 % interval joins that of the rate with the standard uncertainty `u_now` of where the level stands. A level
    already beyond the limit crosses today.
    """
    side = float(np.sign(change.rate))
    left = limit_percent - side * now_percent
    if left <= 0:
        return Forecast(today, today, today)
    low, high = sorted(abs(r) if np.sign(r) == side else 0.0 for r in change.rate_interval() or (0.0, 0.0))
    rate = abs(change.rate)
    middle = _years(left, rate)
    from_now = _K * u_now / rate if rate > 0 else 0.0
    earliest = middle - float(np.hypot(middle - _years(left, high), from_now))
    latest = middle + float(np.hypot(_years(left, low) - middle, from_now))
    return Forecast(_day(today, middle), _day(today, max(earliest, 0.0)), _day(today, latest))


def _years(left: float, rate: float) -> float:
    return left / rate if rate > 0 else float("inf")


def _day(today: date, years: float) -> date | None:
    return today + timedelta(days=round(years * YEAR)) if years < HORIZON_YEARS else None
