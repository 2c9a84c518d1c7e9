"""Makes a finding of a change: how grave it is, whether it still stands, when it was first seen."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from typing import TYPE_CHECKING

import numpy as np

from qa.site.limits import LimitBlock, in_force
from qa.trend.change import Change, find_change
from qa.trend.findings import Cause, Finding, FindingState, day_of, key
from qa.trend.forecast import forecast
from qa.trend.logbook import near
from qa.trend.pooled import Course
from qa.trend.sentences import quantity_name
from qa.trend.telling import events, sentence, shape
from qa.words import Floats, Quantity, Verdict

if TYPE_CHECKING:
    import pandas as pd


@dataclass(frozen=True, slots=True, eq=False)
class Raising:
    """What every finding is raised by: the log, the limits of today, and the chances allowed to each search."""

    log: pd.DataFrame | None
    limits: tuple[LimitBlock, ...]
    today: date
    schedule_days: float
    level_alpha: float
    vial_alpha: float

    def limits_of(self, course: Course, labels: Sequence[str]) -> tuple[float, float]:
        """Median watch and act limits against the baseline today; (3, inf) where there is none."""
        watch, act = [], []
        for label in labels:
            held = in_force(self.limits, self.today, Quantity(course.quantity), label, course.scanner)
            block = held.get("baseline") or held.get("reference")
            if block is not None:
                watch.append(block.watch_percent)
                act.append(block.act_percent)
        return (float(np.median(watch)), float(np.median(act))) if watch else (3.0, float("inf"))

    def finding(
        self,
        change: Change,
        where: Sequence[Course],
        labels: tuple[str, ...],
        cause: Cause,
        reasons: tuple[str, ...],
        now_at: tuple[float, float],
        subject: str,
    ) -> Finding:
        """The finding of a change in the courses `where`, whose level is `now_at` (percent, and its u)."""
        course, (now, u_now) = where[0], now_at
        scanners = tuple(sorted({c.scanner for c in where}))
        phantoms = tuple(sorted({c.phantom for c in where}))
        watch, act = self.limits_of(course, labels)
        state = self._state(change, where, now)
        coming = None
        if change.kind == "slope" and state == "open":
            coming = forecast(change, now, u_now, act if np.isfinite(act) else watch, self.today)
        verdict = Verdict.STEADY
        if state == "open":
            certain = coming is not None and coming.latest is not None and coming.latest <= self._next_run(where)
            verdict = Verdict.ACT if abs(now) > act or certain else Verdict.WATCH
        low, high = change.interval()
        onset = day_of(change.onset)
        interval = (day_of(change.earliest), day_of(change.latest))
        entries = near(self.log, scanners, phantoms, interval)
        names = [q for s, q, _ in course.block.scans]
        name = quantity_name(course.quantity, course.scan, names.count(course.quantity) > 1)
        return Finding(
            key(
                scanners if cause not in ("vial", "phantom") else "",
                phantoms if cause in ("vial", "phantom") else "",
                labels if len(labels) == 1 else "all",
                course.scan,
                course.segment.first,
            ),
            scanners[0] if len(scanners) == 1 else None,
            phantoms[0] if len(phantoms) == 1 else None,
            scanners,
            phantoms,
            labels,
            course.quantity,
            course.scan,
            change.kind,
            verdict,
            onset,
            interval,
            change.size,
            (low, high),
            change.rate if change.kind == "slope" else None,
            change.rate_interval(),
            cause,
            (*reasons, *shape(change), *events(entries)),
            entries,
            coming,
            self._first_raised(change, where, labels),
            state,
            sentence(name, subject, scanners, change, onset, interval),
        )

    def _state(self, change: Change, where: Sequence[Course], now: float) -> FindingState:
        if not any(c.current for c in where):
            return "past"
        returned = change.kind == "step" and abs(now) < 0.25 * abs(change.size)
        return "returned" if returned else "open"

    def _next_run(self, where: Sequence[Course]) -> date:
        return day_of(max(float(c.days[-1]) for c in where) + self.schedule_days)

    def _first_raised(self, change: Change, where: Sequence[Course], labels: tuple[str, ...]) -> date:
        """The first run with which the same search, on what was known then, would have raised it."""
        course = where[0]
        single = len(labels) == 1
        series = course.own_of(labels[0]) if single else course.level
        alpha = self.vial_alpha if single else self.level_alpha
        here = np.isfinite(series) & ~(course.wild_run if not single else np.zeros(len(series), bool))
        t, y = course.days[here], series[here]
        sd = np.full(t.size, course.sd[course.labels.index(labels[0])]) if single else course.level_sd[here]
        for end in range(int(np.searchsorted(t, change.onset)) + 2, t.size + 1):
            seen = find_change(t[:end], y[:end], sd[:end])
            if seen is not None and seen.chance <= alpha and np.sign(seen.size) == np.sign(change.size):
                return day_of(float(t[end - 1]))
        return day_of(float(course.days[-1]))


def stands(series: Sequence[tuple[Floats, Floats]], change: Change) -> tuple[float, float]:
    """Where series (days, values) stand at their last run, and the standard uncertainty.

    From the median of the last five values, carried along a slope to the last.
    """
    last, variance = [], []
    for days, values in series:
        there = np.isfinite(values)
        along = change.at(days[there]) if change.kind == "slope" else np.zeros(int(there.sum()))
        here = values[there] - along
        if here.size > 2:
            scatter = 1.4826 * float(np.median(np.abs(np.diff(here)))) / np.sqrt(2.0)
            last.append(float(np.median(here[-5:])) + float(along[-1]))
            variance.append(1.57 * scatter**2 / min(here.size, 5))
    if not last:
        return change.size, change.u_size
    return float(np.mean(last)), float(np.sqrt(np.sum(variance))) / len(last)
