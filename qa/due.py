"""What the schedule asks for: which scanner and phantom are due, overdue or done, on a given day."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date, timedelta
from enum import StrEnum
from typing import TYPE_CHECKING

from qa.site import Site

if TYPE_CHECKING:
    import pandas as pd


class DueState(StrEnum):
    """How one line of the schedule stands."""

    DONE = "done"  # the next run is not due yet
    DUE = "due"  # due, within the days of grace
    OVERDUE = "overdue"
    NEVER = "never run"


@dataclass(frozen=True, slots=True)
class DueRow:
    """One line of the schedule on one day."""

    scanner: str
    phantom: str
    recipe: str
    every_days: int
    last: date | None
    next_due: date | None  # None where there has been no run yet
    state: DueState
    days: int  # until the next run is due; negative: days past due


def due(site: Site, last_runs: Mapping[tuple[str, str], date], today: date) -> tuple[DueRow, ...]:
    """The schedule on `today`, most overdue first.

    Parameters
    ----------
    last_runs : the day (in the site's time zone) of the latest run of each scanner and phantom; void runs count,
        since somebody did scan
    today : in the site's time zone
    """
    rows = []
    for line in site.schedules:
        last = last_runs.get((line.scanner, line.phantom))
        if last is None:
            row = DueRow(line.scanner, line.phantom, line.recipe.name, line.every_days, None, None, DueState.NEVER, 0)
        else:
            following = last + timedelta(days=line.every_days)
            days = (following - today).days
            if days > 0:
                state = DueState.DONE
            else:
                state = DueState.DUE if -days <= line.grace_days else DueState.OVERDUE
            row = DueRow(line.scanner, line.phantom, line.recipe.name, line.every_days, last, following, state, days)
        rows.append(row)
    order = [DueState.OVERDUE, DueState.NEVER, DueState.DUE, DueState.DONE]
    return tuple(sorted(rows, key=lambda row: (order.index(row.state), row.days)))


def last_run_days(site: Site, runs: pd.DataFrame) -> dict[tuple[str, str], date]:
    """The day of the latest run of each scanner and phantom, from the tidy frame of runs."""
    newest = runs.sort_values("acquired").groupby(["scanner", "phantom"]).tail(1)
    return {
        (str(row["scanner"]), str(row["phantom"])): row["acquired"].astimezone(site.timezone).date()
        for row in newest.to_dict("records")
    }
